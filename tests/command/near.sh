#!/bin/sh
# SPDX-License-Identifier: MIT
#
# Columns that are near one another. A sown table, the loadings of whose columns are a field over a grid of sensors, with
# columns of few cells and of none: what near columns are worth to them; what a graph that means nothing costs; the two
# forms of the file; what is said and recorded; and files that cannot be.
. "$(dirname "$0")/library"

holds() { # FILE EXPRESSION, of the record r: one test
    check "$2" "$PYTHON" -c 'import json,sys; r = json.load(open(sys.argv[1])); sys.exit(not eval(sys.argv[2]))' "$1" "$2"
}

"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(11)
side, m, rank = 10, 160, 2
n = side * side
at = np.array([(i, j) for i in range(side) for j in range(side)], float)
apart = np.linalg.norm(at[:, None] - at[None], axis=2)
root = np.linalg.cholesky(np.exp(-apart / 4) + 1e-9 * np.eye(n))
truth = random.standard_normal((m, rank)) @ (root @ random.standard_normal((n, rank))).T + root @ random.standard_normal(n)
value = truth + 0.4 * random.standard_normal((m, n))
seen = random.random((m, n)) < 0.35
thin = random.random(n) < 0.3
seen[:, thin] &= random.random((m, thin.sum())) < 0.06
none = [17, 44, 82]
seen[:, none] = False
pairs = [(k, k + 1) for k in range(n) if (k + 1) % side] + [(k, k + side) for k in range(n - side)]
shuffled = random.permutation(n)
np.savez("near.npz", truth=truth, seen=seen, thin=thin, none=none)
with open("sensors.csv", "w") as file:
    file.write("," + ",".join("s%d" % j for j in range(n)) + "\n")
    for i in range(m):
        file.write("h%d," % i + ",".join("%.6f" % value[i, j] if seen[i, j] else "" for j in range(n)) + "\n")
with open("grid.csv", "w") as file:
    file.write("sensor;neighbour;strength\n")
    file.writelines("s%d;s%d;2,5\n" % pair for pair in pairs)
    file.writelines("s%d;s%d;2,5\n" % pair[::-1] for pair in pairs[:20])
with open("grid.mtx", "w") as file:
    file.write("%%%%MatrixMarket matrix coordinate pattern symmetric\n%% a grid\n%d %d %d\n" % (n, n, len(pairs)))
    file.writelines("%d %d\n" % (b + 1, a + 1) for a, b in reversed(pairs))
with open("shuffled.csv", "w") as file:
    file.writelines("s%d,s%d,1\n" % (shuffled[a], shuffled[b]) for a, b in pairs)
END
cat >near.py <<'END'
import sys
import numpy as np
sown = np.load("near.npz")
unseen, thin, none = ~sown["seen"], sown["thin"], sown["none"]
def error(place, columns):
    estimate = np.genfromtxt(place + "/filled.csv", delimiter=",", skip_header=1)[:, 1:]
    return np.sqrt(np.mean((estimate - sown["truth"])[:, columns][unseen[:, columns]] ** 2))
few = thin.copy()
few[none] = False
columns = {"few": few, "none": none, "all": slice(None)}[sys.argv[3]]
print("#", sys.argv[1:], error(sys.argv[1], columns), error(sys.argv[2], columns))
raise SystemExit(not error(sys.argv[1], columns) <= float(sys.argv[4]) * error(sys.argv[2], columns))
END
try 0 fill sensors.csv -o without --folds 0
try 0 fill sensors.csv -o with --folds 0 --near-columns grid.csv
check "the summary tells of near columns" grep -q '^near       180 pairs of columns, drawn together [0-9.e+]* times' err
check "and what they brought" grep -q '^           RMSE [0-9.]* on hidden cells with near columns, [0-9.]* without$' err
check "columns of few cells have at most 0.75 times the error" "$PYTHON" near.py with without few 0.75
check "columns without cells have at most 0.75 times the error" "$PYTHON" near.py with without none 0.75
holds with/run.json 'r["near"]["is_there"] and r["near"]["pairs"] == 180 and r["near"]["components"] > 0.5'
holds with/run.json 'r["near"]["rmse_without"] > 0 and r["options"]["near-columns"] == "grid.csv"'
holds without/run.json 'not r["near"]["is_there"] and r["near"]["pairs"] == 0'
check "cells of a column without any rest on others" \
    sh -c 'grep "^h0,s17," with/cells.csv | grep -q smooth && grep "^h0,s17," without/cells.csv | grep -q mean'
