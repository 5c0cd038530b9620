"""Loops side by side against the same loops one by one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm
from workbench.sim.family import side_by_side
from workbench.sim.process import process
from workbench.sim.scans import Clock, Held, step_through
from workbench.sim.scenario import Events
from workbench.sim.signals import Step

EVENTS = Events(2.0, 3.0, -1.5, 60.4, 200.0)


def lag(gain: float, *lags: float, dead_time: float = 0.0) -> TransferFunction:
    return TransferFunction.ratio((gain,), [(t, 1.0) for t in lags], dead_time)


FAMILY = (
    Loop(lag(1.8, 40.0, 8.0, dead_time=8.3), lag(1.0, 5.0), Gains(1.1, 0.03, 4.0, 0.4), scan=1.0),
    Loop(
        lag(-0.7, 12.0, dead_time=3.0), lag(-0.7, 12.0, dead_time=3.0), Gains(2.0, 0.1), False, 1.0
    ),
    Loop(lag(1.2), lag(0.3, dead_time=0.2), Gains(0.1, 0.2), scan=1.0),
    Loop(
        lag(1.0, 20.0, 6.0, 2.0, dead_time=15.0),
        lag(1.0, 20.0, 6.0, 2.0),
        Gains(2.5, 0.06, 8.0, 0.5, 0.4, 1.0),
        scan=1.0,
        pv_filter=1.5,
        low=-1.0,
        high=3.0,
        rate=0.4,
        windup="tracking",
    ),
    Loop(lag(2.0, 30.0), lag(2.0, 30.0), Gains(3.0, 0.2), scan=1.0, high=1.5),
    Loop(
        lag(2.0, 30.0), lag(2.0, 30.0), Gains(3.0, 0.2), scan=1.0, dead_zone=0.4, gain_at_rest=0.5
    ),
)


def test_each_loop_does_what_it_does_alone() -> None:
    # other route: scan by scan in plain numbers
    family = side_by_side(FAMILY, EVENTS)
    for k, loop in enumerate(FAMILY):
        alone = step_through(
            Held(process(loop), Clock(1.0, 0.0)),
            Algorithm.of(loop, 1.0),
            201,
            Step(2.0, 3.0),
            Step(-1.5, 60.4),
        )
        assert family.pv[:, k] == pytest.approx(alone.pv, abs=1e-11)
        assert family.output[:, k] == pytest.approx(alone.outputs, abs=1e-10)


def test_a_loop_that_runs_away_does_not_disturb_the_others() -> None:
    wild = Loop(lag(1.0, 10.0, dead_time=5.0), lag(1.0), Gains(50.0, 5.0), scan=1.0)
    alone = side_by_side(FAMILY, EVENTS)
    family = side_by_side((*FAMILY, wild), EVENTS)
    assert family.diverged.tolist() == [False] * len(FAMILY) + [True]
    assert np.isfinite(family.pv).all()
    assert np.isfinite(family.output).all()
    assert family.pv[:, :-1] == pytest.approx(alone.pv, abs=1e-12)


def test_what_is_not_the_same_for_all_is_refused() -> None:
    plant = lag(1.0, 10.0)
    with pytest.raises(InputError, match="leave out what else happens"):
        side_by_side([Loop(plant, plant, Gains(1.0), scan=1.0, bias=2.0)], EVENTS)
    with pytest.raises(InputError, match="leave out what else happens"):
        side_by_side([Loop(plant, plant, Gains(1.0), scan=1.0)], replace(EVENTS, manual_at=5.0))


def test_loops_of_different_scans_are_refused() -> None:
    plant = lag(1.0, 10.0)
    mixed = [Loop(plant, plant, Gains(1.0), scan=scan) for scan in (1.0, 2.0)]
    with pytest.raises(InputError, match="give all of them the same scan"):
        side_by_side(mixed, EVENTS)
