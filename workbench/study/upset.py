"""The upset that a scenario takes from a record: read, and known by its SHA-256."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Final

from workbench.case.case import Case
from workbench.errors import InputError, Problem, RecordError, problem

if TYPE_CHECKING:
    from workbench.records.record import Record

MOST_ROWS: Final = 5000
"""Changes of an upset that a prediction goes through."""


def recorded_upset(case: Case) -> tuple[tuple[float, float], ...]:
    """Seconds after `load_at` and shares of the load step, from the scenario's text or its file.

    The values of a file are its changes from its first row on, each held to the next.
    Raises `InputError` for a file that is missing, not the one it was, or cannot be read.
    """
    scenario = case.scenario
    if not scenario.load_file:
        return scenario.recorded_load()
    record = _read(case)
    kept = scenario.load_sha256
    if kept and record.sha256 != kept:
        raise problem(
            f"the record {scenario.load_file!r} is not the one that was meant",
            "put the old record back, or clear this key to take the new one",
            key="scenario.load_sha256",
        )
    changes = [
        (float(time), float(value - record.pv[0]))
        for time, value in zip(record.time, record.pv, strict=True)
    ]
    held = [
        pair
        for pair, before in zip(changes, [(0.0, 0.0), *changes], strict=False)
        if pair[1] != before[1]
    ]
    if len(held) > MOST_ROWS:
        raise problem(
            f"the record {scenario.load_file!r} changes {len(held)} times (at most {MOST_ROWS})",
            "take every second row or fewer",
            key="scenario.load_file",
        )
    # The last row says how long the record is, whether it changes or not.
    return (*held, changes[-1]) if not held or held[-1][0] < changes[-1][0] else tuple(held)


def with_upset_named(case: Case) -> Case:
    """The case with the SHA-256 of its recorded upset, where it names a file without one.

    Raises `InputError` for a file that is missing or cannot be read.
    """
    scenario = case.scenario
    if not scenario.load_file or scenario.load_sha256:
        return case
    return replace(case, scenario=replace(scenario, load_sha256=_read(case).sha256))


def upset_faults(case: Case) -> list[Problem]:
    """What is wrong with the file of the upset."""
    try:
        recorded_upset(case)
    except InputError as fault:
        return list(fault.problems)
    return []


def _read(case: Case) -> Record:
    # A case without such a file is read without the reader of records.
    from workbench.records.record import read_signal

    path, column = Path(case.folder) / case.scenario.load_file, case.scenario.load_column
    if not path.is_file():
        raise problem(
            f"the record {case.scenario.load_file!r} is not beside the case",
            "put it there, or name another",
            key="scenario.load_file",
        )
    try:
        return read_signal(path, column)
    except RecordError as fault:
        raise InputError(
            replace(each, key="scenario.load_file", path="", line=None) for each in fault.problems
        ) from None
