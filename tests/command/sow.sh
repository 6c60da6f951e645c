#!/bin/sh
# SPDX-License-Identifier: MIT
#
# fescue sow: the same request gives the same bytes, each shape holds the same cells, and what it says of the table is
# so. The figures are checked with NumPy and SciPy.
. "$(dirname "$0")/library"

# ---- the same bytes, whatever the workers, the place and the time ----------------------------------------------------
small='--rows 120 --columns 70 --rank 4 --spectrum 8,4,2,1 --offset-scale 0.5 --noise 0.2'
for kind in "$small --gzip" "$small --holes runs --shape long" "$small --holes late-starts --shape wide" \
    "$small --truth factors --popularity 1" '--scene fen-levels' '--scene cider-panel --gzip'; do
    rm -rf one two other
    try 0 sow $kind -o one --threads 1
    try 0 sow $kind -o two/below --threads 7
    check "same files" diff -r one two/below
    try 0 sow $kind -o other --seed 2
    table=$(ls one | grep '^table')
    denied "another seed, another table" cmp -s "one/$table" "other/$table"
done

# ---- a place that held another sowing, and other things --------------------------------------------------------------
mkdir mixed
echo keep >mixed/notes.txt
try 0 sow $small --shape wide --truth cells -o mixed
try 0 sow $small --truth factors --gzip -o mixed
check "nothing of the older sowing is left, the rest is" test "$(ls mixed | tr '\n' ' ')" = "notes.txt sow.json \
table.mtx.gz truth-column-offsets.mtx truth-left.mtx truth-right.mtx truth-row-offsets.mtx truth-spectrum.mtx "
check "what was not ours is as it was" test "$(cat mixed/notes.txt)" = keep

# ---- refusals -------------------------------------------------------------------------------------------------------
refused() { # SENTENCE ARGUMENT...
    sentence_=$1
    shift
    try 64 sow -o refused "$@"
    says "$sentence_"
    check "nothing was written" nothing_in refused
}
shapes='expected flat, geometric:K with K at least 1, or as many positive numbers as the rank (3) with commas between'
for spectrum in 1,2 1,2,3,4 1,2, ,1,2 1,2,0 1,-2,3 1,2,nan geometric: geometric:0.5 geometric:x steep 1e200,1,1; do
    refused "--spectrum: found \"$spectrum\", $shapes" --spectrum "$spectrum"
done
refused '--rank: found "11", but the rank of a table of 10 x 12 is at most its shorter side' --rank 11 --rows 10 --columns 12
refused '--rows: found "5", but a scene has its own; the option is for plain tables' --scene fen-levels --rows 5
refused '--noise: found "0", but a scene has its own; the option is for plain tables' --scene cider-panel --noise 0
refused '--seen: found "1.5", expected a number from 0 to 1' --seen 1.5

# ---- edges ----------------------------------------------------------------------------------------------------------
try 0 sow --rows 1 --columns 1 --rank 0 --seen 1 --noise 0 -o dot
check "one cell of rank 0 without noise is 0" test "$(tail -n 1 dot/table.mtx)" = '1 1 0'
try 0 sow --rows 5 --columns 4 --seen 0 -o none
check "nothing seen" test "$(tail -n 1 none/table.mtx)" = '5 4 0'
try 0 sow --rows 5 --columns 4 --seen 1 --holes runs -o all
check "all seen" test "$(tail -n +4 all/table.mtx | wc -l)" -eq 20
try 0 sow -q -o quiet
check "--quiet says nothing" is_empty err

# ---- what is in them ------------------------------------------------------------------------------------------------
"$FESCUE" sow -q --rows 300 --columns 200 --rank 4 --spectrum 8,4,2,1 --offset-scale 0.5 --noise 0.2 -o cells
"$FESCUE" sow -q --rows 300 --columns 200 --rank 4 --spectrum geometric:100 --offset-scale 0.5 --truth factors -o factors
for holes in scattered runs late-starts; do
    "$FESCUE" sow -q --rows 2000 --columns 400 --seen 0.6 --holes $holes -o $holes
done
"$FESCUE" sow -q --rows 500 --columns 300 --popularity 1 --seen 0.2 -o popular
for shape in matrix-market wide long; do
    "$FESCUE" sow -q --rows 50 --columns 30 --popularity 0.5 --shape $shape --gzip -o shape-$shape
done
cat >look.py <<'END'
import csv, gzip, json
import numpy as np, scipy.io as io

count = 0
def check(text, good):
    global count
    count += 1
    print("ok" if good else "not ok", count, "-", text)

def mtx(path):
    return np.asarray(io.mmread(path)) if "truth" in path else io.mmread(path)

def singular(x):
    return np.linalg.svd(x, compute_uv=False)

