"""An invented towed magnetometer survey of which everything is known. Imports no stage of the pipeline.

What a reading is made of (all in nT)::

    total field = main field + anomaly + diurnal + heading effect + line error + noise + spike

The crust is a slow ridge's striped sea floor (vertical-sided two-dimensional blocks in closed form), dipoles as
seamounts and a long-wavelength part, evaluable anywhere; the main field is IGRF-14 by ppigrf, used only at its epochs
and joined in decimal years as the model is defined; the sensor follows the pursuit curve of the tow point, integrated
with Runge-Kutta steps. Everything is drawn from the one seed of the `Scenario`.
"""

from dataclasses import dataclass, field, replace

import numpy as np
import pandas as pd
import pyproj
from scipy.interpolate import CubicSpline
from synthetic_fields import (
    Crust,
    External,
    MainField,
    ambient,
    decimal_year,
    main_field_exact,
    markov,
    wander,
)
from synthetic_track import Course, Plane, direction, pursuit

FAULTS = {0: "none", 1: "spike", 2: "dropout", 3: "low signal", 4: "passing ship"}


@dataclass(frozen=True)
class Base:
    """A base station, placed by distance and azimuth from the survey's centre.

    `gain` multiplies the disturbance that the survey sees with gain 1; `own_nt` is the size of a slow variation that
    this station alone has. Gaps are (hours after the survey's start, length in hours).
    """

    name: str = "Base"
    distance_km: float = 150.0
    azimuth_deg: float = 120.0
    height_m: float = 40.0
    interval_s: float = 60.0
    gain: float = 1.0
    own_nt: float = 0.3
    noise_nt: float = 0.1
    crustal_nt: float = 130.0
    gaps: tuple[tuple[float, float], ...] = ()
    ends_after_h: float | None = None


@dataclass(frozen=True)
class Scenario:
    """Parameters of a simulated survey; every random number comes from `seed`. Lengths and times by their suffix."""

    seed: int = 1
    # where and when
    latitude_deg: float = 44.0
    longitude_deg: float = -28.0
    start: str = "2024-06-10T06:00:00"
    sampling_s: float = 5.0
    sea_surface_height_m: float = 0.0
    # lines
    layout: str = "grid"  # or "random": segments of any direction
    lines: int = 10
    line_length_km: float = 40.0
    line_spacing_km: float = 4.0
    ties: int = 3
    tie_positions: tuple[float, ...] = ()  # as a fraction of half the line length; even where empty
    calibration: bool = True
    calibration_headings: int = 8
    calibration_length_km: float = 3.0
    turn_radius_m: float = 700.0
    run_in_km: float = 2.0
    rounding_s: float = 10.0  # of the line log
    # ship
    speed_mps: float = 5.0
    speed_wander: float = 0.03
    speed_by_line: float = 0.04
    helm_m: float = 12.0
    yaw_deg: float = 0.6
    leeway_deg: float = 2.5
    gyro_noise_deg: float = 0.15
    forward_m: float = -45.0
    starboard_m: float = 3.0
    # cable and sensor
    cable_m: float = 250.0
    cable_changes: tuple[tuple[int, float], ...] = ()  # (after leg number, new cable-out)
    cable_error_m: float = 0.0  # logged minus true
    winch_mps: float = 0.5
    sensor_depth_m: float = 10.0
    depth_wander_m: float = 0.4
    depth_noise_m: float = 0.05
    # crust
    ridge_azimuth_deg: float = 15.0
    half_rate_km_per_ma: tuple[float, float] = (11.5, 12.5)  # on the low and the high side of the axis
    magnetisation_a_m: float = 9.0
    layer_top_m: float = 2700.0
    layer_thickness_m: float = 500.0
    transition_km: float = 1.0
    bend_km: float = 1.5
    along_strike: float = 0.15  # how much the strength varies along the ridge
    seamounts: int = 4
    seamount_nt: float = 150.0
    rough_nt: float = 8.0
    regional_nt: float = 40.0
    # external field
    sq_nt: float = 30.0
    storm_nt: float = 0.0
    background_nt: float = 1.5
    diurnal_gain: float = 1.0
    diurnal_own_nt: float = 0.3
    bases: tuple[Base, ...] = (Base(),)
    # heading effect: C1, S1, C2, S2
    heading_nt: tuple[float, float, float, float] = (4.0, -2.0, 1.0, 0.7)
    # line errors
    line_shift_nt: float = 0.0
    line_drift_nt: float = 0.0  # rms along a line
    drift_form: str = "linear"  # or "walk": Brownian, without mean
    # instrument
    noise_nt: float = 0.1
    resolution_nt: float = 0.001
    spikes_per_1000: float = 1.0
    faults_h: tuple[
        tuple[float, float, str], ...
    ] = ()  # (hours, seconds, "repeat", "gap", "low signal" or "passing ship")
    jitter_s: float = 0.01
    clock_offset_s: float = 0.0  # stated: to be added to the logger's stamps
    clock_drift_s_per_day: float = 0.0  # stated
    clock_unknown_s: float = 0.0  # not stated, to be added too
    # navigation
    navigation_s: float = 5.0
    fix_noise_m: float = 1.0
    fix_wander_m: float = 0.7
    wild_fixes: int = 0  # kilometres off
    navigation_gaps_h: tuple[tuple[float, float], ...] = ()  # (hours, seconds)


