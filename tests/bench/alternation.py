# SPDX-License-Identifier: MIT
"""Ridge alternation in NumPy, at its best: lines with equally many cells go through batched matmul and solve together.

    alternation.py PREFIX RANK RIDGE SWEEPS

reads PREFIX.row, .column (uint32), .value (float64), sorted by rows, and PREFIX.hidden.row, .column, .value; writes one
line of JSON: seconds of a sweep over both sides (the median), seconds until the error on hidden cells has settled, that
error, and seconds until the error was within one in a hundred of it. The clock runs from the grouped cells in memory.
Seconds are processor time of all threads; there is one thread unless the environment says otherwise.
"""
import json
import sys
import time

import numpy as np

NEAR = 1.01
SETTLED = 1e-4  # relative gain of a sweep below which there is no use in another
GROUP_NUMBERS = 1 << 22  # of gathered factors at once: 32 MB, so that a group stays near


def groups_of(line, lines):
    """Lists of (lines, cells as lines x count) for lines of equal count; `line` is sorted."""
    count = np.bincount(line, minlength=lines)
    start = np.concatenate([[0], np.cumsum(count)])
    order = np.argsort(count, kind="stable")
    edges = np.flatnonzero(np.diff(count[order])) + 1
    for members in np.split(order, edges):
        cells = int(count[members[0]]) if len(members) else 0
        if cells == 0:
            continue
        step = max(1, GROUP_NUMBERS // (cells * 16))
        for at in range(0, len(members), step):
            part = members[at : at + step]
            yield part, start[part][:, None] + np.arange(cells)[None, :]


def side_prepare(line, across, value, lines):
    order = np.argsort(line, kind="stable")
    line, across, value = line[order], across[order], value[order]
    return [(part, across[cells], value[cells]) for part, cells in groups_of(line, lines)]


def side_solve(side, other, ridge, out):
    eye = ridge * np.eye(other.shape[1])
    for lines, across, value in side:
        near = other[across]
        turned = near.transpose(0, 2, 1)
        gram = np.matmul(turned, near) + eye
        pull = np.matmul(turned, value[:, :, None])
        out[lines] = np.linalg.solve(gram, pull)[:, :, 0]


def main(prefix, rank, ridge, sweeps):
    row, column = (np.fromfile(f"{prefix}.{side}", dtype=np.uint32) for side in ("row", "column"))
    value = np.fromfile(f"{prefix}.value")
    hidden = [np.fromfile(f"{prefix}.hidden.{side}", dtype=np.uint32) for side in ("row", "column")]
    truth = np.fromfile(f"{prefix}.hidden.value")
    rows, columns = int(row.max()) + 1, int(column.max()) + 1
    rows, columns = max(rows, int(hidden[0].max()) + 1), max(columns, int(hidden[1].max()) + 1)
    by_row = side_prepare(row, column, value, rows)
    by_column = side_prepare(column, row, value, columns)
    left = np.zeros((rows, rank))
    right = np.random.default_rng(1).normal(size=(columns, rank)) / np.sqrt(rank)
    spent, seconds, error = 0.0, [], []
    for _ in range(sweeps):
        begin = time.process_time()
        side_solve(by_row, right, ridge, left)
        side_solve(by_column, left, ridge, right)
        seconds.append(time.process_time() - begin)
        spent += seconds[-1]
        error.append(float(np.sqrt(np.mean((np.einsum("ij,ij->i", left[hidden[0]], right[hidden[1]]) - truth) ** 2))))
        if len(error) > 1 and error[-1] > error[-2] * (1 - SETTLED):
            break
    near = next(k for k in range(len(error)) if error[k] <= NEAR * min(error))
    print(
        json.dumps(
            {
                "sweep": float(np.median(seconds)),
                "seconds": spent,
                "near": sum(seconds[: near + 1]),
                "sweeps": len(error),
                "error": min(error),
            }
        )
    )


main(sys.argv[1], int(sys.argv[2]), float(sys.argv[3]), int(sys.argv[4]))
