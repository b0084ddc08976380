"""Level the lines of all surveys, and adjust what the earlier stages corrected, at the crossings.

At a crossing of two passes the mismatch is ``y = E_1 - E_2 + noise`` with the error of a pass before levelling

    E = line constant + line drift + drift in time + heading change + (scale - 1) diurnal + g (v dt - dB)

where g is the along-track gradient, v the speed, dt the seconds to add to the logger's clock and dB the metres to add
to the layback. All terms are estimated at once by generalised least squares with priors (`steps.collocation`,
`steps.adjustment`); a term is kept only if it lowers the leave-one-out figure, or if the user insists. The common level
of a connected network is not observable: the mean over its readings of all that is applied is zero, or named lines are
held. A line without a usable crossing gets no correction, and a flag instead.
"""

import json
from dataclasses import replace

import numpy as np
import pandas as pd

from steps import adjustment, determined, edits, joint, stage
from steps.collocation import EFFECTS, EFFECTS_OF, Crossings
from steps.errors import SurveyError, mistake
from steps.joint import PASSES, Nodes
from steps.levels import Levels, at_readings, line_numbers, line_statistics, write_covariance
from steps.posterior import solve
from steps.screen import rejected
from steps.settings import Levelling

MANY = 1000  # nodes
LAYBACK_M = 10.0  # expected error of a layback, where no record says it


def in_order(lines: pd.DataFrame) -> pd.DataFrame:
    """Put lines in canonical order (survey, start, name), on which no result may depend otherwise.

    Parameters
    ----------
    lines : pandas.DataFrame
        survey, line, kind, start_utc, end_utc, readings; one row for each line of all surveys.

    Returns
    -------
    pandas.DataFrame
        With ``row``, the place of each in the input, and ``survey_number``.

    """
    ordered = lines.assign(row=np.arange(len(lines))).sort_values(["survey", "start_utc", "line"], kind="stable")
    number = np.unique(ordered["survey"].to_numpy(str), return_inverse=True)[1] if len(ordered) else np.empty(0, int)
    return ordered.assign(survey_number=number).reset_index(drop=True)


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


