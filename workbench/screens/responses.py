"""The loop over frequency as a picture: open loop and sensitivities, the margins marked."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Final

import numpy as np

from workbench import charts
from workbench.charts import Curve, Floats, Pane
from workbench.units import text

if TYPE_CHECKING:
    from workbench.model.robustness import Margins
    from workbench.study import FrequencyResponse

_GAIN_BOUNDS: Final = (-2.0 / 3.0, 2.0 / 3.0)
"""The axis of the gain goes one span beyond: from 0.01 to 100."""
_PHASE_BOUNDS: Final = (-200.0, -80.0)
"""One span beyond: from -320 to 40 deg."""
_PEAK_BOUNDS: Final = (0.0, 3.0)
"""One span beyond: up to 6."""


def open_loop_panes(
    present: FrequencyResponse, margins: Margins, pinned: Mapping[str, FrequencyResponse]
) -> tuple[Pane, ...]:
    """Gain above, phase below, with the lines that the margins are measured from."""
    names = charts.pin_names(pinned)
    found, at = present.open_loop, decades(present.open_loop.frequency)
    gains = [
        Curve(decades(r.open_loop.frequency), decades(r.open_loop.gain), ink, names[ink])
        for ink, r in pinned.items()
    ]
    phases = [
        Curve(decades(r.open_loop.frequency), r.open_loop.phase_deg, ink, names[ink])
        for ink, r in pinned.items()
    ]
    ends = at[[0, -1]] if len(at) else np.zeros(0)
    gains.append(Curve(ends, np.zeros(ends.size), "reference", None))
    gains.append(Curve(at, decades(found.gain), "response", None))
    phases.append(Curve(ends, np.full(ends.size, -180.0), "reference", None))
    phases.append(Curve(at, found.phase_deg, "response", None))
    _mark_margins(present, margins, gains, phases)
    return (
        Pane("gain", tuple(gains), _GAIN_BOUNDS, 1.0, "decades"),
        Pane("phase deg", tuple(phases), _PHASE_BOUNDS, 1.0, "degrees"),
    )


def _mark_margins(
    present: FrequencyResponse, margins: Margins, gains: list[Curve], phases: list[Curve]
) -> None:
    """A mark on each curve where a margin is read off."""
    margin, where = margins.gain_margin.value, margins.phase_crossover_rad_s.value
    if margin and where and (there := present.at(where)):
        name = f"GM {text(margin, digits=3)}"
        gains.append(_point(where, -math.log10(margin), "gain-margin", name))
        phases.append(_point(where, there.phase_deg, "gain-margin", None))
    phase, where = margins.phase_margin_deg.value, margins.gain_crossover_rad_s.value
    if phase is not None and where and (there := present.at(where)):
        gains.append(_point(where, 0.0, "phase-margin", None))
        name = f"PM {text(phase, 'deg', digits=3)}"
        phases.append(_point(where, there.phase_deg, "phase-margin", name))


def sensitivity_panes(
    present: FrequencyResponse, margins: Margins, pinned: Mapping[str, FrequencyResponse]
) -> tuple[Pane, ...]:
    """|S| above, |T| below, with their peaks."""
    names = charts.pin_names(pinned)
    peaks = (
        ("sensitivity", "|S|", "Ms", margins.max_sensitivity, present.sensitivity_peak_rad_s),
        (
            "complementary_sensitivity",
            "|T|",
            "Mt",
            margins.max_complementary_sensitivity,
            present.complementary_peak_rad_s,
        ),
    )
    panes = []
    for name, told, peak, figure, where in peaks:
        curves = [
            Curve(decades(r.open_loop.frequency), getattr(r.open_loop, name), ink, names[ink])
            for ink, r in pinned.items()
        ]
        frequency = present.open_loop.frequency
        ends = decades(frequency[[0, -1]]) if len(frequency) else np.zeros(0)
        curves.append(Curve(ends, np.ones(ends.size), "reference", None))
        curves.append(Curve(decades(frequency), getattr(present.open_loop, name), "response", None))
        if figure.value is not None and where is not None:
            words = f"{peak} {text(figure.value, digits=3)}"
            curves.append(_point(where, figure.value, "peak", words))
        panes.append(Pane(told, tuple(curves), _PEAK_BOUNDS))
    return tuple(panes)


def _point(frequency: float, y: float, ink: str, name: str | None) -> Curve:
    return Curve(decades(np.array([frequency])), np.array([y]), ink, name)


def decades(values: Floats) -> Floats:
    """Logarithms to 10; of nothing, far below everything."""
    with np.errstate(divide="ignore"):
        found: Floats = np.log10(values)
    return found
