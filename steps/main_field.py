"""Main field of the Earth at the sensor: the International Geomagnetic Reference Field, 14th generation (IGRF-14).

Source: IAGA Working Group V-MOD; the previous generation is described by Alken et al. (2021), Earth, Planets and Space
73:49. Degree and order 13, reference radius 6371.2 km, Schmidt semi-normalised coefficients, linear in decimal years
between epochs; valid from 1900.0 to 2030.0. Positions are geodetic on WGS 84.

Two forms. `field_vector` and `total_field` sum the series at every point. `total_field_along` sums it at few points
and interpolates, in blocks of position, so that a straight track, a weaving one and scattered points are all the same
to it. Between two epochs the vector is linear in time, so the *square* of the magnitude is exactly quadratic in time:
it is that square which is interpolated, by bicubics in latitude and longitude through 4 x 4 Chebyshev nodes, linear in
height within a layer, for each of the three powers of time.
"""

import functools
from pathlib import Path

import numpy as np
import pandas as pd

from steps import stage
from steps.errors import SurveyError, mistake

RADIUS_KM = 6371.2
A_KM, FLATTENING = 6378.137, 1 / 298.257223563  # WGS 84
FIRST_YEAR, LAST_YEAR, EPOCH_YEARS = 1900.0, 2030.0, 5.0
DEGREE = 13
POINTS_AT_ONCE = 8192  # enough to outweigh the cost of a call, few enough for the cache

# Blocks: side in degrees of latitude, and what it may cost, nT (over the globe at all epochs 0.0063 and 0.0006 found).
BLOCK_ERROR_NT = {2.0: 0.01, 1.0: 0.001}
NODES = 4
LAYER_M = 250.0
WIDEST = 5  # meridians converge: a block at high latitude is up to so many times wider, in degrees of longitude
FEWEST_IN_BLOCK = 48  # below this the sum itself is cheaper than setting up a block
SHORT_RUN = 256  # runs of readings shorter than this are brought together before a block is evaluated
PIECE = 1 << 19  # points worked on together: what bounds the memory
HIGHEST_M = 12_000.0


def decimal_year(time_utc) -> np.ndarray:
    """Return times as decimal years: year + (day of year - 1 + fraction of day) / days in that year.

    Parameters
    ----------
    time_utc : array of datetime64, shape (n,)
        UTC.

    Returns
    -------
    array of float, shape (n,)

    Raises
    ------
    ValueError
        For a time that is missing (NaT).

    """
    time = np.asarray(time_utc, "datetime64[ns]")
    if not time.size:
        return np.zeros(time.shape)
    if np.isnat(time.min()):
        raise ValueError("times must be known to be turned into decimal years; at least one is missing")
    first, last = (int(t.astype("datetime64[Y]").astype(np.int64)) for t in (time.min(), time.max()))
    starts = np.arange(first, last + 2).astype("datetime64[Y]").astype("datetime64[ns]").astype(np.int64)
    since = time.astype(np.int64)
    if first == last:
        return first + 1970 + (since - starts[0]) / (starts[1] - starts[0])
    place = np.searchsorted(starts, since, side="right") - 1
    return first + 1970 + place + (since - starts[place]) / np.diff(starts)[place]


@functools.cache
def coefficients() -> tuple[np.ndarray, np.ndarray]:
    """Return the epochs and the Gauss coefficients.

    Returns
    -------
    epochs : array of float, shape (27,)
        Years.
    values : array of float, shape (27, 14, 14, 2)
        nT; ``values[e, n, m, 0]`` is g, ``values[e, n, m, 1]`` is h of degree n and order m.

    """
    path = Path(__file__).with_name("main_field_igrf14.csv")
    rows = [line.split(",") for line in path.read_text(encoding="ascii").splitlines() if not line.startswith("#")]
    epochs = np.array(rows[0][2:], float)
    values = np.zeros((len(epochs), DEGREE + 1, DEGREE + 1, 2))
    for n, m, *series in rows[1:]:
        values[:, int(n), abs(int(m)), int(int(m) < 0)] = np.array(series, float)
    return epochs, values


