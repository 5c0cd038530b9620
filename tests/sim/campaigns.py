"""Loops by the hundred: trends against mpmath, and what must hold at limits and changes of mode.

Each campaign is a function of its size and seed, and answers with its worst figure and what failed;
`tests/full.py` runs them at full size, `tests/test_full.py` the first few of each.
"""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from tests.sim.series import Path, Rational, responses
from tests.sim.test_scans import Sampled, Term, at_scans, by_hand
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import sampled_margins
from workbench.model.stability import loop_verdict
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm
from workbench.sim.course import passage
from workbench.sim.instruments import Instruments
from workbench.sim.leaps import run
from workbench.sim.loop import simulate
from workbench.sim.process import process
from workbench.sim.scans import Clock, Course, Held, step_through
from workbench.sim.scenario import Events
from workbench.sim.signals import Step

# --- trends against mpmath -----------------------------------------------------------------------


def _plant(draw: random.Random) -> Term:
    slowest = draw.uniform(5.0, 40.0)
    lags = [slowest, *(slowest * draw.uniform(0.1, 0.7) for _ in range(draw.randint(0, 2)))]
    if draw.random() < 0.2:
        lags[0] = 0.0
    gain = draw.choice((-1.0, 1.0)) * draw.uniform(0.3, 2.0) / (slowest if not lags[0] else 1.0)
    lead = draw.choice((0.0, 0.0, -0.2, 0.3)) * slowest if len(lags) > 1 else 0.0
    return Term(gain, tuple(lags), slowest * draw.uniform(0.0, 0.6), lead)


def _settings(draw: random.Random, slowest: float, gain: float) -> Gains:
    kp = draw.uniform(0.1, 0.9) / gain
    ki = kp / (slowest * draw.uniform(0.8, 3.0))
    kd = draw.choice((0.0, kp * slowest * draw.uniform(0.02, 0.15)))
    tf = kd / kp / draw.uniform(3.0, 10.0) if kd else 0.0
    return Gains(kp, ki, kd, tf, draw.uniform(0.0, 1.0), draw.choice((0.0, 1.0)))


def sampled_by_mpmath(size: int, seed: int) -> tuple[float, list[str]]:
    """PV of random sampled loops, against sums over mpmath's exact step response of the plant."""
    draw, worst, done = random.Random(seed), 0.0, 0
    failures: list[str] = []
    while done < size:
        plant = _plant(draw)
        slowest = max(plant.lags) or 10.0
        gain = abs(plant.gain) * (1.0 if plant.lags[0] else slowest)
        scan = slowest * draw.choice((0.03, 0.07, 0.2, 0.45))
        case = Sampled(
            (plant,),
            _settings(draw, slowest, gain),
            scan,
            options={
                "reverse": plant.gain > 0,
                "computing_delay": scan * draw.choice((0.0, 0.0, 0.37, 1.0)),
                "pv_filter": draw.choice((0.0, slowest * 0.05)),
            },
            until=100 * scan,
            load_at=scan * draw.uniform(40.0, 60.0),
            setpoint_at=scan * draw.choice((0.0, 3.0, 2.4)),
        )
        if not sampled_margins(case.loop()).stable:
            continue
        done += 1
        # A load step that moves PV about as far as the setpoint step does.
        events = Events(1.0, case.setpoint_at, draw.uniform(-1, 1) / gain, case.load_at, case.until)
        found, _ = at_scans(simulate(case.loop(), events), case)
        expected, _ = by_hand(case, events)
        error = float(np.abs(np.subtract(found, expected)).max())
        worst = max(worst, error)
        if not error <= 1e-9:
            failures.append(f"{case}: {error:g}")
    return worst, failures


_FAR = (8.0, 12.0, 20.0, 12.0, 60.0)
"""How far to look, in dead times, one loop after another."""


