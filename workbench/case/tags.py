"""What the letters of a loop tag tell, where they are those of ANSI/ISA-5.1."""

from __future__ import annotations

import re
from typing import Final


def tag_words(tag: str) -> str:
    """What a tag's letters mean, or nothing where they are not those of the standard.

    A tag is read as letters and a number, with anything before or after them: `12-TIC-307A`.

    Notes
    -----
    Source: ANSI/ISA-5.1-2009, Instrumentation Symbols and Identification, table 4.1 (from memory).
    Letters that the standard leaves to the user are read as nothing.

    Examples
    --------
    >>> tag_words("TIC-307")
    'temperature, indicating controller'
    >>> tag_words("PDIC-12")
    'pressure difference, indicating controller'
    >>> tag_words("HEATER 4")
    ''
    """
    found = re.search(r"(?<![A-Za-z])([A-Z]{2,5})(?=[-_ ]?\d)", tag)
    if found is None:
        return ""
    letters = found[1]
    measured, rest = MEASURED.get(letters[0], ""), letters[1:]
    if rest[:1] in MODIFIERS and len(rest) > 1:
        measured, rest = f"{measured} {MODIFIERS[rest[0]]}", rest[1:]
    roles = [FUNCTIONS.get(letter, "") for letter in rest]
    if not measured.strip() or not all(roles):
        return ""
    *before, last = roles
    if last == "controlling":
        last = "controller"
    return f"{measured}, {' '.join([*before, last])}"


def kind_of(tag: str) -> str:
    """The kind of loop that the first letter tells, or nothing.

    >>> kind_of("TIC-307"), kind_of("PUMP 3")
    ('temperature', '')
    """
    measured = tag_words(tag).partition(",")[0].partition(" ")[0]
    return measured if measured in KINDS else ""


KINDS: Final = ("flow", "level", "pressure", "temperature", "analysis", "speed", "other")
"""Kinds of loop."""

MEASURED: Final = {
    "A": "analysis",
    "B": "burner",
    "E": "voltage",
    "F": "flow",
    "I": "current",
    "J": "power",
    "K": "time",
    "L": "level",
    "P": "pressure",
    "Q": "quantity",
    "R": "radiation",
    "S": "speed",
    "T": "temperature",
    "U": "several variables",
    "V": "vibration",
    "W": "weight",
    "Y": "state",
    "Z": "position",
}
"""First letter -> what is measured."""

MODIFIERS: Final = {"D": "difference", "F": "ratio", "K": "rate of change", "Q": "total"}
"""Second letter, where more follow -> what of it."""

FUNCTIONS: Final = {
    "C": "controlling",
    "I": "indicating",
    "K": "control station",
    "R": "recording",
    "S": "switching",
    "T": "transmitting",
    "V": "valve",
    "Y": "computing",
}
"""Later letters -> what the instrument does."""

USUAL_SCANS_S: Final = {
    "flow": (0.1, 1.0),
    "pressure": (0.5, 5.0),
    "level": (1.0, 10.0),
    "temperature": (1.0, 20.0),
}
"""Kind of loop -> usual scan intervals [s] (common practice)."""
