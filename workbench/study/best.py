"""Best settings for a case: the search of `tune.optimise` in the loop's own form and units."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Final

from workbench.case.case import Case
from workbench.errors import NotApplicable
from workbench.model.feedback import Loop
from workbench.model.pid import Controller, Gains, settings_like
from workbench.model.structures import Structure
from workbench.model.sweep import Limits
from workbench.study.family import members
from workbench.study.loop import loop_of
from workbench.study.operating import about_rest
from workbench.study.prediction import steps_of
from workbench.study.structure import has_one_scan, margins_as_sampled
from workbench.study.wish import Wish
from workbench.tune import optimise
from workbench.tune.bench import Aim

Stop = Callable[[], bool]


@dataclass(frozen=True)
class Search:
    """What a best row is called, and whether it has a derivative."""

    title: str
    derivative: bool


SEARCH_SOURCE: Final = "search by this program: least IAE within the limits"


def searched(
    case: Case, method: str, wish: Wish, should_stop: Stop | None = None
) -> tuple[Controller, bool]:
    """Settings with the least IAE within the limits of a wish, on the loop as it will run.

    Parameters
    ----------
    case
        With a plant; the controller's form, filter and scan are kept, ideal and analogue without.
    method
        A key of `SEARCHES`.
    wish
        Limits, and the share of the setpoint IAE; steps are those of the scenario.
    should_stop
        True ends the search with the best so far.

    Returns
    -------
    tuple
        The settings, and whether the search came to its end.

    Raises
    ------
    CannotSolve
        No settings keep the limits, or nothing limits the gain.
    NotApplicable
        A lasting upset that no controller with an integral can take out, or dead-time compensation.
    ModelError
        A dead time inside an inner feedback.
    """
    task = _Task.of(case, wish)

    def search(task: _Task) -> optimise.Best:
        return optimise.best(
            task.loops,
            task.law,
            task.aim,
            derivative=SEARCHES[method].derivative,
            should_stop=should_stop,
        )

    found = search(task)
    for _ in range(_MOST_ROUNDS):
        # A cascade with two scans is searched with analogue controllers and judged as sampled: the
        # limit for the search is moved until the limit asked for is just kept.
        judged = _as_judged(case, task.settings(found))
        if judged is None or abs(judged - wish.max_sensitivity) <= _KEPT:
            break
        limit = task.aim.limits.max_sensitivity
        limit = 1.0 + (limit - 1.0) * (wish.max_sensitivity - 1.0) / (judged - 1.0)
        task = task.within(limit)
        found = search(task)
    return task.settings(found), found.finished


_MOST_ROUNDS: Final = 6
_KEPT: Final = 3e-4


def _as_judged(case: Case, settings: Controller) -> float | None:
    """Ms of a cascade as sampled; `None` for what is searched as it is judged."""
    loop = about_rest(loop_of(replace(case, controller=settings)))
    if loop.scan is None or not isinstance(loop, Structure) or loop.inner is None:
        return None
    margins = margins_as_sampled(loop)[0]
    return None if margins is None else margins.max_sensitivity.value


def best_by_limit(
    case: Case,
    method: str,
    wish: Wish,
    limits: Sequence[float],
    should_stop: Stop | None = None,
) -> tuple[tuple[float, Controller], ...]:
    """As `searched`, at each of several limits on Ms that can be kept, the smallest first.

    The limit on Ms of the wish does not count.  Raises as `searched` does, but not `CannotSolve`.
    """
    task = _Task.of(case, wish)
    curve = optimise.trade_off(
        task.loops,
        task.law,
        task.aim,
        limits,
        derivative=SEARCHES[method].derivative,
        should_stop=should_stop,
    )
    return tuple((limit, task.settings(found)) for limit, found in curve)


@dataclass(frozen=True)
class _Task:
    """What a search is given, and how its answer becomes settings."""

    loops: tuple[Loop, ...]
    """One for each plant that the settings are for, nominal first."""
    like: Controller
    form: str
    aim: Aim

    @classmethod
    def of(cls, case: Case, wish: Wish) -> _Task:
        like = case.controller or Controller(gain=1.0)
        loops = _loops(replace(case, controller=like))
        setpoint_step, load_step = steps_of(case)
        # A step that the scenario leaves out counts with 5 % where the wish wants it.
        setpoint_step, load_step = setpoint_step or 5.0, load_step or 5.0
        limits = Limits(
            wish.max_sensitivity,
            wish.max_complementary_sensitivity or Limits.max_complementary_sensitivity,
            wish.max_noise_gain or Limits.noise_gain,
        )
        travel = Aim.load_travel
        if wish.max_load_travel is not None:
            travel = case.op.range.percent(wish.max_load_travel)
        aim = Aim(limits, travel, wish.share, load_step, setpoint_step)
        return cls(loops, like, searched_form(case), aim)

    def within(self, max_sensitivity: float) -> _Task:
        """The same with another limit on Ms."""
        limits = replace(self.aim.limits, max_sensitivity=max_sensitivity)
        return replace(self, aim=replace(self.aim, limits=limits))

    def law(self, gain: float, integral_time: float | None, derivative_time: float) -> Gains:
        """Canonical gains for the settings of the form."""
        return settings_like(self.like, gain, integral_time, derivative_time, self.form).gains()

    def settings(self, found: optimise.Best) -> Controller:
        """In the controller's own form and units."""
        return settings_like(
            self.like, found.gain, found.integral_time, found.derivative_time, self.form
        )


def searched_form(case: Case) -> str:
    """The form in which the search looks: the series form has no complex zeros."""
    return "series" if case.controller and case.controller.form == "series" else "ideal"


def _loops(case: Case) -> tuple[Loop, ...]:
    """A loop for each plant that the settings are for, the nominal one first."""
    return tuple(_alone(loop_of(case, member.plant)) for member in members(case))


def _alone(loop: Loop) -> Loop:
    """The controller round all that it acts on, as a single loop."""
    if not isinstance(loop, Structure):
        return loop
    if loop.model is not None:
        raise NotApplicable(
            "the loop has dead-time compensation",
            limit="the search wants a loop in which the gain is a factor",
        )
    alone = loop.around(loop.acted_on)
    alone = replace(alone, load=loop.upset)
    # Two scans have no single z: such a loop is judged with analogue controllers.
    return alone if has_one_scan(loop) else replace(alone, scan=None, computing_delay=0.0)


SEARCHES: Final[dict[str, Search]] = {
    "best-pi": Search("best PI", False),
    "best-pid": Search("best PID", True),
}
"""Method -> search."""
