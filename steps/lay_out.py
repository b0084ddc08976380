"""Lay out a new survey: look at the raw files in a folder and write a settings file to confirm.

``python -m steps.lay_out FOLDER`` guesses what each file is and which column holds what, and writes ``survey.yaml``
with every guess marked CONFIRM. What nobody can guess (antenna offsets, cable, clocks) is left to fill in. An existing
settings file is never touched.
"""

import gzip
import re
import sys
from pathlib import Path

import numpy as np

LAYOUTS = (
    *("iso", "epoch_s", "%d/%m/%Y %H:%M:%S.%f", "%d/%m/%Y %H:%M:%S", "%d.%m.%Y %H:%M:%S.%f", "%d.%m.%Y %H:%M:%S"),
    *("%m/%d/%Y %H:%M:%S.%f", "%m/%d/%Y %H:%M:%S", "%Y %j %H:%M:%S.%f", "%Y %j %H:%M:%S", "%Y%m%d %H%M%S.%f"),
    *("%Y%m%d %H%M%S", "%Y%m%d %H:%M:%S", "%y%m%d %H:%M:%S", "%m/%d/%y %H:%M:%S.%f", "%m/%d/%y %H:%M:%S"),
)
LOOKED_AT = 65536
SKIPPED = {"survey.yaml", "edits.csv", "lines.csv", "cable.csv"}


def first_rows(path: Path) -> list[str]:
    """Return the first rows of a text file, unpacked; none for a binary one."""
    opener = gzip.open if path.suffix == ".gz" else open
    try:
        with opener(path, "rb") as handle:
            data = handle.read(LOOKED_AT)
    except OSError:
        return []
    if b"\0" in data:
        return []
    rows = data.decode("utf-8-sig", errors="replace").splitlines()
    return rows[:-1] if len(data) == LOOKED_AT else rows


def what_is(path: Path) -> dict:
    """Guess what a raw file is.

    Parameters
    ----------
    path : pathlib.Path

    Returns
    -------
    dict
        ``kind``: nmea, iaga2002, mgd77t, magnetometer, navigation or unknown; for delimited text how to read it.

    """
    rows = first_rows(path)
    if any(re.match(r".*\$[A-Z]{2}(GGA|RMC|GLL|HDT|ZDA|VTG),", row) for row in rows[:200]):
        return {"kind": "nmea"}
    if rows and re.match(r"\s*Format\s+IAGA-?2002", rows[0], re.IGNORECASE):
        return {"kind": "iaga2002"}
    if rows and (rows[0].startswith("SURVEY_ID\tTIMEZONE") or path.suffix == ".m77t"):
        return {"kind": "mgd77t"}
    return _delimited(rows)


def _delimited(rows: list[str]) -> dict:
    """Guess delimiter, heading and columns of delimited text."""
    for delimiter, split in (
        (";", lambda r: r.split(";")),
        ("tab", lambda r: r.split("\t")),
        (",", lambda r: r.split(",")),
        ("space", str.split),
    ):
        cells = [[cell.strip() for cell in split(row)] for row in rows if row.strip() and not row.startswith("#")]
        width = max((len(row) for row in cells[-50:]), default=0)
        data = [
            k
            for k, row in enumerate(cells)
            if len(row) == width and _numeric(row) >= 1 and _numeric(row) >= width / 2 - 1
        ]
        if width < 2 or len(data) < 3 or data[0] == 0 or len(cells[data[0] - 1]) != width:
            continue
        names = cells[data[0] - 1]
        values = list(zip(*(cells[k] for k in data[:200]), strict=True))
        found = {"delimiter": delimiter, "names": names, "skip_rows": _skipped(rows, names, split)}
        return found | _columns(names, values)
    return {"kind": "unknown"}


def _skipped(rows, names, split) -> int:
    """Return how many rows stand before the heading row."""
    return next(k for k, row in enumerate(rows) if [cell.strip() for cell in split(row)] == names)


def _numeric(row: list[str]) -> int:
    """Count the cells that are numbers."""
    return sum(bool(re.fullmatch(r"[-+]?\d+([.,]\d*)?", cell)) for cell in row)


