"""From raw values, as TOML gives them, to a case: every fault at once, each with its key.

Editing ends here too, so that a value is refused in the same words wherever it comes from.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime
from typing import Any, Final

from workbench.case.family import FamilyTable
from workbench.case.structures import CompensationTable, FeedforwardTable, InnerTable
from workbench.case.tables import (
    AT_MEND,
    PROCESSES,
    TABLES,
    Case,
    OpTable,
    PlantTable,
    PvTable,
    Revision,
    Values,
    defaults_of,
    known_keys,
    process_keys,
    spelling,
    unknown_key,
    values_of,
)
from workbench.errors import InputError, Problem
from workbench.model.blocks import Block, Blocks, format_blocks, parse_blocks
from workbench.model.pid import Controller
from workbench.model.plant import SHAPES, Formula
from workbench.sim.scenario import Scenario
from workbench.sim.valve import Valve
from workbench.units import (
    MISSING,
    TIME_UNITS,
    Amount,
    Quantity,
    harmless,
    nearest,
    one_of,
    quantities,
    shown,
)

MOST_FAULTS: Final = 200
"""Faults listed for one file; more would be noise."""


def read_tables(raw: Mapping[str, object]) -> tuple[Case | None, list[Problem]]:
    """A case from tables of raw values as TOML gives them, `format` left out, and every fault.

    Keys of faults are dotted, `history[2].gain` for the second entry; the case is `None` where
    there is any fault.
    """
    faults: list[Problem] = []
    tables: dict[str, Values] = {}
    faulted: dict[str, set[str]] = {}
    for name, table in raw.items():
        if len(faults) > MOST_FAULTS:
            break
        if name == "history":
            continue
        if name not in TABLES:
            meant = nearest(name, [*TABLES, "history", "format"]) if len(name) <= 60 else ""
            mend = f"did you mean {meant!r}?" if meant else f"the tables are {one_of([*TABLES])}"
            kind = "table" if isinstance(table, dict | list) else "key"
            faults.append(Problem(f"is not a known {kind}", mend, harmless(name, 60)))
        elif not isinstance(table, dict):
            what = f"must be one table, not {shown(table)}"
            faults.append(Problem(what, f"write [{name}] once, its keys below it", name))
            faulted[name] = {"*"}
        else:
            tables[name], faulted[name], found = _read_table(name, table)
            faults.extend(found)
    history, found = _read_history(raw.get("history", []))
    faults.extend(found)
    if not tables.get("loop") and "loop" not in faulted:
        tables["loop"] = {}
    case, found = assemble(tables, faulted, history)
    faults.extend(found)
    return (None if faults else case), faults


def _read_table(name: str, raw: Mapping[str, object]) -> tuple[Values, set[str], list[Problem]]:
    """The values of one table, the keys that are faulty, and the faults."""
    faults: list[Problem] = []
    values: Values = {}
    faulted: set[str] = set()
    shape: str | None = None
    every: dict[str, Quantity] = {}
    if name == "plant":
        shape, every = _shape_in(raw)
        if every and "shape" not in raw:
            faults.append(Problem("is missing", f"give {one_of(list(SHAPES))}", "plant.shape"))
            faulted.add("shape")
        if shape == Blocks.shape:
            raw, values, faults = _read_drawing(raw)
            faulted |= {"blocks"} if faults else set()
        if "blocks" in raw:
            raw = {key: item for key, item in raw.items() if key != "blocks"}
            mend = "write [[plant.block]] before the name and formula of each block"
            faults.append(Problem("is how an edit writes it", mend, "plant.blocks"))
    known = {**every, **known_keys(name, shape, "load" in raw)}
    defaults = defaults_of(name, shape)
    for key, item in raw.items():
        if len(faults) > MOST_FAULTS:
            break
        declared = known.get(key)
        if declared is None:
            listed = [f"{name}.{each}" for each in known]
            faults.append(unknown_key(f"{name}.{key}", listed, shape))
            continue
        if item == "none" and defaults.get(key) is None and declared.kind in _OPTIONAL_KINDS:
            continue
        try:
            values[key] = declared.read(item)
        except InputError as fault:
            faulted.add(key)
            faults.extend(fault.at(key=f"{name}.{key}").problems)
    return values, faulted, faults


_OPTIONAL_KINDS: Final = ("duration", "rate", "number", "choice")
"""Kinds that may say "none" for "not there", as the same words may after `--set`."""


def _shape_in(raw: Mapping[str, object]) -> tuple[str | None, dict[str, Quantity]]:
    """The shape of a raw plant table; where it cannot be known, every shape's keys.

    A key is then read without asking whether it belongs: it may be right.
    """
    kept = {"formula": Formula.shape, "block": Blocks.shape}
    word = raw.get("shape", next((kept[key] for key in kept if key in raw), None))
    if isinstance(word, str) and word in PROCESSES:
        return word, {}
    every = {key: each for kind in SHAPES.values() for key, each in quantities(kind).items()}
    del every["time_unit"]
    return None, every if word is not None or set(every) & set(raw) else {}


def _read_drawing(raw: Mapping[str, object]) -> tuple[dict[str, object], Values, list[Problem]]:
    """The plant's blocks out of a raw plant table: the rest, the blocks as one line, the faults."""
    rest = {key: item for key, item in raw.items() if key not in ("block", "load_before")}
    tables, given = raw.get("block"), {"load_before": raw.get("load_before", "")}
    if not isinstance(tables, list) or not all(isinstance(each, dict) for each in tables):
        what = "is missing" if tables is None else f"must be tables, not {shown(tables)}"
        mend = "write [[plant.block]] before the name and formula of each block"
        return rest, {}, [Problem(what, mend, "plant.block")]
    faults: list[Problem] = []
    values, _, found = _read_keys(given, quantities(Blocks))
    faults += [replace(each, key=f"plant.{each.key}") for each in found]
    blocks = []
    for number, item in enumerate(tables, 1):
        if len(faults) > MOST_FAULTS:
            break
        keys, bad, found = _read_keys(item, quantities(Block))
        keys = {key: value.strip() for key, value in keys.items() if isinstance(value, str)}
        made, more = _build(Block, keys, bad)
        faults += [replace(p, key=f"plant.block[{number}].{p.key}") for p in (*found, *more)]
        blocks.append(made)
    if faults:
        return rest, {}, faults
    unit = raw.get("time_unit")
    time_unit = unit if isinstance(unit, str) and unit in TIME_UNITS else "s"
    try:
        drawn = Blocks(tuple(blocks), time_unit, str(values["load_before"]).strip())
    except InputError as fault:
        return rest, {}, [replace(p, key=f"plant.{p.key or 'block'}") for p in fault.problems]
    return rest, {"blocks": format_blocks(drawn)}, []


