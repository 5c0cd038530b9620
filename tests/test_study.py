"""The answers against closed forms: what is said of a case is what the case is."""

from __future__ import annotations

import hashlib
import math
import random
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Final, Literal

import numpy as np
import pytest

from workbench import study
from workbench.case.case import Case, edit_all, new_case, show
from workbench.case.files import read_case, save_case, write_new
from workbench.errors import InputError
from workbench.model.formula import parse_formula
from workbench.model.plant import FirstOrder, Integrating
from workbench.model.response import Signal
from workbench.units import Figure

NOW: Final = datetime(2026, 12, 1, 9, 30, tzinfo=UTC)
CASES: Final = Path(__file__).resolve().parents[1] / "cases"

OVEN: Final = {
    "plant": "first-order gain=1.8, time_constant=40 s, dead_time=6 s",
    "pv.unit": "degC",
    "pv.high": "250",
    "controller.gain": "1.1",
    "controller.integral": "40 s",
}
"""An invented oven, its integral time equal to its lag."""

INNER: Final = (
    "valve: 1/(2 s + 1); process: 1.8 exp(-6 s)/(40 s + 1); slave around valve to process: 0.3"
)
"""A plant with a dead time inside an inner feedback."""


def a_case(**changes: str) -> Case:
    """The oven with changes; `pv_noise="1"` stands for the key `pv.noise`."""
    keys = OVEN | {key.replace("_", ".", 1): value for key, value in changes.items()}
    return edit_all(new_case("TIC-901"), {key: text for key, text in keys.items() if text})


def loop_figures(case: Case) -> study.LoopFigures:
    loop = study.assess(case).loop
    assert loop is not None
    return loop


def texts(case: Case) -> str:
    """Everything that is said in words about a case."""
    evaluation = study.evaluate(case)
    return " | ".join(note.text for note in evaluation.cautions)


# --- assessment -----------------------------------------------------------------------------------


def test_the_plant_is_told_in_units_and_in_percent() -> None:
    found = study.assess(a_case()).plant

    assert found.gain == Figure(1.8)
    # exact: 1.8 degC per % times the spans, 100 % over 250 degC
    assert found.gain_percent.value == pytest.approx(0.72, rel=1e-12)
    assert found.poles == pytest.approx((-1 / 40,), rel=1e-12)
    assert (found.stable, found.integrating, found.dead_time_s) == (True, False, 6.0)


def test_the_controller_gain_is_told_in_percent_and_in_units() -> None:
    found = study.assess(a_case())

    # exact: 1.1 % per % times 100 % over 250 degC
    assert found.gain == 1.1
    assert found.gain_op_per_pv == pytest.approx(0.44, rel=1e-12)


def test_margins_are_those_of_the_closed_form() -> None:
    """exact: with Ti = T the lag cancels and L(s) = w exp(-6 s)/s, w = 1.1 x 0.72 / 40 s."""
    margins, w, dead_time = loop_figures(a_case()).margins, 1.1 * 0.72 / 40, 6.0

    assert margins.gain_crossover_rad_s.value == pytest.approx(w, rel=1e-9)
    assert margins.gain_margin.value == pytest.approx(math.pi / (2 * w * dead_time), rel=1e-9)
    assert margins.phase_margin_deg.value == pytest.approx(
        90 - math.degrees(w * dead_time), rel=1e-9
    )
    assert margins.delay_margin_s.value == pytest.approx(math.pi / (2 * w) - dead_time, rel=1e-9)


@pytest.mark.parametrize("gain", ["0.4", "1.1", "3"])
def test_proportional_control_leaves_its_offset(gain: str) -> None:
    found = loop_figures(a_case(controller_gain=gain, controller_integral=""))
    loop_gain = float(gain) * 0.72

    # exact: offset 1/(1 + K k) after a setpoint step, k/(1 + K k) after a load step of 1 %
    offset = 1 - (found.final_pv_after_setpoint_step.value or 0.0)
    assert offset == pytest.approx(1 / (1 + loop_gain), rel=1e-12)
    assert found.final_pv_after_load_step.value == pytest.approx(1.8 / (1 + loop_gain), rel=1e-12)


