"""The sampled loop at its scans: exact plant between them, the algorithm of `controller` at them.

The output is held between its changes, so the plant's answer over a scan is exact, with every dead
time a whole number of scans and a fraction.  The loop is stepped here, scan by scan in plain
numbers; wherever it is linear for a while - no limit met, or held at one - `leaps` takes the whole
stretch at once.  Both give the same numbers.
"""

from __future__ import annotations

import math
from bisect import bisect_left, bisect_right
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from itertools import pairwise, repeat
from operator import mul
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.matrix import hold, holds
from workbench.sim.controller import Algorithm, Memory
from workbench.sim.process import Entry, Process
from workbench.sim.signals import Ramp, Signal, Sine, Step

Array = NDArray[np.float64]

BOUND: Final = 1e6
"""A PV or output beyond this [%] has left every instrument: the loop is cut off there."""
_FEW_STEPS: Final = 4
"""More steps of an upset than this are taken as a signal that changes at any scan."""
_SAME: Final = 1e-9
"""Instants closer than this share of a scan are the same instant."""


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
        # Without the last digits, so that equal rests of different times are the same number.
        return whole, round(rest / self.scan, 11) * self.scan if rest > _SAME * self.scan else 0.0

    def first_scan(self, time: float) -> int:
        """The first scan that sees what happened at `time`."""
        whole, rest = self.place(time)
        return whole + (rest > 0.0)


@dataclass(frozen=True)
class Course:
    """What the loop went through, at its scans."""

    outputs: Array
    """(n_scans,), what each scan computed [%]."""
    pv: Array
    """(n_scans,), what each scan sampled, without noise [%]."""
    diverged: bool
    acting: Array
    """(n_scans,), what came through the valve of it [%]; the output itself where it is healthy."""
    measured: Array
    """(n_scans,), PV as the controller received it [%]."""
    pieces: tuple[Callable[[], Array], ...]
    """What works out the states of one stretch after the other, (its scans, n)."""

    @cached_property
    def states(self) -> Array:
        """(n_scans, n), the process at each scan; worked out where it is asked for."""
        return np.concatenate([piece() for piece in self.pieces])


# --- the plant between scans ---------------------------------------------------------------------


@dataclass(frozen=True)
class Part:
    """The plant over part of a scan, the output held."""

    phi: Array
    taps: dict[int, Array]
    """Scans back -> what the output of that scan adds to the state."""
    weights: dict[int, float]
    """Scans back -> what it adds to PV directly, at the end of the part."""


