"""The likelihood of a record under a plant shape, and the search for its best point.

Output error, maximum likelihood.  PV is taken as

    pv(t) = level + drift t + gain x(t) + (what was still settling at the start) + noise,

where x is the exact answer of the shape, dead time included, to OP held from row to row as it was.
Before the first row OP is taken to have stood at its first value.  Level, drift, gain and the
settling part are linear and solved exactly inside; time constants and dead time are searched, the
dead time over its whole range because the cost has many valleys in it.  Noise is white, or
correlated: a first-order autoregression in continuous time, exact on irregular stamps.

Source: common practice in system identification; separable least squares after G.H. Golub and
V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least squares problems whose
variables separate", SIAM J. Numer. Anal. 10(2), 1973, 413-432 (from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from workbench.errors import CannotSolve
from workbench.records.record import Record
from workbench.records.response import Array, FittedShape, Moves

_SEARCH_ROWS: Final = 1200
"""Rows that the first, coarse search looks at; OP is followed exactly all the same."""
_LONG: Final = 20_000
"""Rows above which only the deepest valley is searched, and the dead time's interval is no longer
found by the profile of the likelihood: so many rows leave little doubt, and time matters."""

# --- the search ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Point:
    """A place in the search: what is not linear in the model."""

    times: tuple[float, ...]
    dead_time: float
    noise_time: float | None = None
    settling: bool = False


@dataclass(frozen=True)
class Solution:
    """The best linear part at a point."""

    point: Point
    coefficients: Array
    """Gain, level, drift where fitted, settling amplitudes where fitted."""
    fitted: Array
    deviance: float
    """-2 ln(likelihood), the noise's variance at its best."""
    variance: float
    """Mean square of the whitened residual."""
    parameters: int

    def bic(self, rows: int) -> float:
        """Bayesian information criterion, lower is better."""
        return self.deviance + self.parameters * math.log(rows)


