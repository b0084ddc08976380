"""Main field: against IAGA's and other published values, two independent packages, and the exact sum."""

import json
import subprocess
import sys
import tracemalloc
from datetime import UTC, datetime

import numpy as np
import pandas as pd
import ppigrf
import pyIGRF14
import pyIGRF14.loadCoeffs
import pytest
from conftest import ROOT

from steps import columns, main_field

# IAGA Working Group V-MOD, test values of its Python package (C. Beggan, British Geological Survey; MIT licence):
# year, geocentric colatitude and longitude (degrees), radius (km), X, Y, Z (nT, geocentric, printed to 0.01).
IAGA = [
    (1900, 175, -150, 6300, -5072.93, 10620.34, -67233.55),
    (1915, 155, -120, 6350, 14692.62, 12387.97, -59640.81),
    (1930, 135, -90, 6400, 23925.47, 10358.94, -30640.98),
    (1945, 115, -60, 6450, 23642.86, -200.29, -7607.92),
    (1960, 95, -30, 6500, 23647.00, -9302.27, -3610.73),
    (1975, 75, 0, 6550, 30050.59, -3367.82, 6332.69),
    (1990, 55, 30, 6600, 25224.81, 1058.25, 30965.61),
    (2005, 35, 60, 6650, 14718.37, 2842.99, 46050.88),
    (2010, 170, 0, 6371, 17529.48, -7143.78, -42722.46),
    (2020, 15, 90, 6700, 3734.07, 1294.17, 50833.13),
    (2025, 56, -3, 6375, 28927.56, 261.98, 30910.08),
    (2030, 45, -5, 6375, 22959.82, 224.80, 40764.14),
]

# British Geological Survey, IGRF-14 web calculator as recorded 2026-09-24; a date there means its middle:
# date, geodetic latitude, longitude, height (km), F, X, Y, Z (whole nT).
CALCULATOR = [
    ("1900-01-01", 51.5, -0.1, 0.0, 47384, 17697, -5242, 43642),
    ("1903-01-01", 40.0, -75.0, 0.0, 60030, 19008, -2504, 56886),
    ("1911-07-01", -33.9, 18.4, 0.0, 35320, 15286, -7953, -30831),
    ("1918-01-01", 35.7, 139.7, 0.0, 45729, 29868, -2669, 34524),
    ("1925-01-01", -34.6, -58.4, 0.0, 27536, 24125, 1515, -13188),
    ("1932-01-01", 61.2, -149.9, 0.0, 55996, 13461, 7011, 53900),
    ("1940-01-01", 64.1, -21.9, 0.0, 51042, 10759, -5782, 49559),
    ("1947-01-01", 21.3, -157.9, 0.0, 36603, 27901, 5544, 23034),
    ("1953-07-01", 1.3, 103.8, 0.0, 41721, 39648, 573, -12975),
    ("1962-01-01", 78.2, 15.6, 0.0, 53731, 7908, -111, 53146),
    ("1968-01-01", -77.8, 166.7, 0.0, 65325, -7054, 5101, -64743),
    ("1975-01-01", 19.1, 72.9, 0.0, 42331, 38513, -995, 17539),
    ("1983-07-01", 55.8, 37.6, 0.0, 51510, 16759, 2425, 48647),
    ("1991-01-01", -12.0, -77.0, 0.0, 26847, 26821, 974, 659),
    ("1997-01-01", -1.3, 36.8, 1.7, 33524, 30263, -99, -14421),
    ("1998-07-01", 45.0, -63.0, 0.0, 53535, 17931, -6609, 50008),
    ("2004-01-01", -45.0, 170.0, 0.0, 59182, 18297, 8130, -55692),
    ("2008-07-01", 70.0, -100.0, 0.0, 58772, 3523, -53, 58666),
    ("2013-01-01", 30.0, -90.0, 0.0, 47768, 24190, -144, 41190),
    ("2017-01-01", -60.0, -60.0, 0.0, 33813, 19460, 3458, -27435),
    ("2019-07-01", 48.9, 2.35, 0.0, 48189, 20850, 339, 43443),
    ("2022-07-01", 39.95, -75.17, 0.0, 50992, 20611, -4356, 46437),
    ("2024-12-31", -20.0, 57.5, 0.0, 39725, 22682, -7360, -31772),
    ("2027-01-01", 10.0, -30.0, 10.0, 30191, 29491, -6458, -265),
    ("2029-12-31", 85.0, 120.0, 0.0, 58043, -163, 302, 58042),
]

