"""What did the plant do: a CSV file becomes a `Record`, or one line that says why it cannot.

Nothing is guessed in silence: every row left out, every repeated stamp and every gap is counted in
the record's notes.  What the record says about the plant is answered next door, in `identify`.
"""

from __future__ import annotations

import hashlib
import math
import os
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from workbench.errors import Problem, RecordError
from workbench.records.cells import Cells, quoted, read_bytes, read_cells, refused
from workbench.records.stamps import Clock, clock_of
from workbench.units import Note, harmless, plain, text, time_text


@dataclass(frozen=True)
class Record:
    """A plant record in its own units, oldest row first, every value finite."""

    path: str
    """The file, as the engineer named it."""
    time: NDArray[np.float64]
    """Seconds from the first row (n,), strictly rising."""
    pv: NDArray[np.float64]
    """PV at each row (n,)."""
    op: NDArray[np.float64]
    """OP from each row until the next (n,)."""
    sp: NDArray[np.float64] | None = None
    """SP at each row (n,), where the file has it."""
    mode: tuple[str, ...] | None = None
    """The controller's mode at each row, as the file words it."""
    columns: dict[str, str] = field(default_factory=dict)
    """Role (time, pv, op, sp, mode) -> heading of the column it was read from."""
    start_stamp: str | None = None
    """ISO 8601 stamp of the first row; `None` where the file gives seconds."""
    notes: tuple[Note, ...] = ()
    """What was left out, turned round or looks odd."""
    sha256: str = ""
    """Of the file's bytes, so that a model can name the very record it came from."""

    @property
    def interval(self) -> float:
        """The usual time between two rows [s]: the median."""
        return float(np.median(np.diff(self.time)))

    @property
    def duration(self) -> float:
        """From the first row to the last [s]."""
        return float(self.time[-1])


def read_record(
    path: str | os.PathLike[str],
    *,
    time: str | None = None,
    pv: str | None = None,
    op: str | None = None,
    sp: str | None = None,
    mode: str | None = None,
    start: str | float | None = None,
    end: str | float | None = None,
) -> Record:
    """A record from a CSV file with a heading row.

    Parameters
    ----------
    path
        Comma, semicolon or tab between columns; with the last two a decimal comma is understood.
    time, pv, op, sp, mode
        Heading of each column where it is not called `time_s`, `timestamp` or `time`, `pv`, `op`,
        `sp`, `mode`.  Time is seconds (a heading that ends in min, h or ms says otherwise) or
        stamps: ISO 8601, or day and month with slashes, points or dashes where the file itself
        shows which of them comes first.
    start, end
        First and last moment kept: a stamp as in the file; or seconds, as the time column counts
        them, from the first row where the file has stamps.

    Returns
    -------
    Record
        Time [s] from the first row kept; values in the file's units.

    Raises
    ------
    RecordError
        One line: file and line, what is wrong, what would mend it.

    Source
    ------
    Common practice: the forms in which historians and spreadsheets export.
    """
    name = harmless(str(path))
    raw = read_bytes(Path(path), name)
    wanted = {"time": time, "pv": pv, "op": op, "sp": sp, "mode": mode}
    return _assemble(read_cells(raw, name, wanted), start, end, hashlib.sha256(raw).hexdigest())


def read_signal(path: str | os.PathLike[str], column: str) -> Record:
    """One column of a CSV file as a record of which PV and OP both are that column.

    Raises `RecordError` as `read_record` does.
    """
    name = harmless(str(path))
    raw = read_bytes(Path(path), name)
    cells = read_cells(raw, name, {"time": None, "pv": column})
    return _assemble(cells, None, None, hashlib.sha256(raw).hexdigest())


# --- the record ----------------------------------------------------------------------------------


def _assemble(
    cells: Cells, start: str | float | None, end: str | float | None, sha256: str
) -> Record:
    """Order, window and clean the rows, and write down what was done to them."""
    if not cells.time:
        what = (
            "has headings and no rows" if not cells.left_out else "has no row with all its values"
        )
        line = cells.left_out[0] if cells.left_out else None
        mend = "give rows with a time, a PV and an OP"
        raise refused(cells.path, line, what, mend)
    clock = clock_of(cells)
    notes = cells.notes + ([Note("info", clock.note)] if clock.note else [])
    if cells.left_out:
        notes.append(_left_out(cells))
    rows = np.arange(len(cells.time))
    steps = np.diff(clock.seconds)
    if np.count_nonzero(steps < 0) > np.count_nonzero(steps > 0):
        rows = rows[::-1]
        notes.append(Note("info", "The file has the newest row first; the rows are turned round."))
    rows = _window(clock, rows, start, end, cells.path)
    rows = _in_order(clock, rows, cells, notes)
    seconds = clock.seconds[rows]
    if len(rows) < 2:
        raise refused(cells.path, None, "has only one usable row", "give a longer record")
    op = np.array(cells.values.get("op", cells.values["pv"]))[rows]
    notes += _gaps(seconds, op, clock)
    sp = _setpoint(cells, rows, notes)
    return Record(
        path=cells.path,
        time=seconds - seconds[0],
        pv=np.array(cells.values["pv"])[rows],
        op=op,
        sp=sp,
        mode=tuple(cells.mode[i] for i in rows) if cells.mode else None,
        columns={role: harmless(cells.heading(role)) for role in cells.columns},
        start_stamp=clock.stamp(float(seconds[0])),
        notes=tuple(notes),
        sha256=sha256,
    )


