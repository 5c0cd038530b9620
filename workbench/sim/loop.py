"""The engine: a loop and what happens to it -> what PV and OP do.

A sampled controller is followed by `scans`, an analogue one by `analogue`; both leap while the loop
is linear.  Signals are deviations from where the loop rests, in percent of span; time in seconds.
What the trace amounts to is worked out by `metrics`.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import problem
from workbench.model.feedback import Loop
from workbench.sim import analogue
from workbench.sim.controller import Algorithm
from workbench.sim.process import Process, process
from workbench.sim.scans import Clock, Course, Held, Step, first_scan, run, step_through
from workbench.sim.scenario import Events
from workbench.sim.together import run_together

Array = NDArray[np.float64]

MOST_SCANS: Final = 200_000
_ROWS: Final = 3000
"""Rows an analogue trace has at least; a sampled one half as many."""
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
    """PV with the noise of the latest scan [% of PV span]."""
    diverged: bool = False
    """The loop is unstable and was cut off where it left 1e6 %."""


def simulate(loop: Loop, events: Events) -> Trace:
    """The course of a loop from rest through a setpoint step, an upset step and noise.

    Parameters
    ----------
    loop
        Percent of span and seconds.  With a scan, the algorithm of `controller` is executed at
        t = 0, h, 2h ...; a setpoint step is seen at the first scan not before it, the upset acts at
        its true instant, and the output changes after the computing delay and is held.
    events
        Steps [% of PV span; unit of the load path], instants and end [s], noise [% of PV span].

    Returns
    -------
    Trace
        A row at every scan and finer where the scan is long; analogue loops at least 3000 rows.

    Raises
    ------
    InputError
        Too many scans, or too fast an analogue loop, for the end asked for; noise on an analogue
        controller; an analogue loop that makes impulses.  `ModelError` for a plant with a dead time
        inside an inner feedback.

    Notes
    -----
    Sampled: exact but for rounding.  Analogue: about 1e-7 of the step; while a limit or rate limit
    of the output is in force, about 1e-3 (followed in 20 000 fine steps or more).
    """
    if loop.scan is None:
        return _analogue(loop, events)
    whole = process(loop)
    clock = Clock(loop.scan, loop.computing_delay)
    scans = _scans(events.until, clock)
    held = Held(whole, clock)
    noise = _noise(events, scans)
    course = run(
        held,
        Algorithm.of(loop, loop.scan),
        scans,
        Step(events.setpoint_step, events.setpoint_at),
        Step(events.load_step, events.load_at),
        None if noise is None else noise.tolist(),
    )
    return _sampled_trace(held, course, events, noise)


def simulate_together(loops: Sequence[Loop], events: Events) -> list[Trace]:
    """What `simulate` gives for each of several loops, faster where they differ in gains only.

    Raises as `simulate` does.
    """
    first = loops[0]
    if first.scan is None or any(replace(loop, gains=first.gains) != first for loop in loops):
        return [simulate(loop, events) for loop in loops]
    clock = Clock(first.scan, first.computing_delay)
    scans = _scans(events.until, clock)
    held = Held(process(first), clock)
    noise = _noise(events, scans)
    courses = run_together(
        held,
        [Algorithm.of(loop, first.scan) for loop in loops],
        scans,
        Step(events.setpoint_step, events.setpoint_at),
        Step(events.load_step, events.load_at),
        None if noise is None else noise.tolist(),
    )
    return [_sampled_trace(held, course, events, noise) for course in courses]


def _noise(events: Events, scans: int) -> Array | None:
    if not events.noise:
        return None
    return np.random.default_rng(events.seed).normal(0.0, events.noise, scans)


def _scans(until: float, clock: Clock) -> int:
    if until > MOST_SCANS * clock.scan:
        raise problem(
            f"{until / clock.scan:.0f} scans are too many (at most {MOST_SCANS})",
            "give an earlier end, or a longer scan",
            key="scenario.until",
        )
    return clock.place(until)[0] + 1


# --- rows of a sampled loop ----------------------------------------------------------------------


def _sampled_trace(held: Held, course: Course, events: Events, noise: Array | None) -> Trace:
    clock, load = held.clock, Step(events.load_step, events.load_at)
    # Rows at the same places in every scan, and single ones where something happens in between.
    offsets = _offsets(held, events.until)
    times, numbers, pv = [], [], []
    scans = len(course.pv)
    every = np.arange(scans)
    for offset in offsets:
        times.append(every * clock.scan + offset)
        numbers.append(every)
        pv.append(_pv(held, course, load, offset))
    for scan, rest in sorted({clock.place(time) for time in _between(held, events)}):
        if scan < scans:
            times.append(np.array([scan * clock.scan + rest]))
            numbers.append(np.array([scan]))
            pv.append(_pv(held, course, load, rest)[scan : scan + 1])
    time, number = np.concatenate(times), np.concatenate(numbers)
    order = np.argsort(time, kind="stable")
    same = np.diff(time[order], prepend=-1.0) <= 1e-9 * clock.scan
    order = order[(time[order] <= events.until + 1e-9 * clock.scan) & ~same]
    time, number, values = time[order], number[order], np.concatenate(pv)[order]
    measured = values if noise is None else values + noise[number]
    setpoint = np.where(time >= events.setpoint_at - 1e-9 * clock.scan, events.setpoint_step, 0.0)
    return Trace(
        time, setpoint, values, _in_force(held, course, time, number), measured, course.diverged
    )


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
    rate = float(np.abs(np.linalg.eigvals(whole.a)).max())
    return 1.0 / rate if rate else math.inf


def _between(held: Held, events: Events) -> list[float]:
    """Instants that need a row of their own [s]."""
    found = [events.until]
    if events.setpoint_step:
        found.append(events.setpoint_at)
    if events.load_step:
        found.append(events.load_at)
        for entry in held.process.load:
            arrival = events.load_at + entry.dead_time
            found.append(arrival)
            if entry.d:
                found.append(max(0.0, arrival - 1e-6 * held.clock.scan))
    return [time for time in found if time <= events.until]


def _pv(held: Held, course: Course, load: Step, offset: float) -> Array:
    """PV [%] at `offset` [s] after every scan (n_scans,)."""
    part, c = held.over(offset), held.process.c
    pv = course.states @ (c @ part.phi)
    weights = dict(part.weights)
    for back, tap in part.taps.items():
        weights[back] = weights.get(back, 0.0) + float(c @ tap)
    for back, weight in weights.items():
        pv[back:] += weight * course.outputs[: len(pv) - back]
    if load.size:
        reached = {scan for whole, _ in held.arrivals(load) for scan in (whole, whole + 1)}
        for scan, following in pairwise([*sorted(reached), len(pv)]):
            state, direct = held.upset(load, scan, offset)
            pv[scan:following] += float(c @ state) + direct
    return pv


def _in_force(held: Held, course: Course, time: Array, number: NDArray[np.signedinteger]) -> Array:
    """The output in force at each row."""
    clock = held.clock
    whole, rest = clock.place(clock.computing_delay)
    late = time - number * clock.scan < rest - 1e-9 * clock.scan
    computed = number - whole - late
    return np.where(computed >= 0, course.outputs[np.maximum(computed, 0)], 0.0)


# --- rows of an analogue loop --------------------------------------------------------------------


def _analogue(loop: Loop, events: Events, most_pieces: int = analogue.MOST_PIECES) -> Trace:
    if events.noise:
        raise problem(
            "measurement noise has no meaning for an analogue controller",
            "give the controller a scan, or leave the noise out",
            key="controller.scan",
        )
    whole = process(loop)
    setpoint = Step(events.setpoint_step, events.setpoint_at)
    load = Step(events.load_step, events.load_at)
    pieces, diverged = analogue.solve(loop, whole, setpoint, load, events.until, most_pieces)
    if _is_limited(loop, pieces):
        return _in_fine_steps(loop, whole, events)
    return _analogue_trace(pieces, events, diverged)


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


def _in_fine_steps(loop: Loop, whole: Process, events: Events) -> Trace:
    """An analogue loop held back by its limits, in steps so short that they do not show.

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
    held = Held(whole, clock)
    setpoint = Step(events.setpoint_step, events.setpoint_at)
    load = Step(events.load_step, events.load_at)
    last, rest = clock.place(events.until)
    course = step_through(held, _corrected(loop, clock.scan), last + 1, setpoint, load)
    keep = _rows_to_keep(course, held, events)
    time: Array = np.asarray(keep * clock.scan, np.float64)
    pv, output = _pv(held, course, load, 0.0)[keep], course.outputs[keep]
    if rest and not course.diverged:
        time = np.append(time, events.until)
        pv = np.append(pv, _pv(held, course, load, rest)[-1])
        output = np.append(output, output[-1])
    seen = first_scan(events.setpoint_at, clock) * clock.scan
    return Trace(
        time, np.where(time >= seen, events.setpoint_step, 0.0), pv, output, pv, course.diverged
    )


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


def _rows_to_keep(course: Course, held: Held, events: Events) -> NDArray[np.intp]:
    """Every few steps, and all of those where the output turns a corner."""
    count = len(course.pv)
    stride = max(1, count // _ROWS)
    corner = np.abs(np.diff(course.outputs, n=2, prepend=[0.0, 0.0]))
    sharp = np.flatnonzero(corner > 1e-3 * max(float(np.abs(course.outputs).max()), 1e-300))
    marks = [first_scan(t, held.clock) for t in (events.setpoint_at, events.load_at)]
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
    free = replace(loop, low=None, high=None, rate=None)
    longest = MOST_SCANS * loop.scan / 2.5 if loop.scan else math.inf
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
    poles = {*loop.plant.poles(), *loop.load.poles()}
    lags = [1.0 / max(abs(p.real), 0.05 * abs(p)) for p in poles if p]
    scale = sum(lags) + loop.plant.dead_time + loop.load.dead_time + loop.pv_filter
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
    try:
        return _analogue(loop, events, _GLANCE)
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
