"""What a script may rely on: exit statuses, what goes where, and the JSON keys of each command."""

from __future__ import annotations

import json
import math
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest

from workbench import cli
from workbench.cli.answer import Answer
from workbench.cli.table import COMMANDS

PLANT = "1.8 exp(-6 s)/(40 s + 1)"
LOOP = ("--plant", PLANT, "--gain", "1.1", "--integral", "32 s", "--scan", "1 s")

CASE = """\
format = 1

[loop]
tag = "TIC-901"
service = "Invented oven"

[pv]
unit = "degC"
high = 250.0
start = 120.0

[op]
start = 42.0
min = 5.0
max = 95.0

[plant]
shape = "first-order"
gain = 1.8
time_constant = "40 s"
dead_time = "6 s"

[controller]
gain = 1.1
integral = "32 s"
action = "reverse"
scan = "1 s"
"""

HISTORY = """
[[history]]
at = 2026-01-10T09:00:00+01:00
who = "ab"
kind = "installed"
why = "as found"
form = "ideal"
gain = 0.8
integral = "40 s"
derivative = "none"

[[history]]
at = 2026-02-11T10:30:00+01:00
who = "cd"
kind = "installed"
why = "too slow"
form = "ideal"
gain = 1.1
integral = "32 s"
derivative = "none"
"""


class Done:
    """One run of the program in this process."""

    def __init__(self, status: int, out: str, err: str) -> None:
        self.status, self.out, self.err = status, out, err

    @property
    def data(self) -> Any:
        """Standard output as exactly one JSON object of finite numbers."""

        def refuse(word: str) -> None:
            raise AssertionError(f"{word} in JSON")

        found = json.loads(self.out, parse_constant=refuse)
        assert isinstance(found, dict)
        return found


class Run:
    """Runs the program on words and keeps what it printed."""

    def __init__(self, capsys: pytest.CaptureFixture[str]) -> None:
        self.capsys = capsys

    def __call__(self, *words: str) -> Done:
        self.capsys.readouterr()
        status = cli.main(words)
        out, err = self.capsys.readouterr()
        return Done(status, out, err)

    def refused(self, *words: str) -> str:
        """The one line of a run that could not be done."""
        done = self(*words)
        assert (done.status, done.out) == (2, ""), done.err
        assert done.err.count("\n") == 1
        assert done.err.startswith("workbench: ")
        assert "fault of the program" not in done.err
        return done.err.removeprefix("workbench: ").rstrip("\n")


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Run:
    """The program, in an empty folder with one sound case in it."""
    monkeypatch.chdir(tmp_path)
    Path("oven.toml").write_text(CASE)
    Path("old.toml").write_text(CASE + HISTORY)
    return Run(capsys)


# --- words ----------------------------------------------------------------------------------------


def test_every_command_has_its_function() -> None:
    assert set(cli.VERBS) == set(COMMANDS)


@pytest.mark.parametrize("command", ["", *COMMANDS])
def test_help_is_printed_for_every_command(run: Run, command: str) -> None:
    for asked in ("--help", "-h"):
        done = run(*([command] if command else []), asked)
        assert (done.status, done.err) == (0, "")
        assert done.out.startswith("usage: workbench")
        assert max(len(line) for line in done.out.splitlines()) <= 90


def test_versions_are_printed(run: Run) -> None:
    done = run("--version")
    assert done.status == 0
    assert [line.split()[0] for line in done.out.splitlines()] == [
        "workbench",
        "Python",
        "textual",
        "numpy",
        "scipy",
    ]


@pytest.mark.parametrize(
    ("words", "where", "what"),
    [
        (["asess"], "asess", "did you mean `workbench assess`?"),
        (["asess", "oven.toml"], "asess", "there is no such command"),
        (["nothere.toml"], "nothere.toml", "there is no such file or folder"),
        (["no/such"], "no/such", "there is no such file or folder"),
        (["oven.toml", "--ascii"], "screen", "needs a terminal"),
        (
            [],
            "screen",
            "assess, predict, respond, fit, propose, convert, check, history, survey, sheet or new",
        ),
        (["."], "screen", "needs a terminal"),
        (["--asci"], "--asci", "did you mean --ascii?"),
        (["--gain", "1"], "--gain", "is not an option"),
        (["a\nb\x1b[2J.toml"], "a?b?[2J.toml", "there is no such file"),
    ],
)
def test_words_that_name_no_command(run: Run, words: list[str], where: str, what: str) -> None:
    line = run.refused(*words)
    assert line.startswith(f"{where}: ")
    assert what in line


# --- what cannot be done --------------------------------------------------------------------------


def _bad_files() -> None:
    """Files that cannot be used, each in its own way."""
    Path("folder/empty").mkdir(parents=True)
    Path("bad.toml").write_text("this is not = = toml\n")
    Path("type.toml").write_text(CASE.replace("gain = 1.8", 'gain = "big"'))
    Path("key.toml").write_text(CASE.replace("start = 42.0", "strat = 42.0"))
    Path("reversed.toml").write_text(CASE.replace("high = 250.0", "high = -250.0"))
    Path("scan.toml").write_text(CASE.replace('scan = "1 s"', 'scan = "0 s"'))
    Path("bytes.toml").write_bytes(b"\xff\xfe\x00\x01")
    Path("empty.toml").write_text("")
    Path("noplant.toml").write_text('format = 1\n\n[loop]\ntag = "A"\n')
    Path("plant.toml").write_text(CASE.partition("[controller]")[0])
    Path("empty.csv").write_text("")
    Path("heads.csv").write_text("time_s,pv,op\n")
    Path("words.csv").write_text("time_s,pv,op\n0,1,1\n1,abc,1\n2,1,1\n")
    Path("columns.csv").write_text("a,b,c\n0,1,1\n1,2,1\n")
    Path("days.csv").write_text("time,pv,op\n03/04/2026 10:00:00,1,2\n03/04/2026 10:00:01,1,2\n")
    Path("flat.csv").write_text("time_s,pv,op\n" + "".join(f"{i},{i % 3},5\n" for i in range(30)))


P = ("--plant", PLANT)
G = (*P, "--gain", "1")

