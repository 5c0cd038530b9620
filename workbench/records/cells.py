"""What stands in the columns that matter: a CSV file becomes cells, each with its line.

The file's size, its encoding, the separator, the headings and the decimal sign are settled here;
what the cells of the time column mean is next door, in `stamps`.
"""

from __future__ import annotations

import csv
import io
import itertools
import math
import re
from array import array
from collections.abc import Iterator
from pathlib import Path
from typing import Final

from workbench.errors import Problem, RecordError
from workbench.units import Note, harmless, nearest

LARGEST_FILE: Final = 100 * 2**20
"""Bytes of the largest record that is read: a week of one-second rows is a quarter of it."""

MOST_COLUMNS: Final = 2000
LONGEST_CELL: Final = 200

COLUMN_NAMES: Final = {
    "time": ("time_s", "timestamp", "time"),
    "pv": ("pv",),
    "op": ("op",),
    "sp": ("sp",),
    "mode": ("mode",),
}
"""Role -> the headings under which it is found by itself, in any case of letters."""

_NEEDED: Final = ("time", "pv", "op")

_NO_VALUE = re.compile(
    r"[-?*]*|bad( input| quality)?|null|none|nan|#?n/?a|no ?(data|good|value|result)|missing|"
    r"(comm )?fail(ed|ure)?|(i/?o |scan )?time ?out|scan off|(not |dis)connected|"
    r"(over|under|out of) ?range|out of service|shutdown|(point|pt) created|uncertain|err(or)?|"
    r"[-+]?inf(inity)?|#(div/0|value|ref|null|num)!",
    re.IGNORECASE,
)
"""What exports write where there is no usable value."""

NUMBER = re.compile(r"[-+]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][-+]?[0-9]{1,3})?")
NUMBER_COMMA = re.compile(r"[-+]?(?:[0-9]+,[0-9]*|,[0-9]+)(?:[eE][-+]?[0-9]{1,3})?")
_UNIT_IN_HEADING = re.compile(r"\s*[\[(][^\])]*[\])]$")


def read_cells(raw: bytes, name: str, wanted: dict[str, str | None]) -> Cells:
    """The cells of the wanted columns.

    Parameters
    ----------
    raw
        The file's bytes.
    name
        The file, as messages call it.
    wanted
        Role (a key of `COLUMN_NAMES`) -> heading of its column, `None` to find it by itself.

    Raises
    ------
    RecordError
        One line: file and line, what is wrong, what would mend it.
    """
    content = _decoded(raw, name)
    separator = _separator(content)
    reader = csv.reader(io.StringIO(content, newline=""), delimiter=separator, strict=True)
    rows = _lines(reader, name)
    line, heading = next(rows, (1, []))
    if not any(cell.strip() for cell in heading):
        raise refused(name, None, "is empty", "give a heading row and rows of values below it")
    columns = _columns(heading, wanted, name, line)
    cells = Cells(name, separator, [h.strip() for h in heading], columns)
    for line, row in rows:
        cells.add(line, row)
    return cells


def refused(path: str, line: int | None, what: str, mend: str) -> RecordError:
    """The error that names a place in the file, ready to raise."""
    return RecordError(Problem(what, mend, path=path, line=line))


def read_bytes(path: Path, name: str) -> bytes:
    """The file's bytes.  Raises `RecordError` where there are none to be had, or too many."""
    try:
        if path.is_dir():
            raise refused(name, None, "is a folder", "name a CSV file in it")
        if path.exists() and not path.is_file():
            raise refused(name, None, "is not a file", "name a CSV file")
        with path.open("rb") as file:
            raw = file.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        raise refused(name, None, "is not there", "check the name and the folder") from None
    except (OSError, ValueError) as fault:
        reason = getattr(fault, "strerror", None) or "is not a usable file name"
        raise refused(name, None, f"cannot be read: {reason}", "check the file") from None
    if len(raw) > LARGEST_FILE:
        raise refused(
            name,
            None,
            f"is larger than {LARGEST_FILE // 2**20} MB",
            "export only the time of the test",
        )
    return raw


