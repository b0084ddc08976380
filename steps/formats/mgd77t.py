"""Read and write MGD77T, the tab-delimited exchange format of trackline geophysics.

Source: National Geophysical Data Center, Key to geophysical records documentation No. 10 (revised), February 2010, and
the data center's description of the fields. The rules that matter: a value not known is nil (adjacent tabs), never a
number; tabs at the end of a record may be left out; a row of column names may come first; every correction is *added*,
so that UTC = recorded time + TIMEZONE; where MAG_DICORR is given the total field is already corrected by it.
"""

import gzip
import io
import re
import unicodedata
import zlib
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from pyarrow import csv

from steps.columns import REJECTING, Flag
from steps.errors import SurveyError, mistake

DATA_FIELDS = (
    *("SURVEY_ID", "TIMEZONE", "DATE", "TIME", "LAT", "LON", "POS_TYPE", "NAV_QUALCO", "BAT_TTIME", "CORR_DEPTH"),
    *("BAT_CPCO", "BAT_TYPCO", "BAT_QUALCO", "MAG_TOT", "MAG_TOT2", "MAG_RES", "MAG_RESSEN", "MAG_DICORR"),
    *("MAG_SDEPTH", "MAG_QUALCO", "GRA_OBS", "EOTVOS", "FREEAIR", "GRA_QUALCO", "LINEID", "POINTID"),
)
HEADER_FIELDS = (
    *("SURVEY_ID", "FORMAT_77", "CENTER_ID", "PARAMS_CO", "DATE_CREAT", "INST_SRC", "COUNTRY", "PLATFORM"),
    *("PLAT_TYPCO", "PLAT_TYP", "CHIEF", "PROJECT", "FUNDING", "DATE_DEP", "PORT_DEP", "DATE_ARR", "PORT_ARR"),
    *("NAV_INSTR", "POS_INFO", "BATH_INSTR", "BATH_ADD", "MAG_INSTR", "MAG_ADD", "GRAV_INSTR", "GRAV_ADD"),
    *("SEIS_INSTR", "SEIS_FRMTS", "LAT_TOP", "LAT_BOTTOM", "LON_LEFT", "LON_RIGHT", "BATH_DRATE", "BATH_SRATE"),
    *("SOUND_VEL", "VDATUM_CO", "BATH_INTRP", "MAG_DRATE", "MAG_SRATE", "MAG_TOWDST", "MAG_SNSDEP", "MAG_SNSSEP"),
    *("M_REFFL_CO", "MAG_REFFLD", "MAG_RF_MTH", "GRAV_DRATE", "GRAV_SRATE", "G_FORMU_CO", "GRAV_FORMU"),
    *("G_RFSYS_CO", "GRAV_RFSYS", "GRAV_CORR", "G_ST_DEP_G", "G_ST_DEP", "G_ST_ARR_G", "G_ST_ARR", "IDS_10_NUM"),
    *("IDS_10DEG", "ADD_DOC"),
)
LIMITS = {"TIMEZONE": (-13.0, 12.0), "LAT": (-90.0, 90.0), "LON": (-360.0, 360.0)}
READ = ("TIMEZONE", "DATE", "TIME", "LAT", "LON", "CORR_DEPTH", "MAG_TOT", "MAG_TOT2", "MAG_RES", "MAG_DICORR")
READ = (*READ, "MAG_SDEPTH")
LARGEST_BYTES = 2_000_000_000
BLOCK = 1 << 23  # bytes read at once
LARGEST_RATIO = 200  # text of records does not pack better than this
MOST_MISTAKES = 10
PIECE = 1 << 20  # records written at once
NO_GENERATION_CODE = "88"  # "other": the list of reference fields ends with 18, IGRF-11
GOOD, SUSPECTED = 1, 5  # MAG_QUALCO: good; suspected by the originator
INTERPOLATED = 3  # POS_TYPE
SURFACE_SHIP = "1"


# -- reading ---------------------------------------------------------------------------------------------------------


