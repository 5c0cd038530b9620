"""One loop's case: every setting the engineer keeps about it, and the one way to change one.

The file reader, `--set` and the entry panels all put a key and a value through the quantity
declared for that key, so that the same mistake is answered in the same words everywhere.  A case
never changes; an edit gives a new one.  How a case is kept on disk is `files.py`'s matter.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from typing import Any, Final, cast

from workbench.case.drawing import show_part, spelled_out, told_as_typed
from workbench.case.reading import ASSUMED, assemble
from workbench.case.tables import (
    PROCESSES,
    SHAPE,
    TABLES,
    WITH_TIME_UNIT,
    Case,
    LoopTable,
    OpTable,
    PlantTable,
    Process,
    PvTable,
    Revision,
    Values,
    defaults_of,
    known_keys,
    plant_values,
    process_keys,
    shape_name,
    table_values,
    unknown_key,
)
from workbench.errors import InputError, Problem
from workbench.model.blocks import Block, Blocks
from workbench.model.formula import format_formula
from workbench.model.plant import Formula, IntegratingLag, Oscillating, Vessel, write_function
from workbench.model.transfer import TransferFunction
from workbench.units import MISSING, TIME_UNITS, Amount, Quantity, Value

__all__ = [
    "Case",
    "LoopTable",
    "OpTable",
    "PlantTable",
    "PvTable",
    "Revision",
    "assumed_keys",
    "default_value",
    "differences",
    "edit",
    "edit_all",
    "keys",
    "new_case",
    "shape_keys",
    "show",
    "with_settings",
    "with_shape",
]


def new_case(tag: str) -> Case:
    """A case with every setting at its default.  Raises `InputError` for an unusable tag."""
    return edit(Case(LoopTable("-")), "loop.tag", tag)


# --- keys and values -----------------------------------------------------------------------------


def keys(case: Case) -> dict[str, Quantity]:
    """The keys that can be set now, in file order, with what each means."""
    return dict(_known(shape_name(case.plant.process), case.plant.load is not None))


@cache
def _known(shape: str | None, has_load: bool) -> Mapping[str, Quantity]:
    """The keys for a shape; kept, because each setting on the screen asks at each change."""
    return {
        f"{table}.{key}": declared
        for table in TABLES
        for key, declared in known_keys(table, shape, has_load).items()
    }


def show(case: Case, key: str) -> str:
    """The value of a key as text for editing; empty where it is left out.

    Raises `InputError` for a key that cannot be set now.
    """
    part = show_part(case, key)
    if part is not None:
        return part
    shape = shape_name(case.plant.process)
    known = _known(shape, case.plant.load is not None)
    declared = known.get(key)
    if declared is None:
        raise InputError(unknown_key(key, list(known), shape))
    table, _, name = key.partition(".")
    value = _current(case, table, name)
    return "" if value is None and declared.kind not in _NONE_KINDS else declared.show(value)


def default_value(case: Case, table: str, key: str) -> Value:
    """What a key left out stands for; `None` where that can only be said by leaving it out."""
    declared = known_keys(table, shape_name(case.plant.process), True).get(key)
    if declared is None or (table, key) == ("plant", "shape"):
        return None
    default = defaults_of(table, shape_name(case.plant.process)).get(key)
    return None if default is MISSING else cast(Value, default)


def differences(old: Case, new: Case) -> list[tuple[str, str, str]]:
    """Keys whose values differ, in file order, with both values as text, empty where left out."""
    before, after = keys(old), keys(new)
    order = [*before, *(key for key in after if key not in before)]
    order.sort(key=lambda key: list(TABLES).index(key.partition(".")[0]))
    found = []
    for key in order:
        was = show(old, key) if key in before else ""
        now = show(new, key) if key in after else ""
        if was != now:
            found.append((key, was, now))
    if old.controller is not None and new.controller is None:
        found = [entry for entry in found if not entry[0].startswith("controller.")]
        found.append(("controller", "there", ""))
    if old.history != new.history:
        found.append(("history", _entries(old.history), _entries(new.history)))
    return found


def _entries(history: tuple[Revision, ...]) -> str:
    return f"{len(history)} {'entry' if len(history) == 1 else 'entries'}"


def _current(case: Case, table: str, key: str) -> Value:
    if table == "plant":
        given = plant_values(case.plant)
        if key == "shape":
            return shape_name(case.plant.process)
        return given.get(key, default_value(case, table, key))
    held = getattr(case, table)
    return default_value(case, table, key) if held is None else cast(Value, getattr(held, key))


_NONE_KINDS: Final = ("integral", "derivative", "filter")
"""Kinds whose absence can be written out, as "none"."""


# --- editing -------------------------------------------------------------------------------------


def edit(case: Case, key: str, text: str) -> Case:
    """The case with one key set from typed text; empty text puts an optional key at its default.

    Setting `controller.gain` drops `proportional_band` and the other way round; setting
    `plant.formula` makes the plant a formula, setting `plant.blocks` blocks; setting `plant.shape`
    keeps the values that the new shape also has.  The key `plant` is the whole plant on one line,
    and `plant.block.valve.formula` one key of one block.

    Raises `InputError` with the key, what is wrong and what is accepted.
    """
    return edit_all(case, {key: text})


def edit_all(case: Case, changes: Mapping[str, str]) -> Case:
    """The case with several keys set together, for keys that must change at once.

    Raises `InputError` with every fault.
    """
    spelled: Mapping[str, str] = {}
    try:
        spelled = spelled_out(case, changes)
        return _edit_all(case, spelled)
    except InputError as fault:
        raise InputError(told_as_typed(fault.problems, case, changes, spelled)) from None


def _edit_all(case: Case, changes: Mapping[str, str]) -> Case:
    shape, tables = _reshape(case, changes)
    has_load = case.plant.load is not None or bool(changes.get("plant.load", "").strip())
    known = _known(shape, has_load)
    faults: list[Problem] = []
    for key, typed in changes.items():
        table, _, name = key.partition(".")
        declared = known.get(key)
        if declared is None:
            faults.append(unknown_key(key, known, shape))
        elif key in keys(case) and typed == show(case, key) and typed:
            continue
        else:
            faults.extend(_set(tables.setdefault(table, {}), table, name, declared, typed, shape))
    for one, other in _EXCLUSIVE:
        given = changes.get(f"controller.{one}", "").strip() not in ("", "none")
        if given and f"controller.{other}" not in changes:
            tables["controller"].pop(other, None)
    if not faults:
        if case.controller is None and not tables.get("controller"):
            tables.pop("controller", None)
        built, faults = assemble(tables, {}, case.history)
        if built is not None and not faults:
            return replace(built, folder=case.folder)
    raise InputError(_told_together(faults, case, shape))


def _told_together(faults: list[Problem], case: Case, shape: str | None) -> list[Problem]:
    """Faults of a change of shape say which keys it needs beside it."""
    if shape == shape_name(case.plant.process) or shape is None:
        return faults
    return [
        replace(each, mend=f"{each.mend}; the shape {shape} needs it set together with plant.shape")
        if each.what == "is missing" and each.key.startswith("plant.")
        else each
        for each in faults
    ]


def _reshape(case: Case, changes: Mapping[str, str]) -> tuple[str | None, dict[str, Values]]:
    """The plant's shape after the changes, and the tables without what does not carry over."""
    tables, present = table_values(case), shape_name(case.plant.process)
    shape = present
    if "plant.shape" in changes:
        word = changes["plant.shape"].strip().strip("\"'")
        shape = word if word in PROCESSES else (None if word in ("", "none") else present)
    elif changes.get("plant.formula", "").strip():
        shape = "formula"
    elif changes.get("plant.blocks", "").strip():
        shape = "blocks"
    if shape != present and present is not None:
        kept = process_keys(shape) if shape else {}
        has_load = case.plant.load is not None
        for name in ("shape", *process_keys(present)):
            if name not in kept and not (name == "time_unit" and has_load):
                tables["plant"].pop(name, None)
    if shape != present and shape not in (None, *WITH_TIME_UNIT):
        tables["plant"]["shape"] = shape
    return shape, tables


