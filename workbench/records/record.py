"""What did the plant do: a CSV file becomes a `Record`, or one line that says why it cannot.

Nothing is guessed in silence: every row left out, every repeated stamp and every gap is counted in
the record's notes.  What the record says about the plant is answered next door, in `identify`.
"""

from __future__ import annotations

import itertools
import math
import os
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from typing import Final, Literal, TypedDict

import numpy as np
from numpy.typing import NDArray

from workbench.errors import Problem, RecordError
from workbench.records.cells import Floats, Numbers, quality_of
from workbench.records.habits import habits
from workbench.records.stamps import clock_of, timed_rows
from workbench.records.table import (
    Progress,
    Table,
    Wanted,
    find_name,
    quoted,
    read_table,
    refused,
)
from workbench.units import Note, harmless, plain, time_text


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
    start_s: float = 0.0
    """The first row as `start` of `read_record` counts seconds, so that a window seen in this
    record can be asked for."""
    notes: tuple[Note, ...] = ()
    """What was left out, turned round or looks odd."""
    sha256: str = ""
    """Of the file's bytes, so that a model can name the very record it came from."""
    breaks: tuple[int, ...] = ()
    """Rows, rising and above 0, at which a new part begins: a window was left out before it, or
    another record begins.  What PV and OP did in between is not known, so the plant's state, the
    level and the drift begin anew; time still rises over it."""

    @property
    def interval(self) -> float:
        """The usual time between two rows [s]: the median."""
        steps = np.diff(self.time)
        return float(np.median(np.delete(steps, [row - 1 for row in self.breaks])))

    @property
    def parts(self) -> tuple[slice, ...]:
        """The rows of each part, in order; the whole record where nothing was cut."""
        edges = (0, *self.breaks, len(self.time))
        return tuple(slice(a, b) for a, b in itertools.pairwise(edges))

    @property
    def duration(self) -> float:
        """From the first row to the last [s]."""
        return float(self.time[-1])


class Reading(TypedDict, total=False):
    """How a record is read: the options of `read_record`, to be passed on."""

    time: str | None
    pv: str | None
    op: str | None
    sp: str | None
    mode: str | None
    quality: str | None
    dates: str | None
    decimal: str | None
    start: str | float | None
    end: str | float | None
    leave_out: Sequence[tuple[str | float, str | float]]
    whole_lines: bool
    progress: Progress | None


def read_record(  # noqa: PLR0913 - one argument for each option of the command
    path: str | os.PathLike[str],
    *,
    time: str | None = None,
    pv: str | None = None,
    op: str | None = None,
    sp: str | None = None,
    mode: str | None = None,
    quality: str | None = None,
    dates: str | None = None,
    decimal: str | None = None,
    start: str | float | None = None,
    end: str | float | None = None,
    leave_out: Sequence[tuple[str | float, str | float]] = (),
    whole_lines: bool = False,
    progress: Progress | None = None,
) -> Record:
    """A record from a CSV file with a heading row.

    Parameters
    ----------
    path
        Comma, semicolon or tab between columns, decimal point or comma.  A row holds the values of
        one moment; or, where PV and OP stand on stamps of their own, some of them; or the value of
        one tag (columns tag, time and value).
    time, pv, op, sp, mode
        Heading of each column where it is not called `time_s`, `timestamp` or `time`, `pv`, `op`,
        `sp`, `mode`; in a long export the tags.  Time in two columns is `DATE+TIME`.  Time is
        seconds (a heading that ends in min, h or ms says otherwise), day numbers or stamps.
    quality
        Heading of a quality column that is not called `quality` or `status`; `none` for no column.
    dates
        `day-first`, `month-first`, `serial` (day numbers of a spreadsheet) or `seconds`, where the
        file leaves it open.
    decimal
        `point` or `comma`, where the file leaves it open.
    start, end
        First and last moment kept: a stamp as in the file; or seconds, as the time column counts
        them, from the first row where the file has stamps.
    leave_out
        Windows in between that are not used, each from a moment to a moment, both left out; the
        record has a break in each of them.
    whole_lines
        Whether a last line without an end is left aside, because it is still being written.
    progress
        Told what share of the file is read.

    Returns
    -------
    Record
        Time [s] from the first row kept; values in the file's units.

    Raises
    ------
    RecordQuestion
        A date or a number can be read in two ways: both, and the option that tells them apart.
    RecordError
        One line: file and line, what is wrong, what would mend it.

    Source
    ------
    Common practice: the forms in which historians and spreadsheets export.
    """
    wanted = Wanted(time, pv, op, sp, mode, quality)
    table, identity = read_table(path, wanted, progress=progress, whole_lines=whole_lines)
    if not len(table.lines):
        mend = "give rows with a time, a PV and an OP"
        raise refused(table.path, None, "has headings and no rows", mend)
    window = Window(start, end, tuple(leave_out))
    return _Assembly(table, dates, decimal).record(window, identity.sha256)


