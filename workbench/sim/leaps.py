"""The sampled loop in leaps: whole stretches at once wherever it is linear.

Free of its limits the loop is s' = S s over one scan, s being the plant's state, the parts of the
controller and the outputs still on their way; held at a limit, or moving at its fastest, it is
another such loop, as the output then takes its next value from the one before.  A stretch is worked
out by powers of S: the first 64 of them by doubling, then every 64th state, then all of it as one
product.  It counts up to the first scan at which the condition of its mode fails; that scan is
stepped, and the mode it ends in is the next one tried.

What comes from far back - outputs on their way through a long dead time - is known beforehand for
as many scans as it is far, and so it enters as a given input instead of making S large; so do noise
and signals from outside that change at every scan.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import Enum
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.sim.controller import Algorithm
from workbench.sim.scans import BOUND, Course, Held, Run, inputs
from workbench.sim.signals import Step

Array = NDArray[np.float64]

_NEAR: Final = 60
"""Scans of dead time that a state is kept for; more are given inputs."""
_BLOCK: Final = 64
"""Scans whose powers of S are kept; with given inputs, `_GIVEN_BLOCK`."""
_GIVEN_BLOCK: Final = 38
_LEAST: Final = 12
"""Fewer scans than this are stepped."""
_FEW: Final = 2
"""Half the scans that are stepped where a mode ends."""
_LARGEST: Final = 1e200
"""Powers of an unstable loop whose squares sum up to this are not taken further."""


class Mode(Enum):
    """What the output does, scan by scan."""

    FREE = "what the algorithm wants"
    SLIDING = "the same, while the integral would drive it into a limit and is not advanced"
    HELD = "stands at a limit or moves at its fastest"
    FROZEN = "the same, and the integral is not advanced"


def run(
    held: Held,
    algorithm: Algorithm,
    scans: int,
    setpoint: Step,
    load: Step,
    noise: Sequence[float] | None = None,
) -> Course:
    """The course of the loop over a number of scans, from rest."""
    given = inputs(held, scans, setpoint, (load,), None if noise is None else np.array(noise))
    whole = Run(held, algorithm, given, scans)
    follow(whole, scans)
    return whole.course()


def follow(whole: Run, end: int) -> None:
    """Go on to scan `end` in automatic: in leaps where the loop is linear, else scan by scan."""
    step = whole.algorithm.start(whole.memory)
    if whole.algorithm.reshapes or whole.through is not None or whole.received is not None:
        whole.step(end, step)
        return
    leaps = Leaps(whole)
    cuts = [*(cut for cut in whole.inputs.cuts if cut < end and _matters(whole, cut)), end]
    by_hand, place = _FEW, 0
    while whole.at < end and not whole.diverged:
        while cuts[place] <= whole.at:
            place += 1
        stop = cuts[place]
        while stop - whole.at < _LEAST and place + 1 < len(cuts):
            if cuts[place + 1] - stop >= _LEAST:
                break
            place += 1
            stop = cuts[place]
        if stop - whole.at < 2 * _LEAST:
            whole.step(stop, step)
            continue
        gone = leaps.leap(stop)
        # Where the modes change quickly, more and more is stepped before the next try.
        by_hand = min(2 * by_hand, 4 * _BLOCK) if gone < _BLOCK else _FEW
        if whole.at < stop and not whole.diverged:
            whole.step(min(stop, whole.at + by_hand), step)


def _matters(whole: Run, cut: int) -> bool:
    """Something is other at this scan than at the one before, or the derivative sees it move."""
    given, algorithm = whole.inputs, whole.algorithm
    if not cut or (algorithm.kick and algorithm.derivative_weight):
        return True
    return bool(
        given.setpoint[cut] != given.setpoint[cut - 1]
        or given.direct[cut] != given.direct[cut - 1]
        or (given.state[cut] != given.state[cut - 1]).any()
    )


@dataclass(frozen=True)
class _Layout:
    """Where things stand among the columns of the loop over one scan."""

    n: int
    """States of the plant; filtered PV, I and D follow them."""
    near: int
    """Outputs kept, the newest first."""
    far: tuple[int, ...]
    """Scans back of the outputs that are given."""

    @property
    def newest(self) -> int:
        return self.n + 3

    @property
    def slope(self) -> int:
        """By how much a held output moves in a scan."""
        return self.newest + self.near

    @property
    def setpoint(self) -> int:
        """The setpoint; what the upset adds to PV and to the state follows it."""
        return self.slope + 1

    @property
    def change(self) -> int:
        """Of the setpoint since the scan before."""
        return self.setpoint + 2 + self.n

    @property
    def size(self) -> int:
        return self.change + 1 + len(self.far)

    def given(self, varying: frozenset[str]) -> list[int]:
        """Columns that are given to each scan, in the order of `Leaps.given_to`."""
        found = [self.setpoint, self.change] if "setpoint" in varying else []
        found += [self.setpoint + 1] if {"load", "noise"} & varying else []
        found += range(self.setpoint + 2, self.change) if "load" in varying else []
        return [*found, *range(self.change + 1, self.size)]


class Leaps:
    """Leaps of one run; it goes on from wherever the run stands."""

    def __init__(self, whole: Run) -> None:
        self.run = whole
        taps = whole.held.over(whole.held.clock.scan).taps
        backs = {*taps, *whole.weights}
        self.at = _Layout(
            len(whole.x),
            max([1, *(back for back in backs if back <= _NEAR)]),
            tuple(sorted(back for back in backs if back > _NEAR)),
        )
        self.longest = min(self.at.far, default=whole.scans)
        self.given = self.at.given(whole.inputs.varying)
        """Columns that are not kept but given to each scan."""
        self.kept = [k for k in range(self.at.change) if k not in self.given]
        self._powers: dict[Mode, _Powers] = {}

    def leap(self, stop: int) -> int:
        """Go on in the present mode while it lasts, at most to `stop`; the scans it went."""
        whole, start = self.run, self.run.at
        mode, slope = self._mode()
        reach = 4 * _BLOCK - 1
        while whole.at < stop and not whole.diverged:
            wanted = min(stop - whole.at, self.longest)
            if whole.algorithm.is_limited:
                wanted = min(wanted, reach)
                reach = 64 * reach + 63
            if self._stretch(mode, slope, wanted) < wanted:
                break
        return whole.at - start

    def _mode(self) -> tuple[Mode, float]:
        """What the latest scan did, and the move of a held output [%]."""
        whole, algorithm, m = self.run, self.run.algorithm, self.run.memory
        if not algorithm.is_limited or not whole.at:
            return Mode.FREE, 0.0
        before = float(whole.acting[whole.back + whole.at - 2]) if whole.at > 1 else 0.0
        moved = m.output - algorithm.sign * before
        if m.output in algorithm.bounds():
            return (Mode.FROZEN if m.frozen else Mode.HELD), 0.0
        if algorithm.move - abs(moved) <= 1e-12 * abs(moved):
            slope = math.copysign(algorithm.move, moved)
            return (Mode.FROZEN if m.frozen else Mode.HELD), slope
        return (Mode.SLIDING if m.frozen else Mode.FREE), 0.0

    # --- one stretch ---

    def _stretch(self, mode: Mode, slope: float, wanted: int) -> int:
        """Go on in a mode for at most `wanted` scans; how many it lasted."""
        whole, at, start = self.run, self.at, self.run.at
        powers = self._of(mode)
        state = self._state(slope)
        if self.given:
            rows, blocks = powers.driven(state, self.given_to(wanted), wanted)
        else:
            rows, blocks = powers.alone(state, wanted)
        wanted = min(wanted, rows.count)
        output = self._output(mode, slope, rows, wanted)
        if whole.algorithm.is_limited:
            wanted = self._lasting(mode, slope, output, rows)
        pv = rows.row(at.n, wanted) + whole.inputs.direct[start : start + wanted]
        if not (pv.max(initial=0.0) <= BOUND and pv.min(initial=0.0) >= -BOUND):
            wanted = int(np.argmin(np.abs(pv) <= BOUND))
            whole.diverged = True
        for i in range(at.n):
            whole.states[i, start : start + wanted] = rows.row(i, wanted)
        whole.pv[start : start + wanted] = pv[:wanted]
        if whole.inputs.noise is not None:
            noise = whole.inputs.noise[start : start + wanted]
            whole.measured[start : start + wanted] = pv[:wanted] + noise
        placed = start + whole.back
        np.multiply(
            output[:wanted], whole.algorithm.sign, out=whole.acting[placed : placed + wanted]
        )
        whole.at += wanted
        if wanted:
            self._remember(powers.after(blocks, rows, wanted), mode)
        return wanted

    def _output(self, mode: Mode, slope: float, rows: _Rows, count: int) -> Array:
        """Before the action [%], (count,)."""
        n = self.at.n
        if mode is Mode.FREE:
            return rows.row(n + 1, count)
        if mode is Mode.SLIDING:
            return np.asarray(rows.row(n + 1, count) - rows.row(n + 2, count), np.float64)
        return self.run.memory.output + slope * np.arange(1.0, count + 1.0)

    def _lasting(self, mode: Mode, slope: float, output: Array, rows: _Rows) -> int:
        """For how many scans the condition of a mode holds."""
        algorithm, first, n = self.run.algorithm, self.run.memory.output, self.at.n
        wanted, gained = rows.row(n + 1, len(output)), rows.row(n + 2, len(output))
        low, high = algorithm.bounds()
        kept = (output >= low) & (output <= high)
        if mode in (Mode.FREE, Mode.SLIDING):
            before = np.concatenate([[first], output[:-1]])
            lowest, highest = np.full(1, low), np.full(1, high)
            if math.isfinite(algorithm.move):
                lowest = np.maximum(low, before - algorithm.move)
                highest = np.minimum(high, before + algorithm.move)
                kept &= (output >= lowest) & (output <= highest)
            if mode is Mode.SLIDING:
                kept &= np.where(gained > 0.0, wanted > highest, wanted < lowest)
        else:
            side = math.copysign(1.0, slope) if slope else 1.0 if first == high else -1.0
            kept &= side * (wanted - output) > 0.0
            if mode is Mode.FROZEN:
                kept &= (side * gained > 0.0) & (side * (wanted - gained - output) >= 0.0)
            elif algorithm.conditional:
                kept &= side * gained <= 0.0
        return len(kept) if kept.all() else int(np.argmin(kept))

    def _state(self, slope: float) -> Array:
        whole, at, m = self.run, self.at, self.run.memory
        state = np.zeros(at.change)
        state[: at.n] = whole.x
        state[at.n : at.newest] = m.filtered, m.integral, m.derivative
        placed = whole.back + whole.at
        state[at.newest : at.slope] = whole.acting[placed - at.near : placed][::-1]
        state[at.slope] = whole.algorithm.sign * slope
        given, k = whole.inputs, whole.at
        state[at.setpoint] = given.setpoint[k]
        state[at.setpoint + 1] = given.direct[k]
        state[at.setpoint + 2 :] = given.state[k]
        return state[self.kept] if len(self.kept) < at.change else state

    def given_to(self, count: int) -> Array:
        """What is given to each of the next scans, (count, inputs)."""
        whole, at, k = self.run, self.at, self.run.at
        columns, given = [], whole.inputs
        if "setpoint" in given.varying:
            setpoint = given.setpoint[k : k + count]
            last = given.setpoint[k - 1] if k else 0.0
            columns += [setpoint, np.diff(setpoint, prepend=last)]
        if {"load", "noise"} & given.varying:
            direct = given.direct[k : k + count]
            columns.append(direct if given.noise is None else direct + given.noise[k : k + count])
        if "load" in given.varying:
            columns += [*given.state[k : k + count].T]
        placed = whole.back + k
        columns += [whole.acting[placed - far : placed - far + count] for far in at.far]
        return np.column_stack(columns)

    def _remember(self, core: Array, mode: Mode) -> None:
        """Leave the run as a step would have left it; `core` is the plant's state, yf, I and D."""
        whole, n, algorithm = self.run, self.at.n, self.run.algorithm
        whole.x = core[:n]
        m, setpoint = whole.memory, float(whole.inputs.setpoint[whole.at - 1])
        m.filtered, m.integral, m.derivative = map(float, core[n : n + 3])
        m.seen = algorithm.derivative_weight * setpoint - m.filtered
        weighted = algorithm.setpoint_weight * setpoint - m.filtered
        m.proportional = algorithm.proportional * weighted
        m.output = algorithm.sign * float(whole.acting[whole.back + whole.at - 1])
        m.frozen = mode in (Mode.SLIDING, Mode.FROZEN)

    # --- the loop over one scan ---

    def _of(self, mode: Mode) -> _Powers:
        if mode not in self._powers:
            over_scan, seen = self._one_scan(mode)
            # Without given inputs everything is kept, as it stands.
            kept: list[int] | slice = self.kept if self.given else slice(self.at.change)
            rows = over_scan[kept]
            self._powers[mode] = _Powers(
                rows[:, kept],
                rows[:, self.given] if self.given else rows[:, :0],
                seen[:, kept],
                seen[:, self.given] if self.given else seen[:, :0],
                _GIVEN_BLOCK if self.given else _BLOCK,
                self.at.n,
            )
        return self._powers[mode]

    def _one_scan(self, mode: Mode) -> tuple[Array, Array]:
        """The next state, and what is read of a scan (PV, then v and what I gains), as rows."""
        at, a, n = self.at, self.run.algorithm, self.at.n
        unit = np.eye(at.size)
        y = unit[at.setpoint + 1].copy()
        y[:n] = self.run.read
        for back, weight in self.run.weights.items():
            y[self._place(back)] += weight
        setpoint, filtered = unit[at.setpoint], unit[n]
        f = a.smooth * y
        f[n] += 1.0 - a.smooth
        gained = a.advance * (setpoint - f)
        derivative = a.kick * (filtered - f)
        derivative[n + 2] += a.keep
        derivative[at.change] += a.kick * a.derivative_weight
        wanted = -a.proportional * f + derivative + gained
        wanted[at.setpoint] += a.proportional * a.setpoint_weight
        wanted[n + 1] += 1.0
        output = self._next_output(mode, wanted, gained)
        following = unit[: at.change].copy()
        following[: at.newest] = 0.0
        over = self.run.held.over(self.run.held.clock.scan)
        following[:n, :n] = over.phi
        following[:n, at.setpoint + 2 : at.change] = np.eye(n)
        for back, tap in over.taps.items():
            if back:
                following[:n, self._place(back)] += tap
            else:
                following[:n] += tap[:, np.newaxis] * output
        following[n], following[n + 2] = f, derivative
        following[n + 1, n + 1] = 1.0
        if mode in (Mode.FREE, Mode.HELD):
            following[n + 1] += gained
        if mode is Mode.HELD and a.release:
            following[n + 1] += a.release * (a.sign * output - wanted)
        following[at.newest] = output
        following[at.newest + 1 : at.slope] = unit[at.newest : at.slope - 1]
        # What the upset adds to PV at once, and the noise with it, is not read but added later.
        y[at.setpoint + 1] = 0.0
        return following, np.vstack([y, wanted, gained])

    def _next_output(self, mode: Mode, wanted: Array, gained: Array) -> Array:
        sign = self.run.algorithm.sign
        if mode is Mode.FREE:
            return sign * wanted
        if mode is Mode.SLIDING:
            return sign * (wanted - gained)
        output = np.zeros(self.at.size)
        output[[self.at.newest, self.at.slope]] = 1.0
        return output

    def _place(self, back: int) -> int:
        """The column of an output of scans back, 1 or more."""
        if back <= self.at.near:
            return self.at.newest + back - 1
        return self.at.change + 1 + self.at.far.index(back)


