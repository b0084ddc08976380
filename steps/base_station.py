"""Turn a base station's record of the total field into its variation: main field and datum taken off, gaps told.

Taking the main field off keeps secular variation from becoming a trend. Noise is taken out by straight lines fitted
with Gaussian weights, which has no phase and allows for gaps. The slow part, which follows local solar time, is a
parabola fitted in the same way, whose response to a period T is ``(1 + u) exp(-u)`` with ``u = 2 (pi sigma / T)^2``:
0.97 at 12 hours and 0.05 at 3 hours for the usual 5 hours; bays and storms, which do not follow local time, are weighed
out of it (robust locally weighted regression; Cleveland 1979, J. Am. Stat. Assoc. 74). Three-hour ranges are those of
Bartels, Heck & Johnston (1939), Terrestrial Magnetism 44, of the total field.
"""

from dataclasses import dataclass, field, replace

import numpy as np

from steps import main_field
from steps.errors import SurveyError, mistake
from steps.settings import Diurnal

NS_PER_S = 1_000_000_000
DAY_S = 86_400.0
NIGHT_H = (22.0, 4.0)  # local solar time in which the daily variation is small (common practice)
# sigma of the Gaussian weights over the period that a line, a parabola passes at half its amplitude
HALF_OF_LINE = np.sqrt(2 * np.log(2)) / (2 * np.pi)
HALF_OF_PARABOLA = np.sqrt(2 * 1.678347) / (2 * np.pi)
CLOCKS_PER_LOW_PASS = 12
COARSE_S = 60.0
SHORTEST_NIGHT_S = 3600.0
ROUNDS = 4  # of robust reweighting
COMMON_S = 300.0  # clock on which stations are compared
SHORTEST_COMMON_S = 3600.0
LAGS_S = (60.0, 120.0, 300.0, 600.0, 900.0, 1800.0, 3600.0, 7200.0)
SLOW_LAGS_S = (1800.0, 3600.0, 7200.0, 14400.0, 28800.0, 43200.0)
THREE_HOURS_S = 10_800.0


@dataclass(frozen=True)
class Series:
    """Values on an even clock; times are seconds since 1970."""

    start_s: float
    step_s: float
    value: np.ndarray

    def times(self) -> np.ndarray:
        """Return the clock."""
        return self.start_s + self.step_s * np.arange(len(self.value))

    def at(self, time_s: np.ndarray) -> np.ndarray:
        """Interpolate linearly; NaN beside a missing value, the first and the last value beyond the ends."""
        place = np.clip((time_s - self.start_s) / self.step_s, 0, len(self.value) - 1)
        tick = (place + 1e-6).astype(np.int64)
        share = place - tick
        share[share < 1e-6] = 0.0  # a tick's own time, but for rounding: its neighbour may be missing
        here = self.value[tick]
        return np.where(share == 0, here, here + share * (self.value[np.minimum(tick + 1, len(self.value) - 1)] - here))


@dataclass(frozen=True)
class Station:
    """A base station's variation.

    Attributes
    ----------
    name : str
    latitude_deg, longitude_deg : float
    variation : Series
        F - main field - datum, nT; low-passed, short gaps bridged, NaN in longer ones.
    coarse, slow : Series
        The same on a clock of about a minute, and its slow part, which is defined in gaps too.
    disturbed : array of bool
        On the clock of `coarse`.
    known_s : array of float, shape (k, 2)
        Stretches that hold a variation, first and last instant.
    bridged_s : array of float, shape (b, 2)
        Bridged gaps, from value to value.
    change_nt, slow_change_nt : array of float
        Rms change of the variation over `LAGS_S`, of its slow part over `SLOW_LAGS_S`.
    datum_nt : float
        What was taken off beside the main field.
    datum_from : str
        How the datum was found.

    """

    name: str
    latitude_deg: float
    longitude_deg: float
    variation: Series
    coarse: Series
    slow: Series
    disturbed: np.ndarray
    known_s: np.ndarray
    bridged_s: np.ndarray
    change_nt: np.ndarray = field(repr=False)
    slow_change_nt: np.ndarray = field(repr=False)
    datum_nt: float = 0.0
    datum_from: str = ""

    def shifted(self, change_nt: float) -> "Station":
        """Return the station with its datum higher by `change_nt`, and all that follows from it lower."""
        lower = {
            name: replace(getattr(self, name), value=getattr(self, name).value - change_nt)
            for name in ("variation", "coarse", "slow")
        }
        return replace(self, datum_nt=self.datum_nt + change_nt, **lower)


