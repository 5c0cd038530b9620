"""A swing is found through noise, and noise is seldom called one."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from workbench.records.swing import autocovariance, load_upsets, regularity, swings

Array = NDArray[np.float64]
ROWS, RUNS = 1000, 400


def autoregressive(draws: Array, *coefficients: float) -> Array:
    """x(t) = a1 x(t-1) + a2 x(t-2) + e(t), for every run at once; the first half is left out."""
    found = np.zeros_like(draws)
    for t in range(2, len(draws)):
        found[t] = draws[t] + sum(a * found[t - 1 - i] for i, a in enumerate(coefficients))
    return found[len(draws) // 2 :]


def ringing(damping: float, period: float) -> tuple[float, float]:
    """Coefficients of second-order noise (exact: poles exp(-z w +- i w sqrt(1 - z^2)))."""
    w = 2.0 * math.pi / period
    r = math.exp(-damping * w)
    return 2.0 * r * math.cos(w * math.sqrt(1.0 - damping**2)), -r * r


def share_called_swinging(series: Array) -> float:
    found = [regularity(one) for one in series.T]
    return float(np.mean([one is not None and one.index > 1.0 for one in found]))


@pytest.mark.parametrize("memory", [0.0, 0.9, 0.98])
def test_plain_noise_is_seldom_called_a_swing(memory: float) -> None:
    """Other route: 2, 2.5 and 3 % in 400 runs made apart from this program; at most 5 % here."""
    draws = np.random.default_rng(5).normal(size=(2 * ROWS, RUNS))

    assert share_called_swinging(autoregressive(draws, memory)) <= 0.05


@pytest.mark.parametrize(("damping", "share"), [(0.1, 0.95), (0.3, 0.43)])
def test_noise_that_rings_is_called_a_swing(damping: float, share: float) -> None:
    """Other route: 95 and 43 % in 400 runs made apart from this program; three standard errors."""
    draws = np.random.default_rng(6).normal(size=(2 * ROWS, RUNS))
    series = autoregressive(draws, *ringing(damping, 40.0))

    assert share_called_swinging(series) == pytest.approx(
        share, abs=3.0 * math.sqrt(2.0 * share * (1.0 - share) / RUNS)
    )


def test_a_period_is_told_finer_than_its_rows() -> None:
    # exact: zero crossings of a sine lie half a period apart, between the rows
    found = regularity(np.sin(2.0 * np.pi * np.arange(ROWS) / 41.3))
    assert found is not None
    assert found.period == pytest.approx(41.3, rel=3e-3)
    assert found.index > 40.0


@pytest.mark.parametrize(("noise", "share"), [(1.0, 0.89), (0.5, 0.999)])
def test_a_sine_is_found_through_noise(noise: float, share: float) -> None:
    """Other route: 89 % with noise as large as the amplitude, above 99.9 % with half of it."""
    draws = noise * np.random.default_rng(7).normal(size=(ROWS, RUNS))
    sine = np.sin(2.0 * np.pi * np.arange(ROWS) / 40.0)[:, np.newaxis]

    assert share_called_swinging(sine + draws) == pytest.approx(share, abs=0.05)


def test_autocovariance_of_a_few_numbers() -> None:
    """Exact: about their mean they are -2, -1, 0, 3; the products by hand."""
    assert autocovariance(np.array([1.0, 2.0, 3.0, 6.0])) == pytest.approx(
        [14 / 4, 2 / 4, -3 / 4, -6 / 4]
    )


def test_two_periods_that_mix_are_both_found() -> None:
    time = np.arange(3000.0)
    both = 2.0 * np.sin(2 * np.pi * time / 31.0) + 1.5 * np.sin(2 * np.pi * time / 170.0)
    found = swings(both + 0.5 * np.random.default_rng(8).normal(size=3000), 2.0)

    assert [one.period_s for one in found] == pytest.approx([62.0, 340.0], rel=0.02)
    assert found[0].amplitude == pytest.approx(2.0, rel=0.05)


def test_a_square_swing_is_one_swing_with_its_harmonics() -> None:
    found = swings(np.sign(np.sin(2 * np.pi * (np.arange(2000.0) + 0.5) / 100.0)), 1.0)

    assert [one.period_s for one in found] == pytest.approx([100.0], rel=0.01)


@pytest.mark.parametrize("series", [np.zeros(200), np.arange(200.0), np.full(200, 7.25)])
def test_what_stands_or_drifts_does_not_swing(series: Array) -> None:
    assert swings(series, 1.0) == ()


def test_upsets_are_half_waves_above_the_limit() -> None:
    """Exact: a half wave of amplitude a has the IAE 2 a / w; the limit is that of 1 % of range at
    w = 2 pi / Ti, so that waves of that period count from an amplitude of 1 % on."""
    time = np.arange(0.0, 400.0, 0.1)
    wave = np.sin(2.0 * np.pi * (time + 0.05) / 40.0)
    above, below = (load_upsets(a * wave, 0.1, 100.0, 40.0) for a in (1.01, 0.99))

    assert above.limit == pytest.approx(0.01 * 100.0 * 40.0 / math.pi)
    assert (above.count, below.count) == (20, 0)
    assert above.alarm
    assert not below.alarm
    # exact: each upset counts 1 and fades by 1 - h/(50 Ti) a row; they end 200 rows apart
    fades = (1.0 - 0.1 / (50.0 * 40.0)) ** 200
    assert above.most_at_once == pytest.approx((1.0 - fades**20) / (1.0 - fades), rel=1e-9)


def test_noise_below_a_percent_is_no_upset() -> None:
    """The rate that the method's description states: none of 200 records of 2000 rows."""
    draws = np.random.default_rng(9).normal(scale=0.9, size=(200, 2000))

    assert not any(load_upsets(one, 1.0, 100.0, 30.0).alarm for one in draws)
