"""The plant drawn as named blocks: a path in series, blocks beside it, and inner feedback.

Blocks stand in the order in which the signal meets them, from OP to PV.  A block may instead stand
beside another (same input, outputs added or subtracted) or around a stretch of the path (it feeds
the stretch's output back to its input).
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import Final

from workbench.errors import InputError, ModelError, Problem
from workbench.model.plant import Shape, Vessel, read_function
from workbench.model.transfer import TransferFunction
from workbench.units import TIME_UNITS, check_fields, nearest, one_of, quantity

_NAME: Final = re.compile(r"[^\W\d]\w*(?:[ -]\w+)*\Z")
_WORDS: Final = {"beside", "less", "around", "before", "to"}
"""Words of the one-line notation, which a name must leave alone."""
MOST_BLOCKS: Final = 40
"""Blocks in one plant."""


@dataclass(frozen=True)
class Block:
    """One named block of the plant."""

    name: str = quantity("name of the block", "text", longest=40, example="valve")
    formula: str = quantity(
        "formula of the block in s, or a shape with its values", "text", longest=10_000
    )
    beside: str = quantity(
        "name of the block that this one stands beside, fed by the same signal", "text", default=""
    )
    around: str = quantity(
        'block, or first and last block as "valve to sensor", that this one feeds back around',
        "text",
        default="",
        longest=100,
    )
    sign: str = quantity(
        "whether its output is added to that of the block beside it, or subtracted",
        "choice",
        default="+",
        choices=("+", "-"),
    )

    def __post_init__(self) -> None:
        check_fields(self)
        if not _NAME.match(self.name):
            raise _fault(f"{self.name!r} is no name for a block", "use letters and digits", "name")
        taken = next((word for word in self.name.split() if word in _WORDS), None)
        if taken:
            raise _fault(f"{self.name!r} holds the word {taken!r}", "use another word", "name")
        if self.beside and self.around:
            raise _fault("stands beside and around", "keep one of beside and around", "around")
        if self.sign == "-" and not self.beside:
            raise _fault(
                "is - where no block stands beside", "put the minus in the formula", "sign"
            )


def _fault(what: str, mend: str, key: str = "") -> ModelError:
    return ModelError(Problem(what, mend, key))


@dataclass(frozen=True)
class _Stretch:
    """A feedback around the stages from `first` to `last`, both counted from 0."""

    first: int
    last: int
    back: TransferFunction


@dataclass(frozen=True)
class Blocks:
    """A plant drawn as blocks, and where the upset enters it."""

    shape = "blocks"
    blocks: tuple[Block, ...]
    time_unit: str = quantity(
        "unit of s in the formulas", "choice", default="s", choices=tuple(TIME_UNITS)
    )
    load_before: str = quantity(
        "block at whose input the upset enters; left out: the plant's own input",
        "text",
        default="",
        longest=40,
    )

    def __post_init__(self) -> None:
        check_fields(self)
        faults: list[Problem] = []
        for block in self.blocks[:MOST_BLOCKS]:
            try:
                self._function(block)
            except InputError as fault:
                faults.extend(fault.problems)
        if faults:
            raise ModelError(faults)
        whole = self.transfer()
        if not whole.numerator:
            raise _fault("the paths cancel to nothing", "draw a plant that answers to its input")
        if not whole.is_proper:
            raise _fault(
                "the inner feedback makes an improper plant: more leads than lags",
                "put a lag into it",
            )
        self.load()

    def transfer(self) -> TransferFunction:
        """PV units per OP unit, every inner loop closed."""
        return self._path(0)

    def load(self) -> TransferFunction:
        """PV units per unit of the upset."""
        stages, _ = self._drawn()
        if not self.load_before:
            return self._path(0)
        return self._path(_index(self.load_before, list(stages), "upset", "load_before"))

    def _path(self, start: int) -> TransferFunction:
        """From the input of stage `start` to PV."""
        stages, stretches = self._drawn()
        functions = list(stages.values())
        return _closed(functions, stretches, 0, len(functions) - 1, start)

    def _drawn(self) -> tuple[dict[str, TransferFunction], list[_Stretch]]:
        """The stages of the path by name, and the feedbacks around them, innermost first."""
        if not self.blocks:
            raise _fault("a plant without blocks", "add a block, like valve: 1/(2 s + 1)")
        if len(self.blocks) > MOST_BLOCKS:
            raise _fault(f"{len(self.blocks)} blocks", f"use at most {MOST_BLOCKS}")
        names = [b.name for b in self.blocks]
        twice = next((n for n in names if names.count(n) > 1), None)
        if twice:
            last = len(names) - names[::-1].index(twice)
            raise _fault(
                f"two blocks are called {twice!r}", "give each its own name", _key(last, "name")
            )
        stages: dict[str, TransferFunction] = {}
        for block in self.blocks:
            if not block.beside and not block.around:
                stages[block.name] = self._function(block)
        if not stages:
            raise _fault("no block stands on the path itself", "leave out beside and around once")
        for number, block in enumerate(self.blocks, 1):
            if block.beside:
                key = _key(number, "beside")
                at = list(stages)[_index(block.beside, list(stages), block.name, key)]
                function = self._function(block)
                stages[at] = stages[at] + (function if block.sign == "+" else -function)
        return stages, self._stretches(list(stages))

    def _stretches(self, path: list[str]) -> list[_Stretch]:
        found = []
        for number, block in enumerate(self.blocks, 1):
            if block.around:
                key = _key(number, "around")
                first, _, last = block.around.partition(" to ")
                begin = _index(first.strip(), path, block.name, key)
                end = _index(last.strip(), path, block.name, key) if last else begin
                if end < begin:
                    what = f"{block.name!r} goes around backwards"
                    raise _fault(what, "name the first first", key)
                found.append(_Stretch(begin, end, self._function(block)))
        found.sort(key=lambda s: s.last - s.first)
        for i, inner in enumerate(found):
            for outer in found[i + 1 :]:
                apart = inner.last < outer.first or outer.last < inner.first
                within = outer.first <= inner.first and inner.last <= outer.last
                if not apart and not within:
                    raise _fault(
                        "two inner feedbacks overlap", "let one lie inside the other, or apart"
                    )
        return found

    def _function(self, block: Block) -> TransferFunction:
        key = _key(self.blocks.index(block) + 1, "formula")
        try:
            shape = read_function(block.formula, self.time_unit)
        except InputError as fault:
            first = fault.problems[0]
            subject = f"{first.key}: " if first.key not in ("", "formula") else ""
            what = f"block {block.name!r}: {subject}{first.what}"
            raise _fault(what, first.mend, key) from None
        if isinstance(shape, Vessel):
            what = f"block {block.name!r}: a vessel is a whole plant, from range to range"
            raise _fault(what, "write integrating slope=... in PV units", key)
        return shape.transfer()


def _key(number: int, field: str) -> str:
    """Where a fault is: the field of a block, counted from 1."""
    return f"block[{number}].{field}"


def _index(name: str, path: list[str], by: str, key: str) -> int:
    if name in path:
        return path.index(name)
    meant = nearest(name, path)
    hint = f"did you mean {meant!r}?" if meant else f"the path has {one_of(path)}"
    raise _fault(f"{by!r} names the block {name!r}, which is not on the path", hint, key)


def _closed(
    functions: list[TransferFunction],
    stretches: list[_Stretch],
    first: int,
    last: int,
    start: int,
) -> TransferFunction:
    """From the input of stage `start` to the output of stage `last`, with the feedbacks inside."""
    inside = [s for s in stretches if first <= s.first and s.last <= last]
    outermost: list[_Stretch] = []
    for stretch in reversed(inside):
        if not any(o.first <= stretch.first and stretch.last <= o.last for o in outermost):
            outermost.append(stretch)
    total = TransferFunction.constant(1.0)
    at = first
    while at <= last:
        loop = next((o for o in outermost if o.first == at), None)
        if loop is None:
            total = total * functions[at] if at >= start else total
            at += 1
            continue
        if loop.last >= start:
            rest = [s for s in inside if s is not loop]
            whole = _closed(functions, rest, loop.first, loop.last, loop.first)
            if start <= loop.first:
                total = total * whole.feedback(loop.back)
            else:
                part = _closed(functions, rest, loop.first, loop.last, start)
                total = total * (part / (1.0 + whole * loop.back))
        at = loop.last + 1
    return total


def parse_blocks(text: str, time_unit: str = "s") -> Blocks:
    """Blocks from one line: `valve: 1/(2 s + 1); process: 1.8 exp(-6 s)/(40 s + 1)`.

    A block beside another is `leak beside process: ...`, with `less` in place of `beside` where it
    is subtracted; a block around a stretch is `positioner around valve: ...` or
    `slave around valve to sensor: ...`; `upset before process` says where the upset enters.

    Raises `ModelError` with what would mend it.
    """
    blocks: list[Block] = []
    load_before = ""
    for piece in filter(None, (p.strip() for p in text.split(";"))):
        entered = re.fullmatch(r"upset\s+before\s+(.+)", piece)
        if entered:
            load_before = entered[1].strip()
            continue
        head, colon, formula = piece.partition(":")
        if not colon:
            raise _fault(f"{piece[:40]!r} has no colon", "write a block as name: formula")
        try:
            blocks.append(_block(head.strip(), formula.strip()))
        except InputError as fault:
            raise ModelError(
                replace(p, key=_key(len(blocks) + 1, p.key)) for p in fault.problems
            ) from None
    return Blocks(tuple(blocks), time_unit, load_before)


def _block(head: str, formula: str) -> Block:
    match = re.fullmatch(r"(.+?)\s+(beside|less|around)\s+(.+)", head)
    if match is None:
        return Block(head, formula)
    name, word, other = match.groups()
    if word == "around":
        return Block(name, formula, around=other)
    return Block(name, formula, beside=other, sign="-" if word == "less" else "+")


def format_blocks(plant: Blocks) -> str:
    """The one-line text of a plant's blocks; `parse_blocks` reads it back."""
    pieces = []
    for block in plant.blocks:
        head = block.name
        if block.beside:
            head += f" {'less' if block.sign == '-' else 'beside'} {block.beside}"
        elif block.around:
            head += f" around {block.around}"
        pieces.append(f"{head}: {block.formula}")
    if plant.load_before:
        pieces.append(f"upset before {plant.load_before}")
    return "; ".join(pieces)


def parse_plant(text: str, time_unit: str = "s") -> Shape | Blocks:
    """A plant typed on one line: blocks, a shape with its values, or a formula.

    Raises `InputError` with what would mend it.

    Examples
    --------
    >>> parse_plant("first-order gain=1.8, time_constant=40 s, dead_time=6 s").shape
    'first-order'
    >>> parse_plant("valve: 1/(2 s + 1); process: 1.8/(40 s + 1)").transfer().gain().value
    1.8
    """
    return parse_blocks(text, time_unit) if ":" in text else read_function(text, time_unit)
