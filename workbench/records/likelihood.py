"""The likelihood of a record under a plant shape, and the search for its best point.

Output error, maximum likelihood.  PV is taken as

    pv(t) = level + drift t + gain x(t) + (what was still settling at the start) + noise,

where x is the exact answer of the shape, dead time included, to OP held from row to row as it was.
Before the first row of a part OP is taken to have stood at its first value; each part of a record
has a level, a drift and a settling of its own.  Level, drift, gain, numerator time and the settling
part are linear and solved exactly inside; time constants and dead time are searched, the dead time
over its whole range because the cost has many valleys in it.  Noise is white, or correlated: a
first-order autoregression in continuous time, exact on irregular stamps.  How long it remembers is
found by the restricted likelihood, which does not count what the model itself has taken out of the
noise.  How sure the result is, is answered next door, in `certainty`.

Source: common practice in system identification; separable least squares after G.H. Golub and
V. Pereyra, "The differentiation of pseudo-inverses and nonlinear least squares problems whose
variables separate", SIAM J. Numer. Anal. 10(2), 1973, 413-432; steps after D.W. Marquardt, "An
algorithm for least-squares estimation of nonlinear parameters", J. SIAM 11(2), 1963, 431-441;
restricted likelihood after H.D. Patterson and R. Thompson, "Recovery of inter-block information
when block sizes are unequal", Biometrika 58(3), 1971, 545-554 (all from memory).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve
from workbench.records.record import Record
from workbench.records.response import FITTED, Array, FittedShape, Lags, Moves

_SEARCH_ROWS: Final = 800
"""Rows that the first descents look at; OP is followed exactly all the same."""
_GRID_ROWS: Final = 300
"""Rows that the grid before them looks at."""
_CORRELATED_GAIN: Final = 2.0
"""What correlated noise must gain in -2 ln(likelihood) to be taken: the Akaike price of its memory.
A dearer price would leave weak memory out and make intervals too narrow."""

_NEAR: Final = 10.0
"""Of two ways in which PV may begin, the one worse by more than this in BIC is not followed up."""
_LONGEST_MEMORY: Final = 0.2
"""Of noise, as a share of the record: a longer one cannot be told from level and drift."""

# --- rows ----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Part:
    """Rows over which the plant's state is followed without a break."""

    rows: slice
    time: Array
    """Since its first row [s]."""
    moves: Moves
    span: float
    """To its last row [s]."""
    start_s: float = 0.0
    """Its first row, as the record counts time [s]."""
    op_start: float = 0.0
    """OP at its first row."""


@dataclass(frozen=True)
class Rows:
    """What is fitted: all parts of a record, or some of their rows."""

    pv: Array
    parts: tuple[Part, ...]
    steps: Array
    """From each row to the next [s]; infinite between parts."""

    @staticmethod
    def of(record: Record) -> Rows:
        """All rows of a record."""
        parts = []
        for rows in record.parts:
            time = record.time[rows] - record.time[rows.start]
            moves = Moves(time, record.op[rows])
            span, first = max(float(time[-1]), 1e-9), rows.start
            start, op = float(record.time[first]), float(record.op[first])
            parts.append(Part(rows, time, moves, span, start, op))
        return Rows(record.pv, tuple(parts), _steps(parts))

    def some(self, kept: NDArray[np.intp]) -> Rows:
        """The rows at these indices; OP is followed at every row all the same."""
        parts, first = [], 0
        for part in self.parts:
            own = kept[(kept >= part.rows.start) & (kept < part.rows.stop)] - part.rows.start
            if len(own):
                rows = slice(first, first + len(own))
                parts.append(replace(part, rows=rows, time=part.time[own]))
                first += len(own)
        return Rows(self.pv[kept], tuple(parts), _steps(parts))

    def thinned(self, most: int) -> Rows:
        """At most so many rows, evenly taken."""
        total = len(self.pv)
        if total <= most:
            return self
        return self.some(np.unique(np.linspace(0, total - 1, most).astype(np.intp)))

    def respond(self, shape: FittedShape, values: Array, dead_time: float) -> Array:
        """Answers (m, terms, n) of m plants to OP."""
        answers = [
            shape.respond(part.moves, values, part.moves.place(part.time - dead_time))
            for part in self.parts
        ]
        return answers[0] if len(answers) == 1 else np.concatenate(answers, axis=2)

    def flat(self, drift: bool) -> Array:
        """Level and, where wanted, drift of each part (columns, n)."""
        columns = []
        for part in self.parts:
            for shown in (np.ones(len(part.time)), part.time / part.span)[: 1 + drift]:
                column = np.zeros(len(self.pv))
                column[part.rows] = shown
                columns.append(column)
        return np.stack(columns)

    def settling(self, lags: Lags) -> Array:
        """What of each lag may be left of before each part (columns, n)."""
        columns = []
        for part in self.parts:
            for lag in lags:
                # One that grows is counted from the end, so that its size stays within bounds.
                since = part.time if lag.real > 0 else part.time - part.span
                shown = np.exp(-since / lag)
                for share in (shown.real, shown.imag) if np.iscomplexobj(shown) else (shown,):
                    column = np.zeros(len(self.pv))
                    column[part.rows] = share
                    columns.append(column)
        return np.stack(columns)


