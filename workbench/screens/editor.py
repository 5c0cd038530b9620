"""The entry that opens over a setting, with what it means and what is wrong beside it."""

from __future__ import annotations

from collections.abc import Iterable

from textual import events
from textual.app import ComposeResult
from textual.containers import Vertical
from textual.message import Message

from workbench.case import case as cases
from workbench.errors import InputError
from workbench.screens.cells import Cells, Line
from workbench.screens.entry import Entry
from workbench.screens.fields import FieldsPanel, label_of, meaning_of
from workbench.screens.panel import wrapped
from workbench.screens.work import Work


class Beside(Cells):
    """Lines under the entry."""

    def __init__(self) -> None:
        super().__init__()
        self.shown: list[Line] = []

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """The lines."""
        return self.shown


class Editor(Vertical):
    """An entry in place of a setting's line."""

    WIDTH = 64

    class Closed(Message):
        """Posted when the entry is gone."""

        def __init__(self, panel: FieldsPanel, changed: bool, assumed: tuple[str, ...]) -> None:
            super().__init__()
            self.panel, self.changed, self.assumed = panel, changed, assumed

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self._entry, self._beside = Entry(), Beside()
        self.display = False
        self._panel: FieldsPanel | None = None
        self._key = ""

    def compose(self) -> ComposeResult:
        """The entry, and the lines under it."""
        yield self._entry
        yield self._beside

    def open(self, panel: FieldsPanel) -> None:
        """Edit the chosen setting of a panel."""
        self._panel, self._key = panel, panel.key
        quantity = self.work.quantities[self._key]
        choices = ("true", "false") if quantity.kind == "flag" else quantity.choices
        entry = self._entry
        entry.longest = quantity.longest
        entry.ask(f" {label_of(self._key)}:", self.work.show(self._key), choices)
        self._tell("")
        self.display = True
        entry.focus()
        entry.redraw()

    def _tell(self, fault: str) -> None:
        """The fault, or else the meaning, under the entry."""
        assert self._panel is not None
        width = min(self.WIDTH, self.screen.size.width - 4)
        beside = self._beside
        known = meaning_of(self._key, self.work, width - 2)
        shown = wrapped(fault, width - 2, "worse") if fault else known
        ends: Line = (("Enter accepts, Esc leaves it as it was", "quiet"),)
        beside.shown = [((" ", "quiet"), *line) for line in (*shown, ends)]
        row = self._panel.row_of(self._key) or 1
        height = 1 + len(beside.shown)
        # Placed over the setting's own line; where it would leave the page, it moves up.
        top = min(self._panel.region.y + row, self.screen.size.height - 2 - height)
        self.styles.offset = (self._panel.region.x, max(0, top))
        self.styles.width, self.styles.height = width, height
        beside.styles.height = len(beside.shown)
        beside.redraw()

    def on_key(self, event: events.Key) -> None:
        """The keys stay here until the entry is closed."""
        if event.key in ("tab", "shift+tab"):
            event.stop()

    def accept(self, text: str) -> None:
        """Set the value, or say what is wrong with it."""
        before = self.work.case
        try:
            changed = self.work.edit(self._key, text)
        except InputError as fault:
            self._tell("; ".join(_words(problem, self._key) for problem in fault.problems))
            return
        shape = text.strip() if self._key == "plant.shape" else ""
        assumed = cases.assumed_keys(before, shape) if shape and changed else ()
        self._close(changed, assumed)

    def leave(self) -> None:
        """Leave the value as it was."""
        if self.display:
            self._close(False, ())

    def _close(self, changed: bool, assumed: tuple[str, ...]) -> None:
        self.display = False
        if self._panel is not None:
            self.post_message(self.Closed(self._panel, changed, assumed))


def _words(problem: object, key: str) -> str:
    """A fault without the name of the setting that it stands beside."""
    return str(problem).removeprefix(f"{key}: ")
