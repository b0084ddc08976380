"""Tell the causes of crossing mismatches apart by their covariances: least-squares collocation.

A reading's error before levelling is modelled as a sum of random processes, each of known form and unknown variance:
a constant and a drift for each line, a drift in time that all lines of a survey share (what is left of the external
field), and a few coefficients for each survey (heading harmonics, a scale on the base station's variation, errors of
layback and clock) whose prior covariance is stated. A mismatch is the difference of two such sums plus noise, so the
mismatches have the covariance V = signal + noise, and the best linear prediction of any error is ``C V^-1 y``
(Moritz 1980, *Advanced Physical Geodesy*, ch. 14; the same as generalised least squares with prior covariances).
The variances are those of greatest restricted likelihood (Patterson & Thompson 1971, *Biometrika* 58), found by Fisher
scoring; since a mismatch is free of the datum, no fixed effect is left and the restricted likelihood is the plain one.
Leaving crossing k out costs no new solution: ``e_k = [V^-1 y]_k / [V^-1]_kk``, of variance ``1 / [V^-1]_kk`` (Dubrule
1983, *Math. Geology* 15).
"""

from dataclasses import dataclass, replace

import numpy as np

EFFECTS = ("cos", "sin", "cos_2", "sin_2", "diurnal", "layback", "clock")  # coefficients of each survey
EFFECTS_OF = {
    "heading": slice(0, 4),
    "diurnal_scale": slice(4, 5),
    "layback": slice(5, 6),
    "clock": slice(6, 7),
}
NOISE = ("noise", "position", "extra")  # parts of a crossing's own variance
ROUNDING = 1e-12  # of the largest variance, added to all: where signal outweighs noise by more, digits run out
FLOOR = 1e-6  # weight of a rejected crossing in V: none, but its prediction stays defined


@dataclass(frozen=True)
class Points:
    """Instants on lines.

    Attributes
    ----------
    line, survey : array of int, shape (n,)
        Numbers of the line and of its survey.
    hours : array, shape (n,)
        Time in hours from any common origin.
    share : array, shape (n,)
        Place along the line in time, of mean zero and unit variance over it: -1.73 at its start, 1.73 at its end.
    with_base, without_base : array, shape (n,)
        Expected size (one sigma, nT) of what the base stations left of the external variation, and of the whole
        variation where there was none; one of them zero.
    loose : array, shape (n,)
        1, or 0 on a line that is held.
    effects : array, shape (n, 7)
        What a unit of each of `EFFECTS` adds to the anomaly, in nT.

    """

    line: np.ndarray
    survey: np.ndarray
    hours: np.ndarray
    share: np.ndarray
    with_base: np.ndarray
    without_base: np.ndarray
    loose: np.ndarray
    effects: np.ndarray

    def __len__(self):
        return len(self.line)

    def take(self, rows) -> "Points":
        """Return some of the points."""
        return Points(**{name: value[rows] for name, value in vars(self).items()})


@dataclass(frozen=True)
class Process:
    """A random process whose variance is to be estimated.

    Attributes
    ----------
    name, term : str
        Its own name, and the term of the settings it belongs to ("" for one that is always there).
    form : {"survey", "line", "slope", "wander", "time"}
        Constant of a survey or line, linear along a line, wandering along a line, or in time over a survey.
    hours : float
        Correlation time of what wanders.
    rough : bool
        It wanders like a damped random walk (exponential correlation), and not smoothly (Matern, order 3/2).
    size : {"", "with_base", "without_base"}
        Attribute of `Points` that scales it; "" for nT.
    expected, spread : float
        Mean and standard deviation of the prior of the logarithm of its variance.

    """

    name: str
    term: str
    form: str
    hours: float = 1.0
    rough: bool = False
    size: str = ""
    expected: float = 0.0
    spread: float = 2.5


