"""Plant and load path in one state."""

from __future__ import annotations

import numpy as np
import pytest

from workbench.errors import ModelError
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.process import Entry, Process, process


def lag(gain: float, *times: float, dead_time: float = 0.0) -> TransferFunction:
    return TransferFunction.ratio(
        (gain,), [(t, 1.0) if t else (1.0, 0.0) for t in times], dead_time
    )


def value(whole: Process, entries: tuple[Entry, ...], s: complex) -> complex:
    inside = s * np.eye(len(whole.c)) - whole.a
    return sum(
        complex((whole.c @ np.linalg.solve(inside, e.b) + e.d) * np.exp(-e.dead_time * s))
        for e in entries
    )


PAIRS = {
    "the same": (lag(2.0, 8.0, 3.0, dead_time=4.0),) * 2,
    "shared lag": (lag(2.0, 8.0, 3.0, dead_time=4.0), lag(0.5, 8.0, 1.0)),
    "nothing shared": (lag(2.0, 8.0), lag(0.5, 5.0, 1.0, dead_time=2.0)),
    "unstable and shared": (lag(2.0, -8.0), lag(0.5, -8.0, 1.0)),
    "load without lag": (lag(2.0, 8.0, dead_time=1.0), TransferFunction.constant(0.7)),
    "plant without lag": (TransferFunction.ratio((2.0,), [], 3.0), lag(0.5, 5.0)),
    "several dead times": (lag(2.0, 8.0, dead_time=1.0) + lag(-0.5, 2.0), lag(1.0, 2.0, 0.0)),
    "lead": (TransferFunction.ratio((6.0, 2.0), [(8.0, 1.0)]), lag(0.5, 3.0)),
}


@pytest.mark.parametrize("name", PAIRS)
def test_both_paths_are_the_transfer_functions(name: str) -> None:
    # other route: C (sI - A)^-1 B + D against the functions themselves
    plant, load = PAIRS[name]
    whole = process(Loop(plant, load, Gains(0.0)))
    for s in (0.3j, 0.05 + 1j, 0.2 + 0j):
        assert value(whole, whole.output, s) == pytest.approx(plant(s), rel=1e-12)
        assert value(whole, whole.load, s) == pytest.approx(load(s), rel=1e-12)


def test_a_shared_part_is_one_part_of_the_state() -> None:
    plant, load = PAIRS["unstable and shared"]
    assert len(process(Loop(plant, load, Gains(0.0))).c) == 2


def test_dead_time_inside_an_inner_feedback_is_refused() -> None:
    inner = lag(1.0, 5.0, dead_time=2.0).feedback()
    with pytest.raises(ModelError, match="inner feedback"):
        process(Loop(lag(1.0, 5.0), inner, Gains(1.0)))
