"""From the raw records of a towed magnetometer survey to clean anomaly profiles: the order of the stages.

Reduce the survey in FOLDER:  snakemake -d FOLDER

Each rule runs one stage, a module in steps/; nothing is computed here. Everything is written under FOLDER/reduced.
"""

import os
import sys

sys.path.insert(0, workflow.basedir)

from steps import survey
from steps.errors import SurveyError

os.environ.update(
    PYTHONPATH=workflow.basedir,
    PYTHONDONTWRITEBYTECODE="1",  # the checkout may be read-only
    PATH=os.pathsep.join([os.path.dirname(sys.executable), os.environ["PATH"]]),
    OPENBLAS_NUM_THREADS="1",  # sums in the same order on any number of cores
    OMP_NUM_THREADS="1",
)

try:
    RUN = survey.load()
except SurveyError as mistakes:
    sys.exit(str(mistakes))

SURVEYS = list(RUN.members)


def options(stage):
    """What makes a stage out of date besides its files: its own settings, its edits and its code, as one text."""
    return lambda wildcards: RUN.options(stage, getattr(wildcards, "survey", None))


def raw(stage):
    """The raw files and hand-written tables that a stage reads."""
    return lambda wildcards: [
        file
        for files in RUN.members[wildcards.survey].raw_inputs(stage).values()
        for file in files
    ]


def raw_arguments(stage):
    """The same files as words of the stage's command line, by the name of the input."""
    return lambda wildcards: RUN.members[wildcards.survey].raw_arguments(stage)


def each(name):
    """One file for every survey, for the stages that work on all surveys together."""
    return expand("reduced/{survey}/" + name, survey=SURVEYS)


onsuccess:
    print("\n".join(survey.closing_lines()))


wildcard_constraints:
    survey="[a-z0-9_-]+",


rule ingest:
    input:
        raw("ingest"),
    output:
        "reduced/{survey}/readings.parquet",
        "reduced/{survey}/navigation.parquet",
        "reduced/{survey}/gyro.parquet",
        "reduced/{survey}/ingest_record.json",
    log:
        "reduced/logs/{survey}/ingest.log",
    params:
        options=options("ingest"),
        raw=raw_arguments("ingest"),
    shell:
        "python -m steps.ingest {params.raw} --write {output} --options {params.options:q} 2> {log}"


rule lines:
    input:
        raw("lines"),
        readings="reduced/{survey}/readings.parquet",
        navigation="reduced/{survey}/navigation.parquet",
    output:
        "reduced/{survey}/lines.parquet",
        "reduced/{survey}/line_table.parquet",
        "reduced/{survey}/lines_record.json",
    log:
        "reduced/logs/{survey}/lines.log",
    params:
        options=options("lines"),
        raw=raw_arguments("lines"),
    shell:
        "python -m steps.lines {params.raw} --readings {input.readings} --navigation {input.navigation}"
        " --write {output} --options {params.options:q} 2> {log}"


rule screen:
    input:
        readings="reduced/{survey}/readings.parquet",
        lines="reduced/{survey}/lines.parquet",
        line_table="reduced/{survey}/line_table.parquet",
        ingest_record="reduced/{survey}/ingest_record.json",
    output:
        "reduced/{survey}/screen.parquet",
        "reduced/{survey}/screen_record.json",
    log:
        "reduced/logs/{survey}/screen.log",
    params:
        options=options("screen"),
    shell:
        "python -m steps.screen --readings {input.readings} --lines {input.lines} --line_table {input.line_table}"
        " --ingest_record {input.ingest_record} --write {output} --options {params.options:q} 2> {log}"


rule position:
    input:
        raw("position"),
        readings="reduced/{survey}/readings.parquet",
        navigation="reduced/{survey}/navigation.parquet",
        gyro="reduced/{survey}/gyro.parquet",
        lines="reduced/{survey}/lines.parquet",
        line_table="reduced/{survey}/line_table.parquet",
    output:
        "reduced/{survey}/position.parquet",
        "reduced/{survey}/position_record.json",
    log:
        "reduced/logs/{survey}/position.log",
    params:
        options=options("position"),
        raw=raw_arguments("position"),
    shell:
        "python -m steps.position {params.raw} --readings {input.readings} --navigation {input.navigation}"
        " --gyro {input.gyro} --lines {input.lines} --line_table {input.line_table}"
        " --write {output} --options {params.options:q} 2> {log}"