@dataclass(frozen=True)
class Model:
    """Processes with their variances, the prior of the coefficients, and the factors of the crossings' noise.

    Attributes
    ----------
    processes : tuple of Process
    log_variance : array, shape (len(processes) + 3,)
        Natural logarithms: of each process, then of the factors of `NOISE`.
    prior : array, shape (surveys, 7, 7)
        Prior covariance of the coefficients of each survey; rows of zeros are coefficients that are not estimated.
    noise_prior : array, shape (3, 2)
        Expected logarithm of each noise factor and its spread.

    """

    processes: tuple
    log_variance: np.ndarray
    prior: np.ndarray
    noise_prior: np.ndarray

    @property
    def expected(self) -> np.ndarray:
        """Prior means of `log_variance`."""
        return np.concatenate([[p.expected for p in self.processes], self.noise_prior[:, 0]])

    @property
    def spread(self) -> np.ndarray:
        """Prior standard deviations of `log_variance`."""
        return np.concatenate([[p.spread for p in self.processes], self.noise_prior[:, 1]])

    def without(self, term: str) -> "Model":
        """Return the model without one term."""
        keep = [k for k, p in enumerate(self.processes) if p.term != term]
        prior = self.prior
        if term in EFFECTS_OF:
            prior = prior.copy()
            prior[:, EFFECTS_OF[term]] = 0.0
            prior[:, :, EFFECTS_OF[term]] = 0.0
        kept = np.concatenate([self.log_variance[keep], self.log_variance[len(self.processes) :]])
        return replace(self, processes=tuple(self.processes[k] for k in keep), log_variance=kept, prior=prior)

    def noise(self, parts: np.ndarray) -> np.ndarray:
        """Return the variance of each crossing from its parts, shape (n, 3)."""
        return parts @ np.exp(self.log_variance[len(self.processes) :])


def correlation(hours: np.ndarray, scale: float, rough: bool) -> np.ndarray:
    """Return the correlation over a time of what wanders: exponential, or Matern of order 3/2, which is smooth."""
    if rough:
        return np.exp(-np.abs(hours) / scale)
    a = np.sqrt(3.0) / scale * np.abs(hours)
    return (1.0 + a) * np.exp(-a)


def correlate(process: Process, p: Points, q: Points) -> np.ndarray:
    """Return the covariances of one process of unit variance.

    Points of shape (n,) and (m,) give shape (n, m); stacked, of shape (k, n) and (k, m), shape (k, n, m).
    """

    def apart(name):
        return getattr(p, name)[..., :, None], getattr(q, name)[..., None, :]

    loose = np.multiply(*apart("loose"))
    if process.form == "survey":
        return loose * np.equal(*apart("survey"))
    if process.form == "time":
        size = np.multiply(*apart(process.size)) * loose * np.equal(*apart("survey"))
        return size * correlation(np.subtract(*apart("hours")), process.hours, process.rough)
    same = loose * np.equal(*apart("line"))
    if process.form == "slope":
        return same * np.multiply(*apart("share"))
    if process.form == "wander":
        return same * correlation(np.subtract(*apart("hours")), process.hours, process.rough)
    return same


def effects_covariance(prior: np.ndarray, p: Points, q: Points) -> np.ndarray:
    """Return the covariances, shape (len(p), len(q)), of what the coefficients do to the anomaly."""
    left = np.einsum("ni,nij->nj", p.effects * p.loose[:, None], prior[p.survey])
    return (left @ (q.effects * q.loose[:, None]).T) * (p.survey[:, None] == q.survey[None, :])


def signal(model: Model, p: Points, q: Points, *, effects: bool = True) -> np.ndarray:
    """Return the covariances of the errors at two sets of points, shape (len(p), len(q))."""
    total = effects_covariance(model.prior, p, q) if effects else 0.0
    for process, size in zip(model.processes, np.exp(model.log_variance), strict=False):
        total = total + size * correlate(process, p, q)
    return total


def _of_mismatches(covariance, first: Points, second: Points) -> np.ndarray:
    """Apply a function of two sets of points to both passes of the crossings."""
    mixed = covariance(first, second)
    return covariance(first, first) + covariance(second, second) - mixed - mixed.T


@dataclass(frozen=True)
class Crossings:
    """What the mismatches are and where.

    Attributes
    ----------
    mismatch : array, shape (n,)
        Anomaly of the first pass minus that of the second, nT.
    parts : array, shape (n, 3)
        Variances, nT^2, of `NOISE`: of the two values, of the two positions, and 1.
    first, second : Points
        The passes.

    """

    mismatch: np.ndarray
    parts: np.ndarray
    first: Points
    second: Points

    def __len__(self):
        return len(self.mismatch)

    def take(self, rows) -> "Crossings":
        """Return some of the crossings."""
        return Crossings(self.mismatch[rows], self.parts[rows], self.first.take(rows), self.second.take(rows))


