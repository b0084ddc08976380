"""Value and gradient of what was read along a track, at a place between two readings.

The value is that of a parabola fitted to the readings about the place, over a window of stated length; where they
scatter about it more than their noise allows (chi-squared, one-sided 5 %), the window is halved, up to four times.
Where no window serves, as where readings are far apart, the value is that of the cubic through the four nearest
readings, and what their fourth differences show beyond the noise is added to its sigma: an undersampled quantity cannot
be interpolated better. The gradient is that of the parabola over the whole window, or of a straight line through fewer
than six readings.
"""

import numpy as np

from steps.geodesy import A_M, E2

SIDE = 32  # readings before and after a place that are looked at
HALVINGS = 4
FEWEST = 6  # readings for a parabola
CHI_SQUARED = 1.645  # sigmas by which the scatter about a parabola may exceed the noise
RESOLUTION_NT = 1e-3  # least noise of a reading
UNEVEN = 5.0  # a cubic needs readings whose steps differ by less than this factor
PASSES_AT_ONCE = 4096


def values_at(
    lat: np.ndarray,
    lon: np.ndarray,
    value: np.ndarray,
    sigma: np.ndarray,
    link: np.ndarray,
    before: np.ndarray,
    fraction: np.ndarray,
    *,
    window_m: float,
) -> dict[str, np.ndarray]:
    """Estimate value and along-track gradient at places on tracks.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Positions of the readings, degrees.
    value, sigma : array of float, shape (n,)
        Reading and its noise, nT; NaN where missing.
    link : array of bool, shape (n - 1,)
        Whether a reading is joined to the next.
    before : array of int, shape (p,)
        Reading before each place.
    fraction : array of float, shape (p,)
        Place between that reading and the next.
    window_m : float
        Length of the window, metres.

    Returns
    -------
    dict of str to array of float, shape (p,)
        ``value`` and ``sigma`` (noise, and what interpolation cannot know), nT; ``gradient``, nT per metre in the
        direction of the track; ``east``, ``north``, its unit vector. NaN where a reading beside the place is missing.

    """
    # runs of joined readings: the first and last reading of the run of each place
    ends = np.flatnonzero(~link)
    run = np.searchsorted(ends, before)
    low = np.append(0, ends + 1)[run]
    high = np.append(ends, len(lat) - 1)[run]
    parts = []
    for k in range(0, len(before), PASSES_AT_ONCE):
        part = slice(k, k + PASSES_AT_ONCE)
        parts.append(_values_at(lat, lon, value, sigma, before[part], fraction[part], low[part], high[part], window_m))
    names = ("value", "sigma", "gradient", "east", "north")
    return {name: np.concatenate([part[k] for part in parts]) if parts else np.zeros(0) for k, name in enumerate(names)}


