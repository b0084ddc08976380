"""Say which readings belong to which line, by the line log or, without one, from steady course.

A line is a stretch of time with a name and a kind: ``line``, ``tie``, ``calibration`` or ``transit``. Lines found from
the course are stretches on which the course made good stays within a tolerance of the stretch's own mean course
(common practice); their names say that they were found.
"""

import numpy as np
import pandas as pd

from steps import edits, stage
from steps.errors import SurveyError, mistake
from steps.settings import Lines

LOG = {"line": "text", "kind": "text", "start_utc": "time", "end_utc": "time"}  # columns of the line log
KINDS = ("line", "tie", "calibration", "transit")
EARTH_RADIUS_M = 6371008.8  # mean radius of WGS 84; courses and lengths of lines need no more


def check_log(log: pd.DataFrame, name: str) -> pd.DataFrame:
    """Check a line log.

    Parameters
    ----------
    log : pandas.DataFrame
        Columns line, kind, start_utc, end_utc and row.
    name : str
        Name of the file, for the messages.

    Returns
    -------
    pandas.DataFrame
        The log in order of time.

    Raises
    ------
    SurveyError
        With one sentence for each unknown kind, repeated name, line without length, and pair of lines that overlap.

    """
    wrong = []
    for row in log[~log["kind"].isin(KINDS)].itertuples():
        wrong.append(mistake(f"{name} row {row.row}, kind", f"must be one of {', '.join(KINDS)}", row.kind))
    for row in log[log["line"].duplicated()].itertuples():
        remedy = "Give one of the two another name."
        wrong.append(mistake(f"{name} row {row.row}, line", "must be a name used once", row.line, remedy))
    for row in log[~(log["end_utc"] > log["start_utc"])].itertuples():
        wrong.append(
            mistake(f"{name} row {row.row}, end_utc", f"must be after start_utc, {row.start_utc}", row.end_utc)
        )
    ordered = log.sort_values(["start_utc", "row"], kind="stable").reset_index(drop=True)
    early = ordered["start_utc"].to_numpy()[1:] <= ordered["end_utc"].to_numpy()[:-1]
    for after in np.flatnonzero(early) + 1:
        row, before = ordered.iloc[after], ordered.iloc[after - 1]
        must = f"must be after the end of {before['line']} (row {before['row']}), {before['end_utc']}"
        wrong.append(
            mistake(f"{name} row {row['row']}, start_utc", must, row["start_utc"], "Two lines may not overlap.")
        )
    if len(log) == 0:
        wrong.append(mistake(name, "must hold at least one line", "none", "Add the lines, or leave out lines.log."))
    if wrong:
        raise SurveyError(*wrong)
    return ordered


def assign(time_utc: np.ndarray, start_utc: np.ndarray, end_utc: np.ndarray) -> np.ndarray:
    """Find the line of each reading.

    Parameters
    ----------
    time_utc : array of datetime64[ns], shape (n,)
        Times of the readings.
    start_utc, end_utc : array of datetime64[ns], shape (m,)
        First and last instants of the lines, in order of time and without overlap; both belong to the line.

    Returns
    -------
    array of int32, shape (n,)
        Index of the line, -1 outside every line.

    """
    if len(start_utc) == 0:
        return np.full(len(time_utc), -1, np.int32)
    last = np.searchsorted(start_utc, time_utc, side="right") - 1
    inside = (last >= 0) & (time_utc <= end_utc[np.maximum(last, 0)])
    return np.where(inside, last, -1).astype(np.int32)


def find_lines(time_utc: np.ndarray, lat: np.ndarray, lon: np.ndarray, *, settings: Lines) -> pd.DataFrame:
    """Find lines as stretches of steady course.

    Fixes are thinned to about one a minute first, since the course over a few metres is noise.

    Parameters
    ----------
    time_utc : array of datetime64[ns], shape (n,)
        Times of the fixes, increasing.
    lat, lon : array of float, shape (n,)
        Positions, degrees.
    settings : Lines
        Course tolerance, shortest line, longest gap.

    Returns
    -------
    pandas.DataFrame
        Columns line, kind (``line``), start_utc, end_utc; in order of time.

    """
    keep = np.isfinite(lat) & np.isfinite(lon)
    time_utc, lat, lon = time_utc[keep], lat[keep], lon[keep]
    minute = time_utc.astype("datetime64[m]")
    first = np.concatenate([[True], minute[1:] != minute[:-1]]) if len(minute) else np.zeros(0, bool)
    time_utc, lat, lon = time_utc[first], lat[first], lon[first]
    empty = pd.DataFrame({"line": [], "kind": [], "start_utc": time_utc[:0], "end_utc": time_utc[:0]})
    if len(time_utc) < 3:
        return empty
    east, north = _steps(lat, lon)
    seconds = np.diff(time_utc) / np.timedelta64(1, "s")
    stretches = _steady(east, north, seconds, settings.course_tolerance_deg, settings.longest_gap_s)
    length_m = np.hypot(east, north)
    long = [(a, b) for a, b in stretches if length_m[a:b].sum() >= 1000 * settings.shortest_line_km]
    if not long:
        return empty
    starts, ends = (np.array(side) for side in zip(*long, strict=True))
    start_utc, end_utc = time_utc[starts], time_utc[ends]
    # Two lines may share the fix at a turn: the later one starts just after it.
    start_utc[1:] += np.where(start_utc[1:] <= end_utc[:-1], np.timedelta64(1, "ns"), np.timedelta64(0, "ns"))
    return pd.DataFrame(
        {
            "line": [f"found-{number:03d}" for number in range(1, len(long) + 1)],
            "kind": "line",
            "start_utc": start_utc,
            "end_utc": end_utc,
        }
    )


