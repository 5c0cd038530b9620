"""Two-point readings of a step by hand: a cross-check of a fit, never its replacement.

They use two instants of the record, where a fit uses all of it, and take PV to have come to rest
before and after.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from workbench.records.record import Record
from workbench.records.response import Array
from workbench.units import time_text


@dataclass(frozen=True)
class Reading:
    """One lag with dead time by a graphical method."""

    method: str
    gain: float
    """PV units per OP unit."""
    time_constant_s: float
    dead_time_s: float
    remark: str
    """What to distrust; empty where nothing."""


def smith(t28: float, t63: float) -> tuple[float, float]:
    """Time constant and dead time [s] from the times to 28.3 % and 63.2 % of the change.

    T = 1.5 (t63 - t28),  L = t63 - T

    Parameters
    ----------
    t28, t63
        Since the move [s].

    Returns
    -------
    tuple
        T, L [s].

    Source
    ------
    C.L. Smith, "Digital Computer Process Control", Intext, 1972; also as the third fit of
    C.A. Smith and A.B. Corripio, "Principles and Practice of Automatic Process Control" (from
    memory).

    Examples
    --------
    >>> smith(1.0, 2.0)
    (1.5, 0.5)
    """
    lag = 1.5 * (t63 - t28)
    return lag, t63 - lag


def sundaresan_krishnaswamy(t35: float, t85: float) -> tuple[float, float]:
    """Time constant and dead time [s] from the times to 35.3 % and 85.3 % of the change.

    T = 0.67 (t85 - t35),  L = 1.3 t35 - 0.29 t85

    Parameters
    ----------
    t35, t85
        Since the move [s].

    Returns
    -------
    tuple
        T, L [s].

    Source
    ------
    K.R. Sundaresan and P.R. Krishnaswamy, "Estimation of time delay time constant parameters in
    time, frequency, and Laplace domains", Can. J. Chem. Eng. 56, 1978, 257-262 (from memory).

    Examples
    --------
    >>> [round(t, 3) for t in sundaresan_krishnaswamy(1.0, 2.0)]
    [0.67, 0.72]
    """
    return 0.67 * (t85 - t35), 1.3 * t35 - 0.29 * t85


Method = Callable[[float, float], tuple[float, float]]

READINGS: Final[tuple[tuple[str, float, float, Method], ...]] = (
    ("28.3 % and 63.2 % (Smith 1972)", 0.283, 0.632, smith),
    ("35.3 % and 85.3 % (Sundaresan and Krishnaswamy 1978)", 0.353, 0.853, sundaresan_krishnaswamy),
)
"""Name, the two shares of the change, and the method."""


def readings(record: Record) -> tuple[Reading, ...]:
    """Both methods over the longest hold after a move of OP; none where PV cannot be read there."""
    hold = _longest_hold(record)
    if hold is None:
        return ()
    start, end, size = hold
    first = max(int(np.searchsorted(record.time, record.time[start] - 1e-9)), 1)
    before = record.pv[_last_move_before(record, first) : first]
    rest = float(before[-max(len(before) // 5, 3) :].mean())
    time, pv = record.time[start:end] - record.time[start], record.pv[start:end] - rest
    tail = pv[-max(len(pv) // 5, 3) :]
    change = float(tail.mean())
    noise = float(np.std(np.diff(pv[-max(len(pv) // 3, 5) :]))) / 1.414
    if change == 0.0 or abs(change) < 5.0 * noise:
        return ()
    half = len(tail) // 2
    settling = abs(float(tail[half:].mean() - tail[:half].mean())) > 0.02 * abs(change) + 3 * noise
    found = []
    for name, low, high, method in READINGS:
        times = [_crossing(time, pv / change, share) for share in (low, high)]
        if times[0] is None or times[1] is None or times[1] <= times[0]:
            continue
        lag, late = method(times[0], times[1])
        found.append(Reading(name, change / size, lag, late, _remark(late, settling)))
    return tuple(found)


def _remark(late: float, settling: bool) -> str:
    words = []
    if late < 0.0:
        words.append(
            f"the dead time comes out at {time_text(late, 3)}, below 0: the method does not fit "
            "this plant"
        )
    if settling:
        words.append("PV had not come to rest when OP moved again")
    return "; ".join(words)


def _longest_hold(record: Record) -> tuple[int, int, float] | None:
    """First row, row after the last, and size of the move whose level was held longest."""
    best: tuple[int, int, float] | None = None
    for part in record.parts:
        moved = np.flatnonzero(np.diff(record.op[part])) + 1 + part.start
        if len(moved) == 0 or len(moved) > (part.stop - part.start) // 10:
            continue
        ends = [*moved[1:].tolist(), part.stop]
        for row, end in zip(moved.tolist(), ends, strict=True):
            length = record.time[end - 1] - record.time[row]
            if end - row >= 10 and (
                best is None or length > record.time[best[1] - 1] - record.time[best[0]]
            ):
                best = (row, end, float(record.op[row] - record.op[row - 1]))
    return best


def _last_move_before(record: Record, row: int) -> int:
    """First row of the level that was held before a row."""
    breaks = [b for b in record.breaks if b < row]
    moved = np.flatnonzero(np.diff(record.op[: row - 1])) + 1
    return int(max([0, *breaks[-1:], *moved[-1:].tolist()]))


def _crossing(time: Array, share: Array, wanted: float) -> float | None:
    """When a share of the change was passed for good: between the first and the last crossing.

    Noise makes PV cross several times; the middle of them is taken.
    """
    above = share >= wanted
    crossed = np.flatnonzero(above[1:] != above[:-1])
    if not len(crossed):
        return None
    first, last = int(crossed[0]), int(crossed[-1])
    moments = []
    for i in (first, last):
        step = share[i + 1] - share[i]
        moments.append(time[i] + (time[i + 1] - time[i]) * (wanted - share[i]) / step)
    return float(0.5 * (moments[0] + moments[1]))
