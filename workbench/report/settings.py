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
    case: Case, proposals: Sequence[Proposal], notes: Sequence[Note], units: Mapping[str, str]
) -> Json:
    """The proposals as `propose --json` prints them."""
    return {
        "tag": case.loop.tag,
        "proposals": [_proposal_data(proposal) for proposal in proposals],
        "notes": noted(notes),
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
    put(data, "gain", gain)
    put(data, "integral_s", integral_seconds(controller))
    put(data, "derivative_s", derivative_seconds(controller))
    for key in ("max_sensitivity", "phase_margin_deg", "setpoint_iae", "load_iae"):
        put(data, key, getattr(proposal, key))
    put(data, "family_max_sensitivity_worst", over_family(proposal)[0])
    put(data, "family_stable_percent", over_family(proposal)[1])
    data["within_limit"] = bool(proposal.within_limit)
    data["applies"] = bool(proposal.applies)
    data["reason"] = proposal.reason
    return data


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
) -> str:
    """The proposals for people: one table, what does not apply, and where each comes from."""
    lines = heading(case, width)
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
    wide = grid(
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
    return [*grid(settings_head, settings), "", *grid(heads, below)]


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
