# SPDX-License-Identifier: MIT
"""Smoothing in time against dense Gaussian algebra in NumPy, which knows nothing of filters.

    series   a scalar AR(1) process with noise, irregular steps, unseen steps: joint covariance v rho^|t-s|, conditioned
             on what was seen by numpy.linalg; the likelihood as a multivariate normal density; one step of
             learning against scipy.optimize on the expected log density
    chain    vectors with AR(1) components: the dense precision of all steps, inverted

To 1e-8 of the size of what is compared. Prints TAP.
"""
import os
import shlex
import subprocess
import sys
import tempfile

import numpy as np
import scipy.optimize as so

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
BUILD = os.path.join(ROOT, os.environ.get("BUILD", "build"))
LIBRARIES = "-lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -lisal -lz -lm -pthread"

tests = failures = 0


def check(text, got, want, tolerance=1e-8):
    """One TAP line; a NaN fails."""
    global tests, failures
    tests += 1
    got, want = np.asarray(got), np.asarray(want)
    error = float(np.max(np.abs(got - want)) / max(np.max(np.abs(want)), 1e-300))
    good = bool(error <= tolerance)
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text} (error {error:.1e}, allowed {tolerance:.0e})")


def build_driver(folder):
    driver = os.path.join(folder, "smoothing_driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "smoothing_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


def ask(driver, what, *numbers):
    data = b"".join(np.asarray(x, "f8").tobytes() for x in numbers)
    return np.frombuffer(subprocess.run([driver, what], input=data, stdout=subprocess.PIPE, check=True).stdout)


def condition(prior, value, noise, seen):
    """Mean and covariance of the whole process given the seen values."""
    total = prior[np.ix_(seen, seen)] + np.diag(noise[seen])
    gain = np.linalg.solve(total, prior[seen]).T
    return gain @ value[seen], prior - gain @ prior[seen], total


def series_check(driver, name, random, count, variance, correlation, spread, unseen):
    time = np.cumsum(random.choice(spread, count))
    prior = variance * correlation ** np.abs(time[:, None] - time)
    value = np.linalg.cholesky(prior) @ random.standard_normal(count)
    noise = 0.3 * variance * random.uniform(0.2, 3, count)
    value = value + np.sqrt(noise) * random.standard_normal(count)
    noise[random.random(count) < unseen] = np.inf
    seen = np.flatnonzero(np.isfinite(noise))
    mean, covariance, total = condition(prior, value, noise, seen)
    out = ask(driver, "series", [count, variance, correlation], time, value, noise)
    likelihood, out, law = out[0], out[1:-2].reshape(3, count), out[-2:]
    check(f"{name}: means", out[0], mean)
    check(f"{name}: variances", out[1], np.diag(covariance))
    check(f"{name}: covariances with the step before", out[2, 1:], np.diag(covariance, -1))
    _, logs = np.linalg.slogdet(total)
    want = -0.5 * (logs + len(seen) * np.log(2 * np.pi) + value[seen] @ np.linalg.solve(total, value[seen]))
    check(f"{name}: log likelihood", likelihood, want)
    learn_check(name, time, mean, covariance, law)


def learn_check(name, time, mean, covariance, law):
    """What the maximisation step gives: the law under which E log p(x) is highest."""
    second = covariance + np.outer(mean, mean)
    now, both, before = np.diag(second)[1:], np.diag(second, -1), np.diag(second)[:-1]

    def cost(place):
        f = np.exp(-np.exp(place) * np.diff(time))
        sums = second[0, 0] + np.sum((now - 2 * f * both + f * f * before) / (1 - f * f))
        return len(time) * np.log(sums / len(time)) + np.sum(np.log1p(-f * f)), sums / len(time)

    best = so.minimize_scalar(lambda x: cost(x)[0], bounds=(-9.21, 1.609), method="bounded", options={"xatol": 1e-10})
    check(f"{name}: variance learnt", law[0], cost(best.x)[1], 1e-3)
    check(f"{name}: correlation learnt", law[1], np.exp(-np.exp(best.x)), 1e-3)


def packed(matrices):
    rows, columns = np.tril_indices(matrices.shape[1])
    return matrices[:, rows, columns]


def chain_check(driver, name, random, steps, size, correlation, spread, empty):
    time = np.cumsum(random.choice(spread, steps))
    variance = random.uniform(0.3, 3, size)
    factor = random.standard_normal((steps, size, size + 2))
    data = factor @ factor.transpose(0, 2, 1) * (random.random(steps) >= empty)[:, None, None]
    side = random.standard_normal((steps, size)) * (data[:, 0, 0] > 0)[:, None]
    prior = np.zeros((steps, size, steps, size))
    for k in range(size):
        prior[:, k, :, k] = variance[k] * correlation[k] ** np.abs(time[:, None] - time)
    precision = np.linalg.inv(prior.reshape(steps * size, -1)).reshape(prior.shape)
    for t in range(steps):
        precision[t, :, t, :] += data[t]
    covariance = np.linalg.inv(precision.reshape(steps * size, -1))
    mean = (covariance @ side.ravel()).reshape(steps, size)
    covariance = covariance.reshape(prior.shape)
    line = random.permutation(steps)
    by_line = np.argsort(line)
    out = ask(driver, "chain", [steps, size], variance, correlation, time, line, packed(data)[by_line], side[by_line])
    means, rest = out[: steps * size].reshape(steps, size)[line], out[steps * size :]
    spreads = rest[: steps * size * (size + 1) // 2].reshape(steps, -1)[line]
    cross = rest[steps * size * (size + 1) // 2 :].reshape(steps, size)[line]
    every = np.arange(steps)
    check(f"{name}: means", means, mean)
    check(f"{name}: covariances", spreads, packed(covariance[every, :, every, :]))
    want = np.array([np.diag(covariance[t, :, t - 1, :]) if t > 0 else np.zeros(size) for t in every])
    check(f"{name}: covariances with the step before", cross, want)


def main():
    random = np.random.default_rng(11)
    with tempfile.TemporaryDirectory() as folder:
        driver = build_driver(folder)
        series_check(driver, "every step seen", random, 60, 2.0, 0.8, [1.0], 0.0)
        series_check(driver, "unseen steps", random, 80, 0.5, 0.95, [1.0], 0.4)
        series_check(driver, "irregular steps", random, 80, 1e4, 0.6, [0.5, 1.0, 3.0, 8.0], 0.2)
        series_check(driver, "slow process", random, 60, 1.0, 0.999, [1.0, 2.0], 0.1)
        chain_check(driver, "chain of equal steps", random, 30, 4, np.array([0.9, 0.5, 0.0, 0.99]), [1.0], 0.3)
        chain_check(driver, "chain of irregular steps", random, 25, 5, np.array([0.2, 0.999, 0.7, 0.9, 0.5]), [0.25, 1.0, 7.0], 0.5)
        chain_check(driver, "long chain", random, 300, 3, np.array([0.9, 0.5, 0.99]), [1.0], 0.3)
        chain_check(driver, "long chain that forgets little", random, 300, 2, np.array([0.9999, 0.9998]), [1.0, 0.25], 0.97)
        chain_check(driver, "chain of scalars", random, 40, 1, np.array([0.8]), [1.0, 2.0], 0.2)
        chain_check(driver, "chain without data", random, 10, 2, np.array([0.8, 0.3]), [1.0], 1.0)
        chain_check(driver, "chain of one step", random, 1, 3, np.array([0.8, 0.3, 0.5]), [1.0], 0.0)
    print(f"1..{tests}")
    return 1 if failures else 0


sys.exit(main())
