"""The headless commands: the same engine as the screen, for scripts and checks.

The only module that prints or ends the program.  It reads the command line, asks `study`, has
`report` put the answer into words or JSON, and turns every fault into one line and an exit status.
Everything heavy is imported inside the command that needs it, so that `--help` is instant.
"""

from __future__ import annotations

import contextlib
import enum
import json
import os
import shutil
import signal
import sys
import textwrap
import threading
import time
import warnings
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Final, TextIO

from workbench import __version__, report
from workbench.errors import InputError, Problem, WorkbenchError, problem
from workbench.options import COMMANDS, SCREEN, Given, Grammar, Option, option_lines
from workbench.units import (
    GAIN_RATE_UNITS,
    INTEGRAL_UNITS,
    TIME_UNITS,
    Note,
    harmless,
    nearest,
    one_of,
)

if TYPE_CHECKING:
    from workbench.case.case import Case


class Status(enum.IntEnum):
    """What a script may rely on; 128 + the signal where a signal ended the work."""

    DONE = 0
    NO = 1
    """Done, and the answer is no: the answer is printed with its reasons."""
    FAULT = 2
    """It could not be done: nothing on standard output, one line on standard error."""
    INTERRUPTED = 130


@dataclass(frozen=True)
class Answer:
    """What a command found: for people, for scripts, and whether the answer is no."""

    text: str
    data: Mapping[str, object]
    status: Status = Status.DONE


# --- the loop of a command ------------------------------------------------------------------------


def _loop(given: Given, *, gain: str = "", needs_plant: bool = True) -> Case:
    """The case that the command works on: a file with changes, or the inline options.

    `gain` stands in where inline options tell of a controller and leave its gain open.
    """
    from workbench.case.case import edit_all, new_case
    from workbench.case.files import read_case

    inline = given.inline
    if given.file:
        if inline:
            raise problem(
                f"is given beside the case file {harmless(given.file)}",
                "change a key of the file for this run with --set key=value",
                key=inline[0],
            )
        case = read_case(given.file).case
        changes = given.settings() | given.changes()
        return edit_all(case, changes) if changes else case
    if "--set" in given:
        raise problem(
            "is given without a CASE", "name a case file, or use the inline options", key="--set"
        )
    if needs_plant and "--plant" not in given:
        raise problem(
            "is missing" if inline else "neither a CASE nor --plant is given",
            'name a case file, or give a plant like --plant "1.8 exp(-6 s)/(40 s + 1)"',
            key="--plant" if inline else given.command,
        )
    return edit_all(new_case(INLINE_TAG), given.changes(gain=gain))


@contextlib.contextmanager
def _told_about(given: Given) -> Iterator[None]:
    """A fault about a key of the case is told about what was typed for it, or about the file."""
    try:
        yield
    except InputError as fault:
        told = []
        for found in fault.problems:
            if found.path or found.key.startswith("-"):
                told.append(found)
            elif typed := given.typed_for(found.key):
                told.append(replace(found, key=typed))
            else:
                told.append(replace(found, path=given.file))
        raise type(fault)(told) from None


# --- the commands ---------------------------------------------------------------------------------


def _assess(given: Given) -> Answer:
    """Gain, final values, stability and margins."""
    from workbench import study

    case = _loop(given)
    found = study.assess(case)
    found = replace(found, notes=study.cautions(case, found))
    small = None
    if "--small-models" in given:
        with _progress("reducing the plant"):
            small = study.reductions(case)
    return Answer(
        report.assess_text(case, found, study.units_of(case), _width(), small),
        report.assess_data(case, found, study.units_of(case), small),
        Status.DONE if report.is_stable(found) else Status.NO,
    )


def _predict(given: Given) -> Answer:
    """The closed loop, run through its scenario."""
    from workbench import study

    seed = (given.whole("--seed", 0, 2**31 - 1) or [0])[0]
    trend_file = given.word("--trend")
    if trend_file is not None:
        _check_target(trend_file)
    case = _loop(given)
    if case.controller is None:
        raise _no_controller(given, "a prediction")
    with _progress("predicting"):
        evaluation = study.evaluate(case, seed)
        # Where there is no prediction, asking for it says why.
        prediction = evaluation.prediction or study.predict(case, seed)
    if trend_file is not None:
        _replace_file(trend_file, report.trend_csv(prediction.trend))
    units = study.units_of(case)
    return Answer(
        report.predict_text(evaluation, prediction, units, trend_file, _width()),
        report.predict_data(evaluation, prediction, units),
        Status.DONE if report.is_stable(evaluation.assessment) else Status.NO,
    )


