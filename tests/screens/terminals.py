"""The real program behind a pseudo-terminal, for tests, campaigns and benchmarks."""

from __future__ import annotations

import fcntl
import os
import pty
import select
import signal
import struct
import subprocess
import sys
import termios
import time
from pathlib import Path

import pyte

PROGRAM = """
import sys
from workbench.screens.app import run
sys.exit(run(sys.argv[1], ascii="--ascii" in sys.argv))
"""


class Terminal:
    """The program behind a pseudo-terminal; `folder` is its present one."""

    def __init__(
        self,
        *arguments: str,
        environment: dict[str, str],
        stdin: int | None = None,
        size: tuple[int, int] = (80, 24),
        folder: Path | None = None,
    ):
        self.master, slave = pty.openpty()
        self.slave = slave
        self.screen = pyte.Screen(*size)
        self._sized(*size)
        self.before = termios.tcgetattr(slave)
        self.process = subprocess.Popen(
            [sys.executable, "-c", PROGRAM, *arguments],
            stdin=slave if stdin is None else stdin,
            stdout=slave,
            stderr=slave,
            env=environment,
            start_new_session=True,
            cwd=folder,
        )
        self.sent = b""
        self.stream = pyte.ByteStream(self.screen)

    def resize(self, columns: int, rows: int) -> None:
        """Give the terminal another size."""
        self.screen.resize(rows, columns)
        self._sized(columns, rows)
        # As the system does for a terminal that a person sits at.
        self.process.send_signal(signal.SIGWINCH)

    def _sized(self, columns: int, rows: int) -> None:
        fcntl.ioctl(self.slave, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))

    def settle(self, quiet: float, longest: float = 30.0) -> float:
        """Read until nothing has come for a time; how long it took, without that time [s]."""
        started = last = time.monotonic()
        while time.monotonic() - last < quiet:
            assert time.monotonic() - started < longest, f"never quiet:\n{self.text()}"
            if self.read(quiet / 4):
                last = time.monotonic()
        return last - started

    def read(self, seconds: float) -> bytes:
        """What the program sends within a time."""
        got, end = b"", time.monotonic() + seconds
        while (left := end - time.monotonic()) > 0:
            if select.select([self.master], [], [], left)[0]:
                try:
                    got += os.read(self.master, 65536)
                except OSError:
                    break
        self.sent += got
        # pyte takes the private mode queries for text; they are answered by silence here.
        self.stream.feed(got.replace(b"\x1b[?2026$p", b"").replace(b"\x1b[?2048$p", b""))
        return got

    def wait_for(self, words: str) -> None:
        """Read until the screen shows the words."""
        end = time.monotonic() + 30
        while words not in self.text():
            assert time.monotonic() < end, f"{words!r} never came:\n{self.text()}"
            assert self.process.poll() is None, f"ended:\n{self.text()}"
            self.read(0.05)

    def press(self, keys: bytes) -> None:
        """Send keys."""
        os.write(self.master, keys)

    def text(self) -> str:
        """The screen."""
        return "\n".join(self.screen.display)

    def close(self) -> None:
        """End the program if it is still there."""
        if self.process.poll() is None:
            self.process.kill()
        self.process.wait(10)
        for descriptor in (self.master, self.slave):
            try:
                os.close(descriptor)
            except OSError:
                continue


def environment_of(state: Path | None = None, **more: str) -> dict[str, str]:
    """What the program finds set: little of ours, drafts in a folder of their own."""
    package = str(Path(__file__).parents[2])
    plain = {"TERM": "xterm-256color", "LANG": "C.UTF-8", "PYTHONPATH": package}
    keep = ("PATH", "HOME", "XDG_STATE_HOME")
    inherited = {name: os.environ[name] for name in keep if name in os.environ}
    own = {} if state is None else {"XDG_STATE_HOME": str(state)}
    return {**inherited, **plain, **own, **more}
