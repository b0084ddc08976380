"""Read delimited text files of any layout, as loggers write them.

Whole columns are handed to pyarrow; only where that meets something odd are cells looked at as text, and only where
something is wrong are rows looked at singly, to name file, row and column. Nothing is guessed: a cell that is neither a
number nor a code for "no value" stops the reading. A last row that was cut short is left out and counted.
"""

import csv as standard
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from pyarrow import csv

from steps.errors import SurveyError, mistake
from steps.formats import timestamps
from steps.formats.packed import read_bytes
from steps.formats.tables import MOST_MISTAKES, nearest
from steps.settings import Delimited

BLOCK_BYTES = 1 << 20  # what pyarrow splits at a time; times are read in the same pieces
LONGEST_ROW = 1 << 16  # bytes
EPOCH_LIMIT_S = 7.2e9  # seconds since 1970 within the years that are read; milliseconds are far above
ANGLES = {"latitude_deg": "NS", "longitude_deg": "EW"}
NUMBER = r"^[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?$"
MARKS = {".": "point", ",": "comma"}
NO_VALUE = "Add the word to `missing` if it means: no value."


@dataclass
class Text:
    """The records of a file, as bytes to split, with the row of the file that each was."""

    data: bytes | memoryview
    rows: np.ndarray
    names: list[str]
    heading_row: int
    counts: dict[str, int]
    quoted: bool


@dataclass
class Place:
    """A column of a file, for messages; `wrong` gathers the mistakes of all columns."""

    where: str
    name: str
    rows: np.ndarray
    wrong: list[str]

    def tell(self, bad: np.ndarray, cells: pa.Array, must: str, remedy: str = "") -> None:
        """Say what is wrong with the cells that are marked: of many the first ones."""
        found = np.flatnonzero(bad)
        for k in found[:MOST_MISTAKES].tolist():
            place = f"{self.where} row {self.rows[k]}, {self.name}"
            got = cells[k].as_py()
            got = "an empty cell" if got == "" else "no value" if got is None else got
            self.wrong.append(mistake(place, must, got, remedy if k == found[0] else ""))
        if len(found) > MOST_MISTAKES:
            self.wrong.append(f"{self.where}, {self.name}: and {len(found) - MOST_MISTAKES} more.")


def read_delimited(path: str | Path, spec: Delimited, columns: dict[str, str]) -> tuple[pd.DataFrame, dict[str, int]]:
    """Read one file.

    Parameters
    ----------
    path : str or pathlib.Path
        Text, or gzipped text.
    spec : Delimited
        Delimiter, heading, time columns, missing-value codes and the rest.
    columns : dict of str to str
        Which column of the file holds which quantity. ``latitude_deg`` and ``longitude_deg`` may be decimal degrees, or
        degrees, minutes and seconds with a letter; longitudes come back in [-180, 180).

    Returns
    -------
    table : pandas.DataFrame
        ``time`` (datetime64[ns], as logged), the quantities (float64, NaN where missing), ``source_row``.
    counts : dict of str to int
        ``rows`` of the file, and how many were ``records`` (rows of the table), ``heading`` (with the skipped rows),
        ``comment``, ``blank``, ``truncated`` (a last row cut short) or ``without time``: these add up to it.

    Raises
    ------
    SurveyError
        With one sentence for each mistake, of many the first ones.

    """
    where = str(path)
    text = _records(_as_utf8(read_bytes(path), spec.encoding, where), spec, where)
    needed = list(dict.fromkeys([*spec.time.columns, *columns.values()]))
    _check_names(needed, text, where)
    if len(text.rows) == 0:
        remedy = "Remove the file, or mend `skip_rows`."
        raise SurveyError(mistake(where, "must hold at least one record", "none", remedy))
    table = _split_all(text, needed, columns, spec, where)
    wrong: list[str] = []
    time, absent = _times(table, spec, Place(where, ", ".join(spec.time.columns), text.rows, wrong))
    found = {"time": time}
    for quantity, name in columns.items():
        place = Place(where, name, text.rows, wrong)
        if quantity in ANGLES:
            found[quantity] = _angles(table[name], spec, place, quantity)
        else:
            found[quantity] = _numbers(table[name], spec, place)
    if wrong:
        first = f"{where} row {text.rows[0]},"
        if text.heading_row and len(text.rows) > 1 and all(sentence.startswith(first) for sentence in wrong):
            wrong.append(f"{where}: if row {text.rows[0]} holds units, give `names` and count it among `skip_rows`.")
        raise SurveyError(*wrong[: 2 * MOST_MISTAKES])
    if absent.all():
        raise SurveyError(mistake(where, f"must hold times in {', '.join(spec.time.columns)}", "no value in any row"))
    whole = pd.DataFrame(found | {"source_row": text.rows})
    if absent.any():
        whole = whole[~absent].reset_index(drop=True)
    counts = text.counts | {"without time": int(absent.sum()), "records": len(whole)}
    if counts["rows"] != sum(number for name, number in counts.items() if name != "rows"):
        raise RuntimeError(f"{where}: rows are not all accounted for: {counts}")
    return whole, counts


