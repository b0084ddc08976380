"""The ship's track and the towed sensor's, for the simulator. Imports no stage of the pipeline."""

import numpy as np
import pyproj
from scipy.interpolate import CubicSpline


class Plane:
    """Azimuthal equidistant plane about the survey's centre on WGS 84: east and north in metres."""

    def __init__(self, latitude_deg: float, longitude_deg: float):
        self._proj = pyproj.Proj(proj="aeqd", lat_0=latitude_deg, lon_0=longitude_deg, ellps="WGS84")

    def geographic(self, east, north):
        """Return latitude and longitude (in [-180, 180)) in degrees."""
        longitude, latitude = self._proj(east, north, inverse=True)
        return np.asarray(latitude), (np.asarray(longitude) + 180.0) % 360.0 - 180.0

    def metres(self, latitude, longitude):
        """Return east and north in metres."""
        east, north = self._proj(longitude, latitude)
        return np.asarray(east), np.asarray(north)

    def true_north_deg(self, east, north):
        """Azimuth of true north in the plane, clockwise from the plane's north, in degrees."""
        latitude, longitude = self.geographic(east, north)
        sign = np.where(latitude > 0, -1.0, 1.0)  # step away from the nearer pole
        east2, north2 = self.metres(latitude + sign * 1e-4, longitude)
        return np.degrees(np.arctan2(sign * (east2 - east), sign * (north2 - north)))


def direction(azimuth_deg):
    a = np.radians(azimuth_deg)
    return np.array([np.sin(a), np.cos(a)])


def _turn(start, azimuth, end, azimuth_end, radius):
    """Shortest path of arc, straight and arc between two poses, as (length, curvature) pieces; right is positive."""
    best = None
    for side, side_end in ((1, 1), (-1, -1), (1, -1), (-1, 1)):
        centre = start + radius * direction(azimuth + 90 * side)
        centre_end = end + radius * direction(azimuth_end + 90 * side_end)
        step = centre_end - centre
        between = np.hypot(*step)
        along = np.degrees(np.arctan2(*step))
        if side == side_end:
            straight = between
        elif between < 2 * radius:
            continue
        else:
            straight = np.sqrt(between**2 - 4 * radius**2)
            along += side * np.degrees(np.arctan2(2 * radius, straight))
        arcs = [(side * (along - azimuth)) % 360, (side_end * (azimuth_end - along)) % 360]
        arcs = [0.0 if arc > 360 - 1e-7 else np.radians(arc) * radius for arc in arcs]
        if best is None or sum(arcs) + straight < best[0]:
            best = (sum(arcs) + straight, [(arcs[0], side / radius), (straight, 0.0), (arcs[1], side_end / radius)])
    return best[1]


class Course:
    """The track the ship is to steer, by arc length in metres.

    Parameters
    ----------
    legs : list of tuple
        ``(start, end, run_in, run_out)``: points in the plane, m, and lengths of the straight stretches before and
        after the leg, m.
    radius_m : float
        Radius of the turns that join the legs.

    """

    def __init__(self, legs, radius_m: float):
        pieces, self.marks = [], []  # marks: arc length at which each leg starts and ends
        point = azimuth = None
        length = 0.0
        for start, end, run_in, run_out in legs:
            unit = (end - start) / np.hypot(*(end - start))
            bearing = np.degrees(np.arctan2(*unit))
            begin = start - run_in * unit
            if point is None:
                point = begin
            else:
                for piece in _turn(point, azimuth, begin, bearing, radius_m):
                    pieces.append((*piece, *point, azimuth))
                    point, azimuth = self._ahead(pieces[-1], piece[0])
                    length += piece[0]
            whole = np.hypot(*(end - start)) + run_in + run_out
            pieces.append((whole, 0.0, *begin, bearing))
            self.marks.append((length + run_in, length + whole - run_out))
            length += whole
            point, azimuth = end + run_out * unit, bearing
        self.length, self._pieces = length, np.array(pieces)
        self._starts = np.concatenate([[0.0], np.cumsum(self._pieces[:, 0])[:-1]])

    @staticmethod
    def _ahead(piece, distance):
        _, curvature, east, north, azimuth = piece
        turned = azimuth + np.degrees(curvature * distance)
        if curvature:
            a, b = np.radians(azimuth), np.radians(turned)
            return np.array(
                [east + (np.cos(a) - np.cos(b)) / curvature, north + (np.sin(b) - np.sin(a)) / curvature]
            ), turned
        return np.array([east, north]) + distance * direction(azimuth), azimuth

    def at(self, distance):
        """East, north and azimuth (degrees) at arc lengths."""
        index = np.clip(np.searchsorted(self._starts, distance, side="right") - 1, 0, None)
        _, curvature, east, north, azimuth = self._pieces[index].T
        ahead = distance - self._starts[index]
        a = np.radians(azimuth)
        b = a + curvature * ahead
        safe = np.where(curvature == 0, 1.0, curvature)
        straight = curvature == 0
        east = east + np.where(straight, ahead * np.sin(a), (np.cos(a) - np.cos(b)) / safe)
        north = north + np.where(straight, ahead * np.cos(a), (np.sin(b) - np.sin(a)) / safe)
        return east, north, np.degrees(b)


def pursuit(time_s, east, north, layback_m, *, chunk: int = 1024, settle: float = 25.0):
    """Track of a body towed on a cable that always points to the tow point, by fourth-order Runge-Kutta.

    With psi the direction from body to tow point, ``d psi/dt = (Ve cos psi - Vn sin psi) / B``. Chunks are integrated
    side by side, each from `settle` laybacks before its own start, by when the start is forgotten (exp(-settle)).

    Parameters
    ----------
    time_s, east, north : array of shape (n,)
        Evenly spaced times and tow point, m.
    layback_m : array of shape (n,)
        Horizontal distance from tow point to body.

    Returns
    -------
    east, north, direction : arrays of shape (n,)
        Body's position in m, and direction from body to tow point in radians, unwrapped.

    """
    n, step = len(time_s), time_s[1] - time_s[0]
    tow = CubicSpline(time_s, np.column_stack([east, north]))
    velocity = tow(time_s, 1)
    middle = tow(time_s[:-1] + step / 2, 1)
    layback_middle = (layback_m[:-1] + layback_m[1:]) / 2
    slowest = np.percentile(np.hypot(*velocity.T), 1)
    before = int(np.ceil(settle * layback_m.max() / slowest / step))
    starts = np.arange(0, n, chunk)
    first = np.maximum(starts - before, 0)
    psi = np.arctan2(velocity[first, 0], velocity[first, 1])
    found = np.empty(n)
    found[0] = psi[0]

    def rate(angle, v, b):
        return (v[:, 0] * np.cos(angle) - v[:, 1] * np.sin(angle)) / b

    for k in range(-before, chunk):
        i = starts + k
        inside = (i >= 0) & (i < n)
        if k >= 0:
            found[i[inside]] = psi[inside]
        moving = inside & (i < n - 1)
        j = i[moving]
        p = psi[moving]
        k1 = rate(p, velocity[j], layback_m[j])
        k2 = rate(p + step / 2 * k1, middle[j], layback_middle[j])
        k3 = rate(p + step / 2 * k2, middle[j], layback_middle[j])
        k4 = rate(p + step * k3, velocity[j + 1], layback_m[j + 1])
        psi[moving] = p + step / 6 * (k1 + 2 * k2 + 2 * k3 + k4)
    found = np.unwrap(found)
    return east - layback_m * np.sin(found), north - layback_m * np.cos(found), found