def read_mgd77t(path: str | Path) -> tuple[pd.DataFrame, dict[str, int]]:
    """Read a data file (.m77t).

    Parameters
    ----------
    path : str or pathlib.Path
        Text, or gzipped text.

    Returns
    -------
    table : pandas.DataFrame
        In order of time: ``time_utc`` (datetime64[ns]), ``latitude_deg``, ``longitude_deg`` (in [-180, 180)),
        ``total_field_nt`` (as read by the sensor: a diurnal correction that the file has applied is taken off again),
        ``mag_residual_nt`` (against whatever reference field the header names), ``logged_depth_m`` (of the sensor),
        ``water_depth_m``, ``source_row``. NaN where the file has nil.
    counts : dict of str to int
        ``rows`` of the file = ``heading`` + ``blank`` + ``records``. Of the records: ``without_time`` (no date or no
        time: left out of the table, which holds all others), ``without_position``, ``without_reading``,
        ``second_sensor_only`` (MAG_TOT2 without MAG_TOT: not used), ``corrected`` (diurnal correction taken off),
        ``without_timezone`` (taken as UTC), ``backwards`` (earlier than the record before: put in order).

    Raises
    ------
    SurveyError
        With one sentence for each mistake, up to ten: file, row, field.

    Notes
    -----
    Times are whole milliseconds; one that is a whole second to the decimals that it is written with is that second
    (2359.6667 is 23:59:40).

    """
    where = str(path)
    wrong: list[str] = []
    counts = {"rows": 0, "heading": 0, "blank": 0, "records": 0}
    parts = []
    for block, row in _blocks(_load(Path(path), where)):
        data, rows = _records(block, row, counts, where)
        if len(rows):
            parts.append(_fields(data, rows, where, wrong) | {"row": rows})
    if wrong:
        raise SurveyError(*wrong[:MOST_MISTAKES])
    if not parts:
        raise SurveyError(mistake(where, "must hold at least one data record", "none"))
    value = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    day, clock = value["DATE"], value["TIME"]
    zone, correction = value["TIMEZONE"], value["MAG_DICORR"]
    timed = ~np.isnat(day) & np.isfinite(clock)
    ms = np.rint(1000.0 * np.where(timed, clock, 0.0)) + np.rint(3_600_000.0 * np.nan_to_num(zone))
    time = np.where(timed, day, np.datetime64(0, "ns")) + (1_000_000 * ms).astype("timedelta64[ns]")
    known_corrections = np.isfinite(correction) & np.isfinite(value["MAG_TOT"])
    found = pd.DataFrame(
        {
            "time_utc": time,
            "latitude_deg": value["LAT"],
            "longitude_deg": _wrapped(value["LON"]),
            # rounded so that no dust of the sum is left on what was observed
            "total_field_nt": np.where(known_corrections, np.round(value["MAG_TOT"] - correction, 6), value["MAG_TOT"]),
            "mag_residual_nt": value["MAG_RES"],
            "logged_depth_m": value["MAG_SDEPTH"],
            "water_depth_m": value["CORR_DEPTH"],
            "source_row": value["row"],
        }
    )[timed]
    step = np.diff(found["time_utc"].to_numpy())
    counts |= {
        "without_time": int((~timed).sum()),
        "without_position": int((found["latitude_deg"].isna() | found["longitude_deg"].isna()).sum()),
        "without_reading": int(found["total_field_nt"].isna().sum()),
        "second_sensor_only": int((timed & np.isnan(value["MAG_TOT"]) & np.isfinite(value["MAG_TOT2"])).sum()),
        "corrected": int((timed & known_corrections).sum()),
        "without_timezone": int((timed & np.isnan(zone)).sum()),
        "backwards": int((step < np.timedelta64(0, "ns")).sum()),
    }
    return found.sort_values("time_utc", kind="stable").reset_index(drop=True), counts


def read_header(path: str | Path) -> dict[str, str]:
    """Read a header file (.h77t).

    Parameters
    ----------
    path : str or pathlib.Path
        Text, or gzipped text.

    Returns
    -------
    dict of str to str
        All 58 fields by their name, trimmed; empty where nil.

    Raises
    ------
    SurveyError
        If there is not exactly one header record.

    """
    where = str(path)
    data = _load(Path(path), where)
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError:
        text = data.decode("latin-1")
    records = [
        (number, [cell.strip() for cell in line.split("\t")])
        for number, line in enumerate(re.split("\r\n|\r|\n", text), start=1)
        if line.strip()
    ]
    records = [(number, cells) for number, cells in records if cells[1:2] != ["FORMAT_77"]]
    if len(records) != 1:
        raise SurveyError(mistake(where, "must hold one MGD77T header record", len(records)))
    number, cells = records[0]
    if cells[1:2] != ["MGD77T"]:
        got = "\t".join(cells[:2])
        raise SurveyError(mistake(f"{where} row {number}, FORMAT_77", "must be MGD77T", got, "Is it a data file?"))
    if any(cells[len(HEADER_FIELDS) :]):
        raise SurveyError(mistake(f"{where} row {number}", f"must have {len(HEADER_FIELDS)} fields", len(cells)))
    cells += [""] * (len(HEADER_FIELDS) - len(cells))
    return dict(zip(HEADER_FIELDS, cells, strict=False))


