"""Which controller a record shows, as text and as JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING

from workbench.units import Amount, text, time_text

if TYPE_CHECKING:
    from workbench.records.replay import Difference, Recognised
    from workbench.study import SheetCheck
from workbench.report.words import Json, Rows, settings_text, two_columns, wrapped, yes_or_no


def recognise_data(check: SheetCheck) -> Json:
    """The answer as `recognise --json` prints it."""
    found = check.found
    data: Json = {
        "candidates": [_candidate_data(one) for one in found.candidates],
        "scan_s": found.scan_s,
        "rows": found.rows,
        "as_in_case": check.as_in_case,
    }
    if found.reason:
        data["candidates_reason"] = found.reason
    if check.as_in_case is None:
        data["as_in_case_reason"] = found.reason or "no case with a controller was given"
    data["differences"] = [
        {"what": one.what, "sheet": one.sheet, "found": one.found} for one in check.differences
    ]
    data["as_if"] = check.as_if or None
    if not check.as_if:
        data["as_if_reason"] = "no other reading of the sheet's numbers is what ran"
    return data


def _candidate_data(one: Recognised) -> Json:
    settings = one.settings
    data: Json = {
        "form": one.form,
        "gain": float(settings.gain_value),
        "integral_s": one.integral_s,
        "derivative_s": float(one.derivative_s),
        "action": one.action,
        "agreement_percent": float(one.agreement_percent),
        "derivative_filter_s": _filter_seconds(one),
        "derivative_on": settings.derivative_on,
        "setpoint_weight": float(settings.setpoint_weight) if one.weight_known else None,
        "same_as": list(one.same_as),
        "shift_rows": one.shift_rows,
    }
    if one.integral_s is None:
        data["integral_s_reason"] = "there is no integral action"
    if data["derivative_filter_s"] is None:
        data["derivative_filter_s_reason"] = "there is no derivative filter"
    if not one.weight_known:
        data["setpoint_weight_reason"] = "SP did not move"
    return data


def _filter_seconds(one: Recognised) -> float | None:
    held = one.settings.derivative_filter
    return float(held.seconds) if isinstance(held, Amount) else None


def recognise_text(check: SheetCheck, width: int) -> str:
    """The answer for people: what ran, what cannot be told apart from it, the sheet."""
    found = check.found
    if not found.candidates:
        return wrapped(f"The record cannot tell which controller ran: {found.reason}.", width)
    best, others = found.candidates[0], found.candidates[1:]
    lines = [
        wrapped(f"{found.rows} rows in automatic, a scan of {time_text(found.scan_s, 3)}.", width),
        "",
        f"{best.form} form",
        *two_columns(_rows(best), width),
    ]
    for one in others:
        lines += ["", f"the same controller in the {one.form} form", *two_columns(_own(one), width)]
    if others:
        words = "No record can tell these forms apart: they are one function from PV and SP to OP."
        lines += ["", wrapped(words, width)]
    return "\n".join([*lines, *_sheet_lines(check, width)])


def _own(one: Recognised) -> Rows:
    """The settings in the form's own terms, and in the other units that sheets use."""
    settings = one.settings
    rows: Rows = [
        ("gain", f"{text(settings.gain_value)} (band {text(100.0 / settings.gain_value, '%')})")
        if settings.gain_value
        else ("gain", "0")
    ]
    held = settings.integral
    if held is None:
        rows.append(("integral", "none"))
    elif one.form == "parallel":
        rows.append(("integral", f"{text(held.value, '1/s')} ({text(60 * held.value, '1/min')})"))
    else:
        rate = text(60.0 / held.value, "repeats/min")
        rows.append(
            ("integral", f"{text(held.value, 's')} ({text(held.value / 60, 'min')}, {rate})")
        )
    if settings.derivative is None:
        rows.append(("derivative", "none"))
    else:
        seconds = settings.derivative.value
        rows.append(("derivative", f"{text(seconds, 's')} ({text(seconds / 60, 'min')})"))
        filter_s = _filter_seconds(one)
        if filter_s:
            rows.append(
                ("filter", f"{text(filter_s, 's')} (N {text(one.derivative_s / filter_s)})")
            )
    if one.weight_known:
        rows.append(("setpoint weight", text(round(settings.setpoint_weight, 3))))
    return rows


def _rows(best: Recognised) -> Rows:
    rows = _own(best)
    if best.settings.derivative is not None:
        rows.append(("derivative on", best.settings.derivative_on))
    rows += [("action", best.action), ("agreement", text(best.agreement_percent, "%", 5))]
    if best.shift_rows:
        late = "after" if best.shift_rows > 0 else "before"
        rows.append(("OP is logged", f"{abs(best.shift_rows)} rows {late} the PV that it answers"))
    return rows


def _sheet_lines(check: SheetCheck, width: int) -> list[str]:
    if check.as_in_case is None:
        return []
    lines = ["", f"As on the sheet: {yes_or_no(check.as_in_case)}"]
    lines += two_columns([(one.what, _difference(one)) for one in check.differences], width)
    if check.as_if:
        lines.append(wrapped(f"It runs as if the sheet meant {check.as_if}.", width))
    if check.fits is not None:
        lines.append(wrapped(f"In the sheet's own terms: {settings_text(check.fits)}.", width))
    return lines


def _difference(one: Difference) -> str:
    sheet, found = (
        text(value) if isinstance(value, float | int) else value for value in (one.sheet, one.found)
    )
    return f"sheet {sheet}, record {found}"
