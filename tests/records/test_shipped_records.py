"""The shipped loops: made again byte for byte, and their records give back their plants."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from tests import make_cases
from workbench.records.identify import fit
from workbench.records.record import read_record

CASES = Path(__file__).parents[2] / "cases"


def test_making_the_shipped_files_again_gives_the_same_bytes() -> None:
    for name, content in make_cases.files().items():
        assert (CASES / name).read_bytes() == content, f"{name}: run python -m tests.make_cases"


def test_every_shipped_case_says_that_it_is_invented() -> None:
    for path in CASES.glob("*.toml"):
        assert path.read_text().startswith("# Invented data.  Port Ellery"), path.name


@pytest.mark.parametrize(
    ("tag", "shape", "truth"),
    [
        ("TIC-307", "first-order", {"gain": 1.8, "time_constants_s": 155.0, "dead_time_s": 26.0}),
        ("LIC-112", "integrating", {"slope_per_s": -0.0007, "dead_time_s": 9.0}),
        ("FIC-204", "first-order", {"gain": 0.42, "time_constants_s": 3.2, "dead_time_s": 0.9}),
    ],
)
def test_a_shipped_record_gives_back_its_plant(
    tag: str, shape: str, truth: dict[str, float]
) -> None:
    """Exact: the plants of `make_cases`, within three standard errors of what is found."""
    result = fit(read_record(CASES / f"{tag}_bump.csv"))
    assert result.chosen == shape
    assert result.best is not None
    assert [note for note in result.warnings if note.severity == "caution"] == []
    for key, expected in truth.items():
        value, error = getattr(result.best, key), result.best.standard_errors[key]
        value, error = (v[0] if isinstance(v, tuple) else v for v in (value, error))
        assert abs(value - expected) < 3.0 * error, key


@pytest.mark.parametrize("tag", ["LIC-112", "FIC-204"])
def test_a_shipped_plant_is_the_one_its_record_gives(tag: str) -> None:
    """Pinned to three digits, beside the test above: the case keeps the fit, rounded."""
    plant = tomllib.loads((CASES / f"{tag}.toml").read_text())["plant"]
    record = read_record(CASES / plant["from"])
    assert record.sha256 == plant["from_sha256"]
    best = fit(record).best
    assert best is not None
    assert float(plant["dead_time"].removesuffix(" s")) == pytest.approx(
        best.dead_time_s, rel=0.005
    )
    if best.gain is not None:
        assert plant["gain"] == pytest.approx(best.gain, rel=0.005)
    if best.slope_per_s is not None:
        slope = float(plant["slope"].removesuffix(" /s"))
        assert slope == pytest.approx(best.slope_per_s, rel=0.005)
