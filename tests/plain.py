"""A sampled first-order loop written down as a recursion, knowing nothing of the program.

The other route for sampled trends, and the yardstick for the time they take.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from workbench.model.pid import Gains


class HeldLag:
    """gain exp(-dead_time s)/(lag s + 1) behind an input that is held from scan to scan.

    The input arrives some whole scans and a part of one late, so that in each scan the lag first
    runs on the older value and then on the newer one; each stretch is an exact exponential.
    """

    def __init__(self, gain: float, lag: float, dead_time: float, scan: float) -> None:
        self.gain = gain
        self.whole = math.floor(dead_time / scan + 1e-9)
        part = max(0.0, dead_time - self.whole * scan)
        self.first, self.second = math.exp(-part / lag), math.exp(-(scan - part) / lag)
        self.value = 0.0

    def run(self, held: Sequence[float], k: int) -> None:
        """From scan k to the next; `held` has the input of every scan up to k."""
        older, newer = k - self.whole - 1, k - self.whole
        for place, decay in ((older, self.first), (newer, self.second)):
            target = self.gain * held[place] if place >= 0 else 0.0
            self.value = target + (self.value - target) * decay


def sampled_pv(
    plant: tuple[float, float, float],
    gains: Gains,
    scan: float,
    computing_delay: float,
    setpoint: Sequence[float],
    upset: Sequence[float],
) -> list[float]:
    """PV at each scan; `plant` is gain, lag and dead time, the upset enters at its input."""
    gain, lag, dead_time = plant
    from_op = HeldLag(gain, lag, dead_time + computing_delay, scan)
    from_upset = HeldLag(gain, lag, dead_time, scan)
    op: list[float] = []
    pv: list[float] = []
    integral = derivative = before = 0.0
    for k, r in enumerate(setpoint):
        y = from_op.value + from_upset.value
        seen = gains.derivative_weight * r - y
        integral += gains.integral * scan * (r - y)
        total = gains.filter_time + scan
        derivative = gains.filter_time / total * derivative
        derivative += gains.derivative / total * (seen - before)
        before = seen
        pv.append(y)
        op.append(gains.proportional * (gains.setpoint_weight * r - y) + integral + derivative)
        from_op.run(op, k)
        from_upset.run(upset, k)
    return pv
