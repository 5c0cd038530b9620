"""Published rules: a worked example for each, the laws of scale, and where they do not apply."""

from __future__ import annotations

import inspect
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Literal

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.model.published import Plant as PublishedPlant
from tests.tune.published import CLOSED_FORM, PUBLISHED, RULE, RULE_CASES, RuleCase
from tests.tune.published import MEMORY as FROM_MEMORY
from workbench.errors import NotApplicable
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.reduction import (
    DoubleIntegrator,
    SmallModel,
    UnstableLag,
    double_integrator,
    half_rule,
    unstable_lag,
)
from workbench.model.robustness import analogue_margins, ultimate
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events
from workbench.tune.closed_loop_time import (
    chien_fruehauf_integrating_lag_pid,
    chien_fruehauf_integrating_pid,
    dahlin_lambda_pi,
    grimholt_skogestad_simc_improved_pi,
    grimholt_skogestad_simc_improved_pid,
    lee_imc_unstable_pid,
    rivera_imc_improved_pi,
    rivera_imc_pi,
    rivera_imc_pid,
    skogestad_simc_double_integrating,
    skogestad_simc_pi,
    skogestad_simc_pid,
)
from workbench.tune.integral_criteria import lopez_load, rovira_setpoint
from workbench.tune.level import skogestad_averaging_level, skogestad_tight_level
from workbench.tune.oscillation import (
    astrom_hagglund_relay,
    chien_hrones_reswick,
    cohen_coon,
    tyreus_luyben,
    ziegler_nichols_reaction,
    ziegler_nichols_ultimate,
)
from workbench.tune.robust import (
    astrom_hagglund_amigo_pi,
    astrom_hagglund_amigo_pid,
    hagglund_astrom_pi,
    ho_hang_cao_pi,
)
from workbench.tune.rules import RULES, Plant
from workbench.tune.tuning import Tuning, Ultimate

LAG = SmallModel(2.0, False, 10.0, 0.0, 1.0, True)
"""2 exp(-s)/(10 s + 1)"""
BALANCED = SmallModel(1.0, False, 1.0, 0.0, 1.0, True)
HALF = SmallModel(1.0, False, 2.0, 0.0, 1.0, True)
"""exp(-s)/(2 s + 1), where a power of L/T is not 1"""
INTEGRATING = SmallModel(0.5, True, 0.0, 0.0, 2.0, True)
"""0.5 exp(-2 s)/s"""
TWO_LAGS = SmallModel(2.0, False, 20.0, 2.0, 1.0, True)
"""2 exp(-s)/((20 s + 1)(2 s + 1))"""
INTEGRATING_LAG = SmallModel(0.5, True, 0.0, 3.0, 2.0, True)

SWING = Ultimate(8.0, 12.0)
UPSET, DEVIATION = 4.0, 40.0


UNSTABLE = UnstableLag(2.0, 10.0, 1.0)
"""2 exp(-s)/(10 s - 1)"""
TWICE = DoubleIntegrator(0.5, 2.0)
"""0.5 exp(-2 s)/s^2"""


def a_plant(
    model: SmallModel,
    *,
    closed_loop_time: float | None = None,
    gain: float = 1.0,
    time: float = 1.0,
) -> Plant:
    """A plant that reduces to `model` with one lag or two, and to whatever else a rule asks for.

    Its gain is `gain` times, all its times are `time` times as large.
    """
    per_time = time if model.integrating else 1.0
    scaled = SmallModel(
        # A slope is per unit of time.
        gain * model.gain / per_time,
        model.integrating,
        time * model.time_constant,
        time * model.second_time_constant,
        time * model.dead_time,
        True,
    )
    return Plant(
        lambda lags: scaled,
        lambda: Ultimate(abs(SWING.gain / gain), time * SWING.period),
        closed_loop_time and time * closed_loop_time,
        # The same change of PV: a plant of twice the gain needs half the change of OP for it.
        largest_upset=UPSET / gain,
        allowed_deviation=DEVIATION,
        unstable_lag=lambda: UnstableLag(
            gain * UNSTABLE.gain, time * UNSTABLE.time_constant, time * UNSTABLE.dead_time
        ),
        double_integrator=lambda: DoubleIntegrator(
            gain * TWICE.gain / time**2, time * TWICE.dead_time
        ),
    )


@dataclass(frozen=True)
class Worked:
    """One plant through one rule."""

    method: str
    plant: Plant
    settings: Tuning
    source: str


READ = "published, read in a stored page: "
MEMORY = "published rule from memory, worked by hand: "

