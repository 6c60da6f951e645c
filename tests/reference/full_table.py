#!/usr/bin/python3
# SPDX-License-Identifier: MIT
#
# A table in which every cell is seen: without offsets and ridge, the best matrix of rank r is the truncated singular
# value decomposition (Eckart, Young 1936), and every solver for the square loss has to give its singular values, as
# LAPACK does through NumPy. With ridge L they are shrunk by 1/(1+L).
import os
import subprocess
import sys
import tempfile

import numpy as np
import scipy.io as io

FESCUE = os.environ.get("FESCUE", "build/fescue")
SOLVERS = ("fixed-rank-cg", "grassmann-cg", "grassmann-trust-region", "alternating")


def main():
    rng = np.random.default_rng(11)
    table = rng.normal(size=(60, 35)) @ np.diag(np.geomspace(10, 0.1, 35)) @ np.linalg.qr(rng.normal(size=(35, 35)))[0]
    left, spectrum, right = np.linalg.svd(table, full_matrices=False)
    failed = number = 0
    with tempfile.TemporaryDirectory() as folder:
        path, out = os.path.join(folder, "table.mtx"), os.path.join(folder, "out")
        io.mmwrite(path, table, precision=17)
        for solver in SOLVERS:
            for rank, ridge in ((1, 0), (4, 0), (4, 0.25)):
                options = f"-q --offsets none --holdout 0 --rank {rank} --ridge {ridge} --solver {solver}"
                subprocess.run([FESCUE, "fill", *options.split(), "--write", "factors", path, "-o", out], check=True)
                ours = np.asarray(io.mmread(os.path.join(out, "spectrum.mtx"))).ravel()
                u, v = (np.asarray(io.mmread(os.path.join(out, name))) for name in ("left.mtx", "right.mtx"))
                expected = spectrum[:rank] / (1 + ridge)
                error = np.abs(ours - expected).max() / expected[0]
                whole = (left[:, :rank] * expected) @ right[:rank]
                distance = np.linalg.norm((u * ours) @ v.T - whole) / np.linalg.norm(whole)
                good = len(ours) == rank and error < 1e-12 and distance < 1e-12
                failed += not good
                number += 1
                print(
                    f"{'ok' if good else 'not ok'} {number} - {solver}, rank {rank}, ridge {ridge}: singular values to "
                    f"{error:.1e}, the matrix to {distance:.1e}"
                )
    return 1 if failed else 0


sys.exit(main())