def test_integral_action_leaves_no_offset() -> None:
    found = loop_figures(a_case())

    assert found.final_pv_after_setpoint_step.value == pytest.approx(1.0, rel=1e-12)
    assert found.final_pv_after_load_step.value == 0.0


def test_an_integrating_plant_is_told_by_its_slope_and_its_final_values() -> None:
    case = a_case(plant="integrating slope=0.8 /min, dead_time=3 s", controller_integral="")
    found = study.assess(case)

    assert found.plant.gain.value is None
    assert found.plant.gain.reason == "integrating: PV moves 0.8 degC/min per % of OP"
    assert found.plant.slope_per_s.value == pytest.approx(0.8 / 60, rel=1e-12)
    assert found.loop is not None
    # exact: OP must take the load back, so PV is off by 1 % over the gain in % per degC
    assert found.loop.final_pv_after_setpoint_step.value == pytest.approx(1.0, rel=1e-12)
    assert found.loop.final_pv_after_load_step.value == pytest.approx(1 / 0.44, rel=1e-12)


@pytest.mark.parametrize(
    ("slope", "words"),
    [("0.8 /s", "0.8 degC/s"), ("0.02 /s", "1.2 degC/min"), ("-0.03 /min", "-1.8 degC/h")],
)
def test_a_slope_is_told_in_the_time_that_reads_best(slope: str, words: str) -> None:
    plant = study.assess(a_case(plant=f"integrating slope={slope}")).plant

    assert plant.gain.reason == f"integrating: PV moves {words} per % of OP"


def test_a_load_path_of_its_own_has_its_own_final_value() -> None:
    case = a_case(controller_integral="", plant_load="3/(2 s + 1)")

    # exact: 3/(1 + K k)
    found = loop_figures(case).final_pv_after_load_step.value
    assert found == pytest.approx(3 / (1 + 1.1 * 0.72), rel=1e-12)
    runaway = loop_figures(a_case(plant_load="3/(2 s - 1)")).final_pv_after_load_step
    assert runaway == Figure(None, "the load path is not stable by itself")


def test_an_upset_drawn_into_the_plant_counts_from_there() -> None:
    line = "valve: 0.5/(2 s + 1); process: 3.6/(40 s + 1); upset before process"
    case = a_case(plant=line, controller_integral="")

    # exact: 3.6/(1 + K k), the whole gain k = 0.5 x 3.6 x 100/250
    found = loop_figures(case).final_pv_after_load_step.value
    assert found == pytest.approx(3.6 / (1 + 1.1 * 0.72), rel=1e-12)
    # other route: the end of the predicted trend, after a load step of 2
    moved = edit_all(case, {"scenario.load_step": "2", "scenario.until": "10 min"})
    end = study.predict(moved).measures.final_pv.value
    assert end == pytest.approx(125 + 2 * 3.6 / (1 + 1.1 * 0.72), abs=1e-5)


def test_blocks_are_judged_as_the_formula_that_they_are() -> None:
    line = "valve: 1/(2 s + 1); process: 2 exp(-6 s)/(40 s + 1); leak less process: 0.2 exp(-6 s)"
    drawn = a_case(plant=line, controller_scan="1 s")
    whole = study.assess(drawn).plant.formula
    typed = a_case(plant=whole, controller_scan="1 s")

    assert study.assess(drawn) == study.assess(typed)
    one, other = (study.predict(case).measures.setpoint_iae.value for case in (drawn, typed))
    assert one == pytest.approx(other, rel=1e-9)


