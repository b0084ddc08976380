"""Level the lines of all surveys to each other at their crossings.

The correction of a line is a constant, or piecewise linear in time; mismatches at crossings are its only witnesses:
``A_i - A_j = L_i(t_i) - L_j(t_j) + e``, solved by weighted, robust, sparse least squares (`steps.adjustment`). The
common level of a connected network is not observable: the weighted mean of its corrections is zero, or named lines are
held. A line without a usable crossing gets no correction, and a flag instead. Statistics are given before, after, and
with each crossing left out, which alone say whether levelling helped.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steps import adjustment, edits, stage
from steps.columns import Flag
from steps.errors import SurveyError, mistake

DRIFT_STRENGTHS = np.geomspace(0.01, 100.0, 13)  # of the drift, sigmas of a crossing per square root of an hour
PASSES = ("_1", "_2")


@dataclass(frozen=True)
class Nodes:
    """Instants at which the corrections of the lines are unknowns, in order of line and time.

    Attributes
    ----------
    line : array of int, shape (p,)
        Row of the table of all lines.
    time_utc : array of datetime64[ns], shape (p,)
        When.

    """

    line: np.ndarray
    time_utc: np.ndarray

    def between(self, line: np.ndarray, time_utc: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Place instants between the nodes of their lines.

        Returns
        -------
        first : array of int, shape (n,)
            Node before the instant; on a line with one node, that one.
        share : array, shape (n,)
            Place between it and the next node of the line, 0 to 1.

        """
        starts = np.searchsorted(self.line, line)
        stops = np.searchsorted(self.line, line, side="right")
        times = self.time_utc.astype("int64")
        origin = times.min(initial=0)
        span = float(times.max(initial=0) - origin) + 1.0
        key = self.line + (times - origin) / span * 0.5  # rises along the nodes
        wanted = line + np.clip((time_utc.astype("int64") - origin) / span, 0.0, 1.0) * 0.5
        last = np.maximum(stops - 2, starts)
        first = np.clip(np.searchsorted(key, wanted, side="right") - 1, starts, last)
        following = np.where(stops - starts > 1, first + 1, first)
        width = (times[following] - times[first]).astype(float)
        passed = (time_utc.astype("int64") - times[first]).astype(float)
        return first, np.where(width > 0, np.clip(passed / np.where(width > 0, width, 1.0), 0.0, 1.0), 0.0)

    def design(self, line: np.ndarray, time_utc: np.ndarray):
        """Return the sparse matrix that interpolates node values to instants, shape (n, p)."""
        from scipy.sparse import csr_array

        first, share = self.between(line, time_utc)
        n, p = len(first), len(self.line)
        if not share.any():
            return csr_array((np.ones(n), (np.arange(n), first)), shape=(n, p))
        following = np.minimum(first + 1, p - 1)
        rows = np.concatenate([np.arange(n)] * 2)
        found = csr_array(
            (np.concatenate([1 - share, share]), (rows, np.concatenate([first, following]))), shape=(n, p)
        )
        found.eliminate_zeros()
        return found


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


def drift_precision(nodes: Nodes, sigma_per_root_hour: float):
    """Return the prior precision of node values that walk at random along each line, their mean free.

    Parameters
    ----------
    nodes : Nodes
        Nodes of the lines.
    sigma_per_root_hour : float
        One sigma of the change of a correction over an hour.

    """
    from scipy.sparse import csr_array

    pair = np.flatnonzero(np.diff(nodes.line) == 0)
    hours = (np.diff(nodes.time_utc)[pair] / np.timedelta64(1, "ns")) / 3.6e12
    weight = 1.0 / (sigma_per_root_hour * np.sqrt(np.maximum(hours, 1e-6)))
    rows = np.arange(len(pair))
    step = csr_array(
        (np.concatenate([-weight, weight]), (np.concatenate([rows, rows]), np.concatenate([pair, pair + 1]))),
        shape=(len(pair), len(nodes.line)),
    )
    return step.T @ step


def held_lines(hold: list[str], rows: list[dict], lines: pd.DataFrame) -> np.ndarray:
    """Find the lines that settings and edits hold at zero.

    Parameters
    ----------
    hold : list of str
        Names of lines, or ``survey/line``.
    rows : list of dict
        Edits with the action hold_line.
    lines : pandas.DataFrame
        survey, line: one row for each line of all surveys.

    Returns
    -------
    array of bool, shape (m,)

    Raises
    ------
    SurveyError
        If a name is unknown.

    """
    held = np.zeros(len(lines), bool)
    wrong = []
    full = (lines["survey"] + "/" + lines["line"]).tolist()
    names = lines["line"].tolist()
    for name in hold:
        found = [k for k, (a, b) in enumerate(zip(names, full, strict=True)) if name in (a, b)]
        if not found:
            known = ", ".join(names[:12]) + ", ..." * (len(names) > 12)
            wrong.append(mistake("levelling.hold", "must name lines", name, f"Known here: {known}."))
        held[found] = True
    for edit in rows:
        own = np.flatnonzero(lines["survey"].to_numpy() == edit.get("member", lines["survey"].iloc[0]))
        try:
            held[own[edits.find_line(edit, lines["line"].iloc[own].tolist())]] = True
        except SurveyError as error:
            wrong += error.sentences
    if wrong:
        raise SurveyError(*wrong)
    return held