def _no_controller(given: Given, what_for: str) -> InputError:
    if not given.file:
        return problem(
            f"is missing: {what_for} needs a controller",
            "give --gain or --proportional-band",
            key="--gain",
        )
    what = f"has no [controller] table, and {what_for} needs a controller"
    mend = "write one in the file, or give one with --set controller.gain=1"
    return InputError(Problem(what, mend, path=given.file))


def _respond(given: Given) -> Answer:
    """The plant alone, from rest."""
    from workbench import study
    from workbench.model.response import INPUTS, Signal
    from workbench.records.record import read_record

    trend_file, record_file = given.word("--trend"), given.word("--record")
    if trend_file is not None:
        _check_target(trend_file)
    if record_file is not None:
        beside = next((name for name in _SIGNAL if name in given), "")
        if beside:
            raise problem("is given beside --record", "keep one of the two", key=beside)
    else:
        beside = next((name for name in ("--time", "--op") if name in given), "")
        if beside:
            raise problem("is given without --record", "name the record", key=beside)
    kind = given.choice("--input", tuple(INPUTS)) or "step"
    size, at = given.number("--size"), given.seconds("--at", or_zero=True) or 0.0
    width, period = given.seconds("--width"), given.seconds("--period")
    until = given.seconds("--until")
    case = _loop(given)
    plant = study.plant_of(case)
    with _progress("responding"):
        if record_file is not None:
            record = read_record(record_file, time=given.word("--time"), op=given.word("--op"))
            response, signal = study.respond_to_record(plant, record), None
        else:
            own = study.response_horizon(plant, Signal()) / 6.0
            signal = Signal(
                kind, 1.0 if size is None else size, at, width or own, period or 4.0 * own
            )
            response = study.respond(plant, signal, until or study.response_horizon(plant, signal))
    if trend_file is not None:
        _replace_file(trend_file, report.response_csv(response))
    units = study.units_of(case)
    return Answer(
        report.respond_text(case, response, signal, units, trend_file, _width()),
        report.respond_data(case, response, signal, units),
    )


_SIGNAL: Final = ("--input", "--size", "--at", "--width", "--period", "--until")
"""Options of an input that a record stands in for."""


def _fit(given: Given) -> Answer:
    """Plant models fitted to a test record."""
    from workbench import study

    noise = given.choice("--noise-model", ("auto", "white", "correlated"))
    shape = given.word("--shape")
    with _progress("fitting"):
        fit = study.fit_record(
            given.file,
            time=given.word("--time"),
            pv=given.word("--pv"),
            op=given.word("--op"),
            start=given.word("--from"),
            end=given.word("--to"),
            noise_model=noise or "auto",
            drift="--no-drift" not in given,
            shapes=FITTED if shape is None else (shape,),
        )
    return Answer(
        report.fit_text(fit, _width()),
        report.fit_data(fit),
        Status.NO if fit.chosen is None else Status.DONE,
    )


def _propose(given: Given) -> Answer:
    """The present settings and candidates, each judged on this loop."""
    from workbench import study

    limit = given.number("--max-sensitivity", above=1.0)
    swing = given.swing("--relay")
    wish = study.Wish(
        goal="setpoint" if given.choice("--for", ("load", "setpoint")) == "setpoint" else "load",
        closed_loop_time=given.seconds("--closed-loop-time"),
        max_sensitivity=study.Wish.max_sensitivity if limit is None else limit,
        method=given.word("--method"),
        largest_upset=given.number("--largest-upset", above=0.0),
        allowed_deviation=given.number("--allowed-deviation", above=0.0),
        relay=None if swing is None else study.RelayTest(*swing),
    )
    # What a controller is like, its gain left open, is enough to propose settings for it.
    case = _loop(given, gain="1")
    with _progress("judging the candidates"):
        proposals = study.propose(case, wish)
    if case.controller is not None and not given.file and not given.tells_gain:
        case, proposals = replace(case, controller=None), proposals[1:]
    # The present settings are an answer only where they were asked for.
    candidates = [
        row for row in proposals if (row.method == "present") is (wish.method == "present")
    ]
    done = any(row.within_limit if limit is not None else row.applies for row in candidates)
    chosen = study.action_of(case)[1]
    notes = [Note("info", chosen)] if chosen else []
    units = study.units_of(case)
    return Answer(
        report.propose_text(case, proposals, notes, units, _width()),
        report.propose_data(case, proposals, notes, units),
        Status.DONE if done else Status.NO,
    )


