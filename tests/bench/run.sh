#!/bin/sh
# make bench: every speed figure, as ratios in one run. Quiet machine please. `quick` leaves out n = 800.
cd "$(dirname "$0")/../.." || exit 1
bench=${BUILD:-build}/bench
export OPENBLAS_NUM_THREADS=1
work=$(mktemp -d)
trap 'rm -rf "$work"' EXIT

echo "== (a) cost with gradient against its floor"
"$bench/bench_cost"
echo
echo "== (b) against a SciPy script"
/usr/bin/python3 tests/bench/against_script.py "$bench/bench_tune" "${BUILD:-build}/flatgain"
echo
echo "== (c) large orders, the whole of tune, two threads"
if [ "${1:-}" = quick ]; then
    "$bench/bench_large" 50 100 200
else
    "$bench/bench_large" 100 200 400 800
fi
echo
echo "== (d) two threads against one"
for case in HE4 NN6 f16_lateral_regulator; do
    /usr/bin/python3 tests/cli/case_to_problem.py "$case" >"$work/$case.yaml"
done
"$bench/bench_threads" "$work"/*.yaml
"$bench/bench_threads" random:20 random:50 random:100
echo
echo "== (e) cost evaluations per local search"
"$bench/bench_evaluations" 2>/dev/null
echo
echo "== local search: Newton, NLopt, both"
"$bench/bench_local"
