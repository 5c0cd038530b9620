"""Records taken with the controller at work: can they tell the plant, and what their steps tell.

Where OP only follows PV, the record holds the controller as much as the plant: a fit of OP to PV
then finds a confident-looking nothing.  Something from outside must move the loop: the setpoint, or
OP in manual.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import NotApplicable
from workbench.records.record import Record
from workbench.records.response import Array
from workbench.records.stretch import is_automatic
from workbench.units import text

_FOLLOWS: Final = 0.95
"""Share of the moves of OP that PV explains above which OP only follows PV."""

LEAST_AGREEMENT: Final = 70.0
"""Agreement [%] that a fit to a record in automatic must reach to be used."""

# --- the gate ------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Feedback:
    """How OP came about in a record."""

    automatic_share: float
    """Share of the rows whose mode says that the controller moved OP; 0 where none says it."""
    at_most_rows: bool
    """OP moves at more than half of the rows."""
    follows_pv: float
    """Share of the moves of OP (R squared) that PV and its changes explain, SP left aside."""
    setpoint_moves: int
    """How often SP moved while the controller was not in manual."""
    manual_moves: int
    """How often OP moved in manual, where the record says the mode."""

    @property
    def closed(self) -> bool:
        """Whether the controller is known, or nearly certain, to have been in automatic."""
        return self.automatic_share > 0.9 or self.follows_pv > _FOLLOWS

    @property
    def refusal(self) -> str:
        """Why this record cannot tell the plant; nothing where it may."""
        if not self.closed or self.setpoint_moves or self.manual_moves >= 2:
            return ""
        shown = (
            "the controller was in automatic"
            if self.automatic_share > 0.9
            else f"PV alone explains {100 * self.follows_pv:.0f} % of the moves of OP, so that a "
            "controller was at work"
        )
        return (
            f"The record cannot tell: {shown} and SP never moved, so OP only followed PV. "
            "Move SP, or make the bump in manual."
        )


def feedback(record: Record) -> Feedback:
    """How OP came about: by hand, or from PV.

    Source
    ------
    T. Soderstrom, L. Ljung and I. Gustavsson, "Identifiability conditions for linear multivariable
    systems operating under feedback", IEEE Trans. Autom. Control 21(6), 1976, 837-840 (from
    memory): with a simple controller and no outside excitation the regressors are dependent.
    """
    moving = np.diff(record.op) != 0
    logged = is_automatic(record)
    automatic = np.zeros(len(record.op), dtype=bool) if logged is None else logged
    manual = 0 if logged is None else int(np.count_nonzero(moving & ~automatic[1:]))
    moved_sp = 0
    if record.sp is not None:
        steps = np.diff(record.sp) != 0
        moved_sp = int(np.count_nonzero(steps & (automatic[1:] | (logged is None))))
    most = bool(np.count_nonzero(moving) > 0.5 * len(record.op))
    return Feedback(
        float(automatic.mean()), most, _explained(record) if most else 0.0, moved_sp, manual
    )


def _explained(record: Record) -> float:
    """R squared of the moves of OP on PV, its change and the changes before: any P, PI or PID."""
    step, pv = np.diff(record.time), record.pv - record.pv.mean()
    change, moved = np.diff(pv), np.diff(record.op)
    columns = np.stack(
        [
            change[2:],
            change[1:-1],
            change[:-2],
            pv[3:] * step[2:],
            pv[2:-1] * step[2:],
            step[2:],
        ]
    )
    target = moved[2:]
    size = np.linalg.norm(columns, axis=1, keepdims=True) + 1e-300
    found = np.linalg.lstsq((columns / size).T, target, rcond=1e-10)[0]
    left = target - found @ (columns / size)
    return 1.0 - float(left @ left) / (float((target - target.mean()) @ target) + 1e-300)


# --- setpoint steps under proportional control ---------------------------------------------------


@dataclass(frozen=True)
class SetpointStep:
    """The answer of PV to a setpoint step, in deviations from before it."""

    gain: float
    """Of the proportional controller, OP units per PV unit; the sign is that of reverse action."""
    size: float
    """Of the setpoint step, PV units."""
    first_peak: float
    first_low: float
    second_peak: float | None
    """PV units; `None` where the record ends before it."""
    peak_after_s: float
    """From the step to the first peak [s]."""
    low_after_s: float
    """From the step to the low after it [s]."""

    @property
    def final(self) -> float:
        """Where PV is heading: 0.45 (first peak + first low)."""
        return 0.45 * (self.first_peak + self.first_low)

    @property
    def overshoot(self) -> float:
        """Over where PV is heading, as a share."""
        return (self.first_peak - self.final) / self.final


@dataclass(frozen=True)
class StepModel:
    """One lag and dead time from one test by a published method."""

    method: str
    gain: float
    time_constant_s: float
    dead_time_s: float
    remark: str = ""
    """What to distrust; empty where nothing."""


def shamsuzzoha_skogestad(step: SetpointStep) -> StepModel:
    """One lag with dead time from a setpoint step under proportional control.

    y_inf = 0.45 (y_p + y_u),  O = (y_p - y_inf)/y_inf,  B = |(y_s - y_inf)/y_inf|,
    A = 1.152 O^2 - 1.607 O + 1,  r = 2 A/B,
    K = 1/(Kc0 B),  L = t_p (0.309 + 0.209 exp(-0.61 r)),  T = r L

    Parameters
    ----------
    step
        Best with an overshoot near 0.3.

    Returns
    -------
    StepModel
        Gain in PV units per OP unit, times in s.

    Raises
    ------
    NotApplicable
        PV does not overshoot, or goes the wrong way.

    Notes
    -----
    Published for overshoots of 0.1 to 0.6.

    Source
    ------
    M. Shamsuzzoha and S. Skogestad, "The setpoint overshoot method: a simple and fast closed-loop
    approach for PID tuning", J. Process Control 20, 2010, 1220-1234 (from memory).
    """
    final, over = step.final, step.overshoot
    if not (over > 0.0 and final * step.size > 0.0):
        raise NotApplicable(
            "PV does not overshoot where it is heading",
            limit="the method wants an overshoot of 10 to 60 %",
        )
    b = abs((step.size - final) / final)
    ratio = 2.0 * (1.152 * over**2 - 1.607 * over + 1.0) / b
    late = step.peak_after_s * (0.309 + 0.209 * math.exp(-0.61 * ratio))
    caution = ""
    if not 0.1 <= over <= 0.6:
        caution = f"the overshoot is {100 * over:.0f} %, outside the 10 to 60 % of the method"
    name = "setpoint step, proportional control (Shamsuzzoha and Skogestad 2010)"
    return StepModel(name, 1.0 / (step.gain * b), ratio * late, late, caution)


def yuwana_seborg(step: SetpointStep) -> StepModel:
    """One lag with dead time from two peaks of a setpoint step under proportional control.

    y_inf = (y_p1 y_p2 - y_m^2)/(y_p1 + y_p2 - 2 y_m),  Kf = y_inf/(y_s - y_inf),
    z = -ln q/sqrt(pi^2 + ln^2 q),  q = (y_inf - y_m)/(y_p1 - y_inf),  D = t_m - t_p,
    g = z sqrt(Kf + 1) + sqrt(z^2 (Kf + 1) + Kf),  w = sqrt((1 - z^2)(Kf + 1)),
    K = Kf/Kc,  T = D g w/pi,  L = 2 D w/(pi g)

    Parameters
    ----------
    step
        With a second peak.

    Returns
    -------
    StepModel
        Gain in PV units per OP unit, times in s.

    Raises
    ------
    NotApplicable
        No second peak, or a swing that does not die out.

    Notes
    -----
    Takes a first-order approximation of the dead time.

    Source
    ------
    M. Yuwana and D.E. Seborg, "A new method for on-line controller tuning", AIChE J. 28(3), 1982,
    434-440 (from memory).
    """
    high, low, again = step.first_peak, step.first_low, step.second_peak
    limit = "the method wants two peaks of a swing that dies out"
    if again is None:
        raise NotApplicable("the second peak of PV is not seen", limit=limit)
    final = (high * again - low * low) / (high + again - 2.0 * low)
    decay = (final - low) / (high - final)
    if not (0.0 < decay < 1.0 and 0.0 < final / step.size < 1.0):
        raise NotApplicable("the swing of PV does not die out evenly", limit=limit)
    loop = final / (step.size - final)
    z = -math.log(decay) / math.hypot(math.pi, math.log(decay))
    half = step.low_after_s - step.peak_after_s
    g = z * math.sqrt(loop + 1.0) + math.sqrt(z * z * (loop + 1.0) + loop)
    w = math.sqrt((1.0 - z * z) * (loop + 1.0))
    return StepModel(
        "setpoint step, proportional control (Yuwana and Seborg 1982)",
        loop / step.gain,
        half * g * w / math.pi,
        2.0 * half * w / (math.pi * g),
    )


def setpoint_step(record: Record) -> SetpointStep | None:
    """The first setpoint step of a record in which OP is proportional to the error, else nothing.

    The controller's gain is found from the record: OP = level - gain (PV - b SP), which must
    explain 99 % of OP's variance.
    """
    if record.sp is None:
        return None
    moved = np.flatnonzero(np.diff(record.sp) != 0) + 1
    if not len(moved) or np.ptp(record.op) == 0.0:
        return None
    columns = np.stack([record.pv, record.sp, np.ones(len(record.pv))])
    found = np.linalg.lstsq(columns.T, record.op, rcond=1e-10)[0]
    left = record.op - found @ columns
    gain = -float(found[0])
    if float(np.var(left)) > 0.01 * float(np.var(record.op)) or gain == 0.0:
        return None
    first = int(moved[0])
    last = int(moved[1]) if len(moved) > 1 else len(record.pv)
    size = float(record.sp[first] - record.sp[first - 1])
    before = float(record.pv[max(first - 20, 0) : first].mean())
    return _peaks(
        gain, size, record.time[first:last] - record.time[first], record.pv[first:last] - before
    )


def _peaks(gain: float, size: float, time: Array, pv: Array) -> SetpointStep | None:
    """First peak, low and second peak of PV in the direction of the step."""
    shown = pv * math.copysign(1.0, size)
    if len(shown) < 8:
        return None
    # Noise makes small peaks of its own; third differences leave little else, 20 times its power.
    noise = float(np.std(np.diff(shown, 3))) / math.sqrt(20.0)
    least = max(4.0 * noise, 1e-4 * float(np.ptp(shown)))
    turns: list[int] = []
    wanted, extreme = 1.0, 0
    for i in range(len(shown)):
        if wanted * (shown[i] - shown[extreme]) > 0:
            extreme = i
        elif wanted * (shown[extreme] - shown[i]) > least:
            turns.append(extreme)
            wanted, extreme = -wanted, i
            if len(turns) == 3:
                break
    if len(turns) < 2:
        if len(turns) < 1 or extreme == turns[0]:
            return None
        turns.append(extreme)
    values = [float(pv[i]) for i in turns]
    times = [_vertex(time, shown, i) for i in turns]
    return SetpointStep(
        gain, size, values[0], values[1], values[2] if len(turns) > 2 else None, times[0], times[1]
    )


def _vertex(time: Array, shown: Array, at: int) -> float:
    """Where the parabola through an extreme and its neighbours turns [s]."""
    if not 0 < at < len(time) - 1:
        return float(time[at])
    t, y = time[at - 1 : at + 2] - time[at], shown[at - 1 : at + 2]
    bend, slope, _ = np.linalg.solve(np.stack([t * t, t, np.ones(3)], axis=1), y)
    if bend == 0.0:
        return float(time[at])
    return float(time[at] + np.clip(-slope / (2.0 * bend), t[0], t[2]))


# --- a relay in place of the controller ----------------------------------------------------------


@dataclass(frozen=True)
class RelaySwing:
    """The steady swing that a relay in place of the controller makes; halves of peak to peak."""

    op: float
    """OP units."""
    pv: float
    """PV units."""
    period_s: float
    hysteresis: float
    """PV units."""

    @property
    def ultimate_gain(self) -> float:
        """4 d/(pi sqrt(a^2 - e^2)) [OP units per PV unit].

        Source
        ------
        K.J. Astrom and T. Hagglund, "Automatic tuning of simple regulators with specifications on
        phase and amplitude margins", Automatica 20, 1984, 645-651 (from memory).
        """
        return 4.0 * self.op / (math.pi * math.sqrt(self.pv**2 - self.hysteresis**2))

    @property
    def option(self) -> str:
        """As `propose --relay` takes it."""
        found = (self.op, self.pv, None, self.hysteresis)
        return ":".join(f"{self.period_s:.4g} s" if x is None else text(x) for x in found)


def relay_swing(record: Record) -> RelaySwing | None:
    """The swing of a relay test, or nothing where OP did not switch as a relay does.

    OP stands at two levels, switches at even intervals at least six times, and does so while PV
    passes the middle of its swing, not at its ends, where a square wave moved by hand would.
    """
    low, high = float(record.op.min()), float(record.op.max())
    middle, size = 0.5 * (low + high), 0.5 * (high - low)
    if size == 0.0 or np.abs(np.abs(record.op - middle) - size).max() > 0.05 * size:
        # An OP that rested elsewhere before the test may be cut off with --from.
        return None
    switched = np.flatnonzero(np.diff(np.sign(record.op - middle)) != 0) + 1
    if len(switched) < 7:
        return None
    # The first third is left to the swing to settle; whole periods of the rest are used.
    switched = switched[-(2 * ((len(switched) - 1) // 3) + 1) :]
    at = record.time[switched]
    periods = at[2:] - at[:-2]
    whole = [record.pv[a:b] for a, b in zip(switched[:-2], switched[2:], strict=True)]
    swing = float(np.median([0.5 * np.ptp(pv) for pv in whole]))
    centre = float(np.median([0.5 * (pv.max() + pv.min()) for pv in whole]))
    if swing == 0.0 or np.std(periods) > 0.1 * np.mean(periods):
        return None
    edge = _switching(record.pv[switched], record.op[switched] > middle, centre, swing)
    if edge is None:
        return None
    # One row of travel is no hysteresis.
    row = float(np.median(np.abs(np.diff(record.pv))))
    return RelaySwing(size, swing, float(periods.mean()), edge if edge > 2.0 * row else 0.0)


def _switching(pv: Array, rising: NDArray[np.bool_], centre: float, swing: float) -> float | None:
    """Half the distance in PV between switching up and down, or nothing where no relay did it."""
    up, down = pv[rising], pv[~rising]
    edge = 0.5 * abs(float(up.mean() - down.mean()))
    middle = 0.5 * float(up.mean() + down.mean())
    if max(up.std(), down.std()) > 0.3 * swing or edge > 0.7 * swing:
        return None
    return None if abs(middle - centre) > 0.5 * swing else edge
