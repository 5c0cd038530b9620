"""Large campaigns about case files: edits, layouts, saves that are killed, a survey of many.

Each answers with its worst figure and what failed.
"""

from __future__ import annotations

import tempfile
import time
from collections.abc import Callable
from datetime import date
from pathlib import Path
from typing import Final

from hypothesis import given, settings
from hypothesis import seed as seeded
from hypothesis import strategies as st

from tests.case.making import a_case
from tests.case.saving import started
from tests.case.test_files import one_key_changes_its_line, styles
from tests.case.test_layout import texts, values_are_where_the_layout_says
from workbench.case.case import edit_all
from workbench.case.files import write_new
from workbench.study import survey

Found = tuple[float, list[str]]


def _holds(
    check: Callable[..., None], *drawn: st.SearchStrategy[object]
) -> Callable[[int, int], Found]:
    """A property over as many examples as are asked for."""

    def run(size: int, seed: int) -> Found:
        try:
            seeded(seed)(settings(max_examples=size)(given(*drawn)(check)))()
        except Exception as fault:  # noqa: BLE001 - whatever a property raises, it does not hold
            return 1.0, [f"{type(fault).__name__}: {fault}"]
        return 0.0, []

    return run


edited_lines: Final = _holds(one_key_changes_its_line, styles(), st.data())
laid_out_files: Final = _holds(values_are_where_the_layout_says, texts())


def killed_saves(size: int, seed: int) -> Found:
    """Half of them with two processes at once: the file is the old one or the new one, whole."""
    failures = []
    for at_once, times in ((1, size - size // 2), (2, size // 2)):
        with tempfile.TemporaryDirectory() as folder:
            path = write_new(Path(folder) / "case.toml", a_case()).path
            child = started(f"kill_saves({path!r}, {times}, {seed}, {at_once})")
            told = child.communicate(timeout=3600)[0]
        old, new, neither, left = map(int, told.split())
        if (old + new, neither, left) != (times, 0, 1):
            failures.append(f"{at_once} at once: old, new, neither, files left: {told}")
    return 0.0, failures


def killed_drafts(size: int, seed: int) -> Found:
    """What a session had told that it keeps is there after kill -9."""
    with tempfile.TemporaryDirectory() as folder:
        path = str(Path(folder) / "case.toml")
        child = started(f"kill_drafts({path!r}, {size}, {seed})", XDG_STATE_HOME=folder)
        lost = int(child.communicate(timeout=3600)[0])
    return float(lost), [f"{lost} drafts were lost"] if lost else []


def surveyed_cases(size: int, seed: int) -> Found:
    """Seconds for a survey of many cases on all cores, start to end, as if there were 1,000."""
    with tempfile.TemporaryDirectory() as folder:
        paths = []
        for number in range(size):
            gain = 0.5 + 0.001 * (number + seed)
            keys = {"loop.tag": f"TIC-{number}", "controller.gain": f"{gain:.4f}"}
            paths.append(Path(folder) / f"TIC-{number}.toml")
            write_new(paths[-1], edit_all(a_case(), keys))
        began = time.perf_counter()
        rows = survey(paths, date(2026, 12, 1))
        taken = time.perf_counter() - began
    failures = [] if len(rows) == size else [f"{len(rows)} rows for {size} cases"]
    return 1000.0 * taken / max(size, 50), failures
