"""Solve the levelling adjustment with given variances, and keep of its posterior what readings need.

Small surveys are solved by collocation, in the space of the crossings (`steps.collocation`); large ones by sparse least
squares in the space of the nodes (`steps.adjustment`), with the same processes, variances and priors.
"""

from dataclasses import dataclass, field, replace

import numpy as np

from steps import adjustment
from steps.collocation import EFFECTS, FLOOR, Block, Crossings, Model, Points, signal
from steps.joint import Nodes, deviation

COLLOCATED = 600  # crossings up to which V is inverted
TOGETHER = 1500  # nodes whose prior covariance is one block; beyond it, drift in time is cut between stretches
NEGLIGIBLE = 1e-6  # of the largest eigenvalue of a block's prior covariance: below it an axis is dropped
KEPT_WHOLE = 3000  # unknowns up to which the covariance of all nodes is held at once


@dataclass(frozen=True)
class Posterior:
    """What the crossings say of the corrections, and how well.

    The correction of a line is z at its nodes, linear between them; b are the coefficients of the surveys; d is the
    datum of a network, the mean over its readings of all that is applied (zero where lines are held), and d_z that of
    z alone.

    Attributes
    ----------
    value : array, shape (M,)
        z, nT, the datum not removed.
    variance, following : array, shape (M,)
        Variance of z, and its covariance with the next node's.
    effects : array, shape (surveys, 7)
        b.
    effects_covariance : array, shape (surveys, 7, 7)
    mixed : array, shape (M, 7)
        Covariance of z with the coefficients of its own survey.
    datum, datum_sigma : array, shape (networks,)
        d, and one sigma of it, if line errors are as likely to be positive as negative.
    datum_variance : array, shape (networks,)
        Its variance, zero where all variances and covariances below are those of z - d already.
    datum_nodes, datum_level_nodes : array, shape (M,)
        Covariance of z with d and with d_z of its network.
    datum_level_variance : array, shape (networks,)
        Variance of d_z.
    datum_effects : array, shape (m, 7)
        Covariance of the coefficients of each line's survey with d of its network.
    covariance : array, shape (M, M), or None
        Covariance of z at all nodes, where it is small enough to be held.
    factor : array, shape (M, k), or None
        In its stead, draws of z - d about its estimate.
    residual, left_out, left_out_variance, weight, leverage : array, shape (n,)
        Of the crossings; see `adjustment.Solution`.
    scale : float
        Robust standard deviation of the standardised leave-one-out residuals.

    """

    value: np.ndarray
    variance: np.ndarray
    following: np.ndarray
    effects: np.ndarray
    effects_covariance: np.ndarray
    mixed: np.ndarray
    datum: np.ndarray
    datum_sigma: np.ndarray
    datum_variance: np.ndarray
    datum_nodes: np.ndarray
    datum_level_nodes: np.ndarray
    datum_level_variance: np.ndarray
    datum_effects: np.ndarray
    covariance: np.ndarray | None = field(repr=False)
    factor: np.ndarray | None = field(repr=False)
    residual: np.ndarray = field(repr=False)
    left_out: np.ndarray = field(repr=False)
    left_out_variance: np.ndarray = field(repr=False)
    weight: np.ndarray = field(repr=False)
    leverage: np.ndarray = field(repr=False)
    scale: float = 1.0


