"""What leaves the screen: the clipboard, the file beside it, the sheet."""

from __future__ import annotations

from pathlib import Path

import pytest
from textual.pilot import Pilot

from tests.screens.conftest import page_of, press, run, running, text_of
from workbench import study
from workbench.screens import drafts
from workbench.screens.output import has_clipboard
from workbench.screens.proposals import ProposalsPage
from workbench.screens.work import Work


def closed_up(pilot: Pilot[None]) -> str:
    """The screen without spaces and ends of lines: a long path may go over several."""
    return "".join(text_of(pilot).split())


def copied() -> str:
    """The file that was written."""
    (path,) = (drafts.folder().parent / "copied").iterdir()
    return path.read_text(encoding="utf-8")


def test_settings_go_to_the_clipboard_and_to_a_file(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("TERM", "xterm-256color")
    monkeypatch.delenv("STY", raising=False)
    work.edit("loop.service", "air\N{RIGHT-TO-LEFT OVERRIDE}")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "c")
            assert pilot.app.clipboard == copied()
            assert "tic-307_settings.txt;senttotheterminal'sclipboardtoo" in closed_up(pilot)

    run(story())
    lines = copied().splitlines()
    assert lines[0] == "TIC-307  air?"
    assert lines[1:4] == [
        "form               ideal",
        "gain               1.1 %/%",
        "integral           0.55 min/repeat",
    ]
    assert all(line.isprintable() for line in lines)


def test_a_proposal_is_copied_and_the_case_stays(
    work: Work, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("TERM", "vt100")
    before = work.case
    rows = study.propose(work.case, study.Wish(method="simc-pi"))
    monkeypatch.setattr(study, "propose", lambda *_: rows)

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "o")
            await press(pilot, "c")
            page_of(pilot, ProposalsPage)
            assert "thisterminalhasnoclipboard" in closed_up(pilot)
            assert not pilot.app.clipboard

    run(story())
    assert work.case == before
    assert "gain               1.1 %/%" not in copied()
    assert "min/repeat" in copied()


def test_a_state_folder_that_cannot_be_written_is_told(work: Work, tmp_path: Path) -> None:
    (tmp_path / "state").write_text("in the way")

    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "c")
            assert "settings not written to a file" in text_of(pilot)

    run(story())


def test_the_sheet_is_written_beside_the_case(work: Work, folder: Path) -> None:
    async def story() -> None:
        async with running(work) as pilot:
            await press(pilot, "down", "plus", "w")
            assert "TIC-307_sheet.txt is written beside the case; these settings are not" in (
                text_of(pilot)
            )

    run(story())
    sheet = (folder / "TIC-307_sheet.txt").read_text(encoding="utf-8")
    assert sheet.startswith("Retune sheet  TIC-307")
    assert "1.122" in sheet


@pytest.mark.parametrize(
    ("environment", "can"),
    [
        ({"TERM": "xterm-256color"}, True),
        ({"TERM": "tmux-256color"}, True),
        ({"TERM": "vt100"}, False),
        ({"TERM": "linux"}, False),
        # GNU screen takes the control for itself.
        ({"TERM": "screen", "STY": "4711.x"}, False),
    ],
)
def test_only_a_terminal_that_knows_the_control_is_sent_it(
    environment: dict[str, str], can: bool
) -> None:
    assert has_clipboard(environment) is can