def _read_keys(
    raw: Mapping[str, object], known: Mapping[str, Quantity]
) -> tuple[Values, set[str], list[Problem]]:
    """The values of raw keys, the faulty keys, and the faults with their bare key."""
    values: Values = {}
    faulted: set[str] = set()
    faults: list[Problem] = []
    for key, item in raw.items():
        declared = known.get(key)
        if declared is None:
            meant = nearest(key, list(known)) if len(key) <= 60 else ""
            mend = f"did you mean {meant!r}?" if meant else f"use {one_of(list(known))}"
            faults.append(Problem("is not a known key", mend, harmless(key, 60)))
            continue
        try:
            values[key] = declared.read(item)
        except InputError as fault:
            faulted.add(key)
            faults.extend(fault.at(key=key).problems)
    return values, faulted, faults


def _read_history(raw: object) -> tuple[tuple[Revision, ...], list[Problem]]:
    if not isinstance(raw, list):
        what = f"must be [[history]] tables, not {shown(raw)}"
        return (), [Problem(what, "write [[history]] before each entry", "history")]
    entries: list[Revision] = []
    faults: list[Problem] = []
    for number, item in enumerate(raw, 1):
        if len(faults) > MOST_FAULTS:
            break
        where = f"history[{number}]"
        if not isinstance(item, dict):
            what = f"must be a table, not {shown(item)}"
            faults.append(Problem(what, "write [[history]] before each entry", where))
            continue
        entry, found = read_entry(item)
        faults.extend(replace(each, key=f"{where}.{each.key}") for each in found)
        if entry is not None:
            entries.append(entry)
    return tuple(entries), faults