# NOAA, sample output of Geomag 7.0 (IGRF-13, whose 2015 field is the same definitive one) for the day after
# 2015-01-01: geodetic latitude, longitude, height (m), F, X, Y, Z (0.1 nT).
SAMPLE_2015 = [
    (43.36694444444444, -54.6025, 9144.0, 49315.4, 20542.9, -6513.5, 44357.4),
    (0.0, 0.0, 0.0, 31862.2, 27548.0, -2622.4, -15793.3),
]


def everywhere(n, seed, height=(-6000.0, 3000.0), years=(1900.0, 2030.0)):
    rng = np.random.default_rng(seed)
    lat = np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
    return lat, rng.uniform(-180, 180, n), rng.uniform(*height, n), rng.uniform(*years, n)


# -- coefficients and dates ------------------------------------------------------------------------------------------


def test_coefficients_are_those_of_two_independent_packages():
    epochs, values = main_field.coefficients()
    assert values.shape == (27, 14, 14, 2)
    g, h = ppigrf.ppigrf.read_shc()
    for (n, m), column in g.items():
        np.testing.assert_array_equal(values[:, n, m, 0], column.to_numpy())
    for (n, m), column in h.items():
        if m:
            np.testing.assert_array_equal(values[:, n, m, 1], column.to_numpy())
    for epoch, own in zip(epochs, values, strict=True):
        g, h = pyIGRF14.loadCoeffs.get_coeffs(epoch)
        for n in range(1, len(g)):
            theirs = np.array(g[n], float), np.array([0.0, *h[n][1:]], float)
            np.testing.assert_allclose(own[n, : n + 1].T, theirs, rtol=0, atol=1e-9)
        assert not own[len(g) :].any()  # before 1995 that package has degree 10 only


def test_decimal_year_counts_days_of_the_year_at_hand():
    """By hand: 2 July is the 184th day of 366 in a leap year, and noon of 2 July the middle of one of 365 days."""
    times = np.array(["2024-07-02", "2023-07-02T12:00", "2024-01-01", "1900-07-02T12:00"], "datetime64[ns]")
    np.testing.assert_array_equal(main_field.decimal_year(times), [2024.5, 2023.5, 2024.0, 1900.5])


def test_decimal_year_agrees_with_the_calendar_of_the_standard_library():
    rng = np.random.default_rng(5)
    seconds = rng.integers(-2_208_988_800, 1_893_456_000, 500)  # 1900 to 2030
    expected = []
    for s in seconds:
        t = datetime.fromtimestamp(int(s), UTC)
        start, end = datetime(t.year, 1, 1, tzinfo=UTC), datetime(t.year + 1, 1, 1, tzinfo=UTC)
        expected.append(t.year + (t - start) / (end - start))
    times = seconds.astype("datetime64[s]")
    np.testing.assert_allclose(main_field.decimal_year(times), expected, rtol=0, atol=1e-12)
    for one, value in zip(times[:20], expected, strict=False):
        assert main_field.decimal_year(np.array([one]))[0] == pytest.approx(value, abs=1e-12)


def test_a_missing_time_is_refused():
    with pytest.raises(ValueError, match="times must be known"):
        main_field.decimal_year(np.array(["2024-01-01", "NaT"], "datetime64[ns]"))


