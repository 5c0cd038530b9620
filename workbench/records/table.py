"""Which text stands in which column: a CSV file becomes columns of text, each cell with its line.

The file's size, its encoding, the separator, the heading row and the columns that matter are
settled here.  What a cell means is next door: numbers and quality in `cells`, time in `stamps`.
"""

from __future__ import annotations

import csv
import hashlib
import io
import itertools
import os
import re
from array import array
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import BinaryIO, Final

from workbench.errors import Problem, RecordError
from workbench.units import Note, harmless, nearest

LARGEST_FILE: Final = 100 * 2**20
"""Bytes of the largest record that is read: a week of one-second rows is a quarter of it."""

MOST_COLUMNS: Final = 2000
LONGEST_CELL: Final = 200
_PREAMBLE: Final = 40
"""Rows within which the heading row is looked for: some exports begin with a few lines about it."""
_AT_ONCE: Final = 8192
"""Rows that are taken apart at once."""

COLUMN_NAMES: Final = {
    "time": ("time_s", "timestamp", "time", "datetime", "date time", "date and time", "date/time"),
    "pv": ("pv", "process variable", "process value"),
    "op": ("op", "output", "controller output"),
    "sp": ("sp", "setpoint", "set point"),
    "mode": ("mode",),
}
"""Role -> the headings under which it is found by itself, in any case of letters."""

_DATE: Final = ("date",)
_CLOCK_TIME: Final = ("time", "time of day")
_QUALITY: Final = ("quality", "status")
_TAG: Final = ("tag", "tag name", "tagname", "point", "point name", "signal", "item")
_VALUE: Final = ("value", "val", "reading")

_NEEDED: Final = ("time", "pv", "op")
_PLAIN_NUMBER = re.compile(r"[-+]?(?:[0-9]+[.,]?[0-9]*|[.,][0-9]+)(?:[eE][-+]?[0-9]{1,3})?")
_UNIT_IN_HEADING = re.compile(r"\s*[\[(][^\])]*[\])]$")

_NO_VALUE = re.compile(
    r"[-?*]*|bad( input| quality)?|null|none|nan|#?n/?a|no ?(data|good|value|result)|missing|"
    r"(comm )?fail(ed|ure)?|(i/?o |scan )?time ?out|scan off|(not |dis)connected|"
    r"(over|under|out of) ?range|out of service|shutdown|(point|pt) created|uncertain|err(or)?|"
    r"[-+]?inf(inity)?|#(div/0|value|ref|null|num)!",
    re.IGNORECASE,
)
"""What exports write where there is no usable value."""

Progress = Callable[[float], None]
"""Told now and then what share of the work is done, 0 to 1."""


def refused(path: str, line: int | None, what: str, mend: str) -> RecordError:
    """The error that names a place in the file, ready to raise."""
    return RecordError(Problem(what, mend, path=path, line=line))


def quoted(raw: str) -> str:
    """Text from a file inside a message: in quotation marks, short and harmless."""
    return repr(harmless(raw, 40))


def no_value(cell: str) -> bool:
    """Whether a cell says that there is no usable value."""
    return not cell or (not cell[-1].isdigit() and _NO_VALUE.fullmatch(cell) is not None)


@dataclass(frozen=True)
class Wanted:
    """The columns that the engineer names; what is `None` is found by itself."""

    time: str | None = None
    """Two columns, a date and a time of day, with a plus between their headings."""
    pv: str | None = None
    op: str | None = None
    sp: str | None = None
    mode: str | None = None
    quality: str | None = None
    """`none` leaves quality columns aside."""
    alone: bool = False
    """PV is the only column needed, and stands for OP too."""


