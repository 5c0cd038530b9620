"""The retune sheet: the right old settings, the stage half way, and a page that can be printed."""

from __future__ import annotations

import math
from datetime import UTC, datetime
from typing import Final

import pytest

from workbench import report, study
from workbench.case.case import Case, edit_all, new_case
from workbench.errors import InputError

NOW: Final = datetime(2026, 11, 1, 12, tzinfo=UTC)
OVEN: Final = {
    "plant": "first-order gain=1.8, time_constant=40 s, dead_time=6 s",
    "pv.unit": "degC",
    "controller.gain": "0.4",
    "controller.integral": "1 min/repeat",
}


def changed(case: Case, **keys: str) -> Case:
    return edit_all(case, {f"controller.{key}": text for key, text in keys.items()})


def entered(case: Case, kind: str = "installed", reference: str = "") -> Case:
    return study.record_change(
        case, who="mk", why="a test", now=NOW, kind=kind, reference=reference
    )


def oven(**keys: str) -> Case:
    return edit_all(new_case("TIC-901"), OVEN | keys)


def sheet(case: Case, *, markdown: bool = False) -> str:
    found = study.retune(case)
    return report.sheet_text(
        found, study.units_of(case), ("a row",), file="TIC-901.toml", markdown=markdown
    )


def test_the_present_settings_are_the_newest_that_were_installed() -> None:
    case = entered(oven())
    case = entered(changed(case, gain="0.6"))
    case = entered(changed(case, gain="0.8"), "proposed")
    case = entered(changed(case, gain="1"), "proposed")

    found = study.retune(case)

    assert found.old is case.history[1]
    assert [stage.controller.gain for stage in found.stages] == [0.6, 1.0]


def test_saved_settings_are_compared_with_those_before_them() -> None:
    found = study.retune(entered(changed(entered(oven()), gain="0.6")))

    assert [stage.controller.gain for stage in found.stages] == [0.4, 0.6]


def test_half_way_is_the_geometric_mean_in_the_new_units() -> None:
    case = changed(entered(oven()), gain="1.6", integral="4 repeats/min")

    present, middle, new = study.retune(case).stages

    assert [stage.name for stage in (present, middle, new)] == ["present", "half way", "new"]
    # exact: sqrt(0.4 * 1.6); 60 s and 15 s have the mean 30 s, which is 2 repeats a minute
    assert middle.controller.gain == pytest.approx(0.8)
    assert str(middle.controller.integral) == "2 repeats/min"


@pytest.mark.parametrize(("gain", "stages"), [("0.79", 2), ("0.81", 3), ("0.21", 2), ("0.19", 3)])
def test_a_stage_is_put_between_where_the_gain_moves_by_more_than_two(
    gain: str, stages: int
) -> None:
    assert len(study.retune(changed(entered(oven()), gain=gain)).stages) == stages


def test_a_band_goes_half_way_as_a_band() -> None:
    case = changed(entered(oven()), proportional_band="25")
    middle = study.retune(case).stages[1].controller

    # exact: gains 0.4 and 4, so bands 250 % and 25 %
    assert middle.gain is None
    assert middle.proportional_band == pytest.approx(math.sqrt(250 * 25), rel=2e-3)


def test_without_a_record_the_sheet_has_room_for_what_is_there() -> None:
    words = sheet(oven())

    assert "No settings are on record" in words
    assert "gain ________" in words


@pytest.mark.parametrize("markdown", [False, True])
def test_the_page_can_be_printed(markdown: bool) -> None:
    words = sheet(changed(entered(oven()), gain="1"), markdown=markdown)

    for part in ("degC", "1 min/repeat", "management of change", "How to go back", "approved by"):
        assert part in words
    assert all(ord(character) < 0x7F for character in words)
    assert max(len(line) for line in words.split("\n")) <= 80
    assert words.count("\n") < 80
    assert words.startswith("# ") is markdown


def test_words_of_the_file_cannot_write_markdown_or_move_the_cursor() -> None:
    case = edit_all(oven(), {"loop.tag": "T*1*\x1b[2J`x`", "loop.notes": "```\n# loud\x9b1m\u202e"})

    words = sheet(case, markdown=True)

    assert words.split("\n")[0].startswith("# Retune sheet  T\\*1\\*")
    # The blocks are fenced by more marks than any line of the file can begin with.
    assert {line for line in words.split("\n") if line.startswith("```")} == {"````text", "````"}
    assert not any((ord(c) < 0x20 and c != "\n") or 0x7F <= ord(c) < 0xA0 for c in words)
    assert "\u202e" not in words


def test_a_safety_related_loop_is_installed_only_with_a_reference() -> None:
    case = oven(**{"loop.safety_related": "true"})

    with pytest.raises(InputError, match="reference: is blank"):
        entered(case)
    assert entered(case, "proposed").history[0].reference == ""
    assert entered(case, reference="MOC 26-114").history[0].reference == "MOC 26-114"
    assert "SAFETY" in sheet(case)