def line_numbers(crossings: pd.DataFrame, lines: pd.DataFrame) -> tuple[np.ndarray, np.ndarray]:
    """Return the rows in the table of lines of both passes of each crossing; -1 where a line is not in it."""
    known = pd.Index(lines["survey"] + "\0" + lines["line"])
    first, second = (
        known.get_indexer(crossings[f"survey{p}"].astype(str) + "\0" + crossings[f"line{p}"].astype(str))
        for p in PASSES
    )
    return first, second


@dataclass(frozen=True)
class Levels:
    """Result of `level`: unknowns at the nodes and what the crossings say of them."""

    nodes: Nodes
    value_nt: np.ndarray
    covariance: np.ndarray | None
    sigma_nt: np.ndarray
    crossings: pd.DataFrame
    network: np.ndarray
    scale: float
    drift_nt_per_root_hour: float | None


def level(
    crossings: pd.DataFrame,
    lines: pd.DataFrame,
    *,
    held: np.ndarray | None = None,
    model: str = "constant",
    knots_h: float = 3.0,
    robust: bool = True,
) -> Levels:
    """Estimate the corrections of the lines from their crossings.

    Parameters
    ----------
    crossings : pandas.DataFrame
        Table `crossovers`; only rows with the status ``used`` take part.
    lines : pandas.DataFrame
        survey, line, start_utc, end_utc, readings: one row for each line of all surveys.
    held : array of bool, shape (m,), optional
        Lines whose correction is held at zero.
    model : {"constant", "drift"}
        Correction of a line: constant, or piecewise linear in time.
    knots_h : float
        Longest time between the nodes of a drift, h.
    robust : bool
        Weigh down and then reject crossings that do not fit.

    Returns
    -------
    Levels
        Corrections in nT, to be subtracted; NaN on lines without a usable crossing. ``crossings`` are the rows given
        with residual_nt, left_out_nt and weight added and the status of the rejected changed.

    """
    from scipy.sparse import csr_array, vstack

    m = len(lines)
    held = np.zeros(m, bool) if held is None else held
    first, second = line_numbers(crossings, lines)
    usable = (crossings["status"] == "used").to_numpy() & (first >= 0) & (second >= 0) & (first != second)
    usable &= np.isfinite(crossings["mismatch_nt"]) & (crossings["sigma_mismatch_nt"] > 0)
    rows = np.flatnonzero(usable)
    first, second = first[rows], second[rows]
    label = adjustment.networks(first, second, m)
    nodes = place_nodes(lines["start_utc"], lines["end_utc"], knots_h if model == "drift" else None)
    time_1, time_2 = (crossings[f"time{p}_utc"].to_numpy()[rows] for p in PASSES)
    whole = nodes.design(first, time_1) - nodes.design(second, time_2)
    free = np.flatnonzero((label[nodes.line] >= 0) & ~held[nodes.line])
    design = csr_array(whole[:, free])
    share = lines["readings"].to_numpy(float).clip(1.0)[nodes.line] / np.bincount(nodes.line, minlength=m)[nodes.line]
    anchored = np.isin(label, label[held & (label >= 0)])
    datum = [
        csr_array((share[free] * (label[nodes.line[free]] == k))[None, :])
        for k in range(label.max(initial=-1) + 1)
        if not anchored[label == k].any()
    ]
    datum = csr_array(vstack(datum)) if datum else csr_array((0, len(free)))
    mismatch = crossings["mismatch_nt"].to_numpy(float)[rows]
    sigma = crossings["sigma_mismatch_nt"].to_numpy(float)[rows]
    strength, solution = None, None
    if model == "drift" and len(rows):
        typical = float(np.median(sigma)) if len(sigma) else 1.0
        best = np.inf
        for factor in DRIFT_STRENGTHS:
            prior = drift_precision(nodes, factor * typical)[free][:, free]
            tried = adjustment.adjust(design, mismatch, sigma, prior=prior, datum=datum, robust=robust)
            figure = rms(tried.left_out[tried.weight > 0])
            if figure is not None and figure < best * (1 - 1e-9):
                best, strength, solution = figure, factor * typical, tried
    elif len(rows):
        solution = adjustment.adjust(design, mismatch, sigma, datum=datum, robust=robust)
    value = np.where(label[nodes.line] >= 0, 0.0, np.nan)
    spread = value.copy()
    residual, left_out, weight = (np.full(len(crossings), np.nan) for _ in range(3))
    status = crossings["status"].to_numpy(object).copy()
    if solution is not None:
        value[free] = solution.unknowns
        if solution.covariance is not None:
            spread[free] = np.sqrt(np.maximum(np.diag(solution.covariance), 0.0))
        rejected = solution.weight <= 0
        residual[rows] = np.where(rejected, np.nan, solution.residual)
        left_out[rows] = np.where(rejected, np.nan, solution.left_out)
        weight[rows] = solution.weight
        size = np.abs(solution.left_out) / (sigma * max(solution.scale, 1e-12))
        for k in np.flatnonzero(rejected):
            status[rows[k]] = f"does not fit the others: off by {size[k]:.0f} sigma"
    table = crossings.assign(residual_nt=residual, left_out_nt=left_out, weight=weight, status=status)
    covariance = None
    if solution is not None and solution.covariance is not None:
        covariance = np.zeros((len(nodes.line),) * 2)
        covariance[np.ix_(free, free)] = solution.covariance
        lost = label[nodes.line] < 0
        covariance[lost] = covariance[:, lost] = np.nan
    return Levels(
        nodes, value, covariance, spread, table, label, solution.scale if solution is not None else np.nan, strength
    )


