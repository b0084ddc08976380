"""The report: its figures, its page driven in a browser, what it says of the run before."""

import re
import shutil

import numpy as np
import pandas as pd
import pytest
from conftest import run_workflow

from steps import figures, history, page, report
from steps.columns import Flag

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
NASTY = ["<script>alert(1)</script>", 'a"b,c', "=1+1", "L\n7", "\U0001f9ed", "x" * 300, "$x$_{y}"]


# -- parts -----------------------------------------------------------------------------------------------------------


def test_thinning_keeps_every_extreme():
    value = np.zeros(100_000)
    spikes = np.random.default_rng(1).choice(100_000, 40, replace=False)
    value[spikes] = np.where(np.arange(40) % 2, 7.0, -7.0)
    value[50:60] = np.nan
    kept = figures.thin(value, 2000)
    assert len(kept) <= 2002
    assert (np.diff(kept) > 0).all()
    stretches = {s // 100 for s in spikes}
    for stretch in stretches:
        own, shown = value[stretch * 100 : stretch * 100 + 100], value[kept[kept // 100 == stretch]]
        assert np.nanmax(shown) == np.nanmax(own)
        assert np.nanmin(shown) == np.nanmin(own)


@pytest.mark.parametrize("lon", [0.0, 179.9, -180.0])
@pytest.mark.parametrize("lat", [0.0, 60.0, -89.0])
def test_maps_are_true_to_scale_about_the_middle(lat, lon):
    """Against pyproj's geodesics (Karney 2013): 10 km from the middle are 10 km on the map, in their azimuth."""
    from pyproj import Geod

    azimuth = np.arange(0, 360, 30.0)
    n = len(azimuth)
    lons, lats, _ = Geod(ellps="WGS84").fwd(np.full(n, lon), np.full(n, lat), azimuth, np.full(n, 10_000.0))
    plane = figures.Plane(lats, lons)
    east, north = plane(lats, lons)
    east, north = east - plane(np.array([lat]), np.array([lon]))[0], north - plane(np.array([lat]), np.array([lon]))[1]
    np.testing.assert_allclose(np.hypot(east, north), 10.0, rtol=0, atol=0.002)


def test_numbers_for_people():
    assert report.number(1234567) == "1 234 567"
    assert report.number(-1.236) == "−1.24"
    assert report.number(None) == report.number(np.nan) == "–"


def test_flags_are_counted():
    flags = np.array([Flag.SPIKE | Flag.OFF_LINE, Flag.OFF_LINE, 0], np.uint32)
    rows = {row["name"]: (row["readings"], row["rejecting"]) for row in report.flag_counts(flags)}
    assert rows == {"spike": (1, True), "off line": (2, False)}


def _state(rms, level, **change):
    base = {
        "figures": {"rms": rms},
        "lines": {'["s", "L1"]': {"level_nt": level, "kept": 100}},
        "settings": {"s.screen": {"threshold": 6.0, "inner": {"a": 1}}},
        "edits": [],
        "files": {"raw/a": "1"},
        "code": {"s screen": "x"},
    }
    return base | change


def _profiles(shift=0.0):
    x = np.arange(0, 10, 0.1)
    value = np.where((x > 4) & (x < 5), np.nan, np.sin(x) + shift)
    return pd.DataFrame({"survey": "s", "line": "L1", "distance_km": x, "anomaly_nt": value})


def test_history_compares_with_the_last_run_that_gave_something_else(tmp_path):
    assert history.keep(tmp_path, _state(2.0, 0.1), _profiles()) is None
    assert history.keep(tmp_path, _state(2.0, 0.1), _profiles()) is None, "the same run again is no new entry"
    now = _state(
        1.0,
        0.3,
        settings={"s.screen": {"threshold": 5.0, "inner": {"b": 1}}},
        edits=["reject L1"],
        files={"raw/a": "2"},
    )
    before = history.keep(tmp_path, now, _profiles(0.5))
    changes = history.compare(before, now, _profiles(0.5))
    assert changes["figures"] == [("rms", 2.0, 1.0)]
    assert "s.screen.threshold: 6.0 → 5.0" in changes["settings"]
    assert "s.screen.inner.a: removed" in changes["settings"]
    assert changes["edits"] == ["added: reject L1"]
    assert changes["files"] == ["content raw/a: changed"]
    assert changes["code"] == []
    (row,) = changes["lines"]
    assert row["rms_nt"] == pytest.approx(0.5)
    assert row["largest_nt"] == pytest.approx(0.5)
    assert (row["level_nt_before"], row["level_nt_now"]) == (0.1, 0.3)
    assert history.keep(tmp_path, now, _profiles(0.5))[0]["figures"] == {"rms": 2.0}


def test_history_is_small_and_survives_half_entries(tmp_path):
    for number in range(history.KEPT_RUNS + 5):
        history.keep(tmp_path, _state(float(number), 0.0), _profiles())
    assert len(list(tmp_path.glob("*.json"))) == history.KEPT_RUNS
    (tmp_path / "9999-broken.json").write_text("{")  # a killed run: no table beside it
    assert history.keep(tmp_path, _state(0.5, 0.0), _profiles())[0]["figures"] == {"rms": float(history.KEPT_RUNS + 4)}


# -- the page --------------------------------------------------------------------------------------------------------


def _tables(names):
    parts, n = [], 400
    for k in range(len(names)):
        t = np.arange(n)
        parts.append(
            pd.DataFrame(
                {
                    "line_index": k,
                    "time_utc": np.datetime64("2024-05-01", "ns") + (k * 1000 + t) * np.timedelta64(1, "s"),
                    "total_field_nt": 46000 + np.sin(t / 30.0),
                    "main_field_nt": 45990.0,
                    "diurnal_nt": 1.0,
                    "heading_nt": np.nan,
                    "level_nt": 0.5,
                    "anomaly_nt": np.where(t == 100, np.nan, np.sin(t / 30.0)),
                    "sigma_anomaly_nt": 0.3,
                    "sensor_latitude_deg": 10 + 0.01 * k,
                    "sensor_longitude_deg": (179.99 + t * 5e-5 + 180) % 360 - 180,
                    "flags": np.where(t == 100, int(Flag.SPIKE), 0).astype(np.uint32),
                }
            )
        )
    return pd.concat(parts, ignore_index=True), pd.DataFrame({"line": names, "kind": "line"})


def _crossings(names):
    table = pd.DataFrame({"survey_1": ["s"], "survey_2": ["s"], "line_1": [names[0]], "line_2": [names[1]]})
    for name in (
        "sensor_latitude_deg",
        "sensor_longitude_deg",
        "residual_nt",
        "mismatch_nt",
        "value_1_nt",
        "value_2_nt",
    ):
        table[name] = {"sensor_latitude_deg": 10.005, "sensor_longitude_deg": 180.0 - 0.001}.get(name, 0.4)
    for side, seconds in (("1", 60), ("2", 1100)):
        table[f"time_{side}_utc"] = np.datetime64("2024-05-01", "ns") + np.timedelta64(seconds, "s")
    return table.assign(status="used")


@pytest.fixture
def nasty_page(tmp_path):
    """Return a page of a survey whose names are as bad as names can be."""
    surveys = {"s": _tables(NASTY)}
    columns, tracks = page.gather(surveys)
    heading = "action,target,start_utc,end_utc,value,reason,by,date\n"
    content = {
        "title": NASTY[0],
        "version": "0",
        "headline": [("Readings", "1")],
        "notes": [("screen", NASTY[0])],
        "done": [("screen", NASTY[1])],
        "flags": report.flag_counts(surveys["s"][0]["flags"].to_numpy()),
        "lines": [
            {"survey": "s", "line": name, "kind": "line", "readings": 1, "kept": 1, "noise": 0.1, "level_nt": None}
            | {"sigma_level_nt": None, "crossings": 0, "rms_before_nt": None, "rms_after_nt": None}
            | {"rms_left_out_nt": None, "status": "used"}
            for name in NASTY
        ],
        "several": False,
        "edits": [],
        "files": [{"file": NASTY[0], "sha256": "0"}],
        "settings": [("screen", NASTY[0])],
        "figures": [],
        "terms": [],
        "estimates": [],
        "changes": None,
        "view": page.linked_view(columns, tracks, _crossings(NASTY), heading),
    }
    path = tmp_path / "report.html"
    path.write_text(report.as_page(content), encoding="utf-8")
    return path


def _drive(path, script):
    """Open a page in headless Chromium and run `script(page)`; returns what it returns and all that went wrong."""
    if CHROMIUM is None:
        pytest.skip("no Chromium on this machine")
    from playwright.sync_api import sync_playwright

    wrong = []
    with sync_playwright() as play:
        browser = play.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox", "--disable-gpu"])
        view = browser.new_page(viewport={"width": 1100, "height": 1400})
        view.on("console", lambda m: wrong.append(m.text) if m.type == "error" else None)
        view.on("pageerror", lambda e: wrong.append(str(e)))
        view.on("dialog", lambda d: (wrong.append("a script of the data ran"), d.dismiss()))
        view.on(
            "request", lambda r: wrong.append(r.url) if r.url.split(":")[0] not in ("file", "data", "blob") else None
        )
        view.goto(f"file://{path}")
        view.wait_for_function("window.Bokeh && Bokeh.documents.length && Bokeh.documents[0].get_model_by_name('line')")
        view.wait_for_timeout(500)
        result = script(view)
        browser.close()
    return result, wrong


def _model(name):
    return f"Bokeh.documents[0].get_model_by_name('{name}')"


def _steps(view):
    """Pick lines, select a stretch, fill the form in, and return what the page then holds."""
    told = {"first": view.evaluate(f"{_model('line')}.value")}
    view.get_by_text("next line", exact=False).click()
    view.wait_for_timeout(200)
    told["second"] = view.evaluate(f"{_model('line')}.value")
    shown = "Bokeh.documents[0]._all_models"
    find = (
        "(() => { for (const m of Bokeh.documents[0]._all_models.values())"
        " if (m.type === 'ColumnDataSource' && m.data.rejected) return m })()"
    )
    assert shown
    told["points"] = view.evaluate(f"{find}.data.time.length")
    told["rejected"] = view.evaluate(f"Array.from({find}.data.rejected).filter(isFinite).length")
    view.evaluate(f"{find}.selected.indices = [10, 11, 12]")
    view.get_by_label("Reason").fill('net, "passing" trawler')
    view.get_by_label("By", exact=True).fill("AB")
    view.get_by_text("Add the row", exact=True).click()
    view.wait_for_timeout(200)
    told["rows"] = view.evaluate(f"{_model('rows')}.value")
    return told


def test_the_page_works_and_no_name_runs_a_script(nasty_page, tmp_path):
    told, wrong = _drive(nasty_page, _steps)
    assert wrong == []
    assert told["first"] == NASTY[0]
    assert told["second"] == NASTY[1]
    assert told["points"] == 400
    assert told["rejected"] == 1
    # the row is valid for the pipeline
    from steps import edits
    from steps.formats import tables

    (tmp_path / "edits.csv").write_text(told["rows"], encoding="utf-8")
    table = tables.read_table(tmp_path / "edits.csv", edits.COLUMNS, edits.OPTIONAL)
    assert table["target"].tolist() == [NASTY[1]]
    assert table["reason"].tolist() == ['net, "passing" trawler']
    time = pd.Timestamp("2024-05-01T00:16:50")
    assert table["start_utc"].tolist() == [time]
    assert table["end_utc"].tolist() == [time + pd.Timedelta(seconds=2)]


def test_equal_views_are_equal_bytes():
    surveys = {"s": _tables(["A", "B"])}
    pages = [page.linked_view(*page.gather(surveys), _crossings(["A", "B"]), "") for _ in range(2)]
    names = [re.sub(r'p\d{4,}|"\d{4,}"', "", part) for part in (pages[0][0], pages[1][0])]
    assert names[0] == names[1]


# -- the demo --------------------------------------------------------------------------------------------------------


def test_the_demo_s_report_opens_alone_and_is_small(reduced_demo):
    path = reduced_demo / "reduced" / "report.html"
    assert path.stat().st_size < 15e6
    assert "Not for navigation." in path.read_text(encoding="utf-8")

    def look(view):
        return view.evaluate(f"{_model('line')}.value"), view.evaluate("document.querySelectorAll('figure img').length")

    (line, images), wrong = _drive(path, look)
    assert wrong == []
    assert line
    assert images >= 5


def test_figures_are_written_as_png_and_pdf(reduced_demo):
    names = {path.name for path in (reduced_demo / "reduced" / "figures").iterdir()}
    for figure in ("tracks", "anomaly", "crossings", "base_stations"):
        assert {f"{figure}.png", f"{figure}.pdf"} <= names


def test_the_summary_names_every_line_and_the_cautions(reduced_demo):
    text = (reduced_demo / "reduced" / "summary.txt").read_text(encoding="utf-8")
    for row in (reduced_demo / "lines.csv").read_text(encoding="utf-8").splitlines()[1:]:
        name = row.split(",")[0].strip()
        if name and not name.startswith("#") and name != "L180":  # renamed by an edit
            assert name in text
    assert all(sentence in text for sentence in report.CAUTIONS)


@pytest.mark.slow
def test_a_changed_setting_is_told_against_the_run_before(reduced_demo, tmp_path):
    folder = shutil.copytree(reduced_demo, tmp_path / "demo")
    settings = folder / "survey.yaml"
    settings.write_text(
        re.sub(r"(?m)^(  robust:) *\S+", r"\1 false", settings.read_text(encoding="utf-8")), encoding="utf-8"
    )
    done = run_workflow(folder)
    assert done.returncode == 0, done.stdout + done.stderr
    text = (folder / "reduced" / "report.html").read_text(encoding="utf-8")
    part = text.split("against the run before")[1].split("end of the part that depends")[0]
    assert "levelling.robust: True → False" in part


@pytest.mark.slow
def test_when_the_report_fails_the_old_one_stays(reduced_demo, tmp_path):
    folder = shutil.copytree(reduced_demo, tmp_path / "demo")
    kept = [folder / "reduced" / name for name in ("report.html", "summary.txt")]
    old = [path.read_bytes() for path in kept]
    (folder / "reduced" / "levelling_lines.parquet").write_bytes(b"broken")
    assert run_workflow(folder, "-R", "report").returncode == 1
    assert [path.read_bytes() for path in kept] == old


@pytest.mark.slow
def test_a_survey_without_a_profile_still_gets_a_report_that_says_why(tmp_path):
    from conftest import copy_demo

    folder = copy_demo(tmp_path / "demo")
    log = folder / "lines.csv"
    log.write_text(re.sub(r",(line|tie),", ",transit,", log.read_text(encoding="utf-8")), encoding="utf-8")
    done = run_workflow(folder)
    assert done.returncode == 0, done.stdout + done.stderr
    text = (folder / "reduced" / "report.html").read_text(encoding="utf-8")
    assert "no track crosses another" in text or "no crossing" in text
    assert "0 profiles" in (folder / "reduced" / "summary.txt").read_text(encoding="utf-8")
