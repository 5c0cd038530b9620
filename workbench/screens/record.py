"""The Record page: a test record, the fits over it, and the plant taken from it."""

from __future__ import annotations

import os
from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Final

import numpy as np
from textual import on
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState, get_current_worker

from workbench import charts, study, units
from workbench.charts import Curve, Pane
from workbench.errors import WorkbenchError
from workbench.screens.cells import Cells, Line, Screenful
from workbench.screens.entry import Entry
from workbench.screens.keys import Command, bindings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Listing, Panel, remark
from workbench.screens.trend import as_cells
from workbench.screens.work import Work

if TYPE_CHECKING:
    from workbench.records.candidate import Candidate
    from workbench.records.identify import Fit

MOST: Final = 2000
"""Records listed."""


class RecordFitted(Message):
    """Posted when a record is fitted, or why it is not."""

    def __init__(self, ticket: int, fit: Fit | None, fault: str = "") -> None:
        super().__init__()
        self.ticket, self.fit, self.fault = ticket, fit, fault


class RecordList(Listing):
    """The CSV files beside the case."""

    title = "Records beside the case"
    selects = True
    help = ("Choose a test record and press Enter, or press t to type another path.",)

    def __init__(self, work: Work) -> None:
        super().__init__(css_id="records")
        folder = work.path.parent
        own = work.case.plant.from_
        paths = sorted(folder.glob("*.csv"))[:MOST]
        # The record that the plant came from first, then those named like the case.
        stem, tag = work.path.stem.lower(), work.case.loop.tag.lower()

        def order(path: Path) -> tuple[bool, bool, str]:
            name = path.name.lower()
            return path.name != own, not name.startswith((stem, tag)), name

        self.paths = sorted(paths, key=order)
        self.own = own

    @property
    def chosen(self) -> Path | None:
        """The file of the chosen line."""
        return self.paths[self.cursor] if self.cursor < len(self.paths) else None

    def body(self, width: int) -> list[Line]:
        """One file a line."""
        lines: list[Line] = []
        for row, path in enumerate(self.paths):
            here = row == self.cursor
            remark = "  the present plant came from it" if path.name == self.own else ""
            name = f"{'>' if here else ' '} {units.harmless(path.name, 60)}"
            lines.append(((name, "chosen" if here else "plain"), (remark, "quiet")))
        return lines or [(("  no CSV file beside the case: t types the path of one", "quiet"),)]


class FitPicture(Cells):
    """PV of the record with the fit over it, OP below."""

    def __init__(self, work: Work) -> None:
        super().__init__(css_id="fit-picture")
        self.work = work
        self.fit: Fit | None = None
        self.candidate: Candidate | None = None

    def content(self, width: int, height: int) -> Screenful:
        """The picture of the chosen candidate."""
        if self.fit is None:
            return self.typeset((), width, height)
        record, case = self.fit.record, self.work.case
        pv = [Curve(record.time, record.pv, "record", "PV record")]
        if self.candidate is not None:
            pv.append(Curve(record.time, self.candidate.fitted_pv, "fit", "fit"))
        op = Curve(np.repeat(record.time, 2)[1:], np.repeat(record.op, 2)[:-1], "output", "OP")
        panes = (
            Pane(f"PV {case.pv.unit}", tuple(pv), share=2.5),
            Pane(f"OP {case.op.unit}", (op,)),
        )
        return as_cells(charts.draw(panes, width, height, ascii_only=self.ascii_only))