def _steps(parts: Iterable[Part]) -> Array:
    """Steps between rows, infinite between parts."""
    found: list[Array] = []
    for part in parts:
        found += [np.array([math.inf]), np.diff(part.time)]
    return np.concatenate(found[1:])


# --- the search ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Point:
    """A place in the search: what is not linear in the model."""

    values: tuple[float, ...]
    """As the shape names them."""
    dead_time: float
    noise_time: float | None = None
    settling: bool = False


@dataclass(frozen=True)
class Solution:
    """The best linear part at a point."""

    point: Point
    coefficients: Array
    """Gain, gain times numerator time where there is one, levels and drifts, settling."""
    fitted: Array
    square: float
    """Sum of squares of the whitened residual."""
    deviance: float
    """-2 ln(likelihood), the noise's variance at its best."""
    parameters: int

    def bic(self, rows: int) -> float:
        """Bayesian information criterion, lower is better."""
        return self.deviance + self.parameters * math.log(rows)


class Search:
    """One record's fits; holds what every shape shares."""

    def __init__(
        self,
        rows: Rows,
        interval: float,
        noise_model: str,
        drift: bool,
        should_stop: Callable[[], bool] | None = None,
    ) -> None:
        self.rows, self.interval = rows, interval
        self.count = len(rows.pv)
        self.noise_model, self.drift = noise_model, drift
        self.should_stop = should_stop
        self.span = max(part.span for part in rows.parts)
        # PV must have time to answer the first move within its part.
        after = [p.span - float(p.moves.at[1]) for p in rows.parts if len(p.moves.at) > 1]
        self.longest_dead_time = 0.7 * max(after, default=0.0)
        self.shortest_lag, self.longest_lag = 0.1 * interval, 5.0 * self.span
        self._best: dict[str, Solution] = {}
        self._flat = {drift: rows.flat(drift) for drift in (False, True)}
        # Below this no difference of squares means anything.
        self.floor = 1e-22 * float(np.var(rows.pv)) * self.count + 1e-300

    # -- the model at one point --

    def terms(self, shape: FittedShape, point: Point) -> Array:
        """What PV is a sum of (k, n): the answer to OP, levels, drifts, and what still settles."""
        self.ask()
        values = np.array(point.values, dtype=np.float64)
        answers = self.rows.respond(shape, values[np.newaxis], point.dead_time)[0]
        found = [answers, self._flat[self.drift or shape.integrates]]
        if point.settling:
            found.append(self.rows.settling(shape.lags(values)))
        return np.concatenate(found)

    def ask(self) -> None:
        """Raise `CannotSolve` where the fit is no longer wanted."""
        if self.should_stop is not None and self.should_stop():
            raise CannotSolve("the fit was stopped", change="run it again for an answer")

    def solve(self, shape: FittedShape, point: Point) -> Solution:
        """The linear part, solved exactly, and the deviance there."""
        return self._solution(self.terms(shape, point), point, 1 + len(point.values))

    def _solution(self, terms: Array, point: Point, searched: int) -> Solution:
        white, correction = whiten(terms, self.rows.steps, point.noise_time)
        target, _ = whiten(self.rows.pv, self.rows.steps, point.noise_time)
        coefficients = least_squares(white, target)
        residual = target - coefficients @ white
        square = max(float(residual @ residual), self.floor)
        deviance = self._deviance(square) + correction
        count = searched + len(terms) + (point.noise_time is not None)
        return Solution(point, coefficients, coefficients @ terms, square, deviance, count)

    def _deviance(self, square: float) -> float:
        return self.count * (math.log(2 * math.pi * square / self.count) + 1.0)

    def slopes(
        self, shape: FittedShape, point: Point, coefficients: Array, terms: Array, share: float
    ) -> Array:
        """Change of the fitted PV (values + 1, n) with the logarithm of each value and with the
        dead time, the linear part held; differences over `share`, about the point itself where
        `terms` are empty, else from it onwards.
        """
        found = []
        for index in range(len(point.values) + 1):
            up, width = self._stepped(shape, point, index, share)
            if len(terms):
                ahead, behind = self.terms(shape, up), terms
            else:
                down, back = self._stepped(shape, point, index, -share)
                ahead, behind, width = self.terms(shape, up), self.terms(shape, down), width - back
            found.append(coefficients @ (ahead - behind) / width)
        return np.stack(found)

    def _stepped(
        self, shape: FittedShape, point: Point, index: int, share: float
    ) -> tuple[Point, float]:
        """The point a little on, in one coordinate, and how far that is."""
        if index < len(point.values):
            values = list(point.values)
            values[index] *= math.exp(share)
            return replace(point, values=tuple(values)), share
        step = share * self._unit(shape, point)
        return replace(point, dead_time=point.dead_time + step), step

    def _unit(self, shape: FittedShape, point: Point) -> float:
        """A change of the dead time that matters."""
        return max(self.interval, 0.2 * self._slowest(shape, point))

    @staticmethod
    def _slowest(shape: FittedShape, point: Point) -> float:
        times = (v for v, name in zip(point.values, shape.names, strict=True) if name != "damping")
        return max(times, default=0.0)

    def bounds(self, shape: FittedShape) -> tuple[Array, Array]:
        """Least and greatest logarithm of each value."""
        low, high = [], []
        for name in shape.names:
            if name == "damping":
                least, most = 0.02, 0.98
            elif name == "natural_period_s":
                # Slower than two rows, and no more than a swing or two of which half is seen.
                least, most = 3.0 * self.interval, 4.0 * self.span
            elif shape.grows:
                least, most = max(self.interval, self.span / 15.0), self.longest_lag
            else:
                least, most = self.shortest_lag, self.longest_lag
            low.append(math.log(least))
            high.append(math.log(max(most, least)))
        return np.array(low), np.array(high)

    def descend(
        self,
        shape: FittedShape,
        start: Point,
        *,
        held: int | None = None,
        most: int = 30,
        enough: float = 1e-5,
    ) -> Solution:
        """Downhill by damped Gauss-Newton steps in the logarithms of the values and the dead time.

        `held` is the coordinate that stays where it is, `len(values)` being the dead time.  Beside
        a lag that is held the larger one stays the larger.
        """
        low, high = self.bounds(shape)
        if held is not None and shape.two_lags and held < 2:
            (high if held == 0 else low)[1 - held] = math.log(start.values[held])
            values = np.clip(np.log(start.values), low, high)
            values[held] = math.log(start.values[held])
            start = replace(start, values=tuple(np.exp(values).tolist()))
        low, high = np.append(low, 0.0), np.append(high, self.longest_dead_time)
        free = np.array([i for i in range(len(low)) if i != held], dtype=np.intp)
        terms = self.terms(shape, start)
        here = self._solution(terms, start, len(low))
        damping = 1e-3
        for _ in range(most):
            step, normal, slope = self._gauss_newton(shape, here, terms)
            place = np.array([*np.log(here.point.values), here.point.dead_time])
            moved = None
            while damping < 1e8:
                change = _damped(normal, slope, step, free, damping, place, low, high)
                if not np.abs(change / step).max(initial=0.0) > 1e-9:
                    break
                trial = np.clip(place + change, low, high)
                point = replace(
                    here.point,
                    values=tuple(np.exp(trial[:-1]).tolist()),
                    dead_time=float(trial[-1]),
                )
                found = self.terms(shape, point)
                there = self._solution(found, point, len(low))
                if there.square < here.square:
                    moved = there
                    break
                damping *= 10.0
            if moved is None:
                break
            gained = here.deviance - moved.deviance
            here, terms, damping = moved, found, max(damping * 0.1, 1e-9)
            if gained < enough:
                break
        return here

    def _gauss_newton(
        self, shape: FittedShape, here: Solution, terms: Array
    ) -> tuple[Array, Array, Array]:
        """Units of the coordinates, and the normal equations in them, the linear part projected
        out.
        """
        unit = np.ones(len(here.point.values) + 1)
        unit[-1] = self._unit(shape, here.point)
        slopes = self.slopes(shape, here.point, here.coefficients, terms, 1e-6)
        both = np.concatenate([terms, slopes * unit[:, np.newaxis]])
        white, _ = whiten(both, self.rows.steps, here.point.noise_time)
        target, _ = whiten(self.rows.pv - here.fitted, self.rows.steps, here.point.noise_time)
        k = len(terms)
        products = white @ white.T
        inner = products[:k, :k] + np.diag(1e-13 * np.diag(products[:k, :k]) + 1e-300)
        across = np.linalg.solve(inner, products[:k, k:])
        normal = products[k:, k:] - products[k:, :k] @ across
        against = white @ target
        slope = against[k:] - across.T @ against[:k]
        return unit, normal, slope

    # -- noise that remembers --

    def memory(
        self, jacobian: Array, residual: Array, *, restricted: bool, near: float | None = None
    ) -> tuple[float, float]:
        """The likeliest time over which the noise forgets itself [s], and the deviance there.

        The model is taken as linear in all its parameters, with the columns `jacobian` (p, n).
        Restricted, the likelihood of what is left free of the model; else the plain one.  Looked
        for about `near` first, where that is given.
        """
        from scipy.optimize import minimize_scalar

        freedom = self.count - len(jacobian)

        def deviance(log_time: float) -> float:
            self.ask()
            square, correction, spread = self.whitened(jacobian, residual, math.exp(log_time))
            if not restricted:
                return self._deviance(square) + correction
            return freedom * math.log(square) + correction + spread

        least, most = math.log(0.1 * self.interval), math.log(_LONGEST_MEMORY * self.span)
        low, high = least, most
        if near is not None:
            low, high = max(least, math.log(near) - 0.7), min(most, math.log(near) + 0.7)
        while True:
            found = minimize_scalar(
                deviance, bounds=(low, high), method="bounded", options={"xatol": 5e-3}
            )
            inside = low + 0.02 < found.x < high - 0.02
            if inside or (low, high) == (least, most):
                return math.exp(float(found.x)), float(found.fun)
            low, high = least, most

    def whitened(
        self, jacobian: Array, residual: Array, noise_time: float
    ) -> tuple[float, float, float]:
        """Sum of squares left, sum ln(1 - rho^2), and ln det of the information."""
        white, correction = whiten(jacobian, self.rows.steps, noise_time)
        target, _ = whiten(residual, self.rows.steps, noise_time)
        scale = np.sqrt(np.einsum("ij,ij->i", white, white)) + 1e-300
        white = white / scale[:, np.newaxis]
        products = white @ white.T + 1e-12 * np.eye(len(white))
        against = white @ target
        square = float(target @ target - against @ np.linalg.solve(products, against))
        spread = float(np.linalg.slogdet(products)[1] + 2.0 * np.log(scale).sum())
        return max(square, self.floor), correction, spread

    def jacobian(self, shape: FittedShape, here: Solution) -> Array:
        """Every parameter's column (p, n): the terms, then values (logarithms) and dead time."""
        apart = replace(here.point, values=_apart(shape, here.point.values))
        return np.concatenate(
            [
                self.terms(shape, apart),
                self.slopes(shape, apart, here.coefficients, np.empty(0), 1e-5),
            ]
        )

    # -- from coarse to fine --

    def best(self, name: str) -> Solution:
        """The most likely point of a shape over starts and noise models."""
        if name not in self._best:
            self._best[name] = self._sought(FITTED[name])
        return self._best[name]

    def _sought(self, shape: FittedShape) -> Solution:
        thin = self._thin()
        starts = thin.coarse(shape, None)
        if shape.simpler:
            simple = self.best(shape.simpler).point
            values, dead_time = shape.begun(simple.values, simple.dead_time)
            bounds = (np.exp(bound) for bound in self.bounds(shape))
            values = tuple(np.clip(values, *bounds).tolist())
            starts.append(Point(values, dead_time, None, simple.settling))
        rough = thin.refine(shape, starts)
        white = [self.descend(shape, solution.point) for solution in rough]
        best = min(white, key=self.bic)
        if self.noise_model != "white":
            best = self._correlated(shape, thin, white) or best
        values = best.point.values
        if not shape.two_lags or values[0] >= values[1]:
            return best
        turned = self.solve(shape, replace(best.point, values=values[::-1]))
        return replace(turned, deviance=best.deviance)

    def bic(self, solution: Solution) -> float:
        """Of a solution to these rows."""
        return solution.bic(self.count)

    def _thin(self) -> Search:
        rows = self.rows.thinned(_SEARCH_ROWS)
        if rows is self.rows:
            return self
        return Search(rows, self.interval, self.noise_model, self.drift, self.should_stop)

    def _correlated(
        self, shape: FittedShape, thin: Search, white: list[Solution]
    ) -> Solution | None:
        """The best with noise that remembers, from the white ones and from a grid of its own.

        `None` where the choice is free and white noise does as well.
        """
        first = min(white, key=self.bic)
        free = self.noise_model == "auto"
        exact = first.square < 1e-16 * float(np.var(self.rows.pv)) * self.count
        left = self.rows.pv - first.fitted
        memory, deviance = self.memory(self.jacobian(shape, first), left, restricted=False)
        gained = first.deviance - deviance > _CORRELATED_GAIN and memory > 0.25 * self.interval
        if free and (exact or not gained):
            return None
        starts = [replace(s.point, noise_time=memory) for s in white]
        # Where the noise is nearly white its grid is the same.
        rough = thin.refine(shape, starts + (thin.coarse(shape, memory) if gained else []))
        least = min(thin.bic(s) for s in rough)
        found = [self._remembering(shape, s.point) for s in rough if thin.bic(s) < least + _NEAR]
        return min(found, key=self.bic)

    def _remembering(self, shape: FittedShape, start: Point) -> Solution:
        """Plant and memory of the noise together, by turns."""
        here = self.descend(shape, start)
        for _ in range(5):
            before = here.point.noise_time or self.interval
            jacobian, left = self.jacobian(shape, here), self.rows.pv - here.fitted
            memory, _ = self.memory(jacobian, left, restricted=True, near=before)
            if abs(math.log(memory / before)) < 0.03:
                break
            here = self.descend(shape, replace(here.point, noise_time=memory), enough=1e-3)
        # The plain likelihood is what shapes are compared by.
        jacobian, left = self.jacobian(shape, here), self.rows.pv - here.fitted
        _, deviance = self.memory(jacobian, left, restricted=False, near=here.point.noise_time)
        return replace(here, deviance=min(deviance, here.deviance))

    def refine(self, shape: FittedShape, starts: list[Point]) -> list[Solution]:
        """The best of the descents with PV at rest at the start, and with PV still settling."""
        found = [self.descend(shape, start, most=15, enough=1e-2) for start in starts]
        kinds = sorted({s.point.settling for s in found})
        best = [
            min((s for s in found if s.point.settling == kind), key=lambda s: s.deviance)
            for kind in kinds
        ]
        least = min(self.bic(s) for s in best)
        return [self._past_corners(shape, s) for s in best if self.bic(s) < least + _NEAR]

    def _past_corners(self, shape: FittedShape, here: Solution) -> Solution:
        """Down to the bottom, past the corners that rows make in the dead time."""
        late = len(here.point.values)
        for _ in range(3):
            tried = [
                self.descend(shape, replace(here.point, dead_time=place), held=late, most=1)
                for place in here.point.dead_time + self.interval * np.array([-1.0, -0.5, 0.5, 1.0])
                if 0.0 <= place <= self.longest_dead_time
            ]
            if not tried:
                break
            other = self.descend(shape, min(tried, key=lambda s: s.deviance).point)
            if other.deviance > here.deviance - 1e-2:
                break
            here = other
        return here

    def coarse(self, shape: FittedShape, noise_time: float | None) -> list[Point]:
        """Starts from a grid over the whole range of dead times and values."""
        rows = self.rows.thinned(_GRID_ROWS)
        members = self._members(shape)
        flat = rows.flat(self.drift or shape.integrates)
        still = (
            np.stack([rows.settling(shape.lags(m)[:1]).sum(axis=0) for m in members])
            if shape.names and not _is_complex(shape)
            else None
        )
        grid = _Grid(rows, flat, noise_time, still)
        dead_times = self._dead_times()
        kinds = [False] if still is None else [True] if shape.grows else [False, True]
        costs = np.empty((len(kinds), len(dead_times), len(members)))
        for i, dead_time in enumerate(dead_times):
            self.ask()
            answers = rows.respond(shape, members, float(dead_time))
            for kind, settling in enumerate(kinds):
                costs[kind, i] = grid.costs(answers, settling)
        starts = []
        for kind, settling in enumerate(kinds):
            for i in _valleys(costs[kind].min(axis=1))[:3]:
                values = members[int(np.argmin(costs[kind, i]))]
                starts.append(
                    Point(tuple(values.tolist()), float(dead_times[i]), noise_time, settling)
                )
        if still is None and shape.names:
            starts += [replace(start, settling=True) for start in starts]
        return starts

    def _members(self, shape: FittedShape) -> Array:
        """Values to try (m, values)."""
        low, high = self.bounds(shape)
        if not shape.names:
            return np.empty((1, 0))
        first = np.exp(np.linspace(max(low[0], math.log(0.4 * self.interval)), high[0], 11))
        if len(shape.names) == 1:
            return first[:, np.newaxis]
        if "damping" in shape.names:
            return np.array([(t, d) for t in first for d in (0.15, 0.4, 0.8)])
        return np.array([(t, t * share) for t in first for share in (0.9, 0.4, 0.1)])

    def _dead_times(self) -> Array:
        """Half an interval apart at first, then 4 % of the dead time."""
        grid = [0.0]
        while grid[-1] < self.longest_dead_time:
            grid.append(grid[-1] + max(0.5 * self.interval, 0.04 * grid[-1], self.span / 300))
        return np.array(grid)

    def null_bic(self) -> float:
        """BIC of the model in which OP does nothing: level, drift and noise."""
        flat = self.rows.flat(True)
        options = [self._solution(flat, Point((), 0.0), 0)]
        if self.noise_model != "white":
            left = self.rows.pv - options[0].fitted
            memory, _ = self.memory(flat, left, restricted=False)
            options.append(self._solution(flat, Point((), 0.0, memory), 0))
        return min(option.bic(self.count) for option in options)


