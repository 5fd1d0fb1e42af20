#!/bin/sh
# Top level as agreed, code formatted, no file past its size, README commands present.
failed=0
complain() {
    echo "$*"
    failed=$((failed + 1))
}
for path in *; do
    case $path in
    README.md | DEVELOPERS.md | LICENSE | Makefile | src | include | tests | examples | docs | build) ;;
    *) complain "not in the agreed top level: $path" ;;
    esac
done
for path in README.md DEVELOPERS.md LICENSE Makefile src include tests examples docs; do
    [ -e "$path" ] || complain "missing: $path"
done
for command in 'sh examples/demo.sh' 'sh tests/run.sh'; do
    grep -q "$command" README.md || complain "README.md does not show: $command"
done
for file in src/*/*.c src/*/*.h; do
    lines=$(wc -l <"$file")
    [ "$lines" -le 600 ] || complain "$file has $lines lines: what is the second idea in it?"
done
unformatted=$(clang-format --dry-run src/*/*.[ch] include/*.h tests/*/*.[ch] examples/*.c 2>&1 |
    sed -n 's/^\([^:]*\):.*warning.*/\1/p' | sort -u)
for file in $unformatted; do
    complain "not formatted (make format): $file"
done
[ "$failed" = 0 ] && echo "1 passed, 0 failed" || echo "0 passed, 1 failed"
[ "$failed" = 0 ]
