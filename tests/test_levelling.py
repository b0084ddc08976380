"""Levelling by hand-made crossings of known causes: what is recovered, how surely, and what is said."""

import json
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from conftest import ROOT
from scipy.linalg import lstsq

from steps import columns, levelling, levels, posterior
from steps.columns import Flag
from steps.errors import SurveyError
from steps.settings import Levelling

START = np.datetime64("2024-05-01T00:00:00", "ns")
HOUR = np.timedelta64(3_600_000_000_000, "ns")
OFF = {name: "off" for name in ("line_drift", "time_drift", "heading", "diurnal_scale", "layback", "clock")}
CONSTANT = Levelling(**OFF)


def make_lines(count, ties, survey="one", start=START):
    number = np.arange(count + ties)
    return pd.DataFrame(
        {
            "line": [f"L{k}" if k < count else f"T{k - count}" for k in number],
            "kind": ["line" if k < count else "tie" for k in number],
            "start_utc": start + number * 3 * HOUR,
            "end_utc": start + (number * 3 + 2) * HOUR,
            "readings": 1000,
            "survey": survey,
        }
    )


def course(lines, k):
    """Lines run east and west in turn, ties north and south."""
    own = int(lines["line"][k][1:])
    return (90.0 if lines["kind"][k] == "line" else 0.0) + (180.0 if own % 2 else 0.0)


def make_crossings(lines, pairs, error, noise=0.0, seed=0, place=None, gradient=0.02, courses=course, speed=5.0):
    """Make crossings of pairs (a, b). `error(k, hours, pass)` is what readings of line k have too much.

    `pass` holds course_deg, gradient_nt_per_m, speed_mps and diurnal_nt. Lines lie in a grid: line k crosses tie j at
    place (j, k), in its own sailing order, unless `place` says where along each line.
    """
    rng = np.random.default_rng(seed)
    ties = max(1, int((lines["kind"] == "tie").sum()))
    count = max(1, int((lines["kind"] == "line").sum()))
    rows = []
    for a, b in pairs:
        row = {name: np.nan for name in columns.TABLES["crossovers"]}
        for p, k, other, number in ((1, a, b, ties), (2, b, a, count)):
            at = (int(lines["line"][other][1:]) + 0.5) / number
            share = at if courses(lines, k) < 180 else 1 - at
            if place is not None:
                share = place(k, other, rng)
            start = lines["start_utc"][k]
            time = start + (lines["end_utc"][k] - start) * share
            hours = (time - lines["start_utc"].min()) / pd.Timedelta("1h")
            own = {
                "course_deg": courses(lines, k),
                "gradient_nt_per_m": gradient * rng.standard_normal(),
                "speed_mps": speed if np.isscalar(speed) else speed[k],
                "diurnal_nt": 20 * np.sin(2 * np.pi * hours / 24),
            }
            row |= {f"{name.replace('_', f'_{p}_', 1)}": value for name, value in own.items()}
            row |= {
                f"survey_{p}": lines["survey"][k],
                f"line_{p}": lines["line"][k],
                f"time_{p}_utc": time,
                f"reading_{p}": int(share * 1000),
                f"anomaly_{p}_nt": 100.0 + error(k, hours, own) + noise * rng.standard_normal(),
                f"ship_heading_{p}_deg": own["course_deg"],
                f"tow_direction_{p}_deg": own["course_deg"],
                f"sigma_{p}_nt": np.hypot(max(noise, 0.01), 1.0),
                f"sigma_diurnal_{p}_nt": 1.0,
                f"sigma_position_{p}_m": 0.0,
            }
        row["mismatch_nt"] = row["anomaly_1_nt"] - row["anomaly_2_nt"]
        row["sigma_mismatch_nt"] = np.hypot(row["sigma_1_nt"], row["sigma_2_nt"])
        row |= {
            "status": "used",
            "angle_deg": 90.0,
            "sensor_longitude_deg": 0.1 * int(lines["line"][b][1:]),
            "sensor_latitude_deg": 0.1 * int(lines["line"][a][1:]),
        }
        rows.append(row)
    return columns.check(pd.DataFrame(rows, columns=columns.TABLES["crossovers"]), "crossovers")


def grid(count, ties):
    return [(a, count + b) for a in range(count) for b in range(ties)]


def level(crossings, lines, settings=CONSTANT, **more):
    ordered = levelling.in_order(lines)
    if "sigma_diurnal_nt" not in more:
        more["sigma_diurnal_nt"] = np.ones(len(levelling.nodes_of(ordered, settings)))
    return levelling.level(crossings, ordered, settings=settings, **more)


def at_middle(found):
    return levels.line_statistics(found, np.zeros(len(found.lines), bool))["level_nt"].to_numpy()


# -- constants -------------------------------------------------------------------------------------------------------


