"""The search for best settings: against brute force, published optima and the exact figures."""

from __future__ import annotations

import random
from dataclasses import dataclass, replace

import numpy as np
import pytest

from tests.model.published import APH98
from tests.tune.searches import batch, ideal, lags, load_iae, margins_of
from workbench.errors import CannotSolve, NotApplicable
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import analogue_margins, sampled_margins
from workbench.model.sweep import Limits
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import settle_horizon, simulate
from workbench.sim.metrics import Measures, measure
from workbench.sim.scenario import Events
from workbench.tune.bench import Aim
from workbench.tune.optimise import best, noise_gain, trade_off

DRYER = lags(1.8, 40.0, dead_time=6.0)


def a_loop(plant: TransferFunction = DRYER, **changes: object) -> Loop:
    return replace(Loop(plant, plant, Gains(1.0)), **changes)  # type: ignore[arg-type]


def measured(loop: Loop) -> Measures:
    """Of unit steps of setpoint and load, by the engine."""
    horizon = settle_horizon(loop)
    events = Events(1.0, 0.0, 1.0, horizon, 2.0 * horizon)
    return measure(simulate(loop, events), events)


def ms_of(loop: Loop) -> float:
    margins = analogue_margins(loop) if loop.scan is None else sampled_margins(loop)
    assert margins.max_sensitivity.value is not None
    return margins.max_sensitivity.value


# --- against other routes ------------------------------------------------------------------------


