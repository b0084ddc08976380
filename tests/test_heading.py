"""Heading effect from a calibration manoeuvre: truth recovered, sigma true, and what cannot be known said."""

import json
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import scipy.linalg
import scipy.stats
import synthetic
from conftest import ROOT

from steps import columns, heading
from steps.columns import Flag
from steps.settings import Heading

TRUE = np.array([5.0, -2.5, 1.1, 0.8])
EIGHT = (0, 135, 270, 45, 180, 315, 90, 225)


def effect(angle_deg, c):
    """State the definition (Bullard & Mason 1961) term by term."""
    a = np.radians(angle_deg)
    return c[0] * np.cos(a) + c[1] * np.sin(a) + c[2] * np.cos(2 * a) + c[3] * np.sin(2 * a)


def star(rng, headings, *, noise=0.1, leg_sd=0.0, crust=True, n=200, true=TRUE, yaw_deg=1.0, first=0):
    """Make legs of 3 km through one point, over the field of buried dipoles, with legs that are off as a whole."""
    parts = []
    dipoles = rng.uniform(-8, 8, (6, 2)), rng.uniform(2, 4, 6), rng.normal(0, 150, 6)
    for k, azimuth in enumerate(headings):
        s = np.linspace(-1.5, 1.5, n)
        east, north = s * np.sin(np.radians(azimuth)), s * np.cos(np.radians(azimuth))
        local = 40 + 3.0 * east - 2.0 * north
        if crust:
            for place, depth, size in zip(*dipoles, strict=True):
                r2 = (east - place[0]) ** 2 + (north - place[1]) ** 2
                local = local + size * (2 - r2 / depth**2) / 2 / (1 + r2 / depth**2) ** 2.5
        yaw = azimuth + yaw_deg * (rng.normal() + rng.normal(0, 1, n))
        value = local + effect(yaw, true) + rng.normal(0, noise, n) + rng.normal(0, leg_sd)
        hours = 0.4 * k + np.linspace(0, 0.15, n)
        parts.append(np.stack([yaw % 360, value, np.full(n, k), east, north, hours - 0.2 * len(headings)]))
    angle, value, leg, east, north, time = np.concatenate(parts, axis=1)
    return angle, value, leg.astype(int) + first, np.zeros(len(leg), int), east, north, time


def test_the_effect_is_the_sum_of_two_harmonics():
    angle = np.array([0.0, 45.0, 90.0, 180.0, 270.0, 359.0, -90.0, 450.0])
    np.testing.assert_allclose(heading.heading_effect(angle, TRUE), effect(angle, TRUE), rtol=0, atol=1e-12)


# -- truth and sigma -------------------------------------------------------------------------------------------------


def test_coefficients_are_recovered():
    fit = heading.fit_heading(*star(np.random.default_rng(1), EIGHT), settings=Heading(sigma_leg_nt=0.0))
    assert fit["kind"] == "harmonics"
    np.testing.assert_allclose(fit["coefficients"], TRUE, rtol=0, atol=0.1)
    assert all(test["applied"] for test in fit["tests"])
    assert fit["condition"] < 3


def standardised(count, sizes, seed, **words):
    rng, scaled = np.random.default_rng(seed), []
    for k in range(count):
        data = star(rng, EIGHT, leg_sd=sizes[k % len(sizes)], n=24, **words)
        fit = heading.fit_heading(*data, settings=Heading())
        scaled.append((fit["all_coefficients"] - TRUE) / np.sqrt(np.diag(fit["all_covariance"])))
    return np.array(scaled)


def test_sigma_is_true_whatever_the_error_of_a_leg_is():
    """200 stars whose legs are off by 0.3 to 2 nT, which the fit is not told: intervals hold what they say."""
    scaled = standardised(200, (0.3, 1.0, 2.0), 2)
    assert 0.85 < np.std(scaled) < 1.15
    assert np.abs(np.mean(scaled, axis=0)).max() < 0.25
    assert 0.62 < np.mean(np.abs(scaled) < 1) < 0.76
    assert 0.91 < np.mean(np.abs(scaled) < 1.96) < 0.98


