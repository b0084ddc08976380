"""Tables written by hand: what is accepted, and what each mistake is told as."""

import gzip

import numpy as np
import pytest

from steps.errors import SurveyError
from steps.formats.tables import parse_time, read_table

CABLE = {"time_utc": "time", "cable_out_m": "number"}


def _write(tmp_path, content, name="cable.csv"):
    path = tmp_path / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


@pytest.mark.parametrize(
    "content",
    [
        "time_utc,cable_out_m\n2024-05-01T00:00:00,200\n2024-05-01T06:00:00,250.5\n",
        "\ufefftime_utc,cable_out_m\r\n2024-05-01T00:00:00Z,200\r\n2024-05-01T06:00:00Z,250.5\r\n",
        "# a remark\n cable_out_m , time_utc\n\n200, 2024-05-01\n# another\n250.5 ,2024-05-01 06:00\n\n",
        'time_utc,cable_out_m\n"2024-05-01T02:00:00+02:00","200"\n2024-05-01T06:00:00,2.505e2,',
        gzip.compress(b"time_utc,cable_out_m\n2024-05-01T00:00:00,200\n2024-05-01T06:00:00,250.5\n"),
    ],
)
def test_all_these_are_the_same_table(tmp_path, content):
    table = read_table(_write(tmp_path, content), CABLE)
    assert table["cable_out_m"].tolist() == [200.0, 250.5]
    assert (table["time_utc"].to_numpy() == np.array(["2024-05-01", "2024-05-01T06"], "datetime64[ns]")).all()


def test_rows_are_those_of_the_file(tmp_path):
    table = read_table(_write(tmp_path, "# x\ntime_utc,cable_out_m\n\n2024-05-01,1\n"), CABLE)
    assert table["row"].tolist() == [4]


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        ("", "cable.csv: must start with a heading row"),
        (
            "time_utc,cable_out\n2024-05-01,1\n",
            r"row 1: must have a column cable_out_m. Got time_utc, cable_out. Rename cable_out.",
        ),
        ("time_utc;cable_out_m\n2024-05-01;1\n", r"must have a column time_utc.*"),
        ("time_utc,cable_out_m,time_utc\n", "row 1: must name each column once. Got time_utc"),
        ("time_utc,cable_out_m,colour\n", "row 1: must have only known columns. Got colour"),
        ("time_utc,cable_out_m\n2024-05-01,long\n", "row 2, cable_out_m: must be a number. Got long"),
        ("time_utc,cable_out_m\n2024-05-01,nan\n", "row 2, cable_out_m: must be a finite number. Got nan"),
        ("time_utc,cable_out_m\n2024-05-01,1_0\n", "row 2, cable_out_m: must be a finite number. Got 1_0"),
        ("time_utc,cable_out_m\n2024-05-01,\n", "row 2, cable_out_m: must be a number. Got an empty cell"),
        ("time_utc,cable_out_m\n2024-05-01,1,2\n", "row 2: must have 2 cells. Got 3"),
        ("time_utc,cable_out_m\n1.5.2024,1\n", "row 2, time_utc: must be a time such as"),
        ("time_utc,cable_out_m\n2023-02-29,1\n", "row 2, time_utc: must be a day of the calendar. Got 2023-02-29"),
        ("time_utc,cable_out_m\n2024-05-01T25:00:00,1\n", "must be a time of a day"),
        ("time_utc,cable_out_m\n2024-05-01T12:61:00,1\n", "must be a time of a day"),
        (b"time_utc,cable_out_m\n2024-05-01,\xff\n", "row 2: must be UTF-8 text. Got byte 0xff"),
        (b"time_utc\0,cable_out_m\n", "must be text. Got a binary file"),
        (b"\x1f\x8b\x08\x00broken", "must be a whole gzip file"),
        ('time_utc,cable_out_m\n"2024-05-01,1\n', "row 2: must be a row of CSV"),
    ],
)
def test_a_mistake_is_one_sentence(tmp_path, content, sentence):
    path = _write(tmp_path, content)
    with pytest.raises(SurveyError, match=sentence):
        read_table(path, CABLE, name="cable.csv")


def test_mistakes_are_told_together_up_to_ten(tmp_path):
    path = _write(tmp_path, "time_utc,cable_out_m\n" + "2024-05-01,x\n" * 12)
    with pytest.raises(SurveyError, match="row 2") as caught:
        read_table(path, CABLE)
    assert len(caught.value.sentences) == 11
    assert "2 more mistakes" in caught.value.sentences[-1]


@pytest.mark.parametrize(
    ("text", "time"),
    [
        # ISO 8601-1:2019: 24:00 is the end of the day; 4.3.5 knows the leap second
        ("2024-05-01T24:00:00", "2024-05-02T00:00:00"),
        ("2016-12-31T23:59:60", "2017-01-01T00:00:00"),
        ("2024-05-01T00:00:00.123456789", "2024-05-01T00:00:00.123456789"),
        ("2024-05-01 03:00-0330", "2024-05-01T06:30"),
        ("2024-02-29", "2024-02-29"),
    ],
)
def test_times(text, time):
    assert parse_time(text) == np.datetime64(time, "ns")
