"""The commands about records: what the plant did, and what that tells."""

from __future__ import annotations

import time
from typing import TYPE_CHECKING, Final, TypedDict

from workbench import report
from workbench.cli.answer import Answer, Status
from workbench.cli.options import Given
from workbench.cli.output import narrate, progress, width
from workbench.errors import problem

if TYPE_CHECKING:
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
        "quality": given.word("--quality"),
        "dates": given.choice("--dates", ("day-first", "month-first", "serial", "seconds")),
        "decimal": given.choice("--decimal", ("point", "comma")),
        "start": given.word("--from"),
        "end": given.word("--to"),
        "leave_out": tuple(zip(windows[::2], windows[1::2], strict=True)),
    }