def _decoded(raw: bytes, name: str) -> str:
    encoding = "utf-8-sig"
    if raw.startswith((b"\xff\xfe", b"\xfe\xff")):
        encoding = "utf-16"
    elif b"\0" in raw:
        raise refused(name, None, "is not a text file", "export the record as CSV text")
    try:
        content = raw.decode(encoding)
    except UnicodeDecodeError:
        # Spreadsheets on older desktops write the degree sign in the Western 8-bit code page.
        content = raw.decode("latin-1")
    beginning = content[:4096]
    odd = sum(1 for c in beginning if (ord(c) < 32 and c not in "\t\r\n") or 127 <= ord(c) < 160)
    if odd > len(beginning) // 10:
        raise refused(name, None, "is not a text file", "export the record as CSV text")
    return content


def _separator(content: str) -> str:
    """The character that splits the first lines into the same number of cells, above one."""
    sample = list(itertools.islice((r for r in content[:65536].splitlines() if r.strip()), 20))
    best, agreed = ",", -1
    for candidate in ("\t", ";", ","):
        try:
            counts = [len(row) for row in csv.reader(sample, delimiter=candidate)]
        except csv.Error:
            continue
        if counts and counts[0] > 1:
            same = sum(1 for count in counts if count == counts[0])
            if same > agreed:
                best, agreed = candidate, same
    return best


def _lines(reader: Iterator[list[str]], name: str) -> Iterator[tuple[int, list[str]]]:
    """Each row that is not blank, with the line it starts on."""
    while True:
        line = getattr(reader, "line_num", 0) + 1
        try:
            row = next(reader)
        except StopIteration:
            return
        except csv.Error as fault:
            what = (
                "a cell is far too long" if "limit" in str(fault) else "a quotation mark is wrong"
            )
            raise refused(
                name, line, what, "close every quotation mark, or leave quotation marks out"
            ) from None
        if any(row):
            yield line, row


def _bare(heading: str) -> str:
    """A heading without its unit in brackets, for comparing: `PV [degC]` is `pv`."""
    return _UNIT_IN_HEADING.sub("", heading.strip()).lower()


def _columns(
    heading: list[str], wanted: dict[str, str | None], name: str, line: int
) -> dict[str, int]:
    """Role -> index of its column."""
    headings = [cell.strip() for cell in heading]
    if len(headings) > MOST_COLUMNS:
        what = f"has {len(headings)} columns, more than {MOST_COLUMNS}"
        raise refused(name, line, what, "export only the columns of one loop")
    if all(NUMBER.fullmatch(cell) for cell in headings if cell):
        what = "starts with numbers, not with headings"
        raise refused(name, line, what, "put a heading row first, like time_s,pv,op")
    found: dict[str, int] = {}
    for role, given in wanted.items():
        index = _find(headings, role, given, name, line)
        if index is not None:
            found[role] = index
    for role, other in itertools.combinations(found, 2):
        if found[role] == found[other]:
            what = f"the column {quoted(headings[found[role]])} is named as both {role} and {other}"
            raise refused(name, line, what, f"name two columns; {_listed(headings)}")
    return found


def _find(headings: list[str], role: str, given: str | None, name: str, line: int) -> int | None:
    names = (given.strip(),) if given is not None else COLUMN_NAMES[role]
    for alike in (str, str.lower, _bare):
        for known in names:
            matches = [i for i, heading in enumerate(headings) if alike(heading) == alike(known)]
            if len(matches) > 1:
                what = f"{len(matches)} columns are headed {quoted(known)}"
                raise refused(name, line, what, "give each column its own heading")
            if matches:
                return matches[0]
    if given is None and role not in _NEEDED:
        return None
    if given is None:
        what = f"has no column headed {' or '.join(names)}"
        raise refused(name, line, what, f"name it with --{role}; {_listed(headings)}")
    meant = nearest(given.lower(), [heading.lower() for heading in headings if heading])
    hint = next((h for h in headings if meant and h.lower() == meant), "")
    what = f"has no column headed {quoted(given)}"
    did = f"did you mean {quoted(hint)}? " if hint else ""
    raise refused(name, line, what, f"{did}{_listed(headings)}")


def quoted(raw: str) -> str:
    """Text from a file inside a message: in quotation marks, short and harmless."""
    return repr(harmless(raw, 40))


def _listed(headings: list[str]) -> str:
    shown = [harmless(heading, 30) for heading in headings if heading][:12]
    more = len([h for h in headings if h]) - len(shown)
    return f"its columns are {', '.join(shown)}" + (f" and {more} more" if more > 0 else "")