# -- smoothing and gaps ----------------------------------------------------------------------------------------------


def local_fit(
    values: np.ndarray, sigma: float, degree: int, least: float = 0.0, weight: np.ndarray | None = None
) -> np.ndarray:
    """Smooth even samples by polynomials fitted with Gaussian weights; gaps and ends are allowed for.

    Parameters
    ----------
    values : array of float, shape (n,)
        NaN where missing.
    sigma : float
        Of the weights, in samples.
    degree : {1, 2}
    least : float
        Share of the weights that must fall on values; below it the result is missing.
    weight : array of float, shape (n,), optional
        Further weights of the values; 1 by default.

    Returns
    -------
    array of float, shape (n,)

    """
    from scipy.signal import oaconvolve

    half = max(1, int(np.ceil(4 * sigma)))
    t = np.arange(-half, half + 1) / sigma
    kernel = np.exp(-(t**2) / 2)
    kernel /= kernel.sum()
    good = np.isfinite(values)
    level = np.median(values[good]) if good.any() else 0.0
    weight = good * (1.0 if weight is None else weight)
    centred = weight * np.where(good, values - level, 0.0)

    def moment(series, power):
        # sum over k of kernel(k - i) (k - i)^power series(k): a correlation, hence the flipped kernel
        return oaconvolve(series, (kernel * t**power)[::-1], mode="full")[half : half + len(series)]

    s = [moment(weight, power) for power in range(2 * degree + 1)]
    b = [moment(centred, power) for power in range(degree + 1)]
    # so few values that slope or bend is not determined: the ridge makes it none
    s[2] = s[2] + 1e-6
    if degree == 1:
        fitted = (s[2] * b[0] - s[1] * b[1]) / np.maximum(s[0] * s[2] - s[1] ** 2, 1e-12)
    else:
        s4 = s[4] + 1e-3
        # Cramer's rule for the constant of the parabola
        minors = s[2] * s4 - s[3] ** 2, s[1] * s4 - s[2] * s[3], s[1] * s[3] - s[2] ** 2
        determinant = s[0] * minors[0] - s[1] * minors[1] + s[2] * minors[2]
        fitted = (b[0] * minors[0] - b[1] * minors[1] + b[2] * minors[2]) / np.maximum(determinant, 1e-12)
    return np.where(s[0] > max(least, 1e-6), fitted + level, np.nan)


def bridge(values: np.ndarray, longest: float) -> tuple[np.ndarray, np.ndarray]:
    """Interpolate gaps between values at most `longest` samples apart; longer gaps, and the ends, stay missing.

    Parameters
    ----------
    values : array of float, shape (n,)
    longest : float

    Returns
    -------
    filled : array of float, shape (n,)
    bridged : array of int, shape (b, 2)
        Last value before, and first after each bridged gap.

    """
    known = np.flatnonzero(np.isfinite(values))
    apart = np.diff(known)
    gap = np.flatnonzero(apart > 1)
    short = gap[apart[gap] <= longest]
    bridged = np.stack([known[short], known[short + 1]], axis=1)
    filled = values.copy()
    if len(short):
        length = bridged[:, 1] - bridged[:, 0] - 1
        inside = np.repeat(bridged[:, 0] + 1 - np.cumsum(length) + length, length) + np.arange(length.sum())
        filled[inside] = np.interp(inside, known, values[known])
    return filled, bridged


def find_disturbed(values: np.ndarray, chord: int, limit_nt: float) -> np.ndarray:
    """Find samples that depart from a chord between two samples, one before and one after.

    Parameters
    ----------
    values : array of float, shape (n,)
        Variation, nT; NaN where missing.
    chord : int
        Length of the chord in samples.
    limit_nt : float
        A sample that departs further from any chord that spans it is disturbed (common practice: a few nT over 5 to 10
        minutes).

    Returns
    -------
    array of bool, shape (n,)

    """
    disturbed = np.zeros(len(values), bool)
    chord = max(2, chord)
    if len(values) <= chord:
        return disturbed
    first, last = values[:-chord], values[chord:]
    for k in range(1, chord):  # a few: the chord is counted on a coarse clock
        departure = np.abs(values[k : k - chord] - first - (last - first) * (k / chord))
        disturbed[k : k - chord] |= departure > limit_nt
    return disturbed


