"""Pinned predictions: which are kept for comparison, and in what words they are told apart.

Knows nothing of Textual.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from workbench import charts
from workbench.screens.fields import label_of

if TYPE_CHECKING:
    from workbench.study import Evaluation

Settings = Mapping[str, str]
"""Key of the case file -> the setting in words, with its unit."""

_NAMED_FROM = 18
"""Columns for a pin from which on its settings are named."""


@dataclass(frozen=True)
class Pin:
    """One pinned prediction."""

    ink: str
    """One of `charts.PINS`."""
    evaluation: Evaluation
    settings: Settings
    """As they were when it was pinned."""

    @property
    def mark(self) -> str:
        """The character its curves are drawn with."""
        return charts.INKS[self.ink].ascii


@dataclass(frozen=True)
class Pins:
    """The predictions that are compared with, the newest last; at most as many as `charts.PINS`."""

    kept: tuple[Pin, ...] = ()

    @property
    def newest(self) -> Pin | None:
        """The one that figures are compared with."""
        return self.kept[-1] if self.kept else None

    def of(self, evaluation: Evaluation) -> Pin | None:
        """The pin of an evaluation, if it is pinned."""
        return next((pin for pin in self.kept if pin.evaluation.case == evaluation.case), None)

    def with_(self, evaluation: Evaluation, settings: Settings) -> Pins:
        """Pinned as well: the oldest goes where there are too many, a pinned one is the newest."""
        known = self.of(evaluation)
        others = tuple(pin for pin in self.kept if pin is not known)
        if known is not None:
            return Pins((*others, known))
        others = others[max(0, len(others) + 1 - len(charts.PINS)) :]
        free = next(ink for ink in charts.PINS if ink not in [pin.ink for pin in others])
        return Pins((*others, Pin(free, evaluation, settings)))

    def without_newest(self) -> Pins:
        """The one before is the newest again."""
        return Pins(self.kept[:-1])

    def renewed(self, old: Evaluation, new: Evaluation) -> Pins:
        """With an evaluation put in the place of another one that says the same."""
        return Pins(
            tuple(
                replace(pin, evaluation=new) if pin.evaluation is old else pin for pin in self.kept
            )
        )

    def shown_beside(self, evaluation: Evaluation) -> tuple[Pin, ...]:
        """Those that are drawn under the present prediction."""
        return tuple(pin for pin in self.kept if pin.evaluation is not evaluation)

    def words(self, present: Settings, width: int) -> str:
        """The marks with the settings in which pins and present settings differ, in one line."""
        keys = self._different(present)
        if not keys:
            return ""
        pairs = [
            (pin.mark, [(_named(key), pin.settings.get(key) or "-") for key in keys])
            for pin in self.kept
        ]
        labelled = [f"{m} {', '.join(f'{label} {value}' for label, value in t)}" for m, t in pairs]
        forms = ["  ".join(labelled)]
        if len(keys) == 1:
            forms += _with_one_unit(_named(keys[0]), pairs)
        shown = next((form for form in forms if len(form) <= width), None)
        if shown is not None:
            return shown
        if len(keys) == 1:
            return _cut(forms[-1], width)
        # Each gets its share of the room; names are left out where that is small.
        room = max(0, width - 2 * (len(pairs) - 1)) // len(pairs)
        if room < _NAMED_FROM:
            labelled = [f"{mark} {', '.join(value for _, value in told)}" for mark, told in pairs]
        return "  ".join(_cut(each, room) for each in labelled)

    def words_of(self, pin: Pin, present: Settings) -> str:
        """In what one pin is not like the others and the present settings."""
        keys = self._different(present)
        return ", ".join(f"{_named(key)} {pin.settings.get(key) or '-'}" for key in keys)

    def _different(self, present: Settings) -> list[str]:
        """The keys, those of the controller first."""
        all_of = [*(pin.settings for pin in self.kept), present]
        keys = dict.fromkeys(key for settings in all_of for key in settings)
        found = [key for key in keys if len({settings.get(key, "") for settings in all_of}) > 1]
        return sorted(found, key=lambda key: not key.startswith("controller."))


def _named(key: str) -> str:
    """The name of a setting where there is no panel around it to say whose gain it is."""
    return "plant gain" if key == "plant.gain" else label_of(key)


def _cut(words: str, width: int) -> str:
    return words if len(words) <= width else words[: max(0, width - 1)] + "…"


def _with_one_unit(label: str, pairs: list[tuple[str, list[tuple[str, str]]]]) -> list[str]:
    """One setting of several pins, its name once; its unit once, and without."""
    split = [value.rpartition(" ") for _, [(_, value)] in pairs]
    units = {unit for _, _, unit in split}
    if len(units) > 1 or not split[0][1]:
        return [f"{label} {'  '.join(f'{mark} {value}' for mark, [(_, value)] in pairs)}"]
    marks = [mark for mark, _ in pairs]
    numbers = "  ".join(f"{m} {n}" for m, (n, _, _) in zip(marks, split, strict=True))
    return [f"{label} {numbers} {units.pop()}", f"{label} {numbers}"]
