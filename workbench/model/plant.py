"""The plant shapes an engineer can enter, and the transfer function each one is.

Gains are in PV units per OP unit, slopes in PV units per OP unit and per unit of time, as on the
engineer's paper; the loop's scaling to percent of span is done where the ranges are known.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import Any, ClassVar, Final

from workbench.errors import InputError, problem
from workbench.model.formula import parse_formula
from workbench.model.transfer import TransferFunction
from workbench.units import (
    MISSING,
    TIME_UNITS,
    Amount,
    check_fields,
    harmless,
    nearest,
    one_of,
    quantities,
    quantity,
)


def _gain() -> Any:
    return quantity(
        "steady change of PV for a lasting change of OP", "number", "PV/OP", nonzero=True
    )


def _lag(meaning: str = "time constant") -> Any:
    return quantity(meaning, "duration", above=0)


def _dead_time() -> Any:
    return quantity("dead time", "duration", low=0, default=Amount(0, "s"), example="6 s")


def _slope() -> Any:
    return quantity(
        "lasting rate of PV for a lasting change of OP",
        "rate",
        "PV/OP",
        nonzero=True,
        example="0.02 /s",
    )


@dataclass(frozen=True)
class _Shape:
    """What every shape shares: the constructor's check."""

    shape: ClassVar[str]
    in_percent: ClassVar[bool] = False
    """The function is per range rather than per unit."""

    def __post_init__(self) -> None:
        check_fields(self)


@dataclass(frozen=True)
class FirstOrder(_Shape):
    """gain exp(-L s) / (T s + 1)."""

    shape = "first-order"
    gain: float = _gain()
    time_constant: Amount = _lag()
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        lags = [(self.time_constant.seconds, 1.0)]
        return TransferFunction.ratio((self.gain,), lags, self.dead_time.seconds)


@dataclass(frozen=True)
class SecondOrder(_Shape):
    """gain exp(-L s) / ((T1 s + 1)(T2 s + 1))."""

    shape = "second-order"
    gain: float = _gain()
    time_constant: Amount = _lag("larger time constant")
    second_time_constant: Amount = _lag("smaller time constant")
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        lags = [(self.time_constant.seconds, 1.0), (self.second_time_constant.seconds, 1.0)]
        return TransferFunction.ratio((self.gain,), lags, self.dead_time.seconds)


@dataclass(frozen=True)
class Oscillating(_Shape):
    """gain exp(-L s) / ((P/2 pi)^2 s^2 + 2 d (P/2 pi) s + 1)."""

    shape = "oscillating"
    gain: float = _gain()
    natural_period: Amount = _lag("natural (undamped) period")
    damping: float = quantity("damping ratio", "number", above=0, below=1)
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        t = self.natural_period.seconds / (2 * math.pi)
        return TransferFunction.ratio(
            (self.gain,), [(t * t, 2 * self.damping * t, 1.0)], self.dead_time.seconds
        )


@dataclass(frozen=True)
class Lead(_Shape):
    """gain (Tz s + 1) exp(-L s) / ((T1 s + 1)(T2 s + 1)); Tz below 0 is inverse response."""

    shape = "lead"
    gain: float = _gain()
    numerator_time: Amount = quantity(
        "numerator time, negative for inverse response", "duration", example="-12 s"
    )
    time_constant: Amount = _lag("larger time constant")
    second_time_constant: Amount = _lag("smaller time constant")
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        lags = [(self.time_constant.seconds, 1.0), (self.second_time_constant.seconds, 1.0)]
        numerator = (self.gain * self.numerator_time.seconds, self.gain)
        return TransferFunction.ratio(numerator, lags, self.dead_time.seconds)


@dataclass(frozen=True)
class Integrating(_Shape):
    """slope exp(-L s) / s."""

    shape = "integrating"
    slope: Amount = _slope()
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        return TransferFunction.ratio(
            (self.slope.per_second,), [(1.0, 0.0)], self.dead_time.seconds
        )


@dataclass(frozen=True)
class IntegratingLag(_Shape):
    """slope exp(-L s) / (s (T s + 1))."""

    shape = "integrating-lag"
    slope: Amount = _slope()
    time_constant: Amount = _lag()
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        factors = [(1.0, 0.0), (self.time_constant.seconds, 1.0)]
        return TransferFunction.ratio((self.slope.per_second,), factors, self.dead_time.seconds)


