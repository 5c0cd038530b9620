"""Makes the nine shipped loops of the invented Port Ellery alginate works, records included.

The three plain loops are here, the others in `port_ellery`, what runs in automatic in `make_runs`.
Run `python -m tests.make_cases` from the repository to write `cases/` again.  The random numbers
come from the one generator whose stream Python promises never to change, and every value is
rounded far above the last digit, so that the files come out byte for byte the same everywhere.
"""

from __future__ import annotations

import hashlib
import math
from datetime import datetime, timedelta
from pathlib import Path

from tests import make_runs, port_ellery
from tests.made_bumps import Loop

FOLDER = Path(__file__).parent.parent / "cases"

INVENTED = (
    "# Invented data.  Port Ellery alginate works is a made-up site: its loops, records and\n"
    "# people do not exist.  {what}\n"
)

DRYER = Loop(
    answer=lambda t: 1.8 * -math.expm1(-t / 155.0),
    dead_time=26.0,
    rest=(118.0, 42.0),
    moves=((300.0, 5.0), (1100.0, -10.0), (1900.0, 5.0)),
    interval=2.0,
    rows=1321,
    noise=0.15,
    drift=0.0002,
    seed=307,
)

TANK = Loop(
    answer=lambda t: -0.0007 * t,
    dead_time=9.0,
    rest=(55.0, 48.0),
    moves=((240.0, 8.0), (840.0, -16.0), (2040.0, 8.0)),
    interval=5.0,
    rows=481,
    noise=0.1,
    memory=8.0,
    drift=0.0003,
    seed=112,
)

WASH = Loop(
    answer=lambda t: 0.42 * -math.expm1(-t / 3.2),
    dead_time=0.9,
    rest=(21.5, 50.0),
    moves=((20.0, 6.0), (50.0, -12.0), (80.0, 12.0), (110.0, -6.0)),
    interval=0.5,
    rows=281,
    noise=0.15,
    seed=204,
)


def dryer_record() -> str:
    """ISO stamps, commas, SP and mode: what most historians export."""
    start = datetime(2026, 11, 26, 9, 30)
    lines = ["timestamp,sp,pv,op,mode"]
    for time, pv, op in DRYER.table():
        stamp = (start + timedelta(seconds=time)).isoformat(sep=" ")
        lines.append(f"{stamp},118.0,{pv:.2f},{op:.1f},MAN")
    return "\n".join(lines) + "\n"


def tank_record() -> str:
    """Day-first stamps, semicolons, a decimal comma and a units row: a spreadsheet's export."""
    start = datetime(2026, 11, 17, 14, 5)
    lines = ["timestamp;pv;op;mode", ";%;%;"]
    for time, pv, op in TANK.table():
        stamp = (start + timedelta(seconds=time)).strftime("%d.%m.%Y %H:%M:%S")
        lines.append(f"{stamp};{pv:.2f};{op:.1f};MAN".replace(".", ",").replace(",", ".", 2))
    return "\n".join(lines) + "\n"


def wash_record() -> str:
    """Seconds from the start: what a laptop at the panel logs."""
    rows = [f"{time:.1f},{pv:.2f},{op:.1f}" for time, pv, op in WASH.table()]
    return "\n".join(["time_s,pv,op", *rows]) + "\n"


DRYER_CASE = (
    INVENTED.format(what="The bump record beside this file is TIC-307_bump.csv.")
    + """\
format = 1

[loop]
tag = "TIC-307"
service = "Dryer outlet air temperature"
area = "Drying"
notes = "Steam valve on the air heater. Belt moisture follows this temperature."

[pv]
unit = "degC"
low = 0.0
high = 250.0
start = 118.0
filter = "2 s"
noise = 0.15                # standard deviation

[op]
unit = "%"
low = 0.0
high = 100.0
start = 42.0
min = 5.0                   # below this the steam trap floods
max = 95.0

[plant]
# Read off a chart at commissioning, before the larger fan went in.
shape = "first-order"
gain = 2.3
time_constant = "4 min"
dead_time = "20 s"

[controller]
form = "ideal"
gain = 6.0
integral = "1 min/repeat"
derivative = "none"
action = "reverse"
scan = "1 s"

[scenario]
setpoint_step = 5.0
setpoint_at = "60 s"
load_step = 5.0
load_at = "20 min"
until = "40 min"

[[history]]
at = 2025-03-18T10:40:00+00:00
who = "ab"
kind = "installed"
why = "commissioning, by trial; slow but steady"
form = "ideal"
gain = 2.5
integral = "4 min/repeat"
derivative = "none"

[[history]]
at = 2026-09-07T15:20:00+01:00
who = "rh"
kind = "installed"
why = "wet product at the belt end, tightened; cycles since the fan change"
form = "ideal"
gain = 6.0
integral = "1 min/repeat"
derivative = "none"
max_sensitivity = 2.05884
load_iae = 185.857
program = "0.1.0"
"""
)

