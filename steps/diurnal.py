"""Take the variation of the external field from base stations to the ship.

At a station the variation is ``F(t) - main field(t) - datum``. Taking the main field off keeps secular variation from
becoming a trend. The regular daily variation follows local solar time, storms and bays follow universal time: so the
slow part of a station's variation is shifted by the difference of longitude (15 degrees an hour) and the fast part is
not (Riddihough 1971, Geophysical Prospecting 19). Several stations are combined anew for every instant from those that
have data then; a station fades in and out over half an hour at the ends of its record, so that no step enters the
survey.

Uncertainty grows with distance; where there are two stations or more, it is calibrated by predicting each from the
others. Three-hour ranges are those of Bartels, Heck & Johnston (1939), Terrestrial Magnetism 44, of the total field.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steps import main_field, stage
from steps.columns import Flag
from steps.errors import SurveyError
from steps.settings import Diurnal

EARTH_RADIUS_KM = 6371.0
NIGHT_H = (22.0, 4.0)  # local solar time in which the daily variation is small (common practice)
HALF_AMPLITUDE = np.sqrt(2 * np.log(2)) / (2 * np.pi)  # sigma of a Gaussian over the period that it halves
FADE_S = 1800.0
NEAREST_KM = 10.0  # nearer than this, distance no longer tells stations apart
SLOW_CLOCK_S = 60.0
NS_PER_S = 1_000_000_000


@dataclass
class Station:
    """A base station's variation on an even clock.

    Attributes
    ----------
    name : str
    latitude_deg, longitude_deg : float
    time_s : array of float, shape (n,)
        Seconds since 1970, even.
    variation_nt : array of float, shape (n,)
        F - main field - datum, gaps of stated length bridged, low-passed; NaN in longer gaps.
    slow_nt : array of float, shape (n,)
        Its slow part, defined in gaps too.
    disturbed : array of bool, shape (n,)
    margin_s : array of float, shape (n,)
        Time to the nearest end of the record or long gap; 0 inside one.
    datum_nt : float
        What was subtracted beside the main field.
    datum_from : str
        How the datum was found.

    """

    name: str
    latitude_deg: float
    longitude_deg: float
    time_s: np.ndarray
    variation_nt: np.ndarray
    slow_nt: np.ndarray
    disturbed: np.ndarray
    margin_s: np.ndarray
    datum_nt: float
    datum_from: str


def distance_km(lat_1, lon_1, lat_2, lon_2) -> np.ndarray:
    """Return great-circle distances between positions in degrees, km."""
    phi_1, phi_2 = np.radians(lat_1), np.radians(lat_2)
    dphi, dlam = (phi_2 - phi_1) / 2, np.radians(np.asarray(lon_2) - lon_1) / 2
    a = np.sin(dphi) ** 2 + np.cos(phi_1) * np.cos(phi_2) * np.sin(dlam) ** 2
    return 2 * EARTH_RADIUS_KM * np.arcsin(np.sqrt(np.clip(a, 0, 1)))


def local_linear(values: np.ndarray, sigma: float) -> np.ndarray:
    """Smooth even samples by straight lines fitted with Gaussian weights; gaps and ends are allowed for.

    Parameters
    ----------
    values : array of float, shape (n,)
        NaN where missing.
    sigma : float
        Of the weights, in samples.

    Returns
    -------
    array of float, shape (n,)
        NaN only where no sample is within four sigma.

    """
    from scipy.signal import oaconvolve

    half = max(1, int(np.ceil(4 * sigma)))
    t = np.arange(-half, half + 1)
    kernel = np.exp(-((t / sigma) ** 2) / 2)
    good = np.isfinite(values)
    level = np.median(values[good]) if good.any() else 0.0
    y = np.where(good, values - level, 0.0)
    w = good.astype(float)

    def moment(series, power):
        # sum over k of kernel(k - i) (k - i)^power series(k): a correlation, hence the flipped kernel
        return oaconvolve(series, (kernel * t**power)[::-1], mode="full")[half : half + len(series)]

    s0, s1, s2, b0, b1 = moment(w, 0), moment(w, 1), moment(w, 2), moment(y, 0), moment(y, 1)
    det = s0 * s2 - s1 * s1
    enough = s0 > 1e-3
    straight = enough & (det > 1e-6 * s0 * s0 * sigma**2)
    with np.errstate(divide="ignore", invalid="ignore"):
        line = (s2 * b0 - s1 * b1) / det
        mean = b0 / s0
    return np.where(enough, np.where(straight, line, mean) + level, np.nan)


def bridge(values: np.ndarray, longest: int) -> np.ndarray:
    """Interpolate gaps of up to `longest` samples; longer ones, and the ends, stay missing.

    Parameters
    ----------
    values : array of float, shape (n,)
    longest : int

    Returns
    -------
    array of float, shape (n,)

    """
    good = np.isfinite(values)
    if good.all() or not good.any():
        return values
    index = np.arange(len(values))
    filled = np.interp(index, index[good], values[good])
    known = index[good]
    after = np.searchsorted(known, index)
    before = np.clip(after - 1, 0, len(known) - 1)
    gap = known[np.minimum(after, len(known) - 1)] - known[before] - 1
    inside = (after > 0) & (after < len(known)) & (gap <= longest)
    return np.where(good, values, np.where(inside, filled, np.nan))


def find_disturbed(values: np.ndarray, chord: int, limit_nt: float) -> np.ndarray:
    """Find samples that depart from the chord between the samples half a chord before and after.

    Parameters
    ----------
    values : array of float, shape (n,)
        Variation, nT.
    chord : int
        Length of the chord in samples.
    limit_nt : float
        Departure beyond which the whole chord counts as disturbed (common practice: a few nT over 5 to 10 minutes).

    Returns
    -------
    array of bool, shape (n,)

    """
    half = max(1, chord // 2)
    disturbed = np.zeros(len(values), bool)
    if len(values) <= 2 * half:
        return disturbed
    departure = np.abs(values[half:-half] - (values[2 * half :] + values[: -2 * half]) / 2)
    beyond = np.concatenate([np.zeros(half, int), (departure > limit_nt).astype(int), np.zeros(half, int)])
    count = np.concatenate([[0], np.cumsum(beyond)])
    index = np.arange(len(values))
    return count[np.minimum(index + half + 1, len(values))] > count[np.maximum(index - half, 0)]


def make_station(
    name: str,
    time_utc: np.ndarray,
    total_field_nt: np.ndarray,
    lat: float,
    lon: float,
    height_m: float,
    *,
    settings: Diurnal,
) -> Station:
    """Turn a station's record into its variation.

    Parameters
    ----------
    name : str
    time_utc : array of datetime64[ns], shape (n,)
        Increasing, each instant once.
    total_field_nt : array of float, shape (n,)
        NaN where missing.
    lat, lon, height_m : float
        Geodetic position; height above the ellipsoid.
    settings : Diurnal

    Returns
    -------
    Station

    Raises
    ------
    SurveyError
        If the record holds no value.

    """
    known = np.isfinite(total_field_nt)
    if known.sum() < 2:
        raise SurveyError(
            f"base station {name}: must hold at least two values of the total field. Got {int(known.sum())}."
        )
    seconds = time_utc.astype(np.int64) / NS_PER_S
    step = float(np.median(np.diff(seconds)))
    tick = np.rint((seconds - seconds[0]) / step).astype(np.int64)
    n = int(tick[-1]) + 1
    time_s = seconds[0] + step * np.arange(n)
    count = np.bincount(tick[known], minlength=n)
    # a value between two ticks belongs to its own instant: put it on the clock by the record's slope
    on_clock = np.interp(time_s, seconds[known], total_field_nt[known])
    raw = np.where(count > 0, on_clock, np.nan)
    nodes = np.linspace(time_s[0], time_s[-1], max(2, int((time_s[-1] - time_s[0]) / 86400) + 2))
    year = main_field.decimal_year((nodes * NS_PER_S).astype(np.int64).astype("datetime64[ns]"))
    main = main_field.total_field(np.full(len(nodes), lat), lon, height_m, year)
    departure = raw - np.interp(time_s, nodes, main)
    departure = bridge(departure, int(settings.longest_gap_s / step))
    disturbed = find_disturbed(departure, round(settings.chord_min * 60 / step), settings.disturbed_nt)
    sigma = HALF_AMPLITUDE * settings.low_pass_s / step
    if sigma > 0.5:
        departure = np.where(np.isfinite(departure), local_linear(departure, sigma), np.nan)
    datum, found = _datum(departure, disturbed, time_s, lon, settings)
    variation = departure - datum
    good = np.isfinite(variation)
    return Station(
        name,
        lat,
        lon,
        time_s,
        variation,
        _slow(variation, step, settings),
        disturbed,
        _margin(good, step),
        datum,
        found,
    )


def _datum(departure, disturbed, time_s, lon, settings) -> tuple[float, str]:
    """Return the level of a station that counts as no variation, and how it was found."""
    if not isinstance(settings.datum, str):
        return float(settings.datum), "stated"
    good = np.isfinite(departure)
    if settings.datum == "quiet_night":
        hour = (time_s / 3600 + lon / 15) % 24
        night = good & ~disturbed & ((hour >= NIGHT_H[0]) | (hour < NIGHT_H[1]))
        if np.count_nonzero(night) * (time_s[1] - time_s[0]) >= 3600:
            return float(np.median(departure[night])), "median of quiet local night"
    return float(np.mean(departure[good])), "mean of the record"


def _slow(variation, step, settings) -> np.ndarray:
    """Return the slow part, worked out on a clock of a minute or more."""
    many = max(1, round(SLOW_CLOCK_S / step))
    n = len(variation)
    padded = np.full(-(-n // many) * many, np.nan)
    padded[:n] = variation
    blocks = padded.reshape(-1, many)
    good = np.isfinite(blocks)
    with np.errstate(invalid="ignore"):
        coarse = np.where(good.any(axis=1), np.where(good, blocks, 0).sum(axis=1) / good.sum(axis=1), np.nan)
    slow = local_linear(coarse, HALF_AMPLITUDE * settings.slow_period_h * 3600 / (step * many))
    known = np.isfinite(slow)
    centre = (np.arange(len(coarse)) + 0.5) * many - 0.5
    return np.interp(np.arange(n), centre[known], slow[known])


def _margin(good, step) -> np.ndarray:
    """Return the time from every sample to the nearest missing one or end."""
    index = np.arange(len(good))
    last = np.maximum.accumulate(np.where(good, -1, index))
    following = np.minimum.accumulate(np.where(good, len(good), index)[::-1])[::-1]
    return np.minimum(index - last, following - index) * step * good


def predict(
    stations: list[Station], time_s: np.ndarray, lat: np.ndarray, lon: np.ndarray, *, settings: Diurnal
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
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
    variation : array of float, shape (n,)
        nT, NaN where no station has data.
    distance : array of float, shape (n,)
        To the nearest station with data, km.
    disturbed : array of bool, shape (n,)
        That station is disturbed.

    """
    n = len(time_s)
    total, weight = np.zeros(n), np.zeros(n)
    nearest, disturbed = np.full(n, np.inf), np.zeros(n, bool)
    kept = []
    for station in stations:
        value, margin, bad = _at(station, time_s, lon, settings)
        away = distance_km(lat, lon, station.latitude_deg, station.longitude_deg)
        known = np.isfinite(value) & np.isfinite(away)
        nearer = known & (away < nearest)
        nearest[nearer], disturbed[nearer] = away[nearer], bad[nearer]
        if settings.combine == "nearest":
            total[nearer], weight[nearer] = value[nearer], 1.0
            continue
        w = np.clip((margin + 1.0) / FADE_S, 0, 1) / (away**2 + NEAREST_KM**2)
        total += np.where(known, w * value, 0.0)
        weight += np.where(known, w, 0.0)
        if settings.combine == "plane":
            kept.append((station, np.where(known, w, 0.0), np.where(known, value, 0.0)))
    with np.errstate(invalid="ignore", divide="ignore"):
        variation = np.where(weight > 0, total / weight, np.nan)
    if settings.combine == "plane" and len(kept) >= 3:
        variation = _plane(kept, lat, lon, variation)
    return variation, np.where(np.isfinite(nearest), nearest, np.nan), disturbed


