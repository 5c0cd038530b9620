"""The Plant panel."""

from __future__ import annotations

from workbench.screens.cells import Line
from workbench.screens.fields import FieldsPanel
from workbench.screens.panel import wrapped
from workbench.units import text


class PlantPanel(FieldsPanel):
    """What the controller acts on: a shape with its numbers, a formula, or blocks."""

    number = "1"
    title = "Plant"
    tables = ("plant",)
    hidden = ("plant.from_sha256",)
    help = (
        "The plant is the path from controller output (OP) to process variable (PV). Choose a "
        "shape and type its numbers, or choose the shape 'formula' and type any formula in s, "
        "like 1.8 exp(-6 s)/(40 s + 1).",
        "The shape 'blocks' is a drawing from OP to PV on one line: valve: 1/(2 s + 1); process: "
        "1.8/(40 s + 1). A block beside another is 'leak beside process: ...' ('less' subtracts "
        "it), one fed back is 'slave around valve to process: ...', and 'upset before process' "
        "says where the upset enters. The total stands under the settings.",
        "The shape 'vessel' is a level from the volume between the ends of the PV range and the "
        "change of flow over the OP range.",
        "'load' is the path from an upset to PV; left out, the upset enters with the output.",
        "'from' names the record that the plant was fitted to (r opens a record).",
    )

    def fixed(self, width: int) -> list[Line]:
        """The plant as one formula, and its gain; of blocks the total is always in view."""
        evaluation = self.work.evaluation
        room = self.size.height - self.wanted_height
        drawn = evaluation is not None and evaluation.case.plant.process_is_drawn
        room = max(room, 2) if drawn else room
        if evaluation is None or room < 1:
            return []
        plant = evaluation.assessment.plant
        gain = plant.gain.reason
        if plant.gain.value is not None:
            own = f"{evaluation.case.pv.unit} per {evaluation.case.op.unit}"
            gain = f"gain {text(plant.gain.value, own)}, {text(plant.gain_percent.value)} %/%"
        told = wrapped(gain, width, "quiet", "  ")
        lines = wrapped(plant.formula, width, "quiet", "  ")
        shown = max(1, room - len(told))
        if len(lines) > shown:
            cut = plant.formula[: (width - 6) * shown] + "…"
            lines = wrapped(cut, width, "quiet", "  ")[:shown]
        return [*lines, *told][:room]

    @property
    def wanted_height(self) -> int:
        """Rows that show everything, the title included."""
        return 1 + len(self.keys)
