"""The algorithm, scan by scan, against sums written out by hand."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.controller import Algorithm, Memory

PLANT = TransferFunction.ratio((1.0,), [(10.0, 1.0)])


def algorithm(gains: Gains, scan: float = 1.0, **options: object) -> Algorithm:
    return Algorithm.of(Loop(PLANT, PLANT, gains, **options), scan)  # type: ignore[arg-type]


def test_first_scans_of_a_setpoint_step_with_every_part_at_work() -> None:
    # exact: Kp 2, Ki 0.5, Kd 3, Tf 1, h 1, b 0.5, c 1, so P = 1 - 2 y, I + 0.5 e,
    # D = D/2 + 1.5 (change of r - y).
    step = algorithm(Gains(2.0, 0.5, 3.0, 1.0, 0.5, 1.0)).start()

    # P 1, I 0.5, D 1.5
    assert step(1.0, 0.0) == pytest.approx(3.0)
    # P 0.8, I 0.5 + 0.45, D 0.75 - 0.15
    assert step(1.0, 0.1) == pytest.approx(0.8 + 0.95 + 0.6)


def test_direct_action_is_the_same_with_the_other_sign() -> None:
    gains = Gains(2.0, 0.5, 3.0, 1.0, 0.5)
    reverse = algorithm(gains, high=4.0, rate=3.0).start()
    direct = algorithm(gains, reverse=False, low=-4.0, rate=3.0).start()
    for i in range(20):
        pv = math.sin(0.7 * i)
        assert direct(1.0, pv) == -reverse(1.0, pv)


def test_pv_filter_has_the_exact_pole() -> None:
    # exact: after n scans of a PV of 1 the filtered PV is 1 - exp(-n h/T); Kp = 1.
    step = algorithm(Gains(1.0), 0.5, pv_filter=2.0).start()
    seen = [-step(0.0, 1.0) for _ in range(4)]
    assert seen == pytest.approx([1.0 - math.exp(-n * 0.5 / 2.0) for n in range(1, 5)])


def test_unfiltered_derivative_is_a_plain_difference() -> None:
    # exact: Kd/h times the change of -y
    step = algorithm(Gains(0.0, 0.0, 3.0), 0.5).start()
    assert [step(0.0, y) for y in (1.0, 1.0, 0.0)] == pytest.approx([-6.0, 0.0, 6.0])


def test_conditional_integration_holds_only_what_drives_further() -> None:
    # exact: Kp 1, Ki 1, h 1, high 3
    step = algorithm(Gains(1.0, 1.0), high=3.0).start()
    assert step(2.0, 0.0) == 2.0 + 0.0  # 2 + 2 is beyond, so I stays 0
    assert step(1.0, 0.0) == 1.0 + 1.0  # within: I becomes 1
    assert step(5.0, 0.0) == 3.0  # beyond even without the new part: I stays 1
    assert step(0.0, 0.5) == pytest.approx(-0.5 + 1.0 - 0.5)  # error the other way: I moves


def test_tracking_gives_back_a_share_of_what_the_limit_took() -> None:
    # exact: Kp 2, Ki 0.5 (Ti 4), h 1, high 1: v = 2 + 0.5, I = 0.5 + (1/4)(1 - 2.5) = 0.125
    step = algorithm(Gains(2.0, 0.5), high=1.0, windup="tracking").start()
    assert step(1.0, 0.0) == 1.0
    assert step(0.0, 0.0) == pytest.approx(0.125)


def test_tracking_time_with_derivative_is_the_mean_of_the_two_times() -> None:
    # exact: sqrt(Ti Td) = sqrt(Kd/Ki) = 4
    assert algorithm(Gains(2.0, 0.5, 8.0), windup="tracking").release == pytest.approx(0.25)


def test_external_reset_is_a_lag_of_the_limited_output() -> None:
    # other route: F = lag of the output, solved backwards: F (1 + h/Ti) = F_before + h/Ti u, for PI
    # with b = 1; then the next output is Kp e + F + Ki h e.
    kp, ki, h, high = 2.0, 0.5, 1.0, 1.5
    step = algorithm(Gains(kp, ki), high=high, windup="external-reset").start()
    lag, share = 0.0, h / (kp / ki)
    for error in (1.0, 0.7, 0.2, -0.4, 0.1):
        # v solves v = Kp e + F with F driven by v itself; where v is beyond, the limit drives F.
        wanted = kp * error + lag + ki * h * error
        output = min(wanted, high)
        lag = (lag + share * output) / (1.0 + share)
        assert step(error, 0.0) == pytest.approx(output)


@pytest.mark.parametrize("windup", ["conditional", "tracking", "external-reset"])
def test_limits_that_are_not_met_change_nothing(windup: str) -> None:
    gains = Gains(2.0, 0.5, 3.0, 1.0, 0.7)
    free = algorithm(gains).start()
    limited = algorithm(gains, low=-1e3, high=1e3, rate=1e4, windup=windup).start()
    for i in range(50):
        pv = math.sin(0.3 * i)
        assert limited(1.0, pv) == pytest.approx(free(1.0, pv), abs=1e-12)


def test_without_integral_nothing_is_given_back() -> None:
    step = algorithm(Gains(2.0), high=1.0, windup="tracking").start()
    step(5.0, 0.0)
    assert step(0.25, 0.0) == 0.5


def test_incremental_execution_is_positional_while_nothing_limits() -> None:
    # exact: the sum of the changes is the whole
    gains = Gains(2.0, 0.5, 3.0, 1.0, 0.7)
    positional = algorithm(gains).start()
    incremental = algorithm(gains, incremental=True, low=-1e3, high=1e3).start()
    for i in range(50):
        pv = math.sin(0.3 * i)
        assert incremental(1.0, pv) == pytest.approx(positional(1.0, pv), abs=1e-12)


def test_incremental_execution_adds_to_the_output_that_the_limit_left() -> None:
    # exact: u + Kp (change of e) + Ki h e, Kp 1, Ki 0.5, limit 2
    step = algorithm(Gains(1.0, 0.5), incremental=True, high=2.0).start()
    assert step(4.0, 0.0) == 2.0
    assert step(4.0, 0.0) == 2.0
    assert step(1.0, 0.0) == pytest.approx(2.0 - 3.0 + 0.5)


def test_incremental_execution_without_integral_action_is_refused() -> None:
    with pytest.raises(InputError, match="incremental without integral action"):
        algorithm(Gains(1.0), incremental=True)


def test_dead_zone_takes_its_width_off_the_error() -> None:
    # exact: Kp 2, Ki 0.5, zone 1: e 3 acts as 2, e -0.5 not at all
    step = algorithm(Gains(2.0, 0.5), dead_zone=1.0).start()
    assert step(3.0, 0.0) == pytest.approx(4.0 + 1.0)
    assert step(0.0, 0.5) == pytest.approx(1.0)


def test_gain_grows_with_the_error() -> None:
    # exact: a share of 0.2 at no error, so that an error of 50 % acts as 50 (0.2 + 0.8/2) = 30
    step = algorithm(Gains(1.0), gain_at_rest=0.2).start()
    assert step(50.0, 0.0) == pytest.approx(30.0)
    assert step(0.0, 0.0) == 0.0
    assert step(-100.0, 0.0) == pytest.approx(-100.0)


def test_manual_ends_where_automatic_goes_on() -> None:
    # exact: in manual I = u - P, so the first scan of automatic moves by Ki h e alone
    made, memory = algorithm(Gains(2.0, 0.5), low=-20.0, high=20.0), Memory()
    manual = made.in_manual(memory, 7.0)
    assert [manual(3.0, 1.0), manual(3.0, 1.0)] == [7.0, 7.0]
    assert made.start(memory)(3.0, 1.0) == pytest.approx(7.0 + 0.5 * 2.0)


def test_manual_keeps_to_limits_and_rate() -> None:
    made, memory = algorithm(Gains(2.0, 0.5), high=5.0, rate=2.0), Memory()
    manual = made.in_manual(memory, 9.0)
    assert [manual(0.0, 0.0) for _ in range(4)] == [2.0, 4.0, 5.0, 5.0]


def test_new_settings_leave_the_output_where_it_is() -> None:
    # exact: P goes from 2 e to 6 e, I makes up for it; then only Ki h e is added
    first, second, memory = algorithm(Gains(2.0, 0.5)), algorithm(Gains(6.0, 0.1)), Memory()
    before = first.start(memory)(2.0, 0.5)
    second.takes_over(memory, first, 2.0)
    assert second.start(memory)(2.0, 0.5) == pytest.approx(before + 0.1 * 1.5)


def test_an_unknown_way_of_holding_the_integral_is_refused() -> None:
    with pytest.raises(InputError, match="use conditional, tracking or external-reset"):
        algorithm(Gains(1.0, 1.0), windup="never")


@given(
    st.lists(st.tuples(st.floats(-50, 50), st.floats(-50, 50)), max_size=30),
    st.floats(-20, 0),
    st.floats(0, 20),
    st.floats(0.1, 50),
    st.sampled_from(["conditional", "tracking", "external-reset"]),
    st.booleans(),
)
def test_output_keeps_within_limits_and_rate(
    inputs: list[tuple[float, float]],
    low: float,
    high: float,
    rate: float,
    windup: str,
    reverse: bool,
) -> None:
    made = algorithm(
        Gains(3.0, 0.4, 2.0, 0.2, 0.6),
        low=low,
        high=high,
        rate=rate,
        windup=windup,
        reverse=reverse,
    )
    step, before = made.start(), 0.0
    for setpoint, pv in inputs:
        output = step(setpoint, pv)
        assert low <= output <= high
        assert abs(output - before) <= rate * (1 + 1e-12)
        before = output
