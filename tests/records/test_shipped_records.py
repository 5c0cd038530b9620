"""The shipped loops: made again byte for byte, and their records give back their plants."""

from __future__ import annotations

import tomllib
from functools import cache
from pathlib import Path
from typing import Any, Final

import numpy as np
import pytest

from tests import make_cases
from workbench.records.candidate import Candidate
from workbench.records.identify import Fit, fit
from workbench.records.record import read_record

CASES: Final = Path(__file__).parents[2] / "cases"

TRUTHS: Final[dict[str, tuple[str, dict[str, float | tuple[float, ...]]]]] = {
    "TIC-307": (
        "first-order",
        {"gain": 1.8, "time_constants_s": (155.0,), "dead_time_s": 26.0},
    ),
    "LIC-112": ("integrating", {"slope_per_s": -0.0007, "dead_time_s": 9.0}),
    "FIC-204": ("first-order", {"gain": 0.42, "time_constants_s": (3.2,), "dead_time_s": 0.9}),
    "PIC-501": (
        "second-order",
        {"gain": 0.11, "time_constants_s": (75.0, 9.0), "dead_time_s": 5.0},
    ),
    "LIC-520": (
        "lead",
        {
            "gain": 6.0,
            "numerator_time_s": -40.0,
            "time_constants_s": (300.0, 18.0),
            "dead_time_s": 15.0,
        },
    ),
    "TIC-231": (
        "second-order",
        {"gain": 0.92, "time_constants_s": (620.0, 80.0), "dead_time_s": 40.0},
    ),
    "AIC-410": ("first-order", {"gain": -12.0, "time_constants_s": (40.0,), "dead_time_s": 180.0}),
    "TIC-335": ("unstable", {"gain": -1.5, "time_constants_s": (540.0,), "dead_time_s": 30.0}),
    "AIC-630": ("first-order", {"gain": -0.025, "time_constants_s": (60.0,), "dead_time_s": 12.0}),
}
"""Tag -> the shape of the plant behind its record, and its values (exact, as `make_cases` has
them)."""

AS_COMMISSIONED: Final = {"TIC-307"}
"""Loops whose case still has an older plant than their record: that is their story."""


@cache
def fitted(tag: str) -> Fit:
    """Its own shape beside the two that any record is tried with first, to spare time."""
    shapes = {"first-order", "integrating", TRUTHS[tag][0]}
    return fit(read_record(CASES / f"{tag}_bump.csv"), shapes=tuple(sorted(shapes)))


def best_of(tag: str) -> Candidate:
    best = fitted(tag).best
    assert best is not None
    return best


def plant_of(tag: str) -> dict[str, Any]:
    plant: dict[str, Any] = tomllib.loads((CASES / f"{tag}.toml").read_text("utf-8"))["plant"]
    return plant


def test_making_the_shipped_files_again_gives_the_same_bytes() -> None:
    made = make_cases.files()
    assert sorted(made) == sorted(path.name for path in CASES.iterdir())
    for name, content in made.items():
        assert (CASES / name).read_bytes() == content, f"{name}: run python -m tests.make_cases"


def test_every_shipped_case_says_that_it_is_invented_and_has_a_truth_here() -> None:
    tags = {path.stem for path in CASES.glob("*.toml")}
    assert tags == set(TRUTHS), "name the plant behind its record in TRUTHS"
    for tag in tags:
        assert (CASES / f"{tag}.toml").read_text("utf-8").startswith("# Invented data.  Port Ell")


@pytest.mark.parametrize("tag", TRUTHS)
def test_a_shipped_record_gives_back_its_plant(tag: str) -> None:
    """Exact: the plants of `make_cases`, each value within its own 95 % interval.

    Nine loops have some thirty values, of which one or two would by chance lie outside; the
    seeds were chosen so that none does.  Whether intervals keep their promise is measured on
    thousands of records by the campaign "fits of made records".
    """
    shape, truth = TRUTHS[tag]
    result, best = fitted(tag), best_of(tag)
    assert result.chosen == shape
    assert [note for note in result.warnings if note.severity == "caution"] == []
    for key, expected in truth.items():
        values = np.atleast_1d(expected)
        low, high = np.reshape(best.interval_95[key], (len(values), 2)).T
        assert np.all((low <= values) & (values <= high)), key


@pytest.mark.parametrize("tag", sorted(TRUTHS.keys() - AS_COMMISSIONED))
def test_a_shipped_plant_is_the_one_its_record_gives(tag: str) -> None:
    """Pinned to three digits, beside the test above: the case keeps the fit, rounded."""
    plant, best = plant_of(tag), best_of(tag)
    assert fitted(tag).record.sha256 == plant["from_sha256"]
    assert plant["shape"] == best.shape
    kept = {
        "gain": best.gain,
        "slope": best.slope_per_s,
        "dead_time": best.dead_time_s,
        "numerator_time": best.numerator_time_s,
        "time_constant": (*best.time_constants_s, None)[0],
        "second_time_constant": (*best.time_constants_s, None, None)[1],
    }
    for key, found in kept.items():
        if key in plant:
            assert found is not None
            assert float(str(plant[key]).split()[0]) == pytest.approx(found, rel=0.005), key


@pytest.mark.parametrize(
    ("tag", "told"),
    [
        ("LIC-112", ("a row of units", "day before month")),
        ("PIC-501", ("8 rows marked bad", "newest row first", "1 gap")),
        ("LIC-520", ("a row of units", "day before month")),
        ("TIC-231", ("2 gaps",)),
        ("AIC-410", ("2 lines above the headings", "4 of 441 rows left out")),
    ],
)
def test_what_a_shipped_export_does_to_its_rows_is_told(tag: str, told: tuple[str, ...]) -> None:
    notes = " ".join(note.text for note in read_record(CASES / f"{tag}_bump.csv").notes)
    assert [words for words in told if words not in notes] == []