def read_entry(raw: Mapping[str, object]) -> tuple[Revision | None, list[Problem]]:
    """A history entry from raw values as TOML gives them, and every fault with its bare key."""
    own, settings = quantities(Revision), quantities(Controller)
    faults: list[Problem] = []
    faulted: set[str] = set()
    values: dict[str, Any] = {}
    chosen: Values = {}
    for key, item in raw.items():
        declared = own.get(key) or settings.get(key)
        if key == "at":
            if isinstance(item, datetime):
                values["at"] = item
            else:
                faults.append(Problem(f"must be a date and time, not {shown(item)}", AT_MEND, key))
                faulted.add(key)
        elif declared is None:
            meant = nearest(key, ["at", *own, *settings]) if len(key) <= 60 else ""
            mend = f"did you mean {meant!r}?" if meant else "leave it out"
            faults.append(Problem("is not a known key", mend, harmless(key, 60)))
        else:
            try:
                (values if key in own else chosen)[key] = declared.read(item)
            except InputError as fault:
                faulted.add(key)
                faults.extend(fault.at(key=key).problems)
    if chosen or faulted & set(settings):
        values["controller"], found = _build(Controller, chosen, faulted)
        faults.extend(found)
    if "at" not in values and "at" not in faulted:
        faults.append(Problem("is missing", AT_MEND, "at"))
        faulted.add("at")
    entry, found = _build(Revision, values, faulted)
    faults.extend(found)
    return (None if faults else entry), faults


def entry_values(entry: Revision) -> dict[str, Any]:
    """What a history table holds, in file order: `at`, then raw values for TOML.

    Form, gain or band, integral and derivative are always said; the rest where not at default.
    """
    own = quantities(Revision)
    said = values_of(entry)
    written: dict[str, Any] = {"at": entry.at}
    for key, declared in own.items():
        if key == "max_sensitivity" and entry.controller is not None:
            written.update(_settings_written(entry.controller))
        if key in said:
            written[key] = declared.write(said[key])
    return written


def _settings_written(controller: Controller) -> dict[str, Any]:
    said = values_of(controller)
    for key in ("form", "integral", "derivative"):
        said[key] = getattr(controller, key)
    known = quantities(Controller)
    return {key: declared.write(said[key]) for key, declared in known.items() if key in said}


def assemble(
    tables: Mapping[str, Values],
    faulted: Mapping[str, set[str]],
    history: tuple[Revision, ...],
) -> tuple[Case | None, list[Problem]]:
    """A case from values, and what they do not say together."""
    built: dict[str, Any] = {"history": history}
    faults: list[Problem] = []
    for name, values in tables.items():
        bad = faulted.get(name, set())
        made, found = (
            _build_plant(values, bad) if name == "plant" else _build(TABLES[name], values, bad)
        )
        built[name] = made
        faults.extend(replace(each, key=f"{name}.{each.key}") for each in found)
    if faults or any(made is None for made in built.values()) or "loop" not in built:
        return None, faults
    return Case(**built), faults


def _build_plant(values: Values, faulted: set[str]) -> tuple[PlantTable | None, list[Problem]]:
    given = dict(values)
    word = given.pop("shape", None)
    said = [each for each in ("formula", "blocks") if each in {*given, *faulted}]
    shape = str(word) if word else (said[0] if said else None)
    if "shape" in faulted:
        return None, []
    faults: list[Problem] = []
    process: Any = None
    if shape == Blocks.shape:
        process, faults = _build_blocks(given.pop("blocks", None), given, faulted)
    elif shape is not None:
        own = {key: given.pop(key) for key in quantities(SHAPES[shape]) if key in given}
        process, faults = _build(SHAPES[shape], own, faulted)
    made, found = _build(PlantTable, {**given, "process": process}, faulted)
    return (None if faults else made), [*faults, *found]


def _build_blocks(
    line: object, given: Values, faulted: set[str]
) -> tuple[Blocks | None, list[Problem]]:
    if "blocks" in faulted:
        return None, []
    if line is None:
        return None, [_missing("blocks", process_keys(Blocks.shape)["blocks"])]
    unit = given.get("time_unit", "s")
    try:
        return parse_blocks(str(line), str(unit)), []
    except InputError as fault:
        return None, list(fault.at(key="blocks").problems)


