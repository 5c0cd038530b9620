"""The bench on which candidate settings are tried: their windows of gain and what they cost.

Everything is an array over candidates and frequencies, on one set of frequencies for the whole
family of plants.  Where the controller has a scan, the loop is the sampled one, exact at the scans.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import NotApplicable
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.sampled import SampledLoop, controller_in_z
from workbench.model.sweep import (
    Limits,
    Roots,
    frequencies,
    gain_windows,
    highest_gain,
    peaks,
    scale_of,
    stable,
)
from workbench.model.transfer import Complex, TransferFunction
from workbench.tune.answers import Quadrature

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]

_AT_ONCE: Final = 48
"""Candidates whose courses are worked out together."""
_LONGEST: Final = 60.0
"""Integral time looked at, at least up to this, in 1/critical."""
_SHORTEST: Final = 0.2


@dataclass(frozen=True)
class Aim:
    """What the best settings are best at, and within what."""

    limits: Limits
    load_travel: float = math.inf
    """Most that OP moves after the load step, all moves added up [% of OP span]."""
    setpoint_share: float = 0.0
    """Share of the setpoint IAE in the cost, 0 to 1; the load IAE has the rest."""
    load_step: float = 1.0
    """In the unit of the load path's input."""
    setpoint_step: float = 1.0
    """[% of PV span]"""


@dataclass(frozen=True)
class Rays:
    """Controllers with gain 1, each of which stands for all gains."""

    gains: tuple[Gains, ...]
    from_pv: Complex
    """(rays, frequencies)"""
    from_setpoint: Complex
    """(rays, frequencies)"""
    integral: Floats
    """Ki for gain 1, (rays,)."""
    held_back: Floats
    """(1 - b) Kp/Ki [s]: setpoint error that the weight adds, whatever the gain; (rays,)."""


