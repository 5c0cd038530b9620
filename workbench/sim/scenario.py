"""What happens to the loop: setpoint moves, upsets, modes, a plant that changes, and noise."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Final

from workbench.errors import InputError, Problem
from workbench.model.pid import Controller, Gains
from workbench.sim.signals import Ramp, Signal, Sine, Step
from workbench.units import Amount, check_fields, quantities, quantity

NEW_SETTINGS: Final = {
    "new_gain": "gain",
    "new_integral": "integral",
    "new_derivative": "derivative",
}
"""Keys of settings that change on the way, and what they are of the controller."""


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
    setpoint_ramp: Amount | None = quantity(
        "time in which the setpoint moves; left out: at once",
        "duration",
        low=0,
        default=None,
        example="120 s",
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
    load_shape: str = quantity(
        "course of the upset: a step, a ramp up to the step, a pulse, a sine, or a record",
        "choice",
        default="step",
        choices=("step", "ramp", "pulse", "sine", "record"),
    )
    load_time: Amount | None = quantity(
        "time of the ramp, width of the pulse, period of the sine",
        "duration",
        above=0,
        default=None,
        example="120 s",
    )
    load_record: str = quantity(
        "recorded upset: seconds after load_at and values, in shares of the load step",
        "text",
        default="",
        example="0:0.2 60:1 180:-0.4 300:0",
        longest=20_000,
    )
    load_file: str = quantity(
        "CSV record of the upset, beside the case file; its changes from the first row on act from"
        " load_at on",
        "text",
        default="",
        example="feed.csv",
    )
    load_column: str = quantity(
        "heading of its column, in the unit of the load path's input", "text", default=""
    )
    load_sha256: str = quantity("SHA-256 of that file", "text", default="")
    manual_at: Amount | None = quantity(
        "when the controller is put in manual", "duration", low=0, default=None, example="300 s"
    )
    manual_output: float | None = quantity(
        "output that the operator then gives; left out: as it is", "number", "OP", default=None
    )
    automatic_at: Amount | None = quantity(
        "when it is put back in automatic", "duration", low=0, default=None, example="600 s"
    )
    change_at: Amount | None = quantity(
        "when the plant changes", "duration", low=0, default=None, example="600 s"
    )
    gain_factor: float = quantity(
        "what the plant's gain is then multiplied by", "number", low=0, default=1.0
    )
    dead_time_factor: float = quantity(
        "what its dead time is then multiplied by", "number", low=0, default=1.0
    )
    settings_at: Amount | None = quantity(
        "when the controller gets other settings, in automatic",
        "duration",
        low=0,
        default=None,
        example="600 s",
    )
    new_gain: float | None = quantity(
        "its gain from then on; left out: as it is", "number", "%/%", low=0, default=None
    )
    new_integral: str = quantity(
        "its integral setting from then on, or none; left out: as it is",
        "text",
        default="",
        example="20 s",
    )
    new_derivative: str = quantity(
        "its derivative setting from then on, or none; left out: as it is",
        "text",
        default="",
        example="3 s",
    )
    inner_mode_at: Amount | None = quantity(
        "when the inner loop of a cascade is put in another mode",
        "duration",
        low=0,
        default=None,
        example="300 s",
    )
    inner_mode: str = quantity(
        "the mode that it then gets",
        "choice",
        default="cascade",
        choices=("cascade", "automatic", "manual"),
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
        faults = list(self._faults())
        if faults:
            raise InputError(faults)

    def _faults(self) -> Iterator[Problem]:
        for name in ("setpoint_at", "load_at"):
            at = getattr(self, name)
            if self.until and at is not None and at.seconds >= self.until.seconds:
                yield Problem(
                    f"{at} is not before the end at {self.until}", "give an earlier time", name
                )
        if self.load_shape in ("ramp", "pulse", "sine") and self.load_time is None:
            yield Problem(f"is missing for a {self.load_shape}", "give it", "load_time")
        if self.load_shape == "record" or self.load_record:
            try:
                if not self.recorded_load() and not self.load_file:
                    mend = "give it, or load_file and load_column"
                    yield Problem("is missing for a record", mend, "load_record")
            except ValueError:
                mend = "give rising seconds and values like 0:0.2 60:1 180:0"
                yield Problem("cannot be read", mend, "load_record")
        if self.automatic_at is not None and (
            self.manual_at is None or self.automatic_at.seconds <= self.manual_at.seconds
        ):
            mend = "give manual_at before it, or leave it out"
            yield Problem("does not come after manual", mend, "automatic_at")
        yield from self._file_faults()
        yield from self._settings_faults()

    def _file_faults(self) -> Iterator[Problem]:
        """What a recorded upset in a file lacks."""
        if not self.load_file and self.load_sha256:
            yield Problem("has no load_file to go with", "give load_file too", "load_sha256")
        if self.load_file and not self.load_column:
            yield Problem("is missing for a file", "give the column's heading", "load_column")
        if self.load_file and self.load_record:
            yield Problem("is given beside load_file", "keep one of them", "load_record")

    def _settings_faults(self) -> Iterator[Problem]:
        """What the new settings lack, or do not say by themselves."""
        given = [key for key in NEW_SETTINGS if getattr(self, key) not in (None, "")]
        for key in given:
            if self.settings_at is None:
                yield Problem("has no time to begin at", "give settings_at too", key)
        for key in ("new_integral", "new_derivative"):
            try:
                self.new_amount(key)
            except InputError as fault:
                yield from fault.at(key=key).problems

    def new_amount(self, key: str) -> Amount | None:
        """The new integral or derivative setting that is given; `None` for none.

        Raises `InputError` where it cannot be read.
        """
        words = getattr(self, key)
        found = quantities(Controller)[NEW_SETTINGS[key]].read(words) if words else None
        assert found is None or isinstance(found, Amount)
        return found

    def recorded_load(self) -> tuple[tuple[float, float], ...]:
        """Seconds after `load_at` and shares of the load step.  Raises `ValueError`."""
        pairs = [pair.partition(":") for pair in self.load_record.split()]
        found = tuple((float(time), float(value)) for time, _, value in pairs)
        times = [time for time, _ in found]
        if times != sorted(set(times)) or any(not 0 <= time < 1e9 for time in times):
            raise ValueError(self.load_record)
        if any(not abs(value) < 1e9 for _, value in found):
            raise ValueError(self.load_record)
        return found


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
    setpoint_ramp: float = 0.0
    """Time in which the setpoint moves [s]."""
    load_shape: str = "step"
    """step, ramp, pulse, sine or record."""
    load_time: float = 0.0
    """Of the ramp, the pulse, or the sine's period [s]."""
    load_record: tuple[tuple[float, float], ...] = ()
    """Seconds after `load_at`, and shares of the load step held from there on."""
    manual_at: float | None = None
    """[s]"""
    manual_output: float | None = None
    """[% of OP span], a deviation; `None` leaves it as it is."""
    automatic_at: float | None = None
    """[s]"""
    change_at: float | None = None
    """When the plant changes [s]; it does at the first scan not before."""
    gain_factor: float = 1.0
    dead_time_factor: float = 1.0
    settings_at: float | None = None
    """When the controller gets other settings [s]."""
    settings: Gains | None = None
    """Those settings."""
    inner_mode_at: float | None = None
    """When the inner loop of a cascade gets another mode [s]."""
    inner_mode: str = "cascade"
    """That mode."""

    @property
    def setpoint(self) -> Signal:
        """The setpoint over time [%]."""
        if not self.setpoint_ramp:
            return (Step(self.setpoint_step, self.setpoint_at),)
        slope, end = self.setpoint_step / self.setpoint_ramp, self.setpoint_at + self.setpoint_ramp
        return Ramp(slope, self.setpoint_at), Ramp(-slope, end)

    @property
    def load(self) -> Signal:
        """The upset over time, in the unit that the load path takes."""
        size, at, time = self.load_step, self.load_at, self.load_time
        if self.load_shape == "ramp":
            return Ramp(size / time, at), Ramp(-size / time, at + time)
        if self.load_shape == "pulse":
            return Step(size, at), Step(-size, at + time)
        if self.load_shape == "sine":
            return (Sine(size, time, at),)
        if self.load_shape == "record":
            shares = [0.0, *(share for _, share in self.load_record)]
            return tuple(
                Step(size * (share - before), at + time)
                for (time, share), before in zip(self.load_record, shares, strict=False)
            )
        return (Step(size, at),)

    @property
    def are_steps(self) -> bool:
        """Nothing happens but one step of each, so that the analogue loop stays one and linear."""
        return (
            not self.setpoint_ramp
            and self.load_shape == "step"
            and self.manual_at is self.change_at is self.settings_at is None
        )