def solve(
    crossings: Crossings,
    model: Model,
    nodes: Nodes,
    points: Points,
    *,
    first_utc: np.ndarray,
    second_utc: np.ndarray,
    network: np.ndarray,
    readings: np.ndarray,
    means: np.ndarray,
    applied: np.ndarray,
    needed: np.ndarray,
    robust: bool,
    kept: np.ndarray,
) -> Posterior:
    """Solve the adjustment with given variances, reweighting crossings that do not fit.

    Parameters
    ----------
    crossings : Crossings
    model : Model
    nodes : Nodes
    points : Points
        The nodes, as points; without effects.
    first_utc, second_utc : array of datetime64[ns], shape (n,)
        Times of the passes.
    network : array of int, shape (m,)
        Network of each line; -1 for a line without a crossing, and its node values mean nothing.
    readings : array, shape (m,)
        Readings on each line, the weights of the datum.
    means : array, shape (m, 7)
        Mean of the effects over the readings of each line.
    applied : array of bool, shape (7,)
        Coefficients that are applied, and so belong to the datum.
    needed : array of bool, shape (n,)
        Crossings that are not to be rejected.
    robust : bool
        Reweight; else `kept` is final.
    kept : array of bool, shape (n,)
        Crossings to begin with.

    """
    weights = nodes.weights(np.where(network >= 0, readings, 0.0))
    held = np.zeros(network.max(initial=-1) + 1, bool)
    loose = np.ones(len(network))
    loose[nodes.line] = points.loose
    held[network[(loose == 0) & (network >= 0)]] = True
    datum = _Datum(nodes, points, network, weights, readings, means * applied[None, :], held, len(model.prior))
    if len(crossings) <= COLLOCATED and len(nodes) <= 2 * KEPT_WHOLE:
        return _collocate(crossings, model, nodes, points, datum, needed, robust, kept)
    return _adjust(crossings, model, nodes, points, datum, robust, kept, first_utc, second_utc)


class _Datum:
    """The datum conditions as functionals of nodes and coefficients."""

    def __init__(self, nodes, points, network, weights, readings, means, held, surveys):
        from scipy.sparse import csr_array

        count = len(held)
        self.network, self.nodes, self.survey = network, nodes, np.zeros(len(network), int)
        self.survey[nodes.line] = points.survey
        of_node = network[nodes.line]
        inside = np.flatnonzero((of_node >= 0) & (weights > 0))
        inside = inside[~held[of_node[inside]]]
        total = np.bincount(of_node[inside], weights[inside], minlength=count)
        share = weights[inside] / total[of_node[inside]]
        self.of_nodes = csr_array((share, (of_node[inside], inside)), shape=(count, len(nodes)))
        lines = np.flatnonzero(network >= 0)
        lines = lines[~held[network[lines]]]
        whole = np.bincount(network[lines], readings[lines], minlength=count)
        part = means[lines] * (readings[lines] / whole[network[lines]])[:, None]
        columns = self.survey[lines][:, None] * len(EFFECTS) + np.arange(len(EFFECTS))
        self.of_effects = csr_array(
            (part.ravel(), (np.repeat(network[lines], len(EFFECTS)), columns.ravel())),
            shape=(count, surveys * len(EFFECTS)),
        )


def _robustly(step, robust: bool, kept: np.ndarray, needed: np.ndarray):
    """Iterate `step(weight) -> deviation` to weights after Huber, then Tukey; return weights and scale."""
    weight = kept.astype(float)
    for k in range(12 if robust else 1):
        off = step(weight)
        scale = adjustment.robust_scale(off[(weight > 0) & ~needed])
        if not robust:
            break
        off = np.where(needed, 0.0, off / max(scale, adjustment.LEAST_SCALE))
        new = adjustment.robust_weight(off, "huber" if k < 4 else "tukey")
        if k < 4:
            new = np.where(np.abs(off) < 2 * adjustment.TUKEY, new, 0.0)
        settled = k >= 4 and np.max(np.abs(new - weight), initial=0.0) < 1e-4
        weight = new
        if settled:
            break
    return weight, scale


