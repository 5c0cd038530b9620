"""What a cell says: a number, no value, or how good the value beside it is.

The decimal sign and the sign between thousands are told apart over the whole file, and a number
that can be read both ways is a question, never a guess.
"""

from __future__ import annotations

import math
import re
from collections.abc import Iterator, Sequence
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import Problem, RecordError, RecordQuestion
from workbench.records.table import Table, no_value, quoted, refused
from workbench.units import Note, one_of

Floats = NDArray[np.float64]

NUMBER = re.compile(r"[-+]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][-+]?[0-9]{1,3})?")
"""A number as this program writes it."""

DECIMALS: Final = {"point": ".", "comma": ","}
"""Word of the option -> the decimal sign."""

_FAST: Final = frozenset("0123456789+-.eE \n")
"""Characters of columns that need no second look: whatever of them `float` takes is a number."""

_GAPS: Final = " '\u2019\u00a0\u202f"
"""Signs between thousands that are never decimal signs."""

_GROUPED: Final = {
    sign: re.compile(
        rf"[-+]?[0-9]{{1,3}}(?:([{re.escape(_GAPS + other)}])[0-9]{{3}})(?:\1[0-9]{{3}})*"
        rf"(?:{re.escape(sign)}[0-9]*)?"
    )
    for sign, other in ((".", ","), (",", "."))
}
"""Decimal sign -> a number with signs between its thousands."""

_ONE_GROUP: Final = {
    sign: re.compile(rf"[-+]?[1-9][0-9]{{0,2}}{re.escape(sign)}[0-9]{{3}}") for sign in ".,"
}
"""Sign -> a number that reads as thousands and as one with three decimals."""


class Numbers:
    """How the numbers of one file are written.

    Raises `RecordQuestion` where the decimal sign cannot be told, `RecordError` for a decimal sign
    that is not known.
    """

    def __init__(self, table: Table, roles: Sequence[str], decimal: str | None) -> None:
        self.table = table
        self.notes: list[Note] = []
        self._shown_in: int | None = None
        if decimal is not None and decimal not in DECIMALS:
            what = f"{quoted(decimal)} is not a decimal sign"
            raise RecordError(Problem(what, f"use {one_of(list(DECIMALS))}", key="--decimal"))
        self.sign = DECIMALS[decimal] if decimal else self._sign_of(roles)

    def column(self, role: str, rows: NDArray[np.bool_] | None = None) -> Floats:
        """The numbers of a column (n,); nan where the export says that there is no value.

        With `rows`, the other rows are not looked at and are nan.
        """
        values = np.full(len(self.table.lines), math.nan)
        for first, chunk in self.table.chunks(role):
            cells = chunk.split("\n")
            last = first + len(cells)
            chosen = None if rows is None else rows[first:last]
            if chosen is not None and not chosen.all():
                cells = [c if wanted else "" for c, wanted in zip(cells, chosen, strict=True)]
            values[first:last] = self._fast(chunk, cells) or [
                self._number(cell.strip(), first + i, role) for i, cell in enumerate(cells)
            ]
        return values

    def _fast(self, chunk: str, cells: list[str]) -> list[float]:
        """The numbers of plain cells, or nothing where a cell needs a second look."""
        if not _FAST.issuperset(chunk) and not (
            self.sign == "," and "." not in chunk and _FAST.issuperset(chunk.replace(",", "."))
        ):
            return []
        if self.sign == ",":
            if "." in chunk:
                return []
            cells = [cell.replace(",", ".") for cell in cells]
        try:
            values = [float(cell) if cell else math.nan for cell in cells]
        except ValueError:
            return []
        return [] if math.inf in values or -math.inf in values else values

    def _number(self, cell: str, row: int, role: str) -> float:
        heading = self.table.layout.headings[self.table.layout.columns[role]]
        if no_value(cell) or cell == heading:
            return math.nan
        return self.number(cell, self.table.lines[row], role)

    def number(self, cell: str, line: int, role: str) -> float:
        """The number in a cell.  Raises `RecordError` for words, or another decimal sign."""
        plain = self._plain(cell)
        if plain is None:
            other = "." if self.sign == "," else ","
            if self._shown_in is not None and _decimal_sign(cell) == other:
                what = f"{quoted(cell)} and line {self._shown_in} differ in the decimal sign"
                raise refused(
                    self.table.path, line, what, "use the comma or the point throughout the file"
                )
            what = (
                f"{quoted(cell)} is not a number, in the column {quoted(self.table.heading(role))}"
            )
            mend = "correct it, or leave the cell blank and the row is left out"
            raise refused(self.table.path, line, what, mend)
        value = float(plain)
        if not math.isfinite(value):
            what = f"{quoted(cell)} is too large"
            raise refused(self.table.path, line, what, "correct the number")
        return value

    def is_number(self, cell: str) -> bool:
        """Whether a cell is a number as this file writes them."""
        return self._plain(cell) is not None

    def _plain(self, cell: str) -> str | None:
        if _GROUPED[self.sign].fullmatch(cell):
            cell = re.sub(rf"[{_GAPS}{',' if self.sign == '.' else '.'}]", "", cell)
        elif self.sign == "," and "." in cell:
            return None
        plain = cell.replace(",", ".") if self.sign == "," else cell
        return plain if NUMBER.fullmatch(plain) else None

    # -- which sign --

    def _sign_of(self, roles: Sequence[str]) -> str:
        """The decimal sign that the file itself shows."""
        doubtful: tuple[int, str] | None = None
        for role in roles:
            for row, cell in self._marked(role):
                sign = _decimal_sign(cell)
                if sign == "either" and "." in cell and self.table.separator == ",":
                    sign = "."  # nobody writes points between thousands and commas between columns
                if sign in (".", ","):
                    self._shown_in = self.table.lines[row]
                    return sign
                if sign == "either" and doubtful is None:
                    doubtful = row, cell
        if doubtful is None:
            return "."
        row, cell = doubtful
        plain = re.sub(f"[{_GAPS}]", "", cell)
        sign, other = (",", ".") if "," in plain else (".", ",")
        as_decimal, as_whole = plain.replace(sign, "."), plain.replace(sign, "")
        words = {v: k for k, v in DECIMALS.items()}
        raise RecordQuestion(
            Problem(
                f"{quoted(cell)} can be {as_decimal} or {as_whole}",
                f"say --decimal {words[sign]} for {as_decimal}, --decimal {words[other]} for"
                f" {as_whole}",
                path=self.table.path,
                line=self.table.lines[row],
            ),
            option="--decimal",
            readings=((words[sign], as_decimal), (words[other], as_whole)),
        )

    def _marked(self, role: str) -> Iterator[tuple[int, str]]:
        """The numbers of a column that hold a point or a comma, and their rows."""
        for first, chunk in self.table.chunks(role):
            if "," not in chunk and "." not in chunk:
                continue
            for i, cell in enumerate(chunk.split("\n")):
                if "," in cell or "." in cell:
                    yield first + i, cell.strip()


