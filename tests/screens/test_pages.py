"""The other pages: start, record, proposals, save, leave, drafts, help."""

from __future__ import annotations

import asyncio
import json
import os
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import pytest
from textual.pilot import Pilot

from tests.screens.conftest import (
    CASE,
    page_of,
    press,
    run,
    running,
    settle,
    text_of,
    type_in,
)
from workbench import study
from workbench.case.case import Case, show
from workbench.case.files import read_case
from workbench.errors import problem
from workbench.screens import drafts
from workbench.screens.finder import FinderPage
from workbench.screens.help import HelpPage
from workbench.screens.keys import FIND
from workbench.screens.main import MainPage
from workbench.screens.page import Page
from workbench.screens.proposals import ProposalsPage
from workbench.screens.record import RecordFitted, RecordPage
from workbench.screens.saving import ConflictPage, DraftPage, LeavePage, SavePage
from workbench.screens.start import StartPage
from workbench.screens.survey import SurveyPage
from workbench.screens.tolerance import TolerancePage
from workbench.screens.work import Work

# --- the whole path ------------------------------------------------------------------------------


def test_from_the_list_to_settings_saved_from_a_record(folder: Path) -> None:
    keys = ["enter", "r", "enter", "a", "o", "enter", "down", "plus", "plus", "s"]

    async def story() -> None:
        async with running(Path()) as pilot:
            page_of(pilot, StartPage)
            await press(pilot, *keys[:1])
            for key in keys[1:]:
                await press(pilot, key)
            await type_in(pilot, "cycling after the fan change")
            await press(pilot, "enter")
            assert "saved to tic-307.toml as entry 2" in text_of(pilot)
            await press(pilot, "q")
            page_of(pilot, StartPage)
            await press(pilot, "q")

    run(story())
    assert len(keys) + 3 <= 25
    case = read_case("tic-307.toml").case
    assert case.history[-1].why == "cycling after the fan change"
    assert case.history[-1].who == "tester"
    assert case.history[-1].kind == "installed"
    assert case.plant.from_ == "TIC-307_bump.csv"
    assert study.check_case("tic-307.toml").faults == ()
    assert not list(drafts.folder().glob("*"))


# --- start ---------------------------------------------------------------------------------------


def test_the_list_names_what_is_wrong_with_a_file_and_stays(folder: Path) -> None:
    (folder / "a.toml").write_text("format = 1\n[loop]\ntag = 3\n")

    async def story() -> None:
        async with running(Path()) as pilot:
            assert "must be text, not 3" in text_of(pilot)
            await press(pilot, "enter")
            page_of(pilot, StartPage)
            assert "a.toml:3: loop.tag: must be text, not 3" in text_of(pilot)

    run(story())


def test_an_empty_folder_says_how_to_begin(tmp_path: Path) -> None:
    empty = tmp_path / "empty"
    empty.mkdir()

    async def story() -> None:
        async with running(empty) as pilot:
            assert "no case files" in text_of(pilot)
            assert "n  begins a new case" in text_of(pilot)
            await press(pilot, "enter", "down", "up")
            assert "n makes one, d writes the demo" in text_of(pilot)

    run(story())


# --- record --------------------------------------------------------------------------------------


def test_a_record_is_fitted_drawn_and_taken(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "r")
            assert "TIC-307_bump.csv" in text_of(pilot)
            await press(pilot, "enter")
            shown = text_of(pilot)
            for words in ("PV record", "fit", "OP %", "first-order", "+-", "600 rows"):
                assert words in shown
            await press(pilot, "a")
            page_of(pilot, MainPage)
            assert "fit of the record" in text_of(pilot)
            # exact: the plant that made the record (see conftest), within its noise
            assert work.evaluation is not None
            assert work.evaluation.assessment.plant.gain.value == pytest.approx(1.8, rel=0.02)
            await press(pilot, "u")
            assert not work.unsaved
            await press(pilot, "r")
            await press(pilot, "enter")
            await press(pilot, "m")
            page_of(pilot, MainPage)
            assert "record cannot tell from it" in text_of(pilot)
            assert work.evaluation is not None
            family = work.evaluation.family
            assert family is not None
            assert family.plants == 31
            assert family.stable_percent == 100.0
            await press(pilot, "u")
            assert not work.unsaved

    run(story())