def _at(station: Station, time_s, lon, settings):
    """Return a station's variation at the ship's local time, the margin to a gap, and whether it is disturbed."""
    step = station.time_s[1] - station.time_s[0]
    place = (time_s - station.time_s[0]) / step
    tick = np.clip(place.astype(np.int64), 0, len(station.time_s) - 2)
    inside = (place >= 0) & (place <= len(station.time_s) - 1)
    share = np.clip(place - tick, 0, 1)
    v = station.variation_nt
    value = np.where(share == 0, v[tick], v[tick] + share * (v[tick + 1] - v[tick]))
    if settings.local_time_shift:
        hours = ((lon - station.longitude_deg + 180.0) % 360.0 - 180.0) / 15.0
        # beyond the ends of the record the last slow value stands
        then = np.interp(time_s + 3600.0 * hours, station.time_s, station.slow_nt)
        now = np.interp(time_s, station.time_s, station.slow_nt)
        value = value + (then - now)
    margin = np.minimum(station.margin_s[tick], station.margin_s[tick + 1])
    return np.where(inside, value, np.nan), margin, station.disturbed[tick]


def _plane(kept, lat, lon, otherwise):
    """Fit a plane in position to the stations at every instant; `otherwise` where that cannot be done."""
    s = np.zeros((3, 3, len(lat)))
    b = np.zeros((3, len(lat)))
    for station, w, value in kept:
        x = ((station.longitude_deg - lon + 180.0) % 360.0 - 180.0) * np.cos(np.radians(lat)) * 111.2
        y = (station.latitude_deg - lat) * 111.2
        terms = (np.ones_like(x), x / 100.0, y / 100.0)
        flat = np.where(w > 0, 1.0, 0.0) * np.minimum(1.0, w / np.maximum(w, 1e-300))
        for i in range(3):
            b[i] += flat * terms[i] * value
            for j in range(3):
                s[i, j] += flat * terms[i] * terms[j]
    matrices = s.transpose(2, 0, 1)
    determined = np.isfinite(matrices).all(axis=(1, 2)) & np.isfinite(otherwise)
    condition = np.full(len(lat), np.inf)
    condition[determined] = np.linalg.cond(matrices[determined])
    determined &= condition < 1e4
    result = otherwise.copy()
    solved = np.linalg.solve(matrices[determined], b.T[determined][..., None])
    result[determined] = solved[:, 0, 0]
    return result