class Table:
    """The columns that matter as text, row by row, with the line each row begins on.

    The cells of a column are kept as long strings, a cell a line, because a string for each cell
    would take ten times the memory.
    """

    def __init__(self, path: str, separator: str, layout: Layout, wanted: Wanted) -> None:
        self.path, self.separator, self.layout, self.wanted = path, separator, layout, wanted
        self.lines = array("l")
        self.notes: list[Note] = []
        self._chunks: dict[str, list[str]] = {role: [] for role in layout.columns}

    def __contains__(self, role: str) -> bool:
        return role in self._chunks

    def heading(self, role: str) -> str:
        """Heading of the column of a role, as the file has it."""
        return self.layout.headings[self.layout.columns[role]]

    def chunks(self, role: str) -> Iterator[tuple[int, str]]:
        """The cells of a column, several thousand at once, one a line; and the first one's row."""
        row = 0
        for chunk in self._chunks[role]:
            yield row, chunk
            row += chunk.count("\n") + 1

    def cells(self, role: str) -> Iterator[str]:
        """The cells of a column, from the first row."""
        for _, chunk in self.chunks(role):
            yield from chunk.split("\n")

    def add(self, lines: list[int], rows: list[list[str]]) -> None:
        """Keep what matters of these rows."""
        width = len(self.layout.headings)
        for line, row in zip(lines, rows, strict=True):
            if len(row) > width and any(cell.strip() for cell in row[width:]):
                what = f"has {len(row)} cells under {width} headings"
                mend = "with a decimal comma, put semicolons between the columns"
                raise refused(self.path, line, what, mend)
        for role, index in self.layout.columns.items():
            try:
                column = [row[index] for row in rows]
            except IndexError:
                column = [row[index] if index < len(row) else "" for row in rows]
            chunk = "\n".join(column)
            if chunk.count("\n") >= len(rows) or max(map(len, column)) > LONGEST_CELL:
                column = [self._short(c, n, role) for n, c in zip(lines, column, strict=True)]
                chunk = "\n".join(column)
            self._chunks[role].append(chunk)
        self.lines.extend(lines)

    def _short(self, cell: str, line: int, role: str) -> str:
        if len(cell) > LONGEST_CELL:
            what = f"the {role} cell has {len(cell)} characters"
            raise refused(self.path, line, what, f"at most {LONGEST_CELL} are accepted")
        return " ".join(cell.splitlines())


def read_table(
    path: str | os.PathLike[str],
    wanted: Wanted,
    *,
    progress: Progress | None = None,
    whole_lines: bool = False,
) -> tuple[Table, Identity]:
    """The columns that matter, and what file they came from.

    Parameters
    ----------
    path
        A CSV file: comma, semicolon or tab between the columns.
    wanted
        Columns that the engineer names.
    progress
        Told the share of the file that is read.
    whole_lines
        Whether a last line without an end is left aside, because it is still being written.

    Raises
    ------
    RecordError
        One line: file and line, what is wrong, what would mend it.
    """
    name = harmless(str(path))
    with _opened(Path(path), name) as file:
        identity = _identify(file, name, whole_lines)
        try:
            return _read(file, name, identity, "", wanted, progress), identity
        except UnicodeDecodeError:
            # Spreadsheets on older desktops write the degree sign in the Western 8-bit code page.
            return _read(file, name, identity, "latin-1", wanted, progress), identity


# --- the file ------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Identity:
    """Which bytes were read."""

    size: int
    """Bytes read, from the beginning."""
    sha256: str
    """Of the bytes read."""
    encoding: str
    lines: int
    """Line ends among them."""


def _opened(path: Path, name: str) -> BinaryIO:
    """The file, open.  Raises `RecordError` where there is none to be had."""
    try:
        if path.is_dir():
            raise refused(name, None, "is a folder", "name a CSV file in it")
        if path.exists() and not path.is_file():
            raise refused(name, None, "is not a file", "name a CSV file")
        return path.open("rb")
    except FileNotFoundError:
        raise refused(name, None, "is not there", "check the name and the folder") from None
    except (OSError, ValueError) as fault:
        raise _unreadable(fault, name) from None


def _unreadable(fault: Exception, name: str) -> RecordError:
    reason = getattr(fault, "strerror", None) or "is not a usable file name"
    return refused(name, None, f"cannot be read: {reason}", "check the file")


def _identify(file: BinaryIO, name: str, whole_lines: bool) -> Identity:
    """How many bytes are to be read, and what they are."""
    size, digest, whole = 0, hashlib.sha256(), (0, hashlib.sha256())
    zeros, lines = False, 0
    first = b""
    try:
        while block := file.read(2**20):
            first = first or block
            zeros = zeros or b"\0" in block
            lines += block.count(b"\n")
            end = _last_end(block, first[:2])
            if end:
                head = digest.copy()
                head.update(block[:end])
                whole = (size + end, head)
            digest.update(block)
            size += len(block)
            if size > LARGEST_FILE:
                what = f"is larger than {LARGEST_FILE // 2**20} MB"
                raise refused(name, None, what, "export only the time of the test")
    except OSError as fault:
        raise _unreadable(fault, name) from None
    encoding = "utf-16" if first.startswith((b"\xff\xfe", b"\xfe\xff")) else "utf-8-sig"
    if zeros and encoding != "utf-16":
        raise refused(name, None, "is not a text file", "export the record as CSV text")
    if whole_lines:
        return Identity(whole[0], whole[1].hexdigest(), encoding, lines)
    return Identity(size, digest.hexdigest(), encoding, lines)


