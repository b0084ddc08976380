"""Locate the towed sensor: antenna, tow point, cable, pursuit curve.

The ship's fixes come gated, smoothed and on an even clock from `steps.navigation`. The tow point follows
by the lever arm, turned by the ship's gyro heading. The sensor follows the pursuit curve (tractrix) of the tow point:
for a straight element of its path of length ds, with phi the angle between cable and path and B the layback,
``tan(phi1 / 2) = tan(phi0 / 2) exp(-ds / B)`` exactly. With psi the direction of the cable that is linear in
v = (cos psi/2, sin psi/2): the part of v along the half-angle vector of the path stays, the part across it shrinks by
exp(-ds / B). So the whole track is a scan of 2 x 2 matrices, done for many stretches at once.

All positions are Earth-centred vectors underneath (see `steps.geodesy`); directions are carried along the path by
parallel transport.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steps import edits, geodesy, stage
from steps.columns import Flag
from steps.errors import SurveyError, mistake
from steps.navigation import Track, directions, gate_fixes, heading_on_clock, make_tracks
from steps.settings import Layback, Position

CABLE_LOG = {"time_utc": "time", "cable_out_m": "number"}  # columns of the cable log
SETTLED = 0.05  # share of the unknown first direction of the cable that may be left
STRETCHES = 4096  # worked on side by side in the scan
NS_PER_S = 1e9


# -- cable -----------------------------------------------------------------------------------------------------------


def check_cable(log: pd.DataFrame, name: str) -> pd.DataFrame:
    """Check a cable log: times increase, lengths are possible.

    Raises
    ------
    SurveyError
        With one sentence for each mistake.

    """
    wrong = []
    time = log["time_utc"].to_numpy()
    for k in np.flatnonzero(time[1:] <= time[:-1]) + 1:
        place, got = f"{name} row {log['row'][k]}, time_utc", f"{log['time_utc'][k]} after {log['time_utc'][k - 1]}"
        wrong.append(mistake(place, "must increase", got, "Sort or remove the row."))
    for row in log[~log["cable_out_m"].between(0, 5000)].itertuples():
        wrong.append(mistake(f"{name} row {row.row}, cable_out_m", "must be between 0 and 5000 m", row.cable_out_m))
    if len(log) == 0:
        wrong.append(mistake(name, "must hold at least one row", "none"))
    if wrong:
        raise SurveyError(*wrong)
    return log


def cable_out(at: np.ndarray, log_time: np.ndarray, log_length: np.ndarray) -> np.ndarray:
    """Return the cable-out at instants: each row of the log holds until the next; NaN before the first.

    Parameters
    ----------
    at, log_time : array, shape (n,), (m,)
        Instants of one type; the log's increase.
    log_length : array of float, shape (m,)
        Metres.

    Returns
    -------
    array of float, shape (n,)

    """
    row = np.searchsorted(log_time, at, side="right") - 1
    return np.where(row >= 0, log_length[np.maximum(row, 0)], np.nan)


def horizontal_layback(cable_m: np.ndarray, depth_m: np.ndarray, *, settings: Layback) -> np.ndarray:
    """Return the horizontal distance from tow point to sensor, metres; straight cable, or a fraction of cable-out."""
    if settings.cable_form == "fraction":
        return settings.fraction * cable_m
    return np.sqrt(np.maximum(cable_m**2 - depth_m**2, 0.0))


# -- towing ----------------------------------------------------------------------------------------------------------


def pursuit_curve(east: np.ndarray, north: np.ndarray, layback_m: np.ndarray, first_rad: float) -> np.ndarray:
    """Return the direction of the cable along the path of the tow point.

    Parameters
    ----------
    east, north : array of float, shape (n,)
        Steps of the tow point, metres.
    layback_m : array of float, shape (n,)
        Layback during each step; 0 means that the sensor is at the tow point.
    first_rad : float
        Direction from sensor to tow point before the first step, radians from north.

    Returns
    -------
    array of float, shape (n + 1,)
        Direction from sensor to tow point before the first and after every step, radians, -pi to pi.

    """
    n = len(east)
    half = np.arctan2(east, north) / 2
    length = np.hypot(east, north)
    with np.errstate(divide="ignore", invalid="ignore"):
        shrink = np.where(layback_m > 0, np.exp(-length / layback_m), np.where(length > 0, 0.0, 1.0))
    rows = min(STRETCHES, max(1, n // 64))
    columns = -(-n // rows)
    # Steps of many stretches side by side: element [k, j] is step k of stretch j. Padding steps change nothing.
    p = np.zeros((2, columns * rows))
    p[0, :n], p[1, :n] = np.cos(half), np.sin(half)
    e = np.ones(columns * rows)
    e[:n] = shrink
    p = np.ascontiguousarray(p.reshape(2, rows, columns).transpose(2, 0, 1))
    e = np.ascontiguousarray(e.reshape(rows, columns).T)
    # What each stretch does to the two unit vectors is its matrix.
    x, y = np.stack([np.ones(rows), np.zeros(rows)]), np.stack([np.zeros(rows), np.ones(rows)])
    for k in range(columns):
        x, y = _tow(x, y, p[k, 0], p[k, 1], e[k])
        if k % 64 == 63:
            size = np.abs(x).max(axis=0) + np.abs(y).max(axis=0)
            x, y = x / size, y / size
    start = np.empty((2, rows))
    a, b = np.cos(first_rad / 2), np.sin(first_rad / 2)
    for j, (xx, xy, yx, yy) in enumerate(zip(*x.tolist(), *y.tolist(), strict=True)):
        start[0, j], start[1, j] = a, b
        a, b = xx * a + xy * b, yx * a + yy * b
        size = (a * a + b * b) ** 0.5
        a, b = a / size, b / size
    result = np.empty((columns, 2, rows))
    x, y = start
    for k in range(columns):
        x, y = _tow(x, y, p[k, 0], p[k, 1], e[k])
        if k % 64 == 63:
            size = np.hypot(x, y)
            x, y = x / size, y / size
        result[k, 0], result[k, 1] = x, y
    half = np.arctan2(result[:, 1], result[:, 0]).T.ravel()[:n]
    psi = 2 * np.concatenate([[first_rad / 2], half])
    return np.arctan2(np.sin(psi), np.cos(psi))


def _tow(x, y, px, py, e):
    """Let the part of (x, y) across (px, py) shrink by e."""
    along = (1 - e) * (px * x + py * y)
    return e * x + along * px, e * y + along * py


@dataclass
class Towed:
    """Where the sensor is on a track's clock, and the directions there.

    Attributes
    ----------
    vectors : array of float, shape (3, n)
        Sensor, Earth-centred, metres.
    direction_rad : array of float, shape (n,)
        From sensor to tow point, from north.
    heading_rad : array of float, shape (n,)
        Ship's heading: gyro, else course.
    by_course : array of bool, shape (n,)
        Course stands for the heading.
    layback_m : array of float, shape (n,)
    settling : array of bool, shape (n,)
        The unknown first direction still matters.

    """

    vectors: np.ndarray
    direction_rad: np.ndarray
    heading_rad: np.ndarray
    by_course: np.ndarray
    layback_m: np.ndarray
    settling: np.ndarray


def tow(track: Track, gyro_rad: np.ndarray, layback_m: np.ndarray, *, settings: Position) -> Towed:
    """Move from the antenna to the sensor along one track.

    Parameters
    ----------
    track : Track
        Antenna.
    gyro_rad : array of float, shape (n,)
        Gyro heading on the track's clock, NaN where there is none.
    layback_m : array of float, shape (n,)
        Layback on the track's clock, NaN where it is not known.
    settings : Position
        Lever arm and model.

    Returns
    -------
    Towed

    Notes
    -----
    The first direction of the cable is not known: it is taken to be that of the ship's motion, and the stretch until
    exp(-s / B) has fallen to 0.05 is marked as settling.

    """
    steps = geodesy.steps_between(track.vectors, track.lat, track.lon)
    course = directions(*steps)
    by_course = ~np.isfinite(gyro_rad)
    heading = np.where(by_course, course, gyro_rad)
    model = settings.layback.model
    if model == "none":
        zero = np.zeros(len(course))
        return Towed(track.vectors, course, heading, by_course, zero, zero.astype(bool))
    arm = settings.antenna_to_tow_point
    reach = np.hypot(arm.forward_m, arm.starboard_m)
    points = geodesy.move(track.lat, track.lon, reach, heading + np.arctan2(arm.starboard_m, arm.forward_m))
    lat, lon = geodesy.to_degrees(points)
    east, north = geodesy.steps_between(points, lat, lon)
    path = np.concatenate([[0.0], np.cumsum(np.hypot(east, north))])
    known = np.where(np.isfinite(layback_m), layback_m, 0.0)
    if model == "same_track":
        back = path - known
        vectors = np.stack([np.interp(back, path, part - part[0]) + part[0] for part in points])
        direction = _direction(points, vectors, lat, lon, heading)
        settling = back < 0
    else:
        if model == "astern":
            direction = heading
            settling = np.zeros(len(path), bool)
        else:
            turn = geodesy.convergence(lat, lon)
            middle = (turn[1:] + turn[:-1]) / 2
            angle = np.arctan2(east, north) - middle
            length = np.hypot(east, north)
            first = directions(east, north)[0]
            direction = pursuit_curve(length * np.sin(angle), length * np.cos(angle), known[1:], first) + turn
            with np.errstate(divide="ignore", invalid="ignore"):
                left = np.cumsum(np.where(known[1:] > 0, length / known[1:], 0.0))
            settling = np.concatenate([[0.0], left]) < -np.log(SETTLED)
            settling &= known > 0
        vectors = geodesy.move(lat, lon, known, direction + np.pi)
    return Towed(vectors, direction, heading, by_course, layback_m, settling)


def _direction(points, vectors, lat, lon, otherwise):
    """Return the direction from sensor to tow point; `otherwise` where they are one."""
    east, north = geodesy.frames(lat, lon)
    away = points - vectors
    e, n = np.einsum("kn,kn->n", away, east), np.einsum("kn,kn->n", away, north)
    return np.where(np.hypot(e, n) > 0.01, np.arctan2(e, n), otherwise)


# -- all together ----------------------------------------------------------------------------------------------------


def locate_sensor(
    time_utc: np.ndarray,
    depth_m: np.ndarray,
    navigation: pd.DataFrame,
    gyro: pd.DataFrame,
    cable,
    *,
    settings: Position,
) -> tuple[pd.DataFrame, dict]:
    """Locate the sensor at every reading.

    Parameters
    ----------
    time_utc : array of datetime64[ns], shape (n,)
        Times of the readings, increasing.
    depth_m : array of float, shape (n,)
        Depth of the sensor, positive downwards, without NaN.
    navigation : pandas.DataFrame
        time_utc, latitude_deg, longitude_deg of the antenna, in order of time.
    gyro : pandas.DataFrame
        time_utc, heading_deg; may be empty.
    cable : callable
        ``cable(instants)`` returns the cable-out in metres, NaN where it is not known.
    settings : Position

    Returns
    -------
    table : pandas.DataFrame
        The vocabulary's position table. Positions are NaN where navigation or cable-out are missing.
    counts : dict
        ``fixes``, ``gated`` (fixes at impossible speeds) and ``runs`` of the track.

    """
    start = navigation["time_utc"].iloc[0].to_datetime64()

    def seconds(times):
        return (np.asarray(times, "datetime64[ns]") - start).astype(np.int64) / NS_PER_S

    at, fix_time = seconds(time_utc), seconds(navigation["time_utc"])
    lat, lon = navigation["latitude_deg"].to_numpy(), navigation["longitude_deg"].to_numpy()
    vectors = geodesy.to_vectors(lat, lon)
    good = gate_fixes(fix_time, vectors, settings.fastest_ship_mps)
    tracks = make_tracks(fix_time[good], vectors[:, good], settings=settings)
    gyro_time, gyro_rad = seconds(gyro["time_utc"]), np.radians(gyro["heading_deg"].to_numpy())
    n = len(at)
    found = {
        name: np.full(n, np.nan)
        for name in (
            *("sensor_latitude_deg", "sensor_longitude_deg", "layback_m", "tow_direction_deg"),
            *("ship_heading_deg", "sensor_course_deg", "sensor_speed_mps", "sigma_position_m"),
        )
    }
    flags = np.full(n, int(Flag.NO_NAVIGATION), np.uint32)
    for track in tracks:
        here = slice(*np.searchsorted(at, [track.time_s[0], track.time_s[-1] + 1e-9]))
        if here.stop <= here.start:
            continue
        instants = start + np.rint(track.time_s * NS_PER_S).astype(np.int64).astype("timedelta64[ns]")
        depth = np.interp(track.time_s, at, depth_m)
        layback = horizontal_layback(cable(instants), depth, settings=settings.layback)
        heading = heading_on_clock(track.time_s, gyro_time, gyro_rad, settings.longest_gap_s)
        towed = tow(track, heading, layback, settings=settings)
        flags[here] = _at_readings(found, here, at[here], track, towed)
    sigma = np.hypot(settings.sigma_navigation_m, settings.sigma_layback_m if settings.layback.model != "none" else 0.0)
    placed = np.isfinite(found["sensor_latitude_deg"])
    found["sigma_position_m"][placed] = sigma
    table = pd.DataFrame(found).assign(sensor_depth_m=depth_m, position_flags=flags)
    return table, {"fixes": len(good), "gated": int((~good).sum()), "runs": len(tracks)}


def _at_readings(found, here, at, track, towed) -> np.ndarray:
    """Interpolate a track's results to its readings; return their flags."""
    time = track.time_s
    step = (time[-1] - time[0]) / (len(time) - 1)
    tick = np.clip(((at - time[0]) / step).astype(np.int64), 0, len(time) - 2)
    share = (at - time[tick]) / (time[tick + 1] - time[tick])

    def between(values):
        return values[..., tick] + share * (values[..., tick + 1] - values[..., tick])

    def angle(radians):
        return np.degrees(np.arctan2(between(np.sin(radians)), between(np.cos(radians)))) % 360.0

    lat, lon = geodesy.to_degrees(towed.vectors)
    east, north = geodesy.steps_between(towed.vectors, lat, lon)
    speed = np.hypot(east, north) / step
    known = np.isfinite(towed.layback_m)
    # the layback holds until the next tick, as the cable-out does
    ok = known[tick] & known[tick + 1]
    place = geodesy.to_degrees(between(towed.vectors))
    found["sensor_latitude_deg"][here] = np.where(ok, place[0], np.nan)
    found["sensor_longitude_deg"][here] = np.where(ok, place[1], np.nan)
    found["layback_m"][here] = np.where(ok, towed.layback_m[tick], np.nan)
    found["tow_direction_deg"][here] = np.where(ok, angle(towed.direction_rad), np.nan)
    found["ship_heading_deg"][here] = angle(towed.heading_rad)
    found["sensor_course_deg"][here] = np.where(ok, angle(directions(east, north)), np.nan)
    found["sensor_speed_mps"][here] = np.where(ok, speed[tick], np.nan)
    flags = np.where(towed.by_course[tick], np.uint32(Flag.COURSE_FOR_HEADING), np.uint32(0))
    flags |= np.where(towed.settling[tick], np.uint32(Flag.SETTLING), np.uint32(0))
    return flags | np.where(ok, np.uint32(0), np.uint32(Flag.NO_CABLE))


