"""Ingest: joins, clocks, what deserves a look, and books that balance."""

import hashlib
import json
from functools import reduce
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from steps import ingest, stage
from steps.errors import SurveyError

START = np.datetime64("2024-05-01", "ns")


def _part(seconds, values, file=0):
    time = START + (np.asarray(seconds, float) * 1e9).astype(np.int64).astype("timedelta64[ns]")
    return pd.DataFrame(
        {"time_utc": time, "total_field_nt": values, "source_file": file, "source_row": np.arange(2, 2 + len(values))}
    )


# -- joins -----------------------------------------------------------------------------------------------------------


def test_files_in_any_order_give_one_record():
    one, two = _part([0, 1, 2], [1.0, 2.0, 3.0], 0), _part([2, 3, 4], [3.5, 4.0, 5.0], 1)
    forward, left_out = ingest.join_readings([one, two])
    backward, _ = ingest.join_readings([two, one])
    assert forward["total_field_nt"].tolist() == [1, 2, 3, 4, 5]
    assert forward["reading"].tolist() == [0, 1, 2, 3, 4]
    assert left_out[["source_file", "source_row", "other_file", "other_row"]].to_numpy().tolist() == [[1, 2, 0, 4]]
    pd.testing.assert_frame_equal(forward, backward)


def test_rows_that_stand_twice_are_taken_once():
    joined, left_out = ingest.join_readings(
        [_part([0, 1, 2], [1.0, 2.0, np.nan]), _part([1, 2, 3], [2.0, np.nan, 4.0], 1)]
    )
    assert len(joined) == 4
    assert left_out["contradicts"].tolist() == [False, False]


def test_of_contradictory_rows_the_first_stands():
    joined, left_out = ingest.join_readings([_part([0, 1], [1.0, 2.0]), _part([1], [9.0], 1)])
    assert joined["total_field_nt"].tolist() == [1.0, 2.0]
    assert left_out["contradicts"].tolist() == [True]


def test_a_row_without_a_value_stands_back_behind_one_with():
    joined, left_out = ingest.join_readings([_part([0, 1], [1.0, np.nan]), _part([1], [9.0], 1)])
    assert joined["total_field_nt"].tolist() == [1.0, 9.0]
    assert left_out["contradicts"].tolist() == [False]


def test_a_clock_that_goes_back_is_put_in_order():
    part = _part([0, 5, 3, 4], [1.0, 4.0, 2.0, 3.0])
    joined, _ = ingest.join_readings([part])
    assert joined["total_field_nt"].tolist() == [1, 2, 3, 4]
    assert ingest.backward_steps(part).tolist() == [2]


def test_missing_quantities_are_missing_values():
    joined, _ = ingest.join_readings([_part([0], [1.0])])
    assert joined[["signal", "logged_depth_m", "water_depth_m"]].isna().all(axis=None)


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(st.integers(0, 9), st.sampled_from([1.0, 2.0, np.nan])), max_size=25), st.integers(1, 3))
def test_no_reading_is_lost_or_invented(rows, cuts):
    """Against a dictionary of times, built reading by reading."""
    parts = [_part([t for t, _ in rows[k::cuts]], [v for _, v in rows[k::cuts]], k) for k in range(cuts)]
    before = [part.copy() for part in parts]
    joined, left_out = ingest.join_readings(parts)
    wanted = {}
    for part in parts:
        for time, value in zip(part["time_utc"], part["total_field_nt"], strict=True):
            if time not in wanted or (np.isnan(wanted[time]) and not np.isnan(value)):
                wanted[time] = value
    assert joined["time_utc"].tolist() == sorted(wanted)
    np.testing.assert_array_equal(joined["total_field_nt"], [wanted[time] for time in sorted(wanted)])
    assert len(joined) + len(left_out) == len(rows)
    assert all(one.equals(two) for one, two in zip(parts, before, strict=True))


