"""How a plant shape answers to OP exactly as it was held, on whatever stamps the record has.

Nothing here is stepped or interpolated: between two moves every shape has a closed form, so that
a dead time of any length is exact.  What is searched with these answers is next door, in
`likelihood`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.plant import FirstOrder, Integrating, IntegratingLag, SecondOrder, Shape
from workbench.units import Amount

Array = NDArray[np.float64]


class Moves:
    """OP as a train of held levels, from the level before the first row."""

    def __init__(self, time: Array, op: Array) -> None:
        kept = np.append(True, np.diff(op) != 0)
        self.at: Array = time[kept]
        self.level: Array = op[kept] - op[0]
        held = np.diff(self.at) * self.level[:-1]
        self._area: Array = np.append(0.0, np.cumsum(held))
        self._states: dict[float, Array] = {}

    def place(self, when: Array) -> Place:
        """Which level is in force at each moment, and since how long."""
        index = np.maximum(np.searchsorted(self.at, when, side="right") - 1, 0)
        return Place(index, np.maximum(when - self.at[index], 0.0))

    def lag(self, time_constant: float, place: Place) -> Array:
        """Answer of 1/(T s + 1), from rest: between moves it runs exponentially to the level."""
        level = self.level[place.index]
        return level + (self._state(time_constant)[place.index] - level) * np.exp(
            -place.since / time_constant
        )

    def integral(self, place: Place) -> Array:
        """Answer of 1/s, from 0."""
        return self._area[place.index] + self.level[place.index] * place.since

    def _state(self, time_constant: float) -> Array:
        """The lag's state at each move: x_k = a x_(k-1) + (1 - a) level_(k-1)."""
        if time_constant not in self._states:
            if len(self._states) > 64:
                self._states.clear()
            elapsed = np.diff(self.at) / time_constant
            drive = np.append(0.0, -np.expm1(-elapsed) * self.level[:-1])
            self._states[time_constant] = _running(np.exp(-elapsed), drive)
        return self._states[time_constant]


def _running(keep: Array, drive: Array) -> Array:
    """x_k = keep_k x_(k-1) + drive_k: a loop over a bump test's few moves, a solver for many."""
    if len(drive) > 200:
        from scipy.linalg import solve_banded

        band = np.stack([np.ones(len(drive)), np.append(-keep, 0.0)])
        return np.asarray(solve_banded((1, 0), band, drive), dtype=np.float64)
    state = drive.copy()
    for i, share in enumerate(keep.tolist(), start=1):
        state[i] += share * state[i - 1]
    return state


@dataclass(frozen=True)
class Place:
    """Where moments fall among the moves."""

    index: NDArray[np.intp]
    since: Array


@dataclass(frozen=True)
class FittedShape:
    """What the search must know of a shape: one more entry in `FITTED` is one more shape."""

    lags: int
    """How many time constants it has."""
    respond: Callable[[Moves, tuple[float, ...], Place], Array]
    """Answer to OP of the shape with gain (or slope) 1 and without dead time."""
    make: Callable[[float, tuple[float, ...], float], Shape]
    """(gain or slope [per s], time constants [s], dead time [s]) -> the plant."""
    integrates: bool = False
    """Whether its gain is a slope per second, and a straight line in PV is its own."""


def _two_lags(moves: Moves, times: tuple[float, ...], place: Place) -> Array:
    """Partial fractions of 1/((T1 s + 1)(T2 s + 1)).

    Equal time constants have no such fractions; 3 % apart cannot be told from equal in a record.
    """
    first = max(times)
    second = min(*times, 0.97 * first)
    fast, slow = moves.lag(second, place), moves.lag(first, place)
    return (first * slow - second * fast) / (first - second)


def _integrating_lag(moves: Moves, times: tuple[float, ...], place: Place) -> Array:
    """1/(s (T s + 1)) = 1/s - T/(T s + 1)."""
    return moves.integral(place) - times[0] * moves.lag(times[0], place)


def _first_order(gain: float, times: tuple[float, ...], dead_time: float) -> Shape:
    return FirstOrder(gain, Amount(times[0], "s"), Amount(dead_time, "s"))


def _second_order(gain: float, times: tuple[float, ...], dead_time: float) -> Shape:
    larger, smaller = (Amount(t, "s") for t in times)
    return SecondOrder(gain, larger, smaller, Amount(dead_time, "s"))


def _integrating(slope: float, times: tuple[float, ...], dead_time: float) -> Shape:
    return Integrating(Amount(slope, "/s"), Amount(dead_time, "s"))


def _integrating_with_lag(slope: float, times: tuple[float, ...], dead_time: float) -> Shape:
    return IntegratingLag(Amount(slope, "/s"), Amount(times[0], "s"), Amount(dead_time, "s"))


FITTED: Final[dict[str, FittedShape]] = {
    "first-order": FittedShape(
        1, lambda moves, times, place: moves.lag(times[0], place), _first_order
    ),
    "second-order": FittedShape(2, _two_lags, _second_order),
    "integrating": FittedShape(
        0, lambda moves, _, place: moves.integral(place), _integrating, True
    ),
    "integrating-lag": FittedShape(1, _integrating_lag, _integrating_with_lag, True),
}
"""Word used in case files -> what the search must know of the shape."""
