"""The Structure panel."""

from __future__ import annotations

from typing import Final

from workbench.screens.fields import FieldsPanel


class StructurePanel(FieldsPanel):
    """What is built round the loop: compensation, feedforward, an inner loop."""

    number = "9"
    title = "Structure"
    tables = ("compensation", "feedforward", "inner")
    help = (
        "Each part is there as soon as its first setting is: 'compensator model' is a formula of "
        "the plant for dead-time compensation, 'feedforward gain' what an upset of 1 adds to OP, "
        "and 'inner plant' a formula from the inner output to the inner PV, which makes this a "
        "cascade. Their other settings then stand below; an empty entry in the first takes the "
        "part out.",
        "In a cascade OP is the setpoint of the inner loop, and the inner PV is in units of OP.",
    )

    @property
    def keys(self) -> tuple[str, ...]:
        """Of a part that is not there, only the setting that makes it."""
        case = self.work.case
        return tuple(
            key
            for key in super().keys
            if key in FIRST or getattr(case, key.partition(".")[0]).is_there
        )


FIRST: Final = ("compensation.model", "feedforward.gain", "inner.plant")
"""The settings that make a part."""
