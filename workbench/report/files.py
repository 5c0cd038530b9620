"""What check and history answer, as text and as JSON."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

from workbench.units import harmless, quantities, text

if TYPE_CHECKING:
    from workbench.case.case import Case, Revision
    from workbench.model.pid import Controller
    from workbench.study import (
        FileCheck,
    )
from workbench.report.loops import heading
from workbench.report.words import Json, settings_text, two_columns, wrapped


def check_data(checks: Sequence[FileCheck]) -> Json:
    """The findings as `check --json` prints them."""
    return {
        "files": [
            {
                "path": harmless(str(check.path), 1000),
                "ok": bool(check.ok),
                "faults": [
                    {
                        "line": fault.line,
                        **({} if fault.line else {"line_reason": "it is about the whole file"}),
                        "key": fault.key,
                        "what": fault.what,
                        "mend": fault.mend,
                    }
                    for fault in check.faults
                ],
            }
            for check in checks
        ],
        "units": {},
    }


def check_text(checks: Sequence[FileCheck], width: int) -> str:
    """The findings for people: every fault of every file."""
    lines = []
    for check in checks:
        count = len(check.faults)
        found = "sound" if check.ok else f"NOT SOUND, {count} fault{'s' if count != 1 else ''}"
        lines.append(f"{harmless(str(check.path), 1000)}: {found}")
        for fault in check.faults:
            where = f"line {fault.line}: " if fault.line else ""
            subject = f"{fault.key}: " if fault.key else ""
            mend = f"; {fault.mend}" if fault.mend else ""
            words = f"{where}{subject}{fault.what}{mend}"
            lines.append(wrapped(words, width, "  ", "    "))
    if len(checks) > 1:
        sound = sum(1 for check in checks if check.ok)
        lines += ["", f"{sound} of {len(checks)} files are sound."]
    return "\n".join(lines)


_PREDICTED: Final = (
    ("max_sensitivity", "maximum sensitivity", ""),
    ("phase_margin_deg", "phase margin", "deg"),
    ("setpoint_iae", "setpoint IAE", "{pv} s"),
    ("load_iae", "load IAE", "{pv} s"),
)
"""Figures that a history entry may hold: field, words, unit."""


def history_data(case: Case, units: Mapping[str, str]) -> Json:
    """The history as `history --json` prints it, newest first."""
    return {
        "tag": case.loop.tag,
        "entries": [
            _entry_data(entry, number)
            for number, entry in reversed(list(enumerate(case.history, 1)))
        ],
        "units": dict(units),
    }


def _entry_data(entry: Revision, number: int) -> Json:
    """One entry with the keys of the case file, and its number."""
    data: Json = {
        "number": number,
        "at": entry.at.isoformat(),
        "who": entry.who,
        "kind": entry.kind,
        "why": entry.why,
        **({"reference": entry.reference} if entry.reference else {}),
    }
    if entry.controller is not None:
        data |= settings_data(entry.controller)
    for key, _, _ in _PREDICTED:
        value = getattr(entry, key)
        if value is not None:
            data[key] = float(value)
    data["program"] = entry.program
    return data


def settings_data(controller: Controller) -> Json:
    """The settings in the words of the case file; keys that are not there are left out."""
    data: Json = {}
    for key, declared in quantities(type(controller)).items():
        value = getattr(controller, key)
        if value is not None or key in ("integral", "derivative", "derivative_filter"):
            data[key] = declared.write(value)
    return data


def history_text(case: Case, units: Mapping[str, str], width: int) -> str:
    """The history for people, newest first."""
    lines = heading(case, width)
    if not case.history:
        return "\n".join([*lines, "No history yet."])
    for number, entry in reversed(list(enumerate(case.history, 1))):
        lines.append(wrapped(_entry_line(entry, number), width))
        if entry.controller is not None:
            words = f"{settings_text(entry.controller)} ({entry.controller.form})"
            lines.append(wrapped(words, width, "    "))
        predicted = [
            f"{label} {text(getattr(entry, key), unit.format(**units))}"
            for key, label, unit in _PREDICTED
            if getattr(entry, key) is not None
        ]
        if predicted:
            lines.append(wrapped(f"predicted: {', '.join(predicted)}", width, "    "))
        if entry.reference:
            lines.append(wrapped(f"reference: {entry.reference}", width, "    "))
        if entry.why:
            lines.append(wrapped(f"why: {entry.why}", width, "    "))
    return "\n".join(lines)


def _entry_line(entry: Revision, number: int) -> str:
    when = entry.at.isoformat(sep=" ", timespec="minutes")
    return f"{number}  {when}  {entry.kind} by {entry.who}"


@dataclass(frozen=True)
class _Change:
    """What two entries say differently."""

    key: str
    before: str
    after: str
    percent: float | None
    """By how much it grew, where both are numbers in the same unit [%]."""


def _between(case: Case, first: int, second: int) -> list[_Change]:
    """Everything that two entries say differently, in the controller's units."""
    one, other = case.history[first - 1], case.history[second - 1]
    before, after = (
        {} if e.controller is None else settings_data(e.controller) for e in (one, other)
    )
    for entry, said in ((one, before), (other, after)):
        said |= {key: getattr(entry, key) for key, _, _ in _PREDICTED if getattr(entry, key)}
    keys = [*before, *(key for key in after if key not in before)]
    return [
        _Change(
            key,
            _said(before.get(key)),
            _said(after.get(key)),
            _grown(before.get(key), after.get(key)),
        )
        for key in keys
        if before.get(key) != after.get(key)
    ]


def _grown(before: object, after: object) -> float | None:
    """By how much a number grew [%]; of two amounts, where they have the same unit."""
    (one, unit), (other, same) = _number(before), _number(after)
    if one is None or other is None or not one or unit != same:
        return None
    return 100.0 * (other - one) / abs(one)


def _number(value: object) -> tuple[float | None, str]:
    """The number that a value of an entry begins with, and its unit."""
    if isinstance(value, bool):
        return None, ""
    if isinstance(value, int | float):
        return float(value), ""
    words = str(value).split(" ", 1)
    try:
        number = float(words[0])
    except ValueError:
        return None, ""
    return (number, words[1] if len(words) > 1 else "") if math.isfinite(number) else (None, "")


_NO_PERCENT: Final = "not two numbers in the same unit"


def _said(value: object) -> str:
    """A value of an entry as it is read."""
    if isinstance(value, int | float) and not isinstance(value, bool):
        return text(value)
    return "" if value is None else str(value)


def between_data(case: Case, first: int, second: int, units: Mapping[str, str]) -> Json:
    """What changed between two entries, as `history --between --json` prints it."""
    return {
        "tag": case.loop.tag,
        "entries": [_entry_data(case.history[n - 1], n) for n in (first, second)],
        "changes": [
            {
                "key": change.key,
                "before": change.before,
                "after": change.after,
                "change_percent": change.percent,
                **({} if change.percent is not None else {"change_percent_reason": _NO_PERCENT}),
            }
            for change in _between(case, first, second)
        ],
        "units": dict(units),
    }


def between_text(case: Case, first: int, second: int, width: int) -> str:
    """What changed between two entries, for people."""
    lines = [wrapped(_entry_line(case.history[n - 1], n), width) for n in (first, second)]
    rows = [
        (
            change.key,
            f"{change.before or 'not there'} -> {change.after or 'not there'}"
            + ("" if change.percent is None else f"  ({change.percent:+.3g} %)"),
        )
        for change in _between(case, first, second)
    ]
    return "\n".join([*lines, "", *(two_columns(rows, width) or ["No difference."])])
