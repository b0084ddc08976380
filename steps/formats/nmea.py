"""Read NMEA 0183 navigation: position, course, speed and heading out of a log of sentences.

GGA, GLL, RMC, VTG, ZDA and HDT of any talker are read; every other line is skipped and counted. The log is worked on
as arrays, a few megabytes at a time and without a loop over sentences: line ends, commas, ``$`` and ``*`` are found in
one pass, the exclusive-or of each sentence is one reduction, and fields of equal width are read digit by digit for
all sentences at once.

A sentence without a checksum is taken; one with a wrong checksum is not. A fix without validity (GGA quality 0, 7 or
8; status V; mode N, M or S) is not taken. Sentences of one epoch make one fix: the position of GGA, else of RMC, else
of GLL, with the course and speed of RMC or of the VTG that follows.

Times. A fix carries its time of day. Its day comes from ZDA, RMC, or the logger's stamp before the sentence; between
them days are counted at each midnight. VTG and HDT carry no time: HDT takes the logger's stamp, and where there is
none the time of the latest timed sentence before it.
"""

from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pandas as pd

from steps.errors import SurveyError, mistake
from steps.formats.packed import read_bytes
from steps.formats.sentences import GLL, HDT, KINDS, NONE, NS, VTG, ZDA, Part, blocks, holding, take_apart

DAY = 86_400 * NS
ROLLOVER_DAYS = 1024 * 7  # GPS counts weeks modulo 1024 (IS-GPS-200, 20.3.3.3.1.1)
CLOSE = NS  # logger's stamps this near to the sentences' own times are taken as they are
MOST_KINDS = 20  # kinds of skipped sentence that are counted by name


