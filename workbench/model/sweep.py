"""Many loops at once: frequency responses as rows of one array, stability and peaks by the row.

One loop is judged exactly by `robustness`; here thousands of candidate settings or plants are
judged on one set of frequencies, to about 0.3 % of a peak, for searches, families and maps.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.transfer import Complex, TransferFunction

Floats = NDArray[np.float64]

_PER_DECADE: Final = 50
"""Frequencies on the logarithmic part of a set."""
_PER_TURN: Final = 25
"""Frequencies to one turn of the dead time, where the plant's gain still matters."""
_MATTERS: Final = 0.03
"""Plant gain down to which the dead time is followed, as a share of the gain at `critical`."""
_MOST_TURNS: Final = 25.0
"""Turns of the dead time that are followed at most."""
_REACHES: Final = 2.0
"""An integrating loop whose gain at the lowest frequency is below this was not seen to its end."""
_STARTS: Final = 0.5
"""A loop whose gain at the highest frequency is above this was not seen to its end."""


@dataclass(frozen=True)
class Scale:
    """What is quick and what is slow about some plants."""

    critical: float
    """Frequency at which the quickest plant lags by half a turn, or where its lags end [rad/s]."""
    slowest: float
    """Longest time of any plant: a lag, a dead time, or 1/`critical` of the slowest [s]."""
    dead_time: float
    """Longest dead time [s]."""


def scale_of(plants: Sequence[TransferFunction]) -> Scale:
    """The time scales of plants without a dead time inside an inner feedback.

    Raises `ModelError` for a plant with one.
    """
    critical = [_critical(plant) for plant in plants]
    times = [1.0 / abs(p) for plant in plants for p in plant.poles() if p]
    delays = [delay for plant in plants for delay in plant.delays]
    slowest = max([*times, *delays, 1.0 / min(critical)])
    return Scale(max(critical), slowest, max(delays, default=0.0))


def _critical(plant: TransferFunction) -> float:
    corners = [abs(r) for r in (*plant.poles(), *plant.zeros()) if r]
    corners += [1.0 / delay for delay in plant.delays if delay]
    corners = corners or [1.0]
    grid = np.geomspace(0.01 * min(corners), 100.0 * max(corners), 2000)
    values = plant((1j * grid).astype(np.complex128))
    start = -0.5 * math.pi * plant.integrators
    first = float(np.angle(values[0] * np.exp(-1j * start)))
    # A negative plant starts half a turn away; what counts is how much further it lags.
    lag = np.unwrap(np.angle(values / values[0])) + start + (first if abs(first) < 1.5 else 0.0)
    beyond = np.flatnonzero(lag < -math.pi)
    if not len(beyond) or any(p.real > 0 for p in plant.poles()):
        return 3.0 * max(corners)
    return float(grid[beyond[0]])


def frequencies(
    plants: Sequence[TransferFunction], scale: Scale, slowest: float, top: float = math.inf
) -> Floats:
    """Frequencies for loops around plants [rad/s], shape (n,), rising.

    Parameters
    ----------
    plants
        As `scale_of` took them.
    scale
        Of these plants.
    slowest
        Longest time in the loop, the controller's integral time included [s].
    top
        Highest frequency that has a meaning: half the scan rate [rad/s].
    """
    low, high = 0.02 / slowest, min(200.0 * scale.critical, top)
    grid = np.geomspace(low, high, math.ceil(_PER_DECADE * math.log10(high / low)) + 2)
    pieces = [grid]
    if scale.dead_time:
        last = 0.0
        for plant in plants if len(plants) <= 8 else (plants[0],):
            size = np.abs(plant((1j * grid).astype(np.complex128)))
            reference = float(np.interp(scale.critical, grid, size))
            last = max(last, float(grid[np.flatnonzero(size > _MATTERS * reference)[-1]]))
        turn = 2.0 * math.pi / scale.dead_time
        last = min(last + turn, _MOST_TURNS * turn, high)
        pieces.append(np.arange(turn / _PER_TURN, last, turn / _PER_TURN))
    # Half the scan rate itself has no phase to tell which way the last piece turned.
    whole = np.unique(np.concatenate(pieces))
    return whole[whole < top] if math.isinf(top) else np.append(whole[whole < 0.999 * top], top)


