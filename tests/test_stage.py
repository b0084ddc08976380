"""Running a stage: outputs whole or not at all, mistakes as sentences, nothing left behind."""

import json
import subprocess
import sys

import pandas as pd
import pytest
from conftest import ROOT

from steps import settings, stage


@pytest.fixture
def job(tmp_path):
    outputs = [tmp_path / "out" / name for name in ("lines.parquet", "line_table.parquet", "csv", "lines_record.json")]
    return stage.Job("lines", {}, outputs, {"settings": settings.Lines().model_dump(mode="json"), "code": "c"})


def _write(job, value):
    job.write("lines", pd.DataFrame({"line_index": [value]}))
    table = pd.DataFrame({"line": ["L"], "kind": ["line"], "readings": [1]})
    job.write("line_table", table.assign(start_utc=pd.Timestamp("2024-05-01"), end_utc=pd.Timestamp("2024-05-02")))
    (job.target("csv") / "a.csv").write_text(str(value))


def test_outputs_take_their_names_only_at_the_end(job, tmp_path):
    _write(job, 1)
    assert not (tmp_path / "out" / "lines.parquet").exists()
    job.finish()
    assert pd.read_parquet(tmp_path / "out" / "lines.parquet")["line_index"].tolist() == [1]
    assert (tmp_path / "out" / "csv" / "a.csv").read_text() == "1"
    assert json.loads((tmp_path / "out" / "lines_record.json").read_text())["code"] == "c"
    assert not list((tmp_path / "out").glob(".*"))


def test_an_abandoned_stage_leaves_the_former_results(job, tmp_path):
    _write(job, 1)
    job.finish()
    _write(job, 2)
    job.abandon()
    assert pd.read_parquet(tmp_path / "out" / "lines.parquet")["line_index"].tolist() == [1]
    assert (tmp_path / "out" / "csv" / "a.csv").read_text() == "1"
    assert not list((tmp_path / "out").glob(".*"))


def test_what_a_killed_run_left_is_cleared_away(job, tmp_path):
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / ".lines-abc.parquet").write_bytes(b"half")
    outputs = [tmp_path / "out" / "lines.parquet", tmp_path / "out" / "lines_record.json"]
    stage.Job("lines", {}, outputs, {"settings": settings.Lines().model_dump(mode="json")})
    assert not list((tmp_path / "out").glob(".*"))


def test_a_forgotten_output_is_our_fault(job):
    job.write("lines", pd.DataFrame({"line_index": [1]}))
    with pytest.raises(KeyError, match="did not write .*line_table"):
        job.finish()


def _run(tmp_path, log, limit=""):
    time = pd.DataFrame({"time_utc": pd.date_range("2024-05-01", periods=5000, freq="s").astype("datetime64[ns]")})
    time.to_parquet(tmp_path / "readings.parquet")
    (tmp_path / "lines.csv").write_text(log)
    options = json.dumps({"settings": settings.Lines(log="lines.csv").model_dump(mode="json")})
    words = [
        "-m",
        "steps.lines",
        "--log",
        str(tmp_path / "lines.csv"),
        "--readings",
        str(tmp_path / "readings.parquet"),
    ]
    words += ["--write", *(str(tmp_path / "out" / name) for name in ("lines.parquet", "line_table.parquet"))]
    words += [str(tmp_path / "out" / "lines_record.json"), "--options", options]
    shell = f'{limit}exec "$0" "$@"'
    return subprocess.run(["bash", "-c", shell, sys.executable, *words], cwd=ROOT, capture_output=True, text=True)


LOG = "line,kind,start_utc,end_utc\nL1,line,2024-05-01T00:00:00,2024-05-01T01:00:00\n"


def test_a_mistake_is_a_sentence_and_status_1(tmp_path):
    done = _run(tmp_path, LOG.replace(",line,", ",lien,"))
    assert done.returncode == 1
    assert done.stderr.strip().endswith("kind: must be one of line, tie, calibration, transit. Got lien.")
    assert not (tmp_path / "out" / "lines.parquet").exists()


def test_a_full_disk_is_a_sentence_and_the_former_results_stay(tmp_path):
    """A limit on the size of files stands for a full disk: writing fails in the same way."""
    assert _run(tmp_path, LOG).returncode == 0
    before = {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()}
    done = _run(tmp_path, LOG.replace("T01:", "T00:30").replace("00:3000", "00:30"), "ulimit -f 1; ")
    assert done.returncode == 1
    assert "cannot be read or written." in done.stderr
    assert "former results are untouched" in done.stderr
    assert "Traceback" not in done.stderr
    assert {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()} == before
