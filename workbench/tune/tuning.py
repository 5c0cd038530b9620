"""What every tuning rule takes and gives, and how it refuses a plant outside its limits.

The rules stand in the modules of their families; `rules` holds the one table of them all.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from workbench.errors import NotApplicable
from workbench.model.reduction import SmallModel
from workbench.units import text

Form = Literal["ideal", "series"]
Kind = Literal["p", "pi", "pid"]


@dataclass(frozen=True)
class Tuning:
    """Settings as a rule gives them."""

    gain: float
    """[%/%]"""
    integral_time: float | None = None
    """[s]; none for proportional-only."""
    derivative_time: float = 0.0
    """[s]"""
    form: Form = "ideal"
    """The form that the rule was published for."""


@dataclass(frozen=True)
class Ultimate:
    """Where proportional control just keeps swinging."""

    gain: float
    """Ku [%/%], positive."""
    period: float
    """Pu [s]"""


_EDGE = 1.0 + 1e-9
"""A ratio on the very edge of a rule's limits is inside, whatever its last digit."""


def self_regulating(model: SmallModel, source: str) -> None:
    """Refuse an integrating plant."""
    if model.integrating:
        raise NotApplicable(
            "the plant is integrating", limit="published for a self-regulating one", source=source
        )


def integrating(model: SmallModel, source: str) -> None:
    """Refuse a self-regulating plant."""
    if not model.integrating:
        raise NotApplicable(
            "the plant is self-regulating", limit="published for an integrating one", source=source
        )


def with_dead_time(model: SmallModel, source: str) -> None:
    """Refuse a plant without dead time, for which a formula has no value."""
    if model.dead_time <= 0.0:
        raise NotApplicable("dead time 0 s", limit="wants a dead time", source=source)


def dead_time_share(model: SmallModel, low: float, high: float, source: str) -> float:
    """L/T of a self-regulating plant; refused outside `low` to `high`."""
    self_regulating(model, source)
    with_dead_time(model, source)
    share = model.dead_time / model.time_constant
    if not low / _EDGE <= share <= high * _EDGE:
        wanted = f"{text(low)} to {text(high)}" if low else f"at most {text(high)}"
        raise NotApplicable(
            f"L/T is {text(share, digits=3)}", limit=f"wants {wanted}", source=source
        )
    return share


def closed_loop_speed(
    asked: float | None, usual: float, least: float, least_in_words: str, source: str
) -> float:
    """The closed-loop time constant [s]: as asked for, not below `least`, else the usual one."""
    wanted = usual if asked is None else asked
    if wanted <= 0.0:
        raise NotApplicable(
            "no dead time to take the speed from", limit="give a closed-loop time", source=source
        )
    if wanted * _EDGE < least:
        raise NotApplicable(
            f"closed-loop time {text(wanted, 's', digits=3)}",
            limit=f"wants at least {least_in_words}, here {text(least, 's', digits=3)}",
            source=source,
        )
    return wanted