def _is_complex(shape: FittedShape) -> bool:
    return "damping" in shape.names


def _damped(
    normal: Array,
    slope: Array,
    unit: Array,
    free: NDArray[np.intp],
    damping: float,
    place: Array,
    low: Array,
    high: Array,
) -> Array:
    """A step of the coordinates that are free and not pressed against a limit."""
    change = np.zeros(len(slope))
    while len(free):
        part = normal[np.ix_(free, free)]
        weight = np.diag(part) + 1e-12 * float(np.trace(normal)) + 1e-300
        step = np.linalg.solve(part + damping * np.diag(weight), slope[free])
        step = np.clip(step, -1.0, 1.0) * unit[free]
        pressed = ((place[free] <= low[free]) & (step < 0)) | (
            (place[free] >= high[free]) & (step > 0)
        )
        if not pressed.any():
            change[free] = step
            break
        free = free[~pressed]
    return change


# --- the coarse grid -----------------------------------------------------------------------------


class _Grid:
    """Costs of many plants at once, level and drift projected out."""

    def __init__(
        self, rows: Rows, flat: Array, noise_time: float | None, settling: Array | None
    ) -> None:
        self._steps, self._noise_time = rows.steps, noise_time
        self._basis = np.linalg.qr(self._white(flat).T)[0]
        self._target = self._project(self._white(rows.pv[np.newaxis]))[0]
        self._total = float(self._target @ self._target)
        self._settling = None if settling is None else self._project(self._white(settling))

    def _white(self, rows: Array) -> Array:
        return whiten(rows, self._steps, self._noise_time)[0]

    def _project(self, rows: Array) -> Array:
        projected: Array = rows - (rows @ self._basis) @ self._basis.T
        return projected

    def costs(self, answers: Array, settling: bool) -> Array:
        """Sums of squares (m,) with the answers (m, terms, n), PV at rest or settling."""
        shown = self._project(self._white(answers))
        if settling and self._settling is not None:
            shown = np.concatenate([shown, self._settling[:, np.newaxis]], axis=1)
        products = shown @ shown.transpose(0, 2, 1)
        against = shown @ self._target
        size = np.trace(products, axis1=1, axis2=2)[:, np.newaxis, np.newaxis]
        eye = np.eye(shown.shape[1])
        weights = np.linalg.solve(
            products + (1e-10 * size + 1e-300) * eye, against[..., np.newaxis]
        )
        found: Array = self._total - np.einsum("mk,mk->m", against, weights[..., 0])
        return found