# -- rows ------------------------------------------------------------------------------------------------------------


def _as_utf8(data: bytes, encoding: str, where: str) -> bytes:
    """Return a file's text as UTF-8, without a byte-order mark."""
    if data[:2] in (b"\xff\xfe", b"\xfe\xff"):
        encoding = "utf-16"
    if encoding.lower().replace("_", "-") not in ("utf-8", "utf8", "ascii", "us-ascii"):
        try:
            data = data.decode(encoding).encode("utf-8")
        except (UnicodeError, LookupError) as error:
            said = str(error).partition(":")[0] if isinstance(error, UnicodeError) else error
            raise SurveyError(mistake(where, f"must be text in {encoding}", said, "Mend `encoding`.")) from error
    elif not data.isascii():
        try:
            data.decode("utf-8")
        except UnicodeDecodeError as error:
            row = data[: error.start].count(b"\n") + 1
            got = f"byte {data[error.start]:#04x}"
            remedy = "Name its `encoding`, such as latin-1."
            raise SurveyError(mistake(f"{where} row {row}", "must be UTF-8 text", got, remedy)) from error
    data = data.removeprefix(b"\xef\xbb\xbf")
    if not data[:999].strip() and not data.strip():
        raise SurveyError(mistake(where, "must hold records", "an empty file", "Remove it, or copy it again."))
    if b"\0" in data:
        row = data[: data.index(b"\0")].count(b"\n") + 1
        remedy = "Is it a binary file, or one that was not closed? Copy it again."
        raise SurveyError(mistake(f"{where} row {row}", "must be text", "a zero byte", remedy))
    return data.removesuffix(b"\x1a") or data  # how DOS ended a file


def _records(data: bytes, spec: Delimited, where: str) -> Text:
    """Take skipped rows, heading, comments and blank rows off, keeping count of the rows."""
    if b"\r" in data and data.count(b"\r") != data.count(b"\r\n"):
        data = data.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    buffer = np.frombuffer(data, np.uint8)
    ends = np.flatnonzero(buffer == 10)
    closed = data.endswith(b"\n")
    if not closed:
        ends = np.append(ends, len(data))
    starts = np.concatenate([[0], ends[:-1] + 1])
    longest = int((ends - starts).max())
    if longest > LONGEST_ROW:
        row = int(np.argmax(ends - starts)) + 1
        must = f"must have under {LONGEST_ROW} characters in a row"
        raise SurveyError(mistake(f"{where} row {row}", must, longest, "Is it a text file?"))
    at = _first_of_row(buffer, starts, ends, spec.delimiter)
    blank = at >= ends
    mark = buffer[np.minimum(at, len(buffer) - 1)]
    comment = ~blank & (mark == ord(spec.comment)) if spec.comment else np.zeros(len(ends), bool)
    use = ~(blank | comment)
    use[: spec.skip_rows] = False
    chosen = np.flatnonzero(use)
    counts = {"rows": len(ends), "heading": min(spec.skip_rows, len(ends)), "truncated": 0}
    counts["blank"] = int(blank[spec.skip_rows :].sum())
    counts["comment"] = int(comment[spec.skip_rows :].sum())

    def row(k: int) -> str:
        return data[starts[k] : ends[k]].decode("utf-8")

    heading_row = 0
    if spec.names is None:
        if len(chosen) == 0:
            raise SurveyError(mistake(where, "must have a heading row after the skipped rows", "none"))
        heading_row = int(chosen[0]) + 1
        names, chosen = split(row(chosen[0]), spec), chosen[1:]
        counts["heading"] += 1
    else:
        names = list(spec.names)
    if len(chosen):
        names = _names_of_all(names, split(row(chosen[0]), spec))
    if not closed and len(chosen) and chosen[-1] == len(ends) - 1:
        before = split(row(chosen[-2]), spec) if len(chosen) > 1 else []
        if _cut_short(split(row(chosen[-1]), spec), before, len(names)):
            chosen, counts["truncated"] = chosen[:-1], 1
    kept = _cut_out(data, starts, ends, chosen)
    if spec.delimiter == "space":
        return Text(_single_blanks(kept), chosen + 1, names, heading_row, counts, False)
    return Text(kept, chosen + 1, names, heading_row, counts, _has_quotes(data, _delimiter(spec)))


