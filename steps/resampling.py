"""Resample irregular readings along a line to even samples, without aliasing, without bridging long gaps.

Between neighbouring readings the quantity is taken as straight, and that broken line is averaged, exactly, with a
windowed-sinc kernel (Kaiser window; Kaiser & Schafer 1980, IEEE Trans. ASSP 28). With samples every h, wavelengths of
3.4 h and more pass with a gain within 1 % of one, 2.5 h with a half, and those of 2 h (the new Nyquist) and less with
under 1 %. Level and slope are kept at every sample; beside an end or a gap the broken line is continued by its
reflection in the point that a straight fit to the last h gives; a stretch shorter than h is a straight line. All is
linear, so that samples are a sparse matrix of weights on the readings, from which the noise of each sample follows.
"""

import functools
from dataclasses import dataclass

import numpy as np

HALF_WIDTH = 8  # of the kernel, in samples
CUTOFF = 0.8  # of the Nyquist wavenumber, where the gain is one half
KAISER_BETA = 5.0
CELLS = 10  # readings closer than a tenth of a sample are averaged first
TABLE = 4096  # entries of the kernel's integrals for each sample


@dataclass(frozen=True)
class EvenSamples:
    """Even samples of a line as weights on its readings.

    Attributes
    ----------
    at_km : array of float, shape (m,)
        Distances of the samples, multiples of the spacing.
    weights : scipy.sparse.csr_array, shape (m, n)
        Weights on the readings; empty rows where there is no sample.
    present : array of bool, shape (m,)
        Whether there is a sample.

    """

    at_km: np.ndarray
    weights: object
    present: np.ndarray

    def mean(self, values: np.ndarray) -> np.ndarray:
        """Return the samples of readings, shape (n,) or (n, k); NaN where there is none.

        Only readings that were given as usable count; the others may hold anything.
        """
        values = np.where(np.isfinite(values), values, 0.0)
        level = values.mean(axis=0) if len(values) else 0.0  # keeps digits of a total field
        out = self.weights @ (values - level) + level
        out[~self.present] = np.nan
        return out

    def noise(self, sigma: np.ndarray) -> np.ndarray:
        """Return one sigma of the samples, shape (m,), from that of independent readings."""
        out = np.sqrt(self.weights.multiply(self.weights) @ np.where(np.isfinite(sigma), sigma, 0.0) ** 2)
        return np.where(self.present, out, np.nan)


def even_samples(
    distance_km: np.ndarray,
    usable: np.ndarray | None = None,
    *,
    spacing_km: float,
    longest_gap_km: float,
    between_km: tuple[float, float] | None = None,
) -> EvenSamples:
    """Find the weights of readings in even samples.

    Where the ship turned back by more than a spacing, what it ran twice counts once, the first time; a smaller step
    back (a wave, a jitter of position) is put in order.

    Parameters
    ----------
    distance_km : array of float, shape (n,)
        Distance of the readings along the line, in the order in which they were run, in either sense.
    usable : array of bool, shape (n,), optional
        Readings that count; all by default.
    spacing_km : float
        Of the samples.
    longest_gap_km : float
        Longer stretches without a usable reading get no samples.
    between_km : tuple of float, optional
        First and last distance to be covered; by default those of the usable readings.

    Returns
    -------
    EvenSamples

    """
    from scipy.sparse import csr_array, vstack

    x = np.asarray(distance_km, float)
    usable = np.isfinite(x) if usable is None else usable & np.isfinite(x)
    index = once_run(x, np.flatnonzero(usable), spacing_km)
    span = between_km or ((x[index[0]], x[index[-1]]) if len(index) else (0.0, -spacing_km))
    ticks = np.arange(np.ceil(span[0] / spacing_km - 1e-6), np.floor(span[1] / spacing_km + 1e-6) + 1) + 0.0
    present = np.zeros(len(ticks), bool)
    blocks, done = [], 0
    for run in np.split(index, np.flatnonzero(np.diff(x[index]) > longest_gap_km) + 1):
        if len(run) < 2 or x[run[-1]] <= x[run[0]]:
            continue
        low = max(int(np.searchsorted(ticks * spacing_km, x[run[0]] - 1e-6 * spacing_km)), done)
        high = int(np.searchsorted(ticks * spacing_km, x[run[-1]] + 1e-6 * spacing_km, side="right"))
        if high <= low:
            continue
        weights = _weights(x[run] / spacing_km, ticks[low:high])
        spread = csr_array((np.ones(len(run)), (np.arange(len(run)), run)), shape=(len(run), len(x)))
        blocks += [csr_array((low - done, len(x))), weights @ spread]
        present[low:high] = True
        done = high
    blocks.append(csr_array((len(ticks) - done, len(x))))
    return EvenSamples(ticks * spacing_km, csr_array(vstack(blocks, format="csr")), present)


