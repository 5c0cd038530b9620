"""Numbers and a size in, a text picture out; the only module that knows plotext.

plotext draws each curve into an empty canvas; the axes, the round ticks, the legend and the way the
canvases are laid over each other are ours, so that two curves stay apart without colour.  Nothing
reaches plotext that it could choke on: curves are cleaned, thinned, scaled to 0..1 and clipped to
one span outside, because one NaN or one far-off point ends or hangs the whole process.
"""

from __future__ import annotations

import math
import sys
import threading
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, lru_cache
from types import ModuleType
from typing import TYPE_CHECKING, Any, Final

import numpy as np
from numpy.typing import NDArray

from workbench.units import TIME_UNITS, harmless, text

if TYPE_CHECKING:
    from workbench.case.case import Case
    from workbench.study import Tolerance, Trend

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Ink:
    """How a kind of curve is drawn."""

    unicode: str
    """plotext's marker where the terminal has Unicode: a code word or one character."""
    ascii: str
    """One ASCII character."""
    joined: bool = True
    """Points joined by lines."""


@dataclass(frozen=True)
class Curve:
    """One curve: x and y of the same length, (n,) each; anything not finite is left out."""

    x: Floats
    y: Floats
    ink: str
    """A key of INKS."""
    name: str
    """Word for the legend."""


@dataclass(frozen=True)
class Pane:
    """Curves over one y axis."""

    label: str
    """What the y axis measures, with its unit."""
    curves: tuple[Curve, ...]
    """Later curves lie on top."""
    bounds: tuple[float, float] | None = None
    """The y axis never shows more than one span outside these, whatever the curves do."""
    share: float = 1.0
    """Share of the height."""


@dataclass(frozen=True)
class Picture:
    """A picture made of characters."""

    characters: NDArray[np.uint32]
    """Code points, (height, width)."""
    styles: NDArray[np.uint8]
    """Index into STYLES for each character, (height, width)."""

    @property
    def rows(self) -> tuple[str, ...]:
        """The picture as lines of text."""
        return tuple("".join(map(chr, row)) for row in self.characters.tolist())


SMALLEST: Final = (24, 6)
"""Columns and rows below which there is nothing to see."""


