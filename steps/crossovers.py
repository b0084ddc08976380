"""Cross the sensor's tracks of all surveys: where they intersect, what each pass read there, how sure that is.

Crossings are found by `steps.intersections` on readings that are kept and on a line of a kind that counts, and never
across a gap. A line's crossing with itself counts only if the way between the two passes is longer than a turn.

The value of a pass, of the anomaly before levelling, and its along-track gradient are those of `steps.interpolation`. A
term that no reading of a survey has is not subtracted, for the whole survey, and the record says so; a pass that lacks
a term which other readings of its survey have is not used.

A mismatch is also uncertain because either pass may not have been where it is said to be. With the horizontal gradient
G of the anomaly, which two gradients along different directions determine, and errors of position of sigma_p metres in
each direction, ``sigma^2 = sigma_1^2 + sigma_2^2 + |G|^2 (sigma_p1^2 + sigma_p2^2)``; at right angles |G|^2 is the sum
of squares of both gradients, at small angles it grows with 1 / sin^2 of the angle.
"""

import numpy as np
import pandas as pd

from steps import stage
from steps.columns import TABLES
from steps.interpolation import values_at
from steps.intersections import Crossings, find_crossings
from steps.screen import rejected

LEAST_SINE = np.sin(np.radians(1.0))  # of the angle between tracks, for the horizontal gradient
PAIRS_LISTED = 2000

TERMS = {"main_field_nt": "main field", "diurnal_nt": "diurnal", "heading_nt": "heading"}
POSITION = ["sensor_latitude_deg", "sensor_longitude_deg"]
ANGLES = {
    "course_1_deg": "sensor_course_deg",
    "ship_heading_1_deg": "ship_heading_deg",
    "tow_direction_1_deg": "tow_direction_deg",
}
NUMBERS = {
    "speed_1_mps": "sensor_speed_mps",
    "diurnal_1_nt": "diurnal_nt",
    "sigma_diurnal_1_nt": "sigma_diurnal_nt",
    "sigma_heading_1_nt": "sigma_heading_nt",
    "sigma_position_1_m": "sigma_position_m",
}
OF_SURVEY = {
    "readings": ["reading", "time_utc", "total_field_nt"],
    "lines": ["line_index"],
    "screen": ["screen_flags", "sigma_noise_nt"],
    "position": [*POSITION, *ANGLES.values(), "sensor_speed_mps", "sigma_position_m"],
    "main_field": ["main_field_nt"],
    "diurnal": ["diurnal_nt", "sigma_diurnal_nt"],
    "heading": ["heading_nt", "sigma_heading_nt"],
}


# -- which readings --------------------------------------------------------------------------------------------------


def usable(
    line_index: np.ndarray, kind_counts: np.ndarray, screen_flags: np.ndarray, *values: np.ndarray
) -> np.ndarray:
    """Tell which readings take part: on a line whose kind counts, not rejected, no value missing.

    Parameters
    ----------
    line_index : array of int, shape (n,)
        Line of each reading, -1 for none.
    kind_counts : array of bool, shape (m,)
        Lines whose kind counts.
    screen_flags : array of uint32, shape (n,)
    *values : array of float, shape (n,)
        Position and total field.

    Returns
    -------
    array of bool, shape (n,)

    """
    good = np.append(kind_counts, False)[line_index] & ~rejected(screen_flags)
    for value in values:
        good &= np.isfinite(value)
    return good


def joined(time_utc: np.ndarray, track: np.ndarray, longest_gap_s: float) -> np.ndarray:
    """Tell which readings are joined to the next by a segment of track: same line, no gap in time.

    Parameters
    ----------
    time_utc : array of datetime64[ns], shape (n,)
    track : array of int, shape (n,)
    longest_gap_s : float

    Returns
    -------
    array of bool, shape (n - 1,)

    """
    step = np.diff(time_utc.astype("datetime64[ns]").astype(np.int64))
    return (np.diff(track) == 0) & (step <= longest_gap_s * 1e9)


def before_levelling(table: pd.DataFrame) -> tuple[np.ndarray, np.ndarray, list[str]]:
    """Return the anomaly before levelling.

    Parameters
    ----------
    table : pandas.DataFrame
        total_field_nt and the terms main_field_nt, diurnal_nt, heading_nt of one survey.

    Returns
    -------
    anomaly : array of float, shape (n,)
        nT; NaN where a term is missing that other readings of the survey have.
    lacking : array of int, shape (n,)
        Which of the terms, counting from 1, is the first that is missing there; 0 for none.
    absent : list of str
        Terms that no reading has: they are not subtracted.

    """
    anomaly = table["total_field_nt"].to_numpy(float).copy()
    lacking, absent = np.zeros(len(table), np.int8), []
    for number, (term, name) in enumerate(TERMS.items(), start=1):
        value = table[term].to_numpy(float)
        missing = np.isnan(value)
        if missing.all():
            absent.append(name)
            continue
        anomaly -= value
        lacking[missing & (lacking == 0)] = number
    return anomaly, lacking, absent


