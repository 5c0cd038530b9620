"""The open loop over frequency, for looking at: gain, phase and both sensitivities on one grid."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.model.robustness import corner_frequencies
from workbench.model.sampled import SampledLoop

Floats = NDArray[np.float64]

_COARSE: Final = 241
"""Frequencies with which the stretch that matters is found."""
_POINTS: Final = 600
"""Frequencies of a response."""
_TURNS_FROM: Final = 60.0
"""Dead time times frequency [rad] up to which the phase is followed where the gain is small."""


@dataclass(frozen=True)
class OpenLoop:
    """L, S = 1/(1 + L) and T = L/(1 + L) over frequency; each array has shape (n,)."""

    frequency: Floats
    """Rising [rad/s]."""
    gain: Floats
    """|L|"""
    phase_deg: Floats
    """Of L, without jumps; between -315 and 45 at the lowest frequency."""
    sensitivity: Floats
    """|S|"""
    complementary_sensitivity: Floats
    """|T|"""


def open_loop_response(loop: Loop, sampled: SampledLoop | None, smallest: float) -> OpenLoop:
    """The open loop where its gain is between 1/`smallest` and `smallest`, dead time exact.

    Parameters
    ----------
    loop
        The analogue loop, or the one that `sampled` was made from.
    sampled
        The same in z: frequencies run up to half its scan rate.  `None` for the analogue loop.
    smallest
        Gain below which nothing matters any more; below 1.

    Returns
    -------
    OpenLoop
        Without the frequencies at which the loop has no finite gain or sensitivity.
    """
    open_loop = loop.open_loop()
    corners = corner_frequencies(open_loop)
    delay = max(open_loop.delays, default=0.0)
    top = math.inf if sampled is None else math.pi / sampled.scan
    if sampled is not None:
        delay += loop.computing_delay + sampled.scan

    def response(w: Floats) -> NDArray[np.complex128]:
        if sampled is None:
            return open_loop((1j * w).astype(np.complex128))
        return sampled.open_loop(np.exp(1j * w * sampled.scan))

    with np.errstate(all="ignore"):
        low, high = min(corners[0] * 1e-3, 0.01 * top), min(corners[-1] * 1e3, top)
        low, high = _that_matters(response(grid := _spread(low, high, _COARSE)), grid, smallest)
        if delay:
            high = max(min(high, _TURNS_FROM / delay), 10.0 * low)
        grid = _spread(low, min(high, top), _POINTS)
        values = response(grid)
        difference = 1.0 + values
        sensitivity, complementary = 1.0 / np.abs(difference), np.abs(values / difference)
    kept = np.isfinite(values) & np.isfinite(sensitivity) & np.isfinite(complementary)
    phase = np.degrees(np.unwrap(np.angle(values[kept])))
    if len(phase):
        phase -= 360.0 * round((float(phase[0]) + 135.0) / 360.0)
    return OpenLoop(grid[kept], np.abs(values[kept]), phase, sensitivity[kept], complementary[kept])


def _spread(low: float, high: float, count: int) -> Floats:
    grid: Floats = np.geomspace(low, high, count)
    return grid


def _that_matters(
    values: NDArray[np.complex128], grid: Floats, smallest: float
) -> tuple[float, float]:
    """The stretch between the last large gain below and the first small one above."""
    size = np.abs(values)
    first, last = 0, len(grid) - 1
    matters = np.flatnonzero(np.isfinite(size) & (size >= smallest))
    if len(matters):
        last = min(int(matters[-1]) + 1, last)
        large = np.flatnonzero(size[:last] > 1.0 / smallest)
        below = np.flatnonzero(np.diff(large) > 1)
        # Only the large gains that go on down to the lowest frequency can be left out.
        if len(large) and large[0] == 0:
            first = int(large[below[0]] if len(below) else large[-1])
    # A decade at each end shows where the curves go, and two are the least worth looking at.
    first = max(0, min(first, last - 1))
    low, high = float(grid[first]), float(grid[last])
    return (low, high) if high >= 100.0 * low else (max(high / 100.0, float(grid[0])), high)
