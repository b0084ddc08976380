"""Crossings: places against shapely and pyproj, values against known fields, sigmas against their own scatter."""

import json
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
import shapely
from conftest import ROOT
from hypothesis import given, settings
from hypothesis import strategies as st
from pyproj import Geod

from steps import columns, crossovers, intersections
from steps.columns import Flag
from steps.interpolation import values_at
from steps.intersections import find_crossings

GEOD = Geod(ellps="WGS84")
PLACES = [(0.0, 0.0), (44.0, 180.0), (-60.0, -179.9999), (89.5, 20.0), (-89.9999, 70.0)]


# -- places ----------------------------------------------------------------------------------------------------------


def from_plane(x, y, lat_0, lon_0):
    """Undo a spherical gnomonic projection (Snyder 1987, USGS Prof. Paper 1395): straight lines are great circles."""
    phi = np.radians(lat_0)
    level = np.cos(phi) - y * np.sin(phi)
    lat = np.degrees(np.arctan2(np.sin(phi) + y * np.cos(phi), np.hypot(level, x)))
    return lat, (lon_0 + np.degrees(np.arctan2(x, level)) + 180.0) % 360.0 - 180.0


def to_plane(lat, lon, lat_0, lon_0):
    phi, phi_0, turn = np.radians(lat), np.radians(lat_0), np.radians(lon - lon_0)
    cosine = np.sin(phi_0) * np.sin(phi) + np.cos(phi_0) * np.cos(phi) * np.cos(turn)
    return (
        np.cos(phi) * np.sin(turn) / cosine,
        (np.cos(phi_0) * np.sin(phi) - np.sin(phi_0) * np.cos(phi) * np.cos(turn)) / cosine,
    )


def polylines(seed, kind):
    """Make tracks in a plane, unit: the Earth's radius; `kind` says how often they touch and overlap."""
    rng = np.random.default_rng(seed)
    points, track = [], []
    for k in range(5):
        n = int(rng.integers(2, 45))
        if kind == "walks":
            own = np.cumsum(rng.normal(0, 2e-5, (n, 2)), axis=0)
        elif kind == "scatter":
            own = rng.normal(0, 1e-4, (n, 2))
        elif kind == "grid points":  # through each other's vertices, along each other, exact in binary
            own = rng.integers(0, 6, (n, 2)) * 2.0**-17
        else:
            own = np.cumsum(rng.integers(-1, 2, (n, 2)), axis=0) * 2.0**-13
        own = own[np.append(True, (np.diff(own, axis=0) != 0).any(axis=1))]
        if len(own) > 1:
            points.append(own)
            track.append(np.full(len(own), k))
    return np.concatenate(points), np.concatenate(track)


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("kind", ["walks", "scatter", "grid points", "grid walks"])
def test_crossings_of_two_tracks_are_those_of_shapely(kind, place):
    """Reference: shapely (GEOS) on the lines in a gnomonic plane; only isolated points count, not shared stretches."""
    number = 0
    for seed in range(6):
        points, track = polylines(seed, kind)
        found = find_crossings(*from_plane(*points.T, *place), track)
        other = track[found.i] != track[found.j]
        x, y = to_plane(found.lat[other], found.lon[other], *place)
        a, b = track[found.i[other]], track[found.j[other]]
        lines = {k: shapely.LineString(points[track == k]) for k in np.unique(track)}
        for one in lines:
            for two in (k for k in lines if k > one):
                parts = shapely.get_parts(lines[one].intersection(lines[two]))
                dots = np.array([(p.x, p.y) for p in parts if p.geom_type == "Point"]).reshape(-1, 2)
                shared = shapely.union_all([p for p in parts if p.geom_type != "Point"])
                ours = np.column_stack([x, y])[(a == one) & (b == two)]
                # a pass over a stretch that two other passes share is a crossing of ours, and none of shapely's
                free = np.array([shared.is_empty or shared.distance(shapely.Point(p)) > 1e-12 for p in ours], bool)
                if kind in ("walks", "scatter"):
                    assert len(ours) == len(dots)  # each once
                number += len(dots)
                for some, all_ in ((ours[free], dots), (dots, ours)):
                    if len(some):
                        away = np.linalg.norm(some[:, None] - all_[None], axis=2).min(axis=1)
                        assert away.max() < 1e-12, (seed, one, two)  # 6 micrometres
    assert number > 20


