"""The loop as mathematics: a plant, its controller, and what stands between them.

Everything here is in percent of span and seconds.  Robustness, simulation and tuning all read the
same `Loop`, so that a margin and a trend can never be about two different loops.
"""

from __future__ import annotations

from dataclasses import dataclass

from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction


@dataclass(frozen=True)
class Loop:
    """A single feedback loop in percent of span."""

    plant: TransferFunction
    """From OP [%] to PV [%]."""
    load: TransferFunction
    """From the upset, in its own unit, to PV [%]."""
    gains: Gains
    """Canonical gains; `Gains(0.0)` leaves the loop open."""
    reverse: bool = True
    """Reverse action: OP rises when PV falls."""
    scan: float | None = None
    """Execution interval [s]; `None` is an analogue controller."""
    computing_delay: float = 0.0
    """From sampling to the change of the output [s]."""
    pv_filter: float = 0.0
    """Time constant of the first-order filter before the controller [s]."""
    low: float | None = None
    """Lower output limit, as a deviation from where OP rests [%]."""
    high: float | None = None
    """Upper output limit, as a deviation from where OP rests [%]."""
    rate: float | None = None
    """Fastest change of the output [%/s]."""
    windup: str = "conditional"
    """How the integral is held at a limit: conditional, tracking or external-reset."""
    incremental: bool = False
    """The controller adds changes to its output (velocity algorithm)."""
    dead_zone: float = 0.0
    """An error up to this counts as none [% of PV span]."""
    gain_at_rest: float = 1.0
    """Share of the gain that is left at no error; below 1 the gain grows with the error."""
    bias: float = 0.0
    """Manual reset: the output at no error, less where OP rests [%]; without integral action."""
    setpoint_rate: float | None = None
    """Fastest change of the setpoint that the controller follows [% of PV span/s]."""
    setpoint_filter: float = 0.0
    """Time constant of the first-order filter of the setpoint [s]."""

    @property
    def sign(self) -> float:
        """+1 for reverse action, -1 for direct."""
        return 1.0 if self.reverse else -1.0

    def filter(self) -> TransferFunction:
        """The PV filter, 1 where there is none."""
        return TransferFunction.ratio((1.0,), [(self.pv_filter, 1.0)] if self.pv_filter else [])

    def open_loop(self) -> TransferFunction:
        """L(s) = C F G of the analogue loop; the characteristic equation is 1 + L = 0."""
        return self.sign * self.gains.from_pv() * self.filter() * self.plant

    def from_setpoint(self) -> TransferFunction:
        """PV [%] for the setpoint [%], analogue loop."""
        forward = self.sign * self.gains.from_setpoint() * self.plant
        return forward * (TransferFunction.constant(1.0) / (1.0 + self.open_loop()))

    def from_load(self) -> TransferFunction:
        """PV [%] for the upset [its own unit], analogue loop."""
        return self.load * (TransferFunction.constant(1.0) / (1.0 + self.open_loop()))

    def output_from_setpoint(self) -> TransferFunction:
        """OP [%] for the setpoint [%], analogue loop."""
        forward = self.sign * self.gains.from_setpoint()
        return forward * (TransferFunction.constant(1.0) / (1.0 + self.open_loop()))

    def output_from_load(self) -> TransferFunction:
        """OP [%] for the upset [its own unit], analogue loop."""
        back = self.sign * self.gains.from_pv() * self.filter() * self.load
        return -back * (TransferFunction.constant(1.0) / (1.0 + self.open_loop()))
