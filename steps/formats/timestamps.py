"""Turn cells of text into instants, by their layout: ISO 8601 or a strptime pattern.

Cells of equal width are read digit by digit, all at once; those that are not padded by a cursor in each; those with
names of months by pandas. What none of these takes is read singly, by `slowly`, which defines what a cell means.
"""

import re
from collections.abc import Callable
from datetime import UTC, datetime, timedelta

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from steps import clock
from steps.formats.tables import parse_time

NS = clock.NS_PER_S
WIDTHS = {"Y": 4, "y": 2, "m": 2, "d": 2, "j": 3, "H": 2, "M": 2, "S": 2, "f": 9}
PADDED = ("Y", "y")  # never written with fewer digits
MOST_WIDTHS = 12
FAILURES = 25  # of single cells, after which no more are looked at
_ODD = {"23:59:60": "%H:%M:%S", "24:00:00": "%H:%M:%S", "235960": "%H%M%S", "240000": "%H%M%S"}
_ISO = re.compile(
    r"\d{4}-\d\d-\d\d(?:([T ])\d\d:\d\d(?P<second>:\d\d)?(?:([.,])\d{1,9})?)?(\s?)(Z|UTC|[+-]\d\d:?\d\d)?",
    re.IGNORECASE | re.ASCII,
)
Tokens = list[tuple[str, str]]  # ("code", "Y") or ("text", "-")


def parse(columns: list[pa.Array], layout: str) -> tuple[np.ndarray, np.ndarray]:
    """Read the times of rows.

    Parameters
    ----------
    columns : list of pyarrow.StringArray, each of length n
        Cells without blanks around them; joined by one blank they are laid out as `layout`.
    layout : str
        ``iso``, or a strptime pattern of the codes in `steps.settings.LAYOUT_CODES`.

    Returns
    -------
    ns : array of int64, shape (n,)
        Nanoseconds since 1970, UTC unless a cell names an offset.
    good : array of bool, shape (n,)
        False where a cell is no time of that layout. When `FAILURES` cells are found to be none, the rest that needs a
        closer look gets none: a file with such a cell is refused anyway.

    """
    n = len(columns[0])
    if n == 0:
        return np.zeros(0, np.int64), np.zeros(0, bool)
    if layout == "iso":
        cells = _joined(columns)
        ns, good = _iso(cells)
    else:
        parts = [layout] if len(columns) == 1 else layout.split(" ")
        if len(parts) != len(columns):
            columns, parts = [_joined(columns)], [layout]
        plans = [_tokens(part) for part in parts]
        if all(plans):
            values, good = {}, np.ones(n, bool)
            for cells, plan in zip(columns, plans, strict=True):
                found, whole = _fields(_Cells(cells), plan)
                values |= found
                good &= whole
            ns, good = _instants(values, good)
        else:
            ns, good = _by_pandas(_joined(columns), layout)
    read, failures = slowly(layout), 0
    for k in np.flatnonzero(~good).tolist():
        try:
            text = " ".join(cells[k].as_py() or "" for cells in columns)
            ns[k] = read(text).astype(np.int64)
            good[k] = True
        except ValueError:
            failures += 1
            if failures == FAILURES:
                break
    return ns, good


def slowly(layout: str) -> Callable[[str], np.datetime64]:
    """Return a reader of one cell, which defines what cells of a layout mean.

    Beyond strptime it takes fractions of up to nine digits, 24:00:00, which is the next midnight, and the leap second
    23:59:60, which is the next midnight too. It raises ValueError where a cell is no such time.
    """
    if layout == "iso":
        return parse_time

    def read(text: str) -> np.datetime64:
        odd = next((odd for odd in _ODD if odd in text and _ODD[odd] in layout), "")
        if odd:
            text = text.replace(odd, odd.replace("60", "59").replace("24", "23").replace("00", "59"), 1)
        rest = 0
        long = re.search(r"\.(\d{6})(\d{1,3})(?!\d)", text) if ".%f" in layout else None
        if long:
            rest, text = int(long.group(2).ljust(3, "0")), text[: long.start(2)] + text[long.end(2) :]
        time = datetime.strptime(text, layout)
        if "%j" in layout and "366" in text and time.timetuple().tm_yday == 1:
            day_before = datetime.strptime(text.replace("366", "365", 1), layout)
            if time - day_before == timedelta(days=1):  # strptime takes day 366 of a common year for the next day
                raise ValueError("must be a day of the year")
        if time.tzinfo is not None:
            time = time.astimezone(UTC).replace(tzinfo=None)
        if odd:
            if odd.startswith("24") and (time.microsecond or rest):
                raise ValueError("must be a time of a day, 00:00:00 to 24:00:00")
            time, rest = time.replace(microsecond=0) + timedelta(seconds=1), 0
        if not clock.YEARS[0] <= time.year < clock.YEARS[1]:
            raise ValueError(f"must be a year from {clock.YEARS[0]} to {clock.YEARS[1] - 1}")
        return np.datetime64(time, "ns") + np.timedelta64(rest, "ns")

    return read


