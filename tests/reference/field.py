# SPDX-License-Identifier: MIT
"""Gaussian fields over a graph (diagonal plus strength times Laplacian) against SciPy and NumPy:

    solution    scipy.sparse.linalg.spsolve, to 1e-10
    variances   the diagonal of numpy.linalg.inv of the dense matrix, to 1e-10
    energy      of the solution given back, the sum over pairs of strength and squared difference, to 1e-10

Graphs: a grid, a path, a star, random pairs of unequal strengths, pieces that hang together by nothing, a full graph. One
analysis a graph, ten factors: diagonals over many sizes, strengths from 0 to 1e4. Prints TAP.
"""
import os
import shlex
import subprocess
import sys
import tempfile

import numpy as np
import scipy.sparse as sp
import scipy.sparse.linalg as spl

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
BUILD = os.path.join(ROOT, os.environ.get("BUILD", "build"))
LIBRARIES = "-lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -lisal -lz -lm -pthread"
tests = failures = 0


def check(text, error, allowed=1e-10):
    """One TAP line; a NaN fails."""
    global tests, failures
    tests += 1
    good = bool(error <= allowed)
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text} (error {error:.1e}, allowed {allowed:.0e})")


def build_driver(folder):
    driver = os.path.join(folder, "field_driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "field_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


def graphs(random):
    grid = [(i, i + 1) for i in range(399) if (i + 1) % 20] + [(i, i + 20) for i in range(380)]
    loose = {tuple(sorted(random.choice(300, 2, replace=False))) for _ in range(900)}
    pieces = [(i, i + 1) for i in range(0, 90) if i % 7]
    yield "a grid", 400, grid, np.ones(len(grid))
    yield "a path", 200, [(i, i + 1) for i in range(199)], random.uniform(0.5, 2, 199)
    yield "a star", 50, [(0, i) for i in range(1, 50)], np.ones(49)
    yield "random pairs", 300, list(loose), 10 ** random.uniform(-3, 1, len(loose))
    yield "pieces", 100, pieces, np.ones(len(pieces))
    yield "a full graph", 40, [(i, j) for j in range(40) for i in range(j)], random.uniform(0, 1, 780)


def worst(got, want):
    return float(np.max(np.abs(got - want)) / np.max(np.abs(want)))


def graph_check(driver, random, name, n, pairs, strength):
    pairs = np.array(pairs)
    order = np.lexsort((pairs[:, 0], pairs[:, 1]))
    pairs, strength = pairs[order], strength[order]
    one_way = sp.coo_matrix((strength, (pairs[:, 0], pairs[:, 1])), shape=(n, n))
    weights = (one_way + one_way.T).tocsc()
    laplacian = sp.diags(np.asarray(weights.sum(0)).ravel()) - weights
    systems = [(pull, 10 ** random.uniform(-2, 2, n), random.standard_normal(n))
               for pull in (0, 1e-4, 0.01, 0.1, 1, 3, 10, 100, 1e3, 1e4)]
    data = np.concatenate([[n, len(pairs)], np.column_stack([pairs, strength]).ravel(),
                           *[np.concatenate([[s], d, b]) for s, d, b in systems]]).astype("f8").tobytes()
    got = np.frombuffer(subprocess.run([driver], input=data, stdout=subprocess.PIPE, check=True).stdout)
    errors = np.zeros(3)
    for row, (pull, diagonal, side) in zip(got.reshape(len(systems), 2 * n + 1), systems):
        matrix = (sp.diags(diagonal) + pull * laplacian).tocsc()
        x = spl.spsolve(matrix, side)
        energy = np.sum(strength * (row[pairs[:, 0]] - row[pairs[:, 1]]) ** 2)
        errors = np.maximum(errors, [worst(row[:n], x), worst(row[n:-1], np.diag(np.linalg.inv(matrix.toarray()))),
                                     abs(row[-1] - energy) / energy])
    for what, error in zip(("solutions", "variances", "energies"), errors):
        check(f"{name}, ten systems: {what}", error)


def main():
    random = np.random.default_rng(4)
    print("# seed 4")
    with tempfile.TemporaryDirectory() as folder:
        driver = build_driver(folder)
        for graph in graphs(random):
            graph_check(driver, random, *graph)
    print(f"1..{tests}")
    return 1 if failures else 0


sys.exit(main())
