"""The tables of a case, frozen dataclasses of declared quantities, and the keys they answer to.

What a table refuses by itself is said here; how a case is read and edited, in `reading.py` and
`case.py`.
"""

from __future__ import annotations

import dataclasses
import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field, replace
from datetime import date, datetime
from typing import Any, ClassVar, Final

from workbench.case.family import FamilyTable
from workbench.case.ranges import Limited, Ranged, outside
from workbench.case.structures import CompensationTable, FeedforwardTable, InnerTable
from workbench.case.tags import KINDS, kind_of
from workbench.errors import InputError, Problem
from workbench.model.blocks import Blocks, format_blocks
from workbench.model.formula import parse_formula
from workbench.model.pid import Controller
from workbench.model.plant import SHAPES, Formula, Shape
from workbench.model.transfer import TransferFunction
from workbench.sim.instruments import Measurement
from workbench.sim.scenario import Scenario
from workbench.sim.valve import Valve
from workbench.units import (
    MISSING,
    TIME_UNITS,
    Amount,
    Quantity,
    Value,
    check_fields,
    harmless,
    nearest,
    one_of,
    quantities,
    quantity,
)

Values = dict[str, Value]
"""Keys of one table, as the file spells them, and their values; keys left at default are out."""

# --- the tables ----------------------------------------------------------------------------------


class _Table:
    """What every table shares: the constructor's check of each field, then of fields together."""

    def __post_init__(self) -> None:
        check_fields(self)
        faults = list(self._faults())
        if faults:
            raise InputError(faults)

    def _faults(self) -> Iterator[Problem]:
        yield from ()


@dataclass(frozen=True)
class LoopTable(_Table):
    """Which loop this is."""

    tag: str = quantity("loop tag", "text", example="TIC-307", longest=60)
    service: str = quantity("what the loop controls", "text", default="")
    area: str = quantity("area of the site", "text", default="")
    kind: str | None = quantity(
        "kind of loop; left out: what the tag's ISA-5.1 letters tell",
        "choice",
        default=None,
        choices=KINDS,
    )
    safety_related: bool = quantity("whether safety depends on the loop", "flag", default=False)
    notes: str = quantity("notes", "text", default="", longest=2000)

    @property
    def kind_told(self) -> str:
        """The kind of loop, stated or told by the tag; nothing where neither tells."""
        return self.kind or kind_of(self.tag)

    def _faults(self) -> Iterator[Problem]:
        if not self.tag.strip():
            yield Problem("is blank", 'give the loop tag, like "TIC-307"', "tag")


@dataclass(frozen=True)
class PvTable(Ranged, _Table):
    """The process variable: its instrument range and operating point, in its own unit."""

    unit: str = quantity("engineering unit of PV", "text", default="%", example="degC", longest=20)
    low: float = quantity("PV at 0 % of span", "number", "PV", default=0.0)
    high: float = quantity("PV at 100 % of span", "number", "PV", default=100.0)
    start: float | None = quantity(
        "PV at the operating point; left out: the middle of the range", "number", "PV", default=None
    )
    filter: Amount | None = quantity(
        "time constant of the first-order filter before the controller",
        "duration",
        low=0,
        default=None,
        example="2 s",
    )
    noise: float = quantity(
        "standard deviation of the measurement noise", "number", "PV", low=0, default=0.0
    )

    def _faults(self) -> Iterator[Problem]:
        yield from self.range_faults()
        yield from outside("start", self.start, self.low, self.high, "the range")


@dataclass(frozen=True)
class OpTable(Limited, _Table):
    """The controller output: its range, operating point and limits, in its own unit."""

    unit: str = quantity("engineering unit of OP", "text", default="%", example="%", longest=20)
    low: float = quantity("OP at 0 % of span", "number", "OP", default=0.0)
    high: float = quantity("OP at 100 % of span", "number", "OP", default=100.0)
    start: float | None = quantity(
        "OP at the operating point; left out: the middle of the range", "number", "OP", default=None
    )
    min: float | None = quantity("lower output limit", "number", "OP", default=None)
    max: float | None = quantity("upper output limit", "number", "OP", default=None)
    rate: Amount | None = quantity(
        "fastest change of the output", "rate", "OP", above=0, default=None, example="2 /s"
    )
    meaning: str = quantity(
        "whether OP is the signal to the valve or the valve's opening",
        "choice",
        default="signal",
        choices=("signal", "opening"),
    )
    valve_closes_on_rise: bool = quantity(
        "whether a rising signal closes the valve", "flag", default=False
    )

    def _faults(self) -> Iterator[Problem]:
        yield from self.limit_faults()


