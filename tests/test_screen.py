"""Screening: spikes, dropouts, noise, and a person's edits above them."""

import numpy as np
import pandas as pd
import pytest

from steps import screen
from steps.columns import Flag
from steps.errors import SurveyError
from steps.settings import Screen

RNG = np.random.default_rng(11)
START = np.datetime64("2024-05-01", "ns")


def _readings(value, step_s=1.0):
    time = START + (np.arange(len(value)) * step_s * 1e9).astype(np.int64).astype("timedelta64[ns]")
    return pd.DataFrame({"time_utc": time, "total_field_nt": value, "signal": 1000.0, "source_file": 0})


def _sea_floor(n):
    """Smooth anomalies with slopes of up to three nT a second, as over a seamount."""
    t = np.arange(n)
    return 46000 + 200 * np.sin(2 * np.pi * t / 900) + 400 * np.exp(-(((t - n / 2) / 200.0) ** 2))


def _hampel(values, window, threshold, smallest):
    """Test reading by reading with pandas' rolling apply: the definition, written out."""
    half = window // 2

    def test(part):
        slope = np.median(part[half:] - part[: window - half]) / half
        level = part - slope * (np.arange(window) - half)
        level = level - np.median(level)
        away = abs(level[half])
        return float(away > threshold * 1.4826 * np.median(np.abs(level)) and away > smallest)

    return pd.Series(values).rolling(window, center=True).apply(test, raw=True).fillna(0).to_numpy() > 0


def test_spikes_are_those_of_the_definition():
    value = _sea_floor(6000) + RNG.normal(0, 0.1, 6000)
    where = RNG.choice(np.arange(20, 5980, 7), 150, replace=False)
    value[where] += RNG.choice([-1, 1], 150) * RNG.uniform(1, 80, 150)
    found = screen.find_spikes(value, window=15, threshold=6.0, smallest=2.0)
    wanted = _hampel(value, 15, 6.0, 2.0)
    inner = slice(15, -15)  # at the ends rolling has no full window
    assert (found[inner] == wanted[inner]).all()
    assert found.sum() > 100


@pytest.mark.parametrize("length", [1, 2, 3])  # up to a fifth of the window
def test_bursts_on_a_slope_are_found_and_nothing_else(length):
    value = _sea_floor(4000) + RNG.normal(0, 0.1, 4000)
    planted = np.zeros(4000, bool)
    for start in range(100, 3900, 211):
        value[start : start + length] += 6.0
        planted[start : start + length] = True
    found = screen.find_spikes(value, window=15, threshold=6.0, smallest=2.0)
    assert found[planted].all()
    assert not found[~planted].any()


def test_a_steep_anomaly_is_no_spike():
    value = _sea_floor(4000) + RNG.normal(0, 0.05, 4000)
    assert not screen.find_spikes(value, window=15, threshold=6.0, smallest=2.0).any()


def test_first_and_last_readings_are_tested_too():
    value = np.linspace(46000, 46300, 300) + RNG.normal(0, 0.05, 300)
    value[[0, 299]] += 20
    assert np.flatnonzero(screen.find_spikes(value, window=15, threshold=6.0, smallest=2.0)).tolist() == [0, 299]


def test_fourth_difference_gives_the_noise():
    """For white noise the fourth difference has sqrt(70) times its standard deviation: 1 + 16 + 36 + 16 + 1 = 70."""
    noise = RNG.normal(0, 0.25, 200_000)
    assert np.std(np.diff(noise, 4)) / np.std(noise) == pytest.approx(np.sqrt(70), rel=0.01)
    assert screen.noise_sd(_sea_floor(200_000) + noise) == pytest.approx(0.25, rel=0.01)


def test_noise_is_told_by_line_and_not_moved_by_spikes():
    value = _sea_floor(4000) + np.where(np.arange(4000) < 2000, 1.0, 3.0) * RNG.normal(0, 0.1, 4000)
    value[::100] += 500
    readings = _readings(value)
    flags = screen.screen_readings(readings, settings=Screen())
    line = np.repeat([0, 1], 2000)
    noise = screen.noise_by_line(readings, flags, line, 3)
    assert noise[:2] == pytest.approx([0.1, 0.3], rel=0.1)
    assert noise[2] == pytest.approx(np.median(noise[:2]))  # a line without readings: the others' median


def test_each_fault_has_its_flag():
    value = _sea_floor(300) + RNG.normal(0, 0.1, 300)
    value[50], value[60], value[70:90] = np.nan, 12.0, value[70]
    readings = _readings(value)
    readings.loc[100, "signal"] = 3.0
    flags = screen.screen_readings(readings, settings=Screen(lowest_signal=500))
    assert flags[50] == Flag.DROPOUT
    assert flags[60] == Flag.OUT_OF_RANGE
    assert (flags[70:90] == Flag.DROPOUT).all()
    assert flags[100] == Flag.LOW_SIGNAL
    others = np.delete(np.arange(300), [50, 60, 100, *range(70, 90)])
    assert (flags[others] == 0).all()


def test_a_gap_is_no_place_for_a_spike():
    """After a silence the field has moved on: neither side is judged by the other."""
    readings = _readings(np.concatenate([np.full(50, 46000.0), np.full(50, 46100.0)]) + RNG.normal(0, 0.1, 100))
    readings.loc[50:, "time_utc"] += np.timedelta64(600, "s")
    assert not (screen.screen_readings(readings, settings=Screen()) & Flag.SPIKE).any()


def test_coarse_records_have_no_spike_test():
    value = 46000 + RNG.normal(0, 0.1, 500)
    value[250] += 300
    assert (screen.screen_readings(_readings(value, 60), settings=Screen()) & Flag.SPIKE).any()
    assert not (screen.screen_readings(_readings(value, 900), settings=Screen()) & Flag.SPIKE).any()


def _edit(action, **change):
    row = {"file": "edits.csv", "row": 2, "action": action, "target": "", "value": None}
    return row | {"start_utc": "2024-05-01T00:00:10", "end_utc": "2024-05-01T00:00:12"} | change


def test_edits_outrank_the_tests_both_ways_and_the_last_stands():
    readings = _readings(_sea_floor(100))
    flags = np.zeros(100, np.uint32)
    flags[10:15] = Flag.SPIKE
    kept = screen.apply_edits(flags, [_edit("keep")], readings)
    assert np.flatnonzero(screen.rejected(kept)).tolist() == [13, 14]
    assert (kept[10:13] & Flag.SPIKE != 0).all(), "what the test said stays on record"
    out = screen.apply_edits(flags, [_edit("keep"), _edit("reject")], readings)
    assert np.flatnonzero(screen.rejected(out)).tolist() == [10, 11, 12, 13, 14]
    back = screen.apply_edits(flags, [_edit("reject"), _edit("keep")], readings)
    assert np.flatnonzero(screen.rejected(back)).tolist() == [13, 14]
    assert flags[11] == Flag.SPIKE, "the input is left alone"


def test_an_edit_that_touches_nothing_is_a_mistake():
    edit = _edit("reject", start_utc="2025-01-01", end_utc="2025-01-02")
    with pytest.raises(SurveyError, match="edits.csv row 2, reject: must touch at least one reading"):
        screen.apply_edits(np.zeros(9, np.uint32), [edit], _readings(_sea_floor(9)))
