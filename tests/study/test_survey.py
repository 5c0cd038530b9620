"""A folder of cases: what is wrong with each is found, and one broken file stops nothing."""

from __future__ import annotations

from datetime import UTC, date, datetime
from pathlib import Path
from typing import Final

import pytest

from workbench import study
from workbench.case.case import Case, edit_all, new_case
from workbench.case.files import write_new
from workbench.study.surveying import STATUSES

TODAY: Final = date(2026, 12, 1)
OVEN: Final = {
    "plant": "first-order gain=1.8, time_constant=40 s, dead_time=6 s",
    "plant.dated": "2026-10-01",
    "pv.high": "200",
    "controller.gain": "1.1",
    "controller.integral": "40 s",
    "controller.scan": "1 s",
}


def oven(**changes: str) -> Case:
    keys = OVEN | {key.replace("_", ".", 1): text for key, text in changes.items()}
    return edit_all(new_case("TIC-901"), {key: text for key, text in keys.items() if text})


def entered(case: Case, kind: str = "installed") -> Case:
    now = datetime(2026, 11, 1, 12, tzinfo=UTC)
    return study.record_change(case, who="mk", why="a test", now=now, kind=kind)


def found(case: Case, folder: Path) -> study.Surveyed:
    path = folder / "one.toml"
    write_new(path, case)
    (row,) = study.survey([path], TODAY)
    return row


def test_a_loop_with_nothing_to_tell_is_fine(tmp_path: Path) -> None:
    earlier = entered(oven(controller_gain="0.9"))
    row = found(entered(edit_all(earlier, {"controller.gain": "1.1"})), tmp_path)

    assert (row.status, row.findings, row.stable) == ("fine", (), True)
    assert row.age_days.value == 61.0  # exact: October has 31 days, November 30
    peak = study.assess(oven()).judged
    assert peak is not None
    assert row.max_sensitivity == peak.margins.max_sensitivity


@pytest.mark.parametrize(
    ("changes", "status", "told"),
    [
        ({"controller_gain": "15"}, "unstable", "not stable"),
        ({"controller_gain": "7"}, "fragile", "fragile: Ms"),
        ({"plant_dated": "2025-11-29"}, "stale", "years old"),
        ({"controller_gain": "0.01", "controller_integral": "none"}, "fine", "gain is"),
        ({"controller_integral": "1 h"}, "fine", "integral action is"),
        ({}, "fine", "no way back"),
    ],
)
def test_what_is_wrong_is_found(
    changes: dict[str, str], status: str, told: str, tmp_path: Path
) -> None:
    row = found(oven(**changes), tmp_path)

    assert row.status == status
    assert any(finding.startswith(told) or told in finding for finding in row.findings)


def test_a_vessel_that_is_meant_to_swing_is_not_called_slow(tmp_path: Path) -> None:
    slow = {"plant": "integrating slope=0.001 /s, dead_time=6 s", "controller_gain": "0.01"}
    row = found(oven(**slow, controller_integral="10 h"), tmp_path)

    assert not any("below the smallest" in finding for finding in row.findings)


def test_a_case_that_cannot_be_judged_is_told(tmp_path: Path) -> None:
    row = found(new_case("FIC-1"), tmp_path)

    assert row.status == "unsound"
    assert row.stable is None
    assert "no plant yet" in row.findings


def test_figures_that_no_longer_come_out_are_found(tmp_path: Path) -> None:
    row = found(edit_all(entered(oven()), {"plant.gain": "2.4"}), tmp_path)

    assert row.status == "unsound"
    assert any("max_sensitivity was" in finding for finding in row.findings)


def test_the_worst_come_first_and_a_broken_file_stops_nothing(tmp_path: Path) -> None:
    write_new(tmp_path / "a_fine.toml", oven())
    write_new(tmp_path / "b_away.toml", oven(controller_gain="15"))
    write_new(tmp_path / "c_near.toml", oven(controller_gain="6"))
    write_new(tmp_path / "d_near.toml", oven(controller_gain="7"))
    (tmp_path / "e_broken.toml").write_text("format = 1\n[loop\n")
    (tmp_path / "f_junk.toml").write_bytes(b"\xff\x00")

    paths = sorted(tmp_path.glob("*.toml"))
    rows = study.survey(paths, TODAY, workers=1)

    assert [Path(row.path).name[0] for row in rows] == ["b", "d", "c", "e", "f", "a"]
    assert sorted(rows, key=lambda row: STATUSES.index(row.status)) == list(rows)
    assert rows == study.survey(paths, TODAY, workers=2), "the processes change nothing"


def test_progress_is_told(tmp_path: Path) -> None:
    write_new(tmp_path / "a.toml", oven())
    write_new(tmp_path / "b.toml", oven())
    told: list[int] = []

    study.survey(sorted(tmp_path.glob("*.toml")), TODAY, tell=told.append)

    assert told == [0, 1]
