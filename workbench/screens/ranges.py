"""The Loop panel."""

from __future__ import annotations

from workbench.screens.fields import FieldsPanel


class LoopPanel(FieldsPanel):
    """The loop's name, and the ranges of its signals."""

    number = "7"
    title = "Loop"
    tables = ("loop", "pv", "op", "family")
    help = (
        "The loop's tag and service, and the range, the operating point and the limits of PV and "
        "OP in engineering units.",
        "The family is the plants that the loop must put up with beside the nominal one: "
        "tolerances of its gain, dead time and lags, operating points, further plants. Every "
        "figure is then given for all of them too.",
    )
