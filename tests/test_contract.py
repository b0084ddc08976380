"""What holds for every stage: one name, documented settings, known columns, no trace of where it was written."""

import ast
import re
import subprocess

import pytest
from conftest import ROOT
from pydantic import BaseModel
from ruamel.yaml import YAML

from steps import columns, settings

SNAKEFILE = (ROOT / "Snakefile").read_text(encoding="utf-8")
RULES = [name for name in re.findall(r"^rule (\w+):", SNAKEFILE, re.MULTILINE) if name != "all"]


@pytest.mark.parametrize("stage", RULES)
def test_a_stage_has_one_name_everywhere(stage):
    assert (ROOT / "steps" / f"{stage}.py").is_file()
    assert (ROOT / "tests" / f"test_{stage}.py").is_file()
    assert stage in settings.SECTIONS
    assert f"python -m steps.{stage} " in SNAKEFILE
    assert f"rules.{stage}.output" in SNAKEFILE.split("rule all:")[1], "rule all asks for every stage's files"


def test_the_rules_are_the_sections_in_order():
    assert [name for name in settings.SECTIONS if name in RULES] == RULES


@pytest.mark.parametrize("stage", RULES)
def test_a_stage_is_pure_functions_and_a_short_main(stage):
    tree = ast.parse((ROOT / "steps" / f"{stage}.py").read_text(encoding="utf-8"))
    functions = {node.name: node for node in tree.body if isinstance(node, ast.FunctionDef)}
    assert "main" in functions
    for node in ast.walk(tree):
        assert not isinstance(node, ast.Assert), f"assert on line {node.lineno}: user data deserve a sentence"
    for name, node in functions.items():
        if not name.startswith("_"):
            assert ast.get_docstring(node), f"{name} has no docstring"


def _fields(model, prefix=""):
    for name, field in model.model_fields.items():
        yield f"{prefix}{name}", field
        yield from ((f"{prefix}{name}.{inner}", f) for part in _models(field.annotation) for inner, f in _fields(part))


def _models(annotation):
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for part in getattr(annotation, "__args__", ()) for model in _models(part)]


def test_every_setting_is_described():
    for name, field in _fields(settings.Single):
        if not _models(field.annotation) and name.rsplit(".", 1)[-1] not in ("format", "files"):
            assert field.description, f"{name} has no description"


def test_the_demo_s_settings_are_the_manual():
    """Every setting stands in the demo's survey.yaml, in use or as a commented line."""
    text = (ROOT / "demo_survey" / "survey.yaml").read_text(encoding="utf-8")
    for name, _ in _fields(settings.Single):
        key = name.rsplit(".", 1)[-1]
        assert re.search(rf"[\s#{{,-]{key}:", text), f"{name} does not stand in demo_survey/survey.yaml"


def test_the_demo_s_settings_are_valid():
    content = YAML(typ="safe").load((ROOT / "demo_survey" / "survey.yaml").read_text(encoding="utf-8"))
    assert settings.Single.model_validate(content).survey.name


def test_every_setting_is_used():
    """A setting that no code reads is a promise that nobody keeps."""
    code = "\n".join(
        path.read_text(encoding="utf-8") for path in (ROOT / "steps").rglob("*.py") if path.name != "settings.py"
    )
    for name, _ in _fields(settings.Single):
        key = name.rsplit(".", 1)[-1]
        assert re.search(rf"\.{key}\b|[\"']{key}[\"']", code), f"{name} is used nowhere"


def test_columns_end_in_their_unit():
    endings = {
        "nT": "_nt",
        "m": "_m",
        "km": "_km",
        "degree": "_deg",
        "m s-1": "_mps",
        "UTC": "_utc",
        "nT m-1": "_per_m",
    }
    for name, column in columns.COLUMNS.items():
        if column.unit != "1":
            assert name.endswith(endings[column.unit]), f"{name} is in {column.unit}"


def test_every_flag_has_a_meaning():
    assert set(columns.FLAG_MEANINGS) == set(columns.Flag)


def test_every_column_of_a_table_is_defined():
    for table, names in columns.TABLES.items():
        assert set(names) <= set(columns.COLUMNS), table


def test_check_refuses_a_table_that_breaks_its_promise():
    import pandas as pd

    with pytest.raises(KeyError, match="table lines: lacks \\['line_index'\\], holds unknown \\['other'\\]"):
        columns.check(pd.DataFrame({"other": [1]}), "lines")


def _tracked():
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True)
    if listed.returncode:
        pytest.skip("not a git checkout")
    return [ROOT / name for name in listed.stdout.splitlines()]


def test_no_path_of_a_machine_stands_in_the_repository():
    pattern = re.compile(rb"/(?:home|root|Users)/\w|/(?:work|farm|opt)/\w")
    for path in _tracked():
        if (
            path.suffix in (".py", ".md", ".yaml", ".toml", ".csv", ".html", ".cff", "")
            and path.name != "test_contract.py"
        ):
            assert not pattern.search(path.read_bytes()), path


def test_no_raw_file_of_the_demo_is_large():
    total = sum(path.stat().st_size for path in _tracked() if "demo_survey" in path.parts)
    assert total < 8e6