Process = Shape | Blocks
"""What a plant can be: a shape with its numbers, a formula, or blocks."""


@dataclass(frozen=True)
class PlantTable(_Table):
    """The plant as the engineer entered it, and the record it came from."""

    process: Process | None = None
    """The path from OP to PV; `None` until a shape is entered or a fit accepted."""
    load: str | None = quantity(
        "formula of the path from the upset to PV; left out: the upset enters at the plant's input",
        "text",
        "PV/upset",
        default=None,
        longest=10_000,
    )
    time_unit: str = quantity(
        "unit of s in the formulas", "choice", default="s", choices=tuple(TIME_UNITS)
    )
    from_: str = quantity("record that the model came from", "text", default="")
    from_sha256: str = quantity("SHA-256 of that record", "text", default="")
    dated: str = quantity(
        "day the plant was as the model says, like the day of its record",
        "text",
        default="",
        example="2026-11-30",
    )

    def __post_init__(self) -> None:
        # One unit serves both formulas, and none is kept where there is no formula to read.
        if isinstance(self.process, Formula | Blocks):
            object.__setattr__(self, "time_unit", self.process.time_unit)
        elif self.load is None:
            object.__setattr__(self, "time_unit", "s")
        super().__post_init__()

    @property
    def process_is_drawn(self) -> bool:
        """The plant is made of blocks."""
        return isinstance(self.process, Blocks)

    def load_path(self) -> TransferFunction | None:
        """From the upset, in its own unit, to PV [PV unit]; `None` where it is the plant itself.

        A plant of blocks has its own where the upset enters before one of them; `load` goes first.
        """
        if self.load is not None:
            return parse_formula(self.load, TIME_UNITS[self.time_unit])
        if isinstance(self.process, Blocks) and self.process.load_before:
            return self.process.load()
        return None

    def _faults(self) -> Iterator[Problem]:
        try:
            if self.process is not None and not isinstance(self.process, Blocks):
                self.process.transfer()
        except InputError as fault:
            # Each number is accepted alone, but together they leave what can be computed.
            yield from fault.at(key="shape").problems
        if self.dated and not _is_day(self.dated):
            yield Problem(
                f"{harmless(self.dated, 40)!r} is not a day", "write it like 2026-11-30", "dated"
            )
        try:
            self.load_path()
        except InputError as fault:
            yield from fault.at(key="load").problems


@dataclass(frozen=True)
class Revision(_Table):
    """One entry of the history: what was put in force, by whom and why; never rewritten."""

    at: datetime
    """When, with its offset from UTC."""
    who: str = quantity("name of whoever makes the entry", "text", example="mk", longest=60)
    kind: str = quantity(
        "what happened",
        "choice",
        choices=("proposed", "installed", "withdrawn", "observed"),
    )
    why: str = quantity("reason for the entry", "text", default="", longest=2000)
    controller: Controller | None = field(default=None)
    """The settings that this entry put in force, in the controller's own form and units."""
    max_sensitivity: float | None = quantity(
        "maximum sensitivity predicted then", "number", low=0, default=None
    )
    load_iae: float | None = quantity(
        "integral of the error after the load step, predicted then",
        "number",
        "PV s",
        low=0,
        default=None,
    )
    setpoint_iae: float | None = quantity(
        "integral of the error after the setpoint step, predicted then",
        "number",
        "PV s",
        low=0,
        default=None,
    )
    phase_margin_deg: float | None = quantity(
        "phase margin predicted then", "number", "deg", default=None
    )
    reference: str = quantity(
        "written approval that the entry rests on, like the number of a management-of-change form",
        "text",
        default="",
    )
    program: str = quantity("version of the program that made the entry", "text", default="")

    INSTALLATION: ClassVar[tuple[str, ...]] = (
        "action",
        "scan",
        "computing_delay",
        "windup",
        "execution",
    )
    """Settings of how the controller is built in; an entry that does not name one leaves it be."""

    def controller_keys(self) -> dict[str, str]:
        """What `edit_all` needs to put this entry's settings back in force.

        Every tuning setting is there, at its default where the entry did not name it; settings of
        the installation (action, scan, computing delay, windup) only where the entry names them.
        """
        if self.controller is None:
            return {}
        named = values_of(self.controller)
        return {
            f"controller.{key}": declared.show(getattr(self.controller, key))
            for key, declared in quantities(Controller).items()
            if key in named or key not in self.INSTALLATION
        }

    def _faults(self) -> Iterator[Problem]:
        offset = self.at.utcoffset()
        if offset is None:
            yield Problem(f"{self.at.isoformat()} has no offset from UTC", AT_MEND, "at")
        elif offset.total_seconds() % 60:
            yield Problem("has an offset that is not in whole minutes", AT_MEND, "at")


