# SPDX-License-Identifier: MIT
"""The geometry against constructions from NumPy and SciPy that share no formula with it.

    exp, transport   the rotation expm(t (D U' - U D')) applied to U and to the tangent that is carried
    log              half the matrix logarithm of the product of two reflections, (I - 2YY')(I - 2UU')
                     (Batzies, Hueper, Machado, Silva Leite 2015), applied to U
    angles           those that the points were made from; scipy.linalg.subspace_angles (see scipy_angles)
    polar, QR        scipy.linalg.polar; numpy.linalg.qr with the signs of R made positive
    metric           truncated SVD of the dense X + t Z
    orthographic     X + t Z + t^2 Up inv(diag(s) + t M) Vp', dense
    projection       U U'A + A V V' - U U'A V V', dense; at the new point for the transport

Random points of every shape, near the cut locus, and at rank = min(rows, columns). Prints TAP.
"""
import os
import shlex
import subprocess
import sys
import tempfile

import numpy as np
import scipy.linalg as sla

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
BUILD = os.path.join(ROOT, os.environ.get("BUILD", "build"))
SEED = int(os.environ.get("TEST_SEED", "49"))
LIBRARIES = "-lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -lisal -lz -lm -pthread"
TINY = 1e-13  # for numbers of size one at these sizes: some hundred roundings

GRASSMANN = [(1, 1), (2, 1), (9, 1), (7, 3), (6, 6), (5, 4), (33, 20), (60, 9)]
FIXED_RANK = [(1, 1, 1), (1, 4, 1), (5, 1, 1), (6, 5, 2), (5, 9, 3), (9, 5, 3), (4, 4, 4), (9, 4, 4), (4, 9, 4),
              (12, 12, 6), (3, 40, 3), (40, 7, 6), (30, 20, 5), (20, 30, 5)]

tests = failures = 0


def check(text, error, tolerance=TINY):
    """One TAP line for the largest error of a group; a NaN fails."""
    global tests, failures
    tests += 1
    good = bool(error <= tolerance)
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text} (error {error:.1e}, allowed {tolerance:.0e})")


class Worst:
    """The largest error under each name."""

    def __init__(self):
        self.error = {}

    def keep(self, name, difference):
        norm = float(np.linalg.norm(difference))
        old = self.error.get(name, 0.0)
        self.error[name] = norm if not norm <= old else old

    def report(self, prefix, tolerances):
        for name, error in self.error.items():
            check(f"{prefix}: {name}", error, tolerances.get(name, TINY))


