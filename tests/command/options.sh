#!/bin/sh
# SPDX-License-Identifier: MIT
#
# What the options of fill do, seen from outside.
. "$(dirname "$0")/library"

results() { # DIRECTORY: what lies in it, in one line
    ls -A "$1" | tr '\n' ' '
}
factors='column-offsets.mtx left.mtx right.mtx row-offsets.mtx spectrum.mtx'
record() { # FILE EXPRESSION: of the record r
    "$PYTHON" -c 'import json, sys; r = json.load(open(sys.argv[1])); sys.exit(not eval(sys.argv[2]))' "$1" "$2"
}
"$FESCUE" sow -q --rows 60 --columns 40 --rank 2 --seen 0.5 --offset-scale 0.5 -o sown
table=sown/table.mtx

# ---- which results ----------------------------------------------------------------------------------------------------
for choice in "auto=cells.csv column-offsets.mtx filled.mtx left.mtx right.mtx row-offsets.mtx run.json spectrum.mtx trace.csv" \
    "filled=filled.mtx run.json trace.csv" "cells=cells.csv run.json trace.csv" \
    "factors=column-offsets.mtx left.mtx right.mtx row-offsets.mtx run.json spectrum.mtx trace.csv" \
    "filled,cells=cells.csv filled.mtx run.json trace.csv"; do
    try 0 fill -r 2 --write "${choice%%=*}" $table -o "write-${choice%%=*}"
    check "--write ${choice%%=*} writes: ${choice#*=}" test "$(results "write-${choice%%=*}")" = "${choice#*=} "
done
check "the choice changes no result" cmp write-filled/filled.mtx write-auto/filled.mtx
try 64 fill --write filled,all $table -o write-all
check "nothing was written" nothing_in write-all

# A table of 25 million cells, of which few are seen: no dense results unless they are asked for.
"$FESCUE" sow -q --rows 5000 --columns 5000 --rank 1 --seen 0.002 --truth factors -o sparse
try 0 fill -r 1 sparse/table.mtx -o large
check "dense results are left out above 20 million cells" test "$(results large)" = \
    "column-offsets.mtx left.mtx right.mtx row-offsets.mtx run.json spectrum.mtx trace.csv "
check "the summary says so" grep -q '^written .*factors' err
check "and names what was left out" grep -qi 'left out\|not written\|without' err
check "so does the record" record large/run.json '"filled" in json.dumps(r["files"])'

# ---- how many components ----------------------------------------------------------------------------------------------
try 0 fill -q -r 0 $table -o none
check "--rank 0: no low-rank part" test "$(results none)" = \
    "cells.csv column-offsets.mtx filled.mtx row-offsets.mtx run.json trace.csv "
for rank in 1 3; do
    try 0 fill -q -r $rank --solver fixed-rank-cg $table -o rank
    check "--rank $rank: as many singular values" test "$(sed -n '/^%/!{p;q}' rank/spectrum.mtx)" = "$rank 1"
done
try 0 fill -q -r 30 --solver evidence $table -o fewer
check "the evidence fit keeps what the data support" test "$(sed -n '/^%/!{p;q}' fewer/spectrum.mtx)" = "2 1"
try 64 fill -q --solver evidence --ridge 0.1 $table -o ridge
check "and learns the ridge itself" grep -q 'learns the ridge itself' err
try 0 fill -q --rank-most 1 $table -o most
check "--rank-most holds" record most/run.json 'r["choice"]["rank"] <= 1'
for offsets in both rows columns mean none; do
    try 0 fill -q -r 1 --offsets $offsets $table -o offsets
    check "--offsets $offsets is taken" record offsets/run.json "r['choice']['offsets'] == '$offsets'"
    [ $offsets != none ] || check "--offsets none: the mean is 0" record offsets/run.json 'r["model"]["mean"] == 0'
    case $offsets in
    rows | both) check "rows have effects" grep -qE '^-?[0-9.]*[1-9]' offsets/row-offsets.mtx ;;
    *) check "rows have no effects" test -z "$(sed '/^%/d' offsets/row-offsets.mtx | sed 1d | grep -vx 0)" ;;
    esac
done
for solver in fixed-rank-cg grassmann-cg; do
    try 0 fill -q --solver $solver -r 2 $table -o solver-$solver
    check "--solver $solver is taken" record solver-$solver/run.json "r['fit']['solver'] == '$solver'"
done

# ---- how wrong --------------------------------------------------------------------------------------------------------
try 0 fill -q -r 2 --ridge 0.01 --offsets both --holdout 0 $table -o unjudged
check "nothing hidden and nothing to choose: no interval" test -z "$(cut -d, -f4,5 unjudged/cells.csv | sed 1d | grep -vx ,)"
try 0 fill -q -r 2 --interval 0.5 $table -o half
try 0 fill -q -r 2 --interval 0.95 $table -o wide
width() {
    sed -n 2p "$1/cells.csv" | awk -F, '{ print $5 - $4 }'
}
check "a higher level makes wider intervals" test "$(echo "$(width half) $(width wide)" | awk '{ print ($1 > 0 && $1 < $2) }')" -eq 1
try 0 fill -q -r 2 --bounds -0.5:0.25 $table -o bounded
check "--bounds clamps estimates and intervals" test -z "$(sed 1d bounded/cells.csv |
    awk -F, '$3 < -0.5 || $3 > 0.25 || $4 < -0.5 || $5 > 0.25')"
