"""One adjustment of everything that levelling may correct: set it up, estimate its variances, choose its terms.

The variances come from a few groups of lines that cross each other often, where there are too many crossings for all of
them: the restricted likelihood of a part of the data is a likelihood too. `steps.posterior` then solves for all.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steps import adjustment
from steps.collocation import (
    EFFECTS,
    EFFECTS_OF,
    FLOOR,
    Block,
    Crossings,
    Model,
    Points,
    Process,
    choose_terms,
    correlate,
    estimate_variances,
    left_out,
)
from steps.settings import Levelling

PASSES = ("_1", "_2")

CLUSTER, CLUSTERS = 120, 4  # crossings from which variances are estimated
TERMS = ("line_drift", "time_drift", *EFFECTS_OF)


@dataclass(frozen=True)
class Nodes:
    """Instants at which the corrections of the lines are unknowns, in order of line and time.

    Attributes
    ----------
    line : array of int, shape (M,)
        Row of the table of lines.
    time_utc : array of datetime64[ns], shape (M,)
        When.

    """

    line: np.ndarray
    time_utc: np.ndarray

    def __len__(self):
        return len(self.line)

    def between(self, line: np.ndarray, time_utc: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Place instants between the nodes of their lines.

        Returns
        -------
        first : array of int, shape (n,)
            Node before the instant, the first or last but one beyond the ends; on a line with one node, that one.
        share : array, shape (n,)
            Place between it and the next node of the line, 0 to 1.

        """
        lines = np.arange(int(self.line[-1]) + 2 if len(self) else 1)
        edges = np.searchsorted(self.line, lines)
        starts, stops = edges[line], edges[line + 1]
        times, wanted = self.time_utc.astype("int64"), np.asarray(time_utc, "datetime64[ns]").astype("int64")
        # nodes of a line are evenly spaced, so the place follows from its first and last one
        begin, end, gaps = times[starts], times[stops - 1], np.maximum(stops - starts - 1, 0)
        width = np.where(end > begin, end - begin, 1)
        place = np.clip((wanted - begin) / width, 0.0, 1.0) * gaps
        step = np.minimum(place.astype(int), np.maximum(gaps - 1, 0))
        return starts + step, place - step

    def design(self, line: np.ndarray, time_utc: np.ndarray):
        """Return the sparse matrix that interpolates node values to instants, shape (n, M)."""
        from scipy.sparse import csr_array

        first, share = self.between(line, time_utc)
        n = len(first)
        following = np.minimum(first + (share > 0), len(self) - 1)
        rows = np.concatenate([np.arange(n)] * 2)
        return csr_array(
            (np.concatenate([1 - share, share]), (rows, np.concatenate([first, following]))), shape=(n, len(self))
        )

    def weights(self, readings: np.ndarray) -> np.ndarray:
        """Share out the readings of each line, evenly spread over it, among its nodes."""
        count = np.bincount(self.line, minlength=len(readings))
        ends = np.r_[True, np.diff(self.line) > 0] | np.r_[np.diff(self.line) > 0, True]
        portion = np.where(ends & (count[self.line] > 1), 0.5, 1.0)
        return portion * readings[self.line] / np.maximum(count[self.line] - 1, 1)


