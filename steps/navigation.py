"""Bring the ship's navigation onto an even clock: gate impossible fixes, join runs, smooth, average the gyro.

Directions are unit vectors throughout and positions Earth-centred vectors (see `steps.geodesy`).
"""

from dataclasses import dataclass

import numpy as np

from steps import geodesy
from steps.settings import Position

COARSEST_CLOCK_S, FINEST_CLOCK_S = 10.0, 0.2
SLACK_M = 10.0  # what a good fix may be off
MOST_TAKEN_BACK = 30  # fixes before a jump that may be the bad ones


def gate_fixes(time_s: np.ndarray, vectors: np.ndarray, fastest_mps: float) -> np.ndarray:
    """Tell which fixes fit together at a possible speed.

    The record is cut wherever a step needs more than the fastest speed. From the longest stretch outwards, each further
    stretch is taken if it can be reached in time from the last fix taken. If it cannot, the fewest fixes are left out:
    the whole stretch, its first ones, or the last ones taken before. So single bad fixes, runs of them, a bad first fix
    and a bad last fix before a jump are left out, and no more.

    Parameters
    ----------
    time_s : array of float, shape (n,)
        Times, increasing.
    vectors : array of float, shape (3, n)
        Earth-centred positions, metres.
    fastest_mps : float
        Fastest speed over ground.

    Returns
    -------
    array of bool, shape (n,)
        True for fixes that are kept.

    """
    n = len(time_s)
    if n < 2:
        return np.ones(n, bool)

    def reachable(one, many):
        away = np.linalg.norm(vectors[:, many] - vectors[:, [one]], axis=0)
        return away <= fastest_mps * np.abs(time_s[many] - time_s[one]) + SLACK_M

    step = np.linalg.norm(np.diff(vectors, axis=1), axis=0)
    jump = np.flatnonzero(step > fastest_mps * np.diff(time_s) + SLACK_M)
    stretches = np.split(np.arange(n), jump + 1)
    longest = int(np.argmax([len(stretch) for stretch in stretches]))
    keep = np.zeros(n, bool)
    keep[stretches[longest]] = True
    own = stretches[longest].tolist()
    before = [stretch[::-1] for stretch in stretches[:longest][::-1]]
    for taken, outwards in ((own[-MOST_TAKEN_BACK:], stretches[longest + 1 :]), (own[MOST_TAKEN_BACK::-1], before)):
        for stretch in outwards:
            from_last = reachable(taken[-1], stretch)
            first = int(np.argmax(from_last)) if from_last.any() else len(stretch)
            if first:
                back = np.flatnonzero(reachable(stretch[0], np.array(taken)))
                undo = len(taken) - 1 - int(back[-1]) if len(back) else len(stretch) + 1
                if undo < min(first, len(stretch)):
                    keep[taken[len(taken) - undo :]] = False
                    del taken[len(taken) - undo :]
                    first = 0
            keep[stretch[first:]] = True
            taken = [*taken, *stretch[first:].tolist()][-MOST_TAKEN_BACK:]
    return keep


def smooth(values: np.ndarray, sigma: float) -> np.ndarray:
    """Smooth even samples with a kernel that leaves parabolas as they are.

    The kernel is the Gaussian times (3 - t^2 / sigma^2) / 2, whose second moment vanishes: at angular frequency w it
    passes (1 + u) exp(-u) with u = (sigma w)^2 / 2, so that a turn of 900 m radius at 5 m/s is 5 mm too narrow with
    sigma = 15 s. White noise falls to sqrt(0.476 / sigma) of itself.

    Parameters
    ----------
    values : array of float, shape (k, n)
        Even samples along the last axis.
    sigma : float
        In samples; below 0.3 nothing is done.

    Returns
    -------
    array of float, shape (k, n)

    """
    n = values.shape[-1]
    half = min(int(np.ceil(6 * sigma)), n - 1)
    if sigma < 0.3 or half < 1:
        return values
    from scipy.signal import oaconvolve

    t = np.arange(-half, half + 1) / sigma
    kernel = np.exp(-(t**2) / 2) * (3 - t**2) / 2
    kernel /= kernel.sum()
    before = 2 * values[:, :1] - values[:, half:0:-1]
    after = 2 * values[:, -1:] - values[:, -2 : -half - 2 : -1]
    padded = np.concatenate([before, values, after], axis=1)
    return oaconvolve(padded, kernel[None], mode="valid", axes=1)


