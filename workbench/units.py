"""Units, ranges, number text, and the one declaration of every quantity an engineer can set.

Inside the program time is in seconds and signals are deviations in percent of span; this module
holds the conversions made at the edges.  A quantity is declared once, with `quantity()`, on the
dataclass that keeps it; that declaration feeds the constructor's check, the case-file reader, the
entry panel and the README.
"""

from __future__ import annotations

import dataclasses
import difflib
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from types import MappingProxyType
from typing import Any, Final, Literal

from workbench.errors import InputError, Problem, problem

# --- amounts: a number with the unit it was written in -------------------------------------------

TIME_UNITS: Final = {"s": 1.0, "min": 60.0, "h": 3600.0}
"""Seconds in each unit of time."""

INTEGRAL_UNITS: Final = (*TIME_UNITS, "s/repeat", "min/repeat", "repeats/s", "repeats/min")
"""Units of an integral time, or of its inverse, as controllers show it."""

GAIN_RATE_UNITS: Final = ("1/s", "1/min")
"""Units of an integral gain in the parallel form."""

RATE_UNITS: Final = ("/s", "/min", "/h")
"""Units of a rate of change, per unit of time."""

_SMALLEST: Final = 1e-9
_LARGEST: Final = 1e9
"""Of an amount other than 0."""

_AMOUNT = re.compile(r"\s*([-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)\s*([A-Za-z/1]*)\s*\Z")


@dataclass(frozen=True)
class Amount:
    """A number and the unit it was written in, so that it is shown as the engineer wrote it."""

    value: float
    unit: str

    def __str__(self) -> str:
        return f"{plain(self.value)} {self.unit}"

    @property
    def seconds(self) -> float:
        """The amount as a time [s]; a rate of repeats is turned over.

        Raises `ModelError` nowhere: zero repeats are refused when the amount is read.
        """
        if self.unit in TIME_UNITS:
            return self.value * TIME_UNITS[self.unit]
        numerator, _, denominator = self.unit.partition("/")
        if denominator == "repeat":
            return self.value * TIME_UNITS[numerator]
        return TIME_UNITS[denominator] / self.value

    @property
    def per_second(self) -> float:
        """The amount as a rate or a gain per second [1/s]."""
        return self.value / TIME_UNITS[self.unit.rpartition("/")[2]]

    def with_seconds(self, seconds: float) -> Amount:
        """The amount in this same unit that equals `seconds` [s]."""
        if self.unit in TIME_UNITS:
            return Amount(seconds / TIME_UNITS[self.unit], self.unit)
        numerator, _, denominator = self.unit.partition("/")
        if denominator == "repeat":
            return Amount(seconds / TIME_UNITS[numerator], self.unit)
        return Amount(TIME_UNITS[denominator] / seconds, self.unit)


def read_amount(text: str, units: tuple[str, ...], example: str) -> Amount:
    """A number followed by one of `units`; `InputError` in words otherwise."""
    match = _AMOUNT.match(text)
    if match is None:
        if re.match(r"\s*[-+]?\d+,\d+", text):
            raise problem(f"{text!r} has a decimal comma", f'write a point, like "{example}"')
        raise problem(f"{text!r} is not a number with its unit", f'write it like "{example}"')
    number, unit = float(match[1]), match[2]
    if unit not in units:
        named = f"the unit {unit!r} is not known here" if unit else f"{text.strip()!r} has no unit"
        raise problem(named, f'use {one_of(units)}, like "{example}"')
    if number and not _SMALLEST <= abs(number) <= _LARGEST:
        raise problem(
            f"{harmless(text, 40)!r} is beyond every plant",
            f"give a number between {_SMALLEST:g} and {_LARGEST:g}",
        )
    return Amount(number, unit)


def one_of(words: tuple[str, ...] | list[str]) -> str:
    """`a, b or c`."""
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " or " + words[-1]


def nearest(word: str, known: tuple[str, ...] | list[str]) -> str:
    """The known spelling nearest to `word`, or nothing."""
    found = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    return found[0] if found else ""


# --- number text ---------------------------------------------------------------------------------


def plain(value: float) -> str:
    """A number as a person would type it: shortest form that reads back the same."""
    if abs(value) < 1e15 and value == int(value):
        return str(int(value))
    return repr(float(value))


def rounded(value: float, digits: int = 4) -> float:
    """The value to so many significant digits: what a person would type into a controller."""
    return float(f"{value:.{digits}g}")


def text(value: float | None, unit: str = "", digits: int = 4) -> str:
    """A figure for reading: `digits` significant digits, never a bare exponent where avoidable.

    >>> text(161.23456, "degC s")
    '161.2 degC s'
    >>> text(None, "s")
    'none'
    """
    if value is None:
        return "none"
    if value == 0:
        shown = "0"
    elif 1e-4 <= abs(value) < 1e7:
        decimals = max(0, digits - 1 - math.floor(math.log10(abs(value))))
        shown = f"{value:.{decimals}f}"
        if "." in shown:
            shown = shown.rstrip("0").rstrip(".")
    else:
        shown = f"{value:.{digits - 1}e}"
    return f"{shown} {unit}" if unit else shown


