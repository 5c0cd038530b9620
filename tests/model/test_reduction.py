"""The half rule, by its published examples and its laws."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.model.published import HALF_RULES, HalfRuleCase
from workbench.errors import NotApplicable
from workbench.model.formula import parse_formula
from workbench.model.reduction import SmallModel, best_fit, half_rule, misfit
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


# --- the fit where control happens ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("formula", "lags", "expected"),
    [
        # exact: the nearest model to a plant that is one is that plant
        ("-2 exp(-3 s)/(10 s + 1)", 1, (-2.0, 10.0, 0.0, 3.0)),
        ("2 exp(-3 s)/((10 s + 1) (4 s + 1))", 2, (2.0, 10.0, 4.0, 3.0)),
        ("0.2 exp(-3 s)/s", 1, (0.2, 0.0, 0.0, 3.0)),
        ("0.2 exp(-3 s)/(s (4 s + 1))", 2, (0.2, 0.0, 4.0, 3.0)),
    ],
)
def test_the_best_fit_to_a_small_model_is_that_model(
    formula: str, lags: int, expected: tuple[float, ...]
) -> None:
    found = best_fit(parse_formula(formula), lags)
    kept = (found.time_constant, found.second_time_constant)
    if found.integrating:
        kept = (0.0, sum(kept))
    assert (found.gain, *kept, found.dead_time) == pytest.approx(expected, rel=1e-4, abs=1e-4)


@pytest.mark.parametrize("lags", [1, 2])
def test_no_model_near_the_best_fit_is_nearer(lags: int) -> None:
    """Other route: the error of the docstring, written here, at models a little to each side."""
    plant = parse_formula("1.5 exp(-2 s)/((8 s + 1) (5 s + 1) (3 s + 1)^2)")
    # exact condition of the crossover, by bisection: the phase is there -180 deg
    low, high = 1e-3, 1.0
    for _ in range(60):
        middle = math.sqrt(low * high)
        phase = -2.0 * middle - sum(math.atan(t * middle) for t in (8.0, 5.0, 3.0, 3.0))
        low, high = (middle, high) if phase > -math.pi else (low, middle)
    w = np.geomspace(low / 100.0, low, 80)
    target = plant((1j * w).astype(np.complex128))

    def cost(*changes: float) -> float:
        gain, first, second, dead_time = (
            value * (1.0 + change)
            for value, change in zip(
                (best.gain, best.time_constant, best.second_time_constant, best.dead_time),
                changes,
                strict=True,
            )
        )
        s = 1j * w
        model = gain * np.exp(-dead_time * s) / ((first * s + 1) * (second * s + 1))
        return float((np.abs(model - target) ** 2 / np.abs(target)).sum())

    best = best_fit(plant, lags)
    least = cost(0.0, 0.0, 0.0, 0.0)
    for i in range(4):
        for change in (-0.01, 0.01):
            assert cost(*(change * (i == k) for k in range(4))) >= least


def test_how_far_off_a_model_is() -> None:
    plant = parse_formula("2 exp(-3 s)/(10 s + 1)")
    # exact: the same shape a tenth larger is off by a tenth of the peak, and not in phase
    larger = misfit(plant, SmallModel(2.2, False, 10.0, 0.0, 3.0, False))
    assert larger.peak_step_error_percent == pytest.approx(10.0, rel=1e-9)
    assert larger.phase_error_deg.value == pytest.approx(0.0, abs=1e-9)
    # exact: 1 s later is w rad later, and off by 1 - exp(-1/10) in the first second of its own
    later = misfit(plant, SmallModel(2.0, False, 10.0, 0.0, 4.0, False))
    low, high = 1e-3, 10.0
    for _ in range(60):
        w = math.sqrt(low * high)
        low, high = (w, high) if -3.0 * w - math.atan(10.0 * w) > -math.pi else (low, w)
    assert later.phase_error_deg.value == pytest.approx(-math.degrees(low), rel=1e-6)
    assert later.peak_step_error_percent == pytest.approx(100.0 * -math.expm1(-0.1), rel=0.02)
