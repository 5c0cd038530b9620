"""Numbers from a trace: how well the loop follows its setpoint, how it bears the upset, what the
output has to do for it.

The setpoint window runs from the setpoint step to the load step (or the end), the load window from
the load step to the end.  Between rows PV is taken as straight and the output as held; integrals
and crossing times are exact for that, so the rows must be fine enough, as those of `loop` are.

The rise time is the common one, from 10 to 90 % of the step.  The control rise time is another
figure: from the step to when PV first comes within 2 % of it, as IEC 60050-351 has it (entry
351-45-36, from memory).  Settling is from the step to when PV stays within the band for good (entry
351-45-37, from memory), 2 % of the setpoint step, or 5 % of the load's peak deviation.  Decay ratio
and period are read from the first two peaks of PV beyond the setpoint on the same side.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.sim.loop import Trace
from workbench.sim.scenario import Events
from workbench.sim.signals import values
from workbench.units import Figure

Array = NDArray[np.float64]

_REVERSAL: Final = 0.1
"""A change of direction of the output counts from this size on [% of OP span]."""


@dataclass(frozen=True)
class Measures:
    """Figures of a run, in percent of span and seconds; what does not exist says why."""

    setpoint_iae: Figure
    """Integral of the absolute error over the setpoint window [% s]."""
    setpoint_overshoot_percent: Figure
    """[% of the setpoint step]"""
    setpoint_rise_time_s: Figure
    """From 10 to 90 % of the setpoint step."""
    setpoint_settling_time_s: Figure
    """From the step to the last time outside +-2 % of it."""
    setpoint_control_rise_time_s: Figure
    """From the step to the first time within +-2 % of it."""
    setpoint_ise: Figure
    """Integral of the squared error over the setpoint window [%^2 s]."""
    setpoint_itae: Figure
    """Integral of time from the step times the absolute error [% s^2]."""
    setpoint_decay_ratio: Figure
    """Second overshoot to first."""
    setpoint_period_s: Figure
    """From the first overshoot to the second."""
    load_iae: Figure
    """Integral of the absolute error over the load window [% s]."""
    load_peak_deviation: Figure
    """Largest distance of PV from the setpoint after the load step [%], not below 0."""
    load_settling_time_s: Figure
    """From the load step to the last time outside +-5 % of the peak deviation."""
    load_ise: Figure
    """Integral of the squared error over the load window [%^2 s]."""
    load_itae: Figure
    """Integral of time from the load step times the absolute error [% s^2]."""
    load_decay_ratio: Figure
    """Second peak deviation on the side of the first, to the first."""
    load_period_s: Figure
    """From the one to the other."""
    output_travel: Figure
    """Sum of all moves of the output, the first included [%]."""
    output_reversals: Figure
    """Changes of direction of the output larger than 0.1 % of its span."""
    output_time_at_limit_s: Figure
    """Time the output spends at a limit."""
    final_pv: Figure
    """At the end of the run, a deviation from where the loop rested [%]."""
    final_op: Figure
    """At the end of the run, a deviation from where the loop rested [%]."""


@dataclass(frozen=True)
class _Window:
    """Error from an instant on: time from there [s], and setpoint less PV [%]."""

    time: Array
    error: Array


@dataclass(frozen=True)
class Run:
    """A trace with what is needed to read it."""

    trace: Trace
    events: Events
    low: float | None = None
    """Output limits, as deviations [%]."""
    high: float | None = None

    @cached_property
    def setpoint_window(self) -> _Window | str:
        """The error after the setpoint step, or why there is none."""
        events = self.events
        if not events.setpoint_step:
            return "there is no setpoint step"
        end = events.until
        if events.load_step and events.load_at >= events.setpoint_at:
            end = min(end, events.load_at)
        if end <= events.setpoint_at:
            return "the load step comes at the same instant as the setpoint step"
        return self._window(events.setpoint_at, end)

    @cached_property
    def load_window(self) -> _Window | str:
        """The error after the load step, or why there is none."""
        if not self.events.load_step:
            return "there is no load step"
        return self._window(self.events.load_at, self.events.until)

    def _window(self, start: float, end: float) -> _Window | str:
        trace = self.trace
        if trace.diverged:
            return "the loop is unstable"
        rows = (trace.time > start) & (trace.time < end)
        time = np.concatenate([[start], trace.time[rows], [end]])
        pv = np.interp(time, trace.time, trace.pv)
        if end < self.events.until and rows.any():
            # The window ends where PV may jump: what counts is PV just before.
            pv[-1] = pv[-2]
        setpoint = values(self.events.setpoint, time)
        return _Window(time - start, setpoint - pv)


def measure(
    trace: Trace, events: Events, *, low: float | None = None, high: float | None = None
) -> Measures:
    """Every figure of a run.

    Parameters
    ----------
    trace
        What the loop did [%, s].
    events
        What happened to it: gives the windows and the size of the steps.
    low, high
        Output limits as deviations from where the output rested [%]; None where there is none.

    Returns
    -------
    Measures
        In percent of span and seconds.
    """
    run = Run(trace, events, low, high)
    return Measures(**{name: metric.of(run) for name, metric in METRICS.items()})


# --- after the setpoint step ---------------------------------------------------------------------


def _setpoint_iae(run: Run) -> Figure:
    return _iae(run.setpoint_window)


def _iae(window: _Window | str) -> Figure:
    if isinstance(window, str):
        return Figure(None, window)
    return Figure.of(absolute_area(window.time, window.error))


def absolute_area(time: Array, error: Array) -> float:
    """Integral of |error| over time, exact for straight lines between rows (n_rows,)."""
    left, right, width = error[:-1], error[1:], np.diff(time)
    size = np.abs(left) + np.abs(right)
    crossing = left * right < 0.0
    # Two triangles where the error changes sign, a trapezium elsewhere.
    safe = np.where(size > 0.0, size, 1.0)
    height = np.where(crossing, (left * left + right * right) / safe, size)
    return float(0.5 * (height * width).sum())


def _overshoot(run: Run) -> Figure:
    window, step = run.setpoint_window, run.events.setpoint_step
    if isinstance(window, str):
        return Figure(None, window)
    return Figure.of(max(0.0, float((-window.error / step).max()) * 100.0))


def _rise_time(run: Run) -> Figure:
    window, step = run.setpoint_window, run.events.setpoint_step
    if isinstance(window, str):
        return Figure(None, window)
    reached = 1.0 - window.error / step
    begin, end = (_first_crossing(window.time, reached, level) for level in (0.1, 0.9))
    if begin is None or end is None:
        return Figure(None, "PV does not reach 90 % of the setpoint step in its window")
    return Figure.of(end - begin)


def _first_crossing(time: Array, signal: Array, level: float) -> float | None:
    """When the signal first comes up to the level, interpolated [s]."""
    above = np.flatnonzero(signal >= level)
    if not len(above):
        return None
    i = int(above[0])
    if i == 0:
        return float(time[0])
    share = (level - signal[i - 1]) / (signal[i] - signal[i - 1])
    return float(time[i - 1] + share * (time[i] - time[i - 1]))


def _control_rise(run: Run) -> Figure:
    window, step = run.setpoint_window, run.events.setpoint_step
    if isinstance(window, str):
        return Figure(None, window)
    reached = _first_crossing(window.time, 1.0 - window.error / step, 0.98)
    if reached is None:
        return Figure(None, "PV does not come within 2 % of the setpoint step in its window")
    return Figure.of(reached)


def _setpoint_settling(run: Run) -> Figure:
    window = run.setpoint_window
    if isinstance(window, str):
        return Figure(None, window)
    return _settling(window, 0.02 * abs(run.events.setpoint_step), "2 % of the setpoint step")


def _settling(window: _Window, band: float, words: str) -> Figure:
    """Last time outside the band, interpolated [s]."""
    size = np.abs(window.error)
    outside = np.flatnonzero(size > band)
    if not len(outside):
        return Figure(0.0)
    i = int(outside[-1])
    if i == len(size) - 1:
        return Figure(None, f"PV is still more than {words} off when its window ends")
    # The error may change sign between the rows; the edge it enters by is that of its last side.
    side = math.copysign(1.0, window.error[i])
    last, following = side * window.error[i], side * window.error[i + 1]
    share = (last - band) / (last - following)
    return Figure.of(float(window.time[i] + share * (window.time[i + 1] - window.time[i])))


# --- after the load step -------------------------------------------------------------------------


def _load_iae(run: Run) -> Figure:
    return _iae(run.load_window)


def _load_peak(run: Run) -> Figure:
    window = run.load_window
    if isinstance(window, str):
        return Figure(None, window)
    return Figure.of(float(np.abs(window.error).max()))


def _load_settling(run: Run) -> Figure:
    window, peak = run.load_window, _load_peak(run)
    if isinstance(window, str) or peak.value is None:
        return Figure(None, peak.reason)
    return _settling(window, 0.05 * peak.value, "5 % of the peak deviation")


# --- both ----------------------------------------------------------------------------------------


def _ise(window: _Window | str) -> Figure:
    if isinstance(window, str):
        return Figure(None, window)
    left, right = window.error[:-1], window.error[1:]
    squares = (left * left + left * right + right * right) / 3.0
    return Figure.of(float((squares * np.diff(window.time)).sum()))


def _itae(window: _Window | str) -> Figure:
    if isinstance(window, str):
        return Figure(None, window)
    time, error = _with_crossings(window.time, window.error)
    early, late, left, right = time[:-1], time[1:], np.abs(error[:-1]), np.abs(error[1:])
    # Simpson's rule, exact for a straight line times the time.
    middle = (early + late) * (left + right)
    return Figure.of(float(((early * left + middle + late * right) * (late - early)).sum() / 6.0))


def _with_crossings(time: Array, error: Array) -> tuple[Array, Array]:
    """The same straight lines with a row where they go through 0 (n_rows,)."""
    k = np.flatnonzero(error[:-1] * error[1:] < 0.0)
    share = error[k] / (error[k] - error[k + 1])
    crossing = time[k] + share * (time[k + 1] - time[k])
    return np.insert(time, k + 1, crossing), np.insert(error, k + 1, 0.0)


def _beyond(run: Run) -> float:
    """The sign of the error while PV is beyond the setpoint."""
    return -math.copysign(1.0, run.events.setpoint_step)


def _swing(window: _Window | str, side: float = 0.0) -> tuple[Figure, Figure]:
    """Decay ratio and period [s] of the peaks of the error on one side, 0 being that of the first.

    A peak is the largest error between two changes of its sign.
    """
    if isinstance(window, str):
        return Figure(None, window), Figure(None, window)
    error, largest = window.error, float(np.abs(window.error).max())
    # Rounding about 0 is no swing.
    signs = np.where(np.abs(error) > 1e-4 * largest, np.sign(error), 0.0)
    felt = np.flatnonzero(signs)
    starts = felt[np.flatnonzero(np.diff(signs[felt], prepend=0.0))]
    peaks = []
    for start, end in pairwise([*starts.tolist(), len(error)]):
        side = side or float(signs[start])
        top = start + int(np.abs(error[start:end]).argmax())
        if signs[start] == side and top < len(error) - 1:
            peaks.append(top)
    if len(peaks) < 2:
        none = Figure(None, "PV does not swing to the same side twice")
        return none, none
    first, second = peaks[:2]
    return (
        Figure.of(abs(float(error[second] / error[first]))),
        Figure.of(float(window.time[second] - window.time[first])),
    )


# --- the output ----------------------------------------------------------------------------------


def _cut_off(run: Run) -> Figure | None:
    return Figure(None, "the loop is unstable") if run.trace.diverged else None


def _travel(run: Run) -> Figure:
    moves = np.diff(run.trace.output, prepend=0.0)
    return _cut_off(run) or Figure.of(float(np.abs(moves).sum()))


def _reversals(run: Run) -> Figure:
    return _cut_off(run) or Figure.of(float(reversals(run.trace.output)))


def reversals(output: Array) -> int:
    """How often the output, from 0, turns round by more than 0.1 % of its span (n_rows,)."""
    moves = np.diff(output, prepend=0.0)
    moving = np.flatnonzero(moves)
    turns = moving[:-1][np.sign(moves[moving[:-1]]) != np.sign(moves[moving[1:]])]
    extremes = [0.0, *output[turns].tolist(), *output[-1:].tolist()]
    found, direction, furthest = 0, 0, 0.0
    for value in extremes:
        if direction == 0:
            if abs(value) > _REVERSAL:
                direction, furthest = (1 if value > 0.0 else -1), value
        elif (value - furthest) * direction >= 0.0:
            furthest = value
        elif abs(value - furthest) > _REVERSAL:
            found, direction, furthest = found + 1, -direction, value
    return found


def _time_at_limit(run: Run) -> Figure:
    trace = run.trace
    at_limit = np.zeros(len(trace.time) - 1, dtype=bool)
    for limit, side in ((run.low, -1.0), (run.high, 1.0)):
        if limit is not None:
            at_limit |= side * (trace.output[:-1] - limit) >= -1e-9 * max(1.0, abs(limit))
    return _cut_off(run) or Figure.of(float(np.diff(trace.time)[at_limit].sum()))


def _final_pv(run: Run) -> Figure:
    return _cut_off(run) or Figure.of(float(run.trace.pv[-1]))


def _final_op(run: Run) -> Figure:
    return _cut_off(run) or Figure.of(float(run.trace.output[-1]))


# --- the table -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Metric:
    """One figure: what it is called, its unit, and how it is read from a run."""

    title: str
    unit: str
    """`PV`, `OP` stand for percent of their spans here, for the loop's own units on the screen."""
    of: Callable[[Run], Figure]