class Block:
    """Crossings with the matrices that all trials of variances share."""

    def __init__(self, crossings: Crossings, model: Model):
        self.crossings = crossings
        self._of = {
            process: _of_mismatches(lambda p, q, k=process: correlate(k, p, q), crossings.first, crossings.second)
            for process in model.processes
        }
        c = crossings
        self._effects = c.first.effects * c.first.loose[:, None], c.second.effects * c.second.loose[:, None]

    def fixed(self, prior: np.ndarray) -> np.ndarray:
        """Return the covariance of the mismatches that comes of the coefficients, of stated prior."""
        return _of_mismatches(lambda p, q: effects_covariance(prior, p, q), self.crossings.first, self.crossings.second)

    def shapes(self, model: Model, kept: np.ndarray) -> list[np.ndarray]:
        """Return the derivative of V by each variance: matrices of the processes, diagonals of the noise."""
        pick = np.ix_(kept, kept)
        return [self._of[process][pick] for process in model.processes] + list(self.crossings.parts[kept].T)

    def covariance(self, model: Model, weight: np.ndarray) -> np.ndarray:
        """Return V, the noise of each crossing divided by its weight."""
        total = self.fixed(model.prior)
        for process, size in zip(model.processes, np.exp(model.log_variance), strict=False):
            total += size * self._of[process]
        own = ROUNDING * np.max(np.diag(total), initial=0.0) + model.noise(self.crossings.parts)
        total[np.diag_indices_from(total)] += own / np.maximum(weight, FLOOR)
        return total


