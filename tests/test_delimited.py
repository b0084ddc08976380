"""Delimited text of any layout, and what a broken file is told as."""

import gzip

import numpy as np
import pandas as pd
import pytest

from steps.errors import SurveyError
from steps.formats.delimited import read_delimited
from steps.settings import DelimitedReadings

F = {"total_field_nt": "F"}


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


WANTED = np.array(["2024-05-01T00:00:00.5", "2024-05-01T00:00:01.5"], "datetime64[ns]")


@pytest.mark.parametrize(
    ("content", "change"),
    [
        ("time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n", {}),
        ("F;x;time\r\n45000;?;2024-05-01 00:00:00.5Z\r\n45001,25;;2024-05-01 00:00:01.5Z\r\n", {"delimiter": ";", "decimal": ","}),
        (
            "logger X\n# remark\nd\tt\tF\n01/05/2024\t00:00:00.500\t45000\n\n01/05/2024\t00:00:01.500\t45001.25",
            {"delimiter": "tab", "skip_rows": 1, "time": {"columns": ["d", "t"], "layout": "%d/%m/%Y %H:%M:%S.%f"}},
        ),
        (
            "  2024 122  00:00:00.500   45000\n2024 122 00:00:01.500 45001.25 \n",
            {"delimiter": "space", "names": ["y", "j", "t", "F"], "time": {"columns": ["y", "j", "t"], "layout": "%Y %j %H:%M:%S.%f"}},
        ),
        ("time,F\n1714521600.5,45000\n1714521601.5,45001.25\n", {"time": {"columns": ["time"], "layout": "epoch_s"}}),
        ("\ufefftime,F\n20240501000000.5,45000\n20240501000001.5,45001.25\n", {"time": {"columns": ["time"], "layout": "%Y%m%d%H%M%S.%f"}}),
        (gzip.compress(b"time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n"), {}),
        ('time,"F"\n"2024-05-01T00:00:00.5","45000"\n2024-05-01T00:00:01.5,45001.25\n', {}),
        ("time,F\n2024-05-01T00:00:00.5,45000\n2024-05-01T00:00:01.5,45001.25\n".encode("utf-16"), {"encoding": "utf-16"}),
        ("time,F\n5/1/24 12:00:00.5 AM,45000\n5/1/24 12:00:01.5 AM,45001.25\n", {"time": {"columns": ["time"], "layout": "%m/%d/%y %I:%M:%S.%f %p"}}),
    ],
)  # fmt: skip
def test_all_these_are_the_same_record(tmp_path, content, change):
    table, counts = read(tmp_path, content, **change)
    assert (table["time"].to_numpy() == WANTED).all()
    assert table["total_field_nt"].tolist() == [45000.0, 45001.25]
    assert counts["records"] == 2
    assert (
        counts["rows"]
        == counts["records"] + counts["heading"] + counts["blank"] + counts["comment"] + counts["truncated"]
    )


def test_rows_are_those_of_the_file(tmp_path):
    table, _ = read(tmp_path, "time,F\n# x\n2024-05-01T00:00:00,1\n\n2024-05-01T00:00:01,2\n")
    assert table["source_row"].tolist() == [3, 5]


def test_missing_values_are_those_that_are_stated(tmp_path):
    table, _ = read(tmp_path, "time,F\n2024-05-01T00:00:00,99999\n2024-05-01T00:00:01,\n", missing=["", "99999"])
    assert table["total_field_nt"].isna().all()


def test_a_record_cut_off_at_the_end_is_dropped_and_counted(tmp_path):
    table, counts = read(tmp_path, "time,F,x\n2024-05-01T00:00:00,45000,1\n2024-05-01T00:0")
    assert len(table) == 1
    assert counts["truncated"] == 1


@pytest.mark.parametrize(
    ("lat", "lon", "degrees"),
    [
        ("-31.5", "181", (-31.5, -179.0)),
        ("31 30.0 S", "179 30.0 W", (-31.5, -179.5)),
        ("S31.5", "E179.5", (-31.5, 179.5)),
        ("31°30'0\"S", "0°30'W", (-31.5, -0.5)),
        ("-31.5", "359.5", (-31.5, -0.5)),
    ],
)
def test_positions(tmp_path, lat, lon, degrees):
    table, _ = read(
        tmp_path,
        f"time;lat;lon\n2024-05-01T00:00:00;{lat};{lon}\n",
        columns={"latitude_deg": "lat", "longitude_deg": "lon"},
        delimiter=";",
    )
    np.testing.assert_allclose(table[["latitude_deg", "longitude_deg"]].to_numpy()[0], degrees, rtol=0, atol=1e-12)


