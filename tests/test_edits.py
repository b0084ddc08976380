"""A person's edits: their form, and the readings they touch."""

import numpy as np
import pytest

from steps import edits
from steps.errors import SurveyError

ROW = {
    "row": 2,
    "action": "reject",
    "target": "",
    "start_utc": "2024-03-01T00:00:10",
    "end_utc": "2024-03-01T00:00:20",
    "value": None,
    "reason": "fishing gear",
    "by": "AB",
    "date": "2024-04-02",
}
TIME = np.datetime64("2024-03-01", "ns") + np.arange(60) * np.timedelta64(1, "s")


def test_a_span_touches_both_its_ends():
    (edit,) = edits.check([ROW], "edits.csv")
    assert np.flatnonzero(edits.select(edit, TIME)).tolist() == list(range(10, 21))


def test_a_line_and_a_span_touch_what_is_in_both():
    (edit,) = edits.check([{**ROW, "target": "L2"}], "edits.csv")
    line_index = np.where(np.arange(60) < 15, 0, 1)
    touched = edits.select(edit, TIME, line_index=line_index, line_names=["L1", "L2"])
    assert np.flatnonzero(touched).tolist() == list(range(15, 21))


def test_a_file_may_be_named_by_its_last_part():
    (edit,) = edits.check([{**ROW, "target": "file:b.csv", "start_utc": None, "end_utc": None}], "edits.csv")
    source = (np.arange(60) >= 40).astype(int)
    touched = edits.select(edit, TIME, source_file=source, source_names=["raw/a.csv", "raw/b.csv"])
    assert np.flatnonzero(touched).tolist() == list(range(40, 60))


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"target": "L3"}, r"edits.csv row 2, reject: must name a line of this survey. Got L3. Known here: L1."),
        ({"target": "file:c.csv"}, "must name a file of this survey. Got c.csv"),
        ({"start_utc": "2025-01-01", "end_utc": "2025-01-02"}, "must touch at least one reading. Got none."),
    ],
)
def test_an_edit_that_touches_nothing_is_a_mistake(change, sentence):
    (edit,) = edits.check([{**ROW, **change}], "edits.csv")
    with pytest.raises(SurveyError, match=sentence):
        edits.select(
            edit,
            TIME,
            line_index=np.zeros(60, int),
            line_names=["L1"],
            source_file=np.zeros(60, int),
            source_names=["a"],
        )


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        ({"action": "rejct"}, r"action: must be one of reject, keep, .* Got rejct. Did you mean reject\?"),
        ({"start_utc": None}, "must have both start_utc and end_utc, or neither"),
        ({"end_utc": "2024-02-01"}, "end_utc: must not be before start_utc. Got 2024-02-01"),
        ({"value": "5"}, "value: reject takes no value. Got 5"),
        ({"reason": None}, "reason: must say something, for the record"),
        ({"by": None}, "by: must say something, for the record"),
        ({"start_utc": None, "end_utc": None}, "target: reject must name a line or file:NAME or a span"),
        ({"action": "set_cable_out"}, r"value: set_cable_out must have a value \(metres\)"),
        ({"action": "set_cable_out", "value": "-4"}, "value: must be between 0 and 5000 m. Got -4"),
        ({"action": "set_cable_out", "value": "nan"}, "value: must be between 0 and 5000 m. Got nan"),
        ({"action": "set_cable_out", "value": "long"}, "value: must be between 0 and 5000 m. Got long"),
        (
            {"action": "set_cable_out", "value": "5", "target": "file:a"},
            "target: set_cable_out works on a line or span",
        ),
        ({"action": "hold_line"}, "target: hold_line must name a line. Got nothing"),
        ({"action": "set_kind", "target": "L1", "value": "tye"}, "value: must be line, tie, calibration or transit"),
        (
            {"action": "shift_clock", "target": "L1", "value": "2"},
            "target: shift_clock works on a file or span. Got L1",
        ),
    ],
)
def test_a_badly_formed_edit_is_a_mistake(change, sentence):
    with pytest.raises(SurveyError, match=sentence):
        edits.check([{**ROW, **change}], "edits.csv")


def test_all_mistakes_are_told_at_once():
    with pytest.raises(SurveyError, match="must") as caught:
        edits.check([{**ROW, "reason": None}, {**ROW, "row": 3, "action": "drop"}], "edits.csv")
    assert len(caught.value.sentences) == 2


def test_each_stage_gets_its_own_edits():
    rows = edits.check([ROW, {**ROW, "row": 3, "action": "shift_clock", "value": "1.5"}], "edits.csv")
    assert [edit["row"] for edit in edits.for_stage(rows, "screen")] == [2]
    assert edits.for_stage(rows, "ingest")[0]["value"] == 1.5
