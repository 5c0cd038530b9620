"""The sampled loop, scan by scan: exact plant between scans, the algorithm of `controller` at them.

The output is held between its changes, so the plant's answer over a scan is exact, with every dead
time a whole number of scans and a fraction.  While nothing limits the output and there is no noise
the loop is linear and its course is worked out in leaps (powers of one matrix); otherwise it is
stepped.  Both give the same numbers.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from operator import mul
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.matrix import hold
from workbench.sim.controller import Algorithm
from workbench.sim.process import Entry, Process

Array = NDArray[np.float64]

BOUND: Final = 1e6
"""A PV or output beyond this [%] has left every instrument: the loop is cut off there."""
_SAME: Final = 1e-9
"""Instants closer than this share of a scan are the same instant."""
_LARGEST_LEAP: Final = 60
"""Most states a leap is worth: beyond, stepping is as fast."""


@dataclass(frozen=True)
class Clock:
    """When things happen, in scans."""

    scan: float
    """[s]"""
    computing_delay: float
    """From sampling to the change of the output [s]."""
    lead: float = 0.0
    """How long after the scan instant PV is read [s]; 0 for a real controller."""

    def place(self, time: float) -> tuple[int, float]:
        """A time as whole scans and the rest in seconds, 0 <= rest < scan."""
        whole = math.floor(time / self.scan + _SAME)
        rest = time - whole * self.scan
        return whole, rest if rest > _SAME * self.scan else 0.0


@dataclass(frozen=True)
class Step:
    """An input that changes once: `size` from `time` on."""

    size: float
    time: float
    """[s]"""


@dataclass(frozen=True)
class Course:
    """What the loop went through, at its scans."""

    states: Array
    """(n_scans, n), the process at each scan."""
    outputs: Array
    """(n_scans,), what each scan computed [%]."""
    pv: Array
    """(n_scans,), what each scan sampled, without noise [%]."""
    diverged: bool


@dataclass(frozen=True)
class _Piece:
    """The plant over part of a scan, the input held."""

    phi: Array
    taps: dict[int, Array]
    """Scans back -> what the output of that scan adds to the state."""
    weights: dict[int, float]
    """Scans back -> what it adds to PV directly, at the end of the part."""


class Held:
    """A process whose output is changed once a scan and held."""

    def __init__(self, process: Process, clock: Clock) -> None:
        self.process, self.clock = process, clock
        self._known: dict[float, _Piece] = {}
        self.entries = [
            (entry, *clock.place(entry.dead_time + clock.computing_delay))
            for entry in process.output
        ]

    def _hold(self, entry: Entry, time: float) -> tuple[Array, Array]:
        return hold(self.process.a, entry.b, time)

    def over(self, time: float) -> _Piece:
        """From a scan to `time` after it, 0 <= time <= scan."""
        if time in self._known:
            return self._known[time]
        taps: dict[int, Array] = {}
        weights: dict[int, float] = {}
        n = len(self.process.c)
        phi = hold(self.process.a, np.zeros(n), time)[0]
        for entry, whole, rest in self.entries:
            arrived = max(0.0, time - rest)
            after, new = self._hold(entry, arrived)
            _, old = self._hold(entry, min(time, rest))
            taps[whole] = taps.get(whole, np.zeros(n)) + new
            taps[whole + 1] = taps.get(whole + 1, np.zeros(n)) + after @ old
            # PV is sampled just before what arrives at that same instant.
            late = time < rest or time == rest == 0.0
            back = whole + 1 if late else whole
            weights[back] = weights.get(back, 0.0) + entry.d
        taps = {back: tap for back, tap in taps.items() if tap.any()}
        weights = {back: weight for back, weight in weights.items() if weight}
        piece = _Piece(phi, taps, weights)
        self._known[time] = piece
        return piece

    def upset(self, load: Step, scan: int, time: float) -> tuple[Array, float]:
        """What the upset adds to the state and to PV from a scan to `time` after it."""
        state, pv = np.zeros(len(self.process.c)), 0.0
        for entry in self.process.load:
            whole, rest = self.clock.place(load.time + entry.dead_time)
            if scan < whole or (scan == whole and time < rest):
                continue
            lasting = time if scan > whole else time - rest
            state += self._hold(entry, lasting)[1] * load.size
            pv += entry.d * load.size
        return state, pv

    def arrivals(self, load: Step) -> list[tuple[int, float]]:
        """Where the upset reaches PV: (scan, time after it)."""
        if not load.size:
            return []
        return [self.clock.place(load.time + entry.dead_time) for entry in self.process.load]


@dataclass(frozen=True)
class Segment:
    """Scans over which everything from outside stays the same."""

    start: int
    end: int
    setpoint: float
    change: float
    """Of the setpoint since the scan before."""
    state: Array
    """What the upset adds to the state in a scan."""
    pv: float
    """What the upset adds directly to the sampled PV."""


def first_scan(time: float, clock: Clock) -> int:
    """The first scan that sees what happened at `time`."""
    whole, rest = clock.place(time)
    return whole + (rest > 0.0)


def segments_of(held: Held, scans: int, setpoint: Step, load: Step) -> list[Segment]:
    """The scans in stretches over which nothing changes from outside."""
    seen = first_scan(setpoint.time, held.clock) if setpoint.size else scans
    marks = {0, seen, seen + 1, scans}
    for whole, _ in held.arrivals(load):
        marks |= {whole, whole + 1, whole + 2}
    cuts = sorted(mark for mark in marks if 0 <= mark <= scans)
    found = []
    for start, end in pairwise(cuts):
        found.append(
            Segment(
                start,
                end,
                setpoint.size if start >= seen else 0.0,
                setpoint.size if start == seen else 0.0,
                held.upset(load, start, held.clock.scan)[0],
                held.upset(load, start, held.clock.lead)[1],
            )
        )
    return found


def run(
    held: Held,
    algorithm: Algorithm,
    scans: int,
    setpoint: Step,
    load: Step,
    noise: Sequence[float] | None = None,
) -> Course:
    """The course of the loop over a number of scans, from rest."""
    segments = segments_of(held, scans, setpoint, load)
    if noise is None:
        course = leap(held, algorithm, segments, load)
        if course is not None:
            return course
    return _scan_by_scan(held, algorithm, segments, load, noise)


def step_through(
    held: Held, algorithm: Algorithm, scans: int, setpoint: Step, load: Step
) -> Course:
    """As `run`, where it is known that leaping will not do."""
    return _scan_by_scan(held, algorithm, segments_of(held, scans, setpoint, load), load, None)


def _is_held_back(algorithm: Algorithm, outputs: Array) -> bool:
    if not algorithm.is_limited:
        return False
    moves = np.abs(np.diff(outputs, prepend=0.0))
    within = (outputs >= algorithm.low) & (outputs <= algorithm.high) & (moves <= algorithm.move)
    return not bool(within.all())


# --- stepping ------------------------------------------------------------------------------------


def reading(held: Held, load: Step, segment: Segment) -> tuple[Array, dict[int, float], float]:
    """PV as the controller reads it: weights on the state and on earlier outputs, and the rest."""
    read = held.over(held.clock.lead)
    c = held.process.c
    weights = dict(read.weights)
    for back, tap in read.taps.items():
        weights[back] = weights.get(back, 0.0) + float(c @ tap)
    if 0 in weights:  # reading ahead of an output that is not known yet: the one before is held
        weights[1] = weights.get(1, 0.0) + weights.pop(0)
    upset = held.upset(load, segment.start, held.clock.lead)[0] if held.clock.lead else None
    rest = segment.pv + (float(c @ upset) if upset is not None else 0.0)
    return c @ read.phi, {back: w for back, w in weights.items() if w}, rest


def _scan_by_scan(
    held: Held,
    algorithm: Algorithm,
    segments: list[Segment],
    load: Step,
    noise: Sequence[float] | None,
) -> Course:
    """Plain numbers and lists: for a handful of states they are far faster than arrays."""
    over = held.over(held.clock.scan)
    step = algorithm.start()
    x = [0.0] * len(held.process.c)
    states: list[list[float]] = []
    pv: list[float] = []
    _, weights, _ = reading(held, load, segments[0])
    memory = max([1, *over.taps, *weights])
    outputs = [0.0] * memory
    diverged = False
    for segment in segments:
        read, weights, rest = reading(held, load, segment)
        row = read.tolist()
        backs = [(memory - back, weight) for back, weight in weights.items()]
        taps = [memory - back for back in over.taps]
        columns = [*over.taps.values(), segment.state]
        rows = np.column_stack([over.phi, *columns]).tolist()
        setpoint = segment.setpoint
        for i in range(segment.start, segment.end):
            y = sum(map(mul, row, x)) + rest
            for back, weight in backs:
                y += weight * outputs[i + back]
            if not -BOUND <= y <= BOUND:
                diverged = True
                break
            states.append(x)
            pv.append(y)
            outputs.append(step(setpoint, y if noise is None else y + noise[i]))
            acting = [*x, *[outputs[i + tap] for tap in taps], 1.0]
            x = [sum(map(mul, line, acting)) for line in rows]
        if diverged:
            break
    return _course(np.array(states), np.array(outputs[memory:]), np.array(pv), held, diverged)


def _course(states: Array, outputs: Array, pv: Array, held: Held, diverged: bool) -> Course:
    return Course(states.reshape(len(pv), len(held.process.c)), outputs, pv, diverged)


# --- leaping -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Linear:
    """The whole loop over one scan: s' = S s + inputs, over [x, yf, I, D, earlier outputs, 1]."""

    matrix: Array
    setpoint: Array
    change: Array
    pv: Array
    """Columns: what the setpoint, its change and a shift of PV add to the next state."""
    read: Array
    """Row: PV as sampled."""
    newest: int
    """Where the next state keeps the output just computed."""


