"""A base station's record turned into its variation: against closed forms, cases by hand, and plain weighted fits."""

import numpy as np
import pytest
from synthetic_fields import main_field_exact

from steps.base_station import (
    Series,
    agree_on_datum,
    bridge,
    find_disturbed,
    local_fit,
    station_variation,
    three_hour_ranges,
)
from steps.errors import SurveyError
from steps.settings import Diurnal

LAT, LON, HEIGHT_M = 40.137, -105.237, 1682.0
START = np.datetime64("2023-03-01T00:00:00", "ns")


def clock(hours: float, step_s: float = 60.0, start=START) -> np.ndarray:
    return start + (np.arange(round(hours * 3600 / step_s)) * step_s * 1e9).astype("timedelta64[ns]")


def hours_of(time) -> np.ndarray:
    return (time - START) / np.timedelta64(1, "s") / 3600


def station(time, variation, lon=LON, lat=LAT, name="A", span_s=None, **settings):
    """Make a station whose record is the main field (ppigrf), 120 nT of crust, and a variation."""
    times = time[[0, len(time) // 2, -1]]
    exact = main_field_exact(np.full(3, lat), np.full(3, lon), HEIGHT_M, times)
    t = (time - time[0]) / np.timedelta64(1, "D")
    main = np.polyval(np.polyfit(t[[0, len(time) // 2, -1]], exact, 2), t)
    return station_variation(
        time, main + 120.0 + variation, lat, lon, HEIGHT_M, settings=Diurnal(**settings), name=name, span_s=span_s
    )


# -- smoothing, gaps, disturbance ------------------------------------------------------------------------------------


@pytest.mark.parametrize("degree", [1, 2])
def test_the_local_fit_is_a_weighted_polynomial_fit_at_every_sample(degree):
    """Against numpy.polyfit with the same weights, in gaps and at the ends too."""
    rng = np.random.default_rng(1)
    values = np.cumsum(rng.normal(size=300)) + 50000
    values[100:140] = np.nan
    values[rng.integers(0, 300, 20)] = np.nan
    fitted = local_fit(values, 12.0, degree)
    good, t = np.isfinite(values), np.arange(300)
    for k in (0, 1, 7, 99, 104, 135, 140, 200, 298, 299):
        near = good & (np.abs(t - k) <= 48)
        root = np.exp(-(((t - k) / 12.0) ** 2) / 4)[near]
        expected = np.polyfit(t[near] - k, values[near], degree, w=root)[-1]
        assert fitted[k] == pytest.approx(expected, abs=0.03)  # the ridge of the bend is a thousandth


@pytest.mark.parametrize(
    ("degree", "response"), [(1, lambda u: np.exp(-u)), (2, lambda u: (1 + u) * np.exp(-u))], ids=["line", "parabola"]
)
@pytest.mark.parametrize("period", [60.0, 100.0, 150.0, 400.0])
def test_the_local_fit_has_the_closed_form_s_response_and_no_phase(degree, response, period):
    """Fourier transform of the equivalent kernels, phi and (3/2 - t^2/2) phi."""
    t, sigma = np.arange(4000), 20.0
    fitted = local_fit(np.exp(2j * np.pi * t / period).real, sigma, degree)[1000:3000]
    wave = np.exp(-2j * np.pi * t[1000:3000] / period)
    # over whole periods
    whole = int(2000 // period * period)
    gain = 2 * np.mean((fitted * wave)[:whole])
    assert gain.real == pytest.approx(response(2 * (np.pi * sigma / period) ** 2), abs=4e-3)  # weights end at 4 sigma
    assert abs(gain.imag) < 1e-3


def test_short_gaps_are_bridged_by_straight_lines_and_longer_ones_and_the_ends_stay():
    nan = np.nan
    filled, bridged = bridge(np.array([nan, 1.0, nan, nan, 4.0, nan, nan, nan, 8.0, 9.0, nan]), 3)
    np.testing.assert_array_equal(filled, [nan, 1, 2, 3, 4, nan, nan, nan, 8, 9, nan])
    assert bridged.tolist() == [[1, 4]]
    filled, bridged = bridge(np.array([1.0, nan, 3.0, nan, 5.0]), 2.5)
    assert filled.tolist() == [1, 2, 3, 4, 5]
    assert bridged.tolist() == [[0, 2], [2, 4]]


def test_disturbance_is_the_departure_from_any_chord():
    """Against the definition, sample by sample and chord by chord."""
    rng = np.random.default_rng(2)
    values = np.cumsum(rng.normal(0, 1.2, 400))
    values[150:160] = np.nan
    chord, limit = 10, 4.0
    expected = np.zeros(400, bool)
    for start in range(400 - chord):
        line = np.linspace(values[start], values[start + chord], chord + 1)
        with np.errstate(invalid="ignore"):
            expected[start : start + chord + 1] |= np.abs(values[start : start + chord + 1] - line) > limit
    found = find_disturbed(values, chord, limit)
    np.testing.assert_array_equal(found, expected)
    assert 20 < expected.sum() < 380
    assert not find_disturbed(np.linspace(0, 1e4, 200), chord, limit).any()  # a straight line, however steep
    assert not find_disturbed(np.array([1.0, 50.0, 1.0]), chord, limit).any()  # shorter than a chord


# -- variation -------------------------------------------------------------------------------------------------------


def test_secular_variation_does_not_become_a_trend():
    """Main field of the record by ppigrf: over 150 days it changes by tens of nT, the variation by nothing."""
    time = clock(150 * 24, 600.0)
    ends = main_field_exact(np.full(2, LAT), np.full(2, LON), HEIGHT_M, time[[0, -1]])
    daily = 20 * np.cos(2 * np.pi * hours_of(time) / 24)
    found = station(time, daily, low_pass_s=0)
    assert abs(ends[1] - ends[0]) > 25.0
    slope = np.polyfit(hours_of(time) / 24, found.variation.value - daily, 1)[0]
    assert abs(slope * 150) < 0.02


def test_the_quiet_night_is_the_datum_and_disturbed_nights_are_not():
    time = clock(96)
    hour = (hours_of(time) + LON / 15) % 24
    night = (hour >= 22) | (hour < 4)
    value = np.where(night, 3.0, 3.0 - 40 * np.sin(np.pi * (hour - 4) / 18))
    storm = night & (hours_of(time) > 72)
    value = value + np.where(storm, 60 * np.sin(hours_of(time) * 40), 0.0)
    found = station(time, value)
    assert found.datum_from == "median of quiet local night"
    assert found.datum_nt == pytest.approx(123.0, abs=0.05)
    assert found.variation.value[: 24 * 60] == pytest.approx(value[: 24 * 60] - 3.0, abs=0.05)
    assert found.disturbed[storm[: len(found.disturbed)]].mean() > 0.9


def test_other_datums():
    time = clock(48)
    value = np.where(hours_of(time) < 24, 10.0, 30.0)
    seconds = time.astype("int64") / 1e9
    assert station(time, value, datum=-7.5).datum_nt == -7.5
    assert station(time, value, datum="survey_mean").datum_nt == pytest.approx(140.0, abs=0.05)
    second_day = (seconds[24 * 60 + 30], seconds[-1])
    found = station(time, value, datum="survey_mean", span_s=second_day)
    assert found.datum_nt == pytest.approx(150.0, abs=0.05)
    assert found.datum_from == "mean during the survey"
    day = clock(3, start=START + np.timedelta64(19, "h"))  # noon at the station
    assert station(day, 0 * hours_of(day)).datum_from == "mean of the record, for want of an hour of quiet night"


def test_noise_of_a_one_second_record_is_not_passed_on_but_bays_are():
    """White noise of 1 nT falls to 1 / sqrt(2 sqrt(pi) sigma), sigma of the weights in samples; ten minutes stay."""
    rng = np.random.default_rng(4)
    time = clock(6, 1.0)
    bay = 15 * np.sin(2 * np.pi * hours_of(time) * 6)
    noisy = station(time, bay + rng.normal(size=len(time)), low_pass_s=60.0, datum=120.0)
    at = noisy.variation.times()[20:-20]
    expected = 15 * np.sin(2 * np.pi * (at - START.astype("int64") / 1e9) / 600)
    gain = np.exp(-2 * (np.pi * 60 * 0.18739 / 600) ** 2)
    error = noisy.variation.value[20:-20] - gain * expected
    sigma = 60 * 0.18739  # of the Gaussian that halves a period of 60 s: sqrt(2 ln 2) / (2 pi)
    assert np.std(error) == pytest.approx(1 / np.sqrt(2 * np.sqrt(np.pi) * sigma), rel=0.15)
    assert len(noisy.variation.value) < len(time) / 4  # what is kept of it


def test_gaps_follow_the_rule_and_are_told():
    time = clock(30)
    value = 10 * np.sin(hours_of(time))
    value[600:614] = np.nan  # from value to value 15 minutes: as long as may be
    value[1000:1015] = np.nan  # 16 minutes
    kept = np.isfinite(value)
    found = station(time[kept], value[kept], longest_gap_s=900.0, datum=120.0)
    missing = np.isnan(found.variation.value)
    assert np.flatnonzero(missing).tolist() == list(range(1000, 1015))
    assert (found.bridged_s[:, 1] - found.bridged_s[:, 0]).tolist() == [900.0]
    assert len(found.known_s) == 2
    np.testing.assert_allclose(found.variation.value[kept], value[kept], atol=0.02)


def test_an_uneven_clock_and_a_shifted_one_are_followed():
    rng = np.random.default_rng(6)
    even = clock(12, 10.0)
    time = even + (rng.uniform(-2, 2, len(even)) * 1e9).astype("timedelta64[ns]")
    wave = 20 * np.sin(2 * np.pi * hours_of(time) / 2)
    found = station(time, wave, datum=120.0, low_pass_s=0)
    expected = 20 * np.sin(2 * np.pi * (found.variation.times() - START.astype("int64") / 1e9) / 7200)
    np.testing.assert_allclose(found.variation.value[3:-3], expected[3:-3], atol=0.02)


@pytest.mark.parametrize(
    ("values", "step_s", "sentence"),
    [
        ([50000.0], 60.0, r"base station A: must hold at least two values of the total field\. Got 1\."),
        ([np.nan] * 5, 60.0, r"must hold at least two values of the total field\. Got 0\."),
        ([50000.0] * 30, 3600.0, r"closer together than diurnal.longest_gap_s, 900 s\. Got one in 3600 s\."),
    ],
)
def test_a_record_that_is_no_use_is_refused(values, step_s, sentence):
    time = clock(len(values) * step_s / 3600, step_s)
    with pytest.raises(SurveyError, match=sentence):
        station_variation(time, np.array(values), LAT, LON, 0.0, settings=Diurnal(), name="A")


# -- datums of several stations, ranges ------------------------------------------------------------------------------


def test_datums_agree_over_common_time_so_that_no_step_is_left_when_one_takes_over():
    """The ring current leaves the second half 40 nT lower: nights of stations that ran at other times differ by it."""
    whole = clock(8 * 24)
    hours = hours_of(whole)
    field = np.where(hours < 96, 0.0, -40 * np.exp(-(hours - 96) / 60))
    early, late = hours < 120, hours > 84
    a = station(whole[early], field[early], name="A")
    b = station(whole[late], field[late] + 15.0, name="B", lon=LON + 4)
    alone = a.coarse.at(np.array([a.coarse.times()[-100]])) - b.coarse.at(np.array([a.coarse.times()[-100]]))
    assert abs(alone[0]) > 10.0
    (a, b), group = agree_on_datum([a, b], settings=Diurnal())
    assert group == [0, 0]
    common = b.coarse.times()[: 30 * 60]
    np.testing.assert_allclose(a.coarse.at(common), b.coarse.at(common), atol=0.1)
    # a third that shares no time with them stays as it is
    far = clock(24, start=START + np.timedelta64(20, "D"))
    c = station(far, 0 * hours_of(far), name="C")
    (_, _, same), group = agree_on_datum([a, b, c], settings=Diurnal())
    assert group[2] not in group[:2]
    assert same.datum_nt == c.datum_nt
    stated = [station(whole[early], field[early], datum=5.0), station(whole[late], field[late], datum=5.0)]
    assert [s.datum_nt for s in agree_on_datum(stated, settings=Diurnal(datum=5.0))[0]] == [5.0, 5.0]


def test_three_hour_ranges_by_hand():
    """Intervals are 00-03, 03-06, ... UTC (Bartels, Heck & Johnston 1939); each counts whole."""
    time = clock(24)
    value = np.zeros(len(time))
    value[60 * 4] = 8.0  # 04:00
    value[60 * 5] = -3.0  # 05:00
    value[60 * 7] = 5.0  # 07:00
    found = station(time, value, datum=120.0)
    seconds = time.astype("int64") / 1e9
    for start, end, expected in (("04:30", "04:40", 11.0), ("06:30", "06:40", 5.0), ("05:59", "06:01", 11.0)):
        first, last = (seconds[0] + 3600 * int(text[:2]) + 60 * int(text[3:]) for text in (start, end))
        whole, quick = three_hour_ranges(found, first, last)
        assert whole == pytest.approx(expected, abs=0.05)
        assert quick == pytest.approx(expected, abs=0.3)  # the slow part holds little of three minutes
    assert three_hour_ranges(found, seconds[0] - 9e5, seconds[0] - 8e5) is None
    # the regular daily variation is no disturbance
    daily = station(clock(72), 30 * np.cos(2 * np.pi * hours_of(clock(72)) / 24), datum=120.0)
    whole, quick = three_hour_ranges(daily, seconds[0] + 86400, seconds[0] + 2 * 86400)
    assert whole > 20.0
    assert quick < 1.0


def test_a_series_is_read_between_its_samples_and_not_across_missing_ones():
    series = Series(100.0, 10.0, np.array([1.0, 2.0, np.nan, 4.0]))
    found = series.at(np.array([90.0, 100.0, 105.0, 110.0, 111.0, 129.0, 130.0, 500.0]))
    np.testing.assert_array_equal(found, [1.0, 1.0, 1.5, 2.0, np.nan, np.nan, 4.0, 4.0])
