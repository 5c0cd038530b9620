"""A folder of cases: how each loop stands, the worst first."""

from __future__ import annotations

import multiprocessing
import os
import signal
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from datetime import date, datetime
from pathlib import Path
from typing import Final

from workbench.case.case import Case
from workbench.case.files import read_case
from workbench.errors import InputError, WorkbenchError
from workbench.study.assessment import assess
from workbench.study.keep import faults_of
from workbench.study.loop import controller_of, plant_of
from workbench.study.proposals import rule_settings
from workbench.study.wish import Wish
from workbench.units import Figure, harmless, text


@dataclass(frozen=True)
class Surveyed:
    """How one loop stands with its present settings."""

    path: str
    tag: str
    service: str
    status: str
    """The worst of STATUSES that holds."""
    stable: bool | None
    """`None` where it cannot be told."""
    max_sensitivity: Figure
    age_days: Figure
    """Age of the plant's model [d]."""
    findings: tuple[str, ...]


def survey(
    paths: Sequence[str | Path],
    today: date,
    *,
    workers: int | None = None,
    tell: Callable[[int], None] = lambda done: None,
) -> tuple[Surveyed, ...]:
    """Every case, the worst first; a file that cannot be read is told and stops nothing.

    Parameters
    ----------
    paths
        The case files.
    today
        What the age of a model is counted to.
    workers
        Processes to share the work among; left out, one for each processor, and none for a few
        files.
    tell
        Called now and then with the number of cases done.
    """
    files = [str(path) for path in paths]
    if workers is None:
        workers = min(len(os.sched_getaffinity(0)), MOST_WORKERS, len(files) // FEW)
    found = _alone(files, today, tell) if workers < 2 else _shared(files, today, workers, tell)
    return tuple(sorted(found, key=_rank))


def _rank(row: Surveyed) -> tuple[int, float, str]:
    peak = row.max_sensitivity.value
    return STATUSES.index(row.status), -(0.0 if peak is None else peak), row.path


def _alone(files: Sequence[str], today: date, tell: Callable[[int], None]) -> list[Surveyed]:
    found = []
    for number, path in enumerate(files):
        tell(number)
        found.append(surveyed(path, today))
    return found


def _shared(
    files: Sequence[str], today: date, workers: int, tell: Callable[[int], None]
) -> list[Surveyed]:
    """The same on several processors, started afresh: a screen's threads would not survive a fork.

    Ctrl+c is for the process that was started by hand; the others end when it does.
    """
    batches = [files[start : start + BATCH] for start in range(0, len(files), BATCH)]
    found: list[Surveyed] = []
    pool = ProcessPoolExecutor(
        workers,
        multiprocessing.get_context("spawn"),
        signal.signal,
        (signal.SIGINT, signal.SIG_IGN),
    )
    try:
        for done in as_completed([pool.submit(_batch, batch, today) for batch in batches]):
            found += done.result()
            tell(len(found))
    finally:
        pool.shutdown(cancel_futures=True)
    return found


def _batch(files: Sequence[str], today: date) -> list[Surveyed]:
    return [surveyed(path, today) for path in files]


def surveyed(path: str, today: date) -> Surveyed:
    """How one loop stands; whatever is wrong with its file is a finding."""
    try:
        return _surveyed(path, read_case(path).case, today)
    except InputError as fault:
        more = len(fault.problems) - 1
        told = str(fault.problems[0]) + (f" (and {more} more)" if more else "")
        return _unsound(path, told.removeprefix(f"{path}:").strip())
    except WorkbenchError as fault:
        return _unsound(path, str(fault))
    except Exception as fault:  # noqa: BLE001 - one loop must never stop the survey of the others
        what = f"{type(fault).__name__}: {fault}; this is a fault of the program: please report it"
        return _unsound(path, what)


def _unsound(path: str, finding: str) -> Surveyed:
    none = Figure(None, "the case cannot be judged")
    return Surveyed(
        path, Path(path).stem, "", "unsound", None, none, none, (harmless(finding, 500),)
    )


def _surveyed(path: str, case: Case, today: date) -> Surveyed:
    """The findings, each beside the status that it gives; the worst status is the loop's."""
    found: list[tuple[str, str]] = []
    stable, peak = None, Figure(None, "there is no controller")
    if case.plant.process is None or case.controller is None:
        missing = "plant" if case.plant.process is None else "controller"
        peak = Figure(None, f"there is no {missing}")
        found.append(("unsound", f"no {missing} yet"))
    else:
        assessment = assess(case)
        judged = assessment.judged
        assert judged is not None
        margins = judged.margins
        stable, peak = margins.stable, margins.max_sensitivity
        if not stable:
            found.append(("unstable", f"not stable: {margins.reason}"))
        elif peak.value is not None and peak.value > FRAGILE:
            ms = text(peak.value, digits=3)
            found.append(("fragile", f"fragile: Ms {ms} is above {text(FRAGILE)}"))
        found += [("fine", told) for told in _beside_the_rules(case)]
    found += [("unsound", f"{p.key}: {p.what}") for p in faults_of(case, Path(path))]
    age, told = _age(case, today)
    if age.value is not None and age.value > STALE_DAYS:
        found.append(("stale", f"the model is {text(age.value / 365.25, 'years', 2)} old{told}"))
    if sum(entry.controller is not None for entry in case.history) < 2:
        found.append(("fine", "no way back is recorded: no settings before the present ones"))
    found.sort(key=lambda each: STATUSES.index(each[0]))
    return Surveyed(
        path,
        case.loop.tag,
        case.loop.service,
        found[0][0] if found else "fine",
        stable,
        peak,
        age,
        tuple(harmless(words, 500) for _, words in found),
    )


def _age(case: Case, today: date) -> tuple[Figure, str]:
    """How old the model is [d], and what that is counted from where the plant has no date."""
    if case.plant.process is None:
        return Figure(None, "there is no plant"), ""
    if case.plant.dated:
        return Figure(float((today - date.fromisoformat(case.plant.dated)).days)), ""
    if case.history:
        last: datetime = case.history[-1].at
        return Figure(float((today - last.date()).days)), " or more, by the newest entry"
    return Figure(None, "neither the plant nor an entry of the history has a date"), ""


def _beside_the_rules(case: Case) -> list[str]:
    """Whether gain or integral action lies beyond what any rule that applies would set."""
    present = controller_of(case).gains()
    rules = [settings.gains() for settings in rule_settings(case, Wish())]
    # A vessel may be meant to take up upsets: then slow is right.
    averaging, told = plant_of(case).integrators > 0, []
    for name, own, given in (
        ("gain", present.proportional, [each.proportional for each in rules]),
        ("integral action", present.integral, [each.integral for each in rules]),
    ):
        # Rules without the action in question have nothing to say of it.
        usual = [value for value in given if value > 0.0]
        if len(usual) < _ENOUGH or own == 0.0:
            continue
        if own > max(usual):
            times = text(own / max(usual), digits=2)
            told.append(f"{name} is {times} times the largest of {len(usual)} rules")
        elif own < min(usual) and not averaging:
            times = text(min(usual) / own, digits=2)
            told.append(f"{name} is {times} times below the smallest of {len(usual)} rules")
    return told


STATUSES: Final = ("unstable", "fragile", "unsound", "stale", "fine")
"""From the worst."""

FRAGILE: Final = 2.0
"""Ms above which a loop is called fragile; 1.4 to 2 is usual (common practice)."""

STALE_DAYS: Final = 366
"""Age of a model after which the plant may well be another one (common practice: a year) [d]."""

_ENOUGH: Final = 3
"""Fewer rules than this tell little of what is usual."""

MOST_WORKERS: Final = 8
"""Each needs some 100 MB."""

FEW: Final = 20
"""Cases for each process, below which starting it costs more than it saves."""

BATCH: Final = 8
"""Cases that a process is given at once."""