@dataclass(frozen=True)
class Roots:
    """Poles of the open loop that its turning must account for."""

    right: int
    """In the right half plane."""
    origin: int
    """At 0."""

    @classmethod
    def of(cls, plant: TransferFunction, integral: bool = True) -> Roots:
        """Of a plant with a controller that integrates, or does not."""
        growing = sum(p.real > 0 for p in plant.poles())
        return cls(growing, plant.integrators + integral)


def stable(values: Complex, roots: Sequence[Roots]) -> NDArray[np.bool_]:
    """Which loops are stable, by the turning of 1 + L from the lowest to the highest frequency.

    Parameters
    ----------
    values
        L(jw), shape (loops, frequencies).
    roots
        One for each loop, or one for all.

    Notes
    -----
    Right where 1 + L does not come so near to 0 that it turns unseen between two frequencies; a
    loop whose response was not seen to its ends counts as unstable.
    """
    around = 1.0 + values
    turned = np.angle(around[:, 1:] / around[:, :-1]).sum(axis=1)
    right = np.array([r.right for r in roots])
    origin = np.array([r.origin for r in roots])
    unstable_roots = np.rint(right + 0.5 * origin - turned / math.pi)
    seen = (origin == 0) | (np.abs(values[:, 0]) > _REACHES)
    return np.asarray((unstable_roots == 0) & seen & np.isfinite(turned), np.bool_)


def peaks(values: Complex) -> tuple[Floats, Floats]:
    """Ms and Mt of loops, shape (loops,) each, with a parabola through the highest three points."""
    size = np.abs(1.0 + values)
    return _tops(1.0 / size), np.maximum(_tops(np.abs(values) / size), 1e-300)


def _tops(sizes: Floats) -> Floats:
    """Highest value of each row between its points too."""
    row = np.arange(len(sizes))
    at = np.clip(sizes.argmax(axis=1), 1, sizes.shape[1] - 2)
    before, middle, after = sizes[row, at - 1], sizes[row, at], sizes[row, at + 1]
    bend = np.maximum(2.0 * middle - before - after, 1e-300)
    lift = np.where((middle >= before) & (middle >= after), (after - before) ** 2 / (8 * bend), 0)
    # A parabola that rises more than a hundredth above its points is not one.
    return np.asarray(np.maximum(sizes.max(axis=1), middle + np.minimum(lift, 0.01 * middle)))


@dataclass(frozen=True)
class Limits:
    """What loops have to keep to; infinite is no limit."""

    max_sensitivity: float = math.inf
    """Ms, above 1."""
    max_complementary_sensitivity: float = math.inf
    """Mt, above 1."""
    noise_gain: float = math.inf
    """Largest |C S| over all frequencies, from measurement noise to OP [%/%]."""


def gain_windows(
    unit: Complex, controller: Complex, limits: Limits, integrates: bool = True
) -> tuple[Floats, Floats]:
    """Windows of the gain K in which loops K l keep every limit, by closed form per frequency.

    |1 + K l|^2 >= 1/Ms^2,   |K l|^2 <= Mt^2 |1 + K l|^2,   |K c|^2 <= Mn^2 |1 + K l|^2

    are quadratics in K; the windows are what all frequencies leave.  -1 is never met inside one,
    so that all of a window is stable or none of it.

    Parameters
    ----------
    unit
        l(jw), the open loop with gain 1, shape (rays, plants, points).
    controller
        c(jw), the controller with gain 1, shape (rays, 1, points).
    limits
        At least one finite.
    integrates
        The open loop has a pole at 0, so that a window is only known where its gain at the lowest
        frequency is large.

    Returns
    -------
    tuple
        Lower and upper ends, shape (rays, 4): the lowest windows, the highest of them last; a
        window that is not there has both ends 0.
    """
    size, real, rays = np.abs(unit) ** 2, unit.real, len(unit)
    starts: list[Floats] = []
    ends: list[Floats] = []
    for a, b, c in _quadratics(size, real, np.abs(controller) ** 2, limits):
        low, high = _between_roots(a, b, c)
        starts.append(low.reshape(rays, -1))
        ends.append(high.reshape(rays, -1))
    # Gains whose loop reaches beyond the frequencies looked at.
    far = highest_gain(unit)[:, np.newaxis]
    starts.append(far)
    ends.append(np.full_like(far, math.inf))
    if integrates:
        near = (_REACHES / np.abs(unit[:, :, 0])).max(axis=1, keepdims=True)
        starts.append(np.zeros_like(near))
        ends.append(near)
    return _left_over(np.concatenate(starts, axis=1), np.concatenate(ends, axis=1))