rule main_field:
    input:
        readings="reduced/{survey}/readings.parquet",
        position="reduced/{survey}/position.parquet",
    output:
        "reduced/{survey}/main_field.parquet",
        "reduced/{survey}/main_field_record.json",
    log:
        "reduced/logs/{survey}/main_field.log",
    params:
        options=options("main_field"),
    shell:
        "python -m steps.main_field --readings {input.readings} --position {input.position}"
        " --write {output} --options {params.options:q} 2> {log}"


rule diurnal:
    input:
        raw("diurnal"),
        readings="reduced/{survey}/readings.parquet",
        lines="reduced/{survey}/lines.parquet",
        line_table="reduced/{survey}/line_table.parquet",
        position="reduced/{survey}/position.parquet",
    output:
        "reduced/{survey}/diurnal.parquet",
        "reduced/{survey}/diurnal_base.parquet",
        "reduced/{survey}/diurnal_record.json",
    log:
        "reduced/logs/{survey}/diurnal.log",
    params:
        options=options("diurnal"),
        raw=raw_arguments("diurnal"),
    shell:
        "python -m steps.diurnal {params.raw} --readings {input.readings} --lines {input.lines}"
        " --line_table {input.line_table} --position {input.position}"
        " --write {output} --options {params.options:q} 2> {log}"


rule heading:
    input:
        readings="reduced/{survey}/readings.parquet",
        lines="reduced/{survey}/lines.parquet",
        line_table="reduced/{survey}/line_table.parquet",
        screen="reduced/{survey}/screen.parquet",
        position="reduced/{survey}/position.parquet",
        main_field="reduced/{survey}/main_field.parquet",
        diurnal="reduced/{survey}/diurnal.parquet",
    output:
        "reduced/{survey}/heading.parquet",
        "reduced/{survey}/heading_record.json",
    log:
        "reduced/logs/{survey}/heading.log",
    params:
        options=options("heading"),
    shell:
        "python -m steps.heading --readings {input.readings} --lines {input.lines} --line_table {input.line_table}"
        " --screen {input.screen} --position {input.position} --main_field {input.main_field}"
        " --diurnal {input.diurnal} --write {output} --options {params.options:q} 2> {log}"


rule crossovers:  # all surveys together
    input:
        readings=each("readings.parquet"),
        lines=each("lines.parquet"),
        line_table=each("line_table.parquet"),
        screen=each("screen.parquet"),
        position=each("position.parquet"),
        main_field=each("main_field.parquet"),
        diurnal=each("diurnal.parquet"),
        heading=each("heading.parquet"),
    output:
        "reduced/crossovers.parquet",
        "reduced/crossovers_record.json",
    log:
        "reduced/logs/crossovers.log",
    params:
        options=options("crossovers"),
    shell:
        "python -m steps.crossovers --readings {input.readings} --lines {input.lines}"
        " --line_table {input.line_table} --screen {input.screen} --position {input.position}"
        " --main_field {input.main_field} --diurnal {input.diurnal} --heading {input.heading}"
        " --write {output} --options {params.options:q} 2> {log}"


rule levelling:  # all surveys together
    input:
        crossovers="reduced/crossovers.parquet",
        readings=each("readings.parquet"),
        lines=each("lines.parquet"),
        line_table=each("line_table.parquet"),
        position=each("position.parquet"),
        diurnal=each("diurnal.parquet"),
        heading=each("heading.parquet"),
        main_field=each("main_field.parquet"),
        screen=each("screen.parquet"),
        heading_record=each("heading_record.json"),
        position_record=each("position_record.json"),
    output:
        each("levelling.parquet"),
        "reduced/levelling_lines.parquet",
        "reduced/levelling_crossovers.parquet",
        "reduced/level_covariance.npz",
        "reduced/levelling_record.json",
    log:
        "reduced/logs/levelling.log",
    params:
        options=options("levelling"),
    shell:
        "python -m steps.levelling --crossovers {input.crossovers} --readings {input.readings} --lines {input.lines}"
        " --line_table {input.line_table} --position {input.position} --diurnal {input.diurnal}"
        " --heading {input.heading} --main_field {input.main_field} --screen {input.screen}"
        " --heading_record {input.heading_record} --position_record {input.position_record}"
        " --write {output} --options {params.options:q} 2> {log}"


