"""The table of outside checks is long, says what each is worth, and a row of each source holds."""

from __future__ import annotations

import pytest

from tests.outside import Row, by_source, rows

FOUND = rows()


def test_the_checks_and_their_sources_are_many() -> None:
    assert len(FOUND) >= 150
    assert len(by_source(FOUND)) >= 20


def test_every_check_says_what_it_is_worth() -> None:
    for row in FOUND:
        known = ("published", "closed form", "recomputed", "exact", "common practice")
        assert row.worth.startswith(known), row
        assert row.what
        assert row.limit <= 0.31, row


@pytest.mark.parametrize(
    "row", [own[len(own) // 2] for own in by_source(FOUND).values()], ids=lambda row: row.what
)
def test_a_check_of_each_source_is_kept(row: Row) -> None:
    assert row.off() <= 1.0, (row.expected, row.got())
