"""Results in words and in JSON: the answers of `study`, for people and for scripts.

Nothing is computed and nothing is printed here.  Text is plain, its own words are ASCII, every
number wears its unit, and lines are wrapped to the width that is asked for.  JSON is a dictionary
of plain values: a figure that does not exist is `None` with its reason beside it.
"""

from __future__ import annotations

import csv
import io
import re
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Final

from workbench.units import Amount, Figure, Note, harmless, quantities, text, time_text

if TYPE_CHECKING:
    from workbench.case.case import Case, Revision
    from workbench.model.pid import Controller
    from workbench.model.response import Signal
    from workbench.model.robustness import Margins
    from workbench.records.identify import Candidate, Fit
    from workbench.study import (
        Assessment,
        Conversion,
        Evaluation,
        FileCheck,
        LoopFigures,
        PlantFigures,
        Prediction,
        Proposal,
        Reduced,
        Response,
        Trend,
    )

Json = dict[str, object]
Rows = list[tuple[str, str]]

_JOIN: Final = "\N{NO-BREAK SPACE}"
"""Stands for a space at which a line must not end; never printed."""

# --- words and columns ----------------------------------------------------------------------------


def wrapped(words: str, width: int, indent: str = "", hang: str | None = None) -> str:
    """A paragraph of at most `width` columns; nothing in it can move a terminal's cursor."""
    # A number and its unit stay on one line: the break is kept from the space between them.
    joined = re.sub(r"(?<=\d) (?=[^\s\d])", _JOIN, harmless(words, 2000))
    filled = textwrap.fill(
        joined,
        width,
        initial_indent=indent,
        subsequent_indent=indent if hang is None else hang,
        break_on_hyphens=False,
    )
    return filled.replace(_JOIN, " ")


def _table(rows: Rows, width: int, indent: str = "  ") -> list[str]:
    """Two aligned columns; a long value goes on below itself."""
    column = max((len(label) for label, _ in rows), default=0) + 2
    lines = []
    for label, value in rows:
        head = f"{indent}{label.ljust(column)}"
        lines.append(wrapped(value, width, head, " " * len(head)))
    return lines


