"""The variation at the ship: against known fields, reference libraries, definitions, and a real observatory."""

import json
import shutil
from types import SimpleNamespace

import numpy as np
import pandas as pd
import ppigrf
import pytest
from pyproj import Geod
from synthetic_fields import External, main_field_exact

from steps import diurnal, stage
from steps.base_station import station_variation
from steps.columns import Flag
from steps.diurnal import ErrorLaw, Prediction, calibrate, distance_km, make_stations, predict, sigma
from steps.errors import SurveyError
from steps.settings import Diurnal

START = np.datetime64("2023-06-10T00:00:00", "ns")
START_S = float(START.astype("int64")) / 1e9
DAY = 86400.0


def record(name, variation, lat=45.0, lon=-20.0, first_h=0.0, hours=72.0, step_s=60.0):
    """Make a station's record: main field (ppigrf) + 100 nT of crust + a function of seconds after the start."""
    at = first_h * 3600 + np.arange(round(hours * 3600 / step_s)) * step_s
    time = START + (at * 1e9).astype("int64").astype("timedelta64[ns]")
    ends = main_field_exact(np.full(2, lat), np.full(2, lon), 0.0, time[[0, -1]])
    main = np.interp(at, at[[0, -1]], ends)
    value = main + 100.0 + variation(at)
    known = np.isfinite(value)
    return SimpleNamespace(
        name=name, latitude_deg=lat, longitude_deg=lon, height_m=0.0, time_utc=time[known], total_field_nt=value[known]
    )


def stations_of(*records, span=(0.0, 3 * DAY), **settings):
    return make_stations(list(records), (START_S + span[0], START_S + span[1]), settings=Diurnal(**settings))[0]


def at_ship(stations, seconds, lat, lon, **settings):
    seconds = np.asarray(seconds, float)
    place = (np.broadcast_to(np.asarray(part, float), seconds.shape) for part in (lat, lon))
    return predict(stations, START_S + seconds, *place, settings=Diurnal(**settings))


# -- one station -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("east", [-25.0, 25.0])
def test_the_daily_variation_comes_by_local_time_and_a_bay_by_universal_time(east):
    """A ship to the east sees noon earlier (15 degrees an hour), and a bay at the same instant."""

    def daily(seconds, lon):
        hour = seconds / 3600 + lon / 15
        return -25 * np.cos(2 * np.pi * (hour - 12) / 24) - 8 * np.cos(4 * np.pi * (hour - 12) / 24)

    def bay(seconds):
        return 40 * np.exp(-(((seconds - 1.4 * DAY) / 1500) ** 2) / 2)

    own = stations_of(record("A", lambda s: daily(s, -20.0) + bay(s)), datum=100.0)
    at = np.arange(0.7 * DAY, 2.2 * DAY, 30.0)
    found = at_ship(own, at, 47.0, -20.0 + east).variation_nt
    truth = daily(at, -20.0 + east) + bay(at)
    error = found - truth
    # response of the slow part: 0.998 at 24 hours, 0.965 at 12; the bay of 40 nT is weighed out of it but for 2 nT
    assert np.abs(error).max() < 2.2
    unshifted = at_ship(own, at, 47.0, -20.0 + east, local_time_shift=False).variation_nt
    assert np.std(unshifted - truth) > 4 * np.std(error)
    np.testing.assert_allclose(unshifted, daily(at, -20.0) + bay(at), atol=0.05)


@pytest.mark.parametrize(("storm_nt", "bound", "share"), [(0.0, 0.4, 0.2), (80.0, 1.6, 0.8)])
def test_quiet_day_and_storm_of_the_simulator_are_recovered(storm_nt, bound, share):
    """Sq by local time, storm, bays and pulsations by universal time, from a station 9 degrees away."""
    scenario = SimpleNamespace(sq_nt=30.0, storm_nt=storm_nt, background_nt=1.5)
    field = External(scenario, START, 2 * DAY, np.random.default_rng(3))
    own = stations_of(record("A", lambda s: field(s - 6 * 3600, -20.0), first_h=0.0, hours=60.0), span=(0, 2.5 * DAY))
    at = np.arange(8 * 3600.0, 52 * 3600.0, 20.0)
    truth = field(at - 6 * 3600, -29.0)
    off = {shift: at_ship(own, at, 44.0, -29.0, local_time_shift=shift).variation_nt - truth for shift in (True, False)}
    print(f"storm {storm_nt} nT: error {np.std(off[True]):.2f} nT, without the shift {np.std(off[False]):.2f} nT")
    assert np.std(off[True]) < bound
    assert np.std(off[True]) < share * np.std(off[False])


