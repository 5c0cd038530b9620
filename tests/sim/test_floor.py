"""Floors: closed forms; the campaigns against controllers and optimisers are in `floors`."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import pytest

from tests.sim.floors import Task, Way
from workbench.model.feedforward import ideal_feedforward
from workbench.model.pid import Gains
from workbench.model.structures import Structure
from workbench.sim.floor import Floor, floor
from workbench.sim.instruments import Instruments
from workbench.sim.scenario import Events
from workbench.sim.valve import Valve
from workbench.units import Figure

LAG = Way(1.8, (40.0,), 6.0)


def of(task: Task, **events: Any) -> Floor:
    return floor(task.loop(), replace(task.events, **events))


def value(figure: Figure) -> float:
    assert figure.value is not None, figure.reason
    return figure.value


def test_without_limits_only_the_dead_time_counts() -> None:
    # exact: the load shows after 6 s, the first move 6 s later: 9 (1 - exp(-t/40)) for 6 s
    found = of(Task(LAG))
    assert value(found.peak_deviation) == pytest.approx(9 * -math.expm1(-6 / 40), rel=1e-9)
    area = 9 * (6 - 40 * -math.expm1(-6 / 40))
    assert value(found.load_iae) == pytest.approx(area, rel=1e-4)
    assert value(found.acts_after) == 12.0
    assert found.fixed_peak == found.peak_deviation


@pytest.mark.parametrize("scan", [1.0, 2.0, 4.0])
def test_the_scan_is_waited_for(scan: float) -> None:
    # exact: PV begins to move at 6 s, the first scan to see it is the next after that
    seen = (6 // scan + 1) * scan
    found = of(Task(LAG, scan=scan, computing_delay=0.5))
    assert value(found.acts_after) == pytest.approx(seen + 0.5 + 6.0)
    peak = 9 * -math.expm1(-(seen + 0.5) / 40)
    assert value(found.peak_deviation) == pytest.approx(peak, rel=1e-9)


def test_a_limited_output_brings_an_integrator_back_in_a_triangle() -> None:
    # exact: 0.25 %/s for 4 s is 1 %; at -20 % of OP it falls by 0.75 %/s: 1 1.3333/2 % s more
    found = of(Task(Way(0.05, (), 4.0, integrators=1), low=-20.0, high=20.0))
    assert value(found.peak_deviation) == pytest.approx(1.0, rel=1e-6)
    assert 0.99 * (2.0 + 2.0 / 3.0) < value(found.load_iae) <= 2.0 + 2.0 / 3.0


def test_a_limited_output_brings_a_lag_back_along_its_own_curve() -> None:
    # exact: from 9 (1 - exp(-6/40)) towards 1.8 (5 - 6) = -1.8 until it is at 0, area T (y - ...)
    start = 9 * -math.expm1(-6 / 40)
    back = 40 * math.log((start + 1.8) / 1.8)
    area = 40 * (start + 1.8) * -math.expm1(-back / 40) - 1.8 * back
    exact = 9 * (6 - 40 * -math.expm1(-6 / 40)) + area
    found = value(of(Task(LAG, low=-6.0, high=6.0)).load_iae)
    assert 0.98 * exact < found <= exact


def test_an_upset_beyond_the_limits_stays() -> None:
    # exact: 1.8 (5 - 4) % for good
    found = of(Task(LAG, low=-4.0, high=4.0))
    assert value(found.peak_deviation) == pytest.approx(1.8, rel=1e-3)


def test_a_zero_on_the_right_costs_what_its_transform_says() -> None:
    # exact: G(1/z) = 0 fixes integral exp(-t/5) y dt = 0 for a load at the plant's input; what
    # the first 2 s after it shows leave has to be made good, at once at best
    plant = Way(1.0, (20.0, 8.0), 2.0, (-5.0,))
    found = of(Task(plant))
    z, a, b = 0.2, 1 / 20, 1 / 8

    def transform(rate: float) -> float:
        return -math.expm1(-(z + rate) * 2.0) / (z + rate)

    # y = 5 (1 + r_a exp(-a t) + r_b exp(-b t)) from the partial fractions of the step answer
    r_a, r_b = -(1 + 5 * a) * b / (b - a), (1 + 5 * b) * a / (b - a)
    lacking = -5.0 * (transform(0.0) + r_a * transform(a) + r_b * transform(b))
    beyond = value(found.load_iae) - value(found.fixed_iae)
    assert beyond == pytest.approx(abs(lacking) * math.exp(z * 2.0), rel=1e-6)


def test_a_measured_upset_is_known_at_once() -> None:
    # exact: known at the first scan, at 0 s, and shown 2 s later; the load shows from 9 s on
    plant, load = Way(1.0, (10.0,), 2.0), Way(2.0, (20.0,), 9.0)
    task = Task(plant, load, 1.0)
    single = task.loop()
    forward = ideal_feedforward(single.plant, single.load).feedforward
    loop = Structure(single.plant, single.load, Gains(1.0), scan=1.0, feedforward=forward)
    found = floor(loop, task.events)
    assert value(found.acts_after) == 2.0
    assert value(found.fixed_peak) == 0.0
    assert value(found.load_iae) < 0.1 * value(floor(single, task.events).load_iae)


def test_compensation_does_not_lower_the_floor() -> None:
    task = Task(LAG, scan=1.0)
    single = task.loop()
    whole = Structure(single.plant, single.load, Gains(1.0), scan=1.0, model=single.plant)
    assert floor(whole, task.events) == floor(single, task.events)


def test_a_settled_setpoint_step_moves_the_limits() -> None:
    # exact: 18 % of PV takes 10 % of OP, which leaves 10 of 20 % upwards
    low_down = of(Task(LAG, scan=1.0, low=-10.0, high=10.0, size=-5.0))
    moved = Task(LAG, scan=1.0, low=-20.0, high=20.0, size=-5.0)
    events = Events(18.0, 0.0, -5.0, 600.0, 1200.0)
    found = value(floor(moved.loop(), events).load_iae)
    assert found == pytest.approx(value(low_down.load_iae), rel=1e-3)


@pytest.mark.parametrize(
    ("task", "events", "words"),
    [
        (Task(LAG), {"load_step": 0.0}, "no load step"),
        (Task(LAG), {"manual_at": 10.0}, "in automatic"),
        (Task(LAG), {"setpoint_step": 5.0, "setpoint_at": 100.0}, "setpoint stands still"),
        (
            Task(LAG, low=-1.0, high=1.0),
            {"setpoint_step": 50.0, "load_at": 300.0},
            "cannot be held",
        ),
    ],
)
def test_what_is_not_known_says_why(task: Task, events: dict[str, Any], words: str) -> None:
    found = of(task, **events)
    assert found.load_iae.value is None
    assert words in found.load_iae.reason


def test_nothing_is_claimed_for_a_valve_that_is_not_linear() -> None:
    task = Task(LAG)
    crooked = Instruments(valve=Valve(characteristic="equal-percentage"))
    assert "linear valve" in floor(task.loop(), task.events, crooked).peak_deviation.reason


def test_a_floor_grows_with_dead_time_scan_and_tighter_limits() -> None:
    floors = [
        value(of(task).load_iae)
        for task in (
            Task(LAG, low=-20.0, high=20.0),
            Task(LAG, scan=1.0, low=-20.0, high=20.0),
            Task(LAG, scan=4.0, low=-20.0, high=20.0),
            Task(replace(LAG, dead_time=12.0), scan=4.0, low=-20.0, high=20.0),
            Task(replace(LAG, dead_time=12.0), scan=4.0, low=-7.0, high=7.0),
        )
    ]
    assert floors == sorted(floors)
