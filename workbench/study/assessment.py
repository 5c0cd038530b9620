"""What the plant and the loop are: gain, final values, stability, margins, small models."""

from __future__ import annotations

from dataclasses import dataclass, replace

from workbench.case.case import Case
from workbench.errors import (
    CannotSolve,
    ModelError,
    NotApplicable,
)
from workbench.model.feedback import Loop
from workbench.model.formula import format_formula
from workbench.model.limits import least_peaks
from workbench.model.reduction import SmallModel, best_fit, half_rule, misfit
from workbench.model.robustness import Margins, analogue_margins
from workbench.model.stability import plant_verdict
from workbench.model.transfer import TransferFunction
from workbench.study.loop import (
    action_of,
    load_scale,
    loop_of,
    no_time_domain,
    plant_of,
    runs_away,
    units_of,
)
from workbench.study.operating import about_rest, operating_notes
from workbench.study.structure import margins_as_sampled, structure_notes
from workbench.units import RATE_UNITS, Amount, Figure, Note, rounded, text


@dataclass(frozen=True)
class PlantFigures:
    """The plant alone, from OP to PV in engineering units."""

    formula: str
    gain: Figure
    """[PV unit per OP unit]"""
    gain_percent: Figure
    """The same in percent of PV span per percent of OP span."""
    slope_per_s: Figure
    """[PV unit per OP unit and second]; 0 where the plant does not integrate."""
    stable: bool
    integrating: bool
    poles: tuple[complex, ...]
    """[1/s]"""
    zeros: tuple[complex, ...]
    """[1/s]"""
    dead_time_s: float
    """The smallest from OP to PV."""
    least_max_sensitivity: Figure
    """No controller has an Ms below this."""
    least_max_complementary_sensitivity: Figure
    """No controller has an Mt below this."""
    poles_reason: str = ""
    """Why the poles cannot be listed."""
    zeros_reason: str = ""


@dataclass(frozen=True)
class LoopFigures:
    """The closed loop: margins and where it ends up."""

    margins: Margins
    final_pv_after_setpoint_step: Figure
    """Change of PV for a setpoint step of 1 PV unit [PV unit]."""
    final_pv_after_load_step: Figure
    """Change of PV for a load step of 1 [PV unit per OP unit, or per unit of the load path]."""


@dataclass(frozen=True)
class Assessment:
    """What the plant and the loop are; `loop` is missing without a controller."""

    plant: PlantFigures
    loop: LoopFigures | None
    sampled: LoopFigures | None
    """With the scan interval in it; missing for an analogue controller."""
    action: str | None
    """The controller's action, given or chosen."""
    notes: tuple[Note, ...] = ()
    sampled_reason: str = ""
    """Why there are no sampled figures although there is a scan interval."""
    gain: float | None = None
    """The controller's gain [%/%]."""
    gain_op_per_pv: float | None = None
    """The same in OP units per PV unit."""
    valve: str = ""
    """What OP is and which way the valve goes, whatever the sign of the plant."""

    @property
    def judged(self) -> LoopFigures | None:
        """The loop as it will run: sampled where there is a scan."""
        return self.sampled or self.loop


def assess(case: Case) -> Assessment:
    """Gain, final values, stability and margins; a plant alone is enough.

    Raises `InputError` where the case has no plant.
    """
    plant = plant_of(case)
    figures, valve = _plant_figures(case, plant), valve_words(case)
    if case.controller is None:
        notes = tuple(_plant_notes(plant))
        return Assessment(figures, None, None, None, notes, valve=valve)
    action, chosen = action_of(case)
    notes = (*_plant_notes(plant), *([Note("info", chosen)] if chosen else []))
    whole = loop_of(case)
    loop = about_rest(whole)
    notes = (*notes, *structure_notes(case, loop))
    analogue = _loop_figures(case, loop, analogue_margins(replace(loop, scan=None)))
    sampled, missing = None, ""
    if loop.scan is not None:
        margins, missing = margins_as_sampled(loop)
        sampled = None if margins is None else _loop_figures(case, loop, margins)
    notes = (*notes, *operating_notes(case, whole, (sampled or analogue).margins))
    gain = case.controller.gain_value
    scale = case.op.range.span / case.pv.range.span
    return Assessment(figures, analogue, sampled, action, notes, missing, gain, gain * scale, valve)


def valve_words(case: Case) -> str:
    """What OP is and what the valve does as it rises."""
    closes = case.op.valve_closes_on_rise
    if case.op.meaning == "opening":
        falls = ", and the signal to the valve falls as it rises" if closes else ""
        return f"the opening of the valve{falls}"
    return f"the signal to the valve, which {'closes' if closes else 'opens'} as it rises"


