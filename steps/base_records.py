"""Read the files of the base stations: one record for each, about the time of the survey, every value accounted for."""

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from steps import clock
from steps.errors import SurveyError, mistake
from steps.provenance import checksum

NS_PER_S = 1_000_000_000
AROUND_S = 2 * 86_400.0  # of a record, before and after the survey: what shift, slow part and datum need
LOWEST_NT, HIGHEST_NT = 15_000.0, 80_000.0  # total field on the ground (common practice)
WORST_SHARE = 0.1  # of values outside these, from which on unit or column must be wrong
FURTHEST_DEG = 0.1  # between the positions that files of one station give
PLACE = "survey.yaml, diurnal.base_stations"


@dataclass
class Record:
    """What the files of one station hold about the time of the survey.

    Attributes
    ----------
    name : str
    latitude_deg, longitude_deg, height_m : float
        Geodetic; longitude in [-180, 180).
    time_utc : array of datetime64[ns], shape (n,)
        Clock corrected, increasing, each instant once.
    total_field_nt : array of float, shape (n,)
        Finite.
    runs_utc : tuple of str
        First and last instant in the files.
    ledger : dict of str to int
        ``records`` of the files = the sum of what became of them.
    files : list of dict
        ``file``, ``sha256``, ``counts`` of each.
    notes : list of str
        What deserves a look.

    """

    name: str
    latitude_deg: float
    longitude_deg: float
    height_m: float
    time_utc: np.ndarray
    total_field_nt: np.ndarray
    runs_utc: tuple[str, str]
    ledger: dict[str, int]
    files: list[dict]
    notes: list[str] = field(default_factory=list)


def read_records(sources: list, inputs: dict[str, list[Path]], span_s: tuple[float, float]) -> list[Record]:
    """Read all base stations.

    Parameters
    ----------
    sources : list of DelimitedBase or ObservatoryBase
    inputs : dict of str to list of pathlib.Path
        Files of each: ``base_0``, ``base_1``, ...
    span_s : tuple of float
        First and last reading of the survey, seconds since 1970.

    Returns
    -------
    list of Record

    Raises
    ------
    SurveyError
        For a file that cannot be read, a station without a position or of another's name, files of two observatories,
        values that are no total field, or when no station has a value during the survey.

    """
    names = [source.name for source in sources]
    twice = sorted({name for name in names if names.count(name) > 1})
    if twice:
        raise SurveyError(mistake(PLACE, "must have a name each", f"{', '.join(twice)} twice"))
    records = [_read(source, inputs[f"base_{number}"], span_s) for number, source in enumerate(sources)]
    some = False
    for record in records:
        seconds = record.time_utc.astype(np.int64) / NS_PER_S
        if ((seconds >= span_s[0]) & (seconds <= span_s[1])).any():
            some = True
        else:
            record.notes.append(f"base station {record.name}: its record holds no value during the survey.")
    if not some:
        must = f"must have a record during the survey, {_text(span_s[0])} to {_text(span_s[1])}"
        runs = "; ".join(f"{record.name} from {record.runs_utc[0]} to {record.runs_utc[1]}" for record in records)
        raise SurveyError(mistake(PLACE, must, runs, "Check the files and the station's clock."))
    return records


def _text(instant_s: float) -> str:
    return str(np.datetime64(int(instant_s), "s"))


