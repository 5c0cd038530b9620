"""Whatever a file says, no control character of it reaches the terminal: through a real one."""

from __future__ import annotations

import contextlib
import json
import os
import pty
import re
import select
import subprocess
import sys
import time
from collections.abc import Iterable
from pathlib import Path
from typing import Final

import pytest

ROOT: Final = Path(__file__).resolve().parents[1]

PAYLOADS: Final = (
    "\x1b[31337m",  # a colour that nobody uses
    "\x1b]0;taken over\x07",  # a window title
    "\x1b]52;c;c3RvbGVu\x07",  # the clipboard
    "\x1b]8;;http://example.invalid\x1b\\link\x1b]8;;\x1b\\",
    "\x1bP+q544e\x1b\\",
    "\x9b31337m",  # the same in one character
    "\x90payload\x9c",
    "\x1b[6n",  # makes the terminal answer as if it were typed
    "\x00\x08\x08\x0b\x0c\x0e\x7f\x85",
    "\r\x1b[2K",
    "\u202eesrever\u202c \u2066isolated\u2069",
    "\u2028\u2029\ufeff\u200b",
)
"""Escape sequences, control characters and overrides of direction."""

SHOWN: Final = "".join(f"x{payload}y" for payload in PAYLOADS)

_CONTROL: Final = re.compile("[\x00-\x09\x0b\x0c\x0e-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069]")
"""What may not be in the output of a command; a new line ends in `\\r\\n` on a terminal."""


def toml(text: str) -> str:
    """The text as TOML writes it, every odd character escaped."""
    return json.dumps(text).replace("\x7f", "\\u007f")


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """A loop whose every word is hostile, with a record like it."""
    case = f"""\
format = 1
[loop]
tag = {toml("TIC-1" + SHOWN[:50])}
service = {toml(SHOWN)}
area = {toml(SHOWN)}
notes = {toml(SHOWN * 3)}
[pv]
unit = {toml("deg" + PAYLOADS[0])}
high = 200.0
[op]
unit = {toml("%" + PAYLOADS[5])}
[plant]
shape = "first-order"
gain = 1.8
time_constant = "40 s"
dead_time = "6 s"
from = {toml("bump" + PAYLOADS[1] + ".csv")}
from_sha256 = {toml(PAYLOADS[2])}
[controller]
gain = 1.1
integral = "32 s"
scan = "1 s"
[[history]]
at = 2026-03-02T09:30:00+01:00
who = {toml("mk" + PAYLOADS[7])}
kind = "installed"
why = {toml(SHOWN)}
form = "ideal"
gain = 0.9
integral = "32 s"
program = {toml(PAYLOADS[8])}
[[history]]
at = 2026-04-02T09:30:00+01:00
who = "mk"
kind = "installed"
why = {toml(SHOWN)}
reference = {toml(SHOWN[:150])}
form = "ideal"
gain = 1.1
integral = "32 s"
"""
    (tmp_path / "loop.toml").write_text(case, encoding="utf-8")
    (tmp_path / "bad.toml").write_text(
        f"format = 1\n[loop]\n{toml(SHOWN)} = {toml(SHOWN)}\ntag = {toml(PAYLOADS[0] * 20)}\n",
        encoding="utf-8",
    )
    (tmp_path / "raw.toml").write_bytes(b"format = 1\n# \x1b[31337m\n" + SHOWN.encode())
    rows = ["time_s,pv,op", *(f"{k},{k % 7},{40 + (k > 9)}" for k in range(40))]
    rows[20] = f"19,{SHOWN},41"
    (tmp_path / "odd.csv").write_text("\n".join(rows), encoding="utf-8")
    head = f"time_s,pv{SHOWN.replace(chr(13), '')},op"
    (tmp_path / "head.csv").write_text("\n".join([head, *rows[1:20]]), encoding="utf-8")
    with contextlib.suppress(OSError):
        (tmp_path / "loop\x1b[31337m.toml").write_text("format = 1\n[loop]\n", encoding="utf-8")
    return tmp_path


