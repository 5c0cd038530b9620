"""Structures scan by scan: against a plain recursion on step responses, and in closed form."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.feedforward import Feedforward
from workbench.model.pid import Gains
from workbench.model.structures import NOTHING, Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.family import side_by_side
from workbench.sim.instruments import Instruments
from workbench.sim.loop import Trace, settle_horizon, simulate
from workbench.sim.scenario import Events
from workbench.sim.valve import Valve

Array = NDArray[np.float64]

# --- the other route: sums of step responses, and the algorithm written out ----------------------


@dataclass(frozen=True)
class Lag:
    """gain exp(-dead_time s) over one or two lags."""

    gain: float
    times: tuple[float, ...]
    dead_time: float = 0.0

    def function(self) -> TransferFunction:
        return TransferFunction.ratio((self.gain,), [(t, 1.0) for t in self.times], self.dead_time)

    def step(self, since: float) -> float:
        # exact: the step response
        t = since - self.dead_time
        if t <= 0.0:
            return 0.0
        if len(self.times) == 1:
            return -self.gain * math.expm1(-t / self.times[0])
        one, two = self.times
        left = (one * math.exp(-t / one) - two * math.exp(-t / two)) / (one - two)
        return self.gain * (1.0 - left)

    def before(self, other: Lag) -> Lag:
        return Lag(
            self.gain * other.gain, (*self.times, *other.times), self.dead_time + other.dead_time
        )


class Moves:
    """An output that is changed at scans, and what it has done to a path."""

    def __init__(self) -> None:
        self.made: list[tuple[float, float]] = []
        self.last = 0.0

    def to(self, value: float, time: float) -> None:
        self.made.append((time, value - self.last))
        self.last = value

    def through(self, step: Callable[[float], float], time: float) -> float:
        return math.fsum(size * step(time - at) for at, size in self.made)


class Pid:
    """P + I + D with the integral including this scan's error, no limits."""

    def __init__(self, gains: Gains, scan: float, pv_filter: float = 0.0) -> None:
        self.g, self.h = gains, scan
        self.smooth = 1.0 - math.exp(-scan / pv_filter) if pv_filter else 1.0
        self.y = self.i = self.d = self.seen = 0.0

    def __call__(self, r: float, y: float) -> float:
        g, h = self.g, self.h
        self.y += self.smooth * (y - self.y)
        self.i += g.integral * h * (r - self.y)
        seen = g.derivative_weight * r - self.y
        self.d = (g.filter_time * self.d + g.derivative * (seen - self.seen)) / (g.filter_time + h)
        self.seen = seen
        return g.proportional * (g.setpoint_weight * r - self.y) + self.i + self.d


EVENTS = Events(1.0, 2.4, 0.7, 31.3, 60.0)


def at_scans(trace: Trace, scan: float, until: float = 60.0) -> tuple[Array, Array]:
    """PV and OP at the scans; a loop that ran away has fewer."""
    last = min(until, float(trace.time[-1]))
    times = np.arange(math.floor(last / scan + 1e-9) + 1) * scan
    rows = np.searchsorted(trace.time, times - 1e-9)
    assert np.abs(trace.time[rows] - times).max() < 1e-9
    return trace.pv[rows], trace.output[rows]


times = st.floats(0.8, 20.0)
dead_times = st.just(0.0) | st.floats(0.05, 6.0)
sizes = st.floats(0.3, 2.0)


@st.composite
def lags(draw: st.DrawFn) -> Lag:
    return Lag(draw(sizes), (draw(times),), draw(dead_times))


@st.composite
def gains(draw: st.DrawFn) -> Gains:
    return Gains(
        draw(st.floats(0.1, 0.8)),
        draw(st.floats(0.01, 0.1)),
        draw(st.just(0.0) | st.floats(0.1, 1.0)),
        draw(st.sampled_from([0.0, 0.4])),
        draw(st.sampled_from([0.0, 0.6, 1.0])),
        draw(st.sampled_from([0.0, 1.0])),
    )


