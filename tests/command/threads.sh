#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The same bits for 1, 2 and 7 workers, for either solver, in either precision, with all of it left to the program and
# with little of it; and the same bits when a run is repeated.
. "$(dirname "$0")/library"

"$FESCUE" sow -q --rows 200 --columns 120 --rank 3 --seen 0.3 --offset-scale 0.5 --holes runs -o sown
gzip -dc "$root/datasets-synthetic/cider-panel/table.csv.gz" >cider.csv

# The record but for what may differ: when it was, how long it took, how many workers there were.
record_alike() {
    "$PYTHON" -c '
import json, sys
a, b = (json.load(open(path)) for path in sys.argv[1:])
timing = a.pop("timing"), b.pop("timing")
sys.exit(a != b or "seconds" not in json.dumps(timing))' "$1" "$2"
}
number=0
alike() { # ARGUMENT...
    number=$((number + 1))
    for threads in 1 2 7 again; do
        place=$number-$threads
        [ $threads != again ] || threads=2
        try 0 fill -q "$@" --threads $threads -o $place
        [ $place != $number-1 ] || continue
        for file in $number-1/*; do
            case $file in
            */run.json) check "$place: the same run.json, but for timing" record_alike $file $place/run.json ;;
            *) check "$place: the same ${file#*/}" cmp $file $place/${file#*/} ;;
            esac
        done
        check "$place: no other file" test "$(ls $number-1)" = "$(ls $place)"
    done
}
alike sown/table.mtx
alike sown/table.mtx --solver grassmann-cg --rank-most 5
alike sown/table.mtx --precision single --rank 4
alike cider.csv --bounds 0:10 --rank-most 4 --write factors
"$FESCUE" survey sown/table.mtx --threads 1 >one
"$FESCUE" survey sown/table.mtx --threads 7 >seven
check "the same survey" cmp one seven
try 0 fill -q sown/table.mtx --rank 4 --precision single --seed 2 -o other
denied "another seed hides other cells" cmp -s other/left.mtx 3-1/left.mtx
finish
