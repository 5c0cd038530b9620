"""The Scenario panel."""

from __future__ import annotations

from workbench.screens.fields import FieldsPanel


class ScenarioPanel(FieldsPanel):
    """What happens to the loop in the prediction."""

    number = "6"
    title = "Scenario"
    tables = ("scenario",)
    help = (
        "The setpoint step and the load step that the Trend shows and the Figures measure. With "
        "neither step given, the setpoint moves by 5 % of the PV span and the load by 5 % of the "
        "OP span.",
    )
