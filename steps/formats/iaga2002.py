"""Read IAGA-2002, the exchange format of magnetic observatories (adopted by IAGA in 2001).

Records are 70 characters by columns, so that abutting values are read right: date 1-10, time 12-23, day of year 25-27,
then four values of nine characters, each after a blank, from column 31; a record whose points stand elsewhere is split
at its blanks. Which element stands where is taken from the data header, not from a list. 99999 means missing,
88888 not observed. Times are UTC (observatory practice).
"""

import gzip
import io
import re
import zlib
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

from steps.errors import SurveyError, mistake

LARGEST_BYTES = 1_000_000_000
MISSING = 88888.0  # from here on a value is a code
VALUE_COLUMNS = (30, 40, 50, 60)


@dataclass
class Observatory:
    """What the header of a file says; None where it says nothing.

    Attributes
    ----------
    name, code : str
    latitude_deg, longitude_deg : float or None
        Geodetic, longitude in [-180, 180).
    elevation_m : float or None
        Above mean sea level.
    reported : str
        Letters of the elements, in the order of the columns.
    interval : str
        The header's text on what a value stands for.
    centre_shift_s : float
        Seconds to add to a record's time to get the middle of what it averages.
    counts : dict of str to int
        ``rows`` of the file, ``records``, ``missing`` (no total field), ``repeated``, ``backwards``.

    """

    name: str = ""
    code: str = ""
    latitude_deg: float | None = None
    longitude_deg: float | None = None
    elevation_m: float | None = None
    reported: str = ""
    interval: str = ""
    centre_shift_s: float = 0.0
    counts: dict[str, int] = field(default_factory=dict)


def read_iaga2002(path: str | Path) -> tuple[Observatory, pd.DataFrame]:
    """Read one file.

    Parameters
    ----------
    path : str or pathlib.Path
        Text, or gzipped text.

    Returns
    -------
    observatory : Observatory
    table : pandas.DataFrame
        time_utc (datetime64[ns], middle of the sample), total_field_nt (NaN where missing), source_row; in order of
        time, each instant once (the first stands).

    Notes
    -----
    The total field is F where it is reported, else it is computed from X, Y, Z or from H, Z (with E, where that is
    reported instead of D: E is at right angles to H). G, the difference between scalar and vector total field, has no
    stated sign convention and is not used: the vector total field stands alone then.

    Raises
    ------
    SurveyError
        If the file is no IAGA-2002, or a record cannot be read: file, row, what is wrong.

    """
    where = str(path)
    lines = _load(Path(path), where)
    header, first, letters = _header(lines, where)
    rows = np.arange(first + 1, len(lines) + 1)
    body = lines[first:]
    used = np.array([bool(line.strip()) for line in body], bool)
    body = [line for line, use in zip(body, used, strict=True) if use]
    rows = rows[used]
    if not body:
        raise SurveyError(mistake(where, "must hold at least one record", "none"))
    matrix = _matrix(body, rows, where)
    time = _times(matrix, body, rows, where)
    values = dict(zip(letters, _values(matrix, body, rows, where), strict=True))
    field_nt = _total_field(values, where)
    header.centre_shift_s = centre_shift(header.interval)
    time = time + np.timedelta64(round(header.centre_shift_s * 1e9), "ns")
    backwards = int(np.count_nonzero(time[1:] < time[:-1]))
    table = pd.DataFrame({"time_utc": time, "total_field_nt": field_nt, "source_row": rows})
    table = table.sort_values("time_utc", kind="stable")
    repeated = table["time_utc"].duplicated()
    table = table[~repeated].reset_index(drop=True)
    header.counts = {
        "rows": len(lines),
        "records": len(body),
        "missing": int(table["total_field_nt"].isna().sum()),
        "repeated": int(repeated.sum()),
        "backwards": backwards,
    }
    return header, table