def _build(kind: type, values: Mapping[str, Any], faulted: set[str]) -> tuple[Any, list[Problem]]:
    """An instance of a table and the faults; `None` where there is a fault or one was known.

    A fault of several keys together is only told when none of them is faulty by itself, and the
    fields found faulty are put aside until no further fault shows.
    """
    declared = quantities(kind)
    found = [
        _missing(spelling(item.name), declared[item.name])
        for item in dataclasses.fields(kind)
        if item.name in declared
        and item.default is MISSING
        and spelling(item.name) not in {*values, *faulted}
    ]
    bad = {*faulted, *(each.key for each in found)}
    names = {spelling(item.name): item.name for item in dataclasses.fields(kind)}
    while True:
        stand_in = {key: value for key, value in ASSUMED.items() if key in bad & set(names)}
        given = {**stand_in, **{key: each for key, each in values.items() if key not in bad}}
        try:
            made = kind(**{names[key]: value for key, value in given.items()})
        except InputError as fault:
            fresh = [replace(p, key=spelling(p.key)) for p in fault.problems]
            found.extend(
                each
                for each in fresh
                if each.key not in bad and not bad & set(TOLD_WITH.get((kind, each.key), ()))
            )
            if {each.key for each in fresh} <= bad:
                return None, found
            bad |= {each.key for each in fresh}
        else:
            return (None if bad & set(names) else made), found


def _missing(key: str, declared: Quantity) -> Problem:
    example = declared.example or {"duration": "40 s"}.get(declared.kind, "")
    if declared.kind == "choice":
        return Problem("is missing", f"give {one_of(declared.choices)}", key)
    return Problem(
        "is missing",
        f"give the {declared.meaning}" + (f', like "{example}"' if example else ""),
        key,
    )


ASSUMED: Final[dict[str, Any]] = {
    "at": datetime.fromisoformat("2000-01-01T00:00:00+00:00"),
    "tag": "-",
    "who": "-",
    "kind": "observed",
    "gain": 1.0,
    "slope": Amount(0.1, "/s"),
    "volume": 1.0,
    "flow": Amount(0.1, "/s"),
    "time_constant": Amount(10, "s"),
    "second_time_constant": Amount(1, "s"),
    "numerator_time": Amount(0, "s"),
    "natural_period": Amount(60, "s"),
    "damping": 0.7,
    "lags": 1.0,
    "formula": "1/(10 s + 1)",
    "name": "process",
}
"""Values for required keys that are not known: a start for editing, a stand-in while checking."""

TOLD_WITH: Final[dict[tuple[type, str], tuple[str, ...]]] = {
    (PvTable, "high"): ("low",),
    (PvTable, "start"): ("low", "high"),
    (OpTable, "high"): ("low",),
    (OpTable, "min"): ("low", "high"),
    (OpTable, "max"): ("low", "high", "min"),
    (OpTable, "start"): ("low", "high", "min", "max"),
    (PlantTable, "load"): ("time_unit",),
    (Formula, "formula"): ("time_unit",),
    (FamilyTable, "plants"): ("time_unit",),
    (Controller, "gain"): ("form", "proportional_band"),
    (Controller, "proportional_band"): ("gain",),
    (Controller, "integral"): ("form",),
    (Controller, "computing_delay"): ("scan",),
    (Controller, "derivative_filter"): ("form", "gain", "derivative"),
    (Controller, "execution"): ("integral",),
    (Controller, "bias"): ("integral",),
    (CompensationTable, "model"): ("time_unit",),
    (FeedforwardTable, "lead"): ("lag",),
    (InnerTable, "plant"): ("time_unit",),
    (InnerTable, "gain"): ("form",),
    (InnerTable, "integral"): ("form",),
    (InnerTable, "derivative_filter"): ("form", "gain", "derivative"),
    (InnerTable, "high"): ("low",),
    (InnerTable, "min"): ("low", "high"),
    (InnerTable, "max"): ("low", "high", "min"),
    (InnerTable, "start"): ("low", "high", "min", "max"),
    (Valve, "table"): ("characteristic",),
    (Valve, "slip_jump"): ("stick_slip",),
    (Valve, "signal_high"): ("signal_low",),
    (Scenario, "load_time"): ("load_shape",),
    (Scenario, "load_record"): ("load_shape", "load_file", "load_column"),
    (Scenario, "load_column"): ("load_file",),
    (Scenario, "automatic_at"): ("manual_at",),
    (Scenario, "new_gain"): ("settings_at",),
    (Scenario, "new_integral"): ("settings_at",),
    (Scenario, "new_derivative"): ("settings_at",),
    (Scenario, "setpoint_at"): ("until",),
    (Scenario, "load_at"): ("until",),
}
"""For faults found at a key by looking at several: the other keys looked at."""
