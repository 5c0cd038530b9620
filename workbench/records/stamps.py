"""When each row was: seconds, or stamps in the forms that exports write.

Day and month are told apart over the whole column, and a date that can be read both ways is a
question, never a guess.  Dates and times of day repeat from row to row, so each is read once.
"""

from __future__ import annotations

import itertools
import math
import re
from array import array
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from datetime import datetime, timedelta, timezone
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import Problem, RecordError, RecordQuestion
from workbench.records.cells import NUMBER, Floats, Numbers
from workbench.records.table import Table, no_value, quoted, refused
from workbench.units import TIME_UNITS, harmless, one_of, text, time_text

_DATE = re.compile(
    r"(?:(?P<y>[0-9]{4})([-/.]?)(?P<m>[0-9]{2})\2(?P<d>[0-9]{2})"
    r"|(?P<first>[0-9]{1,2})([-/.])(?P<second>[0-9]{1,2})\6(?P<year>[0-9]{4}|[0-9]{2})"
    r"|(?P<day>[0-9]{1,2})[-/. ](?P<name>[A-Za-z]{3,9})\.?[-/. ](?P<named>[0-9]{4}|[0-9]{2}))"
)
_TIME = re.compile(
    r"([0-9]{1,2}):([0-9]{2})(?::([0-9]{2}(?:[.,][0-9]{1,9})?))?"
    r"(?: ?([AaPp])\.?[Mm]\.?)?"
    r"(?: ?(Z|[-+][0-9]{2}(?::?[0-9]{2})?))?"
)
_PARTS = re.compile(r"(.*?)[T ]+([0-9]{1,2}:.*)")
_TIME_UNIT = re.compile(r"(?:^|[_ (\[])(ms|s|sec|min|h)[)\]]?$")
_MONTHS: Final = (
    "jan",
    "feb",
    "mar",
    "apr",
    "may",
    "jun",
    "jul",
    "aug",
    "sep",
    "oct",
    "nov",
    "dec",
)

_STAMPS: Final = 'write stamps like "2026-11-30 14:05:00", or seconds'
DATES: Final = ("day-first", "month-first", "serial", "seconds")
"""Words of the option that says how dates are read."""

_SERIAL_ORIGIN: Final = datetime(1899, 12, 30)
"""Day 0 of spreadsheets."""
_YEARS: Final = (1900, 2200)
"""First and last year of a stamp: room enough on both sides for hours to be added."""
_NO_DATE: Final = float(datetime(1970, 1, 1).toordinal())
"""The day on which times without a date are put; it is never shown."""
_LAST_DAY: Final = 110_000
"""A day number too large to be a date: the year 2201."""
_DAY: Final = 86_400.0


@dataclass(frozen=True)
class Clock:
    """The time of every row, and how a moment the engineer types is read in the same terms."""

    seconds: Floats
    """From an origin of the file's own (n,); nan in rows that were not asked for."""
    moment: Callable[[str, str], float]
    """(text, option) -> seconds from the same origin."""
    stamp: Callable[[float], str | None]
    """Seconds from the origin -> ISO stamp, or `None` where the file has none."""
    note: str = ""
    local: bool = False
    """Whether the stamps name no time zone, so that clocks may have been changed among them."""

    def shown(self, seconds: float) -> str:
        """A moment as messages show it: the stamp, or seconds."""
        return self.stamp(seconds) or text(seconds, "s", 6)


def clock_of(
    table: Table, numbers: Numbers, rows: NDArray[np.bool_], dates: str | None = None
) -> Clock:
    """The time of the rows asked for.

    Raises `RecordError` for a time that is not understood, `RecordQuestion` for one that can be
    read in two ways.
    """
    if dates is not None and dates not in DATES:
        raise RecordError(
            Problem(
                f"{quoted(dates)} is not a way to read dates", f"use {one_of(DATES)}", "--dates"
            )
        )
    first = next(
        cell.strip() for cell, wanted in zip(table.cells("time"), rows, strict=True) if wanted
    )
    if "date" not in table and numbers.is_number(first):
        return _counted(table, numbers, rows, first, dates)
    return _Stamps(table, rows, dates).clock()


def timed_rows(table: Table) -> NDArray[np.bool_]:
    """Rows whose time says something, (n,)."""
    known: NDArray[np.bool_] = np.ones(len(table.lines), dtype=np.bool_)
    for role in ("time", "date"):
        if role in table:
            for first, chunk in table.chunks(role):
                # One look at the whole chunk tells that none of its cells is blank or a word.
                if chunk[-1:] in ("", "\n") or re.search(r"(?m)^\s|[^0-9]$", chunk):
                    for i, cell in enumerate(chunk.split("\n"), start=first):
                        known[i] &= not no_value(cell.strip())
    return known


