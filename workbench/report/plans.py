"""What a planned bump test is, as text and as JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING

from workbench.units import text, time_text

if TYPE_CHECKING:
    from workbench.records.testplan import Plan
from workbench.report.words import Json, Rows, grid, put, two_columns, wrapped


def plan_data(plan: Plan, units: dict[str, str]) -> Json:
    """The plan as `plan --json` prints it."""
    data: Json = {
        "bump_op": plan.bump_op,
        "hold_s": plan.hold_s,
        "moves": [
            {
                "at_s": move.at_s,
                "op_change": move.op_change,
                "hold_s": move.hold_s,
                "pv_reached": move.pv_reached,
            }
            for move in plan.moves
        ],
        "duration_s": plan.duration_s,
        "expected_pv_change": plan.expected_pv_change,
        "expected_standard_errors": {
            _size_key(plan): plan.standard_errors.size,
            "dead_time_s": plan.standard_errors.dead_time_s,
            "time_constants_s": list(plan.standard_errors.time_constants_s),
        },
        "enough": plan.enough,
        "interval_s": plan.interval_s,
        "cautions": list(plan.cautions),
        "path": {
            name: [float(value) for value in values]
            for name, values in zip(("time_s", "op_change", "pv_change"), plan.path, strict=True)
        },
        "units": units,
    }
    put(data, "largest_standard_error_percent", plan.certainty_percent)
    return data


def _size_key(plan: Plan) -> str:
    return "slope_per_s" if plan.model.integrating else "gain"


def plan_text(plan: Plan, units: dict[str, str], width: int) -> str:
    """The plan for people: what to do, what it will tell, what to say to operations."""
    pv, op = units["pv"], units["op"]
    rows: Rows = [
        ("bump", f"{text(plan.bump_op, op)} to each side of where OP rests"),
        ("hold", f"{time_text(plan.hold_s)} at least"),
        ("PV moves by", f"{text(plan.expected_pv_change, pv, 3)} at most"),
        ("takes", time_text(plan.duration_s, 3)),
    ]
    head = ("at", "OP moves by", "holds", "PV then is off by")
    table = [
        (
            time_text(move.at_s, 4),
            text(move.op_change, op),
            time_text(move.hold_s, 4),
            text(round(move.pv_reached, 12), pv, 3),
        )
        for move in plan.moves
    ]
    lines = ["The bump test", *two_columns(rows, width), "", *grid([head], table)]
    lines += ["", "What a fit of it will be sure of, one standard error"]
    lines += two_columns(_error_rows(plan, units), width)
    lines.append("")
    lines += [wrapped(f"Caution: {caution}", width, hang="  ") for caution in plan.cautions]
    return "\n".join(lines)


def _error_rows(plan: Plan, units: dict[str, str]) -> Rows:
    errors, model = plan.standard_errors, plan.model
    times = [t for t in (model.time_constant, model.second_time_constant) if t]
    word, unit = ("gain", units["gain"])
    if model.integrating:
        word, unit = "slope", units["slope_per_s"]

    def share(error: float, value: float) -> str:
        return f" ({text(100.0 * error / abs(value), '%', 2)})" if value else ""

    rows = [(word, f"{text(errors.size, unit, 2)}{share(errors.size, model.gain)}")]
    rows += [
        ("time constant", f"{text(error, 's', 2)}{share(error, value)}")
        for error, value in zip(errors.time_constants_s, times, strict=True)
    ]
    rows.append(("dead time", f"{text(errors.dead_time_s, 's', 2)}"))
    return rows