def _load(path: Path, where: str) -> bytes:
    """Return a file's bytes, unpacked, with the line ends of one kind."""
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
    if not data.strip():
        raise SurveyError(mistake(where, "must hold MGD77T records", "an empty file"))
    if b"\0" in data:
        raise SurveyError(mistake(where, "must be MGD77T text", "a binary file or UTF-16", "Save it as plain text."))
    return data.removeprefix(b"\xef\xbb\xbf")


def _blocks(data: bytes) -> Iterator[tuple[bytes, int]]:
    """Cut a file into blocks of whole rows, each with the number of its first row: what bounds the memory."""
    if b"\n" not in data:
        data = data.replace(b"\r", b"\n")
    start, row = 0, 1
    while start < len(data):
        end = data.find(b"\n", start + BLOCK) + 1 or len(data)
        block = data[start:end].replace(b"\r\n", b"\n").replace(b"\r", b"\n")
        if not block.endswith(b"\n"):
            block += b"\n"
        yield block, row
        start, row = end, row + block.count(b"\n")


def _records(block: bytes, row: int, counts: dict[str, int], where: str) -> tuple[bytes, np.ndarray]:
    """Return the data records of a block, all of 26 fields, and their rows in the file; everything is counted."""
    letters = np.frombuffer(block, np.uint8)
    if not block.isascii():
        letters = np.where(letters < 128, letters, np.uint8(ord("?")))
    ends = np.flatnonzero(letters == ord("\n"))
    length = np.diff(ends, prepend=-1)
    use = np.add.reduceat(letters > ord(" "), ends - length + 1, dtype=np.int32) > 0
    counts["rows"] += len(ends)
    counts["blank"] += int((~use).sum())
    if counts["records"] == counts["heading"] == 0 and use.any():
        first = int(np.argmax(use))
        line = block[ends[first] - length[first] + 1 : ends[first]]
        use[first] = not _is_heading(line.decode("utf-8", errors="replace"), f"{where} row {row + first}")
        counts["heading"] += int(not use[first])
    counts["records"] += int(use.sum())
    if not use.all():
        letters, length = letters[np.repeat(use, length)], length[use]
    rows = row + np.flatnonzero(use)
    return (_even(letters, length, rows, where) if len(rows) else b""), rows


def _is_heading(line: str, where: str) -> bool:
    """Tell whether the first row names the columns; refuse what is no MGD77T data."""
    cells = [cell.strip() for cell in line.split("\t")]
    if len(cells) < 2:
        raise SurveyError(mistake(where, "must be a tab-delimited MGD77T record", cells[0]))
    if cells[1] in ("FORMAT_77", "MGD77T"):
        raise SurveyError(mistake(where, "must be a data record", "a header record", "Name the .m77t file."))
    named = [cell for cell in cells[1:6] if cell]
    return bool(named) and all(re.fullmatch("[A-Za-z_ ]+", cell) for cell in named)


def _even(letters: np.ndarray, length: np.ndarray, rows: np.ndarray, where: str) -> bytes:
    """Give every record its 25 tabs: add those left out, take off those too many at the end."""
    wanted = len(DATA_FIELDS) - 1
    starts = np.concatenate([[0], np.cumsum(length)[:-1]])
    count = np.add.reduceat(letters == ord("\t"), starts, dtype=np.int32)
    if (count > wanted).any():
        # after the 26th tab of a record only tabs and blanks may stand
        nth = np.cumsum(letters == ord("\t"), dtype=np.int32)
        before = np.concatenate([[0], np.cumsum(count, dtype=np.int32)[:-1]])
        beyond = nth - np.repeat(before, length) > wanted
        late = beyond & (letters > ord(" "))
        if late.any():
            k = int(np.searchsorted(starts, np.argmax(late), side="right")) - 1
            place = f"{where} row {rows[k]}"
            raise SurveyError(mistake(place, f"must have at most {wanted + 1} fields", int(count[k]) + 1))
        letters = letters[~beyond | (letters == ord("\n"))]
        count = np.minimum(count, wanted)
    lines = np.flatnonzero(letters == ord("\n"))
    return np.insert(letters, np.repeat(lines, wanted - count), np.uint8(ord("\t"))).tobytes()


