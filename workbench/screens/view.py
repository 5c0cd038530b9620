"""Which stretch of time a picture shows: in and out, earlier and later."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

_NARROWEST: Final = 0.002
"""Share of the whole below which a view does not get."""


@dataclass(frozen=True)
class View:
    """A stretch of a record [s]."""

    start: float
    end: float
    """Of the whole record."""
    low: float
    high: float
    """Of what is shown."""

    @classmethod
    def whole(cls, start: float, end: float) -> View:
        """All of it."""
        return cls(start, end, start, end)

    @property
    def is_whole(self) -> bool:
        """Whether nothing is out of view."""
        return self.low <= self.start and self.high >= self.end

    def zoomed(self, share: float) -> View:
        """A share of what is shown, about its middle; above 1 it is more.

        >>> View.whole(0.0, 100.0).zoomed(0.5)
        View(start=0.0, end=100.0, low=25.0, high=75.0)
        """
        middle, half = (self.low + self.high) / 2, (self.high - self.low) / 2 * share
        half = max(half, _NARROWEST * (self.end - self.start))
        return replace(self, low=middle - half, high=middle + half)._inside()

    def panned(self, share: float) -> View:
        """Later by a share of what is shown, earlier where it is below 0.

        >>> View(0.0, 100.0, 0.0, 50.0).panned(0.5)
        View(start=0.0, end=100.0, low=25.0, high=75.0)
        """
        step = share * (self.high - self.low)
        return replace(self, low=self.low + step, high=self.high + step)._inside()

    def grown(self, end: float) -> View:
        """The same view of a record that grew; the whole of it where the whole was shown."""
        if self.is_whole:
            return View.whole(self.start, end)
        return replace(self, end=end)._inside()

    def _inside(self) -> View:
        low, high = self.low, self.high
        if high - low >= self.end - self.start:
            return View.whole(self.start, self.end)
        shift = max(self.start - low, 0.0) - max(high - self.end, 0.0)
        return replace(self, low=low + shift, high=high + shift)