def analogue_by_mpmath(size: int, seed: int) -> tuple[float, list[str]]:
    """PV of random analogue loops, up to 60 dead times, against the series in exp(-L s)."""
    draw, worst, done = random.Random(seed), 0.0, 0
    failures: list[str] = []
    while done < size:
        far = _FAR[done % len(_FAR)]
        lag, gain = draw.uniform(3.0, 30.0), draw.uniform(0.4, 2.5)
        lags = (
            (lag,) if far > 20.0 else (lag, *([lag * draw.uniform(0.2, 0.6)] * draw.randint(0, 1)))
        )
        late = lag * draw.uniform(0.1, 1.2)
        kp = draw.uniform(0.2, 0.5) * lag / (gain * (late + 0.2 * lag))
        kd = draw.choice((0.0, kp * late * 0.2)) if far < 20.0 else 0.0
        gains = Gains(
            kp, kp / (lag * draw.uniform(0.8, 2.0)), kd, kd / kp / 5.0, draw.uniform(0, 1)
        )
        plant = TransferFunction.ratio((gain,), [(t, 1.0) for t in lags], late)
        loop = Loop(plant, plant, gains)
        if not loop_verdict(loop.open_loop()).stable:
            continue
        done += 1
        trace = simulate(loop, Events(1.0, 0.0, 0.0, 0.0, far * late))
        picked = np.linspace(1, len(trace.time) - 1, 9).astype(int)
        way = Path(Rational.lags(gain, *lags), late)
        exact, _ = responses(gains, [way], [float(trace.time[k]) for k in picked])
        error = float(np.abs(trace.pv[picked] - exact).max())
        worst = max(worst, error)
        if not error <= 1e-5:
            failures.append(f"{lags} {late} {gains} over {far:g} dead times: {error:g}")
    return worst, failures


# --- limits --------------------------------------------------------------------------------------


def _limited(draw: random.Random) -> Loop:
    reverse = draw.random() < 0.5
    lag = draw.uniform(5.0, 40.0)
    late = draw.choice((0.0, 1.0, 80.0, draw.uniform(0.0, 9.0)))
    gain = draw.uniform(0.5, 2.0)
    plant = TransferFunction.ratio((gain if reverse else -gain,), [(lag, 1.0)], late)
    kp = draw.uniform(0.5, 8.0) * (lag / (lag + 4.0 * late)) / gain
    return Loop(
        plant,
        plant,
        Gains(kp, kp / draw.uniform(2.0, 25.0), setpoint_weight=draw.uniform(0.0, 1.0)),
        reverse=reverse,
        scan=1.0,
        computing_delay=draw.choice((0.0, 0.0, 0.4, 1.0)),
        low=-draw.uniform(0.3, 6.0),
        high=draw.uniform(0.3, 6.0),
        rate=draw.choice((None, None, draw.uniform(0.1, 4.0))),
        windup=draw.choice(("conditional", "tracking", "external-reset")),
        incremental=draw.random() < 0.2,
    )


def limited_loops(size: int, seed: int) -> tuple[float, list[str]]:
    """Random loops that meet their limits: leaping is stepping, and what limits promise is kept."""
    draw, worst = random.Random(seed), 0.0
    failures: list[str] = []
    for _ in range(size):
        loop = _limited(draw)
        # Most setpoints can be reached within the limits, and take the output to one on the way.
        reach = draw.choice((loop.low, loop.high)) or 0.0
        move = draw.uniform(0.3, 1.1) * reach * (loop.plant.gain().value or 0.0)
        load = draw.choice((0.0, 0.0, draw.uniform(-6.0, 6.0)))
        happening = (Step(move, draw.choice((0.0, 4.0))), Step(load, draw.uniform(150.0, 220.0)))
        algorithm = Algorithm.of(loop, 1.0)
        held = Held(process(loop), Clock(1.0, loop.computing_delay))
        leapt = run(held, algorithm, 400, *happening)
        stepped = step_through(held, algorithm, 400, *happening)
        apart = max(
            float(np.abs(leapt.pv - stepped.pv).max()),
            float(np.abs(leapt.outputs - stepped.outputs).max()),
        )
        worst = max(worst, apart)
        wrong = _broken(loop, algorithm, stepped, happening)
        if not apart <= 1e-9:
            wrong = f"leap and step are {apart:g} apart"
        if wrong:
            failures.append(f"{wrong}: {loop} {happening}")
    return worst, failures