def read_signal(path: str | os.PathLike[str], column: str) -> Record:
    """One column of a CSV file as a record of which PV and OP both are that column.

    Raises `RecordError` as `read_record` does.
    """
    table, identity = read_table(path, Wanted(pv=column, alone=True))
    if not len(table.lines):
        raise refused(table.path, None, "has headings and no rows", "give rows of values")
    return _Assembly(table, None, None).record(Window(), identity.sha256)


@dataclass(frozen=True)
class Window:
    """The part of a record that is used."""

    start: str | float | None = None
    end: str | float | None = None
    leave_out: tuple[tuple[str | float, str | float], ...] = ()


def begin(records: Sequence[Record]) -> list[float]:
    """Where each of several records begins in the joined one [s]."""
    lengths = [record.duration + record.interval for record in records[:-1]]
    return [0.0, *itertools.accumulate(lengths)]


def join(records: Sequence[Record]) -> Record:
    """Several records of one plant as one record, a break before each but the first.

    Each record begins a usual interval after the one before it; roles that not all of them have
    (SP, mode) are left aside.  The name and the SHA-256 are those of the first.
    """
    if len(records) == 1:
        return records[0]
    starts = begin(records)
    rows = np.cumsum([0, *(len(record.time) for record in records)]).tolist()
    sps = [record.sp for record in records if record.sp is not None]
    modes = [record.mode for record in records if record.mode is not None]
    return replace(
        records[0],
        time=np.concatenate([r.time + at for r, at in zip(records, starts, strict=True)]),
        pv=np.concatenate([r.pv for r in records]),
        op=np.concatenate([r.op for r in records]),
        sp=np.concatenate(sps) if len(sps) == len(records) else None,
        mode=tuple(itertools.chain(*modes)) if len(modes) == len(records) else None,
        notes=tuple(
            replace(note, text=f"{record.path}: {note.text}")
            for record in records
            for note in record.notes
        ),
        breaks=tuple(
            row + first
            for record, first in zip(records, rows, strict=False)
            for row in ((0, *record.breaks) if first else record.breaks)
        ),
    )


# --- from columns to a record --------------------------------------------------------------------

_APART: Final = 0.2
"""Share of PV's rows with OP blank above which OP is taken to stand on stamps of its own."""

Rows = NDArray[np.intp]
Mask = NDArray[np.bool_]


@dataclass(frozen=True)
class _Series:
    """Rows of the table, oldest first, and their times."""

    rows: Rows
    seconds: Floats
    """From the clock's origin, changes of local time undone (n,)."""

    def held(self, when: Floats) -> Rows:
        """The place of the newest row at each moment; -1 where there is none yet."""
        return np.searchsorted(self.seconds, when, side="right") - 1


