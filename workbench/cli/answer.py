"""What every command is made of: its answer, the loop it works on, the file it may write."""

from __future__ import annotations

import contextlib
import enum
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Final

from workbench.cli.options import Given
from workbench.errors import InputError, Problem, problem
from workbench.units import harmless

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


def loop_of(given: Given, *, gain: str = "", needs_plant: bool = True) -> Case:
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
def told_about(given: Given) -> Iterator[None]:
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


def no_controller(given: Given, what_for: str) -> InputError:
    """The fault of a loop that has no controller yet."""
    if not given.file:
        return problem(
            f"is missing: {what_for} needs a controller",
            "give --gain or --proportional-band",
            key="--gain",
        )
    what = f"has no [controller] table, and {what_for} needs a controller"
    mend = "write one in the file, or give one with --set controller.gain=1"
    return InputError(Problem(what, mend, path=given.file))


def check_target(path: str) -> None:
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


def replace_file(path: str, text: str) -> None:
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


INLINE_TAG: Final = "LOOP"
"""The tag of a loop that was given by options."""