def _first_of_row(buffer, starts, ends, delimiter: str) -> np.ndarray:
    """Find the first byte of each row that is no blank; the end of the row where all are."""
    at = starts.copy()
    blanks = (13, 32) if delimiter == "tab" else (9, 13, 32)
    first = buffer[starts]
    rows = np.flatnonzero(first <= 32)
    for _ in range(64):
        inside = at[rows] < ends[rows]
        rows = rows[inside]
        byte = buffer[at[rows]]
        rows = rows[np.isin(byte, blanks)]
        if len(rows) == 0:
            return at
        at[rows] += 1
    for k in rows.tolist():
        at[k] = ends[k] - len(buffer[at[k] : ends[k]].tobytes().lstrip(bytes(blanks)))
    return at


def _names_of_all(names: list[str], cells: list[str]) -> list[str]:
    """Let heading and rows differ in delimiters at their end, as some loggers write them."""
    spare = len(cells) - len(names)
    if spare > 0 and not any(cells[len(names) :]):
        return [*names, *[""] * spare]
    if spare < 0 and not any(names[len(cells) :]):
        return names[: len(cells)]
    return names


def _cut_short(last: list[str], before: list[str], width: int) -> bool:
    """Tell whether a last row without a line end was cut off, by the row before it.

    It was if it lacks cells, or if its last cell has fewer decimals, or as a whole number or text fewer characters,
    than that of the row before: what is left of a number cut off looks like a number.
    """
    if len(last) != width or len(last) != len(before):
        return len(last) != width
    own, other = last[-1], before[-1]
    if "." in other:
        return len(own.partition(".")[2]) < len(other.partition(".")[2])
    return len(own) < len(other)


def _cut_out(data: bytes, starts, ends, chosen) -> bytes | memoryview:
    """Return the bytes of the chosen rows, without a copy where they follow each other."""
    if len(chosen) == 0:
        return b""
    view = memoryview(data)
    breaks = np.flatnonzero(np.diff(chosen) != 1)
    first, last = np.append(0, breaks + 1), np.append(breaks, len(chosen) - 1)
    if len(first) == 1:
        return view[starts[chosen[0]] : ends[chosen[-1]] + 1]
    pairs = zip(starts[chosen[first]].tolist(), (ends[chosen[last]] + 1).tolist(), strict=True)
    return b"".join([view[a:b] for a, b in pairs])


def _single_blanks(data: bytes | memoryview) -> bytes:
    """Make one blank of each run of blanks and tabs, and none at the beginning and end of a row."""
    text = np.frombuffer(data, np.uint8)
    if len(text) == 0:
        return b""
    blank = (text == 32) | (text == 9)
    line_end = (text == 10) | (text == 13)
    after = np.append(blank[1:] | line_end[1:], True)
    keep = ~blank | ~after  # of each run the last blank, if a cell follows
    opening = np.flatnonzero(blank & np.append(True, line_end[:-1]))  # runs at the beginning of a row: not even that
    cells = np.flatnonzero(~blank)
    closing = np.append(cells, len(text))[np.searchsorted(cells, opening)] - 1
    keep[closing] = False
    kept = text[keep]
    kept[kept == 9] = 32
    return kept.tobytes()


