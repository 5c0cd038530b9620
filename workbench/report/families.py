"""What a loop does over a family of plants, and how much plant error it survives, in words."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Final

from workbench.report.words import Json, grid, put, wrapped
from workbench.units import Figure, text

if TYPE_CHECKING:
    from workbench.study import FamilyFigures, Tolerance

FAMILY: Final = (
    ("max_sensitivity", "maximum sensitivity", ""),
    ("gain_margin", "gain margin", ""),
    ("phase_margin_deg", "phase margin", "deg"),
    ("setpoint_iae", "setpoint IAE", "{pv} s"),
    ("setpoint_overshoot_percent", "setpoint overshoot", "%"),
    ("load_iae", "load IAE", "{pv} s"),
    ("load_peak_deviation", "load peak", "{pv}"),
)
"""Figure of a family and key in JSON, words, unit."""


def family_data(found: FamilyFigures | None) -> Json:
    """The key `family` of an answer: the nominal plant under the bare key, then 95 % and worst."""
    if found is None:
        return {"family": None, "family_reason": "the case states no family of plants"}
    if found.reason:
        return {"family": None, "family_reason": found.reason}
    data: Json = {
        "plants": found.plants,
        "stable_percent": float(found.stable_percent),
        "worst_plant": found.worst_plant,
    }
    for key, among in found.figures.items():
        put(data, key, among.nominal)
        put(data, f"{key}_95", among.at_95)
        put(data, f"{key}_worst", among.worst)
    return {"family": data}


def family_lines(found: FamilyFigures | None, units: Mapping[str, str], width: int) -> list[str]:
    """The family for people; nothing where there is none."""
    if found is None:
        return []
    if found.reason:
        return ["", wrapped(f"The family is not judged: {found.reason}.", width)]
    share = text(found.stable_percent, "%", digits=3)
    said = f"Family of {found.plants} plants: stable with {share} of them; worst: "
    lines = ["", wrapped(f"{said}{found.worst_plant}.", width)]
    rows = []
    for key, label, unit in FAMILY:
        among = found.figures.get(key)
        if among is not None:
            own = unit.format(**units)
            name = f"{label}, {own}" if own else label
            cells = [among.nominal, among.at_95, among.worst]
            rows.append([name, *(_cell(each) for each in cells)])
    return [*lines, *grid([["", "nominal", "95 %", "worst"]], rows)]


def _cell(figure: Figure) -> str:
    if figure.value is None:
        return "unstable" if "not stable" in figure.reason else "none"
    return text(figure.value, digits=3)


# --- tolerance -----------------------------------------------------------------------------------


def distance_lines(found: Tolerance) -> list[str]:
    """How far the plant may change, one line for each way."""
    limit = text(found.limit, digits=3)
    rows = [
        [each.way, _ratio(each.until_limit), _ratio(each.until_unstable)]
        for each in found.distances
    ]
    return grid([["", f"Ms {limit} at", "unstable at"]], rows)


def _ratio(figure: Figure) -> str:
    return figure.reason if figure.value is None else f"x {text(figure.value, digits=4)}"


def tolerance_lines(found: Tolerance, picture: Sequence[str], width: int) -> list[str]:
    """The map, as `charts` has drawn it, and its distances for people."""
    loop = "sampled" if found.sampled else "analogue"
    title = f"Tolerance of the {loop} loop: plant gain across, {found.axis} upwards"
    told = [wrapped(line, width) for line in distance_lines(found)]
    return ["", wrapped(title, width), "", *(row.rstrip() for row in picture), "", *told]


def tolerance_data(found: Tolerance) -> Json:
    """The key `tolerance` of an answer; a row of the map for each ratio of the other axis."""
    other = found.axis.replace(" ", "_")
    rows = found.max_sensitivity.tolist()
    data: Json = {
        "loop": "sampled" if found.sampled else "analogue",
        "max_sensitivity_limit": float(found.limit),
        "gain_ratios": found.gain_ratios.tolist(),
        f"{other}_ratios": found.other_ratios.tolist(),
        "stable": found.stable.tolist(),
        "max_sensitivity": [[None if math.isinf(ms) else ms for ms in row] for row in rows],
        "max_sensitivity_reason": "null where the loop is not stable",
    }
    for each in found.distances:
        way: Json = {}
        put(way, "until_limit", each.until_limit)
        put(way, "until_unstable", each.until_unstable)
        data[each.way.replace(", ", " ").replace(" ", "_")] = way
    return {"tolerance": data}
