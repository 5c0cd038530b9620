"""The sampled loop in leaps: whole stretches at once wherever it is linear.

Free of its limits the loop is s' = S s over one scan, s being the plant's state, the parts of the
controller and the outputs still on their way; held at a limit, or moving at its fastest, it is
another such loop, as the output then takes its next value from the one before.  A stretch is worked
out by powers of S: what is read of the first 64 scans by doubling, then every 64th state, then all
of it as one product.  It counts up to the first scan at which the condition of its mode fails; that
scan is stepped, and the mode it ends in is the next one tried.

What comes from far back - outputs on their way through a long dead time - is known beforehand for
as many scans as it is far, and so it enters as a given input instead of making S large; so do noise
and signals from outside that change at every scan.  A stretch with given inputs goes block by
block, one product for each.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from enum import Enum
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.sim.controller import Algorithm
from workbench.sim.scans import BOUND, Course, Held, Run, inputs
from workbench.sim.signals import Step

Array = NDArray[np.float64]

_BLOCK: Final = 64
"""Scans whose powers of S are kept; a power of 2."""
_NEAR: Final = _BLOCK
"""Scans of dead time that a state is kept for; outputs from further back are given inputs, and all
those of a block are known beforehand."""
_LEAST: Final = 12
"""Fewer scans than this are stepped."""
_FEW: Final = 4
"""Half the scans that are stepped where a mode ends."""
_REACH: Final = 32 * _BLOCK
"""Scans of the first stretch in a mode that may end; the next are longer and longer."""
_LARGEST: Final = 1e200
"""Powers of an unstable loop whose squares sum up to this are not taken further."""


class Mode(Enum):
    """What the output does, scan by scan."""

    FREE = "what the algorithm wants"
    SLIDING = "the same, while the integral would drive it into a limit and is not advanced"
    HELD = "stands at a limit or moves at its fastest"
    FROZEN = "the same, and the integral is not advanced"


_STANDING: Final = (Mode.HELD, Mode.FROZEN)


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
    cuts = [*(cut for cut in whole.inputs.cuts if cut < end), end]
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
        if whole.algorithm.is_limited and _jumps(whole):
            whole.step(whole.at + _FEW, step)
        gone = leaps.leap(stop)
        # Where the modes change quickly, more and more is stepped before the next try.
        by_hand = min(2 * by_hand, 4 * _BLOCK) if gone < _BLOCK else _FEW
        if whole.at < stop and not whole.diverged:
            whole.step(min(stop, whole.at + by_hand), step)


def _jumps(whole: Run) -> bool:
    """The setpoint is another than at the scan before, which often takes the output to a limit."""
    setpoint, k = whole.inputs.setpoint, whole.at
    return bool(setpoint[k] != (setpoint[k - 1] if k else 0.0))


class _Layout:
    """Where things stand among the columns of the loop over one scan."""

    def __init__(self, n: int, near: int, far: tuple[int, ...], varying: frozenset[str]) -> None:
        self.n = n
        """States of the plant; filtered PV, I and D follow them."""
        self.near = near
        """Outputs kept, the newest first."""
        self.far = far
        """Scans back of the outputs that are given."""
        self.newest = n + 3
        self.slope = self.newest + near
        """By how much a held output moves in a scan."""
        self.setpoint = self.slope + 1
        """The setpoint; what the upset adds to PV and to the state follows it."""
        self.change = self.setpoint + 2 + n
        """Of the setpoint since the scan before."""
        self.width = self.change + 1
        self.size = self.width + len(far)
        given = [self.setpoint, self.change] if "setpoint" in varying else []
        given += [self.setpoint + 1] if {"load", "noise"} & varying else []
        given += range(self.setpoint + 2, self.change) if "load" in varying else []
        self.given = [*given, *range(self.width, self.size)]
        """Columns that are given to each scan, in the order of `Leaps.given_to`."""
        # Without given inputs everything is kept, as it stands.
        self.kept: list[int] | slice = slice(self.width)
        if self.given:
            self.kept = [k for k in range(self.width) if k not in self.given]


class Leaps:
    """Leaps of one run; it goes on from wherever the run stands."""

    def __init__(self, whole: Run) -> None:
        self.run = whole
        backs = {*whole.over.taps, *whole.weights}
        near = max([1, *(back for back in backs if back <= _NEAR)])
        far = tuple(sorted(back for back in backs if back > _NEAR))
        self.at = _Layout(len(whole.x), near, far, whole.inputs.varying)
        self._powers: dict[Mode, _Powers] = {}

    def leap(self, stop: int) -> int:
        """Go on in the present mode while it lasts, at most to `stop`; the scans it went."""
        whole, start = self.run, self.run.at
        mode, slope = self._mode()
        reach = _REACH
        while whole.at < stop and not whole.diverged:
            wanted = stop - whole.at
            if whole.algorithm.is_limited:
                wanted = min(wanted, reach)
                reach *= 16
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
        whole, start, sign = self.run, self.run.at, self.run.algorithm.sign
        powers = self._of(mode)
        acting = whole.acting[start + whole.back :]
        known = None
        if mode in _STANDING:
            known = whole.memory.output + slope * np.arange(1.0, wanted + 1.0)
            np.multiply(known, sign, out=acting[:wanted])
        if self.at.given:
            blocks, read = powers.driven(
                self._state(slope),
                self.given_to(wanted),
                acting if known is None else None,
                min(self.at.far, default=wanted) // _BLOCK or 1,
            )
        else:
            blocks, read = powers.alone(self._state(slope), wanted)
        wanted = min(wanted, len(read))
        if whole.algorithm.is_limited:
            output = known if known is not None else read[:, 0] if sign > 0.0 else -read[:, 0]
            wanted = self._lasting(mode, slope, output[:wanted], read[:wanted])
        pv = whole.pv[start : start + wanted]
        np.add(read[:wanted, 1], self._direct(wanted), out=pv)
        # Only where the sum of all squares is large is there one to look for.
        if not np.dot(pv, pv) <= BOUND * BOUND and not (np.abs(pv) <= BOUND).all():
            wanted = int(np.argmin(np.abs(pv) <= BOUND))
            pv = pv[:wanted]
            whole.diverged = True
        if whole.inputs.noise is not None:
            noise = whole.inputs.noise[start : start + wanted]
            np.add(pv, noise, out=whole.measured[start : start + wanted])
        if known is None and not self.at.given:
            acting[:wanted] = read[:wanted, 0]
        if wanted:
            whole.at += wanted
            whole.pieces.append(lambda: powers.states(blocks, wanted))
            self._remember(powers.after(blocks, wanted), mode, start)
        return wanted

    def _lasting(self, mode: Mode, slope: float, output: Array, read: Array) -> int:
        """For how many scans the condition of a mode holds."""
        algorithm, first = self.run.algorithm, self.run.memory.output
        low, high = algorithm.bounds()
        if mode in _STANDING:
            wanted, gained = read[:, 0], read[:, 2]
            side = math.copysign(1.0, slope) if slope else 1.0 if first == high else -1.0
            wrong = side * (wanted - output) <= 0.0
            if mode is Mode.FROZEN:
                wrong |= (side * gained <= 0.0) | (side * (wanted - gained - output) < 0.0)
            elif algorithm.conditional:
                wrong |= side * gained > 0.0
            if slope:
                wrong |= (output < low) | (output > high)
        else:
            lowest: Array | float = low
            highest: Array | float = high
            if math.isfinite(algorithm.move):
                before = np.concatenate([[first], output[:-1]])
                lowest = np.maximum(low, before - algorithm.move)
                highest = np.minimum(high, before + algorithm.move)
            wrong = (output < lowest) | (output > highest)
            if mode is Mode.SLIDING:
                gained = read[:, 2]
                wanted = output + gained
                wrong |= np.where(gained > 0.0, wanted <= highest, wanted >= lowest)
        at = int(wrong.argmax())
        return at if wrong[at] else len(wrong)

    def _direct(self, count: int) -> Array | float:
        """What the upset adds to PV in the next scans [%]."""
        upset, k = self.run.inputs.upset, self.run.at
        if "load" in self.run.inputs.varying:
            return upset.over(k, k + count)[1]
        return float(upset.direct[upset.place(k)])

    def _state(self, slope: float) -> Array:
        whole, at, m = self.run, self.at, self.run.memory
        given, k, algorithm = whole.inputs, whole.at, whole.algorithm
        state = np.zeros(at.width)
        state[: at.n] = whole.x
        state[at.n : at.newest] = m.filtered, m.integral, m.derivative
        placed = whole.back + k
        state[at.newest : at.slope] = whole.acting[placed - at.near : placed][::-1]
        state[at.slope] = algorithm.sign * slope
        state[at.setpoint] = setpoint = given.setpoint[k]
        place = given.upset.place(k)
        state[at.setpoint + 1] = given.upset.direct[place]
        state[at.setpoint + 2 : at.change] = given.upset.state[place]
        state[at.change] = setpoint - given.setpoint[k - 1] if k else setpoint
        return state[at.kept]

    def given_to(self, count: int) -> list[Array]:
        """What is given to the next scans, each (count,); outputs as they become known."""
        whole, at, k = self.run, self.at, self.run.at
        found, given = [], whole.inputs
        if "setpoint" in given.varying:
            setpoint = given.setpoint[k : k + count]
            last = given.setpoint[k - 1] if k else 0.0
            found += [setpoint, np.diff(setpoint, prepend=last)]
        if {"load", "noise"} & given.varying:
            pushes, direct = given.upset.over(k, k + count)
            found.append(direct if given.noise is None else direct + given.noise[k : k + count])
            found += [*pushes.T] if "load" in given.varying else []
        placed = whole.back + k
        return [*found, *(whole.acting[placed - far : placed - far + count] for far in at.far)]

    def _remember(self, core: Array, mode: Mode, start: int) -> None:
        """Leave the run as a step would have left it; `core` is the plant's state, yf, I and D."""
        whole, n, algorithm = self.run, self.at.n, self.run.algorithm
        last, upset = whole.at - 1, whole.inputs.upset
        whole.x = core[:n]
        first, latest = upset.place(start), upset.place(last)
        if latest > first and "load" not in whole.inputs.varying:
            # The last scan may meet an upset of its own.
            whole.x = whole.x + (upset.state[latest] - upset.state[first])
        m, setpoint = whole.memory, float(whole.inputs.setpoint[last])
        m.filtered, m.integral, m.derivative = core[n : n + 3].tolist()
        m.seen = algorithm.derivative_weight * setpoint - m.filtered
        weighted = algorithm.setpoint_weight * setpoint - m.filtered
        m.proportional = algorithm.proportional * weighted
        m.output = algorithm.sign * float(whole.acting[whole.back + last])
        m.frozen = mode in (Mode.SLIDING, Mode.FROZEN)

    # --- the loop over one scan ---

    def _of(self, mode: Mode) -> _Powers:
        if mode not in self._powers:
            over_scan, read = self._one_scan(mode)
            kept, given = self.at.kept, self.at.given
            rows = over_scan[kept]
            self._powers[mode] = _Powers(
                *(rows[:, kept], rows[:, given], read[:, kept], read[:, given]),
                self.at.n,
            )
        return self._powers[mode]

    @cached_property
    def _algorithm_over_a_scan(self) -> tuple[Array, Array, Array, Array]:
        """The next state but for its outputs and what the integral gains, and rows of a scan.

        The rows are PV, what the algorithm wants and what the integral would gain.
        """
        at, a, n = self.at, self.run.algorithm, self.at.n
        following, y = np.zeros((at.width, at.size)), np.zeros(at.size)
        y[:n] = self.run.read
        y[at.setpoint + 1] = 1.0
        for back, weight in self.run.weights.items():
            y[self._place(back)] += weight
        filtered, integral, derivative = following[n], following[n + 1], following[n + 2]
        np.multiply(y, a.smooth, out=filtered)
        filtered[n] += 1.0 - a.smooth
        np.multiply(filtered, -a.kick, out=derivative)
        derivative[n] += a.kick
        derivative[n + 2] += a.keep
        derivative[at.change] += a.kick * a.derivative_weight
        gained = filtered * -a.advance
        gained[at.setpoint] += a.advance
        wanted = filtered * -a.proportional
        wanted += derivative
        wanted += gained
        wanted[at.setpoint] += a.proportional * a.setpoint_weight
        wanted[n + 1] += 1.0
        integral[n + 1] = 1.0
        following[:n, :n] = self.run.over.phi
        _diagonal(following, 0, at.setpoint + 2, n)
        for back, tap in self.run.over.taps.items():
            if back:
                following[:n, self._place(back)] += tap
        _diagonal(following, at.newest + 1, at.newest, at.near - 1)
        # Slope, setpoint and upset stay as they are; the setpoint has changed only once.
        _diagonal(following, at.slope, at.slope, at.change - at.slope)
        # What the upset adds to PV at once, and the noise with it, is not read but added later.
        y[at.setpoint + 1] = 0.0
        return following, y, wanted, gained

    def _one_scan(self, mode: Mode) -> tuple[Array, Array]:
        """The next state, and what is read of a scan, as rows.

        Read are the output as it acts, or where it stands what the algorithm wants; PV; and but
        when free what the integral would gain.
        """
        at, a = self.at, self.run.algorithm
        following, y, wanted, gained = self._algorithm_over_a_scan
        following = following.copy()
        integral = following[at.n + 1]
        if mode in (Mode.FREE, Mode.HELD):
            integral += gained
        output = self._next_output(mode, wanted, gained)
        if mode is Mode.HELD and a.release:
            integral += a.release * (a.sign * output - wanted)
        following[at.newest] = output
        if 0 in self.run.over.taps:
            following[: at.n] += self.run.over.taps[0][:, np.newaxis] * output
        if mode is Mode.FREE:
            return following, np.array([output, y])
        return following, np.array([wanted if mode in _STANDING else output, y, gained])

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
        return self.at.width + self.at.far.index(back)


