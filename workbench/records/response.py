"""How a plant shape answers to OP exactly as it was held, on whatever stamps the record has.

Nothing here is stepped or interpolated: between two moves every shape has a closed form, so that
a dead time of any length is exact.  What is searched with these answers is next door, in
`likelihood`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.plant import (
    FirstOrder,
    Integrating,
    IntegratingLag,
    Lead,
    Oscillating,
    SecondOrder,
    Shape,
    Unstable,
)
from workbench.units import Amount

Array = NDArray[np.float64]
Lags = NDArray[Any]
"""Time constants (m,) [s]: real, complex for a mode that swings, negative for one that grows."""


class Moves:
    """OP as a train of held levels, from the level before the first row."""

    def __init__(self, time: Array, op: Array) -> None:
        kept = np.append(True, np.diff(op) != 0)
        self.at: Array = time[kept]
        self.level: Array = op[kept] - op[0]
        held = np.diff(self.at) * self.level[:-1]
        self._area: Array = np.append(0.0, np.cumsum(held))
        self._states: dict[bytes, Lags] = {}

    def place(self, when: Array) -> Place:
        """Which level is in force at each moment, and since how long."""
        index = np.maximum(np.searchsorted(self.at, when, side="right") - 1, 0)
        return Place(index, np.maximum(when - self.at[index], 0.0), self.level[index])

    def lag(self, time_constants: Lags, place: Place) -> Lags:
        """Answers (m, n) of 1/(T s + 1), from rest: between moves exponential to the level."""
        states = self._state(time_constants)[:, place.index]
        away = np.exp(place.since * (-1.0 / time_constants)[:, np.newaxis])
        found: Lags = place.level + (states - place.level) * away
        return found

    def integral(self, place: Place) -> Array:
        """Answer (n,) of 1/s, from 0."""
        return self._area[place.index] + place.level * place.since

    def _state(self, time_constants: Lags) -> Lags:
        """Each lag's state at each move: x_k = a x_(k-1) + (1 - a) level_(k-1)."""
        key = time_constants.tobytes()
        if key not in self._states:
            if len(self._states) > 64:
                self._states.clear()
            elapsed = np.diff(self.at) * (-1.0 / time_constants)[:, np.newaxis]
            self._states[key] = _running(np.exp(elapsed), -np.expm1(elapsed) * self.level[:-1])
        return self._states[key]


def _running(keep: Lags, drive: Lags) -> Lags:
    """x_k = keep_k x_(k-1) + drive_k (m, n + 1) from 0: a loop over few moves, else a solver."""
    states = np.zeros((len(keep), keep.shape[1] + 1), dtype=keep.dtype)
    if keep.shape[1] <= 200:
        for i in range(keep.shape[1]):
            states[:, i + 1] = keep[:, i] * states[:, i] + drive[:, i]
        return states
    from scipy.linalg.lapack import dtbtrs, ztbtrs

    solve = ztbtrs if np.iscomplexobj(keep) else dtbtrs
    band = np.ones((2, keep.shape[1]), dtype=keep.dtype)
    for row, (kept, driven) in enumerate(zip(keep, drive, strict=True)):
        band[1, :-1] = -kept[1:]
        states[row, 1:] = solve(band, driven[:, np.newaxis], uplo="L", diag="U")[0][:, 0]
    return states


@dataclass(frozen=True)
class Place:
    """Where moments fall among the moves."""

    index: NDArray[np.intp]
    since: Array
    level: Array


@dataclass(frozen=True)
class FittedShape:
    """What the search must know of a shape: one more entry in `FITTED` is one more shape.

    `values` are what is searched beside the dead time, each above 0: time constants [s], or the
    natural period [s] and the damping.  They come as columns (m, values), for m plants at once.
    """

    names: tuple[str, ...]
    """What each value is: `time_constants_s`, `natural_period_s` or `damping`."""
    respond: Callable[[Moves, Array, Place], Array]
    """Answers (m, terms, n) to OP of the shapes with gain (or slope) 1 and without dead time; a
    second term is what is added per unit of gain times numerator time."""
    lags: Callable[[Array], Lags]
    """(values,) -> the time constants of what may still be settling when the record begins."""
    make: Callable[[float, tuple[float, ...], float, float], Shape]
    """(gain or slope [per s], values, numerator time [s], dead time [s]) -> the plant."""
    terms: int = 1
    integrates: bool = False
    """Whether its gain is a slope per second, and a straight line in PV is its own."""
    grows: bool = False
    """Whether it runs away: whatever it holds at the start shows all through the record."""
    simpler: str = ""
    """The shape whose best fit is a start for this one, so that it never does worse."""
    begun: Callable[[tuple[float, ...], float], tuple[tuple[float, ...], float]] = (
        lambda values, late: (values, late)
    )
    """(values, dead time) of the simpler shape -> those to start with."""

    @property
    def two_lags(self) -> bool:
        """Whether its values are two time constants, which are then kept largest first."""
        return self.names.count("time_constants_s") == 2

    @property
    def level_key(self) -> str:
        """`gain`, or `slope_per_s`."""
        return "slope_per_s" if self.integrates else "gain"


# --- the answers ---------------------------------------------------------------------------------


def _split(values: Array) -> tuple[Array, Array]:
    """Both lags; equal ones are set a thousandth apart about their middle.

    Equal lags have no partial fractions, and so small a difference changes the answer by less than
    a millionth.
    """
    first, second = values.max(axis=1), values.min(axis=1)
    middle = 0.5 * (first + second)
    alike = first - second < 1e-3 * middle
    return (
        np.where(alike, 1.0005 * middle, first),
        np.where(alike, 0.9995 * middle, second),
    )