@dataclass
class Track:
    """A run of the ship's track without a long gap, on an even clock.

    Attributes
    ----------
    time_s : array of float, shape (n,)
        Seconds after the survey's first fix.
    vectors : array of float, shape (3, n)
        Antenna, Earth-centred, metres.
    lat, lon : array of float, shape (n,)
        The same, degrees.

    """

    time_s: np.ndarray
    vectors: np.ndarray
    lat: np.ndarray
    lon: np.ndarray


def make_tracks(time_s: np.ndarray, vectors: np.ndarray, *, settings: Position) -> list[Track]:
    """Join gated fixes into runs, put each on an even clock and smooth it.

    Parameters
    ----------
    time_s : array of float, shape (n,)
        Times of the fixes, increasing.
    vectors : array of float, shape (3, n)
        Earth-centred positions, metres.
    settings : Position
        Longest gap, smoothing.

    Returns
    -------
    list of Track
        In order of time; runs of a single fix are left out.

    """
    tracks = []
    breaks = np.flatnonzero(np.diff(time_s) > settings.longest_gap_s) + 1
    for run in np.split(np.arange(len(time_s)), breaks):
        if len(run) < 2:
            continue
        own = time_s[run]
        interval = float(np.clip(np.median(np.diff(own)), FINEST_CLOCK_S, COARSEST_CLOCK_S))
        count = max(2, round((own[-1] - own[0]) / interval) + 1)
        even = np.linspace(own[0], own[-1], count)
        origin = vectors[:, run[0]][:, None]  # differences of neighbours, not of the Earth's radius
        local = vectors[:, run] - origin
        placed = np.stack([np.interp(even, own, part) for part in local])
        step = even[1] - even[0]
        # Fixes further apart than the smoothing time would be smeared, not smoothed.
        if settings.smoothing_s > 2 * np.median(np.diff(own)):
            placed = smooth(placed, settings.smoothing_s / 2 / step)
        placed = placed + origin
        lat, lon = geodesy.to_degrees(placed)
        tracks.append(Track(even, placed, lat, lon))
    return tracks


def directions(east: np.ndarray, north: np.ndarray) -> np.ndarray:
    """Return the direction of motion at every point of a path from the steps between them, radians.

    The direction of a standing ship is that in which it last moved.
    """
    east = np.concatenate([east[:1], east[1:] + east[:-1], east[-1:]])
    north = np.concatenate([north[:1], north[1:] + north[:-1], north[-1:]])
    moved = np.hypot(east, north) > 1e-6
    last = np.maximum.accumulate(np.where(moved, np.arange(len(moved)), -1))
    last = np.where(last < 0, np.argmax(moved), last)
    return np.arctan2(east, north)[last]


def interpolate_angle(at, time, angle_rad) -> np.ndarray:
    """Interpolate angles as unit vectors; radians in and out."""
    return np.arctan2(np.interp(at, time, np.sin(angle_rad)), np.interp(at, time, np.cos(angle_rad)))


def heading_on_clock(at: np.ndarray, time_s: np.ndarray, heading_rad: np.ndarray, longest_gap_s: float):
    """Average gyro headings about the ticks of an even clock, as unit vectors.

    Parameters
    ----------
    at : array of float, shape (n,)
        Ticks, seconds.
    time_s, heading_rad : array of float, shape (m,)
        Gyro.
    longest_gap_s : float
        Ticks further than this from a gyro value have none.

    Returns
    -------
    heading : array of float, shape (n,)
        Radians, NaN where there is none.

    """
    if len(time_s) == 0:
        return np.full(len(at), np.nan)
    step = at[1] - at[0]
    nearest = np.rint((time_s - at[0]) / step).astype(np.int64)
    inside = (nearest >= 0) & (nearest < len(at))
    count = np.bincount(nearest[inside], minlength=len(at))
    sine = np.bincount(nearest[inside], np.sin(heading_rad[inside]), len(at))
    cosine = np.bincount(nearest[inside], np.cos(heading_rad[inside]), len(at))
    heading = np.where(count > 0, np.arctan2(sine, cosine), interpolate_angle(at, time_s, heading_rad))
    after = np.searchsorted(time_s, at)
    left = at - time_s[np.maximum(after - 1, 0)]
    right = time_s[np.minimum(after, len(time_s) - 1)] - at
    left = np.where(after == 0, np.inf, left)
    right = np.where(after == len(time_s), np.inf, right)
    known = (count > 0) | (left + right <= longest_gap_s) | (np.minimum(left, right) <= step)
    return np.where(known, heading, np.nan)