def _valleys(profile: Array) -> list[int]:
    """Indices of local minima, deepest first; those far above the deepest are left aside."""
    walled = np.concatenate([[math.inf], profile, [math.inf]])
    low = np.flatnonzero((profile <= walled[:-2]) & (profile <= walled[2:]))
    ordered = low[np.argsort(profile[low], kind="stable")]
    return [int(i) for i in ordered if profile[i] <= 1.3 * profile[ordered[0]] + 1e-300]


# --- small mathematics ---------------------------------------------------------------------------


def whiten(values: Array, steps: Array, noise_time: float | None) -> tuple[Array, float]:
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
    np.multiply(values[..., :-1], -rho, out=white[..., 1:])
    white[..., 1:] += values[..., 1:]
    white[..., 1:] *= 1.0 / np.sqrt(left)
    return white, float(np.log(left).sum())


def least_squares(terms: Array, target: Array) -> Array:
    """Coefficients (k,) of the terms (k, n) whose sum is nearest to the target (n,).

    Normal equations with one step of refinement, several times faster than singular values; the
    last digit added to the diagonal keeps terms that are alike from making it singular.
    """
    products = terms @ terms.T
    scale = np.sqrt(np.diag(products))
    # A move so late that the plant does not answer any more leaves a term of zeros.
    scale[scale < 1e-150] = 1.0
    inverse = np.linalg.inv(products / np.outer(scale, scale) + 1e-13 * np.eye(len(terms)))
    inverse /= np.outer(scale, scale)
    found: Array = inverse @ (terms @ target)
    found += inverse @ (terms @ (target - found @ terms))
    return found


def _apart(shape: FittedShape, values: tuple[float, ...]) -> tuple[float, ...]:
    """Two nearly equal lags moved 10 % apart: when equal, their information is singular."""
    if not shape.two_lags:
        return values
    small, large = sorted(values)
    if small < 0.9 * large:
        return values
    middle = 0.5 * (small + large)
    return (1.05 * middle, 0.95 * middle)
