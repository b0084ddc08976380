"""Main field of the Earth at the sensor: the International Geomagnetic Reference Field, 14th generation (IGRF-14).

Source: IAGA Working Group V-MOD; the previous generation is described by Alken et al. (2021), Earth, Planets and Space
73:49. Degree and order 13, reference radius 6371.2 km, Schmidt semi-normalised coefficients, linear in decimal years
between epochs; valid from 1900.0 to 2030.0. Positions are geodetic on WGS 84.

Two forms. `field_vector` sums the series at every point. `total_field_along` sums it at few points and interpolates:
the field of degree 13 is so smooth that a bicubic through 4 x 4 Chebyshev nodes in a block of one degree, with the
first derivatives in height and time, departs from the sum by less than 0.002 nT (see the tests). Blocks are blocks of
position, so that a weaving track, a jittering one and scattered points are all the same to it.
"""

import functools
from pathlib import Path

import numpy as np
import pandas as pd

from steps import stage
from steps.errors import SurveyError

RADIUS_KM = 6371.2
A_KM, FLATTENING = 6378.137, 1 / 298.257223563  # WGS 84
FIRST_YEAR, LAST_YEAR = 1900.0, 2030.0
DEGREE = 13
POINTS_AT_ONCE = 8192  # enough to outweigh the cost of a call, small enough for the cache
NODES = 4
HEIGHT_BIN_M, YEARS_BIN = 250.0, 0.1
BLOCKS_AT_ONCE = 200
PIECE = 1 << 19  # points worked on together: what bounds the memory
FEWEST_IN_BLOCK = 48  # below this the sum itself is cheaper than setting up a block


def decimal_year(time_utc: np.ndarray) -> np.ndarray:
    """Return times as decimal years: year + (day of year - 1 + fraction of day) / days in that year.

    Parameters
    ----------
    time_utc : array of datetime64, shape (n,)
        UTC.

    Returns
    -------
    array of float, shape (n,)

    """
    time = np.asarray(time_utc, "datetime64[ns]")
    year = time.astype("datetime64[Y]")
    start = year.astype("datetime64[ns]")
    length = (year + 1).astype("datetime64[ns]") - start
    return year.astype(np.int64) + 1970 + (time - start) / length


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
    year = np.asarray(year)
    if not all(np.all(np.isfinite(place)) for place in (year, *places)):
        raise ValueError("positions and dates of the main field must be finite")
    if year.size and (year.min() < FIRST_YEAR or year.max() > LAST_YEAR):
        outside = year.min() if year.min() < FIRST_YEAR else year.max()
        raise ValueError(f"IGRF-14 is valid from 1900.0 to 2030.0, not at {outside:.3f}")