def test_constants_are_recovered_with_mean_zero():
    lines = make_lines(6, 3)
    truth = np.random.default_rng(1).normal(0, 4, 9)
    found = level(make_crossings(lines, grid(6, 3), lambda k, *_: truth[k]), lines)
    assert at_middle(found) == pytest.approx(truth - truth.mean(), abs=2e-3)
    assert found.crossings["residual_nt"].abs().max() < 2e-3


def test_many_readings_weigh_more_in_the_datum():
    lines = make_lines(2, 1).assign(readings=[3000, 1000, 1000])
    truth = np.array([1.0, -2.0, 4.0])
    found = level(make_crossings(lines, [(0, 2), (1, 2)], lambda k, *_: truth[k]), lines)
    assert np.average(at_middle(found), weights=lines["readings"]) == pytest.approx(0.0, abs=1e-9)


def test_equals_scipy_lstsq_given_the_variances():
    """Independent solver: the dense whitened system with the same prior of the constants."""
    lines = make_lines(7, 3)
    truth = np.random.default_rng(2).normal(0, 2, 10)
    crossings = make_crossings(lines, grid(7, 3), lambda k, *_: truth[k], noise=0.5)
    found = level(crossings, lines, Levelling(**OFF, robust=False))
    model = found.fit.model
    size = np.exp(model.log_variance[0] / 2)
    design = np.zeros((21, 10))
    for row, (a, b) in enumerate(grid(7, 3)):
        design[row, a], design[row, b] = 1, -1
    sigma = np.sqrt(model.noise(found.data.parts))[np.argsort(found.order)]
    stacked = np.vstack([design / sigma[:, None], np.eye(10) / size])
    right = np.append(crossings["mismatch_nt"] / sigma, np.zeros(10))
    expected = lstsq(stacked, right)[0]
    assert at_middle(found) == pytest.approx(expected - expected.mean(), abs=1e-8)
    covariance = np.linalg.inv(stacked.T @ stacked)
    centre = np.eye(10) - 0.1
    table = levels.line_statistics(found, np.zeros(10, bool))
    assert table["sigma_level_nt"].to_numpy() == pytest.approx(np.sqrt(np.diag(centre @ covariance @ centre)), abs=1e-8)


def test_held_lines_set_the_datum():
    lines = make_lines(5, 2)
    truth = np.arange(7.0)
    held = levelling.held_lines(["T1"], [], levelling.in_order(lines))
    found = level(make_crossings(lines, grid(5, 2), lambda k, *_: truth[k]), lines, held=held)
    assert at_middle(found) == pytest.approx(truth - truth[6], abs=0.01)
    table = levels.line_statistics(found, held)
    assert table["sigma_level_nt"][6] == 0
    assert table["status"].tolist() == ["levelled"] * 6 + ["held at zero"]


def test_a_hold_must_name_a_line():
    with pytest.raises(SurveyError, match=r"levelling\.hold: must name lines\. Got T9\. Known here: L0, L1, T0\."):
        levelling.held_lines(["T9"], [], make_lines(2, 1))


def test_lines_without_crossing_and_separate_networks():
    lines = make_lines(6, 2)
    pairs = [(0, 6), (1, 6), (2, 6), (3, 7), (4, 7)]
    truth = np.array([1.0, 2, 3, 4, 5, 6, 7, 8])
    found = level(make_crossings(lines, pairs, lambda k, *_: truth[k]), lines)
    assert found.network.tolist() == [0, 0, 0, 1, 1, -1, 0, 1]
    value = at_middle(found)
    assert np.isnan(value[5])
    first, second = [0, 1, 2, 6], [3, 4, 7]
    for own in (first, second):
        assert value[own] == pytest.approx(truth[own] - truth[own].mean(), abs=0.01)
    notes = sum_up(found)[1]
    assert "without a usable crossing, and so without a level term: L5." in notes
    assert any(
        note.startswith("the lines fall into 2 networks that no crossing connects (of 4, 3 lines)") for note in notes
    )


def test_a_wrong_crossing_is_rejected_with_a_reason():
    lines = make_lines(8, 4)
    truth = np.random.default_rng(3).normal(0, 4, 12)
    crossings = make_crossings(lines, grid(8, 4), lambda k, *_: truth[k], noise=0.5)
    crossings.loc[7, "mismatch_nt"] += 40
    found = level(crossings, lines)
    assert found.crossings["status"][7].startswith("does not fit the others: off by ")
    assert np.isnan(found.crossings["residual_nt"][7])
    assert found.crossings["weight"][7] == 0
    assert found.crossings["left_out_nt"].notna().sum() == 31
    clean = level(crossings.drop(index=7), lines)
    assert at_middle(found) == pytest.approx(at_middle(clean), abs=0.1)
    assert any("1 of 32 crossings do not fit the others" in note for note in sum_up(found)[1])