def highest_gain(unit: Complex) -> Floats:
    """Gain above which loops K l are not seen to their end, shape (rays,).

    `unit` is l(jw), shape (rays, plants, points).
    """
    with np.errstate(divide="ignore"):
        return np.asarray((_STARTS / np.abs(unit[:, :, -1])).min(axis=1), np.float64)


def _quadratics(
    size: Floats, real: Floats, controller: Floats, limits: Limits
) -> list[tuple[Floats, Floats, float]]:
    """(a, b, c) of a K^2 + b K + c < 0 where a limit is broken."""
    found: list[tuple[Floats, Floats, float]] = []
    ms, mt, mn = (
        limits.max_sensitivity,
        limits.max_complementary_sensitivity,
        limits.noise_gain,
    )
    found.append((size, 2.0 * real, 1.0 - (0.0 if math.isinf(ms) else 1.0 / ms**2)))
    if math.isfinite(mt):
        found.append(((1.0 - 1.0 / mt**2) * size, 2.0 * real, 1.0))
    if math.isfinite(mn):
        found.append((size - controller / mn**2, 2.0 * real, 1.0))
    return found


def _between_roots(a: Floats, b: Floats, c: float) -> tuple[Floats, Floats]:
    """Positive K with a K^2 + b K + c < 0, c > 0: from and to; none is (inf, inf)."""
    inside = b * b - 4.0 * a * c
    root = np.sqrt(np.maximum(inside, 0.0))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        # For a > 0 both roots are positive where b < 0; for a < 0 just one is.  The forms are those
        # in which nothing cancels.
        low = np.where(b < 0.0, 2.0 * c / (root - b), (-b - root) / (2.0 * a))
        high = np.where(a > 0.0, (root - b) / (2.0 * a), math.inf)
    broken = (inside > 0.0) & ((b < 0.0) | (a < 0.0))
    low = np.where(broken & np.isfinite(low) & (low > 0.0), low, math.inf)
    return low, np.where(np.isfinite(low), high, math.inf)


_THIN: Final = 1.03
"""A window narrower than this, end over end, may be a gap between two frequencies."""
_WINDOWS: Final = 4
"""Windows looked at, from the lowest: above those that count lie many, where the phase is fast."""


def _left_over(starts: Floats, ends: Floats) -> tuple[Floats, Floats]:
    """The lowest windows that intervals leave of the positive axis."""
    order = np.argsort(starts, axis=1)
    starts = np.take_along_axis(starts, order, axis=1)
    covered = np.maximum.accumulate(np.take_along_axis(ends, order, axis=1), axis=1)
    begin = np.concatenate([np.zeros((len(starts), 1)), covered[:, :-1]], axis=1)
    with np.errstate(invalid="ignore"):
        is_window = (starts > begin * _THIN) & np.isfinite(begin) & np.isfinite(starts)
    low = np.zeros((len(starts), _WINDOWS))
    high = np.zeros((len(starts), _WINDOWS))
    rank = np.cumsum(is_window, axis=1)
    for k in range(_WINDOWS):
        row, column = np.nonzero(is_window & (rank == k + 1))
        low[row, k], high[row, k] = begin[row, column], starts[row, column]
    return low, high