def test_the_first_page_has_nothing_under_it_to_go_back_to(folder: Path) -> None:
    async def story() -> None:
        async with running(Path()) as pilot:
            start = page_of(pilot, StartPage)
            for _ in range(3):
                start.action_back()
            await settle(pilot)
            page_of(pilot, StartPage)

    run(story())


def test_a_record_is_found_by_its_typed_path(work: Work, tmp_path: Path) -> None:
    other = tmp_path / "other.csv"
    Path("TIC-307_bump.csv").rename(other)

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "r")
            assert "no CSV file beside the case" in text_of(pilot)
            await press(pilot, "t", "ctrl+u")
            await type_in(pilot, str(tmp_path / "missing.csv"))
            await press(pilot, "enter")
            assert "missing.csv" in text_of(pilot)
            await press(pilot, "ctrl+u")
            await type_in(pilot, str(other))
            await press(pilot, "enter")
            assert page_of(pilot, RecordPage).candidates.fit is not None

    run(story())


def test_a_record_that_cannot_be_read_is_explained(work: Work) -> None:
    Path("TIC-307_bump.csv").write_text("time_s,pv,op\n0,1,2\n1,abc,2\n")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "r", "enter")
            page_of(pilot, RecordPage)
            assert "TIC-307_bump.csv" in text_of(pilot)
            await press(pilot, "a")
            assert "choose a record first" in text_of(pilot)
            await press(pilot, "escape")
            page_of(pilot, MainPage)

    run(story())


def test_what_is_shown_can_be_used_alone_or_left_out(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "r", "enter")
            page = page_of(pilot, RecordPage)
            assert page.candidates.fit is not None
            rows = len(page.candidates.fit.record.time)
            whole = page.picture.view
            await press(pilot, "x")
            assert "zoom in first" in text_of(pilot)
            await press(pilot, "plus", "plus", "greater_than_sign", "greater_than_sign")
            view = page.picture.view
            # exact: a quarter of the whole, about its middle, later by two quarters of itself
            assert view.high - view.low == pytest.approx(whole.end / 4)
            assert view.low == pytest.approx(whole.end * (0.375 + 0.125))
            await press(pilot, "x")
            left = page.candidates.fit.record
            assert len(left.time) == pytest.approx(rows * 0.75, abs=2)
            assert len(left.parts) == 2
            assert "a part of it" in text_of(pilot)
            await press(pilot, "r")
            assert len(page.candidates.fit.record.time) == rows
            await press(pilot, "plus", "u")
            assert len(page.candidates.fit.record.time) == pytest.approx(rows * 0.5, abs=2)
            await press(pilot, "0", "l")
            assert page.records.display

    run(story())


def test_several_marked_records_are_fitted_at_once(work: Work) -> None:
    Path("second.csv").write_text(Path("TIC-307_bump.csv").read_text())

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "r", "space", "down", "space", "enter")
            page = page_of(pilot, RecordPage)
            assert page.candidates.fit is not None
            assert len(page.candidates.fit.record.parts) == 2
            assert "2 records" in text_of(pilot)

    run(story())


def test_a_date_that_can_be_read_in_two_ways_is_asked_for(work: Work) -> None:
    rows = Path("TIC-307_bump.csv").read_text().splitlines()
    lines = ["time,pv,op"]
    for i, row in enumerate(rows[1:]):
        pv, op = row.split(",")[1:3]
        lines.append(f"03/04/2026 {10 + i // 3600}:{i // 60 % 60:02d}:{i % 60:02d},{pv},{op}")
    Path("TIC-307_bump.csv").write_text("\n".join(lines))

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "r", "enter")
            shown = text_of(pilot)
            assert "day 3 of month 4 or day 4 of" in shown
            assert "press 1 for the first, 2 for the second" in " ".join(shown.split())
            await press(pilot, "2")
            page = page_of(pilot, RecordPage)
            assert page.candidates.fit is not None
            assert page.candidates.fit.record.start_stamp == "2026-03-04 10:00:00"

    run(story())