WORKED_EXAMPLES = (
    Worked(
        "lambda-pi",
        a_plant(LAG, closed_loop_time=4.0),
        Tuning(1.0, 10.0),
        MEMORY + "T/(k (lambda + L)), T",
    ),
    Worked(
        "lambda-pi", a_plant(LAG), Tuning(10 / 22, 10.0), "common practice: lambda = max(T, 3 L)"
    ),
    Worked(
        "lambda-pi", a_plant(BALANCED), Tuning(0.25, 1.0), "common practice: lambda = max(T, 3 L)"
    ),
    Worked(
        "lambda-pi",
        a_plant(INTEGRATING, closed_loop_time=6.0),
        Tuning(14 / 32, 14.0),
        MEMORY + "(2 lambda + L)/(k' (lambda + L)^2), 2 lambda + L",
    ),
    Worked(
        "simc-pi", a_plant(LAG), Tuning(2.5, 8.0), READ + "T/(k (tau_c + L)), min(T, 4 (tau_c + L))"
    ),
    Worked("simc-pi", a_plant(BALANCED), Tuning(0.5, 1.0), READ + "the same"),
    Worked(
        "simc-pi",
        a_plant(INTEGRATING),
        Tuning(0.5, 16.0),
        READ + "1/(k' (tau_c + L)), 4 (tau_c + L)",
    ),
    Worked("simc-pi", a_plant(LAG, closed_loop_time=4.0), Tuning(1.0, 10.0), READ + "tau_c = 4"),
    Worked(
        "simc-pid", a_plant(TWO_LAGS), Tuning(5.0, 8.0, 2.0, "series"), MEMORY + "as PI, Td = T2"
    ),
    Worked(
        "simc-pid",
        a_plant(INTEGRATING_LAG),
        Tuning(0.5, 16.0, 3.0, "series"),
        MEMORY + "as PI, Td = T2",
    ),
    Worked("ziegler-nichols-reaction-p", a_plant(LAG), Tuning(5.0), READ + "1/a, a = k L/T"),
    Worked("ziegler-nichols-reaction-pi", a_plant(LAG), Tuning(4.5, 10 / 3), READ + "0.9/a, L/0.3"),
    Worked(
        "ziegler-nichols-reaction-pi", a_plant(INTEGRATING), Tuning(0.9, 20 / 3), READ + "a = k' L"
    ),
    Worked(
        "ziegler-nichols-reaction-pid",
        a_plant(LAG),
        Tuning(6.0, 2.0, 0.5),
        READ + "1.2/a, 2 L, L/2",
    ),
    Worked("ziegler-nichols-ultimate-p", a_plant(LAG), Tuning(4.0), READ + "0.5 Ku"),
    Worked(
        "ziegler-nichols-ultimate-pi", a_plant(LAG), Tuning(3.6, 10.0), READ + "0.45 Ku, Pu/1.2"
    ),
    Worked(
        "ziegler-nichols-ultimate-pid",
        a_plant(LAG),
        Tuning(4.8, 6.0, 1.5),
        MEMORY + "0.6 Ku, Pu/2, Pu/8",
    ),
    Worked("cohen-coon-p", a_plant(LAG), Tuning(5.0 * (1 + 0.1 / 3)), READ + "(1/a)(1 + r/3)"),
    Worked("cohen-coon-p", a_plant(BALANCED), Tuning(4 / 3), READ + "the same"),
    Worked("chr-0-p", a_plant(LAG), Tuning(1.5), MEMORY + "0.3/a"),
    Worked("chr-20-p", a_plant(LAG), Tuning(3.5), MEMORY + "0.7/a"),
    Worked("imc-pi", a_plant(LAG), Tuning(5 / 1.7, 10.0), MEMORY + "T/(k lambda), T"),
    Worked("imc-pi", a_plant(LAG, closed_loop_time=4.0), Tuning(1.25, 10.0), MEMORY + "lambda = 4"),
    Worked(
        "imc-integrating-pid",
        a_plant(INTEGRATING, closed_loop_time=3.0),
        Tuning(1.0, 8.0, 7.0 / 8.0),
        MEMORY + "(2 lambda + L)/(k' (lambda + L/2)^2), 2 lambda + L, L (lambda + L/4)/Ti",
    ),
    Worked(
        "imc-integrating-pid",
        a_plant(INTEGRATING),
        Tuning(28 / 49, 14.0, 13.0 / 14.0),
        "common practice: lambda = 3 L",
    ),
    Worked(
        "imc-integrating-lag-pid",
        a_plant(INTEGRATING_LAG, closed_loop_time=3.0),
        Tuning(22 / 25, 11.0, 24 / 11),
        MEMORY + "(2 lambda + T + L)/(k' (lambda + L)^2), 2 lambda + T + L, T (2 lambda + L)/Ti",
    ),
    Worked(
        "hagglund-astrom-pi",
        a_plant(LAG),
        Tuning(0.07 + 1.4, 0.33 + 3.4),
        MEMORY + "0.14/k + 0.28 T/(k L), 0.33 L + 6.8 L T/(10 L + T)",
    ),
    Worked(
        "hagglund-astrom-pi",
        a_plant(INTEGRATING),
        Tuning(0.28, 14.26),
        MEMORY + "0.28/(k' L), 7.13 L",
    ),
    Worked(
        "simc-improved-pi", a_plant(INTEGRATING), Tuning(0.5, 16.0), READ + "as SIMC: T + L/3 -> T"
    ),
    Worked(
        "lopez-ise-load-pi", a_plant(BALANCED), Tuning(1.305, 1 / 0.492), MEMORY + "a, T/c at r = 1"
    ),
    Worked(
        "lopez-iae-load-pid",
        a_plant(BALANCED),
        Tuning(1.435, 1 / 0.878, 0.482),
        MEMORY + "a, T/c, T e at r = 1",
    ),
    Worked(
        "lopez-ise-load-pid",
        a_plant(BALANCED),
        Tuning(1.495, 1 / 1.101, 0.560),
        MEMORY + "a, T/c, T e at r = 1",
    ),
    Worked(
        "rovira-iae-setpoint-pid",
        a_plant(BALANCED),
        Tuning(1.086, 1 / 0.61, 0.348),
        MEMORY + "a, T/(c + d), T e at r = 1",
    ),
    Worked(
        "lopez-ise-load-pi",
        a_plant(HALF),
        Tuning(1.305 * 0.5**-0.959, 2 / (0.492 * 0.5**-0.739)),
        MEMORY + "a r^b, T/(c r^d), T e r^f",
    ),
    Worked(
        "lopez-iae-load-pid",
        a_plant(HALF),
        Tuning(1.435 * 0.5**-0.921, 2 / (0.878 * 0.5**-0.749), 2 * 0.482 * 0.5**1.137),
        MEMORY + "a r^b, T/(c r^d), T e r^f",
    ),
    Worked(
        "lopez-ise-load-pid",
        a_plant(HALF),
        Tuning(1.495 * 0.5**-0.945, 2 / (1.101 * 0.5**-0.771), 2 * 0.56 * 0.5**1.006),
        MEMORY + "a r^b, T/(c r^d), T e r^f",
    ),
    Worked(
        "lopez-itae-load-pid",
        a_plant(HALF),
        Tuning(1.357 * 0.5**-0.947, 2 / (0.842 * 0.5**-0.738), 2 * 0.381 * 0.5**0.995),
        MEMORY + "a r^b, T/(c r^d), T e r^f",
    ),
    Worked(
        "rovira-iae-setpoint-pi",
        a_plant(HALF),
        Tuning(0.758 * 0.5**-0.861, 2 / (1.02 - 0.323 * 0.5)),
        MEMORY + "a r^b, T/(c + d r), T e r^f",
    ),
    Worked(
        "rovira-iae-setpoint-pid",
        a_plant(HALF),
        Tuning(1.086 * 0.5**-0.869, 2 / (0.74 - 0.13 * 0.5), 2 * 0.348 * 0.5**0.914),
        MEMORY + "a r^b, T/(c + d r), T e r^f",
    ),
    Worked(
        "rovira-itae-setpoint-pid",
        a_plant(HALF),
        Tuning(0.965 * 0.5**-0.85, 2 / (0.796 - 0.1465 * 0.5), 2 * 0.308 * 0.5**0.929),
        MEMORY + "a r^b, T/(c + d r), T e r^f",
    ),
    Worked("averaging-level-p", a_plant(INTEGRATING), Tuning(0.1), READ + "dq/dh"),
    Worked(
        "averaging-level-pi",
        a_plant(INTEGRATING),
        Tuning(0.2 / math.e, 40 * math.e),
        "exact: (2/e) dq/dh, 4/(K k')",
    ),
    Worked("tight-level-pi", a_plant(INTEGRATING), Tuning(0.5, 16.0), READ + "1/(2 k' L), 8 L"),
    Worked(
        "imc-unstable-pid",
        replace(a_plant(LAG), unstable_lag=lambda: UnstableLag(2.0, 10.0, 0.0)),
        Tuning(10.5, 2.1),
        "exact without dead time: (lambda + 2 T)/(k lambda), lambda (lambda/T + 2), lambda = T/10",
    ),
)


