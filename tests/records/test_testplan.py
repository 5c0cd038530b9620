"""A planned test keeps to what was allowed, and knows beforehand what it will tell."""

from __future__ import annotations

import numpy as np
import pytest

from workbench.errors import InputError
from workbench.model.reduction import half_rule
from workbench.model.transfer import TransferFunction
from workbench.records.testplan import errors_of, plan_test


def lag(gain: float = 1.8, time: float = 40.0, dead: float = 6.0) -> TransferFunction:
    return TransferFunction.ratio((gain,), [(time, 1.0)], dead)


@pytest.mark.parametrize(
    ("hold", "gain", "time", "dead"),
    [
        (1.0, 8.9, 15.0, 1.40),
        (2.0, 1.67, 4.2, 0.98),
        (3.0, 0.69, 2.3, 0.85),
        (4.0, 0.40, 1.7, 0.79),
        (5.0, 0.28, 1.4, 0.76),
    ],
)
def test_errors_of_one_step_are_the_cramer_rao_bound(
    hold: float, gain: float, time: float, dead: float
) -> None:
    """Other route: a computation apart from this program; lag 1, baseline known, rows a tenth of
    the time constant apart, counted after the dead time; its digits."""
    found = errors_of(
        half_rule(lag(1.0, 1.0, 0.5)),
        [(0.0, 1.0)],
        0.1,
        1.0,
        baseline=False,
        drift=False,
        until=0.5 + hold,
    )

    assert found.size == pytest.approx(gain, rel=0.02)
    assert found.time_constants_s[0] == pytest.approx(time, rel=0.03)
    assert found.dead_time_s == pytest.approx(dead, abs=0.006)


def test_errors_agree_with_derivatives_by_hand() -> None:
    """Exact: a ramp has PV = k u (t - L), so that its columns are u (t - L), -k u and 1, t."""
    model = half_rule(TransferFunction.ratio((0.02,), [(1.0, 0.0)], 4.0))
    levels = [(0.0, 0.0), (10.0, 5.0)]
    found = errors_of(model, levels, 1.0, 0.3, until=60.0)

    time = np.arange(61.0)
    since = np.maximum(time - 14.0, 0.0)
    columns = np.stack([5.0 * since, np.where(time > 14.0, -0.1, 0.0), np.ones(61), time], axis=1)
    exact = 0.3 * np.sqrt(np.diag(np.linalg.inv(columns.T @ columns)))
    assert (found.size, found.dead_time_s) == pytest.approx(tuple(exact[:2]), rel=1e-6)


def test_a_path_ends_as_long_after_its_last_move_as_the_first_move_comes() -> None:
    model = half_rule(lag())
    levels = [(0.0, 0.0), (200.0, 5.0), (400.0, 0.0)]
    assert errors_of(model, levels, 1.0, 0.3) == errors_of(model, levels, 1.0, 0.3, until=600.0)


def test_the_path_stays_within_what_is_allowed_and_returns() -> None:
    plan = plan_test(lag(), noise=0.15, max_pv_change=3.0)

    # Exact: a lag held for 5 time constants after its dead time reaches 1 - exp(-5) of its end.
    assert plan.hold_s >= 6.0 + 5 * 40.0
    assert 0.85 * 3.0 <= plan.expected_pv_change <= 3.0
    assert plan.moves[0].pv_reached == pytest.approx(1.8 * plan.bump_op * -np.expm1(-5.0), rel=0.01)
    assert [np.sign(move.op_change) for move in plan.moves] == [1, -1, 1, -1]
    # exact: each level is held until the next, the last as long as any
    begins = [move.at_s for move in plan.moves]
    held = [move.hold_s for move in plan.moves]
    assert held[:-1] == pytest.approx(np.diff(begins).tolist())
    assert held[-1] == pytest.approx(plan.hold_s)
    assert abs(plan.moves[-1].pv_reached) < 0.02 * plan.expected_pv_change
    assert sum(move.op_change for move in plan.moves) == pytest.approx(0.0)
    assert abs(plan.path[2][-1]) < 0.02 * plan.expected_pv_change


def test_twice_the_gain_takes_half_the_bump() -> None:
    one = plan_test(lag(), noise=0.15, max_pv_change=3.6)
    two = plan_test(lag(gain=3.6), noise=0.15, max_pv_change=3.6)

    assert two.bump_op == pytest.approx(one.bump_op / 2, rel=0.1)


def test_a_certainty_that_is_asked_for_is_reached_with_the_smallest_bump() -> None:
    plan = plan_test(lag(), noise=0.15, max_pv_change=20.0, certainty=2.0)

    assert plan.enough
    assert plan.certainty_percent.value == pytest.approx(2.0, rel=0.15)
    assert plan.expected_pv_change < 5.0


def test_more_rounds_where_one_is_not_enough_and_a_plain_no_where_none_is() -> None:
    some = plan_test(lag(), noise=1.0, max_pv_change=2.0, certainty=6.0)
    never = plan_test(lag(), noise=5.0, max_pv_change=1.0, certainty=1.0)

    assert some.enough
    assert len(some.moves) > 4
    assert not never.enough
    assert any("is not reached" in caution for caution in never.cautions)


def test_an_integrating_plant_comes_back_to_where_it_was() -> None:
    plan = plan_test(
        TransferFunction.ratio((-0.0007,), [(1.0, 0.0)], 9.0), noise=0.1, max_pv_change=2.0
    )

    assert abs(plan.path[2][-1]) < 1e-9
    assert plan.expected_pv_change <= 2.0
    assert any("ramps" in caution for caution in plan.cautions)


def test_the_range_of_op_and_the_valve_bound_the_bump() -> None:
    bound = plan_test(lag(gain=0.1), noise=0.1, max_pv_change=10.0, max_op_change=8.0)
    lost = plan_test(
        lag(), noise=0.15, max_pv_change=20.0, certainty=2.0, max_op_change=30.0, lost_motion=3.0
    )

    assert bound.bump_op == 8.0
    assert any("range of OP" in caution for caution in bound.cautions)
    assert lost.bump_op >= 6.0


def test_rows_further_apart_tell_less() -> None:
    """Exact: with many rows errors grow as the root of the interval."""
    close, far = (
        plan_test(lag(), noise=0.15, max_pv_change=3.0, interval=i).standard_errors.size
        for i in (0.25, 4.0)
    )

    assert far / close == pytest.approx(4.0, rel=0.03)


def test_a_plant_of_many_lags_is_planned_for_by_the_nearest_small_one() -> None:
    plan = plan_test(
        TransferFunction.ratio((1.0,), [(10.0, 1.0)] * 4), noise=0.1, max_pv_change=2.0
    )

    assert any("nearest to this plant" in caution for caution in plan.cautions)
    assert plan.expected_pv_change <= 2.0


@pytest.mark.parametrize(
    ("plant", "words"),
    [
        (TransferFunction.ratio((1.0,), [(5.0, -1.0)]), "is unstable"),
        (TransferFunction.constant(0.0), "no answer|cannot be planned"),
    ],
)
def test_a_plant_that_cannot_be_bumped_is_refused(plant: TransferFunction, words: str) -> None:
    with pytest.raises(InputError, match=words):
        plan_test(plant, noise=0.1, max_pv_change=1.0)
