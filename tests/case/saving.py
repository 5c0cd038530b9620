"""Saves in processes of their own: many at once, and some killed half way."""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any, Final

from tests.case.making import an_entry
from workbench.case import files
from workbench.case.case import Case, edit
from workbench.errors import InputError

REPOSITORY: Final = Path(__file__).resolve().parents[2]


def started(call: str, **environment: str) -> subprocess.Popen[str]:
    """A Python of its own that runs a function of this module."""
    code = f"from tests.case.saving import *; {call}"
    return subprocess.Popen(
        [sys.executable, "-c", code],
        cwd=REPOSITORY,
        env={**os.environ, **environment},
        stdout=subprocess.PIPE,
        text=True,
    )


def append_entries(path: str, who: str, count: int) -> None:
    """Adds entries to the history; where another save came first, reads again and repeats."""
    for number in range(count):
        while True:
            file = files.read_case(path)
            entry = an_entry(who=who, why=f"number {number}")
            try:
                files.save_case(file, file.case.with_entry(entry))
                break
            except InputError as fault:
                if "was changed by someone else" not in str(fault):
                    raise


def save_over(path: str) -> None:
    """Reads, waits for the word, and saves; prints what came of it."""
    file = files.read_case(path)
    print("ready", flush=True)
    while not Path(path).with_suffix(".go").exists():
        time.sleep(0.001)
    try:
        files.save_case(file, edit(file.case, "controller.gain", str(os.getpid())))
        print("saved")
    except InputError as fault:
        print(fault)


def kill_saves(path: str, times: int, seed: int, at_once: int = 1) -> None:
    """Kills processes in the middle of their saves; prints how often the file was old or new.

    Where several are at it, each reads again whatever the other has saved meanwhile.
    """
    chance = random.Random(seed)
    target = Path(path)
    file = files.read_case(path)
    first, second = file.case, edit(file.case, "controller.gain", "9.5")
    texts = {file.raw: "old"}
    other = files.save_case(file, second)
    texts[other.raw] = "new"
    found = []
    for _ in range(times):
        children = [_saving(path, first, second) for _ in range(at_once)]
        time.sleep(chance.uniform(0.002, 0.04))
        for child in children:
            os.kill(child, signal.SIGKILL)
        for child in children:
            os.waitpid(child, 0)
        found.append(texts.get(target.read_bytes(), "neither"))
    held = files.read_case(path)
    files.save_case(held, first if held.case == second else second)
    print(
        *(found.count(word) for word in ("old", "new", "neither")), len(os.listdir(target.parent))
    )


def _saving(path: str, first: Case, second: Case) -> int:
    """A process that saves one case and the other by turns until it is killed."""
    child = os.fork()
    if child:
        return child
    held = files.read_case(path)
    while True:
        try:
            held = files.save_case(held, first if held.case == second else second)
        except InputError:
            held = files.read_case(path)


def kill_drafts(path: str, times: int, seed: int) -> None:
    """Kills a session in the middle of its work; prints how often a draft it had told was lost.

    A session tells each change once its draft is written, as the screen does by showing it.
    """
    from workbench.screens import drafts

    chance = random.Random(seed)
    lost = 0
    for _ in range(times):
        told, tells = os.pipe()
        child = os.fork()
        if child == 0:
            keeper = drafts.Keeper(Path(path))
            for number in range(1_000_000):
                keeper.hold("now", "base", {"controller.gain": str(number)})
                keeper.write()
                os.write(tells, number.to_bytes(4, "big"))
        os.close(tells)
        time.sleep(chance.uniform(0.005, 0.03))
        os.kill(child, signal.SIGKILL)
        os.waitpid(child, 0)
        with open(told, "rb") as pipe:
            heard = pipe.read()
        kept = drafts.find(Path(path))
        number = -1 if kept is None else int(kept.changes["controller.gain"])
        lost += len(heard) >= 4 and number < int.from_bytes(heard[-4:], "big")
        if kept is not None:
            kept.path.unlink()
    print(lost)


STEPS: Final = ("fchmod", "fsync", "replace")
"""System calls of a save at which a process may die."""


def die_at_each_step(path: str) -> None:
    """Ends a process before each system call of a save in turn; prints what the file then was."""
    target = Path(path)
    file = files.read_case(path)
    changed = edit(file.case, "controller.gain", "9.5")
    outcomes = []
    for step in range(20):
        child = os.fork()
        if child == 0:
            left = [step]
            for name in STEPS:
                setattr(os, name, _dying(getattr(os, name), left))
            files.save_case(file, changed)
            os._exit(0)
        _, status = os.waitpid(child, 0)
        now = files.read_case(path).case
        outcomes.append("old" if now == file.case else "new" if now == changed else "neither")
        target.write_bytes(file.raw)
        if os.waitstatus_to_exitcode(status) == 0:
            break
    print(*outcomes)


def _dying(call: Callable[..., Any], left: list[int]) -> Callable[..., Any]:
    def at_last(*args: Any, **kwargs: Any) -> Any:
        if left[0] == 0:
            os._exit(9)
        left[0] -= 1
        return call(*args, **kwargs)

    return at_last
