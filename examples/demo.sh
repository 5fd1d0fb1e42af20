#!/bin/sh
# Installs what is missing (Debian 12), builds flatgain and tunes a published real plant and a made-up one.
set -e
cd "$(dirname "$0")/.."
. tests/packages.sh
# shellcheck disable=SC2086
need $build_packages
mkdir -p build
make -s all >build/demo-build.log 2>&1 || {
    cat build/demo-build.log >&2
    exit 1
}
say() {
    printf '\n$ %s\n\n' "$*"
    "$@"
}
echo "A published plant: the F-16 lateral regulator (B. L. Stevens, F. L. Lewis, Aircraft Control and
Simulation, Example 5.3-1): 7 states, 2 actuators, 4 measurements, one table of 8 gains."
say build/flatgain tune examples/lateral-regulator.yaml
echo
echo "The gain printed in the book, judged on the same plant:"
say build/flatgain judge examples/lateral-regulator.yaml --gain examples/lateral-regulator-book.csv --quiet || true
echo
echo "A made-up plant with sensor filters, fixed gains and bounds: a three-zone dryer."
say build/flatgain tune examples/dryer.yaml