BAD = [
    # Files that are not there, are no files, or hold something else.
    ("assess nothere.toml", "nothere.toml: ", "there is no such file"),
    ("assess folder", "folder: is a folder", "name a case file"),
    ("assess bad.toml", "bad.toml:1: ", "is not TOML"),
    ("assess type.toml", "type.toml:19: plant.gain: ", "must be a number, not 'big'"),
    ("assess key.toml", "key.toml:13: op.strat: ", "did you mean 'op.start'?"),
    ("assess reversed.toml", "reversed.toml:9: pv.high: ", "give a high above low"),
    ("assess scan.toml", "scan.toml:27: controller.scan: ", "give a number above 0"),
    ("assess bytes.toml", "bytes.toml:1: ", "save the file as UTF-8"),
    ("assess empty.toml", "empty.toml:1: ", "`workbench check` lists them all"),
    ("assess noplant.toml", "noplant.toml: ", "no plant yet"),
    ("predict plant.toml", "plant.toml: ", "--set controller.gain=1"),
    ("propose noplant.toml", "noplant.toml: ", "no plant yet"),
    ("history bad.toml", "bad.toml:1: ", "is not TOML"),
    ("history oven.toml --between 1 2", "oven.toml: ", "has no history entries"),
    ("history old.toml --between 1 3", "--between: ", "from 1 to 2"),
    ("check nothere", "nothere: ", "there is no such file or folder"),
    ("check oven.toml nothere.toml", "nothere.toml: ", "check the name"),
    ("check folder", "folder: ", "has no case file"),
    ("fit nothere.csv", "nothere.csv: ", "check the name"),
    ("fit folder", "folder: ", "name a CSV file"),
    ("fit empty.csv", "empty.csv: ", "is empty"),
    ("fit heads.csv", "heads.csv: ", "no rows"),
    ("fit words.csv", "words.csv:3: ", "'abc' is not a number"),
    ("fit columns.csv", "columns.csv:1: ", "--time"),
    ("fit flat.csv --pv temp", "flat.csv:1: ", "its columns are time_s, pv, op"),
    ("fit flat.csv --from x", "--from: ", "seconds"),
    ("fit flat.csv --shape second", "--shape: ", "did you mean 'second-order'?"),
    ("fit flat.csv --noise-model pink", "--noise-model: ", "auto, white or correlated"),
    ("fit flat.csv flat.csv --follow", "--follow: ", "leave the other records out"),
    ("fit flat.csv --every 2", "--every: ", "add --follow"),
    ("fit flat.csv --certainty 0", "--certainty: ", "a number above 0"),
    ("fit flat.csv --leave-out 5", "--leave-out: ", "--leave-out FROM TO"),
    ("fit flat.csv --leave-out 5 3", "--leave-out: ", "the earlier moment first"),
    ("fit flat.csv --leave-out 900 950", "--leave-out: ", "the rows used run from"),
    ("fit flat.csv --dates backwards", "--dates: ", "use day-first"),
    ("fit flat.csv --decimal dot", "--decimal: ", "use point or comma"),
    ("fit days.csv", "days.csv:2: ", "say --dates day-first or --dates month-first"),
    # Options of a loop.
    ("assess", "assess: ", "name a case file, or give a plant"),
    (("assess", "--scan", "1 s"), "--plant: ", "is missing"),
    ("assess oven.toml --gain 1", "--gain: ", "--set key=value"),
    (("assess", *P, "--set", "controller.gain=1"), "--set: ", "name a case file"),
    (("assess", "--plant", '__import__("os").system("ls")'), "--plant: column 1: ", "use s"),
    (("assess", "--plant", "1/2s"), "--plant: column 4: ", "brackets"),
    (("assess", "--plant", "1,8/(s+1)"), "--plant: column 2: ", "decimal comma"),
    (("assess", *P, "--load", "exp(2 s)"), "--load: column 4: ", "time advance"),
    (("assess", *P, "--time-unit", "d"), "--time-unit: ", "s, min or h"),
    (("assess", *P, "--gain", "x"), "--gain: ", "must be a number"),
    (("assess", *P, "--gain", "1,5"), "--gain: ", "decimal comma"),
    (("assess", *P, "--gain", "nan"), "--gain: ", "finite"),
    (("assess", *P, "--gain", "-1"), "--gain: ", "--action"),
    (("assess", *P, "--gain", "0"), "--gain: ", "parallel form"),
    (("assess", *G, "--proportional-band", "9"), "--proportional-band: ", "keep one"),
    (("assess", *P, "--integral", "3 s"), "--gain: ", "beside --integral"),
    (("assess", *G, "--integral", "2 1/s"), "--integral: ", "ideal form"),
    (("assess", *G, "--form", "idel"), "--form: ", "did you mean 'ideal'?"),
    (("assess", *G, "--scan", "0 s"), "--scan: ", "above 0"),
    (("assess", *G, "--scan", "1"), "--scan: ", "has no unit"),
    (("assess", *G, "--scan", "1,5 s"), "--scan: ", "decimal comma"),
    (("assess", *G, "--computing-delay", "1 s"), "--computing-delay: ", "give a scan"),
    (("assess", *P, "--pv-range", "100:0"), "--pv-range: ", "give a high above low"),
    (("assess", *P, "--pv-range", "0,5:3"), "--pv-range: ", "decimal comma"),
    (("assess", *P, "--op-limits", "90:10"), "--op-limits: ", "larger max"),
    (("assess", *P, "--start", "500:3"), "--start: ", "outside the range"),
    (("assess", "--plant", "2/(9 s - 1)", "--gain", "1"), "--action: ", "unstable"),
    # Options beside a case.
    ("assess oven.toml --set controller.gain=x", "--set controller.gain: ", "must be a number"),
    ("assess oven.toml --set controller.gian=2", "--set controller.gian: ", "controller.gain"),
    (("assess", "oven.toml", "--set", "controller.scan=0 s"), "--set controller.scan: ", "above"),
    # Options of one command.
    (("predict", *P), "--gain: ", "a prediction needs a controller"),
    (("predict", "oven.toml", "--until", "0 s"), "--until: ", "above 0"),
    ("predict oven.toml --seed -1", "--seed: ", "whole number"),
    ("predict oven.toml --noise -1", "--noise: ", "at least 0"),
    ("predict oven.toml --setpoint-step 1e999", "--setpoint-step: ", "finite"),
    ("predict oven.toml --trend folder", "--trend: folder is a folder", "name the file"),
    ("predict oven.toml --trend oven.toml", "--trend: ", "has the name of a case file"),
    ("predict oven.toml --trend no/such/t.csv", "--trend: ", "a folder that is not there"),
    ("predict oven.toml --trend /dev/null", "--trend: ", "is no plain file"),
    ("propose oven.toml --method simc", "--method: ", "did you mean 'simc-pi'?"),
    ("propose oven.toml --for both", "--for: ", "load or setpoint"),
    ("propose oven.toml --closed-loop-time 30", "--closed-loop-time: ", "has no unit"),
    ("propose oven.toml --relay 5:1", "--relay: ", "5:1.2:36 s"),
    ("propose oven.toml --max-noise-gain 0", "--max-noise-gain: ", "above 0"),
    ("propose oven.toml --for load --setpoint-share 3", "--setpoint-share: ", "keep one"),
    ("propose oven.toml --largest-upset 0", "--largest-upset: ", "above 0"),
    ("propose oven.toml --allowed-deviation -1", "--allowed-deviation: ", "above 0"),
    ("propose oven.toml --max-sensitivity 0.5", "--max-sensitivity: ", "above 1"),
    ("convert oven.toml", "--to: ", "ideal, parallel or series"),
    ("convert oven.toml --to idel", "--to: ", "did you mean ideal?"),
    ("convert plant.toml --to series", "plant.toml: ", "a conversion needs a controller"),
    ("convert --to series", "--gain: ", "a conversion needs a controller"),
    ("convert oven.toml --to parallel --integral-as s", "--integral-as: ", "1/s or 1/min"),
    ("convert oven.toml --to series --integral-as 1/s", "--integral-as: ", "the series form"),
    ("convert oven.toml --to series --gain-as PB", "--gain-as: ", "gain or band"),
    ("convert oven.toml --to series --derivative-as ms", "--derivative-as: ", "s, min or h"),
    ("convert oven.toml --to series --gain 1", "--gain: ", "--set key=value"),
    ("new ../x", "TAG: ", "cannot be a file's name"),
    ("new a/b", "TAG: ", "cannot be a file's name"),
    ("new .x", "TAG: ", "cannot be a file's name"),
    ("new -- -x", "TAG: ", "taken for an option"),
    ("new x.toml", "TAG: ", "ends in .toml"),
    ("new oven", "oven.toml: ", "already"),
    ("new A --pv-range 5:1", "--pv-range: ", "give a high above low"),
]


