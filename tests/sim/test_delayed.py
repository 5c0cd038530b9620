"""A dead time inside a feedback, in time: against numerical inversion, and a plain recursion."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import mpmath
import numpy as np
import pytest
from numpy.typing import NDArray

from tests.sim.test_structures import Pid
from workbench.errors import InputError, ModelError
from workbench.model.feedback import Loop
from workbench.model.feedforward import Feedforward
from workbench.model.pid import Gains
from workbench.model.robustness import Margins, analogue_margins, sampled_margins
from workbench.model.structures import NOTHING, Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm
from workbench.sim.delayed import (
    impulse_answer,
    play_sampled,
    sampled_steps,
    step_answer,
    upset_answer,
    without_state_space,
)
from workbench.sim.instruments import Instruments
from workbench.sim.loop import Trace, simulate
from workbench.sim.scans import Clock
from workbench.sim.scenario import Events
from workbench.sim.signals import Ramp, Sine

Array = NDArray[np.float64]
Ratio = TransferFunction.ratio


def inverse(function: Callable[[Any], Any], time: float) -> float:
    """Other route: F.R. de Hoog, J.H. Knight and A.N. Stokes' method, as mpmath has it."""
    with mpmath.workdps(20):
        return float(mpmath.invertlaplace(function, time, method="dehoog"))


PLANTS: dict[str, tuple[TransferFunction, Callable[[Any], Any], float]] = {
    "recycle": (
        Ratio((1.2,), [(10.0, 1.0), (3.0, 1.0)]).feedback(Ratio((0.8,), [(2.0, 1.0)], 4.0)),
        lambda s: 1 / ((10 * s + 1) * (3 * s + 1) / 1.2 + 0.8 * mpmath.exp(-4 * s) / (2 * s + 1)),
        0.0,
    ),
    "recycle that adds up": (
        Ratio((1.0,), [(8.0, 1.0)], 1.5).feedback(Ratio((-0.7,), [], 6.0)),
        lambda s: 1 / (8 * s + 1 - 0.7 * mpmath.exp(-7.5 * s)),
        1.5,
    ),
    "integrator inside": (
        Ratio((1.0,), [(5.0, 0.0)]).feedback(Ratio((0.4,), [], 3.0)),
        lambda s: 1 / (5 * s + 0.4 * mpmath.exp(-3 * s)),
        0.0,
    ),
}
"""Plant, the same without its own dead time written out by hand, that dead time [s]."""


@pytest.mark.parametrize("name", PLANTS)
def test_the_answer_to_a_step_is_that_of_the_formula(name: str) -> None:
    plant, formula, late = PLANTS[name]
    times = np.array([0.0, 2.0, 7.0, 13.3, 50.0])
    found = step_answer(plant, times)
    for time, value in zip(times.tolist(), found.tolist(), strict=True):
        wanted = inverse(lambda s: formula(s) / s, time - late) if time > late else 0.0
        assert value == pytest.approx(wanted, abs=1e-8)


def test_a_jump_that_goes_round_comes_back_smaller_each_time() -> None:
    # exact: 1/(1 - 0.5 exp(-2 s)) before one lag is a sum of lagged steps
    plant = TransferFunction.constant(1.0).feedback(Ratio((-0.5,), [], 2.0))
    times = np.linspace(0.0, 30.0, 61)
    found = step_answer(plant * Ratio((1.0,), [(3.0, 1.0)]), times)
    wanted = sum(
        0.5**k * np.where(times > 2.0 * k, -np.expm1(-np.maximum(times - 2.0 * k, 0.0) / 3.0), 0.0)
        for k in range(40)
    )
    assert np.abs(found - wanted).max() < 1e-8


def test_answers_to_an_impulse_a_ramp_and_a_sine() -> None:
    plant, formula, _ = PLANTS["recycle"]
    times = np.array([3.0, 11.0, 37.0])
    w = 2.0 * np.pi / 25.0
    for found, wanted in (
        (impulse_answer(plant, times), formula),
        (upset_answer(plant, (Ramp(0.1, 1.0),), times + 1.0), lambda s: 0.1 * formula(s) / s**2),
        (
            upset_answer(plant, (Sine(2.0, 25.0, 0.0),), times),
            lambda s: 2.0 * w * formula(s) / (s**2 + w**2),
        ),
    ):
        assert found == pytest.approx([inverse(wanted, t) for t in times.tolist()], abs=1e-7)


