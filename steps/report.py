"""Sum a run up: what was done, what it brought, what deserves a look; as plain text and as one page with figures.

The stage reads what the others wrote and computes nothing new but the figures. Crossing statistics are root mean
squares in nT; those marked *left out* compare each crossing with what the others alone say of it.
"""

import base64
import io
import json
from pathlib import Path

import jinja2
import markupsafe
import numpy as np
import pandas as pd

from steps import __version__, edits, figures, history, page, provenance, stage
from steps.columns import FLAG_MEANINGS, REJECTING, Flag

CAUTIONS = (
    "Not for navigation.",
    "Not a clearance of the sea bed: anomalies near cables, pipelines, wrecks or munitions are not assessed, and the "
    "absence of an anomaly does not show that the sea bed is safe.",
    "Work at sea follows local rules and licensed practice.",
)
STAGES = (
    *("ingest", "lines", "screen", "position", "main_field", "diurnal", "heading"),
    *("crossovers", "levelling", "profiles"),
)


def read_records(paths: list[Path]) -> dict[tuple[str, str], dict]:
    """Read the records of the stages, by survey (empty for the joint stages) and stage."""
    records = {}
    for path in paths:
        record = json.loads(path.read_text(encoding="utf-8"))
        joint = record["stage"] in ("crossovers", "levelling")
        records["" if joint else path.parent.name, record["stage"]] = record
    return records


def flag_counts(flags: np.ndarray) -> list[dict]:
    """Count readings by flag.

    Parameters
    ----------
    flags : array of uint32, shape (n,)
        All flags of each reading.

    Returns
    -------
    list of dict
        name, meaning, readings, rejecting; flags that occur, in the order of the vocabulary.

    """
    counts = []
    for flag in Flag:
        number = int(np.count_nonzero(flags & np.uint32(flag)))
        if number:
            name = flag.name.lower().replace("_", " ")
            rejecting = bool(flag & REJECTING)
            counts.append({"name": name, "meaning": FLAG_MEANINGS[flag], "readings": number, "rejecting": rejecting})
    return counts


def rms(values: np.ndarray) -> float | None:
    """Return the root mean square of the finite values, None without any."""
    values = np.asarray(values, float)
    values = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(values**2))) if len(values) else None


def line_rows(levels: pd.DataFrame, tables: dict[str, pd.DataFrame], corrected: dict[str, pd.DataFrame]) -> list[dict]:
    """Gather one row for each line of each survey: readings, kept, noise, level and crossings.

    Parameters
    ----------
    levels : pandas.DataFrame
        The table of lines that levelling wrote.
    tables, corrected : dict of str to pandas.DataFrame
        Tables of lines and corrected readings of each survey.

    Returns
    -------
    list of dict

    """
    rows = []
    for key, table in tables.items():
        own = corrected[key]
        kept = own["anomaly_nt"].notna()
        counts = kept.groupby(own["line_index"]).sum()
        noise = own.groupby("line_index")["sigma_noise_nt"].median()
        known = levels[levels["survey"] == key].set_index("line")
        for index, line in enumerate(table.itertuples()):
            row = {"survey": key, "line": line.line, "kind": line.kind, "readings": line.readings}
            row |= {"kept": int(counts.get(index, 0)), "noise": noise.get(index, np.nan)}
            for name in (
                "level_nt",
                "sigma_level_nt",
                "crossings",
                "rms_before_nt",
                "rms_after_nt",
                "rms_left_out_nt",
                "status",
            ):
                row[name] = known.loc[line.line, name] if line.line in known.index and name in known else None
            rows.append(row)
    return rows


def joint_rows(record: dict) -> tuple[list[dict], list[dict]]:
    """Gather what the joint adjustment estimated, and what each of its terms brought.

    Parameters
    ----------
    record : dict
        Of levelling.

    Returns
    -------
    terms : list of dict
        term, kept, left-out rms with and without it, nT.
    estimates : list of dict
        survey, what, value, sigma, unit, applied: errors of layback and clock against the settings, and the scale on
        the variation of the base stations.

    """
    known = {"layback": ("error of the layback", "m"), "clock": ("error of the clock", "s")}
    known["diurnal_scale"] = ("departure from 1 of the scale on the base stations", "1")
    estimates = [
        {"survey": key, "what": what, "value": own["values"][0], "sigma": own["sigmas"][0], "unit": unit}
        | {"applied": own["applied"]}
        for key, terms in record.get("surveys", {}).items()
        for name, (what, unit) in known.items()
        if (own := terms.get(name)) and own.get("values")
    ]
    return record.get("terms", []), estimates


