"""Profiles: terms put together, projection, resampling, files."""

import numpy as np
import pandas as pd
import pytest
from pyproj import Geod

from steps import profiles
from steps.columns import COLUMNS, Flag
from steps.settings import Profiles

GEOD = Geod(ellps="WGS84")  # Karney (2013), J. Geodesy 87
RNG = np.random.default_rng(4)


# -- terms -----------------------------------------------------------------------------------------------------------


def _parts(n=6, **change):
    columns = {
        "readings": {"time_utc": np.datetime64("2024-05-01", "ns") + np.arange(n), "total_field_nt": 46010.0},
        "lines": {"line_index": np.zeros(n, np.int32)},
        "screen": {"screen_flags": np.zeros(n, np.uint32), "sigma_noise_nt": 0.1},
        "position": {"sensor_latitude_deg": 10.0, "position_flags": np.zeros(n, np.uint32)},
        "main_field": {"main_field_nt": 46000.0},
        "diurnal": {"diurnal_nt": 3.0, "sigma_diurnal_nt": 0.4, "diurnal_flags": np.zeros(n, np.uint32)},
        "heading": {"heading_nt": 2.0, "sigma_heading_nt": 0.3, "heading_flags": np.zeros(n, np.uint32)},
        "levelling": {"level_nt": 1.0, "sigma_level_nt": 0.2, "level_flags": np.zeros(n, np.uint32)},
    }  # fmt: skip
    for name, own in change.items():
        columns[name] |= own
    return {name: pd.DataFrame(own, index=range(n)) for name, own in columns.items()}


def test_every_term_is_subtracted():
    table, absent = profiles.combine(_parts())
    assert table["anomaly_nt"].tolist() == [4.0] * 6
    assert absent == {}


def test_a_term_that_the_survey_lacks_is_absent_with_a_reason():
    none = {"diurnal_nt": np.nan, "diurnal_flags": np.full(6, int(Flag.NO_DIURNAL), np.uint32)}
    table, absent = profiles.combine(_parts(diurnal=none))
    assert table["anomaly_nt"].tolist() == [7.0] * 6
    assert absent == {"diurnal_nt": "no_diurnal"}
    assert (table["flags"].to_numpy() & int(Flag.NO_DIURNAL) != 0).all()


def test_a_reading_without_a_term_that_others_have_has_no_anomaly():
    value = np.array([3.0, 3.0, np.nan, 3.0, 3.0, 3.0])
    table, absent = profiles.combine(_parts(diurnal={"diurnal_nt": value}))
    assert np.isnan(table["anomaly_nt"]).tolist() == [False, False, True, False, False, False]
    assert absent == {}


def test_a_line_without_a_level_keeps_its_anomaly():
    value = np.array([1.0, 1.0, 1.0, np.nan, np.nan, np.nan])
    table, _ = profiles.combine(_parts(levelling={"level_nt": value}))
    assert table["anomaly_nt"].tolist() == [4.0] * 3 + [5.0] * 3


def test_changes_of_the_joint_adjustment_go_into_the_terms_and_the_identity_holds():
    change = {"heading_change_nt": 0.25, "diurnal_change_nt": np.nan}
    table, _ = profiles.combine(_parts(levelling=change))
    assert table["heading_nt"].tolist() == [2.25] * 6
    assert table["diurnal_nt"].tolist() == [3.0] * 6
    terms = table["total_field_nt"] - table[list(profiles.TERMS)].sum(axis=1)
    np.testing.assert_allclose(table["anomaly_nt"], terms, rtol=0, atol=1e-9)


def test_rejected_readings_have_no_anomaly_and_kept_ones_have():
    flags = np.array([0, Flag.SPIKE, Flag.SPIKE | Flag.EDITED_IN, Flag.EDITED_OUT, 0, 0], np.uint32)
    table, _ = profiles.combine(_parts(screen={"screen_flags": flags}))
    assert np.isfinite(table["anomaly_nt"]).tolist() == [True, False, True, False, True, True]


