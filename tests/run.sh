#!/bin/sh
# Installs what is missing (Debian 12), builds, runs every test; ends with `N passed, N failed`.
# sh tests/run.sh [quick]   quick: without sanitizers, fuzzing and the installed copy
cd "$(dirname "$0")/.." || exit 1
. tests/packages.sh
# shellcheck disable=SC2086
need $build_packages $test_packages || exit 1
jobs=$(nproc 2>/dev/null || echo 1)
export OPENBLAS_NUM_THREADS=1 # a BLAS that starts threads of its own slows small matrices
logs=build/test-logs
rm -rf "$logs"
mkdir -p "$logs"

passed=0
failed=0
count() { # NAME PASSED FAILED
    passed=$((passed + $2))
    failed=$((failed + $3))
    printf '%-28s %5d passed %3d failed\n' "$1" "$2" "$3"
    [ "$3" = 0 ] || sed -n '1,60p' "$logs/$1.log"
}

# Runs a step whose log ends with `N passed, N failed`, or that counts as one test when it has no such line.
step() { # NAME COMMAND...
    name=$1
    shift
    "$@" >"$logs/$name.log" 2>&1
    status=$?
    line=$(grep -E '^[0-9]+ passed, [0-9]+ failed' "$logs/$name.log" | tail -n 1)
    if [ -n "$line" ]; then
        p=${line%% passed*}
        f=${line#*, }
        f=${f%% failed*}
        [ "$status" != 0 ] && [ "$f" = 0 ] && f=1
    elif [ "$status" = 0 ]; then
        p=1 f=0
    else
        p=0 f=1
    fi
    count "$name" "$p" "$f"
}

make -s -j "$jobs" all lib tests faults >"$logs/build.log" 2>&1 || {
    tail -n 40 "$logs/build.log"
    echo "The build failed."
    echo "0 passed, 1 failed"
    exit 1
}

# Check programs, several at a time; each prints `NN%: Checks: A, Failures: B, Errors: C`.
programs=$(for source in tests/unit/test_*.c tests/faults/test_*.c; do
    [ -e "$source" ] && basename "$source" .c
done)
echo "$programs" | xargs -P "$jobs" -I{} sh -c \
    "p=build/tests/{}; [ -x \$p ] || p=build/faults/{}; \$p >$logs/{}.log 2>&1; echo \$? >$logs/{}.status"
for name in $programs; do
    line=$(grep -E '^[0-9]+%: Checks:' "$logs/$name.log" | tail -n 1)
    checks=$(echo "$line" | sed -n 's/.*Checks: \([0-9]*\).*/\1/p')
    bad=$(echo "$line" | sed -n 's/.*Failures: \([0-9]*\), Errors: \([0-9]*\).*/\1+\2/p')
    bad=$((${bad:-1}))
    [ "$(cat "$logs/$name.status")" = 0 ] || [ "$bad" != 0 ] || bad=1
    count "$name" $((${checks:-1} - bad)) "$bad"
done

step command-line /usr/bin/python3 tests/cli/run.py build/flatgain
[ -e tests/oracle/end_to_end.py ] && step scipy-end-to-end /usr/bin/python3 tests/oracle/end_to_end.py build/flatgain
[ -e tests/faults/check_includes.sh ] && step include-direction sh tests/faults/check_includes.sh
step readme-example /usr/bin/python3 tests/check_readme.py build/flatgain
step layout sh tests/check_layout.sh
if [ "${1:-}" != quick ]; then
    step installed-copy sh tests/faults/test_install.sh
    step sanitizers-and-fuzz sh tests/run_sanitizers.sh
fi
echo "$passed passed, $failed failed"
[ "$failed" = 0 ]