def _set(
    values: Values, table: str, key: str, declared: Quantity, typed: str, shape: str | None
) -> list[Problem]:
    """Puts typed text into the values of a table; the faults found."""
    try:
        typed.encode()
        words = typed.strip()
        optional = defaults_of(table, shape).get(key, None) is None
        if not words or (words == "none" and optional and declared.kind not in ("text", "filter")):
            values.pop(key, None)
            if key == "load" and shape not in WITH_TIME_UNIT:
                values.pop("time_unit", None)
        elif (table, key) == ("plant", "shape") and words in WITH_TIME_UNIT:
            values.pop(key, None)
        else:
            values[key] = declared.parse(typed)
    except UnicodeEncodeError:
        what = "has a character that UTF-8 cannot hold"
        return [Problem(what, "type it again", f"{table}.{key}")]
    except InputError as fault:
        return list(fault.at(key=f"{table}.{key}").problems)
    return []


_EXCLUSIVE: Final = (("gain", "proportional_band"), ("proportional_band", "gain"))
"""Controller keys of which setting one means dropping the other."""


def with_settings(case: Case, entry: Revision) -> Case:
    """The case with the settings of a history entry in force again: the way back.

    Raises `InputError` where the entry names no settings.
    """
    if entry.controller is None:
        raise InputError(Problem("names no settings", "choose another entry", "history"))
    return edit_all(case, entry.controller_keys())