def test_correlations_of_the_coefficients_are_true():
    """On unevenly spread legs the quadratic form of the errors has its four degrees of freedom."""
    rng, forms = np.random.default_rng(3), []
    for _ in range(60):
        data = star(rng, (10, 60, 140, 170, 230, 300, 350), leg_sd=1.0, n=24)
        fit = heading.fit_heading(*data, settings=Heading())
        error = fit["all_coefficients"] - TRUE
        forms.append(error @ np.linalg.solve(fit["all_covariance"], error))
    assert 3.0 < np.mean(forms) < 5.5


def from_survey(scenario, seed):
    """Take the calibration legs of a simulated survey, with a base station and positions as a ship has them."""
    survey = synthetic.simulate(
        replace(scenario, calibration=True, lines=1, ties=0, line_length_km=8.0, layout="grid", spikes_per_1000=0.5)
    )
    s, truth, readings = survey.scenario, survey.truth, survey.readings
    rng = np.random.default_rng([seed, 77])
    psi = np.radians(truth["tow_direction_deg"].to_numpy())
    east = truth["east_m"].to_numpy() - s.cable_error_m * np.sin(psi) + rng.normal(0, 0.5 * s.fix_noise_m, len(psi))
    north = truth["north_m"].to_numpy() - s.cable_error_m * np.cos(psi) + rng.normal(0, 0.5 * s.fix_noise_m, len(psi))
    height = s.sea_surface_height_m - truth["sensor_depth_m"].to_numpy()
    value = readings["total_field_nt"].to_numpy() - survey.main(east, north, height, readings["time_utc"].to_numpy())
    time_s = readings["time_utc"].to_numpy().astype(np.int64) / 1e9
    if s.bases:
        weights = np.array([1 / base.distance_km**2 for base in s.bases])
        for table, weight in zip(survey.bases, weights / weights.sum(), strict=True):
            good = np.isfinite(table["total_field_nt"])
            record = table["total_field_nt"] - np.nanmean(table["total_field_nt"])
            value = value - weight * np.interp(time_s, table["time_utc"].astype(np.int64)[good] / 1e9, record[good])
    kinds = survey.lines["kind"].to_numpy()
    leg = truth["line_index"].to_numpy()
    good = (truth["fault"].to_numpy() == 0) & (leg >= 0) & (kinds[np.maximum(leg, 0)] == "calibration")
    angle = truth["ship_heading_deg"].to_numpy()
    for k in np.unique(leg[good]):
        own = np.flatnonzero(good & (leg == k))
        good[own] = heading.steady(time_s[own], angle[own])
    east, north, hours = east[good] / 1e3, north[good] / 1e3, time_s[good] / 3600
    data = angle[good], value[good], leg[good], np.zeros(good.sum(), int), east - east.mean(), north - north.mean()
    fit = heading.fit_heading(
        *data,
        hours - hours.mean(),
        settings=Heading(),
        sigma_external_nt=0.5 if s.bases else 10.0,
        sigma_position_m=float(np.hypot(s.fix_noise_m, 10.0)),
    )
    error = fit["all_coefficients"] - np.array(s.heading_nt)
    return error / np.sqrt(np.diag(fit["all_covariance"]))


@pytest.mark.parametrize(("count", "covered"), [(24, 0.82), pytest.param(200, 0.9, marks=pytest.mark.slow)])
def test_sigma_is_true_on_simulated_surveys(count, covered):
    """Surveys of any crust, storm, base, line shift up to 3 nT and drift, none of which the fit is told."""
    scaled = np.array([from_survey(synthetic.varied(seed), seed) for seed in range(count)])
    assert 0.8 < np.std(scaled) < 1.25
    assert 0.56 < np.mean(np.abs(scaled) < 1) < 0.8
    assert covered < np.mean(np.abs(scaled) < 1.96) < 0.99


