"""What is wished for: as it is typed, and as proposals are held to it."""

from __future__ import annotations

from dataclasses import replace

import pytest

from workbench import study
from workbench.case.case import Case, edit_all, new_case
from workbench.errors import InputError
from workbench.study import RelayTest, Wish, edit_wish, show_wish
from workbench.units import Amount, quantities


def a_case(**changes: str) -> Case:
    """An invented dryer of the Port Ellery alginate works."""
    keys = {
        "pv.low": "0",
        "pv.high": "250",
        "pv.start": "120",
        "plant.formula": "1.6 exp(-8 s)/(45 s + 1)",
        "controller.gain": "4",
        "controller.integral": "40 s",
        "scenario.setpoint_step": "5",
        "scenario.load_step": "5",
        "scenario.load_at": "450 s",
    }
    keys |= {key.replace("__", "."): text for key, text in changes.items()}
    return edit_all(new_case("TIC-307"), {"plant.shape": "formula"} | keys)


def only(case: Case, method: str, wish: Wish) -> study.Proposal:
    """The row of one method."""
    return study.propose(case, replace(wish, method=method))[-1]


# --- as it is typed ------------------------------------------------------------------------------


def test_every_wish_is_shown_as_it_is_typed() -> None:
    typed = {
        "setpoint_share": "30",
        "max_sensitivity": "1.6",
        "max_complementary_sensitivity": "1.2",
        "max_noise_gain": "12",
        "max_load_travel": "8",
        "closed_loop_time": "0.5 min",
        "largest_upset": "20",
        "allowed_deviation": "10",
        "relay": "5:1.2:36 s:0.3",
    }
    assert set(typed) == set(quantities(Wish))
    wish = Wish()
    for name, text in typed.items():
        wish = edit_wish(wish, name, text)
    assert {name: show_wish(wish, name) for name in typed} == typed
    assert wish.closed_loop_time == Amount(0.5, "min")
    for name in typed:
        wish = edit_wish(wish, name, " ")
    assert wish == Wish()


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("setpoint_share", "101", "at most 100"),
        ("max_sensitivity", "1", "above 1"),
        ("max_noise_gain", "1,5", "write a point"),
        ("closed_loop_time", "30", "unit"),
        ("largest_upset", "-3", "above 0"),
    ],
)
def test_a_wish_nobody_can_have_is_refused(name: str, text: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        edit_wish(Wish(), name, text)


@pytest.mark.parametrize(
    "word",
    ["5", "5:1", "5:1:2:3:4", "0:1:9 s", "5:0:9 s", "5:x:9 s", "5:1:9 s:1", "inf:1:9 s", "5:1:0 s"],
)
def test_a_relay_test_must_be_a_swing(word: str) -> None:
    with pytest.raises(InputError, match='is no relay test; write it like "5:1.2:36 s"'):
        RelayTest.read(word)


def test_a_relay_test_is_read_in_its_order() -> None:
    assert RelayTest.read("5:1.2:0.6 min") == RelayTest(5.0, 1.2, 36.0, 0.0)
    assert RelayTest.read("5:1.2:36 s:0.3") == RelayTest(5.0, 1.2, 36.0, 0.3)


# --- as it is kept -------------------------------------------------------------------------------


@pytest.mark.parametrize("scan", ["", "1 s"], ids=["analogue", "sampled"])
@pytest.mark.parametrize(
    ("name", "text", "figure"),
    [
        ("max_sensitivity", "1.5", "max_sensitivity"),
        ("max_complementary_sensitivity", "1.05", "max_complementary_sensitivity"),
        ("max_noise_gain", "4", "noise_gain"),
        ("max_load_travel", "5.5", "load_travel"),
    ],
)
def test_the_best_keep_every_limit_and_rules_beyond_one_say_so(
    scan: str, name: str, text: str, figure: str
) -> None:
    wish = edit_wish(Wish(), name, text)
    case = a_case(controller__scan=scan) if scan else a_case()

    best, other = only(case, "best-pi", wish), only(case, "ziegler-nichols-reaction-pi", wish)

    found = getattr(best, figure).value
    assert float(text) * 0.99 <= found <= float(text) * 1.001
    assert best.within_limit
    assert getattr(other, figure).value > float(text)
    assert not other.within_limit
    assert f"is above the limit of {text}" in other.reason


def test_a_stated_mix_lies_between_its_ends() -> None:
    rows = [only(a_case(), "best-pi", Wish(setpoint_share=share)) for share in (0.0, 50.0, 100.0)]

    load = [row.load_iae.value or 0.0 for row in rows]
    setpoint = [row.setpoint_iae.value or 0.0 for row in rows]
    assert load == sorted(load)
    assert setpoint == sorted(setpoint, reverse=True)
    assert load[0] < load[2]
    # Exact: the best of the sum has a sum no larger than either end has.
    sums = [one + other for one, other in zip(load, setpoint, strict=True)]
    assert sums[1] <= 1.005 * min(sums)
    assert "50 % setpoint IAE" in rows[1].objective


def test_noise_is_not_taken_for_travel_or_error() -> None:
    quiet, noisy = a_case(controller__scan="1 s"), a_case(controller__scan="1 s", pv__noise="0.4")

    rows = [only(case, "simc-pi", Wish()) for case in (quiet, noisy)]

    for figure in ("load_travel", "load_iae", "setpoint_iae", "noise_gain"):
        assert getattr(rows[0], figure) == getattr(rows[1], figure)


def test_a_derivative_without_a_filter_has_no_noise_gain() -> None:
    case = a_case(controller__derivative="3 s", controller__derivative_filter="none")

    row = only(case, "present", Wish(max_noise_gain=50.0))

    assert row.noise_gain.value is None
    assert "noise gain is not known (the derivative has no filter" in row.reason
    assert not row.within_limit


def test_the_search_is_over_the_whole_that_the_controller_acts_on() -> None:
    """Other route: margins of the cascade itself."""
    cascade = a_case(
        **{
            "inner.plant": "1.4/(4 s + 1)",
            "inner.gain": "0.8",
            "inner.integral": "4 s",
            "inner.action": "reverse",
            "inner.scan": "0.5 s",
            "controller.scan": "1 s",
            "plant.load": "1.6 exp(-8 s)/(45 s + 1)",
        }
    )

    best = only(cascade, "best-pi", Wish(max_sensitivity=1.6))

    assert best.max_sensitivity.value == pytest.approx(1.6, rel=1e-3)


def test_dead_time_compensation_is_not_searched() -> None:
    case = a_case(controller__scan="1 s", compensation__model="1.6 exp(-8 s)/(45 s + 1)")

    best = only(case, "best-pi", Wish())

    assert not best.applies
    assert "dead-time compensation" in best.reason


def test_a_search_that_is_stopped_says_so() -> None:
    rows = study.propose(a_case(), Wish(), should_stop=lambda: True)

    best = next(row for row in rows if row.method == "best-pi")
    assert "stopped before its end" in best.reason
    assert best.load_iae.value is None
    assert all(row.load_iae.value is None for row in rows)


# --- trade-off -----------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def curves() -> study.TradeOff:
    """Of the analogue loop."""
    return study.trade_off(a_case())


def test_caution_costs_speed(curves: study.TradeOff) -> None:
    for points in curves.curves.values():
        errors = [point.best.load_iae.value or 0.0 for point in points]
        assert errors == sorted(errors, reverse=True)
        for point in points:
            assert point.best.within_limit
            assert point.best.max_sensitivity.value == pytest.approx(point.limit, rel=2e-3)
    pi, pid = (curves.curves[method] for method in ("best-pi", "best-pid"))
    for one, other in zip(pi, pid, strict=True):
        assert (other.best.load_iae.value or 0.0) <= (one.best.load_iae.value or 0.0)


def test_no_rule_lies_below_the_trade_off(curves: study.TradeOff) -> None:
    """Exact: a PI rule's settings are among those that the search looks at."""
    points = curves.curves["best-pi"]
    limits = [point.limit for point in points]

    for row in study.propose(a_case()):
        ms, iae = row.max_sensitivity.value, row.load_iae.value
        if row.method.endswith("-pi") and ms is not None and iae is not None and ms < limits[-1]:
            above = next(point for point in points if point.limit >= ms)
            assert iae >= 0.99 * (above.best.load_iae.value or 0.0), row.method


def test_a_loop_without_a_trade_off_says_why() -> None:
    found = study.trade_off(a_case(**{"plant.formula": "1.6/(45 s + 1)"}))

    assert found.curves["best-pi"] == ()
    assert "nothing limits the gain" in found.reasons["best-pi"]