def _fields(data: bytes, rows: np.ndarray, where: str, wrong: list[str]) -> dict[str, np.ndarray]:
    """Read the fields that are wanted: numbers, DATE as days and TIME as seconds of the day."""
    table = csv.read_csv(
        pa.BufferReader(data),
        read_options=csv.ReadOptions(column_names=list(DATA_FIELDS)),
        parse_options=csv.ParseOptions(delimiter="\t", quote_char=False, double_quote=False, ignore_empty_lines=False),
        convert_options=csv.ConvertOptions(
            column_types={name: pa.string() for name in READ}, include_columns=list(READ), strings_can_be_null=False
        ),
    )
    text = {name: pc.utf8_trim_whitespace(table[name].combine_chunks()) for name in READ}
    value = {name: _numbers(text[name], name, rows, where, wrong) for name in READ}
    value["DATE"] = _days(value["DATE"], text["DATE"], rows, where, wrong)
    value["TIME"] = _seconds(value["TIME"], text["TIME"], rows, where, wrong)
    return value


def _numbers(cells: pa.Array, name: str, rows: np.ndarray, where: str, wrong: list[str]) -> np.ndarray:
    """Turn a field into numbers, NaN where it is nil; mistakes are added to `wrong`."""
    nil = pc.equal(cells, "")
    given = pc.if_else(nil, None, cells)
    try:
        numbers = pc.cast(given, pa.float64()).fill_null(np.nan).to_numpy(zero_copy_only=False)
    except pa.ArrowInvalid:
        numbers = np.array([_number(cell) for cell in given.to_pylist()], float)
    odd = ~np.isfinite(numbers) & ~nil.to_numpy(zero_copy_only=False)
    must = "must be a number, or nil where it is not known"
    if name in LIMITS and not odd.any():
        low, high = LIMITS[name]
        odd = (numbers < low) | (numbers > high)
        must = f"must be between {low:g} and {high:g}"
    for k in np.flatnonzero(odd)[: MOST_MISTAKES - len(wrong)]:
        wrong.append(mistake(f"{where} row {rows[k]}, {name}", must, cells[k].as_py()))
    return np.where(odd, np.nan, numbers)


def _number(cell: str | None) -> float:
    try:
        return np.nan if cell is None or "_" in cell else float(cell)
    except ValueError:
        return np.nan


def _wrapped(lon: np.ndarray) -> np.ndarray:
    """Bring longitudes into [-180, 180); those inside keep every digit."""
    return np.where((lon >= -180.0) & (lon < 180.0), lon, (lon + 180.0) % 360.0 - 180.0)


def _days(date: np.ndarray, cells: pa.Array, rows, where: str, wrong: list[str]) -> np.ndarray:
    """Turn YYYYMMDD into days, as datetime64[ns]."""
    known = np.isfinite(date) & (date >= 0) & (date < 1e8)
    number = np.where(known, date, 19700101).astype(np.int64)
    year, month, day = number // 10000, number // 100 % 100, number % 100
    good = (number == np.where(known, date, 19700101)) & (year >= 1900) & (year < 2262)
    good &= (month >= 1) & (month <= 12) & (day >= 1)
    first = (np.where(good, year, 1970) - 1970).astype("datetime64[Y]").astype("datetime64[M]")
    first = first + np.where(good, month - 1, 0).astype("timedelta64[M]")
    found = first.astype("datetime64[D]") + np.where(good, day - 1, 0).astype("timedelta64[D]")
    good &= found.astype("datetime64[M]") == first
    odd = np.isfinite(date) & ~(good & known)
    for k in np.flatnonzero(odd)[: MOST_MISTAKES - len(wrong)]:
        wrong.append(mistake(f"{where} row {rows[k]}, DATE", "must be a date as YYYYMMDD", cells[k].as_py()))
    return np.where(known & good, found.astype("datetime64[ns]"), np.datetime64("NaT"))


