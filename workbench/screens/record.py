"""The Record page: a test record, the fits over it, and the plant taken from it."""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import TYPE_CHECKING, Final, cast

import numpy as np
from textual import on
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState, get_current_worker

from workbench import charts, study, units
from workbench.charts import Curve, Pane
from workbench.errors import RecordQuestion, WorkbenchError
from workbench.screens.cells import Cells, Line, Screenful
from workbench.screens.entry import Entry
from workbench.screens.keys import Command, KeyLine, bindings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Listing, Panel, remark
from workbench.screens.trend import as_cells
from workbench.screens.view import View
from workbench.screens.waiting import Waiting
from workbench.screens.work import Work

if TYPE_CHECKING:
    from workbench.case.case import Case
    from workbench.records.candidate import Candidate
    from workbench.records.identify import Fit
    from workbench.records.record import Reading, Record

MOST: Final = 2000
"""Records listed."""
LOOK_EVERY_S: Final = 1.0
"""How often a file that is followed is looked at."""


class RecordFitted(Message):
    """Posted when records are fitted, or why they are not."""

    def __init__(
        self,
        ticket: int,
        fit: Fit | None,
        fault: WorkbenchError | None = None,
        *,
        records: tuple[Record, ...] = (),
        live: study.Live | None = None,
    ) -> None:
        super().__init__()
        self.ticket, self.fit, self.fault = ticket, fit, fault
        self.records, self.live = records, live


class RecordList(Listing):
    """The CSV files beside the case."""

    title = "Records beside the case"
    selects = True
    help = (
        "Choose a test record and press Enter, or press t to type another path. Space marks "
        "several records of one plant to be fitted at once. f follows a test that is still being "
        "made: it is fitted again as the file grows, and the page says how much longer to hold.",
    )

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
        self.marked: list[Path] = []

    @property
    def chosen(self) -> Path | None:
        """The file of the chosen line."""
        return self.paths[self.cursor] if self.cursor < len(self.paths) else None

    def mark(self) -> None:
        """Mark the chosen file, or take its mark away."""
        if self.chosen in self.marked:
            self.marked.remove(self.chosen)
        elif self.chosen is not None:
            self.marked.append(self.chosen)
        self.redraw()

    def body(self, width: int) -> list[Line]:
        """One file a line."""
        lines: list[Line] = []
        for row, path in enumerate(self.paths):
            here = row == self.cursor
            remark = "  the present plant came from it" if path.name == self.own else ""
            mark = "+" if path in self.marked else " "
            name = f"{'>' if here else ' '}{mark} {units.harmless(path.name, 60)}"
            lines.append(((name, "chosen" if here else "plain"), (remark, "quiet")))
        return lines or [(("  no CSV file beside the case: t types the path of one", "quiet"),)]