# -- the exact sum ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("row", IAGA, ids=lambda row: str(row[0]))
def test_iaga_values(row):
    year, colatitude, lon, radius, *expected = row
    np.testing.assert_allclose(
        main_field.field_vector_geocentric(colatitude, lon, radius, year), expected, rtol=0, atol=0.01
    )


def test_calculator_values():
    """Whole nT: 0.5 by rounding, and 0.1 for what the two may differ in the middle of a day."""
    day, lat, lon, height, *expected = zip(*CALCULATOR, strict=True)
    year = main_field.decimal_year(np.array(day, "datetime64[ns]") + np.timedelta64(12, "h"))
    place = np.array(lat), np.array(lon), 1000 * np.array(height), year
    got = [main_field.total_field(*place), *main_field.field_vector(*place)]
    np.testing.assert_allclose(got, expected, rtol=0, atol=0.6)


def test_sample_output_of_2015():
    lat, lon, height, *expected = zip(*SAMPLE_2015, strict=True)
    place = np.array(lat), np.array(lon), np.array(height), 2015 + 1 / 365
    got = [main_field.total_field(*place), *main_field.field_vector(*place)]
    np.testing.assert_allclose(got, expected, rtol=0, atol=0.06)


def test_pyigrf14_on_random_points():
    """pyIGRF14 rounds the square of the polar axis to 40408296.0 km2 (0.0092 nT at most at sea level)."""
    lat, lon, height, year = everywhere(300, 1)
    theirs = np.array([pyIGRF14.igrf_value(*p) for p in zip(lat, lon, height / 1000, year, strict=True)])
    got = main_field.field_vector(lat, lon, height, year)
    np.testing.assert_allclose(got, theirs[:, 3:6].T, rtol=0, atol=0.02)
    np.testing.assert_allclose(main_field.total_field(lat, lon, height, year), theirs[:, 6], rtol=0, atol=0.012)
    inclination, declination = main_field.inclination_declination(lat, lon, height, year)
    np.testing.assert_allclose(inclination, theirs[:, 1], rtol=0, atol=1e-4)
    assert np.abs((declination - theirs[:, 0] + 180) % 360 - 180).max() < 0.01


@pytest.mark.parametrize("year", [1900, 1955, 1990, 2005, 2020, 2025])
def test_ppigrf_at_the_epochs(year):
    """At an epoch the two conventions of interpolation in time are one.

    It turns geocentric to geodetic components by an angle for which it takes its sine: 0.0004 nT, not in the total.
    """
    lat, lon, height, _ = everywhere(200, year)
    theirs = np.array(ppigrf.igrf(lon, lat, height / 1000, datetime(year, 1, 1)))[:, 0]
    north, east, down = main_field.field_vector(lat, lon, height, float(year))
    np.testing.assert_allclose([east, north, -down], theirs, rtol=0, atol=6e-4)
    total = np.sqrt((theirs**2).sum(0))
    np.testing.assert_allclose(main_field.total_field(lat, lon, height, float(year)), total, rtol=0, atol=1e-6)
    south = np.array(ppigrf.igrf_gc(6371.2 + height / 1000, 90 - lat, lon, datetime(year, 1, 1)))[:, 0]
    north, east, down = main_field.field_vector_geocentric(90 - lat, lon, 6371.2 + height / 1000, float(year))
    np.testing.assert_allclose([-down, -north, east], south, rtol=0, atol=1e-6)


def test_ppigrf_between_the_epochs():
    """It interpolates in days, not in decimal years: up to 0.19 nT apart where the interval has a leap day."""
    lat, lon, height, _ = everywhere(100, 3)
    for date in (datetime(1943, 3, 5), datetime(2003, 12, 30), datetime(2024, 6, 12), datetime(2028, 2, 29)):
        theirs = np.sqrt((np.array(ppigrf.igrf(lon, lat, height / 1000, date)) ** 2).sum(0))[0]
        year = main_field.decimal_year(np.array([date], "datetime64[ns]"))
        np.testing.assert_allclose(main_field.total_field(lat, lon, height, year), theirs, rtol=0, atol=0.3)


