#!/bin/sh
# SPDX-License-Identifier: MIT
#
# fescue fill: what comes out for each form a table comes in. The files are looked at with Python's csv module and SciPy.
. "$(dirname "$0")/library"

# A module for the looks below: it prints lines of the Test Anything Protocol, which "look" counts.
cat >look.py <<'END'
import csv, gzip, json, sys
import numpy as np, scipy.io as io

def check(text, good):
    print("ok" if good else "not ok", "-", text)

def rows(path, delimiter=","):
    with (gzip.open(path, "rt", newline="") if path.endswith(".gz") else open(path, newline="")) as file:
        return list(csv.reader(file, delimiter=delimiter))

HOLES = "", "NA", "NaN", "null"

def wide(path, delimiter=","):
    """{(row, column): text}, with holes, by label; and the labels."""
    table = rows(path, delimiter)
    return ({(r[0], c): v for r in table[1:] for c, v in zip(table[0][1:], r[1:])},
            [r[0] for r in table[1:]], table[0])

def long(path, delimiter=","):
    table = rows(path, delimiter)
    return {(r, c): v for r, c, v in table[1:]}, table[0]

def market(path):
    """{(row, column): text} of a coordinate file, as it is written."""
    lines = [line.split() for line in open(path) if not line.startswith("%")]
    return {(a, b): v for a, b, v in lines[1:]}, [int(x) for x in lines[0]]

def cells(place):
    table = rows(place + "/cells.csv")
    assert table[0] == "row column estimate lower upper basis row_support column_support".split()
    return {(r[0], r[1]): r[2:] for r in table[1:]}

def product(place):
    record = json.load(open(place + "/run.json"))
    left, right, s, a, b = (np.asarray(io.mmread(place + "/%s.mtx" % n)) for n in
                            ("left", "right", "spectrum", "row-offsets", "column-offsets"))
    return record["model"]["mean"] + a + b.T + (left * s.ravel()) @ right.T
END
look() { # TEXT: runs standard input as Python after the module
    { cat look.py; cat; } >looking.py
    "$PYTHON" looking.py >looked 2>&1
    verdict $? "$1: looked at to the end" looked
    while IFS= read -r line; do
        case $line in
        'ok - '*) verdict 0 "$1: ${line#ok - }" ;;
        *) verdict 1 "$1: ${line#not ok - }" ;;
        esac
    done <looked
}

# ---- wide text: labels and spellings are kept to the letter -----------------------------------------------------------
"$FESCUE" sow -q --rows 60 --columns 24 --rank 2 --seen 0.6 --offset-scale 1 --shape wide -o sown
"$PYTHON" - <<'END'
import csv
table = list(csv.reader(open("sown/table.csv", newline="")))
def spell(k, text):
    x = float(text)
    return ["%.3f" % x, "%+.2f" % x, "%.4e" % x, " %.1f" % x, "%.5f00" % x, "%.0f." % x, "%.2E" % x][k % 7]
holes = ["", "NA", "NaN", "null"]
strange = ['a, b', 'with "quotes"', ' blank before', 'zwölf', '日本', "two\nlines", "=1+1", "-", "0"]
table[0][0] = "the corner, quoted"
for k, name in enumerate(strange):
    table[0][k + 1] = table[k + 1][0] = name
k = 0
for row in table[1:]:
    for j in range(1, len(row)):
        k += 1
        row[j] = spell(k, row[j]) if row[j] else holes[k % 4]