def _fixes(seconds, latitude, course=np.nan):
    time = START + (np.asarray(seconds) * 1e9).astype("timedelta64[ns]")
    return pd.DataFrame({"time_utc": time, "latitude_deg": latitude, "longitude_deg": 2.0, "course_deg": course})


COLUMNS = ["latitude_deg", "longitude_deg", "course_deg"]


def test_of_two_sources_the_second_fills_the_gaps_of_the_first():
    one = _fixes([0, 30, 60, 200, 230], 1.0)
    two = _fixes([-5, 0, 10, 45, 61, 100, 199, 215, 231, 300], 9.0)
    table, counts = ingest.join_navigation([one, two], COLUMNS)
    seconds = (table["time_utc"].to_numpy() - START) / np.timedelta64(1, "s")
    assert seconds.tolist() == [-5, 0, 30, 60, 61, 100, 199, 200, 230, 231, 300]
    assert table["latitude_deg"].tolist() == [9, 1, 1, 1, 9, 9, 9, 1, 1, 9, 9]
    assert counts == {"repeated": 0, "contradictory": 0, "second_choice": 4}


def test_of_one_source_rows_that_stand_twice_are_taken_once():
    table, counts = ingest.join_navigation([_fixes([3, 1, 1, 1, 2], [4.0, 1.0, 1.0, 7.0, 3.0])], COLUMNS)
    assert table["latitude_deg"].tolist() == [1, 3, 4]
    assert counts == {"repeated": 1, "contradictory": 1, "second_choice": 0}


def test_without_sources_there_is_an_empty_table():
    empty, counts = ingest.join_navigation([], ["heading_deg"])
    assert list(empty) == ["time_utc", "heading_deg"]
    assert empty["time_utc"].dtype == np.dtype("datetime64[ns]")
    assert (len(empty), sum(counts.values())) == (0, 0)


def test_overlaps_are_found_whatever_the_order_of_names():
    files = [
        {"file": "c", "start_utc": "2024-05-01T10:00:00.000", "end_utc": "2024-05-01T20:00:00.000"},
        {"file": "a", "start_utc": "2024-05-01T00:00:00.000", "end_utc": "2024-05-01T10:00:00.000"},
        {"file": "b", "start_utc": "2024-05-01T19:00:00.000", "end_utc": "2024-05-01T23:00:00.000"},
        {"file": "d", "start_utc": "2024-05-02T00:00:00.000", "end_utc": "2024-05-02T01:00:00.000"},
        {"file": "empty"},
    ]
    found = ingest.overlaps(files)
    assert [overlap["files"] for overlap in found] == [["a", "c"], ["c", "b"]]
    assert (found[1]["start_utc"], found[1]["end_utc"]) == ("2024-05-01T19:00:00.000", "2024-05-01T20:00:00.000")


def _edit(**change):
    base = {"file": "edits.csv", "row": 2, "action": "shift_clock", "target": "", "value": 2.5}
    return base | {"start_utc": None, "end_utc": None} | change


def test_a_shifted_clock_moves_a_file_or_a_span():
    joined = pd.concat([_part([0, 1], [1.0, 2.0], 0), _part([2, 3], [3.0, 4.0], 1)], ignore_index=True)
    moved = ingest.shift_clocks(joined, [_edit(target="file:b.csv")], ["raw/a.csv", "raw/b.csv"])
    assert ((moved["time_utc"] - joined["time_utc"]) / pd.Timedelta("1s")).tolist() == [0, 0, 2.5, 2.5]
    span = _edit(start_utc="2024-05-01T00:00:01", end_utc="2024-05-01T00:00:02", value=-1.0)
    moved = ingest.shift_clocks(joined, [span], ["raw/a.csv", "raw/b.csv"])
    assert ((moved["time_utc"] - joined["time_utc"]) / pd.Timedelta("1s")).tolist() == [0, -1, -1, 0]
    with pytest.raises(SurveyError, match="edits.csv row 2, shift_clock: must name a file of this survey. Got c.csv"):
        ingest.shift_clocks(joined, [_edit(target="file:c.csv")], ["raw/a.csv", "raw/b.csv"])