def plane_case(*lines, place=(44.0, 180.0)):
    """Cross lines given by points in metres about a place; return the crossings."""
    points = np.concatenate([np.array(line, float) for line in lines]) / intersections.A_M
    track = np.repeat(np.arange(len(lines)), [len(line) for line in lines])
    return find_crossings(*from_plane(*points.T, *place), track)


@pytest.mark.parametrize("place", PLACES)
def test_each_point_counts_once_where_tracks_touch_or_lie_on_each_other(place):
    across = [(-100, 0), (0, 0), (100, 0)]
    cases = {
        "through a vertex of one": (across, [(0, -50), (0, 50)], 1),
        "through a vertex of both": (across, [(0, -50), (0, 0), (0, 50)], 1),
        "an end on the middle": ([(-100, 0), (100, 0)], [(30, 0), (30, 50)], 1),
        "an end on a vertex": (across, [(0, 0), (30, 50)], 1),
        "end to end, same direction": ([(-100, 0), (0, 0)], [(0, 0), (100, 0)], 1),
        "a vertex touches from one side": (across, [(-20, 30), (20, 0), (60, 30)], 1),
        "parallel, a metre apart": (across, [(-100, 1), (100, 1)], 0),
        "the same line twice": (across, across, 0),
        "the same line, run back": (across, across[::-1], 0),
        "the same bent line twice": ([(-90, 0), (0, 9), (90, 0)], [(-90, 0), (0, 9), (90, 0)], 0),
        "a stretch shared, apart before and after": (
            [(-100, -50), (-50, 0), (50, 0), (100, 50)],
            [(-100, 50), (-50, 0), (50, 0), (100, -50)],
            0,
        ),
        "a stretch shared, then a crossing": (
            [(-50, 0), (50, 0), (100, 50), (150, -10)],
            [(-50, 0), (50, 0), (100, 0), (200, 0)],
            1,
        ),
        "just short of it": (across, [(30, 0.001), (30, 50)], 0),
    }
    for name, (one, two, expected) in cases.items():
        found = plane_case(one, two, place=place)
        assert len(found) == expected, name
        parts = shapely.get_parts(shapely.LineString(one).intersection(shapely.LineString(two)))
        assert sum(part.geom_type == "Point" for part in parts) == expected, name  # shapely says the same


def test_a_vertex_is_the_start_of_the_next_segment_and_the_last_reading_the_end_of_its_own():
    found = plane_case([(-100, 0), (0, 0), (100, 0)], [(0, -50), (0, 0)])
    assert (found.i.tolist(), found.fraction_i.tolist()) == ([1], [0.0])
    assert (found.j.tolist(), found.fraction_j.tolist()) == ([3], [1.0])
    assert found.angle_deg == pytest.approx([90.0])


def test_a_track_crosses_itself_where_shapely_says():
    for seed in range(8):
        points, track = polylines(seed, "walks")
        points = points[track == track.max()]
        found = find_crossings(*from_plane(*points.T, 44.0, 180.0), np.zeros(len(points), int))
        segments = shapely.linestrings(np.stack([points[:-1], points[1:]], axis=1))
        first, second = shapely.STRtree(segments).query(segments, predicate="intersects")
        apart = second - first > 1
        assert sorted(zip(found.i, found.j, strict=True)) == sorted(zip(first[apart], second[apart], strict=True))


def test_standing_still_is_no_crossing():
    still = [(0, 0), (0, 0), (50, 0), (50, 0), (50, 0), (100, 0)]
    assert len(plane_case(still)) == 0
    found = plane_case(still, [(50, -20), (50, 20)])
    assert len(found) == 1
    assert found.i.tolist() == [4]  # the last reading there


