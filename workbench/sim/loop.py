"""The engine: a loop and what happens to it -> what PV and OP do.

A sampled controller is followed by `scans`, an analogue one by `analogue`; both leap while the loop
is linear.  Signals are deviations from where the loop rests, in percent of span; time in seconds.
What the trace amounts to is worked out by `metrics`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import problem
from workbench.model.feedback import Loop
from workbench.model.structures import Structure
from workbench.sim import analogue, delayed, signals
from workbench.sim.controller import Algorithm
from workbench.sim.course import Passage, passage, setpoints
from workbench.sim.instruments import Instruments
from workbench.sim.process import Process, process
from workbench.sim.scans import Clock, Course, Held
from workbench.sim.scenario import Events
from workbench.sim.signals import Signal, Step
from workbench.sim.structures import Execution, Inside, as_played

Array = NDArray[np.float64]

MOST_SCANS: Final = 200_000
_ROWS: Final = 3000
"""Rows an analogue trace has at least; a sampled one half as many."""
_CORNERS: Final = 200
"""Corners of an upset that get a row of their own; more are felt, but not drawn to the instant."""
_PLAIN: Final = Instruments()
_GLANCE: Final = 2_000
"""Pieces that finding out how long to look is worth."""
_FINE_STEPS: Final = 20_000
"""Steps in which an analogue loop with limits in force is followed."""


@dataclass(frozen=True)
class Trace:
    """What the loop did, row by row; all arrays have shape (n_rows,)."""

    time: Array
    """Rising [s].  Where a signal jumps there is a row just before and one at the jump."""
    setpoint: Array
    """[% of PV span], a deviation."""
    pv: Array
    """[% of PV span], a deviation, without measurement noise."""
    output: Array
    """[% of OP span], a deviation; in force from its row on."""
    measured: Array
    """PV with the noise of the latest scan [% of PV span]; what the sensor showed then, where it
    has a resolution or stops at its range."""
    diverged: bool = False
    """The loop is unstable and was cut off where it left 1e6 %."""
    inner: Inside | None = None
    """What the inner loop of a cascade did, at its own scans."""


def simulate(loop: Loop, events: Events, instruments: Instruments = _PLAIN) -> Trace:
    """The course of a loop from rest through its events.

    Parameters
    ----------
    loop
        Percent of span and seconds.  With a scan, the algorithm of `controller` is executed at
        t = 0, h, 2h ...; a setpoint step is seen at the first scan not before it, the upset acts at
        its true instant, and the output changes after the computing delay and is held.
    events
        Steps [% of PV span; unit of the load path], instants and end [s], noise [% of PV span].
    instruments
        The valve after the output, the sensor before the controller.

    Returns
    -------
    Trace
        A row at every scan and finer where the scan is long; analogue loops at least 3000 rows.

    Raises
    ------
    InputError
        Too many scans, or too fast an analogue loop, for the end asked for; noise on an analogue
        controller; an analogue loop that makes impulses; a structure without a scan, or with two
        that do not go together.  `ModelError` for a plant with a dead time
        inside an inner feedback.

    Notes
    -----
    Sampled: exact but for rounding.  Analogue: about 1e-7 of the step; followed in 20 000 fine
    steps or more, and to about 1e-3, while a limit or rate limit of the output is in force, and
    where more happens than a step of each, or something in the loop is not linear.
    """
    if loop.scan is None and (isinstance(loop, Structure) or delayed.beyond_state_space(loop)):
        return _as_trace(delayed.play_analogue(loop, events, instruments, _ROWS))
    if isinstance(loop, Structure):
        return _structured(loop, events, instruments)
    if delayed.beyond_state_space(loop):
        return _structured(Structure(**vars(loop)), events, instruments)
    if loop.scan is None:
        return _analogue(loop, events, instruments)
    clock = Clock(loop.scan, loop.computing_delay)
    _check(events.until, clock)
    return _sampled_trace(passage(loop, process(loop), clock, events, instruments), events)


def _structured(loop: Structure, events: Events, instruments: Instruments) -> Trace:
    """A loop with compensation, feedforward or an inner loop."""
    played = as_played(loop, events)
    assert played.scan is not None
    clock = Clock(played.scan, played.computing_delay)
    _check(events.until, clock)
    execution = Execution(loop, clock, events, instruments)
    outside = execution.outside(instruments)
    if delayed.beyond_state_space(played):
        taken = setpoints(loop, events, clock, clock.place(events.until)[0] + 1)
        done = delayed.play_sampled(played, clock, events, outside, execution.step, taken)
        return replace(_as_trace(done), inner=execution.inside())
    found = passage(played, process(played), clock, events, outside, by=execution.step)
    own = replace(found.course, outputs=np.array(execution.outputs))
    return replace(_sampled_trace(replace(found, course=own), events), inner=execution.inside())


def _as_trace(done: delayed.Played) -> Trace:
    return Trace(
        done.time, done.setpoint, done.pv, done.output, done.measured, diverged=done.diverged
    )


def _check(until: float, clock: Clock) -> None:
    if until > MOST_SCANS * clock.scan:
        raise problem(
            f"{until / clock.scan:.0f} scans are too many (at most {MOST_SCANS})",
            "give an earlier end, or a longer scan",
            key="scenario.until",
        )


# --- rows of a sampled loop ----------------------------------------------------------------------


def _sampled_trace(found: Passage, events: Events) -> Trace:
    course, held = found.course, found.plants[0][1]
    clock, load = held.clock, events.load
    scans = len(course.pv)
    # Rows at the same places in every scan, and single ones where something happens in between.
    offsets = _offsets(held, events.until)
    time: Array = np.arange(float(scans))
    time *= clock.scan
    number, values = np.arange(scans), course.pv
    if len(offsets) > 1 or clock.lead:
        time = np.add.outer(time, offsets).ravel()
        values = np.column_stack([_pv(found, load, offset) for offset in offsets]).ravel()
        number = np.repeat(number, len(offsets))
    single = sorted({clock.place(instant) for instant in _between(held, events)})
    single = [(scan, rest) for scan, rest in single if scan < scans and rest not in offsets]
    for scan, rest in single:
        instant = scan * clock.scan + rest
        place = int(np.searchsorted(time, instant))
        time = _with(time, place, instant)
        values = _with(values, place, _pv_once(found, load, scan, rest))
        number = np.concatenate([number[:place], [scan], number[place:]])
    if time[-1] > events.until + 1e-9 * clock.scan:
        last = int(np.searchsorted(time, events.until + 1e-9 * clock.scan))
        time, values, number = time[:last], values[:last], number[:last]
    measured = values
    if found.is_held:
        measured = course.measured[number]
    elif course.measured is not course.pv:
        measured = values + (course.measured - course.pv)[number]
    # Where every row is a scan and its output acts at once, the outputs are in force as they are.
    is_plain = len(time) == scans and not clock.computing_delay
    output = course.outputs if is_plain else _in_force(held, course, time, number)
    setpoint = signals.values(events.setpoint, time + 1e-9 * clock.scan)
    return Trace(time, setpoint, values, output, measured, course.diverged)


def _with(values: Array, place: int, value: float) -> Array:
    return np.concatenate([values[:place], [value], values[place:]])


def _offsets(held: Held, until: float) -> list[float]:
    """Where rows lie in a scan [s]: fine enough to draw PV by straight lines."""
    scan = held.clock.scan
    wanted = min(until / (_ROWS / 2), max(0.2 * _shortest_lag(held.process), until / (4 * _ROWS)))
    parts = math.ceil(scan / wanted - 1e-9)
    found = [scan * k / parts for k in range(parts)]
    delay = held.clock.place(held.clock.computing_delay)[1]
    return sorted({*found, delay})


def _shortest_lag(whole: Process) -> float:
    if not len(whole.c):
        return math.inf
    rows = whole.a.tolist()
    if any(any(row[i + 1 :]) for i, row in enumerate(rows)):
        rate = float(np.abs(np.linalg.eigvals(whole.a)).max())
    else:
        rate = max(abs(row[i]) for i, row in enumerate(rows))
    return 1.0 / rate if rate else math.inf


def _between(held: Held, events: Events) -> list[float]:
    """Instants that need a row of their own [s]."""
    found = [events.until]
    if events.setpoint_step:
        found += [part.time for part in events.setpoint]
    # Where the scans are that close, what comes in between is drawn well enough from one to the
    # next, but for a jump of PV.
    is_close = held.clock.scan <= events.until / _ROWS
    if events.load_step and (not is_close or any(entry.d for entry in held.process.load)):
        for part in events.load[:_CORNERS]:
            found.append(part.time)
            for entry in held.process.load:
                arrival = part.time + entry.dead_time
                found.append(arrival)
                if entry.d:
                    found.append(max(0.0, arrival - 1e-6 * held.clock.scan))
    return [time for time in found if time <= events.until]


def _weights(held: Held, offset: float) -> tuple[Array, dict[int, float]]:
    """PV at `offset` [s] after a scan: weights on the state and on the outputs of scans back."""
    part, c = held.over(offset), held.process.c
    weights = dict(part.weights)
    for back, tap in part.taps.items():
        weights[back] = weights.get(back, 0.0) + float(c @ tap)
    return c @ part.phi, weights


def _pv(found: Passage, load: Signal, offset: float) -> Array:
    """PV [%] at `offset` [s] after every scan (n_scans,)."""
    course, scans = found.course, len(found.course.pv)
    if offset == found.plants[0][1].clock.lead:
        return course.pv
    parts = []
    ends = [start for start, _ in found.plants[1:]]
    for (start, held), end in zip(found.plants, [*ends, scans], strict=True):
        row, weights = _weights(held, offset)
        pv = course.states @ row
        for back, weight in weights.items():
            pv[back:] += weight * course.acting[: max(0, scans - back)]
        state, direct = held.upset(load, scans, offset).over(0, scans)
        parts.append((pv + state @ held.process.c + direct)[start:end])
    return np.concatenate(parts)


def _pv_once(found: Passage, load: Signal, scan: int, offset: float) -> float:
    """PV [%] at `offset` [s] after one scan."""
    course = found.course
    held = next(plant for start, plant in reversed(found.plants) if start <= scan)
    row, weights = _weights(held, offset)
    pv = float(course.states[scan] @ row)
    for back, weight in weights.items():
        if scan >= back:
            pv += weight * float(course.acting[scan - back])
    upset = held.upset(load, scan + 1, offset)
    return pv + float(upset.state[-1] @ held.process.c) + float(upset.direct[-1])


def _in_force(held: Held, course: Course, time: Array, number: NDArray[np.signedinteger]) -> Array:
    """The output in force at each row."""
    clock = held.clock
    whole, rest = clock.place(clock.computing_delay)
    if not whole and not rest:
        return np.asarray(course.outputs[number], np.float64)
    late = time - number * clock.scan < rest - 1e-9 * clock.scan
    computed = number - whole - late
    return np.where(computed >= 0, course.outputs[np.maximum(computed, 0)], 0.0)


# --- rows of an analogue loop --------------------------------------------------------------------


def _analogue(
    loop: Loop,
    events: Events,
    instruments: Instruments = _PLAIN,
    most_pieces: int = analogue.MOST_PIECES,
) -> Trace:
    if events.noise:
        raise problem(
            "measurement noise has no meaning for an analogue controller",
            "give the controller a scan, or leave the noise out",
            key="controller.scan",
        )
    whole = process(loop)
    if not (events.are_steps and instruments.are_plain and _is_linear(loop)):
        return _in_fine_steps(loop, whole, events, instruments)
    setpoint = Step(events.setpoint_step, events.setpoint_at)
    load = Step(events.load_step, events.load_at)
    pieces, diverged = analogue.solve(loop, whole, setpoint, load, events.until, most_pieces)
    if _is_limited(loop, pieces):
        return _in_fine_steps(loop, whole, events, instruments)
    return _analogue_trace(pieces, events, diverged)


def _is_linear(loop: Loop) -> bool:
    """Apart from the limits of its output."""
    shaped = loop.setpoint_rate is not None or loop.setpoint_filter or loop.bias
    return not (loop.dead_zone or loop.gain_at_rest != 1.0 or shaped)


def _is_limited(loop: Loop, pieces: list[analogue.Piece]) -> bool:
    low = -math.inf if loop.low is None else loop.low
    high = math.inf if loop.high is None else loop.high
    if not pieces:
        return False
    nodes = np.array([piece.nodes for piece in pieces])
    if nodes.min() < low or nodes.max() > high:
        return True
    if loop.rate is None:
        return False
    starts = nodes[:, 0] - np.concatenate([[0.0], nodes[:-1, -1]])
    lengths = np.array([piece.length for piece in pieces])
    coefficients = np.array([piece.output for piece in pieces])
    shares = np.linspace(0.0, 1.0, coefficients.shape[1])
    slopes = np.array([k * shares ** max(k - 1, 0) for k in range(coefficients.shape[1])])
    moves = np.abs(coefficients @ slopes) / lengths[:, np.newaxis]
    small = 1e-6 * float(np.abs(nodes).max())
    return bool(np.abs(starts).max() > small) or bool(moves.max() > loop.rate)


def _analogue_trace(pieces: list[analogue.Piece], events: Events, diverged: bool) -> Trace:
    spacing = events.until / _ROWS
    begin = pieces[0].start if pieces else events.until
    still = np.linspace(0.0, begin, math.ceil(begin / spacing) + 1)[:-1]
    times, pv, output = [still], [np.zeros(len(still))], [np.zeros(len(still))]
    last = (0.0, 0.0, begin / (len(still) + 1))
    for piece in pieces:
        count = max(len(piece.pv) - 1, math.ceil(piece.length / spacing))
        t, y, u = piece.rows(count)
        if piece.start and max(abs(y[0] - last[0]), abs(u[0] - last[1])) > 1e-6:
            times.append(np.array([piece.start - 1e-6 * last[2]]))
            pv.append(np.array([last[0]]))
            output.append(np.array([last[1]]))
        times.append(t[:-1])
        pv.append(y[:-1])
        output.append(u[:-1])
        last = (float(y[-1]), float(u[-1]), piece.length)
    end = pieces[-1].start + pieces[-1].length if diverged and pieces else events.until
    time = np.append(np.concatenate(times), end)
    values = np.append(np.concatenate(pv), last[0])
    setpoint = np.where(time >= events.setpoint_at, events.setpoint_step, 0.0)
    return Trace(
        time, setpoint, values, np.append(np.concatenate(output), last[1]), values, diverged
    )


def _in_fine_steps(loop: Loop, whole: Process, events: Events, instruments: Instruments) -> Trace:
    """An analogue loop that is not linear throughout, in steps so short that they do not show.

    PV is read half a step ahead, and the parts of the controller are corrected by half a step, so
    that holding and summing leave an error of the second order in the step while no limit is met.
    """
    if any(entry.d and not entry.dead_time for entry in whole.output) and (
        loop.gains.proportional or loop.gains.derivative
    ):
        raise problem(
            "limits on an analogue loop in which PV jumps with the output",
            "give the controller a scan, or the plant a lag or a dead time",
            key="controller.scan",
        )
    clock = _fine_clock(loop, whole, events)
    rest = clock.place(events.until)[1]
    found = passage(
        loop, whole, clock, events, instruments, lambda one: _corrected(one, clock.scan)
    )
    course = found.course
    keep = _rows_to_keep(course, clock, events)
    time: Array = np.asarray(keep * clock.scan, np.float64)
    pv, output = _pv(found, events.load, 0.0)[keep], course.outputs[keep]
    if rest and not course.diverged:
        time = np.append(time, events.until)
        pv = np.append(pv, _pv_once(found, events.load, len(course.pv) - 1, rest))
        output = np.append(output, output[-1])
    setpoint = signals.values(events.setpoint, time + 1e-9 * clock.scan)
    return Trace(time, setpoint, pv, output, pv, course.diverged)


def _fine_clock(loop: Loop, whole: Process, events: Events) -> Clock:
    """Steps short against horizon, lags and dead times, and one of them at the setpoint step."""
    # A rate limit that a jump runs into begins half a step early: it wants shorter ones.
    least = _FINE_STEPS if loop.rate is None else 2 * _FINE_STEPS
    shortest = min([_shortest_lag(whole), *(e.dead_time for e in whole.output if e.dead_time)])
    steps = min(max(least, math.ceil(20 * events.until / shortest)), 3 * _FINE_STEPS)
    step = events.until / steps
    if step < events.setpoint_at < events.until:
        step = events.setpoint_at / math.ceil(events.setpoint_at / step)
    return Clock(step, 0.0, lead=0.5 * step)


def _corrected(loop: Loop, h: float) -> Algorithm:
    """The algorithm over a fine step, without the half step that summing and differencing add."""
    plain, gains = Algorithm.of(loop, h), loop.gains
    half = 0.5 * gains.integral * h
    proportional = gains.proportional - half
    weight = (gains.setpoint_weight * gains.proportional - half) / (proportional or 1.0)
    filter_time = max(0.0, gains.filter_time - 0.5 * h)
    return replace(
        plain,
        proportional=proportional,
        setpoint_weight=weight,
        keep=filter_time / (filter_time + h),
        kick=gains.derivative / (filter_time + h),
        smooth=h / (loop.pv_filter + h),
    )


def _rows_to_keep(course: Course, clock: Clock, events: Events) -> NDArray[np.intp]:
    """Every few steps, and all of those where the output turns a corner."""
    count = len(course.pv)
    stride = max(1, count // _ROWS)
    corner = np.abs(np.diff(course.outputs, n=2, prepend=[0.0, 0.0]))
    sharp = np.flatnonzero(corner > 1e-3 * max(float(np.abs(course.outputs).max()), 1e-300))
    marks = [clock.first_scan(t) for t in (events.setpoint_at, events.load_at)]
    near = np.concatenate([sharp - 1, sharp, marks, np.array(marks) - 1]).astype(np.intp)
    near = near[(near >= 0) & (near < count)]
    return np.unique(np.concatenate([np.arange(0, count, stride), near, [count - 1]]))


# --- how long to look ----------------------------------------------------------------------------


def settle_horizon(loop: Loop) -> float:
    """How long the slower of a setpoint response and a load response takes to settle [s].

    Measured from the step.  Found by simulating unit steps of both, without limits, over a first
    guess from the time scales of plant, dead time and controller, doubled until both have settled
    to 0.5 % of the setpoint step and 2 % of the load's peak; then trimmed with a quarter to spare
    and rounded up to two digits.  A loop that does not settle (unstable, or an integrating plant
    without integral action) gets a few of its own time scales, so that one sees what it does.
    """
    free = replace(
        loop, low=None, high=None, rate=None, dead_zone=0.0, bias=0.0, setpoint_rate=None
    )
    # A cascade is played at the scan of its inner loop.
    shortest = loop.inner.scan if isinstance(loop, Structure) and loop.inner else loop.scan
    longest = MOST_SCANS * shortest / 2.5 if shortest else math.inf
    window = guess = min(6.0 * _time_scale(loop), longest)
    for _ in range(6):
        trace = _look(free, window)
        if trace is None:
            break
        if trace.diverged:
            far = np.flatnonzero(np.abs(trace.pv) > 20.0)
            return _rounded_up(max(float(trace.time[far[0]]), 20 * (loop.scan or 0.0)))
        responses = _responses(trace, window, bool(loop.gains.integral))
        settled = max(response.settled for response in responses)
        if settled <= 0.6 * window:
            return _rounded_up(max(1.25 * settled, 20 * (loop.scan or 0.0), 0.05 * guess))
        if not all(response.calms_down for response in responses) or 2.0 * window > longest:
            break
        window *= 2.0
    return _rounded_up(guess)


def _time_scale(loop: Loop) -> float:
    """Sum of lags, dead times and controller times [s]."""
    gains = loop.gains
    poles = {
        pole
        for path in (loop.plant, loop.load)
        for term in path.denominator
        for pole in term.polynomial.roots
    }
    lags = [1.0 / max(abs(p.real), 0.05 * abs(p)) for p in poles if p]
    # A dead time inside a feedback goes round a few times before all is calm.
    scale = sum(lags) + 3.0 * sum(term.dead_time for term in loop.plant.denominator)
    scale += loop.plant.dead_time + loop.load.dead_time + loop.pv_filter
    scale += 2.0 * (loop.scan or 0.0) + loop.computing_delay
    if gains.integral:
        scale += abs(gains.proportional / gains.integral)
        # What integral action alone would need, where the proportional part hardly helps.
        gain, slope = loop.plant.gain().value, loop.plant.slope().value
        if gain:
            scale += min(1.0 / abs(gains.integral * gain), 10.0 * scale or math.inf)
        elif slope and gains.proportional:
            scale += min(1.0 / abs(gains.proportional * slope), 10.0 * scale)
    return scale if scale > 0.0 else 1.0


def _look(loop: Loop, window: float) -> Trace | None:
    """Unit steps of setpoint and load, a window [s] for each; None where it would take too long."""
    events = Events(1.0, 0.0, 1.0, window, 2.0 * window)
    if loop.scan is not None:
        return simulate(loop, events)
    if isinstance(loop, Structure) or delayed.beyond_state_space(loop):
        return simulate(loop, events)
    try:
        return _analogue(loop, events, most_pieces=_GLANCE)
    except analogue.TooManyPieces:
        return None


@dataclass(frozen=True)
class _Response:
    settled: float
    """Last time outside the band [s after the step]."""
    calms_down: bool
    """It is still coming nearer in the last quarter of the window."""


def _responses(trace: Trace, window: float, returns: bool) -> list[_Response]:
    """How the responses at 0 and at `window` [s] settle, each within a window.

    PV returns to the setpoint of 1 % (`returns`), or settles where it is at the end.
    """
    found, before = [], 0.0
    for start, share in ((0.0, 0.005), (window, 0.02)):
        rows = (trace.time >= start) & (trace.time < start + window)
        time, pv = trace.time[rows] - start, trace.pv[rows]
        away = np.abs(pv - (1.0 if returns else pv[-1]))
        size = 1.0 if start == 0.0 else max(float(np.abs(pv - before).max()), 1e-9)
        outside = np.flatnonzero(away > share * size)
        settled = float(time[outside[-1]]) if len(outside) else 0.0
        last, third = (
            float(away[(time >= begin * window) & (time < (begin + 0.25) * window)].max(initial=0))
            for begin in (0.75, 0.5)
        )
        found.append(_Response(settled, last < 0.97 * third))
        before = float(pv[-1])
    return found


def _rounded_up(seconds: float) -> float:
    """To two digits."""
    unit = 10.0 ** (math.floor(math.log10(seconds)) - 1)
    return float(f"{math.ceil(seconds / unit - 1e-9) * unit:.12g}")
