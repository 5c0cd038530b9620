"""The finder: every action and every setting by plain words, run at once."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from typing import Final

from textual import on
from textual.widget import Widget

from workbench.screens.cells import Line
from workbench.screens.entry import Entry
from workbench.screens.keys import Command, bindings
from workbench.screens.page import MOVING, Offer, Page
from workbench.screens.panel import Listing

_FILLING: Final = frozenset(
    re.findall(
        r"\w+",
        "a all an and are be by can do does for get go how i in is it me my of on please "
        "see show the this to want what where with",
    )
)
"""Words of a sentence that say nothing about what is looked for."""

_WHOLE, _BEGUN, _OTHER = 4, 3, 1
"""What a word counts that is there, begins a word of the text, or has the stem of another name."""


def ranked(offers: Sequence[Offer], typed: str) -> list[Offer]:
    """The offers that most of the typed words fit, the nearest first; all where none is typed.

    >>> undo = Offer("undo the last change", "u", print, "revert take back")
    >>> save = Offer("save with a reason", "s", print, "write store")
    >>> [offer.key for offer in ranked([undo, save], "how do I revert the chan")]
    ['u']
    """
    words = [word for word in _words(typed) if word not in _FILLING] or _words(typed)
    if not words:
        return list(offers)
    marks = []
    for place, offer in enumerate(offers):
        each = [_mark(word, offer) for word in words]
        marks.append((-sum(map(bool, each)), -sum(each), place))
    most = min((mark[0] for mark in marks), default=0)
    return [offers[place] for fit, _, place in sorted(marks) if fit == most and fit]


def _words(typed: str) -> list[str]:
    return re.findall(r"\w+", typed.lower())


def _mark(word: str, offer: Offer) -> int:
    """How well one word fits an offer; 0 where it does not."""
    own, others = _words(offer.words), _words(f"{offer.called} {offer.place}")
    if word in own or word in others:
        return _WHOLE
    if any(each.startswith(word) for each in own):
        return _BEGUN
    # The ending of a typed word is not what is looked for: "tuning" is "tune" too.
    stem = word[: max(4, len(word) - 3)]
    return _OTHER if any(each.startswith(stem) for each in (*own, *others)) else 0


class Found(Listing):
    """What fits the words, one a line."""

    title = "What can be done"
    selects = True

    def __init__(self) -> None:
        super().__init__(css_id="found")
        self.offers: list[Offer] = []

    @property
    def chosen(self) -> Offer | None:
        """The offer of the chosen line."""
        return self.offers[self.cursor] if self.cursor < len(self.offers) else None

    def body(self, width: int) -> list[Line]:
        """The key, what it does, and on which other page."""
        lines: list[Line] = []
        for row, offer in enumerate(self.offers):
            here = row == self.cursor
            key = f"{'>' if here else ' '} {offer.key}".ljust(14)
            place = f" ({offer.place})" if offer.place else ""
            words = offer.words
            if len(key) + len(words) + len(place) > width:
                words = words[: width - len(key) - len(place) - 1] + "…"
            tone = "chosen" if here else "plain"
            lines.append(((key, "chosen" if here else "key"), (words, tone), (place, "quiet")))
        nothing = "  nothing fits: try another word, or Esc and ? for all keys"
        return lines or [((nothing, "quiet"),)]


class FinderPage(Page):
    """Type what is wanted, choose, run."""

    called = "finder"
    about = ("Type what you want to do, in your own words. Enter does what is chosen.",)
    commands = (
        Command("", "Enter", "do it", "", ""),
        Command("", "Up Down", "choose", "", ""),
        Command("", "Esc", "back", "", ""),
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, offers: Iterable[Offer]) -> None:
        super().__init__()
        self.offered = tuple(offers)
        self.entry = Entry("  I want to:", css_id="wanted")
        self.found = Found()
        self.found.offers = list(self.offered)

    def head(self) -> Line:
        """The title."""
        return ((" Find an action or a setting", "title"),)

    def key_line(self, commands: Iterable[Command]) -> tuple[Command, ...]:
        """The finder is open already."""
        return tuple(commands)

    def body(self) -> Iterable[Widget]:
        """The entry, and what fits."""
        yield from (self.entry, self.found)

    def on_mount(self) -> None:
        """Words are typed at once."""
        super().on_mount()
        self.entry.focus()

    def focused_list(self) -> Listing:
        """The arrows move in what fits, while the letters go into the entry."""
        return self.found

    def action_find(self) -> None:
        """Open already."""

    @on(Entry.Changed)
    def changed(self) -> None:
        """Look again."""
        self.found.offers = ranked(self.offered, self.entry.value)
        self.found.cursor = self.found.top = 0
        self.found.redraw()

    @on(Entry.Left)
    def left(self) -> None:
        """Nothing is done."""
        self.action_back()

    @on(Entry.Submitted)
    async def submitted(self) -> None:
        """Do what is chosen, on the page from which it was looked for."""
        chosen = self.found.chosen
        if chosen is not None:
            self.program.pop_screen()
            self.program.call_later(chosen.run)
