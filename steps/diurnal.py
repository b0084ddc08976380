"""Take the variation of the external field from base stations to the ship.

The regular daily variation follows local solar time, storms and bays follow universal time: so the slow part of a
station's variation is shifted by the difference of longitude (15 degrees an hour) and the fast part is not (Riddihough
1971, Geophysical Prospecting 19; `steps.base_station` parts them). Where the shift asks for a time that the record
does not hold, the slow part is taken to stay as it was at the record's edge, and sigma grows by how much it changes in
such a time elsewhere in the record.

Several stations are combined anew for every instant from those that have data then. A station's weight fades out over
the last hour before its record ends, or pauses for longer than a gap that is bridged, and fades in likewise: no step
enters the survey. Their datums are made to agree over common time beforehand, so that what does enter is a difference
that the stations have.

Sigma is ``near^2 + (growth x distance)^2``, with the distance to the nearest station that has data. Where there are two
stations or more, the growth is found by predicting each from the others, for quiet and for disturbed time.
"""

from dataclasses import dataclass, fields

import numpy as np
import pandas as pd

from steps import stage
from steps.base_records import read_records
from steps.base_station import (
    LAGS_S,
    NS_PER_S,
    SLOW_LAGS_S,
    Station,
    agree_on_datum,
    station_variation,
    three_hour_ranges,
)
from steps.columns import Flag
from steps.settings import Diurnal

EARTH_RADIUS_KM = 6371.0
FADE_S = 3600.0
NEAREST_KM = 10.0  # nearer than this, distance no longer tells stations apart
PLANE_KM = 300.0  # a plane is believed about so far
PIECE = 1 << 14  # readings worked on together: what fits the cache
SAMPLES = 4000  # of a station, to calibrate with
FEWEST = 60  # samples that a calibration may rest on
FURTHER = 2.0  # how many times the distance between the stations their calibration is good for
UPSET_SHARE = 0.05  # of a line's readings in disturbed time, from which on it is named
MOST_NAMED = 4


def distance_km(lat_1, lon_1, lat_2, lon_2) -> np.ndarray:
    """Return great-circle distances between positions in degrees, km."""
    phi_1, phi_2 = np.radians(lat_1), np.radians(lat_2)
    dphi, dlam = (phi_2 - phi_1) / 2, np.radians(np.asarray(lon_2) - lon_1) / 2
    a = np.sin(dphi) ** 2 + np.cos(phi_1) * np.cos(phi_2) * np.sin(dlam) ** 2
    return 2 * EARTH_RADIUS_KM * np.arcsin(np.sqrt(np.clip(a, 0, 1)))


# -- prediction ------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Prediction:
    """Variation at places and times.

    Attributes
    ----------
    variation_nt : array of float, shape (n,)
        NaN where no station has data, or the place is not known.
    distance_km : array of float, shape (n,)
        To the nearest station that has data.
    unsure_nt : array of float, shape (n,)
        One sigma of what bridged gaps, and the edges of records, leave open.
    disturbed : array of bool, shape (n,)
        The nearest station that has data is disturbed.
    nearest : array of int, shape (n,)
        That station; -1 where there is none.

    """

    variation_nt: np.ndarray
    distance_km: np.ndarray
    unsure_nt: np.ndarray
    disturbed: np.ndarray
    nearest: np.ndarray


def predict(
    stations: list[Station], time_s: np.ndarray, lat: np.ndarray, lon: np.ndarray, *, settings: Diurnal
) -> Prediction:
    """Predict the variation at places and times from stations.

    Parameters
    ----------
    stations : list of Station
    time_s : array of float, shape (n,)
        Seconds since 1970.
    lat, lon : array of float, shape (n,)
        Degrees; NaN where not known (nothing is predicted there).
    settings : Diurnal

    Returns
    -------
    Prediction

    """
    placed = np.flatnonzero(np.isfinite(lat) & np.isfinite(lon))
    found = Prediction(
        *(np.full(len(time_s), nothing) for nothing in (np.nan, np.nan, np.nan, False, -1))  # in the fields' order
    )
    for k in range(0, len(placed) if stations else 0, PIECE):
        here = placed[k : k + PIECE]
        piece = _predict_piece(stations, time_s[here], lat[here], lon[here], settings)
        for part in fields(Prediction):
            getattr(found, part.name)[here] = getattr(piece, part.name)
    return found


