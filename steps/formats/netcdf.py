"""Write corrected readings as NetCDF with CF conventions: a discrete sampling geometry of trajectories.

Each line of the survey is one trajectory in a contiguous ragged array (CF-1.11, section 9.3.3 and appendix H.4.3):
``row_size`` counts the observations of each. Global attributes follow the Attribute Convention for Data Discovery
(ACDD-1.3). No date of creation is written, so that equal results are equal bytes.
"""

from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd

from steps.columns import COLUMNS, FLAG_MEANINGS, Flag

CONVENTIONS = "CF-1.11, ACDD-1.3"
NS_PER_S = 1_000_000_000

# Columns that CF has a standard name for; magnetics have none and go by their long name.
STANDARD_NAMES = {
    "sensor_latitude_deg": "latitude",
    "sensor_longitude_deg": "longitude",
    "sensor_depth_m": "depth",
    "water_depth_m": "sea_floor_depth_below_sea_surface",
}
UNITS = {"latitude": "degrees_north", "longitude": "degrees_east"}
LEFT_OUT = {"line_index", "line", "kind", "source_file", "source_row", "signal", "logged_depth_m"}


def write_netcdf(path: Path, table: pd.DataFrame, lines: pd.DataFrame, attributes: dict[str, str]) -> None:
    """Write the readings of a survey's lines as trajectories.

    Parameters
    ----------
    path : pathlib.Path
        File to write, new or to be replaced.
    table : pandas.DataFrame
        One row a reading with `line_index` and any columns of the vocabulary; readings off every line are left out.
    lines : pandas.DataFrame
        One row a line: ``line`` and ``kind``; `line_index` points into it.
    attributes : dict of str to str
        Global attributes, ACDD names; those that follow from the data are added.

    """
    table = table[table["line_index"] >= 0].sort_values(["line_index", "time_utc"], kind="stable")
    present = np.unique(table["line_index"])
    with netCDF4.Dataset(path, "w", format="NETCDF4") as file:
        file.set_fill_off()
        file.createDimension("trajectory", len(present))
        file.createDimension("obs", len(table))
        _global_attributes(file, table, attributes)
        _trajectories(file, table, lines.iloc[present], present)
        for name in table:
            if name in COLUMNS and name not in LEFT_OUT:
                _variable(file, name, table[name].to_numpy())


def _global_attributes(file, table: pd.DataFrame, attributes: dict[str, str]) -> None:
    """Set what the caller gives and what follows from the data."""
    found = {
        "Conventions": CONVENTIONS,
        "featureType": "trajectory",
        "cdm_data_type": "Trajectory",
        "standard_name_vocabulary": "CF Standard Name Table v93",
        "geospatial_bounds_crs": "EPSG:4326",
        **attributes,
    }
    lat, lon = (table[f"sensor_{name}_deg"].dropna().to_numpy() for name in ("latitude", "longitude"))
    if len(lat):
        west, east = _longitudes(lon)
        found |= {"geospatial_lat_min": lat.min(), "geospatial_lat_max": lat.max()}
        found |= {"geospatial_lon_min": west, "geospatial_lon_max": east}
        found |= {"geospatial_lat_units": "degrees_north", "geospatial_lon_units": "degrees_east"}
    depth = table["sensor_depth_m"].dropna().to_numpy()
    if len(depth):
        found |= {"geospatial_vertical_min": depth.min(), "geospatial_vertical_max": depth.max()}
        found |= {"geospatial_vertical_positive": "down", "geospatial_vertical_units": "m"}
    if len(table):
        start, end = table["time_utc"].min(), table["time_utc"].max()
        found |= {"time_coverage_start": f"{start.isoformat()}Z", "time_coverage_end": f"{end.isoformat()}Z"}
    file.setncatts(found)


def _longitudes(lon: np.ndarray) -> tuple[float, float]:
    """Return the western and eastern limit; across 180 degrees the western one is the larger (ACDD allows it)."""
    ordered = np.unique(lon)
    gaps = np.diff(np.append(ordered, ordered[0] + 360.0))
    widest = int(np.argmax(gaps))
    return float(ordered[(widest + 1) % len(ordered)]), float(ordered[widest])


def _trajectories(file, table: pd.DataFrame, lines: pd.DataFrame, present: np.ndarray) -> None:
    """Write the variables that have one value a trajectory."""
    name = file.createVariable("trajectory", str, ("trajectory",))
    name.setncatts({"cf_role": "trajectory_id", "long_name": "name of the line"})
    kind = file.createVariable("kind", str, ("trajectory",))
    kind.long_name = "kind of the line"
    for row, (line, what) in enumerate(zip(lines["line"], lines["kind"], strict=True)):
        name[row] = line
        kind[row] = what
    size = file.createVariable("row_size", "i4", ("trajectory",))
    size.setncatts({"long_name": "number of observations of the line", "sample_dimension": "obs"})
    size[:] = np.searchsorted(table["line_index"], present, "right") - np.searchsorted(table["line_index"], present)


def _variable(file, name: str, values: np.ndarray) -> None:
    """Write one column as a variable of the observations."""
    column = COLUMNS[name]
    standard = STANDARD_NAMES.get(name)
    label = {"sensor_latitude_deg": "lat", "sensor_longitude_deg": "lon", "sensor_depth_m": "depth"}.get(name, name)
    about = {"long_name": column.meaning}
    if column.dtype.startswith("datetime"):
        label = "time" if name == "time_utc" else name
        variable = file.createVariable(label, "f8", ("obs",), zlib=True, shuffle=True, complevel=4)
        about |= {"units": "seconds since 1970-01-01 00:00:00 UTC", "calendar": "standard"}
        about["units_metadata"] = "leap_seconds: none"  # POSIX seconds: a leap second does not count
        if label == "time":
            about |= {"standard_name": "time", "axis": "T"}
        values = values.astype("datetime64[ns]").astype(np.int64) / NS_PER_S
    elif name == "flags" or name.endswith("_flags"):
        variable = file.createVariable(label, "i4", ("obs",), zlib=True, shuffle=True, complevel=4)
        about["flag_masks"] = np.array([int(flag) for flag in Flag], np.int32)
        about["flag_meanings"] = " ".join(flag.name.lower() for flag in Flag)
        about["comment"] = "; ".join(f"{flag.name.lower()}: {meaning}" for flag, meaning in FLAG_MEANINGS.items())
        values = values.astype(np.int32)
    elif column.dtype.startswith(("int", "uint")):
        variable = file.createVariable(label, "i4", ("obs",), zlib=True, shuffle=True, complevel=4)
        about["units"] = "1"
        values = values.astype(np.int32)
    else:
        variable = file.createVariable(label, "f8", ("obs",), zlib=True, shuffle=True, complevel=4, fill_value=np.nan)
        about["units"] = UNITS.get(standard, column.unit)
    if standard:
        about["standard_name"] = standard
    if label in ("lat", "lon", "depth"):
        about["axis"] = {"lat": "Y", "lon": "X", "depth": "Z"}[label]
        if label == "depth":
            about["positive"] = "down"
    elif label != "time":
        about["coordinates"] = "time lat lon depth"
    variable.setncatts(about)
    variable[:] = values
