"""Words, columns and figures that every answer is made of."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Final

from workbench.units import Amount, Figure, Note, harmless, text, time_text

if TYPE_CHECKING:
    from workbench.model.pid import Controller


Json = dict[str, object]


Rows = list[tuple[str, str]]


_JOIN: Final = "\N{NO-BREAK SPACE}"
"""Stands for a space at which a line must not end; never printed."""


def wrapped(words: str, width: int, indent: str = "", hang: str | None = None) -> str:
    """A paragraph of at most `width` columns; nothing in it can move a terminal's cursor."""
    # A number and its unit stay on one line: the break is kept from the space between them.
    joined = re.sub(r"(?<=\d) (?=[^\s\d])", _JOIN, harmless(words, 2000))
    filled = textwrap.fill(
        joined,
        width,
        initial_indent=indent,
        subsequent_indent=indent if hang is None else hang,
        break_on_hyphens=False,
    )
    return filled.replace(_JOIN, " ")


def two_columns(rows: Rows, width: int, indent: str = "  ") -> list[str]:
    """Two aligned columns; a long value goes on below itself."""
    column = max((len(label) for label, _ in rows), default=0) + 2
    lines = []
    for label, value in rows:
        head = f"{indent}{label.ljust(column)}"
        lines.append(wrapped(value, width, head, " " * len(head)))
    return lines


def grid(head: Sequence[Sequence[str]], rows: Sequence[Sequence[str]]) -> list[str]:
    """Columns as wide as their words, the first to the left and the rest to the right."""
    every = [[harmless(word) for word in row] for row in (*head, *rows)]
    widths = [max(len(row[i]) for row in every) for i in range(len(every[0]))]
    return [
        "  ".join(
            word.rjust(wide) if i else word.ljust(wide)
            for i, (word, wide) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in every
    ]


def note_lines(notes: Iterable[Note], width: int) -> list[str]:
    """Remarks, each under its own word; the same remark once."""
    told = dict.fromkeys((note.severity, note.text) for note in notes)
    words = {"info": "Note", "caution": "Caution"}
    lines = [wrapped(f"{words[severity]}: {said}", width, hang="  ") for severity, said in told]
    return ["", *lines] if lines else []


def handover_lines(width: int) -> list[str]:
    """The caution wherever settings leave the tool."""
    from workbench.study import HANDOVER

    return ["", *(wrapped(sentence, width, hang="  ") for sentence in HANDOVER)]


def figure_words(figure: Figure, unit: str = "") -> str:
    """A figure with its unit, or why there is none."""
    if figure.value is None:
        return f"none: {figure.reason}" if figure.reason else "none"
    return text(figure.value, unit)


def time_words(figure: Figure) -> str:
    """A time, or why there is none."""
    return time_text(figure.value) if figure.value is not None else figure_words(figure)


def yes_or_no(claim: bool) -> str:
    """A claim in one word."""
    return "yes" if claim else "no"


def put(target: Json, key: str, figure: Figure) -> None:
    """A figure under its key, with the reason beside it where there is none."""
    target[key] = None if figure.value is None else float(figure.value)
    if figure.value is None:
        target[f"{key}_reason"] = figure.reason or "it is not known"


def noted(notes: Iterable[Note]) -> list[Json]:
    """Notes as JSON keeps them."""
    return [{"severity": note.severity, "text": note.text} for note in notes]


def pairs(values: Iterable[complex]) -> list[list[float]]:
    """[real, imaginary] of each pole or zero; `+ 0.0` turns a minus zero over."""
    return [[float(value.real) + 0.0, float(value.imag) + 0.0] for value in values]


def points(values: Sequence[complex]) -> str:
    """Poles or zeros on one line, a pair of complex ones once."""
    shown = []
    for value in values:
        real = text(value.real)
        if abs(value.imag) <= 1e-9 * abs(value):
            shown.append(real)
        elif value.imag > 0:
            shown.append(f"{real} +- {text(value.imag)} i")
    return f"{', '.join(shown)} 1/s" if shown else "none"


def settings_text(controller: Controller) -> str:
    """The settings as their sheet shows them, on one line."""
    gain = (
        f"gain {text(controller.gain)}"
        if controller.gain is not None
        else f"proportional band {text(controller.proportional_band)} %"
    )
    parts = [
        gain,
        f"integral {amount_words(controller.integral)}",
        f"derivative {amount_words(controller.derivative)}",
    ]
    return ", ".join(parts)


def amount_words(amount: Amount | None, digits: int = 4) -> str:
    """An amount as it is read, in its own unit."""
    return "none" if amount is None else text(amount.value, amount.unit, digits)


def integral_seconds(controller: Controller | None) -> Figure:
    """Integral time [s], whatever the form and the unit."""
    if controller is None:
        return Figure(None, "there is no controller")
    if controller.integral is None:
        return Figure(None, "there is no integral action")
    if controller.form != "parallel":
        return Figure(controller.integral.seconds)
    if not controller.gain_value:
        return Figure(None, "the gain is 0, so there is no integral time")
    return Figure(controller.gain_value / controller.integral.per_second)


def derivative_seconds(controller: Controller | None) -> Figure:
    """Derivative time [s], whatever the form and the unit; 0 where there is none."""
    if controller is None:
        return Figure(None, "there is no controller")
    if controller.derivative is None:
        return Figure(0.0)
    if controller.form != "parallel":
        return Figure(controller.derivative.seconds)
    if not controller.gain_value:
        return Figure(None, "the gain is 0, so there is no derivative time")
    return Figure(controller.derivative.seconds / controller.gain_value)
