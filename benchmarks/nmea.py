"""Cost of reading raw text: NMEA against pynmea2, delimited text against pandas.read_csv.

Run with ``python -m benchmarks.nmea [readings]`` (2e6 readings, 23 days at 1 Hz, by default). Both sides do the same
work side by side in one run, five times; medians are given. pynmea2 checks checksums and gives the values that are used
(time, position, course, speed, heading); it takes sentences one by one, so that a part of the log tells its cost.
pandas.read_csv (C engine) splits the text and reads its numbers, but not its times, which ours does as well.
"""

import resource
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import pandas as pd
import pynmea2

from steps.formats.delimited import read_delimited
from steps.formats.nmea import parse_nmea
from steps.settings import DelimitedReadings

SHARED = Path(__file__).parents[2] / "shared" / "data" / "nmea"
START = np.datetime64("2024-06-01", "ms")
TAKEN = 20_000  # sentences that pynmea2 is timed on


def checked(bodies: np.ndarray) -> np.ndarray:
    """Put ``$``, checksum and line end about sentences."""
    sums = np.bitwise_xor.reduce(bodies.view(np.uint8).reshape(len(bodies), -1), axis=1)
    return np.array([b"$%s*%02X\n" % pair for pair in zip(bodies.tolist(), sums.tolist(), strict=True)], dtype=object)


