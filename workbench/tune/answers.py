"""What load and setpoint steps cost, for many candidate settings at once, from frequency responses.

A signal that dies out is   y(t) = (2/pi) integral of Re Y(jw) cos(w t) dw   over all w > 0.
Re Y is taken as straight between the frequencies, for which the integral is a closed form; one
matrix then takes the responses of all candidates to their courses in time.

The integral of y itself is known exactly from Y(0), so that

    integral |y| dt = |integral y dt| + 2 integral of what lies on the other side of 0

and only the overshoots are integrated by numbers.

Source
------
Quadrature: L.N.G. Filon, Proc. Roy. Soc. Edinburgh 49, 1928, 38-47, the linear case (from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.sweep import Scale

Floats = NDArray[np.float64]

_NEGLIGIBLE: Final = 3e-4
"""An overshoot below this share of the peak is taken for rounding of the quadrature."""
_FINE: Final = 0.12
"""Step of the time at first, in 1/critical."""
_GROWTH: Final = 1.04
_FINE_UNTIL: Final = 30.0
"""End of equal steps, in 1/critical."""


@dataclass(frozen=True)
class Quadrature:
    """Takes real parts at frequencies to courses at times."""

    time: Floats
    """[s], shape (times,)"""
    matrix: Floats
    """(1 + frequencies, times); the first row is for frequency 0."""

    @classmethod
    def over(
        cls, frequency: Floats, scale: Scale, until: float, scan: float | None = None
    ) -> Quadrature:
        """For the frequencies given [rad/s], rising, over times up to `until` [s], at scans."""
        time = _times(scale, until)
        if scan is not None:
            time = np.unique(np.maximum(np.rint(time / scan), 1.0)) * scan
        w = np.concatenate([[0.0], frequency])
        middle, half = 0.5 * (w[1:] + w[:-1]), 0.5 * np.diff(w)
        # A straight piece of slope m gives m [cos(w t)]/t^2; the ends of the pieces cancel, and
        # the last one cancels against what lies beyond.
        pieces = -2.0 * np.sin(np.outer(middle, time)) * np.sin(np.outer(half, time))
        pieces *= (2.0 / math.pi) / (2.0 * half[:, np.newaxis] * time**2)
        matrix = np.zeros((len(w), len(time)))
        matrix[1:] += pieces
        matrix[:-1] -= pieces
        return cls(time, matrix)

    def overshoots(self, real: Floats, total: Floats, arrival: Floats) -> Floats:
        """Integral of what lies on the other side of 0 than the whole integral.

        Parameters
        ----------
        real
            Re Y at 0 and at the frequencies, shape (n, 1 + frequencies).
        total
            The integral of y over all time, shape (n,).
        arrival
            Before it y is 0 [s], shape (n,).

        Returns
        -------
        Floats
            Shape (n,), not negative.
        """
        course = (real @ self.matrix) * np.where(total < 0.0, -1.0, 1.0)[:, np.newaxis]
        course[self.time < arrival[:, np.newaxis]] = 0.0
        peak = np.abs(course).max(axis=1, keepdims=True)
        below = np.where(course < -_NEGLIGIBLE * peak, -course, 0.0)
        return np.asarray(np.trapezoid(below, self.time, axis=1), np.float64)

    def absolute(self, real: Floats, total: Floats, arrival: Floats) -> Floats:
        """Integral of |y| over all time, shape (n,); the arguments as for `overshoots`."""
        return np.abs(total) + 2.0 * self.overshoots(real, total, arrival)


def _times(scale: Scale, until: float) -> Floats:
    unit = 1.0 / scale.critical
    equal = np.arange(_FINE, _FINE_UNTIL, _FINE) * unit
    start = float(equal[-1])
    if until <= start:
        return equal
    count = math.ceil(math.log(until / start) / math.log(_GROWTH))
    return np.concatenate([equal, start * _GROWTH ** np.arange(1, count + 1)])
