"""Sticking valves are told from other swings, and where the tests do not decide they say so."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.records.swinging import pi_loop, record_of
from workbench.records.stiction import (
    apparent_amount,
    chord,
    correlation,
    deadband,
    shape,
    together,
)
from workbench.records.swing import swings
from workbench.sim.valve import Valve

Array = NDArray[np.float64]


@pytest.mark.parametrize(
    ("period", "shift"), [(112.0, 0.68), (53.0, 0.45), (60.0, 0.48), (10.0, 0.10)]
)
def test_the_shift_is_the_phase_of_the_controller(period: float, shift: float) -> None:
    """Other route: 0.68, 0.45, 0.48 and 0.10 seen in loops made apart from this program, PI with an
    integral time of 10 s.  Exact for sines: atan(period/(2 pi Ti)) over a right angle."""
    time = np.arange(0.0, 40.0 * period, period / 200.0)
    phase = math.atan(period / (2.0 * math.pi * 10.0))
    pv = np.sin(2.0 * math.pi * time / period)
    found = correlation(pv, -np.sin(2.0 * math.pi * time / period - phase))

    assert found is not None
    assert found.shift == pytest.approx(phase / (math.pi / 2.0), abs=0.004)
    assert found.shift == pytest.approx(shift, abs=0.01)
    # Exact: r(0) = cos(phase) under a peak of 1, so that the height is tan(phase/2)^2.
    assert found.height == pytest.approx(math.tan(phase / 2.0) ** 2, abs=0.01)


@pytest.mark.parametrize(("stick", "jump", "swing"), [(2.0, 1.0, 1.13), (2.0, 2.0, 1.90)])
def test_a_sticking_valve_makes_the_loop_swing(stick: float, jump: float, swing: float) -> None:
    """Other route: PV swings of 1.13 and 1.90 % in a simulation made apart from this program (lag
    10 s, dead time 3 s, PI 1 and 10 s); the periods found there, 112 and 53 s, were longer than
    the 72 and 40 s here, where the controller is scanned every second."""
    valve = Valve(stick_slip=stick, slip_jump=jump)
    record = record_of(pi_loop(), 2500.0, valve, 500, setpoint_step=5.0, setpoint_at=5.0)
    period = swings(record.pv, 1.0)[0].period_s
    found = shape(record.op, period)

    assert float(np.ptp(record.pv)) == pytest.approx(swing, rel=0.08)
    assert found is not None
    assert found.verdict == "stick-slip"
    assert found.index > 0.9


def test_lost_motion_alone_dies_out_on_a_plant_that_comes_to_rest() -> None:
    """Published rule (from memory), and seen in a simulation made apart from this program."""
    record = record_of(
        pi_loop(), 2500.0, Valve(stick_slip=2.0), 1500, setpoint_step=5.0, setpoint_at=5.0
    )

    assert float(np.ptp(record.pv)) < 0.01


def test_sines_and_triangles_are_what_they_are() -> None:
    """Exact: the one fits without anything left, the other does not."""
    turn = np.arange(3000.0) / 50.0
    sine, triangle = np.sin(2.0 * np.pi * turn), 2.0 * np.abs(2.0 * (turn % 1.0) - 1.0) - 1.0
    straight, bent = shape(triangle, 50.0), shape(sine, 50.0)

    assert straight is not None
    assert bent is not None
    assert straight.index > 0.95
    assert bent.index < 0.02
    assert (straight.verdict, bent.verdict) == ("stick-slip", "no stick-slip")


def test_a_shape_between_both_is_left_undecided() -> None:
    turn = np.arange(3000.0) / 50.0
    middle = np.sin(2.0 * np.pi * turn) - 0.061 * np.sin(6.0 * np.pi * turn)
    found = shape(middle, 50.0)

    assert found is not None
    assert found.verdict == "undecided"


def test_tests_that_disagree_decide_nothing() -> None:
    assert together(["stick-slip", "undecided"]) == "stick-slip"
    assert together(["no stick-slip", "no stick-slip"]) == "no stick-slip"
    assert together(["stick-slip", "no stick-slip"]) == "undecided"
    assert together([]) == "undecided"


@pytest.mark.parametrize(("major", "minor", "angle"), [(5.0, 1.6, 0.9), (3.0, 0.5, 0.3)])
def test_the_chord_is_that_of_the_ellipse(major: float, minor: float, angle: float) -> None:
    """Other route: points of the ellipse, and among them those on the line through its centre."""
    turn = np.linspace(0.0, 2.0 * np.pi, 400_001)
    along = major * np.cos(turn) * math.cos(angle) - minor * np.sin(turn) * math.sin(angle)
    across = major * np.cos(turn) * math.sin(angle) + minor * np.sin(turn) * math.cos(angle)
    on_line = np.abs(across) < 1e-4 * major

    assert chord(major, minor, angle) == pytest.approx(float(np.ptp(along[on_line])), rel=1e-3)


def test_the_apparent_amount_is_the_width_of_the_ellipse() -> None:
    """Exact: OP = B sin(wt + f) crosses PV = A sin(wt) = 0 at +-B sin(f)."""
    time = np.arange(4000.0)
    pv = 0.3 * np.sin(2.0 * np.pi * time / 80.0)
    op = 7.0 * np.sin(2.0 * np.pi * time / 80.0 + 0.6)

    assert apparent_amount(pv, op, 80.0) == pytest.approx(2.0 * 7.0 * math.sin(0.6), rel=0.01)


@pytest.mark.parametrize("width", [1.0, 3.0])
def test_lost_motion_is_found_in_a_record(width: float) -> None:
    """Other route: a deadband of that width, written down anew, before a lag, with noise."""
    rng = np.random.default_rng(4)
    op = np.cumsum(rng.normal(scale=0.15, size=1500)) + 4.0 * np.sin(np.arange(1500) / 40.0)
    stem, pv, level = 0.0, np.zeros(1500), 0.0
    for k, signal in enumerate(op.tolist()):
        if signal - stem > width / 2:
            stem = signal - width / 2
        elif stem - signal > width / 2:
            stem = signal + width / 2
        level += (stem - level) / 8.0
        pv[k] = level
    found = deadband(np.append(0.0, pv[:-1]) + rng.normal(scale=0.01, size=1500), op)

    assert found.value == pytest.approx(width, rel=0.25)


def test_no_lost_motion_is_found_where_there_is_none() -> None:
    rng = np.random.default_rng(4)
    op = np.cumsum(rng.normal(scale=0.15, size=1500))
    pv = np.zeros(1500)
    for k in range(1, 1500):
        pv[k] = pv[k - 1] + (op[k - 1] - pv[k - 1]) / 8.0

    assert deadband(pv + rng.normal(scale=0.01, size=1500), op).value is None
