"""The sparse solver against closed forms, scipy's dense least squares, and really leaving crossings out."""

import numpy as np
import pytest
from scipy.linalg import lstsq
from scipy.sparse import block_diag, csr_array, diags_array

from steps import adjustment


def incidence(first, second, lines):
    n = len(first)
    rows = np.tile(np.arange(n), 2)
    return csr_array((np.repeat([1.0, -1.0], n), (rows, np.concatenate([first, second]))), shape=(n, lines))


def network(seed, lines=8, ties=4, outliers=0, size=5.0):
    """Lines that all cross all ties; constants, crossing sigmas of 0.5 to 2 nT, some gross errors."""
    rng = np.random.default_rng(seed)
    first, second = (a.ravel() for a in np.meshgrid(np.arange(lines), lines + np.arange(ties), indexing="ij"))
    truth = rng.normal(0, size, lines + ties)
    sigma = rng.uniform(0.5, 2.0, len(first))
    mismatch = truth[first] - truth[second] + sigma * rng.standard_normal(len(first))
    bad = rng.choice(len(first), outliers, replace=False)
    mismatch[bad] += 60 * rng.choice([-1, 1], outliers)
    return incidence(first, second, lines + ties), mismatch, sigma**2, truth, bad


def constants(lines, size=5.0):
    return csr_array(diags_array(np.full(lines, size))), np.arange(lines)


def solve(design, mismatch, variance, size=5.0, **more):
    lines = design.shape[1]
    found = adjustment.adjust(design, *constants(lines, size), mismatch, variance, **more)
    return found, size * found.unknowns


def centred(values):
    return values - values.mean()


def test_two_lines_and_one_tie_by_hand():
    """Mismatches 3 and 1 at a tie, free constants: the lines are 3 and 1 above it, -4/3 with mean zero."""
    found, value = solve(incidence([0, 1], [2, 2], 3), np.array([3.0, 1.0]), np.ones(2), size=1e4, robust=False)
    assert centred(value) == pytest.approx([5 / 3, -1 / 3, -4 / 3], abs=1e-6)
    assert found.residual == pytest.approx([0, 0], abs=1e-6)


def test_repeated_crossings_give_their_weighted_mean():
    mismatch, variance = np.array([1.0, 2.0, 6.0]), np.array([1.0, 0.25, 4.0])
    found, value = solve(incidence([0, 0, 0], [1, 1, 1], 2), mismatch, variance, size=1e4, robust=False)
    mean = np.average(mismatch, weights=1 / variance)
    assert value[0] - value[1] == pytest.approx(mean, abs=1e-6)
    spread = 1e8 * (found.covariance[0, 0] + found.covariance[1, 1] - 2 * found.covariance[0, 1])
    assert spread == pytest.approx(1 / (1 / variance).sum(), rel=1e-5)
    others = [np.average(np.delete(mismatch, k), weights=1 / np.delete(variance, k)) for k in range(3)]
    assert found.left_out == pytest.approx(mismatch - others, abs=1e-5)


def test_equals_scipy_lstsq_on_the_dense_whitened_system():
    design, mismatch, variance, _, _ = network(3)
    p = design.shape[1]
    found, _ = solve(design, mismatch, variance, robust=False)
    dense = np.vstack([5.0 * design.toarray() / np.sqrt(variance)[:, None], np.eye(p)])
    expected = lstsq(dense, np.append(mismatch / np.sqrt(variance), np.zeros(p)))[0]
    assert found.unknowns == pytest.approx(expected, abs=1e-9)
    assert found.covariance == pytest.approx(np.linalg.inv(dense.T @ dense), abs=1e-9)


def test_left_out_is_what_really_leaving_each_out_gives():
    design, mismatch, variance, _, _ = network(4, lines=5, ties=3)
    found, _ = solve(design, mismatch, variance, robust=False)
    for k in range(len(mismatch)):
        rest = np.delete(np.arange(len(mismatch)), k)
        without, value = solve(design[rest], mismatch[rest], variance[rest], robust=False)
        predicted = design.toarray()[k] @ value
        assert found.left_out[k] == pytest.approx(mismatch[k] - predicted, abs=1e-8)
        row = 5.0 * design.toarray()[k]
        assert found.left_out_variance[k] == pytest.approx(variance[k] + row @ without.covariance @ row, rel=1e-8)


def test_gross_errors_are_rejected_and_do_no_harm():
    design, mismatch, variance, truth, bad = network(5, lines=20, ties=12, outliers=10)
    found, value = solve(design, mismatch, variance)
    assert set(bad) == set(np.flatnonzero(found.weight == 0))
    keep = np.setdiff1d(np.arange(len(mismatch)), bad)
    _, clean = solve(design[keep], mismatch[keep], variance[keep], robust=False)
    error, best = centred(value - truth), centred(clean - truth)
    assert error.std() < 1.1 * best.std()