def _check(year, *places) -> None:
    """Refuse dates and places for which there is no main field."""
    if not year.size:
        return
    for part in (year, *places):
        if not (np.isfinite(part.min()) and np.isfinite(part.max())):
            raise ValueError("positions, heights and dates of the main field must be finite; at least one is not")
    for outside in (year.min(), year.max()):
        if not FIRST_YEAR <= outside <= LAST_YEAR:
            raise ValueError(f"IGRF-14 is valid from 1900.0 to 2030.0, not at {outside:.3f}")


# -- the sum ---------------------------------------------------------------------------------------------------------


@functools.lru_cache(maxsize=32)
def _matrices(interval: int) -> list[np.ndarray]:
    """Return, for every order m, what turns the functions Q(n, m) of `_sum` into sums over n.

    Each is of shape (3, 2, 2, 14 - m): factors n, sqrt((n + 1)^2 - m^2) of the next degree, and 1; by g and h; by value
    at the first epoch of the interval and change over it.
    """
    values = coefficients()[1]
    sets = np.stack([values[interval], values[interval + 1] - values[interval]])
    result = []
    for m in range(DEGREE + 1):
        n = np.arange(m, DEGREE + 1)
        scale = np.cumprod(np.concatenate([[1.0], (2 * n[1:] - 1) / np.sqrt(n[1:] ** 2 - m * m)]))
        gh = np.moveaxis(sets[:, m:, m], 2, 0)
        following = np.zeros_like(gh)
        following[..., :-1] = gh[..., 1:] * np.sqrt(n[1:] ** 2 - m * m)
        result.append(np.stack([gh * n, following, gh]) * scale)
    return result


def _sum(cos_theta, sin_theta, lon, radius_km, matrices):
    """Sum the series at points, for one or more sets of coefficients.

    The recursion runs, for every order m, on Q(n), which is P(n, m) (a/r)^(n+2) but for a factor that `_matrices` puts
    into the coefficients: Q(n) = cos(theta) (a/r) Q(n-1) - b (a/r)^2 Q(n-2). For m > 0 it is divided by sin(theta), so
    that it is finite at the poles. The derivative sin(theta) dP/dtheta = n cos(theta) P(n) - sqrt(n^2 - m^2) P(n-1), so
    that all sums over n are one product of a matrix of coefficients with the matrix of the Q(n).

    Parameters
    ----------
    cos_theta, sin_theta, lon, radius_km : array of float, shape (n,)
        Geocentric colatitude, longitude in radians, radius.
    matrices : list of array of float, shape (3, 2, k, 14 - m)
        From `_matrices`, for k sets of coefficients.

    Returns
    -------
    array of float, shape (3, k, n)
        Geocentric north, east, down for every set, nT.

    """
    sets, points = matrices[0].shape[2], lon.size
    ratio = RADIUS_KM / radius_km
    c_ratio, s_ratio, ratio_2 = cos_theta * ratio, sin_theta * ratio, ratio * ratio
    cos_lon, sin_lon = np.cos(lon), np.sin(lon)
    cos_m, sin_m = cos_lon.copy(), sin_lon.copy()
    diagonal = ratio_2.copy()  # Q(m, m)
    q = np.empty((DEGREE + 1, points))
    sums = np.empty((3, 2, sets, points))
    total, east = np.zeros((3, sets, points)), np.zeros((sets, points))
    spare, other, mixed = np.empty(points), np.empty(points), np.empty((3, sets, points))
    for m, matrix in enumerate(matrices):
        if m == 1:
            diagonal *= ratio
        elif m > 1:
            diagonal *= s_ratio
            diagonal *= np.sqrt((2 * m - 1) / (2 * m))
            np.multiply(cos_m, sin_lon, out=spare)
            np.multiply(sin_m, sin_lon, out=other)
            cos_m *= cos_lon
            cos_m -= other
            sin_m *= cos_lon
            sin_m += spare
        q[0] = diagonal
        if m < DEGREE:
            np.multiply(diagonal, c_ratio, out=q[1])
        for n in range(m + 2, DEGREE + 1):
            np.multiply(q[n - m - 2], ratio_2, out=spare)
            spare *= ((n - 1) ** 2 - m * m) / ((2 * n - 1) * (2 * n - 3))
            np.multiply(q[n - m - 1], c_ratio, out=q[n - m])
            q[n - m] -= spare
        np.matmul(matrix.reshape(-1, DEGREE + 1 - m), q[: DEGREE + 1 - m], out=sums.reshape(-1, points))
        if m == 0:
            slope = cos_theta * sums[0, 0] - ratio * sums[1, 0]
            north_0 = slope / np.where(sin_theta > 1e-12, sin_theta, np.inf)
            down_0 = -(sums[0, 0] + sums[2, 0])
            continue
        total += np.multiply(sums[:, 0], cos_m, out=mixed)
        total += np.multiply(sums[:, 1], sin_m, out=mixed)
        np.multiply(sums[2, 0], sin_m, out=mixed[0])
        np.multiply(sums[2, 1], cos_m, out=mixed[1])
        mixed[0] -= mixed[1]
        mixed[0] *= m
        east += mixed[0]
    north = north_0 + cos_theta * total[0] - ratio * total[1]
    return np.stack([north, east, down_0 - sin_theta * (total[0] + total[2])])