def resample_evenly(
    distance_km: np.ndarray, values: np.ndarray, *, spacing_km: float, longest_gap_km: float
) -> tuple[np.ndarray, np.ndarray]:
    """Resample one quantity; see `even_samples`.

    Parameters
    ----------
    distance_km, values : array of float, shape (n,)
        Readings in the order in which they were run; NaN where missing.
    spacing_km, longest_gap_km : float

    Returns
    -------
    at_km, samples : array of float, shape (m,)
        NaN in gaps.

    """
    values = np.asarray(values, float)
    even = even_samples(distance_km, np.isfinite(values), spacing_km=spacing_km, longest_gap_km=longest_gap_km)
    return even.at_km, even.mean(values)


def once_run(x: np.ndarray, index: np.ndarray, spacing: float) -> np.ndarray:
    """Return readings in order of distance, without those of stretches that the ship ran again after turning back.

    Parameters
    ----------
    x : array of float, shape (n,)
        Distances in the order in which they were run, in either sense.
    index : array of int, shape (p,)
        Readings that count.
    spacing : float
        A retreat up to this length is jitter.

    """
    if len(index) == 0:
        return index
    t = x[index]
    if t[-1] < t[0]:
        t = -t
    behind = np.maximum.accumulate(t) - t
    edges = np.flatnonzero(np.diff(behind > 0, prepend=False))
    starts, ends = edges[::2], np.append(edges[1::2], len(t))[: len(edges[::2])]
    if len(starts):
        pairs = np.stack([starts, ends], axis=1).ravel()
        deep = np.maximum.reduceat(np.append(behind, 0.0), pairs)[::2] > spacing
        drop = np.zeros(len(t) + 1, np.int64)
        np.add.at(drop, starts[deep], 1)
        np.add.at(drop, ends[deep], -1)
        index = index[np.cumsum(drop[:-1]) == 0]
    return index[np.argsort(x[index], kind="stable")]


def _weights(x: np.ndarray, ticks: np.ndarray):
    """Return the sparse weights of one run of readings at `x`, in spacings and in order, in samples at `ticks`."""
    from scipy.sparse import csr_array

    # readings that are all but at one place become one node
    cell = np.floor((x - x[0]) * CELLS).astype(np.int64)
    first = np.flatnonzero(np.diff(cell, prepend=-1))
    if len(first) == 1:
        first = np.array([0, len(x) - 1])
    node = np.cumsum(np.isin(np.arange(len(x)), first)) - 1
    count = np.bincount(node)
    s = np.bincount(node, x) / count
    average = csr_array((1.0 / count[node], (node, np.arange(len(x)))), shape=(len(count), len(x)))

    if s[-1] - s[0] < 1.0:
        return csr_array(_straight(s, ticks)) @ average
    places, continued = _continued(s)
    return csr_array(_kernel_weights(places, ticks) @ continued @ average)


def _straight(s: np.ndarray, at: np.ndarray) -> np.ndarray:
    """Return the weights of nodes in the straight line of least squares through them, at places; one row a place."""
    off = s - s.mean()
    return 1 / len(s) + np.outer(at - s.mean(), off) / (off @ off)


