"""What levelling found, taken to readings and to lines: corrections, sigmas, statistics, covariances."""

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from steps.collocation import EFFECTS, Crossings, Points
from steps.columns import TABLES, Flag
from steps.joint import PASSES, Fit, Nodes
from steps.posterior import Posterior
from steps.settings import Levelling

LEVELLING = TABLES["levelling"]
WRITTEN = 1500  # nodes whose covariance is written whole; beyond it, one node a line


@dataclass(frozen=True)
class Levels:
    """Result of `level`.

    Attributes
    ----------
    lines : pandas.DataFrame
        All lines in canonical order, with ``row`` (their place in the input) and ``survey_number``.
    surveys : list of str
        Keys of the surveys in order of ``survey_number``.
    nodes : Nodes
    points : Points
        The nodes as points.
    network : array of int, shape (m,)
        Network of each line, -1 for none.
    crossings : pandas.DataFrame
        The rows given, with residual_nt, left_out_nt, weight, and the status of the rejected changed.
    posterior : Posterior or None
        None without any usable crossing.
    fit : Fit or None
    data : Crossings or None
        The usable crossings, in canonical order.
    order : array of int, shape (n,)
        Their rows in `crossings`.
    applied : array of bool, shape (7,)
        Which coefficients change the terms of the readings.
    heading_mean : array, shape (surveys, 4)
        Prior mean of the change of the heading coefficients.
    neglected : array, shape (M,)
        Variance at the nodes, nT^2, of drifts that are left out.

    """

    lines: pd.DataFrame
    surveys: list
    nodes: Nodes
    points: Points
    network: np.ndarray
    crossings: pd.DataFrame
    posterior: Posterior | None = field(repr=False)
    fit: Fit | None = field(repr=False)
    data: Crossings | None = field(repr=False)
    order: np.ndarray = field(repr=False)
    applied: np.ndarray
    heading_mean: np.ndarray
    neglected: np.ndarray


def line_numbers(crossings: pd.DataFrame, lines: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """Return the rows in the table of lines of both passes of each crossing; -1 where a line is not in it."""
    known = pd.Index(lines["survey"] + "\0" + lines["line"])
    first, second = (
        known.get_indexer(crossings[f"survey{p}"].astype(str) + "\0" + crossings[f"line{p}"].astype(str))
        for p in PASSES
    )
    return first, second


def rms(values) -> float | None:
    """Return the root mean square of the finite values, None without any."""
    values = np.asarray(values, float)
    values = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(values**2))) if len(values) else None


@dataclass(frozen=True)
class _Place:
    """Instants between the nodes: the nodes beside them, the place between, and what their lines share."""

    first: np.ndarray
    following: np.ndarray
    share: np.ndarray
    network: np.ndarray  # 0 also where there is none
    levelled: np.ndarray
    loose: np.ndarray

    def between(self, values: np.ndarray) -> np.ndarray:
        """Interpolate values at the nodes."""
        share = self.share[:, None] if values.ndim > 1 else self.share
        return values[self.first] * (1 - share) + values[self.following] * share

    def variance(self, variance: np.ndarray, covariance: np.ndarray) -> np.ndarray:
        """Interpolate a variance at the nodes, the covariance of neighbours included."""
        share, other = self.share, 1 - self.share
        found = other**2 * variance[self.first] + share**2 * variance[self.following]
        return found + 2 * share * other * covariance[self.first]


def _place(levels: Levels, line: np.ndarray, time_utc: np.ndarray) -> _Place:
    first, share = levels.nodes.between(line, time_utc)
    following = np.minimum(first + (share > 0), len(levels.nodes) - 1)
    network = levels.network[line]
    return _Place(first, following, share, np.maximum(network, 0), network >= 0, levels.points.loose[first])