def _sum_geodetic(lat, lon, height_m, matrices):
    """Sum the series at geodetic points, degrees and m; as `_sum`, with respect to the ellipsoid."""
    phi = np.radians(lat)
    sin_phi, cos_phi = np.sin(phi), np.abs(np.cos(phi))
    e2 = FLATTENING * (2 - FLATTENING)
    normal = A_KM / np.sqrt(1 - e2 * sin_phi**2)
    height = height_m * 1e-3
    rho, z = (normal + height) * cos_phi, (normal * (1 - e2) + height) * sin_phi
    radius = np.sqrt(rho**2 + z**2)
    cos_theta, sin_theta = z / radius, rho / radius
    north, east, down = _sum(cos_theta, sin_theta, np.radians(lon), radius, matrices)
    # the angle between the geocentric and the geodetic vertical
    sin_d, cos_d = sin_phi * sin_theta - cos_phi * cos_theta, sin_phi * cos_theta + cos_phi * sin_theta
    return np.stack([north * cos_d + down * sin_d, east, down * cos_d - north * sin_d])


def _interval(year: np.ndarray) -> np.ndarray:
    """Return the number of the interval between epochs, 0 to 25; an epoch belongs to the interval that it begins."""
    return np.minimum(np.floor((year - FIRST_YEAR) / EPOCH_YEARS), (LAST_YEAR - FIRST_YEAR) / EPOCH_YEARS - 1)


def _everywhere(function, year, *places) -> np.ndarray:
    """Apply `_sum_geodetic` (or the like) to points of any date, shape (n,); return the vectors, shape (3, n)."""
    result = np.empty((3, year.size))
    interval = _interval(year).astype(np.uint8)
    ends = np.cumsum(np.bincount(interval))
    order = np.argsort(interval, kind="stable") if np.count_nonzero(np.diff(ends, prepend=0)) > 1 else None
    for e in np.flatnonzero(np.diff(ends, prepend=0)):
        first = 0 if e == 0 else ends[e - 1]
        for start in range(first, ends[e], POINTS_AT_ONCE):
            some = slice(start, min(start + POINTS_AT_ONCE, ends[e]))
            some = some if order is None else order[some]
            share = (year[some] - (FIRST_YEAR + EPOCH_YEARS * e)) / EPOCH_YEARS
            matrices = _matrices(int(e))
            if share.min() == share.max():  # one date: one set of coefficients is enough
                matrices = [m[:, :, :1] + share[0] * m[:, :, 1:] for m in matrices]
                result[:, some] = function(*(part[some] for part in places), matrices)[:, 0]
            else:
                field = function(*(part[some] for part in places), matrices)
                result[:, some] = field[:, 0] + share * field[:, 1]
    return result