@dataclass(frozen=True)
class Survey:
    """A simulated survey: records as an instrument gave them, and the truth row by row.

    Attributes
    ----------
    readings : pandas.DataFrame
        ``logged_utc`` (logger's stamp), ``time_utc`` (with the stated clock correction), ``total_field_nt``,
        ``signal``, ``logged_depth_m``.
    truth : pandas.DataFrame
        Row-aligned with `readings`: true time, sensor position, depth, each term of the total field, ``fault``
        (see `FAULTS`), ``line_index`` (-1 on no line), tow direction, ship's heading, layback.
    navigation : pandas.DataFrame
        Fixes of the antenna (``time_utc, latitude_deg, longitude_deg``), gyro ``heading_deg``, ``course_deg`` and
        ``speed_mps``; ``given`` is False inside a navigation gap.
    lines : pandas.DataFrame
        ``line, kind, start_utc, end_utc``.
    cable : pandas.DataFrame
        ``time_utc, cable_out_m`` as logged.
    bases : list of dict
        ``name, latitude_deg, longitude_deg, height_m, time_utc, total_field_nt`` (NaN in a gap), ``diurnal_nt``.

    """

    scenario: Scenario
    readings: pd.DataFrame
    truth: pd.DataFrame
    navigation: pd.DataFrame
    lines: pd.DataFrame
    cable: pd.DataFrame
    bases: list[dict] = field(default_factory=list)
    crust: Crust | None = None
    main: MainField | None = None
    plane: Plane | None = None

    def anomaly_at(self, latitude_deg, longitude_deg, depth_m) -> np.ndarray:
        """Return the true anomaly in nT wherever a reduction says that the sensor was; NaN stays NaN."""
        return self.crust(*self.plane.metres(np.asarray(latitude_deg), np.asarray(longitude_deg)), np.asarray(depth_m))

    def anomaly_error(self, anomaly_nt, latitude_deg, longitude_deg, depth_m, where) -> np.ndarray:
        """Return the errors in nT of readings `where`, taken at the claimed positions, their mean (datum) removed."""
        where = np.asarray(where, bool)
        there = (np.asarray(column)[where] for column in (latitude_deg, longitude_deg, depth_m))
        error = np.asarray(anomaly_nt)[where] - self.anomaly_at(*there)
        return error - error.mean()


# -- the survey ------------------------------------------------------------------------------------------------------


