"""Cases for the tests of this room: one by hand, and any number at random."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path
from typing import Any, Final

from hypothesis import strategies as st

from workbench.case.case import Case, LoopTable, OpTable, PlantTable, PvTable, Revision
from workbench.errors import InputError
from workbench.model.blocks import Block, Blocks
from workbench.model.pid import Controller
from workbench.model.plant import SHAPES, FirstOrder
from workbench.sim.scenario import Scenario
from workbench.units import MISSING, Amount, Quantity, Value, quantities

DATA: Final = Path(__file__).resolve().parents[1] / "data" / "cases"

DRYER: Final = DATA / "dryer.toml"
"""A file kept by hand, odd spacing, quoted key, comments and all."""

DRAWN: Final = DATA / "blocks.toml"
"""A file whose plant is drawn as blocks, kept by hand."""

DOTTED: Final = DATA / "dotted.toml"
"""A file of dotted keys, an inline table and a history list."""


def a_case(**changes: Any) -> Case:
    """A case with a plant, a controller and one history entry."""
    case = Case(
        LoopTable("TIC-307"),
        plant=PlantTable(FirstOrder(1.8, Amount(40, "s"), Amount(6, "s"))),
        controller=Controller(gain=1.1, integral=Amount(32, "s"), scan=Amount(1, "s")),
        history=(an_entry(),),
    )
    return replace(case, **changes)


def an_entry(**changes: Any) -> Revision:
    """An entry that put settings in force."""
    at = datetime(2026, 11, 30, 14, 5, tzinfo=timezone(timedelta(hours=1)))
    settings = Controller(gain=0.9, integral=Amount(40, "s"))
    return replace(Revision(at, "mk", "installed", "cycling", settings), **changes)


FORMULAS: Final = ("1/(3 s + 1)", "-2 exp(-6 s)/(40 s + 1)^2", "1e-3/s", "2/((s+1)(5 s+1))")


def numbers(declared: Quantity) -> st.SearchStrategy[float]:
    """Numbers that a quantity accepts."""
    low = declared.low if declared.low is not None else declared.above
    high = declared.high if declared.high is not None else declared.below
    least, most = (-1e6 if low is None else low), (1e6 if high is None else high)
    any_number = st.floats(least, most, allow_subnormal=False)
    round_number = st.integers(round(least), round(min(most, least + 200))).map(float)
    return st.one_of(any_number, round_number).filter(
        lambda n: (
            n not in (declared.above, declared.below)
            and least <= n <= most
            and not (declared.nonzero and n == 0)
            # So small that its inverse is no number.
            and (n == 0 or abs(n) > 1e-9)
        )
    )


def amounts(declared: Quantity, units: tuple[str, ...]) -> st.SearchStrategy[Amount]:
    """Amounts that a quantity accepts."""
    return st.builds(
        Amount, numbers(replace(declared, high=declared.high or 1e4)), st.sampled_from(units)
    )


def values(declared: Quantity) -> st.SearchStrategy[Value]:
    """Values that a quantity accepts."""
    match declared.kind:
        case "number":
            return numbers(declared)
        case "flag":
            return st.booleans()
        case "choice":
            return st.sampled_from(declared.choices)
        case "text" if declared.longest == 10_000:
            return st.sampled_from(FORMULAS)
        case "text":
            return st.text(max_size=min(30, declared.longest))
        case "filter":
            return st.one_of(st.none(), numbers(declared), amounts(declared, ("s", "min")))
        case _:
            return amounts(declared, UNITS.get(declared.kind, ("s", "min", "h")))


UNITS: Final = {
    "rate": ("/s", "/min", "/h"),
    "integral": ("s", "min", "min/repeat", "repeats/min", "1/s", "1/min"),
}


@st.composite
def tables(draw: st.DrawFn, /, kind: type, **given: Any) -> Any:
    """A table with some of its keys set."""
    fields = {item.name: item for item in kind.__dataclass_fields__.values()}  # type: ignore[attr-defined]
    chosen = dict(given)
    for name, declared in quantities(kind).items():
        if name not in given and (fields[name].default is MISSING or draw(st.booleans())):
            chosen[name] = draw(values(declared))
    return _built(kind, chosen)


def _built(kind: type, chosen: dict[str, Any]) -> Any:
    """The table, without the keys that do not go together."""
    while True:
        try:
            return kind(**chosen)
        except InputError as fault:
            wrong = [each.key for each in fault.problems if each.key in chosen]
            # What is wrong because it is left out is right with nothing else there.
            for key in {*wrong} or list(chosen)[-1:]:
                del chosen[key]


@st.composite
def controllers(draw: st.DrawFn) -> Controller:
    band = draw(st.booleans())
    gain = draw(st.floats(0.01, 50))
    given = {
        "proportional_band" if band else "gain": gain,
        "gain" if band else "proportional_band": None,
    }
    made = draw(tables(Controller, **given))
    assert isinstance(made, Controller)
    return made


@st.composite
def revisions(draw: st.DrawFn) -> Revision:
    zone = timezone(timedelta(minutes=draw(st.integers(-14 * 60, 14 * 60))))
    at = draw(st.datetimes(datetime(1990, 1, 1), datetime(2090, 1, 1), timezones=st.just(UTC)))
    settings = draw(st.one_of(st.none(), controllers()))
    made = draw(tables(Revision, at=at.astimezone(zone), controller=settings))
    assert isinstance(made, Revision)
    return made


@st.composite
def drawings(draw: st.DrawFn) -> Blocks:
    """Blocks in series, some with another beside them, perhaps with one around two of them."""
    count = draw(st.integers(1, 4))
    path = [f"{draw(st.sampled_from(['valve', 'Kessel 2', 'x-y']))} {n}" for n in range(count)]
    formulas = st.sampled_from([*FORMULAS[:2], "first-order gain=2, time_constant=3 min", "0.5"])
    blocks = [Block(name, draw(formulas)) for name in path]
    for number, name in enumerate(path):
        if draw(st.booleans()):
            sign = draw(st.sampled_from(["+", "-"]))
            # 7 adds up with none of the formulas to nothing.
            blocks.append(Block(f"leak {number}", "7", beside=name, sign=sign))
    if draw(st.booleans()):
        blocks.append(Block("slave", "0.01", around=f"{path[0]} to {path[-1]}"))
    load_before = draw(st.sampled_from(["", *path]))
    return Blocks(tuple(blocks), draw(st.sampled_from(["s", "min", "h"])), load_before)


@st.composite
def cases(draw: st.DrawFn) -> Case:
    """Any case that can be kept."""
    tag = draw(st.text(min_size=1, max_size=30).filter(lambda text: text.strip() != ""))
    shape = draw(st.one_of(st.none(), st.sampled_from([*SHAPES, "blocks"])))
    given = {"lags": 3.0} if shape == "equal-lags" else {}
    process = None
    if shape is not None:
        process = draw(drawings() if shape == "blocks" else tables(SHAPES[shape], **given))
    return Case(
        draw(tables(LoopTable, tag=tag)),
        draw(tables(PvTable)),
        draw(tables(OpTable)),
        draw(tables(PlantTable, process=process)),
        draw(st.one_of(st.none(), controllers())),
        draw(tables(Scenario)),
        tuple(draw(st.lists(revisions(), max_size=3))),
    )
