"""How sure a fit is: standard errors, intervals, correlation, from the likelihood about its best.

Standard errors come from the Fisher information.  Where noise remembers, how long it does is itself
only estimated, and a standard error that rests on it is worth fewer degrees of freedom; Student's t
then widens the interval.  Dead time and times get the interval of their profile likelihood, which
need not lie evenly about the best: the likelihood has a corner wherever the dead time carries a
move across a row.

Source: Fisher information and profile likelihood: common practice; degrees of freedom after
F.E. Satterthwaite, "An approximate distribution of estimates of variance components", Biometrics
Bulletin 2(6), 1946, 110-114, and M.G. Kenward and J.H. Roger, "Small sample inference for fixed
effects from restricted maximum likelihood", Biometrics 53(3), 1997, 983-997; bounds of a ratio
after E.C. Fieller, "Some problems in interval estimation", J. R. Stat. Soc. B 16(2), 1954, 175-185
(all from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from workbench.records.likelihood import Search, Solution, whiten
from workbench.records.response import Array, FittedShape

_LONG: Final = 20_000
"""Rows above which intervals are no longer found by the profile of the likelihood: so many rows
leave little doubt, and time matters."""
_NEARLY_LINEAR: Final = 0.04
"""Share of a time that its standard error must pass for its profile to differ from the plain
interval."""
_LARGEST: Final = 1e100
"""End of an interval that has none, in a finite number."""


@dataclass(frozen=True)
class Certainty:
    """What the likelihood says about each parameter, in the order of `names`."""

    names: tuple[str, ...]
    """`gain` or `slope_per_s`, `numerator_time_s` where there is one, the shape's values,
    `dead_time_s`."""
    estimates: Array
    errors: Array
    """One standard deviation each."""
    low: Array
    high: Array
    """Ends of the 95 % intervals."""
    correlation: Array
    """(parameters, parameters), of the logarithms of what cannot be negative."""
    profile: tuple[tuple[float, float], ...]
    """Dead times [s] and how much -2 ln(likelihood) rises there, everything else at its best."""


def certainty(search: Search, shape: FittedShape, here: Solution) -> Certainty | None:
    """Errors, intervals and correlation; `None` where the parameters cannot be told apart."""
    jacobian = search.jacobian(shape, here)
    covariance = _covariance(search, jacobian, here.square, here.point.noise_time)
    if covariance is None:
        return None
    turn, estimates = _wanted(shape, here, len(jacobian))
    spread = turn @ covariance @ turn.T
    deviations = np.sqrt(np.diag(spread))
    if not (np.isfinite(deviations).all() and (deviations > 0).all()):
        return None
    student = _students(search, here, jacobian, turn, spread)
    return _intervals(search, shape, here, estimates, spread, student)


def _covariance(
    search: Search, jacobian: Array, square: float, noise_time: float | None
) -> Array | None:
    white, _ = whiten(jacobian, search.rows.steps, noise_time)
    scale = np.sqrt((white * white).sum(axis=1))
    if not (scale > 0).all():
        return None
    triangle = np.linalg.qr(white.T / scale, mode="r")
    if np.linalg.cond(triangle) > 1e6:
        return None
    inverse = np.linalg.inv(triangle)
    variance = square / max(search.count - len(jacobian), 1)
    found: Array = variance * (inverse @ inverse.T) / np.outer(scale, scale)
    return found


def _wanted(shape: FittedShape, here: Solution, columns: int) -> tuple[Array, Array]:
    """From the model's parameters to those wanted (wanted, columns), and their estimates.

    Values stay logarithms here.
    """
    values, gain = here.point.values, float(here.coefficients[0])
    turn = np.zeros((shape.terms + len(values) + 1, columns))
    turn[0, 0] = 1.0
    estimates = [gain]
    if shape.terms == 2:
        lead = float(here.coefficients[1]) / gain
        turn[1, 0], turn[1, 1] = -lead / gain, 1.0 / gain
        estimates.append(lead)
    for index in range(len(values) + 1):
        turn[shape.terms + index, columns - len(values) - 1 + index] = 1.0
    return turn, np.array([*estimates, *values, here.point.dead_time])


def _students(search: Search, here: Solution, jacobian: Array, turn: Array, spread: Array) -> Array:
    """97.5 % points of Student's t for each parameter."""
    freedom = search.count - len(jacobian)
    noise_time = here.point.noise_time
    if noise_time is None:
        return np.full(len(turn), student(freedom))
    residual = search.rows.pv - here.fitted
    width = 0.1

    def at(log_step: float) -> tuple[float, Array]:
        memory = noise_time * math.exp(log_step)
        square, correction, information = search.whitened(jacobian, residual, memory)
        covariance = _covariance(search, jacobian, square, memory)
        if covariance is None:
            return math.nan, np.diag(spread)
        deviance = freedom * math.log(square) + correction + information
        return deviance, np.einsum("ij,jk,ik->i", turn, covariance, turn)

    (below, small), (middle, _), (above, large) = at(-width), at(0.0), at(width)
    curvature = (below - 2.0 * middle + above) / width**2
    # A memory that the record does not bound is known to a factor of three or so at most.
    variance = min(2.0 / curvature, 1.0) if curvature > 0.0 else 1.0
    slopes = np.log(large / small) / (2.0 * width)
    worth = 2.0 / (2.0 / freedom + slopes**2 * variance)
    return np.array([student(max(float(each), 3.0)) for each in worth])


