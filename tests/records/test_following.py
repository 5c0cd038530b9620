"""A growing file is read by whole lines, and tells in the end what a finished one tells.

Expected values are exact: they stand in the file that each test writes.
"""

from __future__ import annotations

import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from workbench import study
from workbench.errors import RecordError, RecordQuestion
from workbench.records.following import Following
from workbench.records.record import read_record

ROWS = "timestamp,pv [°C],op\n" + "".join(
    f"2026-11-30 14:05:{s:02d},{12.5 + s / 4},{40 + (s > 4)}\n" for s in range(12)
)


def test_no_part_of_a_line_is_ever_read(tmp_path: Path) -> None:
    path, whole = tmp_path / "live.csv", ROWS.encode()
    following = Following(path)
    seen = 0
    for length in range(len(whole) + 1):
        path.write_bytes(whole[:length])
        look = following.look()
        rows = max(whole[:length].count(b"\n") - 1, 0)
        assert (look.record is not None) == (rows >= 2)
        if look.record is not None:
            np.testing.assert_array_equal(look.record.pv, [12.5 + s / 4 for s in range(rows)])
        assert look.said == "" or rows < 2
        assert look.grew == (length == 0 or whole[:length].endswith(b"\n"))
        seen = rows
    assert seen == 12


def test_the_last_line_without_an_end_counts_once_the_file_is_finished(tmp_path: Path) -> None:
    path = tmp_path / "live.csv"
    path.write_text(ROWS.rstrip("\n"))
    following = Following(path)
    growing, finished = following.look().record, following.look(finished=True).record
    assert growing is not None
    assert finished is not None
    assert (len(growing.time), len(finished.time)) == (11, 12)
    assert finished.sha256 == read_record(path).sha256


def test_a_file_that_became_shorter_or_another_one_is_told(tmp_path: Path) -> None:
    path = tmp_path / "live.csv"
    path.write_text(ROWS)
    following = Following(path)
    assert following.look().said == ""
    assert not following.look().grew
    path.write_text("\n".join(ROWS.split("\n")[:6]) + "\n")
    shorter = following.look()
    assert "became shorter" in shorter.said
    assert shorter.record is not None
    assert len(shorter.record.time) == 5
    path.write_text(ROWS.replace("12.5", "99.5"))
    assert "was replaced by another one" in following.look().said
    with path.open("a") as file:
        file.write("2026-11-30 14:05:12,16,41\n")
    assert following.look().said == ""


def test_a_file_at_its_beginning_is_waited_for_and_a_bad_one_refused(tmp_path: Path) -> None:
    path = tmp_path / "live.csv"
    with pytest.raises(RecordError, match="is not there"):
        Following(path).look()
    path.write_text("")
    following = Following(path)
    assert "Waiting for rows" in following.look().said
    path.write_text("timestamp,level\n" + ROWS.split("\n", 1)[1])
    with pytest.raises(RecordError, match="no column headed pv"):
        following.look()
    path.write_text("time,pv,op\n03/04/2026 10:00:00,1,2\n03/04/2026 10:00:01,1,2\n")
    with pytest.raises(RecordQuestion):
        Following(path).look()


WRITER = """
import math, random, sys, time
noise = random.Random(7)
with open(sys.argv[1], "wb") as file:
    def write(part):
        file.write(part); file.flush()
    write("time_s,pv [\\u00b0C],op\\n".encode())
    started = time.monotonic()
    for i in range(150):
        answer = 3.6 * (1 - math.exp(-(i - 33) / 12)) if i > 33 else 0
        pv = 50 + answer + noise.gauss(0, 0.05)
        line = f"{i / 10:.1f},{pv:.4f},{40 + 2 * (i >= 30)}\\n".encode()
        cut = noise.randrange(len(line))
        write(line[:cut])
        time.sleep(max(0, started + i / 100 - time.monotonic()))
        write(line[cut:])
"""
"""A test logged ten times a second, written at ten times its pace, each line in two pieces."""


def test_the_last_live_fit_is_the_fit_of_the_finished_file(tmp_path: Path) -> None:
    path = tmp_path / "live.csv"
    path.touch()
    test = study.LiveTest(path, noise_model="white")
    with subprocess.Popen([sys.executable, "-c", WRITER, str(path)]) as writer:
        looks = 0
        while writer.poll() is None:
            looks += test.refresh() is not None
            time.sleep(0.15)
    test.refresh(finished=True)
    live, offline = test.last.fit, study.fit_record(path, noise_model="white")
    assert looks > 2
    assert live is not None
    assert len(live.record.time) == 150
    assert live.chosen == offline.chosen
    for one, other in zip(live.candidates, offline.candidates, strict=True):
        assert one.plant == other.plant
        assert one.standard_errors == other.standard_errors
    assert live.record.sha256 == offline.record.sha256
