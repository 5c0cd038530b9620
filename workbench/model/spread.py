"""One loop round many plants: stable or not, Ms and margins of each, worked out together.

`robustness` judges one loop exactly.  Here the controller and what is built round it are worked out
once for a set of frequencies, the plants as rows of one array; wherever a row comes so near to -1
that it might turn unseen, or where its peak lies, it is looked at again at frequencies of its own.
Families of plants and tolerance maps are made of this.

The number of unstable roots follows from how 1 + L turns about 0 from frequency 0 to the highest
(argument principle):  Z = P + n/2 - turn/pi,  P growing and n resting poles of the open loop.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve, NotApplicable
from workbench.model.feedback import Loop
from workbench.model.matrix import hold
from workbench.model.robustness import crossings
from workbench.model.sampled import SampledLoop, controller_in_z, whole_scans
from workbench.model.stability import loop_verdict
from workbench.model.structures import SampledStructure, Structure
from workbench.model.transfer import Complex, TransferFunction

Floats = NDArray[np.float64]
Places = NDArray[np.intp]

_PER_DECADE: Final = 30
"""Frequencies on the logarithmic part of a set."""
_COARSE: Final = 10
"""Frequencies to a decade of the first look, which finds where the loops begin and end."""
_PER_TURN: Final = 16
"""Frequencies to one turn of the longest dead time, where the gain still matters."""
_MATTERS: Final = 0.1
"""Gain of the open loop down to which the dead time is followed."""
_LEAST_TURNS: Final = 2.0
_MOST_TURNS: Final = 30.0
_SMALL: Final = 0.02
"""Gain below which the first look's spacing is close enough."""
_NOTHING: Final = 0.001
"""Gain below which an open loop is not followed further."""
_SHARP: Final = 0.5
"""Step of an open loop, as a share of its size, that is halved before crossovers are looked for."""
_NEAR: Final = 0.1
"""How near to 1 a gain turns back that may have crossed 1 unseen."""
_GRAZING: Final = 33
"""Points at which that is looked at."""
_MOST: Final = 6000
"""Most frequencies of a set."""
_LARGE: Final = 20.0
"""Gain from which an integrating loop is known by its asymptote."""
_SLOW: Final = 0.02
"""Lowest frequency as a share of the slowest corner."""
_SAFE: Final = 0.6
"""A step of 1 + L longer than this share of its distance from 0 is looked at more closely."""
_CLOSER: Final = 9
"""Points at which an interval is looked at again, its ends included."""
_ROUNDS: Final = 12
"""Closer looks before a loop counts as on the boundary, that is not stable."""
_HILL: Final = 1.5
"""Valleys of |1 + L|^2 up to this much above the lowest seen are walked down to their bottom."""
_BLOCK: Final = 30_000
"""Values worked on together, so that they stay near the processor."""


@dataclass(frozen=True)
class Judged:
    """Each loop of a spread; arrays of shape (plants, gains)."""

    stable: NDArray[np.bool_]
    max_sensitivity: Floats
    """Ms, infinite where the loop is not stable."""
    gain_margin: Floats
    """Upwards; infinite where no more gain could upset the loop, 1 where it is not stable."""
    phase_margin_deg: Floats
    """Infinite where the gain never crosses 1, 0 where the loop is not stable."""