# --- numbers -------------------------------------------------------------------------------------


def _counted(
    table: Table, numbers: Numbers, rows: NDArray[np.bool_], first: str, dates: str | None
) -> Clock:
    """Time given as numbers: seconds, the unit in which the heading ends, or days."""
    raw = numbers.column("time", rows)
    found = _TIME_UNIT.search(table.heading("time").lower())
    unit = {"sec": "s"}.get(found[1], found[1]) if found else "s"
    if dates == "serial" or (found is None and dates is None and _may_be_days(raw[rows])):
        if dates is None:
            raise _serial_question(table, raw[rows], first, int(np.argmax(rows)))
        return _serial(raw)
    if found is None and float(raw[rows].min()) > 1e11:
        what = f"the time {quoted(first)} looks like milliseconds"
        mend = "head the column time_ms, or give seconds"
        raise refused(table.path, table.lines[int(np.argmax(rows))], what, mend)
    scale = 0.001 if unit == "ms" else TIME_UNITS[unit]

    def moment(typed: str, option: str) -> float:
        if not NUMBER.fullmatch(typed.strip()):
            what = f"{quoted(typed)} is not a number of seconds"
            mend = "this record counts seconds; give a number such as 120"
            raise RecordError(Problem(what, mend, key=option))
        return float(typed)

    note = "" if unit == "s" else f"The time column is read in {unit}, as its heading says."
    return Clock(raw * scale, moment, lambda _: None, note)


def _may_be_days(raw: Floats) -> bool:
    """Whether numbers without a unit may be the day numbers of a spreadsheet (1954 to 2119)."""
    step = float(np.median(np.abs(np.diff(raw)))) if len(raw) > 1 else 1.0
    return float(raw.min()) > 20_000 and float(raw.max()) < 80_000 and step < 0.5


def _serial_question(table: Table, raw: Floats, first: str, row: int) -> RecordQuestion:
    step = float(np.median(np.abs(np.diff(raw)))) if len(raw) > 1 else 1.0
    day = (_SERIAL_ORIGIN + timedelta(days=float(raw[0]))).replace(microsecond=0)
    as_days = f"{day} of a spreadsheet, rows {time_text(step * _DAY, 3)} apart"
    as_seconds = f"a number of seconds, rows {time_text(step, 3)} apart"
    return RecordQuestion(
        Problem(
            f"the time {quoted(first)} can be {as_days}, or {as_seconds}",
            "say --dates serial or --dates seconds",
            path=table.path,
            line=table.lines[row],
        ),
        option="--dates",
        readings=(("serial", as_days), ("seconds", as_seconds)),
    )


def _serial(raw: Floats) -> Clock:
    """Days since the end of 1899, to the millisecond."""
    seconds = np.round(raw * _DAY, 3)
    known = seconds[np.isfinite(seconds)]
    if float(known.min()) < 0.0 or float(known.max()) > _LAST_DAY * _DAY:
        what = f"the time has numbers that are not days from 0 to {_LAST_DAY}"
        raise RecordError(Problem(what, "say --dates seconds", key="--dates"))
    start = float(known.min())

    def moment(typed: str, option: str) -> float:
        if NUMBER.fullmatch(typed.strip()):
            return start + float(typed)
        stamp = _moment(typed, None)
        if stamp is None or stamp.tzinfo is not None:
            mend = 'write it like "2026-11-30 14:05:00", or seconds from the first row'
            raise RecordError(Problem(f"{quoted(typed)} is not a stamp", mend, key=option))
        return (stamp - _SERIAL_ORIGIN).total_seconds()

    def show(at: float) -> str:
        return (_SERIAL_ORIGIN + timedelta(seconds=round(at, 6))).isoformat(sep=" ")

    return Clock(seconds, moment, show, "The times are read as day numbers of a spreadsheet.", True)


# --- stamps --------------------------------------------------------------------------------------


