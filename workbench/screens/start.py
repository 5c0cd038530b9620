"""The start page: the cases of a folder."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from textual import on
from textual.widget import Widget

from workbench import study
from workbench.case.case import new_case
from workbench.case.files import file_name, read_case, write_new
from workbench.errors import InputError
from workbench.screens import drafts
from workbench.screens.cells import Line
from workbench.screens.entry import Entry
from workbench.screens.keys import Command, bindings
from workbench.screens.page import HELP, MOVING, Page
from workbench.screens.panel import Listing, wrapped
from workbench.units import harmless

MOST = 2000
"""Files listed; a folder with more is not a folder of cases."""


@dataclass(frozen=True)
class Listed:
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
        self.entries: tuple[Listed, ...] = ()
        self.was_read = False

    def read(self) -> None:
        """Look into the folder again."""
        paths = sorted(self.folder.glob("*.toml"))[:MOST]
        self.entries = tuple(map(_entry, paths))
        self.was_read = True
        self.redraw()

    @property
    def chosen(self) -> Listed | None:
        """The entry of the chosen line."""
        return self.entries[self.cursor] if self.cursor < len(self.entries) else None

    def choose(self, path: Path) -> None:
        """Put the cursor on a file."""
        paths = [entry.path for entry in self.entries]
        self.cursor = paths.index(path) if path in paths else 0
        self.redraw()

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
        if not lines and self.was_read:
            lines = [
                (("  no case files (*.toml) in this folder", "plain"),),
                (),
                (
                    ("  n", "key"),
                    ("  begins a new case: you give its tag, then its plant", "plain"),
                ),
                (("  d", "key"), ("  writes an invented loop to try things out on", "plain")),
            ]
        return lines

    def fixed(self, width: int) -> list[Line]:
        """How to begin, for whom it is the first time."""
        room = min(width, 100) - 2
        return [line for words in HINTS for line in wrapped(words, room, "quiet", "  ")]


HINTS = (
    "From a test record to settings: Enter opens a loop, r fits its plant to a record, o proposes "
    "settings, s saves them with the reason.",
    "Every key of a page stands on its last line; / finds what you want by plain words, ? explains "
    "the page. Leaving never loses work.",
)
"""What to know at the first start."""


def _entry(path: Path) -> Listed:
    try:
        loop = read_case(path).case.loop
    except InputError as fault:
        return Listed(path, path.stem, path.name, fault.problems[0].what)
    return Listed(path, loop.tag, loop.service, has_draft=drafts.find(path) is not None)


NEW_CALLED = "create add make loop tag"
DEMO_CALLED = "example sample tutorial try invented learn"
ALL_CALLED = "audit overview health all folder judge rank performance worst loops"


class StartPage(Page):
    """Choose a case, make one, or see how all of them stand."""

    called = "start page"
    about = (
        "The cases of the folder that the program was started with. A case is one control loop: "
        "its plant, its controller, what is to be expected of them, and the history of its tuning.",
        "Fit the plant to a test record with r, look at proposals with o, save with s: each key "
        "stands on the last line of the page that it belongs to.",
    )
    commands = (
        Command("enter", "Enter", "open", "open", "open the chosen case", called="load edit"),
        Command("n", "n", "new case", "new", "make a new case in this folder", called=NEW_CALLED),
        Command(
            "d", "d", "demo", "demo", "write an invented loop into this folder", called=DEMO_CALLED
        ),
        Command(
            "v",
            "v",
            "survey",
            "survey",
            "how every loop stands, the worst first",
            called=ALL_CALLED,
        ),
        Command("q,ctrl+c", "q", "quit", "quit", "end the program", "ctrl+c", "exit close leave"),
        HELP,
        *MOVING,
    )
    BINDINGS = bindings(commands)

    def __init__(self, folder: Path) -> None:
        super().__init__()
        self.cases = CaseList(folder)
        self.entry = Entry("  tag of the new loop:", longest=60, css_id="tag")

    def head(self) -> Line:
        """Where we are."""
        return ((" Loop Workbench", "title"), (f"  {harmless(str(self.cases.folder))}", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The list, and the entry of a tag."""
        yield from (self.cases, self.entry)

    def on_mount(self) -> None:
        """The list takes the keys; files are read once the frame is painted."""
        super().on_mount()
        self.entry.display = False
        self.cases.focus()
        self.call_after_refresh(self.cases.read)

    def on_screen_resume(self) -> None:
        """Back from a case, whose file may say something else now."""
        if self.cases.was_read:
            self.cases.read()

    def action_open(self) -> None:
        """Open the chosen case."""
        chosen = self.cases.chosen
        if chosen is None:
            self.tell("there is no case here yet: n makes one, d writes the demo")
            return
        self._open(chosen.path)

    def _open(self, path: Path) -> None:
        try:
            self.program.open_case(path)
        except InputError as fault:
            self.tell(str(fault), "worse")

    def action_new(self) -> None:
        """Ask for the tag of a new loop."""
        self.entry.ask("  tag of the new loop:", "")
        self.entry.display = True
        self.entry.focus()
        self.tell("its name on the plant, like TIC-307; Enter writes TAG.toml, Esc does not")

    @on(Entry.Left)
    def left(self) -> None:
        """Back to the list."""
        self.entry.display = False
        self.cases.focus()
        self.tell("")

    @on(Entry.Submitted)
    def typed(self, message: Entry.Submitted) -> None:
        """Write the new case and open it, or say what is wrong with the tag."""
        tag = message.value.strip()
        try:
            path = self.cases.folder / file_name(tag)
            write_new(path, new_case(tag))
        except InputError as fault:
            self.tell(str(fault), "worse")
            return
        self.left()
        self._open(path)

    def action_demo(self) -> None:
        """Write the invented loop into the folder, and choose it."""
        try:
            path = study.write_demo(self.cases.folder, datetime.now().astimezone())
        except InputError as fault:
            self.tell(str(fault), "worse")
            return
        self.cases.read()
        self.cases.choose(path)
        self.tell(
            f"{path.name} and its bump test are written: an invented loop of the Port Ellery "
            "alginate works; Enter opens it"
        )

    def action_survey(self) -> None:
        """Judge every case of the folder and below it."""
        self.program.show_survey(self.cases.folder)

    def action_quit(self) -> None:
        """End the program."""
        self.program.finish()
