"""Rows of characters on the screen, of which only the changed ones are sent.

Every panel, list, key line and picture is a `Cells` widget: it is given lines, compares them with
what is shown, and repaints the changed stretches alone.  Over a slow line that is the difference
between a screen that follows the key and one that trails behind it.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from rich.cells import cell_len
from rich.segment import Segment
from rich.style import Style
from textual import events
from textual.geometry import Region
from textual.strip import Strip
from textual.widget import Widget

Span = tuple[str, str]
"""Words and the tone they are shown in, a key of TONES."""

Line = Sequence[Span]
"""One line of a panel."""


@dataclass(frozen=True)
class Screenful:
    """What a widget shows: code points and tones, (height, width) each."""

    characters: NDArray[np.uint32]
    tones: NDArray[np.uint8]


_FILLER: Final = 0
"""Second half of a character that is two columns wide."""

_SAME_STRETCH: Final = 12
"""Unchanged columns that are cheaper to send again than to jump over."""

_PLAINER: Final = str.maketrans(
    {
        "─": "-",
        "│": "|",
        "·": "-",
        "…": "~",
        "°": "d",
        "µ": "u",
        "²": "2",
        "³": "3",
        "±": "+",
        "\N{MULTIPLICATION SIGN}": "x",
        "\N{EN DASH}": "-",
        "\N{EM DASH}": "-",
        "\N{RIGHT SINGLE QUOTATION MARK}": "'",
    }
)


def plainer(words: str) -> str:
    """The words without any character above 0x7e."""
    if words.isascii():
        return words
    return words.translate(_PLAINER).encode("ascii", "replace").decode()


class Cells(Widget):
    """A widget made of character cells."""

    can_focus = False

    def __init__(self, *, css_id: str | None = None, classes: str | None = None) -> None:
        super().__init__(id=css_id, classes=classes)
        self._shown = Screenful(np.zeros((0, 0), np.uint32), np.zeros((0, 0), np.uint8))
        self._strips: dict[int, Strip] = {}

    @property
    def ascii_only(self) -> bool:
        """No character above 0x7e may be sent."""
        return bool(getattr(self.app, "ascii_only", False))

    # -- what a subclass says ---------------------------------------------------------------------

    def content(self, width: int, height: int) -> Screenful:
        """What to show at this size."""
        return self.typeset(self.lines(width, height), width, height)

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """What to show, as lines; `content` may be given instead."""
        return ()

    # -- painting ---------------------------------------------------------------------------------

    def typeset(self, lines: Iterable[Line], width: int, height: int) -> Screenful:
        """Lines as cells, cut to the size."""
        characters = np.full((height, width), ord(" "), np.uint32)
        tones = np.zeros((height, width), np.uint8)
        for row, line in enumerate(lines):
            if row >= height:
                break
            column = 0
            for words, tone in line:
                codes = self._codes(words)[: width - column]
                end = column + len(codes)
                characters[row, column:end] = codes
                tones[row, column:end] = TONE_NUMBERS[tone]
                column = end
        return Screenful(characters, tones)

    def _codes(self, words: str) -> list[int]:
        if self.ascii_only:
            words = plainer(words)
        if words.isascii():
            return [ord(c) if c.isprintable() else ord("?") for c in words]
        codes: list[int] = []
        for character in words:
            wide = cell_len(character) if character.isprintable() else 1
            if wide:
                codes.append(ord(character) if character.isprintable() else ord("?"))
                codes.extend([_FILLER] * (wide - 1))
        return codes

    def redraw(self) -> None:
        """Show the present content, sending only what changed."""
        width, height = self.size
        if not width or not height or not self.is_mounted:
            return
        new, old = self.content(width, height), self._shown
        self._shown = new
        if new.characters.shape != old.characters.shape:
            self._strips.clear()
            self.refresh()
            return
        changed = (new.characters != old.characters) | (new.tones != old.tones)
        regions = []
        for row in np.flatnonzero(changed.any(axis=1)).tolist():
            self._strips.pop(row, None)
            regions.extend(_stretches(row, np.flatnonzero(changed[row])))
        if regions:
            self.refresh(*regions)

    def render_line(self, y: int) -> Strip:
        """Textual asks for one row."""
        if self._shown.characters.shape != (self.size.height, self.size.width):
            self.redraw()
        strip = self._strips.get(y)
        if strip is None and y < self._shown.characters.shape[0]:
            strip = self._strips[y] = self._strip(y)
        return strip or Strip([Segment(" " * self.size.width, _STYLES[0])])

    def _strip(self, row: int) -> Strip:
        characters, tones = self._shown.characters[row], self._shown.tones[row]
        edges = np.flatnonzero(np.diff(tones)) + 1
        bounds = [0, *edges.tolist(), len(tones)]
        segments = []
        for start, end in itertools.pairwise(bounds):
            words = "".join(map(chr, characters[start:end].tolist())).replace("\0", "")
            segments.append(Segment(words, _STYLES[int(tones[start])]))
        return Strip(segments, len(tones))

    def on_resize(self, event: events.Resize) -> None:
        """Draw for the new size."""
        self.redraw()


class Divider(Cells):
    """A line between two columns of panels."""

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """The line."""
        return [(("│", "frame"),)] * height


def _stretches(row: int, columns: NDArray[np.intp]) -> list[Region]:
    """Changed columns as few regions."""
    breaks = np.flatnonzero(np.diff(columns) > _SAME_STRETCH) + 1
    parts = np.split(columns, breaks)
    return [Region(int(part[0]), row, int(part[-1] - part[0]) + 1, 1) for part in parts]


TONES: Final = {
    "plain": "default",
    "quiet": "dim default",
    "title": "bold default",
    "chosen": "reverse default",
    "key": "bold cyan",
    "worse": "bold red",
    "caution": "bold magenta",
    "changed": "bold cyan",
    "good": "green",
    "typing": "underline default",
    "frame": "dim default",
    "label": "default",
    "pinned": "dim default",
    "setpoint": "magenta",
    "pv": "bold green",
    "output": "bold cyan",
    "record": "default",
    "fit": "bold green",
    "best-pi": "bold green",
    "best-pid": "bold cyan",
    "rule": "dim default",
    "present": "bold magenta",
    "chosen-point": "reverse default",
}
"""Every way words and curves are shown, in the terminal's own sixteen colours.

Not in the stylesheet, where each widget would look up each of them again at every start.
"""

TONE_NUMBERS: Final = {name: number for number, name in enumerate(TONES)}

_STYLES: Final = [Style.parse(f"{look} on default") for look in TONES.values()]