def _sum(cos_theta, sin_theta, lon, radius_km, gauss):
    """Sum the series at points, for one or more sets of coefficients.

    The recursion runs, for every order m, on R(n) = P(n, m) (a/r)^(n+2), for m > 0 divided by sin(theta) so that it is
    finite at the poles. The derivative dP/dtheta is a combination of R(n) and R(n-1), so that all sums over n are
    products of a matrix of coefficients with the matrix of the R(n).

    Parameters
    ----------
    cos_theta, sin_theta, lon, radius_km : array of float, shape (n,)
        Geocentric colatitude, longitude in radians, radius.
    gauss : array of float, shape (k, 14, 14, 2)
        Sets of coefficients, nT.

    Returns
    -------
    array of float, shape (3, k, n)
        Geocentric north, east, down for every set, nT.

    """
    sets = len(gauss)
    ratio = RADIUS_KM / radius_km
    c_ratio, ratio_2 = cos_theta * ratio, ratio * ratio
    cos_lon, sin_lon = np.cos(lon), np.sin(lon)
    total = np.zeros((3, sets, lon.size))
    cos_m, sin_m = np.ones_like(lon), np.zeros_like(lon)
    diagonal = ratio_2.copy()  # R(m, m)
    work = np.empty((DEGREE + 1, lon.size))
    spare = np.empty_like(lon)
    for m in range(DEGREE + 1):
        if m:
            cos_m, sin_m = cos_m * cos_lon - sin_m * sin_lon, sin_m * cos_lon + cos_m * sin_lon
            diagonal *= ratio if m == 1 else np.sqrt((2 * m - 1) / (2 * m)) * sin_theta * ratio
        r = work[: DEGREE + 1 - m]
        r[0] = diagonal
        for n in range(m + 1, DEGREE + 1):
            root = np.sqrt(n * n - m * m)
            np.multiply(r[n - m - 1], c_ratio, out=r[n - m])
            r[n - m] *= (2 * n - 1) / root
            if n - m > 1:
                np.multiply(r[n - m - 2], ratio_2, out=spare)
                spare *= np.sqrt((n - 1) ** 2 - m * m) / root
                r[n - m] -= spare
        degree = np.arange(m, DEGREE + 1)
        if m == 0:
            g = gauss[:, :, 0, 0].copy()
            g[:, 0] = 0.0
            total[2] -= (g * (degree + 1)) @ r
            # sin(theta) dP/dtheta = n (cos P(n) - P(n-1)); the factor sin(theta) is taken out
            slope = cos_theta * ((g * degree) @ r) - ratio * ((g * degree)[:, 1:] @ r[:-1])
            total[0] += slope / np.where(sin_theta > 1e-12, sin_theta, np.inf)
            continue
        g, h = gauss[:, m:, m, 0], gauss[:, m:, m, 1]
        both = np.concatenate([g, h])
        back = np.sqrt(degree[1:] ** 2 - m * m)
        slope = cos_theta * ((both * degree) @ r) - ratio * ((both[:, 1:] * back) @ r[:-1])
        plain, down = both @ r, (both * (degree + 1)) @ r
        total[0] += cos_m * slope[:sets] + sin_m * slope[sets:]
        total[1] += m * (sin_m * plain[:sets] - cos_m * plain[sets:])
        total[2] -= sin_theta * (cos_m * down[:sets] + sin_m * down[sets:])
    return total


def field_vector_geocentric(colatitude_deg, lon, radius_km, year):
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
    colatitude_deg, lon, radius_km, year = np.broadcast_arrays(
        *(np.asarray(part, float) for part in (colatitude_deg, lon, radius_km, year))
    )
    _check(year, colatitude_deg, lon, radius_km)
    theta = np.radians(colatitude_deg)
    return _exact(np.cos(theta), np.sin(theta), np.radians(lon), radius_km, year)


def _exact(cos_theta, sin_theta, lon, radius_km, year):
    """Sum the series at every point, linear in time between the epochs."""
    epochs, values = coefficients()
    result = np.empty((3, year.size))
    flat = [np.ravel(part) for part in (cos_theta, sin_theta, lon, radius_km, year)]
    interval = np.clip(np.searchsorted(epochs, flat[4], side="right") - 1, 0, len(epochs) - 2)
    for e in np.unique(interval):
        chosen = np.flatnonzero(interval == e)
        for start in range(0, len(chosen), POINTS_AT_ONCE):
            some = chosen[start : start + POINTS_AT_ONCE]
            c, s, x, r, t = (part[some] for part in flat)
            weight = (t - epochs[e]) / (epochs[e + 1] - epochs[e])
            if weight.min() == weight.max():
                result[:, some] = _sum(c, s, x, r, (values[e] + weight[0] * (values[e + 1] - values[e]))[None])[:, 0]
            else:
                field = _sum(c, s, x, r, values[e : e + 2])
                result[:, some] = field[:, 0] + weight * (field[:, 1] - field[:, 0])
    return tuple(part.reshape(year.shape) for part in result)


