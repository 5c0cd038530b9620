"""How long things take, each beside a yardstick measured in the same minute.

`python -m tests.benchmarks` prints one line for each: median and spread of both, and their ratio.
Seconds depend on the machine and on who else uses it; a ratio to a yardstick that does the least
that could be done says something anywhere.
"""

from __future__ import annotations

import asyncio
import os
import pty
import select
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Final

import numpy as np

from tests.plain import sampled_pv
from workbench import study
from workbench.case.case import edit
from workbench.case.files import read_case
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events

CASE: Final = Path(__file__).resolve().parents[2] / "cases" / "TIC-307.toml"

# --- what is timed -------------------------------------------------------------------------------


def _seconds(work: Callable[[], object]) -> float:
    started = time.perf_counter()
    work()
    return time.perf_counter() - started


_EMPTY_APP: Final = "from textual.app import App; App().run()"


def _first_frame(*words: str) -> float:
    """From the start of a process in a terminal of 80x24 to when it has drawn and fallen silent."""
    parent, child = pty.openpty()
    os.set_blocking(parent, False)
    environment = {**os.environ, "TERM": "xterm-256color", "LINES": "24", "COLUMNS": "80"}
    started = last = time.perf_counter()
    process = subprocess.Popen(
        [sys.executable, *words], stdin=child, stdout=child, stderr=child, env=environment
    )
    seen = 0
    try:
        # Drawn: several kilobytes have come, and then nothing for as long as a person would notice.
        while time.perf_counter() - started < 20.0:
            ready, _, _ = select.select([parent], [], [], 0.3)
            if ready:
                seen += len(os.read(parent, 65536))
                last = time.perf_counter()
            elif seen > 2000:
                break
    finally:
        process.kill()
        process.wait()
        os.close(parent)
        os.close(child)
    return last - started


def _process(*words: str) -> float:
    return _seconds(
        lambda: subprocess.run(
            [sys.executable, *words], check=True, stdout=subprocess.DEVNULL, timeout=60
        )
    )


SCANS: Final = 3600
_PLANT: Final = (1.8, 40.0, 6.0)
_GAINS: Final = Gains(1.1, 1.1 / 32.0)
_TRANSFER: Final = TransferFunction.ratio((_PLANT[0],), [(_PLANT[1], 1.0)], _PLANT[2])
_LOOP: Final = Loop(_TRANSFER, _TRANSFER, _GAINS, scan=1.0)
_EVENTS: Final = Events(1.0, 0.0, 1.0, 1800.0, SCANS - 1.0)


def _recursion() -> list[float]:
    upset = [0.0] * 1800 + [1.0] * (SCANS - 1800)
    return sampled_pv(_PLANT, _GAINS, 1.0, 0.0, [1.0] * SCANS, upset)


def _what_if(gains: Sequence[str]) -> float:
    """One what-if: another gain, everything a screen shows of it."""
    case = read_case(CASE).case
    return _seconds(
        lambda: [study.evaluate(edit(case, "controller.gain", gain)) for gain in gains]
    ) / len(gains)


def _nudge_on_screen() -> float:
    """One nudge of the gain, from the key to the redrawn trend, without a terminal."""
    from workbench.screens.app import WorkbenchApp
    from workbench.screens.work import Work

    async def nudge() -> float:
        app = WorkbenchApp(CASE, Work.open(CASE))
        async with app.run_test(size=(80, 24)) as pilot:
            work = app.work
            assert work is not None
            while work.evaluation is None:
                await pilot.pause(0.005)
            started = time.perf_counter()
            await pilot.press("plus")
            while work.evaluation.case is not work.case:
                await asyncio.sleep(0.001)
            await pilot.pause()
            took = time.perf_counter() - started
            work.undo()
            return took

    return asyncio.run(nudge())


ROWS: Final[
    tuple[tuple[str, int, Callable[[], float], tuple[str, Callable[[], float]] | None], ...]
] = (
    (
        "screen drawn, trend and figures included",
        7,
        lambda: _first_frame("-m", "workbench", str(CASE)),
        ("an empty Textual application", lambda: _first_frame("-c", _EMPTY_APP)),
    ),
    (
        "workbench --help",
        7,
        lambda: _process("-m", "workbench", "--help"),
        ("python -c pass", lambda: _process("-c", "pass")),
    ),
    (
        "workbench predict",
        7,
        lambda: _process("-m", "workbench", "predict", str(CASE)),
        ("python -c 'import numpy'", lambda: _process("-c", "import numpy")),
    ),
    (
        f"linear loop, {SCANS} scans",
        25,
        lambda: _seconds(lambda: simulate(_LOOP, _EVENTS)),
        ("the same recursion in plain Python", lambda: _seconds(_recursion)),
    ),
    ("what-if: every figure and the trend", 25, lambda: _what_if(("1.05",)), None),
    ("what-if on the screen, key to redrawn", 7, _nudge_on_screen, None),
)
"""What, how often, the time of one, and the yardstick with its time."""

# --- the table -----------------------------------------------------------------------------------


def _spread(times: Sequence[float]) -> str:
    """Median and middle half, in milliseconds."""
    low, middle, high = statistics.quantiles(times, n=4)
    return f"{1e3 * middle:8.1f} ms ({1e3 * low:.1f} to {1e3 * high:.1f})"


def main() -> int:
    """Measure and print."""
    # Once for nothing, so that neither side pays for reading files the first time.
    simulate(_LOOP, _EVENTS)
    pv = simulate(_LOOP, _EVENTS).pv
    assert len(pv) >= SCANS
    assert np.isfinite(pv).all()
    for name, count, ours, yardstick in ROWS:
        ours()
        mine, others = [], []
        for _ in range(count):
            # In turn, so that both meet the same disturbances.
            mine.append(ours())
            if yardstick is not None:
                others.append(yardstick[1]())
        print(f"{name:40} {_spread(mine)}")
        if yardstick is not None:
            ratio = statistics.median(mine) / statistics.median(others)
            print(f"  {yardstick[0]:38} {_spread(others)}   ratio {ratio:.2f}", flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
