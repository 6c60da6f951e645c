#!/bin/sh
# SPDX-License-Identifier: MIT
#
# fescue rank: the rank of small sown tables, of noise alone and without noise; its file, its command that can be pasted,
# and that nothing depends on the number of workers. The long suite has twenty tables.
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

try 64 rank --folds 1 two/table.mtx
says '--folds: found 1, but cross-validation needs at least 2'
printf 'x,a,b\nr,1,\ns,,\n' >tiny.csv
try 65 rank tiny.csv --format wide
says 'the table has too few cells for 5 folds'
finish
