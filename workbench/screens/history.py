"""The History panel: what was done to the loop, newest first."""

from __future__ import annotations

from workbench import units
from workbench.case.case import Revision
from workbench.model.pid import Controller
from workbench.screens.cells import Line
from workbench.screens.panel import Panel, wrapped


class HistoryPanel(Panel):
    """Every entry of the tuning history."""

    number = "5"
    title = "History"
    help = (
        "Who put which settings in force, when and why, newest first, with the figures predicted "
        "then. Entries are only ever added: s saves and adds one.",
    )

    def body(self, width: int) -> list[Line]:
        """Newest first, numbered from the oldest."""
        lines: list[Line] = []
        entries = tuple(enumerate(self.work.case.history, 1))
        for number, entry in reversed(entries):
            at = entry.at.strftime("%Y-%m-%d %H:%M")
            lines.append(((f"  {number} {at} {entry.who} {entry.kind}", "label"),))
            lines += wrapped(settings_of(entry), width, "plain", "    ")
            if entry.why:
                lines += wrapped(entry.why, width, "quiet", "    ")
        return lines or [(("  nothing yet: s saves and adds the first entry", "quiet"),)]


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
