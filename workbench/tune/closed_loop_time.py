"""Rules that set by a wanted closed-loop time constant: lambda, internal model control, SIMC.

Symbols in the formulas: k gain, k' slope and k'' acceleration of an integrating plant, T time
constant, L dead time, lambda or tau_c the closed-loop time constant.
"""

from __future__ import annotations

import math
from typing import Final

from workbench.errors import NotApplicable
from workbench.model.reduction import DoubleIntegrator, SmallModel, UnstableLag
from workbench.tune.tuning import Tuning, closed_loop_speed, integrating, self_regulating
from workbench.units import text

SKOGESTAD: Final = (
    'S. Skogestad, "Simple analytic rules for model reduction and PID controller tuning", '
    "J. Process Control 13(4), 2003, 291-309"
)
GRIMHOLT_SKOGESTAD_2012: Final = (
    'C. Grimholt and S. Skogestad, "Optimal PI-control and verification of the SIMC tuning rule", '
    "IFAC Conf. on Advances in PID Control, Brescia, 2012"
)
GRIMHOLT_SKOGESTAD_2018: Final = (
    'C. Grimholt and S. Skogestad, "Optimal PI and PID control of first-order plus delay '
    'processes", J. Process Control 70, 2018, 36-46 (tau_c = L/2 from memory)'
)
DAHLIN: Final = (
    'E.B. Dahlin, "Designing and tuning digital controllers", Instrum. Control Syst. 41(6), 1968, '
    "77-83 (from memory)"
)
CHIEN_FRUEHAUF: Final = (
    'I.-L. Chien and P.S. Fruehauf, "Consider IMC tuning to improve controller performance", '
    "Chem. Eng. Prog. 86(10), 1990, 33-41 (from memory)"
)
RIVERA: Final = (
    'D.E. Rivera, M. Morari and S. Skogestad, "Internal model control 4. PID controller design", '
    "Ind. Eng. Chem. Process Des. Dev. 25, 1986, 252-265 (from memory)"
)
LEE_LEE_PARK: Final = (
    'Y. Lee, J. Lee and S. Park, "PID controller tuning for integrating and unstable processes '
    'with time delay", Chem. Eng. Sci. 55, 2000, 3481-3493 (from memory, derived again)'
)


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
        raise NotApplicable(
            "no dead time to take lambda from", limit="give a closed-loop time", source=DAHLIN
        )
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
        raise NotApplicable(
            "the plant has no second lag", limit="derivative pays only with one", source=SKOGESTAD
        )
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


def skogestad_simc_double_integrating(
    model: DoubleIntegrator, closed_loop_time: float | None
) -> Tuning:
    """SIMC PID settings in the series form for a plant that integrates twice.

    K = 1/(4 k'' (tau_c + L)^2),   Ti = Td = 4 (tau_c + L)

    Parameters
    ----------
    model
        k'' exp(-L s)/s^2, k'' [%/% per s^2].
    closed_loop_time
        tau_c [s]; `None` takes tau_c = L, the published choice for tight control.

    Returns
    -------
    Tuning
        Series PID.

    Raises
    ------
    NotApplicable
        Dead time 0 and no closed-loop time given.

    Source
    ------
    S. Skogestad, J. Process Control 13(4), 2003, 291-309, table 1, from memory.

    Examples
    --------
    >>> skogestad_simc_double_integrating(DoubleIntegrator(1.0, 1.0), None)
    Tuning(gain=0.0625, integral_time=8.0, derivative_time=8.0, form='series')
    """
    delay = model.dead_time
    speed = closed_loop_speed(closed_loop_time, delay, 0.0, "0 s", SKOGESTAD) + delay
    return Tuning(1.0 / (4 * abs(model.gain) * speed**2), 4 * speed, 4 * speed, "series")


