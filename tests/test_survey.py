"""A survey's folder and its settings: what is found, and what a mistake is told as."""

import json

import pytest

from steps import survey
from steps.errors import SurveyError

GOOD = """\
survey:
  name: Test survey
ingest:
  readings:
    format: delimited
    files: [raw/*.csv]
    columns: {total_field_nt: F}
    time: {columns: [time]}
    clock: {offset_s: 0.0}
  navigation:
    - format: nmea
      files: [raw/nav.nmea]
lines:
  log: lines.csv
position:
  antenna_to_tow_point: {forward_m: -30, starboard_m: 0}
  layback:
    log: cable.csv
diurnal:
  base_stations: []
"""


@pytest.fixture
def folder(tmp_path, monkeypatch):
    (tmp_path / "raw").mkdir()
    for name in ("raw/a.csv", "raw/b.csv", "raw/nav.nmea", "lines.csv", "cable.csv", "survey.yaml"):
        (tmp_path / name).write_text(name)
    (tmp_path / "survey.yaml").write_text(GOOD)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def _with(folder, old, new):
    assert old in GOOD
    (folder / "survey.yaml").write_text(GOOD.replace(old, new))


def test_raw_files_are_found_in_order(folder):
    run = survey.load()
    (member,) = run.members.values()
    assert member.key == "test-survey"
    assert member.raw_inputs("ingest") == {"readings": ["raw/a.csv", "raw/b.csv"], "navigation_0": ["raw/nav.nmea"]}
    assert member.raw_inputs("position") == {"cable": ["cable.csv"]}
    assert member.raw_arguments("lines") == "--log lines.csv"


def test_no_settings_file_is_one_sentence(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    with pytest.raises(SurveyError, match="must be in the folder of the survey.*snakemake -d FOLDER"):
        survey.load()


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        (
            "    log: cable.csv",
            "    cable_out_m: -40",
            "line 18, position.layback.cable_out_m: must be between 0 and 5000. Got -40.",
        ),
        ("  log: lines.csv", "  logg: lines.csv", r"line 14, lines.logg: is not a setting. Did you mean log\?"),
        ("lines:", "linse:", r"line 13, linse: is not a setting. Did you mean lines\?"),
        ("  name: Test survey", "  name: ''", "line 2, survey.name: must not be empty"),
        (
            "format: delimited",
            "format: excel",
            "line 5, ingest.readings.format: must be one of delimited, mgd77t. Got excel",
        ),
        ("    - format: nmea", "    - formt: nmea", r"ingest.navigation\[1\].format: must be given"),
        ("    clock: {offset_s: 0.0}\n", "", r"ingest.readings.clock: must be given"),
        ("offset_s: 0.0", "offset_s: soon", "ingest.readings.clock.offset_s: must be a number. Got soon"),
        ("offset_s: 0.0", "offset_s: .nan", "ingest.readings.clock.offset_s: must be a finite number"),
        ("offset_s: 0.0", "offset_s: 0.0, drift_s_per_day: 1", "ingest.readings.clock: needs `reference`"),
        ("    log: cable.csv", "    model: pursuit", "position.layback: needs exactly one of `log` and `cable_out_m`"),
        (
            "log: cable.csv",
            "log: cabel.csv",
            "position.layback.log: must name a file of the survey's folder. Got cabel.csv",
        ),
        ("log: cable.csv", "log: ../cable.csv", "position.layback.log: must be a file inside the survey's folder"),
        ("raw/*.csv", "/etc/*.conf", "line 6, ingest.readings.files: must be files inside the survey's folder"),
        ("raw/*.csv", "raw/*.dat", "line 6, ingest.readings.files: must match at least one file"),
        ("raw/*.csv", "raw/../../*.dat", "must be files inside the survey's folder"),
        ("base_stations: []", "datum: dawn", "diurnal.datum: must be 'quiet_night' or 'survey_mean'"),
        ("base_stations: []", "chord_min: 0", "diurnal.chord_min: must be between 0 and 180. Got 0"),
        ("survey:", "survey: {name: x}\nsurvey:", "line 2: must be valid YAML. Got the key survey stands twice"),
        ("survey:", "survey: [", "must be valid YAML"),
        ("  name: Test survey", "  name: &n Test\n  vessel: *n", "must not use YAML aliases"),
    ],
)
def test_a_mistake_in_the_settings_is_one_sentence(folder, old, new, sentence):
    _with(folder, old, new)
    with pytest.raises(SurveyError, match=sentence):
        survey.load()