def _same(found: Tuning, expected: Tuning) -> None:
    assert found.gain == pytest.approx(expected.gain, rel=1e-12)
    assert found.integral_time == (
        None if expected.integral_time is None else pytest.approx(expected.integral_time, rel=1e-12)
    )
    assert found.derivative_time == pytest.approx(expected.derivative_time, rel=1e-12)
    assert found.form == expected.form


@pytest.mark.parametrize("worked", WORKED_EXAMPLES, ids=lambda w: w.method)
def test_worked_example(worked: Worked) -> None:
    _same(RULES[worked.method].settings(worked.plant), worked.settings)


def test_every_rule_has_a_worked_example() -> None:
    shown = {case.method for case in RULE_CASES}
    missing = set(RULES) - {worked.method for worked in WORKED_EXAMPLES} - shown
    assert not missing, f"add {missing} to WORKED_EXAMPLES in tests/tune/test_rules.py"
    unknown = {worked.method for worked in WORKED_EXAMPLES} - set(RULES)
    assert not unknown, f"{unknown} in WORKED_EXAMPLES of tests/tune/test_rules.py is no rule"


@pytest.mark.parametrize("method", RULES)
def test_every_rule_says_where_it_comes_from(method: str) -> None:
    rule = RULES[method]
    assert rule.title
    assert rule.source
    assert rule.objective
    assert rule.limits
    documented = inspect.getdoc(rule.function) or ""
    for section in ("Parameters", "Returns", "Source", "Examples"):
        assert f"\n{section}\n---" in documented, f"{rule.function.__name__} has no {section}"


@pytest.mark.parametrize("method", RULES)
def test_a_method_is_written_in_lower_case_with_hyphens(method: str) -> None:
    assert method == method.lower()
    assert set(method) <= set("abcdefghijklmnopqrstuvwxyz0123456789-")


