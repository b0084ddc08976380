"""IAGA-2002 against its description, real observatory files, and plain splitting.

Description: INTERMAGNET technical manual, appendix on IAGA-2002; NCEI's page on the format. Real files: Boulder
observatory, U.S. Geological Survey (public domain).
"""

import gzip

import numpy as np
import pandas as pd
import pytest

from steps.errors import SurveyError
from steps.formats.iaga2002 import centre_shift, read_iaga2002

HEADER = {
    "Format": "IAGA-2002",
    "Source of Data": "An institute",
    "Station Name": "Somewhere",
    "IAGA CODE": "XYZ",
    "Geodetic Latitude": "-10.125",
    "Geodetic Longitude": "254.764",
    "Elevation": "12",
    "Reported": "XYZF",
    "Sensor Orientation": "XYZF",
    "Digital Sampling": "1 second",
    "Data Interval Type": "1-minute (00:30-01:29)",
    "Data Type": "variation",
}


def head(elements="XYZF", **changes):
    """Header records of 70 characters; a label that is None is left out."""
    changes = {name.replace("_", " "): text for name, text in changes.items()}
    labels = HEADER | {"Reported": elements} | changes
    rows = [f" {label:<23}{text:<45}|" for label, text in labels.items() if text is not None]
    names = "".join(f"   {'XYZ' + element:<7}" for element in elements)
    return [*rows, " # Any comment.".ljust(69) + "|", f"DATE       TIME         DOY  {names}".ljust(69) + "|"]


def record(time, *values, doy=None):
    """One record; `time` as text, day of year worked out unless given."""
    doy = doy or f"{pd.Timestamp(time[:10]).day_of_year:03d}"
    return f"{time} {doy}   " + "".join(f" {value:9.2f}" for value in values)


ONE = record("2024-03-01 00:00:00.000", 20000, -3000.5, 40000, 45000.25)


def written(folder, *rows, end="\n", name="xyz20240301vmin.min"):
    path = folder / name
    path.write_bytes(end.join([*rows, ""]).encode("latin-1"))
    return path


# -- real files ------------------------------------------------------------------------------------------------------

# rows of the file, records, records without a total field (the folder's README: 50 of 120 rows missing in one file)
REAL = {
    "bou20141101vmin.min": (1465, 1440, 0),
    "bou20141103vmin.min": (1465, 1440, 0),
    "bou20141105vmin.min": (1465, 1440, 0),
    "BOU201601adj.min": (41614, 41592, 0),
    "bou20181024_XYZF_vmin.min": (142, 120, 50),
    "BOU20200101vsec.sec": (919, 901, 0),
}


@pytest.mark.parametrize("name", REAL)
def test_every_record_of_a_real_file_is_read_as_plain_splitting_reads_it(shared, name):
    path = shared / "iaga2002" / name
    header, table = read_iaga2002(path)
    rows, records, missing = REAL[name]
    assert header.counts["rows"] == rows
    assert header.counts["records"] == records == rows - header.counts["header"]
    assert header.counts["missing"] == missing
    assert sum(header.counts[what] for what in ("blank", "repeated", "contradictory", "backwards")) == 0
    lines = path.read_text().splitlines()
    expected = [(k, line.split()) for k, line in enumerate(lines, start=1) if line[:2] == "20"]
    times = pd.to_datetime([f"{words[0]} {words[1]}" for _, words in expected])
    assert (table["time_utc"].to_numpy() == times.to_numpy()).all()
    total = np.array([float(words[6]) for _, words in expected])
    np.testing.assert_array_equal(table["total_field_nt"], np.where(total >= 88888, np.nan, total))
    assert table["source_row"].tolist() == [k for k, _ in expected]
    assert (header.code, header.name, header.elevation_m, header.centre_shift_s) == ("BOU", "Boulder", 1682.0, 0.0)
    assert header.latitude_deg == 40.137
    assert header.longitude_deg == pytest.approx(-105.237, abs=0.0011)  # 254.763 or 254.764 in the files
    assert header.elements in (("X", "Y", "Z", "F"), ("H", "D", "Z", "F"), ("H", "E", "Z", "F"))