def _linear(held: Held, algorithm: Algorithm, weights: dict[int, float], read: Array) -> _Linear:
    over = held.over(held.clock.scan)
    n, memory = len(held.process.c), max([1, *over.taps, *weights])
    size = n + 3 + memory + 1
    filtered, integral, derivative, newest = n, n + 1, n + 2, n + 3
    # Rows over [state, 1] and, behind it, the setpoint, its change and the shift of PV.
    setpoint, change, shift = size, size + 1, size + 2
    unit = np.eye(size + 3)
    y = unit[shift].copy()
    y[:n] += read
    for back, weight in weights.items():
        y[newest + back - 1] += weight
    f = unit[filtered] + algorithm.smooth * (y - unit[filtered])
    i = unit[integral] + algorithm.advance * (unit[setpoint] - f)
    seen = algorithm.derivative_weight * unit[change] - (f - unit[filtered])
    d = algorithm.keep * unit[derivative] + algorithm.kick * seen
    p = algorithm.proportional * (algorithm.setpoint_weight * unit[setpoint] - f)
    u = algorithm.sign * (p + i + d)
    following = np.zeros((size, size + 3))
    following[:n, :n] = over.phi
    for back, tap in over.taps.items():
        following[:n] += np.outer(tap, u if back == 0 else unit[newest + back - 1])
    following[filtered], following[integral], following[derivative] = f, i, d
    following[newest] = u
    following[newest + 1 : size - 1] = unit[newest : newest + memory - 1]
    following[size - 1] = unit[size - 1]
    return _Linear(
        following[:, :size],
        following[:, setpoint],
        following[:, change],
        following[:, shift],
        y[:size],
        newest,
    )