def growth_with_distance(stations: list[Station], *, settings: Diurnal) -> tuple[float, list[dict]]:
    """Calibrate how the error grows with distance, by predicting each station from the others.

    Parameters
    ----------
    stations : list of Station
        Two or more.
    settings : Diurnal

    Returns
    -------
    float
        nT per 100 km.
    list of dict
        ``station``, ``distance_km`` to the nearest other, ``rms_nt`` of the prediction's error, its mean removed.

    """
    rows, squares = [], []
    for k, station in enumerate(stations):
        others = stations[:k] + stations[k + 1 :]
        n = len(station.time_s)
        place = (np.full(n, part) for part in (station.latitude_deg, station.longitude_deg))
        predicted, away, _ = predict(others, station.time_s, *place, settings=settings)
        error = station.variation_nt - predicted
        error = error[np.isfinite(error)]
        if len(error) < 60:
            continue
        rms, distance = float(np.std(error)), float(np.nanmedian(away))
        rows.append({"station": station.name, "distance_km": distance, "rms_nt": rms})
        # the station's own local error is in it as well as that of the others
        squares.append(max(0.0, rms**2 - 2 * settings.sigma_at_base_nt**2) / (max(distance, NEAREST_KM) / 100.0) ** 2)
    return (float(np.sqrt(np.mean(squares))) if squares else settings.sigma_nt_per_100km), rows


