"""The Survey page: every case of a folder, the worst first."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable
from datetime import datetime
from pathlib import Path
from typing import Final

from textual import on
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState, get_current_worker

from workbench import study, units
from workbench.case.files import files_below
from workbench.errors import InputError
from workbench.screens.cells import Line
from workbench.screens.entry import Entry
from workbench.screens.keys import Command, bindings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Listing, remark
from workbench.screens.waiting import Waiting
from workbench.study import Surveyed
from workbench.units import Figure

COLUMNS: Final = "{:<17}{:<10}{:>6}{:>9}  {}"
"""Loop, status, Ms, age of the model, service."""

FOOT: Final = 8
"""Rows for the findings of the chosen loop, the rule above them included."""


class SurveyDone(Message):
    """Posted when the loops are judged, or why they are not."""

    def __init__(self, ticket: int, rows: tuple[Surveyed, ...], total: int, fault: str) -> None:
        super().__init__()
        self.ticket, self.rows, self.total, self.fault = ticket, rows, total, fault


class SurveyTable(Listing):
    """One loop a line; what was found in the chosen one, below."""

    title = "Loops, the worst first"
    selects = True
    help = (
        "Unstable: the loop as it is modelled does not settle. Fragile: Ms is above 2. Unsound: "
        "the file has a fault, or its figures do not come out again. Stale: the model is more than "
        "a year old. Ms is the maximum sensitivity of the loop with its present settings.",
        "Below the list stands everything that was found in the chosen loop, its file last.",
    )

    def __init__(self) -> None:
        super().__init__(css_id="survey")
        self.rows: tuple[Surveyed, ...] = ()

    @property
    def chosen(self) -> Surveyed | None:
        """The loop of the chosen line."""
        return self.rows[self.cursor] if self.cursor < len(self.rows) else None

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """A line of column names under the title."""
        title, *rest = super().lines(width, height - 1)
        names = COLUMNS.format("  loop", "status", "Ms", "model d", "service")
        return (title, ((names[:width], "label"),), *rest)

    def body(self, width: int) -> list[Line]:
        """Tag, status, Ms, age, service."""
        lines: list[Line] = []
        for row, loop in enumerate(self.rows):
            here = row == self.cursor
            words = COLUMNS.format(
                f"{'>' if here else ' '} {units.harmless(loop.tag, 14)}",
                loop.status,
                _figure(loop.max_sensitivity, 3),
                _figure(loop.age_days, 4),
                loop.service,
            )
            words = words if len(words) <= width else words[: width - 1] + "…"
            tone = "chosen" if here else "plain" if loop.status == "fine" else "worse"
            lines.append(((words, tone),))
        return lines

    def fixed(self, width: int) -> list[Line]:
        """The findings of the chosen loop and its file, cut to a height that does not change."""
        chosen = self.chosen
        if chosen is None:
            return []
        lines: list[Line] = []
        for finding in chosen.findings or ("nothing was found",):
            lines += remark(finding, width, "plain", "-")
        rest = FOOT - 2
        if len(lines) > rest:
            lines = [*lines[: rest - 1], ((f"  and {len(lines) - rest + 1} lines more", "quiet"),)]
        path = units.harmless(chosen.path, max(20, width - 2))
        told = [(("─" * width, "frame"),), *lines, ((f"  {path}", "quiet"),)]
        return [*told, *[()] * FOOT][:FOOT]


def _figure(figure: Figure, digits: int) -> str:
    return "-" if figure.value is None else units.text(figure.value, digits=digits)


class SurveyPage(Page):
    """See how every loop of a folder stands; open the worst."""

    called = "Survey page"
    about = (
        "Every case file of the folder and below it is judged with its present settings, on "
        "several processors where there are many. Stopping keeps the loops that were judged.",
    )
    commands = (
        Command("enter", "Enter", "open", "open", "open the chosen loop"),
        Command("r", "r", "again", "again", "judge the folder again", called="refresh repeat"),
        Command("t", "t", "type a folder", "type", "type the path of another folder"),
        Command("escape,q", "Esc", "back", "back", "stop the survey, or back to the cases", "q"),
        HELP,
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, folder: Path) -> None:
        super().__init__()
        self.folder = folder
        self.table = SurveyTable()
        self.entry = Entry("  folder:", longest=4000, css_id="survey-folder")
        self._ticket = 0
        self._worker: Worker[None] | None = None
        self._waiting = Waiting(self)

    def head(self) -> Line:
        """The folder."""
        return ((" Survey", "title"), (f"  {units.harmless(str(self.folder))}", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The loops, and the entry of another folder."""
        yield from (self.table, self.entry)

    def on_mount(self) -> None:
        """Begin at once."""
        super().on_mount()
        self.entry.display = False
        self.table.focus()
        self._begin()

    def on_unmount(self) -> None:
        """Nobody waits for it any more."""
        self._drop()

    # -- surveying ---------------------------------------------------------------------------------

    def _drop(self) -> None:
        """What is being worked out is stopped, and not shown when it comes in."""
        self._ticket += 1
        self._waiting.end()
        if self._worker is not None:
            self._worker.cancel()
            self._worker = None

    def _begin(self) -> None:
        self._drop()
        self.table.rows = ()
        self.table.redraw()
        self.redraw_head()
        self._waiting.begin("judging the loops")
        ticket, folder = self._ticket, self.folder
        self._worker = self.run_worker(
            lambda: self._survey(ticket, folder), thread=True, group="survey", exit_on_error=False
        )

    def _survey(self, ticket: int, folder: Path) -> None:
        worker = get_current_worker()
        rows: tuple[Surveyed, ...] = ()
        total, fault = 0, ""

        def tell(done: int) -> None:
            if ticket == self._ticket:
                self._waiting.reach(done, total)

        try:
            files = files_below(folder)
            total = len(files)
            today = datetime.now().astimezone().date()
            rows = study.survey(files, today, tell=tell, should_stop=lambda: worker.is_cancelled)
        except InputError as refusal:
            fault = str(refusal)
        except OSError as refusal:
            fault = f"{units.harmless(str(folder))}: {refusal.strerror}"
        self.post_message(SurveyDone(ticket, rows, total, fault))

    def on_survey_done(self, message: SurveyDone) -> None:
        """Show the loops, unless another folder was asked for meanwhile."""
        if message.ticket != self._ticket:
            return
        self._worker = None
        self._waiting.end()
        self.table.rows = message.rows
        self.table.cursor = self.table.top = 0
        self.table.redraw()
        if message.fault:
            self.tell(message.fault, "worse")
            return
        done, total = len(message.rows), message.total
        count = Counter(row.status for row in message.rows)
        told = ", ".join(f"{number} {status}" for status, number in count.items())
        if done < total:
            self.tell(f"stopped after {done} of {total} loops: {told or 'none judged'}", "caution")
        else:
            self.tell(f"{done} {'loop' if done == 1 else 'loops'}: {told}", "quiet")

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not end it."""
        if event.state is WorkerState.ERROR and event.worker is self._worker:
            self._drop()
            fault = event.worker.error
            self.tell(f"could not be surveyed ({type(fault).__name__}: {fault})", "worse")

    # -- keys --------------------------------------------------------------------------------------

    def action_open(self) -> None:
        """Open the chosen loop."""
        chosen = self.table.chosen
        if chosen is None:
            self.tell("no loop is judged yet")
            return
        try:
            self.program.open_case(Path(chosen.path))
        except InputError as fault:
            self.tell(str(fault), "worse")

    def action_again(self) -> None:
        """Judge the folder again."""
        self._begin()

    def action_type(self) -> None:
        """Type another folder."""
        self.entry.ask("  folder:", str(self.folder))
        self.entry.display = True
        self.entry.focus()

    @on(Entry.Submitted)
    def typed(self, message: Entry.Submitted) -> None:
        """Survey the folder typed."""
        self.left()
        if message.value.strip():
            self.folder = Path(message.value.strip()).expanduser()
            self._begin()

    @on(Entry.Left)
    def left(self) -> None:
        """Back to the list."""
        self.entry.display = False
        self.table.focus()

    def action_back(self) -> None:
        """Stop a running survey with what is judged, or go back."""
        if self._worker is not None and self._waiting.goes_on:
            self._waiting.end()
            self.tell("stopping ...")
            self._worker.cancel()
        else:
            super().action_back()
