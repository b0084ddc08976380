"""Make the product: every reading with its corrections, and one evenly spaced profile a line.

    anomaly = total field - main field - diurnal - heading - level

in every reading and in every sample: all terms pass the same filter over the same readings (`steps.resampling`). What
the joint adjustment changed in the heading and diurnal terms is added to them first. A term that the whole survey lacks
is not subtracted, and record and files say why; where a term is missing that other readings of the survey have, the
anomaly is missing too, with a flag for the reason. Level is a term of whole lines: a line without a usable crossing has
none, and keeps its anomaly, not levelled, flagged as such.

A line is projected on the geodesic that fits it best, its distance counted from its own end, or on one of stated
azimuth through the middle of the survey, the origin of all its lines, except lines that run more than 45 degrees off
it, such as ties (`steps.projection`). Distance grows in a stated sense, whatever way the ship ran.

One sigma of a sample: noise is independent from reading to reading and averages down in a sample; errors of position
(in nT: times the along-track gradient), diurnal, heading and level are shared by neighbours and do not. The error of
the datum is common to a network of lines and stands apart.
"""

import hashlib
import json
from collections.abc import Mapping

import numpy as np
import pandas as pd

from steps import __version__, edits, geodesy, main_field, projection, provenance, stage
from steps.columns import REJECTING, TABLES, Flag
from steps.formats.profile_csv import as_csv, file_names, one_line
from steps.resampling import even_samples
from steps.screen import rejected
from steps.settings import Profiles

STAGES = ("readings", "lines", "screen", "position", "main_field", "diurnal", "heading", "levelling")
TERMS = {
    "main_field_nt": ("main field", "main_field", Flag.NO_MAIN_FIELD),
    "diurnal_nt": ("diurnal", "diurnal", Flag.NO_DIURNAL),
    "heading_nt": ("heading", "heading", Flag.NO_HEADING),
    "level_nt": ("level", "levelling", Flag.NO_LEVEL),
}
REASONS = np.uint32(REJECTING | Flag.NO_NAVIGATION | Flag.NO_CABLE)  # why a sample may be missing
APART = ("sigma_diurnal_nt", "sigma_heading_nt", "sigma_level_nt")
SHARED = ("sigma_position_nt", *APART, "sigma_joint_nt", "sigma_datum_nt")  # errors that neighbours share
RESAMPLED = ("total_field_nt", *TERMS, *SHARED, "offset_km", "sensor_depth_m", "water_depth_m")
PLACED = ("time_utc", "distance_km", "sensor_latitude_deg", "sensor_longitude_deg", "flags")
NEEDED = (*RESAMPLED, *PLACED, "sigma_noise_nt")  # columns that a profile is made of
WIDEST_DEPARTURE_DEG = 45.0  # of a line from the stated azimuth
FRAGILE_DEG = 10.0  # lines so near to right angles with the sense of distance may be turned either way
SAID = (
    "anomaly = total field - main field - diurnal - heading - level; every correction is subtracted",
    "A missing value is an empty cell; flags say why",
    "sigma: one standard deviation. sigma_anomaly_nt is the root of the sum of squares of noise, position, and the "
    "joint sigma of diurnal, heading and level, or of these one by one where they were not adjusted together; the "
    "error of a term that is not subtracted is not in it, nor that of the datum",
    "Positions: WGS 84, of the towed sensor. Time: UTC. Main field: IGRF-14 (IAGA Working Group V-MOD, CC BY 4.0)",
    "Not for navigation. Not a clearance of the sea bed",
)


# -- terms -----------------------------------------------------------------------------------------------------------


