"""Read delimited text files of any layout, as loggers write them.

The fast path hands whole columns to pyarrow; only when something is wrong are single rows looked at, to name file, row
and column. Nothing is guessed: a cell that is no number and no missing-value code stops the reading.
"""

import difflib
import gzip
import io
import zlib
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from pyarrow import csv

from steps.errors import SurveyError, mistake
from steps.formats.tables import parse_time
from steps.settings import Delimited

LARGEST_BYTES = 4_000_000_000  # of one file after unpacking: a gzip bomb ends here
LARGEST_RATIO = 200  # text of records does not pack better than this
MOST_MISTAKES = 10
ANGLES = {"latitude_deg": ("N", "S", 90.0), "longitude_deg": ("E", "W", 180.0)}


@dataclass
class Text:
    """A file's rows of data as bytes: what is parsed, and which row of the file each was."""

    data: bytes
    rows: np.ndarray
    names: list[str]
    counts: dict[str, int] = field(default_factory=dict)


def read_delimited(path: str | Path, spec: Delimited, columns: dict[str, str]) -> tuple[pd.DataFrame, dict[str, int]]:
    """Read one file.

    Parameters
    ----------
    path : str or pathlib.Path
        Text, or gzipped text.
    spec : Delimited
        Delimiter, heading, time columns, missing-value codes and the rest.
    columns : dict of str to str
        Which column of the file holds which quantity. ``latitude_deg`` and ``longitude_deg`` may be decimal degrees or
        degrees and minutes with a letter; longitudes come back in [-180, 180).

    Returns
    -------
    table : pandas.DataFrame
        ``time`` (datetime64[ns], as logged), the quantities (float64, NaN where missing), ``source_row``.
    counts : dict of str to int
        ``rows`` of the file; how many were ``records``, ``heading``, ``comment``, ``blank``, ``truncated``.

    Raises
    ------
    SurveyError
        With one sentence for each mistake, up to ten.

    """
    path = Path(path)
    text = _rows(_load(path, spec.encoding), spec, str(path))
    where = str(path)
    needed = list(dict.fromkeys([*spec.time.columns, *columns.values()]))
    unknown = [name for name in needed if name not in text.names]
    if unknown:
        wrong = []
        for name in unknown:
            near = difflib.get_close_matches(name, text.names, n=1)
            remedy = f"Did you mean {near[0]}?" if near else "Mend the name in survey.yaml, or its delimiter."
            wrong.append(mistake(where, f"must have a column {name}", ", ".join(text.names), remedy))
        raise SurveyError(*wrong)
    if text.counts["records"] == 0:
        raise SurveyError(
            mistake(where, "must hold at least one record", "none", "Remove the file or mend `skip_rows`.")
        )
    table = _parse(text, needed, spec, where)
    missing = pa.array([word.strip() for word in spec.missing], pa.string())
    found: dict[str, np.ndarray] = {"time": _times([table[name] for name in spec.time.columns], spec, text, where)}
    for quantity, name in columns.items():
        convert = _angles if quantity in ANGLES else _numbers
        found[quantity] = convert(table[name], missing, spec, text, f"{where}", name, quantity)
    found["source_row"] = text.rows
    return pd.DataFrame(found), text.counts