def test_a_vessel_is_judged_by_its_ranges() -> None:
    # exact: 40 m3/h over 10 m3 is 4 ranges of PV per hour and range of OP; 250 degC per 100 %
    vessel = a_case(plant="vessel volume=10, flow=40 /h, dead_time=3 s")
    typed = a_case(plant="integrating slope=10 /h, dead_time=3 s")

    assert study.assess(vessel).plant.slope_per_s.value == pytest.approx(10 / 3600, rel=1e-12)
    found, wanted = (loop_figures(case).margins for case in (vessel, typed))
    assert found.phase_margin_deg.value == pytest.approx(wanted.phase_margin_deg.value, rel=1e-9)
    one, other = (study.predict(case).measures.load_iae.value for case in (vessel, typed))
    assert one == pytest.approx(other, rel=1e-6)
    proposed = [
        [row.controller.gain for row in study.propose(case) if row.controller]
        for case in (vessel, typed)
    ]
    assert proposed[0] == pytest.approx(proposed[1], rel=1e-6)


def test_small_models_are_told_with_how_far_off_they_are() -> None:
    rows = study.reductions(a_case(plant="1.8/((40 s + 1)(8 s + 1)(2 s + 1))"))
    half = rows[0]

    # published rule: half of 8 s to each side, 2 s to the dead time
    assert (half.method, half.lags, half.formula) == ("half rule", 1, "1.8 exp(-6 s)/(44 s + 1)")
    best = next(row for row in rows if row.method == "best fit" and row.lags == 2)
    assert half.peak_step_error_percent.value is not None
    assert best.peak_step_error_percent.value is not None
    assert best.peak_step_error_percent.value < half.peak_step_error_percent.value < 10
    assert study.reductions(a_case()) == ()


# --- a dead time inside an inner feedback ---------------------------------------------------------


def test_a_delayed_inner_feedback_is_judged_and_predicted() -> None:
    evaluation = study.evaluate(a_case(plant=INNER, controller_scan="1 s"))
    found = evaluation.assessment

    assert found.sampled is not None
    assert found.sampled.margins.stable
    assert found.plant.poles_reason.startswith("infinitely many")
    # exact: 1.8/(1 + 0.3 x 1.8)
    assert found.plant.gain.value == pytest.approx(1.8 / 1.54, rel=1e-12)
    assert found.loop is not None
    assert found.loop.margins.stable
    assert found.loop.final_pv_after_load_step.value == 0.0
    assert evaluation.prediction is not None
    # exact: integral action leaves no error
    assert evaluation.prediction.measures.final_pv.value == pytest.approx(137.5, abs=0.05)


def test_what_cannot_be_predicted_says_so_and_the_rest_is_told() -> None:
    evaluation = study.evaluate(a_case(plant=INNER, op_max="50.5"))

    assert evaluation.prediction is None
    assert "its output meets a limit" in evaluation.prediction_reason
    assert evaluation.assessment.loop is not None
    assert evaluation.assessment.loop.margins.stable
    assert "not predicted: controller.scan is needed" in texts(evaluation.case)


def test_margins_with_a_delayed_inner_feedback_are_exact() -> None:
    """other route: where 1 + L vanishes, the loop gain is multiplied by the margin."""
    case = a_case(plant=INNER)
    margins = loop_figures(case).margins
    loop = study.loop_of(case)
    assert margins.phase_crossover_rad_s.value is not None
    assert margins.gain_margin.value is not None
    at = loop.open_loop()(1j * margins.phase_crossover_rad_s.value)

    assert 1 + margins.gain_margin.value * at == pytest.approx(0.0, abs=1e-9)
    gain = 1.1 * margins.gain_margin.value
    assert loop_figures(a_case(plant=INNER, controller_gain=f"{gain * 0.999}")).margins.stable
    assert not loop_figures(a_case(plant=INNER, controller_gain=f"{gain * 1.001}")).margins.stable