def _left_out(cells: Cells) -> Note:
    count, total = len(cells.left_out), len(cells.left_out) + len(cells.time)
    what = f"{count} of {total} rows left out" if count > 1 else f"1 of {total} rows left out"
    words = (
        f"{what}: the time, PV or OP is blank or marked bad (first in line {cells.left_out[0]})."
    )
    return Note("caution" if count > total // 20 else "info", words)


def _window(
    clock: Clock,
    rows: NDArray[np.int_],
    start: str | float | None,
    end: str | float | None,
    path: str,
) -> NDArray[np.int_]:
    """The rows from `start` to `end`, both included."""
    seconds = clock.seconds[rows]
    low = -math.inf if start is None else clock.moment(_typed(start), "--from")
    high = math.inf if end is None else clock.moment(_typed(end), "--to")
    if low >= high:
        mend = "give --from a moment before --to"
        raise RecordError(Problem(f"{quoted(_typed(start))} is not before --to", mend, "--from"))
    kept = rows[(seconds >= low) & (seconds <= high)]
    if not len(kept):
        first, last = (_shown(clock, float(s)) for s in (seconds.min(), seconds.max()))
        what = "has no row between --from and --to"
        raise refused(path, None, what, f"the record runs from {first} to {last}")
    return kept


def _typed(moment: str | float | None) -> str:
    return moment if isinstance(moment, str) else plain(float(moment or 0.0))


def _shown(clock: Clock, seconds: float) -> str:
    return clock.stamp(seconds) or text(seconds, "s", 6)


def _in_order(
    clock: Clock, rows: NDArray[np.int_], cells: Cells, notes: list[Note]
) -> NDArray[np.int_]:
    """The rows with repeated stamps merged; refuses time that runs backwards."""
    steps = np.diff(clock.seconds[rows])
    if (steps < 0).any():
        at = int(np.argmax(steps < 0))
        before, after = (_shown(clock, float(s)) for s in clock.seconds[rows[at : at + 2]])
        what = f"the time goes back from {before} to {after}"
        mend = "sort the rows by time, or cut this place out with --from and --to"
        if clock.stamp(0.0) and steps[at] > -4000:
            mend += " (when clocks change, export in UTC)"
        raise refused(cells.path, cells.lines[int(rows[at + 1])], what, mend)
    repeated = int(np.count_nonzero(steps == 0))
    if repeated:
        line = cells.lines[int(rows[1:][steps == 0][0])]
        words = (
            f"{repeated} rows repeat the stamp of their neighbour (first in line {line}); "
            "the later row of each is kept."
        )
        notes.append(Note("caution" if repeated > len(rows) // 20 else "info", words))
        rows = rows[np.append(steps > 0, True)]
    return rows


def _gaps(seconds: NDArray[np.float64], op: NDArray[np.float64], clock: Clock) -> list[Note]:
    """Places where rows are missing, and whether OP moved unseen there."""
    steps = np.diff(seconds)
    usual = float(np.median(steps))
    gaps = steps > 2.5 * usual
    if not gaps.any():
        return []
    longest = int(np.argmax(steps))
    count = int(np.count_nonzero(gaps))
    words = (
        f"{count} {'gap' if count == 1 else 'gaps'} in the rows, the longest "
        f"{time_text(float(steps[longest]))} from {_shown(clock, float(seconds[longest]))} "
        f"(rows are usually {time_text(usual)} apart)."
    )
    notes = [Note("caution" if steps[longest] > 20 * usual else "info", words)]
    unseen = gaps & (np.diff(op) != 0)
    if unseen.any() and np.count_nonzero(np.diff(op)) < len(op) // 4:
        at = int(np.argmax(unseen))
        words = (
            f"OP moved during a gap of {time_text(float(steps[at]))} that ends at "
            f"{_shown(clock, float(seconds[at + 1]))}: the time of that move is not known."
        )
        notes.append(Note("caution", words))
    return notes


def _setpoint(
    cells: Cells, rows: NDArray[np.int_], notes: list[Note]
) -> NDArray[np.float64] | None:
    """SP with its blanks filled from the row before, or nothing where it is blank throughout."""
    if "sp" not in cells.values:
        return None
    sp = np.array(cells.values["sp"])[rows]
    known = np.isfinite(sp)
    if not known.any():
        notes.append(Note("info", "The SP column has no values; it is left aside."))
        return None
    blanks = int(np.count_nonzero(~known))
    if blanks:
        notes.append(Note("info", f"SP is blank in {blanks} rows; the value before it is kept."))
        last = np.maximum.accumulate(np.where(known, np.arange(len(sp)), -1))
        sp = sp[np.where(last < 0, int(np.argmax(known)), last)]
    return sp