def test_a_test_is_followed_while_its_file_grows(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("workbench.screens.record.LOOK_EVERY_S", 0.05)
    path = Path("TIC-307_bump.csv")
    lines = path.read_text().splitlines(keepends=True)
    path.write_text("".join(lines[:150]) + lines[150][:5])

    async def story() -> None:
        async with running(work) as pilot:
            await pilot.press("r")
            await pilot.pause()
            await pilot.press("f")
            page = page_of(pilot, RecordPage)
            await until(pilot, lambda: "149 rows:" in text_of(pilot))
            path.write_text("".join(lines))
            await until(pilot, lambda: f"{len(lines) - 1} rows:" in text_of(pilot))
            assert page.candidates.fit is not None
            await press(pilot, "escape")
            assert "stopped" in text_of(pilot)

    run(story())


async def until(pilot: Pilot[None], shown: Callable[[], bool]) -> None:
    """Wait for what a thread will show."""
    for _ in range(400):
        if shown():
            return
        await asyncio.sleep(0.05)
        await pilot.pause()
    raise AssertionError(text_of(pilot))


def test_a_stopped_fit_is_not_shown_when_it_comes_in_late(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    real, kept = study.fit_sources, []

    def remembered(sources: Sequence[study.Source], **options: object) -> object:
        kept.append(real(sources)[0])
        return kept[-1], ()

    async def story() -> None:
        async with running(work) as pilot:
            monkeypatch.setattr(study, "fit_sources", remembered)
            await press(pilot, "r", "enter")
            page = page_of(pilot, RecordPage)
            page.action_list()
            page.candidates.fit = None
            page._ticket += 1
            page.on_record_fitted(RecordFitted(page._ticket - 1, kept[0]))
            await settle(pilot)
            assert page.candidates.fit is None
            assert page.records.display

    run(story())


def test_moving_in_a_list_that_is_out_of_view_stays_inside_it(work: Work) -> None:
    """Found by random keys: nothing is drawn, so nothing held the cursor inside."""
    records = RecordPage(work).records
    for step in (-3, 10_000, -10_000):
        records.move(step)
        assert records.chosen == Path("TIC-307_bump.csv")
    table = ProposalsPage(work).table
    table.move(-1)
    assert table.chosen is None


def test_a_page_may_be_closed_before_it_is_put_together(work: Work) -> None:
    """Found by random keys."""

    async def story() -> None:
        async with running(work) as pilot:
            page = page_of(pilot, MainPage)
            for _ in range(3):
                page.action_help()
                pilot.app.pop_screen()
            await settle(pilot)
            page_of(pilot, MainPage)

    run(story())


# --- tolerance -----------------------------------------------------------------------------------


def test_the_tolerance_page_shows_the_map_of_the_present_settings(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "t")
            page = page_of(pilot, TolerancePage)
            first = page.map.found
            assert first is not None
            assert (first.axis, first.limit) == ("dead time", study.TOLERANCE_LIMIT)
            # other route: the same question asked of study
            columns, rows = page.map.cells()
            same = study.tolerance(work.case, columns=columns, rows=rows)
            assert (first.max_sensitivity == same.max_sensitivity).all()
            shown = text_of(pilot)
            for words in ("plant gain x", "dead time x", "unstable", "gain grows", "both grow"):
                assert words in shown
            assert max(len(line) for line in shown.split("\n")) <= 80

            await press(pilot, "a", "m")
            second = page.map.found
            assert second is not None
            assert (second.axis, second.limit) == ("lag", 2.5)
            assert "lag x" in text_of(pilot)

            await press(pilot, "question_mark")
            assert "the next limit on Ms" in text_of(pilot)
            await press(pilot, "escape", "escape")
            page_of(pilot, MainPage)

    run(story())


def test_a_larger_screen_has_a_finer_map(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "t")
            page = page_of(pilot, TolerancePage)
            small = page.map.found
            await pilot.resize_terminal(160, 50)
            await settle(pilot)
            large = page.map.found
            assert small is not None
            assert large is not None
            assert large.stable.size > 3 * small.stable.size

    run(story())


def test_without_a_controller_there_is_no_map(work: Work) -> None:
    work.change(replace(work.case, controller=None))

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "t")
            page_of(pilot, MainPage)
            assert "the map needs a controller" in text_of(pilot)

    run(story())


def test_a_family_stands_among_the_figures(work: Work) -> None:
    work.edit("family.gain", "30")
    work.edit("family.drawn", "10")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "4")
            # exact: 1 nominal, 2 corners, 10 drawn
            assert "family of 13: 100 % stable, worst Ms" in text_of(pilot)
            await press(pilot, "z", "end")
            assert "nominal   95 %      worst" in text_of(pilot)
            await press(pilot, "z", "o")
            assert "of the family, worst Ms" in text_of(pilot)

    run(story())