@dataclass
class Log:
    """What a log of sentences holds.

    Attributes
    ----------
    fixes : pandas.DataFrame
        time_utc (datetime64[ns], as sentences or stamps say), latitude_deg, longitude_deg, course_deg, speed_mps (NaN
        where not told), source_row; in the order of the file.
    headings : pandas.DataFrame
        time_utc, heading_deg, in the order of the file.
    counts : dict of str to int
        ``lines`` of the file and what became of each: the other counts add up to it. ``GGA`` counts the sentences that
        were used, ``GGA without fix``, ``GGA without value`` and the like those that were not, ``skipped GSV`` the
        sentences of a kind that is not read.
    notes : list of str
        What deserves a look.

    """

    fixes: pd.DataFrame
    headings: pd.DataFrame
    counts: dict[str, int]
    notes: list[str] = field(default_factory=list)


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
        If the file is empty or holds no sentence, holds positions but no date, or no stamps where they are wanted.

    """
    lines = _read_lines(read_bytes(path), str(path))  # the text itself is let go of
    return _make_log(lines, str(path), stamp)


def parse_nmea(data: bytes, where: str = "NMEA 0183", stamp: str = "sentence") -> Log:
    """Parse the bytes of a log; see `read_nmea`."""
    return _make_log(_read_lines(data, where), where, stamp)


def _read_lines(data: bytes, where: str) -> Part:
    """Take all lines of a log apart."""
    if not data[:999].strip() and not data.strip():
        raise SurveyError(mistake(where, "must hold NMEA 0183 sentences", "an empty file"))
    if b"\n" not in data and b"\r" in data:
        data = data.replace(b"\r", b"\n")
    lines = _put_together(list(_in_turn(take_apart, blocks(data))))
    counts = lines.counts
    if counts["lines"] == counts.get("blank", 0) + counts.get("no sentence", 0) + counts.get("malformed", 0):
        first = data.lstrip()[:60].split(b"\n")[0].decode("ascii", "replace")
        remedy = "Is this the right file?"
        raise SurveyError(mistake(where, "must hold NMEA 0183 sentences such as $GPGGA,...", first, remedy))
    return lines


def _make_log(lines: Part, where: str, stamp: str) -> Log:
    """Give the sentences of a log their times and make fixes and headings of them."""
    counts, s = lines.counts | _by_name(lines.skipped), lines.values
    notes: list[str] = []
    time, late = _times(s, where, stamp, notes)
    fixes = _fixes(s, time, stamp, counts)
    headings = _headings(s, late, counts)
    _judge(lines, fixes, notes)
    return Log(fixes, headings, {name: number for name, number in counts.items() if number}, notes)


def _put_together(parts: list[Part]) -> Part:
    """Make one of the parts of a log; rows count from 1."""
    row = 1
    whole = Part({}, {}, {}, {}, sum(part.doubtful for part in parts))
    for part in parts:
        part.values["row"] += row
        row += part.counts["lines"]
        for total, own in ((whole.counts, part.counts), (whole.skipped, part.skipped)):
            for name, number in own.items():
                total[name] = total.get(name, 0) + number
        for kind, heard in part.talkers.items():
            whole.talkers.setdefault(kind, set()).update(heard)
    for name in list(parts[0].values):
        whole.values[name] = np.concatenate([part.values.pop(name) for part in parts])
    return whole


def _in_turn(function: Callable, items: Iterable) -> Iterator:
    """Apply a function to items on two threads (numpy lets go of the interpreter's lock); results in order."""
    with ThreadPoolExecutor(2) as pool:
        waiting = deque()
        for item in items:
            waiting.append(pool.submit(function, item))
            if len(waiting) > 3:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()


def _by_name(skipped: dict[str, int]) -> dict[str, int]:
    """Name the most frequent kinds of skipped sentence; put the others together."""
    order = sorted(skipped, key=lambda name: (-skipped[name], name))
    named = {f"skipped {name}": skipped[name] for name in order[:MOST_KINDS]}
    rest = sum(skipped[name] for name in order[MOST_KINDS:])
    return named | ({"skipped other kinds": rest} if rest else {})


# -- putting a log together ------------------------------------------------------------------------------------------


def _times(s: dict, where: str, stamp: str, notes: list[str]) -> tuple[np.ndarray, np.ndarray]:
    """Give every sentence with a time of day its instant, and every sentence an instant near it.

    Returns
    -------
    time : array of int64
        Instant that the sentence says, NONE for a sentence that says none; with `stamp` "logger" the logger's stamp.
    late : array of int64
        Logger's stamp, put right by its usual difference from the sentences' times where that is over `CLOSE`; where
        there is no stamp, the latest instant before; NONE where there is none either.

    """
    tod, stamps = s["tod"], s["stamp"]
    stamped = stamps != NONE
    positions = s["kind"] <= GLL
    if stamp == "logger":
        if positions.any() and not stamped.any():
            remedy = "Leave `stamp` out to use the times of the sentences."
            raise SurveyError(mistake(where, "must have the logger's time before each sentence", "none", remedy))
        return stamps, _carried(stamps)
    tells, day = holding(s["kind"], "day"), s["day"]
    dated = (day != NONE) & (tod[tells] != NONE)
    tells, day = tells[dated], day[dated]
    both = stamped[tells]
    shift = _usual(day[both] + tod[tells[both]] - stamps[tells[both]])
    timed = np.flatnonzero(tod != NONE)
    # Days since the first timed sentence, counted at midnights; then fixed by the sentences that know their day.
    step = np.diff(tod[timed])
    count = np.concatenate([[0], np.cumsum((step < -DAY // 2).astype(np.int64) - (step > DAY // 2))])[: len(timed)]
    anchor, knows = np.zeros(len(timed), np.int64), np.zeros(len(timed), bool)
    own = np.searchsorted(timed, tells)
    anchor[own], knows[own] = day, True
    # The stamp says the day where nothing else does, and where the last sentence that does is hours away.
    by_stamp = stamped[timed]
    if len(own):
        latest = timed[own[np.maximum(np.searchsorted(own, np.arange(len(timed)), side="right") - 1, 0)]]
        by_stamp &= stamped[latest] & (stamps[timed] - stamps[latest] > DAY // 4)
    by_stamp = np.flatnonzero(by_stamp)
    at = timed[by_stamp]
    anchor[by_stamp], knows[by_stamp] = np.rint((stamps[at] + shift - tod[at]) / DAY).astype(np.int64) * DAY, True
    time = np.full(len(tod), NONE)
    if knows.any():
        base = anchor - count * DAY
        time[timed] = base[_latest(knows)] + count * DAY + tod[timed]
    elif (positions & s["valid"] & np.isfinite(s["a"]) & (tod != NONE)).any():
        remedy = "Log ZDA or RMC as well, or let the logger stamp the sentences."
        raise SurveyError(mistake(where, "must give a date: by ZDA, RMC or the logger's stamp", "none", remedy))
    both = timed[stamped[timed] & (time[timed] != NONE)]
    shift = _usual(time[both] - stamps[both])
    if abs(shift) > CLOSE:
        notes.append(_difference(shift, bool((s["kind"] == HDT).any())))
        stamps = np.where(stamped, stamps + shift, NONE)
    return time, stamps if stamped.all() else np.where(stamped, stamps, _carried(time))


def _usual(difference: np.ndarray) -> int:
    """Return the median of differences, from a hundred thousand of them at most; 0 where there is none."""
    return int(np.median(difference[:: 1 + len(difference) // 100_000])) if len(difference) else 0


def _latest(known: np.ndarray) -> np.ndarray:
    """Return of each place the latest known one at or before it; the first known one before that."""
    if known.all():
        return np.arange(len(known))
    latest = np.maximum.accumulate(np.where(known, np.arange(len(known)), -1))
    return np.where(latest < 0, np.argmax(known), latest)


def _carried(time: np.ndarray) -> np.ndarray:
    """Carry each instant on to the sentences after it that have none."""
    known = time != NONE
    if not known.any() or known.all():
        return time
    return np.where(np.cumsum(known) > 0, time[_latest(known)], NONE)


def _difference(shift: int, headings: bool) -> str:
    """Say that the logger's stamps and the sentences' times differ."""
    days = shift / DAY
    weeks = round(days / ROLLOVER_DAYS)
    if weeks and abs(days - weeks * ROLLOVER_DAYS) < 2:
        return (
            f"the dates of ZDA or RMC are {abs(weeks) * 1024} weeks from the logger's stamps, as after a week rollover "
            "of the GNSS receiver: set `stamp: logger` if the stamps are right."
        )
    side = "behind" if shift > 0 else "ahead of"
    placed = "; headings, which have only stamps, are placed by that difference" if headings else ""
    return f"the logger's stamps are {abs(shift) / NS:.1f} s {side} the sentences' own times{placed}."


def _fixes(s: dict, time: np.ndarray, stamp: str, counts: dict) -> pd.DataFrame:
    """Make one fix of the position sentences of each epoch, with course and speed of RMC or VTG."""
    at = np.flatnonzero(s["kind"] <= GLL)
    kind, valid, latitude, longitude, tod = s["kind"][at], s["valid"][at], s["a"][at], s["b"], s["tod"][at]
    placed = np.isfinite(latitude) & np.isfinite(longitude) & ((tod != NONE) | (stamp == "logger"))
    use = valid & placed & (time[at] != NONE)
    fates = {
        "": use,
        " without fix": ~valid,
        " without value": valid & ~placed,
        " without stamp": valid & placed & ~use,
    }
    for fate, rows in fates.items():
        for number, found in enumerate(np.bincount(kind[rows], minlength=3).tolist()):
            counts[KINDS[number] + fate] = found
    tells = holding(s["kind"], "day")
    dated = (s["day"] != NONE) & (s["tod"][tells] != NONE)
    zda = s["kind"][tells] == ZDA
    counts["ZDA"], counts["ZDA without value"] = (int(np.count_nonzero(zda & rows)) for rows in (dated, ~dated))
    tells = holding(s["kind"], "course")
    moving = s["valid"][tells] & (np.isfinite(s["course"]) | np.isfinite(s["speed"]))
    vtg = s["kind"][tells] == VTG
    counts["VTG"], counts["VTG without value"] = (int(np.count_nonzero(vtg & rows)) for rows in (moving, ~moving))

    names = ["latitude_deg", "longitude_deg", "course_deg", "speed_mps"]
    if not use.any():
        empty = {"time_utc": np.zeros(0, "datetime64[ns]")} | {name: np.zeros(0) for name in names}
        return pd.DataFrame(empty | {"source_row": np.zeros(0, np.int64)})
    own = np.flatnonzero(use)
    # Sentences of an epoch follow each other and say the same time of day.
    key = time[at[own]]
    if stamp == "logger":
        key = np.where(tod[own] == NONE, -at[own], tod[own])
    begins = np.concatenate([[0], np.flatnonzero(key[1:] != key[:-1]) + 1])
    n = len(own)
    if len(begins) == n:
        best = np.arange(n)
    else:
        best = np.minimum.reduceat(kind[own].astype(np.int64) * n + np.arange(n), begins) % n
    # The course and speed of an epoch are the first told in it, up to the first sentence of the next one.
    used = np.zeros(len(s["kind"]), bool)
    used[at[own]] = True
    told = np.flatnonzero(moving & (vtg | used[tells]))
    epoch = np.searchsorted(at[own[begins]], tells[told], side="right") - 1
    told, epoch = told[epoch >= 0], epoch[epoch >= 0]
    first = np.flatnonzero(np.diff(epoch, prepend=-1))
    motion = {name: np.full(len(begins), np.nan) for name in ("course", "speed")}
    for name, values in motion.items():
        values[epoch[first]] = s[name][told[first]]
    chosen = own[best]
    return pd.DataFrame(
        {
            "time_utc": time[at[chosen]].astype("datetime64[ns]"),
            "latitude_deg": latitude[chosen],
            "longitude_deg": np.where(longitude[chosen] == 180.0, -180.0, longitude[chosen]),
            "course_deg": motion["course"],
            "speed_mps": motion["speed"],
            "source_row": s["row"][at[chosen]],
        }
    )


def _headings(s: dict, late: np.ndarray, counts: dict) -> pd.DataFrame:
    """Gather the headings with the time of each."""
    own = np.flatnonzero(s["kind"] == HDT)
    heading, time = s["a"][own], late[own]
    told = s["valid"][own] & np.isfinite(heading)
    use = told & (time != NONE)
    counts["HDT"] = int(np.count_nonzero(use))
    counts["HDT without value"] = int(np.count_nonzero(~told))
    counts["HDT without time"] = int(np.count_nonzero(told & ~use))
    return pd.DataFrame({"time_utc": time[use].astype("datetime64[ns]"), "heading_deg": heading[use]})


def _judge(log: Part, fixes: pd.DataFrame, notes: list[str]) -> None:
    """Note what deserves a look: several receivers, dead reckoning, a clock that goes back."""
    for number, talkers in sorted(log.talkers.items()):
        if len(talkers) > 1:
            names = ", ".join(sorted(talker.to_bytes(2, "little").decode("ascii") for talker in talkers)[:5])
            notes.append(f"{KINDS[number]} comes from several talkers ({names}), whose antennas may stand apart.")
            break
    if log.doubtful:
        notes.append(f"{log.doubtful} positions are dead reckoning (GGA quality 6, mode E); they are used.")
    back = np.flatnonzero(np.diff(fixes["time_utc"].to_numpy()) < np.timedelta64(0))
    if len(back):
        row = int(fixes["source_row"].iloc[back[0] + 1])
        notes.append(f"the time of the fixes goes back {len(back)} times, first in row {row}; they are put in order.")
