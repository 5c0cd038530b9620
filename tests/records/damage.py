"""Exports with bytes changed, cells swapped, lines lost or doubled."""

from __future__ import annotations

import random
import tempfile
import time
from pathlib import Path

import numpy as np

from tests.records.exports import EXPORTS
from workbench.errors import InputError
from workbench.records.record import read_record

_BITS = (
    b",",
    b";",
    b"\t",
    b"\n",
    b"\r",
    b'"',
    b"'",
    b".",
    b"-",
    b":",
    b"/",
    b" ",
    b"\0",
    b"1e999",
    b"nan",
    b"inf",
    b"1_0",
    b"\xff\xfe",
    b"\xef\xbb\xbf",
    b"\xc3",
    "\u2028".encode(),
    b"Bad",
    b"0",
    b"99999999999999999999",
    b"31/02/2026",
    b"AM",
    b"+99:99",
    b"tag",
    b"quality",
    b"date",
    b"value",
)
_LISTED = [
    (name, c.content if isinstance(c.content, bytes) else c.content.encode(), c.options)
    for name, c in EXPORTS.items()
]


def damaged_records(size: int, seed: int) -> tuple[float, list[str]]:
    """Each is read, with finite values on rising stamps, or refused in one line, in short time.

    Answers with the longest time of work [s] and what went wrong.
    """
    draw = random.Random(seed)
    longest, failures = 0.0, []
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "record.csv"
        for _ in range(size):
            name, content, options = draw.choice(_LISTED)
            for _ in range(draw.randint(1, 5)):
                content = _damaged(draw, content)
            path.write_bytes(content)
            started = time.process_time()
            fault = _judged(path, options, whole_lines=draw.random() < 0.3)
            longest = max(longest, time.process_time() - started)
            if fault:
                failures.append(f"{name}: {fault}: {content!r}")
    return longest, failures


def _judged(path: Path, options: dict[str, object], *, whole_lines: bool) -> str:
    try:
        record = read_record(path, whole_lines=whole_lines, **options)  # type: ignore[arg-type]
    except InputError as fault:
        line = str(fault)
        return "" if line.isprintable() and all(p.mend for p in fault.problems) else line
    except Exception as fault:  # noqa: BLE001 - this is what the campaign looks for
        return repr(fault)
    values = (record.time, record.pv, record.op)
    sound = all(len(v) == len(record.time) and np.isfinite(v).all() for v in values)
    sound = sound and len(record.time) >= 2 and bool((np.diff(record.time) > 0).all())
    return "" if sound else "is read as a record that is not sound"


def _damaged(draw: random.Random, content: bytes) -> bytes:
    at = draw.randrange(len(content) + 1)
    lines = content.split(b"\n")
    place = draw.randrange(len(lines))
    match draw.randrange(7):
        case 0:
            return content[:at] + draw.choice(_BITS) + content[at:]
        case 1:
            return content[:at] + content[at + draw.randint(1, 12) :]
        case 2:
            return content[:at]
        case 3:
            lines.insert(place, draw.choice(lines))
        case 4:
            lines.pop(place)
        case 5:
            cells = lines[place].split(b",")
            draw.shuffle(cells)
            lines[place] = b",".join(cells)
        case _:
            cells = lines[place].split(b",")
            cells[draw.randrange(len(cells))] = draw.choice(_BITS)
            lines[place] = b",".join(cells)
    return b"\n".join(lines)
