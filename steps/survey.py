"""Read a survey's folder: its settings file, its edits, its raw files; tell every mistake at once, with its line.

The Snakefile calls `load` before any work and asks the result which files and options each stage gets.
"""

import difflib
import json
import re
import shlex
import unicodedata
from dataclasses import dataclass, field
from pathlib import Path, PurePosixPath

import pydantic
from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.events import AliasEvent

from steps import edits, provenance, settings
from steps.errors import SurveyError, mistake
from steps.formats import tables

LARGEST_SETTINGS_BYTES = 1_000_000
RESERVED = {"logs"}
HEADED = {"profiles", "exports", "dating"}


def slug(name: str, longest: int = 60) -> str:
    """Turn any name into a safe part of a path: lower-case ASCII letters, digits, ``-`` and ``_``.

    Different names may give the same slug; the caller keeps them apart.
    """
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode().lower()
    return re.sub(r"[^a-z0-9_]+", "-", plain).strip("-")[:longest].strip("-") or "unnamed"


@dataclass(frozen=True)
class Member:
    """One survey of a run."""

    key: str
    folder: PurePosixPath
    settings: settings.Single
    edits: list[dict] = field(default_factory=list)

    def path(self, relative: str) -> str:
        """Return a file of this survey, relative to the folder of the run."""
        return str(self.folder / relative)

    def files(self, patterns: list[str]) -> list[str]:
        """List the files that match patterns, sorted by name, relative to the folder of the run."""
        return sorted({self.path(name) for pattern in patterns for name in _matches(Path(self.folder), pattern)})

    def raw_inputs(self, stage: str) -> dict[str, list[str]]:
        """Return the raw files and hand-written tables that a stage reads, by the name of the input."""
        own = self.settings
        if stage == "ingest":
            found = {"readings": self.files(own.ingest.readings.files)}
            for number, source in enumerate(own.ingest.navigation):
                found[f"navigation_{number}"] = self.files(source.files)
            return found
        if stage == "lines":
            return {"log": [self.path(own.lines.log)]} if own.lines.log else {}
        if stage == "position":
            log = own.position.layback.log
            return {"cable": [self.path(log)]} if log else {}
        if stage == "diurnal":
            return {f"base_{n}": self.files(station.files) for n, station in enumerate(own.diurnal.base_stations)}
        return {}

    def raw_arguments(self, stage: str) -> str:
        """Return `raw_inputs` as words of a command line: ``--name FILE...`` for each input."""
        words = [word for name, files in self.raw_inputs(stage).items() for word in (f"--{name}", *files)]
        return shlex.join(words)


@dataclass(frozen=True)
class Run:
    """All surveys of a run, and the settings of the stages that they share."""

    name: str
    members: dict[str, Member]
    joint: dict[str, settings.Section]

    def edits_file(self) -> list[str]:
        """Return the edits file, for the report's form; several surveys have several, and the form has none."""
        named = [member.path(member.settings.edits) for member in self.members.values() if member.settings.edits]
        return named if len(self.members) == 1 else []

    def options(self, stage: str, key: str | None = None) -> str:
        """Return what a stage gets besides its files, as JSON with sorted keys; equal options give equal text."""
        if key is None:
            content = {
                "settings": self.joint[stage].model_dump(mode="json"),
                "survey": {
                    "name": self.name,
                    "members": list(self.members),
                    "names": {key: member.settings.survey.name for key, member in self.members.items()},
                },
                "edits": [
                    {**edit, "member": key}
                    for key, member in self.members.items()
                    for edit in edits.for_stage(member.edits, stage)
                ],
            }
        else:
            member = self.members[key]
            content = {
                "settings": getattr(member.settings, stage).model_dump(mode="json"),
                # Only what writes headers is told who measured: a corrected ship's name reruns nothing else.
                "survey": {"key": key, **(_who(member) if stage in HEADED else {})},
                "edits": edits.for_stage(member.edits, stage),
            }
            tables = {name: files for name, files in member.raw_inputs(stage).items() if name in ("log", "cable")}
            if tables:  # a restored file may carry an old date: its content decides
                content["tables"] = {name: provenance.checksum(file) for name, (file,) in tables.items()}
        content["code"] = provenance.fingerprint(stage)
        return provenance.to_json(content)


def _who(member: Member) -> dict:
    """Return the texts for the headers of products."""
    return member.settings.survey.model_dump(mode="json")


