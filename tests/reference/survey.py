# SPDX-License-Identifier: MIT
"""What survey names: every fault that was planted in a sown table and nothing else, and in clean tables nothing.

Faults come from `fescue sow --faults`, which records what it plants, in tables with scattered and run-shaped holes, of
different size and density, with and without effects, with and without labels. The scenes are clean but for what they
were sown with: late wells in the fen (known from the truth: the wells that have no cell for ten days), and tastings
that go with the liking in the cider panel. Prints TAP; seeds are in the texts.
"""
import csv
import gzip
import json
import os
import re
import subprocess
import sys
import tempfile

import numpy as np

FESCUE = os.environ.get("FESCUE", "build/fescue")
tests = failures = 0


def verdict(text, good, told=""):
    global tests, failures
    tests += 1
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text}")
    if not good:
        print("".join(f"# {line}\n" for line in told.splitlines()), end="")


def sow(place, *options):
    subprocess.run([FESCUE, "sow", "--quiet", "-o", place, *options], check=True)
    record = json.load(open(os.path.join(place, "sow.json"), encoding="utf-8"))
    name = next(n for n in os.listdir(place) if n.startswith("table"))
    return record, os.path.join(place, name)


def survey(table):
    text = subprocess.run([FESCUE, "survey", table], check=True, stdout=subprocess.PIPE, text=True).stdout
    return text, [" ".join(line.split()) for line in re.findall(r"(?ms)^  ! (.*?\.)$(?=\n  !|\n\n)", text)]


PATTERNS = {
    "late": (r"1 column starts late: (\S+) \(from (\S+)\)\.", lambda f, a, b: a == f["column"]),
    "stuck": (r"1 column is stuck at one value: (\S+) \(from (\S+) to \S+, \d+ times \S+\)\.",
              lambda f, a, b: a == f["column"] and b == f["from"]),
    "duplicate": (r"1 column is a copy of another one: (\S+) \(of (\S+)\)\.",
                  lambda f, a, b: {a, b} == {f["column"], f["of"]}),
    "spike": (r"1 cell is far from all others: (\S+) at (\S+) \(.*\)\.",
              lambda f, a, b: a == f["row"] and b == f["column"]),
}


def faults_check(place, number, options):
    record, table = sow(place, "--faults", "stuck,spike,duplicate,orphan,late", *options)
    text, noticed = survey(table)
    left = list(noticed)
    missed = []
    has_order = "long" not in options  # rows are in the order of the input, which there means nothing
    for fault in record["faults"]:
        if fault["kind"] in ("stuck", "late") and not has_order:
            continue
        if fault["kind"] == "orphan":
            found = re.search(r"^Apart from the rest: rows (.*), columns (.*)\.$", text, re.M)
            columns = set(found.group(2).split(", ")) if found else set()
            if not found or columns != set(fault["columns"]) or found.group(1).split(", ")[0] != fault["from"]:
                missed.append("orphan")
            continue
        pattern, agrees = PATTERNS[fault["kind"]]
        found = [line for line in left if (m := re.fullmatch(pattern, line)) and agrees(fault, m.group(1), m.group(2))]
        left = [line for line in left if line not in found]
        if len(found) != 1:
            missed.append(fault["kind"])
    verdict(f"faults {number}, {' '.join(options)}: {'all five' if has_order else 'the three that need no order'} are named, and nothing else",
            not missed and not left,
            f"missed: {missed}, left: {left}\n{text}")


def clean_check(place, number, options):
    _, table = sow(place, *options)
    text, noticed = survey(table)
    one = "hang together in one block" in text
    verdict(f"clean {number}, {' '.join(options)}: nothing is named", not noticed and one and "Nothing else is odd" in text,
            text)


def fen_check(place, seed):
    _, table = sow(place, "--scene", "fen-levels", "--seed", seed)
    rows = list(csv.reader(open(table, encoding="utf-8")))
    first = {name: next(t for t, row in enumerate(rows[1:]) if row[k] != "")
             for k, name in enumerate(rows[0]) if k > 0}
    late = {name for name, t in first.items() if t >= 240}
    text, noticed = survey(table)
    named = {name for line in noticed for name in re.findall(r"([\w-]+) \(from", line)}
    verdict(f"fen-levels, seed {seed}: the {len(late)} late wells and nothing else",
            named == late and len(noticed) == 1 and noticed[0].startswith(f"{len(late)} columns start late"), text)


def cider_check(place, seed):
    _, table = sow(place, "--scene", "cider-panel", "--seed", seed)
    text, noticed = survey(table)
    verdict(f"cider-panel, seed {seed}: nothing but that tasting goes with liking",
            all("columns of higher values have more cells" in line for line in noticed) and "--bounds " in text, text)
    return len(noticed)


def missing_check(place, seed, depends):
    """A slow series in hours, of which stretches are lost: when it is high, or at random."""
    rng = np.random.default_rng(seed)
    hours, wells = 800, 20
    level = np.cumsum(rng.normal(size=(hours, 1)), 0) * 0.3 + np.cumsum(rng.normal(size=(hours, wells)), 0) * 0.7
    level -= level.mean(0)
    seen = np.ones(level.shape, bool)
    for _ in range(30 * wells):
        t, w = rng.integers(1, hours), rng.integers(wells)
        if not depends or level[t, w] > np.quantile(level[:, w], 0.6):
            seen[t:t + rng.integers(1, 6), w] = False
    with open(place, "w", encoding="utf-8") as file:
        file.write("time," + ",".join(f"w{w}" for w in range(wells)) + "\n")
        for t in range(hours):
            cells = [f"{level[t, w]:.2f}" if seen[t, w] else "" for w in range(wells)]
            file.write(f"2024-{3 + t // 24 // 30:02d}-{t // 24 % 30 + 1:02d}T{t % 24:02d}:00,{','.join(cells)}\n")
    text, noticed = survey(place)
    said = [line for line in noticed if "the last value before a hole is higher" in line]
    verdict(f"levels that go missing {'when they are high' if depends else 'at random'}, seed {seed}: "
            f"{'a warning with the statistic' if depends else 'no warning'}",
            (len(said) == 1 and "z = " in said[0]) if depends else "goes with the value:" not in text, text)


def main():
    cases = [[], ["--holes", "runs", "--seen", "0.6"], ["--seen", "0.7", "--rows", "600", "--columns", "40"],
             ["--offset-scale", "1", "--seen", "0.5"], ["--spectrum", "geometric:50", "--noise", "0.5"]]
    shapes = ["wide", "long", "matrix-market"]
    with tempfile.TemporaryDirectory() as folder:
        for k in range(10):
            options = [*cases[k % 5], "--seed", str(k + 1), "--shape", shapes[k % 3]]
            faults_check(os.path.join(folder, f"faults{k}"), k, options)
            clean_check(os.path.join(folder, f"clean{k}"), k, options)
        for seed in "123":
            fen_check(os.path.join(folder, "fen" + seed), seed)
        warned = sum(cider_check(os.path.join(folder, "cider" + seed), seed) for seed in "123")
        verdict("and that is said at least once", warned > 0)
        for seed in range(4):
            missing_check(os.path.join(folder, "missing.csv"), seed, True)
            missing_check(os.path.join(folder, "missing.csv"), seed, False)
    print(f"1..{tests}")
    return failures > 0


if __name__ == "__main__":
    sys.exit(main())