def leap(
    held: Held, algorithm: Algorithm, segments: Sequence[Segment], load: Step
) -> Course | None:
    """The course without noise in leaps, or None where something holds the output back."""
    course = _leap(held, algorithm, segments, load)
    if course is None or _is_held_back(algorithm, course.outputs):
        return None
    return course


def _leap(
    held: Held, algorithm: Algorithm, segments: Sequence[Segment], load: Step
) -> Course | None:
    """The course of the linear loop, or None where leaping would not pay or not work."""
    read, weights, _ = reading(held, load, segments[0])
    loop = _linear(held, algorithm, weights, read)
    size, n = len(loop.matrix), len(held.process.c)
    if size > _LARGEST_LEAP:
        return None
    start = np.zeros(size)
    start[-1] = 1.0
    states, outputs, pv = [], [], []
    for segment in segments:
        rest = reading(held, load, segment)[2]
        matrix = loop.matrix.copy()
        matrix[:, -1] += loop.setpoint * segment.setpoint + loop.change * segment.change
        matrix[:, -1] += loop.pv * rest
        matrix[:n, -1] += segment.state
        wanted = segment.end - segment.start
        with np.errstate(over="ignore", invalid="ignore"):
            course = _powers(matrix, start, wanted + 1, loop.read)
        if not np.isfinite(course).all():
            return None
        sampled = loop.read @ course + rest
        beyond = np.flatnonzero(~(np.abs(sampled) <= BOUND))
        end = int(beyond[0]) if len(beyond) else min(wanted, course.shape[1] - 1)
        states.append(course[:n, :end].T)
        outputs.append(course[loop.newest, 1 : end + 1])
        pv.append(sampled[:end])
        if end < wanted:
            break
        start = course[:, -1]
    diverged = sum(map(len, pv)) < segments[-1].end
    return _course(
        np.concatenate(states), np.concatenate(outputs), np.concatenate(pv), held, diverged
    )


def _powers(matrix: Array, start: Array, wanted: int, read: Array) -> Array:
    """start, S start, S^2 start ... as columns; shorter where PV leaves the bound on the way."""
    course = start[:, np.newaxis]
    power = matrix
    while course.shape[1] < wanted:
        more = power @ course[:, : wanted - course.shape[1]]
        course = np.concatenate([course, more], axis=1)
        if not bool((np.abs(read @ more) <= 10 * BOUND).all()):
            break
        power = power @ power
    return course
