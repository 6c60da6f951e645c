#!/bin/sh
# SPDX-License-Identifier: MIT
#
# fescue rank: the rank of small sown tables, of noise alone and without noise; its file, its command that can be pasted,
# weights and interpolation in time, and that nothing depends on the number of workers. The long suite has twenty tables.
. "$(dirname "$0")/library"

look() { # EXPRESSION over `lines`, the lines of rank.csv; the chosen one is `chosen`
    "$PYTHON" -c "
import csv, sys
lines = list(csv.DictReader(open('ranks/rank.csv')))
chosen, = (l for l in lines if 'chosen' in l['mark'])
sys.exit(not ($1))"
}

"$FESCUE" sow -q --rows 120 --columns 60 --rank 2 --noise 0.5 -o two
try 0 rank two/table.mtx -o ranks --threads 1
cp out one && cp ranks/rank.csv one.csv
check "rank 2 is chosen" grep -q '^Rank 2: RMSE ' out
check "and marked in the chart" grep -q '^  \*    2 ' out
check "rank.csv has it too" look "chosen['rank'] == '2' and chosen['offsets'] == 'none'"
check "ranks 0, 1, 2, ..." look "[int(l['rank']) for l in lines if l['mark'] not in ('learnt', 'rival')] == list(range(len(lines) - 2))"
check "five folds, whose mean is about the pooled error" \
    look "abs(sum(float(chosen['fold_%d' % k]) for k in range(1, 6)) / 5 / float(chosen['rmse']) ** 2 - 1) < 0.01"
check "the evidence fit is one line" look "[l['rank'] for l in lines if l['mark'] == 'learnt'] == ['2']"
try 0 rank two/table.mtx -o ranks --threads 3
check "the same text for three workers" cmp one out
check "and the same file" cmp one.csv ranks/rank.csv
sed -n 's/^    fescue fill //p' out >arguments
tried 0 sh -c "\"\$FESCUE\" fill -q $(cat arguments) -o filled"
check "the command fills at that rank" grep -q '"rank": 2' filled/run.json

"$FESCUE" sow -q --rows 100 --columns 50 --rank 0 --noise 1 -o noise
try 0 rank noise/table.mtx --rank-most 5
check "noise has no structure, and it says so" \
    grep -q '^Rank 0, the offsets alone, is not beaten: the table has no usable low-rank structure.$' out
denied "without -o there is no file" test -e noise/rank.csv

"$FESCUE" sow -q --rows 60 --columns 50 --rank 3 --noise 0 --seen 0.5 -o exact
try 0 rank exact/table.mtx
check "without noise the rank is met" grep -q 'the table is of this rank, without noise' out
check "and it is 3" grep -q '^Rank 3:' out

# Two components, under noise that differs by a factor of 30 between rows; and slow movements of each series alone.
"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(6)
m, n = 120, 25
truth = random.standard_normal((m, 2)) @ random.standard_normal((2, n))
sd_row, sd_cell = 0.2 * 30 ** random.random(m), 4 ** random.random((m, n))
value = truth + sd_row[:, None] * sd_cell * random.standard_normal((m, n))
seen = random.random((m, n)) < 0.6
walks = np.cumsum(random.standard_normal((m, n)), 0) + 0.1 * random.standard_normal((m, n))
with open("cells.csv", "w") as cells, open("bare.csv", "w") as bare, open("rows.csv", "w") as rows:
    cells.write("well,day,level,sd\n")
    bare.write("well,day,level\n")
    rows.write("well;sd\n")
    for i in range(m):
        rows.write("w%d;%.6g\n" % (i, sd_row[i]))
        for j in np.nonzero(seen[i])[0]:
            cells.write("w%d,d%d,%.9g,%.6g\n" % (i, j, value[i, j], sd_cell[i, j]))
            bare.write("w%d,d%d,%.9g\n" % (i, j, value[i, j]))
with open("walks.csv", "w") as file:
    file.write("day," + ",".join("c%d" % j for j in range(n)) + "\n")
    for i in range(m):
        day = str(np.datetime64("2026-01-01") + i)
        file.write(day + "," + ",".join("%.6g" % x if s else "" for x, s in zip(walks[i], seen[i])) + "\n")
END
try 0 rank bare.csv -o ranks
bare=$("$PYTHON" -c 'import csv; print(*(l["rank"] for l in csv.DictReader(open("ranks/rank.csv")) if "chosen" in l["mark"]))')
denied "without weights noise hides the rank" test "$bare" = 2
try 0 rank cells.csv --row-weights rows.csv -o ranks --threads 1
cp ranks/rank.csv one.csv
check "with weights of cells and rows it is found" look "chosen['rank'] == '2' and chosen['ridge'] == ''"
check "and said how" grep -q '^Weighted: each rank is the evidence fit with so many components at most.$' out
check "the command has the weights" grep -q '^    fescue fill cells.csv .*--row-weights rows.csv$' out
sed -n 's/^    fescue fill //p' out >arguments
tried 0 sh -c "\"\$FESCUE\" fill -q $(cat arguments) -o filled"
check "and fills at that rank" grep -q '"rank": 2' filled/run.json
try 0 rank cells.csv --row-weights rows.csv -o ranks --threads 3
check "the same file for three workers, weighted" cmp one.csv ranks/rank.csv
try 66 rank bare.csv --column-weights missing
says 'missing: cannot be opened: No such file or directory'

try 0 rank walks.csv -o ranks
check "interpolation in time is a line of the chart" grep -q '^    time  -       ' out
check "and of the file, better than any rank of walks that have nothing in common" \
    look "[l for l in lines if l['mark'] == 'interpolation' and float(l['rmse']) < 0.8 * float(chosen['rmse'])]"
check "which is said" grep -q '^Plain interpolation in time comes to [0-9.]* % less error than the ' out
try 0 rank walks.csv -o ranks --time-axis none
check "without the axis there is none" look "not [l for l in lines if l['mark'] == 'interpolation']"

try 64 rank --folds 1 two/table.mtx
says '--folds: found 1, but cross-validation needs at least 2'
printf 'x,a,b\nr,1,\ns,,\n' >tiny.csv
try 65 rank tiny.csv --format wide
says 'the table has too few cells for 5 folds'
finish
