"""Large campaigns on the real program in a real terminal: noise, bad lines, a walk through it all.

Each answers with its worst figure and what failed.
"""

from __future__ import annotations

import importlib
import os
import pkgutil
import random
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from itertools import product
from pathlib import Path
from typing import Final

from textual.keys import _character_to_key

from tests.screens.terminals import Terminal, environment_of
from workbench import screens
from workbench.case.files import read_case
from workbench.screens.keys import FIND, Command
from workbench.screens.page import Page

Found = tuple[float, list[str]]

CASES: Final = Path(__file__).parents[2] / "cases"


@contextmanager
def _copied_cases() -> Iterator[tuple[Path, Path]]:
    """A folder of cases and one for drafts, both to be thrown away."""
    with tempfile.TemporaryDirectory() as kept:
        folder, state = Path(kept) / "cases", Path(kept) / "state"
        shutil.copytree(CASES, folder)
        yield folder, state


def _processor_seconds(number: int) -> float:
    """What a process has used of a processor."""
    status = Path(f"/proc/{number}/stat").read_text(encoding="utf-8", errors="replace")
    return sum(map(int, status.rpartition(")")[2].split()[11:13])) / os.sysconf("SC_CLK_TCK")


# --- noise ---------------------------------------------------------------------------------------

_WELL_SENT: Final = (
    *(b"\x1b[A", b"\x1b[B", b"\x1b[5~", b"\x1b[6~", b"\x1b[H", b"\x1b[F", b"\x1bOP", b"\x1b[15~"),
    *(b"\x1b[1;5A", b"\x1b[[A", b"\x1b[200~pasted 1.5\x1b[201~", b"\t", b"\r", b"\x1b", b"\x7f"),
)
_ILL_SENT: Final = (
    *(b"\xb5\xff\xfe", b"\xe2\x28\xa1", b"\xf0\x9f", b"\xed\xa0\x80", b"\x1b[999;999X"),
    *(b"\x1b[99999999;2u", b"\x1b[1:2;3:4;5u", b"\x1b]0;a title\x07", b"\x1bP1$r0m\x1b\\"),
    *(b"\x1b[<0;10;10M", b"\x1b[M !!", b"\x1b[?2026;9$y", b"\x1b[" + b"1" * 40, b"\x00" * 8),
    *(b"\x1b[200~", b"\x1b[201~", b"\x9b5n", b"\x1b[200~\xff\x00\x1b[2J\n\n1e400\x1b[201~"),
)


def _noise(dice: random.Random, length: int) -> bytes:
    """Keys, pasted junk and bytes that are no text."""
    made = b""
    while len(made) < length:
        kind = dice.random()
        if kind < 0.5:
            made += bytes(dice.choice(range(0x20, 0x7F)) for _ in range(dice.randint(1, 8)))
        elif kind < 0.75:
            made += dice.choice(_WELL_SENT)
        elif kind < 0.9:
            made += dice.choice(_ILL_SENT)
        else:
            made += dice.randbytes(dice.randint(1, 12))
    return made[:length]


