"""The main page: settings are edited and nudged, and the answers follow."""

from __future__ import annotations

import asyncio
import threading
from pathlib import Path

import pytest

from tests.screens.conftest import page_of, press, run, running, settle, text_of, type_in
from workbench import study
from workbench.case.case import Case
from workbench.errors import problem
from workbench.screens.main import PANELS, CaseChanged, Evaluated, MainPage
from workbench.screens.work import Work
from workbench.study import Evaluation


def test_the_first_screen_holds_the_settings_the_trend_and_the_figures(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            shown = text_of(pilot)
            for words in ("TIC-307", "1 Plant", "2 Controller", "3 Trend", "4 Figures", "saved"):
                assert words in shown
            for words in ("1.6 degC/%", "0.55 min/repeat", "stable (sampled loop)", "PV degC"):
                assert words in shown
            assert work.pinned is work.evaluation

    run(story())


def test_enter_edits_a_setting_and_the_answers_follow_at_once(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "enter")
            shown = text_of(pilot)
            assert "gain: 1.1" in shown
            assert "controller gain, percent OP per percent of PV span [%/%]" in shown
            await type_in(pilot, "2.5")
            await press(pilot, "enter")
            assert work.case.controller is not None
            assert work.case.controller.gain == 2.5
            assert work.evaluation is not None
            assert work.evaluation.case is work.case
            shown = text_of(pilot)
            assert "*2.5" in shown
            assert "1 not saved" in shown
            assert "pinned" in shown

    run(story())


def test_a_refused_entry_says_why_beside_it_and_stays_open(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "enter")
            await type_in(pilot, "-3")
            await press(pilot, "enter")
            shown = text_of(pilot)
            assert "-3 is outside what is accepted; give a number at least 0" in shown
            assert page_of(pilot, MainPage).editor.display
            await press(pilot, "tab", "f2", "escape")
            assert not page_of(pilot, MainPage).editor.display
            assert not work.unsaved

    run(story())


def test_commands_are_text_while_something_is_typed(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "7", "down", "enter", "q", "space", "5", "plus", "z", "enter")
            assert work.case.loop.service == "q 5+z"

    run(story())


def test_an_empty_entry_leaves_an_optional_setting_out(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, *["down"] * 9, "enter", "ctrl+u", "enter")
            assert work.case.controller is not None
            assert work.case.controller.scan is None
            assert "stable (analogue loop)" in text_of(pilot)

    run(story())


def test_nudges_go_by_two_and_by_twenty_percent_and_round_to_four_digits(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            page = page_of(pilot, MainPage)
            await press(pilot, "down")
            seen = []
            for key in ("plus", "greater_than_sign", "less_than_sign", "minus"):
                await press(pilot, key)
                assert work.case.controller is not None
                seen.append(work.case.controller.gain)
            # exact: 1.1 x 1.02, x 1.2, / 1.2, / 1.02, each to four digits
            assert seen == [1.122, 1.346, 1.122, 1.1]
            page.action_move(2)
            await press(pilot, "plus")
            # exact: 0.55 x 1.02, the unit kept
            assert str(work.case.controller and work.case.controller.integral) == (
                "0.561 min/repeat"
            )

    run(story())


def test_a_nudge_on_a_choice_takes_the_next_one(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "plus")
            assert work.case.controller is not None
            assert work.case.controller.form == "series"
            await press(pilot, "minus")
            assert work.case.controller.form == "ideal"

    run(story())


def test_a_nudge_without_a_number_says_what_to_do(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "down", "plus")
            assert "press Enter to type one" in text_of(pilot)
            await press(pilot, "4", "plus")
            assert "choose a setting first" in text_of(pilot)
            assert not work.unsaved

    run(story())


def test_undo_and_redo_walk_over_every_change(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "plus", "plus", "u", "u", "y")
            assert work.case.controller is not None
            # exact: 1.1 x 1.02 x 1.02 to four digits
            assert work.case.controller.gain == 1.144
            await press(pilot, "u", "u", "u")
            assert "nothing to undo" in text_of(pilot)
            assert not work.unsaved
            assert " saved" in text_of(pilot)

    run(story())


def test_what_got_worse_than_the_pinned_settings_is_said_in_words(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", *["greater_than_sign"] * 4)
            shown = text_of(pilot)
            margin = next(line for line in shown.split("\n") if "Gain margin" in line)
            assert "worse (" in margin
            area = next(line for line in shown.split("\n") if "Load IAE" in line)
            assert "worse" not in area
            assert "(" in area
            await press(pilot, "p")
            assert "worse (" not in text_of(pilot)

    run(story())


def test_an_unstable_loop_is_drawn_and_named(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "enter")
            await type_in(pilot, "40")
            await press(pilot, "enter")
            shown = text_of(pilot)
            assert "UNSTABLE" in shown
            assert "PV degC" in shown

    run(story())


def test_another_shape_keeps_what_it_can_and_names_what_it_assumes(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "1", "enter", "down", "enter")
            assert work.show("plant.shape") == "second-order"
            assert work.show("plant.gain") == "1.6"
            assert "assumed, to be typed over: 2nd time constant" in text_of(pilot)
            assert "2nd time constant" in text_of(pilot)

    run(story())


def test_a_formula_is_typed_in_place(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "1", "enter")
            await type_in(pilot, "formula")
            await press(pilot, "enter", "down", "enter")
            await type_in(pilot, "2 exp(-4 s)/(30 s + 1)")
            await press(pilot, "enter")
            assert work.evaluation is not None
            # exact: the limit of the formula at s = 0
            assert work.evaluation.assessment.plant.gain.value == pytest.approx(2.0, rel=1e-12)

    run(story())


@pytest.mark.parametrize("size", [(80, 24), (160, 50)])
def test_blocks_are_typed_on_one_line_and_the_total_is_shown(
    work: Work, size: tuple[int, int]
) -> None:
    line = "valve: 1/(2 s + 1); dryer: 1.5 exp(-4 s)/(30 s + 1)"

    async def story() -> None:
        async with running(work, size) as pilot:
            await press(pilot, "1", "enter")
            await type_in(pilot, "blocks")
            await press(pilot, "enter")
            own = "process: first-order gain=1.6, time_constant=45 s, dead_time=8 s"
            assert work.show("plant.blocks") == own
            assert "1.6 exp(-8 s)/(45 s + 1)" in text_of(pilot)
            await press(pilot, "down", "enter")
            await type_in(pilot, line)
            await press(pilot, "enter")
            assert work.show("plant.blocks") == line
            whole = "1.5 exp(-4 s)/((2 s + 1) (30 s + 1))"
            assert (whole if size[0] > 80 else whole[:25]) in text_of(pilot)
            # exact: 1.5 times 100/250
            assert "gain 1.5 degC per %, 0.6 %/%" in text_of(pilot)

    run(story())


def test_a_block_typed_wrong_says_which_beside_it(work: Work) -> None:
    work.edit("plant.shape", "blocks")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "1", "down", "enter")
            await type_in(pilot, "valve: 1/(2 s + 1); dryer: 1.5 exp(-4 s)/(30 s + 1")
            await press(pilot, "enter")
            assert "block 'dryer'" in text_of(pilot)
            assert work.show("plant.blocks").startswith("process: ")

    run(story())


def test_a_vessel_is_chosen_and_told_by_its_slope(work: Work) -> None:
    async def story() -> None:
        async with running(work, (160, 50)) as pilot:
            await press(pilot, "1", "enter")
            await type_in(pilot, "vessel")
            await press(pilot, "enter")
            assert work.show("plant.volume") == "1"
            assert "integrating: PV moves" in text_of(pilot)

    run(story())


def test_what_cannot_be_predicted_says_why_on_the_screen(work: Work) -> None:
    work.edit("plant.blocks", "dryer: 1.5 exp(-4 s)/(30 s + 1); slave around dryer: 0.2")
    work.edit("controller.scan", "")
    work.edit("op.rate", "0.5 /s")

    async def story() -> None:
        async with running(work, (160, 50)) as pilot:
            shown = text_of(pilot)
            assert "no prediction: controller.scan is needed" in shown
            assert "stable (analogue loop)" in shown

    run(story())


@pytest.mark.parametrize("size", [(80, 24), (160, 50)])
def test_every_panel_is_reached_by_its_key_and_alone_by_zoom(
    work: Work, size: tuple[int, int]
) -> None:
    async def story() -> None:
        async with running(work, size) as pilot:
            page = page_of(pilot, MainPage)
            for kind in PANELS:
                page.action_panel(kind.number)
                await settle(pilot)
                assert isinstance(page.focused, kind)
                assert f"> {kind.number} {kind.title}" in text_of(pilot)
                page.action_zoom()
                await settle(pilot)
                assert [panel for panel in page.panels.values() if panel.display] == [page.focused]
                page.action_zoom()
                assert sum(panel.display for panel in page.panels.values()) >= 4

    run(story())


def test_a_cascade_is_made_and_unmade_in_place(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            page = page_of(pilot, MainPage)
            await press(pilot, "9", "down", "down", "enter")
            assert "inner plant:" in text_of(pilot)
            await type_in(pilot, "0.9/(4 s + 1)")
            await press(pilot, "enter")
            assert work.case.inner.is_there
            assert "inner mode" in text_of(pilot)
            assert work.evaluation is not None
            assert work.evaluation.prediction is not None
            assert work.evaluation.prediction.inner is not None
            page.panels["9"].cursor = 2
            await press(pilot, "enter", "ctrl+u", "enter")
            assert not work.show("inner.plant")
            assert "inner mode" not in text_of(pilot)

    run(story())


def test_a_sticking_valve_is_set_in_place(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "8", *["down"] * 6, "enter")
            await type_in(pilot, "3")
            await press(pilot, "enter")
            assert work.case.valve.stick_slip == 3
            assert "*3 %" in text_of(pilot)

    run(story())


def test_every_panel_is_in_view_or_named_at_160x50(work: Work) -> None:
    async def story() -> None:
        async with running(work, (160, 50)) as pilot:
            shown = text_of(pilot)
            for kind in PANELS:
                assert f"{kind.number} {kind.title}" in shown
            assert "first settings after commissioning" in shown

    run(story())


def test_a_small_terminal_says_so_and_recovers(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            before = text_of(pilot)
            await pilot.resize_terminal(60, 10)
            await settle(pilot)
            assert "enlarge to 80x24 (now 60x10)" in text_of(pilot)
            await pilot.resize_terminal(3, 2)
            await settle(pilot)
            await pilot.resize_terminal(80, 24)
            await settle(pilot)
            assert text_of(pilot) == before

    run(story())


def test_a_burst_of_keys_is_computed_far_fewer_times_than_there_are_keys(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    real, asked = study.evaluate, []

    def counted(case: Case, like: Evaluation | None = None) -> Evaluation:
        asked.append(case)
        return real(case, like=like)

    async def story() -> None:
        async with running(work) as pilot:
            page = page_of(pilot, MainPage)
            page.action_move(1)
            monkeypatch.setattr(study, "evaluate", counted)
            for _ in range(50):
                page.action_nudge(1.001)
            await settle(pilot)
            assert work.evaluation is not None
            assert work.evaluation.case is work.case

    run(story())
    assert 1 <= len(asked) <= 5


def test_a_late_answer_for_an_older_case_is_dropped(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = study.evaluate

    async def story() -> None:
        async with running(work) as pilot:
            page = page_of(pilot, MainPage)
            first = work.evaluation
            work.edit("controller.gain", "2")
            older = work.case
            work.edit("controller.gain", "3")
            page.on_evaluated(Evaluated(older, real(older)))
            assert work.evaluation is first
            await settle(pilot)
            assert work.evaluation is not None
            assert work.evaluation.case is work.case

    run(story())


def test_answers_that_cannot_be_had_are_explained_and_the_case_stays(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(case: Case, like: Evaluation | None = None) -> Evaluation:
        raise problem("the case has no plant yet", "enter one", key="plant")

    async def story() -> None:
        async with running(work) as pilot:
            monkeypatch.setattr(study, "evaluate", refuse)
            await press(pilot, "down", "plus")
            assert "the case has no plant yet; enter one" in text_of(pilot)
            assert work.unsaved

    run(story())


def test_a_fault_of_the_program_in_the_background_does_not_end_it(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    def stumble(case: Case, like: Evaluation | None = None) -> Evaluation:
        raise ZeroDivisionError("by zero")

    async def story() -> None:
        async with running(work) as pilot:
            monkeypatch.setattr(study, "evaluate", stumble)
            await press(pilot, "down", "plus")
            assert "could not be computed (ZeroDivisionError: by zero)" in text_of(pilot)
            monkeypatch.undo()
            await press(pilot, "plus")
            assert work.evaluation is not None
            assert work.evaluation.case is work.case

    run(story())


def test_a_case_without_controller_and_without_plant_opens(folder: Path) -> None:
    async def story() -> None:
        Path("bare.toml").write_text('format = 1\n\n[loop]\ntag = "FIC-112"\n', "utf-8")
        bare = Work.open(Path("bare.toml"))
        async with running(bare) as pilot:
            shown = text_of(pilot)
            assert "no plant yet" in shown
            await press(pilot, "1", "enter", "down", "enter")
            assert bare.evaluation is not None
            assert "no controller" in text_of(pilot)

    run(story())


def test_a_later_change_message_stands_for_an_earlier_one() -> None:
    assert CaseChanged().can_replace(CaseChanged())


def test_the_page_stays_live_while_it_computes(work: Work, monkeypatch: pytest.MonkeyPatch) -> None:
    real, gate = study.evaluate, threading.Event()

    def slow(case: Case, like: Evaluation | None = None) -> Evaluation:
        gate.wait(10)
        return real(case, like=like)

    async def story() -> None:
        async with running(work) as pilot:
            page = page_of(pilot, MainPage)
            monkeypatch.setattr(study, "evaluate", slow)
            await pilot.press("down", "plus")
            await asyncio.sleep(0.05)
            page.action_panel("5")
            await asyncio.sleep(0.05)
            assert "5 History" in text_of(pilot)
            assert "*1.122" in text_of(pilot)
            gate.set()
            await settle(pilot)

    run(story())