def _grid(head: Sequence[Sequence[str]], rows: Sequence[Sequence[str]]) -> list[str]:
    """Columns as wide as their words, the first to the left and the rest to the right."""
    every = [*head, *rows]
    widths = [max(len(row[i]) for row in every) for i in range(len(every[0]))]
    return [
        "  ".join(
            word.rjust(wide) if i else word.ljust(wide)
            for i, (word, wide) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in every
    ]


def _notes(notes: Iterable[Note], width: int) -> list[str]:
    """Remarks, each under its own word; the same remark once."""
    told = dict.fromkeys((note.severity, note.text) for note in notes)
    words = {"info": "Note", "caution": "Caution"}
    lines = [wrapped(f"{words[severity]}: {said}", width, hang="  ") for severity, said in told]
    return ["", *lines] if lines else []


def _handover(width: int) -> list[str]:
    """The caution wherever settings leave the tool."""
    from workbench.study import HANDOVER

    return ["", *(wrapped(sentence, width, hang="  ") for sentence in HANDOVER)]


def _figure(figure: Figure, unit: str = "") -> str:
    """A figure with its unit, or why there is none."""
    if figure.value is None:
        return f"none: {figure.reason}" if figure.reason else "none"
    return text(figure.value, unit)


def _time(figure: Figure) -> str:
    """A time, or why there is none."""
    return time_text(figure.value) if figure.value is not None else _figure(figure)


def _yes(claim: bool) -> str:
    return "yes" if claim else "no"


def _put(target: Json, key: str, figure: Figure) -> None:
    """A figure under its key, with the reason beside it where there is none."""
    target[key] = None if figure.value is None else float(figure.value)
    if figure.value is None:
        target[f"{key}_reason"] = figure.reason or "it is not known"


def _noted(notes: Iterable[Note]) -> list[Json]:
    return [{"severity": note.severity, "text": note.text} for note in notes]


def _pairs(values: Iterable[complex]) -> list[list[float]]:
    """[real, imaginary] of each pole or zero; `+ 0.0` turns a minus zero over."""
    return [[float(value.real) + 0.0, float(value.imag) + 0.0] for value in values]


def _points(values: Sequence[complex]) -> str:
    """Poles or zeros on one line, a pair of complex ones once."""
    shown = []
    for value in values:
        real = text(value.real)
        if abs(value.imag) <= 1e-9 * abs(value):
            shown.append(real)
        elif value.imag > 0:
            shown.append(f"{real} +- {text(value.imag)} i")
    return f"{', '.join(shown)} 1/s" if shown else "none"


# --- the controller in words ----------------------------------------------------------------------


def settings_text(controller: Controller) -> str:
    """The settings as their sheet shows them, on one line."""
    gain = (
        f"gain {text(controller.gain)}"
        if controller.gain is not None
        else f"proportional band {text(controller.proportional_band)} %"
    )
    parts = [
        gain,
        f"integral {_amount(controller.integral)}",
        f"derivative {_amount(controller.derivative)}",
    ]
    return ", ".join(parts)


def _amount(amount: Amount | None, digits: int = 4) -> str:
    """An amount as it is read, in its own unit."""
    return "none" if amount is None else text(amount.value, amount.unit, digits)


def _integral_s(controller: Controller | None) -> Figure:
    """Integral time [s], whatever the form and the unit."""
    if controller is None:
        return Figure(None, "there is no controller")
    if controller.integral is None:
        return Figure(None, "there is no integral action")
    if controller.form != "parallel":
        return Figure(controller.integral.seconds)
    if not controller.gain_value:
        return Figure(None, "the gain is 0, so there is no integral time")
    return Figure(controller.gain_value / controller.integral.per_second)


def _derivative_s(controller: Controller | None) -> Figure:
    """Derivative time [s], whatever the form and the unit; 0 where there is none."""
    if controller is None:
        return Figure(None, "there is no controller")
    if controller.derivative is None:
        return Figure(0.0)
    if controller.form != "parallel":
        return Figure(controller.derivative.seconds)
    if not controller.gain_value:
        return Figure(None, "the gain is 0, so there is no derivative time")
    return Figure(controller.derivative.seconds / controller.gain_value)


# --- assess ---------------------------------------------------------------------------------------


def assess_data(
    case: Case,
    found: Assessment,
    units: Mapping[str, str],
    small: Sequence[Reduced] | None = None,
) -> Json:
    """The assessment as `assess --json` prints it, with the small models where they are given."""
    plant = _plant_data(found.plant)
    if small is not None:
        plant["small_models"] = [_small_data(model) for model in small]
    data: Json = {"tag": case.loop.tag, "plant": plant}
    missing = "there is no controller"
    if found.loop is not None:
        missing = found.sampled_reason or "the controller has no scan interval"
    for key, loop in (("loop", found.loop), ("sampled", found.sampled)):
        data[key] = None if loop is None else _loop_data(loop, found)
        if loop is None:
            data[f"{key}_reason"] = missing
    data["valve"] = {
        "meaning": case.op.meaning,
        "closes_on_rise": bool(case.op.valve_closes_on_rise),
    }
    data["action"] = found.action
    if found.action is None:
        data["action_reason"] = missing
    data["notes"] = _noted(found.notes)
    data["units"] = dict(units)
    return data


def _plant_data(plant: PlantFigures) -> Json:
    data: Json = {"formula": plant.formula}
    _put(data, "gain", plant.gain)
    _put(data, "gain_percent_per_percent", plant.gain_percent)
    _put(data, "slope_per_s", plant.slope_per_s)
    data["stable"] = bool(plant.stable)
    data["integrating"] = bool(plant.integrating)
    for key, values, reason in (
        ("poles", plant.poles, plant.poles_reason),
        ("zeros", plant.zeros, plant.zeros_reason),
    ):
        data[key] = None if reason else _pairs(values)
        if reason:
            data[f"{key}_reason"] = reason
    data["dead_time_s"] = float(plant.dead_time_s)
    return data


def _small_data(model: Reduced) -> Json:
    data: Json = {"method": model.method, "lags": model.lags, "formula": model.formula or None}
    if model.reason:
        data["formula_reason"] = model.reason
    _put(data, "peak_step_error_percent", model.peak_step_error_percent)
    _put(data, "phase_error_deg", model.phase_error_deg)
    return data


_MARGINS: Final = (
    ("gain_margin", "gain margin", ""),
    ("gain_margin_lower", "gain margin, downwards", ""),
    ("phase_margin_deg", "phase margin", "deg"),
    ("delay_margin_s", "delay margin", "s"),
    ("max_sensitivity", "maximum sensitivity", ""),
    ("max_complementary_sensitivity", "maximum complementary sensitivity", ""),
    ("gain_crossover_rad_s", "gain crossover", "rad/s"),
    ("phase_crossover_rad_s", "phase crossover", "rad/s"),
)
"""Field of `Margins` and key in JSON -> words, unit."""


def _loop_data(loop: LoopFigures, found: Assessment) -> Json:
    margins = loop.margins
    data: Json = {"stable": bool(margins.stable)}
    _put(data, "gain", Figure(found.gain))
    _put(data, "gain_op_per_pv", Figure(found.gain_op_per_pv))
    if not margins.stable:
        data["stable_reason"] = margins.reason
    for key, _, _ in _MARGINS:
        _put(data, key, getattr(margins, key))
    _put(data, "final_pv_after_setpoint_step", loop.final_pv_after_setpoint_step)
    _put(data, "final_pv_after_load_step", loop.final_pv_after_load_step)
    return data


def assess_text(
    case: Case,
    found: Assessment,
    units: Mapping[str, str],
    width: int,
    small: Sequence[Reduced] | None = None,
) -> str:
    """The assessment for people, with the small models where they are given."""
    pv, op = units["pv"], units["op"]
    plant = found.plant
    rows: Rows = [("formula", plant.formula)]
    if plant.integrating:
        rows.append(("gain", f"none, {plant.gain.reason}"))
        rows.append(("slope", _figure(plant.slope_per_s, f"{pv}/s per {op}")))
    else:
        percent = f", {_figure(plant.gain_percent)} in percent of both spans"
        percent = "" if plant.gain.value is None else percent
        rows.append(("gain", _figure(plant.gain, f"{pv} per {op}") + percent))
    rows += [
        ("dead time", time_text(plant.dead_time_s)),
        ("stable", _yes(plant.stable) + (", integrating" if plant.integrating else "")),
        ("poles", plant.poles_reason or _points(plant.poles)),
        ("zeros", plant.zeros_reason or _points(plant.zeros)),
        ("OP is", found.valve),
    ]
    lines = [*_title(case, width, found.action), "Plant", *_table(rows, width)]
    if small is not None:
        lines += ["", "Small models of the plant", *_small_rows(small, width)]
    if found.gain is not None:
        own = f"{text(found.gain)} in percent of both spans, {text(found.gain_op_per_pv)} {op}"
        lines += ["", wrapped(f"Controller gain {own} per {pv}.", width)]
    for title, loop in (("analogue", found.loop), ("sampled", found.sampled)):
        if loop is not None:
            lines += ["", f"Loop, {title}", *_table(_loop_rows(loop, units), width)]
    if found.loop is None:
        lines += ["", wrapped("No controller is given, so no loop is judged.", width)]
    if found.sampled_reason:
        lines += ["", "Loop, sampled", *_table([("none", found.sampled_reason)], width)]
    told = [note for note in found.notes if not note.text.startswith("NOT STABLE")]
    return "\n".join([*lines, *_notes(told, width)])


def _small_rows(small: Sequence[Reduced], width: int) -> list[str]:
    rows = []
    for model in small:
        lags = "one lag" if model.lags == 1 else f"{model.lags} lags"
        off = (
            f"; off by {_figure(model.peak_step_error_percent, '%')} of the step response at most,"
            f" phase {_figure(model.phase_error_deg, 'deg')} at the phase crossover"
        )
        said = f"none: {model.reason}" if model.reason else f"{model.formula}{off}"
        rows.append((f"{lags}, {model.method}", said))
    return _table(rows or [("none", "the plant is such a model already")], width)


def _distance(margins: Margins) -> str:
    """How far the loop is from instability, in plain words."""
    up, down, delay = margins.gain_margin, margins.gain_margin_lower, margins.delay_margin_s
    limits = []
    if up.value is not None:
        limits.append(f"the loop gain were {text(up.value, digits=3)} times as large")
    if down.value is not None:
        limits.append(f"it fell to {text(down.value, digits=3)} of what it is")
    if delay.value is not None:
        limits.append(f"the dead time were {time_text(delay.value, 3)} longer")
    if not limits:
        return "no gain and no dead time upsets it"
    return "at its limit if " + ", or if ".join(limits)


def _title(case: Case, width: int, action: str | None = None) -> list[str]:
    """The tag and the service, and the settings that are judged."""
    named = ": ".join(word for word in (case.loop.tag, case.loop.service) if word)
    lines = [wrapped(named, width)]
    if case.controller is not None:
        controller = case.controller
        scan = f"scan {controller.scan}" if controller.scan is not None else "analogue"
        acting = f", {action or controller.action} action" if action or controller.action else ""
        words = f"{controller.form} form, {settings_text(controller)}{acting}, {scan}"
        lines.append(wrapped(words, width))
    return [*lines, ""]


def _loop_rows(loop: LoopFigures, units: Mapping[str, str]) -> Rows:
    margins = loop.margins
    if not margins.stable:
        return [("stable", f"NO: {margins.reason}")]
    rows: Rows = [("stable", "yes")]
    for key, label, unit in _MARGINS:
        figure: Figure = getattr(margins, key)
        # Only a conditionally stable or open-loop unstable loop has a lower margin to tell of.
        if key == "gain_margin_lower" and figure.value is None:
            continue
        rows.append((label, _time(figure) if unit == "s" else _figure(figure, unit)))
    pv = units["pv"]
    rows += [
        ("distance", _distance(margins)),
        ("final PV, setpoint step of 1", _figure(loop.final_pv_after_setpoint_step, pv)),
        ("final PV, load step of 1", _figure(loop.final_pv_after_load_step, pv)),
    ]
    return rows


# --- predict --------------------------------------------------------------------------------------

_MEASURES: Final = (
    ("setpoint", "iae", "setpoint_iae", "integral absolute error", "{pv} s"),
    ("setpoint", "overshoot_percent", "setpoint_overshoot_percent", "overshoot", "%"),
    ("setpoint", "rise_time_s", "setpoint_rise_time_s", "rise time, 10 to 90 %", "s"),
    ("setpoint", "settling_time_s", "setpoint_settling_time_s", "settling time", "s"),
    (
        *("setpoint", "control_rise_time_s", "setpoint_control_rise_time_s"),
        *("control rise time, to within 2 %", "s"),
    ),
    ("setpoint", "ise", "setpoint_ise", "integral squared error", "{pv}2 s"),
    ("setpoint", "itae", "setpoint_itae", "integral of time and absolute error", "{pv} s2"),
    ("setpoint", "decay_ratio", "setpoint_decay_ratio", "decay ratio", ""),
    ("setpoint", "period_s", "setpoint_period_s", "period of the swing", "s"),
    ("load", "iae", "load_iae", "integral absolute error", "{pv} s"),
    ("load", "peak_deviation", "load_peak_deviation", "peak deviation", "{pv}"),
    ("load", "settling_time_s", "load_settling_time_s", "settling time", "s"),
    ("load", "ise", "load_ise", "integral squared error", "{pv}2 s"),
    ("load", "itae", "load_itae", "integral of time and absolute error", "{pv} s2"),
    ("load", "decay_ratio", "load_decay_ratio", "decay ratio", ""),
    ("load", "period_s", "load_period_s", "period of the swing", "s"),
    ("output", "travel", "output_travel", "travel", "{op}"),
    ("output", "reversals", "output_reversals", "reversals", ""),
    ("output", "time_at_limit_s", "output_time_at_limit_s", "time at a limit", "s"),
    ("final", "pv", "final_pv", "PV", "{pv}"),
    ("final", "op", "final_op", "OP", "{op}"),
)
"""Group and key in JSON, field of `Measures`, words, unit."""

_GROUPS: Final = {
    "setpoint": "After the setpoint step",
    "load": "After the load step",
    "output": "Output",
    "final": "At the end",
}


def predict_data(evaluation: Evaluation, prediction: Prediction, units: Mapping[str, str]) -> Json:
    """The prediction as `predict --json` prints it."""
    found = evaluation.assessment
    data: Json = {"tag": evaluation.case.loop.tag, "stable": is_stable(found)}
    if not is_stable(found):
        data["stable_reason"] = _why_unstable(found)
    data["action"] = found.action
    for group in _GROUPS:
        members: Json = {}
        for where, key, name, _, _ in _MEASURES:
            if where == group:
                _put(members, key, getattr(prediction.measures, name))
        data[group] = members
    floor: Json = {}
    _put(floor, "peak_deviation", prediction.floor_peak_deviation)
    _put(floor, "load_iae", prediction.floor_load_iae)
    data["floor"] = floor
    data["scenario"] = {
        "setpoint_step": float(prediction.setpoint_step),
        "setpoint_at_s": float(prediction.setpoint_at_s),
        "load_step": float(prediction.load_step),
        "load_at_s": float(prediction.load_at_s),
        "until_s": float(prediction.until_s),
    }
    data["diverged"] = bool(prediction.diverged)
    if prediction.inner is not None:
        inner = prediction.inner
        data["inner"] = {
            "final_setpoint": float(inner.setpoint[-1]),
            "final_pv": float(inner.pv[-1]),
            "final_op": float(inner.output[-1]),
            "time_at_limit_s": inner.time_at_limit_s,
        }
    data["notes"] = _noted(evaluation.cautions)
    data["units"] = dict(units)
    return data


def is_stable(found: Assessment) -> bool:
    """Whether every loop that was judged is stable, analogue and sampled."""
    loops = (found.loop, found.sampled)
    return all(loop.margins.stable for loop in loops if loop is not None)


def _why_unstable(found: Assessment) -> str:
    """Which loop is unstable, and why."""
    return "; ".join(
        f"the {name} loop: {loop.margins.reason}"
        for name, loop in (("analogue", found.loop), ("sampled", found.sampled))
        if loop is not None and not loop.margins.stable
    )


def predict_text(
    evaluation: Evaluation,
    prediction: Prediction,
    units: Mapping[str, str],
    trend_file: str | None,
    width: int,
) -> str:
    """The prediction for people."""
    found = evaluation.assessment
    lines = _title(evaluation.case, width, found.action)
    if not is_stable(found):
        lines += [wrapped(f"NOT STABLE: {_why_unstable(found)}.", width), ""]
    lines += _table(_event_rows(evaluation.case, prediction, units), width, "")
    for group, title in _GROUPS.items():
        lines += ["", title, *_table(_measure_rows(prediction, group, units), width)]
    if prediction.inner is not None:
        inner, op = prediction.inner, units["op"]
        rows: Rows = [
            ("setpoint at the end", text(float(inner.setpoint[-1]), op)),
            ("PV at the end", text(float(inner.pv[-1]), op)),
            ("output at the end", text(float(inner.output[-1]))),
            ("time at a limit", time_text(inner.time_at_limit_s)),
        ]
        lines += ["", "Inner loop", *_table(rows, width)]
    rows = [
        ("peak deviation", _figure(prediction.floor_peak_deviation, units["pv"])),
        ("integral absolute error", _figure(prediction.floor_load_iae, f"{units['pv']} s")),
    ]
    floor = "The least that any controller leaves after this load step"
    lines += ["", wrapped(floor, width), *_table(rows, width)]
    if trend_file is not None:
        lines += ["", wrapped(f"The trend is in {trend_file}.", width)]
    told = [note for note in evaluation.cautions if not note.text.startswith("NOT STABLE")]
    return "\n".join([*lines, *_notes(told, width), *_handover(width)])


def _measure_rows(prediction: Prediction, group: str, units: Mapping[str, str]) -> Rows:
    """The measures of one group; a reason that all of them share is told once."""
    figures = [
        (getattr(prediction.measures, name), label, unit)
        for where, _, name, label, unit in _MEASURES
        if where == group
    ]
    reasons = {figure.reason for figure, _, _ in figures}
    if len(reasons) == 1 and all(figure.value is None for figure, _, _ in figures):
        return [("none", reasons.pop())]
    return [
        (label, _time(figure) if unit == "s" else _figure(figure, unit.format(**units)))
        for figure, label, unit in figures
    ]


def _event_rows(case: Case, prediction: Prediction, units: Mapping[str, str]) -> Rows:
    """What happens to the loop, in its own units."""
    rows: Rows = []
    if prediction.setpoint_step:
        step = text(prediction.setpoint_step, units["pv"])
        rows.append(("setpoint step", f"{step} at {time_text(prediction.setpoint_at_s)}"))
    if prediction.load_step:
        # A load path of its own takes an input whose unit only its author knows.
        step = text(prediction.load_step, "" if case.plant.load else units["op"])
        rows.append(("load step", f"{step} at {time_text(prediction.load_at_s)}"))
    if case.pv.noise:
        rows.append(("noise", f"standard deviation {text(case.pv.noise, units['pv'])}"))
    rows.append(("runs until", time_text(prediction.until_s)))
    return rows


def trend_csv(trend: Trend) -> str:
    """The trend as a CSV file: `time_s,sp,pv,op`, absolute, in the loop's own units."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(("time_s", "sp", "pv", "op"))
    columns = (trend.time, trend.setpoint, trend.pv, trend.output)
    for row in zip(*(column.tolist() for column in columns), strict=True):
        writer.writerow([f"{value:.10g}" for value in row])
    return out.getvalue()


# --- respond --------------------------------------------------------------------------------------


def respond_data(
    case: Case, response: Response, signal: Signal | None, units: Mapping[str, str]
) -> Json:
    """The open-loop response as `respond --json` prints it; without a signal a record's OP."""
    data: Json = {"tag": case.loop.tag, "input": "record" if signal is None else signal.kind}
    if signal is not None:
        data["size"], data["at_s"] = float(signal.size), float(signal.at)
        if signal.kind in ("pulse", "doublet"):
            data["width_s"] = float(signal.width)
        if signal.kind == "sine":
            data["period_s"] = float(signal.period)
    _put(data, "final_value", response.final_value)
    _put(data, "peak", response.peak)
    data["last_value"] = float(response.pv[-1])
    data["until_s"] = float(response.time[-1])
    data["units"] = dict(units)
    return data


def respond_text(
    case: Case,
    response: Response,
    signal: Signal | None,
    units: Mapping[str, str],
    trend_file: str | None,
    width: int,
) -> str:
    """The open-loop response for people; changes from rest."""
    pv = units["pv"]
    what = "OP as recorded" if signal is None else _signal_words(signal, units["op"])
    rows = [
        ("input", what),
        ("final change of PV", _figure(response.final_value, pv)),
        ("largest change of PV", _figure(response.peak, pv)),
        ("at the last, " + time_text(float(response.time[-1])), text(float(response.pv[-1]), pv)),
    ]
    lines = [*_title(case, width)[:1], "", *_table(rows, width, "")]
    if trend_file is not None:
        lines += ["", wrapped(f"The response is in {trend_file}.", width)]
    return "\n".join(lines)


def _signal_words(signal: Signal, op: str) -> str:
    unit = {"ramp": f"{op}/s", "impulse": f"{op} s"}.get(signal.kind, op)
    words = f"{signal.kind} of {text(signal.size, unit)} at {time_text(signal.at)}"
    if signal.kind in ("pulse", "doublet"):
        words += f", {'each half' if signal.kind == 'doublet' else 'for'} {time_text(signal.width)}"
    return words + (f", period {time_text(signal.period)}" if signal.kind == "sine" else "")


def response_csv(response: Response) -> str:
    """The response as a CSV file: `time_s,op,pv`, changes from rest."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(("time_s", "op", "pv"))
    columns = (response.time, response.op, response.pv)
    for row in zip(*(column.tolist() for column in columns), strict=True):
        writer.writerow([f"{value:.15g}" for value in row])
    return out.getvalue()


# --- fit ------------------------------------------------------------------------------------------


def fit_data(fit: Fit) -> Json:
    """The fit as `fit --json` prints it."""
    record = fit.record
    return {
        "record": harmless(record.path),
        "sha256": record.sha256,
        "rows": len(record.time),
        "columns": dict(record.columns),
        "candidates": [_candidate_data(candidate) for candidate in fit.candidates],
        "chosen": fit.chosen,
        **({} if fit.chosen else {"chosen_reason": fit.reason}),
        "warnings": [note.text for note in (*record.notes, *fit.warnings)],
        "units": {"pv": "PV unit of the record", "op": "OP unit of the record"},
    }


def _candidate_data(candidate: Candidate) -> Json:
    from workbench.model.formula import format_formula

    return {
        "shape": candidate.shape,
        "formula": format_formula(candidate.plant.transfer()),
        **_plant_parameters(candidate),
        "standard_errors": _plain(candidate.standard_errors),
        "interval_95": _plain(candidate.interval_95),
        "agreement_percent": float(candidate.agreement_percent),
        "bic": float(candidate.bic),
        "noise_model": candidate.noise_model,
        "noise_time_s": candidate.noise_time_s,
        **({} if candidate.noise_time_s else {"noise_time_s_reason": "white noise has none"}),
        "residual_sd": float(candidate.residual_sd),
        "drift_per_s": float(candidate.drift_per_s),
    }


def _plant_parameters(candidate: Candidate) -> Json:
    """The parameters that the shape has, in seconds."""
    data: Json = {
        key: list(values) if key == "time_constants_s" else values[0]
        for key, values in _fitted(candidate).items()
    }
    plant = candidate.plant
    period, damping = getattr(plant, "natural_period", None), getattr(plant, "damping", None)
    data["natural_period_s"] = None if period is None else float(period.seconds)
    data["damping"] = None if damping is None else float(damping)
    for key in ("natural_period_s", "damping"):
        if data[key] is None:
            data[f"{key}_reason"] = f"the shape {candidate.shape} has none"
    return data


def _fitted(candidate: Candidate) -> dict[str, list[float]]:
    """Key of the fitted parameters that the shape has -> values; several time constants."""
    found: dict[str, list[float]] = {}
    for key, names in (
        ("gain", ("gain",)),
        ("slope_per_s", ("slope",)),
        ("dead_time_s", ("dead_time",)),
        ("time_constants_s", ("time_constant", "second_time_constant")),
    ):
        for name in names:
            value = getattr(candidate.plant, name, None)
            if isinstance(value, Amount):
                value = value.per_second if name == "slope" else value.seconds
            if value is not None:
                found.setdefault(key, []).append(float(value))
    found.setdefault("time_constants_s", [])
    return found


def _plain(value: object) -> object:
    """Numbers, tuples and dictionaries of a result as JSON takes them."""
    if isinstance(value, Mapping):
        return {str(key): _plain(one) for key, one in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(one) for one in value]
    return float(value) if isinstance(value, int | float) else value


_ERRORS: Final = {
    "gain": ("gain", "PV per OP"),
    "slope_per_s": ("slope", "PV/s per OP"),
    "dead_time_s": ("dead time", "s"),
    "time_constants_s": ("time constant", "s"),
}
"""Key of `standard_errors` -> words, unit, in the units of the record."""


def fit_text(fit: Fit, width: int) -> str:
    """The fit for people."""
    record = fit.record
    columns = ", ".join(f"{role} from {name!r}" for role, name in record.columns.items())
    lines = [
        wrapped(f"{record.path}: {len(record.time)} rows; {columns}", width, hang="  "),
        wrapped("PV and OP are in the units of the record.", width),
    ]
    for candidate in fit.candidates:
        mark = " (chosen)" if candidate.shape == fit.chosen else ""
        lines += ["", f"{candidate.shape}{mark}", *_table(_candidate_rows(candidate), width)]
    if fit.chosen is None:
        lines += ["", wrapped(f"No model is chosen. {fit.reason}", width)]
    told = [note for note in (*record.notes, *fit.warnings) if note.text != fit.reason]
    return "\n".join([*lines, *_notes(told, width)])


def _candidate_rows(candidate: Candidate) -> Rows:
    rows: Rows = []
    for key, values in _fitted(candidate).items():
        label, unit = _ERRORS[key]
        errors: object = candidate.standard_errors.get(key)
        ends: object = candidate.interval_95.get(key)
        for i, value in enumerate(values):
            # Time constants have a pair of ends each, the others one pair.
            several = key == "time_constants_s"
            error = errors[i] if isinstance(errors, tuple) else errors
            pair = ends[i] if isinstance(ends, tuple) and several else ends
            rows.append((label, _with_error(value, error, pair, unit)))
    rows += [
        ("agreement", text(candidate.agreement_percent, "%")),
        ("noise", f"{candidate.noise_model}, standard deviation {text(candidate.residual_sd)} PV"),
        ("BIC", text(candidate.bic, digits=6)),
    ]
    return rows


def _with_error(value: float, error: object, ends: object, unit: str) -> str:
    """A fitted parameter with its standard error and its 95 % interval."""
    shown = text(value, unit)
    if isinstance(error, float):
        shown += f", standard error {text(error, digits=2)}"
    if isinstance(ends, tuple):
        low, high = ends
        shown += f" (95 %: {text(low)} to {text(high)})"
    return shown


# --- propose --------------------------------------------------------------------------------------


def propose_data(
    case: Case, proposals: Sequence[Proposal], notes: Sequence[Note], units: Mapping[str, str]
) -> Json:
    """The proposals as `propose --json` prints them."""
    return {
        "tag": case.loop.tag,
        "proposals": [_proposal_data(proposal) for proposal in proposals],
        "notes": _noted(notes),
        "units": dict(units),
    }


def _proposal_data(proposal: Proposal) -> Json:
    controller = proposal.controller
    data: Json = {
        "method": proposal.method,
        "title": proposal.title,
        "source": proposal.source,
        "objective": proposal.objective,
        "limits": proposal.limits,
        "published_form": proposal.published_form,
        "form": None if controller is None else controller.form,
        **({"form_reason": proposal.reason} if controller is None else {}),
    }
    gain = Figure(None, proposal.reason) if controller is None else Figure(controller.gain_value)
    _put(data, "gain", gain)
    _put(data, "integral_s", _integral_s(controller))
    _put(data, "derivative_s", _derivative_s(controller))
    for key in ("max_sensitivity", "phase_margin_deg", "setpoint_iae", "load_iae"):
        _put(data, key, getattr(proposal, key))
    data["within_limit"] = bool(proposal.within_limit)
    data["applies"] = bool(proposal.applies)
    data["reason"] = proposal.reason
    return data


def propose_text(
    case: Case,
    proposals: Sequence[Proposal],
    notes: Sequence[Note],
    units: Mapping[str, str],
    width: int,
) -> str:
    """The proposals for people: one table, what does not apply, and where each comes from."""
    lines = _title(case, width)
    fitting = [proposal for proposal in proposals if proposal.applies]
    if fitting:
        lines += _proposal_table(fitting, units, width)
    if not any(proposal.method != "present" for proposal in fitting):
        lines += ["", "No method gives settings for this loop."]
    lines += _grouped(
        "Not proposed", [(p.reason, p.method) for p in proposals if not p.applies], width
    )
    remarks = [(p.method, p.reason) for p in fitting if p.reason]
    if remarks:
        lines += ["", "Remarks", *_table(remarks, width)]
    rules = [proposal for proposal in fitting if proposal.method != "present"]
    lines += _grouped("Aims", [(f"{p.objective}; for {p.limits}", p.method) for p in rules], width)
    lines += _grouped("Sources", [(p.source, p.method) for p in rules], width)
    return "\n".join([*lines, *_notes(notes, width), *_handover(width)])


def _grouped(title: str, told: Sequence[tuple[str, str]], width: int) -> list[str]:
    """Methods of which the same is to be said, and what; nothing where nothing is."""
    methods: dict[str, list[str]] = {}
    for words, method in told:
        methods.setdefault(words, []).append(method)
    said = [f"{', '.join(names)}: {words}" for words, names in methods.items()]
    return ["", title, *(wrapped(line, width, "  ", "    ") for line in said)] if said else []


def _proposal_table(
    proposals: Sequence[Proposal], units: Mapping[str, str], width: int
) -> list[str]:
    """Settings and judgement side by side, or below each other where that is too wide."""
    settings = [
        [
            proposal.method,
            "" if proposal.controller is None else text(proposal.controller.gain_value),
            "" if proposal.controller is None else _amount(proposal.controller.integral),
            "" if proposal.controller is None else _amount(proposal.controller.derivative),
        ]
        for proposal in proposals
    ]
    judged = [
        [
            text(figure.value, digits=3)
            for figure in (
                proposal.max_sensitivity,
                proposal.phase_margin_deg,
                proposal.setpoint_iae,
                proposal.load_iae,
            )
        ]
        for proposal in proposals
    ]
    settings_head = [["", "gain", "integral", "derivative"], ["method", "%/%", "", ""]]
    area = f"{units['pv']} s"
    judged_head = [
        ["max.", "phase", "setpoint", "load"],
        ["sens.", "margin", "IAE", "IAE"],
        ["", "deg", area, area],
    ]
    wide = _grid(
        [
            ["", "", "", "", *judged_head[0]],
            [*settings_head[0], *judged_head[1]],
            [*settings_head[1], *judged_head[2]],
        ],
        [[*left, *right] for left, right in zip(settings, judged, strict=True)],
    )
    if max(len(line) for line in wide) <= width:
        return wide
    below = [[one[0], *right] for one, right in zip(settings, judged, strict=True)]
    heads = [["", *judged_head[0]], ["", *judged_head[1]], ["method", *judged_head[2]]]
    return [*_grid(settings_head, settings), "", *_grid(heads, below)]


# --- convert --------------------------------------------------------------------------------------


def convert_data(case: Case, found: Conversion, units: Mapping[str, str]) -> Json:
    """The conversion as `convert --json` prints it; the settings in the words of a case file."""
    data: Json = {"tag": case.loop.tag, "form": found.form}
    controller = found.controller
    none = Figure(None, f"the {found.form} form cannot hold these settings")
    if controller is None:
        for key in _CONVERTED:
            _put(data, key, none)
    else:
        said = _settings_data(controller)
        data |= {key: said[key] for key in _CONVERTED if key in said}
        data["gain"] = float(controller.gain_value)
    filter_time = none if controller is None else Figure(controller.gains().filter_time)
    _put(data, "integral_s", none if controller is None else _integral_s(controller))
    _put(data, "derivative_s", none if controller is None else _derivative_s(controller))
    _put(data, "derivative_filter_s", filter_time)
    data["exact"] = found.exact
    data["reason"] = found.reason
    data["notes"] = _noted(found.notes)
    data["units"] = {**units, "gain": "%/%"}
    return data


_CONVERTED: Final = (
    "gain",
    "proportional_band",
    "integral",
    "derivative",
    "derivative_filter",
    "setpoint_weight",
    "derivative_on",
)
"""Settings that `convert` answers with, as the case file spells them."""


def convert_text(case: Case, found: Conversion, width: int) -> str:
    """The conversion for people."""
    lines = [*_title(case, width), f"In the {found.form} form"]
    controller = found.controller
    if controller is None:
        rows: Rows = [("refused", found.reason)]
        return "\n".join([*lines, *_table(rows, width)])
    if controller.gain is None:
        rows = [("proportional band", text(controller.proportional_band, "%", _TYPED))]
    else:
        rows = [("gain", text(controller.gain, "", _TYPED))]
    rows += [
        ("integral", _amount(controller.integral, _TYPED)),
        ("derivative", _amount(controller.derivative, _TYPED)),
    ]
    if controller.derivative is not None:
        rows.append(("derivative filter", _filter_words(controller)))
        rows.append(("derivative on", controller.derivative_on))
    rows.append(("setpoint weight", text(controller.setpoint_weight, "", _TYPED)))
    same = "yes, the same path from PV to OP" if found.exact else "no, only nearly"
    rows.append(("exact", same))
    return "\n".join([*lines, *_table(rows, width), *_notes(found.notes, width), *_handover(width)])


_TYPED: Final = 6
"""Digits of settings that are to be typed into a controller and stay the same controller."""


def _filter_words(controller: Controller) -> str:
    """The derivative filter as a time and as N, since some controllers take one and some the other.

    For a controller with a derivative part.
    """
    filter_time = controller.gains().filter_time
    if not filter_time:
        return "none"
    derivative_s = _derivative_s(controller).value
    share = "" if derivative_s is None else f", N = {text(derivative_s / filter_time, '', _TYPED)}"
    return f"{text(filter_time, 's', _TYPED)}{share}"


# --- check ----------------------------------------------------------------------------------------


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


# --- history --------------------------------------------------------------------------------------

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
    }
    if entry.controller is not None:
        data |= _settings_data(entry.controller)
    for key, _, _ in _PREDICTED:
        value = getattr(entry, key)
        if value is not None:
            data[key] = float(value)
    data["program"] = entry.program
    return data


def _settings_data(controller: Controller) -> Json:
    """The settings in the words of the case file; keys that are not there are left out."""
    data: Json = {}
    for key, declared in quantities(type(controller)).items():
        value = getattr(controller, key)
        if value is not None or key in ("integral", "derivative", "derivative_filter"):
            data[key] = declared.write(value)
    return data


def history_text(case: Case, units: Mapping[str, str], width: int) -> str:
    """The history for people, newest first."""
    lines = _title(case, width)
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
        if entry.why:
            lines.append(wrapped(f"why: {entry.why}", width, "    "))
    return "\n".join(lines)


def _entry_line(entry: Revision, number: int) -> str:
    when = entry.at.isoformat(sep=" ", timespec="minutes")
    return f"{number}  {when}  {entry.kind} by {entry.who}"


def _between(case: Case, first: int, second: int) -> list[tuple[str, str, str]]:
    """Key, before and after, of everything that two entries say differently."""
    one, other = case.history[first - 1], case.history[second - 1]
    before, after = (
        {} if e.controller is None else _settings_data(e.controller) for e in (one, other)
    )
    for entry, said in ((one, before), (other, after)):
        said |= {key: getattr(entry, key) for key, _, _ in _PREDICTED if getattr(entry, key)}
    keys = [*before, *(key for key in after if key not in before)]
    return [
        (key, _said(before.get(key)), _said(after.get(key)))
        for key in keys
        if before.get(key) != after.get(key)
    ]


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
            {"key": key, "before": before, "after": after}
            for key, before, after in _between(case, first, second)
        ],
        "units": dict(units),
    }


def between_text(case: Case, first: int, second: int, width: int) -> str:
    """What changed between two entries, for people."""
    lines = [wrapped(_entry_line(case.history[n - 1], n), width) for n in (first, second)]
    rows = [
        (key, f"{before or 'not there'} -> {after or 'not there'}")
        for key, before, after in _between(case, first, second)
    ]
    return "\n".join([*lines, "", *(_table(rows, width) or ["No difference."])])
