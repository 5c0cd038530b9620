"""PID settings as a controller shows them, and the one canonical set of gains behind them.

Signals are percent of span (R setpoint, Y process variable, U output), K the gain, Ti the integral
time, Td the derivative time, Tf the filter time, b the setpoint weight, c 1 for derivative on error
and 0 for derivative on PV:

ideal     U = K [ (b R - Y) + (R - Y)/(Ti s) + Td s/(1 + Tf s) (c R - Y) ],  Tf = Td/N
parallel  U = Kp (b R - Y) + Ki/s (R - Y) + Kd s/(1 + Tf s) (c R - Y),  Tf = (Kd/Kp)/N
series    U = K [ (b Rf - Yf) + (Rf - Yf)/(Ti s) ],  Yf = (1 + Td s)/(1 + Tf s) Y,  Tf = Td/N,
          Rf = R for derivative on PV, filtered as Y is for derivative on error

The parallel form with free weights is canonical: every form becomes it exactly.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

from workbench.errors import InputError, NotApplicable, Problem
from workbench.model.transfer import TransferFunction
from workbench.units import GAIN_RATE_UNITS, INTEGRAL_UNITS, Amount, check_fields, one_of, quantity


@dataclass(frozen=True)
class Gains:
    """Canonical controller: the parallel form, in percent of span and seconds."""

    proportional: float
    """Kp [%/%]."""
    integral: float = 0.0
    """Ki [%/(% s)]."""
    derivative: float = 0.0
    """Kd [% s/%]."""
    filter_time: float = 0.0
    """Tf of the derivative [s]."""
    setpoint_weight: float = 1.0
    """b, on the proportional part."""
    derivative_weight: float = 0.0
    """c, on the derivative: 0 acts on PV only, 1 on the error."""

    def from_pv(self) -> TransferFunction:
        """Transfer function from -Y to U: Kp + Ki/s + Kd s/(1 + Tf s)."""
        return self._combine(1.0, 1.0)

    def from_setpoint(self) -> TransferFunction:
        """Transfer function from R to U: b Kp + Ki/s + c Kd s/(1 + Tf s)."""
        return self._combine(self.setpoint_weight, self.derivative_weight)

    def _combine(self, b: float, c: float) -> TransferFunction:
        kp, ki, kd, tf = self.proportional, self.integral, self.derivative, self.filter_time
        # Over the common denominator s (Tf s + 1), written out so that nothing cancels later.
        square, linear, constant = b * kp * tf + c * kd, b * kp + ki * tf, ki
        if kd == 0.0:
            square, linear, tf = 0.0, b * kp, 0.0
        lag = (tf, 1.0) if tf else (1.0,)
        if ki == 0.0:
            return TransferFunction.ratio((square, b * kp), [lag])
        return TransferFunction.ratio((square, linear, constant), [(1.0, 0.0), lag])


@dataclass(frozen=True)
class Controller:
    """The controller as its sheet shows it: settings in its own form and units."""

    form: str = quantity(
        "algorithm form", "choice", default="ideal", choices=("ideal", "series", "parallel")
    )
    gain: float | None = quantity(
        "controller gain, percent OP per percent of PV span", "number", "%/%", low=0, default=None
    )
    proportional_band: float | None = quantity(
        "proportional band, 100 / gain", "number", "%", above=0, default=None
    )
    integral: Amount | None = quantity(
        "integral time, or its inverse; in the parallel form the integral gain",
        "integral",
        above=0,
        default=None,
        example="32 s",
    )
    derivative: Amount | None = quantity(
        "derivative time; in the parallel form the derivative gain",
        "derivative",
        low=0,
        default=None,
        example="3 s",
    )
    derivative_filter: float | Amount | None = quantity(
        "derivative filter: N (filter time = derivative time / N), a filter time, or none",
        "filter",
        above=0,
        default=10.0,
        example="0.4 s",
    )
    setpoint_weight: float = quantity(
        "weight of the setpoint in the proportional part", "number", low=0, high=1, default=1.0
    )
    derivative_on: str = quantity(
        "what the derivative acts on", "choice", default="pv", choices=("pv", "error")
    )
    action: str | None = quantity(
        "reverse: OP rises when PV falls; direct: OP rises when PV rises",
        "choice",
        default=None,
        choices=("reverse", "direct"),
    )
    scan: Amount | None = quantity(
        "execution interval; left out means an analogue controller",
        "duration",
        above=0,
        default=None,
        example="1 s",
    )
    computing_delay: Amount | None = quantity(
        "from sampling to the change of the output, at most one scan",
        "duration",
        low=0,
        default=None,
        example="0.1 s",
    )
    windup: str = quantity(
        "how the integral is held at an output limit",
        "choice",
        default="conditional",
        choices=("conditional", "tracking", "external-reset"),
    )
    execution: str = quantity(
        "positional: the output is computed anew at every scan; incremental: its changes are",
        "choice",
        default="positional",
        choices=("positional", "incremental"),
    )
    dead_zone: float = quantity(
        "error up to which the controller sees none", "number", "PV", low=0, default=0.0
    )
    gain_at_rest: float = quantity(
        "share of the gain left at no error; it grows to 1 at an error of the whole PV span",
        "number",
        low=0,
        high=1,
        default=1.0,
    )
    bias: float | None = quantity(
        "manual reset: OP at no error, without integral action; left out: the operating point",
        "number",
        "OP",
        default=None,
    )
    setpoint_rate: Amount | None = quantity(
        "fastest change of the setpoint that the controller follows",
        "rate",
        "PV",
        above=0,
        default=None,
        example="0.5 /s",
    )
    setpoint_filter: Amount | None = quantity(
        "time constant of the setpoint's first-order filter",
        "duration",
        low=0,
        default=None,
        example="10 s",
    )

    def __post_init__(self) -> None:
        check_fields(self)
        faults = list(self._faults())
        if faults:
            raise InputError(faults)

    def _faults(self) -> list[Problem]:
        faults = []
        if self.gain is None and self.proportional_band is None:
            faults.append(Problem("is missing", "give gain or proportional_band", "gain"))
        if self.gain is not None and self.proportional_band is not None:
            faults.append(
                Problem(
                    "is given beside gain",
                    "keep one of gain and proportional_band",
                    "proportional_band",
                )
            )
        if self.gain == 0 and self.form != "parallel":
            faults.append(
                Problem(
                    f"is 0 in the {self.form} form",
                    "give a positive gain, or use the parallel form",
                    "gain",
                )
            )
        units = GAIN_RATE_UNITS if self.form == "parallel" else INTEGRAL_UNITS
        if self.integral is not None and self.integral.unit not in units:
            faults.append(
                Problem(
                    f"has the unit {self.integral.unit!r} in the {self.form} form",
                    f"use {one_of(units)}",
                    "integral",
                )
            )
        if self.execution == "incremental" and self.integral is None:
            faults.append(
                Problem(
                    "is incremental without integral action: PV would never come back",
                    "give an integral time, or positional",
                    "execution",
                )
            )
        if self.bias is not None and self.integral is not None:
            faults.append(
                Problem(
                    "is given beside integral action, which finds the output by itself",
                    "leave one of bias and integral out",
                    "bias",
                )
            )
        if self.scan is not None and self.scan.seconds >= 3600:
            faults.append(Problem(f"{self.scan} is too long", "give less than 1 h", "scan"))
        if self.computing_delay is not None and self.computing_delay.value:
            if self.scan is None:
                faults.append(
                    Problem(
                        "is given for an analogue controller",
                        "give a scan too, or leave it out",
                        "computing_delay",
                    )
                )
            elif self.computing_delay.seconds > self.scan.seconds:
                faults.append(
                    Problem(
                        f"{self.computing_delay} is longer than the scan {self.scan}",
                        "give at most one scan",
                        "computing_delay",
                    )
                )
        if (
            self.form == "parallel"
            and self.gain == 0
            and self.derivative is not None
            and isinstance(self.derivative_filter, int | float)
        ):
            faults.append(
                Problem(
                    "is N where the gain is 0",
                    'give a filter time, like "0.4 s", or none',
                    "derivative_filter",
                )
            )
        if self.form == "series" and self.integral is not None:
            faults.extend(self._series_faults(self.integral.seconds))
        return faults

    def _series_faults(self, integral_time: float) -> list[Problem]:
        """The filter may not outweigh the proportional part, Kp = K (1 + (Td - Tf)/Ti)."""
        derivative_time = self.derivative.seconds if self.derivative else 0.0
        if _filter_time(self, derivative_time) < derivative_time + integral_time:
            return []
        what = "leaves the series form without proportional action"
        mend = "give a filter time below integral and derivative time together"
        return [Problem(what, mend, "derivative_filter")]

    @property
    def gain_value(self) -> float:
        """The gain [%/%], from the gain or the proportional band."""
        if self.gain is not None:
            return self.gain
        assert self.proportional_band is not None
        return 100.0 / self.proportional_band

    @property
    def scan_s(self) -> float | None:
        """Execution interval [s], or `None` for an analogue controller."""
        return None if self.scan is None else self.scan.seconds

    @property
    def computing_delay_s(self) -> float:
        """From sampling to the change of the output [s]."""
        return 0.0 if self.computing_delay is None else self.computing_delay.seconds

    def gains(self) -> Gains:
        """The canonical gains that this controller's algorithm is."""
        return FORMS[self.form](self)