# -- the stage -------------------------------------------------------------------------------------------------------


def sentence(body):
    return f"${body}*{reduce(lambda a, b: a ^ b, body.encode()):02X}\n"


def logger(seconds, values, start=START):
    rows = zip(seconds, values, strict=True)
    text = (f"{np.datetime_as_string(start + np.timedelta64(round(s * 1000), 'ms'), 'ms')},{v}\n" for s, v in rows)
    return "time,F\n" + "".join(text)


def navigation(seconds, day="01,05,2024"):
    clock = [f"{s // 3600:02d}{s // 60 % 60:02d}{s % 60:02d}.00" for s in seconds]
    return sentence(f"GPZDA,{clock[0]},{day},00,00") + "".join(
        sentence(f"GPGGA,{c},4500.{s % 10000:04d},N,03000.0000,W,1,09,0.9,12.0,M,0.0,M,,")
        + sentence(f"HEHDT,{s % 360:.1f},T")
        for c, s in zip(clock, seconds, strict=True)
    )


CSV = {
    "format": "delimited",
    "files": ["*.csv"],
    "time": {"columns": ["time"]},
    "columns": {"total_field_nt": "F"},
    "clock": {"offset_s": 0.0},
}
NMEA = {"format": "nmea", "files": ["*.nmea"]}


class Survey:
    """Raw files in a folder, ingested in this process."""

    def __init__(self, folder, monkeypatch):
        self.folder = folder
        monkeypatch.chdir(folder)

    def run(self, readings, *sources, readings_settings=CSV, navigation_settings=None, edits=()):
        inputs = {"readings": self.write(readings)}
        inputs |= {f"navigation_{k}": self.write(files) for k, files in enumerate(sources)}
        outputs = [Path(f"{name}.parquet") for name in ("readings", "navigation", "gyro")]
        options = {
            "settings": {"readings": readings_settings, "navigation": navigation_settings or [NMEA] * len(sources)},
            "edits": list(edits),
        }
        job = stage.Job("ingest", inputs, [*outputs, Path("ingest_record.json")], options)
        ingest.main(job)
        job.finish()
        self.readings, self.navigation, self.gyro = (pd.read_parquet(path) for path in outputs)
        self.record = json.loads(Path("ingest_record.json").read_text())
        return self

    def write(self, files):
        for name, content in files.items():
            Path(name).write_bytes(content if isinstance(content, bytes) else content.encode())
        return [Path(name) for name in sorted(files)]


@pytest.fixture
def survey(tmp_path, monkeypatch):
    return Survey(tmp_path, monkeypatch)


MINUTE = range(60)


def test_what_a_ship_brings_home_becomes_three_tables(survey):
    survey.run(
        {"b.csv": logger(range(30, 60), [45001] * 30), "a.csv": logger(range(40), [45000] * 30 + [45001] * 10)},
        {"a.nmea": navigation(MINUTE)},
    )
    assert len(survey.readings) == 60
    assert survey.readings["reading"].tolist() == list(range(60))
    assert survey.readings["total_field_nt"].tolist() == [45000] * 30 + [45001] * 30
    assert survey.readings["source_file"].tolist() == [0] * 40 + [1] * 20
    assert survey.readings["source_row"].tolist() == [*range(2, 42), *range(12, 32)]
    assert len(survey.navigation) == len(survey.gyro) == 60
    assert survey.gyro["heading_deg"].tolist() == [float(s) for s in MINUTE]
    assert survey.navigation["latitude_deg"].iloc[7] == 45 + 0.0007 / 60
    record = survey.record
    assert record["ledger"] == {
        "records": 70,
        "kept": 60,
        "truncated": 0,
        "without_time": 0,
        "repeated": 10,
        "contradictory": 0,
    }
    assert [file["file"] for file in record["files"]] == ["a.csv", "b.csv"]
    for file in [*record["files"], *record["navigation_files"]]:
        assert file["sha256"] == hashlib.sha256(Path(file["file"]).read_bytes()).hexdigest()
    assert record["overlaps"] == [
        {"files": ["a.csv", "b.csv"], "start_utc": "2024-05-01T00:00:30.000", "end_utc": "2024-05-01T00:00:39.000"}
    ]
    assert record["notes"] == [
        "1 raw files overlap an earlier one in time, first b.csv with a.csv, 2024-05-01T00:00:30 to "
        "2024-05-01T00:00:39.",
        "10 readings stand twice: taken once; first b.csv row 2 and a.csv row 32 (2024-05-01T00:00:30.000).",
    ]
    assert record["done"] == "60 readings of 70 records in 2 files (10 dropped), 60 fixes, 60 headings"


