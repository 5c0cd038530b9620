"""Many plants at once: the other route is each loop by itself, with its own exact verdict."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from tests.model.spreads import exact
from workbench.errors import NotApplicable
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.spread import judge
from workbench.model.structures import Structure
from workbench.model.transfer import TransferFunction
from workbench.model.variation import Variation

DRYER = TransferFunction.ratio((1.8,), [(40.0, 1.0), (8.0, 1.0)], 8.3)
PID = Gains(1.1, 1.1 / 32.0, 4.0, 0.4)
SCANS = (None, 1.0)


@pytest.mark.parametrize("scan", SCANS)
@pytest.mark.parametrize("off", [1e-3, 1e-5, 2e-6])
def test_a_verdict_is_right_outside_a_band_of_a_millionth(scan: float | None, off: float) -> None:
    loop = Loop(DRYER, DRYER, PID, scan=scan)
    margins = exact(loop)
    gain, delay = margins.gain_margin.value, margins.delay_margin_s.value
    assert gain is not None
    assert delay is not None

    # exact: at the gain margin, and at the delay margin, the loop just keeps swinging.
    ratios = (gain * (1.0 - off), gain * (1.0 + off))
    late = [Variation(dead_time=1.0 + (delay / 8.3) * (1.0 + e)).of(DRYER) for e in (-off, off)]

    assert judge(loop, [DRYER], ratios).stable.tolist() == [[True, False]]
    assert judge(loop, late).stable.tolist() == [[True], [False]]


@pytest.mark.parametrize("scan", SCANS)
def test_a_peak_is_found_however_sharp(scan: float | None) -> None:
    loop = Loop(DRYER, DRYER, PID, scan=scan)
    gain = exact(loop).gain_margin.value
    assert gain is not None
    for short in (1e-1, 1e-3, 1e-5):
        ratio = gain * (1.0 - short)
        # other route: the exact peak of that one loop
        peak = exact(replace(loop, plant=DRYER * ratio)).max_sensitivity.value
        found = judge(loop, [DRYER], [ratio]).max_sensitivity[0, 0]
        assert found == pytest.approx(peak, rel=1e-3)


COMPENSATED = {"model": TransferFunction.ratio((1.7,), [(42.0, 1.0)], 14.0)}
CASCADED = {
    "inner": Loop(
        TransferFunction.ratio((1.0,), [(5.0, 1.0)], 1.0),
        TransferFunction.constant(0.0),
        Gains(1.5, 0.3),
    )
}


@pytest.mark.parametrize(
    ("scan", "built"), [(None, COMPENSATED), (1.0, COMPENSATED), (None, CASCADED)]
)
def test_what_is_built_round_the_loop_is_counted(
    scan: float | None, built: dict[str, TransferFunction | Loop]
) -> None:
    gains = Gains(2.1, 2.1 / 32.0, 4.0, 0.4)
    loop = Structure(DRYER, DRYER, gains, scan=scan, **built)  # type: ignore[arg-type]
    plants = [Variation(1.0, d, t).of(DRYER) for d, t in ((1.0, 1.0), (2.0, 0.5), (0.4, 2.4))]
    judged = judge(loop, plants, (0.4, 1.0, 2.0))
    for i, plant in enumerate(plants):
        for k, ratio in enumerate((0.4, 1.0, 2.0)):
            # other route: the exact verdict about that one structure
            margins = exact(replace(loop, plant=plant * ratio))
            assert judged.stable[i, k] == margins.stable
            if margins.stable:
                peak = margins.max_sensitivity.value
                assert judged.max_sensitivity[i, k] == pytest.approx(peak, rel=1e-3)
    assert judged.stable.any()
    assert not judged.stable.all()


def test_a_loop_that_is_not_stable_has_no_peak() -> None:
    judged = judge(Loop(DRYER, DRYER, Gains(30.0, 1.0)), [DRYER], margins=True)
    assert not judged.stable[0, 0]
    assert math.isinf(judged.max_sensitivity[0, 0])
    assert (judged.gain_margin[0, 0], judged.phase_margin_deg[0, 0]) == (1.0, 0.0)


def test_a_resonance_between_two_frequencies_is_seen() -> None:
    # exact: G = 1/(s^2 + 0.002 s + 1) with gain 0.5 peaks at 0.5/0.002; other route: one by one
    ring = TransferFunction.ratio((0.5,), [(1.0, 0.002, 1.0)])
    loop = Loop(ring, ring, Gains(0.1, 0.0005))
    peak = exact(loop).max_sensitivity.value
    assert judge(loop, [ring]).max_sensitivity[0, 0] == pytest.approx(peak, rel=1e-3)


def test_a_gain_that_grazes_one_has_its_phase_margin() -> None:
    # A resonance that takes |L| just above 1 for a stretch narrower than the frequencies' spacing.
    ring = TransferFunction.ratio((1.0,), [(1.0, 0.56, 1.0)], 0.5)
    w = np.linspace(0.5, 1.5, 200_001)
    response = ring((1j * w).astype(np.complex128))
    gain = 1.0002 / float(np.abs(response).max())
    # other route: the phase where |L| is 1, on frequencies 5e-6 apart
    over = np.flatnonzero(np.diff(np.abs(gain * response) >= 1.0))
    assert len(over) == 2
    phase = np.degrees(np.abs(np.angle(-response[over]))).min()
    found = judge(Loop(ring, ring, Gains(gain)), [ring], margins=True).phase_margin_deg[0, 0]
    assert found == pytest.approx(phase, abs=0.01)


def test_gain_and_slope_stay_where_the_lags_change() -> None:
    # exact: gain of K/(T s + 1) is K, slope of k/(s (T s + 1)) is k, whatever T
    level = TransferFunction.ratio((0.02,), [(1.0, 0.0), (30.0, 1.0)], 4.0)
    varied = Variation(gain=1.5, dead_time=2.0, lag=3.0).of(level)
    assert varied.slope().value == pytest.approx(0.03)
    assert varied.dead_time == pytest.approx(8.0)
    assert min(p.real for p in varied.poles()) == pytest.approx(-1.0 / 90.0)


def test_a_dead_time_inside_a_feedback_is_refused() -> None:
    inner = DRYER.feedback(0.2)
    with pytest.raises(NotApplicable, match="dead time inside a feedback"):
        judge(Loop(DRYER, DRYER, PID), [inner])


def test_each_plant_and_gain_has_its_place() -> None:
    loop = Loop(DRYER, DRYER, PID)
    judged = judge(loop, [DRYER, Variation(lag=2.0).of(DRYER)], (0.5, 1.0, 1.5))
    assert judged.max_sensitivity.shape == (2, 3)
    assert np.all(np.diff(judged.max_sensitivity[0]) > 0.0)
