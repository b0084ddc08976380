"""Read the small tables that people write by hand: line log, cable log, edits. CSV with a heading row.

Rows that start with ``#`` and blank rows are skipped; cells may be quoted, and blanks around them do not count. All
mistakes of a file are told together, by row of the file.
"""

import csv
import difflib
import re
from pathlib import Path

import numpy as np
import pandas as pd

from steps.clock import YEARS
from steps.errors import SurveyError, mistake
from steps.formats.packed import read_bytes

LARGEST_BYTES = 20_000_000
MOST_MISTAKES = 10
_TIME = re.compile(
    r"(\d{4}-\d{2}-\d{2})(?:[T ](\d{2}):(\d{2})(?::(\d{2})(?:[.,](\d{1,9}))?)?)?\s*(Z|UTC|[+-]\d{2}:?\d{2})?",
    re.IGNORECASE | re.ASCII,
)


def parse_time(text: str) -> np.datetime64:
    """Read an ISO 8601 date or date and time; UTC unless it names an offset.

    Parameters
    ----------
    text : str
        ``2024-05-01``, ``2024-05-01T03:14:05.5``, ``2024-05-01 03:14Z``, ``2024-05-01T05:14:05+02:00``.

    Returns
    -------
    numpy.datetime64
        UTC, nanoseconds. 24:00:00 is the next day's 00:00:00; a leap second 23:59:60 is that instant too, since a count
        of POSIX seconds has no place for it.

    Raises
    ------
    ValueError
        If the text is no such time.

    """
    found = _TIME.fullmatch(text.strip())
    if not found:
        raise ValueError("must be a time such as 2024-05-01T03:14:05 (UTC)")
    day, hour, minute, second, fraction, zone = found.groups()
    hour, minute, second = int(hour or 0), int(minute or 0), int(second or 0)
    leap = (hour, minute, second) == (23, 59, 60)
    late = hour == 24 and not (minute or second or int(fraction or 0))
    if not leap and not late and (second > 59 or minute > 59 or hour > 23):
        raise ValueError("must be a time of a day, 00:00:00 to 24:00:00")
    if not YEARS[0] <= int(day[:4]) < YEARS[1]:
        raise ValueError(f"must be a year from {YEARS[0]} to {YEARS[1] - 1}")
    try:
        time = np.datetime64(day, "ns")
    except ValueError:
        raise ValueError("must be a day of the calendar") from None
    time += np.timedelta64(((hour * 60 + minute) * 60 + second) * 1_000_000_000, "ns")
    if fraction and not leap:
        time += np.timedelta64(int(fraction.ljust(9, "0")), "ns")
    if zone and zone[0] in "+-":
        hours, minutes = int(zone[1:3]), int(zone[-2:])
        if hours > 14 or minutes > 59:
            raise ValueError("must be an offset from UTC of at most 14:00 hours")
        ahead = np.timedelta64(hours * 60 + minutes, "m")
        time = time - ahead if zone[0] == "+" else time + ahead
    return time


def parse_number(text: str) -> float:
    """Read a finite decimal number with a point; raise ValueError with what must be."""
    try:
        value = float(text)
    except ValueError:
        raise ValueError("must be a number") from None
    if not np.isfinite(value) or "_" in text:
        raise ValueError("must be a finite number")
    return value


_PARSERS = {"text": str, "number": parse_number, "time": parse_time}


def read_table(
    path: str | Path, columns: dict[str, str], optional: dict[str, str] | None = None, name: str | None = None
) -> pd.DataFrame:
    """Read a table written by hand.

    Parameters
    ----------
    path : str or pathlib.Path
        The file, CSV or gzipped CSV.
    columns, optional : dict of str to str
        Names of the columns that must be there, and of those that may be, with their kind: text, number or time. Cells
        of required columns may not be empty unless they are text.
    name : str, optional
        What to call the file in messages; its path by default.

    Returns
    -------
    pandas.DataFrame
        The columns named, in that order, and ``row``, the row in the file counting from 1. Text is str with None for an
        empty cell, numbers are float64 with NaN, times datetime64[ns] (UTC) with NaT.

    Raises
    ------
    SurveyError
        With one sentence for each mistake, up to ten.

    """
    name = name or str(path)
    wanted = {**columns, **(optional or {})}
    rows = _rows(Path(path), name)
    if not rows:
        raise SurveyError(mistake(name, f"must start with a heading row: {', '.join(columns)}", "an empty file"))
    number, heading = rows[0]
    _check_heading(heading, columns, wanted, f"{name} row {number}")
    wrong: list[str] = []
    cells: dict[str, list] = {column: [] for column in wanted}
    numbers = []
    for row, values in rows[1:]:
        if len(values) > len(heading) and any(values[len(heading) :]):
            wrong.append(mistake(f"{name} row {row}", f"must have {len(heading)} cells", len(values)))
            continue
        values = [*values, *[""] * (len(heading) - len(values))]
        given = dict(zip(heading, values, strict=False))
        numbers.append(row)
        for column, kind in wanted.items():
            cells[column].append(
                _cell(given.get(column, ""), kind, column in columns, f"{name} row {row}, {column}", wrong)
            )
    _tell(wrong, name)
    table = {}
    for column, kind in wanted.items():
        dtype = {"text": object, "number": np.float64, "time": "datetime64[ns]"}[kind]
        table[column] = pd.Series(np.array(cells[column], dtype=dtype), dtype=dtype if kind != "text" else object)
    return pd.DataFrame(table).assign(row=np.array(numbers, np.int64))