def test_a_delayed_inner_feedback_answers_a_step() -> None:
    plant = study.plant_of(a_case(plant=INNER))
    found = study.respond(plant, Signal(), study.response_horizon(plant, Signal()))
    # exact: 1.8/(1 + 0.3 x 1.8), nothing before the dead time of 6 s
    assert found.final_value.value == pytest.approx(1.8 / 1.54, rel=1e-12)
    assert found.pv[-1] == pytest.approx(1.8 / 1.54, rel=1e-3)
    assert np.abs(found.pv[found.time < 6.0]).max() == 0.0


def test_settings_are_proposed_and_recorded_with_a_delayed_inner_feedback() -> None:
    case = a_case(plant=INNER, controller_scan="1 s")
    rows = [row for row in study.propose(case) if row.applies]
    entry = study.record_change(case, who="mk", why="first", now=NOW).history[-1]

    assert any(row.method.startswith("ziegler-nichols-ultimate") for row in rows)
    assert all(row.load_iae.value or "not stable" in row.load_iae.reason for row in rows)
    assert entry.load_iae is not None
    assert entry.max_sensitivity is not None


# --- responses ------------------------------------------------------------------------------------


def test_a_step_is_answered_exactly() -> None:
    plant = study.plant_of(a_case())
    found = study.respond(plant, Signal(size=2.0, at=10.0), 300.0)

    # exact: 3.6 (1 - exp(-(t - 16)/40))
    wanted = 3.6 * -np.expm1(-np.maximum(found.time - 16.0, 0.0) / 40.0)
    assert found.pv == pytest.approx(wanted, abs=1e-12)
    assert found.final_value.value == pytest.approx(3.6, rel=1e-12)
    assert found.op[0] == 0.0
    assert found.op[-1] == pytest.approx(2.0, rel=1e-12)


@pytest.mark.parametrize(
    ("formula", "signal", "peak"),
    [
        # exact: 1.8/40 at the end of the dead time
        ("1.8 exp(-6 s)/(40 s + 1)", Signal("impulse"), 1.8 / 40),
        # exact: 1.8 (1 - exp(-10/40)) at the end of the pulse
        ("1.8 exp(-6 s)/(40 s + 1)", Signal("pulse", width=10.0), 1.8 * -math.expm1(-0.25)),
        # exact: 1 + exp(-pi d/sqrt(1 - d^2)) for damping d = 0.2
        ("1/(s^2 + 0.4 s + 1)", Signal(), 1 + math.exp(-math.pi * 0.2 / math.sqrt(0.96))),
        # exact: the inverse response of (1 - 3 s)/(s + 1) starts at -3
        ("(1 - 3 s)/(s + 1)", Signal(), -3.0),
    ],
)
def test_the_peak_is_found_between_the_rows(formula: str, signal: Signal, peak: float) -> None:
    plant = parse_formula(formula)
    found = study.respond(plant, signal, study.response_horizon(plant, signal))

    assert found.peak.value == pytest.approx(peak, rel=1e-6)


@pytest.mark.parametrize(
    ("formula", "kind", "final", "peak"),
    [
        ("1/s", "step", "moves on for ever", "moves on without end"),
        ("1/(5 s - 1)", "step", "grows without end", "moves on without end"),
        ("1/(s + 1)", "sine", "swings for ever", ""),
        ("1/(s + 1)", "ramp", "moves on for ever", "moves on without end"),
        ("1/s", "pulse", "", ""),
        ("1/s^2", "doublet", "", ""),
    ],
)
def test_a_final_value_or_a_peak_that_is_not_there_says_why(
    formula: str, kind: str, final: str, peak: str
) -> None:
    plant, signal = parse_formula(formula), Signal(kind)
    found = study.respond(plant, signal, study.response_horizon(plant, signal))

    for figure, words in ((found.final_value, final), (found.peak, peak)):
        assert (figure.value is None) == bool(words)
        assert words in figure.reason


