"""Delimited text of any layout: against the standard library and pandas, and what a broken file is told as."""

import gzip
from datetime import UTC, datetime, timedelta

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from steps.errors import SurveyError
from steps.formats import delimited, timestamps
from steps.formats.delimited import read_delimited
from steps.settings import DelimitedReadings

F = {"total_field_nt": "F"}
POSITION = {"latitude_deg": "lat", "longitude_deg": "lon"}


def spec(**change):
    base = {
        "format": "delimited",
        "files": ["a"],
        "time": {"columns": ["time"]},
        "columns": {"total_field_nt": "F"},
        "clock": {"offset_s": 0.0},
    }
    return DelimitedReadings.model_validate(base | change)


def read(tmp_path, content, columns=F, **change):
    path = tmp_path / "log.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return read_delimited(path, spec(**change), columns)


def sentences(tmp_path, content, columns=F, **change):
    with pytest.raises(SurveyError, match=r"log\.csv") as caught:
        read(tmp_path, content, columns, **change)
    return [text.replace(f"{tmp_path}/", "") for text in caught.value.sentences]


def at(layout, *columns):
    return {"time": {"columns": columns, "layout": layout}}


EPOCH = at("epoch_s", "time")


def balanced(counts):
    return counts["rows"] == sum(number for name, number in counts.items() if name != "rows")


WANTED = np.array(["2024-05-01T00:00:00.5", "2024-05-01T00:00:01.5"], "datetime64[ns]")


@pytest.mark.parametrize(
    ("content", "change"),
    [
        ("time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n", {}),
        (
            "F;x;time\r\n45000;?;2024-05-01 00:00:00.5Z\r\n45001,25;;2024-05-01 00:00:01.5Z\r\n",
            {"delimiter": ";", "decimal": ","},
        ),
        (
            "logger X\n# remark\nd\tt\tF\n01/05/2024\t00:00:00.500\t45000\n\n01/05/2024\t00:00:01.500\t45001.25",
            {"delimiter": "tab", "skip_rows": 1} | at("%d/%m/%Y %H:%M:%S.%f", "d", "t"),
        ),
        (
            "  2024 122  00:00:00.500   45000\n2024 122 00:00:01.500 \t45001.25 \n",
            {"delimiter": "space", "names": ["y", "j", "t", "F"]} | at("%Y %j %H:%M:%S.%f", "y", "j", "t"),
        ),
        (
            "y,mo,d,t,F\n2024,5,1,0:0:0.5,45000\n2024,5,1,0:0:1.5,45001.25\n",
            at("%Y %m %d %H:%M:%S.%f", "y", "mo", "d", "t"),
        ),
        ("time,F\n1714521600.5,45000\n1714521601.5,45001.25\n", EPOCH),
        ("\ufefftime,F\n20240501000000.5,45000\n20240501000001.5,45001.25\n", at("%Y%m%d%H%M%S.%f", "time")),
        (gzip.compress(b"time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n"), {}),
        ('time,"F"\n"2024-05-01T00:00:00.5","45000"\n2024-05-01T00:00:01.5,45001.25\n', {}),
        ('time,x,F\n2024-05-01T00:00:00.5,"a,b",45000\n2024-05-01T00:00:01.5,3" pipe,45001.25\n', {}),
        (
            "time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n".encode("utf-16"),
            {"encoding": "utf-16"},
        ),
        ("time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n".encode("utf-16"), {}),
        (
            "time,µ,F\n2024-05-01T00:00:00.5,°,45000\n2024-05-01T00:00:01.5,,45001.25\n".encode("latin-1"),
            {"encoding": "latin-1"},
        ),
        ("time,F\n5/1/24 12:00:00.5 AM,45000\n5/1/24 12:00:01.5 AM,45001.25\n", at("%m/%d/%y %I:%M:%S.%f %p", "time")),
        ("time,F\n1 May 2024 00:00:00.5,45000\n1 May 2024 00:00:01.5,45001.25\n", at("%d %b %Y %H:%M:%S.%f", "time")),
        ("time,F\n2024-05-01T02:00:00.5+02:00,45000\n2024-04-30T23:00:01.500-0100,45001.25\n", {}),
        (
            "time,F\n2024-05-01T02:00:00.5+0200,45000\n2024-05-01T02:00:01.5+0200,45001.25\n",
            at("%Y-%m-%dT%H:%M:%S.%f%z", "time"),
        ),
        ("time,F,\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n", {}),  # delimiters at the end differ
        ("time,F\n2024-05-01T00:00:00.5,45000,\n2024-05-01T00:00:01.5,45001.25,\n", {}),
        ("time , F\n 2024-05-01T00:00:00.5 , +45000 \n  2024-05-01T00:00:01.5, 4.500125e4\n", {}),
        ("time,F\r2024-05-01T00:00:00.5,45000\r2024-05-01T00:00:01.5,45001.25\r", {}),  # one character ends a row
        ("time,F\r\n2024-05-01T00:00:00.5,45000\r\n2024-05-01T00:00:01.5,45001.25\r\n\x1a", {}),  # as DOS ended files
        ("\n\n  # who\ntime,F\n  # what\n2024-05-01T00:00:00.5,45000\n   \n2024-05-01T00:00:01.5,45001.25\n\n", {}),
        ("time|F\n2024-05-01 00:00:00.5|45000\n2024-05-01 00:00:01.5|45001.25\n", {"delimiter": "|"}),
        (
            "2024-05-01,00:00:00.5,45000\n2024-05-01,00:00:01.5,45001.25\n",
            {"names": ["d", "t", "F"]} | at("iso", "d", "t"),
        ),
    ],
)
def test_all_these_are_the_same_record(tmp_path, content, change):
    table, counts = read(tmp_path, content, **change)
    assert (table["time"].to_numpy() == WANTED).all()
    assert table["total_field_nt"].tolist() == [45000.0, 45001.25]
    assert counts["records"] == 2
    assert balanced(counts)