def time_text(seconds: float | None, digits: int = 4) -> str:
    """A time in the unit that reads best.

    >>> time_text(90.0)
    '90 s'
    >>> time_text(1800.0)
    '30 min'
    """
    if seconds is None:
        return "none"
    if abs(seconds) < 600:
        return text(seconds, "s", digits)
    if abs(seconds) < 4 * 3600:
        return text(seconds / 60, "min", digits)
    return text(seconds / 3600, "h", digits)


def harmless(raw: str, limit: int = 200) -> str:
    """Text from a file, safe to send to a terminal: no control, escape or direction characters."""
    shown = "".join(c if c.isprintable() else "?" for c in raw[: limit + 1])
    return shown if len(raw) <= limit else shown[: limit - 3] + "..."


# --- ranges --------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Range:
    """An instrument range in engineering units."""

    low: float
    high: float

    @property
    def span(self) -> float:
        """High less low."""
        return self.high - self.low

    def percent(self, change: float) -> float:
        """A change in engineering units as a change in percent of span."""
        return 100.0 * change / self.span

    def units(self, percent: float) -> float:
        """A change in percent of span as a change in engineering units."""
        return percent * self.span / 100.0


# --- quantities ----------------------------------------------------------------------------------

Kind = Literal[
    "number", "text", "flag", "choice", "duration", "rate", "integral", "derivative", "filter"
]
"""How a quantity is written:

number      a plain number, in the unit declared
text        words
flag        true or false
choice      one of the declared words
duration    a number with s, min or h
rate        a number with /s, /min or /h
integral    an integral time or rate with its unit, or "none"
derivative  a derivative time with its unit, or "none"
filter      a plain number N, a duration, or "none"
"""

Value = float | str | bool | Amount | None


@dataclass(frozen=True)
class Quantity:
    """What one key means, how it is written and what it accepts."""

    meaning: str
    kind: Kind
    unit: str = ""
    """`PV`, `OP` and combinations stand for the loop's own units; shown beside the entry."""
    low: float | None = None
    high: float | None = None
    above: float | None = None
    """Exclusive lower limit."""
    below: float | None = None
    """Exclusive upper limit."""
    nonzero: bool = False
    choices: tuple[str, ...] = ()
    example: str = ""
    longest: int = 200

    def read(self, raw: object) -> Value:
        """A value as TOML gives it, checked.  Raises `InputError` (no key or line yet)."""
        if self.kind == "flag":
            if isinstance(raw, bool):
                return raw
            raise problem(f"must be true or false, not {shown(raw)}", "write true or false")
        if self.kind in ("text", "choice"):
            return self._read_words(raw)
        if self.kind == "number" or (self.kind == "filter" and not isinstance(raw, str)):
            return self._read_number(raw)
        if not isinstance(raw, str):
            raise problem(
                f"must be text with its unit, not {shown(raw)}",
                f'write it like "{self._example}"',
            )
        if self.kind in ("integral", "derivative", "filter") and raw.strip() == "none":
            return None
        amount = read_amount(raw, self._amount_units, self._example)
        self._check_limits(amount.value)
        return amount

    def parse(self, typed: str) -> Value:
        """A value as it is typed in a field or after `--set key=`, checked."""
        words = typed.strip()
        if self.kind == "flag":
            if words in ("true", "yes", "false", "no"):
                return words in ("true", "yes")
            raise problem(f"must be true or false, not {shown(words)}", "write true or false")
        if len(words) >= 2 and words[0] == words[-1] and words[0] in "\"'":
            words = words[1:-1]
        if self.kind in ("number", "filter"):
            try:
                return self._read_number(float(words.replace("_", "?")))
            except ValueError:
                if self.kind == "number":
                    if re.fullmatch(r"[-+]?\d+,\d+", words):
                        raise problem(
                            f"{shown(words)} has a decimal comma", "write a point"
                        ) from None
                    return self._read_number(words)
        return self.read(words)

    def write(self, value: Value) -> str | float | bool:
        """The value as TOML keeps it."""
        if value is None:
            return "none"
        if isinstance(value, Amount):
            return str(value)
        if isinstance(value, bool | str):
            return value
        return int(value) if self.kind == "filter" and float(value).is_integer() else float(value)

    def show(self, value: Value) -> str:
        """The value as it is shown for editing."""
        if isinstance(value, bool):
            return "true" if value else "false"
        if isinstance(value, int | float):
            return plain(value)
        return "none" if value is None else str(value)

    @property
    def _amount_units(self) -> tuple[str, ...]:
        match self.kind:
            case "rate":
                return RATE_UNITS
            case "integral":
                return (*INTEGRAL_UNITS, *GAIN_RATE_UNITS)
            case _:
                return tuple(TIME_UNITS)

    @property
    def _example(self) -> str:
        return self.example or {"rate": "2 /s", "integral": "32 s"}.get(self.kind, "40 s")

    def _read_words(self, raw: object) -> str:
        if not isinstance(raw, str):
            raise problem(f"must be text, not {shown(raw)}", "put it in quotes")
        if self.kind == "choice" and raw not in self.choices:
            meant = nearest(raw, self.choices)
            hint = f"; did you mean {meant!r}?" if meant else ""
            raise problem(f"{harmless(raw)!r} is not accepted", f"use {one_of(self.choices)}{hint}")
        if len(raw) > self.longest:
            raise problem(f"has {len(raw)} characters", f"at most {self.longest} are accepted")
        return raw

    def _read_number(self, raw: object) -> float:
        if isinstance(raw, bool) or not isinstance(raw, int | float):
            raise problem(f"must be a number, not {shown(raw)}", self._accepted)
        try:
            value = float(raw)
        except OverflowError:
            value = math.inf
        if not math.isfinite(value):
            raise problem(f"must be a finite number, not {shown(raw)}", self._accepted)
        self._check_limits(value)
        return value

    def _check_limits(self, value: float) -> None:
        too_low = self.low is not None and value < self.low
        too_high = self.high is not None and value > self.high
        not_above = self.above is not None and value <= self.above
        not_below = self.below is not None and value >= self.below
        if too_low or too_high or not_above or not_below or (self.nonzero and value == 0):
            raise problem(f"{plain(value)} is outside what is accepted", self._accepted)

    @property
    def _accepted(self) -> str:
        """The limits in words."""
        bounds = [
            f"{word} {plain(limit)}"
            for word, limit in (
                ("at least", self.low),
                ("above", self.above),
                ("at most", self.high),
                ("below", self.below),
            )
            if limit is not None
        ]
        if self.nonzero:
            bounds.append("not 0")
        return "give a number" + (" " + " and ".join(bounds) if bounds else "")