def test_sigma_is_the_root_of_the_sum_of_squares_of_what_there_is():
    table = pd.DataFrame({name: [0.3, 0.3] for name in profiles.SIGMAS} | {"anomaly_nt": [1.0, np.nan]})
    table.loc[0, "sigma_heading_nt"] = np.nan
    np.testing.assert_allclose(profiles.total_sigma(table), [0.6, np.nan])


# -- geometry --------------------------------------------------------------------------------------------------------


def _line(lat, lon, azimuth, length_km, n=600, wander_m=0.0):
    distance = np.linspace(0, length_km * 1000, n)
    lons, lats, _ = GEOD.fwd(np.full(n, lon), np.full(n, lat), np.full(n, azimuth), distance)
    if wander_m:
        lons, lats, _ = GEOD.fwd(lons, lats, np.full(n, azimuth + 90), wander_m * np.sin(distance / 3000.0))
    return lats, lons


@pytest.mark.parametrize(
    ("lat", "lon", "azimuth"), [(44, -28, 108), (-10, 179.8, 90), (0, 0, 0), (70, -179.9, 250), (-84, 30, 10)]
)
def test_best_fit_finds_the_direction_of_the_line(lat, lon, azimuth):
    lats, lons = _line(lat, lon, azimuth, 60.0, wander_m=80.0)
    found, lat_0, lon_0 = profiles.best_fit_azimuth(lats, lons)
    _, _, _ = found, lat_0, lon_0
    middle = len(lats) // 2
    true, _, _ = GEOD.inv(lons[middle - 200], lats[middle - 200], lons[middle + 200], lats[middle + 200])
    back, _, _ = GEOD.inv(lon_0, lat_0, lons[-1], lats[-1])
    assert abs((found - back + 90) % 180 - 90) < 0.2
    assert abs((found - true + 90) % 180 - 90) < 3.0


@pytest.mark.parametrize("lon", [-28.0, 179.8])
def test_distance_is_geodesic_and_grows_in_the_azimuth(lon):
    lats, lons = _line(44.0, lon, 108.0, 300.0)
    distance, offset = profiles.project_on_line(lats, lons, 108.0, 44.0, lon)
    _, _, true = GEOD.inv(np.full(600, lon), np.full(600, 44.0), lons, lats)
    np.testing.assert_allclose(distance, np.asarray(true) / 1000, rtol=0, atol=0.02)
    assert np.abs(offset).max() < 0.6  # geodesic and great circle part a little over 300 km


def test_a_place_to_the_right_has_a_positive_offset():
    lon, lat, _ = GEOD.fwd(0.0, 0.0, 90.0, 10_000.0)
    lon, lat, _ = GEOD.fwd(lon, lat, 180.0, 2000.0)
    distance, offset = profiles.project_on_line(np.array([lat]), np.array([lon]), 90.0, 0.0, 0.0)
    assert distance[0] == pytest.approx(10.0, abs=0.01)
    assert offset[0] == pytest.approx(2.0, abs=0.02)


@pytest.mark.parametrize(
    ("azimuth", "towards", "turned"), [(30, 90, 30), (210, 90, 30), (359, 90, 179), (90, 270, 270), (0, 90, 0)]
)
def test_distance_grows_in_the_stated_sense(azimuth, towards, turned):
    assert profiles.turn_towards(azimuth, towards) == turned


# -- resampling ------------------------------------------------------------------------------------------------------

SPACING = 0.1


def _gain(wavelength_km):
    x = np.sort(RNG.uniform(0, 60, 12_000))
    at, (found,) = profiles.resample_evenly(x, np.sin(2 * np.pi * x / wavelength_km)[None], SPACING, 0.5)
    inner = (at > 5) & (at < 55)
    basis = np.stack([np.sin(2 * np.pi * at / wavelength_km), np.cos(2 * np.pi * at / wavelength_km)], axis=1)[inner]
    return np.linalg.lstsq(basis, found[inner], rcond=None)[0][0], found[inner]


