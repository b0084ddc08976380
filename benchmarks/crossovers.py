"""Crossings of tracks: time, ratios to shapely, and growth, in one run.

python benchmarks/crossovers.py [READINGS]        (default 2,000,000 for the ratios; each time is a median)
python benchmarks/crossovers.py --growth          (5e5, 5e6 and 5e7 readings with 1e4, 1e5 and 1e6 crossings)

Two ways of shapely: a tree over all single segments, and line against line for the pairs of lines that a tree over
whole lines names. Both are given the tracks in a plane, which spares them longitudes; ours gets latitude and longitude.
The limit: three sines or cosines a reading and six running minima, 60 ns of arithmetic and memory traffic.
"""

import resource
import statistics
import sys
import time
from pathlib import Path

import numpy as np
import shapely

sys.path.insert(0, str(Path(__file__).parents[1]))
from steps.intersections import find_crossings

RADIUS_M = 6378137.0


def net(lines, ties, readings, seed=1):
    """Make weaving lines and ties, aslant, each of `readings` at 5 m; return plane x, y in radians, and track."""
    rng = np.random.default_rng(seed)
    n, length = lines + ties, readings * 5.0
    along = np.linspace(-length / 2, length / 2, readings)
    x, y = np.empty((n, readings)), np.empty((n, readings))
    for k in range(n):
        off = np.cumsum(rng.normal(0, 0.05, readings))
        off += (k - lines / 2) * 0.9 * length / lines if k < lines else (k - lines - ties / 2) * 0.9 * length / ties
        way = slice(None, None, -1 if k % 2 else 1)
        a, b = (along, off) if k < lines else (off, along)
        x[k] = (a * np.cos(0.5) - b * np.sin(0.5))[way]
        y[k] = (a * np.sin(0.5) + b * np.cos(0.5))[way]
    return x.ravel() / RADIUS_M, y.ravel() / RADIUS_M, np.repeat(np.arange(n, dtype=np.int32), readings)


def positions(x, y, lat_0=44.0, lon_0=180.0):
    """Undo a gnomonic projection, in pieces."""
    lat, lon = np.empty_like(x), np.empty_like(x)
    phi = np.radians(lat_0)
    for k in range(0, len(x), 1 << 20):
        part = slice(k, k + (1 << 20))
        level = np.cos(phi) - y[part] * np.sin(phi)
        lat[part] = np.degrees(np.arctan2(np.sin(phi) + y[part] * np.cos(phi), np.hypot(level, x[part])))
        lon[part] = (lon_0 + np.degrees(np.arctan2(x[part], level)) + 180.0) % 360.0 - 180.0
    return lat, lon


def single_segments(x, y, track):
    """Cross all segments through a tree; return the number of crossings of different tracks."""
    joined = np.flatnonzero(track[1:] == track[:-1])
    points = np.column_stack([x, y])
    segments = shapely.linestrings(np.stack([points[joined], points[joined + 1]], axis=1))
    first, second = shapely.STRtree(segments).query(segments, predicate="intersects")
    own = track[joined]
    pair = (first < second) & (own[first] != own[second])
    return len(shapely.intersection(segments[first[pair]], segments[second[pair]]))


def line_against_line(x, y, track):
    """Cross whole lines; return the number of points."""
    edges = np.flatnonzero(np.diff(track)) + 1
    lines = np.array([shapely.LineString(part) for part in np.split(np.column_stack([x, y]), edges)])
    shapely.prepare(lines)
    first, second = shapely.STRtree(lines).query(lines, predicate="intersects")
    pair = first < second
    return len(shapely.get_parts(shapely.intersection(lines[first[pair]], lines[second[pair]])))


def timed(work):
    """Return seconds and result."""
    start = time.perf_counter()
    result = work()
    return time.perf_counter() - start, result


def ratios(readings):
    """Print times side by side, turn by turn."""
    x, y, track = net(200, 20, readings // 220)
    lat, lon = positions(x, y)
    ways = {
        "ours": (9, lambda: len(find_crossings(lat, lon, track))),
        "shapely, line against line": (3, lambda: line_against_line(x, y, track)),
        "shapely, single segments": (3, lambda: single_segments(x, y, track)),
    }
    took = {name: [] for name in ways}
    for turn in range(9):
        for name, (turns, work) in ways.items():
            if turn < turns:
                seconds, count = timed(work)
                took[name].append((seconds, count))
    ours = statistics.median(seconds for seconds, _ in took["ours"])
    print(f"{len(x)} readings, {track[-1] + 1} tracks")
    for name, rows in took.items():
        seconds = statistics.median(second for second, _ in rows)
        print(f"{name:<28} {rows[0][1]:>6} crossings  {seconds:7.3f} s  {seconds / ours:6.1f} times ours")
    print(f"ours: {ours / len(x) * 1e9:.0f} ns a reading")


def growth():
    """Print time and memory against size."""
    for lines, readings in ((100, 2500), (316, 7900), (1000, 25_000)):
        x, y, track = net(lines, lines, readings)
        lat, lon = positions(x, y)
        del x, y
        seconds, count = timed(lambda lat=lat, lon=lon, track=track: len(find_crossings(lat, lon, track)))
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
        print(
            f"{len(lat):>9} readings  {count:>8} crossings  {seconds:6.2f} s  {seconds / len(lat) * 1e9:5.0f} ns a "
            f"reading  peak {peak:.2f} GB, of which {lat.nbytes * 2.5 / 1e9:.2f} GB are the positions",
            flush=True,
        )


if __name__ == "__main__":
    if "--growth" in sys.argv:
        growth()
    else:
        ratios(int(sys.argv[1]) if len(sys.argv) > 1 else 2_000_000)
