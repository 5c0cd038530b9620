"""The same controller in another algorithm form and in other units.

Two controllers are the same where the path from PV to OP is the same function of s, derivative
filter included.  Each form is exactly its canonical gains Kp, Ki, Kd and filter time Tf (`pid`) and
keeps its filter's pole, so that only the numerator has to be written again:

    C(s) = (A s^2 + B s + Ki) / (s (Tf s + 1)),   A = Kp Tf + Kd,   B = Kp + Ki Tf

parallel  Kp, Ki, Kd, Tf as they are
ideal     K = Kp,  Ti = Kp/Ki,  Td = Kd/Kp,  Tf as it is
series    C(s) = K (Ti s + 1)(Td s + 1) / (Ti s (Tf s + 1)):  Ti Td = A/Ki,  Ti + Td = B/Ki,
          K = Ki Ti, real where (Kp/Ki - Tf)^2 >= 4 Kd/Ki; the larger time is taken for Ti.
          Without integral action K = Kp and Td = Kd/Kp + Tf.

Source
------
Without a filter: K.J. Åström and T. Hägglund, "PID Controllers: Theory, Design and Tuning",
2nd ed., ISA, 1995, section 3.2, from memory; with one: partial fractions, derived here.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

from workbench.errors import NotApplicable, problem
from workbench.model.pid import Controller, Gains
from workbench.units import (
    GAIN_RATE_UNITS,
    INTEGRAL_UNITS,
    TIME_UNITS,
    Amount,
    Note,
    one_of,
    text,
)

_ROUNDING: Final = 1e-12
"""A discriminant this far below 0, as a share of its terms, is a double root."""
_SAME: Final = 1e-9
"""Numbers that differ by less than this share are the same setting."""


@dataclass(frozen=True)
class Units:
    """How the settings are to be written; what is left out stays as the controller has it."""

    gain: str | None = None
    """`gain` or `band`."""
    integral: str | None = None
    """Unit of the integral time, or of the integral gain of the parallel form."""
    derivative: str | None = None
    """Unit of time."""


@dataclass(frozen=True)
class Converted:
    """A controller in another form."""

    controller: Controller
    exact: bool
    """The path from PV to OP is the same function of s, filter included."""
    notes: tuple[Note, ...] = ()
    """Where the answer to the setpoint is not the same."""


@dataclass(frozen=True)
class _Numbers:
    """Settings of one form without their units."""

    gain: float
    """[%/%]"""
    integral: float | None
    """Integral time [s], or integral gain of the parallel form [1/s]."""
    derivative: float
    """Derivative time, or derivative gain of the parallel form [s]."""
    setpoint_weight: float
    """As the form would need it; a controller takes 0 to 1."""


def convert(settings: Controller, form: str, units: Units | None = None) -> Converted:
    """The same controller in the form `form`, with its numbers in `units`.

    Parameters
    ----------
    settings
        Every option that is no part of the form (action, scan, windup ...) is kept.
    form
        ideal, series or parallel.
    units
        The units asked for; those of `settings` where they fit the form.

    Returns
    -------
    Converted
        Exact but for rounding.  The filter stays N between ideal and parallel, and where the form
        stays; it becomes a time in the series form and out of it.

    Raises
    ------
    NotApplicable
        The form cannot hold these settings; says which limit they break.
    InputError
        A unit that the form does not use.
    """
    units = units or Units()
    gains = settings.gains()
    if abs(gains.derivative) <= _ROUNDING * (gains.proportional * gains.filter_time):
        # A series filter as long as the derivative time, or as the integral time, cancels it.
        gains = replace(gains, derivative=0.0)
    numbers = _as_it_stands(settings) if form == settings.form else HELD_BY[form](gains)
    gain, band = _gain_or_band(settings, numbers.gain, units.gain)
    controller = replace(
        settings,
        form=form,
        gain=gain,
        proportional_band=band,
        integral=_integral(settings, form, numbers.integral, units.integral),
        derivative=_derivative(settings, numbers.derivative, units.derivative),
        derivative_filter=_filter(settings, form, gains, numbers, units.derivative),
        setpoint_weight=min(max(numbers.setpoint_weight, 0.0), 1.0),
    )
    after = controller.gains()
    exact = _same(gains, after, (1.0, 1.0), (1.0, 1.0))
    return Converted(controller, exact, _setpoint_notes(gains, after, numbers.setpoint_weight))


# --- numbers of each form ------------------------------------------------------------------------


def _as_it_stands(settings: Controller) -> _Numbers:
    integral = settings.integral
    if integral is None:
        held = None
    else:
        held = integral.per_second if settings.form == "parallel" else integral.seconds
    derivative = settings.derivative.seconds if settings.derivative else 0.0
    return _Numbers(settings.gain_value, held, derivative, settings.setpoint_weight)


def _parallel(gains: Gains) -> _Numbers:
    _refuse_negative_derivative(gains, "parallel")
    return _Numbers(
        gains.proportional, gains.integral or None, gains.derivative, gains.setpoint_weight
    )


def _ideal(gains: Gains) -> _Numbers:
    k = _proportional(gains, "ideal")
    _refuse_negative_derivative(gains, "ideal")
    time = k / gains.integral if gains.integral else None
    return _Numbers(k, time, gains.derivative / k, gains.setpoint_weight)


def _series(gains: Gains) -> _Numbers:
    kp, ki = _proportional(gains, "series"), gains.integral
    td, tf, b = gains.derivative / kp, gains.filter_time, gains.setpoint_weight
    if not gains.derivative:
        return _Numbers(kp, kp / ki if ki else None, 0.0, b)
    if not ki:
        # On the error the setpoint passes the lead too: b (Td s + 1)/(Tf s + 1).
        return _Numbers(kp, None, td + tf, b)
    larger = _larger_time(kp / ki, td, tf)
    smaller = (kp * tf + gains.derivative) / ki / larger
    k = ki * larger
    # On the error: from the middle term of the setpoint's numerator; with b = 1 the others follow.
    on_error = (b * kp / ki + tf - smaller) / larger
    b = on_error if gains.derivative_weight else b * kp / k
    # What is 1 but for rounding is 1.
    return _Numbers(k, larger, smaller, 1.0 if abs(b - 1.0) <= _SAME else b)


def _larger_time(ti: float, td: float, tf: float) -> float:
    """The larger of the two times of the series form; ideal times given [s].

    Raises `NotApplicable` where the times would be complex.
    """
    inside = (ti - tf) ** 2 - 4.0 * ti * td
    if inside < -_ROUNDING * (ti + tf) ** 2:
        most = text((ti - tf) ** 2 / (4.0 * ti), "s")
        limit = (
            f"in ideal terms, integral time {text(ti, 's')} and filter time {text(tf, 's')} take a"
            f" derivative time of at most {most}, and here it is {text(td, 's')}"
        )
        if tf and ti >= 4.0 * td:
            limit += "; without a derivative filter the form would hold them"
        raise NotApplicable("the series form cannot hold these settings", limit=limit)
    return 0.5 * (ti + tf + math.sqrt(max(0.0, inside)))


def _proportional(gains: Gains, form: str) -> float:
    if gains.proportional > 0.0:
        return gains.proportional
    raise NotApplicable(
        f"the {form} form cannot hold these settings",
        limit="its gain multiplies every part, and here the proportional part is 0",
    )


def _refuse_negative_derivative(gains: Gains, form: str) -> None:
    if gains.derivative < 0.0:
        raise NotApplicable(
            f"the {form} form cannot hold these settings",
            limit="the series filter outlasts one of its two times, which makes the derivative"
            f" part negative: {text(gains.derivative, 's')}",
        )


# --- units of each setting -----------------------------------------------------------------------


def _gain_or_band(
    settings: Controller, gain: float, wanted: str | None
) -> tuple[float | None, float | None]:
    held = settings.proportional_band
    if wanted == "gain" or (wanted is None and held is None):
        return gain, None
    if not gain:
        raise NotApplicable(
            "a proportional band cannot hold these settings",
            limit="it is 100 / gain, and the gain is 0",
        )
    # A band that does not change keeps its digits.
    return None, held if held is not None and settings.gain_value == gain else 100.0 / gain


def _integral(
    settings: Controller, form: str, value: float | None, wanted: str | None
) -> Amount | None:
    units = GAIN_RATE_UNITS if form == "parallel" else INTEGRAL_UNITS
    if wanted is not None and wanted not in units:
        raise problem(
            f"{wanted!r} does not suit the {form} form", f"use {one_of(units)}", key="--integral-as"
        )
    held = settings.integral
    if value is None or held is None:
        return None
    unit = wanted or _carried(held.unit, form)
    if form == settings.form and unit == held.unit:
        return held
    if form == "parallel":
        return Amount(value / Amount(1.0, unit).per_second, unit)
    return Amount(1.0, unit).with_seconds(value)


def _carried(unit: str, form: str) -> str:
    """The unit of an integral part, or what comes nearest to it in the form."""
    if form == "parallel":
        return unit if unit in GAIN_RATE_UNITS else "1/s" if unit in _SECONDS else "1/min"
    return unit.removeprefix("1/") if unit in GAIN_RATE_UNITS else unit


_SECONDS: Final = ("s", "s/repeat", "repeats/s")


def _derivative(settings: Controller, value: float, wanted: str | None) -> Amount | None:
    held = settings.derivative
    if not value or held is None:
        return None
    unit = wanted or held.unit
    # The derivative of a form that stays is not worked out anew.
    return held if held.seconds == value and held.unit == unit else _time(value, unit)


def _time(seconds: float, unit: str) -> Amount:
    return Amount(seconds / TIME_UNITS[unit], unit)


def _filter(
    settings: Controller, form: str, gains: Gains, numbers: _Numbers, wanted: str | None
) -> float | Amount | None:
    kept = settings.derivative_filter
    if "series" not in (form, settings.form) or form == settings.form or not numbers.derivative:
        return kept
    assert settings.derivative is not None
    if not gains.filter_time:
        return None
    if isinstance(kept, Amount) and wanted in (None, kept.unit):
        return kept
    return _time(gains.filter_time, wanted or settings.derivative.unit)


# --- is it the same ------------------------------------------------------------------------------


def _same(one: Gains, other: Gains, b: tuple[float, float], c: tuple[float, float]) -> bool:
    """P + Ki/s + D s/(Tf s + 1), P = b Kp and D = c Kd, is the same function of s for both."""
    tops = []
    for gains, weight, derivative_weight in zip((one, other), b, c, strict=True):
        p, d = weight * gains.proportional, derivative_weight * gains.derivative
        tf = gains.filter_time if gains.derivative else 0.0
        tops.append((p * tf + d, p + gains.integral * tf, gains.integral, tf))
    kp, kd, tf = one.proportional, abs(one.derivative), one.filter_time
    sizes = (kp * tf + kd, kp + one.integral * tf, one.integral, tf)
    return all(
        abs(x - y) <= _SAME * size for x, y, size in zip(tops[0], tops[1], sizes, strict=True)
    )


def _setpoint_notes(one: Gains, other: Gains, needed: float) -> tuple[Note, ...]:
    """What is said where the path from the setpoint is not the same function of s."""
    weights = (one.setpoint_weight, other.setpoint_weight)
    if _same(one, other, weights, (one.derivative_weight, other.derivative_weight)):
        return ()
    told = "this form weights and filters the setpoint in another way"
    if not 0.0 <= needed <= 1.0:
        told = f"it would need a setpoint weight of {text(needed)}, and 0 to 1 is taken"
    said = f"the answer to PV and to upsets stays; the answer to a setpoint change does not: {told}"
    return (Note("caution", said),)


HELD_BY: Final[dict[str, Callable[[Gains], _Numbers]]] = {
    "ideal": _ideal,
    "parallel": _parallel,
    "series": _series,
}
"""Form name -> its numbers from canonical gains, or `NotApplicable`."""
