"""What is built round a loop: dead-time compensation, feedforward, cascade; still one loop.

A `Structure` is a `Loop` whose open loop, answer to the setpoint and answer to the upset are those
of the whole, so that margins are asked for as of any loop; a dead time inside a feedback is exact.
Signals are percent of span, time is in seconds.  With Q = C F from PV to OP and the plant G

compensation  the controller is given what PV would be without the dead time L of its model,
              y + (M0 - M) u, M = M0 exp(-L s), filtered as PV is:
              L(s) = Q G / (1 + Q (M0 - M)),   y/r = C_r G / (1 + Q (G + M0 - M))
feedforward   FF v is added to the output for a measured upset v, so that Gd + G FF takes the place
              of the load path Gd; the open loop stays
cascade       the output is the setpoint of an inner loop, and T G takes the place of G, where
              T = C_r2 G2 / (1 + C2 F2 G2) is what the inner loop makes of its setpoint

Source
------
Compensation: O.J.M. Smith, "Closer control of loops with dead time", Chem. Eng. Prog. 53(5), 1957,
217-219, from memory.  Feedforward and cascade: block algebra.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, fields, replace
from typing import Final

from workbench.errors import problem
from workbench.model.cascade import SampledCascade
from workbench.model.feedback import Loop
from workbench.model.feedforward import Feedforward
from workbench.model.sampled import SampledLoop
from workbench.model.stability import Verdict
from workbench.model.transfer import Complex, Delayed, Factored, TransferFunction

NOTHING: Final = TransferFunction.constant(0.0)


@dataclass(frozen=True)
class Structure(Loop):
    """A loop with what is built round it; what is left out is not there."""

    model: TransferFunction | None = None
    """M, from OP [%] to PV [%], as the controller believes the plant to be; it may be wrong."""
    feedforward: Feedforward | None = None
    """From the upset [its own unit] to OP [%]."""
    inner: Loop | None = None
    """Its plant goes from its own output [%] to the inner PV, and `plant` from there to PV; OP and
    the inner PV are in percent of the same span."""
    inner_mode: str = "cascade"
    """cascade, automatic (its own setpoint) or manual (its own output)."""

    def __post_init__(self) -> None:
        """Raises `InputError` for a model that no controller can run."""
        if self.model is None:
            return
        if self.model.has_delayed_feedback:
            raise problem(
                "has a dead time inside a feedback", "give it without", key="compensation.model"
            )
        if any(pole.real > 0.0 for pole in self.model.poles()):
            raise problem(
                "is unstable: run beside the plant, it would leave it",
                "compensate the dead time of a stable or integrating plant",
                key="compensation.model",
            )
        if not self.model.is_proper:
            raise problem(
                "has more leads than lags", "give it a further lag", key="compensation.model"
            )

    @property
    def acted_on(self) -> TransferFunction:
        """What the output acts on: the plant, behind the inner loop where there is one."""
        if self.inner is None:
            return self.plant
        return (answer(self.inner) if self.inner_mode == "cascade" else NOTHING) * self.plant

    @property
    def upset(self) -> TransferFunction:
        """From the upset to PV without the controller, with inner loop and feedforward."""
        reached = self.load
        if self.inner is not None:
            manual = self.inner_mode == "manual"
            reached = (
                reached + (self.inner.load if manual else after_upset(self.inner)) * self.plant
            )
        if self.feedforward is not None:
            reached = reached + self.acted_on * self.feedforward.transfer()
        return reached

    def correction(self) -> TransferFunction:
        """M0 - M: what is added to PV [%] for the output [%]."""
        if self.model is None:
            return NOTHING
        ahead = self.model.dead_time
        top = tuple(Delayed(t.dead_time - ahead, t.polynomial) for t in self.model.numerator)
        return TransferFunction(top, self.model.denominator) - self.model

    def open_loop(self) -> TransferFunction:
        """L(s), broken at the plant's input: its delay margin is what the plant may differ by."""
        plant, correction = _on_one_denominator(self.acted_on, self.correction())
        return _closed(self._back() * plant, self._back() * correction)

    def from_setpoint(self) -> TransferFunction:
        """PV [%] for the setpoint [%], analogue loop."""
        forward = self.sign * self.gains.from_setpoint() * self.acted_on
        return _closed(forward, self._back() * self.met())

    def from_load(self) -> TransferFunction:
        """PV [%] for the upset [its own unit], analogue loop."""
        inside = 1.0 + self._back() * self.correction()
        return _closed(self.upset * inside, self._back() * self.met())

    def output_from_setpoint(self) -> TransferFunction:
        """OP [%] for the setpoint [%], analogue loop."""
        return _closed(self.sign * self.gains.from_setpoint(), self._back() * self.met())

    def output_from_load(self) -> TransferFunction:
        """OP [%] for the upset [its own unit], analogue loop."""
        alone = replace(self, feedforward=None).upset
        given = -self._back() * alone
        if self.feedforward is not None:
            given = given + self.feedforward.transfer()
        return _closed(given, self._back() * self.met())

    def sampled(self) -> SampledLoop:
        """The open loop in z; the model is run at the scan, with the computing delay.

        Of a cascade in the outer z.  Raises `ModelError` for a plant without a state space.
        """
        if self.inner is not None:
            correction = None if self.model is None else self.correction()
            return SampledCascade.around(self.around(self.plant), self.inner, correction)
        alone = SampledLoop.of(self.around(self.acted_on))
        return SampledStructure(
            alone.loop,
            alone.scan,
            alone.phi,
            alone.gamma,
            alone.readings,
            SampledLoop.of(self.around(self.correction())),
            SampledLoop.of(self.around(self.met())),
        )

    def around(self, plant: TransferFunction) -> Loop:
        """The controller alone, round another plant."""
        same = {field.name: getattr(self, field.name) for field in fields(Loop)}
        return Loop(**{**same, "plant": plant})

    def _back(self) -> TransferFunction:
        """Q, from PV to OP."""
        return self.sign * self.gains.from_pv() * self.filter()

    def met(self) -> TransferFunction:
        """G + M0 - M, the plant as the controller meets it."""
        return self.acted_on + self.correction()


