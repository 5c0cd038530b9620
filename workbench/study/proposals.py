"""Settings to choose from: the present ones and every rule's, judged on this loop."""

from __future__ import annotations

import contextlib
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache
from typing import Final, Literal

from workbench.case.case import Case
from workbench.errors import (
    CannotSolve,
    ModelError,
    NotApplicable,
    problem,
)
from workbench.model.pid import Controller, settings_like
from workbench.model.reduction import double_integrator, half_rule, unstable_lag
from workbench.model.robustness import analogue_margins, sampled_margins, ultimate
from workbench.study.best import SEARCH_SOURCE, SEARCHES, searched
from workbench.study.loop import action_of, loop_of, no_time_domain, plant_in_percent
from workbench.study.prediction import predicted_measures
from workbench.study.structure import has_one_scan
from workbench.tune import rules
from workbench.tune.oscillation import astrom_hagglund_relay
from workbench.tune.tuning import Ultimate
from workbench.units import Amount, Figure, nearest, plain, rounded, text


@dataclass(frozen=True)
class RelayTest:
    """The steady swing that a relay in place of the controller made; halves of peak to peak."""

    output: float
    """[OP unit]"""
    swing: float
    """[PV unit]"""
    period: float
    """[s]"""
    hysteresis: float = 0.0
    """[PV unit]"""


@dataclass(frozen=True)
class Wish:
    """What a proposal should aim at."""

    goal: Literal["load", "setpoint"] = "load"
    closed_loop_time: float | None = None
    """[s]"""
    max_sensitivity: float = 1.7
    method: str | None = None
    largest_upset: float | None = None
    """Largest lasting upset, as the change of OP that balances it [OP unit]."""
    allowed_deviation: float | None = None
    """By how much PV may leave its setpoint [PV unit]."""
    relay: RelayTest | None = None
    """Gives the ultimate gain and period in place of the plant's."""


@dataclass(frozen=True)
class Proposal:
    """One row: settings in the loop's own form and units, judged on this loop."""

    method: str
    title: str
    source: str
    controller: Controller | None
    applies: bool
    reason: str
    """Why the method does not apply, or what to mind."""
    max_sensitivity: Figure
    phase_margin_deg: Figure
    setpoint_iae: Figure
    load_iae: Figure
    within_limit: bool = False
    """Stable, and the maximum sensitivity is within the limit asked for."""
    objective: str = ""
    """What a rule aims at."""
    limits: str = ""
    """The plants that a rule was published for."""
    published_form: str = ""


def propose(
    case: Case, wish: Wish | None = None, should_stop: Callable[[], bool] | None = None
) -> tuple[Proposal, ...]:
    """The present settings, the best by search and every rule's, usable and quickest first.

    Each is judged on this loop.

    Parameters
    ----------
    case
        With a plant; the controller's form and units are kept, ideal and seconds without one.
    wish
        What to aim at; a method that is not known raises `InputError`.
    should_stop
        True ends a search with the best so far.
    """
    wish = wish or Wish()
    known = (*SEARCHES, *rules.RULES)
    if wish.method is not None and wish.method not in (*known, "present"):
        meant = nearest(wish.method, (*known, "present"))
        hint = f"did you mean {meant!r}?" if meant else f"use one of {', '.join(known)}"
        raise problem(f"the method {wish.method!r} is not known", hint, key="--method")
    present = _present(case, wish)
    methods = known if wish.method is None else tuple(m for m in known if m == wish.method)
    plant = _rule_plant(case, wish)
    rows = [
        _search(case, method, wish, should_stop)
        if method in SEARCHES
        else _proposal(case, method, wish, plant)
        for method in methods
    ]
    present, *rows = _with_errors(case, [present, *rows])
    rows.sort(key=lambda row: _rank(row, wish))
    return (present, *rows)


def _rank(row: Proposal, wish: Wish) -> tuple[bool, bool, float]:
    iae = (row.load_iae if wish.goal == "load" else row.setpoint_iae).value
    return (not row.applies, not row.within_limit, math.inf if iae is None else iae)


def _blank(method: str, title: str, source: str, reason: str) -> Proposal:
    none = Figure(None, reason)
    return Proposal(method, title, source, None, False, reason, none, none, none, none)


def _present(case: Case, wish: Wish) -> Proposal:
    title, source = "present settings", "the case"
    if case.controller is None:
        return _blank("present", title, source, "the case has no controller yet")
    return _judged(case, case.controller, "present", title, source, wish)


def _search(
    case: Case, method: str, wish: Wish, should_stop: Callable[[], bool] | None
) -> Proposal:
    title = SEARCHES[method].title
    try:
        settings = searched(
            case,
            method,
            max_sensitivity=wish.max_sensitivity,
            setpoint=wish.goal == "setpoint",
            should_stop=should_stop,
        )
    except (CannotSolve, ModelError, NotApplicable) as refusal:
        row = _blank(method, title, SEARCH_SOURCE, str(refusal))
    else:
        row = _judged(case, settings, method, title, SEARCH_SOURCE, wish)
    step = "setpoint" if wish.goal == "setpoint" else "load"
    return replace(
        row,
        objective=f"least IAE after a {step} step with Ms at most {plain(wish.max_sensitivity)}",
        limits="any plant without a dead time inside an inner feedback",
        published_form="series"
        if case.controller and case.controller.form == "series"
        else "ideal",
    )