class _Stamps:
    """A column of stamps: date words and times of day, each read once however often it stands."""

    def __init__(self, table: Table, rows: NDArray[np.bool_], dates: str | None) -> None:
        self.table, self.rows = table, rows
        self.days: dict[str, int] = {}
        """Date word -> its number, in the order of the file."""
        self.first_row: list[int] = []
        """Row in which each date word stands first."""
        self.sample = ""
        self._numbers, self._seconds = array("l"), array("d")
        self._zone: float | None = None
        self._zoned: bool | None = None
        self._read()
        self.day_first = self._order(dates)

    def clock(self) -> Clock:
        """The clock of the column."""
        ordinals = np.array([self._ordinal(word) for word in self.days], dtype=np.float64)
        seconds = np.full(len(self.rows), math.nan)
        found = ordinals[np.array(self._numbers)] * _DAY + np.array(self._seconds)
        if list(self.days) == [""]:
            # Times of day alone: a step back over most of a day is midnight.
            sense = -1.0 if np.count_nonzero(np.diff(found) < 0) > len(found) / 2 else 1.0
            back = sense * np.diff(found, prepend=found[0]) < -_DAY / 2
            found = found + sense * _DAY * np.cumsum(back)
        start = float(found[0])
        seconds[self.rows] = found - start
        zone = None if self._zone is None else timezone(timedelta(seconds=self._zone))
        origin = datetime(1, 1, 1, tzinfo=zone) + timedelta(
            days=start // _DAY - 1, seconds=start % _DAY + (self._zone or 0.0)
        )
        oldest = float(np.nanmin(seconds))

        def moment(typed: str, option: str) -> float:
            if NUMBER.fullmatch(typed.strip()):
                return oldest + float(typed)
            stamp = _moment(typed, self.day_first)
            if stamp is not None and stamp.tzinfo is None:
                stamp = stamp.replace(tzinfo=zone)
            if stamp is None or (zone is None and stamp.tzinfo is not None):
                what = f"{quoted(typed)} is not a stamp as this record writes them"
                mend = f'write it like "{harmless(self.sample, 40)}", or seconds from the first row'
                raise RecordError(Problem(what, mend, key=option))
            return (stamp - origin).total_seconds()

        def show(at: float) -> str:
            shown = origin + timedelta(seconds=round(at, 6))
            return str(shown.time()) if list(self.days) == [""] else shown.isoformat(sep=" ")

        return Clock(seconds, moment, show, self._note(), zone is None)

    def _note(self) -> str:
        if list(self.days) == [""]:
            return "The stamps have no date; a step back over midnight begins the next day."
        if self.day_first is None:
            return ""
        order = "day before month" if self.day_first else "month before day"
        return f"The stamps are read {order}."

    def _read(self) -> None:
        times: dict[str, float | None] = {}
        for row, date, time in self._words():
            number = self.days.get(date)
            if number is None:
                number = self.days[date] = len(self.days)
                self.first_row.append(row)
                if _DATE.fullmatch(date) is None and date:
                    self._refuse(row)
            second = times.get(time)
            if second is None:
                second = self._time_of_day(time, row)
                if len(times) < 200_000:
                    times[time] = second
            self._numbers.append(number)
            self._seconds.append(second)

    def _words(self) -> Iterator[tuple[int, str, str]]:
        """Row, date and time of day of each row asked for."""
        cells = self.table.cells("time")
        dates = self.table.cells("date") if "date" in self.table else None
        wanted = self.rows.tolist()
        for row, cell in enumerate(cells):
            day = next(dates) if dates is not None else ""
            if not wanted[row]:
                continue
            self.sample = self.sample or f"{day} {cell}".strip()
            if dates is not None:
                # Spreadsheets write a date as midnight, and a time of day as one on day 0.
                yield row, re.split(r"[T ]+0?0:00", day.strip())[0], cell.strip()
                continue
            date, gap, time = cell.partition(" ")
            if gap and len(date) > 5 and time[:1].isdigit():
                yield row, date, time
                continue
            parts = _PARTS.fullmatch(cell.strip())
            if parts:
                yield row, parts[1].strip(), parts[2]
            elif _TIME.fullmatch(cell.strip()):
                yield row, "", cell.strip()
            elif _DATE.fullmatch(cell.strip()):
                yield row, cell.strip(), "0:00"  # spreadsheets drop the time at midnight
            else:
                self._refuse(row)

    def _refuse(self, row: int) -> None:
        cell = next(itertools.islice(self.table.cells("time"), row, None)).strip()
        if "date" in self.table:
            cell = f"{next(itertools.islice(self.table.cells('date'), row, None)).strip()} {cell}"
        what = f"the time {quoted(cell)} is not understood"
        raise refused(self.table.path, self.table.lines[row], what, _STAMPS)

    def _time_of_day(self, word: str, row: int) -> float:
        """Seconds since midnight; with a zone, since midnight in UTC."""
        found = _time(word.strip())
        if found is None:
            self._refuse(row)
            return 0.0
        seconds, zone = found
        if self._zoned is None:
            self._zoned, self._zone = zone is not None, zone
        elif self._zoned != (zone is not None):
            what = "some stamps name a time zone and others do not"
            mend = "write the zone on all of them or on none"
            raise refused(self.table.path, self.table.lines[row], what, mend)
        return seconds - (zone or 0.0)

    # -- day and month --

    def _order(self, dates: str | None) -> bool | None:
        """Whether the day stands before the month; `None` where nothing is to be told apart."""
        pairs = [
            (int(found["first"]), int(found["second"]), row, word)
            for word, row in zip(self.days, self.first_row, strict=True)
            if (found := _DATE.fullmatch(word)) and found["first"]
        ]
        if not pairs:
            return None
        by_day = next((pair for pair in pairs if pair[0] > 12), None)
        by_month = next((pair for pair in pairs if pair[1] > 12), None)
        if by_day is not None and by_month is not None:
            lines = sorted(self.table.lines[pair[2]] for pair in (by_day, by_month))
            what = f"the day stands first here and second in line {lines[0]}"
            if self.table.lines[by_month[2]] > self.table.lines[by_day[2]]:
                what = f"the month stands first here and second in line {lines[0]}"
            raise refused(self.table.path, lines[1], what, _STAMPS)
        shown = None if by_day is None and by_month is None else by_day is not None
        asked = {"day-first": True, "month-first": False}.get(dates or "")
        if shown is not None and asked not in (None, shown):
            row, word = (by_day or by_month or pairs[0])[2:]
            what = f"the date {quoted(word)} is not {dates}"
            mend = "leave --dates out"
            raise refused(self.table.path, self.table.lines[row], what, mend)
        if shown is None and asked is None and any(first != second for first, second, *_ in pairs):
            raise self._question(next(pair for pair in pairs if pair[0] != pair[1]))
        return shown if asked is None else asked

    def _question(self, pair: tuple[int, int, int, str]) -> RecordQuestion:
        first, second, row, word = pair
        readings = (
            ("day-first", f"day {first} of month {second}"),
            ("month-first", f"day {second} of month {first}"),
        )
        return RecordQuestion(
            Problem(
                f"the date {quoted(word)} can be {readings[0][1]} or {readings[1][1]}",
                "say --dates day-first or --dates month-first",
                path=self.table.path,
                line=self.table.lines[row],
            ),
            option="--dates",
            readings=readings,
        )

    def _ordinal(self, word: str) -> float:
        if not word:
            return _NO_DATE
        day = _date(word, self.day_first)
        if day is None:
            self._refuse(self.first_row[self.days[word]])
            return 0.0
        return float(day.toordinal())


