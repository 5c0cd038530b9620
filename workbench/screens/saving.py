"""Saving with a reason, and leaving without losing anything."""

from __future__ import annotations

import getpass
from collections.abc import Iterable
from datetime import datetime

from textual import on
from textual.widget import Widget

from workbench import units
from workbench.case.case import Revision
from workbench.errors import WorkbenchError
from workbench.screens.cells import Line
from workbench.screens.drafts import Draft
from workbench.screens.entry import Entry
from workbench.screens.figures import cautions
from workbench.screens.keys import Command, bindings
from workbench.screens.page import MOVING, Page
from workbench.screens.panel import Panel, remark, wrapped
from workbench.screens.work import Work
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
        Command("", "Esc", "back without saving", "", "back without saving"),
        Command("f1", "F1", "help", "help", "this help"),
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work, and_then_leave: bool = False) -> None:
        super().__init__()
        self.work, self.and_then_leave = work, and_then_leave
        self._why = Entry("  why: ", css_id="why")
        self._who = Entry("  who: ", _user(), css_id="who")
        self._kind = Entry("  kind:", "installed", KINDS, css_id="kind")
        self._reference = Entry("  ref: ", css_id="reference")
        self._changes = Changes(work, css_id="changes")

    def head(self) -> Line:
        """The file."""
        return ((" Save ", "title"), (f" {self.work.path}", "quiet"))

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
        """Back without saving."""
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
        reference = self._reference.value.strip()
        now = datetime.now().astimezone().replace(microsecond=0)
        try:
            self.work.save(who=who, why=why, kind=kind, now=now, reference=reference)
        except (WorkbenchError, OSError) as fault:
            self._changes.fault = str(fault)
            self._changes.redraw()
            self.tell("not saved", "worse")
            return
        self.program.saved(self.work, self.and_then_leave)


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