def number(value: object, digits: int = 2) -> str:
    """Write a number for a person: fixed decimals, thin spaces between thousands, a dash for none."""
    if value is None or value != value:
        return "–"
    if isinstance(value, str):
        return value
    if isinstance(value, (int, np.integer)):
        return f"{int(value):,}".replace(",", " ")
    return f"{float(value):.{digits}f}".replace("-", "−")


def as_text(content: dict) -> str:
    """Write the summary as plain text."""
    lines = [content["title"], "=" * len(content["title"]), ""]
    lines += [f"{label}: {value}" for label, value in content["headline"]]
    lines += ["", "Deserves a look", "---------------"]
    lines += [f"- {stage}: {sentence}" for stage, sentence in content["notes"]] or ["nothing was noted"]
    lines += ["", "What each stage did", "-------------------"]
    lines += [f"{stage:<11} {sentence}" for stage, sentence in content["done"]]
    lines += ["", "Readings by flag", "----------------"]
    lines += [
        f"{number(row['readings']):>12}  {row['name']}{' (rejected)' if row['rejecting'] else ''}: {row['meaning']}"
        for row in content["flags"]
    ] or ["no reading carries a flag"]
    lines += ["", "Lines (nT)", "----------"]
    heads = ("line", "kind", "readings", "kept", "noise", "level", "sigma", "crossings", "before", "after", "left out")
    rows = [
        (
            *(row["line"].replace("\n", " ")[:24], row["kind"], number(row["readings"]), number(row["kept"])),
            *(
                number(row["noise"], 3),
                number(row["level_nt"]),
                number(row["sigma_level_nt"]),
                number(row["crossings"]),
            ),
            *(number(row["rms_before_nt"]), number(row["rms_after_nt"]), number(row["rms_left_out_nt"])),
        )
        for row in content["lines"]
    ]
    widths = [max(len(str(row[k])) for row in [heads, *rows]) for k in range(len(heads))]
    for row in [heads, *rows]:
        lines.append(
            "  ".join(
                f"{cell:<{w}}" if k < 2 else f"{cell:>{w}}" for k, (cell, w) in enumerate(zip(row, widths, strict=True))
            )
        )
    lines += ["", "Cautions", "--------", *CAUTIONS, ""]
    return "\n".join(line.rstrip() for line in lines)


def as_page(content: dict) -> str:
    """Write the report as one self-contained HTML page."""
    template = (Path(__file__).parent / "report_page.html").read_text(encoding="utf-8")
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters["number"] = number
    script, division = (markupsafe.Markup(part) for part in content["view"])
    script = markupsafe.Markup(page.resources()) + script if script else ""
    parts = {**content, "script": script, "division": division, "cautions": CAUTIONS}
    return environment.from_string(template).render(parts)


def embed(figure) -> str:
    """Return a figure as a PNG in a data address, the same bytes for the same figure."""
    memory = io.BytesIO()
    figure.savefig(memory, format="png", dpi=130, metadata={"Software": None})
    return "data:image/png;base64," + base64.b64encode(memory.getvalue()).decode("ascii")