def _filter_time(settings: Controller, derivative_time: float) -> float:
    chosen = settings.derivative_filter
    if chosen is None or derivative_time == 0:
        return 0.0
    return chosen.seconds if isinstance(chosen, Amount) else derivative_time / chosen


def _ideal(settings: Controller) -> Gains:
    k = settings.gain_value
    td = settings.derivative.seconds if settings.derivative else 0.0
    return Gains(
        k,
        k / settings.integral.seconds if settings.integral else 0.0,
        k * td,
        _filter_time(settings, td),
        settings.setpoint_weight,
        float(settings.derivative_on == "error"),
    )


def _parallel(settings: Controller) -> Gains:
    kp = settings.gain_value
    kd = settings.derivative.seconds if settings.derivative else 0.0
    return Gains(
        kp,
        settings.integral.per_second if settings.integral else 0.0,
        kd,
        _filter_time(settings, kd / kp if kp else kd),
        settings.setpoint_weight,
        float(settings.derivative_on == "error"),
    )


def _series(settings: Controller) -> Gains:
    """Partial fractions of K (1 + 1/(Ti s)) (1 + Td s)/(1 + Tf s), and of the setpoint's path."""
    k, b = settings.gain_value, settings.setpoint_weight
    td = settings.derivative.seconds if settings.derivative else 0.0
    tf = _filter_time(settings, td)
    per_ti = 1.0 / settings.integral.seconds if settings.integral else 0.0
    kp = 1.0 + (td - tf) * per_ti
    # Equal to td - tf kp, and exactly 0 where the filter cancels one of the two times.
    kd = (td - tf) * (1.0 - tf * per_ti)
    on_error = settings.derivative_on == "error"
    b_kp = b + (td - tf) * per_ti if on_error else b
    c_kd = b * td - tf * b_kp if on_error else 0.0
    return Gains(k * kp, k * per_ti, k * kd, tf, b_kp / kp, c_kd / kd if kd else 0.0)


