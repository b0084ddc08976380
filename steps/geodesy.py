"""Positions on WGS 84 as Earth-centred vectors, so that 180 degrees and the poles are places like others."""

import numpy as np

A_M = 6378137.0
FLATTENING = 1 / 298.257223563
E2 = FLATTENING * (2 - FLATTENING)
B_M = A_M * (1 - FLATTENING)


def to_vectors(lat, lon) -> np.ndarray:
    """Return Earth-centred vectors of positions on the ellipsoid.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Geodetic, degrees.

    Returns
    -------
    array of float, shape (3, n)
        Metres.

    """
    phi, lam = np.radians(lat), np.radians(lon)
    normal = A_M / np.sqrt(1 - E2 * np.sin(phi) ** 2)
    level = normal * np.cos(phi)
    return np.stack([level * np.cos(lam), level * np.sin(lam), normal * (1 - E2) * np.sin(phi)])


def to_degrees(vectors: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return geodetic latitude and longitude of vectors near the ellipsoid, degrees, longitude in [-180, 180).

    Bowring (1976), Survey Review 23, in one step, which is exact to far below a millimetre near the ellipsoid.
    """
    x, y, z = vectors
    level = np.hypot(x, y)
    beta = np.arctan2(z * A_M, level * B_M)
    up = z + (A_M**2 - B_M**2) / B_M * np.sin(beta) ** 3
    lat = np.degrees(np.arctan2(up, level - E2 * A_M * np.cos(beta) ** 3))
    return lat, (np.degrees(np.arctan2(y, x)) + 180.0) % 360.0 - 180.0


def frames(lat, lon) -> tuple[np.ndarray, np.ndarray]:
    """Return unit vectors towards east and north, each of shape (3, n), at geodetic positions in degrees."""
    phi, lam = np.radians(lat), np.radians(lon)
    east = np.stack([-np.sin(lam), np.cos(lam), np.zeros_like(lam)])
    north = np.stack([-np.sin(phi) * np.cos(lam), -np.sin(phi) * np.sin(lam), np.cos(phi)])
    return east, north


def steps_between(vectors: np.ndarray, lat, lon) -> tuple[np.ndarray, np.ndarray]:
    """Return the steps from each position to the next, metres east and north in the plane midway between them.

    Parameters
    ----------
    vectors : array of float, shape (3, n)
        Earth-centred vectors of the positions.
    lat, lon : array of float, shape (n,)
        The same positions, degrees.

    Returns
    -------
    east, north : array of float, shape (n - 1,)

    """
    step = np.diff(vectors, axis=1)
    east, north = frames(lat, lon)
    middle_east, middle_north = east[:, 1:] + east[:, :-1], north[:, 1:] + north[:, :-1]
    return (
        np.einsum("kn,kn->n", step, middle_east) / np.linalg.norm(middle_east, axis=0),
        np.einsum("kn,kn->n", step, middle_north) / np.linalg.norm(middle_north, axis=0),
    )


def move(lat, lon, distance_m, azimuth_rad) -> np.ndarray:
    """Return the vectors of the places at a distance and azimuth from positions.

    The step is taken in the tangent plane; for distances d of some kilometres the geodesic's end differs by d^3 / 3 R^2
    (1 mm at 5 km).

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees.
    distance_m, azimuth_rad : array of float, shape (n,)
        Length, and direction clockwise from true north.

    Returns
    -------
    array of float, shape (3, n)

    """
    east, north = frames(lat, lon)
    return to_vectors(lat, lon) + distance_m * (np.sin(azimuth_rad) * east + np.cos(azimuth_rad) * north)


def convergence(lat, lon) -> np.ndarray:
    """Return how far the direction of north has turned along a path, radians, 0 at its start.

    A straight (geodesic) path that leaves in azimuth a has azimuth a + convergence further on.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees.

    Returns
    -------
    array of float, shape (n,)

    """
    dlon = np.radians((np.diff(lon) + 180.0) % 360.0 - 180.0)
    middle = np.radians((lat[1:] + lat[:-1]) / 2)
    return np.concatenate([[0.0], np.cumsum(dlon * np.sin(middle))])


def path_length(lat, lon) -> np.ndarray:
    """Return the distance run along a track since its first position, metres, in straight pieces.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees.

    Returns
    -------
    array of float, shape (n,)

    """
    vectors = to_vectors(lat, lon)
    return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(vectors, axis=1), axis=0))])