@dataclass(frozen=True)
class Bench:
    """A family of plants as one set of responses; rows are plants."""

    frequency: Floats
    """[rad/s], (frequencies,)"""
    scan: float | None
    plant: Complex
    """From controller output to PV, positive for reverse action, (plants, frequencies)."""
    load: Complex
    """From upset to PV, (plants, frequencies)."""
    seen: Complex
    """The PV filter, (frequencies,)."""
    step: Complex
    """Transform of a unit step, (frequencies,)."""
    filter_lag: float
    """Mean delay of the PV filter [s]."""
    load_ratio: Floats
    """Limit of load over plant at frequency 0, (plants,)."""
    per_gain: Floats
    """1/gain of each plant, 0 where it integrates, (plants,)."""
    arrival: Floats
    """Dead time of each load path [s], (plants,)."""
    roots: tuple[Roots, ...]
    quadrature: Quadrature
    integral_times: tuple[float, float]
    """Shortest and longest that a search should begin with [s]."""

    @classmethod
    def of(cls, loops: Sequence[Loop]) -> Bench:
        """From one loop for each plant, whose gains do not count.

        All have the same scan, filter and action.

        Raises
        ------
        NotApplicable
            A lasting upset that no controller with an integral can take out.
        """
        first, plants = loops[0], [loop.plant for loop in loops]
        scale = scale_of(plants)
        # What integrates and lags wants an integral time of many lags.
        integrates = any(plant.integrators > 0 for plant in plants)
        lags = (20.0 if integrates else 2.0) * scale.slowest
        longest = max(_LONGEST / scale.critical, lags)
        slowest = max(longest, scale.slowest)
        top = math.inf if first.scan is None else math.pi / first.scan
        w = frequencies(plants, scale, slowest, top)
        quadrature = Quadrature.over(w, scale, 4.0 * slowest, first.scan)
        plant, load, seen, step, lag = _responses(loops, w)
        low = [_low_end(loop.plant) for loop in loops]
        return cls(
            w,
            first.scan,
            first.sign * plant,
            load,
            seen,
            step,
            lag,
            np.array([_ratio(loop) for loop in loops]),
            np.array([first.sign / value if n == 0 else 0.0 for n, value in low]),
            np.array([loop.load.dead_time for loop in loops]),
            tuple(Roots.of(p) for p in plants),
            quadrature,
            (_SHORTEST / scale.critical, longest),
        )

    def only(self, plants: Sequence[int]) -> Bench:
        """The bench with some of its plants."""
        rows = list(plants)
        return replace(
            self,
            plant=self.plant[rows],
            load=self.load[rows],
            load_ratio=self.load_ratio[rows],
            per_gain=self.per_gain[rows],
            arrival=self.arrival[rows],
            roots=tuple(self.roots[i] for i in rows),
        )

    def rays(self, gains: Sequence[Gains]) -> Rays:
        """Controllers with gain 1 on this bench."""
        each = tuple(gains)
        kp, ki, kd, tf, b, c = np.array(
            [
                (
                    g.proportional,
                    g.integral,
                    g.derivative,
                    g.filter_time,
                    g.setpoint_weight,
                    g.derivative_weight,
                )
                for g in each
            ]
        ).T[:, :, np.newaxis]
        if self.scan is None:
            s = 1j * self.frequency
            integral, slope = ki / s, kd * s / (1.0 + tf * s)
        else:
            z = np.exp(1j * self.frequency * self.scan)
            integral = np.array(
                [controller_in_z(Gains(0.0, g.integral), self.scan, z) for g in each]
            )
            slope = np.array(
                [
                    controller_in_z(Gains(0.0, 0.0, g.derivative, g.filter_time), self.scan, z)
                    for g in each
                ]
            )
        return Rays(
            each,
            kp + integral + slope,
            b * kp + integral + c * slope,
            ki[:, 0],
            ((1.0 - b) * kp / ki)[:, 0],
        )

    def windows(self, rays: Rays, limits: Limits) -> tuple[Floats, Floats, Floats]:
        """Lowest and highest gain of each ray that keeps the limits, and where sight ends.

        A ray without a window has both ends 0; shape (rays,) each.
        """
        controller = (rays.from_pv * self.seen)[:, np.newaxis]
        unit = controller * self.plant
        lows, highs = gain_windows(unit, controller, limits)
        far = highest_gain(unit)
        low, high = np.zeros(len(unit)), np.zeros(len(unit))
        open_rays = np.arange(len(unit))
        for k in reversed(range(lows.shape[1])):
            tried = open_rays[highs[open_rays, k] > 0.0]
            middle = np.sqrt(np.maximum(lows[tried, k], 0.3 * highs[tried, k]) * highs[tried, k])
            good = np.ones(len(tried), bool)
            for p, roots in enumerate(self.roots):
                good &= stable(middle[:, np.newaxis] * unit[tried, p], [roots])
            low[tried[good]], high[tried[good]] = lows[tried[good], k], highs[tried[good], k]
            open_rays = np.setdiff1d(open_rays, tried[good])
        if self.scan is None and math.isfinite(limits.noise_gain):
            # Beyond the frequencies looked at the loop is open and the controller alone counts.
            last = np.array([at_infinity(g) for g in rays.gains]) if self.seen[-1] == 1 else None
            high = high if last is None else np.minimum(high, limits.noise_gain / last)
            high = np.where(high > low, high, 0.0)
        return low, high, far

    def costs(self, rays: Rays, ray: Indices, gain: Floats, aim: Aim, enough: float) -> Floats:
        """Cost of the worst plant for each candidate, infinite where it is not below `enough`.

        Parameters
        ----------
        rays
            The controllers with gain 1.
        ray
            Ray of each candidate, (n,).
        gain
            Gain of each candidate, (n,).
        aim
            What counts.
        enough
            Candidates that cannot fall below it, or below the best of the others, are not tried.
        """
        found = np.full(len(ray), math.inf)
        count = len(self.plant)
        least = np.max(
            [
                self._least(rays, ray, gain, np.full(len(ray), p, np.intp), aim)
                for p in range(count)
            ],
            axis=0,
        )
        order = np.argsort(least)
        at_once = max(4, _AT_ONCE // count)
        for start in range(0, len(order), at_once):
            part = order[start : start + at_once]
            part = part[least[part] < min(enough, float(found.min()))]
            if not len(part):
                break
            row = np.repeat(part, count)
            plant = np.tile(np.arange(count), len(part))
            each = self.row_costs(rays, ray[row], gain[row], plant, aim)
            found[part] = each.reshape(len(part), count).max(axis=1)
        return found

    def _least(self, rays: Rays, ray: Indices, gain: Floats, plant: Indices, aim: Aim) -> Floats:
        """Lower bound of the cost: the integrals of the errors themselves."""
        load, setpoint = self._totals(rays, ray, gain, plant)
        share = aim.setpoint_share
        return np.asarray(
            (1.0 - share) * np.abs(load * aim.load_step)
            + share * np.abs(setpoint * aim.setpoint_step)
        )

    def _totals(
        self, rays: Rays, ray: Indices, gain: Floats, plant: Indices
    ) -> tuple[Floats, Floats]:
        """Integral of the error after a unit load step and after a unit setpoint step, (rows,)."""
        integral = gain * rays.integral[ray]
        setpoint = self.per_gain[plant] / integral + rays.held_back[ray] - self.filter_lag
        return self.load_ratio[plant] / integral, setpoint

    def row_costs(self, rays: Rays, ray: Indices, gain: Floats, plant: Indices, aim: Aim) -> Floats:
        """Cost of row i: ray[i] with gain[i] on plant[i]; infinite beyond the limit on travel."""
        load_iae, setpoint_iae = self.absolute_errors(rays, ray, gain, plant, aim.setpoint_share)
        share = aim.setpoint_share
        cost = (1.0 - share) * load_iae * abs(aim.load_step)
        cost = cost + share * setpoint_iae * abs(aim.setpoint_step)
        if math.isfinite(aim.load_travel):
            travel = self.load_travel(rays, ray, gain, plant) * abs(aim.load_step)
            cost = np.where(travel <= aim.load_travel, cost, math.inf)
        return np.asarray(cost, np.float64)

    def absolute_errors(
        self, rays: Rays, ray: Indices, gain: Floats, plant: Indices, share: float = 0.5
    ) -> tuple[Floats, Floats]:
        """IAE after a unit load step and after a unit setpoint step, (rows,); 0 where not asked."""
        control = gain[:, np.newaxis] * self.plant[plant]
        sensitivity = 1.0 / (1.0 + control * rays.from_pv[ray] * self.seen)
        load_total, setpoint_total = self._totals(rays, ray, gain, plant)
        load = setpoint = np.zeros(len(ray))
        if share < 1.0:
            response = self.load[plant] * self.step * sensitivity
            load = self._absolute(response, load_total, self.arrival[plant])
        if share > 0.0:
            answer = control * rays.from_setpoint[ray] * sensitivity
            setpoint = self._absolute(
                (1.0 - answer) * self.step, setpoint_total, np.zeros(len(ray))
            )
        return load, setpoint

    def load_travel(self, rays: Rays, ray: Indices, gain: Floats, plant: Indices) -> Floats:
        """All moves of OP after a unit load step, (rows,)."""
        controller = gain[:, np.newaxis] * rays.from_pv[ray] * self.seen
        sensitivity = 1.0 / (1.0 + controller * self.plant[plant])
        rate = controller * self.load[plant] * sensitivity
        return self._absolute(rate, self.load_ratio[plant], self.arrival[plant])

    def _absolute(self, response: Complex, total: Floats, arrival: Floats) -> Floats:
        real = np.concatenate([total[:, np.newaxis], response.real], axis=1)
        return self.quadrature.absolute(real, total, arrival)

    def family(self, gains: Gains, aim: Aim) -> tuple[NDArray[np.bool_], Floats, Floats, Floats]:
        """Stability, Ms, Mt and cost of one controller on every plant, (plants,) each."""
        rays = self.rays([gains])
        count = len(self.plant)
        values = rays.from_pv * self.seen * self.plant
        ray, one = np.zeros(count, np.intp), np.ones(count)
        ms, mt = peaks(values)
        cost = self.row_costs(rays, ray, one, np.arange(count), aim)
        return stable(values, self.roots), ms, mt, cost


def at_infinity(gains: Gains) -> float:
    """Size of the controller at infinite frequency [%/%]."""
    if not gains.derivative:
        return abs(gains.proportional)
    if not gains.filter_time:
        return math.inf
    return abs(gains.proportional + gains.derivative / gains.filter_time)


def _responses(
    loops: Sequence[Loop], w: Floats
) -> tuple[Complex, Complex, Complex, Complex, float]:
    """Plants, loads, PV filter and step at the frequencies, and the filter's mean delay."""
    first = loops[0]
    if first.scan is None:
        s = (1j * w).astype(np.complex128)
        plants = np.array([loop.plant(s) for loop in loops])
        same = all(loop.load == loop.plant for loop in loops)
        loads = plants if same else np.array([loop.load(s) for loop in loops])
        return plants, loads, first.filter()(s), (1.0 / s).astype(np.complex128), first.pv_filter
    h = first.scan
    z = np.exp(1j * w * h).astype(np.complex128)
    plants = np.array([SampledLoop.of(loop).plant(z) for loop in loops])
    prompt = [replace(loop, plant=loop.load, computing_delay=0.0) for loop in loops]
    loads = np.array([SampledLoop.of(loop).plant(z) for loop in prompt])
    step = (h / (1.0 - 1.0 / z)).astype(np.complex128)
    if not first.pv_filter:
        return plants, loads, np.ones_like(z), step, 0.0
    kept = math.exp(-h / first.pv_filter)
    seen = ((1.0 - kept) / (1.0 - kept / z)).astype(np.complex128)
    return plants, loads, seen, step, h * kept / (1.0 - kept)


def _low_end(function: TransferFunction) -> tuple[int, float]:
    """(n, c) with G(s) -> c/s^n as s -> 0."""
    n = function.integrators
    power = TransferFunction.ratio((1.0, *([0.0] * max(n, 0))), [(1.0, 0.0)] * max(-n, 0))
    value = (function * power).gain().value
    return n, 0.0 if value is None else value


def _ratio(loop: Loop) -> float:
    """Limit of load over plant at frequency 0."""
    plant, load = _low_end(loop.plant), _low_end(loop.load)
    if load[0] > plant[0]:
        raise NotApplicable(
            "the load path integrates more often than the plant",
            limit="wants an upset that the controller can take out",
        )
    return loop.sign * load[1] / plant[1] if load[0] == plant[0] else 0.0
