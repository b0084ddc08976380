"""The report's linked map and line view, and the form that turns a selected stretch into rows of the edits file.

Built with Bokeh, whose script is embedded in the page, so that it opens from a disk without a network. Everything that
is shown travels in the page, thinned by smallest and largest values so that no spike is lost.
"""

import re
from dataclasses import dataclass

import numpy as np
import pandas as pd
from bokeh.core.validation import silence
from bokeh.core.validation.warnings import MISSING_RENDERERS
from bokeh.embed import components
from bokeh.layouts import column, row
from bokeh.models import (
    Band,
    BoxSelectTool,
    Button,
    ColorBar,
    ColumnDataSource,
    CustomJS,
    CustomJSHover,
    Div,
    HoverTool,
    LinearColorMapper,
    Range1d,
    Select,
    TapTool,
    TextAreaInput,
    TextInput,
    WheelZoomTool,
)
from bokeh.palettes import PuOr11
from bokeh.plotting import figure
from bokeh.resources import INLINE

from steps import edits, figures
from steps.columns import REJECTING, Flag

silence(MISSING_RENDERERS, True)

TOTAL_POINTS = 260_000  # of all lines together; keeps the page under 15 MB
SHOWN = {
    "total": "total_field_nt",
    "main": "main_field_nt",
    "diurnal": "diurnal_nt",
    "heading": "heading_nt",
    "level": "level_nt",
    "anomaly": "anomaly_nt",
    "sigma": "sigma_anomaly_nt",
    "lat": "sensor_latitude_deg",
    "lon": "sensor_longitude_deg",
}
WIDTH = 900
ROW_ACTIONS = ("reject", "keep")


@dataclass
class Track:
    """One line as the page shows it: its label, and where its samples stand in the columns of all lines."""

    survey: str
    line: str
    kind: str
    start: int
    stop: int


