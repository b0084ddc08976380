"""Write a simulated survey as the files that a ship brings home. Imports no stage of the pipeline."""

import gzip
import io
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import ppigrf
from synthetic import Survey
from synthetic_fields import decimal_year

CODES = ("XB1", "XB2", "XB3", "XB4")  # of invented stations


@dataclass(frozen=True)
class Style:
    """How untidy the files are. Lengths of files in hours, stretches in seconds."""

    seed: int = 1
    logger_hours: float = 8.0
    overlap_s: float = 90.0  # rows that two successive logger files share
    remarks: bool = True
    navigation_hours: float = 24.0
    bad_checksums: int = 40
    cut_short: bool = False  # the last sentence, as when the power goes
    compress: bool = True
    header: tuple[str, ...] = ("Towed magnetometer, logger's own text", "Units: nT, m, counts")


def _save(path: Path, text: str, compress: bool) -> Path:
    """Write text, compressed without time or name in the header, so that equal text gives equal bytes."""
    path.parent.mkdir(parents=True, exist_ok=True)
    if not compress:
        path.write_text(text, encoding="utf-8", newline="\n")
        return path
    buffer = io.BytesIO()
    with gzip.GzipFile(filename="", mode="wb", fileobj=buffer, compresslevel=9, mtime=0) as stream:
        stream.write(text.encode())
    path = path.with_name(path.name + ".gz")
    path.write_bytes(buffer.getvalue())
    return path


def checksums(sentences: np.ndarray) -> np.ndarray:
    """Exclusive or of the characters of each sentence body (NMEA 0183), as an array of uint8.

    Parameters
    ----------
    sentences : array of shape (n,) of bytes
        Bodies, without ``$`` and ``*``; numpy's padding with zeros does not change the result.

    """
    return np.bitwise_xor.reduce(sentences.view(np.uint8).reshape(len(sentences), -1), axis=1)


