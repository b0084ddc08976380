"""The workflow on the demo survey: what reruns after which change, and what a failed or broken run leaves."""

import gzip
import hashlib
import re
import shutil
import stat

import pytest
from conftest import ROOT, planned, run_workflow

ORDER = [
    "ingest",
    "lines",
    "screen",
    "position",
    "main_field",
    "diurnal",
    "heading",
    "crossovers",
    "levelling",
    "profiles",
    "exports",
    "report",
]
EVERYTHING = set(ORDER)
FROM_POSITION = EVERYTHING - {"ingest", "lines", "screen"}
FROM_PROFILES = {"profiles", "exports", "report"}
FROM_LEVELLING = {"levelling"} | FROM_PROFILES
FROM_DIURNAL = {"diurnal", "heading", "crossovers"} | FROM_LEVELLING


@pytest.fixture
def demo(reduced_demo, tmp_path):
    """Return a copy of the reduced demo, to change."""
    return shutil.copytree(reduced_demo, tmp_path / "demo_survey", symlinks=True)


def _digests(folder):
    """Digest every product; history, and the one part of the report that tells of it, depend on earlier runs."""
    found = {}
    for path in sorted((folder / "reduced").rglob("*")):
        if path.is_file() and not {"logs", "history"} & set(path.parts):
            content = path.read_bytes()
            if path.name == "report.html":
                content = re.sub(rb"(?s)<!-- against the run before.*?<!-- end of the part", b"", content)
            found[str(path.relative_to(folder))] = hashlib.sha256(content).hexdigest()
    return found


def _edit(path, old, new):
    text = path.read_text(encoding="utf-8")
    assert re.search(old, text, re.MULTILINE), f"{old!r} does not stand in {path.name}"
    path.write_text(re.sub(old, new, text, count=1, flags=re.MULTILINE), encoding="utf-8")


def _add_edit(folder, row):
    path = folder / "edits.csv"
    path.write_text(path.read_text(encoding="utf-8").rstrip("\n") + "\n" + row + "\n", encoding="utf-8")


def _a_line(folder):
    for row in (folder / "lines.csv").read_text(encoding="utf-8").splitlines()[1:]:
        if not row.startswith("#") and ",line," in row.replace(" ", ""):
            return row.split(",")[0].strip()
    raise AssertionError("the demo has a line")


def test_a_second_run_does_nothing(reduced_demo):
    done = run_workflow(reduced_demo)
    assert done.returncode == 0
    assert "Nothing to be done" in done.stdout + done.stderr


CHANGES = {
    "a setting of screening": (lambda f: _edit(f / "survey.yaml", r"^(  threshold:) *\S+", r"\1 6.5"), EVERYTHING - {"ingest", "lines", "position", "main_field", "diurnal"}),
    "a setting of the layback": (lambda f: _edit(f / "survey.yaml", r"(forward_m:) *-?[\d.]+", r"\1 -46.5"), FROM_POSITION),
    "a setting of the diurnal": (lambda f: _edit(f / "survey.yaml", r"^(  slow_period_h:) *\S+", r"\1 4.5"), FROM_DIURNAL),
    "a setting of the heading": (lambda f: _edit(f / "survey.yaml", r"^(  significance:) *\S+", r"\1 0.02"), FROM_DIURNAL - {"diurnal"}),
    "a setting of the crossovers": (lambda f: _edit(f / "survey.yaml", r"^(  smallest_angle_deg:) *\S+", r"\1 20.0"), FROM_LEVELLING | {"crossovers"}),
    "a setting of levelling": (lambda f: _edit(f / "survey.yaml", r"^(  robust:) *\S+", r"\1 false"), FROM_LEVELLING),
    "a setting of the profiles": (lambda f: _edit(f / "survey.yaml", r"^(  spacing_km:) *\S+", r"\1 0.2"), FROM_PROFILES),
    "the ship's name": (lambda f: _edit(f / "survey.yaml", r"^(  vessel:).*", r"\1 Another ship"), FROM_PROFILES),
    "one row of the cable log": (lambda f: _edit(f / "cable.csv", r"^(20[^,\n]+, *)(\d)", r"\g<1>1\2"), FROM_POSITION),
    "the line log": (lambda f: _edit(f / "lines.csv", r"^(\w[^,\n]*),( *)line,", r"\1,\2tie,"), EVERYTHING - {"ingest"}),
    "an edit that rejects": (lambda f: _add_edit(f, f"reject,{_a_line(f)},,,,test,T,2025-01-01"), EVERYTHING - {"ingest", "lines", "position", "main_field", "diurnal"}),
    "an edit that holds a line": (lambda f: _add_edit(f, f"hold_line,{_a_line(f)},,,,test,T,2025-01-01"), FROM_LEVELLING),
    "a comment in the settings": (lambda f: _edit(f / "survey.yaml", r"\A", "# a remark\n"), set()),
}  # fmt: skip


@pytest.mark.parametrize("change", CHANGES)
def test_a_change_reruns_what_depends_on_it(demo, change):
    make, stages = CHANGES[change]
    make(demo)
    # position and what follows read the table of lines; a change of the lines may leave it as it is
    assert planned(demo) == stages


