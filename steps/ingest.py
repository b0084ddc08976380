"""Read the raw files of a survey: readings, navigation and gyro, each in order of time, all of it accounted for.

A reading's identity, its number in order of time, is fixed here. Clocks are corrected (see `steps.clock`). Files are
joined; rows that stand twice are taken once. What is dropped is counted by its reason, and the books must balance:
records in the raw files = kept + dropped.
"""

from pathlib import Path

import numpy as np
import pandas as pd

from steps import clock, edits, stage
from steps.errors import SurveyError, mistake
from steps.provenance import checksum

HOUR = np.timedelta64(1, "h")
QUANTITIES = ["total_field_nt", "signal", "logged_depth_m", "water_depth_m"]


def join_readings(parts: list[pd.DataFrame]) -> tuple[pd.DataFrame, dict[str, int]]:
    """Join the readings of several files in order of time.

    Parameters
    ----------
    parts : list of pandas.DataFrame
        ``time_utc`` and any of total_field_nt, signal, logged_depth_m, water_depth_m; ``source_file``, ``source_row``.

    Returns
    -------
    readings : pandas.DataFrame
        All columns of the vocabulary's readings table, ``reading`` counting from 0.
    counts : dict of str to int
        ``repeated``: rows left out because an earlier one has the same time and values; ``contradictory``: rows left
        out because an earlier one has the same time and another value; ``backwards``: rows in a file earlier than the
        row before them (kept, put in order).

    """
    table = pd.concat(parts, ignore_index=True)
    for name in QUANTITIES:
        if name not in table:
            table[name] = np.nan
    time = table["time_utc"].to_numpy()
    same_file = table["source_file"].to_numpy()[1:] == table["source_file"].to_numpy()[:-1]
    backwards = int(np.count_nonzero(same_file & (time[1:] < time[:-1])))
    order = np.lexsort((table["source_row"].to_numpy(), table["source_file"].to_numpy(), time))
    table = table.iloc[order]
    time = table["time_utc"].to_numpy()
    repeat = np.concatenate([[False], time[1:] == time[:-1]]) if len(time) else np.zeros(0, bool)
    value = table["total_field_nt"].to_numpy()
    first = np.maximum.accumulate(np.where(repeat, 0, np.arange(len(time))))
    equal = (value == value[first]) | (np.isnan(value) & np.isnan(value[first]))
    counts = {
        "repeated": int(np.count_nonzero(repeat & equal)),
        "contradictory": int(np.count_nonzero(repeat & ~equal)),
        "backwards": backwards,
    }
    table = table[~repeat].reset_index(drop=True)
    table["reading"] = np.arange(len(table), dtype=np.int64)
    return table, counts


def join_navigation(parts: list[pd.DataFrame], columns: list[str]) -> tuple[pd.DataFrame, int]:
    """Join fixes or headings of several sources in order of time; of equal times the first source stands.

    Parameters
    ----------
    parts : list of pandas.DataFrame
        Each with ``time_utc`` and some of `columns`.
    columns : list of str
        Columns of the result after ``time_utc``; NaN where a source has none.

    Returns
    -------
    table : pandas.DataFrame
    repeated : int
        Rows left out because an earlier one has the same time.

    """
    empty = pd.DataFrame({"time_utc": np.zeros(0, "datetime64[ns]"), **{name: np.zeros(0) for name in columns}})
    filled = [part.reindex(columns=["time_utc", *columns]) for part in parts if len(part)]
    if not filled:
        return empty, 0
    table = pd.concat(filled, ignore_index=True).sort_values("time_utc", kind="stable")
    repeated = table["time_utc"].duplicated()
    return table[~repeated].reset_index(drop=True), int(repeated.sum())


