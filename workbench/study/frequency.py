"""The loop over frequency, as it will run: sampled where it has a scan interval."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from workbench.case.case import Case
from workbench.model.frequency import Floats, OpenLoop, open_loop_response
from workbench.study.loop import loop_of
from workbench.study.operating import about_rest
from workbench.study.structure import open_loop_in_z

SMALLEST_GAIN: Final = 0.01
"""Frequencies go up to where the gain of the open loop stays below this."""


@dataclass(frozen=True)
class FrequencyResponse:
    """Open loop and sensitivities of the loop as it will run."""

    open_loop: OpenLoop
    sampled: bool
    """As sampled; else as analogue."""
    sampled_reason: str = ""
    """Why it is analogue although there is a scan interval."""

    def at(self, frequency: float) -> FrequencyReading | None:
        """The figures at the frequency of the grid nearest to one [rad/s]; nothing beyond it."""
        grid = self.open_loop.frequency
        if not len(grid) or not 0.99 * grid[0] <= frequency <= 1.01 * grid[-1]:
            return None
        row = int(np.abs(np.log(grid / frequency)).argmin())
        found = self.open_loop
        return FrequencyReading(
            float(grid[row]),
            float(found.gain[row]),
            float(found.phase_deg[row]),
            float(found.sensitivity[row]),
            float(found.complementary_sensitivity[row]),
        )

    @property
    def sensitivity_peak_rad_s(self) -> float | None:
        """The frequency of the grid at which |S| is largest."""
        return self._place_of_peak(self.open_loop.sensitivity)

    @property
    def complementary_peak_rad_s(self) -> float | None:
        """The frequency of the grid at which |T| is largest."""
        return self._place_of_peak(self.open_loop.complementary_sensitivity)

    def _place_of_peak(self, values: Floats) -> float | None:
        return float(self.open_loop.frequency[values.argmax()]) if len(values) else None


@dataclass(frozen=True)
class FrequencyReading:
    """The loop at one frequency."""

    frequency_rad_s: float
    gain: float
    """Of the open loop."""
    phase_deg: float
    """Of the open loop."""
    sensitivity: float
    """|S|"""
    complementary_sensitivity: float
    """|T|"""

    @property
    def period_s(self) -> float:
        """Of a swing at this frequency [s]."""
        return 2.0 * math.pi / self.frequency_rad_s


def frequency_response(case: Case) -> FrequencyResponse:
    """Open loop, |S| and |T| over frequency, of the same loop that the margins are about.

    Raises `InputError` where plant or controller is missing.
    """
    loop = about_rest(loop_of(case))
    sampled, reason = open_loop_in_z(loop) if loop.scan is not None else (None, "")
    if sampled is None:
        loop = replace(loop, scan=None)
    found = open_loop_response(loop, sampled, SMALLEST_GAIN)
    return FrequencyResponse(found, sampled is not None, reason)
