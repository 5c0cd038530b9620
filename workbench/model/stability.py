"""Is it stable: a count of unstable roots that is a proof, with dead time exact.

The characteristic function is F(s) = sum_k p_k(s) exp(-L_k s).  Its roots in the right half plane
are counted by the argument principle along the imaginary axis.  The axis is cut into pieces on each
of which F provably stays inside a disc that does not hold 0, so its angle cannot turn unseen.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.transfer import Terms, TransferFunction

_ON_THE_AXIS: Final = 1e-12
"""F smaller than this share of its own terms is taken for a root on the imaginary axis."""
_MOST_PIECES: Final = 400_000
"""Pieces of the axis in one round; a loop that needs more cannot be shown to be stable."""


@dataclass(frozen=True)
class Verdict:
    """Stable or not, how many roots make it so, and the reason in words."""

    stable: bool
    unstable_roots: int | None
    """Roots in the right half plane; `None` where they are infinitely many or on the boundary."""
    reason: str = ""


STABLE: Final = Verdict(True, 0)


@dataclass(frozen=True)
class _Characteristic:
    """F scaled so that its roots are near 1: row k of `ascending` belongs to `delays[k]`."""

    ascending: NDArray[np.float64]
    delays: NDArray[np.float64]

    @property
    def order(self) -> int:
        return int(self.ascending.shape[1]) - 1

    def __call__(self, w: NDArray[np.float64]) -> NDArray[np.complex128]:
        s = 1j * w
        total = np.zeros(len(w), complex)
        for row, delay in zip(self.ascending, self.delays, strict=True):
            value = np.full(len(w), complex(row[-1]))
            for c in row[-2::-1]:
                value = value * s + c
            total += value * np.exp(-delay * s) if delay else value
        return total

    def size(self, w: NDArray[np.float64]) -> NDArray[np.float64]:
        """Upper bound of |F(jw)| from the size of its terms."""
        return _polynomial(np.abs(self.ascending).sum(axis=0), w)

    def steepness(self, w: NDArray[np.float64]) -> NDArray[np.float64]:
        """Upper bound of |dF(jv)/dv| for every v from 0 to w."""
        sizes = np.abs(self.ascending)
        slopes = sizes[:, 1:] * np.arange(1, self.order + 1)
        delayed = (sizes * self.delays[:, None]).sum(axis=0)
        return _polynomial(slopes.sum(axis=0), w) + _polynomial(delayed, w)


def _polynomial(ascending: NDArray[np.float64], w: NDArray[np.float64]) -> NDArray[np.float64]:
    value = np.full(len(w), ascending[-1] if len(ascending) else 0.0)
    for c in ascending[-2::-1]:
        value = value * w + c
    return value


def verdict(characteristic: Terms) -> Verdict:
    """Whether every root of F(s) = sum_k p_k(s) exp(-L_k s) is in the left half plane.

    Parameters
    ----------
    characteristic
        The terms of a closed loop's denominator, smallest dead time first.

    Returns
    -------
    Verdict
        A loop whose high-frequency gain is 1 or more with dead time (neutral type) is recognised
        first: it has infinitely many unstable roots, or is one rounding away from that.

    Source
    ------
    Argument principle; for the dead-time case R. Bellman and K.L. Cooke, "Differential-Difference
    Equations", Academic Press, 1963, ch. 12-13 (from memory).
    """
    ascending = [t.polynomial.coefficients[::-1] for t in characteristic]
    delays = np.array([t.dead_time for t in characteristic])
    order = len(ascending[0]) - 1
    if delays[0] > 0 or any(len(c) - 1 > order for c in ascending):
        return Verdict(
            False, None, "the loop answers faster than its own cause: more leads than lags"
        )
    table = np.zeros((len(ascending), order + 1))
    for row, c in zip(table, ascending, strict=True):
        row[: len(c)] = c
    neutral = float(np.abs(table[1:, order]).sum() / abs(table[0, order]))
    if neutral >= 1.0:
        return Verdict(
            False,
            None,
            f"the loop's gain at high frequency is {neutral:.4g} with dead time: "
            "1 or more never settles; filter the derivative or lower the gain",
        )
    if order == 0:
        return STABLE
    total = np.abs(table).sum(axis=0)
    if abs(table[:, 0].sum()) <= _ON_THE_AXIS * total[0]:
        return Verdict(False, None, "a root at s = 0: the loop does not come to rest")
    f = _scaled(table, delays)
    if len(delays) == 2 and _turns_too_often(f):
        return Verdict(
            False,
            None,
            "many roots in the right half plane: the gain is far too high for the dead time",
        )
    return _count(f, neutral)


def _scaled(table: NDArray[np.float64], delays: NDArray[np.float64]) -> _Characteristic:
    order = table.shape[1] - 1
    sizes = np.abs(table).sum(axis=0)
    unit = (sizes[0] / sizes[order]) ** (1.0 / order)
    scaled = table * unit ** np.arange(order + 1)
    return _Characteristic(scaled / np.abs(scaled).max(), delays * unit)


def _turns_too_often(f: _Characteristic) -> bool:
    """Whether p1 exp(-L s) outweighs p0 over so wide a band that F must have unstable roots.

    In the band F turns clockwise with the dead time, by far more than the polynomials can undo.
    """
    w = np.geomspace(1e-6, 1e9, 400)
    now, late = (np.abs(_Characteristic(row[None, :], np.zeros(1))(w)) for row in f.ascending)
    band = np.flatnonzero(late > 1.5 * now)
    if not len(band):
        return False
    edges = np.flatnonzero(np.diff(band) > 1)
    starts, ends = band[np.r_[0, edges + 1]], band[np.r_[edges, len(band) - 1]]
    turned = float((w[ends] - w[starts]).sum() * f.delays[1])
    return turned > 1000.0 + 20.0 * math.pi * f.order


def _count(f: _Characteristic, neutral: float) -> Verdict:
    """Half the axis suffices: the other half mirrors it."""
    order = f.order
    sizes = np.abs(f.ascending).sum(axis=0)
    leading = abs(f.ascending[0, order]) * (1.0 - neutral)
    # Fujiwara's bound: above it the leading power outweighs everything else together.
    powers = np.arange(order, 0, -1)
    top = 2.0 * float(((sizes[:order] / leading) ** (1.0 / powers)).max())
    start = min(0.5 * top, 0.1 / (order + float(f.delays.max())))
    pieces = max(2, math.ceil(math.log(top / start) / 0.3))
    edges = np.concatenate(([0.0], np.geomspace(start, top, pieces)))
    ends, on_axis = _certified(f, edges)
    if on_axis:
        return Verdict(False, None, "a root on the stability boundary: the swing never dies out")
    values = f(ends)
    turned = float(np.angle(values[1:] / values[:-1]).sum())
    last = values[-1] / (f.ascending[0, order] * (1j * top) ** order)
    turned -= float(np.angle(last))
    roots = round(order / 2 - turned / math.pi)
    if roots == 0:
        return STABLE
    noun = "root" if roots == 1 else "roots"
    return Verdict(False, roots, f"{roots} {noun} in the right half plane: the swing grows")


def _certified(f: _Characteristic, edges: NDArray[np.float64]) -> tuple[NDArray[np.float64], bool]:
    """Cut points of the axis between which F stays in a disc without 0; True if F meets 0."""
    low, high = edges[:-1], edges[1:]
    done: list[NDArray[np.float64]] = [edges[:1]]
    while len(low):
        middle, half = 0.5 * (low + high), 0.5 * (high - low)
        value = np.abs(f(middle))
        safe = value > f.steepness(high) * half
        done.append(high[safe])
        low, middle, high, value = (x[~safe] for x in (low, middle, high, value))
        if np.any(value <= _ON_THE_AXIS * f.size(middle)) or len(low) > _MOST_PIECES:
            return edges, True
        quarter = (high - low) / 4.0
        cuts = [low + k * quarter for k in range(5)]
        cuts[4] = high
        low, high = np.concatenate(cuts[:4]), np.concatenate(cuts[1:])
    return np.sort(np.concatenate(done)), False


def plant_verdict(plant: TransferFunction) -> Verdict:
    """Whether a plant alone is stable; an integrator is not."""
    if plant.has_delayed_feedback:
        return verdict(plant.denominator)
    growing = [p for p in plant.poles() if p.real > 0]
    if growing:
        return Verdict(False, len(growing), "a pole in the right half plane: it runs away")
    if any(p.real == 0 for p in plant.poles()):
        return Verdict(False, None, "a pole on the imaginary axis: it never comes to rest")
    return STABLE


def loop_verdict(open_loop: TransferFunction) -> Verdict:
    """Whether the loop with negative feedback around L(s) is stable; nothing is cancelled in it."""
    return verdict(open_loop.feedback().denominator)
