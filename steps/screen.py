"""Screen single readings: spikes, dropouts, values out of range, low signal; noise of every line. Nothing is deleted.

Spikes. A reading is a spike if it departs from the robust line through its window (slope: median of the differences
half a window apart; level: median) by more than a number of robust sigmas (1.4826 times the median absolute deviation
from that line; Hampel 1974, J. Am. Stat. Assoc. 69) and by more than a least amount. The line keeps a steep anomaly
from hiding a spike, and from being one. Running medians, which cost little, find the few readings that can fail;
the rest is worked out for those.

Noise. For white noise the fourth difference has sqrt(70) times the standard deviation of the readings, while smooth
anomalies all but vanish in it; its median absolute value is used, which spikes do not move.
"""

import numpy as np
import pandas as pd
from numpy.lib.stride_tricks import sliding_window_view

from steps import edits, stage
from steps.columns import AUTOMATIC, REJECTING, Flag
from steps.errors import SurveyError
from steps.settings import Screen

TO_SIGMA = 1.4826  # median absolute deviation to standard deviation, normal distribution
GAP_INTERVALS = 5.0  # a step of more than this many sampling intervals splits the record
CANDIDATES_AT_ONCE = 100_000


def sampling_interval(time_utc: np.ndarray) -> float:
    """Return the median step between readings, seconds; NaN for fewer than two."""
    return float(np.median(np.diff(time_utc)) / np.timedelta64(1, "s")) if len(time_utc) > 1 else np.nan


def segments(time_utc: np.ndarray, good: np.ndarray) -> list[np.ndarray]:
    """Split usable readings into runs without a gap.

    Parameters
    ----------
    time_utc : array of datetime64[ns], shape (n,)
        Times, increasing.
    good : array of bool, shape (n,)
        Readings that have a value worth comparing.

    Returns
    -------
    list of array of int
        Indices of each run.

    """
    where = np.flatnonzero(good)
    if len(where) < 2:
        return [where] if len(where) else []
    step = np.diff(time_utc[where]) / np.timedelta64(1, "ns")
    return np.split(where, np.flatnonzero(step > GAP_INTERVALS * np.median(step)) + 1)


def running_median(values: np.ndarray, window: int) -> np.ndarray:
    """Return the running median of a run; beyond its ends the end values stand.

    Parameters
    ----------
    values : array of float, shape (n,)
        Without NaN.
    window : int
        Odd number of readings.

    Returns
    -------
    array of float, shape (n,)

    """
    from scipy.ndimage import median_filter

    return median_filter(values, size=window, mode="nearest")


def find_spikes(values: np.ndarray, *, window: int, threshold: float, smallest: float) -> np.ndarray:
    """Find spikes in a run of readings.

    Parameters
    ----------
    values : array of float, shape (n,)
        Total field, nT, without NaN and without gaps.
    window : int
        Odd number of readings in the moving window.
    threshold : float
        Robust sigmas.
    smallest : float
        Least departure, nT.

    Returns
    -------
    array of bool, shape (n,)
        True at spikes. Runs shorter than the window have none.

    """
    spikes = np.zeros(len(values), bool)
    if len(values) < window:
        return spikes
    # On a steep slope a burst pulls the running median along with it, but it has an edge: both are looked for.
    from scipy.ndimage import maximum_filter1d

    half = window // 2
    step = np.diff(values)
    edge = np.abs(step - running_median(step, window)) > smallest / 2
    suspect = np.abs(values - running_median(values, window)) > smallest / 2
    suspect |= maximum_filter1d(np.append(edge, False) | np.append(False, edge), window)
    suspect[:half] = suspect[-half:] = True  # what lies beyond the ends is not known
    candidates = np.flatnonzero(suspect)
    views = sliding_window_view(values, window)
    along = np.arange(window) - half
    for start in range(0, len(candidates), CANDIDATES_AT_ONCE):
        some = candidates[start : start + CANDIDATES_AT_ONCE]
        first = np.clip(some - half, 0, len(values) - window)  # near the ends the window lies to one side
        around = views[first]
        slope = np.median(around[:, half:] - around[:, : window - half], axis=1) / half
        around = around - slope[:, None] * along
        around -= np.median(around, axis=1)[:, None]
        deviation = np.median(np.abs(around), axis=1)
        departure = np.abs(around[np.arange(len(some)), some - first])
        spikes[some] = (departure > threshold * TO_SIGMA * deviation) & (departure > smallest)
    return spikes


