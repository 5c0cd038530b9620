"""Many loops side by side: each does what it does alone."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import Trace, simulate, simulate_together
from workbench.sim.scenario import Events

PLANT = TransferFunction.ratio((2.0,), [(10.0, 1.0), (3.0, 1.0)], 2.4)
EVENTS = Events(5.0, 3.0, 4.0, 60.3, 120.0)
NOISE = replace(EVENTS, noise=0.2, seed=7)
GAINS = (
    Gains(0.4),
    Gains(1.2, 0.1),
    Gains(1.5, 0.1, 3.0, 0.3),
    Gains(0.8, 0.05, 2.0, 0.2, 0.3, 1.0),
    # Far beyond the ultimate gain: it runs away where nothing limits it.
    Gains(40.0, 2.0),
)


def _loops(**more: Any) -> list[Loop]:
    whole: dict[str, Any] = {"scan": 1.0, **more}
    plant = whole.pop("plant", PLANT)
    return [Loop(plant, whole.pop("load", plant), gains, **whole) for gains in GAINS]


def _assert_same(found: Trace, alone: Trace) -> None:
    # other route: the loops one after the other; a lively one amplifies the rounding
    assert found.diverged == alone.diverged
    for name in ("time", "setpoint", "pv", "output", "measured"):
        one, other = getattr(found, name), getattr(alone, name)
        assert one.shape == other.shape
        assert one == pytest.approx(other, rel=1e-7, abs=1e-7)


@pytest.mark.parametrize("events", [EVENTS, NOISE], ids=["quiet", "noisy"])
@pytest.mark.parametrize(
    "more",
    [
        {},
        {"computing_delay": 0.3, "pv_filter": 2.0},
        {"low": -3.0, "high": 6.0},
        {"low": -3.0, "high": 6.0, "rate": 0.5, "windup": "tracking"},
        {"low": -3.0, "high": 6.0, "windup": "external-reset"},
        {"rate": 0.4, "reverse": False, "plant": -PLANT},
        {"high": 2.0, "low": -1.0, "reverse": False, "plant": -PLANT},
        {"plant": TransferFunction.ratio((0.02,), [(1.0, 0.0)])},
        {"plant": TransferFunction.ratio((1.0, 0.5), [(4.0, 1.0)], 1.0), "high": 9.0},
    ],
)
def test_side_by_side_is_as_one_after_the_other(events: Events, more: dict[str, Any]) -> None:
    loops = _loops(**more)
    for found, loop in zip(simulate_together(loops, events), loops, strict=True):
        _assert_same(found, simulate(loop, events))


def test_what_runs_away_is_cut_off_and_the_others_go_on() -> None:
    found = simulate_together(_loops(), replace(NOISE, until=2000.0))
    assert [trace.diverged for trace in found] == [False, False, False, False, True]
    assert all(np.isfinite(trace.pv).all() for trace in found)
    assert found[0].time[-1] == 2000.0


def test_loops_of_different_plants_or_without_a_scan_are_followed_one_by_one() -> None:
    analogue = [replace(loop, scan=None) for loop in _loops()[:2]]
    for found, loop in zip(simulate_together(analogue, EVENTS), analogue, strict=True):
        _assert_same(found, simulate(loop, EVENTS))
    mixed = [_loops()[1], _loops(pv_filter=3.0)[1]]
    for found, loop in zip(simulate_together(mixed, NOISE), mixed, strict=True):
        _assert_same(found, simulate(loop, NOISE))
