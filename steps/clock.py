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
