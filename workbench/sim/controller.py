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

Incremental execution adds the changes of P and D and the new part of I to the output as it was left
by the limits, u = u + change of P + Ki h e + change of D.  That is the algorithm above with the
whole of (u - v) given back to I after each scan, and so it is executed; what holds the integral
then has no say.

Where the error is reshaped, e' takes the place of e: P = Kp (b r - y + e' - e), I = I + Ki h e'.
In the dead zone of width z, e' = 0, and beyond it e' = e - z or e + z.  With a gain that grows with
the error, e' = e (g + (1 - g) |e|/100), g being the share of the gain that is left at no error.
The derivative part is not reshaped.

In manual the output is what the operator gives, within the limits, and I = u - P - D follows it, so
that automatic begins where manual ended.  New settings in automatic leave P + I + D as it was.
Without integral action what then stands in I stays there, as a manual reset does.

Source
------
Conditional integration and tracking: K.J. Åström and T. Hägglund, "PID Controllers: Theory, Design
and Tuning", 2nd ed., ISA, 1995, section 3.5, from memory.  External reset: common practice; its
form here is the lag solved backwards over one scan, which without limits is the algorithm above.
Incremental execution, dead zone and error-dependent gain: common practice.
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


@dataclass(slots=True)
class Memory:
    """What a controller remembers from one scan to the next, as if it were of reverse action."""

    filtered: float = 0.0
    """PV behind its filter [%]."""
    integral: float = 0.0
    """I [%]."""
    derivative: float = 0.0
    """D [%]."""
    seen: float = 0.0
    """c r - y of the latest scan [%]."""
    proportional: float = 0.0
    """P of the latest scan [%]."""
    output: float = 0.0
    """u [%]."""
    frozen: bool = False
    """The integral was not advanced in the latest scan."""


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
    dead_zone: float = 0.0
    """Half width of the zone in which an error counts as none [%]."""
    gain_at_rest: float = 1.0
    """Share of the gain that is left at no error; 1 is a gain that does not grow."""

    @classmethod
    def of(cls, loop: Loop, scan: float) -> Algorithm:
        """The algorithm of a loop executed every `scan` seconds.

        Raises `InputError` for a way of holding the integral that is not known, and for incremental
        execution without integral action.
        """
        gains, t = loop.gains, loop.pv_filter
        if loop.incremental and not gains.integral:
            raise problem(
                "is incremental without integral action, which never returns PV to the setpoint",
                "give an integral time, or positional execution",
                key="controller.execution",
            )
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
            loop.windup == "conditional" and not loop.incremental,
            1.0 if loop.incremental else _release(loop.windup, gains, scan),
            loop.dead_zone,
            loop.gain_at_rest,
        )

    @property
    def is_limited(self) -> bool:
        """Something may hold the output back."""
        return any(map(math.isfinite, (self.low, self.high, self.move)))

    @property
    def reshapes(self) -> bool:
        """The error that acts is not the error itself."""
        return self.dead_zone > 0.0 or self.gain_at_rest != 1.0

    def reshaped(self, error: float) -> float:
        """The error that acts [%] for the error of a scan [%]."""
        if self.dead_zone:
            beyond = max(0.0, abs(error) - self.dead_zone)
            error = math.copysign(beyond, error)
        share = self.gain_at_rest
        return error if share == 1.0 else error * (share + (1.0 - share) * abs(error) / 100.0)

    def start(self, memory: Memory | None = None) -> Step:
        """A controller in automatic that goes on from a memory; without one it is at rest."""
        memory = memory or Memory()
        if self.reshapes or self.is_limited:
            return self._limited(memory)
        return self._free(memory)

    def _free(self, m: Memory) -> Step:
        kp, advance, keep, kick = self.proportional, self.advance, self.keep, self.kick
        b, c, smooth, sign = (
            self.setpoint_weight,
            self.derivative_weight,
            self.smooth,
            self.sign,
        )

        def step(setpoint: float, measured: float) -> float:
            filtered = m.filtered = m.filtered + smooth * (measured - m.filtered)
            m.integral += advance * (setpoint - filtered)
            seen = c * setpoint - filtered
            m.derivative = keep * m.derivative + kick * (seen - m.seen)
            m.seen = seen
            m.proportional = kp * (b * setpoint - filtered)
            m.output = m.proportional + m.integral + m.derivative
            return sign * m.output

        return step

    def _limited(self, m: Memory) -> Step:
        kp, advance, keep, kick = self.proportional, self.advance, self.keep, self.kick
        b, c, smooth, sign = (
            self.setpoint_weight,
            self.derivative_weight,
            self.smooth,
            self.sign,
        )
        low, high = self.bounds()
        move, conditional, release = self.move, self.conditional, self.release
        reshaped = self.reshaped if self.reshapes else None

        def step(setpoint: float, measured: float) -> float:
            filtered = m.filtered = m.filtered + smooth * (measured - m.filtered)
            error = setpoint - filtered
            m.proportional = kp * (b * setpoint - filtered)
            if reshaped is not None:
                acting = reshaped(error)
                m.proportional += kp * (acting - error)
                error = acting
            gained = advance * error
            seen = c * setpoint - filtered
            m.derivative = keep * m.derivative + kick * (seen - m.seen)
            m.seen = seen
            lowest, highest = max(low, m.output - move), min(high, m.output + move)
            wanted = m.proportional + m.derivative + m.integral + gained
            m.frozen = conditional and (wanted > highest if gained > 0.0 else wanted < lowest)
            if m.frozen:
                wanted -= gained
            else:
                m.integral += gained
            # The limits win over the rate where the output starts outside them.
            m.output = min(max(min(max(wanted, lowest), highest), low), high)
            if release:
                m.integral += release * (m.output - wanted)
            return sign * m.output

        return step

    def bounds(self) -> tuple[float, float]:
        """The limits as the algorithm sees them before its action [%]."""
        return (self.low, self.high) if self.sign > 0.0 else (-self.high, -self.low)

    def in_manual(self, m: Memory, wanted: float) -> Step:
        """A controller in manual: it moves its output to `wanted` [%], and follows it inside."""
        low, high = self.bounds()
        goal = min(max(self.sign * wanted, low), high)

        def step(setpoint: float, measured: float) -> float:
            m.filtered += self.smooth * (measured - m.filtered)
            error = setpoint - m.filtered
            weighted = self.setpoint_weight * setpoint - m.filtered
            m.proportional = self.proportional * (weighted + self.reshaped(error) - error)
            seen = self.derivative_weight * setpoint - m.filtered
            m.derivative = self.keep * m.derivative + self.kick * (seen - m.seen)
            m.seen = seen
            m.output = min(max(goal, m.output - self.move), m.output + self.move)
            m.integral = m.output - m.proportional - m.derivative
            return self.sign * m.output

        return step

    def takes_over(self, m: Memory, before: Algorithm, setpoint: float) -> None:
        """Go on from the memory of other settings, the output staying where it is.

        `setpoint` is that of the latest scan [%].
        """
        error = setpoint - m.filtered
        acting = self.setpoint_weight * setpoint - m.filtered + self.reshaped(error) - error
        proportional = self.proportional * acting
        if before.sign != self.sign:
            m.output, m.derivative = -m.output, 0.0
        m.derivative = m.derivative if self.kick else 0.0
        m.integral = m.output - proportional - m.derivative
        m.proportional = proportional
        m.seen = self.derivative_weight * setpoint - m.filtered


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
