"""The terminal: what it can show, and what to do when it goes away.

Textual's own driver ends the program on one byte of line noise and spins for ever when the terminal
is gone.  The driver here is derived from a part of Textual that is not public: it is held to the
versions that `pyproject.toml` allows, and a test through a real terminal covers it.
"""

from __future__ import annotations

import codecs
import os
import re
import select
import signal
import threading
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import Final

from textual import events
from textual._xterm_parser import XTermParser
from textual.drivers.linux_driver import LinuxDriver
from textual.keys import Keys

LINE_DROPPED: Final = 129
"""Exit status after a dropped line: 128 + SIGHUP."""

ASKED_TO_END: Final = 143
"""Exit status after a request to end: 128 + SIGTERM."""


@dataclass(frozen=True)
class Abilities:
    """What may be sent."""

    ascii_only: bool
    colour: bool


def abilities(environment: Mapping[str, str], *, ascii_only: bool, no_colour: bool) -> Abilities:
    """What the terminal can show, going by its name and the locale; options override."""
    name = environment.get("TERM", "")
    old = name.startswith(("linux", "vt", "ansi", "dumb"))
    locale = next(
        (environment[key] for key in ("LC_ALL", "LC_CTYPE", "LANG") if environment.get(key)), ""
    )
    utf8 = "utf8" in locale.lower().replace("-", "")
    colourless = name.startswith(("vt", "dumb"))
    return Abilities(
        ascii_only=ascii_only or old or not utf8,
        colour=not (no_colour or colourless or environment.get("NO_COLOR")),
    )


class Guard:
    """Ends the program well when its terminal goes away."""

    def __init__(self, save: Callable[[], None]) -> None:
        self._save = save

    def watch(self) -> None:
        """Install the handler of a dropped line, and a thread for when no signal comes."""
        signal.signal(signal.SIGHUP, lambda _number, _frame: self.line_dropped())
        threading.Thread(target=self._poll, name="terminal-watch", daemon=True).start()

    def line_dropped(self) -> None:
        """Keep the work and end at once: there is nobody left to write to."""
        self._save()
        os._exit(LINE_DROPPED)

    def _poll(self) -> None:
        """Works while the event loop is blocked by a line that takes nothing."""
        poll = select.poll()
        poll.register(0, 0)
        while True:
            if any(event & (select.POLLHUP | select.POLLERR) for _, event in poll.poll(1000)):
                self.line_dropped()


_UNKNOWN: Final = re.compile(r"\x1b\[(?!\[)[0-?]*[ -/]*(?![Mm]|(?<=\$)y)[@-~]")
"""A whole control sequence, but for a mouse report, a mode report and the console's "[[" keys."""

_STRINGS: Final = re.compile(r"\x1b[\]P_^X][^\x1b\x07]*(?:\x07|\x1b\\)")
"""What a terminal tells in words: its title, its colours."""


class TolerantParser(XTermParser):
    """Knows where a control sequence ends that is none of its own.

    Textual takes one for so many keys typed, and each of them for a command.
    """

    def _sequence_to_key_events(self, sequence: str, alt: bool = False) -> Iterable[events.Key]:
        try:
            keys = list(super()._sequence_to_key_events(sequence, alt=alt))
        except (ValueError, OverflowError):
            # A number that is no character.
            keys = [events.Key(Keys.Ignore, None)]
        if not keys and _UNKNOWN.fullmatch(sequence):
            return [events.Key(Keys.Ignore, None)]
        return keys


class TolerantDriver(LinuxDriver):
    """Reads what a bad line delivers, and ends when it delivers no more."""

    lost: Callable[[], None] | None = None
    """Called when the input has ended."""

    def run_input_thread(self) -> None:
        """Wait for input and pass it on; bytes that are no text become U+FFFD."""
        decode = codecs.getincrementaldecoder("utf-8")(errors="replace").decode
        parser = TolerantParser(self._debug)
        while not self.exit_event.is_set():
            ready, _, _ = select.select([self.fileno], [], [], 0.1)
            if ready:
                try:
                    data = os.read(self.fileno, 4096)
                except OSError:
                    data = b""
                if not data:
                    self._input_ended()
                    return
                words = _STRINGS.sub("", decode(data))
                # Half a character is no text yet, and no text would mean the end to the parser.
                for message in parser.feed(words) if words else ():
                    self.process_message(message)
            for message in parser.tick():
                self.process_message(message)

    def _input_ended(self) -> None:
        if self.exit_event.is_set() or self.lost is None:
            return
        self._restore_terminal()
        self.lost()

    def _restore_terminal(self) -> None:
        """As far as a terminal is still there that takes it at once."""
        try:
            if select.select([], [2], [], 0)[1]:
                os.write(2, b"\x1b[?2004l\x1b[?7h\x1b[?1049l\x1b[?25h\x1b[?1004l")
        except (OSError, ValueError):
            return