# --- published settings --------------------------------------------------------------------------


def plant_of(case: RuleCase) -> Plant:
    """The plant of a published case, as rules see it."""
    whole = case.plant.transfer()
    return Plant(
        lambda lags: case.model or half_rule(whole, lags),
        lambda: Ultimate(*ultimate(whole)),
        case.closed_loop_time,
        double_integrator=lambda: double_integrator(whole),
    )


def as_ideal(found: Tuning) -> tuple[float, float, float]:
    k, ti, td = found.gain, found.integral_time or math.inf, found.derivative_time
    if found.form == "series":
        f = 1.0 + td / ti
        return k * f, ti + td, ti * td / (ti + td)
    return k, ti, td


@pytest.mark.parametrize("case", RULE_CASES, ids=lambda case: case.name)
def test_published_settings(case: RuleCase) -> None:
    found = RULES[case.method].settings(plant_of(case))
    assert found.form == RULES[case.method].form
    # The collection gives six digits or more.
    assert as_ideal(found) == pytest.approx(case.settings, rel=2e-6), (
        case.source,
        case.settings_worth,
    )


@pytest.mark.parametrize(
    "case", [case for case in RULE_CASES if case.figures], ids=lambda case: case.name
)
def test_published_margins_of_the_settings(case: RuleCase) -> None:
    k, ti, td = as_ideal(RULES[case.method].settings(plant_of(case)))
    plant = case.plant.transfer()
    margins = analogue_margins(Loop(plant, plant, Gains(k, k / ti, k * td)))
    assert margins.stable
    for name, (expected, worth) in case.figures.items():
        figure = getattr(margins, name).value
        assert figure == pytest.approx(expected, rel=1e-3), (name, case.source, worth)


def test_the_checks_are_many() -> None:
    assert len(RULE_CASES) + len(WORKED_EXAMPLES) >= 60
    assert sum(len(case.figures) for case in RULE_CASES) >= 30


def test_every_check_says_what_it_is_worth() -> None:
    labels = (PUBLISHED, CLOSED_FORM, RULE)
    for case in RULE_CASES:
        for worth in (case.settings_worth, *(worth for _, worth in case.figures.values())):
            assert worth.removesuffix(FROM_MEMORY) in labels, case.name
        assert case.source, case.name
    for worked in WORKED_EXAMPLES:
        assert worked.source.startswith((READ, MEMORY, "exact", "common practice")), worked


COLUMN = (
    # published (W.L. Luyben, IEC Proc. Des. Dev. 25 (1986) 654-660, from memory): the diagonal
    # loops of a methanol column; printed with Ku/2.2, 1 % above 0.45 Ku, and rounded
    (2.0994147, 3.9074106, (0.96, 3.25)),
    (0.42210042, 11.132368, (0.19, 9.2)),
)


@pytest.mark.parametrize(("gain", "period", "published"), COLUMN)
def test_published_ziegler_nichols_settings_of_a_column(
    gain: float, period: float, published: tuple[float, float]
) -> None:
    found = ziegler_nichols_ultimate(Ultimate(gain, period), "pi")
    assert found.gain == pytest.approx(published[0], rel=0.02)
    assert found.integral_time == pytest.approx(published[1], rel=0.01)


# --- the laws of scale ---------------------------------------------------------------------------

MODELS = (LAG, BALANCED, INTEGRATING, TWO_LAGS, INTEGRATING_LAG)


def _applied(method: str, plant: Plant) -> Tuning | None:
    try:
        return RULES[method].settings(plant)
    except NotApplicable:
        return None


@pytest.mark.parametrize("method", RULES)
def test_the_laws_of_scale_are_tried_on_every_rule(method: str) -> None:
    assert any(_applied(method, a_plant(model, closed_loop_time=5.0)) for model in MODELS)


@pytest.mark.parametrize("method", RULES)
@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("asked", [None, 5.0])
def test_twice_the_plant_gain_halves_the_controller_gain(
    method: str, model: SmallModel, asked: float | None
) -> None:
    before = _applied(method, a_plant(model, closed_loop_time=asked))
    after = _applied(method, a_plant(model, closed_loop_time=asked, gain=2.0))
    assert (before is None) == (after is None)
    if before is not None and after is not None:
        _same(after, replace(before, gain=before.gain / 2.0))


@pytest.mark.parametrize("method", RULES)
@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("asked", [None, 5.0])
def test_twice_all_times_doubles_the_times(
    method: str, model: SmallModel, asked: float | None
) -> None:
    before = _applied(method, a_plant(model, closed_loop_time=asked))
    after = _applied(method, a_plant(model, closed_loop_time=asked, time=2.0))
    assert (before is None) == (after is None)
    if before is not None and after is not None:
        doubled = before.integral_time and 2.0 * before.integral_time
        _same(
            after,
            replace(before, integral_time=doubled, derivative_time=2.0 * before.derivative_time),
        )


