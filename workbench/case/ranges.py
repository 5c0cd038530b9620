"""What tables with a range share: the span, where the signal rests, and the limits inside it."""

from __future__ import annotations

import math
from collections.abc import Iterator

from workbench.errors import Problem
from workbench.units import Range, plain


class Ranged:
    """A signal with a range and an operating point, in its own unit."""

    low: float
    high: float
    start: float | None

    @property
    def range(self) -> Range:
        """From 0 to 100 % of span."""
        return Range(self.low, self.high)

    @property
    def rest(self) -> float:
        """Where the signal rests before the scenario."""
        return self.low + self.range.span / 2 if self.start is None else self.start

    def range_faults(self) -> Iterator[Problem]:
        """What is wrong with the range itself."""
        low, high = self.low, self.high
        if low >= high:
            what = "is the same as low" if low == high else f"is below low, {plain(low)}"
            yield Problem(f"{plain(high)} {what}", "give a high above low", "high")
        elif not math.isfinite(high - low):
            yield Problem("makes the span too large for a number", "give a smaller range", "high")


class Limited(Ranged):
    """A signal that is held inside limits within its range."""

    min: float | None
    max: float | None

    def limit_faults(self) -> Iterator[Problem]:
        """What range, limits and operating point do not say together."""
        yield from self.range_faults()
        yield from outside("min", self.min, self.low, self.high, "the range")
        yield from outside("max", self.max, self.low, self.high, "the range")
        least = self.low if self.min is None else self.min
        most = self.high if self.max is None else self.max
        if self.min is not None and self.max is not None and self.min >= self.max:
            yield Problem(
                f"{plain(self.max)} is not above min, {plain(self.min)}", "give a larger max", "max"
            )
        elif self.start is not None:
            yield from outside("start", self.start, least, most, "the limits")
        elif self.low < self.high and not least <= self.rest <= most:
            yield Problem(
                f"is left out, and the middle of the range, {plain(self.rest)}, is outside "
                f"the limits {plain(least)} to {plain(most)}",
                "give the operating point",
                "start",
            )


def outside(
    key: str, value: float | None, low: float, high: float, where: str
) -> Iterator[Problem]:
    """A value that is not where it belongs."""
    # A reversed range is a fault of its own, and then says nothing about the value.
    if value is not None and low < high and not low <= value <= high:
        within = f"{plain(low)} to {plain(high)}"
        yield Problem(f"{plain(value)} is outside {where} {within}", "give a value inside", key)