# --- proposals -----------------------------------------------------------------------------------


def test_proposals_are_judged_and_one_is_taken(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "o")
            table = page_of(pilot, ProposalsPage).table
            shown = text_of(pilot)
            for words in ("present", "amigo-pi", "lambda-pi", "aims at", "Ms", "load"):
                assert words in shown
            assert "integral in min/repeat" in shown
            lines = shown.split("\n")
            assert max(len(line) for line in lines) <= 80
            chosen = table.chosen
            assert chosen is not None
            assert chosen.controller is not None
            await press(pilot, "enter")
            page_of(pilot, MainPage)
            assert work.case == study.take(work._before[-1], chosen)
            assert "u takes them back" in text_of(pilot)

    run(story())


def test_the_list_of_rules_scrolls_with_what_is_told_of_each(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "o")
            table = page_of(pilot, ProposalsPage).table
            for row, proposal in enumerate(table.rows):
                table.cursor = row
                table.redraw()
                await settle(pilot)
                lines = text_of(pilot).split("\n")
                assert len(lines) <= 25
                assert max(len(line) for line in lines) <= 80
                assert any(line.startswith(f"> {proposal.method} ") for line in lines)
                # The whole source can be read.
                assert proposal.source.split()[-1] in " ".join(lines[14:])
            await press(pilot, "end")
            assert "does not apply" in text_of(pilot)

    run(story())


def test_what_is_wished_for_is_edited_and_everything_is_worked_out_anew(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "o")
            page = page_of(pilot, ProposalsPage)
            before = page.table.rows
            await press(pilot, "w", "down", "enter", *"0.9", "enter")
            assert "0.9 is outside what is accepted; give a number above 1" in text_of(pilot)
            await press(pilot, "ctrl+u", *"1.4", "enter")
            shown = text_of(pilot)
            assert "Ms at most              1.4" in shown
            assert "largest upset" in shown
            assert work.wish.max_sensitivity == 1.4
            best = {row.method: row for row in page.table.rows}["best-pi"]
            assert best.max_sensitivity.value == pytest.approx(1.4, rel=2e-3)
            was = {row.method: row for row in before}["best-pi"]
            assert best.load_iae.value != was.load_iae.value
            # Esc leads to the list, then to the loop; the wish is kept.
            await press(pilot, "escape", "escape", "o")
            assert page_of(pilot, ProposalsPage).work.wish.max_sensitivity == 1.4

    run(story())


def test_the_trade_off_is_drawn_over_the_list(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "o", "t")
            shown = text_of(pilot)
            for words in ("best PI", "best PID", "rules", "present", "Ms", "load IAE degC s"):
                assert words in shown
            lines = shown.split("\n")
            assert max(len(line) for line in lines) <= 80
            assert sum("X" in line for line in lines[1:11]) >= 1
            assert "noise gain" in shown
            await press(pilot, "t")
            assert "best PI " not in text_of(pilot)

    run(story())


def test_esc_ends_a_search_and_then_leaves_the_page(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    stopped: list[bool] = []

    def propose(
        case: Case, wish: study.Wish, should_stop: Callable[[], bool], tell: object
    ) -> tuple[()]:
        while not should_stop():
            time.sleep(0.01)
        stopped.append(True)
        return ()

    async def story() -> None:
        async with running(work) as pilot:
            monkeypatch.setattr(study, "propose", propose)
            await pilot.press("o")
            await pilot.pause()
            await pilot.press("escape")
            await until(pilot, lambda: bool(stopped) and "stopped: " in text_of(pilot))
            page_of(pilot, ProposalsPage)
            await press(pilot, "escape")
            page_of(pilot, MainPage)

    run(story())


def test_a_rule_that_does_not_apply_is_not_taken(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "o")
            page = page_of(pilot, ProposalsPage)
            page.table.cursor = next(
                row for row, proposal in enumerate(page.table.rows) if not proposal.applies
            )
            await press(pilot, "enter")
            page_of(pilot, ProposalsPage)
            assert "does not apply" in "".join(text_of(pilot).split("\n")[-5:])
            assert not work.unsaved

    run(story())


# --- saving and leaving --------------------------------------------------------------------------


def test_saving_needs_a_reason_and_shows_the_cautions(work: Work) -> None:
    work.edit("controller.gain", "1.3")
    before = Path("tic-307.toml").read_bytes()

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "s")
            shown = text_of(pilot)
            assert "controller.gain" in shown
            assert "1.1 -> 1.3" in shown
            assert "management of change" in shown
            await press(pilot, "enter")
            assert "say why" in text_of(pilot)
            assert Path("tic-307.toml").read_bytes() == before
            await press(pilot, "escape")
            page_of(pilot, MainPage)
            assert work.unsaved

    run(story())