def level(
    crossings: pd.DataFrame,
    lines: pd.DataFrame,
    *,
    settings: Levelling,
    held: np.ndarray | None = None,
    sigma_diurnal_nt: np.ndarray | None = None,
    line_means: np.ndarray | None = None,
    headings: list[dict] | None = None,
    positions: list[dict] | None = None,
) -> Levels:
    """Estimate the corrections of the lines, and changes of the other terms, from the crossings.

    Parameters
    ----------
    crossings : pandas.DataFrame
        Table `crossovers`; only rows with the status ``used`` take part.
    lines : pandas.DataFrame
        As `in_order` returns them.
    settings : Levelling
    held : array of bool, shape (m,), optional
        Lines whose correction is held at zero; in the order of `lines`.
    sigma_diurnal_nt : array, shape (M,), optional
        One sigma of the diurnal term at the nodes (`nodes_of`), NaN where it is missing; by default missing.
    line_means : array, shape (m, 7), optional
        Mean over the readings of each line of what a unit of each coefficient does; zero by default.
    headings : list of dict, optional
        Records of the heading stage by survey number.
    positions : list of dict, optional
        Records of the position stage, whose settings say how much of the position error is the layback's.

    Returns
    -------
    Levels

    """
    m = len(lines)
    held = np.zeros(m, bool) if held is None else held
    nodes = nodes_of(lines, settings)
    surveys = list(dict.fromkeys(lines["survey"]))
    if sigma_diurnal_nt is None:
        sigma_diurnal_nt = np.full(len(nodes), np.nan)
    common = {"without_base_nt": settings.sigma_without_base_nt, "held": held}
    points = joint.make_points(lines, nodes.line, nodes.time_utc, sigma_diurnal_nt=sigma_diurnal_nt, **common)
    first, second = line_numbers(crossings, lines)
    usable = (crossings["status"] == "used").to_numpy() & (first >= 0) & (second >= 0)
    usable &= np.isfinite(crossings["mismatch_nt"]) & (crossings["sigma_mismatch_nt"] > 0)
    rows = np.flatnonzero(usable)
    apart = rows[first[rows] != second[rows]]
    network = adjustment.networks(first[apart], second[apart], m)
    rows = rows[network[first[rows]] >= 0]  # a line's crossing with itself does not level it
    headings = headings if headings is not None else [{} for _ in surveys]
    heading_mean, heading_covariance = joint.heading_prior(headings, settings.sigma_heading_nt)
    empty = np.zeros(len(EFFECTS), bool)
    if not len(rows):
        table = crossings.assign(residual_nt=np.nan, left_out_nt=np.nan, weight=np.nan)
        zero = np.zeros(len(nodes))
        return Levels(lines, surveys, nodes, points, network, table, None, None, None, rows, empty, heading_mean, zero)
    # canonical: the earlier pass first, crossings in order of time
    times = [crossings[f"time{side}_utc"].to_numpy().astype("datetime64[ns]") for side in PASSES]
    swap = (times[1] < times[0]) | ((times[1] == times[0]) & (second < first))
    early, late = np.where(swap, times[1], times[0]), np.where(swap, times[0], times[1])
    low, high = np.where(swap, second, first), np.where(swap, first, second)
    rows = rows[np.lexsort((high[rows], low[rows], late[rows], early[rows]))]
    tow = np.array([record.get("settings", {}).get("angle") == "tow_direction" for record in headings])
    passes = []
    for k, (side, number) in enumerate(zip(PASSES, (first, second), strict=True)):
        line = number[rows]
        passes.append(
            joint.make_points(
                lines,
                line,
                times[k][rows],
                sigma_diurnal_nt=crossings[f"sigma_diurnal{side}_nt"].to_numpy(float)[rows],
                effects=joint.pass_effects(crossings.iloc[rows], side, tow[lines["survey_number"].to_numpy()[line]]),
                **common,
            )
        )
    flip = swap[rows]
    one, two = (joint.choose(*pair, flip) for pair in ((passes[0], passes[1]), (passes[1], passes[0])))
    sign = np.where(flip, -1.0, 1.0)
    mismatch = sign * crossings["mismatch_nt"].to_numpy(float)[rows]
    # what the calibration expects is taken out, so that all coefficients are expected to be zero
    expected = joint.heading_of(one, heading_mean) - joint.heading_of(two, heading_mean)
    expected = expected * (settings.heading != "off")
    share = navigation_share(positions, len(surveys), settings)
    parts = joint.crossing_parts(crossings.iloc[rows], (share[one.survey] + share[two.survey]) / 2)
    data = Crossings(mismatch - expected, parts, one, two)
    prior = np.zeros((len(surveys), len(EFFECTS), len(EFFECTS)))
    prior[:, :4, :4] = heading_covariance
    prior[:, 4, 4] = settings.sigma_diurnal_scale**2
    prior[:, 5, 5] = layback_variance(positions, len(surveys), settings)
    prior[:, 6, 6] = settings.sigma_clock_s**2
    wanted = joint.wanted_terms(settings, data)
    optional = [term for term in joint.TERMS if term in wanted and getattr(settings, term) == "auto"]
    optional = [term for term in optional if term not in settings.apply]
    full = joint.make_model(
        data, prior, terms=wanted, scales_h=sorted(settings.drift_scales_h), surveys=len(np.unique(one.survey))
    )
    kept = np.ones(len(rows), bool)
    if settings.robust:
        kept = joint.outliers(data, m, np.sqrt(joint.effects_variance(data, prior, wanted)))
    needed = joint.lonely(one.line, two.line, kept, m)
    found = joint.fit(data, full, kept, needed, m, optional, settings.robust)
    applied = empty.copy()
    terms = joint.kept_terms(found.model)
    for term in terms & set(EFFECTS_OF):
        applied[EFFECTS_OF[term]] = term in ("heading", "diurnal_scale") or term in settings.apply
    if "heading" not in terms:
        data = replace(data, mismatch=mismatch)
    about = {
        "first_utc": np.where(flip, times[1][rows], times[0][rows]),
        "second_utc": np.where(flip, times[0][rows], times[1][rows]),
        "readings": lines["readings"].to_numpy(float).clip(1.0),
        "means": np.zeros((m, len(EFFECTS))) if line_means is None else np.nan_to_num(line_means),
        "applied": applied,
        "needed": needed,
    }
    posterior = solve(data, found.model, nodes, points, network=network, robust=settings.robust, kept=kept, **about)
    left = (posterior.weight > 0) & (one.line != two.line)
    connected = adjustment.networks(one.line[left], two.line[left], m)
    if not np.array_equal(connected, network):  # a rejected crossing was a line's last
        network = connected
        kept = (posterior.weight > 0) & (network[one.line] >= 0)
        posterior = solve(data, found.model, nodes, points, network=network, robust=False, kept=kept, **about)
    table = _with_results(crossings, rows, sign, posterior, one.line, two.line, m)
    neglected = joint.neglected(found, nodes, points)
    return Levels(
        lines, surveys, nodes, points, network, table, posterior, found, data, rows, applied, heading_mean, neglected
    )