def _collocate(crossings, model, nodes, points, datum, needed, robust, kept) -> Posterior:
    """Solve in the space of the crossings."""
    block = Block(crossings, model)
    weight, scale = _robustly(lambda w: deviation(block, model, w), robust, kept, needed)
    v = block.covariance(model, weight)
    inverse = np.linalg.inv(v)
    inverse = (inverse + inverse.T) / 2
    a = inverse @ crossings.mismatch
    own = model.noise(crossings.parts)
    heavy = own / np.maximum(weight, FLOOR)
    diagonal = np.diag(inverse)
    cross = signal(model, points, crossings.first, effects=False)
    cross -= signal(model, points, crossings.second, effects=False)
    surveys, k = model.prior.shape[:2]
    of_effects = np.zeros((surveys, k, len(crossings)))
    for p, sign in ((crossings.first, 1.0), (crossings.second, -1.0)):
        moved = np.einsum("nij,nj->ni", model.prior[p.survey], p.effects * p.loose[:, None])
        np.add.at(of_effects, (p.survey, slice(None), np.arange(len(p))), sign * moved)
    whole = np.concatenate([cross, of_effects.reshape(surveys * k, -1)])
    mean = whole @ a
    m = len(nodes)
    covariance = -whole @ inverse @ whole.T
    covariance[:m, :m] += signal(model, points, points, effects=False)
    for s in range(surveys):
        part = slice(m + s * k, m + (s + 1) * k)
        covariance[part, part] += model.prior[s]
    left = a / diagonal
    return _from_covariance(
        mean,
        covariance,
        nodes,
        points,
        datum,
        surveys,
        residual=heavy * a,
        left_out=left,
        left_out_variance=1.0 / diagonal - heavy + own,
        weight=weight,
        leverage=np.clip(1.0 - heavy * diagonal, 0.0, 1.0),
        scale=scale,
    )


def _from_covariance(mean, covariance, nodes, points, datum, surveys, **of_crossings) -> Posterior:
    """Pick what readings need from the covariance of all nodes and coefficients."""
    m, k = len(nodes), len(EFFECTS)
    of_z, of_b = datum.of_nodes, datum.of_effects
    with_level = (of_z @ covariance[:m]).T  # (unknowns, networks)
    with_datum = with_level + (of_b @ covariance[m:]).T
    datum_variance = np.asarray((of_z @ with_datum[:m]).diagonal() + (of_b @ with_datum[m:]).diagonal())
    network = datum.network[nodes.line]
    rows = np.arange(m)
    inside = network >= 0

    def own(table):  # each node with its own network's datum
        found = np.zeros(m)
        found[inside] = table[rows[inside], network[inside]]
        return found

    following = np.zeros(m)
    following[:-1] = np.diag(covariance[:m, :m], 1)
    datum_effects = np.zeros((len(datum.network), k))
    lines = np.flatnonzero(datum.network >= 0)
    of_effects = with_datum[m:].reshape(surveys, k, -1)
    datum_effects[lines] = of_effects[datum.survey[lines], :, datum.network[lines]]
    return Posterior(
        value=mean[:m],
        variance=np.diag(covariance)[:m].copy(),
        following=following,
        effects=mean[m:].reshape(surveys, k),
        effects_covariance=np.array(
            [covariance[m + s * k : m + (s + 1) * k, m + s * k : m + (s + 1) * k] for s in range(surveys)]
        ),
        mixed=covariance[rows[:, None], m + points.survey[:, None] * k + np.arange(k)],
        datum=of_z @ mean[:m] + of_b @ mean[m:],
        datum_sigma=np.sqrt(np.maximum(datum_variance, 0.0)),
        datum_variance=datum_variance,
        datum_nodes=own(with_datum[:m]),
        datum_level_nodes=own(with_level[:m]),
        datum_level_variance=np.asarray((of_z @ with_level[:m]).diagonal()),
        datum_effects=datum_effects,
        covariance=covariance[:m, :m],
        factor=None,
        **of_crossings,
    )