def shown(raw: object) -> str:
    """A value from a file inside a message: short and harmless."""
    if isinstance(raw, bool):
        return "true" if raw else "false"
    if isinstance(raw, str):
        return repr(harmless(raw, 40))
    if isinstance(raw, dict):
        return "a table"
    if isinstance(raw, list):
        return "a list"
    return harmless(str(raw), 40)


MISSING: Final = dataclasses.MISSING


def quantity(
    meaning: str,
    kind: Kind = "number",
    unit: str = "",
    *,
    default: Value | dataclasses._MISSING_TYPE = MISSING,
    low: float | None = None,
    high: float | None = None,
    above: float | None = None,
    below: float | None = None,
    nonzero: bool = False,
    choices: tuple[str, ...] = (),
    example: str = "",
    longest: int = 200,
) -> Any:
    """Declare a dataclass field with its meaning, unit and limits.

    A field whose default is `MISSING` must be given.  A default of `None` means "not there".
    """
    declared = Quantity(
        meaning, kind, unit, low, high, above, below, nonzero, choices, example, longest
    )
    return dataclasses.field(default=default, metadata={"quantity": declared})


def quantities(table: type) -> Mapping[str, Quantity]:
    """The declared quantities of a dataclass, in order."""
    return _declared(table)


@cache
def _declared(table: type) -> Mapping[str, Quantity]:
    return MappingProxyType(
        {
            field.name: field.metadata["quantity"]
            for field in dataclasses.fields(table)
            if "quantity" in field.metadata
        }
    )


def check_fields(table: object) -> None:
    """A constructor's check: every declared field of a dataclass holds what it accepts.

    Call from `__post_init__`.  Raises `InputError` with the field's name as key.
    """
    faults: list[Problem] = []
    for name, declared in quantities(type(table)).items():
        value = getattr(table, name)
        if value is None:
            continue
        try:
            declared.read(declared.write(value))
        except InputError as fault:
            faults.extend(fault.at(key=name).problems)
    if faults:
        raise InputError(faults)


@dataclass(frozen=True)
class Figure:
    """A figure that may not exist: a number, or `None` with the reason in words."""

    value: float | None
    reason: str = ""

    @classmethod
    def of(cls, value: float) -> Figure:
        """The figure of a computation, refusing what is not finite."""
        if not math.isfinite(value):
            raise ValueError(f"a figure must be finite, not {value}; give None and the reason")
        return cls(float(value))

    def times(self, factor: float) -> Figure:
        """The figure in another unit."""
        return self if self.value is None else Figure(self.value * factor)


@dataclass(frozen=True)
class Note:
    """A remark that travels with a result: `info`, or `caution` where someone should look."""

    severity: Literal["info", "caution"]
    text: str
