"""The Plant panel."""

from __future__ import annotations

from workbench.screens.cells import Line
from workbench.screens.fields import FieldsPanel
from workbench.screens.panel import wrapped


class PlantPanel(FieldsPanel):
    """What the controller acts on: a shape with its numbers, or a formula."""

    number = "1"
    title = "Plant"
    tables = ("plant",)
    hidden = ("plant.from_sha256",)
    help = (
        "The plant is the path from controller output (OP) to process variable (PV). Choose a "
        "shape and type its numbers, or choose the shape 'formula' and type any formula in s, "
        "like 1.8 exp(-6 s)/(40 s + 1).",
        "'load' is the path from an upset to PV; left out, the upset enters with the output.",
        "'from' names the record that the plant was fitted to (r opens a record).",
    )

    def fixed(self, width: int) -> list[Line]:
        """The plant as one formula."""
        evaluation = self.work.evaluation
        if evaluation is None or self.size.height < self.wanted_height + 1:
            return []
        room = self.size.height - self.wanted_height
        return wrapped(evaluation.assessment.plant.formula, width, "quiet", "  ")[:room]

    @property
    def wanted_height(self) -> int:
        """Rows that show everything, the title included."""
        return 1 + len(self.keys)