def example(layout: str) -> str:
    """Return a time written in a layout, for messages."""
    instant = datetime(2024, 12, 31, 23, 59, 58, 250000, tzinfo=UTC)
    return instant.strftime("%Y-%m-%dT%H:%M:%S" if layout == "iso" else layout)


def _joined(columns: list[pa.Array]) -> pa.Array:
    return columns[0] if len(columns) == 1 else pc.binary_join_element_wise(*columns, " ")


def _tokens(layout: str) -> Tokens:
    """Split a pattern into codes and literal bytes; empty where a code of it is not made of digits alone."""
    tokens = []
    for code, text in re.findall(r"%(.)|(.)", layout, re.DOTALL):
        if code in WIDTHS:
            tokens.append(("code", code))
        elif code and code != "%":
            return []
        else:
            tokens += [("text", byte) for byte in (text or "%").encode().decode("latin-1")]
    return tokens


class _Cells:
    """The bytes of an array of text, by cell."""

    def __init__(self, cells: pa.Array):
        _, offsets, data = cells.buffers()
        self.offsets = np.frombuffer(offsets, np.int32, len(cells) + 1, cells.offset * 4).astype(np.int64)
        self.data = np.frombuffer(data, np.uint8) if data is not None else np.zeros(0, np.uint8)
        self.lengths = np.diff(self.offsets)

    def __len__(self):
        return len(self.lengths)

    def matrix(self, width: int, rows: np.ndarray | None = None) -> np.ndarray:
        """Return cells of one width as a matrix of bytes, without a copy where all cells are meant."""
        if rows is None:
            return self.data[self.offsets[0] : self.offsets[-1]].reshape(len(self), width)
        window = np.lib.stride_tricks.sliding_window_view(self.data, width)
        return window[self.offsets[:-1][rows]]


def _fields(cells: _Cells, tokens: Tokens) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Read the numbers of all cells by code; where every cell is the same, arrays of length one."""
    n = len(cells)
    shortest, longest = int(cells.lengths.min()), int(cells.lengths.max())
    if shortest == longest > 0:
        matrix = cells.matrix(longest)
        if n > 1 and (matrix == matrix[0]).all():
            matrix = matrix[:1]
        values, good = _fixed(matrix, tokens)
        if good.all():
            return values, good
    codes = [code for kind, code in tokens if kind == "code"]
    values, good = {code: np.zeros(n, np.int32) for code in codes}, np.zeros(n, bool)
    widths = np.flatnonzero(np.bincount(np.minimum(cells.lengths, 100)))
    for width in widths[(widths > 0) & (widths < 100)][:MOST_WIDTHS]:
        rows = np.flatnonzero(cells.lengths == width)
        matrix = cells.matrix(int(width), rows)
        for way in (_fixed, _flexible):
            found, whole = way(matrix, tokens)
            for code, column in found.items():
                values[code][rows[whole]] = column[whole]
            good[rows[whole]] = True
            rows, matrix = rows[~whole], matrix[~whole]
            if len(rows) == 0:
                break
    return values, good


def _fixed(matrix: np.ndarray, tokens: Tokens) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Read cells in which every number is padded to its full width; a fraction has what is left over."""
    n, width = matrix.shape
    plain = sum(1 if kind == "text" else WIDTHS[code] for kind, code in tokens if (kind, code) != ("code", "f"))
    sizes = {**WIDTHS, "f": width - plain}
    if ("code", "f") in tokens and not 0 < sizes["f"] <= 9:
        return {}, np.zeros(n, bool)
    if ("code", "f") not in tokens and plain != width:
        return {}, np.zeros(n, bool)
    values, good, at = {}, np.ones(n, bool), 0
    for kind, code in tokens:
        if kind == "text":
            good &= matrix[:, at] == ord(code)
            at += 1
            continue
        size = sizes[code]
        digits = [matrix[:, column] - np.uint8(48) for column in range(at, at + size)]
        number = np.zeros(n, np.uint8 if size < 3 else np.int32)
        for digit in digits:
            good &= digit <= 9
            number = number * number.dtype.type(10) + digit
        values[code] = number * np.int32(10 ** (9 - size)) if code == "f" else number
        at += size
    return values, good


