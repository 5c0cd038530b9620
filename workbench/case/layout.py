"""Which lines of a TOML text belong to which table and key.

`tomllib` gives values but no lines; this reader gives lines but no values, and keeps every byte.
It takes any text: what is not TOML it passes over, for `tomllib` to refuse in its own words.
"""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass, field
from typing import Final

Path = tuple[str | int, ...]
"""Where a value stands: names of tables and keys, and the number of an entry, from 0."""


@dataclass(frozen=True)
class Statement:
    """A header or a setting, on the whole lines that it takes."""

    path: Path
    start: int
    """Offset of its first line."""
    end: int
    """Offset past its last line, newline included."""
    line: int
    """Its first line, from 1."""
    value: tuple[int, int] | None
    """Offsets of the value; `None` for a header."""
    members: tuple[int, ...] = ()
    """Lines on which the members of a list begin."""
    remarks: tuple[str, ...] = ()
    """Comments inside the value."""


@dataclass
class Layout:
    """A text and its statements, in order."""

    text: str
    statements: list[Statement] = field(default_factory=list)
    deepest: tuple[int, int] = (0, 0)
    """The deepest nesting of brackets in a value, and the line it starts on."""
    longest_key: tuple[int, int] = (0, 0)
    """The most parts in one key, and its line."""
    longest_name: tuple[int, int] = (0, 0)
    """The most characters in one key, and its line."""

    def setting(self, *path: str | int) -> Statement | None:
        """The statement that gives exactly this value."""
        return self._by_path.get((path, False))

    def header(self, *path: str | int) -> Statement | None:
        """The header of this table."""
        return self._by_path.get((path, True))

    def line(self, *path: str | int) -> int | None:
        """The line of a value, else of the nearest thing around it."""
        for length in range(len(path), 0, -1):
            part = path[:length]
            found = self._by_path.get((part, False)) or self._by_path.get((part, True))
            if found is not None:
                within = path[length] if length < len(path) else None
                if isinstance(within, int) and within < len(found.members):
                    return found.members[within]
                return found.line
        return next((s.line for s in self.statements if s.path[: len(path)] == path), None)

    @property
    def _by_path(self) -> dict[tuple[Path, bool], Statement]:
        if len(self._index) != len(self.statements):
            for each in self.statements:
                self._index.setdefault((each.path, each.value is None), each)
        return self._index

    _index: dict[tuple[Path, bool], Statement] = field(default_factory=dict, repr=False)


LONGEST_SPLIT: Final = 1000
"""Characters of a key that is still taken apart; taking longer ones apart grows with the square."""

_PART: Final = r"""[A-Za-z0-9_-]+|"(?:[^"\\\n]|\\[^\n])*+"|'[^'\n]*+'"""
_KEY: Final = re.compile(rf"(?:{_PART})(?:[ \t]*\.[ \t]*(?:{_PART}))*+")
_SPACE: Final = re.compile(r"[ \t]*+")
_REST: Final = re.compile(r"[^\n]*+\n?")
_HEADER_END: Final = re.compile(r"[ \t]*\]\]?[ \t]*(?:#[^\n]*)?\r?(?:\n|\Z)")
_EQUALS: Final = re.compile(r"[ \t]*=[ \t]*")
_TOKEN: Final = re.compile(
    r'''
    (?P<string>
        """(?:[^"\\]++|\\.|"(?!""))*+"{3,5}
      | \'\'\'(?:[^']++|'(?!\'\'))*+'{3,5}
      | "(?:[^"\\\n]++|\\[^\n])*+"
      | '[^'\n]*+'
    )
  # A string that never closes is not TOML, and nothing after it needs to be looked at twice.
  | (?P<unclosed>"""(?s:.*+)|\'\'\'(?s:.*+)|["'][^\n]*+)
  | (?P<remark>\#[^\n]*)
  | (?P<open>[\[{])
  | (?P<close>[\]}])
  | (?P<newline>\n)
  | (?P<space>[ \t\r]+)
  | (?P<comma>,)
  | (?P<word>[^"'\#\[\]{}\n \t\r,]++|.)
''',
    re.VERBOSE | re.DOTALL,
)


