"""The Controller panel."""

from __future__ import annotations

from workbench.screens.fields import FieldsPanel


class ControllerPanel(FieldsPanel):
    """The settings as the control system shows them."""

    number = "2"
    title = "Controller"
    tables = ("controller",)
    help = (
        "The settings in the form and the units of your control system. The unit typed with an "
        "integral or derivative time is the unit shown from then on.",
        "Setting a gain removes the proportional band, and the other way round. '-' means left "
        "out; an empty entry leaves a setting out.",
        "'scan' is the execution interval; without one the controller counts as analogue.",
    )