def _convert(given: Given) -> Answer:
    """The same controller in another form and other units."""
    from workbench import study
    from workbench.model.conversion import HELD_BY, Units

    form = given.choice("--to", tuple(HELD_BY))
    if form is None:
        raise problem("is missing", f"name the form wanted: {one_of(list(HELD_BY))}", key="--to")
    units = Units(
        given.choice("--gain-as", ("gain", "band")),
        given.choice("--integral-as", (*INTEGRAL_UNITS, *GAIN_RATE_UNITS)),
        given.choice("--derivative-as", tuple(TIME_UNITS)),
    )
    case = _loop(given, needs_plant=False)
    if case.controller is None:
        raise _no_controller(given, "a conversion")
    found = study.convert(case, form, units)
    return Answer(
        report.convert_text(case, found, _width()),
        report.convert_data(case, found, study.units_of(case)),
        Status.NO if found.controller is None else Status.DONE,
    )


def _check(given: Given) -> Answer:
    """Are these case files sound, and do their figures still come out."""
    from workbench import study

    files = _case_files(given.operands)
    with _progress("checking"):
        checks = [study.check_case(path) for path in files]
    return Answer(
        report.check_text(checks, _width()),
        report.check_data(checks),
        Status.DONE if all(check.ok for check in checks) else Status.NO,
    )


def _history(given: Given) -> Answer:
    """The tuning history, or what changed between two of its entries."""
    from workbench.case.files import read_case
    from workbench.study import units_of

    case = read_case(given.file).case
    units = units_of(case)
    if "--between" in given:
        count = len(case.history)
        if count < 2:
            raise InputError(
                Problem(
                    f"has {count or 'no'} history {'entry' if count == 1 else 'entries'}",
                    "two are needed for --between",
                    path=given.file,
                )
            )
        first, second = given.whole("--between", 1, count)
        return Answer(
            report.between_text(case, first, second, _width()),
            report.between_data(case, first, second, units),
        )
    return Answer(report.history_text(case, units, _width()), report.history_data(case, units))


def _new(given: Given) -> Answer:
    """A case file with the inline options in it."""
    from workbench.case.case import edit_all, new_case
    from workbench.case.files import file_name, write_new

    tag = given.operands[0]
    if tag.endswith(".toml") or tag.startswith("-"):
        what = "ends in .toml" if tag.endswith(".toml") else "would be taken for an option"
        mend = "give the tag alone, beginning with a letter or a digit"
        raise problem(f"{harmless(tag, 60)!r} {what}", mend, key="loop.tag")
    path = file_name(tag)
    changes = given.changes()
    write_new(path, edit_all(new_case(tag), changes) if changes else new_case(tag))
    return Answer(
        report.wrapped(f"{path} is written; `workbench {path}` opens it.", _width()),
        {"path": path, "tag": tag},
    )


def _case_files(paths: Iterable[str]) -> list[Path]:
    """The files named, and every case file below the folders named."""

    def stop(fault: OSError) -> None:
        raise fault

    files: dict[Path, None] = {}
    for path in paths:
        if os.path.isdir(path):
            below = sorted(
                Path(folder, name)
                for folder, _, names in os.walk(path, onerror=stop)
                for name in names
                if name.endswith(".toml")
            )
            if not below:
                raise InputError(
                    Problem("has no case file (*.toml) in or below it", "name another", path=path)
                )
            files |= dict.fromkeys(below)
        else:
            if not os.path.exists(path):
                raise InputError(
                    Problem("there is no such file or folder", "check the name", path=path)
                )
            files[Path(path)] = None
    return list(files)


# --- files ----------------------------------------------------------------------------------------


def _check_target(path: str) -> None:
    """A trend may replace an old trend, and nothing else."""
    fault = ""
    if os.path.isdir(path):
        fault = "is a folder"
    elif os.path.exists(path) and not os.path.isfile(path):
        fault = "is no plain file"
    elif path.endswith(".toml"):
        fault = "has the name of a case file"
    elif not os.path.isdir(os.path.dirname(path) or "."):
        fault = "is in a folder that is not there"
    if fault:
        raise problem(
            f"{harmless(path)} {fault}", "name the file to write, like trend.csv", key="--trend"
        )