def judge(
    loop: Loop,
    plants: Sequence[TransferFunction],
    gains: Sequence[float] = (1.0,),
    *,
    margins: bool = False,
) -> Judged:
    """A loop with each of the plants in place of its own, at each of several gain ratios.

    Parameters
    ----------
    loop
        Analogue, or sampled where it has a scan; a cascade only as analogue.
    plants
        [%/%]; at least one.
    gains
        Ratios by which every plant's gain is multiplied, above 0.
    margins
        Gain and phase margins too; without, these are infinite.

    Returns
    -------
    Judged
        Ms within 0.1 %; a verdict is right where the loop is not within 1e-6 of its boundary.

    Raises
    ------
    NotApplicable
        A plant with a dead time inside a feedback.
    ModelError
        A sampled loop whose plant has no state space.
    CannotSolve
        What is built round the loop is itself on the boundary of stability.

    Source
    ------
    Argument principle, as `stability`; checked against `robustness` in the tests.
    """
    if any(plant.has_delayed_feedback for plant in plants):
        raise NotApplicable(
            "the plant has a dead time inside a feedback", limit="wants a plant without"
        )
    ratios = np.asarray(gains, np.float64)
    rows = _rows(loop, plants)
    if isinstance(loop, Structure):
        rows.growing += _growing_round(loop)
    parts = [block.judged(margins) for block in _Sheet(rows, ratios, crossovers=margins).blocks()]
    shape = (len(plants), len(ratios))
    stable, peak, gain, phase = (
        np.concatenate(part).reshape(shape) for part in zip(*parts, strict=True)
    )
    return Judged(stable > 0.0, peak, gain, phase)


class _Rows(Protocol):
    """The open loops of many plants, at any frequency of each."""

    growing: Floats
    """(plants,) poles that grow, those round the plant included."""
    resting: Floats
    """(plants,) poles at rest."""
    far: Floats
    """(plants,) the open loop beyond the last frequency."""
    far_turns: NDArray[np.bool_]
    """(plants,) a dead time turns what is left there."""
    corners: Floats
    """Where something happens [rad/s]."""
    longest: float
    """The longest dead time that turns the phase [s]."""
    top: float
    """The last frequency with a meaning [rad/s]."""

    def around(self, w: Floats) -> Complex:
        """What is round the plant, at frequencies (n,)."""

    def plant(self, rows: Places, w: Floats) -> Complex:
        """Each row's plant at its own frequencies; `rows` and `w` broadcast to one shape."""


# --- analogue ------------------------------------------------------------------------------------


class _Analogue:
    """Rows of polynomials: sum of n_k(jw) exp(-jw L_k), over d(jw)."""

    def __init__(self, loop: Loop, plants: Sequence[TransferFunction]) -> None:
        self.round = replace(loop, plant=TransferFunction.constant(1.0)).open_loop()
        self.top = math.inf
        terms = max(len(plant.numerator) for plant in plants)
        self.delays = np.zeros((len(plants), terms))
        tops = [[t.polynomial.coefficients for t in plant.numerator] for plant in plants]
        self.above = _ascending(
            [row[k] if k < len(row) else _NONE for row in tops for k in range(terms)]
        )
        self.above = self.above.reshape(len(plants), terms, -1)
        for row, plant in zip(self.delays, plants, strict=True):
            row[: len(plant.delays)] = plant.delays
        self.below = _ascending([p.denominator[0].polynomial.coefficients for p in plants])
        resting = self.round.integrators
        self.growing = _growing(plants)
        self.resting = np.array([float(max(0, plant.integrators + resting)) for plant in plants])
        self.longest = float(self.delays.max(initial=0.0)) + max(
            (t.dead_time for t in (*self.round.numerator, *self.round.denominator)), default=0.0
        )
        roots = [abs(r) for q in plants for r in (*q.poles(), *q.zeros()) if r]
        terms_round = (*self.round.numerator, *self.round.denominator)
        roots += [abs(r) for t in terms_round for r in t.polynomial.roots if r]
        roots += [1.0 / d for d in {*self.delays.ravel(), *(t.dead_time for t in terms_round)} if d]
        self.corners = np.array(roots or [1.0])
        self.far = np.array([_far(self.round, plant) for plant in plants])
        self.far_turns = np.array([bool(self.longest and q.dead_time) for q in plants])

    def around(self, w: Floats) -> Complex:
        """C F, or what else is round the plant."""
        return self.round((1j * w).astype(np.complex128))

    def plant(self, rows: Places, w: Floats) -> Complex:
        """Real and imaginary parts are polynomials in w^2, which is quicker than complex powers."""
        value = np.zeros(np.broadcast_shapes(rows.shape, w.shape), np.complex128)
        square = w * w
        for k in range(self.above.shape[1]):
            term = _on_axis(self.above[rows, k], w, square)
            if self.delays[:, k].any():
                term = term * _turned(w * self.delays[rows, k])
            value = value + term
        return np.asarray(value / _on_axis(self.below[rows], w, square), np.complex128)


