"""Open-loop responses from rest, exact at the asked instants, dead time included."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import ModelError, Problem
from workbench.model.matrix import expm, hold
from workbench.model.transfer import TransferFunction
from workbench.units import Figure

Floats = NDArray[np.float64]


# --- inputs --------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Signal:
    """An input that starts at rest: what `INPUTS` makes transforms of."""

    kind: str = "step"
    size: float = 1.0
    """Height; of a ramp the slope [per s], of an impulse its area, of a sine its amplitude."""
    at: float = 0.0
    """When it begins [s]."""
    width: float = 1.0
    """Of a pulse, or of each half of a doublet [s]."""
    period: float = 1.0
    """Of a sine [s]."""

    def transform(self) -> TransferFunction:
        """Laplace transform of the input.  Raises `ModelError` for a width or period of 0."""
        for name in ("width", "period"):
            if not getattr(self, name) > 0.0:
                raise ModelError(Problem(f"a {name} of {getattr(self, name):g} s", "give more"))
        shape = self.size * INPUTS[self.kind](self)
        return shape * TransferFunction.ratio((1.0,), dead_time=self.at)

    def values(self, times: Floats) -> Floats:
        """The input itself at the times [s]; an impulse has no values to show and reads 0."""
        if self.kind == "impulse":
            return np.zeros_like(times)
        return impulse_response(self.transform(), times)


def _later(seconds: float) -> TransferFunction:
    return TransferFunction.ratio((1.0,), dead_time=seconds)


_STEP: Final = TransferFunction.ratio((1.0,), [(1.0, 0.0)])


def _doublet(signal: Signal) -> TransferFunction:
    return _STEP - 2.0 * (_STEP * _later(signal.width)) + _STEP * _later(2.0 * signal.width)


def _sine(signal: Signal) -> TransferFunction:
    w = 2.0 * math.pi / signal.period
    return TransferFunction.ratio((1.0 / w,), [(1.0 / w**2, 0.0, 1.0)])


INPUTS: Final[dict[str, Callable[[Signal], TransferFunction]]] = {
    "step": lambda signal: _STEP,
    "ramp": lambda signal: _STEP * _STEP,
    "pulse": lambda signal: _STEP - _STEP * _later(signal.width),
    "doublet": _doublet,
    "sine": _sine,
    "impulse": lambda signal: TransferFunction.constant(1.0),
}
"""Word -> transform of the input of size 1 that begins at 0 s."""


# --- responses -----------------------------------------------------------------------------------


def impulse_response(function: TransferFunction, times: Floats) -> Floats:
    """Inverse Laplace transform of a strictly proper function.

    Parameters
    ----------
    function
        Plant times the transform of its input.
    times
        Rising instants [s], shape (n,).

    Returns
    -------
    NDArray
        Values at those instants, shape (n,); at a jump the value after it.

    Raises
    ------
    ModelError
        The function is not strictly proper, or holds a dead time inside a feedback.
    """
    plant = function.realise()
    if any(o.d for o in plant.outputs):
        raise ModelError(
            Problem("the response begins with an infinite spike", "add a lag, or use a step")
        )
    total = np.zeros(len(times))
    for output in plant.outputs:
        after = times - output.dead_time
        live = np.flatnonzero(after >= -1e-12 * np.abs(times))
        if len(live):
            total[live] += _decays(plant.a, plant.b, np.maximum(after[live], 0.0)) @ output.c
    return total


def _decays(a: Floats, b: Floats, times: Floats) -> Floats:
    """exp(A t) B at rising times, shape (len(times), n); equal steps share their matrix."""
    rows = np.empty((len(times), len(b)))
    state = expm(a * times[0]) @ b
    rows[0] = state
    known: dict[float, Floats] = {}
    for i, step in enumerate(np.diff(times), start=1):
        # Equal intervals differ in their last digits; twelve digits tell them apart from others.
        key = float(f"{step:.12g}")
        if key not in known:
            known[key] = expm(a * step)
        state = known[key] @ state
        rows[i] = state
    return rows


def step_response(plant: TransferFunction, times: Floats) -> Floats:
    """Response to a unit step at 0 s; times and values as for `impulse_response`."""
    return impulse_response(plant * _STEP, times)


def held_response(
    plant: TransferFunction, moments: Floats, values: Floats, times: Floats
) -> Floats:
    """Response from rest to an input that is held between its moves.

    Parameters
    ----------
    plant
        Proper, without a dead time inside a feedback.
    moments
        When the input takes each value, rising [s], shape (m,).
    values
        Deviations of the input from rest, shape (m,).
    times
        Rising instants asked for [s], shape (n,).

    Returns
    -------
    NDArray
        Deviations of the output, shape (n,).
    """
    realised = plant.realise()
    total = np.zeros(len(times))
    for output in realised.outputs:
        wanted = times - output.dead_time
        held = np.searchsorted(moments, wanted, side="right") - 1
        states = _held_states(realised.a, realised.b, moments, values, wanted)
        total += states @ output.c + output.d * np.where(held >= 0, values[held], 0.0)
    return total


def _held_states(a: Floats, b: Floats, moments: Floats, values: Floats, wanted: Floats) -> Floats:
    """The state at each wanted instant; before the first move it rests at 0."""
    rows = np.zeros((len(wanted), len(b)))
    state, at, level, move = np.zeros(len(b)), float(moments[0]), 0.0, 0
    known: dict[float, tuple[Floats, Floats]] = {}

    def onward(until: float) -> Floats:
        key = float(f"{until - at:.12g}")
        if key not in known:
            known[key] = hold(a, b, key)
        phi, gamma = known[key]
        return phi @ state + gamma * level

    for row, instant in enumerate(wanted):
        while move < len(moments) and moments[move] <= instant:
            state, at, level = onward(float(moments[move])), float(moments[move]), values[move]
            move += 1
        if move:
            rows[row] = onward(float(instant))
    return rows


def final_value(transform: TransferFunction) -> Figure:
    """The limit for large times of a signal, from its Laplace transform Y(s).

    It exists only where every pole of s Y(s) is strictly in the left half plane.
    """
    if not transform.numerator:
        return Figure(0.0)
    for pole in transform.poles():
        if pole != 0 and pole.real > 0:
            return Figure(None, f"a pole at {_place(pole)} 1/s: it grows without end")
        if pole != 0 and pole.real == 0:
            return Figure(None, f"a pole at {_place(pole)} 1/s: it swings for ever")
    limit = transform.slope()
    return limit if limit.value is not None else Figure(None, "it moves on for ever")


def _place(pole: complex) -> str:
    real = f"{pole.real + 0.0:.4g}"
    return real if pole.imag == 0 else f"{real} +- {abs(pole.imag):.4g}j"
