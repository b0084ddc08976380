"""Estimate the effect of heading from a calibration manoeuvre and take it to every reading.

``H(theta) = C1 cos(theta) + S1 sin(theta) + C2 cos(2 theta) + S2 sin(2 theta)``: the first harmonic is the permanent
part of the ship's field, the second the induced part (Bullard & Mason 1961, Deep-Sea Research 8); for the sensor's own
error theta is the tow direction. The constant cannot be told from the datum and belongs there.

The manoeuvre (a star, or legs over one place on many headings) is what is left of the total field after main field and
diurnal. It is solved by least-squares collocation (Moritz 1980, Advanced Physical Geodesy, ch. 14): the four
coefficients, and for each manoeuvre a constant, a gradient and a drift in time, stand in what also holds

* the crust: covariance ``s^2 (1 + r^2 / (2 z)^2)^(-3/2)`` of sources spread over a plane at depth z below the sensor,
* what is left of the external field: smooth in time, common to all legs,
* a constant and a drift of each leg, as lines have them: what a sum over one leg does not average out,
* an error of position along the track, common to all legs, times the gradient along the track, and noise.

The variances are those of greatest restricted likelihood (Patterson & Thompson 1971, Biometrika 58) under wide priors;
over that of the legs, which decides how good the coefficients are, is integrated. A harmonic is applied if its
F-test, averaged in the same way, says so.
"""

import numpy as np
import pandas as pd

from steps import stage
from steps.columns import REJECTING, Flag
from steps.geodesy import frames, to_degrees, to_vectors
from steps.settings import Heading

NAMES = ("cos", "sin", "cos_2", "sin_2")
STEADY_DEG, STEADY_S = 8.0, 60.0  # a reading in which heading changes by more within this time is in a turn
SAME_STAR_H, SAME_STAR_KM = 6.0, 30.0
TWO_HEADINGS_DEG = 20.0
PIECES, ALL_PIECES = 16, 256  # means that a leg is cut into at most, and all legs together if they are many
WILD = 4.0  # robust sigmas from its piece at which a reading is left out
SHOWN_POINTS = 1500