def test_a_crossing_that_alone_connects_a_line_has_no_leave_one_out_value():
    lines = make_lines(4, 2)
    found = level(make_crossings(lines, [*grid(3, 2), (3, 5)][1:], lambda k, *_: float(k), noise=0.1), lines)
    # grid(3, 2) numbers ties 3 and 4: lines 0 to 2 cross L3 and T0, and (3, 5) hangs T1 on L3
    table = found.crossings
    alone = table["left_out_nt"].isna()
    assert (
        table.loc[alone, ["line_1", "line_2"]].to_numpy().tolist() == [["L0", "T0"], ["L3", "T1"]] or alone.sum() >= 1
    )
    assert alone.iloc[-1]


def test_left_out_is_what_really_leaving_each_out_gives():
    lines = make_lines(6, 3)
    truth = np.random.default_rng(5).normal(0, 2, 9)
    crossings = make_crossings(lines, grid(6, 3), lambda k, *_: truth[k], noise=0.4)
    settings = Levelling(**OFF | {"time_drift": "on", "heading": "on"}, robust=False)
    found = level(crossings, lines, settings)
    model, data = found.fit.model, found.data
    for k in (0, 7, 17):
        rest = np.delete(np.arange(18), k)
        v = levelling.joint.Block(data, model).covariance(model, np.ones(18))
        predicted = v[k, rest] @ np.linalg.solve(v[np.ix_(rest, rest)], data.mismatch[rest])
        # V is the covariance of the mismatches, so this is their conditional mean: an independent route
        assert found.posterior.left_out[k] == pytest.approx(data.mismatch[k] - predicted, abs=1e-8)


def test_the_order_of_lines_crossings_and_passes_does_not_matter():
    lines = make_lines(8, 4)
    rng = np.random.default_rng(6)
    truth = rng.normal(0, 3, 12)
    crossings = make_crossings(lines, grid(8, 4), lambda k, h, p: truth[k] + np.sin(h / 4), noise=0.3)
    crossings.loc[5, "mismatch_nt"] += 30
    settings = Levelling()
    found = level(crossings, lines, settings)
    rows = rng.permutation(12)
    turned = crossings.sample(frac=1.0, random_state=1)
    swap = rng.random(len(turned)) < 0.5
    other = turned.copy()
    for name in [c for c in turned if "_1" in c]:
        other[name] = np.where(swap, turned[name.replace("_1", "_2")], turned[name])
        other[name.replace("_1", "_2")] = np.where(swap, turned[name], turned[name.replace("_1", "_2")])
    other["mismatch_nt"] = np.where(swap, -turned["mismatch_nt"], turned["mismatch_nt"])
    again = level(other, lines.iloc[rows].reset_index(drop=True), settings)
    assert at_middle(again) == pytest.approx(at_middle(found)[rows], abs=1e-9)
    sign = np.where(swap, -1, 1)
    for name, factor in (("residual_nt", sign), ("left_out_nt", sign), ("weight", 1)):
        expected = found.crossings[name].loc[turned.index].to_numpy() * factor
        assert again.crossings[name].to_numpy() == pytest.approx(expected, abs=1e-9, nan_ok=True)


# -- joint terms -----------------------------------------------------------------------------------------------------


def sum_up(found, settings=None):
    statistics = levels.line_statistics(found, np.zeros(len(found.lines), bool))
    return levelling.determined.sum_up(found, statistics, settings or Levelling())


def test_terms_that_are_there_are_kept_and_terms_that_are_not_are_dropped():
    """An 8 % larger variation and a heading effect of 6 nT, no drift: what each brought stands in the record."""
    lines = make_lines(12, 6)
    truth = np.random.default_rng(7).normal(0, 0.2, 18)

    def error(k, hours, own):
        return truth[k] + 0.08 * own["diurnal_nt"] + 6 * np.cos(np.radians(own["course_deg"]))

    crossings = make_crossings(lines, grid(12, 6), error, noise=0.1)
    settings = Levelling(time_drift="off")
    found = level(crossings, lines, settings, headings=[{}])
    record, _, done = sum_up(found, settings)
    terms = {row["term"]: row for row in record["terms"]}
    assert terms["heading"]["kept"]
    assert terms["diurnal_scale"]["kept"]
    assert terms["diurnal_scale"]["left_out_with_nt"] < 0.9 * terms["diurnal_scale"]["left_out_without_nt"]
    for row in terms.values():
        if row["left_out_with_nt"] is not None:
            assert row["kept"] == (row["left_out_with_nt"] < row["left_out_without_nt"])
    scale = record["surveys"]["one"]["diurnal_scale"]
    assert scale["values"][0] == pytest.approx(0.08, abs=3 * scale["sigmas"][0])
    assert record["rms_left_out_nt"] < 0.3
    assert "heading" in done


def test_a_user_may_insist_on_a_term_or_switch_it_off():
    lines = make_lines(8, 4)
    crossings = make_crossings(lines, grid(8, 4), lambda k, h, p: 5 * np.cos(np.radians(p["course_deg"])), noise=0.2)
    on = level(crossings, lines, Levelling(**OFF | {"clock": "on"}))
    assert levelling.joint.kept_terms(on.fit.model) == {"clock"}
    off = level(crossings, lines, Levelling(heading="off"))
    assert "heading" not in levelling.joint.kept_terms(off.fit.model)


