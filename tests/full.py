"""The large campaigns: many cases by machine, each judged by another route than the program's own.

`python -m tests.full` runs them at full size and prints one table; `tests/test_full.py` runs the
first few cases of each with every other test.  A campaign is one function of its size: it makes its
cases from a fixed seed, so that a larger size goes on where a smaller one ends, and answers with
the worst case it saw beside the limit for it.
"""

from __future__ import annotations

import contextlib
import io
import math
import random
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Final

import numpy as np

import tests.conftest  # noqa: F401 - the settings of hypothesis, which pytest would have loaded
from tests.case.campaigns import (
    edited_lines,
    killed_drafts,
    killed_saves,
    laid_out_files,
    surveyed_cases,
)
from tests.model.spreads import spreads_judged
from tests.model.test_formula import fuzzed
from tests.model.test_robustness import brinks, sampled_circles, sampled_verdicts
from tests.model.test_stability import verdicts
from tests.model.test_transfer import laws, limits, step_responses
from tests.plain import sampled_pv
from tests.records.campaigns import certain, choices
from tests.records.damage import damaged_records
from tests.records.replaying import recognised
from tests.records.swinging import blamed
from tests.screens.campaigns import bad_lines, line_noise, walks
from tests.sim.campaigns import (
    analogue_by_mpmath,
    changed_loops,
    leapt_loops,
    limited_loops,
    sampled_by_mpmath,
)
from tests.sim.cascades import cascades_at_limits
from tests.sim.floors import beaten, reached
from tests.sim.promises import bumpless, held_cascades, left_limits
from tests.sim.series import Path as Way
from tests.sim.series import Rational, responses
from tests.tune.searches import searched
from workbench.case.files import parse_case
from workbench.case.writing import format_case
from workbench.cli.options import Grammar
from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import sampled_margins
from workbench.model.stability import loop_verdict
from workbench.model.transfer import TransferFunction
from workbench.records.identify import fit
from workbench.records.record import Record
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events

CASES: Final = Path(__file__).resolve().parents[1] / "cases"


@dataclass(frozen=True)
class Outcome:
    """What a campaign found."""

    cases: int
    worst: float
    limit: float
    measure: str
    """What `worst` is, in words, with its unit."""
    where: str = ""
    """The worst case, so that it can be looked at alone."""

    @property
    def kept(self) -> bool:
        return self.worst <= self.limit


def _worst(found: Iterator[tuple[float, str]], limit: float, measure: str) -> Outcome:
    seen = list(found)
    worst, where = max(seen, default=(0.0, ""))
    return Outcome(len(seen), worst, limit, measure, where)


# --- loops at random -----------------------------------------------------------------------------


@dataclass(frozen=True)
class Lag:
    """gain exp(-L s) / ((T1 s + 1)(T2 s + 1)), T2 perhaps 0."""

    gain: float
    times: tuple[float, ...]
    dead_time: float

    def transfer(self) -> TransferFunction:
        return TransferFunction.ratio((self.gain,), [(t, 1.0) for t in self.times], self.dead_time)


def _lag(draw: random.Random, lags: int) -> Lag:
    slowest = draw.uniform(5.0, 60.0)
    times = (slowest, *(slowest * draw.uniform(0.1, 0.6) for _ in range(lags - 1)))
    return Lag(draw.uniform(0.3, 3.0), times, slowest * draw.uniform(0.1, 0.8))


def _gains(draw: random.Random, plant: Lag) -> Gains:
    """PI or PID settings, lively and stable for most plants."""
    slowest = sum(plant.times)
    gain = draw.uniform(0.2, 0.9) * slowest / (plant.gain * (slowest * 0.2 + plant.dead_time) * 2.0)
    integral = gain / (slowest * draw.uniform(0.7, 2.0))
    derivative = draw.choice((0.0, gain * plant.dead_time * draw.uniform(0.1, 0.4)))
    filter_time = derivative / gain / draw.uniform(4.0, 10.0) if derivative else 0.0
    return Gains(gain, integral, derivative, filter_time, draw.uniform(0.0, 1.0))


def _loops(seed: int, size: int, lags: Sequence[int] = (1, 2)) -> Iterator[tuple[Lag, Loop]]:
    """Stable analogue loops."""
    draw = random.Random(seed)
    made = 0
    while made < size:
        plant = _lag(draw, draw.choice(lags))
        transfer = plant.transfer()
        loop = Loop(transfer, transfer, _gains(draw, plant))
        if loop_verdict(loop.open_loop()).stable:
            made += 1
            yield plant, loop


