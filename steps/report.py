"""Sum a run up: what was done, what it brought, what deserves a look; as plain text and as one page with figures.

The stage reads what the others wrote and computes nothing new but the figures. Crossing statistics are root mean
squares in nT; those marked *left out* compare each crossing with what the others alone say of it.
"""

import base64
import io
import json
from pathlib import Path

import jinja2
import numpy as np
import pandas as pd

from steps import __version__, figures, stage
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
    """Write the summary as one self-contained HTML page."""
    template = (Path(__file__).parent / "report_summary.html").read_text(encoding="utf-8")
    environment = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    environment.filters["number"] = number
    return environment.from_string(template).render(**content, cautions=CAUTIONS)


def embed(figure) -> str:
    """Return a figure as a PNG in a data address, the same bytes for the same figure."""
    memory = io.BytesIO()
    figure.savefig(memory, format="png", dpi=130, metadata={"Software": None})
    return "data:image/png;base64," + base64.b64encode(memory.getvalue()).decode("ascii")


def draw(samples: pd.DataFrame, crossings: pd.DataFrame, base: pd.DataFrame, records: dict, settings) -> list[dict]:
    """Draw the figures of the summary: a list of title, caption and image."""
    drawn = []
    good = samples["sensor_latitude_deg"].notna() & samples["sensor_longitude_deg"].notna()
    if good.any():
        plane = figures.Plane(samples["sensor_latitude_deg"].to_numpy(), samples["sensor_longitude_deg"].to_numpy())
        drawn.append(
            (
                "Tracks and crossings",
                "Where the sensor went; dots are crossings, crosses those not used.",
                figures.track_map(samples, crossings, plane),
            )
        )
        if samples["anomaly_nt"].notna().any():
            drawn.append(
                (
                    "Anomaly along the tracks",
                    "Ties are left out of this figure.",
                    figures.stacked_profiles(samples, plane, settings.exaggeration_nt_per_km),
                )
            )
    if len(crossings):
        used = np.isfinite(crossings["residual_nt"].to_numpy(float))
        drawn.append(
            (
                "Mismatch at crossings",
                "Before and after levelling, and each compared with what the others say of it.",
                figures.crossing_histogram(
                    crossings["mismatch_nt"].to_numpy(float)[used],
                    crossings["residual_nt"].to_numpy(float),
                    crossings["left_out_nt"].to_numpy(float),
                ),
            )
        )
    if len(base):
        drawn.append(("Base stations", "Variation after the main field and the datum.", figures.base_record(base)))
    for (key, name), record in records.items():
        fit = record.get("fit") if name == "heading" else None
        if fit and fit.get("angle_deg"):
            drawn.append(
                (
                    f"Heading effect{' of ' + key if key else ''}",
                    "Calibration readings and the fit that was applied.",
                    figures.heading_fit(
                        *(np.array(fit[k], float) for k in ("angle_deg", "residual_nt", "curve_deg", "curve_nt"))
                    ),
                )
            )
    return [{"title": title, "caption": caption, "image": embed(figure)} for title, caption, figure in drawn]


def main(job: stage.Job) -> None:
    """Read everything, write the summary as text and as a page."""
    keys = job.survey["members"]
    records = read_records(job.inputs["records"])
    wanted = ["line_index", "anomaly_nt", "sigma_noise_nt", "flags"]
    corrected = {
        key: pd.read_parquet(path, columns=wanted) for key, path in zip(keys, job.inputs["corrected"], strict=True)
    }
    tables = {key: pd.read_parquet(path) for key, path in zip(keys, job.inputs["line_table"], strict=True)}
    samples = pd.concat(
        [pd.read_parquet(path).assign(survey=key) for key, path in zip(keys, job.inputs["profiles"], strict=True)]
    )
    base = pd.concat([pd.read_parquet(path) for path in job.inputs["base"]])
    crossings = job.table("crossovers")
    levels = job.table("levels")
    flags = np.concatenate([table["flags"].to_numpy() for table in corrected.values()])
    kept = sum(int(table["anomaly_nt"].notna().sum()) for table in corrected.values())
    used = np.isfinite(crossings["residual_nt"].to_numpy(float))
    before, after = rms(crossings["mismatch_nt"][used]), rms(crossings["residual_nt"])
    left_out = rms(crossings["left_out_nt"])
    several = len(keys) > 1
    content = {
        "title": job.survey["name"],
        "version": __version__,
        "headline": [
            ("Readings", number(len(flags))),
            ("Readings with an anomaly", number(kept)),
            ("Lines", number(sum(len(table) for table in tables.values()))),
            ("Crossings used", f"{number(int(used.sum()))} of {number(len(crossings))}"),
            (
                "Crossing mismatch, rms",
                f"{number(before)} nT before levelling, {number(after)} nT after, {number(left_out)} nT left out",
            ),
        ],
        "notes": [
            (f"{name}, {key}" if several and key else name, sentence)
            for (key, name), record in records.items()
            for sentence in record["notes"]
        ],
        "done": [
            (f"{name}, {key}" if several and key else name, record.get("done", ""))
            for (key, name), record in sorted(records.items(), key=lambda item: STAGES.index(item[0][1]))
        ],
        "flags": flag_counts(flags),
        "lines": line_rows(levels, tables, corrected),
        "several": several,
        "edits": [{"survey": key, **edit} for (key, _), record in records.items() for edit in record["edits"]],
        "files": [
            {"survey": key, "stage": name, **file}
            for (key, name), record in records.items()
            for file in record.get("files", [])
        ],
        "settings": [
            (
                f"{name}, {key}" if several and key else name,
                json.dumps(record["settings"], indent=1, sort_keys=True, ensure_ascii=False),
            )
            for (key, name), record in records.items()
        ],
        "figures": draw(samples, crossings, base, records, job.settings),
    }
    job.write_text("summary.txt", as_text(content))
    job.write_text("summary.html", as_page(content))
    job.record |= {"rms_before_nt": before, "rms_after_nt": after, "rms_left_out_nt": left_out}
    job.done(f"crossing rms {number(before)} nT before levelling, {number(after)} nT after; see reduced/summary.html")


if __name__ == "__main__":
    stage.run(main)