# --- another shape -------------------------------------------------------------------------------


def shape_keys(shape: str) -> tuple[str, ...]:
    """The keys that a plant shape cannot do without, in file order."""
    return tuple(i.name for i in dataclasses.fields(PROCESSES[shape]) if i.default is MISSING)


def with_shape(case: Case, shape: str) -> Case:
    """The case with its plant in another shape, as near to the present one as the shapes allow.

    Values of the same name carry over.  slope = gain / time constant and back; a natural period is
    2 pi times the (mean) time constant and back; a vessel's flow / volume, over the loop's ranges,
    is a slope and back; any shape becomes the formula that it is, or one block; a formula or blocks
    give gain or slope, dead time and the slowest stable lag.  What cannot be had so is assumed
    (`assumed_keys` names it): no change of dynamics where there is such a value (one lag, a second
    lag of a tenth, no numerator time), else gain 1, time constant 10 s, volume 1.
    Raises `InputError` for an unknown shape, and for numbers that no other shape can hold.
    """
    if shape == shape_name(case.plant.process):
        return case
    values, _ = _carried(case, _known_shape(shape))
    return replace(case, plant=replace(case.plant, process=PROCESSES[shape](**values)))


def assumed_keys(case: Case, shape: str) -> tuple[str, ...]:
    """The keys that `with_shape` would have to assume: for the screen to point at."""
    if shape == shape_name(case.plant.process):
        return ()
    return tuple(f"plant.{key}" for key in _carried(case, _known_shape(shape))[1])


def _known_shape(shape: str) -> str:
    SHAPE.read(shape)
    return shape


def _carried(case: Case, shape: str) -> tuple[dict[str, Any], list[str]]:
    """Constructor values of the new shape, and which of them are assumed."""
    process, ranges = case.plant.process, case.pv.range.span / case.op.range.span
    known = {} if process is None else _equivalents(process, case.plant.time_unit, ranges)
    values: dict[str, Any] = {}
    assumed: list[str] = []
    for item in dataclasses.fields(PROCESSES[shape]):
        if item.name == "blocks":
            values["blocks"] = (Block(ASSUMED["name"], str(known.get("line", ASSUMED["formula"]))),)
            assumed += [] if process else ["blocks"]
        elif item.name in known:
            values[item.name] = known[item.name]
        elif item.default is MISSING:
            values[item.name] = ASSUMED[item.name]
            assumed.append(item.name)
    time_constant = values.get("time_constant")
    if "second_time_constant" in assumed and isinstance(time_constant, Amount):
        second = Amount(time_constant.value / 10, time_constant.unit)
        values["second_time_constant"] = second
    slope = known.get("slope")
    if "flow" in assumed and isinstance(slope, Amount):
        values["flow"] = Amount(_tidy(slope.value / ranges * values["volume"]), slope.unit)
    if "gain" in assumed and isinstance(slope, Amount) and isinstance(time_constant, Amount):
        # The first lag is assumed, but the ramp it starts with stays the plant's.
        values["gain"] = slope.per_second * time_constant.seconds
    return values, assumed