def _flexible(matrix: np.ndarray, tokens: Tokens) -> tuple[dict[str, np.ndarray], np.ndarray]:
    """Read cells in which numbers may have fewer digits, each with a cursor of its own."""
    n, width = matrix.shape
    text = np.column_stack([matrix, np.zeros(n, np.uint8)])
    row, at, good, values = np.arange(n), np.zeros(n, np.int64), np.ones(n, bool), {}
    for kind, code in tokens:
        if kind == "text":
            good &= text[row, at] == ord(code)
            at = np.minimum(at + 1, width)
            continue
        number, taken = np.zeros(n, np.int32), np.zeros(n, np.int64)
        for _ in range(WIDTHS[code]):
            digit = text[row, at] - np.uint8(48)
            here = (digit <= 9) & (at < width)
            number = np.where(here, number * 10 + digit, number)
            taken += here
            at = at + here
            if not here.any():
                break
        good &= taken >= (WIDTHS[code] if code in PADDED else 1)
        values[code] = number * 10 ** np.maximum(9 - taken, 0) if code == "f" else number
    return values, good & (at == width)


def _instants(values: dict[str, np.ndarray], good: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Put the parts of dates and times together; the parts may be arrays of length one."""
    if "Y" in values:
        year = values["Y"].astype(np.int32)
    else:
        year = values["y"].astype(np.int32)
        year += np.where(year < 69, 2000, 1900)  # as strptime has it
    one = np.ones(1, np.int32)
    month, day = (one, one) if "j" in values else (values["m"], values["d"])
    year, month, day = np.broadcast_arrays(year, month, day)
    ns, real = clock.midnights(year, month, day)
    if "j" in values:
        of_year = values["j"].astype(np.int64)
        leap = (year % 4 == 0) & ((year % 100 != 0) | (year % 400 == 0))
        real = real & (of_year >= 1) & (of_year <= 365 + leap)
        ns = ns + (of_year - 1) * (86_400 * NS)
    zero = np.zeros(1, np.int32)
    hour, minute, second = (values.get(code, zero).astype(np.int32) for code in "HMS")
    good = good & real & (hour < 24) & (minute < 60) & (second < 60)
    ns = ns + (hour * 3600 + minute * 60 + second).astype(np.int64) * NS + values.get("f", zero)
    return np.where(good, ns, 0), good


def _iso(cells: pa.Array) -> tuple[np.ndarray, np.ndarray]:
    """Read ISO 8601 times; each width and way of writing them is met once and then read as a pattern."""
    own = _Cells(cells)
    ns, good = np.zeros(len(own), np.int64), np.zeros(len(own), bool)
    widths = np.flatnonzero(np.bincount(np.minimum(own.lengths, 100)))
    for width in widths[(widths >= 10) & (widths < 100)][:MOST_WIDTHS]:
        rows = None if len(widths) == 1 else np.flatnonzero(own.lengths == width)
        matrix = own.matrix(int(width), rows)
        rows = np.arange(len(own)) if rows is None else rows
        for _ in range(3):
            found = _ISO.fullmatch(matrix[0].tobytes().decode("latin-1"))
            whole = np.zeros(len(rows), bool)
            if found:
                between, point, blank, zone = found.group(1), found.group(3), found.group(4), found.group(5) or ""
                layout = "%Y-%m-%d"
                if between:
                    layout += f"{between}%H:%M" + (":%S" if found["second"] else "") + (f"{point}%f" if point else "")
                times, whole = _instants(*_fixed(matrix, _tokens(layout + blank + zone)))
                shift, proper = _offset(zone)
                whole &= proper & (found["second"] is not None or not point)
                ns[rows[whole]], good[rows[whole]] = times[whole] - shift, True
            whole[0] = True
            rows, matrix = rows[~whole], matrix[~whole]
            if len(rows) == 0:
                break
    return ns, good


def _offset(zone: str) -> tuple[int, bool]:
    """Return the ns by which a zone's clocks are ahead of UTC, and whether it can be."""
    if zone[:1] not in ("+", "-"):
        return 0, True
    hours, minutes = int(zone[1:3]), int(zone[-2:])
    ahead = (hours * 60 + minutes) * 60 * NS
    return (ahead if zone[0] == "+" else -ahead), hours <= 14 and minutes < 60


def _by_pandas(cells: pa.Array, layout: str) -> tuple[np.ndarray, np.ndarray]:
    """Read cells with names of months, halves of the day or offsets."""
    import pandas as pd

    try:
        times = pd.to_datetime(cells.to_pandas(), format=layout, errors="coerce", utc=True)
    except (ValueError, TypeError):
        return np.zeros(len(cells), np.int64), np.zeros(len(cells), bool)
    values = times.dt.tz_localize(None).to_numpy().astype("datetime64[us]")  # wide enough for any year
    good = ~np.isnat(values)
    year = values.astype("datetime64[Y]").astype(np.int64) + 1970
    good &= (year >= clock.YEARS[0]) & (year < clock.YEARS[1])
    exact = times.dt.tz_localize(None).to_numpy()[good].astype("datetime64[ns]").astype(np.int64)
    ns = np.zeros(len(cells), np.int64)
    ns[good] = exact
    return ns, good
