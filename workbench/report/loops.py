"""What assess, predict and respond answer, as text and as JSON."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Final

from workbench.units import Figure, text, time_text

if TYPE_CHECKING:
    from workbench.case.case import Case
    from workbench.model.response import Signal
    from workbench.model.robustness import Margins
    from workbench.study import (
        Assessment,
        Evaluation,
        FamilyFigures,
        LoopFigures,
        PlantFigures,
        Prediction,
        Reduced,
        Response,
        Tolerance,
        Trend,
    )
from workbench.report.families import (
    family_data,
    family_lines,
    tolerance_data,
    tolerance_lines,
)
from workbench.report.words import (
    Json,
    Rows,
    figure_words,
    handover_lines,
    note_lines,
    noted,
    pairs,
    points,
    put,
    settings_text,
    time_words,
    two_columns,
    wrapped,
    yes_or_no,
)


def assess_data(
    case: Case,
    found: Assessment,
    units: Mapping[str, str],
    small: Sequence[Reduced] | None = None,
    family: FamilyFigures | None = None,
    tolerance: Tolerance | None = None,
) -> Json:
    """The assessment as `assess --json` prints it, with what else was asked for."""
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
    data |= family_data(family)
    if tolerance is not None:
        data |= tolerance_data(tolerance)
    data["notes"] = noted(found.notes)
    data["units"] = dict(units)
    return data


def _plant_data(plant: PlantFigures) -> Json:
    data: Json = {"formula": plant.formula}
    put(data, "gain", plant.gain)
    put(data, "gain_percent_per_percent", plant.gain_percent)
    put(data, "slope_per_s", plant.slope_per_s)
    data["stable"] = bool(plant.stable)
    data["integrating"] = bool(plant.integrating)
    for key, values, reason in (
        ("poles", plant.poles, plant.poles_reason),
        ("zeros", plant.zeros, plant.zeros_reason),
    ):
        data[key] = None if reason else pairs(values)
        if reason:
            data[f"{key}_reason"] = reason
    data["dead_time_s"] = float(plant.dead_time_s)
    put(data, "least_max_sensitivity", plant.least_max_sensitivity)
    put(data, "least_max_complementary_sensitivity", plant.least_max_complementary_sensitivity)
    return data


def _small_data(model: Reduced) -> Json:
    data: Json = {"method": model.method, "lags": model.lags, "formula": model.formula or None}
    if model.reason:
        data["formula_reason"] = model.reason
    put(data, "peak_step_error_percent", model.peak_step_error_percent)
    put(data, "phase_error_deg", model.phase_error_deg)
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
    ("bandwidth_rad_s", "bandwidth, to -3 dB", "rad/s"),
)
"""Field of `Margins` and key in JSON -> words, unit."""


def _loop_data(loop: LoopFigures, found: Assessment) -> Json:
    margins = loop.margins
    data: Json = {"stable": bool(margins.stable)}
    put(data, "gain", Figure(found.gain))
    put(data, "gain_op_per_pv", Figure(found.gain_op_per_pv))
    if not margins.stable:
        data["stable_reason"] = margins.reason
    for key, _, _ in _MARGINS:
        put(data, key, getattr(margins, key))
    put(data, "final_pv_after_setpoint_step", loop.final_pv_after_setpoint_step)
    put(data, "final_pv_after_load_step", loop.final_pv_after_load_step)
    return data


def assess_text(
    case: Case,
    found: Assessment,
    units: Mapping[str, str],
    width: int,
    small: Sequence[Reduced] | None = None,
    family: FamilyFigures | None = None,
    tolerance: tuple[Tolerance, Sequence[str]] | None = None,
) -> str:
    """The assessment for people, with what else was asked for; a tolerance map with its picture."""
    pv, op = units["pv"], units["op"]
    plant = found.plant
    rows: Rows = [("formula", plant.formula)]
    if plant.integrating:
        rows.append(("gain", f"none, {plant.gain.reason}"))
        rows.append(("slope", figure_words(plant.slope_per_s, f"{pv}/s per {op}")))
    else:
        percent = f", {figure_words(plant.gain_percent)} in percent of both spans"
        percent = "" if plant.gain.value is None else percent
        rows.append(("gain", figure_words(plant.gain, f"{pv} per {op}") + percent))
    rows += [
        ("dead time", time_text(plant.dead_time_s)),
        ("stable", yes_or_no(plant.stable) + (", integrating" if plant.integrating else "")),
        ("poles", plant.poles_reason or points(plant.poles)),
        ("zeros", plant.zeros_reason or points(plant.zeros)),
        ("OP is", found.valve),
        *_forbidden(plant),
    ]
    lines = [*heading(case, width, found.action), "Plant", *two_columns(rows, width)]
    if small is not None:
        lines += ["", "Small models of the plant", *_small_rows(small, width)]
    if found.gain is not None:
        own = f"{text(found.gain)} in percent of both spans, {text(found.gain_op_per_pv)} {op}"
        lines += ["", wrapped(f"Controller gain {own} per {pv}.", width)]
    for title, loop in (("analogue", found.loop), ("sampled", found.sampled)):
        if loop is not None:
            lines += ["", f"Loop, {title}", *two_columns(_loop_rows(loop, units), width)]
    if found.loop is None:
        lines += ["", wrapped("No controller is given, so no loop is judged.", width)]
    if found.sampled_reason:
        lines += ["", "Loop, sampled", *two_columns([("none", found.sampled_reason)], width)]
    lines += family_lines(family, units, width)
    if tolerance is not None:
        lines += tolerance_lines(*tolerance, width)
    told = [note for note in found.notes if not note.text.startswith("NOT STABLE:")]
    return "\n".join([*lines, *note_lines(told, width)])


def _forbidden(plant: PlantFigures) -> Rows:
    """What no controller can undercut, where the plant forbids anything."""
    found = (
        ("Ms", plant.least_max_sensitivity.value),
        ("Mt", plant.least_max_complementary_sensitivity.value),
    )
    words = [f"{name} {text(value, digits=3)}" for name, value in found if value and value > 1.0]
    return [("at least", " and ".join(words) + ", whatever the controller")] if words else []


def _small_rows(small: Sequence[Reduced], width: int) -> list[str]:
    rows = []
    for model in small:
        lags = "one lag" if model.lags == 1 else f"{model.lags} lags"
        off = (
            f"; off by {figure_words(model.peak_step_error_percent, '%')} of the step response at "
            f"most, phase {figure_words(model.phase_error_deg, 'deg')} at the phase crossover"
        )
        said = f"none: {model.reason}" if model.reason else f"{model.formula}{off}"
        rows.append((f"{lags}, {model.method}", said))
    return two_columns(rows or [("none", "the plant is such a model already")], width)


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


def heading(case: Case, width: int, action: str | None = None) -> list[str]:
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
        rows.append((label, time_words(figure) if unit == "s" else figure_words(figure, unit)))
    pv = units["pv"]
    rows += [
        ("distance", _distance(margins)),
        ("final PV, setpoint step of 1", figure_words(loop.final_pv_after_setpoint_step, pv)),
        ("final PV, load step of 1", figure_words(loop.final_pv_after_load_step, pv)),
    ]
    return rows


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
                put(members, key, getattr(prediction.measures, name))
        data[group] = members
    floor: Json = {}
    put(floor, "peak_deviation", prediction.floor_peak_deviation)
    put(floor, "load_iae", prediction.floor_load_iae)
    put(floor, "peak_ratio", prediction.peak_to_floor)
    put(floor, "load_iae_ratio", prediction.load_iae_to_floor)
    put(floor, "fixed_peak", prediction.floor_fixed_peak)
    put(floor, "fixed_iae", prediction.floor_fixed_iae)
    put(floor, "acts_after_s", prediction.floor_acts_after_s)
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
    data |= family_data(evaluation.family)
    data["notes"] = noted(evaluation.cautions)
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
    lines = heading(evaluation.case, width, found.action)
    if not is_stable(found):
        lines += [wrapped(f"NOT STABLE: {_why_unstable(found)}.", width), ""]
    lines += two_columns(_event_rows(evaluation.case, prediction, units), width, "")
    for group, title in _GROUPS.items():
        lines += ["", title, *two_columns(_measure_rows(prediction, group, units), width)]
    if prediction.inner is not None:
        inner, op = prediction.inner, units["op"]
        rows: Rows = [
            ("setpoint at the end", text(float(inner.setpoint[-1]), op)),
            ("PV at the end", text(float(inner.pv[-1]), op)),
            ("output at the end", text(float(inner.output[-1]))),
            ("time at a limit", time_text(inner.time_at_limit_s)),
        ]
        lines += ["", "Inner loop", *two_columns(rows, width)]
    lines += ["", *floor_lines(prediction, units, width)]
    lines += family_lines(evaluation.family, units, width)
    if trend_file is not None:
        lines += ["", wrapped(f"The trend is in {trend_file}.", width)]
    told = [note for note in evaluation.cautions if not note.text.startswith("NOT STABLE:")]
    return "\n".join([*lines, *note_lines(told, width), *handover_lines(width)])


_NEAR: Final = 1.15
"""A multiple of the floor up to which other settings are not worth the trouble."""
_MUCH: Final = 0.3
"""Share of the floor from which on its cause is named."""


def floor_lines(prediction: Prediction, units: Mapping[str, str], width: int) -> list[str]:
    """What no controller can undercut, and what these settings leave as a multiple of it."""
    rows: Rows = [
        (label, figure_words(least, unit) + times_words(ratio))
        for label, least, unit, ratio in (
            (
                "peak deviation",
                prediction.floor_peak_deviation,
                units["pv"],
                prediction.peak_to_floor,
            ),
            (
                "integral absolute error",
                prediction.floor_load_iae,
                f"{units['pv']} s",
                prediction.load_iae_to_floor,
            ),
        )
    ]
    title = "The least that any controller leaves after this load step"
    lines = [wrapped(title, width), *two_columns(rows, width)]
    words = floor_words(prediction)
    return [*lines, wrapped(words, width)] if words else lines


def times_words(ratio: Figure) -> str:
    """What the present settings leave as a multiple of the floor; nothing where it is not known."""
    return "" if ratio.value is None else f"; now {text(ratio.value, digits=3)} times that"


def floor_words(prediction: Prediction) -> str:
    """Whether tuning can still help, and what else would; nothing where the floor is not known."""
    peak, iae = prediction.peak_to_floor.value, prediction.load_iae_to_floor.value
    fixed, least = prediction.floor_fixed_iae.value, prediction.floor_load_iae.value
    if peak is None or iae is None or fixed is None or not least:
        return ""
    after = time_words(prediction.floor_acts_after_s)
    cause = f"the first move of any controller shows after {after}: dead time, scan and sensor"
    if 1.0 - fixed / least >= _MUCH:
        share = text(100.0 * (1.0 - fixed / least), digits=2)
        cause += f"; {share} % of the least error comes after that, of output limits and lags"
    if peak <= _NEAR and iae <= _NEAR:
        return (
            f"Stop tuning: no settings gain anything worth having. What sets the floor is {cause}."
        )
    if peak <= _NEAR:
        return f"No settings lower the peak: {cause}. The error after it can still be cut."
    return f"Other settings may still help. What sets the floor: {cause}."


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
        (label, time_words(figure) if unit == "s" else figure_words(figure, unit.format(**units)))
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
    put(data, "final_value", response.final_value)
    put(data, "peak", response.peak)
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
        ("final change of PV", figure_words(response.final_value, pv)),
        ("largest change of PV", figure_words(response.peak, pv)),
        ("at the last, " + time_text(float(response.time[-1])), text(float(response.pv[-1]), pv)),
    ]
    lines = [*heading(case, width)[:1], "", *two_columns(rows, width, "")]
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