@pytest.mark.parametrize("method", RULES)
@pytest.mark.parametrize("model", MODELS)
def test_the_sign_of_the_plant_does_not_show_in_the_gain(method: str, model: SmallModel) -> None:
    # The controller's action carries it.
    before = _applied(method, a_plant(model))
    after = _applied(method, a_plant(model, gain=-1.0))
    assert before == after
    assert before is None or before.gain > 0.0


@given(st.floats(0.1, 1e3), st.floats(0.1, 1e3), st.floats(0.01, 100.0))
def test_a_slower_wish_is_a_lower_gain(lag: float, delay: float, gain: float) -> None:
    model = SmallModel(gain, False, lag, lag / 3.0, delay, True)
    for rule in (dahlin_lambda_pi, skogestad_simc_pi, skogestad_simc_pid):
        gains = [rule(model, factor * delay).gain for factor in (0.5, 1.0, 2.0, 8.0)]
        assert gains == sorted(gains, reverse=True)
        assert all(math.isfinite(k) and k > 0 for k in gains)


def test_a_slow_lag_is_an_integrator_to_simc() -> None:
    # exact in the limit: k/T is the slope
    slow = skogestad_simc_pi(SmallModel(5e5, False, 1e6, 0.0, 2.0, True), None)
    assert slow.gain == pytest.approx(skogestad_simc_pi(INTEGRATING, None).gain, rel=1e-12)
    assert slow.integral_time == skogestad_simc_pi(INTEGRATING, None).integral_time


# --- where they do not apply ---------------------------------------------------------------------

NO_DEAD_TIME = replace(LAG, dead_time=0.0)
LONG_DEAD_TIME = replace(LAG, dead_time=10.1)
SHORT_DEAD_TIME = replace(LAG, dead_time=0.99)


@pytest.mark.parametrize(
    ("ask", "words"),
    [
        (lambda: skogestad_simc_pi(NO_DEAD_TIME, None), "no dead time to take the speed from"),
        (lambda: skogestad_simc_pi(NO_DEAD_TIME, 0.0), "no dead time to take the speed from"),
        (lambda: skogestad_simc_pid(LAG, None), "the plant has no second lag"),
        (lambda: skogestad_simc_pid(replace(TWO_LAGS, dead_time=0.0), None), "no dead time"),
        (
            lambda: skogestad_simc_double_integrating(DoubleIntegrator(1.0, 0.0), None),
            "no dead time to take the speed from",
        ),
        (lambda: grimholt_skogestad_simc_improved_pi(NO_DEAD_TIME, None), "no dead time"),
        (lambda: grimholt_skogestad_simc_improved_pid(NO_DEAD_TIME, 5.0), "dead time 0 s"),
        (
            lambda: dahlin_lambda_pi(replace(INTEGRATING, dead_time=0.0), None),
            "no dead time to take lambda from",
        ),
        (lambda: rivera_imc_pi(INTEGRATING, None), "the plant is integrating"),
        (lambda: rivera_imc_pi(NO_DEAD_TIME, None), "no dead time to take the speed from"),
        (lambda: rivera_imc_pi(LAG, 1.6), r"closed-loop time 1.6 s \(wants at least 1.7 L"),
        (lambda: rivera_imc_improved_pi(INTEGRATING, None), "the plant is integrating"),
        (lambda: rivera_imc_improved_pi(LAG, 1.6), "closed-loop time 1.6 s"),
        (lambda: rivera_imc_pid(INTEGRATING, None), "the plant is integrating"),
        (lambda: rivera_imc_pid(LAG, 0.7), r"closed-loop time 0.7 s \(wants at least 0.8 L"),
        (lambda: chien_fruehauf_integrating_pid(LAG, None), "the plant is self-regulating"),
        (lambda: chien_fruehauf_integrating_lag_pid(LAG, None), "the plant is self-regulating"),
        (lambda: chien_fruehauf_integrating_lag_pid(INTEGRATING, None), "no lag beside"),
        (lambda: lee_imc_unstable_pid(UnstableLag(1.0, 10.0, 6.1), None), "L/T is 0.61"),
        (lambda: ziegler_nichols_reaction(NO_DEAD_TIME, "pi"), "dead time 0 s"),
        (lambda: ziegler_nichols_reaction(NO_DEAD_TIME, "p"), "dead time 0 s"),
        (lambda: cohen_coon(INTEGRATING, "pi"), "the plant is integrating"),
        (lambda: cohen_coon(NO_DEAD_TIME, "pi"), "dead time 0 s"),
        (lambda: cohen_coon(LONG_DEAD_TIME, "p"), r"L/T is 1.01 \(wants at most 1\)"),
        (lambda: chien_hrones_reswick(INTEGRATING, "load", 0, "pi"), "the plant is integrating"),
        (lambda: chien_hrones_reswick(LONG_DEAD_TIME, "load", 0, "p"), "L/T is 1.01"),
        (lambda: chien_hrones_reswick(SHORT_DEAD_TIME, "setpoint", 20, "pid"), "L/T is 0.099"),
        (lambda: lopez_load(INTEGRATING, "iae", "pi"), "the plant is integrating"),
        (lambda: lopez_load(LONG_DEAD_TIME, "ise", "pid"), "L/T is 1.01"),
        (lambda: lopez_load(SHORT_DEAD_TIME, "itae", "pi"), r"0.099 \(wants 0.1 to 1\)"),
        (lambda: rovira_setpoint(INTEGRATING, "iae", "pi"), "the plant is integrating"),
        (lambda: rovira_setpoint(LONG_DEAD_TIME, "itae", "pid"), "L/T is 1.01"),
        (lambda: rovira_setpoint(SHORT_DEAD_TIME, "itae", "pi"), "L/T is 0.099"),
        (lambda: astrom_hagglund_amigo_pi(NO_DEAD_TIME), "dead time 0 s"),
        (lambda: astrom_hagglund_amigo_pid(NO_DEAD_TIME), "dead time 0 s"),
        (lambda: hagglund_astrom_pi(NO_DEAD_TIME), "dead time 0 s"),
        (lambda: ho_hang_cao_pi(INTEGRATING, 3.0, 60.0), "the plant is integrating"),
        (lambda: ho_hang_cao_pi(NO_DEAD_TIME, 3.0, 60.0), "dead time 0 s"),
        (lambda: ho_hang_cao_pi(LAG, 1.0, 60.0), "gain margin 1 with"),
        (lambda: ho_hang_cao_pi(LAG, 3.0, 80.0), "phase margin 80 deg"),
        (lambda: skogestad_averaging_level(LAG, 4.0, 40.0, "p"), "the plant is self-regulating"),
        (lambda: skogestad_averaging_level(INTEGRATING, 4.0, None, "p"), "are not given"),
        (
            lambda: skogestad_averaging_level(INTEGRATING, 4.4, 40.0, "p"),
            r"the dead time is 0.11 of 1/\(K k'\)",
        ),
        (lambda: skogestad_tight_level(LAG, None, None), "the plant is self-regulating"),
        (
            lambda: skogestad_tight_level(replace(INTEGRATING, dead_time=0.0), None, None),
            "dead time 0 s",
        ),
        (lambda: skogestad_tight_level(INTEGRATING, 21.0, 40.0), "allows a gain of 0.5"),
        (lambda: astrom_hagglund_relay(0.0, 1.0, 1.0), "without a swing"),
        (lambda: astrom_hagglund_relay(1.0, 1.0, 1.0, 1.0), "within the hysteresis"),
    ],
)
def test_outside_its_limits_a_rule_says_so(ask: Callable[[], Any], words: str) -> None:
    with pytest.raises(NotApplicable, match=words) as refused:
        ask()
    assert refused.value.limit
    assert refused.value.source
    assert str(refused.value) == f"{refused.value.what} ({refused.value.limit})"


