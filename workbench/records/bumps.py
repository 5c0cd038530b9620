"""Which bumps a record holds, and about which operating point each was made."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from typing import Final

import numpy as np

from workbench.records.record import Record

MOST: Final = 40
"""Moves above which OP is not being bumped: a controller moves it."""
_SHARE: Final = 0.25
"""Share of the hold before a move over which PV is averaged."""


@dataclass(frozen=True)
class Bump:
    """One move of OP."""

    at_s: float
    """When, from the record's first row [s]."""
    op_before: float
    """In the record's units, as all here."""
    op_after: float
    pv_before: float
    """Mean over the last quarter of the hold before the move."""
    pv_after: float
    """The same before the next move, or the end."""
    hold_s: float
    """Until the next move, or the end."""


def bumps(record: Record) -> tuple[Bump, ...]:
    """The moves of OP, oldest first; none where there are more than 40 of them."""
    found: list[Bump] = []
    for part in record.parts:
        time, pv, op = record.time[part], record.pv[part], record.op[part]
        moved = np.flatnonzero(np.diff(op)) + 1
        if len(moved) + len(found) > MOST:
            return ()
        edges = [0, *moved.tolist(), len(op)]
        means = [
            float(pv[b - max(1, round(_SHARE * (b - a))) : b].mean())
            for a, b in itertools.pairwise(edges)
        ]
        for i, row in enumerate(moved.tolist()):
            end = float(time[min(edges[i + 2], len(op) - 1)])
            found.append(
                Bump(
                    at_s=float(time[row]),
                    op_before=float(op[row - 1]),
                    op_after=float(op[row]),
                    pv_before=means[i],
                    pv_after=means[i + 1],
                    hold_s=end - float(time[row]),
                )
            )
    return tuple(found)
