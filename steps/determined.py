"""Tell from the normal matrix what the crossings determine and what they cannot, in plain words.

For each survey the normal matrix N of its coefficients is formed from its own crossings, ``B' V^-1 B`` with V the
covariance of everything else. A direction of the coefficients is determined where N outweighs the prior; elsewhere the
prior alone would answer, and that is said, with the combination that is determined.
"""

from dataclasses import replace

import numpy as np

from steps import joint
from steps.collocation import EFFECTS_OF, Block, Crossings, Model

LARGEST = 50  # surveys for which advice is worked out
TOO_ALIKE = 0.95  # correlation beyond which two estimates cannot be told apart
SIGNIFICANT = 3.0  # standard errors
SAME_HEADING_DEG = 12.0
WEAK = 1e-3  # of the largest eigenvalue of the normal matrix of constants and trends
LINES_LOOKED_AT = 300  # for weak modes
BROUGHT = ("left_out_with_nt", "left_out_without_nt", "rms_left_out_with_nt", "rms_left_out_without_nt")
NAMES = ("C1", "S1", "C2", "S2")


def normal_matrix(data: Crossings, model: Model, used: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the normal matrix and the right-hand side of the coefficients, all other causes marginalised.

    Parameters
    ----------
    data : Crossings
        Of one survey.
    model : Model
        Its processes and noise count; the prior of its coefficients does not.
    used : array of bool, shape (n,)

    Returns
    -------
    matrix : array, shape (7, 7)
    right : array, shape (7,)

    """
    alone = replace(model, prior=np.zeros_like(model.prior))
    matrix, right = np.zeros((7, 7)), np.zeros(7)
    lines = int(max(data.first.line.max(initial=0), data.second.line.max(initial=0))) + 1
    rows = np.flatnonzero(used)
    for group in joint.clusters(data.first.line[rows], data.second.line[rows], lines):
        own = data.take(rows[group])
        v = Block(own, alone).covariance(alone, np.ones(len(own)))
        effects = own.first.effects * own.first.loose[:, None] - own.second.effects * own.second.loose[:, None]
        moved = np.linalg.solve(v, np.column_stack([effects, own.mismatch]))
        matrix += effects.T @ moved[:, :7]
        right += effects.T @ moved[:, 7]
    return (matrix + matrix.T) / 2, right


def of_survey(data: Crossings, survey: int) -> np.ndarray:
    """Return the rows of the crossings whose passes both belong to a survey."""
    return np.flatnonzero((data.first.survey == survey) & (data.second.survey == survey))


def position_advice(matrix: np.ndarray, right: np.ndarray, prior: np.ndarray, data: Crossings) -> dict | None:
    """Estimate the errors of layback and clock from the crossings alone, and say whether they can be told apart.

    Parameters
    ----------
    matrix, right : array, shape (7, 7) and (7,)
        From `normal_matrix`.
    prior : array, shape (7, 7)
        Prior covariance; used for the other coefficients.
    data : Crossings
        Of the survey, for its speeds.

    Returns
    -------
    dict or None
        ``layback_m`` and ``sigma_layback_m`` if the clock is right; ``clock_s`` and ``sigma_clock_s`` if the layback is
        right; ``correlation`` of the two estimated together; ``told_apart``; both together in that case
        (``both_layback_m`` and so on); ``mean_speed_mps`` and ``speed_spread_mps``; ``words``. None where the crossings
        say nothing.

    """
    others = np.flatnonzero(np.diag(prior)[:5] > 0)
    pair = np.array([5, 6])
    schur, vector = matrix[np.ix_(pair, pair)], right[pair]
    if len(others):
        inner = matrix[np.ix_(others, others)] + np.linalg.pinv(prior[np.ix_(others, others)])
        gain = np.linalg.solve(inner, matrix[np.ix_(others, pair)])
        schur = schur - matrix[np.ix_(pair, others)] @ gain
        vector = vector - gain.T @ right[others]
    if not (np.diag(schur) > 1e-9).all():
        return None
    alone, errors = vector / np.diag(schur), 1 / np.sqrt(np.diag(schur))
    correlation = -schur[0, 1] / np.sqrt(schur[0, 0] * schur[1, 1])  # of the estimates
    speeds = np.abs(
        np.concatenate(
            [
                p.effects[:, 6] / np.where(p.effects[:, 5] == 0, np.nan, p.effects[:, 5])
                for p in (data.first, data.second)
            ]
        )
    )
    speed, spread = (float(f(speeds)) for f in (np.nanmean, np.nanstd))
    advice = {
        "layback_m": float(alone[0]),
        "sigma_layback_m": float(errors[0]),
        "clock_s": float(alone[1]),
        "sigma_clock_s": float(errors[1]),
        "correlation": float(correlation),
        "told_apart": bool(abs(correlation) < TOO_ALIKE),
        "mean_speed_mps": speed,
        "speed_spread_mps": spread,
    }
    first = (
        f"the crossings ask for {alone[0]:+.1f} m of layback (standard error {errors[0]:.1f} m) if the clock is right, "
        f"or for {alone[1]:+.2f} s on the logger's clock (standard error {errors[1]:.2f} s) if the layback is right"
    )
    if advice["told_apart"]:
        covariance = np.linalg.inv(schur)
        both = covariance @ vector
        advice |= {
            "both_layback_m": float(both[0]),
            "both_sigma_layback_m": float(np.sqrt(covariance[0, 0])),
            "both_clock_s": float(both[1]),
            "both_sigma_clock_s": float(np.sqrt(covariance[1, 1])),
        }
        words = (
            f"{first}; estimated together, {both[0]:+.1f} m ({np.sqrt(covariance[0, 0]):.1f} m) and {both[1]:+.2f} s "
            f"({np.sqrt(covariance[1, 1]):.2f} s): the speed varies enough to tell them apart"
        )
    else:
        words = (
            f"{first}; the speed varies by only {100 * spread / speed:.0f} %, so the two cannot be told apart: what is "
            f"determined is layback error minus {speed:.1f} m/s times clock error, {alone[0]:+.1f} m"
        )
    return advice | {"words": words}


def distinct_headings(data: Crossings) -> np.ndarray:
    """Return the headings of the passes, degrees, each group of like ones once, in ascending order."""
    effects = np.concatenate([data.first.effects, data.second.effects])
    angle = np.degrees(np.arctan2(effects[:, 1], effects[:, 0])) % 360
    angle = np.sort(angle[np.hypot(effects[:, 0], effects[:, 1]) > 0.5])
    if not len(angle):
        return angle
    gap = np.diff(angle, append=angle[0] + 360)
    wide = np.flatnonzero(gap > SAME_HEADING_DEG)
    if not len(wide):
        return angle[:1]
    turned = np.roll(angle, -(wide[0] + 1))
    parts = np.split(turned, np.cumsum(np.diff(np.append(wide, wide[0] + len(angle))))[:-1])
    middles = [np.degrees(np.angle(np.exp(1j * np.radians(part)).mean())) % 360 for part in parts if len(part)]
    return np.sort(middles)


def heading_words(
    matrix: np.ndarray, prior: np.ndarray, data: Crossings, effect: np.ndarray, covariance: np.ndarray
) -> dict:
    """Say which combinations of the heading coefficients the crossings determine.

    Parameters
    ----------
    matrix : array, shape (7, 7)
        From `normal_matrix`.
    prior : array, shape (7, 7)
        Prior covariance.
    data : Crossings
        Of the survey.
    effect, covariance : array, shape (4,) and (4, 4)
        The change of the coefficients that was found, and its covariance.

    Returns
    -------
    dict
        ``determined``: number of combinations, 0 to 4; ``headings_deg``; ``combinations``: list of dict with
        ``weights`` (of C1, S1, C2, S2), ``value_nt``, ``sigma_nt``; ``words``.

    """
    own = prior[:4, :4]
    spread, axes = np.linalg.eigh(own)
    root = axes * np.sqrt(np.maximum(spread, 0.0))
    others = 4 + np.flatnonzero(np.diag(prior)[4:] > 0)
    inner = matrix[:4, :4]
    if len(others):
        block = matrix[np.ix_(others, others)] + np.linalg.pinv(prior[np.ix_(others, others)])
        inner = inner - matrix[:4, others] @ np.linalg.solve(block, matrix[others, :4])
    told, directions = np.linalg.eigh(root.T @ inner @ root)
    headings = distinct_headings(data)
    good = np.flatnonzero(told > 1.0)[::-1]
    combinations = []
    for k in good:
        weights = np.linalg.pinv(root.T) @ directions[:, k]
        weights = weights / np.linalg.norm(weights)
        combinations.append(
            {
                "weights": weights.tolist(),
                "value_nt": float(weights @ effect),
                "sigma_nt": float(np.sqrt(max(weights @ covariance @ weights, 0.0))),
            }
        )
    listed = ", ".join(f"{h:03.0f}" for h in headings[:6])
    if len(headings) < 2 or not len(good):
        where = f"all crossings are on one heading ({listed})" if len(headings) == 1 else "the crossings are too few"
        words = f"the crossings say nothing of the heading effect: {where}"
    elif len(headings) == 2:
        a, b = (np.concatenate([_harmonics(h)]) for h in headings)
        difference, sigma = (a - b) @ effect, np.sqrt(max((a - b) @ covariance @ (a - b), 0.0))
        words = (
            f"the crossings lie on two headings ({listed}): of the heading effect they determine one number only, the "
            f"difference between the two, {difference:+.2f} nT (sigma {sigma:.2f} nT) beyond what was applied"
        )
    elif len(good) < 4:
        texts = [f"{_sum_of(c['weights'])} = {c['value_nt']:+.2f} nT ({c['sigma_nt']:.2f} nT)" for c in combinations]
        words = (
            f"the headings of the crossings ({listed}) determine {len(good)} of the 4 combinations of heading "
            f"coefficients: {'; '.join(texts)}; the others rest on the prior"
        )
    else:
        words = f"the headings of the crossings ({listed}) determine all four heading coefficients"
    return {
        "determined": len(good),
        "headings_deg": [float(h) for h in headings[:36]],
        "combinations": combinations,
        "words": words,
    }


def _harmonics(angle_deg: float) -> np.ndarray:
    theta = np.radians(angle_deg)
    return np.array([np.cos(theta), np.sin(theta), np.cos(2 * theta), np.sin(2 * theta)])


def _sum_of(weights: list[float]) -> str:
    """Write a combination of the coefficients, leaving out what hardly counts."""
    terms = [f"{w:+.2f} {name}" for w, name in zip(weights, NAMES, strict=True) if abs(w) >= 0.05]
    return " ".join(terms).removeprefix("+")


def weak_modes(first: np.ndarray, second: np.ndarray, share: np.ndarray, place: np.ndarray, lines: int) -> dict | None:
    """Count the combinations of constants and linear trends of lines that the crossings leave undetermined.

    Parameters
    ----------
    first, second : array of int, shape (n,)
        Lines of the crossings of one network.
    share : array, shape (n, 2)
        Place of the crossing along both lines.
    place : array, shape (n, 2)
        Place of the crossing, east and north in any unit.
    lines : int
        Number of lines.

    Returns
    -------
    dict or None
        ``modes``: number of undetermined combinations, the common level included; ``surfaces``: how many of them are a
        smooth surface over the survey (level, two tilts, twist), ``words``. None where there are too many lines to look
        at.

    """
    used, columns = np.unique(np.concatenate([first, second]), return_inverse=True)
    if len(used) > LINES_LOOKED_AT or not len(first):
        return None
    n, m = len(first), len(used)
    one, two = columns[:n], columns[n:]
    rows = np.arange(n)
    design = np.zeros((n, 2 * m))
    for line, part, sign in ((one, share[:, 0], 1.0), (two, share[:, 1], -1.0)):
        design[rows, line] += sign
        design[rows, m + line] += sign * part
    size, axes = np.linalg.eigh(design.T @ design)
    weak = axes[:, size < WEAK * size[-1]]
    values = np.zeros((n, weak.shape[1]))  # what a mode does at the crossings: the same on both lines
    for line, part in ((one, share[:, 0]), (two, share[:, 1])):
        values += (weak[line] + part[:, None] * weak[m + line]) / 2
    x, y = ((place - place.mean(axis=0)) / np.maximum(np.abs(place - place.mean(axis=0)).max(axis=0), 1e-12)).T
    # a twist along lines of any azimuth is a sum of these
    surface = np.column_stack([np.ones(n), x, y, x * y, x**2, y**2])
    basis, strength, _ = np.linalg.svd(values, full_matrices=False)
    basis = basis[:, strength > 1e-6 * max(strength[0], 1e-12)]
    # principal angles between what the modes can do and the surfaces
    seen = np.linalg.svd(np.linalg.qr(surface)[0].T @ basis, compute_uv=False)
    surfaces = int(np.sum(seen > 0.98))
    modes = weak.shape[1]
    words = (
        f"with a trend in every line the crossings leave {modes} combinations undetermined, not one: "
        f"{surfaces} of them {'is a surface' if surfaces == 1 else 'are surfaces'} over the whole survey "
        "(level, tilts, twist)"
        + (f", {modes - surfaces} concern single lines with too few crossings" if modes > surfaces else "")
        + "; differences between neighbouring lines are determined, such a surface rests on the prior that trends are "
        "small"
    )
    return {"modes": modes, "surfaces": surfaces, "words": words}


def determined_share(prior: np.ndarray, posterior: np.ndarray, term: str) -> float:
    """Return which part of the prior variance of a term's coefficients the crossings have removed, 0 to 1."""
    own = EFFECTS_OF[term]
    before, after = np.trace(prior[own, own]), np.trace(posterior[own, own])
    return float(1.0 - after / before) if before > 0 else 0.0


# -- what the stage says ----------------------------------------------------------------------------------------------


def _number(value) -> float | None:
    return float(value) if value is not None and np.isfinite(value) else None


def _rms(values) -> float | None:
    values = np.asarray(values, float)
    values = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(values**2))) if len(values) else None


