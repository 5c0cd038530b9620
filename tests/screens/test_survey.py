"""The list and the survey: where to begin, and which loop is worst."""

from __future__ import annotations

import threading
from collections.abc import Callable, Sequence
from datetime import datetime
from pathlib import Path

import pytest

from tests.screens.conftest import CASE, page_of, press, run, running, text_of, type_in
from tests.screens.test_pages import until
from workbench import study
from workbench.case.files import read_case
from workbench.screens.main import MainPage
from workbench.screens.start import StartPage
from workbench.screens.survey import SurveyDone, SurveyPage
from workbench.study import Surveyed


def test_the_worst_loop_stands_first_and_is_opened(folder: Path) -> None:
    (folder / "wild.toml").write_text(
        CASE.replace("TIC-307", "TIC-999").replace("gain = 1.1", "gain = 400.0", 1)
    )

    async def story() -> None:
        async with running(Path()) as pilot:
            await press(pilot, "v")
            shown = text_of(pilot)
            assert shown.index("TIC-999") < shown.index("TIC-307")
            assert "unstable" in shown
            assert "not stable:" in shown
            assert "wild.toml" in shown
            await press(pilot, "enter")
            assert "TIC-999" in text_of(pilot)
            await press(pilot, "q")
            page_of(pilot, SurveyPage)
            await press(pilot, "q")
            page_of(pilot, StartPage)

    run(story())


def test_a_survey_shows_how_far_it_is_and_keeps_what_is_done_when_stopped(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows = study.survey([folder / "tic-307.toml"], datetime.now().date())
    begun = threading.Event()

    def slow(
        paths: Sequence[Path],
        today: object,
        *,
        tell: Callable[[int], None],
        should_stop: Callable[[], bool],
    ) -> tuple[Surveyed, ...]:
        tell(1)
        begun.set()
        while not should_stop():
            threading.Event().wait(0.01)
        return rows

    (folder / "b.toml").write_text(CASE)

    async def story() -> None:
        async with running(Path()) as pilot:
            monkeypatch.setattr(study, "survey", slow)
            monkeypatch.setattr("workbench.screens.waiting.EVERY_S", 0.05)
            await pilot.press("v")
            await until(pilot, lambda: "1 of 2, 0 s; Esc stops" in text_of(pilot))
            # The screen is live meanwhile.
            await pilot.press("question_mark")
            await pilot.pause()
            assert "This page" in text_of(pilot)
            await pilot.press("escape", "escape")
            await until(pilot, lambda: "stopped after 1 of 2 loops" in text_of(pilot))
            page = page_of(pilot, SurveyPage)
            assert page.table.chosen == rows[0]
            page.on_survey_done(SurveyDone(page._ticket - 1, (), 0, "of an older folder"))
            assert page.table.rows == rows

    run(story())


def test_another_folder_is_surveyed_and_a_wrong_one_named(folder: Path) -> None:
    (folder / "other").mkdir()
    (folder / "other" / "x.toml").write_text(CASE.replace("TIC-307", "TIC-1"))

    async def story() -> None:
        async with running(Path()) as pilot:
            await press(pilot, "v")
            assert "2 loops" in text_of(pilot)
            await press(pilot, "t")
            await type_in(pilot, "other")
            await press(pilot, "enter")
            assert "1 loop: " in text_of(pilot)
            assert "TIC-1 " in text_of(pilot)
            await press(pilot, "t")
            await type_in(pilot, "nowhere")
            await press(pilot, "enter")
            assert "nowhere: No such file or directory" in text_of(pilot)
            await press(pilot, "enter")
            assert "no loop is judged yet" in text_of(pilot)

    run(story())


def test_a_new_loop_is_made_from_the_list_and_its_plant_typed(folder: Path) -> None:
    async def story() -> None:
        async with running(Path()) as pilot:
            await press(pilot, "n")
            await type_in(pilot, "a/b")
            await press(pilot, "enter")
            assert "cannot be a file's name" in text_of(pilot)
            await press(pilot, "ctrl+u")
            await type_in(pilot, "FIC-9")
            await press(pilot, "enter")
            page_of(pilot, MainPage)
            await press(pilot, "1", "down", "enter")
            await type_in(pilot, "1.8 exp(-6 s)/(40 s + 1)")
            await press(pilot, "enter", "2", "down", "enter")
            await type_in(pilot, "1.2")
            await press(pilot, "enter")
            assert "stable (analogue loop)" in text_of(pilot)
            await press(pilot, "q", "d")
            assert "FIC-9.toml" in text_of(pilot)
            assert "unsaved work" in text_of(pilot)

    run(story())
    assert read_case("FIC-9.toml").case.loop.tag == "FIC-9"


def test_the_demo_is_written_said_to_be_invented_and_its_plant_is_found(folder: Path) -> None:
    async def story() -> None:
        async with running(Path()) as pilot:
            await press(pilot, "d")
            assert "an invented loop of the Port" in text_of(pilot)
            await press(pilot, "d")
            assert "there is already such a file" in text_of(pilot)

    run(story())
    assert study.check_case("TIC-151.toml").ok
    assert "Invented" in read_case("TIC-151.toml").case.loop.notes
    found = study.fit_record("TIC-151_bump.csv", shapes=("first-order",)).candidates[0]
    # exact: the plant that the record is made of, within its noise
    assert found.gain == pytest.approx(0.8, rel=0.03)
    assert found.time_constants_s[0] == pytest.approx(95.0, rel=0.05)
    assert found.dead_time_s == pytest.approx(14.0, abs=2.0)