def identify(path: str | os.PathLike[str], *, whole_lines: bool = False) -> Identity:
    """What would be read of a file as it stands now.  Raises `RecordError`."""
    name = harmless(str(path))
    with _opened(Path(path), name) as file:
        return _identify(file, name, whole_lines)


def begins_alike(path: str | os.PathLike[str], seen: Identity) -> bool:
    """Whether a file still begins with the bytes that were read before.  Raises `RecordError`."""
    name = harmless(str(path))
    with _opened(Path(path), name) as file:
        try:
            return hashlib.sha256(file.read(seen.size)).hexdigest() == seen.sha256
        except OSError as fault:
            raise _unreadable(fault, name) from None


def _last_end(block: bytes, mark: bytes) -> int:
    """Where the last whole line of a block ends; 0 where no line ends in it."""
    if mark not in (b"\xff\xfe", b"\xfe\xff"):
        return block.rfind(b"\n") + 1
    end = b"\n\0" if mark == b"\xff\xfe" else b"\0\n"
    at = block.rfind(end)
    while at % 2 and at > 0:
        at = block.rfind(end, 0, at + 1)
    return at + 2 if at >= 0 and at % 2 == 0 else 0


class _Head(io.RawIOBase):
    """The first bytes of a file, for a reader of text; tells how far it has come."""

    def __init__(self, file: BinaryIO, size: int, progress: Progress | None) -> None:
        super().__init__()
        self._file, self._size, self._left, self._progress = file, size, size, progress
        file.seek(0)

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: bytearray | memoryview) -> int:  # type: ignore[override]
        block = self._file.read(min(len(buffer), self._left))
        buffer[: len(block)] = block
        self._left -= len(block)
        if self._progress is not None and self._size:
            self._progress(1.0 - self._left / self._size)
        return len(block)


def _read(
    file: BinaryIO,
    name: str,
    identity: Identity,
    encoding: str,
    wanted: Wanted,
    progress: Progress | None,
) -> Table:
    raw = io.BufferedReader(_Head(file, identity.size, progress), 2**18)
    content = io.TextIOWrapper(raw, encoding or identity.encoding, newline="")
    try:
        start = list(itertools.islice(content, 2 * _PREAMBLE))
    except UnicodeDecodeError:
        if encoding or identity.encoding != "utf-16":
            raise
        raise refused(name, None, "is not a text file", "export it as UTF-8") from None
    _check_text("".join(start), name)
    separator = _separator(start)
    reader = csv.reader(itertools.chain(start, content), delimiter=separator, strict=True)
    rows = _rows(reader, name)
    lines, first = next(rows, ([], []))
    at, layout = _heading(lines, first, wanted, name)
    table = Table(name, separator, layout, wanted)
    if at:
        words = f"{at} {'line' if at == 1 else 'lines'} above the headings left out."
        table.notes.append(Note("info", words))
    at += 1
    while at < len(first) and _is_units_row(first[at], layout):
        table.notes.append(Note("info", f"Line {lines[at]} is read as a row of units."))
        at += 1
    if at < len(first):
        table.add(lines[at:], first[at:])
    for lines, chunk in rows:
        table.add(lines, chunk)
    return table


def _check_text(beginning: str, name: str) -> None:
    beginning = beginning[:4096]
    odd = sum(1 for c in beginning if (ord(c) < 32 and c not in "\t\r\n") or 127 <= ord(c) < 160)
    if odd > len(beginning) // 10:
        raise refused(name, None, "is not a text file", "export the record as CSV text")


def _separator(start: list[str]) -> str:
    """The character that splits most of the first lines into the same number of cells."""
    sample = [line for line in start if line.strip()]
    best, agreed = ",", 0
    # A decimal comma splits rows alike too, so it is looked at last and must agree on more lines.
    for candidate in ("\t", ";", ","):
        try:
            counts = Counter(len(row) for row in csv.reader(sample, delimiter=candidate))
        except csv.Error:
            continue
        alike = max((lines for width, lines in counts.items() if width > 1), default=0)
        if alike > agreed:
            best, agreed = candidate, alike
    return best