def _legs(s: Scenario, rng):
    """Names, kinds and end points (m, plane) of all legs in the order in which they are sailed."""
    across, along = direction(s.ridge_azimuth_deg + 90), direction(s.ridge_azimuth_deg)
    half, width = s.line_length_km * 500, (s.lines - 1) * s.line_spacing_km * 500
    legs = []
    if s.calibration:
        centre = -(half * 0.55) * across - (width + 6e3) * along
        reach = s.calibration_length_km * 500
        n = s.calibration_headings
        stride = next(k for k in (*range(round(0.375 * n), n), 1) if np.gcd(k, n) == 1)
        for k in range(n):
            # a star polygon: from point to point across the centre, which takes less turning than to and fro
            way = reach * direction(360.0 / n * (k * stride % n))
            legs.append((f"CAL-{k + 1}", "calibration", centre - way, centre + way))
    for k in range(s.lines):
        if s.layout == "random":
            middle = rng.uniform(-0.25, 0.25, 2) * s.line_length_km * 1e3
            way = half * direction(rng.uniform(0, 360))
            start, end = middle - way, middle + way
        else:
            middle = (k * s.line_spacing_km * 1e3 - width) * along
            sign = 1 if k % 2 == 0 else -1
            start, end = middle - sign * half * across, middle + sign * half * across
        legs.append((f"L{101 + k}", "line", start, end))
    places = s.tie_positions or tuple(np.linspace(-0.7, 0.7, s.ties) if s.ties > 1 else [0.1] * s.ties)
    for k, place in enumerate(reversed(places) if s.lines % 2 else places):
        sign = 1 if k % 2 else -1
        reach = (width + 2.5e3) * sign * along
        legs.append((f"T{k + 1}", "tie", place * half * across - reach, place * half * across + reach))
    return legs


