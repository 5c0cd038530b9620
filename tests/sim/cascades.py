"""Cascades at random, driven into the limits of their inner loops."""

from __future__ import annotations

import random

import numpy as np

from workbench.model.feedback import Loop
from workbench.model.feedforward import Feedforward
from workbench.model.pid import Gains
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events

WAYS = ("conditional", "tracking", "external-reset")


def _lag(draw: random.Random, shortest: float, longest: float) -> TransferFunction:
    times = [(draw.uniform(shortest, longest), 1.0) for _ in range(draw.choice((1, 2)))]
    return TransferFunction.ratio((draw.uniform(0.4, 2.0),), times, draw.choice((0.0, 0.3, 2.2)))


def _gains(draw: random.Random) -> Gains:
    derivative = draw.choice((0.0, draw.uniform(0.2, 2.0)))
    weight = draw.choice((0.0, 0.6, 1.0))
    return Gains(draw.uniform(0.2, 3.0), draw.uniform(0.01, 0.3), derivative, 0.3, weight)


def _cascade(draw: random.Random) -> Structure:
    """Any of them: direct and reverse, with feedforward and compensation or without."""
    fast, slow, inner_scan = _lag(draw, 0.5, 6.0), _lag(draw, 4.0, 40.0), 0.5
    direct = draw.random() < 0.5
    inner = Loop(
        -fast if direct else fast,
        TransferFunction.constant(1.0),
        _gains(draw),
        reverse=not direct,
        scan=inner_scan,
        low=-draw.uniform(0.05, 3.0),
        high=draw.uniform(0.05, 3.0),
        rate=draw.choice((None, 0.5)),
        windup=draw.choice(WAYS),
    )
    outer_direct = draw.random() < 0.5
    slow = -slow if outer_direct else slow
    return Structure(
        slow,
        0.3 * slow,
        _gains(draw),
        reverse=not outer_direct,
        scan=draw.choice((1, 2, 4)) * inner_scan,
        windup=draw.choice(WAYS),
        model=draw.choice((None, slow)),
        feedforward=draw.choice((None, Feedforward(draw.uniform(-1.0, 1.0), 6.0, 3.0, 1.2))),
        inner=inner,
    )


def cascades_at_limits(size: int, seed: int) -> tuple[float, list[str]]:
    """How far an outer output ever goes on into what its inner loop cannot do [%], and failures."""
    draw, worst, held = random.Random(seed), 0.0, 0
    failures: list[str] = []
    for _ in range(size):
        loop = _cascade(draw)
        events = Events(
            draw.uniform(-5.0, 5.0), 4.0, draw.uniform(-5.0, 5.0), draw.uniform(20.0, 40.0), 90.0
        )
        beyond, reached = further(loop, events)
        held += reached
        worst = max(worst, beyond)
        if beyond > 0.0:
            failures.append(f"goes on by {beyond:g} %: {loop} {events}")
    if 3 * held < size:
        failures.append(f"only {held} of {size} met a limit")
    return worst, failures


def further(loop: Structure, events: Events) -> tuple[float, bool]:
    """The largest move into a limit that the inner output stood at, and whether it ever did."""
    inside = simulate(loop, events).inner
    assert inside is not None
    assert loop.inner is not None
    low, high = loop.inner.low, loop.inner.high
    assert low is not None
    assert high is not None
    before = inside.output[:-1]
    if before.min() < low or before.max() > high:
        return float("inf"), True
    blocked = loop.inner.sign * ((before >= high).astype(float) - (before <= low))
    moves = np.diff(inside.setpoint) * blocked
    return max(0.0, float(moves.max(initial=0.0))), bool(blocked.any())
