"""What survey answers, as text and as JSON."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from typing import TYPE_CHECKING

from workbench.report.words import Json, grid, put, wrapped
from workbench.units import harmless, text

if TYPE_CHECKING:
    from workbench.study import Surveyed


def survey_data(rows: Sequence[Surveyed]) -> Json:
    """The loops as `survey --json` prints them, the worst first."""
    loops: list[Json] = []
    for row in rows:
        data: Json = {
            "tag": row.tag,
            "service": row.service,
            "path": harmless(row.path, 1000),
            "status": row.status,
            "stable": row.stable,
        }
        if row.stable is None:
            data["stable_reason"] = row.max_sensitivity.reason
        put(data, "max_sensitivity", row.max_sensitivity)
        put(data, "age_days", row.age_days)
        data["findings"] = list(row.findings)
        loops.append(data)
    return {"loops": loops, "units": {}}


def survey_text(rows: Sequence[Surveyed], width: int) -> str:
    """The loops for people: one line each, and below it what was found."""
    head = ("loop", "status", "Ms", "model age", "file")
    table = [
        (
            harmless(row.tag, 24),
            row.status,
            "-" if row.max_sensitivity.value is None else text(row.max_sensitivity.value, digits=3),
            "-" if row.age_days.value is None else text(row.age_days.value, "d"),
            "",
        )
        for row in rows
    ]
    first, *lines = grid([head], table)
    told = [first]
    for line, row in zip(lines, rows, strict=True):
        path = harmless(row.path, 1000)
        joined = f"{line}  {path}"
        told += [joined] if len(joined) <= width else [line, wrapped(path, width, "    ")]
        told += [wrapped(finding, width, "    ", "      ") for finding in row.findings]
    count = Counter(row.status for row in rows)
    total = ", ".join(f"{number} {status}" for status, number in count.items())
    return "\n".join([*told, "", f"{len(rows)} loops: {total}."])
