"""What is said of a fit beside its numbers: each fault of a test has its record and its words."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest

from tests.records.making import Array, bump, lag, lead, stamps, swing, two_lags
from workbench import report
from workbench.records.candidate import Candidate
from workbench.records.identify import Fit, fit
from workbench.records.record import Record

FIRST = ("first-order",)


def best_of(result: Fit) -> Candidate:
    assert result.best is not None, result.reason
    return result.best


def words(result: Fit) -> str:
    return " | ".join(note.text for note in result.warnings)


def through(op: Array, gain: float, time_constant: float, late: int) -> Array:
    """One lag after a dead time of whole rows, rows 1 s apart, by a plain loop."""
    pv, keep = np.zeros(len(op)), np.exp(-1.0 / time_constant)
    for i in range(1, len(op)):
        held = op[max(i - 1 - late, 0)]
        pv[i] = keep * pv[i - 1] + (1 - keep) * gain * (held - op[0])
    return pv


def levels(*steps: float, hold: int = 150) -> Array:
    """OP held at each level in turn."""
    return np.repeat(40.0 + np.cumsum([0.0, *steps]), hold)


def noisy(pv: Array, sd: float = 0.05, seed: int = 0) -> Array:
    shown: Array = 50.0 + pv + sd * np.random.default_rng(seed).normal(size=len(pv))
    return shown


def record(op: Array, pv: Array) -> Record:
    return Record("made.csv", np.arange(len(op), dtype=np.float64), pv, op)


# --- tests of the residual -----------------------------------------------------------------------


def test_what_is_left_over_by_the_right_shape_passes_and_by_a_wrong_one_fails() -> None:
    made = bump(stamps(400, 3.0), two_lags(1.0, 60.0, 50.0), 20.0, noise=0.05, seed=2)
    right, wrong = (
        best_of(fit(made, shapes=(shape,), noise_model="white")).judgement
        for shape in ("second-order", "first-order")
    )
    assert right.whiteness.p_value > 0.01
    assert right.input_residual.p_value > 0.01
    assert wrong.whiteness.p_value < 1e-3
    assert wrong.input_residual.p_value < 1e-3


def test_the_residual_tests_fail_as_often_as_they_say() -> None:
    """Exact: of 20 records 5 % fail at p = 0.05; more than 4 do in one of 300."""
    failed = np.zeros(2)
    for seed in range(20):
        made = bump(stamps(150, 8.0), lag(1.0, 100.0), 25.7, noise=0.2, seed=seed)
        judged = best_of(fit(made, shapes=FIRST, noise_model="white")).judgement
        failed += [judged.whiteness.p_value < 0.05, judged.input_residual.p_value < 0.05]
    assert failed.max() <= 4


# --- a bump it did not see -----------------------------------------------------------------------


def test_the_right_shape_predicts_the_last_bump_and_one_bump_cannot_be_left_out() -> None:
    made = bump(stamps(400, 3.0), lag(1.8, 90.0), 25.0, noise=0.1)
    assert best_of(fit(made, shapes=FIRST)).judgement.holdout_percent == pytest.approx(98.0, abs=2)
    single = bump(stamps(400, 3.0), lag(1.8, 90.0), 25.0, noise=0.1, moves=((0.3, 5.0),))
    assert best_of(fit(single, shapes=FIRST)).judgement.holdout_percent is None


# --- one gain, or several ------------------------------------------------------------------------


def test_gain_of_each_move_and_direction_is_the_plant_s() -> None:
    made = bump(stamps(600, 3.0), lag(1.8, 90.0), 25.0, noise=0.1)
    judged = best_of(fit(made, shapes=FIRST)).judgement
    assert len(judged.moves) == 3
    assert [move.op_to for move in judged.moves] == [45.0, 35.0, 40.0]
    for move in judged.moves:
        assert abs(move.gain - 1.8) < 3.5 * move.standard_error
    assert judged.gain_up is not None
    assert judged.gain_down is not None


def test_a_gain_that_differs_up_and_down_is_said() -> None:
    op = levels(5, -5, 5, -5, 5, -5)
    up = np.cumsum(np.append(0.0, np.maximum(np.diff(op), 0.0)))
    down = np.cumsum(np.append(0.0, np.minimum(np.diff(op), 0.0)))
    pv = through(up, 2.0, 20.0, 6) + through(down, 1.4, 20.0, 6)
    result = fit(record(op, noisy(pv)), shapes=FIRST)
    assert "for moves up and" in words(result)


@pytest.mark.parametrize("steps", [(5, 5, 5, -5, -5, -5), (5, 5, 5)])
def test_a_gain_that_changes_with_the_operating_point_is_said(steps: tuple[float, ...]) -> None:
    op = levels(*steps)
    bent = op + 0.03 * (op - 40.0) ** 2
    result = fit(record(op, noisy(through(bent, 1.0, 20.0, 6))), shapes=FIRST)
    assert "The gain goes from" in words(result)
    assert "fit each operating point by itself" in words(result)


def test_a_valve_s_deadband_is_said_with_its_size() -> None:
    op, stem = levels(4, 4, -4, -4, 4, 4, -4, -4), np.zeros(0)
    at, stems = op[0], []
    for signal in op:
        # Exact: a backlash of 1.5 % lets the stem follow only at its edges.
        at = min(max(at, signal - 0.75), signal + 0.75)
        stems.append(at)
    stem = np.array(stems)
    result = fit(record(op, noisy(through(stem, 1.0, 20.0, 6))), shapes=FIRST)
    assert "Moves of OP after a reversal lose about 1." in words(result)


# --- a spoilt test -------------------------------------------------------------------------------


def test_an_upset_during_the_test_is_said_with_its_time() -> None:
    op = levels(5, -5, 5, hold=200)
    pv = through(op, 1.5, 20.0, 6)
    upset = through(np.append(np.zeros(500), np.ones(300)), 4.0, 20.0, 0)
    result = fit(record(op, noisy(pv + upset)), shapes=FIRST)
    assert "Something other than OP seems to have moved PV" in words(result)
    moved = best_of(result).judgement.upset
    assert moved is not None
    assert moved[0] == pytest.approx(500.0, abs=30.0)
    # The plain fit has taken some of it for the plant's own.
    assert 2.0 < moved[1] < 5.0


def test_a_slow_second_mode_is_said() -> None:
    op = levels(5, -5, 5, -5, hold=250)
    pv = through(op, 1.0, 20.0, 6) + through(op, 0.5, 220.0, 6)
    result = fit(record(op, noisy(pv, 0.02)), shapes=FIRST, noise_model="white", drift=False)
    assert "The gain grows with the window" in words(result)


def test_a_short_dead_time_asks_which_way_the_stamps_go() -> None:
    made = bump(stamps(400, 10.0), lag(1.0, 100.0), 17.0, noise=0.05)
    assert "one row early or late moves it by 10 s" in words(fit(made, shapes=FIRST))


def test_op_logged_a_row_late_shifts_the_dead_time_by_that_row() -> None:
    """Exact."""
    made = bump(stamps(400, 10.0), lag(1.0, 100.0), 37.0)
    late = replace(made, op=np.append(made.op[0], made.op[:-1]))
    found = [best_of(fit(r, shapes=FIRST, noise_model="white")).dead_time_s for r in (made, late)]
    assert found == pytest.approx([37.0, 27.0], abs=1e-3)


# --- parts ---------------------------------------------------------------------------------------


def test_parts_have_a_level_a_drift_and_a_start_of_their_own() -> None:
    """Exact: two bumps of one plant, the second elsewhere in PV and OP."""
    one = bump(stamps(300, 3.0), lag(1.8, 60.0), 25.0, drift=0.001)
    two = bump(stamps(300, 3.0), lag(1.8, 60.0), 25.0, drift=-0.002)
    both = Record(
        "both.csv",
        np.concatenate([one.time, two.time + one.time[-1] + 3.0]),
        np.concatenate([one.pv, two.pv + 30.0 + 5.0 * np.exp(-two.time / 60.0)]),
        np.concatenate([one.op, two.op - 15.0]),
        breaks=(300,),
    )
    found = best_of(fit(both, shapes=FIRST, noise_model="white"))
    assert found.gain == pytest.approx(1.8, rel=1e-4)
    assert found.time_constants_s[0] == pytest.approx(60.0, rel=1e-4)
    assert found.dead_time_s == pytest.approx(25.0, rel=1e-4)
    assert found.drift_per_s == pytest.approx(-0.002, rel=0.01)
    assert found.judgement.holdout_percent is not None
    np.testing.assert_allclose(found.fitted_pv, both.pv, atol=1e-3)


# --- the family ----------------------------------------------------------------------------------


def test_the_family_spreads_as_the_intervals_say() -> None:
    """Exact: 95 % of normal draws lie within 1.96 standard deviations, and split ends keep it."""
    made = bump(stamps(200, 8.0), lag(1.8, 100.0), 25.7, noise=0.6, seed=1)
    best = best_of(fit(made, shapes=FIRST, noise_model="white"))
    family = best.family(2000, seed=5)
    assert family == best.family(2000, seed=5)
    drawn = {
        "gain": [plant.gain for plant in family],  # type: ignore[union-attr]
        "dead_time_s": [plant.transfer().dead_time for plant in family],
        "time_constants_s": [plant.time_constant.seconds for plant in family],  # type: ignore[union-attr]
    }
    for key, values in drawn.items():
        low, high = np.ravel(np.array(best.interval_95[key]))
        inside = np.mean((np.array(values) >= low) & (np.array(values) <= high))
        assert inside == pytest.approx(0.95, abs=0.015), key
    known = best.certainty
    pair = np.corrcoef(np.log(drawn["time_constants_s"]), drawn["dead_time_s"])[0, 1]
    assert pair == pytest.approx(known.correlation[1, 2], abs=0.06)


@pytest.mark.parametrize("shape", ["oscillating", "lead"])
def test_the_family_of_a_richer_shape_spreads_as_its_intervals_say(shape: str) -> None:
    answer = swing(1.3, 300.0, 0.4) if shape == "oscillating" else lead(0.8, -60.0, 150.0, 40.0)
    made = bump(stamps(250, 6.0), answer, 25.7, noise=0.1)
    best = best_of(fit(made, shapes=(shape,), noise_model="white"))
    family = best.family(400, seed=5)
    keys = {"gain": "gain", "damping": "damping", "natural_period_s": "natural_period"}
    keys["numerator_time_s"] = "numerator_time"
    for key in keys.keys() & best.interval_95.keys():
        held = [getattr(plant, keys[key]) for plant in family]
        drawn = np.array([getattr(value, "seconds", value) for value in held])
        low, high = np.ravel(np.array(best.interval_95[key]))
        inside = np.mean((drawn >= low) & (drawn <= high))
        # exact where a value enters nearly linearly: t standard errors to each side
        error = float(np.ravel(best.standard_errors[key])[0])
        assert 0.5 * (high - low) == pytest.approx(1.97 * error, rel=0.05), key
        # three standard deviations of a share of 0.95 among 400
        assert inside == pytest.approx(0.95, abs=0.033), key


def test_the_profile_of_the_dead_time_rises_on_both_sides() -> None:
    made = bump(stamps(200, 8.0), lag(1.8, 100.0), 25.7, noise=0.3, seed=1)
    best = best_of(fit(made, shapes=FIRST, noise_model="white"))
    at, rise = np.array(best.certainty.profile).T
    low, high = np.ravel(np.array(best.interval_95["dead_time_s"]))
    assert at.min() < best.dead_time_s < at.max()
    assert rise.min() == 0.0
    # Exact: at the ends of the interval the rise is the square of Student's t, 3.9 here.
    assert np.interp([low, high], at, rise) == pytest.approx([3.9, 3.9], rel=0.1)


# --- as it is told -------------------------------------------------------------------------------


def test_every_shape_is_told_with_its_own_parameters_in_finite_numbers() -> None:
    made = bump(stamps(250, 6.0), swing(1.3, 300.0, 0.4), 25.7, noise=0.1)
    result = fit(made, shapes=("oscillating", "lead"))
    data = json.loads(json.dumps(report.fit_data(result), allow_nan=False))
    assert data["chosen"] == "oscillating"
    told = next(c for c in data["candidates"] if c["shape"] == "oscillating")
    # Exact: the plant that made the record.
    assert told["natural_period_s"] == pytest.approx(300.0, rel=0.02)
    assert told["damping"] == pytest.approx(0.4, rel=0.1)
    assert told["time_constants_s"] == []
    assert told["numerator_time_s"] is None
    assert "has none" in told["numerator_time_s_reason"]
    assert set(told["interval_95"]) == {"gain", "natural_period_s", "damping", "dead_time_s"}
    assert told["correlation"]["of"] == ["gain", "natural_period_s", "damping", "dead_time_s"]
    assert np.diag(told["correlation"]["matrix"]) == pytest.approx([1.0] * 4)
    assert 0.0 <= told["residual_whiteness"]["p_value"] <= 1.0
    assert len(told["moves"]) == 3
    assert data["relay"] is None
    assert data["feedback"]["setpoint_moves"] == 0
    shown = report.fit_text(result, 80)
    for words in ("natural period", "damping", "last bump", "Ljung-Box", "gain up"):
        assert words in shown
