"""Clocks: GPS time, offset and drift."""

import calendar
import re
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steps import clock
from steps.settings import Clock


def _times(*texts):
    return np.array(texts, "datetime64[ns]")


@pytest.mark.parametrize(
    ("gps", "utc"),
    [
        # IERS Bulletin C: TAI-UTC is 37 s from 2017-01-01; GPS time is TAI - 19 s, hence 18 s ahead of UTC
        ("2024-05-01T00:00:18", "2024-05-01T00:00:00"),
        # Bulletin C 52: the leap second at the end of 2016
        ("2017-01-01T00:00:18", "2017-01-01T00:00:00"),
        ("2017-01-01T00:00:16", "2016-12-31T23:59:59"),
        # 15 s from 2009 to June 2012, 16 s from July 2012 (Bulletin C 43)
        ("2012-06-30T12:00:15", "2012-06-30T12:00:00"),
        ("2012-07-01T12:00:16", "2012-07-01T12:00:00"),
        ("1980-01-06T00:00:00", "1980-01-06T00:00:00"),
    ],
)
def test_gps_time_is_ahead_by_the_leap_seconds(gps, utc):
    assert clock.gps_to_utc(_times(gps)) == _times(utc)


def test_time_never_goes_back_across_a_leap_second():
    gps = np.datetime64("2017-01-01T00:00:10", "ns") + np.arange(200) * np.timedelta64(100, "ms")
    assert (np.diff(clock.gps_to_utc(gps)) >= np.timedelta64(0)).all()


def test_offset_is_added_in_whole_nanoseconds():
    corrected = clock.correct(_times("2024-05-01T00:00:00.000000001"), Clock(offset_s=-2.5))
    assert corrected == _times("2024-04-30T23:59:57.500000001")


def test_drift_grows_from_the_reference():
    own = Clock(offset_s=1.0, drift_s_per_day=0.5, reference=datetime(2024, 5, 1))
    corrected = clock.correct(_times("2024-05-01", "2024-05-03", "2024-04-30"), own)
    assert (corrected == _times("2024-05-01T00:00:01", "2024-05-03T00:00:02", "2024-04-30T00:00:00.5")).all()


@pytest.mark.parametrize("zone", [UTC, timezone(timedelta(hours=5))])
def test_reference_may_name_its_zone(zone):
    reference = datetime(2024, 5, 1, 5, tzinfo=zone)
    own = Clock(offset_s=0.0, drift_s_per_day=24.0, reference=reference)
    hours = 5 - reference.utcoffset() / timedelta(hours=1)
    corrected = clock.correct(_times("2024-05-01T06:00:00"), own)
    assert corrected - _times("2024-05-01T06:00:00") == np.timedelta64(round((6 - hours) * 1e9), "ns")


@pytest.mark.parametrize("offset", [1e-9, -3.4, 86_400.000000001, 619_315_200.0])
def test_offset_is_exact(offset):
    """Added in integers: a float64 of seconds since 1970 resolves only 0.2 microseconds."""
    logged = _times("2024-05-01T12:34:56.123456789")
    shift = (clock.correct(logged, Clock(offset_s=offset)) - logged).astype(int)
    assert shift == round(offset * 1e9)


def test_drift_is_measured_on_utc_when_the_clock_is_in_gps_time():
    own = Clock(time_scale="gps", offset_s=0.0, drift_s_per_day=1.0, reference=datetime(2024, 5, 1))
    assert clock.correct(_times("2024-05-02T00:00:18"), own) == _times("2024-05-02T00:00:01")


def test_correcting_changes_nothing_in_place():
    logged = _times("2024-05-01", "2024-05-02")
    before = logged.copy()
    clock.correct(logged, Clock(time_scale="gps", offset_s=1.0))
    assert (logged == before).all()


def test_leap_seconds_are_those_of_the_time_zone_database():
    """Outside check: the IANA time zone database, file leapseconds, from IERS Bulletin C."""
    import importlib.util

    places = [Path("/usr/share/zoneinfo/leapseconds")]
    if spec := importlib.util.find_spec("tzdata"):
        places.append(Path(spec.origin).parent / "zoneinfo" / "leapseconds")
    found = [place for place in places if place.is_file()]
    if not found:
        pytest.skip("no time zone database with leap seconds here")
    rows = re.findall(r"^Leap\s+(\d+)\s+(\w+)\s+(\d+)\s+23:59:60\s+\+", found[0].read_text(), re.MULTILINE)
    months = list(calendar.month_abbr)
    days = [np.datetime64(f"{year}-{months.index(month):02d}-{int(day):02d}") + 1 for year, month, day in rows]
    known = [day for day in days if day > np.datetime64("1980-01-06")]  # GPS time began
    assert clock.LEAP_SECONDS_UTC.astype("datetime64[D]").tolist() == [day.item() for day in known]


@given(st.lists(st.dates(min_value=datetime(1900, 1, 1).date(), max_value=datetime(2199, 12, 31).date()), max_size=20))
def test_midnights_are_those_of_the_standard_library(days):
    ns, good = clock.midnights(*(np.array([getattr(day, p) for day in days], int) for p in ("year", "month", "day")))
    assert good.all()
    assert (ns.astype("datetime64[ns]") == np.array(days, "datetime64[ns]")).all()


@given(st.tuples(st.integers(0, 9999), st.integers(0, 99), st.integers(0, 99)))
def test_no_day_is_invented(day):
    _, good = clock.midnights(*np.array([day]).T)
    try:
        real = 1900 <= datetime(*day).year < 2200
    except ValueError:
        real = False
    assert good == [real]