def test_long_waves_pass_and_waves_beyond_the_new_nyquist_do_not():
    """The new Nyquist wavelength is 0.2 km: 0.5 km passes whole, 0.13 km leaves less than a hundredth."""
    assert _gain(2.0)[0] == pytest.approx(1.0, abs=0.002)
    assert _gain(0.5)[0] == pytest.approx(1.0, abs=0.02)
    assert np.std(_gain(0.13)[1]) < 0.02  # what is left comes from the uneven readings


def test_samples_are_at_multiples_of_the_spacing_whatever_way_the_ship_ran():
    x = np.sort(RNG.uniform(3.01, 20, 4000))
    value = np.sin(x)[None]
    at, found = profiles.resample_evenly(x, value, SPACING, 0.5)
    back = profiles.resample_evenly(x[::-1], value[:, ::-1], SPACING, 0.5)
    assert at[0] == pytest.approx(np.ceil(x[0] / SPACING) * SPACING)
    np.testing.assert_allclose(at / SPACING, np.rint(at / SPACING), rtol=0, atol=1e-9)
    np.testing.assert_array_equal(back[0], at)
    np.testing.assert_allclose(back[1], found, rtol=0, atol=1e-9)
    np.testing.assert_allclose(found[0], np.sin(at), rtol=0, atol=2e-3)


def test_a_straight_line_stays_straight_to_its_ends():
    x = np.linspace(0, 10, 2000)
    at, (found,) = profiles.resample_evenly(x, (46000 + 30 * x)[None], SPACING, 0.5)
    np.testing.assert_allclose(found, 46000 + 30 * at, rtol=0, atol=1e-6)


def test_gaps_stay_gaps_and_small_ones_are_bridged():
    x = np.linspace(0, 20, 4001)
    keep = ~((x > 5) & (x < 5.3)) & ~((x > 10) & (x < 12))
    at, (found,) = profiles.resample_evenly(x[keep], np.sin(x[keep])[None], SPACING, 0.5)
    missing = np.isnan(found)
    assert not missing[(at > 4) & (at < 6)].any()
    assert missing[(at > 10.01) & (at < 11.99)].all()
    assert missing.sum() <= 21


def test_coarse_records_are_interpolated():
    x = np.arange(0, 30, 0.31)
    at, (found,) = profiles.resample_evenly(x, (2 * x)[None], SPACING, 0.5)
    np.testing.assert_allclose(found, 2 * at, rtol=0, atol=1e-9)


def _readings(n=3000, flip=False):
    lats, lons = _line(44.0, 179.9, 100.0, 15.0, n=n)
    order = slice(None, None, -1) if flip else slice(None)
    table = pd.DataFrame({"sensor_latitude_deg": lats[order], "sensor_longitude_deg": lons[order]})
    table["distance_km"] = np.linspace(0, 15, n)[order]
    x = table["distance_km"].to_numpy()
    table["time_utc"] = np.datetime64("2024-05-01", "ns") + np.arange(n) * np.timedelta64(1, "s")
    table["main_field_nt"], table["diurnal_nt"], table["level_nt"] = 46000 + x, np.sin(x / 9), 0.7
    table["heading_nt"] = np.nan
    table["total_field_nt"] = 46000 + x + np.sin(x / 9) + 0.7 + 50 * np.sin(x / 2)
    table["anomaly_nt"] = 50 * np.sin(x / 2)
    for name in profiles.SIGMAS:
        table[name] = 0.2
    table["sensor_depth_m"], table["offset_km"], table["water_depth_m"] = 10.0, 0.0, 2000 + x
    return table.assign(flags=np.zeros(n, np.uint32))


