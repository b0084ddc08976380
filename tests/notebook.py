"""The plain reduction that a processor scripts in a notebook, step after step, to compare with. Imports no stage.

Same-track layback, IGRF-14 at the sensor, base station subtracted as it is, one constant a line by ordinary least
squares at the crossings. Nothing is estimated jointly, shifted, scaled or weighted.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd
import shapely
from scipy.ndimage import median_filter, uniform_filter1d
from synthetic import Survey
from synthetic_fields import MainField, decimal_year
from synthetic_track import Plane


@dataclass(frozen=True)
class Reduced:
    """What the notebook arrives at, row-aligned with the readings, and its crossings."""

    table: pd.DataFrame  # sensor_latitude_deg, sensor_longitude_deg, main_field_nt, anomaly_nt, line_index, kept
    crossings: pd.DataFrame  # line_1, line_2, mismatch_nt before levelling, raw_nt (before the base), levelled_nt


def despiked(total_field_nt: np.ndarray, threshold_nt: float = 3.0, window: int = 11) -> np.ndarray:
    """Tell which readings stay within a fixed threshold of their running median."""
    return np.abs(total_field_nt - median_filter(total_field_nt, window)) <= threshold_nt


def same_track(survey: Survey, time_utc: np.ndarray, plane: Plane) -> tuple[np.ndarray, np.ndarray]:
    """Plane position of the sensor: on the antenna's smoothed track, stern and layback behind."""
    s = survey.scenario
    fixes = survey.navigation[survey.navigation["given"]]
    begin = survey.navigation["time_utc"].to_numpy()[0].astype("int64") / 1e9
    fixed = fixes["time_utc"].to_numpy().astype("int64") / 1e9 - begin
    points = np.column_stack(plane.metres(fixes["latitude_deg"].to_numpy(), fixes["longitude_deg"].to_numpy()))
    when = np.arange(0.0, fixed[-1], s.navigation_s)  # even, so that gaps are bridged before smoothing
    points = np.column_stack([np.interp(when, fixed, column) for column in points.T])
    width = max(3, round(30 / s.navigation_s) // 2 * 2 + 1)
    for k in range(2):
        points[:, k] = uniform_filter1d(median_filter(points[:, k], width), width)
    along = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))])
    t = time_utc.astype("int64") / 1e9
    cable_t = survey.cable["time_utc"].to_numpy().astype("int64") / 1e9
    cable = survey.cable["cable_out_m"].to_numpy()[np.maximum(np.searchsorted(cable_t, t, side="right") - 1, 0)]
    depth = survey.readings["logged_depth_m"].to_numpy()
    behind = np.sqrt(cable**2 - depth**2) - s.forward_m
    place = np.interp(t - begin, when, along) - behind
    return np.interp(place, along, points[:, 0]), np.interp(place, along, points[:, 1])


def crossings(east, north, values, index, lines) -> pd.DataFrame:
    """Intersect every pair of lines; the columns of `values` (n, k) are interpolated on both and subtracted."""
    tracks, far, rows = {}, {}, []
    for k in lines:
        on = index == k
        points = np.column_stack([east[on], north[on]])
        if len(points) > 1:
            tracks[k] = shapely.LineString(points)
            far[k] = (np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(points, axis=0).T))]), values[on])
    names = sorted(tracks)
    for i, a in enumerate(names):
        for b in names[i + 1 :]:
            if not tracks[a].intersects(tracks[b]):
                continue
            for point in shapely.get_parts(tracks[a].intersection(tracks[b])):
                at = [
                    [np.interp(tracks[k].project(point), far[k][0], column) for column in far[k][1].T] for k in (a, b)
                ]
                rows.append((a, b, *(np.array(at[0]) - np.array(at[1]))))
    return pd.DataFrame(rows, columns=["line_1", "line_2", *range(values.shape[1])])


def reduce(survey: Survey, keep: np.ndarray | None = None) -> Reduced:
    """Reduce a survey's records; its truth is not looked at.

    Parameters
    ----------
    survey : Survey
        Simulated survey; a missing reading is not expected among the kept ones.
    keep : array of bool, optional
        Readings to use; by default those that `despiked` lets through and that have signal.

    """
    s, readings = survey.scenario, survey.readings
    time_utc = readings["time_utc"].to_numpy()
    total = readings["total_field_nt"].to_numpy()
    if keep is None:
        keep = despiked(total) & (readings["signal"].to_numpy() > 500)
    plane = Plane(s.latitude_deg, s.longitude_deg)
    east, north = same_track(survey, time_utc, plane)
    main = MainField(plane, east, north, float(decimal_year(time_utc[:1])[0]))
    height = s.sea_surface_height_m - readings["logged_depth_m"].to_numpy()
    main_field = main(east, north, height, time_utc)
    raw = total - main_field
    anomaly = raw.copy()
    if survey.bases:
        base = survey.bases[0]
        there = ~np.isnan(base["total_field_nt"])
        record = np.interp(
            time_utc.astype("int64"), base["time_utc"][there].astype("int64"), base["total_field_nt"][there]
        )
        anomaly = anomaly - (record - record.mean())
    index = np.full(len(time_utc), -1)
    for k, (start, end) in enumerate(zip(survey.lines["start_utc"], survey.lines["end_utc"], strict=True)):
        index[(time_utc >= start) & (time_utc <= end)] = k
    wanted = np.flatnonzero(survey.lines["kind"].isin(["line", "tie"]))
    used = keep & np.isin(index, wanted)
    values = np.column_stack([anomaly, raw])[used]
    found = crossings(east[used], north[used], values, index[used], wanted)
    found.columns = ["line_1", "line_2", "mismatch_nt", "raw_nt"]
    constant = np.zeros(len(survey.lines))
    design = np.zeros((len(found) + 1, len(wanted)))
    for sign, column in ((1.0, "line_1"), (-1.0, "line_2")):
        design[np.arange(len(found)), np.searchsorted(wanted, found[column].to_numpy(int))] = sign
    design[-1] = 1.0  # the datum: mean of the constants zero
    constant[wanted] = np.linalg.lstsq(design, np.append(found["mismatch_nt"].to_numpy(float), 0.0))[0]
    level = np.where(index >= 0, constant[index], 0.0)
    found["levelled_nt"] = (
        found["mismatch_nt"] - constant[found["line_1"].to_numpy(int)] + constant[found["line_2"].to_numpy(int)]
    )
    latitude, longitude = plane.geographic(east, north)
    table = pd.DataFrame(
        {
            "sensor_latitude_deg": latitude,
            "sensor_longitude_deg": longitude,
            "main_field_nt": main_field,
            "anomaly_nt": anomaly - level,
            "line_index": index,
            "kept": used,
        }
    )
    return Reduced(table, found)
