"""The highest point of a sweep lies between its frequencies, and is found there."""

from __future__ import annotations

import numpy as np
import pytest

from workbench.model.sweep import peaks


@pytest.mark.parametrize("top", [3.0, 3.3, 3.5, 2.6])
def test_a_peak_between_its_points_is_that_of_the_parabola(top: float) -> None:
    # exact: the sizes are a parabola with its vertex at `top`, which three points give back
    sizes = np.stack([1.8 - 0.01 * (np.arange(7.0) - top) ** 2, np.full(7, 1.2)])
    ms, _ = peaks((1.0 / sizes - 1.0).astype(np.complex128))
    assert ms == pytest.approx([1.8, 1.2], rel=1e-12)
    # exact: T = L/(1 + L) of the size wanted where L = size/(1 - size)
    _, mt = peaks((sizes / (1.0 - sizes)).astype(np.complex128))
    assert mt == pytest.approx([1.8, 1.2], rel=1e-12)


def test_a_peak_at_an_end_is_that_end() -> None:
    rising = 1.0 + 0.1 * np.arange(6.0)[np.newaxis]
    for sizes in (rising, rising[:, ::-1]):
        assert peaks((1.0 / sizes - 1.0).astype(np.complex128))[0] == pytest.approx([1.5])
