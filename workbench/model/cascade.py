"""A sampled cascade as its outer controller meets it: two scans, one function of the outer z.

The inner loop is executed every h, the outer one every H = N h; the inner setpoint is held over N
inner scans.  With zeta^N = z, P2 and P12 the held paths from the inner output to the inner PV and
to PV, and C2 and Cr2 the inner controller from its PV and its setpoint,

    T(zeta) = Cr2 P12 / (1 + C2 P2)
    G(z) = 1/N sum over the N roots zeta of  (1 + 1/zeta + ... + 1/zeta^(N-1)) T(zeta)

which is exact at the outer scans.

Source
------
Sum over the roots: the z-transform of every N-th sample, as in J.R. Ragazzini and G.F. Franklin,
"Sampled-Data Control Systems", McGraw-Hill, 1958, on multirate systems, from memory.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.sampled import SampledLoop, controller_in_z
from workbench.model.transfer import Complex, TransferFunction

_SAME = 1e-9
"""Share of a scan in which two instants are the same."""


def scans_in(outer: float, inner: float) -> int | None:
    """How many inner scans [s] make an outer one [s]; `None` where it is not a whole number."""
    ratio = round(outer / inner)
    return ratio if ratio and abs(outer - ratio * inner) <= _SAME * outer else None


@dataclass(frozen=True)
class SampledCascade(SampledLoop):
    """The open loop in the outer z of a cascade whose inner loop is stable by itself.

    As a `SampledLoop` it is round all that its controller meets, which is what its stability is
    about; `open_loop` is broken at the outer output.
    """

    inner: SampledLoop
    through: SampledLoop
    """The held path from the inner output to PV, at the inner scan."""
    ratio: int
    late: int
    """Inner scans until an outer output is the inner setpoint."""
    growing: tuple[complex, ...]
    """Poles of the path from the inner PV to PV [1/s]."""
    correction: SampledLoop | None
    """Round what a dead-time compensation adds to PV."""

    @classmethod
    def around(
        cls, outer: Loop, inner: Loop, correction: TransferFunction | None
    ) -> SampledCascade:
        """A cascade of an outer loop, whose plant begins at the inner PV, and an inner one.

        Raises `ModelError` where a plant has no state space.
        """
        assert outer.scan is not None
        assert inner.scan is not None
        ratio = scans_in(outer.scan, inner.scan)
        assert ratio is not None
        held = replace(outer, computing_delay=inner.computing_delay)
        whole = inner.plant * outer.plant
        through = replace(held, plant=whole, load=whole, scan=inner.scan)
        # The order of the whole, and how late its parts are: what a verdict needs to look closely.
        met = whole if correction is None else whole + correction
        base = SampledLoop.of(replace(held, plant=met, load=met))
        return cls(
            held,
            outer.scan,
            base.phi,
            base.gamma,
            base.readings,
            SampledLoop.of(inner),
            SampledLoop.of(through),
            ratio,
            math.ceil(outer.computing_delay / inner.scan - _SAME),
            outer.plant.poles(),
            None
            if correction is None
            else SampledLoop.of(replace(held, plant=correction, load=correction)),
        )

    def plant(self, z: Complex) -> Complex:
        """G(z), from the outer output to PV."""
        turn = np.exp(2j * math.pi / self.ratio * np.arange(self.ratio))
        zeta = (z[:, np.newaxis] ** (1.0 / self.ratio) * turn).ravel()
        inner, gains = self.inner.loop, self.inner.loop.gains
        asked = Gains(
            gains.setpoint_weight * gains.proportional,
            gains.integral,
            gains.derivative_weight * gains.derivative,
            gains.filter_time,
        )
        answer = inner.sign * controller_in_z(asked, self.inner.scan, zeta)
        answer = answer / (1.0 + self.inner.open_loop(zeta)) * self.through.plant(zeta)
        held = sum(zeta ** (-float(k)) for k in range(self.ratio))
        reached = answer * held * zeta ** (-float(self.late))
        return np.asarray(reached.reshape(-1, self.ratio).mean(axis=1), np.complex128)

    @property
    def open_loop_poles(self) -> NDArray[np.complex128]:
        """Those of the controller and of the path from the inner PV on, outside or on the circle.

        What lies inside it turns nothing.
        """
        poles = [np.exp(p * self.scan) for p in self.growing if p.real >= 0.0]
        return np.array([*poles, *([1.0] if self.loop.gains.integral else [])], complex)

    def size(self, z: Complex) -> NDArray[np.float64]:
        """No bound is known: every angle is looked at."""
        return np.ones(len(z))

    def open_loop(self, z: Complex) -> Complex:
        """L(z) = Q G / (1 + Q (M0 - M)), Q the outer controller with its filter."""
        value = super().open_loop(z)
        return value if self.correction is None else value / (1.0 + self.correction.open_loop(z))
