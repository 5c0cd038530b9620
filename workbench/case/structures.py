"""The tables of a case for what is built round its loop: compensation, feedforward, an inner loop.

Each is there as soon as its first key is; a case without them is a single loop.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from workbench.case.ranges import Limited
from workbench.errors import InputError, Problem
from workbench.model.feedforward import Feedforward
from workbench.model.formula import parse_formula
from workbench.model.pid import Controller
from workbench.model.transfer import TransferFunction
from workbench.units import TIME_UNITS, Amount, check_fields, quantities, quantity


class _Extra:
    """A table that is not there as long as its first key is not."""

    def __post_init__(self) -> None:
        check_fields(self)
        faults = list(self._faults() if self.is_there else self._beside())
        if faults:
            raise InputError(faults)

    @property
    def is_there(self) -> bool:
        """Whether the loop has this."""
        return getattr(self, next(iter(quantities(type(self))))) is not None

    def _faults(self) -> Iterator[Problem]:
        yield from ()

    def _beside(self) -> Iterator[Problem]:
        """Keys that mean nothing while the first one is missing."""
        first, *others = quantities(type(self))
        defaults = type(self)
        for key in others:
            if getattr(self, key) != getattr(defaults, key):
                yield Problem(f"has no {first} to go with", f"give {first} too", key)


def _formula(text: str | None, unit: str, key: str) -> Iterator[Problem]:
    try:
        if text is not None:
            parse_formula(text, TIME_UNITS[unit])
    except InputError as fault:
        yield from fault.at(key=key).problems


@dataclass(frozen=True)
class CompensationTable(_Extra):
    """Dead-time compensation: the plant as the controller knows it."""

    model: str | None = quantity(
        "formula of the plant that the dead-time compensation works with; left out: it has none",
        "text",
        "PV/OP",
        default=None,
        example="1.8 exp(-6 s)/(40 s + 1)",
        longest=10_000,
    )
    time_unit: str = quantity(
        "unit of s in that formula", "choice", default="s", choices=tuple(TIME_UNITS)
    )

    def transfer(self) -> TransferFunction:
        """From OP to PV [PV unit per OP unit]; for a table that is there."""
        assert self.model is not None
        return parse_formula(self.model, TIME_UNITS[self.time_unit])

    def _faults(self) -> Iterator[Problem]:
        yield from _formula(self.model, self.time_unit, "model")


@dataclass(frozen=True)
class FeedforwardTable(_Extra):
    """Feedforward from the measured upset to OP."""

    gain: float | None = quantity(
        "what is added to OP for an upset of 1; left out: there is no feedforward",
        "number",
        "OP/upset",
        default=None,
    )
    lead: Amount = quantity("lead time", "duration", low=0, default=Amount(0, "s"), example="40 s")
    lag: Amount = quantity("lag time", "duration", low=0, default=Amount(0, "s"), example="10 s")
    dead_time: Amount = quantity(
        "dead time", "duration", low=0, default=Amount(0, "s"), example="5 s"
    )

    def feedforward(self) -> Feedforward:
        """From the upset to OP [OP unit per unit of the upset]; for a table that is there."""
        assert self.gain is not None
        return Feedforward(self.gain, self.lead.seconds, self.lag.seconds, self.dead_time.seconds)

    def _faults(self) -> Iterator[Problem]:
        try:
            self.feedforward()
        except InputError as fault:
            yield from fault.problems


@dataclass(frozen=True)
class InnerTable(Limited, _Extra):
    """The inner loop of a cascade: OP is its setpoint, and the plant begins at its PV."""

    plant: str | None = quantity(
        "formula from the inner output to the inner PV, which is in OP units; left out: OP moves"
        " the plant itself",
        "text",
        "OP/inner OP",
        default=None,
        example="0.9 exp(-1 s)/(4 s + 1)",
        longest=10_000,
    )
    time_unit: str = quantity(
        "unit of s in that formula", "choice", default="s", choices=tuple(TIME_UNITS)
    )
    mode: str = quantity(
        "cascade: its setpoint is OP; automatic: it keeps its own; manual: its output stays",
        "choice",
        default="cascade",
        choices=("cascade", "automatic", "manual"),
    )
    form: str = quantity(
        "algorithm form of the inner controller",
        "choice",
        default="ideal",
        choices=("ideal", "series", "parallel"),
    )
    gain: float = quantity(
        "gain of the inner controller, percent of its output per percent of the OP span",
        "number",
        "%/%",
        low=0,
        default=1.0,
    )
    integral: Amount | None = quantity(
        "its integral time; in the parallel form its integral gain",
        "integral",
        above=0,
        default=None,
        example="5 s",
    )
    derivative: Amount | None = quantity(
        "its derivative time; in the parallel form its derivative gain",
        "derivative",
        low=0,
        default=None,
        example="1 s",
    )
    derivative_filter: float | Amount | None = quantity(
        "its derivative filter: N (filter time = derivative time / N), a filter time, or none",
        "filter",
        above=0,
        default=10.0,
        example="0.4 s",
    )
    setpoint_weight: float = quantity(
        "weight of the setpoint in its proportional part", "number", low=0, high=1, default=1.0
    )
    derivative_on: str = quantity(
        "what its derivative acts on", "choice", default="pv", choices=("pv", "error")
    )
    action: str = quantity(
        "reverse: its output rises when its PV falls; direct: it rises with its PV",
        "choice",
        default="reverse",
        choices=("reverse", "direct"),
    )
    scan: Amount | None = quantity(
        "its execution interval; left out: that of the controller",
        "duration",
        above=0,
        default=None,
        example="0.5 s",
    )
    windup: str = quantity(
        "how its integral is held at a limit",
        "choice",
        default="conditional",
        choices=("conditional", "tracking", "external-reset"),
    )
    low: float = quantity("inner output at 0 % of span", "number", "inner OP", default=0.0)
    high: float = quantity("inner output at 100 % of span", "number", "inner OP", default=100.0)
    start: float | None = quantity(
        "inner output at the operating point; left out: the middle of its range",
        "number",
        "inner OP",
        default=None,
    )
    min: float | None = quantity("its lower limit", "number", "inner OP", default=None)
    max: float | None = quantity("its upper limit", "number", "inner OP", default=None)
    rate: Amount | None = quantity(
        "its fastest change", "rate", "inner OP", above=0, default=None, example="5 /s"
    )

    def transfer(self) -> TransferFunction:
        """From the inner output to the inner PV [OP unit per inner OP unit]."""
        assert self.plant is not None
        return parse_formula(self.plant, TIME_UNITS[self.time_unit])

    def controller(self) -> Controller:
        """The inner controller; for a table that is there."""
        return Controller(
            form=self.form,
            gain=self.gain,
            integral=self.integral,
            derivative=self.derivative,
            derivative_filter=self.derivative_filter,
            setpoint_weight=self.setpoint_weight,
            derivative_on=self.derivative_on,
            action=self.action,
            scan=self.scan,
            windup=self.windup,
        )

    def _faults(self) -> Iterator[Problem]:
        yield from _formula(self.plant, self.time_unit, "plant")
        try:
            self.controller()
        except InputError as fault:
            yield from fault.problems
        yield from self.limit_faults()