def split(row: str, spec: Delimited) -> list[str]:
    """Split one row into cells, without the blanks around them."""
    if spec.delimiter == "space":
        return row.split()
    try:
        (cells,) = standard.reader([row.rstrip("\r")], delimiter=_delimiter(spec)) or [[]]
    except (standard.Error, ValueError):
        cells = row.split(_delimiter(spec))
    return [cell.strip() for cell in cells]


def _delimiter(spec: Delimited) -> str:
    return {"tab": "\t", "space": " "}.get(spec.delimiter, spec.delimiter)


def _check_names(needed: list[str], text: Text, where: str) -> None:
    """Refuse a heading that lacks a column, or names one twice."""
    wrong = []
    for name in needed:
        place = f"{where} row {text.heading_row}" if text.heading_row else where
        if name not in text.names:
            near = nearest(name, [known for known in text.names if known])
            remedy = f"Did you mean {near}?" if near else "Mend the name in survey.yaml, or `delimiter` or `skip_rows`."
            wrong.append(mistake(place, f"must have a column {name}", ", ".join(text.names), remedy))
        elif text.names.count(name) > 1:
            wrong.append(mistake(place, "must name each column once", name))
    if wrong:
        raise SurveyError(*wrong)


# -- cells -----------------------------------------------------------------------------------------------------------


def _split_all(text: Text, needed: list[str], columns: dict, spec: Delimited, where: str) -> pa.Table:
    """Split all records; numbers become float64 where all cells of a column are plain ones, and stay text elsewhere."""
    first = split(bytes(text.data[: LONGEST_ROW + 2]).split(b"\n")[0].decode("utf-8"), spec)
    if len(first) != len(text.names):
        _tell_rows(text, spec, where)
    kinds = {name: pa.string() for name in needed}
    for quantity, name in columns.items():
        plain = quantity not in ANGLES or re.fullmatch(r"[-+.,0-9eE]*", first[text.names.index(name)])
        if name not in spec.time.columns and plain:
            kinds[name] = pa.float64()
    if spec.time.layout == "epoch_s":
        kinds[spec.time.columns[0]] = pa.float64()
    all_text = dict.fromkeys(needed, pa.string())
    for types in (kinds, all_text):
        try:
            table = csv.read_csv(
                pa.BufferReader(text.data),
                read_options=csv.ReadOptions(
                    column_names=[str(k) for k in range(len(text.names))], block_size=BLOCK_BYTES
                ),
                parse_options=csv.ParseOptions(
                    delimiter=_delimiter(spec), quote_char='"' if text.quoted else False, ignore_empty_lines=False
                ),
                convert_options=csv.ConvertOptions(
                    column_types={str(text.names.index(name)): kind for name, kind in types.items()},
                    include_columns=[str(text.names.index(name)) for name in needed],
                    null_values=[word.strip() for word in spec.missing],
                    decimal_point=spec.decimal,
                    check_utf8=False,
                ),
            )
        except pa.ArrowInvalid:
            _tell_rows(text, spec, where)
            continue
        if table.num_rows != len(text.rows):
            break
        if types is all_text or not any(_infinite(column) for column in table.columns):
            return table.rename_columns(needed)
    raise SurveyError(mistake(where, "must be rows of delimited text", "quotes or line ends that cannot be told apart"))


def _infinite(column: pa.ChunkedArray) -> bool:
    """Tell whether a column of numbers holds any that is not finite: as text it is seen what it was."""
    if not pa.types.is_floating(column.type):
        return False
    return np.count_nonzero(np.isfinite(column.to_numpy())) < len(column) - column.null_count


def _has_quotes(data: bytes, delimiter: str) -> bool:
    """Tell whether any cell begins with a quote; quotes elsewhere are characters like others."""
    return b'"' in data and bool(re.search(b"(?:^|[\\n\\r]|" + re.escape(delimiter.encode()) + b')"', data))