def _intervals(
    search: Search,
    shape: FittedShape,
    here: Solution,
    estimates: Array,
    spread: Array,
    points: Array,
) -> Certainty:
    deviations = np.sqrt(np.diag(spread))
    errors, wide = deviations.copy(), points * deviations
    low, high = estimates - wide, estimates + wide
    if shape.terms == 2:
        low[1], high[1] = _ratio(search, shape, here, float(points[1]))
    first, last = shape.terms, len(estimates) - 1
    for index in range(first, last):
        stretch = math.exp(min(float(wide[index]), 100.0))
        low[index], high[index] = estimates[index] / stretch, estimates[index] * stretch
        errors[index] *= estimates[index]
    trail: list[tuple[float, float]] = []
    if search.count <= _LONG:
        limits = search.bounds(shape)
        for index in range(first, last):
            if deviations[index] > _NEARLY_LINEAR:
                ends = _profiled(
                    search,
                    shape,
                    here,
                    index - first,
                    float(wide[index]),
                    float(points[index]),
                    (float(limits[0][index - first]), float(limits[1][index - first])),
                    [],
                )
                low[index], high[index] = np.exp(ends)
        low[last], high[last] = _profiled(
            search,
            shape,
            here,
            last - first,
            float(wide[last]),
            float(points[last]),
            (0.0, search.longest_dead_time),
            trail,
        )
    low[last] = max(low[last], 0.0)
    errors[last] = max(errors[last], float(high[last] - low[last]) / (2.0 * points[last]))
    names = (
        shape.level_key,
        *(("numerator_time_s",) * (shape.terms - 1)),
        *shape.names,
        "dead_time_s",
    )
    correlation = spread / np.outer(deviations, deviations)
    trail.append((here.point.dead_time, 0.0))
    return Certainty(
        names,
        estimates,
        errors,
        np.clip(low, -_LARGEST, _LARGEST),
        np.clip(high, -_LARGEST, _LARGEST),
        correlation,
        tuple(sorted(trail)),
    )


def _ratio(search: Search, shape: FittedShape, here: Solution, point: float) -> tuple[float, float]:
    """Fieller's bounds of the numerator time, the ratio of two linear coefficients.

    r is inside while |c1 - r c0| <= t sd(c1 - r c0).
    """
    jacobian = search.jacobian(shape, here)
    covariance = _covariance(search, jacobian, here.square, here.point.noise_time)
    assert covariance is not None  # it was there for the standard errors
    c0, c1 = float(here.coefficients[0]), float(here.coefficients[1])
    s00, s01, s11 = covariance[0, 0], covariance[0, 1], covariance[1, 1]
    a = c0 * c0 - point**2 * s00
    b = c0 * c1 - point**2 * s01
    c = c1 * c1 - point**2 * s11
    inside = b * b - a * c
    if a <= 0.0 or inside < 0.0:
        return -_LARGEST, _LARGEST
    root = math.sqrt(inside)
    return (b - root) / a, (b + root) / a


