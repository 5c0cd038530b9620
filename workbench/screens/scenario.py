"""The Scenario panel."""

from __future__ import annotations

from workbench.screens.fields import FieldsPanel


class ScenarioPanel(FieldsPanel):
    """What happens to the loop in the prediction."""

    number = "6"
    title = "Scenario"
    tables = ("scenario",)
    hidden = ("scenario.load_sha256",)
    help = (
        "The setpoint step and the load step that the Trend shows and the Figures measure. With "
        "neither step given, the setpoint moves by 5 % of the PV span and the load by 5 % of the "
        "OP span.",
        "'settings at' is when the controller gets the new gain, integral and derivative below it, "
        "without a bump. A recorded upset is a column of a CSV file beside the case: give the "
        "column, the file, and the shape 'record'.",
    )

    @property
    def keys(self) -> tuple[str, ...]:
        """Modes of an inner loop only where there is one."""
        cascade = self.work.case.inner.is_there
        return tuple(key for key in super().keys if cascade or ".inner_" not in key)