def _rows(reader: Iterator[list[str]], name: str) -> Iterator[tuple[list[int], list[list[str]]]]:
    """The rows that are not blank, many at once, and the line each begins on."""
    line = 1
    while True:
        lines: list[int] = []
        rows: list[list[str]] = []
        try:
            for row in itertools.islice(reader, _AT_ONCE):
                if any(row):
                    lines.append(line)
                    rows.append(row)
                line = reader.line_num + 1  # type: ignore[attr-defined]
        except csv.Error as fault:
            what = (
                "a cell is far too long" if "limit" in str(fault) else "a quotation mark is wrong"
            )
            mend = "close every quotation mark, or leave quotation marks out"
            raise refused(name, line, what, mend) from None
        if rows:
            yield lines, rows
        elif next(reader, None) is None:
            return


# --- which columns -------------------------------------------------------------------------------


@dataclass(frozen=True)
class Layout:
    """Where the columns stand."""

    headings: list[str]
    columns: dict[str, int]
    """Role -> index: time, pv, op and, where there, date, sp, mode, quality, quality of one role
    (`pv quality`); in a long export time, tag, value and perhaps quality."""

    @property
    def is_long(self) -> bool:
        """Whether each row holds one value of one tag."""
        return "tag" in self.columns


def _heading(
    lines: list[int], rows: list[list[str]], wanted: Wanted, name: str
) -> tuple[int, Layout]:
    """The first row in which every needed column is found, and where the columns stand."""
    faults: list[tuple[int, int, RecordError]] = []
    # How full each row of words is, fullest lowest, with what it lacks; a row of values is empty.
    for at, row in enumerate(rows[:_PREAMBLE]):
        cells = [cell.strip() for cell in row]
        if len(cells) > MOST_COLUMNS:
            what = f"has {len(cells)} columns, more than {MOST_COLUMNS}"
            raise refused(name, lines[at], what, "export only the columns of one loop")
        if any(cells) and all(_PLAIN_NUMBER.fullmatch(cell) for cell in cells if cell):
            if not at:
                what = "starts with numbers, not with headings"
                mend = "put a heading row first, like time_s,pv,op"
                raise refused(name, lines[at], what, mend)
            break
        try:
            return at, _layout(cells, wanted, name, lines[at])
        except RecordError as fault:
            values = any(_PLAIN_NUMBER.fullmatch(cell) for cell in cells)
            faults.append((0 if values and at else -sum(map(bool, cells)), at, fault))
    if not any(share for share, _, _ in faults):
        raise refused(name, None, "is empty", "give a heading row and rows of values below it")
    # The first row is the heading row, unless words about the export stand above a fuller one.
    first = faults[0]
    raise (first if first[1] == 0 and first[0] < -2 else min(faults[:5]))[2]


def _layout(headings: list[str], wanted: Wanted, name: str, line: int) -> Layout:
    tag, value = (_named(headings, names) for names in (_TAG, _VALUE))
    if tag is not None and value is not None:
        columns = {"tag": tag, "value": value}
        roles: tuple[str, ...] = ("time",)
    else:
        columns, roles = {}, ("time", "pv") if wanted.alone else tuple(COLUMN_NAMES)
    for role in roles:
        given = getattr(wanted, role)
        index = None
        if role == "time":
            pair = _date_and_time(headings, given, name, line)
            if pair is not None:
                columns["date"], index = pair
        if index is None:
            index = _find(headings, role, given, name, line)
        if index is not None:
            columns[role] = index
    for role, other in itertools.combinations(columns, 2):
        if columns[role] == columns[other]:
            what = (
                f"the column {quoted(headings[columns[role]])} is named as both {role} and {other}"
            )
            raise refused(name, line, what, f"name two columns; {_listed(headings)}")
    if wanted.alone and "pv" in columns:
        columns["op"] = columns["pv"]
    return Layout(headings, columns | _quality_columns(headings, columns, wanted, name, line))


def _date_and_time(
    headings: list[str], given: str | None, name: str, line: int
) -> tuple[int, int] | None:
    """The columns of date and of time of day, where time stands in two."""
    if given is not None:
        if "+" not in given or _named(headings, (given,)) is not None:
            return None
        first, _, second = given.partition("+")
        found = [_find(headings, "time", part, name, line) for part in (first, second)]
        return (found[0], found[1]) if found[0] is not None and found[1] is not None else None
    date, time = _named(headings, _DATE), _named(headings, _CLOCK_TIME)
    return None if date is None or time is None else (date, time)


