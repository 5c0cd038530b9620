"""A panel of settings: one line each, edited in place."""

from __future__ import annotations

from typing import TYPE_CHECKING, ClassVar

from workbench.screens.cells import Line
from workbench.screens.panel import Panel, wrapped
from workbench.units import Quantity

if TYPE_CHECKING:
    from workbench.screens.work import Work


class FieldsPanel(Panel):
    """The settings of some tables of the case, in the order of the file."""

    selects = True
    tables: ClassVar[tuple[str, ...]] = ()
    """Tables of the case file that are shown here."""
    hidden: ClassVar[tuple[str, ...]] = ()
    """Keys that are set by other means."""

    def __init__(self, work: Work, *, css_id: str | None = None) -> None:
        super().__init__(work, css_id=css_id)
        self._keys: tuple[str, ...] = ()

    @property
    def keys(self) -> tuple[str, ...]:
        """The keys shown, from top to bottom."""
        return tuple(
            key
            for key in self.work.quantities
            if key.partition(".")[0] in self.tables and key not in self.hidden
        )

    @property
    def key(self) -> str:
        """The key of the chosen line."""
        keys = self.keys
        return keys[min(self.cursor, len(keys) - 1)]

    @property
    def wanted_height(self) -> int:
        """Rows that show everything, the title included."""
        return 1 + len(self.keys)

    def row_of(self, key: str) -> int | None:
        """The row of the panel on which a key stands, or `None` while it is out of view."""
        row = self.keys.index(key) - self.top
        return row + 1 if 0 <= row < self.size.height - 1 else None

    def body(self, width: int) -> list[Line]:
        """Label, value with its unit, and a mark where it is not what the file has."""
        changed = {key for key, _, _ in self.work.changes}
        lines: list[Line] = []
        for row, key in enumerate(self.keys):
            here = self.has_focus and row == self.cursor
            text = self.work.show(key)
            value = with_unit(text, self.work.quantities[key], self.work) if text else "-"
            mark = "*" if key in changed else " "
            tone = "chosen" if here else "changed" if key in changed else "plain"
            label = f"{'>' if here else ' '}{label_of(key)}".ljust(LABEL)
            room = max(1, width - len(label) - 2)
            value = value if len(value) <= room else value[: room - 1] + "…"
            lines.append(((label, "label"), (f"{mark}{value}", tone)))
        return lines


LABEL = 18
"""Columns of a label, its marks included."""


SHORTER = {
    "plant.second_time_constant": "2nd time constant",
    "op.valve_closes_on_rise": "OP closes on rise",
    "valve.resolution": "valve resolution",
    "valve.table": "valve table",
    "measurement.lag": "sensor lag",
    "measurement.resolution": "sensor resolution",
    "measurement.clips": "sensor clips",
    "compensation.model": "compensator model",
    "compensation.time_unit": "model time unit",
    "feedforward.dead_time": "its dead time",
    "inner.derivative_filter": "inner der. filter",
    "inner.setpoint_weight": "inner SP weight",
    "inner.derivative_on": "inner der. on",
    "scenario.inner_mode": "inner mode then",
}
"""Names too long for the column of labels, or the same as another beside them."""


def label_of(key: str) -> str:
    """The name of a setting on the screen."""
    if key in SHORTER:
        return SHORTER[key]
    table, _, name = key.partition(".")
    words = name.replace("_", " ")
    if table in ("feedforward", "inner", "family"):
        return f"{table} {words}"
    return f"{table.upper()} {words}" if table in ("pv", "op") else words


def with_unit(text: str, quantity: Quantity, work: Work) -> str:
    """A setting with the unit of a plain number; amounts carry theirs already."""
    if quantity.kind != "number" or not text:
        return text
    unit = work.unit(quantity)
    return f"{text} {unit}" if unit else text


def meaning_of(key: str, work: Work, width: int) -> list[Line]:
    """What a setting is, its unit and how it is written, as lines for beside the entry."""
    quantity = work.quantities[key]
    words = quantity.meaning
    unit = work.unit(quantity)
    if quantity.kind == "number" and unit:
        words += f" [{unit}]"
    if quantity.choices or quantity.kind == "flag":
        words += ": " + ", ".join(quantity.choices or ("true", "false")) + " (Up, Down)"
    elif quantity.example:
        words += f', like "{quantity.example}"'
    return wrapped(words, width, "quiet")