def through_a_terminal(words: Iterable[str], folder: Path, keys: bytes = b"", **more: str) -> bytes:
    """What a program sends to the terminal, and what it would read from it."""
    master, slave = pty.openpty()
    environment = {
        **os.environ,
        "PYTHONPATH": str(ROOT),
        "XDG_STATE_HOME": str(folder / "s"),
        **more,
    }
    process = subprocess.Popen(
        [sys.executable, *words],
        cwd=folder,
        stdin=slave,
        stdout=slave,
        stderr=slave,
        env=environment,
        start_new_session=True,
    )
    os.close(slave)
    sent, end, typed = b"", time.monotonic() + 60, 0
    while time.monotonic() < end:
        if select.select([master], [], [], 0.2)[0]:
            try:
                got = os.read(master, 65536)
            except OSError:
                break
            sent += got
        elif process.poll() is not None:
            break
        elif sent and typed < len(keys):
            # A key only once the program is silent: what comes before it runs is echoed.
            os.write(master, keys[typed : typed + 1])
            typed += 1
        elif sent and keys:
            break
    if process.poll() is None:
        process.kill()
    process.wait(10)
    os.close(master)
    return sent


COMMANDS: Final = (
    ("assess", "loop.toml"),
    ("predict", "loop.toml"),
    ("propose", "loop.toml", "--method", "simc-pi"),
    ("convert", "loop.toml", "--to", "series"),
    ("respond", "loop.toml"),
    ("history", "loop.toml"),
    ("history", "loop.toml", "--between", "1", "2"),
    ("sheet", "loop.toml"),
    ("sheet", "loop.toml", "--markdown"),
    ("check", "."),
    ("survey", "."),
    ("fit", "odd.csv"),
    ("fit", "head.csv"),
    ("fit", "head.csv", "--pv", SHOWN.replace("\x00", "")),
    ("assess", "bad.toml"),
    ("assess", "raw.toml"),
    ("assess", SHOWN.replace("\x00", "")),
    ("new", SHOWN.replace("\x00", "")),
    ("assess", "loop.toml", "--set", SHOWN.replace("\x00", "")),
)
"""Command lines that show what a file or an option holds."""

_EACH: Final = """
import json, sys
from workbench.cli import main
for words in json.loads(sys.argv[1]):
    for more in ([], ["--json"]):
        print("@" * 9, flush=True)
        main([*words, *more])
        sys.stdout.flush()
"""


def test_no_command_sends_a_control_character_of_a_file(folder: Path) -> None:
    sent = through_a_terminal(("-c", _EACH, json.dumps(COMMANDS)), folder, LANG="C.UTF-8")
    text = sent.decode("utf-8").replace("\r\n", "\n")

    answers = text.split("@" * 9)[1:]
    assert len(answers) == 2 * len(COMMANDS)
    assert all(answer.strip() for answer in answers)
    for words, answer in zip((w for w in COMMANDS for _ in range(2)), answers, strict=True):
        # The progress of long work goes back to the start of its line: that is ours.
        told = re.sub(r"\r(?:[a-z ]+, \d+ s \(ctrl\+c stops it\)|  +)?", "", answer)
        assert not _CONTROL.findall(told), (words, answer)
        assert "Traceback" not in answer


@pytest.mark.parametrize("target", ["loop.toml", "."])
def test_the_screen_sends_no_sequence_of_a_file(target: str, folder: Path) -> None:
    """Every page that shows words of a file; its own sequences never hold these."""
    keys = b"5?q7?qzzs" if target != "." else b"jjj?q"
    program = "import sys; from workbench.screens.app import run; sys.exit(run(sys.argv[1]))"
    sent = through_a_terminal(
        ("-c", program, target), folder, keys, TERM="xterm-256color", LANG="C.UTF-8"
    )
    text = sent.decode("utf-8")

    assert "TIC-1" in text
    for payload in PAYLOADS[:8]:
        assert payload not in text
    assert not re.findall("[\x80-\x9f\u202a-\u202e\u2066-\u2069\u2028\u2029\ufeff\u200b]", text)
    # What is left once the program's own sequences are taken out is words.
    assert not re.findall("[\x00-\x09\x0b\x0c\x0e-\x1f\x7f]", _SEQUENCE.sub("", text))


_SEQUENCE: Final = re.compile(
    r"\x1b(?:\[[0-9;?<=>$ ]*[a-zA-Z~@`]|\][0-9]+;[^\x07\x1b]*\x07|[=>78]|\([0B])"
)
"""Sequences that the program may send by itself."""
