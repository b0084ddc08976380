"""Profiles: projection against pyproj, resampling against sinusoids, sigmas against scatter, and what files tell."""

import csv
import io
import json
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from conftest import ROOT
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

from steps import columns, profiles, projection
from steps.columns import COLUMNS, FLAG_MEANINGS, REJECTING, Flag
from steps.formats.profile_csv import file_names
from steps.resampling import even_samples, once_run, resample_evenly
from steps.settings import Profiles

GEOD = Geod(ellps="WGS84")


def shoot(lat, lon, azimuth, metres):
    """Go along a geodesic; return latitude, longitude and the azimuth there (pyproj, Karney 2013)."""
    whole = np.ones(len(metres))
    lon, lat, back = GEOD.fwd(lon * whole, lat * whole, azimuth * whole, metres)
    return np.asarray(lat), np.asarray(lon), np.asarray(back) + 180.0


# -- projection ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("length_m", "aside_m", "bound_m"), [(50e3, 2e3, 1e-5), (500e3, 50e3, 2e-3), (2e6, 100e3, 0.02), (8e6, 10e3, 1e-4)]
)
def test_distance_and_offset_are_those_of_geodesics(length_m, aside_m, bound_m):
    """Reference: pyproj: along one geodesic, then off it at right angles; anywhere, poles and 180 degrees included."""
    rng = np.random.default_rng(1)
    for _ in range(40):
        lat, lon, azimuth = np.degrees(np.arcsin(rng.uniform(-1, 1))), rng.uniform(-180, 180), rng.uniform(0, 360)
        along, aside = rng.uniform(-length_m, length_m, 40), rng.uniform(-aside_m, aside_m, 40)
        foot_lat, foot_lon, direction = shoot(lat, lon, azimuth, along)
        there_lat, there_lon, _ = shoot(foot_lat, foot_lon, direction + 90.0, aside)
        distance, offset = projection.project_on_line(there_lat, there_lon, azimuth_deg=azimuth, lat_0=lat, lon_0=lon)
        assert distance * 1000 == pytest.approx(along, abs=bound_m)
        assert offset * 1000 == pytest.approx(aside, abs=bound_m)


def test_readings_along_a_track_are_projected_like_each_alone():
    rng = np.random.default_rng(2)
    lat, lon = (60 + np.cumsum(rng.normal(3e-5, 2e-5, 6000)), 179.9 + np.cumsum(rng.normal(3e-5, 4e-5, 6000)))
    lat[3000:] += 0.3  # a jump within a block of neighbours
    line = {"azimuth_deg": 35.0, "lat_0": 60.1, "lon_0": -179.0}
    together = projection.project_on_line(lat, lon, **line)
    for k in (0, 17, 2990, 2999, 3000, 3001, 5999):
        alone = projection.project_on_line(lat[k : k + 1], lon[k : k + 1], **line)
        assert together[0][k] == pytest.approx(alone[0][0], abs=1e-6)
        assert together[1][k] == pytest.approx(alone[1][0], abs=1e-6)


@pytest.mark.parametrize(("lat", "lon"), [(44.0, -28.0), (-61.0, 179.98), (89.7, 15.0)])
@pytest.mark.parametrize("azimuth", [18.0, 108.0, 288.0, 359.9])
def test_the_fitted_geodesic_ignores_a_turn_at_the_end(lat, lon, azimuth):
    """A weaving line of 40 km whose last tenth turns away by kilometres: plain least squares would be degrees off."""
    rng = np.random.default_rng(3)
    along = np.linspace(-20e3, 20e3, 2500)
    foot_lat, foot_lon, direction = shoot(lat, lon, azimuth, along)
    aside = 10 * np.sin(along / 900) + rng.normal(0, 2, len(along))
    aside[-250:] += np.linspace(0, 3e3, 250)
    track = shoot(foot_lat, foot_lon, direction + 90.0, aside)[:2]
    found, lat_0, lon_0 = projection.best_fit_azimuth(*track)
    distance, offset = projection.project_on_line(
        np.array([lat_0]), np.array([lon_0]), azimuth_deg=azimuth, lat_0=lat, lon_0=lon
    )
    true = shoot(lat, lon, azimuth, distance * 1000)[2]
    assert abs(offset[0]) < 0.01
    assert (found - true[0] + 180) % 360 - 180 == pytest.approx(0.0, abs=0.05)
    back = projection.best_fit_azimuth(*(part[::-1] for part in track))[0]
    assert (back - found) % 360 == pytest.approx(180.0, abs=0.01)


def test_a_track_that_stands_still_has_no_azimuth():
    with pytest.raises(ValueError, match="a track needs two different positions to have an azimuth"):
        projection.best_fit_azimuth(np.full(5, 10.0), np.full(5, 20.0))