def test_two_manoeuvres_each_have_their_own_field():
    rng = np.random.default_rng(7)
    one = star(rng, EIGHT, leg_sd=0.05)
    two = [part.copy() for part in star(rng, (20, 200, 110, 290), leg_sd=0.05, first=8)]
    two[1] += 300.0 + 40.0 * two[4]
    two[3] += 1
    both = [np.concatenate(parts) for parts in zip(one, two, strict=True)]
    fit = heading.fit_heading(*both, settings=Heading(sigma_leg_nt=0.1))
    np.testing.assert_allclose(fit["coefficients"], TRUE, rtol=0, atol=0.15)
    alone = heading.fit_heading(*one, settings=Heading(sigma_leg_nt=0.1))
    assert (np.diag(fit["all_covariance"]) <= 1.05 * np.diag(alone["all_covariance"])).all()


def test_wild_readings_do_nothing():
    rng = np.random.default_rng(8)
    angle, value, *rest = star(rng, EIGHT, leg_sd=0.3)
    clean = heading.fit_heading(angle, value, *rest, settings=Heading())
    hit = rng.random(len(value)) < 0.02
    wild = heading.fit_heading(angle, value + hit * rng.normal(0, 50, len(value)), *rest, settings=Heading())
    np.testing.assert_allclose(wild["all_coefficients"], clean["all_coefficients"], rtol=0, atol=0.08)
    assert np.sqrt(np.diag(clean["all_covariance"])).min() > 0.08


def test_nothing_is_changed_in_place_and_the_same_gives_the_same():
    data = star(np.random.default_rng(9), EIGHT, leg_sd=0.5)
    kept = [part.copy() for part in data]
    one, two = (heading.fit_heading(*data, settings=Heading()) for _ in range(2))
    for part, before in zip(data, kept, strict=True):
        np.testing.assert_array_equal(part, before)
    np.testing.assert_array_equal(one["all_covariance"], two["all_covariance"])
    turned = heading.fit_heading((data[0] + 360) % 720 - 360, *data[1:], settings=Heading())
    np.testing.assert_allclose(turned["all_coefficients"], one["all_coefficients"], rtol=0, atol=1e-6)


def test_a_few_readings_a_leg_are_enough():
    """Readings every minute: nine on a leg."""
    fit = heading.fit_heading(*star(np.random.default_rng(10), EIGHT, n=9, leg_sd=0.2), settings=Heading())
    assert (np.abs(fit["all_coefficients"] - TRUE) < 4 * np.sqrt(np.diag(fit["all_covariance"]))).all()


# -- independent solvers ---------------------------------------------------------------------------------------------


def model_of(data, **words):
    given = {"sigma_leg_nt": 1.0, "sigma_external_nt": 0.5, "sigma_position_m": 10.0} | words
    return heading._Model(data, *given.values())


def covariance_by_hand(data, place, model):
    """Write the covariance down term by term, as the module's description states it."""
    depth, crust, external, nugget, drift, leg = np.exp(model.expected + model.spread * place)
    n = len(data["leg"])
    matrix = np.zeros((n, n))
    slope, share = np.zeros(n), np.zeros(n)
    for number in np.unique(data["leg"]):
        own = data["leg"] == number
        place_km = np.stack([data["east_km"][own], data["north_km"][own]], axis=1)
        way = place_km[-1] - place_km[0]
        slope[own] = np.gradient(data["value_nt"][own], place_km @ way / np.linalg.norm(way))
        t = data["time_h"][own] - data["time_h"][own].mean()
        share[own] = t / t.std()
    for i in range(n):
        for j in range(n):
            r2 = (data["east_km"][i] - data["east_km"][j]) ** 2 + (data["north_km"][i] - data["north_km"][j]) ** 2
            lag = np.sqrt(3) * abs(data["time_h"][i] - data["time_h"][j]) / heading.EXTERNAL_H
            matrix[i, j] = crust / (1 + r2 / (2 * depth) ** 2) ** 1.5 + external * (1 + lag) * np.exp(-lag)
            matrix[i, j] += 0.01**2 * slope[i] * slope[j]
            if data["leg"][i] == data["leg"][j]:
                matrix[i, j] += leg + drift * share[i] * share[j]
        matrix[i, i] += nugget + data["noise_nt2"][i]
    return matrix


