"""The Proposals page: best settings and published rules, each judged on this loop."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

from textual import on
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState, get_current_worker

from workbench import report, study, units
from workbench.case.case import Case
from workbench.errors import WorkbenchError
from workbench.model.pid import Controller
from workbench.screens.cells import Line
from workbench.screens.entry import Entry
from workbench.screens.keys import Command, bindings
from workbench.screens.output import copy_settings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Panel, remark, wrapped
from workbench.screens.trade_off import TradeOffPicture
from workbench.screens.waiting import Waiting
from workbench.screens.wishes import Wishes, label_of
from workbench.screens.work import Work
from workbench.study import Proposal, TradeOff, Wish
from workbench.units import Amount, Figure

COLUMNS: Final = "{:<31}{:<8}{:<9}{:<9}{:>5}{:>4}{:>7}{:>7}"
"""Rule, gain or band, times, figures: 80 columns together."""


class Proposed(Message):
    """Posted when the proposals are there, or why there are none."""

    def __init__(self, ticket: int, rows: tuple[Proposal, ...], fault: str = "") -> None:
        super().__init__()
        self.ticket, self.rows, self.fault = ticket, rows, fault


class TradedOff(Message):
    """Posted when the trade-off is there, or why there is none."""

    def __init__(self, ticket: int, found: TradeOff | None, fault: str = "") -> None:
        super().__init__()
        self.ticket, self.found, self.fault = ticket, found, fault


class ProposalTable(Panel):
    """One set of settings a line; what the chosen one is, below."""

    title = "Best settings and published rules"
    selects = True
    help = (
        "Settings in the form and units of this controller. Ms is the maximum sensitivity (below "
        "1.6 is calm, above 2 is nervous), PM the phase margin, IAE the integral of the absolute "
        "error after the load step and after the setpoint step of the scenario, without noise.",
        "The present settings come first; then what keeps the limits, the quickest first; then "
        "the rest. Below the list stands what the chosen line aims at, and its other figures: Mt, "
        "how much OP swings with the noise of the measurement, and how far it moves after a load.",
    )

    def __init__(self, work: Work) -> None:
        super().__init__(work, css_id="proposals")
        self.rows: tuple[Proposal, ...] = ()
        self.is_brief = False
        """Something else has the room of the lines at the foot."""

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
        lines += wrapped(self._other_figures(chosen), width)
        if self.is_brief:
            return [*lines, (), ()][:3]
        if chosen.reason:
            lines += remark(chosen.reason, width, "caution")[:2]
        if over := report.family_words(chosen):
            lines += wrapped(f"{over}.", width)
        aim = f" aims at {chosen.objective}; for {chosen.limits}." if chosen.objective else ""
        lines += wrapped(f"{chosen.title}{':' if aim else ','}{aim} {chosen.source}", width)
        # A fixed height, so that the list does not jump as the cursor moves.
        return [*lines, *[()] * 9][:9]

    def _other_figures(self, proposal: Proposal) -> str:
        """The figures that have no column."""
        travel = _with_unit(proposal.load_travel, self.work.case.op.unit)
        told = [
            f"Mt {_figure(proposal.max_complementary_sensitivity, 3)}",
            f"noise gain {_with_unit(proposal.noise_gain, '%/%')}",
            f"travel after the load step {travel}",
        ]
        return f" {proposal.method}: {', '.join(told)}" if proposal.controller else ""


def _figure(figure: Figure, digits: int) -> str:
    return "-" if figure.value is None else units.text(figure.value, digits=digits)


def _with_unit(figure: Figure, unit: str) -> str:
    return "-" if figure.value is None else units.text(figure.value, unit, digits=3)


class ProposalsPage(Page):
    """Look at proposals, say what they should aim at, take one."""

    called = "Proposals page"
    about = (
        "Every rule is worked out for this plant and judged on this loop, with its scan interval "
        "and filters. Taking one changes the controller's settings; u on the loop's page takes it "
        "back. Where settings and plant part, so do the figures: look at the trend.",
    )
    commands = (
        Command(
            "enter,a", "Enter", "take/edit", "take", "take the settings, or edit the wish", "a"
        ),
        Command("w", "w", "wishes", "wishes", "what proposals aim at, and their limits"),
        Command("t", "t", "trade-off", "trade_off", "what caution costs, as a picture"),
        Command("c", "c", "copy", "copy", "copy the chosen settings: clipboard and a file"),
        Command(
            "escape,q",
            "Esc",
            "back",
            "back",
            "stop the work, or back to the list, or to the loop",
            "q",
        ),
        HELP,
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self.table = ProposalTable(work)
        self.picture = TradeOffPicture(work)
        self.wishes = Wishes(work)
        self.entry = Entry(css_id="wish")
        self._ticket = 0
        self._waiting = Waiting(self)
        self._stopped = False

    def head(self) -> Line:
        """The loop, and the units of the figures."""
        loop = self.work.case.loop
        return ((f" {loop.tag}  {loop.service}", "title"), ("  proposals", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The picture, the table, the wishes, and the entry of one."""
        yield from (self.picture, self.table, self.wishes, self.entry)

    def on_mount(self) -> None:
        """Work the rules out in a thread."""
        super().on_mount()
        for widget in (self.picture, self.wishes, self.entry):
            widget.display = False
        self.table.focus()
        self._begin()

    def on_unmount(self) -> None:
        """Nobody waits for a search any more."""
        self.workers.cancel_node(self)

    # -- working out ------------------------------------------------------------------------------

    def _begin(self) -> None:
        """Work everything out anew; what is being worked out is stopped, and dropped."""
        self.workers.cancel_node(self)
        self._ticket += 1
        self._stopped = False
        ticket, case, wish = self._ticket, self.work.case, self.work.wish
        self._waiting.begin("working out searches and rules")
        self.picture.found = None
        self.run_worker(lambda: self._propose(ticket, case, wish), thread=True, exit_on_error=False)

    def _propose(self, ticket: int, case: Case, wish: Wish) -> None:
        worker = get_current_worker()
        try:
            rows = study.propose(case, wish, lambda: worker.is_cancelled, self._waiting.reach)
        except WorkbenchError as fault:
            self.post_message(Proposed(ticket, (), str(fault)))
        else:
            self.post_message(Proposed(ticket, rows))

    def on_proposed(self, message: Proposed) -> None:
        """Show them."""
        if message.ticket != self._ticket:
            return
        self._waiting.end()
        self.table.rows = self.picture.rows = message.rows
        if message.fault:
            self.tell(f"{message.fault}", "worse")
        elif self._stopped:
            self.tell("stopped: what is shown is the best found until then", "caution")
        elif not self.entry.display:
            # What is wrong with a wish being typed stays to be read.
            self.tell(f"{self._units()}", "quiet")
        # The present settings are the first line, the best proposal the second.
        self.table.cursor = min(1, max(0, len(message.rows) - 1))
        self.moved()
        if self.picture.display:
            self._begin_trade_off()

    def _begin_trade_off(self) -> None:
        ticket, case, wish = self._ticket, self.work.case, self.work.wish
        self._waiting.begin("working out the trade-off")
        self.run_worker(
            lambda: self._trade_off(ticket, case, wish), thread=True, exit_on_error=False
        )

    def _trade_off(self, ticket: int, case: Case, wish: Wish) -> None:
        worker = get_current_worker()
        try:
            found = study.trade_off(case, wish, lambda: worker.is_cancelled)
        except WorkbenchError as fault:
            self.post_message(TradedOff(ticket, None, str(fault)))
        else:
            self.post_message(TradedOff(ticket, found))

    def on_traded_off(self, message: TradedOff) -> None:
        """Draw it."""
        if message.ticket != self._ticket:
            return
        self._waiting.end()
        if message.fault:
            self.tell(f"{message.fault}", "worse")
        elif not self._stopped:
            self.tell(f"{self._units()}", "quiet")
        self.picture.found = message.found
        self.picture.redraw()

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
            self._waiting.end()
            fault = event.worker.error
            self.tell(f"could not be worked out ({type(fault).__name__}: {fault})", "worse")

    # -- keys -------------------------------------------------------------------------------------

    def moved(self) -> None:
        """Mark the chosen line in the picture."""
        self.picture.chosen = self.table.chosen
        self.table.redraw()
        self.picture.redraw()
        self.wishes.redraw()

    def action_trade_off(self) -> None:
        """Show or hide the picture; the wishes make room for it."""
        self.picture.display = not self.picture.display
        self.wishes.display = False
        self.table.is_brief = self.picture.display
        self.table.focus()
        self.moved()
        if self.picture.display and self.picture.found is None and self.table.rows:
            self._begin_trade_off()

    def action_wishes(self) -> None:
        """Show or hide the wishes; the picture makes room for them."""
        self.wishes.display = not self.wishes.display
        self.picture.display = False
        self.table.is_brief = self.wishes.display
        (self.wishes if self.wishes.display else self.table).focus()
        self.moved()

    def action_copy(self) -> None:
        """The chosen settings to the clipboard and to a file; the case stays as it is."""
        if self.table.chosen is None:
            self.tell("nothing to copy yet")
            return
        try:
            case = study.take(self.work.case, self.table.chosen)
            self.tell(copy_settings(self.app, case, self.work.path))
        except WorkbenchError as fault:
            self.tell(f"{fault}", "worse")

    def action_back(self) -> None:
        """Stop what is being worked out; from the wishes to the list, from there to the loop."""
        if self._waiting.goes_on:
            self._waiting.end()
            self._stopped = True
            self.tell("stopping ...")
            self.workers.cancel_node(self)
        elif self.wishes.display:
            self.action_wishes()
        else:
            super().action_back()

    @on(Entry.Submitted)
    def typed(self, message: Entry.Submitted) -> None:
        """Change the wish, or say what is wrong with it."""
        try:
            changed = self.wishes.edit(message.value)
        except WorkbenchError as fault:
            self.tell(f"{fault}", "worse")
            return
        self.left()
        if changed:
            self._begin()

    @on(Entry.Left)
    def left(self) -> None:
        """Back to the list of wishes."""
        self.entry.display = False
        self.wishes.focus()

    def action_take(self) -> None:
        """Take the chosen settings, or edit the chosen wish."""
        if self.wishes.has_focus:
            name = self.wishes.name_chosen
            self.entry.ask(f"  {label_of(name)}:", study.show_wish(self.work.wish, name))
            self.entry.display = True
            self.entry.focus()
            return
        chosen = self.table.chosen
        if chosen is None:
            self.tell("nothing to take yet")
            return
        try:
            self.work.change(study.take(self.work.case, chosen))
        except WorkbenchError as fault:
            self.tell(f"{fault}", "worse")
            return
        self.program.back_to_loop(f"settings by {chosen.title}; u takes them back")