def _plant_figures(case: Case, plant: TransferFunction) -> PlantFigures:
    gain, slope = plant.gain(), plant.slope()
    if gain.value is None and slope.value is not None:
        gain = Figure(None, f"integrating: PV moves {_slope_words(case, slope.value)}")
    delayed = plant.has_delayed_feedback
    delay = case.controller.computing_delay_s if case.controller else 0.0
    least = least_peaks(plant, delay)
    return PlantFigures(
        formula=format_formula(plant),
        gain=gain,
        gain_percent=gain.times(case.op.range.span / case.pv.range.span),
        slope_per_s=slope,
        stable=plant_verdict(plant).stable,
        integrating=plant.integrators > 0,
        poles=() if delayed else plant.poles(),
        zeros=plant.zeros(),
        dead_time_s=plant.dead_time,
        least_max_sensitivity=least.sensitivity,
        least_max_complementary_sensitivity=least.complementary_sensitivity,
        poles_reason="infinitely many: a dead time inside an inner feedback" if delayed else "",
        zeros_reason="paths of unequal dead time: infinitely many"
        if len(plant.numerator) > 1
        else "",
    )


def _slope_words(case: Case, slope: float) -> str:
    """A slope [PV unit per OP unit and second] in the unit of time that reads best."""
    rates = [Amount(1.0, unit) for unit in RATE_UNITS]
    best = next((r for r in rates if abs(slope) >= 0.1 * r.per_second), rates[-1])
    pv, op = units_of(case)["pv"], units_of(case)["op"]
    return f"{text(slope / best.per_second)} {pv}{best.unit} per {op} of OP"


def _plant_notes(plant: TransferFunction) -> list[Note]:
    notes = []
    if runs_away(plant):
        notes.append(Note("caution", "the plant is unstable: without its controller it runs away"))
    growing = [z for z in plant.zeros() if z.real > 0]
    # An even number of them makes PV turn and turn again, and set out the right way.
    if growing:
        first = "PV first moves the wrong way" if len(growing) % 2 else "PV turns back on its way"
        notes.append(Note("caution", f"inverse response: {first}"))
    for pole in () if plant.has_delayed_feedback else plant.poles():
        if any(abs(pole - zero) <= 0.01 * abs(pole) for zero in plant.zeros()):
            notes.append(
                Note("caution", f"a pole and a zero near {pole.real:.4g} 1/s nearly cancel")
            )
            break
    return notes


def _loop_figures(case: Case, loop: Loop, margins: Margins) -> LoopFigures:
    if not margins.stable:
        none = Figure(None, f"the loop is not stable: {margins.reason}")
        return LoopFigures(margins, none, none)
    to_pv = case.pv.range.span / 100.0
    after_load = _final_after_load(loop).times(to_pv * load_scale(case))
    return LoopFigures(margins, loop.from_setpoint().gain(), after_load)


def _final_after_load(loop: Loop) -> Figure:
    """Limit for a unit load step, once the load path's own poles are known to let it exist."""
    if loop.load.has_delayed_feedback or loop.plant.has_delayed_feedback:
        # An inner feedback that both share is part of the loop, and that is stable.
        shared = loop.load.denominator == loop.plant.denominator
        if not shared and not plant_verdict(loop.load).stable:
            return Figure(None, "the load path is not stable by itself")
        return loop.from_load().gain()
    inside = loop.plant.poles()
    for pole in loop.load.poles():
        if pole.real >= 0 and pole != 0 and pole not in inside:
            return Figure(None, "the load path is not stable by itself")
    return loop.from_load().gain()


@dataclass(frozen=True)
class Reduced:
    """A small model of the plant, how it was made and how far off it is."""

    method: str
    lags: int
    formula: str
    peak_step_error_percent: Figure
    phase_error_deg: Figure
    reason: str = ""
    """Why there is no such model."""


def reductions(case: Case) -> tuple[Reduced, ...]:
    """The plant as one and two lags with dead time, by the half rule and by the best fit.

    A plant that is such a model already has none.  Raises `InputError` where the case has no plant.
    """
    plant = plant_of(case)
    rows = []
    for lags in (1, 2):
        for method, make in (("half rule", half_rule), ("best fit", best_fit)):
            try:
                model = make(plant, lags)
            except (NotApplicable, CannotSolve) as refusal:
                none = Figure(None, str(refusal))
                rows.append(Reduced(method, lags, "", none, none, str(refusal)))
                continue
            if model.exact:
                return ()
            formula = format_formula(_as_typed_model(model).transfer())
            try:
                off = misfit(plant, model)
            except ModelError as fault:
                none = Figure(None, no_time_domain(plant) or fault.problems[0].what)
                rows.append(Reduced(method, lags, formula, none, none))
            else:
                error = Figure.of(off.peak_step_error_percent)
                rows.append(Reduced(method, lags, formula, error, off.phase_error_deg))
    return tuple(rows)


def _as_typed_model(model: SmallModel) -> SmallModel:
    return replace(
        model,
        gain=rounded(model.gain),
        time_constant=rounded(model.time_constant),
        second_time_constant=rounded(model.second_time_constant),
        dead_time=rounded(model.dead_time),
    )