_NONE: Final = np.zeros(1)


def _turned(angle: Floats) -> Complex:
    """exp(-j angle); sine and cosine are several times quicker than the complex exponential."""
    value = np.empty(angle.shape, np.complex128)
    np.cos(angle, out=value.real)
    np.sin(angle, out=value.imag)
    return np.conjugate(value, out=value)


def _ascending(rows: Sequence[Floats]) -> Floats:
    """Coefficients in ascending powers, filled up with zeros."""
    filled = np.zeros((len(rows), max(map(len, rows))))
    for to, row in zip(filled, rows, strict=True):
        to[: len(row)] = row[::-1]
    return filled


def _on_axis(ascending: Floats, w: Floats, square: Floats) -> Complex:
    """Polynomials at s = jw: coefficients (..., order + 1), w broadcasting against (...)."""
    signs = np.where(np.arange(ascending.shape[-1]) % 4 < 2, 1.0, -1.0)
    signed = ascending * signs
    even, odd = (_horner(signed[..., first::2], square) for first in (0, 1))
    return np.asarray(even + 1j * (odd * w), np.complex128)


def _horner(ascending: Floats, x: Floats) -> Floats | float:
    value: Floats | float = 0.0
    for k in range(ascending.shape[-1] - 1, -1, -1):
        value = value * x + ascending[..., k]
    return value


def _far(around: TransferFunction, plant: TransferFunction) -> float:
    """The open loop at infinite frequency, or how large it stays where a dead time turns it."""
    left = around.relative_degree + plant.relative_degree
    if left > 0:
        return 0.0
    if left < 0:
        return math.inf
    size = 1.0
    for function in (around, plant):
        below = function.denominator[0].polynomial
        order = max(t.polynomial.degree for t in function.numerator)
        tops = [t.polynomial for t in function.numerator if t.polynomial.degree == order]
        parts = [t.coefficients[0] / below.coefficients[0] for t in tops]
        size *= float(sum(parts)) if len(parts) == 1 else float(sum(map(abs, parts)))
    return size


# --- sampled -------------------------------------------------------------------------------------