def settings_like(
    like: Controller,
    gain: float,
    integral_time: float | None,
    derivative_time: float,
    published: str = "ideal",
) -> Controller:
    """Settings given in the ideal or series form, as the controller `like` writes its own.

    series -> ideal   f = 1 + Td/Ti:  K f,  Ti + Td,  Ti Td/(Ti + Td)
    ideal -> series   q = sqrt(1 - 4 Td/Ti):  K (1 + q)/2,  Ti (1 + q)/2,  Ti (1 - q)/2
    ideal -> parallel K,  K/Ti,  K Td

    Parameters
    ----------
    like
        Gives the form, the units, the choice of gain or band, and every other option.
    gain
        [%/%]
    integral_time
        [s]; `None` is no integral action.
    derivative_time
        [s]
    published
        Form of the settings given: ideal or series.

    Returns
    -------
    Controller
        Equal settings; the derivative filter is the controller's own and is kept.

    Raises
    ------
    NotApplicable
        The series form cannot hold an ideal Ti below 4 Td.
    """
    k, ti, td = gain, integral_time, derivative_time
    if published == "series" and like.form != "series" and ti is not None:
        k, ti, td = k * (1.0 + td / ti), ti + td, ti * td / (ti + td)
    if published == "ideal" and like.form == "series" and ti is not None and td:
        inside = 1.0 - 4.0 * td / ti
        if inside < -1e-12:
            raise NotApplicable(
                "the series form cannot hold these settings",
                limit="wants an integral time of at least 4 derivative times",
            )
        q = math.sqrt(max(0.0, inside))
        k, ti, td = k * (1.0 + q) / 2.0, ti * (1.0 + q) / 2.0, ti * (1.0 - q) / 2.0
    band = like.proportional_band is not None
    return replace(
        like,
        gain=None if band else k,
        proportional_band=100.0 / k if band else None,
        integral=None if ti is None else _integral_amount(like, k, ti),
        derivative=_derivative_amount(like, k, td) if td else None,
    )


def _integral_amount(like: Controller, gain: float, integral_time: float) -> Amount:
    if like.form == "parallel":
        unit = like.integral.unit if like.integral else GAIN_RATE_UNITS[0]
        per_second = Amount(1.0, unit).per_second
        return Amount(gain / integral_time / per_second, unit)
    return (like.integral or Amount(1.0, "s")).with_seconds(integral_time)


def _derivative_amount(like: Controller, gain: float, derivative_time: float) -> Amount:
    held = gain * derivative_time if like.form == "parallel" else derivative_time
    return (like.derivative or Amount(1.0, "s")).with_seconds(held)


FORMS: Final[dict[str, Callable[[Controller], Gains]]] = {
    "ideal": _ideal,
    "parallel": _parallel,
    "series": _series,
}
"""Form name -> canonical gains."""