def _is_day(words: str) -> bool:
    try:
        return bool(re.fullmatch(r"\d{4}-\d\d-\d\d", words)) and bool(date.fromisoformat(words))
    except ValueError:
        return False


AT_MEND: Final = "write it like 2026-11-30T14:05:00+01:00, without quotes"


@dataclass(frozen=True)
class Case:
    """Everything kept about one loop."""

    loop: LoopTable
    pv: PvTable = PvTable()
    op: OpTable = OpTable()
    plant: PlantTable = PlantTable()
    controller: Controller | None = None
    scenario: Scenario = Scenario()
    history: tuple[Revision, ...] = ()
    valve: Valve = Valve()
    measurement: Measurement = Measurement()
    compensation: CompensationTable = CompensationTable()
    feedforward: FeedforwardTable = FeedforwardTable()
    inner: InnerTable = InnerTable()
    family: FamilyTable = FamilyTable()
    folder: str = field(default="", compare=False)
    """Where the case file lies, and with it the records that it names; not kept in the file."""

    def with_entry(self, entry: Revision) -> Case:
        """The case with one more entry at the end of its history."""
        return replace(self, history=(*self.history, entry))


# --- keys ----------------------------------------------------------------------------------------


def spelling(field_name: str) -> str:
    """The file's spelling of a field: `from_` is `from`."""
    return field_name.rstrip("_")


def values_of(table: Any) -> Values:
    """The keys of one table that are not at their default."""
    return {
        spelling(item.name): getattr(table, item.name)
        for item in dataclasses.fields(table)
        if "quantity" in item.metadata
        and (item.default is MISSING or getattr(table, item.name) != item.default)
    }


def table_values(case: Case) -> dict[str, Values]:
    """Every table's keys that are not at their default, as the file spells them.

    A case without a controller has no table for it.
    """
    tables = {
        "loop": values_of(case.loop),
        "pv": values_of(case.pv),
        "op": values_of(case.op),
        "plant": plant_values(case.plant),
    }
    if case.controller is not None:
        tables["controller"] = values_of(case.controller)
    for name in TABLES:
        if name in tables or name == "controller":
            continue
        tables[name] = values_of(getattr(case, name))
    return tables


def plant_values(plant: PlantTable) -> Values:
    """The keys of the plant table that are not at their default, those of its shape among them."""
    values: Values = {}
    if isinstance(plant.process, Blocks):
        values["blocks"] = format_blocks(plant.process)
    elif plant.process is not None:
        if not isinstance(plant.process, Formula):
            values["shape"] = plant.process.shape
        values.update(values_of(plant.process))
    values.update((key, value) for key, value in values_of(plant).items() if key not in values)
    return values


def shape_name(process: Process | None) -> str | None:
    """The word for the plant's shape; `None` where there is no plant yet."""
    return None if process is None else process.shape


def known_keys(table: str, shape: str | None, has_load: bool) -> dict[str, Quantity]:
    """The keys of a table that can be set, in file order, with what each means."""
    if table != "plant":
        return dict(quantities(TABLES[table]))
    own = {spelling(name): declared for name, declared in quantities(PlantTable).items()}
    known = {"shape": SHAPE}
    known.update(process_keys(shape) if shape else {"formula": _FORMULA})
    if not has_load and shape not in WITH_TIME_UNIT:
        del own["time_unit"]
    # A formula's own time unit keeps its place beside the formula.
    known.update((name, declared) for name, declared in own.items() if name not in known)
    return known


