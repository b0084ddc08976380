"""Every column and flag that Stripeline writes: name, unit, type, sign, meaning. Defined here and nowhere else.

Sign convention of the whole house: every correction is *subtracted*,
``anomaly = total field - main field - diurnal - heading - level``. Angles are degrees clockwise from true north,
latitude north and longitude east positive, longitudes in [-180, 180). Depths are positive downwards, heights upwards.
Times are UTC, ``datetime64[ns]`` without a zone. A missing value is NaN with a flag that gives the reason.
"""

from dataclasses import dataclass
from enum import IntFlag

import numpy as np
import pandas as pd


@dataclass(frozen=True)
class Column:
    """One column: its unit (``1`` for a count or code), numpy type and meaning."""

    unit: str
    dtype: str
    meaning: str


class Flag(IntFlag):
    """Why a reading, or one of its terms, is rejected, missing or doubtful."""

    SPIKE = 1 << 0
    DROPOUT = 1 << 1
    OUT_OF_RANGE = 1 << 2
    LOW_SIGNAL = 1 << 3
    EDITED_OUT = 1 << 4
    EDITED_IN = 1 << 5
    NO_NAVIGATION = 1 << 6
    NO_CABLE = 1 << 7
    SETTLING = 1 << 8
    COURSE_FOR_HEADING = 1 << 9
    NO_DIURNAL = 1 << 10
    DISTURBED = 1 << 11
    NO_HEADING = 1 << 12
    NO_LEVEL = 1 << 13
    NO_MAIN_FIELD = 1 << 14
    OFF_LINE = 1 << 15


# Flags that take a reading out of the anomaly; the others only inform. EDITED_IN lifts the automatic ones.
REJECTING = Flag.SPIKE | Flag.DROPOUT | Flag.OUT_OF_RANGE | Flag.LOW_SIGNAL | Flag.EDITED_OUT
AUTOMATIC = Flag.SPIKE | Flag.DROPOUT | Flag.OUT_OF_RANGE | Flag.LOW_SIGNAL

FLAG_MEANINGS = {
    Flag.SPIKE: "departs from its neighbours by more than the spike threshold",
    Flag.DROPOUT: "no value, or the logger repeated one value",
    Flag.OUT_OF_RANGE: "not a total field of the Earth",
    Flag.LOW_SIGNAL: "signal strength below the stated limit",
    Flag.EDITED_OUT: "rejected by a person's edit",
    Flag.EDITED_IN: "kept by a person's edit, whatever the automatic tests say",
    Flag.NO_NAVIGATION: "no navigation within the longest gap that may be bridged",
    Flag.NO_CABLE: "cable-out not known",
    Flag.SETTLING: "towed sensor's path not yet settled after a start, a gap or a change of cable",
    Flag.COURSE_FOR_HEADING: "no gyro heading: course over ground used instead",
    Flag.NO_DIURNAL: "diurnal term missing: no base station has a record at this time, or no position",
    Flag.DISTURBED: "magnetically disturbed at the base station",
    Flag.NO_HEADING: "heading effect not determined: term missing",
    Flag.NO_LEVEL: "line without a usable crossing: level term missing",
    Flag.NO_MAIN_FIELD: "main field not computed, for want of a position",
    Flag.OFF_LINE: "outside every line of the line log",
}