def three_hour_ranges(station: Station, start_s: float, end_s: float) -> float | None:
    """Return the largest three-hour range of the variation during a span, nT; None where there are no data."""
    chosen = (station.time_s >= start_s - 10800) & (station.time_s <= end_s + 10800) & np.isfinite(station.variation_nt)
    window = (station.time_s[chosen] // 10800).astype(np.int64)
    own = (window >= start_s // 10800) & (window <= end_s // 10800)
    if not own.any():
        return None
    grouped = pd.Series(station.variation_nt[chosen][own]).groupby(window[own])
    return float((grouped.max() - grouped.min()).max())


# -- stage -----------------------------------------------------------------------------------------------------------


def read_station(source, paths) -> tuple[pd.DataFrame, tuple, list[dict]]:
    """Read one station's files: its record, its position, and what each file held."""
    from steps import clock
    from steps.provenance import checksum

    parts, files, place = [], [], None
    for path in paths:
        if source.format == "iaga2002":
            from steps.formats.iaga2002 import read_iaga2002

            header, table = read_iaga2002(path)
            counts = header.counts
            place = place or (header.latitude_deg, header.longitude_deg, header.elevation_m)
        else:
            from steps.formats.delimited import read_delimited

            table, counts = read_delimited(path, source, {"total_field_nt": source.columns.total_field_nt})
            table = table.rename(columns={"time": "time_utc"})
        parts.append(table[["time_utc", "total_field_nt"]])
        files.append({"file": str(path), "sha256": checksum(path), "counts": counts})
    table = pd.concat(parts, ignore_index=True)
    table["time_utc"] = clock.correct(table["time_utc"].to_numpy(), source.clock)
    table = table.sort_values("time_utc", kind="stable").drop_duplicates("time_utc").reset_index(drop=True)
    own = (source.latitude_deg, source.longitude_deg, source.height_m)
    place = tuple(a if a is not None else b for a, b in zip(own, place or own, strict=True))
    if place[0] is None or place[1] is None:
        raise SurveyError(
            f"{paths[0]}: must state the station's position. Give latitude_deg and longitude_deg in survey.yaml."
        )
    return table, (place[0], place[1], place[2] or 0.0), files


def main(job: stage.Job) -> None:
    """Read the base stations and predict the variation at every reading."""
    time = job.table("readings", ["time_utc"])["time_utc"].to_numpy()
    position = job.table("position", ["sensor_latitude_deg", "sensor_longitude_deg"]).to_numpy()
    table, own = job.table("line_table"), job.settings
    n = len(time)
    stations, files = [], []
    for number, source in enumerate(own.base_stations):
        record, place, read = read_station(source, job.inputs[f"base_{number}"])
        files += read
        field = record["total_field_nt"].to_numpy()
        odd = (field < 10_000) | (field > 100_000)
        if odd.any():
            raise SurveyError(
                f"base station {source.name}: total field must be between 10000 and 100000 nT. Got {field[odd][0]:g} "
                f"at {str(record['time_utc'][np.flatnonzero(odd)[0]])[:19]}. Check unit, column and missing codes."
            )
        stations.append(make_station(source.name, record["time_utc"].to_numpy(), field, *place, settings=own))
    seconds = time.astype(np.int64) / NS_PER_S
    if not stations:
        variation, sigma = np.full(n, np.nan), np.full(n, np.nan)
        flags = np.full(n, int(Flag.NO_DIURNAL), np.uint32)
        job.note("there is no base station: the diurnal term is missing, and levelling has to carry it.")
        job.done("no base station: term missing")
    else:
        growth, calibration = own.sigma_nt_per_100km, []
        if len(stations) > 1:
            growth, calibration = growth_with_distance(stations, settings=own)
        variation, away, disturbed = predict(stations, seconds, *position.T, settings=own)
        missing = ~np.isfinite(variation)
        sigma = np.where(missing, np.nan, np.hypot(own.sigma_at_base_nt, growth * away / 100.0))
        flags = np.where(missing, np.uint32(Flag.NO_DIURNAL), np.uint32(0))
        flags |= np.where(disturbed & ~missing, np.uint32(Flag.DISTURBED), np.uint32(0))
        job.record |= {"growth_nt_per_100km": growth, "calibration": calibration}
        _tell(job, stations, table, missing, disturbed, position)
        job.done(
            f"{len(stations)} base station{'s' * (len(stations) > 1)}; {int((~missing).sum())} readings with a value, "
            f"{int(missing.sum())} without, {int((disturbed & ~missing).sum())} disturbed; "
            f"{np.nanmin(variation) if (~missing).any() else np.nan:.1f} to "
            f"{np.nanmax(variation) if (~missing).any() else np.nan:.1f} nT"
        )
    job.record["files"] = files
    job.write("diurnal", pd.DataFrame({"diurnal_nt": variation, "sigma_diurnal_nt": sigma, "diurnal_flags": flags}))
    job.write("diurnal_base", _shown(stations))


def _tell(job, stations, table, missing, disturbed, position) -> None:
    """Put stations and lines into the record; note what deserves a look."""
    job.record["stations"] = [
        {
            "station": station.name,
            "latitude_deg": station.latitude_deg,
            "longitude_deg": station.longitude_deg,
            "datum_nt": station.datum_nt,
            "datum_from": station.datum_from,
        }
        for station in stations
    ]
    start, end = (
        table[name].to_numpy().astype("datetime64[ns]").astype(np.int64) / NS_PER_S for name in ("start_utc", "end_utc")
    )
    ranges = [three_hour_ranges(stations[0], a, b) for a, b in zip(start, end, strict=True)]
    job.record["three_hour_ranges"] = [
        {"line": line, "range_nt": value} for line, value in zip(table["line"], ranges, strict=True)
    ]
    line_index = job.table("lines")["line_index"].to_numpy()
    on_line = line_index >= 0
    placed = np.isfinite(position[:, 0])
    lost = np.bincount(line_index[on_line & missing & placed], minlength=len(table))
    for line, count in zip(table["line"], lost, strict=True):
        if count:
            job.note(f"line {line}: {count} readings have no diurnal value, for want of a base station's record.")
    upset = np.bincount(line_index[on_line & disturbed], minlength=len(table)) / np.maximum(
        table["readings"].to_numpy(), 1
    )
    for line, share in zip(table["line"], upset, strict=True):
        if share > 0.05:
            job.note(f"line {line}: {100 * share:.0f} % of the readings fall in magnetically disturbed time.")
    for station in stations:
        if job.settings.datum == "quiet_night" and station.datum_from != "median of quiet local night":
            job.note(
                f"base station {station.name}: no hour of quiet night in its record; its mean is the datum instead."
            )


def _shown(stations: list[Station]) -> pd.DataFrame:
    """Return the stations' variation for figures, at most one value a minute."""
    parts = []
    for station in stations:
        every = max(1, round(60.0 / (station.time_s[1] - station.time_s[0])))
        parts.append(
            pd.DataFrame(
                {
                    "station": station.name,
                    "time_utc": np.rint(station.time_s[::every] * 1e6).astype(np.int64).astype("datetime64[us]"),
                    "variation_nt": station.variation_nt[::every],
                    "disturbed": station.disturbed[::every],
                }
            )
        )
    if not parts:
        parts = [pd.DataFrame({"station": [], "time_utc": [], "variation_nt": [], "disturbed": []})]
    return pd.concat(parts, ignore_index=True)


if __name__ == "__main__":
    stage.run(main)
