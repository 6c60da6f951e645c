# SPDX-License-Identifier: MIT
"""Which unseen cells the pattern determines, against the exact rank of the Jacobian.

The Jacobian of (U, V, a, b) -> u_i . v_j + a_i + b_j on the seen cells is set up in NumPy at random factors in the
integers modulo the prime 2^31 - 1, where elimination is exact; a cell is determined when its own row adds nothing to
the rank, which is to say that it vanishes on the null space (Singer, Cucuringu 2010). Random factors there have the
generic rank but for a probability of about unknowns / 2^31 (Schwartz 1980, Zippel 1979).

216 masks: scattered holes, runs, blocks and late starts, ranks 1 to 4, with and without effects, between hardly and
well determined. No determined cell may be refused, at most one in a thousand of the others accepted. Prints TAP.
"""
import os
import shlex
import struct
import subprocess
import sys
import tempfile

import numpy as np

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
BUILD = os.path.join(ROOT, os.environ.get("BUILD", "build"))
LIBRARIES = "-lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -lisal -lz -lm -pthread"
PRIME = 2**31 - 1
KINDS = {"none": 5, "both": 1, "rows": 2, "columns": 3, "mean": 4}
SEED = 20

tests = failures = 0


def verdict(text, good):
    global tests, failures
    tests += 1
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text}")