@pytest.mark.parametrize(
    "layout", ["%d.%m.%Y %H:%M:%S.%f", "%Y-%m-%dT%H:%M:%S", "%j/%y %H%M%S", "%Y%m%d %H:%M", "%H:%M:%S %d-%m-%Y"]
)
def test_the_quick_way_reads_times_as_the_standard_library_does(tmp_path, layout):
    from datetime import datetime, timedelta

    rng = np.random.default_rng(3)
    stamps = [datetime(1972, 1, 1) + timedelta(seconds=int(s)) for s in rng.integers(0, 2_000_000_000, 200)]
    texts = [stamp.strftime(layout) for stamp in stamps]
    table, _ = read(
        tmp_path, "time,F\n" + "".join(f"{text},1\n" for text in texts), time={"columns": ["time"], "layout": layout}
    )
    wanted = np.array([datetime.strptime(text, layout) for text in texts], "datetime64[ns]")
    assert (table["time"].to_numpy() == wanted).all()


@pytest.mark.parametrize(
    ("content", "change", "sentence"),
    [
        ("", {}, "must hold records. Got an empty file"),
        ("time,F\n", {}, "must hold at least one record"),
        ("time,f\n2024-05-01,1\n", {}, r"must have a column F. Got time, f. Did you mean f\?|must have a column F"),
        ("time,F,F\n2024-05-01,1,2\n", {}, "row 1: must name each column once. Got F"),
        ("time,F\n2024-05-01,1\n2024-05-02,bad\n", {}, "row 3, F: must be a number. Got bad. Add the word to `missing`"),
        ("time,F\n2024-05-01,inf\n", {}, "row 2, F: must be a finite number. Got inf"),
        ("time,F\n2024-05-01,45000,5\n2024-05-01,45000\n", {}, "row 2: must have 2 cells. Got 3"),
        ("time,F\n2024-05-01,45000,5\n", {}, "row 2: must have 2 cells. Got 3"),
        ("time,F\n1.5.2024,45000\n", {}, "row 2, time: must be a time. Got 1.5.2024"),
        ("time,F\n2024-13-01,1\n", {"time": {"columns": ["time"], "layout": "%Y-%m-%d"}}, "must be a time laid out as %Y-%m-%d"),
        ("time,F\n2023-02-29,1\n", {"time": {"columns": ["time"], "layout": "%Y-%m-%d"}}, "row 2, time: must be a time laid out"),
        ("time,F\n1714521600000,1\n", {"time": {"columns": ["time"], "layout": "epoch_s"}}, "not milliseconds"),
        (b"time,F\n2024-05-01,\xb5\n", {}, "row 2: must be UTF-8 text. Got byte 0xb5. Name its `encoding`"),
        (b"time,F\n2024-05-01,1\n\0\0\0\n", {}, "row 3: must be text. Got a zero byte"),
        (gzip.compress(b"time,F\n2024-05-01,1\n" * 999)[:-20], {}, "must be a whole gzip file"),
        (gzip.compress(b"0" * 50_000_000), {}, "must unpack to under"),
    ],
)  # fmt: skip
def test_a_mistake_is_one_sentence(tmp_path, content, change, sentence):
    with pytest.raises(SurveyError, match=sentence):
        read(tmp_path, content, **change)


@pytest.mark.parametrize(
    ("lat", "must"),
    [("91", "between -90 and 90"), ("12 75.0 N", "minutes and seconds below 60"), ("12.5 E", "degrees such as")],
)
def test_impossible_latitudes(tmp_path, lat, must):
    with pytest.raises(SurveyError, match=must):
        read(tmp_path, f"time,lat\n2024-05-01,{lat}\n", columns={"latitude_deg": "lat"})


def test_large_files_agree_with_pandas(tmp_path):
    rng = np.random.default_rng(1)
    n = 20_000
    time = np.datetime64("2024-05-01", "ms") + np.arange(n) * np.timedelta64(1003, "ms")
    frame = pd.DataFrame({"time": np.datetime_as_string(time), "F": np.round(45000 + rng.normal(size=n), 3), "q": 1})
    path = tmp_path / "log.csv"
    frame.to_csv(path, index=False)
    table, _ = read_delimited(path, spec(), F)
    known = pd.read_csv(path, parse_dates=["time"])
    assert (table["time"].to_numpy() == known["time"].to_numpy().astype("datetime64[ns]")).all()
    assert (table["total_field_nt"].to_numpy() == known["F"].to_numpy()).all()
