"""Open formats, read back by independent readers: xarray, a CF checker, GDAL, and the written rules of MGD77T."""

import subprocess
import sys

import numpy as np
import pandas as pd
import pyogrio
import pytest
import xarray as xr

from steps import exports
from steps.columns import FLAG_MEANINGS, Flag
from steps.formats.geopackage import split_line, write_geopackage
from steps.formats.mgd77t import read_header, read_mgd77t
from steps.formats.netcdf import write_netcdf


@pytest.fixture(scope="module")
def product(reduced_demo):
    """Return the folder of the demo's products and its corrected readings."""
    (folder,) = (path.parent for path in (reduced_demo / "reduced").glob("*/corrected.parquet"))
    return folder, pd.read_parquet(folder / "corrected.parquet"), pd.read_parquet(folder / "line_table.parquet")


def _only(folder, ending):
    (path,) = folder.glob(f"*.{ending}")
    return path


def test_netcdf_holds_the_readings_of_all_lines(product):
    folder, table, lines = product
    own = table[table["line_index"] >= 0].sort_values(["line_index", "time_utc"], kind="stable")
    with xr.open_dataset(_only(folder, "nc")) as data:
        assert data.attrs["featureType"] == "trajectory"
        assert data.attrs["Conventions"].startswith("CF-1.")
        assert list(data["trajectory"].to_numpy()) == lines["line"].tolist()
        assert data["row_size"].to_numpy().tolist() == np.bincount(own["line_index"], minlength=len(lines)).tolist()
        np.testing.assert_array_equal(data["anomaly_nt"], own["anomaly_nt"])
        np.testing.assert_array_equal(data["lat"], own["sensor_latitude_deg"])
        off = data["time"].to_numpy().astype("datetime64[ns]") - own["time_utc"].to_numpy()
        assert np.abs(off).max() < np.timedelta64(1, "us")
        assert data["anomaly_nt"].attrs["units"] == "nT"
        assert data["flags"].attrs["flag_masks"].tolist() == [int(flag) for flag in Flag]
        assert len(data["flags"].attrs["flag_meanings"].split()) == len(FLAG_MEANINGS)
        # the identity holds in the file, absent terms left out
        total = data["total_field_nt"] - data["main_field_nt"]
        for term in ("diurnal_nt", "heading_nt", "level_nt"):
            total = total - data[term].fillna(0.0)
        np.testing.assert_allclose(total.where(data["anomaly_nt"].notnull()), data["anomaly_nt"], rtol=0, atol=1e-9)


@pytest.mark.slow
def test_netcdf_passes_a_cf_checker(product):
    """IOOS compliance checker, test suite for CF-1.11."""
    folder, _, _ = product
    code = (
        "import sys; from compliance_checker.runner import CheckSuite, ComplianceChecker;"
        "CheckSuite.load_all_available_checkers();"
        "good, _ = ComplianceChecker.run_checker(sys.argv[1], ['cf:1.11'], 0, 'strict'); sys.exit(not good)"
    )
    done = subprocess.run([sys.executable, "-c", code, str(_only(folder, "nc"))], capture_output=True, text=True)
    assert done.returncode == 0, done.stdout + done.stderr


def test_geopackage_opens_in_gdal(product):
    folder, table, lines = product
    path = _only(folder, "gpkg")
    assert [str(name) for name, _ in pyogrio.list_layers(path)] == ["tracks", "profiles", "crossings", "rejected"]
    tracks = pyogrio.read_dataframe(path, layer="tracks")
    assert tracks.crs.to_epsg() == 4326
    assert tracks["line"].tolist() == lines["line"].tolist()
    kept = table[table["anomaly_nt"].notna()].groupby("line_index").size()
    assert tracks["kept"].tolist() == [int(kept.get(k, 0)) for k in range(len(lines))]
    crossings = pyogrio.read_dataframe(path, layer="crossings")
    written = pd.read_parquet(folder.parent / "levelling_crossovers.parquet")
    assert len(crossings) == len(written)
    np.testing.assert_allclose(crossings["mismatch_nt"], written["mismatch_nt"])
    assert pyogrio.read_info(path, layer="rejected")["features"] > 0