# --- loops ---------------------------------------------------------------------------------------

PLANT, FORMULA, _LATE = PLANTS["recycle"]
GAINS = Gains(1.1, 0.08, 2.0, 0.5, 0.7)


def at(trace: Trace, times: Array) -> tuple[Array, Array]:
    return np.interp(times, trace.time, trace.pv), np.interp(times, trace.time, trace.output)


def test_a_sampled_loop_is_a_plain_recursion_on_the_formula_s_steps() -> None:
    scan, count = 2.5, 20
    events = Events(5.0, 0.0, 3.0, 25.0, scan * (count - 1))
    loop = Loop(PLANT, PLANT, GAINS, scan=scan)
    steps = [0.0, *(inverse(lambda s: FORMULA(s) / s, scan * k) for k in range(1, count))]
    pid, output = Pid(GAINS, scan), 0.0
    moves: list[float] = []
    wanted: list[float] = []
    for k in range(count):
        y = math.fsum(move * steps[k - j] for j, move in enumerate(moves))
        y += 3.0 * (steps[k - 10] if k >= 10 else 0.0)
        wanted.append(y)
        now = pid(5.0, y)
        moves.append(now - output)
        output = now
    found = at(simulate(loop, events), np.array([scan * k for k in range(count)]))[0]
    assert found == pytest.approx(wanted, abs=1e-7)


@pytest.mark.parametrize("delay", [0.0, 0.4])
@pytest.mark.parametrize("high", [None, 2.0])
def test_it_is_played_as_a_loop_with_a_state_space_is(delay: float, high: float | None) -> None:
    # other route: the engine of scans, on a plant that both can follow
    plant = Ratio((1.3,), [(9.0, 1.0), (2.0, 1.0)], 2.7)
    loop = Loop(plant, plant, GAINS, scan=1.0, computing_delay=delay, high=high)
    events = Events(4.0, 3.0, 2.0, 60.2, 120.0, load_shape="pulse", load_time=17.0, noise=0.1)
    played = play_sampled(
        loop,
        Clock(1.0, delay),
        events,
        Instruments(),
        Algorithm.of(loop, 1.0).start(),
        np.where(np.arange(121) >= 3, 4.0, 0.0),
    )
    wanted = simulate(loop, events)
    scans = np.arange(121.0)
    assert np.interp(scans, played.time, played.pv) == pytest.approx(
        np.interp(scans, wanted.time, wanted.pv), abs=1e-7
    )
    middles = scans[:-1] + 0.7
    assert np.interp(middles, played.time, played.output) == pytest.approx(
        np.interp(middles, wanted.time, wanted.output), abs=2e-2
    )


def test_an_analogue_loop_is_its_closed_loop_inverted() -> None:
    loop = Loop(PLANT, 0.5 * PLANT, replace(GAINS, filter_time=1.0))
    times = np.array([4.0, 12.0, 50.0])

    def back(s: Any) -> Any:
        return 1.1 + 0.08 / s + 2.0 * s / (1 + 1.0 * s)

    def forward(s: Any) -> Any:
        return 0.7 * 1.1 + 0.08 / s

    def closed(s: Any) -> Any:
        return 1 / (1 + back(s) * FORMULA(s)) / s

    found = at(simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 80.0)), times)
    pv = [inverse(lambda s: forward(s) * FORMULA(s) * closed(s), t) for t in times]
    op = [inverse(lambda s: forward(s) * closed(s), t) for t in times]
    assert found[0] == pytest.approx(pv, abs=1e-5)
    assert found[1] == pytest.approx(op, abs=1e-5)
    after = at(simulate(loop, Events(0.0, 0.0, 2.0, 0.0, 80.0)), times)
    pv = [inverse(lambda s: FORMULA(s) * closed(s), t) for t in times]
    assert after[0] == pytest.approx(pv, abs=1e-5)


