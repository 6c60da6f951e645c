# SPDX-License-Identifier: MIT
"""Mean, row and column effects against general routines of SciPy and NumPy.

    effects   scipy.sparse.linalg.lsqr on the stacked ridge system, and spsolve on its normal equations,
                  [ 1  Za        Zb        ]            [ x ]
                  [ 0  sqrt(R) I 0         ] (m, a, b) = [ 0 ]
                  [ 0  0         sqrt(C) I ]            [ 0 ]
              with the ridges R, C that were reported
    ridges    Henderson's method 3 as the book has it for any design (Searle, Casella, McCulloch 1992, section 5.5):
              reductions in sums of squares by dense projections, their expectations by traces and ranks

With weights, every row of the systems is multiplied by the root of its weight.

Tables: scattered, skewed, with empty lines, in several blocks, nearly without noise, and one large enough for the
system to be solved by conjugate gradients. Prints TAP.
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


def check(text, error, tolerance):
    """One TAP line; a NaN fails."""
    global tests, failures
    tests += 1
    good = bool(error <= tolerance)
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text} (error {error:.1e}, allowed {tolerance:.0e})")


def build_driver(folder):
    driver = os.path.join(folder, "offsets_driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "offsets_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


class Table:
    """Seen cells in row order, and the matrices that say which effect each has."""

    def __init__(self, rows, columns, seen, value, weight=None):
        self.rows, self.columns = rows, columns
        self.row, self.column = np.nonzero(seen)
        self.count = len(self.row)
        self.value = value[self.row, self.column]
        self.weight = None if weight is None else weight[self.row, self.column]
        cells = np.arange(self.count)
        root = np.ones(self.count) if weight is None else np.sqrt(self.weight)
        self.one = root[:, None]  # weighted least squares: rows times the root of their weight
        self.side = root * self.value
        self.za = sp.csr_matrix((root, (cells, self.row)), (self.count, rows))
        self.zb = sp.csr_matrix((root, (cells, self.column)), (self.count, columns))

    def fit(self, driver, kind):
        data = np.array([self.rows, self.columns, self.count], "u8").tobytes()
        data += self.row.astype("u4").tobytes() + self.column.astype("u4").tobytes() + self.value.astype("f8").tobytes()
        if self.weight is not None:
            data += self.weight.astype("f8").tobytes()
        out = subprocess.run([driver, kind] + (["weighted"] if self.weight is not None else []), input=data, stdout=subprocess.PIPE, check=True).stdout
        out = np.frombuffer(out)
        return out[:3], out[3:3 + self.rows], out[3 + self.rows:]

    def stacked(self, ridges):
        """The ridge system; an infinite ridge leaves its effect out."""
        parts, penalty = [sp.csr_matrix(self.one)], [0.0]
        for matrix, ridge in ((self.za, ridges[0]), (self.zb, ridges[1])):
            if np.isfinite(ridge):
                parts.append(matrix)
                penalty += [np.sqrt(ridge)] * matrix.shape[1]
        system = sp.vstack([sp.hstack(parts), sp.diags(penalty)]).tocsr()
        return system, np.concatenate([self.side, np.zeros(len(penalty))])

    def spread(self, solution, ridges):
        """(m, a, b) from what stacked gave: zeros for an effect left out."""
        row = solution[1:1 + self.rows] if np.isfinite(ridges[0]) else np.zeros(self.rows)
        column = solution[len(solution) - self.columns:] if np.isfinite(ridges[1]) else np.zeros(self.columns)
        return solution[0], row, column


def sow(random, rows, columns, share, spread_row, spread_column, noise, mean=3.0, skew=False, blocks=1,
        weighted=False):
    seen = random.random((rows, columns))
    if skew:
        seen *= 2 * np.sqrt(np.linspace(0.1, 3, rows))[:, None] * np.linspace(0.1, 2, columns)
    seen = seen < share
    for block in range(blocks):
        inside = np.arange(rows) * blocks // rows == block
        seen[np.ix_(inside, np.arange(columns) * blocks // columns != block)] = False
    # Of mean about one, and exact in single precision.
    weight = np.round(2.0 ** random.integers(-6, 4, (rows, columns)) * 0.51 * 1024) / 1024 if weighted else None
    if weighted:
        noise = noise / np.sqrt(weight)
    value = mean + spread_row * random.standard_normal((rows, 1)) + spread_column * random.standard_normal(
        (1, columns)) + noise * random.standard_normal((rows, columns))
    return Table(rows, columns, seen, value, weight)


def squares_left(design, value):
    """Residual sum of squares and rank of a dense design, by its singular vectors."""
    u, s, _ = np.linalg.svd(design, full_matrices=False)
    basis = u[:, s > 1e-9 * s[0]]
    rest = value - basis @ (basis.T @ value)
    return rest @ rest, basis.shape[1], basis


def henderson(table, kind):
    """The two ridges."""
    one = table.one
    za, zb = table.za.toarray(), table.zb.toarray()
    if kind == "rows":
        zb = zb[:, :0]
    if kind == "columns":
        za = za[:, :0]
    rest, rank, _ = squares_left(np.hstack([one, za, zb]), table.side)
    noise = rest / (table.count - rank)
    ridges = []
    for effect, others in ((za, [one, zb]), (zb, [one, za])):
        if effect.shape[1] == 0:
            ridges.append(np.inf)
            continue
        without, other_rank, basis = squares_left(np.hstack(others), table.side)
        projected = effect - basis @ (basis.T @ effect)
        variance = (without - rest - (rank - other_rank) * noise) / np.sum(projected * effect)
        ridges.append(noise / variance if variance > 0 else np.inf)
    return np.array(ridges)


def relative(got, want):
    """Largest relative difference; equal infinities agree."""
    same = (got == want)
    with np.errstate(invalid="ignore"):
        return float(np.max(np.where(same, 0.0, np.abs(got - want) / np.abs(want))))


def effects_check(name, table, fitted, exact):
    (mean, *ridges), row, column = fitted
    system, side = table.stacked(ridges)
    if exact:
        normal = (system.T @ system).tocsc()
        solution = spl.spsolve(normal, system.T @ side)
        want = table.spread(solution, ridges)
        error = max(abs(want[0] - mean), np.max(np.abs(want[1] - row)), np.max(np.abs(want[2] - column)))
        # Rounding of the normal equations, whose condition is about cells / ridge, uncentred as they are.
        finite = [ridge for ridge in ridges if np.isfinite(ridge)]
        check(f"{name}: effects, spsolve", error, max(1e-10, 10 * np.finfo(float).eps * table.count / min(finite, default=1.0)))
    solution = spl.lsqr(system, side, atol=1e-15, btol=1e-15, conlim=0, iter_lim=3000)[0]
    want = table.spread(solution, ridges)
    error = max(abs(want[0] - mean), np.max(np.abs(want[1] - row)), np.max(np.abs(want[2] - column)))
    check(f"{name}: effects, lsqr", error, 1e-9)


def ridges_check(name, table, fitted, kind):
    check(f"{name}: ridges, projections and traces", relative(fitted[0][1:], henderson(table, kind)), 1e-6)


def main():
    random = np.random.default_rng(11)
    tables = {
        "scattered 60 x 40": sow(random, 60, 40, 0.4, 1.5, 0.6, 1.0),
        "skewed 90 x 30": sow(random, 90, 30, 0.5, 0.8, 1.5, 1.0, skew=True),
        "three blocks": sow(random, 60, 45, 0.5, 1.0, 2.0, 0.7, blocks=3),
        "few rows": sow(random, 4, 70, 0.8, 1.0, 0.5, 0.5),
        "little noise": sow(random, 40, 30, 0.5, 1.0, 1.0, 1e-3),
        "weighted 60 x 40": sow(random, 60, 40, 0.4, 1.5, 0.6, 1.0, weighted=True),
        "weighted and skewed": sow(random, 90, 30, 0.5, 0.8, 1.5, 1.0, skew=True, weighted=True),
        "weighted, few rows": sow(random, 4, 70, 0.8, 1.0, 0.5, 0.5, weighted=True),
        "large mean": sow(random, 40, 30, 0.5, 1.0, 1.0, 1.0, mean=1000.0),
    }
    with tempfile.TemporaryDirectory() as folder:
        driver = build_driver(folder)
        for name, table in tables.items():
            for kind in ("both", "rows", "columns", "mean"):
                fitted = table.fit(driver, kind)
                if kind != "mean":
                    ridges_check(f"{name}, {kind}", table, fitted, kind)
                effects_check(f"{name}, {kind}", table, fitted, kind != "mean")
        for name, shape, share in (("2000 x 1500, a tenth seen", (2000, 1500), 0.1),
                                   ("2600 x 900, nearly full", (2600, 900), 0.95)):
            for weighted in (False, True):
                table = sow(random, *shape, share, 1.0, 0.5, 1.0, weighted=weighted)
                effects_check(name + ", weighted" * weighted, table, table.fit(driver, "both"), False)
    print(f"1..{tests}")
    return failures > 0


if __name__ == "__main__":
    sys.exit(main())