class _Assembly:
    """Orders, cuts and cleans the rows of a table, and writes down what was done to them."""

    def __init__(self, table: Table, dates: str | None, decimal: str | None) -> None:
        self.table, self.notes = table, list(table.notes)
        self.tags = _tags(table) if table.layout.is_long else {}
        self.timed = timed_rows(table)
        first = next((cell for cell in table.cells("time") if cell.strip()), "").strip()
        roles = ["value"] if self.tags else [r for r in ("pv", "op", "sp") if r in table]
        if "date" not in table and re.fullmatch(r"[-+]?[0-9]+(?:[.,][0-9]+)?", first):
            roles.append("time")
        self.numbers = Numbers(table, roles, decimal)
        self.values = self._values()
        pv, op = (np.isfinite(self.values[role]) & self.timed for role in ("pv", "op"))
        self.apart = bool(self.tags) or self._stand_apart(pv, op)
        self.pv_rows, self.op_rows = (pv, op) if self.apart else (pv & op, pv & op)
        if not (self.pv_rows.any() and self.op_rows.any()):
            what = "has no row with all its values"
            mend = "give rows with a time, a PV and an OP"
            raise refused(table.path, table.lines[0], what, mend)
        needed = self.pv_rows | self.op_rows
        if self.tags:
            needed = self.timed & np.any(list(self.tags.values()), axis=0)
        self.clock = clock_of(table, self.numbers, needed, dates)
        self._tell(self.clock.note)
        if not self.apart:
            self._tell_left_out(np.flatnonzero(~self.pv_rows))

    def _tell(self, words: str, severity: Literal["info", "caution"] = "info") -> None:
        if words:
            self.notes.append(Note(severity, words))

    # -- what the rows hold --

    def _values(self) -> dict[str, Floats]:
        """The numbers of each role, nan where there is none or its quality is bad."""
        table = self.table
        if self.tags:
            value = self.numbers.column("value", np.any(self._tagged("pv", "op", "sp"), axis=0))
            values = {
                role: np.where(marked, value, math.nan)
                for role, marked in self.tags.items()
                if role != "mode"
            }
        else:
            roles = [role for role in ("pv", "op", "sp") if role in table]
            values = {role: self.numbers.column(role) for role in roles}
        for column in ("quality", "pv quality", "op quality"):
            if column in table:
                bad, uncertain = quality_of(table, column)
                for role in (column.split()[0],) if " " in column else tuple(values):
                    values[role] = np.where(bad, math.nan, values[role])
                self._tell_quality(column, bad, uncertain)
        return values

    def _tagged(self, *roles: str) -> list[Mask]:
        return [self.tags[role] for role in roles if role in self.tags]

    def _tell_quality(self, column: str, bad: Mask, uncertain: Mask) -> None:
        heading = quoted(self.table.heading(column))
        for rows, word, done in ((bad, "bad", "not used"), (uncertain, "uncertain", "used")):
            count = int(np.count_nonzero(rows))
            if count:
                where = f"first in line {self.table.lines[int(np.argmax(rows))]}"
                many = word == "uncertain" or count > len(rows) // 20
                self._tell(
                    f"{_counted(count)} marked {word} in the column {heading} ({where}): {done}.",
                    "caution" if many else "info",
                )

    def _stand_apart(self, pv: Mask, op: Mask) -> bool:
        """Whether OP is blank in so many of PV's rows that it stands on stamps of its own."""
        alone = pv & ~op
        if np.count_nonzero(alone) <= _APART * np.count_nonzero(pv):
            return False
        blank = np.fromiter((not cell.strip() for cell in self.table.cells("op")), np.bool_)
        if np.count_nonzero(blank & alone) < 0.9 * np.count_nonzero(alone):
            return False
        self._tell("OP has stamps of its own; it is held from each of its values to the next.")
        return True

    def _tell_left_out(self, rows: Rows) -> None:
        if len(rows):
            total = len(self.table.lines)
            self._tell(
                f"{len(rows)} of {total} rows left out: the time, PV or OP is blank or marked bad"
                f" (first in line {self.table.lines[int(rows[0])]}).",
                "caution" if len(rows) > total // 20 else "info",
            )

    # -- the record --

    def record(self, window: Window, sha256: str) -> Record:
        """The rows of the window as a record."""
        pv = self._series(self.pv_rows, window, tell=True)
        op = self._op(pv, window)
        known = np.isfinite(op)
        pv, op = _Series(pv.rows[known], pv.seconds[known]), op[known]
        if len(op) < 2:
            raise refused(self.table.path, None, "has only one usable row", "give a longer record")
        values = self.values["pv"][pv.rows]
        shown = self.clock.shown
        self.notes += _gaps(pv.seconds, op, shown)
        self.notes += habits(pv.seconds, values, op)
        sp, mode = self._setpoint(pv, window), self._mode(pv, window)
        kept = self._kept(pv, window)
        chosen = np.flatnonzero(kept)
        first = float(self.clock.seconds[pv.rows[chosen[0]]])
        table = self.table
        return Record(
            path=table.path,
            time=pv.seconds[kept] - pv.seconds[kept][0],
            pv=values[kept],
            op=op[kept],
            sp=None if sp is None else sp[kept],
            mode=None if mode is None else tuple(itertools.compress(mode, kept)),
            columns={role: harmless(table.heading(role)) for role in table.layout.columns},
            start_stamp=self.clock.stamp(first),
            start_s=first - self.clock.moment("0", "--from"),
            notes=tuple(self.notes),
            sha256=sha256,
            breaks=tuple((np.flatnonzero(np.diff(chosen) > 1) + 1).tolist()),
        )

    def _series(self, wanted: Mask, window: Window, *, tell: bool = False) -> _Series:
        """The wanted rows within the window, oldest first, repeated stamps merged."""
        rows = np.flatnonzero(wanted)
        steps = np.diff(self.clock.seconds[rows])
        if np.count_nonzero(steps < 0) > np.count_nonzero(steps > 0):
            rows = rows[::-1]
            if tell:
                self._tell("The file has the newest row first; the rows are turned round.")
        rows = self._within(rows, window)
        seconds, words = self._clock_changes(rows)
        if tell:
            self._tell(words, "caution")
        steps = np.diff(seconds)
        if (steps < 0).any():
            raise self._backwards(rows, seconds)
        repeated = int(np.count_nonzero(steps == 0))
        if repeated and tell:
            line = self.table.lines[int(rows[1:][steps == 0][0])]
            self._tell(
                f"{repeated} rows repeat the stamp of their neighbour (first in line {line}); "
                "the later row of each is kept.",
                "caution" if repeated > len(rows) // 20 else "info",
            )
        latest = np.append(steps > 0, True) if len(rows) else np.empty(0, dtype=np.bool_)
        return _Series(rows[latest], seconds[latest])

    def _within(self, rows: Rows, window: Window) -> Rows:
        """The rows from `start` to `end`, both included, as the file's own clock shows them."""
        low = -math.inf if window.start is None else self._moment(window.start, "--from")
        high = math.inf if window.end is None else self._moment(window.end, "--to")
        if low >= high:
            what = f"{quoted(_typed(window.start))} is not before --to"
            mend = "give --from a moment before --to"
            raise RecordError(Problem(what, mend, "--from"))
        seconds = self.clock.seconds[rows]
        inside = np.flatnonzero((seconds >= low) & (seconds <= high))
        if not len(inside):
            if not len(seconds):
                return rows
            first, last = (self.clock.shown(float(s)) for s in (seconds.min(), seconds.max()))
            what = "has no row between --from and --to"
            mend = f"the record runs from {first} to {last}"
            raise refused(self.table.path, None, what, mend)
        return rows[inside[0] : inside[-1] + 1]

    def _moment(self, moment: str | float, option: str) -> float:
        return self.clock.moment(_typed(moment), option)

    def _clock_changes(self, rows: Rows) -> tuple[Floats, str]:
        """The times with an hour that local stamps repeat set right, and what was done."""
        seconds = self.clock.seconds[rows].copy()
        steps = np.diff(seconds)
        forward = steps[steps > 0]
        if not self.clock.local or not len(forward) or not (steps < 0).any():
            return seconds, ""
        usual = float(np.median(forward))
        back = np.flatnonzero((steps < 0) & (np.abs(steps + 3600.0 - usual) <= 2.0 * usual + 1.0))
        if len(back) != np.count_nonzero(steps < 0) or len(back) > 2 or usual > 1800.0:
            return seconds, ""
        for place in back:
            seconds[place + 1 :] += 3600.0
        line = self.table.lines[int(rows[back[0] + 1])]
        return seconds, (
            f"The stamps go back by an hour in line {line}, as when daylight saving time ends; the "
            "rows from there on are taken to be an hour later."
        )

    def _backwards(self, rows: Rows, seconds: Floats) -> RecordError:
        steps = np.diff(seconds)
        at = int(np.argmax(steps < 0))
        before, after = (self.clock.shown(float(s)) for s in self.clock.seconds[rows[at : at + 2]])
        what = f"the time goes back from {before} to {after}"
        mend = "sort the rows by time, or cut this place out with --from and --to"
        if self.clock.local and steps[at] > -4000:
            mend += " (when clocks change, export in UTC)"
        return refused(self.table.path, self.table.lines[int(rows[at + 1])], what, mend)

    def _op(self, pv: _Series, window: Window) -> Floats:
        """OP in force at each row of PV; nan before the first one known."""
        if not self.apart:
            return self.values["op"][pv.rows]
        # OP stands from its last archived value on, also where that lies before the window.
        op = self._series(self.op_rows, Window(None, window.end))
        place = op.held(pv.seconds)
        found = np.where(place < 0, math.nan, self.values["op"][op.rows[np.maximum(place, 0)]])
        early = int(np.count_nonzero(place < 0))
        if early:
            self._tell(f"{_counted(early)} left out, before the first OP.", "caution")
        moved = np.flatnonzero(np.diff(self.values["op"][op.rows])) + 1
        seen = np.searchsorted(pv.seconds, op.seconds[moved])
        inside = (seen > 0) & (seen < len(pv.seconds))
        late = pv.seconds[seen[inside]] - op.seconds[moved[inside]]
        if len(late) and late.max() > 0:
            self._tell(
                f"OP moves between rows of PV and is taken to move at the next of them, up to "
                f"{time_text(float(late.max()), 3)} late and {time_text(float(late.mean()), 3)} on"
                " average: the dead time comes out shorter by that.",
                "caution" if late.mean() > 0 else "info",
            )
        return found

    def _setpoint(self, pv: _Series, window: Window) -> Floats | None:
        """SP, blanks filled from the row before; nothing where it is blank throughout."""
        if "sp" not in self.values:
            return None
        known = self.timed & np.isfinite(self.values["sp"])
        if not self.apart:
            known &= self.pv_rows
        known_series = self._series(known, Window(None, window.end)) if known.any() else None
        if known_series is None or not len(known_series.rows):
            self._tell("The SP column has no values; it is left aside.")
            return None
        if not self.apart:
            blanks = int(np.count_nonzero(~np.isfinite(self.values["sp"][pv.rows])))
            if blanks:
                self._tell(f"SP is blank in {blanks} rows; the value before it is kept.")
        place = np.maximum(known_series.held(pv.seconds), 0)
        return self.values["sp"][known_series.rows[place]]

    def _mode(self, pv: _Series, window: Window) -> list[str] | None:
        """The controller's mode at each row, as the file words it."""
        if self.tags and "mode" in self.tags:
            words, known = self.table.cells("value"), self.timed & self.tags["mode"]
        elif "mode" in self.table:
            words, known = self.table.cells("mode"), self.timed
        else:
            return None
        memo: dict[str, str] = {}
        said = [memo.setdefault(word, harmless(word.strip())) for word in words]
        if not self.apart:
            return [said[row] for row in pv.rows.tolist()]
        known = known & np.fromiter((bool(word) for word in said), np.bool_)
        series = self._series(known, Window(None, window.end))
        if not len(series.rows):
            return None
        place = np.maximum(series.held(pv.seconds), 0)
        return [said[row] for row in series.rows[place].tolist()]

    def _kept(self, pv: _Series, window: Window) -> Mask:
        """Rows outside the windows that are left out."""
        seconds = self.clock.seconds[pv.rows]
        kept = np.ones(len(seconds), dtype=np.bool_)
        for first, last in window.leave_out:
            low, high = (self._moment(m, "--leave-out") for m in (first, last))
            if low >= high:
                what = f"{quoted(_typed(first))} is not before {quoted(_typed(last))}"
                raise RecordError(Problem(what, "give the earlier moment first", "--leave-out"))
            out = (seconds >= low) & (seconds <= high)
            if not out.any():
                what = f"no row lies between {quoted(_typed(first))} and {quoted(_typed(last))}"
                ends = (self.clock.shown(float(s)) for s in (seconds[0], seconds[-1]))
                mend = f"the rows used run from {' to '.join(ends)}"
                raise RecordError(Problem(what, mend, "--leave-out"))
            kept &= ~out
            self._tell(
                f"{_counted(int(np.count_nonzero(out)))} left out as asked, from "
                f"{self.clock.shown(low)} to {self.clock.shown(high)}."
            )
        if np.count_nonzero(kept) < 2:
            what = "leaves no two rows"
            raise RecordError(Problem(what, "leave out less", "--leave-out"))
        return kept