def nodes_of(lines: pd.DataFrame, settings: Levelling) -> Nodes:
    """Place the nodes of the lines: closely where corrections may drift, else one a line.

    Where that would be more than `MANY` nodes they are a third of the shortest correlation time apart, if that is more.
    """
    span = lines["start_utc"].to_numpy(), lines["end_utc"].to_numpy()
    if settings.line_drift == settings.time_drift == "off":
        return joint.place_nodes(*span, None)
    close = joint.place_nodes(*span, settings.knots_h)
    wide = min(settings.drift_scales_h) / 3
    return close if len(close) <= MANY or wide <= settings.knots_h else joint.place_nodes(*span, wide)


def _with_results(crossings, rows, sign, posterior, first, second, m) -> pd.DataFrame:
    """Add to the table of crossings what the adjustment says of each."""
    residual, left_out, weight = (np.full(len(crossings), np.nan) for _ in range(3))
    status = crossings["status"].to_numpy(object).copy()
    rejected = posterior.weight <= 0
    alone = joint.lonely(first, second, posterior.weight > 0, m)
    residual[rows] = np.where(rejected, np.nan, sign * posterior.residual)
    left_out[rows] = np.where(rejected | alone, np.nan, sign * posterior.left_out)
    weight[rows] = posterior.weight
    deviation = np.abs(posterior.left_out) / np.sqrt(np.maximum(posterior.left_out_variance, 1e-12))
    if rejected.any():
        texts = [f"does not fit the others: off by {abs(e):.1f} nT" for e in posterior.left_out[rejected]]
        for row, text, size in zip(rows[rejected], texts, deviation[rejected], strict=True):
            status[row] = f"{text}, {size:.0f} sigma" if np.isfinite(size) else text
    return crossings.assign(residual_nt=residual, left_out_nt=left_out, weight=weight, status=status)


def layback_variance(positions: list[dict] | None, surveys: int, settings: Levelling) -> np.ndarray:
    """Return the prior variance of the layback error of each survey, m^2: the stage's own, unless it is set here."""
    found = np.full(surveys, (settings.sigma_layback_m or LAYBACK_M) ** 2)
    if settings.sigma_layback_m is None:
        for s, record in enumerate((positions or [])[:surveys]):
            found[s] = record.get("settings", {}).get("sigma_layback_m", LAYBACK_M) ** 2
    return found


def navigation_share(positions: list[dict] | None, surveys: int, settings: Levelling) -> np.ndarray:
    """Return the part of the variance of positions that is not the layback's, of each survey; 1 where not modelled."""
    share = np.ones(surveys)
    if settings.layback == "off" and "layback" not in settings.apply:
        return share
    for s, record in enumerate((positions or [])[:surveys]):
        own = record.get("settings", {})
        if own and own.get("layback", {}).get("model") != "none":
            fix, tow = own["sigma_navigation_m"] ** 2, own["sigma_layback_m"] ** 2
            share[s] = fix / (fix + tow)
    return share


def read_survey(job: stage.Job, number: int, tow: bool) -> dict[str, np.ndarray]:
    """Read what the adjustment needs of the readings of one survey.

    Returns
    -------
    dict of str to array
        line_index, time_utc, effects (n, 7), sigma_diurnal_nt, sigma_heading_nt, sigma_position_m.

    """

    def column(name, *columns):
        table = pd.read_parquet(job.inputs[name][number], columns=list(columns))
        return [table[c].to_numpy() for c in columns]

    (line_index,), (time_utc,) = column("lines", "line_index"), column("readings", "time_utc")
    diurnal, sigma_diurnal = column("diurnal", "diurnal_nt", "sigma_diurnal_nt")
    heading, sigma_heading = column("heading", "heading_nt", "sigma_heading_nt")
    direction, ship, error = column("position", "tow_direction_deg", "ship_heading_deg", "sigma_position_m")
    effects = np.full((len(line_index), len(EFFECTS)), np.nan)
    effects[:, :4] = joint.harmonics(direction if tow else ship)
    effects[:, 4] = diurnal
    if job.settings.apply:
        lat, lon, course, speed = column(
            "position", "sensor_latitude_deg", "sensor_longitude_deg", "sensor_course_deg", "sensor_speed_mps"
        )
        (total,), (main_field,) = column("readings", "total_field_nt"), column("main_field", "main_field_nt")
        (flags,) = column("screen", "screen_flags")
        anomaly = total - main_field
        for term in (diurnal, heading):
            anomaly = anomaly - np.where(np.isfinite(term).any(), term, 0.0)
        slope = joint.along_track_gradient(lat, lon, np.where(rejected(flags), np.nan, anomaly), line_index)
        effects[:, 5] = -slope * np.nan_to_num(np.cos(np.radians(direction - course)), nan=1.0)
        effects[:, 6] = slope * speed
    return {
        "line_index": line_index,
        "time_utc": time_utc,
        "effects": effects,
        "sigma_diurnal_nt": sigma_diurnal,
        "sigma_heading_nt": sigma_heading,
        "sigma_position_m": error,
    }


