"""What comes from outside is what was asked for, at every instant.

All expected values are exact: the shapes by their own definition.
"""

from __future__ import annotations

import numpy as np
import pytest

from workbench.sim.scenario import Events
from workbench.sim.signals import held, values


def load(shape: str, at: list[float], time: float = 0.0) -> list[float]:
    """An upset of 4 from 10 s on."""
    events = Events(0.0, 0.0, 4.0, 10.0, 200.0, load_shape=shape, load_time=time)
    return [float(value) for value in values(events.load, np.array(at))]


def test_every_shape_of_upset() -> None:
    at = [0.0, 9.9, 10.0, 15.0, 30.0, 60.0]
    assert load("step", at) == [0.0, 0.0, 4.0, 4.0, 4.0, 4.0]
    assert load("ramp", at, 20.0) == pytest.approx([0.0, 0.0, 0.0, 1.0, 4.0, 4.0])
    assert load("pulse", at, 20.0) == [0.0, 0.0, 4.0, 4.0, 0.0, 0.0]
    # A quarter of the period is its top; before it begins it is nothing.
    assert load("sine", at, 20.0) == pytest.approx([0.0, 0.0, 0.0, 4.0, 0.0, 0.0])


def test_a_recorded_upset_is_held_from_row_to_row() -> None:
    record = ((0.0, 0.5), (5.0, 1.0), (20.0, -0.25))
    events = Events(0.0, 0.0, 4.0, 10.0, 200.0, load_shape="record", load_record=record)
    at = np.array([9.0, 10.0, 14.0, 15.0, 29.0, 30.0, 90.0])
    assert values(events.load, at).tolist() == [0.0, 2.0, 2.0, 4.0, 4.0, -1.0, -1.0]


def test_a_setpoint_steps_ramps_or_follows_a_record() -> None:
    at = np.array([0.0, 10.0, 15.0, 30.0, 90.0])
    assert values(Events(3.0, 10.0, 0.0, 0.0, 99.0).setpoint, at).tolist() == [0, 3, 3, 3, 3]
    ramp = Events(3.0, 10.0, 0.0, 0.0, 99.0, setpoint_ramp=20.0).setpoint
    assert values(ramp, at) == pytest.approx([0.0, 0.0, 0.75, 3.0, 3.0])
    record = ((0.0, 1.0), (15.0, 3.0), (30.0, -2.0))
    events = Events(0.0, 0.0, 0.0, 0.0, 99.0, setpoint_record=record)
    assert values(events.setpoint, at).tolist() == [1.0, 1.0, 3.0, -2.0, -2.0]


def test_a_signal_held_from_row_to_row_gives_its_rows_back() -> None:
    time, rows = np.array([0.0, 4.0, 9.0, 20.0]), np.array([1.0, 1.0, -2.0, 0.5])
    signal = held(time, rows)
    assert values(signal, time).tolist() == rows.tolist()
    assert values(signal, np.array([8.9, 19.0])).tolist() == [1.0, -2.0]
