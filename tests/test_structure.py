"""Structures from the case to the answers: in the loop's own units, and what is said of them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from workbench import report, study
from workbench.case.case import Case, edit_all, new_case
from workbench.errors import InputError
from workbench.units import Amount

Array = NDArray[np.float64]
PLANT = "1.8 exp(-6 s)/(40 s + 1)"


def a_case(**changes: str) -> Case:
    """An invented oven; `inner__gain="2"` stands for the key `inner.gain`."""
    keys = {
        "pv.high": "250",
        "op.high": "50",
        "plant.formula": PLANT,
        "controller.gain": "2",
        "controller.integral": "40 s",
        "controller.scan": "1 s",
        "scenario.setpoint_step": "5",
        "scenario.setpoint_at": "10 s",
        "scenario.load_step": "4",
        "scenario.load_at": "200 s",
        "scenario.until": "400 s",
    }
    return edit_all(new_case("X"), keys | {k.replace("__", "."): v for k, v in changes.items()})


def at(trend: study.Trend, start: float, count: int) -> tuple[Array, Array]:
    """PV and OP at `count` scans from `start` [s] on."""
    rows = np.searchsorted(trend.time, start + np.arange(count) - 1e-9)
    return trend.pv[rows], trend.output[rows]


def said(case: Case) -> str:
    return "\n".join(note.text for note in study.assess(case).notes)


def test_an_exact_model_takes_the_dead_time_out_in_engineering_units() -> None:
    # exact: the setpoint is answered as without dead time, 6 s later
    late = study.predict(a_case(compensation__model=PLANT)).trend
    early = study.predict(a_case(plant__formula="1.8/(40 s + 1)")).trend
    assert np.abs(at(late, 16.0, 150)[0] - at(early, 10.0, 150)[0]).max() < 1e-9
    assert np.abs(at(late, 10.0, 150)[1] - at(early, 10.0, 150)[1]).max() < 1e-9


def test_margins_see_the_compensation() -> None:
    plain, compensated = study.assess(a_case()), study.assess(a_case(compensation__model=PLANT))
    for one, other in ((plain.loop, compensated.loop), (plain.sampled, compensated.sampled)):
        assert one is not None
        assert other is not None
        assert one.margins.max_sensitivity.value is not None
        assert other.margins.max_sensitivity.value is not None
        assert other.margins.max_sensitivity.value < one.margins.max_sensitivity.value


def test_an_upset_at_the_plant_s_input_is_cancelled_in_op_units() -> None:
    prediction = study.predict(a_case(feedforward__gain="-1", scenario__setpoint_step="0"))
    pv, op = at(prediction.trend, 200.0, 150)
    # exact: 4 units of upset want 4 units of OP, at the scan at which it comes
    assert np.abs(pv - 125.0).max() < 1e-9
    assert op == pytest.approx(21.0, abs=1e-9)
    assert "the ideal feedforward is gain -1" in said(a_case(feedforward__gain="-1"))


def test_a_load_path_of_its_own_has_its_own_unit() -> None:
    case = a_case(plant__load="-0.6 exp(-9 s)/(25 s + 1)", feedforward__gain="0.3")
    # exact: 0.6/1.8 OP per unit, 40 s over 25 s, 3 s
    assert "gain 0.3333, lead 40 s, lag 25 s, dead time 3 s" in said(case)
    ideal = edit_all(
        case,
        {
            "feedforward.gain": str(1 / 3),
            "feedforward.lead": "40 s",
            "feedforward.lag": "25 s",
            "feedforward.dead_time": "3 s",
            "scenario.setpoint_step": "0",
        },
    )
    left = np.abs(study.predict(ideal).trend.pv - 125.0).max()
    alone = np.abs(study.predict(edit_all(case, {"feedforward.gain": "1e-9"})).trend.pv - 125.0)
    # Only that the output is held from scan to scan is left of it.
    assert left < 0.05 * alone.max()


def test_what_of_the_ideal_cannot_be_realised_is_said() -> None:
    case = a_case(plant__load="0.6 exp(-2 s)/(25 s + 1)", feedforward__gain="0.3")
    assert "4 s before OP can" in said(case)
    assert "turn its sign" in said(case)


INNER = {
    "inner__plant": "0.5/(4 s + 1)",
    "inner__gain": "4",
    "inner__integral": "4 s",
    "inner__scan": "0.25 s",
}


def test_a_quick_inner_loop_is_nearly_not_there() -> None:
    # An upset at the plant's input is one at the inner PV, which only the cascade sees at once.
    single, cascade = study.predict(a_case()), study.predict(a_case(**INNER))
    one, other = at(single.trend, 10.0, 180)[0], at(cascade.trend, 10.0, 180)[0]
    assert np.abs(one - other).max() < 0.5
    assert cascade.measures.load_iae.value is not None
    assert single.measures.load_iae.value is not None
    assert cascade.measures.load_iae.value < 0.2 * single.measures.load_iae.value


def test_a_cascade_has_margins_as_sampled_or_says_why_not() -> None:
    found = study.assess(a_case(**INNER))
    assert found.sampled is not None
    assert found.sampled.margins.stable
    # common practice: a scan costs phase
    assert found.loop is not None
    sampled, analogue = (
        each.margins.phase_margin_deg.value for each in (found.sampled, found.loop)
    )
    assert sampled is not None
    assert analogue is not None
    assert sampled < analogue
    for changes, words in (
        ({"inner__scan": "0.3 s"}, "does not go into"),
        ({"inner__mode": "manual"}, "is in manual"),
        ({"inner__gain": "400"}, "not stable by itself"),
    ):
        case = a_case(**{**INNER, **changes})
        found = study.assess(case)
        assert found.sampled is None
        data = report.assess_data(case, found, study.units_of(case))
        assert words in str(data["sampled_reason"])


def test_an_inner_loop_at_its_limit_holds_the_outer_output() -> None:
    case = a_case(**INNER, inner__max="60", inner__start="50", scenario__load_step="-30")
    trend = study.predict(case).trend
    _, op = at(trend, 230.0, 150)
    # The inner output gives 10 % of 0.5, and OP does not run on to what would make up for 30.
    assert np.ptp(op) < 15.0
    inner = study.predict(case).inner
    assert inner is not None
    assert inner.output.max() == 60.0
    # exact: the upset and half of the inner output's 10 % above its rest
    assert inner.pv[-1] == pytest.approx(25.0 - 30.0 + 5.0, abs=1e-6)
    assert inner.time_at_limit_s > 100.0


def test_the_inner_loop_is_in_the_answer() -> None:
    evaluation = study.evaluate(a_case(**INNER))
    assert evaluation.prediction is not None
    units = study.units_of(evaluation.case)
    data = report.predict_data(evaluation, evaluation.prediction, units)
    # exact: at rest again with PV up by 5: OP by 5/1.8, less 4 of upset; twice that inside
    found = data["inner"]
    assert isinstance(found, dict)
    assert found["final_pv"] == pytest.approx(25.0 + 5.0 / 1.8, abs=0.02)
    assert found["final_setpoint"] == pytest.approx(found["final_pv"], abs=0.02)
    assert found["final_op"] == pytest.approx(50.0 + 2.0 * (5.0 / 1.8 - 4.0), abs=0.1)
    shown = report.predict_text(evaluation, evaluation.prediction, units, None, 80)
    assert "Inner loop" in shown


@pytest.mark.parametrize("mode", ["automatic", "manual"])
def test_an_inner_loop_that_goes_its_own_way_is_a_caution(mode: str) -> None:
    case = a_case(**INNER, inner__mode=mode)
    assert f"the inner loop is in {mode}" in said(case)


def test_an_integrating_plant_with_compensation_is_a_caution() -> None:
    formula = "0.02 exp(-6 s)/s"
    case = a_case(plant__formula=formula, compensation__model=formula, controller__gain="0.5")
    assert "does not come back after a load" in said(case)
    found = study.assess(case).loop
    assert found is not None
    assert found.final_pv_after_load_step.value


def test_a_model_that_runs_away_is_refused_by_its_key() -> None:
    with pytest.raises(InputError, match="is unstable") as refused:
        study.assess(a_case(compensation__model="1/(5 s - 1)"))
    assert refused.value.problems[0].key == "compensation.model"


def test_an_analogue_structure_is_judged_and_predicted_while_it_is_linear() -> None:
    case = a_case(compensation__model=PLANT)
    assert case.controller is not None
    analogue = replace(case, controller=replace(case.controller, scan=None))
    found = study.evaluate(analogue)
    assert found.assessment.loop is not None
    assert found.prediction is not None
    # other route: the same controller with a scan that hardly shows
    quick = replace(case, controller=replace(case.controller, scan=Amount(0.1, "s")))
    instants = np.arange(1.0, 300.0)
    one, other = (
        np.interp(instants, each.trend.time, each.trend.pv)
        for each in (found.prediction, study.predict(quick))
    )
    assert np.abs(one - other).max() < 0.05
    narrow = edit_all(analogue, {"op.max": "25.5"})
    found = study.evaluate(narrow)
    assert found.prediction is None
    assert "its output meets a limit" in found.prediction_reason