COLUMNS = {
    # identity, fixed at ingest
    "reading": Column("1", "int64", "number of the reading, in time order over the survey"),
    "time_utc": Column("UTC", "datetime64[ns]", "time after clock correction"),
    "total_field_nt": Column("nT", "float64", "scalar total field as read by the towed sensor"),
    "signal": Column("1", "float64", "signal strength in the logger's own unit"),
    "logged_depth_m": Column("m", "float64", "sensor depth as logged, positive downwards"),
    "water_depth_m": Column("m", "float64", "water depth, positive downwards"),
    "source_file": Column("1", "int32", "raw file, as an index into the record's list of files"),
    "source_row": Column("1", "int64", "row in the raw file, counting from 1 with the heading"),
    # navigation
    "latitude_deg": Column("degree", "float64", "geodetic latitude (WGS 84), north positive"),
    "longitude_deg": Column("degree", "float64", "longitude, east positive, in [-180, 180)"),
    "heading_deg": Column("degree", "float64", "ship's heading (gyro), clockwise from true north"),
    "course_deg": Column("degree", "float64", "course over ground, clockwise from true north"),
    "speed_mps": Column("m s-1", "float64", "speed over ground"),
    # lines
    "line_index": Column("1", "int32", "row in the table of lines; -1 on no line"),
    "line": Column("1", "str", "name of the line"),
    "kind": Column("1", "str", "line, tie, calibration or transit"),
    "start_utc": Column("UTC", "datetime64[ns]", "first instant of the line"),
    "end_utc": Column("UTC", "datetime64[ns]", "last instant of the line"),
    "readings": Column("1", "int64", "number of readings on the line"),
    "hold": Column("1", "bool", "correction of this line held at zero in levelling"),
    # screen
    "screen_flags": Column("1", "uint32", "flags set by screening and edits"),
    "sigma_noise_nt": Column("nT", "float64", "instrument noise, one sigma, of the line (fourth difference)"),
    # position
    "sensor_latitude_deg": Column("degree", "float64", "geodetic latitude of the towed sensor, north positive"),
    "sensor_longitude_deg": Column("degree", "float64", "longitude of the towed sensor, in [-180, 180)"),
    "sensor_depth_m": Column("m", "float64", "depth of the towed sensor below the sea surface, positive downwards"),
    "layback_m": Column("m", "float64", "horizontal distance from tow point to sensor"),
    "tow_direction_deg": Column("degree", "float64", "direction from sensor to tow point, clockwise from true north"),
    "ship_heading_deg": Column("degree", "float64", "ship's heading at the reading (gyro, else course)"),
    "sensor_course_deg": Column("degree", "float64", "direction in which the sensor moves, clockwise from true north"),
    "sensor_speed_mps": Column("m s-1", "float64", "speed of the sensor over ground"),
    "sigma_position_m": Column("m", "float64", "horizontal position error of the sensor, one sigma per axis"),
    "position_flags": Column("1", "uint32", "flags set while locating the sensor"),
    # base stations
    "station": Column("1", "str", "name of the base station"),
    "variation_nt": Column("nT", "float64", "total field at the station - main field - datum"),
    "disturbed": Column("1", "bool", "magnetically disturbed"),
    # corrections and their uncertainties
    "main_field_nt": Column("nT", "float64", "IGRF-14 total field at sensor position, depth and time; subtracted"),
    "diurnal_nt": Column("nT", "float64", "external field variation; subtracted"),
    "sigma_diurnal_nt": Column("nT", "float64", "one sigma of the diurnal term"),
    "diurnal_flags": Column("1", "uint32", "flags set by the diurnal stage"),
    "heading_nt": Column("nT", "float64", "heading effect; subtracted"),
    "sigma_heading_nt": Column("nT", "float64", "one sigma of the heading term"),
    "heading_flags": Column("1", "uint32", "flags set by the heading stage"),
    "level_nt": Column("nT", "float64", "levelling correction of the line; subtracted"),
    "sigma_level_nt": Column("nT", "float64", "one sigma of the level term"),
    "level_flags": Column("1", "uint32", "flags set by levelling"),
    "heading_change_nt": Column("nT", "float64", "change of the heading term by the joint adjustment; add to it"),
    "diurnal_change_nt": Column("nT", "float64", "change of the diurnal term by the joint adjustment; add to it"),
    "sigma_position_left_m": Column(
        "m", "float64", "horizontal position error left where an error of the layback is corrected for in the level term"
    ),
    "position_change_nt": Column("nT", "float64", "part of the level term that undoes errors of layback and clock"),
    "sigma_joint_nt": Column(
        "nT", "float64", "one sigma of diurnal, heading and level terms together after the adjustment, datum left out"
    ),
    "sigma_datum_nt": Column("nT", "float64", "one sigma of the datum, common to a connected network"),
    "sigma_position_nt": Column("nT", "float64", "position error times the local along-track gradient, one sigma"),
    "anomaly_nt": Column("nT", "float64", "total field - main field - diurnal - heading - level"),
    "sigma_anomaly_nt": Column("nT", "float64", "one sigma of the anomaly, datum left out"),
    "flags": Column("1", "uint32", "all flags of the reading"),
    # crossovers: _1 and _2 are the two passes
    "survey_1": Column("1", "str", "survey of the first pass"),
    "line_1": Column("1", "str", "line of the first pass"),
    "reading_1": Column("1", "int64", "reading before the crossing on the first pass"),
    "fraction_1": Column("1", "float64", "place of the crossing between that reading and the next, 0 to 1"),
    "time_1_utc": Column("UTC", "datetime64[ns]", "time of the first pass"),
    "anomaly_1_nt": Column("nT", "float64", "anomaly before levelling on the first pass"),
    "gradient_1_nt_per_m": Column("nT m-1", "float64", "along-track gradient of the first pass"),
    "sigma_1_nt": Column("nT", "float64", "one sigma of the first value, position and level left out"),
    "course_1_deg": Column("degree", "float64", "sensor course of the first pass"),
    "ship_heading_1_deg": Column("degree", "float64", "ship's heading of the first pass"),
    "tow_direction_1_deg": Column("degree", "float64", "tow direction of the first pass"),
    "speed_1_mps": Column("m s-1", "float64", "sensor speed of the first pass"),
    "diurnal_1_nt": Column("nT", "float64", "diurnal term of the first pass"),
    "sigma_diurnal_1_nt": Column("nT", "float64", "one sigma of the diurnal term of the first pass"),
    "sigma_heading_1_nt": Column("nT", "float64", "one sigma of the heading term of the first pass"),
    "sigma_position_1_m": Column("m", "float64", "position error of the first pass, one sigma per axis"),
    "angle_deg": Column("degree", "float64", "angle between the two tracks, 0 to 90"),
    "mismatch_nt": Column("nT", "float64", "anomaly of the first pass minus that of the second"),
    "sigma_mismatch_nt": Column("nT", "float64", "one sigma of the mismatch, level left out"),
    "status": Column("1", "str", "used, or the reason why the crossing is not"),
    # levelling, by crossing and by line
    "residual_nt": Column("nT", "float64", "mismatch left after levelling; missing where the crossing is not used"),
    "left_out_nt": Column("nT", "float64", "mismatch minus what all other crossings say of it"),
    "weight": Column("1", "float64", "robust weight in levelling, 0 (rejected) to 1"),
    "survey": Column("1", "str", "survey of the line"),
    "network": Column("1", "int64", "number of the network that crossings connect, 0 the largest; -1 in none"),
    "crossings": Column("1", "int64", "number of crossings used"),
    "rms_before_nt": Column("nT", "float64", "rms mismatch of the line's crossings before levelling"),
    "rms_after_nt": Column("nT", "float64", "rms mismatch of the line's crossings after levelling"),
    "rms_left_out_nt": Column("nT", "float64", "the same with each crossing left out in turn"),
    # profiles
    "distance_km": Column("km", "float64", "geodesic distance along the profile's azimuth from its origin"),
    "azimuth_deg": Column("degree", "float64", "azimuth of the profile at the sample, in which distance grows"),
    "offset_km": Column("km", "float64", "distance to the right of the profile's straight line"),
    "inclination_deg": Column("degree", "float64", "inclination of the ambient main field, positive downwards"),
    "declination_deg": Column("degree", "float64", "declination of the ambient main field, east positive"),
}
for _name in [name for name in COLUMNS if "_1_" in name or name.endswith("_1")]:
    _column = COLUMNS[_name]
    COLUMNS[_name.replace("_1", "_2")] = Column(
        _column.unit, _column.dtype, _column.meaning.replace("first pass", "second pass").replace("first", "second")
    )