@pytest.mark.parametrize("share", [0.1, 1.0])
def test_the_edge_of_the_limits_is_inside(share: float) -> None:
    # 0.1 * 30 is not 3 to the last digit
    model = replace(LAG, time_constant=30.0, dead_time=share * 30.0)
    assert lopez_load(model, "iae", "pi").gain > 0.0


def test_what_the_plant_cannot_give_passes_through_a_rule() -> None:
    def no_swing() -> Ultimate:
        raise NotApplicable("the phase never reaches -180 deg", limit="wants a swing")

    def no_model(lags: int) -> SmallModel:
        raise NotApplicable("the plant oscillates by itself", limit="wants real lags")

    plant = Plant(no_model, no_swing)
    for rule in RULES.values():
        with pytest.raises(NotApplicable):
            rule.settings(plant)


def test_without_dead_time_lambda_takes_the_lag() -> None:
    # common practice: lambda = max(T, 3 L) = T
    assert dahlin_lambda_pi(NO_DEAD_TIME, None) == Tuning(0.5, 10.0)


# --- other routes to the same settings -----------------------------------------------------------


@pytest.mark.parametrize("wanted", [0.5, 2.0, 7.0])
@pytest.mark.parametrize("delay", [0.2, 1.0, 3.0])
def test_integrating_pid_puts_both_poles_where_they_are_wanted(wanted: float, delay: float) -> None:
    # exact: with the Pade form of the dead time the loop is left with (lambda s + 1)^2
    found = chien_fruehauf_integrating_pid(SmallModel(0.5, True, 0.0, 0.0, delay, True), wanted)
    k, ti, td = as_ideal(found)
    gain = 0.5 * k / ti
    above = gain * np.polymul([ti * td, ti, 1.0], [-delay / 2.0, 1.0])
    closed = np.polyadd([delay / 2.0, 1.0, 0.0, 0.0], above)
    wanted_poles = np.polymul([wanted**2, 2.0 * wanted, 1.0], [delay / 2.0, 1.0])
    assert closed / closed[-1] == pytest.approx(wanted_poles, abs=1e-9)


@pytest.mark.parametrize("wanted", [0.5, 2.0, 7.0])
def test_integrating_lag_pid_puts_both_poles_where_they_are_wanted(wanted: float) -> None:
    # exact: with 1 - L s for the dead time the loop is left with (T s + 1)(lambda s + 1)^2
    model = SmallModel(0.5, True, 0.0, 3.0, 1.0, True)
    k, ti, td = as_ideal(chien_fruehauf_integrating_lag_pid(model, wanted))
    above = 0.5 * k / ti * np.polymul([ti * td, ti, 1.0], [-1.0, 1.0])
    closed = np.polyadd([3.0, 1.0, 0.0, 0.0], above)
    wanted_poles = np.polymul([wanted**2, 2.0 * wanted, 1.0], [3.0, 1.0])
    assert closed / closed[-1] == pytest.approx(wanted_poles, abs=1e-9)