def _flat(*parts) -> tuple[tuple, list[np.ndarray]]:
    """Broadcast against each other; return the shape and flat arrays (views where that can be)."""
    parts = np.broadcast_arrays(*(np.asarray(part, float) for part in parts))
    return parts[0].shape, [part if part.ndim == 1 else part.ravel() for part in parts]


def field_vector_geocentric(colatitude_deg, lon, radius_km, year) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the main field in geocentric components.

    Parameters
    ----------
    colatitude_deg, lon : array of float, shape (n,)
        Geocentric colatitude and longitude, degrees.
    radius_km : array of float, shape (n,)
        Distance from the centre of the Earth.
    year : array of float, shape (n,)
        Decimal years, 1900.0 to 2030.0.

    Returns
    -------
    north, east, down : array of float, shape (n,)
        nT, with respect to the sphere.

    Raises
    ------
    ValueError
        For a date outside the model, or a position or date that is not finite.

    """
    shape, (colatitude_deg, lon, radius_km, year) = _flat(colatitude_deg, lon, radius_km, year)
    _check(year, colatitude_deg, lon, radius_km)

    def at(colatitude, longitude, radius, matrices):
        theta = np.radians(colatitude)
        return _sum(np.cos(theta), np.sin(theta), np.radians(longitude), radius, matrices)

    return tuple(part.reshape(shape) for part in _everywhere(at, year, colatitude_deg, lon, radius_km))


def field_vector(lat, lon, height_m, year) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the main field in geodetic components.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Geodetic latitude and longitude on WGS 84, degrees, north and east positive.
    height_m : array of float, shape (n,)
        Height above the ellipsoid, negative below it.
    year : array of float, shape (n,)
        Decimal years, 1900.0 to 2030.0 (see `decimal_year`).

    Returns
    -------
    north, east, down : array of float, shape (n,)
        nT.

    Raises
    ------
    ValueError
        For a date outside the model, a latitude beyond a pole, or a position or date that is not finite.

    """
    shape, (lat, lon, height_m, year) = _flat(lat, lon, height_m, year)
    _check(year, lat, lon, height_m)
    _check_latitude(lat)
    return tuple(part.reshape(shape) for part in _everywhere(_sum_geodetic, year, lat, lon, height_m))


def _check_latitude(lat) -> None:
    for outside in (lat.min(), lat.max()) if lat.size else ():
        if abs(outside) > 90:
            raise ValueError(f"latitudes must be between -90 and 90 degrees, not {outside:.6g}")


def total_field(lat, lon, height_m, year) -> np.ndarray:
    """Return the magnitude of the main field, nT; parameters and errors as of `field_vector`."""
    north, east, down = field_vector(lat, lon, height_m, year)
    return np.sqrt(north**2 + east**2 + down**2)


def inclination_declination(lat, lon, height_m, year) -> tuple[np.ndarray, np.ndarray]:
    """Return inclination (positive downwards) and declination (east positive) of the main field, degrees.

    Parameters and errors as of `field_vector`.
    """
    north, east, down = field_vector(lat, lon, height_m, year)
    return np.degrees(np.arctan2(down, np.hypot(north, east))), np.degrees(np.arctan2(east, north))


# -- interpolation in blocks -----------------------------------------------------------------------------------------