def load(file: str = settings.FILE) -> Run:
    """Read the settings of the survey, or of the collection of surveys, in the current folder.

    Parameters
    ----------
    file : str, optional
        Name of the settings file.

    Returns
    -------
    Run

    Raises
    ------
    SurveyError
        With one sentence for each mistake found in settings, edits, and the presence of raw files.

    """
    if not Path(file).is_file():
        raise SurveyError(
            f"{file}: must be in the folder of the survey. There is none in {Path.cwd().name or '/'}. "
            "Name the survey's folder: snakemake -d FOLDER."
        )
    content, lines = _read_yaml(file)
    if "members" in content:
        return _collection(file, content, lines)
    own = _validate(settings.Single, content, lines, file)
    member = _member(slug(own.survey.name), PurePosixPath("."), own, file, lines)
    return Run(
        own.survey.name,
        {member.key: member},
        {"crossovers": own.crossovers, "levelling": own.levelling, "report": own.report},
    )


def _collection(file: str, content: dict, lines: dict) -> Run:
    """Load every member of a collection; mistakes of all of them are told together."""
    own = _validate(settings.Collection, content, lines, file)
    folders, wrong = [], []
    for pattern in own.members:
        found = sorted(name for name in _matches(Path(), pattern, folders=True) if Path(name, settings.FILE).is_file())
        if not found:
            wrong.append(
                mistake(
                    f"{file}{_line(lines, ('members',))}, members", "must name folders that hold a survey.yaml", pattern
                )
            )
        folders += [name for name in found if name not in folders]
    members: dict[str, Member] = {}
    for folder in folders:
        path = str(PurePosixPath(folder, settings.FILE))
        try:
            inner, inner_lines = _read_yaml(path)
            single = _validate(settings.Single, inner, inner_lines, path)
            key = _unused(slug(folder), members)
            members[key] = _member(key, PurePosixPath(folder), single, path, inner_lines)
        except SurveyError as error:
            wrong += error.sentences
    if wrong:
        raise SurveyError(*wrong)
    return Run(own.survey.name, members, {name: getattr(own, name) for name in ("crossovers", "levelling", "report")})


def _unused(key: str, taken: dict) -> str:
    """Return `key`, or `key` with a number where it is taken."""
    number, free = 2, key
    while free in taken or free in RESERVED:
        free = f"{key}-{number}"
        number += 1
    return free


def _member(key: str, folder: PurePosixPath, own: settings.Single, file: str, lines: dict) -> Member:
    """Make a member, checking that its files are there and its edits are well formed."""
    wrong, rows = [], []
    member = Member(_unused(key, {}), folder, own)
    named = [("lines", "log"), ("position", "layback", "log"), ("edits",)]
    for path in named:
        value = own
        for part in path:
            value = getattr(value, part, None)
        if value is None:
            continue
        where = f"{file}{_line(lines, path)}, {'.'.join(path)}"
        if not _inside(value):
            wrong.append(mistake(where, "must be a file inside the survey's folder", value))
        elif not Path(member.path(value)).is_file():
            wrong.append(mistake(where, "must name a file of the survey's folder", value, "There is no such file."))
        elif path == ("edits",):
            try:
                rows = _edits(member.path(value))
            except SurveyError as error:
                wrong += error.sentences
    sources = [(("ingest", "readings"), own.ingest.readings)]
    sources += [(("ingest", "navigation", n), source) for n, source in enumerate(own.ingest.navigation)]
    sources += [(("diurnal", "base_stations", n), source) for n, source in enumerate(own.diurnal.base_stations)]
    for path, source in sources:
        for pattern in source.files:
            where = f"{file}{_line(lines, (*path, 'files'))}, {_dotted((*path, 'files'))}"
            if not _inside(pattern):
                wrong.append(mistake(where, "must be files inside the survey's folder", pattern))
            elif not member.files([pattern]):
                wrong.append(mistake(where, "must match at least one file of the survey's folder", pattern))
    if wrong:
        raise SurveyError(*wrong)
    return Member(member.key, folder, own, rows)


def _edits(path: str) -> list[dict]:
    """Read and check an edits file; times become ISO text, empty cells None."""
    table = tables.read_table(path, edits.COLUMNS, edits.OPTIONAL)
    rows = []
    for row in table.to_dict("records"):
        rows.append({key: None if value is None or value != value else _plain(value) for key, value in row.items()})
    return edits.check(rows, path)


def _plain(value: object) -> object:
    """Turn a cell into what JSON can hold."""
    if hasattr(value, "isoformat"):
        return value.isoformat()
    return value.item() if hasattr(value, "item") else value


def _inside(pattern: str) -> bool:
    """Tell whether a path or pattern, as written, stays inside the folder; links that the user made are followed."""
    path = PurePosixPath(pattern)
    return bool(pattern.strip()) and not path.is_absolute() and ".." not in path.parts and "\0" not in pattern


