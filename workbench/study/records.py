"""What plant records answer beside the fit.

How to make the next one, why a loop swings, which controller ran, and whether a change did what was
predicted.
"""

from __future__ import annotations

from workbench.case.case import Case
from workbench.errors import problem
from workbench.records.testplan import Plan
from workbench.records.testplan import plan_test as plan_for
from workbench.study.loop import plant_of


def plan_test(
    case: Case,
    *,
    max_pv_change: float,
    interval: float | None = None,
    certainty: float | None = None,
) -> Plan:
    """A bump test for the case's plant as it is believed to be, with the noise of its PV.

    Raises `InputError` where the plant or the noise is missing, or no bump can be made on it.
    """
    if not case.pv.noise:
        raise problem(
            "is missing: without noise every test is perfect",
            "give the standard deviation of PV at rest",
            key="pv.noise",
        )
    op = case.op
    low = op.low if op.min is None else op.min
    high = op.high if op.max is None else op.max
    room = min(high - op.rest, op.rest - low)
    if not room > 0.0:
        what = "is at a limit of OP, so that no bump can be made to both sides"
        raise problem(what, "start the test from inside the limits", key="op.start")
    return plan_for(
        plant_of(case),
        noise=case.pv.noise,
        max_pv_change=max_pv_change,
        max_op_change=room,
        lost_motion=op.range.units(case.valve.deadband + case.valve.stick_slip),
        interval=interval,
        certainty=certainty,
    )
