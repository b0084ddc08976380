"""Write a survey in open formats: NetCDF with CF conventions, GeoPackage, MGD77T.

NetCDF holds every reading on a line with every correction, one trajectory a line; GeoPackage the tracks, profiles,
crossings and rejected stretches for a map; MGD77T what an archive of trackline geophysics takes. Equal results are
equal bytes: no date of writing is put in.
"""

import json
import re

import numpy as np
import pandas as pd

from steps import __version__, stage
from steps.columns import REJECTING, Flag
from steps.edits import as_text as edit_text
from steps.formats.geopackage import split_line, write_geopackage
from steps.formats.netcdf import write_netcdf
from steps.screen import rejected

CAUTION = "Not for navigation. No clearance of the sea bed."


def attributes(about: dict, software: str, inputs: list[dict], edits: list[dict]) -> dict[str, str]:
    """Return the global attributes of the NetCDF file, by the names of ACDD-1.3.

    Parameters
    ----------
    about : dict
        Name, vessel, institution, processor and comment of the survey.
    software : str
        What made the file.
    inputs : list of dict
        ``file`` and ``sha256`` of every raw file.
    edits : list of dict
        The edits that were applied.

    Returns
    -------
    dict of str to str
        Without empty ones.

    """
    told = [edit_text(edit) for edit in edits]
    found = {
        "title": f"Marine magnetic anomalies of {_plain(about['name'])}",
        "summary": (
            "Total field of a towed marine magnetometer with every correction in a column of its own: "
            "anomaly = total field - main field - diurnal - heading - level, nT. " + CAUTION
        ),
        "keywords": "EARTH SCIENCE > SOLID EARTH > GEOMAGNETISM > MAGNETIC ANOMALIES",
        "platform": _plain(about.get("vessel", "")),
        "institution": _plain(about.get("institution", "")),
        "creator_name": _plain(about.get("processor", "")),
        "comment": _plain(about.get("comment", "")),
        "source": "towed total-field magnetometer",
        "processing_level": "corrected and levelled",
        "history": f"reduced by {software}" + "".join(f"\nedit: {row}" for row in told),
        "references": "IGRF-14: IAGA Working Group V-MOD, doi:10.5281/zenodo.14012302, CC BY 4.0",
        "input_checksums": "\n".join(f"{_plain(file['file'])} sha256 {file['sha256']}" for file in inputs),
    }
    return {key: value for key, value in found.items() if value}


def _plain(text: object) -> str:
    return " ".join(str(text).replace("\0", "").split())


def map_layers(
    corrected: pd.DataFrame, profiles: pd.DataFrame, lines: pd.DataFrame, crossings: pd.DataFrame
) -> dict[str, tuple[np.ndarray, pd.DataFrame]]:
    """Return the layers of the map: tracks, profiles, crossings and rejected stretches.

    Parameters
    ----------
    corrected, profiles, lines : pandas.DataFrame
        Every reading, the even profiles, and the table of lines.
    crossings : pandas.DataFrame
        The crossings of this survey, with residuals.

    Returns
    -------
    dict of str to (array of shapely geometries, pandas.DataFrame)
        Longitude and latitude, degrees; split at 180 degrees.

    """
    import shapely

    index = corrected["line_index"].to_numpy()
    lat, lon = (corrected[f"sensor_{name}_deg"].to_numpy() for name in ("latitude", "longitude"))
    value = corrected["anomaly_nt"].to_numpy()
    out = rejected(corrected["flags"].to_numpy())
    tracks, rows, stretches, reasons = [], [], [], []
    order = np.argsort(index, kind="stable")
    edges = np.searchsorted(index[order], np.arange(len(lines) + 1))
    for line, own in zip(lines.itertuples(), np.split(order, edges)[1:-1], strict=True):
        shape = split_line(lon[own], lat[own])
        if shape is None:
            continue
        good = np.isfinite(value[own])
        tracks.append(shape)
        rows.append(
            {
                "line": line.line,
                "kind": line.kind,
                "start_utc": line.start_utc,
                "end_utc": line.end_utc,
                "readings": len(own),
                "kept": int(good.sum()),
                "level_nt": float(np.nanmean(corrected["level_nt"].to_numpy()[own])) if good.any() else np.nan,
            }
        )
        for part in _stretches(out[own]):
            run = own[max(part.start - 1, 0) : part.stop + 1]  # with its neighbours, so that one reading is a line
            shape = split_line(lon[run], lat[run])
            if shape is not None:
                stretches.append(shape)
                reasons.append(_reason(line.line, corrected, own[part]))
    profile_shapes, profile_rows = [], []
    for line, own in profiles.groupby("line", sort=False):
        shape = split_line(own["sensor_longitude_deg"].to_numpy(), own["sensor_latitude_deg"].to_numpy())
        if shape is not None:
            profile_shapes.append(shape)
            profile_rows.append(_profile_row(line, own))
    points = shapely.points(crossings["sensor_longitude_deg"], crossings["sensor_latitude_deg"])
    shown = ["survey_1", "line_1", "time_1_utc", "survey_2", "line_2", "time_2_utc", "angle_deg", "mismatch_nt"]
    shown += ["sigma_mismatch_nt", "residual_nt", "left_out_nt", "weight", "status"]
    return {
        "tracks": (np.array(tracks, object), _frame(rows, ["line", "kind"])),
        "profiles": (np.array(profile_shapes, object), _frame(profile_rows, ["line", "kind"])),
        "crossings": (np.asarray(points, object), crossings[shown].reset_index(drop=True)),
        "rejected": (np.array(stretches, object), _frame(reasons, ["line", "reason"])),
    }