# --- cells ---------------------------------------------------------------------------------------


class Cells:
    """The cells that matter, row by row, with the line each row stood on."""

    def __init__(
        self, path: str, separator: str, headings: list[str], columns: dict[str, int]
    ) -> None:
        self.path, self.separator = path, separator
        self.headings, self.columns = headings, columns
        self.lines = array("l")
        self.time: list[str] = []
        self.values = {role: array("d") for role in ("pv", "op", "sp") if role in columns}
        self.mode: list[str] = []
        self.left_out: list[int] = []
        self.units_row = False
        self.notes: list[Note] = []
        self._signs: dict[str, int] = {}

    def heading(self, role: str) -> str:
        """Heading of the column of a role, as the file has it."""
        return self.headings[self.columns[role]]

    def add(self, line: int, row: list[str]) -> None:
        """Keep a row, or count it as left out where PV, OP or the stamp has no value."""
        if len(row) > len(self.headings) and any(c.strip() for c in row[len(self.headings) :]):
            what = f"has {len(row)} cells under {len(self.headings)} headings"
            mend = "with a decimal comma, put semicolons between the columns"
            raise refused(self.path, line, what, mend)
        cells = {
            role: row[index].strip() if index < len(row) else ""
            for role, index in self.columns.items()
        }
        if not self.time and not self.left_out and not self.units_row and _is_units_row(cells):
            self.units_row = True
            self.notes.append(Note("info", f"Line {line} is read as a row of units."))
            return
        values = {role: self._number(cells[role], line, role) for role in self.values}
        missing = any(math.isnan(values[role]) for role in ("pv", "op") if role in values)
        if missing or _no_value(cells["time"]):
            self.left_out.append(line)
            return
        self.lines.append(line)
        self.time.append(self._short(cells["time"], line, "time"))
        for role, kept in self.values.items():
            kept.append(values[role])
        if "mode" in self.columns:
            self.mode.append(harmless(self._short(cells["mode"], line, "mode")))

    def _short(self, cell: str, line: int, role: str) -> str:
        if len(cell) > LONGEST_CELL:
            what = f"the {role} cell has {len(cell)} characters"
            raise refused(self.path, line, what, f"at most {LONGEST_CELL} are accepted")
        return cell

    def _number(self, cell: str, line: int, role: str) -> float:
        """The number in a cell; not a number (nan) where the export says there is no value."""
        if _no_value(cell):
            return math.nan
        return self.number(cell, line, role)

    def number(self, cell: str, line: int, role: str) -> float:
        """The number in a cell.  Raises `RecordError` for words, or a decimal sign in doubt."""
        sign = ""
        if NUMBER.fullmatch(cell):
            sign = "." if "." in cell else ""
        elif self.separator != "," and NUMBER_COMMA.fullmatch(cell):
            sign, cell = ",", cell.replace(",", ".")
        else:
            what = f"{quoted(cell)} is not a number, in the column {quoted(self.heading(role))}"
            raise refused(self.path, line, what, self._number_mend(cell))
        if sign and self._signs.setdefault(sign, line) == line and len(self._signs) > 1:
            what = f"{quoted(cell)} and line {min(self._signs.values())} differ in the decimal sign"
            raise refused(self.path, line, what, "use the comma or the point throughout the file")
        value = float(cell)
        if not math.isfinite(value):
            raise refused(self.path, line, f"{quoted(cell)} is too large", "correct the number")
        return value

    def _number_mend(self, cell: str) -> str:
        if re.fullmatch(r"[-+]?[0-9]{1,3}(?:[,.' ][0-9]{3})+(?:[.,][0-9]+)?", cell):
            return "leave thousands separators out"
        if "," in cell and self.separator == ",":
            return "with a decimal comma, put semicolons between the columns"
        return "correct it, or leave the cell blank and the row is left out"


def _no_value(cell: str) -> bool:
    return not cell or (not cell[-1].isdigit() and _NO_VALUE.fullmatch(cell) is not None)


def _is_units_row(cells: dict[str, str]) -> bool:
    """A first row of words only, such as `s, degC, %`."""

    def is_word(cell: str) -> bool:
        return cell in ("", "-") or (cell[0] not in "0123456789+-.," and not _no_value(cell))

    needed = [cells[role] for role in _NEEDED if role in cells]
    return all(map(is_word, needed)) and any(needed)