class _Rows:
    """What was read at each scan of a stretch, block by block: (blocks, rows, scans of a block)."""

    def __init__(self, found: Array, count: int) -> None:
        self.found = found
        self.count = min(count, found.shape[0] * found.shape[2])
        """Scans."""

    def row(self, k: int, count: int) -> Array:
        """One row at the first `count` scans."""
        return self.found[:, k].reshape(-1)[:count]

    def at(self, scan: int) -> Array:
        """All rows at one scan."""
        block, rest = divmod(scan, self.found.shape[2])
        return self.found[block, :, rest]


class _Powers:
    """s' = A s + B w and the rows C s + D w, many scans at once."""

    def __init__(self, a: Array, b: Array, c: Array, d: Array, block: int, n: int) -> None:
        self.a, self.b, self.block, self.n = np.ascontiguousarray(a), b, block, n
        size = len(a)
        # Read at each scan: the plant's state, the rows, and with given inputs yf, I and D.
        unit = np.eye(size)
        core = unit[n : n + 3] if b.shape[1] else unit[:0]
        self.read = np.concatenate([unit[:n], c, core])
        self.direct = np.zeros((len(self.read), b.shape[1]))
        self.direct[n : n + len(c)] = d
        ahead = np.empty((len(self.read), block, size))
        ahead[:, 0] = self.read
        self.steps = [self.a]
        done = 1
        while done < block:
            more = min(done, block - done)
            np.matmul(ahead[:, :more], self.steps[-1], out=ahead[:, done : done + more])
            done += more
            self.steps.append(self.steps[-1] @ self.steps[-1])
        self.ahead = ahead
        self.wide = ahead.reshape(-1, size).T
        self.over = [self._over_block()]

    def _over_block(self) -> Array:
        """S to the power of a block."""
        whole: Array | None = None
        for k, power in enumerate(self.steps):
            if self.block >> k & 1:
                whole = power if whole is None else whole @ power
        assert whole is not None
        return whole

    def alone(self, state: Array, wanted: int) -> tuple[_Rows, Array]:
        """The rows (rows, scans) without given inputs, and the state at every block."""
        count = wanted // self.block + 1
        blocks = np.empty((count, len(state)))
        blocks[0] = state
        done = 1
        for k in range(count.bit_length()):
            if done >= count:
                break
            if k == len(self.over):
                self.over.append(self.over[-1] @ self.over[-1])
            if not np.vdot(self.over[k], self.over[k]) < _LARGEST:
                break
            more = min(done, count - done)
            np.matmul(blocks[:more], self.over[k].T, out=blocks[done : done + more])
            done += more
        blocks = blocks[:done]
        return self._rows(blocks @ self.wide, wanted), blocks

    def _rows(self, found: Array, count: int) -> _Rows:
        return _Rows(found.reshape(len(found), len(self.read), self.block), count)

    def driven(self, state: Array, given: Array, wanted: int) -> tuple[_Rows, Array]:
        """The same with given inputs (wanted, inputs); one more scan is read than asked for."""
        inputs, count = given.shape[1], wanted // self.block + 1
        padded = np.zeros((count, self.block * inputs))
        padded.reshape(-1)[: given.size] = given.reshape(-1)
        pushed = padded @ self._pushed
        blocks = np.empty((count, len(state)))
        blocks[0] = state
        across = self.over[0].T
        for k in range(count - 1):
            blocks[k + 1] = blocks[k] @ across + pushed[k]
        found = blocks @ self.wide
        found += padded @ self._answers
        return self._rows(found, wanted + 1), blocks

    @cached_property
    def _pushed(self) -> Array:
        """The inputs of a block -> what they add to the state at its end."""
        columns = np.empty((self.block, len(self.a), self.b.shape[1]))
        columns[0] = self.b
        done = 1
        for power in self.steps:
            if done >= self.block:
                break
            more = min(done, self.block - done)
            np.matmul(power, columns[:more], out=columns[done : done + more])
            done += more
        return columns[::-1].transpose(0, 2, 1).reshape(-1, len(self.a))

    @cached_property
    def _answers(self) -> Array:
        """The inputs of a block -> what they add to the rows read in it."""
        block, inputs = self.block, self.b.shape[1]
        later = self.ahead @ self.b
        answers = np.zeros((len(self.read), 2 * block, inputs))
        answers[:, block] = self.direct
        answers[:, block + 1 :] = later[:, :-1]
        scan = np.arange(block)
        lag = scan[:, np.newaxis] - scan + block
        # (rows, read at, given at, inputs) -> (given at, inputs, rows, read at)
        spread = answers[:, lag]
        return spread.transpose(2, 3, 0, 1).reshape(block * inputs, -1)

    def after(self, blocks: Array, rows: _Rows, scans: int) -> Array:
        """The plant's state, yf, I and D after a number of scans of a stretch."""
        if self.b.shape[1]:
            read = rows.at(scans)
            return np.concatenate([read[: self.n], read[-3:]])
        whole, rest = divmod(scans, self.block)
        state = blocks[whole] if whole < len(blocks) else self.over[0] @ blocks[-1]
        for k, power in enumerate(self.steps):
            if rest >> k & 1:
                state = power @ state
        return np.array(state[: self.n + 3], np.float64)
