"""A line in which something is typed."""

from __future__ import annotations

from collections.abc import Iterable

from textual import events
from textual.message import Message

from workbench.screens.cells import Cells, Line, Span


class Entry(Cells):
    """One line of text being typed; the only place where a panel holds a value.

    The first character typed replaces what stood there; a cursor key keeps it for changing.
    """

    can_focus = True

    class Submitted(Message):
        """Posted when Enter is pressed."""

        def __init__(self, entry: Entry, value: str) -> None:
            super().__init__()
            self.entry, self.value = entry, value

        @property
        def control(self) -> Entry:
            """The entry."""
            return self.entry

    class Changed(Message):
        """Posted when the text is another one."""

    class Left(Message):
        """Posted when Esc is pressed."""

    def __init__(
        self,
        label: str = "",
        value: str = "",
        choices: tuple[str, ...] = (),
        *,
        longest: int = 200,
        css_id: str | None = None,
    ) -> None:
        super().__init__(css_id=css_id, classes="one-line")
        self.longest = longest
        self.ask(label, value, choices)

    def ask(self, label: str, value: str, choices: tuple[str, ...] = ()) -> None:
        """Start over with another question."""
        self.label, self.value, self.choices = label, value, choices
        self.cursor, self.fresh = len(value), True

    # -- showing ----------------------------------------------------------------------------------

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """The label, and the text with its cursor."""
        room = max(4, width - len(self.label) - 1)
        start = max(0, self.cursor - room + 1)
        shown = self.value[start : start + room].ljust(room)
        at = self.cursor - start
        spans: list[Span] = [(f"{self.label} ", "label")]
        if not self.has_focus:
            spans.append((shown, "plain"))
        elif self.fresh and self.value:
            spans += [
                (shown[:at], "chosen"),
                (shown[at : at + 1], "typing"),
                (shown[at + 1 :], "plain"),
            ]
        else:
            spans += [(shown[:at], "typing"), (shown[at : at + 1], "chosen")]
            spans.append((shown[at + 1 :], "typing"))
        yield spans

    def watch_has_focus(self, has_focus: bool) -> None:
        """Show or hide the cursor."""
        super().watch_has_focus(has_focus)
        self.redraw()

    # -- typing -----------------------------------------------------------------------------------

    def check_consume_key(self, key: str, character: str | None) -> bool:
        """Printable keys are text here, never commands."""
        return character is not None and character.isprintable()

    def on_key(self, event: events.Key) -> None:
        """Edit the text."""
        before = self.value
        if event.is_printable and event.character:
            self._insert(event.character)
        elif event.key in _EDITS:
            _EDITS[event.key](self)
            self.fresh = False
        elif event.key in ("up", "down") and self.choices:
            self._choose(-1 if event.key == "up" else 1)
        elif event.key == "enter":
            self.post_message(self.Submitted(self, self.value))
        elif event.key == "escape":
            self.post_message(self.Left())
        else:
            return
        event.stop()
        event.prevent_default()
        self._tell_of_change(before)
        self.redraw()

    def _tell_of_change(self, before: str) -> None:
        if self.value != before:
            self.post_message(self.Changed())

    def on_paste(self, event: events.Paste) -> None:
        """The first pasted line, without anything that is not a character."""
        event.stop()
        lines = event.text.splitlines()
        if lines:
            before = self.value
            self._insert("".join(c for c in lines[0] if c.isprintable()))
            self._tell_of_change(before)
            self.redraw()

    def _insert(self, words: str) -> None:
        if self.fresh:
            self.value, self.cursor, self.fresh = "", 0, False
        words = words[: max(0, self.longest - len(self.value))]
        self.value = self.value[: self.cursor] + words + self.value[self.cursor :]
        self.cursor += len(words)

    def _choose(self, step: int) -> None:
        known = self.value in self.choices
        place = self.choices.index(self.value) + step if known else 0
        self.value = self.choices[place % len(self.choices)]
        self.cursor, self.fresh = len(self.value), True

    def _move(self, cursor: int) -> None:
        self.cursor = min(max(cursor, 0), len(self.value))

    def _cut(self, start: int, end: int) -> None:
        start = max(start, 0)
        self.value = self.value[:start] + self.value[end:]
        self.cursor = start

    def _cut_word(self) -> None:
        before = self.value[: self.cursor].rstrip()
        self._cut(before.rfind(" ") + 1, self.cursor)


_EDITS = {
    "left": lambda entry: entry._move(entry.cursor - 1),
    "right": lambda entry: entry._move(entry.cursor + 1),
    "home": lambda entry: entry._move(0),
    "end": lambda entry: entry._move(len(entry.value)),
    "backspace": lambda entry: entry._cut(entry.cursor - 1, entry.cursor),
    "ctrl+h": lambda entry: entry._cut(entry.cursor - 1, entry.cursor),
    "delete": lambda entry: entry._cut(entry.cursor, entry.cursor + 1),
    "ctrl+u": lambda entry: entry._cut(0, entry.cursor),
    "ctrl+k": lambda entry: entry._cut(entry.cursor, len(entry.value)),
    "ctrl+w": lambda entry: entry._cut_word(),
}
"""Editing keys; each has a twin that no terminal eats."""
