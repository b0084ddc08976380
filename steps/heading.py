"""Estimate the effect of heading from a calibration manoeuvre and take it to every reading.

``H(theta) = C1 cos(theta) + S1 sin(theta) + C2 cos(2 theta) + S2 sin(2 theta)``: the first harmonic is the permanent
part of the ship's field, the second the induced part (Bullard & Mason 1961, Deep-Sea Research 8); for the sensor's own
error theta is the tow direction. The constant cannot be told from the datum and belongs there.

The manoeuvre (a star, or legs over one point on many headings) is fitted by robust least squares together with the
local field, a polynomial in position, and a drift in time. Residuals along a leg are not independent: the covariance is
that of as many independent readings as their autocorrelation leaves, and every leg may be off as a whole by a stated
amount. A harmonic is applied if an F-test says so.
"""

import numpy as np
import pandas as pd

from steps import stage
from steps.columns import REJECTING, Flag
from steps.settings import Heading

NAMES = ("cos", "sin", "cos_2", "sin_2")
STEADY_DEG, STEADY_S = 8.0, 60.0  # a reading in which heading changes by more within this time is in a turn
SAME_STAR_H, SAME_STAR_KM = 6.0, 30.0
TWO_HEADINGS_DEG = 20.0
HUBER = 1.345  # robust sigmas, 95 % efficient for the normal distribution
SHOWN_POINTS = 1500


def harmonics(angle_deg: np.ndarray) -> np.ndarray:
    """Return cos, sin, cos 2, sin 2 of angles in degrees, shape (n, 4)."""
    theta = np.radians(angle_deg)
    return np.stack([np.cos(theta), np.sin(theta), np.cos(2 * theta), np.sin(2 * theta)], axis=-1)


def heading_effect(angle_deg: np.ndarray, coefficients: np.ndarray) -> np.ndarray:
    """Return the heading effect at angles.

    Parameters
    ----------
    angle_deg : array of float, shape (n,)
        Clockwise from true north.
    coefficients : array of float, shape (4,)
        C1, S1, C2, S2, nT.

    Returns
    -------
    array of float, shape (n,)
        nT, to be subtracted.

    """
    return harmonics(angle_deg) @ np.asarray(coefficients)


def effect_sigma(angle_deg: np.ndarray, covariance: np.ndarray) -> np.ndarray:
    """Return one sigma of the heading effect at angles, nT; `covariance` has shape (4, 4), nT squared."""
    terms = harmonics(angle_deg)
    return np.sqrt(np.maximum(np.einsum("ni,ij,nj->n", terms, covariance, terms), 0.0))


def widest_gap(angle_deg: np.ndarray) -> float:
    """Return the widest stretch of the circle without an angle, degrees."""
    if len(angle_deg) == 0:
        return 360.0
    ordered = np.unique(np.round(np.asarray(angle_deg) % 360.0, 1))
    return float(np.diff(np.append(ordered, ordered[0] + 360.0)).max())


def steady(time_s: np.ndarray, angle_deg: np.ndarray) -> np.ndarray:
    """Tell where the heading is steady: it changes by less than 8 degrees between half a minute before and after.

    Parameters
    ----------
    time_s : array of float, shape (n,)
        Increasing, of one leg.
    angle_deg : array of float, shape (n,)

    Returns
    -------
    array of bool, shape (n,)

    """
    theta = np.radians(angle_deg)
    sine, cosine = np.sin(theta), np.cos(theta)

    def at(shift):
        return np.arctan2(np.interp(time_s + shift, time_s, sine), np.interp(time_s + shift, time_s, cosine))

    change = at(STEADY_S / 2) - at(-STEADY_S / 2)
    return np.abs(np.degrees(np.arctan2(np.sin(change), np.cos(change)))) < STEADY_DEG


