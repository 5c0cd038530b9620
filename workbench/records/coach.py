"""What to do during a bump test: hold on, how much longer, move on, or begin again.

What the fit knows so far is compared with the certainty asked for; how its standard errors shrink
while OP is held is worked out from the Fisher information of the record continued into the future.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.plant import Shape
from workbench.model.response import held_response
from workbench.records.candidate import Candidate
from workbench.records.identify import Fit
from workbench.records.record import Record
from workbench.units import Amount, Figure, Range, text, time_text

Floats = NDArray[np.float64]

CERTAINTY: Final = 10.0
"""Largest standard error [%] that is aimed at where none is asked for."""

_HOLDS: Final = (0.1, 0.2, 0.35, 0.5, 0.75, 1.0, 1.5, 2.0, 3.0, 4.0, 5.0)
"""Further holds that are looked at, in slowest times of the plant."""
_ROWS: Final = 300
"""Rows that the look into the future is taken at; the ratio of standard errors changes little."""
_STANDSTILL: Final = 20
"""Rows of one and the same extreme value that are taken for a limit."""
_UPSET: Final = 6.0
"""Standard deviations of its mean by which PV must leave the fit."""
_UPSET_SHARE: Final = 0.1
"""Share of the PV's excursion below which leaving the fit does not spoil a test."""
_DRIFT_SHARE: Final = 0.4


@dataclass(frozen=True)
class Advice:
    """What is known so far, and what to do next."""

    known: tuple[str, ...]
    """Each parameter with its 95 % interval, in the record's units."""
    certainty_percent: Figure
    """Largest standard error: of gain, slope and time constants in percent of themselves, of the
    dead time in percent of dead time and slowest time constant together."""
    wanted_percent: float
    reached: bool
    """The certainty asked for is reached, and nothing spoils the test."""
    hold_s: Figure
    """How much longer to hold OP until it is reached."""
    spoilt: tuple[str, ...]
    """What makes the test worth repeating."""
    say: str
    """The advice in one sentence."""


def advise(
    fit: Fit,
    *,
    certainty: float = CERTAINTY,
    pv_range: Range | None = None,
    op_range: Range | None = None,
) -> Advice:
    """What to do next in the test that the record shows.

    Parameters
    ----------
    fit
        Of the record so far.
    certainty
        Wanted largest standard error [%], above 0.
    pv_range, op_range
        Instrument ranges, where they are known: values at their ends are limits.

    Returns
    -------
    Advice
        `hold_s` is a figure without a value where holding on does not reach the certainty.

    Source
    ------
    Fisher information: common practice.
    """
    record = fit.record
    best = fit.best or (fit.candidates[0] if fit.candidates else None)
    spoilt = _limits(record, pv_range, op_range)
    if best is None:
        missing = Figure(None, fit.reason or "no plant can be fitted yet")
        return Advice((), missing, certainty, False, missing, tuple(spoilt), _said_early(record))
    spoilt += [*_upsets(record, best), *_drift(record, best)]
    worst = _worst(best, best.standard_errors)
    reached = worst <= certainty and fit.chosen is not None and not spoilt
    hold = _hold(record, best, worst, certainty)
    return Advice(
        known=_known(best),
        certainty_percent=Figure.of(worst),
        wanted_percent=certainty,
        reached=reached,
        hold_s=Figure.of(0.0) if reached else hold,
        spoilt=tuple(spoilt),
        say=_said(fit, worst, certainty, hold, spoilt),
    )


# --- in words ------------------------------------------------------------------------------------


def _said_early(record: Record) -> str:
    if not np.diff(record.op).any():
        return "Make the bump: OP has not moved yet."
    return "Hold on: too little of PV's answer is there yet."


def _said(fit: Fit, worst: float, wanted: float, hold: Figure, spoilt: list[str]) -> str:
    if spoilt:
        return f"Repeat the test. {spoilt[0]}"
    sure = f"standard errors up to {text(worst, '%', 2)}, asked for {text(wanted, '%', 2)}"
    if fit.chosen is None:
        return f"Hold on: {fit.reason}"
    if worst <= wanted:
        moves = np.diff(fit.record.op)
        if (moves > 0).any() and (moves < 0).any():
            return f"Enough: {sure}. The test can end."
        return f"Enough for this bump: {sure}. Move OP back, and hold as long again."
    if hold.value is None:
        return f"Make the next bump, larger or to the other side: {hold.reason} ({sure})."
    return f"Hold for about {time_text(hold.value, 2)} more ({sure})."


