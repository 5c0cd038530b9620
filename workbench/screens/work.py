"""The work on one case: the case as it is now, what it was, and what is pinned.

Knows nothing of Textual.  The only holder of state; panels show it and pages change it.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable, Mapping
from dataclasses import replace
from datetime import datetime
from pathlib import Path
from typing import TYPE_CHECKING

from workbench import study
from workbench.case import case as cases
from workbench.case.case import Case, Revision
from workbench.case.files import CaseFile, Merge, merge, read_case, save_case, write_new
from workbench.errors import problem
from workbench.screens import drafts
from workbench.units import Amount, Quantity, plain

if TYPE_CHECKING:
    from workbench.study import Evaluation

SMALL, LARGE = 1.02, 1.2
"""Factors of a nudge."""


class Work:
    """One open case."""

    def __init__(self, file: CaseFile) -> None:
        self.file = file
        self.case: Case = file.case
        self.evaluation: Evaluation | None = None
        """Of `case`, or of the one before it until the new one is there."""
        self.fault = ""
        """Why there is no evaluation of the present case."""
        self.pinned: Evaluation | None = None
        self.wish = study.Wish()
        """What proposals aim at, until the case is closed."""
        self._before: list[Case] = []
        self._after: list[Case] = []
        self.keeper = drafts.Keeper(self.path)
        self.draft = drafts.find(self.path)
        """Unsaved work of an earlier session, until it is taken up or dropped."""
        self._looked_at: CaseFile | None = None
        self._saved_texts: dict[str, str] = {}
        self._look()

    @classmethod
    def open(cls, path: Path) -> Work:
        """Open a case file.  Raises `InputError`."""
        return cls(read_case(path))

    # -- what is -----------------------------------------------------------------------------------

    @property
    def path(self) -> Path:
        """The case file."""
        return Path(self.file.path)

    @property
    def saved(self) -> Case:
        """The case as the file has it."""
        return self.file.case

    @property
    def changes(self) -> tuple[tuple[str, str, str], ...]:
        """Key, text in the file, text now, of every setting that is not saved."""
        return self._changes

    @property
    def told(self) -> tuple[tuple[str, str, str], ...]:
        """The changes that say something to a person; a check sum does not."""
        return tuple(entry for entry in self.changes if not entry[0].endswith("sha256"))

    @property
    def unsaved(self) -> bool:
        """There is something that the file does not have."""
        return self.case != self.saved

    @property
    def quantities(self) -> dict[str, Quantity]:
        """The keys that can be set now, in the order of the file."""
        return self._quantities

    def show(self, key: str) -> str:
        """The text of a setting, as it is edited."""
        return self._texts[key]

    def unit(self, quantity: Quantity) -> str:
        """The unit of a quantity in the loop's own words."""
        own = {"PV": self.case.pv.unit, "OP": self.case.op.unit}
        return "/".join(own.get(part, part) for part in quantity.unit.split("/"))

    # -- changing ----------------------------------------------------------------------------------

    def change(self, case: Case) -> bool:
        """Make `case` the present one; `False` where nothing changes."""
        if case == self.case:
            return False
        self._before.append(self.case)
        self._after.clear()
        self._set(case)
        return True

    def edit(self, key: str, text: str) -> bool:
        """Set one key.  Raises `InputError` in the words of the file."""
        if key == "plant.shape" and self.quantities[key].parse(text):
            return self.change(cases.with_shape(self.case, text.strip()))
        return self.change(cases.edit(self.case, key, text))

    def nudge(self, key: str, factor: float) -> bool:
        """Multiply a setting, or go to the next of its choices.  Raises `InputError`."""
        return self.edit(key, nudged(self.quantities[key], self.show(key), factor))

    def undo(self) -> bool:
        """Back by one change."""
        return self._step(self._before, self._after)

    def redo(self) -> bool:
        """Forward by one change."""
        return self._step(self._after, self._before)

    def _step(self, source: list[Case], target: list[Case]) -> bool:
        if not source:
            return False
        target.append(self.case)
        # What is in the history has happened; only settings go back.
        self._set(replace(source.pop(), history=self.case.history))
        return True

    def _set(self, case: Case) -> None:
        self.case = case
        self._look()
        at = datetime.now().astimezone().isoformat(timespec="seconds")
        base = hashlib.sha256(self.file.raw).hexdigest()
        kept = {key: new for key, _, new in self.changes if key in self.quantities}
        self.keeper.hold(at, base, kept)

    def take_up(self, draft: drafts.Draft) -> bool:
        """Bring the unsaved work of an earlier session back.  Raises `InputError`."""
        taken = cases.edit_all(self.case, dict(draft.changes))
        self.draft = None
        self.keeper.replaces(draft)
        return self.change(taken)

    def put_back(self, entry: Revision) -> bool:
        """The settings of a history entry, in one change.  Raises `InputError`."""
        return self.change(cases.with_settings(self.case, entry))

    def drop(self, draft: drafts.Draft) -> None:
        """Forget the unsaved work of an earlier session."""
        self.draft = None
        draft.path.unlink(missing_ok=True)

    def _look(self) -> None:
        """Read off once what every panel asks for again and again."""
        self._quantities = cases.keys(self.case)
        self._texts = {key: cases.show(self.case, key) for key in self._quantities}
        if self._looked_at is not self.file:
            self._looked_at, saved = self.file, self.saved
            self._saved_texts = {key: cases.show(saved, key) for key in cases.keys(saved)}
        was = self._saved_texts
        order = [*self._quantities, *(key for key in was if key not in self._quantities)]
        pairs = [(key, was.get(key, ""), self._texts.get(key, "")) for key in order]
        self._changes = tuple(pair for pair in pairs if pair[1] != pair[2])

    # -- saving ------------------------------------------------------------------------------------

    def merge(self) -> Merge:
        """Take over what someone else saved meanwhile and keep the work over it.

        Nothing is saved.  Raises `InputError` where the file can no longer be read.
        """
        found = merge(self.file, self.case)
        self.file = found.file
        if not self.change(found.case):
            self._look()
        return found

    def writer(self, entry: Mapping[str, str], now: datetime, *, beside: bool) -> Writer:
        """What writes the present case with a history entry; it may run in any thread.

        Parameters
        ----------
        entry
            `who`, `why`, `kind` and `reference`.
        now
            When the entry is made.
        beside
            Into a new file beside the case's own, which is left as it is.
        """
        file, case = self.file, self.case
        name = f"{self.path.stem}_{now:%Y%m%d_%H%M%S}.toml"

        def write() -> CaseFile:
            recorded = study.record_change(case, now=now, **entry)
            if beside:
                return write_new(self.path.with_name(name), recorded)
            return save_case(file, recorded)

        return write

    def is_saved_in(self, file: CaseFile) -> None:
        """The work is in a file now: its own, or a new one in which it goes on."""
        elsewhere = file.path != self.file.path
        self.file = file
        self._set(file.case)
        if self.evaluation is not None:
            # Only the history is new; the figures are those of the same settings.
            same = self.pinned is self.evaluation
            self.evaluation = replace(self.evaluation, case=self.case)
            self.pinned = self.evaluation if same else self.pinned
        self.keeper.write_last()
        if elsewhere:
            self.keeper = drafts.Keeper(self.path)


Writer = Callable[[], CaseFile]
"""Writes the work.  Raises `InputError` or `OSError`; the work is kept then."""


def nudged(quantity: Quantity, text: str, factor: float) -> str:
    """The text of a setting after a nudge.

    Raises `InputError` where there is nothing to multiply.
    """
    choices = ("true", "false") if quantity.kind == "flag" else quantity.choices
    if choices:
        place = choices.index(text) if text in choices else -1
        return choices[(place + (1 if factor > 1 else -1)) % len(choices)]
    if quantity.kind == "text":
        raise problem("words cannot be nudged", "press Enter to edit them")
    value = quantity.parse(text) if text else None
    if isinstance(value, Amount):
        return str(Amount(_four_digits(value.value * factor), value.unit))
    if isinstance(value, int | float):
        return plain(_four_digits(value * factor))
    raise problem("there is no number here to nudge", "press Enter to type one")


def _four_digits(value: float) -> float:
    if value == 0 or not math.isfinite(value):
        raise problem("0 stays 0 when it is multiplied", "press Enter to type a number")
    return float(f"{value:.4g}")
