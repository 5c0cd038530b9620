"""Letters of a tag: published in ANSI/ISA-5.1-2009, table 4.1 (the letters from memory)."""

from __future__ import annotations

import pytest

from workbench.case.tags import KINDS, USUAL_SCANS_S, kind_of, tag_words

TAGS = (
    ("TIC-307", "temperature, indicating controller", "temperature"),
    ("12-FRC-4A", "flow, recording controller", "flow"),
    ("LC 12", "level, controller", "level"),
    ("PDIC-12", "pressure difference, indicating controller", "pressure"),
    ("FFIC-3", "flow ratio, indicating controller", "flow"),
    ("AIC101", "analysis, indicating controller", "analysis"),
    ("ZT-9", "position, transmitting", ""),
    # Letters left to the user, words that are not tags, tags without a number.
    ("DIC-4", "", ""),
    ("PUMP 3", "", ""),
    ("TIC", "", ""),
    ("", "", ""),
)


@pytest.mark.parametrize(("tag", "words", "kind"), TAGS)
def test_the_letters_of_a_tag_are_read(tag: str, words: str, kind: str) -> None:
    assert tag_words(tag) == words
    assert kind_of(tag) == kind


def test_usual_scans_are_of_kinds_that_there_are() -> None:
    assert set(USUAL_SCANS_S) <= set(KINDS)
    assert all(0 < low < high for low, high in USUAL_SCANS_S.values())
