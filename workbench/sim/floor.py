"""The floor: what no controller whatever can undercut after a load step on this plant.

The controller of the floor knows the upset, with its size and for ever, from the instant at which
it shows in PV - or at which it is measured, where there is a feedforward.  With a scan interval it
knows at the first scan at which PV is another one; its output changes after the computing delay
and is held from scan to scan; without one it acts at once.  From there on it may do
anything within the output limits, and before it leaves the output where it rests.  So PV is

    y(t) = y_free(t)               until the first move and the plant's dead time have passed, T0
    y(t) = y_free(t) + (G u)(t)    from there on

and the floors are, each with the best moves of its own,

    peak deviation   least over u of max |y(t)|
    IAE              least over u of integral of |y(t)| dt, the time between scans included

over the load window.  Both are linear programmes; what is shown is the value of a point of the dual
programme, for which every number is a lower bound whatever the grid is like:

    IAE >= sum_i v_i f_i + sum_j min(low q_j, high q_j),   q = A'v,  |v_i| <= 1

with f_i the area of y_free over a segment of time and A_ij what the output in the interval j adds
to it; |area| is never more than the area of |y|.  A grid that ends early leaves a cost out, and one
whose intervals are many scans long is judged with the output free at each part of them, so that
either way the bound stays below the truth.

A zero z in the right half plane fixes the transform of PV there, Y(z) = G_d(z) d/z, for every
bounded output; so what is left after the end of the grid counts as |integral exp(-z t) y dt| does
(the same constraint as in J.S. Freudenberg and D.P. Looze, "Right half plane poles and zeros and
design tradeoffs in feedback systems", IEEE Trans. Automatic Control 30(6), 1985, 555-565, from
memory).  A rate limit of the output is not counted: the bound holds, but may be low.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve
from workbench.model.feedback import Loop
from workbench.model.matrix import expm
from workbench.model.programme import least
from workbench.model.response import step_response
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.instruments import Instruments
from workbench.sim.scenario import Events
from workbench.units import Figure

Array = NDArray[np.float64]

_MOVES: Final = 36
"""Intervals of the output in one grid; twice as many, half as fine, where it is a long one."""
_PARTS: Final = 4
"""Parts of an interval, over each of which the area of PV counts by itself."""
_EARLY: Final = 12
"""Intervals in which the peak is looked for, where PV is back by the end of all."""
_CLOSER: Final = 3
"""How much finer their parts are."""
_GROWTH: Final = 4
"""How much longer the next grid is, where PV is not back by the end of one."""
_ROOM: Final = 2.5
"""How much longer the first grid is than PV takes to come back at full output."""
_LOOKS: Final = 64
"""Instants at which PV is looked at to find that out, again and again closer."""
_LEFT: Final = 0.003
"""Share of the cost that may lie in the last quarter of a grid that is long enough."""
_OPEN: Final = 1000.0
"""An output that is limited on one side only counts as limited here on the other [%]."""
_FAR: Final = 8.0
"""Time constants of a zero in the right half plane that a grid may last."""
_INTEGRAL: Final = TransferFunction.ratio((1.0,), [(1.0, 0.0)])


@dataclass(frozen=True)
class Floor:
    """The least that any controller leaves, in percent of the PV span; what is not known says why.

    The fixed parts are what has happened by the time at which the first move shows: the share of
    dead time, scan and computing delay.  What is beyond them is that of the output limits and of
    the plant's own lags.
    """

    peak_deviation: Figure
    """[%]"""
    load_iae: Figure
    """[% s]"""
    fixed_peak: Figure
    """[%]"""
    fixed_iae: Figure
    """[% s]"""
    acts_after: Figure
    """From the upset to when the first move shows in PV [s]."""


def floor(loop: Loop, events: Events, instruments: Instruments | None = None) -> Floor:
    """The floor of a load step from rest.

    Parameters
    ----------
    loop
        Plant, load path, scan and limits; the settings do not matter.
    events
        A load step, perhaps after a setpoint step that has settled [% of span, s].
    instruments
        Where the valve is not linear nothing is claimed; its faults only add to the floor.

    Notes
    -----
    For a linear plant.  To about 1 % of the optimum, and below it.
    """
    reason = _not_known(loop, events, instruments)
    if reason:
        return Floor(*[Figure(None, reason)] * 5)
    acts = _first_move(loop, events)
    shows = acts + loop.plant.dead_time
    window = events.until - events.load_at
    fixed_peak, fixed_iae = _fixed(loop.load, events.load_step, min(shows, window))
    low, high = _limits(loop, events)
    peak, iae = fixed_peak, fixed_iae
    at_once = not acts and loop.load is loop.plant and low <= -events.load_step <= high
    if shows < window and not at_once:
        step, lasts = events.load_step, window - shows
        rest = _Rest(loop.plant, loop.load, loop.scan, step, shows, lasts, low, high)
        try:
            peak, beyond = _bounds(rest, fixed_peak, fixed_iae)
        except CannotSolve as fault:
            none = Figure(None, fault.what)
            return Floor(none, none, Figure(fixed_peak), Figure(fixed_iae), Figure(shows))
        iae = fixed_iae + beyond
    return Floor(*map(Figure.of, (peak, iae, fixed_peak, fixed_iae, shows)))


def _not_known(loop: Loop, events: Events, instruments: Instruments | None) -> str:
    """Why there is no floor; empty where there is."""
    if not events.load_step:
        return "the scenario has no load step"
    if isinstance(loop, Structure) and loop.inner is not None:
        return "it is only known without an inner loop"
    if loop.plant.has_delayed_feedback or loop.load.has_delayed_feedback:
        return "it is only known without a dead time inside a feedback of the plant"
    if not events.are_steps:
        return "it is only known for a load step, in automatic, on one plant"
    if events.setpoint_step and events.setpoint_at >= events.load_at:
        return "it is only known while the setpoint stands still"
    if instruments is not None and instruments.valve.characteristic != "linear":
        return "it is only known for a linear valve"
    if not loop.plant.numerator:
        return "nothing that the output does reaches PV"
    return _unbounded(loop, *_limits(loop, events))


def _unbounded(loop: Loop, low: float, high: float) -> str:
    """Why the limits, or the want of them, leave no floor."""
    if low > 0.0 or high < 0.0:
        return "the setpoint cannot be held within the output limits"
    if math.isinf(high):
        if any(zero.real > 0.0 and zero.imag for zero in loop.plant.zeros()):
            return "PV turns back twice: it is only known with output limits"
        if len(loop.plant.numerator) > 1:
            return "paths of unequal dead time: it is only known with output limits"
    return ""


def _limits(loop: Loop, events: Events) -> tuple[float, float]:
    """Output limits about where the output holds the setpoint before the upset [%]."""
    held = 0.0
    gain = loop.plant.gain().value
    if events.setpoint_step and gain:
        held = events.setpoint_step / gain
    low = -math.inf if loop.low is None else loop.low - held
    high = math.inf if loop.high is None else loop.high - held
    if math.isinf(low) and math.isinf(high):
        return low, high
    return max(low, -_OPEN), min(high, _OPEN)


def _first_move(loop: Loop, events: Events) -> float:
    """When the output can first answer, after the upset [s]."""
    measured = isinstance(loop, Structure) and loop.feedforward is not None
    seen = 0.0 if measured else loop.load.dead_time
    if loop.scan is None:
        return seen
    scans = (events.load_at + seen) / loop.scan
    at = math.ceil(scans - 1e-9)
    if not measured and loop.load.relative_degree > 0 and at - scans < 1e-9:
        # At its very first instant a deviation that begins at 0 cannot be seen.
        at += 1
    return at * loop.scan - events.load_at + loop.computing_delay


@lru_cache(maxsize=64)
def _fixed(load: TransferFunction, size: float, until: float) -> tuple[float, float]:
    """Peak and IAE of PV as nobody controls it [%, % s]."""
    if until <= load.dead_time:
        return 0.0, 0.0
    time = np.linspace(load.dead_time, until, 401)
    free = np.abs(step_response(load, time) * size)
    return float(free.max()), float(np.trapezoid(free, time))


@dataclass(frozen=True)
class _Grid:
    """Where time is cut after the first move shows."""

    step: float
    """Length of an interval of the output [s]."""
    moves: int
    is_exact: bool
    """Each interval is one scan."""
    splits: int = _PARTS
    """Parts of an interval, over each of which PV counts by itself."""

    @property
    def part(self) -> float:
        """Length of a segment of PV [s]."""
        return self.step / self.splits

    @property
    def parts(self) -> int:
        """Number of segments."""
        return self.moves * self.splits


@dataclass(frozen=True)
class _Rows:
    """f + A u: areas of PV over the segments, or PV at their ends, and perhaps a last one more."""

    free: Array
    """f, (rows,)"""
    answer: Array
    """To the output changed by 1 at the beginning of the grid and held, (parts,)."""
    last: Array
    """The same of each further row at the end of the grid, by parts before it, (more, parts)."""

    def moved(self, grid: _Grid) -> Array:
        """A, to the output of each interval alone (rows, moves)."""
        late = np.zeros((grid.parts, grid.moves + 1))
        for move in range(grid.moves):
            begin = move * grid.splits
            late[begin:, move] = self.answer[: grid.parts - begin]
        ahead = np.zeros((len(self.last), grid.moves + 1))
        ahead[:, :-1] = self.last[:, ::-1][:, :: grid.splits]
        whole = np.concatenate((late, ahead))
        return whole[:, :-1] - whole[:, 1:]

    def pulled(self, weights: Array) -> Array:
        """A'v with the output of each part by itself (parts,)."""
        parts = len(self.answer)
        alone = np.diff(self.answer, prepend=0.0)
        found = np.correlate(weights[:parts], alone, "full")[parts - 1 :][:parts]
        ends = np.diff(self.last, axis=1, prepend=0.0)[:, ::-1]
        return np.asarray(found + weights[parts:] @ ends, np.float64)


