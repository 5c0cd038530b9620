"""Rules that set by how a swing dies out: quarter damping, stated overshoot, ultimate gain.

Symbols in the formulas: k gain, k' slope of an integrating plant, T time constant, L dead time,
a = k L/T or k' L, r = L/T, Ku and Pu ultimate gain and period.
"""

from __future__ import annotations

import math
from typing import Final, Literal

from workbench.errors import NotApplicable
from workbench.model.reduction import SmallModel
from workbench.tune.tuning import Kind, Tuning, Ultimate, dead_time_share, with_dead_time

ZIEGLER_NICHOLS: Final = (
    'J.G. Ziegler and N.B. Nichols, "Optimum settings for automatic controllers", '
    "Trans. ASME 64, 1942, 759-768"
)
COHEN_COON: Final = (
    'G.H. Cohen and G.A. Coon, "Theoretical consideration of retarded control", '
    "Trans. ASME 75, 1953, 827-834"
)
CHIEN_HRONES_RESWICK: Final = (
    'K.L. Chien, J.A. Hrones and J.B. Reswick, "On the automatic control of generalized passive '
    'systems", Trans. ASME 74, 1952, 175-185 (from memory)'
)
TYREUS_LUYBEN: Final = (
    'B.D. Tyreus and W.L. Luyben, "Tuning PI controllers for integrator/dead time processes", '
    "Ind. Eng. Chem. Res. 31, 1992, 2625-2628 (from memory)"
)
ASTROM_HAGGLUND: Final = (
    'K.J. Astrom and T. Hagglund, "Automatic tuning of simple regulators with specifications on '
    'phase and amplitude margins", Automatica 20, 1984, 645-651 (from memory)'
)


def ziegler_nichols_reaction(model: SmallModel, kind: Kind) -> Tuning:
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
    with_dead_time(model, ZIEGLER_NICHOLS)
    delay = model.dead_time
    a = abs(model.gain) * delay / (1.0 if model.integrating else model.time_constant)
    if kind == "p":
        return Tuning(1.0 / a)
    if kind == "pi":
        return Tuning(0.9 / a, delay / 0.3)
    return Tuning(1.2 / a, 2.0 * delay, delay / 2.0)


def ziegler_nichols_ultimate(ultimate: Ultimate, kind: Kind) -> Tuning:
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


def cohen_coon(model: SmallModel, kind: Kind) -> Tuning:
    """Settings for a quarter decay ratio of the dominant swing after a load step.

    P    K = (1/a)(1 + r/3)
    PI   K = (1/a)(0.9 + r/12),   Ti = L (30 + 3 r)/(9 + 20 r)
    PID  K = (1/a)(4/3 + r/4),    Ti = L (32 + 6 r)/(13 + 8 r),   Td = 4 L/(11 + 2 r)

    Parameters
    ----------
    model
        One lag with dead time [s].
    kind
        Which row.

    Returns
    -------
    Tuning
        Ideal form.

    Raises
    ------
    NotApplicable
        Integrating, without dead time, or L above T.

    Notes
    -----
    Limits from memory.  One reprint gives 1.1 in place of 0.9 for PI: with that the dominant swing
    decays to a half, not a quarter.

    Source
    ------
    G.H. Cohen and G.A. Coon, Trans. ASME 75, 1953, 827-834; the 0.9 from memory.

    Examples
    --------
    >>> cohen_coon(SmallModel(1.0, False, 1.0, 0.0, 1.0, True), "pid").derivative_time
    0.3076923076923077
    """
    r = dead_time_share(model, 0.0, 1.0, COHEN_COON)
    a, delay = abs(model.gain) * r, model.dead_time
    if kind == "p":
        return Tuning((1.0 + r / 3.0) / a)
    if kind == "pi":
        return Tuning((0.9 + r / 12.0) / a, delay * (30 + 3 * r) / (9 + 20 * r))
    integral = delay * (32 + 6 * r) / (13 + 8 * r)
    return Tuning((4 / 3 + r / 4.0) / a, integral, 4 * delay / (11 + 2 * r))


_CHR: Final = {
    ("setpoint", 0): {"p": (0.3,), "pi": (0.35, 1.2), "pid": (0.6, 1.0, 0.5)},
    ("setpoint", 20): {"p": (0.7,), "pi": (0.6, 1.0), "pid": (0.95, 1.4, 0.47)},
    ("load", 0): {"p": (0.3,), "pi": (0.6, 4.0), "pid": (0.95, 2.4, 0.42)},
    ("load", 20): {"p": (0.7,), "pi": (0.7, 2.3), "pid": (1.2, 2.0, 0.42)},
}
"""a K, Ti over T (setpoint) or L (load), Td over L."""


