"""Margins are those about the operating point, and what they leave out is said."""

from __future__ import annotations

import pytest

from tests.study.test_engine_keys import a_case
from workbench import study
from workbench.case.case import Case


def _figures(case: Case) -> tuple[float, float]:
    judged = study.assess(case).judged
    assert judged is not None
    gain, phase = judged.margins.gain_margin.value, judged.margins.phase_margin_deg.value
    assert gain is not None
    assert phase is not None
    return gain, phase


def _notes(case: Case) -> str:
    return "; ".join(note.text for note in study.assess(case).notes)


def test_a_gain_that_grows_is_judged_at_no_error() -> None:
    # exact: 30 % of the gain of 1.2, and the same integral time, act at no error
    found = _figures(a_case(controller__gain_at_rest="0.3"))
    assert found == pytest.approx(_figures(a_case(controller__gain="0.36")))
    assert found[0] == pytest.approx(_figures(a_case())[0] / 0.3, rel=1e-6)


def test_a_gain_that_grows_from_nothing_is_judged_at_a_tenth_of_the_span() -> None:
    case = a_case(controller__gain_at_rest="0")
    assert _figures(case) == pytest.approx(_figures(a_case(controller__gain="0.12")))
    assert "margins are those at an error of 10 %, where 10 % of the gain acts" in _notes(case)


def test_the_gain_along_an_equal_percentage_valve_is_said() -> None:
    # exact: R^x has the slope R^(x - x0) of that at x0 = 0.5; over 1 % of travel at either end
    ratio = 100.0
    valve = {"valve__characteristic": "equal-percentage", "valve__rangeability": "100"}
    case = a_case(**valve)
    assert _figures(case) == _figures(a_case())
    most = ratio**0.495
    assert f"from {1 / most:.2g} to {most:.2g} times that, beyond the gain margin" in _notes(case)
    near = a_case(**valve, op__min="45", op__max="55")
    assert "from 0.81 to 1.2 times that" in _notes(near)
    assert "beyond" not in _notes(near)


def test_a_dead_zone_is_said() -> None:
    assert "beyond the dead zone" in _notes(a_case(controller__dead_zone="2"))
    assert _notes(a_case()) == _notes(a_case(controller__dead_zone="0"))