def _matches(folder: Path, pattern: str, folders: bool = False) -> list[str]:
    """List what matches a pattern in a folder, as relative paths; an exact name needs no pattern characters."""
    if not _inside(pattern):
        return []
    exact = folder / pattern  # a name may itself hold pattern characters
    found = [exact] if exact.exists() else sorted(folder.glob(pattern))
    return [path.relative_to(folder).as_posix() for path in found if (path.is_dir() if folders else path.is_file())]


def closing_lines() -> list[str]:
    """Return what a run ends with: where the results are, and what deserves a look first."""
    path = Path("reduced/report_record.json")
    if not path.is_file():  # a run that was told to end before the report
        return [f"Results so far: {Path('reduced').resolve()}"]
    record = json.loads(path.read_text(encoding="utf-8"))
    first = [f"  {sentence}" for sentence in record["look_first"]]
    lines = [f"Results: {Path('reduced').resolve()}", f"Open {Path('reduced', 'report.html').resolve()}"]
    return [*lines, *(["Deserves a look first:", *first] if first else [])]


# -- the settings file -----------------------------------------------------------------------------------------------


def _read_yaml(file: str) -> tuple[dict, dict]:
    """Read a settings file into plain content and the line of every key.

    Returns
    -------
    content : dict
        Plain dictionaries, lists and scalars.
    lines : dict of tuple to int
        Line, counting from 1, of each key or list item by its path.

    """
    if Path(file).stat().st_size > LARGEST_SETTINGS_BYTES:
        raise SurveyError(mistake(file, "must be a settings file of under 1 MB", f"{Path(file).stat().st_size} bytes"))
    try:
        text = Path(file).read_text(encoding="utf-8-sig")
        yaml = YAML(typ="rt", pure=True)
        if any(isinstance(event, AliasEvent) for event in yaml.parse(text)):
            raise SurveyError(mistake(file, "must not use YAML aliases (*name)", remedy="Write the value out."))
        tree = YAML(typ="rt", pure=True).load(text)
    except UnicodeDecodeError as error:
        raise SurveyError(
            mistake(file, "must be UTF-8 text", f"byte {error.object[error.start]:#04x} at {error.start}")
        ) from error
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        place = f" line {mark.line + 1}" if mark else ""
        problem = (error.problem or "cannot be read").split("\n")[0]
        if "duplicate key" in problem:
            problem = re.sub(r'found duplicate key "([^"]*)".*', r"the key \1 stands twice", problem)
        raise SurveyError(mistake(f"{file}{place}", "must be valid YAML", problem, "Mend that line.")) from error
    except (YAMLError, ValueError) as error:
        raise SurveyError(mistake(file, "must be valid YAML", str(error).split("\n")[0])) from error
    if not isinstance(tree, dict):
        raise SurveyError(mistake(file, "must hold settings as `key: value` lines", type(tree).__name__))
    lines: dict[tuple, int] = {}
    return _untangle(tree, (), lines), lines


def _untangle(node: object, path: tuple, lines: dict) -> object:
    """Copy a round-trip YAML tree into plain Python, noting lines."""
    if isinstance(node, dict):
        plain = {}
        for key, value in node.items():
            lines[(*path, key)] = node.lc.key(key)[0] + 1
            plain[key] = _untangle(value, (*path, key), lines)
        return plain
    if isinstance(node, list):
        plain = []
        for index, value in enumerate(node):
            lines[(*path, index)] = node.lc.item(index)[0] + 1
            plain.append(_untangle(value, (*path, index), lines))
        return plain
    if isinstance(node, bool) or node is None:
        return node
    for kind in (int, float, str):
        if isinstance(node, kind):
            return kind(node)
    return node


def _line(lines: dict, path: tuple) -> str:
    """Return `` line N`` of the deepest part of a path that stands in the file."""
    while path:
        if path in lines:
            return f" line {lines[path]}"
        path = path[:-1]
    return ""


def _dotted(path: tuple) -> str:
    """Write a path as the user would: position.layback.log, navigation item 2."""
    text = ""
    for part in path:
        text += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if text else str(part)
    return text


def _validate(model: type[settings.Section], content: dict, lines: dict, file: str) -> settings.Section:
    """Validate content against a model, turning every complaint into a sentence."""
    try:
        return model.model_validate(content)
    except pydantic.ValidationError as error:
        sentences = [_complaint(model, problem, lines, file) for problem in error.errors(include_url=False)]
        raise SurveyError(*dict.fromkeys(sentences)) from None


