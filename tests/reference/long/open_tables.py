#!/usr/bin/python3
# SPDX-License-Identifier: MIT
#
# Open tables out of Debian's packages: the error of `fescue fill`, no option set but --bounds for ratings, on cells that
# this test hides, as a ratio to a ridge alternation with validated rank and ridge that is written here, and for the
# lecture ratings to R's lmer on the same cells.
#
#   PM10 (r-cran-spacetime, air), wind (r-cran-gstat, wind), ozone (r-cran-fields, ozone2), NOx (r-cran-robustbase,
#   ambientNOxCH), votes (r-cran-pscl, s109: yea 1, nay 0), lecture ratings (r-cran-lme4, InstEval)
#
# Nothing of them is kept. Hidden: a tenth of the observed cells, scattered; seeds 101, 102, 103. Folds are for the
# announced error and bear on no estimate, so there are none.
import os
import subprocess
import sys
import tempfile

import numpy as np

FESCUE = os.environ.get("FESCUE", "build/fescue")
PACKAGES = ["r-base-core"] + ["r-cran-" + p for p in ("spacetime", "gstat", "fields", "robustbase", "pscl", "lme4")]
SEEDS = (101, 102, 103)
# name: (largest ratio to the ridge alternation, arguments)
TABLES = {
    "votes": (1.0, ["--bounds", "0:1"]),
    "pm10": (0.94, []),
    "wind": (0.97, []),
    "ozone": (1.0, []),
    "nox": (1.0, []),
}
EXPORT = """
out <- function(m, name) write.table(m, paste0(name, ".csv"), sep=",", na="nan", row.names=FALSE, col.names=FALSE)
suppressMessages({library(spacetime); library(gstat); library(fields); library(robustbase); library(pscl); library(lme4)})
data(air); out(t(air), "pm10")
data(wind, package="gstat"); out(as.matrix(wind[, 4:15]), "wind")
data(ozone2); out(ozone2$y, "ozone")
data(ambientNOxCH); out(as.matrix(ambientNOxCH[, -1]), "nox")
data(s109); v <- s109$votes; w <- matrix(NA, nrow(v), ncol(v)); w[v %in% 1:3] <- 1; w[v %in% 4:6] <- 0; out(w, "votes")
data(InstEval); out(cbind(as.integer(InstEval$s), as.integer(InstEval$d), InstEval$y), "ratings")
"""
LMER = """
suppressMessages(library(lme4))
kept <- read.csv("kept.csv"); hidden <- read.csv("hidden.csv")
kept$s <- factor(kept$s); kept$d <- factor(kept$d)
fit <- lmer(y ~ 1 + (1 | s) + (1 | d), kept)
p <- predict(fit, newdata = transform(hidden, s = factor(s, levels(kept$s)), d = factor(d, levels(kept$d))),
             allow.new.levels = TRUE)
cat(sqrt(mean((pmin(pmax(p, 1), 5) - hidden$y)^2)))
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


def hide(table, seed):
    """A tenth of the observed cells, scattered, never the last of a row or column."""
    rng = np.random.default_rng(seed)
    seen = ~np.isnan(table)
    hidden = seen & (rng.random(table.shape) < 0.1)
    kept = seen & ~hidden
    hidden &= (kept.sum(1) > 0)[:, None] & (kept.sum(0) > 0)[None, :]
    return seen & ~hidden, hidden


def fill_wide(table, kept, arguments, folder):
    path = os.path.join(folder, "kept.csv")
    with open(path, "w", encoding="ascii") as file:
        file.write("," + ",".join(f"c{j}" for j in range(table.shape[1])) + "\n")
        for i, row in enumerate(table):
            file.write(f"r{i}," + ",".join(repr(float(x)) if k else "" for x, k in zip(row, kept[i])) + "\n")
    out = os.path.join(folder, "out")
    subprocess.run([FESCUE, "fill", path, "-o", out, "--quiet", "--write", "filled", "--folds", "0", *arguments],
                   check=True)
    return np.genfromtxt(os.path.join(out, "filled.csv"), delimiter=",", skip_header=1)[:, 1:]


def two_way(table, kept, ridge=3.0):
    """Mean and ridge row and column effects, by alternation to convergence."""
    mean = table[kept].mean()
    a, b = np.zeros(table.shape[0]), np.zeros(table.shape[1])
    z = np.where(kept, table - mean, 0)
    for _ in range(50):
        a = (z - kept * b).sum(1) / (kept.sum(1) + ridge)
        b = (z - kept * a[:, None]).sum(0) / (kept.sum(0) + ridge)
    return mean + a[:, None] + b


def solve_side(z, kept, other, ridge):
    """Ridge least squares of every row on `other`, rows grouped so that matmul and solve are batched."""
    rank = other.shape[1]
    outer = (other[:, :, None] * other[:, None, :]).reshape(len(other), -1)
    gram = (kept.astype(float) @ outer).reshape(-1, rank, rank) + ridge * np.eye(rank)
    return np.linalg.solve(gram, (z @ other)[:, :, None])[:, :, 0]


def alternate(table, kept, rank, ridge, sweeps=40):
    base = two_way(table, kept)
    z = np.where(kept, table - base, 0)
    rng = np.random.default_rng(7)
    v = rng.normal(size=(table.shape[1], rank))
    for _ in range(sweeps):
        u = solve_side(z, kept, v, ridge)
        v = solve_side(z.T, kept.T, u, ridge)
        u, r = np.linalg.qr(u)  # balance
        left, s, right = np.linalg.svd(r @ v.T, full_matrices=False)
        u, v = u @ left * np.sqrt(s), right.T * np.sqrt(s)
    return base + u @ v.T


def validated_alternation(table, kept, seed):
    inner, probe = hide(np.where(kept, table, np.nan), seed + 1000)
    spread = np.std((table - two_way(table, inner))[inner])
    best = (np.inf, 0, 0)
    for rank in range(1, min(11, min(table.shape))):
        for share in (0.1, 0.3, 1.0, 3.0, 10.0):
            guess = alternate(table, inner, rank, share * spread, 15)
            best = min(best, (np.sqrt(np.mean((guess - table)[probe] ** 2)), rank, share * spread))
    return alternate(table, kept, best[1], best[2])


def rmse(guess, table, hidden):
    return np.sqrt(np.mean((guess - table)[hidden] ** 2))


def ratings(folder):
    cells = np.genfromtxt(os.path.join(folder, "ratings.csv"), delimiter=",")
    ours, theirs = [], []
    for seed in SEEDS:
        hidden = np.random.default_rng(seed).random(len(cells)) < 0.1
        for name, part in (("kept", ~hidden), ("hidden", hidden)):
            np.savetxt(os.path.join(folder, name + ".csv"), cells[part], "s%d,d%d,%d", header="s,d,y", comments="")
        out = os.path.join(folder, "out")
        subprocess.run(
            [FESCUE, "fill", os.path.join(folder, "kept.csv"), "-o", out, "--quiet", "--write", "cells", "--bounds", "1:5"],
            check=True,
        )
        guess = {}
        with open(os.path.join(out, "cells.csv"), encoding="ascii") as file:
            next(file)
            for line in file:
                row, column, estimate = line.split(",")[:3]
                guess[row, column] = float(estimate)
        known = [(x[2], guess.get(("s%d" % x[0], "d%d" % x[1]))) for x in cells[hidden]]
        errors = [y - (g if g is not None else cells[~hidden, 2].mean()) for y, g in known]
        ours.append(np.sqrt(np.mean(np.square(errors))))
        done = subprocess.run(["Rscript", "-e", LMER], cwd=folder, check=True, capture_output=True, text=True)
        theirs.append(float(done.stdout))
    return np.mean(ours), np.mean(theirs)


def main():
    failed, number = 0, 0
    with tempfile.TemporaryDirectory() as folder:
        data_export(folder)
        for name, (most, arguments) in TABLES.items():
            table = np.genfromtxt(os.path.join(folder, name + ".csv"), delimiter=",")
            ours, theirs = [], []
            for seed in SEEDS:
                kept, hidden = hide(table, seed)
                ours.append(rmse(fill_wide(table, kept, arguments, folder), table, hidden))
                theirs.append(rmse(validated_alternation(table, kept, seed), table, hidden))
            ratio = np.mean(ours) / np.mean(theirs)
            number += 1
            good = ratio <= most
            failed += not good
            print(
                f"{'ok' if good else 'not ok'} {number} - {name}: RMSE {np.mean(ours):.4g}, "
                f"ridge alternation {np.mean(theirs):.4g}, ratio {ratio:.3f}, at most {most}",
                flush=True,
            )
        ours, theirs = ratings(folder)
        good = ours <= 1.003 * theirs
        failed += not good
        print(
            f"{'ok' if good else 'not ok'} {number + 1} - lecture ratings: RMSE {ours:.4f}, lmer {theirs:.4f}, "
            f"ratio {ours / theirs:.4f}, at most 1.003"
        )
    return 1 if failed else 0


sys.exit(main())
