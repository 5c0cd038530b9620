"""Cells: only what changed is painted again, and nothing harmful reaches the terminal."""

from __future__ import annotations

from collections.abc import Iterable

import pytest
from textual import events
from textual.app import App, ComposeResult
from textual.geometry import Region

from tests.screens.conftest import run, text_of
from workbench.screens.cells import Cells, Line, plainer
from workbench.screens.entry import Entry


class Board(Cells):
    """Lines to be changed, and the regions that were asked to be painted."""

    def __init__(self) -> None:
        super().__init__()
        self.shown: list[Line] = [(("one two three", "plain"),), (("four", "title"),)]
        self.painted: list[Region] = []

    def lines(self, width: int, height: int) -> Iterable[Line]:
        """The lines."""
        return self.shown

    def refresh(self, *regions: Region, **options: bool) -> Board:
        """Take note of the regions."""
        self.painted.extend(regions)
        return super().refresh(*regions, **options)


class Bench(App[None]):
    """One widget."""

    def __init__(self, widget: Cells, ascii_only: bool = False) -> None:
        super().__init__(ansi_color=True)
        self.widget, self.ascii_only = widget, ascii_only

    def compose(self) -> ComposeResult:
        """The widget."""
        yield self.widget


def test_only_the_changed_stretch_is_painted() -> None:
    async def story() -> None:
        board = Board()
        async with Bench(board).run_test(size=(40, 4)) as pilot:
            await pilot.pause()
            board.painted.clear()
            board.redraw()
            assert board.painted == []
            board.shown = [(("one TWO three", "plain"),), (("four", "title"),)]
            board.redraw()
            assert board.painted == [Region(4, 0, 3, 1)]
            board.painted.clear()
            # A tone alone is a change too; far apart changes are two stretches.
            board.shown = [
                (("One TWO three", "plain"), (" " * 20 + "!", "plain")),
                (("four", "key"),),
            ]
            board.redraw()
            assert board.painted == [Region(0, 0, 1, 1), Region(33, 0, 1, 1), Region(0, 1, 4, 1)]
            await pilot.pause()
            assert text_of(pilot).startswith("One TWO three")

    run(story())


def test_control_wide_and_joining_characters_keep_their_columns() -> None:
    async def story() -> None:
        board = Board()
        board.shown = [(("a\x1b[31m\nb|", "plain"),), (("乾燥|e\u0301|", "plain"),)]
        async with Bench(board).run_test(size=(40, 4)) as pilot:
            await pilot.pause()
            first, second = text_of(pilot).split("\n")[:2]
            assert first == "a?[31m?b|"
            assert second == "乾燥|e|"
            assert [int(code) for code in board._shown.characters[1][:5]] == [
                ord("乾"),
                0,
                ord("燥"),
                0,
                ord("|"),
            ]

    run(story())


def test_in_ascii_mode_every_character_is_plain() -> None:
    async def story() -> None:
        board = Board()
        board.shown = [(("─│…° 5 µm é 乾燥", "plain"),)]
        async with Bench(board, ascii_only=True).run_test(size=(40, 4)) as pilot:
            await pilot.pause()
            assert text_of(pilot).split("\n")[0] == "-|~d 5 um ? ??"

    run(story())


@pytest.mark.parametrize("words", ["", "plain", "─┤⠒é乾\U0001f600"])
def test_plainer_text_has_nothing_above_0x7e(words: str) -> None:
    assert len(plainer(words)) == len(words)
    assert all(character <= "~" for character in plainer(words))


def typed(*keys: str, value: str = "", choices: tuple[str, ...] = ()) -> Entry:
    """An entry after some keys."""
    entry = Entry("gain:", value, choices, longest=20)

    async def story() -> None:
        async with Bench(entry).run_test(size=(30, 4)) as pilot:
            entry.focus()
            await pilot.press(*keys)

    run(story())
    return entry


def test_the_first_character_replaces_what_stood_there() -> None:
    assert typed("2", "full_stop", "5", value="1.1").value == "2.5"


def test_a_cursor_key_keeps_what_stood_there() -> None:
    assert typed("end", "5", value="1.1").value == "1.15"
    assert typed("home", "delete", "2", value="1.1").value == "2.1"
    assert typed("left", "backspace", value="1.1").value == "11"


def test_words_and_lines_are_cut_with_keys_that_every_terminal_has() -> None:
    assert typed("end", "ctrl+w", value="fan change").value == "fan "
    assert typed("ctrl+u", value="fan change").value == ""
    assert typed("home", "right", "ctrl+k", value="fan").value == "f"


def test_choices_go_round_with_the_arrows() -> None:
    choices = ("ideal", "series", "parallel")
    assert typed("down", value="ideal", choices=choices).value == "series"
    assert typed("up", value="ideal", choices=choices).value == "parallel"
    assert typed("down", value="", choices=choices).value == "ideal"


def test_an_entry_holds_no_more_than_it_may() -> None:
    entry = Entry("why:", longest=20)

    async def story() -> None:
        async with Bench(entry).run_test(size=(30, 4)) as pilot:
            entry.focus()
            entry.post_message(events.Paste("fan\x1b[31m change in the dryer\nsecond line"))
            await pilot.pause()

    run(story())
    assert entry.value == "fan[31m change in th"