def _continued(s: np.ndarray):
    """Continue nodes beyond both ends by reflection in the fitted end points, as far as the kernel reaches.

    Returns
    -------
    places : array, shape (q,)
        In order, the nodes themselves among them.
    values : sparse array, shape (q, m)
        As weights on the nodes.

    """
    from scipy.sparse import csr_array, eye_array, vstack

    reach = HALF_WIDTH + 1
    ends = []
    for side in (s, -s[::-1]):
        near = np.arange(np.searchsorted(side, side[0] + 1.0, side="right"))
        weight = _straight(side[near], side[:1])[0] if len(near) > 2 else (near == 0) * 1.0
        ends.append(np.append(weight, np.zeros(len(s) - len(near))))
    ends = [csr_array(ends[0][None]), csr_array(ends[1][None, ::-1])]
    places, values = s, eye_array(len(s), format="csr")
    while places[0] > s[0] - reach or places[-1] < s[-1] + reach:
        for end, weight in zip((s[0], s[-1]), ends, strict=True):
            first = end == s[0]
            beyond = places > end if first else places < end
            beyond &= np.abs(places - end) < reach + (s[-1] - s[0])
            source = np.flatnonzero(beyond)[::-1]
            twice = csr_array(np.full((len(source), 1), 2.0)) @ weight
            mirrored = 2 * end - places[source], csr_array(twice - values[source])
            own = np.flatnonzero(places >= end if first else places <= end)
            kept = places[own], values[own]
            parts = (mirrored, kept) if first else (kept, mirrored)
            places = np.concatenate([part[0] for part in parts])
            values = vstack([part[1] for part in parts], format="csr")
    return places, values


def _kernel_weights(s: np.ndarray, ticks: np.ndarray):
    """Return the weights of nodes at `s`, in order, that average the broken line through them about each tick."""
    from scipy.sparse import csr_array

    low = np.maximum(np.searchsorted(s, ticks - HALF_WIDTH, side="right") - 1, 0)
    high = np.minimum(np.searchsorted(s, ticks + HALF_WIDTH) + 1, len(s))
    count = high - low
    row = np.repeat(np.arange(len(ticks)), count)
    offsets = np.concatenate([[0], np.cumsum(count)])
    column = np.arange(offsets[-1]) - np.repeat(offsets[:-1] - low, count)
    u = ticks[row] - s[column]
    once, twice = _tables()
    second = _looked_up(twice, u) + np.maximum(u - HALF_WIDTH, 0.0)
    # a weight is the change of slope of the second integral at the node; beyond the last nodes its derivative goes on
    slope = np.diff(second) / np.diff(u)
    starts, ends = offsets[:-1], offsets[1:] - 1
    weight = np.empty(len(u))
    weight[1:-1] = slope[:-1] - slope[1:]
    weight[starts] = _looked_up(once, u[starts]) - slope[starts]
    weight[ends] = slope[ends - 1] - _looked_up(once, u[ends])
    weight /= np.add.reduceat(weight, starts)[row]
    return csr_array((weight, column, offsets), shape=(len(ticks), len(s)))


@functools.cache
def _tables() -> tuple[np.ndarray, np.ndarray]:
    """Return the first and the second integral of the kernel on a grid of 1 / TABLE samples."""
    u = np.arange(-HALF_WIDTH * TABLE, HALF_WIDTH * TABLE + 1) / TABLE
    kernel = np.sinc(CUTOFF * u) * np.i0(KAISER_BETA * np.sqrt(np.maximum(1 - (u / HALF_WIDTH) ** 2, 0.0)))
    once = np.concatenate([[0.0], np.cumsum(kernel[1:] + kernel[:-1])])
    once /= once[-1]
    return once, np.concatenate([[0.0], np.cumsum(once[1:] + once[:-1])]) / (2 * TABLE)


def _looked_up(table: np.ndarray, u: np.ndarray) -> np.ndarray:
    """Interpolate a table of `_tables` at u, in samples; beyond the kernel its end values."""
    place = (u + HALF_WIDTH) * TABLE
    np.clip(place, 0, len(table) - 1.001, out=place)
    k = place.astype(np.int32)
    return table[k] + (place - k) * (table[k + 1] - table[k])
