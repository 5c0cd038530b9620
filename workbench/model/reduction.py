"""From a plant of any order to the small models that tuning rules are written for."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve, NotApplicable
from workbench.model.response import step_response
from workbench.model.robustness import ultimate
from workbench.model.transfer import TransferFunction
from workbench.units import Figure

_HALF_RULE = "S. Skogestad, J. Process Control 13 (2003) 291-309, section 2"


@dataclass(frozen=True)
class SmallModel:
    """k exp(-L s)/((T1 s + 1)(T2 s + 1)), or k' exp(-L s)/(s (T2 s + 1)) where integrating.

    Gains are whatever the plant's are; times in seconds.
    """

    gain: float
    """k, or the slope k' [per s] of an integrating plant."""
    integrating: bool
    time_constant: float
    """T1; 0 for an integrating plant."""
    second_time_constant: float
    dead_time: float
    exact: bool
    """The plant is this model, nothing was approximated."""

    def transfer(self) -> TransferFunction:
        """The model's transfer function."""
        lags = [(t, 1.0) for t in (self.time_constant, self.second_time_constant) if t]
        if self.integrating:
            lags.insert(0, (1.0, 0.0))
        return TransferFunction.ratio((self.gain,), lags, self.dead_time)


@dataclass(frozen=True)
class Misfit:
    """How far a small model is from the plant it stands for."""

    peak_step_error_percent: float
    """Largest difference of the step responses, in percent of the plant's largest."""
    phase_error_deg: Figure
    """Model less plant, at the plant's phase crossover."""


def half_rule(plant: TransferFunction, lags: int = 1) -> SmallModel:
    """A model with one or two lags and a dead time.

    The largest neglected lag is halved between the dead time and the smallest kept lag; all smaller
    lags and every inverse-response constant are added to the dead time.

    Parameters
    ----------
    plant
        Stable or integrating, real lags, at most inverse-response zeros, one dead time.
    lags
        1 or 2, how many time constants to keep; an integrator counts as one.

    Raises
    ------
    NotApplicable
        For oscillating, unstable or several-path plants, and for leads.

    Source
    ------
    S. Skogestad, "Simple analytic rules for model reduction and PID controller tuning",
    J. Process Control 13(4), 2003, 291-309, section 2 (from memory).

    Examples
    --------
    >>> lags = [(10.0, 1.0), (3.0, 1.0), (1.0, 1.0)]
    >>> model = half_rule(TransferFunction.ratio((1.0,), lags))
    >>> model.time_constant, model.dead_time
    (11.5, 2.5)
    """
    if plant.has_delayed_feedback or len(plant.numerator) != 1:
        raise _refuse("the plant has more than one path or an inner feedback")
    poles = plant.poles()
    if any(abs(p.imag) > 1e-9 * abs(p) for p in poles):
        raise _refuse("the plant oscillates by itself")
    if any(p.real > 0 for p in poles):
        raise _refuse("the plant is unstable")
    integrators = sum(1 for p in poles if p == 0)
    if integrators > 1:
        raise _refuse("the plant integrates twice")
    zeros = [z for z in plant.zeros() if z]
    if any(z.real < 0 or abs(z.imag) > 1e-9 * abs(z) for z in zeros) or len(zeros) < len(
        plant.zeros()
    ):
        raise _refuse("the plant has a lead or differentiates")
    constants = sorted((-1.0 / p.real for p in poles if p), reverse=True)
    kept = [float("inf")] * integrators + constants
    kept, rest = kept[:lags], kept[lags:]
    if not kept:
        raise _refuse("the plant has no lag")
    delay = plant.dead_time + sum(1.0 / z.real for z in zeros) + sum(rest[1:])
    exact = not rest and not zeros
    if rest:
        delay += rest[0] / 2.0
        kept[-1] += rest[0] / 2.0
    gain = plant.slope().value if integrators else plant.gain().value
    assert gain is not None
    second = kept[1] if len(kept) > 1 else 0.0
    return SmallModel(
        gain, bool(integrators), 0.0 if integrators else kept[0], second, delay, exact
    )


def _refuse(what: str) -> NotApplicable:
    return NotApplicable(what, limit="wants real lags and dead time", source=_HALF_RULE)


# --- a fit where control happens -----------------------------------------------------------------


