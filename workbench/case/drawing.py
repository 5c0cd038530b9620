"""The plant on one line, and its blocks one key at a time, as keys of an edit.

`plant` is the whole plant as it is typed; `plant.blocks` its blocks on one line;
`plant.block.valve.formula` one key of one block.  They are put into the keys that a case has.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import replace
from typing import Final

from workbench.case.tables import Case
from workbench.errors import InputError, Problem
from workbench.model.blocks import Block, Blocks, format_blocks, parse_blocks, parse_plant
from workbench.model.plant import Formula, write_function
from workbench.units import TIME_UNITS, harmless, nearest, one_of, quantities

_PART: Final = re.compile(r"plant\.block\.(.+)\.(\w+)")
_NUMBERED: Final = re.compile(r"plant\.block\[(\d+)\]\.(\w+)")
_LOAD: Final = "plant.load_before"


def show_part(case: Case, key: str) -> str | None:
    """The text of one of these keys; `None` for any other key, and where the plant has it not."""
    process = case.plant.process
    if key == "plant":
        if process is None:
            return ""
        return format_blocks(process) if isinstance(process, Blocks) else write_function(process)
    if not isinstance(process, Blocks):
        return None
    if key == _LOAD:
        return process.load_before
    part = _PART.fullmatch(key)
    for block in process.blocks:
        if part and block.name == part[1] and part[2] in quantities(Block):
            return str(getattr(block, part[2]))
    return None


def spelled_out(case: Case, changes: Mapping[str, str]) -> dict[str, str]:
    """The changes with only those keys that a case has.

    Raises `InputError` with the key as typed.
    """
    unit = changes.get("plant.time_unit", case.plant.time_unit).strip()
    unit = unit if unit in TIME_UNITS else "s"
    spelled: dict[str, str] = {}
    parts: dict[str, str] = {}
    for key, typed in changes.items():
        if key == "plant":
            spelled |= _whole(typed, unit)
        elif key == _LOAD or _PART.fullmatch(key):
            parts[key] = typed
        else:
            spelled[key] = typed
    if parts:
        line = spelled.get("plant.blocks")
        drawn = case.plant.process if line is None else _blocks(line, unit)
        if not isinstance(drawn, Blocks):
            what, mend = "needs a plant of blocks", "set plant.blocks, like valve: 1/(2 s + 1)"
            raise InputError([Problem(what, mend, key) for key in parts])
        spelled["plant.blocks"] = format_blocks(_with_parts(drawn, parts, unit))
    return spelled


def _blocks(line: str, unit: str) -> Blocks:
    try:
        return parse_blocks(line, unit)
    except InputError as fault:
        raise fault.at(key="plant.blocks") from None


def _whole(typed: str, unit: str) -> dict[str, str]:
    """A plant on one line as its own keys."""
    if typed.strip() in ("", "none"):
        return {"plant.shape": ""}
    try:
        plant = parse_plant(typed, unit)
    except InputError as fault:
        raise InputError(
            Problem(f"{_subject(p.key)}{p.what}", p.mend, "plant") for p in fault.problems
        ) from None
    if isinstance(plant, Blocks):
        return {"plant.blocks": format_blocks(plant)}
    if isinstance(plant, Formula):
        return {"plant.formula": plant.formula}
    values = {
        f"plant.{key}": declared.show(getattr(plant, key))
        for key, declared in quantities(type(plant)).items()
    }
    return {"plant.shape": plant.shape, **values}


def _subject(key: str) -> str:
    """The name of a shape's value, before what is wrong with it; blocks name themselves."""
    bare = key.rpartition(".")[2]
    return "" if not bare or bare in ("formula", "shape", "blocks") or "[" in key else f"{bare}: "


def _with_parts(drawn: Blocks, parts: Mapping[str, str], unit: str) -> Blocks:
    """The blocks with some of their keys changed."""
    blocks = {block.name: block for block in drawn.blocks}
    load_before = drawn.load_before
    faults: list[Problem] = []
    for key, typed in parts.items():
        part = _PART.fullmatch(key)
        if part is None:
            load_before = typed.strip()
            continue
        try:
            changed = _with_part(blocks, part[1], part[2], typed)
            if part[2] == "name":
                blocks = {
                    old: _renamed(each, part[1], changed.name) for old, each in blocks.items()
                }
                load_before = changed.name if load_before == part[1] else load_before
            blocks[part[1]] = changed
        except InputError as fault:
            faults.extend(replace(p, key=key) for p in fault.problems)
    if faults:
        raise InputError(faults)
    try:
        return Blocks(tuple(blocks.values()), unit, load_before)
    except InputError as fault:
        raise InputError(
            replace(p, key=f"plant.{p.key or 'blocks'}") for p in fault.problems
        ) from (None)


def _with_part(blocks: Mapping[str, Block], name: str, field: str, typed: str) -> Block:
    declared = quantities(Block).get(field)
    if name not in blocks:
        meant = nearest(name, list(blocks))
        hint = f"did you mean {meant!r}?" if meant else f"the blocks are {one_of(list(blocks))}"
        raise InputError(Problem(f"there is no block {harmless(name, 40)!r}", hint))
    if declared is None:
        meant = nearest(field, list(quantities(Block)))
        known = one_of(list(quantities(Block)))
        hint = f"did you mean {meant!r}?" if meant else f"use {known}"
        raise InputError(Problem("is not a known key", hint))
    if not typed.strip() and field == "sign":
        return replace(blocks[name], sign="+")
    return replace(blocks[name], **{field: str(declared.parse(typed)).strip()})


def _renamed(block: Block, old: str, new: str) -> Block:
    """The block with the name of another one changed."""
    ends = [end.strip() for end in block.around.split(" to ")]
    around = " to ".join(new if end == old else end for end in ends)
    return replace(block, beside=new if block.beside == old else block.beside, around=around)


def told_as_typed(
    faults: Iterable[Problem], case: Case, changes: Mapping[str, str], spelled: Mapping[str, str]
) -> list[Problem]:
    """The faults of spelled-out changes, each about the key that was typed."""
    process = case.plant.process
    names = [block.name for block in process.blocks] if isinstance(process, Blocks) else []
    told = []
    for fault in faults:
        key = fault.key
        numbered = _NUMBERED.fullmatch(key)
        if numbered and int(numbered[1]) <= len(names):
            part = f"plant.block.{names[int(numbered[1]) - 1]}.{numbered[2]}"
            key = part if part in changes else key
        if key not in changes and (numbered or key in spelled):
            whole = next((k for k in ("plant", "plant.blocks") if k in changes), "")
            if whole:
                told.append(replace(fault, key=whole, what=f"{_subject(key)}{fault.what}"))
                continue
        told.append(replace(fault, key=key))
    return told
