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
    called: str = ""
    """Other words of the trade by which the finder finds it."""
    spare: bool = False
    """Left out of the key line where there is no room; the help has it."""


def bindings(commands: Iterable[Command]) -> list[BindingType]:
    """Textual's bindings for the commands."""
    return [
        Binding(command.keys, command.action, command.help, show=False)
        for command in commands
        if command.keys
    ]


FIND = Command(
    "slash,ctrl+f", "/", "find", "find", "find an action or a setting by plain words", "ctrl+f"
)
"""On every page."""


class KeyLine(Cells):
    """The one line at the bottom that shows the keys of the page."""

    def __init__(self, commands: Sequence[Command]) -> None:
        super().__init__(classes="one-line")
        self.commands = tuple(commands)

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """Keys and words, with two spaces between them where there is room."""
        entries = [command for command in self.commands if command.words]
        length = _length(entries)
        if length > width:
            entries = [entry for entry in entries if not entry.spare]
            length = _length(entries)
        gap = "  " if length + len(entries) - 1 <= width else " "
        spans: list[Span] = []
        for entry in entries:
            spans += [(entry.shown, "key"), (f" {entry.words}{gap}", "quiet")]
        yield spans


def _length(entries: Sequence[Command]) -> int:
    """Columns, with one space between the entries."""
    return sum(len(entry.shown) + 2 + len(entry.words) for entry in entries) - 1