def along_lines(lines: pd.DataFrame, survey: int, nodes: Nodes, readings: dict) -> tuple[np.ndarray, np.ndarray]:
    """Return the mean effects over each line of a survey, and the sigma of the diurnal term at the survey's nodes.

    Parameters
    ----------
    lines : pandas.DataFrame
        In canonical order.
    survey : int
    nodes : Nodes
    readings : dict
        From `read_survey`.

    Returns
    -------
    means : array, shape (lines of the survey, 7)
    sigma : array, shape (nodes of the survey,)
        NaN where no reading near in time has a diurnal term.

    """
    own = lines[lines["survey_number"] == survey]
    on = np.flatnonzero(readings["line_index"] >= 0)
    index = readings["line_index"][on]
    count = max(int(own["row"].max() - own["row"].min()) + 1, int(index.max(initial=-1)) + 1)
    there = np.nan_to_num(readings["effects"][on])
    number = np.maximum(np.bincount(index, minlength=count), 1)
    means = np.column_stack([np.bincount(index, part, minlength=count) / number for part in there.T])
    mine = np.isin(nodes.line, own.index.to_numpy())
    time = readings["time_utc"].astype("datetime64[ns]").astype("int64")
    wanted = nodes.time_utc[mine].astype("int64")
    sigma = np.full(len(wanted), np.nan)
    if len(time):
        near = np.clip(np.searchsorted(time, wanted), 1, max(len(time) - 1, 1))
        near = np.where(wanted - time[near - 1] < time[np.minimum(near, len(time) - 1)] - wanted, near - 1, near)
        sigma = readings["sigma_diurnal_nt"][np.minimum(near, len(time) - 1)]
    return means[(own["row"] - own["row"].min()).to_numpy()], sigma


def main(job: stage.Job) -> None:
    """Read the crossings and the lines of all surveys, write the level of every reading."""
    members = job.survey["members"]
    tables = [
        pd.read_parquet(path).assign(survey=key) for key, path in zip(members, job.inputs["line_table"], strict=True)
    ]
    lines = in_order(pd.concat(tables, ignore_index=True))
    keys = list(dict.fromkeys(lines["survey"]))
    numbers = [members.index(key) for key in keys]  # place among the inputs of each survey number
    records = [
        [json.loads(job.inputs[name][k].read_text(encoding="utf-8")) for k in numbers]
        for name in ("heading_record", "position_record")
    ]
    tow = [record.get("settings", {}).get("angle") == "tow_direction" for record in records[0]]
    held = held_lines(job.settings.hold, job.edits, lines)
    nodes = nodes_of(lines, job.settings)
    means, sigma = np.zeros((len(lines), len(EFFECTS))), np.full(len(nodes), np.nan)
    survey_of_node = lines["survey_number"].to_numpy()[nodes.line] if len(lines) else np.empty(0, int)
    for s, k in enumerate(numbers):
        found = along_lines(lines, s, nodes, read_survey(job, k, tow[s]))
        means[lines["survey_number"] == s], sigma[survey_of_node == s] = found
    levels = level(
        job.table("crossovers"),
        lines,
        settings=job.settings,
        held=held,
        sigma_diurnal_nt=sigma,
        line_means=means,
        headings=records[0],
        positions=records[1],
    )
    for key, k in zip(members, range(len(members)), strict=True):
        s = keys.index(key) if key in keys else -1
        readings = read_survey(job, k, s >= 0 and tow[s])
        if s >= 0 and "layback" in job.settings.apply:  # its part of the error is now in the joint sigma
            share = navigation_share(records[1], len(keys), job.settings)[s]
            readings["sigma_position_m"] = readings["sigma_position_m"] * np.sqrt(share)
        job.write("levelling", at_readings(levels, s, settings=job.settings, **readings), member=key)
    statistics = line_statistics(levels, held)
    job.write("levelling_lines", statistics)
    job.write("levelling_crossovers", levels.crossings)
    write_covariance(job.target("level_covariance"), levels)
    record, notes, done = determined.sum_up(levels, statistics, job.settings)
    job.record |= record
    for sentence in notes:
        job.note(sentence)
    job.done(done)


if __name__ == "__main__":
    stage.run(main)
