"""The screen through a real terminal: from a key to the last byte, a start, a line that is slow."""

from __future__ import annotations

import fcntl
import os
import pty
import select
import shutil
import statistics
import struct
import subprocess
import sys
import tempfile
import termios
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Final

from tests.screens.terminals import environment_of

CASE: Final = Path(__file__).resolve().parents[2] / "cases" / "TIC-307.toml"
SIZES: Final = ((80, 24), (160, 50))
EMPTY_APP: Final = ("-c", "from textual.app import App; App().run()")
SLOW_BYTES_PER_S: Final = 960.0
"""A line of 9,600 bit/s, ten bits to the byte."""


@contextmanager
def _running(size: tuple[int, int], *words: str) -> Iterator[tuple[subprocess.Popen[bytes], int]]:
    """A process in a terminal of a size, and our end of the line."""
    with tempfile.TemporaryDirectory() as state:
        ours, theirs = pty.openpty()
        fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", size[1], size[0], 0, 0))
        process = subprocess.Popen(
            [sys.executable, *words],
            stdin=theirs,
            stdout=theirs,
            stderr=theirs,
            env=environment_of(Path(state)),
            start_new_session=True,
        )
        os.close(theirs)
        try:
            yield process, ours
        finally:
            process.kill()
            process.wait()
            os.close(ours)


def _until_quiet(line: int, quiet: float) -> tuple[float, int]:
    """When the last byte came, and how many did."""
    last, count = time.perf_counter(), 0
    while select.select([line], [], [], quiet)[0]:
        count += len(os.read(line, 65536))
        last = time.perf_counter()
    return last, count


def started(words: Sequence[str], shown: Sequence[bytes]) -> float:
    """From the start of a process to when it has drawn something, or fallen silent [s]."""
    began = last = time.perf_counter()
    with _running((80, 24), *words) as (_, line):
        got = b""
        while not shown or not all(each in got for each in shown):
            if not select.select([line], [], [], 0.4 if len(got) > 2000 else 20.0)[0]:
                break
            got += os.read(line, 65536)
            last = time.perf_counter()
    return last - began


def screen_until(*shown: bytes) -> float:
    """The same of the workbench on a case."""
    return started(("-m", "workbench", str(CASE)), shown)


def empty_application() -> float:
    """The same of an application that shows nothing."""
    return started(EMPTY_APP, ())


def what_ifs(size: tuple[int, int], count: int = 40) -> list[str]:
    """Lines of the table: nudges of the gain one by one, fifty at once, and nothing at all."""
    with tempfile.TemporaryDirectory() as folder:
        case = shutil.copy(CASE, folder)
        with _running(size, "-m", "workbench", case) as (process, line):
            _until_quiet(line, 3.0)
            for keys in (b"2", b"\x1b[B", b"+", b"+"):
                _pressed(line, keys)
            pairs = [_pressed(line, b"+" if k % 4 < 2 else b"-") for k in range(count)]
            burst, _ = _pressed(line, b"+" * 50, 0.6)
            before = _used(process.pid)
            silent = _until_quiet(line, 3.0)[1]
            idle = (_used(process.pid) - before) / 3.0
    times = sorted(1e3 * took for took, _ in pairs)
    sent = sorted(count for _, count in pairs)
    late = statistics.median(times) / 1e3 + statistics.median(sent) / SLOW_BYTES_PER_S
    name = f"what-if at {size[0]}x{size[1]}, key to last byte"
    return [
        f"{name:40} {statistics.median(times):8.2f} ms (95 %: {times[int(0.95 * count)]:.2f})",
        f"  {'bytes sent for it, most':38} {sent[-1]:8}",
        f"  {'shown on a line of 9,600 bit/s':38} {late:8.2f} s",
        f"  {'fifty at once, key to last byte':38} {1e3 * burst:8.2f} ms",
        f"  {'bytes and processor share while idle':38} {silent:8} and {100 * idle:.2f} %",
    ]


def memory() -> str:
    """The line of the table about memory once a case is open."""
    with _running((160, 50), "-m", "workbench", str(CASE)) as (process, line):
        _until_quiet(line, 3.0)
        status = Path(f"/proc/{process.pid}/status").read_text(encoding="utf-8")
    held = next(row.split()[1] for row in status.splitlines() if row.startswith("VmRSS"))
    return f"{'memory with a case open':40} {int(held) / 1e3:8.2f} MB"


def _pressed(line: int, keys: bytes, quiet: float = 0.25) -> tuple[float, int]:
    """From the key to the last byte of what it leads to [s], and the bytes."""
    began = time.perf_counter()
    os.write(line, keys)
    last, count = _until_quiet(line, quiet)
    return last - began, count


def _used(number: int) -> float:
    """Seconds of a processor."""
    status = Path(f"/proc/{number}/stat").read_text(encoding="utf-8", errors="replace")
    return sum(map(int, status.rpartition(")")[2].split()[11:13])) / os.sysconf("SC_CLK_TCK")