def find_stars(start_utc: np.ndarray, end_utc: np.ndarray, lat: np.ndarray, lon: np.ndarray) -> np.ndarray:
    """Tell the manoeuvres apart: legs that follow each other in time, over one place.

    Parameters
    ----------
    start_utc, end_utc : array of datetime64[ns], shape (m,)
        Of the calibration legs, in order of time.
    lat, lon : array of float, shape (m,)
        Middle of each leg, degrees.

    Returns
    -------
    array of int, shape (m,)

    """
    from steps.diurnal import distance_km

    star = np.zeros(len(start_utc), int)
    for k in range(1, len(start_utc)):
        late = (start_utc[k] - end_utc[k - 1]) / np.timedelta64(1, "h") > SAME_STAR_H
        far = distance_km(lat[k], lon[k], lat[k - 1], lon[k - 1]) > SAME_STAR_KM
        star[k] = star[k - 1] + int(late or far)
    return star


def fit_heading(
    angle_deg: np.ndarray,
    value_nt: np.ndarray,
    leg: np.ndarray,
    star: np.ndarray,
    east_km: np.ndarray,
    north_km: np.ndarray,
    time_h: np.ndarray,
    *,
    settings: Heading,
) -> dict:
    """Fit the heading effect to calibration readings.

    Parameters
    ----------
    angle_deg, value_nt : array of float, shape (n,)
        Heading (or tow direction) and what is left of the total field after main field and diurnal.
    leg, star : array of int, shape (n,)
        Leg and manoeuvre of each reading.
    east_km, north_km, time_h : array of float, shape (n,)
        Position and time about the middle of each manoeuvre.
    settings : Heading

    Returns
    -------
    dict
        ``kind``: "harmonics", "difference" (two opposite headings determine one number only) or "none", with
        ``reason``; ``coefficients`` (4), those applied; ``covariance`` (4 x 4); ``all_coefficients`` and
        ``all_covariance`` of the fit before the F-tests; ``tests``; ``condition``; ``sd_nt`` of the residuals;
        ``independent`` readings; ``residual_nt`` without the local field, per reading.

    """
    gap = widest_gap(angle_deg)
    axis = _two_headings(angle_deg)
    if axis is None and gap > settings.widest_gap_deg:
        return {
            "kind": "none",
            "reason": f"headings leave a gap of {gap:.0f} degrees in the circle",
            "widest_gap_deg": gap,
        }
    effect = harmonics(angle_deg) if axis is None else np.cos(np.radians(angle_deg) - axis)[:, None]
    local, degree = _choose_local_field(effect, value_nt, leg, star, east_km, north_km, time_h)
    design = np.concatenate([effect, local], axis=1)
    scale = np.linalg.norm(design, axis=0)
    scaled = design / scale
    solution, weight = _robust(scaled, value_nt)
    residual = value_nt - scaled @ solution
    independent = _independent(residual, leg)
    free = max(1.0, independent - design.shape[1])
    variance = float((weight * residual**2).sum() / weight.sum()) * independent / free
    inverse = np.linalg.pinv((scaled * weight[:, None]).T @ scaled)
    covariance = inverse * variance * len(value_nt) / independent
    # Every leg may be off as a whole, as every line may: that does not average out along it.
    pull = inverse @ (scaled * weight[:, None]).T
    pulls = np.stack([pull[:, leg == number].sum(axis=1) for number in np.unique(leg)], axis=1)
    covariance = (covariance + settings.sigma_leg_nt**2 * pulls @ pulls.T) / np.outer(scale, scale)
    k = effect.shape[1]
    coefficients, covariance = solution[:k] / scale[:k], covariance[:k, :k]
    # What of the effect the local field cannot imitate is what the fit rests on.
    own = effect - local @ np.linalg.lstsq(local, effect, rcond=None)[0]
    singular = np.linalg.svd(own / np.linalg.norm(effect, axis=0), compute_uv=False)
    result = {
        "condition": float(singular[0] / max(singular[-1], 1e-300)),
        "sd_nt": float(np.sqrt(variance)),
        "independent": float(independent),
        "widest_gap_deg": gap,
        "local_degree": degree,
        "local_residual_nt": value_nt - local @ (solution[k:] / scale[k:]),
    }
    if axis is not None:
        turn = np.array([np.cos(axis), np.sin(axis), 0.0, 0.0])
        full, spread = coefficients[0] * turn, covariance[0, 0] * np.outer(turn, turn)
        result |= {"kind": "difference", "difference_nt": float(2 * coefficients[0])}
        result |= {
            "axis_deg": float(np.degrees(axis) % 180.0),
            "sigma_difference_nt": float(2 * covariance[0, 0] ** 0.5),
        }
        result |= {"all_coefficients": full, "all_covariance": spread, "coefficients": full, "covariance": spread}
        return result | {"tests": []}
    tests, applied = _tests(coefficients, covariance, free, settings.significance)
    chosen = np.repeat(applied, 2)
    final, spread = np.zeros(4), np.zeros((4, 4))
    if chosen.all():
        final, spread = coefficients, covariance
    elif chosen.any():  # the kept harmonic is what it is given that the other is nothing
        a, b = np.flatnonzero(chosen), np.flatnonzero(~chosen)
        gain = covariance[np.ix_(a, b)] @ np.linalg.inv(covariance[np.ix_(b, b)])
        final[a] = coefficients[a] - gain @ coefficients[b]
        spread[np.ix_(a, a)] = covariance[np.ix_(a, a)] - gain @ covariance[np.ix_(b, a)]
    result |= {"kind": "harmonics", "all_coefficients": coefficients, "all_covariance": covariance}
    return result | {"coefficients": final, "covariance": spread, "tests": tests}


