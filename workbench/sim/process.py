"""The plant and the load path as one process: what OP and the upset do to PV, in one state.

Both paths are brought to one common denominator, so that a slow or unstable part they share is one
part of the state and not two that have to cancel.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.model.transfer import Delayed, Factored, Realisation, TransferFunction

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Entry:
    """One way into the process: after its dead time the input acts through b and d."""

    dead_time: float
    """[s]"""
    b: Array
    """(n,)"""
    d: float


@dataclass(frozen=True)
class Process:
    """PV [%] for OP [%] and for the upset [its own unit], with every dead time exact.

    x' = A x + sum_k B_k u(t - L_k) + sum_j B_j load(t - L_j)
    y  = C x + sum_k D_k u(t - L_k) + sum_j D_j load(t - L_j)
    """

    a: Array
    """(n, n)"""
    c: Array
    """(n,)"""
    output: tuple[Entry, ...]
    """From the controller output, in order of dead time."""
    load: tuple[Entry, ...]
    """From the upset, in order of dead time."""


def process(loop: Loop) -> Process:
    """The process of a loop.

    Raises `ModelError` for an improper path or a dead time inside an inner feedback.
    """
    if loop.load is loop.plant:
        plant = load = loop.plant.realise()
    else:
        plant, load = _on_one_denominator(loop.plant, loop.load)
    # Turning the realisation round (transposing it) moves the dead times from the outputs to the
    # inputs; as both have the same denominator, they then share A and C.  Listing the states
    # backwards keeps A lower triangular, for which the matrix exponential is at its best.
    a = np.ascontiguousarray(plant.a.T[::-1, ::-1])
    output = _entries(plant)
    return Process(a, plant.b[::-1].copy(), output, output if load is plant else _entries(load))


def _entries(realisation: Realisation) -> tuple[Entry, ...]:
    return tuple(Entry(o.dead_time, o.c[::-1].copy(), o.d) for o in realisation.outputs)


def _on_one_denominator(
    plant: TransferFunction, load: TransferFunction
) -> tuple[Realisation, Realisation]:
    if plant.denominator == load.denominator or plant.has_delayed_feedback:
        return plant.realise(), load.realise()
    load.realise()  # its faults are its own, before anything is mixed
    mine, theirs = plant.denominator[0].polynomial, load.denominator[0].polynomial
    union = Counter(dict(mine.factors)) | Counter(dict(theirs.factors))
    whole = Factored(1.0, tuple(union.items()))
    return _over(whole, plant).realise(), _over(whole, load).realise()


def _over(whole: Factored, function: TransferFunction) -> TransferFunction:
    """The same function with the denominator `whole`, of which its own is a divisor."""
    missing = whole.divided_by(function.denominator[0].polynomial)
    assert missing is not None
    top = tuple(Delayed(t.dead_time, t.polynomial * missing) for t in function.numerator)
    return TransferFunction(top, (Delayed(0.0, whole),))