@pytest.fixture(scope="module")
def pieces():
    return heading.cut_legs(*star(np.random.default_rng(11), EIGHT, leg_sd=0.5, n=24))


def test_solution_is_that_of_whitened_least_squares(pieces):
    """Against scipy.linalg.lstsq on the system whitened by the covariance, priors as rows of their own."""
    model = model_of(pieces)
    place = np.array([0.3, 0.5, -0.2, 0.1, -0.4, -0.5])
    size, spread, _ = model._solve(place)
    east, north, time = pieces["east_km"], pieces["north_km"], pieces["time_h"]
    design = np.column_stack([pieces["effect"], east, north, time, np.ones(len(east))])
    root = scipy.linalg.cholesky(covariance_by_hand(pieces, place, model), lower=True)
    rows = scipy.linalg.solve_triangular(root, np.column_stack([design, pieces["value_nt"]]), lower=True)
    priors = np.diag(1 / np.array([10.0] * 4 + [300.0, 300.0, 10.0, np.inf]))
    system = np.concatenate([rows[:, :-1], priors])
    wanted = scipy.linalg.lstsq(system, np.concatenate([rows[:, -1], np.zeros(8)]))[0]
    np.testing.assert_allclose(size, wanted[:4], rtol=0, atol=1e-5)
    np.testing.assert_allclose(spread, np.linalg.inv(system.T @ system)[:4, :4], rtol=1e-4, atol=1e-8)


def test_restricted_likelihood_is_that_of_the_contrasts(pieces):
    """Patterson & Thompson (1971): the density of what is free of the constant; by scipy.stats."""
    model = model_of(pieces)
    n = len(pieces["leg"])
    free = scipy.linalg.null_space(np.ones((1, n)))
    east, north, time = pieces["east_km"], pieces["north_km"], pieces["time_h"]
    known = np.column_stack([10 * pieces["effect"], 300 * east, 300 * north, 10 * time])

    def by_hand(place):
        matrix = free.T @ (covariance_by_hand(pieces, place, model) + known @ known.T) @ free
        density = scipy.stats.multivariate_normal(cov=matrix).logpdf(free.T @ pieces["value_nt"])
        return -density + 0.5 * place @ place

    one, two = np.zeros(6), np.array([-0.5, 0.8, 0.2, 0.3, -0.6, 0.7])
    assert model._cost(one)[0] - model._cost(two)[0] == pytest.approx(by_hand(one) - by_hand(two), rel=1e-4)
    step = 1e-5 * np.eye(6)
    numeric = [(model._cost(two + s)[0] - model._cost(two - s)[0]) / 2e-5 for s in step]
    np.testing.assert_allclose(model._cost(two)[1], numeric, rtol=1e-3, atol=1e-3)


def test_the_averaged_test_is_the_f_test():
    """With one unknown variance and f degrees of freedom for it, the chance is the tail of the F distribution."""
    f, coefficients = 5, np.array([3.0, -1.0, 0.4, 0.2])
    variance = np.exp(np.linspace(-6, 8, 4001))
    weight = variance * scipy.stats.invgamma(f / 2, scale=f * 0.8 / 2).pdf(variance)
    solutions = [(coefficients, v * np.eye(4), None) for v in variance]
    for harmonic, own in ((1, coefficients[:2]), (2, coefficients[2:])):
        test = heading._test(harmonic, weight / weight.sum(), solutions, 0.01)
        assert test["chance"] == pytest.approx(scipy.stats.f.sf(own @ own / 2 / 0.8, 2, f), rel=1e-3)
        assert test["applied"] == (test["chance"] < 0.01)


