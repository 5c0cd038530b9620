"""The loop about its operating point: what margins are of where something in it is not linear."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from workbench.case.case import Case
from workbench.model.feedback import Loop
from workbench.model.robustness import Margins
from workbench.sim.valve import Setting, gains_over_travel
from workbench.study.loop import instruments_of
from workbench.units import Note, text

_JUDGED_AT: Final = 0.1
"""Error, as a share of the PV span, at which a controller without gain at no error is judged."""


def about_rest(loop: Loop) -> Loop:
    """The loop as a small move about its operating point meets it.

    A gain that grows with the error is what it is at no error; where that is nothing, what it is at
    an error of 10 % of the span.  Limits, the dead zone and faults of the valve do not count; the
    valve's characteristic does not either, as the plant is what it is at the operating point.
    """
    if loop.gain_at_rest == 1.0:
        return loop
    share, gains = loop.gain_at_rest or _JUDGED_AT, loop.gains
    local = replace(
        gains,
        proportional=share * gains.proportional,
        integral=share * gains.integral,
        # P = Kp (b r - y + e' - e) with e' = share e
        setpoint_weight=(gains.setpoint_weight + share - 1.0) / share,
    )
    return replace(loop, gains=local, gain_at_rest=1.0)


def operating_notes(case: Case, loop: Loop, margins: Margins) -> list[Note]:
    """What the margins about the operating point leave out."""
    return [*_error_notes(loop), *_valve_notes(case, margins)]


def _error_notes(loop: Loop) -> list[Note]:
    notes = []
    if loop.gain_at_rest != 1.0:
        share = text(100.0 * (loop.gain_at_rest or _JUDGED_AT), "%")
        where = "no error" if loop.gain_at_rest else f"an error of {text(100 * _JUDGED_AT, '%')}"
        words = f"margins are those at {where}, where {share} of the gain acts"
        notes.append(Note("info", f"{words}; larger errors meet up to the whole gain"))
    if loop.dead_zone:
        notes.append(Note("info", "margins are those beyond the dead zone; inside it nothing acts"))
    return notes


def _valve_notes(case: Case, margins: Margins) -> list[Note]:
    """How the loop's gain changes along the valve's travel, as it has a characteristic."""
    if case.valve.characteristic == "linear":
        return []
    moved = case.inner if case.inner.is_there else case.op
    built = instruments_of(case)
    low, high = (
        moved.range.percent((end if limit is None else limit) - moved.low)
        for end, limit in ((moved.low, moved.min), (moved.high, moved.max))
    )
    setting = Setting(built.op_rest, 1.0, built.closes_on_rise)
    least, most = gains_over_travel(case.valve, setting, low, high)
    words = (
        "margins are those at the operating point; along the valve's travel within the limits its "
        f"gain goes from {text(least, digits=2)} to {text(most, digits=2)} times that"
    )
    allowed = margins.gain_margin.value
    if case.inner.is_there or allowed is None or most < allowed:
        return [Note("info", words)]
    return [Note("caution", f"{words}, beyond the gain margin of {text(allowed, digits=3)}")]