def _listed(names, most: int = 10) -> str:
    names = list(names)
    return ", ".join(names[:most]) + (f" and {len(names) - most} more" if len(names) > most else "")


def _about_lines(levels, names) -> tuple[list[str], dict]:
    """Say which lines have no level, which networks there are, and which lines rest on one crossing."""
    notes = []
    lines, network = levels.lines, levels.network
    counted = lines["kind"].isin(["line", "tie"]).to_numpy() if "kind" in lines else np.ones(len(lines), bool)
    lost = np.flatnonzero((network < 0) & counted)
    used = np.isfinite(levels.crossings["residual_nt"].to_numpy(float))
    rejected = int((levels.crossings["weight"] == 0).sum())
    if not used.any():
        why = "every crossing was rejected" if rejected else "there is no usable crossing"
        notes.append(f"{why}: no line can be levelled, and the level term is missing everywhere.")
    elif len(lost):
        notes.append(f"without a usable crossing, and so without a level term: {_listed(names[lost])}.")
    parts = int(network.max(initial=-1)) + 1
    if parts > 1:
        sizes = np.bincount(network[network >= 0])
        notes.append(
            f"the lines fall into {parts} networks that no crossing connects (of {_listed(map(str, sizes), 6)} lines): "
            "each has a datum of its own, and their levels against each other are unknown."
        )
    if rejected and used.any():
        notes.append(
            f"{rejected} of {int(used.sum()) + rejected} crossings do not fit the others and are left out; the table "
            "of crossings says by how much."
        )
    return notes, {
        "networks": parts,
        "lines_without_level": [str(name) for name in names[lost]],
        "crossings_used": int(used.sum()),
        "crossings_rejected": rejected,
    }


