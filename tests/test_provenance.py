"""Fingerprints of stages: what must change them does, what must not does not."""

import hashlib
import shutil
import subprocess
import sys

import pytest
from conftest import ROOT

from steps import provenance


def _fingerprints(folder):
    code = "from steps import provenance as p; print(p.fingerprint('lines'), p.fingerprint('edits'))"
    return subprocess.run(
        [sys.executable, "-c", code], cwd=folder, capture_output=True, text=True, check=True
    ).stdout.split()


@pytest.fixture
def checkout(tmp_path):
    shutil.copytree(ROOT / "steps", tmp_path / "steps")
    return tmp_path


def _append(path, text):
    path.write_text(path.read_text(encoding="utf-8") + text, encoding="utf-8")


def test_a_comment_changes_no_fingerprint(checkout):
    before = _fingerprints(checkout)
    _append(checkout / "steps" / "lines.py", "\n# a remark\n")
    assert _fingerprints(checkout) == before


def test_code_of_a_stage_changes_its_own_fingerprint_only(checkout):
    lines, edits = _fingerprints(checkout)
    _append(checkout / "steps" / "lines.py", "\nNEW = 1\n")
    after = _fingerprints(checkout)
    assert after[0] != lines
    assert after[1] == edits


def test_code_of_an_imported_module_changes_its_users(checkout):
    lines, edits = _fingerprints(checkout)
    _append(checkout / "steps" / "edits.py", "\nNEW = 1\n")
    after = _fingerprints(checkout)
    assert after[0] != lines
    assert after[1] != edits


def test_checksum_is_sha256(tmp_path):
    # FIPS 180-2 appendix B.1: the digest of "abc"
    (tmp_path / "abc").write_bytes(b"abc")
    assert provenance.checksum(tmp_path / "abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert provenance.checksum(tmp_path / "abc") == hashlib.sha256(b"abc").hexdigest()


def test_json_has_sorted_keys_and_refuses_nan():
    assert provenance.to_json({"b": 1, "a": [2, "ü"]}) == '{"a": [2, "ü"], "b": 1}'
    with pytest.raises(ValueError, match="not JSON compliant"):
        provenance.to_json({"a": float("nan")})
