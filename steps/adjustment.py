"""Solve the levelling of lines at their crossings: weighted, robust, sparse least squares with priors.

At a crossing k of two passes the mismatch is ``y_k = a_k . x + e_k``, with x the unknowns (values of the correction at
the nodes of the lines), ``a_k`` sparse and ``e_k`` of known relative variance. The estimate minimises
``(y - A x)' W (y - A x) + x' P x`` (generalised least squares with prior precision P, Gauss-Markov; e.g. Tarantola
2005, *Inverse Problem Theory*, ch. 3). What only differences of lines can never tell, the common level of a connected
network, is fixed by one condition a network. Weights are those of Huber (1964), then of Tukey's biweight (Beaton &
Tukey 1974), with the scale from the data by the median absolute deviation.
"""

from dataclasses import dataclass, field

import numpy as np

HUBER, TUKEY = 1.345, 4.685  # 95 % efficiency at the normal distribution
MAD_TO_SIGMA = 1.4826
DENSE = 2000  # unknowns up to which the normal matrix is factored, beyond it conjugate gradients
INVERTED = 10_000  # unknowns up to which the whole covariance is worked out
TOLERANCE = 1e-8  # of the conjugate gradients, on the preconditioned residual


@dataclass(frozen=True)
class Solution:
    """What `adjust` found.

    Attributes
    ----------
    unknowns : array, shape (p,)
        Estimate, in the unit of the mismatches.
    covariance : array, shape (p, p), or None
        Posterior covariance under the datum condition, scaled with `scale`; None beyond `INVERTED` unknowns.
    residual : array, shape (n,)
        Mismatch minus what the unknowns predict, for every crossing, used or not.
    left_out : array, shape (n,)
        Mismatch minus what the *other* crossings predict, ``r / (1 - h)``; NaN where they predict nothing.
    weight : array, shape (n,)
        Robust weight, 0 (rejected) to 1.
    leverage : array, shape (n,)
        Diagonal of the hat matrix.
    scale : float
        Robust standard deviation of the standardised residuals: 1 where the variances given are right.

    """

    unknowns: np.ndarray
    covariance: np.ndarray | None = field(repr=False)
    residual: np.ndarray = field(repr=False)
    left_out: np.ndarray = field(repr=False)
    weight: np.ndarray = field(repr=False)
    leverage: np.ndarray = field(repr=False)
    scale: float


def networks(first: np.ndarray, second: np.ndarray, lines: int) -> np.ndarray:
    """Tell which lines are connected by crossings, directly or over others.

    Parameters
    ----------
    first, second : array of int, shape (n,)
        The two lines of each crossing.
    lines : int
        Number of lines.

    Returns
    -------
    array of int, shape (lines,)
        Number of the line's network, largest network first (of equal ones, that with the earlier line); -1 for a line
        without a crossing.

    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    graph = coo_array((np.ones(len(first)), (first, second)), shape=(lines, lines))
    _, label = connected_components(graph, directed=False)
    size = np.bincount(label)
    size[label[np.setdiff1d(np.arange(lines), np.concatenate([first, second]))]] = 0
    earliest = np.full(len(size), lines)
    np.minimum.at(earliest, label, np.arange(lines))
    rank = np.empty(len(size), int)
    rank[np.lexsort((earliest, -size))] = np.arange(len(size))
    return np.where(size[label] > 0, rank[label], -1)


def robust_weight(standardised: np.ndarray, form: str) -> np.ndarray:
    """Weigh residuals, given in robust standard deviations, after Huber or with Tukey's biweight."""
    size = np.abs(standardised)
    if form == "huber":
        return HUBER / np.maximum(size, HUBER)
    return np.maximum(1 - (size / TUKEY) ** 2, 0.0) ** 2


def robust_scale(standardised: np.ndarray) -> float:
    """Return the standard deviation of values about zero by their median absolute size; 0 without any."""
    finite = np.abs(standardised[np.isfinite(standardised)])
    return float(MAD_TO_SIGMA * np.median(finite)) if len(finite) else 0.0