# Expected sizes, one sigma, and the spread of the logarithm of a variance about them
COEFFICIENT_NT = 10.0
GRADIENT_NT_PER_KM, DRIFT_NT_PER_H = 300.0, 10.0
CRUST_NT, DEPTH_KM, EXTERNAL_NT, EXTERNAL_H, NUGGET_NT = 20.0, 3.0, 10.0, 1.5, 0.1
SPREAD, SPREAD_OF_DEPTH = 2.0, 0.5


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
        0 for the legs of the first manoeuvre, and so on.

    """
    late = (start_utc[1:] - end_utc[:-1]) / np.timedelta64(1, "h") > SAME_STAR_H
    far = np.linalg.norm(np.diff(to_vectors(lat, lon)), axis=0) > SAME_STAR_KM * 1e3
    return np.concatenate([[0], np.cumsum(late | far)])


def cut_legs(angle_deg, value_nt, leg, star, east_km, north_km, time_h) -> dict[str, np.ndarray]:
    """Cut each leg into pieces and return their means, wild readings left out.

    Parameters
    ----------
    angle_deg, value_nt, leg, star, east_km, north_km, time_h : array, shape (n,)
        As of `fit_heading`, each leg in order of time.

    Returns
    -------
    dict of str to array, shape (m,)
        ``value_nt, leg, star, east_km, north_km, time_h``, ``order`` (of the readings along the leg, from 0),
        ``effect`` (m, 4; the mean harmonics) and ``noise_nt2``, the variance of the mean value by the scatter within
        its piece.

    """
    legs = np.unique(leg)
    most = int(np.clip(ALL_PIECES // len(legs), 3, PIECES))
    order = np.empty(len(leg))
    for number in legs:
        order[leg == number] = np.arange(np.count_nonzero(leg == number))
    columns = np.column_stack([value_nt, east_km, north_km, time_h, order, harmonics(angle_deg)])
    means, noise, of_leg = [], [], []
    for number in legs:
        own = np.flatnonzero(leg == number)
        pieces = min(most, max(len(own) // 4, min(len(own), 6)))
        starts = np.arange(pieces) * len(own) // pieces
        keep, variance = np.ones(len(own), bool), 0.0
        if len(own) >= 4 * pieces:
            middle = [[np.median(part) for part in np.split(column[own], starts[1:])] for column in (order, value_nt)]
            off = value_nt[own] - _along(order[own], *np.array(middle))
            size = 1.4826 * np.median(np.abs(off))
            keep, variance = np.abs(off) <= WILD * size + 1e-9, size**2
        count = np.add.reduceat(keep.astype(float), starts)
        sums = np.add.reduceat(columns[own] * keep[:, None], starts, axis=0)
        some = count > 0
        means.append(sums[some] / count[some, None])
        noise.append(variance / count[some])
        of_leg.append(np.full(some.sum(), own[0]))
    mean, first = np.concatenate(means), np.concatenate(of_leg)
    names = ("value_nt", "east_km", "north_km", "time_h", "order")
    return dict(zip(names, mean[:, :5].T, strict=True)) | {
        "effect": mean[:, 5:],
        "noise_nt2": np.concatenate(noise),
        "leg": leg[first],
        "star": star[first],
    }


def _along(t, knots, values):
    """Interpolate linearly, and go on straight beyond the ends."""
    if len(knots) < 2:
        return np.full(len(t), values[0])
    k = np.clip(np.searchsorted(knots, t) - 1, 0, len(knots) - 2)
    return values[k] + (values[k + 1] - values[k]) * (t - knots[k]) / (knots[k + 1] - knots[k])


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
    sigma_external_nt: float = 0.5,
    sigma_position_m: float = 0.0,
) -> dict:
    """Fit the heading effect to calibration readings.

    Parameters
    ----------
    angle_deg, value_nt : array of float, shape (n,)
        Heading (or tow direction) and what is left of the total field after main field and diurnal.
    leg, star : array of int, shape (n,)
        Leg and manoeuvre of each reading; each leg in order of time.
    east_km, north_km, time_h : array of float, shape (n,)
        Position and time about the middle of each manoeuvre.
    settings : Heading
    sigma_external_nt : float, optional
        Expected error of the diurnal term.
    sigma_position_m : float, optional
        Expected error of the position along the track.

    Returns
    -------
    dict
        ``kind``: "harmonics", "difference" (two opposite headings determine one number only) or "none", with
        ``reason``; ``coefficients`` (4), those applied; ``covariance`` (4 x 4) of their errors, which for a harmonic
        that is not applied is that of leaving it out; ``all_coefficients`` and ``all_covariance`` before the F-tests;
        ``tests``; ``condition``; ``sd_nt`` of the residuals; ``sigma_leg_nt`` as found; ``local_residual_nt``, what is
        left per reading without the local field.

    """
    data = cut_legs(angle_deg, value_nt, leg, star, east_km, north_km, time_h)
    angle = np.degrees(np.arctan2(data["effect"][:, 1], data["effect"][:, 0]))
    gap, axis = widest_gap(angle), _two_headings(angle)
    if axis is None and gap > settings.widest_gap_deg:
        return {
            "kind": "none",
            "reason": f"headings leave a gap of {gap:.0f} degrees in the circle",
            "widest_gap_deg": gap,
        }
    if axis is not None:
        data["effect"] = data["effect"][:, :2] @ np.array([[np.cos(axis)], [np.sin(axis)]])
    model = _Model(data, settings.sigma_leg_nt, sigma_external_nt, sigma_position_m)
    weight, solutions = model.integrate()
    both = list(zip(weight, solutions, strict=True))
    coefficients = sum(w * b for w, (b, _, _) in both)
    covariance = sum(w * (c + np.outer(b - coefficients, b - coefficients)) for w, (b, c, _) in both)
    local = sum(w * s for w, (_, _, s) in both)
    result = {
        "condition": model.condition(),
        "sd_nt": float(np.std(data["value_nt"] - data["effect"] @ coefficients - local)),
        "sigma_leg_nt": model.sigma_leg_nt(weight),
        "widest_gap_deg": gap,
        "pieces": len(data["leg"]),
        "local_residual_nt": value_nt - _between(data, local, leg),
    }
    if axis is not None:
        turn = np.array([np.cos(axis), np.sin(axis), 0.0, 0.0])
        full, spread = coefficients[0] * turn, covariance[0, 0] * np.outer(turn, turn)
        return result | {
            "kind": "difference",
            "axis_deg": float(np.degrees(axis) % 180.0),
            "difference_nt": float(2 * coefficients[0] * (1 if axis >= 0 else -1)),
            "sigma_difference_nt": float(2 * np.sqrt(covariance[0, 0])),
            "all_coefficients": full,
            "all_covariance": spread,
            "coefficients": full,
            "covariance": spread,
            "tests": [],
        }
    tests = [_test(harmonic, weight, solutions, settings.significance) for harmonic in (1, 2)]
    out = ~np.repeat([test["applied"] for test in tests], 2)
    final, spread = np.where(out, 0.0, coefficients), covariance.copy()
    spread[np.ix_(out, out)] += np.outer(coefficients[out], coefficients[out])
    result |= {"kind": "harmonics", "all_coefficients": coefficients, "all_covariance": covariance}
    return result | {"coefficients": final, "covariance": spread, "tests": tests}


def difference_sigma(angle_deg: np.ndarray, axis_deg: float, covariance: np.ndarray) -> np.ndarray:
    """Return one sigma of the effect where only the difference of two opposite headings is known, nT.

    Away from the two headings nothing is known of the effect but the size that such coefficients have.
    """
    off = harmonics(np.asarray(angle_deg) - axis_deg) - np.array([0.0, 0.0, 1.0, 0.0])
    unknown = COEFFICIENT_NT**2 * (off[..., 1] ** 2 + off[..., 2] ** 2 + off[..., 3] ** 2)
    return np.sqrt(effect_sigma(angle_deg, covariance) ** 2 + unknown)


def _two_headings(angle_deg) -> float | None:
    """Return the axis, radians, if all headings lie within 20 degrees of one line, both ways along it; else None."""
    double = np.radians(2 * np.asarray(angle_deg))
    axis = np.arctan2(np.sin(double).sum(), np.cos(double).sum()) / 2
    off = np.radians(angle_deg) - axis
    near = np.abs(np.degrees(np.arctan2(np.sin(2 * off), np.cos(2 * off)))) / 2 < TWO_HEADINGS_DEG
    both = (np.cos(off) > 0).any() and (np.cos(off) < 0).any()
    return float(axis) if near.all() and both else None


def _between(data, values, leg) -> np.ndarray:
    """Interpolate values of the pieces to the readings of each leg."""
    result = np.empty(len(leg))
    for number in np.unique(leg):
        own, of_leg = leg == number, data["leg"] == number
        result[own] = _along(np.arange(np.count_nonzero(own)), data["order"][of_leg], values[of_leg])
    return result


class _Model:
    """The covariance of the pieces' values as a function of its variances, and what follows from it."""

    def __init__(self, data, sigma_leg_nt, sigma_external_nt, sigma_position_m):
        from scipy.linalg import lapack

        self._lapack = lapack
        self.effect, leg = data["effect"], data["leg"]
        star, time = data["star"], data["time_h"]
        place = np.column_stack([data["east_km"], data["north_km"]])
        own = star[:, None] == np.unique(star)
        constants = own.astype(float)
        drifts = own & np.array([len(np.unique(leg[star == number])) >= 3 for number in np.unique(star)])
        slopes = np.concatenate([own * place[:, :1], own * place[:, 1:]], axis=1)
        self.flat = constants  # what is not bound by any prior
        self.known = np.concatenate([self.effect, slopes, drifts * time[:, None]], axis=1)
        count = own.shape[1]
        self.sizes = np.repeat(
            [COEFFICIENT_NT, GRADIENT_NT_PER_KM, DRIFT_NT_PER_H], [self.effect.shape[1], 2 * count, count]
        )
        self.value = data["value_nt"] - constants @ (constants.T @ data["value_nt"] / constants.sum(0))
        # Manoeuvres at different places are measured each from its own middle: their crusts are apart.
        apart = np.where(star[:, None] == star, 0.0, np.inf)
        self.distance_2 = ((place[:, None] - place) ** 2).sum(-1) + apart
        self.fixed = np.diag(data["noise_nt2"])
        if sigma_position_m > 0:
            slope = np.zeros(len(leg))
            for number in np.unique(leg):
                slope[leg == number] = _slope_along(place[leg == number], self.value[leg == number])
            self.fixed += (sigma_position_m * 1e-3) ** 2 * np.outer(slope, slope)
        lag = np.sqrt(3.0) / EXTERNAL_H * np.abs(time[:, None] - time)
        same = (leg[:, None] == leg).astype(float)
        share = np.zeros(len(leg))
        for number in np.unique(leg):
            centred = time[leg == number] - time[leg == number].mean()
            share[leg == number] = centred / max(np.sqrt((centred**2).mean()), 1e-12)
        # The external field of two manoeuvres is one process only if their times have one origin: they have not.
        self.shapes = [(1 + lag) * np.exp(-lag) * (apart == 0), np.eye(len(leg))]
        expected = [CRUST_NT, max(sigma_external_nt, 1e-3), NUGGET_NT]
        self.legs = sigma_leg_nt > 0
        if self.legs:
            self.shapes += [same * np.outer(share, share), same]
            expected += [sigma_leg_nt / 2, sigma_leg_nt]
        self.expected = np.concatenate([[np.log(DEPTH_KM)], 2 * np.log(expected)])
        self.spread = np.full(len(self.expected), SPREAD)
        self.spread[0] = SPREAD_OF_DEPTH
        self.best = None

    def _parts(self, place) -> list[np.ndarray]:
        """Return the covariance of each process; `place` is in spreads from the expected logarithms."""
        logarithm = self.expected + self.spread * place
        wide = 1.0 + self.distance_2 / (4 * np.exp(2 * logarithm[0]))
        crust = np.exp(logarithm[1]) / (wide * np.sqrt(wide))
        others = [size * shape for size, shape in zip(np.exp(logarithm[2:]), self.shapes, strict=True)]
        return [3.0 * crust * (1 - 1 / wide), crust, *others]  # the first is the crust's slope by log depth

    def _covariance(self, parts) -> np.ndarray:
        total = sum(parts[1:]) + self.fixed
        total[np.diag_indices_from(total)] += 1e-9 * total[0, 0]  # rounding
        return total

    def _cost(self, place) -> tuple[float, np.ndarray]:
        """Minus the logarithm of restricted likelihood times prior, and its gradient."""
        parts = self._parts(place)
        scaled = self.known * self.sizes
        factor, bad = self._lapack.dpotrf(self._covariance(parts) + scaled @ scaled.T, lower=1)
        if bad:
            return 1e12, np.zeros(len(place))
        inverse, _ = self._lapack.dpotri(factor, lower=1)
        inverse = np.tril(inverse) + np.tril(inverse, -1).T
        half = inverse @ self.flat
        normal = self.flat.T @ half
        free = inverse - half @ np.linalg.solve(normal, half.T)
        left = free @ self.value
        size = np.log(np.diag(factor)).sum() + 0.5 * np.linalg.slogdet(normal)[1]
        slope = free - np.outer(left, left)
        gradient = place + 0.5 * self.spread * np.array([np.vdot(slope, part) for part in parts])
        return size + 0.5 * left @ self.value + 0.5 * place @ place, gradient

    def integrate(self) -> tuple[np.ndarray, list[tuple]]:
        """Return solutions for variances of the legs about the most likely one, and their weights, of sum 1."""
        from scipy.optimize import minimize

        start = np.zeros(len(self.expected))
        self.best = minimize(self._cost, start, jac=True, method="L-BFGS-B", bounds=[(-4, 4)] * len(start)).x
        trials = [self.best]
        if self.legs:
            trials = [np.append(self.best[:-1], self.best[-1] + step) for step in np.linspace(-2.5, 2.5, 11)]
        cost = np.array([self._cost(trial)[0] for trial in trials])
        weight = np.exp(cost.min() - cost)
        self.trials = trials
        return weight / weight.sum(), [self._solve(trial) for trial in trials]

    def _solve(self, place) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return coefficients, their covariance, and the local field (all but effect, legs and noise) at the pieces."""
        parts = self._parts(place)
        inverse = np.linalg.inv(self._covariance(parts))
        design = np.concatenate([self.known, self.flat], axis=1)
        scale = np.abs(design).max(0)
        scale[scale == 0] = 1.0
        prior = np.concatenate([self.sizes**-2.0, np.zeros(self.flat.shape[1])])
        normal = design.T @ inverse @ design + np.diag(prior)
        spread = np.linalg.inv(normal / np.outer(scale, scale)) / np.outer(scale, scale)
        solution = spread @ (design.T @ (inverse @ self.value))
        k = self.effect.shape[1]
        errors = sum(parts[3:]) + self.fixed
        local = self.value - self.effect @ solution[:k] - errors @ (inverse @ (self.value - design @ solution))
        return solution[:k], spread[:k, :k], local

    def condition(self) -> float:
        """Return the condition number of the coefficients, of unit columns, beside constant, gradient and drift."""
        local = np.concatenate([self.flat, self.known[:, self.effect.shape[1] :]], axis=1)
        own = self.effect - local @ np.linalg.lstsq(local, self.effect, rcond=None)[0]
        singular = np.linalg.svd(own / np.maximum(np.linalg.norm(self.effect, axis=0), 1e-12), compute_uv=False)
        return float(singular[0] / max(singular[-1], 1e-12 * singular[0]))

    def sigma_leg_nt(self, weight) -> float:
        """Return the error of a whole leg as found, one sigma."""
        if not self.legs:
            return 0.0
        variance = [np.exp(self.expected[-1] + self.spread[-1] * trial[-1]) for trial in self.trials]
        return float(np.sqrt(weight @ np.array(variance)))


def _slope_along(place, value) -> np.ndarray:
    """Return the gradient along a leg, nT per km."""
    if len(value) < 3:
        return np.zeros(len(value))
    way = place[-1] - place[0]
    along = place @ (way / max(np.linalg.norm(way), 1e-9))
    return np.gradient(value, along) if (np.diff(along) > 0).all() else np.zeros(len(value))


def _test(harmonic, weight, solutions, level) -> dict:
    """Test a harmonic: how likely is so large a one where there is none.

    With the variance of the legs given, twice F is of chi-square distribution; averaged over what the legs leave of
    that variance, it is the F-test.
    """
    own = slice(2 * harmonic - 2, 2 * harmonic)
    f = [float(b[own] @ np.linalg.solve(c[own, own], b[own]) / 2) for b, c, _ in solutions]
    chance = float(weight @ np.exp(-np.array(f)))  # chi-square of two degrees of freedom
    return {"harmonic": harmonic, "F": float(weight @ f), "chance": chance, "applied": chance < level}


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
        if fit["kind"] == "difference":
            sigma = difference_sigma(angle, fit["axis_deg"], fit["covariance"])
        else:
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
    diurnal, sigma_diurnal = (job.table("diurnal", [c])[c].to_numpy() for c in ("diurnal_nt", "sigma_diurnal_nt"))
    with_base = np.isfinite(diurnal[np.isin(line_index, legs)]).any()
    if with_base:
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
    legs = legs[np.argsort(table["start_utc"].to_numpy()[legs], kind="stable")]
    index = np.flatnonzero(good)
    lat, lon = (position[f"sensor_{part}_deg"].to_numpy()[index] for part in ("latitude", "longitude"))
    leg, vectors, hours = line_index[index], to_vectors(lat, lon), time_s[index] / 3600
    middle = to_degrees(np.stack([vectors[:, leg == k].mean(axis=1) for k in legs], axis=1))
    star_of = np.zeros(len(table), int)
    star_of[legs] = find_stars(*(table[c].to_numpy()[legs] for c in ("start_utc", "end_utc")), *middle)
    star = star_of[leg]
    east, north, since = np.empty(len(index)), np.empty(len(index)), np.empty(len(index))
    for number in np.unique(star):
        own = star == number
        centre = vectors[:, own].mean(axis=1)
        towards = frames(*to_degrees(centre))
        east[own], north[own] = (unit @ (vectors[:, own] - centre[:, None]) * 1e-3 for unit in towards)
        since[own] = hours[own] - hours[own].mean()
    fit = fit_heading(
        angle[index],
        value[index],
        leg,
        star,
        east,
        north,
        since,
        settings=job.settings,
        sigma_external_nt=float(np.median(sigma_diurnal[index])) if with_base else EXTERNAL_NT,
        sigma_position_m=float(np.nanmedian(position["sigma_position_m"].to_numpy()[index])),
    )
    fit["angle_deg"], fit["legs"], fit["readings"] = angle[index], len(legs), len(index)
    fit["manoeuvres"] = len(np.unique(star))
    return fit


def _record(job, fit) -> None:
    """Put the fit into the record and say what was found."""
    every = max(1, len(fit["angle_deg"]) // SHOWN_POINTS)
    curve = np.arange(0.0, 361.0, 2.0)
    own = heading_effect(fit["angle_deg"], fit["coefficients"])
    level = float(np.median(fit["local_residual_nt"] - own))
    names = (
        "legs",
        "manoeuvres",
        "readings",
        "pieces",
        "sd_nt",
        "sigma_leg_nt",
        "condition",
        "widest_gap_deg",
        "tests",
    )
    job.record |= {name: fit[name] for name in names}
    for name in ("coefficients", "covariance", "all_coefficients", "all_covariance"):
        job.record[name] = fit[name].tolist()
    job.record |= {
        "names": list(NAMES),
        "fit": {
            "angle_deg": np.round(fit["angle_deg"][::every], 2).tolist(),
            "residual_nt": np.round(fit["local_residual_nt"][::every] - level, 4).tolist(),
            "curve_deg": curve.tolist(),
            "curve_nt": np.round(heading_effect(curve, fit["coefficients"]), 4).tolist(),
        },
    }
    if fit["kind"] == "difference":
        job.record |= {name: fit[name] for name in ("difference_nt", "sigma_difference_nt", "axis_deg")}
        one, two = fit["axis_deg"], fit["axis_deg"] + 180.0
        job.note(
            "calibration on two opposite headings determines one number only, the effect on "
            f"{one:03.0f} minus that on {two:03.0f} degrees: {fit['difference_nt']:.2f} nT with sigma "
            f"{fit['sigma_difference_nt']:.2f} nT. On other headings the effect is a guess from it, of large sigma."
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
    worst = float(np.sqrt(np.linalg.eigvalsh(fit["all_covariance"])[-1]))
    if worst > COEFFICIENT_NT / 2:
        job.note(
            "the headings of the calibration legs do not tell all four coefficients of the heading effect (condition "
            f"number {fit['condition']:.0f}): on headings between them its sigma is up to {worst:.0f} nT."
        )
    size = [float(np.hypot(*fit["coefficients"][k : k + 2])) for k in (0, 2)]
    job.done(
        f"harmonics {' and '.join(applied) or 'none'} applied, amplitudes {size[0]:.2f} and {size[1]:.2f} nT, "
        f"from {fit['legs']} legs; residuals {fit['sd_nt']:.2f} nT, error of a leg {fit['sigma_leg_nt']:.2f} nT"
    )


if __name__ == "__main__":
    stage.run(main)