def test_the_sense_of_distance():
    assert projection.turn_towards(288.0, 90.0) == pytest.approx(108.0)
    assert projection.turn_towards(108.0, 90.0) == pytest.approx(108.0)
    assert projection.turn_towards(10.0, 200.0) == pytest.approx(190.0)
    assert projection.turn_towards(180.0, 90.0) == projection.turn_towards(0.0, 90.0) == 0.0


# -- resampling ------------------------------------------------------------------------------------------------------


def irregular(length_km, step_km=0.005, seed=4):
    rng = np.random.default_rng(seed)
    return np.cumsum(rng.uniform(0.5, 1.5, int(length_km / step_km)) * step_km)


@pytest.mark.parametrize(("wavelength", "low", "high"), [(20, 0.995, 1.005), (5, 0.99, 1.01), (3.4, 0.99, 1.01)])
def test_a_wavelength_above_the_new_nyquist_passes(wavelength, low, high):
    """Gain of a sinusoid by least squares of sine and cosine on the even samples; wavelength in spacings."""
    x = irregular(60)
    at, y = resample_evenly(x, np.sin(2 * np.pi * x / (0.1 * wavelength)), spacing_km=0.1, longest_gap_km=0.5)
    inner = slice(10, -10)
    phase = 2 * np.pi * at / (0.1 * wavelength)
    gain, quadrature = np.linalg.lstsq(np.column_stack([np.sin(phase), np.cos(phase)])[inner], y[inner], rcond=None)[0]
    assert low < gain < high
    assert abs(quadrature) < 0.01  # no shift


@pytest.mark.parametrize("wavelength", [2.0, 1.9, 1.5, 1.0, 0.6])
def test_a_wavelength_below_the_new_nyquist_does_not_come_back_as_a_longer_one(wavelength):
    x = irregular(60)
    wave = np.sin(2 * np.pi * x / (0.1 * wavelength) + 1.0)
    at, y = resample_evenly(x, wave, spacing_km=0.1, longest_gap_km=0.5)
    assert np.sqrt(2 * np.mean(y[10:-10] ** 2)) < 0.02
    assert np.sqrt(2 * np.mean(np.interp(at, x, wave) ** 2)) > 0.5, "picking readings would alias"


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    step=st.floats(0.002, 0.4),
    spacing=st.floats(0.05, 1.0),
    slope=st.floats(-50, 50),
    back=st.booleans(),
)
def test_level_and_slope_are_kept_to_the_ends(seed, step, spacing, slope, back):
    x = irregular(max(20 * step, 3.0), step, seed) - 1.7
    at, y = resample_evenly(
        x[::-1] if back else x, 48_000 + slope * (x[::-1] if back else x), spacing_km=spacing, longest_gap_km=1.0
    )
    assert np.isfinite(y).all()
    assert y == pytest.approx(48_000 + slope * at, abs=1e-4)
    assert at == pytest.approx(spacing * np.round(at / spacing))
    if len(at):
        assert at[0] - spacing < x[0] <= at[0] + 1e-6 * spacing
        assert at[-1] - 1e-6 * spacing <= x[-1] < at[-1] + spacing


def test_gaps_stay_gaps_and_nothing_leaks_across_them():
    x = irregular(30)
    x = x[(x < 10) | (x > 10.8) & (x < 20) | (x > 20.3)]
    value = np.where(x < 10.4, 5.0, np.where(x < 20.1, 1000.0, 1000.0))
    at, y = resample_evenly(x, value, spacing_km=0.1, longest_gap_km=0.5)
    inside = (at > x[x < 10][-1] + 1e-9) & (at < x[x > 10.8][0] - 1e-9)
    assert (np.isnan(y) == inside).all()
    assert inside.sum() in (7, 8, 9)
    assert y[at < 10] == pytest.approx(5.0)
    assert y[at > 10.9] == pytest.approx(1000.0)  # the gap of 0.3 km is bridged


def test_sigma_of_noise_is_the_scatter_of_the_samples():
    rng = np.random.default_rng(6)
    x = irregular(12, 0.004)
    even = even_samples(x, spacing_km=0.1, longest_gap_km=0.5)
    said = even.noise(np.full(len(x), 0.5))
    scatter = even.mean(rng.normal(0, 0.5, (len(x), 1500))).std(axis=1)
    assert scatter / said == pytest.approx(np.ones(len(said)), abs=0.1)
    # 25 readings a sample, of which the filter passes four fifths of the band: 0.5 sqrt(0.8 / 25), 8 % more as they are
    # unevenly spaced
    assert np.median(said) == pytest.approx(0.5 * np.sqrt(0.8 / 25), rel=0.12)