@settings(max_examples=25, deadline=None)
@given(lags(), lags(), lags(), gains(), st.sampled_from([0.5, 0.83]), st.sampled_from([0.0, 0.3]))
def test_a_wrong_model_against_a_plain_recursion(
    plant: Lag, model: Lag, load: Lag, g: Gains, scan: float, delay: float
) -> None:
    loop = Structure(
        plant.function(),
        load.function(),
        g,
        scan=scan,
        computing_delay=delay,
        pv_filter=1.2,
        model=model.function(),
    )
    pv, op = at_scans(simulate(loop, EVENTS), scan)
    pid, moves, fast = Pid(g, scan, 1.2), Moves(), replace(model, dead_time=0.0)
    size = max(1.0, float(np.abs(pv).max()), float(np.abs(op).max()))
    for k in range(len(pv)):
        t = k * scan
        y = moves.through(plant.step, t) + 0.7 * load.step(t - 31.3)
        ahead = moves.through(fast.step, t) - moves.through(model.step, t)
        u = pid(1.0 if t >= 2.4 else 0.0, y + ahead)
        moves.to(u, t + delay)
        assert abs(y - pv[k]) <= 1e-9 * size
        if not delay:
            assert abs(u - op[k]) <= 1e-9 * size


@settings(max_examples=25, deadline=None)
@given(lags(), lags(), gains(), st.floats(-1.5, 1.5), dead_times, times, times)
def test_feedforward_against_a_plain_recursion(
    plant: Lag, load: Lag, g: Gains, gain: float, dead_time: float, lead: float, lag: float
) -> None:
    scan, feedforward = 0.5, Feedforward(gain, lead, lag, dead_time)
    loop = Structure(plant.function(), load.function(), g, scan=scan, feedforward=feedforward)
    pv, op = at_scans(simulate(loop, EVENTS), scan)
    pid, moves = Pid(g, scan), Moves()
    size = max(1.0, float(np.abs(pv).max()), float(np.abs(op).max()))
    for k in range(len(pv)):
        t = k * scan
        y = moves.through(plant.step, t) + 0.7 * load.step(t - 31.3)
        # exact: lead and lag after a step, which the first scan after it sees at 31.5 s
        since = t - 31.5 - dead_time
        added = 0.7 * gain * (1.0 + (lead / lag - 1.0) * math.exp(-since / lag))
        u = pid(1.0 if t >= 2.4 else 0.0, y) + (added if since >= -1e-9 else 0.0)
        moves.to(u, t)
        assert abs(y - pv[k]) <= 1e-9 * size
        assert abs(u - op[k]) <= 1e-9 * size


@settings(max_examples=25, deadline=None)
@given(lags(), lags(), gains(), gains(), st.integers(1, 4), st.booleans())
def test_a_cascade_against_a_plain_recursion(
    fast: Lag, slow: Lag, outer: Gains, inner: Gains, ratio: int, direct: bool
) -> None:
    scan, fast = 0.5, replace(fast, times=(fast.times[0] + 0.013,))
    sign = -1.0 if direct else 1.0
    loop = Structure(
        slow.function(),
        NOTHING,
        outer,
        scan=ratio * scan,
        inner=Loop(sign * fast.function(), fast.function(), inner, reverse=not direct, scan=scan),
    )
    trace = simulate(loop, EVENTS)
    pv, op = at_scans(trace, scan)
    assert trace.inner is not None
    both = fast.before(slow)
    outside, inside, moves, r2 = Pid(outer, ratio * scan), Pid(inner, scan), Moves(), 0.0
    size = max(1.0, *(float(np.abs(x).max()) for x in (pv, op, trace.inner.output)))
    for k in range(len(pv)):
        t = k * scan
        y1 = sign * moves.through(both.step, t) + 0.7 * both.step(t - 31.3)
        y2 = sign * moves.through(fast.step, t) + 0.7 * fast.step(t - 31.3)
        if k % ratio == 0:
            r2 = outside(1.0 if t >= 2.4 else 0.0, y1)
        u = sign * inside(r2, y2)
        moves.to(u, t)
        found = (pv[k], op[k], trace.inner.pv[k], trace.inner.output[k])
        assert found == pytest.approx((y1, r2, y2, u), abs=1e-9 * size)


