"""Make the product: every reading with its corrections, and one evenly spaced profile a line.

A line's readings are projected on a great circle: the line's own best fit, or one of stated azimuth through the middle
of the survey (not for lines, such as ties, that run more than 45 degrees off it). Distance is geodesic (WGS 84) along
it and grows in a stated sense, whatever way the ship ran. Even samples come from a linear-phase low-pass filter (Kaiser
window; Kaiser & Schafer 1980, IEEE Trans. ASSP 28) that lets half the new Nyquist wavenumber through and nothing beyond
it; every term passes the same filter over the same readings, so that

    anomaly = total field - main field - diurnal - heading - level

holds in every sample as it does in every reading. Gaps longer than a stated length stay gaps.

A term that is missing in the whole survey is absent: the anomaly is made without it, and the record says why. A term
that is missing in some readings leaves these without an anomaly, flagged. A line without a level keeps its anomaly,
flagged.
"""

import json

import numpy as np
import pandas as pd

from steps import geodesy, main_field, provenance, stage
from steps.columns import COLUMNS, REJECTING, Flag
from steps.edits import as_text as edit_text
from steps.settings import Profiles

TERMS = ("main_field_nt", "diurnal_nt", "heading_nt", "level_nt")
SIGMAS = ("sigma_noise_nt", "sigma_position_nt", "sigma_diurnal_nt", "sigma_heading_nt", "sigma_level_nt")
HALF_LENGTH = 8  # of the filter, in new samples
CUTOFF = 0.775  # of the new Nyquist wavenumber, half amplitude
KAISER_BETA = 5.65  # 60 dB
FINEST = 64  # fine samples for each new one, at most
GRADIENT_M = 200.0
STEEPEST = np.cos(np.radians(45.0))  # a line further from a stated azimuth (a tie) keeps its own
DECIMALS = {"nT": 3, "m": 2, "km": 4, "degree": 3, "m s-1": 3, "1": 0}
PLACE_DECIMALS = 7


# -- terms -----------------------------------------------------------------------------------------------------------


def combine(parts: dict[str, pd.DataFrame]) -> tuple[pd.DataFrame, dict[str, str]]:
    """Put the terms of all stages together.

    Parameters
    ----------
    parts : dict of str to pandas.DataFrame
        Row-aligned tables ``readings, lines, screen, position, main_field, diurnal, heading, levelling``. Changes that
        the joint adjustment makes to other terms (``heading_change_nt`` and the like) are added to these.

    Returns
    -------
    table : pandas.DataFrame
        Every column, with ``flags`` and ``anomaly_nt``.
    absent : dict of str to str
        Terms that are missing in the whole survey, with the reason.

    """
    table = pd.concat([parts[name] for name in parts], axis=1)
    for term in TERMS[1:]:
        change = table.pop(term.replace("_nt", "_change_nt")) if term.replace("_nt", "_change_nt") in table else None
        if change is not None:
            value = table[term].to_numpy()
            table[term] = np.where(np.isfinite(change), np.where(np.isfinite(value), value, 0.0) + change, value)
    flags = np.zeros(len(table), np.uint32)
    for name in [name for name in table if name.endswith("_flags")]:
        flags |= table.pop(name).to_numpy().astype(np.uint32)
    flags |= np.where(table["line_index"].to_numpy() < 0, np.uint32(Flag.OFF_LINE), np.uint32(0))
    flags |= np.where(table["main_field_nt"].isna().to_numpy(), np.uint32(Flag.NO_MAIN_FIELD), np.uint32(0))
    anomaly = table["total_field_nt"].to_numpy() - table["main_field_nt"].to_numpy()
    absent = {}
    reasons = {"diurnal_nt": Flag.NO_DIURNAL, "heading_nt": Flag.NO_HEADING, "level_nt": Flag.NO_LEVEL}
    for term, flag in reasons.items():
        value = table[term].to_numpy()
        known = np.isfinite(value)
        if not known.any():
            absent[term] = flag.name.lower()
        elif term == "level_nt":  # absent by line, with a flag
            anomaly = anomaly - np.where(known, value, 0.0)
        else:
            anomaly = anomaly - value
    out = (flags & np.uint32(REJECTING)) != 0
    out &= ((flags & np.uint32(Flag.EDITED_IN)) == 0) | ((flags & np.uint32(Flag.EDITED_OUT)) != 0)
    table["flags"] = flags
    table["anomaly_nt"] = np.where(out, np.nan, anomaly)
    return table, absent