class Candidates(Panel):
    """The plants that were fitted."""

    title = "Fitted plants"
    selects = True
    help = (
        "Each line is a plant shape fitted to the record, with the standard error of each number "
        "after '+-'. Agreement is 100 % where the fit repeats the record exactly; a lower BIC is a "
        "better model of this record. 'a' or Enter takes the chosen one as the plant.",
    )

    def __init__(self, work: Work) -> None:
        super().__init__(work, css_id="candidates")
        self.fit: Fit | None = None

    @property
    def chosen(self) -> Candidate | None:
        """The candidate of the chosen line."""
        if self.fit is None or self.cursor >= len(self.fit.candidates):
            return None
        return self.fit.candidates[self.cursor]

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """A line of column names under the title."""
        title, *rest = super().lines(width, height - 1)
        unit = study.units_of(self.work.case)["gain"]
        gain = f"gain {unit}, or /s"[:20]  # an integrating plant has its slope there
        columns = f"  shape          {gain:<21}time constant    dead time        agrees"
        return (title, ((columns[:width], "label"),), *rest)

    def body(self, width: int) -> list[Line]:
        """One candidate a line."""
        if self.fit is None:
            return []
        lines: list[Line] = []
        for row, candidate in enumerate(self.fit.candidates):
            here = row == self.cursor
            errors = candidate.standard_errors
            slope = candidate.slope_per_s
            first = "gain" if slope is None else "slope_per_s"
            level = candidate.gain if slope is None else slope
            times = candidate.time_constants_s
            cells = (
                f"{'>' if here else ' '} {candidate.shape}".ljust(17),
                _with_error(level, errors.get(first)).ljust(21),
                _with_error(times[0] if times else None, errors.get("time_constants_s"), "s").ljust(
                    17
                ),
                _with_error(candidate.dead_time_s, errors.get("dead_time_s"), "s").ljust(17),
                f"{candidate.agreement_percent:.1f} %",
            )
            lines.append((("".join(cells), "chosen" if here else "plain"),))
        return lines

    def fixed(self, width: int) -> list[Line]:
        """What to distrust."""
        if self.fit is None:
            return []
        lines: list[Line] = []
        if self.fit.chosen is None:
            lines += remark(f"the record cannot tell: {self.fit.reason}", width, "worse")
        for note in (*self.fit.warnings, *self.fit.record.notes):
            tone = "caution" if note.severity == "caution" else "quiet"
            lines += remark(note.text, width, tone, "!" if tone == "caution" else "-")
        return lines[: max(1, self.size.height - 4)]


def _with_error(
    value: float | None, error: float | tuple[float, ...] | None, unit: str = ""
) -> str:
    if value is None:
        return "-"
    first = error[0] if isinstance(error, tuple) and error else error
    shown = units.text(value)
    if isinstance(first, float):
        shown += f" +-{units.text(first, digits=2)}"
    return f"{shown} {unit}".rstrip()