def combine(parts: dict[str, pd.DataFrame]) -> tuple[pd.DataFrame, list[str]]:
    """Put the terms of all stages together.

    Parameters
    ----------
    parts : dict of str to pandas.DataFrame
        Row-aligned tables ``readings, lines, screen, position, main_field, diurnal, heading, levelling``.

    Returns
    -------
    table : pandas.DataFrame
        Every column of the stages, their flags united in ``flags``, the changes of the joint adjustment added to the
        heading and diurnal terms, and ``anomaly_nt``.
    absent : list of str
        Columns of the terms that no reading of the survey has.

    """
    table = pd.concat(parts.values(), axis=1)
    flags = np.zeros(len(table), np.uint32)
    for name in [name for name in table if name.endswith("_flags")]:
        flags |= table.pop(name).to_numpy().astype(np.uint32)
    flags[table["line_index"].to_numpy() < 0] |= np.uint32(Flag.OFF_LINE)
    flags[table["main_field_nt"].isna().to_numpy()] |= np.uint32(Flag.NO_MAIN_FIELD)
    for term in ("diurnal", "heading"):
        if f"{term}_change_nt" in table:
            value, change = table[f"{term}_nt"].to_numpy(float), table[f"{term}_change_nt"].to_numpy(float)
            if term == "heading":  # crossings may tell a heading effect that no calibration did
                value = np.where(np.isnan(value) & np.isfinite(change), 0.0, value)
                flags[np.isfinite(value)] &= ~np.uint32(Flag.NO_HEADING)
            table[f"{term}_nt"] = value + np.nan_to_num(change)
    anomaly, absent = table["total_field_nt"].to_numpy(float), []
    for term in TERMS:
        value = table[term].to_numpy(float)
        if np.isnan(value).all():
            absent.append(term)
        else:
            anomaly = anomaly - (np.nan_to_num(value) if term == "level_nt" else value)
    return table.assign(flags=flags, anomaly_nt=np.where(rejected(flags), np.nan, anomaly)), absent


def total_sigma(table: Mapping[str, np.ndarray] | pd.DataFrame) -> np.ndarray:
    """Return one sigma of the anomaly, datum left out.

    Parameters
    ----------
    table : pandas.DataFrame or dict of str to array, shape (n,)
        anomaly_nt and the sigmas of noise, position, diurnal, heading and level, and of the last three jointly; NaN
        where there is none.

    Returns
    -------
    array of float, shape (n,)
        nT; NaN where there is no anomaly.

    """
    joint, anomaly = np.asarray(table["sigma_joint_nt"], float), np.asarray(table["anomaly_nt"], float)
    apart = sum(np.nan_to_num(np.asarray(table[name], float)) ** 2 for name in APART)
    squares = np.where(np.isfinite(joint), joint**2, apart)
    for name in ("sigma_noise_nt", "sigma_position_nt"):
        squares = squares + np.nan_to_num(np.asarray(table[name], float)) ** 2
    return np.where(np.isfinite(anomaly), np.sqrt(squares), np.nan)


def along_track_gradient(path_m: np.ndarray, value: np.ndarray, window_m: float) -> np.ndarray:
    """Return the slope of the straight line through the values in a window about each place.

    Parameters
    ----------
    path_m : array of float, shape (n,)
        Distance run, metres, not decreasing.
    value : array of float, shape (n,)
        NaN where missing.
    window_m : float
        Length of the window; it is widened to the nearest two values where it holds fewer.

    Returns
    -------
    array of float, shape (n,)
        Per metre, at every place; NaN with fewer than two values.

    """
    good = np.isfinite(value)
    if good.sum() < 2 or np.ptp(path_m[good]) == 0:
        return np.full(len(path_m), np.nan)
    s, v = path_m[good] - path_m[good].mean(), value[good] - value[good].mean()
    sums = [np.concatenate([[0.0], np.cumsum(part)]) for part in (np.ones(len(s)), s, v, s * s, s * v)]
    at = np.arange(len(s))
    low = np.minimum(np.searchsorted(s, s - window_m / 2), np.maximum(at - 1, 0))
    high = np.maximum(np.searchsorted(s, s + window_m / 2, side="right"), np.minimum(at + 2, len(s)))
    n, s_1, v_1, s_2, sv = (part[high] - part[low] for part in sums)
    spread = s_2 - s_1**2 / n
    flat = spread <= 1e-9 * np.maximum(s_2, 1e-9)
    slope = np.where(flat, np.nan, (sv - s_1 * v_1 / n) / np.where(flat, 1.0, spread))
    known = np.isfinite(slope)
    return (
        np.interp(path_m - path_m[good].mean(), s[known], slope[known]) if known.any() else np.full(len(path_m), np.nan)
    )


# -- geometry --------------------------------------------------------------------------------------------------------


