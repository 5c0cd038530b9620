"""The controller of a case in another form and other units, or why the form cannot hold it."""

from __future__ import annotations

from dataclasses import dataclass

from workbench.case.case import Case
from workbench.errors import NotApplicable
from workbench.model.conversion import Units
from workbench.model.conversion import convert as converted
from workbench.model.pid import Controller
from workbench.study.loop import controller_of
from workbench.units import Note


@dataclass(frozen=True)
class Conversion:
    """The same controller, written in another way."""

    form: str
    """The form asked for."""
    controller: Controller | None
    """Missing where the form cannot hold the settings."""
    exact: bool
    """The path from PV to OP is the same function of s, derivative filter included."""
    reason: str = ""
    """Why the form cannot hold the settings."""
    notes: tuple[Note, ...] = ()


def convert(case: Case, form: str, units: Units | None = None) -> Conversion:
    """The controller of a case in the form `form`; a plant is not needed.

    Raises `InputError` where the case has no controller, or the form does not use a unit.
    """
    try:
        found = converted(controller_of(case), form, units)
    except NotApplicable as refusal:
        return Conversion(form, None, False, str(refusal))
    return Conversion(form, found.controller, found.exact, "", found.notes)