def _first_order(moves: Moves, values: Array, place: Place) -> Array:
    return moves.lag(values[:, 0], place)[:, np.newaxis]


def _two_lags(moves: Moves, values: Array, place: Place) -> Array:
    """1/((T1 s + 1)(T2 s + 1)) = (T1/(T1 s + 1) - T2/(T2 s + 1))/(T1 - T2)."""
    return _lead(moves, values, place)[:, :1]


def _lead(moves: Moves, values: Array, place: Place) -> Array:
    """As two lags, and s/((T1 s + 1)(T2 s + 1)) = (1/(T2 s + 1) - 1/(T1 s + 1))/(T1 - T2)."""
    first, second = _split(values)
    both = moves.lag(np.concatenate([first, second]), place)
    slow, fast = both[: len(first)], both[len(first) :]
    t1, t2 = first[:, np.newaxis], second[:, np.newaxis]
    return np.stack([t1 * slow - t2 * fast, fast - slow], axis=1) / (t1 - t2)[:, np.newaxis]


def _swinging_lags(values: Array) -> Lags:
    """The complex time constant of 1/(t^2 s^2 + 2 d t s + 1), t = period/(2 pi).

    T = t (d + j sqrt(1 - d^2)): T and its conjugate have the product t^2 and the sum 2 d t.
    """
    damping = np.minimum(values[:, 1], 1.0 - 1e-6)
    turned: Lags = values[:, 0] / (2 * math.pi) * (damping + 1j * np.sqrt(1.0 - damping**2))
    return turned


def _oscillating(moves: Moves, values: Array, place: Place) -> Array:
    """Im(T/(T s + 1))/Im(T)."""
    lags = _swinging_lags(values)
    swung = (lags[:, np.newaxis] * moves.lag(lags, place)).imag
    answer: Array = (swung / lags.imag[:, np.newaxis])[:, np.newaxis]
    return answer


def _integrating(moves: Moves, values: Array, place: Place) -> Array:
    return np.broadcast_to(moves.integral(place), (len(values), 1, len(place.since)))


def _integrating_lag(moves: Moves, values: Array, place: Place) -> Array:
    """1/(s (T s + 1)) = 1/s - T/(T s + 1)."""
    lagged = values * moves.lag(values[:, 0], place)
    return (moves.integral(place) - lagged)[:, np.newaxis]


def _unstable(moves: Moves, values: Array, place: Place) -> Array:
    """1/(T s - 1) = -1/(-T s + 1)."""
    return -moves.lag(-values[:, 0], place)[:, np.newaxis]


def _as_swing(first: float, second: float) -> tuple[float, float]:
    """Period and damping of two lags, just short of where they stop swinging."""
    middle = math.sqrt(first * second)
    return 2 * math.pi * middle, min(0.5 * (first + second) / middle, 0.95)


def _seconds(value: float) -> Amount:
    return Amount(value, "s")


FITTED: Final[dict[str, FittedShape]] = {
    "first-order": FittedShape(
        ("time_constants_s",),
        _first_order,
        lambda values: values,
        lambda gain, values, _, late: FirstOrder(gain, _seconds(values[0]), _seconds(late)),
    ),
    "second-order": FittedShape(
        ("time_constants_s", "time_constants_s"),
        _two_lags,
        lambda values: values,
        lambda gain, values, _, late: SecondOrder(
            gain, _seconds(values[0]), _seconds(values[1]), _seconds(late)
        ),
        simpler="first-order",
        begun=lambda values, late: (
            (0.9 * values[0], 0.2 * values[0]),
            max(late - 0.1 * values[0], 0),
        ),
    ),
    "oscillating": FittedShape(
        ("natural_period_s", "damping"),
        _oscillating,
        lambda values: _swinging_lags(values[np.newaxis]),
        lambda gain, values, _, late: Oscillating(
            gain, _seconds(values[0]), values[1], _seconds(late)
        ),
        simpler="second-order",
        begun=lambda values, late: (_as_swing(*values), late),
    ),
    "lead": FittedShape(
        ("time_constants_s", "time_constants_s"),
        _lead,
        lambda values: values,
        lambda gain, values, lead, late: Lead(
            gain, _seconds(lead), _seconds(values[0]), _seconds(values[1]), _seconds(late)
        ),
        terms=2,
        simpler="second-order",
    ),
    "integrating": FittedShape(
        (),
        _integrating,
        lambda values: values,
        lambda slope, _, __, late: Integrating(Amount(slope, "/s"), _seconds(late)),
        integrates=True,
    ),
    "integrating-lag": FittedShape(
        ("time_constants_s",),
        _integrating_lag,
        lambda values: values,
        lambda slope, values, _, late: IntegratingLag(
            Amount(slope, "/s"), _seconds(values[0]), _seconds(late)
        ),
        integrates=True,
        simpler="integrating",
        begun=lambda _, late: ((max(0.3 * late, 1e-9),), 0.7 * late),
    ),
    "unstable": FittedShape(
        ("time_constants_s",),
        _unstable,
        lambda values: -values,
        lambda gain, values, _, late: Unstable(gain, _seconds(values[0]), _seconds(late)),
        grows=True,
    ),
}
"""Word used in case files -> what the search must know of the shape."""