TANK_CASE = (
    INVENTED.format(what="The bump record beside this file is LIC-112_bump.csv.")
    + """\
format = 1

[loop]
tag = "LIC-112"
service = "Extraction surge tank level"
area = "Extraction"
notes = "OP opens the outlet valve. The level may swing; the flow to the filters may not."

[pv]
unit = "%"
low = 0.0
high = 100.0
start = 55.0
noise = 0.1                 # standard deviation

[op]
unit = "%"
low = 0.0
high = 100.0
start = 48.0
meaning = "opening"

[plant]
shape = "integrating"
slope = "{slope} /s"
dead_time = "{dead_time} s"
from = "LIC-112_bump.csv"
from_sha256 = "{sha256}"

[controller]
form = "ideal"
gain = 0.8
integral = "20 min"
derivative = "none"
action = "direct"
scan = "1 s"

[scenario]
setpoint_step = 5.0
setpoint_at = "60 s"
load_step = 5.0
load_at = "6 h"
until = "12 h"

[[history]]
at = 2024-06-04T09:10:00+01:00
who = "ab"
kind = "installed"
why = "slow rolling of the level and of the feed to the filters, gain turned down"
form = "ideal"
gain = 0.8
integral = "20 min"
derivative = "none"
max_sensitivity = 1.34705
load_iae = 12323.7
program = "0.1.0"
"""
)

WASH_CASE = (
    INVENTED.format(what="The bump record beside this file is FIC-204_bump.csv.")
    + """\
format = 1

[loop]
tag = "FIC-204"
service = "Wash-water flow to the press"
area = "Washing"

[pv]
unit = "m3/h"
low = 0.0
high = 40.0
start = 21.5
noise = 0.15                # standard deviation

[op]
unit = "%"
low = 0.0
high = 100.0
start = 50.0

[plant]
shape = "first-order"
gain = {gain}
time_constant = "{time_constant} s"
dead_time = "{dead_time} s"
from = "FIC-204_bump.csv"
from_sha256 = "{sha256}"

[controller]
form = "ideal"
proportional_band = 200.0
integral = "6 repeats/min"
derivative = "none"
action = "reverse"
scan = "0.5 s"

[scenario]
setpoint_step = 4.0
setpoint_at = "5 s"
load_step = 5.0
load_at = "2 min"
until = "4 min"

[[history]]
at = 2024-02-12T13:00:00+00:00
who = "ab"
kind = "installed"
why = "commissioning, from the maker's sheet; hunted"
form = "ideal"
proportional_band = 62.5
integral = "30 repeats/min"
derivative = "none"

[[history]]
at = 2024-02-13T08:30:00+00:00
who = "ab"
kind = "installed"
why = "stopped the hunting; a new flow now takes a minute"
form = "ideal"
proportional_band = 200.0
integral = "6 repeats/min"
derivative = "none"
max_sensitivity = 1.1523
load_iae = 39.7412
program = "0.1.0"
"""
)


def files() -> dict[str, bytes]:
    """Name -> content of every shipped case file and record."""
    records = {
        "TIC-307_bump.csv": dryer_record(),
        "LIC-112_bump.csv": tank_record(),
        "FIC-204_bump.csv": wash_record(),
        "FIC-204_run.csv": make_runs.run_record(),
        "FIC-204_swing.csv": make_runs.swing_record(),
        **{f"{tag}_bump.csv": record() for tag, record in port_ellery.RECORDS.items()},
        "AIC-630_feed.csv": port_ellery.feed_record(),
    }
    sha256 = {name: hashlib.sha256(text.encode()).hexdigest() for name, text in records.items()}
    tank = TANK_CASE.format(slope=-0.0007, dead_time=7, sha256=sha256["LIC-112_bump.csv"])
    wash = WASH_CASE.format(
        gain=0.421, time_constant=3.11, dead_time=0.93, sha256=sha256["FIC-204_bump.csv"]
    )
    cases = {"TIC-307.toml": DRYER_CASE, "LIC-112.toml": tank, "FIC-204.toml": wash}
    for tag, text in port_ellery.CASES.items():
        record = f"{tag}_bump.csv"
        said = INVENTED.format(what=f"The bump record beside this file is {record}.")
        cases[f"{tag}.toml"] = said + text.format(
            sha256=sha256[record], feed_sha256=sha256["AIC-630_feed.csv"]
        )
    return {name: text.encode() for name, text in (cases | records).items()}


if __name__ == "__main__":
    FOLDER.mkdir(exist_ok=True)
    for name, content in files().items():
        (FOLDER / name).write_bytes(content)
        print(f"{name}  {len(content)} bytes")