def _read(source, paths: list[Path], span_s) -> Record:
    """Read one station: join its files, and sort out what is not used."""
    times, values, files, heads = [], [], [], []
    for path in paths:
        if source.format == "iaga2002":
            from steps.formats.iaga2002 import read_iaga2002

            header, table = read_iaga2002(path)
            counts = header.counts
            heads.append((path, header))
        else:
            from steps.formats.delimited import read_delimited

            table, counts = read_delimited(path, source, {"total_field_nt": source.columns.total_field_nt})
            table = table.rename(columns={"time": "time_utc"})
        times.append(table["time_utc"].to_numpy())
        values.append(table["total_field_nt"].to_numpy())
        files.append({"file": str(path), "sha256": checksum(path), "counts": counts})
    time, value = clock.correct(np.concatenate(times), source.clock), np.concatenate(values)
    # in order of time; of equal times the first that has a value comes first, and stands
    order = np.lexsort((np.isnan(value), time))
    time, value = time[order], value[order]
    again = np.concatenate([[False], time[1:] == time[:-1]])
    first = np.maximum.accumulate(np.where(again, 0, np.arange(len(time))))
    missing, odd = np.isnan(value), (value < LOWEST_NT) | (value > HIGHEST_NT)
    _check_unit(source.name, time, value, odd, missing)
    seconds = time.astype(np.int64) / NS_PER_S
    about = (seconds >= span_s[0] - AROUND_S) & (seconds <= span_s[1] + AROUND_S)
    same = missing | (value == value[first])
    fate = np.select([again & same, again, missing, odd, ~about], [1, 2, 3, 4, 5], 0)
    names = ("used", "repeated", "contradictory", "missing", "out_of_range", "far_from_the_survey")
    ledger = dict(zip(names, np.bincount(fate, minlength=len(names)).tolist(), strict=True))
    for name in ("repeated", "contradictory"):  # those that a file's reader has left out already
        ledger[name] += sum(file["counts"].get(name, 0) for file in files)
    ledger["records"] = sum(file["counts"]["records"] for file in files)
    if 2 * ledger["records"] != sum(ledger.values()):
        raise RuntimeError(f"the books of base station {source.name} do not balance: {ledger}")
    kept = fate == 0
    place = _place(source, heads)
    runs = tuple(str(instant.astype("datetime64[s]")) for instant in (time[0], time[-1]))
    return Record(source.name, *place, time[kept], value[kept], runs, ledger, files, _notes(source.name, ledger, heads))


def _check_unit(name: str, time, value, odd, missing) -> None:
    """Refuse a record whose unit or column must be wrong."""
    if odd.sum() > WORST_SHARE * (~missing).sum():
        k = int(np.argmax(odd))
        where = f"base station {name}, {str(time[k])[:19]}"
        must = f"must be a total field between {LOWEST_NT:g} and {HIGHEST_NT:g} nT"
        raise SurveyError(mistake(where, must, f"{value[k]:g}", "Check unit, column and missing-value codes."))


def _notes(name: str, ledger: dict[str, int], heads: list) -> list[str]:
    """Say what deserves a look in one station's files."""
    notes = []
    if ledger["out_of_range"]:
        notes.append(f"base station {name}: values left out that are no total field: {ledger['out_of_range']}.")
    if ledger["contradictory"]:
        number = ledger["contradictory"]
        notes.append(f"base station {name}: values left out that contradict another of the same time: {number}.")
    vectors = sorted({header.total_field_from for _, header in heads} - {"F", "S"})
    if vectors:
        notes.append(f"base station {name}: its total field is computed from {' and from '.join(vectors)}.")
    return notes


def _place(source, heads: list) -> tuple[float, float, float]:
    """Return a station's position: as stated, else as its files say; they must be of one observatory."""
    where = f"base station {source.name}"
    told: list[float | None] = [None, None, None]
    for path, header in heads:
        if header.code and heads[0][1].code and header.code.upper() != heads[0][1].code.upper():
            must = f"must be of the observatory of its other files, {heads[0][1].code}"
            raise SurveyError(mistake(f"{where}, {path}", must, header.code, "Mend `files`."))
        here = (header.latitude_deg, header.longitude_deg, header.elevation_m)
        for k, limit in enumerate((FURTHEST_DEG, FURTHEST_DEG, np.inf)):
            if told[k] is None:
                told[k] = here[k]
            elif here[k] is not None and abs((here[k] - told[k] + 180) % 360 - 180) > limit:
                must = "must give the position that its other files give"
                raise SurveyError(mistake(f"{where}, {path}", must, f"{here[0]}, {here[1]}", "Mend `files`."))
    own = (source.latitude_deg, source.longitude_deg, source.height_m)
    lat, lon, height = (a if a is not None else b for a, b in zip(own, told, strict=True))
    if lat is None or lon is None:
        remedy = "Give latitude_deg and longitude_deg in survey.yaml."
        raise SurveyError(mistake(where, "must have a position", "none in its files", remedy))
    return float(lat), (float(lon) + 180.0) % 360.0 - 180.0, float(height or 0.0)
