"""What a fit answers, as text and as JSON."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import TYPE_CHECKING, Any, Final

from workbench.units import Amount, harmless, text, time_text

if TYPE_CHECKING:
    from workbench.records.candidate import Candidate
    from workbench.records.closed_loop import StepModel
    from workbench.records.identify import Fit
    from workbench.records.judgement import Judgement
    from workbench.study import Advice, Live
from workbench.report.words import Json, Rows, note_lines, put, two_columns, wrapped


def fit_data(fit: Fit, advice: Advice | None = None) -> Json:
    """The fit as `fit --json` prints it, with what to do next where a certainty is asked for."""
    from workbench.study import bumps

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
        "cross_checks": _cross_check_data(fit),
        **_loop_data(fit),
        "bumps": [asdict(bump) for bump in bumps(record)],
        **({} if advice is None else {"advice": _advice_data(advice)}),
        "units": {"pv": "PV unit of the record", "op": "OP unit of the record"},
    }


def _advice_data(advice: Advice) -> Json:
    data: Json = {
        "say": advice.say,
        "reached": advice.reached,
        "wanted_percent": float(advice.wanted_percent),
        "spoilt": list(advice.spoilt),
    }
    put(data, "certainty_percent", advice.certainty_percent)
    put(data, "hold_s", advice.hold_s)
    return data


def live_text(live: Live, width: int) -> str:
    """Where a test stands that is followed: rows, the advice, what is known."""
    lines = [wrapped(live.said, width, hang="  ")] if live.said else []
    if live.fit is not None and live.advice is not None:
        record = live.fit.record
        where = f"{len(record.time)} rows, {time_text(record.duration, 3)}"
        shape = live.fit.chosen or (live.fit.candidates and live.fit.candidates[0].shape) or ""
        lines.append(wrapped(f"{where}: {live.advice.say}", width, hang="  "))
        if live.advice.known:
            known = f"  {shape}: {'; '.join(live.advice.known)}"
            lines.append(wrapped(known, width, hang="    "))
        lines += [wrapped(f"  ! {words}", width, hang="    ") for words in live.advice.spoilt]
    return "\n".join(lines)


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
        **_certainty_data(candidate),
    }


def _certainty_data(candidate: Candidate) -> Json:
    """What the likelihood says of all parameters together, and what the fit leaves over."""
    known, judged = candidate.certainty, candidate.judgement
    seen = judged.holdout_percent
    return {
        "correlation": {"of": list(known.names), "matrix": _plain(known.correlation.tolist())},
        "dead_time_profile": [
            {"dead_time_s": float(at), "rise": float(rise)} for at, rise in known.profile
        ],
        "residual_whiteness": _plain(asdict(judged.whiteness)),
        "input_residual": _plain(asdict(judged.input_residual)),
        "holdout_percent": seen,
        **({} if seen is not None else {"holdout_percent_reason": "there is one bump only"}),
        "moves": [_plain(asdict(move)) for move in judged.moves],
        **_directions(judged),
    }


def _directions(judged: Judgement) -> Json:
    data: Json = {}
    for key, found in (("gain_up", judged.gain_up), ("gain_down", judged.gain_down)):
        if found is None:
            data[key] = None
            data[f"{key}_reason"] = "OP did not move a few times both ways"
        else:
            data[key] = {"gain": found[0], "standard_error": found[1]}
    return data


def _cross_check_data(fit: Fit) -> list[Json]:
    """Graphical and published one-test methods, none of which is the fit."""
    read = [model for model in _step_models(fit) if not isinstance(model, str)]
    return [_plain(asdict(each)) for each in fit.readings] + [_plain(asdict(m)) for m in read]


def _step_models(fit: Fit) -> list[StepModel | str]:
    """What the published methods read from a setpoint step, or why they do not."""
    from workbench.errors import NotApplicable
    from workbench.records.closed_loop import shamsuzzoha_skogestad, yuwana_seborg

    if fit.step is None:
        return []
    found: list[StepModel | str] = []
    for method in (shamsuzzoha_skogestad, yuwana_seborg):
        try:
            found.append(method(fit.step))
        except NotApplicable as fault:
            found.append(str(fault))
    return found


def _loop_data(fit: Fit) -> Json:
    """How OP came about, and the swing of a relay test."""
    loop, relay = fit.loop, fit.relay
    data: Json = {"relay": None}
    if loop is None:
        data |= {"feedback": None, "feedback_reason": fit.reason}
    else:
        data["feedback"] = {
            "time_in_auto_percent": 100.0 * loop.automatic_share,
            "op_explained_by_pv_percent": max(100.0 * loop.follows_pv, 0.0),
            "setpoint_moves": loop.setpoint_moves,
            "manual_moves": loop.manual_moves,
        }
    if relay is None:
        data["relay_reason"] = "OP did not switch as a relay does"
    else:
        data["relay"] = {
            **_plain(asdict(relay)),
            "ultimate_gain": relay.ultimate_gain,
            "option": relay.option,
        }
    return data


def _plant_parameters(candidate: Candidate) -> Json:
    """The parameters that the shape has, in seconds."""
    data: Json = {
        key: list(values) if key == "time_constants_s" else values[0]
        for key, values in _fitted(candidate).items()
    }
    for key in ("natural_period_s", "damping", "numerator_time_s"):
        if data.setdefault(key, None) is None:
            data[f"{key}_reason"] = f"the shape {candidate.shape} has none"
    return data


def _fitted(candidate: Candidate) -> dict[str, list[float]]:
    """Key of the fitted parameters that the shape has -> values; several time constants."""
    found: dict[str, list[float]] = {}
    for key, names in (
        ("gain", ("gain",)),
        ("slope_per_s", ("slope",)),
        ("dead_time_s", ("dead_time",)),
        ("numerator_time_s", ("numerator_time",)),
        ("natural_period_s", ("natural_period",)),
        ("damping", ("damping",)),
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


def _plain(value: object) -> Any:
    """Numbers, tuples and dictionaries of a result as JSON takes them."""
    if isinstance(value, Mapping):
        return {str(key): _plain(one) for key, one in value.items()}
    if isinstance(value, tuple | list):
        return [_plain(one) for one in value]
    return float(value) if isinstance(value, int | float) else value


_DOUBT: Final = 0.01
"""Chance below which a test of what is left over is taken to have failed."""

_ERRORS: Final = {
    "gain": ("gain", "PV per OP"),
    "slope_per_s": ("slope", "PV/s per OP"),
    "dead_time_s": ("dead time", "s"),
    "time_constants_s": ("time constant", "s"),
    "numerator_time_s": ("numerator time", "s"),
    "natural_period_s": ("natural period", "s"),
    "damping": ("damping", ""),
}
"""Key of `standard_errors` -> words, unit, in the units of the record."""


_MOST_BUMPS: Final = 10
"""Bumps that the text tells of; the others are in the JSON."""


def fit_text(fit: Fit, width: int, advice: Advice | None = None) -> str:
    """The fit for people, with what to do next where a certainty is asked for."""
    from workbench.study import bumps

    record = fit.record
    columns = ", ".join(f"{role} from {name!r}" for role, name in record.columns.items())
    lines = [
        wrapped(f"{record.path}: {len(record.time)} rows; {columns}", width, hang="  "),
        wrapped("PV and OP are in the units of the record.", width),
    ]
    lines += [
        wrapped(
            f"At {time_text(b.at_s)} OP {text(b.op_before)} to {text(b.op_after)}, held for "
            f"{time_text(b.hold_s, 3)}: PV {text(b.pv_before)} to {text(b.pv_after)}.",
            width,
            hang="  ",
        )
        for b in bumps(record)[:_MOST_BUMPS]
    ]
    for candidate in fit.candidates:
        mark = " (chosen)" if candidate.shape == fit.chosen else ""
        rows = _candidate_rows(candidate)
        if candidate is fit.best:
            rows += _chosen_rows(candidate)
        lines += ["", f"{candidate.shape}{mark}", *two_columns(rows, width)]
    if fit.chosen is None:
        lines += ["", wrapped(f"No model is chosen. {fit.reason}", width)]
    lines += _cross_check_lines(fit, width)
    if advice is not None:
        lines += ["", wrapped(advice.say, width)]
    told = [note for note in (*record.notes, *fit.warnings) if note.text != fit.reason]
    return "\n".join([*lines, *note_lines(told, width)])


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


def _chosen_rows(candidate: Candidate) -> Rows:
    """What more is said of the model to use."""
    judged = candidate.judgement
    rows: Rows = []
    if judged.holdout_percent is not None:
        shown = f"{text(judged.holdout_percent, '%', 3)} agreement, by a fit to the rows before it"
        rows.append(("last bump", shown))
    for test, kept, broken, name in (
        (judged.whiteness, "white", "not white", "Ljung-Box"),
        (judged.input_residual, "no trace of OP", "OP still shows", "score test"),
    ):
        verdict = kept if test.p_value > _DOUBT else broken
        rows.append(("left over", f"{verdict} ({name}, p = {text(test.p_value, digits=2)})"))
    level, unit = _ERRORS[candidate.certainty.names[0]]
    for way, found in (("up", judged.gain_up), ("down", judged.gain_down)):
        if found is not None:
            shown = f"{text(found[0], unit)}, standard error {text(found[1], digits=2)}"
            rows.append((f"{level} {way}", shown))
    for move in judged.moves:
        shown = f"{text(move.gain)}, standard error {text(move.standard_error, digits=2)}"
        rows.append((f"OP {text(move.op_from)} to {text(move.op_to)}", f"{level} {shown}"))
    known = candidate.certainty
    for i, name in enumerate(known.names):
        for k in range(i):
            if abs(known.correlation[i, k]) > 0.5:
                pair = f"{_ERRORS[known.names[k]][0]} and {_ERRORS[name][0]}"
                rows.append(("correlation", f"{known.correlation[i, k]:.2f} of {pair}"))
    return rows


def _cross_check_lines(fit: Fit, width: int) -> list[str]:
    """Other methods' answers, labelled as what they are."""
    rows: Rows = []
    for each in (*fit.readings, *_step_models(fit)):
        if isinstance(each, str):
            rows.append(("setpoint step", each))
            continue
        shown = (
            f"gain {text(each.gain)}, time constant {text(each.time_constant_s, 's')}, "
            f"dead time {text(each.dead_time_s, 's')}{'; ' if each.remark else ''}{each.remark}"
        )
        rows.append((each.method, shown))
    lines: list[str] = []
    if rows:
        lines += ["", "Cross-check only, not a fit:", *two_columns(rows, width)]
    if fit.relay is not None:
        found = fit.relay
        shown = (
            f"Relay test: ultimate gain {text(found.ultimate_gain)} OP per PV, period "
            f"{text(found.period_s, 's')}; hand it on with: workbench propose ... "
            f'--relay "{found.option}"'
        )
        lines += ["", wrapped(shown, width, hang="  ")]
    return lines


def _with_error(value: float, error: object, ends: object, unit: str) -> str:
    """A fitted parameter with its standard error and its 95 % interval."""
    shown = text(value, unit)
    if isinstance(error, float):
        shown += f", standard error {text(error, digits=2)}"
    if isinstance(ends, tuple):
        low, high = ends
        shown += f" (95 %: {text(low)} to {text(high)})"
    return shown