def process_keys(shape: str) -> dict[str, Quantity]:
    """The keys that belong to a plant shape, in file order; blocks are one key, as one line."""
    if shape == Blocks.shape:
        return {"blocks": BLOCKS, "time_unit": quantities(Blocks)["time_unit"]}
    return dict(quantities(SHAPES[shape]))


def defaults_of(table: str, shape: str | None) -> dict[str, object]:
    """The default of each key of a table, `MISSING` where it must be given."""
    kinds: list[type] = [TABLES[table]]
    if table == "plant" and shape:
        kinds.append(PROCESSES[shape])
    return {
        spelling(item.name): item.default for kind in kinds for item in dataclasses.fields(kind)
    }


def unknown_key(key: str, known: Iterable[str], shape: str | None = None) -> Problem:
    """The fault of a dotted key that cannot be set, with the spelling it may have meant."""
    known = list(known)
    table, _, name = key.rpartition(".")
    shown_key = harmless(key, 60)
    if key in NOT_SET:
        return Problem("cannot be set", NOT_SET[key], key)
    if table == "plant" and name == "time_unit":
        return Problem("has no formula to apply to", "leave it out, or give formula or load", key)
    drawn = name in ("block", "load_before") and shape != Blocks.shape
    if table == "plant" and (drawn or any(name in process_keys(each) for each in PROCESSES)):
        if shape is None:
            mend = "set plant.shape with all its keys, or plant.formula"
            return Problem("has no shape to belong to", mend, key)
        wanted = one_of(list(process_keys(shape))).replace(" or ", " and ")
        return Problem(f"does not belong to the shape {shape}", f"that takes {wanted}", key)
    siblings = [each.rpartition(".")[2] for each in known if each.startswith(f"{table}.")]
    same_name = [each for each in known if each.rpartition(".")[2] == name]
    # Within a table the names are compared, for the table's own name would make all look alike.
    near = ""
    if len(key) <= 60:
        near = nearest(name, siblings) if siblings else nearest(key, known)
    if near:
        mend = f"did you mean {(f'{table}.{near}' if siblings else near)!r}?"
    elif same_name:
        mend = f"did you mean {one_of(same_name)}?"
    else:
        mend = f"use {one_of(siblings)}" if siblings else f"the tables are {one_of(list(TABLES))}"
    return Problem("is not a known key", mend, shown_key)


NOT_SET: Final = {
    "format": "the program writes it",
    "history": "entries are only added, by a save with a reason",
}
"""Keys of the file that no edit changes, and why."""

TABLES: Final[dict[str, type]] = {
    "loop": LoopTable,
    "pv": PvTable,
    "op": OpTable,
    "plant": PlantTable,
    "family": FamilyTable,
    "controller": Controller,
    "compensation": CompensationTable,
    "feedforward": FeedforwardTable,
    "inner": InnerTable,
    "valve": Valve,
    "measurement": Measurement,
    "scenario": Scenario,
}
"""Tables of the case file, in file order; the history follows them."""

PROCESSES: Final[dict[str, type[Process]]] = {**SHAPES, Blocks.shape: Blocks}
"""Word of `plant.shape` -> what the plant then is."""

WITH_TIME_UNIT: Final = (Formula.shape, Blocks.shape)
"""Shapes whose formulas are in a unit of time of the plant's own."""

SHAPE: Final = Quantity("shape of the plant", "choice", choices=tuple(PROCESSES))
"""The key `plant.shape`; left out where the plant has `formula`, or blocks."""

BLOCKS: Final = Quantity(
    "blocks of the plant from OP to PV on one line",
    "text",
    "PV/OP",
    example="valve: 1/(2 s + 1); process: 1.8/(40 s + 1)",
    longest=20_000,
)
"""The key `plant.blocks` of an edit; the file has a `[[plant.block]]` table for each of them."""

_FORMULA: Final = quantities(Formula)["formula"]