def centre_shift(interval: str) -> float:
    """Return how many seconds after a record's time the middle of its sample lies.

    Parameters
    ----------
    interval : str
        Data interval type: ``"1-minute (00:30-01:29)"`` is centred on the minute, ``"1-minute (00:00-00:59)"`` half a
        minute later; a text without a span is taken as centred on the record's time.

    Returns
    -------
    float

    """
    found = re.search(r"\((\d\d):(\d\d)\s*-\s*(\d\d):(\d\d)\)", interval)
    if not found:
        return 0.0
    a, b, c, d = (int(part) for part in found.groups())
    start, end = 60 * a + b, 60 * c + d
    # mm:ss of the first and last second averaged; the record's own minute is 01:00 when the span starts in minute 00
    # and ends in minute 01, as in (00:30-01:29), else the minute in which the span starts.
    own = 60.0 if a == 0 and c >= 1 else 60.0 * a
    # One second averages are named by their seconds, so that 00:00-00:59 holds 60 of them.
    middle = (start + end + 1) / 2
    return middle - own if abs(middle - own) > 1.0 else 0.0


def _load(path: Path, where: str) -> list[str]:
    data = path.read_bytes()
    if data[:2] == b"\x1f\x8b":
        try:
            with gzip.open(io.BytesIO(data)) as packed:
                data = packed.read(LARGEST_BYTES + 1)
        except (OSError, EOFError, zlib.error) as error:
            raise SurveyError(mistake(where, "must be a whole gzip file", error, "Copy it again.")) from error
    if len(data) > LARGEST_BYTES:
        raise SurveyError(mistake(where, "must be under 1 GB", "a larger file"))
    if not data.strip():
        raise SurveyError(mistake(where, "must be IAGA-2002", "an empty file"))
    if b"\0" in data:
        raise SurveyError(mistake(where, "must be IAGA-2002 text", "a binary file"))
    return data.removeprefix(b"\xef\xbb\xbf").decode("utf-8", errors="replace").splitlines()


def _header(lines: list[str], where: str) -> tuple[Observatory, int, str]:
    """Read the header; return it, the index of the first data record and the letters of the four columns."""
    found: dict[str, str] = {}
    data_header = None
    for number, line in enumerate(lines):
        if line.startswith("DATE"):
            data_header = number
            break
        if line[1:2] != "#":
            found[line[1:24].strip().lower()] = line[24:69].strip().rstrip("|").strip()
    if data_header is None or found.get("format", "").upper().replace(" ", "") not in ("IAGA-2002", "IAGA2002"):
        got = lines[0].strip() or "a blank row"
        raise SurveyError(
            mistake(where, "must be IAGA-2002: a Format record first, a DATE record before the data", got)
        )
    names = lines[data_header].replace("|", " ").split()[3:]
    letters = "".join(name[-1].upper() for name in names)
    if len(letters) != 4:
        raise SurveyError(mistake(f"{where} row {data_header + 1}", "must name four elements", " ".join(names)))
    header = Observatory(
        name=found.get("station name", ""),
        code=found.get("iaga code", ""),
        latitude_deg=_number(found, "geodetic latitude", where, 90.0),
        longitude_deg=_number(found, "geodetic longitude", where, 360.0),
        elevation_m=_number(found, "elevation", where, 9000.0),
        reported=letters,
        interval=found.get("data interval type", ""),
    )
    if header.longitude_deg is not None:
        header.longitude_deg = (header.longitude_deg + 180.0) % 360.0 - 180.0
    return header, data_header + 1, letters


def _number(found: dict[str, str], label: str, where: str, limit: float) -> float | None:
    text = found.get(label, "")
    if not text:
        return None
    try:
        value = float(text)
    except ValueError:
        raise SurveyError(mistake(f"{where}, {label}", "must be a number", text)) from None
    if not abs(value) <= limit:
        if abs(value) >= MISSING:
            return None
        raise SurveyError(mistake(f"{where}, {label}", f"must be between -{limit:g} and {limit:g}", text))
    return value


def _matrix(body: list[str], rows: np.ndarray, where: str) -> np.ndarray:
    """Lay the records out as characters, shape (n, 70)."""
    short = [k for k, line in enumerate(body) if len(line.rstrip()) < 40]
    if short:
        last = len(short) == 1 and short[0] == len(body) - 1
        remedy = "The file is cut off: copy it again, or remove the row." if last else "Mend or remove the row."
        place = f"{where} row {rows[short[0]]}"
        raise SurveyError(
            mistake(place, "must be a record of 70 characters", body[short[0]].rstrip() or "blanks", remedy)
        )
    text = "".join(line[:70].ljust(70) for line in body).encode("ascii", errors="replace")
    return np.frombuffer(text, np.uint8).reshape(len(body), 70)


