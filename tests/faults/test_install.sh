#!/bin/sh
# Installs a copy, builds the smallest example against it as docs/library.md says, shared and static, and runs it.
# Checks what the libraries export, that the header is C99, C11 and C++, and that uninstalling leaves nothing.
# sh tests/faults/test_install.sh      BUILD=build: where make builds
cd "$(dirname "$0")/../.." || exit 1
BUILD=${BUILD:-build}
CC=${CC:-cc}
passed=0
failed=0
place=$(mktemp -d) || exit 1
trap 'rm -rf "$place"' EXIT
log=$place/log

# One test: the command succeeds; its output is told when it does not.
try() { # NAME COMMAND...
    what=$1
    shift
    if "$@" >"$log" 2>&1; then
        echo "PASS $what"
        passed=$((passed + 1))
    else
        echo "FAIL $what"
        sed 's/^/     /' "$log" | tail -n 20
        failed=$((failed + 1))
    fi
}
prints() { # TEXT COMMAND...: prints exactly that
    text=$1
    shift
    output=$("$@" 2>&1) || { echo "$output"; return 1; }
    [ "$output" = "$text" ] || { echo "printed: $output"; echo "expected: $text"; return 1; }
}
nothing() { # COMMAND...: prints nothing (its status does not matter)
    output=$("$@")
    [ -z "$output" ] || { echo "$output"; return 1; }
}

prefix=$place/usr
try "make install" make -s BUILD="$BUILD" install PREFIX="$prefix"
try "make install, staged" make -s BUILD="$BUILD" install DESTDIR="$place/stage" PREFIX=/opt/flatgain
for file in bin/flatgain include/flatgain.h lib/libflatgain.a lib/libflatgain.so lib/libflatgain.so.0 lib/pkgconfig/flatgain.pc; do
    try "$file is there" test -s "$prefix/$file"
    try "$file is there, staged" test -s "$place/stage/opt/flatgain/$file"
done
try "the staged copy knows its final place only" nothing grep -rl "$place" "$place/stage/opt/flatgain/lib/pkgconfig"

export PKG_CONFIG_PATH="$prefix/lib/pkgconfig"
version=$(sed -n 's/^#define FLATGAIN_VERSION "\(.*\)"/\1/p' include/flatgain.h)
try "pkg-config knows the version" prints "$version" pkg-config --modversion flatgain
try "the installed command runs" prints "flatgain $version" "$prefix/bin/flatgain" --version
try "shared libraries need no others' development packages" nothing sh -c 'pkg-config --libs flatgain | grep -E "nlopt|blas|yaml|cjson"'

# The example as docs/library.md builds it. SciPy's minimum of the same cost: K 10.2375, J 0.168318, 0.7258 %.
expected=$(sed -n '/^```text/,/^```$/p' docs/library.md | sed '1d;$d')
shared() {
    # shellcheck disable=SC2046
    "$CC" -Wall -Wextra -Werror "$1" examples/smallest.c -o "$2" $(pkg-config --cflags --libs flatgain) -Wl,-rpath,"$prefix/lib"
}
static() {
    # shellcheck disable=SC2046
    "$CC" -Wall -Wextra -Werror "$1" examples/smallest.c -o "$2" $(pkg-config --cflags flatgain) \
        $(pkg-config --static --libs flatgain | sed 's/-lflatgain/-l:libflatgain.a/')
}
try "docs/library.md shows what the example prints" test -n "$expected"
try "the example, shared" shared -std=c99 "$place/shared"
try "the example, shared, runs" prints "$expected" "$place/shared"
try "the example, static" static -std=c11 "$place/static"
try "the example, static, runs" prints "$expected" "$place/static"
needed() { objdump -p "$1" | grep -q 'NEEDED.*libflatgain.so.0'; }
try "the shared one needs libflatgain.so.0" needed "$place/shared"
not() { ! "$@"; }
try "the static one does not" not needed "$place/static"
try "another user's program runs without our build folder" env -i "$place/shared"

# The header alone, strict, and with a C++ compiler.
echo '#include <flatgain.h>
int main(void) { return flatgain_version()[0] == 0; }' >"$place/header.c"
cp "$place/header.c" "$place/header.cc"
strict() {
    # shellcheck disable=SC2046
    "$@" -Wall -Wextra -pedantic -pedantic-errors -Werror $(pkg-config --cflags flatgain) -c -o "$place/header.o"
}
try "the header is C99" strict "$CC" -std=c99 "$place/header.c"
try "the header is C11" strict "$CC" -std=c11 -Wstrict-prototypes "$place/header.c"
try "the header is C++98" strict "${CXX:-c++}" -std=c++98 -Wno-long-long -Wno-variadic-macros "$place/header.cc"
try "the header is C++17" strict "${CXX:-c++}" -std=c++17 "$place/header.cc"
links_cxx() {
    # shellcheck disable=SC2046
    "${CXX:-c++}" "$place/header.cc" -o "$place/cxx" $(pkg-config --cflags --libs flatgain) -Wl,-rpath,"$prefix/lib" && "$place/cxx"
}
try "a C++ program links and runs" links_cxx

# Names: the shared library gives away flatgain_... and nothing else; the archive claims no other names.
exported() { nm -D --defined-only "$prefix/lib/libflatgain.so.0" | awk '{print $NF}' | sort; }
declared() { grep -oE '\bflatgain_[a-z_]+ *\(' include/flatgain.h | tr -d ' (' | sort -u; }
same_names() {
    exported >"$place/exported"
    declared >"$place/declared"
    test -s "$place/declared" && diff "$place/declared" "$place/exported"
}
try "exports exactly what the header declares" same_names
archive() { nm -g --defined-only "$prefix/lib/libflatgain.a" | awk 'NF == 3 {print $3}'; }
foreign() { archive | grep -vE '^(flatgain|fg)_'; }
try "the archive defines flatgain_... and fg_... only" nothing foreign
some() { [ "$(archive | wc -l)" -gt 100 ]; }
try "... and these are found" some

# Silence, as the linker sees it: no printing, exit, signals, locale, environment; no writable variables.
banned='^(printf|fprintf|vprintf|vfprintf|puts|fputs|putchar|fputc|putc|fwrite|perror|write|stdout|stderr|exit|_exit|abort|atexit|signal|sigaction|raise|kill|setlocale|getenv|setenv|putenv|__printf_chk|__fprintf_chk|__assert_fail)$'
called() { nm -u "$prefix/lib/libflatgain.a" | awk 'NF == 2 {print $2}' | grep -E "$banned"; }
try "the library calls nothing that prints, ends, or changes the process" nothing called
variables() { objdump -t "$prefix/lib/libflatgain.a" | awk 'NF >= 5 && $(NF-2) ~ /^\.(data|bss|tdata|tbss)(\.|$)/ && $(NF-2) !~ /rel\.ro/ && $(NF-1) !~ /^0+$/'; }
try "the library has no writable global variables" nothing variables

try "make uninstall" make -s BUILD="$BUILD" uninstall PREFIX="$prefix"
try "... leaves no file" nothing find "$prefix" ! -type d

echo "$passed passed, $failed failed"
[ "$failed" = 0 ]