def test_rows_are_those_of_the_file(tmp_path):
    table, counts = read(tmp_path, "x\ntime,F\n# x\n2024-05-01T00:00:00,1\n\n2024-05-01T00:00:01,2\n", skip_rows=1)
    assert table["source_row"].tolist() == [4, 6]
    assert counts == {
        "rows": 6,
        "heading": 2,
        "comment": 1,
        "blank": 1,
        "truncated": 0,
        "without time": 0,
        "records": 2,
    }


@pytest.mark.parametrize(
    ("missing", "cells"),
    [
        (["99999"], ["99999", "99999.0", "99999.00", " 9.9999e4"]),
        ([9999.9, ""], ["9999.90", "", "  "]),
        (["", "NaN", "nan", "NA"], ["NaN", " nan ", "NA", ""]),
        (["*****"], ["*****", " ***** "]),
        (["inf"], ["inf"]),
    ],
)
def test_missing_values_are_those_that_are_stated(tmp_path, missing, cells):
    content = "time,F\n" + "".join(f"2024-05-01T00:00:{k:02d},{cell}\n" for k, cell in enumerate(cells))
    table, _ = read(tmp_path, content + "2024-05-01T00:01:00,45000\n", missing=missing)
    assert table["total_field_nt"].isna().tolist() == [True] * len(cells) + [False]


def test_a_row_without_time_is_dropped_and_counted(tmp_path):
    content = "d,t,F\n2024-05-01,00:00:00,1\n,,2\nNA,NaN,3\n2024-05-01,00:00:03,4\n"
    table, counts = read(tmp_path, content, time={"columns": ["d", "t"]})
    assert table["total_field_nt"].tolist() == [1.0, 4.0]
    assert table["source_row"].tolist() == [2, 5]
    assert counts["without time"] == 2
    assert balanced(counts)


@pytest.mark.parametrize(
    ("last", "kept"),
    [
        ("2024-05-01T00:00:01,45000.25", True),  # the file's last line end is missing, no more
        ("2024-05-01T00:00:01,45000.2", False),
        ("2024-05-01T00:00:01,45000", False),
        ("2024-05-01T00:00:01,45", False),
        ("2024-05-01T00:00:01,", False),
        ("2024-05-01T00:00:01", False),
        ("2024-05-01T00:0", False),
        ("2", False),
        ("2024-05-01T00:00:01,9.25", True),
    ],
)
def test_a_last_row_cut_short_is_left_out_and_counted(tmp_path, last, kept):
    table, counts = read(tmp_path, f"time,F\n2024-05-01T00:00:00,45000.75\n{last}")
    assert len(table) == 1 + kept
    assert counts["truncated"] == 1 - kept
    assert balanced(counts)