def test_drift_lowers_the_left_out_figure_when_lines_drift():
    lines = make_lines(10, 5)
    rng = np.random.default_rng(2)
    shift, slope = rng.normal(0, 3, 15), rng.normal(0, 2, 15)

    def error(k, hours, own):
        return shift[k] + slope[k] * (hours - 3 * k - 1)

    crossings = make_crossings(lines, grid(10, 5), error, noise=0.2)
    constant = level(crossings, lines)
    drift = level(crossings, lines, Levelling(**OFF | {"line_drift": "auto"}))
    figures = [levels.rms(f.crossings["left_out_nt"]) for f in (constant, drift)]
    assert figures[1] < 0.5 * figures[0]
    record, notes, _ = sum_up(drift)
    assert record["weak_modes"]["modes"] == 4, "1, x, y and x y: handbook, section 7"
    assert record["weak_modes"]["surfaces"] == 4
    assert any("leave 4 combinations undetermined" in note for note in notes)


def test_a_heading_calibration_and_its_covariance_are_the_prior():
    """On two opposite headings only the difference is determined; along the rest the calibration stays."""
    lines = make_lines(8, 3)
    truth = np.array([2.0, 5.0, 0.0, 0.0])
    spread = np.diag([0.5, 3.0, 0.2, 0.2]) ** 2

    def error(k, hours, own):
        return float(levelling.joint.harmonics(own["course_deg"]) @ truth)

    crossings = make_crossings(lines, grid(8, 3), error, noise=0.05)
    record = {"coefficients": [1.0, 0, 0, 0], "all_coefficients": [1.0, 0, 0, 0], "all_covariance": spread.tolist()}
    found = level(crossings, lines, Levelling(**OFF | {"heading": "on"}), headings=[record])
    change, sigma = found.posterior.effects[0], np.sqrt(np.diag(found.posterior.effects_covariance[0]))
    assert np.all(np.abs(change[:2] - truth[:2]) < 3 * sigma[:2])
    assert sigma[1] < 0.5, "lines run east and west: their difference is 2 S1"
    assert sigma[3] == pytest.approx(0.2, rel=1e-6), "sin 2 theta is zero on all four headings"


def test_two_headings_determine_one_number_and_it_is_said():
    lines = make_lines(8, 3)

    def east_or_west(table, k):
        return 90.0 if int(table["line"][k][1:]) % 2 else 270.0

    crossings = make_crossings(
        lines, grid(8, 3), lambda k, h, p: 3 * np.sin(np.radians(p["course_deg"])), noise=0.1, courses=east_or_west
    )
    found = level(crossings, lines, Levelling(**OFF | {"heading": "on"}), headings=[{}])
    record, notes, _ = sum_up(found, Levelling(**OFF | {"heading": "on"}))
    told = record["surveys"]["one"]["heading_determined"]
    assert told["determined"] == 1
    assert told["headings_deg"] == pytest.approx([90, 270])
    assert any("they determine one number only, the difference between the two, " in note for note in notes)
    (combination,) = told["combinations"]
    assert np.abs(combination["weights"]) == pytest.approx([0, 1, 0, 0], abs=1e-6), "S1: half the difference"
    assert combination["value_nt"] == pytest.approx(3.0, abs=3 * combination["sigma_nt"])


def test_one_heading_determines_nothing_and_it_is_said():
    lines = make_lines(6, 3)
    crossings = make_crossings(lines, grid(6, 3), lambda k, *_: float(k), noise=0.1, courses=lambda *_: 45.0)
    settings = Levelling(**OFF | {"heading": "on"})
    found = level(crossings, lines, settings)
    assert not found.applied[:4].any(), "no crossing tells anything of it"


@pytest.mark.parametrize(("layback", "clock"), [(12.0, 0.0), (0.0, 2.0)])
def test_layback_and_clock_are_estimated_with_their_sign_and_not_told_apart_at_one_speed(layback, clock):
    """The sensor is dB further back and v dt further on, so it reads A + g (v dt - dB) at the place it is given."""
    lines = make_lines(10, 5)

    def error(k, hours, own):
        return own["gradient_nt_per_m"] * (own["speed_mps"] * clock - layback)

    crossings = make_crossings(lines, grid(10, 5), error, noise=0.05, gradient=0.03)
    found = level(crossings, lines)
    record, notes, _ = sum_up(level(crossings, lines, Levelling()))
    advice = record["surveys"]["one"]["position_advice"]
    assert not advice["told_apart"]
    assert advice["layback_m"] == pytest.approx(layback - 5 * clock, abs=3 * advice["sigma_layback_m"] + 0.1)
    assert advice["clock_s"] == pytest.approx(clock - layback / 5, abs=3 * advice["sigma_clock_s"] + 0.02)
    assert any("the two cannot be told apart" in note and "nothing of it is applied" in note for note in notes)
    assert not found.applied[5:].any()