# --- trends --------------------------------------------------------------------------------------


def analogue_trends(size: int) -> Outcome:
    """PV of analogue loops after a setpoint step, against the power series in exp(-L s)."""

    def errors() -> Iterator[tuple[float, str]]:
        for plant, loop in _loops(101, size):
            # Twelve dead times keep the series short; the answer is past its first swing by then.
            end = 12.0 * plant.dead_time
            trace = simulate(loop, Events(1.0, 0.0, 0.0, 0.0, end))
            picked = np.linspace(1, len(trace.time) - 1, 25).astype(int)
            ways = [Way(Rational.lags(plant.gain, *plant.times), plant.dead_time)]
            exact, _ = responses(loop.gains, ways, [float(trace.time[k]) for k in picked])
            yield float(np.abs(trace.pv[picked] - exact).max()), f"{plant} {loop.gains}"

    return _worst(errors(), 1e-4, "largest error, share of the step")


def sampled_trends(size: int) -> Outcome:
    """PV of sampled loops at each scan, against a recursion written down in plain Python."""

    def errors() -> Iterator[tuple[float, str]]:
        draw = random.Random(102)
        for plant, loop in _loops(103, size, lags=(1,)):
            scan = plant.times[0] * draw.uniform(0.02, 0.08)
            end = 400 * scan
            sampled = replace(loop, scan=scan, computing_delay=draw.choice((0.0, 0.4)) * scan)
            trace = simulate(sampled, Events(1.0, 0.0, 2.0, 200 * scan, end))
            at = np.searchsorted(trace.time, np.arange(400) * scan - 1e-9 * scan)
            exact = sampled_pv(
                (plant.gain, plant.times[0], plant.dead_time),
                sampled.gains,
                scan,
                sampled.computing_delay,
                [1.0] * 400,
                [0.0] * 200 + [2.0] * 200,
            )
            yield float(np.abs(trace.pv[at] - exact).max()), f"{plant} {sampled}"

    return _worst(errors(), 1e-9, "largest error, share of the step")


# --- margins -------------------------------------------------------------------------------------


def _stretched(loop: Loop, gain: float, dead_time: float) -> Loop:
    late = TransferFunction.ratio((gain,), [], dead_time)
    return replace(loop, plant=loop.plant * late)


def _brink(loop: Loop) -> float:
    """How far off the gain and delay margins are, by the verdict on loops just inside and out."""
    margins = sampled_margins(loop)
    off = 0.0
    share = 1e-3
    tries: list[tuple[float, float, bool]] = []
    if margins.gain_margin.value is not None:
        gm = margins.gain_margin.value
        tries += [(gm * (1 - share), 0.0, True), (gm * (1 + share), 0.0, False)]
    if margins.delay_margin_s.value is not None:
        dm = margins.delay_margin_s.value
        tries += [(1.0, dm * (1 - share), True), (1.0, dm * (1 + share), False)]
    for gain, dead_time, stable in tries:
        if sampled_margins(_stretched(loop, gain, dead_time)).stable is not stable:
            off = 1.0
    return off


def sampled_brinks(size: int) -> Outcome:
    """A loop 0.1 % inside its gain or delay margin is stable, 0.1 % outside it is not."""

    def found() -> Iterator[tuple[float, str]]:
        draw = random.Random(105)
        for plant, loop in _loops(106, size):
            sampled = replace(loop, scan=plant.times[0] * draw.uniform(0.01, 0.05))
            if sampled_margins(sampled).stable:
                # More dead time than a scan changes the sampled plant step by step, exactly too.
                yield _brink(sampled), f"{plant} {sampled}"

    return _worst(found(), 0.0, "a margin off by more than 0.1 %")


# --- records -------------------------------------------------------------------------------------


def fitted_records(size: int) -> Outcome:
    """Made first-order records: the 95 % intervals hold the plant that made them.

    Of n intervals a share of 0.95 should, with a standard deviation of sqrt(0.05 0.95/n); four of
    those below is the limit, for the worst of gain, time constant and dead time.
    """
    dice = np.random.default_rng(107)
    held = {"gain": 0, "time_constants_s": 0, "dead_time_s": 0}
    for _ in range(size):
        truth = {
            "gain": float(dice.uniform(0.5, 3.0)),
            "time_constants_s": float(dice.uniform(15.0, 60.0)),
            "dead_time_s": float(dice.uniform(3.0, 20.0)),
        }
        found = fit(
            _bump(dice, *truth.values()), shapes=("first-order",), noise_model="white", drift=False
        )
        for key, true in truth.items():
            interval = found.candidates[0].interval_95[key]
            low, high = interval[0] if isinstance(interval[0], tuple) else interval
            assert isinstance(low, float)
            assert isinstance(high, float)
            held[key] += low <= true <= high
    allowed = 0.05 + 4.0 * math.sqrt(0.05 * 0.95 / size)
    missed, key = max((1.0 - count / size, key) for key, count in held.items())
    return Outcome(size, missed, allowed, "share of intervals that miss", key)


