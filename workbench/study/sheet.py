"""What the control room needs to know of a change of settings."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from workbench.case.case import Case, Revision, with_settings
from workbench.errors import InputError
from workbench.model.pid import Controller
from workbench.study.assessment import Assessment, assess
from workbench.study.evaluation import Evaluation, evaluate
from workbench.study.loop import controller_of
from workbench.units import Amount, Figure, rounded


@dataclass(frozen=True)
class Stage:
    """Settings to be put in force, one after the other."""

    name: str
    controller: Controller
    max_sensitivity: Figure


@dataclass(frozen=True)
class Retune:
    """A change of settings, judged before it is made."""

    case: Case
    old: Revision | None
    """The entry whose settings are in the controller now; `None` where none is on record."""
    before: Evaluation | None
    """The loop with the old settings; missing without them."""
    after: Evaluation
    """The loop with the new settings, those of the case."""
    stages: tuple[Stage, ...]
    """From the present settings to the new ones."""


def retune(case: Case) -> Retune:
    """The change from the settings that are in the controller to those of the case.

    In the controller are the newest settings on record that were installed, or put back, and are
    not those of the case.  Where the gain moves by more than a factor of two there is a stage half
    way, at the geometric mean of the gains and of the times.

    Raises `InputError` where the case has no plant or no controller.
    """
    controller_of(case)
    after = evaluate(case)
    old, earlier = _in_force(case)
    if old is None or earlier is None:
        return Retune(case, None, None, after, (_stage("new", after.assessment, case),))
    before = evaluate(earlier)
    steps = [
        _stage("present", before.assessment, earlier),
        _stage("new", after.assessment, case),
    ]
    middle = _half_way(controller_of(earlier), controller_of(case))
    if middle is not None:
        between = replace(case, controller=middle)
        steps.insert(1, _stage("half way", assess(between), between))
    return Retune(case, old, before, after, tuple(steps))


def _in_force(case: Case) -> tuple[Revision | None, Case | None]:
    """The entry with the settings in the controller now, and the case with them."""
    for entry in reversed(case.history):
        if entry.controller is None or entry.kind not in ("installed", "withdrawn"):
            continue
        earlier = with_settings(case, entry)
        if earlier.controller != case.controller:
            return entry, earlier
    return None, None


def _stage(name: str, found: Assessment, case: Case) -> Stage:
    judged = found.judged
    assert judged is not None
    return Stage(name, controller_of(case), judged.margins.max_sensitivity)


def _half_way(old: Controller, new: Controller) -> Controller | None:
    """Settings between the two, in the units of the new ones; nothing where the step is small."""
    if old.form != new.form:
        return None
    one, other = old.gain_value, new.gain_value
    if not one or not other or one * other < 0 or 0.5 <= other / one <= 2.0:
        return None
    gain = math.copysign(math.sqrt(one * other), other)
    band = new.proportional_band is not None
    changed: dict[str, object] = {
        "gain": None if band else rounded(gain, 3),
        "proportional_band": rounded(100.0 / gain, 3) if band else None,
        "integral": _between(old.integral, new.integral),
        "derivative": _between(old.derivative, new.derivative),
    }
    try:
        return replace(new, **changed)  # type: ignore[arg-type]
    except InputError:
        return None


def _between(old: Amount | None, new: Amount | None) -> Amount | None:
    """The geometric mean, in the unit of the new; the new itself where one has none."""
    if old is None or new is None or not old.value or not new.value:
        return new
    mean = new.with_seconds(math.sqrt(old.seconds * new.seconds))
    return replace(mean, value=rounded(mean.value, 3))