def test_the_shift_takes_the_short_way_across_180_degrees():
    def daily(seconds, lon):
        return 25 * np.cos(2 * np.pi * (seconds / 3600 + lon / 15) / 24)

    own = stations_of(record("A", lambda s: daily(s, 175.0), lon=175.0), datum=100.0)
    at = np.arange(1.0 * DAY, 2.0 * DAY, 60.0)
    found = at_ship(own, at, 45.0, -175.0)
    np.testing.assert_allclose(found.variation_nt, daily(at, 185.0), atol=0.3)
    assert found.distance_km[0] == pytest.approx(786, abs=2)  # 10 degrees of longitude at 45 degrees


def test_great_circle_distances_are_pyproj_s_on_a_sphere():
    rng = np.random.default_rng(1)
    lat, lon = rng.uniform(-90, 90, (2, 500)), rng.uniform(-180, 180, (2, 500))
    expected = Geod(a=6371000.0, b=6371000.0).inv(lon[0], lat[0], lon[1], lat[1])[2] / 1e3
    np.testing.assert_allclose(distance_km(lat[0], lon[0], lat[1], lon[1]), expected, rtol=1e-9, atol=1e-6)


def test_where_the_record_ends_or_pauses_nothing_is_predicted_and_short_gaps_make_unsure():
    def wave(seconds):
        value = 20 * np.sin(2 * np.pi * seconds / 7200)
        value[(seconds > 1.0 * DAY) & (seconds < 1.0 * DAY + 3600)] = np.nan
        value[(seconds > 1.5 * DAY) & (seconds < 1.5 * DAY + 840)] = np.nan
        return value

    own = stations_of(record("A", wave, hours=48.0), datum=100.0)
    at = np.arange(0.0, 3 * DAY, 60.0)
    found = at_ship(own, at, 45.0, -20.0)
    gone = ((at > 1.0 * DAY) & (at < 1.0 * DAY + 3600)) | (at > 2 * DAY - 60)
    np.testing.assert_array_equal(np.isnan(found.variation_nt), gone)
    one = sigma(found, ErrorLaw(0.5, 1.0, 1.0, 1.0))
    np.testing.assert_array_equal(np.isnan(one), gone)
    bridged = (at > 1.5 * DAY) & (at < 1.5 * DAY + 840)
    assert one[~gone & ~bridged].max() == pytest.approx(0.5)
    assert one[bridged].max() > 1.5
    inside = np.abs(found.variation_nt - 20 * np.sin(2 * np.pi * at / 7200))[bridged]
    assert np.sqrt(np.mean(inside**2)) < 2 * np.sqrt(np.mean(one[bridged] ** 2))


def test_beyond_the_record_s_edge_the_shift_keeps_its_last_value_and_sigma_grows():
    """45 degrees west noon is three hours later: for the first three hours of the record there is no such time."""
    own = stations_of(record("A", lambda s: -25 * np.cos(2 * np.pi * s / DAY)), datum=100.0)
    at = np.arange(0.0, 1.0 * DAY, 60.0)
    found = at_ship(own, at, 45.0, -65.0)
    assert np.isfinite(found.variation_nt).all()
    assert found.unsure_nt[at > 3 * 3600] == pytest.approx(0.0)
    early = found.unsure_nt[at < 3 * 3600]
    assert (np.diff(early) <= 1e-9).all()
    # rms change of the cosine over three hours: 25 x sqrt(2) x sin(pi x 3 / 24)
    assert early[0] == pytest.approx(25 * np.sqrt(2) * np.sin(np.pi / 8), rel=0.1)
    truth = -25 * np.cos(2 * np.pi * (at - 3 * 3600) / DAY)
    error = (found.variation_nt - truth)[at < 3 * 3600]
    assert np.abs(error).max() < 2 * early[0]