def test_the_kind_of_an_entry_is_chosen(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "s")
            await type_in(pilot, "for the meeting")
            await press(pilot, "tab", "tab", "up", "enter")
            assert work.case.history[-1].kind == "proposed"

    run(story())


def test_a_file_that_changed_meanwhile_is_not_overwritten_and_the_work_is_kept(
    work: Work,
) -> None:
    work.edit("controller.gain", "1.3")
    theirs = CASE.replace('area = "Drying"', 'area = "Dryers"')
    Path("tic-307.toml").write_text(theirs, encoding="utf-8")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "s")
            await type_in(pilot, "mine")
            await press(pilot, "enter")
            page_of(pilot, ConflictPage)
            await press(pilot, "escape")
            page_of(pilot, SavePage)
            shown = text_of(pilot)
            assert "not saved" in shown
            assert "your work is kept" in shown
            await press(pilot, "escape")
            assert work.show("controller.gain") == "1.3"

    run(story())
    assert Path("tic-307.toml").read_text(encoding="utf-8") == theirs


def test_undo_after_saving_leaves_the_history_alone(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "s")
            await type_in(pilot, "quicker")
            await press(pilot, "enter", "u")
            assert work.show("controller.gain") == "1.1"
            assert len(work.case.history) == 2
            assert work.unsaved

    run(story())


def test_leaving_saved_work_asks_nothing(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await pilot.press("q")
            await pilot.pause()
            assert pilot.app.return_code == 0

    run(story())


def test_leaving_unsaved_work_asks_once_and_keeps_a_draft(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "q")
            page_of(pilot, LeavePage)
            assert "1.1 -> 1.122" in text_of(pilot)
            await press(pilot, "escape")
            page_of(pilot, MainPage)
            await press(pilot, "q")
            await pilot.press("d")
            await pilot.pause()
            assert pilot.app.return_code == 0
        async with running(Path()) as pilot:
            assert "tic-307.toml  unsaved work" in text_of(pilot)

    run(story())
    kept = drafts.find(Path("tic-307.toml"))
    assert kept is not None
    assert kept.changes == {"controller.gain": "1.122"}


def test_saving_while_leaving_leaves(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "q", "s")
            await type_in(pilot, "quicker")
            await pilot.press("enter")
            await pilot.pause()
            assert pilot.app.return_code == 0

    run(story())
    assert drafts.find(Path("tic-307.toml")) is None
    assert len(read_case("tic-307.toml").case.history) == 2


# --- drafts --------------------------------------------------------------------------------------


def test_unsaved_work_is_offered_and_taken_up(folder: Path) -> None:
    earlier = Work.open(Path("tic-307.toml"))
    earlier.edit("controller.gain", "1.3")
    earlier.edit("plant.formula", "2 exp(-5 s)/(30 s + 1)")
    earlier.keeper.write()
    work = Work.open(Path("tic-307.toml"))

    async def story() -> None:
        async with running(work) as pilot:
            page_of(pilot, DraftPage)
            assert "1.1 -> 1.3" in text_of(pilot)
            await press(pilot, "enter")
            page_of(pilot, MainPage)
            assert work.case == earlier.case

    run(story())


def test_a_dropped_draft_is_gone(folder: Path) -> None:
    earlier = Work.open(Path("tic-307.toml"))
    earlier.edit("controller.gain", "1.3")
    earlier.keeper.write()
    work = Work.open(Path("tic-307.toml"))

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "d")
            page_of(pilot, MainPage)
            assert not work.unsaved

    run(story())
    assert drafts.find(Path("tic-307.toml")) is None


