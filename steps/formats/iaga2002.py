"""Read IAGA-2002, the exchange format of magnetic observatories (adopted by IAGA in 2001, last revised in 2015).

Records are 70 characters by columns, so that abutting values are read right: date 1-10, time 12-23, day of year 25-27,
then four values (1X, F9.2) from column 31. Only a record that does not keep to the columns, as real files have, is
split at its blanks. Which element stands where is taken from the file, not from a list. 99999 means missing, 88888 not
observed. D and I are in minutes of arc, all else in nT. Times are UTC (observatory practice).
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
LARGEST_RATIO = 200  # text of records does not pack better than this
LONGEST_HEADER = 1 << 20  # bytes
MISSING = 88888.0  # from here on a value is a code
WIDTH = 70
VALUE_COLUMNS = (30, 40, 50, 60)
VALUE_WIDTH = 10
ARC_MINUTE = np.pi / (180 * 60)
LABELS = (
    *("format", "station name", "iaga code", "geodetic latitude", "geodetic longitude", "elevation", "reported"),
    "data interval type",
)


@dataclass
class Observatory:
    """What a file says of itself; None where it says nothing.

    Attributes
    ----------
    name, code : str
    latitude_deg, longitude_deg : float or None
        Geodetic, longitude in [-180, 180).
    elevation_m : float or None
        Above mean sea level.
    elements : tuple of str
        What the four columns hold, in their order.
    total_field_from : str
        The elements that the total field is taken from: ``"F"``, or ``"X Y Z"`` and the like.
    interval : str
        The header's text on what a value stands for.
    centre_shift_s : float
        Seconds added to a record's time to get the middle of what it averages.
    counts : dict of str to int
        ``rows`` of the file = ``header`` + ``blank`` + ``records``. Of the records: ``missing`` (no total field),
        ``repeated`` (an earlier one has the same time and value: left out of the table), ``contradictory`` (the same
        with another value: left out), ``backwards`` (earlier than the record before: put in order).

    """

    name: str = ""
    code: str = ""
    latitude_deg: float | None = None
    longitude_deg: float | None = None
    elevation_m: float | None = None
    elements: tuple[str, ...] = ()
    total_field_from: str = ""
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
        time, each instant once (the first in the file stands).

    Raises
    ------
    SurveyError
        If the file is no IAGA-2002, or a record cannot be read: file, row, what is wrong.

    Notes
    -----
    The total field is F (or S, the scalar instrument's own) where either is reported and observed at all; holes in it
    are not filled from the components, whose baseline is another. Else it is computed from X Y Z, from H E Z (E at
    right angles to H), from H Z, or from H I. G, the difference between the vector's and the scalar instrument's total
    field, is not used, since its sign is not written in the format: the total field is then the vector's alone.

    """
    where = str(path)
    data = _load(Path(path), where)
    header, head_rows, start = _header(data, where)
    matrix, odd, rows, counts = _records(data[start:], head_rows, where)
    time = _times(matrix, rows, where)
    values = dict(zip(header.elements, _values(matrix, odd, rows, where), strict=True))
    total, header.total_field_from = _total_field(values, where)
    header.centre_shift_s = centre_shift(header.interval)
    time = time + np.timedelta64(round(header.centre_shift_s * 1e9), "ns")
    header.counts = counts | {"missing": int(np.isnan(total).sum()), "repeated": 0, "contradictory": 0, "backwards": 0}
    if (np.diff(time) <= np.timedelta64(0, "ns")).any():
        header.counts["backwards"] = int(np.count_nonzero(time[1:] < time[:-1]))
        order = np.argsort(time, kind="stable")
        time, total, rows = time[order], total[order], rows[order]
        again = np.concatenate([[False], time[1:] == time[:-1]])
        first = np.maximum.accumulate(np.where(again, 0, np.arange(len(time))))
        equal = (total == total[first]) | (np.isnan(total) & np.isnan(total[first]))
        header.counts["repeated"] = int(np.count_nonzero(again & equal))
        header.counts["contradictory"] = int(np.count_nonzero(again & ~equal))
        time, total, rows = time[~again], total[~again], rows[~again]
    return header, pd.DataFrame({"time_utc": time, "total_field_nt": total, "source_row": rows})