def test_pieces_are_means_of_their_readings():
    data = star(np.random.default_rng(12), EIGHT[:2], n=160, crust=False)
    cut = heading.cut_legs(*data)
    assert np.bincount(cut["leg"]).tolist() == [16, 16]
    own = slice(160, 170)
    np.testing.assert_allclose(cut["value_nt"][16], data[1][own].mean(), atol=0.15)
    np.testing.assert_allclose(cut["effect"][16], heading.harmonics(data[0][own]).mean(axis=0), atol=0.02)
    assert np.sqrt(cut["noise_nt2"].mean()) == pytest.approx(0.1 / np.sqrt(10), rel=0.5)


# -- what cannot be known --------------------------------------------------------------------------------------------


def test_an_insignificant_harmonic_is_not_applied_and_leaves_its_doubt():
    true = np.array([5.0, -2.5, 0.0, 0.0])
    fit = heading.fit_heading(*star(np.random.default_rng(4), EIGHT, leg_sd=0.3, true=true), settings=Heading())
    assert [test["applied"] for test in fit["tests"]] == [True, False]
    assert fit["coefficients"][2:].tolist() == [0.0, 0.0]
    np.testing.assert_allclose(fit["coefficients"][:2], true[:2], rtol=0, atol=0.6)
    found = fit["all_coefficients"][2:]
    np.testing.assert_allclose(
        fit["covariance"][2:, 2:], fit["all_covariance"][2:, 2:] + np.outer(found, found), rtol=0, atol=1e-12
    )


def test_a_level_of_significance_is_kept():
    """Where there is no second harmonic, it is applied about as often as the level says."""
    rng, true, applied = np.random.default_rng(13), np.array([5.0, -2.5, 0.0, 0.0]), 0
    for _ in range(100):
        data = star(rng, EIGHT, leg_sd=1.0, n=24, true=true)
        applied += heading.fit_heading(*data, settings=Heading(significance=0.1))["tests"][1]["applied"]
    assert scipy.stats.binom.cdf(2, 100, 0.1) < 0.002  # what the bounds are worth
    assert 2 < applied < 22


@pytest.mark.parametrize(("axis", "sign"), [((20, 200), 1), ((150, 330), 1), ((185, 3), -1)])
def test_two_opposite_headings_determine_their_difference_only(axis, sign):
    data = star(np.random.default_rng(5), axis * 3, leg_sd=0.1)
    fit = heading.fit_heading(*data, settings=Heading(sigma_leg_nt=0.1))
    assert fit["kind"] == "difference"
    true = sign * (effect(axis[0], TRUE) - effect(axis[1], TRUE))
    assert fit["difference_nt"] == pytest.approx(true, abs=0.3)
    assert fit["sigma_difference_nt"] < 0.3
    assert 0 <= fit["axis_deg"] < 180
    both = heading.heading_effect(np.array([fit["axis_deg"], fit["axis_deg"] + 180]), fit["coefficients"])
    assert both[0] - both[1] == pytest.approx(fit["difference_nt"], abs=1e-9)
    assert both.sum() == pytest.approx(0.0, abs=1e-9)
    assert np.linalg.matrix_rank(fit["all_covariance"]) == 1


def test_away_from_two_headings_the_sigma_is_large():
    covariance = np.diag([0.04, 0.0, 0.0, 0.0])
    sigma = heading.difference_sigma(np.array([0.0, 180.0, 3.0, 90.0]), 0.0, covariance)
    np.testing.assert_allclose(sigma[:2], 0.2, atol=1e-12)
    assert sigma[2] < 2
    assert sigma[3] > heading.COEFFICIENT_NT