class Search:
    """One record's fits; holds what every shape shares."""

    def __init__(
        self,
        record: Record,
        noise_model: str,
        drift: bool,
        should_stop: Callable[[], bool] | None,
    ) -> None:
        self.time, self.pv = record.time, record.pv
        self.rows = len(record.time)
        self.steps = np.diff(record.time)
        self.interval, self.span = record.interval, record.duration
        self.moves = Moves(record.time, record.op)
        self.noise_model, self.drift = noise_model, drift
        self.should_stop = should_stop
        # PV must have time to answer the first move within the record.
        first_move = float(self.moves.at[1])
        self.longest_dead_time = 0.7 * (self.span - first_move)
        self.shortest_lag, self.longest_lag = 0.1 * self.interval, 5.0 * self.span
        self.null_bic = self._null()

    # -- the model at one point --

    def solve(self, shape: FittedShape, point: Point) -> Solution:
        """The linear part, solved exactly, and the deviance there."""
        if self.should_stop is not None and self.should_stop():
            raise CannotSolve("the fit was stopped", change="run it again for an answer")
        return self._solution(self._terms(shape, point), point, 2 + len(point.times))

    def _terms(self, shape: FittedShape, point: Point) -> Array:
        """What PV is a sum of (k, n): the answer to OP, level, drift, and what still settles."""
        place = self.moves.place(self.time - point.dead_time)
        terms = [shape.respond(self.moves, point.times, place), np.ones(self.rows)]
        if self.drift or shape.integrates:
            terms.append(self.time / self.span)
        if point.settling:
            terms += [np.exp(-self.time / t) for t in point.times]
        return np.stack(terms)

    def _solution(self, terms: Array, point: Point, searched: int) -> Solution:
        white, correction = _whiten(terms, self.steps, point.noise_time)
        target, _ = _whiten(self.pv, self.steps, point.noise_time)
        coefficients = _least_squares(white, target)
        residual = target - coefficients @ white
        # A record without any noise would otherwise drive the logarithm to minus infinity.
        floor = 1e-22 * float(np.var(self.pv)) + 1e-300
        variance = max(float(residual @ residual) / self.rows, floor)
        deviance = self.rows * (math.log(2 * math.pi * variance) + 1.0) + correction
        count = searched + len(terms) + (point.noise_time is not None)
        return Solution(point, coefficients, coefficients @ terms, deviance, variance, count)

    # -- from coarse to fine --

    def best(self, shape: FittedShape) -> Solution:
        """The most likely point of a shape over noise models and starts, by BIC."""
        options: list[Solution] = []
        white = self._refine_all(shape, self._coarse(shape, None))
        if self.noise_model != "correlated":
            options += white
        exact = min(s.variance for s in white) < 1e-16 * float(np.var(self.pv))
        if self.noise_model == "correlated" or (self.noise_model == "auto" and not exact):
            options += self._correlated(shape, min(white, key=lambda s: s.deviance))
        return min(options, key=lambda solution: solution.bic(self.rows))

    def _correlated(self, shape: FittedShape, white: Solution) -> list[Solution]:
        residual = self.pv - white.fitted
        rho = float(residual[1:] @ residual[:-1]) / (float(residual @ residual) + 1e-300)
        # n rho^2 is about what the likelihood gains; far below its price in BIC it is not worth it.
        if self.noise_model == "auto" and self.rows * rho * rho < 0.3 * math.log(self.rows):
            return []
        noise_time = self.interval / -math.log(min(max(rho, 0.05), 0.995))
        starts = self._coarse(shape, noise_time)
        point = white.point
        starts.append(replace(point, noise_time=noise_time))
        return self._refine_all(shape, starts)

    def _refine_all(self, shape: FittedShape, starts: list[Point]) -> list[Solution]:
        """The best refined solution with PV at rest at the start, and with PV still settling."""
        refined = [self._refine(shape, start) for start in starts]
        kinds = {solution.point.settling for solution in refined}
        return [
            min((s for s in refined if s.point.settling == kind), key=lambda s: s.deviance)
            for kind in kinds
        ]

    def _refine(self, shape: FittedShape, start: Point) -> Solution:
        """Downhill simplex over the logarithms of the times, and the dead time."""
        from scipy.optimize import minimize

        unit = max(self.interval, 0.2 * max(start.times, default=0.0))
        lags = len(start.times)
        low = [math.log(self.shortest_lag)] * lags + [0.0]
        high = [math.log(self.longest_lag)] * lags + [self.longest_dead_time / unit]
        x = [*(math.log(t) for t in start.times), start.dead_time / unit]
        step = [0.15] * lags + [0.5]
        if start.noise_time is not None:
            low.append(math.log(0.05 * self.interval))
            high.append(math.log(self.span))
            x.append(math.log(start.noise_time))
            step.append(0.3)

        def point(x: Array) -> Point:
            times = tuple(sorted((math.exp(v) for v in x[:lags]), reverse=True))
            noise = None if start.noise_time is None else math.exp(x[-1])
            return Point(times, float(x[lags]) * unit, noise, start.settling)

        def deviance(x: Array) -> float:
            return self.solve(shape, point(x)).deviance

        simplex: Array = np.tile(np.clip(np.array(x), low, high), (len(x) + 1, 1))
        for i, width in enumerate(step):
            inward = width if simplex[0, i] + width <= high[i] else -width
            simplex[i + 1, i] = max(simplex[0, i] + inward, low[i])
        found = minimize(
            deviance,
            simplex[0],
            method="Nelder-Mead",
            bounds=list(zip(low, high, strict=True)),
            options={"initial_simplex": simplex, "xatol": 1e-5, "fatol": 1e-4, "maxfev": 400},
        )
        return self.solve(shape, point(np.asarray(found.x)))

    def _coarse(self, shape: FittedShape, noise_time: float | None) -> list[Point]:
        """Starts from a grid over the whole range of dead times and time constants."""
        chosen = np.unique(np.linspace(0, self.rows - 1, _SEARCH_ROWS).astype(np.intp))
        grid = _Grid(self.time[chosen], self.pv[chosen], self.span, noise_time)
        members = self._members(shape.lags)
        dead_times = self._dead_times()
        costs = np.empty((2, len(dead_times), len(members)))
        settling = grid.settling(members)
        for i, dead_time in enumerate(dead_times):
            if self.should_stop is not None and self.should_stop():
                raise CannotSolve("the fit was stopped", change="run it again for an answer")
            place = self.moves.place(grid.time - dead_time)
            answers = np.stack([shape.respond(self.moves, times, place) for times in members])
            costs[:, i] = grid.costs(answers, settling)
        starts = []
        for kind in (False, True) if shape.lags else (False,):
            profile = costs[int(kind)].min(axis=1)
            for i in _valleys(profile)[: 3 if self.rows <= _LONG else 1]:
                times = members[int(np.argmin(costs[int(kind), i]))]
                starts.append(Point(times, float(dead_times[i]), noise_time, kind))
        return starts

    def _members(self, lags: int) -> list[tuple[float, ...]]:
        if not lags:
            return [()]
        times = np.geomspace(0.4 * self.interval, self.longest_lag, 14 if lags == 1 else 10)
        if lags == 1:
            return [(float(t),) for t in times]
        return [(float(t), float(t * share)) for t in times for share in (0.9, 0.45, 0.15)]

    def _dead_times(self) -> Array:
        """Half an interval apart at first, then 4 % of the dead time."""
        grid = [0.0]
        while grid[-1] < self.longest_dead_time:
            grid.append(grid[-1] + max(0.5 * self.interval, 0.04 * grid[-1], self.span / 1000))
        return np.array(grid)

    def _null(self) -> float:
        """BIC of the model in which OP does nothing: level, drift and noise."""
        from scipy.optimize import minimize_scalar

        terms = np.stack([np.ones(self.rows), self.time / self.span])

        def solution(noise_time: float | None) -> Solution:
            return self._solution(terms, Point((), 0.0, noise_time), 1)

        options = []
        if self.noise_model != "correlated":
            options.append(solution(None))
        if self.noise_model != "white":
            found = minimize_scalar(
                lambda x: solution(math.exp(x)).deviance,
                bounds=(math.log(0.05 * self.interval), math.log(self.span)),
                method="bounded",
            )
            options.append(solution(math.exp(float(found.x))))
        return min(option.bic(self.rows) for option in options)

    def drift_per_s(self, shape: FittedShape, best: Solution) -> float:
        """Drift beside the answer to OP; an integrating shape's own straight line is not drift."""
        if shape.integrates or not self.drift:
            return 0.0
        return float(best.coefficients[2]) / self.span

    # -- how sure --

    def spread(self, shape: FittedShape, best: Solution) -> list[float] | None:
        """Standard errors of gain, dead time and time constants, from the Fisher information.

        `None` where the information matrix is singular: the parameters cannot be told apart.
        """
        point = replace(best.point, times=_apart(best.point.times))
        step = 1e-4 * max(self.interval, *point.times, 0.0)

        def slope(up: Point, down: Point, width: float) -> Array:
            difference = self._terms(shape, up) - self._terms(shape, down)
            found: Array = best.coefficients @ difference / width
            return found

        later = replace(point, dead_time=point.dead_time + step)
        sooner = replace(point, dead_time=point.dead_time - step)
        derivatives = [slope(later, sooner, 2 * step)]
        for i, t in enumerate(point.times):
            up, down = _scaled(point, i, 1 + 1e-4), _scaled(point, i, 1 - 1e-4)
            derivatives.append(slope(up, down, 2e-4 * t))
        terms = self._terms(shape, point)
        jacobian = np.stack([terms[0], *derivatives, *terms[1:]])
        white, _ = _whiten(jacobian, self.steps, point.noise_time)
        scale = np.sqrt((white * white).sum(axis=1))
        if not (scale > 0).all():
            return None
        triangle = np.linalg.qr(white.T / scale, mode="r")
        if np.linalg.cond(triangle) > 1e8:
            return None
        inverse = np.linalg.inv(triangle)
        variance = best.variance * self.rows / (self.rows - len(jacobian))
        spread = np.sqrt(variance * (inverse * inverse).sum(axis=1)) / scale
        return [float(s) for s in spread[: 2 + len(point.times)]]

    def dead_time_interval(
        self, shape: FittedShape, best: Solution, error: float
    ) -> tuple[float, float]:
        """Dead times whose profile deviance lies within the 95 % bound of the best.

        The noise time stays at its best value.
        """
        here = best.point.dead_time
        if self.rows > _LONG or not error:
            return max(here - 1.96 * error, 0.0), here + 1.96 * error
        freedom = self.rows - best.parameters
        bound = best.deviance + self.rows * math.log1p(_student_square(freedom) / freedom)

        def excess(dead_time: float) -> float:
            return self._profile(shape, replace(best.point, dead_time=dead_time)) - bound

        return (
            _edge(excess, here, -1.96 * error, 0.0),
            _edge(excess, here, 1.96 * error, self.longest_dead_time),
        )

    def _profile(self, shape: FittedShape, point: Point) -> float:
        """Least deviance over the time constants, dead time and noise time held.

        Gauss-Newton on the logarithms of the time constants: the deviance is smooth in them.
        """
        best = math.inf
        for _ in range(3):
            here = self.solve(shape, point)
            best = min(best, here.deviance)
            if not point.times:
                break
            terms = self._terms(shape, point)
            extra = [
                (here.coefficients @ self._terms(shape, _scaled(point, i, 1.0001)) - here.fitted)
                / 1e-4
                for i in range(len(point.times))
            ]
            full, _ = _whiten(np.stack([*terms, *extra]), self.steps, point.noise_time)
            target, _ = _whiten(self.pv, self.steps, point.noise_time)
            change = _least_squares(full, target)
            steps = np.clip(change[len(terms) :], -0.5, 0.5)
            if np.abs(steps).max() < 1e-3:
                break
            times = np.array(point.times) * np.exp(steps)
            times = np.clip(times, self.shortest_lag, self.longest_lag)
            point = replace(point, times=tuple(times.tolist()))
        return best


