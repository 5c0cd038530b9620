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
from collections.abc import Iterable
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import ClassVar, Final

from textual.app import App
from textual.await_complete import AwaitComplete
from textual.binding import BindingType

from workbench.errors import WorkbenchError
from workbench.screens import drafts
from workbench.screens.help import HelpPage
from workbench.screens.main import MainPage
from workbench.screens.page import MOVING, Offer, Page
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

    def pop_screen(self) -> AwaitComplete:
        """Leave the page on top; the first page is left by ending the program alone."""
        # Keys that came in a burst may each ask for it, and the last page has nothing under it.
        if len(self.screen_stack) <= _FIRST:
            return AwaitComplete()
        return super().pop_screen()

    def back_to_loop(self, words: str) -> None:
        """Leave the page on top; the loop's page says what happened."""
        self.pop_screen()
        if isinstance(self.screen, MainPage):
            self.screen.greet(words)

    def show_help(self, page: Page) -> None:
        """Explain a page."""
        self.push_screen(HelpPage(page))

    def show_finder(self, page: Page) -> None:
        """Everything that can be done from a page."""
        from workbench.screens.finder import FinderPage

        self.push_screen(FinderPage([*page.offers(), *self._offers_elsewhere(page)]))

    def _offers_elsewhere(self, page: Page) -> Iterable[Offer]:
        """What can be done on the pages that a page leads to, and on the one it came from."""
        pages = leads_to()
        for action, kind in pages.get(type(page), {}).items():
            for command in kind.commands:
                if command.action and command.help and command.action not in NOT_FROM_AFAR:
                    yield replace(
                        page.offer(command),
                        run=partial(self._go_and_do, page, action, command.action),
                        place=kind.called,
                    )
        before = self.screen_stack[-2]
        if isinstance(before, Page) and type(page) in pages.get(type(before), {}).values():
            for offer in before.offers():
                yield replace(offer, run=partial(self._back_and_do, offer), place=before.called)

    async def _go_and_do(self, page: Page, action: str, wanted: str) -> None:
        """Open a page by the action that leads there, then do what is wanted on it."""
        await page.run_action(action)
        if self.screen is not page:
            self.screen.call_after_refresh(self.screen.run_action, wanted)

    def _back_and_do(self, offer: Offer) -> None:
        self.pop_screen()
        offer.run()

    def show_survey(self, folder: Path) -> None:
        """How every loop of a folder stands."""
        from workbench.screens.survey import SurveyPage

        self.push_screen(SurveyPage(folder))

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


def leads_to() -> dict[type[Page], dict[str, type[Page]]]:
    """Page -> its action -> the page that this opens."""
    from workbench.screens.proposals import ProposalsPage
    from workbench.screens.record import RecordPage
    from workbench.screens.start import StartPage
    from workbench.screens.survey import SurveyPage
    from workbench.screens.tolerance import TolerancePage

    return {
        StartPage: {"survey": SurveyPage},
        MainPage: {"record": RecordPage, "proposals": ProposalsPage, "tolerance": TolerancePage},
    }


_FIRST: Final = 2
"""Screens while the first page is shown: Textual's own empty one lies under it."""

NOT_FROM_AFAR: Final = frozenset({"back", "help", *(command.action for command in MOVING)})
"""What says nothing before the page is open."""


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