def _diagonal(matrix: Array, row: int, column: int, count: int) -> None:
    """Ones downwards to the right of a place, in a matrix that is contiguous."""
    width = matrix.shape[1]
    first = row * width + column
    matrix.reshape(-1)[first : first + count * (width + 1) : width + 1] = 1.0


def _fill(blocks: Array, values: Array) -> None:
    """Put values (scans,) into blocks (blocks, scans of a block), the last not always full."""
    whole, rest = divmod(len(values), blocks.shape[1])
    blocks[:whole] = values[: len(values) - rest].reshape(whole, blocks.shape[1])
    if rest:
        blocks[whole, :rest] = values[len(values) - rest :]


class _Powers:
    """s' = A s + B w and the rows C s + D w, a block of scans at once."""

    def __init__(self, a: Array, b: Array, c: Array, d: Array, n: int) -> None:
        self.b, self.n = b, n
        self.steps = [np.ascontiguousarray(a)]
        """A to the power of 1, 2, 4 ..."""
        self.size, self.rows = len(a), len(c)
        while 1 << len(self.steps) <= _BLOCK:
            self.steps.append(self.steps[-1].dot(self.steps[-1]))
        self.over = self.steps.pop()
        self.across = [self.over]
        """A to the power of 1, 2, 4 ... blocks."""
        self.reading = self._over_block(c, d)

    def _over_block(self, c: Array, d: Array) -> Array:
        """A block's state and inputs -> the rows at each of its scans.

        (scans of a block * rows, size + inputs * scans of a block)
        """
        rows, size, inputs, block = len(c), self.size, self.b.shape[1], _BLOCK
        ahead = np.empty((block * rows, size))
        ahead[:rows] = c
        for k, power in enumerate(self.steps):
            done = rows << k
            np.dot(ahead[:done], power, out=ahead[done : 2 * done])
        if not inputs:
            return ahead
        # What an input does to the rows of later scans, laid out once for each scan it acts at.
        answers = np.zeros((rows, inputs, 2 * block - 1))
        answers[:, :, block - 1] = d
        later = ahead[: (block - 1) * rows].dot(self.b).reshape(block - 1, rows, inputs)
        answers[:, :, block:] = later.transpose(1, 2, 0)
        of_row, of_input, of_scan = answers.strides
        spread = np.lib.stride_tricks.as_strided(
            answers[:, :, block - 1 :],
            (block, rows, inputs, block),
            (of_scan, of_row, of_input, -of_scan),
        )
        return np.hstack([ahead, spread.reshape(block * rows, inputs * block)])

    @cached_property
    def _pushed(self) -> Array:
        """(scans of a block, inputs, size): what an input does to the state that many scans on."""
        inputs = self.b.shape[1]
        found = np.empty((_BLOCK * inputs, self.size))
        found[:inputs] = self.b.T
        for k, power in enumerate(self.steps):
            done = inputs << k
            np.dot(found[:done], power.T, out=found[done : 2 * done])
        return found.reshape(_BLOCK, inputs, self.size)

    @cached_property
    def _whole(self) -> Array:
        """A block's state and inputs -> the state at its end, and the rows at each of its scans."""
        pushed = self._pushed[::-1].transpose(2, 1, 0).reshape(self.size, -1)
        return np.vstack([np.hstack([self.over, pushed]), self.reading])

    @cached_property
    def _to_states(self) -> Array:
        """As `reading`, for the plant's state at each scan."""
        inputs = self.b.shape[1]
        return self._over_block(np.eye(self.n, self.size), np.zeros((self.n, inputs)))

    def alone(self, state: Array, wanted: int) -> tuple[Array, Array]:
        """Without given inputs: what each block starts from, and the rows (scans, rows)."""
        count = -(-wanted // _BLOCK)
        blocks = np.empty((count, len(state)))
        blocks[0] = state
        done = 1
        for k in range((count - 1).bit_length()):
            if k == len(self.across):
                last = self.across[-1]
                if not np.vdot(last, last) < _LARGEST:
                    blocks = blocks[:done]
                    break
                self.across.append(last.dot(last))
            more = min(done, count - done)
            np.dot(blocks[:more], self.across[k].T, out=blocks[done : done + more])
            done += more
        return blocks, blocks.dot(self.reading.T).reshape(-1, self.rows)

    def driven(
        self, state: Array, given: list[Array], acting: Array | None, known: int
    ) -> tuple[Array, Array]:
        """With inputs, each (scans,): what each block starts from and is given, and the rows.

        The first of the rows becomes known as `acting`; inputs may be a later look at it, known for
        a number of blocks beforehand.
        """
        wanted, block, size = len(given[0]), _BLOCK, self.size
        count = -(-wanted // block)
        blocks = np.zeros((count, size + len(given) * block))
        found = np.empty((count, size + self.rows * block))
        blocks[0, :size] = state
        following = [*blocks[1:, :size], np.empty(size)]
        for first in range(0, count, known):
            start, end = first * block, min((first + known) * block, wanted)
            part = slice(first, first + known)
            for place, source in enumerate(given):
                at = size + place * block
                _fill(blocks[part, at : at + block], source[start:end])
            for now, rows, then in zip(blocks[part], found[part], following[part], strict=True):
                np.dot(self._whole, now, out=rows)
                then[:] = rows[:size]
            if acting is not None:
                acting[start:end] = found[part, size :: self.rows].reshape(-1)[: end - start]
        return blocks, found[:, size:].reshape(-1, self.rows)

    def states(self, blocks: Array, scans: int) -> Array:
        """The plant's state (scans, n)."""
        found: Array = blocks.dot(self._to_states.T)
        return found.reshape(len(blocks) * _BLOCK, self.n)[:scans]

    def after(self, blocks: Array, scans: int) -> Array:
        """The state after a number of scans of a stretch."""
        whole, rest = divmod(scans, _BLOCK)
        if whole == len(blocks):
            whole, rest = whole - 1, _BLOCK
        state: Array = blocks[whole, : self.size]
        given = blocks[whole, self.size :]
        steps = self.steps if rest < _BLOCK else [self.over]
        for k, power in enumerate(steps):
            if rest == _BLOCK or rest >> k & 1:
                state = power.dot(state)
        if len(given):
            # The latest comes first.
            latest = given.reshape(-1, _BLOCK)[:, :rest][:, ::-1].T
            state = state + latest.reshape(-1).dot(self._pushed[:rest].reshape(-1, self.size))
        return state
