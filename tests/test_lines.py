"""Lines by log and by course."""

import numpy as np
import pandas as pd
import pytest
from pyproj import Geod

from steps import lines
from steps.errors import SurveyError
from steps.settings import Lines

START = np.datetime64("2024-03-01T00:00:00", "ns")
MINUTE = np.timedelta64(60, "s")


def _log(rows):
    table = pd.DataFrame(rows, columns=["line", "kind", "start_utc", "end_utc"])
    for name in ("start_utc", "end_utc"):
        table[name] = pd.to_datetime(table[name], format="ISO8601").astype("datetime64[ns]")
    return table.assign(row=np.arange(2, 2 + len(table)))


def test_log_comes_back_in_order_of_time():
    log = _log([("B", "tie", "2024-03-02", "2024-03-03"), ("A", "line", "2024-03-01", "2024-03-01T12")])
    assert lines.check_log(log, "lines.csv")["line"].tolist() == ["A", "B"]


def test_every_mistake_of_a_log_is_told_at_once():
    log = _log(
        [
            ("A", "line", "2024-03-01", "2024-03-02"),
            ("A", "ladder", "2024-03-01T12", "2024-03-03"),
            ("C", "tie", "2024-03-05", "2024-03-05"),
        ]
    )
    with pytest.raises(SurveyError, match="row 3, kind: must be one of line, tie, calibration, transit") as caught:
        lines.check_log(log, "lines.csv")
    text = str(caught.value)
    assert "row 3, line: must be a name used once. Got A." in text
    assert "row 4, end_utc: must be after start_utc" in text
    assert "row 3, start_utc: must be after the end of A (row 2)" in text


def test_a_log_without_rows_is_refused():
    with pytest.raises(SurveyError, match="must hold at least one line"):
        lines.check_log(_log([]), "lines.csv")


def test_both_ends_belong_to_the_line():
    time = START + MINUTE * np.arange(10)
    start, end = time[[2, 6]], time[[4, 7]]
    assert lines.assign(time, start, end).tolist() == [-1, -1, 0, 0, 0, -1, 1, 1, -1, -1]


def test_without_lines_no_reading_is_on_one():
    time = START + MINUTE * np.arange(3)
    assert lines.assign(time, time[:0], time[:0]).tolist() == [-1, -1, -1]


def _track(courses, *, lon=0.0, lat=10.0, speed=5.0):
    """Sail one minute on each course; positions by pyproj's geodesics (Karney 2013)."""
    geod, lats, lons = Geod(ellps="WGS84"), [lat], [lon]
    for course in courses:
        east, north, _ = geod.fwd(lons[-1], lats[-1], course, speed * 60)
        lons.append(east)
        lats.append(north)
    return START + MINUTE * np.arange(len(lats)), np.array(lats), np.array(lons)


@pytest.mark.parametrize("lon", [0.0, 179.9, -180.0])
def test_lines_are_found_with_their_ends_within_three_minutes(lon):
    turn = np.linspace(90, 270, 12)
    courses = np.concatenate([np.full(120, 90.0), turn, np.full(120, 270.0)])
    courses += 5 * np.sin(np.arange(len(courses)))  # the helm wanders
    time, lats, lons = _track(courses, lon=lon)
    found = lines.find_lines(time, lats, lons, settings=Lines())
    assert found["kind"].tolist() == ["line", "line"]
    ends = found[["start_utc", "end_utc"]].to_numpy()
    true = np.array([[time[0], time[120]], [time[132], time[-1]]])
    assert np.abs((ends - true) / MINUTE).max() <= 3


def test_steady_course_through_north_is_one_line():
    time, lats, lons = _track(np.concatenate([np.full(100, 358.0), np.full(100, 2.0)]))
    assert len(lines.find_lines(time, lats, lons, settings=Lines())) == 1


def test_a_long_silence_ends_a_line():
    time, lats, lons = _track(np.full(240, 45.0))
    time = time.copy()
    time[121:] += 60 * MINUTE
    assert len(lines.find_lines(time, lats, lons, settings=Lines())) == 2


def test_circling_gives_no_line():
    time, lats, lons = _track(np.arange(0, 3600, 12.0))
    assert len(lines.find_lines(time, lats, lons, settings=Lines())) == 0


def _edit(action, target, value=None):
    return {"file": "edits.csv", "row": 2, "action": action, "target": target, "value": value}


def test_edits_rename_and_rekind():
    table = _log([("A", "line", "2024-03-01", "2024-03-02"), ("B", "line", "2024-03-03", "2024-03-04")])
    edited = lines.apply_edits(table, [_edit("rename_line", "A", "L07"), _edit("set_kind", "L07", "tie")])
    assert edited["line"].tolist() == ["L07", "B"]
    assert edited["kind"].tolist() == ["tie", "line"]
    assert table["line"].tolist() == ["A", "B"]


def test_an_edit_of_an_unknown_line_is_a_mistake():
    table = _log([("L07", "line", "2024-03-01", "2024-03-02")])
    with pytest.raises(SurveyError, match=r"edits.csv row 2, set_kind: must name a line .* Did you mean L07\?"):
        lines.apply_edits(table, [_edit("set_kind", "L7", "tie")])


def test_a_name_that_is_taken_is_refused():
    table = _log([("A", "line", "2024-03-01", "2024-03-02"), ("B", "line", "2024-03-03", "2024-03-04")])
    with pytest.raises(SurveyError, match="must be a name used once. Got B"):
        lines.apply_edits(table, [_edit("rename_line", "A", "B")])
