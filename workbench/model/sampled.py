"""The loop as its controller samples it: exact zero-order hold, fractional dead time, PID in z.

PV is sampled every scan h, OP changes after the computing delay and is held to the next scan.  The
algorithm, from the canonical gains:

    P = Kp (b r - y)      I = I + Ki h e      D = Tf/(Tf + h) D + Kd/(Tf + h) (change of (c r - y))
    u = P + I + D,  the integral including this scan's error

A PV filter runs in the controller at the same scan: yf = yf + (1 - exp(-h/T)) (y - yf).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.model.matrix import hold
from workbench.model.pid import Gains
from workbench.model.stability import STABLE, Verdict
from workbench.model.transfer import Complex

_SMALL: Final = 0.9
"""Below this an open loop cannot turn about -1."""
_MOST_ANGLES: Final = 60_000
"""Most points on the unit circle that a verdict looks at."""
_ON_SCAN: Final = 1e-9
"""A dead time this close to whole scans, in scans, is whole scans."""


def controller_in_z(gains: Gains, scan: float, z: Complex) -> Complex:
    """Transfer function from -Y to U of the sampled algorithm, at the points z."""
    value = np.full_like(z, gains.proportional)
    back = 1.0 / z
    if gains.integral:
        value = value + gains.integral * scan / (1.0 - back)
    if gains.derivative:
        total = gains.filter_time + scan
        value = value + gains.derivative / total * (1.0 - back) / (
            1.0 - gains.filter_time / total * back
        )
    return value


def whole_scans(
    late: NDArray[np.float64], scan: float
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Dead times [s] as whole scans, and what is left to the last of them [s]; same shapes."""
    whole = np.ceil(late / scan - _ON_SCAN)
    left = np.maximum(0.0, whole * scan - late)
    return whole, np.where(left < _ON_SCAN * scan, 0.0, left)


@dataclass(frozen=True)
class _Reading:
    """One delayed reading of the held plant: whole scans, then what the state and input give."""

    scans: int
    state: NDArray[np.float64]
    held: float
    before: float
    """Feedthrough of the input just before the sample is taken."""