METRICS: Final[dict[str, Metric]] = {
    "setpoint_iae": Metric("integral of the absolute error", "PV s", _setpoint_iae),
    "setpoint_overshoot_percent": Metric("overshoot", "%", _overshoot),
    "setpoint_rise_time_s": Metric("rise time, 10 to 90 %", "s", _rise_time),
    "setpoint_settling_time_s": Metric("settling time, 2 %", "s", _setpoint_settling),
    "setpoint_control_rise_time_s": Metric("control rise time, 2 %", "s", _control_rise),
    "setpoint_ise": Metric(
        "integral of the squared error", "PV2 s", lambda run: _ise(run.setpoint_window)
    ),
    "setpoint_itae": Metric(
        "integral of time and absolute error", "PV s2", lambda run: _itae(run.setpoint_window)
    ),
    "setpoint_decay_ratio": Metric(
        "decay ratio", "", lambda run: _swing(run.setpoint_window, _beyond(run))[0]
    ),
    "setpoint_period_s": Metric(
        "period of the swing", "s", lambda run: _swing(run.setpoint_window, _beyond(run))[1]
    ),
    "load_iae": Metric("integral of the absolute error", "PV s", _load_iae),
    "load_peak_deviation": Metric("peak deviation", "PV", _load_peak),
    "load_settling_time_s": Metric("settling time, 5 % of the peak", "s", _load_settling),
    "load_ise": Metric("integral of the squared error", "PV2 s", lambda run: _ise(run.load_window)),
    "load_itae": Metric(
        "integral of time and absolute error", "PV s2", lambda run: _itae(run.load_window)
    ),
    "load_decay_ratio": Metric("decay ratio", "", lambda run: _swing(run.load_window)[0]),
    "load_period_s": Metric("period of the swing", "s", lambda run: _swing(run.load_window)[1]),
    "output_travel": Metric("travel of the output", "OP", _travel),
    "output_reversals": Metric("reversals of the output", "", _reversals),
    "output_time_at_limit_s": Metric("time at an output limit", "s", _time_at_limit),
    "final_pv": Metric("PV at the end", "PV", _final_pv),
    "final_op": Metric("OP at the end", "OP", _final_op),
}
"""Field of `Measures` -> how it is found."""
