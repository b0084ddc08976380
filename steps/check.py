"""Read everything a survey names and list all problems at once, without reducing: ``python -m steps.check FOLDER``.

Every raw file is read on its own, so that one bad file hides no other; where all can be read, the tables are held
against the records (lines against times, edits against lines, cable log, base stations). Nothing is written into the
survey's folder.
"""

import contextlib
import io
import json
import os
import sys
import tempfile
from pathlib import Path

from steps import base_records, ingest, lines, position, stage, survey
from steps.errors import SurveyError
from steps.formats import tables

ALL_TIME_S = (-1e10, 1e10)  # seconds about 1970


def raw_problems(member: survey.Member) -> list[str]:
    """Read every raw file and hand-written table of a survey by itself.

    Parameters
    ----------
    member : steps.survey.Member

    Returns
    -------
    list of str
        One sentence for each problem.

    """
    own, found = member.settings, []

    def attempt(read, *arguments):
        try:
            read(*arguments)
        except SurveyError as error:
            found.extend(error.sentences)

    for file in member.raw_inputs("ingest")["readings"]:
        attempt(ingest.read_readings, own.ingest.readings, [Path(file)])
    for number, source in enumerate(own.ingest.navigation):
        for file in member.raw_inputs("ingest")[f"navigation_{number}"]:
            attempt(ingest.read_navigation, [source], {"navigation_0": [Path(file)]})
    for file in member.raw_inputs("lines").get("log", []):
        attempt(lambda path: lines.check_log(tables.read_table(path, lines.LOG), path), file)
    for file in member.raw_inputs("position").get("cable", []):
        attempt(lambda path: position.check_cable(tables.read_table(path, position.CABLE_LOG), path), file)
    for number, source in enumerate(own.diurnal.base_stations):
        for file in member.raw_inputs("diurnal")[f"base_{number}"]:
            attempt(base_records.read_records, [source], {"base_0": [Path(file)]}, ALL_TIME_S)
    return found


def joint_problems(run: survey.Run, key: str) -> tuple[list[str], list[str]]:
    """Hold records and tables of one survey against each other, in a temporary folder.

    Parameters
    ----------
    run : steps.survey.Run
    key : str
        Of the survey.

    Returns
    -------
    problems, notes : list of str

    """
    from steps import screen

    order = {
        "ingest": (ingest, [], ["readings", "navigation", "gyro"]),
        "lines": (lines, ["readings", "navigation"], ["lines", "line_table"]),
        "screen": (screen, ["readings", "lines", "line_table", "ingest_record"], ["screen"]),
        "position": (position, ["readings", "navigation", "gyro", "lines", "line_table"], ["position"]),
    }
    problems, notes = [], []
    with tempfile.TemporaryDirectory() as folder:
        place = Path(folder)
        for name, (module, needed, made) in order.items():
            inputs = {k: [Path(f) for f in files] for k, files in run.members[key].raw_inputs(name).items()}
            inputs |= {n: [place / f"{n}.{'json' if n.endswith('record') else 'parquet'}"] for n in needed}
            if not all(path.exists() for n in needed for path in inputs[n]):
                continue  # what it needs could not be made: that has been told
            outputs = [*(place / f"{n}.parquet" for n in made), place / f"{name}_record.json"]
            job = stage.Job(name, inputs, outputs, json.loads(run.options(name, key)))
            try:
                with contextlib.redirect_stdout(io.StringIO()):
                    module.main(job)
                    job.finish()
                notes += [f"{name}: {sentence}" for sentence in job.record["notes"]]
            except SurveyError as error:
                job.abandon()
                problems += error.sentences
    return problems, notes


def main(words: list[str]) -> int:
    """Check the survey in a folder; return 1 if there is a problem."""
    if len(words) != 1 or words[0].startswith("-"):
        print("usage: python -m steps.check FOLDER", file=sys.stderr)
        return 2
    if not Path(words[0]).is_dir():
        print(f"{words[0]}: must be the folder of a survey. There is no such folder.", file=sys.stderr)
        return 1
    os.chdir(words[0])
    try:
        run = survey.load()
    except SurveyError as error:
        print("\n".join(error.sentences))
        print(f"{len(error.sentences)} problems in the settings; the records are read once these are mended.")
        return 1
    count = 0
    for key, member in run.members.items():
        problems, notes = raw_problems(member), []
        if not problems:
            problems, notes = joint_problems(run, key)
        for sentence in problems:
            print(sentence)
        for sentence in notes:
            print(f"note: {sentence}")
        count += len(problems)
    print(f"{count} problem{'s' * (count != 1)} found." if count else "No problem found.")
    return int(count > 0)


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