def _equivalents(process: Process, time_unit: str, ranges: float) -> Values:
    """What a shape says about the keys of the others.

    A formula is in the plant's unit of time; `ranges` is the PV span over the OP span, by which a
    gain in percent becomes one in units.
    """
    if isinstance(process, Blocks):
        whole = process.transfer()
        scaled = whole if time_unit == "s" else whole.with_time_unit(1 / TIME_UNITS[time_unit])
        written: Values = {} if whole.has_delayed_feedback else {"formula": format_formula(scaled)}
        return {**written, **_read_off(whole), "time_unit": time_unit}
    known: Values = {i.name: getattr(process, i.name) for i in dataclasses.fields(process)}
    known["line"] = write_function(process)
    transfer = process.transfer() * (ranges if process.in_percent else 1.0)
    if isinstance(process, Vessel):
        known["slope"] = Amount(
            _tidy(process.flow.value / process.volume * ranges), process.flow.unit
        )
    if isinstance(process, Formula):
        known.update(_read_off(transfer))
    else:
        # The load formula may have its own unit of time already; the plant's is then written in it.
        scaled = (
            transfer if time_unit == "s" else transfer.with_time_unit(1 / TIME_UNITS[time_unit])
        )
        known["formula"], known["time_unit"] = format_formula(scaled), time_unit
    if isinstance(process, Vessel):
        known["line"] = known["formula"]
    if isinstance(process, Oscillating):
        lag = _tidy(process.natural_period.value / (2 * math.pi))
        known["time_constant"] = known["second_time_constant"] = Amount(
            lag, process.natural_period.unit
        )
    lag_time = known.get("time_constant")
    if not isinstance(lag_time, Amount):
        return known
    gain, second = known.get("gain"), known.get("second_time_constant")
    if isinstance(gain, float | int) and "slope" not in known:
        known["slope"] = Amount(_tidy(gain / lag_time.value), f"/{lag_time.unit}")
    if isinstance(process, IntegratingLag):
        known["gain"] = _tidy(process.slope.per_second * lag_time.seconds)
    if "natural_period" not in known:
        other = second.seconds if isinstance(second, Amount) else lag_time.seconds
        mean = lag_time.with_seconds(math.sqrt(lag_time.seconds * other))
        known["natural_period"] = Amount(_tidy(2 * math.pi * mean.value), lag_time.unit)
    return known


def _read_off(transfer: TransferFunction) -> Values:
    """Gain or slope, dead time and slowest stable lag of a formula [s]."""
    known: Values = {"dead_time": Amount(_tidy(transfer.dead_time), "s")}
    gain, slope = transfer.gain().value, transfer.slope().value
    if gain:
        known["gain"] = _tidy(gain)
    if slope:
        known["slope"] = Amount(_tidy(slope), "/s")
    if transfer.has_delayed_feedback:
        return known
    decaying = [-pole.real for pole in transfer.poles() if pole.real < 0]
    if decaying:
        known["time_constant"] = Amount(_tidy(1 / min(decaying)), "s")
    return known


def _tidy(value: float) -> float:
    """Four significant digits: a derived value is a starting point, to be read and edited."""
    if not math.isfinite(value):
        what = "cannot take over numbers so large or so small"
        raise InputError(Problem(what, "set the new shape's keys by hand", "plant.shape"))
    return float(f"{value:.4g}")