# --- closed forms --------------------------------------------------------------------------------

SLOW = Lag(1.5, (20.0,), 4.0)
PI = Gains(1.2, 0.06)


def test_an_exact_model_takes_the_dead_time_out_of_the_loop() -> None:
    # exact: PV is that of the loop without dead time, 4 s later
    plant = SLOW.function()
    loop = Structure(plant, NOTHING, PI, scan=0.5, model=plant)
    without = Loop(replace(SLOW, dead_time=0.0).function(), NOTHING, PI, scan=0.5)
    events = Events(1.0, 2.0, 0.0, 0.0, 80.0)
    late, op = at_scans(simulate(loop, events), 0.5, 80.0)
    early, wanted = at_scans(simulate(without, events), 0.5, 80.0)
    assert np.abs(late[8:] - early[:-8]).max() < 1e-12
    assert np.abs(op - wanted).max() < 1e-12


def test_a_model_without_dead_time_changes_nothing_to_the_last_bit() -> None:
    plant = SLOW.function()
    loop = Structure(plant, plant, PI, scan=0.5, model=replace(SLOW, dead_time=0.0).function())
    one, other = simulate(loop, EVENTS), simulate(Loop(plant, plant, PI, scan=0.5), EVENTS)
    assert np.abs(one.pv - other.pv).max() < 1e-12


def test_an_upset_at_the_plant_s_input_is_cancelled_at_once() -> None:
    # exact: OP moves by -1 at the scan at which the upset comes
    plant = SLOW.function()
    loop = Structure(plant, plant, PI, scan=0.5, feedforward=Feedforward(-1.0))
    trace = simulate(loop, Events(0.0, 0.0, 5.0, 20.0, 80.0))
    assert np.abs(trace.pv).max() < 1e-12
    assert trace.output[-1] == -5.0


def test_an_infinitely_fast_inner_loop_is_not_there() -> None:
    # exact: without a lag, and with Ki h = 1, the inner output is its setpoint within the scan
    inner = Loop(TransferFunction.constant(1.0), NOTHING, Gains(0.0, 2.0), scan=0.5)
    loop = Structure(SLOW.function(), SLOW.function(), PI, scan=0.5, inner=inner)
    single = Loop(SLOW.function(), SLOW.function(), PI, scan=0.5)
    one, other = simulate(loop, EVENTS), simulate(single, EVENTS)
    assert np.abs(one.pv - other.pv).max() < 1e-12
    assert np.abs(one.output - other.output).max() < 1e-12


def test_the_horizon_of_a_structure_is_its_own() -> None:
    plant = SLOW.function()
    slow = Loop(plant, plant, PI, scan=0.5)
    inner = Loop(TransferFunction.constant(1.0), NOTHING, Gains(0.0, 2.0), scan=0.5)
    whole = Structure(plant, plant, PI, scan=0.5, inner=inner)
    assert settle_horizon(whole) == pytest.approx(settle_horizon(slow), rel=0.05)


# --- limits and modes ----------------------------------------------------------------------------


def limited(
    plant: Lag, fast: Lag, outer: Gains, inner: Gains, high: float, windup: str, direct: bool
) -> Structure:
    sign = -1.0 if direct else 1.0
    within = Loop(
        sign * fast.function(),
        fast.function(),
        inner,
        reverse=not direct,
        scan=0.5,
        low=-high,
        high=high,
    )
    return Structure(plant.function(), NOTHING, outer, scan=1.0, windup=windup, inner=within)


@settings(max_examples=60, deadline=None)
@given(
    lags(),
    lags(),
    gains(),
    gains(),
    st.floats(0.05, 2.0),
    st.sampled_from(["conditional", "tracking", "external-reset"]),
    st.booleans(),
)
def test_an_inner_loop_at_its_limit_never_winds_up_the_outer_one(
    plant: Lag, fast: Lag, outer: Gains, inner: Gains, high: float, windup: str, direct: bool
) -> None:
    trace = simulate(limited(plant, fast, outer, inner, high, windup, direct), EVENTS)
    assert trace.inner is not None
    u = trace.inner.output
    assert np.abs(u).max() <= high
    r2 = at_scans(trace, 0.5)[1]
    moved = np.diff(r2[::2])
    # The inner output of the scan just before the outer controller is executed.
    before = u[1::2][: len(moved)]
    driven = ((before >= high).astype(int) - (before <= -high)) * (-1.0 if direct else 1.0)
    assert (moved * driven[: len(moved)]).max() <= 0.0


