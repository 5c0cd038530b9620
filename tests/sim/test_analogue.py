"""The analogue loop against the power series in exp(-L s), and its limits against fine steps."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.sim.series import Path, Rational, rational_closed_loop, responses
from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import Trace, simulate
from workbench.sim.scenario import Events

Array = NDArray[np.float64]


def function(gain: float, lags: tuple[float, ...], dead_time: float) -> TransferFunction:
    return TransferFunction.ratio((gain,), [(t, 1.0) if t else (1.0, 0.0) for t in lags], dead_time)


@dataclass(frozen=True)
class Analogue:
    """One checked loop: paths of the plant as (gain, lags, dead time), a lag of 0 an integrator."""

    plant: tuple[tuple[float, tuple[float, ...], float], ...]
    gains: Gains
    dead_times: float
    """How far to look, in dead times of the first path."""
    load: tuple[float, tuple[float, ...], float] | None = None
    options: dict[str, object] = field(default_factory=dict)

    def loop(self) -> Loop:
        plant = function(*self.plant[0])
        for path in self.plant[1:]:
            plant = plant + function(*path)
        load = plant if self.load is None else function(*self.load)
        return Loop(plant, load, self.gains, **self.options)  # type: ignore[arg-type]

    def expected(self, times: list[float], *, upset: bool) -> tuple[list[float], list[float]]:
        paths = [Path(Rational.lags(gain, *lags), late) for gain, lags, late in self.plant]
        load = self.load or self.plant[0]
        loop = self.loop()
        return responses(
            self.gains,
            paths,
            times,
            load=Path(Rational.lags(load[0], *load[1]), load[2]) if upset else None,
            pv_filter=loop.pv_filter,
            sign=loop.sign,
        )


CASES = {
    "dead time alone, integral": Analogue(((1.0, (), 1.0),), Gains(0.0, 0.5), 30.0),
    "dead time alone, PI": Analogue(((1.0, (), 1.0),), Gains(0.5, 0.4), 25.0),
    "first order, PI": Analogue(((1.8, (40.0,), 6.0),), Gains(2.2, 0.06), 16.0),
    "integrating, PI": Analogue(((1.0, (0.0,), 1.0),), Gains(0.5, 0.07), 20.0),
    "two lags, PID": Analogue(((1.8, (40.0, 9.0), 6.0),), Gains(2.0, 0.05, 16.0, 0.8), 12.0),
    "weights, derivative on error": Analogue(
        ((1.0, (1.0,), 1.0),), Gains(0.8, 0.6, 0.3, 0.05, 0.4, 1.0), 8.0
    ),
    "derivative without filter": Analogue(((1.0, (1.0,), 1.0),), Gains(0.5, 0.4, 0.3), 10.0),
    "PV filter, direct action, unfiltered": Analogue(
        ((-1.8, (40.0, 9.0), 6.0),),
        Gains(2.0, 0.05, 16.0),
        8.0,
        options={"reverse": False, "pv_filter": 2.0},
    ),
    "unstable plant": Analogue(((-1.0, (-10.0,), 1.0),), Gains(4.0, 0.1), 15.0),
    "two dead times, load of its own": Analogue(
        ((1.5, (30.0,), 4.0), (-0.5, (9.0,), 7.3)),
        Gains(0.9, 0.04, 3.0, 0.5),
        8.0,
        load=(0.7, (12.0,), 2.5),
    ),
}


def read(trace: Trace, rows: list[int]) -> tuple[Array, Array, list[float]]:
    return trace.pv[rows], trace.output[rows], trace.time[rows].tolist()


def some_rows(trace: Trace, count: int = 40) -> list[int]:
    """Rows spread over the run, away from the jumps, where either side would be right."""
    quiet = np.flatnonzero(np.diff(trace.time) > 1e-5)
    wanted = np.linspace(0.0, trace.time[-1], count + 2)[1:-1] + 0.0137
    return sorted({int(quiet[np.argmin(np.abs(trace.time[quiet] - t))]) for t in wanted})


@pytest.mark.parametrize("upset", [False, True], ids=["setpoint", "load"])
@pytest.mark.parametrize("name", CASES)
def test_pv_and_op_are_those_of_the_power_series(name: str, upset: bool) -> None:
    # other route: every term of the series in exp(-L s) inverted by residues at 60 digits
    case = CASES[name]
    until = case.dead_times * case.plant[0][2]
    events = Events(0.0, 0.0, 1.0, 0.0, until) if upset else Events(1.0, 0.0, 0.0, 0.0, until)
    trace = simulate(case.loop(), events)
    pv, op, times = read(trace, some_rows(trace))
    expected_pv, expected_op = case.expected(times, upset=upset)
    scale = max(1.0, float(np.abs(expected_op).max()))
    assert pv == pytest.approx(np.array(expected_pv), abs=1e-7 * scale)
    assert op == pytest.approx(np.array(expected_op), abs=1e-7 * scale)


@pytest.mark.parametrize("dead_time", [0.0, 1e-10, 1e-7])
def test_no_dead_time_and_hardly_any_are_the_closed_form(dead_time: float) -> None:
    # other route: residues of the closed loop, a rational function without dead time
    gains = Gains(2.0, 0.05, 16.0, 0.8)
    plant = function(1.8, (40.0, 9.0), dead_time)
    trace = simulate(Loop(plant, plant, gains, pv_filter=1.5), Events(1.0, 0.0, 0.0, 0.0, 400.0))
    rows = some_rows(trace)
    expected = rational_closed_loop(
        gains, Rational.lags(1.8, 40.0, 9.0), trace.time[rows].tolist(), pv_filter=1.5
    )
    assert trace.pv[rows] == pytest.approx(np.array(expected), abs=1e-7)


def test_pv_jumps_and_answers_at_the_same_instant() -> None:
    # exact: plant 2 without lag, integral alone: PV = 1 - exp(-2 Ki t)
    plant = TransferFunction.constant(2.0)
    trace = simulate(Loop(plant, plant, Gains(0.0, 0.05)), Events(1.0, 0.0, 0.0, 0.0, 60.0))
    assert trace.pv == pytest.approx(1.0 - np.exp(-0.1 * trace.time), abs=1e-9)


def test_dead_time_far_shorter_than_the_lags_changes_the_answer_by_as_little() -> None:
    # exact to first order: the change is proportional to the dead time
    gains = Gains(2.0, 0.05, 16.0, 0.8)
    events = Events(1.0, 0.0, 0.0, 0.0, 400.0)
    grid = np.linspace(1.0, 399.0, 200)

    def answer(dead_time: float) -> Array:
        plant = function(1.8, (40.0, 9.0), dead_time)
        trace = simulate(Loop(plant, plant, gains), events)
        return np.interp(grid, trace.time, trace.pv)

    none, small, smaller = answer(0.0), answer(2e-2), answer(1e-2)
    assert np.abs(small - none).max() == pytest.approx(2 * np.abs(smaller - none).max(), rel=0.05)


def test_many_lags_and_many_time_scales_are_followed() -> None:
    # other route: residues at 60 digits, far apart and repeated poles together
    gains = Gains(0.6, 0.02)
    plant = function(1.0, (30.0, 5.0, 5.0, 5.0, 0.01), 0.0)
    trace = simulate(Loop(plant, plant, gains), Events(1.0, 0.0, 0.0, 0.0, 300.0))
    rows = some_rows(trace)
    expected = rational_closed_loop(
        gains, Rational.lags(1.0, 30.0, 5.0, 5.0, 5.0, 0.01), trace.time[rows].tolist()
    )
    assert trace.pv[rows] == pytest.approx(np.array(expected), abs=1e-7)


def test_setpoint_and_load_add_up_wherever_they_fall() -> None:
    # exact: the loop is linear
    case = CASES["two lags, PID"]
    loop, grid = case.loop(), np.linspace(0.5, 119.5, 100)
    both = simulate(loop, Events(2.0, 10.3, -1.5, 47.9, 120.0))
    setpoint = simulate(loop, Events(2.0, 10.3, 0.0, 0.0, 120.0))
    load = simulate(loop, Events(0.0, 0.0, -1.5, 47.9, 120.0))
    together = np.interp(grid, both.time, both.pv)
    apart = np.interp(grid, setpoint.time, setpoint.pv) + np.interp(grid, load.time, load.pv)
    assert together == pytest.approx(apart, abs=2e-4)  # straight lines between different rows


def test_a_late_upset_is_felt_after_many_echoes_of_the_setpoint_step() -> None:
    # exact: the loop is linear; PV jumps with the output, and each jump comes back every 0.01 s
    plant = TransferFunction.ratio((0.9, 1.0), [(1.0, 1.0)], 0.01) + function(0.3, (4.0,), 7.0)
    loop = Loop(plant, plant, Gains(1.0, 0.05))
    both = simulate(loop, Events(1.0, 0.0, 1.0, 20.0, 40.0))
    setpoint = simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 40.0))
    load = simulate(loop, Events(0.0, 0.0, 1.0, 20.0, 40.0))
    grid = np.linspace(24.0, 39.0, 40)
    apart = sum(np.interp(grid, run.time, run.pv) for run in (setpoint, load))
    assert np.interp(grid, both.time, both.pv) == pytest.approx(apart, abs=1e-4)
    assert np.interp(24.0, load.time, load.pv) > 0.3


def test_rows_are_rising_and_jumps_have_two() -> None:
    trace = simulate(CASES["first order, PI"].loop(), Events(1.0, 20.0, 1.0, 60.0, 120.0))
    assert (np.diff(trace.time) > 0.0).all()
    jump = int(np.searchsorted(trace.time, 20.0))
    assert trace.time[jump] == 20.0
    assert trace.output[jump] == pytest.approx(2.2)
    assert trace.output[jump - 1] == 0.0
    assert trace.time[jump - 1] == pytest.approx(20.0, abs=1e-3)
    assert trace.time[-1] == 120.0
    assert len(trace.time) >= 3000


# --- limits --------------------------------------------------------------------------------------


def by_fine_steps(high: float, rate: float, windup: str) -> tuple[Array, Array, Array]:
    """PI on 1/(10 s + 1) exp(-2 s) with limits: Heun steps of 1/500 s, a route of its own."""
    h, dead, kp, ki, step = 1.0 / 500.0, 1000, 3.0, 0.3, 1.0
    count = int(60.0 / h)
    y, i = 0.0, 0.0
    u = np.zeros(count + 1)
    pv = np.zeros(count + 1)
    output = 0.0
    for k in range(count + 1):
        pv[k] = y
        error = step - y
        wanted = kp * error + i
        most = min(high, output + rate * h) if np.isfinite(rate) else high
        limited = min(wanted, most)
        if windup == "conditional":
            if not (wanted > most and error > 0.0):
                i += h * ki * error
        else:  # tracking in the time Ti
            i += h * (ki * error + (limited - wanted) * ki / kp)
        output = u[k] = limited
        a = u[k - dead] if k >= dead else 0.0
        b = u[k + 1 - dead] if k + 1 >= dead else 0.0
        slope = (a - y) / 10.0
        y += 0.5 * h * (slope + (b - y - h * slope) / 10.0)
    return np.linspace(0.0, count * h, count + 1), pv, u


@pytest.mark.parametrize(
    ("high", "rate", "windup"),
    [(1.6, np.inf, "conditional"), (1.6, np.inf, "tracking"), (5.0, 0.4, "conditional")],
)
def test_limits_are_followed_to_a_thousandth(high: float, rate: float, windup: str) -> None:
    # other route: the same loop written out in short steps
    plant = function(1.0, (10.0,), 2.0)
    loop = Loop(
        plant,
        plant,
        Gains(3.0, 0.3),
        high=high,
        rate=None if np.isinf(rate) else rate,
        windup=windup,
    )
    trace = simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 60.0))
    time, pv, _ = by_fine_steps(high, rate, windup)
    assert np.interp(time, trace.time, trace.pv) == pytest.approx(pv, abs=1e-3)
    assert trace.output.max() <= high


def test_limits_that_are_not_met_leave_the_exact_answer() -> None:
    case = CASES["first order, PI"]
    events = Events(1.0, 0.0, 1.0, 50.0, 120.0)
    free = simulate(case.loop(), events)
    wide = simulate(Analogue(case.plant, case.gains, 1.0, options={"high": 9.0}).loop(), events)
    assert wide.pv.tolist() == free.pv.tolist()


# --- what is refused -----------------------------------------------------------------------------


def test_impulses_are_refused_in_words() -> None:
    plant, events = function(1.0, (5.0,), 1.0), Events(1.0, 0.0, 1.0, 5.0, 20.0)
    on_error = Loop(plant, plant, Gains(1.0, 0.1, 2.0, derivative_weight=1.0))
    with pytest.raises(InputError, match="give a derivative filter, or put the derivative on PV"):
        simulate(on_error, events)
    jumping = Loop(plant, TransferFunction.constant(1.0), Gains(1.0, 0.1, 2.0))
    with pytest.raises(InputError, match="impulse where PV jumps"):
        simulate(jumping, events)


def test_noise_on_an_analogue_controller_is_refused() -> None:
    plant = function(1.0, (5.0,), 1.0)
    with pytest.raises(InputError, match="give the controller a scan"):
        simulate(Loop(plant, plant, Gains(1.0)), Events(1.0, 0.0, 0.0, 0.0, 20.0, noise=0.1))


def test_an_answer_without_end_is_refused() -> None:
    # exact: plant -1 without lag, gain 1: u = 1 (r + u) has no solution
    plant = TransferFunction.constant(-1.0)
    with pytest.raises(InputError, match="answer each other at the same instant"):
        simulate(Loop(plant, plant, Gains(1.0)), Events(1.0, 0.0, 0.0, 0.0, 20.0))


def test_an_unstable_loop_is_cut_off_while_it_is_finite() -> None:
    plant = function(1.0, (20.0,), 10.0)
    trace = simulate(Loop(plant, plant, Gains(20.0, 1.0)), Events(1.0, 0.0, 1.0, 500.0, 5000.0))
    assert trace.diverged
    assert (np.diff(trace.time) >= 0.0).all()
    assert np.isfinite(trace.pv).all()
    assert 1e2 < np.abs(trace.pv).max() <= 1e6
    assert trace.time[-1] < 500.0


def test_the_end_of_a_limited_trend_is_there_whatever_it_is() -> None:
    """Other route: the same trend looked at for longer; its end does not lie on a step."""
    plant = function(1.8, (40.0,), 6.0)
    loop = Loop(plant, plant, Gains(2.0, 0.05), low=-1.0, high=1.0)
    short, long = (simulate(loop, Events(3.0, 22 / 3, 0.0, 0.0, end)) for end in (20.0, 40.0))
    assert short.time[-1] == 20.0
    assert short.pv[-1] == pytest.approx(np.interp(20.0, long.time, long.pv), abs=5e-6)
