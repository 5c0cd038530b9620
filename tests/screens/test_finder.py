"""The finder: what plain words lead to, and that it does what is chosen."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.screens.conftest import page_of, press, run, running, settle, text_of, type_in
from tests.screens.test_pages import until
from workbench import study
from workbench.screens.finder import FinderPage, ranked
from workbench.screens.main import MainPage
from workbench.screens.page import Offer
from workbench.screens.proposals import ProposalsPage
from workbench.screens.record import RecordPage
from workbench.screens.saving import SavePage
from workbench.screens.start import StartPage
from workbench.screens.survey import SurveyPage
from workbench.screens.work import Work

SAID = {
    "how do I print this": "w",
    "reset": "2",
    "rate": "2",
    "disturbance": "6",
    "autotune": "o",
    "identify the model": "r",
    "robustness": "t",
    "clipboard": "c",
    "revert": "u",
    "make it bigger": "z",
    "keep the file": "s",
    "compare": "p",
    "leave out what is shown": "x",
    "exit": "q",
    "step test": "r",
}
"""What an engineer says, and the key of what is meant (common words of the trade)."""


def test_words_of_the_trade_find_the_action(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "slash")
            offered = page_of(pilot, FinderPage).offered
            for said, key in SAID.items():
                assert ranked(offered, said)[0].key == key, said
            assert ranked(offered, "qwertz") == []

    run(story())


def test_every_action_is_found_by_its_own_words(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "slash")
            offered = page_of(pilot, FinderPage).offered
            words = {offer.words for offer in offered}
            kinds = (MainPage, RecordPage, ProposalsPage)
            commands = [each for kind in kinds for each in kind.commands]
            for command in commands:
                if command.help and command.action not in ("back", "help"):
                    assert command.help in words
                    first = ranked(offered, command.help)[0]
                    assert first.words == command.help

    run(story())


def test_a_setting_is_found_by_its_other_name_and_edited_at_once(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "slash")
            await type_in(pilot, "dead time")
            await press(pilot, "enter")
            page = page_of(pilot, MainPage)
            assert page.editor.display
            await type_in(pilot, "9 s")
            await press(pilot, "enter")
            assert work.show("plant.dead_time") == "9 s"

    run(story())


def test_an_action_of_another_page_is_done_there_and_back(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(study, "propose", lambda *_: ())

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "ctrl+f")
            await type_in(pilot, "wishes")
            await press(pilot, "enter")
            page = page_of(pilot, ProposalsPage)
            await until(pilot, lambda: page.wishes.display)
            await press(pilot, "slash")
            await type_in(pilot, "save with a reason")
            await press(pilot, "enter")
            page_of(pilot, SavePage)
            await press(pilot, "ctrl+f")
            page_of(pilot, FinderPage)
            await press(pilot, "escape", "escape")
            page_of(pilot, MainPage)

    run(story())


def test_the_survey_is_found_from_the_list(folder: Path) -> None:
    async def story() -> None:
        async with running(Path()) as pilot:
            page_of(pilot, StartPage)
            await press(pilot, "slash")
            await type_in(pilot, "which loop is worst")
            await press(pilot, "enter")
            await settle(pilot)
            assert "1 loop: " in text_of(pilot)
            page_of(pilot, SurveyPage)

    run(story())


@pytest.mark.parametrize("typed", ["", "  ", "??", "\N{SNOWMAN}"])
def test_words_that_say_nothing_end_nothing(typed: str) -> None:
    offer = Offer("save", "s", print)
    assert ranked([offer], typed) in ([], [offer])