def test_total_field_from_the_components_of_a_real_file_is_the_one_reported(shared, tmp_path):
    # the vector's baseline is 6.6 nT off the scalar instrument's and wanders by 0.2 nT; the field itself by 8.1 nT
    path = shared / "iaga2002" / "BOU201601adj.min"
    _, reported = read_iaga2002(path)
    text = path.read_text()
    assert text.count("99999.00") == 0
    lines = [line if line[:2] != "20" else line[:60] + "  88888.00" for line in text.splitlines()]
    header, computed = read_iaga2002(written(tmp_path, *lines))
    assert header.total_field_from == "X Y Z"
    difference = computed["total_field_nt"] - reported["total_field_nt"]
    assert difference.std() < 0.03 * reported["total_field_nt"].std()
    assert difference.diff().std() < 0.06 * reported["total_field_nt"].diff().std()
    assert abs(difference.mean()) < 10.0


# -- elements --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("elements", "values", "total", "source"),
    [
        ("XYZF", (20000, -3000, 40000, 45000.25), 45000.25, "F"),
        ("FXYZ", (45000.25, 20000, -3000, 40000), 45000.25, "F"),
        ("DHIF", (60, 20000, 3600, 45000.25), 45000.25, "F"),
        ("XYZS", (20000, -3000, 40000, 45000.25), 45000.25, "S"),
        # G is no total field: what is left is the vector's
        ("XYZG", (2000, 3000, 6000, 45000.25), 7000.0, "X Y Z"),
        ("HDZG", (3000, 600, 4000, 1.0), 5000.0, "H Z"),
        ("DHZG", (600, 3000, 4000, 1.0), 5000.0, "H Z"),
        ("HEZG", (2000, 3000, 6000, 1.0), 7000.0, "H E Z"),
        ("DHIG", (600, 20000, 60 * 60, 1.0), 40000.0, "H I"),  # inclination 60 degrees: cos = 1/2
        # a component that is missing leaves no total field
        ("XYZG", (2000, 99999, 6000, 1.0), np.nan, "X Y Z"),
    ],
)
def test_total_field_from_what_is_reported(tmp_path, elements, values, total, source):
    header, table = read_iaga2002(written(tmp_path, *head(elements), record("2024-03-01 00:00:00.000", *values)))
    assert table["total_field_nt"][0] == pytest.approx(total, abs=1e-9, nan_ok=True)
    assert header.total_field_from == source
    assert header.elements == tuple(elements)


def test_missing_and_not_observed_are_no_values_and_holes_in_f_are_not_filled_from_components(tmp_path):
    rows = [record(f"2024-03-01 00:0{k}:00.000", 20000, 0, 40000, f) for k, f in enumerate([99999.0, 88888.0, 45000.0])]
    header, table = read_iaga2002(written(tmp_path, *head(), *rows))
    np.testing.assert_array_equal(table["total_field_nt"], [np.nan, np.nan, 45000.0])
    assert header.counts["missing"] == 2
    nothing = [row[:60] + f" {88888:9.2f}" for row in rows]
    header, table = read_iaga2002(written(tmp_path, *head(), *nothing))
    np.testing.assert_allclose(table["total_field_nt"], np.hypot(20000, 40000))
    assert header.total_field_from == "X Y Z"


# -- columns ---------------------------------------------------------------------------------------------------------


def test_records_are_read_by_columns_so_that_full_fields_may_abut(tmp_path):
    row = "2024-03-01 00:00:00.000 061   " + "-123456.78 123456.78-987654.32  45000.25"
    assert len(row) == 70
    _, table = read_iaga2002(written(tmp_path, *head("UVWF"), row))
    assert table["total_field_nt"].tolist() == [45000.25]


def test_numbers_read_by_columns_are_those_of_the_standard_library(tmp_path):
    rng = np.random.default_rng(3)
    values = np.round(rng.uniform(-1, 1, 4000) * 10.0 ** rng.integers(-2, 5, 4000), 2)
    values[:5] = [0.0, -0.01, 88887.99, -0.5, 7.0]
    start = pd.Timestamp("2024-03-01")
    rows = [
        record(f"{start + pd.Timedelta(k, 'min'):%Y-%m-%d %H:%M:%S}.000", 1, 1, 1, value)
        for k, value in enumerate(values)
    ]
    _, table = read_iaga2002(written(tmp_path, *head(), *rows))
    np.testing.assert_array_equal(table["total_field_nt"], [float(f"{value:.2f}") for value in values])


