"""Linear programmes between bounds, against another solver and against closed forms."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from scipy.optimize import linprog

from workbench.errors import CannotSolve
from workbench.model.programme import least


@pytest.mark.parametrize("seed", range(12))
def test_the_cost_is_that_of_another_solver(seed: int) -> None:
    # other route: HiGHS, as scipy brings it
    rng = np.random.default_rng(seed)
    m = int(rng.integers(2, 40))
    n = m + int(rng.integers(5, 150))
    a = rng.normal(size=(m, n))
    above = np.where(rng.random(n) < 0.6, rng.uniform(0.5, 3.0, n), math.inf)
    inside = rng.uniform(0.0, 1.0, n) * np.where(np.isfinite(above), above, 3.0)
    # Costs made of prices, so that there is an end to the descent.
    c = rng.normal(size=m) @ a + rng.exponential(1.0, n)
    b = a @ inside
    x, prices = least(a, b, c, above, 1e-8)
    solve: Any = linprog
    other = solve(c, A_eq=a, b_eq=b, bounds=[(0.0, top) for top in above.tolist()])
    assert float(c @ x) == pytest.approx(other.fun, rel=1e-6, abs=1e-6)
    assert np.abs(a @ x - b).max() < 1e-6
    assert x.min() >= 0.0
    assert (x <= above).all()
    assert prices == pytest.approx(other.eqlin.marginals, rel=1e-4, abs=1e-4)


def test_the_median_has_the_least_distances() -> None:
    # exact: sum |d - u| is least at the median; its dual is max d v, sum v = 0, |v| <= 1
    data = np.array([1.0, 2.0, 4.0, 7.0, 11.0])
    x, prices = least(np.ones((1, 5)), np.array([5.0]), -data, np.full(5, 2.0))
    assert float(data @ (x - 1.0)) == pytest.approx(15.0, rel=1e-4)
    assert prices[0] == pytest.approx(-4.0, abs=1e-2)


def test_what_has_no_answer_says_so() -> None:
    with pytest.raises(CannotSolve, match="no answer"):
        least(np.ones((1, 2)), np.array([5.0]), np.ones(2), np.ones(2))
