"""Published tuning rules: one pure function each, with its limits and its source.

A rule takes a small model in percent of span and seconds and gives settings in the form it was
published for.  Gains come out positive: the controller's action carries the sign.  Symbols in the
formulas: k gain, k' slope of an integrating plant, T time constant, L dead time, a = k L/T or k' L.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final, Literal

from workbench.errors import NotApplicable
from workbench.model.reduction import SmallModel

ZIEGLER_NICHOLS: Final = (
    'J.G. Ziegler and N.B. Nichols, "Optimum settings for automatic controllers", '
    "Trans. ASME 64, 1942, 759-768"
)
SKOGESTAD: Final = (
    'S. Skogestad, "Simple analytic rules for model reduction and PID controller tuning", '
    "J. Process Control 13(4), 2003, 291-309"
)
DAHLIN: Final = (
    'E.B. Dahlin, "Designing and tuning digital controllers", Instrum. Control Syst. 41(6), 1968, '
    "77-83 (from memory)"
)
CHIEN_FRUEHAUF: Final = (
    'I.-L. Chien and P.S. Fruehauf, "Consider IMC tuning to improve controller performance", '
    "Chem. Eng. Prog. 86(10), 1990, 33-41 (from memory)"
)


@dataclass(frozen=True)
class Tuning:
    """Settings as a rule gives them."""

    gain: float
    """[%/%]"""
    integral_time: float | None = None
    """[s]; none for proportional-only."""
    derivative_time: float = 0.0
    """[s]"""
    form: Literal["ideal", "series"] = "ideal"
    """The form that the rule was published for."""


@dataclass(frozen=True)
class Ultimate:
    """Where proportional control just keeps swinging."""

    gain: float
    """Ku [%/%], positive."""
    period: float
    """Pu [s]"""


# --- closed-loop time constant chosen by the engineer --------------------------------------------


def dahlin_lambda_pi(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """PI settings that ask for a first-order answer to the setpoint with time constant lambda.

    self-regulating   K = T/(k (lambda + L)),   Ti = T
    integrating       K = (2 lambda + L)/(k' (lambda + L)^2),   Ti = 2 lambda + L

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].
    closed_loop_time
        lambda [s]; `None` takes the larger of T and 3 L (common practice).

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Where there is neither a lag nor a dead time to take lambda from.

    Source
    ------
    E.B. Dahlin, Instrum. Control Syst. 41(6), 1968, 77-83; integrating plants: I.-L. Chien and
    P.S. Fruehauf, Chem. Eng. Prog. 86(10), 1990, 33-41; both from memory.

    Examples
    --------
    >>> dahlin_lambda_pi(SmallModel(2.0, False, 60.0, 0.0, 10.0, True), 20.0)
    Tuning(gain=1.0, integral_time=60.0, derivative_time=0.0, form='ideal')
    """
    k, t, delay = abs(model.gain), model.time_constant, model.dead_time
    wanted = closed_loop_time if closed_loop_time is not None else max(t, 3.0 * delay)
    if wanted + delay <= 0.0:
        raise NotApplicable("no dead time to take lambda from", limit="give a closed-loop time")
    if model.integrating:
        return Tuning((2 * wanted + delay) / (k * (wanted + delay) ** 2), 2 * wanted + delay)
    return Tuning(t / (k * (wanted + delay)), t)


def skogestad_simc_pi(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """SIMC PI settings.

    self-regulating   K = T/(k (tau_c + L)),   Ti = min(T, 4 (tau_c + L))
    integrating       K = 1/(k' (tau_c + L)),   Ti = 4 (tau_c + L)

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].
    closed_loop_time
        tau_c [s]; `None` takes tau_c = L, the published choice for tight control.

    Returns
    -------
    Tuning
        Ideal PI, which is series PI too.

    Raises
    ------
    NotApplicable
        Dead time 0 and no closed-loop time given.

    Source
    ------
    S. Skogestad, J. Process Control 13(4), 2003, 291-309, table 1.

    Examples
    --------
    >>> skogestad_simc_pi(SmallModel(1.0, False, 1.0, 0.0, 1.0, True), None).gain
    0.5
    """
    gain, integral_time = _simc(model, closed_loop_time)
    return Tuning(gain, integral_time)


def skogestad_simc_pid(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """SIMC PID settings in the series form: as SIMC PI, with Td = T2.

    Parameters
    ----------
    model
        Two lags, or integrating with a lag, with dead time [s].
    closed_loop_time
        tau_c [s]; `None` takes tau_c = L, the published choice for tight control.

    Returns
    -------
    Tuning
        Series PID.

    Raises
    ------
    NotApplicable
        No second lag, or dead time 0 and no closed-loop time given.

    Source
    ------
    S. Skogestad, J. Process Control 13(4), 2003, 291-309, table 1.

    Examples
    --------
    >>> skogestad_simc_pid(SmallModel(1.0, False, 8.0, 2.0, 1.0, True), None)
    Tuning(gain=4.0, integral_time=8.0, derivative_time=2.0, form='series')
    """
    if model.second_time_constant <= 0.0:
        raise NotApplicable("the plant has no second lag", limit="derivative pays only with one")
    gain, integral_time = _simc(model, closed_loop_time)
    return Tuning(gain, integral_time, model.second_time_constant, "series")


def _simc(model: SmallModel, closed_loop_time: float | None) -> tuple[float, float]:
    speed = (model.dead_time if closed_loop_time is None else closed_loop_time) + model.dead_time
    if speed <= 0.0:
        raise NotApplicable(
            "no dead time to take the speed from", limit="give a closed-loop time", source=SKOGESTAD
        )
    k = abs(model.gain)
    if model.integrating:
        return 1.0 / (k * speed), 4.0 * speed
    return model.time_constant / (k * speed), min(model.time_constant, 4.0 * speed)


# --- quarter amplitude damping -------------------------------------------------------------------


def ziegler_nichols_reaction(model: SmallModel, kind: Literal["p", "pi", "pid"]) -> Tuning:
    """Settings from the reaction curve.

    P    K = 1/a
    PI   K = 0.9/a,   Ti = L/0.3
    PID  K = 1.2/a,   Ti = 2 L,   Td = L/2

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].
    kind
        Which row.

    Returns
    -------
    Tuning
        Ideal form.

    Raises
    ------
    NotApplicable
        Dead time 0.

    Notes
    -----
    Aims at a decay ratio of a quarter: fast, lively and easily upset by a change of the plant.

    Source
    ------
    J.G. Ziegler and N.B. Nichols, Trans. ASME 64, 1942, 759-768.

    Examples
    --------
    >>> ziegler_nichols_reaction(SmallModel(1.0, False, 10.0, 0.0, 1.0, True), "pid")
    Tuning(gain=12.0, integral_time=2.0, derivative_time=0.5, form='ideal')
    """
    delay = model.dead_time
    if delay <= 0.0:
        raise NotApplicable("dead time 0 s", limit="wants a dead time", source=ZIEGLER_NICHOLS)
    a = abs(model.gain) * delay / (1.0 if model.integrating else model.time_constant)
    if kind == "p":
        return Tuning(1.0 / a)
    if kind == "pi":
        return Tuning(0.9 / a, delay / 0.3)
    return Tuning(1.2 / a, 2.0 * delay, delay / 2.0)


def ziegler_nichols_ultimate(ultimate: Ultimate, kind: Literal["p", "pi", "pid"]) -> Tuning:
    """Settings from the ultimate gain and period.

    P    K = 0.5 Ku
    PI   K = 0.45 Ku,   Ti = Pu/1.2
    PID  K = 0.6 Ku,    Ti = Pu/2,   Td = Pu/8

    Parameters
    ----------
    ultimate
        Ku [%/%] and Pu [s].
    kind
        Which row.

    Returns
    -------
    Tuning
        Ideal form.

    Notes
    -----
    Aims at a decay ratio of a quarter: fast, lively and easily upset by a change of the plant.

    Source
    ------
    J.G. Ziegler and N.B. Nichols, Trans. ASME 64, 1942, 759-768; the PID row from memory.

    Examples
    --------
    >>> ziegler_nichols_ultimate(Ultimate(10.0, 8.0), "pid")
    Tuning(gain=6.0, integral_time=4.0, derivative_time=1.0, form='ideal')
    """
    if kind == "p":
        return Tuning(0.5 * ultimate.gain)
    if kind == "pi":
        return Tuning(0.45 * ultimate.gain, ultimate.period / 1.2)
    return Tuning(0.6 * ultimate.gain, ultimate.period / 2.0, ultimate.period / 8.0)


# --- the table -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Plant:
    """What a rule may look at, each worked out only when a rule asks."""

    small_model: Callable[[int], SmallModel]
    """By the half rule, with one or two lags."""
    ultimate: Callable[[], Ultimate]
    closed_loop_time: float | None
    """As the engineer asked for it [s]."""


@dataclass(frozen=True)
class Rule:
    """One row of the table of rules."""

    title: str
    source: str
    function: Callable[..., Tuning]
    """The published formulas; its docstring states limits and source."""
    settings: Callable[[Plant], Tuning]
    """The rule applied to a plant."""


RULES: Final[dict[str, Rule]] = {
    "lambda-pi": Rule(
        "lambda PI",
        f"{DAHLIN}; integrating plants: {CHIEN_FRUEHAUF}",
        dahlin_lambda_pi,
        lambda p: dahlin_lambda_pi(p.small_model(1), p.closed_loop_time),
    ),
    "simc-pi": Rule(
        "SIMC PI",
        SKOGESTAD,
        skogestad_simc_pi,
        lambda p: skogestad_simc_pi(p.small_model(1), p.closed_loop_time),
    ),
    "simc-pid": Rule(
        "SIMC PID",
        SKOGESTAD,
        skogestad_simc_pid,
        lambda p: skogestad_simc_pid(p.small_model(2), p.closed_loop_time),
    ),
    "ziegler-nichols-reaction-p": Rule(
        "Ziegler-Nichols reaction curve P",
        ZIEGLER_NICHOLS,
        ziegler_nichols_reaction,
        lambda p: ziegler_nichols_reaction(p.small_model(1), "p"),
    ),
    "ziegler-nichols-reaction-pi": Rule(
        "Ziegler-Nichols reaction curve PI",
        ZIEGLER_NICHOLS,
        ziegler_nichols_reaction,
        lambda p: ziegler_nichols_reaction(p.small_model(1), "pi"),
    ),
    "ziegler-nichols-reaction-pid": Rule(
        "Ziegler-Nichols reaction curve PID",
        ZIEGLER_NICHOLS,
        ziegler_nichols_reaction,
        lambda p: ziegler_nichols_reaction(p.small_model(1), "pid"),
    ),
    "ziegler-nichols-ultimate-p": Rule(
        "Ziegler-Nichols ultimate P",
        ZIEGLER_NICHOLS,
        ziegler_nichols_ultimate,
        lambda p: ziegler_nichols_ultimate(p.ultimate(), "p"),
    ),
    "ziegler-nichols-ultimate-pi": Rule(
        "Ziegler-Nichols ultimate PI",
        ZIEGLER_NICHOLS,
        ziegler_nichols_ultimate,
        lambda p: ziegler_nichols_ultimate(p.ultimate(), "pi"),
    ),
    "ziegler-nichols-ultimate-pid": Rule(
        "Ziegler-Nichols ultimate PID",
        ZIEGLER_NICHOLS,
        ziegler_nichols_ultimate,
        lambda p: ziegler_nichols_ultimate(p.ultimate(), "pid"),
    ),
}
"""Method name, as commands and files write it -> the rule."""
