"""The History panel: what was done to the loop, newest first."""

from __future__ import annotations

from workbench import units
from workbench.case.case import Case, Revision, differences, with_settings
from workbench.errors import InputError
from workbench.model.pid import Controller
from workbench.screens.cells import Line
from workbench.screens.panel import Panel, wrapped


class HistoryPanel(Panel):
    """Every entry of the tuning history."""

    number = "5"
    title = "History"
    selects = True
    help = (
        "Who put which settings in force, when and why, newest first, with the figures predicted "
        "then. Entries are only ever added: s saves and adds one.",
        "Enter puts the settings of the chosen entry back, in one change that u undoes; the line "
        "below says what would change.",
    )

    def _entries(self, width: int) -> list[tuple[Revision, list[Line]]]:
        """Newest first, numbered from the oldest."""
        found = []
        for number, entry in reversed(tuple(enumerate(self.work.case.history, 1))):
            at = entry.at.strftime("%Y-%m-%d %H:%M")
            lines: list[Line] = [((f"  {number} {at} {entry.who} {entry.kind}", "label"),)]
            lines += wrapped(settings_of(entry), width, "plain", "    ")
            if entry.why:
                lines += wrapped(entry.why, width, "quiet", "    ")
            found.append((entry, lines))
        return found

    def body(self, width: int) -> list[Line]:
        """Every entry; the chosen one is marked."""
        chosen, lines = self.chosen(width), list[Line]()
        for entry, (head, *rest) in self._entries(width):
            marked = entry is chosen and self.has_focus
            lines += [((f">{head[0][0][1:]}", "chosen"),) if marked else head, *rest]
        return lines or [(("  nothing yet: s saves and adds the first entry", "quiet"),)]

    def chosen(self, width: int = 0) -> Revision | None:
        """The entry on whose lines the cursor stands."""
        row = 0
        for entry, lines in self._entries(width or max(1, self.size.width)):
            row += len(lines)
            if self.cursor < row:
                return entry
        return None


def changed_by(entry: Revision, case: Case) -> str:
    """What putting an entry's settings back would change, in the controller's units."""
    try:
        found = differences(case, with_settings(case, entry))
    except InputError as fault:
        return str(fault)
    return ", ".join(
        f"{key.partition('.')[2].replace('_', ' ')} {old or '-'} -> {new or '-'}"
        for key, old, new in found
    )


def settings_of(entry: Revision) -> str:
    """The settings and figures of an entry as words."""
    parts = []
    if entry.controller is not None:
        declared = units.quantities(Controller)
        for name in ("gain", "proportional_band", "integral", "derivative"):
            value = getattr(entry.controller, name)
            if value is not None:
                parts.append(f"{name.replace('_', ' ')} {declared[name].show(value)}")
    if entry.max_sensitivity is not None:
        parts.append(f"max sensitivity {units.text(entry.max_sensitivity)}")
    if entry.load_iae is not None:
        parts.append(f"load IAE {units.text(entry.load_iae)}")
    return ", ".join(parts) or "no settings recorded"