class Held:
    """A process whose output is changed once a scan and held."""

    def __init__(self, process: Process, clock: Clock) -> None:
        self.process, self.clock = process, clock
        self.entries = [
            (entry, *clock.place(entry.dead_time + clock.computing_delay))
            for entry in process.output
        ]
        self._parts: dict[float, Part] = {}
        # Ways in that are the same but for their dead time, as those of output and load through
        # one plant, are worked out once.
        columns: dict[bytes, int] = {}
        self._column = {
            id(entry): columns.setdefault(entry.b.tobytes(), len(columns))
            for entry in (*process.output, *process.load)
        }
        n = len(process.c)
        self._inputs = np.frombuffer(b"".join(columns)).reshape(len(columns), n).T
        self._known: dict[float, tuple[Array, Array]] = {}
        self._learn([rest for _, _, rest in self.entries])

    def _learn(self, rests: Sequence[float]) -> None:
        """The answers that a whole scan is made of, all in one go."""
        scan = self.clock.scan
        wanted = {rest for rest in rests if rest} or {scan}
        wanted |= {scan - rest for rest in wanted if rest < scan}
        intervals = tuple(wanted)
        found = holds(self.process.a, self._inputs, intervals)
        self._known.update(zip(intervals, found, strict=True))
        if scan not in self._known:
            rest = next(rest for rest in rests if rest)
            phi, gamma = self._known[rest]
            later, new = self._known[scan - rest]
            self._known[scan] = later @ phi, later @ gamma + new

    def hold(self, entry: Entry, time: float) -> tuple[Array, Array]:
        """The plant's answer to an input through `entry` held for `time` [s]."""
        if time not in self._known:
            self._known[time] = holds(self.process.a, self._inputs, (time,))[0]
        phi, gamma = self._known[time]
        return phi, gamma[:, self._column[id(entry)]]

    def over(self, time: float) -> Part:
        """From a scan to `time` after it, 0 <= time <= scan."""
        if time in self._parts:
            return self._parts[time]
        taps: dict[int, Array] = {}
        weights: dict[int, float] = {}
        for entry, whole, rest in self.entries:
            early = min(time, rest)
            old = self.hold(entry, early)[1] if early else None
            if time > rest:
                after, new = self.hold(entry, time - rest)
                old = None if old is None else after @ old
                taps[whole] = taps[whole] + new if whole in taps else new
            if old is not None:
                taps[whole + 1] = taps[whole + 1] + old if whole + 1 in taps else old
            # PV is sampled just before what arrives at that same instant.
            late = time < rest or time == rest == 0.0
            back = whole + 1 if late else whole
            weights[back] = weights.get(back, 0.0) + entry.d
        if time not in self._known:
            self._known[time] = holds(self.process.a, self._inputs, (time,))[0]
        taps = {back: tap for back, tap in taps.items() if any(tap.tolist())}
        weights = {back: weight for back, weight in weights.items() if weight}
        part = Part(self._known[time][0], taps, weights)
        self._parts[time] = part
        return part

    def reading(self) -> tuple[Array, dict[int, float]]:
        """PV as the controller reads it: weights on the state and on the outputs of scans back."""
        c = self.process.c
        if not self.clock.lead and not any(entry.d for entry in self.process.output):
            return c, {}
        part = self.over(self.clock.lead)
        weights = dict(part.weights)
        for back, tap in part.taps.items():
            weights[back] = weights.get(back, 0.0) + float(c @ tap)
        if 0 in weights:  # reading ahead of an output that is not known yet: the one before is held
            weights[1] = weights.get(1, 0.0) + weights.pop(0)
        return c @ part.phi, {back: weight for back, weight in weights.items() if weight}

    # --- what comes from outside ---

    def upset(self, load: Signal, scans: int, time: float) -> Upset:
        """What an upset adds to the state and to PV up to `time` after each scan."""
        ways = [
            (part, entry, *self.clock.place(part.time + entry.dead_time))
            for part in load
            for entry in self.process.load
        ]
        ways = [way for way in ways if way[2] < scans]
        starts: Sequence[int] = range(scans)
        if all(isinstance(part, Step) for part in load):
            marks = {0, *(way[2] for way in ways), *(way[2] + 1 for way in ways)}
            starts = sorted(marks - {scans})
        found = Upset(starts, np.zeros((len(starts), len(self.process.c))), np.zeros(len(starts)))
        for part, entry, whole, rest in ways:
            self._add(part, entry, time, rest, found, found.place(whole))
        return found

    def _add(
        self,
        part: Step | Ramp | Sine,
        entry: Entry,
        time: float,
        rest: float,
        upset: Upset,
        place: int,
    ) -> None:
        """What is added from `rest` after the start of a place on."""
        state, pv, following = upset.state, upset.direct, place + 1
        if isinstance(part, Step):
            if time >= rest:
                state[place] += self.hold(entry, time - rest)[1] * part.size
                pv[place] += entry.d * part.size
            state[following:] += self.hold(entry, time)[1] * part.size
            if entry.d:
                pv[following:] += entry.d * part.size
            return
        # The signal drives the plant from a small state of its own: x' = A x + b (w C), w' = W w.
        rates, start, shown = _generator(part)
        if time >= rest:
            moved = _driven(self.process.a, entry.b, rates, shown, time - rest)
            state[place] += moved @ start
            pv[place] += entry.d * float(part.values(np.array([part.time + time - rest]))[0])
        since: Array = np.arange(float(following), len(pv)) - place
        since *= self.clock.scan
        since -= rest
        moving = np.column_stack(
            [_generator_at(part, since), part.values(part.time + since + time)]
        )
        state[following:] += moving[:, :-1] @ _driven(self.process.a, entry.b, rates, shown, time).T
        pv[following:] += entry.d * moving[:, -1]


