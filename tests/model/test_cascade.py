"""Margins of a sampled cascade: where the loop, played scan by scan, really begins to grow."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import sampled_margins
from workbench.model.structures import NOTHING, Structure
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events

FAST = TransferFunction.ratio((1.0,), [(3.0, 1.0)], 0.7)
SLOW = TransferFunction.ratio((1.3,), [(20.0, 1.0), (4.0, 1.0)], 3.3)
MODEL = TransferFunction.ratio((1.4,), [(22.0, 1.0)], 5.0)
INNER = Loop(FAST, NOTHING, Gains(1.5, 0.3, 0.3, 0.1, 0.6, 1.0), scan=0.5)


def _cascade(scan: float, delay: float = 0.0, model: TransferFunction | None = None) -> Structure:
    return Structure(
        SLOW,
        NOTHING,
        Gains(1.2, 0.05, 2.0, 0.4),
        scan=scan,
        computing_delay=delay,
        pv_filter=0.8,
        inner=INNER,
        model=model,
    )


def _grows(loop: Structure) -> bool:
    """Other route: the loop played scan by scan after a setpoint step."""
    moves = np.abs(np.diff(simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 2500.0)).pv))
    third = len(moves) // 3
    return bool(moves[2 * third :].max() > moves[third : 2 * third].max())


@pytest.mark.parametrize(
    ("scan", "delay", "model"),
    [(0.5, 0.0, None), (1.0, 0.3, None), (2.0, 0.5, None), (5.0, 1.0, None), (1.0, 0.0, MODEL)],
)
def test_the_gain_margin_is_where_the_cascade_begins_to_grow(
    scan: float, delay: float, model: TransferFunction | None
) -> None:
    loop = _cascade(scan, delay, model)
    margin = sampled_margins(loop).gain_margin.value
    assert margin is not None
    for share, grows in ((0.99, False), (1.01, True)):
        more = replace(loop, plant=share * margin * SLOW)
        assert _grows(more) == grows
        assert sampled_margins(more).stable != grows


def test_the_delay_margin_is_where_the_cascade_begins_to_grow() -> None:
    # Whole outer scans of it, so that the hold is the same with it and without.
    loop = _cascade(0.5)
    margin = sampled_margins(loop).delay_margin_s.value
    assert margin is not None
    whole = 0.5 * np.floor(margin / 0.5)
    late = TransferFunction.ratio((1.0,), [], float(whole))
    assert not _grows(replace(loop, plant=SLOW * late))
    later = TransferFunction.ratio((1.0,), [], float(whole) + 0.5)
    assert _grows(replace(loop, plant=SLOW * later))


def test_an_inner_loop_that_is_done_at_once_is_not_there() -> None:
    # exact: with Ki h = 1 round a plant of 1 the inner output is its setpoint at the same scan
    inner = Loop(TransferFunction.constant(1.0), NOTHING, Gains(0.0, 2.0), scan=0.5)
    single = Loop(SLOW, NOTHING, Gains(1.2, 0.05, 2.0, 0.4), scan=2.0)
    cascade = Structure(SLOW, NOTHING, single.gains, scan=2.0, inner=inner)
    one, wanted = sampled_margins(cascade), sampled_margins(single)
    assert one.gain_margin.value == pytest.approx(wanted.gain_margin.value, rel=1e-6)
    assert one.phase_margin_deg.value == pytest.approx(wanted.phase_margin_deg.value, rel=1e-6)
    assert one.max_sensitivity.value == pytest.approx(wanted.max_sensitivity.value, rel=1e-6)
