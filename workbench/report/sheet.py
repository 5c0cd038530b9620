"""The retune sheet: one page to take to the control room, plain or as Markdown."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, Final

from workbench.report.files import settings_data
from workbench.report.words import (
    Rows,
    figure_words,
    grid,
    handover_lines,
    time_words,
    two_columns,
    wrapped,
)
from workbench.units import Note, harmless, quantities, text, time_text

if TYPE_CHECKING:
    from workbench.case.case import Case
    from workbench.model.robustness import Margins
    from workbench.study import Evaluation, Retune

WIDTH: Final = 80
"""Columns of the plain page."""


def sheet_text(
    retune: Retune,
    units: Mapping[str, str],
    trend: Sequence[str],
    *,
    file: str,
    tag_words: str = "",
    markdown: bool = False,
) -> str:
    """The sheet.

    Parameters
    ----------
    retune
        The change.
    units
        The loop's own units.
    trend
        The prediction as rows of characters; empty where there is none.
    file
        The case file, for the way back.
    tag_words
        What the letters of the tag tell.
    markdown
        Headings and code blocks for a document; otherwise plain text of 80 columns.
    """
    case = retune.case
    title = f"Retune sheet  {case.loop.tag}"
    parts: list[tuple[str, list[str]]] = [
        ("", _loop_lines(case, tag_words)),
        ("Settings, in the order of entry", _settings_lines(retune)),
        ("What to expect", [*_expected(retune, units), *trend]),
        ("What was assumed", _assumed(retune, units)),
        ("Cautions", _cautions(retune)),
        ("How to go back", _way_back(retune, file)),
        ("Approval", list(_APPROVAL)),
    ]
    if markdown:
        return _markdown(title, parts)
    lines = [harmless(title, WIDTH), "=" * min(WIDTH, len(title))]
    for head, body in parts:
        lines += [*(("", head, "-" * len(head)) if head else ()), *body]
    return "\n".join(lines)


def _markdown(title: str, parts: Sequence[tuple[str, Sequence[str]]]) -> str:
    """Every part as it stands, in a block that keeps its columns."""
    marks = re.findall("`+", "".join(line for _, body in parts for line in body))
    # A line of the file that looks like the end of a block must not be one.
    fence = "`" * max(3, 1 + max(map(len, marks), default=0))
    lines = [f"# {_escaped(title)}"]
    for head, body in parts:
        lines += ["", *((f"## {head}", "") if head else ()), f"{fence}text", *body, fence]
    return "\n".join(lines)


def _escaped(words: str) -> str:
    """Words that Markdown shows as they are."""
    return "".join(f"\\{c}" if c in "\\`*_{}[]()<>#+-.!|" else c for c in harmless(words, 200))


def _loop_lines(case: Case, tag_words: str) -> list[str]:
    loop = case.loop
    rows: Rows = [
        (label, words)
        for label, words in (
            ("service", loop.service),
            ("area", loop.area),
            ("tag letters", tag_words),
            ("kind", loop.kind or ""),
            ("notes", loop.notes),
        )
        if words
    ]
    if loop.safety_related:
        rows.append(("SAFETY", "this loop is safety-related: it needs its own review"))
    return two_columns(rows, WIDTH, "")


def _settings_lines(retune: Retune) -> list[str]:
    """Each setting at every stage, in the controller's own form and units."""
    stages = [settings_data(stage.controller) for stage in retune.stages]
    keys = dict.fromkeys(key for stage in stages for key in stage)
    rows = [
        [_LABELS.get(key, key.replace("_", " ")), *(_said(stage.get(key)) for stage in stages)]
        for key in keys
        if key in _ALWAYS or any(stage.get(key) != stages[-1].get(key) for stage in stages)
        # What stays as it is and is not tuned stands in the case file.
    ]
    rows.append(["(Ms predicted)", *(figure_words(s.max_sensitivity)[:24] for s in retune.stages)])
    lines = [line[:WIDTH] for line in grid([["", *(s.name for s in retune.stages)]], rows)]
    if retune.old is None:
        blank = "No settings are on record as installed: note those in the controller now."
        return [*lines, "", blank, "gain ________  integral ________  derivative ________"]
    if len(retune.stages) > 2:
        words = (
            "The gain moves by more than a factor of two: enter the settings half way, watch the"
            " loop through an upset or a small setpoint change, then enter the new ones."
        )
        lines += ["", wrapped(words, WIDTH)]
    return lines


def settings_block(case: Case) -> str:
    """The settings alone, to be pasted: a line each in the order of entry, in their own units.

    Raises `InputError` where the case has no controller.
    """
    from workbench.study import controller_of

    controller = controller_of(case)
    own = {"PV": case.pv.unit, "OP": case.op.unit}
    rows = []
    for key, value in settings_data(controller).items():
        declared = quantities(type(controller))[key]
        unit = "/".join(own.get(part, part) for part in declared.unit.split("/"))
        said = f"{_said(value)} {unit}" if isinstance(value, float | int) and unit else _said(value)
        rows.append((key.replace("_", " "), said))
    title = harmless(f"{case.loop.tag}  {case.loop.service}".rstrip(), WIDTH)
    return "\n".join([title, *two_columns(rows, WIDTH, ""), *handover_lines(WIDTH), ""])