def rule_settings(case: Case, wish: Wish) -> list[Controller]:
    """The settings of every rule that applies, in the loop's own form; not judged."""
    plant, found = _rule_plant(case, wish), []
    for rule in rules.RULES.values():
        with contextlib.suppress(NotApplicable):
            found.append(_by_rule(case, rule, plant))
    return found


def _by_rule(case: Case, rule: rules.Rule, plant: rules.Plant) -> Controller:
    """Raises `NotApplicable`."""
    tuning = rule.settings(plant)
    return settings_like(
        case.controller or Controller(gain=1.0),
        tuning.gain,
        tuning.integral_time,
        tuning.derivative_time,
        tuning.form,
    )


def _proposal(case: Case, method: str, wish: Wish, plant: rules.Plant) -> Proposal:
    rule = rules.RULES[method]
    try:
        settings = _by_rule(case, rule, plant)
    except NotApplicable as refusal:
        row = _blank(method, rule.title, rule.source, str(refusal))
    else:
        row = _judged(case, settings, method, rule.title, rule.source, wish)
    return replace(row, objective=rule.objective, limits=rule.limits, published_form=rule.form)


def _rule_plant(case: Case, wish: Wish) -> rules.Plant:
    """The plant as rules see it: percent of span, and positive for the action it asks for."""
    plant = plant_in_percent(case)
    upright = plant if action_of(case)[0] == "reverse" else -plant
    pv, op = case.pv.range, case.op.range

    @cache
    def swing() -> Ultimate:
        test = wish.relay
        if test is None:
            return Ultimate(*ultimate(upright))
        return astrom_hagglund_relay(
            op.percent(test.output),
            pv.percent(test.swing),
            test.period,
            pv.percent(test.hysteresis),
        )

    upset, deviation = wish.largest_upset, wish.allowed_deviation
    return rules.Plant(
        cache(lambda lags: half_rule(upright, lags)),
        swing,
        wish.closed_loop_time,
        None if upset is None else op.percent(upset),
        None if deviation is None else pv.percent(deviation),
        lambda: unstable_lag(upright),
        lambda: double_integrator(upright),
    )


def _judged(
    case: Case, settings: Controller, method: str, title: str, source: str, wish: Wish
) -> Proposal:
    """A row with its margins; how far PV errs is added for all rows at once."""
    trial = replace(case, controller=settings)
    loop = loop_of(trial)
    analogue = not has_one_scan(loop) or no_time_domain(loop.plant)
    margins = analogue_margins(replace(loop, scan=None)) if analogue else sampled_margins(loop)
    if not margins.stable:
        none = Figure(None, f"the loop is not stable: {margins.reason}")
        reason = f"not stable on this loop: {margins.reason}"
        return Proposal(method, title, source, settings, True, reason, none, none, none, none)
    peak = margins.max_sensitivity
    within = peak.value is not None and peak.value <= wish.max_sensitivity
    reason = ""
    if not within and peak.value is not None:
        limit = plain(wish.max_sensitivity)
        reason = f"Ms {text(peak.value, digits=3)} is above the limit of {limit}"
    return Proposal(
        method,
        title,
        source,
        settings,
        True,
        reason,
        peak,
        margins.phase_margin_deg,
        _LATER,
        _LATER,
        within,
    )


_LATER: Final = Figure(None, "not predicted yet")
"""Stands in a stable row until all rows are predicted together."""


def _with_errors(case: Case, rows: list[Proposal]) -> list[Proposal]:
    """The rows with the integral errors that the scenario predicts for those that are stable."""
    missing = no_time_domain(plant_in_percent(case))
    stable = [
        number
        for number, row in enumerate(rows)
        if row.controller is not None and row.load_iae is _LATER
    ]
    if missing:
        none = Figure(None, f"not predicted: {missing}")
        measured = [(none, none)] * len(stable)
    else:
        trials = [replace(case, controller=rows[number].controller) for number in stable]
        found = [predicted_measures(trial) for trial in trials]
        measured = [(measures.setpoint_iae, measures.load_iae) for measures in found]
    filled = list(rows)
    for number, (setpoint_iae, load_iae) in zip(stable, measured, strict=True):
        filled[number] = replace(rows[number], setpoint_iae=setpoint_iae, load_iae=load_iae)
    return filled


def take(case: Case, proposal: Proposal) -> Case:
    """The case with a proposal's settings, rounded to what a person types into a controller.

    Raises `InputError` where the proposal has no settings.
    """
    if proposal.controller is None:
        raise problem(f"{proposal.title} does not apply", proposal.reason, key=proposal.method)
    return replace(case, controller=_as_typed(proposal.controller))


def _as_typed(controller: Controller) -> Controller:
    changed: dict[str, object] = {}
    for name in ("gain", "proportional_band"):
        value = getattr(controller, name)
        if value is not None:
            changed[name] = rounded(value)
    for name in ("integral", "derivative"):
        amount = getattr(controller, name)
        if amount is not None:
            changed[name] = Amount(rounded(amount.value), amount.unit)
    return replace(controller, **changed)  # type: ignore[arg-type]