def draw(
    panes: Sequence[Pane],
    width: int,
    height: int,
    *,
    x_limits: tuple[float, float] | None = None,
    x_name: str = "",
    ascii_only: bool = False,
) -> Picture:
    """Draw panes above each other over one axis, of time unless it is named.

    Parameters
    ----------
    panes
        From top to bottom; the x of every curve is a time [s], or what `x_name` says.
    width, height
        Size of the picture in characters.
    x_limits
        Ends of the x axis; left out, those of the curves.
    x_name
        What the x axis is; left out, a time.
    ascii_only
        Use no character above 0x7e.

    Returns
    -------
    Picture
        Exactly `height` rows of `width` characters, whatever the numbers were.
    """
    sheet = _Sheet(width, height, ascii_only)
    if width < SMALLEST[0] or height < SMALLEST[1] or not panes:
        sheet.text(0, 0, "too small to draw" if panes else "nothing to draw")
        return sheet.picture()
    x_axis = _x_axis(panes, x_limits, x_name)
    heights = _heights(panes, height - 2)
    axes = [_y_axis(pane, rows - 1) for pane, rows in zip(panes, heights, strict=True)]
    gutter = min(9, max(axis.label_width for axis in axes))
    x_axis = x_axis.with_ticks(max(2, (width - gutter - 1) // 10))
    top = 0
    for pane, rows, axis in zip(panes, heights, axes, strict=True):
        sheet.legend(top, gutter, pane)
        sheet.y_axis(top + 1, rows - 1, gutter, axis)
        area = (top + 1, gutter + 1, rows - 1, width - gutter - 1)
        for curve in pane.curves:
            sheet.curve(area, curve, x_axis, axis)
        top += rows
    sheet.x_axis(top, gutter, x_axis)
    return sheet.picture()


@dataclass(frozen=True)
class Field:
    """A map: for each pair of ratios one of a few kinds of cell."""

    kinds: NDArray[np.uint8]
    """Index into GROUNDS for each cell, (rows, columns); the first row is drawn at the bottom."""
    x: Floats
    """Ratio of each column, (columns,), rising."""
    y: Floats
    """Ratio of each row, (rows,), rising."""
    here: tuple[int, int]
    """Row and column of the present point."""
    x_label: str
    y_label: str
    names: tuple[str, ...]
    """What each kind of cell means, for the legend."""


_RATIO_GUTTER: Final = 5
"""Columns of the labels of a map's rows."""


def map_cells(width: int, height: int) -> tuple[int, int]:
    """Columns and rows of the map that just fills a picture; odd, so that 1 has a cell."""
    columns, rows = max(5, width - _RATIO_GUTTER - 1), max(5, height - 3)
    return columns - 1 + columns % 2, rows - 1 + rows % 2


def map_size(columns: int, rows: int) -> tuple[int, int]:
    """Width and height of the picture of so many cells."""
    return columns + _RATIO_GUTTER + 1, rows + 3


def tolerance_field(found: Tolerance) -> Field:
    """The map of plant errors as it is drawn."""
    above = found.max_sensitivity > found.limit
    return Field(
        above.astype(np.uint8) + (~found.stable).astype(np.uint8),
        found.gain_ratios,
        found.other_ratios,
        found.here,
        "plant gain x",
        f"{found.axis} x",
        (f"Ms up to {text(found.limit, digits=3)}", "above", "unstable"),
    )


def draw_map(field: Field, width: int, height: int, *, ascii_only: bool = False) -> Picture:
    """Draw a map with its axes and its legend.

    Parameters
    ----------
    field
        With as many cells as `map_cells` says, or fewer; what has no room is left out.
    width, height
        Size of the picture in characters.
    ascii_only
        Use no character above 0x7e.
    """
    sheet = _Sheet(width, height, ascii_only)
    rows, columns = field.kinds.shape
    gutter, bottom = _RATIO_GUTTER, rows
    # Above the field one line: what the rows are, and what the characters mean.
    sheet.text(0, 0, field.y_label)
    column = max(gutter + 1, len(field.y_label) + 2)
    for ground, name in zip((*GROUNDS, HERE), (*field.names, "now"), strict=True):
        sheet.text(0, column, ground.ascii if ascii_only else ground.unicode, ground.style)
        sheet.text(0, column + 2, name)
        column += len(name) + 4
    for row in range(rows):
        sheet.text(1 + row, gutter, sheet.lines.side, "frame")
        for kind, ground in enumerate(GROUNDS):
            character = ground.ascii if ascii_only else ground.unicode
            for at in np.flatnonzero(field.kinds[rows - 1 - row] == kind).tolist():
                sheet.text(1 + row, gutter + 1 + at, character, ground.style)
    here_row, here_column = field.here
    mark = HERE.ascii if ascii_only else HERE.unicode
    sheet.text(rows - here_row, gutter + 1 + here_column, mark, HERE.style)
    for at, label in _ratio_ticks(field.y, 2):
        sheet.text(rows - at, gutter - len(label), label)
        sheet.text(rows - at, gutter, sheet.lines.side_tick, "frame")
    sheet.text(1 + bottom, gutter, sheet.lines.corner + sheet.lines.base * columns, "frame")
    for at, label in _ratio_ticks(field.x, 6):
        sheet.text(1 + bottom, gutter + 1 + at, sheet.lines.base_tick, "frame")
        start = gutter + 1 + at - (len(label) - 1) // 2
        if start + len(label) < gutter + 1 + columns - len(field.x_label):
            sheet.text(2 + bottom, start, label)
    sheet.text(2 + bottom, max(0, gutter + 1 + columns - len(field.x_label)), field.x_label)
    return sheet.picture()


def _ratio_ticks(ratios: Floats, apart: int) -> list[tuple[int, str]]:
    """Round ratios with their cells, 1 first, each at least so many cells from the others."""
    found: list[tuple[int, str]] = []
    for ratio in (1.0, 2.0, 0.5, 5.0, 0.2, 1.5, 0.7, 3.0, 0.3, 10.0, 0.1, 4.0, 0.25, 1.2, 0.8):
        if not ratios[0] * 0.99 <= ratio <= ratios[-1] * 1.01:
            continue
        at = int(np.abs(np.log(ratios / ratio)).argmin())
        if all(abs(at - other) >= apart for other, _ in found):
            found.append((at, f"{ratio:g}"))
    return found


def trend_panes(
    case: Case, present: Trend | None, earlier: Trend | None = None
) -> tuple[Pane, ...]:
    """PV and SP above, OP below, in the loop's own units; an earlier trend under the present."""
    pv, op = [], []
    if earlier is not None:
        pv.append(Curve(earlier.time, earlier.pv, "pinned", "pinned"))
        op.append(Curve(earlier.time, earlier.output, "pinned", "pinned"))
    if present is not None:
        pv.append(Curve(present.time, present.setpoint, "setpoint", "SP"))
        pv.append(Curve(present.time, present.pv, "pv", "PV"))
        op.append(Curve(present.time, present.output, "output", "OP"))
    return (
        Pane(f"PV {case.pv.unit}", tuple(pv), (case.pv.low, case.pv.high), 2.0),
        Pane(f"OP {case.op.unit}", tuple(op), (case.op.low, case.op.high), 1.0),
    )


# --- axes ----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Axis:
    """Ends of an axis, and its ticks, in the unit of the curves."""

    low: float
    high: float
    ticks: tuple[float, ...] = ()
    labels: tuple[str, ...] = ()
    unit: str = ""
    """Unit of the labels of a time axis, or what an x axis is."""

    @property
    def label_width(self) -> int:
        """Columns of the longest label."""
        return max((len(label) for label in self.labels), default=1)

    def share(self, values: Floats) -> Floats:
        """Values as shares of the axis: 0 at the low end, 1 at the high end."""
        # Halved before subtracting, so that no span of finite numbers overflows.
        return (values / 2 - self.low / 2) / (self.high / 2 - self.low / 2)

    def with_ticks(self, most: int) -> Axis:
        """The axis with round ticks; a time axis in the unit that reads best."""
        scale = TIME_UNITS.get(self.unit, 1.0)
        values, labels = round_ticks(self.low / scale, self.high / scale, most)
        ticks = tuple(value * scale for value in values)
        return Axis(self.low, self.high, ticks, labels, self.unit)


def round_ticks(low: float, high: float, most: int) -> tuple[tuple[float, ...], tuple[str, ...]]:
    """At most `most` round numbers from `low` to `high`, and their text.

    >>> round_ticks(0.0, 1.0, 6)
    ((0.0, 0.2, 0.4, 0.6, 0.8, 1.0), ('0.0', '0.2', '0.4', '0.6', '0.8', '1.0'))
    >>> round_ticks(118.2, 127.4, 4)
    ((120.0, 125.0), ('120', '125'))
    """
    step = _round_step(high / most - low / most)
    # A step below the resolution of the numbers themselves would repeat the same tick.
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    if last - first > most:
        return (low, high), (f"{low:.3g}", f"{high:.3g}")
    values = tuple(float(f"{k * step:.12g}") + 0.0 for k in range(first, last + 1))
    largest = max((abs(value) for value in values), default=0.0)
    if largest >= 1e6 or (largest < 1e-3 and largest > 0):
        # As many digits as tell one step from the next: 9.94e+05, 9.95e+05 ... 1.001e+06.
        places = math.floor(math.log10(largest)) - math.floor(math.log10(step) + 1e-9)
        digits = max(3, places + 1)
        return values, tuple(f"{value:.{digits}g}" for value in values)
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    return values, tuple(f"{value:.{decimals}f}" for value in values)


def _round_step(least: float) -> float:
    """The smallest of 1, 2, 5 times a power of ten that is not below `least`."""
    least = min(max(least, 1e-290), 1e290)
    power = 10.0 ** math.floor(math.log10(least))
    for factor in (1.0, 2.0, 5.0):
        if factor * power >= least * (1 - 1e-9):
            return factor * power
    return 10.0 * power


def _finite(values: Floats) -> Floats:
    kept: Floats = values[np.isfinite(values)]
    return kept


def _span(arrays: Sequence[Floats]) -> tuple[float, float] | None:
    """Lowest and highest finite value, or `None` where there is none."""
    kept = [values for values in map(_finite, arrays) if values.size]
    if not kept:
        return None
    return float(min(v.min() for v in kept)), float(max(v.max() for v in kept))


def _x_axis(panes: Sequence[Pane], limits: tuple[float, float] | None, name: str) -> Axis:
    span = limits or _span([curve.x for pane in panes for curve in pane.curves]) or (0.0, 1.0)
    low, high = (min(max(end, -1e12), 1e12) for end in span)
    if high - low < 1e-9 * max(1.0, abs(low), abs(high)):
        high = low + max(1.0, abs(low) * 1e-6)
    length = high - low
    unit = "s" if length < 600 else "min" if length < 4 * 3600 else "h"
    return Axis(low, high, unit=name or unit)


def _y_axis(pane: Pane, rows: int) -> Axis:
    span = _span([curve.y for curve in pane.curves]) or pane.bounds or (0.0, 1.0)
    low, high = (min(max(end, -1e290), 1e290) for end in span)
    least = 0.0
    if pane.bounds is not None:
        size = abs(pane.bounds[1] - pane.bounds[0])
        floor, ceiling = min(pane.bounds) - size, max(pane.bounds) + size
        low, high = min(max(low, floor), ceiling), min(max(high, floor), ceiling)
        # A straight line must not be blown up until its rounding shows.
        least = 0.01 * size
    least = max(least, 1e-6 * max(abs(low), abs(high), 1e-280))
    if high - low < least:
        middle = low + (high - low) / 2
        low, high = middle - least / 2, middle + least / 2
    # The ends sit on round numbers, so that the axis holds still while a setting is nudged.
    grid = _round_step((high - low) / 20)
    low, high = (math.floor(low / grid - 0.1) * grid, math.ceil(high / grid + 0.1) * grid)
    ticks, labels = round_ticks(low, high, max(2, (rows + 1) // 3))
    return Axis(low, high, ticks, labels)


def _heights(panes: Sequence[Pane], height: int) -> list[int]:
    """Rows for each pane, its legend line included; the first takes what is left over."""
    total = sum(pane.share for pane in panes)
    heights = [max(3, int(height * pane.share / total)) for pane in panes]
    heights[0] += height - sum(heights)
    return heights


# --- the sheet -----------------------------------------------------------------------------------


class _Sheet:
    """Characters and styles being filled in."""

    def __init__(self, width: int, height: int, ascii_only: bool) -> None:
        self.width, self.height, self.ascii_only = max(0, width), max(0, height), ascii_only
        self.characters = np.full((self.height, self.width), ord(" "), dtype=np.uint32)
        self.styles = np.zeros((self.height, self.width), dtype=np.uint8)
        self.lines = LINES[ascii_only]

    def picture(self) -> Picture:
        return Picture(self.characters, self.styles)

    def text(self, row: int, column: int, words: str, style: str = "label") -> None:
        # A unit comes from a file, and a file may say anything.
        words = harmless(words)[: max(0, self.width - column)]
        if self.ascii_only:
            words = words.encode("ascii", "replace").decode("ascii")
        if not (0 <= row < self.height) or not words:
            return
        end = column + len(words)
        self.characters[row, column:end] = [ord(character) for character in words]
        self.styles[row, column:end] = STYLES.index(style)

    def legend(self, row: int, gutter: int, pane: Pane) -> None:
        self.text(row, gutter + 1, pane.label)
        column = gutter + len(pane.label) + 3
        seen: set[str] = set()
        for curve in pane.curves:
            if curve.name in seen or column + len(curve.name) + 3 > self.width:
                continue
            seen.add(curve.name)
            ink = INKS[curve.ink]
            sample = ink.ascii if self.ascii_only else SAMPLES.get(ink.unicode, ink.unicode)
            self.text(row, column, sample * 2, curve.ink)
            self.text(row, column + 3, curve.name)
            column += len(curve.name) + 5

    def y_axis(self, top: int, rows: int, gutter: int, axis: Axis) -> None:
        for row in range(rows):
            self.text(top + row, gutter, self.lines.side, "frame")
        for value, label in zip(axis.ticks, axis.labels, strict=True):
            row = top + _place(1 - _share(axis, value), rows)
            self.text(row, gutter - len(label[:gutter]), label[:gutter])
            self.text(row, gutter, self.lines.side_tick, "frame")

    def x_axis(self, row: int, gutter: int, axis: Axis) -> None:
        columns = self.width - gutter - 1
        self.text(row, gutter, self.lines.corner + self.lines.base * columns, "frame")
        free = 0
        room = self.width - len(axis.unit) - 1
        for value, label in zip(axis.ticks, axis.labels, strict=True):
            column = gutter + 1 + _place(_share(axis, value), columns)
            self.text(row, column, self.lines.base_tick, "frame")
            start = max(0, column - (len(label) - 1) // 2)
            if start >= free and start + len(label) <= room:
                self.text(row + 1, start, label)
                free = start + len(label) + 1
        self.text(row + 1, room + 1, axis.unit)

    def curve(self, area: tuple[int, int, int, int], curve: Curve, x: Axis, y: Axis) -> None:
        top, left, rows, columns = area
        points = thin(x.share(curve.x), y.share(curve.y), columns)
        if points[0].size == 0:
            return
        ink = INKS[curve.ink]
        marker = ink.ascii if self.ascii_only else ink.unicode
        drawn = _plot(points[0].tobytes(), points[1].tobytes(), columns, rows, marker, ink.joined)
        cells = self.characters[top : top + rows, left : left + columns]
        styles = self.styles[top : top + rows, left : left + columns]
        marked = (drawn != ord(" ")) & (drawn != _BRAILLE)
        # Two curves through the same cell keep the dots of both.
        both = marked & (cells > _BRAILLE) & (drawn > _BRAILLE) & (cells <= _BRAILLE + 255)
        cells[both] |= drawn[both]
        cells[marked & ~both] = drawn[marked & ~both]
        styles[marked] = STYLES.index(curve.ink)


_BRAILLE: Final = 0x2800


def _share(axis: Axis, value: float) -> float:
    return float(axis.share(np.array([value]))[0])


def _place(share: float, cells: int) -> int:
    """The cell in which plotext puts a share 0..1 of an axis."""
    return min(max(round(share * (cells - 1)), 0), cells - 1)


def thin(x: Floats, y: Floats, columns: int) -> tuple[Floats, Floats]:
    """At most two points a column, in their order, peaks kept; x and y are shares of their axes.

    What is not finite is dropped, what lies outside the axes is clipped to one span outside.
    """
    count = min(x.size, y.size)
    x, y = x[:count], y[:count]
    # Infinite values carry a direction, so they go to the edge; what has none is dropped.
    kept = np.isfinite(x) & ~np.isnan(y) & (x >= -0.5) & (x <= 1.5)
    x, y = x[kept], np.clip(y[kept], -1.0, 2.0)
    order = np.argsort(x, kind="stable") if np.any(np.diff(x) < 0) else None
    if order is not None:
        x, y = x[order], y[order]
    if x.size <= 2 * columns:
        return x, y
    column = np.floor(np.clip(x, 0.0, 1.0) * (columns - 1) + 0.5).astype(np.int64)
    # Sorted by column and height, each column begins with its lowest point and ends with its peak.
    by_height = np.lexsort((y, column))
    starts = np.flatnonzero(np.diff(column, prepend=column[0] - 1))
    ends = np.append(starts[1:], x.size) - 1
    edges = np.array([0, x.size - 1])
    chosen = np.unique(np.concatenate((edges, by_height[starts], by_height[ends])))
    return x[chosen], y[chosen]


# --- plotext -------------------------------------------------------------------------------------

_one_at_a_time = threading.Lock()
"""plotext keeps one figure for the whole process; two threads in it at once spoil both."""


@cache
def _plotext() -> Any:
    """plotext, here and not at the top because the first screen is drawn without it."""
    # Its own manual takes longer to load than all the rest of it, and nobody opens it here.
    manual: Any = ModuleType("plotext._doc.doc")
    manual.docs = None
    sys.modules.setdefault(manual.__name__, manual)
    import plotext

    return plotext


@lru_cache(maxsize=32)
def _plot(
    x: bytes, y: bytes, columns: int, rows: int, marker: str, joined: bool
) -> NDArray[np.uint32]:
    """One curve of thinned points on an empty canvas, as code points (rows, columns).

    Remembered, because the pinned curves and the setpoint seldom change with a what-if.
    """
    library = _plotext()
    with _one_at_a_time:
        # Otherwise it trims the canvas to the size of the terminal it finds.
        library.terminal.limit(False, False)
        figure = library.figure
        figure.clear()
        figure.theme("colorless")
        figure.plot_size(columns, rows)
        figure.axes(False)
        for axis in ("x", "y"):
            figure.ruler(axis).lim(0.0, 1.0).ticks([], [])
        signal = figure.signal(np.frombuffer(x).tolist(), np.frombuffer(y).tolist(), marker=marker)
        figure.draw(signal.lines(joined))
        drawn = figure.build().string(colorless=True)
    text = "".join(line[:columns].ljust(columns) for line in drawn.split("\n")[:rows])
    cells = np.frombuffer(text.encode("utf-32-le"), dtype=np.uint32)
    return cells.reshape(rows, columns)


# --- tables --------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Lines:
    side: str
    side_tick: str
    base: str
    base_tick: str
    corner: str


LINES: Final = {
    False: _Lines("│", "┤", "─", "┬", "└"),
    True: _Lines("|", "+", "-", "+", "+"),
}
"""Frame characters, by `ascii_only`."""

SAMPLES: Final = {"braille": "⠒"}
"""Legend sample of plotext's code words."""

INKS: Final = {
    "pinned": Ink("o", "o", joined=False),
    "setpoint": Ink("─", "-", joined=False),
    "pv": Ink("braille", "*"),
    "output": Ink("braille", "*"),
    "record": Ink("·", ".", joined=False),
    "fit": Ink("braille", "*"),
    "best-pi": Ink("braille", "*"),
    "best-pid": Ink("+", "+"),
    "rule": Ink("o", "o", joined=False),
    "present": Ink("P", "P", joined=False),
    "chosen-point": Ink("X", "X", joined=False),
}
"""Kinds of curve; no two that meet in a pane look alike without colour."""


@dataclass(frozen=True)
class Ground:
    """How a kind of cell of a map is drawn."""

    unicode: str
    ascii: str
    style: str


GROUNDS: Final = (
    Ground("·", ".", "good"),
    Ground("+", "+", "caution"),
    Ground("▒", "#", "worse"),
)
"""Kinds of cell, from fair to foul; they differ without colour."""
HERE: Final = Ground("O", "O", "chosen")
"""The present point of a map."""

STYLES: Final = ("frame", "label", *INKS, *(ground.style for ground in (*GROUNDS, HERE)))
"""What a picture's style numbers mean."""