@pytest.mark.parametrize(
    ("lat", "lon", "degrees"),
    [
        ("-31.5", "181", (-31.5, -179.0)),
        ("31 30.0 S", "179 30.0 W", (-31.5, -179.5)),
        ("S31.5", "E179.5", (-31.5, 179.5)),
        ("31°30'0\"S", "0°30'W", (-31.5, -0.5)),
        ("31d30m S".replace("m", "'"), "0:30:00W", (-31.5, -0.5)),
        ("31° 30′ 00.00″ s", "000 30 e", (-31.5, 0.5)),
        ("-31.5", "359.5", (-31.5, -0.5)),
        ("-0 30", "-0 30", (-0.5, -0.5)),
        ("90", "180", (90.0, -180.0)),
        ("90 00.0 S", "180 00 W", (-90.0, -180.0)),
        ("51.5N", "1.25E", (51.5, 1.25)),
    ],
)
def test_positions(tmp_path, lat, lon, degrees):
    table, _ = read(tmp_path, f"time;lat;lon\n2024-05-01T00:00:00;{lat};{lon}\n", POSITION, delimiter=";")
    np.testing.assert_allclose(table[["latitude_deg", "longitude_deg"]].to_numpy()[0], degrees, rtol=0, atol=1e-12)


def test_a_position_may_be_missing(tmp_path):
    content = "time,lat,lon\n2024-05-01T00:00:00,,\n2024-05-01T00:00:01,51 30 N,1 E\n2024-05-01T00:00:02,NaN,NA\n"
    table, _ = read(tmp_path, content, POSITION)
    assert table["latitude_deg"].isna().tolist() == table["longitude_deg"].isna().tolist() == [True, False, True]


@pytest.mark.parametrize(
    ("lat", "lon", "must"),
    [
        ("91", "1", "lat: must be between -90 and 90 degrees. Got 91"),
        ("5130.25", "1", "Are latitude and longitude swapped, or degrees and minutes written together?"),
        ("1", "361", "lon: must be between -180 and 360 degrees, with a letter up to 180. Got 361"),
        ("1", "-181", "lon: must be between -180 and 360 degrees"),
        ("1", "181 W", "lon: must be between -180 and 360 degrees, with a letter up to 180. Got 181 W"),
        ("12 75.0 N", "1", "lat: must be degrees such as 51.5042 or 51 30.25 N. Got 12 75.0 N"),
        ("12 30 75 N", "1", "must be degrees such as"),
        ("12.5 30 N", "1", "must be degrees such as"),
        ("12.5 E", "1", "must be degrees such as"),
        ("-12.5 S", "1", "must be degrees such as"),
        ("N 12.5 S", "1", "must be degrees such as"),
        ("north", "1", "must be degrees such as"),
        ("1", "51 30 N", "lon: must be degrees such as -17.5042 or 51 30.25 E. Got 51 30 N"),
    ],
)
def test_impossible_positions(tmp_path, lat, lon, must):
    assert must in " ".join(sentences(tmp_path, f"time;lat;lon\n2024-05-01;{lat};{lon}\n", POSITION, delimiter=";"))


# -- times -----------------------------------------------------------------------------------------------------------

LAYOUTS = [
    "%d.%m.%Y %H:%M:%S.%f", "%Y-%m-%dT%H:%M:%S", "%j/%y %H%M%S", "%Y%m%d %H:%M", "%H:%M:%S %d-%m-%Y", "%Y%j%H%M%S.%f",
    "%y%m%d%H%M%S", "%b %d %Y %I:%M:%S %p", "%Y%%%m%%%d %H", "%d-%B-%y %H.%M.%S", "%m/%d/%Y %H:%M:%S.%f UTC",
]  # fmt: skip
INSTANTS = st.datetimes(min_value=datetime(1969, 1, 1), max_value=datetime(2068, 12, 31))