def _predict_piece(stations, time_s, lat, lon, settings) -> Prediction:
    """Predict for one piece of readings; rows of the matrices are stations."""
    shape = (len(stations), len(time_s))
    value, unsure, away, fade = np.zeros(shape), np.zeros(shape), np.full(shape, np.inf), np.zeros(shape)
    for k, station in enumerate(stations):
        late_s = _shift_s(station, lon) if settings.local_time_shift else None
        own, margin = _variation_at(station, time_s, late_s)
        known = np.isfinite(own)
        if not known.any():
            continue
        value[k] = np.where(known, own, 0.0)
        away[k, known] = distance_km(lat[known], lon[known], station.latitude_deg, station.longitude_deg)
        # smooth at both ends; at the very edge a trace is left, so that a station alone stays in charge
        share = np.clip(margin / FADE_S, 1e-4, 1.0)
        fade[k] = np.where(known, share * share * (3 - 2 * share), 0.0)
        unsure[k] = np.where(known, _unsure(station, time_s, late_s), 0.0)
    nearest = np.argmin(away, axis=0)
    column = np.arange(len(time_s))
    some = np.isfinite(away[nearest, column])
    weight = _weights(away, fade, lat, lon, stations, settings)
    total = weight.sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        variation = np.where(some, (weight * value).sum(axis=0) / total, np.nan)
        unsure = np.where(some, (np.abs(weight) * unsure).sum(axis=0) / np.abs(weight).sum(axis=0), np.nan)
    disturbed = np.zeros(len(time_s), bool)
    for k, station in enumerate(stations):
        mine = some & (nearest == k)
        place = np.rint((time_s[mine] - station.coarse.start_s) / station.coarse.step_s).astype(np.int64)
        disturbed[mine] = station.disturbed[np.clip(place, 0, len(station.disturbed) - 1)]
    return Prediction(
        variation, np.where(some, away[nearest, column], np.nan), unsure, disturbed, np.where(some, nearest, -1)
    )


def _shift_s(station, lon) -> np.ndarray:
    """Return how much later, in universal time, the station has the local time of a longitude, s."""
    east = lon - station.longitude_deg
    return 240.0 * (east - 360.0 * np.rint(east / 360.0))


def _variation_at(station: Station, time_s, late_s) -> tuple[np.ndarray, np.ndarray]:
    """Return a station's variation with its slow part at the ship's local time, and the time to the record's edge."""
    margin = -_outside(station.known_s, time_s)
    value = np.where(margin >= 0, station.variation.at(time_s), np.nan)
    if late_s is not None:
        value = value + station.slow.at(time_s + late_s) - station.slow.at(time_s)
    return value, margin


def _outside(stretches_s: np.ndarray, time_s: np.ndarray) -> np.ndarray:
    """Return the time to the nearest stretch, or to the stretch's edge as a negative number inside one."""
    starts, ends = stretches_s.T
    before = np.searchsorted(starts, time_s, side="right") - 1
    since = np.where(before >= 0, time_s - ends[np.maximum(before, 0)], np.inf)
    until = np.where(before + 1 < len(starts), starts[np.minimum(before + 1, len(starts) - 1)] - time_s, np.inf)
    inside = since <= 0
    into = time_s - starts[np.maximum(before, 0)]
    return np.where(inside, -np.minimum(into, -since), np.minimum(since, until))


