"""Structures as they are executed: predictor, feedforward and inner loop around one algorithm.

Together they are one step in place of the controller's own, so that the engine plays the loop as it
plays any other, scan by scan.  What runs beside the plant from the same held output - the
predictor, the inner PV - is exact between scans.

compensation  at each scan the controller is given PV + (M0 - M) u, from the outputs so far
feedforward   the upset is measured at the scan and held; lead, lag and dead time are exact for what
              is held, and the result is added to the output before its limits
cascade       the inner loop has its own scan, of which the outer one is a whole multiple.  While
              the inner output stands at a limit, the outer output does not go on in the direction
              that drives it there: its integral gives back what it would have moved.  With the
              inner loop in automatic or manual the outer output follows the inner setpoint or PV

Source
------
Common practice, in the form written here.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import problem
from workbench.model.cascade import scans_in
from workbench.model.feedback import Loop
from workbench.model.feedforward import Feedforward
from workbench.model.pid import Gains
from workbench.model.structures import NOTHING, Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm, Memory, Step
from workbench.sim.instruments import Instruments
from workbench.sim.process import process
from workbench.sim.scans import Clock, Held, inputs
from workbench.sim.scenario import Events
from workbench.sim.signals import Signal, values
from workbench.sim.valve import Valve

Array = NDArray[np.float64]

_SAME: Final = 1e-9
"""Share of a scan in which two instants are the same."""


def as_played(loop: Structure, events: Events) -> Loop:
    """The loop from the output that moves the plant to PV, at the scan at which that is changed.

    A cascade is played at the scan of its inner loop.  Raises `InputError` where the
    two scans do not go together, or the scenario asks for what is not played with it.
    """
    assert loop.scan is not None
    _refuse(loop, events)
    if loop.inner is None:
        return loop.around(loop.plant)
    _ratio(loop)
    return replace(
        loop.around(loop.inner.plant * loop.plant),
        load=loop.load + loop.inner.load * loop.plant,
        scan=loop.inner.scan,
        computing_delay=loop.inner.computing_delay,
    )


def _refuse(loop: Structure, events: Events) -> None:
    """What a scenario may not ask of a structure."""
    if loop.inner is not None and events.change_at is not None:
        raise problem(
            "is not played with an inner loop, of which it does not say what part changes",
            "leave it out, or draw the inner loop as a block of the plant",
            key="scenario.change_at",
        )


def _ratio(loop: Structure) -> int:
    """Inner scans in an outer one."""
    assert loop.inner is not None
    assert loop.scan is not None
    if loop.inner.scan is None:
        raise problem("is needed", 'give the inner controller one, like "0.5 s"', key="inner.scan")
    ratio = scans_in(loop.scan, loop.inner.scan)
    if ratio is None:
        raise problem(
            f"{loop.inner.scan:g} s does not go into the outer scan of {loop.scan:g} s",
            "give it a whole number of times",
            key="inner.scan",
        )
    return ratio


# --- beside the plant ----------------------------------------------------------------------------


class Beside:
    """A path run beside the plant from the same output, read before each output is changed."""

    def __init__(
        self,
        path: TransferFunction,
        clock: Clock,
        scans: int,
        load: TransferFunction = NOTHING,
        upset: Signal = (),
    ) -> None:
        held = Held(process(Loop(path, load, Gains(0.0))), clock)
        self._row, self._weights = held.reading()
        self._part = held.over(clock.scan)
        given = inputs(held, scans, np.zeros(scans), upset)
        self._state, self._direct = given.upset.over(0, scans)
        self._x = np.zeros(len(self._row))
        length = max([1, *self._part.taps, *self._weights]) + 1
        self._past = deque([0.0] * length, length)
        self._at = 0

    def read(self) -> float:
        """Its value at the scan [%]."""
        late = sum(weight * self._past[back - 1] for back, weight in self._weights.items())
        return float(self._row @ self._x) + late + float(self._direct[self._at])

    def move(self, output: float) -> None:
        """Go on to the next scan with the output of this one [%]."""
        self._past.appendleft(output)
        self._x = self._part.phi @ self._x + self._state[self._at]
        for back, tap in self._part.taps.items():
            self._x = self._x + tap * self._past[back]
        self._at += 1


def fed_forward(feedforward: Feedforward, upset: Array, scan: float) -> Array:
    """What is added to the output at each scan (n,) [%] for the upset as measured there (n,)."""
    lag, lead = feedforward.lag, feedforward.lead
    whole, rest = Clock(scan, 0.0).place(feedforward.dead_time)
    since = scan - rest if rest else 0.0
    shift = whole + (rest > 0.0)
    made = upset
    if lag:
        lagged, state = np.empty(len(upset)), 0.0
        gone, at_reading = -math.expm1(-scan / lag), -math.expm1(-since / lag)
        for k, value in enumerate(upset.tolist()):
            lagged[k] = state + at_reading * (value - state)
            state += gone * (value - state)
        made = lead / lag * upset + (1.0 - lead / lag) * lagged
    found = np.zeros(len(upset))
    found[shift:] = feedforward.gain * made[: max(0, len(upset) - shift)]
    return found


# --- the execution -------------------------------------------------------------------------------


@dataclass(frozen=True)
class Inside:
    """What an inner loop did, at its scans; each array has shape (n_scans,)."""

    setpoint: Array
    """As the inner controller had it [% of the inner PV's span]."""
    pv: Array
    """[% of the same span]"""
    output: Array
    """[% of the inner output's span]"""


class Execution:
    """The controllers of a structure under way: one step for the engine."""

    def __init__(
        self, loop: Structure, clock: Clock, events: Events, instruments: Instruments
    ) -> None:
        assert loop.scan is not None
        scans = clock.place(events.until)[0] + 1
        self.ratio = _ratio(loop) if loop.inner is not None else 1
        self.algorithm = Algorithm.of(loop, loop.scan)
        self.memory = Memory(integral=self.algorithm.sign * loop.bias)
        self._own = self.algorithm.start(self.memory)
        self._loop = loop
        self._hand = _Hand.of(events, loop.scan)
        self._setpoint = 0.0
        self.outputs: list[float] = []
        """Of the structure's own controller, at every scan of the clock [%]."""
        self._predictor = None
        correction = loop.correction()
        if correction.numerator:
            self._predictor = Beside(correction, clock, scans)
        self._added = np.zeros(scans)
        if loop.feedforward is not None:
            seen: Array = (np.arange(scans) + _SAME) * np.float64(loop.scan)
            self._added = fed_forward(loop.feedforward, values(events.load, seen), loop.scan)
        self._inner = None
        if loop.inner is not None:
            self._inner = _Inner(loop, clock, scans, events, instruments.through(clock.scan))

    def step(self, setpoint: float, measured: float) -> float:
        """One scan of the clock: what moves the plant [%]."""
        number, between = divmod(len(self.outputs), self.ratio)
        if self._predictor is not None:
            measured += self._predictor.read()
        output = self.outputs[-1] if between else self._execute(number, setpoint, measured)
        self.outputs.append(output)
        if self._predictor is not None:
            self._predictor.move(output)
        return output if self._inner is None else self._inner.step(self.outputs)

    def outside(self, instruments: Instruments) -> Instruments:
        """What the engine has to see to itself: the valve of an inner loop is seen to here."""
        return instruments if self._inner is None else replace(instruments, valve=Valve())

    def inside(self) -> Inside | None:
        """What the inner loop did up to here, where there is one."""
        if self._inner is None:
            return None
        done = self._inner
        return Inside(np.array(done.setpoints), np.array(done.pv), np.array(done.outputs))

    def _execute(self, number: int, setpoint: float, measured: float) -> float:
        """The structure's own controller at its scan."""
        memory, sign = self.memory, self.algorithm.sign
        inner, hand = self._inner, self._hand
        if number == hand.settings_from and hand.settings is not None:
            self._take(hand.settings)
        self._setpoint = setpoint
        if inner is not None and inner.goes_its_own_way():
            return self.algorithm.in_manual(memory, inner.followed())(setpoint, measured)
        if hand.manual_from <= number < hand.manual_until:
            given = sign * memory.output if hand.output is None else hand.output
            return self.algorithm.in_manual(memory, given)(setpoint, measured)
        # In the integral the feedforward passes the limits with the rest, and what they take of it
        # is held like the rest.
        before = float(self._added[number - 1]) if number else 0.0
        memory.integral += sign * (float(self._added[number]) - before)
        output = self._own(setpoint, measured)
        if inner is None or not self.outputs:
            return output
        beyond = output - self.outputs[-1]
        if beyond * inner.blocked <= 0.0:
            return output
        memory.integral -= sign * beyond
        memory.output -= sign * beyond
        return self.outputs[-1]

    def _take(self, settings: Gains) -> None:
        """Go on with other settings, the output staying where it is."""
        assert self._loop.scan is not None
        before = self.algorithm
        self.algorithm = Algorithm.of(replace(self._loop, gains=settings), self._loop.scan)
        self.algorithm.takes_over(self.memory, before, self._setpoint)
        self._own = self.algorithm.start(self.memory)


@dataclass(frozen=True)
class _Hand:
    """What the operator does to the structure's own controller, in its scans."""

    manual_from: float
    manual_until: float
    output: float | None
    """[%]; `None` leaves it as it is."""
    settings_from: float
    settings: Gains | None

    @classmethod
    def of(cls, events: Events, scan: float) -> _Hand:
        """From a scenario; what does not happen is at infinity."""
        clock = Clock(scan, 0.0)
        manual, automatic, settings = (
            math.inf if time is None else clock.first_scan(time)
            for time in (events.manual_at, events.automatic_at, events.settings_at)
        )
        return cls(manual, automatic, events.manual_output, settings, events.settings)


class _Inner:
    """The inner loop of a cascade under way."""

    def __init__(
        self,
        loop: Structure,
        clock: Clock,
        scans: int,
        events: Events,
        through: Callable[[float], float] | None,
    ) -> None:
        assert loop.inner is not None
        self._through = through
        self._late = clock.first_scan(loop.computing_delay)
        self._path = Beside(loop.inner.plant, clock, scans, loop.inner.load, events.load)
        self._algorithm = Algorithm.of(loop.inner, clock.scan)
        self._memory = Memory()
        at = events.inner_mode_at
        self._turns = math.inf if at is None else clock.first_scan(at)
        self._next_mode = events.inner_mode
        self._kept = 0.0
        self.setpoints: list[float] = []
        self.pv: list[float] = []
        self.outputs: list[float] = []
        self._enter(loop.inner_mode)

    def _enter(self, mode: str) -> None:
        """Take a mode: each begins where the one before has left the setpoint and the output."""
        self.mode = mode
        if mode == "manual":
            held = self._algorithm.sign * self._memory.output
            self._step: Step = self._algorithm.in_manual(self._memory, held)
        else:
            self._step = self._algorithm.start(self._memory)
        self._kept = self.setpoints[-1] if self.setpoints else 0.0

    def goes_its_own_way(self) -> bool:
        """At this scan, the outer output does not move its setpoint."""
        if len(self.outputs) == self._turns:
            self._turns = math.inf
            self._enter(self._next_mode)
        return self.mode != "cascade"

    @property
    def blocked(self) -> float:
        """The direction of its setpoint, +1 or -1, in which it can do nothing more; else 0."""
        if not self.outputs:
            return 0.0
        output = self.outputs[-1]
        at_limit = (output >= self._algorithm.high) - (output <= self._algorithm.low)
        return self._algorithm.sign * at_limit

    def followed(self) -> float:
        """What the outer output follows: the inner setpoint, or the inner PV in manual [%]."""
        return self._path.read() if self.mode == "manual" else self._kept

    def step(self, outer: list[float]) -> float:
        """One scan: what comes through the valve [%] for the outer outputs so far."""
        self.goes_its_own_way()
        pv = self._path.read()
        setpoint = pv if self.mode == "manual" else self._kept
        if self.mode == "cascade" and len(outer) > self._late:
            setpoint = outer[-1 - self._late]
        output = self._step(setpoint, pv)
        acting = output if self._through is None else self._through(output)
        self._path.move(acting)
        self.setpoints.append(setpoint)
        self.pv.append(pv)
        self.outputs.append(output)
        return acting
