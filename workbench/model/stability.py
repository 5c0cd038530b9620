"""Is it stable: a count of unstable roots that is a proof, with dead time exact.

The characteristic function is F(s) = sum_k p_k(s) exp(-L_k s).  Its roots in the right half plane
are counted by the argument principle along the imaginary axis.  The axis is cut into pieces on each
of which F, or the term that outweighs the others, provably stays inside a disc that does not hold
0, so that its angle cannot turn unseen.
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

    def polynomials(self, w: NDArray[np.float64]) -> NDArray[np.complex128]:
        """p_k(jw) without the dead times, shape (terms, n)."""
        s = 1j * w
        value = np.repeat(self.ascending[:, -1:].astype(complex), len(w), axis=1)
        for c in self.ascending.T[-2::-1]:
            value = value * s + c[:, None]
        return value

    def turned(self, w: NDArray[np.float64]) -> NDArray[np.complex128]:
        """exp(-j w L_k), shape (terms, n)."""
        return np.asarray(np.exp(-1j * self.delays[:, None] * w), np.complex128)

    def steepness(self, w: NDArray[np.float64]) -> NDArray[np.float64]:
        """Upper bounds of |d p_k(jv)/dv| for every v from 0 to w, shape (terms, n)."""
        slopes = np.abs(self.ascending[:, 1:]) * np.arange(1.0, self.order + 1.0)
        value = np.repeat(slopes[:, -1:], len(w), axis=1)
        for c in slopes.T[-2::-1]:
            value = value * w + c[:, None]
        return np.asarray(value, np.float64)


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
    return _count(_scaled(table, delays), neutral)


def _scaled(table: NDArray[np.float64], delays: NDArray[np.float64]) -> _Characteristic:
    order = table.shape[1] - 1
    sizes = np.abs(table).sum(axis=0)
    unit = (sizes[0] / sizes[order]) ** (1.0 / order)
    scaled = table * unit ** np.arange(order + 1)
    return _Characteristic(scaled / np.abs(scaled).max(), delays * unit)


def _count(f: _Characteristic, neutral: float) -> Verdict:
    """Half the axis suffices: the other half mirrors it."""
    order = f.order
    top = _highest(f, neutral)
    start = min(0.5 * top, 0.1 / (order + float(f.delays.max())))
    pieces = max(2, math.ceil(math.log(top / start) / 0.3))
    turned = _turned(f, np.concatenate(([0.0], np.geomspace(start, top, pieces))))
    if turned is None:
        return Verdict(False, None, "a root on the stability boundary: the swing never dies out")
    # Beyond the top p_0 outweighs the rest, and its leading power the rest of p_0.
    end = np.array([top])
    values = f.polynomials(end)
    lead = f.ascending[0, order] * (1j * top) ** order
    turned -= float(np.angle((values * f.turned(end)).sum() / values[0, 0]))
    turned -= float(np.angle(values[0, 0] / lead))
    roots = round(order / 2 - turned / math.pi)
    if roots == 0:
        return STABLE
    noun = "root" if roots == 1 else "roots"
    return Verdict(False, roots, f"{roots} {noun} in the right half plane: the swing grows")


def _highest(f: _Characteristic, neutral: float) -> float:
    """A frequency above which |p_0| > sum of the other |p_k| and s^n outweighs the rest of p_0.

    With x = w^2 and weights m_k, (sum |p_k|)^2 <= (sum m_k)(sum |p_k|^2/m_k), a polynomial in x.
    Bounds of roots: M. Fujiwara, Tohoku Math. J. 10, 1916, 167-171; of positive roots, from the
    negative coefficients alone, J.B. Kioustelidis, J. Comput. Appl. Math. 16, 1986, 241-244 (both
    from memory).
    """
    order = f.order
    lead = abs(f.ascending[0, order])
    own = np.abs(f.ascending[0, :order]) / lead
    powers = np.arange(order, 0, -1)
    top = 2.0 * float((own ** (1.0 / powers)).max())
    if len(f.delays) > 1:
        # The weights follow the gains at high frequency, so that little is lost near neutral 1.
        others = len(f.delays) - 1
        weights = np.abs(f.ascending[1:, order]) / lead + (1.0 - neutral) / (2.0 * others)
        squares = np.array([_square(row) for row in f.ascending / lead])
        excess = squares[0] - weights.sum() * (squares[1:] / weights[:, None]).sum(axis=0)
        short = np.maximum(-excess[:order] / excess[order], 0.0)
        top = max(top, math.sqrt(2.0 * float((short ** (1.0 / powers)).max())))
    return top or 1.0


def _square(ascending: NDArray[np.float64]) -> NDArray[np.float64]:
    """|p(jw)|^2 as a polynomial in w^2, ascending."""
    mirrored = ascending * (-1.0) ** np.arange(len(ascending))
    product = np.convolve(ascending, mirrored)[::2]
    return np.asarray(product * (-1.0) ** np.arange(len(product)), np.float64)


def _turned(f: _Characteristic, edges: NDArray[np.float64]) -> float | None:
    """By how much F turns about 0 from the first to the last edge [rad]; None where it meets 0.

    The axis is cut until on each piece either F stays in a disc without 0, or one p_k stays in such
    a disc and outweighs all others together: then F turns as p_k exp(-j w L_k) does, however often
    that is, apart from what its two ends differ.
    """
    low, high = edges[:-1], edges[1:]
    ends: list[NDArray[np.float64]] = []
    leaders: list[NDArray[np.intp]] = []
    while len(low):
        middle, half = 0.5 * (low + high), 0.5 * (high - low)
        values = f.polynomials(middle)
        sizes, slack = np.abs(values), f.steepness(high) * half
        value = np.abs((values * f.turned(middle)).sum(axis=0))
        # A term moves by its own steepness and by its turning, at its largest on the piece.
        moved = slack + f.delays[:, None] * half * (sizes + slack)
        ahead = 2.0 * sizes - (sizes + slack).sum(axis=0)
        leader = np.where(value > moved.sum(axis=0), -1, ahead.argmax(axis=0))
        safe = (leader < 0) | (ahead.max(axis=0) > 0.0)
        ends.append(high[safe])
        leaders.append(leader[safe])
        low, high, value, sizes = low[~safe], high[~safe], value[~safe], sizes[:, ~safe]
        if np.any(value <= _ON_THE_AXIS * sizes.sum(axis=0)) or len(low) > _MOST_PIECES:
            return None
        cuts = [low + k * ((high - low) / 4.0) for k in range(5)]
        cuts[4] = high
        low, high = np.concatenate(cuts[:4]), np.concatenate(cuts[1:])
    at = np.concatenate((edges[:1], *ends))
    order = np.argsort(at)
    return _added_up(f, at[order], np.concatenate(leaders)[order[1:] - 1])


def _added_up(f: _Characteristic, at: NDArray[np.float64], leader: NDArray[np.intp]) -> float:
    """The turning of F over the pieces between the points `at`, each with its leading term."""
    polynomials = f.polynomials(at)
    terms = polynomials * f.turned(at)
    values = terms.sum(axis=0)
    total = float(np.angle(values[1:] / values[:-1])[leader < 0].sum())
    for k, delay in enumerate(f.delays):
        led = np.flatnonzero(leader == k)
        if len(led):
            p, rest = polynomials[k], np.angle(values / np.where(terms[k] == 0, 1.0, terms[k]))
            total += float(np.angle(p[led + 1] / p[led]).sum())
            total += float(
                (rest[led + 1] - rest[led]).sum() - delay * (at[led + 1] - at[led]).sum()
            )
    return total


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
