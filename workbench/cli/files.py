"""The commands about case files: are they sound, what do they remember, a new one."""

from __future__ import annotations

import os
from collections.abc import Iterable
from datetime import datetime
from pathlib import Path

from workbench import report
from workbench.cli.answer import Answer, Status, loop_of, no_controller
from workbench.cli.options import Given
from workbench.cli.output import progress, width
from workbench.errors import InputError, Problem, problem
from workbench.units import harmless


def check(given: Given) -> Answer:
    """Are these case files sound, and do their figures still come out."""
    from workbench import study

    files = case_files(given.operands)
    with progress("checking"):
        checks = [study.check_case(path) for path in files]
    return Answer(
        report.check_text(checks, width()),
        report.check_data(checks),
        Status.DONE if all(check.ok for check in checks) else Status.NO,
    )


def history(given: Given) -> Answer:
    """The tuning history, or what changed between two of its entries."""
    from workbench.case.files import read_case
    from workbench.study import units_of

    case = read_case(given.file).case
    units = units_of(case)
    if "--between" in given:
        count = len(case.history)
        if count < 2:
            raise InputError(
                Problem(
                    f"has {count or 'no'} history {'entry' if count == 1 else 'entries'}",
                    "two are needed for --between",
                    path=given.file,
                )
            )
        first, second = given.whole("--between", 1, count)
        return Answer(
            report.between_text(case, first, second, width()),
            report.between_data(case, first, second, units),
        )
    return Answer(report.history_text(case, units, width()), report.history_data(case, units))


def survey(given: Given) -> Answer:
    """Every case of a folder, the worst first."""
    from workbench import study

    files = case_files(given.operands)
    today = datetime.now().astimezone().date()
    with progress("surveying", len(files)) as tell:
        rows = study.survey(files, today, tell=tell)
    return Answer(report.survey_text(rows, width()), report.survey_data(rows))


def sheet(given: Given) -> Answer:
    """The page to take to the control room."""
    from workbench import charts, study
    from workbench.case.tags import tag_words

    case = loop_of(given)
    if case.controller is None:
        raise no_controller(given, "a retune sheet")
    with progress("predicting"):
        retune = study.retune(case)
    words = report.sheet_text(
        retune,
        study.units_of(case),
        charts.retune_rows(retune, report.SHEET_WIDTH, 14),
        file=given.file or "TAG.toml",
        tag_words=tag_words(case.loop.tag),
        markdown="--markdown" in given,
    )
    return Answer(words, {"sheet": words, "units": study.units_of(case)})


def new(given: Given) -> Answer:
    """A case file with the inline options in it."""
    from workbench.case.case import edit_all, new_case
    from workbench.case.files import file_name, write_new

    tag = given.operands[0]
    if tag.endswith(".toml") or tag.startswith("-"):
        what = "ends in .toml" if tag.endswith(".toml") else "would be taken for an option"
        mend = "give the tag alone, beginning with a letter or a digit"
        raise problem(f"{harmless(tag, 60)!r} {what}", mend, key="loop.tag")
    path = file_name(tag)
    changes = given.changes()
    write_new(path, edit_all(new_case(tag), changes) if changes else new_case(tag))
    return Answer(
        report.wrapped(f"{path} is written; `workbench {path}` opens it.", width()),
        {"path": path, "tag": tag},
    )


def case_files(paths: Iterable[str]) -> list[Path]:
    """The files named, and every case file below the folders named."""
    from workbench.case.files import files_below

    files: dict[Path, None] = {}
    for path in paths:
        if os.path.isdir(path):
            files |= dict.fromkeys(files_below(path))
        else:
            if not os.path.exists(path):
                raise InputError(
                    Problem("there is no such file or folder", "check the name", path=path)
                )
            files[Path(path)] = None
    return list(files)