_CHEBYSHEV = np.cos((2 * np.arange(NODES) + 1) * np.pi / (2 * NODES))
_CUBIC, _QUADRATIC, _LINEAR = (np.linalg.pinv(np.vander(_CHEBYSHEV, n, increasing=True)) for n in (4, 3, 2))
# The square of the field is a sum of powers of x (latitude) times these powers (height, time); terms beyond would be
# below 1e-4 nT: (power of height, power of time, powers of x).
_TERMS = ((0, 0, _CUBIC), (0, 1, _CUBIC), (0, 2, _CUBIC), (1, 0, _QUADRATIC), (1, 1, _LINEAR), (1, 2, _LINEAR[:1]))


def total_field_along(lat, lon, height_m, year, tolerance_nt: float = 0.002) -> np.ndarray:
    """Return the magnitude of the main field at many points, interpolated in blocks of position.

    Parameters
    ----------
    lat, lon, height_m, year : array of float, shape (n,)
        As of `field_vector`, in any order; quickest where neighbours are near each other, as along tracks. Heights
        within 12 km of the ellipsoid.
    tolerance_nt : float, optional
        Largest departure from `total_field` that is allowed: from 0.01 blocks of 2 degrees are used, from 0.001 of
        1 degree; below that every point is summed.

    Returns
    -------
    array of float, shape (n,)
        nT. Beyond input and output the memory needed does not grow with n.

    Raises
    ------
    ValueError
        As of `field_vector`, and for heights beyond 12 km.

    """
    shape, parts = _flat(lat, lon, height_m, year)
    lat, lon, height_m, year = parts
    _check(year, lat, lon, height_m)
    _check_latitude(lat)
    if lat.size and max(-height_m.min(), height_m.max()) > HIGHEST_M:
        raise ValueError("heights must be within 12 km of the ellipsoid; for others use total_field")
    size = next((size for size, error in BLOCK_ERROR_NT.items() if error <= tolerance_nt), None)
    result = np.empty(lat.size)
    for start in range(0, lat.size, PIECE):
        piece = slice(start, start + PIECE)
        if size is None:
            result[piece] = total_field(*(part[piece] for part in parts))
        else:
            _interpolate(*(np.ascontiguousarray(part[piece]) for part in parts), size, result[piece])
    return result.reshape(shape)


def _cells(lat, lon, height_m, year, size):
    """Return the block that each point lies in: row, column, column's width in degrees, layer, interval."""
    row = np.minimum(np.floor(lat / size), 90 / size - 1)
    if np.abs(lat).max() < 45.0:
        width = size
    else:
        towards_equator = np.minimum(np.abs(row), np.abs(row + 1)) * size
        width = size * np.minimum(np.floor(1 / np.cos(np.radians(towards_equator))), WIDEST)
    return row, np.floor(lon / width), width, np.rint(height_m / LAYER_M), _interval(year)


def _runs(lat, lon, height_m, year, size):
    """Find runs of neighbouring points in one block; return their starts and a number for each block."""
    starts, names, last = [], [], None
    for begin in range(0, lat.size, POINTS_AT_ONCE):
        part = slice(begin, begin + POINTS_AT_ONCE)
        row, column, _, layer, interval = _cells(lat[part], lon[part], height_m[part], year[part], size)
        name = row  # whole numbers below 2^53, exact as floats
        for many, cell in ((2048, column), (256, layer), (32, interval)):
            name *= many
            name += cell
        new = np.flatnonzero(name[1:] != name[:-1]) + 1
        if name[0] != last:
            new = np.concatenate([[0], new])
        starts.append(new + begin)
        names.append(name[new])
        last = name[-1]
    return np.concatenate(starts), np.concatenate(names).astype(np.int64)


