"""Published rules: a worked example for each, the laws of scale, and where they do not apply."""

from __future__ import annotations

import inspect
import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.model.published import TUNINGS, ULTIMATES, TuningCase
from workbench.errors import NotApplicable
from workbench.model.reduction import SmallModel, half_rule
from workbench.tune.rules import (
    RULES,
    Plant,
    Tuning,
    Ultimate,
    dahlin_lambda_pi,
    skogestad_simc_pi,
    skogestad_simc_pid,
    ziegler_nichols_reaction,
    ziegler_nichols_ultimate,
)

LAG = SmallModel(2.0, False, 10.0, 0.0, 1.0, True)
"""2 exp(-s)/(10 s + 1)"""
BALANCED = SmallModel(1.0, False, 1.0, 0.0, 1.0, True)
INTEGRATING = SmallModel(0.5, True, 0.0, 0.0, 2.0, True)
"""0.5 exp(-2 s)/s"""
TWO_LAGS = SmallModel(2.0, False, 20.0, 2.0, 1.0, True)
"""2 exp(-s)/((20 s + 1)(2 s + 1))"""
INTEGRATING_LAG = SmallModel(0.5, True, 0.0, 3.0, 2.0, True)

SWING = Ultimate(8.0, 12.0)


def a_plant(
    model: SmallModel, *, ultimate: Ultimate = SWING, closed_loop_time: float | None = None
) -> Plant:
    """A plant that reduces to `model` with one lag or two."""
    return Plant(lambda lags: model, lambda: ultimate, closed_loop_time)


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
    missing = set(RULES) - {worked.method for worked in WORKED_EXAMPLES}
    assert not missing, f"add {missing} to WORKED_EXAMPLES in tests/tune/test_rules.py"
    unknown = {worked.method for worked in WORKED_EXAMPLES} - set(RULES)
    assert not unknown, f"{unknown} in WORKED_EXAMPLES of tests/tune/test_rules.py is no rule"


@pytest.mark.parametrize("method", RULES)
def test_every_rule_says_where_it_comes_from(method: str) -> None:
    rule = RULES[method]
    assert rule.title
    assert rule.source
    documented = inspect.getdoc(rule.function) or ""
    for section in ("Parameters", "Returns", "Source", "Examples"):
        assert f"\n{section}\n---" in documented, f"{rule.function.__name__} has no {section}"


@pytest.mark.parametrize("method", RULES)
def test_a_method_is_written_in_lower_case_with_hyphens(method: str) -> None:
    assert method == method.lower()
    assert set(method) <= set("abcdefghijklmnopqrstuvwxyz0123456789-")


# --- published settings --------------------------------------------------------------------------

PUBLISHED_METHODS = {
    "ZN-open_PI": "ziegler-nichols-reaction-pi",
    "ZN-open_PID": "ziegler-nichols-reaction-pid",
    "ZN-ult_PI": "ziegler-nichols-ultimate-pi",
    "ZN-ult_PID": "ziegler-nichols-ultimate-pid",
}


@pytest.mark.parametrize("case", TUNINGS, ids=lambda case: case.name)
def test_published_settings(case: TuningCase) -> None:
    ultimates = {u.plant: Ultimate(u.gain, u.period) for u in ULTIMATES}
    # k Ku and Pu do not depend on the plant's gain.
    unit = ultimates[replace(case.plant, gain=1.0)]
    plant = Plant(
        lambda lags: half_rule(case.plant.transfer(), lags),
        lambda: replace(unit, gain=unit.gain / case.plant.gain),
        None,
    )
    label = case.name.split("-", 2)[2].removesuffix("-set")
    found = RULES[PUBLISHED_METHODS[label]].settings(plant)
    values = (found.gain, found.integral_time, found.derivative_time)
    assert values == pytest.approx(case.settings, rel=1e-6), (case.source, case.worth)