def _unsure(station: Station, time_s, late_s) -> np.ndarray:
    """Return one sigma of what bridged gaps and the record's edges leave open, nT."""
    squares = np.zeros(len(time_s))
    if len(station.bridged_s):
        starts, ends = station.bridged_s.T
        gap = np.clip(np.searchsorted(starts, time_s, side="right") - 1, 0, len(starts) - 1)
        before, after = time_s - starts[gap], ends[gap] - time_s
        inside = (before > 0) & (after > 0)
        # a walk that is known at both ends has the variance of one known at one end after before * after / length
        lag = np.where(inside, before * after / (ends[gap] - starts[gap]), 0.0)
        squares += np.interp(lag, (0.0, *LAGS_S), (0.0, *station.change_nt)) ** 2
    if late_s is not None:
        beyond = np.maximum(_outside(station.known_s, time_s + late_s), 0.0)
        squares += np.interp(np.nan_to_num(beyond), (0.0, *SLOW_LAGS_S), (0.0, *station.slow_change_nt)) ** 2
    return np.sqrt(squares)


def _weights(away, fade, lat, lon, stations, settings) -> np.ndarray:
    """Return the weight of every station at every reading, not normalised; 0 where it has no data."""
    if settings.combine == "nearest":
        # the nearest takes what its fade allows, the next of the rest, and so on
        order = np.argsort(away, axis=0, kind="stable")
        sorted_fade = np.take_along_axis(fade, order, axis=0)
        left = np.cumprod(np.concatenate([np.ones((1, fade.shape[1])), 1 - sorted_fade[:-1]]), axis=0)
        weight = np.empty_like(fade)
        np.put_along_axis(weight, order, sorted_fade * left, axis=0)
        return weight
    if settings.combine == "distance":
        return fade / (away**2 + NEAREST_KM**2)
    # A plane through the stations: its value at the ship is a weighted sum of theirs. A gradient of the size that the
    # law of error expects is the prior, so that two stations, or three in a row, or one that fades out, are no special
    # cases; it grows firmer far from the stations, where a plane means nothing.
    x, y = _seen_from(lat, lon, stations, np.where(fade > 0, away, 0.0) / 100.0)
    prior = max(settings.sigma_at_base_nt, 0.05) ** 2 / max(settings.sigma_nt_per_100km, 0.05) ** 2
    mean_km = (fade * np.where(fade > 0, away, 0.0)).sum(axis=0) / np.maximum(fade.sum(axis=0), 1e-12)
    prior = prior * (1 + (mean_km / PLANE_KM) ** 4)
    n, sx, sy = fade.sum(axis=0), (fade * x).sum(axis=0), (fade * y).sum(axis=0)
    sxx, syy = (fade * x * x).sum(axis=0) + prior, (fade * y * y).sum(axis=0) + prior
    sxy = (fade * x * y).sum(axis=0)
    # first row of the inverse of the normal matrix, times its determinant
    a, b, c = sxx * syy - sxy**2, sxy * sy - sx * syy, sx * sxy - sxx * sy
    determinant = n * a + sx * b + sy * c
    return fade * (a + b * x + c * y) / np.where(determinant > 0, determinant, 1.0)


def _seen_from(lat, lon, stations, distance) -> tuple[np.ndarray, np.ndarray]:
    """Return where stations lie as seen from the ship, east and north, in the unit of `distance`: rows are stations."""
    phi, lam = np.radians(lat), np.radians(lon)
    phi_s = np.radians([station.latitude_deg for station in stations])[:, None]
    turn = np.radians([station.longitude_deg for station in stations])[:, None] - lam
    east = np.cos(phi_s) * np.sin(turn)
    north = np.cos(phi) * np.sin(phi_s) - np.sin(phi) * np.cos(phi_s) * np.cos(turn)
    scale = distance / np.maximum(np.hypot(east, north), 1e-12)
    return scale * east, scale * north


# -- sigma -----------------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class ErrorLaw:
    """How the error of the term grows with distance from the nearest station that has data.

    Attributes
    ----------
    near_nt : float
        One sigma beside a station.
    quiet_nt_per_100km, disturbed_nt_per_100km : float
        Growth in quiet and in disturbed time.
    stated_nt_per_100km : float
        Growth that the settings state; the least that is believed beyond `reach_km`.
    reach_km : float
        How far the growth was tried out between the stations; 0 where it is as stated.

    """

    near_nt: float
    quiet_nt_per_100km: float
    disturbed_nt_per_100km: float
    stated_nt_per_100km: float
    reach_km: float = 0.0