@pytest.mark.parametrize(
    "formula", ["2/(40 s + 1)", "exp(-9 s)/(5 s + 1)^8", "1/(s^2 + 0.1 s + 1)"]
)
def test_a_response_is_followed_until_it_has_settled(formula: str) -> None:
    plant = parse_formula(formula)
    until = study.response_horizon(plant, Signal())
    found = study.respond(plant, Signal(), until)

    assert found.pv[-1] == pytest.approx(found.final_value.value, rel=0.03)
    slowest = max(-1 / pole.real for pole in plant.poles())
    assert until < 40 * slowest + 3 * plant.dead_time


def test_a_record_is_answered_by_the_plant_that_made_it(tmp_path: Path) -> None:
    path = tmp_path / "r.csv"
    moves = [40.0] * 20 + [45.0] * 60 + [38.0] * 120
    rows = "".join(f"{t},{0},{op}\n" for t, op in enumerate(moves))
    path.write_text(f"time_s,pv,op\n{rows}")
    from workbench.records.record import read_record

    found = study.respond_to_record(parse_formula("2 exp(-3 s)/(10 s + 1)"), read_record(path))

    def step(after: float) -> float:
        return 2 * -math.expm1(-max(after - 3.0, 0.0) / 10.0)

    # exact: 5 steps up at 20 s and 7 down at 80 s
    wanted = [5 * step(t - 20.0) - 7 * step(t - 80.0) for t in range(200)]
    assert found.pv == pytest.approx(wanted, abs=1e-12)
    assert found.final_value.value is None


# --- predictions ----------------------------------------------------------------------------------


def test_the_prediction_starts_and_ends_where_the_loop_does() -> None:
    case = a_case(scenario_setpoint_step="5", scenario_until="30 min")
    found = study.predict(case)

    assert found.trend.pv[0] == 125.0
    assert found.measures.final_pv.value == pytest.approx(130.0, abs=1e-6)
    # exact: 5 degC over 1.8 degC per %
    assert found.measures.final_op.value == pytest.approx(50 + 5 / 1.8, abs=1e-6)


def test_no_controller_beats_the_floor() -> None:
    chance = random.Random(20)
    tried = 0
    while tried < 20:
        scan = chance.choice(["", "1 s", "4 s"])
        case = a_case(
            controller_gain=f"{math.exp(chance.uniform(-1, 2.3)):.4g}",
            controller_integral=f"{chance.uniform(8, 120):.4g} s",
            controller_derivative=chance.choice(["", f"{chance.uniform(1, 6):.3g} s"]),
            controller_scan=scan,
            scenario_load_step="5",
            scenario_until="15 min",
        )
        found = study.assess(case)
        judged = found.judged
        assert judged is not None
        if not judged.margins.stable:
            continue
        tried += 1
        run = study.predict(case)
        peak, iae = run.measures.load_peak_deviation.value, run.measures.load_iae.value
        assert peak is not None
        assert iae is not None
        assert run.floor_peak_deviation.value is not None
        assert run.floor_load_iae.value is not None
        assert abs(peak) >= run.floor_peak_deviation.value * (1 - 1e-9)
        assert iae >= run.floor_load_iae.value * (1 - 1e-9)


def test_the_floor_is_what_the_dead_time_leaves() -> None:
    run = study.predict(a_case(scenario_load_step="5", scenario_until="15 min"))

    # exact: a load at the input shows after 6 s and rises for 6 s more: 9 (1 - exp(-6/40))
    assert run.floor_peak_deviation.value == pytest.approx(9 * -math.expm1(-6 / 40), rel=1e-9)


# --- settings and plants taken over ---------------------------------------------------------------


def test_settings_taken_are_what_a_person_types() -> None:
    case = a_case(controller_scan="1 s")
    proposal = next(row for row in study.propose(case) if row.method == "simc-pi")
    taken = study.take(case, proposal)

    for key in ("controller.gain", "controller.integral"):
        number = show(taken, key).split()[0]
        assert len(number.replace(".", "").lstrip("0")) <= 4, number
    assert proposal.controller is not None
    assert taken.controller is not None
    assert taken.controller.gain == pytest.approx(proposal.controller.gain, rel=1e-3)
    refused = replace(proposal, controller=None, reason="wants a lag")
    with pytest.raises(InputError, match="wants a lag"):
        study.take(case, refused)


