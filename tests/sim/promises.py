"""What a controller promises at its limits and at every change, for loops that hypothesis draws."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TypeVar

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from tests.sim.cascades import WAYS, further
from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.pid import Controller, Gains
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm, Memory
from workbench.sim.course import passage
from workbench.sim.instruments import Instruments
from workbench.sim.process import process
from workbench.sim.scans import Clock
from workbench.sim.scenario import Events
from workbench.units import Amount

SAME = 1e-9
"""Rounding [%]."""


@dataclass(frozen=True)
class Drawn:
    """A loop with limits, and what happens to it."""

    loop: Loop
    events: Events


# --- what is drawn -------------------------------------------------------------------------------


@st.composite
def controllers(draw: st.DrawFn, gain: float, slow: float) -> Gains:
    """P, PI or PID in any form, lively for a plant of gain 1 and lag `slow` [s]."""
    form = draw(st.sampled_from(("ideal", "series", "parallel")))
    kind = draw(st.sampled_from(("P", "PI", "PID")))
    integral = draw(st.floats(0.1, 1.5)) * slow
    derivative = draw(st.floats(0.02, 0.2)) * integral
    whole = form == "parallel"
    return Controller(
        form=form,
        gain=gain,
        integral=None
        if kind == "P"
        else Amount(gain / integral, "1/s")
        if whole
        else Amount(integral, "s"),
        derivative=Amount(derivative * (gain if whole else 1.0), "s") if kind == "PID" else None,
        derivative_filter=draw(st.sampled_from((3.0, 10.0))),
        setpoint_weight=draw(st.sampled_from((0.0, 0.5, 1.0))),
        derivative_on=draw(st.sampled_from(("pv", "error"))),
    ).gains()


@st.composite
def drawn(draw: st.DrawFn, modes: bool) -> Drawn:
    """A loop of lags and perhaps a dead time within output limits; scan 1 s."""
    reverse = draw(st.booleans())
    lags = draw(st.lists(st.floats(3.0, 40.0), min_size=1, max_size=2))
    late = draw(st.sampled_from((0.0, 1.0, 6.3)))
    plant = TransferFunction.ratio((1.0 if reverse else -1.0,), [(t, 1.0) for t in lags], late)
    slow = sum(lags)
    lively = draw(st.floats(0.5, 6.0)) * slow / (slow + 5.0 * (late + min(lags) * (len(lags) - 1)))
    gains = draw(controllers(lively, slow))
    limits = st.floats(0.3, 6.0)
    loop = Loop(
        plant,
        plant,
        gains,
        reverse=reverse,
        scan=1.0,
        low=-draw(limits),
        high=draw(limits),
        rate=None if modes else draw(st.sampled_from((None, None, 0.4))),
        windup=draw(st.sampled_from(WAYS)),
        incremental=bool(gains.integral) and draw(st.booleans()),
    )
    moves = st.floats(-6.0, 6.0)
    events = Events(draw(moves), 5.0, draw(moves), draw(st.sampled_from((0.0, 130.3))), 300.0)
    if modes:
        begin = draw(st.integers(0, 120))
        events = replace(
            events,
            noise=draw(st.sampled_from((0.0, 0.1))),
            manual_at=float(begin),
            manual_output=draw(st.none() | moves),
            automatic_at=float(begin + draw(st.integers(1, 80))),
            settings_at=float(draw(st.integers(0, 290))),
            settings=draw(controllers(draw(st.floats(0.2, 3.0)) * lively, slow)),
        )
    return Drawn(loop, events)


@st.composite
def cascades(draw: st.DrawFn) -> tuple[Structure, Events]:
    """A cascade whose inner loop has narrow limits, its controllers in any form."""
    fast = TransferFunction.ratio((1.0,), [(draw(st.floats(0.5, 6.0)), 1.0)], 0.3)
    slow_lag = draw(st.floats(4.0, 40.0))
    slow = TransferFunction.ratio((1.0,), [(slow_lag, 1.0)], draw(st.sampled_from((0.0, 2.2))))
    direct, outer_direct = draw(st.booleans()), draw(st.booleans())
    inner = Loop(
        -fast if direct else fast,
        TransferFunction.constant(1.0),
        draw(controllers(draw(st.floats(0.3, 3.0)), 5.0)),
        reverse=not direct,
        scan=0.5,
        low=-draw(st.floats(0.05, 3.0)),
        high=draw(st.floats(0.05, 3.0)),
        rate=draw(st.sampled_from((None, 0.5))),
        windup=draw(st.sampled_from(WAYS)),
    )
    slow = -slow if outer_direct else slow
    outer = Structure(
        slow,
        0.3 * slow,
        draw(controllers(draw(st.floats(0.3, 3.0)), slow_lag)),
        reverse=not outer_direct,
        scan=draw(st.sampled_from((0.5, 1.0, 2.0))),
        windup=draw(st.sampled_from(WAYS)),
        inner=inner,
    )
    moves = st.floats(-5.0, 5.0)
    return outer, Events(draw(moves), 4.0, draw(moves), 30.0, 90.0)


# --- what is promised ----------------------------------------------------------------------------


def _within(loop: Loop, output: NDArray[np.float64]) -> None:
    assert loop.low is not None
    assert loop.high is not None
    assert output.min() >= loop.low
    assert output.max() <= loop.high


def leaves_its_limit(case: Drawn) -> float:
    """How many scans the output stays at a limit after the error has turned, beyond those allowed.

    One scan with conditional integration and incremental execution, the tracking time more with the
    others.  Not counted is where P and D ask for more than when the integral last moved towards
    the limit, which without derivative action is nowhere.
    """
    loop = case.loop
    clock = Clock(1.0, 0.0)
    course = passage(loop, process(loop), clock, case.events, Instruments()).course
    _within(loop, course.outputs)
    if not loop.gains.integral:
        return 0.0
    algorithm, memory = Algorithm.of(loop, 1.0), Memory()
    step = algorithm.start(memory)
    prompt = loop.incremental or loop.windup == "conditional"
    waits = 1 if prompt else 1 + math.ceil(1.0 / algorithm.release)
    low, high = algorithm.bounds()
    worst, stays = 0, {low: 0, high: 0}
    asked = {low: 0.0, high: 0.0}
    was = {low: False, high: False}
    for scan, seen in enumerate(course.measured.tolist()):
        setpoint = case.events.setpoint_step if scan >= 5 else 0.0
        output = step(setpoint, seen)
        assert abs(output - course.outputs[scan]) <= SAME * max(1.0, abs(output))
        error, parts = setpoint - seen, memory.proportional + memory.derivative
        for limit, way in ((low, -1.0), (high, 1.0)):
            there = memory.output == limit
            if way * error > 0.0:
                stays[limit] = 0
                was[limit] = there
                if not memory.frozen:
                    asked[limit] = way * parts
            elif not there:
                was[limit] = False
            elif was[limit] and not (loop.gains.derivative and way * parts > asked[limit]):
                stays[limit] += 1
                worst = max(worst, stays[limit] - waits)
    return float(max(worst, 0))


def moves_as_asked(case: Drawn) -> float:
    """How much further than the error asks the output moves at a change of mode or settings [%]."""
    loop, events = case.loop, case.events
    if loop.incremental and events.settings is not None and not events.settings.integral:
        # The incremental form without integral action is refused.
        events = replace(events, settings=replace(events.settings, integral=loop.gains.integral))
    course = passage(loop, process(loop), Clock(1.0, 0.0), events, Instruments()).course
    _within(loop, course.outputs)
    assert events.settings_at is not None
    assert events.automatic_at is not None
    assert events.settings is not None
    worst, derivative, last = 0.0, 0.0, 0.0
    assert events.manual_at is not None
    by_hand = range(int(events.manual_at), int(events.automatic_at))
    marks = {int(at) for at in (events.settings_at, events.automatic_at)} - {*by_hand}
    gains, setpoint_before, seen_before = loop.gains, 0.0, 0.0
    for scan, seen in enumerate(course.measured.tolist()):
        setpoint = events.setpoint_step if scan >= 5 else 0.0
        if scan == int(events.settings_at):
            gains = events.settings
            derivative = derivative if gains.derivative else 0.0
            last = gains.derivative_weight * setpoint_before - seen_before
        total = gains.filter_time + 1.0
        shown = gains.derivative_weight * setpoint - seen
        now = gains.filter_time / total * derivative + gains.derivative / total * (shown - last)
        if scan in marks and scan:
            change = gains.setpoint_weight * (setpoint - setpoint_before) - (seen - seen_before)
            asked = abs(gains.proportional * change) + abs(gains.integral * (setpoint - seen))
            asked += abs(now - derivative)
            moved = abs(float(course.outputs[scan] - course.outputs[scan - 1]))
            worst = max(worst, moved - asked)
        derivative, last, setpoint_before, seen_before = now, shown, setpoint, seen
    return worst if worst > SAME else 0.0


def winds_nothing_up(case: tuple[Structure, Events]) -> float:
    """How far the outer output goes on into what its inner loop cannot do [%]."""
    return further(*case)[0]


Case = TypeVar("Case")


def _judged(
    strategy: st.SearchStrategy[Case], promise: Callable[[Case], float]
) -> Callable[[int, int], tuple[float, list[str]]]:
    """A campaign of a size: the worst figure, and the smallest case that breaks the promise."""

    def campaign(size: int, seed: int) -> tuple[float, list[str]]:
        del seed  # the examples are made from the promise itself, the same ones on each run
        worst = [0.0]

        @settings(max_examples=size)
        @given(strategy)
        def kept(case: Case) -> None:
            found = promise(case)
            worst[0] = max(worst[0], found)
            assert found <= 0.0, f"{found:g}: {case}"

        try:
            kept()
        except (AssertionError, InputError) as broken:
            return worst[0], [str(broken)]
        return worst[0], []

    return campaign


left_limits = _judged(drawn(modes=False), leaves_its_limit)
bumpless = _judged(drawn(modes=True), moves_as_asked)
held_cascades = _judged(cascades(), winds_nothing_up)