def test_an_analogue_structure_is_what_short_scans_come_to() -> None:
    slow = Ratio((1.3,), [(20.0, 1.0)], 3.3)
    inner = Loop(Ratio((1.0,), [(3.0, 1.0)], 0.7), TransferFunction.constant(1.0), Gains(1.5, 0.3))
    cascade = Structure(
        slow,
        NOTHING,
        Gains(1.0, 0.04, setpoint_weight=0.5),
        inner=inner,
        feedforward=Feedforward(-0.2, 4.0, 2.0),
    )
    events = Events(1.0, 0.0, 1.0, 60.0, 150.0)
    analogue = simulate(cascade, events)
    sampled = replace(cascade, scan=0.02, inner=replace(inner, scan=0.02))
    times = np.array([10.0, 33.0, 59.0, 66.0, 100.0, 149.0])
    one, other = at(analogue, times), at(simulate(sampled, events), times)
    assert one[0] == pytest.approx(other[0], abs=0.01)
    assert one[1] == pytest.approx(other[1], abs=0.02)


@pytest.mark.parametrize(
    ("changed", "asked"),
    [
        ({"high": 0.5}, {}),
        ({"rate": 0.1}, {}),
        ({"dead_zone": 0.2}, {}),
        ({}, {"manual_at": 9.0}),
        ({}, {"load_shape": "sine", "load_time": 9.0}),
    ],
)
def test_without_a_scan_what_bends_it_is_refused(
    changed: dict[str, Any], asked: dict[str, Any]
) -> None:
    loop = replace(Loop(PLANT, PLANT, Gains(1.0, 0.1)), **changed)
    with pytest.raises(InputError, match="is needed: without one") as refused:
        simulate(loop, replace(Events(1.0, 0.0, 1.0, 40.0, 80.0), **asked))
    assert refused.value.problems[0].key == "controller.scan"


def test_what_cannot_be_followed_is_refused_in_one_line() -> None:
    for_ever = TransferFunction.constant(1.0).feedback(Ratio((-1.0,), [], 2.0))
    assert without_state_space(for_ever) == "a dead time inside a feedback that never dies out"
    with pytest.raises(ModelError, match="never dies out"):
        step_answer(for_ever, np.array([1.0]))
    with pytest.raises(InputError, match="is not played on a plant") as refused:
        simulate(Loop(PLANT, PLANT, GAINS, scan=1.0), Events(1, 0, 0, 0, 9.0, change_at=4.0))
    assert refused.value.problems[0].key == "scenario.change_at"


# --- margins -------------------------------------------------------------------------------------


def _margins(loop: Loop) -> Margins:
    return sampled_margins(loop, sampled_steps(loop))


def _grows(loop: Loop) -> bool:
    moves = np.abs(np.diff(simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 900.0)).pv))
    third = len(moves) // 3
    return bool(moves[2 * third :].max() > moves[third : 2 * third].max())


@pytest.mark.parametrize("scan", [1.0, 4.0])
@pytest.mark.parametrize("name", ["recycle", "recycle that adds up"])
def test_the_gain_margin_is_where_the_loop_begins_to_grow(name: str, scan: float) -> None:
    plant = PLANTS[name][0]
    loop = Loop(plant, plant, Gains(0.5, 0.02), scan=scan, computing_delay=0.3)
    margin = _margins(loop).gain_margin.value
    assert margin is not None
    for share, grows in ((0.99, False), (1.01, True)):
        gains = Gains(0.5 * margin * share, 0.02 * margin * share)
        assert _grows(replace(loop, gains=gains)) == grows
        assert _margins(replace(loop, gains=gains)).stable != grows


def test_margins_are_those_of_an_analogue_loop_with_half_a_scan_more() -> None:
    plant = PLANTS["recycle that adds up"][0]
    loop = Loop(plant, plant, Gains(0.5, 0.02), scan=0.5)
    # common practice: a hold is about half a scan of dead time
    held = replace(loop, scan=None, plant=plant * Ratio((1.0,), [], 0.25))
    sampled, analogue = _margins(loop), analogue_margins(held)
    assert sampled.gain_margin.value == pytest.approx(analogue.gain_margin.value, rel=0.06)
    assert sampled.max_sensitivity.value == pytest.approx(analogue.max_sensitivity.value, rel=0.03)


def test_margins_of_a_plant_that_integrates() -> None:
    # other route: the analogue loop, to which short scans come
    plant = PLANTS["recycle"][0] * Ratio((0.05,), [(1.0, 0.0)])
    loop = Loop(plant, plant, Gains(0.6, 0.004), scan=0.5)
    sampled, analogue = _margins(loop), analogue_margins(replace(loop, scan=None))
    assert sampled.stable
    assert sampled.phase_margin_deg.value == pytest.approx(
        analogue.phase_margin_deg.value or 0.0, abs=2.0
    )