def shift_clocks(readings: pd.DataFrame, rows: list[dict], files: list[str]) -> pd.DataFrame:
    """Apply the edits that shift the clock of readings; spans are meant in time before any shift.

    Raises
    ------
    SurveyError
        If an edit touches no reading.

    """
    time = readings["time_utc"].to_numpy()
    shifted = time.copy()
    for edit in rows:
        touched = edits.select(edit, time, source_file=readings["source_file"].to_numpy(), source_names=files)
        shifted[touched] += np.timedelta64(round(edit["value"] * clock.NS_PER_S), "ns")
    return readings.assign(time_utc=shifted)


def read_readings(source, paths: list[Path]) -> tuple[list[pd.DataFrame], list[dict]]:
    """Read the readings of every file, with a note of what each file held."""
    parts, files = [], []
    for number, path in enumerate(paths):
        if source.format == "mgd77t":
            from steps.formats.mgd77t import read_mgd77t

            table, counts = read_mgd77t(path)
            kept = table[table["total_field_nt"].notna()]
            counts = {"rows": counts["rows"], "heading": counts["heading"], "records": len(table)}
            counts["without reading"] = len(table) - len(kept)
            table = kept[["time_utc", "source_row", *(name for name in QUANTITIES if name in kept)]]
        else:
            from steps.formats.delimited import read_delimited

            columns = {name: column for name, column in source.columns.model_dump().items() if column}
            table, counts = read_delimited(path, source, columns)
            table = table.rename(columns={"time": "time_utc"})
            table["time_utc"] = clock.correct(table["time_utc"].to_numpy(), source.clock)
        parts.append(table.assign(source_file=np.int32(number)))
        files.append(_entry(path, counts, table["time_utc"]))
    return parts, files


def _entry(path: Path, counts: dict, time: pd.Series) -> dict:
    """Say what a file held."""
    entry = {"file": str(path), "sha256": checksum(path), "counts": counts}
    if len(time):
        entry |= {"start_utc": _text(time.min()), "end_utc": _text(time.max())}
    return entry


def read_navigation(sources, inputs: dict) -> tuple[list, list, list[dict]]:
    """Read fixes and headings of every source."""
    fixes, headings, files = [], [], []
    for number, source in enumerate(sources):
        for path in inputs[f"navigation_{number}"]:
            if source.format == "nmea":
                from steps.formats.nmea import read_nmea

                log = read_nmea(path, source.stamp)
                own, gyro, counts = log.fixes, log.headings, log.counts
                own, gyro = (
                    part.assign(time_utc=clock.correct(part["time_utc"].to_numpy(), source.clock))
                    for part in (own, gyro)
                )
                own = own if "fix" in source.use else own[:0]
                gyro = gyro if "heading" in source.use else gyro[:0]
            elif source.format == "mgd77t":
                from steps.formats.mgd77t import read_mgd77t

                own, counts = read_mgd77t(path)
                own, gyro = own.dropna(subset=["latitude_deg", "longitude_deg"]), own[:0]
            else:
                own, gyro, counts = _delimited_navigation(source, path)
            fixes.append(own)
            headings.append(gyro)
            files.append(_entry(path, counts, own["time_utc"] if len(own) else gyro["time_utc"]))
    return fixes, headings, files


def _delimited_navigation(source, path):
    """Read positions, and headings where they stand beside them, from delimited text."""
    from steps.formats.delimited import read_delimited

    columns = {name: column for name, column in source.columns.model_dump().items() if column}
    table, counts = read_delimited(path, source, columns)
    table["time_utc"] = clock.correct(table["time"].to_numpy(), source.clock)
    gyro = table.iloc[:0]
    if "heading_deg" in table:
        gyro = table.dropna(subset=["heading_deg"])[["time_utc", "heading_deg"]]
        odd = (gyro["heading_deg"] < 0) | (gyro["heading_deg"] > 360)
        if odd.any():
            row = table.loc[odd.index[odd][0]]
            place = f"{path} row {int(row['source_row'])}, {source.columns.heading_deg}"
            raise SurveyError(mistake(place, "must be a heading between 0 and 360 degrees", row["heading_deg"]))
    return table.dropna(subset=["latitude_deg", "longitude_deg"]), gyro, counts


