"""The PID algorithm as a controller executes it, scan by scan.

From the canonical gains, with h the scan, r the setpoint, y the (filtered) PV and e = r - y:

    P = Kp (b r - y)
    I = I + Ki h e
    D = Tf/(Tf + h) D + Kd/(Tf + h) (change of (c r - y))
    u = P + I + D

The integral includes this scan's error.  The PV filter 1/(T s + 1) is executed with the same scan
and its exact pole: yf = yf + (1 - exp(-h/T)) (y - yf).  Direct action changes the sign of u.
The controller starts at rest: every part is 0, and so is the output, as all are deviations.

At an output limit, or while the output moves as fast as its rate limit lets it, the integral is
held in one of three ways (v is P + I + D, u what the limits leave of it, Ti = Kp/Ki, Td = Kd/Kp):

conditional     the integral is not advanced while v is beyond the limit and the error would drive
                it further
tracking        I = I + h/Tt (u - v) after each scan, Tt = Ti, or sqrt(Ti Td) with a derivative;
                at most the whole difference
external-reset  the integral is the limited output through a first-order lag Ti, so that
                I = I + h/(Ti + h) (u - v)

Source
------
Conditional integration and tracking: K.J. Åström and T. Hägglund, "PID Controllers: Theory, Design
and Tuning", 2nd ed., ISA, 1995, section 3.5, from memory.  External reset: common practice; its
form here is the lag solved backwards over one scan, which without limits is the algorithm above.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from workbench.errors import problem
from workbench.model.feedback import Loop
from workbench.model.pid import Gains

Step = Callable[[float, float], float]
"""One scan: (setpoint [%], measured PV [%]) -> output [%]."""


@dataclass(frozen=True)
class Algorithm:
    """The numbers one scan works with."""

    proportional: float
    """Kp [%/%]."""
    advance: float
    """Ki h, what the integral gains from an error of 1 % in a scan [%/%]."""
    keep: float
    """Tf/(Tf + h), what the derivative part keeps of itself."""
    kick: float
    """Kd/(Tf + h), what it gains from a change of 1 % [%/%]."""
    setpoint_weight: float
    derivative_weight: float
    smooth: float
    """Share of a new PV that the filter takes in; 1 without a filter."""
    sign: float
    """+1 reverse, -1 direct."""
    low: float = -math.inf
    """[%]"""
    high: float = math.inf
    """[%]"""
    move: float = math.inf
    """Largest change of the output in a scan [%]."""
    conditional: bool = True
    release: float = 0.0
    """Share of (u - v) that is given back to the integral after a scan."""

    @classmethod
    def of(cls, loop: Loop, scan: float) -> Algorithm:
        """The algorithm of a loop executed every `scan` seconds.

        Raises `InputError` for a way of holding the integral that is not known.
        """
        gains, t = loop.gains, loop.pv_filter
        return cls(
            gains.proportional,
            gains.integral * scan,
            gains.filter_time / (gains.filter_time + scan),
            gains.derivative / (gains.filter_time + scan),
            gains.setpoint_weight,
            gains.derivative_weight,
            -math.expm1(-scan / t) if t else 1.0,
            loop.sign,
            -math.inf if loop.low is None else loop.low,
            math.inf if loop.high is None else loop.high,
            math.inf if loop.rate is None else loop.rate * scan,
            loop.windup == "conditional",
            _release(loop.windup, gains, scan),
        )

    @property
    def is_limited(self) -> bool:
        """Something may hold the output back."""
        return any(map(math.isfinite, (self.low, self.high, self.move)))

    def start(self) -> Step:
        """A controller at rest."""
        return self._limited() if self.is_limited else self._free()

    def _free(self) -> Step:
        kp, advance, keep, kick = self.proportional, self.advance, self.keep, self.kick
        b, c, smooth, sign = (
            self.setpoint_weight,
            self.derivative_weight,
            self.smooth,
            self.sign,
        )
        filtered = integral = derivative = last = 0.0

        def step(setpoint: float, measured: float) -> float:
            nonlocal filtered, integral, derivative, last
            filtered += smooth * (measured - filtered)
            integral += advance * (setpoint - filtered)
            seen = c * setpoint - filtered
            derivative = keep * derivative + kick * (seen - last)
            last = seen
            return sign * (kp * (b * setpoint - filtered) + integral + derivative)

        return step

    def _limited(self) -> Step:
        kp, advance, keep, kick = self.proportional, self.advance, self.keep, self.kick
        b, c, smooth, sign = (
            self.setpoint_weight,
            self.derivative_weight,
            self.smooth,
            self.sign,
        )
        # The limits as the unsigned algorithm sees them.
        low, high = (self.low, self.high) if sign > 0 else (-self.high, -self.low)
        move, conditional, release = self.move, self.conditional, self.release
        filtered = integral = derivative = last = output = 0.0

        def step(setpoint: float, measured: float) -> float:
            nonlocal filtered, integral, derivative, last, output
            filtered += smooth * (measured - filtered)
            gained = advance * (setpoint - filtered)
            seen = c * setpoint - filtered
            derivative = keep * derivative + kick * (seen - last)
            last = seen
            lowest, highest = max(low, output - move), min(high, output + move)
            rest = kp * (b * setpoint - filtered) + derivative
            wanted = rest + integral + gained
            if conditional and (wanted > highest if gained > 0.0 else wanted < lowest):
                wanted -= gained
            else:
                integral += gained
            # The limits win over the rate where the output starts outside them.
            output = min(max(min(max(wanted, lowest), highest), low), high)
            integral += release * (output - wanted)
            return sign * output

        return step


def _release(windup: str, gains: Gains, scan: float) -> float:
    if windup not in ("conditional", "tracking", "external-reset"):
        raise problem(
            f"{windup!r} is not a way to hold the integral",
            "use conditional, tracking or external-reset",
            key="controller.windup",
        )
    if windup == "conditional" or not gains.integral:
        return 0.0
    integral_time = gains.proportional / gains.integral
    if windup == "external-reset":
        return scan / (integral_time + scan)
    # sqrt(Ti Td) = sqrt(Kd/Ki), whatever the gain
    time = math.sqrt(gains.derivative / gains.integral) if gains.derivative > 0 else integral_time
    return scan / max(time, scan)