def test_the_outer_output_comes_back_with_the_error() -> None:
    # An upset too large for the inner output, gone again: without the hold the outer integral
    # would go on from 31 s to the end, and PV would stay far from its setpoint for as long again.
    # Ti = 20 s, a peak error of about 1 and 60 s at the limit would be 3.6 % of integral.
    fast = Lag(1.0, (1.0,))
    loop = limited(SLOW, fast, PI, Gains(1.0, 1.0), 0.5, "conditional", direct=False)
    trace = simulate(loop, Events(0.0, 0.0, 2.0, 10.0, 120.0))
    assert trace.inner is not None
    held = np.flatnonzero(trace.inner.output <= -0.5)
    assert len(held) > 100
    first = trace.inner.setpoint[held[0]]
    assert trace.inner.setpoint.min() >= first - 1e-12


@pytest.mark.parametrize("mode", ["automatic", "manual"])
def test_the_outer_output_follows_an_inner_loop_that_goes_its_own_way(mode: str) -> None:
    fast = Lag(1.0, (3.0,))
    loop = replace(
        limited(SLOW, fast, PI, Gains(1.0, 0.4), 50.0, "conditional", direct=False), inner_mode=mode
    )
    trace = simulate(loop, EVENTS)
    assert trace.inner is not None
    followed = trace.inner.pv if mode == "manual" else np.zeros(len(trace.inner.pv))
    r2 = at_scans(trace, 0.5)[1]
    assert np.abs(r2[::2] - followed[::2]).max() < 1e-12
    if mode == "manual":
        assert not trace.inner.output.any()
        # exact: the upset alone
        assert trace.inner.pv[-1] == pytest.approx(0.7 * fast.step(60.0 - 31.3), abs=1e-12)


def test_feedforward_keeps_to_the_limits_and_winds_nothing_up() -> None:
    plant = SLOW.function()
    loop = Structure(plant, plant, PI, scan=0.5, low=-3.0, high=3.0, feedforward=Feedforward(-1.0))
    trace = simulate(loop, Events(0.0, 0.0, 2.0, 20.0, 80.0))
    assert np.abs(trace.pv).max() < 1e-12
    too_large = simulate(loop, Events(0.0, 0.0, 5.0, 20.0, 200.0))
    assert too_large.output.min() == -3.0
    assert too_large.pv[-1] > 0.0


# --- what cannot be played -----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("scan", "inner_scan", "key", "words"),
    [
        (None, 0.5, "controller.scan", "the inner controller has one"),
        (1.0, None, "inner.scan", "is needed"),
        (1.0, 0.3, "inner.scan", "does not go into"),
        (1.0, 2.0, "inner.scan", "does not go into"),
    ],
)
def test_scans_that_do_not_go_together_are_refused(
    scan: float | None, inner_scan: float | None, key: str, words: str
) -> None:
    inner = Loop(Lag(1.0, (2.0,)).function(), NOTHING, PI, scan=inner_scan)
    loop = Structure(SLOW.function(), NOTHING, PI, scan=scan, inner=inner)
    with pytest.raises(InputError, match=words) as refused:
        simulate(loop, EVENTS)
    assert refused.value.problems[0].key == key


def test_what_is_not_played_with_an_inner_loop_is_refused() -> None:
    inner = Loop(Lag(1.0, (2.0,)).function(), NOTHING, PI, scan=0.5)
    loop = Structure(SLOW.function(), NOTHING, PI, scan=1.0, inner=inner)
    with pytest.raises(InputError, match="is not played with") as refused:
        simulate(loop, replace(EVENTS, change_at=5.0))
    assert refused.value.problems[0].key == "scenario.change_at"