def simulate(scenario: Scenario) -> Survey:
    """Simulate a survey; equal scenarios give equal surveys."""
    s = scenario
    streams = iter(np.random.default_rng(s.seed).spawn(16))
    plane = Plane(s.latitude_deg, s.longitude_deg)
    start = np.datetime64(s.start, "ns")
    legs = _legs(s, next(streams))
    course = Course(
        [(*leg[2:], *((1200.0, 300.0) if leg[1] == "calibration" else (s.run_in_km * 1e3,) * 2)) for leg in legs],
        s.turn_radius_m,
    )

    # the ship along its track
    rng = next(streams)
    distance = np.linspace(0.0, course.length, int(course.length / 20) + 2)
    marks = np.array(course.marks)
    factor = 1 + s.speed_by_line * np.clip(rng.standard_normal(len(marks)), -2, 2)
    speed = np.interp(distance, marks.ravel(), np.repeat(factor, 2))
    speed = s.speed_mps * speed * (1 + s.speed_wander * wander(rng, course.length, 3000.0)(distance))
    elapsed = np.concatenate([[0.0], np.cumsum(np.diff(distance) * 0.5 * (1 / speed[1:] + 1 / speed[:-1]))])
    step = s.sampling_s / np.ceil(s.sampling_s / 2.5)
    time_s = np.arange(0.0, elapsed[-1], step)
    span = time_s[-1]
    run = CubicSpline(elapsed, distance)(time_s)
    east, north, azimuth = course.at(run)
    off = s.helm_m * wander(rng, span, 260.0)(time_s)
    east, north = east + off * np.cos(np.radians(azimuth)), north - off * np.sin(np.radians(azimuth))
    antenna = CubicSpline(time_s, np.column_stack([east, north]))
    velocity = antenna(time_s, 1)
    made_good = np.degrees(np.arctan2(velocity[:, 0], velocity[:, 1]))
    wind = rng.uniform(0, 360)
    # course is averaged over the helm's time, a hull does not turn at once
    leeway = s.leeway_deg * (np.sin(np.radians(wind - azimuth)) + 0.25 * wander(rng, span, 1800.0)(time_s))
    heading = np.degrees(np.unwrap(np.radians(made_good))) + leeway + s.yaw_deg * wander(rng, span, 25.0)(time_s)
    turned = np.radians(heading)
    tow_east = east + s.forward_m * np.sin(turned) + s.starboard_m * np.cos(turned)
    tow_north = north + s.forward_m * np.cos(turned) - s.starboard_m * np.sin(turned)
    true_north = np.degrees(np.unwrap(np.radians(plane.true_north_deg(east, north))))

    # lines and cable
    times = CubicSpline(distance, elapsed)(marks)
    rounding = np.array([np.ceil, np.floor])
    line_s = np.column_stack([f(times[:, k] / s.rounding_s) * s.rounding_s for k, f in enumerate(rounding)])
    cable_s, cable_m = [0.0], [s.cable_m]
    knots, values = [0.0], [s.cable_m]
    for after, new in s.cable_changes:
        when = np.round((times[after, 1] + times[after + 1, 0]) / 2 / 60) * 60
        knots += [when, when + abs(new - values[-1]) / s.winch_mps]
        values += [values[-1], new]
        cable_s.append(when)
        cable_m.append(new)
    cable = np.interp(time_s, knots, values)
    rng = next(streams)
    # a slower ship lets the sensor sink
    ship_speed = np.hypot(*velocity.T)
    depth = s.sensor_depth_m * (1 + 0.8 * (1 - np.clip(ship_speed / s.speed_mps, 0.5, 1.5))) * cable / s.cable_m
    depth = depth + s.depth_wander_m * wander(rng, span, 900.0)(time_s)
    layback = np.sqrt(cable**2 - depth**2)
    fish_east, fish_north, psi = pursuit(time_s, tow_east, tow_north, layback)
    fish = CubicSpline(
        time_s, np.column_stack([fish_east, fish_north, psi, depth, layback, turned, np.radians(true_north), cable])
    )

    # readings: when, where
    rng = next(streams)
    nominal = np.arange(0.0, span - 2.0, s.sampling_s)
    at = np.maximum(nominal + s.jitter_s * rng.uniform(-1, 1, len(nominal)), 0.0)
    at_utc = start + np.round(at * 1e9).astype("int64").astype("timedelta64[ns]")
    e, n, psi, depth, layback, turned, convergence, cable_true = fish(at).T
    latitude, longitude = plane.geographic(e, n)
    inclination, declination = ambient(s.latitude_deg, s.longitude_deg, start)
    crust = Crust(s, inclination, declination, next(streams))
    main = MainField(plane, e, n, float(decimal_year(start)))
    external = External(s, start, span, next(streams))
    rng = next(streams)
    ship_heading = np.degrees(turned - convergence) % 360
    index = np.full(len(at), -1, "int32")
    level = np.zeros(len(at))
    for k, (begin, end) in enumerate(line_s):
        on = (at >= begin) & (at <= end)
        index[on] = k
        share = (at[on] - begin) / (end - begin)
        if s.drift_form == "walk":
            pins = np.linspace(0, 1, 9)
            walk = np.cumsum(rng.standard_normal(9)) / np.sqrt(9)
            drift = 2.4 * np.interp(share, pins, walk - walk.mean())  # 2.4: unit rms about the mean
        else:
            drift = np.sqrt(3) * (2 * share - 1) * rng.standard_normal()
        level[on] = s.line_shift_nt * rng.standard_normal() + s.line_drift_nt * drift
    c1, s1, c2, s2 = s.heading_nt
    theta = np.radians(ship_heading)
    truth = pd.DataFrame(
        {
            "time_utc": at_utc,
            "sensor_latitude_deg": latitude,
            "sensor_longitude_deg": longitude,
            "sensor_depth_m": depth,
            "east_m": e,
            "north_m": n,
            "tow_direction_deg": (np.degrees(psi) - plane.true_north_deg(e, n)) % 360,
            "ship_heading_deg": ship_heading,
            "layback_m": layback,
            "cable_out_m": cable_true,
            "line_index": index,
            "main_field_nt": main(e, n, s.sea_surface_height_m - depth, at_utc),
            "anomaly_nt": crust(e, n, depth),
            "diurnal_nt": external(at, longitude, s.diurnal_gain)
            + s.diurnal_own_nt * wander(next(streams), span, 7000.0)(at),
            "heading_nt": c1 * np.cos(theta) + s1 * np.sin(theta) + c2 * np.cos(2 * theta) + s2 * np.sin(2 * theta),
            "level_nt": level,
            "noise_nt": s.noise_nt * next(streams).standard_normal(len(at)),
        }
    )
    truth, readings = _instrument(s, truth, at, next(streams))
    clock = s.clock_offset_s + s.clock_drift_s_per_day * (at[: len(at)] / 86400)
    stamp = at_utc - np.round((clock + s.clock_unknown_s) * 1e3).astype("int64").astype("timedelta64[ms]")
    readings.insert(0, "logged_utc", stamp.astype("datetime64[ms]").astype("datetime64[ns]"))
    readings.insert(1, "time_utc", readings["logged_utc"] + np.round(clock * 1e9).astype("int64").astype("m8[ns]"))
    there = ~truth.pop("absent").to_numpy()
    truth = truth[there].reset_index(drop=True)
    readings = readings[there].reset_index(drop=True)

    navigation = _navigation(s, plane, start, time_s, antenna, heading, true_north, next(streams))
    named = pd.DataFrame(
        {
            "line": [leg[0] for leg in legs],
            "kind": [leg[1] for leg in legs],
            "start_utc": start + line_s[:, 0].astype("int64").astype("timedelta64[s]"),
            "end_utc": start + line_s[:, 1].astype("int64").astype("timedelta64[s]"),
        }
    )
    logged = pd.DataFrame(
        {
            "time_utc": start + np.array(cable_s).astype("int64").astype("timedelta64[s]"),
            "cable_out_m": np.array(cable_m) + s.cable_error_m,
        }
    )
    logged.loc[0, "time_utc"] = start - np.timedelta64(10, "m")
    bases = [_base(b, s, start, span, external, k, next(streams)) for k, b in enumerate(s.bases)]
    return Survey(s, readings, truth, navigation, named, logged, bases, crust, main, plane)