def _bump(dice: np.random.Generator, gain: float, lag: float, dead_time: float) -> Record:
    """A bump up and down in OP every second, by the exact answer of a first-order plant."""
    seconds = np.arange(600.0)
    op = np.where((seconds >= 60) & (seconds < 330), 45.0, 40.0)
    pv = np.full(600, 100.0)
    for at, size in ((60.0, 5.0), (330.0, -5.0)):
        since = np.maximum(seconds - at - dead_time, 0.0)
        pv += gain * size * (1.0 - np.exp(-since / lag))
    noise = 0.05 * gain * 5.0
    return Record("made", seconds, pv + dice.normal(0.0, noise, 600), op)


# --- files and text ------------------------------------------------------------------------------


def damaged_files(size: int) -> Outcome:
    """Case files with bytes changed, lines lost or doubled: read, or refused in one line each."""
    draw = random.Random(108)
    texts = [path.read_text("utf-8") for path in sorted(CASES.glob("*.toml"))]

    def found() -> Iterator[tuple[float, str]]:
        for _ in range(size):
            text = draw.choice(texts)
            for _ in range(draw.randint(1, 4)):
                text = _damaged(draw, text)
            yield float(not _is_read_or_refused(parse_case, text)), text

    return _worst(found(), 0.0, "neither read nor refused")


def _damaged(draw: random.Random, text: str) -> str:
    lines = text.splitlines(keepends=True)
    at = draw.randrange(len(text) + 1)
    match draw.randrange(5):
        case 0:
            return text[:at] + draw.choice("\"'[]{}=#,.\\\n\0-_é1e") + text[at:]
        case 1:
            return text[:at] + text[at + draw.randint(1, 12) :]
        case 2:
            lines.insert(draw.randrange(len(lines) + 1), draw.choice(lines))
        case 3:
            lines.pop(draw.randrange(len(lines)))
        case _:
            lines[draw.randrange(len(lines))] = draw.choice(
                ("gain = 1e999\n", "format = 2\n", "[plant]\n", "[[history]]\n", "low = nan\n")
            )
    return "".join(lines) or "\n"


def _is_read_or_refused(read: Callable[[str], object], text: str) -> bool:
    try:
        read(text)
    except InputError as fault:
        return "\n" not in str(fault)
    return True


def kept_files(size: int) -> Outcome:
    """A shipped case with settings changed at random, written and read back, is the same case."""
    draw = random.Random(109)
    cases = [parse_case(path.read_text("utf-8")) for path in sorted(CASES.glob("*.toml"))]

    def found() -> Iterator[tuple[float, str]]:
        for _ in range(size):
            case = draw.choice(cases)
            controller = case.controller
            assert controller is not None
            changed = replace(controller, gain=draw.uniform(0, 1e3) + 1e-9, proportional_band=None)
            low = draw.uniform(-1e6, 1e6)
            high = low + draw.uniform(1e-3, 1e6)
            case = replace(
                case, controller=changed, pv=replace(case.pv, low=low, high=high, start=None)
            )
            text = format_case(case)
            yield float(parse_case(text) != case), text

    return _worst(found(), 0.0, "came back changed")


def command_lines(size: int) -> Outcome:
    """Words put together at random after `workbench`: an answer, or one line and status 2."""
    from workbench.cli import main
    from workbench.cli.table import COMMANDS

    draw = random.Random(111)
    files = [str(path) for path in sorted(CASES.iterdir())]

    def found() -> Iterator[tuple[float, str]]:
        for _ in range(size):
            # `new` writes a file where it stands; its own tests cover it.
            command = draw.choice([command for command in COMMANDS if command != "new"])
            line = [command, *_words(draw, COMMANDS[command], files)]
            out, err = io.StringIO(), io.StringIO()
            with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
                status = main(line)
            if status > 128:
                # The command was asked to end, and so were we.
                raise SystemExit(status)
            said = err.getvalue()
            refused = status == 2 and not out.getvalue() and said.count("\n") == 1
            answered = status in (0, 1) and bool(out.getvalue()) and not said
            fine = (refused or answered) and "fault of the program" not in said
            yield float(not fine), repr(line)

    return _worst(found(), 0.0, "neither answered nor refused in one line")