@pytest.mark.parametrize("flip", [False, True])
def test_a_profile_holds_the_identity_and_the_truth(flip):
    profile = profiles.make_profile(_readings(flip=flip), settings=Profiles(), absent={"heading_nt": "none"})
    terms = profile["total_field_nt"] - profile["main_field_nt"] - profile["diurnal_nt"] - profile["level_nt"]
    np.testing.assert_allclose(profile["anomaly_nt"], terms, rtol=0, atol=1e-9)
    np.testing.assert_allclose(profile["anomaly_nt"], 50 * np.sin(profile["distance_km"] / 2), rtol=0, atol=0.02)
    assert profile["heading_nt"].isna().all()
    assert (np.diff(profile["distance_km"]) > 0).all()
    np.testing.assert_allclose(profile["water_depth_m"], 2000 + profile["distance_km"], rtol=0, atol=1e-6)
    # noise falls with the readings averaged (5 m apart, 129 m wide), the other terms do not
    assert profile["sigma_noise_nt"].iloc[50] == pytest.approx(0.2 / np.sqrt(0.1 / 0.775 / 0.005), rel=0.02)
    assert profile["sigma_diurnal_nt"].iloc[50] == pytest.approx(0.2)
    lon, lat, _ = GEOD.fwd(179.9, 44.0, 100.0, profile["distance_km"].iloc[77] * 1000)
    assert profile["sensor_latitude_deg"].iloc[77] == pytest.approx(lat, abs=1e-6)
    assert profile["sensor_longitude_deg"].iloc[77] == pytest.approx((lon + 180) % 360 - 180, abs=1e-6)
    assert profile["inclination_deg"].between(50, 70).all()


def test_flags_of_a_gap_say_why():
    table = _readings()
    table.loc[1000:1400, ["anomaly_nt"]] = np.nan
    table.loc[1000:1400, "flags"] = np.uint32(Flag.EDITED_OUT)
    profile = profiles.make_profile(table, settings=Profiles(), absent={"heading_nt": "none"})
    gap = profile["anomaly_nt"].isna()
    assert 15 <= gap.sum() <= 22
    assert (profile.loc[gap, "flags"].to_numpy()[1:-1] & int(Flag.EDITED_OUT) != 0).all()
    assert (profile.loc[~gap, "flags"].to_numpy() == 0).all()


def test_too_little_gives_no_profile():
    table = _readings(10).assign(anomaly_nt=np.nan)
    assert len(profiles.make_profile(table, settings=Profiles(), absent={})) == 0


# -- files -----------------------------------------------------------------------------------------------------------


def test_the_header_explains_every_column():
    profile = profiles.make_profile(_readings(), settings=Profiles(), absent={"heading_nt": "no calibration"})
    about = {"name": "S\n<x>", "software": "v", "inputs": [{"file": "a", "sha256": "0"}], "edits": []}
    where = {"azimuth_deg": 100.0, "origin_latitude_deg": 1.0, "origin_longitude_deg": 2.0}
    text = profiles.as_csv(
        profile, profiles.csv_header("L\n1", "line", about, where, {"heading_nt": "no calibration"})
    ).decode()
    rows = text.splitlines()
    header = [row for row in rows if row.startswith("#")]
    assert rows[: len(header)] == header
    names = rows[len(header)].split(",")
    for name in names:
        assert f"# {name} [{COLUMNS[name].unit}]: {COLUMNS[name].meaning}" in header
    assert "# absent in the whole survey: heading_nt (no calibration)" in header
    assert "# line: L 1" in header
    from io import StringIO

    back = pd.read_csv(StringIO(text), comment="#")
    np.testing.assert_allclose(back["anomaly_nt"], profile["anomaly_nt"], rtol=0, atol=0.00051)
    assert back["heading_nt"].isna().all()


def test_file_names_are_safe_and_unique():
    names = profiles.file_names(["L/1", "L 1", "../x", "\U0001f9ed", "y" * 300, "L-1", ""])
    assert len(set(names)) == 7
    assert all(set(name) <= set("abcdefghijklmnopqrstuvwxyz0123456789-_") for name in names)
    assert max(map(len, names)) < 80
