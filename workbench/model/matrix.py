"""Matrix exponential and zero-order hold, without scipy: the first screen must not wait for it."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve

_PADE_13 = (
    64764752532480000.0,
    32382376266240000.0,
    7771770303897600.0,
    1187353796428800.0,
    129060195264000.0,
    10559470521600.0,
    670442572800.0,
    33522128640.0,
    1323241920.0,
    40840800.0,
    960960.0,
    16380.0,
    182.0,
    1.0,
)
_THETA_13 = 5.371920351148152
"""Largest 1-norm for which the approximant is exact to double precision."""


def expm(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    """Exponential of square matrices (..., n, n), by scaling and squaring of the Padé approximant.

    Raises `CannotSolve` where the result is not finite.

    Source
    ------
    N.J. Higham, "The scaling and squaring method for the matrix exponential revisited",
    SIAM J. Matrix Anal. Appl. 26(4), 2005, 1179-1193, algorithm 2.3; coefficients from memory,
    checked against mpmath in the tests.
    """
    norm = float(np.abs(matrix).sum(axis=-2).max()) if matrix.size else 0.0
    if not math.isfinite(norm):
        raise CannotSolve("the plant's time scales are too far apart", change="enter them again")
    squarings = max(0, math.ceil(math.log2(norm / _THETA_13))) if norm > _THETA_13 else 0
    a = matrix / 2.0**squarings
    b = _PADE_13
    identity = np.eye(a.shape[-1])
    a2 = a @ a
    a4 = a2 @ a2
    a6 = a4 @ a2
    odd = a @ (
        a6 @ (b[13] * a6 + b[11] * a4 + b[9] * a2)
        + b[7] * a6
        + b[5] * a4
        + b[3] * a2
        + b[1] * identity
    )
    even = (
        a6 @ (b[12] * a6 + b[10] * a4 + b[8] * a2)
        + b[6] * a6
        + b[4] * a4
        + b[2] * a2
        + b[0] * identity
    )
    result = np.asarray(np.linalg.solve(even - odd, even + odd), np.float64)
    alone, rates = _alone(matrix), np.diagonal(matrix, axis1=-2, axis2=-1)
    for k in range(squarings - 1, -1, -1):
        result = result @ result
        # Each squaring doubles the relative error of what decays slowly: 20 of them leave 1e-10.
        # Where the entry stands alone on the diagonal it is known exactly (A.H. Al-Mohy and
        # N.J. Higham, SIAM J. Matrix Anal. Appl. 31(3), 2009, 970-989, from memory).
        result[..., alone, alone] = np.exp(rates[..., alone] / 2.0**k)
    return result


def _alone(matrix: NDArray[np.float64]) -> NDArray[np.intp]:
    """Indices of the 1 x 1 diagonal blocks that block lower triangular matrices all have."""
    n = matrix.shape[-1]
    used = (matrix != 0.0).any(axis=tuple(range(matrix.ndim - 2)))
    last = np.where(used, np.arange(n), 0).max(axis=1, initial=0)
    ends = np.maximum.accumulate(last) <= np.arange(n)
    return np.flatnonzero(ends & np.concatenate(([True], ends[:-1])))


def hold(
    a: NDArray[np.float64], b: NDArray[np.float64], interval: float | NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Exact answer of x' = A x + B u to an input held for `interval` [s].

    Returns phi (n, n) and gamma (n,) with x(t + interval) = phi x(t) + gamma u; all of them may
    have leading axes, for many plants at once.
    """
    if b.ndim == 1:
        phi, gamma = holds(a, b[:, np.newaxis], (float(interval),))[0]
        return phi, gamma[:, 0]
    n = b.shape[-1]
    length = np.asarray(interval, np.float64)[..., np.newaxis]
    # The input stands first, which keeps a lower triangular A lower triangular.
    stacked = np.zeros((*b.shape[:-1], n + 1, n + 1))
    stacked[..., 1:, 1:] = a * length[..., np.newaxis]
    stacked[..., 1:, 0] = b * length
    exponential = expm(stacked)
    return exponential[..., 1:, 1:], exponential[..., 1:, 0]


