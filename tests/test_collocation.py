"""Covariances, estimated variances and leave-one-out values against independent computations."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import minimize
from scipy.stats import multivariate_normal

from steps import collocation as col
from steps import joint


def make_points(rng, n, lines=6, surveys=1):
    line = rng.integers(0, lines, n)
    share = rng.uniform(-1.7, 1.7, n)
    return col.Points(
        line=line,
        survey=line % surveys,
        hours=3.0 * line + 1 + share / np.sqrt(3),
        share=share,
        with_base=np.full(n, 1.5),
        without_base=np.zeros(n),
        loose=np.ones(n),
        effects=rng.standard_normal((n, 7)),
    )


def make_model(surveys=1):
    processes = (
        col.Process("line", "", "line", expected=1.0),
        col.Process("trend", "line_drift", "slope", expected=0.0),
        col.Process("wander", "line_drift", "wander", 1.5, True),
        col.Process("time", "time_drift", "time", 6.0, False, "with_base", -0.5),
    )
    prior = np.zeros((surveys, 7, 7))
    prior[:, np.arange(5), np.arange(5)] = [4.0, 4.0, 1.0, 1.0, 0.01]
    noise = np.array([[0.0, 0.7], [0.0, 1.0], [-4.0, 1.5]])
    start = np.concatenate([[p.expected for p in processes], noise[:, 0]])
    return col.Model(processes, start, prior, noise)


def draw(seed, n=80, model=None):
    """Draw crossings whose mismatches have exactly the covariance of a model."""
    rng = np.random.default_rng(seed)
    first, second = make_points(rng, n), make_points(rng, n)
    parts = np.column_stack([rng.uniform(0.01, 0.1, n), rng.uniform(0, 0.1, n), np.ones(n)])
    model = model or make_model()
    empty = col.Crossings(np.zeros(n), parts, first, second)
    v = col.Block(empty, model).covariance(model, np.ones(n))
    return col.Crossings(np.linalg.cholesky(v) @ rng.standard_normal(n), parts, first, second), v


@pytest.mark.parametrize("rough", [True, False])
def test_correlations_are_those_of_their_stochastic_equations(rough):
    """Exponential: df = -f/T dt + dW. Matern 3/2: two such filters in series (Whittle 1954; Matern 1960)."""
    step, scale = 0.02, 1.5
    rate = 1 / scale if rough else np.sqrt(3) / scale
    decay = np.exp(-rate * step)
    lags = np.arange(0, 300)
    impulse = np.exp(-rate * step * np.arange(4000)) * (1.0 if rough else np.arange(4000))
    power = np.array([impulse[: len(impulse) - k] @ impulse[k:] for k in lags])
    assert decay < 1
    assert col.correlation(lags * step, scale, rough) == pytest.approx(power / power[0], abs=0.02)


def test_covariances_are_positive_and_symmetric():
    rng = np.random.default_rng(1)
    points = make_points(rng, 60, surveys=2)
    model = make_model(2)
    matrix = col.signal(model, points, points)
    assert matrix == pytest.approx(matrix.T)
    assert np.linalg.eigvalsh(matrix).min() > -1e-9


def test_stacked_points_give_the_blocks_of_the_whole():
    rng = np.random.default_rng(2)
    points = make_points(rng, 12)
    model = replace(make_model(), prior=np.zeros((1, 7, 7)))
    whole = col.signal(model, points, points, effects=False)
    blocks = col.signal(model, *[points.take(np.arange(12).reshape(3, 4))] * 2, effects=False)
    for k in range(3):
        part = slice(4 * k, 4 * k + 4)
        assert blocks[k] == pytest.approx(whole[part, part])


def test_what_is_left_out_is_predicted_by_the_others_alone():
    crossings, v = draw(3, n=30)
    error, variance = col.left_out(v, crossings.mismatch)
    for k in (0, 13, 29):
        rest = np.delete(np.arange(30), k)
        gain = np.linalg.solve(v[np.ix_(rest, rest)], v[rest, k])
        assert error[k] == pytest.approx(crossings.mismatch[k] - gain @ crossings.mismatch[rest])
        assert variance[k] == pytest.approx(v[k, k] - gain @ v[rest, k])


def test_variances_are_where_scipy_finds_the_likelihood_greatest():
    """The same likelihood by scipy.stats, maximised by scipy.optimize."""
    crossings, _ = draw(4)
    model = make_model()
    block, kept = col.Block(crossings, model), np.ones(80, bool)
    found = col.estimate_variances([block], [kept], model)

    def minus(log_variance):
        v = block.covariance(replace(model, log_variance=log_variance), np.ones(80))
        prior = 0.5 * np.sum(((log_variance - model.expected) / model.spread) ** 2)
        return prior - multivariate_normal.logpdf(crossings.mismatch, cov=v)

    best = minimize(minus, model.log_variance, method="Nelder-Mead", options={"maxiter": 6000, "adaptive": True})
    assert minus(found.log_variance) <= best.fun + 1e-3
    assert found.log_variance == pytest.approx(best.x, abs=0.1)


def test_variances_come_back_from_many_drawn_surveys():
    model = make_model()
    model = replace(model, processes=tuple(replace(p, spread=4.0) for p in model.processes))
    found = []
    for seed in range(40):
        crossings, _ = draw(100 + seed, n=60, model=model)
        found.append(col.estimate_variances([col.Block(crossings, model)], [np.ones(60, bool)], model).log_variance)
    off = np.median(found, axis=0) - model.log_variance
    print("median of ln(estimated / true variance):", np.round(off, 2))
    assert np.abs(off[[0, 3]]).max() < 0.5  # line constants, drift in time
    assert np.abs(off).max() < 1.0


def test_a_term_that_is_not_there_is_dropped_and_one_that_is_there_kept():
    model = make_model()
    true = model.without("line_drift")
    kept = {"line_drift": 0, "heading": 0}
    for seed in range(10):
        crossings, _ = draw(200 + seed, n=60, model=true)
        block, use = col.Block(crossings, model), np.ones(60, bool)
        start = col.estimate_variances([block], [use], model)
        chosen, trials = col.choose_terms([block], [use], start, ["line_drift", "heading"])
        assert {trial["term"] for trial in trials} == {"line_drift", "heading"}
        for trial in trials:
            assert trial["kept"] == (trial["left_out_with_nt"] < trial["left_out_without_nt"])
            kept[trial["term"]] += trial["kept"]
        assert joint.kept_terms(chosen) >= {trial["term"] for trial in trials if trial["kept"]}
    print("kept in 10 surveys:", kept)
    assert kept["heading"] >= 9
    assert kept["line_drift"] <= 5


def test_the_figure_is_the_rms_where_sigmas_are_right_and_more_where_they_are_not():
    rng = np.random.default_rng(5)
    n = 4000
    points = make_points(rng, n)
    far = replace(points, loose=np.zeros(n))  # no signal: only noise of 0.5 nT
    parts = np.column_stack([np.full(n, 0.25), np.zeros(n), np.zeros(n)])
    crossings = col.Crossings(0.5 * rng.standard_normal(n), parts, far, far)
    model = make_model()
    small = crossings.take(np.arange(300))
    for factor, ratio in (
        (0.0, 1.0),
        (2.0, np.exp((2 + np.exp(-2) - 1) / 2)),
        (-2.0, np.exp((-2 + np.exp(2) - 1) / 2)),
    ):
        wrong = replace(model, log_variance=np.append(model.log_variance[:-3], [factor, 0, 0]))
        figure, rms = col.left_out_figure([col.Block(small, model)], [np.ones(300, bool)], wrong)
        assert rms == pytest.approx(0.5, rel=0.1)
        assert figure == pytest.approx(0.5 * ratio, rel=0.6 if factor < 0 else 0.1)


def test_groups_for_the_variances_share_no_line_and_are_dense():
    rng = np.random.default_rng(6)
    first, second = rng.integers(0, 200, 4000), rng.integers(200, 220, 4000)
    groups = joint.clusters(first, second, 220)
    lines = [set(first[g]) | set(second[g]) for g in groups]
    assert len(groups) > 1
    for k, own in enumerate(lines):
        assert not any(own & other for other in lines[:k])
        assert len(groups[k]) > 1.5 * len(own), "lines that cross each other often"
