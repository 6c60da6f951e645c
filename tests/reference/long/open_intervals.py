#!/usr/bin/python3
# SPDX-License-Identifier: MIT
#
# The announced error and the intervals on open tables out of Debian's packages, against cells that this test hides and
# never shows: a tenth of what was observed, scattered and, for sensors, in gaps (stations in random order get another
# station's missing days, at the same days or moved; where nothing is missing, runs of 5 to 40 days).
#
#   PM10 (r-cran-spacetime, air), wind (r-cran-gstat, wind), ozone (r-cran-fields, ozone2): days x stations
#   lecture ratings (r-cran-lme4, InstEval)
#
# OPEN, a folder with these tables exported already, spares the export; nothing of them is kept. Announced is over the
# cells that are missing in what fill gets, of which the hidden ones are a part: so fill is asked for the error of just
# these by what cells.csv says of each, the half-width over the quantile being a standard deviation up to a constant.
import csv
import json
import os
import subprocess
import sys
import tempfile

import numpy as np

FESCUE = os.environ.get("FESCUE", "build/fescue")
PACKAGES = ["r-base-core"] + ["r-cran-" + p for p in ("spacetime", "gstat", "fields", "lme4")]
NAMES = os.environ.get("NAMES", "ozone wind pm10 ratings").split()
EXPORT = """
out <- function(m, name) write.table(m, paste0(name, ".csv"), sep=",", na="nan", row.names=FALSE, col.names=FALSE)
suppressMessages({library(spacetime); library(gstat); library(fields); library(lme4)})
data(air); out(t(air), "pm10")
data(wind, package="gstat"); out(as.matrix(wind[, 4:15]), "wind")
data(ozone2); out(ozone2$y, "ozone")
data(InstEval); write.csv(data.frame(s=InstEval$s, d=InstEval$d, y=InstEval$y), "inst.csv", row.names=FALSE, quote=FALSE)
"""


def data_export(folder):
    if subprocess.run(["dpkg-query", "-W", *PACKAGES], capture_output=True).returncode != 0:
        subprocess.run(["apt-get", "update", "-q"], capture_output=True)
        subprocess.run(
            ["apt-get", "install", "-q", "-y", "--no-install-recommends", *PACKAGES],
            check=True,
            capture_output=True,
            env={**os.environ, "DEBIAN_FRONTEND": "noninteractive"},
        )
    subprocess.run(["Rscript", "-e", EXPORT], cwd=folder, check=True, capture_output=True)


def hide_scattered(seen, rng):
    hidden = seen & (rng.random(seen.shape) < 0.1)
    kept = seen & ~hidden
    hidden &= (kept.sum(1) > 0)[:, None] & (kept.sum(0) > 0)[None, :]
    return hidden


def hide_gaps(seen, rng):
    """Runs that are written here, apart from those of the program."""
    days, stations = seen.shape
    hidden, wanted = np.zeros_like(seen), 0.1 * seen.sum()
    while hidden.sum() < wanted:
        j, donor = rng.integers(stations, size=2)
        gap = ~np.roll(seen[:, donor], rng.integers(days) * rng.integers(2))
        if gap.sum() < 0.005 * days:
            gap = np.zeros(days, bool)
            for _ in range(4):
                start, length = rng.integers(days), rng.integers(5, 41)
                gap[start : start + length] = True
        mine = seen[:, j] & gap & ~hidden[:, j]
        if j != donor and 0 < mine.sum() + hidden[:, j].sum() <= 0.7 * seen[:, j].sum():
            hidden[:, j] |= mine
    hidden &= (seen & ~hidden).any(1)[:, None]
    return hidden


def fill(path, out, arguments):
    subprocess.run([FESCUE, "fill", path, "-o", out, "-q", "--write", "cells", *arguments], check=True)
    with open(os.path.join(out, "run.json"), encoding="utf-8") as file:
        said = json.load(file)
    with open(os.path.join(out, "cells.csv"), encoding="utf-8") as file:
        return said, list(csv.DictReader(file))