def _load(path: Path, encoding: str) -> bytes:
    """Return a file's text as UTF-8 bytes, unpacked, without a byte-order mark."""
    data = path.read_bytes()
    if data[:2] == b"\x1f\x8b":
        limit = min(LARGEST_BYTES, max(1_000_000, LARGEST_RATIO * len(data)))
        try:
            with gzip.open(io.BytesIO(data)) as packed:
                data = packed.read(limit + 1)
        except (OSError, EOFError, zlib.error) as error:
            raise SurveyError(mistake(str(path), "must be a whole gzip file", error, "Copy it again.")) from error
        if len(data) > limit:
            raise SurveyError(mistake(str(path), f"must unpack to under {limit} bytes", "more"))
    if not data.strip():
        raise SurveyError(mistake(str(path), "must hold records", "an empty file", "Remove it, or copy it again."))
    if encoding.lower() not in ("utf-8", "utf8", "ascii") or data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
            encoding = "utf-16"
        try:
            data = data.decode(encoding).encode("utf-8")
        except (UnicodeDecodeError, LookupError) as error:
            raise SurveyError(mistake(str(path), f"must be text in {encoding}", error, "Mend `encoding`.")) from error
    else:
        try:
            data.decode("utf-8")
        except UnicodeDecodeError as error:
            row = data[: error.start].count(b"\n") + 1
            byte = f"byte {data[error.start]:#04x}"
            raise SurveyError(
                mistake(f"{path} row {row}", "must be UTF-8 text", byte, "Name its `encoding`, such as latin-1.")
            ) from error
    if b"\0" in data:
        row = data[: data.index(b"\0")].count(b"\n") + 1
        raise SurveyError(mistake(f"{path} row {row}", "must be text", "a zero byte", "Is it a binary file?"))
    return data.removeprefix(b"\xef\xbb\xbf")


def _rows(data: bytes, spec: Delimited, where: str) -> Text:
    """Take the heading off and leave comments and blank rows out, keeping count of the rows."""
    if b"\r" in data:
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    ends_well = data.endswith(b"\n")
    if not ends_well:
        data += b"\n"
    buffer = np.frombuffer(data, np.uint8)
    ends = np.flatnonzero(buffer == 10)
    starts = np.concatenate([[0], ends[:-1] + 1])
    number = np.arange(1, len(ends) + 1)
    blank = _is_blank(buffer, starts, ends)
    comment = np.zeros(len(ends), bool)
    if spec.comment:
        comment = ~blank & (buffer[np.minimum(starts, len(buffer) - 1)] == ord(spec.comment))
    skipped = number <= spec.skip_rows
    data_rows = ~blank & ~comment & ~skipped
    counts = {"rows": len(ends), "heading": 0, "truncated": 0}
    counts["blank"] = int((blank & ~skipped).sum())
    counts["comment"] = int((comment & ~skipped).sum())
    counts["heading"] = int(skipped.sum())
    if spec.names is None:
        first = np.flatnonzero(data_rows)
        if len(first) == 0:
            raise SurveyError(mistake(where, "must have a heading row after the skipped rows", "none"))
        head = data[starts[first[0]] : ends[first[0]]].decode("utf-8")
        names = _split(head, spec)
        data_rows[first[0]] = False
        counts["heading"] += 1
        repeated = sorted({name for name in names if name and names.count(name) > 1})
        if repeated:
            place = f"{where} row {number[first[0]]}"
            raise SurveyError(mistake(place, "must name each column once", ", ".join(repeated)))
    else:
        names = list(spec.names)
    if data_rows.all():
        kept = data
    else:
        mask = np.repeat(data_rows, ends - starts + 1)
        kept = buffer[mask].tobytes()
    rows = number[data_rows]
    if not ends_well and len(rows) and rows[-1] == number[-1]:
        last = data[starts[-1] : ends[-1]].decode("utf-8")
        if len(_split(last, spec)) != len(names):  # a record cut off when the logger stopped
            kept = kept[: len(kept) - int(ends[-1] - starts[-1] + 1)]
            rows = rows[:-1]
            counts["truncated"] = 1
    counts["records"] = len(rows)
    if spec.delimiter == "space":
        kept = b"\n".join(b" ".join(line.split()) for line in kept.split(b"\n"))
    return Text(kept, rows, names, counts)


def _is_blank(buffer: np.ndarray, starts: np.ndarray, ends: np.ndarray) -> np.ndarray:
    """Tell which rows hold nothing but blanks; only those that start with one are looked at closely."""
    blank = starts == ends
    first = buffer[np.minimum(starts, len(buffer) - 1)]
    for k in np.flatnonzero(~blank & ((first == 32) | (first == 9))):
        blank[k] = not buffer[starts[k] : ends[k]].tobytes().strip()
    return blank


def _delimiter(spec: Delimited) -> str:
    return {"tab": "\t", "space": " "}.get(spec.delimiter, spec.delimiter)