def _two_headings(angle_deg) -> float | None:
    """Return the axis, radians, if all headings lie within 20 degrees of one line, both ways along it; else None."""
    double = np.radians(2 * np.asarray(angle_deg))
    axis = np.arctan2(np.sin(double).sum(), np.cos(double).sum()) / 2
    off = np.radians(angle_deg) - axis
    near = np.abs(np.degrees(np.arctan2(np.sin(2 * off), np.cos(2 * off)))) / 2 < TWO_HEADINGS_DEG
    both = (np.cos(off) > 0).any() and (np.cos(off) < 0).any()
    return float(axis) if near.all() and both else None


def _local_field(leg, star, east, north, time, degree) -> np.ndarray:
    """Return the columns of the local field: for each manoeuvre a polynomial in position and a drift in time."""
    columns = []
    for number in np.unique(star):
        own = (star == number).astype(float)
        columns += [own * east**a * north ** (d - a) for d in range(degree + 1) for a in range(d + 1)]
        if len(np.unique(leg[star == number])) >= 3:
            columns.append(own * time)
    return np.stack(columns, axis=1)


def _choose_local_field(effect, value, leg, star, east, north, time) -> tuple[np.ndarray, int]:
    """Choose the degree of the local field, 1 to 3, by the Bayesian information criterion (Schwarz 1978).

    A leg counts as four independent readings: that is about what a cubic along it can tell. Fewer than six legs on a
    manoeuvre carry a plane and no more.
    """
    legs = len(np.unique(leg))
    fewest = min(len(np.unique(leg[star == number])) for number in np.unique(star))
    best = None
    for degree in (1, 2, 3) if fewest >= 6 else (1,):
        local = _local_field(leg, star, east, north, time, degree)
        design = np.concatenate([effect, local], axis=1)
        design = design / np.linalg.norm(design, axis=0)
        residual = value - design @ np.linalg.lstsq(design, value, rcond=None)[0]
        score = 4 * legs * np.log(np.median(np.abs(residual)) ** 2) + design.shape[1] * np.log(4 * legs)
        if best is None or score < best[0]:
            best = (score, local, degree)
    return best[1], best[2]


def _robust(design, value):
    """Solve by least squares with Huber weights."""
    weight = np.ones(len(value))
    for _ in range(20):
        root = np.sqrt(weight)
        solution = np.linalg.lstsq(design * root[:, None], value * root, rcond=None)[0]
        residual = value - design @ solution
        scale = 1.4826 * np.median(np.abs(residual - np.median(residual)))
        if scale == 0:
            break
        new = np.minimum(1.0, HUBER * scale / np.maximum(np.abs(residual), 1e-300))
        done = np.abs(new - weight).max() < 1e-6
        weight = new
        if done:
            break
    return solution, weight


