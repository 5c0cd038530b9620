"""Loops that swing for a known reason, by the engine: what a diagnosis is judged on."""

from __future__ import annotations

import random
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.records.diagnose import Known, diagnose
from workbench.records.record import Record
from workbench.sim.instruments import Instruments
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events
from workbench.sim.valve import Valve


@dataclass(frozen=True)
class Swinging:
    """A record of a swinging loop, and why it swings."""

    cause: str
    record: Record
    known: Known
    told: str


def pi_loop(
    gain: float = 1.0,
    time_constant: float = 10.0,
    dead_time: float = 3.0,
    proportional: float = 1.0,
    integral_time: float = 10.0,
) -> Loop:
    """A first-order plant under a PI controller, scanned every second, in percent."""
    plant = TransferFunction.ratio((gain,), [(time_constant, 1.0)], dead_time)
    gains = Gains(proportional, proportional / integral_time)
    return Loop(plant=plant, load=plant, gains=gains, reverse=True, scan=1.0)


def record_of(
    loop: Loop, until: float, valve: Valve | None = None, skip: int = 0, **events: Any
) -> Record:
    """What a historian keeps of a run, a row a scan; about PV 50 and OP 50."""
    quiet = {"setpoint_step": 0.0, "setpoint_at": 0.0, "load_step": 0.0, "load_at": 0.0}
    given = Events(**{**quiet, "until": until, **events})
    trace = simulate(loop, given, Instruments(valve=valve or Valve(), op_rest=50.0))
    time = np.arange(0.0, until, 1.0)
    row = np.searchsorted(trace.time, time + 1e-9, side="right") - 1
    kept = row[skip:]
    return Record(
        "made.csv",
        time[skip:] - time[skip],
        50.0 + trace.measured[kept],
        50.0 + trace.output[kept],
        sp=50.0 + trace.setpoint[kept],
        mode=("AUTO",) * len(kept),
    )


def made(seed: int, size: int) -> Iterator[Swinging]:
    """A third each of stick-slip, gains too high, and sines from outside."""
    draw = random.Random(seed)
    while size > 0:
        cause = ("valve", "tuning", "upset")[size % 3]
        size -= 1
        lag = draw.uniform(8.0, 40.0)
        dead = lag * draw.uniform(0.15, 0.6)
        gain = draw.uniform(0.5, 2.0)
        # Ultimate gain of a lag with dead time, roughly; a fifth of it is a calm loop.
        ultimate = (1.57 * lag / dead + 0.57) / gain
        integral = lag * draw.uniform(0.7, 1.5)
        share = draw.uniform(0.6, 0.72) if cause == "tuning" else draw.uniform(0.15, 0.35)
        loop = pi_loop(gain, lag, dead, share * ultimate, integral)
        valve = Valve()
        events: dict[str, Any] = {"noise": 0.05, "seed": draw.randrange(10**6)}
        if cause == "valve":
            stick = draw.uniform(2.0, 6.0)
            valve = Valve(stick_slip=stick, slip_jump=stick * draw.uniform(0.3, 1.0))
            events |= {"setpoint_step": 4.0, "setpoint_at": 5.0}
        elif cause == "tuning":
            events |= {"noise": 0.3}
        else:
            period = dead * draw.uniform(9.0, 30.0)
            events |= {"load_step": 3.0, "load_shape": "sine", "load_time": period}
        record = record_of(loop, 2000.0 + 20.0 * lag, valve, skip=int(20.0 * lag), **events)
        told = f"{cause}: gain {gain:.3g}, lag {lag:.3g}, dead time {dead:.3g}, {valve} {events}"
        yield Swinging(cause, record, Known(dead_time_s=dead, integral_time_s=integral), told)


def swinging_verdicts(seed: int, size: int) -> Iterator[tuple[float, str]]:
    """1 for each healthy valve that is called sticking, and each sticking one called healthy."""
    for one in made(seed, size):
        verdict = diagnose(one.record, one.known).valve_verdict
        wrong = "no stick-slip" if one.cause == "valve" else "stick-slip"
        yield float(verdict == wrong), f"{one.told}: {verdict}"


def blamed(size: int, seed: int) -> tuple[float, list[str]]:
    """Share of the valves that are judged wrong; undecided is not wrong."""
    return sum(wrong for wrong, _ in swinging_verdicts(seed, size)) / size, []
