"""Shared parts of the tests: where the open data lie, and skipping with the reason where they do not."""

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