# -- values at crossings ---------------------------------------------------------------------------------------------


def _between(first: np.ndarray, second: np.ndarray, fraction: np.ndarray) -> np.ndarray:
    """Interpolate; at the first reading itself the second is not needed."""
    return np.where(fraction == 0, first, first * (1 - fraction) + second * fraction)


def at_passes(
    table: pd.DataFrame, link: np.ndarray, before: np.ndarray, fraction: np.ndarray, *, window_m: float
) -> tuple[dict[str, np.ndarray], list[str]]:
    """Read everything that a crossing keeps of one pass.

    Parameters
    ----------
    table : pandas.DataFrame
        The usable readings of one survey, with the columns of `OF_SURVEY`.
    link : array of bool, shape (n - 1,)
        Whether a reading is joined to the next.
    before : array of int, shape (p,)
        Row before each pass.
    fraction : array of float, shape (p,)
        Place between that row and the next.
    window_m : float
        Length over which value and gradient are fitted.

    Returns
    -------
    passes : dict of str to array, shape (p,)
        Columns of the table of crossovers for the first pass, and besides ``line_index``, ``lacking`` (of
        `before_levelling`), ``east`` and ``north`` (direction of the track).
    absent : list of str
        Terms that the survey has not.

    """
    column = {name: table[name].to_numpy() for name in table}
    after = np.minimum(before + 1, len(table) - 1)
    anomaly, lacking, absent = before_levelling(table)
    lat, lon = (column[name] for name in POSITION)
    value = values_at(lat, lon, anomaly, column["sigma_noise_nt"], link, before, fraction, window_m=window_m)
    time = column["time_utc"].astype("datetime64[ns]").astype(np.int64)
    between = np.rint(fraction * (time[after] - time[before])).astype(np.int64)
    passes = {
        "line_index": column["line_index"][before],
        "reading_1": column["reading"][before],
        "fraction_1": fraction,
        "time_1_utc": (time[before] + between).astype("datetime64[ns]"),
        "anomaly_1_nt": value["value"],
        "gradient_1_nt_per_m": value["gradient"],
        "east": value["east"],
        "north": value["north"],
        "lacking": np.where(lacking[before] > 0, lacking[before], lacking[after]),
    }
    for name, source in ANGLES.items():
        angle = np.radians(column[source])
        x, y = (_between(part[before], part[after], fraction) for part in (np.cos(angle), np.sin(angle)))
        passes[name] = np.degrees(np.arctan2(y, x)) % 360.0
    for name, source in NUMBERS.items():
        passes[name] = _between(column[source][before], column[source][after], fraction)
    squares = sum(np.nan_to_num(passes[f"sigma_{term}_1_nt"]) ** 2 for term in ("diurnal", "heading"))
    passes["sigma_1_nt"] = np.sqrt(value["sigma"] ** 2 + squares)
    return passes, absent


def position_variance(first: dict[str, np.ndarray], second: dict[str, np.ndarray]) -> np.ndarray:
    """Return the variance that errors of position bring to mismatches, nT^2.

    Parameters
    ----------
    first, second : dict of str to array, shape (p,)
        Passes as `at_passes` returns them.

    """
    g_1, g_2 = first["gradient_1_nt_per_m"], second["gradient_1_nt_per_m"]
    cosine = first["east"] * second["east"] + first["north"] * second["north"]
    sine = first["east"] * second["north"] - first["north"] * second["east"]
    square = (g_1**2 + g_2**2 - 2 * g_1 * g_2 * cosine) / np.maximum(sine**2, LEAST_SINE**2)
    return square * (first["sigma_position_1_m"] ** 2 + second["sigma_position_1_m"] ** 2)