def find_repeats(values: np.ndarray, longest: int) -> np.ndarray:
    """Find stretches in which the logger repeated one value.

    Parameters
    ----------
    values : array of float, shape (n,)
        Total field, nT.
    longest : int
        This many equal values in a row, or more, are a dropout.

    Returns
    -------
    array of bool, shape (n,)

    """
    if len(values) == 0:
        return np.zeros(0, bool)
    start = np.flatnonzero(np.concatenate([[True], values[1:] != values[:-1]]))
    length = np.diff(np.append(start, len(values)))
    return np.repeat(length >= longest, length)


def noise_sd(values: np.ndarray) -> float:
    """Estimate the noise of evenly sampled readings from their fourth difference.

    Parameters
    ----------
    values : array of float, shape (n,)
        Total field, nT.

    Returns
    -------
    float
        Standard deviation, nT; NaN for fewer than five readings.

    """
    fourth = np.diff(values, 4)
    return float(TO_SIGMA * np.median(np.abs(fourth)) / np.sqrt(70.0)) if len(fourth) else np.nan


def screen_readings(readings: pd.DataFrame, *, settings: Screen) -> np.ndarray:
    """Test every reading.

    Parameters
    ----------
    readings : pandas.DataFrame
        time_utc, total_field_nt and signal, in order of time.
    settings : Screen
        Limits.

    Returns
    -------
    array of uint32, shape (n,)
        Flags.

    """
    time, value = readings["time_utc"].to_numpy(), readings["total_field_nt"].to_numpy()
    flags = np.zeros(len(value), np.uint32)
    absent = ~np.isfinite(value)
    flags[absent] |= np.uint32(Flag.DROPOUT)
    outside = ~absent & ((value < settings.lowest_nt) | (value > settings.highest_nt))
    flags[outside] |= np.uint32(Flag.OUT_OF_RANGE)
    if settings.lowest_signal is not None:
        flags[readings["signal"].to_numpy() < settings.lowest_signal] |= np.uint32(Flag.LOW_SIGNAL)
    interval = sampling_interval(time)
    runs = segments(time, flags == 0)
    for run in runs:
        flags[run[find_repeats(value[run], settings.longest_repeat)]] |= np.uint32(Flag.DROPOUT)
    if interval <= settings.coarsest_s:
        for run in segments(time, flags == 0):
            found = find_spikes(
                value[run],
                window=settings.window,
                threshold=settings.threshold,
                smallest=settings.smallest_spike_nt,
            )
            flags[run[found]] |= np.uint32(Flag.SPIKE)
    return flags


def apply_edits(flags: np.ndarray, rows: list[dict], readings: pd.DataFrame, **names) -> np.ndarray:
    """Let a person's edits outrank the automatic flags, in the order of the edits.

    Parameters
    ----------
    flags : array of uint32, shape (n,)
        Automatic flags.
    rows : list of dict
        Edits that reject or keep.
    readings : pandas.DataFrame
        time_utc and source_file.
    **names
        line_index, line_names and source_names, as `steps.edits.select` wants them.

    Returns
    -------
    array of uint32, shape (n,)
        Flags; the automatic ones stay, for the record, beside EDITED_IN and EDITED_OUT, of which the last edit stands.

    """
    flags = flags.copy()
    for edit in rows:
        touched = edits.select(
            edit, readings["time_utc"].to_numpy(), source_file=readings["source_file"].to_numpy(), **names
        )
        on, off = (Flag.EDITED_OUT, Flag.EDITED_IN) if edit["action"] == "reject" else (Flag.EDITED_IN, Flag.EDITED_OUT)
        flags[touched] = (flags[touched] | np.uint32(on)) & ~np.uint32(off)
    return flags


def rejected(flags: np.ndarray) -> np.ndarray:
    """Tell which readings are rejected: by an edit, or by a test that no edit lifts.

    Parameters
    ----------
    flags : array of uint32, shape (n,)

    Returns
    -------
    array of bool, shape (n,)

    """
    out = (flags & np.uint32(REJECTING)) != 0
    lifted = ((flags & np.uint32(Flag.EDITED_IN)) != 0) & ((flags & np.uint32(Flag.EDITED_OUT)) == 0)
    return out & ~lifted