class _Sampled:
    """Rows of held plants: states after a scan, read after whole scans and a rest."""

    def __init__(self, loop: Loop, plants: Sequence[TransferFunction]) -> None:
        assert loop.scan is not None
        self.loop, self.scan = loop, loop.scan
        self.top = math.pi / self.scan
        made = [plant.realise() for plant in plants]
        n, readings = max(len(m.b) for m in made), max(len(m.outputs) for m in made)
        count = len(plants)
        a, b = np.zeros((count, n, n)), np.zeros((count, n))
        c, d, late = (np.zeros((count, readings, k)) for k in (n, 1, 1))
        for k, one in enumerate(made):
            size = len(one.b)
            a[k, :size, :size], b[k, :size] = one.a, one.b
            for i, output in enumerate(one.outputs):
                c[k, i, :size], d[k, i], late[k, i] = output.c, output.d, output.dead_time
        self.phi, self.gamma = hold(a, b, np.full(count, self.scan))
        whole, left = whole_scans(late[..., 0] + loop.computing_delay, self.scan)
        self.scans = whole
        self.state, self.held = c.copy(), np.where(left > 0.0, d[..., 0], 0.0)
        self.before = np.where(left > 0.0, 0.0, d[..., 0])
        for i in range(readings):
            onward, pushed = hold(a, b, left[:, i])
            self.state[:, i] = (c[:, i, np.newaxis, :] @ onward)[:, 0]
            self.held[:, i] += (c[:, i] * pushed).sum(axis=1)
        self.pairs = [bool(self.phi[:, i, i + 1].any()) for i in range(n - 1)] + [False]
        self.growing = _growing(plants)
        resting = int(loop.gains.integral != 0.0)
        self.resting = np.array([float(max(0, plant.integrators)) + resting for plant in plants])
        self.correction: SampledLoop | None = None
        if isinstance(loop, Structure):
            sampled = loop.sampled()
            assert isinstance(sampled, SampledStructure)
            self.correction = sampled.correction
            at_rest = self.correction.loop.open_loop().integrators
            self.resting -= max(0, at_rest)
        self.longest = float(late.max(initial=0.0)) + loop.computing_delay + self.scan
        roots = [abs(r) for q in plants for r in (*q.poles(), *q.zeros()) if r]
        around = loop.gains.from_pv() * loop.filter()
        roots += [abs(r) for r in (*around.poles(), *around.zeros()) if r]
        if isinstance(loop, Structure) and loop.model is not None:
            roots += [1.0 / delay for delay in loop.model.delays if delay]
        roots.append(1.0 / self.longest)
        self.corners = np.array([root for root in roots if root < self.top] or [0.1 * self.top])
        self.far = np.zeros(count)
        self.far_turns = np.zeros(count, np.bool_)

    def around(self, w: Floats) -> Complex:
        """The algorithm and the filter that runs with it."""
        z = np.exp(1j * w * self.scan)
        value = self.loop.sign * controller_in_z(self.loop.gains, self.scan, z)
        if self.loop.pv_filter:
            kept = math.exp(-self.scan / self.loop.pv_filter)
            value = value * (1.0 - kept) / (1.0 - kept / z)
        if self.correction is not None:
            value = value / (1.0 + self.correction.open_loop(z))
        return np.asarray(value, np.complex128)

    def plant(self, rows: Places, w: Floats) -> Complex:
        """As `SampledLoop.plant`, each row with its own matrices."""
        angle = w * self.scan
        z = np.exp(1j * angle)
        states = self._states(rows, z)
        total: Complex = np.zeros(np.broadcast_shapes(rows.shape, w.shape), np.complex128)
        for i in range(self.scans.shape[1]):
            value = self.held[rows, i] + self.before[rows, i] / z
            for k, state in enumerate(states):
                value = value + self.state[rows, i, k] * state
            total = total + value * _turned(angle * self.scans[rows, i])
        return total

    def _states(self, rows: Places, z: Complex) -> list[Complex]:
        """(z - phi)^-1 gamma, from the first state to the last, a swinging pair together."""
        phi, gamma = self.phi, self.gamma
        found: list[Complex] = []
        k, n = 0, self.gamma.shape[1]
        while k < n:
            fed = [gamma[rows, i] + _fed(phi, rows, i, found) for i in range(k, min(k + 2, n))]
            if not self.pairs[k]:
                found.append(fed[0] / (z - phi[rows, k, k]))
                k += 1
                continue
            first, second = z - phi[rows, k, k], z - phi[rows, k + 1, k + 1]
            up, down = phi[rows, k, k + 1], phi[rows, k + 1, k]
            whole = first * second - up * down
            found.append((fed[0] * second + up * fed[1]) / whole)
            found.append((fed[1] * first + down * fed[0]) / whole)
            k += 2
        return found


def _fed(phi: Floats, rows: Places, to: int, states: Sequence[Complex]) -> Complex | float:
    """What the states before a state add to it."""
    return sum((phi[rows, to, k] * state for k, state in enumerate(states)), start=0.0)


def _growing(plants: Sequence[TransferFunction]) -> Floats:
    return np.array([float(sum(p.real > 0.0 for p in plant.poles())) for plant in plants])


def _rows(loop: Loop, plants: Sequence[TransferFunction]) -> _Rows:
    return _Analogue(loop, plants) if loop.scan is None else _Sampled(loop, plants)


def _growing_round(loop: Structure) -> float:
    """Growing poles of what is built round the loop, from the exact verdict about the whole.

    A dead time inside a feedback there has infinitely many poles, so that they cannot be listed.
    """
    for gain in (1.0, 0.5, 0.1, 0.01):
        trial = replace(loop, plant=loop.plant * gain)
        exact = loop_verdict(trial.open_loop()) if loop.scan is None else trial.sampled().verdict()
        if exact.unstable_roots is None:
            continue
        counted = _Sheet(_rows(loop, (trial.plant,)), np.ones(1)).whole().roots[0]
        if math.isfinite(counted):
            return float(exact.unstable_roots - counted)
    raise CannotSolve("what is built round the loop is not stable by itself", change="its settings")