def _about_terms(levels) -> tuple[list[dict], list[dict]]:
    """List what each term brought, and the sizes of the processes."""
    model, kept = levels.fit.model, joint.kept_terms(levels.fit.model)
    tried = {trial["term"]: trial for trial in levels.fit.trials}
    terms = []
    for term in joint.TERMS:
        brought = {key: _number(tried[term][key]) if term in tried else None for key in BROUGHT}
        terms.append({"term": term, "kept": term in kept, **brought})
    sizes = np.exp(model.log_variance / 2)
    processes = [
        {
            "process": process.name,
            "term": process.term or "line",
            "sigma": _number(size),
            "unit": "1" if process.size else "nT",
            "hours": process.hours if process.form in ("wander", "time") else None,
        }
        for process, size in zip(model.processes, sizes, strict=False)
    ]
    names = ("values", "positions", "extra")
    for name, size in zip(names, sizes[len(model.processes) :], strict=True):
        processes.append(
            {
                "process": f"crossings: {name}",
                "term": "crossing",
                "sigma": _number(size),
                "unit": "nT" if name == "extra" else "1",
                "hours": None,
            }
        )
    return terms, processes


def _about_survey(levels, s: int, settings) -> tuple[list[str], dict]:
    """Say what the crossings of one survey determine of its coefficients."""
    notes, said = [], {}
    kept = joint.kept_terms(levels.fit.model)
    p = levels.posterior
    used = p.weight > 0
    rows = of_survey(levels.data, s)
    rows = rows[used[rows]]
    own = levels.data.take(rows)
    wanted = joint.wanted_terms(settings, own) & joint.kept_terms(levels.fit.full) if len(rows) else set()
    prior = levels.fit.full.prior[s]
    for term, columns in EFFECTS_OF.items():
        if term in kept:
            values = p.effects[s, columns] + (levels.heading_mean[s] if term == "heading" else 0.0)
            said[term] = {
                "values": [float(v) for v in values],
                "sigmas": np.sqrt(np.maximum(np.diag(p.effects_covariance[s])[columns], 0.0)).tolist(),
                "applied": bool(levels.applied[columns].any()),
            }
    if not len(rows) or not wanted & set(EFFECTS_OF):
        return notes, said
    matrix, right = normal_matrix(own, levels.fit.full, np.ones(len(own), bool))
    if "heading" in wanted:
        effect, covariance = (p.effects[s, :4], p.effects_covariance[s, :4, :4]) if "heading" in kept else (None, None)
        if effect is None:
            posterior = np.linalg.inv(matrix[:4, :4] + np.linalg.pinv(prior[:4, :4]))
            effect, covariance = posterior @ right[:4], posterior
        told = heading_words(matrix, prior, own, effect + levels.heading_mean[s], covariance)
        said["heading_determined"] = told
        if told["determined"] < 4 and np.max(np.diag(prior)[:4]) >= settings.sigma_heading_nt**2 * 0.99:
            notes.append(told["words"] + "; the constant of the heading effect belongs to the datum.")
    if "diurnal_scale" in kept:
        share = determined_share(prior, p.effects_covariance[s], "diurnal_scale")
        said["diurnal_scale"]["determined"] = share
        scale, sigma = 1 + p.effects[s, 4], float(np.sqrt(max(p.effects_covariance[s, 4, 4], 0.0)))
        if abs(scale - 1) > SIGNIFICANT * sigma:
            notes.append(f"the variation at the ship is {scale:.3f} (sigma {sigma:.3f}) of that at the base: applied.")
    if wanted & {"layback", "clock"}:
        advice = position_advice(matrix, right, prior, own)
        if advice is not None:
            said["position_advice"] = advice
            asks = max(
                abs(advice["layback_m"]) / advice["sigma_layback_m"], abs(advice["clock_s"]) / advice["sigma_clock_s"]
            )
            if asks > SIGNIFICANT:
                done = (
                    "applied as asked" if settings.apply else "nothing of it is applied unless levelling.apply says so"
                )
                notes.append(f"{advice['words']}; {done}.")
    return notes, said