def test_readings_without_a_position_get_no_value():
    own = stations_of(record("A", lambda s: 0 * s), record("B", lambda s: 0 * s, lon=-10.0))
    lat = np.array([45.0, np.nan, 45.0])
    lon = np.array([-20.0, -20.0, np.nan])
    found = at_ship(own, [DAY, DAY, DAY], lat, lon)
    assert np.isfinite(found.variation_nt).tolist() == [True, False, False]
    assert found.nearest.tolist() == [0, -1, -1]


# -- several stations ------------------------------------------------------------------------------------------------

AROUND = (("A", 44.0, -22.0), ("B", 46.0, -17.0), ("C", 42.0, -18.0), ("D", 47.0, -23.0))


def network(field, changes=None, **settings):
    """Stations around the ship that see ``field(seconds, lat, lon)``; `changes` of a station's start and length."""
    records = []
    for name, lat, lon in AROUND:
        options = (changes or {}).get(name, {})
        records.append(record(name, lambda s, lat=lat, lon=lon: field(s, lat, lon), lat=lat, lon=lon, **options))
    return stations_of(*records, **settings)


def sloping(seconds, lat, lon):
    """Return a field that is a plane in latitude and longitude at every instant; slopes of some nT per 100 km."""
    a, b = 2.5 * np.sin(2 * np.pi * seconds / 40000), 1.5 * np.cos(2 * np.pi * seconds / 25000)
    return 15 * np.sin(2 * np.pi * seconds / 9000) + a * (lat - 44) + b * (lon + 20)


def test_distance_weights_by_hand():
    own = stations_of(record("A", lambda s: 0 * s), record("B", lambda s: 0 * s + 12.0, lon=-16.0), datum=100.0)
    near, far = distance_km(45.0, -19.0, 45.0, -20.0), distance_km(45.0, -19.0, 45.0, -16.0)
    expected = 12.0 / (far**2 + 100) / (1 / (near**2 + 100) + 1 / (far**2 + 100))
    found = at_ship(own, [DAY], 45.0, -19.0, local_time_shift=False)
    assert found.variation_nt[0] == pytest.approx(expected, abs=0.02)
    assert found.distance_km[0] == pytest.approx(near)
    assert at_ship(own, [DAY], 45.0, -19.0, combine="nearest").variation_nt[0] == pytest.approx(0.0, abs=0.02)
    assert at_ship(own, [DAY], 45.0, -17.5, combine="nearest").variation_nt[0] == pytest.approx(12.0, abs=0.02)


def test_a_plane_is_recovered_where_the_field_is_one():
    own = network(sloping, datum=100.0)
    at = np.arange(0.2 * DAY, 2.8 * DAY, 90.0)
    rng = np.random.default_rng(1)
    lat, lon = rng.uniform(42.5, 46.5, len(at)), rng.uniform(-22, -18, len(at))
    truth = sloping(at, lat, lon)
    off = {
        c: at_ship(own, at, lat, lon, combine=c, local_time_shift=False).variation_nt - truth
        for c in ("plane", "distance")
    }
    assert np.std(off["plane"]) < 0.25  # the prior of the slope shrinks it a little
    assert np.std(off["plane"]) < 0.15 * np.std(off["distance"])


def test_the_plane_is_a_least_squares_fit_with_a_prior_slope():
    """Against numpy.linalg.lstsq with the prior as two more equations."""
    own = network(sloping, datum=100.0)
    lat, lon, settings = 45.0, -21.0, Diurnal(combine="plane", local_time_shift=False)
    found = at_ship(own, [1.3 * DAY], lat, lon, combine="plane", local_time_shift=False).variation_nt[0]
    geod = Geod(a=6371000.0, b=6371000.0)
    seen = [geod.inv(lon, lat, s_lon, s_lat) for _, s_lat, s_lon in AROUND]
    rows = [[1, d / 1e5 * np.sin(np.radians(az)), d / 1e5 * np.cos(np.radians(az))] for az, _, d in seen]
    values = [sloping(np.array([1.3 * DAY]), s_lat, s_lon)[0] for _, s_lat, s_lon in AROUND]
    ratio = settings.sigma_at_base_nt / settings.sigma_nt_per_100km
    ratio *= np.sqrt(1 + (np.mean([d for *_, d in seen]) / 300e3) ** 4)
    fit = np.linalg.lstsq(np.array([*rows, [0, ratio, 0], [0, 0, ratio]]), np.array([*values, 0, 0]), rcond=None)[0]
    assert found == pytest.approx(fit[0], abs=0.03)


