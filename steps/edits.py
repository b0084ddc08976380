"""A person's edits: what each action means, which stage applies it, and which readings it touches.

An edit is a row of the edits file: ``action, target, start_utc, end_utc, value, reason, by, date``. The target is the
name of a line, ``file:NAME`` for a raw file, or empty; with a span of time the edit touches only readings in it, both
ends included. Edits outrank automatic decisions. An edit that touches nothing is a mistake.
"""

import difflib
from dataclasses import dataclass
from pathlib import PurePosixPath

import numpy as np

from steps.errors import SurveyError, mistake

COLUMNS = {"action": "text", "reason": "text", "by": "text", "date": "text"}
OPTIONAL = {"target": "text", "start_utc": "time", "end_utc": "time", "value": "text"}


@dataclass(frozen=True)
class Action:
    """What an action of the edits file does, and where."""

    stage: str
    meaning: str
    targets: tuple[str, ...]
    value: str = ""


ACTIONS = {
    "reject": Action("screen", "reject readings", ("line", "file", "span")),
    "keep": Action("screen", "keep readings, whatever the automatic tests say", ("line", "file", "span")),
    "shift_clock": Action("ingest", "add seconds to the logged time of readings", ("file", "span"), "seconds"),
    "set_cable_out": Action("position", "cable-out, instead of the cable log's", ("line", "span"), "metres"),
    "rename_line": Action("lines", "give a line another name", ("line",), "the new name"),
    "set_kind": Action("lines", "change the kind of a line", ("line",), "line, tie, calibration or transit"),
    "hold_line": Action("levelling", "hold the correction of a line at zero", ("line",)),
}


def check(rows: list[dict], name: str) -> list[dict]:
    """Check the rows of an edits file, apart from what they touch.

    Parameters
    ----------
    rows : list of dict
        Rows with the keys of `COLUMNS` and `OPTIONAL`, texts or None, times as ISO text, and ``row``.
    name : str
        Name of the file, for the messages.

    Returns
    -------
    list of dict
        The rows, with ``file`` added and numbers in ``value`` where the action wants one.

    Raises
    ------
    SurveyError
        With one sentence for each mistake.

    """
    wrong, good = [], []
    for row in rows:
        where = f"{name} row {row['row']}"
        action = ACTIONS.get(row["action"])
        if action is None:
            near = difflib.get_close_matches(str(row["action"]), ACTIONS, n=1)
            remedy = f"Did you mean {near[0]}?" if near else ""
            wrong.append(mistake(f"{where}, action", f"must be one of {', '.join(ACTIONS)}", row["action"], remedy))
            continue
        target = row.get("target") or ""
        kind = "file" if target.startswith("file:") else "line" if target else "span"
        has_span = bool(row.get("start_utc") and row.get("end_utc"))
        if bool(row.get("start_utc")) != bool(row.get("end_utc")):
            wrong.append(mistake(where, "must have both start_utc and end_utc, or neither"))
        elif has_span and row["end_utc"] < row["start_utc"]:
            wrong.append(mistake(f"{where}, end_utc", "must not be before start_utc", row["end_utc"]))
        if kind == "span" and (not has_span or "span" not in action.targets):
            wanted = " or ".join({"line": "a line", "file": "file:NAME", "span": "a span"}[t] for t in action.targets)
            wrong.append(mistake(f"{where}, target", f"{row['action']} must name {wanted}", "nothing"))
        elif kind not in action.targets:
            wrong.append(
                mistake(f"{where}, target", f"{row['action']} works on a {' or '.join(action.targets)}", target)
            )
        value = row.get("value") or None
        if action.value and value is None:
            wrong.append(mistake(f"{where}, value", f"{row['action']} must have a value ({action.value})", "nothing"))
        elif not action.value and value is not None:
            wrong.append(mistake(f"{where}, value", f"{row['action']} takes no value", value))
        elif action.value in ("seconds", "metres"):
            try:
                value = float(value)
                in_bound = abs(value) <= 1e6 if action.value == "seconds" else 0 <= value <= 5000
            except ValueError:
                in_bound = False
            if not in_bound:
                bound = "a number of seconds" if action.value == "seconds" else "between 0 and 5000 m"
                wrong.append(mistake(f"{where}, value", f"must be {bound}", value))
        elif row["action"] == "set_kind" and value not in ("line", "tie", "calibration", "transit"):
            wrong.append(mistake(f"{where}, value", f"must be {action.value}", value))
        wrong.extend(
            mistake(f"{where}, {key}", "must say something, for the record", "nothing")
            for key in ("reason", "by", "date")
            if not row.get(key)
        )
        good.append({**row, "target": target, "value": value, "file": name})
    if wrong:
        raise SurveyError(*wrong)
    return good


