"""What a valve makes of its signal, against worked moves and the published describing function."""

from __future__ import annotations

import cmath
import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from workbench.errors import InputError
from workbench.sim.valve import CHARACTERISTICS, FAULTS, Move, Setting, Valve, follow
from workbench.units import Amount

REST = Setting(50.0, 1.0)

FAULTY: dict[str, Valve] = {
    "signal limits": Valve(signal_low=40.0, signal_high=55.0),
    "stick-slip": Valve(stick_slip=5.0, slip_jump=2.0),
    "deadband": Valve(deadband=3.0),
    "resolution": Valve(resolution=0.8),
    "stroke time": Valve(stroke_time=Amount(20.0, "s")),
}


def moving(valve: Valve, setting: Setting = REST) -> Move:
    made = follow(valve, setting)
    assert made is not None
    return made


def test_every_fault_has_its_example_here() -> None:
    assert [fault.title for fault in FAULTS] == list(FAULTY)


def test_a_healthy_valve_is_not_there() -> None:
    assert Valve().is_healthy
    assert follow(Valve(), REST) is None
    for fault in FAULTS:
        assert fault.make(Valve(), REST) is None


@pytest.mark.parametrize("title", FAULTY)
def test_one_fault_alone_is_made(title: str) -> None:
    made = [fault.title for fault in FAULTS if fault.make(FAULTY[title], REST) is not None]
    assert made == [title]
    assert not FAULTY[title].is_healthy


def there_and_back() -> list[float]:
    up = np.arange(0.0, 10.01, 0.5)
    return [*up.tolist(), *up[-2::-1].tolist(), *(-up[1:]).tolist()]


def test_stick_slip_follows_the_worked_moves() -> None:
    # other route: S = 5, J = 2, worked by hand from the model's rules for u 0 to 10 to -10
    move = moving(FAULTY["stick-slip"])
    signals = there_and_back()
    positions = [move(u) for u in signals]
    up = dict(zip(signals[:21], positions[:21], strict=True))
    down = dict(zip(signals[21:], positions[21:], strict=True))
    assert [up[u] for u in (2.0, 4.0, 6.0, 8.0, 10.0)] == [0.0, 2.5, 4.5, 6.5, 8.5]
    assert [down[u] for u in (8.0, 6.0, 5.0, 4.0, 2.0, 0.0, -4.0, -10.0)] == [
        *(8.5, 8.5, 8.5, 5.5, 3.5, 1.5, -2.5, -8.5)
    ]


STICKS = ((5.0, 4.0, 2.0), (5.0, 4.0, 4.0), (5.0, 4.0, 0.0), (10.0, 5.0, 2.0), (3.0, 2.5, 1.0))
"""Amplitude of the signal, stick-slip, jump."""


def describing_function(amplitude: float, stick: float, jump: float) -> complex:
    """Published: Choudhury, Thornhill, Shah, Control Eng. Practice 13, 2005 (from memory)."""
    # With phi = asin((X - S)/X), N = -(P - jQ)/(pi X),
    # P = X/2 sin 2phi - 2X cos phi - X (pi/2 + phi) + 2 (S - J) cos phi,
    # Q = -3/2 X + X/2 cos 2phi + 2X sin phi - 2 (S - J) sin phi
    x, s, j = amplitude, stick, jump
    phi = math.asin((x - s) / x)
    p = x / 2 * math.sin(2 * phi) - 2 * x * math.cos(phi) - x * (math.pi / 2 + phi)
    p += 2 * (s - j) * math.cos(phi)
    q = -1.5 * x + x / 2 * math.cos(2 * phi) + 2 * x * math.sin(phi) - 2 * (s - j) * math.sin(phi)
    return -(p - 1j * q) / (math.pi * x)


def first_harmonic(amplitude: float, stick: float, jump: float) -> complex:
    """What a sticking valve makes of a sine, over one period once it has settled."""
    move, count = moving(Valve(stick_slip=stick, slip_jump=jump)), 20_000
    angles = 2.0 * math.pi * np.arange(3 * count) / count
    positions = [move(amplitude * math.sin(angle)) for angle in angles]
    last = zip(positions[-count:], angles[-count:], strict=True)
    return 2j / (count * amplitude) * sum(y * cmath.exp(-1j * angle) for y, angle in last)


@pytest.mark.parametrize(("amplitude", "stick", "jump"), STICKS)
def test_stick_slip_has_its_published_describing_function(
    amplitude: float, stick: float, jump: float
) -> None:
    expected = describing_function(amplitude, stick, jump)
    assert first_harmonic(amplitude, stick, jump) == pytest.approx(expected, abs=1e-3)


