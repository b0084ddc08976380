"""Read NMEA 0183 navigation: position, course, speed and heading out of a log of sentences.

GGA, GLL, RMC, VTG, ZDA and HDT of any talker are read; all else is skipped and counted. The log is taken as bytes
and worked on as arrays, without a loop over sentences: the exclusive-or of every sentence comes from one running
exclusive-or over the file, and fields are read digit by digit for all sentences at once.

Times. A fix carries its time of day; its date comes from the latest ZDA or RMC before it (the first one after it,
at the start), else from the logger's stamp before the sentence; midnight is the half day that is nearer. VTG and HDT
carry no time: they take the stamp of the logger, or where there is none the time of the latest timed sentence before
them.
"""

import gzip
import io
import zlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from steps.errors import SurveyError, mistake

LARGEST_BYTES = 4_000_000_000
NS = 1_000_000_000
DAY = 86_400 * NS
KNOT_MPS = 1852.0 / 3600.0
KMH_MPS = 1000.0 / 3600.0
KNOWN = (b"GGA", b"GLL", b"RMC", b"VTG", b"ZDA", b"HDT")
NONE = np.iinfo(np.int64).min  # no time


@dataclass
class Log:
    """What a log of sentences holds.

    Attributes
    ----------
    fixes : pandas.DataFrame
        time_utc (datetime64[ns], as the sentences or stamps say), latitude_deg, longitude_deg, course_deg, speed_mps,
        source_row; in the order of the file.
    headings : pandas.DataFrame
        time_utc, heading_deg.
    counts : dict of str to int
        ``lines`` of the file and what became of each: the counts of the other keys add up to it.

    """

    fixes: pd.DataFrame
    headings: pd.DataFrame
    counts: dict[str, int]


def read_nmea(path: str | Path, stamp: str = "sentence") -> Log:
    """Read one log.

    Parameters
    ----------
    path : str or pathlib.Path
        Text of sentences, each perhaps after a time stamp of the logger; may be gzipped.
    stamp : {"sentence", "logger"}, optional
        Whether a fix has the time that its sentence says, or the logger's stamp.

    Returns
    -------
    Log

    Raises
    ------
    SurveyError
        If the file is empty or binary, or holds positions but no date.

    """
    data = Path(path).read_bytes()
    if data[:2] == b"\x1f\x8b":
        try:
            with gzip.open(io.BytesIO(data)) as packed:
                data = packed.read(LARGEST_BYTES + 1)
        except (OSError, EOFError, zlib.error) as error:
            raise SurveyError(mistake(str(path), "must be a whole gzip file", error, "Copy it again.")) from error
    if len(data) > LARGEST_BYTES:
        raise SurveyError(mistake(str(path), f"must be under {LARGEST_BYTES // 10**9} GB", "a larger file"))
    if not data.strip():
        raise SurveyError(mistake(str(path), "must hold NMEA 0183 sentences", "an empty file"))
    return parse_nmea(data, str(path), stamp)


def parse_nmea(data: bytes, where: str = "NMEA 0183", stamp: str = "sentence") -> Log:
    """Parse the bytes of a log; see `read_nmea`."""
    text = np.frombuffer(data if data.endswith(b"\n") else data + b"\n", np.uint8)
    s = _Sentences(text)
    counts = dict(s.counts)
    date_ns, stamps = _times_of(s, where, counts, stamp)
    fixes, refused = _fixes(s, date_ns, stamps, stamp)
    headings, no_heading = _headings(s, date_ns, stamps)
    for name in ("GGA", "GLL", "RMC", "HDT"):
        empty = refused.get(name, 0) if name != "HDT" else no_heading
        good = counts.pop(name, 0) - empty
        counts |= {name: good} if good else {}
        counts |= {f"{name} without value": empty} if empty else {}
    return Log(fixes, headings, {name: number for name, number in counts.items() if number or name == "lines"})