def rms(values) -> float | None:
    """Return the root mean square of the finite values, None without any."""
    values = np.asarray(values, float)
    values = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(values**2))) if len(values) else None


def line_statistics(levels: Levels, lines: pd.DataFrame, held: np.ndarray) -> pd.DataFrame:
    """Say for each line its correction and how its crossings fit before, after, and left out.

    Returns
    -------
    pandas.DataFrame
        survey, line, kind, network, level_nt and sigma_level_nt at the line's middle, crossings, rms_before_nt,
        rms_after_nt, rms_left_out_nt, status.

    """
    m = len(lines)
    middle = lines["start_utc"] + (lines["end_utc"] - lines["start_utc"]) / 2
    at_middle = levels.nodes.design(np.arange(m), middle.to_numpy().astype("datetime64[ns]"))
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
    count = np.bincount(line, minlength=m)
    status = np.where(levels.network < 0, "no usable crossing", np.where(held, "held at zero", "levelled"))
    if levels.covariance is not None:
        clean = np.nan_to_num(levels.covariance)
        variance = np.einsum("ij,ij->i", (at_middle @ clean), at_middle.toarray()) if m <= 2000 else None
    else:
        variance = None
    sigma = at_middle @ levels.sigma_nt if variance is None else np.sqrt(np.maximum(variance, 0.0))
    return pd.DataFrame(
        {
            "survey": lines["survey"],
            "line": lines["line"],
            "kind": lines["kind"],
            "network": levels.network,
            "level_nt": at_middle @ levels.value_nt,
            "sigma_level_nt": np.where(levels.network < 0, np.nan, sigma),
            "crossings": count,
            "rms_before_nt": columns["mismatch"],
            "rms_after_nt": columns["residual"],
            "rms_left_out_nt": columns["left_out"],
            "status": status,
        }
    )


def at_readings(levels: Levels, offset: int, line_index: np.ndarray, time_utc: np.ndarray) -> pd.DataFrame:
    """Interpolate the corrections to the readings of one survey.

    Parameters
    ----------
    levels : Levels
        Corrections of all lines.
    offset : int
        Row of the survey's first line in the table of all lines.
    line_index : array of int, shape (n,)
        Line of each reading within the survey, -1 for none.
    time_utc : array of datetime64[ns], shape (n,)
        Times of the readings.

    Returns
    -------
    pandas.DataFrame
        level_nt (subtracted), sigma_level_nt, level_flags.

    """
    n = len(line_index)
    value, sigma = np.full(n, np.nan), np.full(n, np.nan)
    on = np.flatnonzero(line_index >= 0)
    if len(on) and len(levels.nodes.line):
        first, share = levels.nodes.between(line_index[on] + offset, time_utc[on])
        following = np.minimum(first + (share > 0), len(levels.nodes.line) - 1)
        value[on] = (1 - share) * levels.value_nt[first] + share * levels.value_nt[following]
        if levels.covariance is None:
            sigma[on] = (1 - share) * levels.sigma_nt[first] + share * levels.sigma_nt[following]
        else:
            c = levels.covariance
            variance = (1 - share) ** 2 * c[first, first] + share**2 * c[following, following]
            sigma[on] = np.sqrt(np.maximum(variance + 2 * share * (1 - share) * c[first, following], 0.0))
    flags = np.where(np.isnan(value), np.uint32(Flag.NO_LEVEL), np.uint32(0)).astype("uint32")
    return pd.DataFrame({"level_nt": value, "sigma_level_nt": sigma, "level_flags": flags})


