"""What repeated values, straight lines and uneven stamps betray."""

from __future__ import annotations

import numpy as np
import pytest

from workbench.records.habits import compression_factor, habits


def told(seconds: object, pv: object) -> str:
    time, values = np.asarray(seconds, dtype=np.float64), np.asarray(pv, dtype=np.float64)
    return " | ".join(note.text for note in habits(time, values, values))


@pytest.mark.parametrize("every", [2, 5, 10])
def test_one_value_in_so_many_archived_is_found_by_the_published_estimate(every: int) -> None:
    """Exact: with one in m kept and lines between, m - 1 of m second differences are 0."""
    rng = np.random.default_rng(3)
    time = np.arange(2001.0)
    kept = time[::every]
    values = np.interp(time, kept, rng.normal(size=len(kept)))
    factor = compression_factor(time, values)
    assert factor == pytest.approx(every, rel=0.01)
    assert "straight lines" in told(time, values)
    assert ("are in doubt" in told(time, values)) == (every > 3)


def test_noise_that_was_kept_tells_nothing() -> None:
    time = np.arange(500.0)
    values = 50 + np.random.default_rng(4).normal(size=500)
    assert compression_factor(time, values) == 1.0
    assert told(time, values) == ""


def test_a_deadband_shows_in_repeated_values_and_the_smallest_move() -> None:
    """Exact: the values are held until they differ by more than 0.5."""
    held = 0.0
    values = []
    for x in np.random.default_rng(5).normal(size=400).cumsum() * 0.2:
        if abs(x - held) > 0.5:
            held = float(x)
        values.append(held)
    words = told(np.arange(400.0), values)
    assert "PV repeats the value before it in" in words
    assert "never moves by less than 0.50" in words or "never moves by less than 0.5" in words


def test_uneven_stamps_are_told_with_their_spread() -> None:
    time = np.cumsum(np.tile([30.0, 31.0], 100))
    values = np.random.default_rng(6).normal(size=200)
    assert "lie between 30 s and 31 s" in told(time, values)