def _interpolate(lat, lon, height_m, year, size, result) -> None:
    """Fill in `result`: blocks with many points by interpolation, the others by the sum."""
    places = lat, lon, height_m, year
    starts, names = _runs(*places, size)
    lengths = np.diff(starts, append=lat.size)
    order = np.argsort(names, kind="stable")
    starts, lengths = starts[order], lengths[order]
    heads = np.flatnonzero(np.diff(names[order], prepend=-(1 << 62)))  # first run of each block
    tails = np.append(heads[1:], len(order))
    points = np.add.reduceat(lengths, heads)
    few = points < FEWEST_IN_BLOCK
    if few.all():
        result[:] = total_field(*places)
        return
    where = _spread(starts, lengths, np.repeat(few, tails - heads))
    if len(where):
        result[where] = total_field(*(part[where] for part in places))
    heads, tails, points = heads[~few], tails[~few], points[~few]
    first = starts[heads]
    blocks = _Blocks(*_cells(*(part[first] for part in places), size), size)
    for k, (head, tail) in enumerate(zip(heads, tails, strict=True)):
        if points[k] < SHORT_RUN * (tail - head):
            where = _spread(starts[head:tail], lengths[head:tail], slice(None))
            result[where] = blocks.evaluate(k, *(part[where] for part in places), np.empty(len(where)))
            continue
        for start, length in zip(starts[head:tail], lengths[head:tail], strict=True):
            run = slice(start, start + length)
            blocks.evaluate(k, *(part[run] for part in places), result[run])


def _spread(starts, lengths, chosen) -> np.ndarray:
    """Return the places of all points of the chosen runs."""
    starts, lengths = starts[chosen], lengths[chosen]
    ends = np.cumsum(lengths)
    return np.repeat(starts - (ends - lengths), lengths) + np.arange(ends[-1] if len(ends) else 0)


class _Blocks:
    """Polynomials for the square of the field in a number of blocks."""

    def __init__(self, row, column, width, layer, interval, size):
        self.lat, self.lon, self.height = (row + 0.5) * size, (column + 0.5) * width, layer * LAYER_M
        self.year, self.size, self.width = FIRST_YEAR + EPOCH_YEARS * interval, size, np.broadcast_to(width, row.shape)
        self.powers = np.empty((len(row), NODES, sum(len(x) for *_, x in _TERMS)))
        at_once = POINTS_AT_ONCE // (2 * NODES**2)
        for e in np.unique(interval):
            chosen = np.flatnonzero(interval == e)
            for begin in range(0, len(chosen), at_once):
                some = chosen[begin : begin + at_once]
                self.powers[some] = self._fit(some, _matrices(int(e)))
        self.work = np.empty((self.powers.shape[2], POINTS_AT_ONCE))
        self.rows = np.empty((NODES, POINTS_AT_ONCE))
        self.spare = np.empty((3, POINTS_AT_ONCE))

    def _fit(self, some, matrices) -> np.ndarray:
        """Sum the series at the nodes; return powers of longitude by powers of all else, shape (b, 4, 18)."""
        nodes = np.broadcast_arrays(
            (self.lat[some, None] + _CHEBYSHEV * self.size / 2)[:, None, :, None],
            (self.lon[some, None] + _CHEBYSHEV * self.width[some, None] / 2)[:, None, None, :],
            (self.height[some, None] + np.array([-1, 1]) * np.sqrt(0.5) * LAYER_M / 2)[:, :, None, None],
        )
        field = _sum_geodetic(*(part.ravel() for part in nodes), matrices).reshape(3, 2, *nodes[0].shape)
        value, change = field[:, 0], field[:, 1]
        square = [(value**2).sum(0), 2 * (value * change).sum(0), (change**2).sum(0)]  # powers of time
        at_height = [[(s[:, 0] + s[:, 1]) / 2, (s[:, 1] - s[:, 0]) * np.sqrt(0.5)] for s in square]
        return np.concatenate([np.einsum("ai,nij,bj->nba", x, at_height[t][h], _CUBIC) for h, t, x in _TERMS], axis=2)

    def evaluate(self, k, lat, lon, height_m, year, out):
        """Evaluate block `k` at points, shape (n,), into `out`."""
        for begin in range(0, lat.size, POINTS_AT_ONCE):
            part = slice(begin, begin + POINTS_AT_ONCE)
            self._evaluate(k, lat[part], lon[part], height_m[part], year[part], out[part])
        return out

    def _evaluate(self, k, lat, lon, height_m, year, out) -> None:
        u, rows = self.work[:, : lat.size], self.rows[:, : lat.size]
        y, h, t = self.spare[:, : lat.size]
        for place, centre, half, scaled in (
            (lat, self.lat[k], self.size / 2, u[1]),
            (lon, self.lon[k], self.width[k] / 2, y),
            (height_m, self.height[k], LAYER_M / 2, h),
            (year, self.year[k], EPOCH_YEARS, t),
        ):
            np.subtract(place, centre, out=scaled)
            scaled *= 1 / half
        u[0] = 1.0  # the rows of u: the terms in their order
        np.multiply(u[1], u[1], out=u[2])
        np.multiply(u[2], u[1], out=u[3])
        np.multiply(u[0:4], t, out=u[4:8])
        np.multiply(u[4:8], t, out=u[8:12])
        np.multiply(u[0:3], h, out=u[12:15])
        np.multiply(u[12:14], t, out=u[15:17])
        np.multiply(u[15], t, out=u[17])
        np.matmul(self.powers[k], u, out=rows)
        out[:] = rows[3]
        for b in (2, 1, 0):
            out *= y
            out += rows[b]
        np.sqrt(out, out=out)


