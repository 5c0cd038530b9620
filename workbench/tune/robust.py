"""Rules fitted so that the loop keeps a stated distance from instability.

Symbols in the formulas: k gain, k' slope of an integrating plant, T time constant, L dead time.
"""

from __future__ import annotations

import math
from typing import Final

from workbench.errors import NotApplicable
from workbench.model.reduction import SmallModel
from workbench.tune.tuning import Tuning, self_regulating, with_dead_time
from workbench.units import text

AMIGO: Final = (
    'K.J. Astrom and T. Hagglund, "Revisiting the Ziegler-Nichols step response method for PID '
    'control", J. Process Control 14, 2004, 635-650 (from memory)'
)
HAGGLUND_ASTROM: Final = (
    'T. Hagglund and K.J. Astrom, "Revisiting the Ziegler-Nichols tuning rules for PI control", '
    "Asian J. Control 4, 2002, 364-380 (from memory)"
)
HO_HANG_CAO: Final = (
    'W.K. Ho, C.C. Hang and L.S. Cao, "Tuning of PID controllers based on gain and phase margin '
    'specifications", Automatica 31, 1995, 497-502 (from memory)'
)


def astrom_hagglund_amigo_pi(model: SmallModel) -> Tuning:
    """AMIGO PI settings: a fit to the largest integral gain with Ms and Mt at most 1.4.

    self-regulating   K = 0.15/k + (0.35 - L T/(L + T)^2) T/(k L),
                      Ti = 0.35 L + 13 L T^2/(T^2 + 12 L T + 7 L^2)
    integrating       K = 0.35/(k' L),   Ti = 13.4 L

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Dead time 0.

    Notes
    -----
    Published with setpoint weight 0 where L < T, and 1 beyond; the loop's own is kept here.

    Source
    ------
    K.J. Astrom and T. Hagglund, J. Process Control 14, 2004, 635-650, from memory.

    Examples
    --------
    >>> astrom_hagglund_amigo_pi(SmallModel(1.0, False, 1.0, 0.0, 1.0, True)).gain
    0.25
    """
    with_dead_time(model, AMIGO)
    k, t, delay = abs(model.gain), model.time_constant, model.dead_time
    if model.integrating:
        return Tuning(0.35 / (k * delay), 13.4 * delay)
    gain = 0.15 / k + (0.35 - delay * t / (delay + t) ** 2) * t / (k * delay)
    integral = 0.35 * delay + 13 * delay * t**2 / (t**2 + 12 * delay * t + 7 * delay**2)
    return Tuning(gain, integral)


def astrom_hagglund_amigo_pid(model: SmallModel) -> Tuning:
    """AMIGO PID settings: a fit to the largest integral gain with Ms and Mt at most 1.4.

    self-regulating   K = (0.2 + 0.45 T/L)/k,   Ti = L (0.4 L + 0.8 T)/(L + 0.1 T),
                      Td = 0.5 L T/(0.3 L + T)
    integrating       K = 0.45/(k' L),   Ti = 8 L,   Td = 0.5 L

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].

    Returns
    -------
    Tuning
        Ideal PID.

    Raises
    ------
    NotApplicable
        Dead time 0.

    Notes
    -----
    Published with setpoint weight 0 where L < T, and 1 beyond; the loop's own is kept here.

    Source
    ------
    K.J. Astrom and T. Hagglund, J. Process Control 14, 2004, 635-650, from memory.

    Examples
    --------
    >>> astrom_hagglund_amigo_pid(SmallModel(1.0, False, 1.0, 0.0, 1.0, True)).gain
    0.65
    """
    with_dead_time(model, AMIGO)
    k, t, delay = abs(model.gain), model.time_constant, model.dead_time
    if model.integrating:
        return Tuning(0.45 / (k * delay), 8.0 * delay, 0.5 * delay)
    return Tuning(
        (0.2 + 0.45 * t / delay) / k,
        delay * (0.4 * delay + 0.8 * t) / (delay + 0.1 * t),
        0.5 * delay * t / (0.3 * delay + t),
    )


def hagglund_astrom_pi(model: SmallModel) -> Tuning:
    """PI settings fitted to the largest integral gain with Ms and Mt at most 1.4.

    self-regulating   K = 0.14/k + 0.28 T/(k L),   Ti = 0.33 L + 6.8 L T/(10 L + T)
    integrating       K = 0.28/(k' L),   Ti = 7.13 L  (the limit of the above for large T)

    Parameters
    ----------
    model
        One lag, or integrating, with dead time [s].

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Dead time 0.

    Source
    ------
    T. Hagglund and K.J. Astrom, Asian J. Control 4, 2002, 364-380, from memory.

    Examples
    --------
    >>> round(hagglund_astrom_pi(SmallModel(1.0, False, 1.0, 0.0, 1.0, True)).gain, 6)
    0.42
    """
    with_dead_time(model, HAGGLUND_ASTROM)
    k, t, delay = abs(model.gain), model.time_constant, model.dead_time
    if model.integrating:
        return Tuning(0.28 / (k * delay), (0.33 + 6.8) * delay)
    return Tuning(
        0.14 / k + 0.28 * t / (k * delay), 0.33 * delay + 6.8 * delay * t / (10.0 * delay + t)
    )


def ho_hang_cao_pi(model: SmallModel, gain_margin: float, phase_margin_deg: float) -> Tuning:
    """PI settings for a stated gain margin A and phase margin P.

    w = (A P + A (A - 1) pi/2)/((A^2 - 1) L)   with P in radians
    K = w T/(A k),   Ti = 1/(2 w - 4 w^2 L/pi + 1/T)

    With P = 90 (1 - 1/A) degrees both margins come out exactly: K = pi T/(2 A k L), Ti = T.

    Parameters
    ----------
    model
        One lag, with dead time [s].
    gain_margin
        A, above 1.
    phase_margin_deg
        P, above 0 and below 90.

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Integrating, dead time 0, or margins that no PI settings give together.

    Source
    ------
    W.K. Ho, C.C. Hang and L.S. Cao, Automatica 31, 1995, 497-502, from memory.

    Examples
    --------
    >>> round(ho_hang_cao_pi(SmallModel(1.0, False, 4.0, 0.0, 1.0, True), 3.0, 60.0).gain, 6)
    2.094395
    """
    self_regulating(model, HO_HANG_CAO)
    with_dead_time(model, HO_HANG_CAO)
    t, delay = model.time_constant, model.dead_time
    if not (gain_margin > 1.0 and 0.0 < phase_margin_deg < 90.0):
        raise NotApplicable(
            f"gain margin {text(gain_margin)} with phase margin {text(phase_margin_deg, 'deg')}",
            limit="wants a gain margin above 1 and a phase margin between 0 and 90 deg",
            source=HO_HANG_CAO,
        )
    both = gain_margin * math.radians(phase_margin_deg)
    both += 0.5 * math.pi * gain_margin * (gain_margin - 1.0)
    w = both / ((gain_margin**2 - 1.0) * delay)
    rate = 2.0 * w - 4.0 * w**2 * delay / math.pi + 1.0 / t
    if rate <= 0.0:
        raise NotApplicable(
            f"phase margin {text(phase_margin_deg, 'deg')}",
            limit=f"no PI settings give it with a gain margin of {text(gain_margin)} here",
            source=HO_HANG_CAO,
        )
    return Tuning(w * t / (gain_margin * abs(model.gain)), 1.0 / rate)
