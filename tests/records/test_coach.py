"""Advice during a test: how long to hold, when it is enough, when it is spoilt."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.records.making import bump, lag
from workbench.records.coach import Advice, advise
from workbench.records.identify import fit
from workbench.records.record import Record
from workbench.units import Range

TIME_CONSTANT, DEAD_TIME = 20.0, 5.0


def at(seconds: int, *, seed: int = 1, noise: float = 0.3) -> Record:
    """The test as it stands after so many seconds: OP moved at 30 s."""
    time = np.arange(seconds, dtype=np.float64)
    # The same noise whenever one looks: that of a long record, cut off.
    long = bump(
        np.arange(400.0),
        lag(2.0, TIME_CONSTANT),
        DEAD_TIME,
        noise=noise,
        moves=((30 / 399, 5.0),),
        seed=seed,
    )
    return replace(long, time=time, pv=long.pv[:seconds], op=long.op[:seconds])


def advice(record: Record, certainty: float = 5.0, **ranges: Range) -> Advice:
    found = fit(record, shapes=("first-order",), noise_model="white", drift=False)
    return advise(found, certainty=certainty, **ranges)


def test_before_the_bump_it_says_to_make_it() -> None:
    found = advice(at(25))
    assert found.say == "Make the bump: OP has not moved yet."
    assert not found.reached
    assert found.hold_s.value is None


@pytest.mark.parametrize("seed", range(2))
def test_after_the_hold_it_asks_for_the_certainty_is_there(seed: int) -> None:
    """Other route: the test is held for as long as it said, and fitted then."""
    early = advice(at(75, seed=seed))
    hold = early.hold_s.value
    assert hold is not None
    assert 5.0 < hold < 200.0
    assert early.say.startswith("Hold for about")
    then = advice(at(75 + round(1.3 * hold), seed=seed))
    assert then.certainty_percent.value is not None
    assert then.certainty_percent.value < 1.25 * 5.0
    # Not far too long either: with a third of it the certainty is not there yet.
    sooner = advice(at(75 + round(hold / 3), seed=seed)).certainty_percent.value
    assert sooner is not None
    assert sooner > 5.0


def test_once_it_is_enough_it_says_so_with_the_intervals() -> None:
    found = advice(at(300))
    assert found.reached
    assert found.hold_s.value == 0.0
    assert found.say.startswith("Enough for this bump")
    assert found.spoilt == ()
    assert [words.split(" ")[0] for words in found.known] == ["gain", "dead", "time"]
    assert all("(95 %: " in words for words in found.known)


def test_where_holding_on_does_not_help_it_asks_for_another_bump() -> None:
    found = advice(at(300, noise=3.0), certainty=0.5)
    assert found.hold_s.value is None
    assert found.say.startswith("Make the next bump")


def test_a_sound_test_is_not_called_spoilt() -> None:
    for seed in range(2):
        for seconds in (70, 200):
            assert advice(at(seconds, seed=seed)).spoilt == ()


def test_an_upset_spoils_the_test() -> None:
    record = at(300)
    pv = record.pv + np.where((record.time > 200) & (record.time < 240), 3.0, 0.0)
    found = advise(fit(replace(record, pv=pv)))
    assert not found.reached
    # A rich enough shape follows the upset and gives it another name; the test is spoilt by any.
    assert found.spoilt
    assert found.say.startswith("Repeat the test.")


def test_a_limit_spoils_the_test() -> None:
    record = at(300)
    clipped = replace(record, pv=np.minimum(record.pv, 57.0))
    assert any("at a limit, or frozen" in words for words in advice(clipped).spoilt)
    known = advice(clipped, pv_range=Range(0.0, 57.0)).spoilt
    assert known[0].startswith("PV is at the end of its range from")
    assert advice(record, op_range=Range(0.0, 45.0)).spoilt[0].startswith("OP is at the end")


def test_drift_spoils_the_test() -> None:
    record = at(300)
    found = fit(replace(record, pv=record.pv + 0.05 * record.time), shapes=("first-order",))
    assert any("wait until it rests" in words for words in advise(found).spoilt)