csv.writer(open("odd.csv", "w", newline=""), lineterminator="\n").writerows(table)
csv.writer(open("odd.tsv", "w", newline=""), delimiter="\t", lineterminator="\r\n").writerows(table)
END
try 0 fill odd.csv -o wide
look wide <<'END'
given, given_rows, given_head = wide("odd.csv")
filled, filled_rows, filled_head = wide("wide/filled.csv")
told = cells("wide")
check("corner and column labels as they were", given_head == filled_head)
check("row labels as they were", given_rows == filled_rows)
seen = {k for k, v in given.items() if v not in HOLES}
check("seen cells as they were, to the last byte", len(seen) > 500 and all(filled[k] == given[k] for k in seen))
check("each hole is filled", all(np.isfinite(float(filled[k])) for k in given if k not in seen))
check("cells.csv has each filled cell once", set(told) == set(given) - seen)
check("and the same estimates", all(told[k][0] == filled[k] for k in told))
check("intervals hold the estimates", all(float(v[1]) < float(v[0]) < float(v[2]) for v in told.values()))
support = {}
for r, c in seen:
    support["r" + r] = support.get("r" + r, 0) + 1
    support["c" + c] = support.get("c" + c, 0) + 1
check("supports count the seen cells", all((int(v[4]), int(v[5])) == (support["r" + r], support["c" + c])
                                           for (r, c), v in told.items()))
x = product("wide")
r, c = {n: i for i, n in enumerate(given_rows)}, {n: j for j, n in enumerate(given_head[1:])}
check("estimates are mean + offsets + left diag(spectrum) right'",
      max(abs(x[r[i], c[j]] - float(v[0])) for (i, j), v in told.items()) < 1e-12)
record = json.load(open("wide/run.json"))
check("the record tells the table", (record["input"]["rows"], record["input"]["columns"], record["input"]["observed"])
      == (60, 24, len(seen)))
END
try 0 fill odd.tsv -o tabs
look tabs <<'END'
given, filled = wide("odd.tsv", "\t"), wide("tabs/filled.tsv", "\t")
check("labels as they were", given[1:] == filled[1:])
check("seen cells as they were", all(filled[0][k] == v for k, v in given[0].items() if v not in HOLES))
comma = cells("wide")
check("estimates do not depend on the separator", cells("tabs") == comma)
END

# A decimal comma where the semicolon separates: seen cells stay, estimates take it up.
sed 's/"//g; s/,/;/g; s/\./,/g' sown/table.csv >comma.csv
try 0 fill comma.csv -o comma
try 0 fill sown/table.csv -o point
look "decimal comma" <<'END'
given, filled, point = wide("comma.csv", ";"), wide("comma/filled.csv", ";"), wide("point/filled.csv")
check("seen cells as they were", all(filled[0][k] == v for k, v in given[0].items() if v))
check("estimates as with a point, written with a comma",
      all(v.replace(",", ".") == point[0][k] for k, v in filled[0].items()) and not any("." in v for v in filled[0].values()))
END

# ---- long text --------------------------------------------------------------------------------------------------------
cat >long.csv <<'END'
wer,was,"wie, viel"
"b, c",x,1.50
a,x,2
a,"y ""z""",03
"b, c",w,4e0
"d",w,+5
d,x,3
END
try 0 fill long.csv -o long --rank 1 --holdout 0
look long <<'END'
given, filled = long("long.csv"), long("long/filled.csv")
check("titles as they were", given[1] == filled[1])
check("seen cells as they were", all(filled[0][k] == v for k, v in given[0].items()))
check("each cell once", len(rows("long/filled.csv")) == 1 + 9 and len(filled[0]) == 9)
check("labels come in the order of their first cells", [r[0] for r in rows("long/filled.csv")[1::3]] == ["b, c", "a", "d"])
END