def _values_at(lat, lon, value, sigma, before, fraction, low, high, window_m):
    """Do what `values_at` promises for some places; `low` and `high` bound the run of readings of each."""
    lat_0, lon_0 = lat[before], lon[before]

    def plane(index, which=slice(None)):
        return _plane(lat[index], lon[index], lat_0[which], lon_0[which])

    far_low, far_high = np.maximum(before - 8, low), np.minimum(before + 9, high)
    (x_a, y_a), (x_b, y_b) = plane(far_low), plane(far_high)
    step = np.hypot(x_b - x_a, y_b - y_a) / (far_high - far_low)
    stride = np.ceil(window_m / 2 / SIDE / np.maximum(step, 1e-3))
    stride = np.clip(stride, 1, np.maximum((high - low) // SIDE, 1)).astype(np.int64)
    away = np.arange(SIDE)[:, None] * stride
    index = np.concatenate([before - away[::-1], before + 1 + away])
    inside = (index >= low) & (index <= high)
    index = np.where(inside, index, before)
    beside = slice(SIDE - 1, SIDE + 1)

    x, y = plane(index)
    x_0, y_0 = (part[SIDE - 1] * (1 - fraction) + part[SIDE] * fraction for part in (x, y))
    x, y = x - x_0, y - y_0
    within = inside & (x**2 + y**2 <= (window_m / 2) ** 2)
    within[beside] = True
    # distance along the chord of what lies within the window
    first, last = within.argmax(axis=0), 2 * SIDE - 1 - within[::-1].argmax(axis=0)
    column = np.arange(len(before))
    east, north = x[last, column] - x[first, column], y[last, column] - y[first, column]
    back = np.hypot(east, north) == 0  # it came back to the very same place
    east = np.where(back, x[SIDE] - x[SIDE - 1], east)
    north = np.where(back, y[SIDE] - y[SIDE - 1], north)
    east, north = east / np.hypot(east, north), north / np.hypot(east, north)
    s = x * east + y * north
    v = value[index]
    level = v[SIDE - 1]  # taken off, and put back, to keep digits
    known = np.isfinite(v[beside]).all(axis=0)
    v = np.where(np.isfinite(v), v - level, 0.0)
    good = within & np.isfinite(value[index])
    noise = np.maximum(np.nan_to_num((sigma[before] + sigma[index[SIDE]]) / 2), RESOLUTION_NT)

    found, spread, gradient = (np.full(len(before), np.nan) for _ in range(3))
    waiting = np.flatnonzero(known)
    for halving in range(HALVINGS + 1):
        use = good[:, waiting] & (np.abs(s[:, waiting]) <= window_m / 2 / 2**halving)
        use[beside] = True
        number, at_place, factor, slope, scatter = _parabola(s[:, waiting], v[:, waiting], use)
        if halving == 0:
            gradient[waiting] = slope
        freedom = np.maximum(number - 3, 1)
        fits = scatter <= noise[waiting] ** 2 * (freedom + CHI_SQUARED * np.sqrt(2 * freedom))
        fits &= (number >= FEWEST) & np.isfinite(factor)
        done = waiting[fits]
        found[done], spread[done] = at_place[fits], noise[done] * np.sqrt(factor[fits])
        waiting = waiting[~fits]
    if len(waiting):
        around = before[waiting] + np.arange(-3, 5)[:, None]
        there = (around >= low[waiting]) & (around <= high[waiting])
        around = np.where(there, around, before[waiting])
        near = np.where(there, value[around], np.nan) - level[waiting]
        x, y = plane(around[2:6], waiting)
        place = (x - x_0[waiting]) * east[waiting] + (y - y_0[waiting]) * north[waiting]
        found[waiting], spread[waiting] = _through_four(place, near, fraction[waiting], noise[waiting])
    return found + level, spread, gradient, east, north


def _plane(lat, lon, lat_0, lon_0):
    """Return metres east and north of an origin near by, good to 1e-4 of the distance except beside a pole."""
    rise = np.radians(lat - lat_0)
    turn = np.radians((lon - lon_0 + 180.0) % 360.0 - 180.0)
    sine = np.sin(np.radians(lat_0))
    curve = 1 - E2 * sine**2
    narrow = np.cos(np.radians(lat_0)) - sine * rise / 2
    return turn * narrow * A_M / np.sqrt(curve), rise * A_M * (1 - E2) / curve**1.5


def _parabola(s, v, use):
    """Fit parabolas to columns of readings; return what is wanted of them at s = 0.

    Returns
    -------
    number, value, factor, slope, scatter : array, shape (p,)
        Readings used; the parabola at 0; the factor from the variance of a reading to its; its slope at 0, or that of a
        straight line for few readings; the sum of squares about the parabola.

    """
    number = use.sum(axis=0)
    weight = use.astype(float)

    def total(part):
        return np.einsum("kp,kp->p", weight, part)

    with np.errstate(invalid="ignore", divide="ignore"):
        middle = total(s) / number
        one = s - middle  # orthogonal polynomials of degree one and two over the readings used
        square_1 = total(one**2)
        mean_2, tilt = square_1 / number, total(one**3) / square_1
        two = one**2 - tilt * one - mean_2
        square_2 = total(two**2)
        c_0, c_1, c_2 = total(v) / number, total(v * one) / square_1, total(v * two) / square_2
        one_0, two_0 = -middle, middle**2 + tilt * middle - mean_2
        scatter = total((v - c_0 - c_1 * one - c_2 * two) ** 2)
        factor = 1 / number + one_0**2 / square_1 + two_0**2 / square_2
        curved = np.where((number >= FEWEST) & (square_2 > 0), c_2 * (2 * one_0 - tilt), 0.0)
        return number, c_0 + c_1 * one_0 + c_2 * two_0, factor, c_1 + curved, scatter


def _through_four(s, near, fraction, noise):
    """Interpolate by the cubic through four readings, or, where there are not four in good order, by a straight line.

    Parameters
    ----------
    s : array, shape (4, p)
        Distance of the four readings along the track, 0 at the place.
    near : array, shape (8, p)
        Values of eight readings, the same four in their middle; NaN where there is none.
    fraction, noise : array, shape (p,)

    Returns
    -------
    value, sigma : array, shape (p,)

    """
    step = np.diff(s, axis=0)
    orderly = np.isfinite(near[2:6]).all(axis=0) & (step > 0).all(axis=0)
    orderly &= step.max(axis=0) < UNEVEN * step.min(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        weight = np.stack([np.prod([s[m] / (s[m] - s[k]) for m in range(4) if m != k], axis=0) for k in range(4)])
    straight = np.stack([0 * fraction, 1 - fraction, fraction, 0 * fraction])
    weight = np.where(orderly, weight, straight)
    value = (weight * np.nan_to_num(near[2:6])).sum(axis=0)
    # what white noise would have to be for these fourth differences, or second or first ones where there are no more
    excess = np.full(len(fraction), np.nan)
    for order, gain in ((4, 70.0), (2, 6.0), (1, 2.0)):
        square = np.diff(near, order, axis=0) ** 2
        count = np.isfinite(square).sum(axis=0)
        mean = np.nansum(square, axis=0) / np.maximum(count, 1) / gain
        excess = np.where(np.isnan(excess) & (count > 0), mean, excess)
    excess = np.maximum(excess - noise**2, 0.0)
    return value, np.sqrt((weight**2).sum(axis=0) * noise**2 + excess)
