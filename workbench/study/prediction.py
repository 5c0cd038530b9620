"""What the loop and the plant do: the closed loop through its scenario, the plant alone."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Final, Literal, TypeVar

import numpy as np
from numpy.typing import NDArray

from workbench.case.case import Case
from workbench.errors import InputError, ModelError, Problem, problem
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.response import (
    Signal,
    final_value,
    held_response,
    impulse_response,
)
from workbench.model.stability import plant_verdict
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.delayed import impulse_answer, upset_answer
from workbench.sim.floor import floor
from workbench.sim.instruments import Instruments
from workbench.sim.loop import Trace, settle_horizon, simulate
from workbench.sim.metrics import Measures, measure
from workbench.sim.scenario import NEW_SETTINGS, Events, Scenario
from workbench.sim.signals import held
from workbench.sim.structures import Inside
from workbench.study.loop import (
    controller_of,
    instruments_of,
    load_scale,
    loop_of,
    no_time_domain,
)
from workbench.study.upset import recorded_upset
from workbench.units import Figure, rounded, text

if TYPE_CHECKING:
    from workbench.records.record import Record

Floats = NDArray[np.float64]
Answer = TypeVar("Answer")


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
    events: Events
    """What was run, in percent of span: for running other plants through the same."""
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


def _load_travel(trace: Trace, events: Events) -> Figure:
    """All moves of OP from the load step on, added up [%]."""
    if not events.load_step:
        return Figure(None, "there is no load step")
    if trace.diverged:
        return Figure(None, "the loop is unstable")
    before = max(int(np.searchsorted(trace.time, events.load_at)) - 1, 0)
    return Figure.of(float(np.abs(np.diff(trace.output[before:])).sum()))


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

    Raises `InputError` where plant or controller is missing, or the loop cannot be followed.
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
        events=events,
        inner=None if trace.inner is None else _inner_trend(case, loop, trace.inner),
    )


def predicted(
    case: Case, seed: int = 0, like: Prediction | None = None
) -> tuple[Prediction | None, str]:
    """The prediction, or why this loop has none although it is one.

    Raises `InputError` for what the scenario or a setting is to blame for.
    """
    return _or_why(case, lambda: predict(case, seed, like))


def predicted_measures(case: Case) -> tuple[tuple[Measures, Figure] | None, str]:
    """The measures of `predicted` alone, for many settings side by side.

    With them all moves of OP from the load step on, added up [OP unit].
    """

    def measured() -> tuple[Measures, Figure]:
        loop, events, _, trace = _run(case, 0, None)
        measures = _in_units(case, measure(trace, events, low=loop.low, high=loop.high))
        return measures, _load_travel(trace, events).times(case.op.range.span / 100.0)

    return _or_why(case, measured)


def _or_why(case: Case, answer: Callable[[], Answer]) -> tuple[Answer | None, str]:
    missing = no_time_domain(loop_of(case).plant)
    if missing:
        return None, missing
    try:
        return answer(), ""
    except InputError as fault:
        first = fault.problems[0]
        if first.key != "controller.scan":
            raise
        return None, f"{first.key} {first.what}"


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


def steps_of(case: Case) -> tuple[float, float]:
    """Setpoint step [% of PV span] and load step [input of the loop's load path] of the scenario.

    5 % of the spans where it has neither, and no recorded upset, which is taken as it was.
    """
    scenario, scale = case.scenario, load_scale(case)
    if _says_nothing(case):
        return 5.0, case.op.range.units(5.0) * scale
    setpoint_step = case.pv.range.percent(scenario.setpoint_step or 0.0)
    load_step = scenario.load_step
    if load_step is None:
        load_step = 1.0 if scenario.load_file else 0.0
    return setpoint_step, load_step * scale


def _says_nothing(case: Case) -> bool:
    scenario = case.scenario
    return scenario.setpoint_step is None and scenario.load_step is None and not scenario.load_file


def _events(case: Case, loop: Loop, seed: int, like: Prediction | None) -> Events:
    """The scenario made definite, every default filled in."""
    scenario, pv = case.scenario, case.pv
    setpoint_step, load_step = steps_of(case)
    at = scenario.setpoint_at.seconds
    load_at = scenario.load_at.seconds if scenario.load_at else 0.0
    until = scenario.until.seconds if scenario.until else None
    recorded = recorded_upset(case)
    halved = _says_nothing(case) and scenario.load_at is None
    if until is None:
        horizon = settle_horizon(loop)
        load_at = at + horizon if halved else load_at
        lasting = recorded[-1][0] if recorded else 0.0
        until = _last_move(scenario, at, load_at + lasting, setpoint_step, load_step) + horizon
        if loop.setpoint_rate is not None and setpoint_step:
            until += abs(setpoint_step) / loop.setpoint_rate
        # Comparable as long as neither is squeezed into a corner of the other.
        if like is not None and until / 3.0 <= like.until_s <= until * 3.0:
            until = like.until_s
    if halved:
        load_at = at + (until - at) / 2.0
    return Events(
        setpoint_step=setpoint_step,
        setpoint_at=at,
        load_step=load_step,
        load_at=load_at,
        until=until,
        # Noise is what a scan samples: an analogue controller has no scans to give it to.
        noise=pv.range.percent(pv.noise) if loop.scan else 0.0,
        seed=seed,
        setpoint_ramp=scenario.setpoint_ramp.seconds if scenario.setpoint_ramp else 0.0,
        load_shape=scenario.load_shape,
        load_time=scenario.load_time.seconds if scenario.load_time else 0.0,
        load_record=recorded,
        manual_at=scenario.manual_at.seconds if scenario.manual_at else None,
        manual_output=None
        if scenario.manual_output is None
        else case.op.range.percent(scenario.manual_output - case.op.rest),
        automatic_at=scenario.automatic_at.seconds if scenario.automatic_at else None,
        change_at=scenario.change_at.seconds if scenario.change_at else None,
        gain_factor=scenario.gain_factor,
        dead_time_factor=scenario.dead_time_factor,
        settings_at=scenario.settings_at.seconds if scenario.settings_at else None,
        settings=_new_settings(case),
        inner_mode_at=scenario.inner_mode_at.seconds if scenario.inner_mode_at else None,
        inner_mode=scenario.inner_mode,
    )


def _new_settings(case: Case) -> Gains | None:
    """The settings that the controller gets on the way; `None` where it keeps its own.

    Raises `InputError` where its form does not take them, under the keys of the scenario.
    """
    scenario, controller = case.scenario, controller_of(case)
    if scenario.settings_at is None:
        return None
    changed = controller
    try:
        if scenario.new_gain is not None:
            changed = replace(changed, gain=scenario.new_gain, proportional_band=None)
        if scenario.new_integral:
            changed = replace(changed, integral=scenario.new_amount("new_integral"))
        if scenario.new_derivative:
            changed = replace(changed, derivative=scenario.new_amount("new_derivative"))
        return changed.gains()
    except InputError as fault:
        keys = {name: key for key, name in NEW_SETTINGS.items()}
        raise InputError(
            replace(each, key=f"scenario.{keys.get(each.key, 'settings_at')}")
            for each in fault.problems
        ) from None


_SWINGS: Final = 8
"""Periods of a sine that a prediction without an end shows."""


def _last_move(
    scenario: Scenario, at: float, load_at: float, setpoint: float, load: float
) -> float:
    """When the last thing happens that has to settle [s]."""
    time = scenario.load_time.seconds if scenario.load_time else 0.0
    lasting = {"step": 0.0, "sine": _SWINGS * time, "record": 0.0}.get(scenario.load_shape, time)
    moves = [at + (scenario.setpoint_ramp.seconds if scenario.setpoint_ramp else 0.0)]
    moves = moves if setpoint else []
    moves += [load_at + lasting] if load else []
    others = (
        scenario.manual_at,
        scenario.automatic_at,
        scenario.change_at,
        scenario.settings_at,
        scenario.inner_mode_at,
    )
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
        From OP to PV; a dead time inside an inner feedback is followed to 1e-6 of the step.
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
    inverse = impulse_answer if plant.has_delayed_feedback else impulse_response
    with np.errstate(over="ignore", invalid="ignore"):
        pv = inverse(transform, time)
    if not np.isfinite(pv).all():
        raise ModelError(Problem("grows beyond every number", "give an earlier end"))
    final = _final(plant, signal) if plant.has_delayed_feedback else final_value(transform)
    return Response(time, signal.values(time), pv, final, _peak(transform, time, pv, final))


def _final(plant: TransferFunction, signal: Signal) -> Figure:
    """The limit of PV where the plant has infinitely many poles."""
    verdict = plant_verdict(plant)
    if not verdict.stable and not plant.integrators > 0:
        return Figure(None, f"the plant is not stable: {verdict.reason}")
    if signal.kind == "sine":
        return Figure(None, "it swings for ever")
    limit = (plant * signal.transform()).slope()
    return limit if limit.value is not None else Figure(None, "it moves on for ever")


def _peak(transform: TransferFunction, time: Floats, pv: Floats, final: Figure) -> Figure:
    """The largest deviation, between the rows too: about the largest of them, and at the jumps."""
    at = int(np.abs(pv).argmax())
    swings = "swings for ever" in final.reason
    if final.value is None and not swings and at == len(pv) - 1:
        return Figure(None, f"PV moves on without end, and is {text(float(pv[-1]))} at the last")
    near = np.linspace(time[max(at - 1, 0)], time[min(at + 1, len(time) - 1)], 401)
    jumps = [delay for delay in transform.delays if delay <= time[-1]]
    inverse = impulse_answer if transform.has_delayed_feedback else impulse_response
    closer = inverse(transform, np.unique([*near, *jumps]))
    return Figure.of(float(max((float(pv[at]), *closer.tolist()), key=abs)))


def response_horizon(plant: TransferFunction, signal: Signal) -> float:
    """Long enough to see all of a response [s], to two digits.

    A stable part settles within the sum of its lags and 5 times their root mean square sum; what
    grows is followed for 3 of its time constants, a sine for 5 periods.
    """
    poles = [pole for term in plant.denominator for pole in term.polynomial.roots]
    lags = [1.0 / abs(p.real) for p in poles if p.real < 0.0]
    swings = [2.0 * math.pi / p.imag for p in poles if p.imag > 0.0 and p.real == 0.0]
    growing = [1.0 / p.real for p in poles if p.real > 0.0]
    settles = sum(lags) + 5.0 * math.sqrt(sum(lag * lag for lag in lags))
    own = max([settles, *(3.0 * t for t in growing), *(5.0 * t for t in swings)])
    if growing:
        own = min(own, 20.0 * min(growing))
    # A dead time inside a feedback goes round a few times before all is calm.
    dead = 3.0 * max(plant.delays, default=0.0)
    dead += 10.0 * sum(term.dead_time for term in plant.denominator)
    moves = {"pulse": 2.0 * signal.width, "doublet": 3.0 * signal.width, "sine": 5 * signal.period}
    total = signal.at + moves.get(signal.kind, 0.0) + own + dead
    return rounded(total - signal.at or 60.0, 2) + signal.at


def respond_to_record(plant: TransferFunction, record: Record) -> Response:
    """Response of a plant to the OP of a record, held between rows; deviations from its start.

    Raises `ModelError` for a plant that cannot be followed in time.
    """
    missing = no_time_domain(plant)
    if missing:
        raise ModelError(Problem(f"cannot be answered: {missing}", "draw it without that feedback"))
    op = record.op - record.op[0]
    if plant.has_delayed_feedback:
        pv = upset_answer(plant, held(record.time, op), record.time)
    else:
        pv = held_response(plant, record.time, op, record.time)
    none = Figure(None, "a recorded input has no last value to hold for ever")
    peak = float(pv[np.abs(pv).argmax()])
    return Response(record.time, op, pv, none, Figure.of(peak))