VALUES: Final = {
    "FORMULA": ("1.8 exp(-6 s)/(40 s + 1)", "-2/(3 s+1)", "0.02/s", "1/(s-1)", "2/(s+1)(s+2)", "1"),
    "TIME": ("32 s", "0.5 min", "1.9 repeats/min", "none", "0 s", "-1 s", "1 h", "1,5 s", "9"),
    "LOW:HIGH": ("0:250", "-50:150", "250:0", "0:0", "5", "nan:1", "none"),
    "PV:OP": ("50:50", "-1:50", "50", "a:b"),
    "RATE": ("2 /s", "0 /s", "2", "none"),
    "KEY=VALUE": ("controller.gain=1.3", "pv.low=500", "gain=1", "plant.shape=lead", "=", "x"),
}
"""What may be written where the help shows a word, good and bad."""


def _words(draw: random.Random, grammar: Grammar, files: Sequence[str]) -> list[str]:
    """Operands and options of a command, about half of the lines sound."""
    ending = ".csv" if grammar.operand.endswith(".csv") else ".toml"
    if "--plant" in (option.name for option in grammar.options) and draw.random() < 0.5:
        words = ["--plant", draw.choice(VALUES["FORMULA"]), "--gain", "1.1"][: draw.choice((2, 4))]
    elif draw.random() < 0.8:
        words = [draw.choice([file for file in files if file.endswith(ending)])]
    else:
        words = draw.choices([*files, "nowhere.toml", "", "-"], k=draw.randint(0, 2))
    # A trend would be written beside the tests.
    options = [option for option in grammar.options if option.name != "--trend"]
    for option in draw.sample(options, k=draw.choice((0, 0, 1, 1, 2, 3)) % (len(options) + 1)):
        words.append(option.name)
        choices = option.value.split("|") if "|" in option.value else ()
        numbers = ("1", "0", "-2", "0.35", "1e400", "nan", "1,5", "", "text")
        words += [
            draw.choice(VALUES.get(option.value, choices or numbers))
            for _ in range(option.count if option.value else 0)
        ]
    return words


# --- campaigns that live beside their room's tests -----------------------------------------------


def _judged(
    campaign: Callable[[int, int], tuple[float, list[str]]], seed: int, limit: float, measure: str
) -> Callable[[int], Outcome]:
    """One that answers with its worst figure and its failures; a failure is beyond any limit."""

    def run(size: int) -> Outcome:
        worst, failures = campaign(size, seed)
        where = "\n".join(failures[:3])
        return Outcome(size, math.inf if failures else worst, limit, measure, where)

    return run


# --- the table -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Campaign:
    """One row of the table."""

    run: Callable[[int], Outcome]
    sample: int
    """Cases that run with every other test."""
    full: int


