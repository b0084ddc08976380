"""Run one stage: open its inputs, call its pure functions, write its outputs whole or not at all.

A stage module ends with ``if __name__ == "__main__": stage.run(main)`` where ``main(job)`` is a few lines. The
Snakefile calls ``python -m steps.<stage> --<input> PATH... --write PATH... --options JSON``.
"""

import glob
import json
import os
import shutil
import sys
import tempfile
import time
from collections.abc import Iterable
from pathlib import Path

import pandas as pd
from tqdm import tqdm

from steps import columns, provenance, settings
from steps.errors import SurveyError


def progress(items: Iterable, what: str, total: int | None = None) -> Iterable:
    """Go through items with a progress bar where a terminal is attached; in a log file nothing is written.

    Parameters
    ----------
    items : iterable
    what : str
        What the bar is labelled with.
    total : int, optional
        Number of items, where they cannot be counted.

    Returns
    -------
    iterable

    """
    return tqdm(items, what, total, file=sys.stdout, disable=not sys.stdout.isatty(), leave=False, delay=1.0)


class Job:
    """What a stage's ``main`` works with: named inputs, named outputs, its settings and its record.

    Attributes
    ----------
    name : str
        Name of the stage.
    inputs : dict of str to list of pathlib.Path
        Input files by the name that the Snakefile gives them.
    settings : pydantic.BaseModel
        The stage's own section of the survey's settings.
    edits : list of dict
        The rows of the edits file that this stage applies.
    survey : dict
        ``name`` and ``folder`` of the survey (the joint stages have ``members`` instead).
    record : dict
        What the stage has to say for the summary and the provenance; written as ``<stage>.json``.

    """

    def __init__(self, name: str, inputs: dict, outputs: list[Path], options: dict):
        self.name = name
        self.inputs = inputs
        self.settings = settings.section(name, options["settings"])
        self.edits = options.get("edits", [])
        self.survey = options.get("survey", {})
        self.record: dict = {
            "stage": name,
            "code": options.get("code", ""),
            "settings": options["settings"],
            "edits": self.edits,
            "notes": [],
        }
        # A joint stage writes tables of the same name for several members: reduced/<member>/<name>.parquet
        self._outputs = {}
        for path in outputs:
            self._outputs[path.stem] = self._outputs[path.name] = path
            self._outputs[f"{path.parent.name}/{path.stem}"] = path
        self._finals = list(outputs)
        self._ready: list[tuple[Path, Path]] = []
        self._start = time.monotonic()
        for final in outputs:  # what a killed run left half written
            for stale in final.parent.glob(f".{glob.escape(final.stem)}-*{glob.escape(final.suffix)}"):
                _discard(stale)

    def path(self, name: str) -> Path:
        """Return the only file of input `name`."""
        (path,) = self.inputs[name]
        return path

    def table(self, name: str, columns: list[str] | None = None) -> pd.DataFrame:
        """Read input `name`, one Parquet table."""
        return pd.read_parquet(self.path(name), columns=columns)

    def note(self, sentence: str) -> None:
        """Tell the user something that deserves a look; it is printed, and kept in the record."""
        self.record["notes"].append(sentence)
        print(f"{self.name}: note: {sentence}", flush=True)

    def output(self, name: str) -> Path:
        """Return the final path of output `name`."""
        return self._outputs[name]

    def target(self, name: str, member: str | None = None) -> Path:
        """Return a temporary path for output `name`; it takes its final name when the stage ends well."""
        final = self._outputs[f"{member}/{name}" if member else name]
        final.parent.mkdir(parents=True, exist_ok=True)
        if final.suffix:
            handle, text = tempfile.mkstemp(prefix=f".{final.stem}-", suffix=final.suffix, dir=final.parent)
            os.close(handle)
            os.chmod(text, 0o666 & ~_umask())
        else:
            text = tempfile.mkdtemp(prefix=f".{final.name}-", dir=final.parent)
            os.chmod(text, 0o777 & ~_umask())
        self._ready.append((Path(text), final))
        return Path(text)

    def write(self, name: str, table: pd.DataFrame, member: str | None = None) -> None:
        """Write one Parquet table, checked against the vocabulary where `name` is a table of it.

        A joint stage writes one table for each of its surveys, and names the `member`.
        """
        if name in columns.TABLES:
            table = columns.check(table, name)
        table.to_parquet(self.target(name, member), index=False, compression="zstd")

    def write_json(self, name: str, content: dict) -> None:
        """Write one JSON file with sorted keys."""
        self.target(name).write_text(provenance.to_json(content, indent=1) + "\n", encoding="utf-8")

    def write_text(self, name: str, text: str) -> None:
        """Write one UTF-8 text file."""
        self.target(name).write_text(text, encoding="utf-8", newline="\n")

    def done(self, sentence: str) -> None:
        """Say in one line what the stage did, in the numbers that matter."""
        self.record["done"] = sentence

    def finish(self) -> None:
        """Write the record, give every output its final name and print the stage's line."""
        self.write_json(f"{self.name}_record", self.record)
        written = {final for _, final in self._ready}
        forgotten = [str(path) for path in self._finals if path not in written]
        if forgotten:
            raise KeyError(f"stage {self.name} did not write {forgotten}")
        for temporary, final in self._ready:
            if final.is_dir():
                shutil.rmtree(final)
            os.replace(temporary, final)
        self._ready = []
        who = self.survey.get("key", "")
        print(
            f"{self.name:<11} {who + ': ' if who else ''}{self.record.get('done', 'done')} "
            f"({time.monotonic() - self._start:.1f} s)",
            flush=True,
        )

    def abandon(self) -> None:
        """Remove what was half written."""
        for temporary, _ in self._ready:
            _discard(temporary)


def _discard(path: Path) -> None:
    if path.is_dir() and not path.is_symlink():
        shutil.rmtree(path)
    else:
        path.unlink(missing_ok=True)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _arguments(words: list[str]) -> tuple[dict, list[Path], dict]:
    """Read ``--name PATH...`` inputs, ``--write PATH...`` outputs and ``--options JSON``."""
    groups: dict[str, list[str]] = {}
    for word in words:
        if word.startswith("--"):
            group = groups.setdefault(word[2:], [])
        else:
            group.append(word)
    (options,) = groups.pop("options")
    outputs = [Path(word) for word in groups.pop("write")]
    return {name: [Path(word) for word in found] for name, found in groups.items()}, outputs, json.loads(options)


def run(main) -> None:
    """Run `main` of a stage module as the program it was started as; a user's mistake ends it with status 1.

    Parameters
    ----------
    main : callable
        ``main(job)``; it reads through `Job`, calls the module's pure functions and writes through `Job`.

    """
    name = Path(sys.argv[0]).stem
    inputs, outputs, options = _arguments(sys.argv[1:])
    job = Job(name, inputs, outputs, options)
    try:
        main(job)
        job.finish()
    except SurveyError as error:
        job.abandon()
        for sentence in error.sentences:
            print(sentence, file=sys.stderr)
        sys.exit(1)
    except OSError as error:
        job.abandon()
        where = error.filename or "a file"
        print(
            f"{where}: cannot be read or written. {error.strerror}. Mend that and run again; "
            "raw files and former results are untouched.",
            file=sys.stderr,
        )
        sys.exit(1)
    except BaseException:
        job.abandon()
        raise
