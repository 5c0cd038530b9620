"""The shipped loops from file to figures: sound, stable, and kept byte for byte."""

from __future__ import annotations

import shutil
from functools import cache
from pathlib import Path
from typing import Final

import pytest

from workbench import study
from workbench.case.case import edit, show
from workbench.case.files import CaseFile, read_case, save_case
from workbench.case.tables import TABLES
from workbench.study.proposals import rule_settings
from workbench.study.wish import Wish

CASES: Final = sorted((Path(__file__).parents[2] / "cases").glob("*.toml"))
EVERY_CASE: Final = pytest.mark.parametrize("path", CASES, ids=lambda path: path.stem)


@cache
def case_file(path: Path) -> CaseFile:
    return read_case(path)


@EVERY_CASE
def test_a_shipped_case_is_sound_and_its_loop_is_stable(path: Path) -> None:
    case = case_file(path).case
    now = study.evaluate(case)

    assert study.check_case(path).faults == ()
    assert now.assessment.judged is not None
    assert now.assessment.judged.margins.stable
    assert now.prediction is not None
    assert now.prediction.measures.load_iae.value is not None


@EVERY_CASE
def test_a_shipped_case_is_written_back_byte_for_byte(path: Path, tmp_path: Path) -> None:
    place = tmp_path / path.name
    shutil.copy(path, place)
    file = read_case(place)

    assert save_case(file, file.case).raw == path.read_bytes()
    other = save_case(file, edit(file.case, "loop.area", "elsewhere"))
    back = save_case(other, edit(other.case, "loop.area", show(file.case, "loop.area")))

    assert other.raw != back.raw
    assert back.raw == place.read_bytes() == path.read_bytes()


def test_the_shipped_cases_have_every_table_form_and_kind_of_entry_between_them() -> None:
    texts = "\n".join(path.read_text("utf-8") for path in CASES)
    cases = [case_file(path).case for path in CASES]

    assert [name for name in TABLES if f"[{name}]" not in texts] == []
    assert {case.controller.form for case in cases if case.controller} == {
        "ideal",
        "series",
        "parallel",
    }
    kinds = {entry.kind for case in cases for entry in case.history}
    assert kinds == {"proposed", "installed", "withdrawn", "observed"}
    assert any(case.scenario.load_file for case in cases)
    assert any(case.loop.safety_related for case in cases)


def test_rules_without_integral_action_are_passed_over_where_only_increments_are_computed() -> None:
    """Exact: an incremental controller without integral action holds no value at all."""
    case = next(file.case for file in map(case_file, CASES) if file.case.loop.tag == "AIC-410")
    assert case.controller is not None
    assert case.controller.execution == "incremental"

    settings = rule_settings(case, Wish())
    assert settings
    assert all(each.integral is not None for each in settings)