check "and some lie on the bounds" grep -q ',0.25,' bounded/cells.csv
check "seen cells are not clamped" test "$(grep -v '^%' bounded/filled.mtx | awk 'NR > 1 && $3 > 0.25' | wc -l)" -gt 100
try 64 fill -q --bounds 3:1 $table -o reversed

# ---- cells that nothing determines --------------------------------------------------------------------------------------
"$PYTHON" - <<'END'
# Two blocks that share no row and no column, and a last row and column that are empty.
import numpy as np
rng = np.random.default_rng(2)
x = rng.normal(size=(20, 1)) @ rng.normal(size=(1, 16)) + 3
with open("blocks.csv", "w") as file:
    file.write("row," + ",".join("c%d" % j for j in range(17)) + "\n")
    for i in range(21):
        seen = [i < 20 and j < 16 and (i < 10) == (j < 8) and rng.random() < 0.8 for j in range(17)]
        file.write("r%d," % i + ",".join("%.3f" % x[i, j] if s else "" for j, s in enumerate(seen)) + "\n")
END
try 0 fill -r 1 --offsets both --holdout 0 --ridge 0.01 blocks.csv -o loose
try 0 fill -r 1 --offsets both --holdout 0 --ridge 0.01 --strict blocks.csv -o strict
check "without --strict each cell is filled" test -z "$(sed 1d loose/filled.csv | grep -E ',,|,$')"
cat >strict.py <<'END'
import csv
read = lambda path: list(csv.reader(open(path)))
told = {(r[0], r[1]): r for r in read("strict/cells.csv")[1:]}
loose = {(r[0], r[1]): r for r in read("loose/cells.csv")[1:]}
filled = read("strict/filled.csv")
filled = {(r[0], c): v for r in filled[1:] for c, v in zip(filled[0][1:], r[1:])}
across = lambda i, j: i == 20 or j == 16 or (i < 10) != (j < 8)
for (r, c), line in told.items():
    i, j = int(r[1:]), int(c[1:])
    assert (line[5] != "low-rank") == across(i, j), line
    assert (line[2] == "" and filled[r, c] == "") == across(i, j), line
    assert across(i, j) or line == loose[r, c]
assert loose["r20", "c16"][5] == "mean" and loose["r20", "c3"][5] == "offsets" and loose["r3", "c12"][5] == "offsets"
END
check "--strict leaves blank what rests on offsets alone, and nothing else" "$PYTHON" strict.py
check "the record counts them" record strict/run.json 'r["unseen"]["left_blank"] == 2 * 80 + 20 + 16 + 1'

# ---- cells that come more than once ------------------------------------------------------------------------------------
printf 'row,column,value\na,x,1\na,y,2\nb,x,3\na,x,5.0\nb,y,4\na,x,3\n' >twice.csv
try 65 fill twice.csv -o twice
for choice in first=1 last=3 mean=3; do
    try 0 fill twice.csv -r 0 --holdout 0 --duplicates "${choice%=*}" -o twice
    check "--duplicates ${choice%=*} takes ${choice#*=}" grep -qx "a,x,${choice#*=}" twice/filled.csv
    check "and counts two" record twice/run.json 'r["input"]["duplicates"] == 2'
done

# ---- limits -----------------------------------------------------------------------------------------------------------
try 71 fill --memory-limit 100K $table -o memory
check "it is said what could not be had" grep -q '^fescue: .*memory' err
check "nothing was written" nothing_in memory
try 0 fill -q --memory-limit 1G -r 1 $table -o memory
"$FESCUE" sow -q --rows 300 --columns 200 --rank 12 --truth factors -o slow
try 0 fill --time-limit 0.001 slow/table.mtx --write factors -o limited
check "--time-limit ends choosing, and the summary says so" grep -qi 'time' err
denied "it does not say of what was not tried that it is of no use" grep -q 'no usable low-rank structure' err
try 0 fill -q --iterations 2 -r 2 --ridge 0.1 --offsets none --holdout 0 $table -o few
check "--iterations holds" record few/run.json 'r["fit"]["iterations"] <= 2'

# ---- precision --------------------------------------------------------------------------------------------------------
try 0 fill -q -r 2 --ridge 0.01 --precision single $table -o single
try 0 fill -q -r 2 --ridge 0.01 $table -o double
check "single precision gives nearly the same" test -z "$(paste -d, single/cells.csv double/cells.csv | sed 1d |
    awk -F, '{ d = $3 - $11 } d > 1e-3 || d < -1e-3')"
check "but not the same" test "$(cut -d, -f3 single/cells.csv | cksum)" != "$(cut -d, -f3 double/cells.csv | cksum)"
seen_cells() { # DIRECTORY: the lines of the table that are in filled.mtx
    sed 1,3d $table | sort >seen
    sort "$1/filled.mtx" | comm -12 seen - | cmp - seen
}
check "seen cells are as they were all the same" seen_cells single

# ---- what is said -----------------------------------------------------------------------------------------------------
try 0 fill --verbose -r 1 $table -o verbose
check "--verbose says more" test "$(wc -l <err)" -ge 10
check "estimates are not measurements, once" test "$(grep -c 'not measurements' err)" -eq 1
finish
