"""Rules for levels: as smooth as the vessel allows, or as tight as the dead time allows.

Symbols in the formulas: k' slope of the level [%/% per s], L dead time, dq the largest upset
[% of OP span that balances it], dh the allowed deviation of the level [% of PV span].
"""

from __future__ import annotations

import math
from typing import Final, Literal

from workbench.errors import NotApplicable
from workbench.model.reduction import SmallModel
from workbench.tune.tuning import Tuning, integrating, with_dead_time
from workbench.units import text

SKOGESTAD_SMOOTH: Final = (
    'S. Skogestad, "Tuning for smooth PID control with acceptable disturbance rejection", '
    "Ind. Eng. Chem. Res. 45, 2006, 7817-7822"
)
SKOGESTAD_SMOOTH_PI: Final = f"{SKOGESTAD_SMOOTH} (the factor 2/e of PI derived)"
_MOST_DELAY: Final = 0.1
"""Dead time over 1/(K k'): up to here it adds less than a tenth to the deviation.

The sources leave the dead time out and state no limit; this one is our own.
"""


def skogestad_averaging_level(
    model: SmallModel,
    largest_upset: float | None,
    allowed_deviation: float | None,
    kind: Literal["p", "pi"],
) -> Tuning:
    """The smoothest settings that keep a level within its allowed deviation.

    P    K = dq/dh
    PI   K = (2/e) dq/dh,   Ti = 4/(K k')

    With PI the deviation peaks at dh a time 2/(K k') after the step, critically damped.

    Parameters
    ----------
    model
        Integrating; dead time [s].
    largest_upset
        dq, the largest lasting step at the plant's input [% of OP span], either sign.
    allowed_deviation
        dh, by how much the level may leave its setpoint [% of PV span].
    kind
        P or PI.

    Returns
    -------
    Tuning
        Ideal form.

    Raises
    ------
    NotApplicable
        Self-regulating, upset or deviation not given, or a dead time above a tenth of 1/(K k').

    Notes
    -----
    The formulas leave the dead time out.  The source states no limit for it; a tenth of 1/(K k') is
    our own: before the controller answers, PV then moves by about a tenth of dh at most.

    Source
    ------
    S. Skogestad, Ind. Eng. Chem. Res. 45, 2006, 7817-7822 (least gain for a stated deviation); the
    factor 2/e is the closed form for a damping of 1, derived here.

    Examples
    --------
    >>> skogestad_averaging_level(SmallModel(0.01, True, 0.0, 0.0, 0.0, True), 20.0, 10.0, "p")
    Tuning(gain=2.0, integral_time=None, derivative_time=0.0, form='ideal')
    """
    integrating(model, SKOGESTAD_SMOOTH)
    least = _least_gain(largest_upset, allowed_deviation)
    if least is None:
        raise NotApplicable(
            "the largest upset and the allowed deviation are not given",
            limit="`workbench propose` takes them",
            source=SKOGESTAD_SMOOTH,
        )
    gain = least if kind == "p" else 2.0 / math.e * least
    share = gain * abs(model.gain) * model.dead_time
    if share > _MOST_DELAY:
        raise NotApplicable(
            f"the dead time is {text(share, digits=3)} of 1/(K k')",
            limit=f"wants at most {text(_MOST_DELAY)}, a limit of this program",
        )
    return Tuning(gain, None if kind == "p" else 4.0 / (gain * abs(model.gain)))


def skogestad_tight_level(
    model: SmallModel, largest_upset: float | None, allowed_deviation: float | None
) -> Tuning:
    """The tightest settings that the dead time allows with good margins.

    K = 1/(2 k' L),   Ti = 8 L   (SIMC with tau_c = L)

    Parameters
    ----------
    model
        Integrating, with dead time [s].
    largest_upset
        dq, the largest lasting step at the plant's input [% of OP span], or `None`.
    allowed_deviation
        dh, by how much the level may leave its setpoint [% of PV span], or `None`.

    Returns
    -------
    Tuning
        Ideal PI.

    Raises
    ------
    NotApplicable
        Self-regulating, dead time 0, or an upset that even this gain cannot hold: K below dq/dh.

    Source
    ------
    S. Skogestad, Ind. Eng. Chem. Res. 45, 2006, 7817-7822: K between dq/dh and the SIMC gain.

    Examples
    --------
    >>> skogestad_tight_level(SmallModel(0.01, True, 0.0, 0.0, 5.0, True), 20.0, 10.0)
    Tuning(gain=10.0, integral_time=40.0, derivative_time=0.0, form='ideal')
    """
    integrating(model, SKOGESTAD_SMOOTH)
    with_dead_time(model, SKOGESTAD_SMOOTH)
    gain = 1.0 / (2.0 * abs(model.gain) * model.dead_time)
    least = _least_gain(largest_upset, allowed_deviation)
    if least is not None and gain < least:
        raise NotApplicable(
            f"the dead time allows a gain of {text(gain, digits=3)}",
            limit=f"holding the upset wants {text(least, digits=3)}",
            source=SKOGESTAD_SMOOTH,
        )
    return Tuning(gain, 8.0 * model.dead_time)


def _least_gain(largest_upset: float | None, allowed_deviation: float | None) -> float | None:
    """dq/dh, or `None` where one of them is not given or is 0."""
    if not largest_upset or not allowed_deviation:
        return None
    return abs(largest_upset / allowed_deviation)