def _say(job: stage.Job, levels: Levels, lines: pd.DataFrame, table: pd.DataFrame) -> None:
    """Write statistics into the record, and sentences for what deserves a look."""
    crossings = levels.crossings
    used = np.isfinite(crossings["residual_nt"].to_numpy(float))
    rejected = (levels.crossings["weight"] == 0).to_numpy()
    before, after = rms(crossings["mismatch_nt"][used]), rms(crossings["residual_nt"])
    left_out = rms(crossings["left_out_nt"])
    several = lines["survey"].nunique() > 1
    names = (lines["survey"] + "/" + lines["line"] if several else lines["line"]).to_numpy()
    lost = np.flatnonzero((levels.network < 0) & lines["kind"].isin(["line", "tie"]).to_numpy())
    if not used.any():
        job.note("There is no usable crossing: no line can be levelled, and the level term is missing everywhere.")
    elif len(lost):
        listed = ", ".join(names[lost][:10]) + (f" and {len(lost) - 10} more" if len(lost) > 10 else "")
        job.note(f"Without a usable crossing, and so without a level term: {listed}.")
    parts = int(levels.network.max(initial=-1)) + 1
    if parts > 1:
        sizes = np.bincount(levels.network[levels.network >= 0])
        job.note(
            f"The lines fall into {parts} networks that no crossing connects ({', '.join(map(str, sizes[:8]))} lines): "
            "their levels against each other are unknown."
        )
    if rejected.any():
        job.note(
            f"{int(rejected.sum())} of {int(used.sum() + rejected.sum())} crossings do not fit the others "
            "and are left out."
        )
    job.record |= {
        "crossings": len(crossings),
        "crossings_used": int(used.sum()),
        "crossings_rejected": int(rejected.sum()),
        "rms_before_nt": before,
        "rms_after_nt": after,
        "rms_left_out_nt": left_out,
        "networks": parts,
        "scale": levels.scale if np.isfinite(levels.scale) else None,
        "drift_nt_per_root_hour": levels.drift_nt_per_root_hour,
        "lines_without_level": [str(name) for name in names[lost]],
    }
    if before is None:
        job.done("no line levelled")
    else:
        left = "unknown" if left_out is None else f"{left_out:.2f} nT"
        job.done(
            f"{int((table['status'] == 'levelled').sum())} lines levelled at {int(used.sum())} crossings: "
            f"rms {before:.2f} nT before, {after:.2f} nT after, {left} left out"
        )


def main(job: stage.Job) -> None:
    """Read the crossings and the lines of all surveys, write the level of every reading."""
    members = job.survey["members"]
    tables = [
        pd.read_parquet(path).assign(survey=key) for key, path in zip(members, job.inputs["line_table"], strict=True)
    ]
    lines = pd.concat(tables, ignore_index=True)
    held = held_lines(job.settings.hold, job.edits, lines)
    if "hold" in lines:
        held |= lines["hold"].fillna(False).to_numpy(bool)
    levels = level(
        job.table("crossovers"),
        lines,
        held=held,
        model=job.settings.model,
        knots_h=job.settings.knots_h,
        robust=job.settings.robust,
    )
    offset = 0
    for key, table, readings, index in zip(members, tables, job.inputs["readings"], job.inputs["lines"], strict=True):
        time_utc = pd.read_parquet(readings, columns=["time_utc"])["time_utc"].to_numpy()
        line_index = pd.read_parquet(index, columns=["line_index"])["line_index"].to_numpy()
        job.write("levelling", at_readings(levels, offset, line_index, time_utc), member=key)
        offset += len(table)
    statistics = line_statistics(levels, lines, held)
    job.write("levelling_lines", statistics)
    job.write("levelling_crossovers", levels.crossings)
    np.savez(
        job.target("level_covariance"),
        survey=lines["survey"].to_numpy(str)[levels.nodes.line],
        line=lines["line"].to_numpy(str)[levels.nodes.line],
        time_utc=levels.nodes.time_utc.astype("int64"),
        level_nt=levels.value_nt,
        covariance_nt2=levels.covariance if levels.covariance is not None else np.empty((0, 0)),
    )
    _say(job, levels, lines, statistics)


if __name__ == "__main__":
    stage.run(main)