def test_clocks_are_corrected_each_by_its_own_setting(survey):
    own = CSV | {"clock": {"offset_s": 3.5, "drift_s_per_day": 86.4, "reference": "2024-05-01T00:00:00"}}
    gps = NMEA | {"clock": {"offset_s": 0.0, "time_scale": "gps"}}
    survey.run(
        {"a.csv": logger([0, 10], [45000, 45001])},
        {"a.nmea": navigation(range(100))},
        readings_settings=own,
        navigation_settings=[gps],
    )
    seconds = (survey.readings["time_utc"].to_numpy() - START) / np.timedelta64(1, "s")
    np.testing.assert_allclose(seconds, [3.5, 13.51], rtol=0, atol=1e-9)
    # GPS time has been 18 s ahead of UTC since 2017 (IERS Bulletin C 52)
    assert (survey.navigation["time_utc"].iloc[0] - pd.Timestamp(START)).total_seconds() == -18
    assert (survey.gyro["time_utc"].iloc[0] - pd.Timestamp(START)).total_seconds() == -18


def test_an_edit_shifts_the_clock_of_a_file(survey):
    edit = _edit(target="file:b.csv", value=-30.0)
    survey.run(
        {"a.csv": logger(range(10), [45000] * 10), "b.csv": logger(range(40, 50), [45001] * 10)},
        {"a.nmea": navigation(MINUTE)},
        edits=[edit],
    )
    assert survey.readings["total_field_nt"].tolist() == [45000] * 10 + [45001] * 10
    assert survey.readings["time_utc"].iloc[-1] == pd.Timestamp(START) + pd.Timedelta("19s")
    assert survey.record["edits"] == [edit]


def test_what_deserves_a_look_is_noted_with_file_and_row(survey):
    seconds = [0, 1, 2, 1.5, 3, 3, 3 + 2 * 3600]
    text = logger(seconds, [45000, 45001, 45002, 45003, 45004, 45005, 45006]) + ",45007\n2024-05-01T04:0"
    survey.run({"a.csv": text}, {"a.nmea": navigation([1, 2, 3 + 5000])})
    assert survey.record["notes"] == [
        "1 readings contradict another one of the same time: the first stands; first a.csv row 7 and a.csv row 6 "
        "(2024-05-01T00:00:03.000).",
        "the logger's clock goes back in a.csv row 5 (2024-05-01T00:00:02.000 to 2024-05-01T00:00:01.500): readings "
        "put in order.",
        "1 silences of over an hour in the readings; longest 2.0 h, after 2024-05-01T00:00:03.",
        "2 readings lie before the first or after the last fix.",
        "1 silences of over an hour in the navigation; longest 1.4 h, after 2024-05-01T00:00:02.",
    ]
    assert survey.record["ledger"] == {
        "records": 9,
        "kept": 6,
        "truncated": 1,
        "without_time": 1,
        "repeated": 0,
        "contradictory": 1,
    }
    assert survey.record["backwards"] == 1