def field_vector(lat, lon, height_m, year):
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
        For a date outside the model, or a position or date that is not finite.

    """
    lat, lon, height_m, year = np.broadcast_arrays(*(np.asarray(part, float) for part in (lat, lon, height_m, year)))
    _check(year, lat, lon, height_m)
    phi = np.radians(lat)
    sin_phi, cos_phi = np.sin(phi), np.cos(phi)
    e2 = FLATTENING * (2 - FLATTENING)
    normal = A_KM / np.sqrt(1 - e2 * sin_phi**2)
    h = height_m / 1000.0
    rho, z = (normal + h) * cos_phi, (normal * (1 - e2) + h) * sin_phi
    radius = np.hypot(rho, z)
    cos_theta, sin_theta = z / radius, np.abs(rho) / radius
    north, east, down = _exact(cos_theta, sin_theta, np.radians(lon), radius, year)
    # angle between the geocentric and the geodetic vertical
    sin_d, cos_d = sin_phi * sin_theta - cos_phi * cos_theta, sin_phi * cos_theta + cos_phi * sin_theta
    return north * cos_d - down * -sin_d, east, down * cos_d - north * sin_d


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
_TO_POWERS = np.linalg.inv(np.vander(_CHEBYSHEV, increasing=True))  # node values to powers of -1..1


def total_field_along(lat, lon, height_m, year, tolerance_nt: float = 0.002) -> np.ndarray:
    """Return the magnitude of the main field at many points, interpolated in blocks of position and time.

    Parameters
    ----------
    lat, lon, height_m, year : array of float, shape (n,)
        As of `field_vector`, in any order; quickest where neighbours are near each other, as along tracks.
    tolerance_nt : float, optional
        Largest departure from `total_field` that is allowed: 0.002 takes blocks of one degree, less takes half degrees.

    Returns
    -------
    array of float, shape (n,)
        nT. Beyond input and output the memory needed does not grow with n.

    Raises
    ------
    ValueError
        For a date outside the model, or a position or date that is not finite.

    """
    lat, lon, height_m, year = (
        np.ravel(part) for part in np.broadcast_arrays(*(np.asarray(p, float) for p in (lat, lon, height_m, year)))
    )
    _check(year, lat, lon, height_m)
    size = 1.0 if tolerance_nt >= 0.002 else 0.5
    result = np.empty(lat.size)
    for start in range(0, lat.size, PIECE):
        part = slice(start, start + PIECE)
        result[part] = _blocks(lat[part], lon[part], height_m[part], year[part], size)
    return result


def _blocks(lat, lon, height_m, year, size):
    """Interpolate in blocks; blocks with few points are summed exactly."""
    row = np.floor(lat / size).astype(np.int64)
    column = np.floor(lon / size).astype(np.int64)
    layer = np.floor(height_m / HEIGHT_BIN_M).astype(np.int64)
    # Bins begin at 1900, so that no epoch, where the rate of change jumps, lies inside one.
    age = np.floor((year - FIRST_YEAR) / YEARS_BIN + 1e-9).astype(np.int64)
    key = ((row + 1000) * 4000 + column + 2000) * 100_000 + layer + 50_000
    key = key * 2000 + age
    starts = np.concatenate([[0], np.flatnonzero(np.diff(key)) + 1])
    lengths = np.diff(np.append(starts, len(key)))
    order = None
    by_key = np.argsort(key[starts], kind="stable")
    repeated = key[starts[by_key]][1:] == key[starts[by_key]][:-1]
    if repeated.any():  # a block is visited more than once: bring its points together, run by run
        lengths = lengths[by_key]
        ends = np.cumsum(lengths)
        order = np.repeat(starts[by_key] - (ends - lengths), lengths) + np.arange(len(key))
        first = np.concatenate([[True], ~repeated])
        starts = (ends - lengths)[first]
    stops = np.append(starts[1:], len(key))
    result = np.empty(len(key))
    few = (stops - starts) < FEWEST_IN_BLOCK
    exact = [slice(a, b) for a, b in zip(starts[few], stops[few], strict=True)]
    if exact:
        where = np.concatenate([np.arange(s.start, s.stop) for s in exact])
        where = where if order is None else order[where]
        result[where] = total_field(lat[where], lon[where], height_m[where], year[where])
    blocks = np.flatnonzero(~few)
    for some in np.array_split(blocks, -(-len(blocks) // BLOCKS_AT_ONCE)) if len(blocks) else []:
        first = starts[some] if order is None else order[starts[some]]
        centres = np.stack(
            [
                (row[first] + 0.5) * size,
                (column[first] + 0.5) * size,
                (layer[first] + 0.5) * HEIGHT_BIN_M,
                FIRST_YEAR + (age[first] + 0.5) * YEARS_BIN,
            ]
        )
        powers = _fit(*centres, size)
        for k, block in enumerate(some):
            run = slice(starts[block], stops[block])
            where = run if order is None else order[run]
            place = lat[where], lon[where], height_m[where], year[where]
            result[where] = _evaluate(powers[k], *place, centres[:, k], size)
    return result


def _fit(lat, lon, height_m, year, size) -> np.ndarray:
    """Fit blocks about their centres, shape (b,): powers in latitude by powers in longitude, of F, dF/dh and dF/dt.

    Returns
    -------
    array of float, shape (b, 4, 3, 4)

    """
    step = _CHEBYSHEV * size / 2
    lats = np.clip(lat[:, None] + step, -90.0, 90.0)[:, None, :, None]
    lons = (lon[:, None] + step)[:, None, None, :]
    dh, dt = HEIGHT_BIN_M / 2, YEARS_BIN / 2
    heights = (height_m[:, None] + np.array([0.0, dh, -dh, 0.0, 0.0]))[:, :, None, None]
    years = np.clip(year[:, None] + np.array([0.0, 0.0, 0.0, dt, -dt]), FIRST_YEAR, LAST_YEAR)[:, :, None, None]
    nodes = total_field(lats, lons, heights, years)
    rise = (nodes[:, 1] - nodes[:, 2]) / (2 * dh)
    rate = (nodes[:, 3] - nodes[:, 4]) / (years[:, 3] - years[:, 4])
    return np.einsum("ai,nkij,bj->nakb", _TO_POWERS, np.stack([nodes[:, 0], rise, rate], axis=1), _TO_POWERS)


def _evaluate(powers, lat, lon, height_m, year, centre, size):
    """Evaluate a block's polynomials at points."""
    x = (lat - centre[0]) * (2 / size)
    y = (lon - centre[1]) * (2 / size)
    dh, dt = height_m - centre[2], year - centre[3]
    result = np.zeros(len(x))
    for b in range(NODES - 1, -1, -1):
        term, rise, rate = powers[NODES - 1, :, b]
        for a in range(NODES - 2, -1, -1):
            term = term * x + powers[a, 0, b]
            rise = rise * x + powers[a, 1, b]
            rate = rate * x + powers[a, 2, b]
        result = result * y + (term + rise * dh + rate * dt)
    return result


