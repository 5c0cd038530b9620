"""The commands about records: what the plant did, and what that tells."""

from __future__ import annotations

from workbench import report
from workbench.cli.answer import Answer, Status
from workbench.cli.options import Given
from workbench.cli.output import progress, width


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
            shapes=None if shape is None else (shape,),
        )
    return Answer(
        report.fit_text(fit, width()),
        report.fit_data(fit),
        Status.NO if fit.chosen is None else Status.DONE,
    )
