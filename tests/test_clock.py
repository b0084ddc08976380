"""Clocks: GPS time, offset and drift."""

from datetime import UTC, datetime, timedelta, timezone

import numpy as np
import pytest

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
