"""Text to the terminal and nowhere else: answers, the one line of a fault, the progress of work."""

from __future__ import annotations

import contextlib
import os
import shutil
import sys
import threading
import time
from collections.abc import Callable, Iterator
from typing import Final, TextIO

from workbench.errors import problem
from workbench.units import harmless


def width() -> int:
    """Columns for text: the terminal's, or 80 where the output is not a terminal."""
    if sys.stdout is None or not sys.stdout.isatty():
        return 80
    return max(40, shutil.get_terminal_size().columns)


def say(text: str) -> None:
    """Text on standard output; a reader that has gone away ends it quietly."""
    out = sys.stdout
    if out is None:
        raise problem("is closed", "run the command with its output open", key="standard output")
    if not text.endswith("\n"):
        text += "\n"
    encoding = out.encoding or "ascii"
    try:
        out.write(text.encode(encoding, "replace").decode(encoding))
        out.flush()
    except BrokenPipeError:
        silence(out)
    except OSError as fault:
        silence(out)
        raise problem(
            f"cannot be written ({fault.strerror})",
            "make room or send it elsewhere",
            key="standard output",
        ) from None


def complain(line: str) -> None:
    """One line on standard error, harmless to a terminal whatever a file or an option held."""
    narrate(f"workbench: {harmless(line, 2000)}")


def narrate(text: str) -> None:
    """Text on standard error, about work that goes on."""
    err = sys.stderr
    if err is None:
        return
    try:
        err.write(f"{text}\n")
        err.flush()
    except OSError:
        silence(err)


def silence(stream: TextIO) -> None:
    """Send what is still buffered nowhere, so that the interpreter's last flush says nothing."""
    with contextlib.suppress(OSError, ValueError):
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, stream.fileno())
        os.close(nowhere)


@contextlib.contextmanager
def progress(doing: str, total: int = 0) -> Iterator[Callable[[int], None]]:
    """Seconds gone by, on standard error, when that is a terminal and the work is long.

    What it yields is told how much of `total` is done.
    """
    reached = 0

    def tell(done: int) -> None:
        nonlocal reached
        reached = done

    err = sys.stderr
    if err is None or not err.isatty():
        yield tell
        return
    done = threading.Event()
    shown = ""

    def show() -> None:
        nonlocal shown
        started = time.monotonic()
        while not done.wait(PROGRESS_EVERY_S):
            of = f" {reached} of {total}" if total else ""
            shown = f"{doing}{of}, {time.monotonic() - started:.0f} s (ctrl+c stops it)"
            err.write(f"\r{shown}")
            err.flush()

    clock = threading.Thread(target=show, daemon=True)
    clock.start()
    try:
        yield tell
    finally:
        done.set()
        clock.join()
        err.write(f"\r{' ' * len(shown)}\r" if shown else "")
        err.flush()


PROGRESS_EVERY_S: Final = 1.0
"""Work that is done sooner shows no progress."""