def _replace_file(path: str, text: str) -> None:
    """Write `text` to `path` whole or not at all."""
    target = Path(os.path.realpath(path))
    part = target.with_name(f".{target.name[:200]}.{os.getpid()}.part")
    with contextlib.ExitStack() as unless_done:
        unless_done.callback(part.unlink, missing_ok=True)
        with part.open("x", encoding="utf-8", newline="") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        part.replace(target)
        unless_done.pop_all()


# --- output ---------------------------------------------------------------------------------------


def _width() -> int:
    """Columns for text: the terminal's, or 80 where the output is not a terminal."""
    if sys.stdout is None or not sys.stdout.isatty():
        return 80
    return max(40, shutil.get_terminal_size().columns)


def _say(text: str) -> None:
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
        _silence(out)
    except OSError as fault:
        _silence(out)
        raise problem(
            f"cannot be written ({fault.strerror})",
            "make room or send it elsewhere",
            key="standard output",
        ) from None


def _complain(line: str) -> None:
    """One line on standard error, harmless to a terminal whatever a file or an option held."""
    err = sys.stderr
    if err is None:
        return
    try:
        err.write(f"workbench: {harmless(line, 2000)}\n")
        err.flush()
    except OSError:
        _silence(err)


def _silence(stream: TextIO) -> None:
    """Send what is still buffered nowhere, so that the interpreter's last flush says nothing."""
    with contextlib.suppress(OSError, ValueError):
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, stream.fileno())
        os.close(nowhere)


@contextlib.contextmanager
def _progress(doing: str) -> Iterator[None]:
    """Seconds gone by, on standard error, when that is a terminal and the work is long."""
    err = sys.stderr
    if err is None or not err.isatty():
        yield
        return
    done = threading.Event()
    shown = ""

    def show() -> None:
        nonlocal shown
        started = time.monotonic()
        while not done.wait(PROGRESS_EVERY_S):
            shown = f"{doing}, {time.monotonic() - started:.0f} s (ctrl+c stops it)"
            err.write(f"\r{shown}")
            err.flush()

    clock = threading.Thread(target=show, daemon=True)
    clock.start()
    try:
        yield
    finally:
        done.set()
        clock.join()
        err.write(f"\r{' ' * len(shown)}\r" if shown else "")
        err.flush()


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
        _say(_help(grammar, _width()))
        return Status.DONE
    if grammar is SCREEN:
        if "--version" in given:
            _say(_versions())
            return Status.DONE
        return _screen(given)
    with _endable(), _told_about(given):
        answer = VERBS[grammar.command](given)
        if "--json" in given:
            _say(json.dumps(answer.data, indent=2, allow_nan=False))
        else:
            _say(answer.text)
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
        _complain(_line(fault, words))
    except OSError as fault:
        where = harmless(str(fault.filename or (words[0] if words else "screen")))
        _complain(f"{where}: {fault.strerror or fault}; check the name and the permissions")
    except MemoryError:
        mend = "give a shorter time, a longer scan, or a smaller file"
        _complain(f"{words[0]}: needs more memory than there is; {mend}")
    except Exception as fault:  # noqa: BLE001
        if asked:
            return Status.INTERRUPTED
        _complain(_defect(fault))
    return Status.FAULT


# --- what there is --------------------------------------------------------------------------------

PROGRESS_EVERY_S: Final = 1.0
"""Work that is done sooner shows no progress."""

FITTED: Final = ("first-order", "integrating")
"""Shapes that are fitted where none is named."""

INLINE_TAG: Final = "LOOP"
"""The tag of a loop that was given by options."""

_STATUSES: Final = (
    "Exit status: 0 done; 1 done, and the answer is no; 2 it could not be done (one line on"
    " standard error says why); 130, 129, 143 stopped."
)

VERBS: Final[dict[str, Callable[[Given], Answer]]] = {
    "assess": _assess,
    "predict": _predict,
    "respond": _respond,
    "fit": _fit,
    "propose": _propose,
    "convert": _convert,
    "check": _check,
    "history": _history,
    "new": _new,
}
"""Command -> the function that does it."""
