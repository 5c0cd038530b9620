"""Saving with a reason, and leaving without losing anything."""

from __future__ import annotations

import getpass
from collections.abc import Iterable
from dataclasses import replace
from datetime import datetime

from textual import on
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState

from workbench import units
from workbench.case.case import Revision
from workbench.case.files import CaseFile, Merge, changed_on_disk
from workbench.errors import WorkbenchError
from workbench.screens.cells import Line
from workbench.screens.drafts import Draft
from workbench.screens.entry import Entry
from workbench.screens.figures import cautions
from workbench.screens.keys import FIND, Command, bindings
from workbench.screens.page import MOVING, Page
from workbench.screens.panel import Panel, remark, wrapped
from workbench.screens.work import Work, Writer
from workbench.study import HANDOVER

KINDS = units.quantities(Revision)["kind"].choices
"""What a history entry can be."""


class Changes(Panel):
    """What would be written: every changed setting, and the cautions."""

    title = "What is saved"
    fault = ""

    def body(self, width: int) -> list[Line]:
        """A fault first, then the changes, then what to mind."""
        lines: list[Line] = []
        if self.fault:
            lines += wrapped(self.fault, width - 2, "worse", "  ")
            lines += wrapped("Nothing was written; your work is kept.", width, "plain", "  ")
            lines.append(())
        lines += changed_settings(self.work.told)
        if not self.work.told:
            lines.append((("  no setting changed: only a history entry is added", "quiet"),))
        lines.append(())
        lines += cautions(self.work, width, most=1000)
        for caution in HANDOVER:
            lines += remark(caution, width, "plain", "-")
        return lines


def changed_settings(changes: Iterable[tuple[str, str, str]]) -> list[Line]:
    """Each changed setting, from what to what."""
    return [
        ((f"  {key:<32}", "label"), (f"{old or '-'} -> {new or '-'}", "changed"))
        for key, old, new in changes
    ]


class Written(Message):
    """Posted when the work is on the disk, or why it is not."""

    def __init__(self, file: CaseFile | None, fault: str = "") -> None:
        super().__init__()
        self.file, self.fault = file, fault


