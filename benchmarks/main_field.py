"""Main field at readings along tracks and at scattered points: time a point, ratios and departures, in one run.

python benchmarks/main_field.py [READINGS]        (default 1,000,000; each time is the median of 7 turns)

The other implementations are measured on fewer points, in turns with ours, since they take the same time for each.
ppigrf takes one date for all points: per-point dates need its field at two epochs, joined here in decimal years.
"""

import resource
import statistics
import sys
import time
from datetime import datetime
from pathlib import Path

import numpy as np
import ppigrf
import pyIGRF14

sys.path.insert(0, str(Path(__file__).parents[1]))
from steps import main_field

TURNS = 7


def track(n):
    """Return a survey of 1 Hz at 5 m/s: long lines, turned at their ends, with a weaving, rising and falling sensor."""
    rng = np.random.default_rng(1)
    run = np.arange(n) * 5.0 / 111_200
    line = np.abs((run / 2.5) % 2 - 1) * 2.5
    lat = 43.0 + line + 1e-5 * rng.standard_normal(n)
    lon = -28.0 + 0.06 * np.floor(run / 2.5) + 3e-4 * np.sin(np.arange(n) / 90)
    return lat, lon, -12 + 2 * np.sin(np.arange(n) / 500), 2024.44 + np.arange(n) / (366 * 86400)


def scattered(n):
    """Return points anywhere on the globe, of any date, in no order."""
    rng = np.random.default_rng(2)
    lat = np.degrees(np.arcsin(rng.uniform(-1, 1, n)))
    return lat, rng.uniform(-180, 180, n), rng.uniform(-100, 0, n), rng.uniform(1900, 2030, n)


def pyigrf14(place):
    """Evaluate point by point."""
    return np.array([pyIGRF14.igrf_value(a, b, h / 1000, t)[6] for a, b, h, t in zip(*place, strict=True)])


def two_epochs(place):
    """Evaluate ppigrf at the two epochs about each point, and join them."""
    lat, lon, height, year = place
    total = np.empty(len(lat))
    first = np.minimum(np.floor(year / 5) * 5, 2025).astype(int)
    for epoch in np.unique(first):
        own = first == epoch
        dates = [datetime(epoch, 1, 1), datetime(epoch + 5, 1, 1)]
        field = np.array(ppigrf.igrf(lon[own], lat[own], height[own] / 1000, dates))
        share = (year[own] - epoch) / 5
        total[own] = np.sqrt(((field[:, 0] + share * (field[:, 1] - field[:, 0])) ** 2).sum(0))
    return total


def main() -> None:
    """Print one table for each kind of points."""
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000
    for kind, place in (("along tracks", track(n)), ("scattered over the globe", scattered(n))):
        few = [part[:: max(1, n // 2_000)] for part in place]
        some = [part[:: max(1, n // 20_000)] for part in place]
        work = {
            "total_field_along": (main_field.total_field_along, place),
            "total_field (exact)": (main_field.total_field, [part[:: max(1, n // 200_000)] for part in place]),
            "ppigrf": (lambda *p: two_epochs(p), some),
            "pyIGRF14": (lambda *p: pyigrf14(p), few),
        }
        times = {name: [] for name in work}
        for _ in range(TURNS):
            for name, (function, points) in work.items():
                start = time.perf_counter()
                function(*points)
                times[name].append((time.perf_counter() - start) / len(points[0]))
        ours = statistics.median(times["total_field_along"])
        print(f"{n} points {kind}")
        for name, measured in times.items():
            middle = statistics.median(measured)
            print(f"  {name:<20} {middle * 1e9:10.1f} ns a point   {middle / ours:8.1f} x total_field_along")
        along = main_field.total_field_along(*place)
        print(f"  departure from exact  {np.abs(along - main_field.total_field(*place)).max():.6f} nT at most")
        print(f"  departure of pyIGRF14 {np.abs(pyigrf14(few) - main_field.total_field(*few)).max():.4f} nT at most")
        print(
            f"  departure of ppigrf   {np.abs(two_epochs(some) - main_field.total_field(*some)).max():.6f} nT at most"
        )
    print(f"largest memory of the run {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024:.0f} MB")


if __name__ == "__main__":
    main()
