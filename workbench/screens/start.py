"""The start page: the cases of a folder."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from textual.widget import Widget

from workbench.case.files import read_case
from workbench.errors import InputError
from workbench.screens import drafts
from workbench.screens.cells import Line
from workbench.screens.keys import Command, bindings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Listing
from workbench.units import harmless

MOST = 2000
"""Files listed; a folder with more is not a folder of cases."""


@dataclass(frozen=True)
class Entry:
    """One case file of the folder."""

    path: Path
    tag: str
    service: str
    fault: str = ""
    has_draft: bool = False
    """Unsaved work of an earlier session waits."""


class CaseList(Listing):
    """The cases, one a line."""

    title = "Cases"
    selects = True
    help = ("The case files of this folder. Press Enter to open the chosen one.",)

    def __init__(self, folder: Path) -> None:
        super().__init__(css_id="cases")
        self.folder = folder
        self.entries: tuple[Entry, ...] = ()

    def read(self) -> None:
        """Look into the folder again."""
        paths = sorted(self.folder.glob("*.toml"))[:MOST]
        self.entries = tuple(map(_entry, paths))
        self.redraw()

    @property
    def chosen(self) -> Entry | None:
        """The entry of the chosen line."""
        return self.entries[self.cursor] if self.cursor < len(self.entries) else None

    def body(self, width: int) -> list[Line]:
        """Tag, service and file, or what is wrong with the file."""
        lines: list[Line] = []
        for row, entry in enumerate(self.entries):
            tone = "chosen" if row == self.cursor else "plain"
            mark = ">" if row == self.cursor else " "
            name = f"{mark} {entry.tag[:15]:<16}{entry.service[:31]:<32}"
            words = entry.fault or entry.path.name
            remark = "  unsaved work" if entry.has_draft else ""
            tones = ("worse" if entry.fault else "quiet", "changed")
            lines.append(((name, tone), (f" {words}", tones[0]), (remark, tones[1])))
        return lines or [
            (("  no case files (*.toml) in this folder", "plain"),),
            (("  `workbench new TAG` writes one; open it with `workbench TAG.toml`", "quiet"),),
        ]


def _entry(path: Path) -> Entry:
    try:
        loop = read_case(path).case.loop
    except InputError as fault:
        return Entry(path, path.stem, path.name, fault.problems[0].what)
    return Entry(path, loop.tag, loop.service, has_draft=drafts.place(path).exists())


class StartPage(Page):
    """Choose a case."""

    about = ("The cases of the folder that the program was started with.",)
    commands = (
        Command("enter", "Enter", "open", "open", "open the chosen case"),
        Command("q,ctrl+c", "q", "quit", "quit", "end the program", "ctrl+c"),
        HELP,
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, folder: Path) -> None:
        super().__init__()
        self.cases = CaseList(folder)

    def head(self) -> Line:
        """Where we are."""
        return ((" Loop Workbench", "title"), (f"  {harmless(str(self.cases.folder))}", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The list."""
        yield self.cases

    def on_mount(self) -> None:
        """The list takes the keys; files are read once the frame is painted."""
        super().on_mount()
        self.cases.focus()
        self.call_after_refresh(self.cases.read)

    def on_screen_resume(self) -> None:
        """Back from a case, whose file may say something else now."""
        if self.cases.entries:
            self.cases.read()

    def action_open(self) -> None:
        """Open the chosen case."""
        chosen = self.cases.chosen
        if chosen is None:
            return
        try:
            self.program.open_case(chosen.path)
        except InputError as fault:
            self.tell(str(fault), "worse")

    def action_quit(self) -> None:
        """End the program."""
        self.program.finish()