def _seconds(time: np.ndarray, cells: pa.Array, rows, where: str, wrong: list[str]) -> np.ndarray:
    """Turn HHMM with decimal minutes into seconds of the day; 2400 is the end of the day."""
    hour = np.floor(time / 100.0)
    minute = time - 100.0 * hour
    odd = (time < 0) | (minute >= 60.0) | (hour > 24) | ((hour == 24) & (minute > 0))
    for k in np.flatnonzero(odd)[: MOST_MISTAKES - len(wrong)]:
        must = "must be hours and minutes as HHMM, with decimals of a minute"
        wrong.append(mistake(f"{where} row {rows[k]}, TIME", must, cells[k].as_py()))
    seconds = 60.0 * minute
    if np.any(minute[np.isfinite(minute)] % 1.0):
        point = pc.find_substring(cells, ".").to_numpy(zero_copy_only=False)
        length = pc.utf8_length(cells).to_numpy(zero_copy_only=False)
        decimals = np.where(point >= 0, length - point - 1, 0)
        # fewer than four may be exact tenths of a second whose zeros were left out
        decimals = np.where(decimals >= 4, decimals, 9)
        whole = np.rint(seconds)
        seconds = np.where(np.abs(seconds - whole) <= 30.0 * 10.0**-decimals + 1e-9, whole, seconds)
    return 3600.0 * hour + seconds


# -- writing ---------------------------------------------------------------------------------------------------------


def as_mgd77t(table: pd.DataFrame, survey_id: str) -> bytes:
    """Write corrected readings as the text of a data file (.m77t).

    Parameters
    ----------
    table : pandas.DataFrame
        ``time_utc``, ``sensor_latitude_deg``, ``sensor_longitude_deg``, ``total_field_nt``; and, where there are such,
        ``diurnal_nt``, ``anomaly_nt``, ``sensor_depth_m``, ``water_depth_m``, ``flags``, ``line``. NaN becomes nil.
    survey_id : str
        The data center's or the institution's identifier of the survey.

    Returns
    -------
    bytes
        ASCII: a row of column names, then one record a reading, in order of time, tabs at the end left out.

    Notes
    -----
    The format has one correction of the magnetic field, MAG_DICORR, which is added: it is minus the diurnal term, and
    MAG_TOT = total field + MAG_DICORR; both are left as observed and nil where there is no diurnal term. MAG_RES is the
    anomaly with *all* terms taken off, so MAG_TOT - MAG_RES is main field + heading effect + level. Positions are those
    of the sensor. A rejected reading keeps its value with MAG_QUALCO 5 (suspected by the originator).

    """
    table = table.sort_values("time_utc", kind="stable")
    pieces = [_data_records(table.iloc[k : k + PIECE], _plain(survey_id)) for k in range(0, len(table), PIECE)]
    return b"".join([("\t".join(DATA_FIELDS) + "\n").encode("ascii"), *pieces])


def _data_records(table: pd.DataFrame, survey_id: str) -> bytes:
    """Write one record for each row."""
    n = len(table)
    total = np.round(_column(table, "total_field_nt"), 4)
    correction = -np.round(_column(table, "diurnal_nt"), 4)
    date, time = _date_and_time(table["time_utc"].to_numpy())
    given = np.isfinite(total)
    quality = np.where(given, GOOD, 0)
    if "flags" in table:
        quality[given & _rejected(table["flags"].to_numpy())] = SUSPECTED
    placed = np.isfinite(_column(table, "sensor_latitude_deg"))
    columns = {
        "SURVEY_ID": pa.array([survey_id] * n, pa.string()),
        "TIMEZONE": pa.array(["0"] * n, pa.string()),
        "DATE": date,
        "TIME": time,
        "LAT": _decimal(_column(table, "sensor_latitude_deg"), 7),
        "LON": _decimal(_column(table, "sensor_longitude_deg"), 7),
        "POS_TYPE": _code(np.where(placed, INTERPOLATED, 0)),
        "CORR_DEPTH": _decimal(_column(table, "water_depth_m"), 2),
        "MAG_TOT": _decimal(total + np.nan_to_num(correction), 4),
        "MAG_RES": _decimal(_column(table, "anomaly_nt"), 4),
        "MAG_DICORR": _decimal(np.where(given, correction, np.nan), 4),
        "MAG_SDEPTH": _decimal(np.where(given, _column(table, "sensor_depth_m"), np.nan), 0),
        "MAG_QUALCO": _code(quality),
    }
    if "line" in table:
        # a line's name is cleaned once, not once a reading
        number, names = pd.factorize(table["line"])
        clean = pa.array([*(_plain(name) for name in names), ""], pa.string())
        columns["LINEID"] = clean.take(pa.array(np.where(number < 0, len(names), number)))
    empty = pa.array([""] * n, pa.string())
    cells = [columns.get(name, empty) for name in DATA_FIELDS]
    joined = pc.binary_join_element_wise(*cells, "\t", null_handling="replace", null_replacement="")
    joined = pc.utf8_rtrim(joined, characters="\t")
    whole = pc.binary_join(pa.ListArray.from_arrays([0, n], joined), "\n")[0]
    return whole.as_buffer().to_pybytes() + b"\n"


