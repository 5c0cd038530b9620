"""Compensation, feedforward and inner loop in the case: there only where they are asked for."""

from __future__ import annotations

from pathlib import Path

import pytest

from workbench.case.case import Case, differences, edit_all, new_case, show
from workbench.case.files import read_case, write_new
from workbench.case.structures import CompensationTable, FeedforwardTable, InnerTable
from workbench.errors import InputError

EVERYTHING = {
    "compensation.model": "1.8 exp(-0.1 s)/(0.7 s + 1)",
    "compensation.time_unit": "min",
    "feedforward.gain": "-0.8",
    "feedforward.lead": "40 s",
    "feedforward.lag": "10 s",
    "feedforward.dead_time": "3 s",
    "inner.plant": "0.9 exp(-1 s)/(4 s + 1)",
    "inner.mode": "automatic",
    "inner.gain": "1.5",
    "inner.integral": "12 repeats/min",
    "inner.scan": "0.5 s",
    "inner.max": "80",
    "inner.rate": "5 /s",
}


def a_case(**changes: str) -> Case:
    keys = {"plant.formula": "1.8 exp(-6 s)/(40 s + 1)", "controller.gain": "1.1"}
    return edit_all(
        new_case("TIC-901"), keys | {k.replace("__", "."): v for k, v in changes.items()}
    )


def test_a_new_case_has_none_of_them() -> None:
    case = new_case("TIC-901")
    tables = (case.compensation, case.feedforward, case.inner)
    assert tables == (CompensationTable(), FeedforwardTable(), InnerTable())
    assert not any(table.is_there for table in tables)


def test_everything_is_written_and_read_again(tmp_path: Path) -> None:
    case = edit_all(a_case(), EVERYTHING)
    write_new(tmp_path / "a.toml", case)
    text = (tmp_path / "a.toml").read_text()
    assert read_case(tmp_path / "a.toml").case == case
    for line in ("[compensation]", "[feedforward]", "[inner]", 'mode = "automatic"'):
        assert line in text
    assert "windup" not in text.partition("[inner]")[2]
    assert {key: show(case, key) for key in EVERYTHING} == EVERYTHING


def test_a_case_without_them_has_no_table_for_them(tmp_path: Path) -> None:
    write_new(tmp_path / "a.toml", a_case())
    text = (tmp_path / "a.toml").read_text()
    assert not any(name in text for name in ("compensation", "feedforward", "inner"))


def test_taking_the_model_out_takes_the_compensation_out() -> None:
    case = edit_all(a_case(), EVERYTHING)
    without = edit_all(case, {"compensation.model": "", "compensation.time_unit": ""})
    assert without.compensation == CompensationTable()
    assert [key for key, _, _ in differences(case, without)] == [
        "compensation.model",
        "compensation.time_unit",
    ]


def test_the_formulas_are_in_their_own_unit_of_time() -> None:
    case = edit_all(a_case(), EVERYTHING)
    # exact: 0.1 min and 1 s
    assert case.compensation.transfer().dead_time == pytest.approx(6.0)
    assert case.inner.transfer().dead_time == 1.0
    found = case.feedforward.feedforward()
    assert (found.gain, found.lead, found.lag, found.dead_time) == (-0.8, 40.0, 10.0, 3.0)


@pytest.mark.parametrize(
    ("changes", "key", "words"),
    [
        ({"compensation__model": "1/(2s"}, "compensation.model", "bracket"),
        ({"compensation__time_unit": "min"}, "compensation.time_unit", "give model too"),
        ({"feedforward__lag": "3 s"}, "feedforward.lag", "give gain too"),
        ({"feedforward__gain": "1", "feedforward__lead": "3 s"}, "feedforward.lead", "give a lag"),
        ({"inner__mode": "manual"}, "inner.mode", "give plant too"),
        ({"inner__plant": "1/(2 s + 1)", "inner__gain": "0"}, "inner.gain", "positive gain"),
        ({"inner__plant": "1/(2 s", "inner__gain": "1"}, "inner.plant", "bracket"),
        (
            {"inner__plant": "1/(2 s + 1)", "inner__gain": "1", "inner__integral": "2 1/s"},
            "inner.integral",
            "ideal form",
        ),
        (
            {"inner__plant": "1/(2 s + 1)", "inner__gain": "1", "inner__max": "40"},
            "inner.start",
            "outside the limits",
        ),
        (
            {"inner__plant": "1/(2 s + 1)", "inner__gain": "1", "inner__min": "-5"},
            "inner.min",
            "give a value inside",
        ),
        (
            {"inner__plant": "1", "inner__gain": "1", "inner__min": "60", "inner__max": "55"},
            "inner.max",
            "larger max",
        ),
        (
            {"inner__plant": "1", "inner__gain": "1", "inner__low": "100"},
            "inner.high",
            "above low",
        ),
    ],
)
def test_what_does_not_go_together_is_refused(
    changes: dict[str, str], key: str, words: str
) -> None:
    with pytest.raises(InputError) as refused:
        a_case(**changes)
    told = [fault for fault in refused.value.problems if fault.key == key]
    assert told, refused.value
    assert words in str(told[0])