def read_layout(text: str) -> Layout:
    """The statements of a text, without its byte order mark."""
    layout = Layout(text)
    tables = _Tables()
    table: Path = ()
    at, line = 0, 1
    while at < len(text):
        start = at
        at = _after(_SPACE, text, at)
        if text.startswith("[", at):
            found = _header(text, at)
            if found is not None:
                parts, end = found
                table = tables.opened(parts, text.startswith("[[", at))
                layout.statements.append(Statement(table, start, end, line, None))
                _note_key(layout, parts, text[at:end], line)
                at = end
            else:
                at = _after(_REST, text, at)
        elif key := _KEY.match(text, at):
            at = _setting(layout, table, key, start, line)
        else:
            at = _after(_REST, text, at)
        line += text.count("\n", start, at)
    return layout


def _after(pattern: re.Pattern[str], text: str, at: int) -> int:
    found = pattern.match(text, at)
    return found.end() if found else at


def _parts(key: str) -> tuple[str, ...]:
    """The names that a written key is made of; an overlong key stays whole."""
    if len(key) > LONGEST_SPLIT:
        return (key,)
    if '"' not in key and "'" not in key:
        return tuple(part.strip(" \t") for part in key.split("."))
    try:
        value: object = tomllib.loads(f"{key} = 0")
    except ValueError:
        return (key,)
    names = []
    while isinstance(value, dict):
        [(name, value)] = value.items()
        names.append(name)
    return tuple(names)


def _header(text: str, at: int) -> tuple[tuple[str, ...], int] | None:
    """The names of a header and the offset past its line."""
    brackets = 2 if text.startswith("[[", at) else 1
    key = _KEY.match(text, _after(_SPACE, text, at + brackets))
    if key is None:
        return None
    end = _HEADER_END.match(text, key.end())
    return (_parts(key[0]), end.end()) if end else None


def _setting(layout: Layout, table: Path, key: re.Match[str], start: int, line: int) -> int:
    """Adds the setting whose key was found; the offset past its last line."""
    text = layout.text
    parts = _parts(key[0])
    _note_key(layout, parts, key[0], line)
    equals = _EQUALS.match(text, key.end())
    if equals is None:
        return _after(_REST, text, key.end())
    depth, at, value_end = 0, equals.end(), equals.end()
    members: list[int] = []
    remarks: list[str] = []
    awaited, here, counted = False, line, start
    while at < len(text):
        token = _TOKEN.match(text, at)
        assert token is not None, "the last alternative takes any character"
        kind = token.lastgroup
        if awaited and kind not in ("space", "newline", "remark", "close"):
            here, counted, awaited = here + text.count("\n", counted, at), at, False
            members.append(here)
        match kind:
            case "newline" if depth == 0:
                break
            case "remark" if depth == 0:
                at = token.end()
                continue
            case "remark":
                remarks.append(token[0].rstrip("\r"))
            case "open":
                depth += 1
                awaited = depth == 1
                if depth > layout.deepest[0]:
                    layout.deepest = depth, line
            case "close":
                depth -= 1
            case "comma":
                awaited = depth == 1
        at = token.end()
        if kind not in ("space", "newline", "remark"):
            value_end = at
    end = min(at + 1, len(text))
    layout.statements.append(
        Statement(
            (*table, *parts),
            start,
            end,
            line,
            (equals.end(), value_end),
            tuple(members),
            tuple(remarks),
        )
    )
    return end


def _note_key(layout: Layout, parts: tuple[str, ...], written: str, line: int) -> None:
    if len(parts) > layout.longest_key[0]:
        layout.longest_key = len(parts), line
    if len(written) > layout.longest_name[0]:
        layout.longest_name = len(written), line


class _Tables:
    """Numbers the entries of lists of tables, as headers open them."""

    def __init__(self) -> None:
        self._last: dict[Path, int] = {}

    def opened(self, parts: tuple[str, ...], is_entry: bool) -> Path:
        path: Path = ()
        for position, part in enumerate(parts):
            path = (*path, part)
            if is_entry and position == len(parts) - 1:
                self._last[path] = self._last.get(path, -1) + 1
            if path in self._last:
                path = (*path, self._last[path])
        return path