def found(case: Case, wish: study.Wish) -> study.Proposal:
    """The row of the one method asked for."""
    return study.propose(case, wish)[-1]


def test_every_rule_says_what_it_aims_at_and_for_what_it_was_published() -> None:
    present, *rows = study.propose(a_case())

    assert present.objective == present.limits == ""
    assert len(rows) >= 50
    assert all(row.objective and row.limits and row.published_form for row in rows)
    series = next(row for row in rows if row.method == "simc-improved-pid")
    assert series.published_form == "series"


def test_a_relay_test_stands_for_the_ultimate_gain_of_the_plant() -> None:
    # exact: half steps of 8 % of OP and 5 degC of 250, Ku = 4 8/(pi 2), Tyreus-Luyben Ku/3.2
    wish = study.Wish(method="tyreus-luyben-pi", relay=study.RelayTest(8.0, 5.0, 30.0))
    controller = found(a_case(), wish).controller

    assert controller is not None
    assert controller.gain == pytest.approx(16.0 / math.pi / 3.2, rel=1e-12)
    assert controller.integral is not None
    assert controller.integral.seconds == pytest.approx(66.0, rel=1e-12)
    # exact: a hysteresis of 3 degC leaves 4 of the 5
    with_hysteresis = replace(wish, relay=study.RelayTest(8.0, 5.0, 30.0, 3.0))
    controller = found(a_case(), with_hysteresis).controller
    assert controller is not None
    assert controller.gain == pytest.approx(20.0 / math.pi / 3.2, rel=1e-12)


def test_a_level_is_averaged_in_its_own_units() -> None:
    # exact: 20 % of OP over 25 degC of 250 is a gain of 2 %/%
    case = a_case(plant="integrating slope=0.01 /s")
    wish = study.Wish(method="averaging-level-p", largest_upset=20.0, allowed_deviation=25.0)
    controller = found(case, wish).controller

    assert controller is not None
    assert controller.gain == pytest.approx(2.0, rel=1e-12)
    assert not found(case, study.Wish(method="averaging-level-p")).applies


@pytest.mark.parametrize(
    ("plant", "methods"),
    [
        ("exp(-6 s)/(40 s - 1)", {"imc-unstable-pid"}),
        ("0.001 exp(-6 s)/s^2", {"simc-double-integrating-pid"}),
    ],
)
def test_a_plant_without_a_small_model_has_its_own_rule(plant: str, methods: set[str]) -> None:
    rows = study.propose(a_case(plant=plant, controller_action="reverse"))

    applying = {row.method for row in rows[1:] if row.applies}
    assert applying - {"best-pi", "best-pid"} == methods
    assert all(row.max_sensitivity.value for row in rows if row.method in methods)


def test_a_fit_taken_over_is_rounded_and_knows_its_record() -> None:
    fit = study.fit_record(CASES / "TIC-307_bump.csv", shapes=("first-order",))
    case = study.accept(a_case(), fit)
    process, fitted = case.plant.process, study.chosen_candidate(fit).plant

    assert isinstance(process, FirstOrder)
    assert isinstance(fitted, FirstOrder)
    assert process.gain == float(f"{fitted.gain:.4g}")
    assert case.plant.from_ == "TIC-307_bump.csv"
    assert case.plant.from_sha256 == fit.record.sha256
    with pytest.raises(InputError, match="has no integrating candidate"):
        study.accept(a_case(), fit, "integrating")