@pytest.mark.parametrize(
    "row",
    [
        ONE.replace("061   ", "061    "),  # a column too far right, as in real files
        ONE.replace("061   ", "061  "),
        "2024-03-01 00:00:00.000 061     20000.000   -3000.500  40000.0  45000.25",
        "2024-03-01 00:00:00.000 061   20000.00 -3000.50 40000.00 45000.25",
        ONE + "   ",
    ],
)
def test_a_record_off_its_columns_is_split_at_its_blanks(tmp_path, row):
    later = ONE.replace("00:00:00", "00:01:00")
    _, table = read_iaga2002(written(tmp_path, *head(), row, later))
    assert table["total_field_nt"].tolist() == [45000.25, 45000.25]


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_line_ends_blank_rows_packing_and_marks_make_no_difference(tmp_path, end):
    rows = [*head(), ONE, "", " " * 70, record("2024-03-01 00:01:00.000", 1, 2, 3, 45001), ""]
    header, table = read_iaga2002(written(tmp_path, *rows, end=end))
    assert table["total_field_nt"].tolist() == [45000.25, 45001.0]
    assert header.counts["rows"] == 14 + 5 == header.counts["header"] + header.counts["blank"] + 2
    n = header.counts["header"]
    assert table["source_row"].tolist() == [n + 1, n + 4]
    packed = tmp_path / "packed.min.gz"
    packed.write_bytes(gzip.compress(("\ufeff" + end.join(rows)).encode("utf-8")))
    pd.testing.assert_frame_equal(read_iaga2002(packed)[1], table)


# -- times -----------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("time", "instant"),
    [
        ("2024-02-29 24:00:00.000", "2024-03-01T00:00:00"),
        ("2016-12-31 23:59:60.000", "2017-01-01T00:00:00"),  # a leap second (IERS Bulletin C 52)
        ("2024-02-29 23:59:59.875", "2024-02-29T23:59:59.875"),
        ("1965-01-01 00:00:00.000", "1965-01-01T00:00:00"),
    ],
)
def test_times(tmp_path, time, instant):
    _, table = read_iaga2002(written(tmp_path, *head(), record(time, 1, 2, 3, 45000)))
    assert table["time_utc"][0] == pd.Timestamp(instant)


@pytest.mark.parametrize(
    ("interval", "shift"),
    [
        ("1-minute (00:30-01:29)", 0.0),
        ("Average 1-Minute (00:30-01:29)", 0.0),
        ("filtered 1-minute (00:15-01:45)", 0.0),
        ("1-minute (00:00-00:59)", 30.0),
        ("1-minute (00:00 - 00:59)", 30.0),
        ("1-minute (59:30-00:29)", 0.0),
        ("1-hour (00-59)", 1800.0),
        ("1-hour (30-29)", 0.0),
        ("1-second instantaneous", 0.0),
        ("", 0.0),
    ],
)
def test_the_middle_of_a_sample(tmp_path, interval, shift):
    assert centre_shift(interval) == shift
    header, table = read_iaga2002(written(tmp_path, *head(Data_Interval_Type=interval), ONE))
    assert table["time_utc"][0] == pd.Timestamp("2024-03-01") + pd.Timedelta(shift, "s")
    assert header.centre_shift_s == shift


def test_records_out_of_order_or_repeated_are_put_right_and_counted(tmp_path):
    def at(minute, value):
        return record(f"2024-03-01 00:{minute:02d}:00.000", 1, 2, 3, value)

    rows = [at(5, 45005), at(6, 45006), at(3, 45003), at(5, 45005), at(6, 99999), at(6, 45007), at(7, 99999)]
    header, table = read_iaga2002(written(tmp_path, *head(), *rows, at(7, 99999)))
    np.testing.assert_array_equal(table["total_field_nt"], [45003, 45005, 45006, np.nan])
    counts = header.counts
    assert (counts["backwards"], counts["repeated"], counts["contradictory"]) == (1, 2, 2)
    assert counts["records"] == len(table) + counts["repeated"] + counts["contradictory"]


# -- headers ---------------------------------------------------------------------------------------------------------