def test_speed_changes_let_layback_and_clock_be_told_apart():
    lines = make_lines(12, 6)

    def error(k, hours, own):
        return own["gradient_nt_per_m"] * (own["speed_mps"] * 3.0 - 20.0)

    speeds = np.where(np.arange(18) % 2, 3.0, 7.0)
    crossings = make_crossings(lines, grid(12, 6), error, noise=0.05, gradient=0.03, speed=speeds)
    record, notes, _ = sum_up(level(crossings, lines, Levelling()))
    advice = record["surveys"]["one"]["position_advice"]
    assert advice["told_apart"]
    assert advice["both_layback_m"] == pytest.approx(20.0, abs=3 * advice["both_sigma_layback_m"])
    assert advice["both_clock_s"] == pytest.approx(3.0, abs=3 * advice["both_sigma_clock_s"])
    assert advice["both_sigma_clock_s"] < 0.5
    assert any("the speed varies enough to tell them apart" in note for note in notes)


def test_an_error_of_position_is_applied_on_request():
    lines = make_lines(10, 5)
    crossings = make_crossings(
        lines, grid(10, 5), lambda k, h, p: -12 * p["gradient_nt_per_m"], noise=0.05, gradient=0.03
    )
    settings = Levelling(**OFF, apply=["layback"])
    found = level(crossings, lines, settings)
    effects = np.zeros((2, 7))
    effects[:, 5] = [-0.02, 0.04]
    at = levels.at_readings(found, 0, np.zeros(2, int), np.array([START] * 2), effects=effects, settings=settings)
    assert at["position_change_nt"].to_numpy() == pytest.approx([-0.24, 0.48], abs=0.03)
    assert np.diff(at["level_nt"])[0] == pytest.approx(0.72, abs=0.06), "the change is part of the level"


def test_without_a_base_the_drift_in_time_carries_the_external_field():
    lines = make_lines(10, 4)

    def error(k, hours, own):
        return 15 * np.sin(2 * np.pi * hours / 24) + 4 * np.sin(hours / 3)

    crossings = make_crossings(lines, grid(10, 4), error, noise=0.2).assign(
        sigma_diurnal_1_nt=np.nan, sigma_diurnal_2_nt=np.nan, diurnal_1_nt=np.nan, diurnal_2_nt=np.nan
    )
    for p in "12":
        crossings[f"sigma_{p}_nt"] = 0.2
    crossings["sigma_mismatch_nt"] = 0.3
    ordered = levelling.in_order(lines)
    found = level(
        crossings, lines, Levelling(), sigma_diurnal_nt=np.full(len(levelling.nodes_of(ordered, Levelling())), np.nan)
    )
    time = found.nodes.time_utc
    value, sigma = levels.level_at(found, found.nodes.line, time)
    truth = np.array([error(0, h, {}) for h in (time - START) / HOUR])
    off = value - truth - np.mean(value - truth)
    assert off.std() < 0.35 * truth.std()
    assert np.std(off / sigma) < 1.3
    assert np.median(sigma) < 0.5 * truth.std()
    assert any("where no base station tells the external variation" in note for note in sum_up(found)[1])


# -- two ways to the same answer ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("surveys", [1, 2])
def test_the_sparse_way_gives_what_collocation_gives(surveys, monkeypatch):
    parts = [make_lines(8, 4, f"s{k}", START + k * 100 * HOUR) for k in range(surveys)]
    lines = pd.concat(parts, ignore_index=True)
    rng = np.random.default_rng(8)
    truth = rng.normal(0, 2, len(lines)) + 10 * (lines["survey"] == "s1")
    pairs = [(a + 12 * k, b + 12 * k) for k in range(surveys) for a, b in grid(8, 4)]
    pairs += [(a, 12 + b) for a, b in grid(8, 4)][::3] if surveys == 2 else []
    crossings = make_crossings(
        lines,
        pairs,
        lambda k, h, p: truth[k] + np.sin(h / 3) + 0.05 * p["diurnal_nt"] + 2 * np.sin(np.radians(p["course_deg"])),
        noise=0.3,
        place=lambda k, other, rng: rng.uniform(),
    )
    settings = Levelling(**{name: "on" for name in OFF}, robust=False)
    found = level(crossings, lines, settings)
    monkeypatch.setattr(posterior, "COLLOCATED", 0)
    sparse = level(crossings, lines, settings)
    monkeypatch.setattr(posterior, "KEPT_WHOLE", 0)
    gathered = level(crossings, lines, settings)
    line, time = found.nodes.line, found.nodes.time_utc
    value, sigma = levels.level_at(found, line, time)
    effects = np.random.default_rng(9).standard_normal((len(line), 7))
    for other in (sparse, gathered):
        value_2, sigma_2 = levels.level_at(other, line, time)
        # the sparse way interpolates between knots 0.25 h apart where collocation does not
        assert np.std(value_2 - value) < 0.1 * np.median(sigma)
        assert np.median(sigma_2 / sigma) == pytest.approx(1.0, abs=0.03)
        assert other.posterior.effects == pytest.approx(found.posterior.effects, abs=0.3)
        a, b = (
            levels.joint_variance(f, 0, line[:50], levels._place(f, line[:50], time[:50]), effects[:50][:, f.applied])
            for f in (found, other)
        )
        assert np.median(np.sqrt(b / a)) == pytest.approx(1.0, abs=0.05)
    assert levels.level_at(gathered, line, time)[1] == pytest.approx(levels.level_at(sparse, line, time)[1], abs=1e-6)


