"""Why a loop swings, as text and as JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING

from workbench.units import harmless, text, time_text

if TYPE_CHECKING:
    from workbench.records.diagnose import Diagnosis
from workbench.report.words import Json, Rows, figure_words, note_lines, put, two_columns, wrapped


def diagnose_data(found: Diagnosis) -> Json:
    """The diagnosis as `diagnose --json` prints it."""
    first = found.swings[0] if found.swings else None
    oscillation: Json = {"present": found.present, "period_s": first and first.period_s}
    if first is None:
        oscillation["period_s_reason"] = "PV does not swing regularly"
    put(oscillation, "regularity", found.regularity)
    oscillation["all"] = [
        {
            "period_s": swing.period_s,
            "regularity": swing.regularity,
            "amplitude": swing.amplitude,
            "share_percent": swing.share_percent,
        }
        for swing in found.swings
    ]
    valve: Json = {"verdict": found.valve_verdict}
    put(valve, "stick_slip_percent", found.stick_slip_percent)
    put(valve, "deadband_percent", found.deadband_percent)
    valve["correlation_shift"] = found.correlation and found.correlation.shift
    valve["shape_index"] = found.shape and found.shape.index
    for key in ("correlation_shift", "shape_index"):
        if valve[key] is None:
            valve[f"{key}_reason"] = "the test does not apply to this record"
    data: Json = {
        "record": harmless(found.record.path),
        "rows": len(found.record.time),
        "oscillation": oscillation,
        "upsets": None
        if found.upsets is None
        else {
            "count": found.upsets.count,
            "most_at_once": found.upsets.most_at_once,
            "alarm": found.upsets.alarm,
        },
        "valve": valve,
    }
    if found.upsets is None:
        data["upsets_reason"] = _NO_UPSETS
    put(data, "minimum_variance_index", found.minimum_variance_index)
    put(data, "time_at_limit_percent", found.time_at_limit_percent)
    put(data, "time_in_auto_percent", found.time_in_auto_percent)
    data["modes_percent"] = {harmless(mode, 40): share for mode, share in found.modes.items()}
    data["likely_cause"] = found.likely_cause
    data["reasons"] = [str(evidence) for evidence in found.evidence]
    data["notes"] = [note.text for note in found.notes]
    data["units"] = {"pv": "PV unit of the record", "op": "OP unit of the record"}
    return data


_NO_UPSETS = "it needs the PV range and the integral time: give both, or a case"


def diagnose_text(found: Diagnosis, width: int) -> str:
    """The diagnosis for people: the cause first, what speaks for and against, the figures."""
    lines = [wrapped(f"Likely cause: {_CAUSES[found.likely_cause]}.", width, hang="  ")]
    if found.evidence:
        lines.append("")
        lines += [wrapped(f"{evidence}", width, "  ", "    ") for evidence in found.evidence]
    lines += ["", "Swing of PV", *two_columns(_swing_rows(found), width)]
    lines += ["", "Valve", *two_columns(_valve_rows(found), width)]
    lines += ["", "Loop", *two_columns(_loop_rows(found), width)]
    return "\n".join([*lines, *note_lines(found.notes, width)])


_CAUSES = {
    "tuning": "the tuning: the loop swings by itself",
    "valve": "the valve: it sticks",
    "upset": "an upset from outside",
    "sensor": "the sensor",
    "none": "none, the loop does not swing",
    "undecided": "undecided",
}


def _swing_rows(found: Diagnosis) -> Rows:
    rows: Rows = [
        (
            "period",
            f"{time_text(swing.period_s, 3)}, regularity {text(swing.regularity, digits=2)}, "
            f"amplitude {text(swing.amplitude, digits=3)} PV, "
            f"{text(swing.share_percent, '%', 2)} of the variance",
        )
        for swing in found.swings
    ]
    if not rows:
        rows = [("regular", f"no; regularity {figure_words(found.regularity)}")]
    if found.upsets is None:
        return [*rows, ("upsets", f"not counted: {_NO_UPSETS}")]
    said = f"{found.upsets.count}, at once at most {text(found.upsets.most_at_once, digits=3)}"
    alarm = "alarm above 10" if found.upsets.alarm else "no alarm"
    return [*rows, ("upsets", f"{said} ({alarm})")]


def _valve_rows(found: Diagnosis) -> Rows:
    rows: Rows = [("verdict", found.valve_verdict)]
    if found.correlation is not None:
        shift, height = (
            text(v, digits=2) for v in (found.correlation.shift, found.correlation.height)
        )
        said = f"{found.correlation.verdict} (shift {shift}, height {height})"
        rows.append(("correlation", said))
    if found.shape is not None:
        index = text(found.shape.index, digits=2)
        said = f"{found.shape.verdict} (index {index}, {found.shape.half_waves} half waves)"
        rows.append(("shape", said))
    rows.append(("apparent stick-slip", figure_words(found.stick_slip_percent, "% of OP range")))
    rows.append(("lost motion", figure_words(found.deadband_percent, "% of OP range")))
    return rows


def _loop_rows(found: Diagnosis) -> Rows:
    index = figure_words(found.minimum_variance_index)
    if found.minimum_variance_index.value is not None:
        index += " (1 is the least variance that feedback can leave)"
    rows: Rows = [
        ("minimum variance index", index),
        ("time at a limit", figure_words(found.time_at_limit_percent, "%")),
        ("time in automatic", figure_words(found.time_in_auto_percent, "%")),
    ]
    if len(found.modes) > 1:
        shares = ", ".join(f"{mode} {text(share, '%', 3)}" for mode, share in found.modes.items())
        rows.append(("modes", shares))
    return rows