def _text(instant) -> str:
    return str(pd.Timestamp(instant).floor("s")).replace(" ", "T")


def main(job: stage.Job) -> None:
    """Read every raw file, put readings, fixes and headings in order, and balance the books."""
    parts, files = read_readings(job.settings.readings, job.inputs["readings"])
    records = sum(file["counts"]["records"] for file in files)
    silent = sum(file["counts"].get("without reading", 0) for file in files)
    joined = pd.concat(parts, ignore_index=True)
    if len(joined) == 0:
        raise SurveyError(f"{files[0]['file']}: must hold readings of the total field. There is none in any file.")
    joined = shift_clocks(joined, job.edits, [file["file"] for file in files])
    readings, counts = join_readings([joined])
    ledger = {"records": records, "kept": len(readings), "without a reading": silent}
    ledger |= {name: counts[name] for name in ("repeated", "contradictory")}
    if records != sum(number for name, number in ledger.items() if name != "records"):
        raise RuntimeError(f"the books do not balance: {ledger}")
    fixes, headings, navigation_files = read_navigation(job.settings.navigation, job.inputs)
    navigation, repeated = join_navigation(fixes, ["latitude_deg", "longitude_deg", "course_deg", "speed_mps"])
    gyro, _ = join_navigation(headings, ["heading_deg"])
    _judge(job, readings, navigation, gyro, counts)
    job.write("readings", readings)
    job.write("navigation", navigation)
    job.write("gyro", gyro)
    job.record |= {
        "ledger": ledger,
        "backwards": counts["backwards"],
        "files": files,
        "navigation_files": navigation_files,
        "fixes": len(navigation),
        "repeated_fixes": repeated,
        "headings": len(gyro),
    }
    dropped = records - len(readings)
    job.done(
        f"{len(readings)} readings of {records} records in {len(files)} files ({dropped} dropped), "
        f"{len(navigation)} fixes, {len(gyro)} headings"
    )


def _judge(job: stage.Job, readings, navigation, gyro, counts) -> None:
    """Stop at records that cannot belong together; note what deserves a look."""
    time = readings["time_utc"].to_numpy()
    if len(navigation) == 0:
        raise SurveyError("ingest.navigation: must hold positions. There is no usable fix in any file.")
    start, end = navigation["time_utc"].iloc[0], navigation["time_utc"].iloc[-1]
    inside = np.count_nonzero((time >= start.to_datetime64()) & (time <= end.to_datetime64()))
    if inside == 0:
        raise SurveyError(
            f"ingest: readings and navigation must overlap in time. Readings run from {_text(time[0])} to "
            f"{_text(time[-1])}, navigation from {_text(start)} to {_text(end)}. Check the dates, the clock and the "
            "time layout in survey.yaml."
        )
    if inside < len(time):
        job.note(f"{len(time) - inside} readings lie before the first or after the last fix.")
    if counts["contradictory"]:
        job.note(f"{counts['contradictory']} readings have the time of another with another value: the first stands.")
    if counts["repeated"]:
        job.note(f"{counts['repeated']} readings stand twice in the files: taken once.")
    if counts["backwards"]:
        job.note(
            f"the logger's clock jumps backwards {counts['backwards']} times inside a file: readings put in order."
        )
    silences = np.flatnonzero(np.diff(time) > HOUR)
    if len(silences):
        longest = silences[np.argmax(np.diff(time)[silences])]
        hours = (time[longest + 1] - time[longest]) / HOUR
        job.note(f"{len(silences)} silences of over an hour; the longest, {hours:.1f} h, after {_text(time[longest])}.")
    if len(gyro) == 0:
        job.note("there is no gyro heading: course over ground will stand for it.")


if __name__ == "__main__":
    stage.run(main)
