"""What the plant and the loop are: gain, final values, stability, margins, small models."""

from __future__ import annotations

from dataclasses import dataclass, replace

from workbench.case.case import Case
from workbench.errors import (
    CannotSolve,
    NotApplicable,
)
from workbench.model.feedback import Loop
from workbench.model.formula import format_formula
from workbench.model.reduction import SmallModel, best_fit, half_rule, misfit
from workbench.model.robustness import Margins, analogue_margins, sampled_margins
from workbench.model.stability import plant_verdict
from workbench.model.transfer import TransferFunction
from workbench.study.loop import action_of, load_scale, loop_of, plant_of
from workbench.study.structure import has_one_scan, structure_notes
from workbench.units import Figure, Note, rounded


@dataclass(frozen=True)
class PlantFigures:
    """The plant alone, from OP to PV in engineering units."""

    formula: str
    gain: Figure
    """[PV unit per OP unit]"""
    slope_per_s: Figure
    """[PV unit per OP unit and second]; 0 where the plant does not integrate."""
    stable: bool
    integrating: bool
    poles: tuple[complex, ...]
    """[1/s]"""
    zeros: tuple[complex, ...]
    """[1/s]"""
    dead_time_s: float


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

    @property
    def judged(self) -> LoopFigures | None:
        """The loop as it will run: sampled where there is a scan."""
        return self.sampled or self.loop


def assess(case: Case) -> Assessment:
    """Gain, final values, stability and margins; a plant alone is enough.

    Raises `InputError` where the case has no plant.
    """
    plant = plant_of(case)
    figures = _plant_figures(plant)
    if case.controller is None:
        return Assessment(figures, None, None, None, tuple(_plant_notes(plant)))
    action, chosen = action_of(case)
    notes = [*_plant_notes(plant), *([Note("info", chosen)] if chosen else [])]
    loop = loop_of(case)
    notes += structure_notes(case, loop)
    analogue = _loop_figures(case, loop, analogue_margins(replace(loop, scan=None)))
    sampled = None
    if has_one_scan(loop):
        sampled = _loop_figures(case, loop, sampled_margins(loop))
    return Assessment(figures, analogue, sampled, action, tuple(notes))


def _plant_figures(plant: TransferFunction) -> PlantFigures:
    return PlantFigures(
        formula=format_formula(plant),
        gain=plant.gain(),
        slope_per_s=plant.slope(),
        stable=plant_verdict(plant).stable,
        integrating=plant.integrators > 0,
        poles=plant.poles(),
        zeros=plant.zeros(),
        dead_time_s=plant.dead_time,
    )


def _plant_notes(plant: TransferFunction) -> list[Note]:
    notes = []
    if any(p.real > 0 for p in plant.poles()):
        notes.append(Note("caution", "the plant is unstable: without its controller it runs away"))
    if any(z.real > 0 for z in plant.zeros()):
        notes.append(Note("caution", "inverse response: PV first moves the wrong way"))
    for pole in plant.poles():
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
    peak_step_error_percent: float
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
                rows.append(
                    Reduced(method, lags, "", 0.0, Figure(None, str(refusal)), str(refusal))
                )
                continue
            if model.exact:
                return ()
            off = misfit(plant, model)
            formula = format_formula(_as_typed_model(model).transfer())
            rows.append(
                Reduced(method, lags, formula, off.peak_step_error_percent, off.phase_error_deg)
            )
    return tuple(rows)


def _as_typed_model(model: SmallModel) -> SmallModel:
    return replace(
        model,
        gain=rounded(model.gain),
        time_constant=rounded(model.time_constant),
        second_time_constant=rounded(model.second_time_constant),
        dead_time=rounded(model.dead_time),
    )
