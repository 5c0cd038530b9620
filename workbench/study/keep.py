"""From a record to a plant, from settings to the history, and whether a file still holds."""

from __future__ import annotations

import contextlib
import hashlib
import os
import re
from dataclasses import dataclass, fields, replace
from datetime import datetime
from pathlib import Path
from typing import Final

from workbench import __version__
from workbench.case.case import Case, Revision, with_settings
from workbench.case.files import read_case
from workbench.errors import (
    InputError,
    Problem,
    WorkbenchError,
    problem,
)
from workbench.model.pid import Controller
from workbench.model.plant import Formula, Shape
from workbench.records.candidate import Candidate
from workbench.records.identify import Fit
from workbench.records.table import LARGEST_FILE
from workbench.study.assessment import assess
from workbench.study.family import drawn_plants, with_family
from workbench.study.loop import controller_of
from workbench.study.prediction import predicted
from workbench.study.upset import upset_faults, with_upset_named
from workbench.units import Amount, harmless, rounded, text


@dataclass(frozen=True)
class FileCheck:
    """Whether one case file is sound and its figures still come out."""

    path: str
    ok: bool
    faults: tuple[Problem, ...]


def chosen_candidate(fit: Fit, shape: str | None = None) -> Candidate:
    """The candidate of a shape, or the one the fit chose.

    Raises `InputError` where the record cannot tell, or has no candidate of that shape.
    """
    wanted = shape or fit.chosen
    for candidate in fit.candidates:
        if candidate.shape == wanted:
            return candidate
    if wanted is None:
        raise problem("the record cannot tell the plant", fit.reason or "take another record")
    raise problem(f"the fit has no {wanted} candidate", "choose one that is listed", key="--shape")


def accept(case: Case, fit: Fit, shape: str | None = None, folder: Path | None = None) -> Case:
    """The case with the fitted plant, and where it came from; to four significant digits.

    The record is named as seen from `folder`, where the case file lies; without it, by its name.
    """
    candidate = chosen_candidate(fit, shape)
    record = Path(fit.record.path)
    plant = replace(
        case.plant,
        process=_shape_as_typed(candidate.plant),
        from_=record.name if folder is None else os.path.relpath(record, folder),
        from_sha256=fit.record.sha256,
        dated=_day(fit.record.start_stamp),
    )
    return replace(case, plant=plant)


def accept_family(
    case: Case, fit: Fit, shape: str | None = None, folder: Path | None = None
) -> Case:
    """As `accept`, with the plants that the record cannot tell from the fitted one as a family."""
    drawn = drawn_plants(chosen_candidate(fit, shape), FAMILY)
    taken = accept(case, fit, shape, folder)
    return with_family(taken, [_shape_as_typed(plant) for plant in drawn])


FAMILY: Final = 30
"""Plants drawn for a family: enough that the worst of them lies beyond 95 % of all."""


def _day(stamp: str | None) -> str:
    """The day of a stamp; nothing where the record has no calendar."""
    found = re.match(r"\d{4}-\d\d-\d\d", stamp or "")
    return found[0] if found else ""


def _shape_as_typed(process: Shape) -> Shape:
    if isinstance(process, Formula):
        return process
    changed: dict[str, object] = {}
    for field in fields(process):
        value = getattr(process, field.name)
        if isinstance(value, Amount):
            changed[field.name] = Amount(rounded(value.value), value.unit)
        elif isinstance(value, float):
            changed[field.name] = rounded(value)
    return replace(process, **changed)  # type: ignore[arg-type]


_RECORDED: Final = ("max_sensitivity", "load_iae", "setpoint_iae", "phase_margin_deg")
"""Figures that a history entry keeps and a check makes again."""


_SAME_FIGURE: Final = 0.005
"""Share by which a figure made again may differ."""


def record_change(
    case: Case,
    *,
    who: str,
    why: str,
    now: datetime,
    kind: str = "installed",
    reference: str = "",
) -> Case:
    """The case with a history entry for its present settings, and the figures predicted for them.

    Raises `InputError` where the loop has no controller, who or why is blank, or the settings of a
    safety-related loop are installed without a written reference.
    """
    faults = [
        Problem("is blank", mend, key)
        for key, value, mend in (
            ("who", who, "say who makes the change"),
            ("why", why, "say why, in a few words"),
        )
        if not value.strip()
    ]
    if kind == "installed" and case.loop.safety_related and not reference.strip():
        what = "is blank, and the loop is safety-related"
        mend = "name the written approval, or save the settings as proposed"
        faults.append(Problem(what, mend, "reference"))
    if faults:
        raise InputError(faults)
    case = with_upset_named(case)
    figures = _figures_now(case)
    entry = Revision(
        at=now,
        who=who.strip(),
        kind=kind,
        why=why.strip(),
        controller=controller_of(case),
        reference=reference.strip(),
        program=__version__,
        **{name: rounded(value, 6) for name, value in figures.items()},  # type: ignore[arg-type]
    )
    return case.with_entry(entry)


