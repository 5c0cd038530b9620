"""The text of a case file: a whole new one, or an old one with only the changed lines rewritten."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import tomli_w

from workbench.case.case import Case, Revision, default_value, keys
from workbench.case.layout import Layout, Statement, read_layout
from workbench.case.reading import entry_values
from workbench.case.tables import TABLES, Values, table_values, values_of
from workbench.errors import InputError, Problem
from workbench.model.blocks import Block, Blocks
from workbench.units import Note, Quantity, Value, quantities

FORMAT: Final = 1
"""The format this program reads and writes."""

BYTE_ORDER_MARK: Final = "\ufeff"

# --- a whole new text ----------------------------------------------------------------------------


def format_case(case: Case) -> str:
    """The text of a new case file: declared order, defaults left out, one setting a line."""
    parts = [f"format = {FORMAT}\n"]
    for table, values in _written_tables(case).items():
        if values or table == "controller":
            known = _declared(case, table)
            lines = [_line(key, known[key].write(value)) for key, value in values.items()]
            parts.append("".join([f"[{table}]\n", *lines]))
        if table == "plant":
            parts += ["".join(_block_lines(block)) for block in _blocks(case)]
    parts += ["".join(_entry_lines(entry)) for entry in case.history]
    return "\n".join(parts)


def _line(key: str, value: object) -> str:
    """`key = value`, with what an editor or a terminal might act on escaped."""
    line = tomli_w.dumps({key: value}).removesuffix("\n")
    return "".join(c if c.isprintable() or _is_surrogate(c) else _escaped(c) for c in line) + "\n"


def _escaped(character: str) -> str:
    number = ord(character)
    return f"\\u{number:04x}" if number < 0x10000 else f"\\U{number:08x}"


def _is_surrogate(character: str) -> bool:
    # No escape can say it in TOML: left for the save to refuse.
    return "\ud800" <= character <= "\udfff"


def _value_text(value: object) -> str:
    return _line("x", value)[len("x = ") : -1]


def _entry_lines(entry: Revision) -> Iterator[str]:
    """A history table: the header is ours and so never changes its form."""
    yield "[[history]]\n"
    for key, value in entry_values(entry).items():
        yield f"at = {entry.at.isoformat()}\n" if key == "at" else _line(key, value)


def _declared(case: Case, table: str) -> dict[str, Quantity]:
    """The keys of one table, in file order; of blocks, where the upset enters them."""
    start = f"{table}."
    known = {k.removeprefix(start): each for k, each in keys(case).items() if k.startswith(start)}
    if known.pop("blocks", None) and _load_before(case):
        known["load_before"] = quantities(Blocks)["load_before"]
    return known


# --- the plant's blocks --------------------------------------------------------------------------


def _written_tables(case: Case) -> dict[str, Values]:
    """The tables without the plant's blocks, which have tables of their own."""
    tables = table_values(case)
    if tables["plant"].pop("blocks", None) and _load_before(case):
        tables["plant"]["load_before"] = _load_before(case)
    return tables


def _blocks(case: Case) -> tuple[Block, ...]:
    return case.plant.process.blocks if isinstance(case.plant.process, Blocks) else ()


def _load_before(case: Case) -> str:
    return case.plant.process.load_before if isinstance(case.plant.process, Blocks) else ""


def _block_values(block: Block) -> dict[str, object]:
    return {key: quantities(Block)[key].write(value) for key, value in values_of(block).items()}


def _block_lines(block: Block) -> Iterator[str]:
    yield "[[plant.block]]\n"
    for key, value in _block_values(block).items():
        yield _line(key, value)


def _blocks_text(blocks: Sequence[Block]) -> str:
    """The blocks as a list on one line, for a file that has them so."""
    tables = []
    for block in blocks:
        pairs = (f"{key} = {_value_text(value)}" for key, value in _block_values(block).items())
        tables.append("{ " + ", ".join(pairs) + " }")
    return f"[{', '.join(tables)}]"


def _pairs(old: Sequence[Block], new: Sequence[Block]) -> Iterator[tuple[int | None, int | None]]:
    """Each old block with the one it becomes, in the new order; `None` for those gone and come."""
    before, after = [block.name for block in old], [block.name for block in new]
    match = difflib.SequenceMatcher(None, before, after, autojunk=False)
    for kind, a, b, c, d in match.get_opcodes():
        if kind == "equal" or b - a == d - c:
            yield from zip(range(a, b), range(c, d), strict=True)
        else:
            yield from ((i, None) for i in range(a, b))
            yield from ((None, i) for i in range(c, d))


# --- the old text with its changes ---------------------------------------------------------------


