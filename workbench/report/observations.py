"""Whether the plant did what was predicted, as text and as JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING

from workbench.units import text, time_text

if TYPE_CHECKING:
    from workbench.study import Observation, RunFigures
from workbench.report.words import Json, figure_words, grid, put, wrapped


def observe_data(found: Observation, units: dict[str, str]) -> Json:
    """The comparison as `observe --json` prints it."""
    data: Json = {"verdict": found.verdict}
    put(data, "agreement_percent", found.agreement_percent)
    for key, figures in (("predicted", found.predicted), ("observed", found.observed)):
        data[key] = None if figures is None else _figures_data(figures)
        if figures is None:
            data[f"{key}_reason"] = found.reasons[0]
    data["explanations"] = [
        {
            "what": one.what,
            "is": one.words,
            "bic_gained": -one.bic,
            "agreement_percent": one.agreement_percent,
        }
        for one in found.explanations
    ]
    data["reasons"] = list(found.reasons)
    data["units"] = units
    return data


def _figures_data(figures: RunFigures) -> Json:
    data: Json = {
        "iae": figures.iae,
        "largest_error": figures.largest_error,
        "op_travel": figures.op_travel,
    }
    put(data, "period_s", figures.period_s)
    return data


def observe_text(found: Observation, units: dict[str, str], width: int) -> str:
    """The comparison for people: the verdict, why, and both columns of figures."""
    verdict = {
        "as predicted": "The plant did what was predicted.",
        "different": "The plant did something else than predicted.",
        "cannot tell": "The record cannot tell whether the plant did what was predicted.",
    }[found.verdict]
    lines = [wrapped(verdict, width)]
    lines += [wrapped(f"{reason}.", width, "  ", "    ") for reason in found.reasons]
    if found.predicted is None or found.observed is None:
        return "\n".join(lines)
    pv, op = units["pv"], units["op"]
    both = (found.predicted, found.observed)
    rows = [
        ("IAE", *(text(one.iae, f"{pv} s") for one in both)),
        ("largest error", *(text(one.largest_error, pv, 3) for one in both)),
        ("OP travel", *(text(one.op_travel, op, 3) for one in both)),
        ("period", *(_period(one) for one in both)),
    ]
    lines += ["", *grid([("", "predicted", "observed")], rows)]
    lines += ["", f"PV agrees by {figure_words(found.agreement_percent, '%')}"]
    if found.explanations:
        table = [
            (one.what, one.words, text(one.agreement_percent, "%", 3), text(-one.bic, digits=3))
            for one in found.explanations
        ]
        lines += ["", *grid([("with free", "it is", "PV agrees by", "BIC gained")], table)]
    return "\n".join(lines)


def _period(figures: RunFigures) -> str:
    return "none" if figures.period_s.value is None else time_text(figures.period_s.value, 3)
