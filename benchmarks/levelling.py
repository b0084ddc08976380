"""Cost of a large adjustment: against scipy's lsqr on the same whitened system, and its growth with the crossings.

Run with ``python -m benchmarks.levelling``. A generated net of lines and ties, each with a constant and a linear drift,
1 % gross errors; ten robust reweightings on both sides, and for ours the sigma of every correction in the time given.
"""

import resource
import sys
import time

import numpy as np
from scipy.sparse import block_diag, csr_array, identity, vstack
from scipy.sparse.linalg import lsqr

from steps import adjustment


def net(crossings: int, lines: int, seed: int = 1):
    """Make a random net of lines and ties: design, root of the prior, blocks, mismatches, variances, truth."""
    rng = np.random.default_rng(seed)
    first = rng.integers(0, lines // 2, crossings)
    second = rng.integers(lines // 2, lines, crossings)
    share = rng.uniform(0, 1, (crossings, 2))
    root_of_line = np.linalg.cholesky(9.0 * np.ones((2, 2)) + 4.0 * 3 * np.array([[1.0, -1], [-1, 1]]) / 3 + 1e-9 * np.eye(2))
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
    """Do the same robust adjustment with scipy's lsqr, without covariances."""
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


def main():
    """Print the table."""
    sizes = [(10_000, 500), (100_000, 1600), (1_000_000, 5000)]
    if "--quick" in sys.argv:
        sizes = sizes[:2]
    print("crossings   lines   solve s   with sigmas s   us/crossing   lsqr s   ratio   rms error nT   (A-truth)/sigma   GB")
    for crossings, lines in sizes:
        design, root, block, mismatch, variance, truth = net(crossings, lines)
        start = time.perf_counter()
        adjustment.adjust(design, root, block, mismatch, variance, covariance=False)
        solve = time.perf_counter() - start
        start = time.perf_counter()
        found = adjustment.adjust(design, root, block, mismatch, variance)
        sigma = np.sqrt(adjustment.quadratic(csr_array(root), found.covariance))
        whole = time.perf_counter() - start
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
        start = time.perf_counter()
        x = with_lsqr(design, root, mismatch, variance)
        other = time.perf_counter() - start
        error = root @ found.unknowns - truth
        apart = np.max(np.abs(root @ (x - found.unknowns)))
        print(
            f"{crossings:9d}  {lines:6d}  {solve:8.2f}  {whole:14.2f}  {whole / crossings * 1e6:12.1f}  {other:7.2f}  "
            f"{other / solve:6.2f}  {np.sqrt(np.mean(error**2)):13.4f}  {np.std(error / sigma):16.3f}  {peak:4.1f}"
            f"   (largest difference from lsqr {apart:.1e} nT)",
            flush=True,
        )


if __name__ == "__main__":
    main()
