"""Invented bump tests in closed form: each move of OP adds its own answer of the plant.

The random numbers come from the one generator whose stream Python promises never to change.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from dataclasses import dataclass
from statistics import NormalDist


@dataclass(frozen=True)
class Loop:
    """The truth behind an invented record: a plant, its bump test, and what disturbs it."""

    answer: Callable[[float], float]
    """PV change for a lasting unit change of OP, by the time since the dead time passed [s]."""
    dead_time: float
    """[s]"""
    rest: tuple[float, float]
    """PV and OP before the first move."""
    moves: tuple[tuple[float, float], ...]
    """(time [s], change of OP)."""
    interval: float
    rows: int
    noise: float
    """Standard deviation of the noise."""
    memory: float = 0.0
    """Time over which the noise forgets itself [s]; 0 for white noise."""
    drift: float = 0.0
    """[PV units per s]"""
    seed: int = 0

    def table(self) -> list[tuple[float, float, float]]:
        """(time [s], PV, OP) of every row, in closed form: each move adds its own answer."""
        draw, normal = random.Random(self.seed), NormalDist()
        keep = math.exp(-self.interval / self.memory) if self.memory else 0.0
        noise, found = 0.0, []
        for row in range(self.rows):
            time = row * self.interval
            fresh = normal.inv_cdf(draw.random()) * self.noise
            noise = keep * noise + math.sqrt(1 - keep * keep) * fresh if row else fresh
            pv, op = self.rest
            op += sum(change for at, change in self.moves if time >= at)
            pv += self.drift * time + noise
            for at, change in self.moves:
                since = time - at - self.dead_time
                pv += change * self.answer(since) if since > 0 else 0.0
            found.append((time, pv, op))
        return found