def _counted(count: int) -> str:
    return "1 row" if count == 1 else f"{count} rows"


def _typed(moment: str | float | None) -> str:
    return moment if isinstance(moment, str) else plain(float(moment or 0.0))


def _tags(table: Table) -> dict[str, Mask]:
    """Role -> the rows of its tag, in an export that holds one value a row.

    A tag is named, or called like its role, or ends in it after a point or another sign.
    """
    numbers: dict[str, int] = {}
    places = np.fromiter(
        (numbers.setdefault(cell.strip(), len(numbers)) for cell in table.cells("tag")), np.intp
    )
    names = [name for name in numbers if name]
    found = {}
    for role in ("pv", "op", "sp", "mode"):
        name = find_name(table, names, role)
        if name is not None:
            found[role] = places == numbers[name]
    listed = f"its tags are {', '.join(harmless(name, 30) for name in names[:12])}"
    for role in ("pv", "op"):
        if role not in found:
            mend = f"name it with --{role}; {listed}"
            raise refused(table.path, None, f"has no tag that is {role}", mend)
    return found


# --- gaps ----------------------------------------------------------------------------------------


def _gaps(seconds: Floats, op: Floats, shown: Callable[[float], str]) -> list[Note]:
    """Places where rows are missing, and whether OP moved unseen there."""
    steps = np.diff(seconds)
    usual = float(np.median(steps))
    gaps = steps > 2.5 * usual
    notes = []
    single = (steps > 1.5 * usual) & ~gaps
    missing = int(np.count_nonzero(single))
    if 0 < missing < 0.05 * len(steps):
        where = shown(float(seconds[int(np.argmax(single))]))
        what = "1 row is" if missing == 1 else f"{missing} rows are"
        notes.append(Note("info", f"{what} missing singly (first after {where})."))
    if not gaps.any():
        return notes
    longest = int(np.argmax(steps))
    count = int(np.count_nonzero(gaps))
    words = (
        f"{count} {'gap' if count == 1 else 'gaps'} in the rows, the longest "
        f"{time_text(float(steps[longest]))} from {shown(float(seconds[longest]))} "
        f"(rows are usually {time_text(usual)} apart)."
    )
    hour = gaps & (np.abs(steps - 3600.0) <= 1.5 * usual)
    if hour.any() and usual < 1200.0:
        words += " One is an hour long, as where clocks are put forward: if so, export in UTC."
    notes.append(Note("caution" if steps[longest] > 20 * usual else "info", words))
    unseen = gaps & (np.diff(op) != 0)
    if unseen.any() and np.count_nonzero(np.diff(op)) < len(op) // 4:
        at = int(np.argmax(unseen))
        words = (
            f"OP moved during a gap of {time_text(float(steps[at]))} that ends at "
            f"{shown(float(seconds[at + 1]))}: the time of that move is not known."
        )
        notes.append(Note("caution", words))
    return notes
