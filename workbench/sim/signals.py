"""What comes from outside over time: steps, ramps and sines, and sums of them.

A pulse is two steps, a ramp that ends two ramps, a recorded signal a step at each of its rows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Step:
    """An input that changes once: `size` from `time` on."""

    size: float
    time: float
    """[s]"""

    def values(self, time: Array) -> Array:
        """At the rising instants (n,) [s]; a step is there at its own instant."""
        found = np.zeros(len(time))
        found[time.searchsorted(self.time) :] = self.size
        return found


@dataclass(frozen=True)
class Ramp:
    """An input that rises steadily from `time` on."""

    slope: float
    """[1/s]"""
    time: float
    """[s]"""

    def values(self, time: Array) -> Array:
        """At the instants (n,) [s]."""
        return self.slope * np.maximum(time - self.time, 0.0)


@dataclass(frozen=True)
class Sine:
    """An input that swings from `time` on, upwards first."""

    amplitude: float
    period: float
    """[s]"""
    time: float
    """[s]"""

    def values(self, time: Array) -> Array:
        """At the instants (n,) [s]."""
        since = np.maximum(time - self.time, 0.0)
        return self.amplitude * np.sin(2.0 * math.pi / self.period * since)


Signal = tuple[Step | Ramp | Sine, ...]
"""The sum of its parts."""


def values(signal: Signal, time: Array) -> Array:
    """A signal at the instants (n,) [s]."""
    if len(signal) == 1:
        return signal[0].values(time)
    total = np.zeros(len(time))
    for part in signal:
        total += part.values(time)
    return total


def held(time: Array, value: Array) -> Signal:
    """A recorded signal, each value (n,) held from its instant (n,) [s] to the next."""
    changes = np.diff(value, prepend=0.0)
    return tuple(
        Step(float(size), float(at)) for size, at in zip(changes, time, strict=True) if size
    )
