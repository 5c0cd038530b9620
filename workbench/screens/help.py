"""The help page: where you are, and every key."""

from __future__ import annotations

from collections.abc import Iterable

from textual.widget import Widget

from workbench.screens.cells import Line
from workbench.screens.keys import FIND, Command, bindings
from workbench.screens.page import BACK, MOVING, Page
from workbench.screens.panel import Listing, wrapped


class HelpText(Listing):
    """Paragraphs and keys, to scroll through."""

    title = "Help"

    def __init__(self, page: Page) -> None:
        super().__init__(css_id="help")
        self.about, self.of_page = page.about, page.commands
        focused = page.focused
        self.panel = focused if isinstance(focused, Listing) else None

    def body(self, width: int) -> list[Line]:
        """The focused panel, the page, the keys."""
        lines: list[Line] = []
        room = min(width, 100) - 2
        if self.panel is not None and self.panel.help:
            lines.append(((f"  {self.panel.title}", "title"),))
            for paragraph in self.panel.help:
                lines += wrapped(paragraph, room, "plain", "  ")
            lines.append(())
        lines.append((("  This page", "title"),))
        for paragraph in self.about:
            lines += wrapped(paragraph, room, "plain", "  ")
        if self.panel is not None and self.panel.commands:
            lines += [(), ((f"  Keys in {self.panel.title}", "title"),)]
            lines += [_key_line(command) for command in self.panel.commands]
        lines += [(), (("  Keys", "title"),)]
        lines += [_key_line(command) for command in self.of_page if command.help]
        lines += [_key_line(command) for command in EVERYWHERE]
        return lines


def _key_line(command: Command) -> Line:
    keys = f"{command.shown}, {command.also}" if command.also else command.shown
    return ((f"  {keys}".ljust(16), "key"), (command.help, "plain"))


EVERYWHERE = (
    FIND,
    Command("ctrl+z", "ctrl+z", "", "", "to the shell; `fg` comes back"),
)
"""Keys of the program rather than of a page."""


class HelpPage(Page):
    """Every key of a page, and what the focused panel is."""

    commands = (
        BACK,
        Command("", "Up Down PgUp PgDn", "scroll", "", ""),
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, page: Page) -> None:
        super().__init__()
        self._text = HelpText(page)

    def head(self) -> Line:
        """The title."""
        return ((" Help", "title"),)

    def body(self) -> Iterable[Widget]:
        """The text."""
        yield self._text

    def on_mount(self) -> None:
        """The text takes the keys."""
        super().on_mount()
        self._text.focus()