@pytest.mark.parametrize(("length_m", "bound_m"), [(25.0, 1e-5), (5e3, 0.01), (10e3, 0.02), (50e3, 0.5)])
def test_the_place_is_that_of_two_geodesics(length_m, bound_m):
    """Reference: pyproj's geodesics (Karney 2013, J. Geodesy 87), shot from a known place, all over the world."""
    rng = np.random.default_rng(7)
    for _ in range(60):
        lat, lon = np.degrees(np.arcsin(rng.uniform(-1, 1))), rng.uniform(-180, 180)
        azimuth = rng.uniform(0, 360, 2)
        azimuth[1] = azimuth[0] + rng.choice([-1, 1]) * rng.uniform(15, 165)
        share = rng.uniform(0.02, 0.98, 2)
        ends = [
            GEOD.fwd(lon, lat, a + turn, length_m * abs(s - back))[:2]
            for a, s in zip(azimuth, share, strict=True)
            for turn, back in ((180, 0), (0, 1))
        ]
        found = find_crossings(*np.array(ends).T[::-1], [0, 0, 1, 1])
        assert len(found) == 1
        assert GEOD.inv(lon, lat, found.lon[0], found.lat[0])[2] < bound_m
        assert found.fraction_i[0] * length_m == pytest.approx(share[0] * length_m, abs=2 * bound_m)
        assert found.angle_deg[0] == pytest.approx(abs((azimuth[1] - azimuth[0] + 90) % 180 - 90), abs=0.01)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10_000), turn=st.floats(-720, 720), lat_0=st.floats(-89.9, 89.9), back=st.booleans())
def test_neither_the_meridian_nor_the_order_of_the_tracks_matters(seed, turn, lat_0, back):
    points, track = polylines(seed, "walks")
    lat, lon = from_plane(*points.T, lat_0, 0.0)
    found = find_crossings(lat, lon, track)
    way = slice(None, None, -1 if back else 1)
    again = find_crossings(lat[way], lon[way] + turn, track[way])
    assert len(again) == len(found)
    order, other = np.argsort(found.lat, kind="stable"), np.argsort(again.lat, kind="stable")
    assert again.lat[other] == pytest.approx(found.lat[order], abs=1e-10)


def test_real_tracks_cross_where_shapely_says(shared):
    """Data: NCEI trackline archive, NBP9908 (across 180 degrees) and RC2107, every position of each in order."""
    from steps.formats.mgd77t import read_mgd77t

    for name, expected in (("nbp9908", 1), ("rc2107", 7)):
        table, _ = read_mgd77t(shared / "trackline" / f"{name}.m77t")
        lat, lon = table["latitude_deg"].to_numpy(), table["longitude_deg"].to_numpy()
        good = np.isfinite(lat) & np.isfinite(lon)
        lat, lon = lat[good], lon[good]
        found = find_crossings(lat, lon, np.zeros(len(lat), int))
        points = np.column_stack([np.degrees(np.unwrap(np.radians(lon))), lat])
        points = points[np.append((np.abs(np.diff(points, axis=0)) > 1e-11).any(axis=1), True)]
        segments = shapely.linestrings(np.stack([points[:-1], points[1:]], axis=1))
        first, second = shapely.STRtree(segments).query(segments, predicate="intersects")
        assert len(found) == (second - first > 1).sum() == expected


def test_nothing_is_joined_across_gaps_lines_or_missing_positions():
    lat, lon = from_plane(*np.array([[-9e-6, 0], [9e-6, 0], [0, -9e-6], [0, 9e-6]]).T, 10.0, 20.0)
    assert len(find_crossings(lat, lon, [0, 0, 1, 1])) == 1
    assert len(find_crossings(lat, lon, [0, 1, 2, 2])) == 0
    assert len(find_crossings(lat, lon, [0, 0, 1, 1], joined=[True, True, False])) == 0
    assert len(find_crossings([*lat[:3], np.nan], lon, [0, 0, 1, 1])) == 0
    assert len(find_crossings([], [], [])) == 0
    time = np.array([0, 10, 71, 80, 90], "datetime64[s]").astype("datetime64[ns]")
    assert crossovers.joined(time, np.array([0, 0, 0, 1, 1]), 60.0).tolist() == [True, False, False, True]
    assert crossovers.joined(time, np.array([0, 0, 0, 1, 1]), 61.0).tolist() == [True, True, False, True]