def _instrument(s: Scenario, truth: pd.DataFrame, at, rng):
    """Add what the instrument does to the field: spikes, faults, resolution, signal strength, depth sensor."""
    n = len(at)
    spike = np.zeros(n)
    starts = np.sort(rng.choice(n, rng.poisson(s.spikes_per_1000 * n / 1000), replace=False))
    starts = starts[np.diff(starts, prepend=-100) > 40]
    for first in starts:
        length = rng.choice([1, 1, 1, 1, 2, 3])
        size = rng.choice([-1, 1]) * np.exp(rng.uniform(np.log(3.0), np.log(500.0)))
        spike[first : first + length] = size * rng.uniform(0.7, 1.0, len(spike[first : first + length]))
    fault = np.where(spike != 0, 1, 0)
    signal = 940 + 12 * markov(rng, n, s.sampling_s, 300.0) + 4 * rng.standard_normal(n)
    signal = signal - np.where(fault == 1, rng.uniform(0, 150, n), 0.0)
    terms = ["main_field_nt", "anomaly_nt", "diurnal_nt", "heading_nt", "level_nt", "noise_nt"]
    total = truth[terms].sum(axis=1).to_numpy() + spike
    absent = np.zeros(n, bool)
    for hours, seconds, what in s.faults_h:
        within = np.flatnonzero((at >= hours * 3600) & (at < hours * 3600 + seconds))
        if not len(within):
            continue
        if what == "gap":
            absent[within] = True
            continue
        spike[within] = 0.0
        if what == "passing ship":  # an iron hull abeam: smooth, so that no automatic test sees it
            fault[within] = 4
            total[within] += 18 * np.sin(np.linspace(0, np.pi, len(within))) ** 2
        elif what == "repeat":
            fault[within] = 2
            total[within] = total[within[0]]
        else:
            fault[within] = 3
            total[within] += rng.standard_normal(len(within)) * 25
            signal[within] = rng.uniform(60, 300, len(within))
    spike[absent] = 0.0
    truth = truth.assign(spike_nt=spike, fault=fault, absent=absent)
    readings = pd.DataFrame(
        {
            "total_field_nt": np.round(total / s.resolution_nt) * s.resolution_nt,
            "signal": np.round(signal),
            "logged_depth_m": np.round(truth["sensor_depth_m"] + s.depth_noise_m * rng.standard_normal(n), 2),
        }
    )
    return truth, readings


