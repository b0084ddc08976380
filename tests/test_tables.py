"""Tables written by hand: what is accepted, what it means, and what each mistake is told as."""

import gzip
from datetime import UTC, datetime

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steps.errors import SurveyError
from steps.formats import packed, tables

COLUMNS = {"line": "text", "start_utc": "time", "cable_out_m": "number"}


def read(tmp_path, content, columns=COLUMNS, optional=None):
    path = tmp_path / "log.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return tables.read_table(path, columns, optional, name="log.csv")


def sentences(tmp_path, content, **words):
    with pytest.raises(SurveyError, match=r"log\.csv") as caught:
        read(tmp_path, content, **words)
    return caught.value.sentences


def test_a_plain_table_comes_back_typed_with_its_rows(tmp_path):
    table = read(tmp_path, "line,start_utc,cable_out_m\nL1,2024-05-01T03:14:05.25,200\nL2,2024-05-01 04:00,210.5\n")
    assert table["line"].tolist() == ["L1", "L2"]
    assert table["start_utc"].to_numpy().tolist() == [
        np.datetime64("2024-05-01T03:14:05.250", "ns").astype(int),
        np.datetime64("2024-05-01T04:00", "ns").astype(int),
    ]
    assert table["cable_out_m"].tolist() == [200.0, 210.5]
    assert table["row"].tolist() == [2, 3]


@pytest.mark.parametrize(
    "dressed",
    [
        b"\xef\xbb\xbfline,start_utc,cable_out_m\nL1,2024-05-01,200\n",  # byte-order mark
        b"line,start_utc,cable_out_m\r\nL1,2024-05-01,200\r\n",
        b"line,start_utc,cable_out_m\rL1,2024-05-01,200\r",
        b"line , start_utc,  cable_out_m\n  L1 ,2024-05-01 , 200  \n",
        b'line,start_utc,cable_out_m\n"L1","2024-05-01","200"\n',
        b"cable_out_m,line,start_utc\n200,L1,2024-05-01\n",  # another order
        b"line,start_utc,cable_out_m,\nL1,2024-05-01,200,,,\n",  # as spreadsheets write
        b"line,start_utc,cable_out_m\nL1,2024-05-01,200",  # no last line end
        b"line,start_utc,cable_out_m\nL1,2024-05-01T02:00:00+02:00,2e2\n",
    ],
)
def test_dress_does_not_matter(tmp_path, dressed):
    table = read(tmp_path, dressed)
    assert table["line"].tolist() == ["L1"]
    assert table["start_utc"].tolist() == [np.datetime64("2024-05-01", "ns")]
    assert table["cable_out_m"].tolist() == [200.0]
    assert table["row"].tolist() == [2]


def test_comments_and_blank_rows_are_skipped_and_counted_as_rows(tmp_path):
    table = read(tmp_path, "# who\n\nline,start_utc,cable_out_m\n  # why\nL1,2024-05-01,200\n,,\n\nL2,2024-05-02,1\n")
    assert table["row"].tolist() == [5, 8]


def test_a_gzipped_table_is_read_as_it_is(tmp_path):
    assert read(tmp_path, gzip.compress(b"line,start_utc,cable_out_m\nL1,2024-05-01,200\n"))["line"].tolist() == ["L1"]


def test_empty_cells(tmp_path):
    content = "line,start_utc,cable_out_m,note,when_utc,depth\n,2024-05-01,200,,,\n"
    table = read(tmp_path, content, optional={"note": "text", "when_utc": "time", "depth": "number"})
    assert table["line"].tolist() == [None]
    assert table["note"].tolist() == [None]
    assert np.isnat(table["when_utc"].to_numpy()[0])
    assert np.isnan(table["depth"][0])


def test_an_optional_column_may_be_away(tmp_path):
    table = read(tmp_path, "line,start_utc,cable_out_m\nL1,2024-05-01,200\n", optional={"depth": "number"})
    assert list(table) == ["line", "start_utc", "cable_out_m", "depth", "row"]
    assert np.isnan(table["depth"][0])