def _frame(rows: list[dict], columns: list[str]) -> pd.DataFrame:
    return pd.DataFrame(rows) if rows else pd.DataFrame({name: np.zeros(0, object) for name in columns})


def _profile_row(line: str, own: pd.DataFrame) -> dict:
    """Sum a profile up for the map."""
    value = own["anomaly_nt"].dropna()
    return {
        "line": line,
        "kind": own["kind"].iloc[0],
        "samples": len(own),
        "length_km": float(np.ptp(own["distance_km"])),
        "anomaly_min_nt": float(value.min()) if len(value) else np.nan,
        "anomaly_max_nt": float(value.max()) if len(value) else np.nan,
        "anomaly_sd_nt": float(value.std(ddof=0)) if len(value) else np.nan,
        "sigma_median_nt": float(own["sigma_anomaly_nt"].median()),
    }


def _stretches(mask: np.ndarray) -> list[slice]:
    """Return the stretches where a mask is true."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], mask.astype(np.int8), [0]])))
    return [slice(a, b) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def _reason(line: str, corrected: pd.DataFrame, own: np.ndarray) -> dict:
    """Say why a stretch is rejected."""
    flags = np.bitwise_or.reduce(corrected["flags"].to_numpy()[own])
    names = [flag.name.lower().replace("_", " ") for flag in Flag if flag & REJECTING and flags & np.uint32(flag)]
    time = corrected["time_utc"]
    return {
        "line": line,
        "reason": ", ".join(names),
        "start_utc": time.iloc[own[0]],
        "end_utc": time.iloc[own[-1]],
        "readings": len(own),
    }


def survey_id(name: str) -> str:
    """Return an identifier of the survey for the archive format: upper-case letters and digits, at most 8."""
    return re.sub(r"[^A-Z0-9]", "", name.upper())[:8] or "SURVEY"


def main(job: stage.Job) -> None:
    """Write the survey in every open format."""
    from steps.formats.mgd77t import as_header, as_mgd77t

    key = job.survey["key"]
    corrected, profiles, lines = (job.table(name) for name in ("corrected", "profiles", "line_table"))
    crossings = job.table("crossovers")
    crossings = crossings[(crossings["survey_1"] == key) | (crossings["survey_2"] == key)]
    record = json.loads(job.path("profiles_record").read_text(encoding="utf-8"))
    made_by = record["provenance"]
    about = attributes(job.survey, f"Stripeline {__version__}", made_by["inputs"], made_by["edits"])
    write_netcdf(job.target(f"{key}.nc"), corrected, lines, about)
    layers = map_layers(corrected, profiles, lines, crossings)
    write_geopackage(job.target(f"{key}.gpkg"), layers)
    names = lines["line"].to_numpy(object)
    index = corrected["line_index"].to_numpy()
    table = corrected.assign(line=np.where(index >= 0, names[np.maximum(index, 0)], None))
    identifier = survey_id(job.survey["name"])
    job.target(f"{key}.m77t").write_bytes(as_mgd77t(table, identifier))
    fields = {"INST_SRC": "institution", "PLATFORM": "vessel"}
    header = {field: _plain(job.survey[name]) for field, name in fields.items() if job.survey.get(name)}
    job.target(f"{key}.h77t").write_bytes(as_header(table, identifier, header))
    job.record["layers"] = {name: len(rows) for name, (_, rows) in layers.items()}
    counts = ", ".join(f"{number} {name}" for name, number in job.record["layers"].items())
    job.done(f"NetCDF, GeoPackage ({counts}) and MGD77T written")


if __name__ == "__main__":
    stage.run(main)
