"""Locating the sensor: pursuit curve, geodesy, smoothing, gaps, cable."""

import numpy as np
import pandas as pd
import pytest
from pyproj import Geod
from scipy.integrate import solve_ivp

from steps import geodesy, position
from steps.columns import Flag
from steps.errors import SurveyError
from steps.navigation import smooth
from steps.settings import AntennaToTowPoint, Layback, Position

GEOD = Geod(ellps="WGS84")  # Karney (2013), J. Geodesy 87
RNG = np.random.default_rng(7)
START = np.datetime64("2024-05-01", "ns")


def _loop(east, north, layback, first):
    """Follow the closed form of one straight element, element by element."""
    psi = [first]
    for e, n, b in zip(east, north, layback, strict=True):
        azimuth = np.arctan2(e, n)
        phi = (psi[-1] - azimuth + np.pi) % (2 * np.pi) - np.pi
        psi.append(azimuth + 2 * np.arctan(np.tan(phi / 2) * np.exp(-np.hypot(e, n) / b)))
    return np.array(psi)


def _has(table, flag):
    return (table["position_flags"].to_numpy() & np.uint32(flag)) != 0


def _turn(difference):
    return np.abs(np.arctan2(np.sin(difference), np.cos(difference)))


@pytest.mark.parametrize("n", [1, 2, 63, 64, 5000, 70_001])
def test_scan_is_the_closed_form_element_by_element(n):
    azimuth = np.cumsum(RNG.normal(0, 0.02, n))
    length = RNG.uniform(0, 8, n)
    layback = np.where(np.arange(n) < n // 3, 180.0, 320.0)
    east, north = length * np.sin(azimuth), length * np.cos(azimuth)
    psi = position.pursuit_curve(east, north, layback, 2.9)
    assert (_turn(psi - _loop(east, north, layback, 2.9)) * layback.max()).max() < 1e-6  # metres


def test_pursuit_curve_solves_its_differential_equation():
    """The sensor moves towards the tow point: dpsi/ds = -sin(psi - azimuth) / B, by SciPy's Runge-Kutta."""

    def azimuth(s):
        return 0.9 * np.sin(s / 400.0) + s / 900.0

    solution = solve_ivp(
        lambda s, psi: -np.sin(psi - azimuth(s)) / 200.0, [0, 4000], [0.7], rtol=1e-10, atol=1e-10, dense_output=True
    )
    s = np.linspace(0, 4000, 40_001)
    middle = azimuth((s[1:] + s[:-1]) / 2)
    psi = position.pursuit_curve(0.1 * np.sin(middle), 0.1 * np.cos(middle), np.full(40_000, 200.0), 0.7)
    assert (_turn(psi - solution.sol(s)[0]) * 200).max() < 1e-3


def test_steady_turn_has_the_known_angle():
    """On a circle of radius R the sensor goes round with sin(phi) = B / R (tractrix of a circle)."""
    step, radius, layback = 0.5, 600.0, 250.0
    azimuth = np.arange(60_000) * step / radius
    psi = position.pursuit_curve(step * np.sin(azimuth), step * np.cos(azimuth), np.full(60_000, layback), 0.0)
    behind = azimuth[-1] + step / radius / 2 - psi[-1]
    assert np.sin(behind) == pytest.approx(layback / radius, abs=1e-4)


def test_a_reversal_and_no_layback():
    psi = position.pursuit_curve(
        np.array([0.0, 0.0, 5.0]), np.array([10.0, -10.0, 0.0]), np.array([0.0, 0.0, 0.0]), 0.0
    )
    np.testing.assert_allclose(_turn(psi - np.array([0, 0, np.pi, np.pi / 2])), 0, atol=1e-9)


@pytest.mark.parametrize(("lat", "lon"), [(0.0, 179.9999), (45.0, -180.0), (-89.9, 10.0), (89.99, 0.0), (60.0, 0.0)])
def test_moving_a_layback_agrees_with_geodesics(lat, lon):
    azimuth = np.linspace(-180, 180, 73)
    away = np.full(73, 3000.0)
    moved = geodesy.to_degrees(geodesy.move(np.full(73, lat), np.full(73, lon), away, np.radians(azimuth)))
    true_lon, true_lat, _ = GEOD.fwd(np.full(73, lon), np.full(73, lat), azimuth, away)
    _, _, off = GEOD.inv(moved[1], moved[0], true_lon, true_lat)
    assert np.max(off) < 0.01
    assert (moved[1] >= -180).all()
    assert (moved[1] < 180).all()


def test_vectors_and_degrees_are_inverse():
    lat, lon = RNG.uniform(-90, 90, 1000), RNG.uniform(-180, 180, 1000)
    back = geodesy.to_degrees(geodesy.to_vectors(lat, lon))
    np.testing.assert_allclose(back[0], lat, rtol=0, atol=1e-11)
    np.testing.assert_allclose(back[1], lon, rtol=0, atol=1e-9)


def _settings(**change):
    base = {
        "antenna_to_tow_point": AntennaToTowPoint(forward_m=-40.0, starboard_m=3.0),
        "layback": Layback(cable_out_m=200.0),
        "smoothing_s": 0.0,
    }
    return Position(**(base | change))


def _sail(azimuths, *, lat=44.0, lon=0.0, speed=5.0, every=1.0):
    lats, lons = [lat], [lon]
    for azimuth in azimuths:
        east, north, _ = GEOD.fwd(lons[-1], lats[-1], azimuth, speed * every)
        lats.append(north)
        lons.append(east)
    time = START + (np.arange(len(lats)) * every * 1e9).astype(np.int64).astype("timedelta64[ns]")
    navigation = pd.DataFrame({"time_utc": time, "latitude_deg": lats, "longitude_deg": lons})
    gyro = pd.DataFrame({"time_utc": time, "heading_deg": np.append(azimuths, azimuths[-1]) % 360})
    return navigation, gyro


def _locate(navigation, gyro, settings, time=None, cable=200.0, depth=10.0):
    time = navigation["time_utc"].to_numpy() if time is None else time
    steady = cable if callable(cable) else lambda instants: np.full(len(instants), cable)
    return position.locate_sensor(time, np.full(len(time), depth), navigation, gyro, steady, settings=settings)


@pytest.mark.parametrize("model", ["pursuit", "same_track", "astern"])
@pytest.mark.parametrize(
    ("lat", "lon", "azimuth"), [(44.0, 0.0, 30.0), (10.0, 179.99, 90.0), (-70.0, -179.99, 270.0), (0.0, 20.0, 0.0)]
)
def test_on_a_straight_line_all_models_put_the_sensor_behind_the_ship(model, lat, lon, azimuth):
    navigation, gyro = _sail(np.full(900, azimuth), lat=lat, lon=lon)
    table, _ = _locate(navigation, gyro, _settings(layback=Layback(model=model, cable_out_m=200.0)))
    # antenna to tow point 40 m astern and 3 m to starboard, then sqrt(200^2 - 10^2) m of layback
    tow_lon, tow_lat, _ = GEOD.fwd(
        navigation["longitude_deg"][900], navigation["latitude_deg"][900], azimuth + 180, 40.0
    )
    tow_lon, tow_lat, _ = GEOD.fwd(tow_lon, tow_lat, azimuth + 90, 3.0)
    true_lon, true_lat, _ = GEOD.fwd(tow_lon, tow_lat, azimuth + 180, np.sqrt(200**2 - 10**2))
    _, _, off = GEOD.inv(table["sensor_longitude_deg"][900], table["sensor_latitude_deg"][900], true_lon, true_lat)
    assert off < 0.02
    assert table["layback_m"][900] == pytest.approx(199.75, abs=0.01)
    assert _turn(np.radians(table["tow_direction_deg"][900] - azimuth)) < 1e-3


def test_model_none_leaves_the_sensor_at_the_antenna():
    navigation, gyro = _sail(np.full(100, 30.0))
    table, _ = _locate(navigation, gyro, _settings(layback=Layback(model="none")))
    np.testing.assert_allclose(table["sensor_latitude_deg"], navigation["latitude_deg"], rtol=0, atol=1e-8)


def test_the_tow_point_follows_the_gyro_not_the_course():
    navigation, gyro = _sail(np.full(600, 0.0))
    crabbing = gyro.assign(heading_deg=350.0)  # 10 degrees of leeway
    off = []
    for headings in (gyro, crabbing):
        table, _ = _locate(navigation, headings, _settings())
        off.append(table["sensor_longitude_deg"][600])
    metres = (off[1] - off[0]) * 111_320 * np.cos(np.radians(44.0))
    # the stern swings by 40 sin 10 to starboard, the starboard arm by 3 (cos 10 - 1); the towed sensor follows in full
    assert metres == pytest.approx(40 * np.sin(np.radians(10)) + 3 * (np.cos(np.radians(10)) - 1), abs=0.1)


def test_without_a_gyro_the_course_stands_and_is_flagged():
    navigation, gyro = _sail(np.full(600, 30.0))
    table, _ = _locate(navigation, gyro[:0], _settings())
    assert _has(table, Flag.COURSE_FOR_HEADING).all()
    with_gyro, _ = _locate(navigation, gyro, _settings())
    assert not _has(with_gyro, Flag.COURSE_FOR_HEADING).any()
    np.testing.assert_allclose(table["sensor_latitude_deg"], with_gyro["sensor_latitude_deg"], rtol=0, atol=1e-7)


def test_headings_are_averaged_through_north():
    navigation, gyro = _sail(np.full(600, 0.0))
    wobbling = gyro.assign(heading_deg=np.where(np.arange(601) % 2, 359.0, 1.0))
    table, _ = _locate(navigation, wobbling, _settings())
    assert np.abs((table["ship_heading_deg"] + 180) % 360 - 180).max() <= 1.0


def test_settling_is_flagged_until_the_first_direction_is_forgotten():
    navigation, gyro = _sail(np.full(600, 30.0))
    table, _ = _locate(navigation, gyro, _settings())
    settling = _has(table, Flag.SETTLING)
    last = int(np.flatnonzero(settling)[-1])
    assert settling[: last + 1].all()
    assert last * 5.0 == pytest.approx(-np.log(0.05) * 199.75, abs=6.0)


def test_gaps_are_bridged_up_to_the_setting():
    navigation, gyro = _sail(np.full(1200, 30.0))
    seconds = np.arange(1201)
    holed = navigation[~((seconds > 300) & (seconds < 360)) & ~((seconds > 600) & (seconds < 900))].reset_index(
        drop=True
    )
    table, counts = _locate(holed, gyro, _settings(longest_gap_s=120.0), time=navigation["time_utc"].to_numpy())
    missing = table["sensor_latitude_deg"].isna().to_numpy()
    assert not missing[:600].any()
    assert missing[601:900].all()
    assert _has(table, Flag.NO_NAVIGATION)[missing].all()
    assert counts["runs"] == 2


@pytest.mark.parametrize("bad", [[0], [300], [300, 301, 302], [600], [100, 400, 401]])
def test_impossible_fixes_are_gated(bad):
    navigation, gyro = _sail(np.full(600, 30.0))
    wild = navigation.copy()
    wild.loc[bad, "latitude_deg"] += 0.05
    table, counts = _locate(wild, gyro, _settings())
    clean, _ = _locate(navigation, gyro, _settings())
    assert counts["gated"] == len(bad)
    inner = slice(5, 595)
    np.testing.assert_allclose(
        table["sensor_latitude_deg"][inner], clean["sensor_latitude_deg"][inner], rtol=0, atol=2e-7
    )


def test_smoothing_keeps_a_turn_and_takes_the_jitter():
    """A turn of 900 m radius at 5 m/s is narrowed by u^2 / 2 of its radius, u = (sigma w)^2 / 2: 5 mm at 15 s."""
    w, sigma = 5.0 / 900.0, 15.0
    t = np.arange(0, 2000.0)
    circle = 900.0 * np.stack([np.sin(w * t), np.cos(w * t)])
    radius = np.hypot(*smooth(circle, sigma))[200:-200]
    assert 900.0 - radius.mean() == pytest.approx(900.0 * ((sigma * w) ** 2 / 2) ** 2 / 2, rel=0.05)
    noise = smooth(RNG.normal(0, 1, (1, 200_000)), sigma)
    assert noise.std() == pytest.approx(np.sqrt(0.476 / sigma), rel=0.03)


def test_jitter_of_the_navigation_is_tamed_at_the_sensor():
    """Unsmoothed, jitter along the track passes to the sensor whole, and some of that across it."""
    navigation, gyro = _sail(np.full(4000, 30.0))
    clean, _ = _locate(navigation, gyro, _settings())
    metres = np.stack([np.full(4001, 1 / 111_200), np.full(4001, 1 / (111_320 * np.cos(np.radians(44.3))))])
    jitter = RNG.normal(0, 1, (2, 4001)) * metres
    noisy = navigation.assign(
        latitude_deg=navigation["latitude_deg"] + jitter[0], longitude_deg=navigation["longitude_deg"] + jitter[1]
    )
    rms = []
    for smoothing in (0.0, 30.0):
        table, _ = _locate(noisy, gyro, _settings(smoothing_s=smoothing))
        off = (
            np.stack([table[f"sensor_{p}_deg"] - clean[f"sensor_{p}_deg"] for p in ("latitude", "longitude")]) / metres
        )
        rms.append(np.sqrt((off[:, 500:-500] ** 2).sum(axis=0).mean()))
    assert 0.9 < rms[0] < 2.0
    assert rms[1] < 0.25


def test_cable_log_holds_until_its_next_row():
    log = np.array(["2024-05-01T00:05:00", "2024-05-01T00:10:00"], "datetime64[ns]")
    at = START + np.array([0, 299, 300, 599, 600, 9000]) * np.timedelta64(1, "s")
    out = position.cable_out(at, log, np.array([200.0, 260.0]))
    assert np.isnan(out[:2]).all()
    assert out[2:].tolist() == [200, 200, 260, 260]


def test_before_the_first_row_of_the_cable_log_there_is_no_position():
    navigation, gyro = _sail(np.full(900, 30.0))
    log = np.array(["2024-05-01T00:05:00", "2024-05-01T00:10:00"], "datetime64[ns]")
    table, _ = _locate(
        navigation, gyro, _settings(), cable=lambda at: position.cable_out(at, log, np.array([200.0, 260.0]))
    )
    missing = table["sensor_latitude_deg"].isna().to_numpy()
    assert missing[:300].all()
    assert not missing[300:].any()
    assert _has(table, Flag.NO_CABLE)[:300].all()
    assert table["layback_m"][899] == pytest.approx(np.sqrt(260**2 - 100), abs=1e-6)


def test_mistakes_in_a_cable_log_are_told_together():
    times = pd.to_datetime(["2024-05-01T03:14:06", "2024-05-01T03:14:05", "2024-05-02T00:00:00"])
    log = pd.DataFrame({"time_utc": times, "cable_out_m": [200.0, 210.0, -4.0], "row": [2, 3, 4]})
    with pytest.raises(
        SurveyError, match="cable.csv row 3, time_utc: must increase. Got 2024-05-01 03:14:05 after"
    ) as caught:
        position.check_cable(log, "cable.csv")
    assert "row 4, cable_out_m: must be between 0 and 5000 m. Got -4" in str(caught.value)


def test_sparse_navigation_of_old_surveys_is_followed():
    navigation, gyro = _sail(np.repeat([30.0, 120.0], 40), every=60.0)
    table, _ = _locate(navigation, gyro[:0], _settings(longest_gap_s=1800.0, layback=Layback(model="none")))
    np.testing.assert_allclose(table["sensor_latitude_deg"], navigation["latitude_deg"], rtol=0, atol=5e-4)