def _digits(matrix, start, stop):
    """Read fixed digits; returns values and where they are digits throughout."""
    digits = matrix[:, start:stop].astype(np.int64) - 48
    good = ((digits >= 0) & (digits <= 9)).all(axis=1)
    value = np.zeros(len(matrix), np.int64)
    for k in range(stop - start):
        value = value * 10 + digits[:, k]
    return np.where(good, value, 0), good


def _times(matrix, body, rows, where) -> np.ndarray:
    """Read date and time; hour 24 is the next day's midnight."""
    parts, good = [], np.ones(len(matrix), bool)
    for start, stop in ((0, 4), (5, 7), (8, 10), (11, 13), (14, 16), (17, 19), (20, 23)):
        value, fine = _digits(matrix, start, stop)
        parts.append(value)
        good &= fine
    year, month, day, hour, minute, second, milli = parts
    good &= (month >= 1) & (month <= 12) & (day >= 1) & (minute < 60) & (second < 60)
    good &= (hour < 24) | ((hour == 24) & (minute == 0) & (second == 0) & (milli == 0))
    first = (np.where(good, year, 1970) - 1970).astype("datetime64[Y]").astype("datetime64[M]")
    first = first + np.where(good, month - 1, 0).astype("timedelta64[M]")
    date = first.astype("datetime64[D]") + np.where(good, day - 1, 0).astype("timedelta64[D]")
    good &= date.astype("datetime64[M]") == first
    if not good.all():
        k = int(np.flatnonzero(~good)[0])
        must = "must start with a date and time as 2024-05-01 00:00:00.000"
        raise SurveyError(mistake(f"{where} row {rows[k]}", must, body[k][:24]))
    ns = (((hour * 60 + minute) * 60 + second) * 1000 + milli) * 1_000_000
    return date.astype("datetime64[ns]") + ns.astype("timedelta64[ns]")


def _values(matrix, body, rows, where) -> np.ndarray:
    """Read the four elements, shape (4, n); NaN where one is missing or not observed."""
    value = np.full((4, len(matrix)), np.nan)
    # F9.2 has its point in the seventh of ten columns; real files hold records that are a column off.
    aligned = (matrix[:, [column + 7 for column in VALUE_COLUMNS]] == ord(".")).all(axis=1)
    for k, column in enumerate(VALUE_COLUMNS):
        cells = np.ascontiguousarray(matrix[aligned, column : column + 10]).view("S10").ravel()
        try:
            value[k, aligned] = np.char.strip(cells).astype(float)
        except ValueError:
            for row, cell in zip(rows[aligned], cells, strict=True):
                _float(cell.decode(), f"{where} row {row}, columns {column + 1} to {column + 10}")
            raise
    for row in np.flatnonzero(~aligned):
        words = body[row][VALUE_COLUMNS[0] :].split()
        if len(words) != 4:
            place = f"{where} row {rows[row]}"
            raise SurveyError(mistake(place, "must hold four values from column 31", body[row][30:].strip()))
        value[:, row] = [_float(word, f"{where} row {rows[row]}") for word in words]
    return np.where(np.abs(value) >= MISSING, np.nan, value)


def _float(text: str, where: str) -> float:
    try:
        value = float(text)
    except ValueError:
        value = np.nan
    if not np.isfinite(value):
        raise SurveyError(mistake(where, "must be a number", text.strip() or "blanks"))
    return value


def _total_field(values: dict[str, np.ndarray], where: str) -> np.ndarray:
    """Return the total field from what is reported."""
    computed = None
    if {"X", "Y", "Z"} <= set(values):
        computed = np.sqrt(values["X"] ** 2 + values["Y"] ** 2 + values["Z"] ** 2)
    elif {"H", "E", "Z"} <= set(values):
        computed = np.sqrt(values["H"] ** 2 + values["E"] ** 2 + values["Z"] ** 2)
    elif {"H", "Z"} <= set(values):
        computed = np.hypot(values["H"], values["Z"])
    if "F" in values:
        # A scalar record with holes is not filled from the vector one: the two have different baselines.
        return values["F"] if computed is None or np.isfinite(values["F"]).any() else computed
    if computed is None:
        reported = "".join(values)
        raise SurveyError(mistake(where, "must report F, or X Y Z, or H and Z", reported))
    return computed
