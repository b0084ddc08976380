"""Ingest: joins, clocks, and books that balance."""

import numpy as np
import pandas as pd
import pytest

from steps import ingest
from steps.errors import SurveyError

START = np.datetime64("2024-05-01", "ns")


def _part(seconds, values, file=0):
    time = START + (np.asarray(seconds, float) * 1e9).astype(np.int64).astype("timedelta64[ns]")
    return pd.DataFrame(
        {"time_utc": time, "total_field_nt": values, "source_file": file, "source_row": np.arange(2, 2 + len(values))}
    )


def test_files_in_any_order_give_one_record():
    one, two = _part([0, 1, 2], [1.0, 2.0, 3.0], 0), _part([3, 4], [4.0, 5.0], 1)
    forward, _ = ingest.join_readings([one, two])
    backward, _ = ingest.join_readings([two, one])
    assert forward["total_field_nt"].tolist() == [1, 2, 3, 4, 5]
    assert forward["reading"].tolist() == [0, 1, 2, 3, 4]
    pd.testing.assert_frame_equal(forward, backward)


def test_rows_that_stand_twice_are_taken_once_and_counted():
    joined, counts = ingest.join_readings(
        [_part([0, 1, 2], [1.0, 2.0, np.nan]), _part([1, 2, 3], [2.0, np.nan, 4.0], 1)]
    )
    assert joined["total_field_nt"].tolist()[:2] == [1.0, 2.0]
    assert len(joined) == 4
    assert counts == {"repeated": 2, "contradictory": 0, "backwards": 0}


def test_of_contradictory_rows_the_first_stands():
    joined, counts = ingest.join_readings([_part([0, 1], [1.0, 2.0]), _part([1], [9.0], 1)])
    assert joined["total_field_nt"].tolist() == [1.0, 2.0]
    assert counts["contradictory"] == 1


def test_a_clock_that_jumps_back_is_counted_and_put_in_order():
    joined, counts = ingest.join_readings([_part([0, 5, 3, 4], [1.0, 4.0, 2.0, 3.0])])
    assert joined["total_field_nt"].tolist() == [1, 2, 3, 4]
    assert counts["backwards"] == 1


def test_missing_quantities_are_missing_values():
    joined, _ = ingest.join_readings([_part([0], [1.0])])
    assert joined[["signal", "logged_depth_m", "water_depth_m"]].isna().all(axis=None)


def test_of_navigation_the_first_source_stands():
    one = pd.DataFrame({"time_utc": START + np.arange(3), "latitude_deg": 1.0, "longitude_deg": 2.0})
    two = pd.DataFrame({"time_utc": START + np.arange(2, 5), "latitude_deg": 9.0, "longitude_deg": 9.0})
    table, repeated = ingest.join_navigation([one, two], ["latitude_deg", "longitude_deg", "course_deg"])
    assert table["latitude_deg"].tolist() == [1, 1, 1, 9, 9]
    assert repeated == 1
    assert table["course_deg"].isna().all()
    empty, none = ingest.join_navigation([], ["heading_deg"])
    assert list(empty) == ["time_utc", "heading_deg"]
    assert (len(empty), none) == (0, 0)


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