def test_a_turn_is_no_crossing_but_coming_back_is():
    """A Williamson-like loop of 2 km against a return after 26 km."""
    angle = np.radians(np.arange(0, 271, 10))
    turn = np.column_stack([300 * np.sin(angle), 300 - 300 * np.cos(angle)])
    loop = np.concatenate([[(-3000, 0)], turn, [(-300, -900)]])
    assert len(plane_case(loop)) == 1
    points = loop / intersections.A_M
    lat, lon = from_plane(*points.T, 44.0, 180.0)
    assert len(find_crossings(lat, lon, np.zeros(len(lat), int), shortest_loop_m=10_000)) == 0
    far = np.array([(-3000, 0), (9000, 0), (9000, 5000), (0, 5000), (0, -3000)]) / intersections.A_M
    lat, lon = from_plane(*far.T, 44.0, 180.0)
    assert len(find_crossings(lat, lon, np.zeros(5, int), shortest_loop_m=27_900)) == 1
    assert len(find_crossings(lat, lon, np.zeros(5, int), shortest_loop_m=28_100)) == 0
    assert len(find_crossings(lat, lon, [0, 0, 0, 1, 1], shortest_loop_m=1e9)) == 1  # two tracks: no turn


def test_many_tracks_are_all_found():
    """A net of 40 by 30 weaving lines across 180 degrees: every line crosses every tie once."""
    rng = np.random.default_rng(1)
    n, points, track = 2000, [], []
    for k in range(70):
        along = np.linspace(-60e3, 60e3, n)
        off = 300 * np.sin(along / 900 + rng.uniform(0, 6))
        place = (k - 20) * 2500 + off if k < 40 else (k - 55) * 3500 + off
        points.append(np.column_stack([along, place] if k < 40 else [place, along])[:: rng.choice([-1, 1])])
        track.append(np.full(n, k))
    points, track = np.concatenate(points), np.concatenate(track)
    lat, lon = from_plane(*(points / intersections.A_M).T, -52.0, 179.8)
    found = find_crossings(lat, lon, track)
    pairs = set(zip(track[found.i].tolist(), track[found.j].tolist(), strict=True))
    assert pairs == {(a, b) for a in range(40) for b in range(40, 70)}
    lines = [shapely.LineString(points[track == k]) for k in range(70)]
    assert len(found) == sum(
        len(shapely.get_parts(lines[a].intersection(lines[b]))) for a in range(40) for b in range(40, 70)
    )


# -- values ----------------------------------------------------------------------------------------------------------


def straight_track(step_m, n, lat_0=44.0, azimuth=30.0):
    """Return positions at even steps along a geodesic that starts west of 180 degrees."""
    lon, lat, _ = GEOD.fwd(np.full(n, 179.95), np.full(n, lat_0), np.full(n, azimuth), step_m * np.arange(n))
    return np.asarray(lat), np.asarray(lon)


def estimates(values, step_m, sigma=0.1, window_m=500.0, seed=0, link=None, noise=0.0, count=200):
    """Estimate `values(s)` at random places of a track; return places, and what `values_at` says."""
    rng = np.random.default_rng(seed)
    n = max(200, int(20 * window_m / step_m))
    lat, lon = straight_track(step_m, n)
    before = rng.integers(5, n - 6, count)
    fraction = rng.uniform(0, 1, count)
    reading = values(step_m * np.arange(n)) + noise * rng.standard_normal(n)
    link = np.ones(n - 1, bool) if link is None else link(n)
    found = values_at(lat, lon, reading, np.full(n, sigma), link, before, fraction, window_m=window_m)
    return step_m * (before + fraction), found


@pytest.mark.parametrize("step_m", [0.4, 5.0, 130.0])
def test_a_parabola_is_met_exactly(step_m):
    at, found = estimates(lambda s: 48_000 + 0.02 * s + 3e-6 * (s - 4000) ** 2, step_m)
    assert found["value"] == pytest.approx(48_000 + 0.02 * at + 3e-6 * (at - 4000) ** 2, abs=1e-4)
    assert found["gradient"] == pytest.approx(0.02 + 6e-6 * (at - 4000), abs=6e-6 * max(10.0, step_m))
    assert np.hypot(found["east"], found["north"]) == pytest.approx(1.0)
    assert np.degrees(np.arctan2(found["east"], found["north"])) == pytest.approx(30.0, abs=0.5)