def for_stage(edits: list[dict], stage: str) -> list[dict]:
    """Return the edits that a stage applies, in the order of the file."""
    return [edit for edit in edits if ACTIONS[edit["action"]].stage == stage]


def where(edit: dict) -> str:
    """Name an edit in a message: its file, row and action."""
    return f"{edit['file']} row {edit['row']}, {edit['action']}"


def as_text(edit: dict) -> str:
    """Write an edit in one line, for headers and records."""
    keys = ("action", "target", "start_utc", "end_utc", "value", "reason", "by", "date")
    return "; ".join(f"{key} {edit[key]}" for key in keys if edit.get(key))


def select(
    edit: dict,
    time_utc: np.ndarray,
    *,
    line_index: np.ndarray | None = None,
    line_names: list[str] | None = None,
    source_file: np.ndarray | None = None,
    source_names: list[str] | None = None,
) -> np.ndarray:
    """Find the readings that an edit touches.

    Parameters
    ----------
    edit : dict
        One checked row.
    time_utc : array of datetime64[ns], shape (n,)
        Times of the readings.
    line_index : array of int, shape (n,), optional
        Line of each reading as an index into `line_names`, -1 for none.
    line_names : list of str, optional
        Names of the lines.
    source_file : array of int, shape (n,), optional
        Raw file of each reading as an index into `source_names`.
    source_names : list of str, optional
        Raw files; an edit may name one by its last part alone.

    Returns
    -------
    array of bool, shape (n,)
        True where the edit applies; at least one is.

    Raises
    ------
    SurveyError
        If the edit names an unknown line or file, or touches no reading.

    """
    touched = np.ones(len(time_utc), bool)
    target = edit["target"]
    if target.startswith("file:"):
        wanted = target[len("file:") :].strip()
        names = source_names or []
        found = [i for i, name in enumerate(names) if wanted in (name, PurePosixPath(name).name)]
        if not found:
            _unknown(edit, "file", wanted, [PurePosixPath(name).name for name in names])
        touched &= np.isin(source_file, found)
    elif target:
        touched &= line_index == find_line(edit, line_names or [])
    if edit.get("start_utc"):
        start, end = (np.datetime64(edit[key], "ns") for key in ("start_utc", "end_utc"))
        touched &= (time_utc >= start) & (time_utc <= end)
    if not touched.any():
        raise SurveyError(
            mistake(
                where(edit),
                "must touch at least one reading",
                "none",
                "Correct its target or its times, or remove the row.",
            )
        )
    return touched


def find_line(edit: dict, line_names: list[str]) -> int:
    """Return the index of the line that an edit names; raise SurveyError if there is none."""
    if edit["target"] not in line_names:
        _unknown(edit, "line", edit["target"], line_names)
    return line_names.index(edit["target"])


def _unknown(edit: dict, what: str, wanted: str, names: list[str]) -> None:
    near = difflib.get_close_matches(wanted, names, n=1)
    remedy = (
        f"Did you mean {near[0]}?" if near else f"Known here: {', '.join(names[:12])}{', ...' * (len(names) > 12)}."
    )
    raise SurveyError(mistake(where(edit), f"must name a {what} of this survey", wanted, remedy))
