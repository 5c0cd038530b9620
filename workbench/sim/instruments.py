"""What stands between the controller and the plant: the valve on one side, the sensor on the other.

The sensor's lag is part of the loop itself, of its margins too; what is here has no transfer
function.  Noise that is correlated is a first-order process: each scan keeps exp(-h/T) of the one
before, and its standard deviation stays what it was given as.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from workbench.sim.valve import Move, Setting, Valve, follow
from workbench.units import Amount, check_fields, quantity

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Measurement:
    """How PV is measured; every default is a sensor that shows what there is."""

    lag: Amount | None = quantity(
        "time constant of the sensor, counted in margins and predictions",
        "duration",
        low=0,
        default=None,
        example="4 s",
    )
    noise_correlation: Amount | None = quantity(
        "time constant of the measurement noise; left out: white",
        "duration",
        low=0,
        default=None,
        example="10 s",
    )
    resolution: float = quantity(
        "smallest step of the measured PV", "number", "PV", low=0, default=0.0
    )
    clips: bool = quantity(
        "whether the measured PV stops at the ends of its range", "flag", default=False
    )

    def __post_init__(self) -> None:
        check_fields(self)


@dataclass(frozen=True)
class Instruments:
    """Valve and sensor of a run; every default is not in the way."""

    valve: Valve = Valve()
    op_rest: float = 50.0
    """The signal at the operating point [% of the output's span]."""
    closes_on_rise: bool = False
    """A rising signal closes the valve."""
    resolution: float = 0.0
    """Of the measured PV [% of its span]."""
    low: float = -math.inf
    """Where the measured PV stops, as a deviation [%]."""
    high: float = math.inf
    noise_correlation: float = 0.0
    """Time constant of the noise [s]."""

    @property
    def are_plain(self) -> bool:
        """Nothing is in the way, but perhaps noise."""
        return self.valve.is_healthy and self.received() is None

    def through(self, scan: float) -> Move | None:
        """The valve, at rest; None where it is healthy."""
        return follow(self.valve, Setting(self.op_rest, scan, self.closes_on_rise))

    def received(self) -> Callable[[float], float] | None:
        """What the controller receives of a PV [%]; None where that is PV itself."""
        step, low, high = self.resolution, self.low, self.high
        if not step and math.isinf(low) and math.isinf(high):
            return None

        def seen(pv: float) -> float:
            shown = step * round(pv / step) if step else pv
            return min(max(shown, low), high)

        return seen

    def noise(self, deviation: float, seed: int, scan: float, scans: int) -> Array | None:
        """Noise of each scan (scans,) [%] with a standard deviation; None where there is none."""
        if not deviation:
            return None
        white = np.random.default_rng(seed).normal(0.0, deviation, scans)
        if not self.noise_correlation:
            return white
        kept = math.exp(-scan / self.noise_correlation)
        fresh = math.sqrt(1.0 - kept * kept)
        found, value = np.empty(scans), 0.0
        for k, dice in enumerate(white.tolist()):
            value = dice if k == 0 else kept * value + fresh * dice
            found[k] = value
        return found