def chien_hrones_reswick(
    model: SmallModel, step: Literal["setpoint", "load"], overshoot: Literal[0, 20], kind: Kind
) -> Tuning:
    """Settings for the quickest answer without overshoot, or with 20 %.

    setpoint 0 %    P 0.3/a   PI 0.35/a, 1.2 T   PID 0.6/a, T, 0.5 L
    setpoint 20 %   P 0.7/a   PI 0.6/a, T        PID 0.95/a, 1.4 T, 0.47 L
    load 0 %        P 0.3/a   PI 0.6/a, 4 L      PID 0.95/a, 2.4 L, 0.42 L
    load 20 %       P 0.7/a   PI 0.7/a, 2.3 L    PID 1.2/a, 2 L, 0.42 L

    Parameters
    ----------
    model
        One lag with dead time [s].
    step
        What the loop is to answer to.
    overshoot
        [%]
    kind
        Which column.

    Returns
    -------
    Tuning
        Ideal form.

    Raises
    ------
    NotApplicable
        Integrating, or L/T outside 0.1 to 1.

    Notes
    -----
    The overshoots are what the authors aimed at; they are not confirmed here.

    Source
    ------
    K.L. Chien, J.A. Hrones and J.B. Reswick, Trans. ASME 74, 1952, 175-185; formulas and limits
    from memory.

    Examples
    --------
    >>> chien_hrones_reswick(SmallModel(1.0, False, 5.0, 0.0, 1.0, True), "load", 0, "pi")
    Tuning(gain=3.0, integral_time=4.0, derivative_time=0.0, form='ideal')
    """
    r = dead_time_share(model, 0.1, 1.0, CHIEN_HRONES_RESWICK)
    gain, *times = _CHR[step, overshoot][kind]
    unit = model.time_constant if step == "setpoint" else model.dead_time
    return Tuning(
        gain / (abs(model.gain) * r),
        times[0] * unit if times else None,
        times[1] * model.dead_time if times[1:] else 0.0,
    )


def tyreus_luyben(ultimate: Ultimate, kind: Literal["pi", "pid"]) -> Tuning:
    """Settings for a closed loop whose resonance stays near 2 dB on an integrator with dead time.

    PI   K = Ku/3.2,   Ti = 2.2 Pu
    PID  K = Ku/2.2,   Ti = 2.2 Pu,   Td = Pu/6.3

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
    For an integrator with dead time the paper rounds this to K = 0.487/(k' L), Ti = 8.75 L.

    Source
    ------
    B.D. Tyreus and W.L. Luyben, Ind. Eng. Chem. Res. 31, 1992, 2625-2628, from memory.

    Examples
    --------
    >>> tyreus_luyben(Ultimate(3.2, 10.0), "pi")
    Tuning(gain=1.0, integral_time=22.0, derivative_time=0.0, form='ideal')
    """
    if kind == "pi":
        return Tuning(ultimate.gain / 3.2, 2.2 * ultimate.period)
    return Tuning(ultimate.gain / 2.2, 2.2 * ultimate.period, ultimate.period / 6.3)


def astrom_hagglund_relay(
    relay: float, swing: float, period: float, hysteresis: float = 0.0
) -> Ultimate:
    """Ultimate gain and period from the steady swing that a relay in place of the controller makes.

    The describing function of the relay: -1/N = -(pi/(4 d)) (sqrt(a^2 - e^2) + j e), so that

    Ku = 4 d/(pi sqrt(a^2 - e^2)),   Pu = the period of the swing

    Parameters
    ----------
    relay
        d, half of the step between the two outputs of the relay [% of OP span].
    swing
        a, half of the peak-to-peak swing of PV [% of PV span].
    period
        [s]
    hysteresis
        e, half of the relay's hysteresis [% of PV span].

    Returns
    -------
    Ultimate
        An estimate: on a lag with dead time Ku comes out between 0.81 and 1.27 of the true one.

    Raises
    ------
    NotApplicable
        An amplitude or period that is not above 0, or a swing inside the hysteresis.

    Notes
    -----
    With hysteresis the point found has less lag than 180 degrees; its real part is used.

    Source
    ------
    K.J. Astrom and T. Hagglund, Automatica 20, 1984, 645-651, from memory.

    Examples
    --------
    >>> round(astrom_hagglund_relay(1.0, 0.63212055, 2.9797603).gain, 5)
    2.01424
    """
    if not (relay > 0.0 and swing > 0.0 and period > 0.0):
        raise NotApplicable(
            "a relay test without a swing",
            limit="wants amplitudes and period above 0",
            source=ASTROM_HAGGLUND,
        )
    if not 0.0 <= hysteresis < swing:
        raise NotApplicable(
            "the swing is within the hysteresis of the relay",
            limit="wants a larger swing",
            source=ASTROM_HAGGLUND,
        )
    height = math.sqrt(swing * swing - hysteresis * hysteresis)
    return Ultimate(4.0 * relay / (math.pi * height), period)