# --- one stamp -----------------------------------------------------------------------------------


def _moment(typed: str, day_first: bool | None) -> datetime | None:
    """A stamp that was typed, or nothing where it is not one."""
    parts = _PARTS.fullmatch(typed.strip())
    if parts is None:
        return None
    day, time = _date(parts[1].strip(), day_first), _time(parts[2].strip())
    if day is None or time is None:
        return None
    zone = None if time[1] is None else timezone(timedelta(seconds=time[1]))
    return day.replace(tzinfo=zone) + timedelta(seconds=time[0])


def _date(word: str, day_first: bool | None) -> datetime | None:
    """Midnight of a date, or nothing where there is no such day."""
    found = _DATE.fullmatch(word)
    if found is None:
        return None
    if found["y"]:
        year, month, day = int(found["y"]), int(found["m"]), int(found["d"])
    elif found["name"]:
        name = found["name"][:3].lower()
        if name not in _MONTHS:
            return None
        year, month, day = int(found["named"]), _MONTHS.index(name) + 1, int(found["day"])
    else:
        first, second, year = int(found["first"]), int(found["second"]), int(found["year"])
        day, month = (first, second) if day_first or first == second else (second, first)
        if day_first is None and first != second:
            return None
    # Two digits of a year are one of this century.
    year = year + 2000 if year < 100 else year
    if not _YEARS[0] <= year <= _YEARS[1]:
        return None
    try:
        return datetime(year, month, day)
    except ValueError:
        return None


def _time(word: str) -> tuple[float, float | None] | None:
    """Seconds since midnight, and the zone's seconds east of UTC; nothing where it is no time."""
    found = _TIME.fullmatch(word)
    if found is None:
        return None
    hour, minute = int(found[1]), int(found[2])
    seconds = float((found[3] or "0").replace(",", "."))
    if found[4]:
        if not 1 <= hour <= 12:
            return None
        hour = hour % 12 + (12 if found[4] in "Pp" else 0)
    if hour > 23 or minute > 59 or seconds >= 60:
        return None
    zone = None
    if found[5]:
        digits = found[5].replace(":", "")
        east = 0 if digits == "Z" else int(digits[1:3]) * 3600 + int(digits[3:5] or 0) * 60
        if east >= 86_400:
            return None
        zone = float(-east if digits[0] == "-" else east)
    return hour * 3600.0 + minute * 60.0 + seconds, zone
