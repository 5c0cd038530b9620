"""Whole screens as plain text: what an engineer sees (pinned; WRITE_GOLDENS=1 writes them anew)."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.screens.conftest import compare_with_golden, press, run, running, text_of, type_in
from workbench.screens.work import Work

Steps = tuple[tuple[str, tuple[str, ...]], ...]
"""Name of a screen, and the keys that lead to it from the one before."""

SMALL: Steps = (
    ("loop-80x24", ()),
    ("what-if-80x24", ("down", "greater_than_sign")),
    ("edit-80x24", ("enter",)),
    ("scenario-80x24", ("escape", "6")),
    ("structure-80x24", ("9",)),
    ("leave-80x24", ("q",)),
    ("help-80x24", ("escape", "2", "question_mark")),
    ("records-80x24", ("escape", "r")),
    ("tolerance-80x24", ("escape", "t")),
)
FREQUENCY: Steps = (
    ("pins-80x24", ("down", "greater_than_sign", "p", "greater_than_sign", "p", "comma")),
    ("reading-80x24", ("3", "right", "plus")),
    ("open-loop-80x24", ("v", "right")),
    ("sensitivity-80x24", ("v",)),
)
LARGE_FREQUENCY: Steps = (
    ("reading-160x50", ("down", "full_stop", "p", "full_stop", "p", "comma", "3", "right")),
    ("open-loop-160x50", ("v", "right")),
    ("sensitivity-160x50", ("v", "z")),
)
PLAIN: Steps = (
    ("what-if-80x24-ascii", ("down", "greater_than_sign")),
    ("history-80x24-ascii", ("5", "z")),
    ("tolerance-80x24-ascii", ("z", "t", "m")),
    ("open-loop-80x24-ascii", ("escape", "3", "v")),
)
LARGE: Steps = (
    ("loop-160x50", ("down", "greater_than_sign")),
    ("tolerance-160x50", ("t", "a")),
)


@pytest.mark.parametrize(
    ("size", "ascii_only", "steps"),
    [
        ((80, 24), False, SMALL),
        ((80, 24), False, FREQUENCY),
        ((80, 24), True, PLAIN),
        ((160, 50), False, LARGE),
        ((160, 50), False, LARGE_FREQUENCY),
    ],
    ids=["80x24", "80x24 views", "80x24 ascii", "160x50", "160x50 views"],
)
def test_pages_look_as_they_did(
    work: Work, size: tuple[int, int], ascii_only: bool, steps: Steps
) -> None:
    async def story() -> None:
        async with running(work, size, ascii_only=ascii_only) as pilot:
            for name, keys in steps:
                for key in keys:
                    await press(pilot, key)
                shown = text_of(pilot)
                if ascii_only:
                    assert shown.isascii()
                compare_with_golden(name, shown)

    run(story())


def test_the_save_page_looks_as_it_did(work: Work) -> None:
    work.edit("controller.gain", "1.3")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "s")
            await type_in(pilot, "cycling after the fan change")
            compare_with_golden("save-80x24", text_of(pilot))

    run(story())


def test_the_list_looks_as_it_did(folder: Path) -> None:
    (folder / "broken.toml").write_text("format = 1\n[loop]\ntag = 3\n")

    async def story() -> None:
        async with running(Path()) as pilot:
            compare_with_golden("list-80x24", text_of(pilot))
            await press(pilot, "down", "enter", "slash")
            await type_in(pilot, "reset")
            await pilot.pause()
            compare_with_golden("finder-80x24", text_of(pilot))

    run(story())


@pytest.mark.parametrize(
    ("size", "ascii_only", "name"),
    [((80, 24), True, "80x24-ascii"), ((160, 50), False, "160x50")],
    ids=["80x24 ascii", "160x50"],
)
def test_a_folder_that_was_empty_looks_as_it_did(
    folder: Path, size: tuple[int, int], ascii_only: bool, name: str
) -> None:
    (folder / "empty").mkdir()

    async def story() -> None:
        async with running(Path("empty"), size, ascii_only=ascii_only) as pilot:
            compare_with_golden(f"empty-{name}", text_of(pilot))
            await press(pilot, "d", "v")
            compare_with_golden(f"survey-{name}", text_of(pilot))
            assert not ascii_only or text_of(pilot).isascii()

    run(story())
