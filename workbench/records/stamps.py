"""When each row was: seconds, or stamps in the forms that exports write.

Day and month are told apart over the whole column, and a date that can be read both ways is
refused, never guessed.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass
from datetime import datetime, timedelta
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import Problem, RecordError
from workbench.records.cells import NUMBER, NUMBER_COMMA, Cells, quoted, refused
from workbench.units import TIME_UNITS, harmless

_ISO = re.compile(r"([0-9]{4})([-/])([0-9]{2})\2([0-9]{2})[T ]([0-9]{2}:[0-9]{2}.*)")
_DAY_MONTH = re.compile(
    r"([0-9]{1,2})([-/.])([0-9]{1,2})\2([0-9]{4})[T ]+"
    r"([0-9]{1,2}):([0-9]{2})(?::([0-9]{2}(?:[.,][0-9]{1,9})?))?(?: ?([AaPp])[Mm])?"
)
_TIME_UNIT = re.compile(r"(?:^|[_ (\[])(ms|s|sec|min|h)[)\]]?$")

_STAMPS: Final = 'write stamps like "2026-11-30 14:05:00", or seconds'


@dataclass(frozen=True)
class Clock:
    """The time of every row, and how a moment the engineer types is read in the same terms."""

    seconds: NDArray[np.float64]
    """From an origin of the file's own (n,)."""
    moment: Callable[[str, str], float]
    """(text, option) -> seconds from the same origin."""
    stamp: Callable[[float], str | None]
    """Seconds from the origin -> ISO stamp, or `None` where the file has none."""
    note: str = ""


def clock_of(cells: Cells) -> Clock:
    """The time of every row.  Raises `RecordError` for a time that is not understood."""
    if _as_number(cells, cells.time[0]):
        return _counted(cells)
    return _stamped(cells)


def _as_number(cells: Cells, cell: str) -> bool:
    return bool(NUMBER.fullmatch(cell) or (cells.separator != "," and NUMBER_COMMA.fullmatch(cell)))


def _counted(cells: Cells) -> Clock:
    """Time given as numbers: seconds, or the unit in which the heading ends."""
    for line, cell in zip(cells.lines, cells.time, strict=True):
        if not _as_number(cells, cell):
            what = f"the time {quoted(cell)} is not a number, as in the rows above"
            raise refused(cells.path, line, what, "give every row its time in the same form")
    raw = np.array(
        [cells.number(c, line, "time") for line, c in zip(cells.lines, cells.time, strict=True)]
    )
    found = _TIME_UNIT.search(cells.heading("time").lower())
    unit = {"sec": "s"}.get(found[1], found[1]) if found else "s"
    scale = 0.001 if unit == "ms" else TIME_UNITS[unit]
    if found is None:
        _refuse_calendar_numbers(raw, cells)

    def moment(typed: str, option: str) -> float:
        if not NUMBER.fullmatch(typed.strip()):
            what = f"{quoted(typed)} is not a number of seconds"
            mend = "this record counts seconds; give a number such as 120"
            raise RecordError(Problem(what, mend, key=option))
        return float(typed)

    note = "" if unit == "s" else f"The time column is read in {unit}, as its heading says."
    return Clock(raw * scale, moment, lambda _: None, note)


def _refuse_calendar_numbers(raw: NDArray[np.float64], cells: Cells) -> None:
    """Day numbers of a spreadsheet, or milliseconds since 1970, are not seconds."""
    step = float(np.median(np.abs(np.diff(raw)))) if len(raw) > 1 else 1.0
    if raw.min() > 20_000 and raw.max() < 80_000 and step < 0.02:
        what = f"the time {quoted(cells.time[0])} looks like a day number of a spreadsheet"
        raise refused(cells.path, cells.lines[0], what, _STAMPS)
    if raw.min() > 1e11:
        what = f"the time {quoted(cells.time[0])} looks like milliseconds"
        raise refused(cells.path, cells.lines[0], what, "head the column time_ms, or give seconds")


def _stamped(cells: Cells) -> Clock:
    """Time given as stamps; day and month are told apart over the whole column."""
    day_first = _day_first(cells)
    stamps: list[datetime] = []
    for line, cell in zip(cells.lines, cells.time, strict=True):
        stamp = _stamp(cell, day_first)
        if stamp is None:
            raise refused(cells.path, line, f"the time {quoted(cell)} is not understood", _STAMPS)
        if stamps and (stamp.tzinfo is None) != (stamps[0].tzinfo is None):
            what = "some stamps name a time zone and others do not"
            raise refused(cells.path, line, what, "write the zone on all of them or on none")
        stamps.append(stamp)
    zone = stamps[0].tzinfo
    origin = stamps[0]
    seconds = np.array([(stamp - origin).total_seconds() for stamp in stamps])
    oldest = min(0.0, float(seconds[-1]))

    def moment(typed: str, option: str) -> float:
        if NUMBER.fullmatch(typed.strip()):
            return oldest + float(typed)
        stamp = _stamp(typed.strip(), day_first)
        if stamp is not None and stamp.tzinfo is None:
            stamp = stamp.replace(tzinfo=zone)
        if stamp is None or (zone is None and stamp.tzinfo is not None):
            what = f"{quoted(typed)} is not a stamp as this record writes them"
            mend = f'write it like "{harmless(cells.time[0], 40)}", or seconds from the first row'
            raise RecordError(Problem(what, mend, key=option))
        return (stamp - origin).total_seconds()

    def show(seconds: float) -> str:
        at = origin + timedelta(seconds=round(seconds, 6))
        return at.isoformat(sep=" ")

    order = "day before month" if day_first else "month before day"
    note = "" if day_first is None else f"The stamps are read {order}."
    return Clock(seconds, moment, show, note)


def _day_first(cells: Cells) -> bool | None:
    """Whether the day stands before the month; `None` where the year stands first."""
    pairs = [
        (int(found[1]), int(found[3]), line)
        for line, cell in zip(cells.lines, cells.time, strict=True)
        if (found := _DAY_MONTH.fullmatch(cell))
    ]
    if not pairs:
        return None
    by_day = next((line for first, _, line in pairs if first > 12), None)
    by_month = next((line for _, second, line in pairs if second > 12), None)
    if by_day is None and by_month is None:
        first, second, line = pairs[0]
        cell = cells.time[cells.lines.index(line)]
        what = (
            f"the date {quoted(cell)} can be day {first} of month {second}"
            f" or day {second} of month {first}"
        )
        raise refused(cells.path, line, what, _STAMPS)
    if by_day is not None and by_month is not None:
        what = f"the day stands first here and second in line {min(by_day, by_month)}"
        raise refused(cells.path, max(by_day, by_month), what, _STAMPS)
    return by_day is not None


def _stamp(cell: str, day_first: bool | None) -> datetime | None:
    """A stamp, or nothing where it is not one."""
    try:
        if iso := _ISO.fullmatch(cell):
            year, _, month, day, rest = iso.groups()
            return datetime.fromisoformat(f"{year}-{month}-{day} {rest}")
        found = _DAY_MONTH.fullmatch(cell)
        if found is None or day_first is None:
            return None
        day, month = (int(found[1]), int(found[3])) if day_first else (int(found[3]), int(found[1]))
        hour = int(found[5])
        if found[8]:
            if not 1 <= hour <= 12:
                return None
            hour = hour % 12 + (12 if found[8] in "Pp" else 0)
        whole = datetime(int(found[4]), month, day, hour, int(found[6]))
        seconds = float((found[7] or "0").replace(",", "."))
        return whole + timedelta(seconds=seconds) if seconds < 60 else None
    except (ValueError, OverflowError):
        return None
