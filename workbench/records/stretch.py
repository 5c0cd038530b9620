"""Which rows of a record can be looked at together: in automatic, without gaps, evenly spaced."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.records.record import Record

Array = NDArray[np.float64]
Rows = NDArray[np.bool_]

AUTOMATIC: Final = frozenset(
    {"A", "AUT", "AUTO", "AUTOMATIC", "C", "CAS", "CASC", "CASCADE", "RCAS"}
)
"""Words for a controller that moves OP by itself."""

_GAP: Final = 2.5
"""Usual intervals that a step between rows may last before it is a gap."""


@dataclass(frozen=True)
class Stretch:
    """Evenly spaced rows, each array (n,)."""

    interval: float
    """[s]"""
    pv: Array
    op: Array
    sp: Array | None
    first: int
    """Row of the record with which it begins."""

    @property
    def error(self) -> Array:
        """SP less PV, or what PV is below its straight line where there is no SP."""
        if self.sp is not None:
            return self.sp - self.pv
        time = np.arange(len(self.pv))
        return np.asarray(np.polyval(np.polyfit(time, self.pv, 1), time) - self.pv, np.float64)


def is_automatic(record: Record) -> Rows | None:
    """Whether the controller moved OP at each row (n,); `None` where no mode was logged."""
    if record.mode is None:
        return None
    return np.array([mode.strip().upper() in AUTOMATIC for mode in record.mode])


def runs(record: Record, wanted: Rows) -> list[slice]:
    """Unbroken runs of rows that are wanted and have no gap in them."""
    late = np.append(False, np.diff(record.time) > _GAP * record.interval)
    starts = np.flatnonzero(wanted & (late | ~np.append(False, wanted[:-1])))
    ends = np.flatnonzero(wanted & (np.append(late[1:], True) | ~np.append(wanted[1:], False)))
    return [slice(int(a), int(b) + 1) for a, b in zip(starts, ends, strict=True)]


def longest_stretch(record: Record, wanted: Rows) -> Stretch | None:
    """The longest unbroken run of the rows wanted, on even spacing; `None` where there is none.

    PV is taken along straight lines between rows, OP and SP as they were held.
    """
    found = runs(record, wanted)
    if not found:
        return None
    rows = max(found, key=lambda run: record.time[run.stop - 1] - record.time[run.start])
    time, interval = record.time[rows], record.interval
    if len(time) < 2:
        return None
    even = np.arange(time[0], time[-1] + 0.5 * interval, interval)
    held = np.clip(np.searchsorted(time, even + 0.25 * interval, side="right") - 1, 0, None)
    return Stretch(
        interval,
        np.interp(even, time, record.pv[rows]),
        record.op[rows][held],
        None if record.sp is None else record.sp[rows][held],
        rows.start,
    )
