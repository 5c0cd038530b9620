"""The operating point of each bump.  Expected values are exact: they are in records made here."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from workbench.records.bumps import MOST, bumps
from workbench.records.record import Record, begin, join


def record(op: Sequence[float], pv: Sequence[float], breaks: tuple[int, ...] = ()) -> Record:
    time = np.arange(len(op), dtype=np.float64) * 2.0
    return Record("made.csv", time, np.array(pv), np.array(op), breaks=breaks)


def test_each_move_has_its_levels_and_its_hold() -> None:
    found = bumps(record([40] * 4 + [45] * 4 + [38] * 4, [10] * 4 + [11, 12, 13, 14] + [9] * 4))
    assert [(b.at_s, b.op_before, b.op_after, b.hold_s) for b in found] == [
        (8.0, 40.0, 45.0, 8.0),
        (16.0, 45.0, 38.0, 6.0),
    ]
    assert [(b.pv_before, b.pv_after) for b in found] == [(10.0, 14.0), (14.0, 9.0)]


def test_a_break_is_no_move() -> None:
    assert bumps(record([40] * 4 + [45] * 4, [10] * 8, breaks=(4,))) == ()


def test_a_controllers_moves_are_no_bumps() -> None:
    many = [40.0 + i % 2 for i in range(MOST + 10)]
    assert bumps(record(many, many)) == ()


def test_joined_records_follow_each_other_with_a_break_between() -> None:
    one, two = record([40, 45, 45], [1, 2, 3]), record([30, 35, 35, 35], [4, 5, 6, 7], breaks=(2,))
    joined = join([one, two])
    np.testing.assert_array_equal(joined.time, [0, 2, 4, 6, 8, 10, 12])
    np.testing.assert_array_equal(joined.pv, [1, 2, 3, 4, 5, 6, 7])
    assert joined.breaks == (3, 5)
    assert joined.parts == (slice(0, 3), slice(3, 5), slice(5, 7))
    assert begin([one, two]) == [0.0, 6.0]
    assert joined.interval == 2.0
    assert join([one]) is one