CAMPAIGNS: Final[dict[str, Campaign]] = {
    "laws of the algebra": Campaign(
        _judged(laws, 1, 1e-9, "difference, of the size of what was added"), 20, 10_000
    ),
    "limits by sympy": Campaign(_judged(limits, 4, 1e-9, "difference of a gain"), 2, 200),
    "step responses": Campaign(_judged(step_responses, 9, 1e-9, "of the peak"), 4, 200),
    "stability verdicts": Campaign(_judged(verdicts, 11, 0.0, "share wrong"), 30, 5000),
    "margins made": Campaign(_judged(brinks, 21, 0.0, "share wrong"), 10, 1000),
    "sampled verdicts": Campaign(
        _judged(sampled_verdicts, 31, 1e-6, "difference of a gain margin"), 10, 1000
    ),
    "many plants in one loop": Campaign(
        _judged(spreads_judged, 51, 1e-3, "error of an Ms, as a share"), 5, 500
    ),
    "sampled margins used up": Campaign(
        _judged(sampled_circles, 32, 1e-6, "nearest eigenvalue from the unit circle"), 10, 500
    ),
    "formulas typed and broken": Campaign(
        _judged(fuzzed, 13, 1.0, "seconds of work for one"), 300, 100_000
    ),
    "analogue trends": Campaign(analogue_trends, 3, 60),
    "sampled trends": Campaign(sampled_trends, 10, 1000),
    "sampled loops by mpmath": Campaign(
        _judged(sampled_by_mpmath, 201, 1e-9, "largest error, share of the step"), 5, 100
    ),
    "analogue loops by mpmath": Campaign(
        _judged(analogue_by_mpmath, 202, 1e-5, "largest error, share of the step"), 3, 50
    ),
    "leaps of anything": Campaign(
        _judged(leapt_loops, 205, 1e-9, "leap and step apart, share of the largest"), 40, 2000
    ),
    "loops that meet limits": Campaign(
        _judged(limited_loops, 203, 1e-9, "leap and step apart [%]"), 100, 2000
    ),
    "modes and settings changed": Campaign(
        _judged(changed_loops, 204, 1e-9, "moved further than asked [%]"), 100, 2000
    ),
    "inner loops at limits": Campaign(
        _judged(cascades_at_limits, 206, 0.0, "outer output goes on into the limit [%]"), 40, 2000
    ),
    "floors not beaten": Campaign(
        _judged(beaten, 51, 1e-4, "below a floor, as a share of it"), 4, 2000
    ),
    "floors reached": Campaign(
        _judged(reached, 0, 0.03, "best moves found above a floor, as a share"), 1, 20
    ),
    "promises at limits": Campaign(
        _judged(left_limits, 0, 0.0, "scans at a limit beyond those allowed"), 60, 2000
    ),
    "promises at changes": Campaign(
        _judged(bumpless, 0, 0.0, "moved further than asked [%]"), 60, 2000
    ),
    "promises of cascades": Campaign(
        _judged(held_cascades, 0, 0.0, "outer output goes on into the limit [%]"), 40, 2000
    ),
    "sampled margins": Campaign(sampled_brinks, 5, 500),
    "best settings by search": Campaign(
        _judged(searched, 41, 0.01, "cost above the best of a grid, as a share"), 2, 108
    ),
    "fits of made records": Campaign(fitted_records, 10, 400),
    "controllers recognised": Campaign(_judged(recognised, 301, 0.0, "share wrong"), 3, 200),
    "why loops swing": Campaign(_judged(blamed, 302, 0.05, "share of valves judged wrong"), 3, 300),
    "intervals of every shape": Campaign(
        _judged(certain, 0, 3.1, "sd that a share held is off 95 %"), 16, 4000
    ),
    "the right shape chosen": Campaign(
        _judged(choices, 0, 0.1, "share in which another was chosen"), 4, 400
    ),
    "damaged case files": Campaign(damaged_files, 100, 20_000),
    "case files kept": Campaign(kept_files, 20, 2000),
    "damaged records": Campaign(
        _judged(damaged_records, 109, 2.0, "seconds of work for one"), 60, 10_000
    ),
    "one key, one line": Campaign(_judged(edited_lines, 301, 0.0, "broken"), 10, 5000),
    "layout against tomllib": Campaign(_judged(laid_out_files, 302, 0.0, "broken"), 10, 5000),
    "saves killed": Campaign(_judged(killed_saves, 303, 0.0, "neither old nor new"), 10, 2000),
    "drafts killed": Campaign(_judged(killed_drafts, 304, 0.0, "lost"), 10, 2000),
    "cases surveyed": Campaign(
        _judged(surveyed_cases, 305, 40.0, "seconds for 1,000 cases"), 10, 1000
    ),
    "line noise": Campaign(_judged(line_noise, 401, 20.0, "seconds until it answers"), 2, 600),
    "bad lines": Campaign(_judged(bad_lines, 402, 0.0, "ended or went on badly"), 1, 120),
    "every page and action": Campaign(_judged(walks, 403, 0.0, "screens at fault"), 6, 1680),
    "command lines at random": Campaign(command_lines, 40, 3000),
}
"""Name -> campaign, and its sizes."""


def main(words: Sequence[str]) -> int:
    """Run the campaigns named, or all, at full size and print the table; 1 if a limit is broken."""
    unknown = [word for word in words if word not in CAMPAIGNS]
    if unknown:
        print(f"no campaign is called {unknown[0]!r}; there are: {', '.join(CAMPAIGNS)}")
        return 2
    print(f"{'campaign':24} {'cases':>7} {'worst':>10} {'limit':>10} {'seconds':>8}  measure")
    broken = []
    for name in words or CAMPAIGNS:
        started = time.monotonic()
        found = CAMPAIGNS[name].run(CAMPAIGNS[name].full)
        seconds = time.monotonic() - started
        print(
            f"{name:24} {found.cases:7} {found.worst:10.3g} {found.limit:10.3g} {seconds:8.1f}"
            f"  {found.measure}{'' if found.kept else '  BROKEN'}",
            flush=True,
        )
        if not found.kept:
            broken.append(f"{name}, worst case:\n{found.where}")
    print("\n".join(broken) or "every limit is kept")
    return 1 if broken else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