def place_line(
    lat: np.ndarray, lon: np.ndarray, settings: Profiles, common: tuple[float, float] | None
) -> tuple[np.ndarray, np.ndarray, dict]:
    """Project a line on its geodesic.

    Parameters
    ----------
    lat, lon : array of float, shape (n,)
        Positions of the sensor in the order in which they were run, degrees.
    settings : Profiles
    common : tuple of float or None
        Latitude and longitude of the common origin, for the stated azimuth.

    Returns
    -------
    distance_km, offset_km : array of float, shape (n,)
    frame : dict
        ``azimuth_deg`` at the origin, ``origin_latitude_deg``, ``origin_longitude_deg``, and ``own``: whether the
        geodesic is the line's own best fit.

    """
    from pyproj import Geod

    fitted, lat_0, lon_0 = projection.best_fit_azimuth(lat, lon)
    own = common is None or _apart(fitted, settings.azimuth_deg) > WIDEST_DEPARTURE_DEG
    azimuth = fitted if own else settings.azimuth_deg
    if not own:
        lat_0, lon_0 = common
    azimuth = projection.turn_towards(azimuth, settings.increasing_towards_deg)
    distance, offset = projection.project_on_line(lat, lon, azimuth_deg=azimuth, lat_0=lat_0, lon_0=lon_0)
    if own:  # from the line's own end
        first = distance.min()
        lon_0, lat_0, back = Geod(ellps="WGS84").fwd(lon_0, lat_0, azimuth, first * 1000)
        azimuth, distance = (back + 180.0) % 360.0, distance - first
    frame = {
        "azimuth_deg": float(azimuth),
        "origin_latitude_deg": float(lat_0),
        "origin_longitude_deg": float((lon_0 + 180.0) % 360.0 - 180.0),
        "own": bool(own),
    }
    return distance, offset, frame


def _apart(azimuth: float, other: float) -> float:
    """Return the angle between two straight lines, 0 to 90 degrees."""
    return abs((azimuth - other + 90.0) % 180.0 - 90.0)


def azimuth_along(frame: dict, distance_km: np.ndarray) -> np.ndarray:
    """Return the azimuth of the geodesic of a frame at distances from its origin, degrees."""
    from pyproj import Geod

    whole = np.ones(len(distance_km))
    place = (frame["origin_longitude_deg"], frame["origin_latitude_deg"], frame["azimuth_deg"])
    return (
        np.asarray(Geod(ellps="WGS84").fwd(*(whole * part for part in place), distance_km * 1000)[2]) + 180.0
    ) % 360.0


# -- samples ---------------------------------------------------------------------------------------------------------


def make_profile(
    line: Mapping[str, np.ndarray] | pd.DataFrame, frame: dict, settings: Profiles, absent: list[str]
) -> pd.DataFrame:
    """Resample one line.

    Parameters
    ----------
    line : pandas.DataFrame or dict of str to array, shape (n,)
        Its readings in order of time, with the columns of `combine`, and distance_km, offset_km, sigma_position_nt.
    frame : dict
        Of `place_line`.
    settings : Profiles
    absent : list of str
        Terms that the survey has not.

    Returns
    -------
    pandas.DataFrame
        Table `profiles` without line and kind; empty without two kept readings.

    """
    own = {name: np.asarray(line[name]) for name in NEEDED}
    x, flags = own["distance_km"], own["flags"].astype(np.uint32)
    usable = np.isfinite(x) & ~rejected(flags) & np.isfinite(own["total_field_nt"])
    names = [name for name in TABLES["profiles"] if name not in ("line", "kind")]
    if usable.sum() < 2:
        return pd.DataFrame({name: [] for name in names})
    steps = {"spacing_km": settings.spacing_km, "longest_gap_km": settings.longest_gap_km}
    span = (x[usable].min(), x[usable].max())
    whole = even_samples(x, usable, **steps, between_km=span)
    time = own["time_utc"].astype("datetime64[ns]").astype(np.int64)
    cell, inside = _cells(np.interp(time, time[np.isfinite(x)], x[np.isfinite(x)]), whole.at_km, settings.spacing_km)

    # quantities that the same readings have are resampled together
    place = geodesy.to_vectors(own["sensor_latitude_deg"], own["sensor_longitude_deg"])
    own |= dict(zip("xyz", place, strict=True)) | {"seconds": (time - time[0]) / 1e9}
    alike: dict[bytes, list[str]] = {}
    for name in ("x", "y", "z", "seconds", *RESAMPLED):
        alike.setdefault((usable & np.isfinite(own[name])).tobytes(), []).append(name)
    columns = {}
    for key, group in alike.items():
        there = np.frombuffer(key, bool)
        even = whole if (there == usable).all() else even_samples(x, there, **steps, between_km=span)
        columns |= dict(zip(group, even.mean(np.column_stack([own[name] for name in group])).T, strict=True))
        for name in group:  # no term is bridged over a reading that lacks it
            if name in TERMS:
                columns[name][cell[inside & usable & ~there]] = np.nan
    lat, lon = geodesy.to_degrees(np.stack([columns.pop(axis) for axis in "xyz"]))
    when = time[0] + np.rint(np.nan_to_num(columns.pop("seconds")) * 1e9).astype(np.int64)
    anomaly = columns["total_field_nt"]
    for term in TERMS:
        if term not in absent and not (term == "level_nt" and np.isnan(own[term]).all()):
            anomaly = anomaly - columns[term]
    columns |= {
        "distance_km": whole.at_km,
        "azimuth_deg": azimuth_along(frame, whole.at_km),
        "time_utc": np.where(whole.present, when, np.iinfo(np.int64).min).astype("datetime64[ns]"),
        "sensor_latitude_deg": lat,
        "sensor_longitude_deg": lon,
        "anomaly_nt": anomaly,
        "sigma_noise_nt": whole.noise(own["sigma_noise_nt"]),
        **{name: np.maximum(columns[name], 0.0) for name in SHARED},
        "flags": _flags(flags, cell, inside, usable, whole.present),
    }
    columns["sigma_anomaly_nt"] = total_sigma(columns)
    columns |= _ambient(columns)
    return pd.DataFrame({name: columns[name] for name in names})


