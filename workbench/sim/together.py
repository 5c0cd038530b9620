"""Many controllers on one and the same plant, stepped side by side.

What `scans` does for one algorithm is done here for all of them at once, an array element each: for
a list of candidate settings that is several times as fast, and gives the same numbers.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from workbench.sim.controller import Algorithm
from workbench.sim.scans import (
    BOUND,
    Course,
    Held,
    Segment,
    Step,
    leap,
    reading,
    segments_of,
)

Array = NDArray[np.float64]


def run_together(
    held: Held,
    algorithms: Sequence[Algorithm],
    scans: int,
    setpoint: Step,
    load: Step,
    noise: Sequence[float] | None = None,
) -> list[Course]:
    """The course of the loop over a number of scans, from rest, for every algorithm.

    The algorithms differ in their gains and have the same action and limits.
    """
    segments = segments_of(held, scans, setpoint, load)
    found: dict[int, Course] = {}
    if noise is None:
        for number, algorithm in enumerate(algorithms):
            course = leap(held, algorithm, segments, load)
            if course is not None:
                found[number] = course
    rest = [number for number in range(len(algorithms)) if number not in found]
    if rest:
        stepped = _side_by_side(held, [algorithms[n] for n in rest], segments, load, noise)
        found.update(zip(rest, stepped, strict=True))
    return [found[number] for number in range(len(algorithms))]


def _controllers(algorithms: Sequence[Algorithm]) -> Callable[[float, Array], Array]:
    """One scan of every algorithm at rest: setpoint and what each measures -> its output."""

    def each(name: str) -> Array:
        return np.array([getattr(algorithm, name) for algorithm in algorithms], np.float64)

    kp, advance, keep, kick = map(each, ("proportional", "advance", "keep", "kick"))
    b, c, smooth, release = map(each, ("setpoint_weight", "derivative_weight", "smooth", "release"))
    one = algorithms[0]
    sign, move, limited, conditional = one.sign, one.move, one.is_limited, one.conditional
    low, high = (one.low, one.high) if sign > 0 else (-one.high, -one.low)
    filtered, integral, derivative, last, output = np.zeros((5, len(algorithms)))

    def step(setpoint: float, measured: Array) -> Array:
        nonlocal filtered, integral, derivative, last, output
        filtered = filtered + smooth * (measured - filtered)
        gained = advance * (setpoint - filtered)
        seen = c * setpoint - filtered
        derivative = keep * derivative + kick * (seen - last)
        last = seen
        rest = kp * (b * setpoint - filtered) + derivative
        wanted = rest + integral + gained
        if not limited:
            integral = integral + gained
            return sign * wanted
        lowest, highest = np.maximum(low, output - move), np.minimum(high, output + move)
        if conditional:
            held_back = np.where(gained > 0.0, wanted > highest, wanted < lowest)
            gained = np.where(held_back, 0.0, gained)
            wanted = np.where(held_back, rest + integral, wanted)
        # The limits win over the rate where the output starts outside them.
        output = np.minimum(np.maximum(np.minimum(np.maximum(wanted, lowest), highest), low), high)
        integral = integral + gained + release * (output - wanted)
        return sign * output

    return step


def _side_by_side(
    held: Held,
    algorithms: Sequence[Algorithm],
    segments: Sequence[Segment],
    load: Step,
    noise: Sequence[float] | None,
) -> list[Course]:
    count, scans = len(algorithms), segments[-1].end
    over, step = held.over(held.clock.scan), _controllers(algorithms)
    memory = max([1, *over.taps, *reading(held, load, segments[0])[1]])
    states = np.zeros((scans + 1, len(held.process.c), count))
    outputs, pv = np.zeros((scans + memory, count)), np.zeros((scans, count))
    for segment in segments:
        read, weights, rest = reading(held, load, segment)
        backs = [(memory - back, weight) for back, weight in weights.items()]
        # One matrix over the state, the outputs that reach it, and the upset.
        columns = [over.phi, *(tap[:, np.newaxis] for tap in over.taps.values())]
        matrix = np.concatenate([*columns, segment.state[:, np.newaxis]], axis=1)
        taps = [memory - back for back in over.taps]
        acting = np.ones((matrix.shape[1], count))
        n = len(read)
        for i in range(segment.start, segment.end):
            y = read @ states[i] + rest
            for back, weight in backs:
                y += weight * outputs[i + back]
            # What has run away is cut off below; here it only must not become infinite.
            np.clip(y, -2.0 * BOUND, 2.0 * BOUND, out=y)
            pv[i] = y
            outputs[i + memory] = step(segment.setpoint, y if noise is None else y + noise[i])
            acting[:n] = states[i]
            for row, tap in enumerate(taps):
                acting[n + row] = outputs[i + tap]
            np.clip(matrix @ acting, -1e100, 1e100, out=states[i + 1])
    found = []
    for number in range(count):
        beyond = np.flatnonzero(np.abs(pv[:, number]) > BOUND)
        end = int(beyond[0]) if len(beyond) else scans
        found.append(
            Course(
                states[:end, :, number],
                outputs[memory : memory + end, number],
                pv[:end, number],
                bool(len(beyond)),
            )
        )
    return found
