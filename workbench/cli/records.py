"""The commands about records: what the plant did, and what that tells."""

from __future__ import annotations

import getpass
import os
import time
from dataclasses import replace
from datetime import datetime
from typing import TYPE_CHECKING, Final, TypedDict

from workbench import report
from workbench.cli.answer import INLINE_TAG, Answer, Status, loop_of
from workbench.cli.options import Given
from workbench.cli.output import narrate, progress, width
from workbench.errors import problem
from workbench.units import harmless

if TYPE_CHECKING:
    from workbench.case.case import Case
    from workbench.records.record import Reading


class _Asked(TypedDict):
    shapes: tuple[str, ...] | None
    noise_model: str
    drift: bool


NOISE_MODELS: Final = ("auto", "white", "correlated")


def fit(given: Given) -> Answer:
    """Plant models fitted to a test record, or to several."""
    from workbench import study

    if "--follow" in given:
        return _follow(given)
    for name in ("--every", "--idle"):
        if name in given:
            raise problem("is for a record that is followed", "add --follow", key=name)
    wanted = given.number("--certainty", above=0.0)
    reading, asked = _reading(given), _asked(given)
    with progress("reading, percent", 100) as tell:
        if len(given.operands) == 1:
            reading["progress"] = lambda share: tell(int(100 * share))
        record = study.read_records(given.operands, **reading)
    with progress("fitting"):
        fit = study.fit_plants(record, **asked)
    advice = None if wanted is None else study.advise(fit, certainty=wanted)
    met = fit.chosen is not None and (advice is None or advice.reached)
    return Answer(
        report.fit_text(fit, width(), advice),
        report.fit_data(fit, advice),
        Status.DONE if met else Status.NO,
    )


def _follow(given: Given) -> Answer:
    """A record that is still being written, fitted again as it grows."""
    from workbench import study

    if len(given.operands) > 1:
        raise problem("takes one record", "leave the other records out", key="--follow")
    asked = given.number("--certainty", above=0.0)
    every, idle = given.seconds("--every") or 2.0, given.seconds("--idle") or 60.0
    wanted = asked or study.CERTAINTY
    test = study.LiveTest(given.file, certainty=wanted, **_asked(given), **_reading(given))
    newest = time.monotonic()
    while True:
        started = time.monotonic()
        live = test.refresh()
        if live is not None:
            newest = started
            narrate(report.live_text(live, width()))
        elif started - newest >= idle:
            break
        time.sleep(max(0.05, every - (time.monotonic() - started)))
    test.refresh(finished=True)
    fit, advice = test.last.fit, test.last.advice
    if fit is None or advice is None:
        what = f"nothing was written to it for {idle:g} s, and it has no record yet"
        raise problem(what, "look again once it has rows", key=given.file)
    met = fit.chosen is not None and (asked is None or advice.reached)
    return Answer(
        report.fit_text(fit, width(), advice),
        report.fit_data(fit, advice),
        Status.DONE if met else Status.NO,
    )


def _asked(given: Given) -> _Asked:
    """What is fitted."""
    shape = given.word("--shape")
    return {
        "shapes": None if shape is None else (shape,),
        "noise_model": given.choice("--noise-model", NOISE_MODELS) or "auto",
        "drift": "--no-drift" not in given,
    }


def _reading(given: Given) -> Reading:
    """How the record is read."""
    windows = given.options.get("--leave-out", ())
    return {
        "time": given.word("--time"),
        "pv": given.word("--pv"),
        "op": given.word("--op"),
        "sp": given.word("--sp"),
        "mode": given.word("--mode"),
        "quality": given.word("--quality"),
        "dates": given.choice("--dates", ("day-first", "month-first", "serial", "seconds")),
        "decimal": given.choice("--decimal", ("point", "comma")),
        "start": given.word("--from"),
        "end": given.word("--to"),
        "leave_out": tuple(zip(windows[::2], windows[1::2], strict=True)),
    }


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


def diagnose(given: Given) -> Answer:
    """Why does this loop swing."""
    from workbench import study
    from workbench.records.record import read_record

    dead_time = given.seconds("--dead-time", or_zero=True)
    integral_time = given.seconds("--integral-time")
    case = _case_beside(given)
    with progress("diagnosing"):
        found = study.diagnose(
            read_record(given.file, **_reading(given)),
            case,
            dead_time=dead_time,
            integral_time=integral_time,
            integrating="--integrating" in given,
            knows_range="--case" in given or "--pv-range" in given,
        )
    return Answer(
        report.diagnose_text(found, width()),
        report.diagnose_data(found),
        Status.NO if found.likely_cause == "undecided" else Status.DONE,
    )


def recognise(given: Given) -> Answer:
    """Is the controller what its sheet says."""
    from workbench import study
    from workbench.records.record import read_record

    scan = given.seconds("--scan")
    case = _case_beside(given)
    with progress("replaying"):
        check = study.recognise(read_record(given.file, **_reading(given)), case, scan=scan)
    no = not check.found.candidates or check.as_in_case is False
    return Answer(
        report.recognise_text(check, width()),
        report.recognise_data(check),
        Status.NO if no else Status.DONE,
    )


def observe(given: Given) -> Answer:
    """Did the plant do what was predicted."""
    from workbench import study
    from workbench.case.case import edit_all
    from workbench.case.files import read_case, save_case
    from workbench.records.record import read_record

    path, record = given.operands
    file = read_case(path)
    # The scenario of the case is what was predicted for, not what happened in the record.
    case = replace(file.case, scenario=type(file.case.scenario)())
    changes = given.settings() | given.changes()
    case = edit_all(case, changes) if changes else case
    with progress("playing"):
        found = study.observe(read_record(record, **_reading(given)), case)
    saved = ""
    if "--save" in given:
        kept = study.with_observation(
            file.case,
            found,
            record=os.path.basename(record),
            who=given.word("--who") or _user(),
            now=datetime.now().astimezone().replace(microsecond=0),
        )
        save_case(file, kept)
        saved = f"\n\nAn observed entry is added to {harmless(path)}."
    units = study.units_of(case)
    return Answer(
        report.observe_text(found, units, width()) + saved,
        report.observe_data(found, units) | {"saved": bool(saved)},
        Status.DONE if found.verdict == "as predicted" else Status.NO,
    )


def _user() -> str:
    """Who is logged in, as far as the system knows."""
    try:
        return getpass.getuser()
    except (KeyError, OSError, ImportError):
        return ""


def _case_beside(given: Given) -> Case:
    """The case that a record is looked at with, and the ranges given in its place."""
    from workbench.case.case import edit_all, new_case
    from workbench.case.files import read_case

    path = given.word("--case")
    if len(given.operands) > 1:
        if path:
            raise problem("is given beside a CASE", "name the case once", key="--case")
        path = given.operands[1]
    case = read_case(path).case if path else new_case(INLINE_TAG)
    changes = given.settings() | given.changes()
    return edit_all(case, changes) if changes else case