def left_out(covariance: np.ndarray, mismatch: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return what is left of each mismatch when the others have predicted it, and the variance of that."""
    inverse = _inverse(covariance)
    diagonal = np.diag(inverse)
    return inverse @ mismatch / diagonal, 1.0 / diagonal


def _inverse(matrix: np.ndarray) -> np.ndarray:
    from scipy.linalg.lapack import dpotrf, dpotri

    if not len(matrix):
        return matrix
    factor, bad = dpotrf(matrix, lower=1)
    if bad:  # rounding alone: V has the noise on its diagonal
        factor, _ = dpotrf(matrix + 1e-10 * np.trace(matrix) / len(matrix) * np.eye(len(matrix)), lower=1)
    inverse, _ = dpotri(factor, lower=1)
    inverse = np.tril(inverse)
    return inverse + np.tril(inverse, -1).T


def _likelihood(model: Model, fixed: list, shapes: list, mismatches: list, log_variance: np.ndarray):
    """Minus the logarithm of likelihood times prior; and V, or None where it is not positive definite."""
    total = 0.5 * np.sum(((log_variance - model.expected) / model.spread) ** 2)
    found = []
    sizes = np.exp(log_variance)
    m = len(model.processes)
    for base, own, y in zip(fixed, shapes, mismatches, strict=True):
        v = base.copy()
        for size, shape in zip(sizes[:m], own[:m], strict=True):
            v += size * shape
        v[np.diag_indices_from(v)] += sum(size * shape for size, shape in zip(sizes[m:], own[m:], strict=True))
        v[np.diag_indices_from(v)] += ROUNDING * np.max(np.diag(v), initial=0.0)
        try:
            factor = np.linalg.cholesky(v)
        except np.linalg.LinAlgError:
            return np.inf, None
        total += np.sum(np.log(np.diag(factor))) + 0.5 * np.sum(np.linalg.solve(factor, y) ** 2)
        found.append(v)
    return total, found


def estimate_variances(blocks: list[Block], kept: list[np.ndarray], model: Model, iterations: int = 30) -> Model:
    """Find the variances of greatest restricted likelihood, given their wide priors, by Fisher scoring.

    Parameters
    ----------
    blocks : list of Block
        Sets of crossings that are taken as independent of each other.
    kept : list of array of bool
        Which crossings of each take part.
    model : Model
        Where the search starts.
    iterations : int
        Steps at most.

    Returns
    -------
    Model

    """
    rows = [np.flatnonzero(k) for k in kept]
    fixed = [block.fixed(model.prior)[np.ix_(r, r)] for block, r in zip(blocks, rows, strict=True)]
    shapes = [block.shapes(model, r) for block, r in zip(blocks, rows, strict=True)]
    mismatches = [block.crossings.mismatch[r] for block, r in zip(blocks, rows, strict=True)]
    log_variance = model.log_variance.copy()
    m, size = len(model.processes), len(log_variance)
    value, found = _likelihood(model, fixed, shapes, mismatches, log_variance)
    damping = 1e-3
    for _ in range(iterations):
        slope = (log_variance - model.expected) / model.spread**2
        information = np.diag(1.0 / model.spread**2)
        factors = np.exp(log_variance)
        for v, own, y in zip(found, shapes, mismatches, strict=True):
            if not len(y):
                continue
            inverse = _inverse(v)
            a = inverse @ y
            products = [inverse @ (factors[k] * own[k]) for k in range(m)]
            products += [inverse * (factors[k] * own[k])[None, :] for k in range(m, size)]
            for k in range(size):
                shape = own[k] @ a if k < m else own[k] * a
                slope[k] += 0.5 * np.trace(products[k]) - 0.5 * factors[k] * (a @ shape)
                for j in range(k + 1):
                    information[k, j] += 0.5 * np.sum(products[k] * products[j].T)
        information = np.tril(information) + np.tril(information, -1).T
        while damping < 1e8:
            step = -np.linalg.solve(information + damping * np.diag(np.diag(information)), slope)
            step = np.clip(step, -2.0, 2.0)
            tried, other = _likelihood(model, fixed, shapes, mismatches, log_variance + step)
            if tried <= value:
                break
            damping = max(damping, 1e-4) * 10
        else:
            break
        gain, value, found = value - tried, tried, other
        log_variance = log_variance + step
        damping /= 10
        if gain < 1e-6:
            break
    return replace(model, log_variance=log_variance)


def left_out_figure(blocks: list[Block], kept: list[np.ndarray], model: Model) -> tuple[float, float]:
    """Return how well crossings are predicted by the others, in nT: the figure that decides on terms, and the rms.

    With e what the others leave of a mismatch and v its variance as the model has it, the figure is
    ``exp(mean(log v + e^2 / v - 1) / 2)``, the logarithmic score of the predictions (Good 1952, *J. R. Statist. Soc. B*
    14) as a length: it is the rms of e where the variances are alike and right, and larger where the model claims to
    know more, or less, than it does.
    """
    errors, variances = [np.empty(0)], [np.empty(0)]
    for block, keep in zip(blocks, kept, strict=True):
        v = block.covariance(model, np.where(keep, 1.0, FLOOR))
        error, variance = left_out(v, block.crossings.mismatch)
        errors.append(error[keep])
        variances.append(variance[keep])
    e, v = np.concatenate(errors), np.concatenate(variances)
    if not len(e):
        return np.nan, np.nan
    score = np.mean(np.log(v) + e**2 / v - 1) / 2
    return float(np.exp(min(score, 50.0))), float(np.sqrt(np.mean(e**2)))  # 50: nothing fits at all


def choose_terms(
    blocks: list[Block], kept: list[np.ndarray], model: Model, optional: list[str]
) -> tuple[Model, list[dict]]:
    """Drop the terms that do not lower the leave-one-out figure, the least useful first.

    Parameters
    ----------
    blocks : list of Block
    kept : list of array of bool
        Which crossings of each block take part.
    model : Model
        With all terms, variances estimated.
    optional : list of str
        Terms that may be dropped.

    Returns
    -------
    Model
        With the terms that stay, variances estimated anew.
    list of dict
        For each term, as last looked at: ``term``, ``kept``, ``left_out_with_nt`` and ``left_out_without_nt`` (the
        figure that decides), ``rms_left_out_with_nt`` and ``rms_left_out_without_nt``.

    """
    waiting, said = list(optional), {}
    figure, rms = left_out_figure(blocks, kept, model)
    while waiting:
        trials = []
        for term in waiting:
            smaller = estimate_variances(blocks, kept, model.without(term), iterations=6)
            trials.append((*left_out_figure(blocks, kept, smaller), term, smaller))
        for other, other_rms, term, _ in trials:
            said[term] = {
                "term": term,
                "kept": bool(other > figure),
                "left_out_with_nt": figure,
                "left_out_without_nt": other,
                "rms_left_out_with_nt": rms,
                "rms_left_out_without_nt": other_rms,
            }
        best, best_rms, term, smaller = min(trials, key=lambda trial: (trial[0], optional.index(trial[2])))
        if not best <= figure:
            break
        model, figure, rms = smaller, best, best_rms
        waiting.remove(term)
    return model, [said[term] for term in optional if term in said]
