"""Figures of the summary, made with matplotlib: tables in, figures out, nothing read or written.

Colours are those of Okabe & Ito (2008), which colour-blind readers can tell apart. Maps are azimuthal equidistant about
the middle of the survey, so that distances near it are true, north is up and 180 degrees of longitude is no seam.
"""

import matplotlib

matplotlib.use("Agg")

import matplotlib.dates as mdates
import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

BLUE, ORANGE, GREEN, RED, GREY = "#0072B2", "#E69F00", "#009E73", "#D55E00", "#777777"
KIND_COLOURS = {"line": BLUE, "tie": GREEN, "calibration": ORANGE, "transit": GREY}
POINTS = 1500  # a line on paper shows no more

matplotlib.rcParams.update(
    {
        "font.size": 9,
        "axes.spines.top": False,
        "axes.spines.right": False,
        "axes.linewidth": 0.6,
        "figure.dpi": 110,
        "savefig.bbox": "tight",
        "svg.hashsalt": "stripeline",
    }
)


class Plane:
    """Azimuthal equidistant plane about the middle of some positions, kilometres east and north."""

    def __init__(self, lat: np.ndarray, lon: np.ndarray):
        from pyproj import Transformer

        good = np.isfinite(lat) & np.isfinite(lon)
        phi, lam = np.radians(lat[good]), np.radians(lon[good])
        x, y, z = np.cos(phi) * np.cos(lam), np.cos(phi) * np.sin(lam), np.sin(phi)
        self.lon = float(np.degrees(np.arctan2(y.sum(), x.sum())))
        self.lat = float(np.degrees(np.arctan2(z.sum(), np.hypot(x.sum(), y.sum()))))
        definition = f"+proj=aeqd +lat_0={self.lat!r} +lon_0={self.lon!r} +datum=WGS84 +units=km"
        self._to = Transformer.from_crs("EPSG:4326", definition, always_xy=True)

    def __call__(self, lat: np.ndarray, lon: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Project positions, degrees, to kilometres east and north of the middle."""
        east, north = self._to.transform(lon, lat)
        return np.asarray(east), np.asarray(north)


def thin(values: np.ndarray, points: int = POINTS) -> np.ndarray:
    """Choose samples for display so that every extreme stays visible.

    Parameters
    ----------
    values : array of float, shape (n,)
        What is drawn; NaN where nothing is.
    points : int, optional
        About how many samples to keep.

    Returns
    -------
    array of int
        Indices in order: of each of ``points / 2`` equal stretches the smallest and the largest value.

    """
    n = len(values)
    if n <= points:
        return np.arange(n)
    bins = points // 2
    size = -(-n // bins)
    padded = np.full(size * bins, np.nan)
    padded[:n] = values
    blocks = padded.reshape(bins, size)
    start = np.arange(bins) * size
    low = np.argmin(np.where(np.isnan(blocks), np.inf, blocks), axis=1)
    high = np.argmax(np.where(np.isnan(blocks), -np.inf, blocks), axis=1)
    kept = np.unique(np.concatenate([start + low, start + high, [0, n - 1]]))
    return kept[kept < n]


def _graticule(axes, plane: Plane) -> None:
    """Draw parallels and meridians, labelled at the frame."""
    (west, east), (south, north) = axes.get_xlim(), axes.get_ylim()
    half_lat = max(abs(south), abs(north)) / 111.2
    half_lon = min(180.0, max(abs(west), abs(east)) / (111.2 * max(0.05, np.cos(np.radians(plane.lat)))))
    steps = np.array([1 / 60, 1 / 30, 1 / 12, 1 / 6, 0.25, 0.5, 1, 2, 5, 10, 20, 30])
    step_lat = steps[min(np.searchsorted(steps, half_lat / 2.5), len(steps) - 1)]
    step_lon = steps[min(np.searchsorted(steps, half_lon / 2.5), len(steps) - 1)]
    for lat in np.arange(np.ceil((plane.lat - half_lat) / step_lat), (plane.lat + half_lat) / step_lat) * step_lat:
        if abs(lat) < 90:
            x, y = plane(np.full(200, lat), plane.lon + np.linspace(-half_lon, half_lon, 200) * 1.2)
            axes.plot(x, y, color="#bbbbbb", lw=0.5, zorder=0)
            at = np.argmin(np.abs(x - west))
            if south < y[at] < north:
                label = f"{_degrees(abs(lat))}{'N' if lat >= 0 else 'S'}"
                axes.annotate(
                    label,
                    (0, y[at]),
                    (3, 2),
                    xycoords=("axes fraction", "data"),
                    textcoords="offset points",
                    fontsize=7,
                    color="#666666",
                )
    for lon in np.arange(np.ceil((plane.lon - half_lon) / step_lon), (plane.lon + half_lon) / step_lon) * step_lon:
        x, y = plane(np.clip(plane.lat + np.linspace(-half_lat, half_lat, 200) * 1.2, -90, 90), np.full(200, lon))
        axes.plot(x, y, color="#bbbbbb", lw=0.5, zorder=0)
        at = np.argmin(np.abs(y - south))
        if west < x[at] < east:
            wrapped = round((lon + 180) % 360 - 180, 9)
            label = f"{_degrees(abs(wrapped))}{'' if abs(wrapped) in (0, 180) else 'E' if wrapped > 0 else 'W'}"
            axes.annotate(
                label,
                (x[at], 0),
                (2, 3),
                xycoords=("data", "axes fraction"),
                textcoords="offset points",
                fontsize=7,
                color="#666666",
            )
    axes.set_xlim(west, east)
    axes.set_ylim(south, north)


def _degrees(value: float) -> str:
    """Write degrees, with minutes where they are not whole."""
    minutes = round(value * 60)
    return f"{minutes // 60}°{minutes % 60:02d}'" if minutes % 60 else f"{minutes // 60}°"


def _map_axes(height: float = 6.0):
    figure = Figure(figsize=(7.5, height), layout="constrained")
    axes = figure.add_subplot()
    axes.set_aspect("equal", adjustable="box")
    axes.set_xlabel("km east")
    axes.set_ylabel("km north")
    return figure, axes


def track_map(samples: pd.DataFrame, crossings: pd.DataFrame, plane: Plane) -> Figure:
    """Draw the sensor's tracks and the crossings, coloured by what is left of their mismatch.

    Parameters
    ----------
    samples : pandas.DataFrame
        line, kind, sensor_latitude_deg, sensor_longitude_deg; in order along each line.
    crossings : pandas.DataFrame
        sensor_latitude_deg, sensor_longitude_deg, residual_nt (NaN where the crossing is not used).
    plane : Plane
        Projection of the survey.

    """
    figure, axes = _map_axes()
    labelled = set()
    fine = float(np.clip(20 / max(1, samples["line"].nunique()), 0.3, 1.0))  # many lines are drawn thin
    for (name, kind), group in samples.groupby(["line", "kind"], sort=False):
        x, y = plane(group["sensor_latitude_deg"].to_numpy(), group["sensor_longitude_deg"].to_numpy())
        keep = np.unique(np.linspace(0, len(x) - 1, min(len(x), POINTS)).astype(int))
        label = kind if kind not in labelled else None
        labelled.add(kind)
        axes.plot(x[keep], y[keep], color=KIND_COLOURS.get(kind, GREY), lw=0.9 * fine, label=label)
        if samples["line"].nunique() <= 40:
            axes.annotate(_short(name), (x[0], y[0]), (2, 2), textcoords="offset points", fontsize=7, color="#333333")
    if len(crossings):
        x, y = plane(crossings["sensor_latitude_deg"].to_numpy(), crossings["sensor_longitude_deg"].to_numpy())
        value = crossings["residual_nt"].to_numpy(float)
        used = np.isfinite(value)
        axes.plot(
            x[~used], y[~used], "x", color=GREY, ms=4, mew=0.8, label="crossing not used" if (~used).any() else None
        )
        if used.any():
            limit = max(1e-3, float(np.quantile(np.abs(value[used]), 0.95)))
            dots = axes.scatter(
                x[used],
                y[used],
                c=value[used],
                s=22 * fine,
                cmap="PuOr",
                vmin=-limit,
                vmax=limit,
                edgecolors="#333333",
                linewidths=0.4,
                zorder=3,
            )
            figure.colorbar(dots, ax=axes, label="mismatch left after levelling, nT", shrink=0.7, extend="both")
    axes.margins(0.06)
    axes.autoscale_view()
    _square(axes)
    _graticule(axes, plane)
    axes.legend(loc="upper left", bbox_to_anchor=(0, -0.08), ncols=5, frameon=False, fontsize=8)
    axes.set_title(f"Tracks of the sensor and crossings (0, 0 is {_place(plane)})", loc="left", fontsize=9)
    return figure


def _square(axes) -> None:
    """Widen the narrower side of a map, so that a single line is still a map."""
    (west, east), (south, north) = axes.get_xlim(), axes.get_ylim()
    least = 0.4 * max(east - west, north - south)
    if east - west < least:
        middle = (east + west) / 2
        axes.set_xlim(middle - least / 2, middle + least / 2)
    if north - south < least:
        middle = (south + north) / 2
        axes.set_ylim(middle - least / 2, middle + least / 2)


def _place(plane: Plane) -> str:
    lat = f"{abs(plane.lat):.3f}°{'N' if plane.lat >= 0 else 'S'}"
    return f"{lat} {abs(plane.lon):.3f}°{'E' if plane.lon >= 0 else 'W'}"


def _short(name: str) -> str:
    """Cut a long name for a label; no mathematics in it."""
    name = name.replace("$", r"\$").replace("\n", " ")
    return name if len(name) <= 14 else name[:13] + "…"


def stacked_profiles(samples: pd.DataFrame, plane: Plane, nt_per_km: float | None = None) -> Figure:
    """Draw the anomalies as wiggles along the tracks, positive filled.

    Parameters
    ----------
    samples : pandas.DataFrame
        line, kind, sensor_latitude_deg, sensor_longitude_deg, anomaly_nt of evenly resampled profiles.
    plane : Plane
        Projection of the survey.
    nt_per_km : float, optional
        Scale of the wiggles; without it chosen to fit.

    """
    figure, axes = _map_axes()
    profiles = samples[samples["kind"] == "line"]
    if len(profiles) == 0:
        profiles = samples
    groups, spread = [], []
    for name, group in profiles.groupby("line", sort=False):
        x, y = plane(group["sensor_latitude_deg"].to_numpy(), group["sensor_longitude_deg"].to_numpy())
        groups.append((name, x, y, group["anomaly_nt"].to_numpy()))
    middles = np.array([[np.nanmean(x), np.nanmean(y)] for _, x, y, _ in groups])
    extent = max(np.ptp(np.concatenate([g[1] for g in groups])), np.ptp(np.concatenate([g[2] for g in groups])), 1.0)
    if nt_per_km is None:
        every = np.concatenate([g[3] for g in groups])
        spread = float(np.nanquantile(np.abs(every), 0.98)) if np.isfinite(every).any() else 1.0
        apart = extent / max(6, len(groups))
        if len(groups) > 1:
            gaps = np.hypot(*(middles[:, None] - middles[None]).transpose(2, 0, 1))
            gaps[gaps == 0] = np.inf
            apart = float(np.median(gaps.min(axis=1)))
        nt_per_km = float(f"{max(spread, 1e-3) / max(apart, 1e-3):.1g}")
    for name, x, y, value in groups:
        keep = thin(value)
        x, y, value = x[keep], y[keep], value[keep]
        good = np.isfinite(x) & np.isfinite(y)
        if good.sum() < 2:
            continue
        dx, dy = x[good][-1] - x[good][0], y[good][-1] - y[good][0]
        length = np.hypot(dx, dy) or 1.0
        normal = np.array([-dy, dx]) / length
        if normal[1] < 0 or (normal[1] == 0 and normal[0] < 0):
            normal = -normal
        wx, wy = x + normal[0] * value / nt_per_km, y + normal[1] * value / nt_per_km
        axes.plot(x, y, color="#999999", lw=0.4)
        axes.plot(wx, wy, color="#222222", lw=float(np.clip(14 / len(groups), 0.2, 0.7)))
        for part in _runs(np.isfinite(value) & (value > 0) & good):
            outline = np.concatenate([np.c_[wx[part], wy[part]], np.c_[x[part], y[part]][::-1]])
            axes.fill(*outline.T, color=BLUE, alpha=0.45, lw=0)
        if len(groups) <= 40:
            axes.annotate(
                _short(name), (x[good][0], y[good][0]), (-2, 2), textcoords="offset points", fontsize=7, ha="right"
            )
    axes.margins(0.06)
    axes.autoscale_view()
    _square(axes)
    _graticule(axes, plane)
    axes.set_title(
        f"Anomaly along the tracks, {nt_per_km:g} nT per km of the map, positive filled", loc="left", fontsize=9
    )
    return figure


def _runs(mask: np.ndarray) -> list[slice]:
    """Return the stretches where a mask is true."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], mask.astype(np.int8), [0]])))
    return [slice(a, b) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def crossing_histogram(before: np.ndarray, after: np.ndarray, left_out: np.ndarray) -> Figure:
    """Draw how often which mismatch occurs, nT, before levelling, after, and with each crossing left out."""
    figure = Figure(figsize=(7.5, 3.0), layout="constrained")
    axes = figure.add_subplot()
    series = [(before, "before", GREY), (after, "after", BLUE), (left_out, "left out", RED)]
    series = [(values[np.isfinite(values)], *rest) for values, *rest in series]
    if len(series[0][0]) == 0:
        axes.text(0.5, 0.5, "no crossing was used", ha="center", transform=axes.transAxes)
        axes.set_axis_off()
        return figure
    limit = max(float(np.quantile(np.abs(values), 0.98)) for values, *_ in series if len(values)) * 1.1 or 1.0
    bins = np.linspace(-limit, limit, 41)
    for values, label, colour in series:
        if len(values):
            rms = float(np.sqrt(np.mean(values**2)))
            axes.hist(
                np.clip(values, -limit, limit),
                bins,
                histtype="step",
                lw=1.4,
                color=colour,
                label=f"{label}: rms {rms:.2f} nT, n {len(values)}",
            )
    axes.set_xlabel("mismatch at crossings, nT (the outer bins hold all beyond)")
    axes.set_ylabel("crossings")
    axes.yaxis.set_major_locator(MaxNLocator(integer=True))
    axes.legend(frameon=False)
    return figure


def base_record(base: pd.DataFrame) -> Figure:
    """Draw the variation at each base station, disturbed stretches shaded, nT.

    Parameters
    ----------
    base : pandas.DataFrame
        station, time_utc, variation_nt, disturbed.

    """
    stations = list(dict.fromkeys(base["station"]))
    figure = Figure(figsize=(7.5, 1.0 + 1.9 * max(1, len(stations))), layout="constrained")
    for number, station in enumerate(stations):
        axes = figure.add_subplot(len(stations), 1, number + 1)
        own = base[base["station"] == station]
        time, value = own["time_utc"].to_numpy(), own["variation_nt"].to_numpy()
        for part in _runs(own["disturbed"].to_numpy(bool)):
            axes.axvspan(time[part.start], time[part.stop - 1], color=ORANGE, alpha=0.35, lw=0)
        keep = thin(value, 4000)
        axes.plot(time[keep], value[keep], color=BLUE, lw=0.8)
        axes.set_ylabel("nT")
        axes.set_title(f"{_short(station)}: variation; shaded: disturbed", loc="left", fontsize=9)
        axes.xaxis.set_major_formatter(mdates.ConciseDateFormatter(axes.xaxis.get_major_locator()))
    return figure


def heading_fit(angle_deg: np.ndarray, residual_nt: np.ndarray, curve_deg: np.ndarray, curve_nt: np.ndarray) -> Figure:
    """Draw the calibration readings against heading, with the fitted effect, nT."""
    figure = Figure(figsize=(7.5, 3.0), layout="constrained")
    axes = figure.add_subplot()
    axes.plot(angle_deg, residual_nt, ".", color=GREY, ms=2.5, label="calibration, local field removed")
    axes.plot(curve_deg, curve_nt, color=RED, lw=1.6, label="fitted heading effect")
    axes.set_xlim(0, 360)
    axes.set_xticks(range(0, 361, 45))
    axes.set_xlabel("heading, degrees from true north")
    axes.set_ylabel("nT")
    axes.legend(frameon=False)
    return figure
