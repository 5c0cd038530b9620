"""Other routes to the figures of `workbench.model`: nothing here uses the code under test.

Plants are kept as plain coefficient lists in descending powers of s; only `transfer()` turns them
into what is tested.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import mpmath
import numpy as np
from numpy.typing import NDArray

from workbench.model.transfer import TransferFunction

Floats = NDArray[np.float64]
Coefficients = tuple[float, ...]


@dataclass(frozen=True)
class Path:
    """numerator(s) exp(-dead_time s) / product of factors."""

    numerator: Coefficients
    factors: tuple[Coefficients, ...]
    dead_time: float = 0.0

    def transfer(self) -> TransferFunction:
        return TransferFunction.ratio(self.numerator, self.factors, self.dead_time)

    def __call__(self, s: Any) -> Any:
        """The value at s by mpmath, to the precision in force."""
        below = mpmath.mpf(1)
        for factor in self.factors:
            below *= mpmath.polyval([mpmath.mpf(c) for c in factor], s)
        above = mpmath.polyval([mpmath.mpf(c) for c in self.numerator], s)
        return above * mpmath.exp(-mpmath.mpf(self.dead_time) * s) / below


def parallel(paths: Sequence[Path]) -> TransferFunction:
    total = paths[0].transfer()
    for path in paths[1:]:
        total = total + path.transfer()
    return total


# --- random plants -------------------------------------------------------------------------------


def decimals(value: float) -> float:
    """Three significant digits, as an engineer types them."""
    return float(f"{value:.3g}")


def spread(rng: np.random.Generator, low: float, high: float) -> float:
    """A number whose logarithm is even between two bounds."""
    return decimals(math.exp(rng.uniform(math.log(low), math.log(high))))


def random_factors(
    rng: np.random.Generator, order: int, low: float, high: float, *, ends: str = "stable"
) -> tuple[Coefficients, ...]:
    """Lags, equal lags and oscillating pairs of `order` together; `ends` may bring one oddity:
    an integrator or an unstable lag."""
    factors: list[Coefficients] = []
    if ends == "integrating":
        factors.append((1.0, 0.0))
    if ends == "unstable":
        factors.append((spread(rng, low, high), -1.0))
    while (missing := order - sum(len(f) - 1 for f in factors)) > 0:
        kind = rng.integers(4)
        if kind == 0 and missing >= 2:
            t = spread(rng, low, high)
            factors.append((t * t, 2 * decimals(rng.uniform(0.2, 0.95)) * t, 1.0))
        elif kind == 1:
            factors.extend([(spread(rng, low, high), 1.0)] * int(rng.integers(1, missing + 1)))
        else:
            factors.append((spread(rng, low, high), 1.0))
    return tuple(factors)


def random_numerator(
    rng: np.random.Generator, order: int, low: float, high: float, *, zeros: int = 2
) -> Coefficients:
    """A gain with up to `zeros` leads or inverse responses, strictly proper below `order`."""
    numerator = np.array([spread(rng, 0.2, 3.0) * (1 if rng.random() < 0.8 else -1)])
    for _ in range(int(rng.integers(0, min(zeros, order - 1) + 1))):
        time = spread(rng, low, high) * (1 if rng.random() < 0.5 else -1)
        numerator = np.convolve(numerator, [time, 1.0])
    return tuple(float(c) for c in numerator)


def random_paths(
    rng: np.random.Generator, *, most: int = 8, low: float = 0.3, high: float = 30.0
) -> list[Path]:
    """One to three parallel paths of different dead times, denominators of their own."""
    paths = []
    for _ in range(int(rng.integers(1, 4))):
        order = int(rng.integers(1, most + 1))
        ends = "integrating" if rng.random() < 0.1 else "stable"
        factors = random_factors(rng, order, low, high, ends=ends)
        dead_time = 0.0 if rng.random() < 0.2 else spread(rng, low, high)
        paths.append(Path(random_numerator(rng, order, low, high), factors, dead_time))
        most = max(1, min(most, 8 - order))
    return paths


# --- time: partial fractions at high precision ---------------------------------------------------


def _shifted(polynomial: list[Any], to: Any, count: int) -> list[Any]:
    """Taylor coefficients about `to`, the constant first, by repeated Horner division."""
    rest, taylor = list(polynomial), []
    for _ in range(count):
        if not rest:
            taylor.append(mpmath.mpf(0))
            continue
        for i in range(1, len(rest)):
            rest[i] = rest[i] + rest[i - 1] * to
        taylor.append(rest.pop())
    return taylor


def _series_product(a: list[Any], b: list[Any]) -> list[Any]:
    return [mpmath.fsum(a[i] * b[k - i] for i in range(k + 1)) for k in range(len(a))]


def _roots(factor: Coefficients) -> list[Any]:
    exact = [mpmath.mpf(c) for c in factor]
    if len(exact) == 2:
        return [-exact[1] / exact[0]]
    a, b, c = exact
    root = mpmath.sqrt(mpmath.mpc(b * b - 4 * a * c))
    return [(-b + root) / (2 * a), (-b - root) / (2 * a)]


def step_by_partial_fractions(paths: Sequence[Path], times: Sequence[float]) -> list[Any]:
    """Response to a unit step at the times [s], each path expanded at its exact poles.

    60 digits inside, so that near-equal poles cost nothing that shows in 30.
    """
    with mpmath.workdps(60):
        totals = [mpmath.mpf(0)] * len(times)
        for path in paths:
            poles: Counter[Any] = Counter({mpmath.mpf(0): 1})
            leading = mpmath.mpf(1)
            for factor in path.factors:
                leading *= mpmath.mpf(factor[0])
                poles.update(_roots(factor))
            parts = [
                (p, m, _principal(path.numerator, leading, poles, p, m)) for p, m in poles.items()
            ]
            for i, t in enumerate(times):
                after = mpmath.mpf(t) - mpmath.mpf(path.dead_time)
                if after < 0:
                    continue
                for p, m, taylor in parts:
                    powers = (
                        g * after ** (m - 1 - k) / mpmath.factorial(m - 1 - k)
                        for k, g in enumerate(taylor)
                    )
                    totals[i] += mpmath.re(mpmath.exp(p * after) * mpmath.fsum(powers))
        return totals


def _principal(
    numerator: Coefficients, leading: Any, poles: Counter[Any], pole: Any, multiplicity: int
) -> list[Any]:
    """Taylor coefficients at `pole` of the function without that pole."""
    series = _shifted([mpmath.mpf(c) / leading for c in numerator], pole, multiplicity)
    for other, power in poles.items():
        if other == pole:
            continue
        inverse = [(-1) ** k / (pole - other) ** (k + 1) for k in range(multiplicity)]
        for _ in range(power):
            series = _series_product(series, inverse)
    return series


# --- stability: a spectral discretisation of the delay equation ----------------------------------

Terms = list[tuple[float, Floats]]
"""(dead time, coefficients in descending powers) of each term, dead time 0 first."""


def add_terms(*groups: Terms) -> Terms:
    merged: dict[float, Floats] = {}
    for delay, c in (term for group in groups for term in group):
        known = merged.get(delay, np.zeros(1))
        size = max(len(known), len(c))
        merged[delay] = np.pad(known, (size - len(known), 0)) + np.pad(c, (size - len(c), 0))
    return sorted(merged.items())


def multiply_terms(a: Terms, b: Terms) -> Terms:
    return add_terms(*([(da + db, np.convolve(ca, cb))] for da, ca in a for db, cb in b))


@dataclass(frozen=True)
class Rightmost:
    """What the discretised equation says."""

    root: complex
    """The root farthest to the right, as far as it was seen."""
    unstable: int
    """Roots with positive real part, as far as they were seen."""


def rightmost(terms: Terms, nodes: int) -> Rightmost:
    """Roots of sum_k p_k(s) exp(-L_k s) from the delay equation collocated at Chebyshev points.

    With x the vector of y and its derivatives, x'(t) = sum_k A_k x(t - L_k) + B_k x'(t - L_k); the
    history on [-L, 0] is a polynomial through `nodes` + 1 points, the equation holds at 0 and
    d/dt = d/dtheta at the others.  The eigenvalues near the axis are polished by Newton's method on
    the exact function.

    Source
    ------
    D. Breda, S. Maset, R. Vermiglio, "Pseudospectral differencing methods for characteristic roots
    of delay differential equations", SIAM J. Sci. Comput. 27(2), 2005, 482-495 (from memory);
    differentiation matrix and barycentric weights: L.N. Trefethen, "Spectral Methods in MATLAB",
    SIAM, 2000, ch. 6 (from memory).
    """
    order = len(terms[0][1]) - 1
    sizes = np.zeros(order + 1)
    for _, c in terms:
        sizes[order + 1 - len(c) :] += np.abs(c)
    unit = (sizes[-1] / sizes[0]) ** (1.0 / order) if sizes[-1] else 1.0
    powers = unit ** np.arange(order, -1, -1)
    lead = terms[0][1][0] * powers[0]
    scaled = [
        (delay * unit, np.pad(c, (order + 1 - len(c), 0)) * powers / lead) for delay, c in terms
    ]
    longest = scaled[-1][0]
    if longest == 0.0:
        found = np.roots(scaled[0][1]).astype(complex)
    else:
        found = np.linalg.eigvals(_generator(scaled, order, longest, nodes)).astype(complex)
        found = _polished(scaled, found[found.real > -2.0])
    if not len(found):
        return Rightmost(complex(-math.inf), 0)
    best = found[found.real.argmax()]
    return Rightmost(complex(best) * unit, int((found.real > 0).sum()))


def _generator(scaled: Terms, order: int, longest: float, nodes: int) -> Floats:
    k = np.arange(nodes + 1)
    x = np.cos(np.pi * k / nodes)
    weights = np.where((k == 0) | (k == nodes), 2.0, 1.0) * (-1.0) ** k
    difference = x[:, None] - x + np.eye(nodes + 1)
    d = np.outer(weights, 1.0 / weights) / difference
    d -= np.diag(d.sum(axis=1))
    d *= 2.0 / longest
    whole = np.kron(d, np.eye(order))
    whole[:order] = 0.0
    for i in range(order - 1):
        whole[i, i + 1] = 1.0
    row = whole[order - 1]
    for delay, c in scaled:
        at = 1.0 - 2.0 * delay / longest
        value = _through(x, weights, at)
        ascending = c[::-1]
        for j in range(order):
            row[j::order] -= ascending[j] * value
        if delay:
            row[order - 1 :: order] -= ascending[order] * (value @ d)
    return np.asarray(whole, np.float64)


def _through(x: Floats, weights: Floats, at: float) -> Floats:
    """The polynomial's value at `at` from its values at the points x."""
    if (hit := np.flatnonzero(np.abs(x - at) < 1e-14)).size:
        return np.asarray(np.eye(len(x))[hit[0]], np.float64)
    share = 1.0 / (weights * (at - x))
    return np.asarray(share / share.sum(), np.float64)