def _navigation(s: Scenario, plane, start, time_s, antenna, heading, true_north, rng) -> pd.DataFrame:
    """Make fixes with white noise and slow wander, gyro, course and speed, at even times."""
    at = np.arange(0.0, time_s[-1], s.navigation_s)
    n = len(at)
    noise = [
        s.fix_noise_m * rng.standard_normal(n) + s.fix_wander_m * markov(rng, n, s.navigation_s, 900.0) for _ in "en"
    ]
    position, velocity = antenna(at), antenna(at, 1)
    wild = rng.choice(n, s.wild_fixes, replace=False)
    noise[0][wild] += rng.choice([-1, 1], s.wild_fixes) * rng.uniform(1e3, 8e3, s.wild_fixes)
    latitude, longitude = plane.geographic(position[:, 0] + noise[0], position[:, 1] + noise[1])
    north = np.interp(at, time_s, true_north)
    gyro = np.interp(at, time_s, heading) - north + s.gyro_noise_deg * rng.standard_normal(n)
    given = np.ones(n, bool)
    for hours, seconds in s.navigation_gaps_h:
        given &= ~((at >= hours * 3600) & (at < hours * 3600 + seconds))
    return pd.DataFrame(
        {
            "time_utc": start + np.round(at * 1e3).astype("int64").astype("timedelta64[ms]"),
            "latitude_deg": latitude,
            "longitude_deg": longitude,
            "heading_deg": gyro % 360,
            "course_deg": (np.degrees(np.arctan2(velocity[:, 0], velocity[:, 1])) - north) % 360,
            "speed_mps": np.hypot(*velocity.T),
            "given": given,
        }
    )