# -- one station -----------------------------------------------------------------------------------------------------


def station_variation(
    time_utc: np.ndarray,
    total_field_nt: np.ndarray,
    lat: float,
    lon: float,
    height_m: float,
    *,
    settings: Diurnal,
    name: str = "base",
    span_s: tuple[float, float] | None = None,
) -> Station:
    """Turn a station's record into its variation.

    Parameters
    ----------
    time_utc : array of datetime64[ns], shape (n,)
        Increasing, each instant once.
    total_field_nt : array of float, shape (n,)
        NaN where missing.
    lat, lon, height_m : float
        Geodetic position, height above the ellipsoid.
    settings : Diurnal
    name : str
    span_s : tuple of float, optional
        First and last reading of the survey, seconds since 1970; the whole record by default.

    Returns
    -------
    Station

    Raises
    ------
    SurveyError
        If the record holds fewer than two values, or they are further apart than gaps may be.

    """
    known = np.isfinite(total_field_nt)
    where = f"base station {name}"
    if known.sum() < 2:
        raise SurveyError(mistake(where, "must hold at least two values of the total field", int(known.sum())))
    seconds = time_utc[known].astype(np.int64) / NS_PER_S
    step = float(np.median(np.diff(seconds)))
    if step > settings.longest_gap_s:
        must = f"must have values closer together than diurnal.longest_gap_s, {settings.longest_gap_s:g} s"
        raise SurveyError(mistake(where, must, f"one in {step:g} s", "Take one-minute values, or allow longer gaps."))
    clock, raw = _on_clock(seconds, total_field_nt[known], step, settings.low_pass_s / CLOCKS_PER_LOW_PASS)
    time_s = seconds[0] + clock * np.arange(len(raw))
    departure, bridged = bridge(raw - _main_field(time_s, lat, lon, height_m), settings.longest_gap_s / clock)
    sigma = HALF_OF_LINE * settings.low_pass_s / clock
    if sigma > 0.5:
        departure = np.where(np.isfinite(departure), local_fit(departure, sigma, 1), np.nan)
    coarse, slow, disturbed = _coarse_parts(Series(seconds[0], clock, departure), settings)
    found = Station(
        name=name,
        latitude_deg=lat,
        longitude_deg=lon,
        variation=Series(seconds[0], clock, departure),
        coarse=coarse,
        slow=slow,
        disturbed=disturbed,
        known_s=seconds[0] + clock * _runs(np.isfinite(departure)),
        bridged_s=seconds[0] + clock * bridged,
        change_nt=_change(coarse, LAGS_S),
        slow_change_nt=_change(replace(slow, value=np.where(np.isnan(coarse.value), np.nan, slow.value)), SLOW_LAGS_S),
    )
    datum, told = _datum(found, settings, span_s)
    return replace(found.shifted(datum), datum_from=told)