@pytest.mark.parametrize("asked", [(), ("--json",)], ids=["text", "json"])
@pytest.mark.parametrize(
    ("words", "where", "what"), BAD, ids=lambda value: str(value)[:50] if value else None
)
def test_what_cannot_be_done_is_one_line(
    run: Run, words: str | tuple[str, ...], where: str, what: str, asked: tuple[str, ...]
) -> None:
    _bad_files()
    before = {path: path.read_bytes() for path in Path().rglob("*") if path.is_file()}
    command, *rest = words.split() if isinstance(words, str) else words
    line = run.refused(command, *asked, *rest)
    assert line.startswith(where)
    assert what in line
    # What is wrong, then what would mend it.
    assert "; " in line
    assert before == {path: path.read_bytes() for path in Path().rglob("*") if path.is_file()}


def test_every_fault_of_a_file_is_counted(run: Run) -> None:
    Path("two.toml").write_text(CASE.replace("gain = ", "gian = "))
    line = run.refused("assess", "two.toml")
    assert line.endswith("more; `workbench check` lists them all)")


def test_a_defect_of_the_program_is_told_without_a_traceback(
    run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(given: object) -> Answer:
        raise ZeroDivisionError("division\nby zero")

    monkeypatch.setitem(cli.VERBS, "assess", broken)
    done = run("assess", "oven.toml")
    assert (done.status, done.out) == (2, "")
    assert done.err.startswith("workbench: test_cli.py:")
    assert "ZeroDivisionError: division?by zero; this is a fault of the program" in done.err
    assert done.err.count("\n") == 1


def test_too_little_memory_is_told(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    def huge(given: object) -> Answer:
        raise MemoryError

    monkeypatch.setitem(cli.VERBS, "assess", huge)
    assert run.refused("assess", "oven.toml").startswith("assess: needs more memory")


# --- what is done ---------------------------------------------------------------------------------

LOOP_KEYS = {
    "stable",
    "gain_margin",
    "gain_margin_lower",
    "phase_margin_deg",
    "delay_margin_s",
    "max_sensitivity",
    "max_complementary_sensitivity",
    "gain_crossover_rad_s",
    "phase_crossover_rad_s",
    "final_pv_after_setpoint_step",
    "final_pv_after_load_step",
}
PREDICT_KEYS = {
    "setpoint": {"iae", "overshoot_percent", "rise_time_s", "settling_time_s"},
    "load": {"iae", "peak_deviation", "settling_time_s"},
    "output": {"travel", "reversals", "time_at_limit_s"},
    "final": {"pv", "op"},
    "floor": {"peak_deviation", "load_iae"},
}


def nulls_have_reasons(value: object, where: str = "") -> None:
    """Every figure that is not there says why, beside it."""
    if isinstance(value, dict):
        for key, one in value.items():
            if one is None:
                assert value.get(f"{key}_reason"), f"{where}.{key} is null without a reason"
            nulls_have_reasons(one, f"{where}.{key}")
    elif isinstance(value, list):
        for one in value:
            nulls_have_reasons(one, f"{where}[]")


def answer(done: Done, status: int = 0) -> Any:
    assert (done.status, done.err) == (status, "")
    data = done.data
    nulls_have_reasons(data)
    return data


@pytest.mark.parametrize(
    "words",
    [("oven.toml",), LOOP, (*P, "--gain", "1"), P],
    ids=["case", "scan", "analogue", "plant"],
)
def test_assess_keeps_its_keys(run: Run, words: tuple[str, ...]) -> None:
    data = answer(run("assess", *words, "--json"))
    assert set(data["plant"]) >= {
        "formula",
        "gain",
        "slope_per_s",
        "stable",
        "integrating",
        "poles",
        "zeros",
        "dead_time_s",
    }
    # Exact: the pole of 1/(40 s + 1) and the dead time as typed.
    assert data["plant"]["poles"] == [[pytest.approx(-1 / 40), 0.0]]
    assert (data["plant"]["gain"], data["plant"]["dead_time_s"]) == (1.8, 6.0)
    for key in ("loop", "sampled"):
        assert data[key] is None or set(data[key]) >= LOOP_KEYS
    assert (data["loop"] is None) == (words == P)
    assert (data["sampled"] is None) == (words in (P, (*P, "--gain", "1")))
    assert data["units"]["pv"] == ("degC" if words == ("oven.toml",) else "%")
    assert data["units"]["op"] == "%"


def test_a_case_and_the_same_loop_by_options_agree(run: Run) -> None:
    file = answer(run("assess", "oven.toml", "--json"))
    typed = answer(
        run(
            *("assess", *LOOP, "--json", "--pv-range", "0:250", "--op-limits", "5:95"),
            *("--start", "120:42"),
        )
    )
    assert file["sampled"] == typed["sampled"]
    assert file["plant"] == typed["plant"]


def test_values_with_a_minus_reach_the_loop(run: Run) -> None:
    data = answer(
        run("assess", "--plant", "-2/(3 s+1)", "--pv-range", "-50:150", "--gain=4", "--json")
    )
    assert data["plant"]["gain"] == -2.0
    assert data["action"] == "direct"
    # Exact: loop gain 4 x 2 x 100/200 = 4, so a setpoint step of 1 ends at 4/5.
    assert data["loop"]["final_pv_after_setpoint_step"] == pytest.approx(0.8)
    done = run("predict", "oven.toml", "--setpoint-step", "-2", "--json")
    assert answer(done)["final"]["pv"] == pytest.approx(118.0, abs=0.1)


def test_set_changes_one_key_for_this_run_only(run: Run) -> None:
    before = Path("oven.toml").read_bytes()
    changed = answer(run("assess", "oven.toml", "--set", "controller.gain=2.2", "--json"))
    plain = answer(run("assess", "oven.toml", "--json"))
    # Exact: margins are ratios, so twice the gain is half the gain margin.
    margin = changed["loop"]["gain_margin"]
    assert margin == pytest.approx(plain["loop"]["gain_margin"] / 2, rel=1e-6)
    assert Path("oven.toml").read_bytes() == before


def test_an_unstable_loop_is_answered_with_status_1(run: Run) -> None:
    data = answer(run("assess", *P, "--gain", "10", "--json"), status=1)
    assert data["loop"]["stable"] is False
    assert data["loop"]["stable_reason"]
    assert data["loop"]["gain_margin"] is None
    done = run("assess", *P, "--gain", "10")
    assert (done.status, done.err) == (1, "")
    assert "NO: " in done.out
    data = answer(run("predict", *P, "--gain", "10", "--json"), status=1)
    assert data["stable"] is False
    assert data["stable_reason"].startswith("the analogue loop: ")


def test_a_loop_that_only_the_scan_upsets_is_answered_with_status_1(run: Run) -> None:
    # 1/(s + 1) with gain 5: analogue always stable; held for 2 s it alternates and grows
    # (exact: pole exp(-2) - 5 (1 - exp(-2)) = -4.19).
    words = ("assess", "--plant", "1/(s+1)", "--gain", "5", "--scan", "2 s", "--json")
    data = answer(run(*words), status=1)
    assert (data["loop"]["stable"], data["sampled"]["stable"]) == (True, False)


ONE_LINE = {
    "formula": "1.8 exp(-6 s)/(40 s + 1)",
    "shape": "first-order gain=1.8, time_constant=40 s, dead_time=6 s",
    "blocks": "valve: 1.8 exp(-6 s); process: first-order gain=1, time_constant=40 s",
}
"""The same plant in each of the ways to type it."""


@pytest.mark.parametrize("command", ["assess", "predict", "propose", "respond"])
def test_every_command_takes_a_plant_in_each_of_its_ways(run: Run, command: str) -> None:
    settings = () if command == "respond" else ("--gain", "1.1", "--integral", "32 s")
    found = [answer(run(command, "--plant", p, *settings, "--json")) for p in ONE_LINE.values()]
    assert found[0] == found[1] == found[2]


def test_a_drawn_plant_goes_into_a_new_file_and_out_again(run: Run) -> None:
    line = "valve: 1/(2 s + 1); process: 1.8/(40 s + 1); positioner around valve: 3"
    assert run("new", "TIC-903", "--plant", line, "--time-unit", "min", "--gain", "1").status == 0
    assert Path("TIC-903.toml").read_text().count("[[plant.block]]") == 3
    data = answer(run("assess", "TIC-903.toml", "--json"))
    # exact: 1/(1 + 3) times 1.8
    assert data["plant"]["gain"] == pytest.approx(0.45, rel=1e-12)
    changed = ("--set", "plant.block.positioner.formula=1", "--json")
    assert answer(run("assess", "TIC-903.toml", *changed))["plant"]["gain"] == pytest.approx(0.9)


@pytest.mark.parametrize(
    ("words", "where", "what"),
    [
        (("assess", "--plant", "valve: 1/("), "--plant: ", "block 'valve': column 3"),
        (("assess", "--plant", "first-order gain=1"), "--plant: ", "lacks time_constant"),
        (("assess", "--plant", "vessel volume=0, flow=1 /s"), "--plant: ", "volume: 0 is"),
        (("predict", "--plant", "a: 1", "--gain", "1", "--load", "1/("), "--load: ", "column 3"),
        (
            ("assess", "oven.toml", "--set", "plant.load_before=x"),
            "--set plant.load_before",
            "needs",
        ),
        (("respond", *P, "--at", "-1 s"), "--at: ", "is below 0"),
        (("respond", *P, "--width", "0 s"), "--width: ", "is not above 0"),
        (("respond", *P, "--size", "big"), "--size: ", "give a number"),
        (("respond", *P, "--input", "stpe"), "--input: ", "did you mean step?"),
        (("respond", *P, "--record", "oven.csv", "--until", "9 s"), "--until: ", "beside --record"),
        (("respond", *P, "--op", "x"), "--op: ", "without --record"),
        (("respond", *P, "--record", "nothere.csv"), "nothere.csv: ", "is not there"),
        (("respond", "--plant", "2", "--input", "impulse"), "respond: ", "infinite spike"),
        (("respond", "--plant", "1/(s - 1)", "--until", "9 h"), "respond: ", "beyond every number"),
    ],
)
def test_a_plant_or_a_response_that_cannot_be_is_one_line(
    run: Run, words: tuple[str, ...], where: str, what: str
) -> None:
    line = run.refused(*words)
    assert where in line
    assert what in line


def test_a_delayed_inner_feedback_is_judged_and_predicted(run: Run) -> None:
    line = "valve: 1/(2 s + 1); process: exp(-6 s)/(40 s + 1); slave around valve to process: 0.3"
    words = ("--plant", line, "--gain", "1", "--integral", "40 s", "--scan", "1 s")
    data = answer(run("assess", *words, "--json"))
    assert data["sampled"]["stable"]
    assert data["plant"]["poles"] is None
    assert data["loop"]["stable"]
    assert "Loop, sampled" in run("assess", *words).out
    assert run("predict", *words).status == 0
    assert run("propose", *words, "--json").status == 0


def test_assess_maps_what_plant_error_the_loop_survives(run: Run) -> None:
    words = ("--plant", "1.8 exp(-6 s)/(40 s + 1)", "--gain", "1.1", "--integral", "32 s")
    data = answer(run("assess", *words, "--tolerance", "dead-time", "--json"))
    found, margins = data["tolerance"], data["loop"]
    # exact: the gain margin, and 1 + delay margin/dead time
    grows = found["gain_grows"]["until_unstable"]
    assert grows == pytest.approx(margins["gain_margin"], rel=1e-4)
    late = found["dead_time_grows"]["until_unstable"]
    assert late == pytest.approx(1.0 + margins["delay_margin_s"] / 6.0, rel=1e-4)
    rows, columns = len(found["dead_time_ratios"]), len(found["gain_ratios"])
    assert [len(row) for row in found["max_sensitivity"]] == [columns] * rows
    for stable, peaks in zip(found["stable"], found["max_sensitivity"], strict=True):
        assert [peak is not None for peak in peaks] == stable
    assert found["max_sensitivity_limit"] == 2.0
    assert data["family"] is None
    text = run("assess", *words, "--tolerance", "lag", "--max-sensitivity", "1.6").out
    assert "plant gain across, lag upwards" in text
    assert "Ms 1.6 at" in text
    assert "add it" in run.refused("assess", *words, "--max-sensitivity", "1.6")
    assert "--gain" in run.refused("assess", *words[:2], "--tolerance", "lag")
    instant = run.refused(
        "assess", "--plant", "2/(9 s+1)", "--gain", "2", "--tolerance", "dead-time"
    )
    assert "--tolerance: the plant has no dead time" in instant


def test_every_figure_is_given_over_the_family(run: Run) -> None:
    words = ("--set", "family.gain=30", "--set", "family.drawn=7")
    case = str(Path(__file__).parents[2] / "cases" / "TIC-307.toml")
    margins = answer(run("assess", case, *words, "--json"))["family"]
    # exact: 1 nominal, 2 corners, 7 drawn
    assert (margins["plants"], margins["stable_percent"]) == (10, 100.0)
    nominal, worst = margins["gain_margin"], margins["gain_margin_worst"]
    assert worst == pytest.approx(nominal / 1.3, rel=1e-6)
    predicted = answer(run("predict", case, *words, "--json"))["family"]
    assert predicted["load_iae_95"] <= predicted["load_iae_worst"]
    assert predicted["max_sensitivity_worst"] == margins["max_sensitivity_worst"]
    proposed = answer(run("propose", case, *words, "--method", "simc-pi", "--json"))
    assert proposed["proposals"][0]["family_stable_percent"] == 100.0
    assert "Over the family of plants" in run("propose", case, *words, "--method", "simc-pi").out


def test_assess_tells_gains_both_ways_valve_distance_and_small_models(run: Run) -> None:
    words = ("--plant", "2/((40 s + 1)(8 s + 1)(2 s + 1))", "--gain", "1.5", "--pv-range", "0:50")
    data = answer(run("assess", *words, "--small-models", "--json"))
    # exact: 2 times 100/50, 1.5 times 100/50, and the half rule's 1.8 of 40 s + 8 s / 2
    assert data["plant"]["gain_percent_per_percent"] == 4.0
    assert (data["loop"]["gain"], data["loop"]["gain_op_per_pv"]) == (1.5, 3.0)
    assert data["plant"]["small_models"][0]["formula"] == "2 exp(-6 s)/(44 s + 1)"
    assert data["valve"] == {"meaning": "signal", "closes_on_rise": False}
    assert "small_models" not in answer(run("assess", *words, "--json"))["plant"]
    text = run("assess", *words, "--small-models").out
    for said in (
        "one lag, half rule",
        "4 in percent of both spans",
        "at its limit if the loop gain",
    ):
        assert said in text
    assert "integrating: PV moves 0.8 %/min" in run("assess", "--plant", "0.8/(60 s)").out


def test_an_air_to_close_valve_is_no_fault(run: Run) -> None:
    data = answer(run("assess", "oven.toml", "--set", "op.valve_closes_on_rise=true", "--json"))
    assert data["valve"] == {"meaning": "signal", "closes_on_rise": True}


@pytest.mark.parametrize(
    ("words", "final", "peak"),
    [
        # exact: 1.8 exp(-6 s)/(40 s + 1) at s = 0, its response after 234 s, its slope at first
        ((), 1.8, None),
        (("--size", "-2"), -3.6, None),
        (("--input", "pulse", "--width", "10 s"), 0.0, 1.8 * (1 - math.exp(-0.25))),
        (("--input", "impulse"), 0.0, 0.045),
        (("--input", "doublet", "--width", "9 s", "--at", "5 s"), 0.0, None),
    ],
)
def test_respond_tells_final_value_and_peak(
    run: Run, words: tuple[str, ...], final: float, peak: float | None
) -> None:
    data = answer(run("respond", *P, *words, "--json"))
    assert data["final_value"] == pytest.approx(final, abs=1e-12)
    assert peak is None or data["peak"] == pytest.approx(peak, rel=1e-6)
    assert "final change of PV" in run("respond", *P, *words).out


def test_respond_writes_a_trend_that_is_exact(run: Run) -> None:
    done = run("respond", *P, "--until", "100 s", "--trend", "t.csv", "--json")
    assert answer(done)["until_s"] == 100.0
    lines = Path("t.csv").read_text().splitlines()
    assert lines[0] == "time_s,op,pv"
    for line in lines[1::50]:
        t, op, pv = map(float, line.split(","))
        # exact
        assert op == 1.0
        assert pv == pytest.approx(1.8 * -math.expm1(-max(0.0, t - 6) / 40), abs=1e-12)


def test_respond_answers_a_record_and_a_growing_plant(run: Run) -> None:
    Path("r.csv").write_text(
        "time_s,pv,valve\n" + "".join(f"{t},0,{5 + (t > 3)}\n" for t in range(99))
    )
    data = answer(run("respond", *P, "--record", "r.csv", "--op", "valve", "--json"))
    assert (data["input"], data["final_value"]) == ("record", None)
    # exact: 1 step at 4 s, over 98 - 4 - 6 s
    assert data["last_value"] == pytest.approx(1.8 * -math.expm1(-88 / 40), rel=1e-12)
    data = answer(run("respond", "--plant", "1/(9 s - 1)", "--json"))
    assert "grows without end" in data["final_value_reason"]
    assert "without end" in data["peak_reason"]
    assert "OP as recorded" in run("respond", *P, "--record", "r.csv", "--op", "valve").out


def test_predict_keeps_its_keys(run: Run) -> None:
    for words in (("oven.toml",), LOOP, (*P, "--gain", "1", "--load-step", "3")):
        data = answer(run("predict", *words, "--json"))
        for group, keys in PREDICT_KEYS.items():
            assert set(data[group]) >= keys
        assert data["scenario"]["until_s"] > 0


def test_predict_writes_the_trend_whole(run: Run) -> None:
    Path("t.csv").write_text("old")
    done = run("predict", "oven.toml", "--trend", "t.csv", "--until", "100 s", "--json")
    assert done.status == 0
    lines = Path("t.csv").read_text().splitlines()
    assert lines[0] == "time_s,sp,pv,op"
    rows = [[float(cell) for cell in line.split(",")] for line in lines[1:]]
    assert len(rows) >= 100
    times = [row[0] for row in rows]
    assert times == sorted(times)
    # A row at every scan of 1 s, or finer, from the start to the end.
    assert set(range(101)) <= set(times)
    # Absolute: it starts at rest, at 120 degC, with the setpoint 5 % of the span above.
    assert rows[0][1:3] == [132.5, 120.0]
    assert not list(Path().glob("*.part"))
    assert not list(Path().glob(".*.part"))


def test_noise_comes_from_the_seed_alone(run: Run) -> None:
    words = ("predict", "oven.toml", "--until", "60 s", "--noise", "0.5", "--trend", "t.csv")
    seen = []
    for seed in ("1", "1", "2"):
        assert run(*words, "--seed", seed).status == 0
        seen.append(Path("t.csv").read_text())
    assert seen[0] == seen[1] != seen[2]


def _record(rows: int = 240) -> str:
    """PV of 2 exp(-5 s)/(20 s + 1), invented, for an OP step of 5 at 30 s."""
    from math import exp

    lines = ["time_s,pv,op"]
    for t in range(rows):
        since = t - 35
        pv = 50 + 10 * (1 - exp(-since / 20)) if since > 0 else 50.0
        # A fixed ripple stands for noise.
        lines.append(f"{t},{pv + 0.02 * ((t * 7919) % 11 - 5):.4f},{45 if t >= 30 else 40}")
    return "\n".join(lines) + "\n"


def test_fit_keeps_its_keys(run: Run) -> None:
    Path("bump.csv").write_text(_record())
    data = answer(run("fit", "bump.csv", "--json"))
    assert data["chosen"] == "first-order"
    assert isinstance(data["warnings"], list)
    best = next(one for one in data["candidates"] if one["shape"] == data["chosen"])
    assert set(best) >= {
        "shape",
        "formula",
        "gain",
        "dead_time_s",
        "time_constants_s",
        "natural_period_s",
        "damping",
        "standard_errors",
        "interval_95",
        "agreement_percent",
        "bic",
    }
    assert set(best["standard_errors"]) == {"gain", "dead_time_s", "time_constants_s"}
    assert set(best["interval_95"]) == {"gain", "dead_time_s", "time_constants_s"}
    # Exact: the values that the record was made with.
    assert best["gain"] == pytest.approx(2.0, rel=0.02)
    assert best["dead_time_s"] == pytest.approx(5.0, abs=0.5)
    assert best["time_constants_s"] == [pytest.approx(20.0, rel=0.05)]
    slope = next(one for one in data["candidates"] if one["shape"] == "integrating")
    assert "slope_per_s" in slope
    assert "gain" not in slope


def test_fit_finds_columns_and_times_as_named(run: Run) -> None:
    Path("bump.csv").write_text(_record().replace("time_s,pv,op", "clock,temp,valve"))
    words = ("fit", "bump.csv", "--time=clock", "--pv=temp", "--op=valve", "--from=20", "--to=200")
    done = run(*words, "--shape", "first-order", "--noise-model", "white", "--no-drift")
    assert (done.status, done.err) == (0, "")
    assert "181 rows" in done.out
    assert "first-order (chosen)" in done.out


def test_fit_takes_several_records_and_leaves_windows_out(run: Run) -> None:
    Path("one.csv").write_text(_record())
    Path("two.csv").write_text(_record())
    words = ("fit", "one.csv", "two.csv", "--leave-out", "0", "9", "--leave-out", "200", "209")
    data = json.loads(run(*words, "--shape", "first-order", "--json").out)
    # Exact: each record has 240 rows, and 10 of them are left out in each window.
    assert data["rows"] == 2 * (240 - 20)
    assert len([w for w in data["warnings"] if "10 rows left out as asked" in w]) == 4
    # Exact: the bump that both records were made with, in each.
    assert [bump["op_after"] for bump in data["bumps"]] == [45.0, 45.0]
    assert [bump["op_before"] for bump in data["bumps"]] == [40.0, 40.0]


def test_a_certainty_asked_for_is_answered(run: Run) -> None:
    Path("bump.csv").write_text(_record())
    done = answer(run("fit", "bump.csv", "--certainty", "5", "--json"))
    assert done["advice"]["reached"] is True
    assert done["advice"]["certainty_percent"] < 5.0
    never = answer(run("fit", "bump.csv", "--certainty", "0.0001", "--json"), status=1)
    assert never["advice"]["reached"] is False
    assert never["advice"]["wanted_percent"] == 0.0001


def test_a_followed_record_is_answered_once_nothing_more_comes(run: Run) -> None:
    Path("bump.csv").write_text(_record())
    words = ("fit", "bump.csv", "--shape", "first-order", "--json")
    done = run(*words, "--follow", "--every", "0.1 s", "--idle", "0.2 s")
    assert done.status == 0
    assert "240 rows" in done.err
    followed, offline = json.loads(done.out), answer(run(*words))
    assert followed["candidates"] == offline["candidates"]
    assert followed["sha256"] == offline["sha256"]
    Path("bump.csv").write_text("time_s,pv,op\n")
    done = run(*words, "--follow", "--every", "0.1 s", "--idle", "0.2 s")
    assert done.status == 2
    assert "has headings and no rows" in done.err


def test_a_record_that_cannot_tell_is_answered_with_status_1(run: Run) -> None:
    _bad_files()
    data = answer(run("fit", "flat.csv", "--json"), status=1)
    assert data["chosen"] is None
    assert "OP never moved" in data["chosen_reason"]
    done = run("fit", "flat.csv")
    assert (done.status, done.err) == (1, "")
    assert "No model is chosen." in done.out


PROPOSAL_KEYS = {
    "method",
    "source",
    "form",
    "gain",
    "integral_s",
    "derivative_s",
    "max_sensitivity",
    "phase_margin_deg",
    "setpoint_iae",
    "load_iae",
    "applies",
    "reason",
}


def test_propose_keeps_its_keys(run: Run) -> None:
    data = answer(run("propose", "oven.toml", "--json"))
    assert all(set(row) >= PROPOSAL_KEYS for row in data["proposals"])
    present = data["proposals"][0]
    assert (present["method"], present["gain"], present["integral_s"]) == ("present", 1.1, 32.0)
    assert present["derivative_s"] == 0.0
    assert any(row["applies"] for row in data["proposals"][1:])


def test_propose_takes_a_relay_test_and_the_needs_of_a_level(run: Run) -> None:
    words = ("--method", "ziegler-nichols-ultimate-p", "--relay", "5:2:36 s")
    row = answer(run("propose", *P, *words, "--json"))["proposals"][-1]
    # exact: 0.5 4 5/(pi 2)
    assert row["gain"] == pytest.approx(5 / math.pi, rel=1e-12)
    assert "quarter" in row["objective"]
    assert "180" in row["limits"]
    level = ("--plant", "0.001/s", "--method", "averaging-level-p")
    needs = ("--largest-upset", "20", "--allowed-deviation", "10")
    row = answer(run("propose", *level, *needs, "--json"))["proposals"][-1]
    # exact: 20/10
    assert row["gain"] == pytest.approx(2.0, rel=1e-12)
    assert run("propose", *level).status == 1


def test_propose_keeps_limits_and_shows_what_caution_costs(run: Run) -> None:
    words = ("--method", "best-pi", "--max-noise-gain", "4", "--setpoint-share", "30")
    data = answer(run("propose", *P, *words, "--trade-off", "--json"))
    row = data["proposals"][-1]
    assert row["within_limit"]
    assert row["noise_gain"] <= 4.0 * 1.001
    assert "30 % setpoint IAE and 70 % load IAE" in row["objective"]
    assert data["units"]["noise_gain"] == "%/%"
    pi, pid = data["trade_off"]
    assert (pi["method"], pid["method"]) == ("best-pi", "best-pid")
    limits = [point["max_sensitivity_limit"] for point in pi["points"]]
    assert limits == sorted(limits)
    assert len(limits) >= 10
    for point in pi["points"]:
        assert point["max_sensitivity"] <= 1.001 * point["max_sensitivity_limit"]
        assert point["noise_gain"] <= 4.0 * 1.001
    said = run("propose", *P, *words, "--trade-off").out
    assert "Trade-off between speed and caution" in said


def test_propose_needs_no_controller(run: Run) -> None:
    data = answer(run("propose", *P, "--json"))
    assert not data["proposals"][0]["applies"]
    sampled = answer(run("propose", *P, "--scan", "5 s", "--method", "simc-pi", "--json"))
    assert [row["method"] for row in sampled["proposals"]] == ["simc-pi"]
    analogue = next(row for row in data["proposals"] if row["method"] == "simc-pi")
    # The scan takes phase, so the same settings leave the sampled loop less.
    assert sampled["proposals"][0]["phase_margin_deg"] < analogue["phase_margin_deg"]


def test_propose_says_no_where_no_rule_applies_or_the_limit_is_not_met(run: Run) -> None:
    done = run("propose", *P, "--method", "simc-pid", "--json")
    assert not answer(done, status=1)["proposals"][-1]["applies"]
    # A search keeps any limit; a published rule does not know of it.
    asked = ("--method", "simc-pi", "--max-sensitivity", "1.01")
    done = run("propose", "oven.toml", *asked, "--json")
    assert not any(row["within_limit"] for row in answer(done, status=1)["proposals"])
    assert run("propose", "oven.toml", "--method", "present").status == 0


CONVERT_KEYS = (
    "form",
    "gain",
    "integral",
    "derivative",
    "derivative_filter",
    "setpoint_weight",
    "exact",
)
IDEAL = ("--gain", "2", "--integral", "24 s", "--derivative", "6 s", "--derivative-filter", "none")


def test_convert_keeps_its_keys_and_needs_no_plant(run: Run) -> None:
    data = answer(run("convert", "--to", "series", *IDEAL, "--json"))
    # published rule (K.J. Astrom and T. Hagglund, PID Controllers, 1995, from memory), recomputed
    assert {key: data[key] for key in CONVERT_KEYS} == {
        "form": "series",
        "gain": 1.0,
        "integral": "12 s",
        "derivative": "12 s",
        "derivative_filter": "none",
        "setpoint_weight": 1.0,
        "exact": True,
    }
    assert (data["integral_s"], data["derivative_s"], data["derivative_filter_s"]) == (12, 12, 0)
    assert "setpoint weight of 2" in data["notes"][0]["text"]


def test_convert_writes_the_units_asked_for(run: Run) -> None:
    units = ("--gain-as", "band", "--integral-as", "1/s", "--derivative-as", "min")
    data = answer(run("convert", "--to", "parallel", *IDEAL, *units, "--json"))
    # exact: 100/2 %, 2/24 1/s, 2 6 s
    assert (data["gain"], data["proportional_band"]) == (2.0, 50.0)
    assert float(data["integral"].removesuffix(" 1/s")) == pytest.approx(2 / 24)
    assert data["derivative"] == "0.2 min"
    done = run("convert", "oven.toml", "--to", "ideal", "--integral-as", "repeats/min")
    # exact: 60/32
    assert re.search(r"^  integral +1\.875 repeats/min$", done.out, re.MULTILINE)


def test_settings_that_a_form_cannot_hold_are_answered_with_status_1(run: Run) -> None:
    shorter = ("20 s" if word == "24 s" else word for word in IDEAL)
    words = ("convert", "--to", "series", *shorter)
    data = answer(run(*words, "--json"), status=1)
    assert (data["gain"], data["exact"]) == (None, False)
    assert "at most 5 s" in data["reason"]
    done = run(*words)
    assert done.status == 1
    assert "refused" in done.out


def test_check_lists_every_fault(run: Run) -> None:
    Path("below").mkdir()
    Path("below/two.toml").write_text(
        CASE.replace("gain = 1.8", 'gain = "big"').replace('scan = "1 s"', "scan = 1")
    )
    data = answer(run("check", ".", "--json"), status=1)
    assert [file["path"] for file in data["files"]] == ["below/two.toml", "old.toml", "oven.toml"]
    assert [file["ok"] for file in data["files"]] == [False, True, True]
    faults = data["files"][0]["faults"]
    assert [(fault["line"], fault["key"]) for fault in faults] == [
        (19, "plant.gain"),
        (27, "controller.scan"),
    ]
    assert all(fault["what"] and fault["mend"] for fault in faults)
    done = run("check", "below", "oven.toml")
    assert (done.status, done.err) == (1, "")
    assert "1 of 2 files are sound." in done.out
    assert run("check", "oven.toml").out == "oven.toml: sound\n"
    assert answer(run("check", "oven.toml", "old.toml", "--json"))["files"][1]["ok"]


def test_history_is_newest_first_and_numbered_from_the_oldest(run: Run) -> None:
    data = answer(run("history", "old.toml", "--json"))
    assert [(entry["number"], entry["who"]) for entry in data["entries"]] == [(2, "cd"), (1, "ab")]
    assert data["entries"][1]["integral"] == "40 s"
    text = run("history", "old.toml").out
    assert text.index("too slow") < text.index("as found")
    assert answer(run("history", "oven.toml", "--json"))["entries"] == []


def test_history_between_tells_what_changed(run: Run) -> None:
    data = answer(run("history", "old.toml", "--between", "1", "2", "--json"))
    assert [entry["number"] for entry in data["entries"]] == [1, 2]
    assert data["changes"] == [
        # exact: 0.3 / 0.8 and -8 / 40
        {"key": "gain", "before": "0.8", "after": "1.1", "change_percent": pytest.approx(37.5)},
        {"key": "integral", "before": "40 s", "after": "32 s", "change_percent": -20.0},
    ]
    assert "0.8 -> 1.1" in run("history", "old.toml", "--between", "1", "2").out


def test_new_writes_a_case_that_is_sound(run: Run) -> None:
    done = run("new", "TIC-902", *LOOP, "--pv-range", "-50:250", "--json")
    assert answer(done) == {"path": "TIC-902.toml", "tag": "TIC-902"}
    assert run("check", "TIC-902.toml").status == 0
    data = answer(run("assess", "TIC-902.toml", "--json"))
    assert data["tag"] == "TIC-902"
    assert data["plant"]["gain"] == 1.8
    done = run("new", "LIC-9")
    assert (done.status, done.err) == (0, "")
    assert "`workbench LIC-9.toml` opens it" in done.out


# --- the ways of a terminal -----------------------------------------------------------------------


class _Terminal:
    """Standard output or error that says it is a terminal."""

    def __init__(self, stream: Any) -> None:
        self.stream = stream

    def isatty(self) -> bool:
        return True

    def __getattr__(self, name: str) -> Any:
        return getattr(self.stream, name)


def test_text_is_wrapped_to_the_terminal(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    widths = {}
    for columns in ("50", "120"):
        monkeypatch.setenv("COLUMNS", columns)
        monkeypatch.setattr(sys, "stdout", _Terminal(sys.stdout))
        widths[columns] = max(len(line) for line in run("predict", "oven.toml").out.splitlines())
    assert widths["50"] <= 50 < widths["120"] <= 120


def test_a_terminal_that_only_knows_ascii_gets_ascii(
    run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    import io

    raw = io.BytesIO()
    monkeypatch.setattr(sys, "stdout", io.TextIOWrapper(raw, encoding="ascii"))
    assert cli.main(["assess", "oven.toml", "--set", "pv.unit=°C"]) == 0
    assert b"1.8 ?C per %" in raw.getvalue()


def test_long_work_shows_its_progress_on_a_terminal_only(
    run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(cli.output, "PROGRESS_EVERY_S", 0.0)
    assert run("check", "oven.toml").err == ""
    monkeypatch.setattr(sys, "stderr", _Terminal(sys.stderr))
    done = run("check", "oven.toml", "old.toml")
    assert "checking" in done.err
    assert done.err.endswith("\r")
    assert done.out.startswith("oven.toml: sound\n")


@pytest.mark.parametrize(
    ("number", "status"), [(signal.SIGINT, 130), (signal.SIGHUP, 129), (signal.SIGTERM, 143)]
)
def test_a_signal_stops_the_work_and_leaves_nothing_half_written(
    run: Run, monkeypatch: pytest.MonkeyPatch, number: signal.Signals, status: int
) -> None:
    real = os.fsync

    def stopped(handle: int) -> None:
        real(handle)
        os.kill(os.getpid(), number)
        time.sleep(5)

    monkeypatch.setattr(os, "fsync", stopped)
    Path("t.csv").write_text("old")
    before = sorted(os.listdir())
    done = run("predict", "oven.toml", "--trend", "t.csv")
    assert (done.status, done.out, done.err) == (status, "", "")
    assert Path("t.csv").read_text() == "old"
    assert sorted(os.listdir()) == before
    # What was there before is there again.
    assert signal.getsignal(signal.SIGTERM) is signal.SIG_DFL


def test_a_signal_that_is_to_be_ignored_is_ignored(
    run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    def hung_up(given: object) -> Answer:
        os.kill(os.getpid(), signal.SIGHUP)
        return Answer("done", {})

    monkeypatch.setitem(cli.VERBS, "assess", hung_up)
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        assert run("assess").out == "done\n"
    finally:
        signal.signal(signal.SIGHUP, before)


# --- the program itself ---------------------------------------------------------------------------

PROGRAM = [sys.executable, "-m", "workbench"]
ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def environment() -> dict[str, str]:
    return {**os.environ, "PYTHONPATH": str(ROOT)}


def test_a_closed_pipe_ends_quietly(environment: dict[str, str]) -> None:
    end, pipe = os.pipe()
    os.close(end)
    done = subprocess.run(
        [*PROGRAM, "assess", *P, "--gain", "10", "--json"],
        stdout=pipe,
        stderr=subprocess.PIPE,
        env=environment,
        timeout=60,
        check=False,
    )
    os.close(pipe)
    # The answer's own status, and no word from the interpreter's last flush.
    assert (done.returncode, done.stderr) == (1, b"")


def test_output_that_cannot_be_written_is_told(environment: dict[str, str]) -> None:
    with open("/dev/full", "w") as full:
        done = subprocess.run(
            [*PROGRAM, "--help"],
            stdout=full,
            stderr=subprocess.PIPE,
            env=environment,
            timeout=60,
            text=True,
            check=False,
        )
    assert done.returncode == 2
    assert done.stderr.startswith("workbench: standard output: cannot be written")
    assert done.stderr.count("\n") == 1


@pytest.mark.parametrize("after", [0.0, 0.03, 0.07, 0.12])
def test_ctrl_c_ends_the_program_without_a_word(
    after: float, environment: dict[str, str], tmp_path: Path
) -> None:
    # At whatever moment: an import cut short once ended by the signal, or as a fault of ours.
    # A record that takes long: no fault is found before the last row.
    record = tmp_path / "long.csv"
    record.write_text(_record(60_000))
    with subprocess.Popen(
        [*PROGRAM, "fit", str(record)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env=environment,
    ) as program:
        # Once numpy is in its memory the program is at work.
        maps = Path(f"/proc/{program.pid}/maps")
        until = time.monotonic() + 30
        while "numpy" not in maps.read_text() and time.monotonic() < until:
            time.sleep(0.01)
        time.sleep(after)
        program.send_signal(signal.SIGINT)
        out, err = program.communicate(timeout=30)
    assert (program.returncode, out, err) == (130, b"", b"")