@dataclass(frozen=True)
class SampledLoop:
    """The open loop in z of a loop with a scan interval."""

    loop: Loop
    scan: float
    phi: NDArray[np.float64]
    gamma: NDArray[np.float64]
    readings: tuple[_Reading, ...]

    @classmethod
    def of(cls, loop: Loop) -> SampledLoop:
        """From a loop that has a scan.  Raises `ModelError` where the plant has no state space."""
        assert loop.scan is not None
        plant, h = loop.plant.realise(), loop.scan
        phi, gamma = hold(plant.a, plant.b, h)
        readings = []
        for output in plant.outputs:
            late = np.array([output.dead_time + loop.computing_delay])
            whole, left = (float(each[0]) for each in whole_scans(late, h))
            if left == 0.0:
                readings.append(_Reading(int(whole), output.c, 0.0, output.d))
                continue
            onward, pushed = hold(plant.a, plant.b, left)
            readings.append(
                _Reading(int(whole), output.c @ onward, float(output.c @ pushed) + output.d, 0.0)
            )
        return cls(loop, h, phi, gamma, tuple(readings))

    def plant(self, z: Complex) -> Complex:
        """Held plant from U to Y at the points z, shape (n,)."""
        states = self._states(z)
        total = np.zeros_like(z)
        for r in self.readings:
            total += z ** (-r.scans) * (states @ r.state + r.held + r.before / z)
        return total

    def _states(self, z: Complex) -> Complex:
        """(z - phi)^-1 gamma at the points z, shape (len(z), n)."""
        n = len(self.gamma)
        if n > 1 and np.triu(self.phi, 1).any():
            shifted = z[:, None, None] * np.eye(n) - self.phi
            solved = np.linalg.solve(shifted, self.gamma.astype(complex)[None, :, None])[..., 0]
            return np.asarray(solved, np.complex128)
        # Real lags one after the other make phi lower triangular: each state from those before it.
        states = np.zeros((len(z), n), complex)
        for row in range(n):
            known = states[:, :row] @ self.phi[row, :row]
            states[:, row] = (self.gamma[row] + known) / (z - self.phi[row, row])
        return states

    def open_loop(self, z: Complex) -> Complex:
        """L(z) from the controller's error back to PV as the controller filters it."""
        value = self.loop.sign * controller_in_z(self.loop.gains, self.scan, z) * self.plant(z)
        if self.loop.pv_filter:
            kept = math.exp(-self.scan / self.loop.pv_filter)
            value = value * (1.0 - kept) / (1.0 - kept / z)
        return value

    @property
    def open_loop_poles(self) -> NDArray[np.complex128]:
        """Poles of L(z) apart from those at 0 that whole scans of dead time put there."""
        poles = [np.exp(p * self.scan) for p in self.loop.plant.poles()]
        gains = self.loop.gains
        if gains.integral:
            poles.append(1.0)
        if gains.derivative:
            poles.append(gains.filter_time / (gains.filter_time + self.scan))
        if self.loop.pv_filter:
            poles.append(math.exp(-self.scan / self.loop.pv_filter))
        return np.array(poles, complex)

    def size(self, z: Complex) -> NDArray[np.float64]:
        """Upper bound of |L(z)|, whatever the dead times do to the phase."""
        one_by_one = sum(np.abs(replace(self, readings=(r,)).open_loop(z)) for r in self.readings)
        return np.asarray(one_by_one, np.float64) + np.zeros(len(z))

    def verdict(self) -> Verdict:
        """Stable or not: the turns of (1 + L(z)) prod(1 - pole/z) about 0 on the unit circle.

        The function is 1 at infinity and has no pole outside the circle, so that it turns once
        clockwise for each root outside.
        """
        angle = self._angles()
        if angle is None:
            return Verdict(
                False, None, f"not shown to be stable: the dead time is over {_MOST_ANGLES} scans"
            )
        values = 1.0 + self.open_loop(np.exp(1j * angle))
        for _ in range(40):
            size = np.abs(values)
            coarse = np.abs(np.diff(values)) > 0.5 * np.minimum(size[1:], size[:-1])
            # Where |L| stays below 1 the value stays on the right of 0 and cannot turn about it.
            coarse &= np.maximum(np.abs(values[1:] - 1.0), np.abs(values[:-1] - 1.0)) > _SMALL
            if not coarse.any():
                break
            extra = 0.5 * (angle[:-1][coarse] + angle[1:][coarse])
            where = np.searchsorted(angle, extra)
            angle = np.insert(angle, where, extra)
            values = np.insert(values, where, 1.0 + self.open_loop(np.exp(1j * extra)))
        else:
            return Verdict(
                False, None, "a root on the stability boundary: the swing never dies out"
            )
        turned = float(np.angle(values[1:] / values[:-1]).sum())
        first = np.exp(1j * angle[0])
        begun = complex(values[0])
        for pole in self.open_loop_poles:
            turned += _turn(complex(pole), float(angle[0]))
            begun *= complex(1.0 - pole / first)
        # At angle 0 the function is real: what the first point lacks to that is part of the turn.
        lacking = float(np.angle(begun))
        turned += lacking - math.pi * round(lacking / math.pi)
        roots = round(-turned / math.pi)
        if roots == 0:
            return STABLE
        noun = "root" if roots == 1 else "roots"
        return Verdict(False, roots, f"{roots} sampled {noun} outside the unit circle: it grows")

    def _angles(self) -> NDArray[np.float64] | None:
        """Angles from 0 to pi, close enough for the dead time wherever |L| may reach 1."""
        coarse = np.geomspace(1e-7, math.pi, 400)
        matters = np.flatnonzero(self.size(np.exp(1j * coarse)) > _SMALL)
        if not len(matters):
            return coarse
        last = float(coarse[min(int(matters[-1]) + 1, len(coarse) - 1)])
        order = max(r.scans for r in self.readings) + len(self.open_loop_poles) + 1
        count = math.ceil(last * order / 0.3)
        if count > _MOST_ANGLES:
            return None
        return np.unique(np.concatenate((coarse, np.linspace(coarse[0], last, count + 2))))


def _turn(pole: complex, start: float) -> float:
    """By how much 1 - pole/z turns from z = exp(j start) to z = -1."""
    first = np.exp(1j * start)
    if abs(pole) <= 1.0:
        return float(np.angle(1.0 + pole) - np.angle(1.0 - pole / first))
    inner = float(np.angle(1.0 + 1.0 / pole) - np.angle(1.0 - first / pole))
    return inner - (math.pi - start)