def test_stick_slip_without_a_jump_is_a_deadband() -> None:
    # exact: once both have moved, the stem trails by half the band on either side
    stuck, loose = moving(Valve(stick_slip=3.0)), moving(Valve(deadband=3.0))
    wave = [8.0 * math.sin(0.05 * k) for k in range(400)]
    pairs = [(stuck(u), loose(u)) for u in wave]
    apart = max(abs(a - b) for a, b in pairs[100:])
    assert apart < 8.0 * 0.05 + 1e-9  # the stem stops one scan before the signal turns


@given(st.lists(st.floats(-40, 40), min_size=1, max_size=60))
def test_no_fault_moves_the_stem_further_than_its_signal(signals: list[float]) -> None:
    for valve in FAULTY.values():
        move = moving(valve)
        reached = [move(u) for u in signals]
        spare = max(valve.slip_jump, valve.resolution)
        assert max(reached) <= max(0.0, *signals) + spare + 1e-9
        assert min(reached) >= min(0.0, *signals) - spare - 1e-9


def test_the_stroke_takes_its_time() -> None:
    move = moving(FAULTY["stroke time"])
    assert [move(30.0) for _ in range(7)] == [5.0, 10.0, 15.0, 20.0, 25.0, 30.0, 30.0]


def test_signal_limits_and_resolution() -> None:
    assert [moving(FAULTY["signal limits"])(u) for u in (-20.0, 2.0, 20.0)] == [-10.0, 2.0, 5.0]
    assert moving(FAULTY["resolution"])(1.3) == pytest.approx(1.6)
    assert moving(FAULTY["resolution"])(0.3) == 0.0


# --- characteristics -----------------------------------------------------------------------------

CURVES: dict[str, Valve] = {
    "equal-percentage": Valve(characteristic="equal-percentage", rangeability=30.0),
    "quick-opening": Valve(characteristic="quick-opening"),
    "table": Valve(characteristic="table", table="0:0 40:10 60:30 100:100"),
}


def test_every_characteristic_has_its_example_here() -> None:
    assert list(CHARACTERISTICS) == list(CURVES)


@pytest.mark.parametrize("name", CURVES)
@pytest.mark.parametrize("closes", [False, True])
def test_a_small_move_acts_as_its_signal_says(name: str, closes: bool) -> None:
    move = moving(CURVES[name], Setting(45.0, 1.0, closes))
    assert move(0.0) == 0.0
    assert move(0.01) == pytest.approx(0.01, rel=1e-2)
    assert move(-0.01) == pytest.approx(-0.01, rel=1e-2)


def test_equal_percentage_changes_flow_by_equal_shares() -> None:
    # exact: flow(v) = R^(v - 1), so that 10 % of travel multiply the flow by R^0.1
    move = moving(CURVES["equal-percentage"])
    share = 30.0**0.1
    small = moving(CURVES["equal-percentage"], Setting(60.0, 1.0))
    slope = math.log(30.0) / 100.0
    assert move(10.0) == pytest.approx((share - 1.0) / slope, rel=1e-6)
    assert small(10.0) == pytest.approx((share - 1.0) / slope, rel=1e-6)


def test_table_is_read_along_straight_lines() -> None:
    # exact: at 50 % the slope is 1; 60 % gives 30 and 70 % gives 30 + 17.5
    move = moving(CURVES["table"])
    assert move(20.0) == pytest.approx(20.0 / 2.0 * 1.0 + 17.5, rel=1e-6)
    # exact: 20 % gives 5, where 50 % gives 20; and the valve ends at 0 and at 100 %
    assert move(-30.0) == pytest.approx(-15.0, rel=1e-6)
    assert (move(-80.0), move(80.0)) == pytest.approx((-20.0, 80.0), rel=1e-6)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"characteristic": "table"}, "does not run from an opening of 0 to 100"),
        ({"table": "0:0 50:60 40:70 100:100"}, "does not rise"),
        ({"table": "0:0 half:60 100:100"}, "cannot be read"),
        ({"slip_jump": 3.0, "stick_slip": 1.0}, "is more than twice stick_slip"),
        ({"signal_low": 60.0, "signal_high": 40.0}, "is not above signal_low"),
    ],
)
def test_what_no_valve_does_is_refused(changes: dict[str, object], words: str) -> None:
    with pytest.raises(InputError, match=words):
        replace(Valve(), **changes)  # type: ignore[arg-type]