@settings(deadline=None)
@given(st.lists(INSTANTS, min_size=1, max_size=8), st.sampled_from(LAYOUTS), st.booleans())
def test_times_are_read_as_the_standard_library_does(instants, layout, unpadded):
    """Outside check: datetime.strptime, with and without leading zeros."""
    texts = [instant.strftime(layout) for instant in instants]
    if unpadded and "/" in layout and "%j" not in layout:
        texts = ["/".join(part.lstrip("0") or "0" for part in text.split("/")) for text in texts]
    ns, good = timestamps.parse([pa.array(texts)], layout)
    assert good.all()
    expected = np.array([datetime.strptime(text, layout) for text in texts], "datetime64[ns]")
    assert (ns.astype("datetime64[ns]") == expected).all()


@settings(deadline=None)
@given(st.lists(INSTANTS, min_size=1, max_size=8), st.sampled_from(["T", " "]), st.sampled_from(["", "Z", "+05:30"]))
def test_iso_times_are_read_as_the_standard_library_does(instants, between, zone):
    """Outside check: datetime.isoformat and fromisoformat; fractions come and go as they are zero or not."""
    texts = [instant.isoformat(between) + zone for instant in instants]
    ns, good = timestamps.parse([pa.array(texts)], "iso")
    assert good.all()
    read = [datetime.fromisoformat(text) for text in texts]
    expected = [when.astimezone(UTC).replace(tzinfo=None) if when.tzinfo else when for when in read]
    assert (ns.astype("datetime64[ns]") == np.array(expected, "datetime64[ns]")).all()


_ALMOST = st.text(alphabet="0123456789-:/. TZ+", min_size=1, max_size=30)


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.one_of(_ALMOST, INSTANTS.map(lambda t: t.isoformat(" "))), min_size=1, max_size=6),
    st.sampled_from(
        ["iso", "%Y-%m-%d %H:%M:%S.%f", "%Y-%m-%d %H:%M:%S", "%d/%m/%Y %H:%M", "%Y%j %H%M%S", "%y%m%d%H%M%S"]
    ),
)
def test_the_quick_ways_take_what_the_slow_one_takes(texts, layout):
    ns, good = timestamps.parse([pa.array(texts)], layout)
    read = timestamps.slowly(layout)
    for k, text in enumerate(texts):
        try:
            expected = read(text)
        except ValueError:
            assert not good[k], text
        else:
            assert good[k], text
            assert ns[k] == expected.astype(int), text


@pytest.mark.parametrize(
    ("text", "layout", "means"),
    [
        ("2016-12-31 23:59:60", "iso", "2017-01-01"),  # leap second, IERS Bulletin C 52
        ("31/12/2016 23:59:60.5", "%d/%m/%Y %H:%M:%S.%f", "2017-01-01"),
        ("31/12/2016 24:00:00", "%d/%m/%Y %H:%M:%S", "2017-01-01"),
        ("20161231235960", "%Y%m%d%H%M%S", "2017-01-01"),
        ("2024-02-29 12:00:00.123456789", "%Y-%m-%d %H:%M:%S.%f", "2024-02-29T12:00:00.123456789"),
        ("1 2 2024 3:4:5.25", "%d %m %Y %H:%M:%S.%f", "2024-02-01T03:04:05.25"),
        ("2024 366 00", "%Y %j %H", "2024-12-31"),
    ],
)
def test_odd_times_have_a_stated_meaning(text, layout, means):
    ns, good = timestamps.parse([pa.array([text])], layout)
    assert good.all()
    assert ns.astype("datetime64[ns]") == np.array([means], "datetime64[ns]")