def draw(samples: pd.DataFrame, crossings: pd.DataFrame, base: pd.DataFrame, records: dict, settings) -> list[tuple]:
    """Draw the figures: a list of file name, title, caption and matplotlib figure."""
    drawn = []
    good = samples["sensor_latitude_deg"].notna() & samples["sensor_longitude_deg"].notna()
    if good.any():
        plane = figures.Plane(samples["sensor_latitude_deg"].to_numpy(), samples["sensor_longitude_deg"].to_numpy())
        caption = "Where the sensor went; dots are crossings, crosses those not used."
        drawn.append(("tracks", "Tracks and crossings", caption, figures.track_map(samples, crossings, plane)))
        if samples["anomaly_nt"].notna().any():
            figure = figures.stacked_profiles(samples, plane, settings.exaggeration_nt_per_km)
            drawn.append(("anomaly", "Anomaly along the tracks", "Ties are left out of this figure.", figure))
    if len(crossings):
        left = crossings["residual_nt"].to_numpy(float)
        before = crossings["mismatch_nt"].to_numpy(float)[np.isfinite(left)]
        figure = figures.crossing_histogram(before, left, crossings["left_out_nt"].to_numpy(float))
        caption = "Before and after levelling, and each compared with what the others say of it."
        drawn.append(("crossings", "Mismatch at crossings", caption, figure))
    if len(base):
        caption = "Variation after the main field and the datum."
        drawn.append(("base_stations", "Base stations", caption, figures.base_record(base)))
    for (key, name), record in records.items():
        fit = record.get("fit") if name == "heading" else None
        if fit and fit.get("angle_deg"):
            parts = (np.array(fit[k], float) for k in ("angle_deg", "residual_nt", "curve_deg", "curve_nt"))
            caption = "Calibration readings and the fit that was applied."
            title = f"Heading effect, {key}" if len({k for k, _ in records}) > 2 else "Heading effect"
            drawn.append((f"heading_{key}", title, caption, figures.heading_fit(*parts)))
    return drawn


def save_figures(folder: Path, drawn: list[tuple]) -> None:
    """Write each figure as PNG and PDF for a cruise report; the same figure gives the same bytes."""
    for name, _, _, figure in drawn:
        figure.savefig(folder / f"{name}.png", dpi=200, metadata={"Software": None})
        figure.savefig(folder / f"{name}.pdf", metadata={"CreationDate": None, "Producer": None, "Creator": None})


def at_crossings(crossings: pd.DataFrame, corrected: dict[str, pd.DataFrame]) -> pd.DataFrame:
    """Add the anomaly of either pass after all corrections: value_1_nt and value_2_nt."""
    crossings = crossings.copy()
    for side in ("1", "2"):
        value = np.full(len(crossings), np.nan)
        for key, table in corrected.items():
            own = (crossings[f"survey_{side}"] == key).to_numpy()
            good = table["anomaly_nt"].notna()
            if own.any() and good.any():
                time = table.loc[good, "time_utc"].to_numpy().astype(np.int64)
                at = crossings.loc[own, f"time_{side}_utc"].to_numpy().astype("datetime64[ns]").astype(np.int64)
                value[own] = np.interp(at, time, table.loc[good, "anomaly_nt"].to_numpy())
        crossings[f"value_{side}_nt"] = value
    return crossings


def run_state(content: dict, records: dict, crossing_rms: dict) -> dict:
    """Gather what the history keeps of a run."""
    return {
        "figures": {**crossing_rms, **{label: text for label, text in content["headline"] if "rms" not in label}},
        "lines": {
            provenance.to_json([row["survey"], row["line"]]): {"level_nt": _plain(row["level_nt"]), "kept": row["kept"]}
            for row in content["lines"]
        },
        "settings": {f"{key}.{name}".strip("."): record["settings"] for (key, name), record in records.items()},
        "edits": [edits.as_text(edit) for edit in content["edits"]],
        "files": {file["file"]: file["sha256"] for file in content["files"]},
        "code": {f"{key} {name}".strip(): record["code"] for (key, name), record in records.items()},
    }


def _plain(value: object) -> float | None:
    return None if value is None or value != value else float(value)


