"""What is loaded when: a slow import is felt at every start, so each one has its moment.

Wall-clock limits would be flaky on a shared machine; what a process has loaded is not.
"""

from __future__ import annotations

import ast
import importlib
import json
import os
import pkgutil
import subprocess
import sys
from pathlib import Path
from typing import Any, Final

import pytest

from workbench import study
from workbench.cli.table import COMMANDS

ROOT: Final = Path(__file__).resolve().parents[1]
LOOP: Final = ("--plant", "1.8 exp(-6 s)/(40 s + 1)", "--gain", "1.1", "--integral", "32 s")

HEADLESS: Final = {
    "assess": LOOP,
    "predict": (*LOOP, "--scan", "1 s"),
    "respond": ("--plant", LOOP[1]),
    "fit": (str(ROOT / "cases" / "TIC-307_bump.csv"),),
    "plan": (*LOOP[:2], "--noise", "0.2", "--max-pv-change", "3"),
    "diagnose": (str(ROOT / "cases" / "FIC-204_swing.csv"),),
    "recognise": (str(ROOT / "cases" / "FIC-204_run.csv"), str(ROOT / "cases" / "FIC-204.toml")),
    "observe": (str(ROOT / "cases" / "FIC-204.toml"), str(ROOT / "cases" / "FIC-204_run.csv")),
    "propose": LOOP,
    "convert": ("--to", "series", *LOOP),
    "check": (str(ROOT / "cases" / "TIC-307.toml"),),
    "history": (str(ROOT / "cases" / "TIC-307.toml"),),
    "survey": (str(ROOT / "cases"),),
    "sheet": (*LOOP, "--scan", "1 s"),
    "new": ("XIC-1", *LOOP),
}
"""Command -> words after which it does its whole work."""

_RUN_COMMAND: Final = """
import json, pathlib, sys
from workbench.cli import main
status = main(sys.argv[2:])
pathlib.Path(sys.argv[1]).write_text(json.dumps([status, sorted(sys.modules)]))
"""


def _run(script: str, folder: Path, *words: str) -> Any:
    """What the script leaves in the file that it is given, as JSON."""
    left = folder / "left.json"
    done = subprocess.run(
        [sys.executable, "-c", script, str(left), *words],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(ROOT), "XDG_STATE_HOME": str(folder)},
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert left.exists(), f"{' '.join(words)}:\n{done.stdout}{done.stderr}"
    return json.loads(left.read_text())


def _roots(modules: list[str]) -> set[str]:
    return {name.partition(".")[0] for name in modules}


@pytest.mark.parametrize("words", [(), *((command,) for command in COMMANDS)])
def test_help_loads_neither_numpy_nor_scipy(words: tuple[str, ...], tmp_path: Path) -> None:
    status, modules = _run(_RUN_COMMAND, tmp_path, *words, "--help")

    assert status == 0
    assert not _roots(modules) & {"numpy", "scipy", "textual", "plotext", "rich"}


@pytest.mark.parametrize("command", COMMANDS)
def test_a_headless_command_never_loads_the_screen(command: str, tmp_path: Path) -> None:
    assert command in HEADLESS, f"add a line for `workbench {command}` to HEADLESS in this file"
    status, modules = _run(_RUN_COMMAND, tmp_path, command, *HEADLESS[command])

    assert status == 0
    assert not _roots(modules) & {"textual", "rich"}
    assert not [name for name in modules if name.startswith(("workbench.screens", "scipy.signal"))]


@pytest.mark.parametrize("command", ["assess", "predict", "respond", "check", "history", "new"])
def test_a_quick_answer_needs_no_scipy(command: str, tmp_path: Path) -> None:
    _, modules = _run(_RUN_COMMAND, tmp_path, command, *HEADLESS[command])

    assert "scipy" not in _roots(modules)


_DRAW_SCREEN: Final = """
import asyncio, json, pathlib, sys
from workbench.screens.app import WorkbenchApp
from workbench.screens.work import Work

async def loaded():
    case = pathlib.Path(sys.argv[2])
    app = WorkbenchApp(case, Work.open(case))
    async with app.run_test(size=(80, 24)) as pilot:
        for _ in range(2000):
            if app.work.evaluation is not None:
                break
            await pilot.pause(0.01)
        await pilot.pause()
        strips = app.screen._compositor.render_strips()
        shown = "\\n".join("".join(segment.text for segment in strip) for strip in strips)
        return [shown, sorted(sys.modules)]

pathlib.Path(sys.argv[1]).write_text(json.dumps(asyncio.run(loaded())))
"""


def test_the_first_screen_is_drawn_without_scipy(tmp_path: Path) -> None:
    case = tmp_path / "TIC-307.toml"
    case.write_bytes((ROOT / "cases" / "TIC-307.toml").read_bytes())
    shown, modules = _run(_DRAW_SCREEN, tmp_path, str(case))

    # Settings, trend and figures are all there.
    assert "TIC-307" in shown
    assert "Trend" in shown
    assert "stable" in shown
    assert "textual" in _roots(modules)
    assert "scipy" not in _roots(modules)


def test_every_name_that_study_offers_is_found_when_first_asked_for() -> None:
    rooms = {room.name for room in pkgutil.iter_modules(study.__path__)}

    assert not rooms & set(study.__all__), "a room that is loaded would hide what is offered"
    tree = ast.parse(Path(study.__file__ or "").read_text(encoding="utf-8"))
    offered = {}
    for node in next(each for each in tree.body if isinstance(each, ast.If)).body:
        assert isinstance(node, ast.ImportFrom)
        room = importlib.import_module(node.module or "")
        offered.update({each.asname or each.name: getattr(room, each.name) for each in node.names})
    assert offered == {name: getattr(study, name) for name in study.__all__}


_FRAME: Final = """
import json, pathlib, sys
from workbench.screens.app import WorkbenchApp
from workbench.screens.work import Work
Work.open(pathlib.Path(sys.argv[2]))
pathlib.Path(sys.argv[1]).write_text(json.dumps(sorted(sys.modules)))
"""


def test_the_first_frame_waits_for_no_answers(tmp_path: Path) -> None:
    modules = _run(_FRAME, tmp_path, str(ROOT / "cases" / "TIC-307.toml"))

    late = ("workbench.records", "workbench.tune", "workbench.study.evaluation", "workbench.report")
    assert not [name for name in modules if name.startswith(late)]
    assert not _roots(modules) & {"scipy", "plotext"}