def gather(surveys: dict[str, tuple[pd.DataFrame, pd.DataFrame]], total: int = TOTAL_POINTS):
    """Thin the readings of all lines for display.

    Parameters
    ----------
    surveys : dict of str to (pandas.DataFrame, pandas.DataFrame)
        Corrected readings and the table of lines of each survey.
    total : int, optional
        Largest number of samples of all lines together.

    Returns
    -------
    columns : dict of str to array
        Samples of all lines one after another: ``time`` (ms since 1970), the columns of `SHOWN` and ``flags``.
        The main field is shown as its departure from the line's mean.
    tracks : list of Track

    """
    lines = sum(len(table) for _, table in surveys.values())
    each = int(np.clip(total // max(1, lines), 200, 6000))
    parts, tracks, at = [], [], 0
    for key, (readings, table) in surveys.items():
        index = readings["line_index"].to_numpy()
        order = np.argsort(index, kind="stable")
        edges = np.searchsorted(index[order], np.arange(len(table) + 1))
        for number, line in enumerate(table.itertuples()):
            own = readings.iloc[order[edges[number] : edges[number + 1]]]
            if len(own) == 0:
                continue
            spiky = figures.thin(own["total_field_nt"].to_numpy(), each // 2)
            smooth = figures.thin(own["anomaly_nt"].to_numpy(), each // 2)
            own = own.iloc[np.union1d(spiky, smooth)]
            part = {name: own[source].to_numpy(float) for name, source in SHOWN.items()}
            part["main"] = part["main"] - _mean(part["main"])
            part["time"] = own["time_utc"].to_numpy().astype("datetime64[us]").astype(np.int64) / 1000.0
            part["flags"] = own["flags"].to_numpy(np.int32)
            parts.append(part)
            tracks.append(Track(key, line.line, line.kind, at, at + len(own)))
            at += len(own)
    names = [*SHOWN, "time", "flags"]
    columns = {name: np.concatenate([part[name] for part in parts]) if parts else np.zeros(0) for name in names}
    return columns, tracks


def _mean(values: np.ndarray) -> float:
    good = values[np.isfinite(values)]
    return float(good.mean()) if len(good) else 0.0


def linked_view(columns: dict, tracks: list[Track], crossings: pd.DataFrame, edit_text: str) -> tuple[str, str]:
    """Build the linked map, line view and form of edits.

    Parameters
    ----------
    columns, tracks
        What `gather` returned.
    crossings : pandas.DataFrame
        survey_1, line_1, time_1_utc, anomaly_1_nt and the same for 2, sensor_latitude_deg, sensor_longitude_deg,
        residual_nt, mismatch_nt, status.
    edit_text : str
        The survey's edits file as it is, to which the form adds rows.

    Returns
    -------
    script, division : str
        HTML of the script and of the place where the view appears.

    """
    plane = figures.Plane(columns["lat"], columns["lon"])
    east, north = plane(columns["lat"], columns["lon"])
    data = {name: values.astype(np.float32) for name, values in columns.items() if name not in ("time", "flags")}
    data |= {"time": columns["time"], "flags": columns["flags"]}
    data["total"] = columns["total"]  # tenths of a nanotesla in tens of thousands need double precision
    everything = ColumnDataSource(data)
    shown = ColumnDataSource({name: [] for name in (*data, "low", "high", "rejected")})
    labels = _labels(tracks)
    first = next((k for k, track in enumerate(tracks) if track.kind == "line"), 0)
    chosen = Select(title="Line", value=labels[first], options=labels, width=260, name="line")
    map_view, track_source, dots = _map(east, north, tracks, labels, crossings, plane)
    panels = _panels(shown)
    at_line = ColumnDataSource({"time": [], "value": [], "other": []})
    other = panels[2].scatter(
        "time",
        "value",
        source=at_line,
        marker="diamond",
        size=9,
        color=figures.RED,
        line_color="white",
        legend_label="other line at a crossing",
    )
    panels[2].add_tools(
        HoverTool(renderers=[other], tooltips=[("other line", "@other"), ("anomaly", "@value{0.00} nT")])
    )
    choose = CustomJS(
        args={
            "all": everything,
            "shown": shown,
            "select": chosen,
            "tracks": track_source,
            "at": at_line,
            "dots": dots,
            "ranges": [panel.y_range for panel in panels],
            "x": panels[0].x_range,
            "labels": labels,
            "starts": [t.start for t in tracks],
            "stops": [t.stop for t in tracks],
            "mask": int(REJECTING),
            "kept": int(Flag.EDITED_IN),
        },
        code=_CHOOSE,
    )
    chosen.js_on_change("value", choose)
    _link(map_view, track_source, dots, chosen, labels)
    form = _form(shown, chosen, tracks, labels, edit_text)
    before = Button(label="◀ previous line", width=130)
    after = Button(label="next line ▶", width=130)
    for button, step in ((before, -1), (after, 1)):
        button.js_on_event("button_click", CustomJS(args={"select": chosen, "step": step}, code=_STEP))
    view = column(
        map_view, row(chosen, column(Div(text="&nbsp;", height=8), row(before, after))), *panels, form, name="linked"
    )
    script, division = _settled(*components(view))
    start = "<script>window.addEventListener('load', () => {let n = 0; const wait = setInterval(() => {"
    return script + start + _START + "}, 100)})</script>", division


def _settled(*parts: str) -> list[str]:
    """Replace the random names that Bokeh gives to documents and places by numbers: equal views are equal bytes."""
    found = dict.fromkeys(name for part in parts for name in _RANDOM.findall(part))
    names = {name: f"view-{number}" for number, name in enumerate(found, start=1)}
    return [_RANDOM.sub(lambda match: names[match.group()], part) for part in parts]


_RANDOM = re.compile(r"[0-9a-f]{8}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{4}-[0-9a-f]{12}")


def resources() -> str:
    """Return Bokeh's own script for embedding."""
    return INLINE.render_js()


def _labels(tracks: list[Track]) -> list[str]:
    """Name each line once: with its survey where there are several."""
    several = len({track.survey for track in tracks}) > 1
    return [f"{track.survey}: {track.line}" if several else track.line for track in tracks] or ["no line"]


def _map(east, north, tracks, labels, crossings, plane):
    """Draw the tracks and the crossings; both can be picked."""
    view = figure(
        width=WIDTH,
        height=560,
        match_aspect=True,
        tools="pan,box_zoom,wheel_zoom,reset,save",
        x_axis_label="km east",
        y_axis_label="km north",
        title=f"Pick a line or a crossing. North is up, scale is true; 0, 0 is {figures._place(plane)}",
    )
    xs, ys, colours = [], [], []
    for track in tracks:
        part = slice(track.start, track.stop)
        keep = np.unique(np.linspace(0, track.stop - track.start - 1, min(400, track.stop - track.start)).astype(int))
        xs.append(np.round(east[part][keep], 4))
        ys.append(np.round(north[part][keep], 4))
        colours.append(figures.KIND_COLOURS.get(track.kind, figures.GREY))
    source = ColumnDataSource(
        {"xs": xs, "ys": ys, "colour": colours, "label": labels[: len(tracks)], "kind": [t.kind for t in tracks]}
    )
    lines = view.multi_line(
        "xs",
        "ys",
        source=source,
        line_color="colour",
        line_width=1.5,
        nonselection_line_alpha=0.45,
        selection_line_width=4,
        hover_line_width=4,
    )
    x, y = plane(crossings["sensor_latitude_deg"].to_numpy(float), crossings["sensor_longitude_deg"].to_numpy(float))
    several = len({track.survey for track in tracks}) > 1
    names = [
        [
            f"{s}: {line}" if several else line
            for s, line in zip(crossings[f"survey_{k}"], crossings[f"line_{k}"], strict=True)
        ]
        for k in (1, 2)
    ]
    left = crossings["residual_nt"].to_numpy(float)
    used = np.isfinite(left)
    limit = float(np.quantile(np.abs(left[used]), 0.95)) if used.any() else 1.0
    dots = ColumnDataSource(
        {
            "x": x,
            "y": y,
            "line_1": names[0],
            "line_2": names[1],
            "left": left,
            "before": crossings["mismatch_nt"].to_numpy(float),
            "status": crossings["status"].astype(str).tolist(),
            "time_1": _ms(crossings["time_1_utc"]),
            "time_2": _ms(crossings["time_2_utc"]),
            "value_1": crossings["value_1_nt"].to_numpy(float),
            "value_2": crossings["value_2_nt"].to_numpy(float),
            "size": np.where(used, 9.0, 6.0),
        }
    )
    mapper = LinearColorMapper(palette=PuOr11, low=-max(limit, 1e-3), high=max(limit, 1e-3), nan_color="#999999")
    points = view.scatter(
        "x",
        "y",
        source=dots,
        size="size",
        fill_color={"field": "left", "transform": mapper},
        line_color="#333333",
        line_width=0.6,
    )
    view.add_layout(ColorBar(color_mapper=mapper, title="mismatch left, nT", width=10), "right")
    view.add_tools(
        HoverTool(renderers=[lines], tooltips=[("line", "@label"), ("kind", "@kind")], line_policy="interp"),
        HoverTool(
            renderers=[points],
            tooltips=[
                ("lines", "@line_1 × @line_2"),
                ("before levelling", "@before{0.00} nT"),
                ("left after levelling", "@left{0.00} nT"),
                ("status", "@status"),
            ],
        ),
        TapTool(renderers=[lines, points]),
    )
    view.toolbar.active_scroll = view.select_one(WheelZoomTool)
    return view, source, dots


def _ms(times: pd.Series) -> np.ndarray:
    return times.to_numpy().astype("datetime64[us]").astype(np.int64) / 1000.0


def _panels(shown: ColumnDataSource):
    """Draw total field, corrections and anomaly of the chosen line over time."""
    names = ", ".join(f"{flag.value}: '{flag.name.lower().replace('_', ' ')}'" for flag in Flag)
    words = CustomJSHover(
        code=f"const n = {{{names}}}; return Object.keys(n).filter(k => value & k).map(k => n[k]).join(', ') || 'none'"
    )
    x_range = Range1d(0, 1)
    common = {
        "width": WIDTH,
        "x_axis_type": "datetime",
        "tools": "xpan,xbox_zoom,xwheel_zoom,reset",
        "output_backend": "canvas",
    }
    specs = [
        ("Total field and rejected readings", 230, ("total",)),
        (
            "What was subtracted (main field: departure from its mean on the line)",
            230,
            ("main", "diurnal", "heading", "level"),
        ),
        ("Anomaly, with two sigma; drag here to select a stretch", 300, ("anomaly",)),
    ]
    panels = []
    for title, height, fields in specs:
        panel = figure(height=height, x_range=x_range, y_range=Range1d(0, 1), title=title, y_axis_label="nT", **common)
        drawn = []
        for field, colour in zip(fields, (figures.BLUE, figures.ORANGE, figures.GREEN, figures.RED), strict=False):
            label = {"main": "main field", "level": "level", "total": "total field"}.get(field, field)
            drawn.append(panel.line("time", field, source=shown, line_color=colour, line_width=1.3, legend_label=label))
        if "total" in fields:
            panel.scatter(
                "time", "rejected", source=shown, marker="x", size=7, line_color=figures.RED, legend_label="rejected"
            )
        if "anomaly" in fields:
            panel.add_layout(
                Band(
                    base="time",
                    lower="low",
                    upper="high",
                    source=shown,
                    fill_color=figures.BLUE,
                    fill_alpha=0.2,
                    line_alpha=0,
                )
            )
            panel.scatter(
                "time",
                "anomaly",
                source=shown,
                size=2,
                color=figures.BLUE,
                selection_color=figures.RED,
                nonselection_alpha=0.6,
            )
            box = BoxSelectTool(dimensions="width")
            panel.add_tools(box)
            panel.toolbar.active_drag = box
        tips = [
            ("time", "@time{%F %T} UTC"),
            ("total field", "@total{0.00} nT"),
            ("anomaly", "@anomaly{0.00} ± @sigma{0.00} nT"),
            ("diurnal", "@diurnal{0.00} nT"),
            ("heading", "@heading{0.00} nT"),
            ("level", "@level{0.00} nT"),
            ("position", "@lat{0.0000}°, @lon{0.0000}°"),
            ("flags", "@flags{custom}"),
        ]
        panel.add_tools(
            HoverTool(
                renderers=drawn[:1], tooltips=tips, formatters={"@time": "datetime", "@flags": words}, mode="vline"
            )
        )
        panel.add_layout(panel.legend[0], "above")
        panel.legend.orientation = "horizontal"
        panel.legend.padding = panel.legend.margin = 2
        panel.legend.border_line_alpha = 0
        panel.legend.click_policy = "hide"
        panels.append(panel)
    return panels


def _link(view, tracks, dots, chosen, labels) -> None:
    """Let a pick in the map choose the line."""
    tracks.selected.js_on_change(
        "indices",
        CustomJS(
            args={"select": chosen, "labels": labels},
            code=(
                "if (cb_obj.indices.length && labels[cb_obj.indices[0]] !== select.value) select.value = labels[cb_obj.indices[0]]"
            ),
        ),
    )
    dots.selected.js_on_change(
        "indices",
        CustomJS(
            args={"select": chosen, "dots": dots},
            code=(
                "if (!cb_obj.indices.length) return; const i = cb_obj.indices[0];"
                "const a = dots.data.line_1[i], b = dots.data.line_2[i]; select.value = select.value === a ? b : a"
            ),
        ),
    )


def _form(shown, chosen, tracks, labels, edit_text):
    """Turn a selected stretch into rows of the edits file."""
    told = Div(text="Drag across the anomaly to select a stretch of the line.", width=WIDTH, name="told")
    action = Select(
        title="Action",
        value=ROW_ACTIONS[0],
        options=[(a, f"{a}: {edits.ACTIONS[a].meaning}") for a in ROW_ACTIONS],
        width=300,
    )
    reason = TextInput(title="Reason", width=300, name="reason")
    by = TextInput(title="By", width=120, name="by")
    rows = TextAreaInput(
        title="Edits file: copy it, or save it as the file that `edits` in survey.yaml names",
        value=edit_text,
        rows=9,
        width=WIDTH,
        max_length=None,
        name="rows",
    )
    add = Button(label="Add the row", button_type="primary", width=140)
    save = Button(label="Save as edits.csv", width=160)
    args = {
        "shown": shown,
        "select": chosen,
        "labels": labels,
        "lines": [t.line for t in tracks],
        "told": told,
        "action": action,
        "reason": reason,
        "by": by,
        "rows": rows,
    }
    shown.selected.js_on_change("indices", CustomJS(args=args, code=_SELECTED))
    add.js_on_event("button_click", CustomJS(args=args, code=_ADD))
    save.js_on_event("button_click", CustomJS(args={"rows": rows}, code=_SAVE))
    return column(told, row(action, reason, by), row(add, save), rows)


# The scripts below run in the reader's browser; long lines are theirs.
# ruff: noqa: E501
_CHOOSE = """
const k = Math.max(0, labels.indexOf(select.value)), a = starts[k], b = stops[k], data = {}
for (const name of Object.keys(all.data)) data[name] = all.data[name].slice(a, b)
const n = b - a
data.low = new Float64Array(n); data.high = new Float64Array(n); data.rejected = new Float64Array(n)
for (let i = 0; i < n; i++) {
  const s = isFinite(data.sigma[i]) ? data.sigma[i] : 0
  data.low[i] = data.anomaly[i] - 2 * s; data.high[i] = data.anomaly[i] + 2 * s
  data.rejected[i] = (data.flags[i] & mask) && !(data.flags[i] & kept) ? data.total[i] : NaN
}
shown.selected.indices = []
shown.data = data
tracks.selected.indices = [k]
const times = [], values = [], others = []
for (let i = 0; i < dots.data.x.length; i++) for (const [me, it] of [[1, 2], [2, 1]])
  if (dots.data['line_' + me][i] === select.value && isFinite(dots.data['value_' + it][i])) {
    times.push(dots.data['time_' + me][i]); values.push(dots.data['value_' + it][i]); others.push(dots.data['line_' + it][i])
  }
at.data = {time: times, value: values, other: others}
if (n) { x.start = data.time[0]; x.end = data.time[n - 1]; x.reset_start = x.start; x.reset_end = x.end }
const fit = (range, fields, all_values) => {
  let low = Infinity, high = -Infinity
  for (const f of fields) { const good = Array.from(data[f]).filter(isFinite).sort((p, q) => p - q)
    if (good.length) { const cut = all_values ? 0 : Math.floor(good.length / 500)
      low = Math.min(low, good[cut]); high = Math.max(high, good[good.length - 1 - cut]) } }
  if (low > high) { low = -1; high = 1 }
  const pad = 0.07 * (high - low) || 1
  range.start = low - pad; range.end = high + pad; range.reset_start = range.start; range.reset_end = range.end
}
fit(ranges[0], ['total'], false); fit(ranges[1], ['main', 'diurnal', 'heading', 'level'], true); fit(ranges[2], ['anomaly'], true)
"""
_STEP = """
const o = select.options, i = o.indexOf(select.value)
select.value = o[(i + step + o.length) % o.length]
"""
_STAMP = "const stamp = t => new Date(t).toISOString().replace('Z', '')\n"
_SELECTED = (
    _STAMP
    + """
const i = cb_obj.indices
if (!i.length) { told.text = 'Drag across the anomaly to select a stretch of the line.'; return }
let low = Infinity, high = -Infinity
for (const k of i) { low = Math.min(low, shown.data.time[k]); high = Math.max(high, shown.data.time[k]) }
told.text = `Selected: ${stamp(low)} to ${stamp(high)} UTC. Choose an action, give a reason, add the row.`
"""
)
_ADD = (
    _STAMP
    + """
const i = shown.selected.indices
if (!i.length) { told.text = 'Select a stretch first: drag across the anomaly.'; return }
if (!reason.value.trim() || !by.value.trim()) { told.text = 'Give a reason and say who you are: the record needs both.'; return }
let low = Infinity, high = -Infinity
for (const k of i) { low = Math.min(low, shown.data.time[k]); high = Math.max(high, shown.data.time[k]) }
const quote = s => { s = s.replace(/[\\r\\n]+/g, ' ').trim(); if (/^[=+@-]/.test(s)) s = "'" + s; return /[",#]/.test(s) ? '"' + s.replace(/"/g, '""') + '"' : s }
const line = lines[labels.indexOf(select.value)]
const cells = [action.value, line, stamp(low), stamp(high), '', reason.value, by.value, new Date().toISOString().slice(0, 10)]
const names = rows.value.split('\\n').find(r => r.trim() && !r.trim().startsWith('#')).split(',').map(s => s.trim())
const given = {action: cells[0], target: cells[1], start_utc: cells[2], end_utc: cells[3], value: '', reason: cells[5], by: cells[6], date: cells[7]}
rows.value = rows.value.replace(/\\s*$/, '\\n') + names.map(n => quote(given[n] ?? '')).join(',') + '\\n'
told.text = 'Row added below. Save the file into the survey folder and run again.'
"""
)
_SAVE = """
const link = document.createElement('a')
link.href = URL.createObjectURL(new Blob([rows.value], {type: 'text/csv'}))
link.download = 'edits.csv'
link.click()
URL.revokeObjectURL(link.href)
"""
# Show the first line once the documents are ready: re-choosing it runs the same code as a pick.
_START = (
    "const doc = window.Bokeh && Bokeh.documents[0]; const s = doc && doc.get_model_by_name('line');"
    "if (s || ++n > 100) clearInterval(wait);"
    "if (s) s.properties.value.change.emit();"
)