def _figures_now(case: Case) -> dict[str, float]:
    """Figures of the loop as it will run; those that do not exist are left out."""
    assessment = assess(case)
    judged = assessment.judged
    assert judged is not None
    if not judged.margins.stable:
        return {}
    found = {
        "max_sensitivity": judged.margins.max_sensitivity,
        "phase_margin_deg": judged.margins.phase_margin_deg,
    }
    prediction, _ = predicted(case)
    if prediction is not None:
        measures = prediction.measures
        found |= {"load_iae": measures.load_iae, "setpoint_iae": measures.setpoint_iae}
    return {name: figure.value for name, figure in found.items() if figure.value is not None}


def check_case(path: str | Path) -> FileCheck:
    """Whether a case file is sound: format, limits, its record, and its newest figures made again.

    Raises `InputError` where the file is not there.
    """
    try:
        file = read_case(path)
    except InputError as fault:
        if not Path(path).is_file():
            raise
        return FileCheck(str(path), False, fault.problems)
    placed = tuple(replace(fault, path=str(path)) for fault in faults_of(file.case, Path(path)))
    return FileCheck(str(path), not placed, placed)


def faults_of(case: Case, path: Path) -> list[Problem]:
    """What of a sound case in the file at `path` no longer holds: its record, its figures."""
    missing = [*_record_faults(case, path), *upset_faults(case)]
    # Figures that come from a record are not made again from another.
    from_upset = any(fault.key.startswith("scenario.") for fault in missing)
    return [*missing, *([] if from_upset else _figure_faults(case))]


def _record_faults(case: Case, path: Path) -> list[Problem]:
    """The record that the plant came from, found by name and SHA-256."""
    if not case.plant.from_:
        return []
    record = path.parent / case.plant.from_
    if not record.is_file():
        moved = _named_otherwise(path.parent, case.plant.from_sha256)
        mend = "put it back, or accept a fit of another record"
        return [
            Problem(
                f"the record {case.plant.from_!r} is not beside the case",
                f"its bytes are in {moved!r}: set plant.from to that" if moved else mend,
                "plant.from",
            )
        ]
    if case.plant.from_sha256 and _sha256(record) != case.plant.from_sha256:
        return [
            Problem(
                f"the record {case.plant.from_!r} is not the one the plant was fitted to",
                "fit it again, or put the old record back",
                "plant.from_sha256",
            )
        ]
    return []


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _named_otherwise(folder: Path, sha256: str) -> str:
    """The record of a folder that has these bytes under another name, or nothing."""
    for path in sorted(folder.glob("*.csv"))[:_MOST_SEARCHED] if sha256 else ():
        with contextlib.suppress(OSError):
            if path.is_file() and path.stat().st_size <= LARGEST_FILE and _sha256(path) == sha256:
                return harmless(path.name)
    return ""


_MOST_SEARCHED: Final = 200
"""Records of a folder that are looked through for one that was renamed."""


def _figure_faults(case: Case) -> list[Problem]:
    """Figures of the newest settings in the history that no longer come out."""
    number, entry = len(case.history), None
    for revision in reversed(case.history):
        if revision.controller is not None:
            entry = revision
            break
        number -= 1
    if entry is None or not any(getattr(entry, name) is not None for name in _RECORDED):
        return []
    try:
        now = _figures_now(replace(case, controller=_controller_of_entry(case, entry)))
    except WorkbenchError as fault:
        return [Problem(f"the figures cannot be made again: {fault}", "", f"history {number}")]
    faults = []
    for name in _RECORDED:
        then, value = getattr(entry, name), now.get(name)
        if then is None or (value is not None and abs(value - then) <= _SAME_FIGURE * abs(then)):
            continue
        found = "does not exist now" if value is None else f"comes out as {text(value, digits=6)}"
        faults.append(
            Problem(
                f"{name} was {text(then, digits=6)} and {found}",
                "plant, scenario or settings changed since: save again with a reason",
                f"history {number}",
            )
        )
    return faults


def _controller_of_entry(case: Case, entry: Revision) -> Controller:
    """The entry's settings; what an entry does not name stays as the case has it."""
    return controller_of(with_settings(case, entry))