def test_the_covariance_is_that_of_many_simulated_networks():
    """Errors over their sigma have unit spread; 3,600 values, correlated within a network."""
    ratio = []
    for seed in range(400):
        design, mismatch, variance, truth, _ = network(1000 + seed, lines=5, ties=4)
        found, value = solve(design, mismatch, variance, robust=False)
        ratio.append((value - truth) / (5.0 * np.sqrt(np.diag(found.covariance))))
    assert np.std(ratio) == pytest.approx(1.0, abs=0.05)


def test_the_order_of_lines_and_crossings_does_not_matter():
    design, mismatch, variance, _, _ = network(6, outliers=3)
    n, p = design.shape
    rng = np.random.default_rng(0)
    rows, columns = rng.permutation(n), rng.permutation(p)
    _, value = solve(design, mismatch, variance)
    _, other = solve(csr_array(design[rows][:, columns]), mismatch[rows], variance[rows])
    assert other == pytest.approx(value[columns], abs=1e-9)


def blocks_of_two(seed, lines=30, ties=20):
    """Make a net with a constant and a trend a line, as values at both ends: blocks of two unknowns."""
    design, mismatch, variance, _, _ = network(seed, lines, ties, outliers=4)
    rng = np.random.default_rng(seed)
    dense = design.toarray()
    share = rng.uniform(0, 1, dense.shape)
    both = np.stack([dense * (1 - share), dense * share], axis=-1).reshape(len(mismatch), -1)
    root = np.linalg.cholesky(np.array([[25.0, 20.0], [20.0, 25.0]]))
    whole = csr_array(block_diag([root] * (lines + ties)))
    return csr_array(both), whole, np.repeat(np.arange(lines + ties), 2), mismatch, variance


def test_conjugate_gradients_and_factoring_agree(monkeypatch):
    system = blocks_of_two(7)
    dense = adjustment.adjust(*system)
    monkeypatch.setattr(adjustment, "FACTORED", 0)
    sparse = adjustment.adjust(*system)
    assert sparse.unknowns == pytest.approx(dense.unknowns, abs=1e-5)
    assert sparse.weight == pytest.approx(dense.weight, abs=1e-5)


def test_sampled_covariances_come_near_the_exact_ones(monkeypatch):
    """Beyond `INVERTED` unknowns: conditional covariances plus draws; 32 draws of a small remainder."""
    system = blocks_of_two(8)
    exact = adjustment.adjust(*system)
    monkeypatch.setattr(adjustment, "INVERTED", 0)
    monkeypatch.setattr(adjustment, "FACTORED", 0)
    found = adjustment.adjust(*system)
    assert found.covariance is None
    assert found.unknowns == pytest.approx(exact.unknowns, abs=1e-5)
    root = system[1].toarray()
    centre = np.eye(100) - 0.01  # the datum, common to all, is left out
    expected = np.diag(centre @ root @ exact.covariance @ root.T @ centre)
    given = np.concatenate([np.diag(root[:2, :2] @ found.blocks[k] @ root[:2, :2].T) for k in range(50)])
    means = root @ found.means - (root @ found.draws).mean(axis=0)
    ratio = np.sqrt((given + np.mean(means**2, axis=1)) / expected)
    print(f"sampled sigma over exact: {ratio.mean():.3f} +- {ratio.std():.3f}")
    assert ratio.mean() == pytest.approx(1.0, abs=0.04)
    assert ratio.std() < 0.1
    used = exact.weight > 0
    left, whole = (adjustment.robust_scale(s.left_out[used]) for s in (found, exact))
    assert left == pytest.approx(whole, rel=0.05)


def test_a_form_of_two_rows_is_that_of_numpy():
    rng = np.random.default_rng(9)
    c = rng.standard_normal((6, 6))
    c = c @ c.T
    f, g = (csr_array(rng.standard_normal((5, 6)) * (rng.random((5, 6)) < 0.5)) for _ in "fg")
    expected = np.einsum("ni,ij,nj->n", f.toarray(), c, g.toarray())
    assert adjustment.quadratic(f, c, g) == pytest.approx(expected)


def test_weights_are_those_of_huber_and_tukey():
    """Huber (1964): k / |u| beyond k. Beaton & Tukey (1974): (1 - (u/c)^2)^2 within c."""
    u = np.array([0.0, 1.0, -2.69, 6.5])
    assert adjustment.robust_weight(u, "huber") == pytest.approx([1, 1, 0.5, 1.345 / 6.5])
    assert adjustment.robust_weight(u, "tukey") == pytest.approx([1, (1 - 1 / 36) ** 2, (1 - (2.69 / 6) ** 2) ** 2, 0])


def test_networks_are_numbered_by_size_and_lines_without_crossing_are_none():
    label = adjustment.networks(np.array([5, 0, 1, 3]), np.array([6, 1, 2, 4]), 8)
    assert label.tolist() == [0, 0, 0, 1, 1, 2, 2, -1]