def total_sigma(table: pd.DataFrame) -> np.ndarray:
    """Return one sigma of the anomaly, datum left out: root of the sum of squares of the terms that there are.

    Parameters
    ----------
    table : pandas.DataFrame
        The columns of `SIGMAS`; NaN where a term is absent.

    Returns
    -------
    array of float, shape (n,)
        nT; NaN where there is no anomaly.

    """
    squares = sum(np.nan_to_num(table[name].to_numpy()) ** 2 for name in SIGMAS)
    return np.where(np.isfinite(table["anomaly_nt"].to_numpy()), np.sqrt(squares), np.nan)


def gradient(distance_m: np.ndarray, value: np.ndarray) -> np.ndarray:
    """Return the along-track gradient over about 200 m, per metre.

    Parameters
    ----------
    distance_m : array of float, shape (n,)
        Along the track, not decreasing.
    value : array of float, shape (n,)
        NaN where missing.

    Returns
    -------
    array of float, shape (n,)
        0 where it cannot be told.

    """
    good = np.isfinite(value)
    if good.sum() < 3:
        return np.zeros(len(value))
    s, v = distance_m[good], value[good]
    step = np.median(np.diff(s))
    k = int(np.clip(np.rint(GRADIENT_M / 2 / max(step, 1e-3)), 1, max(1, len(s) // 2 - 1)))
    low, high = np.maximum(np.arange(len(s)) - k, 0), np.minimum(np.arange(len(s)) + k, len(s) - 1)
    slope = (v[high] - v[low]) / np.maximum(s[high] - s[low], 1e-3)
    return np.interp(distance_m, s, slope)


# -- geometry --------------------------------------------------------------------------------------------------------


def best_fit_azimuth(lat: np.ndarray, lon: np.ndarray) -> tuple[float, float, float]:
    """Fit a great circle to a track.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees.

    Returns
    -------
    azimuth_deg, lat_0, lon_0 : float
        Azimuth at the middle of the track, 0 to 180, and that middle.

    """
    vectors = _unit(lat, lon)
    weight = np.ones(vectors.shape[1])
    for _ in range(10):  # turns and excursions count less
        middle = (vectors * weight).sum(axis=1)
        middle /= np.linalg.norm(middle)
        offsets = vectors - middle[:, None] * (middle @ vectors)
        _, _, axes = np.linalg.svd((offsets * weight).T, full_matrices=False)
        along = axes[0] - middle * (axes[0] @ middle)
        along /= np.linalg.norm(along)
        across = np.abs(np.cross(middle, along) @ vectors)
        scale = max(np.median(across), 1e-9)
        weight = np.minimum(1.0, 3.0 * scale / np.maximum(across, 1e-12))
    lat_0, lon_0 = _degrees(middle)
    east, north = geodesy.frames(np.array([lat_0]), np.array([lon_0]))
    azimuth = np.degrees(np.arctan2(along @ east[:, 0], along @ north[:, 0])) % 180.0
    return float(azimuth), lat_0, lon_0


def _unit(lat, lon):
    phi, lam = np.radians(lat), np.radians(lon)
    return np.stack([np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)])


def _degrees(vector) -> tuple[float, float]:
    return float(np.degrees(np.arcsin(np.clip(vector[2], -1, 1)))), float(np.degrees(np.arctan2(vector[1], vector[0])))


def turn_towards(azimuth_deg: float, towards_deg: float) -> float:
    """Return the azimuth or its opposite, whichever is within 90 degrees of another."""
    away = np.cos(np.radians(azimuth_deg - towards_deg))
    return float((azimuth_deg + (180.0 if away < -1e-9 else 0.0)) % 360.0)


def project_on_line(
    lat: np.ndarray, lon: np.ndarray, azimuth_deg: float, lat_0: float, lon_0: float
) -> tuple[np.ndarray, np.ndarray]:
    """Project positions on the great circle through an origin in an azimuth.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Degrees.
    azimuth_deg, lat_0, lon_0 : float
        Direction at the origin, and the origin.

    Returns
    -------
    distance_km : array of float, shape (n,)
        Geodesic distance from the origin to the foot of each position, positive in the azimuth.
    offset_km : array of float, shape (n,)
        Distance to the right of the circle.

    """
    from pyproj import Geod

    origin = _unit(lat_0, lon_0)
    east, north = geodesy.frames(np.array([lat_0]), np.array([lon_0]))
    along = np.sin(np.radians(azimuth_deg)) * east[:, 0] + np.cos(np.radians(azimuth_deg)) * north[:, 0]
    right = np.cross(along, origin)
    vectors = _unit(lat, lon)
    angle = np.arctan2(along @ vectors, origin @ vectors)
    if len(angle) == 0:
        return angle, angle
    # The sphere gives the foot; the ellipsoid its distance, exact at nodes and smooth between them.
    nodes = np.linspace(angle.min(), angle.max(), 200) if np.ptp(angle) > 1e-9 else np.array([angle.min()])
    feet = origin[:, None] * np.cos(nodes) + along[:, None] * np.sin(nodes)
    foot_lat = np.degrees(np.arcsin(np.clip(feet[2], -1, 1)))
    foot_lon = np.degrees(np.arctan2(feet[1], feet[0]))
    geod = Geod(ellps="WGS84")
    _, _, length = geod.inv(np.full(len(nodes), lon_0), np.full(len(nodes), lat_0), foot_lon, foot_lat)
    length = np.asarray(length) * np.sign(nodes)
    distance = np.interp(angle, nodes, length) if len(nodes) > 1 else np.full(len(angle), length[0])
    offset = np.arcsin(np.clip(right @ vectors, -1, 1)) * 6371.0
    return distance / 1000.0, offset


# -- resampling ------------------------------------------------------------------------------------------------------


def low_pass(fine: int) -> np.ndarray:
    """Return the coefficients of the filter for `fine` samples to each new one; they sum to 1."""
    from scipy.special import i0

    half = HALF_LENGTH * fine
    t = np.arange(-half, half + 1)
    window = i0(KAISER_BETA * np.sqrt(np.maximum(0.0, 1 - (t / half) ** 2))) / i0(KAISER_BETA)
    taps = np.sinc(CUTOFF * t / fine) * window
    return taps / taps.sum()


def resample_evenly(
    distance_km: np.ndarray, values: np.ndarray, spacing_km: float, longest_gap_km: float
) -> tuple[np.ndarray, np.ndarray]:
    """Resample irregular values to multiples of a spacing, without aliasing and without crossing gaps.

    Parameters
    ----------
    distance_km : array of float, shape (n,)
        In any order; where the ship doubled back, all passes count.
    values : array of float, shape (k, n)
        Without NaN.
    spacing_km : float
        Of the new samples.
    longest_gap_km : float
        Longer stretches without a value stay without.

    Returns
    -------
    at_km : array of float, shape (m,)
        Multiples of the spacing, from the first to the last reading.
    resampled : array of float, shape (k, m)
        NaN in gaps.

    """
    order = np.argsort(distance_km, kind="stable")
    x, v = distance_km[order], values[:, order]
    first, last = int(np.ceil(x[0] / spacing_km - 1e-9)), int(np.floor(x[-1] / spacing_km + 1e-9))
    ticks = np.arange(first, last + 1)
    result = np.full((len(v), len(ticks)), np.nan)
    breaks = np.flatnonzero(np.diff(x) > longest_gap_km) + 1
    for run in np.split(np.arange(len(x)), breaks):
        a, b = int(np.ceil(x[run[0]] / spacing_km - 1e-9)), int(np.floor(x[run[-1]] / spacing_km + 1e-9))
        if b < a or len(run) < 2:
            continue
        result[:, a - first : b - first + 1] = _resample_run(x[run], v[:, run], a, b, spacing_km)
    return ticks * spacing_km, result


def _resample_run(x, v, a, b, spacing):
    """Resample one run without a gap at the ticks a to b."""
    interval = (x[-1] - x[0]) / (len(x) - 1)
    fine = int(np.clip(np.ceil(spacing / max(interval, 1e-9)), 1, FINEST))
    step = spacing / fine
    low, high = int(np.ceil(x[0] / step - 1e-9)), int(np.floor(x[-1] / step + 1e-9))
    grid = np.arange(low, high + 1) * step
    even = np.stack([np.interp(grid, x, part) for part in v])
    # Readings closer than the fine grid are averaged, not picked.
    if interval < step:
        cell = np.clip(np.rint(x / step).astype(np.int64) - low, 0, len(grid) - 1)
        count = np.bincount(cell, minlength=len(grid))
        means = np.stack([np.bincount(cell, part, len(grid)) for part in v]) / np.maximum(count, 1)
        even = np.where(count > 0, means, even)
    if fine == 1:
        return even[:, a - low : b - low + 1]
    from scipy.signal import oaconvolve

    taps = low_pass(fine)
    half = min(len(taps) // 2, len(grid) - 1)
    taps = taps[len(taps) // 2 - half : len(taps) // 2 + half + 1]
    taps = taps / taps.sum()
    # A level far from zero would cost digits in the filter: it is taken off and put back.
    level = even.mean(axis=1, keepdims=True)
    even = even - level
    before = 2 * even[:, :1] - even[:, half:0:-1]
    after = 2 * even[:, -1:] - even[:, -2 : -half - 2 : -1]
    smooth = oaconvolve(np.concatenate([before, even, after], axis=1), taps[None], mode="valid", axes=1) + level
    return smooth[:, a * fine - low : b * fine - low + 1 : fine]


def make_profile(line: pd.DataFrame, *, settings: Profiles, absent: dict[str, str]) -> pd.DataFrame:
    """Resample one line.

    Parameters
    ----------
    line : pandas.DataFrame
        Readings of the line in order of time, with ``distance_km`` and the columns of `combine`.
    settings : Profiles
    absent : dict of str to str
        Terms that the survey has not.

    Returns
    -------
    pandas.DataFrame
        Even samples; empty without two readings that have an anomaly.

    """
    used = line["anomaly_nt"].notna().to_numpy()
    if used.sum() < 2:
        return pd.DataFrame()
    own = line[used]
    x = own["distance_km"].to_numpy()
    terms = ["total_field_nt", *(term for term in TERMS if term not in absent and own[term].notna().all())]
    sigmas = [name for name in SIGMAS if name != "sigma_noise_nt" and own[name].notna().all()]
    place = geodesy.to_vectors(own["sensor_latitude_deg"].to_numpy(), own["sensor_longitude_deg"].to_numpy())
    time = own["time_utc"].to_numpy().astype(np.int64)
    start = time[0]
    others = ["sensor_depth_m", "offset_km"]
    values = np.concatenate(
        [own[[*terms, *sigmas, *others]].to_numpy().T, place - place[:, :1], [(time - start) / 1e9]]
    )
    at, found = resample_evenly(x, values, settings.spacing_km, settings.longest_gap_km)
    table = dict(zip([*terms, *sigmas, *others], found, strict=False))
    known = np.isfinite(found[0])
    lat, lon = np.full(len(at), np.nan), np.full(len(at), np.nan)
    lat[known], lon[known] = geodesy.to_degrees((found[-4:-1] + place[:, :1])[:, known])
    when = np.full(len(at), np.datetime64("NaT"), "datetime64[ns]")
    when[known] = (start + np.rint(found[-1][known] * 1e9).astype(np.int64)).astype("datetime64[ns]")
    result = pd.DataFrame(
        {"distance_km": at, "time_utc": when, "sensor_latitude_deg": lat, "sensor_longitude_deg": lon}
    )
    for name in (*others, "total_field_nt", *TERMS, *SIGMAS):
        result[name] = table.get(name, np.full(len(at), np.nan))
    anomaly = result["total_field_nt"].to_numpy()
    for term in terms[1:]:
        anomaly = anomaly - result[term].to_numpy()
    result["anomaly_nt"] = anomaly
    # White noise falls with the number of readings that the filter's width holds; the other terms are smooth.
    interval = np.ptp(x) / max(1, len(x) - 1)
    averaged = max(1.0, settings.spacing_km / CUTOFF / max(interval, 1e-9))
    result["sigma_noise_nt"] = np.where(known, own["sigma_noise_nt"].median() / np.sqrt(averaged), np.nan)
    result["sigma_anomaly_nt"] = total_sigma(result)
    result["flags"] = _flags_of_samples(line, at, settings.spacing_km, known)
    result["water_depth_m"] = _between(line, at, "water_depth_m", settings.longest_gap_km)
    inclination, declination = np.full(len(at), np.nan), np.full(len(at), np.nan)
    if known.any():
        year = main_field.decimal_year(when[known])
        inclination[known], declination[known] = main_field.inclination_declination(lat[known], lon[known], 0.0, year)
    return result.assign(inclination_deg=inclination, declination_deg=declination)


def _flags_of_samples(line, at, spacing, known) -> np.ndarray:
    """Unite the flags of the readings about each sample: of those used, or in gaps of all."""
    flags = line["flags"].to_numpy().astype(np.uint32)
    place = np.rint((line["distance_km"].to_numpy() - at[0]) / spacing)
    inside = np.isfinite(place) & (place >= 0) & (place < len(at))
    cell = np.where(inside, place, 0).astype(np.int64)
    used = line["anomaly_nt"].notna().to_numpy()
    result = np.zeros(len(at), np.uint32)
    wanted = inside & (used | ~known[cell])
    np.bitwise_or.at(result, cell[wanted], flags[wanted])
    return result


def _between(line, at, name, longest) -> np.ndarray:
    """Interpolate a quantity that not every reading has, not across long gaps."""
    good = line[name].notna().to_numpy() & line["distance_km"].notna().to_numpy()
    if good.sum() < 2:
        return np.full(len(at), np.nan)
    x, v = line["distance_km"].to_numpy()[good], line[name].to_numpy()[good]
    order = np.argsort(x, kind="stable")
    x, v = x[order], v[order]
    after = np.clip(np.searchsorted(x, at), 1, len(x) - 1)
    near = (x[after] - x[after - 1] <= longest) & (at >= x[0]) & (at <= x[-1])
    return np.where(near, np.interp(at, x, v), np.nan)


# -- files -----------------------------------------------------------------------------------------------------------


def file_names(lines: list[str]) -> list[str]:
    """Make a safe and unique file name, without ending, for each line."""
    from steps.survey import slug

    names: list[str] = []
    for line in lines:
        name, number = slug(line), 2
        while name in names:
            name = f"{slug(line)}-{number}"
            number += 1
        names.append(name)
    return names


def as_csv(profile: pd.DataFrame, header: list[str]) -> bytes:
    """Write a profile as CSV: a header block of ``#`` rows that explains every column, a heading row, the samples."""
    import io

    import pyarrow as pa
    from pyarrow import csv

    explained = []
    columns = {}
    for name in profile:
        column = COLUMNS[name]
        explained.append(f"# {name} [{column.unit}]: {column.meaning}")
        values = profile[name]
        if column.dtype.startswith("datetime"):
            columns[name] = pa.array(values.to_numpy().astype("datetime64[ms]"), from_pandas=True)
        elif name == "flags":
            columns[name] = pa.array(values.to_numpy())
        else:
            decimals = PLACE_DECIMALS if name.endswith(("latitude_deg", "longitude_deg")) else DECIMALS[column.unit]
            columns[name] = pa.array(np.round(values.to_numpy(), decimals) + 0.0, from_pandas=True)
    memory = io.BytesIO()
    memory.write("\n".join([*header, *explained, ",".join(columns), ""]).encode("utf-8"))
    csv.write_csv(pa.table(columns), memory, csv.WriteOptions(include_header=False, quoting_style="none"))
    return memory.getvalue()


def csv_header(line: str, kind: str, about: dict, where: dict, absent: dict[str, str]) -> list[str]:
    """Return the header block of a line's CSV, without the columns."""

    def plain(text: object) -> str:
        return " ".join(str(text).split())

    rows = [
        f"# survey: {plain(about['name'])}",
        *(
            f"# {name}: {plain(about[name])}"
            for name in ("vessel", "institution", "processor", "comment")
            if about.get(name)
        ),
        f"# line: {plain(line)}",
        f"# kind: {kind}",
        f"# azimuth of the profile: {where['azimuth_deg']:.3f} degrees at the origin, distance grows in it",
        f"# origin: latitude {where['origin_latitude_deg']:.7f}, longitude {where['origin_longitude_deg']:.7f}",
        "# anomaly = total field - main field - diurnal - heading - level; every correction is subtracted",
        *(f"# absent in the whole survey: {term} ({plain(reason)})" for term, reason in absent.items()),
        "# datum: common to all lines that crossings connect; not determined by the survey itself",
        f"# software: {about['software']}",
        *(f"# input: {plain(file['file'])} sha256 {file['sha256']}" for file in about["inputs"]),
        *(f"# edit: {plain(edit_text(edit))}" for edit in about["edits"]),
        "# Not for navigation. No clearance of the sea bed.",
    ]
    return [row.replace("\x00", "") for row in rows]


# -- stage -----------------------------------------------------------------------------------------------------------


def main(job: stage.Job) -> None:
    """Put the terms together, project, resample, and write tables and files."""
    names = ("readings", "lines", "screen", "position", "main_field", "diurnal", "heading", "levelling")
    table, absent = combine({name: job.table(name) for name in names})
    lines = job.table("line_table")
    records = {path.stem: json.loads(path.read_text(encoding="utf-8")) for path in job.inputs["records"]}
    for term, stage_name in (("diurnal_nt", "diurnal"), ("heading_nt", "heading"), ("level_nt", "levelling")):
        if term in absent:
            record = records.get(f"{stage_name}_record", {})
            absent[term] = record.get("reason") or record.get("done") or absent[term]
    table["distance_km"], table["offset_km"] = np.nan, np.nan
    table["sigma_position_nt"] = 0.0
    index = table["line_index"].to_numpy()
    order = np.argsort(index, kind="stable")
    edges = np.searchsorted(index[order], np.arange(len(lines) + 1))
    rows_of = np.split(order, edges)[1:-1]
    wanted = lines["kind"].isin(job.settings.kinds).to_numpy()
    placed = table["sensor_latitude_deg"].notna().to_numpy()
    common = None
    if job.settings.azimuth_deg is not None:
        common = (job.settings.azimuth_deg, *_common_origin(table, index, wanted, placed))
    columns = {name: table[name].to_numpy().copy() for name in ("distance_km", "offset_km", "sigma_position_nt")}
    parts, about_lines, geometry = [], [], {}
    for number, rows in enumerate(rows_of):
        good = rows[placed[rows]]
        if len(good) < 2:
            continue
        lat, lon = (table[f"sensor_{part}_deg"].to_numpy()[good] for part in ("latitude", "longitude"))
        azimuth, lat_0, lon_0 = best_fit_azimuth(lat, lon)
        own = common is None or abs(np.cos(np.radians(azimuth - common[0]))) < STEEPEST
        if not own:
            azimuth, lat_0, lon_0 = common
        azimuth = turn_towards(azimuth, job.settings.increasing_towards_deg)
        distance, offset = project_on_line(lat, lon, azimuth, lat_0, lon_0)
        if own:  # the origin is the line's own first end
            distance = distance - distance.min()
            lat_0, lon_0 = lat[np.argmin(distance)], lon[np.argmin(distance)]
        columns["distance_km"][good], columns["offset_km"][good] = distance, offset
        path = geodesy.path_length(lat, lon)
        slope = gradient(path, table["anomaly_nt"].to_numpy()[good])
        columns["sigma_position_nt"][good] = np.abs(slope) * table["sigma_position_m"].to_numpy()[good]
        geometry[number] = {
            "azimuth_deg": azimuth,
            "origin_latitude_deg": float(lat_0),
            "origin_longitude_deg": float(lon_0),
        }
    table = table.assign(**columns)
    table["sigma_anomaly_nt"] = total_sigma(table)
    job.record["provenance"] = _provenance(records)
    about = {**job.survey, **job.record["provenance"]}
    folder = job.target("csv")
    files = file_names(lines["line"].tolist())
    for number in np.flatnonzero(wanted):
        line, kind = lines["line"].iloc[number], lines["kind"].iloc[number]
        profile = pd.DataFrame()
        if number in geometry:
            profile = make_profile(table.iloc[rows_of[number]], settings=job.settings, absent=absent)
        if len(profile) == 0:
            job.note(f"line {line}: no profile, for want of readings with an anomaly.")
            continue
        text = as_csv(profile, csv_header(line, kind, about, geometry[number], absent))
        (folder / f"{files[number]}.csv").write_bytes(text)
        parts.append(profile.assign(line=line, kind=kind))
        known = profile["anomaly_nt"].notna()
        about_lines.append(
            {
                "line": line,
                "kind": kind,
                "file": f"{files[number]}.csv",
                "samples": len(profile),
                "missing": int((~known).sum()),
                "sigma_nt": float(profile["sigma_anomaly_nt"].median()),
                **geometry[number],
            }
        )
    profiles = pd.concat(parts, ignore_index=True) if parts else _empty_profiles()
    job.write("corrected", table)
    job.write("profiles", profiles)
    sigma = [row["sigma_nt"] for row in about_lines]
    job.record |= {"lines": about_lines, "absent": absent, "spacing_km": job.settings.spacing_km}
    middle = f", sigma {np.median(sigma):.2f} nT in the middle" if sigma else ""
    job.done(f"{len(about_lines)} profiles, {len(profiles)} samples every {job.settings.spacing_km:g} km{middle}")


def _common_origin(table, index, wanted, placed):
    """Return the stated azimuth's origin: the middle of all lines that get a profile."""
    chosen = placed & (index >= 0) & np.isin(index, np.flatnonzero(wanted))
    middle = _unit(
        table["sensor_latitude_deg"].to_numpy()[chosen], table["sensor_longitude_deg"].to_numpy()[chosen]
    ).sum(axis=1)
    return _degrees(middle / np.linalg.norm(middle))


def _provenance(records: dict) -> dict:
    """Gather what made the products: software, inputs and edits."""
    from steps import __version__

    return {
        "software": f"Stripeline {__version__}; " + " ".join(f"{r['stage']} {r['code']}" for r in records.values()),
        "inputs": provenance.raw_files(records.values()),
        "edits": [edit for record in records.values() for edit in record["edits"]],
    }


def _empty_profiles() -> pd.DataFrame:
    """Return a table of profiles without rows."""
    columns = (
        *("distance_km", "time_utc", "sensor_latitude_deg", "sensor_longitude_deg", "sensor_depth_m", "offset_km"),
        *("total_field_nt", *TERMS, *SIGMAS, "anomaly_nt", "sigma_anomaly_nt", "flags", "water_depth_m"),
        *("inclination_deg", "declination_deg", "line", "kind"),
    )
    return pd.DataFrame(
        {name: np.zeros(0, "object" if COLUMNS[name].dtype == "str" else COLUMNS[name].dtype) for name in columns}
    )


if __name__ == "__main__":
    stage.run(main)