def logger_text(survey: Survey, style: Style) -> dict[str, str]:
    """Return the logger's files by name: semicolons, columns in an odd order, day first."""
    rows = survey.readings
    stamp = pd.DatetimeIndex(rows["logged_utc"])
    body = np.array(
        [
            f"{signal:.0f};{depth:.2f};{total:.3f};{clock[:-3]};{day}\n"
            for signal, depth, total, clock, day in zip(
                rows["signal"].tolist(),
                rows["logged_depth_m"].tolist(),
                rows["total_field_nt"].tolist(),
                stamp.strftime("%H:%M:%S.%f"),
                stamp.strftime("%d/%m/%Y"),
                strict=True,
            )
        ],
        dtype=object,
    )
    seconds = ((stamp - stamp[0]) / pd.Timedelta(1, "s")).to_numpy()
    files = {}
    for k, begin in enumerate(np.arange(0.0, seconds[-1], style.logger_hours * 3600)):
        first = np.searchsorted(seconds, begin - (style.overlap_s if k else 0.0))
        last = np.searchsorted(seconds, begin + style.logger_hours * 3600)
        part = list(body[first:last])
        if style.remarks:
            part.insert(0, f"# watch {k + 1} has the logger\n")
            part.insert(len(part) // 2, "# log read, all well\n")
        head = "".join(f"{line}\n" for line in style.header) + "Signal;Depth_m;Mag_nT;Time;Date\n"
        files[f"mag_{stamp[first].strftime('%Y%m%d_%H%M')}.txt"] = head + "".join(part)
    return files


def _angle(value: np.ndarray, letters: str, width: int) -> list[str]:
    units = np.round(np.abs(value) * 60e4).astype("int64")  # of 1e-4 minute
    degrees, minutes = units // 600000, units % 600000
    signs = np.where(value < 0, letters[1], letters[0]).tolist()
    return [
        f"{d:0{width}d}{m // 10000:02d}.{m % 10000:04d},{letter}"
        for d, m, letter in zip(degrees.tolist(), minutes.tolist(), signs, strict=True)
    ]


def nmea_text(survey: Survey, style: Style) -> dict[str, str]:
    """Return the navigation computer's files by name: a stamp, a blank, a sentence (GGA, HDT, VTG, ZDA and others)."""
    rng = np.random.default_rng([style.seed, 4])
    s = survey.scenario
    rows = survey.navigation[survey.navigation["given"]]
    times = pd.DatetimeIndex(rows["time_utc"])
    n = len(rows)
    clock = times.strftime("%H%M%S").tolist()
    heave = 18.0 + 0.4 * np.sin(2 * np.pi * np.arange(n) / 9.3)
    fixes = [
        f"GPGGA,{c}.00,{la},{lo},1,{11 if k // 700 % 3 else 10},0.8,{h:.1f},M,{s.sea_surface_height_m:.1f},M,,"
        for k, (c, la, lo, h) in enumerate(
            zip(
                clock,
                _angle(rows["latitude_deg"].to_numpy(), "NS", 2),
                _angle(rows["longitude_deg"].to_numpy(), "EW", 3),
                heave.tolist(),
                strict=True,
            )
        )
    ]
    tenth = np.round(rows["heading_deg"].to_numpy() * 10) % 3600 / 10
    gyro = [f"HEHDT,{value:.1f},T" for value in tenth.tolist()]
    every = max(1, round(10 / s.navigation_s))
    seldom = max(1, round(60 / s.navigation_s))
    some, few = np.arange(3, n, every), np.arange(0, n, seldom)
    course = np.round(rows["course_deg"].to_numpy() * 10) % 3600 / 10
    knots = rows["speed_mps"].to_numpy() * 3600 / 1852
    made_good = [f"GPVTG,{course[k]:.1f},T,,M,{knots[k]:.1f},N,{knots[k] * 1.852:.1f},K,A" for k in some]
    date = times.strftime("%d,%m,%Y").tolist()
    clocks = [f"GPZDA,{clock[k]}.00,{date[k]},00,00" for k in few]
    satellites = [f"GPGSA,A,3,02,05,07,12,15,18,21,24,25,29,30,,1.4,0.8,1.{1 + k // 700 % 2}" for k in few]
    own = [f"PXHD,{k // seldom:05d},WINCH,OK" for k in few]  # an invented proprietary sentence
    order = np.concatenate(
        [np.arange(n) * 8.0, np.arange(n) * 8.0 + 4, some * 8.0 + 5, few * 8.0 - 1, few * 8.0 + 2, few * 8.0 + 6]
    )
    owner = np.concatenate([np.arange(n), np.arange(n), some, few, few, few])
    delay_ms = np.concatenate(
        [
            np.full(len(part), late)
            for part, late in (
                (fixes, 140),
                (gyro, 210),
                (made_good, 230),
                (clocks, 110),
                (satellites, 180),
                (own, 260),
            )
        ]
    )
    sentences = np.array(fixes + gyro + made_good + clocks + satellites + own, dtype="S")
    place = np.argsort(order, kind="stable")
    sentences, owner, delay_ms = sentences[place], owner[place], delay_ms[place]
    sums = checksums(sentences)
    wrong = rng.choice(len(sums), min(style.bad_checksums, len(sums)), replace=False)
    sums[wrong] ^= rng.integers(1, 255, len(wrong), dtype=np.uint8)
    delay_ms = delay_ms + rng.integers(0, 4, len(sums)) * 10
    stamp = times.to_numpy()[owner] + delay_ms.astype("timedelta64[ms]")
    stamps = pd.DatetimeIndex(stamp).strftime("%Y-%m-%dT%H:%M:%S.%f").tolist()
    lines = np.array(
        [
            f"{when[:-3]}Z ${sentence}*{total:02X}\n"
            for when, sentence, total in zip(stamps, sentences.astype(str).tolist(), sums.tolist(), strict=True)
        ],
        dtype=object,
    )
    number = ((stamp - stamp[0].astype("datetime64[D]")) / np.timedelta64(1, "h") // style.navigation_hours).astype(int)
    if style.cut_short:
        lines[-1] = lines[-1][:35]
    return {
        f"nav_{pd.Timestamp(stamp[number == k][0]).strftime('%Y%m%d_%H')}.nmea": "".join(lines[number == k])
        for k in np.unique(number)
    }


def iaga_text(base: dict, code: str, *, source: str = "Simulated", comments: tuple[str, ...] = ()) -> dict[str, str]:
    """Return the station's IAGA-2002 files by name, one for each UTC day; X, Y, Z and F."""
    times = pd.DatetimeIndex(base["time_utc"])
    total = base["total_field_nt"]
    epoch = int(decimal_year(times.to_numpy()[:1])[0] // 5 * 5)
    east, north, up = (
        float(np.ravel(c)[0])
        for c in ppigrf.igrf(
            base["longitude_deg"], base["latitude_deg"], base["height_m"] / 1e3, pd.Timestamp(epoch, 1, 1)
        )
    )
    unit = np.array([north, east, -up]) / np.sqrt(north**2 + east**2 + up**2)
    minute = base["interval_s"] == 60
    head = [
        ("Format", "IAGA-2002"),
        ("Source of Data", source),
        ("Station Name", base["name"]),
        ("IAGA CODE", code.upper()),
        ("Geodetic Latitude", f"{base['latitude_deg']:.3f}"),
        ("Geodetic Longitude", f"{base['longitude_deg'] % 360:.3f}"),
        ("Elevation", f"{base['height_m']:.0f}"),
        ("Reported", "XYZF"),
        ("Sensor Orientation", "XYZF"),
        ("Digital Sampling", "1 second"),
        ("Data Interval Type", "1-minute (00:30-01:29)" if minute else f"{base['interval_s']:.0f}-second"),
        ("Data Type", "variation"),
    ]
    top = "".join(f" {label:<23}{value:<45}|\n" for label, value in head)
    top += "".join(f" # {comment:<66}|\n" for comment in comments)
    top += (
        "DATE       TIME         DOY     " + "".join(f"{code.upper()}{e:<7}" for e in "XYZ") + f"{code.upper()}F   |\n"
    )
    values = np.where(np.isnan(total)[:, None], 99999.0, np.column_stack([total[:, None] * unit, total]))
    rows = np.array(
        [
            f"{when}" + "".join(f" {value:9.2f}" for value in row) + "\n"
            for when, row in zip(times.strftime("%Y-%m-%d %H:%M:%S.000 %j   "), values.tolist(), strict=True)
        ],
        dtype=object,
    )
    days = times.normalize()
    ending = "min" if minute else "sec"
    return {
        f"{code.lower()}{day.strftime('%Y%m%d')}v{ending}.{ending}": top + "".join(rows[days == day])
        for day in days.unique()
    }


def settings(survey: Survey, style: Style | None = None, *, sigma_layback_m: float = 5.0) -> dict:
    """Return the settings that a processor would state for a survey written by `write`, by section.

    Stated is what the ship knows: the stated part of the clock error, the logged cable, the size of a fix's error.
    """
    s, ending = survey.scenario, ".gz" if (style or Style()).compress else ""
    clock = {"offset_s": s.clock_offset_s}
    if s.clock_drift_s_per_day:
        clock |= {"drift_s_per_day": s.clock_drift_s_per_day, "reference": s.start}
    return {
        "survey": {"name": f"Simulated {s.seed}"},
        "ingest": {
            "readings": {
                "format": "delimited",
                "files": [f"raw/magnetometer/mag_*.txt{ending}"],
                "delimiter": ";",
                "skip_rows": len((style or Style()).header),
                "time": {"columns": ["Date", "Time"], "layout": "%d/%m/%Y %H:%M:%S.%f"},
                "columns": {"total_field_nt": "Mag_nT", "signal": "Signal", "logged_depth_m": "Depth_m"},
                "clock": clock,
            },
            "navigation": [{"format": "nmea", "files": [f"raw/navigation/nav_*.nmea{ending}"]}],
        },
        "lines": {"log": "lines.csv"},
        "screen": {"lowest_signal": 500.0},
        "position": {
            "antenna_to_tow_point": {"forward_m": s.forward_m, "starboard_m": s.starboard_m},
            "layback": {"log": "cable.csv"},
            "sigma_navigation_m": round(float(np.hypot(s.fix_noise_m, s.fix_wander_m)), 2),
            "sigma_layback_m": sigma_layback_m,
        },
        "main_field": {"sea_surface_height_m": s.sea_surface_height_m},
        "diurnal": {
            "base_stations": [
                {"format": "iaga2002", "files": [f"raw/base_station/{code.lower()}*{ending}"], "name": base["name"]}
                for code, base in zip(CODES, survey.bases, strict=False)
            ]
        },
        "heading": {"use": "calibration" if s.calibration else "none"},
    }


def write(
    survey: Survey,
    folder: Path,
    style: Style | None = None,
    *,
    codes: tuple[str, ...] = CODES,
    comments: tuple[str, ...] = (),
) -> list[Path]:
    """Write all raw files and tables of a survey (not its settings) and return their paths."""
    style = style or Style()
    written = []
    for name, text in logger_text(survey, style).items():
        written.append(_save(folder / "raw" / "magnetometer" / name, text, style.compress))
    for name, text in nmea_text(survey, style).items():
        written.append(_save(folder / "raw" / "navigation" / name, text, style.compress))
    for base, code in zip(survey.bases, codes, strict=False):
        for name, text in iaga_text(base, code, comments=comments).items():
            written.append(_save(folder / "raw" / "base_station" / name, text, style.compress))
    for name, table in (("lines", survey.lines), ("cable", survey.cable)):
        table = table.copy()
        for column in table:
            if column.endswith("_utc"):
                table[column] = pd.DatetimeIndex(table[column]).strftime("%Y-%m-%dT%H:%M:%SZ")
        written.append(_save(folder / f"{name}.csv", table.to_csv(index=False, lineterminator="\n"), False))
    return written
