"""What every panel shares: a title with its key, a list that scrolls, the help it gives."""

from __future__ import annotations

from collections.abc import Iterable
from typing import TYPE_CHECKING, ClassVar

from workbench.screens.cells import Cells, Line, Span

if TYPE_CHECKING:
    from workbench.screens.keys import Command
    from workbench.screens.work import Work


class Listing(Cells):
    """A titled list, of which a part is in view."""

    can_focus = True

    number: ClassVar[str] = ""
    """The key that leads here."""
    title: ClassVar[str] = ""
    help: ClassVar[tuple[str, ...]] = ()
    """What the help page says while this panel has the focus, one paragraph each."""
    commands: ClassVar[tuple[Command, ...]] = ()
    """What keys do while this panel has the focus, beside those of the page."""
    key_line: ClassVar[tuple[Command, ...]] = ()
    """What the key line shows meanwhile; empty where that is what the page always shows."""
    selects: ClassVar[bool] = False
    """The list has a chosen row; without it the arrows scroll."""

    def __init__(self, *, css_id: str | None = None) -> None:
        super().__init__(css_id=css_id)
        self.cursor = 0
        self.top = 0
        self.elsewhere: tuple[str, ...] = ()
        """Names of the panels that share this place."""

    # -- what a subclass says ---------------------------------------------------------------------

    def body(self, width: int) -> list[Line]:
        """Every line of the panel, its title apart."""
        return []

    def fixed(self, width: int) -> list[Line]:
        """Lines kept at the foot whatever is scrolled."""
        return []

    # -- showing ----------------------------------------------------------------------------------

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """Title, the part of the list in view, the foot."""
        body, foot = self.body(width), self.fixed(width)
        room = max(1, height - 1 - len(foot))
        self.cursor = min(max(self.cursor, 0), max(0, len(body) - 1))
        if self.selects:
            self.top = min(max(self.top, self.cursor - room + 1), self.cursor)
        self.top = max(0, min(self.top, len(body) - room))
        more = f"{min(len(body), self.top + room)}/{len(body)}" if len(body) > room else ""
        yield self.heading(width, more)
        shown = body[self.top : self.top + room]
        yield from shown
        yield from [()] * (room - len(shown))
        yield from foot

    @property
    def name_now(self) -> str:
        """What the title line says."""
        return self.title

    def heading(self, width: int, more: str = "") -> Line:
        """The title line: the key, the name, and who shares the place."""
        name = f"{self.number} {self.name_now}".strip()
        mark: Span = (f"> {name} ", "chosen") if self.has_focus else (f"  {name} ", "title")
        right = "  ".join((*self.elsewhere, more)).strip()
        fill = width - len(mark[0]) - len(right) - (2 if right else 0)
        rule: Span = ("─" * max(1, fill), "frame")
        return (mark, rule, (f" {right} ", "quiet")) if right else (mark, rule)

    # -- keys -------------------------------------------------------------------------------------

    def move(self, step: int) -> None:
        """One line up or down."""
        if self.selects:
            # Held inside here, because nothing is drawn while the list is out of view.
            last = len(self.body(max(1, self.size.width))) - 1
            self.cursor = max(0, min(self.cursor + step, last))
        else:
            self.top += step
        self.redraw()

    def page(self, step: int) -> None:
        """One screenful up or down."""
        self.move(step * max(1, self.size.height - 2))

    def ends(self, step: int) -> None:
        """To the first or last line."""
        self.move(step * 10_000)

    def watch_has_focus(self, has_focus: bool) -> None:
        """Show where the keys go."""
        super().watch_has_focus(has_focus)
        self.redraw()


class Panel(Listing):
    """A panel of the main page."""

    def __init__(self, work: Work, *, css_id: str | None = None) -> None:
        super().__init__(css_id=css_id)
        self.work = work


def wrapped(words: str, width: int, tone: str = "plain", indent: str = "") -> list[Line]:
    """A paragraph as lines; a word longer than a line, like a path, goes on below itself."""
    lines: list[Line] = []
    row, room = "", max(1, width - len(indent))
    pieces = (
        word[start : start + room] for word in words.split() for start in range(0, len(word), room)
    )
    for word in pieces:
        if row and len(row) + 1 + len(word) > width - len(indent):
            lines.append(((indent + row, tone),))
            row = ""
        row = f"{row} {word}" if row else word
    if row or not lines:
        lines.append(((indent + row, tone),))
    return lines


def remark(words: str, width: int, tone: str, mark: str = "!") -> list[Line]:
    """A paragraph after a mark, as lines that hang from it."""
    first, *rest = wrapped(words, width, tone, "  ")
    return [((f"{mark} {first[0][0][2:]}", tone),), *rest]
