"""Feedforward from a measured upset: what would cancel it, and what of that can be realised.

An upset v moves PV by Gd v and OP moves it by G u, so that u = -Gd/G v would cancel it for ever.  A
controller has a gain, a lead, a lag and a dead time for it:

    FF(s) = K (lead s + 1)/(lag s + 1) exp(-L s)

K makes the final values cancel and L = Ld - Lg the dead times; the lead is the sum of the plant's
lags and the lag that of the load path's.  For one lag each that is the ideal itself; for more the
first moments still cancel, and with them the area under PV.

Source
------
Common practice; F.G. Shinskey, "Process Control Systems", McGraw-Hill, 1967, chapter on feedforward
control, from memory.  First moments: expansion of both paths in powers of s.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

from workbench.errors import ModelError, NotApplicable, Problem
from workbench.model.transfer import TransferFunction
from workbench.units import text

_LAG_SHARE: Final = 0.1
"""Lag, as a share of the lead, where the load path has none (common practice)."""
_SAME: Final = 1e-9
"""Numbers that differ by less than this share are the same."""
_CHECKED: Final = (0.03, 0.3, 1.0, 3.0, 30.0)
"""Frequencies, in units of 1/time scale, at which an ideal is compared with what is realised."""


@dataclass(frozen=True)
class Feedforward:
    """A lead and a lag with a gain and a dead time, from the upset to OP."""

    gain: float
    """[% of OP span per unit of the upset]"""
    lead: float = 0.0
    """[s]"""
    lag: float = 0.0
    """[s]"""
    dead_time: float = 0.0
    """[s]"""

    def __post_init__(self) -> None:
        """Raises `ModelError` for a lead without a lag."""
        if self.lead and not self.lag:
            what = "is a derivative without a lag, which no controller can realise"
            raise ModelError(Problem(what, "give a lag, a tenth of the lead for one", "lead"))

    def transfer(self) -> TransferFunction:
        """FF(s)."""
        lag = [(self.lag, 1.0)] if self.lag else []
        lead = (self.gain * self.lead, self.gain) if self.lead else (self.gain,)
        return TransferFunction.ratio(lead, lag, self.dead_time)


@dataclass(frozen=True)
class Realisable:
    """The feedforward nearest to the ideal, and what of the ideal it leaves out."""

    feedforward: Feedforward
    exact: bool
    """It cancels the upset, for ever and at every instant, where the models are right."""
    lost: tuple[str, ...]
    """What cannot be realised, in words."""


def ideal_feedforward(plant: TransferFunction, load: TransferFunction) -> Realisable:
    """What cancels an upset, as far as a lead, a lag and a dead time can.

    Parameters
    ----------
    plant
        From OP to PV.
    load
        From the upset to PV, in the same unit.

    Returns
    -------
    Realisable
        In the units of the two functions: OP per unit of the upset.

    Raises
    ------
    NotApplicable
        No steady move of OP cancels the upset, or a dead time lies inside a feedback.
    """
    if plant.has_delayed_feedback or load.has_delayed_feedback:
        raise NotApplicable(
            "no feedforward is worked out", limit="a dead time inside a feedback has no single lag"
        )
    gain = -_ratio(plant, load)
    lost = _lost(plant, load)
    lead, lag = _lags(plant), _lags(load)
    if lead > 0.0 and lag <= 0.0:
        lag = _LAG_SHARE * lead
    lead, lag = max(0.0, lead), max(0.0, lag)
    if abs(lead - lag) <= _SAME * lead:
        lead = lag = 0.0
    found = Feedforward(gain, lead, lag, max(0.0, load.dead_time - plant.dead_time))
    exact = not lost and _cancels(plant, load, found)
    if not lost and not exact:
        lost = ("more lags than one lead and one lag can follow: only the areas cancel",)
    return Realisable(found, exact, lost)


def _ratio(plant: TransferFunction, load: TransferFunction) -> float:
    """Limit of load/plant at s = 0."""
    missing = load.integrators - plant.integrators
    if missing > 0:
        raise NotApplicable(
            "no steady output cancels the upset",
            limit="the load path integrates and the plant does not",
        )
    if missing < 0:
        raise NotApplicable(
            "the upset needs no steady move of the output",
            limit="the plant integrates and the load path does not",
        )
    return _steady(load) / _steady(plant)


def _steady(function: TransferFunction) -> float:
    value = function.gain().value or function.slope().value
    if value is None:
        raise NotApplicable("PV moves faster and faster", limit="wants one integration at most")
    return value


def _lags(function: TransferFunction) -> float:
    """Sum of the lags less that of the leads [s]; an inverse response cannot be undone."""
    poles = sum((-1.0 / p).real for p in function.poles() if p)
    return poles - sum((-1.0 / z).real for z in function.zeros() if z.real < 0.0)


def _lost(plant: TransferFunction, load: TransferFunction) -> tuple[str, ...]:
    lost = []
    early = plant.dead_time - load.dead_time
    if early > _SAME * plant.dead_time:
        lost.append(
            f"the upset shows in PV {text(early, 's')} before OP can: it would have to be known"
            " that long in advance"
        )
    if any(zero.real > 0.0 for zero in plant.zeros()):
        lost.append("the plant's inverse response cannot be turned round: its inverse is unstable")
    order = plant.relative_degree - load.relative_degree
    if order > 0:
        times = "once" if order == 1 else f"{order} times"
        lost.append(f"the upset would have to be differentiated {times}: a lag has to do with it")
    if len(plant.delays) > 1 or len(load.delays) > 1:
        lost.append("paths of several dead times: only one can be followed")
    return tuple(lost)


def _cancels(plant: TransferFunction, load: TransferFunction, found: Feedforward) -> bool:
    """Whether G FF + Gd is 0 at every frequency looked at."""
    scale = max(found.lead, found.lag, found.dead_time, plant.dead_time) or 1.0
    ff = found.transfer()
    for share in _CHECKED:
        s = complex(0.0, share / scale)
        if abs(plant(s) * ff(s) + load(s)) > _SAME * abs(load(s)):
            return False
    return True