def line_noise(size: int, seed: int) -> Found:
    """So many kilobytes, from three seeds where there are many; the longest wait for an answer."""
    worst, failures = 0.0, []
    seeds = [seed, seed + 1, seed + 2] if size >= 100 else [seed]
    for each in seeds:
        with _copied_cases() as (folder, state):
            waited, told = _made_noise(size * 1000 // len(seeds), each, folder, state)
            worst = max(worst, waited)
            failures += [f"seed {each}: {words}" for words in told]
            for path in sorted(folder.glob("*.toml")):
                try:
                    read_case(path)
                except Exception as fault:  # noqa: BLE001 - whatever it is, the file is spoilt
                    failures.append(f"seed {each}: {path.name}: {fault}")
    return worst, failures


def _made_noise(length: int, seed: int, folder: Path, state: Path) -> Found:
    """One line of noise; the program is started again where keys left it."""
    dice, worst, sent = random.Random(seed), 0.0, 0
    failures: list[str] = []
    terminal: Terminal | None = None
    while sent < length and not failures:
        if terminal is None:
            terminal = Terminal(".", environment=environment_of(state), folder=folder)
            terminal.settle(0.3)
        chunk = _noise(dice, min(200, length - sent))
        sent += len(chunk)
        try:
            terminal.press(chunk)
            worst = max(worst, _answered(terminal, wide=81 + sent % 7))
        except (AssertionError, OSError) as fault:
            failures.append(f"after {sent} bytes: {fault}")
        if b"Traceback" in terminal.sent or b"fault of the program" in terminal.sent:
            failures.append(
                f"after {sent} bytes:\n{terminal.sent[-3000:].decode(errors='replace')}"
            )
        terminal.sent = b""
        if terminal.process.poll() is not None:
            if terminal.process.returncode != 0:
                failures.append(f"after {sent} bytes: status {terminal.process.returncode}")
            terminal.close()
            terminal = None
    if terminal is not None:
        terminal.close()
    return worst, failures


def _answered(terminal: Terminal, wide: int) -> float:
    """How long the program takes to draw for another width, unless it ends [s]."""
    started = time.monotonic()
    terminal.read(0.02)
    if terminal.process.poll() is None:
        terminal.resize(wide, 24)
    while terminal.process.poll() is None and not terminal.read(0.02):
        if " T " in Path(f"/proc/{terminal.process.pid}/stat").read_text(encoding="utf-8")[:40]:
            # ctrl+z was among the keys; the shell that is not there would say `fg`.
            terminal.process.send_signal(signal.SIGCONT)
        assert time.monotonic() - started < 30.0, "it does not answer any more"
    return time.monotonic() - started


# --- lines that go away, stall, or change their size ---------------------------------------------


def _changed(terminal: Terminal) -> None:
    """A setting is changed, so that there is a draft to keep."""
    terminal.wait_for("Gain margin")
    terminal.press(b"2\x1b[B")
    terminal.settle(0.3)
    terminal.press(b"+")
    terminal.wait_for("not saved")
    terminal.settle(0.3)


def _ended(terminal: Terminal, expected: int) -> str:
    """What is wrong with how the program ended."""
    try:
        status = terminal.process.wait(15)
    except subprocess.TimeoutExpired:
        return "it did not end"
    return "" if status == expected else f"status {status}, not {expected}"


def _hung_up(terminal: Terminal) -> str:
    terminal.process.send_signal(signal.SIGHUP)
    return _ended(terminal, 129)


def _closed(terminal: Terminal) -> str:
    """The terminal goes, and no signal tells of it."""
    os.close(terminal.slave)
    os.close(terminal.master)
    return _ended(terminal, 129)


def _asked_to_end(terminal: Terminal) -> str:
    terminal.process.send_signal(signal.SIGTERM)
    fault = _ended(terminal, 143)
    terminal.read(0.2)
    restored = b"\x1b[?1049l" in terminal.sent and b"\x1b[?25h" in terminal.sent
    return fault or ("" if restored else "the terminal is not restored")


def _resized(seconds: float) -> Callable[[Terminal], str]:
    """Ten sizes a second, the last one that of the beginning."""

    def bad_line(terminal: Terminal) -> str:
        for count in range(int(10 * seconds)):
            terminal.resize(60 + count * 7 % 120, 15 + count * 5 % 45)
            terminal.read(0.1)
        terminal.resize(80, 24)
        terminal.settle(0.5)
        return _still_well(terminal)

    return bad_line


def _stalled(seconds: float) -> Callable[[Terminal], str]:
    """Nobody reads for a time, while keys are pressed."""

    def bad_line(terminal: Terminal) -> str:
        terminal.press(b"+-" * 40)
        time.sleep(seconds)
        terminal.settle(0.5, longest=60.0)
        return _still_well(terminal)

    return bad_line


def _still_well(terminal: Terminal) -> str:
    """What is wrong with a program that should be as it was: whole, and at rest."""
    if terminal.process.poll() is not None:
        return f"ended with status {terminal.process.returncode}"
    if "Gain margin" not in terminal.text() or "leave" not in terminal.screen.display[-1]:
        return f"not drawn again:\n{terminal.text()}"
    before = _processor_seconds(terminal.process.pid)
    if terminal.read(1.0):
        return "it goes on sending"
    if _processor_seconds(terminal.process.pid) - before > 0.1:
        return "it goes on computing"
    return _hung_up(terminal)


def bad_lines(size: int, seed: int) -> Found:
    """Every way in which a line fails, by turns; the long ones last as long as there are turns."""
    ways: dict[str, Callable[[Terminal], str]] = {
        "hung up": _hung_up,
        "closed without a signal": _closed,
        "asked to end": _asked_to_end,
        "ten sizes a second": _resized(min(20.0, 0.5 * size)),
        "nobody reads": _stalled(min(60.0, 0.5 * size)),
    }
    failures = []
    for name, way in list(ways.items())[-min(size, len(ways)) :]:
        with _copied_cases() as (folder, state):
            terminal = Terminal("TIC-307.toml", environment=environment_of(state), folder=folder)
            try:
                _changed(terminal)
                fault = way(terminal)
                kept = list((state / "workbench" / "drafts").glob("TIC-307-*.json"))
                fault = fault or ("" if kept else "the draft is lost")
            except AssertionError as found:
                fault = str(found)
            finally:
                terminal.close()
            failures += [f"{name}: {fault}"] if fault else []
    if size >= len(ways):
        failures += _suspended()
    return float(len(failures)), failures


def _suspended() -> list[str]:
    """ctrl+z and fg in tmux: the shell is there, then the whole page again."""
    if shutil.which("tmux") is None:
        return []
    with _copied_cases() as (folder, state):
        words = ["tmux", "-L", f"workbench-{os.getpid()}", "-f", "/dev/null"]

        def tmux(*more: str) -> str:
            done = subprocess.run([*words, *more], capture_output=True, text=True, check=False)
            return done.stdout

        def shows(text: str) -> bool:
            end = time.monotonic() + 20.0
            while text not in tmux("capture-pane", "-p"):
                if time.monotonic() > end:
                    return False
                time.sleep(0.05)
            return True

        def keys(*more: str) -> None:
            tmux("send-keys", *more)

        settings = [f"{name}={value}" for name, value in environment_of(state).items()]
        shell = ["env", *settings, "PS1=at-the-shell ", "bash", "--norc", "-i"]
        tmux("new-session", "-d", "-x", "80", "-y", "24", "-c", str(folder), *shell)
        try:
            keys(f"clear; {sys.executable} -m workbench TIC-307.toml", "Enter")
            fine = shows("Gain margin")
            keys("C-z")
            fine = fine and shows("Stopped")
            keys("clear; fg", "Enter")
            fine = fine and shows("Gain margin") and shows("leave")
            return [] if fine else [f"ctrl+z and fg:\n{tmux('capture-pane', '-p')}"]
        finally:
            tmux("kill-server")


# --- a walk through every page and action --------------------------------------------------------

SIZES: Final = ((80, 24), (100, 30), (160, 50))
MODES: Final = (
    {"COLORTERM": "truecolor"},
    {"TERM": "xterm"},
    {"NO_COLOR": "1"},
    {"LANG": "C", "TERM": "vt100"},
)
"""Full colour, sixteen colours, none, ASCII only."""

_NAMED: Final = {
    **{_character_to_key(chr(code)): chr(code).encode() for code in range(0x20, 0x7F)},
    **{f"ctrl+{chr(code + 0x60)}": bytes([code]) for code in range(1, 27)},
    "enter": b"\r",
    "escape": b"\x1b",
    "tab": b"\t",
    "backspace": b"\x7f",
    "up": b"\x1b[A",
    "down": b"\x1b[B",
    "right": b"\x1b[C",
    "left": b"\x1b[D",
    "pageup": b"\x1b[5~",
    "pagedown": b"\x1b[6~",
    "home": b"\x1b[H",
    "end": b"\x1b[F",
    "shift+tab": b"\x1b[Z",
    "delete": b"\x1b[3~",
    "f1": b"\x1bOP",
    "f2": b"\x1bOQ",
    "f3": b"\x1bOR",
    "f4": b"\x1bOS",
    "f5": b"\x1b[15~",
    "f6": b"\x1b[17~",
    "f7": b"\x1b[18~",
    "f8": b"\x1b[19~",
    "f9": b"\x1b[20~",
    "f10": b"\x1b[21~",
}
"""Textual's name of a key -> what a terminal sends."""

_LAST: Final = ("back", "leave")
"""Actions that end a visit."""


def pages() -> list[type[Page]]:
    """Every page of the program."""
    for module in pkgutil.iter_modules(screens.__path__):
        importlib.import_module(f"{screens.__name__}.{module.name}")
    found: list[type[Page]] = []
    waiting = [Page]
    while waiting:
        kind = waiting.pop()
        waiting += kind.__subclasses__()
        found += [kind] if kind.commands else []
    return sorted(found, key=lambda each: each.__name__)


def _key_words(commands: tuple[Command, ...]) -> str:
    """The key line, with one space between everything."""
    return " ".join(f"{each.shown} {each.words}" for each in commands if each.words)


class _Walk:
    """Presses what no page has been asked to do yet."""

    def __init__(self, terminal: Terminal, ascii_only: bool) -> None:
        self.terminal, self.ascii_only = terminal, ascii_only
        self.left = {kind: _in_turn(kind) for kind in pages()}
        self.faults: list[str] = []
        self.last = "the first page"

    def page(self) -> type[Page] | None:
        """The page that is shown, told by its key line."""
        shown = " ".join(self.terminal.screen.display[-1].split())
        for kind in self.left:
            if shown in _lines_of(kind):
                return kind
        return None

    def step(self) -> bool:
        """One key; whether there was anything left to press."""
        kind = self.page()
        if kind is None:
            self.terminal.settle(0.5)
            if self.page() is None and self.terminal.process.poll() is None:
                shown = self.terminal.text()
                self.faults.append(f"{self.last}: no whole key line at the foot\n{shown}")
                self._press(b"\x1b", "Esc")
            return True
        commands = self.left[kind]
        if not commands:
            self._press(b"\x1b", "Esc")
            return any(self.left.values())
        command = commands.pop(0)
        name = command.keys.split(",")[0]
        self._press(_NAMED[name], f"{kind.__name__}: {command.shown}")
        if self.page() is kind and command.action in ("edit", "enter", "chosen"):
            self._press(b"\x1b", "Esc")
        return True

    def _press(self, keys: bytes, words: str) -> None:
        self.last = words
        self.terminal.press(keys)
        self.terminal.settle(0.5 if keys == b"\x1b" else 0.2)
        sent, self.terminal.sent = self.terminal.sent, b""
        shown = self.terminal.text()
        if b"Traceback" in sent or "Traceback" in shown or "fault of the program" in shown:
            self.faults.append(f"{words}: a traceback\n{shown}")
        if self.ascii_only and sent and max(sent) > 0x7E:
            self.faults.append(f"{words}: a byte above 0x7e\n{shown}")


def _lines_of(kind: type[Page]) -> set[str]:
    """Every key line that a page may show: what is spare is left off where there is no room."""
    found = set()
    for line in kind.key_lines or (kind.commands,):
        for whole in (line, (*line, FIND)):
            short = tuple(each for each in whole if not each.spare)
            found |= {" ".join(_key_words(each).split()) for each in (whole, short)}
    return found


def _in_turn(kind: type[Page]) -> list[Command]:
    """What a page can do, what leaves it last."""
    known = [each for each in kind.commands if each.keys.split(",")[0] in _NAMED]
    return sorted(known, key=lambda each: each.action in _LAST)


def walks(size: int, seed: int) -> Found:
    """So many keys through every page, shared among every size and kind of terminal."""
    failures = []
    ways = list(product(SIZES, MODES))
    for columns_rows, mode in ways[: max(1, min(size // 20, len(ways)))]:
        steps = size // max(1, min(size // 20, len(ways)))
        with _copied_cases() as (folder, state):
            where = environment_of(state, **mode)
            terminal = Terminal(".", environment=where, folder=folder, size=columns_rows)
            try:
                walk = _Walk(terminal, ascii_only=mode.get("LANG") == "C")
                terminal.settle(0.5)
                for _ in range(steps):
                    if terminal.process.poll() is not None or not walk.step():
                        break
                failures += [f"{columns_rows} {mode}: {fault}" for fault in walk.faults]
                if terminal.process.poll() not in (None, 0):
                    failures.append(f"{columns_rows} {mode}: ended {terminal.process.returncode}")
            except AssertionError as fault:
                failures.append(f"{columns_rows} {mode}: {fault}")
            finally:
                terminal.close()
    return float(len(failures)), failures
