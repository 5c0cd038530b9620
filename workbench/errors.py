"""What can go wrong, in words an engineer can act on.

WorkbenchError                 anything we can tell the engineer in one line
├── InputError                 what was typed or read cannot be used; carries `problems`
│   ├── ModelError             a plant or controller outside what the mathematics takes
│   ├── CaseFileError          a case file: every problem with its key and line
│   └── RecordError            a plant record: where in the file, what, how to mend it
│       └── RecordQuestion     it can be read in two ways: which option tells them apart
├── NotApplicable              a rule or method outside its stated limits
└── CannotSolve                the computation gave no answer; carries the best it found

Raise only when there is no answer; a doubtful answer is returned with a note beside it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace


@dataclass(frozen=True)
class Problem:
    """One thing wrong, where it is, and what would mend it."""

    what: str
    """What is wrong, with the value found."""
    mend: str
    """What is accepted, or what to do."""
    key: str = ""
    """The dotted key of the case file (`controller.gain`) or the option (`--gain`)."""
    line: int | None = None
    """Line in the file, from 1."""
    path: str = ""
    """The file, as the engineer named it."""

    @property
    def where(self) -> str:
        """`file:line`, the file, the key or nothing, whichever is known first."""
        if self.path:
            return self.path if self.line is None else f"{self.path}:{self.line}"
        return self.key

    def __str__(self) -> str:
        where = self.where
        subject = f"{self.key}: " if self.key and self.key != where else ""
        text = f"{subject}{self.what}; {self.mend}" if self.mend else f"{subject}{self.what}"
        return f"{where}: {text}" if where else text


class WorkbenchError(Exception):
    """Anything that can be told to the engineer in one line."""


class InputError(WorkbenchError):
    """What was typed or read cannot be used."""

    all_listed_by = ""
    """What the engineer can run to see every problem, for the end of the line."""

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        self.problems: tuple[Problem, ...] = (
            (problems,) if isinstance(problems, Problem) else tuple(problems)
        )
        super().__init__(str(self))

    def __str__(self) -> str:
        first, others = self.problems[0], len(self.problems) - 1
        if not others:
            return str(first)
        return f"{first} (and {others} more{self.all_listed_by})"

    def at(self, *, key: str = "", path: str = "", line: int | None = None) -> InputError:
        """The same fault with the place filled in where it was not known yet."""
        return type(self)(
            replace(p, key=p.key or key, path=p.path or path, line=p.line if p.line else line)
            for p in self.problems
        )


class ModelError(InputError):
    """A plant or controller outside what the mathematics takes."""


class CaseFileError(InputError):
    """A case file that cannot be used: every problem with its key and line."""

    all_listed_by = "; `workbench check` lists them all"


class RecordError(InputError):
    """A plant record that cannot be used: where, what, and how to mend it."""


class RecordQuestion(RecordError):
    """A plant record that can be read in two ways: the engineer must say which."""

    def __init__(
        self,
        problems: Problem | Iterable[Problem],
        *,
        option: str = "",
        readings: tuple[tuple[str, str], ...] = (),
    ) -> None:
        self.option = option
        """The option that answers it, such as `--dates`."""
        self.readings = readings
        """Each answer, and what the file says if it is the right one."""
        super().__init__(problems)


class NotApplicable(WorkbenchError):
    """A rule or method outside its stated limits."""

    def __init__(self, what: str, *, limit: str = "", source: str = "") -> None:
        self.what, self.limit, self.source = what, limit, source
        super().__init__(f"{what} ({limit})" if limit else what)


class CannotSolve(WorkbenchError):
    """The computation gave no answer."""

    def __init__(self, what: str, *, change: str, best: object = None) -> None:
        self.what, self.change, self.best = what, change, best
        super().__init__(f"{what}; {change}")


def problem(what: str, mend: str, *, key: str = "") -> InputError:
    """An `InputError` with a single problem, ready to raise."""
    return InputError(Problem(what, mend, key))