# -- stage -----------------------------------------------------------------------------------------------------------


def main(job: stage.Job) -> None:
    """Compute the main field of every reading that has a position."""
    time = job.table("readings", ["time_utc"])["time_utc"].to_numpy()
    wanted = ["sensor_latitude_deg", "sensor_longitude_deg", "sensor_depth_m"]
    lat, lon, depth = job.table("position", wanted).to_numpy().T
    known = np.isfinite(lat) & np.isfinite(lon) & np.isfinite(depth)
    year = decimal_year(time)
    outside = known & ((year < FIRST_YEAR) | (year > LAST_YEAR))
    if outside.any():
        first = time[np.flatnonzero(outside)[0]]
        raise SurveyError(
            f"main_field: {int(outside.sum())} readings lie outside 1900.0 to 2030.0, where IGRF-14 is valid; the "
            f"first at {np.datetime_as_string(first, unit='s')}. Check the dates and the logger's time layout."
        )
    height = job.settings.sea_surface_height_m - depth
    field = np.full(len(time), np.nan)
    field[known] = total_field_along(
        lat[known], lon[known], height[known], year[known], tolerance_nt=job.settings.tolerance_nt
    )
    job.write("main_field", pd.DataFrame({"main_field_nt": field}))
    job.record |= {"model": "IGRF-14", "without_position": int((~known).sum())}
    if known.any():
        job.record |= {"smallest_nt": float(np.nanmin(field)), "largest_nt": float(np.nanmax(field))}
        job.done(f"IGRF-14 at {int(known.sum())} readings, {np.nanmin(field):.0f} to {np.nanmax(field):.0f} nT")
    else:
        job.done("no reading has a position")


if __name__ == "__main__":
    stage.run(main)
