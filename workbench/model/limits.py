"""What the plant itself forbids, whatever the controller: the least possible peaks of S and T.

Source
------
For S and T as rational interpolation: S. Skogestad and I. Postlethwaite, "Multivariable Feedback
Control", 2nd ed., Wiley, 2005, section 5.3 (from memory): with zeros z and poles p in the right
half plane and dead time L

    Ms >= max over z of prod over p of |z + conj(p)|/|z - p|
    Mt >= max over p of |exp(p L)| prod over z of |conj(z) + p|/|z - p|
    Ms >= Mt - 1, for S + T = 1

from S(z) = 1, S(p) = 0, T(p) = 1, T(z) = 0, the maximum modulus principle, and the dead time being
a factor of T.  They hold for every linear controller, sampled ones of the last two lines included
where L counts the computing delay.
"""

from __future__ import annotations

import cmath
import math
from dataclasses import dataclass

from workbench.model.transfer import TransferFunction
from workbench.units import Figure


@dataclass(frozen=True)
class LeastPeaks:
    """Ms and Mt that no linear controller can undercut; 1 where the plant forbids nothing."""

    sensitivity: Figure
    complementary_sensitivity: Figure


def least_peaks(plant: TransferFunction, computing_delay: float = 0.0) -> LeastPeaks:
    """The least Ms and Mt on this plant.

    Parameters
    ----------
    plant
        With its dead time [s]; without a dead time inside a feedback.
    computing_delay
        Of the controller [s], counted with the dead time.

    >>> unstable = TransferFunction.ratio((1.0,), [(10.0, -1.0)], dead_time=5.0)
    >>> round(least_peaks(unstable).complementary_sensitivity.value, 6)
    1.648721
    """
    if plant.has_delayed_feedback:
        none = Figure(None, "a dead time inside a feedback: infinitely many poles")
        return LeastPeaks(none, none)
    poles = [p for p in plant.poles() if p.real > 0.0]
    # The zeros of paths that differ in dead time are not known: without them the bound still holds.
    zeros = [z for z in plant.zeros() if z.real > 0.0] if len(plant.numerator) == 1 else []
    late = plant.dead_time + computing_delay
    followed = 1.0
    for pole in poles:
        apart = math.prod(abs(z.conjugate() + pole) / abs(z - pole) for z in zeros if z != pole)
        followed = max(followed, abs(cmath.exp(pole * late)) * apart)
    magnified = max(1.0, followed - 1.0)
    for zero in zeros:
        found = math.prod(abs(zero + p.conjugate()) / abs(zero - p) for p in poles if p != zero)
        magnified = max(magnified, found)
    return LeastPeaks(Figure.of(magnified), Figure.of(followed))
