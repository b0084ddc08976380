"""Levelling by hand-made crossings: corrections, datum, what is missing and what is said."""

import json
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from conftest import ROOT

from steps import columns, levelling, stage
from steps.columns import Flag
from steps.errors import SurveyError

START = np.datetime64("2024-05-01T00:00:00", "ns")
HOUR = np.timedelta64(3_600_000_000_000, "ns")


def make_lines(count, ties, survey="one"):
    number = np.arange(count + ties)
    return pd.DataFrame(
        {
            "line": [f"L{k}" if k < count else f"T{k - count}" for k in number],
            "kind": ["line" if k < count else "tie" for k in number],
            "start_utc": START + number * 3 * HOUR,
            "end_utc": START + (number * 3 + 2) * HOUR,
            "readings": 1000,
            "survey": survey,
        }
    )


def make_crossings(lines, pairs, correction, noise=0.0, seed=0):
    """Make crossings of pairs (a, b); `correction(line, share)` is what the readings of a line have too much."""
    rng = np.random.default_rng(seed)
    rows = []
    for a, b in pairs:
        share = rng.uniform(0, 1, 2)
        row = {name: np.nan for name in columns.TABLES["crossovers"]}
        for p, k, s in ((1, a, share[0]), (2, b, share[1])):
            span = lines["end_utc"][k] - lines["start_utc"][k]
            row |= {
                f"survey_{p}": lines["survey"][k],
                f"line_{p}": lines["line"][k],
                f"time_{p}_utc": lines["start_utc"][k] + pd.Timedelta(span * s),
                f"reading_{p}": int(s * 1000),
                f"anomaly_{p}_nt": 100.0 + correction(k, s),
            }
        row["mismatch_nt"] = row["anomaly_1_nt"] - row["anomaly_2_nt"] + noise * rng.standard_normal()
        row |= {"sigma_mismatch_nt": max(noise, 0.1), "status": "used", "angle_deg": 90.0}
        rows.append(row)
    return columns.check(pd.DataFrame(rows, columns=columns.TABLES["crossovers"]), "crossovers")


def grid(count, ties):
    return [(a, count + b) for a in range(count) for b in range(ties)]


def test_constants_are_recovered_with_mean_zero():
    lines = make_lines(6, 3)
    truth = np.random.default_rng(1).normal(0, 4, 9)
    found = levelling.level(make_crossings(lines, grid(6, 3), lambda k, s: truth[k]), lines)
    assert found.value_nt == pytest.approx(truth - truth.mean(), abs=1e-6)
    assert found.crossings["residual_nt"].abs().max() < 1e-6


def test_held_lines_set_the_datum():
    lines = make_lines(5, 2)
    truth = np.arange(7.0)
    held = levelling.held_lines(["T1"], [], lines)
    found = levelling.level(make_crossings(lines, grid(5, 2), lambda k, s: truth[k]), lines, held=held)
    assert found.value_nt == pytest.approx(truth - truth[6], abs=1e-6)
    assert found.covariance[6, 6] == 0


def test_a_hold_must_name_a_line():
    with pytest.raises(SurveyError, match=r"levelling\.hold: must name lines\. Got T9\. Known here: L0, L1, T0\."):
        levelling.held_lines(["T9"], [], make_lines(2, 1))


def test_drift_lowers_the_left_out_figure_when_lines_drift():
    lines = make_lines(10, 5)
    rng = np.random.default_rng(2)
    shift, slope = rng.normal(0, 3, 15), rng.normal(0, 4, 15)
    crossings = make_crossings(lines, grid(10, 5), lambda k, s: shift[k] + slope[k] * (s - 0.5), noise=0.2)
    constant = levelling.level(crossings, lines)
    drift = levelling.level(crossings, lines, model="drift", knots_h=2.0)
    left_out = [levelling.rms(f.crossings["left_out_nt"]) for f in (constant, drift)]
    assert left_out[1] < 0.5 * left_out[0]


def test_lines_without_crossing_and_separate_networks():
    lines = make_lines(6, 2)
    pairs = [(0, 6), (1, 6), (2, 6), (3, 7), (4, 7)]
    truth = np.array([1.0, 2, 3, 4, 5, 6, 7, 8])
    found = levelling.level(make_crossings(lines, pairs, lambda k, s: truth[k]), lines)
    assert found.network.tolist() == [0, 0, 0, 1, 1, -1, 0, 1]
    assert np.isnan(found.value_nt[5])
    assert np.isnan(found.covariance[5]).all()
    first, second = [0, 1, 2, 6], [3, 4, 7]
    assert found.value_nt[first] == pytest.approx(truth[first] - truth[first].mean(), abs=1e-6)
    assert found.value_nt[second] == pytest.approx(truth[second] - truth[second].mean(), abs=1e-6)


def test_a_wrong_crossing_is_rejected_with_a_reason():
    lines = make_lines(8, 4)
    truth = np.random.default_rng(3).normal(0, 4, 12)
    crossings = make_crossings(lines, grid(8, 4), lambda k, s: truth[k], noise=0.5)
    crossings.loc[7, "mismatch_nt"] += 40
    found = levelling.level(crossings, lines)
    assert found.crossings["status"][7].startswith("does not fit the others: off by ")
    assert np.isnan(found.crossings["residual_nt"][7])
    assert found.crossings["weight"][7] == 0
    assert found.value_nt == pytest.approx(truth - truth.mean(), abs=1.5)


@pytest.mark.parametrize("pairs", [[], [(0, 1)]])
def test_too_little_to_level_runs_to_the_end(pairs):
    lines = make_lines(2, 1)
    found = levelling.level(make_crossings(lines, pairs, lambda k, s: float(k)), lines)
    assert np.isnan(found.value_nt[2])
    assert np.isfinite(found.value_nt[:2]).all() == bool(pairs)
    table = levelling.line_statistics(found, lines, np.zeros(3, bool))
    assert table["status"][2] == "no usable crossing"


