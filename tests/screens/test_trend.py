"""The Trend panel and its pins: what is compared, what is shown of it, what can be read off."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from tests.screens.conftest import page_of, press, run, running, text_of
from workbench import study
from workbench.charts import PINS
from workbench.screens.help import HelpPage, HelpText
from workbench.screens.main import MainPage
from workbench.screens.pins import Pins
from workbench.screens.work import Work

SIZES = ((80, 24), (160, 50))


@pytest.fixture
def pins(work: Work) -> tuple[Pins, dict[str, str]]:
    """Three settings pinned one after the other, and the present ones."""
    kept = Pins()
    for gain in ("1.1", "1.3", "1.5"):
        work.edit("controller.gain", gain)
        kept = kept.with_(study.evaluate(work.case), work.settings)
    work.edit("controller.gain", "1.7")
    return kept, work.settings


def test_every_pin_has_a_mark_of_its_own_and_its_settings_in_words(
    pins: tuple[Pins, dict[str, str]],
) -> None:
    kept, present = pins
    assert [pin.ink for pin in kept.kept] == list(PINS)
    assert kept.words(present, 60) == "o gain 1.1 %/%  x gain 1.3 %/%  + gain 1.5 %/%"
    assert kept.words(present, 33) == "gain o 1.1  x 1.3  + 1.5 %/%"
    assert kept.words(present, 12) == "gain o 1.1 …"


def test_a_fourth_pin_takes_the_place_and_the_mark_of_the_oldest(
    pins: tuple[Pins, dict[str, str]], work: Work
) -> None:
    kept, present = pins
    more = kept.with_(study.evaluate(work.case), present)
    assert [pin.mark for pin in more.kept] == ["x", "+", "o"]
    assert more.words(present, 60) == "x gain 1.3 %/%  + gain 1.5 %/%  o gain 1.7 %/%"
    assert [pin.mark for pin in more.without_newest().kept] == ["x", "+"]


def test_what_is_pinned_already_becomes_the_newest_again(
    pins: tuple[Pins, dict[str, str]],
) -> None:
    kept, _ = pins
    again = kept.with_(kept.kept[0].evaluation, kept.kept[0].settings)
    assert [pin.mark for pin in again.kept] == ["x", "+", "o"]


def test_settings_that_differ_in_more_than_one_way_are_all_named(work: Work) -> None:
    kept = Pins().with_(study.evaluate(work.case), work.settings)
    work.edit("plant.gain", "1.8")
    work.edit("controller.integral", "40 s")
    words = kept.words(work.settings, 80)
    assert words == "o integral 0.55 min/repeat, plant gain 1.6 degC/%"
    assert kept.words(work.settings, 30) == "o integral 0.55 min/repeat, p…"
    assert kept.words(work.settings, 15) == "o 0.55 min/rep…"
    work.edit("loop.service", "another name")
    work.edit("plant.dated", "2026-11-26")
    assert kept.words(work.settings, 80) == words


def test_pins_are_compared_told_apart_and_dropped(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "greater_than_sign", "p")
            assert "pinned as x: gain 1.32 %/%; figures are compared with it" in text_of(pilot)
            await press(pilot, "greater_than_sign")
            shown = text_of(pilot)
            assert "gain o 1.1  x 1.32 %/%" in shown
            assert "oo xx pinned" in shown
            assert "against x" in shown
            await press(pilot, "d")
            shown = text_of(pilot)
            assert "pin x dropped; figures are compared with pin o" in shown
            assert "against o" in shown
            await press(pilot, "d", "d")
            assert "nothing is pinned; p pins the present prediction" in text_of(pilot)
            assert "against" not in text_of(pilot)

    run(story())


def test_keys_of_the_picture_zoom_pan_and_read_and_change_no_setting(work: Work) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "greater_than_sign", "3")
            trend = page_of(pilot, MainPage).trend
            assert "Left Right read" in text_of(pilot)
            before = work.case
            await press(pilot, "right")
            assert work.evaluation is not None
            assert work.evaluation.prediction is not None
            # exact: half of 900 s, where OP is still what it was before the load step
            read = work.evaluation.prediction.trend.at(450.0)
            assert read is not None
            assert f"7.5 min: SP 125, PV {read.pv:.4g} degC, OP {read.output:.4g} %" in text_of(
                pilot
            )
            assert "o PV 125 degC, OP" in text_of(pilot)
            await press(pilot, "plus", "plus", "less_than_sign")
            # exact: a quarter of 900 s about 450 s, earlier by a quarter of that, in seconds
            view = trend.look.view
            assert view is not None
            assert (view.low, view.high) == (281.25, 506.25)
            assert text_of(pilot).count(" s\n") >= 1
            await press(pilot, "pagedown", "pagedown", "pagedown")
            view = trend.look.view
            assert view is not None
            assert view.high == trend.look.at
            await press(pilot, "0")
            assert trend.look.view is None
            assert "7.5 min" not in text_of(pilot)
            assert work.case is before
            await press(pilot, "question_mark")
            help_lines = [
                str(line) for line in page_of(pilot, HelpPage).query_one(HelpText).body(80)
            ]
            assert any("Keys in Trend" in line for line in help_lines)
            assert any("ten columns on" in line for line in help_lines)

    run(story())


@pytest.mark.parametrize("size", SIZES)
def test_the_loop_over_frequency_is_reached_from_any_panel(
    folder: Path, size: tuple[int, int]
) -> None:
    work = Work.open(folder / "tic-307.toml")

    async def story() -> None:
        async with running(work, size, ascii_only=True) as pilot:
            await press(pilot, "down", "v")
            shown = text_of(pilot)
            assert "3 Open loop" in shown
            assert "sampled" in shown
            assert "GM 9.94" in shown
            assert "PM 70.9 deg" in shown
            await press(pilot, "greater_than_sign", "v")
            assert work.evaluation is not None
            assert work.evaluation.assessment.judged is not None
            top = work.evaluation.assessment.judged.margins.max_sensitivity.value
            assert "3 Sensitivity" in text_of(pilot)
            assert f"Ms {top:.3g}" in text_of(pilot)
            assert "oo pinned" in text_of(pilot)
            await press(pilot, "3", "right", "plus")
            assert "rad/s" in text_of(pilot)
            assert re.search(r"\| o (\|S\| )?\d.*, ", text_of(pilot))
            assert text_of(pilot).isascii()
            # An unstable what-if has no margins, and is drawn all the same.
            work.edit("controller.gain", "40")
            await press(pilot, "0", "u", "y")
            for title in ("3 Trend", "3 Open loop", "3 Sensitivity"):
                await press(pilot, "v")
                assert title in text_of(pilot)
                assert "pinned" in text_of(pilot)
            assert "GM" not in text_of(pilot)
            assert "UNSTABLE" in text_of(pilot)

    run(story())


def test_without_a_controller_every_view_says_what_is_missing(folder: Path) -> None:
    path = folder / "tic-307.toml"
    text = path.read_text()
    start, end = text.index("[controller]"), text.index("[scenario]")
    path.write_text(text[:start] + text[end:])

    async def story() -> None:
        async with running(Work.open(path)) as pilot:
            await press(pilot, "3", "plus", "right", "less_than_sign")
            for _ in range(3):
                assert "without a controller" in text_of(pilot)
                await press(pilot, "v", "p", "d")

    run(story())
