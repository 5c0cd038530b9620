"""Feedforward: the ideal where it can be had, and what of it cannot."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from workbench.errors import ModelError, NotApplicable
from workbench.model.feedforward import Feedforward, ideal_feedforward
from workbench.model.formula import parse_formula as formula

POINTS = (0.003j, 0.11j, 2.7j, 0.05 + 0.4j)


@pytest.mark.parametrize("s", POINTS)
def test_the_lead_and_lag_are_their_formula(s: complex) -> None:
    # exact: K (lead s + 1)/(lag s + 1) exp(-L s)
    found = Feedforward(-0.8, 10.0, 20.0, 3.0).transfer()
    assert found(s) == pytest.approx(formula("-0.8 (10 s + 1) exp(-3 s)/(20 s + 1)")(s), rel=1e-14)
    assert Feedforward(-0.8).transfer()(s) == pytest.approx(-0.8)
    assert Feedforward(2.0, lag=5.0).transfer()(s) == pytest.approx(2.0 / (5.0 * s + 1.0))


def test_a_lead_without_a_lag_is_refused() -> None:
    with pytest.raises(ModelError, match="a derivative without a lag"):
        Feedforward(1.0, lead=3.0)


@given(
    st.floats(0.2, 5.0),
    st.floats(1.0, 50.0),
    st.floats(0.0, 10.0),
    st.floats(0.2, 5.0),
    st.floats(1.0, 50.0),
    st.floats(0.0, 10.0),
)
def test_one_lag_each_is_cancelled_exactly(
    gain: float, time: float, dead_time: float, load_gain: float, load_time: float, later: float
) -> None:
    plant = formula(f"{gain} exp(-{dead_time} s)/({time} s + 1)")
    load = formula(f"{load_gain} exp(-{dead_time + later} s)/({load_time} s + 1)")
    found = ideal_feedforward(plant, load)
    assert (found.exact, found.lost) == (True, ())
    # exact: -Gd/G
    assert found.feedforward.gain == pytest.approx(-load_gain / gain)
    assert found.feedforward.dead_time == pytest.approx(later, abs=1e-9)
    whole = plant * found.feedforward.transfer() + load
    for s in POINTS:
        assert abs(whole(s)) <= 1e-9 * abs(load(s))


def test_an_upset_at_the_plant_s_input_needs_no_dynamics() -> None:
    plant = formula("1.8 exp(-6 s)/(40 s + 1)")
    found = ideal_feedforward(plant, plant)
    assert (found.feedforward, found.exact) == (Feedforward(-1.0), True)


def test_two_integrating_paths_have_a_gain() -> None:
    # exact: the ratio of the slopes
    found = ideal_feedforward(formula("0.2 exp(-2 s)/s"), formula("-0.5 exp(-3 s)/(s (4 s + 1))"))
    assert found.feedforward == Feedforward(2.5, 0.0, 4.0, 1.0)
    assert found.exact


@pytest.mark.parametrize(
    ("plant", "load", "words"),
    [
        ("2 exp(-5 s)/(9 s + 1)", "exp(-3 s)/(9 s + 1)", "2 s before OP can"),
        ("2/(9 s + 1)", "3", "differentiated once"),
        ("2/((9 s + 1)(3 s + 1)(s + 1))", "3/(5 s + 1)", "differentiated 2 times"),
        ("2 (1 - 4 s)/(9 s + 1)^2", "3/(5 s + 1)", "inverse response"),
        ("2/((9 s + 1)(3 s + 1))", "3/((5 s + 1)(2 s + 1))", "only the areas cancel"),
        ("(exp(-s) + exp(-3 s))/(9 s + 1)", "exp(-s)/(5 s + 1)", "several dead times"),
    ],
)
def test_what_cannot_be_realised_is_said(plant: str, load: str, words: str) -> None:
    found = ideal_feedforward(formula(plant), formula(load))
    assert not found.exact
    assert any(words in lost for lost in found.lost)
    # The steady value cancels all the same.
    whole = formula(plant) * found.feedforward.transfer() + formula(load)
    assert abs(whole(1e-9j)) < 1e-6


def test_the_area_under_pv_cancels_for_more_lags() -> None:
    plant, load = formula("2/((9 s + 1)(3 s + 1))"), formula("3/((5 s + 1)(2 s + 1))")
    found = ideal_feedforward(plant, load).feedforward
    # exact: 12 s of lags against 7 s
    assert [found.lead, found.lag] == pytest.approx([12.0, 7.0])
    whole = plant * found.transfer() + load
    # The area is the limit of the function over s, which only cancelled first moments make 0.
    assert abs(whole(1e-5j) / 1e-5j) < 1e-3


@pytest.mark.parametrize("lead", [9.0, 0.9])
def test_a_load_without_a_lag_gets_one(lead: float) -> None:
    # common practice: a tenth of the lead
    found = ideal_feedforward(formula(f"2/({lead} s + 1)"), formula("3")).feedforward
    assert [found.lead, found.lag] == pytest.approx([lead, 0.1 * lead])


@pytest.mark.parametrize(
    ("plant", "load", "words"),
    [
        ("2/(9 s + 1)", "1/s", "no steady output"),
        ("1/s", "2/(9 s + 1)", "no steady move"),
        ("1/s^2", "1/s^2", "one integration at most"),
    ],
)
def test_where_no_gain_cancels_there_is_none(plant: str, load: str, words: str) -> None:
    with pytest.raises(NotApplicable, match=words):
        ideal_feedforward(formula(plant), formula(load))


def test_a_dead_time_inside_a_feedback_has_none() -> None:
    with pytest.raises(NotApplicable, match="inside a feedback"):
        ideal_feedforward(formula("exp(-s)/(s + 1)").feedback(), formula("1"))