# Effects of independent rows and columns are taken out by subtracting nothing: the factors are compared directly.
t = mtx("cells/truth.mtx")
x = mtx("cells/table.mtx")
noise = x.data - t[x.row, x.col]
check("noise has the asked size", abs(noise.std() / 0.2 - 1) < 4 / np.sqrt(2 * x.nnz))
check("noise has mean 0", abs(noise.mean()) < 4 * 0.2 / np.sqrt(x.nnz))
check("the share of seen cells is the asked one", abs(x.nnz / 6e4 - 0.3) < 4 * np.sqrt(0.3 * 0.7 / 6e4))
check("each cell comes once", len(set(zip(x.row, x.col))) == x.nnz)
check("the truth has rank 4 and two of effects", (singular(t) > 1e-9).sum() == 6)

left, right = mtx("factors/truth-left.mtx"), mtx("factors/truth-right.mtx")
s = mtx("factors/truth-spectrum.mtx").ravel()
a, b = mtx("factors/truth-row-offsets.mtx"), mtx("factors/truth-column-offsets.mtx")
for name, q in ("left", left), ("right", right):
    check(name + " factor is orthonormal", np.abs(q.T @ q - np.eye(4)).max() < 1e-14)
low = (left * s) @ right.T
check("the signal has size 1", abs(np.sqrt((low ** 2).mean()) - 1) < 1e-12)
check("the spectrum is geometric with condition 100", np.allclose(s / s[0], 100 ** (-np.arange(4) / 3), rtol=1e-12))
check("row effects have the asked size", abs(a.std() / 0.5 - 1) < 4 / np.sqrt(2 * 300))
check("column effects have the asked size", abs(b.std() / 0.5 - 1) < 4 / np.sqrt(2 * 200))
x = mtx("factors/table.mtx")
noise = x.data - (low + a + b.T)[x.row, x.col]
check("the factors and effects are the table's truth", abs(noise.std() / 0.1 - 1) < 4 / np.sqrt(2 * x.nnz))

masks = {}
for name in "scattered", "runs", "late-starts", "popular":
    x = mtx(name + "/table.mtx")
    masks[name] = np.zeros(x.shape, bool)
    masks[name][x.row, x.col] = True
turns = {name: (m[1:] != m[:-1]).sum(axis=0) for name, m in masks.items()}
for name in "scattered", "runs", "late-starts":
    share = masks[name].mean(axis=0)
    check(name + ": the mean share is the asked one", abs(share.mean() - 0.6) < 4 * share.std() / 20)
check("scattered: a change at 2 p (1 - p) of the rows", abs(turns["scattered"].mean() / 1999 / 0.48 - 1) < 0.02)
# An unseen and a seen stretch are 50 and 75 rows long on the average: two changes in 125 rows.
check("runs: as long as they should be", abs(turns["runs"].mean() / (2 * 2000 / 125) - 1) < 0.05)
check("runs: every row alike", np.abs(masks["runs"].mean(axis=1) - 0.6).max() < 5 * np.sqrt(0.24 / 400))
check("late starts: one change a column at most", turns["late-starts"].max() == 1)
check("late starts: seen at the end", masks["late-starts"][-1].all())
check("late starts: many are early, some very late",
      np.median((~masks["late-starts"]).sum(axis=0)) < 1000 < (~masks["late-starts"]).sum(axis=0).max() - 600)
share = masks["popular"].mean(axis=0)
check("popularity: the mean share is the asked one", abs(share.mean() - 0.2) < 0.004)
check("popularity: the first columns are seen whole", share[:10].min() == 1)
check("popularity: shares fall as 1/(j+1)",
      abs(share[100:140].mean() / share[200:280].mean() - np.mean(1 / np.r_[101:141]) / np.mean(1 / np.r_[201:281])) < 0.3)

x = io.mmread(gzip.open("shape-matrix-market/table.mtx.gz")).tocoo()
cells = {("r%d" % (i + 1), "c%d" % (j + 1)): v for i, j, v in zip(x.row, x.col, x.data)}
wide = list(csv.reader(gzip.open("shape-wide/table.csv.gz", "rt")))
check("wide: the same cells", cells == {(row[0], c): float(v) for row in wide[1:] for c, v in zip(wide[0][1:], row[1:]) if v})
check("wide: every row and column", (len(wide), len(wide[0])) == (51, 31))
long = list(csv.reader(gzip.open("shape-long/table.csv.gz", "rt")))
check("long: the same cells", cells == {(r, c): float(v) for r, c, v in long[1:]} and len(long) == len(cells) + 1)
check("the truth is the same in every shape",
      len({gzip.open("shape-%s/truth.mtx.gz" % s).read() for s in ("matrix-market", "wide", "long")}) == 1)

record = json.load(open("cells/sow.json"))
check("the record: observed cells", record["observed"] == mtx("cells/table.mtx").nnz)
check("the record: options", record["options"]["spectrum"] == "8,4,2,1" and record["options"]["seed"] == "1")
check("the record: the error floor", abs(record["rmse_floor"] - 0.2 * np.sqrt(4 * 496 / record["observed"])) < 1e-12)
END
"$PYTHON" look.py >looked 2>&1
verdict $? "look.py ran to its end" looked
while IFS= read -r line; do
    case $line in
    "ok "*) verdict 0 "${line#* - }" ;;
    *) verdict 1 "${line#* - }" ;;
    esac
done <looked
finish
