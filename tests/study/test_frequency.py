"""Frequency responses of cases: of the loop that runs, and of the one that the margins judge."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.study.test_engine_keys import PLANT, a_case
from workbench import study
from workbench.case.case import edit_all, new_case
from workbench.case.files import read_case
from workbench.errors import InputError
from workbench.study import FrequencyResponse

CASES = sorted((Path(__file__).parents[2] / "cases").glob("*.toml"))


def judged_like_its_margins(found: FrequencyResponse, margins: study.LoopFigures) -> None:
    """Other route: the search of the margins."""
    top = margins.margins.max_sensitivity.value
    assert found.open_loop.sensitivity.max() == pytest.approx(top, rel=2e-3)
    crossover = margins.margins.gain_crossover_rad_s.value
    assert crossover is not None
    read = found.at(crossover)
    assert read is not None
    assert read.gain == pytest.approx(1.0, abs=0.05)


@pytest.mark.parametrize("path", CASES, ids=lambda path: path.stem)
def test_a_shipped_case_is_looked_at_as_it_is_judged(path: Path) -> None:
    case = read_case(path).case
    assessment = study.assess(case)
    found = study.frequency_response(case)
    assert found.sampled == (assessment.sampled is not None)
    assert assessment.judged is not None
    judged_like_its_margins(found, assessment.judged)
    at = found.sensitivity_peak_rad_s
    assert at is not None
    peak = found.at(at)
    assert peak is not None
    assert peak.sensitivity == found.open_loop.sensitivity.max()


@pytest.mark.parametrize(
    "changes",
    [
        {"controller__scan": ""},
        {"controller__gain_at_rest": "0.3"},
        {"compensation__model": "1.5 exp(-4 s)/(20 s + 1)"},
        {"inner__gain": "2", "inner__integral": "5 s", "inner__plant": "1/(3 s + 1)"},
        {"inner__gain": "2", "inner__plant": "1/(3 s + 1)", "inner__scan": "0.7 s"},
    ],
    ids=["analogue", "error gain", "compensated", "cascade", "cascade of unequal scans"],
)
def test_whatever_is_judged_is_looked_at_alike(changes: dict[str, str]) -> None:
    case = a_case(**changes)
    assessment = study.assess(case)
    assert assessment.judged is not None
    found = study.frequency_response(case)
    assert found.sampled == (assessment.sampled is not None)
    assert found.sampled_reason == assessment.sampled_reason
    judged_like_its_margins(found, assessment.judged)


@pytest.mark.parametrize("scan", ["1 s", ""])
def test_a_dead_time_inside_a_feedback_is_looked_at_too(scan: str) -> None:
    blocks = "valve: 1/(2 s + 1); process: exp(-6 s)/(40 s + 1); slave around valve to process: 0.3"
    settings = {"controller.gain": "1", "controller.integral": "40 s", "controller.scan": scan}
    case = edit_all(new_case("TIC-1"), {"plant.blocks": blocks, **settings})
    judged = study.assess(case).judged
    assert judged is not None
    judged_like_its_margins(study.frequency_response(case), judged)


def test_without_a_controller_there_is_a_reason() -> None:
    with pytest.raises(InputError, match="no controller"):
        study.frequency_response(edit_all(new_case("TIC-1"), PLANT))


def test_a_trend_is_read_at_the_row_nearest_to_a_time() -> None:
    prediction = study.predict(a_case())
    time = prediction.trend.time
    for wanted in (0.0, 100.4, 100.6, 250.0):
        read = prediction.trend.at(wanted)
        assert read is not None
        # other route: the smallest of all distances
        row = int(np.abs(time - wanted).argmin())
        assert (read.time_s, read.pv) == (time[row], prediction.trend.pv[row])
    for far, end in ((-50.0, 0), (1e9, -1)):
        edge = prediction.trend.at(far)
        assert edge is not None
        assert edge.output == prediction.trend.output[end]
