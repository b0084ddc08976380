"""Straighten a ship's track: the geodesic that fits it best, and distances along and beside a geodesic.

Distances are those of geodesics on WGS 84 (Karney 2013, J. Geodesy 87, through pyproj): the geodesic is laid out in
nodes, and the foot of each position found by Newton's method on the curve through them. The way from the foot to the
position is taken as a normal section: against geodesics that leave the line at right angles both distances are within
2 mm for lines of 500 km and positions within 50 km of them, 2 cm for 2000 and 100 km, 2 m for 1000 and 500 km.
"""

import numpy as np

from steps import geodesy
from steps.geodesy import A_M, B_M, E2

NODES_KM = 10.0  # between nodes of the geodesic; a cubic between them is within a micrometre
NEIGHBOURS_M = 1000.0  # of a position whose foot is found exactly
ENOUGH = 1024  # positions that a fit looks at
HUBER, ROUNDS = 8, 40  # rounds with Huber's weights, and with Tukey's until the direction turns no more


def best_fit_azimuth(lat: np.ndarray, lon: np.ndarray) -> tuple[float, float, float]:
    """Fit a geodesic to a track, whatever turns and hooks the track has at its ends.

    Orthogonal distances by iteratively reweighted least squares, with Huber's and then Tukey's weights (Huber 1981,
    Robust Statistics), in the gnomonic projection about the middle of the track, where geodesics are all but straight.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Positions in the order in which they were run, degrees.

    Returns
    -------
    azimuth_deg : float
        Azimuth of the geodesic at the returned place in the sense in which the track was run, 0 to 360.
    lat_0, lon_0 : float
        A place on the geodesic, in the middle of the track.

    Raises
    ------
    ValueError
        If all positions are the same.

    """
    from pyproj import Geod

    some = np.unique(np.rint(np.linspace(0, len(lat) - 1, min(ENOUGH, len(lat)))).astype(np.int64))
    lat, lon = np.asarray(lat, float)[some], np.asarray(lon, float)[some]
    lat_m, lon_m = middle(lat, lon)
    phi, phi_m, turn = np.radians(lat), np.radians(lat_m), np.radians(lon - lon_m)
    cosine = np.sin(phi_m) * np.sin(phi) + np.cos(phi_m) * np.cos(phi) * np.cos(turn)
    x = np.cos(phi) * np.sin(turn) / cosine
    y = (np.sin(phi - phi_m) + 2 * np.sin(phi_m) * np.cos(phi) * np.sin(turn / 2) ** 2) / cosine
    points = np.stack([x, y])
    if np.ptp(x) == 0 and np.ptp(y) == 0:
        raise ValueError("a track needs two different positions to have an azimuth")
    weight, along = np.ones(len(x)), np.zeros(2)
    for number in range(ROUNDS):
        centre = points @ weight / weight.sum()
        off = points - centre[:, None]
        along, last = np.linalg.eigh((off * weight) @ off.T)[1][:, 1], along
        if number > HUBER and abs(last[0] * along[1] - last[1] * along[0]) < 1e-10:
            break
        across = np.abs(along[0] * off[1] - along[1] * off[0])
        scale = max(1.4826 * np.median(across), 1e-9)
        huber = scale / np.maximum(across, scale)
        weight = huber if number < HUBER else np.maximum(1 - (across / (4.685 * scale)) ** 2, 0.0) ** 2
    travelled = np.median(along @ points[:, len(x) // 2 :]) - np.median(along @ points[:, : len(x) // 2 + 1])
    along = along * (1.0 if travelled >= 0 else -1.0) * 1e-6  # 6 m
    ends = []
    for step in (-along, along):
        u, v = centre + step
        level = np.cos(phi_m) - v * np.sin(phi_m)
        ends.append(
            (
                lon_m + np.degrees(np.arctan2(u, level)),
                np.degrees(np.arctan2(np.sin(phi_m) + v * np.cos(phi_m), np.hypot(level, u))),
            )
        )
    azimuth, _, length = Geod(ellps="WGS84").inv(*ends[0], *ends[1])
    lon_0, lat_0, back = Geod(ellps="WGS84").fwd(*ends[0], azimuth, length / 2)
    return float((back + 180.0) % 360.0), float(lat_0), float((lon_0 + 180.0) % 360.0 - 180.0)


def middle(lat: np.ndarray, lon: np.ndarray) -> tuple[float, float]:
    """Return the middle of positions, degrees: the direction of the mean of their vectors."""
    lat_0, lon_0 = geodesy.to_degrees(_on_ellipsoid(geodesy.to_vectors(lat, lon).mean(axis=1)))
    return float(lat_0), float(lon_0)


def _on_ellipsoid(vector: np.ndarray) -> np.ndarray:
    """Return the point of the ellipsoid in the direction of a vector; of the null vector, a place like any other."""
    if not np.linalg.norm(vector) > 1.0:
        vector = np.array([A_M, 0.0, 0.0])
    return vector / np.sqrt((vector[0] ** 2 + vector[1] ** 2) / A_M**2 + vector[2] ** 2 / B_M**2)


def turn_towards(azimuth_deg: float, towards_deg: float) -> float:
    """Return an azimuth or its opposite, whichever is nearer to another; at right angles to it the one below 180."""
    nearness = np.cos(np.radians(azimuth_deg - towards_deg))
    turned = nearness < 0 if abs(nearness) > 1e-9 else azimuth_deg % 360.0 >= 180.0
    return float((azimuth_deg + 180.0 * turned) % 360.0)


def project_on_line(
    lat: np.ndarray, lon: np.ndarray, *, azimuth_deg: float, lat_0: float, lon_0: float
) -> tuple[np.ndarray, np.ndarray]:
    """Project positions on the geodesic through an origin in an azimuth.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees.
    azimuth_deg : float
        Azimuth of the geodesic at its origin.
    lat_0, lon_0 : float
        Origin, degrees.

    Returns
    -------
    distance_km : array of float, shape (n,)
        Geodesic distance along the line from the origin to the foot of each position, positive in the azimuth.
    offset_km : array of float, shape (n,)
        Distance from the line, positive to the right of its direction.

    """
    place = geodesy.to_vectors(np.asarray(lat, float), np.asarray(lon, float))
    n = place.shape[1]
    if n == 0:
        return np.zeros(0), np.zeros(0)
    # the foot of one reading in each kilometre gives those of its neighbours, within a millimetre 100 km off the line
    run = np.linalg.norm(np.diff(place, axis=1), axis=0)
    size = int(np.clip(NEIGHBOURS_M / max(np.median(run), 0.1), 1, n)) if n > 1 else 1
    centre = np.minimum(np.arange(0, n, size) + size // 2, n - 1)
    block = np.arange(n) // size
    away = place - place[:, centre][:, block]
    far = np.flatnonzero(np.einsum("kn,kn->n", away, away) > NEIGHBOURS_M**2)
    exact = np.concatenate([centre, far])
    distance, offset, way, right = _foot(place[:, exact], azimuth_deg, lat_0, lon_0)
    block_way = (way / np.cos(offset / A_M))[:, : len(centre)][:, block]
    s = distance[: len(centre)][block] + np.einsum("kn,kn->n", away, block_way)
    y = offset[: len(centre)][block] + np.einsum("kn,kn->n", away, right[:, : len(centre)][:, block])
    s[far], y[far] = distance[len(centre) :], offset[len(centre) :]
    return s / 1000.0, y / 1000.0


def _foot(place, azimuth_deg, lat_0, lon_0):
    """Return distance and offset of vectors in metres, and at each the unit vectors along the line and to its right."""
    from pyproj import Geod

    origin = geodesy.to_vectors(np.array([lat_0]), np.array([lon_0]))[:, 0]
    east, north = (part[:, 0] for part in geodesy.frames(np.array([lat_0]), np.array([lon_0])))
    a = np.radians(azimuth_deg)
    ahead, up = np.sin(a) * east + np.cos(a) * north, origin / np.linalg.norm(origin)
    s = np.arctan2(ahead @ place, up @ place) * A_M  # within 0.5 % of the truth
    step = NODES_KM * 1000
    low, high = np.floor(1.01 * s.min() / step) - 2, np.ceil(1.01 * s.max() / step) + 2
    nodes = np.arange(low, high + 1) * step
    whole = np.ones(len(nodes))
    node_lon, node_lat, back = Geod(ellps="WGS84").fwd(lon_0 * whole, lat_0 * whole, azimuth_deg * whole, nodes)
    node = geodesy.to_vectors(node_lat, node_lon)
    east, north = geodesy.frames(np.asarray(node_lat), np.asarray(node_lon))
    forward = np.radians(np.asarray(back) + 180.0)
    tangent = np.sin(forward) * east + np.cos(forward) * north
    for _ in range(3):
        foot, way = _on_curve(nodes, node, tangent, s)
        apart = place - foot
        square = np.einsum("kn,kn->n", apart, apart)
        s = s + np.einsum("kn,kn->n", apart, way) / (1.0 - np.minimum(square / (2 * A_M**2), 0.5))
    foot, way = _on_curve(nodes, node, tangent, s)
    apart = place - foot
    normal = foot / np.array([A_M, A_M, B_M])[:, None] ** 2
    normal /= np.linalg.norm(normal, axis=0)
    right = np.cross(way, normal, axis=0)
    chord = np.linalg.norm(apart, axis=0)
    # Euler's radius of the normal section towards the position
    curve = 1 - E2 * normal[2] ** 2
    north_share = right[2] ** 2 / np.maximum(1 - normal[2] ** 2, 1e-12)
    across, along = A_M / np.sqrt(curve), A_M * (1 - E2) / curve**1.5
    radius = 1.0 / (north_share / along + (1 - north_share) / across)
    offset = 2 * radius * np.arcsin(np.minimum(chord / (2 * radius), 1.0))
    offset = np.copysign(offset, np.einsum("kn,kn->n", apart, right))
    # at the place itself the direction to the right has bent down by the angle of the offset
    bend = offset / radius
    return s, offset, way, right * np.cos(bend) - normal * np.sin(bend)


def _on_curve(nodes, node, tangent, s):
    """Return points and unit tangents of the cubic through nodes and their tangents, at distances s."""
    step = nodes[1] - nodes[0]
    k = np.clip(np.floor((s - nodes[0]) / step).astype(np.int64), 0, len(nodes) - 2)
    t = (s - nodes[k]) / step
    p, q, m, n = node[:, k], node[:, k + 1], step * tangent[:, k], step * tangent[:, k + 1]
    point = (1 + 2 * t) * (1 - t) ** 2 * p + t * (1 - t) ** 2 * m + t**2 * (3 - 2 * t) * q + t**2 * (t - 1) * n
    way = 6 * t * (t - 1) * (p - q) + (1 - t) * (1 - 3 * t) * m + t * (3 * t - 2) * n
    return point, way / np.linalg.norm(way, axis=0)
