"""The real program in a real terminal: what it sends, and how it ends."""

from __future__ import annotations

import os
import signal
import termios
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from tests.screens.terminals import Terminal, environment_of
from workbench.screens import drafts
from workbench.screens.terminal import Abilities, abilities

Start = Callable[..., Terminal]


@pytest.fixture
def start(folder: Path) -> Iterator[Start]:
    """Start the program in the folder of cases."""
    started: list[Terminal] = []

    def begin(*arguments: str, stdin: int | None = None, **environment: str) -> Terminal:
        whole = environment_of(None, **environment)
        started.append(Terminal(*arguments, environment=whole, stdin=stdin))
        return started[-1]

    yield begin
    for terminal in started:
        terminal.close()


def _nudged(terminal: Terminal) -> None:
    """Wait for the first answers, then change the gain."""
    terminal.wait_for("Gain margin")
    terminal.press(b"\x1b[B")
    terminal.wait_for(">gain")
    terminal.press(b"+")
    terminal.wait_for("*1.122")
    terminal.read(0.3)


def test_a_plain_terminal_gets_ascii_only_and_a_dropped_line_loses_nothing(start: Start) -> None:
    terminal = start("tic-307.toml", TERM="vt100", LANG="C", NO_COLOR="1")
    _nudged(terminal)
    assert max(terminal.sent) <= 0x7E
    for code in (b"\x1b[31m", b"\x1b[36m", b"38;5;", b"38;2;"):
        assert code not in terminal.sent
    assert b"?1003h" not in terminal.sent
    terminal.process.send_signal(signal.SIGHUP)
    assert terminal.process.wait(5) == 129
    kept = drafts.find(Path("tic-307.toml"))
    assert kept is not None
    assert kept.changes == {"controller.gain": "1.122"}


def test_a_terminal_that_goes_away_without_a_signal_ends_the_program(start: Start) -> None:
    terminal = start("tic-307.toml")
    _nudged(terminal)
    os.close(terminal.slave)
    os.close(terminal.master)
    assert terminal.process.wait(10) == 129
    assert drafts.find(Path("tic-307.toml")) is not None


def test_a_request_to_end_restores_the_terminal(start: Start) -> None:
    terminal = start("tic-307.toml")
    _nudged(terminal)
    terminal.process.send_signal(signal.SIGTERM)
    assert terminal.process.wait(10) == 143
    terminal.read(0.2)
    assert b"\x1b[?1049l" in terminal.sent
    assert b"\x1b[?25h" in terminal.sent
    assert termios.tcgetattr(terminal.slave) == terminal.before
    assert drafts.find(Path("tic-307.toml")) is not None
    assert b"Traceback" not in terminal.sent


def test_line_noise_and_junk_do_not_end_the_program(start: Start) -> None:
    terminal = start("tic-307.toml")
    terminal.wait_for("Gain margin")
    terminal.press(b"\xb5\xff\xfe\x80\xc3(\xe2\x28\xa1\x1b[999;999X\x1b]0;junk\x07")
    terminal.read(0.3)
    # Half a character and then nothing for a while.
    terminal.press(b"\xe2\x98")
    terminal.read(0.3)
    _nudged(terminal)
    terminal.press(b"\x03")
    terminal.wait_for("Not saved yet")
    terminal.press(b"d")
    assert terminal.process.wait(10) == 0


def test_the_end_of_input_ends_the_program(start: Start) -> None:
    reading, writing = os.pipe()
    terminal = start("tic-307.toml", stdin=reading)
    terminal.wait_for("Gain margin")
    os.close(writing)
    os.close(reading)
    assert terminal.process.wait(10) == 129


def test_idle_sends_nothing(start: Start) -> None:
    terminal = start("tic-307.toml")
    terminal.wait_for("Gain margin")
    terminal.read(0.5)
    assert terminal.read(1.0) == b""


UTF8 = {"TERM": "xterm-256color", "LANG": "en_GB.UTF-8"}


@pytest.mark.parametrize(
    ("environment", "expected"),
    [
        (UTF8, Abilities(ascii_only=False, colour=True)),
        ({**UTF8, "TERM": "screen-256color"}, Abilities(ascii_only=False, colour=True)),
        ({**UTF8, "TERM": "linux"}, Abilities(ascii_only=True, colour=True)),
        ({**UTF8, "TERM": "vt220"}, Abilities(ascii_only=True, colour=False)),
        ({**UTF8, "TERM": "dumb"}, Abilities(ascii_only=True, colour=False)),
        ({**UTF8, "LC_ALL": "C"}, Abilities(ascii_only=True, colour=True)),
        ({**UTF8, "LANG": "de_DE.iso88591"}, Abilities(ascii_only=True, colour=True)),
        ({**UTF8, "LC_CTYPE": "C.utf8", "LANG": "C"}, Abilities(ascii_only=False, colour=True)),
        ({**UTF8, "NO_COLOR": "1"}, Abilities(ascii_only=False, colour=False)),
        ({**UTF8, "NO_COLOR": ""}, Abilities(ascii_only=False, colour=True)),
        ({}, Abilities(ascii_only=True, colour=True)),
    ],
)
def test_what_a_terminal_can_show_is_found_from_its_name_and_the_locale(
    environment: dict[str, str], expected: Abilities
) -> None:
    assert abilities(environment, ascii_only=False, no_colour=False) == expected


def test_options_override_what_is_found() -> None:
    found = abilities(UTF8, ascii_only=True, no_colour=True)
    assert found == Abilities(ascii_only=True, colour=False)
