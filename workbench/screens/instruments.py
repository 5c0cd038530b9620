"""The Instruments panel."""

from __future__ import annotations

from workbench.screens.fields import FieldsPanel


class InstrumentsPanel(FieldsPanel):
    """What stands between the controller and the plant: the valve, and the sensor of PV."""

    number = "8"
    title = "Instruments"
    tables = ("valve", "measurement")
    help = (
        "What the valve makes of OP, and how PV is measured. Where nothing is set the valve is "
        "healthy and the sensor shows what there is.",
        "In a cascade the valve stands behind the inner controller.",
    )
