"""Read the raw files of a survey: readings, navigation and gyro, each in order of time, all of it accounted for.

A reading's identity, its number in order of time, is fixed here. Clocks are corrected (see `steps.clock`). Files are
joined; rows that stand twice are taken once, and of rows that contradict each other the first. Of several sources of
navigation the first that has something to say stands; the others fill its gaps. What is dropped is counted by its
reason, and the books must balance: records in the raw files = kept + dropped.
"""

from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pandas as pd

from steps import clock, edits, stage
from steps.errors import SurveyError, mistake
from steps.provenance import checksum

HOUR = np.timedelta64(1, "h")
BRIDGED = np.timedelta64(60, "s")  # between two fixes of a source this close no other source is asked
ROLLOVER = np.timedelta64(1024 * 7, "D")  # GPS counts weeks modulo 1024 (IS-GPS-200, 20.3.3.3.1.1)
QUANTITIES = ["total_field_nt", "signal", "logged_depth_m", "water_depth_m"]
POSITION = ["latitude_deg", "longitude_deg", "course_deg", "speed_mps"]
EARTH_NT = (15_000.0, 80_000.0)  # total field of the Earth at sea level, with room (common practice)
UNITS = {"tesla": 1e9, "millitesla": 1e6, "gauss": 1e5, "microtesla": 1e3, "picotesla": 1e-3}
MOST_LISTED = 5
MOST_MISTAKES = 20


# -- joins -----------------------------------------------------------------------------------------------------------