def test_noise_averages_down_and_the_sigma_says_how_far():
    at, found = estimates(lambda s: 0.05 * s, 5.0, sigma=1.0, noise=1.0, count=2000)
    error = found["value"] - 0.05 * at
    assert np.sqrt(np.mean(error**2)) < 0.35  # two readings alone would leave 0.8
    assert np.sqrt(np.mean((error / found["sigma"]) ** 2)) == pytest.approx(1.0, abs=0.15)


def test_a_short_anomaly_is_not_smoothed_away():
    """Wavelength 120 m under a window of 500 m: the window must shrink; a parabola over all of it would give 0."""
    at, found = estimates(lambda s: 50 * np.sin(2 * np.pi * s / 120), 2.5, sigma=0.1, noise=0.1, count=1000)
    error = found["value"] - 50 * np.sin(2 * np.pi * at / 120)
    assert np.sqrt(np.mean(error**2)) < 0.2


def test_readings_far_apart_have_a_sigma_that_covers_what_is_not_known():
    """White values cannot be interpolated: what is wrong must be within the sigma as often as it says, roughly."""
    rng = np.random.default_rng(3)
    fine = rng.normal(0, 80, 40_000)

    def field(s):
        return np.interp(s / 4000, np.arange(len(fine)) / 3, fine)  # three values between two readings

    at, found = estimates(field, 4000.0, sigma=0.5, count=400)
    z = (found["value"] - field(at)) / found["sigma"]
    assert 0.4 < np.sqrt(np.mean(z**2)) < 1.6
    at, found = estimates(lambda s: 80 * np.sin(s / 20e3), 4000.0, sigma=0.5, count=400)  # well sampled
    assert np.abs(found["value"] - 80 * np.sin(at / 20e3)).max() < 0.1


def test_nothing_is_taken_from_beyond_a_gap_or_from_missing_readings():
    def field(s):
        return np.where(s < 2500, 10.0, 1000.0)

    def link(n):
        joined = np.ones(n - 1, bool)
        joined[499] = False  # between the readings at 2495 and 2500 m
        return joined

    at, found = estimates(field, 5.0, link=link, count=4000)
    inside = (at < 2495) | (at > 2500)
    assert found["value"][inside] == pytest.approx(field(at[inside]))
    at, found = estimates(lambda s: np.where(np.abs(s - 3000) < 3, np.nan, 7.0), 5.0, count=4000)
    assert (np.isnan(found["value"]) == (np.abs(at - 3000) < 5)).all()


def test_the_variance_of_a_mismatch_holds_the_errors_of_both_positions():
    """Two passes over a plane field, each misplaced as a whole: the mismatch scatters as is said, at any angle."""
    rng = np.random.default_rng(5)
    slope = np.array([0.08, -0.05])  # nT per m, east and north
    for angle in (90.0, 40.0, 15.0):
        one, two = (np.array([np.sin(np.radians(a)), np.cos(np.radians(a))]) for a in (20.0, 20.0 + angle))
        error = rng.normal(0, [[6.0], [9.0]], (20_000, 2, 2))
        scatter = np.std((error[:, 0] - error[:, 1]) @ slope)
        first, second = (
            {"gradient_1_nt_per_m": slope @ way, "east": way[0], "north": way[1], "sigma_position_1_m": sigma}
            for way, sigma in ((one, 6.0), (two, 9.0))
        )
        assert np.sqrt(crossovers.position_variance(first, second)) == pytest.approx(scatter, rel=0.02)


def test_a_term_counts_as_absent_only_if_the_whole_survey_lacks_it():
    table = pd.DataFrame(
        {
            "total_field_nt": [48_100.0, 48_200.0, 48_300.0],
            "main_field_nt": [48_000.0] * 3,
            "diurnal_nt": [5.0, np.nan, 6.0],
            "heading_nt": [np.nan] * 3,
        }
    )
    anomaly, lacking, absent = crossovers.before_levelling(table)
    assert absent == ["heading"]
    assert anomaly == pytest.approx([95.0, np.nan, 294.0], nan_ok=True)
    assert lacking.tolist() == [0, 2, 0]


