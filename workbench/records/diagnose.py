"""Why does this loop swing: what a record shows, and the cause that fits it best.

Each finding is a published method's, with the side it speaks for; the cause named is the one that
the findings support and none of them speaks against.  Where they do not settle it, it stays
undecided and the reasons say what is missing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np

from workbench.records.record import Record
from workbench.records.stiction import (
    Correlation,
    Shape,
    Verdict,
    apparent_amount,
    correlation,
    deadband,
    shape,
    together,
)
from workbench.records.stretch import Array, Stretch, is_automatic, longest_stretch
from workbench.records.swing import Swing, Upsets, load_upsets, regularity, swings
from workbench.units import Figure, Note, text, time_text

Cause = Literal["tuning", "valve", "upset", "sensor", "none", "undecided"]

FEWEST_ROWS: Final = 60
_OWN_SWING: Final = (0.6, 1.7)
"""A loop swings by itself within these shares of the period at which its phase is -180 deg."""
_MOST_DEAD_TIMES: Final = 8.0
"""A swing that the gain makes lasts between 2 and about 8 dead times: exactly 2 where the plant is
dead time alone, 4 where it is mostly lag, more with a short integral time."""
_LIVELY: Final = 2.0
"""Largest maximum sensitivity with which a loop is called well damped (common practice)."""


@dataclass(frozen=True)
class Known:
    """What is known of the loop beside its record."""

    dead_time_s: float | None = None
    integral_time_s: float | None = None
    pv_span: float | None = None
    """Range of PV [PV unit]."""
    op_low: float = 0.0
    op_high: float = 100.0
    """Range of OP [OP unit]."""
    op_min: float | None = None
    op_max: float | None = None
    """Limits of the output [OP unit]; the ends of its range where left out."""
    integrating: bool = False
    own_period_s: float | None = None
    """At which the loop's phase is -180 deg."""
    max_sensitivity: float | None = None


@dataclass(frozen=True)
class Evidence:
    """One finding, for or against a cause."""

    cause: Cause
    supports: bool
    text: str

    def __str__(self) -> str:
        return f"{'for' if self.supports else 'against'} {self.cause}: {self.text}"


@dataclass(frozen=True)
class Diagnosis:
    """What the record shows, and what it amounts to."""

    swings: tuple[Swing, ...]
    """Regular swings of PV about SP, the strongest first."""
    regularity: Figure
    """Of the strongest, or of the whole error where it is not regular."""
    upsets: Upsets | None
    correlation: Correlation | None
    shape: Shape | None
    valve_verdict: Verdict
    stick_slip_percent: Figure
    """Apparent stick-slip [% of OP range]."""
    deadband_percent: Figure
    """Lost motion [% of OP range]."""
    minimum_variance_index: Figure
    """1 is minimum variance."""
    time_at_limit_percent: Figure
    time_in_auto_percent: Figure
    modes: dict[str, float]
    """Mode -> share of the time [%]."""
    likely_cause: Cause
    evidence: tuple[Evidence, ...]
    notes: tuple[Note, ...]
    record: Record

    @property
    def present(self) -> bool:
        """PV swings regularly."""
        return bool(self.swings)


def diagnose(record: Record, known: Known | None = None) -> Diagnosis:
    """Why a loop swings, from a record of it in normal running.

    Parameters
    ----------
    record
        PV and OP, better with SP and mode; the longest stretch in automatic without gaps is looked
        at, all of it where no mode was logged.
    known
        Ranges, limits, dead time and integral time; some figures do not exist without them.

    Returns
    -------
    Diagnosis
        Amounts in percent of the OP range, times in percent of the record.
    """
    known = known or Known()
    automatic = is_automatic(record)
    everything = np.ones(len(record.time), bool)
    wanted = everything if automatic is None or not automatic.any() else automatic
    stretch = longest_stretch(record, wanted)
    if stretch is None or len(stretch.pv) < FEWEST_ROWS:
        stretch = None
    modes = _modes(record)
    parts = _Parts(record, known, stretch, automatic)
    return Diagnosis(
        swings=parts.swings,
        regularity=parts.regularity,
        upsets=parts.upsets,
        correlation=parts.correlation,
        shape=parts.shape,
        valve_verdict=parts.verdict,
        stick_slip_percent=parts.amount,
        deadband_percent=parts.lost_motion,
        minimum_variance_index=parts.harris,
        time_at_limit_percent=parts.at_limit,
        time_in_auto_percent=_share_automatic(record, automatic),
        modes=modes,
        likely_cause=parts.cause(),
        evidence=tuple(parts.evidence),
        notes=tuple(_notes(record, known, stretch)),
        record=record,
    )