@dataclass(frozen=True)
class Vessel(_Shape):
    """A level from vessel size and flow range: slope = flow/volume, in range per range.

    Where the others are in PV units per OP unit this one is in percent per percent; the loop's
    ranges turn it into units.
    """

    shape = "vessel"
    in_percent = True
    volume: float = quantity("volume between the ends of the PV range", "number", above=0)
    flow: Amount = quantity(
        "change of flow over the OP range, in the volume's unit; negative where OP empties",
        "rate",
        nonzero=True,
        example="40 /h",
    )
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """Percent per percent."""
        slope = self.flow.per_second / self.volume
        return TransferFunction.ratio((slope,), [(1.0, 0.0)], self.dead_time.seconds)


@dataclass(frozen=True)
class Unstable(_Shape):
    """gain exp(-L s) / (T s - 1)."""

    shape = "unstable"
    gain: float = _gain()
    time_constant: Amount = _lag("time constant of the growing exponential")
    dead_time: Amount = _dead_time()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        lags = [(self.time_constant.seconds, -1.0)]
        return TransferFunction.ratio((self.gain,), lags, self.dead_time.seconds)


@dataclass(frozen=True)
class EqualLags(_Shape):
    """gain exp(-L s) / (T s + 1)^n."""

    shape = "equal-lags"
    gain: float = _gain()
    time_constant: Amount = _lag("time constant of each lag")
    lags: float = quantity("number of equal lags", "number", low=1, high=20)
    dead_time: Amount = _dead_time()

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.lags != int(self.lags):
            raise problem(f"{self.lags} is not a whole number", "give 1 to 20", key="lags")

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        lags = [(self.time_constant.seconds, 1.0)] * int(self.lags)
        return TransferFunction.ratio((self.gain,), lags, self.dead_time.seconds)


@dataclass(frozen=True)
class Formula(_Shape):
    """Any formula in s, in the engineer's unit of time."""

    shape = "formula"
    formula: str = quantity("transfer function in s", "text", "PV/OP", longest=10_000)
    time_unit: str = quantity(
        "unit of s in the formulas", "choice", default="s", choices=tuple(TIME_UNITS)
    )

    def __post_init__(self) -> None:
        super().__post_init__()
        try:
            self.transfer()
        except InputError as fault:
            raise fault.at(key="formula") from None

    def transfer(self) -> TransferFunction:
        """PV units per OP unit."""
        return parse_formula(self.formula, TIME_UNITS[self.time_unit])


Shape = (
    FirstOrder
    | SecondOrder
    | Oscillating
    | Lead
    | Integrating
    | IntegratingLag
    | Vessel
    | Unstable
    | EqualLags
    | Formula
)


def read_function(text: str, time_unit: str = "s") -> Shape:
    """A shape with its values, as `first-order gain=1.8, time_constant=40 s`, or a formula in s.

    Raises `InputError` with what would mend it.
    """
    word, _, rest = text.strip().partition(" ")
    if word not in SHAPES or word == Formula.shape:
        return Formula(text, time_unit)
    known = quantities(SHAPES[word])
    values: dict[str, object] = {}
    for pair in filter(None, (p.strip() for p in rest.split(","))):
        key, equals, value = (part.strip() for part in pair.partition("="))
        if not equals or key not in known:
            meant = nearest(key, list(known))
            hint = f"did you mean {meant!r}?" if meant else f"the shape takes {one_of(list(known))}"
            raise problem(f"{harmless(pair, 40)!r} is no value of the shape {word}", hint)
        try:
            values[key] = known[key].parse(value)
        except InputError as fault:
            raise fault.at(key=key) from None
    missing = [
        field.name
        for field in fields(SHAPES[word])
        if field.default is MISSING and field.name not in values
    ]
    if missing:
        example = ", ".join(f"{name}=..." for name in missing)
        raise problem(f"the shape {word} lacks {one_of(missing)}", f"write {word} {example}")
    return SHAPES[word](**values)  # type: ignore[arg-type]


def write_function(shape: Shape) -> str:
    """The one-line text of a shape, which `read_function` reads back; a formula is itself."""
    if isinstance(shape, Formula):
        return shape.formula
    values = {name: (each, getattr(shape, name)) for name, each in quantities(type(shape)).items()}
    pairs = (f"{name}={declared.show(value)}" for name, (declared, value) in values.items())
    return f"{shape.shape} {', '.join(pairs)}"


SHAPES: Final[dict[str, type[Shape]]] = {
    "first-order": FirstOrder,
    "second-order": SecondOrder,
    "oscillating": Oscillating,
    "lead": Lead,
    "integrating": Integrating,
    "integrating-lag": IntegratingLag,
    "vessel": Vessel,
    "unstable": Unstable,
    "equal-lags": EqualLags,
    "formula": Formula,
}
"""Word used in case files and on the screen -> the shape."""
