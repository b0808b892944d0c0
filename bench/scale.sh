#!/bin/sh
# The comparison of the scale family, whole: builds SUNDIALS with optimisation
# (once, into the cache), runs the comparison at 10 to 10,000 inverters and
# leaves raw data and plots. Takes about half an hour.
#
#     bench/scale.sh [DIR [SIZES]]      results go to DIR (default: out/scale)
#
# SIZES are numbers of inverters with commas between them.
set -eu
cd "$(dirname "$0")/.."
out=${1:-out/scale}
mkdir -p "$out"
out=$(cd "$out" && pwd)
lib=${XDG_CACHE_HOME:-$HOME/.cache}/islet/sundials-O3
bench/sundials/build-optimised.sh "$lib"
LD_LIBRARY_PATH=$lib/lib go test -tags sundials ./bench -count 1 -timeout 0 -v -run 'Scale$|Costs$' \
    -args -full ${2:+-sizes "$2"} -csv "$out/scale.csv" -plots "$out" | tee "$out/scale.txt"
go test ./bench -run - -bench 'IndependentRuns|OperatingPoint|Allocations|CaseLoading' -benchtime 5x | tee -a "$out/scale.txt"