def test_the_reason_of_a_rerun_is_told(demo):
    _edit(demo / "survey.yaml", r"^(  robust:) *\S+", r"\1 false")
    told = run_workflow(demo, "-n")
    assert '"robust": true' in told.stdout + told.stderr
    assert '"robust": false' in told.stdout + told.stderr


def test_a_changed_raw_file_reruns_everything_after_its_reader(demo):
    base = sorted((demo / "raw").rglob("*.min*"))[0]
    base.write_bytes(base.read_bytes() + gzip.compress(b""))  # another file with the same records
    assert planned(demo) == FROM_DIURNAL


def test_a_missing_result_is_made_again(demo):
    (path,) = (demo / "reduced").glob("*/profiles.parquet")
    path.unlink()
    assert planned(demo) == FROM_PROFILES


def test_changed_code_of_a_stage_reruns_it(demo, tmp_path):
    checkout = tmp_path / "checkout"
    shutil.copytree(ROOT / "steps", checkout / "steps", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copytree(ROOT / "profiles", checkout / "profiles")
    shutil.copy(ROOT / "Snakefile", checkout)
    assert planned(demo, checkout=checkout) == set()
    with open(checkout / "steps" / "levelling.py", "a", encoding="utf-8") as module:
        module.write("\n# a comment\n")
    assert planned(demo, checkout=checkout) == set()
    with open(checkout / "steps" / "levelling.py", "a", encoding="utf-8") as module:
        module.write("\nCHANGED = True\n")
    assert planned(demo, checkout=checkout) == FROM_LEVELLING


def test_a_stage_that_failed_is_not_forgotten(demo):
    log = demo / "cable.csv"
    good = log.read_text(encoding="utf-8")
    log.write_text(re.sub(r"^(20[^,\n]+,)[^\n]*", r"\1 long", good, count=1, flags=re.MULTILINE), encoding="utf-8")
    failed = run_workflow(demo)
    assert failed.returncode == 1
    assert "cable.csv row" in failed.stdout + failed.stderr
    assert "must be a number" in failed.stdout + failed.stderr
    assert "Traceback" not in failed.stdout + failed.stderr
    assert "position" in planned(demo)
    log.write_text(good, encoding="utf-8")
    assert "position" in planned(demo)


def test_a_mistake_in_the_settings_is_told_before_any_work(demo):
    _edit(demo / "survey.yaml", r"^(  robust:)", "  robst:")
    failed = run_workflow(demo)
    assert failed.returncode == 1
    assert "levelling.robst: is not a setting. Did you mean robust?" in failed.stderr
    assert "Traceback" not in failed.stderr


def test_a_folder_without_a_survey_is_told_how_to_name_one(tmp_path):
    failed = run_workflow(tmp_path)
    assert failed.returncode == 1
    assert "snakemake -d FOLDER" in failed.stderr
    assert "Traceback" not in failed.stderr


def test_raw_files_are_not_touched(reduced_demo):
    for path in sorted((ROOT / "demo_survey").rglob("*")):
        relative = path.relative_to(ROOT / "demo_survey")
        if path.is_file() and relative.parts[0] not in ("reduced", ".snakemake"):
            assert (reduced_demo / relative).read_bytes() == path.read_bytes(), relative


def test_all_that_is_written_lies_under_reduced(reduced_demo):
    raw = {path.name for path in (ROOT / "demo_survey").iterdir()}
    assert {path.name for path in reduced_demo.iterdir()} - raw - {"reduced", ".snakemake"} == set()


@pytest.mark.slow
def test_one_core_a_read_only_checkout_and_another_place_give_the_same_bytes(reduced_demo, tmp_path):
    from conftest import copy_demo

    checkout = tmp_path / "checkout"
    shutil.copytree(ROOT / "steps", checkout / "steps", ignore=shutil.ignore_patterns("__pycache__"))
    shutil.copytree(ROOT / "profiles", checkout / "profiles")
    shutil.copy(ROOT / "Snakefile", checkout)
    for path in [checkout, *checkout.rglob("*")]:
        path.chmod(path.stat().st_mode & ~(stat.S_IWUSR | stat.S_IWGRP | stat.S_IWOTH))
    again = copy_demo(tmp_path / "another place" / "survey")
    done = run_workflow(again, "-j1", checkout=checkout)
    for path in [checkout, *checkout.rglob("*")]:
        path.chmod(path.stat().st_mode | stat.S_IWUSR)
    assert done.returncode == 0, done.stdout + done.stderr
    assert _digests(again) == _digests(reduced_demo)


@pytest.mark.slow
def test_a_corrected_cable_row_gives_what_a_fresh_run_gives(demo, tmp_path):
    from conftest import copy_demo

    change = CHANGES["one row of the cable log"][0]
    fresh = copy_demo(tmp_path / "fresh")
    change(demo)
    change(fresh)
    for folder in (demo, fresh):
        done = run_workflow(folder)
        assert done.returncode == 0, done.stdout + done.stderr
    assert _digests(demo) == _digests(fresh)