def statuses(angle_deg: np.ndarray, lacking_1: np.ndarray, lacking_2: np.ndarray, smallest_angle_deg: float):
    """Say of each crossing ``used``, or why it is not.

    Parameters
    ----------
    angle_deg : array of float, shape (p,)
    lacking_1, lacking_2 : array of int, shape (p,)
        Of `before_levelling`, at the two passes.
    smallest_angle_deg : float

    Returns
    -------
    array of str, shape (p,)

    """
    status = np.full(len(angle_deg), "used", object)
    status[angle_deg < smallest_angle_deg] = f"tracks meet at less than {smallest_angle_deg:g} degrees"
    for name, lacking in (("second", lacking_2), ("first", lacking_1)):
        for number, term in enumerate(TERMS.values(), start=1):
            status[lacking == number] = f"{name} pass lacks the {term} term"
    return status


def statistics(table: pd.DataFrame) -> dict:
    """Sum the mismatches up: of all, of each line, of each pair of surveys.

    Parameters
    ----------
    table : pandas.DataFrame
        Table of crossovers.

    Returns
    -------
    dict
        ``status`` (counts), ``mismatch`` of all used ones, lists ``lines`` and ``pairs``. The external error is that of
        a single pass, rms / sqrt(2).

    """
    used = table[table["status"] == "used"]
    mismatch = used["mismatch_nt"].to_numpy()
    counts = table["status"].value_counts()
    passes = pd.DataFrame(
        {name: np.concatenate([used[f"{name}_1"], used[f"{name}_2"]]) for name in ("survey", "line")}
        | {"mismatch_nt": np.concatenate([mismatch, -mismatch])}
    )
    one, two = used["survey_1"].to_numpy(str), used["survey_2"].to_numpy(str)
    swap = one > two
    pairs = pd.DataFrame(
        {"survey_1": np.where(swap, two, one), "survey_2": np.where(swap, one, two), "mismatch_nt": mismatch}
    )
    listed = _groups(pairs, ["survey_1", "survey_2"])
    return {
        "crossings": len(table),
        "status": {str(name): int(counts[name]) for name in sorted(counts.index)},
        "mismatch": _figures(mismatch),
        "lines": _groups(passes, ["survey", "line"]),
        "pairs_of_surveys": len(listed),
        "pairs": sorted(listed, key=lambda row: -row["n"])[:PAIRS_LISTED],
    }


def _figures(mismatch: np.ndarray) -> dict:
    """Return number, mean, standard deviation, rms, median absolute value and external error, None without any."""
    n = len(mismatch)
    rms = float(np.sqrt(np.mean(mismatch**2))) if n else None
    return {
        "n": n,
        "mean_nt": float(np.mean(mismatch)) if n else None,
        "sd_nt": float(np.std(mismatch, ddof=1)) if n > 1 else None,
        "rms_nt": rms,
        "median_absolute_nt": float(np.median(np.abs(mismatch))) if n else None,
        "external_error_nt": rms / np.sqrt(2) if n else None,
    }


def _groups(table: pd.DataFrame, keys: list[str]) -> list[dict]:
    """Return the figures of each group, in the order in which they first appear."""
    return [
        dict(zip(keys, name, strict=True)) | _figures(group["mismatch_nt"].to_numpy())
        for name, group in table.groupby(keys, sort=False)
    ]


# -- stage -----------------------------------------------------------------------------------------------------------


def read_survey(job: stage.Job, number: int, kind_counts: np.ndarray, wanted: dict[str, list[str]]) -> pd.DataFrame:
    """Read columns of the usable readings of one survey."""
    needed = {"lines": ["line_index"], "screen": ["screen_flags"], "position": POSITION, "readings": ["total_field_nt"]}
    parts = []
    for name in wanted:
        names = dict.fromkeys([*wanted[name], *needed.get(name, [])])
        parts.append(pd.read_parquet(job.inputs[name][number], columns=list(names)))
    table = pd.concat(parts, axis=1)
    values = (table[name].to_numpy() for name in (*POSITION, "total_field_nt"))
    good = usable(table["line_index"].to_numpy(), kind_counts, table["screen_flags"].to_numpy(), *values)
    return table if good.all() else table[good].reset_index(drop=True)