@pytest.mark.parametrize("combine", ["distance", "plane", "nearest"])
def test_no_step_enters_the_survey_when_stations_come_and_go(combine):
    """Four records that begin and end at different times; the ship sees steps of the size of the field's own."""
    changes = {"A": {"hours": 40.0}, "B": {"first_h": 20.0, "hours": 30.0}, "C": {"first_h": 30.0, "hours": 42.0}}
    own = network(sloping, changes, datum=100.0)
    at = np.arange(0.0, 71.9 * 3600, 10.0)
    found = at_ship(own, at, 44.5, -20.5, combine=combine, local_time_shift=False).variation_nt
    assert np.isfinite(found).all()
    own_steps = np.abs(np.diff(sloping(at, 44.5, -20.5))).max()
    assert np.abs(np.diff(found)).max() < own_steps + 0.04  # 10 nT of difference in an hour: 0.042 in 10 s at worst
    # what each instant's stations are
    alone = at < 19.9 * 3600
    only = at_ship(
        network(sloping, {}, datum=100.0)[:1] + own[3:], at[alone], 44.5, -20.5, combine=combine, local_time_shift=False
    )
    np.testing.assert_allclose(found[alone], only.variation_nt, atol=0.02)


def test_a_far_station_stands_in_for_a_near_one_with_a_larger_sigma():
    near = record("near", lambda s: 0 * s, hours=24.0)
    far = record("far", lambda s: 0 * s, lon=-12.0)
    own = stations_of(near, far)
    found = at_ship(own, [0.5 * DAY, 1.5 * DAY], 45.0, -20.5)
    one = sigma(found, ErrorLaw(0.5, 1.0, 3.0, 1.0))
    assert found.nearest.tolist() == [0, 1]
    assert one == pytest.approx(np.hypot(0.5, found.distance_km / 100.0))
    assert found.distance_km == pytest.approx([39.3, 667.6], abs=2)


def test_sigma_by_hand():
    found = Prediction(
        variation_nt=np.zeros(4),
        distance_km=np.array([100.0, 100.0, 300.0, 100.0]),
        unsure_nt=np.array([0.0, 0.0, 0.0, 4.0]),
        disturbed=np.array([False, True, False, False]),
        nearest=np.zeros(4, int),
    )
    law = ErrorLaw(
        near_nt=0.5, quiet_nt_per_100km=0.4, disturbed_nt_per_100km=2.0, stated_nt_per_100km=1.0, reach_km=200.0
    )
    # beyond the reach of the calibration growth is not less than stated
    expected = [np.hypot(0.5, 0.4), np.hypot(0.5, 2.0), np.sqrt(0.25 + 0.8**2 + 9.0 - 4.0), np.sqrt(0.25 + 0.16 + 16)]
    assert sigma(found, law) == pytest.approx(expected)


