"""Long work: what is going on, how far it is, how long it has taken, and how to end it."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Final

if TYPE_CHECKING:
    from textual.timer import Timer

    from workbench.screens.page import Page

EVERY_S: Final = 1.0
"""Time between two words on long work: each costs a slow line a hundred bytes [s]."""


class Waiting:
    """The message line of a page while something takes long."""

    def __init__(self, page: Page) -> None:
        self._page = page
        self._doing, self._since = "", 0.0
        self._reached = ""
        self._timer: Timer | None = None

    @property
    def goes_on(self) -> bool:
        """Something is being waited for."""
        return bool(self._doing)

    def begin(self, doing: str) -> None:
        """Say what begins; from now on the time is told."""
        self.end()
        self._doing, self._since = doing, time.monotonic()
        self._page.tell(f"{doing} ... Esc stops")
        self._timer = self._page.set_interval(EVERY_S, self._tell)

    def reach(self, done: int, total: int) -> None:
        """How far it is; any thread may say so."""
        self._reached = f"{done} of {total}, "

    def end(self) -> None:
        """Nothing is waited for any more."""
        self._doing = self._reached = ""
        if self._timer is not None:
            self._timer.stop()
            self._timer = None

    def _tell(self) -> None:
        gone = time.monotonic() - self._since
        self._page.tell(f"{self._doing}: {self._reached}{gone:.0f} s; Esc stops")