def _independent(residual, leg) -> float:
    """Return how many independent readings the residuals are worth.

    With autocorrelation r(k) along a leg, n readings are worth n / (1 + 2 sum r(k)), the sum to its first zero.
    """
    worth = 0.0
    for number in np.unique(leg):
        own = residual[leg == number]
        n = len(own)
        if n < 8:
            worth += min(n, 1)
            continue
        size = 1 << (2 * n - 1).bit_length()
        spectrum = np.abs(np.fft.rfft(own, size)) ** 2
        lagged = np.fft.irfft(spectrum, size)[:n]
        if lagged[0] <= 0:
            worth += n
            continue
        r = lagged / lagged[0]
        zero = int(np.argmax(r <= 0)) if (r <= 0).any() else n
        worth += max(1.0, n / (1 + 2 * r[1:zero].sum()))
    return worth


def _tests(coefficients, covariance, free, level) -> tuple[list[dict], list[bool]]:
    """Test each harmonic by the F-statistic of its two coefficients."""
    from scipy.special import fdtrc

    tests, applied = [], []
    for harmonic in (1, 2):
        own = slice(2 * harmonic - 2, 2 * harmonic)
        statistic = float(coefficients[own] @ np.linalg.solve(covariance[own, own], coefficients[own]) / 2)
        chance = float(fdtrc(2, free, statistic))
        tests.append({"harmonic": harmonic, "F": statistic, "chance": chance, "applied": chance < level})
        applied.append(chance < level)
    return tests, applied


# -- stage -----------------------------------------------------------------------------------------------------------


def main(job: stage.Job) -> None:
    """Fit the heading effect to the calibration lines and take it to every reading."""
    position = job.table("position")
    angle = position[f"{job.settings.angle}_deg"].to_numpy()
    fit = _fit(job, position, angle)
    n = len(position)
    job.record["kind"] = fit["kind"]
    if fit["kind"] == "none":
        job.note(f"the heading effect is not determined: {fit['reason']}. The term is missing.")
        value, sigma = np.full(n, np.nan), np.full(n, np.nan)
        flags = np.full(n, int(Flag.NO_HEADING), np.uint32)
        job.record["reason"] = fit["reason"]
        job.done(f"not determined: {fit['reason']}")
    else:
        value = heading_effect(angle, fit["coefficients"])
        sigma = effect_sigma(angle, fit["covariance"])
        flags = np.where(np.isfinite(value), np.uint32(0), np.uint32(Flag.NO_HEADING))
        _record(job, fit)
    job.write("heading", pd.DataFrame({"heading_nt": value, "sigma_heading_nt": sigma, "heading_flags": flags}))