def _decimal_sign(cell: str) -> str:
    """The decimal sign that a cell shows: a point, a comma, `either`, or nothing."""
    plain = re.sub(f"[{_GAPS}]", "", cell)
    if not re.fullmatch(r"[-+]?[0-9.,]*[0-9][0-9.,]*(?:[eE][-+]?[0-9]{1,3})?", plain):
        return ""
    points, commas = plain.count("."), plain.count(",")
    if points and commas:
        return max(".,", key=plain.rindex)
    sign, count, other = (".", points, ",") if points else (",", commas, ".")
    if count > 1:
        return other
    if count == 0:
        return ""
    return "either" if _ONE_GROUP[sign].fullmatch(plain) and plain == cell else sign


# --- quality -------------------------------------------------------------------------------------

_GOOD: Final = frozenset({"", "good", "ok", "g", "true", "valid", "normal", "good, non-specific"})
_UNCERTAIN: Final = frozenset({"uncertain", "u", "questionable", "q", "substituted", "doubtful"})
_BAD: Final = frozenset({"bad", "b", "false", "invalid", "poor", "error", "fail", "failed"})
"""Words of quality columns, in small letters; beside them all that says `no value` is bad."""


def quality_of(table: Table, role: str) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    """Which rows a quality column calls bad, and which uncertain, (n,) each.

    Numbers are the quality byte of OPC: its two highest bits are 3 for good (192 and above), 1 for
    uncertain (64), 0 for bad (OPC Data Access 2.05, section on quality flags; from memory).

    Raises `RecordError` for a word that is not known, and for a column of nothing but 0 and 1,
    which is no such byte.
    """
    known: dict[str, int] = {}
    grades = np.empty(len(table.lines), dtype=np.int8)
    for i, cell in enumerate(table.cells(role)):
        grade = known.get(cell)
        if grade is None:
            grade = known[cell] = _grade(cell.strip(), table, role, i)
        grades[i] = grade
    if known and {word.strip() for word in known} <= {"0", "1"}:
        what = f"the column {quoted(table.heading(role))} holds only 0 and 1"
        mend = "say --quality none, or write 192 for good and 0 for bad"
        raise refused(table.path, table.lines[0], what, mend)
    return grades == 0, grades == 1


def _grade(word: str, table: Table, role: str, row: int) -> int:
    """3 for good, 1 for uncertain, 0 for bad."""
    small = word.lower()
    number = re.fullmatch(r"([0-9]{1,5})(?:\.0*)?", word)
    if number:
        # The upper byte, where there is one, is the vendor's own.
        return {3: 3, 1: 1}.get((int(number[1]) & 0xC0) >> 6, 0)
    for grade, words in ((3, _GOOD), (1, _UNCERTAIN), (0, _BAD)):
        if small in words:
            return grade
    if no_value(small):
        return 0
    what = f"the quality {quoted(word)} is not understood"
    mend = "use good, uncertain and bad, or 192, 64 and 0, or say --quality none"
    raise refused(table.path, table.lines[row], what, mend)