def _tell_rows(text: Text, spec: Delimited, where: str) -> None:
    """Raise the sentences for rows with too many or too few cells, if there are any."""
    lines = bytes(text.data).split(b"\n")[: len(text.rows)]
    wanted = len(text.names)
    if text.quoted:
        numbers = np.array([len(split(line.decode("utf-8"), spec)) for line in lines])
        open_quote = np.array([line.count(b'"') % 2 == 1 for line in lines])
    else:
        numbers = np.array([line.count(_delimiter(spec).encode()) + 1 for line in lines])
        open_quote = np.zeros(len(lines), bool)
    bad = np.flatnonzero((numbers != wanted) | open_quote)
    wrong = []
    for k in bad[:MOST_MISTAKES].tolist():
        place = f"{where} row {text.rows[k]}"
        if open_quote[k]:
            wrong.append(mistake(place, "must close its quotes", lines[k].decode("utf-8")))
        else:
            wrong.append(mistake(place, f"must have {wanted} cells", int(numbers[k])))
    if len(bad) > MOST_MISTAKES:
        wrong.append(f"{where}: and {len(bad) - MOST_MISTAKES} more rows.")
    if wrong:
        raise SurveyError(*wrong)


def _trimmed(column: pa.ChunkedArray) -> pa.Array:
    return pc.utf8_trim_whitespace(column.combine_chunks())


def _absent(cells: pa.Array, spec: Delimited) -> np.ndarray:
    """Tell which cells of text are a code for no value."""
    words = pa.array([word.strip() for word in spec.missing], pa.string())
    return pc.is_in(cells, words).to_numpy(zero_copy_only=False)


def _numbers(column: pa.ChunkedArray, spec: Delimited, place: Place) -> np.ndarray:
    """Return a column of numbers; codes for no value become NaN."""
    if pa.types.is_floating(column.type):
        values = column.to_numpy()
    else:
        cells = _trimmed(column)
        absent = _absent(cells, spec)
        plain = pc.replace_substring(cells, ",", ".") if spec.decimal == "," else cells
        proper = pc.match_substring_regex(plain, NUMBER).to_numpy(zero_copy_only=False)
        if spec.decimal == ",":
            proper = proper & ~pc.match_substring(cells, ".").to_numpy(zero_copy_only=False)
        place.tell(~proper & ~absent, cells, f"must be a finite number with a decimal {MARKS[spec.decimal]}", NO_VALUE)
        usable = proper & ~absent
        values = np.full(len(cells), np.nan)
        values[usable] = np.array(plain.filter(pa.array(usable)).to_pylist(), dtype=np.float64)
        place.tell(usable & ~np.isfinite(values), cells, "must be a finite number")
    return _without_codes(values, spec)


def _without_codes(values: np.ndarray, spec: Delimited) -> np.ndarray:
    """Make NaN of numbers that stand for no value, however they are written."""
    codes = [float(word) for word in map(str.strip, spec.missing) if re.fullmatch(NUMBER, word)]
    return np.where(np.isin(values, codes), np.nan, values) if codes else values


def _angles(column: pa.ChunkedArray, spec: Delimited, place: Place, quantity: str) -> np.ndarray:
    """Return latitudes or longitudes in degrees."""
    sides = ANGLES[quantity]
    lettered: np.ndarray | bool = False
    if pa.types.is_floating(column.type):
        cells, values = column, _numbers(column, spec, place)
    else:
        cells = _trimmed(column)
        absent = _absent(cells, spec)
        values, lettered, proper = _sexagesimal(cells, spec.decimal, sides)
        if not proper.all():
            must = f"must be degrees such as {'51.5042' if sides == 'NS' else '-17.5042'} or 51 30.25 {sides[0]}"
            place.tell(~proper & ~absent, cells, must)
        values = _without_codes(np.where(absent, np.nan, values), spec)
    if quantity == "latitude_deg":
        remedy = "Are latitude and longitude swapped, or degrees and minutes written together?"
        place.tell(np.abs(values) > 90.0, cells, "must be between -90 and 90 degrees", remedy)
        return values
    bad = (values < -180.0) | (values > np.where(lettered, 180.0, 360.0))
    place.tell(bad, cells, "must be between -180 and 360 degrees, with a letter up to 180")
    return (values + 180.0) % 360.0 - 180.0


