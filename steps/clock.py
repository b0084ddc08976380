"""Bring an instrument's time to UTC: time scale, offset and drift, in whole nanoseconds.

GNSS time is ahead of UTC by the leap seconds inserted since 6 January 1980 (IERS Bulletin C); 18 s since 2017.
"""

import numpy as np

from steps.settings import Clock

# First UTC instant at which GPS time is ahead by 1, 2, ... 18 s (IERS Bulletin C 8 to 52).
LEAP_SECONDS_UTC = np.array(
    [
        *("1981-07-01", "1982-07-01", "1983-07-01", "1985-07-01", "1988-01-01", "1990-01-01", "1991-01-01"),
        *("1992-07-01", "1993-07-01", "1994-07-01", "1996-01-01", "1997-07-01", "1999-01-01", "2006-01-01"),
        *("2009-01-01", "2012-07-01", "2015-07-01", "2017-01-01"),
    ],
    dtype="datetime64[ns]",
)
NS_PER_S = 1_000_000_000
NS_PER_DAY = 86_400 * NS_PER_S
YEARS = (1900, 2200)  # of any time that is read: IGRF begins in 1900, datetime64[ns] ends in 2262


def gps_to_utc(time: np.ndarray) -> np.ndarray:
    """Turn GPS time, written as a calendar time, into UTC.

    Parameters
    ----------
    time : array of datetime64[ns], shape (n,)
        GPS time; before 1980 nothing is taken off.

    Returns
    -------
    array of datetime64[ns], shape (n,)
        UTC. GPS instants within an inserted leap second give the start of the next UTC day.

    """
    ahead = np.arange(1, len(LEAP_SECONDS_UTC) + 1)
    # In GPS time the n-th leap second begins n - 1 seconds after the UTC midnight that follows it.
    begins = LEAP_SECONDS_UTC + (ahead - 1) * np.timedelta64(1, "s")
    count = np.searchsorted(begins, time, side="right")
    utc = time - count * np.timedelta64(1, "s")
    inside = (count > 0) & (utc < LEAP_SECONDS_UTC[np.maximum(count, 1) - 1])
    return np.where(inside, LEAP_SECONDS_UTC[np.maximum(count, 1) - 1], utc)


def correct(time: np.ndarray, clock: Clock) -> np.ndarray:
    """Correct logged times to UTC.

    Parameters
    ----------
    time : array of datetime64[ns], shape (n,)
        Times as logged.
    clock : Clock
        Time scale, offset (added) and drift (added, growing from `reference`).

    Returns
    -------
    array of datetime64[ns], shape (n,)
        UTC.

    """
    time = np.asarray(time, "datetime64[ns]")
    if clock.time_scale == "gps":
        time = gps_to_utc(time)
    ns = time.astype(np.int64) + round(clock.offset_s * NS_PER_S)
    if clock.drift_s_per_day:
        reference = np.datetime64(_naive_utc(clock.reference), "ns").astype(np.int64)
        days = (time.astype(np.int64) - reference) / NS_PER_DAY
        ns = ns + np.rint(days * clock.drift_s_per_day * NS_PER_S).astype(np.int64)
    return ns.astype("datetime64[ns]")


def _naive_utc(instant):
    """Return a datetime in UTC without its zone."""
    if instant.tzinfo is None:
        return instant
    return (instant - instant.utcoffset()).replace(tzinfo=None)


def midnights(year: np.ndarray, month: np.ndarray, day: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Find the beginning of calendar days.

    Parameters
    ----------
    year, month, day : array of int, shape (n,)
        Year in full; month and day counting from 1.

    Returns
    -------
    ns : array of int64, shape (n,)
        Nanoseconds since 1970; 0 where there is no such day.
    good : array of bool, shape (n,)
        False where there is no such day, or it is not in `YEARS`.

    """
    if len(year) == 0:
        return np.zeros(0, np.int64), np.zeros(0, bool)
    code = (year.astype(np.int32) * 100 + month) * 100 + day
    begins = np.concatenate([[0], np.flatnonzero(code[1:] != code[:-1]) + 1])
    y, m, d = (
        part[begins].astype(np.int64) for part in (year, month, day)
    )  # days change seldom: look once at each run
    good = (y >= YEARS[0]) & (y < YEARS[1]) & (m >= 1) & (m <= 12) & (d >= 1) & (d <= 31)
    y, m, d = np.where(good, y, 1970), np.where(good, m, 1), np.where(good, d, 1)
    first = (y - 1970).astype("datetime64[Y]").astype("datetime64[M]") + (m - 1).astype("timedelta64[M]")
    date = first.astype("datetime64[D]") + (d - 1).astype("timedelta64[D]")
    good &= date.astype("datetime64[M]") == first
    ns = np.where(good, date.astype("datetime64[ns]").astype(np.int64), 0)
    lengths = np.diff(np.append(begins, len(code)))
    return np.repeat(ns, lengths), np.repeat(good, lengths)
