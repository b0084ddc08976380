"""The solver against closed forms, scipy's dense least squares, and really leaving crossings out."""

import numpy as np
import pytest
from scipy.linalg import lstsq
from scipy.sparse import csr_array, identity

from steps import adjustment


def incidence(first, second, lines):
    n = len(first)
    rows = np.tile(np.arange(n), 2)
    return csr_array(
        (np.repeat([1.0, -1.0], n), (rows, np.concatenate([first, second]))),
        shape=(n, lines),
    )


def network(seed, lines=8, ties=4, outliers=0):
    rng = np.random.default_rng(seed)
    first, second = (a.ravel() for a in np.meshgrid(np.arange(lines), lines + np.arange(ties), indexing="ij"))
    truth = rng.normal(0, 5, lines + ties)
    sigma = rng.uniform(0.5, 2.0, len(first))
    mismatch = truth[first] - truth[second] + sigma * rng.standard_normal(len(first))
    bad = rng.choice(len(first), outliers, replace=False)
    mismatch[bad] += 60 * rng.choice([-1, 1], outliers)
    return incidence(first, second, lines + ties), mismatch, sigma, truth, bad


def mean_zero(lines):
    return csr_array(np.ones((1, lines)))


def test_two_lines_and_one_tie_by_hand():
    """Mismatches 3 and 1 at a tie: with mean zero the tie is at -4/3, the lines 3 and 1 above it."""
    found = adjustment.adjust(
        incidence([0, 1], [2, 2], 3), np.array([3.0, 1.0]), np.ones(2), datum=mean_zero(3), robust=False
    )
    assert found.unknowns == pytest.approx([5 / 3, -1 / 3, -4 / 3], abs=1e-10)
    assert found.residual == pytest.approx([0, 0], abs=1e-10)
    assert np.isnan(found.left_out).all(), "nothing else determines either crossing"


def test_repeated_crossings_give_their_weighted_mean():
    mismatch, sigma = np.array([1.0, 2.0, 6.0]), np.array([1.0, 0.5, 2.0])
    found = adjustment.adjust(incidence([0, 0, 0], [1, 1, 1], 2), mismatch, sigma, datum=mean_zero(2), robust=False)
    mean = np.average(mismatch, weights=sigma**-2)
    assert found.unknowns == pytest.approx([mean / 2, -mean / 2])
    assert found.covariance[0, 0] == pytest.approx(found.scale**2 / (sigma**-2).sum() / 4)
    others = [np.average(np.delete(mismatch, k), weights=np.delete(sigma, k) ** -2) for k in range(3)]
    assert found.left_out == pytest.approx(mismatch - others)


@pytest.mark.parametrize("with_prior", [False, True])
def test_equals_scipy_lstsq_on_the_dense_whitened_system(with_prior):
    design, mismatch, sigma, _, _ = network(3)
    p = design.shape[1]
    prior = 0.04 * identity(p) if with_prior else None
    found = adjustment.adjust(design, mismatch, sigma, prior=prior, datum=mean_zero(p), robust=False)
    dense = design.toarray() / sigma[:, None]
    right = mismatch / sigma
    if with_prior:
        dense, right = np.vstack([dense, 0.2 * np.eye(p)]), np.append(right, np.zeros(p))
    expected = lstsq(dense, right)[0]  # of minimum norm, which is mean zero
    assert found.unknowns == pytest.approx(expected, abs=1e-9)
    inverse = np.linalg.pinv(dense.T @ dense)
    centred = np.eye(p) - 1 / p
    assert found.covariance / found.scale**2 == pytest.approx(centred @ inverse @ centred, abs=1e-9)


def test_left_out_is_what_really_leaving_each_out_gives():
    design, mismatch, sigma, _, _ = network(4, lines=5, ties=3)
    p = design.shape[1]
    found = adjustment.adjust(design, mismatch, sigma, datum=mean_zero(p), robust=False)
    for k in range(len(mismatch)):
        rest = np.delete(np.arange(len(mismatch)), k)
        without = lstsq(design.toarray()[rest] / sigma[rest, None], mismatch[rest] / sigma[rest])[0]
        assert found.left_out[k] == pytest.approx(mismatch[k] - (design[[k]] @ without)[0], abs=1e-8)


def test_gross_errors_are_rejected_and_do_no_harm():
    design, mismatch, sigma, truth, bad = network(5, lines=10, ties=6, outliers=5)
    p = design.shape[1]
    found = adjustment.adjust(design, mismatch, sigma, datum=mean_zero(p))
    assert set(bad) <= set(np.flatnonzero(found.weight == 0))
    assert (found.weight == 0).sum() <= len(bad) + 2
    keep = np.setdiff1d(np.arange(len(mismatch)), bad)
    clean = adjustment.adjust(design[keep], mismatch[keep], sigma[keep], datum=mean_zero(p), robust=False)
    error = found.unknowns - (truth - truth.mean())
    best = clean.unknowns - (truth - truth.mean())
    assert np.sqrt(np.mean(error**2)) < 1.3 * np.sqrt(np.mean(best**2))


def test_the_covariance_is_that_of_many_simulated_networks():
    errors, sigmas = [], []
    for seed in range(400):
        design, mismatch, sigma, truth, _ = network(1000 + seed, lines=5, ties=4)
        found = adjustment.adjust(design, mismatch, sigma, datum=mean_zero(9), robust=False)
        errors.append(found.unknowns - (truth - truth.mean()))
        sigmas.append(np.sqrt(np.diag(found.covariance)) / found.scale)
    ratio = np.array(errors) / np.array(sigmas)
    assert ratio.std() == pytest.approx(1.0, abs=0.05)  # 3,600 correlated values


def test_the_order_of_lines_and_crossings_does_not_matter():
    design, mismatch, sigma, _, _ = network(6, outliers=3)
    n, p = design.shape
    rng = np.random.default_rng(0)
    rows, columns = rng.permutation(n), rng.permutation(p)
    found = adjustment.adjust(design, mismatch, sigma, datum=mean_zero(p))
    other = adjustment.adjust(csr_array(design[rows][:, columns]), mismatch[rows], sigma[rows], datum=mean_zero(p))
    assert other.unknowns == pytest.approx(found.unknowns[columns], abs=1e-9)


def test_conjugate_gradients_and_factoring_agree(monkeypatch):
    design, mismatch, sigma, _, _ = network(7, lines=30, ties=20, outliers=4)
    p = design.shape[1]
    dense = adjustment.adjust(design, mismatch, sigma, datum=mean_zero(p), iterations=20)
    monkeypatch.setattr(adjustment, "DENSE", 0)
    sparse = adjustment.adjust(design, mismatch, sigma, datum=mean_zero(p), iterations=20)
    assert sparse.unknowns == pytest.approx(dense.unknowns, abs=0.05)  # leverages are left out of the weights


def test_networks_are_numbered_by_size_and_lines_without_crossing_are_none():
    label = adjustment.networks(np.array([5, 0, 1, 3]), np.array([6, 1, 2, 4]), 8)
    assert label.tolist() == [0, 0, 0, 1, 1, 2, 2, -1]
