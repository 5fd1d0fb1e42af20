#!/bin/sh
# The library under everything that watches it: warnings as errors from two compilers, address and undefined
# behaviour sanitizers, thread sanitizer, valgrind, fuzzing. Ends with `N passed, N failed`.
#     sh tests/run_sanitizers.sh
# FUZZ_SECONDS=20   for each fuzz target        BUILD=build    variants go to $BUILD/asan and so on
# ALL=1             also the test programs that are left out below
cd "$(dirname "$0")/.." || exit 1
BUILD=${BUILD:-build}
FUZZ_SECONDS=${FUZZ_SECONDS:-20}
jobs=$(nproc 2>/dev/null || echo 1)
logs=$BUILD/sanitizer-logs
passed=0
failed=0
mkdir -p "$logs"

# OpenBLAS's threads are not built with the thread sanitizer, which then sees races that are none; and a pool
# of its own makes small matrices slow.
export OPENBLAS_NUM_THREADS=1
# SLICOT's SB03OU (a reference of the tests, not part of the library) lets dlacpy copy overlapping columns.
echo 'interceptor_via_fun:sb03ou_' >"$logs/asan.supp"
export ASAN_OPTIONS="suppressions=$logs/asan.supp:detect_stack_use_after_return=1:strict_string_checks=1"
export UBSAN_OPTIONS=print_stacktrace=1
export TSAN_OPTIONS=halt_on_error=1:second_deadlock_stack=1

tell() { # NAME STATUS LOG
    if [ "$2" = 0 ]; then
        echo "PASS $1"
        passed=$((passed + 1))
    else
        echo "FAIL $1"
        tail -n 60 "$3" | sed 's/^/     /'
        failed=$((failed + 1))
    fi
}
try() { # NAME COMMAND...
    what=$1
    shift
    log=$logs/$(echo "$what" | tr -c 'a-zA-Z0-9_\n' '-').log
    "$@" >"$log" 2>&1
    tell "$what" $? "$log"
}
build() { # VARIABLE=VALUE... TARGET...
    make -s -j "$jobs" "$@"
}
# A result that misses a requirement exits with 1 (docs/exit-status.md): not an error here.
answers() { # COMMAND...
    "$@"
    [ $? -le 1 ]
}

# ---- warnings ----------------------------------------------------------------------------------------------
for compiler in gcc clang; do
    try "no warning from $compiler" build CC=$compiler BUILD="$BUILD/werror-$compiler" WERROR=-Werror all tests faults
done

# ---- addresses and undefined behaviour ---------------------------------------------------------------------
# Every piece of an arena is an allocation of its own, so that the sanitizer sees its end.
asan=$BUILD/asan
try "build with address and undefined-behaviour sanitizers" \
    build CC=gcc BUILD="$asan" SANITIZE=address,undefined OPT=-O1 CFLAGS=-DFG_ARENA_BLOCK=1 all tests faults
programs=
for source in tests/unit/test_*.c tests/faults/test_*.c; do
    name=$(basename "$source" .c)
    case $name in
    # thousands of random plants through the code that test_cost, test_published and test_open_data run, too:
    # a minute more for nothing new
    test_laws | test_laws_gain) [ -n "${ALL:-}" ] || { echo "SKIP addresses: $name (slow; ALL=1 runs it)" && continue; } ;;
    esac
    programs="$programs $name"
done
# shellcheck disable=SC2016
printf '%s\n' $programs | xargs -P "$jobs" -I{} sh -c \
    'p=$1/tests/$3; [ -x "$p" ] || p=$1/faults/$3; CK_TIMEOUT_MULTIPLIER=5 "$p" >"$2/asan-$3.log" 2>&1; echo $? >"$2/asan-$3.status"' \
    sh "$asan" "$logs" {}
for name in $programs; do
    tell "addresses: $name" "$(cat "$logs/asan-$name.status")" "$logs/asan-$name.log"
done
try "addresses: tune, 2 threads" answers "$asan/flatgain" tune --threads 2 examples/dryer.yaml
try "addresses: inspect, JSON" answers "$asan/flatgain" inspect --json examples/dryer.yaml
try "addresses: judge" answers "$asan/flatgain" judge --gain today --verbose tests/faults/data/tanks.yaml

# ---- threads -----------------------------------------------------------------------------------------------
tsan=$BUILD/tsan
try "build with the thread sanitizer" build CC=gcc BUILD="$tsan" SANITIZE=thread OPT=-O1 all "$tsan/faults/test_threads"
try "threads: test_threads" env CK_FORK=no "$tsan/faults/test_threads"
try "threads: tune, 2 threads" answers "$tsan/flatgain" tune --threads 2 examples/dryer.yaml
try "threads: tune, 2 threads, restricted" answers "$tsan/flatgain" tune --threads 2 tests/faults/data/tanks.yaml

# ---- memory that was never set: valgrind, on an ordinary build ----------------------------------------------
memory() {
    valgrind -q --error-exitcode=99 --leak-check=full --errors-for-leak-kinds=definite,indirect "$@"
    [ $? -le 1 ]
}
plain=$BUILD/valgrind
try "build for valgrind" build CC=gcc BUILD="$plain" OPT=-O1 all "$plain/tests/test_lyapunov"
try "valgrind: judge, continuous with lags" memory "$plain/flatgain" judge --gain today tests/faults/data/tanks.yaml
try "valgrind: judge, JSON" memory "$plain/flatgain" judge --json --gain tests/cli/data/stable.csv tests/cli/data/oscillator.yaml
try "valgrind: tune, discrete" memory "$plain/flatgain" tune --threads 1 --starts 8 tests/cli/data/discrete.yaml
try "valgrind: test_lyapunov" env CK_FORK=no valgrind -q --error-exitcode=99 "$plain/tests/test_lyapunov"

# ---- fuzzing of the readers ----------------------------------------------------------------------------------
fuzz=$BUILD/fuzz
mkdir -p "$fuzz"
# shellcheck disable=SC2046
build_fuzz() { # TARGET
    clang -g -O1 -std=c11 -D_GNU_SOURCE -DFG_ARENA_BLOCK=1 -fsanitize=fuzzer,address,undefined \
        -fno-sanitize-recover=all -Iinclude -Isrc "tests/fuzz/fuzz_$1.c" src/problem/*.c src/base/*.c src/linalg/matrix.c \
        $(pkg-config --cflags --libs lapack blas yaml-0.1) -lm -lpthread -o "$fuzz/fuzz_$1"
}
run_fuzz() { # TARGET: the corpus as it is, then new inputs
    found=$fuzz/found-$1
    mkdir -p "$found"
    "$fuzz/fuzz_$1" -runs=0 "tests/fuzz/corpus/$1" &&
        "$fuzz/fuzz_$1" -max_total_time="$FUZZ_SECONDS" -max_len=1500 -timeout=10 -rss_limit_mb=2000 \
            -artifact_prefix="$fuzz/" "$found" "tests/fuzz/corpus/$1"
}
for target in problem gain; do
    try "build fuzz_$target" build_fuzz $target
done
run_fuzz problem >"$logs/fuzz-problem.log" 2>&1 &
first=$!
run_fuzz gain >"$logs/fuzz-gain.log" 2>&1
second=$?
wait $first
tell "fuzz_problem, $FUZZ_SECONDS s" $? "$logs/fuzz-problem.log"
tell "fuzz_gain, $FUZZ_SECONDS s" $second "$logs/fuzz-gain.log"

echo "$passed passed, $failed failed"
[ "$failed" = 0 ]
