"""Loops round many plants, made at random, against the exact route for one loop at a time."""

from __future__ import annotations

import math
import random
from dataclasses import replace

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import Margins, analogue_margins, sampled_margins
from workbench.model.spread import Judged, judge
from workbench.model.transfer import TransferFunction
from workbench.model.variation import Variation

RATIOS = (0.4, 1.0, 2.2)
BAND = 1e-6
"""Share of a gain or a dead time about the boundary in which a verdict may go either way."""


def exact(loop: Loop) -> Margins:
    """The other route: each loop by itself, by its characteristic equation."""
    return analogue_margins(loop) if loop.scan is None else sampled_margins(loop)


def spreads_judged(size: int, seed: int) -> tuple[float, list[str]]:
    """Largest error of an Ms as a share, and wrong verdicts, crossovers and worse."""
    draw, worst = random.Random(seed), 0.0
    failures: list[str] = []
    for _ in range(size):
        loop, plants = _loop(draw)
        judged = judge(loop, plants, RATIOS, margins=True)
        for i, plant in enumerate(plants):
            for k, ratio in enumerate(RATIOS):
                one = replace(loop, plant=plant * ratio)
                apart, wrong = _apart(exact(one), judged, (i, k))
                if wrong == "verdict" and _on_the_brink(one):
                    continue
                worst = max(worst, apart)
                if wrong:
                    failures.append(f"{wrong}: {one}")
    return worst, failures


def _apart(found: Margins, judged: Judged, at: tuple[int, int]) -> tuple[float, str]:
    if found.stable != bool(judged.stable[at]):
        return 0.0, "verdict"
    if not found.stable:
        return 0.0, ""
    pairs = (
        (found.gain_margin.value, float(judged.gain_margin[at]), 20.0, "gain margin"),
        (found.phase_margin_deg.value, float(judged.phase_margin_deg[at]), math.inf, "phase"),
    )
    for value, ours, counts, name in pairs:
        this = math.inf if value is None else value
        if min(this, ours) <= counts and not math.isclose(this, ours, rel_tol=1e-5):
            return 0.0, f"{name} {this:g} and {ours:g}"
    assert found.max_sensitivity.value is not None
    return abs(float(judged.max_sensitivity[at]) / found.max_sensitivity.value - 1.0), ""


def _on_the_brink(loop: Loop) -> bool:
    """The verdict changes within the band."""
    return (
        len({exact(replace(loop, plant=loop.plant * (1.0 + e))).stable for e in (-BAND, BAND)}) > 1
    )


def _between(draw: random.Random, low: float, high: float) -> float:
    return math.exp(draw.uniform(math.log(low), math.log(high)))


def _plant(draw: random.Random) -> TransferFunction:
    late = draw.choice((0.0, _between(draw, 0.1, 100.0), _between(draw, 1.0, 20.0)))
    gain = draw.choice((-1.0, 1.0)) * _between(draw, 0.2, 5.0)
    one, other = (_between(draw, 1.0, 100.0) for _ in range(2))
    swinging = (one * one, 2.0 * draw.uniform(0.02, 0.9) * one, 1.0)
    lags = [(one, 1.0), (other, 1.0)]
    kinds = (
        ((gain,), lags[:1], late),
        ((gain,), lags, late),
        ((gain,), [swinging], late),
        ((gain * draw.uniform(-30.0, 30.0), gain), lags, late),
        ((0.02 * gain,), [(1.0, 0.0)], late),
        ((0.02 * gain,), [(1.0, 0.0), (one, 1.0)], late),
        ((gain,), [(10.0 + one, -1.0)], 0.1 * late),
        ((gain,), lags[:1] * draw.randrange(2, 8), late),
    )
    return TransferFunction.ratio(*draw.choice(kinds))


def _loop(draw: random.Random) -> tuple[Loop, list[TransferFunction]]:
    plant = _plant(draw)
    steady = plant.gain().value or plant.slope().value or 1.0
    gain = _between(draw, 0.05, 3.0) / abs(plant.gain().value or 1.0)
    integral = gain / _between(draw, 3.0, 200.0) if draw.random() < 0.85 else 0.0
    lead = draw.choice((0.0, _between(draw, 1.0, 10.0)))
    loop = Loop(
        plant,
        plant,
        Gains(gain, integral, gain * lead, lead / 10.0),
        # One in ten with the wrong action.
        reverse=(steady > 0.0) is (draw.random() < 0.9),
        scan=draw.choice((None, None, _between(draw, 0.2, 10.0))),
        pv_filter=draw.choice((0.0, _between(draw, 0.5, 5.0))),
    )
    varied = [
        Variation(1.0, _between(draw, 0.4, 2.5), _between(draw, 0.4, 2.5)).of(plant)
        for _ in range(3)
    ]
    return loop, [plant, *varied]
