"""Diurnal term of a long survey: time and memory by stations and readings, in one run.

python benchmarks/diurnal.py     (60 days of one-minute records; 1, 6 and 24 stations; 0.5 and 5.2 million readings)
"""

import resource
import statistics
import sys
import time
from pathlib import Path
from types import SimpleNamespace

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))
from steps.diurnal import calibrate, make_stations, predict, sigma
from steps.settings import Diurnal

DAYS = 60
START_S = 1_714_521_600.0  # 2024-05-01


def records(stations, seed=1):
    """Make records of a minute with Sq by local time, noise, and a gap of up to two days each."""
    rng = np.random.default_rng(seed)
    made = []
    for number in range(stations):
        lat, lon = rng.uniform(35, 55), rng.uniform(-40, -10)
        at = START_S + 60.0 * np.arange(-1440, (DAYS + 1) * 1440)
        field = 45000 + 20 * np.cos(2 * np.pi * (at / 86400 + lon / 360)) + rng.normal(0, 0.1, len(at))
        keep = np.ones(len(at), bool)
        gap = rng.integers(0, len(at) - 3000)
        keep[gap : gap + rng.integers(0, 3000)] = False
        utc = (at[keep] * 1e9).astype("int64").astype("datetime64[ns]")
        made.append(
            SimpleNamespace(
                name=f"S{number}",
                latitude_deg=lat,
                longitude_deg=lon,
                height_m=0.0,
                time_utc=utc,
                total_field_nt=field[keep],
            )
        )
    return made


def main():
    """Print the table."""
    print("stations  readings  stations made, s  term, s  us a reading  peak memory, GB")
    for stations, step_s, repeats in ((1, 10, 3), (6, 10, 3), (24, 10, 3), (1, 1, 1), (24, 1, 1)):
        own = records(stations)
        at = START_S + step_s * np.arange(DAYS * 86400 // step_s)
        lat, lon = 45 + np.linspace(0, 3, len(at)), -25 + np.linspace(0, 5, len(at))
        making, predicting = [], []
        for _ in range(repeats):
            begin = time.perf_counter()
            made, _ = make_stations(own, (at[0], at[-1]), settings=Diurnal())
            law, _ = calibrate(made, settings=Diurnal())
            middle = time.perf_counter()
            sigma(predict(made, at, lat, lon, settings=Diurnal()), law)
            making.append(middle - begin)
            predicting.append(time.perf_counter() - middle)
        a, b = statistics.median(making), statistics.median(predicting)
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
        print(f"{stations:8d} {len(at):9d} {a:17.2f} {b:8.2f} {1e6 * b / len(at):13.2f} {peak:16.2f}")


if __name__ == "__main__":
    main()