HANDLED: list[dict[str, Any]] = [
    {"manual_at": 5.0, "automatic_at": 21.3},
    {"manual_at": 5.0, "manual_output": 2.0, "automatic_at": 40.0},
    {"settings_at": 12.2, "settings": Gains(0.7, 0.01, 1.0, 0.2, 0.5)},
    {"manual_at": 3.0, "automatic_at": 9.0, "settings_at": 6.0, "settings": Gains(0.4, 0.02)},
]


@pytest.mark.parametrize("asked", HANDLED)
@pytest.mark.parametrize("high", [None, 1.2])
def test_modes_and_settings_are_those_of_a_single_loop(
    asked: dict[str, Any], high: float | None
) -> None:
    # other route: the engine of a single loop; an inner loop without lags that is done in one scan
    # is not there
    plant, events = SLOW.function(), replace(EVENTS, **asked)
    single = Loop(plant, NOTHING, PI, scan=0.5, high=high)
    bare = Structure(plant, NOTHING, PI, scan=0.5, high=high)
    one, wanted = simulate(bare, events), simulate(single, events)
    assert np.abs(one.pv - wanted.pv).max() < 1e-12
    assert np.abs(one.output - wanted.output).max() < 1e-12


@pytest.mark.parametrize("start", ["cascade", "automatic", "manual"])
@pytest.mark.parametrize("then", ["cascade", "automatic", "manual"])
def test_a_change_of_the_inner_mode_bumps_nothing(start: str, then: str) -> None:
    # Nothing moves while the error is 0: begin at rest, change, and only then step.
    inner = Loop(Lag(1.0, (2.0,)).function(), TransferFunction.constant(1.0), PI, scan=0.5)
    loop = Structure(SLOW.function(), NOTHING, PI, scan=1.0, inner=inner, inner_mode=start)
    events = Events(0.0, 0.0, 2.0, 1.0, 60.0, inner_mode_at=30.0, inner_mode=then)
    inside = simulate(loop, events).inner
    assert inside is not None
    at = 60
    # exact: what the output may move by on the scan of the change is what the controller itself
    # asks for this error, P by the change of PV (weight 1, setpoint as it was) and I by Ki h e
    moved = abs(inside.output[at] - inside.output[at - 1])
    asked = PI.proportional * abs(inside.pv[at] - inside.pv[at - 1])
    asked += PI.integral * 0.5 * abs(inside.setpoint[at] - inside.pv[at])
    if then == "cascade":
        asked += PI.proportional * abs(inside.setpoint[at] - inside.setpoint[at - 1])
    assert moved <= asked + 1e-9


def test_structures_are_not_run_side_by_side() -> None:
    plant = SLOW.function()
    loop = Structure(plant, plant, PI, scan=0.5, feedforward=Feedforward(-1.0))
    with pytest.raises(InputError, match="are not run side by side"):
        side_by_side([loop, loop], EVENTS)


def test_a_plant_may_change_while_its_model_stays() -> None:
    plant = SLOW.function()
    loop = Structure(plant, NOTHING, PI, scan=0.5, model=plant)
    events = replace(EVENTS, change_at=0.0, gain_factor=1.2, dead_time_factor=1.5)
    other = replace(loop, plant=Lag(1.2 * 1.5, (20.0,), 6.0).function())
    one, wanted = simulate(loop, events), simulate(other, EVENTS)
    assert np.abs(at_scans(one, 0.5)[0] - at_scans(wanted, 0.5)[0]).max() < 1e-12


def test_the_inner_pv_is_what_comes_through_the_valve() -> None:
    inner = Loop(TransferFunction.constant(1.0), NOTHING, Gains(0.2, 0.4), scan=0.5)
    loop = Structure(SLOW.function(), NOTHING, PI, scan=0.5, inner=inner)
    trace = simulate(loop, EVENTS, Instruments(Valve(resolution=0.25)))
    assert trace.inner is not None
    shown, asked = trace.inner.pv[1:], trace.inner.output[:-1]
    assert np.abs(shown / 0.25 - np.round(shown / 0.25)).max() < 1e-9
    assert 0.05 < np.abs(shown - asked).max() < 0.25