def test_a_draft_that_does_not_fit_any_more_is_explained(folder: Path) -> None:
    earlier = Work.open(Path("tic-307.toml"))
    earlier.edit("plant.time_constant", "50 s")
    earlier.keeper.write()
    changed = CASE.replace('shape = "first-order"\ngain = 1.6\ntime_constant = "45 s"\n', "")
    changed = changed.replace('dead_time = "8 s"', 'formula = "2/(s+1)"')
    Path("tic-307.toml").write_text(changed, encoding="utf-8")
    work = Work.open(Path("tic-307.toml"))

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "enter")
            page_of(pilot, DraftPage)
            assert "does not fit the file any more" in text_of(pilot)

    run(story())
    assert drafts.find(Path("tic-307.toml")) is not None


@pytest.mark.parametrize(
    "text", ["", "[]", "{}", "nonsense", '{"at": 1, "base": 2, "changes": 3}', "[" * 100_000]
)
def test_a_spoilt_draft_is_passed_over(folder: Path, text: str) -> None:
    place = drafts.place(Path("tic-307.toml"))
    place.parent.mkdir(parents=True)
    place.write_text(text)
    assert drafts.find(Path("tic-307.toml")) is None


def test_a_draft_is_plain_json_in_the_words_of_the_file(work: Work) -> None:
    work.edit("controller.integral", "40 s")
    work.keeper.write()
    kept = json.loads(drafts.place(Path("tic-307.toml")).read_text())
    assert kept["changes"] == {"controller.integral": "40 s"}
    work.undo()
    work.keeper.write()
    assert not drafts.place(Path("tic-307.toml")).exists()


def test_a_draft_that_cannot_be_written_is_told(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(self: drafts.Keeper) -> None:
        raise OSError(28, "No space left on device")

    async def story() -> None:
        async with running(work) as pilot:
            monkeypatch.setattr(drafts.Keeper, "write", refuse)
            await press(pilot, "down", "plus")
            assert "cannot be kept as a draft: No space left on device" in text_of(pilot)
            assert work.show("controller.gain") == "1.122"

    run(story())


def test_a_running_session_keeps_its_draft_to_itself(folder: Path) -> None:
    """Another process with unsaved work on the same case, while it lives and after."""
    script = (
        "import sys; from pathlib import Path; from workbench.screens.work import Work;"
        "work = Work.open(Path('tic-307.toml')); work.edit('controller.gain', '1.7');"
        "work.keeper.write(); print('kept', flush=True); sys.stdin.read()"
    )
    other = subprocess.Popen(
        [sys.executable, "-c", script],
        env={**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])},
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    )
    assert other.stdout is not None
    assert other.stdout.readline() == "kept\n"
    here = Work.open(Path("tic-307.toml"))
    assert here.draft is None
    here.edit("controller.gain", "1.3")
    here.keeper.write()

    other.kill()
    other.communicate()
    drafts.place(Path("tic-307.toml")).unlink()
    later = Work.open(Path("tic-307.toml"))
    assert later.draft is not None
    assert later.draft.changes == {"controller.gain": "1.7"}
    left = later.draft.path
    later.take_up(later.draft)
    assert left.exists(), "the old draft goes only once the new one is on the disk"
    later.keeper.write()
    assert not left.exists()
    assert drafts.place(Path("tic-307.toml")).exists()


# --- two people ----------------------------------------------------------------------------------


def _saved_by_another() -> None:
    path = Path("tic-307.toml")
    path.write_text(path.read_text().replace('area = "Drying"', 'area = "Dry end"'))


def test_what_another_saved_is_taken_in_before_saving(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "s", *"faster")
            _saved_by_another()
            await press(pilot, "enter")
            page_of(pilot, ConflictPage)
            assert "loop.area                       Drying -> Dry end" in text_of(pilot)
            assert "controller.gain                 1.1 -> 1.122" in text_of(pilot)
            await press(pilot, "m")
            page_of(pilot, SavePage)
            assert "their changes are taken in; Enter saves" in text_of(pilot)
            assert read_case("tic-307.toml").case.history[1:] == ()
            await press(pilot, "enter")
            page_of(pilot, MainPage)

    run(story())
    case = read_case("tic-307.toml").case
    assert (case.loop.area, show(case, "controller.gain")) == ("Dry end", "1.122")
    assert [entry.why for entry in case.history[1:]] == ["faster"]


