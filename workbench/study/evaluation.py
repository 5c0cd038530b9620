"""Everything a screen shows of one case, and the cautions that go with it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

from workbench.case.case import Case
from workbench.case.tags import USUAL_SCANS_S
from workbench.errors import (
    InputError,
)
from workbench.study.assessment import Assessment, assess
from workbench.study.family import FamilyFigures, family_figures
from workbench.study.loop import action_of, controller_of
from workbench.study.prediction import Prediction, predicted
from workbench.units import Note, text

HANDOVER: Final = (
    "Predictions come from a model of the plant, not from the plant.",
    "Follow the site's management of change and agree every change with operations.",
    "Keep the old settings at hand and watch the loop for the first hours.",
    "A loop that takes part in a safety function, an interlock or an emission limit needs its own "
    "review; local codes and licensed practice prevail.",
)
"""Shown wherever settings leave the tool."""


@dataclass(frozen=True)
class Evaluation:
    """Everything a screen shows of one case."""

    case: Case
    assessment: Assessment
    prediction: Prediction | None
    """Missing without a controller, or with the reason."""
    cautions: tuple[Note, ...]
    prediction_reason: str = ""
    """Why there is no prediction although there is a controller."""
    family: FamilyFigures | None = None
    """The same over the family of plants, where the case states one."""


def evaluate(case: Case, seed: int = 0, like: Evaluation | None = None) -> Evaluation:
    """Everything a screen shows of one case, over the same time as `like` where its end is open.

    Raises `InputError` where the case has no plant.
    """
    assessment = assess(case)
    prediction, missing = None, ""
    if case.controller is not None:
        prediction, missing = predicted(case, seed, like.prediction if like else None)
    family = family_figures(case, None if prediction is None else prediction.events)
    notes = (*family_cautions(family), *cautions(case, assessment, prediction))
    if missing:
        notes = (*notes, Note("caution", f"not predicted: {missing}"))
    return Evaluation(case, assessment, prediction, notes, missing, family)


def family_cautions(family: FamilyFigures | None) -> tuple[Note, ...]:
    """What the engineer should mind of the family."""
    if family is None:
        return ()
    if family.reason:
        return (Note("caution", f"the family is not judged: {family.reason}"),)
    if family.stable_percent == 100.0:
        return ()
    share = text(100.0 - family.stable_percent, "%", digits=3)
    words = f"NOT STABLE for {share} of the family, {family.worst_plant} among them"
    return (Note("caution", words),)


def cautions(
    case: Case, assessment: Assessment, prediction: Prediction | None = None
) -> tuple[Note, ...]:
    """What the engineer should mind, most pressing first, the prediction included if given."""
    notes = list(assessment.notes)
    judged = assessment.judged
    if judged is None:
        return tuple(notes)
    if assessment.sampled_reason:
        notes.append(Note("caution", f"judged as analogue: {assessment.sampled_reason}"))
    margins = judged.margins
    if not margins.stable:
        notes.insert(0, Note("caution", f"NOT STABLE: {margins.reason}"))
    elif margins.max_sensitivity.value is not None and margins.max_sensitivity.value > 2.0:
        ms = text(margins.max_sensitivity.value, digits=3)
        notes.append(
            Note("caution", f"fragile: Ms {ms} is above 2; 1.4 to 2 is usual (common practice)")
        )
    notes += _action_notes(case) + _scan_notes(case, assessment)
    if prediction is not None:
        held = prediction.measures.output_time_at_limit_s.value
        if held:
            notes.append(Note("caution", f"OP is at a limit for {text(held, 's')}"))
        if prediction.diverged:
            notes.append(Note("caution", "the prediction ran away and was cut off"))
    if case.loop.safety_related:
        notes.append(Note("caution", "marked safety-related: needs its own review"))
    return tuple(notes)


def _action_notes(case: Case) -> list[Note]:
    """A stated action that contradicts the plant."""
    given = case.controller.action if case.controller else None
    if given is None or case.controller is None:
        return []
    try:
        wanted, why = action_of(replace(case, controller=replace(case.controller, action=None)))
    except InputError:
        return []
    if wanted == given:
        return []
    return [Note("caution", f"the controller is {given} acting; this plant asks for {why}")]


def _scan_notes(case: Case, assessment: Assessment) -> list[Note]:
    controller = controller_of(case)
    scan = controller.scan_s
    if scan is None and case.pv.noise:
        return [Note("info", "an analogue controller: the noise of PV is left out")]
    if scan is None:
        return []
    notes = []
    gains = controller.gains()
    if gains.derivative and 0.0 < gains.filter_time < scan / 2.0:
        notes.append(
            Note(
                "caution",
                f"derivative filter time {text(gains.filter_time, 's')} is far below the scan "
                f"{controller.scan}: the scan sets the filtering",
            )
        )
    kind = case.loop.kind_told
    usual = USUAL_SCANS_S.get(kind)
    if usual is not None and scan > 1.001 * usual[1]:
        between = f"{text(usual[0])} to {text(usual[1], 's')}"
        notes.append(
            Note(
                "info",
                f"a scan of {controller.scan} is long for a {kind} loop: {between} is usual"
                " (common practice)",
            )
        )
    analogue, sampled = assessment.loop, assessment.sampled
    if analogue and sampled and analogue.margins.stable and not sampled.margins.stable:
        notes.append(Note("caution", "stable only as analogue: the scan interval is too long"))
    return notes