class _Sentences:
    """Every line of a log taken apart: its kind, its fields, its stamp."""

    def __init__(self, text: np.ndarray):
        self.text = text
        ends = np.flatnonzero(text == 10)
        starts = np.concatenate([[0], ends[:-1] + 1])
        self.lines = len(ends)
        dollars = np.flatnonzero(text == ord("$"))
        at = np.searchsorted(dollars, starts)
        has = (at < len(dollars)) & (len(dollars) > 0)
        begin = np.where(has, dollars[np.minimum(at, max(len(dollars) - 1, 0))] if len(dollars) else 0, 0)
        has &= begin < ends
        trimmed = ends - (text[np.maximum(ends - 1, 0)] == 13)
        blank = trimmed <= starts
        row = np.arange(1, len(ends) + 1)
        self.counts = {"lines": len(ends), "blank": int(blank.sum()), "no sentence": int((~has & ~blank).sum())}
        starts, begin, end, row = starts[has], begin[has], trimmed[has], row[has]
        # the checksum is the exclusive-or of all bytes between $ and *
        running = np.bitwise_xor.accumulate(text)
        stars = np.flatnonzero(text == ord("*"))
        at = np.searchsorted(stars, begin)
        star = stars[np.minimum(at, max(len(stars) - 1, 0))] if len(stars) else np.zeros_like(begin)
        starred = (at < len(stars)) & (star < end)
        body_end = np.where(starred, star, end)
        stated = _hex(text, np.minimum(star + 1, len(text) - 1)) * 16 + _hex(text, np.minimum(star + 2, len(text) - 1))
        whole = star + 3 <= end
        right = ~starred | (whole & (stated == (running[np.maximum(body_end - 1, 0)] ^ running[begin])))
        self.counts["wrong checksum"] = int((~right).sum())
        keep = right
        starts, begin, body_end, row = starts[keep], begin[keep], body_end[keep], row[keep]
        kind = self._kinds(begin, body_end)
        self.counts["proprietary"] = int((kind == -2).sum())
        self.counts["malformed"] = int((kind == -3).sum())
        self.counts["other sentence"] = int((kind == -1).sum())
        keep = kind >= 0
        self.start, self.begin, self.end, self.row, self.kind = (
            starts[keep],
            begin[keep],
            body_end[keep],
            row[keep],
            kind[keep],
        )
        self.commas = np.flatnonzero(text == ord(","))
        self.first = np.searchsorted(self.commas, self.begin)
        for k, name in enumerate(KNOWN):
            self.counts[name.decode()] = int((self.kind == k).sum())

    def _kinds(self, begin, end):
        """Tell the kind of each sentence: an index into KNOWN, -1 another, -2 proprietary, -3 no sentence at all."""
        letters = self.text[np.minimum(begin[:, None] + np.arange(1, 7), len(self.text) - 1)]
        proprietary = letters[:, 0] == ord("P")
        formed = (
            (end - begin >= 6)
            & (letters[:, 5] == ord(","))
            & ((letters[:, :5] >= 48) & (letters[:, :5] <= 90)).all(axis=1)
        )
        code = (letters[:, 2].astype(np.int32) << 16) | (letters[:, 3].astype(np.int32) << 8) | letters[:, 4]
        kind = np.where(formed, -1, -3)
        for k, name in enumerate(KNOWN):
            kind[formed & (code == int.from_bytes(name, "big"))] = k
        kind[proprietary] = -2
        return kind

    def of(self, name: bytes) -> np.ndarray:
        """Return the indices of the sentences of a kind."""
        return np.flatnonzero(self.kind == KNOWN.index(name))

    def field(self, which: np.ndarray, number: int) -> tuple[np.ndarray, np.ndarray]:
        """Return where field `number` of sentences begins and ends; empty where there are fewer fields."""
        at = self.first[which] + number - 1
        inside = at < len(self.commas)
        comma = self.commas[np.minimum(at, len(self.commas) - 1)]
        inside &= comma < self.end[which]
        after = self.commas[np.minimum(at + 1, len(self.commas) - 1)]
        end = np.where((at + 1 < len(self.commas)) & (after < self.end[which]), after, self.end[which])
        begin = np.where(inside, comma + 1, end)
        return begin, end

    def number(self, which: np.ndarray, number: int) -> np.ndarray:
        """Return a numeric field, NaN where it is empty or no number."""
        return _decimal(self.text, *self.field(which, number))

    def letter(self, which: np.ndarray, number: int) -> np.ndarray:
        """Return the only byte of a field, 0 where it has none or more."""
        begin, end = self.field(which, number)
        return np.where(end - begin == 1, self.text[np.minimum(begin, len(self.text) - 1)], 0)


def _hex(text, at):
    """Return the value of hexadecimal digits; 99 where there is none."""
    c = text[at].astype(np.int32)
    upper = c & ~32
    return np.where((c >= 48) & (c <= 57), c - 48, np.where((upper >= 65) & (upper <= 70), upper - 55, 99))