def test_four_headings_at_right_angles_leave_a_coefficient_unknown():
    """On 0, 90, 180 and 270 degrees sin 2 theta is nothing: its coefficient keeps its expected size as sigma."""
    data = star(np.random.default_rng(14), (0, 180, 90, 270), yaw_deg=0.0)
    fit = heading.fit_heading(*data, settings=Heading(sigma_leg_nt=0.05))
    assert fit["kind"] == "harmonics"
    assert fit["condition"] > 10
    sigma = heading.effect_sigma(np.array([0.0, 45.0]), fit["covariance"])
    assert sigma[0] < 1.0
    assert sigma[1] > 5.0


def test_headings_that_do_not_span_the_circle_are_not_fitted():
    fit = heading.fit_heading(*star(np.random.default_rng(6), (0, 30, 60, 90)), settings=Heading())
    assert fit["kind"] == "none"
    assert "leave a gap of 2" in fit["reason"]


def test_gaps_in_the_circle():
    assert heading.widest_gap(np.array([350.0, 10.0, 180.0])) == pytest.approx(170.0)
    assert heading.widest_gap(np.array([])) == 360.0
    assert heading.widest_gap(np.array([5.0])) == 360.0


def test_turns_are_left_out():
    time = np.arange(600.0)
    angle = np.where(time < 300, 350.0, 350.0 + np.minimum(time - 300, 120))  # 1 degree a second, through north
    good = heading.steady(time, angle % 360)
    assert good[:270].all()
    assert not good[310:410].any()
    assert good[460:].all()


def test_manoeuvres_are_told_apart_by_time_and_place():
    start = np.array(["2024-05-01T00", "2024-05-01T01", "2024-05-03T00", "2024-05-03T01"], "datetime64[ns]")
    end = start + np.timedelta64(30, "m")
    lat, lon = np.array([10, 10, 10, 10.5]), np.array([179.99, -179.99, 179.99, 180.0])
    assert heading.find_stars(start, end, lat, lon).tolist() == [0, 0, 1, 2]
    polar = heading.find_stars(start[:2], end[:2], np.array([89.95, 89.95]), np.array([0.0, 180.0]))
    assert polar.tolist() == [0, 0]


def test_sigma_of_the_effect_follows_the_covariance():
    covariance = np.diag([0.04, 0.0, 0.0, 0.0])
    sigma = heading.effect_sigma(np.array([0.0, 60.0, 90.0]), covariance)
    np.testing.assert_allclose(sigma, [0.2, 0.1, 0.0], atol=1e-12)


# -- the stage -------------------------------------------------------------------------------------------------------


def run_stage(folder, survey, *, settings=None, base=True, kind="calibration"):
    """Run the stage on a simulated survey, with the true positions and diurnal (or none)."""
    truth, readings, lines = survey.truth, survey.readings, survey.lines.copy()
    n, s = len(truth), survey.scenario
    lines.loc[lines["kind"] == "calibration", "kind"] = kind
    faulty = truth["fault"].to_numpy() > 0
    ship = truth["ship_heading_deg"].to_numpy().copy()
    ship[50:60] = np.nan
    diurnal = truth["diurnal_nt"].to_numpy() if base else np.full(n, np.nan)
    tables = {
        "readings": {"time_utc": readings["time_utc"], "total_field_nt": readings["total_field_nt"]},
        "lines": {"line_index": truth["line_index"]},
        "line_table": {**{c: lines[c] for c in ("line", "kind", "start_utc", "end_utc")}, "readings": 0},
        "screen": {"screen_flags": np.where(faulty, int(Flag.SPIKE), 0), "sigma_noise_nt": s.noise_nt},
        "position": {
            "sensor_latitude_deg": truth["sensor_latitude_deg"],
            "sensor_longitude_deg": truth["sensor_longitude_deg"],
            "ship_heading_deg": ship,
            "tow_direction_deg": truth["tow_direction_deg"],
            "sigma_position_m": 3.0,
        },
        "main_field": {"main_field_nt": truth["main_field_nt"]},
        "diurnal": {"diurnal_nt": diurnal, "sigma_diurnal_nt": np.where(np.isfinite(diurnal), 0.3, np.nan)},
    }
    command = [sys.executable, "-m", "steps.heading"]
    for name, content in tables.items():
        rows = len(lines) if name == "line_table" else n
        table = pd.DataFrame({c: np.zeros(rows) for c in columns.TABLES[name] if c not in content} | content)
        columns.check(table, name).to_parquet(folder / f"{name}.parquet")
        command += [f"--{name}", str(folder / f"{name}.parquet")]
    command += ["--write", str(folder / "heading.parquet"), str(folder / "heading_record.json")]
    command += ["--options", json.dumps({"settings": settings or {}})]
    done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    return (
        pd.read_parquet(folder / "heading.parquet"),
        json.loads((folder / "heading_record.json").read_text()),
        done.stdout,
    )


