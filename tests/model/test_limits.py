"""The peaks that a plant forbids: closed forms, and loops that try to undercut them."""

from __future__ import annotations

import math

import numpy as np
import pytest

from workbench.model.feedback import Loop
from workbench.model.limits import least_peaks
from workbench.model.pid import Gains
from workbench.model.robustness import analogue_margins
from workbench.model.transfer import TransferFunction


@pytest.mark.parametrize("dead_time", [0.0, 1.0, 6.0])
def test_an_unstable_pole_and_dead_time(dead_time: float) -> None:
    # exact: Mt >= exp(p L), p = 0.1
    plant = TransferFunction.ratio((2.0,), [(10.0, -1.0)], dead_time)
    found = least_peaks(plant, 0.5)
    assert found.complementary_sensitivity.value == pytest.approx(math.exp(0.1 * (dead_time + 0.5)))


def test_an_unstable_pole_and_an_inverse_response() -> None:
    # published formula (S. Skogestad and I. Postlethwaite, 2005, section 5.3, from memory), figure
    # recomputed: z = 4, p = 1 leave Ms and Mt at 5/3 or more
    found = least_peaks(TransferFunction.ratio((-1.0, 4.0), [(1.0, -1.0), (0.1, 1.0)]))
    assert found.sensitivity.value == pytest.approx(5.0 / 3.0)
    assert found.complementary_sensitivity.value == pytest.approx(5.0 / 3.0)


def test_a_stable_plant_without_inverse_response_forbids_nothing() -> None:
    found = least_peaks(TransferFunction.ratio((1.8,), [(40.0, 1.0)], 6.0))
    assert (found.sensitivity.value, found.complementary_sensitivity.value) == (1.0, 1.0)


def test_an_inner_feedback_with_dead_time_says_why_not() -> None:
    found = least_peaks(TransferFunction.ratio((1.0,), [(1.0, 1.0)], 1.0).feedback())
    assert found.sensitivity.value is None
    assert "inside a feedback" in found.sensitivity.reason


def test_no_stable_loop_undercuts_the_least_peaks() -> None:
    rng = np.random.default_rng(61)
    tried = 0
    while tried < 25:
        slow, dead_time = float(rng.uniform(5.0, 30.0)), float(rng.uniform(0.2, 4.0))
        zero = float(rng.choice([0.0, rng.uniform(0.1, 2.0)]))
        plant = TransferFunction.ratio((-zero, 1.0), [(slow, -1.0)], dead_time)
        gain = float(rng.uniform(1.1, 8.0))
        loop = Loop(plant, plant, Gains(gain, gain / float(rng.uniform(30.0, 300.0)), gain, 0.3))
        margins = analogue_margins(loop)
        if not margins.stable:
            continue
        tried += 1
        least = least_peaks(plant)
        assert least.sensitivity.value is not None
        assert least.complementary_sensitivity.value is not None
        assert (margins.max_sensitivity.value or 0.0) >= least.sensitivity.value
        followed = margins.max_complementary_sensitivity.value
        assert followed is not None
        assert followed >= least.complementary_sensitivity.value