def _known(best: Candidate) -> tuple[str, ...]:
    said = []
    for key, name, unit, value in (
        ("gain", "gain", "PV per OP", best.gain),
        ("slope_per_s", "slope", "PV/s per OP", best.slope_per_s),
        ("dead_time_s", "dead time", "s", best.dead_time_s),
        ("time_constants_s", "time constant", "s", best.time_constants_s),
    ):
        ends = best.interval_95.get(key)
        if value is None or not ends:
            continue
        values = value if isinstance(value, tuple) else (value,)
        pairs = ends if isinstance(ends[0], tuple) else (ends,)
        for one, pair in zip(values, pairs, strict=False):
            low, high = np.asarray(pair, dtype=np.float64).tolist()
            between = f"{text(low, digits=3)} to {text(high, digits=3)}"
            said.append(f"{name} {text(one, unit, 3)} (95 %: {between})")
    return tuple(said)


# --- how sure, now and later ---------------------------------------------------------------------


def _worst(best: Candidate, errors: dict[str, float | tuple[float, ...]]) -> float:
    """The largest standard error [%], each against what it is an error of."""
    shares = []
    for key, size in (("gain", best.gain), ("slope_per_s", best.slope_per_s)):
        error = errors.get(key)
        if size and isinstance(error, float):
            shares.append(error / abs(size))
    times = best.time_constants_s
    found = errors.get("time_constants_s", ())
    if isinstance(found, tuple):
        shares += [e / t for e, t in zip(found, times, strict=False) if t > 0]
    late, whole = errors.get("dead_time_s"), best.dead_time_s + max(times, default=0.0)
    if isinstance(late, float) and whole > 0:
        shares.append(late / whole)
    return 100.0 * min(max(shares, default=math.inf), 1e6)


def _slowest(best: Candidate, record: Record) -> float:
    times = [best.dead_time_s, *best.time_constants_s]
    return min(max(*times, 5.0 * record.interval), record.duration)


def _hold(record: Record, best: Candidate, worst: float, wanted: float) -> Figure:
    """How much longer OP must be held where it is [s]."""
    if worst <= wanted:
        return Figure.of(0.0)
    now = _predicted(record, best, 0.0)
    if now is None:
        return Figure(None, "gain, times and dead time cannot be told apart yet")
    before, least = 0.0, 1.0
    pace = _slowest(best, record)
    for share in _HOLDS:
        later = _predicted(record, best, share * pace)
        if later is None:
            continue
        least = min(least, later / now)
        if worst * later / now <= wanted:
            return Figure.of(0.5 * (before + share) * pace if before else share * pace)
        before = share
    best_found = text(worst * least, "%", 2)
    return Figure(
        None, f"holding this level for {time_text(before * pace, 2)} more would leave {best_found}"
    )


def _predicted(record: Record, best: Candidate, further: float) -> float | None:
    """The largest standard error by the Fisher information [%], OP held `further` seconds on.

    `None` where the parameters cannot be told apart.
    """
    end = record.duration + further
    time = np.linspace(0.0, end, _ROWS)
    moved = np.append(True, np.diff(record.op) != 0)
    at, level = record.time[moved], record.op[moved] - record.op[0]
    if len(at) > _ROWS:
        return None
    plants = _varied(best.plant)
    base = held_response(best.plant.transfer(), at, level, time)
    columns = [(held_response(p.transfer(), at, level, time) - base) / 1e-4 for _, p in plants]
    drift = [time / end] if best.drift_per_s or best.slope_per_s is not None else []
    jacobian = np.stack([*columns, np.ones(_ROWS), *drift])
    step = end / (_ROWS - 1)
    if best.noise_time_s:
        rho = math.exp(-step / best.noise_time_s)
        white = (jacobian[:, 1:] - rho * jacobian[:, :-1]) / math.sqrt(1.0 - rho * rho)
        jacobian = np.column_stack([jacobian[:, :1], white])
    size = np.linalg.norm(jacobian, axis=1)
    if not (size > 0.0).all():
        return None
    triangle = np.linalg.qr((jacobian.T / size), mode="r")
    if np.linalg.cond(triangle) > 1e7:
        return None
    # Each column is for a relative change, so that each error is one; a row stands for more of
    # them where there are more.
    noise = best.residual_sd * (1.0 if best.noise_time_s else math.sqrt(record.interval / step))
    spread = noise * np.linalg.norm(np.linalg.inv(triangle), axis=1) / size
    whole = best.dead_time_s + max(best.time_constants_s, default=0.0)
    shares = [
        float(s) * (best.dead_time_s / whole if name == "dead_time" and whole else 1.0)
        for (name, _), s in zip(plants, spread, strict=False)
    ]
    return 100.0 * max(shares)