def as_header(table: pd.DataFrame, survey_id: str, fields: dict[str, str] | None = None) -> bytes:
    """Write the header (.h77t) that goes with `as_mgd77t`.

    Parameters
    ----------
    table : pandas.DataFrame
        As for `as_mgd77t`.
    survey_id : str
    fields : dict of str to str, optional
        Further fields by their MGD77T name (``INST_SRC``, ``PLATFORM``, ``CHIEF``, ``DATE_CREAT``, ...); they outrank
        what is worked out here. ADD_DOC is put before the statements that always stand there.

    Returns
    -------
    bytes
        ASCII: a row of column names and one record.

    Raises
    ------
    KeyError
        For a field that MGD77T has not: a fault of ours.

    """
    fields = dict(fields or {})
    unknown = set(fields) - set(HEADER_FIELDS)
    if unknown:
        raise KeyError(f"no MGD77T header field: {sorted(unknown)}")
    lat, lon = _column(table, "sensor_latitude_deg"), _column(table, "sensor_longitude_deg")
    placed = np.isfinite(lat) & np.isfinite(lon)
    depth, total = _column(table, "water_depth_m"), _column(table, "total_field_nt")
    known = {
        "SURVEY_ID": survey_id,
        "FORMAT_77": "MGD77T",
        # bathymetry, magnetics, gravity, high-resolution and deep seismics: 5 in the file, 0 not specified
        "PARAMS_CO": f"{5 * int(np.isfinite(depth).any())}{5 * int(np.isfinite(total).any())}000",
        "PLAT_TYPCO": SURFACE_SHIP,
        "PLAT_TYP": "SHIP",
        "POS_INFO": "WGS 84; positions are those of the towed sensor",
        "MAG_TOWDST": "0",
        "M_REFFL_CO": NO_GENERATION_CODE,
        "MAG_REFFLD": "IGRF-14",
        "MAG_RF_MTH": "IGRF-14 at the sensor's position, depth and time of every reading",
    }
    time = table["time_utc"].to_numpy()
    if len(time):
        known["DATE_DEP"], known["DATE_ARR"] = (
            str(t.astype("datetime64[D]")).replace("-", "") for t in (time.min(), time.max())
        )
    if len(time) > 1:
        known["MAG_SRATE"] = f"{np.median(np.diff(np.sort(time))) / np.timedelta64(1, 's'):g}"
    if placed.any():
        west, east = longitude_span(lon[placed])
        # hundredths of a degree, rounded outwards so that the box holds every position
        low = {"LAT_BOTTOM": lat[placed].min(), "LON_LEFT": west}
        high = {"LAT_TOP": lat[placed].max(), "LON_RIGHT": east}
        known |= {name: f"{np.floor(round(100 * edge, 4)) / 100 + 0.0:.2f}" for name, edge in low.items()}
        known |= {name: f"{np.ceil(round(100 * edge, 4)) / 100 + 0.0:.2f}" for name, edge in high.items()}
        codes = ten_degree_codes(lat[placed], lon[placed])
        known |= {"IDS_10_NUM": str(len(codes)), "IDS_10DEG": ",".join([*codes, "9999"])}
    said = (
        "LAT and LON are of the towed magnetic sensor. MAG_DICORR is minus the external variation from base stations, "
        "added to MAG_TOT where given. MAG_RES is MAG_TOT less IGRF-14, heading effect and levelling correction of the "
        "line."
    )
    known["ADD_DOC"] = f"{fields.pop('ADD_DOC', '')} {said}"
    known |= {name: text for name, text in fields.items() if text}
    cells = [_plain(known.get(name, "")) for name in HEADER_FIELDS]
    return ("\t".join(HEADER_FIELDS) + "\n" + "\t".join(cells).rstrip("\t") + "\n").encode("ascii")


