"""The sampled loop against an independent recursion on the exact plant step response."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from mpmath import mpf, workdps

from tests.sim.series import Rational, value_at
from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm
from workbench.sim.leaps import run
from workbench.sim.loop import Trace, simulate
from workbench.sim.process import process
from workbench.sim.scans import Clock, Held, step_through
from workbench.sim.scenario import Events
from workbench.sim.signals import Step


@dataclass(frozen=True)
class Term:
    """gain times (lead s + 1) exp(-dead_time s) over lags (0: an integrator)."""

    gain: float
    lags: tuple[float, ...]
    dead_time: float
    lead: float = 0.0

    def function(self) -> TransferFunction:
        factors = [(t, 1.0) if t else (1.0, 0.0) for t in self.lags]
        return TransferFunction.ratio((self.gain * self.lead, self.gain), factors, self.dead_time)

    def rational(self) -> Rational:
        whole = Rational.lags(self.gain, *self.lags)
        return whole * Rational.polynomial(mpf(self.lead), mpf(1)) if self.lead else whole


@dataclass(frozen=True)
class Sampled:
    """One checked loop."""

    plant: tuple[Term, ...]
    gains: Gains
    scan: float
    load: Term | None = None
    options: dict[str, object] | None = None
    until: float = 60.0
    load_at: float = 31.3
    setpoint_at: float = 2.4

    def loop(self) -> Loop:
        plant = self.plant[0].function()
        for term in self.plant[1:]:
            plant = plant + term.function()
        load = plant if self.load is None else self.load.function()
        return Loop(plant, load, self.gains, scan=self.scan, **(self.options or {}))  # type: ignore[arg-type]


def step_response(terms: tuple[Term, ...], times: list[float]) -> list[float]:
    """Exact answers to a unit step at 0, dead times included: residues at 40 digits."""
    with workdps(40):
        inverses = [(term.rational() * Rational.lags(1.0, 0.0)).inverse() for term in terms]
        return [
            float(
                sum(
                    value_at(inverse, mpf(t) - mpf(term.dead_time))
                    for inverse, term in zip(inverses, terms, strict=True)
                    if t > term.dead_time
                )
            )
            for t in times
        ]


def by_hand(case: Sampled, events: Events, offset: float = 0.0) -> tuple[list[float], list[float]]:
    """PV (at `offset` after each scan) and OP: plain sums over all earlier moves of the output."""
    loop, h, g = case.loop(), case.scan, case.gains
    count = math.floor(events.until / h + 1e-9) + 1
    delay = loop.computing_delay
    answers = step_response(case.plant, [i * h - delay for i in range(count)])
    between = step_response(case.plant, [i * h - delay + offset for i in range(count)])
    source = case.plant if case.load is None else (case.load,)
    upset = step_response(source, [i * h - events.load_at for i in range(count)])
    late = step_response(source, [i * h + offset - events.load_at for i in range(count)])
    kept = math.exp(-h / loop.pv_filter) if loop.pv_filter else 0.0
    moves: list[float] = []
    outputs: list[float] = []
    shown: list[float] = []
    filtered = integral = derivative = before = last = 0.0
    for i in range(count):
        past = sum(moves[j] * answers[i - j] for j in range(i))
        y = past + events.load_step * upset[i]
        r = events.setpoint_step if i * h >= events.setpoint_at - 1e-9 else 0.0
        filtered = kept * filtered + (1.0 - kept) * y
        integral += g.integral * h * (r - filtered)
        change = (g.derivative_weight * r - filtered) - before
        before += change
        derivative = (g.filter_time * derivative + g.derivative * change) / (g.filter_time + h)
        p = g.proportional * (g.setpoint_weight * r - filtered)
        u = loop.sign * (p + integral + derivative)
        moves.append(u - last)
        last = u
        outputs.append(u)
        whole = sum(moves[j] * between[i - j] for j in range(i + 1))
        shown.append(whole + events.load_step * late[i])
    return shown, outputs


CASES = {
    "first order, fraction of a scan": Sampled((Term(1.8, (40.0,), 6.37),), Gains(3.0, 0.09), 1.0),
    "two lags, PID, computing delay": Sampled(
        (Term(1.8, (40.0, 8.0), 6.0),),
        Gains(2.0, 0.05, 16.0, 0.8),
        1.0,
        options={"computing_delay": 0.3},
    ),
    "PV filter, weights, derivative on error": Sampled(
        (Term(1.2, (20.0, 3.0), 2.5),),
        Gains(1.5, 0.06, 3.0, 0.4, 0.3, 1.0),
        0.7,
        options={"pv_filter": 2.0},
    ),
    "integrating, direct action": Sampled(
        (Term(-0.05, (0.0,), 4.0),),
        Gains(2.0, 0.04),
        1.0,
        options={"reverse": False, "computing_delay": 1.0},
    ),
    "dead time alone": Sampled((Term(1.0, (), 3.3),), Gains(0.1, 0.1), 1.0),
    "two dead times": Sampled(
        (Term(1.5, (30.0,), 2.2), Term(-0.6, (9.0,), 7.9)), Gains(1.0, 0.03, 2.0, 0.5), 1.0
    ),
    "two dead times within a scan": Sampled(
        (Term(1.5, (30.0,), 2.2), Term(-0.6, (9.0,), 2.6)), Gains(1.0, 0.03), 4.0
    ),
    "unstable plant, shared by the load": Sampled(
        (Term(-1.0, (-10.0,), 1.0),),
        Gains(4.0, 0.1),
        0.5,
        load=Term(-0.4, (-10.0, 3.0), 0.4),
    ),
    "load of its own, inverse response": Sampled(
        (Term(1.0, (12.0, 5.0), 1.0, lead=-4.0),),
        Gains(0.8, 0.04),
        2.0,
        load=Term(0.7, (4.0,), 0.0),
    ),
    "slow scan": Sampled((Term(1.0, (3.0,), 1.0),), Gains(0.3, 0.05), 5.0),
}


def events(case: Sampled, setpoint: float = 1.0, load: float = 1.0) -> Events:
    return Events(setpoint, case.setpoint_at, load, case.load_at, case.until)


def at_scans(trace: Trace, case: Sampled, offset: float = 0.0) -> tuple[list[float], list[float]]:
    count = math.floor(case.until / case.scan + 1e-9) + 1
    times = np.arange(count) * case.scan + offset
    times = times[times <= case.until + 1e-9]
    rows = [int(np.argmin(np.abs(trace.time - t))) for t in times]
    assert trace.time[rows] == pytest.approx(times, abs=1e-9)
    return trace.pv[rows].tolist(), trace.output[rows].tolist()


@pytest.mark.parametrize("name", CASES)
def test_pv_and_op_at_every_scan(name: str) -> None:
    # other route: the step response by residues at 40 digits, summed over all moves
    case = CASES[name]
    pv, op = at_scans(simulate(case.loop(), events(case)), case)
    expected_pv, expected_op = by_hand(case, events(case))
    delay = case.loop().computing_delay
    if delay:  # the row at a scan shows what is still in force
        expected_op = [0.0, *expected_op[:-1]]
    scale = max(1.0, *map(abs, expected_op))
    assert pv == pytest.approx(expected_pv, abs=1e-9)
    assert op == pytest.approx(expected_op, abs=1e-9 * scale)


@pytest.mark.parametrize("name", ["slow scan", "two dead times within a scan"])
def test_pv_between_slow_scans_is_exact_too(name: str) -> None:
    # other route: as above, read about half a scan later
    case = replace(CASES[name], load_at=31.25)
    trace = simulate(case.loop(), events(case))
    offset = float(trace.time[trace.time > 0][len(trace.time[trace.time < case.scan]) // 2])
    pv, _ = at_scans(trace, case, offset)
    expected, _ = by_hand(case, events(case), offset)
    assert pv == pytest.approx(expected[: len(pv)], abs=1e-9)


@pytest.mark.parametrize("name", CASES)
def test_leaping_and_stepping_agree(name: str) -> None:
    # other route: one in powers of a matrix, one scan by scan
    loop = CASES[name].loop()
    assert loop.scan is not None
    held = Held(process(loop), Clock(loop.scan, loop.computing_delay))
    algorithm = Algorithm.of(loop, loop.scan)
    happening = (Step(1.0, 2.4), Step(-0.5, 31.3))
    leapt, stepped = (
        run(held, algorithm, 120, *happening),
        step_through(held, algorithm, 120, *happening),
    )
    assert leapt.pv == pytest.approx(stepped.pv, abs=1e-10)
    assert leapt.outputs == pytest.approx(stepped.outputs, abs=1e-9)
    assert leapt.states == pytest.approx(stepped.states, abs=1e-9)


def test_an_upset_is_the_same_scan_by_scan_and_at_once() -> None:
    # exact: a step of 2 on a lag adds 2 (1 - exp(-h/T)) to PV in every scan from its own on, and
    # less in that one, of which only 0.7 is left
    plant = TransferFunction.ratio((1.0,), [(10.0, 1.0)])
    held = Held(process(Loop(plant, plant, Gains(1.0))), Clock(1.0, 0.0))
    upset = held.upset((Step(2.0, 3.3), Step(-2.0, 7.0)), 12, 1.0)
    pushes, direct = upset.over(0, 12)
    whole, part = -2.0 * math.expm1(-0.1), -2.0 * math.expm1(-0.07)
    expected = [0.0] * 3 + [part] + [whole] * 3 + [0.0] * 5
    assert pushes @ held.process.c == pytest.approx(expected, abs=1e-15)
    assert not direct.any()
    one_by_one = [*upset.scans(2, 9)]
    assert [pushed for pushed, _ in one_by_one] == pushes[2:9].tolist()
    spliced = upset.until(4, held.upset((Step(1.0, 0.0),), 12, 1.0))
    assert spliced.over(0, 4)[0].tolist() == pushes[:4].tolist()
    assert np.ptp(spliced.over(4, 12)[0]) == 0.0


def test_setpoint_is_seen_at_the_next_scan_and_upset_at_its_instant() -> None:
    lag = TransferFunction.ratio((1.0,), [(10.0, 1.0)])
    loop = Loop(lag, lag, Gains(2.0), scan=4.0)
    trace = simulate(loop, Events(1.0, 5.0, 0.0, 0.0, 20.0))
    assert trace.output[np.searchsorted(trace.time, 7.99) - 1] == 0.0
    assert trace.output[np.searchsorted(trace.time, 8.0)] == 2.0
    assert trace.setpoint[np.searchsorted(trace.time, 5.0)] == 1.0

    trace = simulate(loop, Events(0.0, 0.0, 1.0, 5.0, 20.0))
    # exact: PV = 1 - exp(-t/10) from the upset until the scan at 8 s answers
    assert np.interp(8.0, trace.time, trace.pv) == pytest.approx(1.0 - math.exp(-0.3), abs=1e-12)


def test_a_setpoint_step_on_a_scan_is_seen_by_that_scan() -> None:
    lag = TransferFunction.ratio((1.0,), [(10.0, 1.0)])
    trace = simulate(Loop(lag, lag, Gains(2.0), scan=0.1), Events(1.0, 0.3, 0.0, 0.0, 2.0))
    assert trace.output[np.argmin(np.abs(trace.time - 0.3))] == 2.0


def test_rows_are_rising_and_hold_every_scan() -> None:
    for case in CASES.values():
        trace = simulate(case.loop(), events(case))
        assert (np.diff(trace.time) > 0.0).all()
        assert trace.time[0] == 0.0
        assert trace.time[-1] == pytest.approx(case.until, abs=1e-9)


# --- noise ---------------------------------------------------------------------------------------


def test_noise_is_the_seed_s_and_is_on_the_measurement_alone() -> None:
    case = CASES["two lags, PID, computing delay"]
    quiet = simulate(case.loop(), events(case))
    noisy = replace(events(case), noise=0.2, seed=7)
    first, again = simulate(case.loop(), noisy), simulate(case.loop(), noisy)
    other = simulate(case.loop(), replace(noisy, seed=8))
    assert first.measured.tolist() == again.measured.tolist()
    assert first.output.tolist() == again.output.tolist()
    assert first.measured.tolist() != other.measured.tolist()
    assert quiet.measured.tolist() == quiet.pv.tolist()
    # PV feels the noise only through the controller; a plant with its lags lets little of it pass.
    assert float(np.std(first.measured - first.pv)) == pytest.approx(0.2, rel=0.25)
    assert float(np.std(first.pv - quiet.pv)) < 0.1


def test_noise_without_a_controller_leaves_pv_alone() -> None:
    lag = TransferFunction.ratio((1.0,), [(10.0, 1.0)])
    loop = Loop(lag, lag, Gains(0.0), scan=1.0)
    trace = simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 4000.0, noise=0.5, seed=3))
    assert not trace.pv.any()
    # exact: standard deviation and mean of white noise; 4000 samples leave 4 sigma of 4.5 %
    assert float(np.std(trace.measured)) == pytest.approx(0.5, rel=0.045)
    assert abs(float(np.mean(trace.measured))) < 4 * 0.5 / math.sqrt(4000)


# --- limits --------------------------------------------------------------------------------------


@given(
    gain=st.floats(0.2, 6.0),
    integral_time=st.floats(3.0, 60.0),
    weight=st.floats(0.0, 1.0),
    dead_time=st.floats(0.0, 8.0),
    high=st.floats(0.6, 3.0),
    reverse=st.booleans(),
    computing_delay=st.floats(0.0, 1.0),
)
def test_the_output_leaves_its_limit_within_a_scan_of_the_error_s_change_of_sign(
    gain: float,
    integral_time: float,
    weight: float,
    dead_time: float,
    high: float,
    reverse: bool,
    computing_delay: float,
) -> None:
    # exact: while the error keeps its sign the integral does not pass what fills the limit, and the
    # proportional part has come down since
    sign = 1.0 if reverse else -1.0
    plant = TransferFunction.ratio((sign * 1.0,), [(20.0, 1.0)], dead_time)
    loop = Loop(
        plant,
        plant,
        Gains(gain, gain / integral_time, setpoint_weight=weight),
        reverse=reverse,
        scan=1.0,
        low=-high,
        high=high,
        computing_delay=computing_delay,
    )
    held = Held(process(loop), Clock(1.0, computing_delay))
    course = run(held, Algorithm.of(loop, 1.0), 150, Step(0.5, 0.0), Step(0.0, 0.0))
    assert np.abs(course.outputs).max() <= high
    error = 0.5 - course.pv
    for limit in (-high, high):
        # The error that drives the output to this limit has this sign.
        driving = math.copysign(1.0, limit) * sign
        at_limit = course.outputs == limit
        turned = driving * error <= 0.0
        assert not (at_limit[1:] & turned[1:] & turned[:-1]).any()


@pytest.mark.parametrize("windup", ["conditional", "tracking", "external-reset"])
def test_a_limited_output_does_not_wind_up(windup: str) -> None:
    # common practice: with a limit at 1.2 times what the end needs, the overshoot stays modest;
    # an integral that winds up makes it several times as large
    plant = TransferFunction.ratio((1.0,), [(20.0, 1.0)], 4.0)
    loop = Loop(plant, plant, Gains(4.0, 0.4), scan=1.0, high=12.0, windup=windup)
    trace = simulate(loop, Events(10.0, 0.0, 0.0, 0.0, 400.0))
    assert trace.output.max() == 12.0
    assert trace.pv.max() < 11.2
    assert trace.pv[-1] == pytest.approx(10.0, abs=0.01)


def test_the_rate_limit_makes_a_staircase() -> None:
    plant = TransferFunction.ratio((1.0,), [(20.0, 1.0)])
    loop = Loop(plant, plant, Gains(10.0), scan=2.0, rate=0.5)
    trace = simulate(loop, Events(10.0, 0.0, 0.0, 0.0, 20.0))
    rows = [int(np.argmin(np.abs(trace.time - t))) for t in (0.0, 2.0, 4.0, 6.0)]
    # exact: 0.5 %/s for 2 s at every scan
    assert trace.output[rows].tolist() == [1.0, 2.0, 3.0, 4.0]


# --- bounds --------------------------------------------------------------------------------------


@pytest.mark.parametrize("noise", [0.0, 0.1])
def test_an_unstable_loop_is_cut_off_while_it_is_finite(noise: float) -> None:
    plant = TransferFunction.ratio((1.0,), [(20.0, 1.0)], 10.0)
    loop = Loop(plant, plant, Gains(20.0, 1.0), scan=1.0)
    trace = simulate(loop, Events(1.0, 0.0, 1.0, 500.0, 5000.0, noise=noise))
    assert trace.diverged
    assert np.isfinite(trace.pv).all()
    assert np.isfinite(trace.output).all()
    assert 1e3 < np.abs(trace.pv).max() <= 1e6
    assert trace.time[-1] < 1000.0


def test_too_many_scans_are_refused_in_words() -> None:
    plant = TransferFunction.ratio((1.0,), [(20.0, 1.0)])
    with pytest.raises(InputError, match="give an earlier end, or a longer scan"):
        simulate(Loop(plant, plant, Gains(1.0), scan=0.01), Events(1.0, 0.0, 0.0, 0.0, 1e5))


def test_a_plant_without_gain_rests() -> None:
    nothing = TransferFunction.constant(0.0)
    trace = simulate(Loop(nothing, nothing, Gains(1.0), scan=1.0), Events(1.0, 0.0, 1.0, 5.0, 10.0))
    assert not trace.pv.any()