# --- performance ----------------------------------------------------------------------------------


def minimum_variance_index(series: Array, delay: int, memory: int = 20) -> Figure:
    """How near the variance of PV is to the smallest that any controller could leave.

    eta = s2_mv / s2_y,  s2_mv the residual variance of y(t) regressed on y(t - d) ... y(t - d - m)

    Parameters
    ----------
    series
        PV less SP, evenly spaced (n,).
    delay
        d: dead time in rows, with the row that the hold costs; at least 1.
    memory
        m, number of terms.

    Returns
    -------
    Figure
        1 is minimum variance, 0 as far from it as can be (1 - eta in the other convention in use).

    Notes
    -----
    Only feedback is judged, and against a controller that may move OP as it likes; a slow loop that
    is meant to be slow has a small index.  Residual variance with the terms taken off its degrees
    of freedom; with 1000 rows the standard deviation is 0.01 to 0.05.

    Source
    ------
    T.J. Harris, "Assessment of control loop performance", Can. J. Chem. Eng. 67, 1989, 856-861;
    L. Desborough, T.J. Harris, ibid. 70, 1992, 1186-1197 (from memory).
    """
    centred = series - series.mean()
    rows = len(centred) - memory - delay + 1
    if rows < 3 * memory:
        return Figure(None, f"it needs {4 * memory + delay} rows or more")
    past = np.stack(
        [centred[memory - 1 - j : memory - 1 - j + rows] for j in range(memory)], axis=1
    )
    now = centred[memory - 1 + delay :]
    total = float(now @ now) / rows
    if not total > 1e-24 * (1.0 + float(np.abs(series).max())) ** 2:
        return Figure(None, "PV does not vary")
    residual = now - past @ np.linalg.lstsq(past, now, rcond=None)[0]
    return Figure.of(min(1.0, float(residual @ residual) / (rows - memory) / total))


def _modes(record: Record) -> dict[str, float]:
    """Share of the time in each mode [%], the longest first."""
    if record.mode is None:
        return {}
    lasting = np.append(np.diff(record.time), 0.0)
    shares: dict[str, float] = {}
    for mode, time in zip(record.mode, lasting.tolist(), strict=True):
        shares[mode.strip()] = shares.get(mode.strip(), 0.0) + 100.0 * time / record.duration
    return dict(sorted(shares.items(), key=lambda item: -item[1]))


def _share_automatic(record: Record, automatic: np.ndarray | None) -> Figure:
    if automatic is None:
        return Figure(None, "the record has no mode column")
    lasting = np.append(np.diff(record.time), 0.0)
    return Figure.of(100.0 * float(lasting[automatic].sum()) / record.duration)


# --- findings -------------------------------------------------------------------------------------


