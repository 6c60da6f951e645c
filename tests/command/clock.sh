#!/bin/sh
# SPDX-License-Identifier: MIT
#
# What the order of rows that are times is worth. The same readings with their rows in any order and their true times
# are filled alike, each row where the user had it; readings whose times were dealt out at random lose nothing against a
# fill that is told of no clock. And what a clock is worth to a solver that knows of none.
. "$(dirname "$0")/library"

"$PYTHON" - <<'END'
import numpy as np
random = np.random.default_rng(21)
m, n, rank = 400, 9, 2
u, r = np.zeros((m, rank)), np.zeros((m, n))
u[0], r[0] = random.standard_normal(rank), random.standard_normal(n)
for i in range(1, m):
    u[i] = 0.9 * u[i - 1] + np.sqrt(1 - 0.81) * random.standard_normal(rank)
    r[i] = 0.8 * r[i - 1] + 0.6 * random.standard_normal(n)
truth = u @ random.standard_normal((rank, n)) + 0.6 * r + 3 * random.standard_normal(n)
value = truth + 0.2 * random.standard_normal((m, n))
seen = random.random((m, n)) < 0.75
seen[100:104] = False
hour = ["2024-03-%02dT%02d:00Z" % (1 + i // 24, i % 24) for i in range(m)]
def write(name, rows, labels):
    with open(name + ".csv", "w") as file:
        file.write("time," + ",".join("w%d" % j for j in range(n)) + "\n")
        for i, label in zip(rows, labels):
            file.write(label + "," + ",".join("%.5f" % value[i, j] if seen[i, j] else "" for j in range(n)) + "\n")
mixed = random.permutation(m)
np.savez("clock.npz", truth=truth, seen=seen, mixed=mixed)
write("sorted", range(m), hour)
write("mixed", mixed, [hour[i] for i in mixed])
write("dealt", mixed, hour)
END
cat >clock.py <<'END'
import sys
import numpy as np
sown = np.load("clock.npz")
truth, seen, mixed = sown["truth"], sown["seen"], sown["mixed"]
def read(place, rows):
    estimate = np.empty(truth.shape)
    with open(place + "/filled.csv") as file:
        lines = [line.rstrip("\n").split(",") for line in file][1:]
    with open(place + ".csv" if place in ("sorted", "mixed") else "dealt.csv") as file:
        asked = [line.split(",")[0] for line in file][1:]
    assert [line[0] for line in lines] == asked, "rows are not where they were"
    estimate[rows] = [[float(x) for x in line[1:]] for line in lines]
    return estimate
def read_sorted(place):
    lines = np.genfromtxt(place + "/filled.csv", delimiter=",", skip_header=1)
    return lines[:, 1:]
def error(estimate):
    return np.sqrt(np.mean((estimate - truth)[~seen] ** 2))
if sys.argv[1] == "order":
    one, other = read("sorted", np.arange(len(truth))), read("mixed", mixed)
    apart = np.sqrt(np.mean((one - other)[~seen] ** 2))
    print("# apart", apart, "errors", error(one), error(other))
    raise SystemExit(not apart <= 0.01 * error(one))
if sys.argv[1] == "kriged":
    some = ~seen
    some[100:104] = False # nothing at all was seen there
    kriged, plain = [np.sqrt(np.mean((read_sorted(p) - truth)[some] ** 2)) for p in ("kriged", "sorted")]
    print("# kriged", kriged, "plain", plain)
    raise SystemExit(not kriged <= 0.9 * plain)
with_clock, without = error(read("dealt-clock", mixed)), error(read("dealt-none", mixed))
print("# with a clock that means nothing", with_clock, "without", without)
raise SystemExit(not with_clock <= 1.01 * without)
END
for table in sorted mixed; do
    try 0 fill $table.csv -o $table --folds 0 --seed 3
    check "$table: the model follows time" grep -q '"used": true' $table/run.json
done
check "the order of the rows moves estimates by at most a hundredth of their error" "$PYTHON" clock.py order
# A solver that knows of no clock: what it leaves is kriged.
try 0 fill sorted.csv -o sorted --folds 0 --solver grassmann-cg
check "the record says that kriging follows time" grep -q '"by": "kriging"' sorted/run.json
check "so does the summary" grep -q 'that is with time, by kriging what the fit leaves; low rank alone: RMSE' err
cp -r sorted kriged
try 0 fill sorted.csv -o sorted --folds 0 --solver grassmann-cg --time-axis none
check "kriging takes at least a tenth of the error" "$PYTHON" clock.py kriged
try 0 fill dealt.csv -o dealt-clock --folds 0
try 0 fill dealt.csv -o dealt-none --folds 0 --time-axis none
check "times dealt out at random cost at most one per cent" "$PYTHON" clock.py dealt
finish