def holds(
    a: NDArray[np.float64], b: NDArray[np.float64], intervals: tuple[float, ...]
) -> list[tuple[NDArray[np.float64], NDArray[np.float64]]]:
    """`hold` of several inputs over several intervals at once.

    Parameters
    ----------
    a
        (n, n) [1/s]
    b
        (n, inputs)
    intervals
        [s]

    Returns
    -------
    list
        For each interval phi (n, n) and gamma (n, inputs).

    Notes
    -----
    One or two lags have a closed form.  Over short intervals, the largest row sum of |A| t at most
    1/2, the power series of (exp(A t) - 1)/(A t) to the 15th power is exact to double precision and
    needs a handful of products (its powers grouped by fours, as M.S. Paterson and L.J. Stockmeyer,
    SIAM J. Comput. 2(1), 1973, 60-66, from memory).
    """
    rows, longest = a.tolist(), max(intervals, default=0.0)
    is_lags = len(rows) == 1 or (len(rows) == 2 and not rows[0][1])
    if is_lags and max(row[i] for i, row in enumerate(rows)) * longest < _LARGEST_EXPONENT:
        lists = [_lags(rows, b.tolist(), interval) for interval in intervals]
        return [(np.array(phi), np.array(gamma)) for phi, gamma in lists]
    if not rows or max(sum(map(abs, row)) for row in rows) * longest > 0.5:
        return [_held_alone(a, b, interval) for interval in intervals]
    square = a @ a
    powers = np.empty((4, len(rows), len(rows)))
    powers[0], powers[1], powers[2], powers[3] = np.eye(len(rows)), a, square, square @ a
    fourth = square @ square
    weights = np.array(intervals)[:, np.newaxis] ** _EXPONENTS / _FACTORIALS
    groups = (weights.reshape(-1, 4) @ powers.reshape(4, -1)).reshape(-1, 4, *a.shape)
    integral = groups[:, 3]
    for k in (2, 1, 0):
        integral = groups[:, k] + fourth @ integral
    phi = powers[0] + a @ integral
    gamma = integral @ b
    return list(zip(phi, gamma, strict=True))


_EXPONENTS = np.arange(1.0, 17.0)
_FACTORIALS = np.cumprod(_EXPONENTS)

_LARGEST_EXPONENT = 700.0
"""exp of more than this is not a number."""

Rows = list[list[float]]


def _lags(a: Rows, b: Rows, t: float) -> tuple[Rows, Rows]:
    """`holds` over one interval for one state, or for two of which the first feeds the second.

    With p, r on the diagonal, q below, and divided differences [...] of exp over p t, r t and 0:
    exp(A t) has q t [p, r] below the diagonal, and its integral t [0, p], t [0, r] on it and
    q t^2 [0, p, r] below.
    """
    p = a[0][0] * t
    own, first = math.exp(p), t * _between(0.0, p)
    if len(a) == 1:
        return [[own]], [[first * value for value in b[0]]]
    coupling, r = a[1][0] * t, a[1][1] * t
    second, both = t * _between(0.0, r), t * coupling * _bend(p, r)
    fed = [both * one + second * other for one, other in zip(*b, strict=True)]
    phi = [[own, 0.0], [coupling * _between(p, r), math.exp(r)]]
    return phi, [[first * value for value in b[0]], fed]


def _between(x: float, y: float) -> float:
    """The divided difference of exp at x and y."""
    apart = -abs(x - y)
    return math.exp(max(x, y)) * (math.expm1(apart) / apart if apart else 1.0)


def _bend(x: float, y: float) -> float:
    """The divided difference of exp at 0, x and y."""
    near, far = (x, y) if abs(x) < abs(y) else (y, x)
    if abs(far) > 1.0:
        return (_between(x, y) - _between(0.0, near)) / far
    # What would cancel there is the sum of h_k(x, y)/(k + 2)! over the complete symmetric
    # polynomials h_k.
    total, power, symmetric, weight, k = 0.5, 1.0, 1.0, 0.5, 2
    while abs(symmetric) * weight > 1e-18 or abs(power) * weight > 1e-18:
        k += 1
        power *= far
        symmetric = near * symmetric + power
        weight /= k
        total += symmetric * weight
    return total


def _held_alone(
    a: NDArray[np.float64], b: NDArray[np.float64], interval: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """One interval; each input by itself, so that the size of one does not cost another digits."""
    n = len(a)
    # The input stands first, which keeps a lower triangular A lower triangular.
    stacked = np.zeros((n + 1, n + 1))
    stacked[1:, 1:] = a * interval
    phi, gamma = expm(stacked)[1:, 1:], np.empty(b.shape)
    for k in range(b.shape[1]):
        stacked[1:, 0] = b[:, k] * interval
        gamma[:, k] = expm(stacked)[1:, 0]
    return phi, gamma