class _Parts:
    """The findings of one record, and what each speaks for."""

    def __init__(
        self,
        record: Record,
        known: Known,
        stretch: Stretch | None,
        automatic: np.ndarray | None,
    ) -> None:
        self.record, self.known, self.stretch = record, known, stretch
        self.in_manual = automatic is not None and not automatic.any()
        self.evidence: list[Evidence] = []
        self.at_limit = _at_limit(record, known)
        self._find_swings()
        self._find_upsets()
        self._find_valve()
        self.harris = self._harris()

    def _say(self, cause: Cause, supports: bool, words: str) -> None:
        self.evidence.append(Evidence(cause, supports, words))

    def _find_swings(self) -> None:
        self.swings: tuple[Swing, ...] = ()
        self.regularity = Figure(None, f"fewer than {FEWEST_ROWS} even rows to look at")
        if self.stretch is None:
            return
        error, interval = self.stretch.error, self.stretch.interval
        self.swings = swings(error, interval)
        whole = regularity(error)
        if self.swings:
            self.regularity = Figure.of(self.swings[0].regularity)
        elif whole is not None:
            self.regularity = Figure.of(whole.index)
        else:
            self.regularity = Figure(None, "the autocovariance hardly crosses zero")

    def _find_upsets(self) -> None:
        known, self.upsets = self.known, None
        if self.stretch is not None and known.pv_span and known.integral_time_s:
            self.upsets = load_upsets(
                self.stretch.error, self.stretch.interval, known.pv_span, known.integral_time_s
            )

    def _find_valve(self) -> None:
        self.correlation: Correlation | None = None
        self.shape: Shape | None = None
        self.verdict: Verdict = "undecided"
        none = Figure(None, "PV does not swing regularly, so its shape tells nothing of the valve")
        self.amount = self.lost_motion = none
        if self.stretch is None or not self.swings or self._op_stands():
            return
        pv, op = self.stretch.pv, self.stretch.op
        period = self.swings[0].period_s / self.stretch.interval
        self.shape = shape(pv if self.known.integrating else op, period)
        verdicts: list[Verdict] = [] if self.shape is None else [self.shape.verdict]
        if not self.known.integrating:
            self.correlation = correlation(pv, op)
            verdicts += [] if self.correlation is None else [self.correlation.verdict]
        self.verdict = together(verdicts)
        if self.verdict == "no stick-slip":
            self.amount = self.lost_motion = Figure(None, "the valve is not found to stick")
            return
        per_cent = 100.0 / (self.known.op_high - self.known.op_low)
        self.amount = Figure.of(apparent_amount(pv, op, period) * per_cent)
        self.lost_motion = deadband(pv, op).times(per_cent)

    def _op_stands(self) -> bool:
        """OP did not answer the swing at all."""
        return self.stretch is not None and not float(np.ptp(self.stretch.op)) > 0.0

    def _harris(self) -> Figure:
        if self.stretch is None:
            return Figure(None, f"fewer than {FEWEST_ROWS} even rows to look at")
        if self.known.dead_time_s is None:
            return Figure(None, "it needs the dead time: give --dead-time, or a case")
        if self.in_manual:
            return Figure(None, "the controller was in manual")
        delay = math.floor(self.known.dead_time_s / self.stretch.interval + 1e-9) + 1
        return minimum_variance_index(self.stretch.error, delay)

    # -- what it amounts to --

    def cause(self) -> Cause:
        """The likely cause; fills in the evidence."""
        sensor = self._about_sensor()
        if not self.swings:
            return self._steady(sensor)
        limited = self.at_limit.value or 0.0
        if limited > 10.0:
            words = f"OP stood at a limit for {text(limited, '%', 2)} of the time"
            self._say("tuning", False, f"{words}, where no setting moves it")
        first = self.swings[0]
        seen = f"PV swings every {time_text(first.period_s, 3)}, regularity " + text(
            first.regularity, digits=2
        )
        self._say("none", False, f"{seen} (a swing above 1; below 1 for 95 % of plain noise)")
        if sensor:
            return "sensor"
        if self.in_manual or self._op_stands():
            words = "it swings while the controller is in manual or OP stands still"
            self._say("upset", True, words)
            self._say("tuning", False, words)
            self._say("valve", False, words)
            return "upset"
        self._about_valve()
        own = self._about_period()
        if self.verdict == "stick-slip":
            return "valve"
        if own == "upset":
            return "upset"
        # The valve must be ruled out first: a period alone fits too many loops.
        return "tuning" if own == "tuning" and self.verdict == "no stick-slip" else "undecided"

    def _steady(self, sensor: bool) -> Cause:
        if sensor:
            return "sensor"
        if self.stretch is None:
            return "undecided"
        self._say("none", True, "PV does not swing regularly")
        if self.upsets is not None and self.upsets.alarm:
            most = text(self.upsets.most_at_once, digits=3)
            self._say(
                "upset", True, f"{most} upsets at once, more than 10, without a regular swing"
            )
            return "upset"
        return "none"

    def _about_valve(self) -> None:
        if self.shape is not None:
            name = "PV" if self.known.integrating else "OP"
            words = (
                f"half waves of {name}, triangle against sine: {text(self.shape.index, digits=2)}"
            )
            words += " (above 0.6 sticks, below 0.4 not)"
            if self.shape.verdict != "undecided":
                self._say("valve", self.shape.verdict == "stick-slip", words)
        if self.correlation is not None:
            words = (
                "cross-correlation of OP and PV shifted by "
                f"{text(self.correlation.shift, digits=2)} (above 2/3 sticks, below 1/3 not)"
            )
            if self.correlation.verdict != "undecided":
                self._say("valve", self.correlation.verdict == "stick-slip", words)

    def _about_period(self) -> Cause | None:
        """Whether the loop could swing by itself with this period."""
        period, known = self.swings[0].period_s, self.known
        if known.own_period_s is not None:
            low, high = (share * known.own_period_s for share in _OWN_SWING)
            words = f"the loop's own period is about {time_text(known.own_period_s, 3)}"
            if not low <= period <= high:
                self._say("tuning", False, words)
                if self.verdict != "no stick-slip":
                    return None
                self._say("upset", True, f"{words}, so this one comes from elsewhere")
                return "upset"
            self._say("tuning", True, words)
            if known.max_sensitivity is not None and known.max_sensitivity < _LIVELY:
                damped = f"with Ms {text(known.max_sensitivity, digits=3)} it should die out"
                self._say("tuning", False, damped)
                return None
            return "tuning"
        if known.dead_time_s:
            ratio = period / known.dead_time_s
            words = f"the period is {text(ratio, digits=2)} dead times"
            if ratio < 2.0:
                words += ", and below 2 no loop swings by itself"
                self._say("tuning", False, words)
                self._say("upset", True, words)
                return "upset"
            if ratio <= _MOST_DEAD_TIMES:
                self._say("tuning", True, f"{words}, as where the gain is too high (2 to 8)")
                return "tuning"
            self._say("tuning", False, f"{words}: too slow for a gain that is too high (2 to 8)")
        return None

    def _about_sensor(self) -> bool:
        """Whether PV itself is not to be believed."""
        pv = self.record.pv
        rows, moved = len(pv), np.diff(self.record.op) != 0.0
        if rows < FEWEST_ROWS or not np.diff(pv).any():
            if rows >= FEWEST_ROWS and moved.any():
                self._say("sensor", True, "PV never changes while OP moves")
                return True
            return False
        frozen = _longest_run(np.diff(pv) == 0.0)
        usual = float(np.mean(np.diff(pv) == 0.0))
        if frozen > max(20, rows // 10) and usual < 0.9 and moved.any():
            self._say(
                "sensor", True, f"PV stands exactly still for {frozen + 1} rows and then moves"
            )
        spikes = _spikes(pv)
        if spikes > max(2, rows // 200):
            self._say("sensor", True, f"{spikes} single rows stand out of PV by far")
        return any(found.cause == "sensor" and found.supports for found in self.evidence)


def _longest_run(claim: np.ndarray) -> int:
    """How many in a row."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], claim, [False]]).astype(int)))
    return int((edges[1::2] - edges[::2]).max(initial=0))


def _spikes(pv: Array) -> int:
    """Rows off both neighbours by 10 usual steps, to the same side, and back at once."""
    up, down = np.diff(pv)[:-1], -np.diff(pv)[1:]
    usual = 1.4826 * float(np.median(np.abs(np.diff(pv))))
    if not usual > 0.0:
        return 0
    alike = (up * down > 0.0) & (np.abs(up - down) < 0.3 * np.abs(up))
    return int(np.count_nonzero(alike & (np.minimum(np.abs(up), np.abs(down)) > 10.0 * usual)))


def _at_limit(record: Record, known: Known) -> Figure:
    """Share of the time that OP stood at a limit [%]."""
    low = known.op_low if known.op_min is None else known.op_min
    high = known.op_high if known.op_max is None else known.op_max
    span = known.op_high - known.op_low
    if float(record.op.min()) < low - 0.02 * span or float(record.op.max()) > high + 0.02 * span:
        reason = f"OP goes beyond {text(low)} to {text(high)}: give its range, or a case"
        return Figure(None, reason)
    near = 1e-4 * span
    there = (record.op <= low + near) | (record.op >= high - near)
    lasting = np.append(np.diff(record.time), 0.0)
    return Figure.of(100.0 * float(lasting[there].sum()) / record.duration)


def _notes(record: Record, known: Known, stretch: Stretch | None) -> list[Note]:
    """What the findings rest on."""
    notes = [note for note in record.notes if note.severity == "caution"]
    if stretch is None:
        words = f"No stretch of {FEWEST_ROWS} rows without gaps: only times and modes are told."
        return [*notes, Note("caution", words)]
    lasting = len(stretch.pv) * stretch.interval
    if lasting < 0.9 * record.duration:
        words = f"Looked at: the longest unbroken stretch, {time_text(lasting, 3)}"
        if record.mode is not None:
            words += ", in automatic where there is any"
        notes.append(Note("info", f"{words}."))
    if stretch.sp is None:
        notes.append(Note("info", "Without SP, PV is judged about its own straight line."))
    if record.mode is None:
        notes.append(
            Note("info", "Without a mode column the controller is taken to be in automatic.")
        )
    if known.integrating:
        words = "For an integrating plant the cross-correlation says nothing and is left out."
        notes.append(Note("info", words))
    return notes
