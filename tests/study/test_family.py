"""Families of plants: what they are made of, and each figure against the loop taken by itself."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from tests.model.spreads import exact
from tests.records.making import bump, lag, ramp, stamps
from workbench import study
from workbench.case.case import Case, edit_all, new_case
from workbench.case.files import read_case
from workbench.errors import InputError
from workbench.model.plant import FirstOrder, Integrating
from workbench.records.candidate import Candidate
from workbench.sim.loop import simulate
from workbench.sim.metrics import measure
from workbench.study.loop import loop_of


def a_case(**changes: str) -> Case:
    """A dryer with a calm PI controller; keys with `__` for the dot."""
    given = {
        "plant": "1.8 exp(-6 s)/(40 s + 1)",
        "controller.gain": "1.1",
        "controller.integral": "32 s",
        "controller.scan": "1 s",
        **{key.replace("__", "."): value for key, value in changes.items()},
    }
    return edit_all(new_case("TIC-401"), given)


def test_a_case_without_tolerances_has_no_family() -> None:
    assert study.family_figures(a_case()) is None
    assert [member.name for member in study.members(a_case())] == ["nominal"]


def test_a_family_is_centres_corners_and_what_is_drawn_between() -> None:
    case = a_case(family__gain="30", family__dead_time="20", family__drawn="10")
    plants = study.members(case)

    # exact: 1 nominal, 2^2 corners, 10 drawn
    assert len(plants) == 15
    gains = [member.plant.gain().value or 0.0 for member in plants]
    assert sorted(gains[1:5]) == pytest.approx([1.26, 1.26, 2.34, 2.34])
    assert sorted({round(member.plant.dead_time, 9) for member in plants[1:5]}) == [4.8, 7.2]
    assert all(1.2599 <= gain <= 2.3401 for gain in gains)
    assert [m.name for m in study.members(case)] == [m.name for m in plants]


def test_operating_points_and_further_plants_are_centres_too() -> None:
    case = a_case(
        family__points="winter: gain=0.5, lag=2; summer: dead_time=1.5",
        family__plants="second test: first-order gain=2.1, time_constant=44 s, dead_time=7 s",
    )
    plants = {member.name: member.plant for member in study.members(case)}

    assert list(plants) == ["nominal", "winter", "summer", "second test"]
    # exact: 1.8 x 0.5, 40 s x 2, 6 s x 1.5
    assert plants["winter"].gain().value == pytest.approx(0.9)
    assert plants["winter"].poles()[0].real == pytest.approx(-1.0 / 80.0)
    assert plants["summer"].dead_time == pytest.approx(9.0)
    assert plants["second test"].gain().value == pytest.approx(2.1)

    wide = study.members(edit_all(case, {"family.gain": "10", "family.drawn": "0"}))
    assert len(wide) == 4 + 4 * 2  # exact: two corners round each centre


@pytest.mark.parametrize("scan", ["1 s", "none"])
def test_every_figure_is_that_of_the_loop_taken_by_itself(scan: str) -> None:
    case = a_case(
        controller__scan=scan, family__gain="30", family__dead_time="20", family__drawn="5"
    )
    prediction = study.predict(case)
    found = study.family_figures(case, prediction.events)
    assert found is not None

    # other route: each loop through the exact margins and through the engine for one loop
    margins, areas, peaks = [], [], []
    for member in study.members(case):
        alone = loop_of(case, member.plant)
        trace = simulate(alone, prediction.events)
        measures = measure(trace, prediction.events)
        margins.append(exact(alone).max_sensitivity.value)
        areas.append(measures.load_iae.value or 0.0)
        peaks.append(measures.load_peak_deviation.value or 0.0)
    assert found.plants == len(margins) == 10
    assert found.stable_percent == 100.0
    for name, values in (("max_sensitivity", margins), ("load_iae", areas)):
        ordered = sorted(float(value or 0.0) for value in values)
        among = found.figures[name]
        assert among.nominal.value == pytest.approx(values[0], rel=2e-3)
        # 95 % of ten plants is all ten of them
        assert among.worst.value == pytest.approx(ordered[-1], rel=2e-3)
        assert among.at_95.value == pytest.approx(ordered[-1], rel=2e-3)
    assert found.figures["load_peak_deviation"].worst.value == pytest.approx(max(peaks), rel=2e-3)


def test_of_a_margin_the_smallest_is_the_worst() -> None:
    found = study.family_figures(a_case(family__gain="30"))
    assert found is not None
    gain = found.figures["gain_margin"]
    nominal, worst = gain.nominal.value, gain.worst.value
    assert nominal is not None
    # exact: with 1.3 times the gain the margin is 1/1.3 of what it was
    assert worst == pytest.approx(nominal / 1.3, rel=1e-6)


def test_the_share_that_is_stable_counts_plants() -> None:
    # exact: two of four plants have a gain far above the gain margin of 5.6
    case = a_case(family__points="a: gain=20; b: gain=30; c: gain=0.5")
    found = study.family_figures(case)
    assert found is not None
    assert (found.plants, found.stable_percent) == (4, 50.0)
    assert found.worst_plant in ("a", "b")
    worst = found.figures["max_sensitivity"].worst
    assert (worst.value, worst.reason) == (None, "the loop is not stable")
    (caution,) = study.family_cautions(found)
    assert "NOT STABLE for 50 % of the family" in caution.text
    assert study.evaluate(case).cautions[0] == caution


def test_a_proposal_is_judged_over_the_family() -> None:
    case = a_case(family__gain="30", family__dead_time="20", family__drawn="0")
    row = study.propose(case, study.Wish(method="simc-pi"))[-1]
    assert row.family is not None
    nominal = row.family.figures["max_sensitivity"].nominal.value
    assert nominal == pytest.approx(row.max_sensitivity.value, rel=1e-3)
    assert (row.family.figures["max_sensitivity"].worst.value or 0.0) > (nominal or 0.0)


@pytest.mark.parametrize(
    ("key", "typed", "words"),
    [
        ("family.gain", "100", "100 is outside what is accepted"),
        ("family.points", "winter gain=0.8", "has no name"),
        ("family.points", "winter: gain=x", "winter: 'x' is not a ratio from 0.001 to 1000"),
        ("family.points", "winter: pressure=2", "winter: 'pressure=2' is no ratio"),
        ("family.points", "a: gain=1; a: gain=2", "there are two named 'a'"),
        ("family.plants", "b: 1/(s", "b: "),
        ("family.drawn", "2.5", "2.5 is not a whole number"),
    ],
)
def test_what_is_no_family_is_refused_by_its_key(key: str, typed: str, words: str) -> None:
    with pytest.raises(InputError) as caught:
        edit_all(a_case(), {key: typed})
    (fault,) = caught.value.problems
    assert fault.key == key
    assert words in fault.what
    assert fault.mend


def test_a_family_is_kept_in_the_file(tmp_path: Path) -> None:
    from workbench.case.writing import format_case

    case = a_case(family__lag="15", family__points="winter: gain=0.8, lag=1.2")
    path = tmp_path / "TIC-401.toml"
    path.write_text(format_case(case), encoding="utf-8")
    assert read_case(path).case.family == case.family


# --- from a fit ----------------------------------------------------------------------------------


def _candidate(shape: str) -> Candidate:
    """As a fit of a made record hands it on, its gain known to a few percent."""
    answer = lag(2.0, 40.0) if shape == "first-order" else ramp(0.02)
    made = bump(stamps(300, 3.0), answer, 6.0, noise=1.0)
    best = study.fit_plants(made, shapes=(shape,), noise_model="white").best
    assert best is not None
    return best


def test_plants_are_drawn_as_uncertain_as_the_fit() -> None:
    fit = _candidate("first-order")
    plants = study.drawn_plants(fit, 2000)
    drawn = [plant for plant in plants if isinstance(plant, FirstOrder)]
    assert len(drawn) == 2000
    gains = np.array([plant.gain for plant in drawn])
    late = np.array([plant.dead_time.seconds for plant in drawn])
    for values, key in ((gains, "gain"), (late, "dead_time_s")):
        low, high = (float(end) for end in np.ravel(np.array(fit.interval_95[key])))
        # exact: 2.5 % on each side; 2000 draws know it within 1 %
        assert float(np.mean(values < low)) == pytest.approx(0.025, abs=0.012)
        assert float(np.mean(values > high)) == pytest.approx(0.025, abs=0.012)
    assert study.drawn_plants(fit, 3) == plants[:3]


def test_plants_drawn_from_a_fit_become_the_family() -> None:
    case = study.with_family(a_case(), study.drawn_plants(_candidate("first-order"), 20))
    found = study.family_figures(case)
    assert found is not None
    assert found.plants == 21
    assert math.isfinite(found.figures["max_sensitivity"].worst.value or math.inf)
    level = study.drawn_plants(_candidate("integrating"), 5)
    assert all(isinstance(plant, Integrating) for plant in level)
