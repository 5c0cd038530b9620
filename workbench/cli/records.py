"""The commands about records: what the plant did, and what that tells."""

from __future__ import annotations

from typing import Final

from workbench import report
from workbench.cli.answer import Answer, Status, loop_of
from workbench.cli.options import Given
from workbench.cli.output import progress, width
from workbench.errors import problem


def fit(given: Given) -> Answer:
    """Plant models fitted to a test record."""
    from workbench import study

    noise = given.choice("--noise-model", ("auto", "white", "correlated"))
    shape = given.word("--shape")
    with progress("fitting"):
        fit = study.fit_record(
            given.file,
            time=given.word("--time"),
            pv=given.word("--pv"),
            op=given.word("--op"),
            start=given.word("--from"),
            end=given.word("--to"),
            noise_model=noise or "auto",
            drift="--no-drift" not in given,
            shapes=FITTED if shape is None else (shape,),
        )
    return Answer(
        report.fit_text(fit, width()),
        report.fit_data(fit),
        Status.NO if fit.chosen is None else Status.DONE,
    )


def plan(given: Given) -> Answer:
    """A bump test that is worth its disturbance."""
    from workbench import study

    allowed = given.number("--max-pv-change", above=0.0)
    if allowed is None:
        mend = "say how far PV may leave its start, in PV units"
        raise problem("is missing", mend, key="--max-pv-change")
    interval, certainty = given.seconds("--interval"), given.number("--certainty", above=0.0)
    case = loop_of(given)
    with progress("planning"):
        found = study.plan_test(case, max_pv_change=allowed, interval=interval, certainty=certainty)
    units = study.units_of(case)
    return Answer(
        report.plan_text(found, units, width()),
        report.plan_data(found, units),
        Status.DONE if found.enough else Status.NO,
    )


FITTED: Final = ("first-order", "integrating")
"""Shapes that are fitted where none is named."""