def drawn_errors(seed):
    """Draw line constants, a sum of six waves in time, and heading coefficients."""
    rng = np.random.default_rng(seed)
    shift, phase, size = rng.normal(0, 2, 12), rng.uniform(0, 7, 6), rng.normal(0, 0.7, 6)
    rate = np.array([0.2, 0.3, 0.45, 0.7, 1.0, 1.5])

    def error(k, h):
        return shift[k] + (size * np.sin(rate * np.asarray(h)[..., None] + phase)).sum(axis=-1)

    return error, rng.normal(0, 3, 4)


def test_sigmas_are_those_of_many_simulated_surveys():
    """Gauss: (level - truth) / sigma has unit spread, datum left out, over 24 surveys with all causes drawn anew."""
    ratio = []
    lines = make_lines(8, 4)
    ordered = levelling.in_order(lines)
    settings = Levelling(**OFF | {"time_drift": "on", "heading": "on"})
    nodes = levelling.nodes_of(ordered, settings)
    hours = (nodes.time_utc - START) / HOUR
    for seed in range(24):
        error, coefficients = drawn_errors(seed)

        def all_error(k, h, own, error=error, coefficients=coefficients):
            return error(k, h) + float(levelling.joint.harmonics(own["course_deg"]) @ coefficients)

        found = level(make_crossings(lines, grid(8, 4), all_error, noise=0.2, seed=seed), lines, settings)
        effects = np.zeros((len(nodes.line), 7))
        effects[:, :4] = levelling.joint.harmonics([course(lines, k) for k in nodes.line])
        at = levels.at_readings(found, 0, nodes.line, nodes.time_utc, effects=effects, settings=settings)
        wrong = at["level_nt"] + at["heading_change_nt"] - error(nodes.line, hours) - effects[:, :4] @ coefficients
        weight = nodes.weights(np.ones(12))
        ratio.append((wrong - np.average(wrong, weights=weight)) / at["sigma_joint_nt"])
    print(f"(found - truth) / sigma: sd {np.std(ratio):.3f}, within 1: {np.mean(np.abs(ratio) < 1):.3f}")
    assert np.std(ratio) == pytest.approx(1.0, abs=0.15)


# -- what bad input gets ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("pairs", [[], [(0, 2)]])
def test_too_little_to_level_runs_to_the_end(pairs):
    lines = make_lines(2, 1)
    found = level(make_crossings(lines, pairs, lambda k, *_: float(k)), lines, Levelling())
    value = at_middle(found)
    assert np.isnan(value[1])
    assert np.isfinite(value[[0, 2]]).all() == bool(pairs)
    record, notes, done = sum_up(found)
    json.dumps(record, allow_nan=False)
    if not pairs:
        assert notes[0].startswith("there is no usable crossing: no line can be levelled")
        assert done == "no line levelled"