def build_driver(folder):
    driver = os.path.join(folder, "geometry_driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "geometry_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


class Geometry:
    """The C functions, by way of the driver."""

    def __init__(self, driver):
        self.driver = driver

    def call(self, operation, shape, step, arrays, shapes):
        words = [self.driver, operation, *(str(n) for n in shape), float(step).hex()]
        given = b"".join(np.ascontiguousarray(a, dtype=np.float64).tobytes() for a in arrays)
        done = subprocess.run(words, input=given, stdout=subprocess.PIPE, check=True)
        numbers = np.frombuffer(done.stdout, dtype=np.float64)
        ends = np.cumsum([int(np.prod(s)) for s in shapes])
        assert numbers.size == ends[-1]
        return [part.reshape(s) for part, s in zip(np.split(numbers, ends[:-1]), shapes)]

    def tall(self, operation, step, *arrays):
        m, r = arrays[0].shape
        return self.call(operation, (m, r, r), step, arrays, [(m, r)])[0]

    def angles(self, a, b):
        m, r = a.shape
        return self.call("angles", (m, r, r), 0, (a, b), [(r,)])[0]

    def point(self, operation, step, x, z):
        m, n, r = x[0].shape[0], x[2].shape[0], x[1].size
        return self.call(operation, (m, n, r), step, (*x, *z), [(m, r), (r,), (n, r)])

    def tangent(self, operation, *parts):
        m, n, r = parts[0].shape[0], parts[2].shape[0], parts[1].size
        return self.call(operation, (m, n, r), 0, parts, [(r, r), (m, r), (n, r)])


# ---- Grassmann ---------------------------------------------------------------------------------------------------


def random_frame(rng, m, r):
    return np.linalg.qr(rng.standard_normal((m, r)))[0]


def random_normal(rng, u):
    """Orthogonal to the columns of u, norm 1 (0 where there is no room)."""
    d = rng.standard_normal(u.shape)
    if u.shape[0] == u.shape[1]:
        return 0 * d
    for _ in range(2):
        d -= u @ (u.T @ d)
    return d / np.linalg.norm(d)


def rotation(u, d, t):
    return sla.expm(t * (d @ u.T - u @ d.T))


def reflections_log(u, y):
    identity = np.eye(u.shape[0])
    product = (identity - 2 * y @ y.T) @ (identity - 2 * u @ u.T)
    return 0.5 * np.real(sla.logm(product, disp=False)[0]) @ u


def span_gap(a, b):
    return np.linalg.norm(a @ a.T - b @ b.T)


def positive_qr(a):
    q, triangle = np.linalg.qr(a)
    return q * np.where(np.diag(triangle) < 0, -1, 1)


SCIPY_SAME = "SciPy's angles, all on one side of 45 degrees"
SCIPY_MIXED = "SciPy's angles, on both sides of 45 degrees"
ROOTS = {SCIPY_MIXED: 2e-7}  # some ten times the root of rounding


def scipy_angles(worst, geometry, u, y):
    """SciPy 1.10 picks sine or cosine for the k-th largest angle by the k-th smallest one. Where some angles are below 45
    degrees and some above, its small ones come from cosines and are good to the root of rounding only."""
    found, theirs = geometry.angles(u, y), sla.subspace_angles(u, y)[::-1]
    one_sided = found[-1] < np.pi / 4 or found[0] > np.pi / 4
    worst.keep(SCIPY_SAME if one_sided else SCIPY_MIXED, found - theirs)


def steps_everywhere(geometry, rng):
    worst = Worst()
    for m, r in GRASSMANN:
        u = random_frame(rng, m, r)
        d, k = random_normal(rng, u), random_normal(rng, u)
        for t in (0, 1e-9, 0.3, 1.5, 4):
            turn = rotation(u, d, t)
            worst.keep("exp is the rotated basis", geometry.tall("exp", t, u, d) - turn @ u)
            worst.keep("transport is the rotated tangent", geometry.tall("transport", t, u, d, k) - turn @ k)
            worst.keep("polar factor", geometry.tall("polar", t, u, d) - sla.polar(u + t * d)[0])
            worst.keep("QR factor", geometry.tall("qr", t, u, d) - positive_qr(u + t * d))
            end = turn @ u @ random_frame(rng, r, r)
            scipy_angles(worst, geometry, u, end)
            if t < np.pi / 2:  # within the injectivity radius, since |D| = 1
                angles = t * np.linalg.svd(d, compute_uv=False)[::-1]
                worst.keep("principal angles are the singular values of the step", geometry.angles(u, end) - angles)
                worst.keep("log undoes the rotation", geometry.tall("log", 0, u, end) - t * d)
    worst.report("Grassmann, every shape, short and long steps", ROOTS)


def far_points(geometry, rng):
    """Random pairs of points are beyond the injectivity radius: log still joins them by the shortest way."""
    worst = Worst()
    for m, r in GRASSMANN:
        u, y = random_frame(rng, m, r), random_frame(rng, m, r)
        d = geometry.tall("log", 0, u, y)
        worst.keep("the rotation of the log carries one to the other", span_gap(rotation(u, d, 1) @ u, y))
        worst.keep("log is as long as the principal angles",
                   np.linalg.norm(d) - np.linalg.norm(sla.subspace_angles(u, y)))
        worst.keep("log is that of the two reflections", d - reflections_log(u, y))
        scipy_angles(worst, geometry, u, y)
    # The matrix logarithm, by repeated square roots, has the larger share of the last error.
    worst.report("Grassmann, random pairs", {"log is that of the two reflections": 1e-11, **ROOTS})


def at_angles(rng, m, angles):
    """Two points with these principal angles, and the tangent that joins them."""
    r = len(angles)
    both = random_frame(rng, m, 2 * r)
    u, w = both[:, :r], both[:, r:]
    y = (u * np.cos(angles) + w * np.sin(angles)) @ random_frame(rng, r, r)
    return u, y, (w * angles)


def cut_locus(geometry, rng):
    for off in (1e-3, 1e-6, 1e-9, 0.0):
        worst = Worst()
        angles = np.array([0.0, 1e-8, 0.2, 1.0, np.pi / 2 - off])
        u, y, d = at_angles(rng, 25, angles)
        found = geometry.tall("log", 0, u, y)
        worst.keep("log joins the points", span_gap(rotation(u, found, 1) @ u, y))
        worst.keep("log is as long as it should be", np.linalg.norm(found) - np.linalg.norm(d))
        worst.keep("principal angles", geometry.angles(u, y) - angles)
        scipy_angles(worst, geometry, u, y)
        if off > 0:  # on the cut locus itself there are two logarithms
            worst.keep("log is the tangent that made the point", found - d)
        worst.report(f"Grassmann, {off:.0e} from the cut locus", ROOTS)


# ---- fixed rank ---------------------------------------------------------------------------------------------------


def random_point(rng, m, n, r):
    return random_frame(rng, m, r), 1 / np.arange(1.0, r + 1), random_frame(rng, n, r)


def dense(x):
    return x[0] * x[1] @ x[2].T


def dense_tangent(x, z):
    return x[0] @ z[0] @ x[2].T + z[1] @ x[2].T + x[0] @ z[2].T


def dense_projection(x, a):
    u, v = x[0] @ x[0].T, x[2] @ x[2].T
    return u @ a + a @ v - u @ a @ v


def unit_tangent(rng, x):
    z = rng.standard_normal((x[1].size, x[1].size)), random_normal(rng, x[0]), random_normal(rng, x[2])
    norm = np.linalg.norm(dense_tangent(x, z))
    return tuple(part / norm for part in z)


def truncated(a, r):
    u, s, v = np.linalg.svd(a, full_matrices=False)
    return u[:, :r] * s[:r] @ v[:r], s


def frames_error(x):
    return max(np.linalg.norm(x[k].T @ x[k] - np.eye(x[1].size)) for k in (0, 2))


def slope(z, middle, t):
    """The steepest column of the two graphs, in the bases that make the middle diagonal."""
    a, d, b = np.linalg.svd(middle)
    rises = t * z[1] @ b.T / d, t * z[2] @ a / d
    return max(np.linalg.norm(rise, axis=0).max(initial=0) for rise in rises)


def retractions(geometry, rng):
    worst = Worst()
    for m, n, r in FIXED_RANK:
        x = random_point(rng, m, n, r)
        z = unit_tangent(rng, x)
        for t in (0, 1e-9, 0.1, 0.5):
            straight, middle = dense(x) + t * dense_tangent(x, z), np.diag(x[1]) + t * z[0]
            moved = geometry.point("metric", t, x, z)
            best, spectrum = truncated(straight, r)
            gap = spectrum[r - 1] - spectrum[r] if r < min(m, n) else 1.0  # what the truncation is conditioned by
            worst.keep("metric: the truncated SVD", (dense(moved) - best) * min(1.0, gap))
            worst.keep("metric: its spectrum", moved[1] - spectrum[:r])
            worst.keep("metric: orthonormal frames", frames_error(moved))
            moved = geometry.point("retract", t, x, z)
            worst.keep("retraction: orthonormal frames", frames_error(moved))
            if slope(z, middle, t) <= 0.5:
                extra = t * t * z[1] @ np.linalg.solve(middle, z[2].T)
                size = max(1.0, np.linalg.norm(extra)) * np.linalg.cond(middle)
                worst.keep("orthographic where it is near: its formula", (dense(moved) - straight - extra) / size)
            else:
                worst.keep("metric elsewhere", (dense(moved) - best) * min(1.0, gap))
        undone = -np.diag(x[1]), z[1], z[2]  # the middle vanishes: singular values in equal pairs
        straight = dense(x) + dense_tangent(x, undone)
        moved = geometry.point("metric", 1, x, undone)
        distance = np.linalg.norm(straight - truncated(straight, r)[0])
        worst.keep("metric: as near as can be where it is not unique",
                   np.linalg.norm(dense(moved) - straight) - distance)
    worst.report("Fixed rank, every shape", {})


def projections(geometry, rng):
    worst = Worst()
    for m, n, r in FIXED_RANK:
        x, y = random_point(rng, m, n, r), random_point(rng, m, n, r)
        z, a = unit_tangent(rng, x), rng.standard_normal((m, n))
        projected = geometry.tangent("project", *x, np.zeros((r, r)), a @ x[2], a.T @ x[0])
        worst.keep("projection", dense_tangent(x, projected) - dense_projection(x, a))
        carried = geometry.tangent("carry", *x, *y, *z)
        worst.keep("transport", dense_tangent(y, carried) - dense_projection(y, dense_tangent(x, z)))
    worst.report("Fixed rank, every shape", {})


def main():
    print(f"# seed {SEED}")
    rng = np.random.default_rng(SEED)
    with tempfile.TemporaryDirectory() as folder:
        geometry = Geometry(build_driver(folder))
        steps_everywhere(geometry, rng)
        far_points(geometry, rng)
        cut_locus(geometry, rng)
        retractions(geometry, rng)
        projections(geometry, rng)
    print(f"1..{tests}")
    return 1 if failures else 0


if __name__ == "__main__":
    sys.exit(main())
