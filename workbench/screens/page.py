"""What every page shares: a head line, its body, a line for messages, the key line."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING, ClassVar, cast

from textual.app import ComposeResult
from textual.binding import BindingType
from textual.screen import Screen
from textual.widget import Widget

from workbench.screens.cells import Cells, Line
from workbench.screens.keys import FIND, Command, KeyLine, bindings
from workbench.screens.panel import Listing, wrapped

if TYPE_CHECKING:
    from workbench.screens.app import WorkbenchApp

SMALLEST = (80, 24)
"""Columns and rows below which a page asks for more room."""


MOST_LINES = 3
"""Lines of the longest message."""


class TextLine(Cells):
    """One line of words; a long message takes a few."""

    def __init__(self, *, css_id: str) -> None:
        super().__init__(css_id=css_id, classes="one-line")
        self.shown: list[Line] = []

    def say(self, *spans: tuple[str, str]) -> None:
        """Show these words on one line."""
        self.shown = [spans]
        self.redraw()

    def tell(self, words: str, tone: str) -> None:
        """Show a message, on more than one line where it is long."""
        # A page that says something before it is laid out is as wide as the terminal.
        width = self.size.width or self.app.size.width
        lines = wrapped(words, max(20, width - 1), tone, " ")
        self.shown = lines[:MOST_LINES]
        self.styles.height = len(self.shown)
        self.redraw()

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """The words."""
        return self.shown


@dataclass(frozen=True)
class Offer:
    """Something that can be done, as the finder lists it."""

    words: str
    """What it does."""
    key: str
    """The key that does it too."""
    run: Callable[[], object]
    called: str = ""
    """Other words for it."""
    place: str = ""
    """The page that it is on, where that is another one."""


class Page(Screen[None]):
    """A page of the program."""

    AUTO_FOCUS: ClassVar[str | None] = ""
    BINDINGS: ClassVar[list[BindingType]] = bindings((FIND,))

    called: ClassVar[str] = ""
    """The name of the page in a sentence."""

    commands: ClassVar[tuple[Command, ...]] = ()
    key_lines: ClassVar[tuple[tuple[Command, ...], ...]] = ()
    """What the key line shows by turns, where it is not `commands`."""
    about: ClassVar[tuple[str, ...]] = ()
    """What the help page says of this page."""

    def __init__(self) -> None:
        super().__init__()
        # Held here and not looked up, because a page may be closed before it is put together.
        self._head = TextLine(css_id="head")
        self._message = TextLine(css_id="message")
        self._notice = TextLine(css_id="too-small")
        self._focus_before: Widget | None = None

    @property
    def program(self) -> WorkbenchApp:
        """The application, by its own type."""
        return cast("WorkbenchApp", self.app)

    def body(self) -> Iterable[Widget]:
        """The widgets between the head and the message line."""
        return ()

    def head(self) -> Line:
        """The head line."""
        return ()

    def compose(self) -> ComposeResult:
        """Head, body, message line, key line."""
        yield self._head
        yield from self.body()
        yield self._message
        yield KeyLine(self.key_line(self.commands))
        yield self._notice

    def key_line(self, commands: Iterable[Command]) -> tuple[Command, ...]:
        """What the key line shows: the finder is never missing."""
        return (*commands, FIND)

    def on_mount(self) -> None:
        """Fill the head line."""
        self.redraw_head()

    def redraw_head(self) -> None:
        """Show the head line anew."""
        self._head.say(*self.head())

    def tell(self, words: str, tone: str = "plain") -> None:
        """Put words on the message line."""
        self._message.tell(words, tone)

    def on_resize(self) -> None:
        """Ask for more room where there is too little."""
        small = self.size.width < SMALLEST[0] or self.size.height < SMALLEST[1]
        if small and not self.has_class("-small"):
            # What is hidden loses the focus; it gets it back when there is room again.
            self._focus_before = self.focused
        self.set_class(small, "-small")
        if not small and self._focus_before is not None:
            self._focus_before.focus()
            self._focus_before = None
        size = f"{self.size.width}x{self.size.height}"
        self._notice.say((f"enlarge to 80x24 (now {size}); nothing is lost", "caution"))

    # -- keys that every page has -----------------------------------------------------------------

    def focused_list(self) -> Listing | None:
        """The list that the keys move in."""
        return self.focused if isinstance(self.focused, Listing) else None

    def action_move(self, step: int) -> None:
        """Move in the focused list."""
        if panel := self.focused_list():
            panel.move(step)
            self.moved()

    def action_page(self, step: int) -> None:
        """Move a screenful in the focused list."""
        if panel := self.focused_list():
            panel.page(step)
            self.moved()

    def action_ends(self, step: int) -> None:
        """Move to an end of the focused list."""
        if panel := self.focused_list():
            panel.ends(step)
            self.moved()

    def moved(self) -> None:
        """The chosen row is another one."""

    def action_back(self) -> None:
        """Leave this page."""
        self.program.pop_screen()

    def action_help(self) -> None:
        """Explain this page and its keys."""
        self.program.show_help(self)

    def action_find(self) -> None:
        """Find an action by plain words."""
        self.program.show_finder(self)

    def offers(self) -> Iterable[Offer]:
        """What can be done on this page, for the finder."""
        for command in self.commands:
            if command.action and command.help:
                yield self.offer(command)

    def offer(self, command: Command) -> Offer:
        """A command as something to be found."""
        return Offer(
            command.help,
            command.shown,
            lambda: self.call_after_refresh(self.run_action, command.action),
            f"{command.words} {command.called}",
        )


MOVING: tuple[Command, ...] = (
    Command("up,k", "Up", "", "move(-1)", "one line up", "k"),
    Command("down,j", "Down", "", "move(1)", "one line down", "j"),
    Command("pageup", "PgUp", "", "page(-1)", "one screenful up"),
    Command("pagedown", "PgDn", "", "page(1)", "one screenful down"),
    Command("home", "Home", "", "ends(-1)", "to the first line"),
    Command("end", "End", "", "ends(1)", "to the last line"),
)
HELP = Command("question_mark,f1", "?", "help", "help", "this help", "F1")
BACK = Command("escape,q", "Esc", "back", "back", "back to the page before", "q")
