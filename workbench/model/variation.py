"""A plant that differs from the nominal one by a gain, a dead time and a lag ratio."""

from __future__ import annotations

from dataclasses import dataclass

from workbench.model.transfer import Delayed, Terms, TransferFunction


@dataclass(frozen=True)
class Variation:
    """By how much a plant differs from the nominal one: ratios, 1 is no difference.

    >>> lag = TransferFunction.ratio((2.0,), [(10.0, 1.0)], dead_time=3.0)
    >>> other = Variation(gain=1.5, dead_time=2.0, lag=0.5).of(lag)
    >>> other.gain().value, other.dead_time, other.poles()
    (3.0, 6.0, ((-0.2+0j),))
    """

    gain: float = 1.0
    """Of the steady gain, or of the slope of an integrating plant."""
    dead_time: float = 1.0
    """Of every dead time."""
    lag: float = 1.0
    """Of every time constant, lead and natural period; gain or slope stay what they are."""

    def of(self, plant: TransferFunction) -> TransferFunction:
        """The plant that differs so:  gain lag^n G(lag s), n integrators, its own dead times."""
        if self.lag == 1.0:
            stretched = plant
        else:
            stretched = plant.with_time_unit(self.lag) * self.lag**plant.integrators
        scaled = stretched * self.gain
        ratio = self.dead_time / self.lag
        return TransferFunction(
            _delayed(scaled.numerator, ratio), _delayed(scaled.denominator, ratio)
        )


def _delayed(terms: Terms, ratio: float) -> Terms:
    return tuple(Delayed(t.dead_time * ratio, t.polynomial) for t in terms)
