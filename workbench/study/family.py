"""The family of plants that a loop must put up with, and what every one of them would do.

The family of a case is made of centres: the nominal plant, every operating point, every further
plant.  Round each of them lie the corners of the stated tolerances (gain, dead time and lag each at
its least and at its greatest, in every combination) and plants drawn evenly between them, the same
ones each time.  Each plant counts once: "95 %" is the value that 95 % of the plants do not exceed,
or, of a margin, that 95 % of them reach.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from itertools import product
from typing import TYPE_CHECKING, Final

import numpy as np
from numpy.typing import NDArray

from workbench.case.case import Case, edit
from workbench.errors import CannotSolve, InputError, NotApplicable
from workbench.model.feedback import Loop
from workbench.model.plant import Shape, write_function
from workbench.model.spread import judge
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.model.variation import Variation
from workbench.sim.family import side_by_side
from workbench.sim.loop import simulate
from workbench.sim.metrics import absolute_area
from workbench.sim.scenario import Events
from workbench.study.loop import instruments_of, loop_of, no_time_domain, plant_of
from workbench.study.operating import about_rest
from workbench.study.structure import has_one_scan
from workbench.units import Figure, harmless

if TYPE_CHECKING:
    from workbench.records.candidate import Candidate

Floats = NDArray[np.float64]

_SEED: Final = 20
"""Of the plants drawn: the family of a case is the same each time."""
SHARE: Final = 0.95


@dataclass(frozen=True)
class Member:
    """One plant of a family."""

    name: str
    """What it is, for people."""
    plant: TransferFunction
    """[PV unit per OP unit]"""


@dataclass(frozen=True)
class Among:
    """One figure over the family."""

    nominal: Figure
    at_95: Figure
    """95 % of the plants are not worse."""
    worst: Figure


@dataclass(frozen=True)
class FamilyFigures:
    """What a loop does over its family."""

    plants: int
    stable_percent: float
    """Share of the plants with which the loop is stable."""
    worst_plant: str
    """Which plant is the worst: not stable, or of the largest Ms."""
    figures: dict[str, Among] = field(default_factory=dict)
    """`max_sensitivity`, `gain_margin`, `phase_margin_deg`; with a scenario `setpoint_iae`,
    `setpoint_overshoot_percent`, `load_iae`, `load_peak_deviation` too [PV units, s]."""
    reason: str = ""
    """Why there are no such figures."""


# --- the plants ----------------------------------------------------------------------------------


def members(case: Case) -> tuple[Member, ...]:
    """The plants of a family, the nominal one first; that alone where the case states no family."""
    table, nominal = case.family, plant_of(case)
    scale = case.pv.range.span / case.op.range.span
    centres = [Member("nominal", nominal)]
    centres += [
        Member(harmless(name, 60), variation.of(nominal))
        for name, variation in table.operating_points().items()
    ]
    for name, shape in table.further_plants().items():
        plant = shape.transfer()
        centres.append(Member(harmless(name, 60), plant * scale if shape.in_percent else plant))
    found = list(centres)
    spans = [("gain", table.gain), ("dead_time", table.dead_time), ("lag", table.lag)]
    given = [(name, percent / 100.0) for name, percent in spans if percent]
    if not given:
        return tuple(found)
    for centre in centres:
        for ends in product((-1.0, 1.0), repeat=len(given)):
            ratios = {
                name: 1.0 + end * share for (name, share), end in zip(given, ends, strict=True)
            }
            found.append(_varied(centre, ratios))
    draw = np.random.default_rng(_SEED)
    for number in range(int(table.drawn)):
        ratios = {name: 1.0 + share * float(draw.uniform(-1.0, 1.0)) for name, share in given}
        found.append(_varied(centres[number % len(centres)], ratios))
    return tuple(found)


def _varied(centre: Member, ratios: dict[str, float]) -> Member:
    words = [
        f"{name.replace('_', ' ')} {ratio:.0%}".replace("%", " %") for name, ratio in ratios.items()
    ]
    return Member(f"{centre.name}, {', '.join(words)}", Variation(**ratios).of(centre.plant))


def drawn_plants(candidate: Candidate, count: int, seed: int = _SEED) -> tuple[Shape, ...]:
    """Plants that a record cannot tell apart, drawn from the uncertainty of a fit.

    As `Candidate.family` draws them: each value as far up and down as its own 95 % interval
    reaches, all with the correlation that the fit found between them.

    Parameters
    ----------
    candidate
        Of any shape.
    count
        How many.
    seed
        The same plants each time.
    """
    return candidate.family(count, seed)


def with_family(case: Case, plants: Sequence[Shape], name: str = "drawn") -> Case:
    """The case with these plants as the further plants of its family."""
    line = "; ".join(f"{name} {k}: {write_function(plant)}" for k, plant in enumerate(plants, 1))
    return edit(case, "family.plants", line)


# --- what they do --------------------------------------------------------------------------------


def family_figures(case: Case, events: Events | None = None) -> FamilyFigures | None:
    """What the loop does over its family; nothing where the case states none.

    Parameters
    ----------
    case
        With plant and controller.
    events
        A scenario to run every plant through, without noise; left out, margins only.
    """
    if not case.family.is_there or case.controller is None:
        return None
    plants = members(case)
    loops = [loop_of(case, member.plant) for member in plants]
    judged_as = _judged_as(loops[0])
    try:
        found = judge(judged_as, [loop.plant for loop in loops], margins=True)
    except (CannotSolve, InputError, NotApplicable) as refusal:
        return FamilyFigures(len(plants), 0.0, "", reason=str(refusal))
    stable = found.stable[:, 0]
    values = {
        "max_sensitivity": found.max_sensitivity[:, 0],
        "gain_margin": found.gain_margin[:, 0],
        "phase_margin_deg": found.phase_margin_deg[:, 0],
    }
    missing = no_time_domain(loops[0].plant)
    if events is not None and not missing:
        values |= _measured(case, loops, replace(events, noise=0.0), stable)
    return FamilyFigures(
        len(plants),
        100.0 * float(stable.mean()),
        plants[int(found.max_sensitivity[:, 0].argmax())].name,
        {name: _among(of, stable, name in _HIGHER) for name, of in values.items()},
    )


_HIGHER: Final = ("gain_margin", "phase_margin_deg")
"""Figures of which more is better."""


def _judged_as(loop: Loop) -> Loop:
    """The loop as its margins are judged: sampled where it has one scan and a state space."""
    if has_one_scan(loop) and not no_time_domain(loop.plant):
        return about_rest(loop)
    return about_rest(replace(loop, scan=None))


def _among(values: Floats, stable: NDArray[np.bool_], higher: bool) -> Among:
    """One figure over the family; infinite is none at all, and of a loop not stable the worst."""
    worst_first = np.where(stable, -values if higher else values, math.inf)
    order = np.sort(worst_first)
    sign = -1.0 if higher else 1.0
    at = math.ceil(SHARE * len(order) - 1e-9) - 1
    return Among(*(_figure(sign, v) for v in (worst_first[0], order[at], order[-1])))


def _figure(sign: float, value: float) -> Figure:
    if math.isfinite(value):
        return Figure(sign * float(value))
    return Figure(None, "the loop is not stable" if value > 0.0 else "no such limit")


def _measured(
    case: Case, loops: Sequence[Loop], events: Events, stable: NDArray[np.bool_]
) -> dict[str, Floats]:
    """Figures of every course [PV unit, s], infinite where the loop is not stable."""
    windows = _windows(events)
    to_pv = case.pv.range.span / 100.0
    found = {name: np.full(len(loops), math.inf) for name in windows for name in _NAMES[name]}
    for k, (time, pv) in enumerate(_courses(case, loops, events)):
        if not stable[k]:
            continue
        for name, (start, end) in windows.items():
            error = _error_within(time, pv, events, start, end)
            area = absolute_area(*error) * to_pv
            if name == "setpoint":
                over = 100.0 * float((-error[1] / events.setpoint_step).max())
                found["setpoint_iae"][k] = area
                found["setpoint_overshoot_percent"][k] = max(0.0, over)
            else:
                found["load_iae"][k] = area
                found["load_peak_deviation"][k] = to_pv * float(np.abs(error[1]).max())
    return found


_NAMES: Final = {
    "setpoint": ("setpoint_iae", "setpoint_overshoot_percent"),
    "load": ("load_iae", "load_peak_deviation"),
}


def _windows(events: Events) -> dict[str, tuple[float, float]]:
    """From and to of the windows of the measures [s]; a window that is not there is left out."""
    found: dict[str, tuple[float, float]] = {}
    end = events.until
    if events.load_step and events.load_at >= events.setpoint_at:
        end = min(end, events.load_at)
    if events.setpoint_step and end > events.setpoint_at and events.are_steps:
        found["setpoint"] = events.setpoint_at, end
    if events.load_step and events.are_steps:
        found["load"] = events.load_at, events.until
    return found


def _error_within(
    time: Floats, pv: Floats, events: Events, start: float, end: float
) -> tuple[Floats, Floats]:
    """Time from the start of a window, and the error in it [%], as `metrics` takes them."""
    inside = (time > start) & (time < end)
    at = np.concatenate([[start], time[inside], [end]])
    value = np.interp(at, time, pv)
    if end < events.until and inside.any():
        value[-1] = value[-2]
    return at - start, np.where(at >= events.setpoint_at, events.setpoint_step, 0.0) - value


def _courses(case: Case, loops: Sequence[Loop], events: Events) -> Iterator[tuple[Floats, Floats]]:
    """Time and PV [%] of every plant, side by side where the loops are plain and sampled."""
    first, instruments = loops[0], instruments_of(case)
    shaped = first.setpoint_rate is not None or first.setpoint_filter or first.bias
    plain_loop = first.scan is not None and not isinstance(first, Structure) and not shaped
    if plain_loop and instruments.are_plain and events.are_steps:
        together = side_by_side(loops, events)
        for k in range(len(loops)):
            yield together.time, together.pv[:, k]
        return
    for loop in loops:
        trace = simulate(loop, events, instruments)
        yield trace.time, trace.pv