def _sexagesimal(cells: pa.Array, decimal: str, sides: str) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Read degrees, minutes and seconds with a letter or a sign: values, whether with a letter, whether well formed."""
    text = pc.utf8_upper(pc.replace_substring(cells, ",", ".") if decimal == "," else cells)
    fraction = r"[0-9]+(?:\.[0-9]*)?"
    pattern = (
        rf"^(?P<a>[{sides}]?)\s*(?P<sign>[-+]?)(?P<d>{fraction})(?:\s*[°ºD:\s]\s*(?P<m>{fraction})"
        rf"(?:\s*['’′:\s]\s*(?P<s>{fraction}))?)?\s*[°º'’′\"”″]*\s*(?P<b>[{sides}]?)$"
    )
    parts = pc.extract_regex(text, pattern)
    proper = parts.is_valid().to_numpy(zero_copy_only=False)

    def part(name: str) -> pa.Array:
        return pc.fill_null(pc.struct_field(parts, name), "")

    def number(name: str) -> np.ndarray:
        return pc.cast(pc.if_else(pc.equal(part(name), ""), "0", part(name)), pa.float64()).to_numpy()

    def has(name: str, what: str | None = None) -> np.ndarray:
        found = pc.not_equal(part(name), "") if what is None else pc.match_substring(part(name), what)
        return found.to_numpy(zero_copy_only=False)

    degrees, minutes, seconds = number("d"), number("m"), number("s")
    letter = has("a") | has("b")
    proper &= (minutes < 60) & (seconds < 60) & ~(has("a") & has("b")) & ~(letter & has("sign"))
    proper &= ~(has("m") & has("d", ".")) & ~(has("s") & has("m", "."))  # no fraction but in the last part
    negative = has("a", sides[1]) | has("b", sides[1]) | has("sign", "-")
    values = (degrees + minutes / 60 + seconds / 3600) * np.where(negative, -1.0, 1.0)
    return np.where(proper, values, np.nan), letter, proper


def _times(table: pa.Table, spec: Delimited, place: Place) -> tuple[np.ndarray, np.ndarray]:
    """Return the instants of all records, and which of them have none but a code for no value."""
    columns = [table[name] for name in spec.time.columns]
    if spec.time.layout == "epoch_s":
        return _epoch(columns[0], spec, place)
    ns, good = np.zeros(table.num_rows, np.int64), np.zeros(table.num_rows, bool)
    at = 0
    for batch in table.select(spec.time.columns).to_batches():
        here = slice(at, at + batch.num_rows)
        cells = batch.columns
        if any(len(column) and column[0].as_py() != column[0].as_py().strip() for column in cells):
            cells = [pc.utf8_trim_whitespace(column) for column in cells]
        ns[here], good[here] = timestamps.parse(cells, spec.time.layout)
        at += batch.num_rows
    absent = np.zeros(len(good), bool)
    if not good.all():
        bad = np.flatnonzero(~good)
        cells = [pc.utf8_trim_whitespace(column.take(pa.array(bad)).combine_chunks()) for column in columns]
        ns[bad], good[bad] = timestamps.parse(cells, spec.time.layout)
        absent[bad] = ~good[bad] & np.logical_and.reduce([_absent(column, spec) for column in cells])
        joined = pc.binary_join_element_wise(*(_trimmed(column) for column in columns), " ")
        must = f"must be a time such as {timestamps.example(spec.time.layout)}"
        if spec.time.layout != "iso":
            must += f" ({spec.time.layout})"
        place.tell(~good & ~absent, joined, must)
    return ns.astype("datetime64[ns]"), absent


def _epoch(column: pa.ChunkedArray, spec: Delimited, place: Place) -> tuple[np.ndarray, np.ndarray]:
    """Return instants of seconds since 1970, to the microsecond, which is what float64 resolves."""
    seconds = _numbers(column, spec, place)
    absent = np.isnan(seconds)
    bad = ~absent & (np.abs(seconds) > EPOCH_LIMIT_S)
    place.tell(bad, column, "must be seconds since 1970, not milliseconds or seconds of the day")
    whole = np.where(absent | bad, 0.0, seconds)
    return (np.rint(whole * 1e6).astype(np.int64) * 1000).astype("datetime64[ns]"), absent