# --- judging -------------------------------------------------------------------------------------


class _Sheet:
    """The frequencies for all loops, and the loops in blocks that are worked on one by one."""

    def __init__(self, rows: _Rows, ratios: Floats, *, crossovers: bool = False) -> None:
        self.rows, self.ratios = rows, ratios
        self.plants = np.arange(len(rows.growing))
        self.w = self._frequencies()
        if crossovers:
            self._sharpen()
        with np.errstate(divide="ignore", invalid="ignore"):
            self.zero = rows.around(np.zeros(1)) * rows.plant(
                self.plants[:, np.newaxis], np.zeros(1)
            )
        self.around = rows.around(self.w)

    def _frequencies(self) -> Floats:
        rows, every = self.rows, self.plants[:, np.newaxis]
        low, high = _SLOW * float(rows.corners.min()), 1e3 * float(rows.corners.max())
        high = min(high, rows.top)
        coarse = _logarithmic(low, high, _COARSE)
        sizes = np.abs(rows.around(coarse) * rows.plant(every, coarse))
        resting = rows.resting > 0.0
        if resting.any():
            # Down there an integrating loop falls by a known power of the frequency.
            least = float(sizes[resting, 0].min()) * float(self.ratios.min())
            low *= min(1.0, max(least / _LARGE, 1e-9)) ** (1.0 / float(rows.resting[resting].min()))
        largest = sizes.max(axis=0) * float(self.ratios.max())
        high = _last(coarse, largest > _NOTHING, high)
        middle = max(_last(coarse, largest > _SMALL, high), 2.0 * low)
        grid = _logarithmic(low, min(middle, high), _PER_DECADE)
        if middle < high:
            grid = np.concatenate([grid, _logarithmic(middle, high, _COARSE)[1:]])
        whole = grid
        if rows.longest:
            turn = 2.0 * math.pi / rows.longest
            last = _last(coarse, largest > _MATTERS, high) + turn
            last = min(max(min(last, _MOST_TURNS * turn), _LEAST_TURNS * turn), rows.top)
            step = turn / _PER_TURN
            # Evenly spaced from where that is closer than the logarithmic part.
            first = max(step / (10.0 ** (1.0 / _PER_DECADE) - 1.0), low)
            even = np.arange(first, last, step)
            outside = (grid < first) | (grid > last)
            whole = np.unique(np.concatenate([grid[outside], even]))
        return (
            whole if math.isinf(rows.top) else np.append(whole[whole < 0.9999 * rows.top], rows.top)
        )

    def _sharpen(self) -> None:
        """More frequencies about resonances, where a loop may cross and cross back unseen."""
        for _ in range(8):
            around = self.rows.around(self.w)
            coarse = np.zeros(len(self.w) - 1, np.bool_)
            size = max(1, _BLOCK // len(self.w))
            for first in range(0, len(self.plants), size):
                part = self.plants[first : first + size, np.newaxis]
                unit = around * self.rows.plant(part, self.w)
                large = np.abs(unit)
                sharp = np.abs(np.diff(unit)) > _SHARP * np.minimum(large[:, 1:], large[:, :-1])
                matters = np.maximum(large[:, 1:], large[:, :-1]) > _MATTERS / self.ratios.max()
                coarse |= (sharp & matters).any(axis=0)
            if not coarse.any() or len(self.w) + coarse.sum() > _MOST:
                return
            between = np.sqrt(self.w[:-1][coarse] * self.w[1:][coarse])
            self.w = np.insert(self.w, np.flatnonzero(coarse) + 1, between)

    def blocks(self) -> Iterator[_Block]:
        """All loops, plant by plant."""
        size = max(1, _BLOCK // (len(self.w) * len(self.ratios)))
        for first in range(0, len(self.plants), size):
            yield self._block(self.plants[first : first + size])

    def whole(self) -> _Block:
        """All loops at once."""
        return self._block(self.plants)

    def _block(self, plants: Places) -> _Block:
        rows, g = self.rows, self.ratios[:, np.newaxis]
        unit = self.around * rows.plant(plants[:, np.newaxis], self.w)
        known = np.isfinite(self.zero[plants]) & (rows.resting[plants] == 0.0)[:, np.newaxis]
        start = np.where(known, self.zero[plants], unit[:, :1])
        far = rows.far[plants, np.newaxis].astype(np.complex128)
        # Where a dead time turns what is left, and it is below 1, 1 + L stays right of 0.
        far[rows.far_turns[plants]] = 0.0
        end = far if math.isinf(rows.top) else unit[:, -1:]
        open_loop = np.concatenate([start, unit, end], axis=1)[:, np.newaxis, :] * g
        values = np.asarray(1.0 + open_loop.reshape(-1, len(self.w) + 2), np.complex128)
        loops = np.repeat(plants, len(self.ratios))
        return _Block(rows, loops, np.tile(self.ratios, len(plants)), self.w, values)


def _logarithmic(low: float, high: float, per_decade: int) -> Floats:
    return np.geomspace(low, high, math.ceil(per_decade * math.log10(high / low)) + 2)


def _last(coarse: Floats, large: NDArray[np.bool_], high: float) -> float:
    """The coarse frequency after the last at which something is large."""
    at = int(np.flatnonzero(large)[-1]) if large.any() else 0
    return min(2.0 * float(coarse[min(at + 1, len(coarse) - 1)]), high)


@dataclass(frozen=True)
class _Interval:
    """Intervals of frequency, each of one loop; (n,) each."""

    loops: Places
    low: Floats
    high: Floats

    def points(self, count: int) -> Floats:
        """(n, count), ends included."""
        share = np.linspace(0.0, 1.0, count)
        return np.asarray(self.low[:, np.newaxis] + np.outer(self.high - self.low, share))

    def about(self, w: Floats, at: Places) -> _Interval:
        """From the point before to the point after one of (n, count)."""
        row, last = np.arange(len(at)), w.shape[1] - 1
        low, high = w[row, np.maximum(at - 1, 0)], w[row, np.minimum(at + 1, last)]
        return _Interval(self.loops, low, high)

    def chosen(self, which: NDArray[np.bool_] | Places) -> _Interval:
        return _Interval(self.loops[which], self.low[which], self.high[which])


@dataclass(frozen=True)
class _Block:
    """Some of the loops: a row for each plant and gain."""

    rows: _Rows
    plants: Places
    """(loops,)"""
    gains: Floats
    """(loops,)"""
    w: Floats
    """(n,)"""
    values: Complex
    """1 + L, (loops, 1 + n + 1): at 0 or the first frequency, at all of them, beyond the last."""

    def around_zero(self, loops: Places, w: Floats) -> Complex:
        """1 + L of some loops (n,), each at frequencies of its own (n, m)."""
        flat = self.rows.around(w.ravel()).reshape(w.shape)
        rows = self.plants[loops, np.newaxis]
        return np.asarray(1.0 + self.gains[loops, np.newaxis] * flat * self.rows.plant(rows, w))

    @cached_property
    def ends(self) -> Floats:
        """The frequencies of the columns of `values`; beyond the last is the last."""
        return np.concatenate([[0.0], self.w, self.w[-1:]])

    @cached_property
    def looked(self) -> tuple[Floats, list[_Interval]]:
        """Half turns about 0 (loops,), nan on the boundary; where looks found |1 + L| least."""
        values = self.values
        half_turns = 2.0 * _crossed(values[:, :-1], values[:, 1:]).sum(axis=1)
        half_turns += (np.angle(values[:, -1]) - np.angle(values[:, 0])) / math.pi
        doubtful = _doubtful(values[:, :-1], values[:, 1:])
        # What lies beyond the last frequency stays on one side of 0.
        doubtful[:, -1] = False
        loops, at = np.nonzero(doubtful)
        where = _Interval(loops, self.ends[at], self.ends[at + 1])
        counted = _crossed(values[loops, at], values[loops, at + 1])
        valleys: list[_Interval] = []
        for _ in range(_ROUNDS):
            if not len(where.loops):
                break
            w = where.points(_CLOSER)
            near = self.around_zero(where.loops, w)
            crossed = _crossed(near[:, :-1], near[:, 1:])
            change = 2.0 * (crossed.sum(axis=1) - counted)
            half_turns += np.bincount(where.loops, change, len(half_turns))
            valleys.append(where.about(w, np.abs(near).argmin(axis=1)))
            row, part = np.nonzero(_doubtful(near[:, :-1], near[:, 1:]))
            where = _Interval(where.loops[row], w[row, part], w[row, part + 1])
            counted = crossed[row, part]
        half_turns[where.loops] = math.nan
        return half_turns, valleys

    @cached_property
    def roots(self) -> Floats:
        """Unstable roots of each loop; not finite where they cannot be counted."""
        rows, far = self.rows, self.gains * self.rows.far[self.plants]
        counted = np.rint(
            rows.growing[self.plants] + 0.5 * rows.resting[self.plants] - self.looked[0]
        )
        # A dead time and a gain of 1 or more at high frequency: infinitely many.
        endless = np.isinf(far) | (rows.far_turns[self.plants] & (np.abs(far) >= 1.0))
        return np.where(np.isnan(counted) | endless, math.inf, counted)

    def judged(self, margins: bool) -> tuple[Floats, Floats, Floats, Floats]:
        """Stable (1 or 0), Ms, gain margin and phase margin of each loop, as `Judged`."""
        stable = self.roots == 0.0
        never = np.full(len(stable), math.inf)
        peak = np.where(stable, 1.0 / np.sqrt(self._least()), math.inf)
        if not margins:
            return stable.astype(float), peak, never, never
        gain, phase = self._gain_margins(), self._phase_margins()
        return (
            stable.astype(float),
            peak,
            np.where(stable, gain, 1.0),
            np.where(stable, phase, 0.0),
        )

    def _least(self) -> Floats:
        """The least |1 + L|^2 over all frequencies, of loops that are stable."""
        values = self.values
        size = values.real**2 + values.imag**2
        least = size.min(axis=1)
        turning = np.abs(self.gains * self.rows.far[self.plants])
        turning[~self.rows.far_turns[self.plants] | ~np.isfinite(turning)] = 0.0
        least = np.minimum(least, (1.0 - np.minimum(turning, 1.0)) ** 2)
        valley = (size[:, 1:-1] <= size[:, :-2]) & (size[:, 1:-1] <= size[:, 2:])
        valley &= size[:, 1:-1] <= _HILL * least[:, np.newaxis]
        valley[self.roots != 0.0] = False
        loops, at = np.nonzero(valley)
        ends = np.concatenate([self.w[:1], self.w, self.w[-1:]])
        seen = [each.chosen(self.roots[each.loops] == 0.0) for each in self.looked[1]]
        where = _together([_Interval(loops, ends[at], ends[at + 2]), *seen])
        for _ in range(_ROUNDS):
            if not len(where.loops):
                break
            w = where.points(_CLOSER)
            near = self.around_zero(where.loops, w)
            low = near.real**2 + near.imag**2
            at = low.argmin(axis=1)
            found = low[np.arange(len(at)), at]
            # The bottom is reached where the points to both sides of it are hardly higher.
            row = np.arange(len(at))
            beside = np.maximum(
                low[row, np.maximum(at - 1, 0)], low[row, np.minimum(at + 1, _CLOSER - 1)]
            )
            np.minimum.at(least, where.loops, found)
            promising = (found <= _HILL * least[where.loops]) & (beside > found * (1.0 + 1e-4))
            where = where.about(w, at).chosen(promising)
        return np.asarray(np.maximum(least, 1e-300), np.float64)

    def _gain_margins(self) -> Floats:
        found = np.full(len(self.gains), math.inf)
        left, right = self.values[:, 1:-2] - 1.0, self.values[:, 2:-1] - 1.0
        loops, at = np.nonzero(_crossed(left, right) != 0.0)
        where = _Interval(loops, self.w[at], self.w[at + 1])
        w = self._roots_between(where, lambda value: value.imag)
        sizes = np.abs(self.around_zero(loops, w[:, np.newaxis])[:, 0] - 1.0)
        _least_above(found, loops, 1.0 / np.maximum(sizes, 1e-300))
        every = np.arange(len(found))
        for column in (0, -1):
            value = self.values[:, column] - 1.0
            on_axis = (np.abs(value.imag) <= 1e-9 * np.abs(value)) & (value.real < 0.0)
            _least_above(found, every[on_axis], -1.0 / value.real[on_axis])
        turning = self.rows.far_turns[self.plants] & (self.rows.far[self.plants] != 0.0)
        far = np.abs(self.gains * self.rows.far[self.plants])
        _least_above(found, every[turning], 1.0 / far[turning])
        return found

    def _phase_margins(self) -> Floats:
        found = np.full(len(self.gains), math.inf)
        size = np.abs(self.values[:, 1:-1] - 1.0)
        above = size >= 1.0
        loops, at = np.nonzero(above[:, 1:] != above[:, :-1])
        where = [_Interval(loops, self.w[at], self.w[at + 1])]
        # A gain that just grazes 1 crosses it twice between two frequencies.
        middle, rise = size[:, 1:-1], np.diff(size, axis=1)
        loops, at = np.nonzero((rise[:, 1:] * rise[:, :-1] <= 0.0) & (np.abs(middle - 1.0) < _NEAR))
        near = _Interval(loops, self.w[at], self.w[at + 2])
        w = near.points(_GRAZING)
        above = np.abs(self.around_zero(near.loops, w) - 1.0) >= 1.0
        row, part = np.nonzero(above[:, 1:] != above[:, :-1])
        where.append(_Interval(near.loops[row], w[row, part], w[row, part + 1]))
        every = _together(where)
        at_one = self._roots_between(every, lambda value: np.log(np.maximum(np.abs(value), 1e-300)))
        value = self.around_zero(every.loops, at_one[:, np.newaxis])[:, 0] - 1.0
        np.minimum.at(found, every.loops, np.degrees(np.abs(np.angle(-value))))
        return found

    def _roots_between(self, where: _Interval, of: Callable[[Complex], Floats]) -> Floats:
        """Where a function of L is 0 in each interval."""

        def function(w: Floats) -> Floats:
            return of(self.around_zero(where.loops, w[:, np.newaxis])[:, 0] - 1.0)

        return crossings(function, where.low, where.high)


def _together(parts: Sequence[_Interval]) -> _Interval:
    return _Interval(
        np.concatenate([part.loops for part in parts]),
        np.concatenate([part.low for part in parts]),
        np.concatenate([part.high for part in parts]),
    )


def _crossed(before: Complex, after: Complex) -> Floats:
    """+1 where a step crosses the negative real axis counterclockwise, -1 clockwise, else 0."""
    above, then_above = before.imag >= 0.0, after.imag >= 0.0
    side = before.real * after.imag - after.real * before.imag
    down, up = above & ~then_above & (side > 0.0), ~above & then_above & (side < 0.0)
    return np.asarray(down, np.float64) - up


def _doubtful(before: Complex, after: Complex) -> NDArray[np.bool_]:
    """Steps so long for their distance from 0 that 0 may lie on their other side."""
    step = after - before
    near = np.minimum(before.real**2 + before.imag**2, after.real**2 + after.imag**2)
    return np.asarray(step.real**2 + step.imag**2 > _SAFE**2 * near, np.bool_)


def _least_above(found: Floats, loops: Places, margins: Floats) -> None:
    """The least margin above 1 of each loop."""
    above = margins > 1.0
    np.minimum.at(found, loops[above], margins[above])
