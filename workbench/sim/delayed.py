"""Paths with a dead time inside a feedback, in time: what they answer, and loops round them.

Y = N/(D0 + sum Dk exp(-Lk s)) U has infinitely many poles and no state space.  It is, though, the
loop that it was drawn from: Y = N/D0 U - H Y with H = (sum Dk exp(-Lk s))/D0, a controller of gain
1 round the plant H with the load path N/D0, and that loop the analogue engine follows.

What a sampled controller does to such a plant is a sum of the plant's answers to the steps of its
output, each at the instants of the scans; an analogue loop is itself such a path.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, fields, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import ModelError, Problem, problem
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.sampled import SampledLoop
from workbench.model.structures import Structure
from workbench.model.transfer import Complex, TransferFunction
from workbench.sim import analogue, signals
from workbench.sim.instruments import Instruments
from workbench.sim.process import process
from workbench.sim.scans import BOUND, Clock
from workbench.sim.scenario import Events
from workbench.sim.signals import Ramp, Signal, Sine, Step

Array = NDArray[np.float64]

_EDGE: Final = 1e-9
"""How far from an instant [share of the end] its two sides are looked at."""
_SETTLED: Final = 1e-9
"""Share of a step response in a scan below which the rest of it is nothing."""
_MOST_READINGS: Final = 12_800
"""Scans over which a step response may take to settle, for margins."""


def without_state_space(function: TransferFunction) -> str:
    """Why a path cannot be followed in time; nothing where it can."""
    try:
        if function.has_delayed_feedback:
            process(_drawn(function))
        else:
            function.realise()
    except ModelError as fault:
        return fault.problems[0].what
    return ""


def _drawn(function: TransferFunction) -> Loop:
    """The loop that a path with a dead time inside a feedback is."""
    prompt, *late = function.denominator
    if prompt.dead_time:
        raise ModelError(Problem("answers before it is asked", "give its feedback a dead time"))
    bottom = (prompt,)
    inside = TransferFunction(tuple(late), bottom)
    if not inside.is_proper or (inside.relative_degree == 0 and _direct(inside) >= 1.0):
        raise ModelError(
            Problem("a dead time inside a feedback that never dies out", "give it a lag")
        )
    return Loop(inside, TransferFunction(function.numerator, bottom), Gains(1.0))


def _direct(inside: TransferFunction) -> float:
    """How much of a jump comes back at once after its dead time."""
    return sum(abs(output.d) for output in inside.realise().outputs)


def step_answer(function: TransferFunction, times: Array) -> Array:
    """The answer to a unit step at 0 s, at the instants (n,) [s]; at a jump the value after it.

    Raises `ModelError` for a path that cannot be followed in time.
    """
    return _Answer.of(function, float(times[-1]) if len(times) else 0.0).at(times)


def impulse_answer(function: TransferFunction, times: Array) -> Array:
    """The inverse Laplace transform of a strictly proper function, as `step_answer`."""
    return step_answer(function * _DERIVATIVE, times)


_DERIVATIVE: Final = TransferFunction.ratio((1.0, 0.0))


@dataclass(frozen=True)
class _Answer:
    """A step response as pieces."""

    starts: Array
    lengths: Array
    coefficients: Array
    """Of each piece, in rising powers of the share of it."""
    until: float
    grows: bool = False
    """It was cut off where it left every bound."""

    @classmethod
    def of(cls, function: TransferFunction, until: float) -> _Answer:
        """Followed up to `until` [s]."""
        end = max(until, 1e-9) * (1.0 + 10.0 * _EDGE)
        loop = _drawn(function) if function.has_delayed_feedback else _open(function)
        pieces, diverged = analogue.solve(
            loop, process(loop), Step(0.0, 0.0), Step(1.0, 0.0), end, most_pieces=200_000
        )
        last = pieces[-1].start + pieces[-1].length if diverged and pieces else end
        return cls(
            np.array([piece.start for piece in pieces]),
            np.array([piece.length for piece in pieces]),
            np.array([analogue.powers(piece.pv) for piece in pieces]),
            last,
            diverged,
        )

    def at(self, times: Array) -> Array:
        """Its values at the instants (n,) [s]; 0 before it begins."""
        if not len(self.starts):
            return np.zeros(len(times))
        if self.grows and len(times) and times[-1] > self.until:
            raise ModelError(Problem("grows beyond every number", "give an earlier end"))
        asked = times + _EDGE * self.until
        place = np.maximum(np.searchsorted(self.starts, asked, side="right") - 1, 0)
        share = (times - self.starts[place]) / self.lengths[place]
        value = np.zeros(len(times))
        for power in range(self.coefficients.shape[1] - 1, -1, -1):
            value = value * share + self.coefficients[place, power]
        return np.where(asked >= self.starts[0], value, 0.0)


def _open(function: TransferFunction) -> Loop:
    """A path alone, as the load path of a loop in which nothing else acts."""
    return Loop(TransferFunction.constant(0.0), function, Gains(0.0))


def upset_answer(function: TransferFunction, upset: Signal, times: Array) -> Array:
    """What a path makes of an upset, at the instants (n,) [s]."""
    total, known = np.zeros(len(times)), dict[str, _Answer]()
    for part in upset:
        key, size, shape = _transformed(part)
        if not size:
            continue
        if key not in known:
            known[key] = _Answer.of(function * shape, float(times[-1]))
        total += size * known[key].at(times - part.time)
    return total


def _transformed(part: Step | Ramp | Sine) -> tuple[str, float, TransferFunction]:
    """A name, the size, and what a unit step passes through to become a part of size 1."""
    if isinstance(part, Step):
        return "step", part.size, TransferFunction.constant(1.0)
    if isinstance(part, Ramp):
        return "ramp", part.slope, TransferFunction.ratio((1.0,), [(1.0, 0.0)])
    w = 2.0 * math.pi / part.period
    swing = TransferFunction.ratio((1.0 / w, 0.0), [(1.0 / w**2, 0.0, 1.0)])
    return f"sine {part.period}", part.amplitude, swing


# --- an analogue loop ----------------------------------------------------------------------------


@dataclass(frozen=True)
class Played:
    """What a loop did, row by row; each array has shape (n_rows,), as in a trace."""

    time: Array
    setpoint: Array
    pv: Array
    output: Array
    measured: Array
    diverged: bool


def play_analogue(loop: Loop, events: Events, instruments: Instruments, rows: int) -> Played:
    """An analogue loop that no state space holds, through a step of setpoint and of load.

    Raises `InputError` where it is not linear throughout.
    """
    _check_linear(loop, events, instruments)
    _check_inner(loop, events)
    time = _rows(events, rows)
    given = ((events.setpoint_step, events.setpoint_at), (events.load_step, events.load_at))
    wanted = (
        (loop.from_setpoint(), loop.from_load()),
        (loop.output_from_setpoint(), loop.output_from_load()),
    )
    answers = [
        [
            (size, at, _Answer.of(path, events.until - at))
            for path, (size, at) in zip(paths, given, strict=True)
            if size and at < events.until
        ]
        for paths in wanted
    ]
    end = min([events.until, *(at + a.until for both in answers for _, at, a in both if a.grows)])
    time = time[time <= end]
    pv, output = (
        sum((size * answer.at(time - at) for size, at, answer in both), np.zeros(len(time)))
        for both in answers
    )
    _check_limits(loop, output)
    setpoint = signals.values(events.setpoint, time)
    return Played(time, setpoint, pv, output, pv, end < events.until)


def _rows(events: Events, rows: int) -> Array:
    """Equally spaced instants, and one just before and one at each step."""
    marks = [at for at in (events.setpoint_at, events.load_at) if 0.0 < at < events.until]
    edges = [at - 2.0 * _EDGE * events.until for at in marks]
    return np.unique([*np.linspace(0.0, events.until, rows + 1), *marks, *edges])


def _check_linear(loop: Loop, events: Events, instruments: Instruments) -> None:
    shaped = loop.setpoint_rate is not None or loop.setpoint_filter or loop.bias
    bent = loop.dead_zone or loop.gain_at_rest != 1.0
    if not events.are_steps or not instruments.are_plain or shaped or bent or events.noise:
        raise problem(
            "is needed: without one this loop is only followed through a step of setpoint and load",
            'give the controller a scan, like "1 s"',
            key="controller.scan",
        )


def _check_inner(loop: Loop, events: Events) -> None:
    """An inner loop has to be analogue too, without limits of its own, and stay in cascade."""
    if not isinstance(loop, Structure) or loop.inner is None:
        return
    inner = loop.inner
    if inner.scan is not None:
        raise problem(
            f"is needed: the inner controller has one of {inner.scan:g} s",
            "give one of as many inner scans, or leave out that of the inner controller",
            key="controller.scan",
        )
    is_limited = any(limit is not None for limit in (inner.low, inner.high, inner.rate))
    if is_limited or loop.inner_mode != "cascade" or events.inner_mode_at is not None:
        raise problem(
            "is needed: without one an inner loop is followed in cascade and without limits only",
            'give the controller a scan, like "1 s"',
            key="controller.scan",
        )


def _check_limits(loop: Loop, output: Array) -> None:
    low = -math.inf if loop.low is None else loop.low
    high = math.inf if loop.high is None else loop.high
    if loop.rate is None and (not len(output) or (output.min() >= low and output.max() <= high)):
        return
    raise problem(
        "is needed: without one this loop is not followed where its output meets a limit",
        'give the controller a scan, like "1 s"',
        key="controller.scan",
    )


# --- a sampled loop ------------------------------------------------------------------------------


def play_sampled(
    played: Loop,
    clock: Clock,
    events: Events,
    instruments: Instruments,
    step: Callable[[float, float], float],
    setpoints: Array,
) -> Played:
    """A sampled loop scan by scan, its PV a sum of answers to the steps of its output.

    `step` executes the controller of a scan; `setpoints` (n_scans,) is what it is given.  Raises
    `InputError` for a plant that changes on the way.
    """
    if events.change_at is not None:
        raise problem(
            "is not played on a plant with a dead time inside a feedback",
            "leave it out, or draw the plant as it is then",
            key="scenario.change_at",
        )
    scans = len(setpoints)
    parts = max(1, math.ceil(clock.scan / (events.until / 1500.0) - 1e-9))
    offsets = np.arange(parts) * (clock.scan / parts)
    time = (np.arange(scans)[:, np.newaxis] * clock.scan + offsets).ravel()
    # Read before the output is changed, and the output of a scan acts after the computing delay.
    since = np.concatenate([time, [scans * clock.scan]]) - clock.computing_delay
    answer = _Answer.of(played.plant, float(time[-1]))
    whole = answer.at(np.minimum(since[: len(time)] - 2.0 * _EDGE * answer.until, answer.until))
    steps = whole.reshape(scans, parts)
    upset = upset_answer(played.load, events.load, time).reshape(scans, parts)
    noise = instruments.noise(events.noise, events.seed, clock.scan, scans)
    through, received = instruments.through(clock.scan), instruments.received()
    moves, acted = np.zeros(scans), 0.0
    pv, seen, output = np.zeros(scans), np.zeros(scans), np.zeros(scans)
    done = scans
    for k in range(scans):
        pv[k] = upset[k, 0] + steps[k:0:-1, 0] @ moves[:k]
        if not -BOUND <= pv[k] <= BOUND:
            done = k
            break
        measured = pv[k] + (0.0 if noise is None else noise[k])
        seen[k] = measured if received is None else received(measured)
        output[k] = step(float(setpoints[k]), float(seen[k]))
        acting = output[k] if through is None else through(float(output[k]))
        moves[k], acted = acting - acted, acting
    rows = np.empty((done, parts))
    for part in range(parts):
        rows[:, part] = upset[:done, part] + np.convolve(steps[:done, part], moves[:done])[:done]
    rows[:, 0] = pv[:done]
    time = time[: done * parts]
    values, held = rows.ravel(), np.repeat(np.arange(done), parts)
    inside = time <= events.until * (1.0 + _EDGE)
    return Played(
        time[inside],
        signals.values(events.setpoint, time[inside] + 1e-9 * clock.scan),
        values[inside],
        _in_force(output, held, time, clock)[inside],
        (values + (seen - pv)[held])[inside],
        done < scans,
    )


def _in_force(output: Array, number: NDArray[np.intp], time: Array, clock: Clock) -> Array:
    """The output in force at each row, which begins after the computing delay."""
    behind = time - number * clock.scan < clock.computing_delay - 1e-9 * clock.scan
    computed = number - behind
    return np.where(computed >= 0, output[np.maximum(computed, 0)], 0.0)


def beyond_state_space(loop: Loop) -> bool:
    """The loop has a path with a dead time inside a feedback."""
    return loop.plant.has_delayed_feedback or loop.load.has_delayed_feedback


# --- margins -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class StepsInZ(SampledLoop):
    """The open loop in z of a plant known by its step response at the scans."""

    readings_in_z: Array
    """Moves of the step response from scan to scan (n,), less the lasting ones."""
    lasting: float
    """What it goes on moving by in every scan."""

    def plant(self, z: Complex) -> Complex:
        """G(z) = sum of the moves, each z^-k."""
        number = np.arange(1.0, len(self.readings_in_z) + 1.0)
        total = np.array([], complex)
        for part in np.array_split(z, max(1, len(z) * len(number) // 1_000_000)):
            values = np.exp(-np.outer(np.log(part), number)) @ self.readings_in_z
            total = np.concatenate([total, values])
        return total + (self.lasting / (z - 1.0) if self.lasting else 0.0)

    @property
    def open_loop_poles(self) -> NDArray[np.complex128]:
        """Those on the circle; what lies inside it turns nothing."""
        count = bool(self.lasting) + bool(self.loop.gains.integral)
        return np.ones(count, complex)

    def size(self, z: Complex) -> Array:
        """|L(z)|."""
        return np.asarray(np.abs(self.open_loop(z)), np.float64)


def sampled_steps(loop: Loop) -> StepsInZ:
    """The open loop in z of a loop whose plant has a dead time inside a feedback.

    Raises `ModelError` where the plant does not settle, or not soon enough.
    """
    assert loop.scan is not None
    lasting = loop.plant.slope().value
    if lasting is None:
        raise ModelError(Problem("integrates twice", "draw it without that feedback"))
    delays = [*loop.plant.delays, *(term.dead_time for term in loop.plant.denominator)]
    count, order = 200, math.ceil((sum(delays) + loop.computing_delay) / loop.scan) + 8
    count = max(count, 4 * order)
    while count <= _MOST_READINGS:
        times = np.arange(0.0, count + 1.0) * loop.scan - loop.computing_delay
        answer = _Answer.of(loop.plant, float(times[-1]))
        if answer.grows:
            break
        reached = answer.at(times - 2.0 * _EDGE * answer.until)
        moves = np.diff(reached) - lasting * loop.scan
        if np.abs(moves[-count // 4 :]).max() <= _SETTLED * np.abs(reached).max():
            held = replace(loop, plant=TransferFunction.constant(1.0))
            base = SampledLoop.of(held)
            same = {field.name: getattr(base, field.name) for field in fields(SampledLoop)}
            readings = tuple(replace(each, scans=order) for each in base.readings)
            return StepsInZ(
                **{**same, "readings": readings},
                readings_in_z=moves,
                lasting=lasting * loop.scan,
            )
        count *= 2
    raise ModelError(
        Problem(
            "a dead time inside an inner feedback that takes too long to settle for its scan",
            "give a longer scan, or see the margins of the analogue loop",
        )
    )