def test_the_figures_of_a_recorded_change_come_out_again(tmp_path: Path) -> None:
    path = tmp_path / "TIC-901.toml"
    file = write_new(path, study.record_change(a_case(), who=" mk ", why="first", now=NOW))
    entry = file.case.history[-1]

    assert (entry.who, entry.kind, entry.at) == ("mk", "installed", NOW)
    margins = loop_figures(a_case()).margins
    assert entry.max_sensitivity == pytest.approx(margins.max_sensitivity.value, rel=1e-5)
    assert study.check_case(path) == study.FileCheck(str(path), True, ())
    assert read_case(path).case == file.case


@pytest.mark.parametrize("name", ["max_sensitivity", "load_iae", "setpoint_iae"])
def test_a_figure_made_wrong_by_hand_is_found(tmp_path: Path, name: str) -> None:
    path = tmp_path / "TIC-901.toml"
    file = write_new(path, study.record_change(a_case(), who="mk", why="first", now=NOW))
    value = getattr(file.case.history[-1], name)
    text = path.read_text()
    assert f"{name} = {value}" in text
    path.write_text(text.replace(f"{name} = {value}", f"{name} = {value * 1.01:.6g}"))
    check = study.check_case(path)

    assert not check.ok
    [fault] = check.faults
    assert name in fault.what
    assert "save again with a reason" in fault.mend


def test_a_plant_changed_without_a_reason_is_found(tmp_path: Path) -> None:
    path = tmp_path / "TIC-901.toml"
    file = write_new(path, study.record_change(a_case(), who="mk", why="first", now=NOW))
    save_case(file, edit_all(file.case, {"plant.gain": "2.5"}))

    assert not study.check_case(path).ok


def test_a_record_is_found_by_its_bytes_under_another_name(tmp_path: Path) -> None:
    (tmp_path / "bump one.csv").write_bytes(b"time_s,pv,op\n")
    digest = hashlib.sha256(b"time_s,pv,op\n").hexdigest()
    keys = {"plant.from": "bump.csv", "plant.from_sha256": digest}
    path = tmp_path / "TIC-901.toml"
    write_new(path, edit_all(a_case(), keys))

    (renamed,) = study.check_case(path).faults
    assert (renamed.key, renamed.what) == (
        "plant.from",
        "the record 'bump.csv' is not beside the case",
    )
    assert renamed.mend == "its bytes are in 'bump one.csv': set plant.from to that"
    (tmp_path / "bump one.csv").write_bytes(b"another\n")
    (lost,) = study.check_case(path).faults
    assert lost.mend == "put it back, or accept a fit of another record"
    (tmp_path / "bump one.csv").rename(tmp_path / "bump.csv")
    (other,) = study.check_case(path).faults
    assert other.key == "plant.from_sha256"


def test_a_change_without_a_name_or_a_reason_is_refused() -> None:
    with pytest.raises(InputError) as told:
        study.record_change(a_case(), who=" ", why="", now=NOW)

    assert [fault.key for fault in told.value.problems] == ["who", "why"]


# --- action and cautions --------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("plant", "action", "word"),
    [
        ("2/(3 s + 1)", "reverse", "gain is positive"),
        ("-2/(3 s + 1)", "direct", "gain is negative"),
        ("integrating slope=0.1 /s", "reverse", "slope is positive"),
        ("vessel volume=5, flow=-2 /h", "direct", "slope is negative"),
        (INNER, "reverse", "gain is positive"),
    ],
)
def test_the_action_follows_the_sign_of_the_plant(plant: str, action: str, word: str) -> None:
    case = a_case(plant=plant)

    assert study.action_of(case) == (action, f"{action} action, because the plant's {word}")
    assert study.assess(case).action == action


@pytest.mark.parametrize("plant", ["unstable gain=2, time_constant=9 s", "s/(3 s + 1)", "1/s^2"])
def test_where_the_sign_does_not_tell_the_action_it_is_asked_for(plant: str) -> None:
    with pytest.raises(InputError, match=r"controller\.action: is needed"):
        study.assess(a_case(plant=plant))
    given = a_case(plant=plant, controller_action="reverse")
    assert study.assess(given).action == "reverse"