def noise_by_line(readings: pd.DataFrame, flags: np.ndarray, line_index: np.ndarray, lines: int) -> np.ndarray:
    """Estimate the noise on every line, and of all that is on none.

    Parameters
    ----------
    readings : pandas.DataFrame
        time_utc and total_field_nt.
    flags : array of uint32, shape (n,)
        Flags of screening.
    line_index : array of int, shape (n,)
        Line of each reading, -1 for none.
    lines : int
        Number of lines.

    Returns
    -------
    array of float, shape (lines + 1,)
        Noise, nT; the last is that of readings on no line; a line too short to tell has the median of the others.

    """
    time, value = readings["time_utc"].to_numpy(), readings["total_field_nt"].to_numpy()
    good = ~rejected(flags) & np.isfinite(value)
    fourth = np.full(len(value), np.nan)
    for run in segments(time, good):
        if len(run) > 4:
            fourth[run[2:-2]] = np.diff(value[run], 4)
    noise = np.full(lines + 1, np.nan)
    table = pd.Series(np.abs(fourth)).groupby(line_index).median()
    for index, middle in table.items():
        noise[index if index >= 0 else lines] = TO_SIGMA * middle / np.sqrt(70.0)
    known = noise[np.isfinite(noise)]
    return np.where(np.isfinite(noise), noise, np.median(known) if len(known) else np.nan)


def main(job: stage.Job) -> None:
    """Screen the readings, apply edits, estimate noise, and balance the books."""
    import json

    readings = job.table("readings", ["time_utc", "total_field_nt", "signal", "source_file"])
    line_index = job.table("lines")["line_index"].to_numpy()
    table = job.table("line_table")
    files = [entry["file"] for entry in json.loads(job.path("ingest_record").read_text(encoding="utf-8"))["files"]]
    automatic = screen_readings(readings, settings=job.settings)
    names = {"line_index": line_index, "line_names": table["line"].tolist(), "source_names": files}
    flags = apply_edits(automatic, job.edits, readings, **names)
    noise = noise_by_line(readings, flags, line_index, len(table))
    out = rejected(flags)
    on_line = line_index >= 0
    if not (on_line & ~out).any():
        raise SurveyError(
            f"screen: no reading on a line is kept; {int((out & on_line).sum())} are rejected. Look at "
            "screen.lowest_nt, screen.highest_nt, screen.lowest_signal, the column of the total field, and the edits."
        )
    counts = {f.name.lower(): int(np.count_nonzero(flags & np.uint32(f))) for f in Flag if f & (AUTOMATIC | REJECTING)}
    ledger = {"readings": len(flags), "kept": int((~out).sum()), "rejected": int(out.sum())}
    if ledger["readings"] != ledger["kept"] + ledger["rejected"]:
        raise RuntimeError(f"the books do not balance: {ledger}")
    share = np.bincount(line_index[on_line & out], minlength=len(table)) / np.maximum(table["readings"].to_numpy(), 1)
    for line, part in zip(table["line"], share, strict=True):
        if part > 0.05:
            job.note(f"line {line}: {100 * part:.0f} % of the readings are rejected.")
    interval = sampling_interval(readings["time_utc"].to_numpy())
    if interval > job.settings.coarsest_s:
        job.note(
            f"no spike test: readings are {interval:.0f} s apart, and over screen.coarsest_s neighbours differ by "
            "geology."
        )
    job.write("screen", pd.DataFrame({"screen_flags": flags, "sigma_noise_nt": noise[line_index]}))
    job.record |= {
        "counts": counts,
        "ledger": ledger,
        "lines": [
            {"line": line, "noise_nt": None if np.isnan(sd) else float(sd), "rejected": float(part)}
            for line, sd, part in zip(table["line"], noise[:-1], share, strict=True)
        ],
    }
    middle = float(np.nanmedian(noise[:-1]))
    job.done(
        f"{ledger['kept']} readings kept, {ledger['rejected']} rejected ({counts['spike']} spikes, "
        f"{counts['dropout']} dropouts); noise {middle:.3f} nT"
    )


if __name__ == "__main__":
    stage.run(main)