def _ambient(columns: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Return inclination and declination of the main field at the samples."""
    there = np.isfinite(columns["sensor_latitude_deg"])
    result = {name: np.full(len(there), np.nan) for name in ("inclination_deg", "declination_deg")}
    if there.any():
        year = main_field.decimal_year(columns["time_utc"][there])
        height = -np.nan_to_num(columns["sensor_depth_m"][there])
        place = (columns["sensor_latitude_deg"][there], columns["sensor_longitude_deg"][there], height, year)
        for name, part in zip(result, main_field.inclination_declination(*place), strict=True):
            result[name][there] = part
    return result


def _cells(x, at_km, spacing_km) -> tuple[np.ndarray, np.ndarray]:
    """Return the nearest sample to each reading, and whether there is one."""
    if len(at_km) == 0:
        return np.zeros(len(x), np.int64), np.zeros(len(x), bool)
    cell = np.rint((x - at_km[0]) / spacing_km).astype(np.int64)
    inside = (cell >= 0) & (cell < len(at_km))
    return np.where(inside, cell, 0), inside


def _flags(flags, cell, inside, usable, present) -> np.ndarray:
    """Unite the flags about each sample: of the readings used, or, where there is no sample, of all that there are."""
    result = np.zeros(len(present), np.uint32)
    wanted = inside & (usable | ~present[cell]) if len(present) else inside
    np.bitwise_or.at(result, cell[wanted], flags[wanted].astype(np.uint32))
    result[~present & ((result & REASONS) == 0)] |= np.uint32(Flag.DROPOUT)
    return result


# -- stage -----------------------------------------------------------------------------------------------------------


def made_by(records: dict[str, dict], key: str | None) -> dict:
    """Gather what made the products.

    Parameters
    ----------
    records : dict of str to dict
        Records of all stages by name.
    key : str or None
        Key of the survey; edits of other surveys in the joint records are left out.

    Returns
    -------
    dict
        ``software``, ``stages`` (name, fingerprint of the code, digest of the settings), ``inputs`` (file, sha256) and
        ``edits``.

    """
    stages = [
        {
            "stage": record["stage"],
            "code": record["code"],
            "settings_sha256": hashlib.sha256(provenance.to_json(record["settings"]).encode()).hexdigest()[:16],
        }
        for record in records.values()
    ]
    own = [edit for record in records.values() for edit in record["edits"] if edit.get("member", key) == key]
    inputs = provenance.raw_files(records.values())
    return {"software": f"Stripeline {__version__}", "stages": stages, "inputs": inputs, "edits": own}


def header(profile: dict, survey: dict, settings: Profiles, absent: dict[str, str], origin: dict) -> list[str]:
    """Return the lines that head a line's file, without the explanation of its columns.

    Parameters
    ----------
    profile : dict
        The line's entry in the record: line, kind, no_level, and the keys of `place_line`.
    survey : dict
        Name, vessel, institution, processor, comment.
    settings : Profiles
    absent : dict of str to str
        Terms that the survey has not, with the reason.
    origin : dict
        Of `made_by`.

    """
    which = "that fits the line best, from its own end" if profile["own"] else "of the azimuth stated for the survey"
    lat, lon = profile["origin_latitude_deg"], profile["origin_longitude_deg"]
    told = [("Survey", "name"), ("Vessel", "vessel"), ("Institution", "institution"), ("Processor", "processor")]
    rows = [
        "Marine magnetic anomaly profile",
        *(f"{label}: {survey[name]}" for label, name in [*told, ("Comment", "comment")] if survey.get(name)),
        f"Line: {profile['line']}",
        f"Kind: {profile['kind']}",
        f"Azimuth: {profile['azimuth_deg']:.4f} degrees at the origin; distance grows in it, whatever way the ship ran",
        f"Origin: latitude {lat:.7f}, longitude {lon:.7f} degrees",
        f"Distance: geodesic (WGS 84) along the geodesic {which}",
        f"Samples: every {settings.spacing_km:g} km; wavelengths of {3.4 * settings.spacing_km:g} km and more pass "
        f"with a gain within 1 %, those under {2 * settings.spacing_km:g} km with under 1 %; gaps longer than "
        f"{settings.longest_gap_km:g} km stay empty",
        *SAID,
        *(["Not levelled: no usable crossing; the anomaly holds the line's own level error"] * profile["no_level"]),
        *(f"Not subtracted, for the whole survey: {TERMS[term][0]} ({reason})" for term, reason in absent.items()),
        f"Software: {origin['software']}",
        *(f"Stage {s['stage']}: code {s['code']}, settings sha256 {s['settings_sha256']}" for s in origin["stages"]),
        *(f"Input: {file['file']} sha256 {file['sha256']}" for file in origin["inputs"]),
        *(f"Edit: {edits.as_text(edit)}" for edit in origin["edits"]),
    ]
    return [one_line(row) for row in rows]


def _reasons(absent: list[str], records: dict[str, dict]) -> dict[str, str]:
    """Find why terms are absent, in the words of their stage."""
    found = {}
    for term in absent:
        record = records.get(TERMS[term][1], {})
        found[term] = (
            record.get("reason") or next(iter(record.get("notes", [])), None) or record.get("done", "no value")
        )
    return found


def _listed(names: list[str]) -> str:
    """Write names, the first ten of them."""
    return ", ".join(names[:10]) + (f" and {len(names) - 10} more" if len(names) > 10 else "")


def main(job: stage.Job) -> None:
    """Put the terms together, project, resample, and write tables and files."""
    own = job.settings
    table, missing = combine({name: job.table(name) for name in STAGES})
    lines = job.table("line_table")
    records = {}
    for path in job.inputs["records"]:
        record = json.loads(path.read_text(encoding="utf-8"))
        records[record["stage"]] = record
    absent = _reasons(missing, records)
    job.record["provenance"] = origin = made_by({**records, job.name: job.record}, job.survey.get("key"))
    wanted = lines["kind"].isin(own.kinds).to_numpy()
    table, frames = project_lines(table, len(lines), wanted, own)
    table["sigma_anomaly_nt"] = total_sigma(table)
    rows = line_rows(table["line_index"].to_numpy(), len(lines))
    columns = {name: table[name].to_numpy() for name in NEEDED}
    folder, files = job.target("csv"), file_names(lines["line"].tolist())
    parts, told = [], []
    for number in stage.progress(np.flatnonzero(wanted), job.name):
        line, kind = lines["line"].iloc[number], lines["kind"].iloc[number]
        if number not in frames:
            continue
        profile = make_profile(
            {name: part[rows[number]] for name, part in columns.items()}, frames[number], own, missing
        )
        if not profile["total_field_nt"].notna().any():
            continue
        told.append(_summary(line, kind, f"{files[number]}.csv", profile) | frames[number])
        head = header(told[-1], job.survey, own, absent, origin)
        (folder / told[-1]["file"]).write_bytes(as_csv(profile, head))
        parts.append(profile.assign(line=line, kind=kind))
    empty = pd.DataFrame({name: [] for name in TABLES["profiles"]})
    job.write("corrected", table)
    job.write("profiles", pd.concat(parts, ignore_index=True) if parts else empty)
    job.record |= {"lines": told, "absent": absent, "spacing_km": own.spacing_km}
    _tell(job, lines["line"][wanted].tolist(), told)


def line_rows(line_index: np.ndarray, count: int) -> list[np.ndarray]:
    """Return the rows of each line, in order."""
    order = np.argsort(line_index, kind="stable")
    return np.split(order, np.searchsorted(line_index[order], np.arange(count + 1)))[1:-1]


def project_lines(
    table: pd.DataFrame, count: int, wanted: np.ndarray, settings: Profiles
) -> tuple[pd.DataFrame, dict[int, dict]]:
    """Add distance_km, offset_km and sigma_position_nt to the readings of all lines.

    Parameters
    ----------
    table : pandas.DataFrame
        Of `combine`.
    count : int
        Number of lines.
    wanted : array of bool, shape (count,)
        Lines whose middle is the common origin, where an azimuth is stated.
    settings : Profiles

    Returns
    -------
    table : pandas.DataFrame
        With the three columns; NaN on no line and without a position.
    frames : dict of int to dict
        Of `place_line`, by line; without lines that have no two positions.

    """
    index = table["line_index"].to_numpy()
    lat, lon = (table[f"sensor_{name}_deg"].to_numpy(float) for name in ("latitude", "longitude"))
    placed = np.isfinite(lat) & np.isfinite(lon)
    chosen = placed & np.append(wanted, False)[index]
    common = None
    if settings.azimuth_deg is not None and chosen.any():
        common = projection.middle(lat[chosen], lon[chosen])
    anomaly, error = table["anomaly_nt"].to_numpy(float), table["sigma_position_m"].to_numpy(float)
    distance, offset, sigma = (np.full(len(table), np.nan) for _ in range(3))
    frames = {}
    for number, own in enumerate(line_rows(index, count)):
        own = own[placed[own]]
        if len(own) < 2 or (np.ptp(lat[own]) == 0 and np.ptp(lon[own]) == 0):
            continue
        distance[own], offset[own], frames[number] = place_line(lat[own], lon[own], settings, common)
        path = geodesy.path_length(lat[own], lon[own])
        sigma[own] = np.abs(along_track_gradient(path, anomaly[own], settings.gradient_window_m)) * error[own]
    return table.assign(distance_km=distance, offset_km=offset, sigma_position_nt=sigma), frames


def _summary(line: str, kind: str, file: str, profile: pd.DataFrame) -> dict:
    """Sum a profile up for the record."""
    anomaly, sigma = profile["anomaly_nt"].to_numpy(), profile["sigma_anomaly_nt"].to_numpy()
    known = np.isfinite(anomaly)
    return {
        "line": str(line),
        "kind": str(kind),
        "file": file,
        "samples": len(profile),
        "missing": int((~known).sum()),
        "length_km": float(np.ptp(profile["distance_km"])),
        "sigma_nt": float(np.median(sigma[known])) if known.any() else None,
        "no_level": bool(profile["level_nt"].isna().all()),  # of the survey too, where none is levelled
    }


def _tell(job: stage.Job, wanted: list[str], told: list[dict]) -> None:
    """Say what was made, and what deserves a look."""
    made = {row["line"] for row in told}
    without = [line for line in wanted if line not in made]
    if without:
        job.note(f"no profile, for want of kept readings with a position: {_listed(without)}.")
    unlevelled = [row["line"] for row in told if row["no_level"]] if "level_nt" not in job.record["absent"] else []
    if unlevelled:
        job.note(f"not levelled, for want of a usable crossing, though with all other terms: {_listed(unlevelled)}.")
    right = [(row["line"], row["azimuth_deg"]) for row in told if row["own"]]
    right = [
        (line, azimuth)
        for line, azimuth in right
        if _apart(azimuth, job.settings.increasing_towards_deg) > 90.0 - FRAGILE_DEG
    ]
    if right and min(np.cos(np.radians(azimuth - right[0][1])) for _, azimuth in right) < 0:
        job.note(
            "profiles.increasing_towards_deg lies almost across these lines, so that distance grows one way on some "
            f"and the other way on others: {_listed([line for line, _ in right])}."
        )
    for term, reason in job.record["absent"].items():
        job.record.setdefault("not_subtracted", []).append(f"{TERMS[term][0]}: {reason}")
    sigma = [row["sigma_nt"] for row in told if row["sigma_nt"] is not None]
    middle = f"; sigma {np.median(sigma):.2f} nT in the middle" if sigma else ""
    total = sum(row["samples"] for row in told)
    job.done(f"{len(told)} profiles, {total} samples every {job.settings.spacing_km:g} km{middle}")


if __name__ == "__main__":
    stage.run(main)