@pytest.mark.parametrize(("delay", "wanted"), [(0.1, 0.2), (0.3, 0.5), (0.5, 2.0), (0.0, 0.4)])
def test_unstable_pid_is_the_series_of_the_internal_model_controller(
    delay: float, wanted: float
) -> None:
    # other route: the series of s C(s) in mpmath, C = q/(1 - G q), q inverting all but exp(-L s)
    lag, k = 1.0, 2.0
    alpha = lag * ((1 + wanted / lag) ** 2 * mpmath.exp(delay / lag) - 1)

    def controller_times_s(s: Any) -> Any:
        q = (alpha * s + 1) / (wanted * s + 1) ** 2
        return s * (lag * s - 1) / k * q / (1 - mpmath.exp(-delay * s) * q)

    with mpmath.workdps(40):
        # From points about 0, where the expression itself is 0/0.
        points = [mpmath.mpf(n) / 1000 for n in (-3, -2, -1, 1, 2, 3)]
        matrix = mpmath.matrix([[p**n for n in range(6)] for p in points])
        values = mpmath.matrix([controller_times_s(p) for p in points])
        integral, proportional, derivative = list(mpmath.lu_solve(matrix, values))[:3]
    found = lee_imc_unstable_pid(UnstableLag(k, lag, delay), wanted)
    assert found.gain == pytest.approx(float(proportional), rel=1e-6)
    assert found.integral_time == pytest.approx(float(proportional / integral), rel=1e-6)
    assert found.derivative_time == pytest.approx(float(derivative / proportional), abs=1e-6)


@given(st.floats(0.0, 0.6), st.floats(0.01, 100.0), st.floats(0.1, 10.0))
def test_unstable_pid_has_positive_settings(share: float, wanted: float, gain: float) -> None:
    found = lee_imc_unstable_pid(UnstableLag(gain, 1.0, share), wanted)
    assert found.gain * gain > 1.0
    assert found.integral_time is not None
    assert found.integral_time > 0.0
    assert found.derivative_time >= 0.0


@pytest.mark.parametrize("share", [0.05, 0.2, 0.4, 0.6])
def test_unstable_pid_makes_its_plant_stable(share: float) -> None:
    model = unstable_lag(TransferFunction.ratio((2.0,), [(10.0, -1.0)], 10.0 * share))
    k, ti, td = as_ideal(lee_imc_unstable_pid(model, None))
    plant = TransferFunction.ratio((2.0,), [(10.0, -1.0)], 10.0 * share)
    assert analogue_margins(Loop(plant, plant, Gains(k, k / ti, k * td))).stable


@pytest.mark.parametrize(("gain_margin", "phase"), [(2.0, 45.0), (3.0, 60.0), (5.0, 72.0)])
def test_both_margins_come_out_where_they_agree(gain_margin: float, phase: float) -> None:
    # closed form: P = 90 (1 - 1/A)
    model = SmallModel(2.0, False, 10.0, 0.0, 3.0, True)
    found = ho_hang_cao_pi(model, gain_margin, phase)
    assert found.integral_time == pytest.approx(10.0, rel=1e-9)
    plant = model.transfer()
    margins = analogue_margins(Loop(plant, plant, Gains(found.gain, found.gain / 10.0)))
    assert margins.gain_margin.value == pytest.approx(gain_margin, rel=1e-6)
    assert margins.phase_margin_deg.value == pytest.approx(phase, rel=1e-6)


def test_tyreus_luyben_on_an_integrator_is_what_the_paper_rounds_it_to() -> None:
    # published, from memory: 0.487/(k' L), 8.75 L; Ku = pi/(2 k' L), Pu = 4 L
    found = tyreus_luyben(Ultimate(math.pi / 2.0, 4.0), "pi")
    assert found.gain == pytest.approx(0.487, rel=0.01)
    assert found.integral_time == pytest.approx(8.75, rel=0.01)


@pytest.mark.parametrize("kind", ["p", "pi"])
def test_an_averaged_level_goes_as_far_as_it_may(kind: Literal["p", "pi"]) -> None:
    # exact: P settles at dq/K; PI peaks at (2/e) dq/K, a time 2/(K k') after the step
    slope, upset, deviation = 0.01, 20.0, 10.0
    model = SmallModel(slope, True, 0.0, 0.0, 0.0, True)
    found = skogestad_averaging_level(model, -upset, deviation, kind)
    plant = model.transfer()
    integral = found.gain / found.integral_time if found.integral_time else 0.0
    loop = Loop(plant, plant, Gains(found.gain, integral))
    level = np.abs(simulate(loop, Events(0.0, 0.0, upset, 0.0, 3000.0)).pv)
    assert level.max() == pytest.approx(deviation, rel=1e-4)