@dataclass(frozen=True)
class SampledStructure(SampledLoop):
    """The open loop in z of a structure, broken at the plant's input."""

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


# --- the inner loop ------------------------------------------------------------------------------


def answer(loop: Loop) -> TransferFunction:
    """PV for the setpoint, as `from_setpoint`, with nothing written that cancels.

    The inner integral action would otherwise stand as a pole and a zero at 0 in the outer loop.
    """
    return _closed(loop.sign * loop.gains.from_setpoint() * loop.plant, loop.open_loop())


def after_upset(loop: Loop) -> TransferFunction:
    """PV for the upset, as `from_load`, with nothing written that cancels."""
    return _closed(loop.load, loop.open_loop())


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
    if one.denominator == other.denominator:
        return one, other
    if one.has_delayed_feedback or other.has_delayed_feedback:
        wider = one * TransferFunction(other.denominator, other.denominator)
        same = other * TransferFunction(one.denominator, one.denominator)
        # Term by term the same, so that a pole at 0 that both get later is not written twice.
        return wider, TransferFunction(same.numerator, wider.denominator)
    mine, theirs = one.denominator[0].polynomial, other.denominator[0].polynomial
    union = Counter(dict(mine.factors)) | Counter(dict(theirs.factors))
    whole = Factored(1.0, tuple(union.items()))
    return _over(whole, one), _over(whole, other)


def _over(whole: Factored, function: TransferFunction) -> TransferFunction:
    missing = whole.divided_by(function.denominator[0].polynomial)
    assert missing is not None
    top = tuple(Delayed(t.dead_time, t.polynomial * missing) for t in function.numerator)
    return TransferFunction(top, (Delayed(0.0, whole),))