@dataclass(frozen=True)
class Upset:
    """What comes from an upset at each scan by itself, the same from one of `starts` to the next.

    A signal that is not made of steps has a start at every scan.
    """

    starts: Sequence[int]
    """Scans, rising from 0."""
    state: Array
    """(starts, n), what it adds to the state from that scan on."""
    direct: Array
    """(starts,), what it adds to PV [%]."""

    def place(self, scan: int) -> int:
        """Which of the starts a scan belongs to."""
        return bisect_right(self.starts, scan) - 1

    def scans(self, start: int, end: int) -> Iterator[tuple[list[float], float]]:
        """As `over`, scan by scan."""
        first, last = self.place(start), self.place(end - 1) + 1
        marks = [start, *self.starts[first + 1 : last], end]
        for place, (before, later) in enumerate(pairwise(marks), first):
            yield from repeat(
                (self.state[place].tolist(), float(self.direct[place])), later - before
            )

    def over(self, start: int, end: int) -> tuple[Array, Array]:
        """For each scan from `start` to before `end`: (scans, n) and (scans,)."""
        first, last = self.place(start), self.place(end - 1) + 1
        marks = [start, *self.starts[first + 1 : last], end]
        lengths = [later - before for before, later in pairwise(marks)]
        return (
            self.state[first:last].repeat(lengths, axis=0),
            self.direct[first:last].repeat(lengths),
        )

    def until(self, scan: int, later: Upset) -> Upset:
        """The same before a scan, another from there on."""
        kept, place = bisect_left(self.starts, scan), later.place(scan)
        return Upset(
            [*self.starts[:kept], scan, *later.starts[place + 1 :]],
            np.concatenate([self.state[:kept], later.state[place:]]),
            np.concatenate([self.direct[:kept], later.direct[place:]]),
        )


def _generator(part: Ramp | Sine) -> tuple[Array, Array, Array]:
    """Rates W (2, 2), start (2,) and reading (2,) of the small system that makes the signal."""
    if isinstance(part, Ramp):
        return np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([0.0, part.slope]), np.array([1.0, 0.0])
    w = 2.0 * math.pi / part.period
    return np.array([[0.0, w], [-w, 0.0]]), np.array([0.0, part.amplitude]), np.array([1.0, 0.0])


def _generator_at(part: Ramp | Sine, since: Array) -> Array:
    """Its state (n, 2) at times after its start (n,) [s]."""
    if isinstance(part, Ramp):
        return np.column_stack([part.slope * since, np.full(len(since), part.slope)])
    angle = 2.0 * math.pi / part.period * since
    return part.amplitude * np.column_stack([np.sin(angle), np.cos(angle)])


def _driven(a: Array, b: Array, rates: Array, shown: Array, time: float) -> Array:
    """What the signal's state at the start adds to the plant's over `time` [s], (n, 2)."""
    n = len(b)
    whole = np.zeros((n + 2, n + 2))
    # Both below one diagonal: the signal first, so that a triangular A stays triangular.
    whole[:2, :2], whole[2:, 2:], whole[2:, :2] = rates, a, np.outer(b, shown)
    return hold(whole, np.zeros(n + 2), time)[0][2:, :2]


@dataclass(frozen=True)
class Inputs:
    """What every scan meets from outside."""

    setpoint: Array
    """(scans,) [%]"""
    upset: Upset
    """What it adds to the state in the scan, and to PV as it is read."""
    noise: Array | None
    """(scans,), what the sensor adds to that [%]."""
    cuts: tuple[int, ...]
    """Scans, rising from 0 to the last, between which nothing changes that is not `varying`, but
    for what the upset adds to the state in the scan before a cut."""
    varying: frozenset[str]
    """What may change at any scan: setpoint, load, noise."""


def inputs(
    held: Held,
    scans: int,
    setpoint: Array | Step,
    load: Signal,
    noise: Array | None = None,
) -> Inputs:
    """The inputs of a run; the setpoint as steps, or as the controller takes it at each scan."""
    clock = held.clock
    marks, varying = {0, scans}, set[str]()
    if isinstance(setpoint, Step):
        seen = clock.first_scan(setpoint.time) if setpoint.size else scans
        marks.add(seen)
        taken = np.zeros(scans)
        taken[seen:] = setpoint.size
    else:
        taken = setpoint
        varying.add("setpoint")
    load = tuple(part for part in load if not isinstance(part, Step) or part.size)
    upset = held.upset(load, scans, clock.scan)
    is_direct = bool(clock.lead) or any(entry.d for entry in held.process.load)
    if is_direct:
        ahead = held.upset(load, scans, clock.lead)
        upset = replace(upset, direct=ahead.direct + ahead.state @ held.process.c)
    if len(load) > _FEW_STEPS or not all(isinstance(part, Step) for part in load):
        varying.add("load")
    else:
        for part in load:
            for entry in held.process.load:
                whole, _ = clock.place(part.time + entry.dead_time)
                marks |= {whole, whole + 1} if is_direct else {whole + 1}
    if noise is not None:
        varying.add("noise")
    cuts = tuple(sorted(mark for mark in marks if 0 <= mark <= scans))
    return Inputs(taken, upset, noise, cuts, frozenset(varying))


# --- the run -------------------------------------------------------------------------------------