def test_growth_with_distance_is_found_from_the_stations_themselves():
    """A field whose slopes vary at random, more in a storm: the calibrated sigma is the error's size at the ship."""
    ratios = {"quiet": [], "storm": []}
    for seed in range(12):
        rng = np.random.default_rng(seed)
        knots = np.arange(0, 3.2 * DAY, 5400.0)
        slope = rng.normal(size=(2, len(knots))) * 0.9  # nT per 100 km, each way
        storm = (knots > 1.5 * DAY) & (knots < 2.2 * DAY)
        slope[:, storm] *= 6

        def field(s, lat, lon, knots=knots, slope=slope, seed=seed):
            x, y = 1.112 * np.cos(np.radians(45)) * (lon + 20), 1.112 * (lat - 45)
            value = x * np.interp(s, knots, slope[0]) + y * np.interp(s, knots, slope[1])
            quick = np.where((s > 1.5 * DAY) & (s < 2.2 * DAY), 12 * np.sin(2 * np.pi * s / 900), 0.0)
            return value + quick + np.random.default_rng(int(1000 * (lat + lon) + seed)).normal(0, 0.1, np.shape(s))

        places = [("A", 45.0, -21.5), ("B", 45.5, -18.5), ("C", 43.5, -20.0)]
        own = stations_of(
            *(record(n, lambda s, a=a, b=b: field(s, a, b), lat=a, lon=b) for n, a, b in places), sigma_at_base_nt=0.15
        )
        settings = {"sigma_at_base_nt": 0.15, "local_time_shift": False}
        law, rows = calibrate(own, settings=Diurnal(**settings))
        assert [row["station"] for row in rows] == ["A", "B", "C"]
        assert law.disturbed_nt_per_100km > 2 * law.quiet_nt_per_100km
        at = np.arange(0.1 * DAY, 2.9 * DAY, 60.0)
        found = at_ship(own, at, 46.5, -21.0, **settings)
        error = found.variation_nt - field(at, 46.5, -21.0)
        error -= error.mean()
        one = sigma(found, law)
        for kind, chosen in (("quiet", ~found.disturbed), ("storm", found.disturbed)):
            ratios[kind].append(np.mean((error[chosen] / one[chosen]) ** 2))
    for kind, squares in ratios.items():
        print(f"{kind}: error over sigma {np.sqrt(np.mean(squares)):.2f}")
        assert 0.6 < np.sqrt(np.mean(squares)) < 1.4


def test_one_station_has_the_stated_law():
    own = stations_of(record("A", lambda s: 0 * s))
    law, rows = calibrate(own, settings=Diurnal(sigma_at_base_nt=0.7, sigma_nt_per_100km=1.9))
    assert rows == []
    assert law == ErrorLaw(0.7, 1.9, 1.9, 1.9, 0.0)


# -- a real observatory ----------------------------------------------------------------------------------------------


def test_boulder_s_own_variation_is_its_field_less_an_independent_main_field(shared):
    """USGS, Boulder, January 2016; main field by ppigrf, whose dates are elapsed days (up to 0.2 nT off)."""
    from steps.formats.iaga2002 import read_iaga2002

    header, table = read_iaga2002(shared / "iaga2002" / "BOU201601adj.min")
    time, field = table["time_utc"].to_numpy(), table["total_field_nt"].to_numpy()
    place = header.latitude_deg, header.longitude_deg, header.elevation_m
    station = station_variation(time, field, *place, settings=Diurnal(), name="BOU")
    days = pd.DatetimeIndex(time[::1440])
    b = np.array(ppigrf.igrf(place[1], place[0], place[2] / 1e3, days)).squeeze()
    main = np.sqrt((b**2).sum(axis=0))
    own = np.stack([np.interp(time.astype("int64")[::1440] / 1e9, station.variation.times(), station.variation.value)])[
        0
    ]
    difference = field[::1440] - main - own
    assert np.std(difference) < 0.05
    assert abs(station.datum_nt) < 300.0  # crust and ring current: common practice
    assert difference.mean() == pytest.approx(station.datum_nt, abs=0.3)
    # the record stops after 28.9 days and is whole (its README)
    assert len(station.known_s) == 1
    # daily variation at middle latitude: tens of nT (common practice)
    assert 15 < np.ptp(station.variation.value) < 120


# -- the stage -------------------------------------------------------------------------------------------------------


