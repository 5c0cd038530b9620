"""What plant records answer beside the fit.

How to make the next one, why a loop swings, which controller ran, and whether a change did what was
predicted.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from workbench.case.case import Case
from workbench.errors import NotApplicable, WorkbenchError, problem
from workbench.model.pid import Controller, settings_like
from workbench.model.robustness import ultimate
from workbench.records.diagnose import Diagnosis, Known
from workbench.records.diagnose import diagnose as diagnose_record
from workbench.records.record import Record
from workbench.records.replay import (
    Difference,
    Ranges,
    Recognised,
    Recognition,
    differences,
    readings,
)
from workbench.records.replay import recognise as recognise_in
from workbench.records.testplan import Plan
from workbench.records.testplan import plan_test as plan_for
from workbench.study.assessment import assess
from workbench.study.loop import action_of, plant_of


def plan_test(
    case: Case,
    *,
    max_pv_change: float,
    interval: float | None = None,
    certainty: float | None = None,
) -> Plan:
    """A bump test for the case's plant as it is believed to be, with the noise of its PV.

    Raises `InputError` where the plant or the noise is missing, or no bump can be made on it.
    """
    if not case.pv.noise:
        raise problem(
            "is missing: without noise every test is perfect",
            "give the standard deviation of PV at rest",
            key="pv.noise",
        )
    op = case.op
    low = op.low if op.min is None else op.min
    high = op.high if op.max is None else op.max
    room = min(high - op.rest, op.rest - low)
    if not room > 0.0:
        what = "is at a limit of OP, so that no bump can be made to both sides"
        raise problem(what, "start the test from inside the limits", key="op.start")
    return plan_for(
        plant_of(case),
        noise=case.pv.noise,
        max_pv_change=max_pv_change,
        max_op_change=room,
        lost_motion=op.range.units(case.valve.deadband + case.valve.stick_slip),
        interval=interval,
        certainty=certainty,
    )


def diagnose(
    record: Record,
    case: Case,
    *,
    dead_time: float | None = None,
    integral_time: float | None = None,
    integrating: bool = False,
    knows_range: bool = True,
) -> Diagnosis:
    """Why the loop of a record swings, with what the case knows of the loop.

    Times in s stand in for those of the case; `knows_range` says that the case's PV range is the
    loop's own and not a default.
    """
    known = known_of(
        case,
        dead_time=dead_time,
        integral_time=integral_time,
        integrating=integrating,
        knows_range=knows_range,
    )
    return diagnose_record(record, known)


def known_of(
    case: Case,
    *,
    dead_time: float | None = None,
    integral_time: float | None = None,
    integrating: bool = False,
    knows_range: bool = True,
) -> Known:
    """What a case tells of a loop beside its record; times in s stand in for its own."""
    pv, op, own, peak = case.pv, case.op, None, None
    if case.plant.process is not None:
        plant = plant_of(case)
        if dead_time is None and not plant.has_delayed_feedback:
            dead_time = plant.dead_time
        integrating = integrating or plant.integrators > 0
        own, peak = _own_swing(case)
    if integral_time is None and case.controller is not None:
        gains = case.controller.gains()
        if gains.integral and gains.proportional:
            integral_time = gains.proportional / gains.integral
    return Known(
        dead_time_s=dead_time,
        integral_time_s=integral_time,
        pv_span=pv.range.span if knows_range else None,
        op_low=op.low,
        op_high=op.high,
        op_min=op.min,
        op_max=op.max,
        integrating=integrating,
        own_period_s=own,
        max_sensitivity=peak,
    )


def _own_swing(case: Case) -> tuple[float | None, float | None]:
    """Period at which the loop's phase is -180 deg [s], and its maximum sensitivity.

    Of a loop that is not stable it is the ultimate period of its plant.
    """
    if case.controller is None:
        return None, None
    try:
        judged = assess(case).judged
        if judged is None or not judged.margins.stable:
            plant = plant_of(case)
            return ultimate(plant if action_of(case)[0] == "reverse" else -plant)[1], None
    except WorkbenchError:
        return None, None
    crossover = judged.margins.phase_crossover_rad_s.value
    period = 2.0 * math.pi / crossover if crossover else None
    return period, judged.margins.max_sensitivity.value


@dataclass(frozen=True)
class SheetCheck:
    """Which controller a record shows, and whether it is the one on the sheet."""

    found: Recognition
    as_in_case: bool | None
    """`None` where nothing was recognised, or there is no sheet."""
    differences: tuple[Difference, ...] = ()
    as_if: str = ""
    """How the sheet's own numbers would have to be read to be what ran."""
    fits: Controller | None = None
    """What ran, in the form and the units of the sheet, where that form can hold it."""


def recognise(record: Record, case: Case, *, scan: float | None = None) -> SheetCheck:
    """Which controller ran in a record, and whether it is the case's.

    Raises `RecordError`.
    """
    pv, op = case.pv, case.op
    sheet = case.controller
    found = recognise_in(
        record,
        Ranges(pv.range, op.range, op.min, op.max),
        pv_filter=pv.filter.seconds if pv.filter else 0.0,
        scan=scan or (sheet.scan_s if sheet else None),
    )
    if sheet is None or not found.candidates:
        return SheetCheck(found, None)
    best, action = found.candidates[0], action_of(case)[0]
    off = differences(best, sheet, action)
    as_if = "" if not off else _read_otherwise(best, sheet, action)
    return SheetCheck(found, not off, off, as_if, _as_on_sheet(found, sheet) if off else None)


def _read_otherwise(best: Recognised, sheet: Controller, action: str) -> str:
    """The reading of the sheet's numbers that makes them what ran."""
    if best.action == action:
        for words, other in readings(sheet):
            if not differences(best, other, action):
                return words
    return ""


def _as_on_sheet(found: Recognition, sheet: Controller) -> Controller | None:
    """The best candidate in the form and the units of the sheet."""
    form = "series" if sheet.form == "series" else "ideal"
    held = next((one for one in found.candidates if one.form == form), None)
    if held is None or not held.settings.gain_value:
        return None
    try:
        return settings_like(
            sheet, held.settings.gain_value, held.integral_s, held.derivative_s, form
        )
    except NotApplicable:
        return None