# --- the coarse grid -----------------------------------------------------------------------------


class _Grid:
    """Costs of many time constants at once, level and drift projected out."""

    def __init__(self, time: Array, pv: Array, span: float, noise_time: float | None) -> None:
        self.time, self.noise_time = time, noise_time
        self.steps = np.diff(time)
        flat = np.stack([np.ones(len(time)), time / span])
        self._basis = np.linalg.qr(self._white(flat).T)[0]
        self._target = self._project(self._white(pv[np.newaxis]))[0]
        self._total = float(self._target @ self._target)

    def _white(self, rows: Array) -> Array:
        return _whiten(rows, self.steps, self.noise_time)[0]

    def _project(self, rows: Array) -> Array:
        projected: Array = rows - (rows @ self._basis) @ self._basis.T
        return projected

    def settling(self, members: list[tuple[float, ...]]) -> Array:
        """Unit vectors of the slowest lag still settling at the start (members, n)."""
        slowest = np.array([max(times, default=self.time[-1]) for times in members])
        rows = self._project(self._white(np.exp(-self.time / slowest[:, np.newaxis])))
        length = np.maximum(np.linalg.norm(rows, axis=1, keepdims=True), 1e-300)
        unit: Array = rows / length
        return unit

    def costs(self, answers: Array, settling: Array) -> Array:
        """Sums of squares with PV at rest and with PV settling at the start (2, members)."""
        rows = self._project(self._white(answers))
        along = rows @ self._target
        square = np.einsum("ij,ij->i", rows, rows)
        mixed = np.einsum("ij,ij->i", rows, settling)
        alone = settling @ self._target
        tiny = 1e-12 * square + 1e-300
        rest = self._total - along**2 / (square + tiny)
        free = np.maximum(square - mixed**2, 0.0) + tiny
        settled = self._total - alone**2 - (along - mixed * alone) ** 2 / free
        return np.stack([rest, settled])