def test_the_valve_is_told_apart_from_the_sign_of_the_plant() -> None:
    words = {
        ("signal", "false"): "the signal to the valve, which opens as it rises",
        ("signal", "true"): "the signal to the valve, which closes as it rises",
        ("opening", "false"): "the opening of the valve",
        ("opening", "true"): "the opening of the valve, and the signal to the valve falls as it "
        "rises",
    }
    for (meaning, closes), said in words.items():
        case = a_case(op_meaning=meaning, op_valve_closes_on_rise=closes)
        assert study.assess(case).valve == said
        assert study.assess(case).action == "reverse"


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"controller_gain": "40"}, "NOT STABLE"),
        ({"controller_gain": "8", "controller_integral": "15 s"}, "fragile: Ms"),
        ({"controller_action": "direct"}, "this plant asks for reverse action"),
        ({"loop_safety_related": "true"}, "safety-related: needs its own review"),
        ({"pv_noise": "1"}, "the noise of PV is left out"),
        ({"op_max": "50.5", "scenario_setpoint_step": "9"}, "OP is at a limit for"),
        (
            {"controller_gain": "9", "controller_integral": "20 min", "controller_scan": "40 s"},
            "stable only as analogue",
        ),
        (
            {"controller_derivative": "2 s", "controller_scan": "2 s"},
            "derivative filter time 0.2 s is far below the scan 2 s",
        ),
        (
            {"plant": "unstable gain=2, time_constant=90 s", "controller_action": "reverse"},
            "the plant is unstable",
        ),
        ({"plant": "2 (1 - 3 s)/((9 s + 1)(4 s + 1))"}, "PV first moves the wrong way"),
        ({"plant": "2 (9.05 s + 1)/((9 s + 1)(4 s + 1))"}, "nearly cancel"),
    ],
)
def test_what_should_be_minded_is_said(changes: dict[str, str], words: str) -> None:
    assert words in texts(a_case(**changes))


def test_a_sound_loop_has_nothing_to_mind() -> None:
    found = study.evaluate(a_case(controller_action="reverse", controller_scan="1 s"))

    assert found.cautions == ()


def test_a_case_without_plant_or_controller_says_what_it_lacks() -> None:
    with pytest.raises(InputError, match="has no plant yet"):
        study.assess(new_case("X-1"))
    alone = a_case(controller_gain="", controller_integral="")
    assert study.assess(alone).loop is None
    assert study.evaluate(alone).prediction is None
    with pytest.raises(InputError, match="has no controller yet"):
        study.predict(alone)


def test_every_shape_of_a_plant_goes_through_one_door() -> None:
    case = a_case(plant="integrating slope=2 /min")
    process = case.plant.process

    assert isinstance(process, Integrating)
    assert study.plant_of(case) == process.transfer()
    assert study.loop_of(case).plant(0.1j) == pytest.approx(
        process.transfer()(0.1j) * 100 / 250, rel=1e-12
    )


@pytest.mark.parametrize("goal", ["load", "setpoint"])
def test_the_best_settings_keep_the_limit_and_no_rule_within_it_is_quicker(
    goal: Literal["load", "setpoint"],
) -> None:
    """Exact: a rule's settings are among those that the search looks at."""
    wish = study.Wish(setpoint_share=100.0 if goal == "setpoint" else 0.0, max_sensitivity=1.6)

    rows = {row.method: row for row in study.propose(a_case(), wish)}

    def error(row: study.Proposal) -> float:
        figure = row.load_iae if goal == "load" else row.setpoint_iae
        return math.inf if figure.value is None else figure.value

    for method in ("best-pi", "best-pid"):
        assert rows[method].within_limit
        peer = method.removeprefix("best")
        others = [error(r) for m, r in rows.items() if m.endswith(peer) and r.within_limit]
        assert error(rows[method]) <= 1.01 * min(others)