def _varied(plant: Shape) -> list[tuple[str, Shape]]:
    """The plant with each of its numbers a ten-thousandth larger."""
    found: list[tuple[str, Shape]] = []
    for one in fields(plant):
        value = getattr(plant, one.name)
        if isinstance(value, Amount) and value.value:
            changed: object = Amount(value.value * 1.0001, value.unit)
        elif isinstance(value, float) and value:
            changed = value * 1.0001
        else:
            continue
        found.append((one.name, replace(plant, **{one.name: changed})))  # type: ignore[arg-type]
    return found


# --- what spoils a test --------------------------------------------------------------------------


def _limits(record: Record, pv_range: Range | None, op_range: Range | None) -> list[str]:
    """PV that stands at a limit: of its range, or at its own extreme without any noise."""
    found = []
    for name, values, range_ in (("PV", record.pv, pv_range), ("OP", record.op, op_range)):
        if range_ is None:
            continue
        edge = 0.001 * (range_.high - range_.low)
        at = (values <= range_.low + edge) | (values >= range_.high - edge)
        if np.count_nonzero(at) > (2 if name == "PV" else 0):
            where = float(record.time[int(np.argmax(at))])
            found.append(f"{name} is at the end of its range from {time_text(where, 3)} on.")
    extreme = (record.pv == record.pv.max()) | (record.pv == record.pv.min())
    standing = _longest_run(extreme & np.append(False, np.diff(record.pv) == 0))
    elsewhere = np.diff(record.pv)[~extreme[1:]]
    moving = float(np.mean(elsewhere != 0)) if len(elsewhere) else 0.0
    if standing >= _STANDSTILL and moving > 0.5 and not any(w.startswith("PV") for w in found):
        found.append(
            f"PV stands still at an extreme value for {standing} rows: it is at a limit, or frozen."
        )
    return found


def _longest_run(flags: NDArray[np.bool_]) -> int:
    edges = np.flatnonzero(np.diff(np.concatenate(([False], flags, [False])).astype(np.int8)))
    return int((edges[1::2] - edges[::2]).max()) if len(edges) else 0


def _excursion(record: Record, best: Candidate) -> float:
    return float(np.ptp(best.fitted_pv - best.drift_per_s * record.time))


def _upsets(record: Record, best: Candidate) -> list[str]:
    """A stretch in which PV leaves the fit by more than noise does.

    The mean of the residual over half a slowest time is compared with what noise that is as large
    as the residual's row-to-row changes would make of it, and with PV's excursion: noise that
    wanders by less than a tenth of that is noise, more of it is an upset.
    """
    residual = record.pv - best.fitted_pv
    rows = int(0.5 * _slowest(best, record) / record.interval)
    rows = max(3, min(rows, len(residual) // 6))
    if len(residual) < 4 * rows:
        return []
    mean = np.convolve(residual, np.ones(rows) / rows, mode="valid")
    # From the median, because an upset has large changes of its own.
    noise = 1.4826 * float(np.median(np.abs(np.diff(residual)))) / math.sqrt(2.0)
    spread = noise / math.sqrt(rows)
    at = int(np.argmax(np.abs(mean)))
    size = float(mean[at])
    if abs(size) < max(_UPSET * spread, _UPSET_SHARE * _excursion(record, best)):
        return []
    start, end = (time_text(float(record.time[i]), 3) for i in (at, at + rows - 1))
    return [
        f"PV is {text(abs(size), digits=2)} {'above' if size > 0 else 'below'} the fit from {start}"
        f" to {end}: something other than OP moved it."
    ]


def _drift(record: Record, best: Candidate) -> list[str]:
    drifted, moved = abs(best.drift_per_s) * record.duration, _excursion(record, best)
    if best.gain is None or drifted < _DRIFT_SHARE * moved:
        return []
    return [
        f"PV drifted by {text(drifted, digits=2)} meanwhile, against {text(moved, digits=2)} from "
        "OP: wait until it rests."
    ]
