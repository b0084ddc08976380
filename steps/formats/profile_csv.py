"""Write a profile as CSV whose header block of ``#`` rows explains the file to someone who has nothing else.

Numbers have fixed decimals, times are ISO 8601 in UTC to the millisecond, a missing value is an empty cell; the same
profile gives the same bytes.
"""

import re
import unicodedata

import numpy as np
import pandas as pd

from steps.columns import COLUMNS, FLAG_MEANINGS, Flag

DECIMALS = {"nT": 3, "m": 2, "km": 4, "degree": 3, "m s-1": 3, "nT m-1": 5}
PLACE_DECIMALS = 7  # of a degree: a centimetre
LONGEST_NAME = 60
# Names that an operating system keeps for devices (Windows; common practice).
RESERVED = {"con", "prn", "aux", "nul", *(f"{port}{number}" for port in ("com", "lpt") for number in range(10))}


def file_names(lines: list[str]) -> list[str]:
    """Make a safe and unique file name, without ending, for each line.

    Parameters
    ----------
    lines : list of str
        Names of lines, any text.

    Returns
    -------
    list of str
        Lower-case ASCII letters, digits, ``-`` and ``_``, at most 66 characters; numbered where two would be the same.

    """
    names: list[str] = []
    taken: set[str] = set()
    for line in lines:
        plain = unicodedata.normalize("NFKD", line).encode("ascii", "ignore").decode().lower()
        first = re.sub(r"[^a-z0-9_]+", "-", plain).strip("-")[:LONGEST_NAME].strip("-") or "unnamed"
        first = f"line-{first}" if first in RESERVED else first
        name, number = first, 2
        while name in taken:
            name, number = f"{first}-{number}", number + 1
        taken.add(name)
        names.append(name)
    return names


def one_line(text: object) -> str:
    """Return any text as one line without control characters."""
    return " ".join("".join(c if c.isprintable() else " " for c in str(text)).split())


def explain(names: list[str]) -> list[str]:
    """Return a line for each column: name, unit and meaning, and below `flags` what each bit says."""
    rows = []
    for name in names:
        column = COLUMNS[name]
        unit = {"1": "no unit", "UTC": "UTC, ISO 8601"}.get(column.unit, column.unit)
        rows.append(f"{name} [{unit}]: {column.meaning}")
        if name == "flags":
            rows += [f"  {int(flag)} {flag.name.lower()}: {FLAG_MEANINGS[flag]}" for flag in Flag]
    return rows


def as_csv(profile: pd.DataFrame, about: list[str]) -> bytes:
    """Write one profile.

    Parameters
    ----------
    profile : pandas.DataFrame
        Samples; every column in the vocabulary, all numbers but ``time_utc``.
    about : list of str
        Lines for the head of the file, above the explanation of the columns.

    Returns
    -------
    bytes
        UTF-8: the header block, a row of names, the samples.

    """
    formats, cells = [], []
    for name in profile:
        values, unit = profile[name].to_numpy(), COLUMNS[name].unit
        if COLUMNS[name].dtype.startswith("datetime"):
            formats.append("%s")
            text = np.datetime_as_string(values.astype("datetime64[ns]").astype("datetime64[ms]"))
            cells.append(np.where(np.isnat(values), "", text).tolist())
        elif unit == "1":
            formats.append("%d")
            cells.append(values.tolist())
        else:
            decimals = PLACE_DECIMALS if name.endswith(("latitude_deg", "longitude_deg")) else DECIMALS[unit]
            formats.append(f"%.{decimals}f")
            cells.append((np.round(values.astype(float), decimals) + 0.0).tolist())  # no negative zero
    flat = [cell for row in zip(*cells, strict=True) for cell in row]
    body = ((",".join(formats) + "\n") * len(profile)) % tuple(flat)
    body = body.replace("nan", "")  # no other cell holds a letter but T
    head = [f"# {one_line(row)}" if not row.startswith("  ") else f"#   {one_line(row)}" for row in about]
    head += [f"# {row}" for row in ["Columns", *explain(list(profile))]]
    return ("\n".join([*head, ",".join(profile)]) + "\n" + body).encode("utf-8")
