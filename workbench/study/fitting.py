"""From records to fitted plants: finished ones, several at once, one still being made."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Final, Unpack

from workbench.records.coach import CERTAINTY, Advice, advise
from workbench.records.following import Following
from workbench.records.identify import Fit, fit
from workbench.records.record import Reading, Record, begin, join, read_record
from workbench.records.response import FITTED
from workbench.units import Range

_GROWN: Final = 1.25
"""Growth of a followed record after which every shape is fitted again."""

Stop = Callable[[], bool] | None
Tell = Callable[[int, int], None]


def _untold(done: int, total: int) -> None:
    """Nobody asks how far the work is."""


def read_records(paths: Sequence[str | Path], **reading: Unpack[Reading]) -> Record:
    """One record, or several of one plant joined, each read in the same way.

    Raises `RecordQuestion` or `RecordError`.
    """
    return join([read_record(path, **reading) for path in paths])


def fit_plants(
    record: Record,
    *,
    shapes: tuple[str, ...] | None = None,
    noise_model: str = "auto",
    drift: bool = True,
    should_stop: Stop = None,
    tell: Tell = _untold,
) -> Fit:
    """Plants fitted to a record, every shape where none is named.  Raises `CannotSolve`."""
    return fit(
        record,
        shapes=shapes or tuple(FITTED),
        noise_model=noise_model,
        drift=drift,
        should_stop=should_stop,
        tell=tell,
    )


def fit_record(
    path: str | Path,
    *,
    shapes: tuple[str, ...] | None = None,
    noise_model: str = "auto",
    drift: bool = True,
    should_stop: Stop = None,
    **reading: Unpack[Reading],
) -> Fit:
    """Fit plant models to a test record.  Raises `RecordError` or `CannotSolve`."""
    record = read_record(path, **reading)
    return fit_plants(
        record, shapes=shapes, noise_model=noise_model, drift=drift, should_stop=should_stop
    )


@dataclass(frozen=True)
class Source:
    """A record file, and how it is read."""

    path: Path
    reading: Reading = field(default_factory=Reading)


def fit_sources(
    sources: Sequence[Source], *, should_stop: Stop = None, tell: Tell = _untold
) -> tuple[Fit, tuple[Record, ...]]:
    """One fit over several records, each read in its own way, and these records.

    `tell` is called with the number of shapes tried, and of all.

    Raises `RecordQuestion`, `RecordError` or `CannotSolve`.
    """
    records = tuple(read_record(source.path, **source.reading) for source in sources)
    return fit_plants(join(records), should_stop=should_stop, tell=tell), records


def narrowed(
    sources: Sequence[Source],
    records: Sequence[Record],
    window: tuple[float, float],
    *,
    leave_out: bool,
) -> tuple[Source, ...]:
    """The records with a window of their joined time [s] as the one used, or as one left out.

    A record of which nothing would be left is dropped; none are left where all would be.
    """
    kept = []
    for source, record, at in zip(sources, records, begin(records), strict=True):
        low, high = max(window[0] - at, 0.0), min(window[1] - at, record.duration)
        covered = low <= 0.0 and high >= record.duration
        if low >= high:
            if leave_out:
                kept.append(source)
            continue
        if covered:
            if not leave_out:
                kept.append(source)
            continue
        first, last = record.start_s + low, record.start_s + high
        reading: Reading = {**source.reading}
        if leave_out:
            reading["leave_out"] = (*source.reading.get("leave_out", ()), (first, last))
        else:
            reading["start"], reading["end"] = first, last
            # A window that was left out beyond these ends has no row any more.
            reading["leave_out"] = [
                gap
                for gap in source.reading.get("leave_out", ())
                if float(gap[0]) <= last and float(gap[1]) >= first
            ]
        kept.append(Source(source.path, reading))
    return tuple(kept)


@dataclass(frozen=True)
class Live:
    """Where a test stands that is still being made."""

    fit: Fit | None
    """`None` while the record has too few rows."""
    advice: Advice | None
    said: str = ""
    """That the file was replaced, or what is missing yet."""


class LiveTest:
    """A bump test that is followed while it is made."""

    def __init__(
        self,
        path: str | Path,
        *,
        shapes: tuple[str, ...] | None = None,
        noise_model: str = "auto",
        drift: bool = True,
        certainty: float = CERTAINTY,
        ranges: tuple[Range, Range] | None = None,
        **reading: Unpack[Reading],
    ) -> None:
        """`certainty` is the wanted standard error [%], `ranges` those of PV and OP."""
        self._following = Following(path, **reading)
        self._shapes, self._noise_model, self._drift = shapes, noise_model, drift
        self._certainty, self._ranges = certainty, ranges or (None, None)
        self._judged_rows = 0
        """Rows when every shape was fitted last."""
        self._all_shapes = True
        """Whether the last fit was of every shape."""
        self.last = Live(None, None)

    def refresh(self, *, finished: bool = False, should_stop: Stop = None) -> Live | None:
        """Where the test stands now; `None` where nothing is new.

        Every shape is fitted at first, whenever the record has grown by a quarter, and once it is
        `finished`, when a last line without an end counts too; in between the best two of them,
        so that the advice comes at once.  Raises `RecordError` or `CannotSolve`.
        """
        look = self._following.look(finished=finished)
        if not look.grew and not (finished and not self._all_shapes):
            return None
        self.last, before = Live(None, None, look.said), self.last.fit
        if look.record is None:
            return self.last
        rows = len(look.record.time)
        self._all_shapes = finished or before is None or rows >= _GROWN * self._judged_rows
        shapes = self._shapes
        if self._all_shapes or before is None or len(before.candidates) < 2:
            self._judged_rows = rows
        else:
            shapes = tuple(candidate.shape for candidate in before.candidates[:2])
        found = fit_plants(
            look.record,
            shapes=shapes,
            noise_model=self._noise_model,
            drift=self._drift,
            should_stop=should_stop,
        )
        pv, op = self._ranges
        advice = advise(found, certainty=self._certainty, pv_range=pv, op_range=op)
        self.last = replace(self.last, fit=found, advice=advice)
        return self.last