def _split(row: str, spec: Delimited) -> list[str]:
    """Split one row as the parser does."""
    if spec.delimiter == "space":
        return row.split()
    import csv as standard

    (cells,) = standard.reader([row], delimiter=_delimiter(spec)) or [[]]
    return [cell.strip() for cell in cells]


def _parse(text: Text, needed: list[str], spec: Delimited, where: str) -> pa.Table:
    """Split all rows into columns of text."""
    bad: list[tuple[int, int, str]] = []

    def refuse(row) -> str:
        bad.append((len(bad), row.actual_columns, row.text or ""))
        return "skip"

    table = csv.read_csv(
        pa.BufferReader(text.data),
        read_options=csv.ReadOptions(column_names=text.names, use_threads=True, block_size=1 << 24),
        parse_options=csv.ParseOptions(
            delimiter=_delimiter(spec), invalid_row_handler=refuse, ignore_empty_lines=False
        ),
        convert_options=csv.ConvertOptions(
            column_types={name: pa.string() for name in needed}, include_columns=needed, strings_can_be_null=False
        ),
    )
    if bad:
        lines = text.data.split(b"\n")
        wrong = []
        for k, line in enumerate(lines[: len(text.rows)]):
            cells = len(_split(line.decode("utf-8"), spec))
            if cells != len(text.names):
                wrong.append(mistake(f"{where} row {text.rows[k]}", f"must have {len(text.names)} cells", cells))
                if len(wrong) == MOST_MISTAKES:
                    break
        raise SurveyError(*(wrong or [mistake(where, f"must have {len(text.names)} cells in every row")]))
    return table


def _stripped(column: pa.ChunkedArray) -> pa.Array:
    whole = column.combine_chunks()
    return pc.utf8_trim_whitespace(whole)


def _numbers(column, missing, spec, text, where, name, quantity) -> np.ndarray:
    """Turn a column of text into numbers; missing-value codes become NaN."""
    cells = _stripped(column)
    absent = pc.is_in(cells, missing)
    cells = pc.if_else(absent, None, cells)
    if spec.decimal == ",":
        cells = pc.replace_substring(cells, ",", ".")
    try:
        values = pc.cast(cells, pa.float64())
    except pa.ArrowInvalid:
        _tell(cells, float, text, where, name, "must be a number")
        raise
    numbers = values.fill_null(np.nan).to_numpy(zero_copy_only=False)
    # What was not a missing-value code must be finite: "inf" and "nan" parse as numbers elsewhere.
    odd = ~np.isfinite(numbers) & ~absent.to_numpy(zero_copy_only=False)
    if odd.any():
        k = int(np.flatnonzero(odd)[0])
        remedy = "Add the word to `missing` if it means: no value."
        place = f"{where} row {text.rows[k]}, {name}"
        raise SurveyError(mistake(place, "must be a finite number", cells[k].as_py(), remedy))
    return numbers


def _tell(cells, parse, text: Text, where: str, name: str, must: str) -> None:
    """Raise the sentences for the cells that cannot be parsed."""
    wrong = []
    for k, cell in enumerate(cells.to_pylist()):
        if cell is None:
            continue
        try:
            parse(cell)
        except ValueError:
            remedy = "Add the word to `missing` if it means: no value." if not wrong else ""
            wrong.append(mistake(f"{where} row {text.rows[k]}, {name}", must, cell, remedy))
            if len(wrong) == MOST_MISTAKES:
                break
    if wrong:
        raise SurveyError(*wrong)


