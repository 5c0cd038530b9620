"""The table of a case for the plants that its loop must put up with, beside the nominal one."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, fields
from typing import Any, Final, TypeVar

from workbench.errors import InputError, Problem, problem
from workbench.model.plant import Shape, read_function
from workbench.model.variation import Variation
from workbench.units import TIME_UNITS, check_fields, harmless, one_of, plain, quantity

_MOST: Final = 200
"""Points or plants of one list."""
Item = TypeVar("Item")
_RATIOS: Final = tuple(field.name for field in fields(Variation))


def _tolerance(of: str) -> Any:
    return quantity(
        f"by how much {of} may differ, either way",
        "number",
        "%",
        low=0,
        below=100,
        default=0.0,
        example="30",
    )


@dataclass(frozen=True)
class FamilyTable:
    """Stated tolerances, operating points and further plants; without any there is no family."""

    gain: float = _tolerance("the plant's gain or slope")
    dead_time: float = _tolerance("its dead time")
    lag: float = _tolerance("all its time constants together")
    points: str | None = quantity(
        "operating points on one line: a name, and ratios to the plant above",
        "text",
        default=None,
        example="winter: gain=0.8, lag=1.2; summer: gain=1.3, dead_time=0.8",
        longest=20_000,
    )
    plants: str | None = quantity(
        "further plants on one line, a name before each, written as the plant itself may be",
        "text",
        "PV/OP",
        default=None,
        example="second test: first-order gain=2.1, time_constant=44 s, dead_time=7 s",
        longest=100_000,
    )
    time_unit: str = quantity(
        "unit of s in the formulas of these plants",
        "choice",
        default="s",
        choices=tuple(TIME_UNITS),
    )
    drawn: float = quantity(
        "number of plants drawn within the tolerances", "number", low=0, high=500, default=60.0
    )

    def __post_init__(self) -> None:
        check_fields(self)
        faults = list(self._faults())
        if faults:
            raise InputError(faults)

    @property
    def is_there(self) -> bool:
        """There is more than the nominal plant."""
        return bool(self.gain or self.dead_time or self.lag or self.points or self.plants)

    def operating_points(self) -> dict[str, Variation]:
        """Name -> how the plant differs there."""
        return _listed(self.points, _variation, "points")

    def further_plants(self) -> dict[str, Shape]:
        """Name -> plant."""
        return _listed(self.plants, lambda text: read_function(text, self.time_unit), "plants")

    def _faults(self) -> Iterator[Problem]:
        for read in (self.operating_points, self.further_plants):
            try:
                read()
            except InputError as fault:
                yield from fault.problems
        if self.drawn != int(self.drawn):
            yield Problem(f"{plain(self.drawn)} is not a whole number", "give 0 to 500", "drawn")


def _listed(line: str | None, read: Callable[[str], Item], key: str) -> dict[str, Item]:
    """`name: text; name: text` as a dict.  Raises `InputError` about the key."""
    found: dict[str, Item] = {}
    parts = [part.strip() for part in (line or "").split(";")]
    for part in filter(None, parts):
        name, colon, text = (each.strip() for each in part.partition(":"))
        if not colon or not name or not text:
            mend = "write a name, a colon and what it stands for; a semicolon before the next"
            raise problem(f"{harmless(part, 40)!r} has no name", mend, key=key)
        if name in found:
            raise problem(f"there are two named {harmless(name, 40)!r}", "rename one", key=key)
        if len(found) == _MOST:
            raise problem(f"holds more than {_MOST}", "leave some out", key=key)
        try:
            found[name] = read(text)
        except InputError as fault:
            raise InputError(
                Problem(f"{harmless(name, 40)}: {p.what}", p.mend, key) for p in fault.problems
            ) from None
    return found


def _variation(text: str) -> Variation:
    given: dict[str, float] = {}
    for pair in text.split(","):
        name, equals, value = (each.strip() for each in pair.partition("="))
        if not equals or name not in _RATIOS:
            what = f"{harmless(pair.strip(), 40)!r} is no ratio"
            raise problem(what, f"write {one_of(list(_RATIOS))}, an equals sign and a ratio")
        try:
            ratio = float(value)
        except ValueError:
            ratio = 0.0
        if not 0.001 <= ratio <= 1000.0:
            what = f"{harmless(value, 40)!r} is not a ratio from 0.001 to 1000"
            raise problem(what, "write a number; 1 is no difference")
        given[name] = ratio
    return Variation(**given)
