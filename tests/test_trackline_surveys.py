"""Real tracklines reduced end to end as surveys without a base station.

NBP9908 and RC2107, MGD77T from the NCEI trackline geophysical archive (US public domain). Neither header gives tow
distance or sensor depth, so the sensor is taken to be at the antenna; MAG_RES refers to old fields and is no truth.
"""

import json
import shutil
from datetime import datetime

import numpy as np
import pandas as pd
import ppigrf
import pytest
from conftest import run_workflow

pytestmark = pytest.mark.slow

SETTINGS = """\
survey: {{name: {name}, comment: NCEI trackline geophysical archive}}
ingest:
  readings: {{format: mgd77t, files: [raw/{file}.m77t]}}
  navigation:
    - {{format: mgd77t, files: [raw/{file}.m77t]}}
lines: {{longest_gap_s: 3600, shortest_line_km: 20}}
position:
  antenna_to_tow_point: {{forward_m: 0, starboard_m: 0}}
  layback: {{model: none}}
  longest_gap_s: 1800
  sigma_navigation_m: {sigma}
crossovers: {{longest_gap_s: 1800}}
diurnal: {{base_stations: []}}
profiles: {{spacing_km: 1.0, longest_gap_km: 10.0}}
"""
SURVEYS = {"NBP9908": 20, "RC2107": 500}  # error of a fix, m: GPS; TRANSIT satellites and dead reckoning (from memory)


@pytest.fixture(scope="module", params=SURVEYS)
def reduced(request, shared, tmp_path_factory):
    name = request.param
    folder = tmp_path_factory.mktemp(name)
    (folder / "raw").mkdir()
    shutil.copy(shared / "trackline" / f"{name.lower()}.m77t", folder / "raw")
    settings = SETTINGS.format(name=name, file=name.lower(), sigma=SURVEYS[name])
    (folder / "survey.yaml").write_text(settings, encoding="utf-8")
    done = run_workflow(folder)
    assert done.returncode == 0, done.stdout + done.stderr
    own = folder / "reduced" / name.lower()
    records = {
        p.stem.removesuffix("_record"): json.loads(p.read_text()) for p in folder.glob("reduced/**/*_record.json")
    }
    return name, own, records, done.stdout + done.stderr


def test_every_record_is_accounted_for(reduced):
    name, own, records, _ = reduced
    ledger = records["ingest"]["ledger"]
    assert ledger["records"] == {"NBP9908": 29607, "RC2107": 9421}[name]  # rows of the files but the heading
    assert ledger["kept"] == {"NBP9908": 28006, "RC2107": 6815}[name]  # rows with MAG_TOT
    assert len(pd.read_parquet(own / "corrected.parquet")) == ledger["kept"]


def test_the_main_field_agrees_with_an_independent_igrf(reduced):
    """IGRF by ppigrf goes in days where IGRF is linear in decimal years: up to 0.19 nT apart (handbook, section 3)."""
    name, own, _, _ = reduced
    table = pd.read_parquet(own / "corrected.parquet").dropna(subset=["main_field_nt"])
    table = table.iloc[np.linspace(0, len(table) - 1, 60).astype(int)]
    off = []
    for row in table.itertuples():
        when = datetime.fromisoformat(str(row.time_utc)[:19])
        parts = ppigrf.igrf(row.sensor_longitude_deg, row.sensor_latitude_deg, -row.sensor_depth_m / 1000, when)
        off.append(row.main_field_nt - np.linalg.norm(np.ravel(parts)))
    print(f"{name}: main field against ppigrf, largest difference {np.max(np.abs(off)):.3f} nT")
    assert np.max(np.abs(off)) < 0.3


def test_anomalies_are_of_the_size_of_sea_floor_anomalies(reduced):
    """Marine anomalies are some hundreds of nT (common practice); what no base station took off is in them."""
    name, own, records, _ = reduced
    profiles = pd.read_parquet(own / "profiles.parquet")
    anomaly = profiles["anomaly_nt"].dropna()
    levels = records["levelling"]
    print(
        f"{name}: {len(anomaly)} samples, anomaly {anomaly.mean():.0f} ± {anomaly.std():.0f} nT, done: {levels['done']}"
    )
    print(f"{name}: {records['crossovers']['done']}")
    assert 30 < anomaly.std() < 400
    assert np.abs(anomaly).quantile(0.99) < 1500
    assert profiles["diurnal_nt"].isna().all()


def test_what_is_missing_is_said(reduced):
    _, own, _, told = reduced
    assert "there is no base station: the diurnal term is missing" in told
    assert "the survey has no calibration line" in told
    text = next((own / "csv").glob("*.csv")).read_text(encoding="utf-8")
    assert "Not subtracted, for the whole survey: diurnal (" in text
    assert "Traceback" not in told


def test_the_date_line_is_no_seam(reduced):
    name, own, _, _ = reduced
    if name != "NBP9908":
        pytest.skip("only NBP9908 crosses 180 degrees")
    table = pd.read_parquet(own / "corrected.parquet").dropna(subset=["sensor_longitude_deg"])
    lon = table["sensor_longitude_deg"].to_numpy()
    assert (lon > 170).any()
    assert (lon < -170).any()
    profiles = pd.read_parquet(own / "profiles.parquet")
    for _, line in profiles.groupby("line"):
        step = np.abs((np.diff(line["sensor_longitude_deg"].dropna()) + 180) % 360 - 180)
        assert step.max(initial=0) < 0.5 or len(line) < 3
