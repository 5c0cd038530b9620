"""The program on the screen: which page is shown, and how it ends.

A page is loaded when it is first shown: the first one is there sooner.
"""

from __future__ import annotations

import asyncio
import gc
import os
import signal
import sys
import traceback
from pathlib import Path
from typing import ClassVar

from textual.app import App
from textual.binding import BindingType

from workbench.errors import WorkbenchError
from workbench.screens import drafts
from workbench.screens.help import HelpPage
from workbench.screens.main import MainPage
from workbench.screens.page import Page
from workbench.screens.terminal import ASKED_TO_END, Guard, TolerantDriver, abilities
from workbench.screens.work import Work

DRAWN_S = 2.0
"""Time after the start by which the first page is drawn [s]."""


class WorkbenchApp(App[None], inherit_bindings=False):
    """The screen of the workbench."""

    CSS_PATH = "workbench.tcss"
    ENABLE_COMMAND_PALETTE = False
    AUTO_FOCUS = None
    BINDINGS: ClassVar[list[BindingType]] = [("ctrl+z", "suspend_process", "to the shell")]

    def __init__(self, path: Path, work: Work | None, *, ascii_only: bool = False) -> None:
        super().__init__(driver_class=TolerantDriver, ansi_color=True)
        self.ascii_only = ascii_only
        self.path = path
        self.work = work
        self._from_list = work is None
        self.fault = ""
        """Details of a fault of the program itself."""

    # -- starting and ending -----------------------------------------------------------------------

    def on_mount(self) -> None:
        """Show the first page; from here on a request to end is heard."""
        self.theme = "ansi-dark"
        self.app_resume_signal.subscribe(self, lambda _: self.screen.refresh(layout=True))
        if not self.is_headless:
            self.set_timer(DRAWN_S, _collect_garbage)
            asyncio.get_running_loop().add_signal_handler(signal.SIGTERM, self._asked_to_end)
        if self._from_list:
            from workbench.screens.start import StartPage

            self.push_screen(StartPage(self.path))
        elif self.work is not None:
            self._show_case(self.work)

    def keep(self) -> None:
        """Keep unsaved work; safe to call from any thread and from a signal handler."""
        if self.work is not None:
            self.work.keeper.write_last()

    def _asked_to_end(self) -> None:
        self.keep()
        self.exit(return_code=ASKED_TO_END)

    def finish(self) -> None:
        """End the program."""
        self.keep()
        self.exit(return_code=0)

    def _fatal_error(self) -> None:
        """In place of Textual's pages of traceback: keep the work, keep the details, end."""
        self.keep()
        self.fault = traceback.format_exc()
        self._close_messages_no_wait()

    # -- pages -------------------------------------------------------------------------------------

    def open_case(self, path: Path) -> None:
        """Open a case file from the list.  Raises `InputError`."""
        self._show_case(Work.open(path))

    def _show_case(self, work: Work) -> None:
        self.work = work
        self.push_screen(MainPage(work))
        if work.draft is not None:
            from workbench.screens.saving import DraftPage

            self.push_screen(DraftPage(work, work.draft))

    def back_to_loop(self, words: str) -> None:
        """Leave the page on top; the loop's page says what happened."""
        self.pop_screen()
        if isinstance(self.screen, MainPage):
            self.screen.greet(words)

    def show_help(self, page: Page) -> None:
        """Explain a page."""
        self.push_screen(HelpPage(page))

    def show_record(self, work: Work) -> None:
        """Fit the plant to a record."""
        from workbench.screens.record import RecordPage

        self.push_screen(RecordPage(work))

    def show_proposals(self, work: Work) -> None:
        """Settings by rules."""
        from workbench.screens.proposals import ProposalsPage

        self.push_screen(ProposalsPage(work))

    def show_tolerance(self, work: Work) -> None:
        """What the settings survive."""
        from workbench.screens.tolerance import TolerancePage

        self.push_screen(TolerancePage(work))

    def show_save(self, work: Work, *, and_then_leave: bool = False) -> None:
        """Ask who and why, then save."""
        from workbench.screens.saving import SavePage

        self.push_screen(SavePage(work, and_then_leave))

    def saved(self, work: Work, leave: bool) -> None:
        """The case file holds the work."""
        count = len(work.case.history)
        notes = "".join(f"; {note.text}" for note in work.file.notes)
        self.back_to_loop(f"saved to {work.path.name} as entry {count} of its history{notes}")
        if leave:
            self.close_case(work)

    def leave(self, work: Work) -> None:
        """Leave a loop; unsaved work is asked about."""
        if work.unsaved:
            from workbench.screens.saving import LeavePage

            self.push_screen(LeavePage(work))
        else:
            self.close_case(work)

    def close_case(self, work: Work) -> None:
        """Back to the list that the case was opened from, or the end."""
        self.keep()
        if self._from_list:
            self.work = None
            self.pop_screen()
        else:
            self.finish()


def run(
    path: str | None,
    *,
    ascii: bool = False,  # noqa: A002 - the name of the option
    no_colour: bool = False,
    mouse: bool = False,
) -> int:
    """Open the screen on a case file or a folder of cases, and return the exit status.

    Raises `InputError` where the file or folder cannot be opened, `WorkbenchError` after a fault of
    the program itself.
    """
    place = Path(path) if path is not None else Path()
    work = None if place.is_dir() else Work.open(place)
    can = abilities(os.environ, ascii_only=ascii, no_colour=no_colour)
    if not can.colour:
        # Textual reads this one as the application is made.
        os.environ["NO_COLOR"] = "1"
    # The screen stays quick while a thread computes.
    sys.setswitchinterval(0.0005)
    app = WorkbenchApp(place, work, ascii_only=can.ascii_only)
    guard = Guard(app.keep)
    TolerantDriver.lost = staticmethod(guard.line_dropped)
    guard.watch()
    app.run(mouse=mouse)
    if app.fault:
        raise _told(app.fault)
    return app.return_code or 0


def _collect_garbage() -> None:
    """From here on, and of what is made from here on: a key must not wait for a look at it all."""
    gc.freeze()
    gc.enable()


def _told(details: str) -> WorkbenchError:
    """A fault of the program in one line, its details in a file."""
    last = details.strip().rpartition("\n")[2]
    place = drafts.folder().parent / "last-fault.txt"
    try:
        place.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        place.write_text(details, encoding="utf-8")
    except OSError:
        where = ""
    else:
        where = f"; please report {place}"
    return WorkbenchError(
        f"the screen stopped on a fault of the program ({last}){where}; unsaved work is kept as a "
        "draft and offered when the case is opened again"
    )
