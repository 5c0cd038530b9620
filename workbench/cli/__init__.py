"""The headless commands: the same engine as the screen, for scripts and checks.

The only room that prints or ends the program.  It reads the command line, asks `study`, has
`report` put the answer into words or JSON, and turns every fault into one line and an exit status.
Everything heavy is imported inside the command that needs it, so that `--help` is instant.
"""

from __future__ import annotations

import contextlib
import gc
import json
import os
import signal
import sys
import textwrap
import threading
import warnings
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from types import FrameType
from typing import Final

from workbench import __version__
from workbench.cli import files, loops, records
from workbench.cli.answer import Answer, Status, told_about
from workbench.cli.options import Given, Grammar, Option, option_lines
from workbench.cli.output import complain, say, width
from workbench.cli.table import COMMANDS, SCREEN
from workbench.errors import InputError, WorkbenchError, problem
from workbench.units import harmless, nearest, one_of

# --- help -----------------------------------------------------------------------------------------


def _help(grammar: Grammar, width: int) -> str:
    """The help of one command, or of the program."""
    if grammar.command:
        return "\n".join(grammar.help((), width))
    commands = [Option(word, "", one.does) for word, one in COMMANDS.items()]
    more = ["", "Commands (workbench COMMAND --help tells more):", *option_lines(commands, width)]
    return "\n".join([*grammar.help(more, width), "", *textwrap.wrap(_STATUSES, width)])


def _versions() -> str:
    """The program and the packages that its numbers and its screen come from."""
    import importlib.metadata

    found = [f"workbench {__version__}", f"Python {sys.version.split()[0]}"]
    for package in ("textual", "numpy", "scipy"):
        try:
            found.append(f"{package} {importlib.metadata.version(package)}")
        except importlib.metadata.PackageNotFoundError:
            found.append(f"{package} is not installed")
    return "\n".join(found)


# --- the screen -----------------------------------------------------------------------------------


def _screen(given: Given) -> int:
    """The screen, where there is a terminal for it."""
    for stream, name in ((sys.stdin, "standard input"), (sys.stdout, "standard output")):
        if stream is None or not stream.isatty():
            raise _no_screen(f"the screen needs a terminal, and {name} is not one")
    if os.environ.get("TERM") == "dumb":
        raise _no_screen("the screen cannot be drawn where TERM is dumb")
    # Nothing that a start makes is garbage; the screen collects again once it is drawn.
    gc.disable()
    from workbench.screens import app

    return app.run(
        given.file or None,
        ascii="--ascii" in given,
        no_colour="--no-colour" in given,
        mouse="--mouse" in given,
    )


def _no_screen(what: str) -> InputError:
    commands = one_of(list(COMMANDS))
    mend = f"in a script use {commands} (`workbench --help` tells of each)"
    return problem(what, mend, key="screen")


# --- the program ----------------------------------------------------------------------------------


class _Ended(BaseException):
    """A request to end: a dropped line or a signal; not a fault, so nothing else may catch it."""

    def __init__(self, number: int) -> None:
        super().__init__(number)
        self.status = 128 + number


@contextlib.contextmanager
def _endable() -> Iterator[None]:
    """Within it, a dropped line or a request to end unwinds, so that nothing is half written."""

    def end(number: int, frame: FrameType | None) -> None:
        raise _Ended(number)

    changed = []
    if threading.current_thread() is threading.main_thread():
        for number in (signal.SIGHUP, signal.SIGTERM):
            # What was told to be ignored (as `nohup` does) stays ignored.
            if signal.getsignal(number) is signal.SIG_DFL:
                signal.signal(number, end)
                changed.append(number)
    try:
        yield
    finally:
        for number in changed:
            signal.signal(number, signal.SIG_DFL)


def _command(words: Sequence[str]) -> tuple[Grammar, Sequence[str]]:
    """What the words name: a command, or the screen where they name none."""
    first = words[0] if words else ""
    if first in COMMANDS:
        return COMMANDS[first], words[1:]
    if first and not first.startswith("-") and not os.path.lexists(first):
        meant = nearest(first, list(COMMANDS))
        hint = f"did you mean `workbench {meant}`? " if meant else ""
        what = "there is no such file or folder"
        if not first.endswith(".toml") and os.sep not in first:
            what = "there is no such command, and no case file or folder of that name"
        raise problem(
            what, f"{hint}`workbench --help` lists the commands", key=harmless(first, 100)
        )
    return SCREEN, words


