"""Several surveys in one run: each reduced on its own, all levelled together."""

import json

import numpy as np
import pandas as pd
import pytest
from conftest import planned, run_workflow
from raw_files import settings, write
from ruamel.yaml import YAML
from synthetic import Scenario, simulate

pytestmark = pytest.mark.slow

COMMON = {"seed": 21, "latitude_deg": 10.0, "longitude_deg": 179.95, "line_length_km": 24.0, "ties": 1, "seamounts": 0}
COMMON |= {"calibration": False, "sampling_s": 5.0, "regional_nt": 0.0}
MEMBERS = {
    "north": Scenario(lines=4, **COMMON),
    # the same sea floor a month later, its lines between those of the first and across its tie
    "south": Scenario(lines=5, line_spacing_km=3.1, start="2024-07-20T06:00:00", **COMMON),
}


def _save(path, content):
    with open(path, "w", encoding="utf-8") as handle:
        YAML(typ="safe").dump(content, handle)


@pytest.fixture(scope="module")
def collection(tmp_path_factory):
    folder = tmp_path_factory.mktemp("collection")
    for name, scenario in MEMBERS.items():
        survey = simulate(scenario)
        write(survey, folder / name)
        _save(folder / name / "survey.yaml", settings(survey))
    _save(folder / "survey.yaml", {"survey": {"name": "Both"}, "members": ["north", "south"]})
    done = run_workflow(folder)
    assert done.returncode == 0, done.stdout + done.stderr
    return folder


def test_every_member_has_its_products_under_the_collection(collection):
    for name in MEMBERS:
        own = collection / "reduced" / name
        assert (own / "profiles.parquet").is_file()
        assert (own / f"{name}.nc").is_file()
        assert not (collection / name / "reduced").exists()
    assert (collection / "reduced" / "report.html").is_file()


def test_crossings_between_surveys_are_levelled_with_the_others(collection):
    crossings = pd.read_parquet(collection / "reduced" / "levelling_crossovers.parquet")
    between = crossings["survey_1"] != crossings["survey_2"]
    assert between.sum() >= 4
    levels = pd.read_parquet(collection / "reduced" / "levelling_lines.parquet")
    assert set(levels["survey"]) == set(MEMBERS)
    used = np.isfinite(crossings["residual_nt"]) & between
    assert used.any()
    rms = [float(np.sqrt(np.mean(crossings.loc[used, name] ** 2))) for name in ("mismatch_nt", "residual_nt")]
    print(f"{int(used.sum())} crossings between the surveys: rms {rms[0]:.2f} nT before, {rms[1]:.2f} nT after")
    assert rms[1] < rms[0]


def test_a_second_run_does_nothing_and_a_member_s_change_leaves_the_other_alone(collection):
    assert planned(collection) == set()
    path = collection / "south" / "survey.yaml"
    text = path.read_text(encoding="utf-8")
    content = YAML(typ="safe").load(text)
    content["screen"] = {**content.get("screen", {}), "threshold": 7.0}
    _save(path, content)
    done = run_workflow(collection, "-n")
    path.write_text(text, encoding="utf-8")
    told = done.stdout + done.stderr
    assert "reduced/south/screen.parquet" in told
    assert "output: reduced/north/screen.parquet" not in told
    assert "output: reduced/crossovers.parquet" in told


def test_a_mistake_in_a_member_is_told_with_its_folder(collection):
    path = collection / "north" / "survey.yaml"
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace("lines.csv", "lnies.csv"), encoding="utf-8")
    done = run_workflow(collection)
    path.write_text(text, encoding="utf-8")
    assert done.returncode == 1
    assert "north/survey.yaml" in done.stderr
    assert "lines.log: must name a file" in done.stderr
    assert "Traceback" not in done.stderr


def test_records_balance_for_every_member(collection):
    for name in MEMBERS:
        ledger = json.loads((collection / "reduced" / name / "ingest_record.json").read_text())["ledger"]
        assert ledger["records"] == sum(number for key, number in ledger.items() if key != "records")
