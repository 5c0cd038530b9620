"""Best settings for a case: the search of `tune.optimise` in the loop's own form and units."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

from workbench.case.case import Case
from workbench.model.pid import Controller, Gains, settings_like
from workbench.model.sweep import Limits
from workbench.study.loop import loop_of
from workbench.tune.bench import Aim
from workbench.tune.optimise import best


@dataclass(frozen=True)
class Search:
    """What a best row is called, and whether it has a derivative."""

    title: str
    derivative: bool


SEARCH_SOURCE: Final = "search by this program: least IAE within the limits"


def searched(
    case: Case,
    method: str,
    *,
    max_sensitivity: float,
    setpoint: bool = False,
    should_stop: Callable[[], bool] | None = None,
) -> Controller:
    """Settings with the least IAE whose Ms is within a limit, on the loop as it will run.

    Parameters
    ----------
    case
        With a plant; the controller's form, filter and scan are kept, ideal and analogue without.
    method
        A key of `SEARCHES`.
    max_sensitivity
        Limit on Ms, above 1.
    setpoint
        Least IAE after a setpoint step; otherwise after a load step.
    should_stop
        True ends the search with the best so far.

    Raises
    ------
    CannotSolve
        No settings keep the limit, or nothing limits the gain.
    NotApplicable
        A lasting upset that no controller with an integral can take out.
    ModelError
        A dead time inside an inner feedback.
    """
    like = case.controller or Controller(gain=1.0)
    form = "series" if like.form == "series" else "ideal"

    def law(gain: float, integral_time: float | None, derivative_time: float) -> Gains:
        return settings_like(like, gain, integral_time, derivative_time, form).gains()

    loop = loop_of(replace(case, controller=like))
    aim = Aim(Limits(max_sensitivity), setpoint_share=1.0 if setpoint else 0.0)
    found = best([loop], law, aim, derivative=SEARCHES[method].derivative, should_stop=should_stop)
    return settings_like(like, found.gain, found.integral_time, found.derivative_time, form)


SEARCHES: Final[dict[str, Search]] = {
    "best-pi": Search("best PI", False),
    "best-pid": Search("best PID", True),
}
"""Method -> search."""