def _weak_modes(levels) -> dict | None:
    """Look for undetermined combinations in the largest network."""
    used = (levels.posterior.weight > 0) & (levels.network[levels.data.first.line] == 0)
    if not used.any():
        return None
    one, two = levels.data.first.take(used), levels.data.second.take(used)
    rows = levels.order[used]
    lat, lon = (levels.crossings[f"sensor_{name}_deg"].to_numpy(float)[rows] for name in ("latitude", "longitude"))
    if not np.isfinite(lat + lon).all():
        return None
    east = (lon - lon[0] + 180.0) % 360.0 - 180.0
    place = np.column_stack([east * np.cos(np.radians(lat.mean())), lat])
    return weak_modes(one.line, two.line, np.column_stack([one.share, two.share]), place, len(levels.lines))


def sum_up(levels, statistics, settings) -> tuple[dict, list[str], str]:
    """Put together the record of the stage, sentences for what deserves a look, and its one line.

    Parameters
    ----------
    levels : steps.levelling.Levels
    statistics : pandas.DataFrame
        Of the lines.
    settings : steps.settings.Levelling

    Returns
    -------
    record : dict
    notes : list of str
    done : str

    """
    table = levels.crossings
    used = np.isfinite(table["residual_nt"].to_numpy(float))
    several = len(levels.surveys) > 1
    names = (levels.lines["survey"] + "/" + levels.lines["line"] if several else levels.lines["line"]).to_numpy(str)
    notes, record = _about_lines(levels, names)
    before, after, left_out = _rms(table["mismatch_nt"][used]), _rms(table["residual_nt"]), _rms(table["left_out_nt"])
    record |= {
        "crossings": len(table),
        "rms_before_nt": before,
        "rms_after_nt": after,
        "rms_left_out_nt": left_out,
        "datum": "held lines" if (statistics["status"] == "held at zero").any() else "mean over the readings is zero",
    }
    if levels.posterior is None or before is None:
        return record, notes, "no line levelled"
    p = levels.posterior
    record["scale"] = _number(p.scale)
    record["degrees_of_freedom"] = _number(used.sum() - np.nansum(p.leverage[p.weight > 0]))
    record["sigma_datum_nt"] = [_number(v) for v in p.datum_sigma[:100]]
    record["terms"], record["processes"] = _about_terms(levels)
    kept = joint.kept_terms(levels.fit.model)
    if "line_drift" in kept:
        count = np.bincount(
            np.concatenate([levels.data.first.line[p.weight > 0], levels.data.second.line[p.weight > 0]]),
            minlength=len(names),
        )
        single = np.flatnonzero((count == 1) & (levels.network >= 0))
        record["lines_with_one_crossing"] = [str(name) for name in names[single]]
        if len(single):
            notes.append(
                f"with one crossing only the correction at that crossing is determined, not the drift: "
                f"{_listed(names[single])}."
            )
        weak = _weak_modes(levels)
        if weak is not None:
            record["weak_modes"] = weak
            if weak["modes"] > 1:
                notes.append(f"{weak['words']}.")
    record["surveys"] = {}
    for s in range(min(len(levels.surveys), LARGEST)):
        said, found = _about_survey(levels, s, settings)
        record["surveys"][levels.surveys[s]] = found
        notes += [f"{levels.surveys[s]}: {text}" if several else text for text in said]
    lost_base = np.asarray(levels.data.first.without_base > 0) | np.asarray(levels.data.second.without_base > 0)
    if "time_drift" in kept and lost_base.any():
        notes.append(
            "where no base station tells the external variation, the drift in time carries it, and the sigma of the "
            "level shows how badly."
        )
    left = "unknown" if left_out is None else f"{left_out:.2f} nT"
    levelled = int((statistics["status"] == "levelled").sum())
    done = (
        f"{levelled} lines levelled at {int(used.sum())} crossings: rms {before:.2f} nT before, {after:.2f} nT after, "
        f"{left} left out; kept: {', '.join(sorted(kept)).replace('_', ' ') or 'constants only'}"
    )
    return record, notes, done
