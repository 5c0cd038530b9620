"""What a valve makes of its signal: characteristic, stroke time, and the faults that valves have.

Positions are in percent of travel, which a signal from 0 to 100 % of the output's span runs
through.  A healthy valve is not in the way at all: what is at its default is left out, and what is
left out cannot change a bit.  The rest works one after the other, in the order of `FAULTS`, at each
scan; between scans the position is held, so that a stroke shows as a staircase.

The plant is what a test found around the operating point, so the characteristic is counted against
its own slope there: a small move about the operating point acts as its signal says.
"""

from __future__ import annotations

import math
from bisect import bisect_right
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Final

from workbench.errors import InputError, Problem
from workbench.units import Amount, check_fields, quantity

Move = Callable[[float], float]
"""One scan: where it is asked to go [% of travel] -> where it goes."""


@dataclass(frozen=True)
class Valve:
    """A valve between the output and the plant; every default is a healthy linear valve."""

    characteristic: str = quantity(
        "flow for opening",
        "choice",
        default="linear",
        choices=("linear", "equal-percentage", "quick-opening", "table"),
    )
    rangeability: float = quantity(
        "ratio of largest to smallest flow of an equal-percentage valve",
        "number",
        above=1,
        default=50.0,
    )
    table: str = quantity(
        "flow at openings, both in percent, for the characteristic table",
        "text",
        default="",
        example="0:0 25:8 50:30 75:65 100:100",
        longest=2000,
    )
    signal_low: float | None = quantity(
        "lowest signal that the valve follows, percent of the output's span",
        "number",
        "%",
        default=None,
    )
    signal_high: float | None = quantity(
        "highest signal that the valve follows, percent of the output's span",
        "number",
        "%",
        default=None,
    )
    deadband: float = quantity(
        "lost motion at a change of direction, percent of travel", "number", "%", low=0, default=0.0
    )
    stick_slip: float = quantity(
        "deadband and stickband together, percent of travel", "number", "%", low=0, default=0.0
    )
    slip_jump: float = quantity(
        "jump when the stem comes loose, percent of travel; at most twice stick_slip",
        "number",
        "%",
        low=0,
        default=0.0,
    )
    resolution: float = quantity(
        "smallest step that the valve makes, percent of travel", "number", "%", low=0, default=0.0
    )
    stroke_time: Amount | None = quantity(
        "time for the full travel", "duration", low=0, default=None, example="15 s"
    )

    def __post_init__(self) -> None:
        check_fields(self)
        faults = list(self._faults())
        if faults:
            raise InputError(faults)

    def _faults(self) -> Iterator[Problem]:
        if self.characteristic == "table" or self.table:
            yield from self._table_faults()
        if self.slip_jump > 2.0 * self.stick_slip:
            yield Problem(
                f"{self.slip_jump:g} is more than twice stick_slip, {self.stick_slip:g}",
                "give a smaller jump, or a larger stick_slip",
                "slip_jump",
            )
        low, high = self.signal_low, self.signal_high
        if low is not None and high is not None and low >= high:
            yield Problem(
                f"{high:g} is not above signal_low, {low:g}", "give a larger one", "signal_high"
            )

    def _table_faults(self) -> Iterator[Problem]:
        mend = "give rising pairs like 0:0 50:30 100:100"
        try:
            points = self.points()
        except ValueError:
            yield Problem("cannot be read", mend, "table")
            return
        if len(points) < 2 or points[0][0] != 0.0 or points[-1][0] != 100.0:
            yield Problem("does not run from an opening of 0 to 100", mend, "table")
        elif any(a >= c or b >= d for (a, b), (c, d) in pairwise(points)):
            yield Problem("does not rise", mend, "table")

    def points(self) -> list[tuple[float, float]]:
        """Openings and flows of the table [%]."""
        found = []
        for pair in self.table.replace(",", " ").split():
            opening, _, flow = pair.partition(":")
            found.append((float(opening), float(flow)))
        if not all(math.isfinite(x) for point in found for x in point):
            raise ValueError(self.table)
        return found

    @property
    def is_healthy(self) -> bool:
        """It passes on every signal as it is."""
        return follow(self, Setting(50.0, 1.0)) is None


@dataclass(frozen=True)
class Setting:
    """How a valve is built in."""

    rest: float
    """The signal at the operating point [% of the output's span]."""
    scan: float
    """[s]"""
    closes_on_rise: bool = False
    """A rising signal closes it."""


def follow(valve: Valve, setting: Setting) -> Move | None:
    """A valve at rest: deviation of the signal [%] -> what acts on the plant [%], scan by scan.

    None for a healthy valve.  Raises `InputError` where the characteristic has no slope at the
    operating point.
    """
    moves = [made for fault in FAULTS if (made := fault.make(valve, setting)) is not None]
    flow = _characteristic(valve, setting)
    if not moves and flow is None:
        return None
    rest = setting.rest

    def move(signal: float) -> float:
        position = rest + signal
        for one in moves:
            position = one(position)
        return position - rest if flow is None else flow(position)

    return move


# --- faults --------------------------------------------------------------------------------------


def _signal_limits(valve: Valve, setting: Setting) -> Move | None:
    low = -math.inf if valve.signal_low is None else valve.signal_low
    high = math.inf if valve.signal_high is None else valve.signal_high
    if math.isinf(low) and math.isinf(high):
        return None
    return lambda signal: min(max(signal, low), high)