@pytest.mark.parametrize(
    ("text", "layout"),
    [
        ("2023-02-29 00:00:00", "iso"),
        ("2023 366 00", "%Y %j %H"),
        ("2024 000 00", "%Y %j %H"),
        ("31/04/2024 00:00", "%d/%m/%Y %H:%M"),
        ("01/05/2024 24:01:00", "%d/%m/%Y %H:%M:%S"),
        ("01/05/2024 24:00:00.5", "%d/%m/%Y %H:%M:%S.%f"),
        ("01/05/2024 12:00:60", "%d/%m/%Y %H:%M:%S"),
        ("01/05/1850 12:00:00", "%d/%m/%Y %H:%M:%S"),
        ("01/05/9850 12:00:00", "%d/%m/%Y %H:%M:%S"),
        ("2024-05-01 00:00:00+15:00", "iso"),
        ("01/05/24 12:00", "%d/%m/%Y %H:%M"),
    ],
)
def test_what_is_no_time_is_not_taken(text, layout):
    assert not timestamps.parse([pa.array([text])], layout)[1].any()


# -- large files, and how rows are cut ---------------------------------------------------------------------------------


@pytest.mark.parametrize("block", [1 << 20, 5000])
def test_large_files_agree_with_pandas(tmp_path, monkeypatch, block):
    """Outside check: pandas.read_csv. Days change, and a few cells are odd but legal."""
    monkeypatch.setattr(delimited, "BLOCK_BYTES", block)
    rng = np.random.default_rng(1)
    n = 20_000
    time = np.datetime64("2024-05-01", "ms") + np.arange(n) * np.timedelta64(10_030, "ms")
    field = np.round(45000 + rng.normal(size=n), 3)
    field[rng.integers(0, n, 50)] = np.nan
    frame = pd.DataFrame({"time": np.datetime_as_string(time), "F": field, "q": 1})
    frame.loc[7, "time"] = "2024-05-01T00:01:10Z"
    path = tmp_path / "log.csv"
    frame.to_csv(path, index=False)
    table, _ = read_delimited(path, spec(), F)
    known = pd.read_csv(path)
    wanted = pd.to_datetime(known["time"].str.rstrip("Z"), format="ISO8601").to_numpy().astype("datetime64[ns]")
    assert (table["time"].to_numpy() == wanted).all()
    np.testing.assert_array_equal(table["total_field_nt"], known["F"])
    assert (table["source_row"] == np.arange(n) + 2).all()


@given(st.lists(st.lists(st.sampled_from(["1", "22.5", " ", "  ", "\t", "x"]), min_size=1, max_size=8), max_size=6))
def test_runs_of_blanks_are_split_as_the_standard_library_does(rows):
    """Outside check: str.split."""
    text = "\n".join("".join(row) for row in rows) + "\n"
    own = delimited._single_blanks(text.encode()).decode().split("\n")
    assert own[:-1] == [" ".join(line.split()) for line in text.split("\n")[:-1]]