"$PYTHON" - <<'END'
import csv, json
basis = [line["basis"] for line in csv.DictReader(open("with/cells.csv"))]
json.dump({word: basis.count(word) for word in ("low-rank", "smooth", "offsets", "mean")}, open("counted.json", "w"))
END
check "the bases in cells.csv are as many as the record says" "$PYTHON" -c '
import json
r, counted = json.load(open("with/run.json")), json.load(open("counted.json"))
raise SystemExit(any(r["unseen"][word] != n for word, n in counted.items()))'
try 0 fill sensors.csv -o market --folds 0 --near-columns grid.mtx
check "a pattern in Matrix Market form, in another order, gives the same" cmp with/filled.csv market/filled.csv
try 0 fill sensors.csv -o threads --folds 0 --near-columns grid.csv --threads 3
check "the same bits with three workers" cmp with/filled.csv threads/filled.csv
try 0 fill sensors.csv -o lost --folds 0 --near-columns shuffled.csv
check "a graph that means nothing costs at most one per cent" "$PYTHON" near.py lost without all 1.01
gzip -k grid.csv
try 0 fill sensors.csv -o packed --folds 0 --near-columns grid.csv.gz
check "the file may be compressed" cmp with/filled.csv packed/filled.csv

# ---- files that cannot be ---------------------------------------------------------------------------------------------
refuse() { # TEXT MESSAGE
    printf "$1" >bad
    try 65 fill sensors.csv --near-columns bad -o refused
    says "bad: $2"
}
refuse 's1,s2,1\ns1,s200,1\n' "line 2: 's200' is no column of the table"
refuse 's1,s2,1\ns2,s3,-1\n' \
    "line 2: the strength -1 is negative; 0, or a number from 1e-12 to 1e12, was expected"
refuse 's1,s2,1\ns2,s3,1e99\n' \
    "line 2: the strength 1e+99 is out of range; 0, or a number from 1e-12 to 1e12, was expected"
refuse 's1,s2,1\n\ns4,s4,1\n' "line 3: column 's4' is near itself; two columns were expected"
refuse 's1,s2,1\ns5,s6,2\ns2,s1,3\n' "line 3: 's1' and 's2' have strength 3, but 1 on line 1: nearness is the same both ways"
refuse 's1,s2,near\n' "line 1: the strength 'near' is not a number"
refuse 's1,s2\n' "line 1: 2 fields were found, two columns and a strength were expected"
refuse 's1,s2,0\n' "no two columns are near"
head='%%%%MatrixMarket matrix coordinate real'
refuse "$head general\n" "line 1: 'general' was found, 'symmetric' was expected: a column is as near to another as that is to it"
refuse "$head symmetric\n%%\n100 99 1\n" "line 3: 100 by 99 was found, 100 by 100 was expected: a side for every column"
refuse "$head symmetric\n100 100 1\n101 1 1\n" "line 3: '101' was found, the number of a column, 1 to 100, was expected"
refuse "$head symmetric\n100 100 1\n3 3 1\n" "line 3: column 's2' is near itself; two columns were expected"
refuse "$head symmetric\n100 100 2\n3 1 1\n" "line 3: 1 entries were found, 2 were expected"
try 66 fill sensors.csv --near-columns missing -o refused
says 'missing: cannot be opened: No such file or directory'
for other in "--ridge 0.1" "--solver grassmann-cg"; do
    try 64 fill sensors.csv --near-columns grid.csv $other -o refused
    says "near columns are taken by the evidence fit alone: leave --solver and --ridge at auto"
done
check "nothing was written" nothing_in refused
finish