def _valleys(profile: Array) -> list[int]:
    """Indices of local minima, deepest first; those far above the deepest are left aside."""
    walled = np.concatenate([[math.inf], profile, [math.inf]])
    low = np.flatnonzero((profile <= walled[:-2]) & (profile <= walled[2:]))
    ordered = low[np.argsort(profile[low], kind="stable")]
    return [int(i) for i in ordered if profile[i] <= 1.5 * profile[ordered[0]] + 1e-300]


# --- small mathematics ---------------------------------------------------------------------------


def _whiten(values: Array, steps: Array, noise_time: float | None) -> tuple[Array, float]:
    """Signals (..., n) made independent under noise that forgets itself over `noise_time` [s].

    w_i = (v_i - rho_i v_(i-1)) / sqrt(1 - rho_i^2),  rho_i = exp(-step_i / noise_time).
    Returns also sum ln(1 - rho_i^2), the change in -2 ln(likelihood).
    """
    if noise_time is None:
        return values, 0.0
    rho = np.exp(-steps / noise_time)
    left = -np.expm1(-2.0 * steps / noise_time)
    white = np.empty_like(values)
    white[..., 0] = values[..., 0]
    white[..., 1:] = (values[..., 1:] - rho * values[..., :-1]) / np.sqrt(left)
    return white, float(np.log(left).sum())