def join_readings(parts: list[pd.DataFrame]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Join the readings of several files in order of time.

    Parameters
    ----------
    parts : list of pandas.DataFrame
        ``time_utc`` and any of total_field_nt, signal, logged_depth_m, water_depth_m; ``source_file``, ``source_row``.

    Returns
    -------
    readings : pandas.DataFrame
        All columns of the vocabulary's readings table, ``reading`` counting from 0. Of rows of one time the first that
        has a total field stands, by file and row.
    left_out : pandas.DataFrame
        The other rows: ``time_utc``, ``source_file``, ``source_row``; ``other_file`` and ``other_row`` of the one that
        stands; ``contradicts``, whether any quantity of both differs.

    """
    table = parts[0].copy() if len(parts) == 1 else pd.concat(parts, ignore_index=True)
    for name in QUANTITIES:
        if name not in table:
            table[name] = np.nan
    order = _by_time(table["time_utc"].to_numpy(), table["source_row"].to_numpy(), table["source_file"].to_numpy())
    if order is not None:
        table = table.iloc[order].reset_index(drop=True)
    stands = _standing(table["time_utc"].to_numpy(), table["total_field_nt"].to_numpy())
    out = np.flatnonzero(stands != np.arange(len(table)))
    left_out = table.loc[out, ["time_utc", "source_file", "source_row"]].reset_index(drop=True)
    left_out["other_file"] = table["source_file"].to_numpy()[stands[out]]
    left_out["other_row"] = table["source_row"].to_numpy()[stands[out]]
    left_out["contradicts"] = _differ(table, QUANTITIES, out, stands[out])
    table = table.drop(index=out).reset_index(drop=True) if len(out) else table
    return table.assign(reading=np.arange(len(table), dtype=np.int64)), left_out


def join_navigation(
    sources: list[pd.DataFrame], columns: list[str], bridged: np.timedelta64 = BRIDGED
) -> tuple[pd.DataFrame, dict[str, int]]:
    """Join fixes or headings in order of time; where an earlier source tells them closely, later ones are not asked.

    Two receivers are metres apart: their fixes taken in turn would be a track that jumps to and fro.

    Parameters
    ----------
    sources : list of pandas.DataFrame
        In order of preference, each with ``time_utc`` and some of `columns`.
    columns : list of str
        Columns of the result after ``time_utc``; NaN where a source has none.
    bridged : numpy.timedelta64, optional
        A row between two rows of earlier sources that are no further apart than this is left out.

    Returns
    -------
    table : pandas.DataFrame
    counts : dict of str to int
        ``repeated`` and ``contradictory`` rows of one source, by the first of their time; ``second_choice``: rows left
        out because an earlier source tells that time.

    """
    table = pd.DataFrame({"time_utc": np.zeros(0, "datetime64[ns]"), **{name: np.zeros(0) for name in columns}})
    counts = {"repeated": 0, "contradictory": 0, "second_choice": 0}
    for source in sources:
        if len(source) == 0:
            continue
        own = source.reindex(columns=["time_utc", *columns])
        order = _by_time(own["time_utc"].to_numpy())
        own = own if order is None else own.iloc[order].reset_index(drop=True)
        time = own["time_utc"].to_numpy()
        stands = _standing(time, own[columns[0]].to_numpy())
        out = stands != np.arange(len(time))
        differs = int(np.count_nonzero(_differ(own, columns, np.flatnonzero(out), stands[out])))
        counts["contradictory"] += differs
        counts["repeated"] += int(np.count_nonzero(out)) - differs
        told = table["time_utc"].to_numpy()
        if len(told):
            after = np.searchsorted(told, time)
            inside = (after > 0) & (after < len(told))
            gap = told[np.minimum(after, len(told) - 1)] - told[np.maximum(after - 1, 0)]
            same = told[np.minimum(after, len(told) - 1)] == time
            second = ~out & (same | (inside & (gap <= bridged)))
            counts["second_choice"] += int(np.count_nonzero(second))
            out = out | second
            table = pd.concat([table, own[~out]], ignore_index=True).sort_values("time_utc", kind="stable")
        else:
            table = own[~out]
        table = table.reset_index(drop=True)
    return table, counts


def _by_time(time: np.ndarray, *ties: np.ndarray) -> np.ndarray | None:
    """Return the order of time, of equal times that of `ties` (last first); None where rows stand in order already."""
    step = np.diff(time.astype(np.int64))
    if (step > 0).all():
        return None
    if not ties:
        return np.argsort(time, kind="stable")
    return np.lexsort((*ties, time))


def _standing(time: np.ndarray, value: np.ndarray) -> np.ndarray:
    """Return of each row, in order of time, the one that stands for it: the first with a value, else the first."""
    n = len(time)
    begins = np.flatnonzero(np.concatenate([[True], time[1:] != time[:-1]])) if n else np.zeros(0, np.int64)
    if len(begins) == n:
        return np.arange(n)
    first = np.minimum.reduceat(np.arange(n) + n * np.isnan(value), begins) % n
    return np.repeat(first, np.diff(np.append(begins, n)))


def _differ(table: pd.DataFrame, columns: list[str], rows: np.ndarray, others: np.ndarray) -> np.ndarray:
    """Tell which rows say something else than others; what only one of two says is no contradiction."""
    differs = np.zeros(len(rows), bool)
    for name in columns if len(rows) else ():
        own, other = table[name].to_numpy()[rows], table[name].to_numpy()[others]
        differs |= np.isfinite(own) & np.isfinite(other) & (own != other)
    return differs


def backward_steps(table: pd.DataFrame) -> np.ndarray:
    """Return the rows, as they stand in their files, that are earlier than the row before them in the same file."""
    time, file = table["time_utc"].to_numpy(), table["source_file"].to_numpy()
    return np.flatnonzero((file[1:] == file[:-1]) & (time[1:] < time[:-1])) + 1


def overlaps(files: list[dict]) -> list[dict]:
    """Find raw files that overlap in time.

    Parameters
    ----------
    files : list of dict
        ``file`` and, where it holds anything, ``start_utc`` and ``end_utc`` as ISO text.

    Returns
    -------
    list of dict
        ``files``, the two names; ``start_utc`` and ``end_utc`` of what they share. Each file is held against that
        earlier one which lasts longest.

    """
    found, longest = [], None
    for file in sorted((file for file in files if "start_utc" in file), key=lambda file: file["start_utc"]):
        if longest is not None and file["start_utc"] <= longest["end_utc"]:
            end = min(file["end_utc"], longest["end_utc"])
            found.append({"files": [longest["file"], file["file"]], "start_utc": file["start_utc"], "end_utc": end})
        if longest is None or file["end_utc"] > longest["end_utc"]:
            longest = file
    return found


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


# -- reading ---------------------------------------------------------------------------------------------------------


def read_readings(source, paths: list[Path]) -> tuple[list[pd.DataFrame], list[dict]]:
    """Read the readings of every file, clocks corrected, with a note of what each file held.

    Parameters
    ----------
    source : DelimitedReadings or TracklineData
    paths : list of pathlib.Path

    Returns
    -------
    parts : list of pandas.DataFrame
        As `join_readings` takes them; ``source_file`` counts the files from 0.
    files : list of dict
        Of each file: ``file``, ``sha256``, ``counts``, ``start_utc`` and ``end_utc``, and ``ledger``: records of the
        file by what became of them so far.

    Raises
    ------
    SurveyError
        With the mistakes of all files.

    """

    def read(path: Path) -> tuple[pd.DataFrame, dict]:
        if source.format == "mgd77t":
            from steps.formats.mgd77t import read_mgd77t

            table, counts = read_mgd77t(path)
            kept = table[table["total_field_nt"].notna()]
            ledger = {"without_time": counts["without_time"], "without_reading": len(table) - len(kept)}
            ledger |= {"records": counts["records"], "joined": len(kept)}
            table = kept[["time_utc", "source_row", *(name for name in QUANTITIES if name in kept)]]
        else:
            from steps.formats.delimited import read_delimited

            columns = {name: column for name, column in source.columns.model_dump().items() if column}
            table, counts = read_delimited(path, source, columns)
            table["time_utc"] = clock.correct(table.pop("time").to_numpy(), source.clock)
            dropped = {"truncated": counts["truncated"], "without_time": counts["without time"]}
            ledger = dropped | {"records": counts["records"] + sum(dropped.values()), "joined": len(table)}
        return table, _entry(path, counts, table["time_utc"]) | {"ledger": ledger}

    found = _each(read, paths)
    parts = [table.assign(source_file=np.int32(number)) for number, (table, _) in enumerate(found)]
    return parts, [entry for _, entry in found]


def read_navigation(sources: list, inputs: dict) -> tuple[list[pd.DataFrame], list[pd.DataFrame], list[dict]]:
    """Read fixes and headings of every source, clocks corrected.

    Parameters
    ----------
    sources : list of DelimitedNavigation, NmeaNavigation or TracklineData
    inputs : dict of str to list of pathlib.Path
        Files of each: ``navigation_0``, ``navigation_1``, ...

    Returns
    -------
    fixes, headings : list of pandas.DataFrame
        Of each source; as `join_navigation` takes them.
    files : list of dict
        Of each file: ``file``, ``sha256``, ``source``, ``counts``, ``notes``, ``start_utc`` and ``end_utc``.

    Raises
    ------
    SurveyError
        With the mistakes of all files.

    """
    work = [(number, path) for number in range(len(sources)) for path in inputs[f"navigation_{number}"]]

    def read(item: tuple[int, Path]) -> tuple[pd.DataFrame, pd.DataFrame, dict]:
        number, path = item
        source, notes = sources[number], []
        if source.format == "nmea":
            from steps.formats.nmea import read_nmea

            log = read_nmea(path, source.stamp)
            counts, notes = log.counts, log.notes
            own = _corrected(log.fixes, source.clock) if "fix" in source.use else log.fixes[:0]
            gyro = _corrected(log.headings, source.clock) if "heading" in source.use else log.headings[:0]
        elif source.format == "mgd77t":
            from steps.formats.mgd77t import read_mgd77t

            table, counts = read_mgd77t(path)
            own, gyro = table.dropna(subset=["latitude_deg", "longitude_deg"]), table[:0]
        else:
            own, gyro, counts = _delimited_navigation(source, path)
            back = np.flatnonzero(np.diff(own["time_utc"].to_numpy()) < np.timedelta64(0)) + 1
            if len(back):
                row = int(own["source_row"].iloc[back[0]])
                notes.append(f"the time of the fixes goes back {len(back)} times, first in row {row}; put in order.")
        entry = _entry(path, counts, own["time_utc"] if len(own) else gyro["time_utc"])
        return own, gyro, entry | {"source": number, "notes": notes}

    found = _each(read, work)
    fixes, headings = (
        [
            pd.concat([part[which] for part, item in zip(found, work, strict=True) if item[0] == number])
            for number in range(len(sources))
        ]
        for which in (0, 1)
    )
    return fixes, headings, [entry for _, _, entry in found]


def _each(read: Callable, items: list) -> list:
    """Read every item on two threads; the mistakes of all are told together."""

    def attempt(item):
        try:
            return read(item)
        except SurveyError as error:
            return error

    with ThreadPoolExecutor(2) as pool:
        results = list(stage.progress(pool.map(attempt, items), "ingest", len(items)))
    wrong = [sentence for result in results if isinstance(result, SurveyError) for sentence in result.sentences]
    if len(wrong) > MOST_MISTAKES:
        wrong = [*wrong[:MOST_MISTAKES], f"And {len(wrong) - MOST_MISTAKES} more mistakes in raw files."]
    if wrong:
        raise SurveyError(*wrong)
    return results


def _corrected(table: pd.DataFrame, own: clock.Clock) -> pd.DataFrame:
    return table.assign(time_utc=clock.correct(table["time_utc"].to_numpy(), own))


def _delimited_navigation(source, path: Path) -> tuple[pd.DataFrame, pd.DataFrame, dict]:
    """Read positions, and headings where they stand beside them, from delimited text."""
    from steps.formats.delimited import read_delimited

    columns = {name: column for name, column in source.columns.model_dump().items() if column}
    table, counts = read_delimited(path, source, columns)
    table["time_utc"] = clock.correct(table.pop("time").to_numpy(), source.clock)
    gyro = pd.DataFrame({"time_utc": table["time_utc"][:0], "heading_deg": np.zeros(0)})
    if "heading_deg" in table:
        gyro = table.dropna(subset=["heading_deg"])[["time_utc", "heading_deg", "source_row"]]
        odd = gyro[(gyro["heading_deg"] < 0) | (gyro["heading_deg"] > 360)]
        if len(odd):
            raise SurveyError(
                *(
                    mistake(
                        f"{path} row {row}, {source.columns.heading_deg}",
                        "must be a heading of 0 to 360 degrees",
                        value,
                    )
                    for row, value in zip(odd["source_row"][:MOST_LISTED], odd["heading_deg"], strict=False)
                )
            )
        gyro = gyro[["time_utc", "heading_deg"]].assign(heading_deg=gyro["heading_deg"] % 360.0)
    placed = table.dropna(subset=["latitude_deg", "longitude_deg"])
    return placed, gyro, counts | {"without position": len(table) - len(placed)}


def _entry(path: Path, counts: dict, time: pd.Series) -> dict:
    """Say what a file held."""
    entry = {"file": str(path), "sha256": checksum(path), "counts": counts}
    if len(time):
        entry |= {"start_utc": _text(time.min(), "ms"), "end_utc": _text(time.max(), "ms")}
    return entry


def _text(instant, unit: str = "s") -> str:
    return str(np.datetime64(instant, "ns").astype(f"datetime64[{unit}]"))


# -- the stage -------------------------------------------------------------------------------------------------------


def main(job: stage.Job) -> None:
    """Read every raw file, put readings, fixes and headings in order, and balance the books."""
    time = _ingest_readings(job)  # written and let go of before the navigation is read
    _ingest_navigation(job, time)
    kept, records = job.record["ledger"]["kept"], job.record["ledger"]["records"]
    job.done(
        f"{kept} readings of {records} records in {len(job.record['files'])} files ({records - kept} dropped), "
        f"{job.record['fixes']} fixes, {job.record['headings']} headings"
    )


def _ingest_readings(job: stage.Job) -> np.ndarray:
    """Read, join, account for and write the readings; return their times, in order."""
    parts, files = read_readings(job.settings.readings, job.inputs["readings"])
    names = [file["file"] for file in files]
    joined = pd.concat(parts, ignore_index=True)
    del parts
    check_readings(joined, names)
    if job.edits:
        joined = shift_clocks(joined, job.edits, names)
    readings, left_out = join_readings([joined])
    ledger = _ledger(files, readings, left_out)
    check_stamps(left_out, len(readings))
    job.write("readings", readings)
    shared = overlaps(files)
    job.record |= {
        "ledger": ledger,
        "backwards": len(backward_steps(joined)) + sum(file["counts"].get("backwards", 0) for file in files),
        "overlaps": shared,
        "files": files,
    }
    for sentence in _notes_on_readings(joined, readings, left_out, names, shared):
        job.note(sentence)
    return readings["time_utc"].to_numpy()


def _ingest_navigation(job: stage.Job, time: np.ndarray) -> None:
    """Read, join, account for and write fixes and headings; hold them against the times of the readings."""
    fixes, headings, files = read_navigation(job.settings.navigation, job.inputs)
    gyro, heading_counts = join_navigation(headings, ["heading_deg"])
    heading_ledger = _balanced("headings", sum(map(len, headings)), len(gyro), heading_counts)
    job.write("gyro", gyro)
    headings, gyro = [], len(gyro)
    navigation, fix_counts = join_navigation(fixes, POSITION)
    fix_ledger = _balanced("fixes", sum(map(len, fixes)), len(navigation), fix_counts)
    check_overlap(time, navigation["time_utc"].to_numpy())
    job.write("navigation", navigation)
    job.record |= {
        "navigation_files": files,
        "fixes": len(navigation),
        "fix_ledger": fix_ledger,
        "headings": gyro,
        "heading_ledger": heading_ledger,
    }
    for sentence in _notes_on_navigation(time, navigation["time_utc"].to_numpy(), gyro, fix_ledger):
        job.note(sentence)
    for sentence in _notes_of_files(files):
        job.note(sentence)


def _ledger(files: list[dict], readings: pd.DataFrame, left_out: pd.DataFrame) -> dict[str, int]:
    """Account for every record of the raw files."""
    names = list(dict.fromkeys(name for file in files for name in file["ledger"]))
    total = {name: sum(file["ledger"].get(name, 0) for file in files) for name in names}
    dropped = {name: number for name, number in total.items() if name not in ("records", "joined")}
    contradictory = int(left_out["contradicts"].sum())
    dropped |= {"repeated": len(left_out) - contradictory, "contradictory": contradictory}
    return _balanced("readings", total["records"], len(readings), dropped)


def _balanced(what: str, records: int, kept: int, dropped: dict[str, int]) -> dict[str, int]:
    """Return the books; raise where they do not balance, which is a fault of ours."""
    if records != kept + sum(dropped.values()):
        raise RuntimeError(f"the books of the {what} do not balance: {records} records, {kept} kept, {dropped}")
    return {"records": records, "kept": kept, **dropped}


def check_readings(joined: pd.DataFrame, files: list[str]) -> None:
    """Refuse records without a reading, and readings that are in another unit or no total field.

    Raises
    ------
    SurveyError

    """
    value = joined["total_field_nt"].to_numpy()
    value = np.abs(value[np.isfinite(value)])
    if len(value) == 0:
        where = files[0] if len(files) == 1 else f"{files[0]} and {len(files) - 1} more files"
        raise SurveyError(mistake(where, "must hold readings of the total field", "no value in any row"))
    if np.count_nonzero((value > EARTH_NT[0]) & (value < EARTH_NT[1])) < 0.01 * len(value):
        middle = float(np.median(value))
        unit = next((unit for unit, factor in UNITS.items() if EARTH_NT[0] < middle * factor < EARTH_NT[1]), None)
        remedy = f"Is it in {unit}?" if unit else "Is it the right column?"
        must = f"must be the Earth's total field in nT, {EARTH_NT[0]:.0f} to {EARTH_NT[1]:.0f}"
        raise SurveyError(mistake("ingest.readings.columns.total_field_nt", must, f"{middle:g} in the middle", remedy))


def check_stamps(left_out: pd.DataFrame, kept: int) -> None:
    """Refuse stamps so coarse that most readings have the time of another one of the same file.

    Raises
    ------
    SurveyError

    """
    same_file = left_out["source_file"] == left_out["other_file"]
    lost = int((same_file & left_out["contradicts"]).sum())
    if lost > kept:
        got = f"{lost} readings with the time of another and another value, and {kept} others"
        remedy = "Name the column with the fractions of a second too."
        raise SurveyError(mistake("ingest.readings.time", "must tell readings apart", got, remedy))


def check_overlap(time: np.ndarray, fixes: np.ndarray) -> None:
    """Refuse navigation that is not of the time of the readings; both in order of time.

    Raises
    ------
    SurveyError

    """
    if len(fixes) == 0:
        raise SurveyError(mistake("ingest.navigation", "must hold positions", "no usable fix in any file"))

    def meet(shift) -> bool:
        first, last = np.searchsorted(time, [fixes[0] + shift, fixes[-1] + shift + np.timedelta64(1, "ns")])
        return bool(last > first)

    if not meet(np.timedelta64(0, "ns")):
        got = f"readings from {_text(time[0])} to {_text(time[-1])}, fixes from {_text(fixes[0])} to {_text(fixes[-1])}"
        remedy = "Check the dates, the clocks and the time layouts."
        weeks = [k for k in (1, 2, -1) if meet(k * ROLLOVER)]
        if weeks:
            remedy = (
                f"They are {1024 * abs(weeks[0])} weeks apart, as after a week rollover of the GNSS receiver: set "
                f"`stamp: logger`, or a `clock` with offset_s: {weeks[0] * ROLLOVER // np.timedelta64(1, 's')}."
            )
        raise SurveyError(mistake("ingest.navigation", "must be of the time of the readings", got, remedy))


def _notes_on_readings(joined, readings, left_out, files, shared) -> list[str]:
    """Say what deserves a look in the readings; `joined` are the rows as they stand in their files."""
    notes = []
    if shared:
        one, two = shared[0]["files"]
        span = f"{shared[0]['start_utc'][:19]} to {shared[0]['end_utc'][:19]}"
        notes.append(f"{len(shared)} raw files overlap an earlier one in time, first {two} with {one}, {span}.")
    for contradicts, meaning in (
        (False, "readings stand twice: taken once"),
        (True, "readings contradict another one of the same time: the first stands"),
    ):
        own = left_out[left_out["contradicts"] == contradicts]
        if len(own):
            first = own.iloc[0]
            places = [f"{files[int(first[f'{o}_file'])]} row {int(first[f'{o}_row'])}" for o in ("source", "other")]
            notes.append(f"{len(own)} {meaning}; first {places[0]} and {places[1]} ({_text(first['time_utc'], 'ms')}).")
    back = backward_steps(joined)
    if len(back):
        places = []
        for k in back[:MOST_LISTED].tolist():
            row, before = joined.iloc[k], joined.iloc[k - 1]
            times = f"{_text(before['time_utc'], 'ms')} to {_text(row['time_utc'], 'ms')}"
            places.append(f"{files[int(row['source_file'])]} row {int(row['source_row'])} ({times})")
        more = f" and {len(back) - MOST_LISTED} more" if len(back) > MOST_LISTED else ""
        notes.append(f"the logger's clock goes back in {'; '.join(places)}{more}: readings put in order.")
    return notes + _silences("readings", readings["time_utc"].to_numpy())


def _silences(what: str, time: np.ndarray) -> list[str]:
    """Say where a record is silent for over an hour."""
    step = np.diff(time)
    silent = np.flatnonzero(step > HOUR)
    if len(silent) == 0:
        return []
    longest = silent[np.argmax(step[silent])]
    hours = step[longest] / HOUR
    return [
        f"{len(silent)} silences of over an hour in the {what}; longest {hours:.1f} h, after {_text(time[longest])}."
    ]


def _notes_on_navigation(time, fixes, headings: int, ledger) -> list[str]:
    """Say what deserves a look in navigation and gyro, by the times of readings and fixes."""
    notes = []
    outside = np.count_nonzero((time < fixes[0]) | (time > fixes[-1]))
    if outside:
        notes.append(f"{outside} readings lie before the first or after the last fix.")
    if ledger["contradictory"]:
        notes.append(f"{ledger['contradictory']} fixes contradict another one of the same time: the first stands.")
    if ledger["second_choice"]:
        notes.append(
            f"{ledger['second_choice']} fixes of later sources are not used: an earlier source tells that time."
        )
    first, last = np.searchsorted(fixes, [time[0], time[-1]])
    notes += _silences("navigation", fixes[max(first - 1, 0) : last + 1])
    if headings == 0:
        notes.append("there is no gyro heading: course over ground will stand for it.")
    return notes


def _notes_of_files(files: list[dict]) -> list[str]:
    """Gather what readers noted; what was noted of several files is said once."""
    found: dict[str, list[str]] = {}
    for file in files:
        for note in file["notes"]:
            found.setdefault(note, []).append(file["file"])
    return [
        f"{names[0]}{f' and {len(names) - 1} more files' if len(names) > 1 else ''}: {note}"
        for note, names in list(found.items())[: 2 * MOST_LISTED]
    ]


if __name__ == "__main__":
    stage.run(main)