# -- mistakes --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("content", "change", "said"),
    [
        ("", {}, "log.csv: must hold records. Got an empty file. Remove it, or copy it again."),
        (" \n\n", {}, "log.csv: must hold records. Got an empty file."),
        ("time,F\n", {}, "log.csv: must hold at least one record. Got none. Remove the file, or mend `skip_rows`."),
        ("# a\n# b\n", {}, "log.csv: must have a heading row after the skipped rows. Got none."),
        ("time,f\n2024-05-01,1\n", {}, "log.csv row 1: must have a column F. Got time, f. Did you mean f?"),
        ("time;F\n2024-05-01;1\n", {}, "row 1: must have a column time. Got time;F. Did you mean time;F?"),
        (
            "zeit,mag\n2024-05-01,1\n",
            {},
            "must have a column F. Got zeit, mag. Mend the name in survey.yaml, or `delimiter`",
        ),
        ("time,F,F\n2024-05-01,1,2\n", {}, "row 1: must name each column once. Got F."),
        (
            "time,F\n2024-05-01,1\n2024-05-02,bad\n",
            {},
            "row 3, F: must be a finite number with a decimal point. Got bad. Add the word to `missing`",
        ),
        ("time,F\n2024-05-01,1_0\n", {}, "row 2, F: must be a finite number with a decimal point. Got 1_0."),
        ("time,F\n2024-05-01,0x1F\n", {}, "row 2, F: must be a finite number with a decimal point. Got 0x1F."),
        ("time,F\n2024-05-01,inf\n", {}, "row 2, F: must be a finite number with a decimal point. Got inf."),
        ("time,F\n2024-05-01,1e400\n", {}, "row 2, F: must be a finite number. Got 1e400."),
        (
            "time;F\n2024-05-01;45000.5\n",
            {"delimiter": ";", "decimal": ","},
            "must be a finite number with a decimal comma. Got 45000.5.",
        ),
        (
            "time;F\n2024-05-01;45000,5\n",
            {"delimiter": ";"},
            "must be a finite number with a decimal point. Got 45000,5.",
        ),
        ("time,F\n2024-05-01,45000,5\n2024-05-01,45000\n", {}, "log.csv row 2: must have 2 cells. Got 3."),
        ("time,F\n2024-05-01,45000\n2024-05-01\n", {}, "log.csv row 3: must have 2 cells. Got 1."),
        ("time,F\n2024-05-01,45000\n2024-05-01,1,2,\n", {}, "log.csv row 3: must have 2 cells. Got 4."),
        (
            'time,F\n"2024-05-01",45000\n"2024-05-01,45000\n',
            {},
            'log.csv row 3: must close its quotes. Got "2024-05-01,45000.',
        ),
        ("time,F\n1.5.2024,45000\n", {}, "row 2, time: must be a time such as 2024-12-31T23:59:58. Got 1.5.2024."),
        (
            "time,F\n2024-13-01,1\n",
            at("%Y-%m-%d", "time"),
            "row 2, time: must be a time such as 2024-12-31 (%Y-%m-%d). Got 2024-13-01.",
        ),
        (
            "time,F\n2023-02-29,1\n",
            at("%Y-%m-%d", "time"),
            "row 2, time: must be a time such as 2024-12-31 (%Y-%m-%d). Got 2023-02-29.",
        ),
        (
            "d,t,F\n2024-05-01,25:00,1\n",
            at("iso", "d", "t"),
            "row 2, d, t: must be a time such as 2024-12-31T23:59:58. Got 2024-05-01 25:00.",
        ),
        ("time,F\n1714521600000,1\n", EPOCH, "must be seconds since 1970, not milliseconds"),
        ("time,F\nnoon,1\n", EPOCH, "row 2, time: must be a finite number"),
        ("time,F\n,1\n,2\n", {}, "log.csv: must hold times in time. Got no value in any row."),
        (
            b"time,F\n2024-05-01,\xb5\n",
            {},
            "row 2: must be UTF-8 text. Got byte 0xb5. Name its `encoding`, such as latin-1.",
        ),
        (b"time,F\n2024-05-01,1", {"encoding": "utf-16"}, "log.csv: must be text in utf-16."),
        (
            b"time,F\n2024-05-01,1\n\0\0\0\n",
            {},
            "row 3: must be text. Got a zero byte. Is it a binary file, or one that was not closed?",
        ),
        (b"PK\x03\x04" + bytes(100), {}, "must be text, or gzipped text. Got a zip archive or a workbook."),
        (
            b"time,F\n" + b"7" * 70_000,
            {},
            "row 2: must have under 65536 characters in a row. Got 70000. Is it a text file?",
        ),
        (gzip.compress(b"time,F\n2024-05-01,1\n" * 999)[:-20], {}, "must be a whole gzip file. Got one cut short."),
        (gzip.compress(b"0" * 50_000_000), {}, "must unpack to under 9.72"),
    ],
)
def test_a_mistake_is_one_sentence(tmp_path, content, change, said):
    told = sentences(tmp_path, content, **change)
    assert any(said in text for text in told), told


def test_mistakes_of_all_columns_are_told_at_once_and_many_are_cut(tmp_path):
    columns = F | {"signal": "s"}
    content = "time,F,s\n2024-05-01,1,1\n" + "soon,far,weak\n" * 30
    told = sentences(tmp_path, content, columns)
    assert len(told) == 20  # of each column ten, and no more than twenty in all
    assert told[9].startswith("log.csv row 12, time: must be a time")
    assert told[10] == "log.csv, time: and 20 more."
    assert told[11].startswith("log.csv row 3, F: must be a finite number")
    told = sentences(tmp_path, "time,F,s\n2024-05-01,1,1\n2024-05-01,far,weak\n", columns)
    assert [text.split(":")[0] for text in told] == ["log.csv row 3, F", "log.csv row 3, s"]