LEVELS = (
    # published rule, value recomputed (S. Skogestad, Ind. Eng. Chem. Res. 45, 2006, 7817-7822)
    (0.5, 0.54629284),
    # published, read in a stored page (the same)
    (0.707, 0.64479378),
    (1.0, 0.73575888),
)


def level_peak(damping: float) -> float:
    """Peak of a level under PI after a step of 1 in its feed, times the gain."""
    gain, area = 2.0, 10.0
    plant = TransferFunction.ratio((1.0 / area,), [(1.0, 0.0)])
    integral_time = 4.0 * damping**2 * area / gain
    loop = Loop(plant, plant, Gains(gain, gain / integral_time))
    level = np.abs(simulate(loop, Events(0.0, 0.0, 1.0, 0.0, 100.0)).pv)
    return gain * float(level.max())


@pytest.mark.parametrize(("damping", "factor"), LEVELS)
def test_published_peak_of_a_level(damping: float, factor: float) -> None:
    assert level_peak(damping) == pytest.approx(factor, abs=2e-4)


# --- relay test ----------------------------------------------------------------------------------

RELAYS = (
    # published rule, value recomputed (K.J. Astrom & T. Hagglund, Automatica 20, 1984, 645-651,
    # from memory): amplitude and period of the swing of a relay of 1, and 4 d/(pi a)
    (PublishedPlant(1.0, (1.0,), 1.0), 0.63212055, 2.9797603, 2.0142353),
    (PublishedPlant(1.0, (1.0, 1.0, 1.0), 0.0), 0.16306148, 3.6797507, 7.8083403),
    (PublishedPlant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0), 0.32409575, 6.3273269, 3.9285907),
    (PublishedPlant(1.0, (1.0, 1.0), 1.0), 0.49849466, 4.7756315, 2.5541689),
    (PublishedPlant(1.0, (), 1.0, (), 1), 1.0, 4.0, 4.0 / math.pi),
)


@pytest.mark.parametrize(("plant", "swing", "period", "expected"), RELAYS)
def test_published_relay_tests(
    plant: PublishedPlant, swing: float, period: float, expected: float
) -> None:
    found = astrom_hagglund_relay(1.0, swing, period)
    assert found.gain == pytest.approx(expected, rel=1e-6)
    true_gain, true_period = ultimate(plant.transfer())
    # closed form: on a lag with dead time between 8/pi^2 and 4/pi of the true gain
    assert 8.0 / math.pi**2 <= found.gain / true_gain * (1 + 1e-9)
    assert found.gain / true_gain <= 4.0 / math.pi
    assert found.period == pytest.approx(true_period, rel=0.05)


def test_the_hysteresis_of_a_relay_is_taken_out() -> None:
    # exact: -1/N has the real part -(pi/(4 d)) sqrt(a^2 - e^2); 5, 4, 3
    assert astrom_hagglund_relay(2.0, 5.0, 7.0, 3.0) == astrom_hagglund_relay(2.0, 4.0, 7.0)


# --- plants that are no lag ----------------------------------------------------------------------


def test_the_lags_beside_an_unstable_one_count_as_dead_time() -> None:
    plant = TransferFunction.ratio((-0.6, 3.0), [(5.0, -1.0), (0.3, 1.0)], 1.0)
    found = unstable_lag(plant)
    assert (found.gain, found.time_constant, found.dead_time) == pytest.approx((3.0, 5.0, 1.5))


def test_the_lags_of_a_double_integrator_count_by_the_half_rule() -> None:
    plant = TransferFunction.ratio((3.0,), [(1.0, 0.0)] * 2 + [(2.0, 1.0), (1.0, 1.0)], 1.0)
    found = double_integrator(plant)
    assert (found.gain, found.dead_time) == pytest.approx((3.0, 3.0))


@pytest.mark.parametrize(
    ("plant", "words"),
    [
        (TransferFunction.ratio((1.0,), [(1.0, 1.0)]), "not one unstable lag"),
        (TransferFunction.ratio((1.0,), [(1.0, -1.0), (1.0, 0.0)]), "not one unstable lag"),
        (TransferFunction.ratio((1.0, 1.0), [(1.0, -1.0)]), "a lead"),
        (TransferFunction.ratio((1.0,), [(1.0, -1.0), (1.0, 0.1, 1.0)]), "oscillates"),
    ],
)
def test_what_is_no_unstable_lag_is_refused(plant: TransferFunction, words: str) -> None:
    with pytest.raises(NotApplicable, match=words):
        unstable_lag(plant)


@pytest.mark.parametrize(
    ("plant", "words"),
    [
        (TransferFunction.ratio((1.0,), [(1.0, 0.0)]), "does not integrate twice"),
        (
            TransferFunction.ratio((1.0,), [(1.0, 0.0), (1.0, 0.0), (1.0, -1.0)]),
            "does not integrate twice",
        ),
        (
            TransferFunction.ratio((1.0,), [(1.0, 0.0)] * 2, 1.0)
            + TransferFunction.ratio((1.0,), [(1.0, 0.0)] * 2, 2.0),
            "more than one path",
        ),
    ],
)
def test_what_is_no_double_integrator_is_refused(plant: TransferFunction, words: str) -> None:
    with pytest.raises(NotApplicable, match=words):
        double_integrator(plant)