def sensors(folder, name, shape, seed):
    table = np.genfromtxt(os.path.join(folder, name + ".csv"), delimiter=",")
    seen = ~np.isnan(table)
    rng = np.random.default_rng(seed)
    hidden = (hide_gaps if shape == "gaps" else hide_scattered)(seen, rng)
    path = os.path.join(folder, "kept.csv")
    first = np.datetime64("1998-01-01")
    with open(path, "w", encoding="ascii") as file:
        file.write("day," + ",".join(f"c{j}" for j in range(table.shape[1])) + "\n")
        for i, row in enumerate(table):
            kept = seen[i] & ~hidden[i]
            file.write(f"{first + i}," + ",".join(repr(float(x)) if k else "" for x, k in zip(row, kept)) + "\n")
    day = {str(first + i): i for i in range(len(table))}
    said, cells = fill(path, os.path.join(folder, "out"), os.environ.get("FILL", "").split())
    place = [(day[x["row"]], int(x["column"][1:])) for x in cells]
    return said, [(float(x["estimate"]), float(x["lower"]), float(x["upper"]), table[p]) for x, p in zip(cells, place) if hidden[p]], cells


def ratings(folder, seed):
    with open(os.path.join(folder, "inst.csv"), encoding="ascii") as file:
        lines = file.read().split("\n")[1:]
    cells = [x.split(",") for x in lines if x]
    hidden = np.random.default_rng(seed).random(len(cells)) < 0.1
    path = os.path.join(folder, "kept.csv")
    with open(path, "w", encoding="ascii") as file:
        file.write("s,d,y\n" + "".join(",".join(x) + "\n" for x, h in zip(cells, hidden) if not h))
    said, told = fill(path, os.path.join(folder, "out"), ["--format", "long"])
    at = {(x["row"], x["column"]): x for x in told}
    pairs = [(at.get((c[0], c[1])), float(c[2])) for c, h in zip(cells, hidden) if h]
    return said, [(float(x["estimate"]), float(x["lower"]), float(x["upper"]), y) for x, y in pairs if x is not None], told


def main():
    number, failed = 0, 0

    def check(good, text):
        nonlocal number, failed
        number += 1
        failed += not good
        print(f"{'ok' if good else 'not ok'} {number} - {text}", flush=True)

    with tempfile.TemporaryDirectory() as work:
        folder = os.environ.get("OPEN", work)
        if folder == work:
            data_export(work)
        else:
            for name in ("pm10", "wind", "ozone", "inst"):
                os.symlink(os.path.join(folder, name + ".csv"), os.path.join(work, name + ".csv"))
        for name in NAMES:
            for shape in ("scattered",) if name == "ratings" else ("scattered", "gaps"):
                said, outer, cells = ratings(work, 5) if name == "ratings" else sensors(work, name, shape, 5)
                outer = np.array(outer)
                j = said["judgement"]
                error = np.sqrt(np.mean((outer[:, 0] - outer[:, 3]) ** 2))
                # over the hidden cells: the announced mean square, shared out by the variances that cells.csv implies
                width = lambda x: np.mean((np.asarray(x, float)) ** 2)
                all_widths = width([(float(c["upper"]) - float(c["lower"])) for c in cells])
                part = np.sqrt(width(outer[:, 2] - outer[:, 1]) / all_widths)
                announced, low, high = (part * j[k] for k in ("rmse", "rmse_low", "rmse_high"))
                inside = np.mean((outer[:, 3] >= outer[:, 1]) & (outer[:, 3] <= outer[:, 2]))
                print(f"# {name} {shape}: outer {error:.4g} on {len(outer)}, announced {j['rmse']:.4g} over all, {announced:.4g} over these"
                      f" ({announced / error:.3f}, band {low / error:.3f}-{high / error:.3f}), shape {j['holdout_shape']}, folds {j['scattered_folds']}+{j['shaped_folds']}"
                      f" warm {j['warm']}, scattered {j['rmse_scattered']:.4g}, CPU {said['timing']['seconds_of_processors']:.1f} s", flush=True)
                check(abs(announced / error - 1) <= 0.1 or low <= error <= high, f"{name} {shape}: announced {announced:.4g} ({low:.4g} to {high:.4g}), outer {error:.4g}")
                least, most = (0.85, 0.95) if shape == "gaps" else (0.87, 0.93)
                check(least <= inside <= most, f"{name} {shape}: 90 % intervals cover {inside:.3f} of the outer cells")
                if name == "ratings":
                    check(said["model"]["rank"] == 0, "ratings: rank 0 is not beaten")
    return 1 if failed else 0


sys.exit(main())
