"""Settings to choose from: the present ones and every rule's, judged on this loop."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cache
from typing import Literal

from workbench.case.case import Case
from workbench.errors import (
    NotApplicable,
    problem,
)
from workbench.model.pid import Controller, settings_like
from workbench.model.reduction import half_rule
from workbench.model.robustness import analogue_margins, sampled_margins, ultimate
from workbench.study.loop import action_of, loop_of, plant_of
from workbench.study.prediction import predict
from workbench.study.structure import has_one_scan
from workbench.tune import rules
from workbench.units import Amount, Figure, nearest, plain, rounded, text


@dataclass(frozen=True)
class Wish:
    """What a proposal should aim at."""

    goal: Literal["load", "setpoint"] = "load"
    closed_loop_time: float | None = None
    """[s]"""
    max_sensitivity: float = 1.7
    method: str | None = None


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


def propose(case: Case, wish: Wish | None = None) -> tuple[Proposal, ...]:
    """The present settings and every rule's, judged on this loop; usable and quickest first.

    Parameters
    ----------
    case
        With a plant; the controller's form and units are kept, ideal and seconds without one.
    wish
        What to aim at; a method that is not known raises `InputError`.
    """
    wish = wish or Wish()
    known = tuple(rules.RULES)
    if wish.method is not None and wish.method not in (*known, "present"):
        meant = nearest(wish.method, (*known, "present"))
        hint = f"did you mean {meant!r}?" if meant else f"use one of {', '.join(known)}"
        raise problem(f"the method {wish.method!r} is not known", hint, key="--method")
    present = _present(case, wish)
    methods = known if wish.method is None else tuple(m for m in known if m == wish.method)
    rows = [_proposal(case, method, wish) for method in methods]
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


def _proposal(case: Case, method: str, wish: Wish) -> Proposal:
    rule = rules.RULES[method]
    like = case.controller or Controller(gain=1.0)
    try:
        tuning = rule.settings(_rule_plant(case, wish))
        settings = settings_like(
            like, tuning.gain, tuning.integral_time, tuning.derivative_time, tuning.form
        )
    except NotApplicable as refusal:
        return _blank(method, rule.title, rule.source, str(refusal))
    return _judged(case, settings, method, rule.title, rule.source, wish)


def _rule_plant(case: Case, wish: Wish) -> rules.Plant:
    """The plant as rules see it: percent of span, and positive for the action it asks for."""
    plant = plant_of(case) * (case.op.range.span / case.pv.range.span)
    upright = plant if action_of(case)[0] == "reverse" else -plant

    @cache
    def found() -> rules.Ultimate:
        return rules.Ultimate(*ultimate(upright))

    return rules.Plant(lambda lags: half_rule(upright, lags), found, wish.closed_loop_time)


def _judged(
    case: Case, settings: Controller, method: str, title: str, source: str, wish: Wish
) -> Proposal:
    trial = replace(case, controller=settings)
    loop = loop_of(trial)
    margins = sampled_margins(loop) if has_one_scan(loop) else analogue_margins(loop)
    if not margins.stable:
        none = Figure(None, f"the loop is not stable: {margins.reason}")
        reason = f"not stable on this loop: {margins.reason}"
        return Proposal(method, title, source, settings, True, reason, none, none, none, none)
    measures = predict(trial).measures
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
        measures.setpoint_iae,
        measures.load_iae,
        within,
    )


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
