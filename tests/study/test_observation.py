"""What a plant did is told from what was predicted, and the nearest explanation is named."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest

from tests import make_runs
from workbench.case.case import Case, edit_all
from workbench.case.files import parse_case, read_case
from workbench.case.writing import format_case
from workbench.errors import InputError
from workbench.records.record import read_record
from workbench.study import Observation, observe, with_observation

CASES = Path(__file__).resolve().parents[2] / "cases"
RUN = CASES / "FIC-204_run.csv"


def wash(**changes: str) -> Case:
    """The wash-water loop with nothing of its own scenario, and some keys changed."""
    clean = {"scenario.setpoint_step": "", "scenario.load_step": "", "scenario.load_at": ""}
    clean |= {"scenario.setpoint_at": "", "scenario.until": ""}
    keys = {key.replace("__", "."): value for key, value in changes.items()}
    return edit_all(read_case(CASES / "FIC-204.toml").case, clean | keys)


def told(**changes: str) -> Observation:
    return observe(read_record(RUN), wash(**changes))


def test_a_plant_as_it_was_fitted_does_what_was_predicted() -> None:
    found = told()

    assert found.verdict == "as predicted"
    assert found.agreement_percent.value is not None
    assert found.agreement_percent.value > 85.0
    assert found.observed is not None
    assert found.predicted is not None
    assert found.observed.iae == pytest.approx(found.predicted.iae, rel=0.1)


@pytest.mark.parametrize("gain", [0.7, 0.2])
def test_a_gain_that_is_not_the_plants_is_named(gain: float) -> None:
    """Exact: the record was made with a gain of 0.42."""
    found = told(plant__gain=str(gain))

    assert found.verdict == "different"
    assert found.explanations[0].what == "gain"
    factor = float(found.explanations[0].words.split()[0])
    assert factor * gain == pytest.approx(0.42, rel=0.08)


def test_a_dead_time_that_is_not_the_plants_is_named(tmp_path: Path) -> None:
    """The same loop, tuned tightly enough for its dead time to show."""
    truth = make_runs.Truth(gain=1.6, integral_time=4.0, dead_time=1.9)
    (tmp_path / "late.csv").write_text(make_runs.run_record(truth))
    case = wash(controller__proportional_band="62.5", controller__integral="15 repeats/min")
    found = observe(read_record(tmp_path / "late.csv"), case)

    assert found.verdict == "different"
    assert found.explanations[0].what == "dead time"


def test_an_upset_that_was_not_known_is_named(tmp_path: Path) -> None:
    (tmp_path / "upset.csv").write_text(make_runs.run_record(make_runs.Truth(upset=(200.0, -9.0))))
    found = observe(read_record(tmp_path / "upset.csv"), wash())
    known = observe(
        read_record(tmp_path / "upset.csv"),
        wash(scenario__load_step="-9", scenario__load_at="200 s"),
    )

    assert found.verdict == "different"
    assert found.explanations[0].what == "upset"
    assert "-9" in found.explanations[0].words
    assert known.verdict == "as predicted"


def test_a_valve_that_sticks_is_named_by_its_swing() -> None:
    found = observe(read_record(CASES / "FIC-204_swing.csv"), wash())

    assert found.verdict == "different"
    assert any("best explained by the valve" in reason for reason in found.reasons)
    assert found.observed is not None
    assert found.observed.period_s.value is not None


def test_a_record_in_which_nothing_happened_cannot_tell(tmp_path: Path) -> None:
    rows = RUN.read_text().splitlines()
    (tmp_path / "still.csv").write_text("\n".join(rows[:110]) + "\n")
    manual = RUN.read_text().replace("AUTO", "MAN")
    (tmp_path / "manual.csv").write_text(manual)

    still = observe(read_record(tmp_path / "still.csv"), wash())
    assert still.verdict == "cannot tell"
    assert "SP never moved" in still.reasons[0]
    assert observe(read_record(tmp_path / "manual.csv"), wash()).verdict == "cannot tell"
    assert observe(read_record(CASES / "FIC-204_bump.csv"), wash()).verdict == "cannot tell"


def test_an_observed_entry_is_kept_and_read_again() -> None:
    now = datetime(2026, 12, 1, 9, 0, tzinfo=UTC)
    case = wash()
    kept = with_observation(case, told(), record="FIC-204_run.csv", who="mk", now=now)
    entry = parse_case(format_case(kept)).history[-1]

    assert entry.kind == "observed"
    assert entry.controller is None
    assert entry.measured_iae == pytest.approx(191.7, rel=0.01)
    assert "as predicted" in entry.why
    assert kept.history[:-1] == case.history
    with pytest.raises(InputError, match="blank"):
        with_observation(case, told(), record="FIC-204_run.csv", who=" ", now=now)