@dataclass(frozen=True)
class _Rest:
    """The load step after the first move has begun to show."""

    plant: TransferFunction
    load: TransferFunction
    scan: float | None
    """[s]"""
    size: float
    """Of the load step."""
    shows: float
    """When that is, after the upset [s]."""
    lasts: float
    """From there to the end of the window [s]."""
    low: float
    high: float

    def bounds(self, fixed_peak: float, fixed_iae: float) -> tuple[float, float]:
        """Peak over all, and IAE beyond the fixed part: the best bounds of the grids tried."""
        peak, iae = fixed_peak, 0.0
        for grid in self._grids():
            if self.scan is None and math.isinf(self.high):
                return max(peak, self._turned(1.0)), self._turned(0.0)
            found, left = self._least_area(grid, self._rows(grid, True), fixed_iae)
            iae = max(iae, found)
            if left <= _LEFT:
                # The peak is near the beginning, and narrow.
                near = replace(grid, moves=min(grid.moves, _EARLY), splits=_PARTS * _CLOSER)
                return max(peak, self._least_peak(near, self._rows(near, False), peak)), iae
            peak = max(peak, self._least_peak(grid, self._rows(grid, False), peak))
        return peak, iae

    def _grids(self) -> list[_Grid]:
        """Each longer than the one before, to the end of the window."""
        scan = self.scan
        if scan and scan > self.lasts:
            return []
        if math.isinf(self.high):
            step = scan or self.lasts / _MOVES
            moves = min(_MOVES, int(self.lasts / step + 1e-9))
            if self._zeros():
                moves = min(moves, max(2, int(_FAR / (max(self._zeros()) * step))))
            return [_Grid(step, moves, True)]
        grids = []
        reach = min(max(_ROOM * self._returns(), _MOVES * (scan or 0.0)), self.lasts)
        while True:
            grids.append(self._reaching(reach))
            if reach >= self.lasts:
                return grids
            reach = min(_GROWTH * reach, self.lasts)

    def _reaching(self, reach: float) -> _Grid:
        """The grid of a time [s]; few scans are looked at closely, as PV moves between them too."""
        scan = self.scan
        if not scan:
            return _Grid(reach / (2 * _MOVES), 2 * _MOVES, False, _PARTS // 2)
        scans = max(1, math.floor(reach / scan + 1e-9))
        if scans <= _MOVES:
            return _Grid(scan, scans, True)
        wide = math.ceil(scans / (2 * _MOVES))
        return _Grid(scan * wide, scans // wide, wide == 1, _PARTS // 2)

    def _returns(self) -> float:
        """How long PV takes to come back with the output at its limit all the time [s]."""
        plant, load, span = self.plant * _INTEGRAL, self.load * _INTEGRAL, self.lasts
        while True:
            step = span / _LOOKS
            moved = _lattice(plant, self.plant.dead_time, step, _LOOKS + 1)
            free = _lattice(load, self.shows, step, _LOOKS + 1) * self.size
            ends = np.array([self.low * moved, self.high * moved]) + free
            back = (ends.min(axis=0) <= 0.0) & (ends.max(axis=0) >= 0.0)
            back[0] = False
            if not back.any():
                return self.lasts
            first = int(back.argmax())
            if first > 4 or span < 1e-6 * self.lasts:
                return first * step
            span = first * step

    def _zeros(self) -> list[float]:
        return [zero.real for zero in self.plant.zeros() if zero.real > 0.0 == zero.imag]

    def _turned(self, power: float) -> float:
        """What the worst zero in the right half plane leaves: area, or peak with power 1."""
        left = [abs(self._left(zero, 0.0)) * zero**power for zero in self._zeros()]
        return max(left, default=0.0)

    def _left(self, zero: float, after: float) -> float:
        """exp(z T) times what Y(z) lacks at T, if the output never moves."""
        late = self.shows + after
        growing = self.load * TransferFunction.ratio((1.0,), [(1.0, -zero)]) * _INTEGRAL
        whole = float(self.load(complex(zero)).real) / zero
        so_far = float(_lattice(growing, late, 1.0, 1)[0]) if late else 0.0
        return self.size * (math.exp(zero * late) * whole - so_far)

    def _rows(self, grid: _Grid, is_area: bool) -> _Rows:
        plant, load, count = self.plant, self.load, grid.parts + 1
        step = _INTEGRAL * _INTEGRAL if is_area else _INTEGRAL
        moved = _lattice(plant * step, plant.dead_time, grid.part, count)
        free = _lattice(load * step, self.shows, grid.part, count) * self.size
        if is_area:
            moved, free = np.diff(moved), np.diff(free)
        else:
            moved, free = moved[1:], free[1:]
        zeros = [z for z in self._zeros() if z * grid.part * grid.parts <= _FAR]
        last = np.zeros((len(zeros), grid.parts))
        more = np.zeros(len(zeros))
        for row, zero in enumerate(zeros):
            weight = 1.0 / len(zeros) if is_area else zero
            growing = plant * TransferFunction.ratio((1.0,), [(1.0, -zero)]) * _INTEGRAL
            last[row] = -weight * _lattice(growing, plant.dead_time, grid.part, count)[1:]
            more[row] = weight * self._left(zero, grid.part * grid.parts)
        return _Rows(np.concatenate((free, more)), moved, last)

    def _least_area(self, grid: _Grid, rows: _Rows, fixed: float) -> tuple[float, float]:
        """A bound of the IAE, and the share of it that lies in the last quarter of the grid."""
        f, a, low, high, size = self._scaled(rows, grid)
        if not size:
            return 0.0, 0.0
        ones = np.ones(len(f))
        # x = v + 1; then, within limits, the parts of A'v above and below 0.
        sides = [a.T, -np.eye(grid.moves), np.eye(grid.moves)]
        cost = [-f, np.full(grid.moves, -low), np.full(grid.moves, high)]
        above = np.concatenate((2.0 * ones, np.full(2 * grid.moves, math.inf)))
        if math.isinf(high):
            sides, cost, above = sides[:1], cost[:1], above[: len(f)]
        x, prices = least(np.hstack(sides), a.T @ ones, np.concatenate(cost), above)
        weights = np.clip(x[: len(f)] - 1.0, -1.0, 1.0)
        left = np.abs(f + a @ prices)
        late = float(left[-(grid.parts // 4) :].sum() * size / (left.sum() * size + fixed))
        return self._proved(grid, rows, weights), late

    def _least_peak(self, grid: _Grid, rows: _Rows, fixed: float) -> float:
        """A bound of the peak, where it is more than the fixed one."""
        f, a, low, high, size = self._scaled(rows, grid)
        if not size:
            return 0.0
        ones, none = np.ones((1, len(f))), np.zeros((1, grid.moves))
        sides = [
            np.vstack((a.T, ones)),
            np.vstack((-a.T, ones)),
            np.vstack((none.T, [[1.0]])),
            np.vstack((-np.eye(grid.moves), none)),
            np.vstack((np.eye(grid.moves), none)),
        ]
        cost = [-f, f, np.array([-fixed / size]), np.full(grid.moves, -low)]
        cost.append(np.full(grid.moves, high))
        if math.isinf(high):
            sides, cost = sides[:3], cost[:3]
        whole, costs = np.hstack(sides), np.concatenate(cost)
        target = np.append(np.zeros(grid.moves), 1.0)
        x, _ = least(whole, target, costs, np.full(len(costs), math.inf))
        weights = x[: len(f)] - x[len(f) : 2 * len(f)]
        total = float(np.abs(weights).sum())
        if total > 1.0:
            weights /= total
        return self._proved(grid, rows, weights) + max(0.0, 1.0 - total) * fixed

    def _scaled(self, rows: _Rows, grid: _Grid) -> tuple[Array, Array, float, float, float]:
        """The rows f and A of size 1, the limits in that scale, and the size of f."""
        a = rows.moved(grid)
        size, by = float(np.abs(rows.free).max()), float(np.abs(a).max())
        if not size or not by:
            return rows.free, a, self.low, self.high, 0.0
        return rows.free / size, a / by, self.low * by / size, self.high * by / size, size

    def _proved(self, grid: _Grid, rows: _Rows, weights: Array) -> float:
        """The value of a point of the dual, a bound for any output within the limits."""
        value = float(weights @ rows.free)
        if math.isinf(self.high):
            return value
        pulled = rows.pulled(weights)
        if grid.is_exact:
            pulled = pulled.reshape(grid.moves, grid.splits).sum(axis=1)
        return value + float(np.minimum(self.low * pulled, self.high * pulled).sum())


@lru_cache(maxsize=64)
def _bounds(rest: _Rest, fixed_peak: float, fixed_iae: float) -> tuple[float, float]:
    """The bounds of a rest; kept, because a change of settings moves none of what they hang on."""
    return rest.bounds(fixed_peak, fixed_iae)


def _lattice(function: TransferFunction, start: float, step: float, count: int) -> Array:
    """Inverse transform of a strictly proper function at start + k step, (count,)."""
    realised = function.realise()
    total = np.zeros(count)
    move = expm(realised.a * step)
    for output in realised.outputs:
        skipped = max(0, math.ceil((output.dead_time - start) / step - 1e-9))
        if skipped >= count:
            continue
        since = max(0.0, start + skipped * step - output.dead_time)
        states = np.empty((count - skipped, len(realised.b)))
        states[0] = expm(realised.a * since) @ realised.b
        # By doubling: the rows known so far, moved on by as many steps.
        known, further = 1, move
        while known < len(states):
            more = min(known, len(states) - known)
            states[known : known + more] = states[:more] @ further.T
            known, further = known + more, further @ further
        total[skipped:] += states @ output.c
    return total