def test_a_row_of_units_is_guessed(tmp_path):
    told = sentences(tmp_path, "time,F\nUTC,nT\n2024-05-01,45000\n2024-05-02,45000\n")
    assert told[-1] == "log.csv: if row 2 holds units, give `names` and count it among `skip_rows`."


# -- rubbish ---------------------------------------------------------------------------------------------------------

_CELLS = st.sampled_from(
    ["2024-05-01T00:00:00", "45000.5", "nan", "", " ", '"', "'", "1e5", "-", "é", "\x7f", "12 30 N"]
)
_ENDS = st.sampled_from([",", ",", "\n", "\n", "\r\n", "\r", "#", ";", "\t"])


@settings(max_examples=100, deadline=None)
@given(
    st.lists(st.tuples(_CELLS, _ENDS), max_size=40),
    st.sampled_from([{}, {"delimiter": "space"}, {"decimal": ",", "delimiter": ";"}]),
)
def test_no_row_is_lost_and_no_rubbish_stops_the_reader(tmp_path_factory, pieces, change):
    path = tmp_path_factory.getbasetemp() / "rubbish.csv"
    text = "".join(a + b for a, b in pieces)
    for content in (text, "time,F,lat\n2024-05-01T00:00:00,45000,12\n" + text):
        path.write_text(content, encoding="utf-8", newline="")
        try:
            table, counts = read_delimited(path, spec(**change), F | {"latitude_deg": "lat"})
        except SurveyError:
            continue
        assert balanced(counts)
        assert counts["rows"] == len(
            content.replace("\r\n", "\n").replace("\r", "\n").rstrip("\n").split("\n")
        ) or content.endswith("\n")
        assert not np.isinf(table["total_field_nt"]).any()
        assert table["latitude_deg"].dropna().between(-90, 90).all()


@settings(max_examples=60, deadline=None)
@given(st.binary(max_size=400))
def test_no_bytes_stop_the_reader(tmp_path_factory, content):
    path = tmp_path_factory.getbasetemp() / "bytes.csv"
    for data in (content, b"time,F\n2024-05-01T00:00:00,45000\n" + content):
        path.write_bytes(data)
        for encoding in ("utf-8", "latin-1", "utf-16"):
            try:
                _, counts = read_delimited(path, spec(encoding=encoding), F)
            except SurveyError:
                continue
            assert balanced(counts)


def test_settings_say_what_cannot_be():
    for change, said in [
        ({"delimiter": ";;"}, "needs a `delimiter` of one character"),
        ({"decimal": ","}, "no letter, digit, sign, quote or decimal mark"),
        ({"encoding": "klingon"}, "needs an `encoding` that is known"),
        ({"names": ["time", "time", "F"]}, "needs each of `names` once; time stands twice"),
        ({"names": ["time", "G"]}, "needs every column that is used in `names`; F is not"),
        (at("%H:%M:%S", "time"), "needs a `layout` with year and day"),
        (at("%Y-%m-%d %Q", "time"), "%Q is none of them"),
        (at("%Y-%m-%d %I:%M", "time"), "needs %p beside %I"),
        (at("epoch_s", "a", "b"), "needs one column with `layout: epoch_s`"),
    ]:
        with pytest.raises(ValueError, match="validation error") as caught:
            spec(**change)
        assert said in str(caught.value)


def test_reading_is_the_same_whatever_the_clock_of_the_machine(tmp_path, monkeypatch):
    import time

    monkeypatch.setenv("TZ", "Pacific/Kiritimati")
    time.tzset()
    try:
        table, _ = read(tmp_path, "time,F\n1714521600.5,45000\n", time={"columns": ["time"], "layout": "epoch_s"})
        assert table["time"].tolist() == [pd.Timestamp("2024-05-01T00:00:00.5")]
        table, _ = read(tmp_path, "time,F\n2024-05-01 00:00:00.5,45000\n")
        assert table["time"].tolist() == [pd.Timestamp(datetime(2024, 5, 1) + timedelta(seconds=0.5))]
    finally:
        monkeypatch.undo()
        time.tzset()
