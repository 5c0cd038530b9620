"""Two-point readings hold to their published constants, and say when they do not fit."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import brentq

from tests.records.making import Answer, Array, bump, lag, two_lags
from workbench.records.graphical import readings, smith, sundaresan_krishnaswamy
from workbench.records.record import Record


def equal_lags(count: int) -> Answer:
    """Step response of 1/(s + 1)^count (exact)."""

    def answer(t: Array) -> Array:
        total, term = np.zeros_like(t), np.ones_like(t)
        for k in range(count):
            total = total + term
            term = term * t / (k + 1)
        risen: Array = 1.0 - np.exp(-t) * total
        return risen

    return answer


def three_lags(t: Array) -> Array:
    """Step response of 1/((10 s + 1)(3 s + 1)(s + 1)) by partial fractions (exact)."""
    risen = np.ones_like(t)
    lags = (10.0, 3.0, 1.0)
    for i, own in enumerate(lags):
        share = own**2 / np.prod([own - other for k, other in enumerate(lags) if k != i])
        risen = risen - share * np.exp(-t / own)
    return risen


WORKED = (
    (equal_lags(2), (1.0510, 1.2434, 2.1457, 3.3986), (1.642, 0.504), (1.444, 0.631)),
    (equal_lags(3), (1.8507, 2.1097, 3.2577, 4.7536), (2.110, 1.147), (1.771, 1.364)),
    (equal_lags(4), (2.6868, 3.0010, 4.3513, 6.0477), (2.497, 1.855), (2.041, 2.148)),
    (two_lags(1.0, 10.0, 3.0), (6.1529, 7.3683, 13.432, 22.725), (10.92, 2.51), (10.29, 2.99)),
    (three_lags, (7.1541, 8.3851, 14.478, 23.778), (10.99, 3.49), (10.31, 4.01)),
)
"""Step response, when it passes 28.3, 35.3, 63.2 and 85.3 %, and (T, L) by either reading."""


@pytest.mark.parametrize(("answer", "times", "smiths", "sundaresans"), WORKED)
def test_worked_examples(
    answer: Answer,
    times: tuple[float, ...],
    smiths: tuple[float, float],
    sundaresans: tuple[float, float],
) -> None:
    """Other route: crossing times of the exact step response found by bisection, and the formulas
    of C.L. Smith 1972 and Sundaresan and Krishnaswamy 1978 worked out apart from this program."""
    found = [
        brentq(lambda t, s=share: float(answer(np.array([t]))[0]) - s, 0.01, 99.0)
        for share in (0.283, 0.353, 0.632, 0.853)
    ]
    assert found == pytest.approx(times, rel=2e-4)
    t28, t35, t63, t85 = found
    assert smith(t28, t63) == pytest.approx(smiths, abs=0.006)
    assert sundaresan_krishnaswamy(t35, t85) == pytest.approx(sundaresans, abs=0.006)


def test_the_constants_are_those_of_one_lag_to_the_digits_given() -> None:
    """Exact: one lag passes a share s at T ln(1/(1 - s)) after the dead time."""
    t28, t35, t63, t85 = (-np.log1p(-share) for share in (0.283, 0.353, 0.632, 0.853))
    assert 1.0 / (t63 - t28) == pytest.approx(1.4993, abs=1e-3)
    assert 1.0 / (t85 - t35) == pytest.approx(0.6748, abs=1e-3)
    assert smith(t28 + 0.4, t63 + 0.4) == pytest.approx((1.0, 0.4), abs=0.002)
    assert sundaresan_krishnaswamy(t35 + 0.4, t85 + 0.4) == pytest.approx((1.0, 0.4), abs=0.015)


def step(answer: Answer, *, late: float = 20.0, noise: float = 0.0) -> Record:
    return bump(np.arange(2000.0), answer, late, moves=((0.2, 5.0),), noise=noise)


def test_a_step_in_a_record_is_read() -> None:
    for noise in (0.0, 0.02):
        for reading in readings(step(lag(2.0, 60.0), noise=noise)):
            assert reading.gain == pytest.approx(2.0, rel=0.01)
            assert reading.time_constant_s == pytest.approx(60.0, rel=0.03)
            assert reading.dead_time_s == pytest.approx(20.0, abs=2.0)
            assert not reading.remark


def test_a_dead_time_below_0_is_not_given_without_a_word() -> None:
    # A quick part and a slow one: the curve is hollower than one lag can be.
    def hollow(t: Array) -> Array:
        return lag(0.5, 2.0)(t) + lag(0.5, 150.0)(t)

    negative = [r for r in readings(step(hollow, late=0.0)) if r.dead_time_s < 0.0]
    assert negative
    assert all("below 0: the method does not fit" in reading.remark for reading in negative)


def test_pv_that_has_not_come_to_rest_is_said() -> None:
    assert all("not come to rest" in r.remark for r in readings(step(lag(2.0, 900.0))))


def test_op_that_moves_at_many_rows_is_not_read() -> None:
    time = np.arange(300.0)
    assert readings(Record("walk", time, np.sin(time / 9), np.cos(time / 9))) == ()