def ten_degree_codes(lat: np.ndarray, lon: np.ndarray) -> list[str]:
    """List the ten-degree squares that positions lie in.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees, finite.

    Returns
    -------
    list of str
        Sorted; quadrant (1 NE, 3 SE, 5 SW, 7 NW), tens of latitude, hundreds and tens of longitude. The pole belongs to
        the squares that touch it (8), the meridian of 180 degrees to those beside it (17).

    """
    lon = _wrapped(np.asarray(lon, float))
    north, east = np.asarray(lat) >= 0, lon >= 0
    quadrant = np.where(north, np.where(east, 1, 7), np.where(east, 3, 5))
    tens_lat = np.minimum(np.abs(lat) // 10, 8).astype(int)
    tens_lon = np.minimum(np.abs(lon) // 10, 17).astype(int)
    return [str(code) for code in np.unique(1000 * quadrant + 100 * tens_lat + tens_lon)]


def longitude_span(lon: np.ndarray) -> tuple[float, float]:
    """Return the western and the eastern edge of longitudes; across 180 degrees west is the larger number.

    Parameters
    ----------
    lon : array of float, shape (n,)
        Degrees, finite, n at least 1.

    Returns
    -------
    west, east : float
        The ends of the shortest arc that holds them all.

    """
    ordered = np.unique(_wrapped(np.asarray(lon, float)))
    widest = int(np.argmax(np.diff(np.append(ordered, ordered[0] + 360.0))))
    return float(ordered[(widest + 1) % len(ordered)]), float(ordered[widest])


def _column(table: pd.DataFrame, name: str) -> np.ndarray:
    return table[name].to_numpy().astype(float) if name in table else np.full(len(table), np.nan)


def _rejected(flags: np.ndarray) -> np.ndarray:
    flags = flags.astype(np.uint32)
    out, kept = (flags & np.uint32(REJECTING)) != 0, (flags & np.uint32(Flag.EDITED_IN)) != 0
    return out & (~kept | ((flags & np.uint32(Flag.EDITED_OUT)) != 0))


def _date_and_time(time_utc: np.ndarray) -> tuple[pa.Array, pa.Array]:
    """Return DATE and TIME as text; times to the millisecond, minutes to six decimals."""
    ms = np.floor_divide(time_utc.astype("datetime64[ns]").astype(np.int64) + 500_000, 1_000_000)
    day, within = np.divmod(ms, 86_400_000)
    days, number = np.unique(day, return_inverse=True)
    dates = pa.array([str(np.datetime64(int(one), "D")).replace("-", "") for one in days], pa.string())
    minutes = pa.array([f"{hour:02d}{minute:02d}" for hour in range(24) for minute in range(60)])
    parts, place = np.unique(within % 60_000, return_inverse=True)
    fractions = pa.array([f"{part / 60_000:.6f}"[1:] if part else "" for part in parts.tolist()], pa.string())
    clock = pc.binary_join_element_wise(
        minutes.take(pa.array(within // 60_000)), fractions.take(pa.array(place.ravel())), ""
    )
    return dates.take(pa.array(number.ravel())), clock


def _decimal(values: np.ndarray, decimals: int) -> pa.Array:
    """Write numbers without an exponent and without zeros that say nothing; NaN is nil."""
    rounded = np.round(values, decimals) + 0.0  # no "-0"
    rounded[np.abs(rounded) < 1e-6] = 0.0  # smaller ones would be written with an exponent
    return pc.cast(pa.array(rounded, from_pandas=True), pa.string())


def _code(values: np.ndarray) -> pa.Array:
    """Write codes; 0 is nil."""
    return pc.cast(pa.array(values, mask=values == 0), pa.string())


def _plain(text: object) -> str:
    """Return a text as one line of ASCII without tabs."""
    bare = (letter for letter in unicodedata.normalize("NFKD", str(text)) if not unicodedata.combining(letter))
    plain = "".join(bare).encode("ascii", "replace").decode()
    return " ".join(re.sub(r"[\x00-\x1f\x7f]", " ", plain).split())
