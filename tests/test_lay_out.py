"""A new survey laid out from its raw files, and checked without being reduced."""

import re
import shutil
import subprocess
import sys

import pytest
from conftest import ROOT, copy_demo
from ruamel.yaml import YAML

from steps import lay_out


def _run(module, folder):
    command = [sys.executable, "-m", f"steps.{module}", str(folder)]
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True)


@pytest.fixture(scope="module")
def laid_out(tmp_path_factory):
    folder = copy_demo(tmp_path_factory.mktemp("new") / "cruise")
    original = YAML(typ="safe").load((folder / "survey.yaml").read_text(encoding="utf-8"))
    (folder / "survey.yaml").unlink()
    done = _run("lay_out", folder)
    assert done.returncode == 0, done.stderr
    return folder, original, done.stdout


def test_files_are_recognised_and_guesses_marked(laid_out):
    folder, original, told = laid_out
    text = (folder / "survey.yaml").read_text(encoding="utf-8")
    for kind, part in (
        ("magnetometer", "raw/magnetometer"),
        ("nmea", "raw/navigation"),
        ("iaga2002", "raw/base_station"),
    ):
        assert re.search(rf"{kind} +{part}", told)
    assert text.count("CONFIRM") >= 5
    assert text.count("FILL IN") >= 4
    guessed = YAML(typ="safe").load(text)["ingest"]["readings"]
    known = original["ingest"]["readings"]
    for key in ("delimiter", "skip_rows", "time", "columns"):
        assert guessed[key] == known[key], key


def test_filled_in_it_passes_the_check_and_nothing_is_written(laid_out):
    folder, _, _ = laid_out
    path = folder / "survey.yaml"
    text = path.read_text(encoding="utf-8")
    filled = text.replace("offset_s: FILL IN", "offset_s: 3.4").replace("name: FILL IN", "name: Base")
    path.write_text(re.sub(r"_m: FILL IN", "_m: 1.0", filled), encoding="utf-8")
    before = sorted(folder.rglob("*"))
    done = _run("check", folder)
    path.write_text(text, encoding="utf-8")
    assert done.returncode == 0, done.stdout + done.stderr
    assert "No problem found." in done.stdout
    assert sorted(folder.rglob("*")) == before


def test_the_check_names_what_is_not_filled_in(laid_out):
    done = _run("check", laid_out[0])
    assert done.returncode == 1
    assert "clock.offset_s: must be a number. Got FILL IN." in done.stdout
    assert "antenna_to_tow_point.forward_m: must be a number. Got FILL IN." in done.stdout


def test_settings_that_are_there_are_left_alone(laid_out):
    done = _run("lay_out", laid_out[0])
    assert done.returncode == 1
    assert "is there already and is left alone" in done.stderr


def test_all_problems_of_the_records_are_told_at_once(tmp_path):
    folder = copy_demo(tmp_path / "cruise")
    cable = folder / "cable.csv"
    cable.write_text(
        re.sub(r"(?m)^(20[^,]+,)\s*\d+", r"\1 long", cable.read_text(encoding="utf-8"), count=1), encoding="utf-8"
    )
    base = sorted((folder / "raw" / "base_station").iterdir())[1]
    base.write_bytes(base.read_bytes()[:5000])
    logger = sorted((folder / "raw" / "magnetometer").iterdir())
    shutil.copyfile(base, logger[0])
    done = _run("check", folder)
    assert done.returncode == 1
    assert "cable.csv row" in done.stdout
    assert f"{base.name}: must be a whole gzip file" in done.stdout
    assert logger[0].name in done.stdout
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize(
    ("text", "kind", "columns"),
    [
        ("time,lat,lon,hdg\n" + "2024-05-01T00:00:00,10.5,-179.0,359\n" * 5, "navigation", {"latitude_deg": "lat"}),
        (
            "utc TF\n" + "".join(f"1714521600.{k} 4500{k}.5\n" for k in range(5)),
            "magnetometer",
            {"total_field_nt": "TF"},
        ),
        ("notes of the watch\nall well\n", "unknown", {}),
        ("$GPGGA,000000,3112.5,S,17959.9,W,1,09,0.9,12.0,M,,,,\n", "nmea", {}),
    ],
)
def test_kinds_of_files(tmp_path, text, kind, columns):
    (tmp_path / "file.txt").write_text(text)
    guess = lay_out.what_is(tmp_path / "file.txt")
    assert guess["kind"] == kind
    assert columns.items() <= guess.get("columns", {}).items()


def test_a_binary_file_is_unknown(tmp_path):
    (tmp_path / "file.bin").write_bytes(b"\0\1\2" * 100)
    assert lay_out.what_is(tmp_path / "file.bin")["kind"] == "unknown"
