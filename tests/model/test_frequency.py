"""The open loop over frequency, against formulas by hand and the margins' own search."""

from __future__ import annotations

import math

import numpy as np
import pytest

from workbench.model.feedback import Loop
from workbench.model.formula import parse_formula
from workbench.model.frequency import OpenLoop, open_loop_response
from workbench.model.pid import Gains
from workbench.model.robustness import analogue_margins, sampled_margins
from workbench.model.sampled import SampledLoop

PI = Gains(1.2, 1.2 / 30.0)
PLANT = "1.6 exp(-8 s)/(45 s + 1)"


def response(formula: str, gains: Gains, scan: float | None = None) -> OpenLoop:
    """Of a loop round a plant."""
    plant = parse_formula(formula)
    loop = Loop(plant, plant, gains, scan=scan)
    return open_loop_response(loop, None if scan is None else SampledLoop.of(loop), 0.01)


def test_gain_and_phase_are_those_of_the_formula() -> None:
    found = response(PLANT, PI)
    w = found.frequency
    # exact: |L| and arg L of Kp (1 + 1/(Ti s)) K exp(-L s)/(T s + 1), Ti = 30 s
    gain = 1.2 * 1.6 * np.hypot(1.0, 1.0 / (30.0 * w)) / np.hypot(1.0, 45.0 * w)
    phase = np.degrees(-np.arctan(1.0 / (30.0 * w)) - np.arctan(45.0 * w) - 8.0 * w)
    assert np.allclose(found.gain, gain, rtol=1e-10)
    assert np.allclose(found.phase_deg, phase, rtol=0.0, atol=1e-8)
    assert found.gain[0] > 50.0
    assert found.gain[-1] < 0.02


def test_the_sampled_loop_is_that_of_the_recursion() -> None:
    found = response(PLANT, PI, scan=2.0)
    # exact: lag by zero-order hold, K (1 - a)/(z - a), the dead time four whole scans, and the
    # positional PI, Kp + Ki h/(1 - 1/z)
    z = np.exp(2j * found.frequency)
    a = math.exp(-2.0 / 45.0)
    by_hand = (1.2 + 0.04 * 2.0 / (1.0 - 1.0 / z)) * 1.6 * (1.0 - a) / (z - a) * z**-4
    assert np.allclose(found.gain, np.abs(by_hand), rtol=1e-9)
    assert np.allclose(np.exp(1j * np.radians(found.phase_deg)), by_hand / np.abs(by_hand))
    assert found.frequency[-1] <= math.pi / 2.0 * (1 + 1e-12)


@pytest.mark.parametrize("scan", [None, 2.0])
@pytest.mark.parametrize("formula", [PLANT, "0.02 exp(-3 s)/s", "2/((20 s + 1)(5 s + 1))"])
def test_the_curves_pass_through_the_margins(formula: str, scan: float | None) -> None:
    plant = parse_formula(formula)
    loop = Loop(plant, plant, PI, scan=scan)
    # other route: the margins' own search, on its own frequencies
    margins = analogue_margins(loop) if scan is None else sampled_margins(loop)
    found = response(formula, PI, scan)
    x = np.log(found.frequency)
    crossover, phase = margins.gain_crossover_rad_s.value, margins.phase_margin_deg.value
    assert crossover is not None
    assert phase is not None
    assert np.interp(math.log(crossover), x, found.gain) == pytest.approx(1.0, abs=2e-3)
    at = np.interp(math.log(crossover), x, found.phase_deg)
    assert at == pytest.approx(phase - 180.0, abs=0.1)
    turned, margin = margins.phase_crossover_rad_s.value, margins.gain_margin.value
    if turned is not None and margin is not None and turned < found.frequency[-1]:
        assert np.interp(math.log(turned), x, found.phase_deg) == pytest.approx(-180.0, abs=0.2)
        assert np.interp(math.log(turned), x, found.gain) == pytest.approx(1.0 / margin, rel=5e-3)
    for curve, peak in (
        (found.sensitivity, margins.max_sensitivity),
        (found.complementary_sensitivity, margins.max_complementary_sensitivity),
    ):
        assert curve.max() == pytest.approx(peak.value, rel=1e-3)


def test_the_sensitivities_are_those_of_gain_and_phase() -> None:
    found = response(PLANT, PI, scan=1.0)
    # exact: |1 + L|^2 = 1 + 2 |L| cos(arg L) + |L|^2, and |T| = |L| |S|
    cosine = np.cos(np.radians(found.phase_deg))
    size = np.sqrt(1.0 + 2.0 * found.gain * cosine + found.gain**2)
    assert np.allclose(found.sensitivity * size, 1.0, rtol=1e-8)
    assert np.allclose(found.complementary_sensitivity, found.gain * found.sensitivity)


@pytest.mark.parametrize(
    ("formula", "gains", "start"),
    [
        # exact: 180 deg for two integrations, 90 for one, 180 for an unstable pole
        ("0.02 exp(-3 s)/s", PI, -180.0),
        (PLANT, PI, -90.0),
        (PLANT, Gains(1.2), 0.0),
        ("2/(20 s - 1)", Gains(1.2), -180.0),
        ("0.001/(s (5 s + 1))", Gains(1.0), -90.0),
    ],
)
def test_the_phase_begins_where_the_integrations_say(
    formula: str, gains: Gains, start: float
) -> None:
    assert response(formula, gains).phase_deg[0] == pytest.approx(start, abs=8.0)


@pytest.mark.parametrize("scan", [None, 2.0])
@pytest.mark.parametrize("gains", [Gains(0.0), PI, Gains(1e12, 1e9), Gains(1e-12)])
@pytest.mark.parametrize("formula", [PLANT, "1/(s^2 + 1)", "3", "2 exp(-500 s)/(s + 1)", "1/s^2"])
def test_odd_loops_have_finite_curves_on_rising_frequencies(
    formula: str, gains: Gains, scan: float | None
) -> None:
    found = response(formula, gains, scan)
    assert np.all(np.diff(found.frequency) > 0.0)
    for curve in vars(found).values():
        assert curve.shape == found.frequency.shape
        assert np.isfinite(curve).all()