def test_a_heading_alone_is_a_table_without_rows(tmp_path):
    table = read(tmp_path, "line,start_utc,cable_out_m\n")
    assert len(table) == 0
    assert table["start_utc"].dtype == np.dtype("datetime64[ns]")


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"", "log.csv: must start with a heading row: line, start_utc, cable_out_m. Got an empty file."),
        (b"# only a comment\n", "log.csv: must start with a heading row: line, start_utc, cable_out_m."),
        (
            b"line,start,cable_out_m\n",
            "log.csv row 1: must have a column start_utc. Got line, start, cable_out_m. Rename start.",
        ),
        (b"LINE,start_utc,cable_out_m\n", "log.csv row 1: must have only known columns. Got LINE. Did you mean line?"),
        (
            b"line,start_utc,cable_out_m,colour\n",
            "log.csv row 1: must have only known columns. Got colour. Known here:",
        ),
        (b"line,start_utc,cable_out_m,line\n", "log.csv row 1: must name each column once. Got line."),
        (
            b"line;start_utc;cable_out_m\n",
            "must have a column line. Got line;start_utc;cable_out_m. Is the delimiter a comma?",
        ),
        (
            b"line,start_utc,cable_out_m\nL1,2024-05-01,long\n",
            "log.csv row 2, cable_out_m: must be a number. Got long.",
        ),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01,inf\n", "cable_out_m: must be a finite number. Got inf."),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01,1_0\n", "cable_out_m: must be a finite number. Got 1_0."),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01\n", "row 2, cable_out_m: must be a number. Got an empty cell."),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01,210,5\n", "log.csv row 2: must have 3 cells. Got 4."),
        (b"line,start_utc,cable_out_m\nL1,01/05/2024,2\n", "row 2, start_utc: must be a time such as 2024-05-01T03:14"),
        (b"line,start_utc,cable_out_m\nL1,2023-02-29,2\n", "row 2, start_utc: must be a day of the calendar. Got 2023"),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01T24:10,2\n", "must be a time of a day, 00:00:00 to 24:00:00."),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01T12:00:60,2\n", "must be a time of a day, 00:00:00 to 24:00:00."),
        (b"line,start_utc,cable_out_m\nL1,9999-05-01,2\n", "start_utc: must be a year from 1900 to 2199. Got 9999"),
        (b"line,start_utc,cable_out_m\nL1,2024-05-01T00:00+25:00,2\n", "must be an offset from UTC of at most 14:00"),
        (
            b'line,start_utc,cable_out_m\n"L1,2024-05-01,2\n',
            'row 2: must be one row of CSV, with every quote closed. Got "L1',
        ),
        (
            b"line,start_utc\xff,cable_out_m\n",
            "log.csv row 1: must be UTF-8 text. Got byte 0xff. Save it as CSV, UTF-8.",
        ),
        (b"line,start\0,cable_out_m\n", "log.csv: must be text. Got a binary file. Save it as CSV, UTF-8."),
        (b"PK\x03\x04xl/workbook.xml", "log.csv: must be text, or gzipped text. Got a zip archive or a workbook."),
        (
            gzip.compress(b"line,start_utc\n")[:-6],
            "log.csv: must be a whole gzip file. Got one cut short. Copy it again.",
        ),
        (b"\x1f\x8b garbage", "log.csv: must be a whole gzip file. Got"),
        (gzip.compress(b"0" * 3_000_000), "log.csv: must unpack to under 1 MB. Got more. Unpack it by hand."),
    ],
)
def test_a_mistake_has_its_sentence(tmp_path, content, said):
    assert said in " ".join(sentences(tmp_path, content))


def test_all_mistakes_of_a_file_are_told_at_once_and_many_are_cut(tmp_path):
    heading = "line,start_utc,cable_out_m\n"
    told = sentences(tmp_path, heading + "L1,soon,far\nL2,2024-05-01,2\nL3,later,3\n")
    assert [text.split(":")[0] for text in told] == [
        "log.csv row 2, start_utc",
        "log.csv row 2, cable_out_m",
        "log.csv row 4, start_utc",
    ]
    told = sentences(tmp_path, heading + "L1,soon,far\n" * 30)
    assert len(told) == 11
    assert told[-1] == "log.csv: and 50 more."


def test_a_table_over_the_limit_is_not_read(tmp_path, monkeypatch):
    monkeypatch.setattr(tables, "LARGEST_BYTES", 2_000_000)
    assert sentences(tmp_path, b"a" * 2_000_001) == ["log.csv: must be under 2 MB. Got a larger file. Split it."]


def test_gzip_members_one_after_another_are_one_file(tmp_path):
    """RFC 1952, section 2.2: a gzip file is a series of members."""
    path = tmp_path / "two.gz"
    path.write_bytes(gzip.compress(b"one\n") + gzip.compress(b"two\n") + b"\0" * 512)
    assert packed.read_bytes(path) == b"one\ntwo\n"


@given(st.datetimes(min_value=datetime(1900, 1, 2), max_value=datetime(2199, 12, 30), timezones=st.timezones()))
def test_times_are_what_the_standard_library_reads(when):
    """Outside check: datetime.fromisoformat of the Python standard library, on ISO 8601 of every zone."""
    seconds = when.utcoffset().total_seconds()
    if seconds % 60 or abs(seconds) > 14 * 3600:
        return  # local mean times of the past, which ISO 8601 cannot write
    text = when.isoformat()
    expected = datetime.fromisoformat(text).astimezone(UTC).replace(tzinfo=None)
    assert tables.parse_time(text) == np.datetime64(expected, "ns")


@pytest.mark.parametrize(
    ("text", "means"),
    [
        ("2016-12-31T23:59:60Z", "2017-01-01T00:00:00"),  # leap second, IERS Bulletin C 52
        ("2016-12-31T24:00", "2017-01-01T00:00:00"),  # ISO 8601-1:2019/Amd 1 allows 24:00:00 as the end of a day
        ("2024-02-29T12:00:00,5", "2024-02-29T12:00:00.5"),  # ISO 8601: comma or point
        ("2024-05-01T05:14:05.123456789+02:00", "2024-05-01T03:14:05.123456789"),
        ("2024-05-01 03:00-0330", "2024-05-01T06:30"),
        ("2024-02-29", "2024-02-29"),
        ("2024-05-01 03:14:05 utc", "2024-05-01T03:14:05"),
    ],
)
def test_odd_times_have_a_stated_meaning(text, means):
    assert tables.parse_time(text) == np.datetime64(means, "ns")


@given(st.text(max_size=40))
def test_no_text_makes_the_parsers_stumble(text):
    for parse in (tables.parse_time, tables.parse_number):
        try:
            value = parse(text)
        except ValueError:
            continue
        assert value == value


@given(st.binary(max_size=300))
def test_no_bytes_make_the_reader_stumble(tmp_path_factory, content):
    path = tmp_path_factory.getbasetemp() / "any.csv"
    for data in (content, b"line,start_utc,cable_out_m\n" + content):
        path.write_bytes(data)
        try:
            table = tables.read_table(path, COLUMNS)
        except SurveyError:
            continue
        assert np.isfinite(table["cable_out_m"]).all()