rule profiles:
    input:
        readings="reduced/{survey}/readings.parquet",
        lines="reduced/{survey}/lines.parquet",
        line_table="reduced/{survey}/line_table.parquet",
        screen="reduced/{survey}/screen.parquet",
        position="reduced/{survey}/position.parquet",
        main_field="reduced/{survey}/main_field.parquet",
        diurnal="reduced/{survey}/diurnal.parquet",
        heading="reduced/{survey}/heading.parquet",
        levelling="reduced/{survey}/levelling.parquet",
        records=[
            "reduced/{survey}/ingest_record.json",
            "reduced/{survey}/lines_record.json",
            "reduced/{survey}/screen_record.json",
            "reduced/{survey}/position_record.json",
            "reduced/{survey}/main_field_record.json",
            "reduced/{survey}/diurnal_record.json",
            "reduced/{survey}/heading_record.json",
            "reduced/crossovers_record.json",
            "reduced/levelling_record.json",
        ],
    output:
        "reduced/{survey}/corrected.parquet",
        "reduced/{survey}/profiles.parquet",
        directory("reduced/{survey}/csv"),
        "reduced/{survey}/profiles_record.json",
    log:
        "reduced/logs/{survey}/profiles.log",
    params:
        options=options("profiles"),
    shell:
        "python -m steps.profiles --readings {input.readings} --lines {input.lines} --line_table {input.line_table}"
        " --screen {input.screen} --position {input.position} --main_field {input.main_field}"
        " --diurnal {input.diurnal} --heading {input.heading} --levelling {input.levelling}"
        " --records {input.records} --write {output} --options {params.options:q} 2> {log}"


rule exports:
    input:
        corrected="reduced/{survey}/corrected.parquet",
        profiles="reduced/{survey}/profiles.parquet",
        line_table="reduced/{survey}/line_table.parquet",
        crossovers="reduced/levelling_crossovers.parquet",
        profiles_record="reduced/{survey}/profiles_record.json",
    output:
        "reduced/{survey}/{survey}.nc",
        "reduced/{survey}/{survey}.gpkg",
        "reduced/{survey}/{survey}.m77t",
        "reduced/{survey}/{survey}.h77t",
        "reduced/{survey}/exports_record.json",
    log:
        "reduced/logs/{survey}/exports.log",
    params:
        options=options("exports"),
    shell:
        "python -m steps.exports --corrected {input.corrected} --profiles {input.profiles}"
        " --line_table {input.line_table} --crossovers {input.crossovers} --profiles_record {input.profiles_record}"
        " --write {output} --options {params.options:q} 2> {log}"


rule report:  # all surveys together
    input:
        corrected=each("corrected.parquet"),
        profiles=each("profiles.parquet"),
        line_table=each("line_table.parquet"),
        base=each("diurnal_base.parquet"),
        crossovers="reduced/levelling_crossovers.parquet",
        levels="reduced/levelling_lines.parquet",
        edits=RUN.edits_file(),
        records=[
            *each("ingest_record.json"),
            *each("lines_record.json"),
            *each("screen_record.json"),
            *each("position_record.json"),
            *each("main_field_record.json"),
            *each("diurnal_record.json"),
            *each("heading_record.json"),
            "reduced/crossovers_record.json",
            "reduced/levelling_record.json",
            *each("profiles_record.json"),
        ],
    output:
        # kept until the new ones are whole: Snakemake removes other outputs before a job
        update("reduced/summary.txt"),
        update("reduced/report.html"),
        directory("reduced/figures"),
        "reduced/report_record.json",
    log:
        "reduced/logs/report.log",
    params:
        options=options("report"),
    shell:
        "python -m steps.report --corrected {input.corrected} --profiles {input.profiles}"
        " --line_table {input.line_table} --base {input.base} --crossovers {input.crossovers}"
        " --levels {input.levels} --edits {input.edits:q} --records {input.records}"
        " --write {output} --options {params.options:q} 2> {log}"


# Every file of every stage is asked for by name: a stage that failed, or a file that was lost, is then never forgotten
# by the next run.
rule all:
    default_target: True
    input:
        expand(rules.ingest.output, survey=SURVEYS),
        expand(rules.lines.output, survey=SURVEYS),
        expand(rules.screen.output, survey=SURVEYS),
        expand(rules.position.output, survey=SURVEYS),
        expand(rules.main_field.output, survey=SURVEYS),
        expand(rules.diurnal.output, survey=SURVEYS),
        expand(rules.heading.output, survey=SURVEYS),
        rules.crossovers.output,
        rules.levelling.output,
        expand(rules.profiles.output, survey=SURVEYS),
        expand(rules.exports.output, survey=SURVEYS),
        rules.report.output,
