"""Makes the shipped records of the invented wash-water loop in automatic.

A plain recursion, scan by scan, that knows nothing of the program: the plant as `make_cases` has it
behind OP held from scan to scan, a PI algorithm, and a valve that may stick.  The random numbers
come from the generator whose stream Python promises never to change.
"""

from __future__ import annotations

import random
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from statistics import NormalDist

from tests.plain import HeldLag

SCAN = 0.5
PV_SPAN, OP_SPAN = 40.0, 100.0
GAIN, INTEGRAL_TIME = 0.5, 10.0
"""A proportional band of 200 %, and 6 repeats/min."""


def healthy(position: float) -> float:
    """A valve that goes where the signal says."""
    return position


def sticking(stick: float, jump: float) -> Callable[[float], float]:
    """A stem that stays until the signal has gone further than it sticks, and then jumps.

    Written down anew from the state diagram of Kano and others (2004): where it stopped, which way
    it last moved, whether it stands.
    """
    stem = signal_before = stopped = 0.0
    way, stands = 1.0, True

    def move(signal: float) -> float:
        nonlocal stem, signal_before, stopped, way, stands
        change, signal_before = signal - signal_before, signal
        if not stands and change * way <= 0.0:
            stands, stopped = True, signal - change
        if stands and way * (signal - stopped) < -stick:
            way, stands = -way, False
        elif stands and way * (signal - stopped) > jump:
            stands = False
        if not stands:
            stem = signal - 0.5 * way * (stick - jump)
        return stem

    return move


@dataclass(frozen=True)
class Truth:
    """The plant and what runs on it."""

    gain: float = GAIN
    """Of the controller."""
    integral_time: float = INTEGRAL_TIME
    dead_time: float = 0.9
    upset: tuple[float, float] = (0.0, 0.0)
    """When, and how much of OP at the plant's input."""


def rows(
    count: int,
    setpoints: Iterable[tuple[float, float]],
    valve: Callable[[float], float],
    seed: int,
    truth: Truth,
) -> list[tuple[float, float, float, float]]:
    """(time [s], SP, PV, OP); `setpoints` are (time [s], SP)."""
    draw, normal = random.Random(seed), NormalDist()
    plant, moved = HeldLag(0.42, 3.2, truth.dead_time, SCAN), []
    integral, found = 0.0, []
    for k in range(count):
        time = k * SCAN
        setpoint = [value for at, value in setpoints if time >= at][-1]
        pv = 21.5 + plant.value + 0.15 * normal.inv_cdf(draw.random())
        error = 100.0 * (setpoint - pv) / PV_SPAN
        integral += truth.gain * SCAN / truth.integral_time * error
        op = (truth.gain * error + integral) * OP_SPAN / 100.0
        found.append((time, setpoint, pv, 50.0 + op))
        moved.append(valve(op) + (truth.upset[1] if time >= truth.upset[0] else 0.0))
        plant.run(moved, k)
    return found


def _text(table: list[tuple[float, float, float, float]]) -> str:
    lines = [f"{time:.1f},{sp:.1f},{pv:.2f},{op:.2f},AUTO" for time, sp, pv, op in table]
    return "\n".join(["time_s,sp,pv,op,mode", *lines]) + "\n"


def run_record(truth: Truth | None = None) -> str:
    """Setpoint moves with the settings of the case."""
    moves = ((0.0, 21.5), (60.0, 24.5), (150.0, 19.5), (240.0, 21.5))
    return _text(rows(661, moves, healthy, 205, truth or Truth()))


def swing_record() -> str:
    """The same loop a year on, its valve sticking."""
    return _text(rows(1801, ((0.0, 21.5), (30.0, 22.5)), sticking(6.0, 3.0), 206, Truth()))
