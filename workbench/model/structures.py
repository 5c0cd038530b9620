"""More than one controller or model round a plant: dead-time compensation and cascade, as loops.

Each is a `Loop`, so that margins and answers are asked for as of any loop; a dead time inside a
feedback is exact.  Signals are percent of span, time is in seconds.

Compensation.  The controller is given what PV would be without the dead time L of its model:
y + (M0 - M) u, M = M0 exp(-L s), filtered as PV is.  With Q = C F and the plant G

    L(s) = Q G / (1 + Q (M0 - M)),   y/r = C_r G / (1 + Q (G + M0 - M))

Cascade.  The output of the outer controller is the setpoint of an inner loop, whose answer T to it
stands between that output and the outer plant:  L(s) = C F T G,  T = C_r2 G2 / (1 + C2 F2 G2).

Source
------
Compensation: O.J.M. Smith, "Closer control of loops with dead time", Chem. Eng. Prog. 53(5), 1957,
217-219, from memory.  Cascade: block algebra.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, fields, replace
from typing import Final

from workbench.errors import problem
from workbench.model.feedback import Loop
from workbench.model.sampled import SampledLoop
from workbench.model.stability import Verdict
from workbench.model.transfer import Complex, Delayed, Factored, TransferFunction

NOTHING: Final = TransferFunction.constant(0.0)


# --- dead-time compensation ----------------------------------------------------------------------


@dataclass(frozen=True)
class Compensated(Loop):
    """A loop whose controller works with a model of the plant, which may be wrong."""

    model: TransferFunction = NOTHING
    """M, from OP [%] to PV [%], as the controller believes the plant to be."""

    def __post_init__(self) -> None:
        """Raises `InputError` for a model that no controller can run."""
        if self.model.has_delayed_feedback:
            raise problem("has a dead time inside a feedback", "give it without", key="model")
        if any(pole.real > 0.0 for pole in self.model.poles()):
            raise problem(
                "is unstable: run beside the plant, it would leave it",
                "compensate the dead time of a stable or integrating plant",
                key="model",
            )
        if not self.model.is_proper:
            raise problem("has more leads than lags", "give it a further lag", key="model")

    def correction(self) -> TransferFunction:
        """M0 - M: what is added to PV [%] for the output [%]."""
        ahead = self.model.dead_time
        top = tuple(Delayed(t.dead_time - ahead, t.polynomial) for t in self.model.numerator)
        return TransferFunction(top, self.model.denominator) - self.model

    def open_loop(self) -> TransferFunction:
        """L(s), broken at the plant's input: its delay margin is what the plant may differ by."""
        plant, correction = _on_one_denominator(self.plant, self.correction())
        return _closed(self._back() * plant, self._back() * correction)

    def from_setpoint(self) -> TransferFunction:
        """PV [%] for the setpoint [%], analogue loop."""
        forward = self.sign * self.gains.from_setpoint() * self.plant
        return _closed(forward, self._back() * self._met())

    def from_load(self) -> TransferFunction:
        """PV [%] for the upset [its own unit], analogue loop."""
        inside = 1.0 + self._back() * self.correction()
        return _closed(self.load * inside, self._back() * self._met())

    def sampled(self) -> CompensatedSampled:
        """The open loop in z; the model is run at the scan, with the computing delay."""
        alone = SampledLoop.of(self.around(self.plant))
        return CompensatedSampled(
            alone.loop,
            alone.scan,
            alone.phi,
            alone.gamma,
            alone.readings,
            SampledLoop.of(self.around(self.correction())),
            SampledLoop.of(self.around(self._met())),
        )

    def around(self, plant: TransferFunction) -> Loop:
        """The same controller without its model, round another plant."""
        same = {field.name: getattr(self, field.name) for field in fields(Loop)}
        return Loop(**{**same, "plant": plant})

    def _back(self) -> TransferFunction:
        """Q, from PV to OP."""
        return self.sign * self.gains.from_pv() * self.filter()

    def _met(self) -> TransferFunction:
        """G + M0 - M, the plant as the controller meets it."""
        return self.plant + self.correction()


@dataclass(frozen=True)
class CompensatedSampled(SampledLoop):
    """The open loop in z of a compensated loop, broken at the plant's input."""

    correction: SampledLoop
    """Round M0 - M."""
    met: SampledLoop
    """Round G + M0 - M."""

    def open_loop(self, z: Complex) -> Complex:
        """L(z) = Q G / (1 + Q (M0 - M))."""
        return super().open_loop(z) / (1.0 + self.correction.open_loop(z))

    def verdict(self) -> Verdict:
        """Stable or not: the loop as its controller meets it, for the model alone is stable."""
        return self.met.verdict()


# --- cascade -------------------------------------------------------------------------------------


def over_inner(outer: Loop, inner: Loop) -> Loop:
    """The outer loop of a cascade as a single loop, both controllers analogue.

    Parameters
    ----------
    outer
        Its plant goes from the inner PV [% of its span] to the outer PV [%]; its output is the
        setpoint of the inner loop [% of the same span].
    inner
        Its plant goes from the inner output [%] to the inner PV [%].

    Returns
    -------
    Loop
        The outer controller round the inner loop's answer to its setpoint and the outer plant.
    """
    return replace(outer, plant=answer(inner) * outer.plant)


def answer(loop: Loop) -> TransferFunction:
    """PV for the setpoint, as `from_setpoint`, with nothing written that cancels.

    The inner integral action would otherwise stand as a pole and a zero at 0 in the outer loop.
    """
    return _closed(loop.sign * loop.gains.from_setpoint() * loop.plant, loop.open_loop())


def inner_upset(outer: Loop, inner: Loop) -> TransferFunction:
    """From the upset of the inner loop to the outer PV, the outer controller at rest."""
    return _closed(inner.load, inner.open_loop()) * outer.plant


# --- algebra -------------------------------------------------------------------------------------


def _closed(forward: TransferFunction, open_loop: TransferFunction) -> TransferFunction:
    """forward/(1 + open_loop); a denominator that both have is not written twice."""
    if not open_loop.numerator:
        return forward
    forward, open_loop = _on_one_denominator(forward, open_loop)
    return TransferFunction(forward.numerator, (open_loop + 1.0).numerator)


def _on_one_denominator(
    one: TransferFunction, other: TransferFunction
) -> tuple[TransferFunction, TransferFunction]:
    """Both functions over the least denominator that holds the denominators of both."""
    if one.has_delayed_feedback or other.has_delayed_feedback:
        return (
            one * TransferFunction(other.denominator, other.denominator),
            other * TransferFunction(one.denominator, one.denominator),
        )
    mine, theirs = one.denominator[0].polynomial, other.denominator[0].polynomial
    union = Counter(dict(mine.factors)) | Counter(dict(theirs.factors))
    whole = Factored(1.0, tuple(union.items()))
    return _over(whole, one), _over(whole, other)


def _over(whole: Factored, function: TransferFunction) -> TransferFunction:
    missing = whole.divided_by(function.denominator[0].polynomial)
    assert missing is not None
    top = tuple(Delayed(t.dead_time, t.polynomial * missing) for t in function.numerator)
    return TransferFunction(top, (Delayed(0.0, whole),))