def test_statistics_against_numpy():
    rng = np.random.default_rng(2)
    mismatch = rng.normal(1, 3, 30)
    table = pd.DataFrame(
        {
            "survey_1": ["b"] * 10 + ["a"] * 20,
            "survey_2": ["a"] * 20 + ["b"] * 10,
            "line_1": ["one"] * 30,
            "line_2": ["two"] * 30,
            "mismatch_nt": mismatch,
            "status": ["used"] * 28 + ["no"] * 2,
        }
    )
    said = crossovers.statistics(table)
    used = mismatch[:28]
    assert said["status"] == {"no": 2, "used": 28}
    assert said["mismatch"]["rms_nt"] == pytest.approx(np.sqrt(np.mean(used**2)))
    assert said["mismatch"]["sd_nt"] == pytest.approx(np.std(used, ddof=1))
    assert said["mismatch"]["median_absolute_nt"] == pytest.approx(np.median(np.abs(used)))
    assert said["mismatch"]["external_error_nt"] == pytest.approx(np.sqrt(np.mean(used**2) / 2))
    assert [(row["survey_1"], row["survey_2"], row["n"]) for row in said["pairs"]] == [("a", "b", 18), ("a", "a", 10)]
    assert {(row["survey"], row["line"]): row["n"] for row in said["lines"]} == {
        ("b", "one"): 10,
        ("a", "one"): 18,
        ("a", "two"): 20,
        ("b", "two"): 8,
    }


# -- the stage -------------------------------------------------------------------------------------------------------

START = np.datetime64("2024-05-01T00:00:00", "ns")


def make_survey(tracks, kinds, *, speed=5.0, step_s=4.0, place=(30.0, -179.95), level=0.0, base=True):
    """Make the tables of one survey that runs straight lines, given by their ends in metres, over a known field."""
    parts = []
    clock = 0.0
    for k, (start, end) in enumerate(tracks):
        start, end = np.array(start, float), np.array(end, float)
        n = int(np.hypot(*(end - start)) / speed / step_s) + 1
        share = np.linspace(0, 1, n)[:, None]
        x, y = (start + share * (end - start)).T
        time = clock + step_s * np.arange(n)
        clock = time[-1] + 900
        course = np.degrees(np.arctan2(*(end - start))) % 360
        parts.append(pd.DataFrame({"x": x, "y": y, "s": time, "line_index": k, "course": course}))
    t = pd.concat(parts, ignore_index=True)
    lat, lon = from_plane(t["x"].to_numpy() / 6371e3, t["y"].to_numpy() / 6371e3, *place)
    n = len(t)
    diurnal = 10 * np.sin(t["s"].to_numpy() / 7000)
    tables = {
        "readings": {
            "reading": np.arange(n),
            "time_utc": START + (t["s"].to_numpy() * 1e9).astype("int64").astype("timedelta64[ns]"),
            "total_field_nt": 45_000 + 0.01 * t["x"] + 0.02 * t["y"] + diurnal + level,
        },
        "lines": {"line_index": t["line_index"].astype("int32")},
        "screen": {"screen_flags": np.zeros(n, "uint32"), "sigma_noise_nt": np.full(n, 0.1)},
        "position": {
            "sensor_latitude_deg": lat,
            "sensor_longitude_deg": lon,
            "sensor_course_deg": t["course"],
            "ship_heading_deg": (t["course"] + 3) % 360,
            "tow_direction_deg": (t["course"] - 2) % 360,
            "sensor_speed_mps": np.full(n, speed),
            "sigma_position_m": np.full(n, 8.0),
        },
        "main_field": {"main_field_nt": np.full(n, 45_000.0)},
        "diurnal": {
            "diurnal_nt": diurnal if base else np.full(n, np.nan),
            "sigma_diurnal_nt": np.full(n, 0.7 if base else np.nan),
        },
        "heading": {"heading_nt": np.zeros(n), "sigma_heading_nt": np.full(n, 0.3)},
        "line_table": {"line": [f"L{k}" for k in range(len(kinds))], "kind": kinds},
    }
    return {name: pd.DataFrame(table) for name, table in tables.items()}