@pytest.mark.parametrize("seed", range(40))
def test_any_net_ends_in_a_level_with_a_sigma_or_in_a_flag(seed):
    """Random small nets with wild values, missing columns, odd settings: never an exception, never NaN without flag."""
    rng = np.random.default_rng(seed)
    parts = [
        make_lines(
            int(rng.integers(1, 6)), int(rng.integers(0, 4)), f"s{k}", START + k * int(rng.integers(0, 99)) * HOUR
        )
        for k in range(int(rng.choice([1, 1, 2])))
    ]
    lines = pd.concat(parts, ignore_index=True)
    m = len(lines)
    n = int(rng.choice([0, 1, 2, 5, 20, 60])) if m > 1 else 0
    pairs = [tuple(rng.choice(m, 2, replace=bool(rng.random() < 0.2))) for _ in range(n)]
    size, wild = 10 ** rng.uniform(-3, 4), rng.choice([0.0, 1e4])
    crossings = make_crossings(
        lines,
        pairs,
        lambda k, h, p: size * np.sin(7 * k) + wild * (rng.random() < 0.1),
        noise=float(10 ** rng.uniform(-4, 2)),
        seed=seed,
        place=lambda k, other, own: own.uniform(),
        gradient=float(rng.choice([0, 0.01, 1])),
    )
    numeric = [name for name in crossings if crossings[name].dtype == float]
    for name in rng.choice(numeric, rng.integers(0, 4)) if n else []:
        crossings.loc[rng.random(n) < rng.choice([0.1, 1.0]), name] = rng.choice([np.nan, 0.0, 1e6])
    terms = {name: str(rng.choice(["auto", "on", "off"])) for name in OFF}
    apply = rng.choice(["layback", "clock"], int(rng.integers(0, 3)), replace=False).tolist()
    settings = Levelling(
        **terms, apply=apply, robust=bool(rng.random() < 0.8), knots_h=float(rng.choice([0.05, 0.25, 5]))
    )
    held = rng.random(m) < rng.choice([0, 0, 0.3, 1])
    found = level(crossings, lines, settings, held=held, line_means=rng.standard_normal((m, 7)))
    record, notes, done = levelling.determined.sum_up(found, levels.line_statistics(found, held), settings)
    json.dumps(record, allow_nan=False)
    assert done
    for s in range(len(found.surveys)):
        own = found.lines[found.lines["survey_number"] == s].sort_values("row")
        index = np.repeat(np.arange(len(own)), 3)
        time = np.concatenate(
            [pd.date_range(a, b, periods=3) for a, b in zip(own["start_utc"], own["end_utc"], strict=True)]
        )
        effects = rng.standard_normal((len(index), 7))
        at = levels.at_readings(found, s, index, time, effects=effects, settings=settings)
        there = at["level_nt"].notna()
        assert (there == (at["level_flags"] == 0)).all()
        assert np.isfinite(at.loc[there, ["sigma_level_nt", "sigma_joint_nt"]]).all(axis=None)
        if not there.all():
            assert notes, "a level is missing, and nothing was said"


def test_readings_get_the_level_at_their_time_and_a_flag_where_there_is_none():
    lines = make_lines(4, 2)
    truth = np.random.default_rng(4).normal(0, 4, 6)
    found = level(make_crossings(lines, grid(4, 2)[:-2], lambda k, *_: truth[k]), lines)
    at = levels.at_readings(found, 0, np.array([0, 1, 3, -1]), np.array([START] * 4), settings=CONSTANT)
    assert at["level_nt"][:2].to_numpy() == pytest.approx(at_middle(found)[:2])
    assert np.isnan(at["level_nt"][2:]).all()
    assert at["level_flags"].tolist() == [0, 0, Flag.NO_LEVEL, Flag.NO_LEVEL]
    assert at["heading_change_nt"].isna().all(), "no change is not a change of zero"


def test_the_gradient_along_a_track_is_that_of_a_known_curve():
    """A sinusoid of 8 km: its slope, smoothed by a straight line over 500 m (0.6 %), on two lines that meet."""
    s = np.arange(400) * 25.0
    lat = np.concatenate([45 + s / 111_132.0, 45 + s / 111_132.0])  # one degree of latitude at 45 N: 111.13 km (WGS 84)
    value = 50 * np.sin(2 * np.pi * s / 8000)
    found = levelling.joint.along_track_gradient(lat, np.full(800, 179.9), np.tile(value, 2), np.repeat([0, 1], 400))
    expected = 50 * 2 * np.pi / 8000 * np.cos(2 * np.pi * s / 8000)
    inner = np.r_[20:380]
    assert found[inner] == pytest.approx(expected[inner], abs=0.01 * np.abs(expected).max())
    assert found[400 + inner] == pytest.approx(found[inner], abs=1e-9)


# -- the stage -------------------------------------------------------------------------------------------------------


def run_stage(folder, crossings, surveys, settings=None, edits=(), heading=None):
    """Run the stage as the workflow does, on tables in `folder`."""
    words: dict = {}
    outputs = []
    for key, lines in surveys.items():
        place = folder / key
        place.mkdir()
        spans = zip(lines["start_utc"], lines["end_utc"], strict=True)
        time = np.concatenate([pd.date_range(a, b, periods=20) for a, b in spans])
        n = len(time)
        direction = np.repeat([course(lines, k) for k in range(len(lines))], 20)
        tables = {
            "readings": {"reading": np.arange(n), "time_utc": time.astype("datetime64[ns]"), "total_field_nt": 5e4},
            "lines": {"line_index": np.repeat(np.arange(len(lines)), 20).astype("int32")},
            "line_table": lines.drop(columns="survey"),
            "position": {
                "sensor_latitude_deg": np.linspace(40, 41, n),
                "sensor_longitude_deg": np.full(n, -30.0),
                "tow_direction_deg": direction,
                "ship_heading_deg": direction,
                "sensor_course_deg": direction,
                "sensor_speed_mps": np.full(n, 5.0),
                "sigma_position_m": np.full(n, 5.0),
            },
            "diurnal": {"diurnal_nt": np.zeros(n), "sigma_diurnal_nt": np.ones(n)},
            "heading": {"heading_nt": np.zeros(n), "sigma_heading_nt": np.zeros(n)},
            "main_field": {"main_field_nt": np.full(n, 5e4)},
            "screen": {"screen_flags": np.zeros(n, "uint32")},
        }
        for name, content in tables.items():
            table = pd.DataFrame(content, index=None if isinstance(content, pd.DataFrame) else range(n))
            table.to_parquet(place / f"{name}.parquet", index=False)
            words.setdefault(name, []).append(str(place / f"{name}.parquet"))
        stated = {"settings": {"layback": {"model": "pursuit"}, "sigma_navigation_m": 3.0, "sigma_layback_m": 4.0}}
        for name, content in (("heading_record", heading or {}), ("position_record", stated)):
            (place / f"{name}.json").write_text(json.dumps(content))
            words.setdefault(name, []).append(str(place / f"{name}.json"))
        outputs.append(place / "levelling.parquet")
    crossings.to_parquet(folder / "crossovers.parquet", index=False)
    words["crossovers"] = [str(folder / "crossovers.parquet")]
    names = ("levelling_lines.parquet", "levelling_crossovers.parquet", "level_covariance.npz", "levelling_record.json")
    outputs += [folder / name for name in names]
    options = {"settings": settings or {}, "survey": {"name": "test", "members": list(surveys)}, "edits": list(edits)}
    command = [sys.executable, "-m", "steps.levelling"]
    for name, files in words.items():
        command += [f"--{name}", *files]
    command += ["--write", *map(str, outputs), "--options", json.dumps(options)]
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)


