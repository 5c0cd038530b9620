"""A record that is still being written: read again as it grows, whole lines only.

The file is read from its beginning each time, by the very reader that reads a finished one, so that
a record followed to its end is the record read afterwards.  What stands behind the end of the last
line is not there yet: `12.` of `12.5` is never seen.
"""

from __future__ import annotations

import os
from dataclasses import dataclass, replace
from typing import Final, Unpack

from workbench.errors import RecordError, RecordQuestion
from workbench.records.record import Reading, Record, read_record
from workbench.records.table import Identity, begins_alike, identify

_FEW: Final = 8
"""Whole lines below which a file that cannot be read yet is taken to be at its very beginning."""


@dataclass(frozen=True)
class Look:
    """What a look at the file found."""

    record: Record | None = None
    """The record so far; `None` while it has too few rows to be one."""
    grew: bool = False
    """Whether anything is new since the look before."""
    said: str = ""
    """That the file became shorter or another one, or what is missing yet."""


class Following:
    """Looks at one growing file, time after time."""

    def __init__(self, path: str | os.PathLike[str], **reading: Unpack[Reading]) -> None:
        self.path = path
        self._reading: Reading = {**reading}
        self._seen: Identity | None = None
        self._last = Look()

    def look(self, *, finished: bool = False) -> Look:
        """The record as it stands now.

        Parameters
        ----------
        finished
            Nothing more will be written: a last line without an end counts too.

        Raises
        ------
        RecordQuestion
            The file can be read in two ways.
        RecordError
            The file is not there, or what stands in it cannot be read.
        """
        seen, before = identify(self.path, whole_lines=not finished), self._seen
        if before is not None and seen.sha256 == before.sha256:
            self._last = replace(self._last, grew=False)
            return self._last
        said = ""
        if before is not None and not (
            seen.size >= before.size and begins_alike(self.path, before)
        ):
            shorter = seen.size < before.size
            what = "became shorter" if shorter else "was replaced by another one"
            said = f"The file {what}: it is read anew from its beginning."
        self._seen = seen
        try:
            self._reading["whole_lines"] = not finished
            record = read_record(self.path, **self._reading)
        except RecordQuestion:
            raise
        except RecordError as fault:
            if seen.lines >= _FEW or finished:
                raise
            self._last = Look(None, True, said or f"Waiting for rows: {fault.problems[0].what}.")
        else:
            self._last = Look(record, True, said)
        return self._last