def test_what_another_saved_can_be_left_alone(work: Work, folder: Path) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "s", *"faster")
            _saved_by_another()
            await press(pilot, "enter", "b")
            page_of(pilot, MainPage)

    run(story())
    (beside,) = folder.glob("tic-307_*.toml")
    assert show(read_case(beside).case, "controller.gain") == "1.122"
    theirs = read_case("tic-307.toml").case
    assert (theirs.loop.area, show(theirs, "controller.gain")) == ("Dry end", "1.1")
    assert not list(drafts.folder().glob("*"))


# --- the way back --------------------------------------------------------------------------------


def test_earlier_settings_come_back_in_one_step(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "plus", "5")
            assert "Enter puts back: gain 1.144 -> 1.1." in text_of(pilot)
            await press(pilot, "enter")
            assert "the settings of entry 1 are back" in text_of(pilot)
            assert work.show("controller.gain") == "1.1"
            await press(pilot, "enter")
            assert "are the present ones" in text_of(pilot)
            await press(pilot, "u")
            assert work.show("controller.gain") == "1.144"

    run(story())


def test_a_safety_related_loop_asks_for_its_reference(work: Work) -> None:
    work.edit("loop.safety_related", "true")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "s", *"trip moved", "enter")
            assert "reference: is blank, and the loop is safety-related" in text_of(pilot)
            await press(pilot, "tab", "tab", "tab", *"MOC 26-114", "enter")
            page_of(pilot, MainPage)

    run(story())
    assert read_case("tic-307.toml").case.history[-1].reference == "MOC 26-114"


# --- help ----------------------------------------------------------------------------------------


def pages() -> list[type[Page]]:
    """Every page of the program."""
    return [
        StartPage,
        SurveyPage,
        MainPage,
        RecordPage,
        ProposalsPage,
        TolerancePage,
        SavePage,
        ConflictPage,
        LeavePage,
        DraftPage,
        FinderPage,
        HelpPage,
    ]


@pytest.mark.parametrize("kind", pages())
def test_every_command_has_a_key_a_help_sentence_and_an_action(kind: type[Page]) -> None:
    assert kind.about or kind is HelpPage
    for command in kind.commands:
        assert command.shown
        if command.keys:
            assert command.help
            assert command.action
            name = command.action.partition("(")[0]
            assert name.startswith("app.") or hasattr(kind, f"action_{name}")


EATEN = {"ctrl+s", "ctrl+q", "ctrl+b", "ctrl+a", "ctrl+c", "ctrl+z", "ctrl+d", "f1", "f10", "f11"}
"""Keys that flow control, terminal multiplexers or terminals keep for themselves."""


@pytest.mark.parametrize("kind", pages())
def test_no_command_hangs_on_a_key_that_may_never_arrive(kind: type[Page]) -> None:
    for command in kind.commands:
        keys = set(filter(None, command.keys.split(",")))
        # While something is typed every letter is text: there the help has F1 only.
        if keys and kind is not SavePage:
            assert keys - EATEN, command


def test_the_key_line_fits_80_columns_on_every_page() -> None:
    for kind in pages():
        for commands in kind.key_lines or (kind.commands,):
            shown = [
                f"{command.shown} {command.words}"
                for command in (*commands, *([] if kind is FinderPage else [FIND]))
                if command.words and not command.spare
            ]
            assert len(" ".join(shown)) <= 80, kind


def test_help_explains_the_focused_panel_and_lists_every_key(work: Work) -> None:
    async def story() -> None:
        async with running(work, (160, 50)) as pilot:
            await press(pilot, "4", "question_mark")
            page_of(pilot, HelpPage)
            shown = text_of(pilot)
            assert "Sensitivity Ms: the largest factor" in shown
            # The list is longer than the screen: the rest of it is a page further.
            await press(pilot, "end")
            shown += text_of(pilot)
            for command in MainPage.commands:
                if command.help:
                    assert command.help in shown
            await press(pilot, "escape")
            page_of(pilot, MainPage)

    run(story())


def test_a_refused_save_of_a_case_without_controller_is_explained(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    def refuse(*_: object, **__: object) -> None:
        raise problem("the case has no controller yet", "give its gain", key="controller")

    async def story() -> None:
        async with running(work) as pilot:
            monkeypatch.setattr(study, "record_change", refuse)
            await press(pilot, "s")
            await type_in(pilot, "why not")
            await press(pilot, "enter")
            assert "the case has no controller yet; give its gain" in text_of(pilot)

    run(story())