_WANTED = {
    "float_parsing": "must be a number",
    "float_type": "must be a number",
    "int_parsing": "must be a whole number",
    "int_type": "must be a whole number",
    "int_from_float": "must be a whole number",
    "bool_parsing": "must be true or false",
    "bool_type": "must be true or false",
    "string_type": "must be text",
    "list_type": "must be a list",
    "model_type": "must be a section of `key: value` lines",
    "model_attributes_type": "must be a section of `key: value` lines",
    "dict_type": "must be a section of `key: value` lines",
    "finite_number": "must be a finite number",
}


def _complaint(model: type, problem: dict, lines: dict, file: str) -> str:
    """Turn one complaint of pydantic into our sentence."""
    kind, context = problem["type"], problem.get("ctx", {})
    path, fields, bounds = _walk(model, problem["loc"])
    where = f"{file}{_line(lines, path)}, {_dotted(path)}" if path else file
    got = problem.get("input")
    if kind == "missing":
        described = bounds.description if bounds is not None and bounds.description else ""
        return mistake(where, f"must be given{' (' + described + ')' if described else ''}", None, "It has no default.")
    if kind == "extra_forbidden":
        near = difflib.get_close_matches(str(path[-1]), fields, n=1)
        hint = f"Did you mean {near[0]}?" if near else f"Known here: {', '.join(sorted(fields))}."
        return f"{where}: is not a setting. {hint}"
    if kind in ("union_tag_invalid", "union_tag_not_found"):
        where = f"{file}{_line(lines, (*path, 'format'))}, {_dotted((*path, 'format'))}"
        tags = context.get("expected_tags", "").replace("'", "")
        tags = tags or "one of the known formats"
        return mistake(where, f"must be one of {tags}" if "," in tags else f"must be given, {tags}", context.get("tag"))
    if kind == "literal_error":
        return mistake(where, f"must be {context['expected']}", got)
    if kind == "value_error":
        return mistake(where, str(context["error"]))
    if kind in ("too_short", "string_too_short"):
        return mistake(where, "must not be empty")
    if kind in ("too_long", "string_too_long"):
        return mistake(where, f"must not be longer than {context['max_length']}")
    if kind in ("greater_than", "greater_than_equal", "less_than", "less_than_equal"):
        return mistake(where, f"must be {_bound(bounds)}", got)
    if kind.startswith("datetime"):
        return mistake(where, "must be a date and time such as 2024-05-01T00:00:00", got)
    return mistake(where, _WANTED.get(kind, problem["msg"][:1].lower() + problem["msg"][1:]), got)


_UNION_WORDS = ("float", "int", "str", "bool", "datetime", "none")  # how pydantic names members of a plain union


def _walk(model: type, place: tuple) -> tuple[tuple, list[str], object]:
    """Follow a pydantic location through the models: the user's path, the known keys there, and the last field.

    A location also names the chosen member of a union, which is no part of the user's path.
    """
    path, current, info = [], [model], None
    for part in place:
        if isinstance(part, int):
            path.append(part)
            continue
        known = [m for m in current if part in m.model_fields]
        tagged = [m for m in current if _tag(m) == part]
        if not known and tagged and len(current) > 1:
            current = tagged
            continue
        if not known and info is not None and (part in _UNION_WORDS or str(part).startswith("literal[")):
            continue
        path.append(part)
        if not known:
            return tuple(path), sorted({name for m in current for name in m.model_fields}), None
        info = known[0].model_fields[part]
        current = _models(info.annotation)
    return tuple(path), sorted({name for m in current for name in m.model_fields}), info


def _tag(model: type) -> str | None:
    """Return the value of ``format`` that selects a model."""
    known = model.model_fields.get("format")
    args = getattr(known.annotation, "__args__", ()) if known else ()
    return args[0] if args else None


def _models(annotation: object) -> list[type]:
    """List the models that an annotation may stand for."""
    if isinstance(annotation, type) and issubclass(annotation, pydantic.BaseModel):
        return [annotation]
    return [m for part in getattr(annotation, "__args__", ()) for m in _models(part)]


def _bound(info: object) -> str:
    """Say a field's bounds in words."""
    words = {}
    for part in getattr(info, "metadata", []):
        for name in ("gt", "ge", "lt", "le"):
            if getattr(part, name, None) is not None:
                words[name] = f"{getattr(part, name):g}"
    low = words.get("ge") or words.get("gt")
    high = words.get("le") or words.get("lt")
    if low is not None and high is not None:
        return f"between {low} and {high}"
    if low is not None:
        return f"at least {low}" if "ge" in words else f"more than {low}"
    return f"at most {high}" if "le" in words else f"less than {high}"
