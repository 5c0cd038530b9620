"""What the loop and the plant do: the closed loop through its scenario, the plant alone."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from workbench.case.case import Case
from workbench.model.feedback import Loop
from workbench.model.response import (
    Signal,
    final_value,
    held_response,
    impulse_response,
    step_response,
)
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.records.record import Record
from workbench.sim.loop import settle_horizon, simulate
from workbench.sim.metrics import Measures, measure
from workbench.sim.scenario import Events, Scenario
from workbench.sim.structures import Inside
from workbench.study.loop import instruments_of, load_scale, loop_of
from workbench.units import Figure

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Trend:
    """Absolute values over time, one row at every scan or finer; each array has shape (n,)."""

    time: Floats
    """[s]"""
    setpoint: Floats
    pv: Floats
    """As measured, with its noise."""
    output: Floats


@dataclass(frozen=True)
class InnerTrend:
    """What the inner loop of a cascade did at its own scans; each array has shape (n,)."""

    time: Floats
    """[s]"""
    setpoint: Floats
    """[OP unit]"""
    pv: Floats
    """[OP unit]"""
    output: Floats
    """[inner OP unit]"""
    time_at_limit_s: float
    """How long its output stood at a limit."""


@dataclass(frozen=True)
class Prediction:
    """What the loop does in the scenario."""

    setpoint_step: float
    """[PV unit]"""
    setpoint_at_s: float
    load_step: float
    load_at_s: float
    until_s: float
    trend: Trend
    measures: Measures
    """In engineering units; `final_pv` and `final_op` absolute."""
    floor_peak_deviation: Figure
    """No controller can do better after this load step [PV unit]."""
    floor_load_iae: Figure
    """[PV unit s]"""
    diverged: bool
    """The loop ran away and the trend was cut off."""
    inner: InnerTrend | None = None
    """Where there is an inner loop."""


def predict(case: Case, seed: int = 0) -> Prediction:
    """Run the closed loop through the case's scenario.

    Raises `InputError` where plant or controller is missing.
    """
    loop = loop_of(case)
    events = _events(case, loop, seed)
    trace = simulate(loop, events, instruments_of(case))
    pv, op = case.pv, case.op
    trend = Trend(
        trace.time,
        pv.rest + trace.setpoint * (pv.range.span / 100.0),
        pv.rest + trace.measured * (pv.range.span / 100.0),
        op.rest + trace.output * (op.range.span / 100.0),
    )
    measures = _in_units(case, measure(trace, events, low=loop.low, high=loop.high))
    peak, iae = _floor(loop, events)
    to_pv = pv.range.span / 100.0
    return Prediction(
        setpoint_step=pv.range.units(events.setpoint_step),
        setpoint_at_s=events.setpoint_at,
        load_step=events.load_step / load_scale(case),
        load_at_s=events.load_at,
        until_s=events.until,
        trend=trend,
        measures=measures,
        floor_peak_deviation=peak.times(to_pv),
        floor_load_iae=iae.times(to_pv),
        diverged=trace.diverged,
        inner=None if trace.inner is None else _inner_trend(case, loop, trace.inner),
    )


def _inner_trend(case: Case, loop: Loop, inside: Inside) -> InnerTrend:
    """The inner loop in the units of OP and of its own output."""
    assert isinstance(loop, Structure)
    assert loop.inner is not None
    assert loop.inner.scan is not None
    op, own, scan = case.op, case.inner, loop.inner.scan
    low, high = loop.inner.low, loop.inner.high
    at_limit = np.zeros(len(inside.output), bool)
    if low is not None:
        at_limit |= inside.output <= low
    if high is not None:
        at_limit |= inside.output >= high
    time: Floats = np.arange(float(len(inside.output))) * scan
    return InnerTrend(
        time,
        op.rest + inside.setpoint * (op.range.span / 100.0),
        op.rest + inside.pv * (op.range.span / 100.0),
        own.rest + inside.output * (own.range.span / 100.0),
        float(at_limit.sum()) * scan,
    )


def _events(case: Case, loop: Loop, seed: int) -> Events:
    """The scenario made definite, every default filled in."""
    scenario, pv = case.scenario, case.pv
    setpoint_step, load_step = scenario.setpoint_step, scenario.load_step
    at = scenario.setpoint_at.seconds
    load_at = scenario.load_at.seconds if scenario.load_at else 0.0
    until = scenario.until.seconds if scenario.until else None
    horizon = settle_horizon(loop) if until is None else 0.0
    if setpoint_step is None and load_step is None:
        setpoint_step = pv.range.units(5.0)
        load_step = case.op.range.units(5.0)
        if scenario.load_at is None:
            load_at = at + (horizon if until is None else (until - at) / 2.0)
    if until is None:
        until = _last_move(scenario, at, load_at, setpoint_step, load_step) + horizon
        if loop.setpoint_rate is not None and setpoint_step:
            until += abs(pv.range.percent(setpoint_step)) / loop.setpoint_rate
    return Events(
        setpoint_step=pv.range.percent(setpoint_step or 0.0),
        setpoint_at=at,
        load_step=(load_step or 0.0) * load_scale(case),
        load_at=load_at,
        until=until,
        # Noise is what a scan samples: an analogue controller has no scans to give it to.
        noise=pv.range.percent(pv.noise) if loop.scan else 0.0,
        seed=seed,
        setpoint_ramp=scenario.setpoint_ramp.seconds if scenario.setpoint_ramp else 0.0,
        load_shape=scenario.load_shape,
        load_time=scenario.load_time.seconds if scenario.load_time else 0.0,
        load_record=scenario.recorded_load(),
        manual_at=scenario.manual_at.seconds if scenario.manual_at else None,
        manual_output=None
        if scenario.manual_output is None
        else case.op.range.percent(scenario.manual_output - case.op.rest),
        automatic_at=scenario.automatic_at.seconds if scenario.automatic_at else None,
        change_at=scenario.change_at.seconds if scenario.change_at else None,
        gain_factor=scenario.gain_factor,
        dead_time_factor=scenario.dead_time_factor,
    )


_SWINGS: Final = 8
"""Periods of a sine that a prediction without an end shows."""


def _last_move(
    scenario: Scenario, at: float, load_at: float, setpoint: float | None, load: float | None
) -> float:
    """When the last thing happens that has to settle [s]."""
    time = scenario.load_time.seconds if scenario.load_time else 0.0
    lasting = {"step": 0.0, "sine": _SWINGS * time, "record": 0.0}.get(scenario.load_shape, time)
    if scenario.load_shape == "record":
        lasting = scenario.recorded_load()[-1][0]
    moves = [at + (scenario.setpoint_ramp.seconds if scenario.setpoint_ramp else 0.0)]
    moves = moves if setpoint else []
    moves += [load_at + lasting] if load else []
    others = (scenario.manual_at, scenario.automatic_at, scenario.change_at)
    return max([*moves, *(other.seconds for other in others if other)], default=0.0)


_MEASURE_SCALE: Final[dict[str, Literal["pv", "op"]]] = {
    "setpoint_iae": "pv",
    "load_iae": "pv",
    "load_peak_deviation": "pv",
    "setpoint_itae": "pv",
    "load_itae": "pv",
    "final_pv": "pv",
    "output_travel": "op",
    "final_op": "op",
}
"""Measures that carry a unit of PV or OP; the rest are times, counts and shares."""


def _in_units(case: Case, measures: Measures) -> Measures:
    """Measures in percent of span as measures in engineering units, finals absolute."""
    spans = {"pv": case.pv.range.span, "op": case.op.range.span}
    scaled = {
        name: getattr(measures, name).times(spans[kind] / 100.0)
        for name, kind in _MEASURE_SCALE.items()
    }
    for name in ("setpoint_ise", "load_ise"):
        scaled[name] = getattr(measures, name).times((case.pv.range.span / 100.0) ** 2)
    for name, rest in (("final_pv", case.pv.rest), ("final_op", case.op.rest)):
        if scaled[name].value is not None:
            scaled[name] = Figure(scaled[name].value + rest)
    return replace(measures, **scaled)


def _floor(loop: Loop, events: Events) -> tuple[Figure, Figure]:
    """Smallest peak deviation and IAE that any controller can leave after the load step [% of PV].

    Before the load shows in PV nothing is known of it, and what the controller then does shows only
    after the plant's dead time: until then PV moves as if nobody controlled it.
    """
    if not events.load_step:
        none = Figure(None, "the scenario has no load step")
        return none, none
    if isinstance(loop, Structure):
        none = Figure(None, "it is only known for a single loop without feedforward")
        return none, none
    if not events.are_steps:
        none = Figure(None, "it is only known for a load step, in automatic, on one plant")
        return none, none
    first = loop.load.dead_time + loop.plant.dead_time + loop.computing_delay
    shown = loop.plant.dead_time + loop.computing_delay
    if shown == 0.0:
        return Figure(0.0), Figure(0.0)
    time = np.linspace(0.0, first, 401)
    free = np.abs(step_response(loop.load, time) * events.load_step)
    return Figure.of(float(free.max())), Figure.of(float(np.trapezoid(free, time)))


@dataclass(frozen=True)
class Response:
    """Open-loop response of a plant from rest."""

    time: Floats
    """[s], shape (n,)"""
    op: Floats
    """The input, as a deviation from rest."""
    pv: Floats
    """The output, as a deviation from rest."""
    final_value: Figure
    peak: Figure
    """Largest deviation within the time asked for, with its sign."""


def respond(plant: TransferFunction, signal: Signal, until: float, rows: int = 1001) -> Response:
    """Response of a plant to a step, ramp, pulse, doublet, sine or impulse, exact at every row.

    Parameters
    ----------
    plant
        Without a dead time inside an inner feedback.
    signal
        What moves the input.
    until
        End of the response [s].
    rows
        Number of equally spaced instants.

    Raises
    ------
    ModelError
        A response that begins with an infinite spike, or a width or period of 0.
    """
    transform = plant * signal.transform()
    time = np.linspace(0.0, until, rows)
    pv = impulse_response(transform, time)
    peak = float(pv[np.abs(pv).argmax()])
    return Response(time, signal.values(time), pv, final_value(transform), Figure.of(peak))


def respond_to_record(plant: TransferFunction, record: Record) -> Response:
    """Response of a plant to the OP of a record, held between rows; deviations from its start."""
    op = record.op - record.op[0]
    pv = held_response(plant, record.time, op, record.time)
    none = Figure(None, "a recorded input has no last value to hold for ever")
    peak = float(pv[np.abs(pv).argmax()])
    return Response(record.time, op, pv, none, Figure.of(peak))