def _columns(names: list[str], values: list[tuple]) -> dict:
    """Guess which column holds what, by name and by value."""
    numbers = {}
    for name, column in zip(names, values, strict=True):
        try:
            numbers[name] = np.array([float(cell.replace(",", ".")) if cell else np.nan for cell in column])
        except ValueError:
            continue
    found: dict = {"kind": "unknown", "columns": {}}

    def named(pattern, least, most):
        for name, column in numbers.items():
            good = column[np.isfinite(column)]
            if re.search(pattern, name, re.IGNORECASE) and len(good) and least <= good.min() and good.max() <= most:
                return name
        return None

    field = [
        n for n, v in numbers.items() if np.isfinite(v).any() and 20_000 < np.nanmedian(v) < 70_000 and np.nanstd(v) > 0
    ]
    lat, lon = named(r"^lat", -90, 90), named(r"^lon", -360, 360)
    if lat and lon:
        found |= {"kind": "navigation", "columns": {"latitude_deg": lat, "longitude_deg": lon}}
        heading = named(r"head|gyro|hdg", 0, 360)
        found["columns"] |= {"heading_deg": heading} if heading else {}
    elif field:
        likely = [name for name in field if re.search(r"mag|field|nt|tf|^f$", name, re.IGNORECASE)] or field
        found |= {"kind": "magnetometer", "columns": {"total_field_nt": likely[0]}}
        for quantity, pattern, most in (("signal", r"sig", 1e9), ("logged_depth_m", r"dep", 6000)):
            name = named(pattern, -100 if quantity != "signal" else 0, most)
            found["columns"] |= {quantity: name} if name else {}
    if found["kind"] != "unknown":
        found["time"] = _time(names, values)
    return found


def _time(names: list[str], values: list[tuple]) -> dict | None:
    """Guess the time columns and their layout by trying."""
    import pandas as pd

    from steps.formats.tables import parse_time

    columns = dict(zip(names, values, strict=True))
    singles = [[name] for name in names if re.search(r"time|date|utc|epoch", name, re.IGNORECASE)]
    dates = [name for name in names if re.search(r"date|day|year|^y", name, re.IGNORECASE)]
    clocks = [name for name in names if re.search(r"time|clock|utc|hour", name, re.IGNORECASE)]
    pairs = [[d, c] for d in dates for c in clocks if d != c]
    for chosen in [*singles, *pairs]:
        texts = [" ".join(cells) for cells in zip(*(columns[name] for name in chosen), strict=True)]
        for layout in LAYOUTS:
            try:
                if layout == "iso":
                    for text in texts:
                        parse_time(text)
                elif layout == "epoch_s":
                    if not all(1e8 < float(text) < 9e9 for text in texts):
                        continue
                else:
                    pd.to_datetime(texts, format=layout)
            except ValueError:
                continue
            return {"columns": chosen, "layout": layout}
    return None


