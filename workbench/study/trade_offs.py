"""How much speed each bit of caution costs: the best settings at limits on Ms from low to high."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

from workbench.case.case import Case
from workbench.errors import ModelError, NotApplicable
from workbench.study.best import SEARCH_SOURCE, SEARCHES, best_by_limit
from workbench.study.proposals import Proposal, judged, predicted
from workbench.study.wish import Wish


@dataclass(frozen=True)
class TradeOffPoint:
    """The best settings within one limit on Ms."""

    limit: float
    best: Proposal


@dataclass(frozen=True)
class TradeOff:
    """Curves of the best settings; what else is proposed lies above them."""

    curves: dict[str, tuple[TradeOffPoint, ...]]
    """Method of a search -> its points, the smallest limit first."""
    reasons: dict[str, str]
    """Method of a search -> why it has no curve."""

    @property
    def known(self) -> tuple[str, ...]:
        """Every search, with a curve or without."""
        return tuple(dict.fromkeys([*self.curves, *self.reasons]))


MS_LIMITS: Final = (1.15, 1.2, 1.3, 1.4, 1.5, 1.6, 1.7, 1.8, 2.0, 2.2, 2.4)
"""From sluggish to nervous."""


def trade_off(
    case: Case, wish: Wish | None = None, should_stop: Callable[[], bool] | None = None
) -> TradeOff:
    """The best PI and PID at each of `MS_LIMITS`, judged on this loop as every proposal is.

    Parameters
    ----------
    case
        With a plant.
    wish
        All of it counts but the limit on Ms.
    should_stop
        True ends the search; the curves end where it was.
    """
    wish = wish or Wish()
    curves: dict[str, tuple[TradeOffPoint, ...]] = {}
    reasons: dict[str, str] = {}
    for method, search in SEARCHES.items():
        try:
            found = best_by_limit(case, method, wish, MS_LIMITS, should_stop)
        except (ModelError, NotApplicable) as refusal:
            reasons[method] = str(refusal)
            continue
        points = []
        for limit, settings in found:
            row = judged(case, settings, method, search.title, SEARCH_SOURCE)
            within = replace(wish, max_sensitivity=limit)
            points.append(TradeOffPoint(limit, *predicted(case, [row], within, should_stop)))
        curves[method] = tuple(points)
        if not found:
            reasons[method] = "no settings keep these limits, or nothing limits the gain"
    return TradeOff(curves, reasons)