def sigma(prediction: Prediction, law: ErrorLaw) -> np.ndarray:
    """Return one sigma of predicted variations, nT; NaN where nothing is predicted."""
    growth = np.where(prediction.disturbed, law.disturbed_nt_per_100km, law.quiet_nt_per_100km)
    near = np.minimum(prediction.distance_km, law.reach_km)
    squares = law.near_nt**2 + (growth * near / 100) ** 2 + prediction.unsure_nt**2
    squares += np.maximum(growth, law.stated_nt_per_100km) ** 2 * (prediction.distance_km**2 - near**2) / 1e4
    return np.sqrt(squares)


def calibrate(stations: list[Station], *, settings: Diurnal) -> tuple[ErrorLaw, list[dict]]:
    """Find how the error grows with distance by predicting each station from the others.

    Parameters
    ----------
    stations : list of Station
        With one alone, the law is as stated.
    settings : Diurnal

    Returns
    -------
    law : ErrorLaw
    rows : list of dict
        ``station``, ``distance_km`` to the nearest other, ``rms_nt`` of the error of the prediction, its mean removed,
        ``samples``.

    """
    stated = settings.sigma_nt_per_100km
    law = ErrorLaw(settings.sigma_at_base_nt, stated, stated, stated)
    rows, errors, distances, upset = [], [], [], []
    for k, station in enumerate(stations if len(stations) > 1 else []):
        time_s = station.coarse.times()[np.isfinite(station.coarse.value)]
        time_s = time_s[:: max(1, len(time_s) // SAMPLES)]
        place = np.full(len(time_s), station.latitude_deg), np.full(len(time_s), station.longitude_deg)
        found = predict(stations[:k] + stations[k + 1 :], time_s, *place, settings=settings)
        known = np.isfinite(found.variation_nt)
        if known.sum() < FEWEST:
            continue
        error = (station.coarse.at(time_s) - found.variation_nt)[known]
        error -= error.mean()
        distance = np.maximum(found.distance_km[known], 1e-3)
        rows.append(
            {
                "station": station.name,
                "distance_km": float(np.median(distance)),
                "rms_nt": float(np.sqrt(np.mean(error**2))),
                "samples": int(known.sum()),
            }
        )
        errors.append(error)
        distances.append(distance)
        upset.append(found.disturbed[known])
    if not rows:
        return law, rows
    error, distance, disturbed = (np.concatenate(part) for part in (errors, distances, upset))
    quiet = _growth(error, distance, ~disturbed, law.near_nt)
    storm = _growth(error, distance, disturbed, law.near_nt)
    quiet = quiet if quiet is not None else _growth(error, distance, np.ones(len(error), bool), law.near_nt)
    storm = quiet if storm is None else max(quiet, storm)
    return ErrorLaw(law.near_nt, quiet, storm, stated, FURTHER * float(distance.max())), rows


def _growth(error, distance, chosen, near_nt) -> float | None:
    """Return the growth that explains errors, nT per 100 km; None where there are too few."""
    if chosen.sum() < FEWEST:
        return None
    # the predicted station's own error is in it as well as that of the others
    excess = np.mean(error[chosen] ** 2) - 2 * near_nt**2
    return float(np.sqrt(max(excess, 0.0) / np.mean((distance[chosen] / 100) ** 2)))


# -- stage -----------------------------------------------------------------------------------------------------------


def _text(instant_s: float) -> str:
    return str(np.datetime64(int(instant_s), "s"))


def _span(time_utc: np.ndarray) -> tuple[float, float]:
    """Return first and last instant, seconds since 1970."""
    return tuple(float(instant.astype(np.int64)) / NS_PER_S for instant in (time_utc.min(), time_utc.max()))


def make_stations(records: list, span_s: tuple[float, float], *, settings: Diurnal) -> tuple[list[Station], list[dict]]:
    """Make the variation of all stations that have a record about the time of the survey, their datums in agreement.

    Parameters
    ----------
    records : list of Record
        See `steps.base_records`.
    span_s : tuple of float
        First and last reading, seconds since 1970.
    settings : Diurnal

    Returns
    -------
    stations : list of Station
    about : list of dict
        For each: what `diurnal_record.json` says of it.

    """
    used = [record for record in records if len(record.time_utc) > 1]
    stations = [
        station_variation(
            record.time_utc,
            record.total_field_nt,
            record.latitude_deg,
            record.longitude_deg,
            record.height_m,
            settings=settings,
            name=record.name,
            span_s=span_s,
        )
        for record in used
    ]
    own = [station.datum_nt for station in stations]
    stations, groups = agree_on_datum(stations, settings=settings)
    about = [
        {
            "station": station.name,
            "latitude_deg": station.latitude_deg,
            "longitude_deg": station.longitude_deg,
            "height_m": record.height_m,
            "datum_nt": station.datum_nt,
            "datum_from": station.datum_from,
            "datum_change_nt": station.datum_nt - datum,
            "group": group,
            "start_utc": _text(station.known_s[0, 0]),
            "end_utc": _text(station.known_s[-1, 1]),
            "step_s": station.variation.step_s,
            "bridged_gaps": len(station.bridged_s),
            "long_gaps": len(station.known_s) - 1,
        }
        for station, record, datum, group in zip(stations, used, own, groups, strict=True)
    ]
    return stations, about


def main(job: stage.Job) -> None:
    """Read the base stations and predict the variation at every reading."""
    time = job.table("readings", ["time_utc"])["time_utc"].to_numpy().astype("datetime64[ns]")
    lat, lon = job.table("position", ["sensor_latitude_deg", "sensor_longitude_deg"]).to_numpy().T
    if not job.settings.base_stations:
        missing = np.full(len(time), np.nan)
        flags = np.full(len(time), int(Flag.NO_DIURNAL), np.uint32)
        job.record |= {"reason": "no base station", "stations": [], "files": []}
        job.note("there is no base station: the diurnal term is missing, and levelling has to carry it.")
        job.done("no base station: term missing")
        _write(job, missing, missing, flags, [])
        return
    span_s = _span(time)
    records = read_records(job.settings.base_stations, job.inputs, span_s)
    for record in records:
        for sentence in record.notes:
            job.note(sentence)
    stations, about = make_stations(records, span_s, settings=job.settings)
    law, calibration = calibrate(stations, settings=job.settings)
    found = predict(stations, time.astype(np.int64) / NS_PER_S, lat, lon, settings=job.settings)
    value = found.variation_nt
    missing = np.isnan(value)
    flags = np.where(missing, np.uint32(Flag.NO_DIURNAL), np.uint32(0))
    flags |= np.where(found.disturbed & ~missing, np.uint32(Flag.DISTURBED), np.uint32(0))
    lines, line_index = job.table("line_table"), job.table("lines")["line_index"].to_numpy()
    job.record |= {
        "files": [file for record in records for file in record.files],
        "ledgers": [{"station": record.name, **record.ledger} for record in records],
        "stations": about,
        "calibration": calibration,
        "law": {part.name: float(getattr(law, part.name)) for part in fields(ErrorLaw)},
        "missing": int(missing.sum()),
        "disturbed": int((found.disturbed & ~missing).sum()),
        "three_hour_ranges": _ranges(stations, found.nearest, lines, line_index),
    }
    _say(job, stations, about, span_s, missing & np.isfinite(lat))
    _say_of_lines(job, found, missing & np.isfinite(lat), lines, line_index)
    job.done(
        f"{len(stations)} base station{'s' * (len(stations) != 1)}; {int((~missing).sum())} readings with a value, "
        f"{int(missing.sum())} without, {job.record['disturbed']} disturbed"
        + (f"; {np.nanmin(value):.1f} to {np.nanmax(value):.1f} nT" if not missing.all() else "")
    )
    _write(job, value, sigma(found, law), flags, stations)


def _write(job, value, one_sigma, flags, stations) -> None:
    """Write the term, and the stations' variation for figures, at most one value a minute."""
    job.write("diurnal", pd.DataFrame({"diurnal_nt": value, "sigma_diurnal_nt": one_sigma, "diurnal_flags": flags}))
    parts = [pd.DataFrame({"station": [], "time_utc": [], "variation_nt": [], "disturbed": []})]
    for station in stations:
        every = max(1, int(60.0 / station.coarse.step_s))
        clock = np.rint(station.coarse.times()[::every] * 1e6).astype(np.int64).astype("datetime64[us]")
        shown = {"station": station.name, "time_utc": clock, "variation_nt": station.coarse.value[::every]}
        parts.append(pd.DataFrame({**shown, "disturbed": station.disturbed[::every]}))
    job.write("diurnal_base", pd.concat(parts[1:] or parts, ignore_index=True))


def _ranges(stations, nearest, lines, line_index) -> list[dict]:
    """Return the three-hour ranges of every line, at the station that is nearest for most of it."""
    start, end = (
        lines[name].to_numpy().astype("datetime64[ns]").astype(np.int64) / NS_PER_S for name in ("start_utc", "end_utc")
    )
    used = (line_index >= 0) & (nearest >= 0)
    votes = np.zeros((len(lines), len(stations)), np.int64)
    np.add.at(votes, (line_index[used], nearest[used]), 1)
    rows = []
    for k, line in enumerate(lines["line"]):
        station = stations[int(votes[k].argmax())]
        found = three_hour_ranges(station, start[k], end[k]) if votes[k].any() else None
        whole, quick = found or (None, None)
        rows.append({"line": line, "station": station.name, "range_nt": whole, "range_less_slow_nt": quick})
    return rows


def _named(names: list[str]) -> str:
    """Name a few lines."""
    more = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return ", ".join(names[:MOST_NAMED]) + more


def _say(job, stations, about, span_s, missing) -> None:
    """Note what deserves a look in the stations."""
    for station, told in zip(stations, about, strict=True):
        if "for want of" in told["datum_from"] or "nothing during" in told["datum_from"]:
            job.note(f"base station {station.name}: its datum is the {told['datum_from']}.")
        first, last = station.known_s[0, 0], station.known_s[-1, 1]
        for late, edge, words in (
            (first > span_s[0] + 60, first, "begins {} and the survey before that"),
            (last < span_s[1] - 60, last, "ends {} and the survey after that"),
        ):
            if late:
                rest = "others stand in." if len(stations) > 1 else "readings there have no diurnal value."
                job.note(f"base station {station.name}: its record {words.format(_text(edge))}: {rest}")
    alone = [told["station"] for told in about if [t["group"] for t in about].count(told["group"]) == 1]
    if len(stations) > 1 and alone:
        job.note(f"no time in common with other base stations, so that datums may differ: {_named(alone)}.")


def _say_of_lines(job, found, missing, lines, line_index) -> None:
    """Note the lines that have no diurnal value in places, or lie in disturbed time."""
    count = np.maximum(np.bincount(line_index[line_index >= 0], minlength=len(lines)), 1)
    lost = np.bincount(line_index[(line_index >= 0) & missing], minlength=len(lines))
    upset = np.bincount(line_index[(line_index >= 0) & found.disturbed], minlength=len(lines)) / count
    names = lines["line"].tolist()
    if lost.any():
        which = [names[k] for k in np.flatnonzero(lost)]
        job.note(f"{lost.sum()} readings have no diurnal value, for want of a base station's record: {_named(which)}.")
    worst = [k for k in np.argsort(-upset, kind="stable") if upset[k] > UPSET_SHARE]
    if worst:
        shares = [f"{names[k]} ({100 * upset[k]:.0f} % of its readings)" for k in worst]
        job.note(f"lines in magnetically disturbed time: {_named(shares)}.")
    if job.settings.combine == "nearest":
        turns = int(np.count_nonzero(np.diff(found.nearest[found.nearest >= 0])))
        if turns:
            job.note(f"another base station becomes the nearest {turns} times: the diurnal term steps there.")


if __name__ == "__main__":
    stage.run(main)
