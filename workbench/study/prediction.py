"""What the loop and the plant do: the closed loop through its scenario, the plant alone."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from workbench.case.case import Case
from workbench.errors import ModelError, Problem, problem
from workbench.model.feedback import Loop
from workbench.model.response import (
    Signal,
    final_value,
    held_response,
    impulse_response,
)
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.records.record import Record
from workbench.sim.floor import floor
from workbench.sim.instruments import Instruments
from workbench.sim.loop import Trace, settle_horizon, simulate
from workbench.sim.metrics import Measures, measure
from workbench.sim.scenario import Events, Scenario
from workbench.sim.structures import Inside
from workbench.study.loop import instruments_of, load_scale, loop_of, no_time_domain
from workbench.units import Figure, rounded, text

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
    floor_fixed_peak: Figure
    """The part of the peak's floor that is over before any controller can act [PV unit]."""
    floor_fixed_iae: Figure
    """The same of the IAE [PV unit s]."""
    floor_acts_after_s: Figure
    """From the load step to when the first move of any controller shows in PV."""
    diverged: bool
    """The loop ran away and the trend was cut off."""
    inner: InnerTrend | None = None
    """Where there is an inner loop."""

    @property
    def peak_to_floor(self) -> Figure:
        """The peak deviation as a multiple of its floor."""
        return _ratio(self.measures.load_peak_deviation, self.floor_peak_deviation)

    @property
    def load_iae_to_floor(self) -> Figure:
        """The IAE after the load step as a multiple of its floor."""
        return _ratio(self.measures.load_iae, self.floor_load_iae)


def _ratio(found: Figure, floor: Figure) -> Figure:
    if floor.value is None or found.value is None:
        return Figure(None, floor.reason or found.reason)
    if not floor.value:
        return Figure(None, "the floor is 0")
    return Figure.of(found.value / floor.value)


def predicted_measures(case: Case) -> Measures:
    """The measures of `predict` alone, for many settings side by side; raises as it does."""
    loop, events, _, trace = _run(case, 0, None)
    return _in_units(case, measure(trace, events, low=loop.low, high=loop.high))


def _run(case: Case, seed: int, like: Prediction | None) -> tuple[Loop, Events, Instruments, Trace]:
    """The loop, what happens to it, what stands between it and the plant, and its course."""
    loop = loop_of(case)
    missing = no_time_domain(loop.plant)
    if missing:
        raise problem(
            f"cannot be predicted: {missing}",
            "`workbench assess` judges this loop; for a trend draw the plant without that feedback",
            key="plant",
        )
    events = _events(case, loop, seed, like)
    instruments = instruments_of(case)
    trace = simulate(loop, events, instruments)
    return loop, events, instruments, trace


