"""The panes of the frequency views: marks stand on the curves, and only there."""

from __future__ import annotations

from pathlib import Path

import pytest

from workbench import study
from workbench.case.files import read_case
from workbench.charts import Pane
from workbench.screens.responses import open_loop_panes

CASES = Path(__file__).parents[2] / "cases"


def panes_of(name: str) -> tuple[Pane, ...]:
    """The open loop of a shipped case."""
    case = read_case(CASES / name).case
    judged = study.assess(case).judged
    assert judged is not None
    return open_loop_panes(study.frequency_response(case), judged.margins, {})


def marks(pane: Pane) -> dict[str, tuple[float, float]]:
    """Where each mark of one point stands."""
    return {c.ink: (float(c.x[0]), float(c.y[0])) for c in pane.curves if c.x.size == 1}


def test_margins_are_marked_on_both_curves_at_one_frequency() -> None:
    gain, phase = map(marks, panes_of("TIC-307.toml"))
    for ink in ("gain-margin", "phase-margin"):
        assert gain[ink][0] == phase[ink][0]
    # exact: a gain of 1 at the phase margin, a phase of -180 deg at the gain margin
    assert gain["phase-margin"][1] == 0.0
    assert phase["gain-margin"][1] == pytest.approx(-180.0, abs=1.5)


def test_a_margin_beyond_the_frequencies_shown_has_no_mark() -> None:
    """The gain margin of the level loop is read off where its gain is below 0.01."""
    gain, phase = map(marks, panes_of("LIC-112.toml"))
    assert set(gain) == set(phase) == {"phase-margin"}
