"""The commands of a page: one table feeds the bindings, the key line and the help."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from textual.binding import Binding, BindingType

from workbench.screens.cells import Cells, Line, Span


@dataclass(frozen=True)
class Command:
    """What a key does."""

    keys: str
    """Textual's names of the keys, separated by commas."""
    shown: str
    """The keys as the engineer knows them."""
    words: str
    """What stands beside the key on the key line; empty where it is shown elsewhere."""
    action: str
    help: str
    """The sentence of the help page."""
    also: str = ""
    """Further keys, named in the help only."""


def bindings(commands: Iterable[Command]) -> list[BindingType]:
    """Textual's bindings for the commands."""
    return [
        Binding(command.keys, command.action, command.help, show=False)
        for command in commands
        if command.keys
    ]


class KeyLine(Cells):
    """The one line at the bottom that shows every key of the page."""

    def __init__(self, commands: Sequence[Command]) -> None:
        super().__init__(classes="one-line")
        self.commands = tuple(commands)

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """Keys and words, with two spaces between them where there is room."""
        entries = [command for command in self.commands if command.words]
        length = sum(len(entry.shown) + 1 + len(entry.words) for entry in entries)
        gap = "  " if length + 2 * (len(entries) - 1) <= width else " "
        spans: list[Span] = []
        for entry in entries:
            spans += [(entry.shown, "key"), (f" {entry.words}{gap}", "quiet")]
        yield spans