def test_mgd77t_reads_back_to_the_same_values(product):
    folder, table, _ = product
    back, counts = read_mgd77t(_only(folder, "m77t"))
    assert counts["records"] == len(table)
    # MGD77T gives minutes to a few decimals; total field is written with its diurnal correction and read back without
    off = back["time_utc"].to_numpy() - table["time_utc"].to_numpy()
    assert np.abs(off).max() <= np.timedelta64(1, "ms")
    np.testing.assert_allclose(back["total_field_nt"], table["total_field_nt"], rtol=0, atol=0.0021)
    header = read_header(_only(folder, "h77t"))
    assert header["FORMAT_77"] == "MGD77T"
    assert (header["M_REFFL_CO"], header["MAG_REFFLD"]) == ("88", "IGRF-14")  # no code for this generation


# -- parts -----------------------------------------------------------------------------------------------------------


def test_a_track_across_180_degrees_is_split_there():
    lon, lat = np.array([179.0, 179.9, -179.9, -179.0, 180.0]), np.array([0.0, 0.0, 1.0, 1.0, 1.0])
    shape = split_line(lon, lat)
    parts = [np.array(part.coords) for part in shape.geoms]
    assert len(parts) >= 2
    for part in parts:
        assert np.abs(np.diff(part[:, 0])).max() < 180
    np.testing.assert_allclose(parts[0][-1], [180.0, 0.5])
    np.testing.assert_allclose(parts[1][0], [-180.0, 0.5])


def test_gaps_are_not_bridged_on_the_map():
    shape = split_line(np.array([0.0, 1.0, np.nan, 2.0, 3.0, np.nan, 4.0]), np.zeros(7))
    assert [len(part.coords) for part in shape.geoms] == [2, 2]
    assert split_line(np.array([np.nan, 1.0]), np.zeros(2)) is None


def test_bad_names_are_safe(tmp_path):
    names = ["<b>'\";--", "a/b\\c", "\U0001f9ed" * 100]
    table = pd.DataFrame(
        {
            "line_index": np.repeat(np.arange(3), 5),
            "time_utc": np.datetime64("2024-05-01", "ns") + np.arange(15) * np.timedelta64(1, "s"),
            "sensor_latitude_deg": 10.0,
            "sensor_longitude_deg": np.linspace(0, 0.1, 15),
            "sensor_depth_m": 10.0,
            "anomaly_nt": 1.0,
        }
    )
    write_netcdf(tmp_path / "a.nc", table, pd.DataFrame({"line": names, "kind": "line"}), {"title": names[0]})
    with xr.open_dataset(tmp_path / "a.nc") as data:
        assert list(data["trajectory"].to_numpy()) == names
    shape = split_line(np.array([0.0, 1.0]), np.zeros(2))
    write_geopackage(tmp_path / "a.gpkg", {"tracks": (np.array([shape] * 3), pd.DataFrame({"line": names}))})
    assert pyogrio.read_dataframe(tmp_path / "a.gpkg", layer="tracks")["line"].tolist() == names
    assert exports.survey_id("\U0001f9ed") == "SURVEY"
    assert exports.survey_id("Tern Ridge 2024!") == "TERNRIDG"


def test_a_survey_without_lines_still_gives_files(tmp_path):
    table = pd.DataFrame(
        {
            "line_index": np.zeros(0, np.int32),
            "time_utc": np.zeros(0, "datetime64[ns]"),
            **{
                name: np.zeros(0)
                for name in ("sensor_latitude_deg", "sensor_longitude_deg", "sensor_depth_m", "anomaly_nt")
            },
        }
    )
    write_netcdf(tmp_path / "a.nc", table, pd.DataFrame({"line": [], "kind": []}), {})
    with xr.open_dataset(tmp_path / "a.nc") as data:
        assert data.sizes["obs"] == 0