# --- the profile of the likelihood ---------------------------------------------------------------


def _profiled(
    search: Search,
    shape: FittedShape,
    here: Solution,
    index: int,
    width: float,
    point: float,
    limits: tuple[float, float],
    trail: list[tuple[float, float]],
) -> tuple[float, float]:
    """Where the profile passes the bound on both sides, in the coordinate itself.

    The profile is the least sum of squares with the coordinate held; the memory of the noise stays
    at its best.
    """
    freedom = max(search.count - here.parameters, 1)
    lag = index < len(here.point.values)
    start = math.log(here.point.values[index]) if lag else here.point.dead_time
    warm = here.point
    if lag:
        # Two lags nearly alike have errors beyond all measure, and narrower profiles.
        width = min(width, 0.5)

    def excess(place: float) -> float:
        """Root of the rise, 1 at the bound."""
        nonlocal warm
        moved = list(warm.values)
        if lag:
            moved[index] = math.exp(place)
            trial = replace(warm, values=tuple(moved))
        else:
            trial = replace(warm, dead_time=place)
        found = search.descend(shape, trial, held=index, most=6, enough=0.02)
        warm = found.point
        rise = max(found.square / here.square - 1.0, 0.0) * freedom
        trail.append((place, rise))
        return math.sqrt(rise) / point

    low = _edge(excess, start, -width, limits[0])
    warm = here.point
    return low, _edge(excess, start, width, limits[1])


def _edge(excess: Callable[[float], float], inside: float, width: float, limit: float) -> float:
    """Where `excess` passes 1 on the way from `inside`, where it is 0, towards the limit."""
    if inside == limit:
        return limit
    near, at_near, here = inside, 0.0, inside + width
    for _ in range(40):
        far = limit if (here - limit) * width >= 0 else here
        at_far = excess(far)
        if at_far > 1.0:
            break
        if far == limit:
            return limit
        # The root of the rise is nearly straight; a little beyond where that would pass 1.
        gain = 1.1 * (far - inside) / max(at_far, 0.2)
        near, at_near = far, at_far
        here = inside + math.copysign(max(abs(gain), 1.2 * abs(far - inside)), width)
    for _ in range(14):
        if at_far - 1.0 < 0.02 or 1.0 - at_near < 0.01:
            break
        # Far beyond the bound the rise is no longer straight.
        share = 0.5
        if at_far < 3.0:
            share = min(max((1.0 - at_near) / (at_far - at_near), 0.1), 0.9)
        between = near + share * (far - near)
        found = excess(between)
        if found > 1.0:
            far, at_far = between, found
        else:
            near, at_near = between, found
    return near + (far - near) * (1.0 - at_near) / max(at_far - at_near, 1e-12)


def student(freedom: float) -> float:
    """97.5 % point of Student's t, by its expansion in 1/freedom; to 1 % from 3 on.

    Source
    ------
    M. Abramowitz and I.A. Stegun, "Handbook of Mathematical Functions", 1964, 26.7.5 (from memory).

    Examples
    --------
    >>> round(student(10), 3)
    2.228
    """
    z = 1.959963984540054
    first = (z**3 + z) / 4
    second = (5 * z**5 + 16 * z**3 + 3 * z) / 96
    third = (3 * z**7 + 19 * z**5 + 17 * z**3 - 15 * z) / 384
    fourth = (79 * z**9 + 776 * z**7 + 1482 * z**5 - 1920 * z**3 - 945 * z) / 92160
    return z + first / freedom + second / freedom**2 + third / freedom**3 + fourth / freedom**4