def _fit(job, position, angle) -> dict:
    """Fit the calibration lines of the survey, or say why that cannot be."""
    if job.settings.use == "none":
        return {"kind": "none", "reason": "switched off by heading.use"}
    table = job.table("line_table")
    legs = np.flatnonzero((table["kind"] == "calibration").to_numpy())
    if len(legs) == 0:
        return {"kind": "none", "reason": "the survey has no calibration line"}
    line_index = job.table("lines")["line_index"].to_numpy()
    readings = job.table("readings", ["time_utc", "total_field_nt"])
    flags = job.table("screen", ["screen_flags"])["screen_flags"].to_numpy()
    value = readings["total_field_nt"].to_numpy() - job.table("main_field")["main_field_nt"].to_numpy()
    diurnal = job.table("diurnal", ["diurnal_nt"])["diurnal_nt"].to_numpy()
    if np.isfinite(diurnal).any():
        value = value - diurnal
    kept = ((flags & np.uint32(REJECTING)) == 0) | ((flags & np.uint32(Flag.EDITED_IN)) != 0)
    good = np.isin(line_index, legs) & kept & np.isfinite(value) & np.isfinite(angle)
    time_s = readings["time_utc"].to_numpy().astype(np.int64) / 1e9
    for leg in legs:
        own = np.flatnonzero(good & (line_index == leg))
        if len(own):
            good[own] = steady(time_s[own], angle[own])
    legs = np.array([leg for leg in legs if (good & (line_index == leg)).sum() >= 8], int)
    good &= np.isin(line_index, legs)
    if good.sum() < 50 or len(legs) < 2:
        return {"kind": "none", "reason": "too few usable readings on calibration lines"}
    index = np.flatnonzero(good)
    lat, lon = (position[f"sensor_{part}_deg"].to_numpy()[index] for part in ("latitude", "longitude"))
    leg = line_index[index]
    middle = np.array([[np.median(lat[leg == k]), lon[leg == k][0]] for k in legs])
    star_of = find_stars(table["start_utc"].to_numpy()[legs], table["end_utc"].to_numpy()[legs], *middle.T)
    star = star_of[np.searchsorted(legs, leg)]
    east, north, hours = np.empty(len(index)), np.empty(len(index)), np.empty(len(index))
    for number in np.unique(star):
        own = star == number
        lon_0, lat_0 = lon[own][0], lat[own].mean()
        dlon = (lon[own] - lon_0 + 180.0) % 360.0 - 180.0
        east[own] = (dlon - dlon.mean()) * np.cos(np.radians(lat_0)) * 111.3
        north[own] = (lat[own] - lat_0) * 111.2
        hours[own] = (time_s[index][own] - time_s[index][own].mean()) / 3600
    fit = fit_heading(angle[index], value[index], leg, star, east, north, hours, settings=job.settings)
    fit["angle_deg"], fit["legs"], fit["readings"] = angle[index], len(legs), len(index)
    return fit


def _record(job, fit) -> None:
    """Put the fit into the record and say what was found."""
    every = max(1, len(fit["angle_deg"]) // SHOWN_POINTS)
    curve = np.arange(0.0, 361.0, 2.0)
    own = heading_effect(fit["angle_deg"], fit["coefficients"])
    level = float(np.median(fit["local_residual_nt"] - own))
    job.record |= {
        "legs": fit["legs"],
        "readings": fit["readings"],
        "independent": fit["independent"],
        "sd_nt": fit["sd_nt"],
        "condition": fit["condition"],
        "local_degree": fit["local_degree"],
        "widest_gap_deg": fit["widest_gap_deg"],
        "names": list(NAMES),
        "coefficients": fit["coefficients"].tolist(),
        "covariance": fit["covariance"].tolist(),
        "all_coefficients": fit["all_coefficients"].tolist(),
        "all_covariance": fit["all_covariance"].tolist(),
        "tests": fit["tests"],
        "fit": {
            "angle_deg": np.round(fit["angle_deg"][::every], 2).tolist(),
            "residual_nt": np.round(fit["local_residual_nt"][::every] - level, 4).tolist(),
            "curve_deg": curve.tolist(),
            "curve_nt": np.round(heading_effect(curve, fit["coefficients"]), 4).tolist(),
        },
    }
    if fit["kind"] == "difference":
        job.record |= {name: fit[name] for name in ("difference_nt", "sigma_difference_nt", "axis_deg")}
        job.note(
            "calibration on two opposite headings determines one number only, the difference between them: "
            f"{fit['difference_nt']:.2f} nT with sigma {fit['sigma_difference_nt']:.2f} nT; on other headings the "
            "effect is a guess from it."
        )
        job.done(f"difference of two headings {fit['difference_nt']:.2f} nT from {fit['legs']} legs")
        return
    applied = [str(test["harmonic"]) for test in fit["tests"] if test["applied"]]
    for test in fit["tests"]:
        if not test["applied"]:
            job.note(
                f"harmonic {test['harmonic']} of the heading effect is not significant (chance {test['chance']:.2g}): "
                "not applied."
            )
    size = [float(np.hypot(*fit["coefficients"][k : k + 2])) for k in (0, 2)]
    job.done(
        f"harmonics {' and '.join(applied) or 'none'} applied, amplitudes {size[0]:.2f} and {size[1]:.2f} nT, "
        f"from {fit['legs']} legs; residuals {fit['sd_nt']:.2f} nT"
    )


if __name__ == "__main__":
    stage.run(main)