def main(job: stage.Job) -> None:
    """Find the crossings of all surveys, then read both passes of each from the survey that ran it."""
    own, members = job.settings, job.survey["members"]
    tables = [pd.read_parquet(path, columns=["line", "kind"]) for path in job.inputs["line_table"]]
    counts = [table["kind"].isin(own.kinds).to_numpy() for table in tables]
    geometry = {"readings": ["time_utc"], "lines": [], "screen": [], "position": []}
    lat, lon, track, link, start, lines = [], [], [], [], [0], 0
    for number, table in enumerate(tables):
        rows = read_survey(job, number, counts[number], geometry)
        index = rows["line_index"].to_numpy()
        lat.append(rows[POSITION[0]].to_numpy())
        lon.append(rows[POSITION[1]].to_numpy())
        track.append((index + lines).astype(np.int32))
        link.append(np.append(joined(rows["time_utc"].to_numpy(), index, own.longest_gap_s), False)[: len(rows)])
        start.append(start[-1] + len(rows))
        lines += len(table)
    del rows, index
    lat, lon, track = np.concatenate(lat), np.concatenate(lon), np.concatenate(track)  # the parts are let go
    loop_m = own.shortest_loop_km * 1000
    found = find_crossings(lat, lon, track, joined=np.concatenate(link)[:-1], shortest_loop_m=loop_m)
    del lat, lon, track
    sides: tuple[dict, dict] = ({}, {})
    for number, table in enumerate(tables):
        places = [np.flatnonzero((k >= start[number]) & (k < start[number + 1])) for k in (found.i, found.j)]
        if not any(map(len, places)):
            continue
        rows = read_survey(job, number, counts[number], OF_SURVEY)
        before = np.concatenate([k[place] for k, place in zip((found.i, found.j), places, strict=True)])
        fraction = [part[place] for part, place in zip((found.fraction_i, found.fraction_j), places, strict=True)]
        passes, absent = at_passes(
            rows, link[number][:-1], before - start[number], np.concatenate(fraction), window_m=own.gradient_window_m
        )
        passes["survey_1"] = np.full(len(before), members[number], object)
        passes["line_1"] = table["line"].to_numpy(object)[passes.pop("line_index")]
        for side, place, values in zip(
            sides, places, (slice(None, len(places[0])), slice(len(places[0]), None)), strict=True
        ):
            for name, part in passes.items():
                side.setdefault(name, np.zeros(len(found), part.dtype))[place] = part[values]
        for term in absent:
            job.record.setdefault("absent", {}).setdefault(term, []).append(members[number])
    table = crossing_table(found, *sides, smallest_angle_deg=own.smallest_angle_deg)
    job.write("crossovers", table)
    job.record |= statistics(table)
    _tell(job, table)


def crossing_table(found: Crossings, first: dict, second: dict, *, smallest_angle_deg: float) -> pd.DataFrame:
    """Put both passes together.

    Parameters
    ----------
    found : Crossings
    first, second : dict of str to array
        Passes as `at_passes` returns them, with survey_1 and line_1; empty without a crossing.
    smallest_angle_deg : float
        Crossings at smaller angles are listed, not used.

    Returns
    -------
    pandas.DataFrame
        Table of crossovers.

    """
    if len(found) == 0:
        return pd.DataFrame({name: [] for name in TABLES["crossovers"]})
    variance = first["sigma_1_nt"] ** 2 + second["sigma_1_nt"] ** 2 + position_variance(first, second)
    columns = {
        **first,
        **{name.replace("_1", "_2"): part for name, part in second.items() if "_1" in name},
        "sensor_latitude_deg": found.lat,
        "sensor_longitude_deg": found.lon,
        "angle_deg": found.angle_deg,
        "mismatch_nt": first["anomaly_1_nt"] - second["anomaly_1_nt"],
        "sigma_mismatch_nt": np.sqrt(variance),
        "status": statuses(found.angle_deg, first["lacking"], second["lacking"], smallest_angle_deg),
    }
    return pd.DataFrame({name: columns[name] for name in TABLES["crossovers"]})


def _tell(job: stage.Job, table: pd.DataFrame) -> None:
    """Say what was found, and what deserves a look."""
    for term, surveys in job.record.get("absent", {}).items():
        where = f" in {', '.join(surveys)}" if len(job.survey["members"]) > 1 else ""
        job.note(f"there is no {term} term{where}: it is not subtracted before tracks are compared.")
    figures = job.record["mismatch"]
    if len(table) == 0:
        job.note("no track crosses another one: nothing can be levelled or compared.")
        job.done("no crossing")
        return
    left_out = len(table) - figures["n"]
    if figures["n"] == 0:
        job.note(f"none of the {len(table)} crossings can be used; the table of crossovers gives the reasons.")
        job.done(f"{len(table)} crossings, none used")
        return
    job.done(
        f"{len(table)} crossings, {left_out} of them not used; mismatch {figures['rms_nt']:.2f} nT rms, "
        f"{figures['median_absolute_nt']:.2f} nT median, so {figures['external_error_nt']:.2f} nT a line"
    )


if __name__ == "__main__":
    stage.run(main)