def sensor_depth(logged_m: np.ndarray, time_utc: np.ndarray, otherwise_m: float | None) -> np.ndarray:
    """Return the depth of the sensor: as logged, bridged where a value is missing, else the stated one, else 0.

    Parameters
    ----------
    logged_m : array of float, shape (n,)
        NaN where nothing is logged.
    time_utc : array of datetime64[ns], shape (n,)
    otherwise_m : float or None
        Depth where nothing at all is logged.

    Returns
    -------
    array of float, shape (n,)

    """
    known = np.isfinite(logged_m)
    if not known.any():
        return np.full(len(logged_m), 0.0 if otherwise_m is None else otherwise_m)
    time = time_utc.astype(np.int64)
    return np.interp(time, time[known], logged_m[known])


def main(job: stage.Job) -> None:
    """Read navigation and cable log, apply edits of the cable, and locate the sensor at every reading."""
    from steps.lines import assign

    readings = job.table("readings", ["time_utc", "logged_depth_m"])
    time = readings["time_utc"].to_numpy()
    table = job.table("line_table")
    own = job.settings
    steady = 0.0 if own.layback.model == "none" else own.layback.cable_out_m
    log = None
    if "cable" in job.inputs:
        from steps.formats import tables
        from steps.provenance import checksum

        path = job.path("cable")
        log = check_cable(tables.read_table(path, CABLE_LOG), str(path))
        job.record["cable_log"] = {"file": str(path), "sha256": checksum(path), "rows": len(log)}
    starts, ends = table["start_utc"].to_numpy(), table["end_utc"].to_numpy()
    names = {"line_names": table["line"].tolist()}
    for edit in job.edits:  # an edit that touches no reading is a mistake
        edits.select(edit, time, line_index=assign(time, starts, ends), **names)

    def cable(instants):
        if log is None:
            length = np.full(len(instants), steady)
        else:
            length = cable_out(instants, log["time_utc"].to_numpy(), log["cable_out_m"].to_numpy())
        for edit in job.edits:
            try:
                length[edits.select(edit, instants, line_index=assign(instants, starts, ends), **names)] = edit["value"]
            except SurveyError:
                continue  # this run of the track has none of it
        return length

    depth = sensor_depth(readings["logged_depth_m"].to_numpy(), time, own.sensor_depth_m)
    found, counts = locate_sensor(time, depth, job.table("navigation"), job.table("gyro"), cable, settings=own)
    flags = found["position_flags"].to_numpy()
    placed = found["sensor_latitude_deg"].notna().to_numpy()
    on_line = job.table("lines")["line_index"].to_numpy() >= 0
    counted = {
        f.name.lower(): int(np.count_nonzero(flags & np.uint32(f))) for f in Flag if (flags & np.uint32(f)).any()
    }
    _tell(job, counts, counted, placed, on_line, readings)
    job.write("position", found)
    job.record |= counts | {"flags": counted, "placed": int(placed.sum()), "readings": len(placed)}
    job.done(
        f"{int(placed.sum())} readings placed, {int((~placed).sum())} not; {counts['gated']} fixes at impossible "
        f"speeds; median layback {np.nanmedian(found['layback_m']):.0f} m"
    )


def _tell(job, counts, counted, placed, on_line, readings) -> None:
    """Note what deserves a look; stop if no reading on a line could be placed."""
    if not (placed & on_line).any():
        raise SurveyError(
            "position: no reading on a line could be placed. Look at the gaps of the navigation "
            "(position.longest_gap_s) and the first row of the cable log."
        )
    if counts["gated"]:
        job.note(f"{counts['gated']} of {counts['fixes']} fixes need an impossible speed and are left out.")
    lost = int((~placed & on_line).sum())
    if lost:
        job.note(f"{lost} readings on lines have no position (no navigation, or no cable-out).")
    if counted.get("course_for_heading"):
        job.note(f"{counted['course_for_heading']} readings have no gyro heading: course over ground stands for it.")
    if readings["logged_depth_m"].isna().all() and job.settings.sensor_depth_m is None:
        job.note("no sensor depth is logged or stated: 0 m is taken; 10 m of depth are about 0.3 nT.")


if __name__ == "__main__":
    stage.run(main)