def _broken(loop: Loop, algorithm: Algorithm, course: Course, happening: tuple[Step, Step]) -> str:
    """What of the promises about limits does not hold, in words; nothing where all do."""
    assert loop.low is not None
    assert loop.high is not None
    output = course.outputs
    if output.min() < loop.low or output.max() > loop.high:
        return "the output leaves its limits"
    moves = np.abs(np.diff(output, prepend=0.0))
    if moves.max() > algorithm.move * (1.0 + 1e-9):
        return "the output is faster than its rate limit"
    setpoint, load = happening
    if loop.rate is not None or loop.incremental or load.size:
        return ""
    error = np.where(np.arange(len(output)) >= setpoint.time, setpoint.size, 0.0) - course.pv
    waits = 1 if loop.windup == "conditional" else 1 + math.ceil(1.0 / algorithm.release)
    for limit in (loop.low, loop.high):
        turned = math.copysign(1.0, limit) * loop.sign * error <= 0.0
        stays = 0
        for there in ((output == limit) & turned).tolist():
            stays = stays + 1 if there else 0
            if stays > waits:
                return f"the output stays at {limit:g} for {stays} scans after the error has turned"
    return ""


# --- changes of mode and settings ----------------------------------------------------------------


def changed_loops(size: int, seed: int) -> tuple[float, list[str]]:
    """No change of mode or of settings moves the output further than the error itself asks."""
    draw, worst = random.Random(seed), 0.0
    failures: list[str] = []
    for _ in range(size):
        loop = replace(_limited(draw), rate=None, computing_delay=0.0)
        back, other = draw.randrange(60, 200), draw.randrange(210, 300)
        factor = draw.uniform(0.3, 3.0)
        later = Gains(
            loop.gains.proportional * factor,
            loop.gains.integral * draw.uniform(0.3, 3.0),
            setpoint_weight=draw.uniform(0.0, 1.0),
        )
        events = Events(
            *(draw.uniform(-6.0, 6.0), 5.0, draw.uniform(-4.0, 4.0), 130.3, 400.0),
            noise=draw.choice((0.0, 0.1)),
            manual_at=float(draw.randrange(10, 50)),
            manual_output=draw.choice((None, draw.uniform(-6.0, 6.0))),
            automatic_at=float(back),
            settings_at=float(other),
            settings=later,
        )
        course = passage(loop, process(loop), Clock(1.0, 0.0), events, Instruments()).course
        setpoint = np.where(np.arange(401) >= 5, events.setpoint_step, 0.0)
        for scan, gains in ((back, loop.gains), (other, later)):
            if scan >= len(course.pv):
                continue
            seen, r = course.measured[scan - 1 : scan + 1], setpoint[scan - 1 : scan + 1]
            weighted = gains.setpoint_weight * r - seen
            asked = gains.proportional * abs(float(weighted[1] - weighted[0]))
            asked += gains.integral * abs(float(r[1] - seen[1]))
            moved = abs(float(course.outputs[scan] - course.outputs[scan - 1]))
            worst = max(worst, moved - asked)
            if moved > asked + 1e-9:
                failures.append(f"moved by {moved:g}, {asked:g} was asked: {loop} {events}")
        assert loop.low is not None
        assert loop.high is not None
        if course.outputs.min() < loop.low or course.outputs.max() > loop.high:
            failures.append(f"the output leaves its limits: {loop} {events}")
    return max(worst, 0.0), failures


# --- leaps ---------------------------------------------------------------------------------------


