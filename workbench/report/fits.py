"""What a fit answers, as text and as JSON."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Final

from workbench.units import Amount, harmless, text

if TYPE_CHECKING:
    from workbench.records.candidate import Candidate
from workbench.records.identify import Fit
from workbench.report.words import Json, Rows, note_lines, two_columns, wrapped


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
        lines += ["", f"{candidate.shape}{mark}", *two_columns(_candidate_rows(candidate), width)]
    if fit.chosen is None:
        lines += ["", wrapped(f"No model is chosen. {fit.reason}", width)]
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


def _with_error(value: float, error: object, ends: object, unit: str) -> str:
    """A fitted parameter with its standard error and its 95 % interval."""
    shown = text(value, unit)
    if isinstance(error, float):
        shown += f", standard error {text(error, digits=2)}"
    if isinstance(ends, tuple):
        low, high = ends
        shown += f" (95 %: {text(low)} to {text(high)})"
    return shown