def _angles(column, missing, spec, text, where, name, quantity) -> np.ndarray:
    """Turn latitudes or longitudes into decimal degrees: plain numbers, or degrees (and minutes) with a letter."""
    positive, negative, limit = ANGLES[quantity]
    cells = _stripped(column)
    cells = pc.if_else(pc.is_in(cells, missing), None, cells)
    if spec.decimal == ",":
        cells = pc.replace_substring(cells, ",", ".")
    try:
        values = pc.cast(cells, pa.float64()).fill_null(np.nan).to_numpy(zero_copy_only=False).copy()
    except pa.ArrowInvalid:
        letters = f"{positive}{negative}{positive.lower()}{negative.lower()}"
        pattern = (
            rf"^(?P<a>[{letters}]?)\s*(?P<sign>-?)(?P<d>\d+(?:\.\d*)?)(?:\s*[°d\s]\s*(?P<m>\d+(?:\.\d*)?)"
            rf"(?:\s*['\s]\s*(?P<s>\d+(?:\.\d*)?))?)?\s*['\"]*\s*(?P<b>[{letters}]?)$"
        )
        parts = cells.to_pandas().str.extract(pattern)
        good = parts["d"].notna().to_numpy() | cells.is_null().to_numpy(zero_copy_only=False)
        if not good.all():
            k = int(np.flatnonzero(~good)[0])
            must = f"must be degrees such as 51.5042 or 51 30.25 {positive}"
            raise SurveyError(mistake(f"{where} row {text.rows[k]}, {name}", must, cells[k].as_py())) from None
        degrees, minutes, seconds = (pd.to_numeric(parts[part]).fillna(0).to_numpy() for part in ("d", "m", "s"))
        good = (minutes < 60) & (seconds < 60)
        if not good.all():
            k = int(np.flatnonzero(~good)[0])
            place = f"{where} row {text.rows[k]}, {name}"
            raise SurveyError(mistake(place, "must have minutes and seconds below 60", cells[k].as_py()))
        letter = (parts["a"].fillna("") + parts["b"].fillna("")).str.upper()
        south = (letter == negative).to_numpy() ^ (parts["sign"] == "-").to_numpy()
        values = (degrees + minutes / 60 + seconds / 3600) * np.where(south, -1.0, 1.0)
        values[cells.is_null().to_numpy(zero_copy_only=False)] = np.nan
    top = 90.0 if limit == 90.0 else 360.0
    odd = np.abs(values) > top
    if odd.any():
        k = int(np.flatnonzero(odd)[0])
        must = f"must be between -{top:g} and {top:g} degrees"
        raise SurveyError(mistake(f"{where} row {text.rows[k]}, {name}", must, cells[k].as_py()))
    if limit == 180.0:
        values = (values + 180.0) % 360.0 - 180.0
    return values


# -- times -----------------------------------------------------------------------------------------------------------


def _times(columns: list, spec: Delimited, text: Text, where: str) -> np.ndarray:
    """Turn the time columns into instants."""
    name = " ".join(spec.time.columns)
    parts = [_stripped(column) for column in columns]
    cells = parts[0] if len(parts) == 1 else pc.binary_join_element_wise(*parts, " ")
    layout = spec.time.layout
    if layout == "epoch_s":
        return _epoch(cells, spec, text, where, name)
    if layout == "iso":
        fixed = None
        for pattern in ("%Y-%m-%dT%H:%M:%S.%f", "%Y-%m-%d %H:%M:%S.%f", "%Y-%m-%dT%H:%M:%S", "%Y-%m-%d %H:%M:%S"):
            fixed = fixed if fixed is not None else _fixed_width(cells, pattern)
        if fixed is not None:
            return fixed
        parse = parse_time
    else:
        fixed = _fixed_width(cells, layout)
        if fixed is not None:
            return fixed
        try:
            return pd.to_datetime(cells.to_pandas(), format=layout).to_numpy().astype("datetime64[ns]")
        except (ValueError, TypeError):
            pass
        parse = _strptime(layout)
    try:
        return np.array([parse(cell) for cell in cells.to_pylist()], "datetime64[ns]")
    except ValueError:
        must = "must be a time" if layout == "iso" else f"must be a time laid out as {layout}"
        _tell(cells, parse, text, where, name, must)
        raise


def _epoch(cells, spec, text, where, name) -> np.ndarray:
    """Turn seconds since 1970 into instants, to the microsecond."""
    if spec.decimal == ",":
        cells = pc.replace_substring(cells, ",", ".")
    try:
        seconds = pc.cast(cells, pa.float64()).to_numpy(zero_copy_only=False)
    except pa.ArrowInvalid:
        _tell(cells, float, text, where, name, "must be seconds since 1970")
        raise
    odd = ~(np.abs(seconds) < 9e9)
    if odd.any():
        k = int(np.flatnonzero(odd)[0])
        must = "must be seconds since 1970, not milliseconds"
        raise SurveyError(mistake(f"{where} row {text.rows[k]}, {name}", must, cells[k].as_py()))
    return (np.rint(seconds * 1e6).astype(np.int64) * 1000).astype("datetime64[ns]")