def test_readings_far_apart_are_joined_by_straight_lines():
    x, v = np.arange(0, 41, 4.0), np.random.default_rng(1).normal(0, 50, 11)
    at, y = resample_evenly(x, v, spacing_km=0.5, longest_gap_km=10.0)
    away = np.abs(at / 4.0 - np.round(at / 4.0)) * 4 > 1.0  # the corners are rounded
    assert y[away] == pytest.approx(np.interp(at, x, v)[away], abs=1.0)
    at, y = resample_evenly(x, v, spacing_km=0.5, longest_gap_km=3.0)
    assert np.isnan(y).all()


def test_a_stretch_run_twice_counts_once():
    out = np.arange(0, 10, 0.005)
    again = np.arange(9.995, 6, -0.005)
    x = np.concatenate([out, again, np.arange(6, 20, 0.005)])
    value = np.concatenate(
        [np.full(len(out), 3.0), np.full(len(again), 99.0), np.full(len(x) - len(out) - len(again), 3.0)]
    )
    value[len(out) + len(again) : len(out) + len(again) + 700] = 99.0  # also while it runs the stretch a second time
    at, y = resample_evenly(x, value, spacing_km=0.1, longest_gap_km=0.5)
    assert y == pytest.approx(np.full(len(at), 3.0))
    at, y = resample_evenly(-x, value, spacing_km=0.1, longest_gap_km=0.5)
    assert y == pytest.approx(np.full(len(at), 3.0))
    jitter = np.arange(0, 5, 0.005) + np.random.default_rng(0).normal(0, 0.01, 1000)
    assert len(once_run(jitter, np.arange(1000), 0.1)) == 1000  # put in order, all kept


def test_too_few_readings_make_no_sample():
    for x in ([], [1.0], [1.04, 1.04]):
        at, y = resample_evenly(np.array(x), np.zeros(len(x)), spacing_km=0.1, longest_gap_km=0.5)
        assert not np.isfinite(y).any()
        assert len(at) == len(y)


# -- terms -----------------------------------------------------------------------------------------------------------


def make_parts(n=6, **changed):
    """Make row-aligned tables of stages; `changed` replaces columns."""
    start = np.datetime64("2024-05-01T00:00:00", "ns")
    tables = {
        "readings": {
            "reading": np.arange(n),
            "time_utc": start + np.arange(n) * np.timedelta64(1_000_000_000, "ns"),
            "total_field_nt": np.full(n, 46_250.0),
            "signal": np.full(n, 900.0),
            "logged_depth_m": np.full(n, 10.0),
            "water_depth_m": np.full(n, np.nan),
            "source_file": np.zeros(n, "int32"),
            "source_row": np.arange(1, n + 1),
        },
        "lines": {"line_index": np.zeros(n, "int32")},
        "screen": {"screen_flags": np.zeros(n, "uint32"), "sigma_noise_nt": np.full(n, 0.1)},
        "position": {
            "sensor_latitude_deg": 44 + 4e-5 * np.arange(n),
            "sensor_longitude_deg": np.full(n, -28.0),
            "sensor_depth_m": np.full(n, 10.0),
            "layback_m": np.full(n, 250.0),
            "tow_direction_deg": np.zeros(n),
            "ship_heading_deg": np.zeros(n),
            "sensor_course_deg": np.zeros(n),
            "sensor_speed_mps": np.full(n, 4.4),
            "sigma_position_m": np.full(n, 8.0),
            "position_flags": np.zeros(n, "uint32"),
        },
        "main_field": {"main_field_nt": np.full(n, 46_000.0)},
        "diurnal": {
            "diurnal_nt": np.full(n, 20.0),
            "sigma_diurnal_nt": np.full(n, 1.0),
            "diurnal_flags": np.zeros(n, "uint32"),
        },
        "heading": {
            "heading_nt": np.full(n, -3.0),
            "sigma_heading_nt": np.full(n, 0.4),
            "heading_flags": np.zeros(n, "uint32"),
        },
        "levelling": {
            "level_nt": np.full(n, 5.0),
            "sigma_level_nt": np.full(n, 0.6),
            "heading_change_nt": np.full(n, np.nan),
            "diurnal_change_nt": np.full(n, np.nan),
            "position_change_nt": np.full(n, np.nan),
            "sigma_joint_nt": np.full(n, np.nan),
            "sigma_datum_nt": np.full(n, 0.9),
            "sigma_position_left_m": np.full(n, 2.0),
            "level_flags": np.zeros(n, "uint32"),
        },
    }
    for name, value in changed.items():
        (table,) = [key for key, table in tables.items() if name in table]
        tables[table][name] = np.broadcast_to(np.asarray(value), n).copy()
    return {name: pd.DataFrame(table) for name, table in tables.items()}


