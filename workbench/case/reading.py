"""From raw values, as TOML gives them, to a case: every fault at once, each with its key.

Editing ends here too, so that a value is refused in the same words wherever it comes from.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from dataclasses import replace
from datetime import datetime
from typing import Any, Final

from workbench.case.tables import (
    AT_MEND,
    TABLES,
    Case,
    OpTable,
    PlantTable,
    PvTable,
    Revision,
    Values,
    defaults_of,
    known_keys,
    spelling,
    unknown_key,
    values_of,
)
from workbench.errors import InputError, Problem
from workbench.model.pid import Controller
from workbench.model.plant import SHAPES, Formula
from workbench.sim.scenario import Scenario
from workbench.units import (
    MISSING,
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
    word = raw.get("shape", "formula" if "formula" in raw else None)
    if isinstance(word, str) and word in SHAPES:
        return word, {}
    every = {key: each for kind in SHAPES.values() for key, each in quantities(kind).items()}
    del every["time_unit"]
    return None, every if word is not None or set(every) & set(raw) else {}


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
    shape = str(word) if word else ("formula" if {"formula"} & (set(given) | faulted) else None)
    if "shape" in faulted:
        return None, []
    faults: list[Problem] = []
    process = None
    if shape is not None:
        own = {key: given.pop(key) for key in quantities(SHAPES[shape]) if key in given}
        process, faults = _build(SHAPES[shape], own, faulted)
    made, found = _build(PlantTable, {**given, "process": process}, faulted)
    return (None if faults else made), [*faults, *found]


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
}
"""Values for required keys that are not known: a start for editing, a stand-in while checking."""

TOLD_WITH: Final[dict[tuple[type, str], tuple[str, ...]]] = {
    (PvTable, "high"): ("low",),
    (PvTable, "start"): ("low", "high"),
    (OpTable, "high"): ("low",),
    (OpTable, "min"): ("low", "high"),
    (OpTable, "max"): ("low", "high", "min"),
    (OpTable, "start"): ("low", "high", "min", "max"),
    (OpTable, "valve_closes_on_rise"): ("meaning",),
    (PlantTable, "load"): ("time_unit",),
    (Formula, "formula"): ("time_unit",),
    (Controller, "gain"): ("form", "proportional_band"),
    (Controller, "proportional_band"): ("gain",),
    (Controller, "integral"): ("form",),
    (Controller, "computing_delay"): ("scan",),
    (Controller, "derivative_filter"): ("form", "gain", "derivative"),
    (Scenario, "setpoint_at"): ("until",),
    (Scenario, "load_at"): ("until",),
}
"""For faults found at a key by looking at several: the other keys looked at."""