def grimholt_skogestad_simc_improved_pi(
    model: SmallModel, closed_loop_time: float | None
) -> Tuning:
    """Improved SIMC PI settings: SIMC with T + L/3 in place of T.

    self-regulating   K = (T + L/3)/(k (tau_c + L)),   Ti = min(T + L/3, 4 (tau_c + L))
    integrating       as SIMC

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
    C. Grimholt and S. Skogestad, IFAC Conf. on Advances in PID Control, Brescia, 2012.

    Examples
    --------
    >>> model = SmallModel(1.0, False, 3.0, 0.0, 3.0, True)
    >>> grimholt_skogestad_simc_improved_pi(model, None).integral_time
    4.0
    """
    if model.integrating:
        return skogestad_simc_pi(model, closed_loop_time)
    lag, delay = model.time_constant + model.dead_time / 3.0, model.dead_time
    wanted = closed_loop_speed(closed_loop_time, delay, 0.0, "0 s", GRIMHOLT_SKOGESTAD_2012)
    speed = wanted + delay
    return Tuning(lag / (abs(model.gain) * speed), min(lag, 4.0 * speed))


def grimholt_skogestad_simc_improved_pid(
    model: SmallModel, closed_loop_time: float | None
) -> Tuning:
    """Improved SIMC PID settings in the series form: as SIMC PI, with Td = L/3.

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].
    closed_loop_time
        tau_c [s]; `None` takes tau_c = L/2.

    Returns
    -------
    Tuning
        Series PID.

    Raises
    ------
    NotApplicable
        Dead time 0: there is nothing for the derivative to work against.

    Source
    ------
    C. Grimholt and S. Skogestad, J. Process Control 70, 2018, 36-46; tau_c = L/2 from memory.

    Examples
    --------
    >>> model = SmallModel(1.0, False, 3.0, 0.0, 3.0, True)
    >>> grimholt_skogestad_simc_improved_pid(model, 3.0)
    Tuning(gain=0.5, integral_time=3.0, derivative_time=1.0, form='series')
    """
    delay = model.dead_time
    if delay <= 0.0:
        raise NotApplicable(
            "dead time 0 s", limit="wants a dead time", source=GRIMHOLT_SKOGESTAD_2018
        )
    wanted = 0.5 * delay if closed_loop_time is None else closed_loop_time
    pi = skogestad_simc_pi(model, wanted)
    return Tuning(pi.gain, pi.integral_time, delay / 3.0, "series")


# --- internal model control ----------------------------------------------------------------------


