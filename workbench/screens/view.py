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

    def zoomed(self, share: float, about: float | None = None) -> View:
        """A share of what is shown, about its middle or another place; above 1 it is more.

        >>> View.whole(0.0, 100.0).zoomed(0.5)
        View(start=0.0, end=100.0, low=25.0, high=75.0)
        """
        middle = (self.low + self.high) / 2 if about is None else about
        half = (self.high - self.low) / 2 * share
        half = max(half, _NARROWEST * (self.end - self.start))
        return replace(self, low=middle - half, high=middle + half)._inside()

    def panned(self, share: float) -> View:
        """Later by a share of what is shown, earlier where it is below 0.

        >>> View(0.0, 100.0, 0.0, 50.0).panned(0.5)
        View(start=0.0, end=100.0, low=25.0, high=75.0)
        """
        step = share * (self.high - self.low)
        return replace(self, low=self.low + step, high=self.high + step)._inside()

    def showing(self, place: float) -> View:
        """Moved no further than it takes to show a place.

        >>> View(0.0, 100.0, 0.0, 50.0).showing(60.0)
        View(start=0.0, end=100.0, low=10.0, high=60.0)
        """
        shift = max(place - self.high, 0.0) - max(self.low - place, 0.0)
        return replace(self, low=self.low + shift, high=self.high + shift)._inside()

    def within(self, start: float, end: float) -> View:
        """The same view of another whole; all of it where the whole was shown."""
        if self.is_whole:
            return View.whole(start, end)
        return replace(self, start=start, end=end)._inside()

    def grown(self, end: float) -> View:
        """The same view of a record that grew; the whole of it where the whole was shown."""
        return self.within(self.start, end)

    def _inside(self) -> View:
        low, high = self.low, self.high
        if high - low >= self.end - self.start:
            return View.whole(self.start, self.end)
        shift = max(self.start - low, 0.0) - max(high - self.end, 0.0)
        return replace(self, low=low + shift, high=high + shift)