def build_driver(folder):
    driver = os.path.join(folder, "determined_driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "determined_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


# ---- masks

def scattered(random, shape, share):
    return random.random(shape) < share


def runs(random, shape, share):
    """Holes are runs down the columns."""
    seen = np.ones(shape, bool)
    while seen.mean() > share:
        start, column = random.integers(shape[0]), random.integers(shape[1])
        seen[start:start + random.integers(2, 8), column] = False
    return seen


def blocks(random, shape, share):
    """Two halves that overlap in a few lines, and some cells elsewhere."""
    seen = random.random(shape) < share / 4
    rows, columns = shape[0] // 2, shape[1] // 2
    overlap = random.integers(0, 4)
    part = random.random(shape) < min(1, 1.4 * share)
    seen[:rows, :columns + overlap] |= part[:rows, :columns + overlap]
    seen[rows - overlap:, columns:] |= part[rows - overlap:, columns:]
    return seen


def late_starts(random, shape, share):
    seen = np.arange(shape[0])[:, None] >= random.integers(0, int(shape[0] * (1.05 - share) * 1.6) + 1, shape[1])
    return seen & (random.random(shape) < 0.9)


def masks(count, seed):
    shapes = [scattered, runs, blocks, late_starts]
    kinds = ["none", "both", "none", "both", "rows", "columns"]
    for k in range(count):
        random = np.random.default_rng([seed, k])
        rank = 1 + k // 4 % 4
        kind = kinds[k // 16 % len(kinds)]
        shape = (int(random.integers(9, 26)), int(random.integers(9, 22)))
        unknown = rank * sum(shape) + (kind not in ("none", "mean")) * sum(shape)
        share = min(0.97, unknown / np.prod(shape) * random.uniform(0.7, 1.5))
        yield shapes[k % 4](random, shape, share), rank, kind, shapes[k % 4].__name__


# ---- the Jacobian, modulo a prime

def jacobian(mask, rank, kind, random):
    """One row a cell of the table, all of them."""
    rows, columns = mask.shape
    u = random.integers(1, PRIME, (rows, rank))
    v = random.integers(1, PRIME, (columns, rank))
    full = np.zeros((rows, columns, (rows + columns) * (rank + 1)), np.int64)
    for i in range(rows):
        for j in range(columns):
            full[i, j, i * (rank + 1):i * (rank + 1) + rank] = v[j]
            full[i, j, (rows + j) * (rank + 1):(rows + j) * (rank + 1) + rank] = u[i]
            full[i, j, i * (rank + 1) + rank] = kind in ("both", "rows")
            full[i, j, (rows + j) * (rank + 1) + rank] = kind in ("both", "columns")
    used = full.any(axis=(0, 1))
    return full[:, :, used]


def null_space(matrix):
    """Columns that span it, by reduction to row echelon form modulo PRIME."""
    m = matrix.copy() % PRIME
    pivots = []
    row = 0
    for column in range(m.shape[1]):
        if row == m.shape[0]:
            break
        found = np.flatnonzero(m[row:, column])
        if found.size == 0:
            continue
        m[[row, row + found[0]]] = m[[row + found[0], row]]
        m[row] = m[row] * pow(int(m[row, column]), -1, PRIME) % PRIME
        others = np.flatnonzero(m[:, column])
        others = others[others != row]
        m[others] = (m[others] - m[others, column][:, None] * m[row] % PRIME) % PRIME
        pivots.append(column)
        row += 1
    free = np.setdiff1d(np.arange(m.shape[1]), pivots)
    null = np.zeros((m.shape[1], free.size), np.int64)
    null[free, np.arange(free.size)] = 1
    null[pivots] = (PRIME - m[:row][:, free]) % PRIME
    return null


def determined(mask, rank, kind, random):
    """Which cells of the table are."""
    full = jacobian(mask, rank, kind, random)
    null = null_space(full[mask])
    moved = np.zeros(mask.shape, bool)
    for i, j in np.argwhere(~mask):
        at = np.flatnonzero(full[i, j])
        total = np.zeros(null.shape[1], np.int64)
        for k in at:
            total = (total + full[i, j, k] * null[k]) % PRIME
        moved[i, j] = total.any()
    return ~moved


# ---- the program

def ask(driver, cases, threads):
    text = b"".join(struct.pack("4I", *mask.shape, rank, KINDS[kind]) + mask.astype(np.uint8).tobytes()
                    for mask, rank, kind, _ in cases)
    out = subprocess.run([driver, str(threads)], input=text, stdout=subprocess.PIPE, check=True).stdout
    answers, at = [], 0
    for mask, *_ in cases:
        basis = np.frombuffer(out, np.uint8, mask.size, at).reshape(mask.shape)
        counted = struct.unpack_from("Q", out, at + mask.size)[0]
        answers.append((basis == 0, counted))
        at += mask.size + 8
    return answers, out


def main():
    count = int(sys.argv[1]) if len(sys.argv) > 1 else 216
    cases = list(masks(count, SEED))
    print(f"# seed {SEED}")
    with tempfile.TemporaryDirectory() as folder:
        driver = build_driver(folder)
        answers, out = ask(driver, cases, 1)
        verdict("the bits do not depend on the number of workers", out == ask(driver, cases, 3)[1])
    refused = accepted = of_determined = of_others = 0
    miscounted = 0
    by_shape = {}
    for k, ((mask, rank, kind, shape), (low_rank, counted)) in enumerate(zip(cases, answers)):
        truth = determined(mask, rank, kind, np.random.default_rng([SEED, k, 1]))
        unseen = ~mask
        miscounted += counted != low_rank.sum()
        wrong = (unseen & truth & ~low_rank).sum(), (unseen & ~truth & low_rank).sum()
        if any(wrong):
            print(f"# mask {k}: {shape}, {mask.shape}, rank {rank}, effects {kind}: refused {wrong[0]}, accepted {wrong[1]}")
        refused += wrong[0]
        accepted += wrong[1]
        of_determined += (unseen & truth).sum()
        of_others += (unseen & ~truth).sum()
        tally = by_shape.setdefault(shape, [0, 0])
        tally[0] += (unseen & truth).sum()
        tally[1] += (unseen & ~truth).sum()
    for shape, (yes, no) in by_shape.items():
        print(f"# {shape}: {yes} determined, {no} not")
    verdict("each shape of holes has cells of both sorts", all(yes > 1000 and no > 1000 for yes, no in by_shape.values()))
    verdict(f"no determined cell is refused ({refused} of {of_determined})", refused == 0)
    verdict(f"at most one in a thousand of the others is accepted ({accepted} of {of_others})", accepted <= of_others / 1000)
    verdict("cells are counted as they are told", miscounted == 0)
    print(f"1..{tests}")
    return failures > 0


if __name__ == "__main__":
    sys.exit(main())
