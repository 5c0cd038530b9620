"""Did the plant do what was predicted: a record with the new settings against the case's loop.

The setpoint of the record, and an upset that is known, are played through the case's loop.  Where
PV and OP do not follow, the loop is played again with one thing free at a time - the plant's gain,
its dead time, the valve, an upset - and the one that explains most for what it costs is named.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from workbench import __version__
from workbench.case.case import Case, Revision
from workbench.errors import WorkbenchError, problem
from workbench.model.feedback import Loop
from workbench.records.diagnose import diagnose
from workbench.records.record import Record
from workbench.records.stretch import Stretch, is_automatic, longest_stretch
from workbench.records.swing import swings
from workbench.sim.instruments import Instruments
from workbench.sim.loop import simulate
from workbench.sim.scenario import Events
from workbench.sim.valve import Valve
from workbench.study.loop import instruments_of, load_scale, loop_of
from workbench.study.records import known_of
from workbench.units import Amount, Figure, rounded, text, time_text

Floats = NDArray[np.float64]
Verdict = Literal["as predicted", "different", "cannot tell"]

FEWEST_ROWS: Final = 40
_MOST_SCANS: Final = 50_000
_CLEAR: Final = 4.0
"""Noise deviations by which SP must move, or PV for an upset, for a record to tell anything."""
_CLOSE: Final = 0.12
"""Share of what PV and OP did that may be left over, noise apart, in what is as predicted."""
_EVIDENCE: Final = 10.0
"""Difference in BIC that is very strong evidence (R.E. Kass, A.E. Raftery, J. Am. Stat. Assoc. 90,
1995; from memory)."""


@dataclass(frozen=True)
class RunFigures:
    """What a run amounts to."""

    iae: float
    """Integral of |SP - PV| [PV unit s]."""
    largest_error: float
    """[PV unit]"""
    op_travel: float
    """Of OP, its noise included [OP unit]."""
    period_s: Figure
    """Of a regular swing of PV about SP."""


@dataclass(frozen=True)
class Explanation:
    """The loop with one thing set free."""

    what: Literal["gain", "dead time", "valve", "upset"]
    words: str
    """What it then is."""
    bic: float
    """Against that of the loop as it is in the case; below 0 is better."""
    agreement_percent: float


@dataclass(frozen=True)
class Observation:
    """A record beside what was predicted for it."""

    verdict: Verdict
    agreement_percent: Figure
    """100 (1 - norm of what PV is off / norm of PV about its mean)."""
    predicted: RunFigures | None
    observed: RunFigures | None
    explanations: tuple[Explanation, ...]
    """The best first."""
    reasons: tuple[str, ...]
    time: Floats
    """From the start of the stretch looked at [s] (n,)."""
    pv: tuple[Floats, Floats]
    """Observed and predicted (n,)."""
    op: tuple[Floats, Floats]


def observe(record: Record, case: Case) -> Observation:
    """Whether a record of the loop shows what the case predicts.

    The case's load step, where it has one, is taken for a known upset, `scenario.load_at` after the
    first row.  Raises `RecordError`, and `InputError` where plant or controller is missing.
    """
    loop = loop_of(case)
    stretch, reason = _stretch(record, case)
    if stretch is None:
        return _cannot_tell(reason)
    scans = len(stretch.pv) * stretch.interval / (loop.scan or stretch.interval)
    if scans > _MOST_SCANS:
        words = f"{scans:.0f} scans are more than the {_MOST_SCANS} that are played"
        return _cannot_tell(f"{words}: cut the record down with --from and --to")
    play = _Play(case, loop, stretch)
    base = play.run()
    if base is None:
        return _cannot_tell("the case's loop runs away: its prediction has no end")
    quiet = play.too_quiet()
    if quiet:
        return play.answer("cannot tell", base, (), (quiet,))
    share = play.left_over(base)
    if share <= _CLOSE:
        words = f"{100.0 * share:.0f} % of what PV and OP did is left over, noise apart"
        return play.answer("as predicted", base, (), (words,))
    found = tuple(sorted(play.explained(base), key=lambda one: one.bic))
    sticks = _sticking(record, case)
    return play.answer("different", base, found, tuple(_reasons(found, share, sticks)))


def _sticking(record: Record, case: Case) -> str:
    """What the shapes of a swing tell of the valve: played again it would not keep in step."""
    seen = diagnose(record, known_of(case))
    if seen.valve_verdict != "stick-slip":
        return ""
    period = time_text(seen.swings[0].period_s, 3)
    amount = seen.stick_slip_percent.value
    return (
        f"PV swings every {period} in the shapes of a valve that sticks by {text(amount, '%', 2)}"
    )


def _reasons(found: tuple[Explanation, ...], share: float, sticks: str) -> Iterator[str]:
    yield f"{100.0 * share:.0f} % of what PV and OP did is left over, noise apart"
    if sticks:
        yield f"best explained by the valve: {sticks}"
        return
    if not found or found[0].bic > -_EVIDENCE:
        yield "neither gain, dead time, valve nor one upset explains it: look for something else"
        return
    best = found[0]
    yield f"best explained by the {best.what}: {best.words}"
    near = [one for one in found[1:] if one.bic - best.bic < _EVIDENCE and one.bic < -_EVIDENCE]
    for one in near:
        yield f"the {one.what} explains it nearly as well: {one.words}"


def _cannot_tell(reason: str) -> Observation:
    none: Floats = np.array([], np.float64)
    pair = (none, none)
    figure = Figure(None, reason)
    return Observation("cannot tell", figure, None, None, (), (reason,), none, pair, pair)


def _stretch(record: Record, case: Case) -> tuple[Stretch | None, str]:
    """The rows to look at, or why there are none."""
    automatic = is_automatic(record)
    if automatic is not None and not automatic.any():
        return None, "the controller was never in automatic in this record"
    if record.sp is None and not case.scenario.load_step:
        return None, "the record has no SP, and no known upset was given"
    wanted = np.ones(len(record.time), bool) if automatic is None else automatic
    found = longest_stretch(record, wanted)
    if found is None or len(found.pv) < FEWEST_ROWS:
        return None, f"fewer than {FEWEST_ROWS} rows in automatic without a gap"
    return found, ""


class _Play:
    """One record, and the loop that it is compared with, in percent of span."""

    def __init__(self, case: Case, loop: Loop, stretch: Stretch) -> None:
        pv, op = case.pv.range, case.op.range
        self.case, self.loop, self.stretch = case, loop, stretch
        self.time = np.arange(float(len(stretch.pv))) * stretch.interval
        sp = stretch.sp
        if sp is None:
            sp = np.full(len(stretch.pv), float(np.median(stretch.pv)))
        self.rest_pv, self.rest_op = float(sp[0]), _rest_of(stretch, sp)
        self.sp = 100.0 * (sp - self.rest_pv) / pv.span
        self.pv = 100.0 * (stretch.pv - self.rest_pv) / pv.span
        self.op = 100.0 * (stretch.op - self.rest_op) / op.span
        self.noise = (_noise(self.pv), _noise(self.op))
        self.events = self._events()

    def _events(self) -> Events:
        changed = np.flatnonzero(np.diff(self.sp)) + 1
        record = tuple((float(self.time[i]), float(self.sp[i])) for i in changed)
        scenario = self.case.scenario
        load = (scenario.load_step or 0.0) * load_scale(self.case)
        return Events(
            setpoint_step=0.0,
            setpoint_at=0.0,
            setpoint_record=record or ((0.0, 0.0),),
            load_step=load,
            load_at=scenario.load_at.seconds if scenario.load_at else 0.0,
            until=float(self.time[-1]) + self.stretch.interval,
        )

    def run(
        self, events: Events | None = None, valve: Valve | None = None
    ) -> tuple[Floats, Floats] | None:
        """PV and OP at the rows of the record, or nothing where the loop runs away."""
        events, instruments = events or self.events, self._instruments(valve)
        try:
            trace = simulate(self.loop, events, instruments)
        except WorkbenchError:
            return None
        if trace.diverged:
            return None
        row = np.searchsorted(trace.time, self.time + 1e-9 * self.stretch.interval, side="right")
        return np.interp(self.time, trace.time, trace.pv), trace.output[np.maximum(row - 1, 0)]

    def _instruments(self, valve: Valve | None) -> Instruments:
        held = instruments_of(self.case)
        span = self.case.op.range
        at = span.percent(self.rest_op - span.low)
        return replace(held, op_rest=at, valve=valve or held.valve)

    # -- how far off --

    def residuals(self, run: tuple[Floats, Floats]) -> tuple[Floats, Floats]:
        """What PV and OP are off; OP's resting place is only known to its mean."""
        off = self.op - run[1]
        return self.pv - run[0], off - off.mean()

    def left_over(self, run: tuple[Floats, Floats]) -> float:
        """The larger share of PV and OP that is left over, noise apart; OP counts by half."""
        shares = []
        seen = (self.pv, self.op)
        for off, did, noise in zip(self.residuals(run), seen, self.noise, strict=True):
            rest = max(0.0, float((off * off).mean()) - noise * noise)
            whole = float(did.var()) or 1.0
            shares.append(math.sqrt(rest / whole))
        return max(shares[0], 0.5 * shares[1])

    def too_quiet(self) -> str:
        """Why the record cannot tell, where nothing happened in it."""
        moved, noise = float(np.ptp(self.sp)), self.noise[0]
        to_pv = self.case.pv.range.span / 100.0
        if self.events.load_step or moved > _CLEAR * noise:
            return ""
        if not moved:
            return "SP never moved, and no known upset was given: nothing was predicted to happen"
        return (
            f"SP moved by {text(moved * to_pv, digits=3)}, less than {_CLEAR:g} times the noise of "
            f"{text(noise * to_pv, digits=3)}"
        )

    # -- one thing free --

    def explained(self, base: tuple[Floats, Floats]) -> Iterator[Explanation]:
        """The loop with each of gain, dead time, valve and upset free."""
        for what, find in (
            ("gain", self._free_gain),
            ("dead time", self._free_dead_time),
            ("valve", self._free_valve),
            ("upset", lambda: self._free_upset(base)),
        ):
            found = find()
            if found is not None:
                run, words, count = found
                better = self._against(base, run, count)
                yield Explanation(what, words, better, self._agreement(run))  # type: ignore[arg-type]

    def _against(
        self, base: tuple[Floats, Floats], run: tuple[Floats, Floats], count: int
    ) -> float:
        """BIC of a run less that of the base; rows that repeat each other count once."""
        total = 0.0
        for before, after, noise in zip(
            self.residuals(base), self.residuals(run), self.noise, strict=True
        ):
            rows = _independent(after)
            floor = max(noise * noise, 1e-12)
            was, now = (max(float((off * off).mean()), floor) for off in (before, after))
            total += rows * math.log(now / was)
        return total + count * math.log(2 * len(self.pv))

    def _cost(self, run: tuple[Floats, Floats] | None) -> float:
        if run is None:
            return 1e12
        return float(
            sum(
                (off * off).mean() / max(noise * noise, 1e-6)
                for off, noise in zip(self.residuals(run), self.noise, strict=True)
            )
        )

    def _free_gain(self) -> tuple[tuple[Floats, Floats], str, int] | None:
        def events(log_factor: float) -> Events:
            return replace(self.events, change_at=0.0, gain_factor=math.exp(log_factor))

        best = self._along(lambda x: self.run(events(x)), math.log(0.3), math.log(3.0))
        run = self.run(events(best))
        return None if run is None else (run, f"{text(math.exp(best), digits=2)} times it", 1)

    def _free_dead_time(self) -> tuple[tuple[Floats, Floats], str, int] | None:
        present = self.loop.plant.dead_time
        if not present:
            return None

        def events(factor: float) -> Events:
            return replace(self.events, change_at=0.0, dead_time_factor=factor)

        best = self._along(lambda x: self.run(events(x)), 0.1, 4.0)
        run = self.run(events(best))
        words = f"{time_text(best * present, 2)} in place of {time_text(present, 3)}"
        return None if run is None else (run, words, 1)

    def _free_valve(self) -> tuple[tuple[Floats, Floats], str, int] | None:
        least, best = math.inf, None
        held = self.case.valve
        for amount in (0.3, 0.6, 1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0):
            for words, valve in (
                (
                    f"stick-slip of {amount:g} %",
                    replace(held, stick_slip=amount, slip_jump=amount / 2),
                ),
                (f"deadband of {amount:g} %", replace(held, deadband=amount)),
            ):
                run = self.run(valve=valve)
                cost = self._cost(run)
                if run is not None and cost < least:
                    least, best = cost, (run, words, 2)
        return best

    def _free_upset(
        self, base: tuple[Floats, Floats]
    ) -> tuple[tuple[Floats, Floats], str, int] | None:
        """One load step of any size at any time: where the loop is linear they add up."""
        unit = replace(self.events, setpoint_record=((0.0, 0.0),), load_step=1.0, load_at=0.0)
        answer = self.run(unit)
        if answer is None:
            return None
        weights = [1.0 / max(noise, 1e-3) for noise in self.noise]
        off = np.concatenate(
            [weight * part for weight, part in zip(weights, self.residuals(base), strict=True)]
        )
        rows, least, best = len(self.pv), math.inf, None
        for start in range(0, rows - 5, max(1, rows // 200)):
            shifted = [np.append(np.zeros(start), part[: rows - start]) for part in answer]
            parts = (shifted[0], shifted[1] - shifted[1].mean())
            column = np.concatenate([w * part for w, part in zip(weights, parts, strict=True)])
            power = float(column @ column)
            if not power > 0.0:
                continue
            size = float(column @ off) / power
            left = off - size * column
            cost = float(left @ left)
            if cost < least:
                run = (base[0] + size * shifted[0], base[1] + size * shifted[1])
                at = time_text(float(self.time[start]), 3)
                amount = text(size / load_scale(self.case), digits=2)
                unit_words = self.case.op.unit if self.case.plant.load_path() is None else "units"
                least, best = cost, (run, f"a step of {amount} {unit_words} at {at}", 2)
        return best

    def _along(
        self, run: Callable[[float], tuple[Floats, Floats] | None], low: float, high: float
    ) -> float:
        """The value between two ends that leaves least: a coarse look, then golden sections."""
        grid = np.linspace(low, high, 9)
        costs = [self._cost(run(float(x))) for x in grid]
        at = int(np.argmin(costs))
        low, high = float(grid[max(at - 1, 0)]), float(grid[min(at + 1, len(grid) - 1)])
        for _ in range(12):
            first, second = low + 0.382 * (high - low), low + 0.618 * (high - low)
            if self._cost(run(first)) < self._cost(run(second)):
                high = second
            else:
                low = first
        return 0.5 * (low + high)

    # -- the answer --

    def _agreement(self, run: tuple[Floats, Floats]) -> float:
        about = float(np.linalg.norm(self.pv - self.pv.mean())) or 1.0
        return 100.0 * (1.0 - float(np.linalg.norm(self.pv - run[0])) / about)

    def answer(
        self,
        verdict: Verdict,
        base: tuple[Floats, Floats],
        found: tuple[Explanation, ...],
        reasons: tuple[str, ...],
    ) -> Observation:
        """The comparison in the loop's own units."""
        to_pv, to_op = self.case.pv.range.span / 100.0, self.case.op.range.span / 100.0
        return Observation(
            verdict,
            Figure.of(self._agreement(base)),
            self._figures(base[0], base[1]),
            self._figures(self.pv, self.op),
            found,
            reasons,
            self.time,
            (self.rest_pv + to_pv * self.pv, self.rest_pv + to_pv * base[0]),
            (self.rest_op + to_op * self.op, self.rest_op + to_op * base[1]),
        )

    def _figures(self, pv: Floats, op: Floats) -> RunFigures:
        to_pv, to_op = self.case.pv.range.span / 100.0, self.case.op.range.span / 100.0
        error, interval = self.sp - pv, self.stretch.interval
        found = swings(error, interval)
        none = Figure(None, "PV does not swing regularly about SP")
        return RunFigures(
            iae=float(np.abs(error).sum()) * interval * to_pv,
            largest_error=float(np.abs(error).max()) * to_pv,
            op_travel=float(np.abs(np.diff(op)).sum()) * to_op,
            period_s=Figure.of(found[0].period_s) if found else none,
        )


def _rest_of(stretch: Stretch, sp: Floats) -> float:
    """OP before SP first moves; its first value where it moves at once."""
    moved = np.flatnonzero(np.diff(sp))
    rows = int(moved[0]) + 1 if len(moved) else len(sp)
    return float(np.mean(stretch.op[: max(1, rows)]))


def _noise(series: Floats) -> float:
    """Standard deviation of white noise on a slower signal, from its second differences."""
    jumps = np.abs(np.diff(series, n=2))
    return 1.4826 * float(np.median(jumps)) / math.sqrt(6.0)


def _independent(off: Floats) -> float:
    """How many rows that do not repeat each other say as much as these."""
    centred = off - off.mean()
    power = float(centred @ centred)
    rho = float(centred[1:] @ centred[:-1]) / power if power else 0.0
    rho = min(max(rho, 0.0), 0.98)
    return max(10.0, len(off) * (1.0 - rho) / (1.0 + rho))


# --- into the history -----------------------------------------------------------------------------


def with_observation(
    case: Case, found: Observation, *, record: str, who: str, now: datetime
) -> Case:
    """The case with an `observed` entry: what was measured, and whether it was predicted.

    Raises `InputError` where who is blank, or the record could not tell.
    """
    if not who.strip():
        raise problem("is blank", "say who makes the entry", key="--who")
    if found.observed is None or found.predicted is None:
        raise problem("the record tells nothing to keep", found.reasons[0], key="--save")
    period = found.observed.period_s.value
    said = f"{record}: {found.verdict}; IAE predicted {text(found.predicted.iae)}. " + "; ".join(
        found.reasons
    )
    entry = Revision(
        at=now,
        who=who.strip(),
        kind="observed",
        why=said[:2000],
        measured_iae=rounded(found.observed.iae, 6),
        measured_period=None if period is None else Amount(rounded(period), "s"),
        program=__version__,
    )
    return case.with_entry(entry)
