"""The Wishes panel: what proposals aim at, and the limits that they are held to."""

from __future__ import annotations

from typing import Final

from workbench.screens.cells import Line
from workbench.screens.panel import Panel, wrapped
from workbench.screens.work import Work
from workbench.study import Wish, edit_wish, show_wish
from workbench.units import quantities

LABELS: Final = {
    "setpoint_share": "share of setpoint IAE",
    "max_sensitivity": "Ms at most",
    "max_complementary_sensitivity": "Mt at most",
    "max_noise_gain": "noise gain at most",
    "max_load_travel": "load travel at most",
    "relay": "relay test",
}
"""Names that say more than those of the fields."""

_COLUMN: Final = 26


class Wishes(Panel):
    """One wish a line."""

    title = "Wishes and limits"
    selects = True
    help = (
        "What the best settings are best at, the limits they keep, and what rules for levels and "
        "for relay tests want to know. Enter changes the chosen line; an empty line takes the "
        "default back. Every proposal is then worked out anew.",
        "Ms is limited to 1.7 unless you say otherwise: the plant's gain may then be 2.4 times as "
        "high, or its lag 34 degrees more, before the loop swings for ever, and the tight settings "
        "of SIMC come out at 1.6 to 1.7. 1.4 is calm; 2 is as far as loops are commonly driven.",
    )

    def __init__(self, work: Work) -> None:
        super().__init__(work, css_id="wishes")

    @property
    def names(self) -> tuple[str, ...]:
        """The wishes, from top to bottom."""
        return tuple(quantities(Wish))

    @property
    def name_chosen(self) -> str:
        """The wish of the chosen line."""
        return self.names[min(self.cursor, len(self.names) - 1)]

    def body(self, width: int) -> list[Line]:
        """Label and value with its unit."""
        lines: list[Line] = []
        for row, name in enumerate(self.names):
            here = self.has_focus and row == self.cursor
            value = show_wish(self.work.wish, name)
            unit = self.work.unit(quantities(Wish)[name])
            label = f"{'>' if here else ' '} {label_of(name)}".ljust(_COLUMN)
            words = f"{value} {unit}".rstrip() if value else "-"
            changed = value != show_wish(Wish(), name)
            tone = "chosen" if here else "changed" if changed else "plain"
            lines.append(((label, "label"), (words, tone)))
        return lines

    def fixed(self, width: int) -> list[Line]:
        """What the chosen wish means."""
        declared = quantities(Wish)[self.name_chosen]
        example = f', like "{declared.example}"' if declared.example else ""
        lines = wrapped(f"{declared.meaning}{example}", width, "quiet", "  ")
        return [*lines, (), ()][:2]

    def edit(self, typed: str) -> bool:
        """Change the chosen wish; `False` where nothing changes.  Raises `InputError`."""
        wish = edit_wish(self.work.wish, self.name_chosen, typed)
        changed = wish != self.work.wish
        self.work.wish = wish
        return changed


def label_of(name: str) -> str:
    """The name of a wish on the screen."""
    return LABELS.get(name, name.replace("_", " "))