_PASS = [name for name in COLUMNS if "_1_" in name or name.endswith("_1")]

# What each table must hold. A stage's own table is aligned, row for row, with the readings.
TABLES = {
    "readings": [
        "reading",
        "time_utc",
        "total_field_nt",
        "signal",
        "logged_depth_m",
        "water_depth_m",
        "source_file",
        "source_row",
    ],
    "navigation": ["time_utc", "latitude_deg", "longitude_deg", "course_deg", "speed_mps"],
    "gyro": ["time_utc", "heading_deg"],
    "lines": ["line_index"],
    "line_table": ["line", "kind", "start_utc", "end_utc", "readings"],
    "screen": ["screen_flags", "sigma_noise_nt"],
    "position": [
        "sensor_latitude_deg",
        "sensor_longitude_deg",
        "sensor_depth_m",
        "layback_m",
        "tow_direction_deg",
        "ship_heading_deg",
        "sensor_course_deg",
        "sensor_speed_mps",
        "sigma_position_m",
        "position_flags",
    ],
    "main_field": ["main_field_nt"],
    "diurnal": ["diurnal_nt", "sigma_diurnal_nt", "diurnal_flags"],
    "diurnal_base": ["station", "time_utc", "variation_nt", "disturbed"],
    "heading": ["heading_nt", "sigma_heading_nt", "heading_flags"],
    "crossovers": [
        *_PASS,
        *[name.replace("_1", "_2") for name in _PASS],
        "sensor_latitude_deg",
        "sensor_longitude_deg",
        "angle_deg",
        "mismatch_nt",
        "sigma_mismatch_nt",
        "status",
    ],
    "levelling": [
        "level_nt",
        "sigma_level_nt",
        "heading_change_nt",
        "diurnal_change_nt",
        "position_change_nt",
        "sigma_joint_nt",
        "sigma_datum_nt",
        "sigma_position_left_m",
        "level_flags",
    ],
    "levelling_lines": [
        "survey",
        "line",
        "kind",
        "network",
        "level_nt",
        "sigma_level_nt",
        "crossings",
        "rms_before_nt",
        "rms_after_nt",
        "rms_left_out_nt",
        "status",
    ],
}
_TERMS = ["total_field_nt", "main_field_nt", "diurnal_nt", "heading_nt", "level_nt", "anomaly_nt"]
_SIGMAS = [
    "sigma_noise_nt",
    "sigma_position_nt",
    "sigma_diurnal_nt",
    "sigma_heading_nt",
    "sigma_level_nt",
    "sigma_joint_nt",
    "sigma_anomaly_nt",
    "sigma_datum_nt",
]
_OWN = [name for stage in ("readings", "lines", "position", "levelling") for name in TABLES[stage]]
TABLES["corrected"] = [
    *(name for name in _OWN if name not in (*_TERMS, *_SIGMAS) and not name.endswith("_flags")),
    "distance_km",
    "offset_km",
    *_TERMS,
    *_SIGMAS,
    "flags",
]
TABLES["profiles"] = [
    "line",
    "kind",
    "distance_km",
    "offset_km",
    "azimuth_deg",
    "time_utc",
    "sensor_latitude_deg",
    "sensor_longitude_deg",
    "sensor_depth_m",
    "water_depth_m",
    *_TERMS,
    *_SIGMAS,
    "inclination_deg",
    "declination_deg",
    "flags",
]
TABLES["levelling_crossovers"] = [*TABLES["crossovers"], "residual_nt", "left_out_nt", "weight"]


def check(table: pd.DataFrame, name: str) -> pd.DataFrame:
    """Check that a table holds what `TABLES` promises and give each column its type.

    Parameters
    ----------
    table : pandas.DataFrame
        Any number of rows; columns beyond the promised ones must be in `COLUMNS` and come last.
    name : str
        Key of `TABLES`.

    Returns
    -------
    pandas.DataFrame
        New table, promised columns first and in order, with a plain ascending index.

    Raises
    ------
    KeyError
        If a promised column is absent or an unknown one present: a fault of ours, never of the user's.

    """
    promised = TABLES[name]
    absent = [column for column in promised if column not in table]
    unknown = [column for column in table if column not in COLUMNS]
    if absent or unknown:
        raise KeyError(f"table {name}: lacks {absent}, holds unknown {unknown}")
    ordered = promised + [column for column in table if column not in promised]
    typed = {}
    for column in ordered:
        dtype = COLUMNS[column].dtype
        values = table[column]
        typed[column] = values.astype("str" if dtype == "str" else np.dtype(dtype)).to_numpy()
    return pd.DataFrame(typed)
