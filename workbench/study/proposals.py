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
    InputError,
    ModelError,
    NotApplicable,
    problem,
)
from workbench.model.feedback import Loop
from workbench.model.pid import Controller, settings_like
from workbench.model.reduction import double_integrator, half_rule, unstable_lag
from workbench.model.robustness import analogue_margins, ultimate
from workbench.model.structures import Structure
from workbench.study.best import SEARCH_SOURCE, SEARCHES, searched, searched_form
from workbench.study.family import FamilyFigures, family_figures
from workbench.study.loop import action_of, loop_of, plant_in_percent
from workbench.study.operating import about_rest
from workbench.study.prediction import predicted_measures
from workbench.study.structure import margins_as_sampled
from workbench.study.wish import Wish
from workbench.tune import rules
from workbench.tune.optimise import noise_gain
from workbench.tune.oscillation import astrom_hagglund_relay
from workbench.tune.tuning import Ultimate
from workbench.units import Amount, Figure, nearest, plain, rounded, text


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
    max_complementary_sensitivity: Figure = Figure(None, "it is not judged")
    noise_gain: Figure = Figure(None, "it is not judged")
    """How much OP swings at most for a swing of the measurement by 1 % [%/%]."""
    load_travel: Figure = Figure(None, "it is not judged")
    """All moves of OP from the load step on [OP unit]."""
    within_limit: bool = False
    """Stable, and within every limit asked for."""
    objective: str = ""
    """What a rule aims at."""
    limits: str = ""
    """The plants that a rule was published for."""
    published_form: str = ""
    family: FamilyFigures | None = None
    """Margins over the family of plants, where the case states one."""


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
        True ends a search with the best so far, and leaves what is then missing out.
    """
    wish = wish or Wish()
    known = (*SEARCHES, *rules.RULES)
    if wish.method is not None and wish.method not in (*known, "present"):
        meant = nearest(wish.method, (*known, "present"))
        hint = f"did you mean {meant!r}?" if meant else f"use one of {', '.join(known)}"
        raise problem(f"the method {wish.method!r} is not known", hint, key="--method")
    present = _present(case)
    methods = known if wish.method is None else tuple(m for m in known if m == wish.method)
    plant = _rule_plant(case, wish)
    rows = [
        _search(case, method, wish, should_stop)
        if method in SEARCHES
        else _proposal(case, method, wish, plant)
        for method in methods
    ]
    present, *rows = predicted(case, [present, *rows], wish, should_stop)
    rows.sort(key=lambda row: _rank(row, wish))
    return (present, *rows)


def _rank(row: Proposal, wish: Wish) -> tuple[bool, bool, float]:
    return (not row.applies, not row.within_limit, wished_iae(row, wish))


def wished_iae(row: Proposal, wish: Wish) -> float:
    """What is made least [PV unit s]; infinite where it is not known."""
    parts = ((1.0 - wish.share, row.load_iae), (wish.share, row.setpoint_iae))
    return sum(
        share * (math.inf if figure.value is None else figure.value)
        for share, figure in parts
        if share
    )


def _blank(method: str, title: str, source: str, reason: str) -> Proposal:
    none = Figure(None, reason)
    return Proposal(method, title, source, None, False, reason, none, none, none, none)


def _present(case: Case) -> Proposal:
    title, source = "present settings", "the case"
    if case.controller is None:
        return _blank("present", title, source, "the case has no controller yet")
    return judged(case, case.controller, "present", title, source)


def _search(
    case: Case, method: str, wish: Wish, should_stop: Callable[[], bool] | None
) -> Proposal:
    title = SEARCHES[method].title
    try:
        settings, finished = searched(case, method, wish, should_stop)
    except (CannotSolve, ModelError, NotApplicable) as refusal:
        row = _blank(method, title, SEARCH_SOURCE, str(refusal))
    else:
        row = judged(case, settings, method, title, SEARCH_SOURCE)
        if not finished:
            row = replace(row, reason="the search was stopped before its end")
    return replace(
        row,
        objective=f"least {_aimed_at(wish)} with {_limits_in_words(case, wish)}",
        limits="any plant without a dead time inside an inner feedback",
        published_form=searched_form(case),
    )


def _aimed_at(wish: Wish) -> str:
    if wish.share == 0.0:
        return "IAE after a load step"
    if wish.share == 1.0:
        return "IAE after a setpoint step"
    mixed = f"{plain(wish.setpoint_share)} % setpoint IAE and {plain(100 - wish.setpoint_share)} %"
    return f"sum of {mixed} load IAE"


def _limits_in_words(case: Case, wish: Wish) -> str:
    limits = [
        f"{limit.name} at most {plain(getattr(wish, limit.wish))} {limit.unit(case)}".rstrip()
        for limit in LIMITS
        if getattr(wish, limit.wish) is not None
    ]
    return ", ".join(limits)


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
    try:
        return settings_like(
            case.controller or Controller(gain=1.0),
            tuning.gain,
            tuning.integral_time,
            tuning.derivative_time,
            tuning.form,
        )
    except InputError as fault:
        # A controller of increments, say, cannot do without integral action.
        told = fault.problems[0]
        raise NotApplicable(f"the controller {told.what}", limit=told.mend) from None


def _proposal(case: Case, method: str, wish: Wish, plant: rules.Plant) -> Proposal:
    rule = rules.RULES[method]
    try:
        settings = _by_rule(case, rule, plant)
    except NotApplicable as refusal:
        row = _blank(method, rule.title, rule.source, str(refusal))
    else:
        row = judged(case, settings, method, rule.title, rule.source)
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
        None if wish.closed_loop_time is None else wish.closed_loop_time.seconds,
        None if upset is None else op.percent(upset),
        None if deviation is None else pv.percent(deviation),
        lambda: unstable_lag(upright),
        lambda: double_integrator(upright),
    )


def judged(case: Case, settings: Controller, method: str, title: str, source: str) -> Proposal:
    """A row with its margins; what a prediction tells is added by `predicted`."""
    trial = replace(case, controller=settings)
    loop = about_rest(loop_of(trial))
    sampled = margins_as_sampled(loop)[0] if loop.scan is not None else None
    if sampled is None:
        loop = replace(loop, scan=None)
    margins = sampled or analogue_margins(loop)
    if not margins.stable:
        none = Figure(None, f"the loop is not stable: {margins.reason}")
        row = Proposal(method, title, source, settings, True, "", none, none, none, none)
        reason = f"not stable on this loop: {margins.reason}"
        return replace(
            row,
            reason=reason,
            max_complementary_sensitivity=none,
            noise_gain=none,
            load_travel=none,
        )
    return Proposal(
        method,
        title,
        source,
        settings,
        True,
        "",
        margins.max_sensitivity,
        margins.phase_margin_deg,
        _LATER,
        _LATER,
        margins.max_complementary_sensitivity,
        _noise_gain(loop),
        _LATER,
        family=family_figures(trial),
    )


def _noise_gain(loop: Loop) -> Figure:
    met = loop.around(loop.met()) if isinstance(loop, Structure) else loop
    try:
        found = noise_gain(met)
    except ModelError as refusal:
        return Figure(None, str(refusal))
    if math.isinf(found):
        return Figure(None, "the derivative has no filter, so that it grows without end")
    return Figure.of(found)


_LATER: Final = Figure(None, "not predicted yet")
"""Stands in a stable row until all rows are predicted together."""


def predicted(
    case: Case, rows: list[Proposal], wish: Wish, should_stop: Callable[[], bool] | None = None
) -> list[Proposal]:
    """The rows with what the scenario does to those that are stable, held to the limits."""
    # What noise adds to an integral grows with the scenario's length, whatever the settings are;
    # what noise does to the output is told by the noise gain.
    quiet = replace(case, pv=replace(case.pv, noise=0.0))
    filled = []
    for row in rows:
        if row.controller is None or row.load_iae is not _LATER:
            filled.append(row)
            continue
        found, missing = None, "stopped"
        if should_stop is None or not should_stop():
            found, missing = predicted_measures(replace(quiet, controller=row.controller))
        if found is None:
            none = Figure(None, f"not predicted: {missing}")
            told = replace(row, setpoint_iae=none, load_iae=none, load_travel=none)
        else:
            measures, travel = found
            told = replace(
                row,
                setpoint_iae=measures.setpoint_iae,
                load_iae=measures.load_iae,
                load_travel=travel,
            )
        over = _over_limits(case, told, wish)
        reason = "; ".join([*filter(None, [told.reason]), *over])
        filled.append(replace(told, within_limit=not over, reason=reason))
    return filled


@dataclass(frozen=True)
class Limit:
    """One limit that a wish can set."""

    name: str
    wish: str
    """Field of `Wish`."""
    figure: str
    """Field of `Proposal`."""
    of: Literal["", "gain", "op"] = ""

    def unit(self, case: Case) -> str:
        """Unit of the figure."""
        return {"": "", "gain": "%/%", "op": case.op.unit}[self.of]


LIMITS: Final = (
    Limit("Ms", "max_sensitivity", "max_sensitivity"),
    Limit("Mt", "max_complementary_sensitivity", "max_complementary_sensitivity"),
    Limit("noise gain", "max_noise_gain", "noise_gain", "gain"),
    Limit("travel after the load step", "max_load_travel", "load_travel", "op"),
)
"""Limits on the loop, as every row is held to them."""

_ROUNDING: Final = 1.001
"""Of a limit that counts as kept: searches keep theirs to a thousandth."""


def _over_limits(case: Case, row: Proposal, wish: Wish) -> list[str]:
    """The limits that a row does not keep, in words."""
    over = []
    for limit in LIMITS:
        most, figure = getattr(wish, limit.wish), getattr(row, limit.figure)
        if most is None:
            continue
        if figure.value is None:
            over.append(f"{limit.name} is not known ({figure.reason})")
        elif figure.value > most * _ROUNDING:
            found = text(figure.value, limit.unit(case), digits=3)
            over.append(f"{limit.name} {found} is above the limit of {plain(most)}")
    return [*over, *_over_in_family(row, wish)]


def _over_in_family(row: Proposal, wish: Wish) -> list[str]:
    """Plants of the case's family that a row does not keep stable, or within the limit on Ms."""
    family = row.family
    if family is None or family.reason:
        return []
    if family.stable_percent < 100.0:
        share = text(100.0 - family.stable_percent, "%", digits=3)
        return [f"not stable for {share} of the family"]
    worst = family.figures["max_sensitivity"].worst.value
    if worst is None or worst <= wish.max_sensitivity * _ROUNDING:
        return []
    limit = plain(wish.max_sensitivity)
    return [f"the worst Ms of the family, {text(worst, digits=3)}, is above the limit of {limit}"]


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