def place_nodes(start_utc: np.ndarray, end_utc: np.ndarray, spacing_h: float | None) -> Nodes:
    """Place the nodes of each line: its middle, or evenly from its start to its end.

    Parameters
    ----------
    start_utc, end_utc : array of datetime64[ns], shape (m,)
        First and last instants of the lines.
    spacing_h : float or None
        Longest time between the nodes in hours; None for one node a line (a constant correction).

    """
    start, end = (np.asarray(t, "datetime64[ns]").astype("int64") for t in (start_utc, end_utc))
    if spacing_h is None:
        return Nodes(np.arange(len(start)), (start + (end - start) // 2).astype("datetime64[ns]"))
    gaps = np.maximum(np.ceil((end - start) / (spacing_h * 3.6e12)), 1).astype(int)
    line = np.repeat(np.arange(len(start)), gaps + 1)
    number = np.arange(len(line)) - np.repeat(np.cumsum(gaps + 1) - gaps - 1, gaps + 1)
    time = start[line] + np.round((end - start)[line] * (number / gaps[line])).astype("int64")
    return Nodes(line, time.astype("datetime64[ns]"))


@dataclass(frozen=True)
class Fit:
    """Variances, terms and what they brought.

    Attributes
    ----------
    model : Model
        With the terms kept.
    full : Model
        With all terms that were tried.
    trials : list of dict
        What each optional term brought.
    kept : array of bool, shape (n,)
        Crossings that took part in the estimate of the variances.

    """

    model: Model
    full: Model
    trials: list
    kept: np.ndarray


def heading_prior(records: list[dict], sigma_nt: float) -> tuple[np.ndarray, np.ndarray]:
    """Return what the calibrations say of the heading coefficients beyond what was applied.

    Parameters
    ----------
    records : list of dict
        The heading stage's record of each survey: ``coefficients`` that were applied, ``all_coefficients`` and
        ``all_covariance`` of the fit; without them there was no calibration.
    sigma_nt : float
        Expected size of a coefficient where no calibration tells it.

    Returns
    -------
    mean : array, shape (surveys, 4)
    covariance : array, shape (surveys, 4, 4)

    """
    mean, covariance = np.zeros((len(records), 4)), np.tile(sigma_nt**2 * np.eye(4), (len(records), 1, 1))
    for s, record in enumerate(records):
        if "all_covariance" not in record:
            continue
        spread = np.array(record["all_covariance"], float)
        values, axes = np.linalg.eigh(spread)
        told = values > 1e-9 * max(values[-1], 1e-300)  # two headings tell one combination only
        values = np.where(told, np.minimum(values, sigma_nt**2), sigma_nt**2)
        covariance[s] = (axes * values) @ axes.T
        mean[s] = np.array(record["all_coefficients"], float) - np.array(record["coefficients"], float)
    return mean, covariance


def line_share(lines: pd.DataFrame, line: np.ndarray, time_utc: np.ndarray) -> np.ndarray:
    """Return the place of instants along their lines in time, of zero mean and unit variance over a line."""
    start = lines["start_utc"].to_numpy().astype("datetime64[ns]").astype("int64")
    end = lines["end_utc"].to_numpy().astype("datetime64[ns]").astype("int64")
    width = np.maximum(end - start, 1)[line]
    place = (np.asarray(time_utc, "datetime64[ns]").astype("int64") - start[line]) / width
    return np.sqrt(3.0) * (2.0 * np.clip(place, 0.0, 1.0) - 1.0)


def make_points(
    lines: pd.DataFrame,
    line: np.ndarray,
    time_utc: np.ndarray,
    *,
    sigma_diurnal_nt: np.ndarray,
    without_base_nt: float,
    held: np.ndarray,
    effects: np.ndarray | None = None,
) -> Points:
    """Describe instants on lines to the processes.

    Parameters
    ----------
    lines : pandas.DataFrame
        In canonical order.
    line : array of int, shape (n,)
        Row in `lines`.
    time_utc : array of datetime64[ns], shape (n,)
    sigma_diurnal_nt : array, shape (n,)
        One sigma of the diurnal term; NaN where there is none.
    without_base_nt : float
        Expected size of the external variation there.
    held : array of bool, shape (m,)
    effects : array, shape (n, 7), optional
        Zero by default.

    """
    time = np.asarray(time_utc, "datetime64[ns]")
    origin = lines["start_utc"].min() if len(lines) else pd.Timestamp(0)
    missing = ~np.isfinite(sigma_diurnal_nt)
    return Points(
        line=line,
        survey=lines["survey_number"].to_numpy()[line],
        hours=(time - np.datetime64(origin, "ns")).astype("int64") / 3.6e12,
        share=line_share(lines, line, time),
        with_base=np.where(missing, 0.0, sigma_diurnal_nt),
        without_base=np.where(missing, without_base_nt, 0.0),
        loose=np.where(held[line], 0.0, 1.0),
        effects=np.zeros((len(line), len(EFFECTS))) if effects is None else np.nan_to_num(effects),
    )


def harmonics(angle_deg: np.ndarray) -> np.ndarray:
    """Return cos, sin, cos 2, sin 2 of angles in degrees, shape (n, 4)."""
    theta = np.radians(np.asarray(angle_deg, float))
    return np.stack([np.cos(theta), np.sin(theta), np.cos(2 * theta), np.sin(2 * theta)], axis=-1)


def pass_effects(crossings: pd.DataFrame, side: str, tow: np.ndarray) -> np.ndarray:
    """Return what a unit of each coefficient adds to the anomaly of one pass, shape (n, 7).

    Parameters
    ----------
    crossings : pandas.DataFrame
        Table `crossovers`.
    side : {"_1", "_2"}
    tow : array of bool, shape (n,)
        The heading harmonics are of the tow direction, not of the ship's heading.

    """
    angle = np.where(tow, crossings[f"tow_direction{side}_deg"], crossings[f"ship_heading{side}_deg"])
    gradient = crossings[f"gradient{side}_nt_per_m"].to_numpy(float)
    along = np.cos(np.radians(crossings[f"tow_direction{side}_deg"] - crossings[f"course{side}_deg"])).fillna(1.0)
    speed = crossings[f"speed{side}_mps"].to_numpy(float)
    diurnal = crossings[f"diurnal{side}_nt"].to_numpy(float)
    effects = np.column_stack([harmonics(angle), diurnal, -gradient * along, gradient * speed])
    return np.nan_to_num(effects)


def crossing_parts(crossings: pd.DataFrame, navigation: np.ndarray) -> np.ndarray:
    """Split the variance of each mismatch into that of the values, of the positions, and a unit, shape (n, 3).

    Diurnal and heading errors are left out: they are modelled, not noise.

    Parameters
    ----------
    crossings : pandas.DataFrame
        Table `crossovers`.
    navigation : array, shape (n,)
        Part of the variance of the positions that does not come of the layback, where that is modelled; else 1.

    """
    total = crossings["sigma_mismatch_nt"].to_numpy(float) ** 2
    values, given = np.zeros(len(crossings)), np.zeros(len(crossings))
    for side in PASSES:
        whole = crossings[f"sigma{side}_nt"].to_numpy(float) ** 2
        modelled = sum(
            np.nan_to_num(crossings[f"sigma_{name}{side}_nt"].to_numpy(float)) ** 2 for name in ("diurnal", "heading")
        )
        given += whole
        values += np.maximum(whole - modelled, 0.0)
    known = np.isfinite(given)
    position = np.where(known, np.maximum(total - given, 0.0), 0.0) * navigation
    return np.column_stack([np.maximum(np.where(known, values, total), 1e-6), position, np.ones(len(crossings))])


def along_track_gradient(
    lat: np.ndarray, lon: np.ndarray, value: np.ndarray, track: np.ndarray, window_m: float = 500.0
):
    """Return the slope of a straight line fitted to the values about each reading, along its track.

    Parameters
    ----------
    lat, lon : array, shape (n,)
        Degrees, in order of time.
    value : array, shape (n,)
        NaN where it is not to be used.
    track : array of int, shape (n,)
        Number of the line, -1 for none; windows do not reach from one into another.
    window_m : float
        Length of the window.

    Returns
    -------
    array, shape (n,)
        Per metre; 0 where it cannot be told.

    """
    from steps import geodesy

    slope = np.zeros(len(value))
    good = np.flatnonzero(np.isfinite(value) & np.isfinite(lat) & np.isfinite(lon) & (track >= 0))
    if len(good) < 3:
        return slope
    good = good[np.argsort(track[good], kind="stable")]
    own, v = track[good], value[good]
    begin = np.flatnonzero(np.diff(own, prepend=own[0] - 1))
    length = geodesy.path_length(lat[good], lon[good])
    # a line's own distances and values about their means, so that sums keep their digits
    number = np.repeat(np.arange(len(begin)), np.diff(np.append(begin, len(good))))
    count = np.bincount(number)
    s = length - length[begin][number]
    v = v - (np.bincount(number, v) / count)[number]
    key = s + number * (s.max() + 2 * window_m)
    low, high = np.searchsorted(key, key - window_m / 2), np.searchsorted(key, key + window_m / 2, side="right")
    middle = key - s + (np.bincount(number, s) / count)[number]
    s = key - middle
    sums = [np.concatenate([[0.0], np.cumsum(part)]) for part in (s, v, s * s, s * v)]
    n = (high - low).astype(float)
    s_1, v_1, s_2, s_v = (part[high] - part[low] for part in sums)
    spread = s_2 - s_1**2 / n
    fine = spread > 1e-6 * window_m**2
    slope[good[fine]] = ((s_v - s_1 * v_1 / n)[fine]) / spread[fine]
    return slope


def choose(one: Points, two: Points, flip: np.ndarray) -> Points:
    """Return the points of `one`, those of `two` where `flip`."""
    picked = {}
    for name, own in vars(one).items():
        mask = flip[:, None] if own.ndim > 1 else flip
        picked[name] = np.where(mask, getattr(two, name), own)
    return Points(**picked)


def heading_of(points: Points, coefficients: np.ndarray) -> np.ndarray:
    """Return the heading effect of coefficients, shape (surveys, 4), at points, nT."""
    return np.einsum("nk,nk->n", points.effects[:, :4], coefficients[points.survey]) * points.loose


def difference(data: Crossings) -> np.ndarray:
    """Return what a unit of each coefficient does to each mismatch, shape (n, 7)."""
    one, two = data.first, data.second
    return one.effects * one.loose[:, None] - two.effects * two.loose[:, None]


def wanted_terms(settings: Levelling, data: Crossings) -> set[str]:
    """Return the terms that are not off and that any crossing could tell something of."""
    size = np.abs(difference(data)).max(axis=0, initial=0.0)
    wanted = {term for term in TERMS if getattr(settings, term) != "off" or term in settings.apply}
    return {term for term in wanted if term not in EFFECTS_OF or (size[EFFECTS_OF[term]] > 1e-9).any()}


def kept_terms(model: Model) -> set[str]:
    """Return the terms that a model holds."""
    terms = {process.term for process in model.processes if process.term}
    own = np.einsum("sii->si", model.prior).max(axis=0, initial=0.0)
    return terms | {term for term, columns in EFFECTS_OF.items() if own[columns].any()}


def effects_variance(data: Crossings, prior: np.ndarray, wanted: set[str]) -> np.ndarray:
    """Return what the coefficients may do to each mismatch, nT^2."""
    own = np.einsum("sii->si", prior).copy()
    for term, columns in EFFECTS_OF.items():
        if term not in wanted:
            own[:, columns] = 0.0
    total = np.zeros(len(data))
    for points in (data.first, data.second):
        total += np.einsum("nk,nk->n", points.effects**2, own[points.survey])
    return total


def neglected(found: Fit, nodes: Nodes, points: Points) -> np.ndarray:
    """Return the variance at the nodes of drifts that were dropped, as far as a constant a line leaves it."""
    total = np.zeros(len(nodes))
    kept = {process.name for process in found.model.processes}
    full = zip(found.full.processes, found.full.log_variance, strict=False)
    dropped = [(process, value) for process, value in full if process.name not in kept]
    if not dropped:
        return total
    starts = np.flatnonzero(np.diff(nodes.line, prepend=-1))
    sizes = np.diff(np.append(starts, len(nodes)))
    for size in np.unique(sizes):
        rows = starts[sizes == size][:, None] + np.arange(size)
        own = points.take(rows)
        for process, log_variance in dropped:
            c = correlate(process, own, own)
            within = np.einsum("kii->ki", c) - 2 * c.mean(axis=2) + c.mean(axis=(1, 2))[:, None]
            total[rows] += np.exp(log_variance) * np.maximum(within, 0.0)
    return total


def make_model(
    crossings: Crossings, prior: np.ndarray, *, terms: set[str], scales_h: list[float], surveys: int
) -> Model:
    """Set up the processes of the chosen terms, with wide priors for their variances scaled to the mismatches.

    Parameters
    ----------
    crossings : Crossings
    prior : array, shape (surveys, 7, 7)
        Prior covariance of the coefficients.
    terms : set of str
        Which of `TERMS` take part.
    scales_h : list of float
        Correlation times of the drifts, shortest first.
    surveys : int
        Number of surveys that the crossings touch.

    """
    own = np.median(np.sqrt(crossings.parts[:, :2].sum(axis=1))) if len(crossings) else 1.0
    size = adjustment.robust_scale(crossings.mismatch)
    size = max(size, own, 1e-3)
    processes = [Process("line", "", "line", expected=np.log(size**2 / 4))]
    if surveys > 1:
        processes.append(Process("survey", "", "survey", expected=np.log(size**2), spread=3.0))
    if "line_drift" in terms:
        small = np.log(size**2 / 16)
        processes.append(Process("line trend", "line_drift", "slope", expected=small))
        processes.append(Process("line wander", "line_drift", "wander", hours=scales_h[0], rough=True, expected=small))
    if "time_drift" in terms:
        share = -np.log(len(scales_h))
        for kind, label in (("with_base", "time drift"), ("without_base", "external field")):
            if not any(np.any(getattr(p, kind) > 0) for p in (crossings.first, crossings.second)):
                continue
            for k, hours in enumerate(scales_h):
                rough = k == 0 and kind == "without_base"  # storms and bays; what a base leaves of them is smoother
                name = f"{label}, {hours:g} h"
                processes.append(Process(name, "time_drift", "time", hours, rough, kind, share, 2.0))
    noise_prior = np.array([[0.0, 0.7], [0.0, 1.0], [2 * np.log(max(0.3 * own, 1e-4)), 1.5]])
    prior = prior.copy()
    for term, columns in EFFECTS_OF.items():
        if term not in terms:
            prior[:, columns] = 0.0
            prior[:, :, columns] = 0.0
    start = np.concatenate([[p.expected for p in processes], noise_prior[:, 0]])
    return Model(tuple(processes), start, prior, noise_prior)


def outliers(crossings: Crossings, lines: int, fixed: np.ndarray) -> np.ndarray:
    """Tell gross errors by a first robust adjustment of one constant a line; True where a crossing may stay.

    `fixed` are bounds on what other causes can do to each mismatch, one sigma in nT.
    """
    from scipy.sparse import csr_array, diags_array

    n = len(crossings)
    size = max(adjustment.robust_scale(crossings.mismatch), 1e-3)
    rows = np.tile(np.arange(n), 2)
    value = np.concatenate([crossings.first.loose, -crossings.second.loose])
    design = csr_array((value, (rows, np.concatenate([crossings.first.line, crossings.second.line]))), shape=(n, lines))
    root = csr_array(diags_array(np.full(lines, 30 * size)))
    variance = crossings.parts[:, :2].sum(axis=1) + (0.5 * size) ** 2 + fixed**2
    found = adjustment.adjust(design, root, np.arange(lines), crossings.mismatch, variance, covariance=False)
    return found.weight > 0


def lonely(first: np.ndarray, second: np.ndarray, used: np.ndarray, m: int) -> np.ndarray:
    """Tell the crossings without which a line, or a chain of lines, would have no connection to the others."""
    alone = np.zeros(len(first), bool)
    active = used.copy()
    while True:
        degree = np.bincount(first[active], minlength=m) + np.bincount(second[active], minlength=m)
        ends = active & ((degree[first] == 1) | (degree[second] == 1))
        if not ends.any():
            return alone
        alone |= ends
        active &= ~ends


def clusters(first: np.ndarray, second: np.ndarray, lines: int) -> list[np.ndarray]:
    """Choose crossings to estimate variances from: all if they are few, else groups of lines that cross most often.

    Parameters
    ----------
    first, second : array of int, shape (n,)
        Lines of the crossings.
    lines : int
        Number of lines.

    Returns
    -------
    list of array of int
        Rows of the crossings of each group; groups share no line.

    """
    if len(first) <= 2 * CLUSTER:
        return [np.arange(len(first))]
    taken, found = np.zeros(lines, bool), []
    for _ in range(CLUSTERS):
        open_ = ~taken[first] & ~taken[second]
        degree = np.bincount(first[open_], minlength=lines) + np.bincount(second[open_], minlength=lines)
        if degree.max(initial=0) < 3:
            break
        inside = np.zeros(lines, bool)
        inside[np.argmax(degree)] = True
        count = 0
        while count < CLUSTER:
            mine, other = inside[first], inside[second]
            touching = np.bincount(second[open_ & mine & ~other], minlength=lines)
            touching += np.bincount(first[open_ & other & ~mine], minlength=lines)
            best = int(np.argmax(touching + 1e-9 * degree * (touching > 0)))
            if touching[best] == 0:
                break
            inside[best] = True
            count += int(touching[best])
        rows = np.flatnonzero(open_ & inside[first] & inside[second])
        found.append(rows[:: max(1, len(rows) // (2 * CLUSTER))])
        taken |= inside
    return found


def fit(
    crossings: Crossings,
    model: Model,
    kept: np.ndarray,
    needed: np.ndarray,
    lines: int,
    optional: list[str],
    robust: bool,
) -> Fit:
    """Estimate the variances and choose the terms, leaving out what does not fit.

    Parameters
    ----------
    crossings : Crossings
    model : Model
        All terms, at the means of their priors.
    kept : array of bool, shape (n,)
        Crossings to begin with.
    needed : array of bool, shape (n,)
        Crossings that alone connect a line: nothing contradicts them, so they are not rejected.
    lines : int
        Number of lines.
    optional : list of str
        Terms that are dropped if they do not lower the leave-one-out figure.
    robust : bool
        Leave out crossings more than `adjustment.TUKEY` robust sigmas from what the others say.

    """
    groups = clusters(crossings.first.line, crossings.second.line, lines)
    blocks = [Block(crossings.take(rows), model) for rows in groups]
    inside = [kept[rows] for rows in groups]
    for _ in range(5 if robust else 1):
        model = estimate_variances(blocks, inside, model)
        if not robust:
            break
        off = np.concatenate([deviation(b, model, k.astype(float)) for b, k in zip(blocks, inside, strict=True)])
        off[needed[np.concatenate(groups)]] = 0.0
        scale = max(adjustment.robust_scale(off[np.concatenate(inside)]), adjustment.LEAST_SCALE)
        stay = np.abs(off) < adjustment.TUKEY * scale
        new = np.split(stay, np.cumsum([len(b) for b in groups])[:-1])
        same = all(np.array_equal(a, b) for a, b in zip(new, inside, strict=True))
        inside = new
        if same:
            break
    full = model
    model, trials = choose_terms(blocks, inside, model, optional)
    model = estimate_variances(blocks, inside, model)
    taken = np.zeros(len(crossings), bool)
    for rows, keep in zip(groups, inside, strict=True):
        taken[rows[keep]] = True
    return Fit(model, full, trials, taken)


def deviation(block: Block, model: Model, weight: np.ndarray) -> np.ndarray:
    """Return what each crossing departs from the others' prediction, in sigmas of that, its own weight undone."""
    error, variance = left_out(block.covariance(model, weight), block.crossings.mismatch)
    own = model.noise(block.crossings.parts)
    return error / np.sqrt(variance - own / np.maximum(weight, FLOOR) + own)