def _deadband(valve: Valve, setting: Setting) -> Move | None:
    if not valve.deadband:
        return None
    half, position = 0.5 * valve.deadband, setting.rest

    def move(signal: float) -> float:
        nonlocal position
        position = min(max(position, signal - half), signal + half)
        return position

    return move


def _stick_slip(valve: Valve, setting: Setting) -> Move | None:
    """The two-parameter model with stick-slip S and jump J, as M. Kano and others wrote it down.

    Moving, the stem is at u - d (S - J)/2, d = +1 or -1 being its direction.  It stops where the
    signal stops or turns, at u = us, and comes loose where |u - us| > J in the same direction, or
    > S in the other.  At rest it last moved up.

    Source
    ------
    M.A.A.S. Choudhury, N.F. Thornhill, S.L. Shah, "Modelling valve stiction", Control Engineering
    Practice 13, 2005, 641-658; M. Kano, H. Maruta, H. Kugemoto, K. Shimizu, "Practical model and
    detection algorithm for valve stiction", IFAC DYCOPS 2004; both from memory.
    """
    stick, jump = valve.stick_slip, valve.slip_jump
    if not stick:
        return None
    offset = 0.5 * (stick - jump)
    last = stopped_at = position = setting.rest
    direction, is_stopped = 1.0, True

    def move(signal: float) -> float:
        nonlocal last, stopped_at, position, direction, is_stopped
        change, last = signal - last, signal
        if not is_stopped and change * direction <= 0.0:
            is_stopped, stopped_at = True, signal - change
        if is_stopped:
            gone = direction * (signal - stopped_at)
            if -gone > stick:
                direction, is_stopped = -direction, False
            elif gone > jump:
                is_stopped = False
        if not is_stopped:
            position = signal - direction * offset
        return position

    return move


def _resolution(valve: Valve, setting: Setting) -> Move | None:
    step, rest = valve.resolution, setting.rest
    if not step:
        return None
    return lambda signal: rest + step * round((signal - rest) / step)


def _stroke(valve: Valve, setting: Setting) -> Move | None:
    time = valve.stroke_time.seconds if valve.stroke_time else 0.0
    if not time:
        return None
    most, position = 100.0 * setting.scan / time, setting.rest

    def move(signal: float) -> float:
        nonlocal position
        position = min(max(signal, position - most), position + most)
        return position

    return move


@dataclass(frozen=True)
class Fault:
    """One thing that may stand between a signal and the stem."""

    title: str
    make: Callable[[Valve, Setting], Move | None]


FAULTS: Final = (
    Fault("signal limits", _signal_limits),
    Fault("stick-slip", _stick_slip),
    Fault("deadband", _deadband),
    Fault("resolution", _resolution),
    Fault("stroke time", _stroke),
)
"""In the order in which a signal meets them."""


# --- characteristics -----------------------------------------------------------------------------


def _characteristic(valve: Valve, setting: Setting) -> Move | None:
    """Position [%] -> what acts on the plant [%], or None for a linear valve."""
    if valve.characteristic == "linear":
        return None
    flow = CHARACTERISTICS[valve.characteristic](valve)
    sign = -1.0 if setting.closes_on_rise else 1.0

    def opening(position: float) -> float:
        return min(max(100.0 - position if setting.closes_on_rise else position, 0.0), 100.0)

    rest, near = opening(setting.rest), 1e-3
    at_rest = flow(rest)
    slope = (flow(min(rest + near, 100.0)) - flow(max(rest - near, 0.0))) / (
        min(rest + near, 100.0) - max(rest - near, 0.0)
    )
    return lambda position: sign * (flow(opening(position)) - at_rest) / slope


def gains_over_travel(
    valve: Valve, setting: Setting, low: float, high: float
) -> tuple[float, float]:
    """Smallest and largest gain of a characteristic between two signals [% of the output's span].

    As shares of the gain at the operating point, each over 1 % of travel; (1, 1) for a linear
    valve.  Raises `InputError` as `follow` does.
    """
    flow = _characteristic(valve, setting)
    if flow is None:
        return 1.0, 1.0
    steps = max(1, round(high - low))
    places = [low + (high - low) * k / steps for k in range(steps + 1)]
    slopes = [(flow(b) - flow(a)) / (b - a) for a, b in pairwise(places)]
    return min(slopes), max(slopes)


def _equal_percentage(valve: Valve) -> Move:
    """R^(opening - 1).  Source: IEC 60534-2-4, from memory."""
    ratio = valve.rangeability
    return lambda opening: 100.0 * float(ratio ** (opening / 100.0 - 1.0))


def _quick_opening(valve: Valve) -> Move:
    """Square root of the opening.  Source: common practice."""
    return lambda opening: 10.0 * math.sqrt(opening)


def _table(valve: Valve) -> Move:
    openings, flows = zip(*valve.points(), strict=True)

    def flow(opening: float) -> float:
        k = min(max(bisect_right(openings, opening), 1), len(openings) - 1)
        share = (opening - openings[k - 1]) / (openings[k] - openings[k - 1])
        return float(flows[k - 1] + share * (flows[k] - flows[k - 1]))

    return flow


CHARACTERISTICS: Final[dict[str, Callable[[Valve], Move]]] = {
    "equal-percentage": _equal_percentage,
    "quick-opening": _quick_opening,
    "table": _table,
}
"""Word of `Valve.characteristic` -> opening [%] -> flow [%]; linear needs none."""