class RecordPage(Page):
    """Choose a record, look at the fits, take one."""

    about = (
        "A test record is a CSV file with time, PV and OP (columns named time_s or timestamp, pv, "
        "op are found by themselves). The program fits plant shapes to it and draws the chosen fit "
        "over the record. Taking a fit changes the plant, nothing else.",
    )
    commands = (
        Command("enter", "Enter", "fit/take", "enter", "fit the record, or take the plant"),
        Command("a", "a", "take plant", "accept", "take the chosen plant"),
        Command("t", "t", "type a path", "type", "type the path of a record"),
        Command("l", "l", "list", "list", "back to the list of records"),
        Command("escape,q", "Esc", "back", "back", "stop the fit, or back to the loop", "q"),
        HELP,
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self.records = RecordList(work)
        self.picture = FitPicture(work)
        self.candidates = Candidates(work)
        self.path_entry = Entry("  path of the record:", longest=4000, css_id="record-path")
        self._ticket = 0
        self._worker: Worker[None] | None = None

    def head(self) -> Line:
        """The loop."""
        loop = self.work.case.loop
        return ((f" {loop.tag}  {loop.service}", "title"), ("  test record", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The list, the entry for a path, the picture over the candidates."""
        yield from (self.records, self.path_entry, self.picture, self.candidates)

    def on_mount(self) -> None:
        """Start with the list."""
        super().on_mount()
        self.action_list()

    def _show(self, *shown: Widget) -> None:
        for widget in (self.records, self.path_entry, self.picture, self.candidates):
            widget.display = widget in shown

    # -- choosing ----------------------------------------------------------------------------------

    def action_list(self) -> None:
        """The records beside the case."""
        self._show(self.records)
        self.records.focus()
        self.tell("")

    def action_type(self) -> None:
        """Type a path."""
        folder = str(self.work.path.parent)
        self.path_entry.ask("  path of the record:", "" if folder == "." else folder + os.sep)
        self.path_entry.fresh = False
        self._show(self.path_entry)
        self.path_entry.focus()

    @on(Entry.Submitted)
    def typed(self, message: Entry.Submitted) -> None:
        """Fit the record of the path."""
        if message.value.strip():
            self.fit_record(Path(message.value.strip()).expanduser())

    @on(Entry.Left)
    def left(self) -> None:
        """Back to the list."""
        self.action_list()

    def action_enter(self) -> None:
        """Fit the chosen record, or take the chosen plant."""
        if self.records.display and self.records.chosen is not None:
            self.fit_record(self.records.chosen)
        elif self.candidates.display:
            self.action_accept()

    # -- fitting -----------------------------------------------------------------------------------

    def fit_record(self, path: Path) -> None:
        """Fit in a thread; a result that nobody waits for any more is dropped."""
        self._ticket += 1
        ticket = self._ticket
        self.tell(f"fitting {units.harmless(path.name, 50)} ... Esc stops", "plain")
        self._worker = self.run_worker(
            lambda: self._fit(ticket, path), thread=True, group="fit", exit_on_error=False
        )

    def _fit(self, ticket: int, path: Path) -> None:
        worker = get_current_worker()
        try:
            fit = study.fit_record(path, should_stop=lambda: worker.is_cancelled)
        except WorkbenchError as fault:
            self.post_message(RecordFitted(ticket, None, str(fault)))
        else:
            self.post_message(RecordFitted(ticket, fit))

    def on_record_fitted(self, message: RecordFitted) -> None:
        """Show the fits."""
        if message.ticket != self._ticket:
            return
        self._worker = None
        if message.fit is None:
            self.tell(f"{message.fault}", "worse")
            return
        fit = message.fit
        self.candidates.fit = self.picture.fit = fit
        shapes = [candidate.shape for candidate in fit.candidates]
        self.candidates.cursor = shapes.index(fit.chosen) if fit.chosen in shapes else 0
        self._show(self.picture, self.candidates)
        self.candidates.focus()
        self.moved()
        rows, length = len(fit.record.time), units.time_text(fit.record.duration)
        name = units.harmless(Path(fit.record.path).name, 40)
        self.tell(f"{name}: {rows} rows over {length}. a takes the chosen plant", "plain")

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not take the work with it."""
        if event.state is WorkerState.ERROR:
            fault = event.worker.error
            self.tell(f"could not be fitted ({type(fault).__name__}: {fault})", "worse")

    def moved(self) -> None:
        """Draw the fit of the chosen line."""
        if self.candidates.display:
            self.picture.candidate = self.candidates.chosen
            self.picture.redraw()
            self.candidates.redraw()

    # -- leaving -----------------------------------------------------------------------------------

    def action_back(self) -> None:
        """Stop a running fit, or go back to the loop."""
        if self._worker is not None:
            self._worker.cancel()
            self._worker = None
            self._ticket += 1
            self.tell("stopped", "plain")
        else:
            super().action_back()

    def action_accept(self) -> None:
        """Take the chosen plant."""
        fit, chosen = self.candidates.fit, self.candidates.chosen
        if fit is None or chosen is None or not self.candidates.display:
            self.tell("choose a record first", "plain")
            return
        try:
            self.work.change(study.accept(self.work.case, fit, chosen.shape, self.work.path.parent))
        except WorkbenchError as fault:
            self.tell(f"{fault}", "worse")
            return
        self.program.back_to_loop(f"the plant is the {chosen.shape} fit of the record")