def test_two_sources_of_navigation_and_a_gyro_of_its_own(survey):
    delimited = CSV | {"columns": {"latitude_deg": "lat", "longitude_deg": "lon", "heading_deg": "hdg"}}
    table = "time,lat,lon,hdg\n2024-05-01T00:00:00,45 00.0 N,30 00.0 W,360\n2024-05-01T00:00:50,,,10\n"
    table += "2024-05-01T00:00:59,45 00.1 N,30 00.1 W,\n2024-05-01T00:00:58.5,45 00.1 N,30 00.1 W,\n"
    survey.run(
        {"a.csv": logger(MINUTE, [45000] * 60)},
        {"nav.csv": table},
        {"a.nmea": navigation(range(20, 40))},
        navigation_settings=[delimited, NMEA | {"use": ["fix"]}],
    )
    assert survey.gyro["heading_deg"].tolist() == [0.0, 10.0]
    assert len(survey.navigation) == 3  # the second source has nothing to say between fixes less than a minute apart
    assert survey.record["fix_ledger"] == {
        "records": 23,
        "kept": 3,
        "repeated": 0,
        "contradictory": 0,
        "second_choice": 20,
    }
    assert "20 fixes of later sources are not used: an earlier source tells that time." in survey.record["notes"]
    assert "nav.csv: the time of the fixes goes back 1 times, first in row 5; put in order." in survey.record["notes"]
    assert survey.record["navigation_files"][0]["counts"]["without position"] == 1


def test_a_survey_without_gyro_has_an_empty_table_of_headings(survey):
    survey.run(
        {"a.csv": logger(MINUTE, [45000] * 60)},
        {"a.nmea": navigation(MINUTE)},
        navigation_settings=[NMEA | {"use": ["fix"]}],
    )
    assert len(survey.gyro) == 0
    assert survey.gyro["time_utc"].dtype == np.dtype("datetime64[ns]")
    assert "there is no gyro heading: course over ground will stand for it." in survey.record["notes"]


def test_what_several_files_give_to_note_is_said_once(survey):
    files = {f"{k}.nmea": navigation(range(30 * k, 30 * k + 30)).replace(",1,09", ",1,09") for k in range(2)}
    both = {name: text + sentence("INGLL,4500.0,N,03000.0,W,000000,V") for name, text in files.items()}
    gga = sentence("INGGA,000100.00,4500.0000,N,03000.0000,W,1,09,0.9,12.0,M,0.0,M,,")
    survey.run({"a.csv": logger(MINUTE, [45000] * 60)}, {name: text + gga for name, text in both.items()})
    assert (
        "0.nmea and 1 more files: GGA comes from several talkers (GP, IN), whose antennas may stand apart."
        in survey.record["notes"]
    )


def test_a_trackline_is_readings_and_navigation(survey, shared):
    """Counts of a real file of the NCEI archive by splitting it at tabs (MAG_TOT is field 14, LAT and LON 5 and 6)."""
    raw = (shared / "trackline" / "rc2107.m77t").read_bytes()
    rows = [line.split(b"\t") for line in raw.split(b"\n")[1:] if line.strip()]
    readings = sum(len(cells) > 13 and cells[13].strip() != b"" for cells in rows)
    places = sum(len(cells) > 5 and cells[4].strip() != b"" and cells[5].strip() != b"" for cells in rows)
    file = {"format": "mgd77t", "files": ["a.m77t"]}
    survey.run({"a.m77t": raw}, {"a.m77t": raw}, readings_settings=file, navigation_settings=[file])
    ledger = survey.record["ledger"]
    assert ledger["records"] == len(rows)
    assert ledger["records"] - ledger["without_reading"] - ledger["without_time"] == readings
    assert len(survey.readings) == ledger["kept"]
    assert survey.record["fix_ledger"]["records"] == places