def rivera_imc_pi(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """Internal model control with the dead time left out of the model.

    K = T/(k lambda),   Ti = T

    Parameters
    ----------
    model
        One lag, with dead time [s].
    closed_loop_time
        lambda [s], at least 1.7 L; `None` takes 1.7 L.

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Integrating, lambda below 1.7 L, or neither dead time nor lambda.

    Notes
    -----
    The limit is the authors' advice, from memory and not confirmed.

    Source
    ------
    D.E. Rivera, M. Morari and S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25, 1986, 252-265,
    from memory.

    Examples
    --------
    >>> rivera_imc_pi(SmallModel(2.0, False, 10.0, 0.0, 1.0, True), 2.5)
    Tuning(gain=2.0, integral_time=10.0, derivative_time=0.0, form='ideal')
    """
    self_regulating(model, RIVERA)
    least = 1.7 * model.dead_time
    wanted = closed_loop_speed(closed_loop_time, least, least, "1.7 L", RIVERA)
    return Tuning(model.time_constant / (abs(model.gain) * wanted), model.time_constant)


def rivera_imc_improved_pi(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """Internal model control with half of the dead time counted to the lag.

    K = (T + L/2)/(k lambda),   Ti = T + L/2

    Parameters
    ----------
    model
        One lag, with dead time [s].
    closed_loop_time
        lambda [s], at least 1.7 L; `None` takes 1.7 L.

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Integrating, lambda below 1.7 L, or neither dead time nor lambda.

    Notes
    -----
    The limit is the authors' advice, from memory and not confirmed.

    Source
    ------
    D.E. Rivera, M. Morari and S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25, 1986, 252-265,
    from memory.

    Examples
    --------
    >>> rivera_imc_improved_pi(SmallModel(1.0, False, 9.0, 0.0, 2.0, True), 5.0)
    Tuning(gain=2.0, integral_time=10.0, derivative_time=0.0, form='ideal')
    """
    self_regulating(model, RIVERA)
    least = 1.7 * model.dead_time
    wanted = closed_loop_speed(closed_loop_time, least, least, "1.7 L", RIVERA)
    lag = model.time_constant + model.dead_time / 2.0
    return Tuning(lag / (abs(model.gain) * wanted), lag)


def rivera_imc_pid(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """Internal model control with a first-order Pade approximation of the dead time.

    K = (T + L/2)/(k (lambda + L/2)),   Ti = T + L/2,   Td = T L/(2 T + L)

    Parameters
    ----------
    model
        One lag, with dead time [s].
    closed_loop_time
        lambda [s], at least 0.8 L; `None` takes lambda = L.

    Returns
    -------
    Tuning
        Ideal PID.

    Raises
    ------
    NotApplicable
        Integrating, lambda below 0.8 L, or neither dead time nor lambda.

    Notes
    -----
    The limit is the authors' advice, from memory and not confirmed.

    Source
    ------
    D.E. Rivera, M. Morari and S. Skogestad, Ind. Eng. Chem. Process Des. Dev. 25, 1986, 252-265,
    from memory.

    Examples
    --------
    >>> rivera_imc_pid(SmallModel(1.0, False, 1.0, 0.0, 2.0, True), 3.0)
    Tuning(gain=0.5, integral_time=2.0, derivative_time=0.5, form='ideal')
    """
    self_regulating(model, RIVERA)
    lag, delay = model.time_constant, model.dead_time
    wanted = closed_loop_speed(closed_loop_time, delay, 0.8 * delay, "0.8 L", RIVERA)
    gain = (lag + delay / 2.0) / (abs(model.gain) * (wanted + delay / 2.0))
    return Tuning(gain, lag + delay / 2.0, lag * delay / (2.0 * lag + delay))


def chien_fruehauf_integrating_pid(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """Internal model control of an integrating plant, the dead time by a first-order Pade form.

    K = (2 lambda + L)/(k' (lambda + L/2)^2),   Ti = 2 lambda + L,
    Td = L (lambda + L/4)/(2 lambda + L)

    Parameters
    ----------
    model
        Integrating, with dead time [s].
    closed_loop_time
        lambda [s]; `None` takes 3 L (common practice).

    Returns
    -------
    Tuning
        Ideal PID.

    Raises
    ------
    NotApplicable
        Self-regulating, or neither dead time nor lambda.

    Source
    ------
    I.-L. Chien and P.S. Fruehauf, Chem. Eng. Prog. 86(10), 1990, 33-41, from memory.

    Examples
    --------
    >>> chien_fruehauf_integrating_pid(SmallModel(1.0, True, 0.0, 0.0, 2.0, True), 1.0)
    Tuning(gain=1.0, integral_time=4.0, derivative_time=0.75, form='ideal')
    """
    integrating(model, CHIEN_FRUEHAUF)
    delay = model.dead_time
    wanted = closed_loop_speed(closed_loop_time, 3.0 * delay, 0.0, "0 s", CHIEN_FRUEHAUF)
    integral = 2.0 * wanted + delay
    gain = integral / (abs(model.gain) * (wanted + delay / 2.0) ** 2)
    return Tuning(gain, integral, delay * (wanted + delay / 4.0) / integral)


def chien_fruehauf_integrating_lag_pid(model: SmallModel, closed_loop_time: float | None) -> Tuning:
    """Internal model control of an integrating plant with a lag T.

    K = (2 lambda + T + L)/(k' (lambda + L)^2),   Ti = 2 lambda + T + L,
    Td = T (2 lambda + L)/(2 lambda + T + L)

    Parameters
    ----------
    model
        Integrating, with a second lag and dead time [s].
    closed_loop_time
        lambda [s]; `None` takes 3 L (common practice).

    Returns
    -------
    Tuning
        Ideal PID.

    Raises
    ------
    NotApplicable
        Self-regulating, no lag, or neither dead time nor lambda.

    Source
    ------
    I.-L. Chien and P.S. Fruehauf, Chem. Eng. Prog. 86(10), 1990, 33-41, from memory.

    Examples
    --------
    >>> chien_fruehauf_integrating_lag_pid(SmallModel(1.0, True, 0.0, 3.0, 1.0, True), 2.0)
    Tuning(gain=0.8888888888888888, integral_time=8.0, derivative_time=1.875, form='ideal')
    """
    integrating(model, CHIEN_FRUEHAUF)
    lag, delay = model.second_time_constant, model.dead_time
    if lag <= 0.0:
        raise NotApplicable(
            "the plant has no lag beside the integrator", limit="wants one", source=CHIEN_FRUEHAUF
        )
    wanted = closed_loop_speed(closed_loop_time, 3.0 * delay, 0.0, "0 s", CHIEN_FRUEHAUF)
    integral = 2.0 * wanted + lag + delay
    gain = integral / (abs(model.gain) * (wanted + delay) ** 2)
    return Tuning(gain, integral, lag * (2.0 * wanted + delay) / integral)


def lee_imc_unstable_pid(model: UnstableLag, closed_loop_time: float | None) -> Tuning:
    """Internal model control of an unstable lag, as the first terms of its series in s.

    alpha = T ((1 + lambda/T)^2 exp(L/T) - 1),   w = 2 lambda + L - alpha,
    v = (lambda^2 + alpha L - L^2/2)/w
    Ti = alpha - T - v,   K = -Ti/(k w),
    Td = v_T/Ti - v  with  v_T = -T alpha - (L^3/6 - alpha L^2/2)/w

    Parameters
    ----------
    model
        k exp(-L s)/(T s - 1), times in seconds.
    closed_loop_time
        lambda [s]; `None` takes the larger of 2 L and T/10: the authors leave it to the engineer.

    Returns
    -------
    Tuning
        Ideal PID.

    Raises
    ------
    NotApplicable
        L/T above 0.6, or a lambda that is not above 0.

    Notes
    -----
    The authors put a filter on the setpoint; without it a setpoint step overshoots far.  The limit
    of L/T is ours: beyond it no lambda leaves a usable margin.

    Source
    ------
    Y. Lee, J. Lee and S. Park, Chem. Eng. Sci. 55, 2000, 3481-3493, from memory, derived again.

    Examples
    --------
    >>> lee_imc_unstable_pid(UnstableLag(1.0, 1.0, 0.0), 1.0)
    Tuning(gain=3.0, integral_time=3.0, derivative_time=0.0, form='ideal')
    """
    lag, delay = model.time_constant, model.dead_time
    if delay > 0.6 * lag:
        raise NotApplicable(
            f"L/T is {text(delay / lag, digits=3)}", limit="wants at most 0.6", source=LEE_LEE_PARK
        )
    wanted = closed_loop_speed(
        closed_loop_time, max(2.0 * delay, 0.1 * lag), 0.0, "0 s", LEE_LEE_PARK
    )
    alpha = lag * ((1.0 + wanted / lag) ** 2 * math.exp(delay / lag) - 1.0)
    weight = 2.0 * wanted + delay - alpha
    shift = (wanted**2 + alpha * delay - delay**2 / 2.0) / weight
    integral = alpha - lag - shift
    turned = -lag * alpha - (delay**3 / 6.0 - alpha * delay**2 / 2.0) / weight
    gain = -integral / (abs(model.gain) * weight)
    derivative = turned / integral - shift
    # Without dead time nothing but rounding is left of it.
    return Tuning(gain, integral, derivative if derivative > 1e-12 * lag else 0.0)