def _on_clock(seconds, values, step, coarsest) -> tuple[float, np.ndarray]:
    """Put values on an even clock: means where it is coarser than the record, else by the record's own slope."""
    # an odd number of samples a tick, so that their mean is of the tick
    many = max(1, 2 * int((coarsest / step - 1) // 2) + 1)
    clock = many * step
    tick = np.rint((seconds - seconds[0]) / clock).astype(np.int64)
    n = int(tick[-1]) + 1
    count = np.bincount(tick, minlength=n)
    if many == 1:
        return clock, np.where(count > 0, np.interp(seconds[0] + clock * np.arange(n), seconds, values), np.nan)
    level = values[0]
    total = np.bincount(tick, weights=values - level, minlength=n)
    return clock, np.where(count > 0, level + total / np.maximum(count, 1), np.nan)


def _main_field(time_s, lat, lon, height_m) -> np.ndarray:
    """Return the main field at the station: exact once a day, between these linear in time."""
    nodes = np.linspace(time_s[0], time_s[-1], int((time_s[-1] - time_s[0]) / DAY_S) + 2)
    year = main_field.decimal_year((nodes * NS_PER_S).astype(np.int64).astype("datetime64[ns]"))
    same = np.ones(len(nodes))
    return np.interp(time_s, nodes, main_field.total_field(lat * same, lon * same, height_m * same, year))


def _coarse_parts(departure: Series, settings: Diurnal) -> tuple[Series, Series, np.ndarray]:
    """Return the departure and its slow part on a clock of about a minute, and where it is disturbed."""
    chord_s = 60.0 * settings.chord_min
    many = max(1, int(min(COARSE_S, chord_s / 8) / departure.step_s))
    n = len(departure.value)
    padded = np.full(-(-n // many) * many, np.nan)
    padded[:n] = departure.value
    blocks = padded.reshape(-1, many)
    good = np.isfinite(blocks)
    count = good.sum(axis=1)
    total = np.where(good, blocks, 0.0).sum(axis=1)
    value = np.where(count > 0, total / np.maximum(count, 1), np.nan)
    step = departure.step_s * many
    coarse = Series(departure.start_s + (many - 1) / 2 * departure.step_s, step, value)
    # up to one sigma outside the record a parabola may be trusted
    slow = _robust_slow(value, HALF_OF_PARABOLA * settings.slow_period_h * 3600 / step, settings.disturbed_nt)
    told = np.flatnonzero(np.isfinite(slow))
    if len(told) == 0:
        told, slow = np.zeros(1, int), np.full(len(slow), np.nanmean(value))
    slow = np.interp(np.arange(len(slow)), told, slow[told])
    disturbed = find_disturbed(value, round(chord_s / step), settings.disturbed_nt)
    return coarse, replace(coarse, value=slow), disturbed


def _robust_slow(value: np.ndarray, sigma: float, disturbed_nt: float) -> np.ndarray:
    """Fit the slow part so that bays and storms, which do not follow local time, stay out of it (bisquare weights)."""
    weight = np.ones(len(value))
    for _ in range(ROUNDS + 1):
        slow = local_fit(value, sigma, 2, least=0.16, weight=weight)
        off = np.abs(value - slow)
        wide = max(6 * np.nanmedian(off), 2 * disturbed_nt) if np.isfinite(off).any() else np.inf
        weight = np.where(off < wide, (1 - (off / wide) ** 2) ** 2, 0.0)
    return slow


def _runs(good: np.ndarray) -> np.ndarray:
    """Return the first and last index of every run of True, shape (k, 2)."""
    edge = np.diff(np.concatenate([[0], good.astype(np.int8), [0]]))
    return np.stack([np.flatnonzero(edge == 1), np.flatnonzero(edge == -1) - 1], axis=1)


def _change(series: Series, lags_s) -> np.ndarray:
    """Return the rms change over lags; one longer than the record gets that of unrelated values."""
    value, changes = series.value, []
    for lag in lags_s:
        k = max(1, round(lag / series.step_s))
        squares = (value[k:] - value[:-k]) ** 2 if k < len(value) else np.zeros(0)
        squares = squares[np.isfinite(squares)]
        changes.append(np.sqrt(squares.mean()) if len(squares) >= 30 else np.sqrt(2.0) * np.nanstd(value))
    return np.maximum.accumulate(changes)


def local_night(time_s: np.ndarray, lon: float) -> np.ndarray:
    """Tell which instants fall in the local night, by mean solar time."""
    hour = (time_s / 3600.0 + lon / 15.0) % 24.0
    return (hour >= NIGHT_H[0]) | (hour < NIGHT_H[1])


def _datum(station: Station, settings: Diurnal, span_s) -> tuple[float, str]:
    """Return the level of a station that counts as no variation, and how it was found."""
    if not isinstance(settings.datum, str):
        return float(settings.datum), "stated"
    value, time_s = station.coarse.value, station.coarse.times()
    good = np.isfinite(value)
    if settings.datum == "quiet_night":
        night = good & ~station.disturbed & local_night(time_s, station.longitude_deg)
        if np.count_nonzero(night) * station.coarse.step_s >= SHORTEST_NIGHT_S:
            return float(np.median(value[night])), "median of quiet local night"
        return float(np.mean(value[good])), "mean of the record, for want of an hour of quiet night"
    during = good if span_s is None else good & (time_s >= span_s[0]) & (time_s <= span_s[1])
    if during.any():
        return float(np.mean(value[during])), "mean during the survey"
    return float(np.mean(value[good])), "mean of the record, which holds nothing during the survey"


# -- several stations ------------------------------------------------------------------------------------------------


def agree_on_datum(stations: list[Station], *, settings: Diurnal) -> tuple[list[Station], list[int]]:
    """Make the datums of stations agree over the time that they have in common.

    Records of different length have their quiet nights in different states of the ring current: where one station takes
    over from another, that difference would be a step in the survey.

    Parameters
    ----------
    stations : list of Station
    settings : Diurnal
        A stated datum is left alone.

    Returns
    -------
    stations : list of Station
        Datums changed by least squares on the median differences of pairs (in common quiet night where there are three
        hours of it), the mean over a group's stations, weighted by the length of their records, left as it was.
    group : list of int
        Number of the group that the station's common time connects it with.

    """
    n = len(stations)
    group = np.arange(n)
    if n < 2 or not isinstance(settings.datum, str):
        return list(stations), [0] * n
    start = min(station.coarse.start_s for station in stations)
    end = max(station.coarse.times()[-1] for station in stations)
    clock = np.arange(start, end + COMMON_S, COMMON_S)
    values, quiet, night = [], [], []
    for station in stations:
        inside = (clock >= station.coarse.start_s) & (clock <= station.coarse.times()[-1])
        values.append(np.where(inside, station.coarse.at(clock), np.nan))
        place = np.clip(
            np.rint((clock - station.coarse.start_s) / station.coarse.step_s), 0, len(station.disturbed) - 1
        )
        quiet.append(inside & ~station.disturbed[place.astype(np.int64)])
        night.append(local_night(clock, station.longitude_deg))
    rows, differences, weights = [], [], []
    for i in range(n):
        for j in range(i + 1, n):
            common = np.isfinite(values[i]) & np.isfinite(values[j])
            best = common & quiet[i] & quiet[j]
            if settings.datum == "quiet_night" and (best & night[i] & night[j]).sum() * COMMON_S >= THREE_HOURS_S:
                best &= night[i] & night[j]
            chosen = best if best.sum() * COMMON_S >= SHORTEST_COMMON_S else common
            if chosen.sum() * COMMON_S < SHORTEST_COMMON_S:
                continue
            row = np.zeros(n)
            row[i], row[j] = 1.0, -1.0
            rows.append(row)
            differences.append(np.median(values[i][chosen] - values[j][chosen]))
            weights.append(np.sqrt(chosen.sum()))
            group[group == group[j]] = group[i]
    if not rows:
        return list(stations), group.tolist()
    weight = np.array(weights)
    change = np.linalg.lstsq(np.array(rows) * weight[:, None], np.array(differences) * weight, rcond=None)[0]
    length = np.array([np.isfinite(value).sum() for value in values])
    for one in np.unique(group):
        own = group == one
        change[own] -= np.average(change[own], weights=np.maximum(length[own], 1))
    return [station.shifted(float(by)) for station, by in zip(stations, change, strict=True)], group.tolist()


def three_hour_ranges(station: Station, start_s: float, end_s: float) -> tuple[float, float] | None:
    """Return the largest three-hour ranges of a station during a span.

    Parameters
    ----------
    station : Station
    start_s, end_s : float
        Seconds since 1970; the three-hour intervals (00-03, 03-06, ... UTC) that it touches count whole.

    Returns
    -------
    tuple of float, or None
        Range of the variation, and of the variation less its slow part (as the regular daily variation is taken off for
        the index K), nT; None where there are no values.

    """
    time_s = station.coarse.times()
    window = (time_s // THREE_HOURS_S).astype(np.int64)
    own = np.isfinite(station.coarse.value)
    own &= (window >= start_s // THREE_HOURS_S) & (window <= end_s // THREE_HOURS_S)
    if not own.any():
        return None
    starts = np.flatnonzero(np.diff(window[own], prepend=-1))
    ranges = []
    for value in (station.coarse.value[own], (station.coarse.value - station.slow.value)[own]):
        ranges.append(float((np.maximum.reduceat(value, starts) - np.minimum.reduceat(value, starts)).max()))
    return ranges[0], ranges[1]
