"""What propose and convert answer, as text and as JSON."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Final

from workbench.units import Figure, Note, text

if TYPE_CHECKING:
    from workbench.case.case import Case
    from workbench.model.pid import Controller
    from workbench.study import (
        Conversion,
        Proposal,
        TradeOff,
    )
from workbench.report.files import settings_data
from workbench.report.loops import heading
from workbench.report.words import (
    Json,
    Rows,
    amount_words,
    derivative_seconds,
    grid,
    handover_lines,
    integral_seconds,
    note_lines,
    noted,
    put,
    two_columns,
    wrapped,
)


def propose_data(
    case: Case,
    proposals: Sequence[Proposal],
    notes: Sequence[Note],
    units: Mapping[str, str],
    curves: TradeOff | None = None,
) -> Json:
    """The proposals as `propose --json` prints them."""
    data: Json = {
        "tag": case.loop.tag,
        "proposals": [_proposal_data(proposal) for proposal in proposals],
        "notes": noted(notes),
        "units": {**units, "noise_gain": "%/%"},
    }
    if curves is not None:
        data["trade_off"] = [_curve_data(method, curves) for method in curves.known]
    return data


def _curve_data(method: str, curves: TradeOff) -> Json:
    """One curve: the best settings at each limit on Ms that can be kept."""
    points = [
        {"max_sensitivity_limit": point.limit, **_proposal_data(point.best)}
        for point in curves.curves.get(method, ())
    ]
    return {"method": method, "points": points, "reason": curves.reasons.get(method, "")}


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
    put(data, "gain", gain)
    put(data, "integral_s", integral_seconds(controller))
    put(data, "derivative_s", derivative_seconds(controller))
    for key in _JUDGED:
        put(data, key, getattr(proposal, key))
    put(data, "family_max_sensitivity_worst", over_family(proposal)[0])
    put(data, "family_stable_percent", over_family(proposal)[1])
    data["within_limit"] = bool(proposal.within_limit)
    data["applies"] = bool(proposal.applies)
    data["reason"] = proposal.reason
    return data


_JUDGED: Final = (
    "max_sensitivity",
    "max_complementary_sensitivity",
    "phase_margin_deg",
    "noise_gain",
    "setpoint_iae",
    "load_iae",
    "load_travel",
)
"""Figures of a proposal."""


def over_family(proposal: Proposal) -> tuple[Figure, Figure]:
    """The worst Ms over the family of plants, and the share of it that is stable [%]."""
    family = proposal.family
    if family is None or family.reason:
        reason = family.reason if family else proposal.reason or "the case states no family"
        return Figure(None, reason), Figure(None, reason)
    return family.figures["max_sensitivity"].worst, Figure(family.stable_percent)


def family_words(proposal: Proposal) -> str:
    """The same in words; nothing where there is no family."""
    worst, share = over_family(proposal)
    if share.value is None:
        return ""
    said = f"stable with {text(share.value, '%', digits=3)} of the family"
    return said if worst.value is None else f"{said}, worst Ms {text(worst.value, digits=3)}"


def propose_text(
    case: Case,
    proposals: Sequence[Proposal],
    notes: Sequence[Note],
    units: Mapping[str, str],
    width: int,
    curves: TradeOff | None = None,
) -> str:
    """The proposals for people: one table, what does not apply, and where each comes from."""
    lines = heading(case, width)
    fitting = [proposal for proposal in proposals if proposal.applies]
    if fitting:
        lines += _proposal_table(fitting, units, width)
    if curves is not None:
        lines += _trade_off_table(curves, units)
    if not any(proposal.method != "present" for proposal in fitting):
        lines += ["", "No method gives settings for this loop."]
    lines += _grouped(
        "Not proposed", [(p.reason, p.method) for p in proposals if not p.applies], width
    )
    remarks = [(p.method, p.reason) for p in fitting if p.reason]
    if remarks:
        lines += ["", "Remarks", *two_columns(remarks, width)]
    over = [(p.method, family_words(p)) for p in fitting if family_words(p)]
    if over:
        lines += ["", "Over the family of plants", *two_columns(over, width)]
    rules = [proposal for proposal in fitting if proposal.method != "present"]
    lines += _grouped("Aims", [(f"{p.objective}; for {p.limits}", p.method) for p in rules], width)
    lines += _grouped("Sources", [(p.source, p.method) for p in rules], width)
    return "\n".join([*lines, *note_lines(notes, width), *handover_lines(width)])


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
            "" if proposal.controller is None else amount_words(proposal.controller.integral),
            "" if proposal.controller is None else amount_words(proposal.controller.derivative),
        ]
        for proposal in proposals
    ]
    judged = [
        [text(getattr(proposal, key).value, digits=3) for key in _JUDGED] for proposal in proposals
    ]
    area = f"{units['pv']} s"
    named = [("", "", "method")]
    set_to = [("", "gain", "%/%"), ("", "integral", ""), ("", "derivative", "")]
    loop = [("", "Ms", ""), ("", "Mt", ""), ("", "PM", "deg"), ("noise", "gain", "%/%")]
    answers = [("setpoint", "IAE", area), ("load", "IAE", area), ("load", "travel", units["op"])]
    head = [*named, *set_to, *loop, *answers]
    rows = [[*left, *right] for left, right in zip(settings, judged, strict=True)]
    # Side by side, or in parts below each other, each with the names again.
    for parts in ((range(1, 11),), (range(1, 4), range(4, 11)), _PARTS):
        tables = [
            grid(
                [list(line) for line in zip(*(head[i] for i in (0, *part)), strict=True)],
                [[row[i] for i in (0, *part)] for row in rows],
            )
            for part in parts
        ]
        if max(len(line) for table in tables for line in table) <= width:
            break
    lines = [line for table in tables for line in ("", *table)]
    return lines[1:]


_PARTS: Final = (range(1, 4), range(4, 8), range(8, 11))
"""Columns of settings, of margins and of answers."""


def _trade_off_table(curves: TradeOff, units: Mapping[str, str]) -> list[str]:
    """What caution costs: gain and load IAE of the best at each limit on the sensitivity."""
    limits = sorted({point.limit for curve in curves.curves.values() for point in curve})
    found = {
        method: {point.limit: point.best for point in curve}
        for method, curve in curves.curves.items()
    }
    lines = ["", "Trade-off between speed and caution: the best at each limit on Ms"]
    if limits:
        head = [["", *(word for method in found for word in (method, method))]]
        head += [["Ms", *(word for _ in found for word in ("gain", "load IAE"))]]
        head += [["", *(word for _ in found for word in ("%/%", f"{units['pv']} s"))]]
        rows = []
        for limit in limits:
            row = [text(limit)]
            for points in found.values():
                best = points.get(limit)
                gain = None if best is None or not best.controller else best.controller.gain_value
                iae = None if best is None else best.load_iae.value
                row += [
                    text(value, digits=4) if value is not None else "-" for value in (gain, iae)
                ]
            rows.append(row)
        lines += grid(head, rows)
    return lines + [f"  {method}: {words}" for method, words in curves.reasons.items()]


def convert_data(case: Case, found: Conversion, units: Mapping[str, str]) -> Json:
    """The conversion as `convert --json` prints it; the settings in the words of a case file."""
    data: Json = {"tag": case.loop.tag, "form": found.form}
    controller = found.controller
    none = Figure(None, f"the {found.form} form cannot hold these settings")
    if controller is None:
        for key in _CONVERTED:
            put(data, key, none)
    else:
        said = settings_data(controller)
        data |= {key: said[key] for key in _CONVERTED if key in said}
        data["gain"] = float(controller.gain_value)
    filter_time = none if controller is None else Figure(controller.gains().filter_time)
    put(data, "integral_s", none if controller is None else integral_seconds(controller))
    put(data, "derivative_s", none if controller is None else derivative_seconds(controller))
    put(data, "derivative_filter_s", filter_time)
    data["exact"] = found.exact
    data["reason"] = found.reason
    data["notes"] = noted(found.notes)
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
    lines = [*heading(case, width), f"In the {found.form} form"]
    controller = found.controller
    if controller is None:
        rows: Rows = [("refused", found.reason)]
        return "\n".join([*lines, *two_columns(rows, width)])
    if controller.gain is None:
        rows = [("proportional band", text(controller.proportional_band, "%", _TYPED))]
    else:
        rows = [("gain", text(controller.gain, "", _TYPED))]
    rows += [
        ("integral", amount_words(controller.integral, _TYPED)),
        ("derivative", amount_words(controller.derivative, _TYPED)),
    ]
    if controller.derivative is not None:
        rows.append(("derivative filter", _filter_words(controller)))
        rows.append(("derivative on", controller.derivative_on))
    rows.append(("setpoint weight", text(controller.setpoint_weight, "", _TYPED)))
    same = "yes, the same path from PV to OP" if found.exact else "no, only nearly"
    rows.append(("exact", same))
    return "\n".join(
        [*lines, *two_columns(rows, width), *note_lines(found.notes, width), *handover_lines(width)]
    )


_TYPED: Final = 6
"""Digits of settings that are to be typed into a controller and stay the same controller."""


def _filter_words(controller: Controller) -> str:
    """The derivative filter as a time and as N, since some controllers take one and some the other.

    For a controller with a derivative part.
    """
    filter_time = controller.gains().filter_time
    if not filter_time:
        return "none"
    derivative_s = derivative_seconds(controller).value
    share = "" if derivative_s is None else f", N = {text(derivative_s / filter_time, '', _TYPED)}"
    return f"{text(filter_time, 's', _TYPED)}{share}"