@dataclass
class _Rewriting:
    """Collects the replacements that turn the text of one case into that of another."""

    layout: Layout
    old: Case
    new: Case
    newline: str

    def __post_init__(self) -> None:
        self.changes: list[tuple[int, int, str]] = []
        self.notes: list[Note] = []

    def replaced(self) -> str:
        """The new text."""
        before, after = _written_tables(self.old), _written_tables(self.new)
        for table in TABLES:
            if table in before and table not in after:
                self._drop_table(table)
            else:
                self._table(table, before.get(table, {}), after.get(table, {}))
            if table == "plant" and _blocks(self.old) != _blocks(self.new):
                self._redraw()
        added = self._entries()
        text, pieces, at = self.layout.text, [], 0
        for start, end, piece in sorted(self.changes, key=lambda change: change[:2]):
            pieces += [text[at:start], piece.replace("\n", self.newline)]
            at = end
        kept = "".join([*pieces, text[at:]])
        if kept.endswith(2 * self.newline):
            added = added.removeprefix("\n")
        return kept + added.replace("\n", self.newline)

    def _drop_table(self, table: str) -> None:
        for each in self.layout.statements:
            if each.path[0] == table:
                self.changes.append((each.start, each.end, ""))

    def _table(self, table: str, before: Values, after: Values) -> None:
        known = _declared(self.new, table)
        inline = self.layout.setting(table)
        changed = {
            key: self._written(table, key, known, after)
            for key in {**known, **before}
            if before.get(key, _ABSENT) != after.get(key, _ABSENT)
        }
        if table == "plant":
            # A key at its default is in neither case, and may not belong to the new shape.
            held = [
                each.path[1]
                for each in self.layout.statements
                if each.path[:1] == ("plant",) and len(each.path) == 2 and each.value is not None
            ]
            changed |= {str(key): _ABSENT for key in held if key not in {*known, "block"}}
        redrawn = table == "plant" and _blocks(self.old) != _blocks(self.new)
        if not changed and not (inline is not None and redrawn):
            return
        if inline is not None:
            self._rewrite_inline(inline, changed, known)
            return
        fresh: list[tuple[str, object]] = []
        for key in [*known, *(key for key in changed if key not in known)]:
            if key not in changed:
                continue
            place, value = self.layout.setting(table, key), changed[key]
            if place is None:
                if key in after:
                    fresh.append((key, value))
            elif value is _ABSENT:
                self.changes.append((place.start, place.end, ""))
            else:
                assert place.value is not None, "a setting has a value"
                self.changes.append((*place.value, _value_text(value)))
        if fresh:
            self._insert(table, fresh, list(known))

    def _redraw(self) -> None:
        """The tables of the plant's blocks; a list of them stays a list."""
        old, new = _blocks(self.old), _blocks(self.new)
        place = self.layout.setting("plant", "block")
        if self.layout.setting("plant") is not None:
            return  # the whole table is on one line and was written with it
        if place is not None:
            assert place.value is not None, "a setting has a value"
            remarks = "".join(f"{each}\n" for each in place.remarks)
            if new:
                self.changes.append((place.start, place.start, remarks))
                self.changes.append((*place.value, _blocks_text(new)))
            else:
                self.changes.append((place.start, place.end, remarks))
            return
        own = [each for each in self.layout.statements if each.path[:1] == ("plant",)]
        at = max((each.end for each in own), default=0)
        if self.layout.header("plant") is None and not any(len(s.path) > 2 for s in own):
            at = self._end_of_table_before("plant")
        for was, now in _pairs(old, new):
            if was is not None:
                table = [s for s in own if s.path[:3] == ("plant", "block", was)]
                at = max(each.end for each in table)
                if now is None:
                    self.changes += [(each.start, each.end, "") for each in table]
                else:
                    self._reblock(was, old[was], new[now])
            elif now is not None:
                lines = "".join(_block_lines(new[now]))
                self.changes.append((at, at, f"\n{lines}" if at else lines))

    def _reblock(self, number: int, old: Block, new: Block) -> None:
        """One `[[plant.block]]` table, line by line."""
        before, after = _block_values(old), _block_values(new)
        where = ("plant", "block", number)
        header = self.layout.header(*where)
        assert header is not None, "a table has a header"
        at = header.end
        for key in quantities(Block):
            place = self.layout.setting(*where, key)
            changed = before.get(key) != after.get(key)
            if place is None and changed:
                lead = re.match(r"[ \t]*", self.layout.text[header.start :])
                line = _line(key, after[key])
                self.changes.append((at, at, f"{lead[0] if lead else ''}{line}"))
            elif place is not None and changed and key not in after:
                self.changes.append((place.start, place.end, ""))
            elif place is not None and changed:
                assert place.value is not None, "a setting has a value"
                self.changes.append((*place.value, _value_text(after[key])))
            at = place.end if place is not None else at

    def _written(
        self, table: str, key: str, known: Mapping[str, Quantity], after: Values
    ) -> object:
        """A changed key's raw value, its default where that can be written, or that it must go."""
        if key in after:
            return known[key].write(after[key])
        if key not in known:
            return _ABSENT
        default: Value = default_value(self.new, table, key)
        if default is None and known[key].kind not in ("integral", "derivative"):
            return _ABSENT
        return known[key].write(default)

    def _rewrite_inline(
        self, place: Statement, changed: Mapping[str, object], known: Mapping[str, Quantity]
    ) -> None:
        """A table written on one line stays on it."""
        assert place.value is not None, "a setting has a value"
        start, end = place.value
        held = tomllib.loads(f"x = {self.layout.text[start:end]}")["x"]
        held.update(changed)
        blocks = _blocks(self.new) if place.path == ("plant",) else ()
        held.pop("block", None)
        order = [*(key for key in known if key in held), *(key for key in held if key not in known)]
        items = [f"{key} = {_value_text(held[key])}" for key in order if held[key] is not _ABSENT]
        items += [f"block = {_blocks_text(blocks)}"] if blocks else []
        self.changes.append((start, end, "{ " + ", ".join(items) + " }" if items else "{}"))

    def _insert(self, table: str, fresh: Sequence[tuple[str, object]], order: list[str]) -> None:
        """New keys go behind the nearest key declared before them, in the style they find there."""
        header = self.layout.header(table)
        own = {
            each.path[1]: each
            for each in self.layout.statements
            if each.path[0] == table and len(each.path) == 2 and each.value is not None
        }
        if header is None and not own:
            lines = [_line(key, value) for key, value in fresh]
            at = self._end_of_table_before(table)
            self.changes.append((at, at, "".join(["\n" if at else "", f"[{table}]\n", *lines])))
            return
        prefix = "" if header else f"{table}."
        for key, value in fresh:
            earlier = [own[each] for each in order[: order.index(key)] if each in own]
            if earlier:
                neighbour, at = earlier[-1], earlier[-1].end
            elif header:
                neighbour, at = header, header.end
            else:
                neighbour = min(own.values(), key=lambda each: each.start)
                at = neighbour.start
            indent = re.match(r"[ \t]*", self.layout.text[neighbour.start :])
            lead = indent[0] if indent else ""
            self.changes.append((at, at, f"{lead}{prefix}{_line(key, value)}"))

    def _end_of_table_before(self, table: str) -> int:
        """Where a new table goes: behind the one declared before it, ahead of the history."""
        statements = self.layout.statements
        history = next((s.start for s in statements if s.path == ("history", 0)), None)
        ends = [
            each.end
            for each in statements
            if each.path[0] in list(TABLES)[: list(TABLES).index(table)]
            and (self.layout.header(each.path[0]) is not None or len(each.path) > 3)
        ]
        # Settings ahead of every header stay there, and the new header comes behind them.
        first = next((s.start for s in statements if s.value is None), len(self.layout.text))
        bare = [each.end for each in statements if each.start < first]
        at = max(ends or bare, default=0)
        if history is not None and at > history:
            at = max(each.end for each in statements if each.start < history)
        return at

    def _entries(self) -> str:
        """Lines to append: new entries, and all of them where a list gives way to tables."""
        kept = len(self.old.history)
        if self.new.history[:kept] != self.old.history:
            mend = "add a new entry instead"
            raise InputError(Problem("entries are never changed or removed", mend, "history"))
        entries, remarks = self.new.history[kept:], []
        place = self.layout.setting("history")
        changed = self.changes or entries
        if place is not None and changed:
            self.changes.append((place.start, place.end, ""))
            entries, remarks = self.new.history, [f"{each}\n" for each in place.remarks]
            text = "the history was a list on its own lines; it is now [[history]] tables"
            self.notes.append(Note("info", text))
        lines = [line for entry in entries for line in ("\n", *_entry_lines(entry))]
        return "".join([*(["\n"] if remarks else []), *remarks, *lines])


_ABSENT: Final = object()
"""Stands for a key that is not to be in the file."""


def changed_text(text: str, old: Case, new: Case) -> tuple[str, tuple[Note, ...]]:
    """The text of the old case changed into that of the new, all other bytes as they were."""
    mark = BYTE_ORDER_MARK if text.startswith(BYTE_ORDER_MARK) else ""
    body = text.removeprefix(BYTE_ORDER_MARK)
    newline = "\r\n" if body[: body.find("\n") + 1].endswith("\r\n") else "\n"
    closed = body.endswith("\n")
    layout = read_layout(body if closed else body + newline)
    rewriting = _Rewriting(layout, old, new, newline)
    changed = rewriting.replaced()
    if not closed:
        changed = changed.removesuffix("\n").removesuffix("\r")
    return mark + changed, tuple(rewriting.notes)
