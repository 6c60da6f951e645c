#!/bin/sh
# SPDX-License-Identifier: MIT
#
# What a table brings beside its values: a time axis, and weights of cells, rows and columns. What is said of them, what
# the record keeps, what weights are good for, and requests that cannot be.
. "$(dirname "$0")/library"

holds() { # FILE EXPRESSION, of the record r: one test
    check "$2" "$PYTHON" -c 'import json,sys; r = json.load(open(sys.argv[1])); sys.exit(not eval(sys.argv[2]))' "$1" "$2"
}

# ---- time -------------------------------------------------------------------------------------------------------------
"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(5)
hours = [k for k in range(90) if k not in (20, 21, 60)]
def table(name, labels):
    with open(name, "w") as file:
        file.write("time,a,b,c,d\n")
        for k, label in enumerate(labels):
            cells = ["%.2f" % (np.sin(hours[k] / 9) * (1 + j) + 0.1 * random.standard_normal()) for j in range(4)]
            cells[k % 4] = ""
            file.write(label + "," + ",".join(cells) + "\n")
table("clock.csv", ["2024-05-%02dT%02d:00Z" % (1 + h // 24, h % 24) for h in hours])
table("torn.csv", ["2024-05-%02d %02d:00" % (1 + h // 24, h % 24) if h != 50 else "then" for h in hours])
table("plain.csv", ["line %d" % h for h in hours])
END
try 0 fill clock.csv -o clock
check "the summary says that rows are times" grep -qx 'time       rows are times, step 1 h, 2 gaps in the clock' err
holds clock/run.json 'r["time"]["along"] == "rows" and r["time"]["step_seconds"] == 3600 and r["time"]["gaps"] == 2'
holds clock/run.json 'r["time"]["start_unix_seconds"] == 1714521600 and r["time"]["in_order"] is True'
try 0 survey clock.csv
check "the survey says it too" grep -qx 'The rows are times, step 1 h, 2 gaps in the clock.' out
try 0 fill clock.csv --time-axis none -o clock
denied "not with --time-axis none" grep -q '^time ' err
holds clock/run.json 'r["time"] == {"along": "none"} and r["options"]["time-axis"] == "none"'
try 0 fill torn.csv -o torn
check "a label that is no time is named" \
    grep -qx "time       rows are not taken for times: 'then' (row 49) is none" err
try 65 fill plain.csv --time-axis rows -o plain
says "plain.csv: --time-axis rows: the label 'line 0' of row 1 is neither a time as ISO 8601 writes it nor a number"
check "and nothing was written" nothing_in plain
try 64 fill plain.csv --time-axis diagonal

# ---- season -----------------------------------------------------------------------------------------------------------
"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(8)
m, n = 480, 6
hour = np.arange(m)
phase, size = 2 * np.pi * random.random(n), 3 + random.random(n)
truth = 20 + size * np.sin(2 * np.pi * hour[:, None] / 24 + phase) + 0.5 * random.standard_normal((m, 1))
value = truth + 0.3 * random.standard_normal((m, n))
seen = random.random((m, n)) < 0.9
seen[200:248] = False
np.save("cycle.npy", truth)
with open("cycle.csv", "w") as wide, open("cycle.mtx", "w") as market:
    wide.write("time," + ",".join("w%d" % j for j in range(n)) + "\n")
    market.write("%%%%MatrixMarket matrix array real general\n%d %d\n" % (m, n))
    for i in range(m):
        cells = ["%.3f" % value[i, j] if seen[i, j] else "" for j in range(n)]
        wide.write("2024-03-%02dT%02d:00Z,%s\n" % (1 + i // 24, i % 24, ",".join(cells)))
    for j in range(n):
        market.writelines("%s\n" % ("%.3f" % value[i, j] if seen[i, j] else "nan") for i in range(m))
END
cat >outage.py <<'END'
import csv, sys
import numpy as np
truth = np.load("cycle.npy")
table = list(csv.reader(open(sys.argv[1] + "/filled.csv")))[1:]
got = np.array([[float(x) for x in line[1:]] for line in table])
print(np.sqrt(np.mean((got - truth)[200:248] ** 2)))
END
try 0 fill cycle.csv -o cycle-none
try 0 fill cycle.csv --season 24h -o cycle
check "the summary says it" grep -qx 'season     24 h (as asked)' err
holds cycle/run.json 'r["season"]["is_there"] and abs(r["season"]["cycles_per_step"][0] - 1 / 24) < 1e-12'
holds cycle/run.json 'r["files"]["season.mtx"] == "written" and r["options"]["season"] == "24h"'
check "two days without any cell are met with less than half of the error" \
    "$PYTHON" -c 'import sys; print(sys.argv); sys.exit(not float(sys.argv[1]) < 0.5 * float(sys.argv[2]))' \
    "$("$PYTHON" outage.py cycle)" "$("$PYTHON" outage.py cycle-none)"
cat >factors.py <<'END'
import csv, json
import numpy as np, scipy.io as io
read = lambda name: np.asarray(io.mmread("cycle/" + name + ".mtx"))
record = json.load(open("cycle/run.json"))
total = record["model"]["mean"] + read("row-offsets") + read("column-offsets").T
total = total + read("season-waves") @ read("season").T
if record["model"]["rank"] > 0:
    total = total + (read("left") * read("spectrum").ravel()) @ read("right").T
table = np.array([line[1:] for line in list(csv.reader(open("cycle/filled.csv")))[1:]], float)
rest = (table - total)[200:248]
# What the residual in time adds fades within the two days.
print(np.abs(rest[20:28]).max())
raise SystemExit(not np.abs(rest[20:28]).max() < 0.3)
END
check "the factors and the season make the estimates" "$PYTHON" factors.py
try 0 fill cycle.csv --season auto -o cycle-auto
check "auto finds the day" grep -q '^season     24 h' err
try 0 fill cycle.mtx --season 24 --time-axis rows -o cycle-steps
check "a number counts steps" grep -qx 'season     24 steps (as asked)' err
try 0 fill clock.csv --season auto -o clock
check "auto says when there is none" grep -qx 'season     none: no day, week or year stands out' err
cannot() { # SEASON SENTENCE
    try 64 fill cycle.csv --season "$1" -o refused
    says "--season: '$2"
}
cannot 24x "24x' has a unit that is not known; s, m, h, d, w or y was expected"
cannot daily "daily' is no season; a time such as 24h, 7d or 1y, or a number of steps, was expected"
cannot 24h, "' is no season; a time such as 24h, 7d or 1y, or a number of steps, was expected"
cannot 90m "90m' is shorter than two steps of the clock"
cannot 24h,1y "1y' is longer than the whole table"
try 64 fill cycle.mtx --season 24h --time-axis rows -o refused
says "--season: '24h' is a time, but the steps of this table have no length; a number of steps was expected"
try 64 fill cycle.mtx --season 24 -o refused
says "--season needs to know which side is in time: labels that are ISO 8601 times, or --time-axis"
check "nothing was written" nothing_in refused

# ---- weights ----------------------------------------------------------------------------------------------------------
"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(6)
m, n = 150, 30
truth = random.standard_normal((m, 2)) @ random.standard_normal((2, n))
sd_row, sd_cell = 0.1 * 10 ** random.random(m), 10 ** random.random((m, n))
value = truth + sd_row[:, None] * sd_cell * random.standard_normal((m, n))
seen = random.random((m, n)) < 0.6
np.save("truth.npy", truth)
with open("cells.csv", "w") as cells, open("bare.csv", "w") as bare, open("rows.csv", "w") as rows:
    cells.write("well,day,level,sd\n")
    bare.write("well,day,level\n")
    rows.write("well;sd\n")
    for i in range(m):
        rows.write("w%d;%.6g\n" % (i, sd_row[i]))
        for j in np.nonzero(seen[i])[0]:
            cells.write("w%d,d%d,%.9g,%.6g\n" % (i, j, value[i, j], sd_cell[i, j]))
            bare.write("w%d,d%d,%.9g\n" % (i, j, value[i, j]))
END
cat >error.py <<'END'
import csv, sys
import numpy as np
truth, square = np.load("truth.npy"), []
for line in csv.DictReader(open(sys.argv[1] + "/cells.csv")):
    square.append((float(line["estimate"]) - truth[int(line["row"][1:]), int(line["column"][1:])]) ** 2)
print(np.sqrt(np.mean(square)))
END
error_of() {
    "$PYTHON" error.py "$1"
}
try 0 fill bare.csv -o bare
try 0 fill cells.csv --row-weights rows.csv -o weighted
check "the summary says whose weights" grep -q '^weights    of cells and rows, from ' err
holds weighted/run.json 'r["weights"]["of_cells"] and r["weights"]["of_rows"] and not r["weights"]["of_columns"]'
holds weighted/run.json 'r["options"]["row-weights"] == "rows.csv" and r["weights"]["least"] < 0.1 < 10 < r["weights"]["most"]'
check "they lower the error on unseen cells to less than half" \
    "$PYTHON" -c 'import sys; print(sys.argv); sys.exit(not float(sys.argv[1]) < 0.5 * float(sys.argv[2]))' \
    "$(error_of weighted)" "$(error_of bare)"
cp weighted/cells.csv once.csv
try 0 fill cells.csv --row-weights rows.csv --threads 1 -o weighted
check "the same bytes for any number of threads" cmp once.csv weighted/cells.csv
sed 's/^\(w[0-9]*,d[0-9]*,[^,]*,\).*/\11/; s/sd$/weight/' cells.csv >equal.csv
try 0 fill equal.csv -o equal
check "equal weights change nothing" cmp equal/filled.csv bare/filled.csv
# Noise of columns from a third of the middle one to three times as much: learnt it serves nearly as well as told.
"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(1)
m, n = 300, 40
truth = random.standard_normal((m, 4)) @ random.standard_normal((4, n))
sd = 0.7 * 9 ** (random.random(n) - 0.5)
value = truth + sd * random.standard_normal((m, n))
seen = random.random((m, n)) < 0.4
np.savez("noise.npz", truth=truth, seen=seen)
with open("noise.mtx", "w") as market, open("noise.csv", "w") as told:
    market.write("%%%%MatrixMarket matrix array real general\n%d %d\n" % (m, n))
    for j in range(n):
        market.writelines("%s\n" % ("%.6f" % value[i, j] if seen[i, j] else "nan") for i in range(m))
        told.write("%d,%.6g\n" % (j + 1, sd[j] ** -2))
END
cat >noise.py <<'END'
import numpy as np, scipy.io as io
sown = np.load("noise.npz")
def error(place):
    estimate = np.asarray(io.mmread(place + "/filled.mtx"))
    return np.sqrt(np.mean((estimate - sown["truth"])[~sown["seen"]] ** 2))
print(error("noise-learnt"), error("noise-told"))
raise SystemExit(not error("noise-learnt") <= 1.03 * error("noise-told"))
END
try 0 fill noise.mtx --write filled -o noise-learnt
try 0 fill noise.mtx --write filled --column-weights noise.csv -o noise-told
check "noise of columns, learnt: at most 1.03 times the error of the fit that is told it" "$PYTHON" noise.py
for other in "--ridge 0.1" "--solver grassmann-cg"; do
    try 64 fill cells.csv $other -o refused
    says "weights are taken by the evidence fit alone: leave --solver and --ridge at auto"
done
try 66 fill bare.csv --column-weights missing -o refused
says 'missing: cannot be opened: No such file or directory'
sed 5s/.*/w3\;-1/ rows.csv >bad.csv
try 65 fill bare.csv --row-weights bad.csv -o refused
says "bad.csv: line 5: the standard deviation '-1' of row 'w3' is not positive; a positive number was expected"
check "nothing was written" nothing_in refused
finish