def _steps(lat: np.ndarray, lon: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the steps between positions, metres east and north; the shorter way round in longitude."""
    dlon = (np.diff(lon) + 180.0) % 360.0 - 180.0
    middle = np.radians((lat[1:] + lat[:-1]) / 2)
    return EARTH_RADIUS_M * np.radians(dlon) * np.cos(middle), EARTH_RADIUS_M * np.radians(np.diff(lat))


def _steady(
    east: np.ndarray, north: np.ndarray, seconds: np.ndarray, tolerance_deg: float, longest_gap_s: float
) -> list[tuple[int, int]]:
    """Cut a track into stretches whose steps keep within the tolerance of the stretch's running mean course.

    A single step out of tolerance (a helmsman's excursion, a bad fix) does not end a stretch; three in a row do.
    """
    limit = np.cos(np.radians(tolerance_deg))
    length = np.hypot(east, north)
    stretches, start, out = [], 0, 0
    sum_east = sum_north = 0.0
    for k in range(len(east)):
        if seconds[k] > longest_gap_s:
            stretches.append((start, k - out))
            start, out, sum_east, sum_north = k + 1, 0, 0.0, 0.0
            continue
        along = sum_east * east[k] + sum_north * north[k]
        norm = np.hypot(sum_east, sum_north) * length[k]
        if norm == 0 or along >= limit * norm:
            out = 0
            sum_east += east[k]
            sum_north += north[k]
            continue
        out += 1
        if out == 3:
            stretches.append((start, k - 2))
            start, out = k - 2, 0
            sum_east, sum_north = east[k - 2 : k + 1].sum(), north[k - 2 : k + 1].sum()
    stretches.append((start, len(east) - out))
    return [(a, b) for a, b in stretches if b > a]


def apply_edits(table: pd.DataFrame, rows: list[dict]) -> pd.DataFrame:
    """Rename lines and change their kinds as a person's edits say, in the order of the edits.

    Raises
    ------
    SurveyError
        If an edit names no line, or would give two lines one name.

    """
    table = table.copy()
    for edit in rows:
        index = edits.find_line(edit, table["line"].tolist())
        if edit["action"] == "set_kind":
            table.loc[index, "kind"] = edit["value"]
            continue
        if edit["value"] in table["line"].tolist():
            raise SurveyError(mistake(f"{edits.where(edit)}, value", "must be a name used once", edit["value"]))
        table.loc[index, "line"] = edit["value"]
    return table


def main(job: stage.Job) -> None:
    """Read the line log or find the lines, apply edits, and give every reading its line."""
    time_utc = job.table("readings", ["time_utc"])["time_utc"].to_numpy()
    if "log" in job.inputs:
        from steps.formats import tables
        from steps.provenance import checksum

        path = job.path("log")
        table = check_log(tables.read_table(path, LOG), str(path))
        job.record["line_log"] = {"file": str(path), "sha256": checksum(path), "lines": len(table)}
    else:
        fixes = job.table("navigation", ["time_utc", "latitude_deg", "longitude_deg"])
        table = find_lines(*(fixes[name].to_numpy() for name in fixes), settings=job.settings)
        if len(table) == 0:
            raise SurveyError(
                f"lines: no stretch of steady course of {job.settings.shortest_line_km:g} km or more was found. "
                "Lower lines.shortest_line_km, raise lines.course_tolerance_deg, or give a line log."
            )
    table = apply_edits(table, job.edits)
    line_index = assign(time_utc, table["start_utc"].to_numpy(), table["end_utc"].to_numpy())
    table["readings"] = np.bincount(line_index[line_index >= 0], minlength=len(table))
    if not table["readings"].any():
        span = f"{_text(time_utc.min())} to {_text(time_utc.max())}"
        raise SurveyError(
            f"lines: no reading falls on a line. Readings run from {span}, lines from "
            f"{_text(table['start_utc'].min())} to {_text(table['end_utc'].max())}. "
            "Check the dates of the line log and the clock of the logger."
        )
    for line in table.loc[table["readings"] == 0, "line"]:
        job.note(f"line {line} holds no reading: its times lie outside the records.")
    counts = {kind: int((table["kind"] == kind).sum()) for kind in KINDS}
    off = int((line_index < 0).sum())
    job.record |= {"kinds": counts, "off_line": off, "on_line": len(line_index) - off, "found": "log" not in job.inputs}
    job.write("lines", pd.DataFrame({"line_index": line_index}))
    job.write("line_table", table[["line", "kind", "start_utc", "end_utc", "readings"]])
    kinds = ", ".join(
        f"{number} {kind}{'s' if number != 1 and kind in ('line', 'tie') else ''}"
        for kind, number in counts.items()
        if number
    )
    job.done(f"{kinds}; {len(line_index) - off} readings on lines, {off} off")


def _text(instant: object) -> str:
    return str(pd.Timestamp(instant).floor("s")).replace(" ", "T")


if __name__ == "__main__":
    stage.run(main)
