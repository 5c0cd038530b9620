"""What a fit leaves over: is it noise, does it predict what it did not see, is the gain one gain.

Each question is asked of a solution of the search next door, `likelihood`, with the plant's times
as they were found.  What to tell the engineer about the answers is in `advice`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.records.likelihood import (
    Part,
    Point,
    Search,
    Solution,
    least_squares,
    whiten,
)
from workbench.records.response import Array, FittedShape, Moves

_MOST_MOVES: Final = 12
"""Moves of OP above which a gain for each says nothing."""


@dataclass(frozen=True)
class Test:
    """A test of a hypothesis by chi-square."""

    statistic: float
    degrees: int
    p_value: float
    """How often so large a statistic comes by chance where the hypothesis is true."""


@dataclass(frozen=True)
class MoveGain:
    """The gain seen in one move of OP."""

    at_s: float
    """When OP moved [s]."""
    op_from: float
    op_to: float
    gain: float
    """PV units per OP unit, or that per second; the times are those of the whole fit."""
    standard_error: float


@dataclass(frozen=True)
class Judgement:
    """What was asked of one candidate."""

    whiteness: Test
    """The residual, noise model taken out, is white: Ljung-Box."""
    input_residual: Test
    """OP, delayed, explains nothing of the residual: score test."""
    holdout_percent: float | None
    """Agreement over a bump that was left out of the fit; `None` where there is one bump only."""
    moves: tuple[MoveGain, ...]
    """Where OP moved a few times."""
    gain_up: tuple[float, float] | None
    """Gain of the moves up, and its standard error."""
    gain_down: tuple[float, float] | None
    slow_share: float
    """Share of the gain that a mode six times slower would add, where it is seen; else 0."""
    upset: tuple[float, float] | None
    """When something other than OP seems to have moved PV [s], and by how much at most; where it
    is seen."""


def judge(search: Search, shape: FittedShape, here: Solution) -> Judgement:
    """Ask all of one solution."""
    view = _View(search, shape, here)
    moves = _moves_of(search)
    each = _gains(view, moves, list(range(len(moves))))
    up = [int(size < 0) for _, _, _, size in moves]
    both = _gains(view, moves, up) if 0 < sum(up) < len(up) else []
    return Judgement(
        whiteness=_ljung_box(view),
        input_residual=_score(view),
        holdout_percent=holdout(search, shape, here),
        moves=tuple(
            MoveGain(part.start_s + at, level - size, level, *found)
            for (part, at, level, size), found in zip(moves, each, strict=False)
        ),
        gain_up=both[0] if both else None,
        gain_down=both[1] if both else None,
        slow_share=_slow_share(view),
        upset=_upset(view),
    )


class _View:
    """One solution, whitened once."""

    def __init__(self, search: Search, shape: FittedShape, here: Solution) -> None:
        self.search, self.shape, self.here = search, shape, here
        self.jacobian = search.jacobian(shape, here)
        self.residual = self.white(search.rows.pv - here.fitted)
        self.basis = np.linalg.qr(self.white(self.jacobian).T)[0]
        freedom = max(search.count - len(self.jacobian), 1)
        self.sd = math.sqrt(here.square / freedom)

    def white(self, values: Array) -> Array:
        """Under the noise that was found."""
        return whiten(values, self.search.rows.steps, self.here.point.noise_time)[0]

    def beside(self, columns: Array) -> Array:
        """Columns (k, n), whitened, with all that the model can do taken out."""
        white = self.white(columns)
        left: Array = white - (white @ self.basis) @ self.basis.T
        return left

    def answer(self, moves: list[Moves], values: tuple[float, ...], late: float) -> Array:
        """The plant's answer (n,) to other moves, one train for each part, gain 1."""
        lead = self.here.coefficients[1] / self.here.coefficients[0] if self.shape.terms == 2 else 0
        found = []
        for part, train in zip(self.search.rows.parts, moves, strict=True):
            place = train.place(part.time - late)
            shown = self.shape.respond(train, np.array([values]), place)[0]
            found.append(shown[0] + lead * shown[-1] if self.shape.terms == 2 else shown[0])
        return np.concatenate(found)


# --- tests of the residual -----------------------------------------------------------------------