def predict(case: Case, seed: int = 0, like: Prediction | None = None) -> Prediction:
    """Run the closed loop through the case's scenario.

    Where the scenario leaves its end open it lasts long enough to settle, or as long as the
    prediction `like` with which it is to be compared.

    Raises `InputError` where plant or controller is missing, or the plant has a dead time inside an
    inner feedback.
    """
    loop, events, instruments, trace = _run(case, seed, like)
    pv, op = case.pv, case.op
    trend = Trend(
        trace.time,
        pv.rest + trace.setpoint * (pv.range.span / 100.0),
        pv.rest + trace.measured * (pv.range.span / 100.0),
        op.rest + trace.output * (op.range.span / 100.0),
    )
    measures = _in_units(case, measure(trace, events, low=loop.low, high=loop.high))
    least = floor(loop, events, instruments)
    to_pv = pv.range.span / 100.0
    return Prediction(
        setpoint_step=pv.range.units(events.setpoint_step),
        setpoint_at_s=events.setpoint_at,
        load_step=events.load_step / load_scale(case),
        load_at_s=events.load_at,
        until_s=events.until,
        trend=trend,
        measures=measures,
        floor_peak_deviation=least.peak_deviation.times(to_pv),
        floor_load_iae=least.load_iae.times(to_pv),
        floor_fixed_peak=least.fixed_peak.times(to_pv),
        floor_fixed_iae=least.fixed_iae.times(to_pv),
        floor_acts_after_s=least.acts_after,
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


def _events(case: Case, loop: Loop, seed: int, like: Prediction | None) -> Events:
    """The scenario made definite, every default filled in."""
    scenario, pv = case.scenario, case.pv
    setpoint_step, load_step = scenario.setpoint_step, scenario.load_step
    at = scenario.setpoint_at.seconds
    load_at = scenario.load_at.seconds if scenario.load_at else 0.0
    until = scenario.until.seconds if scenario.until else None
    halved = setpoint_step is None and load_step is None
    if halved:
        setpoint_step, load_step = pv.range.units(5.0), case.op.range.units(5.0)
        halved = scenario.load_at is None
    if until is None:
        horizon = settle_horizon(loop)
        load_at = at + horizon if halved else load_at
        until = _last_move(scenario, at, load_at, setpoint_step, load_step) + horizon
        if loop.setpoint_rate is not None and setpoint_step:
            until += abs(pv.range.percent(setpoint_step)) / loop.setpoint_rate
        # Comparable as long as neither is squeezed into a corner of the other.
        if like is not None and until / 3.0 <= like.until_s <= until * 3.0:
            until = like.until_s
    if halved:
        load_at = at + (until - at) / 2.0
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
    """Largest deviation within the time asked for, with its sign; none where PV grows for ever."""


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
    missing = no_time_domain(plant)
    if missing:
        raise ModelError(Problem(f"cannot be answered: {missing}", "draw it without that feedback"))
    transform = plant * signal.transform()
    time = np.linspace(0.0, until, rows)
    with np.errstate(over="ignore", invalid="ignore"):
        pv = impulse_response(transform, time)
    if not np.isfinite(pv).all():
        raise ModelError(Problem("grows beyond every number", "give an earlier end"))
    final = final_value(transform)
    return Response(time, signal.values(time), pv, final, _peak(transform, time, pv, final))


def _peak(transform: TransferFunction, time: Floats, pv: Floats, final: Figure) -> Figure:
    """The largest deviation, between the rows too: about the largest of them, and at the jumps."""
    at = int(np.abs(pv).argmax())
    swings = "swings for ever" in final.reason
    if final.value is None and not swings and at == len(pv) - 1:
        return Figure(None, f"PV moves on without end, and is {text(float(pv[-1]))} at the last")
    near = np.linspace(time[max(at - 1, 0)], time[min(at + 1, len(time) - 1)], 401)
    jumps = [delay for delay in transform.delays if delay <= time[-1]]
    closer = impulse_response(transform, np.unique([*near, *jumps]))
    return Figure.of(float(max((float(pv[at]), *closer.tolist()), key=abs)))


def response_horizon(plant: TransferFunction, signal: Signal) -> float:
    """Long enough to see all of a response [s], to two digits.

    A stable part settles within the sum of its lags and 5 times their root mean square sum; what
    grows is followed for 3 of its time constants, a sine for 5 periods.
    """
    poles = () if plant.has_delayed_feedback else plant.poles()
    lags = [1.0 / abs(p.real) for p in poles if p.real < 0.0]
    swings = [2.0 * math.pi / p.imag for p in poles if p.imag > 0.0 and p.real == 0.0]
    growing = [1.0 / p.real for p in poles if p.real > 0.0]
    settles = sum(lags) + 5.0 * math.sqrt(sum(lag * lag for lag in lags))
    own = max([settles, *(3.0 * t for t in growing), *(5.0 * t for t in swings)])
    if growing:
        own = min(own, 20.0 * min(growing))
    dead = 3.0 * max(plant.delays, default=0.0)
    moves = {"pulse": 2.0 * signal.width, "doublet": 3.0 * signal.width, "sine": 5 * signal.period}
    total = signal.at + moves.get(signal.kind, 0.0) + own + dead
    return rounded(total - signal.at or 60.0, 2) + signal.at


def respond_to_record(plant: TransferFunction, record: Record) -> Response:
    """Response of a plant to the OP of a record, held between rows; deviations from its start.

    Raises `ModelError` for a dead time inside an inner feedback.
    """
    missing = no_time_domain(plant)
    if missing:
        raise ModelError(Problem(f"cannot be answered: {missing}", "draw it without that feedback"))
    op = record.op - record.op[0]
    pv = held_response(plant, record.time, op, record.time)
    none = Figure(None, "a recorded input has no last value to hold for ever")
    peak = float(pv[np.abs(pv).argmax()])
    return Response(record.time, op, pv, none, Figure.of(peak))
