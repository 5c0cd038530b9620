"""Floors against controllers that try to beat them, and against the best that can be found.

The plants here are written as lags, leads, integrators and dead time, and answered by a state space
made from their polynomials and stepped with scipy's matrix exponential on a fine lattice of time:
nothing of the program's own but the loop that is handed to it.
"""

from __future__ import annotations

import math
import random
from dataclasses import dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm
from scipy.optimize import linprog
from scipy.sparse import bmat, csr_matrix, eye

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.floor import floor
from workbench.sim.loop import simulate
from workbench.sim.metrics import measure
from workbench.sim.scenario import Events

solve: Any = linprog
Array = NDArray[np.float64]
Whole = NDArray[np.signedinteger]


@dataclass(frozen=True)
class Way:
    """gain prod(lead s + 1) exp(-dead_time s) / (s^integrators prod(lag s + 1))."""

    gain: float
    lags: tuple[float, ...] = ()
    dead_time: float = 0.0
    leads: tuple[float, ...] = ()
    integrators: int = 0

    def polynomials(self) -> tuple[Array, Array]:
        top, below = np.array([self.gain]), np.array([1.0])
        for lead in self.leads:
            top = np.convolve(top, [lead, 1.0])
        for lag in self.lags:
            below = np.convolve(below, [lag, 1.0])
        return top, np.concatenate((below, np.zeros(self.integrators)))

    def transfer(self) -> TransferFunction:
        factors = [*((1.0, 0.0) for _ in range(self.integrators)), *((t, 1.0) for t in self.lags)]
        return TransferFunction.ratio(self.polynomials()[0].tolist(), factors, self.dead_time)

    def step(self, spacing: float, count: int, start: float = 0.0) -> Array:
        """Answer to a step at 0, without the dead time, at start + k spacing (count,)."""
        top, below = self.polynomials()
        n = len(below) - 1
        a, c = np.zeros((n + 1, n + 1)), np.zeros(n + 1)
        a[0, :n], a[0, n] = -below[1:] / below[0], 1.0
        a[1:n, : n - 1] = np.eye(n - 1)
        c[n - len(top) : n] = top / below[0]
        # Blocks of many readings each, from one state to the next.
        block = math.isqrt(count) + 1
        readings = np.array([c @ expm(a * spacing * k) for k in range(block)])
        state, move = expm(a * start)[:, n], expm(a * spacing * block)
        found = []
        for _ in range(-(-count // block)):
            found.append(readings @ state)
            state = move @ state
        return np.concatenate(found)[:count]


@dataclass(frozen=True)
class Task:
    """A load step on a plant, and what the output may do."""

    plant: Way
    load: Way | None = None
    scan: float | None = None
    computing_delay: float = 0.0
    low: float | None = None
    high: float | None = None
    until: float = 600.0
    size: float = 5.0

    def loop(self, gains: Gains | None = None) -> Loop:
        plant = self.plant.transfer()
        return Loop(
            plant,
            plant if self.load is None else self.load.transfer(),
            gains or Gains(1.0),
            scan=self.scan,
            computing_delay=self.computing_delay,
            low=self.low,
            high=self.high,
        )

    @property
    def upset(self) -> Way:
        return self.load or self.plant

    @property
    def events(self) -> Events:
        return Events(0.0, 0.0, self.size, 0.0, self.until)

    @property
    def first(self) -> float:
        """When the output may first move: the upset shows at the first scan that is later."""
        seen = self.upset.dead_time
        if self.scan is None:
            return seen
        return (math.floor(seen / self.scan + 1e-9) + 1) * self.scan + self.computing_delay


@dataclass(frozen=True)
class Lattice:
    """PV of a task on a fine lattice of time, by superposition of steps."""

    task: Task
    spacing: float
    """[s]"""

    @property
    def shows(self) -> float:
        return self.task.first + self.task.plant.dead_time

    @property
    def count(self) -> int:
        """Lattice instants from when the first move shows to the end."""
        return int((self.task.until - self.shows) / self.spacing + 1e-9) + 1

    def free(self) -> Array:
        """PV without a controller, from when the first move would show (count,)."""
        late = self.shows - self.task.upset.dead_time
        return self.task.size * self.task.upset.step(self.spacing, self.count, late)

    def fixed(self) -> tuple[float, float]:
        """Peak and IAE until then."""
        late = self.shows - self.task.upset.dead_time
        if not late:
            return 0.0, 0.0
        time = np.linspace(0.0, late, 2001)
        free = np.abs(self.task.size * self.task.upset.step(late / 2000, 2001))
        return float(free.max()), float(np.trapezoid(free, time))

    def judged(self, free: Array, answer: Array, moves: Array, at: Whole) -> tuple[float, float]:
        """Peak and IAE of PV over all, for moves (m,) made at lattice instants `at` (m,)."""
        pv = free.copy()
        for move, begin in zip(moves, at, strict=True):
            if move:
                pv[begin:] += move * answer[: len(pv) - begin]
        peak, area = self.fixed()
        area += float(np.trapezoid(np.abs(pv), dx=self.spacing))
        return max(peak, float(np.abs(pv).max())), area


# --- floors are reached --------------------------------------------------------------------------

LAG: Final = Way(1.8, (40.0,), 6.0)
TWO: Final = Way(1.0, (20.0, 8.0), 3.0)
TURNS: Final = Way(1.0, (20.0, 8.0), 2.0, (-5.0,))

REACHED: Final = (
    # task, time from one move to the next, moves at that pace; then ever longer ones to the end
    (Task(LAG, scan=1.0), 1.0, 40),
    (Task(LAG, scan=1.0, low=-10.0, high=10.0), 1.0, 60),
    (Task(LAG, scan=1.0, low=-6.0, high=6.0), 1.0, 80),
    (Task(LAG, scan=4.0, low=-50.0, high=50.0), 4.0, 40),
    (Task(LAG, scan=1.0, computing_delay=0.4, low=-20.0, high=20.0), 1.0, 60),
    (Task(LAG, scan=5.0, low=-4.0, high=4.0, until=300.0), 5.0, 50),
    (Task(LAG, low=-10.0, high=10.0), 0.1, 80),
    (Task(LAG, low=-50.0, high=50.0), 0.02, 80),
    (Task(TWO, scan=1.0), 1.0, 40),
    (Task(TWO, scan=1.0, low=-8.0, high=8.0), 1.0, 60),
    (Task(TWO, scan=4.0, low=-50.0, high=50.0), 4.0, 40),
    (Task(TWO, low=-8.0, high=8.0), 0.2, 80),
    (Task(TURNS, scan=1.0, low=-50.0, high=50.0), 1.0, 60),
    (Task(TURNS, scan=4.0, low=-8.0, high=8.0), 4.0, 50),
    (Task(TURNS, low=-8.0, high=8.0), 0.2, 100),
    (Task(Way(0.05, (), 4.0, integrators=1), scan=1.0, low=-20.0, high=20.0), 1.0, 40),
    (Task(Way(0.05, (7.0,), 4.0, integrators=1), low=-20.0, high=20.0), 0.2, 60),
    (Task(Way(-2.0, (-15.0,), 1.0), scan=0.5, low=-20.0, high=20.0, until=60.0), 0.5, 60),
    (Task(Way(1.0, (10.0,), 2.0), Way(2.0, (20.0,), 9.0), 1.0, low=-20.0, high=20.0), 1.0, 60),
    (Task(Way(1.5, (12.0, 6.0, 3.0), 4.0), scan=2.0, low=-30.0, high=30.0), 2.0, 50),
)


def reached(size: int, seed: int) -> tuple[float, list[str]]:
    """The least that a linear programme of its own finds, over the floor less 1: (worst, failures).

    A failure is a floor that the found moves undercut.
    """
    del seed  # the tasks are a list
    worst, failures = 0.0, []
    for task, pace, moves in REACHED[:size]:
        found = floor(task.loop(), task.events)
        for name, least, is_peak in (
            ("peak", found.peak_deviation.value, True),
            ("IAE", found.load_iae.value, False),
        ):
            assert least is not None
            best = _best(task, pace, moves, is_peak=is_peak)
            worst = max(worst, best / least - 1.0)
            if best < least * (1.0 - 1e-4):
                failures.append(f"{name} {best} below the floor {least}: {task}")
            elif best > 1.03 * least:
                failures.append(f"{name} floor {least} is not reached, {best}: {task}")
    return worst, failures


_FINE: Final = 10
"""Lattice steps from move to move."""
_CLOSER: Final = 6
"""How much finer the moves found are then played."""


def _best(task: Task, pace: float, moves: int, *, is_peak: bool) -> float:
    """The least peak or IAE with open-loop moves, by HiGHS on a fine lattice, then played."""
    lattice = Lattice(task, pace / _FINE)
    count = lattice.count
    free, answer = lattice.free(), task.plant.step(lattice.spacing, count)
    at = _instants(moves, _FINE, count)
    looked = np.unique(np.concatenate((np.arange(min(count, moves * _FINE)), _sparse(count))))
    pushed = np.zeros((len(looked), len(at)))
    for column, begin in enumerate(at):
        later = looked >= begin
        pushed[later, column] = answer[looked[later] - begin]
    low = -math.inf if task.low is None else task.low
    high = math.inf if task.high is None else task.high
    # The moves are changes of the level: u = level, level_k - level_(k-1) moves.
    levels = pushed.copy()
    levels[:, :-1] -= pushed[:, 1:]
    a = csr_matrix(levels)
    rows, n = levels.shape
    fixed, _ = lattice.fixed()
    width = np.gradient(looked * lattice.spacing)
    cost = np.concatenate((np.zeros(n), width, [0.0]))
    if is_peak:
        # A little of the area keeps PV from swinging where nothing looks at it.
        cost = np.append(1e-4 / float(width.sum()) * cost[:-1], 1.0)
    one = csr_matrix(np.ones((rows, 1)))
    sides = bmat([[a, -eye(rows), None], [-a, -eye(rows), None], [None, eye(rows), -one]])
    bounds: list[tuple[float, float]] = [(low, high)] * n + [(0.0, math.inf)] * rows
    bounds.append((fixed, math.inf))
    target = np.concatenate((-free[looked], free[looked], np.zeros(rows)))
    answered: Any = solve(cost, A_ub=sides, b_ub=target, bounds=bounds, method="highs-ipm")
    assert answered.x is not None, answered.message
    level = np.clip(answered.x[:n], low, high)
    closer = Lattice(task, lattice.spacing / _CLOSER)
    answer = task.plant.step(closer.spacing, closer.count)
    moved = np.diff(level, prepend=0.0)
    peak, area = closer.judged(closer.free(), answer, moved, at * _CLOSER)
    return peak if is_peak else area


def _instants(moves: int, pace: int, count: int) -> NDArray[np.intp]:
    """Lattice instants of the moves: one at each pace, then ever longer apart, whole paces."""
    at = list(range(0, min(moves * pace, count), pace))
    gap = pace
    while at[-1] + gap < count:
        at.append(at[-1] + gap)
        gap = pace * math.ceil(1.25 * gap / pace)
    return np.array(at, np.intp)


def _sparse(count: int) -> NDArray[np.intp]:
    return np.unique(np.geomspace(1, count, 400).astype(np.intp)) - 1


# --- floors are not beaten -----------------------------------------------------------------------


def beaten(size: int, seed: int) -> tuple[float, list[str]]:
    """Random controllers against the floors: (by how much the worst undercuts one, failures).

    A third are PID loops, the rest open-loop moves that know the upset from when it shows: full
    output for a while and then what holds PV, with chance on top.
    """
    draw = random.Random(seed)
    worst, failures = 0.0, []
    for number in range(size):
        task = _random_task(draw)
        found = floor(task.loop(), task.events)
        peak, iae = found.peak_deviation.value, found.load_iae.value
        assert peak is not None, found.peak_deviation.reason
        assert iae is not None
        tried = (_closed if number % 3 == 0 else _open)(draw, task, (peak, iae))
        if tried is None:
            continue
        for name, had, least in (("peak", tried[0], peak), ("IAE", tried[1], iae)):
            under = 1.0 - had / least if least else 0.0
            worst = max(worst, under)
            if under > 1e-4:
                failures.append(f"{name} {had} below the floor {least}: {task}")
    return worst, failures


def _random_task(draw: random.Random) -> Task:
    slow = draw.uniform(10.0, 50.0)
    kind = draw.choice(("lag", "lag", "two", "turns", "integrating", "unstable"))
    dead_time = draw.choice((0.5, 1.0)) * round(slow * draw.uniform(0.05, 0.6), 1)
    plant = {
        "lag": Way(draw.uniform(0.5, 3.0), (slow,), dead_time),
        "two": Way(draw.uniform(0.5, 3.0), (slow, slow * draw.uniform(0.1, 0.8)), dead_time),
        "turns": Way(1.0, (slow, 0.4 * slow), dead_time, (-slow * draw.uniform(0.05, 0.3),)),
        "integrating": Way(draw.uniform(0.01, 0.1), (), dead_time, integrators=1),
        "unstable": Way(-2.0, (-slow,), 0.3 * dead_time),
    }[kind]
    upset = None
    if kind in ("lag", "two") and draw.random() < 0.4:
        upset = Way(draw.uniform(0.3, 1.5), (draw.uniform(5.0, 40.0),), draw.uniform(0.0, 10.0))
    scan = draw.choice((None, 0.02, 0.05, 0.1))
    scan = None if scan is None else round(scan * slow, 2)
    # A limit above what the upset asks for, or none.
    asks = 5.0 if upset is None else 5.0 * upset.gain / plant.gain
    limit = draw.choice((None, 1.1, 1.5, 3.0, 10.0))
    delay = 0.0 if scan is None else scan * draw.choice((0.0, 0.5))
    task = Task(plant, upset, scan, delay, until=12.0 * slow)
    if kind == "unstable":
        task, limit = replace(task, until=3.0 * slow), limit or 10.0
    return task if limit is None else replace(task, low=-limit * asks, high=limit * asks)


def _closed(
    draw: random.Random, task: Task, floors: tuple[float, float]
) -> tuple[float, float] | None:
    """A PID loop of the program's own, stable or not; none that ran away or is limited analogue."""
    plant = task.plant
    gain = draw.uniform(0.2, 3.0) / max(abs(plant.gain) * (1.0 + plant.dead_time), 0.05)
    gains = Gains(gain, gain / draw.uniform(3.0, 60.0), gain * draw.choice((0.0, 2.0)), 0.5)
    if task.scan is None and task.low is not None:
        return None
    trace = simulate(task.loop(gains), task.events)
    if trace.diverged:
        return None
    if task.scan is None:
        measures = measure(trace, task.events)
        had, area = measures.load_peak_deviation.value, measures.load_iae.value
        return None if had is None or area is None else (had, area)
    # What the controller did, played anew: the rows of a trace pass by the tip of a peak.
    lattice = Lattice(task, task.scan / 12)
    at = np.arange(0, lattice.count, 12)
    instants = task.first + at * lattice.spacing
    rows = np.searchsorted(trace.time, instants + 1e-6 * task.scan, side="right") - 1
    moved = np.diff(trace.output[rows], prepend=0.0)
    return _played(lattice, moved, at, floors)


def _played(
    lattice: Lattice, moved: Array, at: Whole, floors: tuple[float, float]
) -> tuple[float, float]:
    """Peak and IAE of the moves; where they seem to undercut a floor, read 16 times closer."""
    had = (0.0, 0.0)
    for closer in (1, 16):
        fine = Lattice(lattice.task, lattice.spacing / closer)
        answer = lattice.task.plant.step(fine.spacing, fine.count)
        had = fine.judged(fine.free(), answer, moved, at * closer)
        if had[0] >= floors[0] and had[1] >= floors[1]:
            break
    return had


def _open(draw: random.Random, task: Task, floors: tuple[float, float]) -> tuple[float, float]:
    """Moves made in knowledge of the upset."""
    pace = task.scan or task.plant.lags[0] / 100.0 if task.plant.lags else task.scan or 0.2
    pace = abs(pace)
    lattice = Lattice(task, pace / 8)
    free = lattice.free()
    at = np.arange(0, lattice.count, 8)[:150]
    asks = -task.size if task.load is None else -task.size * task.load.gain / task.plant.gain
    low = -10.0 * abs(asks) if task.low is None else task.low
    high = 10.0 * abs(asks) if task.high is None else task.high
    level = np.full(len(at), asks)
    full = low if free[-1] * task.plant.gain > 0.0 else high
    kicked = draw.randint(0, 40)
    level[:kicked] = full
    if draw.random() < 0.4:
        level[kicked : kicked + draw.randint(0, 8)] = low + high - full
    if draw.random() < 0.5:
        noise = np.random.default_rng(draw.randrange(1 << 30)).normal(0.0, 1.0, len(at))
        level += draw.uniform(0.0, 3.0) * noise * np.exp(-np.arange(len(at)) / 10.0)
    level = np.clip(level, low, high)
    return _played(lattice, np.diff(level, prepend=0.0), at, floors)
