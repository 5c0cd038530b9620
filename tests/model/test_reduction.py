"""The half rule, by its published examples and its laws."""

from __future__ import annotations

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.model.published import HALF_RULES, HalfRuleCase
from workbench.errors import NotApplicable
from workbench.model.formula import parse_formula
from workbench.model.reduction import SmallModel, half_rule
from workbench.model.transfer import TransferFunction


def _as_tuple(model: SmallModel, lags: int) -> tuple[float, ...]:
    both = (model.time_constant, model.second_time_constant)
    return (*both[:lags], model.dead_time)


WITHOUT_LEADS = [case for case in HALF_RULES if not any(z > 0 for z in case.plant.zeros)]


@pytest.mark.parametrize("case", WITHOUT_LEADS, ids=lambda case: case.name)
def test_published_half_rule_example(case: HalfRuleCase) -> None:
    lags = len(case.model) - 1
    model = half_rule(case.plant.transfer(), lags)
    assert _as_tuple(model, lags) == pytest.approx(case.model, rel=1e-9)
    assert model.gain == pytest.approx(case.plant.gain)
    assert not model.integrating


@pytest.mark.parametrize(
    ("lags", "time_constant", "dead_time"),
    [
        # published rule (S. Skogestad, J. Process Control 13 (2003) 291-309, from memory), values
        # computed elsewhere and exact in halves
        ((1.0, 1.0), 1.5, 0.5),
        ((1.0, 1.0, 1.0), 1.5, 1.5),
        ((1.0, 1.0, 1.0, 1.0), 1.5, 2.5),
        ((10.0, 3.0), 11.5, 1.5),
        ((10.0, 3.0, 1.0), 11.5, 2.5),
    ],
)
def test_half_rule_of_lags_in_series(
    lags: tuple[float, ...], time_constant: float, dead_time: float
) -> None:
    model = half_rule(TransferFunction.ratio((1.0,), [(lag, 1.0) for lag in lags]))
    assert _as_tuple(model, 1) == pytest.approx((time_constant, dead_time), rel=1e-12)
    assert not model.exact


@pytest.mark.parametrize(
    ("formula", "lags", "expected"),
    [
        # exact, by the rule; an integrator is a kept lag of endless length
        ("2 exp(-3 s)/(10 s + 1)", 1, SmallModel(2.0, False, 10.0, 0.0, 3.0, True)),
        ("2 exp(-3 s)/(10 s + 1)", 2, SmallModel(2.0, False, 10.0, 0.0, 3.0, True)),
        ("2 exp(-3 s)/((10 s + 1)(4 s + 1))", 2, SmallModel(2.0, False, 10.0, 4.0, 3.0, True)),
        ("0.5 exp(-3 s)/s", 1, SmallModel(0.5, True, 0.0, 0.0, 3.0, True)),
        ("0.5 exp(-3 s)/(s (4 s + 1))", 1, SmallModel(0.5, True, 0.0, 0.0, 5.0, False)),
        ("0.5 exp(-3 s)/(s (4 s + 1))", 2, SmallModel(0.5, True, 0.0, 4.0, 3.0, True)),
        ("0.5/(s (4 s + 1)(2 s + 1))", 2, SmallModel(0.5, True, 0.0, 5.0, 1.0, False)),
        ("-3 (1 - 2 s)/(10 s + 1)", 1, SmallModel(-3.0, False, 10.0, 0.0, 2.0, False)),
    ],
)
def test_half_rule_of_a_formula(formula: str, lags: int, expected: SmallModel) -> None:
    assert half_rule(parse_formula(formula), lags) == expected


@given(
    st.lists(st.floats(0.1, 100.0), min_size=1, max_size=6),
    st.floats(0.0, 20.0),
    st.sampled_from([1, 2]),
)
def test_the_half_rule_keeps_the_sum_of_lags_and_dead_time(
    lags: list[float], dead_time: float, kept: int
) -> None:
    # exact: each half given to a lag is taken from the other half given to the dead time
    plant = TransferFunction.ratio((2.0,), [(lag, 1.0) for lag in lags], dead_time)
    model = half_rule(plant, kept)
    total = model.time_constant + model.second_time_constant + model.dead_time
    assert total == pytest.approx(sum(lags) + dead_time, rel=1e-9)
    assert model.time_constant >= model.second_time_constant * (1 - 1e-12) or kept == 2


@pytest.mark.parametrize(
    ("plant", "words"),
    [
        ("1/(s^2 + 0.2 s + 1)", "oscillates by itself"),
        ("1/(5 s - 1)", "is unstable"),
        ("1/(s^2 (s + 1))", "integrates twice"),
        ("(3 s + 1)/(5 s + 1)", "a lead"),
        ("s/(5 s + 1)", "a lead or differentiates"),
        ("exp(-s)/(s + 1) + exp(-2 s)/(3 s + 1)", "more than one path"),
        ("3 exp(-4 s)", "no lag"),
    ],
)
def test_plants_outside_the_rule_are_refused(plant: str, words: str) -> None:
    with pytest.raises(NotApplicable, match=words) as refused:
        half_rule(parse_formula(plant))
    assert refused.value.limit == "wants real lags and dead time"
    assert "Skogestad" in refused.value.source


def test_a_plant_with_an_inner_feedback_is_refused() -> None:
    inner: Any = TransferFunction.ratio((1.0,), [(2.0, 1.0)], 1.0).feedback()
    with pytest.raises(NotApplicable, match="inner feedback"):
        half_rule(inner)


def test_published_example_with_a_lead_is_refused_rather_than_guessed() -> None:
    with_lead = [case for case in HALF_RULES if case not in WITHOUT_LEADS]
    assert with_lead
    for case in with_lead:
        with pytest.raises(NotApplicable, match="a lead"):
            half_rule(case.plant.transfer())