def adjust(
    design,
    mismatch: np.ndarray,
    sigma: np.ndarray,
    *,
    prior=None,
    datum=None,
    robust: bool = True,
    iterations: int = 10,
) -> Solution:
    """Estimate the unknowns from the mismatches at crossings.

    Parameters
    ----------
    design : scipy.sparse.csr_array, shape (n, p)
        What each unknown does to each mismatch.
    mismatch : array, shape (n,)
        Observed mismatches.
    sigma : array, shape (n,)
        One sigma of each mismatch; a common factor does not matter to the estimate.
    prior : scipy.sparse array, shape (p, p), optional
        Prior precision of the unknowns (mean zero), positive semi-definite; none by default.
    datum : scipy.sparse array, shape (q, p), optional
        One row for each network, whose product with the unknowns is to be zero; its unknowns raised together must
        change no mismatch. A row of zeros is none.
    robust : bool
        Reweight, Huber for the first half of the iterations and Tukey for the rest.
    iterations : int
        Number of reweightings at most.

    Returns
    -------
    Solution

    """
    from scipy.sparse import csr_array

    design = csr_array(design)
    n, p = design.shape
    prior = csr_array((p, p)) if prior is None else csr_array(prior)
    datum = csr_array((0, p)) if datum is None else csr_array(datum)
    weight = np.ones(n)
    precision = 1.0 / np.asarray(sigma, float) ** 2
    x, covariance = _solve(design, mismatch, precision, prior, datum, np.zeros(p), p <= DENSE)
    for k in range(iterations if robust else 0):
        residual = mismatch - design @ x
        standardised = residual / sigma
        if covariance is not None:  # what a crossing shares with the fit makes its residual too small
            leverage = _leverage(design, covariance, weight * precision)
            standardised = standardised / np.sqrt(np.maximum(1 - leverage, 1e-9))
            determined = leverage < 1 - 1e-6
        else:
            determined = np.ones(n, bool)
        scale = robust_scale(standardised[determined])
        if scale <= 1e-9 * max(1.0, float(np.max(np.abs(mismatch / sigma), initial=0.0))):
            break  # all fit exactly: nothing to weigh
        form = "huber" if k < iterations // 2 else "tukey"
        new = np.where(determined, robust_weight(standardised / scale, form), 1.0)
        settled = form == "tukey" and np.max(np.abs(new - weight), initial=0.0) < 1e-3
        weight = new
        x, covariance = _solve(design, mismatch, weight * precision, prior, datum, x, p <= DENSE)
        if settled:
            break
    if covariance is None and p <= INVERTED:
        covariance = _covariance(design, weight * precision, prior, datum)
    residual = mismatch - design @ x
    leverage = np.full(n, np.nan) if covariance is None else _leverage(design, covariance, weight * precision)
    with np.errstate(divide="ignore", invalid="ignore"):
        left_out = np.where(leverage < 1 - 1e-6, residual / (1 - leverage), np.nan)
    left_out = np.where(weight > 0, left_out, residual)
    used = (weight > 0) & np.isfinite(left_out)
    scale = robust_scale(residual[used] / sigma[used] / np.sqrt(1 - leverage[used]))
    if covariance is not None:
        covariance = covariance * scale**2
    return Solution(x, covariance, residual, left_out, weight, leverage, scale)


def _solve(design, mismatch, precision, prior, datum, start, dense):
    """Solve the normal equations; with the covariance where it comes for nothing."""
    weighted = design.multiply(precision[:, None]).tocsr()
    right = weighted.T @ mismatch
    if dense:
        covariance = _covariance(design, precision, prior, datum)
        return covariance @ right, covariance
    normal = (design.T @ weighted + prior).tocsr()
    return _on_datum(_conjugate_gradients(normal, right, start), datum), None


def _on_datum(x, datum):
    """Shift the unknowns of each network together so that its datum condition holds."""
    for row in range(datum.shape[0]):
        members = datum.indices[datum.indptr[row] : datum.indptr[row + 1]]
        share = datum.data[datum.indptr[row] : datum.indptr[row + 1]]
        if len(members):
            x[members] -= share @ x[members] / share.sum()
    return x


def _covariance(design, precision, prior, datum):
    """Invert the normal matrix under the datum conditions; directions that nothing determines get no variance."""
    from scipy.linalg import cho_factor
    from scipy.linalg.lapack import dpotri

    normal = (design.T @ design.multiply(precision[:, None]) + prior).toarray(order="F")
    size = np.sqrt(np.maximum(np.diag(normal), 0.0))
    size[size == 0] = 1.0
    normal /= size
    normal /= size[:, None]
    for row in range(datum.shape[0]):  # (N + c c')^-1 minus the common shift is the covariance under c'x = 0
        members = datum.indices[datum.indptr[row] : datum.indptr[row + 1]]
        share = datum.data[datum.indptr[row] : datum.indptr[row + 1]]
        if len(members):
            share = share / share.sum() * np.sqrt(len(members))
            normal[np.ix_(members, members)] += np.outer(share / size[members], share / size[members]) * np.mean(
                size[members] ** 2
            )
    normal[np.diag_indices_from(normal)] += 1e-13
    factor, _ = cho_factor(normal, lower=True, overwrite_a=True, check_finite=False)
    inverse, _ = dpotri(factor, lower=True, overwrite_c=True)
    lower = np.tril_indices_from(inverse, -1) if len(inverse) <= DENSE else None
    if lower is not None:
        inverse.T[lower] = inverse[lower]
    else:
        for column in range(len(inverse)):
            inverse[column, column + 1 :] = inverse[column + 1 :, column]
    inverse /= size
    inverse /= size[:, None]
    for row in range(datum.shape[0]):
        members = datum.indices[datum.indptr[row] : datum.indptr[row + 1]]
        share = datum.data[datum.indptr[row] : datum.indptr[row + 1]]
        if len(members):
            projected = inverse[:, members] @ (share / share.sum())
            inverse[members] -= projected
            projected = inverse[:, members] @ (share / share.sum())
            inverse[:, members] -= projected[:, None]
    return inverse


def _leverage(design, covariance, precision):
    """Return the diagonal of the hat matrix, ``w a' C a``, from the few entries of C that each crossing touches."""
    count = np.diff(design.indptr)
    found = np.zeros(design.shape[0])
    for terms in np.unique(count):
        rows = np.flatnonzero(count == terms)
        at = design.indptr[rows][:, None] + np.arange(terms)
        column, value = design.indices[at], design.data[at]
        for i in range(terms):
            for j in range(terms):
                found[rows] += value[:, i] * value[:, j] * covariance[column[:, i], column[:, j]]
    return np.clip(found * precision, 0.0, 1.0)


def _conjugate_gradients(normal, right, start):
    """Solve the normal equations by conjugate gradients, preconditioned by the diagonal."""
    from scipy.sparse.linalg import LinearOperator, cg

    diagonal = normal.diagonal()
    inverse = np.where(diagonal > 0, 1 / np.where(diagonal > 0, diagonal, 1.0), 1.0)
    x, _ = cg(normal, right, x0=start, rtol=TOLERANCE, M=LinearOperator(normal.shape, lambda v: inverse * v))
    return x