def _ljung_box(view: _View) -> Test:
    """Whether the whitened residual is white.

    Q = n (n + 2) sum r_k^2/(n - k) over k = 1..m, chi-square with m degrees of freedom, one less
    for noise whose memory was fitted.

    Source: G.M. Ljung and G.E.P. Box, "On a measure of lack of fit in time series models",
    Biometrika 65(2), 1978, 297-303 (from memory).
    """
    left = view.residual - view.residual.mean()
    n = len(left)
    lags = min(20, n // 5)
    power = float(left @ left) + 1e-300
    total = sum((float(left[k:] @ left[:-k]) / power) ** 2 / (n - k) for k in range(1, lags + 1))
    degrees = max(lags - (view.here.point.noise_time is not None), 1)
    statistic = n * (n + 2) * total
    return Test(statistic, degrees, chi_square_beyond(statistic, degrees))


def _score(view: _View) -> Test:
    """Whether OP, delayed by several times, explains any of the residual.

    e' Z (Z' Z)^-1 Z' e / s^2, chi-square with the rank of Z, whose columns are the delayed OP with
    all that the model can do taken out.

    Source: C.R. Rao, "Large sample tests of statistical hypotheses concerning several parameters
    with applications to problems of estimation", Proc. Cambridge Phil. Soc. 44, 1948, 50-57 (from
    memory).
    """
    search, point = view.search, view.here.point
    longest = point.dead_time + 4.0 * max(
        (v for v, n in zip(point.values, view.shape.names, strict=True) if n != "damping"),
        default=4.0 * search.interval,
    )
    delays = np.linspace(0.0, min(longest, search.longest_dead_time), 8)
    columns = [
        np.concatenate([p.moves.place(p.time - delay).level for p in search.rows.parts])
        for delay in delays
    ]
    left = view.beside(np.stack(columns))
    size, turned = np.linalg.eigh(left @ left.T)
    kept = size > 1e-8 * max(float(size[-1]), 1e-300)
    if not kept.any() or not size[-1] > 0:
        return Test(0.0, 1, 1.0)
    along = (turned.T @ (left @ view.residual))[kept]
    statistic = float((along**2 / size[kept]).sum()) / view.sd**2
    degrees = int(kept.sum())
    return Test(statistic, degrees, chi_square_beyond(statistic, degrees))


def chi_square_beyond(statistic: float, degrees: int) -> float:
    """How often chi-square exceeds the statistic.

    Source
    ------
    E.B. Wilson and M.M. Hilferty, "The distribution of chi-square", Proc. Nat. Acad. Sci. 17, 1931,
    684-688 (from memory).

    Examples
    --------
    >>> round(chi_square_beyond(18.307, 10), 3)
    0.05
    """
    spread = 2.0 / (9.0 * degrees)
    z = ((max(statistic, 0.0) / degrees) ** (1 / 3) - (1.0 - spread)) / math.sqrt(spread)
    return 0.5 * math.erfc(z / math.sqrt(2.0))


# --- what the model has not got ------------------------------------------------------------------


def _seen(view: _View, column: Array) -> tuple[float, float]:
    """Size of a further term beside the model, and that over its standard error."""
    left = view.beside(column[np.newaxis])[0]
    power = float(left @ left)
    if power <= 1e-8 * float(column @ column):
        return 0.0, 0.0
    size = float(left @ view.residual) / power
    return size, size * math.sqrt(power) / view.sd


def _slow_share(view: _View) -> float:
    """How much a further mode, six times slower, adds to the gain, where it is seen."""
    shape, point = view.shape, view.here.point
    if shape.integrates or shape.grows or "time_constants_s" not in shape.names:
        return 0.0
    slow = 6.0 * max(point.values)
    column = np.concatenate(
        [
            p.moves.lag(np.array([slow]), p.moves.place(p.time - point.dead_time))[0]
            for p in view.search.rows.parts
        ]
    )
    size, over = _seen(view, column)
    share = size / float(view.here.coefficients[0])
    return share if abs(over) > 4.0 else 0.0


def _upset(view: _View) -> tuple[float, float] | None:
    """When a lasting upset at the plant's input would best explain what is left over.

    Of 40 moments tried the largest must pass 5 standard errors, and move PV by a fifth of what OP
    did.
    """
    search, point = view.search, view.here.point
    answer = (
        view.here.coefficients[: view.shape.terms]
        @ search.terms(view.shape, point)[: view.shape.terms]
    )
    best, found = 5.0, None
    for number, part in enumerate(search.rows.parts):
        for at in np.linspace(0.03, 0.94, 40) * part.span:
            trains = [
                Moves(np.array([0.0, at]), np.array([0.0, float(i == number)]))
                for i in range(len(search.rows.parts))
            ]
            column = view.answer(trains, point.values, 0.0)
            size, over = _seen(view, column)
            moved = size * float(np.abs(column).max())
            if abs(over) > best and abs(moved) > 0.2 * float(np.ptp(answer)):
                best, found = abs(over), (part.start_s + float(at), moved)
    return found


# --- one gain, or several ------------------------------------------------------------------------


def _moves_of(search: Search) -> list[tuple[Part, float, float, float]]:
    """Part, moment [s] in it, level after and size of each move, where they are few."""
    found = []
    for part in search.rows.parts:
        sizes = np.diff(part.moves.level)
        for at, level, size in zip(part.moves.at[1:], part.moves.level[1:], sizes, strict=True):
            found.append((part, float(at), part.op_start + float(level), float(size)))
    return found if 2 <= len(found) <= _MOST_MOVES else []


def _gains(
    view: _View, moves: list[tuple[Part, float, float, float]], group: list[int]
) -> list[tuple[float, float]]:
    """Gain and standard error of each group of moves, the plant's times held."""
    if not moves:
        return []
    search, point, shape = view.search, view.here.point, view.shape
    columns = np.zeros((max(group) + 1, search.count))
    for (own, at, _, size), which in zip(moves, group, strict=True):
        trains = [
            Moves(np.array([0.0, at]), np.array([0.0, size * (p is own)]))
            for p in search.rows.parts
        ]
        columns[which] += view.answer(trains, point.values, point.dead_time)
    terms = np.concatenate([columns, search.terms(shape, point)[shape.terms :]])
    white, target = view.white(terms), view.white(search.rows.pv)
    found = least_squares(white, target)
    scale = np.sqrt(np.einsum("ij,ij->i", white, white)) + 1e-300
    products = (white / scale[:, np.newaxis]) @ (white / scale[:, np.newaxis]).T
    if np.linalg.cond(products) > 1e10:
        return []
    left = target - found @ white
    variance = float(left @ left) / max(search.count - len(terms) - len(point.values) - 1, 1)
    errors = np.sqrt(variance * np.diag(np.linalg.inv(products))) / scale
    return [(float(found[i]), float(errors[i])) for i in range(len(columns))]


# --- a bump it did not see -----------------------------------------------------------------------


def holdout(search: Search, shape: FittedShape, here: Solution) -> float | None:
    """Agreement [%] over the last bump, predicted by a fit to the rows before it.

    The last part of a record of several parts; else what follows the last move, or the last third
    where OP moves at many rows.  The level is free over the rows predicted; agreement is in terms
    of how PV moved in the whole record, for the last level may be one at which it rests.
    """
    kept = _before_last(search)
    if kept is None:
        return None
    rows = search.rows.some(kept)
    other = Search(rows, search.interval, search.noise_model, search.drift, search.should_stop)
    if other.longest_dead_time <= 0.0:
        return None
    late = min(here.point.dead_time, other.longest_dead_time)
    low, high = (np.exp(bound) for bound in other.bounds(shape))
    values = tuple(np.clip(here.point.values, low, high).tolist())
    start = Point(values, late, here.point.noise_time, here.point.settling)
    known = other.descend(shape, start, most=12, enough=1e-2)
    terms = search.terms(shape, known.point)
    unseen = np.setdiff1d(np.arange(search.count), kept)
    coefficients = np.zeros(len(terms))
    coefficients[: len(known.coefficients)] = known.coefficients
    if len(rows.parts) < len(search.rows.parts):
        coefficients[shape.terms :] = 0.0
    left = search.rows.pv[unseen] - coefficients @ terms[:, unseen]
    spread = float(np.std(search.rows.pv))
    return 100.0 * (1.0 - float(np.std(left)) / spread)


def _before_last(search: Search) -> NDArray[np.intp] | None:
    """Rows before the last bump, where what comes before tells a plant."""
    parts = search.rows.parts
    rows = np.arange(search.count)
    if len(parts) > 1:
        return rows[: parts[-1].rows.start] if len(parts[-1].moves.at) > 1 else None
    part = parts[0]
    at = part.moves.at[1:]
    if len(at) < 2:
        return None
    often = len(at) > len(part.time) // 10
    end = part.time[2 * len(part.time) // 3] if often else at[-1]
    kept = rows[part.time < end]
    return kept if len(kept) >= 20 and len(kept) <= search.count - 10 else None
