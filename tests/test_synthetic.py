"""The simulator's own laws, against things that it did not make: a wrong truth would pass wrong corrections."""

import ast
import io
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
import pynmea2
import pytest
import raw_files
import synthetic
from conftest import ROOT
from pyIGRF14 import igrf_value
from pyproj import Geod
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline
from synthetic_fields import REVERSALS_MA, Crust, External, MainField, decimal_year, main_field_exact, wander
from synthetic_track import Course, Plane, direction, pursuit

SMALL = synthetic.Scenario(lines=4, line_length_km=15.0, ties=2, calibration=False)
GEOD = Geod(ellps="WGS84")


@pytest.fixture(scope="module")
def small():
    return synthetic.simulate(SMALL)


def test_the_simulator_imports_no_stage():
    for name in ("synthetic", "synthetic_fields", "synthetic_track", "raw_files", "notebook", "make_demo_survey"):
        tree = ast.parse((Path(__file__).parent / f"{name}.py").read_text(encoding="utf-8"))
        for node in ast.walk(tree):
            names = [a.name for a in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            assert not any(n.split(".")[0] == "steps" for n in names), f"{name} line {node.lineno}"


def test_equal_scenarios_give_equal_surveys(small):
    again = synthetic.simulate(SMALL)
    pd.testing.assert_frame_equal(again.readings, small.readings, check_exact=True)
    pd.testing.assert_frame_equal(again.truth, small.truth, check_exact=True)
    other = synthetic.simulate(replace(SMALL, seed=2))
    assert len(other.readings) != len(small.readings) or not np.array_equal(
        other.readings["total_field_nt"], small.readings["total_field_nt"]
    )


# -- track and pursuit curve -----------------------------------------------------------------------------------------


def test_the_course_is_continuous_and_turns_no_tighter_than_its_radius():
    legs = [
        (np.array([0.0, 0.0]), np.array([5e3, 1e3]), 500.0, 300.0),
        (np.array([4e3, 3e3]), np.array([-2e3, 2e3]), 800.0, 800.0),
        (np.array([-1e3, -4e3]), np.array([-1e3, 6e3]), 0.0, 0.0),
    ]
    course = Course(legs, 600.0)
    at = np.arange(0.0, course.length, 1.0)
    east, north, azimuth = course.at(at)
    step = np.hypot(np.diff(east), np.diff(north))
    assert step == pytest.approx(np.ones(len(step)), abs=1e-6)
    turning = np.abs((np.diff(azimuth) + 180) % 360 - 180)
    assert turning.max() <= np.degrees(1 / 600.0) + 1e-9
    for (start, end, _, _), marks in zip(legs, course.marks, strict=True):
        for point, mark in zip((start, end), marks, strict=True):
            e, n, _ = course.at(np.array([mark]))
            assert [e[0], n[0]] == pytest.approx(point, abs=1e-6)


def test_pursuit_agrees_with_a_scipy_ode():
    """Independent: position itself integrated by DOP853, dP/dt = u (V . u), u from body to tow point."""
    course = Course(
        [
            (np.array([0.0, 0.0]), np.array([3e3, 0.0]), 0, 0),
            (np.array([3e3, 1500.0]), np.array([0.0, 1500.0]), 0, 0),
        ],
        700.0,
    )
    t = np.arange(0.0, course.length / 5.0, 2.5)
    e, n, azimuth = course.at(5.0 * t)
    swing = 15 * np.sin(t / 60)
    e, n = e + swing * np.cos(np.radians(azimuth)), n - swing * np.sin(np.radians(azimuth))
    length = 260.0
    east, north, psi = pursuit(t, e, n, np.full(len(t), length), chunk=300)
    tow = CubicSpline(t, np.column_stack([e, n]))
    speed = tow.derivative()

    def rate(time, place):
        u = (tow(time) - place) / length
        return u * (speed(time) @ u)

    solved = solve_ivp(rate, (t[0], t[-1]), [east[0], north[0]], "DOP853", t_eval=t, rtol=1e-10, atol=1e-8)
    assert np.hypot(east - solved.y[0], north - solved.y[1]).max() < 1e-3
    assert np.ptp(psi) > np.pi * 0.95  # the half turn was there


def test_pursuit_on_a_straight_track_follows_the_closed_form():
    """Tractrix of a straight path: tan(phi/2) = tan(phi0/2) exp(-s/B)."""
    t = np.arange(0.0, 400.0, 1.0)
    bend = Course(
        [(np.array([0.0, 0.0]), np.array([0.0, 1.0]), 0, 0), (np.array([900.0, 900.0]), np.array([4e3, 900.0]), 0, 0)],
        500.0,
    )
    e, n, azimuth = bend.at(5.0 * t)
    length = 200.0
    psi = pursuit(t, e, n, np.full(len(t), length))[2]
    straight = np.flatnonzero(np.abs(azimuth - 90.0) < 1e-6)[3:]
    phi = np.pi / 2 - psi[straight]
    run = 5.0 * (t[straight] - t[straight[0]])
    assert phi[0] > 0.1
    assert np.tan(phi / 2) == pytest.approx(np.tan(phi[0] / 2) * np.exp(-run / length), abs=2e-5)


@pytest.mark.parametrize(("latitude", "longitude"), [(44.0, -28.0), (-75.0, 179.95), (89.7, 30.0)])
def test_the_sensor_is_one_layback_from_the_stern_and_the_ship_crabs(latitude, longitude):
    s = replace(
        SMALL,
        latitude_deg=latitude,
        longitude_deg=longitude,
        yaw_deg=0.0,
        gyro_noise_deg=0.0,
        fix_noise_m=0.0,
        fix_wander_m=0.0,
        navigation_s=1.0,
    )
    survey = synthetic.simulate(s)
    fixes, truth = survey.navigation, survey.truth
    seconds = fixes["time_utc"].to_numpy().astype("int64")
    at = truth["time_utc"].to_numpy().astype("int64")
    where = survey.plane.metres(fixes["latitude_deg"].to_numpy(), fixes["longitude_deg"].to_numpy())
    latitude, longitude = survey.plane.geographic(*(np.interp(at, seconds, column) for column in where))
    heading = truth["ship_heading_deg"].to_numpy()
    # geodesics by pyproj: forward (negative) along the heading, then to starboard
    longitude, latitude, _ = GEOD.fwd(longitude, latitude, heading, np.full(len(at), s.forward_m))
    longitude, latitude, _ = GEOD.fwd(longitude, latitude, heading + 90, np.full(len(at), s.starboard_m))
    there = (truth["sensor_longitude_deg"], truth["sensor_latitude_deg"])
    azimuth, _, distance = GEOD.inv(*there, longitude, latitude)
    on = truth["line_index"].to_numpy() >= 0
    # rows are 1 s apart in the fixes, so that the ship's own curve between them is below 1 mm on a line
    assert np.abs(distance - truth["layback_m"])[on].max() < 0.05
    assert np.abs((azimuth - truth["tow_direction_deg"] + 180) % 360 - 180)[on].max() < 0.02
    crab = (fixes["heading_deg"] - fixes["course_deg"] + 180) % 360 - 180
    assert 0.5 < np.abs(crab).median() < 5.0


def test_cable_changes_are_logged_when_the_winch_starts():
    survey = synthetic.simulate(replace(SMALL, cable_changes=((1, 300.0),), cable_error_m=12.0))
    when = survey.cable["time_utc"].iloc[1]
    truth = survey.truth
    assert survey.cable["cable_out_m"].tolist() == [262.0, 312.0]
    assert truth["cable_out_m"][truth["time_utc"] <= when].to_numpy() == pytest.approx(250.0, abs=0.5)
    assert truth["cable_out_m"][truth["time_utc"] > when + pd.Timedelta(105, "s")].to_numpy() == pytest.approx(
        300.0, abs=0.5
    )


# -- fields ----------------------------------------------------------------------------------------------------------


def test_decimal_year_counts_the_leap_day():
    """Year + (day of year - 1 + fraction of day) / days in that year; by hand."""
    years = decimal_year(np.array(["2024-07-01T12:00", "2023-07-01T12:00"], "datetime64[ns]"))
    assert years == pytest.approx([2024 + 182.5 / 366, 2023 + 181.5 / 365], abs=1e-12)


@pytest.mark.parametrize(("latitude", "longitude"), [(44.3, -28.1), (-63.0, 179.9), (85.0, 10.0), (2.0, -100.0)])
def test_main_field_agrees_with_pyigrf14(latitude, longitude):
    """Against pyIGRF14, whose rounded ellipsoid is off by up to 0.0092 nT; dates on both sides of a leap day."""
    rng = np.random.default_rng(5)
    plane = Plane(latitude, longitude)
    east, north = rng.uniform(-60e3, 60e3, (2, 40))
    times = np.datetime64("2024-01-05", "ns") + (rng.uniform(0, 355, 40) * 86400e9).astype("m8[ns]")
    height = rng.uniform(-30, 40, 40)
    years = decimal_year(times)
    lat, lon = plane.geographic(east, north)
    expected = [igrf_value(a, b, h / 1e3, year)[6] for a, b, h, year in zip(lat, lon % 360, height, years, strict=True)]
    exact = main_field_exact(lat, lon, height, times)
    assert np.abs(exact - expected).max() < 0.012
    interpolated = MainField(plane, east, north, float(years.min()))(east, north, height, times)
    assert np.abs(interpolated - exact).max() < 1e-3


def test_stripes_agree_with_a_sum_of_line_dipoles():
    """Blocks filled with two-dimensional dipoles: B = mu0/2pi (2 (m . r) r - m) / r^2 (e.g. Blakely 1995, ch. 5)."""
    s = synthetic.Scenario(
        ridge_azimuth_deg=25.0,
        half_rate_km_per_ma=(9.0, 14.0),
        transition_km=0.0,
        bend_km=0.0,
        along_strike=0.0,
        seamounts=0,
        rough_nt=0.0,
        regional_nt=0.0,
    )
    inclination, declination = 62.0, -9.0
    crust = Crust(s, inclination, declination, np.random.default_rng(1))
    x = np.linspace(-40e3, 40e3, 81)
    across = direction(s.ridge_azimuth_deg + 90)
    found = crust(x * across[0], x * across[1], 15.0)

    ages = np.array(REVERSALS_MA)
    edges = np.concatenate([[-4e6], -9e3 * ages[::-1], 14e3 * ages, [4e6]])  # the outermost go far beyond the line
    sides, sign = [], []
    for k, (a, b) in enumerate(pairwise(edges)):
        long = b - a > 1e6
        cells = a + (b - a) * (1 - np.geomspace(1, 1e-5, 4000)) / (1 - 1e-5) if long else None
        if long and k:  # fine cells towards the line
            cells = (a + b - cells)[::-1]
        sides.append(cells if long else np.linspace(a, b, int((b - a) / 50) + 2))
        sign.append(np.full(len(sides[-1]) - 1, 1.0 if (k - len(ages)) % 2 == 0 else -1.0))
    where = np.concatenate([(c[1:] + c[:-1]) / 2 for c in sides])
    width = np.concatenate([np.diff(c) for c in sides])
    sign = np.concatenate(sign)
    remanent = np.arctan(2 * np.tan(np.radians(s.latitude_deg)))
    m = s.magnetisation_a_m * np.array([np.cos(remanent) * np.cos(np.radians(-115.0)), np.sin(remanent)])
    i, d = np.radians(inclination), np.radians(declination - 115.0)
    ambient = np.array([np.cos(i) * np.cos(d), np.sin(i)])
    expected = np.zeros(len(x))
    for depth in np.arange(s.layer_top_m + 25.0, s.layer_top_m + s.layer_thickness_m, 50.0) - 15.0:
        r = np.stack(np.broadcast_arrays(x[:, None] - where, -depth))  # from source to point, z down
        r2 = (r**2).sum(axis=0)
        moment = 2 * (m[0] * r[0] + m[1] * r[1]) * r / r2**2 - m[:, None, None] / r2
        expected += 2e-7 * 1e9 * 50.0 * (sign * width * np.tensordot(ambient, moment, 1)).sum(axis=1)
    assert np.ptp(expected) > 200
    assert found == pytest.approx(expected, abs=1e-3 * np.ptp(expected))


def test_depth_moves_the_anomaly_as_upward_continuation_does(small):
    """Laplace's equation in the vertical: a wave fades by exp(-k z); here only sign and size, 10 m of 2700 m."""
    e = np.linspace(-8e3, 8e3, 200)
    crust = Crust(replace(SMALL, regional_nt=0.0, along_strike=0.0, bend_km=0.0), 60.0, -9.0, np.random.default_rng(3))
    up, down = crust(e, 0 * e, 0.0), crust(e, 0 * e, 10.0)
    assert np.std(down) > np.std(up)
    assert np.abs(down - up).max() < 0.03 * np.ptp(up)


def test_daily_variation_follows_local_time_and_the_storm_universal_time():
    start = np.datetime64("2024-06-10T00:00", "ns")
    t = np.arange(0.0, 86400.0, 300.0)
    sq = External(replace(SMALL, background_nt=0.0), start, 86400.0, np.random.default_rng(2))
    sq._daily = np.zeros_like  # no change from day to day
    assert sq(t + 3600.0, 0.0) == pytest.approx(sq(t, 15.0), abs=1e-9)
    assert sq(t, 0.0).argmin() == pytest.approx(11.6 * 12, abs=1)
    storm = External(replace(SMALL, sq_nt=0.0, storm_nt=80.0), start, 86400.0, np.random.default_rng(2))
    assert storm(t, 0.0) == pytest.approx(storm(t, 15.0), abs=1e-9)
    assert np.ptp(storm(t, 0.0)) > 30


def test_random_processes_have_the_size_that_they_are_given():
    rms = [np.std(wander(np.random.default_rng(k), 1e5, 1e3)(np.arange(0, 1e5, 100.0))) for k in range(40)]
    assert np.sqrt(np.mean(np.square(rms))) == pytest.approx(1.0, abs=0.05)
    s = replace(SMALL, spikes_per_1000=0.0, seamounts=0, noise_nt=0.3)
    noise = synthetic.simulate(s).truth["noise_nt"].to_numpy()
    # for white noise the fourth difference has sqrt(70) times its sd (sum of squared binomials 1 4 6 4 1)
    assert np.std(np.diff(noise, 4)) / np.sqrt(70) == pytest.approx(0.3, rel=0.05)


# -- the survey as a whole -------------------------------------------------------------------------------------------


def test_a_reading_is_the_sum_of_its_terms(small):
    terms = ["main_field_nt", "anomaly_nt", "diurnal_nt", "heading_nt", "level_nt", "noise_nt", "spike_nt"]
    off = small.readings["total_field_nt"] - small.truth[terms].sum(axis=1)
    assert off.abs().max() <= SMALL.resolution_nt / 2 + 1e-9
    assert ((small.truth["spike_nt"] != 0) == (small.truth["fault"] == 1)).all()
    assert (small.truth["fault"] == 1).sum() > 3


def test_truth_at_a_place_is_the_truth_of_the_readings(small):
    t = small.truth
    there = small.anomaly_at(t["sensor_latitude_deg"], t["sensor_longitude_deg"], t["sensor_depth_m"])
    assert there == pytest.approx(t["anomaly_nt"].to_numpy(), abs=1e-4)


def test_faults_are_where_they_were_asked_for():
    faults = ((0.5, 60.0, "repeat"), (0.8, 120.0, "gap"), (1.1, 60.0, "low signal"), (1.4, 120.0, "passing ship"))
    survey = synthetic.simulate(replace(SMALL, faults_h=faults, spikes_per_1000=0.0))
    t, r = survey.truth, survey.readings
    hours = (t["time_utc"] - pd.Timestamp(SMALL.start)) / pd.Timedelta(1, "h")
    assert r["total_field_nt"][t["fault"] == 2].nunique() == 1
    assert ((hours > 0.801) & (hours < 0.83)).sum() == 0
    assert r["signal"][t["fault"] == 3].max() < 500 < r["signal"][t["fault"] != 3].min()
    assert sorted(t["fault"].unique()) == [0, 2, 3, 4]


def test_stated_clock_error_is_taken_out_and_the_other_is_not():
    s = replace(SMALL, clock_offset_s=3.4, clock_drift_s_per_day=5.0, clock_unknown_s=2.0)
    survey = synthetic.simulate(s)
    days = (survey.truth["time_utc"] - pd.Timestamp(s.start)) / pd.Timedelta(1, "D")
    slow = (survey.truth["time_utc"] - survey.readings["logged_utc"]) / pd.Timedelta(1, "s")
    assert slow.to_numpy() == pytest.approx((3.4 + 2.0 + 5.0 * days).to_numpy(), abs=2e-3)
    left = (survey.truth["time_utc"] - survey.readings["time_utc"]) / pd.Timedelta(1, "s")
    assert left.to_numpy() == pytest.approx(2.0, abs=2e-3)


def test_a_survey_across_180_degrees():
    survey = synthetic.simulate(replace(SMALL, latitude_deg=-30.0, longitude_deg=179.99))
    for table, name in ((survey.truth, "sensor_longitude_deg"), (survey.navigation, "longitude_deg")):
        assert table[name].between(-180, 180, inclusive="left").all()
        assert np.ptp(table[name]) > 350
        assert np.ptp(table[name] % 360) < 1


def test_varied_scenarios_are_sound():
    kinds = set()
    for seed in range(200):
        scenario = synthetic.varied(seed)
        kinds.add((scenario.ties > 0, scenario.calibration, len(scenario.bases) > 0, scenario.layout))
        if seed >= 6:
            continue  # only drawn
        survey = synthetic.simulate(scenario)
        assert np.isfinite(survey.readings.select_dtypes("number").to_numpy()).all(), seed
        assert np.isfinite(survey.truth.select_dtypes("number").to_numpy()).all(), seed
        assert len(survey.lines) == scenario.lines + scenario.ties + 8 * scenario.calibration
    assert len(kinds) >= 14  # with and without each, both layouts: 16 in all, some rare


# -- raw files -------------------------------------------------------------------------------------------------------


def test_nmea_sentences_by_pynmea2(small):
    style = raw_files.Style(bad_checksums=7)
    (text,) = raw_files.nmea_text(small, style).values()
    bad, fixes, headings, others = 0, [], [], 0
    for line in text.splitlines():
        stamp, sentence = line.split(" ", 1)
        try:
            message = pynmea2.parse(sentence, check=True)
        except pynmea2.ChecksumError:
            bad += 1
            continue
        late = pd.Timestamp(stamp).tz_localize(None)
        if message.sentence_type == "GGA" if hasattr(message, "sentence_type") else False:
            fixes.append((late, message.timestamp, message.latitude, message.longitude))
        elif isinstance(message, pynmea2.HDT):
            headings.append(float(message.heading))
        else:
            others += 1
    assert bad == 7
    n = len(small.navigation)
    assert n - 7 <= len(fixes) <= n
    assert others > n / 10
    first = small.navigation.iloc[0]
    assert fixes[0][2] == pytest.approx(first["latitude_deg"], abs=1e-6)
    assert fixes[0][3] == pytest.approx(first["longitude_deg"], abs=1e-6)
    late = [(a - pd.Timestamp.combine(a.date(), b.replace(tzinfo=None))).total_seconds() for a, b, *_ in fixes]
    assert 0.1 <= min(late) <= max(late) < 0.5
    assert np.min(headings) >= 0
    assert np.max(headings) < 360


def test_iaga_records_are_seventy_characters_and_hold_the_record(small):
    """IAGA-2002: every record exactly 70 characters; data in columns 31-40, 41-50, 51-60, 61-70; 99999 is missing."""
    base = dict(small.bases[0])
    base["total_field_nt"] = base["total_field_nt"].copy()
    base["total_field_nt"][100:130] = np.nan
    values, components = [], []
    for name, text in raw_files.iaga_text(base, "xb1").items():
        rows = text.splitlines()
        assert {len(row) for row in rows} == {70}, name
        assert sum(row.startswith("DATE") for row in rows) == 1
        data = [row for row in rows if row[:2] == "20"]
        components += [[float(row[30 + 10 * k : 40 + 10 * k]) for k in range(3)] for row in data]
        values += [float(row[60:70]) for row in data]
    values = np.array(values)
    assert (values == 99999.0).nonzero()[0].tolist() == list(range(100, 130))
    good = values != 99999.0
    assert values[good] == pytest.approx(base["total_field_nt"][good], abs=0.0051)
    assert np.linalg.norm(np.array(components)[good], axis=1) == pytest.approx(values[good], abs=0.02)


def test_logger_text_by_pandas(small):
    style = raw_files.Style(logger_hours=2.0, overlap_s=60.0)
    files = raw_files.logger_text(small, style)
    assert len(files) > 2
    tables = [pd.read_csv(io.StringIO(text), sep=";", comment="#", skiprows=2) for text in files.values()]
    assert sum(map(len, tables)) > len(small.readings)
    whole = pd.concat(tables).drop_duplicates().reset_index(drop=True)
    assert len(whole) == len(small.readings)
    when = pd.to_datetime(whole["Date"] + " " + whole["Time"], format="%d/%m/%Y %H:%M:%S.%f")
    assert (when == small.readings["logged_utc"]).all()
    assert whole["Mag_nT"].to_numpy() == pytest.approx(small.readings["total_field_nt"].to_numpy(), abs=6e-4)


def test_the_same_survey_gives_the_same_bytes(small, tmp_path):
    one, two = (raw_files.write(small, tmp_path / name) for name in ("one", "two"))
    assert [p.read_bytes() for p in one] == [p.read_bytes() for p in two]


def test_a_simulated_survey_s_settings_are_valid(small, tmp_path):
    from steps.settings import Single

    paths = raw_files.write(small, tmp_path)
    stated = Single.model_validate(raw_files.settings(small))
    patterns = [*stated.ingest.readings.files, *stated.ingest.navigation[0].files]
    patterns += [pattern for base in stated.diurnal.base_stations for pattern in base.files]
    found = {path for pattern in [*patterns, stated.lines.log, "cable.csv"] for path in tmp_path.glob(pattern)}
    assert found == set(paths)


def test_the_demo_is_small_enough_to_carry():
    raw = [p for p in (ROOT / "demo_survey" / "raw").rglob("*") if p.is_file()]
    assert len(raw) > 10
    assert sum(p.stat().st_size for p in raw) < 8e6


@pytest.mark.slow
def test_the_demo_is_what_its_generator_writes(tmp_path):
    """Compared uncompressed: another zlib may pack the same text into other bytes."""
    import gzip

    from make_demo_survey import main

    main(tmp_path)
    written = sorted(p.relative_to(tmp_path) for p in tmp_path.rglob("*") if p.is_file())
    there = ROOT / "demo_survey"
    assert written == sorted(
        p.relative_to(there)
        for p in [*(there / "raw").rglob("*"), there / "lines.csv", there / "cable.csv"]
        if p.is_file()
    )
    for name in written:
        one, two = (tmp_path / name).read_bytes(), (there / name).read_bytes()
        if name.suffix == ".gz":
            one, two = gzip.decompress(one), gzip.decompress(two)
        assert one == two, name
