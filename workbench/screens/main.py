"""The main page: the loop, its settings, and what they do."""

from __future__ import annotations

from collections.abc import Iterable
from functools import partial
from typing import TYPE_CHECKING, Final, cast

from textual import on
from textual.app import ComposeResult
from textual.containers import Horizontal, Vertical
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState

from workbench import charts, study
from workbench.case.case import Case, Revision
from workbench.errors import InputError, WorkbenchError
from workbench.screens.cells import Divider, Line
from workbench.screens.controller import ControllerPanel
from workbench.screens.editor import Editor
from workbench.screens.entry import Entry
from workbench.screens.fields import FieldsPanel, label_of
from workbench.screens.figures import FiguresPanel
from workbench.screens.history import HistoryPanel, changed_by
from workbench.screens.instruments import InstrumentsPanel
from workbench.screens.keys import Command, KeyLine, bindings
from workbench.screens.output import copy_settings, write_sheet
from workbench.screens.page import HELP, MOVING, Offer, Page
from workbench.screens.panel import Panel
from workbench.screens.plant import PlantPanel
from workbench.screens.ranges import LoopPanel
from workbench.screens.scenario import ScenarioPanel
from workbench.screens.structure import StructurePanel
from workbench.screens.trend import TrendPanel
from workbench.screens.work import LARGE, SMALL, Work
from workbench.units import harmless

if TYPE_CHECKING:
    from textual.events import DescendantFocus

    from workbench.screens.work import Responses
    from workbench.study import Evaluation

ROOMY: Final = (140, 40)
"""Columns and rows from which every panel is shown at once."""

BURST_S: Final = 0.015
"""Time over which changes are shown together [s]."""

LONG_S: Final = 0.7
"""Time after which it is said that answers are still being computed [s]."""

LEAST: Final = 8
"""Rows that are kept for the lower panel of a pair, where there is less room than both want."""

LEFT: Final = 36
"""Columns of the settings where panels share their places."""


CHOOSE: Final = "choose a setting first, in a panel of settings: 1, 2, 6, 7, 8, 9"


PIN: Final = "compare hold freeze reference baseline"
FIT: Final = "identify identification model step bump response data csv historian measure estimate"
TUNE: Final = (
    "tune tuning autotune calculate optimise recommend rule lambda simc imc propose search"
)
MAP: Final = "robust robustness margin sensitivity map tolerance uncertainty mismatch"
COPY: Final = "clipboard export paste yank hand over dcs block"
SHEET: Final = "print report paper document handover control room page approval export"
ZOOM: Final = "maximise enlarge full bigger large alone"
QUIT: Final = "quit exit close end"
MORE: Final = "nudge increase raise higher faster larger"
LESS: Final = "nudge decrease lower reduce smaller slower"
"""Other words of the trade by which actions are found."""


class CaseChanged(Message):
    """Posted when the case is another one; a burst of them counts once."""

    def can_replace(self, message: Message) -> bool:
        """A later one says the same."""
        return isinstance(message, CaseChanged)


class Evaluated(Message):
    """Posted when the answers for a case are there, or why there are none."""

    def __init__(
        self,
        case: Case,
        evaluation: Evaluation | None,
        fault: str = "",
        responses: Responses | None = None,
    ) -> None:
        super().__init__()
        self.case, self.evaluation, self.fault = case, evaluation, fault
        self.responses = responses or []


class Responded(Message):
    """Posted when frequency responses are there."""

    def __init__(self, responses: Responses) -> None:
        super().__init__()
        self.responses = responses


class SheetWritten(Message):
    """Posted when the retune sheet is on the disk, or why it is not."""

    def __init__(self, words: str, tone: str) -> None:
        super().__init__()
        self.words, self.tone = words, tone


class DraftFailed(Message):
    """Posted when the draft cannot be written."""

    def __init__(self, reason: str) -> None:
        super().__init__()
        self.reason = reason