def _strptime(layout: str):
    """Return a parser of one cell that also knows 24:00:00 and the leap second 23:59:60."""
    from datetime import datetime, timedelta

    def parse(cell: str) -> np.datetime64:
        add = timedelta()
        for odd, plain in (("23:59:60", "23:59:59"), ("24:00:00", "23:59:59")):
            if odd in cell:
                cell, add = cell.replace(odd, plain), timedelta(seconds=1)
        return np.datetime64(datetime.strptime(cell, layout) + add, "ns")

    return parse


_WIDTHS = {"Y": 4, "m": 2, "d": 2, "H": 2, "M": 2, "S": 2, "j": 3, "y": 2}


def _fixed_width(cells: pa.Array, layout: str) -> np.ndarray | None:
    """Read times whose cells all have one width by position; None where that cannot be done or something is odd."""
    if cells.null_count or len(cells) == 0:
        return None
    lengths = pc.binary_length(cells)
    span = pc.min_max(lengths).as_py()
    if span["min"] != span["max"]:
        return None
    width = span["max"]
    offsets = np.frombuffer(cells.buffers()[1], np.int32, len(cells) + 1, cells.offset * 4)
    matrix = np.frombuffer(cells.buffers()[2], np.uint8)[offsets[0] : offsets[-1]].reshape(len(cells), width)
    values, at, k = {}, 0, 0
    while k < len(layout):
        if layout[k] == "%" and k + 1 < len(layout):
            code = layout[k + 1]
            size = width - at if code == "f" and k + 2 == len(layout) else _WIDTHS.get(code)
            if size is None or at + size > width or size == 0 or size > 9:
                return None
            digits = matrix[:, at : at + size] - np.uint8(48)
            if (digits > 9).any():
                return None
            number = np.zeros(len(cells), np.int64)
            for column in range(size):
                number = number * 10 + digits[:, column]
            values[code] = number * 10 ** (9 - size) if code == "f" else number
            at, k = at + size, k + 2
        else:
            if at >= width or (matrix[:, at] != ord(layout[k])).any():
                return None
            at, k = at + 1, k + 1
    if at != width:
        return None
    return _assemble(values)


def _assemble(values: dict[str, np.ndarray]) -> np.ndarray | None:
    """Make instants of the parts of dates and times; None where a part is out of its range."""
    if "y" in values and "Y" not in values:
        values["Y"] = np.where(values["y"] < 69, 2000, 1900) + values["y"]  # as strptime does
    if "Y" not in values or not ({"m", "d"} <= set(values) or "j" in values):
        return None
    zero = np.zeros(len(values["Y"]), np.int64)
    hour, minute, second = (values.get(part, zero) for part in ("H", "M", "S"))
    if (hour > 23).any() or (minute > 59).any() or (second > 59).any():
        return None
    year = (values["Y"] - 1970).astype("datetime64[Y]")
    if "j" in values:
        day = year.astype("datetime64[D]") + (values["j"] - 1).astype("timedelta64[D]")
        if (values["j"] < 1).any() or (day.astype("datetime64[Y]") != year).any():
            return None
    else:
        month = year.astype("datetime64[M]") + (values["m"] - 1).astype("timedelta64[M]")
        day = month.astype("datetime64[D]") + (values["d"] - 1).astype("timedelta64[D]")
        if (values["m"] < 1).any() or (values["m"] > 12).any() or (values["d"] < 1).any():
            return None
        if (day.astype("datetime64[M]") != month).any():
            return None
    ns = ((hour * 60 + minute) * 60 + second) * 1_000_000_000 + values.get("f", zero)
    return day.astype("datetime64[ns]") + ns.astype("timedelta64[ns]")