def test_every_term_is_subtracted_and_every_change_added_to_its_term():
    table, absent = profiles.combine(make_parts())
    assert absent == []
    assert table["anomaly_nt"].to_numpy() == pytest.approx(np.full(6, 46_250 - 46_000 - 20 + 3 - 5.0))
    parts = make_parts(heading_change_nt=1.5, diurnal_change_nt=[-2.0, -2.0, -2.0, np.nan, np.nan, np.nan])
    before = {name: part.copy() for name, part in parts.items()}
    table, _ = profiles.combine(parts)
    assert table["heading_nt"].to_numpy() == pytest.approx(np.full(6, -1.5))
    assert table["diurnal_nt"].to_numpy() == pytest.approx([18, 18, 18, 20, 20, 20])
    terms = table[["main_field_nt", "diurnal_nt", "heading_nt", "level_nt"]].sum(axis=1)
    assert (table["total_field_nt"] - terms - table["anomaly_nt"]).abs().max() < 1e-10
    for name in parts:
        pd.testing.assert_frame_equal(parts[name], before[name])


def test_a_term_that_the_survey_lacks_is_left_out_and_one_that_a_reading_lacks_takes_its_anomaly():
    flag = np.uint32(Flag.NO_DIURNAL)
    table, absent = profiles.combine(make_parts(diurnal_nt=np.nan, diurnal_flags=flag))
    assert absent == ["diurnal_nt"]
    assert table["anomaly_nt"].to_numpy() == pytest.approx(np.full(6, 248.0))
    assert (table["flags"] & flag).all()
    some = [20.0, np.nan, np.nan, 20.0, 20.0, 20.0]
    table, absent = profiles.combine(make_parts(diurnal_nt=some, diurnal_flags=np.where(np.isnan(some), flag, 0)))
    assert absent == []
    assert table["anomaly_nt"].isna().tolist() == np.isnan(some).tolist()
    assert (table.loc[table["anomaly_nt"].isna(), "flags"] & flag).all()


def test_a_heading_effect_that_only_crossings_tell_is_no_longer_missing():
    parts = make_parts(heading_nt=np.nan, heading_flags=np.uint32(Flag.NO_HEADING), heading_change_nt=2.0)
    table, absent = profiles.combine(parts)
    assert absent == []
    assert table["heading_nt"].to_numpy() == pytest.approx(np.full(6, 2.0))
    assert not (table["flags"] & np.uint32(Flag.NO_HEADING)).any()


def test_rejected_readings_have_no_anomaly_unless_a_person_kept_them():
    flags = [0, Flag.SPIKE, Flag.SPIKE | Flag.EDITED_IN, Flag.EDITED_OUT, Flag.EDITED_IN, Flag.LOW_SIGNAL]
    table, _ = profiles.combine(make_parts(screen_flags=np.array(flags, "uint32")))
    assert table["anomaly_nt"].notna().tolist() == [True, False, True, False, True, False]


def test_the_sigma_of_the_anomaly():
    table, _ = profiles.combine(make_parts(sigma_joint_nt=[0.5, np.nan, 0.5, 0.5, 0.5, 0.5]))
    table = table.assign(sigma_position_nt=0.3)
    said = profiles.total_sigma(table)
    assert said[0] == pytest.approx(np.sqrt(0.1**2 + 0.3**2 + 0.5**2))
    assert said[1] == pytest.approx(np.sqrt(0.1**2 + 0.3**2 + 1.0**2 + 0.4**2 + 0.6**2))
    assert np.isnan(profiles.total_sigma(table.assign(anomaly_nt=np.nan))).all()


def test_the_gradient_is_that_of_a_straight_line_through_the_window():
    """Reference: numpy.polyfit on each window."""
    rng = np.random.default_rng(8)
    path = np.cumsum(rng.uniform(2, 8, 400)) + 3e6
    value = 46_000 + 200 * np.sin(path / 900) + rng.normal(0, 0.5, 400)
    value[rng.random(400) < 0.1] = np.nan
    slope = profiles.along_track_gradient(path, value, 500.0)
    good = np.isfinite(value)
    for k in np.flatnonzero(good)[::37]:
        near = good & (np.abs(path - path[k]) <= 250)
        assert slope[k] == pytest.approx(np.polyfit(path[near] - path[k], value[near], 1)[0], abs=1e-7)
    sparse = profiles.along_track_gradient(np.array([0.0, 4e3, 8e3]), np.array([0.0, 40.0, 0.0]), 500.0)
    assert sparse == pytest.approx([0.01, 0.0, -0.01])
    assert np.isnan(profiles.along_track_gradient(np.arange(3.0), np.array([1.0, np.nan, np.nan]), 500.0)).all()


# -- files -----------------------------------------------------------------------------------------------------------


