"""Where a result comes from: fingerprints of our own code and checksums of the survey's files."""

import ast
import functools
import hashlib
import json
from collections.abc import Iterable
from pathlib import Path

_PACKAGE = Path(__file__).parent


def to_json(content: object, indent: int | None = None) -> str:
    """Write plain content as JSON with sorted keys, so that equal content gives equal text."""
    return json.dumps(content, sort_keys=True, indent=indent, ensure_ascii=False, allow_nan=False)


def checksum(path: str | Path) -> str:
    """Return the SHA-256 of a file, as hexadecimal text."""
    with open(path, "rb") as handle:
        return hashlib.file_digest(handle, "sha256").hexdigest()


def _module_path(module: str) -> Path | None:
    """Find the source of ``steps`` or ``steps.x.y``; None if that is not one of our modules."""
    parts = module.split(".")
    if parts[0] != _PACKAGE.name:
        return None
    base = _PACKAGE.joinpath(*parts[1:])
    for candidate in (base.with_suffix(".py"), base / "__init__.py"):
        if candidate.is_file():
            return candidate
    return None


def _imported(tree: ast.AST) -> set[str]:
    """List the modules of ours that a parsed module imports, wherever in its text."""
    found = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            found |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            found.add(node.module)
            found |= {f"{node.module}.{alias.name}" for alias in node.names}
    return {name for name in found if _module_path(name)}


@functools.cache
def fingerprint(stage: str) -> str:
    """Digest the source of a stage and of every module of ours that it imports, directly or not.

    Snakemake does not see a change in an imported module; the fingerprint, given to the rule as a parameter, makes it
    see one. Comments do not count: what is digested is the parsed code.

    Parameters
    ----------
    stage : str
        Name of the stage's module in ``steps``.

    Returns
    -------
    str
        First 16 hexadecimal digits of a SHA-256.

    """
    digest = hashlib.sha256()
    waiting, seen = [f"{_PACKAGE.name}.{stage}"], set()
    while waiting:
        module = waiting.pop()
        if module in seen:
            continue
        seen.add(module)
        waiting.extend(_imported(ast.parse(_module_path(module).read_bytes())))
    for module in sorted(seen):
        path = _module_path(module)
        digest.update(module.encode())
        digest.update(ast.dump(ast.parse(path.read_bytes())).encode())
        for data in sorted(path.parent.glob(f"{path.stem}_*")):  # its tables and templates
            if data.suffix in (".csv", ".html"):
                digest.update(data.read_bytes())
    return digest.hexdigest()[:16]


def raw_files(records: Iterable[dict]) -> list[dict]:
    """List the raw files and tables that stages read, with their checksums, wherever a record holds one."""
    found = {}

    def search(node):
        if isinstance(node, dict):
            if "sha256" in node and "file" in node:
                found[str(node["file"])] = node["sha256"]
            else:
                for inner in node.values():
                    search(inner)
        elif isinstance(node, list):
            for inner in node:
                search(inner)

    for record in records:
        search({name: value for name, value in record.items() if name != "settings"})
    return [{"file": file, "sha256": digest} for file, digest in sorted(found.items())]