# -- stage -----------------------------------------------------------------------------------------------------------


def main(job: stage.Job) -> None:
    """Compute the main field of every reading that has a position."""
    readings = job.table("readings", ["time_utc", "source_row"])
    lat, lon, depth = (
        job.table("position", [name])[name].to_numpy()
        for name in ("sensor_latitude_deg", "sensor_longitude_deg", "sensor_depth_m")
    )
    known = np.isfinite(lat) & np.isfinite(lon)
    shallow = known & ~np.isfinite(depth)
    if shallow.any():
        job.note(
            f"{int(shallow.sum())} readings have a position but no sensor depth: their main field is that of the sea "
            "surface, and too small by 0.02 to 0.03 nT for each metre of depth."
        )
    year = decimal_year(readings["time_utc"].to_numpy())
    _check_dates(year, readings, known)
    height = job.settings.sea_surface_height_m - np.where(shallow, 0.0, depth)
    field = np.full(len(year), np.nan)
    field[known] = total_field_along(
        lat[known], lon[known], height[known], year[known], tolerance_nt=job.settings.tolerance_nt
    )
    job.write("main_field", pd.DataFrame({"main_field_nt": field}))
    job.record |= {
        "model": "IGRF-14",
        "readings": int(known.sum()),
        "without_position": int((~known).sum()),
        "without_depth": int(shallow.sum()),
    }
    if not known.any():
        job.note("no reading has a position, so that none has a main field.")
        job.done("no reading has a position")
        return
    job.record |= {"smallest_nt": float(np.nanmin(field)), "largest_nt": float(np.nanmax(field))}
    job.record |= {"first_year": float(year[known].min()), "last_year": float(year[known].max())}
    job.done(f"IGRF-14 at {int(known.sum())} readings, {np.nanmin(field):.0f} to {np.nanmax(field):.0f} nT")


def _check_dates(year, readings, known) -> None:
    """Refuse dates for which there is no IGRF-14, by the first reading that has one."""
    outside = np.flatnonzero(known & ((year < FIRST_YEAR) | (year > LAST_YEAR)))
    if len(outside) == 0:
        return
    time, row = readings["time_utc"].iloc[outside[0]], int(readings["source_row"].iloc[outside[0]])
    others = f", and {len(outside) - 1} more readings" if len(outside) > 1 else ""
    raise SurveyError(
        mistake(
            f"magnetometer file, row {row}, time",
            "must lie between 1900-01-01 and 2030-01-01, where IGRF-14 is valid",
            f"{time:%Y-%m-%dT%H:%M:%S}{others}",
            "Look at ingest.readings.time.layout and ingest.readings.clock.",
        )
    )


if __name__ == "__main__":
    stage.run(main)
