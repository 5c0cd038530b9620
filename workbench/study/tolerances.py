"""How much plant error the settings survive: a map, and the distances from where the loop is now.

The plant's gain is multiplied by one ratio and its dead time, or all its lags, by another; in each
cell of the map the loop as it runs is judged, sampled where it has a scan.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from workbench.case.case import Case
from workbench.errors import problem
from workbench.model.feedback import Loop
from workbench.model.spread import Judged, judge
from workbench.model.variation import Variation
from workbench.study.loop import controller_of, loop_of, no_time_domain, plant_of
from workbench.study.operating import about_rest
from workbench.study.structure import has_one_scan
from workbench.units import Figure

Floats = NDArray[np.float64]
Axis = Literal["dead time", "lag"]

Beyond = Callable[[Floats], NDArray[np.bool_]]
"""Which Ms are beyond a boundary."""

LIMIT: Final = 2.0
"""Ms above which a loop is called fragile (common practice)."""
_WIDEST: Final = (1.5, 2.0, 3.0, 4.0, 5.0, 7.0, 10.0)
"""Ratios at which an axis may end."""
_FURTHEST: Final = 100.0
"""Ratio up to which a boundary is looked for."""
_LOOKS: Final = 49
_CLOSER: Final = 17
_ROUNDS: Final = 3


@dataclass(frozen=True)
class Distance:
    """How far the plant may change in one way."""

    way: str
    """`gain grows`, `gain falls`, `dead time grows`, `both grow alike`, ..."""
    until_limit: Figure
    """Ratio at which Ms reaches its limit; below 1 where the plant's value falls."""
    until_unstable: Figure


@dataclass(frozen=True)
class Tolerance:
    """Where the loop is stable, and how sensitive, over plant gain and dead time or lag."""

    axis: Axis
    gain_ratios: Floats
    """(columns,), rising."""
    other_ratios: Floats
    """(rows,), rising."""
    stable: NDArray[np.bool_]
    """(rows, columns)"""
    max_sensitivity: Floats
    """(rows, columns), infinite where the loop is not stable."""
    limit: float
    """On Ms."""
    here: tuple[int, int]
    """Row and column of the plant as it is, ratios 1."""
    distances: tuple[Distance, ...]
    sampled: bool
    """The loop was judged as sampled."""