def _least_squares(terms: Array, target: Array) -> Array:
    """Coefficients (k,) of the terms (k, n) whose sum is nearest to the target (n,).

    Normal equations with one step of refinement, several times faster than singular values; the
    last digit added to the diagonal keeps terms that are alike from making it singular.
    """
    scale = np.maximum(np.sqrt(np.einsum("ij,ij->i", terms, terms)), 1e-300)
    rows = terms / scale[:, np.newaxis]
    inverse = np.linalg.inv(rows @ rows.T + 1e-13 * np.eye(len(rows)))
    found = inverse @ (rows @ target)
    found += inverse @ (rows @ (target - found @ rows))
    coefficients: Array = found / scale
    return coefficients


def _scaled(point: Point, index: int, factor: float) -> Point:
    """The point with one time constant scaled."""
    times = point.times
    return replace(point, times=(*times[:index], times[index] * factor, *times[index + 1 :]))


def _apart(times: tuple[float, ...]) -> tuple[float, ...]:
    """Two nearly equal lags moved 10 % apart: when equal, their information is singular."""
    if len(times) < 2 or times[1] < 0.9 * times[0]:
        return times
    middle = 0.5 * (times[0] + times[1])
    return (1.05 * middle, 0.95 * middle)


def _student_square(freedom: int) -> float:
    """Square of the 97.5 % point of Student's t, by its expansion in 1/freedom.

    Source: M. Abramowitz and I.A. Stegun, "Handbook of Mathematical Functions", 1964, 26.7.5
    (from memory).
    """
    z = 1.959963984540054
    first = (z**3 + z) / 4
    second = (5 * z**5 + 16 * z**3 + 3 * z) / 96
    return (z + first / freedom + second / freedom**2) ** 2


def _edge(excess: Callable[[float], float], inside: float, width: float, limit: float) -> float:
    """Where `excess` turns positive on the way from `inside` towards `limit`, or the limit."""
    here = inside
    while True:
        outside = here + width
        if abs(width) >= abs(limit - here):
            outside = limit
        if excess(outside) > 0:
            break
        if outside == limit:
            return limit
        inside, width = outside, 1.5 * width
    for _ in range(8):
        middle = 0.5 * (inside + outside)
        inside, outside = (inside, middle) if excess(middle) > 0 else (middle, outside)
    return 0.5 * (inside + outside)