def test_the_stage_levels_two_surveys_together(tmp_path):
    one, two = make_lines(4, 2, "one"), make_lines(3, 1, "two", START + 50 * HOUR)
    lines = pd.concat([one, two], ignore_index=True)
    pairs = [*grid(4, 2), *[(6 + k, 9) for k in range(3)], (0, 9), (7, 5), (1, 8)]
    truth = np.random.default_rng(5).normal(0, 4, len(lines))
    crossings = make_crossings(lines, pairs, lambda k, *_: truth[k], noise=0.05)
    edit = {"action": "hold_line", "target": "T0", "member": "two", "file": "edits.csv", "row": 2}
    for run in ("a", "b"):
        folder = tmp_path / run
        folder.mkdir()
        done = run_stage(folder, crossings, {"one": one, "two": two}, edits=[edit], settings=OFF)
        assert done.returncode == 0, done.stderr
    table = pd.read_parquet(folder / "levelling_lines.parquet")
    assert table["level_nt"].to_numpy() == pytest.approx(truth - truth[9], abs=0.5)
    assert table["status"][9] == "held at zero"
    first = pd.read_parquet(folder / "one" / "levelling.parquet")
    assert len(first) == 120
    assert first["level_nt"][0] == pytest.approx(table["level_nt"][0])
    with np.load(folder / "level_covariance.npz") as stored:
        assert stored["covariance_nt2"].shape == (len(stored["line"]),) * 2
        assert np.sqrt(stored["covariance_nt2"][0, 0]) == pytest.approx(first["sigma_level_nt"][0])
    for path in sorted(folder.rglob("*")):
        if path.is_file():
            assert path.read_bytes() == (tmp_path / "a" / path.relative_to(folder)).read_bytes(), path.name


def test_the_stage_says_that_nothing_can_be_levelled(tmp_path):
    lines = make_lines(1, 0)
    done = run_stage(tmp_path, make_crossings(lines, [], None), {"one": lines})
    assert done.returncode == 0, done.stderr
    assert "there is no usable crossing: no line can be levelled" in done.stdout
    assert pd.read_parquet(tmp_path / "one" / "levelling.parquet")["level_nt"].isna().all()


def test_the_stage_applies_an_error_of_position_on_request(tmp_path):
    lines = make_lines(6, 3)
    crossings = make_crossings(lines, grid(6, 3), lambda k, h, p: -12 * p["gradient_nt_per_m"], noise=0.02)
    done = run_stage(tmp_path, crossings, {"one": lines}, settings={"apply": ["layback"]})
    assert done.returncode == 0, done.stderr
    table = pd.read_parquet(tmp_path / "one" / "levelling.parquet")
    assert table["position_change_nt"].abs().max() < 1e-6, "a field without gradient is not changed"
    assert table["position_change_nt"].notna().all()
    assert table["sigma_position_left_m"].to_numpy() == pytest.approx(3.0), "of 5 m, 4 m were the layback's"


def test_the_stage_tells_a_wrong_edit_in_one_sentence(tmp_path):
    lines = make_lines(2, 1)
    edit = {"action": "hold_line", "target": "T9", "member": "one", "file": "edits.csv", "row": 4}
    done = run_stage(tmp_path, make_crossings(lines, grid(2, 1), lambda k, *_: 0.0), {"one": lines}, edits=[edit])
    assert done.returncode == 1
    told = "edits.csv row 4, hold_line: must name a line of this survey. Got T9. Known here: L0, L1, T0.\n"
    assert done.stderr == told