def _run(words: Sequence[str]) -> int:
    """Read the words, do the work, print the answer; the exit status."""
    grammar, rest = _command(words)
    given = grammar.read(rest)
    if given.wants_help:
        say(_help(grammar, width()))
        return Status.DONE
    if grammar is SCREEN:
        if "--version" in given:
            say(_versions())
            return Status.DONE
        return _screen(given)
    with _endable(), told_about(given):
        answer = VERBS[grammar.command](given)
        if "--json" in given:
            say(json.dumps(answer.data, indent=2, allow_nan=False))
        else:
            say(answer.text)
        return answer.status


def _line(fault: WorkbenchError, words: Sequence[str]) -> str:
    """A fault as `WHERE: what; mend`."""
    if isinstance(fault, InputError) and fault.problems[0].where:
        return str(fault)
    return f"{words[0] if words else 'screen'}: {fault}"


def _defect(fault: Exception) -> str:
    """A fault of the program itself, with the place, and no traceback."""
    import traceback

    last = traceback.extract_tb(fault.__traceback__)[-1]
    return (
        f"{Path(last.filename).name}:{last.lineno}: {type(fault).__name__}: {fault};"
        " this is a fault of the program: please report this line and the command"
    )


def main(argv: Sequence[str] | None = None) -> int:
    """Do what the command line says and return the exit status.

    Parameters
    ----------
    argv
        The words after `workbench`; the program's own when left out.
    """
    if argv is None:
        # Standard error carries our one line and nothing else.
        warnings.simplefilter("ignore")
    words = sys.argv[1:] if argv is None else list(argv)
    asked: list[int] = []
    headless = argv is None and bool(words) and words[0] in COMMANDS  # the screen has its own way
    if headless and signal.getsignal(signal.SIGINT) is signal.default_int_handler:
        signal.signal(signal.SIGINT, lambda number, frame: _interrupt(asked, number, frame))
    status = _status(words, asked)
    if asked:
        # An import that was cut short can make Python end by the signal instead of our status.
        os._exit(Status.INTERRUPTED)
    return status


def _interrupt(asked: list[int], number: int, frame: FrameType | None) -> None:
    """Note that ctrl+c was pressed: compiled code may turn the exception into another one."""
    asked.append(number)
    signal.default_int_handler(number, frame)


def _status(words: Sequence[str], asked: Sequence[int]) -> int:
    """Do the work and tell its faults; what goes wrong after ctrl+c is no fault."""
    try:
        return int(_run(words))
    except KeyboardInterrupt:
        return Status.INTERRUPTED
    except _Ended as ended:
        return ended.status
    except WorkbenchError as fault:
        complain(_line(fault, words))
    except OSError as fault:
        where = harmless(str(fault.filename or (words[0] if words else "screen")))
        complain(f"{where}: {fault.strerror or fault}; check the name and the permissions")
    except MemoryError:
        mend = "give a shorter time, a longer scan, or a smaller file"
        complain(f"{words[0]}: needs more memory than there is; {mend}")
    except Exception as fault:  # noqa: BLE001
        if asked:
            return Status.INTERRUPTED
        complain(_defect(fault))
    return Status.FAULT


# --- what there is --------------------------------------------------------------------------------

_STATUSES: Final = (
    "Exit status: 0 done; 1 done, and the answer is no; 2 it could not be done (one line on"
    " standard error says why); 130, 129, 143 stopped."
)

VERBS: Final[dict[str, Callable[[Given], Answer]]] = {
    "assess": loops.assess,
    "predict": loops.predict,
    "respond": loops.respond,
    "fit": records.fit,
    "plan": records.plan,
    "diagnose": records.diagnose,
    "recognise": records.recognise,
    "observe": records.observe,
    "propose": loops.propose,
    "convert": loops.convert,
    "check": files.check,
    "history": files.history,
    "survey": files.survey,
    "sheet": files.sheet,
    "new": files.new,
}
"""Command -> the function that does it."""