def _decimal(text, begin, end):
    """Read decimal numbers of any width that stand between `begin` and `end`."""
    width = int((end - begin).max()) if len(begin) else 0
    if width > 18:  # no number of a sentence is that long: let those be missing and read the rest
        end = np.where(end - begin > 18, begin, end)
        width = int((end - begin).max())
    value = np.zeros(len(begin), np.int64)
    point = np.zeros(len(begin), np.int64)  # digits after the point
    seen = np.zeros(len(begin), bool)
    digits = np.zeros(len(begin), np.int64)
    negative = np.zeros(len(begin), bool)
    good = end > begin
    for k in range(width):
        inside = begin + k < end
        c = text[np.minimum(begin + k, len(text) - 1)]
        digit = (c - np.uint8(48)).astype(np.int64)
        is_digit = inside & (digit <= 9)
        value = np.where(is_digit, value * 10 + digit, value)
        digits += is_digit
        point += is_digit & seen
        is_point = inside & (c == 46) & ~seen
        seen |= is_point
        is_sign = inside & (k == 0) & ((c == 45) | (c == 43))
        negative |= is_sign & (c == 45)
        good &= ~inside | is_digit | is_point | is_sign
    number = value / 10.0**point
    return np.where(good & (digits > 0), np.where(negative, -number, number), np.nan)


def _time_of_day(s: _Sentences, which, number) -> np.ndarray:
    """Read hhmmss.ss fields as nanoseconds since midnight; NONE where there is none. 23:59:60 is the next midnight."""
    raw = s.number(which, number)
    begin, end = s.field(which, number)
    good = np.isfinite(raw) & (raw >= 0) & (end - begin >= 6)
    raw = np.where(good, raw, 0.0)
    whole = np.floor(raw + 1e-9).astype(np.int64)
    hour, minute, second = whole // 10000, whole // 100 % 100, whole % 100
    good &= (hour < 24) & (minute < 60) & (second <= 60)
    fraction = np.rint((raw - whole) * 1e6).astype(np.int64) * 1000
    ns = ((hour * 60 + minute) * 60 + second) * NS + np.where(second == 60, 0, fraction)
    return np.where(good, ns, NONE)


def _day(year, month, day) -> np.ndarray:
    """Return nanoseconds of midnights since 1970, NONE where there is no such day."""
    good = np.isfinite(year) & np.isfinite(month) & np.isfinite(day)
    year, month, day = (np.where(good, part, 1).astype(np.int64) for part in (year, month, day))
    good &= (month >= 1) & (month <= 12) & (day >= 1) & (day <= 31) & (year >= 1970) & (year < 2200)
    first = (np.where(good, year, 1970) - 1970).astype("datetime64[Y]").astype("datetime64[M]")
    first = first + np.where(good, month - 1, 0).astype("timedelta64[M]")
    midnight = first.astype("datetime64[D]") + np.where(good, day - 1, 0).astype("timedelta64[D]")
    good &= midnight.astype("datetime64[M]") == first
    return np.where(good, midnight.astype("datetime64[ns]").astype(np.int64), NONE)


def _stamps(s: _Sentences) -> np.ndarray:
    """Read the ISO time that a logger wrote before each sentence; NONE where there is none."""
    none = np.full(len(s.start), NONE)
    room = s.begin - s.start
    if len(room) == 0 or room.max() < 19:
        return none
    long = room >= 19
    cells = s.text[np.minimum(s.start[:, None] + np.arange(19), len(s.text) - 1)]
    shape = long & (cells[:, 4] == 45) & (cells[:, 7] == 45) & (cells[:, 13] == 58) & (cells[:, 16] == 58)
    shape &= (cells[:, 10] == ord("T")) | (cells[:, 10] == 32)
    part = [
        _decimal(s.text, s.start + a, s.start + b) for a, b in ((0, 4), (5, 7), (8, 10), (11, 13), (14, 16), (17, 19))
    ]
    midnight = _day(*part[:3])
    good = shape & (midnight != NONE) & (part[3] < 24) & (part[4] < 60) & (part[5] <= 60)
    seconds = np.where(good, (part[3] * 60 + part[4]) * 60 + part[5], 0).astype(np.int64)
    fraction = np.zeros(len(room))
    dotted = good & (s.text[np.minimum(s.start + 19, len(s.text) - 1)] == 46)
    if dotted.any():
        stop = s.start + 20
        for _ in range(9):
            c = s.text[np.minimum(stop, len(s.text) - 1)]
            stop = stop + ((stop < s.begin) & (c >= 48) & (c <= 57))
        fraction = np.where(dotted, np.nan_to_num(_decimal(s.text, s.start + 19, stop)), 0.0)
    return np.where(
        good, np.where(good, midnight, 0) + seconds * NS + np.rint(fraction * 1e6).astype(np.int64) * 1000, NONE
    )