def level_at(levels: Levels, line: np.ndarray, time_utc: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the level term of instants on lines, and its sigma, datum left out; NaN where it is missing.

    Parameters
    ----------
    levels : Levels
    line : array of int, shape (n,)
        Row in ``levels.lines``.
    time_utc : array of datetime64[ns], shape (n,)

    """
    if levels.posterior is None:
        return np.full(len(line), np.nan), np.full(len(line), np.nan)
    return _level_at(levels.posterior, _place(levels, line, time_utc))


def _level_at(p: Posterior, at: _Place) -> tuple[np.ndarray, np.ndarray]:
    value = at.between(p.value) - at.loose * p.datum[at.network]
    variance = at.variance(p.variance, p.following) - 2 * at.between(p.datum_level_nodes)
    variance += p.datum_level_variance[at.network]
    sigma = np.sqrt(np.maximum(variance, 0.0)) * (at.loose > 0)
    return np.where(at.levelled, value, np.nan), np.where(at.levelled, sigma, np.nan)


def at_readings(
    levels: Levels,
    survey: int,
    line_index: np.ndarray,
    time_utc: np.ndarray,
    *,
    effects: np.ndarray | None = None,
    sigma_diurnal_nt: np.ndarray | None = None,
    sigma_heading_nt: np.ndarray | None = None,
    sigma_position_m: np.ndarray | None = None,
    settings: Levelling,
) -> pd.DataFrame:
    """Take the corrections to the readings of one survey.

    Parameters
    ----------
    levels : Levels
    survey : int
        Survey number.
    line_index : array of int, shape (n,)
        Line of each reading as a row of the survey's own table of lines, -1 for none.
    time_utc : array of datetime64[ns], shape (n,)
    effects : array, shape (n, 7), optional
        What a unit of each coefficient adds to the anomaly of each reading; NaN where unknown.
    sigma_diurnal_nt, sigma_heading_nt : array, shape (n,), optional
        Of the earlier stages; used where levelling does not adjust those terms.
    sigma_position_m : array, shape (n,), optional
        Position error that no correction made here has taken away.
    settings : Levelling

    Returns
    -------
    pandas.DataFrame
        level_nt (subtracted), sigma_level_nt, heading_change_nt and diurnal_change_nt (to be added to those terms; NaN
        where they stay as they are), position_change_nt (what an applied error of layback or clock does to the anomaly
        at the position given; part of level_nt), sigma_joint_nt (of diurnal, heading and level together),
        sigma_datum_nt, sigma_position_left_m, level_flags.

    """
    n = len(line_index)
    own = levels.lines[levels.lines["survey_number"] == survey].sort_values("row")
    line = np.full(n, -1)
    on = np.flatnonzero(line_index >= 0)
    line[on] = own.index.to_numpy()[line_index[on]]
    found = {name: np.full(n, np.nan) for name in LEVELLING if name != "level_flags"}
    if sigma_position_m is not None:
        found["sigma_position_left_m"] = sigma_position_m
    if levels.posterior is not None and len(on):
        p, at = levels.posterior, _place(levels, line[on], time_utc[on])
        value, found["sigma_level_nt"][on] = _level_at(p, at)
        used = np.flatnonzero(levels.applied)
        own = np.full((len(on), len(used)), np.nan) if effects is None else effects[on][:, used]
        coefficients = p.effects[survey].copy()
        coefficients[:4] += levels.heading_mean[survey]
        change = own * coefficients[used] * at.loose[:, None]
        for name, columns in (("heading", slice(0, 4)), ("diurnal", slice(4, 5)), ("position", slice(5, 7))):
            mine = np.isin(used, np.arange(len(EFFECTS))[columns])
            if mine.any():
                found[f"{name}_change_nt"][on] = change[:, mine].sum(axis=1)
        shift = np.nan_to_num(found["position_change_nt"][on])
        found["position_change_nt"][on] = np.where(np.isin(used, (5, 6)).any(), shift, np.nan)
        found["level_nt"][on] = value + shift
        found["sigma_datum_nt"][on] = np.where(at.levelled, p.datum_sigma[at.network], np.nan)
        variance = joint_variance(levels, survey, line[on], at, np.nan_to_num(own))
        for term, sigma in (("time_drift", sigma_diurnal_nt), ("heading", sigma_heading_nt)):
            if getattr(settings, term) == "off" and sigma is not None:
                variance = variance + np.nan_to_num(sigma[on]) ** 2
        found["sigma_joint_nt"][on] = np.where(at.levelled, np.sqrt(np.maximum(variance, 0.0)), np.nan)
    flags = np.where(np.isnan(found["level_nt"]), np.uint32(Flag.NO_LEVEL), np.uint32(0)).astype("uint32")
    return pd.DataFrame({**found, "level_flags": flags})[list(LEVELLING)]


def joint_variance(levels: Levels, survey: int, line: np.ndarray, at: _Place, effects: np.ndarray) -> np.ndarray:
    """Return the variance of level and changes together, the datum left out, in nT^2.

    `effects` are those of the coefficients that are applied, shape (n, number of these).
    """
    p = levels.posterior
    used = np.flatnonzero(levels.applied)
    variance = at.variance(p.variance, p.following) - 2 * at.between(p.datum_nodes) + p.datum_variance[at.network]
    if len(used):
        mixed = at.between(p.mixed[:, used]) - p.datum_effects[:, used][line]
        own = p.effects_covariance[survey][np.ix_(used, used)]
        variance += np.einsum("ni,ni->n", effects, 2 * mixed + effects @ own)
    return (variance + at.between(levels.neglected)) * at.loose


def line_statistics(levels: Levels, held: np.ndarray) -> pd.DataFrame:
    """Say for each line its correction and how its crossings fit before, after, and left out.

    Parameters
    ----------
    levels : Levels
    held : array of bool, shape (m,)
        In canonical order.

    Returns
    -------
    pandas.DataFrame
        survey, line, kind, network, level_nt and sigma_level_nt at the line's middle, crossings, rms_before_nt,
        rms_after_nt, rms_left_out_nt, status; in the order of the input.

    """
    lines = levels.lines
    m = len(lines)
    start, end = (lines[name].to_numpy().astype("datetime64[ns]") for name in ("start_utc", "end_utc"))
    value, sigma = level_at(levels, np.arange(m), start + (end - start) // 2)
    first, second = line_numbers(levels.crossings, lines)
    used = np.isfinite(levels.crossings["residual_nt"].to_numpy())
    line = np.concatenate([first[used], second[used]])
    columns = {}
    for name in ("mismatch", "residual", "left_out"):
        values = np.tile(levels.crossings[f"{name}_nt"].to_numpy(float)[used], 2)
        there = np.isfinite(values)
        count = np.bincount(line[there], minlength=m)
        with np.errstate(invalid="ignore"):
            columns[name] = np.sqrt(np.bincount(line[there], values[there] ** 2, minlength=m) / count)
    status = np.where(levels.network < 0, "no usable crossing", np.where(held, "held at zero", "levelled"))
    table = pd.DataFrame(
        {
            "survey": lines["survey"],
            "line": lines["line"],
            "kind": lines["kind"],
            "network": levels.network,
            "level_nt": value,
            "sigma_level_nt": sigma,
            "crossings": np.bincount(line, minlength=m),
            "rms_before_nt": columns["mismatch"],
            "rms_after_nt": columns["residual"],
            "rms_left_out_nt": columns["left_out"],
            "status": status,
        }
    )
    return table.iloc[np.argsort(lines["row"].to_numpy(), kind="stable")].reset_index(drop=True)


def write_covariance(path, levels: Levels) -> None:
    """Write the covariance of the level terms between lines, with its index, as a NumPy archive.

    ``survey, line, time_utc`` (nanoseconds since 1970) say to which line and instant each row belongs;
    ``covariance_nt2`` is the covariance, the datum of each network left out, or, for very many lines, ``factor_nt`` one
    whose rows have the products ``factor factor' / columns``.
    """
    lines, nodes, p = levels.lines, levels.nodes, levels.posterior
    content = {}
    rows = np.empty(0, int)
    if p is not None:
        inside = np.flatnonzero(levels.network[nodes.line] >= 0)
        rows = inside
        if p.covariance is None or len(inside) > WRITTEN:  # one node a line
            starts = np.searchsorted(nodes.line, np.arange(len(lines)))
            stops = np.searchsorted(nodes.line, np.arange(len(lines)), side="right")
            rows = ((starts + stops) // 2)[(levels.network >= 0) & (stops > starts)]
        network = levels.network[nodes.line[rows]]
        loose = levels.points.loose[rows]
        if p.covariance is not None:
            c = p.covariance[np.ix_(rows, rows)]
            same = network[:, None] == network[None, :]
            with_datum = p.datum_level_nodes[rows]
            c = c - (with_datum[:, None] + with_datum[None, :] - p.datum_level_variance[network][:, None]) * same
            content["covariance_nt2"] = c * loose[:, None] * loose[None, :]
        elif p.factor is not None:
            content["factor_nt"] = p.factor[rows]
    content |= {
        "survey": lines["survey"].to_numpy(str)[nodes.line[rows]],
        "line": lines["line"].to_numpy(str)[nodes.line[rows]],
        "time_utc": nodes.time_utc[rows].astype("int64"),
    }
    np.savez_compressed(path, **content)