def test_readings_get_the_level_at_their_time_and_a_flag_where_there_is_none():
    lines = make_lines(4, 2)
    truth = np.random.default_rng(4).normal(0, 4, 6)
    found = levelling.level(make_crossings(lines, grid(4, 2)[:-2], lambda k, s: truth[k]), lines)
    at = levelling.at_readings(found, 0, np.array([0, 1, 3, -1]), np.array([START] * 4))
    assert at["level_nt"][:2].to_numpy() == pytest.approx(found.value_nt[:2])
    assert np.isnan(at["level_nt"][2:]).all()
    assert at["level_flags"].tolist() == [0, 0, Flag.NO_LEVEL, Flag.NO_LEVEL]


def run_stage(folder, crossings, surveys, settings=None, edits=()):
    """Run the stage as the workflow does, on tables in `folder`."""
    words = {
        name: [] for name in ("readings", "lines", "line_table", "position", "diurnal", "heading", "heading_record")
    }
    outputs = []
    for key, lines in surveys.items():
        place = folder / key
        place.mkdir()
        index = np.repeat(np.arange(len(lines)), 20)
        time = np.concatenate(
            [pd.date_range(a, b, periods=20) for a, b in zip(lines["start_utc"], lines["end_utc"], strict=True)]
        )
        n = len(time)
        tables = {
            "readings": pd.DataFrame({"reading": np.arange(n), "time_utc": time.astype("datetime64[ns]")}),
            "lines": pd.DataFrame({"line_index": index.astype("int32")}),
            "line_table": lines.drop(columns="survey"),
            "position": pd.DataFrame({"ship_heading_deg": np.zeros(n)}),
            "diurnal": pd.DataFrame({"diurnal_nt": np.zeros(n)}),
            "heading": pd.DataFrame({"heading_nt": np.zeros(n)}),
        }
        for name, table in tables.items():
            table.to_parquet(place / f"{name}.parquet")
            words[name].append(str(place / f"{name}.parquet"))
        (place / "heading_record.json").write_text("{}")
        words["heading_record"].append(str(place / "heading_record.json"))
        outputs.append(place / "levelling.parquet")
    crossings.to_parquet(folder / "crossovers.parquet")
    words["crossovers"] = [str(folder / "crossovers.parquet")]
    outputs += [
        folder / name
        for name in (
            "levelling_lines.parquet",
            "levelling_crossovers.parquet",
            "level_covariance.npz",
            "levelling_record.json",
        )
    ]
    options = {"settings": settings or {}, "survey": {"name": "test", "members": list(surveys)}, "edits": list(edits)}
    command = [sys.executable, "-m", "steps.levelling"]
    for name, files in words.items():
        command += [f"--{name}", *files]
    command += ["--write", *map(str, outputs), "--options", json.dumps(options)]
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True)


def test_the_stage_levels_two_surveys_together(tmp_path):
    one, two = make_lines(4, 2, "one"), make_lines(3, 1, "two")
    lines = pd.concat([one, two], ignore_index=True)
    pairs = [*grid(4, 2), *[(6 + k, 9) for k in range(3)], (0, 9), (7, 5)]
    truth = np.random.default_rng(5).normal(0, 4, len(lines))
    crossings = make_crossings(lines, pairs, lambda k, s: truth[k], noise=0.05)
    edit = {"action": "hold_line", "target": "T0", "member": "two", "file": "edits.csv", "row": 2}
    for run in ("a", "b"):
        folder = tmp_path / run
        folder.mkdir()
        done = run_stage(folder, crossings, {"one": one, "two": two}, edits=[edit])
        assert done.returncode == 0, done.stderr
    table = pd.read_parquet(folder / "levelling_lines.parquet")
    assert table["level_nt"].to_numpy() == pytest.approx(truth - truth[9], abs=0.3)
    assert table["status"][9] == "held at zero"
    first = pd.read_parquet(folder / "one" / "levelling.parquet")
    assert len(first) == 120
    assert first["level_nt"][0] == pytest.approx(table["level_nt"][0])
    with np.load(folder / "level_covariance.npz") as stored:
        assert stored["covariance_nt2"].shape == (len(stored["line"]),) * 2
        assert np.sqrt(stored["covariance_nt2"][0, 0]) == pytest.approx(first["sigma_level_nt"][0])
    for path in sorted(folder.rglob("*")):
        if path.is_file():
            assert path.read_bytes() == (tmp_path / "a" / path.relative_to(folder)).read_bytes(), path.name


def test_the_stage_says_that_nothing_can_be_levelled(tmp_path):
    lines = make_lines(1, 0)
    done = run_stage(tmp_path, make_crossings(lines, [], None), {"one": lines})
    assert done.returncode == 0, done.stderr
    assert "There is no usable crossing: no line can be levelled" in done.stdout
    assert pd.read_parquet(tmp_path / "one" / "levelling.parquet")["level_nt"].isna().all()


def test_the_stage_tells_a_wrong_edit_in_one_sentence(tmp_path):
    lines = make_lines(2, 1)
    edit = {"action": "hold_line", "target": "T9", "member": "one", "file": "edits.csv", "row": 4}
    done = run_stage(tmp_path, make_crossings(lines, grid(2, 1), lambda k, s: 0.0), {"one": lines}, edits=[edit])
    assert done.returncode == 1
    assert (
        done.stderr == "edits.csv row 4, hold_line: must name a line of this survey. Got T9. Known here: L0, L1, T0.\n"
    )
    assert stage.Job is not None