class SavePage(Page):
    """Who saves, and why."""

    about = (
        "Saving writes the changed settings into the case file and adds an entry to its history. "
        "The reason is required; a safety-related loop is marked installed only with the "
        "reference of a written approval. The file is not touched when someone else saved "
        "meanwhile.",
    )
    commands = (
        Command("", "Enter", "save", "", "save"),
        Command("tab", "Tab", "next line", "app.focus_next", "to the next line"),
        Command("shift+tab", "shift+Tab", "", "app.focus_previous", "to the line before"),
        Command("", "Up Down", "another kind", "", "on the line 'kind': another kind"),
        Command("", "Esc", "back", "", "back without saving"),
        Command("f1", "F1", "help", "help", "this help"),
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work, and_then_leave: bool = False) -> None:
        super().__init__()
        self.work, self.and_then_leave = work, and_then_leave
        self._saving = False
        self.entry: dict[str, str] = {}
        """What was filled in, for the history."""
        self._why = Entry("  why: ", css_id="why")
        self._who = Entry("  who: ", _user(), css_id="who")
        self._kind = Entry("  kind:", "installed", KINDS, css_id="kind")
        self._reference = Entry("  ref: ", css_id="reference")
        self._changes = Changes(work, css_id="changes")

    def head(self) -> Line:
        """The file."""
        return ((" Save ", "title"), (f" {self.work.path}", "quiet"))

    def key_line(self, commands: Iterable[Command]) -> tuple[Command, ...]:
        """Letters and signs are text here: the finder has its other key."""
        return (*commands, replace(FIND, shown=FIND.also))

    def body(self) -> Iterable[Widget]:
        """The lines to fill in, and what is saved."""
        yield from (self._why, self._who, self._kind)
        if self.work.case.loop.safety_related:
            yield self._reference
        yield self._changes

    def on_mount(self) -> None:
        """The reason is asked for first."""
        super().on_mount()
        self._why.focus()

    @on(Entry.Left)
    def left(self) -> None:
        """Back without saving; what is being written is waited for."""
        if not self._saving:
            self.action_back()

    @on(Entry.Submitted)
    def submitted(self) -> None:
        """Save, or say what is missing."""
        why, who, kind = (e.value.strip() for e in (self._why, self._who, self._kind))
        for entry, value in ((self._why, why), (self._who, who)):
            if not value:
                self.tell(f"say {entry.id}: the history keeps it", "worse")
                entry.focus()
                return
        self.entry = {
            "who": who,
            "why": why,
            "kind": kind,
            "reference": self._reference.value.strip(),
        }
        self._save(beside=False)

    def save_beside(self) -> None:
        """Into a new file, which leaves what someone else saved as it is."""
        self._save(beside=True)

    def _save(self, *, beside: bool) -> None:
        """In a thread: a slow disk must not hold up the keys."""
        if self._saving:
            return
        self._saving = True
        now = datetime.now().astimezone().replace(microsecond=0)
        write = self.work.writer(self.entry, now, beside=beside)
        self.tell("saving ...", "quiet")
        self.run_worker(lambda: self._write(write), thread=True, exit_on_error=False)

    def _write(self, write: Writer) -> None:
        try:
            self.post_message(Written(write()))
        except (WorkbenchError, OSError) as fault:
            self.post_message(Written(None, str(fault)))

    def on_written(self, message: Written) -> None:
        """Back to the loop; or say why nothing was saved."""
        self._saving = False
        if message.file is None:
            self._changes.fault = message.fault
            self._changes.redraw()
            self.tell("not saved", "worse")
            self._ask_about_others()
            return
        self.work.is_saved_in(message.file)
        self.program.saved(self.work, self.and_then_leave)

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not take the work with it."""
        if event.state is WorkerState.ERROR:
            self._saving = False
            fault = event.worker.error
            self.tell(f"not saved ({type(fault).__name__}: {fault})", "worse")

    def _ask_about_others(self) -> None:
        """Where someone else saved meanwhile, there are three ways on."""
        try:
            theirs = changed_on_disk(self.work.file)
        except WorkbenchError:
            return
        if theirs is not None:
            self.program.push_screen(ConflictPage(self.work, self, theirs))

    def merged(self, found: Merge) -> None:
        """Show what is saved now that theirs is in it."""
        both = f"; you both changed {', '.join(found.both)}: yours is kept" if found.both else ""
        self._changes.fault = ""
        self._changes.redraw()
        self.tell(f"their changes are taken in{both}; Enter saves", "caution")


def _user() -> str:
    try:
        return units.harmless(getpass.getuser(), 60)
    except (KeyError, OSError, ImportError):
        return ""


class AskPage(Page):
    """A question with a few answers; a text that explains it."""

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self._text = Question(work, css_id="question")

    def head(self) -> Line:
        """The loop."""
        loop = self.work.case.loop
        return ((f" {loop.tag}  {loop.service}", "title"),)

    def body(self) -> Iterable[Widget]:
        """The question."""
        yield self._text

    def on_mount(self) -> None:
        """Show the question."""
        super().on_mount()
        self._text.words = self.question()
        self._text.focus()
        self._text.redraw()

    def question(self) -> list[Line]:
        """The text."""
        return []


class Question(Panel):
    """The text of a question."""

    title = "Unsaved work"

    def __init__(self, work: Work, *, css_id: str) -> None:
        super().__init__(work, css_id=css_id)
        self.words: list[Line] = []

    def body(self, width: int) -> list[Line]:
        """The text."""
        return self.words


class ConflictPage(AskPage):
    """Someone else saved the file while it was open here."""

    about = (
        "The file is not what was read: someone else saved it, or edited it by hand. Nothing of "
        "yours is lost, and nothing of theirs is overwritten.",
    )
    commands = (
        Command("m", "m", "take theirs in", "merge", "take their changes in, yours over them"),
        Command("b", "b", "save beside", "beside", "save yours into a new file beside it"),
        Command("escape,q", "Esc", "back", "back", "back without saving", "q"),
        Command("question_mark,f1", "?", "help", "help", "this help", "F1"),
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work, page: SavePage, theirs: Iterable[tuple[str, str, str]]) -> None:
        super().__init__(work)
        self.page, self.theirs = page, tuple(theirs)

    def question(self) -> list[Line]:
        """What they changed, what is changed here, and the ways on."""
        return [
            (("  Someone else changed the file since it was read:", "plain"),),
            *changed_settings(self.theirs),
            *([] if self.theirs else [(("  comments or layout only", "quiet"),)]),
            (),
            (("  Not saved here:", "plain"),),
            *changed_settings(self.work.told),
            (),
            (("  m takes their changes in and keeps yours over them; then Enter saves.", "plain"),),
            (("  b saves yours into a new file beside it.", "plain"),),
            (("  Esc goes back without saving.", "plain"),),
        ]

    def action_merge(self) -> None:
        """Theirs, with one's own changes over it."""
        try:
            found = self.work.merge()
        except WorkbenchError as fault:
            self.tell(str(fault), "worse")
            return
        self.program.pop_screen()
        self.page.merged(found)

    def action_beside(self) -> None:
        """Into a new file."""
        self.program.pop_screen()
        self.page.save_beside()