def test_headers_of_many_kinds(tmp_path):
    few = head(**{name: None for name in HEADER if name not in ("Format", "IAGA CODE", "Reported")})
    header, table = read_iaga2002(written(tmp_path, *few, ONE))
    assert (header.latitude_deg, header.longitude_deg, header.elevation_m) == (None, None, None)
    assert len(table) == 1
    loose = [
        " Format: IAGA-2002",
        "Station Name Besan\xe7on   |",
        " IAGA Code  XYZ",
        "  geodetic latitude  47.25",
        " GEODETIC LONGITUDE -180.0 |",
        " Elevation 99999.00",
        " Publication date  2015-06-01 |",
        "DATE TIME DOY XYZX XYZY XYZZ XYZF",
    ]
    header, table = read_iaga2002(written(tmp_path, *loose, ONE))
    assert (header.latitude_deg, header.longitude_deg, header.elevation_m) == (47.25, -180.0, None)
    assert header.code == "XYZ"
    assert table["source_row"].tolist() == [9]
    assert table["total_field_nt"].tolist() == [45000.25]
    header, _ = read_iaga2002(written(tmp_path, *head(Geodetic_Longitude="-73.5"), ONE))
    assert header.longitude_deg == -73.5


@pytest.mark.parametrize(
    ("rows", "sentence"),
    [
        ([" "], r"vmin.min: must be IAGA-2002\. Got an empty file\."),
        (["\x00\x01"], r"vmin.min: must be IAGA-2002 text\. Got a binary file"),
        (["time,field", "1,2"], r"must be IAGA-2002: a Format record first.* Got time,field\."),
        ([ONE], r"must be IAGA-2002: a Format record first"),
        ([*head()[1:], ONE], r"must be IAGA-2002: a Format record first"),
        (head(), r"vmin.min: must hold at least one record\. Got none\."),
        (head(Geodetic_Latitude="north"), r"geodetic latitude: must be a number\. Got north\."),
        (head(Geodetic_Latitude="91"), r"geodetic latitude: must be between -90 and 90\. Got 91\."),
        (head("XYZ"), r"row 14: must name DATE, TIME, DOY and four elements\. Got XYZX XYZY XYZZ\."),
        (head(Reported="HDZF"), r"row 14: must name the elements that Reported tells.* Got HDZF and XYZX XYZY"),
        ([*head("UVWG"), ONE], r"must report F, or X Y Z, H E Z, H Z, or H I\. Got U V W G\."),
        ([*head(), ONE, ONE[:31]], r"row 16: must be a record of 70 characters\..* The file is cut off"),
        ([*head(), ONE[:31], ONE], r"row 15: must be a record of 70 characters\..* Mend or remove the row\."),
        ([*head(), ONE[:61]], r"row 15: must hold four values from column 31\. Got 20000\.00 +-3000\.50 +40000\.00\."),
        ([*head(), ONE + " 1.00"], r"row 15: must hold four values from column 31"),
        ([*head(), ONE.replace("45000.25", "45000,25")], r"row 15: must hold numbers from column 31\. Got 45000,25\."),
        ([*head(), ONE.replace("45000.25", "     nan")], r"row 15: must hold numbers from column 31\. Got nan\."),
        ([*head(), ONE.replace("-3000.50", "-30-0.50")], r"row 15: must hold numbers .* Got -30-0\.50\."),
        ([*head(), ONE.replace("2024-03-01", "2023-02-29")], r"row 15: must start with a date .* Got 2023-02-29 00:00"),
        ([*head(), ONE.replace("00:00:00", "24:00:01")], r"row 15: must start with a date and time"),
        ([*head(), ONE.replace("2024-03-01", "01/03/2024")], r"row 15: must start with a date and time"),
        (
            [*head(), ONE, record("2024-03-07 00:00:00.000", 1, 2, 3, 4, doy="061")],
            r"row 16, DOY: must be 067 for 2024-03-07\. Got 061\.",
        ),
    ],
)
def test_a_mistake_is_one_sentence_with_file_and_row(tmp_path, rows, sentence):
    with pytest.raises(SurveyError, match=sentence) as caught:
        read_iaga2002(written(tmp_path, *rows))
    assert "\n" not in str(caught.value)


def test_a_cut_gzip_file_and_a_bomb_are_refused(tmp_path):
    packed = gzip.compress("\n".join([*head(), *[ONE] * 500]).encode())
    (tmp_path / "cut.gz").write_bytes(packed[:-20])
    with pytest.raises(SurveyError, match="must be a whole gzip file"):
        read_iaga2002(tmp_path / "cut.gz")
    (tmp_path / "bomb.gz").write_bytes(gzip.compress(b" " * 30_000_000))
    with pytest.raises(SurveyError, match="must unpack to under"):
        read_iaga2002(tmp_path / "bomb.gz")