@pytest.mark.parametrize(
    ("gain", "period", "published"),
    [
        # published (W.L. Luyben, IEC Proc. Des. Dev. 25 (1986) 654-660, from memory): the diagonal
        # loops of a methanol column; printed with Ku/2.2, 1 % above 0.45 Ku, and rounded
        (2.0994147, 3.9074106, (0.96, 3.25)),
        (0.42210042, 11.132368, (0.19, 9.2)),
    ],
)
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
@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("asked", [None, 5.0])
def test_twice_the_plant_gain_halves_the_controller_gain(
    method: str, model: SmallModel, asked: float | None
) -> None:
    before = _applied(method, a_plant(model, closed_loop_time=asked))
    after = _applied(
        method,
        a_plant(
            replace(model, gain=2.0 * model.gain),
            ultimate=replace(SWING, gain=SWING.gain / 2.0),
            closed_loop_time=asked,
        ),
    )
    assert (before is None) == (after is None)
    if before is not None and after is not None:
        _same(after, replace(before, gain=before.gain / 2.0))


@pytest.mark.parametrize("method", RULES)
@pytest.mark.parametrize("model", MODELS)
@pytest.mark.parametrize("asked", [None, 5.0])
def test_twice_all_times_doubles_the_times(
    method: str, model: SmallModel, asked: float | None
) -> None:
    slow = replace(
        model,
        # A slope is per unit of time.
        gain=model.gain / 2.0 if model.integrating else model.gain,
        time_constant=2.0 * model.time_constant,
        second_time_constant=2.0 * model.second_time_constant,
        dead_time=2.0 * model.dead_time,
    )
    before = _applied(method, a_plant(model, closed_loop_time=asked))
    after = _applied(
        method,
        a_plant(
            slow,
            ultimate=replace(SWING, period=2.0 * SWING.period),
            closed_loop_time=asked and 2.0 * asked,
        ),
    )
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
    after = _applied(method, a_plant(replace(model, gain=-model.gain)))
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


@pytest.mark.parametrize(
    ("ask", "words"),
    [
        (lambda: skogestad_simc_pi(NO_DEAD_TIME, None), "no dead time to take the speed from"),
        (lambda: skogestad_simc_pi(NO_DEAD_TIME, 0.0), "no dead time to take the speed from"),
        (lambda: skogestad_simc_pid(LAG, None), "the plant has no second lag"),
        (lambda: skogestad_simc_pid(replace(TWO_LAGS, dead_time=0.0), None), "no dead time"),
        (
            lambda: dahlin_lambda_pi(replace(INTEGRATING, dead_time=0.0), None),
            "no dead time to take lambda from",
        ),
        (lambda: ziegler_nichols_reaction(NO_DEAD_TIME, "pi"), "dead time 0 s"),
        (lambda: ziegler_nichols_reaction(NO_DEAD_TIME, "p"), "dead time 0 s"),
    ],
)
def test_outside_its_limits_a_rule_says_so(ask: Callable[[], Any], words: str) -> None:
    with pytest.raises(NotApplicable, match=words) as refused:
        ask()
    assert refused.value.limit
    assert str(refused.value) == f"{refused.value.what} ({refused.value.limit})"


def test_what_the_plant_cannot_give_passes_through_a_rule() -> None:
    def no_swing() -> Ultimate:
        raise NotApplicable("the phase never reaches -180 deg", limit="wants a swing")

    def no_model(lags: int) -> SmallModel:
        raise NotApplicable("the plant oscillates by itself", limit="wants real lags")

    plant = Plant(no_model, no_swing, None)
    for rule in RULES.values():
        with pytest.raises(NotApplicable):
            rule.settings(plant)


def test_without_dead_time_lambda_takes_the_lag() -> None:
    # common practice: lambda = max(T, 3 L) = T
    assert dahlin_lambda_pi(NO_DEAD_TIME, None) == Tuning(0.5, 10.0)
