"""A case with its record, the screen as text, and a state folder of its own for every test."""

from __future__ import annotations

import asyncio
import itertools
import math
import os
import random
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import TypeVar

import pytest
from textual import events
from textual.pilot import Pilot

from workbench.screens.app import WorkbenchApp
from workbench.screens.main import MainPage
from workbench.screens.page import Page
from workbench.screens.work import Work

CASE = """\
# Invented loop of the Port Ellery alginate works.
format = 1

[loop]
tag = "TIC-307"
service = "Dryer outlet air temperature"
area = "Drying"

[pv]
unit = "degC"
low = 0.0
high = 250.0
start = 120.0
filter = "2 s"

[op]
unit = "%"
start = 42.0
min = 5.0
max = 95.0

[plant]
shape = "first-order"
gain = 1.6
time_constant = "45 s"
dead_time = "8 s"

[controller]
gain = 1.1
integral = "0.55 min/repeat"
scan = "1 s"

[scenario]
setpoint_step = 5.0
setpoint_at = "30 s"
load_step = 5.0
load_at = "450 s"
until = "900 s"

[[history]]
at = 2026-03-02T09:30:00+01:00
who = "mk"
kind = "installed"
why = "first settings after commissioning"
form = "ideal"
gain = 1.1
integral = "0.55 min/repeat"
"""
"""A whole case; its numbers are invented."""


def record_text() -> str:
    """A bump test of an invented plant: gain 1.8, 40 s lag, 6 s dead time, a little noise."""
    dice = random.Random(307)
    rows, level = ["time_s,pv,op"], 0.0
    moves = [42.0 if k < 60 else 47.0 if k < 300 else 40.0 for k in range(600)]
    for k, op in enumerate(moves):
        rows.append(f"{k},{120 + level + dice.gauss(0, 0.15):.3f},{op}")
        # Exact for an input that is held over each second: one lag and six whole seconds.
        late = moves[max(0, k - 6)] - 42.0
        level += (1.8 * late - level) * (1 - math.exp(-1 / 40))
    return "\n".join(rows) + "\n"


@pytest.fixture(autouse=True)
def _own_state(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """No test sees the drafts of another, or the user's name and colours."""
    monkeypatch.setenv("XDG_STATE_HOME", str(tmp_path / "state"))
    monkeypatch.setenv("LOGNAME", "tester")
    monkeypatch.delenv("NO_COLOR", raising=False)


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """The present folder, with one case and its record in it."""
    place = tmp_path / "cases"
    place.mkdir()
    (place / "tic-307.toml").write_text(CASE, encoding="utf-8")
    (place / "TIC-307_bump.csv").write_text(record_text(), encoding="utf-8")
    monkeypatch.chdir(place)
    return place


@pytest.fixture
def work(folder: Path) -> Work:
    """The case, opened."""
    return Work.open(Path("tic-307.toml"))


@asynccontextmanager
async def running(
    place: Path | Work, size: tuple[int, int] = (80, 24), *, ascii_only: bool = False
) -> AsyncIterator[Pilot[None]]:
    """The program on a case or a folder, settled."""
    case = place if isinstance(place, Work) else None
    path = place.path if isinstance(place, Work) else place
    app = WorkbenchApp(path, case, ascii_only=ascii_only)
    async with app.run_test(size=size) as pilot:
        await settle(pilot)
        yield pilot


async def settle(pilot: Pilot[None]) -> None:
    """Wait until every page has its answers and nothing is left to paint."""
    await pilot.pause()
    for _ in range(1200):
        pages = pilot.app.screen_stack
        waiting = any(isinstance(page, MainPage) and page.busy for page in pages)
        if not waiting and not any(worker.is_running for worker in pilot.app.workers):
            break
        await asyncio.sleep(0.01)
    else:
        raise AssertionError("the screen did not come to rest within 12 s")
    await pilot.pause()


async def press(pilot: Pilot[None], *keys: str) -> None:
    """Press keys and wait for what they lead to."""
    await pilot.press(*keys)
    await settle(pilot)


async def type_in(pilot: Pilot[None], words: str) -> None:
    """Give words to the focused entry, all at once as a terminal passes on a paste."""
    assert pilot.app.focused is not None
    pilot.app.focused.post_message(events.Paste(words))
    await pilot.pause()


def text_of(pilot: Pilot[None]) -> str:
    """The screen as text; the only place that looks into Textual's compositor."""
    strips = pilot.app.screen._compositor.render_strips()
    lines = ("".join(segment.text for segment in strip).rstrip() for strip in strips)
    return "\n".join(lines) + "\n"


Kind = TypeVar("Kind", bound=Page)


def page_of(pilot: Pilot[None], kind: type[Kind]) -> Kind:
    """The page on top, which must be of this kind."""
    page = pilot.app.screen
    assert isinstance(page, kind)
    return page


GOLDENS = Path(__file__).parents[1] / "goldens"


def compare_with_golden(name: str, shown: str) -> None:
    """Compare with the kept screen; WRITE_GOLDENS=1 writes it anew."""
    kept = GOLDENS / f"{name}.txt"
    if os.environ.get("WRITE_GOLDENS"):
        kept.write_text(shown, encoding="utf-8")
    expected = kept.read_text(encoding="utf-8") if kept.exists() else ""
    pairs = itertools.zip_longest(expected.split("\n"), shown.split("\n"), fillvalue="")
    different = [f"- {was}\n+ {now}" for was, now in pairs if was != now]
    assert not different, f"{kept.name} differs (WRITE_GOLDENS=1 accepts):\n" + "\n".join(different)


def run(coroutine: object) -> None:
    """Run a test that waits; one event loop each."""
    assert asyncio.iscoroutine(coroutine)
    asyncio.run(coroutine)
