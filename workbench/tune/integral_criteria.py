"""Rules fitted to the least integral of the error: IAE, ISE and ITAE tables.

Symbols in the formulas: k gain, T time constant, L dead time, r = L/T.
"""

from __future__ import annotations

from typing import Final, Literal

from workbench.model.reduction import SmallModel
from workbench.tune.tuning import Tuning, dead_time_share

LOPEZ: Final = (
    'A.M. Lopez et al., "Controller tuning relationships based on integral performance '
    'criteria", Instrum. Technol. 14(11), 1967, 57-62 (from memory)'
)
ROVIRA: Final = (
    'A.A. Rovira, P.W. Murrill and C.L. Smith, "Tuning controllers for setpoint changes", '
    "Instrum. Control Syst. 42, 1969, 67-69 (from memory)"
)

_LOAD: Final[dict[tuple[str, str], tuple[float, ...]]] = {
    ("iae", "pi"): (0.984, -0.986, 0.608, -0.707),
    ("ise", "pi"): (1.305, -0.959, 0.492, -0.739),
    ("itae", "pi"): (0.859, -0.977, 0.674, -0.680),
    ("iae", "pid"): (1.435, -0.921, 0.878, -0.749, 0.482, 1.137),
    ("ise", "pid"): (1.495, -0.945, 1.101, -0.771, 0.560, 1.006),
    ("itae", "pid"): (1.357, -0.947, 0.842, -0.738, 0.381, 0.995),
}
"""a, b, c, d and, with derivative, e, f."""
_SETPOINT: Final[dict[tuple[str, str], tuple[float, ...]]] = {
    ("iae", "pi"): (0.758, -0.861, 1.02, -0.323),
    ("itae", "pi"): (0.586, -0.916, 1.03, -0.165),
    ("iae", "pid"): (1.086, -0.869, 0.740, -0.130, 0.348, 0.914),
    ("itae", "pid"): (0.965, -0.85, 0.796, -0.1465, 0.308, 0.929),
}


def lopez_load(
    model: SmallModel, criterion: Literal["iae", "ise", "itae"], kind: Literal["pi", "pid"]
) -> Tuning:
    """Settings of least IAE, ISE or ITAE after a load step at the plant's input.

    K = a r^b/k,   Ti = T/(c r^d),   Td = T e r^f

    PI    IAE   0.984 -0.986  0.608 -0.707
          ISE   1.305 -0.959  0.492 -0.739
          ITAE  0.859 -0.977  0.674 -0.680
    PID   IAE   1.435 -0.921  0.878 -0.749  0.482 1.137
          ISE   1.495 -0.945  1.101 -0.771  0.560 1.006
          ITAE  1.357 -0.947  0.842 -0.738  0.381 0.995

    Parameters
    ----------
    model
        One lag with dead time [s].
    criterion
        Which integral.
    kind
        PI or PID.

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
    A fit: its cost is 1 to 10 % above the least (ITAE PI at L = T 23 %).  No margin is held.

    Source
    ------
    A.M. Lopez et al., Instrum. Technol. 14(11), 1967, 57-62;
    coefficients and limits from memory.

    Examples
    --------
    >>> lopez_load(SmallModel(1.0, False, 1.0, 0.0, 1.0, True), "itae", "pid").gain
    1.357
    """
    r = dead_time_share(model, 0.1, 1.0, LOPEZ)
    a, b, c, d, *rest = _LOAD[criterion, kind]
    t = model.time_constant
    return Tuning(a * r**b / abs(model.gain), t / (c * r**d), _derivative(rest, t, r))


def rovira_setpoint(
    model: SmallModel, criterion: Literal["iae", "itae"], kind: Literal["pi", "pid"]
) -> Tuning:
    """Settings of least IAE or ITAE after a setpoint step.

    K = a r^b/k,   Ti = T/(c + d r),   Td = T e r^f

    PI    IAE   0.758 -0.861  1.02 -0.323
          ITAE  0.586 -0.916  1.03 -0.165
    PID   IAE   1.086 -0.869  0.740 -0.130   0.348 0.914
          ITAE  0.965 -0.85   0.796 -0.1465  0.308 0.929

    Parameters
    ----------
    model
        One lag with dead time [s].
    criterion
        Which integral.
    kind
        PI or PID.

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
    A fit: its cost is up to 3 % above the least for PI; PID is not confirmed.  No margin is held.

    Source
    ------
    A.A. Rovira, P.W. Murrill and C.L. Smith, Instrum. Control Syst. 42, 1969, 67-69; coefficients
    and limits from memory.

    Examples
    --------
    >>> rovira_setpoint(SmallModel(1.0, False, 1.0, 0.0, 1.0, True), "itae", "pi").gain
    0.586
    """
    r = dead_time_share(model, 0.1, 1.0, ROVIRA)
    a, b, c, d, *rest = _SETPOINT[criterion, kind]
    t = model.time_constant
    return Tuning(a * r**b / abs(model.gain), t / (c + d * r), _derivative(rest, t, r))


def _derivative(coefficients: list[float], lag: float, r: float) -> float:
    return lag * coefficients[0] * r ** coefficients[1] if coefficients else 0.0