class MainPage(Page):
    """Plant, Controller, Trend, Figures, History, Scenario, Loop, Instruments, Structure."""

    called = "loop's page"

    about = (
        "Choose a setting with the arrows and press Enter to type another value, or nudge it. Each "
        "accepted change is predicted at once and drawn over the pinned prediction. '*' marks a "
        "setting that is not what the file has.",
        "Nothing is lost when the line drops: unsaved work is kept and offered the next time.",
    )
    commands = (
        Command("enter,f4", "Enter", "", "edit", "type another value for the chosen setting", "F4"),
        Command(
            "plus,equals_sign", "+", "", f"nudge({SMALL})", "2 % up, or the next choice", "=", MORE
        ),
        Command(
            "minus", "-", "", f"nudge({1 / SMALL})", "2 % down, or the choice before", called=LESS
        ),
        Command("greater_than_sign,full_stop", ">", "", f"nudge({LARGE})", "20 % up", ".", MORE),
        Command("less_than_sign,comma", "<", "", f"nudge({1 / LARGE})", "20 % down", ",", LESS),
        Command("", "+-<>", "step", "", ""),
        Command(
            *("p,f5", "p", "pin", "pin"),
            "pin the present prediction; up to three are compared",
            "F5",
            PIN,
        ),
        Command("d", "d", "", "drop_pin", "drop the newest pin", called=PIN),
        Command(
            *("v", "v", "", "view"),
            "the next chart: over time, gain and phase, sensitivity",
            called="frequency response open loop",
        ),
        Command("u,f6", "u", "undo", "undo", "undo the last change", "F6", "revert take back"),
        Command("y,f7", "y", "redo", "redo", "redo what was undone", "F7", "again", spare=True),
        Command("r,f3", "r", "fit", "record", "fit the plant to a test record", "F3", FIT),
        Command(
            "o,f8", "o", "propose", "proposals", "best settings and published rules", "F8", TUNE
        ),
        Command(
            "t,f10", "t", "map", "tolerance", "how much plant error the loop survives", "F10", MAP
        ),
        Command("c", "c", "copy", "copy", "copy the settings: clipboard and a file", called=COPY),
        Command("w", "w", "sheet", "sheet", "write the retune sheet", called=SHEET, spare=True),
        Command(
            "s,f2", "s", "save", "save", "save with a reason", "F2", "write store keep file disk"
        ),
        Command("z,f9", "z", "zoom", "zoom", "the focused panel alone, and back", "F9", ZOOM, True),
        Command(
            "q,ctrl+c", "q", "leave", "leave", "leave; asks about unsaved work", "ctrl+c", QUIT
        ),
        HELP,
        *(
            Command(kind.number, kind.number, "", f"panel('{kind.number}')", f"panel {kind.title}")
            for kind in (
                PlantPanel,
                ControllerPanel,
                TrendPanel,
                FiguresPanel,
                HistoryPanel,
                ScenarioPanel,
                LoopPanel,
                InstrumentsPanel,
                StructurePanel,
            )
        ),
        Command("tab", "Tab", "", "app.focus_next", "to the next panel"),
        Command("shift+tab", "shift+Tab", "", "app.focus_previous", "to the panel before"),
        *MOVING,
    )
    key_lines = (commands, TrendPanel.key_line)
    BINDINGS = bindings(commands)

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self.panels: dict[str, Panel] = {
            kind.number: kind(work, css_id=f"panel-{kind.number}") for kind in PANELS
        }
        panels = self.panels
        self.trend = cast("TrendPanel", panels[TrendPanel.number])
        self._left = Vertical(*(panels[number] for number in SETTINGS), id="left")
        self._divider = Divider()
        self._lower = Horizontal(panels["4"], panels["5"], id="lower")
        self._right = Vertical(panels["3"], self._lower, id="right")
        self.editor = Editor(work)
        """The entry over the settings."""
        self._in_view = {"left": "1", "more": "6", "lower": "4"}
        self._zoomed = ""
        self._evaluating: Case | None = None
        self._answered: Case | None = None
        self._has_painted = False
        self._greeting: tuple[str, str] | None = None
        self._arranged_for = 0
        self._showing = False

    # -- composition -------------------------------------------------------------------------------

    def head(self) -> Line:
        """The loop, and whether it is saved."""
        loop = self.work.case.loop
        count = len(self.work.told)
        state = f"{count} not saved" if count else "not saved" if self.work.unsaved else "saved"
        where = f" {self.work.path.name}: {state} "
        name = f" {loop.tag}  {loop.service}"
        fill = " " * max(1, self.size.width - len(name) - len(where))
        return ((name, "title"), (fill, "plain"), (where, "changed" if count else "quiet"))

    def body(self) -> Iterable[Widget]:
        """Settings on the left; the trend above figures and history on the right."""
        yield Horizontal(self._left, self._divider, self._right, id="body")

    def compose(self) -> ComposeResult:
        """The page, and the editor above it."""
        yield from super().compose()
        yield self.editor

    def on_mount(self) -> None:
        """Arrange for the size, and start computing once the frame is painted."""
        super().on_mount()
        self._arrange()
        self.call_after_refresh(self._painted)

    def on_resize(self) -> None:
        """Another size, perhaps another arrangement."""
        super().on_resize()
        self._arrange()
        self.redraw_head()
        self.editor.leave()

    def _arrange(self) -> None:
        """Decide which panels are in view, and how high."""
        self._arranged_for = len(self.work.quantities)
        roomy = self.size.width >= ROOMY[0] and self.size.height >= ROOMY[1]
        shown = set(self.panels)
        if self._zoomed:
            shown = {self._zoomed}
        elif roomy:
            shown = {*"12345", *_pair_of(self._in_view["more"])}
        else:
            shown = {"3", self._in_view["lower"], *_pair_of(self._in_view["left"])}
        partners = {} if self._zoomed else ROOMY_PARTNERS if roomy else PARTNERS
        for number, panel in self.panels.items():
            panel.display = number in shown
            partner = partners.get(number, "")
            panel.elsewhere = (f"{partner} {self.panels[partner].title}",) if partner else ()
        left, right = self._left, self._right
        left.display = bool(shown & set(SETTINGS))
        right.display = bool(shown & set("345"))
        self._lower.display = bool(shown & set("45"))
        self._divider.display = left.display and right.display
        left.styles.width = LEFT if right.display and not roomy else "1fr"
        if right.display and roomy:
            left.styles.width = LEFT + 10
        self._set_heights(shown, roomy)

    def _set_heights(self, shown: set[str], roomy: bool) -> None:
        settings = [number for number in SETTINGS if number in shown]
        for number in settings:
            panel = self.panels[number]
            assert isinstance(panel, FieldsPanel)
            formula = 2 if number == "1" and roomy else 0
            wanted: int | str = panel.wanted_height + formula
            if number == settings[-1] or (roomy and number not in "12"):
                # Where two pairs stand one above the other, the lower one shares what is left.
                wanted = "1fr"
            elif not roomy:
                wanted = min(panel.wanted_height, self.size.height - 3 - LEAST)
            panel.styles.height = wanted
        self.panels["3"].styles.height = "1fr" if self._zoomed else "12fr"
        self._lower.styles.height = "1fr" if self._zoomed else "9fr"

    # -- evaluating --------------------------------------------------------------------------------

    def on_screen_resume(self) -> None:
        """Another page may have changed the case."""
        self.post_message(CaseChanged())
        if self.focused is None:
            self.panels["2" if self.work.case.controller else "1"].focus()
        self.moved()

    def on_case_changed(self, message: CaseChanged) -> None:
        """Ask for the answers at once; show and keep the settings once for a burst of keys."""
        if self._has_painted and not self._is_current():
            self._evaluate()
        if not self._showing:
            self._showing = True
            self.set_timer(BURST_S, self._show_settings)

    def _show_settings(self) -> None:
        self._showing = False
        self.run_worker(self._keep_draft, thread=True, group="draft", exit_on_error=False)
        if len(self.work.quantities) != self._arranged_for:
            self._arrange()
        self.redraw_head()
        for panel in self.panels.values():
            if isinstance(panel, FieldsPanel | HistoryPanel):
                panel.redraw()

    @property
    def busy(self) -> bool:
        """Answers or settings are still on their way to the screen."""
        return self._evaluating is not None or self._showing or not self._has_painted

    def _is_current(self) -> bool:
        return self._answered == self.work.case

    def _keep_draft(self) -> None:
        try:
            self.work.keeper.write()
        except OSError as fault:
            self.post_message(DraftFailed(str(fault.strerror)))

    def on_draft_failed(self, message: DraftFailed) -> None:
        """The engineer must know that only saving keeps the work now."""
        self.tell(f"this work cannot be kept as a draft: {message.reason}; save it", "caution")

    def _painted(self) -> None:
        """The frame is there before the first answers are asked for."""
        self._has_painted = True
        self._evaluate()

    def _evaluate(self) -> None:
        """Compute in a thread, one case at a time: what comes in meanwhile is computed next."""
        if self._evaluating is None:
            self._evaluating = case = self.work.case
            self.run_worker(
                lambda: self._answers(case), thread=True, group="evaluate", exit_on_error=False
            )
            self.set_timer(LONG_S, lambda: self._still_computing(case))

    def _still_computing(self, case: Case) -> None:
        if self._evaluating is case:
            self.tell("computing ...", "quiet")

    def _answers(self, case: Case) -> None:
        try:
            found = study.evaluate(case, like=self.work.pinned)
            responses = self.work.missing_responses(found) if self.trend.over_frequency else []
            self.post_message(Evaluated(case, found, responses=responses))
        except WorkbenchError as fault:
            self.post_message(Evaluated(case, None, str(fault)))

    def on_evaluated(self, message: Evaluated) -> None:
        """Show the answers, unless the case has moved on."""
        self._evaluating = None
        if message.case is not self.work.case:
            self._evaluate()
            return
        self._answered = message.case
        self.work.fault = message.fault
        if message.evaluation is None:
            self.tell(f"{message.fault}", "worse")
        else:
            if self.work.evaluation is None:
                self.work.pins = self.work.pins.with_(message.evaluation, self.work.settings)
            self.work.evaluation = message.evaluation
            self.work.keep_responses(message.responses)
        for panel in self.panels.values():
            panel.redraw()
        self._respond()

    def _respond(self) -> None:
        """Compute the frequency responses that are asked for and not there."""
        if self.trend.over_frequency and self._evaluating is None:
            present = self.work.evaluation
            self.run_worker(
                lambda: self._missing_responses(present),
                thread=True,
                group="respond",
                exit_on_error=False,
            )

    def _missing_responses(self, present: Evaluation | None) -> None:
        if found := self.work.missing_responses(present):
            self.post_message(Responded(found))

    def on_responded(self, message: Responded) -> None:
        """Show them."""
        self.work.keep_responses(message.responses)
        self.trend.redraw()

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not take the work with it."""
        if event.state is WorkerState.ERROR:
            self._evaluating = None
            fault = event.worker.error
            self.tell(f"could not be computed ({type(fault).__name__}: {fault})", "worse")

    # -- what the keys do --------------------------------------------------------------------------

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """While something is typed, the keys belong to it."""
        return not self.editor.display

    def action_panel(self, number: str) -> None:
        """Bring a panel into view and give it the keys."""
        if number in "45":
            self._in_view["lower"] = number
        elif number in SETTINGS:
            self._in_view["left"] = number
            self._in_view["more"] = number if number not in "12" else self._in_view["more"]
        if self._zoomed:
            self._zoomed = number
        self._arrange()
        self.panels[number].focus()

    def action_zoom(self) -> None:
        """The focused panel alone, or all of them again."""
        panel = self.focused_list()
        self._zoomed = "" if self._zoomed or panel is None else panel.number
        self._arrange()

    def action_edit(self) -> None:
        """Type another value for the chosen setting."""
        panel = self.focused_list()
        if isinstance(panel, FieldsPanel):
            self.editor.open(panel)
        elif isinstance(panel, HistoryPanel):
            self._put_back(panel.chosen())
        else:
            self.tell(CHOOSE)

    def _put_back(self, entry: Revision | None) -> None:
        """The way back to earlier settings, in one change."""
        if entry is None:
            self.tell("the history is empty")
            return
        try:
            changed = self.work.put_back(entry)
        except InputError as fault:
            self.tell(str(fault), "worse")
            return
        number = self.work.case.history.index(entry) + 1
        if changed:
            self.tell(f"the settings of entry {number} are back; s saves, u undoes", "caution")
            self.post_message(CaseChanged())
        else:
            self.tell(f"the settings of entry {number} are the present ones")

    def action_nudge(self, factor: float) -> None:
        """Change the chosen setting by a share."""
        panel = self.focused_list()
        if not isinstance(panel, FieldsPanel):
            self.tell(CHOOSE)
            return
        key = panel.key
        try:
            changed = self.work.nudge(key, factor)
        except InputError as fault:
            self.tell(str(fault), "worse")
            return
        if changed:
            self.moved()
            self.post_message(CaseChanged())

    def action_pin(self) -> None:
        """Compare with the present prediction too."""
        if self.work.evaluation is None or not self._is_current():
            self.tell("still computing; press p again when the figures are there")
            return
        before = self.work.pins
        self.work.pins = before.with_(self.work.evaluation, self.work.settings)
        newest = self.work.pins.newest
        assert newest is not None
        told = self.work.pins.words_of(newest, self.work.settings)
        words = f"pinned as {newest.mark}{f': {told}' if told else ''}"
        gone = before.kept[0] if len(before.kept) == len(charts.PINS) else None
        if newest in before.kept:
            words = f"these settings are pin {newest.mark}"
        elif gone is not None:
            words += f"; in the place of the oldest pin, {gone.mark}"
        self.tell(f"{words}; figures are compared with it from now on")
        self._redraw_compared()

    def action_drop_pin(self) -> None:
        """Compare with the pin before the newest."""
        dropped = self.work.pins.newest
        if dropped is None:
            self.tell("nothing is pinned; p pins the present prediction")
            return
        self.work.pins = self.work.pins.without_newest()
        newest = self.work.pins.newest
        left = f"figures are compared with pin {newest.mark}" if newest else "nothing is pinned"
        self.tell(f"pin {dropped.mark} dropped; {left}")
        self._redraw_compared()

    def _redraw_compared(self) -> None:
        for number in "34":
            self.panels[number].redraw()
        self._respond()

    def action_view(self) -> None:
        """Trend, open loop and sensitivity, by turns."""
        self.trend.show_next()
        self._respond()

    def action_undo(self) -> None:
        """Back by one change."""
        self.tell("undone" if self.work.undo() else "nothing to undo")
        self.post_message(CaseChanged())

    def action_redo(self) -> None:
        """Forward by one change."""
        self.tell("done again" if self.work.redo() else "nothing to redo")
        self.post_message(CaseChanged())

    def action_record(self) -> None:
        """Open the Record page."""
        self.program.show_record(self.work)

    def action_proposals(self) -> None:
        """Open the Proposals page."""
        self.program.show_proposals(self.work)

    def action_tolerance(self) -> None:
        """Open the Tolerance page."""
        if self.work.case.controller is None:
            self.tell("the map needs a controller: give its gain in 2 Controller")
            return
        self.program.show_tolerance(self.work)

    def action_copy(self) -> None:
        """The settings to the clipboard and to a file."""
        try:
            self.tell(copy_settings(self.app, self.work.case, self.work.path))
        except InputError as fault:
            self.tell(str(fault), "worse")

    def action_sheet(self) -> None:
        """Write the retune sheet beside the case, in a thread."""
        case, path = self.work.case, self.work.path
        unsaved = "; these settings are not saved yet" if self.work.unsaved else ""
        self.tell("writing the sheet ...", "quiet")

        def write() -> None:
            try:
                place = write_sheet(case, path)
            except (WorkbenchError, OSError) as fault:
                self.post_message(SheetWritten(f"no sheet: {fault}", "worse"))
            else:
                told = f"{harmless(place.name)} is written beside the case{unsaved}"
                self.post_message(SheetWritten(told, "caution" if unsaved else "plain"))

        self.run_worker(write, thread=True, group="sheet", exit_on_error=False)

    def on_sheet_written(self, message: SheetWritten) -> None:
        """Say where it is."""
        self.tell(message.words, message.tone)

    def action_save(self) -> None:
        """Open the Save page."""
        self.program.show_save(self.work)

    def action_leave(self) -> None:
        """Leave the loop."""
        self.program.leave(self.work)

    # -- finding -----------------------------------------------------------------------------------

    def offers(self) -> Iterable[Offer]:
        """The commands, and every setting that can be edited now."""
        yield from super().offers()
        for number in SETTINGS:
            panel = self.panels[number]
            assert isinstance(panel, FieldsPanel)
            for key in panel.keys:
                meaning = self.work.quantities[key].meaning
                yield Offer(
                    f"set {label_of(key)}: {meaning}",
                    number,
                    partial(self._edit_setting, number, key),
                    f"{key.replace('_', ' ')} {panel.title} {SETTING_CALLED.get(key, '')}",
                )

    def _edit_setting(self, number: str, key: str) -> None:
        """Go to a setting, and type another value for it."""
        panel = self.panels[number]
        if isinstance(panel, FieldsPanel) and key in panel.keys:
            self.action_panel(number)
            panel.cursor = panel.keys.index(key)
            self.moved()
            panel.redraw()
            self.call_after_refresh(self.editor.open, panel)

    # -- editing -----------------------------------------------------------------------------------

    @on(Editor.Closed)
    def edited(self, message: Editor.Closed) -> None:
        """Back to the panel; a change is computed at once."""
        if message.assumed:
            named = ", ".join(label_of(key) for key in message.assumed)
            self.greet(f"assumed, to be typed over: {named}", "caution")
        message.panel.focus()
        if message.changed:
            self.post_message(CaseChanged())

    @on(Entry.Submitted)
    def submitted(self, message: Entry.Submitted) -> None:
        """The editor deals with its own entry."""
        message.stop()
        self.editor.accept(message.value)

    @on(Entry.Left)
    def left(self, message: Entry.Left) -> None:
        """Nothing is changed."""
        message.stop()
        self.editor.leave()

    def on_descendant_focus(self, event: DescendantFocus) -> None:
        """Say what the chosen setting is, and which keys there are."""
        panel, keys = self.focused_list(), self.query_one(KeyLine)
        keys.commands = self.key_line((panel.key_line if panel else ()) or self.commands)
        keys.redraw()
        self.moved()

    def moved(self) -> None:
        """The message line tells the meaning of the chosen setting."""
        panel = self.focused_list()
        if self._greeting:
            self.tell(*self._greeting)
            self._greeting = None
        elif isinstance(panel, FieldsPanel):
            self.tell(self._about(panel.key), "quiet")
        elif isinstance(panel, HistoryPanel) and (entry := panel.chosen()) is not None:
            would = changed_by(entry, self.work.case)
            self.tell(f"Enter puts back: {would or 'nothing would change'}.", "quiet")
        elif panel is not None:
            self.tell("", "quiet")

    def _about(self, key: str) -> str:
        """What a setting is, and what the file has."""
        was = {changed: old for changed, old, _ in self.work.changes}
        saved = f" In the file: {was[key] or 'left out'}." if key in was else ""
        room = self.size.width - len(saved) - 16
        meaning = self.work.quantities[key].meaning
        meaning = meaning if len(meaning) <= room else meaning[: room - 1] + "…"
        return f"Enter edits: {meaning}.{saved}"

    def greet(self, words: str, tone: str = "plain") -> None:
        """Say something as soon as the keys are back in a panel."""
        self._greeting = (words, tone)


def _pair_of(number: str) -> str:
    """The pair of panels to which one belongs."""
    return next(pair for pair in PAIRS if number in pair)


SETTING_CALLED: Final = {
    "plant.gain": "process static",
    "plant.time_constant": "lag process",
    "plant.dead_time": "deadtime delay transport lag",
    "plant.shape": "model transfer function",
    "plant.formula": "transfer function model",
    "controller.gain": "proportional p kp kc tune",
    "controller.proportional_band": "pb band p tune",
    "controller.integral": "reset i ti tune",
    "controller.derivative": "rate preact d td tune",
    "controller.scan": "execution interval sample period cycle",
    "controller.action": "direct reverse sign",
    "controller.windup": "antireset saturation",
    "controller.setpoint_weight": "two degrees beta",
    "scenario.load_step": "upset disturbance",
    "scenario.setpoint_step": "sp target",
    "pv.low": "range span scale",
    "pv.high": "range span scale",
    "op.min": "limit clamp low",
    "op.max": "limit clamp high",
    "op.rate": "slew ramp limit",
}
"""What a setting is called elsewhere."""

PANELS: Final[tuple[type[Panel], ...]] = (
    PlantPanel,
    ControllerPanel,
    TrendPanel,
    FiguresPanel,
    HistoryPanel,
    ScenarioPanel,
    LoopPanel,
    InstrumentsPanel,
    StructurePanel,
)
"""Every panel of the main page, in the order of its key."""

PAIRS: Final = ("12", "67", "89")
"""Panels of settings that are shown together; each pair takes the place of another."""

SETTINGS: Final = "".join(PAIRS)
"""Panels of settings, from top to bottom."""

PARTNERS: Final = {"1": "6", "2": "7", "6": "8", "7": "9", "8": "1", "9": "2", "4": "5", "5": "4"}
"""The panel that comes next in the place of another where there is not room for all."""

ROOMY_PARTNERS: Final = {"6": "8", "7": "9", "8": "6", "9": "7"}
"""The same where there is more room."""