def _polished(scaled: Terms, guesses: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """The distinct exact roots that Newton's method reaches from nearby guesses."""
    s = guesses.copy()
    with np.errstate(all="ignore"):
        for _ in range(12):
            value, slope, _ = _exact(scaled, s)
            step = value / slope
            s = s - np.where(np.isfinite(step), step, 0.0)
        value, slope, size = _exact(scaled, s)
        near = np.abs(s - guesses) < 0.2 * np.abs(guesses) + 0.02
        good = np.isfinite(value) & (np.abs(value) < 1e-7 * size) & near
    kept: list[complex] = []
    for root in s[good]:
        if all(abs(root - other) > 1e-7 * (abs(root) + 1e-3) for other in kept):
            kept.append(complex(root))
    return np.array(kept, complex)


def _exact(
    scaled: Terms, s: NDArray[np.complex128]
) -> tuple[NDArray[np.complex128], NDArray[np.complex128], Floats]:
    """F(s), its derivative, and the size of its terms."""
    value, slope = np.zeros_like(s), np.zeros_like(s)
    size = np.zeros(len(s))
    for delay, c in scaled:
        p, wait = np.polyval(c, s), np.exp(-delay * s)
        value += p * wait
        slope += (np.polyval(np.polyder(c), s) - delay * p) * wait
        size += np.polyval(np.abs(c), np.abs(s)) * np.abs(wait)
    return value, slope, size


# --- the sampled loop as one matrix --------------------------------------------------------------


@dataclass(frozen=True)
class SampledRoute:
    """The closed loop of a held plant and a scanned PID, written out as difference equations.

    State: the plant's states at the scan, the held outputs of earlier scans, the integral, the
    derivative and the filtered PV of the scan before.
    """

    open_matrix: Floats
    """Of the state, without the controller's new output."""
    entry: Floats
    """What the controller's new output adds to the next state."""
    law: Floats
    """The controller's new output from the state."""

    @property
    def closed(self) -> Floats:
        return self.open_matrix + np.outer(self.entry, self.law)

    def eigenvalues(self) -> NDArray[np.complex128]:
        return np.asarray(np.linalg.eigvals(self.closed), np.complex128)

    def loop_gain(self, z: complex) -> complex:
        """L(z), cut open at the controller's output."""
        shifted = z * np.eye(len(self.entry)) - self.open_matrix
        return complex(-self.law @ np.linalg.solve(shifted, self.entry.astype(complex)))


@dataclass(frozen=True)
class Scanned:
    """Settings of the sampled loop, canonical gains of a reverse-acting controller."""

    scan: float
    proportional: float
    integral: float = 0.0
    derivative: float = 0.0
    filter_time: float = 0.0
    pv_filter: float = 0.0
    computing_delay: float = 0.0


def _companion(path: Path) -> tuple[Floats, Floats, Floats]:
    """Controllable canonical form of a strictly proper path."""
    below = np.ones(1)
    for factor in path.factors:
        below = np.convolve(below, factor)
    n = len(below) - 1
    a = np.zeros((n, n))
    a[0] = -below[1:] / below[0]
    a[1:, :-1] = np.eye(n - 1)
    c = np.zeros(n)
    c[n - len(path.numerator) :] = np.array(path.numerator) / below[0]
    return a, np.eye(n)[0], c


def sampled_route(paths: Sequence[Path], settings: Scanned) -> SampledRoute:
    """Dead time is moved to the input: for its first part a scan still sees the output before."""
    from scipy.linalg import block_diag, expm

    h = settings.scan
    blocks, entries, reads = [], [], []
    for path in paths:
        a, b, c = _companion(path)
        n = len(b)

        def held(interval: float, a: Floats = a, b: Floats = b, n: int = n) -> Any:
            stacked = np.zeros((n + 1, n + 1))
            stacked[:n, :n], stacked[:n, n] = a, b
            return expm(stacked * interval)

        whole, part = divmod(path.dead_time + settings.computing_delay, h)
        late, rest = held(part), held(h - part)
        old = rest[:n, :n] @ late[:n, n]
        blocks.append(held(h)[:n, :n])
        entries.append((int(whole), rest[:n, n], old))
        reads.append(c)
    plant = block_diag(*blocks)
    n, memory = len(plant), max(whole for whole, _, _ in entries) + 1
    size = n + memory + 3
    i_at, d_at, y_at = size - 3, size - 2, size - 1
    # Columns of the held outputs: n is u(k-1), n + 1 is u(k-2), and so on; the new one apart.
    matrix, entry = np.zeros((size, size)), np.zeros(size)
    matrix[:n, :n] = plant
    row = 0
    for whole, new, old in entries:
        rows = slice(row, row + len(new))
        if whole:
            matrix[rows, n + whole - 1] += new
        else:
            entry[rows] += new
        matrix[rows, n + whole] += old
        row += len(new)
    entry[n] = 1.0
    for k in range(1, memory):
        matrix[n + k, n + k - 1] = 1.0
    read = np.zeros(size)
    read[:n] = np.concatenate(reads)
    kept = math.exp(-h / settings.pv_filter) if settings.pv_filter else 0.0
    filtered = (1.0 - kept) * read
    filtered[y_at] = kept
    matrix[y_at] = filtered
    matrix[i_at] = -settings.integral * h * filtered
    matrix[i_at, i_at] += 1.0
    total = settings.filter_time + h
    matrix[d_at] = -settings.derivative / total * filtered
    matrix[d_at, y_at] += settings.derivative / total
    matrix[d_at, d_at] += settings.filter_time / total if settings.derivative else 0.0
    law = -settings.proportional * filtered + matrix[i_at] + matrix[d_at]
    return SampledRoute(matrix, entry, law)