class Stepped(Instruments):
    """Plain instruments that keep the engine from leaping."""

    def received(self) -> Callable[[float], float]:
        """PV as it is."""
        return lambda pv: pv


def _anything(draw: random.Random) -> tuple[Loop, Events]:
    lag = draw.uniform(3.0, 40.0)
    terms = [
        Term(
            draw.uniform(0.3, 1.5),
            tuple(lag * draw.uniform(0.2, 1.0) for _ in range(draw.randint(0, 2))),
            draw.choice((0.0, 2.0, 7.3, 61.0, 130.0)),
        ).function()
        for _ in range(draw.randint(1, 2))
    ]
    plant = terms[0] if len(terms) == 1 else terms[0] + terms[1]
    load = draw.choice((plant, Term(draw.uniform(0.2, 2.0), (lag,), 3.3).function()))
    kp = draw.uniform(0.02, 0.4)
    kd = draw.choice((0.0, kp * 4.0))
    low, high, rate = (draw.choice((None, draw.uniform(0.3, 6.0))) for _ in range(3))
    loop = Loop(
        plant,
        load,
        Gains(
            *(kp, draw.choice((0.0, kp / 12.0)), kd, kd / kp / 6.0),
            *(draw.uniform(0.0, 1.0), draw.choice((0.0, 1.0))),
        ),
        reverse=draw.random() < 0.8,
        scan=1.0,
        computing_delay=draw.choice((0.0, 0.3)),
        pv_filter=draw.choice((0.0, 3.0)),
        low=None if low is None else -low,
        high=high,
        rate=rate,
        windup=draw.choice(("conditional", "tracking", "external-reset")),
        setpoint_rate=draw.choice((None, 0.2)),
        setpoint_filter=draw.choice((0.0, 4.0)),
    )
    events = Events(
        *(draw.uniform(-6.0, 6.0), draw.choice((0.0, 4.0, 7.5))),
        *(draw.uniform(-4.0, 4.0), draw.uniform(100.0, 200.0), 500.0),
        noise=draw.choice((0.0, 0.0, 0.1)),
        setpoint_ramp=draw.choice((0.0, 0.0, 30.0)),
        load_shape=draw.choice(("step", "step", "ramp", "pulse", "sine")),
        load_time=60.0,
        change_at=draw.choice((None, 250.0)),
        gain_factor=1.3,
        dead_time_factor=draw.choice((0.7, 1.6)),
    )
    return loop, events


def leapt_loops(size: int, seed: int) -> tuple[float, list[str]]:
    """Loops with everything that leaps know, against the same loops stepped; a share of what moves.

    Loops that grow are compared up to where they have become 100 times as large as their events.
    """
    draw, worst = random.Random(seed), 0.0
    failures: list[str] = []
    for _ in range(size):
        loop, events = _anything(draw)
        whole, clock = process(loop), Clock(1.0, loop.computing_delay)
        leapt = passage(loop, whole, clock, events, Instruments()).course
        stepped = passage(loop, whole, clock, events, Stepped()).course
        large = np.flatnonzero(np.abs(stepped.pv) + np.abs(stepped.outputs) > 1e3)
        end = int(large[0]) if len(large) else len(stepped.pv)
        apart = 0.0
        for one, other in (
            (leapt.pv, stepped.pv),
            (leapt.outputs, stepped.outputs),
            (leapt.states, stepped.states),
        ):
            size_of = max(1.0, float(np.abs(other[:end]).max(initial=0.0)))
            if len(one) < end:
                failures.append(f"the leap ends at {len(one)}, before {end}: {loop} {events}")
                break
            apart = max(apart, float(np.abs(one[:end] - other[:end]).max(initial=0.0)) / size_of)
        worst = max(worst, apart)
        if not apart <= 1e-9:
            failures.append(f"leap and step are {apart:g} apart: {loop} {events}")
    return worst, failures
