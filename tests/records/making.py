"""Records with an exact answer: each move adds its own closed form, no recursion anywhere."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from workbench.records.record import Record

Array = NDArray[np.float64]
Answer = Callable[[Array], Array]

UP_DOWN_UP = ((0.1, 5.0), (0.35, -10.0), (0.7, 5.0))
"""Where in the record OP moves, as a share of it, and by how much."""


def lag(gain: float, time_constant: float) -> Answer:
    """Step response of gain/(T s + 1) (exact)."""

    def answer(t: Array) -> Array:
        risen: Array = gain * -np.expm1(-t / time_constant)
        return risen

    return answer


def two_lags(gain: float, first: float, second: float) -> Answer:
    """Step response of gain/((T1 s + 1)(T2 s + 1)), T1 not T2 (exact)."""
    return lambda t: (
        gain * (1 - (first * np.exp(-t / first) - second * np.exp(-t / second)) / (first - second))
    )


def lead(gain: float, numerator: float, first: float, second: float) -> Answer:
    """Step response of gain (Tz s + 1)/((T1 s + 1)(T2 s + 1)), T1 not T2 (exact)."""
    lags = two_lags(gain, first, second)
    return lambda t: (
        lags(t) + gain * numerator * (np.exp(-t / first) - np.exp(-t / second)) / (first - second)
    )


def swing(gain: float, period: float, damping: float) -> Answer:
    """Step response of gain/(t^2 s^2 + 2 d t s + 1), t = period/(2 pi) (exact)."""
    decay = 2 * np.pi * damping / period
    turn = 2 * np.pi * np.sqrt(1 - damping**2) / period
    return lambda t: (
        gain * (1 - np.exp(-decay * t) * (np.cos(turn * t) + decay / turn * np.sin(turn * t)))
    )


def runaway(gain: float, time_constant: float) -> Answer:
    """Step response of gain/(T s - 1) (exact)."""
    return lambda t: gain * np.expm1(t / time_constant)


def ramp(slope: float) -> Answer:
    """Step response of slope/s (exact)."""
    return lambda t: slope * t


def lagged_ramp(slope: float, time_constant: float) -> Answer:
    """Step response of slope/(s (T s + 1)) (exact)."""
    return lambda t: slope * t - lag(slope * time_constant, time_constant)(t)


def stamps(rows: int, interval: float, seed: int | None = None) -> Array:
    """Regular stamps; with a seed each is off by up to 0.3 intervals."""
    time = np.arange(rows, dtype=np.float64) * interval
    if seed is not None:
        time[1:] += np.random.default_rng(seed).uniform(-0.3, 0.3, rows - 1) * interval
    return time


def wander(time: Array, memory: float, draws: Array) -> Array:
    """Unit noise that forgets itself over `memory` [s], exact on any stamps."""
    keep = np.exp(-np.diff(time) / memory)
    found = draws.copy()
    for i, k in enumerate(keep, start=1):
        found[i] = k * found[i - 1] + np.sqrt(1 - k * k) * draws[i]
    return found


def bump(
    time: Array,
    answer: Answer,
    dead_time: float,
    *,
    noise: float = 0.0,
    memory: float = 0.0,
    drift: float = 0.0,
    moves: tuple[tuple[float, float], ...] = UP_DOWN_UP,
    seed: int = 0,
    mode: str = "",
    sp: Array | None = None,
) -> Record:
    """A bump test about PV 50 and OP 40."""
    op, pv = np.full(len(time), 40.0), 50.0 + drift * time
    for share, change in moves:
        at = time[int(share * (len(time) - 1))]
        op[time >= at] += change
        since = np.maximum(time - at - dead_time, 0.0)
        pv += change * np.where(time > at + dead_time, answer(since), 0.0)
    draws = np.random.default_rng(seed).normal(size=len(time))
    pv += noise * (wander(time, memory, draws) if memory else draws)
    modes = (mode,) * len(time) if mode else None
    return Record("made.csv", time, pv, op, sp=sp, mode=modes)
