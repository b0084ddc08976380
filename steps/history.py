"""Keep a small history of runs beside the results, and say what changed against the run before.

A run is kept as one JSON file (figures, settings, edits, checksums) and one Parquet file (the profiles), named by
number. The two are written under temporary names and renamed, the JSON last, so that a killed run leaves no half entry.
A run that gave the same as the last one adds no entry.
"""

import hashlib
import json
import os
from pathlib import Path

import numpy as np
import pandas as pd

from steps import provenance

KEPT_RUNS = 20
_PROFILE = ["survey", "line", "distance_km", "anomaly_nt"]


def keep(folder: Path, state: dict, profiles: pd.DataFrame) -> tuple[dict, pd.DataFrame] | None:
    """Add a run to the history and return the one before it.

    Parameters
    ----------
    folder : pathlib.Path
        Folder of the history; made if needed.
    state : dict
        What is known of the run; plain content.
    profiles : pandas.DataFrame
        survey, line, distance_km, anomaly_nt of every profile sample.

    Returns
    -------
    tuple of (dict, pandas.DataFrame) or None
        State and profiles of the last run that gave something else; None if there is none.

    """
    folder.mkdir(parents=True, exist_ok=True)
    table = profiles[_PROFILE].reset_index(drop=True)
    text = provenance.to_json(state, indent=1) + "\n"
    digest = hashlib.sha256(text.encode() + pd.util.hash_pandas_object(table, index=False).to_numpy().tobytes())
    name = digest.hexdigest()[:12]
    runs = [path for path in sorted(folder.glob("[0-9]*.json")) if path.with_suffix(".parquet").is_file()]
    others = [path for path in runs if not path.stem.endswith(name)]
    if not runs or not runs[-1].stem.endswith(name):
        number = int(runs[-1].stem.split("-")[0]) + 1 if runs else 1
        final = folder / f"{number:04d}-{name}.json"
        for path, write in (
            (final.with_suffix(".parquet"), lambda to: table.to_parquet(to, index=False, compression="zstd")),
            (final, lambda to: to.write_text(text, encoding="utf-8")),
        ):
            temporary = path.with_name(f".{path.name}")
            write(temporary)
            os.replace(temporary, path)
        for old in runs[: max(0, len(runs) + 1 - KEPT_RUNS)]:
            old.unlink()
            old.with_suffix(".parquet").unlink()
            others = [path for path in others if path != old]
    if not others:
        return None
    return json.loads(others[-1].read_text(encoding="utf-8")), pd.read_parquet(others[-1].with_suffix(".parquet"))


def compare(before: tuple[dict, pd.DataFrame], state: dict, profiles: pd.DataFrame) -> dict:
    """Say what changed between two runs.

    Parameters
    ----------
    before : tuple of (dict, pandas.DataFrame)
        What `keep` returned.
    state, profiles
        The present run, as given to `keep`.

    Returns
    -------
    dict
        ``figures``: rows (what, before, now) that differ; ``settings``, ``edits``, ``files``: sentences; ``lines``: a
        row for each line whose level, number of readings or profile differs, with the rms and the largest difference of
        the profile, now minus before, nT, at the distances of the present one.

    """
    old, old_profiles = before
    figures = [
        (name, old["figures"].get(name), state["figures"].get(name))
        for name in {**state["figures"], **old["figures"]}
        if old["figures"].get(name) != state["figures"].get(name)
    ]
    return {
        "figures": figures,
        "settings": _differences(_flat(old["settings"]), _flat(state["settings"])),
        "edits": _sets(old["edits"], state["edits"]),
        "files": _differences(old["files"], state["files"], "content"),
        "code": _differences(old["code"], state["code"], "code of stage"),
        "lines": _lines(old, state, old_profiles, profiles),
    }


def _flat(content: object, path: str = "") -> dict[str, object]:
    """Flatten nested settings to ``stage.section.key``."""
    if isinstance(content, dict) and content:
        return {
            k: v for key, inner in content.items() for k, v in _flat(inner, f"{path}.{key}" if path else key).items()
        }
    return {path: content}


def _differences(old: dict, new: dict, what: str = "") -> list[str]:
    """List what was changed, added and removed."""
    found = []
    for key in sorted({*old, *new}):
        name = f"{what} {key}".strip()
        if key not in old:
            found.append(f"{name}: added" + ("" if what else f", {new[key]}"))
        elif key not in new:
            found.append(f"{name}: removed")
        elif old[key] != new[key]:
            found.append(f"{name}: changed" if what else f"{name}: {old[key]} → {new[key]}")
    return found


def _sets(old: list[str], new: list[str]) -> list[str]:
    """List rows that came and went."""
    return [f"added: {row}" for row in new if row not in old] + [f"removed: {row}" for row in old if row not in new]


def _lines(old: dict, state: dict, old_profiles: pd.DataFrame, profiles: pd.DataFrame) -> list[dict]:
    """Compare line by line."""
    past = {key: group for key, group in old_profiles.groupby(["survey", "line"], sort=False)}
    now = {key: group for key, group in profiles.groupby(["survey", "line"], sort=False)}
    rows = []
    for name in dict.fromkeys([*state["lines"], *old["lines"]]):
        was, present = old["lines"].get(name), state["lines"].get(name)
        key = tuple(json.loads(name))
        row = {"survey": key[0], "line": key[1], "rms_nt": None, "largest_nt": None}
        for field in ("level_nt", "kept"):
            row[f"{field}_before"] = was.get(field) if was else None
            row[f"{field}_now"] = present.get(field) if present else None
        if key in past and key in now:
            difference = _profile_difference(past[key], now[key])
            if len(difference):
                row["rms_nt"] = float(np.sqrt(np.mean(difference**2)))
                row["largest_nt"] = float(np.max(np.abs(difference)))
        if was != present or row["rms_nt"]:
            rows.append(row)
    return rows


def _profile_difference(past: pd.DataFrame, now: pd.DataFrame) -> np.ndarray:
    """Return now minus before at the distances of the present profile where both have a value."""
    x, y = past["distance_km"].to_numpy(), past["anomaly_nt"].to_numpy()
    at, value = now["distance_km"].to_numpy(), now["anomaly_nt"].to_numpy()
    if len(x) == 0 or len(at) == 0:
        return np.zeros(0)
    then = np.interp(at, x, y, left=np.nan, right=np.nan)  # a NaN neighbour gives NaN: gaps stay gaps
    difference = value - then
    return difference[np.isfinite(difference)]
