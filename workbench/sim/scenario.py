"""What happens to the loop: a setpoint move and an upset, and the noise on the measurement."""

from __future__ import annotations

from dataclasses import dataclass

from workbench.errors import problem
from workbench.units import Amount, check_fields, quantity


@dataclass(frozen=True)
class Scenario:
    """The events of a prediction, in the loop's own engineering units.

    With neither step given, the setpoint moves by 5 % of the PV span at the start and the load by
    5 % of the OP span half way.
    """

    setpoint_step: float | None = quantity("setpoint step", "number", "PV", default=None)
    setpoint_at: Amount = quantity(
        "time of the setpoint step", "duration", low=0, default=Amount(0, "s"), example="60 s"
    )
    load_step: float | None = quantity(
        "load step, at the plant's input or in the unit of the load path's input",
        "number",
        "OP",
        default=None,
    )
    load_at: Amount | None = quantity(
        "time of the load step; left out: 0 s, or half way when no step was given",
        "duration",
        low=0,
        default=None,
        example="900 s",
    )
    until: Amount | None = quantity(
        "end of the prediction; left out: long enough for both to settle",
        "duration",
        above=0,
        default=None,
        example="1800 s",
    )

    def __post_init__(self) -> None:
        check_fields(self)
        if self.until is None:
            return
        for name in ("setpoint_at", "load_at"):
            at = getattr(self, name)
            if at is not None and at.seconds >= self.until.seconds:
                raise problem(
                    f"{at} is not before the end at {self.until}", "give an earlier time", key=name
                )


@dataclass(frozen=True)
class Events:
    """A scenario made definite: percent of span and seconds, as the engine takes it."""

    setpoint_step: float
    """[% of PV span]"""
    setpoint_at: float
    """[s]"""
    load_step: float
    """In the unit that the load path takes."""
    load_at: float
    """[s]"""
    until: float
    """[s]"""
    noise: float = 0.0
    """Standard deviation of the measurement noise [% of PV span]."""
    seed: int = 0