@pytest.mark.parametrize(
    ("readings", "fixes", "said"),
    [
        (
            {"a.csv": logger(MINUTE, [""] * 60)},
            navigation(MINUTE),
            "a.csv: must hold readings of the total field. Got no value in any row.",
        ),
        (
            {"a.csv": logger(MINUTE, [45000] * 60)},
            navigation(MINUTE).replace(",1,09", ",0,09").replace("GPGGA", "GPGLL"),
            "ingest.navigation: must hold positions. Got no usable fix in any file.",
        ),
        (
            {"a.csv": logger(MINUTE, [45000] * 60)},
            navigation(MINUTE, "02,05,2024"),
            "ingest.navigation: must be of the time of the readings. Got readings from 2024-05-01T00:00:00 to "
            "2024-05-01T00:00:59, fixes from 2024-05-02T00:00:00 to 2024-05-02T00:00:59. Check the dates, the clocks",
        ),
        (
            {"a.csv": logger(MINUTE, [45000] * 60)},
            navigation(MINUTE, "15,09,2004"),  # 7168 days before
            "They are 1024 weeks apart, as after a week rollover of the GNSS receiver: set `stamp: logger`, or a "
            "`clock` with offset_s: 619315200.",
        ),
        (
            {"a.csv": logger(MINUTE, [4.5e-5] * 60)},
            navigation(MINUTE),
            "ingest.readings.columns.total_field_nt: must be the Earth's total field in nT, 15000 to 80000. Got "
            "4.5e-05 in the middle. Is it in tesla?",
        ),
        ({"a.csv": logger(MINUTE, [0.45] * 60)}, navigation(MINUTE), "Got 0.45 in the middle. Is it in gauss?"),
        ({"a.csv": logger(MINUTE, [9.5] * 60)}, navigation(MINUTE), "Got 9.5 in the middle. Is it the right column?"),
        (
            {"a.csv": logger([s // 10 for s in range(600)], range(45000, 45600))},
            navigation(MINUTE),
            "ingest.readings.time: must tell readings apart. Got 540 readings with the time of another and another "
            "value, and 60 others. Name the column with the fractions of a second too.",
        ),
        (
            {"a.csv": logger([0], ["bad"]), "b.csv": b"time,F\n", "c.csv": logger([0], [45000])},
            navigation(MINUTE),
            "b.csv: must hold at least one record.",
        ),
    ],
)
def test_records_that_cannot_be_are_refused_in_one_sentence(survey, readings, fixes, said):
    with pytest.raises(SurveyError, match=r"^[a-z.]+.*: must ") as caught:
        survey.run(readings, {"a.nmea": fixes})
    assert any(said in text for text in caught.value.sentences), caught.value.sentences


def test_mistakes_of_all_files_are_told_at_once(survey):
    with pytest.raises(SurveyError, match=r"^a\.csv row 2, F: must be") as caught:
        survey.run({"a.csv": logger([0], ["bad"]), "b.csv": logger([0], ["worse"])}, {"a.nmea": navigation(MINUTE)})
    assert [text[:5] for text in caught.value.sentences] == ["a.csv", "b.csv"]


def test_a_heading_out_of_range_is_named(survey):
    delimited = CSV | {"columns": {"latitude_deg": "lat", "longitude_deg": "lon", "heading_deg": "hdg"}}
    table = "time,lat,lon,hdg\n2024-05-01T00:00:00,45,30,361.5\n"
    with pytest.raises(SurveyError, match=r"nav.csv row 2, hdg: must be a heading of 0 to 360 degrees. Got 361.5"):
        survey.run({"a.csv": logger([0], [45000])}, {"nav.csv": table}, navigation_settings=[delimited])


def test_raw_files_are_not_touched_and_results_are_the_same_again(survey):
    files = {"a.csv": logger(MINUTE, [45000] * 60)}, {"a.nmea": navigation(MINUTE)}
    survey.run(*files)
    before = {path: path.read_bytes() for path in survey.folder.iterdir()}
    survey.run(*files)
    assert {path: path.read_bytes() for path in survey.folder.iterdir()} == before


def test_books_that_do_not_balance_are_a_fault_of_ours():
    with pytest.raises(RuntimeError, match="the books of the readings do not balance: 9 records, 5 kept"):
        ingest._balanced("readings", 9, 5, {"repeated": 3})
    assert ingest._balanced("readings", 9, 5, {"repeated": 4})["kept"] == 5