def _adjust(crossings, model, nodes, points, datum, robust, kept, first_utc, second_utc) -> Posterior:
    """Solve in the space of the nodes."""
    from scipy.sparse import block_array, csr_array, identity

    surveys, k = model.prior.shape[:2]
    m, n = len(nodes), len(crossings)
    offset = [p for p in model.processes if p.form == "survey"]
    processes = [p for p in model.processes if p.form != "survey"]
    sizes = [v for p, v in zip(model.processes, model.log_variance, strict=False) if p.form != "survey"]
    alone = replace(model, processes=tuple(processes), log_variance=np.array(sizes))
    joined = any(p.form == "time" for p in processes) or m > adjustment.INVERTED
    block = _stretches(points.survey) if joined else nodes.line
    root, column_block = _roots(alone, points, block)
    owner = points.survey[np.flatnonzero(np.diff(block, prepend=-1))]  # survey of each block
    coefficient_root, used = _coefficient_roots(model.prior)
    offset_sd = np.sqrt(np.exp(model.log_variance[model.processes.index(offset[0])])) if offset else 0.0
    home = np.searchsorted(owner, np.arange(surveys)) if joined else len(owner) + np.arange(surveys)
    label = np.concatenate([column_block, home[used // k], home if offset else []]).astype(int)
    order = np.argsort(label, kind="stable")
    rows = np.arange(n)
    interpolate, shift, effects = 0, 0, 0
    for p, time, sign in ((crossings.first, first_utc, 1.0), (crossings.second, second_utc, -1.0)):
        loose = sign * p.loose
        interpolate = interpolate + nodes.design(p.line, time).multiply(loose[:, None])
        shift = shift + csr_array((loose, (rows, p.survey)), shape=(n, surveys))
        columns = (p.survey[:, None] * k + np.arange(k)).ravel()
        own = (p.effects * loose[:, None]).ravel()
        effects = effects + csr_array((own, (np.repeat(rows, k), columns)), shape=(n, surveys * k))
    level_shift = csr_array((points.loose * offset_sd, (np.arange(m), points.survey)), shape=(m, surveys))
    parts = [csr_array(interpolate), csr_array(effects), csr_array(shift)]
    shift_root = csr_array((np.full(surveys, offset_sd), (np.arange(surveys),) * 2), shape=(surveys, surveys))
    if not offset:
        parts, shift_root, level_shift = parts[:2], None, None
    design = csr_array(block_array([parts]))
    design.eliminate_zeros()
    diagonal = [root, coefficient_root] + ([shift_root] if offset else [])
    grid = [[part if i == j else None for j in range(len(diagonal))] for i, part in enumerate(diagonal)]
    whole_root = csr_array(csr_array(block_array(grid))[:, order])
    found = adjustment.adjust(
        design,
        whole_root,
        np.searchsorted(np.unique(label), label[order]),
        crossings.mismatch,
        model.noise(crossings.parts),
        weight=kept.astype(float),
        robust=robust,
    )
    of_level = csr_array(whole_root[:m])
    if level_shift is not None:
        padded = [[csr_array((m, root.shape[1] + coefficient_root.shape[1])), level_shift]]
        of_level = csr_array(of_level + csr_array(block_array(padded))[:, order])
    of_effects = csr_array(whole_root[m : m + surveys * k])
    of_crossings = {
        "residual": found.residual,
        "left_out": found.left_out,
        "left_out_variance": found.left_out_variance,
        "weight": found.weight,
        "leverage": found.leverage,
        "scale": found.scale,
    }
    both = csr_array(block_array([[of_level], [of_effects]]))
    if found.covariance is not None and both.shape[0] <= 2 * KEPT_WHOLE:
        if found.covariance_z is None:
            covariance = adjustment.sandwich(both, found.covariance)
        elif not offset:
            covariance = found.covariance_z
        else:  # the level at a node is that of the line and that of its survey
            shifted = csr_array((points.loose, (np.arange(m), points.survey)), shape=(m, surveys))
            whole = identity(m + surveys * k, format="csr")
            tail = csr_array(block_array([[shifted], [csr_array((surveys * k, surveys))]]))
            covariance = adjustment.sandwich(csr_array(block_array([[whole, tail]])), found.covariance_z)
        return _from_covariance(both @ found.unknowns, covariance, nodes, points, datum, surveys, **of_crossings)
    return _from_solution(found, of_level, of_effects, nodes, points, datum, surveys, label[order], of_crossings)


def _from_solution(found, of_level, of_effects, nodes, points, datum, surveys, label, of_crossings) -> Posterior:
    """Pick what readings need from a large solution, without the covariance of everything with everything."""
    k = len(EFFECTS)
    value, effects = of_level @ found.unknowns, of_effects @ found.unknowns
    common = {
        "value": value,
        "effects": effects.reshape(surveys, k),
        "datum": datum.of_nodes @ value + datum.of_effects @ effects,
        "covariance": None,
        **of_crossings,
    }
    if found.covariance is None:
        return Posterior(**common, **_sampled(found, of_level, of_effects, nodes, points, datum, surveys, label))
    return Posterior(**common, factor=None, **_gathered(found.covariance, of_level, of_effects, nodes, points, datum))


def _gathered(c, of_level, of_effects, nodes, points, datum) -> dict:
    """Gather variances and covariances from the covariance of all unknowns."""
    from scipy.sparse import csr_array

    m, k = len(nodes), len(EFFECTS)
    network = datum.network[nodes.line]
    lines = np.flatnonzero(datum.network >= 0)
    level = csr_array(datum.of_nodes @ of_level)
    whole = csr_array(level + datum.of_effects @ of_effects)
    with_level, with_datum = (c @ functional.T.toarray() for functional in (level, whole))
    own = np.arange(m), np.maximum(network, 0)
    own_effects = of_effects[(datum.survey[lines][:, None] * k + np.arange(k)).ravel()]
    at = np.repeat(datum.network[lines], k)
    datum_effects = np.zeros((len(datum.network), k))
    datum_effects[lines] = (own_effects @ with_datum)[np.arange(len(at)), at].reshape(-1, k)
    mixed = np.zeros((m, k))
    for j in np.flatnonzero(np.diff(of_effects.indptr).reshape(-1, k).any(axis=0)):
        mixed[:, j] = adjustment.quadratic(of_level, c, csr_array(of_effects[points.survey * k + j]))
    surveys = of_effects.shape[0] // k
    parts = [of_effects[s * k : (s + 1) * k] for s in range(surveys)]
    datum_variance = np.asarray((whole @ with_datum).diagonal())
    return {
        "variance": adjustment.quadratic(of_level, c),
        "following": np.append(adjustment.quadratic(csr_array(of_level[:-1]), c, csr_array(of_level[1:])), 0.0),
        "mixed": mixed,
        "effects_covariance": np.array([adjustment.sandwich(part, c) for part in parts]),
        "datum_sigma": np.sqrt(np.maximum(datum_variance, 0.0)),
        "datum_variance": datum_variance,
        "datum_nodes": np.where(network >= 0, (of_level @ with_datum)[own], 0.0),
        "datum_level_nodes": np.where(network >= 0, (of_level @ with_level)[own], 0.0),
        "datum_level_variance": np.asarray((level @ with_level).diagonal()),
        "datum_effects": datum_effects,
    }


def _sampled(found, of_level, of_effects, nodes, points, datum, surveys, label) -> dict:
    """Work out variances, the datum left out, survey by survey: given all others exactly, and by draws of those."""
    m, k, count = len(nodes), len(EFFECTS), found.draws.shape[1]
    network = datum.network[nodes.line]
    level_draws, effect_draws = of_level @ found.draws, of_effects @ found.draws
    datum_draws = datum.of_nodes @ level_draws + datum.of_effects @ effect_draws
    factor = level_draws - np.where(network[:, None] >= 0, datum_draws[np.maximum(network, 0)], 0.0)
    # by draws alone, for what lies in several blocks
    variance = np.mean(factor**2, axis=1)
    following = np.append(np.mean(factor[:-1] * factor[1:], axis=1), 0.0)
    grouped = effect_draws.reshape(surveys, k, count)
    mixed = np.einsum("md,mkd->mk", factor, grouped[points.survey]) / count
    effects_covariance = np.einsum("skd,sld->skl", grouped, grouped) / count
    number = np.searchsorted(np.unique(label), label)
    starts = np.flatnonzero(np.diff(number, prepend=-1))
    stops = np.append(starts[1:], len(number))
    first, last = (np.searchsorted(points.survey, np.arange(surveys), side=side) for side in ("left", "right"))
    for s in range(surveys):
        q = last[s] - first[s]
        rows, own = of_level[first[s] : last[s]], of_effects[s * k : (s + 1) * k]
        touched = np.unique(number[np.concatenate([rows.indices, own.indices])])
        if q == 0 or len(touched) != 1:
            continue
        b = int(touched[0])
        part = slice(starts[b], stops[b])
        both = np.concatenate([rows[:, part].toarray(), own[:, part].toarray()])
        draws = both @ found.means[part]
        draws[:q] += factor[first[s] : last[s]] - level_draws[first[s] : last[s]]
        covariance = both @ found.blocks[b] @ both.T + draws @ draws.T / count
        nodes_here = slice(first[s], last[s])
        variance[nodes_here] = np.diag(covariance)[:q]
        following[first[s] : last[s] - 1] = np.diag(covariance, 1)[: q - 1]
        mixed[nodes_here] = covariance[:q, q:]
        effects_covariance[s] = covariance[q:, q:]
    return {
        "variance": variance,
        "following": following,
        "mixed": mixed,
        "effects_covariance": effects_covariance,
        "datum_sigma": np.sqrt(np.mean(datum_draws**2, axis=1)),
        "datum_variance": np.zeros(len(datum_draws)),
        "datum_nodes": np.zeros(m),
        "datum_level_nodes": np.zeros(m),
        "datum_level_variance": np.zeros(len(datum_draws)),
        "datum_effects": np.zeros((len(datum.network), k)),
        "factor": factor,
    }


def _stretches(survey: np.ndarray) -> np.ndarray:
    """Give a number to stretches of at most `TOGETHER` nodes, each of one survey; nodes in order of survey and time."""
    start = np.searchsorted(survey, survey)
    within = (np.arange(len(survey)) - start) // TOGETHER
    return np.cumsum(np.diff(survey, prepend=-1).astype(bool) | np.diff(within, prepend=0).astype(bool)) - 1


def _coefficient_roots(prior: np.ndarray):
    """Return a root of the prior covariance of all coefficients, and the coefficient that each column stands for."""
    from scipy.sparse import csr_array

    surveys, k = prior.shape[:2]
    spread, axes = np.linalg.eigh(prior)
    use = spread > 1e-12 * np.maximum(spread.max(axis=1, keepdims=True, initial=0.0), 1e-300)
    root = axes * np.sqrt(np.maximum(spread, 0.0))[:, None, :]
    s, column = np.nonzero(use)
    rows = (s[:, None] * k + np.arange(k)).ravel()
    found = csr_array(
        (root[s, :, column].ravel(), (rows, np.repeat(np.arange(len(s)), k))), shape=(surveys * k, len(s))
    )
    found.eliminate_zeros()
    return found, s * k + column


def _roots(model: Model, points: Points, block: np.ndarray):
    """Return a root of the prior covariance of the nodes, in blocks, as one sparse matrix; and each column's block."""
    from scipy.sparse import csr_array

    starts = np.flatnonzero(np.diff(block, prepend=-1))
    sizes = np.diff(np.append(starts, len(block)))
    parts: list = [None] * len(starts)
    for size in np.unique(sizes):
        members = np.flatnonzero(sizes == size)
        step = max(1, int(4e6) // int(size) ** 2)
        for some in np.split(members, np.arange(step, len(members), step)):
            own = points.take(starts[some][:, None] + np.arange(size))
            spread, axes = np.linalg.eigh(signal(model, own, own, effects=False))
            root = axes * np.sqrt(np.maximum(spread, 0.0))[:, None, :]
            for number, matrix, values in zip(some, root, spread, strict=True):
                parts[number] = matrix[:, values > NEGLIGIBLE * max(values[-1], 1e-300)]
    ranks = np.array([part.shape[1] for part in parts])
    first = np.concatenate([[0], np.cumsum(ranks)])
    indptr = np.concatenate([[0], np.cumsum(np.repeat(ranks, sizes))])
    indices = np.concatenate(
        [np.tile(np.arange(a, b), s) for a, b, s in zip(first[:-1], first[1:], sizes, strict=True)]
    )
    data = np.concatenate([part.ravel() for part in parts])
    return csr_array((data, indices, indptr), shape=(len(block), int(first[-1]))), np.repeat(
        np.arange(len(ranks)), ranks
    )