@dataclass
class Run:
    """A loop under way: what it has done so far, and what the next scan starts from."""

    held: Held
    algorithm: Algorithm
    inputs: Inputs
    scans: int
    through: Callable[[float], float] | None = None
    """What comes through the valve of an output [%]; None is all of it."""
    received: Callable[[float], float] | None = None
    """What the controller receives of a PV [%]; None is all of it."""
    at: int = 0
    memory: Memory = field(default_factory=Memory)
    diverged: bool = False

    def __post_init__(self) -> None:
        n = len(self.held.process.c)
        self._take(self.held)
        self.x = np.zeros(n)
        self.pieces: list[Callable[[], Array]] = []
        """What works out the states of each stretch so far."""
        self.pv = np.empty(self.scans)
        self.measured = self.pv if self._is_plain else np.empty(self.scans)
        self.acting = np.zeros(self.back + self.scans)
        """What the plant was given, from `back` scans before the start on."""
        self.outputs = self.acting[self.back :]
        if self.through is not None:
            self.outputs = np.zeros(self.scans)

    def _take(self, held: Held) -> None:
        self.held, self.over = held, held.over(held.clock.scan)
        self.read, self.weights = held.reading()
        self.back = max([1, *self.over.taps, *self.weights])
        """How far back outputs still act [scans]."""
        columns = [*self.over.phi.T, *self.over.taps.values(), *np.eye(len(self.over.phi))]
        self._rows = np.array(columns).T.tolist()
        """The next state from the state, the outputs of `over.taps` and what the upset adds."""

    @property
    def _is_plain(self) -> bool:
        return self.inputs.noise is None and self.received is None

    def course(self) -> Course:
        """What the loop went through up to here."""
        done = self.at
        acting = self.acting[self.back : self.back + done]
        return Course(
            self.outputs[:done],
            self.pv[:done],
            self.diverged,
            acting,
            self.measured[:done],
            tuple(self.pieces),
        )

    def change(self, held: Held) -> None:
        """Go on with a plant of the same states whose gain or dead times are others."""
        past = self.acting[self.back : self.back + self.at]
        before = self.back
        self._take(held)
        earlier = self.acting[:before]
        longer = np.zeros(self.back + self.scans)
        kept = min(before, self.back)
        longer[self.back - kept : self.back] = earlier[before - kept :]
        longer[self.back : self.back + self.at] = past
        shared = self.through is None
        self.acting = longer
        if shared:
            self.outputs = self.acting[self.back :]

    def step(self, end: int, by: Callable[[float, float], float]) -> None:
        """Scan by scan up to `end`, the controller executed by `by`.

        Plain numbers and lists: for a handful of states they are far faster than arrays.
        """
        start, back, given = self.at, self.back, self.inputs
        x, row = self.x.tolist(), self.read.tolist()
        acting: list[float] = self.acting[start : start + back].tolist()
        outputs, states, pv, measured = [], [], [], []
        backs = [(back - far, weight) for far, weight in self.weights.items()]
        taps = [back - far for far in self.over.taps]
        rows = self._rows
        outside = zip(
            given.upset.scans(start, end),
            given.setpoint[start:end].tolist(),
            repeat(0.0) if given.noise is None else given.noise[start:end].tolist(),
            strict=False,
        )
        through, received = self.through, self.received
        for i, ((pushed, direct), setpoint, disturbance) in enumerate(outside):
            y = direct + sum(map(mul, row, x))
            for place, weight in backs:
                y += weight * acting[i + place]
            if not -BOUND <= y <= BOUND:
                self.diverged = True
                break
            states.append(x)
            pv.append(y)
            seen = y + disturbance
            if received is not None:
                seen = received(seen)
            measured.append(seen)
            output = by(setpoint, seen)
            outputs.append(output)
            acting.append(output if through is None else through(output))
            moved = x + [acting[i + tap] for tap in taps] + pushed
            x = [sum(map(mul, line, moved)) for line in rows]
        done = start + len(pv)
        self.pieces.append(lambda: np.array(states).reshape(len(pv), len(x)))
        self.pv[start:done] = pv
        if not self._is_plain:
            self.measured[start:done] = measured
        self.acting[start + back : done + back] = acting[back:]
        if self.through is not None:
            self.outputs[start:done] = outputs
        self.x, self.at = np.array(x), done


def step_through(
    held: Held, algorithm: Algorithm, scans: int, setpoint: Step, load: Step
) -> Course:
    """As `run`, each scan by itself."""
    whole = Run(held, algorithm, inputs(held, scans, setpoint, (load,)), scans)
    whole.step(scans, algorithm.start(whole.memory))
    return whole.course()
