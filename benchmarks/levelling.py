"""Cost of a large adjustment: against scipy's lsqr on the same whitened system, and its growth with the crossings.

Run with ``python -m benchmarks.levelling`` (``--quick`` leaves out the largest). A generated net of lines and ties, all
with a constant and a linear drift, 200 crossings a line, 1 % gross errors; ten robust reweightings on both sides, side
by side; ours besides with the sigma of every correction and the leave-one-out value of every crossing. What the two
parts are up against is measured in the same run: products with the sparse matrix move memory, the covariance is
arithmetic.
"""

import resource
import statistics
import sys
import time

import numpy as np
from scipy.sparse import block_diag, csr_array, identity, vstack
from scipy.sparse.linalg import lsqr

from steps import adjustment

SIZES = ((10_000, 50), (30_000, 150), (100_000, 500), (300_000, 1500), (1_000_000, 5000))


def net(crossings: int, lines: int, seed: int = 1):
    """Make a random net of lines and ties: design, root of the prior, blocks, mismatches, variances, truth."""
    rng = np.random.default_rng(seed)
    first = rng.integers(0, lines // 2, crossings)
    second = rng.integers(lines // 2, lines, crossings)
    share = rng.uniform(0, 1, (crossings, 2))
    prior = 9.0 * np.ones((2, 2)) + 4.0 * np.array([[1.0, -1.0], [-1.0, 1.0]])  # constant 3 nT, 2 nT at the ends
    spread, axes = np.linalg.eigh(prior)
    root_of_line = axes * np.sqrt(spread)
    truth = (root_of_line @ rng.standard_normal((lines, 2, 1))).reshape(-1)
    rows = np.repeat(np.arange(crossings), 4)
    columns = np.column_stack([2 * first, 2 * first + 1, 2 * second, 2 * second + 1]).ravel()
    values = np.column_stack([1 - share[:, 0], share[:, 0], share[:, 1] - 1, -share[:, 1]]).ravel()
    design = csr_array((values, (rows, columns)), shape=(crossings, 2 * lines))
    sigma = rng.uniform(0.5, 2.0, crossings)
    mismatch = design @ truth + sigma * rng.standard_normal(crossings)
    bad = rng.random(crossings) < 0.01
    mismatch[bad] += rng.normal(0, 50, bad.sum())
    root = csr_array(block_diag([root_of_line] * lines, format="csr"))
    return design, root, np.repeat(np.arange(lines), 2), mismatch, sigma**2, truth


def with_lsqr(design, root, mismatch, variance, iterations=10):
    """Do the same robust adjustment with scipy's lsqr, each time from the last solution, without covariances."""
    sigma = np.sqrt(variance)
    whole = csr_array(design @ root)
    r = whole.shape[1]
    weight, x = np.ones(len(mismatch)), np.zeros(r)
    for k in range(iterations + 1):
        factor = np.sqrt(weight) / sigma
        stacked = vstack([whole.multiply(factor[:, None]), identity(r)]).tocsr()
        x = lsqr(stacked, np.append(factor * mismatch, np.zeros(r)), atol=1e-8, btol=1e-8, x0=x, iter_lim=5000)[0]
        standardised = (mismatch - whole @ x) / sigma
        scale = adjustment.robust_scale(standardised[weight > 0])
        weight = adjustment.robust_weight(standardised / scale, "huber" if k < iterations // 2 else "tukey")
    return x


def timed(function, repeats):
    """Return the median time of some calls, and the last result."""
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        found = function()
        times.append(time.perf_counter() - start)
    return statistics.median(times), found


def limits():
    """Print what memory and arithmetic of this machine give."""
    a = np.ones(1 << 25)
    copying, _ = timed(lambda: a.copy(), 5)
    b = np.ones((2000, 2000))
    multiplying, _ = timed(lambda: b @ b, 3)
    rate = 2 * 2000**3 / multiplying / 1e9
    print(f"this machine: copies {2 * a.nbytes / copying / 1e9:.1f} GB/s, multiplies matrices at {rate:.0f} Gflop/s")
    return rate


def main():
    """Print the table."""
    rate = limits()
    heads = ("crossings", "lines", "solved s", "us/crossing", "lsqr s", "ratio", "with sigmas s", "covariance Gflop/s")
    print(" | ".join((*heads, "error/sigma", "peak GB", "apart nT")))
    for crossings, lines in SIZES[: -1 if "--quick" in sys.argv else None]:
        design, root, block, mismatch, variance, truth = net(crossings, lines)
        repeats = 3 if crossings < 500_000 else 1
        system = (design, root, block, mismatch, variance)
        solve, _ = timed(lambda system=system: adjustment.adjust(*system, covariance=False), max(repeats, 3))
        other, x = timed(lambda system=system: with_lsqr(system[0], system[1], *system[3:]), max(repeats, 3))
        whole, found = timed(lambda system=system: adjustment.adjust(*system), repeats)
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        error = (root @ found.unknowns - truth).reshape(lines, 2).mean(axis=1)  # of each line, in its middle
        middle = csr_array(block_diag([np.full((1, 2), 0.5)] * lines, format="csr"))
        of_line = csr_array(middle @ root)
        mean = csr_array(np.full((1, lines), 1.0 / lines)) @ of_line
        with_mean = of_line @ (found.covariance @ mean.toarray().ravel())
        spread = adjustment.quadratic(of_line, found.covariance) - 2 * with_mean + with_mean.mean()
        apart = np.max(np.abs(root @ (x - found.unknowns)))
        arithmetic = (2 * lines) ** 3 / max(whole - solve, 1e-3) / 1e9
        row = f"{crossings:9d} | {lines:5d} | {solve:8.2f} | {solve / crossings * 1e6:11.2f} | {other:6.2f} | "
        row += f"{other / solve:5.2f} | {whole:13.2f} | {arithmetic:18.1f} | "
        row += f"{np.std((error - error.mean()) / np.sqrt(spread)):11.3f} | {peak:7.2f} | {apart:.1e}"
        print(row, flush=True)
    print(f"the inverse of r unknowns is r^3 flop: at {rate:.0f} Gflop/s, {1e12 / rate / 1e9:.0f} s for 10,000")


if __name__ == "__main__":
    main()