def _base(base: Base, s: Scenario, start, span, external: External, number: int, rng) -> dict:
    """Make the record of a base station from six hours before the survey to six hours after it."""
    longitude, latitude, _ = pyproj.Geod(ellps="WGS84").fwd(
        s.longitude_deg, s.latitude_deg, base.azimuth_deg, base.distance_km * 1e3
    )
    longitude = (longitude + 180) % 360 - 180
    latitude, longitude = round(latitude, 3), round(longitude, 3)
    begin = (start - np.timedelta64(6, "h")).astype("datetime64[m]").astype("datetime64[ns]")
    at = np.arange(0.0, span + 12 * 3600 + base.interval_s, base.interval_s)
    times = begin + np.round(at * 1e9).astype("int64").astype("timedelta64[ns]")
    seconds = (times - start) / np.timedelta64(1, "s")
    own = base.own_nt * wander(rng, span + 12 * 3600, 7000.0)(seconds + 6 * 3600)
    # the mean over the sampling interval, centred on it, as observatories give it
    inside = seconds[:, None] + (np.arange(6) - 2.5) / 6 * base.interval_s
    diurnal = external(inside.ravel(), longitude, base.gain).reshape(inside.shape).mean(axis=1) + own
    main = main_field_exact(np.full(3, latitude), np.full(3, longitude), base.height_m, times[[0, len(times) // 2, -1]])
    main = CubicSpline(seconds[[0, len(times) // 2, -1]], main)(seconds)
    total = main + base.crustal_nt + diurnal + base.noise_nt * rng.standard_normal(len(times))
    for hours, length in base.gaps:
        total[(seconds >= hours * 3600) & (seconds < (hours + length) * 3600)] = np.nan
    if base.ends_after_h is not None:
        total[seconds > base.ends_after_h * 3600] = np.nan
    return {
        "name": base.name if number == 0 or base.name != "Base" else f"{base.name} {number + 1}",
        "latitude_deg": latitude,
        "longitude_deg": longitude,
        "height_m": base.height_m,
        "interval_s": base.interval_s,
        "time_utc": times,
        "total_field_nt": total,
        "diurnal_nt": diurnal,
    }


# -- ready scenarios ---------------------------------------------------------------------------------------------------


def varied(seed: int) -> Scenario:
    """Draw a small survey of any geometry, latitude, noise and storm level, with and without ties and the rest."""
    rng = np.random.default_rng([seed, 3])
    storm = float(rng.choice([0.0, 20.0, 60.0]))
    n_bases = int(rng.choice([0, 1, 1, 1, 2, 3]))
    bases = tuple(
        Base(
            name=f"Base {k + 1}",
            distance_km=float(rng.uniform(60, 400)),
            azimuth_deg=float(rng.uniform(0, 360)),
            gain=float(1 + 0.03 * rng.standard_normal()),
            own_nt=float(rng.uniform(0.2, 0.8)),
            crustal_nt=float(rng.normal(0, 150)),
        )
        for k in range(n_bases)
    )
    return Scenario(
        seed=seed,
        latitude_deg=float(rng.uniform(-72, 76)),
        longitude_deg=float(rng.choice([rng.uniform(-180, 180), 179.9, -179.95])),
        start=f"20{rng.integers(10, 29)}-0{rng.integers(1, 10)}-{rng.integers(10, 28)}T{rng.integers(10, 24)}:00:00",
        layout=str(rng.choice(["grid", "grid", "random"])),
        lines=int(rng.integers(6, 13)),
        line_length_km=float(rng.uniform(25, 50)),
        line_spacing_km=float(rng.uniform(3, 6)),
        ties=int(rng.choice([0, 2, 3, 4])),
        calibration=bool(rng.random() < 0.7),
        speed_mps=float(rng.uniform(3.5, 6.0)),
        cable_m=float(rng.uniform(150, 350)),
        cable_error_m=float(rng.normal(0, 4)),
        ridge_azimuth_deg=float(rng.uniform(0, 180)),
        half_rate_km_per_ma=(float(rng.uniform(8, 30)), float(rng.uniform(8, 30))),
        layer_top_m=float(rng.uniform(2200, 4200)),
        storm_nt=storm,
        sq_nt=float(rng.uniform(10, 45)),
        diurnal_own_nt=float(rng.uniform(0.2, 0.8)),
        bases=bases,
        heading_nt=tuple(float(v) for v in rng.normal(0, [4, 4, 1.5, 1.5])),
        line_shift_nt=float(rng.uniform(0, 3)),
        line_drift_nt=float(rng.choice([0.0, 0.0, 0.7, 1.5])),
        noise_nt=float(np.exp(rng.uniform(np.log(0.05), np.log(0.6)))),
        fix_noise_m=float(rng.uniform(0.5, 2.5)),
        fix_wander_m=float(rng.uniform(0.3, 1.5)),
        spikes_per_1000=0.5,
    )


def everything_wrong(seed: int) -> Scenario:
    """Draw a survey in which all goes wrong at once: cable log, clock, far base, storm, heading, shifts and drifts."""
    rng = np.random.default_rng([seed, 10])
    size = rng.uniform(5, 10)
    turn = rng.uniform(0, 2 * np.pi)
    return replace(
        Scenario(),
        seed=seed,
        latitude_deg=float(rng.uniform(-60, 60)),
        longitude_deg=float(rng.uniform(-180, 180)),
        lines=10,
        line_length_km=float(rng.uniform(35, 50)),
        line_spacing_km=float(rng.uniform(3, 5)),
        ties=int(rng.choice([3, 4])),
        ridge_azimuth_deg=float(rng.uniform(0, 180)),
        cable_error_m=float(rng.choice([-1, 1]) * rng.uniform(10, 20)),
        clock_unknown_s=2.0,
        speed_by_line=0.08,
        diurnal_gain=1.08,
        diurnal_own_nt=float(rng.uniform(1.0, 1.5)),
        storm_nt=60.0,
        bases=(Base(distance_km=400.0, azimuth_deg=float(rng.uniform(0, 360)), own_nt=0.0),),
        heading_nt=(
            float(size * np.cos(turn)),
            float(size * np.sin(turn)),
            float(rng.normal(0, 0.2) * size),
            float(rng.normal(0, 0.2) * size),
        ),
        line_shift_nt=3.0,
        line_drift_nt=float(rng.uniform(1.0, 1.5)),
        fix_noise_m=1.5,
        noise_nt=0.3,
        spikes_per_1000=0.5,
    )
