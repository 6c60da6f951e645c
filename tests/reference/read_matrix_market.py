# SPDX-License-Identifier: MIT
"""Matrix Market between this project and SciPy: what mmwrite writes is read here, what is written here mmread reads.

Both ways every value must be the same double. Prints TAP.
"""
import gzip
import os
import shlex
import subprocess
import sys
import tempfile
import warnings

import numpy as np
import scipy.io
import scipy.sparse as sp

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
BUILD = os.path.join(ROOT, os.environ.get("BUILD", "build"))
FESCUE = os.environ.get("FESCUE", os.path.join(BUILD, "fescue"))
SEED = int(os.environ.get("TEST_SEED", "31"))
LIBRARIES = "-lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -lisal -lz -lm -pthread"

tests = failures = 0


def check(text, good):
    global tests, failures
    tests += 1
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text}")


def build_driver(folder):
    driver = os.path.join(folder, "driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "read_matrix_market_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


def read_here(driver, path):
    """(shape, row, column, value) of the cells in row order."""
    data = subprocess.run([driver, path], stdout=subprocess.PIPE, check=True).stdout
    rows, columns, count = np.frombuffer(data, dtype=np.uint64, count=3).astype(int)
    places = np.frombuffer(data, dtype=np.uint64, offset=24, count=2 * count).astype(int)
    value = np.frombuffer(data, dtype=np.float64, offset=24 + 16 * count)
    return (rows, columns), places[:count], places[count:], value


def read_there(path):
    """The same by SciPy; in the array form a nan is a hole."""
    matrix = scipy.io.mmread(path)
    if not sp.issparse(matrix):
        row, column = np.nonzero(~np.isnan(matrix))
        return matrix.shape, row, column, matrix[row, column].astype(float)
    matrix = matrix.tocoo()
    order = np.lexsort((matrix.col, matrix.row))
    return matrix.shape, matrix.row[order], matrix.col[order], matrix.data[order].astype(float)


def alike(a, b):
    return a[0] == b[0] and all(np.array_equal(x, y) for x, y in zip(a[1:], b[1:]))


# ---- written by SciPy --------------------------------------------------------------------------------------------


def random_sparse(rng, rows, columns, share, symmetry, integer):
    dense = rng.standard_normal((rows, columns)) * 10.0 ** rng.integers(-12, 12, (rows, columns))
    if integer:
        dense = rng.integers(-99, 99, (rows, columns))
    seen = rng.random((rows, columns)) < share
    if symmetry != "general":
        lower = np.tril(np.ones_like(seen), -1 if symmetry == "skew-symmetric" else 0)
        seen = (seen & lower) | (seen & lower).T
        dense = np.where(lower, dense, (-1 if symmetry == "skew-symmetric" else 1) * dense.T)
    seen[rows - 1, 0] = True  # never without a cell
    row, column = np.nonzero(seen)
    if symmetry != "general":
        seen[0, rows - 1] = True
        row, column = np.nonzero(seen)
    return sp.coo_matrix((dense[row, column], (row, column)), shape=(rows, columns))


def expected_of(matrix):
    order = np.lexsort((matrix.col, matrix.row))
    return matrix.shape, matrix.row[order], matrix.col[order], matrix.data[order].astype(float)


def check_sparse(driver, folder, rng):
    for symmetry in "general", "symmetric", "skew-symmetric":
        for integer in False, True:
            good = True
            for rows, columns in ((40, 40), (200, 200)) if symmetry != "general" else ((40, 30), (1, 50), (500, 3)):
                matrix = random_sparse(rng, rows, columns, 0.2, symmetry, integer)
                path = os.path.join(folder, "sparse.mtx")
                # its standard is sixteen digits, which do not say every double
                scipy.io.mmwrite(path, matrix, comment=" of a test", symmetry=symmetry, precision=17)
                here = read_here(driver, path)
                good = good and alike(here, expected_of(matrix)) and alike(here, read_there(path))
            kind = "integer" if integer else "real"
            check(f"mmwrite, coordinate {kind} {symmetry}", good)


def check_dense(driver, folder, rng):
    for symmetry in "general", "symmetric", "skew-symmetric":
        good = True
        for rows, columns in ((23, 23), (60, 60)) if symmetry != "general" else ((23, 11), (1, 9), (9, 1)):
            matrix = random_sparse(rng, rows, columns, 1.1, symmetry, False).toarray()
            path = os.path.join(folder, "dense.mtx")
            if symmetry != "skew-symmetric":
                matrix[rows - 1, columns - 1] = np.nan
            scipy.io.mmwrite(path, matrix, symmetry=symmetry)
            row, column = np.nonzero(~np.isnan(matrix))
            if symmetry == "skew-symmetric":  # the diagonal is not in the file
                row, column = np.nonzero(~np.eye(rows, dtype=bool))
            expected = matrix.shape, row, column, matrix[row, column]
            good = good and alike(read_here(driver, path), expected)
        check(f"mmwrite, array real {symmetry}, with a hole", good)


def check_packed(driver, folder, rng):
    matrix = random_sparse(rng, 300, 200, 0.3, "general", False)
    path = os.path.join(folder, "packed.mtx")
    scipy.io.mmwrite(path, matrix, precision=6)
    with open(path, "rb") as plain, gzip.open(path + ".gz", "wb") as packed:
        packed.write(plain.read())
    check("mmwrite, six digits, gzip", alike(read_here(driver, path + ".gz"), read_there(path)))


def check_refused(driver, folder):
    path = os.path.join(folder, "refused.mtx")
    for matrix, field, word in ((np.eye(3) * 1j, None, "complex"), (np.eye(3), "pattern", "pattern")):
        scipy.io.mmwrite(path, sp.coo_matrix(matrix), field=field)
        done = subprocess.run([driver, path], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
        check(f"{word} is refused, with a sentence",
              done.returncode == 65 and done.stdout == "" and "line 1: " in done.stderr and word in done.stderr)


# ---- written here ------------------------------------------------------------------------------------------------


def run_fescue(*words):
    subprocess.run([FESCUE, *words], check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)


def check_ours(driver, folder):
    sown, filled = os.path.join(folder, "sown"), os.path.join(folder, "filled")
    run_fescue("sow", "-o", sown, "--rows", "60", "--columns", "40", "--rank", "2", "--seen", "0.4", "--gzip")
    table = os.path.join(sown, "table.mtx.gz")
    here = read_here(driver, table)
    check("a sown table: mmread finds the same cells", alike(here, read_there(table)) and len(here[3]) > 700)
    truth = scipy.io.mmread(os.path.join(sown, "truth.mtx.gz"))
    check("its truth: mmread finds every cell",
          truth.shape == (60, 40) and np.std(truth[here[1], here[2]] - here[3]) < 0.3 * np.std(here[3]))

    run_fescue("fill", table, "-o", filled, "--rank", "2", "--holdout", "0")
    full = scipy.io.mmread(os.path.join(filled, "filled.mtx")).tocoo()
    check("a filled table: mmread finds every cell once", full.nnz == 60 * 40 and np.count_nonzero(
        np.bincount(full.row * 40 + full.col, minlength=2400)) == 2400)
    check("and the seen ones unchanged", np.array_equal(full.toarray()[here[1], here[2]], here[3]))
    left, spectrum, right = (scipy.io.mmread(os.path.join(filled, name + ".mtx"))
                             for name in ("left", "spectrum", "right"))
    check("factors: mmread finds their shapes",
          left.shape == (60, 2) and spectrum.size == 2 and right.shape == (40, 2))


def main():
    warnings.simplefilter("error")
    rng = np.random.default_rng(SEED)
    print(f"# seed {SEED}")
    with tempfile.TemporaryDirectory() as folder:
        driver = build_driver(folder)
        check_sparse(driver, folder, rng)
        check_dense(driver, folder, rng)
        check_packed(driver, folder, rng)
        check_refused(driver, folder)
        check_ours(driver, folder)
    print(f"1..{tests}")
    return failures > 0


if __name__ == "__main__":
    sys.exit(main())
