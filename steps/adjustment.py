"""Solve large levelling adjustments: weighted, robust, sparse least squares with priors, cost linear in crossings.

The unknowns z (values of the corrections at the nodes of the lines, and the coefficients of the surveys) have the prior
covariance ``L L'`` of block form, so that ``z = L x`` with x of unit covariance; at crossing k the mismatch is
``y_k = a_k z + e_k``. The estimate minimises ``(y - A L x)' W (y - A L x) + x' x`` (generalised least squares with
priors, Gauss-Markov; e.g. Tarantola 2005, *Inverse Problem Theory*, ch. 3), by conjugate gradients on the normal
equations, preconditioned by the blocks on their diagonal. Weights are those of Huber (1964), then of Tukey's biweight
(Beaton & Tukey 1974, *Technometrics* 16), with the scale from the data by the median absolute deviation. The posterior
covariance is the inverse of the normal matrix; beyond `INVERTED` unknowns it is sampled: the conditional covariance of
a block, which is exact, plus that of its conditional mean over draws from the posterior (Rao-Blackwell).
"""

from dataclasses import dataclass, field

import numpy as np

HUBER, TUKEY = 1.345, 6.0  # robust standard deviations; a clean survey loses about 1 % to Tukey's at 6
LEAST_SCALE = 0.5  # of the standardised residuals, below which the variances are taken to be too large
MAD_TO_SIGMA = 1.4826
INVERTED = 10_000  # unknowns up to which the whole covariance is worked out
FACTORED = 2500  # unknowns up to which the preconditioner is the factor of the whole normal matrix
TOLERANCE = 1e-8  # of the conjugate gradients
DRAWS, DRAWN = 32, 1e-4  # draws from the posterior, and their tolerance: their number limits them far more
ABREAST = 8  # draws that are worked on at once
NARROW = 8  # rows of a block up to which A L is formed
CHUNK = 1 << 18  # crossings handled at once where memory counts


@dataclass(frozen=True)
class Solution:
    """What `adjust` found.

    Attributes
    ----------
    unknowns : array, shape (r,)
        Estimate of x; of unit prior covariance.
    covariance : array, shape (r, r), or None
        Posterior covariance of x; None beyond `INVERTED` unknowns.
    covariance_z : array, shape (p, p), or None
        Posterior covariance of z, where blocks are large and it comes for nothing.
    blocks : dict of int to array, or None
        In its stead, the covariance of each block given all others.
    draws, means : array, shape (r, k), or None
        And draws from the posterior about the estimate, and the mean of each block given the others of a draw: the
        covariance of a block is that given all others plus that of its means.
    residual : array, shape (n,)
        Mismatch minus what the estimate predicts, for every crossing, used or not.
    left_out : array, shape (n,)
        Mismatch minus what the *other* crossings predict, ``r / (1 - h)``.
    left_out_variance : array, shape (n,)
        Variance of that, as the model has it.
    weight : array, shape (n,)
        Robust weight, 0 (rejected) to 1.
    leverage : array, shape (n,)
        Diagonal of the hat matrix.
    scale : float
        Robust standard deviation of the standardised residuals: 1 where the variances given are right.
    solve : callable
        Solves the normal equations for further right-hand sides, shape (r,).

    """

    unknowns: np.ndarray
    covariance: np.ndarray | None = field(repr=False)
    covariance_z: np.ndarray | None = field(repr=False)
    blocks: dict | None = field(repr=False)
    draws: np.ndarray | None = field(repr=False)
    means: np.ndarray | None = field(repr=False)
    residual: np.ndarray = field(repr=False)
    left_out: np.ndarray = field(repr=False)
    left_out_variance: np.ndarray = field(repr=False)
    weight: np.ndarray = field(repr=False)
    leverage: np.ndarray = field(repr=False)
    scale: float
    solve: object = field(repr=False)


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
    size = np.bincount(label, minlength=1)
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
    root,
    block: np.ndarray,
    mismatch: np.ndarray,
    variance: np.ndarray,
    *,
    weight: np.ndarray | None = None,
    robust: bool = True,
    iterations: int = 10,
    covariance: bool = True,
) -> Solution:
    """Estimate the unknowns from the mismatches at crossings.

    Parameters
    ----------
    design : scipy.sparse.csr_array, shape (n, p)
        A: what each unknown z does to each mismatch.
    root : scipy.sparse.csr_array, shape (p, r)
        L: its product with its transpose is the prior covariance of z.
    block : array of int, shape (r,)
        Block of each x; ascending. Blocks that few crossings connect make it quick.
    mismatch : array, shape (n,)
        Observed mismatches.
    variance : array, shape (n,)
        Variance of each mismatch about what z predicts.
    weight : array, shape (n,), optional
        Weights to begin with, 1 by default.
    robust : bool
        Reweight, Huber for the first half of the iterations and Tukey for the rest.
    iterations : int
        Number of reweightings at most.
    covariance : bool
        Work out covariance and leverages, without which leave-one-out values are missing.

    Returns
    -------
    Solution

    """
    from scipy.sparse import csr_array

    design, root = csr_array(design), csr_array(root)
    n, r = design.shape[0], root.shape[1]
    sigma = np.sqrt(variance)
    weight = np.ones(n) if weight is None else weight.copy()
    whole = csr_array(design @ root) if root.nnz <= NARROW * r else None  # else A, then L
    system = _System(design, root, whole, block)
    x = system.solve(mismatch, weight / variance, np.zeros(r))
    for k in range(iterations if robust else 0):
        standardised = (mismatch - system.forward(x)) / sigma
        scale = robust_scale(standardised[weight > 0])
        scale = max(scale, LEAST_SCALE)
        form = "huber" if k < iterations // 2 else "tukey"
        new = robust_weight(standardised / scale, form)
        settled = form == "tukey" and float(np.max(np.abs(new - weight), initial=0.0)) < 1e-3
        weight = new
        x = system.solve(mismatch, weight / variance, x)
        if settled:
            break
    residual = mismatch - system.forward(x)
    precision = weight / variance
    whole_covariance = covariance_z = blocks = draws = means = None
    leverage = np.full(n, np.nan)
    if covariance and r <= INVERTED:
        whole_covariance = system.inverse(precision)
        if whole is None:
            covariance_z = sandwich(root, whole_covariance)
            own = quadratic(design, covariance_z)
        else:
            own = quadratic(whole, whole_covariance)
        leverage = np.clip(own * precision, 0.0, 1.0)
    elif covariance:
        blocks, draws, means, own = system.sample(precision)
        leverage = np.clip(own * precision, 0.0, 0.98)
    free = np.maximum(1 - leverage, 1e-9)
    left_out = np.where(weight > 0, residual / free, residual)
    spread = np.where(weight > 0, variance / np.maximum(weight, 1e-12) / free, np.nan)
    spread = np.where(weight > 0, spread - variance / np.maximum(weight, 1e-12) + variance, np.nan)
    used = weight > 0
    scale = (
        robust_scale(left_out[used] / np.sqrt(spread[used]))
        if covariance
        else robust_scale(residual[used] / sigma[used])
    )
    return Solution(
        x,
        whole_covariance,
        covariance_z,
        blocks,
        draws,
        means,
        residual,
        left_out,
        spread,
        weight,
        leverage,
        scale,
        lambda right: system.solve_normal(right, precision),
    )