def test_any_name_of_a_line_gives_a_safe_file_name():
    lines = [
        "L101",
        "l101",
        "L/1:0*1",
        "../../etc/passwd",
        "\N{WHALE} 7",
        "\N{WHALE}",
        "a" * 300,
        "a" * 301,
        "CON",
        "",
        "Änd\n1",
    ]
    names = file_names(lines)
    assert len(set(names)) == len(lines)
    assert all(len(name) <= 66 and set(name) <= set("abcdefghijklmnopqrstuvwxyz0123456789-_") for name in names)
    assert names[:3] == ["l101", "l101-2", "l-1-0-1"]
    assert "con" not in names


def make_survey(**changed):
    """Make the tables of three lines and a tie over a known anomaly, as the stages before would leave them."""
    parts, lines = [], []
    anomaly_at = lambda distance: 120 * np.sin(2 * np.pi * distance / 7e3)  # noqa: E731
    for k, (name, kind, azimuth, aside) in enumerate(
        [
            ("North/1", "line", 108.0, 3e3),
            ("South \N{WHALE}", "line", 108.0, -3e3),
            ("T1", "tie", 18.0, 0.0),
            ("C1", "calibration", 40.0, 0.0),
        ]
    ):
        n = 1600 if kind != "calibration" else 300
        lat, lon, _ = shoot(44.0, 179.99, azimuth - 90, np.array([aside]))
        along = np.linspace(-8e3, 8e3, n) if kind != "calibration" else np.linspace(-1500, 1500, n)
        lat, lon, _ = shoot(lat[0], lon[0], azimuth, along)
        way = slice(None, None, -1) if name.startswith("South") else slice(None)
        rng = np.random.default_rng(k)
        total = 46_000 + anomaly_at(along) + 7 + rng.normal(0, 0.1, n)
        parts.append(
            {"lat": lat[way], "lon": lon[way], "total": total[way], "line": np.full(n, k), "along": along[way]}
        )
        lines.append({"line": name, "kind": kind, "readings": n})
    whole = {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}
    n = len(whole["lat"])
    made = make_parts(
        n,
        total_field_nt=whole["total"] + 20 - 3 + 5,
        sensor_latitude_deg=whole["lat"],
        sensor_longitude_deg=whole["lon"],
        line_index=whole["line"].astype("int32"),
    )
    for name, change in changed.items():
        for table in made.values():
            if name in table:
                table[name] = change(table[name].to_numpy().copy(), whole)
    start = made["readings"]["time_utc"][0]
    table = pd.DataFrame(lines).assign(start_utc=start, end_utc=start)
    return made, table


