"""The Proposals page: best settings and published rules, each judged on this loop."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState

from workbench import report, study, units
from workbench.case.case import Case
from workbench.errors import WorkbenchError
from workbench.model.pid import Controller
from workbench.screens.cells import Line
from workbench.screens.keys import Command, bindings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Panel, remark, wrapped
from workbench.screens.work import Work
from workbench.study import Proposal
from workbench.units import Amount, Figure

COLUMNS: Final = "{:<31}{:<8}{:<9}{:<9}{:>5}{:>4}{:>7}{:>7}"
"""Rule, gain or band, times, figures: 80 columns together."""


class Proposed(Message):
    """Posted when the proposals are there, or why there are none."""

    def __init__(self, case: Case, rows: tuple[Proposal, ...], fault: str = "") -> None:
        super().__init__()
        self.case, self.rows, self.fault = case, rows, fault


class ProposalTable(Panel):
    """One set of settings a line; what the chosen one is, below."""

    title = "Best settings and published rules"
    selects = True
    help = (
        "Settings in the form and units of this controller. Ms is the maximum sensitivity (below "
        "1.6 is calm, above 2 is nervous), PM the phase margin, IAE the integral of the absolute "
        "error after the load step and after the setpoint step of the scenario.",
        "The present settings come first; then the rules that apply, the quickest calm one first.",
    )

    def __init__(self, work: Work) -> None:
        super().__init__(work, css_id="proposals")
        self.rows: tuple[Proposal, ...] = ()

    @property
    def chosen(self) -> Proposal | None:
        """The proposal of the chosen line."""
        return self.rows[self.cursor] if self.cursor < len(self.rows) else None

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """A line of column names under the title."""
        title, *rest = super().lines(width, height - 1)
        level = self._level
        names = COLUMNS.format("  rule", level, "integral", "derivat.", "Ms", "PM", "load", "SP")
        return (title, ((names[:width], "label"),), *rest)

    @property
    def _level(self) -> str:
        controller = self.work.case.controller
        band = controller is not None and controller.proportional_band is not None
        return "band" if band else "gain"

    def unit(self, name: str) -> str:
        """The unit in which every line gives this time, or nothing where no line has one."""
        amounts = [getattr(row.controller, name) for row in self.rows if row.controller]
        return next((amount.unit for amount in amounts if amount is not None), "")

    def body(self, width: int) -> list[Line]:
        """Name, settings, figures; or that the rule does not apply."""
        lines: list[Line] = []
        for row, proposal in enumerate(self.rows):
            here = row == self.cursor
            name = f"{'>' if here else ' '} {proposal.method}"
            if not proposal.applies or proposal.controller is None:
                words, tone = f"{name:<31}does not apply: {proposal.reason}", "quiet"
            else:
                words, tone = self._settings_and_figures(name, proposal), "plain"
            words = words if len(words) <= width else words[: width - 1] + "…"
            lines.append(((words, "chosen" if here else tone),))
        return lines

    def _settings_and_figures(self, name: str, proposal: Proposal) -> str:
        controller = proposal.controller
        assert controller is not None
        band, gain = controller.proportional_band, controller.gain
        return COLUMNS.format(
            name,
            units.text(band if band is not None else gain),
            self._time(controller, "integral"),
            self._time(controller, "derivative"),
            _figure(proposal.max_sensitivity, 3),
            _figure(proposal.phase_margin_deg, 2),
            _figure(proposal.load_iae, 4),
            _figure(proposal.setpoint_iae, 4),
        )

    def _time(self, controller: Controller, name: str) -> str:
        amount: Amount | None = getattr(controller, name)
        if amount is None:
            return "none"
        return units.text(amount.value, "" if amount.unit == self.unit(name) else amount.unit)

    def fixed(self, width: int) -> list[Line]:
        """What the chosen line is, and what to mind."""
        chosen = self.chosen
        if chosen is None:
            return []
        lines: list[Line] = [(("─" * width, "frame"),)]
        if chosen.reason:
            lines += remark(chosen.reason, width, "caution")[:2]
        if over := report.family_words(chosen):
            lines += wrapped(f"{over}.", width)
        aim = f" aims at {chosen.objective}; for {chosen.limits}." if chosen.objective else ""
        lines += wrapped(f"{chosen.title}{':' if aim else ','}{aim} {chosen.source}", width)
        # A fixed height, so that the list does not jump as the cursor moves.
        return [*lines, *[()] * 8][:8]


def _figure(figure: Figure, digits: int) -> str:
    return "-" if figure.value is None else units.text(figure.value, digits=digits)


class ProposalsPage(Page):
    """Look at proposals, take one."""

    about = (
        "Every rule is worked out for this plant and judged on this loop, with its scan interval "
        "and filters. Taking one changes the controller's settings; u on the loop's page takes it "
        "back. Where settings and plant part, so do the figures: look at the trend.",
    )
    commands = (
        Command("enter,a", "Enter", "take the settings", "take", "take the chosen settings", "a"),
        Command("escape,q", "Esc", "back", "back", "back to the loop", "q"),
        HELP,
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self.table = ProposalTable(work)

    def head(self) -> Line:
        """The loop, and the units of the figures."""
        loop = self.work.case.loop
        return ((f" {loop.tag}  {loop.service}", "title"), ("  proposals", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The table."""
        yield self.table

    def on_mount(self) -> None:
        """Work the rules out in a thread."""
        super().on_mount()
        self.table.focus()
        self.tell("working out the rules ...")
        case = self.work.case
        self.run_worker(lambda: self._propose(case), thread=True, exit_on_error=False)

    def _propose(self, case: Case) -> None:
        try:
            self.post_message(Proposed(case, study.propose(case)))
        except WorkbenchError as fault:
            self.post_message(Proposed(case, (), str(fault)))

    def on_proposed(self, message: Proposed) -> None:
        """Show them."""
        self.table.rows = message.rows
        if message.fault:
            self.tell(f"{message.fault}", "worse")
        else:
            self.tell(f"{self._units()}", "quiet")
        # The present settings are the first line, the best proposal the second.
        self.table.cursor = min(1, max(0, len(message.rows) - 1))
        self.table.redraw()

    def _units(self) -> str:
        """In which units the columns are."""
        times = [(name, self.table.unit(name)) for name in ("integral", "derivative")]
        named = [f"{name} in {unit}" for name, unit in times if unit]
        iae = f"IAE in {self.work.case.pv.unit} s"
        controller = self.work.case.controller
        band = controller is not None and controller.proportional_band is not None
        return "; ".join(["band in %" if band else "gain in %/%", *named, "PM in deg", iae])

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not take the work with it."""
        if event.state is WorkerState.ERROR:
            fault = event.worker.error
            self.tell(f"could not be worked out ({type(fault).__name__}: {fault})", "worse")

    def action_take(self) -> None:
        """Take the chosen settings."""
        chosen = self.table.chosen
        if chosen is None:
            return
        try:
            self.work.change(study.take(self.work.case, chosen))
        except WorkbenchError as fault:
            self.tell(f"{fault}", "worse")
            return
        self.program.back_to_loop(f"settings by {chosen.title}; u takes them back")