def centre_shift(interval: str) -> float:
    """Return how many seconds after a record's time the middle of its sample lies.

    Parameters
    ----------
    interval : str
        Data interval type. ``"1-minute (00:30-01:29)"`` is centred on the minute of the record, ``"(00:00-00:59)"``
        half a minute later, ``"1-hour (00-59)"`` half an hour later. A text without a span is taken as centred.

    Returns
    -------
    float

    """
    seconds = re.search(r"\((\d\d):(\d\d)\s*-\s*(\d\d):(\d\d)\)", interval)
    minutes = re.search(r"\((\d\d)\s*-\s*(\d\d)\)", interval)
    if seconds:
        a, b, c, d = (int(part) for part in seconds.groups())
        start, end, whole = 60 * a + b, 60 * c + d, 60
        end += 3600 * (end < start)
    elif minutes:
        start, end = (60 * int(part) for part in minutes.groups())
        end, whole = end + 59 + 3600 * (end < start), 3600
    else:
        return 0.0
    # The record's own minute (or hour) is that in which the span ends. The last second counts whole.
    middle = (start + end + 1) / 2 - whole * (end // whole)
    return middle if abs(middle) > 1.0 else 0.0  # (00:15-01:45) holds its centre twice


# -- the file's rows -------------------------------------------------------------------------------------------------


def _load(path: Path, where: str) -> bytes:
    """Return a file's bytes, unpacked, with line ends of one kind, the last row ended."""
    data = path.read_bytes()
    if data[:2] == b"\x1f\x8b":
        limit = min(LARGEST_BYTES, max(1_000_000, LARGEST_RATIO * len(data)))
        try:
            with gzip.open(io.BytesIO(data)) as packed:
                data = packed.read(limit + 1)
        except (OSError, EOFError, zlib.error) as error:
            raise SurveyError(mistake(where, "must be a whole gzip file", error, "Copy it again.")) from error
        if len(data) > limit:
            raise SurveyError(mistake(where, f"must unpack to under {limit} bytes", "more"))
    if len(data) > LARGEST_BYTES:
        raise SurveyError(mistake(where, "must be under 1 GB", "a larger file"))
    if not data.strip():
        raise SurveyError(mistake(where, "must be IAGA-2002", "an empty file"))
    if b"\0" in data:
        raise SurveyError(mistake(where, "must be IAGA-2002 text", "a binary file or UTF-16", "Save it as plain text."))
    data = data.removeprefix(b"\xef\xbb\xbf")
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    return data if data.endswith(b"\n") else data + b"\n"


def _header(data: bytes, where: str) -> tuple[Observatory, int, int]:
    """Read the header; return it, the number of its rows, and where the records begin."""
    text = data[:LONGEST_HEADER].decode("utf-8", errors="replace")
    lines = text.split("\n")
    last = next((k for k, line in enumerate(lines) if line.lstrip()[:4].upper() == "DATE"), None)
    found: dict[str, str] = {}
    for line in lines[:last]:
        plain = line.strip().rstrip("|").strip()
        for label in LABELS:
            # labels end at column 24, but real headers do not all keep to the columns
            if plain[: len(label)].lower() == label and plain[len(label) : len(label) + 1] in ("", " ", ":"):
                found.setdefault(label, plain[len(label) :].strip(" :"))
    is_iaga = found.get("format", "").upper().replace(" ", "").startswith(("IAGA-2002", "IAGA2002"))
    if last is None or not is_iaga:
        got = next(line.strip() for line in lines if line.strip())
        raise SurveyError(
            mistake(where, "must be IAGA-2002: a Format record first, a DATE record before the data", got)
        )
    header = Observatory(
        name=found.get("station name", ""),
        code=found.get("iaga code", ""),
        latitude_deg=_number(found, "geodetic latitude", where, 90.0),
        longitude_deg=_number(found, "geodetic longitude", where, 360.0),
        elevation_m=_number(found, "elevation", where, 9000.0),
        elements=_elements(lines[last], found.get("reported", ""), f"{where} row {last + 1}"),
        interval=found.get("data interval type", ""),
    )
    if header.longitude_deg is not None and not -180.0 <= header.longitude_deg < 180.0:
        header.longitude_deg = (header.longitude_deg + 180.0) % 360.0 - 180.0
    start = 0
    for _ in range(last + 1):
        start = data.index(b"\n", start) + 1
    return header, last + 1, start


def _elements(line: str, reported: str, where: str) -> tuple[str, ...]:
    """Return what the four columns hold: their names less the station's three letters, checked against Reported."""
    names = line.replace("|", " ").split()[3:]
    elements = tuple(name[3:].upper() if len(name) > 3 else name[-1].upper() for name in names)
    if len(elements) != 4:
        raise SurveyError(mistake(where, "must name DATE, TIME, DOY and four elements", " ".join(names) or "none"))
    told = reported.upper().replace(" ", "")
    if told.isalpha() and "".join(elements)[: len(told)] != told:
        got = f"{told} and {' '.join(names)}"
        raise SurveyError(mistake(where, "must name the elements that Reported tells, in that order", got))
    return elements


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


def _records(body: bytes, head_rows: int, where: str) -> tuple[np.ndarray, dict[int, str], np.ndarray, dict[str, int]]:
    """Lay the records out as characters, shape (n, 70); also those that are longer, as text, by their place."""
    letters = np.frombuffer(body, np.uint8)
    step = WIDTH + 1
    even = len(body) % step == 0 and bool((letters[WIDTH::step] == ord("\n")).all())
    if even and len(body):
        matrix = letters.reshape(-1, step)[:, :WIDTH]
        even = not (matrix == ord("\n")).any() and bool((matrix[:, 0] > ord(" ")).all())
    if even and len(body):
        n = len(matrix)
        rows = np.arange(head_rows + 1, head_rows + 1 + n)
        return matrix, {}, rows, {"rows": head_rows + n, "header": head_rows, "blank": 0, "records": n}
    lines = [line.rstrip() for line in body.decode("ascii", errors="replace").split("\n")[:-1]]
    kept = [(number, line) for number, line in enumerate(lines, start=head_rows + 1) if line]
    if not kept:
        raise SurveyError(mistake(where, "must hold at least one record", "none"))
    short = [(number, line) for number, line in kept if len(line) < VALUE_COLUMNS[1]]
    if short:
        number, line = short[0]
        cut = len(short) == 1 and number == kept[-1][0]
        remedy = "The file is cut off: copy it again, or remove the row." if cut else "Mend or remove the row."
        raise SurveyError(mistake(f"{where} row {number}", "must be a record of 70 characters", line, remedy))
    rows = np.array([number for number, _ in kept])
    odd = {k: line for k, (_, line) in enumerate(kept) if len(line) > WIDTH}
    text = "".join(line[:WIDTH].ljust(WIDTH) for _, line in kept).encode("ascii", errors="replace")
    counts = {"rows": head_rows + len(lines), "header": head_rows, "blank": len(lines) - len(kept)}
    return np.frombuffer(text, np.uint8).reshape(-1, WIDTH), odd, rows, counts | {"records": len(kept)}


def _text(row: np.ndarray) -> str:
    return row.tobytes().decode("ascii", errors="replace").rstrip()


# -- the records' fields ---------------------------------------------------------------------------------------------


def _digits(matrix: np.ndarray, start: int, stop: int) -> tuple[np.ndarray, np.ndarray]:
    """Read fixed digits; returns values, and where they are digits throughout."""
    digits = matrix[:, start:stop] - np.uint8(ord("0"))
    value = digits[:, 0].astype(np.int64)
    for k in range(1, stop - start):
        value = value * 10 + digits[:, k]
    return value, (digits <= 9).all(axis=1)


def _times(matrix: np.ndarray, rows: np.ndarray, where: str) -> np.ndarray:
    """Read date and time; hour 24 and the leap second are the next day's midnight; the day of year must agree."""
    parts, good = [], np.ones(len(matrix), bool)
    for start, stop in ((0, 4), (5, 7), (8, 10), (11, 13), (14, 16), (17, 19), (20, 23)):
        value, fine = _digits(matrix, start, stop)
        parts.append(value)
        good &= fine
    year, month, day, hour, minute, second, milli = parts
    for column, mark in ((4, "-"), (7, "-"), (13, ":"), (16, ":"), (19, ".")):
        good &= matrix[:, column] == ord(mark)
    midnight = (hour == 24) & (minute == 0) & (second == 0) & (milli == 0)
    leap = (hour == 23) & (minute == 59) & (second == 60)
    good &= (month >= 1) & (month <= 12) & (day >= 1) & (year >= 1700) & (year < 2262)
    good &= ((hour < 24) & (minute < 60) & (second < 60)) | midnight | leap
    first = (np.where(good, year, 1970) - 1970).astype("datetime64[Y]").astype("datetime64[M]")
    first = first + np.where(good, month - 1, 0).astype("timedelta64[M]")
    date = first.astype("datetime64[D]") + np.where(good, day - 1, 0).astype("timedelta64[D]")
    good &= date.astype("datetime64[M]") == first
    if not good.all():
        k = int(np.argmin(good))
        must = "must start with a date and time as 2024-05-01 00:00:00.000"
        raise SurveyError(mistake(f"{where} row {rows[k]}", must, _text(matrix[k])[:24]))
    told, fine = _digits(matrix, 24, 27)
    counted = (date - date.astype("datetime64[Y]")).astype(np.int64) + 1
    wrong = fine & (told != counted)
    if wrong.any() and not wrong.all():  # a producer whose every day of year is wrong means nothing by it
        k = int(np.argmax(wrong))
        place = f"{where} row {rows[k]}, DOY"
        raise SurveyError(mistake(place, f"must be {counted[k]:03d} for {date[k]}", f"{told[k]:03d}", "Mend either."))
    seconds = np.where(leap, 86_400_000, ((hour * 60 + minute) * 60 + second) * 1000 + milli)
    return date.astype("datetime64[ns]") + (seconds * 1_000_000).astype("timedelta64[ns]")


def _values(matrix: np.ndarray, odd: dict[int, str], rows: np.ndarray, where: str) -> np.ndarray:
    """Read the four elements, shape (4, n); NaN where one is missing or not observed."""
    value = np.zeros((4, len(matrix)))
    fixed = np.ones(len(matrix), bool)
    for k, column in enumerate(VALUE_COLUMNS):
        value[k], fine = _fixed(matrix[:, column : column + VALUE_WIDTH])
        fixed &= fine
    fixed[list(odd)] = False
    for k in np.flatnonzero(~fixed):
        line = odd.get(int(k)) or _text(matrix[k])
        place = f"{where} row {rows[k]}"
        words = line[VALUE_COLUMNS[0] - 3 :].split()  # real files hold records that are a column or two off
        if len(words) != 4:
            raise SurveyError(mistake(place, "must hold four values from column 31", line[27:].strip() or "blanks"))
        value[:, k] = [_float(word, place) for word in words]
    return np.where(np.abs(value) >= MISSING, np.nan, value)


def _fixed(cells: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Read numbers of two decimals that keep to their ten columns; returns values, and where they do so.

    Parameters
    ----------
    cells : array of uint8, shape (n, 10)
        A blank, then a number as F9.2.
    """
    whole = cells[:, :7]
    blank, minus = whole == ord(" "), whole == ord("-")
    digit = (whole - np.uint8(ord("0"))) <= 9
    # blanks, then perhaps a minus, then at least one digit
    begun = np.logical_or.accumulate(~blank, axis=1)
    fine = (digit | minus | (blank & ~begun)).all(axis=1) & digit[:, -1]
    fine &= ~(minus[:, 1:] & begun[:, :-1]).any(axis=1)
    decimals, right = _digits(cells, 8, 10)
    fine &= right & (cells[:, 7] == ord("."))
    number = np.zeros(len(cells), np.int64)
    for k in range(7):
        number = number * 10 + np.where(digit[:, k], whole[:, k] - np.uint8(ord("0")), 0)
    number = number * 100 + decimals
    return np.where(minus.any(axis=1), -number, number) / 100.0, fine


def _float(text: str, where: str) -> float:
    try:
        value = float(text.replace("_", "?"))
    except ValueError:
        value = np.nan
    if not np.isfinite(value):
        raise SurveyError(mistake(where, "must hold numbers from column 31", text))
    return value


def _total_field(values: dict[str, np.ndarray], where: str) -> tuple[np.ndarray, str]:
    """Return the total field, and the elements that it is taken from."""
    scalar = [name for name in ("F", "S") if name in values]
    for name in scalar:
        if np.isfinite(values[name]).any():
            return values[name], name
    x, y, z, h, e, i = (values.get(name) for name in "XYZHEI")
    ways = {
        "X Y Z": lambda: np.sqrt(x**2 + y**2 + z**2),
        "H E Z": lambda: np.sqrt(h**2 + e**2 + z**2),
        "H Z": lambda: np.hypot(h, z),
        "H I": lambda: h / np.cos(i * ARC_MINUTE),
    }
    for way, compute in ways.items():
        if set(way.split()) <= set(values):
            return compute(), way
    if scalar:
        return values[scalar[0]], scalar[0]
    raise SurveyError(mistake(where, "must report F, or X Y Z, H E Z, H Z, or H I", " ".join(values)))