def navigation(n: int) -> bytes:
    """Make a log as a navigation computer writes it, stamped: GGA and HDT each second, VTG and ZDA at times."""
    rng = np.random.default_rng(1)
    times = START + np.arange(n) * np.timedelta64(1000, "ms")
    stamp = np.datetime_as_string(times + rng.integers(80, 180, n).astype("timedelta64[ms]"), "ms")
    clock = [text[11:19].replace(":", "") for text in np.datetime_as_string(times, "s").tolist()]
    units = 26_000_000 + np.cumsum(rng.integers(20, 60, n))  # of 1e-4 minute
    heading = np.cumsum(rng.normal(0, 0.3, n)) % 360
    gga = [
        b"GPGGA,%s.00,44%02d.%04d,N,02822.5909,W,1,11,0.8,17.6,M,52.0,M,," % (c.encode(), u // 10_000 % 60, u % 10_000)
        for c, u in zip(clock, units.tolist(), strict=True)
    ]
    hdt = [b"HEHDT,%.1f,T" % h for h in heading.tolist()]
    vtg = [b"GPVTG,%.1f,T,,M,9.9,N,18.4,K,A" % h for h in heading[::10].tolist()]
    zda = [
        b"GPZDA,%s.00,%s,00,00" % (c.encode(), d.encode()) for c, d in zip(clock[::60], dates(times[::60]), strict=True)
    ]
    place = np.concatenate(
        [np.arange(n) * 8, np.arange(n) * 8 + 1, np.arange(0, n, 10) * 8 + 2, np.arange(0, n, 60) * 8 - 1]
    )
    order = np.argsort(place, kind="stable")
    owner = np.concatenate([np.arange(n), np.arange(n), np.arange(0, n, 10), np.arange(0, n, 60)])[order]
    sentences = checked(np.array(gga + hdt + vtg + zda, dtype="S"))[order]
    stamps = np.char.encode(stamp, "ascii").tolist()
    return b"".join(b"%sZ %s" % (stamps[k], s) for k, s in zip(owner.tolist(), sentences.tolist(), strict=True))


def dates(times: np.ndarray) -> list[str]:
    """Write days as ZDA has them."""
    return pd.DatetimeIndex(times).strftime("%d,%m,%Y").tolist()


def logger(n: int, path: Path) -> None:
    """Write a logger's text: five columns, date and time apart, time in milliseconds."""
    rng = np.random.default_rng(2)
    times = START + np.arange(n) * np.timedelta64(1000, "ms") + rng.integers(470, 490, n).astype("timedelta64[ms]")
    text = pd.Series(np.datetime_as_string(times, "ms"))
    pd.DataFrame(
        {
            "Signal": rng.integers(900, 950, n),
            "Depth_m": np.round(9.6 + 0.1 * rng.standard_normal(n), 2),
            "Mag_nT": np.round(46_644 + np.cumsum(rng.standard_normal(n)), 3),
            "Time": text.str[11:],
            "Date": text.str[8:10] + "/" + text.str[5:7] + "/" + text.str[:4],
        }
    ).to_csv(path, index=False)


def by_pynmea2(lines: list[str]) -> list:
    """Read lines one by one, with checksums and the values that are used."""
    found = []
    for line in lines:
        try:
            m = pynmea2.parse(
                line[line.index("$") :], check=False
            )  # a checksum that stands there is checked all the same
        except (pynmea2.ParseError, ValueError):
            continue
        kind = getattr(m, "sentence_type", "")
        if kind == "GGA":
            found.append((m.timestamp, m.latitude, m.longitude, m.gps_qual))
        elif kind == "RMC":
            found.append((m.datetime, m.latitude, m.longitude, m.status, m.spd_over_grnd, m.true_course))
        elif kind == "VTG":
            found.append((m.true_track, m.spd_over_grnd_kts))
        elif kind == "ZDA":
            found.append(m.datetime)
        elif kind == "HDT":
            found.append(m.heading)
    return found


def seconds(work, times: int = 5) -> float:
    """Return the median time that work takes."""
    taken = []
    for _ in range(times):
        before = time.perf_counter()
        work()
        taken.append(time.perf_counter() - before)
    return float(np.median(taken))


def main(n: int) -> None:
    """Print the ratios."""
    logs = {"generated, GGA HDT VTG ZDA": navigation(n)}
    if SHARED.is_dir():
        for path in sorted(SHARED.glob("NBP1406*")):
            data = path.read_bytes()
            logs[f"{path.name}, replicated"] = data * max(1, n // 10 // data.count(b"\n"))
    print(f"{'log':<42}{'lines':>10}{'pynmea2 us':>12}{'ours us':>9}{'ratio':>7}")
    for name, data in logs.items():
        lines = data.count(b"\n")
        some = data[: data.index(b"\n", min(len(data) - 1, 100 * TAKEN)) + 1].decode().splitlines()[:TAKEN]
        one, all_at_once = [], []
        for _ in range(5):
            one.append(seconds(lambda some=some: by_pynmea2(some), 1) / len(some) * 1e6)
            all_at_once.append(seconds(lambda data=data: parse_nmea(data), 1) / lines * 1e6)
        theirs, ours = np.median(one), np.median(all_at_once)
        print(f"{name:<42}{lines:>10}{theirs:>12.2f}{ours:>9.3f}{theirs / ours:>7.1f}")
    del logs
    spec = DelimitedReadings(
        format="delimited",
        files=["log.csv"],
        time={"columns": ["Date", "Time"], "layout": "%d/%m/%Y %H:%M:%S.%f"},
        columns={"total_field_nt": "Mag_nT", "signal": "Signal", "logged_depth_m": "Depth_m"},
        clock={"offset_s": 0.0},
    )
    columns = {name: column for name, column in spec.columns.model_dump().items() if column}
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "log.csv"
        logger(n, path)
        theirs, ours = [], []
        for _ in range(5):
            theirs.append(seconds(lambda: pd.read_csv(path, engine="c"), 1))
            ours.append(seconds(lambda: read_delimited(path, spec, columns), 1))
        theirs, ours = np.median(theirs), np.median(ours)
        megabytes = path.stat().st_size / 1e6
        print(f"delimited text, {n} rows, {megabytes:.0f} MB: pandas.read_csv, without times, {theirs:.2f} s;")
        print(f"ours, with times, {ours:.2f} s: {ours / theirs:.1f} times as long")
    print(f"largest memory {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6:.2f} GB")


if __name__ == "__main__":
    main(int(float(sys.argv[1])) if len(sys.argv) > 1 else 2_000_000)
