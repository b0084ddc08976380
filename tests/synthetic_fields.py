"""The fields of the simulator: main field, crust, external variation. Imports no stage of the pipeline."""

from datetime import datetime

import numpy as np
import ppigrf
from scipy.interpolate import CubicSpline
from scipy.signal import lfilter
from synthetic_track import Plane, direction

MU0_OVER_2PI = 2e-7 * 1e9  # nT for magnetisation in A/m

# Boundaries of the geomagnetic polarity time scale, Ma, youngest first, normal polarity at present:
# Ogg (2020), GTS2020, as far as 8.3 Ma.
REVERSALS_MA = (
    *(0.773, 0.990, 1.070, 1.180, 1.215, 1.775, 1.934, 2.116, 2.140, 2.595, 3.032, 3.116, 3.207, 3.330, 3.596),
    *(4.187, 4.300, 4.493, 4.631, 4.799, 4.896, 4.997, 5.235, 6.023, 6.272, 6.386, 6.727, 7.104, 7.214, 7.262),
    *(7.305, 7.456, 7.499, 7.537, 7.650, 7.701, 8.125, 8.257),
)


def decimal_year(time_utc) -> np.ndarray:
    """Decimal year: year + (day of year - 1 + fraction of day) / days in that year."""
    times = np.asarray(time_utc, "datetime64[ns]")
    years = times.astype("datetime64[Y]")
    begin, end = years.astype("datetime64[ns]"), (years + 1).astype("datetime64[ns]")
    return years.astype(int) + 1970 + (times - begin) / (end - begin)


def _epochs(decimal: float):
    epoch = int(np.floor(decimal / 5) * 5)
    return epoch, [datetime(epoch, 1, 1), datetime(epoch + 5, 1, 1)]


def main_field_exact(latitude, longitude, height_m, time_utc) -> np.ndarray:
    """IGRF-14 total field in nT at points: ppigrf at the epochs before and after, linear in decimal years between.

    The times must lie in one five-year interval. Longitudes east, heights above the ellipsoid.
    """
    decimal = decimal_year(time_utc)
    epoch, dates = _epochs(float(np.min(decimal)))
    vectors = np.array(
        ppigrf.igrf(
            np.asarray(longitude, float).ravel(), np.asarray(latitude, float).ravel(), np.asarray(height_m) / 1e3, dates
        )
    )
    share = (decimal - epoch) / 5
    vector = vectors[:, 0] + share * (vectors[:, 1] - vectors[:, 0])
    return np.sqrt((vector**2).sum(axis=0))


class MainField:
    """IGRF-14 over a survey: Chebyshev polynomials in plane position through exact values, linear in height.

    What is interpolated are the three coefficients of the squared field as a quadratic in decimal year, which are
    smooth scalars everywhere, the poles included.
    """

    nodes = 9

    def __init__(self, plane: Plane, east, north, first_year: float):
        self._centre = np.array([(east.min() + east.max()) / 2, (north.min() + north.max()) / 2])
        self._half = np.array([np.ptp(east) / 2 + 1e3, np.ptp(north) / 2 + 1e3])
        self._epoch, dates = _epochs(first_year)
        t = np.cos(np.pi * (np.arange(self.nodes) + 0.5) / self.nodes)
        node_east, node_north = np.meshgrid(
            self._centre[0] + self._half[0] * t, self._centre[1] + self._half[1] * t, indexing="ij"
        )
        latitude, longitude = plane.geographic(node_east.ravel(), node_north.ravel())
        vandermonde = np.linalg.inv(np.polynomial.chebyshev.chebvander(t, self.nodes - 1))
        self._coefficients = []
        for height_km in (0.0, -0.1):
            b = np.array(ppigrf.igrf(longitude, latitude, height_km, dates))  # (3, 2, points)
            step = b[:, 1] - b[:, 0]
            parts = [(b[:, 0] ** 2).sum(0), 2 * (b[:, 0] * step).sum(0), (step**2).sum(0)]
            self._coefficients.append(
                [vandermonde @ part.reshape(self.nodes, self.nodes) @ vandermonde.T for part in parts]
            )

    def __call__(self, east, north, height_m, time_utc) -> np.ndarray:
        """Total field in nT at plane positions, heights above the ellipsoid and times."""
        x = (np.asarray(east) - self._centre[0]) / self._half[0]
        y = (np.asarray(north) - self._centre[1]) / self._half[1]
        x_powers = np.polynomial.chebyshev.chebvander(x, self.nodes - 1)
        y_powers = np.polynomial.chebyshev.chebvander(y, self.nodes - 1)
        share = (decimal_year(time_utc) - self._epoch) / 5
        top, low = (
            np.sqrt(sum(((x_powers @ c) * y_powers).sum(1) * share**k for k, c in enumerate(level)))
            for level in self._coefficients
        )
        return top + (top - low) * np.asarray(height_m) / 100.0