def _times_of(s: _Sentences, where: str, counts: dict, stamp: str):
    """Find for every sentence an instant near it, and its stamp.

    Returns
    -------
    near : array of int64
        Instant of the latest dated sentence or stamp at or before each sentence (the first one after it at the start).
    stamps : array of int64
        Logger's stamps, NONE where there is none.

    """
    stamps = _stamps(s)
    dated = np.full(len(s.kind), NONE)
    zda, rmc = s.of(b"ZDA"), s.of(b"RMC")
    if len(zda):
        midnight = _day(s.number(zda, 4), s.number(zda, 3), s.number(zda, 2))
        clock = _time_of_day(s, zda, 1)
        good = (midnight != NONE) & (clock != NONE)
        dated[zda] = np.where(good, midnight + clock, NONE)
        bad = int((~good).sum())
        counts["ZDA"] = len(zda) - bad
        counts["ZDA without value"] = bad
    if len(rmc):
        date = s.number(rmc, 9)
        good = np.isfinite(date) & (date == np.floor(date)) & (date > 0)
        date = np.where(good, date, 10170).astype(np.int64)
        year = date % 100
        midnight = _day(year + np.where(year < 70, 2000, 1900), date // 100 % 100, date // 10000)
        clock = _time_of_day(s, rmc, 1)
        good &= (midnight != NONE) & (clock != NONE)
        dated[rmc] = np.where(good, midnight + clock, NONE)
    anchor = dated if (dated != NONE).any() else stamps
    known = np.flatnonzero(anchor != NONE)
    positions = len(s.of(b"GGA")) + len(s.of(b"GLL"))
    if len(known) == 0:
        if positions:
            remedy = "Log ZDA or RMC as well, or let the logger stamp the sentences."
            raise SurveyError(mistake(where, "must give a date: by ZDA, RMC or the logger's stamp", "none", remedy))
        return np.full(len(s.kind), NONE), stamps
    last = np.searchsorted(known, np.arange(len(s.kind)), side="right") - 1
    return anchor[known[np.maximum(last, 0)]], stamps


def _near(clock: np.ndarray, near: np.ndarray) -> np.ndarray:
    """Give times of day the day that puts them within half a day of a known instant."""
    midnight = near - np.mod(near, DAY)
    full = midnight + clock
    full = np.where(full - near > DAY // 2, full - DAY, full)
    full = np.where(near - full > DAY // 2, full + DAY, full)
    return np.where((clock == NONE) | (near == NONE), NONE, full)


def _fixes(s: _Sentences, near, stamps, stamp):
    """Gather positions of GGA, GLL and RMC, one for each instant, with the course and speed of RMC or VTG."""
    parts, refused = [], {}
    places = {b"GGA": (1, 2, 4, 0), b"RMC": (1, 3, 5, 1), b"GLL": (5, 1, 3, 2)}
    for name, (time_field, lat_field, lon_field, rank) in places.items():
        which = s.of(name)
        if len(which) == 0:
            continue
        lat = _angle(s, which, lat_field, 90.0)
        lon = _angle(s, which, lon_field, 180.0)
        if name == b"GGA":
            valid = s.number(which, 6) >= 1
        else:
            flag = s.letter(which, 2 if name == b"RMC" else 6)
            valid = (flag == ord("A")) | ((flag == 0) & (name == b"GLL"))
        time = _near(_time_of_day(s, which, time_field), near[which])
        if stamp == "logger":
            time = np.where(stamps[which] != NONE, stamps[which], time)
        good = np.isfinite(lat) & np.isfinite(lon) & valid & (time != NONE)
        refused[name.decode()] = int((~good).sum())
        course = speed = np.full(len(which), np.nan)
        if name == b"RMC":
            course, speed = s.number(which, 8), s.number(which, 7) * KNOT_MPS
        part = {"time": time, "latitude_deg": lat, "longitude_deg": lon, "course_deg": course, "speed_mps": speed}
        parts.append(pd.DataFrame(part | {"rank": rank, "source_row": s.row[which], "at": which})[good])
    columns = ["time_utc", "latitude_deg", "longitude_deg", "course_deg", "speed_mps", "source_row"]
    if not parts or not sum(map(len, parts)):
        empty = pd.DataFrame({name: np.zeros(0) for name in columns})
        return empty.astype({"time_utc": "datetime64[ns]", "source_row": "int64"}), refused
    fixes = pd.concat(parts, ignore_index=True)
    fixes = _with_vtg(s, fixes.sort_values("at", kind="stable"))
    # One fix an instant, within one run of the log: sentences of an epoch follow each other, GGA is preferred.
    fixes["epoch"] = (fixes["time"].diff() != 0).cumsum()
    moving = fixes.groupby("epoch")[["course_deg", "speed_mps"]].transform("first")  # first that is not missing
    fixes[["course_deg", "speed_mps"]] = moving
    fixes = fixes.sort_values(["epoch", "rank", "at"], kind="stable").drop_duplicates("epoch")
    fixes["time_utc"] = fixes["time"].to_numpy().astype("datetime64[ns]")
    lon = (fixes["longitude_deg"].to_numpy() + 180.0) % 360.0 - 180.0
    return fixes.assign(longitude_deg=lon)[columns].reset_index(drop=True), refused


def _angle(s, which, number, limit):
    """Read ddmm.mmmm and the letter after it as degrees within a limit."""
    raw = s.number(which, number)
    side = s.letter(which, number + 1)
    degrees = np.floor(raw / 100.0)
    minutes = raw - degrees * 100.0
    value = degrees + minutes / 60.0
    negative = side == ord("S" if limit == 90.0 else "W")
    positive = side == ord("N" if limit == 90.0 else "E")
    good = (minutes < 60.0) & (raw >= 0) & (value <= limit) & (negative | positive)
    return np.where(good, np.where(negative, -value, value), np.nan)


def _with_vtg(s: _Sentences, fixes: pd.DataFrame) -> pd.DataFrame:
    """Give each fix the course and speed of the VTG that follows it before the next fix of another time."""
    which = s.of(b"VTG")
    if len(which) == 0:
        return fixes
    course = s.number(which, 1)
    knots, kmh = s.number(which, 5) * KNOT_MPS, s.number(which, 7) * KMH_MPS
    speed = np.where(np.isfinite(knots), knots, kmh)
    order = fixes["at"].to_numpy()
    before = np.searchsorted(order, which) - 1
    good = (before >= 0) & (course >= 0) & (course <= 360)
    filled_course, filled_speed = fixes["course_deg"].to_numpy().copy(), fixes["speed_mps"].to_numpy().copy()
    target = before[good]
    vacant = ~np.isfinite(filled_course[target])
    filled_course[target[vacant]] = course[good][vacant] % 360.0
    filled_speed[target[vacant]] = speed[good][vacant]
    return fixes.assign(course_deg=filled_course, speed_mps=filled_speed)


def _headings(s: _Sentences, near, stamps):
    """Gather headings, each with the stamp of its sentence or the time of the latest timed sentence before it."""
    which = s.of(b"HDT")
    heading = s.number(which, 1) if len(which) else np.zeros(0)
    time = (
        np.where(stamps[which] != NONE, stamps[which], _latest(s, near)[which]) if len(which) else np.zeros(0, np.int64)
    )
    good = (heading >= 0) & (heading <= 360) & (time != NONE)
    table = {"time_utc": time[good].astype("datetime64[ns]"), "heading_deg": heading[good] % 360.0}
    return pd.DataFrame(table), int((~good).sum())


def _latest(s: _Sentences, near) -> np.ndarray:
    """Return for every sentence the time of the latest timed sentence at or before it, NONE before the first."""
    full = np.full(len(s.kind), NONE)
    for name, number in ((b"GGA", 1), (b"RMC", 1), (b"GLL", 5), (b"ZDA", 1)):
        which = s.of(name)
        if len(which):
            full[which] = _near(_time_of_day(s, which, number), near[which])
    known = np.flatnonzero(full != NONE)
    if len(known) == 0:
        return full
    last = np.searchsorted(known, np.arange(len(s.kind)), side="right") - 1
    return np.where(last >= 0, full[known[np.maximum(last, 0)]], NONE)
