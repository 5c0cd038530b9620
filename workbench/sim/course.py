"""A run from its first scan to its last: who is in charge when, and what happens in between.

The controller follows its setpoint, through the setpoint's own rate limit and filter, while it is
in automatic; the operator gives the output in manual; settings and the plant may change on the way.
Everything takes effect at the first scan that is not before it.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.sim.controller import Algorithm
from workbench.sim.instruments import Instruments
from workbench.sim.leaps import follow
from workbench.sim.process import Process
from workbench.sim.scans import Clock, Course, Held, Inputs, Run, inputs
from workbench.sim.scenario import Events
from workbench.sim.signals import Step, values

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Passage:
    """What the loop went through, and by which plant."""

    course: Course
    plants: tuple[tuple[int, Held], ...]
    """From which scan on, and the plant from there."""
    is_held: bool = False
    """What the sensor showed at a scan stands until the next."""


def passage(
    loop: Loop,
    whole: Process,
    clock: Clock,
    events: Events,
    instruments: Instruments,
    made: Callable[[Loop], Algorithm] | None = None,
    by: Callable[[float, float], float] | None = None,
) -> Passage:
    """The passage of a loop through its events, scan by scan or in leaps.

    `made` gives the algorithm of a loop, the sampled one where it is left out; `by` is executed in
    its place, and sees to changes of mode and of settings itself.
    """
    scans = clock.place(events.until)[0] + 1
    held, made = Held(whole, clock), made or (lambda one: Algorithm.of(one, clock.scan))
    taken = _setpoint(loop, events, clock, scans)
    noise = instruments.noise(events.noise, events.seed, clock.scan, scans)
    given = inputs(held, scans, taken, events.load, noise)
    algorithm = made(loop)
    run = Run(
        held, algorithm, given, scans, instruments.through(clock.scan), instruments.received()
    )
    run.memory.integral = algorithm.sign * loop.bias
    plants = [(0, held)]
    happening = _Happening(run, events, False, by)
    for scan in [*happening.marks(clock, scans), scans]:
        happening.until(scan)
        if run.diverged or scan == scans:
            break
        changes = by is None and events.settings is not None
        if changes and scan == _mark(events.settings_at, clock):
            assert events.settings is not None
            run.algorithm = made(replace(loop, gains=events.settings))
            last = float(given.setpoint[scan - 1]) if scan else 0.0
            run.algorithm.takes_over(run.memory, algorithm, last)
            algorithm = run.algorithm
        if scan == _mark(events.change_at, clock):
            changed = Held(_changed(whole, events, loop.load is loop.plant), clock)
            run.change(changed)
            later = inputs(changed, scans, taken, events.load, noise)
            run.inputs = _spliced(run.inputs, later, scan)
            plants.append((scan, changed))
    return Passage(run.course(), tuple(plants), run.received is not None)


@dataclass
class _Happening:
    """The controller's mode over a run."""

    run: Run
    events: Events
    is_manual: bool
    by: Callable[[float, float], float] | None
    """What is executed where it is not the algorithm alone; it sees to its modes itself."""

    def marks(self, clock: Clock, scans: int) -> list[int]:
        """Scans at which something changes."""
        events = self.events
        times = (events.manual_at, events.automatic_at, events.settings_at, events.change_at)
        found = {_mark(time, clock) for time in times}
        self._modes = {
            _mark(events.manual_at, clock): True,
            _mark(events.automatic_at, clock): False,
        }
        return sorted(mark for mark in found if mark is not None and mark < scans)

    def until(self, scan: int) -> None:
        """Go on to a scan, and take its mode."""
        run = self.run
        if run.at < scan and self.by is not None:
            run.step(scan, self.by)
        elif run.at < scan and not self.is_manual:
            follow(run, scan)
        elif run.at < scan:
            goal = self.events.manual_output
            if goal is None:
                goal = run.algorithm.sign * run.memory.output
            run.step(scan, run.algorithm.in_manual(run.memory, goal))
        self.is_manual = self._modes.get(scan, self.is_manual)


def _mark(time: float | None, clock: Clock) -> int | None:
    return None if time is None else clock.first_scan(time)


def setpoints(loop: Loop, events: Events, clock: Clock, scans: int) -> Array:
    """The setpoint as the algorithm takes it at each scan (scans,) [%]."""
    taken = _setpoint(loop, events, clock, scans)
    if not isinstance(taken, Step):
        return taken
    return taken.values(np.arange(float(scans)) * clock.scan + 1e-9 * clock.scan)


def _setpoint(loop: Loop, events: Events, clock: Clock, scans: int) -> Array | Step:
    """The setpoint as the algorithm takes it at each scan [%]."""
    plain = loop.setpoint_rate is None and not loop.setpoint_filter
    if plain and not events.setpoint_ramp:
        return Step(events.setpoint_step, events.setpoint_at)
    time: Array = np.arange(float(scans)) * clock.scan
    # A step at the instant of a scan is seen by it, whatever rounding says.
    asked = values(events.setpoint, time + 1e-9 * clock.scan)
    if plain:
        return asked
    move = math.inf if loop.setpoint_rate is None else loop.setpoint_rate * clock.scan
    share = -math.expm1(-clock.scan / loop.setpoint_filter) if loop.setpoint_filter else 1.0
    taken, limited, filtered = np.empty(scans), 0.0, 0.0
    for k, wanted in enumerate(asked.tolist()):
        limited = min(max(wanted, limited - move), limited + move)
        filtered += share * (limited - filtered)
        taken[k] = filtered
    return taken


def _changed(whole: Process, events: Events, load_too: bool) -> Process:
    """The process with its gain and dead times changed; the load's where it is the plant's own."""
    gain, late = events.gain_factor, events.dead_time_factor
    output, load = (
        tuple(replace(e, dead_time=late * e.dead_time, b=gain * e.b, d=gain * e.d) for e in entries)
        for entries in (whole.output, whole.load)
    )
    return replace(whole, output=output, load=load if load_too else whole.load)


def _spliced(before: Inputs, later: Inputs, scan: int) -> Inputs:
    """The inputs of one plant up to a scan, of another from there on."""
    return replace(
        before,
        upset=before.upset.until(scan, later.upset),
        cuts=tuple(sorted({*before.cuts, *later.cuts, scan})),
        varying=before.varying | later.varying,
    )