def _rows(path: Path, name: str) -> list[tuple[int, list[str]]]:
    """Split a file into rows of stripped cells, without comments and blank rows."""
    data = read_bytes(path, name, LARGEST_BYTES)
    if b"\0" in data:
        raise SurveyError(mistake(name, "must be text", "a binary file", "Save it as CSV, UTF-8."))
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = data[: error.start].count(b"\n") + 1
        raise SurveyError(
            mistake(
                f"{name} row {row}", "must be UTF-8 text", f"byte {data[error.start]:#04x}", "Save it as CSV, UTF-8."
            )
        ) from error
    rows = []
    for number, line in enumerate(text.replace("\r\n", "\n").replace("\r", "\n").split("\n"), start=1):
        if not line.strip() or line.lstrip().startswith("#"):
            continue
        try:
            (cells,) = csv.reader([line], skipinitialspace=True, strict=True)
        except (csv.Error, ValueError) as error:
            raise SurveyError(
                mistake(f"{name} row {number}", "must be one row of CSV, with every quote closed", line)
            ) from error
        cells = [cell.strip() for cell in cells]
        if any(cells):
            rows.append((number, cells))
    return rows


def _check_heading(heading: list[str], columns: dict, wanted: dict, where: str) -> None:
    """Refuse missing, unknown and repeated columns, naming the nearest known one."""
    wrong = []
    unknown = [cell for cell in heading if cell and cell not in wanted]
    for column in columns:
        if column not in heading:
            near = nearest(column, unknown)
            remedy = f"Rename {near}." if near else "Is the delimiter a comma?" if len(heading) == 1 else ""
            wrong.append(mistake(where, f"must have a column {column}", ", ".join(heading), remedy))
    for cell in unknown:
        near = nearest(cell, [*wanted])
        remedy = f"Did you mean {near}?" if near else f"Known here: {', '.join(wanted)}."
        wrong.append(mistake(where, "must have only known columns", cell, remedy))
    wrong.extend(
        mistake(where, "must name each column once", cell)
        for cell in dict.fromkeys(heading)
        if cell and heading.count(cell) > 1
    )
    _tell(wrong, where)


def nearest(name: str, known: list[str]) -> str | None:
    """Return the known name that is most like `name`, whatever the case of its letters; None if none is."""
    lower = {each.lower(): each for each in reversed(known)}
    near = difflib.get_close_matches(name.lower(), lower, n=1)
    return lower[near[0]] if near else None


def _tell(wrong: list[str], name: str) -> None:
    """Raise the sentences, of many the first ones; do nothing where there are none."""
    if len(wrong) > MOST_MISTAKES:
        wrong = [*wrong[:MOST_MISTAKES], f"{name}: and {len(wrong) - MOST_MISTAKES} more."]
    if wrong:
        raise SurveyError(*wrong)


def _cell(text: str, kind: str, required: bool, where: str, wrong: list[str]) -> object:
    """Read one cell; a mistake is added to `wrong`."""
    if text == "":
        if required and kind != "text":
            wrong.append(mistake(where, f"must be a {kind}", "an empty cell"))
        return {"text": None, "number": np.nan, "time": np.datetime64("NaT")}[kind]
    try:
        return _PARSERS[kind](text)
    except ValueError as error:
        wrong.append(mistake(where, str(error), text))
        return {"text": None, "number": np.nan, "time": np.datetime64("NaT")}[kind]
