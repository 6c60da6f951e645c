#!/bin/sh
# SPDX-License-Identifier: MIT
#
# The announced error and the intervals of a table whose holes are runs and whose columns wander: against readings that
# fill never saw. Scattered hold-outs alone are too optimistic there. The shapes by name, and no folds at all.
. "$(dirname "$0")/library"

try 0 sow -q --readings --rows 400 --columns 40 -r 2 --seen 0.75 --noise 0.1 --holes runs --wander 0.3 --seed 7 -o gaps
table=gaps/table.mtx
try 0 fill -q $table --folds 4 -o filled
cat >read.py <<'END'
import csv, json, sys
import numpy as np
lines = [x for x in open("gaps/readings.mtx") if x[0] != "%"]
m, n = map(int, lines[0].split())
readings = np.array(lines[1:], float).reshape(n, m).T
cells = list(csv.DictReader(open("filled/cells.csv")))
said = json.load(open("filled/run.json"))["judgement"]
get = lambda name: np.array([float(x[name]) for x in cells])
true = readings[get("row").astype(int) - 1, get("column").astype(int) - 1]
rmse = np.sqrt(np.mean((get("estimate") - true) ** 2))
inside = np.mean((get("lower") <= true) & (true <= get("upper")))
print("# true %.4f, announced %.4f (%.4f to %.4f), scattered %.4f, 90 %% intervals hold %.3f"
      % (rmse, said["rmse"], said["rmse_low"], said["rmse_high"], said["rmse_scattered"], inside))
widths = get("upper") - get("lower")
for good, text in (
    (said["holdout_shape"] == "gaps", "the holes are seen to be gaps"),
    (abs(said["rmse"] / rmse - 1) < 0.1, "the announced error is that of readings nobody saw"),
    (0.8 * rmse < said["rmse_low"] < said["rmse"] < said["rmse_high"] < 1.2 * rmse, "its band is narrow here"),
    (said["rmse_scattered"] < 0.9 * rmse, "scattered cells alone are too optimistic"),
    (abs(inside - 0.9) < 0.03, "intervals hold what they promise"),
    (widths.max() > 1.3 * widths.min(), "every cell has its own"),
):
    print(("yes " if good else "no ") + text)
END
"$PYTHON" read.py >told || echo "no the results are read" >told
sed -n '/^#/p' told
while read -r good text; do
    case $good in yes | no) check "$text" test "$good" = yes ;; esac
done <told

try 0 sow -q --rows 150 --columns 30 --seen 0.6 --holes runs -o small
for shape in cells gaps rows columns; do
    try 0 fill small/table.mtx --folds 1 --holdout-shape $shape -r 3 --offsets none -o $shape
    check "--holdout-shape $shape is said" grep -q "\"holdout_shape\": \"$shape\"" $shape/run.json
done
try 0 fill small/table.mtx --folds 0 -r 3 --offsets none -o none
check "--folds 0: one half-width for all" test "$(sed 1d none/cells.csv | awk -F, '{ w = sprintf("%.9g", $5 - $4); if (!(w in seen)) { seen[w] = 1; n++ } } END { print n }')" = 1
finish