def run_stage(folder, surveys, **chosen):
    """Run the stage as the workflow does; return the process, the table and the record."""
    names = ("readings", "lines", "line_table", "screen", "position", "main_field", "diurnal", "heading")
    words = [sys.executable, "-m", "steps.crossovers"]
    for name in names:
        words.append(f"--{name}")
        for key, tables in surveys.items():
            path = folder / key / f"{name}.parquet"
            path.parent.mkdir(parents=True, exist_ok=True)
            tables[name].to_parquet(path)
            words.append(str(path))
    outputs = [folder / "crossovers.parquet", folder / "crossovers_record.json"]
    options = {"settings": chosen, "survey": {"name": "test", "members": list(surveys)}}
    words += ["--write", *map(str, outputs), "--options", json.dumps(options)]
    done = subprocess.run(words, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return done, pd.read_parquet(outputs[0]), json.loads(outputs[1].read_text())


LINES = [((-6e3, 1e3), (6e3, 1e3)), ((6e3, -1e3), (-6e3, -1e3)), ((2e3, -4e3), (2e3, 4e3)), ((-5e3, 0), (5e3, 1.9e3))]


def test_the_stage_lists_every_crossing_with_both_passes(tmp_path):
    one = make_survey(LINES, ["line", "line", "tie", "line"])
    two = make_survey([((-3e3, -4e3), (-3e3, 4e3))], ["line"], level=6.0)
    done, table, record = run_stage(tmp_path, {"one": one, "two": two})
    assert list(table) == columns.TABLES["crossovers"]
    pairs = list(zip(table["survey_1"], table["line_1"], table["survey_2"], table["line_2"], strict=True))
    assert set(pairs) == {
        *(("one", a, "one", "L2") for a in ("L0", "L1")),
        ("one", "L2", "one", "L3"),
        ("one", "L0", "one", "L3"),
        *(("one", a, "two", "L0") for a in ("L0", "L1", "L3")),
    }
    flat = table["status"] == "tracks meet at less than 15 degrees"
    assert [pair for pair, no in zip(pairs, flat, strict=True) if no] == [("one", "L0", "one", "L3")]
    assert (table["status"][~flat] == "used").all()
    between = (table["survey_2"] == "two").to_numpy()
    assert table["mismatch_nt"].to_numpy() == pytest.approx(np.where(between, -6.0, 0.0), abs=1e-3)
    assert table["anomaly_1_nt"].to_numpy() - table["anomaly_2_nt"].to_numpy() == pytest.approx(table["mismatch_nt"])
    first = table.iloc[pairs.index(("one", "L0", "one", "L2"))]
    # L0 runs east, L2 north: 2 km east and 1 km north of the middle
    assert first["course_1_deg"] == pytest.approx(90.0)
    assert first["course_2_deg"] % 360 == pytest.approx(0.0, abs=1e-9)
    assert first["tow_direction_2_deg"] == pytest.approx(358.0)
    assert first["angle_deg"] == pytest.approx(90.0, abs=0.2)
    assert first["gradient_1_nt_per_m"] == pytest.approx(0.01, rel=0.01)  # metres of a sphere, 0.6 % of an ellipsoid's
    assert first["gradient_2_nt_per_m"] == pytest.approx(0.02, rel=0.01)
    assert first["anomaly_1_nt"] == pytest.approx(0.01 * 2e3 + 0.02 * 1e3, abs=1e-3)
    whole = first["reading_1"] + first["fraction_1"]
    assert whole == pytest.approx(8e3 / 20.0, abs=0.01)
    assert (first["time_1_utc"] - pd.Timestamp(START)).total_seconds() == pytest.approx(8e3 / 5.0, abs=0.05)
    assert first["diurnal_1_nt"] == pytest.approx(10 * np.sin(8e3 / 5.0 / 7000), abs=1e-3)
    gradients = first["gradient_1_nt_per_m"] ** 2 + first["gradient_2_nt_per_m"] ** 2
    expected = first["sigma_1_nt"] ** 2 + first["sigma_2_nt"] ** 2 + gradients * 2 * 8.0**2
    assert first["sigma_mismatch_nt"] ** 2 == pytest.approx(expected, rel=0.01)
    assert np.hypot(0.7, 0.3) < first["sigma_1_nt"] < np.hypot(0.8, 0.3)
    assert record["status"] == {"tracks meet at less than 15 degrees": 1, "used": 6}
    assert record["mismatch"]["rms_nt"] == pytest.approx(np.sqrt(0.5) * 6.0, rel=1e-3)
    assert "7 crossings, 1 of them not used" in done.stdout
    again = tmp_path / "again"
    run_stage(again, {"one": one, "two": two})
    assert (again / "crossovers.parquet").read_bytes() == (tmp_path / "crossovers.parquet").read_bytes()


def test_the_stage_leaves_out_what_is_rejected_gone_or_of_another_kind(tmp_path):
    survey = make_survey(LINES[:3], ["line", "line", "tie"])
    line = survey["lines"]["line_index"].to_numpy()
    along = np.flatnonzero(line == 0)
    middle = along[400]  # where the tie crosses it
    survey["screen"].loc[middle - 1 : middle + 1, "screen_flags"] = int(Flag.SPIKE)
    survey["readings"].loc[middle - 1 : middle + 1, "total_field_nt"] += 500.0
    _, table, _ = run_stage(tmp_path / "a", {"one": survey})
    assert table["mismatch_nt"].abs().max() < 1e-3  # over three rejected readings, 16 s: bridged, not used
    assert table["reading_1"][0] == middle - 2
    survey["screen"].loc[middle - 8 : middle + 8, "screen_flags"] = int(Flag.EDITED_OUT)
    _, table, _ = run_stage(tmp_path / "b", {"one": survey})
    assert table["line_1"].tolist() == ["L1"]  # 72 s: a gap
    survey["screen"].loc[middle - 8 : middle + 8, "screen_flags"] = int(Flag.SPIKE | Flag.EDITED_IN)
    _, table, _ = run_stage(tmp_path / "c", {"one": survey})
    assert table["line_1"].tolist() == ["L0", "L1"]
    _, table, _ = run_stage(tmp_path / "d", {"one": survey}, kinds=["line"])
    assert len(table) == 0


def test_the_stage_says_which_term_is_missing(tmp_path):
    one = make_survey(LINES[:3], ["line", "line", "tie"])
    gap = np.flatnonzero(one["lines"]["line_index"] == 1)
    one["diurnal"].loc[gap, ["diurnal_nt", "sigma_diurnal_nt"]] = np.nan
    two = make_survey([((-3e3, -4e3), (-3e3, 4e3))], ["line"], base=False)
    done, table, record = run_stage(tmp_path, {"one": one, "two": two})
    lacking = table["status"] == "first pass lacks the diurnal term"
    assert table["line_1"][lacking].tolist() == ["L1", "L1"]
    assert table["mismatch_nt"].isna().tolist() == lacking.tolist()
    assert record["absent"] == {"diurnal": ["two"]}
    assert "note: there is no diurnal term in two: it is not subtracted before tracks are compared." in done.stdout
    # the second survey's own variation is then part of its anomaly
    other = table[(table["survey_2"] == "two") & ~lacking].iloc[0]
    assert np.isnan(other["diurnal_2_nt"])
    assert other["mismatch_nt"] == pytest.approx(-10 * np.sin((5e3 / 5) / 7000), abs=0.01)


def test_a_survey_without_a_crossing_gets_one_note(tmp_path):
    done, table, record = run_stage(tmp_path, {"one": make_survey(LINES[:2], ["line", "line"])})
    assert len(table) == 0
    assert record["mismatch"] == {
        "n": 0,
        **dict.fromkeys(("mean_nt", "sd_nt", "rms_nt", "median_absolute_nt", "external_error_nt")),
    }
    assert record["notes"] == ["no track crosses another one: nothing can be levelled or compared."]
    assert done.stdout.count("note:") == 1