def test_the_poles_are_like_their_neighbourhood():
    """The field is continuous: at a pole the total field is that of a point 1 m away, on every meridian."""
    lon = np.arange(-180.0, 180.0, 30.0)
    for pole in (90.0, -90.0):
        at_pole = main_field.total_field(pole, lon, -20.0, 2024.4)
        assert np.ptp(at_pole) < 1e-6
        near = main_field.total_field(pole * (1 - 1e-7), lon, -20.0, 2024.4)
        np.testing.assert_allclose(near, at_pole, rtol=0, atol=0.02)
        north, east, _ = main_field.field_vector(pole, lon, -20.0, 2024.4)
        close = main_field.field_vector(pole * (1 - 1e-9), lon, -20.0, 2024.4)
        np.testing.assert_allclose([north, east], close[:2], rtol=0, atol=0.01)


def test_any_shape_of_input_is_broadcast():
    lat, lon = np.meshgrid([10.0, 20.0], [-30.0, 0.0, 30.0])
    for function in (main_field.total_field, main_field.total_field_along):
        grid = function(lat, lon, 0.0, 2024.0)
        assert grid.shape == (3, 2)
        assert grid[2, 1] == pytest.approx(float(function(20.0, 30.0, 0.0, 2024.0)), abs=1e-9)
        assert function([], [], [], []).shape == (0,)


def test_the_gradient_with_depth_is_that_of_the_handbooks():
    """Vertical gradient of F between -0.034 and -0.008 nT/m over the globe (3 F / r of a dipole: common practice)."""
    lat, lon, _, year = everywhere(2000, 4, years=(2020.0, 2030.0))
    surface = main_field.total_field(lat, lon, 0.0, year)
    gradient = (main_field.total_field(lat, lon, 10.0, year) - surface) / 10
    dipole = -3 * surface / 6.3712e6
    assert gradient.max() < 0
    assert np.median(np.abs(gradient / dipole - 1)) < 0.1


# -- the interpolation -----------------------------------------------------------------------------------------------