def _quality_columns(
    headings: list[str], columns: dict[str, int], wanted: Wanted, name: str, line: int
) -> dict[str, int]:
    if wanted.quality == "none":
        return {}
    if wanted.quality is not None:
        index = _find(headings, "quality", wanted.quality, name, line)
        return {} if index is None else {"quality": index}
    found = {}
    whole = _named(headings, _QUALITY)
    if whole is not None and whole not in columns.values():
        found["quality"] = whole
    for role in ("pv", "op"):
        if role not in columns:
            continue
        owner = _bare(headings[columns[role]])
        words = [f"{o}{gap}{q}" for o in (owner, role) for gap in " _." for q in _QUALITY]
        index = _named(headings, tuple(words))
        if index is not None:
            found[f"{role} quality"] = index
    return found


def _named(headings: list[str], names: tuple[str, ...]) -> int | None:
    """The only column headed by one of the names, unit in brackets aside."""
    for known in names:
        matches = [i for i, heading in enumerate(headings) if _bare(heading) == _bare(known)]
        if len(matches) == 1:
            return matches[0]
    return None


def _find(headings: list[str], role: str, given: str | None, name: str, line: int) -> int | None:
    names = (given.strip(),) if given is not None else COLUMN_NAMES[role]
    likeness = (str, str.lower, _bare) if given is not None else (str, str.lower, _bare, _last)
    for alike in likeness:
        for known in names:
            matches = [i for i, heading in enumerate(headings) if alike(heading) == alike(known)]
            if len(matches) > 1:
                first, second = (quoted(headings[i]) for i in matches[:2])
                if alike is _last:
                    what = f"the columns {first} and {second} can both be {role}"
                else:
                    what = f"{len(matches)} columns are headed {first}"
                mend = f"name one with --{role}; {_listed(headings)}"
                if alike is str:
                    mend = "give each column its own heading"
                raise refused(name, line, what, mend)
            if matches:
                return matches[0]
    if given is None and role not in _NEEDED:
        return None
    if given is None:
        shown = " or ".join(names[:3] if role == "time" else names[:1])
        what = f"has no column headed {shown}"
        raise refused(name, line, what, f"name it with --{role}; {_listed(headings)}")
    meant = nearest(given.lower(), [heading.lower() for heading in headings if heading])
    hint = next((h for h in headings if meant and h.lower() == meant), "")
    what = f"has no column headed {quoted(given)}"
    did = f"did you mean {quoted(hint)}? " if hint else ""
    raise refused(name, line, what, f"{did}{_listed(headings)}")


def find_name(table: Table, names: list[str], role: str) -> str | None:
    """The tag of a role in a long export; `None` for a role that may be missing."""
    given = getattr(table.wanted, role)
    try:
        index = _find(names, role, given, table.path, table.lines[0])
    except RecordError as fault:
        if given is None and role not in _NEEDED:
            return None
        raise RecordError(
            replace(p, what=_of_tags(p.what), mend=_of_tags(p.mend), line=None)
            for p in fault.problems
        ) from None
    return None if index is None else names[index]


def _of_tags(words: str) -> str:
    return words.replace("column", "tag").replace(" headed ", " called ")


def _bare(heading: str) -> str:
    """A heading without its unit in brackets, for comparing: `PV [degC]` is `pv`."""
    return _UNIT_IN_HEADING.sub("", heading.strip()).lower()


def _last(heading: str) -> str:
    """The last word of a tag's name: `TIC-307.PV` is `pv`."""
    return re.split(r"[./:|\\ _-]", _bare(heading))[-1]


def _listed(headings: list[str]) -> str:
    shown = [harmless(heading, 30) for heading in headings if heading][:12]
    more = len([h for h in headings if h]) - len(shown)
    return f"its columns are {', '.join(shown)}" + (f" and {more} more" if more > 0 else "")


def _is_units_row(row: list[str], layout: Layout) -> bool:
    """A row of words only below the headings, such as `s, degC, %`."""

    def is_word(cell: str) -> bool:
        return cell in ("", "-") or (cell[0] not in "0123456789+-.," and not no_value(cell))

    roles = ("time", "value") if layout.is_long else _NEEDED
    cells = [row[i].strip() if i < len(row) else "" for i in (layout.columns[r] for r in roles)]
    return all(map(is_word, cells)) and any(cells)
