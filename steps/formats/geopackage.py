"""Write tracks, profiles, crossings and rejected stretches as one GeoPackage (OGC 12-128), split at 180 degrees.

Written through GDAL by pyogrio; coordinates are WGS 84 longitude and latitude (EPSG:4326).
"""

from pathlib import Path

import numpy as np
import pandas as pd
import shapely

FIXED_DATE = (
    "1970-01-01T00:00:00.000Z"  # the format wants a date of change: a fixed one keeps equal results equal bytes
)


def split_line(lon: np.ndarray, lat: np.ndarray) -> shapely.MultiLineString | None:
    """Make a track into lines that do not cross 180 degrees of longitude; gaps (NaN) are not bridged.

    Parameters
    ----------
    lon, lat : array of float, shape (n,)
        Positions, degrees.

    Returns
    -------
    shapely.MultiLineString or None
        Parts of two points or more; None if there are none.

    """
    good = np.isfinite(lon) & np.isfinite(lat)
    parts = []
    for run in np.split(np.arange(len(lon)), np.flatnonzero(np.diff(good.astype(np.int8))) + 1):
        if not len(run) or not good[run[0]]:
            continue
        x, y = (lon[run] + 180.0) % 360.0 - 180.0, lat[run]
        jumps = np.flatnonzero(np.abs(np.diff(x)) > 180.0)
        start, head = 0, []
        for jump in jumps:
            side = 180.0 if x[jump] > 0 else -180.0
            ahead = x[jump + 1] + (360.0 if side > 0 else -360.0)
            share = (side - x[jump]) / (ahead - x[jump]) if ahead != x[jump] else 0.0
            level = y[jump] + share * (y[jump + 1] - y[jump])
            parts.append([*head, *zip(x[start : jump + 1], y[start : jump + 1], strict=True), (side, level)])
            head, start = [(-side, level)], jump + 1
        parts.append([*head, *zip(x[start:], y[start:], strict=True)])
    lines = [part for part in parts if len(part) >= 2]
    return shapely.MultiLineString(lines) if lines else None


def write_geopackage(path: Path, layers: dict[str, tuple[np.ndarray, pd.DataFrame]]) -> None:
    """Write layers of geometries with their attributes.

    Parameters
    ----------
    path : pathlib.Path
        File to write; an old one is replaced.
    layers : dict of str to (array of shapely geometries, pandas.DataFrame)
        Geometries in longitude, latitude, and one row of attributes for each. A layer without rows is written empty.

    """
    import pyogrio
    from pyogrio.raw import write

    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": FIXED_DATE})
    path.unlink(missing_ok=True)
    for number, (name, (geometries, attributes)) in enumerate(layers.items()):
        kind = "Point" if name == "crossings" else "MultiLineString"
        fields = [str(column) for column in attributes]
        write(
            path,
            np.array([shapely.to_wkb(shape) for shape in geometries], dtype=object),
            [_plain(attributes[column]) for column in attributes],
            fields,
            layer=name,
            driver="GPKG",
            geometry_type=kind,
            crs="EPSG:4326",
            append=number > 0,
        )


def _plain(values: pd.Series) -> np.ndarray:
    """Return a column as numpy values that GDAL takes."""
    if values.dtype.kind == "M":
        return values.to_numpy().astype("datetime64[ms]")
    if values.dtype.kind in "biuf":
        return values.to_numpy()
    return values.astype(object).to_numpy()