def best_fit(plant: TransferFunction, lags: int = 1) -> SmallModel:
    """The small model nearest to a plant in the frequencies that matter for control.

    Least squares over two decades up to the phase crossover, each frequency alike on a logarithmic
    scale.  The error is divided by the square root of |G|: half way between an absolute error,
    which sees only the slow end, and a relative one, which sees only the crossover.

    Parameters
    ----------
    plant
        Stable or integrating once, with a phase that reaches -180 deg; any order and zeros.
    lags
        1 or 2 time constants; an integrator counts as one.

    Raises
    ------
    NotApplicable
        The plant is unstable, integrates twice, or never reaches -180 deg.
    CannotSolve
        The search found no model.
    """
    from scipy.optimize import least_squares

    integrating = plant.integrators == 1
    if plant.integrators not in (0, 1):
        raise NotApplicable("the plant integrates twice or differentiates", limit="wants a gain")
    steady = plant.slope() if integrating else plant.gain()
    sign = math.copysign(1.0, steady.value or 1.0)
    _, period = ultimate(plant * sign)
    crossover = 2.0 * math.pi / period
    w = np.geomspace(crossover / 100.0, crossover, 80)
    target = plant((1j * w).astype(np.complex128))
    weight = np.sqrt(np.abs(target) * np.abs(target[0]))
    free = lags - integrating

    def model(x: NDArray[np.float64]) -> SmallModel:
        # Logarithms keep gain and lags positive; times are in units of 1/crossover.
        times = sorted((math.exp(v) / crossover for v in x[2:]), reverse=True)
        first = times.pop(0) if not integrating else 0.0
        second = times.pop(0) if times else 0.0
        gain = sign * math.exp(x[0])
        return SmallModel(gain, integrating, first, second, float(x[1]) / crossover, False)

    def error(x: NDArray[np.float64]) -> NDArray[np.float64]:
        off = (model(x).transfer()((1j * w).astype(np.complex128)) - target) / weight
        return np.concatenate((off.real, off.imag))

    level = math.log(abs(target[0]) * (w[0] if integrating else 1.0))
    best: NDArray[np.float64] | None = None
    lowest = math.inf
    for start in ([2.0, 0.0], [0.5, -1.0], [4.0, 1.0]):
        x0 = np.array([level, 0.5, *start[: max(free, 0)]])
        low = [-np.inf, 0.0] + [-12.0] * max(free, 0)
        high = [np.inf, 20.0] + [25.0] * max(free, 0)
        found = least_squares(error, x0, bounds=(low, high), x_scale="jac")
        if found.cost < lowest:
            best, lowest = found.x, float(found.cost)
    if best is None or not math.isfinite(lowest):
        raise CannotSolve("no small model was found", change="use the half rule")
    return model(best)


def misfit(plant: TransferFunction, model: SmallModel) -> Misfit:
    """How far off a small model is: peak step error, and phase error at the phase crossover."""
    small = model.transfer()
    times = np.linspace(0.0, _horizon(plant), 1001)
    whole = step_response(plant, times)
    error = np.abs(step_response(small, times) - whole).max() / np.abs(whole).max()
    steady = (plant.slope() if plant.integrators else plant.gain()).value or 1.0
    try:
        _, period = ultimate(plant * math.copysign(1.0, steady))
    except NotApplicable as refusal:
        return Misfit(100.0 * float(error), Figure(None, str(refusal)))
    at = 2j * math.pi / period
    phase = np.angle(small(at) / plant(at), deg=True)
    return Misfit(100.0 * float(error), Figure.of(float(phase)))


def _horizon(plant: TransferFunction) -> float:
    """Long enough for a step response to show everything [s]."""
    slowest = [1.0 / abs(p.real) for p in plant.poles() if p.real < 0.0]
    return 6.0 * sum(slowest) + 3.0 * max(plant.delays, default=0.0) or 1.0


# --- plants that a lag does not stand for --------------------------------------------------------


@dataclass(frozen=True)
class UnstableLag:
    """k exp(-L s)/(T s - 1)."""

    gain: float
    time_constant: float
    """[s], positive."""
    dead_time: float
    """[s]"""


@dataclass(frozen=True)
class DoubleIntegrator:
    """k'' exp(-L s)/s^2."""

    gain: float
    """[per s^2]"""
    dead_time: float
    """[s]"""


def unstable_lag(plant: TransferFunction) -> UnstableLag:
    """The unstable lag of a plant; its stable lags and inverse responses count as dead time.

    Raises `NotApplicable` where the plant is anything else.
    """
    poles = _real_poles(plant)
    growing = [1.0 / p for p in poles if p > 0]
    if len(growing) != 1 or any(p == 0 for p in poles):
        raise NotApplicable("the plant has not one unstable lag", limit="published for one")
    lags = sum(-1.0 / p for p in poles if p < 0)
    gain = plant.gain().value
    assert gain is not None
    return UnstableLag(-gain, growing[0], plant.dead_time + lags + _inverse_response(plant))


def double_integrator(plant: TransferFunction) -> DoubleIntegrator:
    """The double integrator of a plant, its lags counted as dead time by the half rule.

    Raises `NotApplicable` where the plant is anything else.
    """
    poles = _real_poles(plant)
    if sum(1 for p in poles if p == 0) != 2 or any(p > 0 for p in poles):
        raise NotApplicable(
            "the plant does not integrate twice", limit="published for one that does"
        )
    lags = sorted((-1.0 / p for p in poles if p), reverse=True)
    delay = plant.dead_time + sum(lags) - 0.5 * max(lags, default=0.0) + _inverse_response(plant)
    twice = plant * TransferFunction.ratio((1.0, 0.0), [(1.0,)])
    acceleration = twice.slope().value
    assert acceleration is not None
    return DoubleIntegrator(acceleration, delay)


def _real_poles(plant: TransferFunction) -> list[float]:
    if plant.has_delayed_feedback or len(plant.numerator) != 1:
        raise _refuse("the plant has more than one path or an inner feedback")
    poles = plant.poles()
    if any(abs(p.imag) > 1e-9 * abs(p) for p in poles):
        raise _refuse("the plant oscillates by itself")
    return [p.real for p in poles]


def _inverse_response(plant: TransferFunction) -> float:
    zeros = plant.zeros()
    if any(z.real <= 0 or abs(z.imag) > 1e-9 * abs(z) for z in zeros):
        raise _refuse("the plant has a lead or differentiates")
    return sum(1.0 / z.real for z in zeros)