def main(job: stage.Job) -> None:
    """Read everything; write the summary as text, the report as a page, and its figures."""
    keys = job.survey["members"]
    records = read_records(job.inputs["records"])
    wanted = ["line_index", "time_utc", "sigma_noise_nt", "flags", *page.SHOWN.values()]
    corrected = {
        k: pd.read_parquet(path, columns=wanted) for k, path in zip(keys, job.inputs["corrected"], strict=True)
    }
    tables = {key: pd.read_parquet(path) for key, path in zip(keys, job.inputs["line_table"], strict=True)}
    samples = [pd.read_parquet(path).assign(survey=key) for key, path in zip(keys, job.inputs["profiles"], strict=True)]
    samples = pd.concat(samples, ignore_index=True)
    base = pd.concat([pd.read_parquet(path) for path in job.inputs["base"]], ignore_index=True)
    crossings = at_crossings(job.table("crossovers"), corrected)
    flags = np.concatenate([table["flags"].to_numpy() for table in corrected.values()])
    kept = sum(int(table["anomaly_nt"].notna().sum()) for table in corrected.values())
    used = np.isfinite(crossings["residual_nt"].to_numpy(float))
    found = {
        "rms of all crossings before levelling, nT": rms(crossings["mismatch_nt"]),
        "rms of the crossings used, before levelling, nT": rms(crossings["mismatch_nt"][used]),
        "rms of the crossings used, after levelling, nT": rms(crossings["residual_nt"]),
        "rms of the crossings used, left out, nT": rms(crossings["left_out_nt"]),
    }
    whole, before, after, left_out = found.values()
    told = "no crossing was used"
    if used.any():
        told = f"{number(before)} nT before levelling, {number(after)} nT after, {number(left_out)} nT left out"
    several = len(keys) > 1
    ordered = sorted(
        records.items(), key=lambda item: (keys.index(item[0][0]) if item[0][0] else -1, STAGES.index(item[0][1]))
    )
    ordered = sorted(ordered, key=lambda item: STAGES.index(item[0][1]))

    def who(key: str, name: str) -> str:
        return f"{name}, {key}" if several and key else name

    drawn = draw(samples, crossings, base, records, job.settings)
    content = {
        "title": job.survey["name"],
        "version": __version__,
        "headline": [
            ("Readings", number(len(flags))),
            ("Readings with an anomaly", number(kept)),
            ("Lines", number(sum(len(table) for table in tables.values()))),
            ("Crossings used", f"{number(int(used.sum()))} of {number(len(crossings))}"),
            ("Mismatch of all crossings, rms", f"{number(whole)} nT before levelling"),
            ("Mismatch of those used, rms", told),
        ],
        "notes": [(who(*place), sentence) for place, record in ordered for sentence in record["notes"]],
        "done": [(who(*place), record.get("done", "")) for place, record in ordered],
        "flags": flag_counts(flags),
        "lines": line_rows(job.table("levels"), tables, corrected),
        "several": several,
        "edits": [{"survey": key, **edit} for (key, _), record in ordered for edit in record["edits"]],
        "files": provenance.raw_files(records.values()),
        "settings": [
            (who(*place), json.dumps(record["settings"], indent=1, sort_keys=True, ensure_ascii=False))
            for place, record in ordered
        ],
    }
    content["terms"], content["estimates"] = joint_rows(records["", "levelling"])
    state = run_state(content, records, found)
    last = history.keep(job.output("report.html").parent / "history", state, samples)
    changes = history.compare(last, state, samples) if last else None
    columns, tracks = page.gather({key: (corrected[key], tables[key]) for key in keys})
    view = page.linked_view(columns, tracks, crossings, _edits_text(job)) if tracks else ("", "")
    images = [{"title": title, "caption": caption, "image": embed(figure)} for _, title, caption, figure in drawn]
    job.write_text("summary.txt", as_text(content))
    job.write_text("report.html", as_page({**content, "figures": images, "changes": changes, "view": view}))
    save_figures(job.target("figures"), drawn)
    job.record |= found
    if changes and changes["figures"]:
        what = [f"{name} {number(a)} -> {number(b)}" for name, a, b in changes["figures"] if "rms" in name]
        if what:
            print(f"against the run before: {'; '.join(what)}")
    job.done(f"mismatch of the crossings used, rms: {told}")
    first = [f"{name}: {sentence}" for name, sentence in sorted(content["notes"], key=_weight)][:3]
    job.record["look_first"] = first


def _weight(note: tuple[str, str]) -> int:
    """Put notes of late stages first: what they say concerns whole lines."""
    stage_name = note[0].split(",")[0]
    return -STAGES.index(stage_name) if stage_name in STAGES else 0


def _edits_text(job: stage.Job) -> str:
    """Return the edits file as it is, or its heading row; only for a single survey, which has one such file."""
    if job.inputs.get("edits"):
        return job.path("edits").read_text(encoding="utf-8-sig")
    return ",".join(["action", "target", "start_utc", "end_utc", "value", "reason", "by", "date"]) + "\n"


if __name__ == "__main__":
    stage.run(main)
