"""Transfer functions with exact dead time, closed under series, parallel and feedback.

A transfer function is N(s)/D(s), where N and D are sums of polynomials, each with its own dead
time:  N(s) = sum_k n_k(s) exp(-L_k s).  Polynomials stay factored as they were entered, so that
eight equal lags keep eight equal poles and lags of very different size do not mix.  Nothing ever
cancels by itself: a pole and a zero that meet stay visible.

Coefficients are in descending powers of s; time is in seconds.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Final, overload

import numpy as np
from numpy.typing import NDArray

from workbench.errors import ModelError, Problem
from workbench.units import Figure

Coefficients = tuple[float, ...]
Powers = tuple[tuple[Coefficients, int], ...]
"""Factors, each with its power."""
Complex = NDArray[np.complex128]

_ROUNDING: Final = 8 * np.finfo(float).eps
"""A coefficient this far below the terms that made it is rounding, not plant."""
_SAME_TIME: Final = 1e-12
"""Dead times closer than this share of the larger are the same dead time."""


def _fault(what: str, mend: str) -> ModelError:
    return ModelError(Problem(what, mend))


def _not_finite() -> ModelError:
    return _fault("a coefficient is not finite", "bring the numbers closer together")


# --- polynomials kept factored -------------------------------------------------------------------


@dataclass(frozen=True)
class Factored:
    """A polynomial as gain times factors to whole powers; a factor has constant term 1, or is s."""

    gain: float
    factors: Powers = ()

    @classmethod
    def of(cls, coefficients: Sequence[float], power: int = 1) -> Factored:
        """From one list of coefficients in descending powers."""
        trimmed = tuple(map(float, coefficients))
        while trimmed and trimmed[0] == 0.0:
            trimmed = trimmed[1:]
        if not trimmed:
            return cls(0.0)
        at_origin = 0
        while trimmed[-1] == 0.0:
            trimmed, at_origin = trimmed[:-1], at_origin + 1
        constant = trimmed[-1]
        factors: Powers = (((1.0, 0.0), at_origin * power),) if at_origin else ()
        if len(trimmed) > 1:
            factor = tuple(c / constant for c in trimmed)
            if not all(map(math.isfinite, factor)):
                raise _not_finite()
            factors = (*factors, (factor, power))
        return cls._checked(constant**power, factors)

    @classmethod
    def _checked(cls, gain: float, factors: Powers) -> Factored:
        if not math.isfinite(gain):
            raise _not_finite()
        return cls(gain, factors) if gain else cls(0.0)

    def __mul__(self, other: Factored) -> Factored:
        gain = self.gain * other.gain
        if not (self.factors and other.factors):
            return self._checked(gain, self.factors or other.factors)
        powers = dict(self.factors)
        for factor, power in other.factors:
            powers[factor] = powers.get(factor, 0) + power
        return self._checked(gain, tuple(powers.items()))

    def __add__(self, other: Factored) -> Factored:
        if not self.gain or not other.gain:
            return other if not self.gain else self
        mine, theirs = Counter(dict(self.factors)), Counter(dict(other.factors))
        common = mine & theirs
        a = _expand(self.gain, (mine - common).items())
        b = _expand(other.gain, (theirs - common).items())
        size = max(len(a), len(b))
        a, b = (np.concatenate([np.zeros(size - len(x)), x]) for x in (a, b))
        total = a + b
        total[np.abs(total) <= _ROUNDING * (np.abs(a) + np.abs(b))] = 0.0
        return Factored.of(total.tolist()) * Factored(1.0, tuple(common.items()))

    def scaled(self, factor: float) -> Factored:
        """The polynomial times a number."""
        return self._checked(self.gain * factor, self.factors)

    @cached_property
    def degree(self) -> int:
        """Highest power of s."""
        return sum((len(f) - 1) * p for f, p in self.factors)

    @cached_property
    def coefficients(self) -> NDArray[np.float64]:
        """Expanded, in descending powers."""
        return _expand(self.gain, self.factors)

    def __call__(self, s: Complex) -> Complex:
        """The value at s; same shape."""
        value = np.full_like(s, self.gain)
        for factor, power in self.factors:
            horner = np.full_like(s, factor[0])
            for c in factor[1:]:
                horner = horner * s + c
            value = value * (horner if power == 1 else horner**power)
        return value

    @cached_property
    def roots(self) -> tuple[complex, ...]:
        """Every root [1/s], repeated as often as it occurs."""
        return tuple(root for f, p in self.factors for root in _roots(f) for _ in range(p))

    def divided_by(self, other: Factored) -> Factored | None:
        """The exact quotient where every factor of `other` is a factor here, else None."""
        mine, theirs = Counter(dict(self.factors)), Counter(dict(other.factors))
        if theirs - mine:
            return None
        return self._checked(self.gain / other.gain, tuple((mine - theirs).items()))


def _expand(gain: float, factors: Iterable[tuple[Coefficients, int]]) -> NDArray[np.float64]:
    product = np.array([gain])
    for factor, power in factors:
        for _ in range(power):
            product = np.convolve(product, factor)
    return product


def _roots(factor: Coefficients) -> list[complex]:
    """Roots of one factor: closed form up to degree 2, else companion matrix with Newton polish."""
    if len(factor) == 2:
        return [complex(0.0 - factor[1] / factor[0])]
    if len(factor) == 3:
        a, b, c = factor
        half = -b / 2.0
        inside = half * half - a * c
        if inside < 0.0:
            root = complex(half / a, math.sqrt(-inside) / abs(a))
            return [root, root.conjugate()]
        larger = half + math.copysign(math.sqrt(inside), half)
        return [complex(larger / a), complex(c / larger)]
    # Scaling s so that the first and last coefficients match keeps the companion matrix balanced.
    n = len(factor) - 1
    scale = abs(factor[-1] / factor[0]) ** (1.0 / n)
    scaled = np.array([c * scale ** (n - i) for i, c in enumerate(factor)])
    roots = np.roots(scaled).astype(complex)
    slope = np.polyder(scaled)
    for _ in range(3):
        with np.errstate(all="ignore"):
            step = np.polyval(scaled, roots) / np.polyval(slope, roots)
        small = np.isfinite(step) & (np.abs(step) < 1e-3 * np.abs(roots))
        roots = np.where(small, roots - step, roots)
    return [complex(r) * scale for r in roots]


# --- sums of polynomials with dead times ---------------------------------------------------------


@dataclass(frozen=True)
class Delayed:
    """One term of a numerator or denominator: polynomial times exp(-dead_time s)."""

    dead_time: float
    polynomial: Factored


Terms = tuple[Delayed, ...]


def _collect(terms: Iterable[Delayed]) -> Terms:
    """Terms in order of dead time, equal dead times added up, empty ones left out."""
    merged: list[Delayed] = []
    for term in sorted(terms, key=lambda t: t.dead_time):
        last = merged[-1] if merged else None
        if last and term.dead_time - last.dead_time <= _SAME_TIME * term.dead_time:
            merged[-1] = Delayed(last.dead_time, last.polynomial + term.polynomial)
        else:
            merged.append(term)
    return tuple(term for term in merged if term.polynomial.gain)


def _product(left: Terms, right: Terms) -> Terms:
    return _collect(
        Delayed(a.dead_time + b.dead_time, a.polynomial * b.polynomial) for a in left for b in right
    )


def _value(terms: Terms, s: Complex) -> Complex:
    total = np.zeros_like(s)
    for term in terms:
        value = term.polynomial(s)
        total = total + (value * np.exp(-term.dead_time * s) if term.dead_time else value)
    return total


def _lowest_power(terms: Terms) -> tuple[int, float]:
    """The first non-zero Taylor coefficient at s = 0, as (power, coefficient).

    Coefficients that cancel to rounding (as in 1 - exp(-2 s)) count as zero.
    """
    # As many terms as an exponential polynomial can lack at the origin: Padé pairs use them all.
    order = sum(t.polynomial.degree + 1 for t in terms)
    total, weight = np.zeros(order + 1), np.zeros(order + 1)
    for term in terms:
        series = [1.0]
        for k in range(1, order + 1):
            series.append(series[-1] * -term.dead_time / k)
        ascending = term.polynomial.coefficients[::-1]
        product = np.convolve(ascending, series)[: order + 1]
        total[: len(product)] += product
        weight[: len(product)] += np.convolve(np.abs(ascending), np.abs(series))[: order + 1]
    real = np.flatnonzero(np.abs(total) > 64 * _ROUNDING * weight)
    if not len(real):
        raise _fault("paths that cancel down to rounding", "leave them out")
    return int(real[0]), float(total[real[0]])


# --- the time-domain form ------------------------------------------------------------------------


@dataclass(frozen=True)
class Output:
    """One delayed reading of the state: c x(t - dead_time) + d u(t - dead_time)."""

    dead_time: float
    c: NDArray[np.float64]
    d: float


@dataclass(frozen=True)
class Realisation:
    """State space with exact dead times on its outputs.

    x' = A x + B u(t),   y(t) = sum_k  C_k x(t - L_k) + D_k u(t - L_k)

    A is lower block triangular: one block for each lag, fast lags first, integrators last.
    """

    a: NDArray[np.float64]
    b: NDArray[np.float64]
    outputs: tuple[Output, ...]


def _sections(polynomial: Factored) -> list[Coefficients]:
    """First- and second-order factors whose product is the polynomial, but for a gain."""
    found: list[Coefficients] = []
    for factor, power in polynomial.factors:
        pieces = [factor]
        if len(factor) > 3:
            pieces = [
                (-1.0 / r.real, 1.0)
                if r.imag == 0.0
                else (1.0 / abs(r) ** 2, -2.0 * r.real / abs(r) ** 2, 1.0)
                for r in _roots(factor)
                if r.imag >= 0.0
            ]
        found.extend(pieces * power)
    # Fast lags first and integrators last, so that the numerator is divided by slow ones first: the
    # remainders are its values at slow poles, of its own size; at fast poles they grow as T/T.
    lags = sorted((abs(f[0]) ** (1.0 / (len(f) - 1)), f) for f in found if f[-1])
    # An integrator over the slowest lag instead of over 1 s keeps its state of the others' size.
    slowest = lags[-1][0] if lags else 1.0
    return [f for _, f in lags] + [(slowest, 0.0)] * (len(found) - len(lags))


# --- the transfer function -----------------------------------------------------------------------


@dataclass(frozen=True)
class TransferFunction:
    """N(s)/D(s) with exact dead times; immutable, closed under series, parallel and feedback.

    >>> lag = TransferFunction.ratio((2.0,), [(10.0, 1.0)], dead_time=3.0)
    >>> (lag * lag).gain().value
    4.0
    >>> (1.0 / (1.0 + lag)).gain().value
    0.3333333333333333
    """

    numerator: Terms
    denominator: Terms

    @classmethod
    def ratio(
        cls,
        numerator: Sequence[float],
        factors: Sequence[Sequence[float]] = (),
        dead_time: float = 0.0,
    ) -> TransferFunction:
        """numerator(s) exp(-dead_time s) / product of factors; coefficients in descending powers.

        Raises `ModelError` for a negative dead time, a zero factor or a number that is not finite.
        """
        if not (math.isfinite(dead_time) and dead_time >= 0.0):
            raise _fault(f"a dead time of {dead_time:g} s", "give 0 or more")
        below = Factored(1.0)
        for factor in factors:
            below = below * Factored.of(factor)
        if not below.gain:
            raise _fault("division by zero", "give a denominator that is not 0")
        above = Factored.of(numerator).scaled(1.0 / below.gain)
        top = _collect([Delayed(dead_time, above)])
        return cls(top, (Delayed(0.0, below.scaled(1.0 / below.gain)),))

    @classmethod
    def constant(cls, value: float) -> TransferFunction:
        """A pure gain."""
        return cls.ratio((value,))

    # --- algebra

    def __neg__(self) -> TransferFunction:
        return self * -1.0

    def __mul__(self, other: TransferFunction | float) -> TransferFunction:
        """Series."""
        if not isinstance(other, TransferFunction):
            scaled = (Delayed(t.dead_time, t.polynomial.scaled(other)) for t in self.numerator)
            return TransferFunction(_collect(scaled), self.denominator)
        return TransferFunction(
            _product(self.numerator, other.numerator),
            _product(self.denominator, other.denominator),
        )

    __rmul__ = __mul__

    def __add__(self, other: TransferFunction | float) -> TransferFunction:
        """Parallel; shared factors of the denominators are not repeated."""
        if not isinstance(other, TransferFunction):
            other = TransferFunction.constant(other)
        if not other.numerator:
            return self
        if not self.numerator:
            return other
        if self.denominator == other.denominator:
            return TransferFunction(_collect((*self.numerator, *other.numerator)), self.denominator)
        if len(self.denominator) == len(other.denominator) == 1:
            mine, theirs = self.denominator[0].polynomial, other.denominator[0].polynomial
            union = Counter(dict(mine.factors)) | Counter(dict(theirs.factors))
            whole = Factored(1.0, tuple(union.items()))
            to_mine, to_theirs = whole.divided_by(mine), whole.divided_by(theirs)
            assert to_mine is not None
            assert to_theirs is not None
            top = (
                *_product(self.numerator, (Delayed(0.0, to_mine),)),
                *_product(other.numerator, (Delayed(0.0, to_theirs),)),
            )
            return TransferFunction(_collect(top), (Delayed(0.0, whole),))
        top = (
            *_product(self.numerator, other.denominator),
            *_product(other.numerator, self.denominator),
        )
        return TransferFunction(_collect(top), _product(self.denominator, other.denominator))

    __radd__ = __add__

    def __sub__(self, other: TransferFunction | float) -> TransferFunction:
        return self + (-other)

    def __rsub__(self, other: float) -> TransferFunction:
        return other + (-self)

    def __truediv__(self, other: TransferFunction | float) -> TransferFunction:
        """Division; raises `ModelError` for zero, or for an answer that comes before its cause."""
        if not isinstance(other, TransferFunction):
            other = TransferFunction.constant(other)
        if not other.numerator:
            raise _fault("division by zero", "give a denominator that is not 0")
        top = _product(self.numerator, other.denominator)
        below = _product(self.denominator, other.numerator)
        ahead = below[0].dead_time
        if top and top[0].dead_time < ahead * (1 - _SAME_TIME):
            raise _fault("a time advance", "divide only by what has no dead time of its own")
        # One gain, kept in the numerator: that is where people read it.
        gain = below[0].polynomial.gain
        return TransferFunction(
            tuple(
                Delayed(max(0.0, t.dead_time - ahead), t.polynomial.scaled(1.0 / gain)) for t in top
            ),
            tuple(Delayed(t.dead_time - ahead, t.polynomial.scaled(1.0 / gain)) for t in below),
        )

    def __rtruediv__(self, other: float) -> TransferFunction:
        return TransferFunction.constant(other) / self

    def __pow__(self, power: int) -> TransferFunction:
        """Series with itself; a negative power divides."""
        if power < 0:
            return 1.0 / self**-power
        result = TransferFunction.constant(1.0)
        for _ in range(power):
            result = result * self
        return result

    def feedback(self, around: TransferFunction | float = 1.0) -> TransferFunction:
        """The closed loop G/(1 + G H) with negative feedback through H = `around`."""
        if not isinstance(around, TransferFunction):
            around = TransferFunction.constant(around)
        top = _product(self.numerator, around.denominator)
        below = (
            *_product(self.denominator, around.denominator),
            *_product(self.numerator, around.numerator),
        )
        collected = _collect(below)
        if not collected:
            raise _fault("feedback that leaves nothing to divide by", "change the gain")
        return TransferFunction(top, collected)

    def with_time_unit(self, seconds: float) -> TransferFunction:
        """The function whose s was per `seconds`, with s per second."""
        return TransferFunction(
            tuple(_in_seconds(t, seconds) for t in self.numerator),
            tuple(_in_seconds(t, seconds) for t in self.denominator),
        )

    # --- questions

    @overload
    def __call__(self, s: complex) -> complex: ...
    @overload
    def __call__(self, s: Complex) -> Complex: ...
    def __call__(self, s: complex | Complex) -> complex | Complex:
        """The value at s [1/s], exact with dead time; same shape as `s`."""
        point = np.asarray(s, dtype=np.complex128)
        with np.errstate(divide="ignore", invalid="ignore"):  # on a pole the value is infinite
            value = _value(self.numerator, point) / _value(self.denominator, point)
        return complex(value) if value.ndim == 0 else value

    @property
    def has_delayed_feedback(self) -> bool:
        """A dead time inside a feedback path: infinitely many poles."""
        return len(self.denominator) > 1

    def poles(self) -> tuple[complex, ...]:
        """Poles of the rational part [1/s], nothing cancelled.

        Raises `ModelError` where a dead time in the denominator makes them infinitely many.
        """
        if self.has_delayed_feedback:
            raise _fault("infinitely many poles", "ask for the stability verdict instead")
        return self.denominator[0].polynomial.roots

    def zeros(self) -> tuple[complex, ...]:
        """Zeros [1/s] where the numerator has one dead time; otherwise none can be listed."""
        if len(self.numerator) != 1:
            return ()
        return self.numerator[0].polynomial.roots

    @property
    def delays(self) -> tuple[float, ...]:
        """The dead times of the numerator [s], rising."""
        return tuple(t.dead_time for t in self.numerator)

    @property
    def dead_time(self) -> float:
        """The smallest dead time from input to output [s]."""
        return self.numerator[0].dead_time if self.numerator else 0.0

    @property
    def relative_degree(self) -> int:
        """Degree of the denominator less that of the numerator; below 0 is improper."""
        top = max((t.polynomial.degree for t in self.numerator), default=0)
        return max(t.polynomial.degree for t in self.denominator) - top

    @property
    def is_proper(self) -> bool:
        """The answer to a step stays finite."""
        return self.relative_degree >= 0

    @cached_property
    def _at_origin(self) -> tuple[int, float]:
        """(p, c) with G(s) -> c s^p as s -> 0."""
        above, top = _lowest_power(self.numerator)
        below, bottom = _lowest_power(self.denominator)
        return above - below, top / bottom

    @property
    def integrators(self) -> int:
        """How many free integrators the function has; below 0: it differentiates."""
        return -self._at_origin[0] if self.numerator else 0

    def gain(self) -> Figure:
        """The limit of G(s) at s = 0, where it exists."""
        if not self.numerator:
            return Figure(0.0)
        power, value = self._at_origin
        if power > 0:
            return Figure(0.0)
        if power < 0:
            return Figure(None, "integrating: PV keeps moving, there is no steady gain")
        return Figure.of(value)

    def slope(self) -> Figure:
        """The limit of s G(s) at s = 0 [per s]: how fast the output moves for a lasting input."""
        if not self.numerator:
            return Figure(0.0)
        power, value = self._at_origin
        if power > -1:
            return Figure(0.0)
        if power < -1:
            return Figure(None, "integrating twice: PV moves faster and faster")
        return Figure.of(value)

    def realise(self) -> Realisation:
        """The state space for time-domain work.

        Raises `ModelError` for an improper function or a dead time inside a feedback path.
        """
        if self.has_delayed_feedback:
            raise _fault("a dead time inside an inner feedback", "enter the plant without it")
        if not self.is_proper:
            raise _fault("an improper plant", "give at least as many lags as leads")
        sections = _sections(self.denominator[0].polynomial)
        gain = self.denominator[0].polynomial.gain / math.prod(f[0] for f in sections if not f[-1])
        n = sum(len(f) - 1 for f in sections)
        # Numbers in lists: for a handful of them arrays take far longer.
        a, b = [[0.0] * n for _ in range(n)], [0.0] * n
        row = 0
        source: int | None = None
        for factor in sections:
            first, last = row, row + len(factor) - 2
            if len(factor) == 2:
                a[row][row] = -factor[1] / factor[0]
                fed = 1.0 / factor[0]
            else:
                t = math.sqrt(abs(factor[0]))
                a[first][last] = 1.0 / t
                a[last][first] = -factor[2] * t / factor[0]
                a[last][last] = -factor[1] / factor[0]
                fed = t / factor[0]
            # The section is fed by the state before it, the first one by the input.
            if source is None:
                b[last] = fed
            else:
                a[last][source] = fed
            source, row = first, last + 1
        outputs = tuple(
            _read_out(t.dead_time, (t.polynomial.coefficients / gain).tolist(), sections, n)
            for t in self.numerator
        )
        return Realisation(np.array(a).reshape(n, n), np.array(b), outputs)


def _in_seconds(term: Delayed, seconds: float) -> Delayed:
    polynomial = Factored(term.polynomial.gain)
    for factor, power in term.polynomial.factors:
        degree = len(factor) - 1
        scaled = [c * seconds ** (degree - i) for i, c in enumerate(factor)]
        polynomial = polynomial * Factored.of(scaled, power)
    return Delayed(term.dead_time * seconds, polynomial)


def _read_out(
    dead_time: float, numerator: list[float], sections: list[Coefficients], n: int
) -> Output:
    """The row C and feedthrough D of numerator / product of sections, by repeated division."""
    c = [0.0] * n
    row = n
    rest = numerator
    for factor in reversed(sections):
        row -= len(factor) - 1
        rest, remainder = _divided(rest, factor)
        c[row] = remainder[-1]
        if len(factor) == 3:
            c[row + 1] = remainder[0] / math.sqrt(abs(factor[0]))
    return Output(dead_time, np.array(c), rest[-1])


def _divided(numerator: list[float], factor: Coefficients) -> tuple[list[float], list[float]]:
    """Quotient and remainder of all its powers."""
    degree = len(factor) - 1
    rest = [0.0] * max(0, degree + 1 - len(numerator)) + numerator
    steps = len(rest) - degree
    for i in range(steps):
        rest[i] /= factor[0]
        for k in range(1, degree + 1):
            rest[i + k] -= rest[i] * factor[k]
    return rest[:steps], rest[steps:]