def ambient(latitude: float, longitude: float, time_utc) -> tuple[float, float]:
    """Inclination and declination of the main field in degrees, by ppigrf at its epochs."""
    decimal = float(decimal_year(time_utc))
    epoch, dates = _epochs(decimal)
    east, north, up = (c.ravel() for c in ppigrf.igrf(longitude, latitude, 0.0, dates))
    share = (decimal - epoch) / 5
    e, n, u = (c[0] + share * (c[1] - c[0]) for c in (east, north, up))
    return float(np.degrees(np.arctan2(-u, np.hypot(e, n)))), float(np.degrees(np.arctan2(e, n)))


class Crust:
    """Crustal anomaly as a function of plane position and sensor depth.

    Stripes: blocks with vertical sides between the depths of top and bottom, magnetised along the axial dipole's
    direction (tan I = 2 tan latitude) either way. An edge at x0 of a half-infinite block has, with X = x - x0,
    ``Bx = mu0/2pi (-Mx P + Mz Q)`` and ``Bz = mu0/2pi (Mx Q + Mz P)``,
    ``P = atan(X/z1) - atan(X/z2)``, ``Q = 1/2 ln((X^2 + z2^2)/(X^2 + z1^2))`` (charge sheets of a two-dimensional
    body; e.g. Blakely 1995, ch. 9), and the anomaly is the projection on the ambient field. Along the strike the axis
    bends gently and the strength varies. Seamounts are dipoles along the ambient field. Uneven basalt adds many
    plane waves of any direction that fade with the height above the layer.
    """

    def __init__(self, scenario, inclination_deg: float, declination_deg: float, rng):
        s = self.scenario = scenario
        across = s.ridge_azimuth_deg + 90.0
        self._across, self._along = direction(across), direction(s.ridge_azimuth_deg)
        i_f, d_f = np.radians(inclination_deg), np.radians(declination_deg - across)
        i_r = np.arctan(2 * np.tan(np.radians(s.latitude_deg)))
        fx, fz = np.cos(i_f) * np.cos(d_f), np.sin(i_f)
        mx, mz = np.cos(i_r) * np.cos(np.radians(-across)), np.sin(i_r)
        self._even, self._odd = mz * fx + mx * fz, mz * fz - mx * fx
        self.ambient_unit = np.array(
            [
                np.cos(i_f) * np.sin(np.radians(declination_deg)),
                np.cos(i_f) * np.cos(np.radians(declination_deg)),
                -np.sin(i_f),
            ]
        )
        ages = np.array(REVERSALS_MA)
        steps = 2.0 * s.magnetisation_a_m * np.where(np.arange(len(ages)) % 2 == 0, -1.0, 1.0)  # outwards
        low, high = s.half_rate_km_per_ma
        edges = np.concatenate([-low * ages, high * ages]) * 1e3
        steps = np.concatenate([-steps, steps])
        spread = np.array([-0.35, 0.0, 0.35]) * s.transition_km * 1e3
        self._edges = (edges[:, None] + spread).ravel()
        self._steps = np.repeat(steps / len(spread), len(spread))
        self._phases = rng.uniform(0, 2 * np.pi, 8)
        half = s.line_length_km * 500
        spread_along = max(s.lines * s.line_spacing_km * 500, 5e3)
        self._mounts = np.column_stack(
            [
                rng.uniform(-half, half, s.seamounts),
                rng.uniform(-spread_along, spread_along, s.seamounts),
                rng.uniform(0.75, 1.0, s.seamounts) * s.layer_top_m,
                rng.choice([-1.0, 1.0], s.seamounts) * rng.uniform(0.5, 1.2, s.seamounts) * s.seamount_nt,
            ]
        )

        wavelength = 10 ** rng.uniform(np.log10(4e3), np.log10(16e3), 24)
        bearing = rng.uniform(0, 2 * np.pi, 24)
        size = np.exp(-2 * np.pi * s.layer_top_m / wavelength)
        self._waves = np.column_stack(
            [
                2 * np.pi / wavelength * np.sin(bearing),
                2 * np.pi / wavelength * np.cos(bearing),
                rng.uniform(0, 2 * np.pi, 24),
                s.rough_nt * size / np.sqrt((size**2).sum() / 2),
                2 * np.pi / wavelength,
            ]
        )

    def __call__(self, east, north, depth_m) -> np.ndarray:
        """Anomaly in nT; arrays of one shape."""
        s, p = self.scenario, self._phases
        east, north = np.asarray(east, float), np.asarray(north, float)
        x = self._across[0] * east + self._across[1] * north
        y = self._along[0] * east + self._along[1] * north
        x = x - s.bend_km * 1e3 * np.sin(2 * np.pi * y / 70e3 + p[0])
        z1, z2 = s.layer_top_m - depth_m, s.layer_top_m + s.layer_thickness_m - depth_m
        total = np.zeros_like(x)
        for edge, step in zip(self._edges, self._steps, strict=True):
            d = x - edge
            total += step * (
                self._odd * (np.arctan(d / z1) - np.arctan(d / z2))
                + self._even * 0.5 * np.log((d * d + z2 * z2) / (d * d + z1 * z1))
            )
        total *= MU0_OVER_2PI * (1 + s.along_strike * np.sin(2 * np.pi * y / 45e3 + p[1]))
        for mount_x, mount_y, mount_z, peak in self._mounts:
            e = east - (mount_x * self._across[0] + mount_y * self._along[0])
            n = north - (mount_x * self._across[1] + mount_y * self._along[1])
            u = mount_z - depth_m
            r2 = e * e + n * n + u * u
            cosine = (self.ambient_unit[0] * e + self.ambient_unit[1] * n + self.ambient_unit[2] * u) / np.sqrt(r2)
            total += peak / 2 * (3 * cosine**2 - 1) * (mount_z / np.sqrt(r2)) ** 3
        for k_east, k_north, phase, peak, k in self._waves:
            total += peak * (1 + k * depth_m) * np.cos(k_east * east + k_north * north + phase)
        for k, wavelength in enumerate((160e3, 230e3, 310e3)):
            along = np.sin(p[2 + k]) * east + np.cos(p[2 + k]) * north
            total += s.regional_nt / 2 * np.cos(2 * np.pi * along / wavelength + p[5 + k])
        return total


