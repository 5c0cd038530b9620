"""Matrix exponential and zero-order hold against mpmath."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from workbench.errors import CannotSolve
from workbench.model.matrix import expm, hold

Floats = NDArray[np.float64]


def _exact(matrix: Floats) -> Floats:
    """exp by mpmath at 40 digits."""
    with mpmath.workdps(40):
        result = mpmath.expm(mpmath.matrix(matrix.tolist()), method="taylor")
        return np.array(
            [[float(result[i, j]) for j in range(len(matrix))] for i in range(len(matrix))]
        )


def _random(n: int, size: float, seed: int) -> Floats:
    return np.asarray(np.random.default_rng(seed).normal(size=(n, n)) * size, np.float64)


@pytest.mark.parametrize(
    ("n", "size"), [(1, 3.0), (2, 0.01), (3, 1.0), (4, 5.0), (6, 0.3), (8, 2.0), (5, 20.0)]
)
def test_exponential_agrees_with_forty_digits(n: int, size: float) -> None:
    # other route: Taylor series in mpmath
    matrix = _random(n, size, seed=n)
    exact = _exact(matrix)
    assert np.abs(expm(matrix) - exact).max() <= 1e-11 * np.abs(exact).max()


@pytest.mark.parametrize(
    ("matrix", "expected"),
    [
        # exact
        (np.zeros((3, 3)), np.eye(3)),
        (np.array([[0.0, 1.0], [0.0, 0.0]]), np.array([[1.0, 1.0], [0.0, 1.0]])),
        (
            np.array([[0.0, 2.0], [-2.0, 0.0]]),
            np.array([[math.cos(2), math.sin(2)], [-math.sin(2), math.cos(2)]]),
        ),
        (np.diag([-1.0, 2.0]), np.diag([math.exp(-1), math.exp(2)])),
        (np.array([[-700.0]]), np.array([[math.exp(-700.0)]])),
    ],
)
def test_exponential_of_matrices_with_a_closed_form(matrix: Floats, expected: Floats) -> None:
    assert np.allclose(expm(matrix), expected, rtol=1e-13, atol=1e-15)


def test_slow_decays_beside_fast_ones_keep_their_digits() -> None:
    # exact: two lags in series, 0.01 s and 10 h, after 3 h; x2 from 1 s of input kept in x1 is tiny
    fast, slow, t = 0.01, 36000.0, 10800.0
    a = np.array([[-1 / fast, 0.0], [1 / slow, -1 / slow]])
    result = expm(a * t)
    assert result[1, 1] == pytest.approx(math.exp(-t / slow), rel=1e-15)
    coupling = (math.exp(-t / slow) - math.exp(-t / fast)) / slow / (1 / fast - 1 / slow)
    assert result[1, 0] == pytest.approx(coupling, rel=1e-12)
    assert result[0, 1] == 0.0


@given(st.integers(1, 5), st.floats(0.01, 3.0), st.integers(0, 100))
def test_two_steps_are_one_step_twice_as_long(n: int, size: float, seed: int) -> None:
    matrix = _random(n, size, seed)
    twice = expm(2.0 * matrix)
    assert np.abs(expm(matrix) @ expm(matrix) - twice).max() <= 1e-11 * np.abs(twice).max() + 1e-13


def test_empty_matrix_gives_an_empty_matrix() -> None:
    assert expm(np.zeros((0, 0))).shape == (0, 0)


def test_what_is_not_finite_is_refused_in_words() -> None:
    with pytest.raises(CannotSolve, match="time scales are too far apart; enter them again"):
        expm(np.array([[math.inf]]))


@pytest.mark.parametrize("interval", [0.0, 0.01, 1.0, 30.0])
def test_hold_agrees_with_forty_digits(interval: float) -> None:
    # other route: gamma is the integral of exp(A t) B, here as a column of the exponential of
    # [A B; 0 0] in mpmath
    a, b = _random(4, 0.5, seed=3), _random(4, 1.0, seed=4)[0]
    stacked = np.zeros((5, 5))
    stacked[:4, :4], stacked[:4, 4] = a * interval, b * interval
    exact = _exact(stacked)
    phi, gamma = hold(a, b, interval)
    assert np.allclose(phi, exact[:4, :4], rtol=1e-11, atol=1e-12 * np.abs(exact).max())
    assert np.allclose(gamma, exact[:4, 4], rtol=1e-11, atol=1e-12 * np.abs(exact).max())


def test_hold_of_a_lag_and_of_an_integrator() -> None:
    # exact: 1 - exp(-h/T) and h
    phi, gamma = hold(np.array([[-0.25]]), np.array([0.25]), 3.0)
    assert phi[0, 0] == pytest.approx(math.exp(-0.75), rel=1e-15)
    assert gamma[0] == pytest.approx(1 - math.exp(-0.75), rel=1e-15)
    phi, gamma = hold(np.array([[0.0]]), np.array([2.0]), 3.0)
    assert (phi[0, 0], gamma[0]) == (1.0, pytest.approx(6.0, rel=1e-15))


@pytest.mark.parametrize("interval", [0.0, 1e-3, 1.0])
@pytest.mark.parametrize("first", [-20.0, -2.0, -0.1, 0.0, 0.05])
@pytest.mark.parametrize("second", [-21.0, -0.1 - 1e-9, -0.1, -1e-4, 0.0, 0.3])
def test_hold_of_two_lags_agrees_with_forty_digits(
    first: float, second: float, interval: float
) -> None:
    # other route: columns of the exponential of [A B; 0 0] in mpmath
    a, b = np.array([[first, 0.0], [0.7, second]]), np.array([0.4, 0.9])
    stacked = np.zeros((3, 3))
    stacked[:2, :2], stacked[:2, 2] = a * interval, b * interval
    exact = _exact(stacked)
    phi, gamma = hold(a, b, interval)
    assert phi == pytest.approx(exact[:2, :2], rel=2e-14, abs=1e-300)
    assert gamma == pytest.approx(exact[:2, 2], rel=2e-14, abs=1e-300)


def test_hold_of_no_state_at_all() -> None:
    phi, gamma = hold(np.zeros((0, 0)), np.zeros(0), 1.0)
    assert phi.shape == (0, 0)
    assert gamma.shape == (0,)