def folder_job(folder, settings, files, hours=(6.0, 30.0), names=("L1", "L2"), step_s=60.0):
    """Make the stage's inputs: a ship at 40 N 105 W, lines of equal length from `hours` after START."""
    at = np.arange(hours[0] * 3600, hours[1] * 3600, step_s)
    time = START + (at * 1e9).astype("int64").astype("timedelta64[ns]")
    n = len(time)
    index = np.minimum(np.arange(n) * len(names) // n, len(names) - 1)
    edges = [np.flatnonzero(index == k)[[0, -1]] for k in range(len(names))]
    tables = {
        "readings": pd.DataFrame({"time_utc": time}),
        "position": pd.DataFrame({"sensor_latitude_deg": np.full(n, 40.0), "sensor_longitude_deg": np.full(n, -105.0)}),
        "lines": pd.DataFrame({"line_index": index.astype(np.int32)}),
        "line_table": pd.DataFrame(
            {
                "line": list(names),
                "kind": "line",
                "start_utc": [time[a] for a, _ in edges],
                "end_utc": [time[b] for _, b in edges],
                "readings": [int(b - a + 1) for a, b in edges],
            }
        ),
    }
    inputs = {}
    for name, table in tables.items():
        table.to_parquet(folder / f"{name}.parquet")
        inputs[name] = [folder / f"{name}.parquet"]
    inputs |= {f"base_{k}": paths for k, paths in enumerate(files)}
    outputs = [folder / "diurnal.parquet", folder / "diurnal_base.parquet", folder / "diurnal_record.json"]
    return stage.Job("diurnal", inputs, outputs, {"settings": settings})


def run(job, folder):
    diurnal.main(job)
    job.finish()
    told = json.loads((folder / "diurnal_record.json").read_text())
    return pd.read_parquet(folder / "diurnal.parquet"), pd.read_parquet(folder / "diurnal_base.parquet"), told


def delimited(name="Own", **changes):
    source = {
        "format": "delimited",
        "files": ["base.csv"],
        "name": name,
        "latitude_deg": 40.5,
        "longitude_deg": 255.5,
        "columns": {"total_field_nt": "F"},
        "time": {"columns": ["t"]},
        "clock": {"offset_s": 0.0},
    }
    return source | changes


def own_record(path, hours=(0.0, 48.0), step_s=60.0, late_s=0.0, change=None, level=52000.0):
    at = np.arange(hours[0] * 3600, hours[1] * 3600, step_s)
    value = level + 10 * np.sin(2 * np.pi * at / 20000)
    if change is not None:
        value = change(at, value)
    time = pd.DatetimeIndex(START + ((at + late_s) * 1e9).astype("int64").astype("timedelta64[ns]"))
    rows = [
        f"{t.isoformat()},{v:.3f}" if np.isfinite(v) else f"{t.isoformat()},NaN"
        for t, v in zip(time, value, strict=True)
    ]
    path.write_text("\n".join(["t,F", *rows]) + "\n")
    return path


def test_no_base_station_is_a_legal_survey(tmp_path):
    table, base, told = run(folder_job(tmp_path, {}, []), tmp_path)
    assert table["diurnal_nt"].isna().all()
    assert table["sigma_diurnal_nt"].isna().all()
    assert (table["diurnal_flags"] == int(Flag.NO_DIURNAL)).all()
    assert len(base) == 0
    assert told["notes"] == ["there is no base station: the diurnal term is missing, and levelling has to carry it."]
    assert told["reason"] == "no base station"


def test_a_base_that_ends_half_way_leaves_the_rest_missing_with_a_sentence(tmp_path):
    files = [[own_record(tmp_path / "base.csv", (0.0, 20.0))]]
    table, base, told = run(folder_job(tmp_path, {"base_stations": [delimited()]}, files), tmp_path)
    gone = np.arange(len(table)) > 60 * 14 - 1
    np.testing.assert_array_equal(table["diurnal_nt"].isna(), gone)
    np.testing.assert_array_equal(table["diurnal_flags"] == int(Flag.NO_DIURNAL), gone)
    np.testing.assert_array_equal(table["sigma_diurnal_nt"].isna(), gone)
    assert told["missing"] == gone.sum() == 600
    ends = "base station Own: its record ends 2023-06-10T19:59:00 and the survey after that: "
    assert ends + "readings there have no diurnal value." in told["notes"]
    assert "600 readings have no diurnal value, for want of a base station's record: L2." in told["notes"]
    assert base["station"].unique().tolist() == ["Own"]
    assert len(base) == 20 * 60


def test_every_value_of_the_base_is_accounted_for_and_every_file_has_its_checksum(tmp_path):
    def change(at, value):
        value[100:110] = np.nan
        value[200] = 0.0  # a dropout
        return value

    one = own_record(tmp_path / "one.csv", (-100.0, 12.0), change=change)
    two = own_record(tmp_path / "two.csv", (11.0, 130.0))
    again = own_record(tmp_path / "again.csv", (20.0, 20.5), level=52001.0)
    job = folder_job(tmp_path, {"base_stations": [delimited()]}, [[one, two, again]])
    _, _, told = run(job, tmp_path)
    (ledger,) = told["ledgers"]
    assert ledger["records"] == 60 * 112 + 60 * 119 + 30
    assert ledger["repeated"] == 60
    assert ledger["contradictory"] == 30
    assert (ledger["missing"], ledger["out_of_range"]) == (10, 1)
    # used: from two days before the first reading (06:00) to two days after the last (05:59 next day)
    assert ledger["used"] == 60 * (42 + 30 + 48)
    kinds = ("used", "repeated", "contradictory", "missing", "out_of_range", "far_from_the_survey")
    assert ledger["records"] == sum(ledger[kind] for kind in kinds)
    assert [len(file["sha256"]) for file in told["files"]] == [64] * 3
    assert "base station Own: values left out that are no total field: 1." in told["notes"]
    assert "base station Own: values left out that contradict another of the same time: 30." in told["notes"]


def test_the_base_s_clock_is_corrected(tmp_path):
    files = [[own_record(tmp_path / "base.csv", late_s=90.0)]]
    late = delimited(clock={"offset_s": -90.0})
    table, _, _ = run(folder_job(tmp_path, {"base_stations": [late], "datum": 0.0}, files), tmp_path)
    (tmp_path / "b").mkdir()
    files = [[own_record(tmp_path / "b" / "base.csv")]]
    right, _, _ = run(folder_job(tmp_path / "b", {"base_stations": [delimited()], "datum": 0.0}, files), tmp_path / "b")
    np.testing.assert_allclose(table["diurnal_nt"], right["diurnal_nt"], atol=1e-6)


def test_lines_in_disturbed_time_and_their_ranges_are_told(tmp_path):
    def storm(at, value):
        return value + np.where((at > 20 * 3600) & (at < 22 * 3600), 30 * np.sin(2 * np.pi * at / 1200), 0.0)

    files = [[own_record(tmp_path / "base.csv", change=storm)]]
    settings = {"base_stations": [delimited()]}
    table, base, told = run(folder_job(tmp_path, settings, files, names=("L1", "L2", "L3")), tmp_path)
    flagged = (table["diurnal_flags"] & int(Flag.DISTURBED)) != 0
    at = 6 * 3600 + 60 * np.arange(len(table))
    stormy = (at > 20 * 3600) & (at < 22 * 3600)
    assert flagged[stormy].mean() > 0.9
    assert flagged[np.abs(at - 21 * 3600) > 3600 + 600].sum() == 0
    assert base["disturbed"].sum() > 100
    # L2 is from 14 to 22 o'clock
    share = round(100 * flagged[480:960].mean())
    assert f"lines in magnetically disturbed time: L2 ({share} % of its readings)." in told["notes"]
    ranges = {row["line"]: row["range_nt"] for row in told["three_hour_ranges"]}
    assert ranges["L2"] > 55.0
    assert ranges["L1"] < 22.0


@pytest.mark.parametrize(
    ("settings", "hours", "level", "sentence"),
    [
        (
            {},
            (900.0, 950.0),
            52000.0,
            r"must have a record during the survey, 2023-06-10T06:00:00 to .* Got Own from 2023-07-17T12",
        ),
        ({}, (-30.0, 5.0), 52000.0, r"must have a record during the survey"),
        ({}, (0.0, 48.0), 520.0, r"base station Own, .*: must be a total field between 15000 and 80000 nT\. Got 5\d\d"),
        (
            {"longest_gap_s": 30.0},
            (0.0, 48.0),
            52000.0,
            r"closer together than diurnal.longest_gap_s, 30 s\. Got one in 60 s",
        ),
    ],
)
def test_a_base_that_cannot_be_used_is_one_sentence(tmp_path, settings, hours, level, sentence):
    files = [[own_record(tmp_path / "base.csv", hours, level=level)]]
    job = folder_job(tmp_path, {"base_stations": [delimited()], **settings}, files)
    with pytest.raises(SurveyError, match=sentence) as caught:
        diurnal.main(job)
    assert "\n" not in str(caught.value)


def test_names_must_differ(tmp_path):
    files = [[own_record(tmp_path / "base.csv")]] * 2
    job = folder_job(tmp_path, {"base_stations": [delimited(), delimited()]}, files)
    with pytest.raises(SurveyError, match=r"base_stations: must have a name each\. Got Own twice\."):
        diurnal.main(job)


@pytest.fixture
def boulder(shared, tmp_path):
    """Return files of 2014-11-01, 03 and 05 with their dates moved to the test's survey."""
    paths = []
    for day in ("01", "03", "05"):
        path = tmp_path / f"bou{day}.min"
        shutil.copy(shared / "iaga2002" / f"bou201411{day}vmin.min", path)
        paths.append(path)
    return paths


def boulder_job(folder, settings, paths):
    """Make a job whose ship sailed from 1 to 5 November 2014."""
    job = folder_job(folder, settings, [paths], hours=(0.0, 120.0))
    move = np.datetime64("2014-11-01", "ns") - START
    for name, columns in (("readings", ["time_utc"]), ("line_table", ["start_utc", "end_utc"])):
        table = pd.read_parquet(folder / f"{name}.parquet")
        for column in columns:
            table[column] = table[column] + move
        table.to_parquet(folder / f"{name}.parquet")
    return job


def test_a_real_observatory_as_base(boulder, tmp_path):
    """Three real days with a day missing between them: position from the header, days without a record flagged."""
    source = {"format": "iaga2002", "files": ["bou*.min"], "name": "Boulder"}
    table, base, told = run(boulder_job(tmp_path, {"base_stations": [source]}, boulder), tmp_path)
    day = np.arange(len(table)) // 1440
    known = table["diurnal_nt"].notna().to_numpy()
    # but for the seconds between the last minute of a day and the next
    assert known[np.isin(day, (0, 2, 4))].all()
    assert not known[np.isin(day, (1, 3))].any()
    (about,) = told["stations"]
    assert about["latitude_deg"] == 40.137
    assert about["longitude_deg"] == pytest.approx(-105.236, abs=1e-3)
    assert about["long_gaps"] == 2
    assert told["ledgers"][0]["used"] == 3 * 1440
    ranges = {row["line"]: row["range_nt"] for row in told["three_hour_ranges"]}
    assert all(5 < value < 40 for value in ranges.values())
    assert table["sigma_diurnal_nt"].min() >= 0.5
    assert len(base) == base["time_utc"].nunique() == 5 * 1440


def test_files_of_two_observatories_are_not_one_station(boulder, tmp_path):
    text = boulder[1].read_text().replace("BOU ", "FRN ", 1)
    boulder[1].write_text(text)
    source = {"format": "iaga2002", "files": ["bou*.min"], "name": "Boulder"}
    with pytest.raises(SurveyError, match=r"bou03.min: must be of the observatory of its other files, BOU\. Got FRN"):
        diurnal.main(boulder_job(tmp_path, {"base_stations": [source]}, boulder))
    boulder[1].write_text(text.replace("FRN ", "BOU ", 1).replace("40.137", "37.091"))
    with pytest.raises(SurveyError, match=r"bou03.min: must give the position that its other files give"):
        diurnal.main(boulder_job(tmp_path, {"base_stations": [source]}, boulder))


def test_a_position_that_no_file_gives_is_asked_for(boulder, tmp_path):
    for path in boulder:
        rows = path.read_text().splitlines()
        path.write_text("\n".join(row for row in rows if "Geodetic" not in row) + "\n")
    source = {"format": "iaga2002", "files": ["bou*.min"], "name": "Boulder"}
    with pytest.raises(SurveyError, match=r"must have a position\. Got none in its files\. Give latitude_deg"):
        diurnal.main(boulder_job(tmp_path, {"base_stations": [source]}, boulder))
    stated = source | {"latitude_deg": 40.1, "longitude_deg": 254.8, "height_m": 1700.0}
    _, _, told = run(boulder_job(tmp_path, {"base_stations": [stated]}, boulder), tmp_path)
    assert told["stations"][0]["longitude_deg"] == pytest.approx(-105.2)