# ---- Matrix Market ----------------------------------------------------------------------------------------------------
"$FESCUE" sow -q --rows 50 --columns 30 --rank 2 --seen 0.5 -o mm
sed '4,$s/ \(-\{0,1\}[0-9.]*\)$/ \1e0/' mm/table.mtx >coordinate.mtx # a spelling that nobody would write back
try 0 fill coordinate.mtx -o coordinate
look coordinate <<'END'
given, filled = market("coordinate.mtx"), market("coordinate/filled.mtx")
check("the size is told", filled[1] == [50, 30, 1500] and len(filled[0]) == 1500)
check("seen cells as they were", len(given[0]) > 600 and all(filled[0][k] == v for k, v in given[0].items()))
check("SciPy reads it", io.mmread("coordinate/filled.mtx").shape == (50, 30))
check("rows and columns are called by number", set(cells("coordinate")) == set(filled[0]) - set(given[0]))
END
"$PYTHON" - <<'END'
import numpy as np, scipy.io as io
x = np.full((50, 30), np.nan)
t = io.mmread("mm/table.mtx")
x[t.row, t.col] = t.data
with open("array.mtx", "w") as file:
    file.write("%%MatrixMarket matrix array real general\n% by columns\n50 30\n")
    for v in x.T.ravel():
        file.write("%.6f\n" % v if np.isfinite(v) else "nan\n")
rng = np.random.default_rng(1)
u = rng.normal(size=(30, 2))
s = np.tril(u @ u.T)
keep = np.tril(rng.random((30, 30)) < 0.7)
keep[0, 0] = True
with open("symmetric.mtx", "w") as file:
    file.write("%%%%MatrixMarket matrix coordinate real symmetric\n30 30 %d\n" % keep.sum())
    for i, j in zip(*np.nonzero(keep)):
        file.write("%d %d %.4f\n" % (i + 1, j + 1, s[i, j]))
END
try 0 fill array.mtx -o array
look array <<'END'
given = [line.strip() for line in open("array.mtx") if line[0] != "%"][1:]
lines = [line.strip() for line in open("array/filled.mtx") if line[0] != "%"]
check("an array comes back as an array", lines[0] == "50 30" and len(lines) == 1501)
check("seen cells as they were", all(a == b for a, b in zip(given, lines[1:]) if a != "nan") and given.count("nan") > 600)
check("no hole is left", np.isfinite(io.mmread("array/filled.mtx")).all())
END
try 0 fill symmetric.mtx -o symmetric
look symmetric <<'END'
given, filled = market("symmetric.mtx"), market("symmetric/filled.mtx")
check("both triangles are seen", all(filled[0][k] == v and filled[0][k[1], k[0]] == v for k, v in given[0].items()))
check("all cells are there", len(filled[0]) == 900)
END

# ---- the same table in every form gives the same estimates --------------------------------------------------------------
for shape in matrix-market wide; do
    "$FESCUE" sow -q --rows 50 --columns 30 --rank 2 --seen 0.5 --shape $shape -o as-$shape
done
try 0 fill as-matrix-market/table.mtx -o same-market
try 0 fill as-wide/table.csv -o same-wide
look "all forms" <<'END'
one = {k: float(v[0]) for k, v in cells("same-market").items()}
two = {(k[0][1:], k[1][1:]): float(v[0]) for k, v in cells("same-wide").items()}
check("wide text and Matrix Market give the same estimates, bit for bit", one == two)
END

# ---- gzip, of one member and of several ---------------------------------------------------------------------------------
gzip -nc odd.csv >one.csv.gz
{ head -c 1000 odd.csv | gzip -nc; tail -c +1001 odd.csv | gzip -nc; } >two.csv.gz
for file in one two; do
    try 0 fill $file.csv.gz -o packed-$file
    for result in filled.csv cells.csv left.mtx spectrum.mtx right.mtx row-offsets.mtx column-offsets.mtx trace.csv; do
        check "$file gzip member(s): the same $result" cmp wide/$result packed-$file/$result
    done
done

# ---- effects that are not there: what is learnt of them dies out and leaves no number that is none ----------------------
try 0 sow -q --rows 200 --columns 80 --rank 3 --seen 0.4 --noise 0.3 --seed 76 -o flat
try 0 fill flat/table.mtx --folds 0 -o flat-filled
denied "all estimates are numbers" grep -qiE 'nan|inf' flat-filled/filled.mtx
finish
