"""From a case to the mathematics: plant, controller and loop, in percent of span."""

from __future__ import annotations

import math

from workbench.case.case import Case
from workbench.errors import problem
from workbench.model.blocks import Blocks
from workbench.model.feedback import Loop
from workbench.model.pid import Controller
from workbench.model.stability import plant_verdict
from workbench.model.transfer import TransferFunction
from workbench.sim.instruments import Instruments
from workbench.study.structure import built_round, no_time_domain

__all__ = [
    "action_of",
    "controller_of",
    "instruments_of",
    "load_scale",
    "loop_of",
    "no_time_domain",
    "plant_in_percent",
    "plant_of",
    "runs_away",
    "units_of",
]


def units_of(case: Case) -> dict[str, str]:
    """The loop's own units by quantity."""
    pv, op = case.pv.unit, case.op.unit
    return {"pv": pv, "op": op, "gain": f"{pv}/{op}", "slope_per_s": f"{pv}/({op} s)"}


def plant_of(case: Case) -> TransferFunction:
    """The plant [PV unit per OP unit].  Raises `InputError` where the case has none yet."""
    process = case.plant.process
    if process is None:
        raise problem(
            "the case has no plant yet", "enter one, or accept the fit of a record", key="plant"
        )
    whole = process.transfer()
    if isinstance(process, Blocks) or not process.in_percent:
        return whole
    return whole * (case.pv.range.span / case.op.range.span)


def plant_in_percent(case: Case) -> TransferFunction:
    """The plant [%/%].  Raises `InputError` where the case has none yet."""
    return plant_of(case) * (case.op.range.span / case.pv.range.span)


def runs_away(plant: TransferFunction) -> bool:
    """The plant is unstable; integrating alone does not make it so."""
    if plant.has_delayed_feedback:
        return plant.integrators <= 0 and not plant_verdict(plant).stable
    return any(p.real > 0 for p in plant.poles())


def controller_of(case: Case) -> Controller:
    """The controller.  Raises `InputError` where the case has none yet."""
    if case.controller is None:
        raise problem(
            "the case has no controller yet", "give its gain or proportional band", key="controller"
        )
    return case.controller


def action_of(case: Case) -> tuple[str, str]:
    """The controller's action, and how it was chosen where it was not given.

    Raises `InputError` for an unstable plant without a stated action.
    """
    given = case.controller.action if case.controller else None
    if given is not None:
        return given, ""
    plant = plant_of(case)
    if runs_away(plant):
        raise problem(
            "is needed: the plant is unstable, so its gain does not tell the action",
            "give reverse (OP rises when PV falls) or direct",
            key="controller.action",
        )
    gain = plant.gain().value
    slope = plant.slope().value
    word, value = ("gain", gain) if gain else ("slope", slope)
    if not value:
        raise problem(
            "is needed: the plant has neither a steady gain nor a slope to tell it",
            "give reverse (OP rises when PV falls) or direct",
            key="controller.action",
        )
    sign = "positive" if value > 0 else "negative"
    action = "reverse" if value > 0 else "direct"
    return action, f"{action} action, because the plant's {word} is {sign}"


def loop_of(case: Case, other: TransferFunction | None = None) -> Loop:
    """The loop in percent of span, with another plant [PV unit per OP unit] where one is given.

    Raises `InputError` where plant or controller is missing.
    """
    controller = controller_of(case)
    pv, op = case.pv, case.op
    plant = (plant_of(case) if other is None else other) * (op.range.span / pv.range.span)
    load = case.plant.load_path()
    if case.measurement.lag and case.measurement.lag.seconds:
        # The sensor's lag is felt by everything that is measured: PV is what the sensor shows.
        sensor = TransferFunction.ratio((1.0,), [(case.measurement.lag.seconds, 1.0)])
        plant, load = plant * sensor, None if load is None else load * sensor
    single = Loop(
        plant=plant,
        load=plant if load is None else load * (100.0 / pv.range.span),
        gains=controller.gains(),
        reverse=action_of(case)[0] == "reverse",
        scan=controller.scan_s,
        computing_delay=controller.computing_delay_s,
        pv_filter=pv.filter.seconds if pv.filter else 0.0,
        low=None if op.min is None else op.range.percent(op.min - op.rest),
        high=None if op.max is None else op.range.percent(op.max - op.rest),
        rate=None if op.rate is None else op.range.percent(op.rate.per_second),
        windup=controller.windup,
        incremental=controller.execution == "incremental",
        dead_zone=pv.range.percent(controller.dead_zone),
        gain_at_rest=controller.gain_at_rest,
        bias=0.0 if controller.bias is None else op.range.percent(controller.bias - op.rest),
        setpoint_rate=None
        if controller.setpoint_rate is None
        else pv.range.percent(controller.setpoint_rate.per_second),
        setpoint_filter=controller.setpoint_filter.seconds if controller.setpoint_filter else 0.0,
    )
    return built_round(case, single)


def instruments_of(case: Case) -> Instruments:
    """The valve and the sensor, in percent of span; the sensor's lag is in the loop itself."""
    pv, op, measured = case.pv, case.op, case.measurement
    # In a cascade the valve is behind the inner controller.
    moved = case.inner if case.inner.is_there else op
    return Instruments(
        valve=case.valve,
        op_rest=moved.range.percent(moved.rest - moved.low),
        closes_on_rise=op.meaning == "signal" and op.valve_closes_on_rise,
        resolution=pv.range.percent(measured.resolution),
        low=pv.range.percent(pv.low - pv.rest) if measured.clips else -math.inf,
        high=pv.range.percent(pv.high - pv.rest) if measured.clips else math.inf,
        noise_correlation=measured.noise_correlation.seconds if measured.noise_correlation else 0.0,
    )


def load_scale(case: Case) -> float:
    """Load input of the percent loop for 1 unit of the case's load."""
    return 100.0 / case.op.range.span if case.plant.load_path() is None else 1.0
