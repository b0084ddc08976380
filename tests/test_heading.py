"""Heading effect from a calibration manoeuvre: truth recovered, sigma true, and what cannot be known said."""

import numpy as np
import pytest

from steps import heading
from steps.settings import Heading

TRUE = np.array([5.0, -2.5, 1.1, 0.8])


def _star(rng, headings, *, noise=0.1, leg_sd=0.0, gradient=(3.0, -2.0), bend=0.5, n=200, true=TRUE):
    """Make legs of 3 km through one point, with a local field, noise and legs that are off as a whole."""
    parts = []
    for leg, azimuth in enumerate(headings):
        s = np.linspace(-1.5, 1.5, n)
        east, north = s * np.sin(np.radians(azimuth)), s * np.cos(np.radians(azimuth))
        local = 40 + gradient[0] * east + gradient[1] * north + bend * (east**2 - east * north)
        yaw = azimuth + rng.normal(0, 1.0, n)
        value = local + heading.heading_effect(yaw, true) + rng.normal(0, noise, n) + rng.normal(0, leg_sd)
        parts.append(np.stack([yaw % 360, value, np.full(n, leg), east, north, np.full(n, leg * 0.2)]))
    angle, value, leg, east, north, time = np.concatenate(parts, axis=1)
    return angle, value, leg.astype(int), np.zeros(len(leg), int), east, north, time


EIGHT = (0, 135, 270, 45, 180, 315, 90, 225)


def test_coefficients_are_recovered():
    fit = heading.fit_heading(*_star(np.random.default_rng(1), EIGHT), settings=Heading(sigma_leg_nt=0.0))
    assert fit["kind"] == "harmonics"
    np.testing.assert_allclose(fit["coefficients"], TRUE, rtol=0, atol=0.05)
    assert all(test["applied"] for test in fit["tests"])
    assert fit["condition"] < 3


def test_sigma_is_true_with_legs_that_are_off_as_a_whole():
    """Over 150 simulated stars the standardised errors have about unit spread."""
    rng, scaled = np.random.default_rng(2), []
    for _ in range(150):
        fit = heading.fit_heading(*_star(rng, EIGHT, leg_sd=0.5, n=60), settings=Heading(sigma_leg_nt=0.5))
        error = fit["all_coefficients"] - TRUE
        scaled.append(error / np.sqrt(np.diag(fit["all_covariance"])))
    assert 0.8 < np.std(scaled) < 1.2
    assert np.abs(np.mean(scaled)) < 0.15


def test_fit_without_robustness_is_least_squares():
    """Against numpy.linalg.lstsq on the same design; Gaussian noise far below the robust threshold changes little."""
    data = _star(np.random.default_rng(3), EIGHT, noise=0.05, bend=0.0)
    fit = heading.fit_heading(*data, settings=Heading(sigma_leg_nt=0.0))
    angle, value, _, _, east, north, time = data
    design = np.column_stack([heading.harmonics(angle), np.ones_like(east), east, north, time])
    wanted = np.linalg.lstsq(design, value, rcond=None)[0][:4]
    np.testing.assert_allclose(fit["all_coefficients"], wanted, rtol=0, atol=0.02)


def test_an_insignificant_harmonic_is_not_applied():
    true = np.array([5.0, -2.5, 0.0, 0.0])
    fit = heading.fit_heading(*_star(np.random.default_rng(4), EIGHT, leg_sd=0.3, true=true), settings=Heading())
    assert [test["applied"] for test in fit["tests"]] == [True, False]
    assert fit["coefficients"][2:].tolist() == [0.0, 0.0]
    np.testing.assert_allclose(fit["coefficients"][:2], true[:2], rtol=0, atol=0.6)
    assert (fit["covariance"][2:] == 0).all()


def test_two_opposite_headings_determine_their_difference_only():
    fit = heading.fit_heading(*_star(np.random.default_rng(5), (20, 200, 20, 200)), settings=Heading(sigma_leg_nt=0.1))
    assert fit["kind"] == "difference"
    true = heading.heading_effect(np.array([20.0]), TRUE) - heading.heading_effect(np.array([200.0]), TRUE)
    assert abs(fit["difference_nt"]) == pytest.approx(abs(true[0]), abs=0.3)
    effect = heading.heading_effect(np.array([20.0, 200.0]), fit["coefficients"])
    assert effect[0] - effect[1] == pytest.approx(true[0], abs=0.3)
    assert effect.sum() == pytest.approx(0.0, abs=1e-9)


def test_headings_that_do_not_span_the_circle_are_not_fitted():
    fit = heading.fit_heading(*_star(np.random.default_rng(6), (0, 30, 60, 90)), settings=Heading())
    assert fit["kind"] == "none"
    assert "leave a gap of 2" in fit["reason"]


def test_gaps_in_the_circle():
    assert heading.widest_gap(np.array([350.0, 10.0, 180.0])) == pytest.approx(170.0)
    assert heading.widest_gap(np.array([])) == 360.0
    assert heading.widest_gap(np.array([5.0])) == 360.0


def test_turns_are_left_out():
    time = np.arange(600.0)
    angle = np.where(
        time < 300, 350.0, 350.0 + np.minimum(time - 300, 120)
    )  # a turn of 1 degree a second through north
    good = heading.steady(time, angle % 360)
    assert good[:270].all()
    assert not good[310:410].any()
    assert good[460:].all()


def test_manoeuvres_are_told_apart_by_time_and_place():
    start = np.array(["2024-05-01T00", "2024-05-01T01", "2024-05-03T00", "2024-05-03T01"], "datetime64[ns]")
    end = start + np.timedelta64(30, "m")
    star = heading.find_stars(start, end, np.array([10, 10, 10, 10.5]), np.array([179.99, -179.99, 179.99, 180.0]))
    assert star.tolist() == [0, 0, 1, 2]


def test_sigma_of_the_effect_follows_the_covariance():
    covariance = np.diag([0.04, 0.0, 0.0, 0.0])
    np.testing.assert_allclose(
        heading.effect_sigma(np.array([0.0, 60.0, 90.0]), covariance), [0.2, 0.1, 0.0], atol=1e-12
    )
