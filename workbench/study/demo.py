"""An invented loop to try the program on: a case, and the bump test that its plant comes out of."""

from __future__ import annotations

import math
import random
from datetime import datetime
from pathlib import Path
from typing import Final

from workbench.case.case import Case, edit_all, new_case
from workbench.case.files import write_new
from workbench.errors import InputError, Problem
from workbench.study.keep import record_change
from workbench.units import harmless

TAG: Final = "TIC-151"

_SETTINGS: Final = {
    "loop.service": "Gel tank jacket temperature",
    "loop.area": "Gelling",
    "loop.notes": "Invented: the Port Ellery alginate works does not exist. For trying things out.",
    "pv.unit": "degC",
    "pv.low": "0",
    "pv.high": "120",
    "pv.start": "62",
    "pv.noise": "0.08",
    "op.start": "40",
    "plant.shape": "first-order",
    "plant.gain": "0.6",
    "plant.time_constant": "70 s",
    "plant.dead_time": "10 s",
    "controller.gain": "1.6",
    "controller.integral": "180 s",
    "controller.scan": "1 s",
    "scenario.setpoint_step": "2",
    "scenario.setpoint_at": "30 s",
    "scenario.load_step": "5",
    "scenario.load_at": "600 s",
    "scenario.until": "1200 s",
}
"""The loop as it is found: a model that is out of date, and settings that are slow for it."""

_GAIN, _LAG_S, _LATE_S = 0.8, 95.0, 14.0
"""The plant of the record [degC/%, s, s]."""
_MOVES: Final = ((120.0, 6.0), (700.0, -12.0), (1300.0, 6.0))
"""When OP moved [s], and by how much [%]."""
_ROWS, _STEP_S, _NOISE, _SEED = 950, 2.0, 0.08, 151


def demo_case(now: datetime) -> Case:
    """The invented loop, its settings on record."""
    case = edit_all(new_case(TAG), _SETTINGS)
    return record_change(case, who="demo", why="invented: as the loop was found", now=now)


def demo_record() -> str:
    """Its bump test as CSV: one lag and a dead time, exact between the moves, and noise."""
    dice = random.Random(_SEED)
    lines = ["time_s,pv,op"]
    for row in range(_ROWS):
        at = row * _STEP_S
        op = 40.0 + sum(move for start, move in _MOVES if at >= start)
        late = [(at - start - _LATE_S, move) for start, move in _MOVES]
        pv = 62.0 + sum(
            _GAIN * move * -math.expm1(-since / _LAG_S) for since, move in late if since > 0.0
        )
        lines.append(f"{at:g},{pv + dice.gauss(0.0, _NOISE):.3f},{op:g}")
    return "\n".join(lines) + "\n"


def write_demo(folder: Path, now: datetime) -> Path:
    """Both into a folder; the path of the case.

    Raises `InputError` where there are such files already, or they cannot be written.
    """
    record, case = folder / f"{TAG}_bump.csv", folder / f"{TAG}.toml"
    write_new(case, demo_case(now))
    try:
        with record.open("x", encoding="utf-8") as file:
            file.write(demo_record())
    except FileExistsError:
        # A record of that name is somebody's: the case is there, and can be worked on without.
        pass
    except OSError as fault:
        what = f"cannot be written: {fault.strerror}"
        raise InputError(
            Problem(what, "choose another folder", path=harmless(str(record)))
        ) from None
    return case