def run_stage(folder, made, lines, records=(), **chosen):
    """Run the stage as the workflow does; return the process, tables, record and the text of the files."""
    folder.mkdir(exist_ok=True)
    words = [sys.executable, "-m", "steps.profiles"]
    for name, table in {**made, "line_table": lines}.items():
        table.to_parquet(folder / f"{name}.parquet")
        words += [f"--{name}", str(folder / f"{name}.parquet")]
    words.append("--records")
    for name in ("ingest", "diurnal", "heading", "levelling"):
        record = {"stage": name, "code": "0123", "settings": {}, "edits": [], "notes": []}
        record |= dict(records).get(name, {})
        (folder / f"{name}_record.json").write_text(json.dumps(record))
        words.append(str(folder / f"{name}_record.json"))
    outputs = [folder / name for name in ("corrected.parquet", "profiles.parquet", "csv", "profiles_record.json")]
    who = {
        "key": "one",
        "name": "Survey\nof a test",
        "vessel": "RV Test",
        "institution": "",
        "processor": "",
        "comment": "",
    }
    options = {"settings": chosen, "survey": who, "code": "4567"}
    words += ["--write", *map(str, outputs), "--options", json.dumps(options)]
    done = subprocess.run(words, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    texts = {path.stem: path.read_text(encoding="utf-8") for path in sorted(outputs[2].iterdir())}
    return done, *(pd.read_parquet(path) for path in outputs[:2]), json.loads(outputs[3].read_text()), texts


@pytest.fixture(scope="module")
def product(tmp_path_factory):
    """Return a small survey's product, projected on a stated azimuth."""
    edit = {
        "action": "reject",
        "start_utc": "2024-05-01T00:00:00",
        "reason": "a ship",
        "by": "A. Example",
        "date": "2024-05-02",
    }
    records = {
        "ingest": {"files": [{"file": "raw/one.txt", "sha256": "ab" * 32}], "edits": [edit]},
        "levelling": {"edits": [{"action": "hold_line", "member": "other", "target": "X"}]},
    }
    folder = tmp_path_factory.mktemp("product")
    return folder, run_stage(folder, *make_survey(), records.items(), azimuth_deg=108.0)


def test_the_ship_s_sense_does_not_matter_and_lines_of_one_azimuth_are_aligned(product):
    """South was run the other way: at the same distance both lines must show the same anomaly, at the same sign."""
    _, (_, _, samples, record, _) = product
    by_line = {name: own.set_index(own["distance_km"].round(6)) for name, own in samples.groupby("line", sort=False)}
    north, south = by_line["North/1"], by_line["South \N{WHALE}"]
    both = north.index.intersection(south.index)
    assert len(both) >= 158
    assert (north.loc[both, "anomaly_nt"] - south.loc[both, "anomaly_nt"]).abs().max() < 0.3
    fit = np.linalg.lstsq(
        np.column_stack([np.sin(2 * np.pi * both / 7.0), np.cos(2 * np.pi * both / 7.0), np.ones(len(both))]),
        north.loc[both, "anomaly_nt"].to_numpy(),
        rcond=None,
    )[0]
    assert np.hypot(*fit[:2]) == pytest.approx(120.0, rel=0.002)
    assert fit[2] == pytest.approx(7.0, abs=0.05)
    assert north["time_utc"].is_monotonic_increasing
    assert south["time_utc"].is_monotonic_decreasing
    assert north["offset_km"].median() == pytest.approx(-3.0, abs=0.01)  # to the left of 108 degrees
    assert south["offset_km"].median() == pytest.approx(3.0, abs=0.01)
    frames = {row["line"]: row for row in record["lines"]}
    assert not frames["North/1"]["own"]
    assert frames["North/1"]["azimuth_deg"] == 108.0
    assert frames["T1"]["own"]  # a tie is not projected on the lines' azimuth
    assert frames["T1"]["azimuth_deg"] == pytest.approx(18.0, abs=0.1)
    assert frames["T1"]["length_km"] == pytest.approx(16.0, abs=0.1)
    assert "C1" not in frames
    # pyproj: the sample's own distance and azimuth from the stated origin
    origin = frames["North/1"]["origin_latitude_deg"], frames["North/1"]["origin_longitude_deg"]
    last = south.iloc[-1]
    lat, lon, azimuth = shoot(*origin, 108.0, np.array([last["distance_km"] * 1000]))
    assert azimuth[0] % 360 == pytest.approx(last["azimuth_deg"], abs=1e-6)
    aside = shoot(lat[0], lon[0], azimuth[0] + 90, np.array([last["offset_km"] * 1000]))
    assert GEOD.inv(aside[1][0], aside[0][0], last["sensor_longitude_deg"], last["sensor_latitude_deg"])[2] < 0.5


def test_the_sum_of_the_terms_holds_in_every_product(product):
    _, (_, corrected, samples, _, texts) = product
    for table in (corrected, samples):
        known = table["anomaly_nt"].notna()
        assert known.sum() > 400
        terms = table[["main_field_nt", "diurnal_nt", "heading_nt", "level_nt"]].sum(axis=1)
        assert (table["total_field_nt"] - terms - table["anomaly_nt"])[known].abs().max() < 1e-9
    for text in texts.values():
        table = pd.read_csv(io.StringIO(text), comment="#")
        terms = table[["main_field_nt", "diurnal_nt", "heading_nt", "level_nt"]].sum(axis=1)
        assert (table["total_field_nt"] - terms - table["anomaly_nt"]).abs().max() <= 0.0025 + 1e-9  # five roundings


def test_sigmas_of_a_sample(product):
    """Noise of 10 readings of 10 m averages down; what neighbours share does not."""
    _, (_, _, samples, _, _) = product
    own = samples[samples["line"] == "North/1"].iloc[20:-20]
    assert own["sigma_noise_nt"].median() == pytest.approx(0.1 * np.sqrt(0.8 / 10), rel=0.05)
    assert own["sigma_diurnal_nt"].to_numpy() == pytest.approx(np.full(len(own), 1.0))
    assert own["sigma_datum_nt"].to_numpy() == pytest.approx(np.full(len(own), 0.9))
    steepest = 8.0 * 120 * 2 * np.pi / 7e3  # 8 m times the largest gradient
    assert own["sigma_position_nt"].max() == pytest.approx(steepest, rel=0.03)
    parts = own[["sigma_noise_nt", "sigma_position_nt", "sigma_diurnal_nt", "sigma_heading_nt", "sigma_level_nt"]]
    assert own["sigma_anomaly_nt"].to_numpy() == pytest.approx(np.sqrt((parts**2).sum(axis=1)).to_numpy())


def test_the_head_of_a_file_explains_every_column_and_tells_where_it_comes_from(product):
    _, (_, _, samples, record, texts) = product
    assert set(texts) == {"north-1", "south", "t1"}
    for text in texts.values():
        rows = text.split("\n")
        head = [row for row in rows if row.startswith("#")]
        assert rows[: len(head)] == head
        names = rows[len(head)].split(",")
        assert names == [name for name in columns.TABLES["profiles"] if name not in ("line", "kind")]
        for name in names:
            (line,) = [row for row in head if row.startswith(f"# {name} [")]
            assert line.endswith(f"]: {COLUMNS[name].meaning}")
        for flag in Flag:
            assert f"#   {int(flag)} {flag.name.lower()}: {FLAG_MEANINGS[flag]}" in head
        widths = {len(row) for row in csv.reader(rows[len(head) : -1])}
        assert widths == {len(names)}
        assert "# Survey: Survey of a test" in head
        assert "# Vessel: RV Test" in head
        assert f"# Input: raw/one.txt sha256 {'ab' * 32}" in head
        assert any(row.startswith("# Edit: action reject;") and "a ship" in row for row in head)
        assert not any("hold_line" in row for row in head)  # of another survey
        assert any(row.startswith("# Stage profiles: code 4567, settings sha256 ") for row in head)
        assert any("every correction is subtracted" in row for row in head)
        assert any("Not for navigation. Not a clearance" in row for row in head)
    assert "# Line: North/1" in texts["north-1"]
    assert record["provenance"]["inputs"] == [{"file": "raw/one.txt", "sha256": "ab" * 32}]
    assert len(samples) == sum(row["samples"] for row in record["lines"])


def test_inclination_and_declination_are_those_of_the_main_field(product):
    """Reference: ppigrf (IAGA V-MOD)."""
    import ppigrf

    _, (_, _, samples, _, _) = product
    row = samples.iloc[100]
    e, n, up = (
        float(part.squeeze())
        for part in ppigrf.igrf(
            row["sensor_longitude_deg"], row["sensor_latitude_deg"], -0.01, row["time_utc"].floor("s").to_pydatetime()
        )
    )
    assert row["inclination_deg"] == pytest.approx(np.degrees(np.arctan2(-up, np.hypot(e, n))), abs=0.002)
    assert row["declination_deg"] == pytest.approx(np.degrees(np.arctan2(e, n)), abs=0.002)


def test_the_same_input_gives_the_same_bytes(product, tmp_path):
    folder, _ = product
    run_stage(
        tmp_path / "again",
        *make_survey(),
        [("ingest", {"files": [{"file": "raw/one.txt", "sha256": "ab" * 32}]})],
        azimuth_deg=108.0,
    )
    for name in ("corrected.parquet", "profiles.parquet"):
        assert (tmp_path / "again" / name).read_bytes() == (folder / name).read_bytes()
    one, two = (
        (place / "csv" / "t1.csv").read_text(encoding="utf-8").split("# Columns")[1]
        for place in (folder, tmp_path / "again")
    )
    assert one == two


def test_missing_samples_say_why(tmp_path):
    def flagged(flags, whole):
        flags[(whole["line"] == 0) & (np.abs(whole["along"]) < 400)] = int(Flag.SPIKE)
        flags[(whole["line"] == 0) & (np.abs(whole["along"] - 3e3) < 100)] = int(Flag.EDITED_OUT)
        return flags

    def lost(lat, whole):
        lat[(whole["line"] == 1) & (np.abs(whole["along"]) < 400)] = np.nan
        return lat

    def unplaced(flags, whole):
        flags[(whole["line"] == 1) & (np.abs(whole["along"]) < 400)] = int(Flag.NO_NAVIGATION)
        return flags

    made, lines = make_survey(screen_flags=flagged, sensor_latitude_deg=lost, position_flags=unplaced)
    gone = np.flatnonzero((made["lines"]["line_index"] == 2) & (np.arange(len(made["lines"])) % 1600 < 300))
    keep = np.setdiff1d(np.arange(len(made["lines"])), gone[100:200])  # 1 km that nobody recorded
    made = {name: table.iloc[keep].reset_index(drop=True) for name, table in made.items()}
    made["levelling"].loc[made["lines"]["line_index"] == 1, ["level_nt", "sigma_level_nt"]] = np.nan
    made["levelling"].loc[made["lines"]["line_index"] == 1, "level_flags"] = np.uint32(Flag.NO_LEVEL)
    done, _, samples, record, texts = run_stage(tmp_path / "x", made, lines, azimuth_deg=108.0)
    lost = samples[samples["anomaly_nt"].isna()]
    reasons = np.uint32(REJECTING | Flag.NO_NAVIGATION | Flag.NO_CABLE | Flag.NO_DIURNAL)
    assert ((lost["flags"] & reasons) > 0).all()
    north = samples[samples["line"] == "North/1"]
    gap = north[north["anomaly_nt"].isna()]
    assert len(gap) in (7, 8, 9)
    assert (gap["flags"] & np.uint32(Flag.SPIKE) > 0).all()
    assert gap["distance_km"].diff().dropna().to_numpy() == pytest.approx(np.full(len(gap) - 1, 0.1))
    assert not (north["flags"][north["anomaly_nt"].notna()] & np.uint32(REJECTING)).any()  # 0.2 km bridged
    south = samples[samples["line"] == "South \N{WHALE}"]
    assert (south["flags"] & np.uint32(Flag.NO_NAVIGATION) > 0).equals(south["anomaly_nt"].isna())
    known = south[south["anomaly_nt"].notna()]  # a line without a level keeps its anomaly
    assert len(known) > 140
    assert known["level_nt"].isna().all()
    assert (known["flags"] & np.uint32(Flag.NO_LEVEL) > 0).all()
    terms = known["main_field_nt"] + known["diurnal_nt"] + known["heading_nt"]
    assert (known["total_field_nt"] - terms - known["anomaly_nt"]).abs().max() < 1e-9
    assert any(row.startswith("# Not levelled:") for row in texts["south"].split("\n"))
    assert not any(row.startswith("# Not levelled:") for row in texts["north-1"].split("\n"))
    tie = samples[(samples["line"] == "T1") & samples["anomaly_nt"].isna()]
    assert len(tie) in (10, 11)
    assert (tie["flags"] == np.uint32(Flag.DROPOUT)).all()
    assert "not levelled, for want of a usable crossing, though with all other terms: South \N{WHALE}." in done.stdout
    assert ",,," in texts["south"]
    assert {row["line"]: row["no_level"] for row in record["lines"]} == {
        "North/1": False,
        "South \N{WHALE}": True,
        "T1": False,
    }


def test_a_term_that_the_survey_lacks_is_said_in_record_and_file(tmp_path):
    made, lines = make_survey(diurnal_nt=lambda v, _: v * np.nan, sigma_diurnal_nt=lambda v, _: v * np.nan)
    records = [("diurnal", {"notes": ["there is no base station."]})]
    _, corrected, samples, record, texts = run_stage(tmp_path / "x", made, lines, records)
    assert record["absent"] == {"diurnal_nt": "there is no base station."}
    assert "# Not subtracted, for the whole survey: diurnal (there is no base station.)" in texts["t1"]
    assert samples["diurnal_nt"].isna().all()
    assert samples["anomaly_nt"].notna().all()
    terms = corrected["main_field_nt"] + corrected["heading_nt"] + corrected["level_nt"]
    assert (corrected["total_field_nt"] - terms - corrected["anomaly_nt"]).abs().max() < 1e-9
    # without a stated azimuth each line has its own, from its own end
    starts = samples.groupby("line")["distance_km"].min()
    assert starts.to_numpy() == pytest.approx(np.zeros(3), abs=1e-9)
    assert all(row["own"] for row in record["lines"])
    assert [row["azimuth_deg"] for row in record["lines"]] == pytest.approx([108.0, 108.0, 18.0], abs=0.2)


def test_a_line_without_kept_readings_gets_one_note_and_no_profile(tmp_path):
    made, lines = make_survey(
        screen_flags=lambda flags, whole: np.where(whole["line"] < 2, np.uint32(Flag.EDITED_OUT), flags)
    )
    done, corrected, samples, _, texts = run_stage(tmp_path / "x", made, lines)
    assert set(samples["line"]) == {"T1"}
    assert set(texts) == {"t1"}
    note = "note: no profile, for want of kept readings with a position: North/1, South \N{WHALE}."
    assert done.stdout.count("note:") == 1
    assert note in done.stdout
    assert len(corrected) == len(made["readings"])


def test_no_profile_at_all_is_still_a_product(tmp_path):
    made, lines = make_survey()
    _, corrected, samples, record, texts = run_stage(tmp_path / "x", made, lines, kinds=["transit"])
    assert list(samples) == columns.TABLES["profiles"]
    assert len(samples) == 0
    assert texts == {}
    assert record["lines"] == []
    assert corrected["anomaly_nt"].notna().all()


def test_lines_across_the_stated_sense_are_pointed_out():
    class Told:
        """What a stage's job gives to `_tell`."""

        settings = Profiles()
        record = {"absent": {}}  # noqa: RUF012
        said: list = []  # noqa: RUF012

        def note(self, sentence):
            self.said.append(sentence)

        def done(self, sentence):
            pass

    row = {"kind": "line", "samples": 3, "sigma_nt": 1.0, "no_level": False, "own": True}
    profiles._tell(
        Told(), ["A", "B"], [{**row, "line": "A", "azimuth_deg": 1.0}, {**row, "line": "B", "azimuth_deg": 179.0}]
    )
    assert Told.said == [
        "profiles.increasing_towards_deg lies almost across these lines, so that distance grows one way on some and "
        "the other way on others: A, B."
    ]
