#!/usr/bin/python3
# SPDX-License-Identifier: MIT
#
# Do the announced error and the intervals keep their word? Twenty sown tables with scattered holes and twenty with gaps
# (runs and late starts, with and without a slow movement of every column's own), three noise levels, normal and heavy
# noise. `fescue sow --readings` writes what the unseen cells would have read; nothing of it is shown to `fescue fill`.
#
#   coverage    of intervals at 0.5, 0.8, 0.9, 0.95, one run each
#   support     quarters by 1/row_support + 1/column_support
#   oracle      the interval of one who knows the noise, the factors of the other side, and no more: half-width
#               z sigma sqrt(1 + lev), lev from least squares on the true factors (of both sides, added)
#   error       RMSE over the unseen readings against the announced one
import csv
import json
import os
import subprocess
import sys
import tempfile

import numpy as np
from scipy.stats import norm

FESCUE = os.environ.get("FESCUE", "build/fescue")
LEVELS = ("0.5", "0.8", "0.9", "0.95")
ONLY = os.environ.get("ONLY", "").split()  # some of the tables: gaps9 scattered3
SEEDS = int(os.environ.get("SEEDS", "0"))  # other tables of the same kinds: 1000, 2000, ...


def tables():
    for k in range(20):
        noise, shape = (0.1, 0.3, 1.0)[k % 3], ("normal", "heavy")[k // 2 % 2]
        size = [(400, 200, 4, 0.3), (300, 150, 3, 0.25), (1000, 80, 3, 0.3), (250, 250, 5, 0.4)][k % 4]
        yield "scattered", size, noise, shape, ["--holes", "scattered"], k
    for k in range(20):
        noise, shape = (0.1, 0.3, 1.0)[k % 3], ("normal", "heavy")[k // 2 % 2]
        size = [(1000, 60, 3, 0.7), (800, 80, 4, 0.6), (1500, 40, 2, 0.8), (600, 100, 3, 0.75)][k % 4]
        holes = ["--holes", "late-starts" if k % 5 == 4 else "runs"]
        if k % 5 == 4:  # enough columns that a quarter of support is not the luck of one or two that began last
            size = (600, 150, 3, 0.7)
        yield "gaps", size, noise, shape, holes + (["--wander", "0.3"] if k % 2 == 1 else []), k


def array(path):
    with open(path, encoding="ascii") as file:
        lines = [x for x in file if x[0] != "%"]
    m, n = map(int, lines[0].split())
    return np.array(lines[1:], float).reshape(n, m).T


def oracle(folder, rank, sigma, row, column, seen):
    """Half-widths in standard deviations of the noise, over the unseen cells."""
    u, s, vt = np.linalg.svd(array(os.path.join(folder, "truth.mtx")), full_matrices=False)
    u, v = u[:, :rank], vt[:rank].T
    at_row = np.linalg.inv(np.einsum("ij,jk,jl->ikl", seen, v, v) + 1e-12 * np.eye(rank))
    at_column = np.linalg.inv(np.einsum("ij,ik,il->jkl", seen, u, u) + 1e-12 * np.eye(rank))
    lev = np.einsum("ck,ckl,cl->c", v[column], at_row[row], v[column])
    lev += np.einsum("ck,ckl,cl->c", u[row], at_column[column], u[row])
    return sigma * np.sqrt(1 + lev)


def judge(kind, size, noise, shape, holes, number, folder):
    m, n, rank, seen_share = size
    seed = SEEDS + number + (100 if kind == "gaps" else 0)
    sow = [FESCUE, "sow", "-o", folder, "-q", "--readings", "--truth", "cells", "--rows", m, "--columns", n, "-r", rank]
    sow += ["--seen", seen_share, "--noise", noise, "--noise-shape", shape, "--seed", seed]
    subprocess.run([str(x) for x in sow + holes], check=True)
    out = os.path.join(folder, "out")
    fill = [FESCUE, "fill", os.path.join(folder, "table.mtx"), "-o", out, "-q", "--write", "cells"]
    half = {}
    for level in LEVELS:
        subprocess.run(fill + ["--interval", level] + os.environ.get("FILL", "").split(), check=True)
        with open(os.path.join(out, "cells.csv"), encoding="ascii") as file:
            cells = list(csv.DictReader(file))
        half[level] = np.array([float(x["upper"]) - float(x["lower"]) for x in cells]) / 2
    with open(os.path.join(out, "run.json"), encoding="utf-8") as file:
        said = json.load(file)["judgement"]
    row = np.array([int(x["row"]) - 1 for x in cells])
    column = np.array([int(x["column"]) - 1 for x in cells])
    take = lambda name: np.array([float(x[name]) for x in cells])
    readings = array(os.path.join(folder, "readings.mtx"))
    error = np.abs(take("estimate") - readings[row, column])
    thin = 1 / np.maximum(take("row_support"), 0.5) + 1 / np.maximum(take("column_support"), 0.5)
    seen = np.ones((m, n))
    seen[row, column] = 0
    result = {"kind": kind, "said": said, "true": np.sqrt(np.mean(error**2)), "cover": {}, "worst": 0, "name": ""}
    result["name"] = f"{kind} {m}x{n} r{rank} noise {noise} {shape} {' '.join(holes[1:])}"
    quarter = np.searchsorted(np.quantile(thin, (0.25, 0.5, 0.75)), thin)
    for level in LEVELS:
        inside = error <= half[level]
        result["cover"][level] = inside.mean() - float(level)
        for q in range(4):
            if (quarter == q).sum() > 0:
                result["worst"] = max(result["worst"], abs(inside[quarter == q].mean() - float(level)))
    result["width"] = None
    if shape == "normal" and "--wander" not in holes:
        z = norm.ppf(0.95)
        result["width"] = np.mean(half["0.9"])
        result["width"] /= np.mean(np.minimum(oracle(folder, rank, noise, row, column, seen), np.sqrt(1 + noise**2))) * z
    return result


def main():
    number, failed = 0, 0

    def check(good, text):
        nonlocal number, failed
        number += 1
        failed += not good
        print(f"{'ok' if good else 'not ok'} {number} - {text}", flush=True)

    results = []
    with tempfile.TemporaryDirectory() as folder:
        for table in tables():
            if not ONLY or table[0] + str(table[-1]) in ONLY:
                r = judge(*table, folder)
                results.append(r)
                ratio = r["said"]["rmse"] / r["true"]
                s = r["said"]
                other = [s[x] / r["true"] if s[x] else 0 for x in ("rmse_scattered", "rmse_shaped", "rmse_by_leverage", "rmse_by_distance", "rmse_by_variance")]
                print(f"# {r['name']} ({s['holdout_shape']}): announced/true {ratio:.3f} [scattered, shaped, lev, dist, var"
                      f" {' '.join('%.3f' % x for x in other)}], band {s['rmse_low']/r['true']:.3f}-{s['rmse_high']/r['true']:.3f}"
                      f" off {' '.join('%+.3f' % r['cover'][x] for x in LEVELS)} quarter {r['worst']:.3f}"
                      f" width {r['width'] and round(r['width'], 3)}", flush=True)
    for kind, least in (("scattered", 18), ("gaps", 16)):
        of = [r for r in results if r["kind"] == kind]
        if not of:
            continue
        ratios = np.array([r["said"]["rmse"] / r["true"] for r in of])
        near = int((np.abs(ratios - 1) <= 0.05).sum())
        check(near >= least * len(of) / 20, f"{kind}: announced within 5 % of the true error in {near} of {len(of)}")
        check(abs(ratios.mean() - 1) <= 0.03, f"{kind}: announced over true {ratios.mean():.4f} on average")
        off = max(abs(x) for r in of for x in r["cover"].values())
        check(off <= 0.02, f"{kind}: coverage off by {off:.3f} at most")
        worst = max(r["worst"] for r in of)
        check(worst <= 0.05, f"{kind}: coverage in a quarter of support off by {worst:.3f} at most")
        widths = [r["width"] for r in of if r["width"]]
        if widths:
            check(max(widths) <= 1.15, f"{kind}: width over the oracle's {max(widths):.3f} at most, normal noise")
    moving = [r for r in results if "--wander" in r["name"]]
    if moving:
        ratio = np.mean([r["said"]["rmse_scattered"] / r["true"] for r in moving])
        check(ratio < 0.95, f"gaps: scattered cells alone would have announced {ratio:.3f} of the true error where columns wander")
    return 1 if failed else 0


sys.exit(main())
