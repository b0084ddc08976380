"""Shared parts of the tests: the open data, running the workflow, and the demo survey reduced once."""

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
SHARED = ROOT.parent / "shared" / "data"


@pytest.fixture(scope="session")
def shared() -> Path:
    """Folder of real open data beside the repository."""
    if not SHARED.is_dir():
        pytest.skip("the real open data are not beside the repository (../shared/data)")
    return SHARED


def run_workflow(folder: Path, *words: str, checkout: Path = ROOT) -> subprocess.CompletedProcess:
    """Run ``snakemake -d FOLDER`` as a user would, from the checkout."""
    command = [sys.executable, "-m", "snakemake", "-d", str(folder), *words]
    environment = {key: value for key, value in os.environ.items() if not key.startswith("PYTEST")}
    return subprocess.run(
        command, cwd=checkout, capture_output=True, text=True, env=environment, stdin=subprocess.DEVNULL, timeout=1200
    )


def planned(folder: Path, *words: str, checkout: Path = ROOT) -> set[str]:
    """Return the names of the rules that a run would run now, by a dry run."""
    done = run_workflow(folder, "-n", *words, checkout=checkout)
    assert done.returncode == 0, done.stdout + done.stderr
    return set(re.findall(r"^(?:local)?rule (\w+):", done.stdout + done.stderr, re.MULTILINE)) - {"all"}


def copy_demo(folder: Path) -> Path:
    """Copy the raw demo survey, without results, into a new folder."""
    return Path(shutil.copytree(ROOT / "demo_survey", folder, ignore=shutil.ignore_patterns("reduced", ".snakemake")))


@pytest.fixture(scope="session")
def reduced_demo(tmp_path_factory) -> Path:
    """Return a copy of the demo survey, reduced. Tests that change it copy it first."""
    folder = copy_demo(tmp_path_factory.mktemp("demo") / "demo_survey")
    done = run_workflow(folder)
    assert done.returncode == 0, done.stdout + done.stderr
    (folder.parent / "screen.txt").write_text(done.stdout + done.stderr)
    return folder