def tracks(kind, n=60_000, seed=0):
    """Make positions, heights and dates of a kind that has its own difficulty."""
    rng = np.random.default_rng(seed)
    s = np.linspace(0, 1, n)
    lat, lon = 20 + 6 * s, -30 + 9 * s
    height, year = -12 + 3 * np.sin(40 * s), 2024.3 + 0.05 * s
    if kind == "weaving":
        lat, lon = lat + 0.3 * np.sin(300 * s), lon + 0.3 * np.cos(211 * s)
    elif kind == "jittering":
        lat, lon = lat + rng.normal(0, 1e-3, n), lon + rng.normal(0, 1e-3, n)
    elif kind == "along a block's edge":
        lat, lon = 45 + rng.normal(0, 1e-4, n), lon
    elif kind == "across 180 degrees":
        lon = (176 + 9 * s + 180) % 360 - 180
    elif kind == "0 to 360":
        lon = lon % 360
    elif kind == "past the north pole":
        lat, lon = 90 - np.abs(4 * (s - 0.5)), np.where(s < 0.5, 12.0, -168.0) + 3 * np.sin(50 * s)
    elif kind == "round the south pole":
        lat, lon = -89.95 + 0.04 * np.sin(70 * s), 360 * ((11 * s) % 1) - 180
    elif kind == "across an epoch":
        year = 2019.9 + 0.2 * s
    elif kind == "years":
        lat, lon, year = 50 + 0.5 * np.sin(200 * s), 3 * np.cos(170 * s), 1899.9999999 + 1e-7 + 130 * s
    elif kind == "from the surface to the deep":
        height = -5900 * np.abs(np.sin(40 * s)) + 60
    elif kind == "a region, in no order":
        lat, lon = rng.uniform(-14, -8, n), rng.uniform(12, 18, n)
        height, year = rng.uniform(-300, 300, n), rng.uniform(2011, 2024, n)
    elif kind == "the globe, in no order":
        lat, lon, height, year = everywhere(n, seed)
    elif kind == "random walks":
        walk = np.cumsum(rng.normal(0, 1, (2, 20, n // 20)), axis=2) * 0.005
        lat = np.clip(rng.uniform(-80, 80, (20, 1)) + walk[0], -90, 90).ravel()
        lon = ((rng.uniform(-180, 180, (20, 1)) + walk[1] + 180) % 360 - 180).ravel()
        height = rng.uniform(-3000, 90, (20, 1)) + rng.normal(0, 20, (20, n // 20))
        height, year = height.ravel(), np.repeat(rng.uniform(1900, 2029, 20), n // 20) + 0.1 * s
    return lat, lon, height, year


KINDS = [
    "straight",
    "weaving",
    "jittering",
    "along a block's edge",
    "across 180 degrees",
    "0 to 360",
    "past the north pole",
    "round the south pole",
    "across an epoch",
    "years",
    "from the surface to the deep",
    "a region, in no order",
    "the globe, in no order",
    "random walks",
]


@pytest.mark.parametrize("kind", KINDS)
def test_blocks_keep_their_bound(kind):
    """The stated bound is 0.001 nT for blocks of one degree, half of what the settings allow by default."""
    place = tracks(kind)
    kept = [part.copy() for part in place]
    exact = main_field.total_field(*place)
    assert np.abs(main_field.total_field_along(*place) - exact).max() < 0.001
    for part, before in zip(place, kept, strict=True):
        np.testing.assert_array_equal(part, before)


@pytest.mark.parametrize(("tolerance", "at_least"), [(0.001, 2e-5), (0.01, 0.001), (1.0, 0.001), (0.0005, 0.0)])
def test_a_tolerance_is_kept_and_used(tolerance, at_least):
    """Most curved blocks of the globe, at all epochs; a larger tolerance does buy larger blocks."""
    worst = 0.0
    rng = np.random.default_rng(8)
    for lat, lon in [(-10.7, 15.3), (-11.5, 16.5), (80.2, 105.7), (83.3, 107.1), (85.9, 142.0), (60.1, 100.2)]:
        n = 4000
        place = lat + rng.uniform(-2, 2, n), lon + rng.uniform(-4, 4, n), rng.uniform(-120, 120, n)
        for year in (1900.0, 1962.5, 2004.9, 2029.999):
            along = main_field.total_field_along(*place, year, tolerance_nt=tolerance)
            worst = max(worst, np.abs(along - main_field.total_field(*place, year)).max())
    assert at_least <= worst < tolerance


@pytest.mark.slow
def test_no_block_of_the_globe_breaks_the_bound():
    """Points of every one-degree block between the poles, at random heights and dates, summed exactly beside."""
    rng = np.random.default_rng(9)
    worst = 0.0
    for south in range(-90, 90):
        west = np.arange(-180, 180)
        lat = south + rng.uniform(0, 1, (360, 64))
        lon = west[:, None] + rng.uniform(0, 1, (360, 64))
        height, year = (
            rng.uniform(-125, 125, (360, 64)),
            5 * rng.integers(380, 406, (360, 1)) + rng.uniform(0, 5, (360, 64)),
        )
        along = main_field.total_field_along(lat, lon, height, year)
        worst = max(worst, np.abs(along - main_field.total_field(lat, lon, height, year)).max())
    assert 1e-4 < worst < 0.001


def test_values_do_not_depend_on_how_the_points_are_cut():
    """Pieces of a track give what the whole gives: to rounding where blocks are full, else within the bound."""
    place = tracks("weaving", 50_000)
    whole = main_field.total_field_along(*place)
    np.testing.assert_array_equal(main_field.total_field_along(*place), whole)
    cuts = [slice(a, b) for a, b in zip([0, 8192, 20_011, 33_333], [8192, 20_011, 33_333, 50_000], strict=True)]
    pieces = np.concatenate([main_field.total_field_along(*(part[cut] for part in place)) for cut in cuts])
    assert np.abs(pieces - whole).max() < 0.001
    assert np.mean(np.abs(pieces - whole) < 1e-8) > 0.99
    order = np.random.default_rng(1).permutation(50_000)
    shuffled = main_field.total_field_along(*(part[order] for part in place))
    np.testing.assert_allclose(shuffled, whole[order], rtol=0, atol=1e-8)


def test_more_points_than_are_worked_on_together():
    """A long track is cut inside; where it is cut nothing shows."""
    n = main_field.PIECE + 20_000
    place = tracks("straight", n)
    along = main_field.total_field_along(*place)
    near = slice(main_field.PIECE - 2000, main_field.PIECE + 2000)
    exact = main_field.total_field(*(part[near] for part in place))
    assert np.abs(along[near] - exact).max() < 0.001


def test_full_turns_of_longitude_change_nothing():
    lat, lon, height, year = tracks("across 180 degrees")
    own = main_field.total_field_along(lat, lon, height, year)
    np.testing.assert_allclose(main_field.total_field_along(lat, lon % 360, height, year), own, rtol=0, atol=1e-6)
    np.testing.assert_allclose(
        main_field.total_field(lat, lon + 360, height, year),
        main_field.total_field(lat, lon, height, year),
        rtol=0,
        atol=1e-6,
    )


def peak_memory(n) -> int:
    place = tracks("weaving", n)
    tracemalloc.start()
    try:
        main_field.total_field_along(*place)
        return tracemalloc.get_traced_memory()[1] - 8 * n
    finally:
        tracemalloc.stop()


def test_memory_beyond_input_and_output_does_not_grow():
    small, large = peak_memory(main_field.PIECE), peak_memory(4 * main_field.PIECE)
    assert large < 1.2 * small
    assert large < 60e6


# -- what is refused -------------------------------------------------------------------------------------------------

FUNCTIONS = [main_field.total_field, main_field.total_field_along, main_field.field_vector]


@pytest.mark.parametrize("function", FUNCTIONS)
@pytest.mark.parametrize("year", [1899.999, 2030.001, 2035.0])
def test_dates_outside_the_model_are_refused(function, year):
    with pytest.raises(ValueError, match=r"IGRF-14 is valid from 1900.0 to 2030.0, not at"):
        function(np.zeros(3), np.zeros(3), np.zeros(3), np.array([2000.0, year, 2010.0]))


@pytest.mark.parametrize("function", FUNCTIONS)
@pytest.mark.parametrize("which", range(4))
@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_what_is_not_finite_is_refused(function, which, bad):
    place = [np.full(5, 10.0), np.full(5, 10.0), np.zeros(5), np.full(5, 2020.0)]
    place[which][3] = bad
    with pytest.raises(ValueError, match="must be finite"):
        function(*place)


@pytest.mark.parametrize("function", FUNCTIONS)
def test_latitudes_beyond_a_pole_are_refused(function):
    with pytest.raises(ValueError, match="latitudes must be between -90 and 90 degrees, not 90.5"):
        function([90.5], [0.0], [0.0], [2020.0])


def test_a_date_or_place_is_refused_in_geocentric_form_too():
    with pytest.raises(ValueError, match="IGRF-14 is valid"):
        main_field.field_vector_geocentric(45.0, 0.0, 6371.2, 2031.0)
    with pytest.raises(ValueError, match="must be finite"):
        main_field.field_vector_geocentric(np.nan, 0.0, 6371.2, 2020.0)


def test_heights_that_blocks_do_not_reach_are_refused():
    with pytest.raises(ValueError, match="heights must be within 12 km of the ellipsoid"):
        main_field.total_field_along([0.0], [0.0], [400e3], [2020.0])
    assert main_field.total_field(0.0, 0.0, 400e3, 2020.0) < main_field.total_field(0.0, 0.0, 0.0, 2020.0)


# -- the stage -------------------------------------------------------------------------------------------------------


def run_stage(folder, time, position, settings=None):
    n = len(time)
    readings = {name: np.full(n, np.nan) for name in columns.TABLES["readings"]}
    readings |= {"reading": np.arange(n), "time_utc": time, "source_file": np.zeros(n), "source_row": 2 + np.arange(n)}
    columns.check(pd.DataFrame(readings), "readings").to_parquet(folder / "readings.parquet")
    table = {name: np.zeros(n) for name in columns.TABLES["position"]} | position
    columns.check(pd.DataFrame(table), "position").to_parquet(folder / "position.parquet")
    command = [sys.executable, "-m", "steps.main_field"]
    command += ["--readings", str(folder / "readings.parquet"), "--position", str(folder / "position.parquet")]
    command += ["--write", str(folder / "main_field.parquet"), str(folder / "main_field_record.json")]
    command += ["--options", json.dumps({"settings": settings or {}})]
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True)


def test_the_stage_places_the_sensor_below_the_sea_surface_of_the_survey(tmp_path):
    lat, lon, _, _ = tracks("straight", 500)
    depth = np.linspace(5, 30, 500)
    lat[7], lon[7], depth[11] = np.nan, np.nan, np.nan
    time = np.datetime64("2024-06-10T04:00", "ns") + np.arange(500) * np.timedelta64(1, "s")
    position = {"sensor_latitude_deg": lat, "sensor_longitude_deg": lon, "sensor_depth_m": depth}
    done = run_stage(tmp_path, time, position, {"sea_surface_height_m": 52.0})
    assert done.returncode == 0, done.stderr
    field = pd.read_parquet(tmp_path / "main_field.parquet")["main_field_nt"].to_numpy()
    record = json.loads((tmp_path / "main_field_record.json").read_text())
    known = np.arange(500) != 7
    height = 52.0 - np.where(np.isnan(depth), 0.0, depth)
    year = main_field.decimal_year(time)
    exact = main_field.total_field(lat[known], lon[known], height[known], year[known])
    assert np.isnan(field[7])
    np.testing.assert_allclose(field[known], exact, rtol=0, atol=0.002)
    assert (record["readings"], record["without_position"], record["without_depth"]) == (499, 1, 1)
    assert "1 readings have a position but no sensor depth" in record["notes"][0]


def test_the_stage_names_the_row_of_a_date_outside_the_model(tmp_path):
    time = np.array(["2029-12-31T23:59:59", "2030-01-02T00:00:00", "2031-01-01T00:00:00"], "datetime64[ns]")
    position = {f"sensor_{part}_deg": np.ones(3) for part in ("latitude", "longitude")}
    done = run_stage(tmp_path, time, position)
    assert done.returncode == 1
    assert done.stderr.splitlines() == [
        "magnetometer file, row 3, time: must lie between 1900-01-01 and 2030-01-01, where IGRF-14 is valid. "
        "Got 2030-01-02T00:00:00, and 1 more readings. "
        "Look at ingest.readings.time.layout and ingest.readings.clock."
    ]
    assert not (tmp_path / "main_field.parquet").exists()


def test_a_survey_without_positions_has_no_main_field(tmp_path):
    position = {f"sensor_{part}_deg": np.full(4, np.nan) for part in ("latitude", "longitude")}
    time = np.datetime64("2024-06-10", "ns") + np.arange(4) * np.timedelta64(1, "s")
    done = run_stage(tmp_path, time, position)
    assert done.returncode == 0, done.stderr
    assert pd.read_parquet(tmp_path / "main_field.parquet")["main_field_nt"].isna().all()
    assert "no reading has a position" in done.stdout