_ALWAYS: Final = ("form", "gain", "proportional_band", "integral", "derivative")
_LABELS: Final = {"proportional_band": "proportional band, %", "gain": "gain, %/%"}


def _said(value: object) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    return "-" if value is None else text(value) if isinstance(value, float | int) else str(value)


_EXPECTED: Final = (
    ("setpoint_overshoot_percent", "overshoot after a setpoint step", "%"),
    ("setpoint_settling_time_s", "settling after a setpoint step", "s"),
    ("load_peak_deviation", "peak deviation after a load step", "{pv}"),
    ("load_iae", "IAE after a load step", "{pv} s"),
    ("load_settling_time_s", "settling after a load step", "s"),
    ("output_travel", "travel of the output", "{op}"),
)


def _expected(retune: Retune, units: Mapping[str, str]) -> list[str]:
    evaluations = [retune.after] if retune.before is None else [retune.before, retune.after]
    names = ["new"] if retune.before is None else ["present", "new"]
    rows = []
    for field, label, unit in _EXPECTED:
        cells = [_measured(each, field, unit.format(**units)) for each in evaluations]
        rows.append([label, *cells])
    for label, of in _TOLERANCE:
        rows.append([label, *(_margin(each, of) for each in evaluations)])
    lines = [line[:WIDTH] for line in grid([["", *names]], rows)]
    prediction = retune.after.prediction
    if prediction is not None:
        step, load = prediction.setpoint_step, prediction.load_step
        # A load path of its own takes an input whose unit only its author knows.
        load_unit = "" if retune.case.plant.load else units["op"]
        words = (
            f"For a setpoint step of {text(step, units['pv'])} at"
            f" {time_text(prediction.setpoint_at_s)} and a load step of {text(load, load_unit)} at"
            f" {time_text(prediction.load_at_s)}:"
        )
        lines = [wrapped(words, WIDTH), *lines]
    return lines


def _measured(evaluation: Evaluation, field: str, unit: str) -> str:
    if evaluation.prediction is None:
        return "not predicted"
    figure = getattr(evaluation.prediction.measures, field)
    if figure.value is None:
        return "none"
    return time_words(figure) if unit == "s" else figure_words(figure, unit)


def _times(margins: Margins) -> str:
    figure = margins.gain_margin
    return "any" if figure.value is None else f"{text(figure.value, digits=3)} times"


def _later(margins: Margins) -> str:
    figure = margins.delay_margin_s
    return "any" if figure.value is None else time_text(figure.value, 3)


_TOLERANCE: Final = (
    ("the plant's gain may grow", _times),
    ("its dead time may grow by", _later),
)


def _margin(evaluation: Evaluation, of: Callable[[Margins], str]) -> str:
    judged = evaluation.assessment.judged
    if judged is None or not judged.margins.stable:
        return "NOT STABLE"
    return of(judged.margins)


def _assumed(retune: Retune, units: Mapping[str, str]) -> list[str]:
    case, found = retune.case, retune.after.assessment
    rows: Rows = [("plant", f"{found.plant.formula}  [{units['gain']}, s]")]
    plant = case.plant
    source = plant.from_ or "entered by hand, no record named"
    rows.append(("model from", f"{source}{f', {plant.dated}' if plant.dated else ''}"))
    rows.append(
        (
            "operating point",
            f"PV {text(case.pv.rest, units['pv'])}, OP {text(case.op.rest, units['op'])}",
        )
    )
    low = case.op.low if case.op.min is None else case.op.min
    high = case.op.high if case.op.max is None else case.op.max
    rows.append(("output limits", f"{text(low)} to {text(high, units['op'])}"))
    controller = case.controller
    scan = None if controller is None else controller.scan
    rows.append(("scan", str(scan) if scan else "none: an analogue controller"))
    if case.pv.filter:
        rows.append(("PV filter", str(case.pv.filter)))
    rows.append(("action", found.action or "none"))
    return two_columns(rows, WIDTH, "")


def _cautions(retune: Retune) -> list[str]:
    from workbench.study import HANDOVER

    notes: list[Note] = [n for n in retune.after.cautions if n.severity == "caution"]
    told = [*(note.text for note in notes), *HANDOVER]
    return [wrapped(f"- {words}", WIDTH, hang="  ") for words in told]


def _way_back(retune: Retune, file: str) -> list[str]:
    words = "Enter again the settings noted above; the case file has none on record."
    if retune.old is not None:
        number = retune.case.history.index(retune.old) + 1
        words = (
            "If the loop swings, put it in manual at its usual output, enter the present settings"
            " of the first column and put it back in automatic. They are entry"
            f" {number} of `workbench history {file}`, by {retune.old.who}."
        )
    return [wrapped(words, WIDTH)]


_APPROVAL: Final = (
    "reference ____________________   approved by __________________   date ________",
    "entered by ___________________   half way at __________________   new at ______",
    "loop watched until ___________   remarks ______________________________________",
)