class _System:
    """The normal equations ``(I + L'A'WAL) x = L'A'W y`` and their solution."""

    def __init__(self, design, root, whole, block):
        from scipy.sparse import csr_array

        self.whole, self._design, self._root = whole, design, root
        self._forward = [whole] if whole is not None else [root, design]
        self._back = [csr_array(part.T) for part in reversed(self._forward)]
        self._block, self._size = block, root.shape[1]
        self._preconditioner = None
        starts = np.flatnonzero(np.diff(block, prepend=-1))
        self._starts = starts
        self._sizes = np.diff(np.append(starts, self._size))

    def forward(self, x):
        """Return A L x."""
        for part in self._forward:
            x = part @ x
        return x

    def back(self, v):
        """Return L'A' v."""
        for part in self._back:
            v = part @ v
        return v

    def normal(self, x, precision):
        """Return the product of the normal matrix with x, shape (r,) or (r, k)."""
        if x.ndim == 1:
            return x + self.back(precision * self.forward(x))
        found = np.empty_like(x)
        for first in range(0, x.shape[1], ABREAST):  # as many as memory is not missed for
            some = np.ascontiguousarray(x[:, first : first + ABREAST])
            found[:, first : first + ABREAST] = some + self.back(precision[:, None] * self.forward(some))
        return found

    def solve(self, mismatch, precision, start):
        """Solve for one vector of mismatches."""
        return self.solve_normal(self.back(precision * mismatch), precision, start)

    def solve_normal(self, right, precision, start=None):
        """Solve the normal equations for a right-hand side, shape (r,) or (r, k)."""
        return self._conjugate_gradients(right, precision, np.zeros_like(right) if start is None else start)

    def _dense(self, precision):
        from scipy.sparse import csr_array

        matrix = self._design if self.whole is None else self.whole
        weighted = matrix.multiply(np.sqrt(precision)[:, None]).tocsr()
        full = csr_array(weighted.T @ weighted)
        if self.whole is None:
            root = self._root.toarray()
            full = root.T @ (full @ root)
        else:
            full = full.toarray(order="F")
        full[np.diag_indices_from(full)] += 1.0
        return full

    def _factor(self, precision):
        from scipy.linalg import cho_factor

        return cho_factor(self._dense(precision), lower=True, overwrite_a=True, check_finite=False)

    def inverse(self, precision):
        """Return the posterior covariance of x."""
        from scipy.linalg.lapack import dpotri

        if not self._size:
            return np.empty((0, 0))
        factor, _ = self._factor(precision)
        inverse, _ = dpotri(factor, lower=1, overwrite_c=1)
        for first in range(0, self._size, 512):  # the upper triangle, without a second matrix
            last = min(first + 512, self._size)
            square = inverse[first:last, first:last]
            inverse[first:last, first:last] = np.tril(square) + np.tril(square, -1).T
            inverse[first:last, last:] = inverse[last:, first:last].T
        return inverse

    def _block_matrices(self, precision):
        """Return the blocks on the diagonal of the normal matrix, stacked by size: {size: (numbers, matrices)}."""
        from scipy.sparse import csr_array

        position = np.arange(self._size) - np.repeat(self._starts, self._sizes)
        stacks = {int(s): np.flatnonzero(self._sizes == s) for s in np.unique(self._sizes)}
        number = np.empty(len(self._sizes), int)
        for members in stacks.values():
            number[members] = np.arange(len(members))
        of_column = np.repeat(np.arange(len(self._sizes)), self._sizes)
        matrices = {s: np.tile(np.eye(s), (len(members), 1, 1)) for s, members in stacks.items()}
        matrix = self._design if self.whole is None else self.whole
        block = self._block_of_row() if self.whole is None else of_column
        product = 0
        for first in range(0, matrix.shape[0], CHUNK):
            rows = matrix[first : first + CHUNK]
            scaled = rows.multiply(np.sqrt(precision[first : first + CHUNK])[:, None]).tocoo()
            # a crossing of two blocks as two rows, so that only what lies within a block is multiplied
            pair = scaled.row.astype(np.int64) * (len(self._sizes) + 1) + block[scaled.col] + 1
            row = np.unique(pair, return_inverse=True)[1]
            apart = csr_array((scaled.data, (row, scaled.col)), shape=(int(row.max(initial=-1)) + 1, matrix.shape[1]))
            product = product + csr_array(apart.T @ apart)
        if self.whole is None:
            product = csr_array(self._root.T @ csr_array(product @ self._root))
        product = product.tocoo()
        same = of_column[product.row] == of_column[product.col]
        row, column, value = product.row[same], product.col[same], product.data[same]
        size = self._sizes[of_column[row]]
        for s, stack in matrices.items():
            mine = size == s
            np.add.at(stack, (number[of_column[row[mine]]], position[row[mine]], position[column[mine]]), value[mine])
        return {s: (members, matrices[s]) for s, members in stacks.items()}

    def _conjugate_gradients(self, right, precision, x, tolerance=TOLERANCE):
        """Solve by preconditioned conjugate gradients, several right-hand sides side by side."""
        if self._preconditioner is None:  # weights change little from iteration to iteration: made once
            if self._size <= FACTORED:
                self._preconditioner = self._factor(precision)
            else:
                blocks = self._block_matrices(precision)
                self._preconditioner = {s: (members, np.linalg.inv(stack)) for s, (members, stack) in blocks.items()}
        residual = right - self.normal(x, precision)
        limit = tolerance * np.sqrt(np.sum(right * self._precondition(right), axis=0))
        z = self._precondition(residual)
        direction, energy = z, np.sum(residual * z, axis=0)
        for _ in range(2000):
            if np.all(np.sqrt(energy) <= limit):
                break
            image = self.normal(direction, precision)
            curvature = np.sum(direction * image, axis=0)
            step = np.where(curvature > 0, energy / np.where(curvature > 0, curvature, 1.0), 0.0)
            x = x + step * direction
            residual = residual - step * image
            z = self._precondition(residual)
            last, energy = energy, np.sum(residual * z, axis=0)
            direction = z + np.where(last > 0, energy / np.where(last > 0, last, 1.0), 0.0) * direction
        return x

    def _precondition(self, v):
        if isinstance(self._preconditioner, tuple):
            from scipy.linalg import cho_solve

            return cho_solve(self._preconditioner, v, check_finite=False)
        return self._by_block(v, self._preconditioner)

    def _by_block(self, v, stacks):
        """Multiply each block of v, shape (r,) or (r, k), with its own matrix."""
        found = np.empty_like(v)
        for s, (members, matrices) in stacks.items():
            rows = self._starts[members][:, None] + np.arange(s)
            part = v[rows]
            found[rows] = np.einsum("bij,bj->bi", matrices, part) if v.ndim == 1 else np.matmul(matrices, part)
        return found

    def sample(self, precision):
        """Draw from the posterior; return blocks, draws and means as `Solution` has them, and ``a L C L'a'``."""
        rng = np.random.default_rng(20)
        right = rng.standard_normal((self._size, DRAWS))
        for k in range(DRAWS):
            right[:, k] += self.back(np.sqrt(precision) * rng.standard_normal(len(precision)))
        stacks = self._block_matrices(precision)
        exact = {s: (members, np.linalg.inv(stack)) for s, (members, stack) in stacks.items()}
        self._preconditioner = exact
        draws = self._conjugate_gradients(right, precision, np.zeros_like(right), tolerance=DRAWN)
        change = -self._by_block(self.normal(draws, precision), exact)  # from a draw to the mean given all other blocks
        blocks = {}
        for members, matrices in exact.values():
            blocks |= dict(zip(members.tolist(), matrices, strict=True))
        return blocks, draws, draws + change, self._sampled_leverage(blocks, draws, change)

    def _sampled_leverage(self, inverse, draws, change):
        """Return ``a L C L'a'`` of each crossing: exact given the other blocks, and the draws of those.

        A crossing of two blocks has two such estimates, which are averaged.
        """
        from scipy.sparse import csr_array

        n = self._design.shape[0]
        moved = self.forward(draws)
        total, count = np.zeros(n), np.zeros(n)
        of_row = self._block_of_row()
        entries = self._design.tocoo()
        block = of_row[entries.col]
        order = np.argsort(block, kind="stable")
        edges = np.searchsorted(block[order], np.arange(len(self._sizes) + 1))
        for b in range(len(self._sizes)):
            mine = order[edges[b] : edges[b + 1]]
            if not len(mine):
                continue
            rows, row = np.unique(entries.row[mine], return_inverse=True)
            nodes, node = np.unique(entries.col[mine], return_inverse=True)
            own = slice(self._starts[b], self._starts[b] + self._sizes[b])
            part = csr_array((entries.data[mine], (row, node)), shape=(len(rows), len(nodes)))
            d = part @ self._root[nodes][:, own].toarray()
            for first in range(0, len(rows), CHUNK // 8):
                some = slice(first, first + CHUNK // 8)
                mean = moved[rows[some]] + d[some] @ change[own]
                total[rows[some]] += np.einsum("ij,ij->i", d[some] @ inverse[b], d[some]) + np.mean(mean**2, axis=1)
                count[rows[some]] += 1
        return total / np.maximum(count, 1)

    def _block_of_row(self):
        """Return the block of x that each z depends on; -1 for none."""
        of_column = np.repeat(np.arange(len(self._sizes)), self._sizes)
        found = np.full(self._root.shape[0], -1)
        filled = np.diff(self._root.indptr) > 0
        found[filled] = of_column[self._root.indices[self._root.indptr[:-1][filled]]]
        return found


def sandwich(rows, covariance: np.ndarray) -> np.ndarray:
    """Return ``F C F'`` for a sparse or half-filled matrix F of shape (n, r)."""
    dense = rows.toarray() if rows.nnz > 0.02 * rows.shape[0] * rows.shape[1] else rows
    half = dense @ covariance
    return (dense @ half.T).T if dense is rows else half @ dense.T


def quadratic(rows, covariance: np.ndarray, others=None) -> np.ndarray:
    """Return ``f C g'`` for each pair of rows f, g of two sparse matrices.

    Parameters
    ----------
    rows : scipy.sparse.csr_array, shape (n, r)
    covariance : array, shape (r, r)
        Symmetric.
    others : scipy.sparse.csr_array, shape (n, r), optional
        `rows` by default.

    Returns
    -------
    array, shape (n,)

    """
    others = rows if others is None else others
    found = np.zeros(rows.shape[0])
    if rows.nnz > 24 * max(1, rows.shape[0]):
        step = max(1, (1 << 24) // max(1, rows.shape[1]))
        for first in range(0, rows.shape[0], step):
            part = slice(first, first + step)
            found[part] = np.einsum("ij,ij->i", rows[part].toarray() @ covariance, others[part].toarray())
        return found
    counts, other_counts = np.diff(rows.indptr), np.diff(others.indptr)
    for terms, other_terms in {tuple(pair) for pair in np.unique(np.column_stack([counts, other_counts]), axis=0)}:
        alike = np.flatnonzero((counts == terms) & (other_counts == other_terms))
        for first in range(0, len(alike), CHUNK):
            some = alike[first : first + CHUNK]
            left = rows.indptr[some][:, None] + np.arange(terms)
            right = others.indptr[some][:, None] + np.arange(other_terms)
            total = np.zeros(len(some))
            for i in range(terms):
                for j in range(other_terms):
                    picked = covariance[rows.indices[left[:, i]], others.indices[right[:, j]]]
                    total += rows.data[left[:, i]] * others.data[right[:, j]] * picked
            found[some] = total
    return found