def wander(rng, span_s: float, tau_s: float):
    """Draw a smooth process of unit variance and correlation time tau, as a function of seconds after the start."""
    knots = np.arange(-4, int(np.ceil(span_s / tau_s)) + 5) * tau_s
    spline = CubicSpline(knots, rng.standard_normal(len(knots)))
    return lambda t: spline(np.clip(t, knots[0], knots[-1])) / 0.91  # 0.91: rms at and between the knots


def markov(rng, n: int, step_s: float, tau_s: float) -> np.ndarray:
    """Draw a first-order Markov process of unit variance at even steps."""
    a = np.exp(-step_s / tau_s)
    drawn = rng.standard_normal(n) * np.sqrt(1 - a * a)
    drawn[0] /= np.sqrt(1 - a * a)
    return lfilter([1.0], [1.0, -a], drawn)


class External:
    """Variation of the external field: Sq by local solar time, storm, bays and background by universal time."""

    margin_s = 7 * 3600.0  # before and after the survey

    def __init__(self, scenario, start: np.datetime64, span_s: float, rng):
        self._s = scenario
        self._start_h = float((start - start.astype("datetime64[D]")) / np.timedelta64(1, "h"))
        whole = span_s + 2 * self.margin_s
        self._daily, self._background, self._quick = (wander(rng, whole, tau) for tau in (60e3, 1500.0, 500.0))
        self.onset_s = rng.uniform(0.25, 0.55) * span_s
        self.bays = [(rng.uniform(0.05, 0.95) * span_s, rng.uniform(1200, 2400), rng.uniform(-0.4, 0.4)) for _ in "abc"]

    def __call__(self, time_s, longitude_deg, gain: float = 1.0) -> np.ndarray:
        """Variation in nT at seconds after the survey's start."""
        s = self._s
        hour = self._start_h + time_s / 3600 + longitude_deg / 15
        bell = np.exp(2.5 * (np.cos(2 * np.pi * (hour - 11.6) / 24) - 1)) - 0.28
        daily = -s.sq_nt * (1 + 0.12 * self._daily(time_s + self.margin_s)) * bell
        after = np.maximum(time_s - self.onset_s, 0.0) / 3600
        phase = (1 - np.exp(-after / 1.5)) * np.exp(-after / 9.0)
        # at middle latitudes the total field sees less of the ring current than of bays and pulsations
        storm = -s.storm_nt * phase * (0.4 + 0.3 * self._quick(time_s + self.margin_s))
        for centre, width, size in self.bays:
            storm = storm + size * s.storm_nt * np.exp(-0.5 * ((time_s - centre) / width) ** 2)
        return gain * (daily + storm + s.background_nt * self._background(time_s + self.margin_s))