class FitPicture(Cells):
    """PV of the record with the fit over it, OP below."""

    def __init__(self, work: Work) -> None:
        super().__init__(css_id="fit-picture")
        self.work = work
        self.fit: Fit | None = None
        self.candidate: Candidate | None = None
        self.view = View.whole(0.0, 1.0)

    def content(self, width: int, height: int) -> Screenful:
        """The picture of the chosen candidate."""
        if self.fit is None:
            return self.typeset((), width, height)
        pv, fitted, op = [], [], []
        record, case = self.fit.record, self.work.case
        for part in record.parts:
            time = record.time[part]
            # A row beyond each end lets the lines run to the edge of the picture.
            first = max(int(np.searchsorted(time, self.view.low)) - 1, 0)
            last = int(np.searchsorted(time, self.view.high, side="right")) + 1
            time, rows = (
                time[first:last],
                slice(part.start + first, min(part.stop, part.start + last)),
            )
            if not len(time):
                continue
            pv.append(Curve(time, record.pv[rows], "record", "PV record"))
            if self.candidate is not None:
                fitted.append(Curve(time, self.candidate.fitted_pv[rows], "fit", "fit"))
            held = np.repeat(time, 2)[1:], np.repeat(record.op[rows], 2)[:-1]
            op.append(Curve(*held, "output", "OP"))
        panes = (
            Pane(f"PV {case.pv.unit}", (*pv, *fitted), share=2.5),
            Pane(f"OP {case.op.unit}", tuple(op)),
        )
        limits = (self.view.low, self.view.high)
        return as_cells(
            charts.draw(panes, width, height, x_limits=limits, ascii_only=self.ascii_only)
        )

    def look(self, view: View) -> None:
        """Show another stretch."""
        self.view = view
        self.redraw()


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
        lines += self._bumps(width)
        for note in (*self.fit.warnings, *self.fit.record.notes):
            tone = "caution" if note.severity == "caution" else "quiet"
            lines += remark(note.text, width, tone, "!" if tone == "caution" else "-")
        return lines[: max(1, self.size.height - 4)]

    def _bumps(self, width: int) -> list[Line]:
        """The operating point of each bump, on one line where there is room for no more."""
        assert self.fit is not None
        found = study.bumps(self.fit.record)
        if not found:
            return []
        said = [
            f"{units.time_text(b.at_s, 3)}: OP {units.text(b.op_before, digits=3)} to "
            f"{units.text(b.op_after, digits=3)}, PV {units.text(b.pv_before, digits=4)} to "
            f"{units.text(b.pv_after, digits=4)}"
            for b in found
        ]
        lines = remark(f"bumps: {'; '.join(said)}", width, "quiet", "-")
        return lines if self.size.height > 12 else lines[:2]


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
    """Choose records, look at the fits, take one; or follow a test that is being made."""

    called = "Record page"
    about = (
        "A test record is a CSV file with time, PV and OP (columns named time_s or timestamp, pv, "
        "op are found by themselves). The program fits plant shapes to it and draws the chosen fit "
        "over the record. Taking a fit changes the plant, nothing else.",
        "What is fitted: zoom and pan until a stretch fills the picture, then u fits that stretch "
        "alone, x fits everything but that stretch, and r fits all rows again.",
    )
    choosing = (
        Command("enter", "Enter", "fit", "enter", "fit the record, or take the plant"),
        Command("space", "Space", "mark", "mark", "mark a record, to fit several at once"),
        Command("f", "f", "follow", "follow", "follow a test that is being made"),
        Command("t", "t", "type a path", "type", "type the path of a record"),
        Command("escape,q", "Esc", "back", "back", "stop the fit, or back to the loop", "q"),
        HELP,
    )
    looking = (
        Command("enter", "Enter", "take", "enter", "take the chosen plant", "a"),
        Command("plus,equals_sign", "+", "", "zoom(0.5)", "show half as long a stretch"),
        Command("minus", "+-", "zoom", "zoom(2.0)", "show twice as long a stretch", "-"),
        Command("less_than_sign,left", "<", "", "pan(-0.25)", "show earlier rows", "Left"),
        Command("greater_than_sign,right", "<>", "pan", "pan(0.25)", "show later rows", "Right"),
        Command("0", "0", "all", "whole", "show the whole record", spare=True),
        Command("u", "u", "use", "use(True)", "fit only what is shown"),
        Command("x", "x", "omit", "use(False)", "leave out what is shown, fit the rest"),
        Command("r", "r", "reset", "reset", "fit all rows again"),
        Command("l", "l", "list", "list", "back to the list of records"),
        Command("escape,q", "Esc", "back", "back", "stop the fit, or back to the loop", "q"),
        HELP,
    )
    commands = (
        *choosing[:-2],
        *looking[1:],
        Command("a", "a", "", "accept", "take the chosen plant"),
        Command(
            *("m", "m", "", "accept_family"),
            "take it with its family: the plants that the record cannot tell from it",
        ),
        Command("1", "1", "", "answer(0)", "the first answer, where a question is asked"),
        Command("2", "2", "", "answer(1)", "the second answer"),
        *MOVING,
    )
    key_lines = (choosing, looking)
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
        self._sources: tuple[study.Source, ...] = ()
        """What the fit on the screen was asked to read."""
        self._whole: tuple[study.Source, ...] = ()
        """The same, every row of it."""
        self._read: tuple[Record, ...] = ()
        self._question: RecordQuestion | None = None
        self._follows = False
        self._waiting = Waiting(self)

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
        keys = self.query_one(KeyLine)
        keys.commands = self.key_line(self.looking if self.candidates in shown else self.choosing)
        keys.redraw()

    # -- choosing ----------------------------------------------------------------------------------

    def action_list(self) -> None:
        """The records beside the case."""
        self._stop()
        self._show(self.records)
        self.records.focus()
        self.tell("")

    def action_mark(self) -> None:
        """Mark the chosen record."""
        if self.records.display:
            self.records.mark()

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
            self._begin(Path(message.value.strip()).expanduser())

    @on(Entry.Left)
    def left(self) -> None:
        """Back to the list."""
        self.action_list()

    def action_enter(self) -> None:
        """Fit the chosen record, or take the chosen plant."""
        if self.records.display and self.records.chosen is not None:
            self._begin(*(self.records.marked or (self.records.chosen,)))
        elif self.candidates.display:
            self.action_accept()

    def action_follow(self) -> None:
        """Follow the chosen record while it grows."""
        if self.records.display and self.records.chosen is not None:
            self._whole = (study.Source(self.records.chosen),)
            self._follow()

    def action_answer(self, number: int) -> None:
        """Answer the question that a record asks, and read it so."""
        asked, self._question = self._question, None
        if asked is None:
            return
        name, answer = asked.option.lstrip("-"), asked.readings[number][0]
        answered = cast("Reading", {name: answer})
        self._whole = tuple(
            study.Source(source.path, {**source.reading, **answered}) for source in self._whole
        )
        if self._follows:
            self._follow()
        else:
            self._fit_sources(self._whole)

    # -- fitting -----------------------------------------------------------------------------------

    def _begin(self, *paths: Path) -> None:
        self._whole = tuple(study.Source(path) for path in paths)
        self._fit_sources(self._whole)

    def _fit_sources(self, sources: tuple[study.Source, ...]) -> None:
        """Fit in a thread; a result that nobody waits for any more is dropped."""
        self._stop()
        self._sources, self._follows, self._question = sources, False, None
        more = f" and {len(sources) - 1} more" if len(sources) > 1 else ""
        self._waiting.begin(f"fitting {_named(sources[0])}{more}")
        ticket = self._ticket
        self._worker = self.run_worker(
            lambda: self._fit(ticket, sources), thread=True, group="fit", exit_on_error=False
        )

    def _fit(self, ticket: int, sources: tuple[study.Source, ...]) -> None:
        worker = get_current_worker()
        try:
            fit, records = study.fit_sources(
                sources, should_stop=lambda: worker.is_cancelled, tell=self._waiting.reach
            )
        except WorkbenchError as fault:
            self.post_message(RecordFitted(ticket, None, fault))
        else:
            self.post_message(RecordFitted(ticket, fit, records=records))

    def _follow(self) -> None:
        self._stop()
        self._sources, self._follows, self._question = self._whole, True, None
        self.candidates.fit = self.picture.fit = None
        self.tell(f"following {_named(self._whole[0])} ... Esc stops", "plain")
        ticket, source = self._ticket, self._whole[0]
        case = self.work.case
        test = study.LiveTest(source.path, ranges=(case.pv.range, case.op.range), **source.reading)
        self._worker = self.run_worker(
            lambda: self._watch(ticket, test), thread=True, group="fit", exit_on_error=False
        )

    def _watch(self, ticket: int, test: study.LiveTest) -> None:
        worker = get_current_worker()
        pause = threading.Event()
        while not worker.is_cancelled:
            try:
                live = test.refresh(should_stop=lambda: worker.is_cancelled)
            except WorkbenchError as fault:
                self.post_message(RecordFitted(ticket, None, fault))
                return
            if live is not None:
                self.post_message(RecordFitted(ticket, live.fit, live=live))
            pause.wait(LOOK_EVERY_S)

    def on_record_fitted(self, message: RecordFitted) -> None:
        """Show the fits."""
        if message.ticket != self._ticket:
            return
        fit, fault, live = message.fit, message.fault, message.live
        if live is None:
            self._worker = None
            self._waiting.end()
        if isinstance(fault, RecordQuestion):
            self._ask(fault)
            return
        if fit is None:
            self.tell(
                f"{fault}" if fault else live.said if live else "", "worse" if fault else "plain"
            )
            return
        self._read = message.records or (fit.record,)
        chosen = self.candidates.chosen
        again = live is not None and self.candidates.fit is not None
        self.candidates.fit = self.picture.fit = fit
        shapes = [candidate.shape for candidate in fit.candidates]
        wanted = chosen.shape if again and chosen is not None else fit.chosen
        self.candidates.cursor = shapes.index(wanted) if wanted in shapes else 0
        duration = fit.record.duration
        view = self.picture.view.grown(duration) if again else View.whole(0.0, duration)
        self.picture.look(view)
        self._show(self.picture, self.candidates)
        self.candidates.focus()
        self.moved()
        if live is not None:
            self._tell_live(live)
        else:
            self._tell_fit(fit)

    def _tell_fit(self, fit: Fit) -> None:
        rows, length = len(fit.record.time), units.time_text(fit.record.duration)
        count = len(self._sources)
        name = _named(self._sources[0]) if count == 1 else f"{count} records"
        part = "" if self._sources == self._whole else ", a part of it"
        self.tell(f"{name}: {rows} rows over {length}{part}. Enter takes the chosen plant", "plain")

    def _tell_live(self, live: study.Live) -> None:
        if live.fit is None or live.advice is None:
            return
        said = f"{live.said} " if live.said else ""
        rows = f"{len(live.fit.record.time)} rows"
        advice = live.advice
        tone = "worse" if advice.spoilt else "good" if advice.reached else "plain"
        self.tell(f"{said}{rows}: {advice.say}", tone)

    def _ask(self, question: RecordQuestion) -> None:
        """Both readings, and the key of each."""
        self._question = question
        fault = question.problems[0]
        keys = "press 1 for the first, 2 for the second"
        self.tell(f"{fault.where}: {fault.what}: {keys}", "caution")

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not take the work with it."""
        if event.state is WorkerState.ERROR:
            self._waiting.end()
            fault = event.worker.error
            self.tell(f"could not be fitted ({type(fault).__name__}: {fault})", "worse")

    def moved(self) -> None:
        """Draw the fit of the chosen line."""
        if self.candidates.display:
            self.picture.candidate = self.candidates.chosen
            self.picture.redraw()
            self.candidates.redraw()

    # -- the stretch shown, and the rows used ------------------------------------------------------

    def action_zoom(self, share: float) -> None:
        """Show a shorter or a longer stretch."""
        if self.candidates.display:
            self.picture.look(self.picture.view.zoomed(share))

    def action_pan(self, share: float) -> None:
        """Show a later or an earlier stretch."""
        if self.candidates.display:
            self.picture.look(self.picture.view.panned(share))

    def action_whole(self) -> None:
        """Show the whole record."""
        if self.candidates.display:
            self.picture.look(self.picture.view.zoomed(1e9))

    def action_use(self, use: bool) -> None:
        """Fit only what is shown, or all but that."""
        if not self.candidates.display or self._follows:
            if self._follows:
                self.tell("Esc ends following; choose a part of the record then", "plain")
            return
        view = self.picture.view
        if view.is_whole:
            self.tell(
                "zoom in first, with + and <>: what is shown is what u and x are about", "plain"
            )
            return
        window = (view.low, view.high)
        left = study.narrowed(self._sources, self._read, window, leave_out=not use)
        if left:
            self._fit_sources(left)
        else:
            self.tell("that would leave no row", "plain")

    def action_reset(self) -> None:
        """Fit all rows again."""
        if self.candidates.display and not self._follows:
            self._fit_sources(self._whole)

    # -- leaving -----------------------------------------------------------------------------------

    def _stop(self) -> None:
        if self._worker is not None:
            self._worker.cancel()
            self._worker = None
        self._waiting.end()
        self._ticket += 1

    def action_back(self) -> None:
        """Stop a running fit, or go back to the loop."""
        if self._worker is not None:
            self._stop()
            self._follows = False
            self.tell("stopped", "plain")
        else:
            super().action_back()

    def action_accept(self) -> None:
        """Take the chosen plant."""
        self._take(study.accept, "")

    def action_accept_family(self) -> None:
        """Take the chosen plant with those that the record cannot tell from it."""
        self._take(study.accept_family, ", with the plants that the record cannot tell from it")

    def _take(self, how: Callable[..., Case], more: str) -> None:
        fit, chosen = self.candidates.fit, self.candidates.chosen
        if fit is None or chosen is None or not self.candidates.display:
            self.tell("choose a record first", "plain")
            return
        try:
            self.work.change(how(self.work.case, fit, chosen.shape, self.work.path.parent))
        except WorkbenchError as fault:
            self.tell(f"{fault}", "worse")
            return
        self._stop()
        self.program.back_to_loop(f"the plant is the {chosen.shape} fit of the record{more}")


def _named(source: study.Source) -> str:
    return units.harmless(source.path.name, 40)