def tolerance(
    case: Case,
    *,
    axis: Axis | None = None,
    limit: float = LIMIT,
    columns: int = 61,
    rows: int = 25,
) -> Tolerance:
    """The map of a case, and its distances.

    Parameters
    ----------
    case
        With plant and controller.
    axis
        What stands beside the gain; left out, the dead time where the plant has one.
    limit
        On Ms, above 1.
    columns, rows
        Cells of the map.

    Raises
    ------
    InputError
        Plant or controller is missing, or a dead time is asked for that the plant has not got.
    NotApplicable, CannotSolve
        As `model.spread.judge`.
    """
    controller_of(case)
    loop = about_rest(loop_of(case))
    late = any(loop.plant.delays)
    axis = axis or ("dead time" if late else "lag")
    if axis == "dead time" and not late:
        raise problem(
            "the plant has no dead time to multiply",
            "take the map over its lags",
            key="--tolerance",
        )
    if not has_one_scan(loop) or no_time_domain(loop.plant):
        loop = replace(loop, scan=None)
    tried = _Trial(case, loop, axis)
    distances = tried.distances(limit)
    gains = _axis(columns, distances[0].until_unstable, distances[1].until_unstable)
    others = _axis(rows, distances[2].until_unstable, distances[3].until_unstable)
    judged = tried.judged(others, gains)
    here = (rows // 2, columns // 2)
    return Tolerance(
        *(axis, gains, others, judged.stable, judged.max_sensitivity, limit, here, distances),
        sampled=loop.scan is not None,
    )


def _axis(count: int, up: Figure, down: Figure) -> Floats:
    """Ratios about 1, evenly spaced as logarithms and wide enough to show a boundary near by."""
    far = [up.value or 0.0, 1.0 / down.value if down.value else 0.0]
    seen = min((1.15 * ratio for ratio in far if ratio), default=_WIDEST[3])
    widest = next((end for end in _WIDEST if end >= seen), _WIDEST[-1])
    middle = count // 2
    steps = np.arange(count) - middle
    return np.asarray(widest ** (steps / max(1, middle)), np.float64)


@dataclass(frozen=True)
class _Trial:
    """The loop with other plants in it."""

    case: Case
    loop: Loop
    axis: Axis

    def judged(self, others: Floats, gains: Floats) -> Judged:
        """Every pair of ratios, (others, gains)."""
        nominal = plant_of(self.case)
        plants = [
            loop_of(self.case, self._variation(ratio).of(nominal)).plant
            for ratio in others.tolist()
        ]
        return judge(self.loop, plants, gains.tolist())

    def _variation(self, ratio: float) -> Variation:
        return Variation(dead_time=ratio) if self.axis == "dead time" else Variation(lag=ratio)

    def _on_the_way(self, gain: float, other: float, x: Floats) -> Floats:
        """Ms with the gain times x^gain and the other times x^other, (n,)."""
        if not other:
            row = self.judged(np.ones(1), np.asarray(x**gain, np.float64)).max_sensitivity
            return np.asarray(row[0], np.float64)
        nominal = plant_of(self.case)
        plants = [
            loop_of(self.case, replace(self._variation(ratio**other), gain=ratio**gain).of(nominal))
            for ratio in x.tolist()
        ]
        found = judge(self.loop, [each.plant for each in plants]).max_sensitivity
        return np.asarray(found[:, 0], np.float64)

    def distances(self, limit: float) -> tuple[Distance, ...]:
        """Gain up and down, the other up and down, both together where they pull together."""
        # A longer dead time and a shorter lag both work with a larger gain.
        with_gain = 1 if self.axis == "dead time" else -1
        both = "both grow alike" if with_gain > 0 else "gain grows, lag falls alike"
        ways = (
            ("gain grows", 1, 0),
            ("gain falls", -1, 0),
            (f"{self.axis} grows", 0, 1),
            (f"{self.axis} falls", 0, -1),
            (both, 1, with_gain),
        )
        return tuple(self._distance(way, gain, other, limit) for way, gain, other in ways)

    def _distance(self, way: str, gain: float, other: float, limit: float) -> Distance:
        falls = gain < 0 or (not gain and other < 0)
        coarse = np.geomspace(1.0, _FURTHEST, _LOOKS)
        peaks = self._on_the_way(gain, other, coarse)

        def reached(beyond: Beyond) -> float | None:
            """The ratio at which it first is beyond; none where it never is, or is at once."""
            over = np.flatnonzero(beyond(peaks))
            if not len(over) or not over[0]:
                return None
            low, high = float(coarse[over[0] - 1]), float(coarse[over[0]])
            for _ in range(_ROUNDS):
                near = np.geomspace(low, high, _CLOSER)
                # Its ends are known: inside the boundary, and beyond it.
                inner = beyond(self._on_the_way(gain, other, near[1:-1]))
                first = int(np.argmax(inner)) + 1 if inner.any() else _CLOSER - 1
                low, high = float(near[first - 1]), float(near[first])
            ratio = math.sqrt(low * high)
            return 1.0 / ratio if falls else ratio

        def told(beyond: Beyond, already: str) -> Figure:
            ratio = reached(beyond)
            if ratio is not None:
                return Figure.of(ratio)
            if not beyond(peaks[:1])[0]:
                furthest = f"1/{_FURTHEST:.0f}" if falls else f"{_FURTHEST:.0f}"
                return Figure(None, f"never to {furthest}")
            back = reached(lambda ms: ~beyond(ms))
            return Figure(None, f"{already}, back at x {back:.3g}" if back else already)

        return Distance(
            way,
            told(lambda ms: np.asarray(ms > limit, np.bool_), "over now"),
            told(np.isinf, "unstable now"),
        )