def settings_text(folder: Path, guesses: dict[str, dict]) -> str:
    """Write the settings file for the files found.

    Parameters
    ----------
    folder : pathlib.Path
        Of the survey.
    guesses : dict of str to dict
        What each file is, by its path in the folder.

    Returns
    -------
    str

    """
    by_kind: dict[str, list[str]] = {}
    for file, guess in guesses.items():
        by_kind.setdefault(guess["kind"], []).append(file)
    rows = [
        "# Laid out from the files in this folder. Every line marked CONFIRM is a guess; every FILL IN is yours to say.",
        "# demo_survey/survey.yaml of Stripeline explains each setting.",
        "survey:",
        f"  name: {_quoted(folder.resolve().name)}  # CONFIRM",
        "ingest:",
        "  readings:",
    ]
    logger = by_kind.get("magnetometer", [])
    if logger:
        rows += _source(logger, guesses[logger[0]], "    ")
        rows += ["    clock: {time_scale: utc, offset_s: FILL IN}  # seconds to add to the logger's stamps"]
    elif "mgd77t" in by_kind:
        rows += ["    format: mgd77t", f"    files: [{', '.join(map(_quoted, by_kind['mgd77t']))}]"]
    else:
        rows += ["    format: delimited", "    files: [FILL IN]  # no logger file was recognised"]
    rows.append("  navigation:")
    if "nmea" in by_kind:
        rows += ["    - format: nmea", f"      files: [{', '.join(map(_quoted, by_kind['nmea']))}]  # CONFIRM"]
    if "navigation" in by_kind:
        rows += _source(by_kind["navigation"], guesses[by_kind["navigation"][0]], "      ", first="    - ")
        rows += ["      clock: {time_scale: utc, offset_s: FILL IN}"]
    if "mgd77t" in by_kind and not logger:
        rows += ["    - format: mgd77t", f"      files: [{', '.join(map(_quoted, by_kind['mgd77t']))}]"]
    if rows[-1] == "  navigation:":
        rows += ["    - format: nmea", "      files: [FILL IN]  # no navigation was recognised"]
    log = (
        "  log: lines.csv"
        if (folder / "lines.csv").is_file()
        else "  # log: lines.csv  # without a line log, lines are found"
    )
    rows += ["lines:" if not log.strip().startswith("#") else "lines: {}", log]
    cable = "log: cable.csv" if (folder / "cable.csv").is_file() else "cable_out_m: FILL IN"
    rows += [
        "position:",
        "  antenna_to_tow_point: {forward_m: FILL IN, starboard_m: FILL IN}  # forward and to starboard positive",
        f"  layback: {{{cable}}}",
        "diurnal:",
        "  base_stations:" + ("" if "iaga2002" in by_kind else " []  # none was recognised: a legal survey"),
    ]
    if "iaga2002" in by_kind:
        rows += ["    - format: iaga2002", "      name: FILL IN"]
        rows += [f"      files: [{', '.join(map(_quoted, by_kind['iaga2002']))}]  # CONFIRM"]
    if (folder / "edits.csv").is_file():
        rows.append("edits: edits.csv")
    rows += [f"# not recognised: {_quoted(file)}" for file in by_kind.get("unknown", [])]
    return "\n".join(rows) + "\n"


def _source(files: list[str], guess: dict, indent: str, first: str | None = None) -> list[str]:
    """Write the settings of a delimited source."""
    rows = [
        "format: delimited",
        f"files: [{', '.join(map(_quoted, files))}]  # CONFIRM",
        f"delimiter: {_quoted(guess['delimiter'])}  # CONFIRM",
        f"skip_rows: {guess['skip_rows']}  # CONFIRM",
        "columns: {" + ", ".join(f"{k}: {_quoted(v)}" for k, v in guess["columns"].items()) + "}  # CONFIRM",
    ]
    time = guess.get("time")
    if time:
        named = ", ".join(map(_quoted, time["columns"]))
        rows.append(f"time: {{columns: [{named}], layout: {_quoted(time['layout'])}}}  # CONFIRM")
    else:
        rows.append("time: {columns: [FILL IN], layout: FILL IN}")
    return [(first if first and k == 0 else indent) + row for k, row in enumerate(rows)]


def _quoted(text: str) -> str:
    """Quote text for YAML."""
    return '"' + re.sub(r"[\x00-\x1f]", " ", text).replace("\\", "\\\\").replace('"', '\\"') + '"'


def main(words: list[str]) -> int:
    """Lay out a survey in a folder; return 1 if it has settings already or is none."""
    if len(words) != 1 or words[0].startswith("-"):
        print("usage: python -m steps.lay_out FOLDER", file=sys.stderr)
        return 2
    folder = Path(words[0])
    if not folder.is_dir():
        print(f"{words[0]}: must be a folder with raw files. There is no such folder.", file=sys.stderr)
        return 1
    if (folder / "survey.yaml").exists():
        print(
            f"{folder / 'survey.yaml'}: is there already and is left alone. Move it away to lay out anew.",
            file=sys.stderr,
        )
        return 1
    files = sorted(
        path.relative_to(folder)
        for path in folder.rglob("*")
        if path.is_file()
        and not any(part.startswith(".") or part == "reduced" for part in path.relative_to(folder).parts)
    )
    guesses = {
        f.as_posix(): what_is(folder / f) for f in files if f.name not in SKIPPED and f.suffix not in (".md", ".h77t")
    }
    for file, guess in guesses.items():
        print(f"{guess['kind']:<13} {file}")
    (folder / "survey.yaml").write_text(settings_text(folder, guesses), encoding="utf-8")
    print(f"{folder / 'survey.yaml'} written: go through every line marked CONFIRM or FILL IN, then check it:")
    print(f"python -m steps.check {folder}")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