@pytest.fixture(scope="module")
def survey():
    """Simulate a small survey across 180 degrees, without line errors."""
    return synthetic.simulate(
        replace(synthetic.Scenario(), seed=4, lines=2, ties=1, line_length_km=8.0, longitude_deg=180.0)
    )


def test_the_stage_recovers_the_effect_of_a_simulated_survey(tmp_path, survey):
    table, record, printed = run_stage(tmp_path, survey)
    known = table["heading_nt"].notna().to_numpy()
    assert (~known).sum() == 10
    assert (table["heading_flags"] == np.where(known, 0, int(Flag.NO_HEADING))).all()
    error = (table["heading_nt"] - survey.truth["heading_nt"])[known]
    assert np.abs(error).max() < 0.5
    assert (np.abs(error) < 4 * table["sigma_heading_nt"][known]).all()
    assert (record["kind"], record["legs"], record["manoeuvres"]) == ("harmonics", 8, 1)
    assert np.array(record["all_covariance"]).shape == (4, 4)
    fit = record["fit"]
    assert len(fit["angle_deg"]) == len(fit["residual_nt"]) <= 2 * heading.SHOWN_POINTS
    off = np.array(fit["residual_nt"]) - heading.heading_effect(np.array(fit["angle_deg"]), record["coefficients"])
    assert np.sqrt(np.mean(off**2)) < 0.5
    assert "harmonics 1 and 2 applied" in printed


def test_the_stage_works_without_a_base_station(tmp_path, survey):
    table, record, _ = run_stage(tmp_path, survey, base=False)
    own = np.array(record["all_coefficients"]) - survey.scenario.heading_nt
    assert (np.abs(own) < 4 * np.sqrt(np.diag(record["all_covariance"]))).all()
    assert table["sigma_heading_nt"].notna().any()


@pytest.mark.parametrize(
    ("settings", "kind", "reason"),
    [
        ({"use": "none"}, "calibration", "switched off by heading.use"),
        ({}, "transit", "the survey has no calibration line"),
    ],
)
def test_a_term_that_is_not_estimated_is_missing_with_its_reason(tmp_path, survey, settings, kind, reason):
    table, record, printed = run_stage(tmp_path, survey, settings=settings, kind=kind)
    assert table[["heading_nt", "sigma_heading_nt"]].isna().all().all()
    assert (table["heading_flags"] == int(Flag.NO_HEADING)).all()
    assert record["reason"] == reason
    assert f"the heading effect is not determined: {reason}. The term is missing." in printed


def test_the_stage_says_that_two_headings_tell_one_number(tmp_path):
    two = synthetic.simulate(replace(synthetic.Scenario(), seed=5, lines=1, ties=0, calibration_headings=2))
    _, record, printed = run_stage(tmp_path, two)
    assert record["kind"] == "difference"
    assert "determines one number only, the effect on" in printed
    assert np.linalg.matrix_rank(np.array(record["all_covariance"])) == 1