def test_all_mistakes_are_told_at_once(folder):
    _with(folder, "forward_m: -30", "forward_m: far")
    text = (folder / "survey.yaml").read_text().replace("name: Test survey", "name: Test survey\n  ship: X")
    (folder / "survey.yaml").write_text(text)
    with pytest.raises(SurveyError, match="must be a number") as caught:
        survey.load()
    assert len(caught.value.sentences) == 2
    assert "survey.ship: is not a setting" in str(caught.value)


def test_settings_that_are_no_text_are_refused(folder):
    (folder / "survey.yaml").write_bytes(b"survey: \xff\xfe")
    with pytest.raises(SurveyError, match="must be UTF-8 text. Got byte 0xff at 8"):
        survey.load()


def test_settings_that_are_a_list_are_refused(folder):
    (folder / "survey.yaml").write_text("- a\n- b\n")
    with pytest.raises(SurveyError, match="must hold settings as `key: value` lines"):
        survey.load()


def test_options_hold_only_what_the_stage_depends_on(folder):
    before = survey.load()
    (key,) = before.members
    _with(folder, "forward_m: -30", "forward_m: -31")
    after = survey.load()
    assert after.options("position", key) != before.options("position", key)
    for stage in ("ingest", "lines", "screen", "main_field", "profiles"):
        assert after.options(stage, key) == before.options(stage, key)


def test_order_and_comments_in_the_settings_change_no_option(folder):
    before = survey.load()
    _with(folder, "{forward_m: -30, starboard_m: 0}", "{starboard_m: 0.0, forward_m: -30.0}  # a remark")
    after = survey.load()
    assert all(
        after.options(stage, *after.members) == before.options(stage, *before.members)
        for stage in ("position", "lines")
    )


def test_content_of_a_hand_written_table_counts_whatever_its_date(folder):
    (key,) = survey.load().members
    before = survey.load().options("position", key)
    (folder / "cable.csv").write_text("other")
    assert survey.load().options("position", key) != before


def test_edits_go_to_their_stages(folder):
    (folder / "edits.csv").write_text(
        "action,target,start_utc,end_utc,value,reason,by,date\n"
        "reject,,2024-01-01T00:00:00,2024-01-01T00:10:00,,net,AB,2024-02-01\n"
        "hold_line,L1,,,,reference,AB,2024-02-01\n"
    )
    _with(folder, "diurnal:", "edits: edits.csv\ndiurnal:")
    run = survey.load()
    (key,) = run.members
    assert [edit["action"] for edit in json.loads(run.options("screen", key))["edits"]] == ["reject"]
    assert json.loads(run.options("levelling"))["edits"][0]["member"] == key


def test_a_mistake_in_the_edits_is_told_with_those_of_the_settings(folder):
    (folder / "edits.csv").write_text("action,reason,by,date,target\nrejct,net,AB,2024-02-01,L1\n")
    _with(folder, "diurnal:", "edits: edits.csv\ndiurnal:")
    (folder / "cable.csv").unlink()
    with pytest.raises(SurveyError, match="cable.csv") as caught:
        survey.load()
    assert "edits.csv row 2, action: must be one of" in str(caught.value)


def test_a_collection_names_its_members(folder, tmp_path):
    for name in ("north", "south"):
        (tmp_path / name / "raw").mkdir(parents=True)
        for file in ("raw/a.csv", "raw/nav.nmea", "lines.csv", "cable.csv"):
            (tmp_path / name / file).write_text("")
        (tmp_path / name / "survey.yaml").write_text(GOOD)
    (tmp_path / "survey.yaml").write_text("survey: {name: Both}\nmembers: ['*th']\n")
    run = survey.load()
    assert list(run.members) == ["north", "south"]
    assert run.members["south"].raw_inputs("ingest")["readings"] == ["south/raw/a.csv"]
    (tmp_path / "survey.yaml").write_text("survey: {name: Both}\nmembers: [north, west]\n")
    with pytest.raises(SurveyError, match=r"members: must name folders that hold a survey.yaml. Got west"):
        survey.load()


@pytest.mark.parametrize(
    ("name", "path"),
    [
        ("Übung 7/8", "ubung-7-8"),
        ("../../etc", "etc"),
        ("\U0001f9ed", "unnamed"),
        ("a" * 300, "a" * 60),
        ("L_1", "l_1"),
    ],
)
def test_any_name_becomes_a_safe_path(name, path):
    assert survey.slug(name) == path