class LeavePage(AskPage):
    """Unsaved work is asked about once."""

    about = ("The work on this loop is not saved yet.",)
    commands = (
        Command("s,f2", "s", "save", "save", "save with a reason, then leave", "F2"),
        Command("d", "d", "leave, keep a draft", "leave", "leave; the work is offered next time"),
        Command("escape", "Esc", "stay", "back", "stay"),
        Command("question_mark,f1", "?", "help", "help", "this help", "F1"),
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def question(self) -> list[Line]:
        """What would be left behind."""
        return [
            (("  Not saved yet:", "plain"),),
            *changed_settings(self.work.told),
            (),
            (("  s saves with a reason and leaves.", "plain"),),
            (("  d leaves; the changes are kept as a draft and offered next time.", "plain"),),
            (("  Esc stays here.", "plain"),),
        ]

    def action_save(self) -> None:
        """Ask for the reason, then leave."""
        self.program.pop_screen()
        self.program.show_save(self.work, and_then_leave=True)

    def action_leave(self) -> None:
        """Leave; the draft is on disk already."""
        self.program.pop_screen()
        self.program.close_case(self.work)


class DraftPage(AskPage):
    """Unsaved work of an earlier session."""

    about = ("The last session on this loop ended before its work was saved.",)
    commands = (
        Command("enter", "Enter", "take it up", "take", "go on with the unsaved work"),
        Command("d", "d", "drop it", "drop", "forget the unsaved work"),
        Command("escape,q", "Esc", "not now", "leave", "leave the loop, keep the draft", "q"),
        Command("question_mark,f1", "?", "help", "help", "this help", "F1"),
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work, draft: Draft) -> None:
        super().__init__(work)
        self.draft = draft

    def question(self) -> list[Line]:
        """What was kept."""
        known = self.work.quantities
        return [
            ((f"  Unsaved work of {self.draft.at} was kept:", "plain"),),
            *changed_settings(
                (key, self.work.show(key) if key in known else "", text)
                for key, text in self.draft.changes.items()
                if not key.endswith("sha256")
            ),
            (),
            (("  Enter goes on with it; u takes it back then.", "plain"),),
            (("  d drops it and opens the file as it is.", "plain"),),
            (("  Esc leaves everything as it is.", "plain"),),
        ]

    def action_take(self) -> None:
        """Go on with it."""
        try:
            self.work.take_up(self.draft)
        except WorkbenchError as fault:
            self.tell(f"does not fit the file any more: {fault}", "worse")
            return
        self.program.pop_screen()

    def action_leave(self) -> None:
        """Decide another time."""
        self.program.pop_screen()
        self.program.close_case(self.work)

    def action_drop(self) -> None:
        """Forget it."""
        self.work.drop(self.draft)
        self.program.pop_screen()