@pytest.mark.parametrize("name", batch())
def test_every_class_of_the_batch_is_searched(name: str) -> None:
    """Other route for the cost: the engine.  Against grids it is a campaign of its own."""
    plant, derivative = batch()[name][len(batch()[name]) // 2], name in ("P4", "P5")

    found = best([a_loop(plant)], ideal, Aim(Limits(1.6)), derivative=derivative)

    assert found.cost == pytest.approx(load_iae(plant, found.gains), rel=6e-3)
    assert ms_of(a_loop(plant, gains=found.gains)) == pytest.approx(1.6, rel=1e-3)


@dataclass(frozen=True)
class Optimum:
    """PI settings with the largest Ki within a limit on Ms."""

    plant: TransferFunction
    max_sensitivity: float
    gain: float
    integral: float
    """Ki [1/s]."""
    source: str = f"{APH98}, from memory; published value + recomputed"


CUBE = lags(1, 1, 1, 1)
SPREAD = lags(1, 1, 0.2, 0.04, 0.008)
OPTIMA = (
    Optimum(CUBE, 1.4, 0.633, 0.32533279),
    Optimum(CUBE, 2.0, 1.222, 0.68520803),
    Optimum(SPREAD, 1.4, 1.9261, 2.5853691),
    Optimum(SPREAD, 2.0, 4.1326, 6.991372),
)


@pytest.mark.parametrize("row", OPTIMA, ids=lambda row: f"Ms {row.max_sensitivity} {row.gain}")
def test_it_is_no_worse_than_the_published_optimum(row: Optimum) -> None:
    """The published optimum has the least integral of the error; the search the least IAE."""
    aim = Aim(Limits(row.max_sensitivity))

    found = best([a_loop(row.plant)], ideal, aim, derivative=False)

    published = Gains(row.gain, row.integral)
    # The published settings are over the limit by up to 2e-5.
    assert load_iae(row.plant, found.gains) <= 1.003 * load_iae(row.plant, published)
    if load_iae(row.plant, published) * row.integral < 1.001:
        # Without overshoot the two are one problem; its optimum is flat along the limit.
        assert found.gains.integral == pytest.approx(row.integral, rel=0.02)
        assert found.gain == pytest.approx(row.gain, rel=0.05)


@pytest.mark.parametrize(
    ("scan", "share", "derivative"),
    [
        (None, 0.0, True),
        (None, 0.5, False),
        (None, 1.0, False),
        (2.0, 0.0, True),
        (2.0, 1.0, False),
    ],
)
def test_its_cost_is_what_the_engine_measures(
    scan: float | None, share: float, derivative: bool
) -> None:
    loop = a_loop(scan=scan, computing_delay=0.5 if scan else 0.0, pv_filter=2.0)

    found = best([loop], ideal, Aim(Limits(1.6), setpoint_share=share), derivative=derivative)

    seen = measured(replace(loop, gains=found.gains))
    assert seen.load_iae.value is not None
    assert seen.setpoint_iae.value is not None
    cost = (1.0 - share) * seen.load_iae.value + share * seen.setpoint_iae.value
    # A scan: the error of the first scan after a step is seen whole by one and half by the other.
    assert found.cost == pytest.approx(cost, rel=0.02 if scan is None else 0.15)
    assert ms_of(replace(loop, gains=found.gains)) <= 1.001 * 1.6


@pytest.mark.parametrize("derivative", [False, True], ids=["PI", "PID"])
def test_no_small_change_is_better(derivative: bool) -> None:
    """Other route: the engine, on changes of a hundredth that keep the limit."""
    found = best([a_loop()], ideal, Aim(Limits(1.6)), derivative=derivative)
    least, limit = load_iae(DRYER, found.gains), ms_of(a_loop(gains=found.gains))

    draw = random.Random(3)
    for _ in range(40):
        times = [t * (1.0 + draw.uniform(-0.01, 0.01)) for t in (found.integral_time, found.gain)]
        changed = ideal(
            times[1], times[0], found.derivative_time * (1.0 + draw.uniform(-0.01, 0.01))
        )
        ms = margins_of(DRYER, changed).max_sensitivity.value
        if ms is not None and ms <= limit:
            assert load_iae(DRYER, changed) >= 0.997 * least


# --- limits --------------------------------------------------------------------------------------


def test_mt_is_kept() -> None:
    found = best([a_loop()], ideal, Aim(Limits(2.0, 1.1)), derivative=True)

    margins = margins_of(DRYER, found.gains)
    assert margins.max_complementary_sensitivity.value == pytest.approx(1.1, rel=1e-3)


@pytest.mark.parametrize("scan", [None, 1.0], ids=["analogue", "sampled"])
def test_the_noise_gain_is_kept(scan: float | None) -> None:
    loop = a_loop(scan=scan)

    found = best([loop], ideal, Aim(Limits(1.6, noise_gain=2.2)), derivative=True)

    assert noise_gain(replace(loop, gains=found.gains)) == pytest.approx(2.2, rel=2e-3)


def test_a_derivative_that_only_costs_noise_is_left_out() -> None:
    """Exact: with Tf = Td/10 any derivative multiplies noise by 11 gains."""
    aim = Aim(Limits(1.6, noise_gain=2.8))

    with_derivative = best([a_loop()], ideal, aim, derivative=True)

    assert with_derivative == best([a_loop()], ideal, aim, derivative=False)
    assert with_derivative.derivative_time == 0.0


def test_the_travel_is_kept() -> None:
    step = 3.0
    free = best([a_loop()], ideal, Aim(Limits(1.8), load_step=step), derivative=False)
    aim = Aim(Limits(1.8), load_travel=1.2 * step, load_step=step)
    found = best([a_loop()], ideal, aim, derivative=False)

    loop = a_loop(gains=found.gains)
    horizon = settle_horizon(loop)
    events = Events(0.0, 0.0, step, 0.0, horizon)
    travel = measure(simulate(loop, events), events).output_travel.value
    assert travel is not None
    assert 1.17 * step <= travel <= 1.2 * step * 1.005
    assert found.cost > free.cost


def test_a_smaller_limit_costs_more() -> None:
    costs = [
        best([a_loop()], ideal, Aim(Limits(ms)), derivative=False).cost
        for ms in (1.2, 1.4, 1.6, 1.8, 2.0)
    ]

    assert costs == sorted(costs, reverse=True)


# --- families ------------------------------------------------------------------------------------


def test_every_plant_of_a_family_keeps_the_limit() -> None:
    draw = random.Random(5)
    family = [a_loop()]
    for _ in range(29):
        plant = lags(
            1.8 * draw.uniform(0.7, 1.3),
            40.0 * draw.uniform(0.8, 1.2),
            dead_time=6.0 * draw.uniform(0.8, 1.2),
        )
        family.append(a_loop(plant))

    found = best(family, ideal, Aim(Limits(1.7)), derivative=False)

    peaks = [ms_of(replace(loop, gains=found.gains)) for loop in family]
    assert max(peaks) == pytest.approx(1.7, rel=2e-3)
    worst = max(load_iae(loop.plant, found.gains) for loop in family)
    assert found.cost == pytest.approx(worst, rel=0.02)


# --- laws ----------------------------------------------------------------------------------------


def test_twice_the_plant_gain_halves_the_gain_and_twice_the_times_double_the_times() -> None:
    plain = best([a_loop()], ideal, Aim(Limits(1.6)), derivative=True)
    steep = best([a_loop(DRYER * 2.0)], ideal, Aim(Limits(1.6)), derivative=True)
    slow = best([a_loop(DRYER.with_time_unit(2.0))], ideal, Aim(Limits(1.6)), derivative=True)

    assert steep.gain == pytest.approx(plain.gain / 2.0, rel=1e-6)
    assert slow.integral_time == pytest.approx(2.0 * plain.integral_time, rel=1e-6)
    assert slow.derivative_time == pytest.approx(2.0 * plain.derivative_time, rel=1e-6)


@pytest.mark.parametrize(
    ("plant", "limit", "reverse"),
    [
        (TransferFunction.ratio((2.0,), [(20.0, -1.0)], 2.0), 2.5, True),
        (TransferFunction.ratio((0.02,), [(1.0, 0.0)], 5.0), 1.6, True),
        (lags(-2.0, 20.0, dead_time=2.0), 1.6, False),
        (lags(1.0, dead_time=5.0), 1.6, True),
        (lags(1.0, 10.0, 3.0, dead_time=2.0, zero=-6.0), 1.6, True),
    ],
    ids=["unstable", "integrating", "negative", "dead time alone", "inverse"],
)
def test_other_kinds_of_plant(plant: TransferFunction, limit: float, reverse: bool) -> None:
    loop = a_loop(plant, reverse=reverse)

    found = best([loop], ideal, Aim(Limits(limit)), derivative=False)

    assert ms_of(replace(loop, gains=found.gains)) == pytest.approx(limit, rel=2e-3)


@pytest.mark.parametrize(
    ("plant", "limit", "grid"),
    [
        (lags(1, 1000, dead_time=1), 1.2, 1.01 * 0.03187),
        (lags(10, 10, 0.5, dead_time=0.5), 1.4, 1.01 * 4.562),
        (TransferFunction.ratio((1.0,), [(1.0, 0.0)], 1.0), 1.4, 1.01 * 11.27),
    ],
    ids=["lag", "two lags", "integrating"],
)
def test_a_window_of_gains_that_closes_at_the_limit_is_not_left(
    plant: TransferFunction, limit: float, grid: float
) -> None:
    """Other route: the best of a grid.  Here the best lies where the highest window ends."""
    found = best([a_loop(plant)], ideal, Aim(Limits(limit)), derivative=True)

    assert load_iae(plant, found.gains) <= grid
    assert ms_of(a_loop(plant, gains=found.gains)) <= 1.001 * limit


# --- trade-off -----------------------------------------------------------------------------------


@pytest.mark.parametrize("derivative", [False, True], ids=["PI", "PID"])
def test_the_trade_off_is_the_best_at_each_limit(derivative: bool) -> None:
    """Other route: each limit searched alone, from nothing."""
    limits = (1.25, 1.5, 2.0)

    curve = trade_off([a_loop()], ideal, Aim(Limits(1.7)), limits, derivative=derivative)

    assert [limit for limit, _ in curve] == list(limits)
    for limit, found in curve:
        alone = best([a_loop()], ideal, Aim(Limits(limit)), derivative=derivative)
        assert found.cost == pytest.approx(alone.cost, rel=5e-3)
        assert ms_of(a_loop(gains=found.gains)) == pytest.approx(limit, rel=1e-3)


def test_a_derivative_that_only_costs_noise_does_not_shrink_without_end() -> None:
    aim = Aim(Limits(1.7, noise_gain=2.8), setpoint_share=0.3)

    curve = trade_off([a_loop()], ideal, aim, (1.2, 1.5, 1.8, 2.2), derivative=True)

    for _, found in curve:
        assert found.derivative_time == 0.0 or found.derivative_time > 1e-3 * found.integral_time


def test_limits_that_nobody_can_keep_are_not_on_the_trade_off() -> None:
    unstable = TransferFunction.ratio((2.0,), [(20.0, -1.0)], 2.0)

    curve = trade_off([a_loop(unstable)], ideal, Aim(Limits()), (1.1, 2.5, 3.0), derivative=False)

    assert [limit for limit, _ in curve] == [2.5, 3.0]


# --- where there is no answer --------------------------------------------------------------------


def test_limits_nobody_can_keep_are_said_to_be() -> None:
    unstable = TransferFunction.ratio((2.0,), [(20.0, -1.0)], 10.0)

    with pytest.raises(CannotSolve, match="allow a higher Ms"):
        best([a_loop(unstable)], ideal, Aim(Limits(1.3)), derivative=False)


def test_a_gain_that_nothing_limits_is_said_to_be() -> None:
    with pytest.raises(CannotSolve, match="noise gain"):
        best([a_loop(lags(1.8, 40.0))], ideal, Aim(Limits(1.6)), derivative=False)


def test_an_upset_that_grows_for_ever_is_refused() -> None:
    with pytest.raises(NotApplicable, match="integrates more often"):
        best(
            [a_loop(load=TransferFunction.ratio((1.0,), [(1.0, 0.0)]))],
            ideal,
            Aim(Limits(1.6)),
            derivative=False,
        )


def test_it_stops_when_asked_with_the_best_so_far() -> None:
    found = best([a_loop()], ideal, Aim(Limits(1.6)), derivative=True, should_stop=lambda: True)

    assert not found.finished
    assert np.isfinite(found.cost)
    assert ms_of(a_loop(gains=found.gains)) <= 1.6 * 1.001
