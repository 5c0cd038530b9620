"""Best settings by brute force: a logarithmic grid of settings, refined once about its best.

What the best grid point costs is exact (the engine's trend), and so are its margins.  Points are
skipped by two bounds that are proofs: |integral of the error| = 1/Ki is never above the IAE, and a
peak found on some frequencies is never above Ms.  Of the rest, those whose cost from frequency
responses is more than a hundredth above the best are skipped too; some of the nearer of these, by
chance, are run by the engine all the same, and must come out as they were taken.
"""

from __future__ import annotations

import math
import random
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import Margins, analogue_margins
from workbench.model.sweep import Limits
from workbench.model.transfer import Complex, TransferFunction
from workbench.sim.loop import simulate
from workbench.sim.metrics import measure
from workbench.sim.scenario import Events
from workbench.tune.bench import Aim, Bench, Rays
from workbench.tune.optimise import Best, best

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]


def lags(gain: float, *times: float, dead_time: float = 0.0, zero: float = 0.0) -> TransferFunction:
    """gain (1 + zero s) exp(-dead_time s) / product of (time s + 1)."""
    return TransferFunction.ratio((gain * zero, gain), [(t, 1.0) for t in times if t], dead_time)


def batch() -> dict[str, list[TransferFunction]]:
    """The 134 processes of the test batch by class.

    K.J. Astrom & T. Hagglund, Revisiting the Ziegler-Nichols step response method for PID control,
    J. Process Control 14 (2004) 635-650; from memory, the counts of the classes add up to the
    published total.
    """
    t1 = (0.02, 0.05, 0.1, 0.2, 0.3, 0.5, 0.7, 1, 1.3, 1.5, 2, 4, 6, 8, 10, 20, 50, 100, 200)
    t2 = (0.01, *t1)
    integrating = [(1.0, 0.0)]
    return {
        "P1": [lags(1, t, dead_time=1) for t in (*t1, 500, 1000)],
        "P2": [lags(1, t, t, dead_time=1) for t in (*t2, 500)],
        "P3": [lags(1, 1, t, t) for t in (0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 2, 5, 10)],
        "P4": [lags(1, *([1.0] * n)) for n in (3, 4, 5, 6, 7, 8)],
        "P5": [lags(1, 1, a, a**2, a**3) for a in np.arange(1, 10) / 10.0],
        "P6": [
            TransferFunction.ratio((1.0,), [*integrating, (1.0 - d, 1.0)][: 1 + (d < 1)], d)
            for d in (0.01, 0.02, 0.05, 0.1, 0.2, 0.3, 0.5, 0.7, 0.9, 1.0)
        ],
        "P7": [
            lags(t, t, 1.0 - d, dead_time=d)
            for t in (1.0, 2.0, 5.0, 10.0)
            for d in (0.01, 0.02, 0.05, 0.1, 0.3, 0.5, 0.7, 0.9, 1.0)
        ],
        "P8": [lags(1, 1, 1, 1, zero=-a) for a in np.arange(1, 12) / 10.0],
        "P9": [
            TransferFunction.ratio((1.0,), [(1.0, 1.0), (t * t, 1.4 * t, 1.0)])
            for t in np.arange(1, 11) / 10.0
        ],
    }


def ideal(gain: float, integral_time: float | None, derivative_time: float) -> Gains:
    """The ideal form with filter time Td/10."""
    integral = gain / integral_time if integral_time else 0.0
    return Gains(gain, integral, gain * derivative_time, derivative_time / 10.0)


@dataclass(frozen=True)
class Point:
    """A grid point: logarithms of gain, integral time and, for PID, derivative time."""

    gain: float
    integral_time: float
    derivative_time: float
    cost: float = math.inf

    def gains(self) -> Gains:
        return ideal(self.gain, self.integral_time, self.derivative_time)


def load_iae(plant: TransferFunction, gains: Gains) -> float:
    """IAE after a unit load step, from the engine's trend."""
    loop = Loop(plant, plant, gains)
    size = plant.gain().value
    wait = gains.proportional / gains.integral + (1.0 / (gains.integral * size) if size else 0.0)
    # The error dies out with these times; what is left after the end shows in its integral.
    until = 25.0 * wait + 40.0 * plant.dead_time
    events = Events(0.0, 0.0, 1.0, 0.0, until)
    iae = measure(simulate(loop, events), events).load_iae.value
    assert iae is not None
    return iae


@dataclass(frozen=True)
class Compared:
    """One search beside the best of its grid."""

    name: str
    kind: str
    """Class of the process, and PI or PID."""
    excess: float
    """Exact cost of the settings found above that of the grid's best, as a share."""
    max_sensitivity: float
    """Exact Ms of the settings found as a share of the limit; infinite for an unstable loop."""
    rough: float
    """Largest error of a cost by which grid points were skipped, as a share."""


def searched(size: int, seed: int) -> tuple[float, list[str]]:
    """How far the search's cost is above the grid's best, at worst, and where it breaks a limit."""
    worst, failures = 0.0, []
    for case in compared(size, seed):
        worst = max(worst, case.excess)
        if case.max_sensitivity > 1.001:
            failures.append(f"{case.name}: Ms is {case.max_sensitivity} of its limit")
        if case.rough > 0.5 * _SPARE:
            failures.append(f"{case.name}: grid points were skipped by costs {case.rough} off")
    return worst, failures


def compared(size: int, seed: int) -> Iterator[Compared]:
    """Searches beside grids: round the classes of the batch with PI, then with PID, and so on.

    Every class has each limit on Ms in turn; which of its processes, chance says.
    """
    draw = random.Random(seed)
    plants, limits = batch(), (1.6, 1.4, 2.0)
    for k in range(size):
        name, turn = list(plants)[k % len(plants)], k // len(plants)
        at = draw.randrange(len(plants[name]))
        plant, derivative, limit = plants[name][at], turn % 2 == 1, limits[turn // 2 % 3]
        found = best([Loop(plant, plant, Gains(1.0))], ideal, _aim(limit), derivative=derivative)
        ms = margins_of(plant, found.gains).max_sensitivity.value
        kind = f"{name} {'PID' if derivative else 'PI'}"
        point, rough = by_grid(plant, limit, found, draw)
        yield Compared(
            f"{kind} [{at}] Ms {limit}",
            kind,
            load_iae(plant, found.gains) / point.cost - 1.0,
            math.inf if ms is None else ms / limit,
            rough,
        )


def _aim(limit: float) -> Aim:
    return Aim(Limits(limit))


def margins_of(plant: TransferFunction, gains: Gains) -> Margins:
    return analogue_margins(Loop(plant, plant, gains))


_SIZES: Final = {False: (60, 60), True: (30, 30, 20)}
"""Grid points along gain, integral time and derivative time."""


_SPARE: Final = 0.01
"""Points whose cost is this share above the best, by frequency responses, are not run."""
_TRIED_ANYWAY: Final = 3
"""Skipped points of each grid that are run all the same ..."""
_NEAR: Final = 1.5
"""... of those whose cost is at most this many times the best."""


@dataclass(frozen=True)
class _Grid:
    """Grid points that may keep the limit, those that may be cheapest first."""

    rays: Rays
    points: tuple[Point, ...]
    ray: Indices
    gain: Floats
    bound: Floats
    """1/Ki, never above the cost."""

    @classmethod
    def of(
        cls, plant: TransferFunction, bench: Bench, axes: list[Floats], limit: float, w: Floats
    ) -> _Grid:
        s = (1j * w).astype(np.complex128)
        response, origin = plant(s), 1 + plant.integrators
        found: list[tuple[float, int, Point]] = []
        units: list[Gains] = []
        for ti in axes[1].tolist():
            for td in axes[2].tolist() if len(axes) == 3 else (0.0,):
                unit = response * (1.0 + 1.0 / (ti * s) + td * s / (1.0 + td / 10.0 * s))
                around = 1.0 + axes[0][:, np.newaxis] * unit
                kept = np.abs(around).min(axis=1) >= 1.0 / limit
                kept[kept] = _turns_right(around[kept], origin)
                found += [(ti / k, len(units), Point(k, ti, td)) for k in axes[0][kept].tolist()]
                units.append(ideal(1.0, ti, td))
        found.sort(key=lambda one: one[0])
        points = tuple(point for _, _, point in found)
        return cls(
            bench.rays(units),
            points,
            np.array([ray for _, ray, _ in found], np.intp),
            np.array([point.gain for point in points]),
            np.array([bound for bound, _, _ in found]),
        )

    def rough(self, bench: Bench, limit: float, start: int, end: int) -> Floats:
        """Cost from frequency responses."""
        rows = slice(start, end)
        plant = np.zeros(len(self.ray[rows]), np.intp)
        return bench.row_costs(self.rays, self.ray[rows], self.gain[rows], plant, _aim(limit))


def _turns_right(around: Complex, origin: int) -> NDArray[np.bool_]:
    """Whether 1 + L turns by a quarter for each pole at 0, as it must around a plant that is stable
    or integrates."""
    turned = np.angle(around[:, 1:] / around[:, :-1]).sum(axis=1)
    # Most of a turn off is unstable whatever happened between two frequencies at the ends.
    return np.asarray(np.abs(turned - 0.5 * math.pi * origin) < 0.75 * math.pi)


def _looked_at(plant: TransferFunction) -> Floats:
    corners = [abs(r) for r in (*plant.poles(), *plant.zeros()) if r]
    corners += [1.0 / d for d in plant.delays if d]
    pieces = [np.geomspace(1e-3 * min(corners), 3e2 * max(corners), 1500)]
    if plant.dead_time:
        pieces.append(np.arange(0.05, 40.0, 0.05) / plant.dead_time)
    return np.unique(np.concatenate(pieces))


def by_grid(
    plant: TransferFunction, limit: float, start: Best, draw: random.Random
) -> tuple[Point, float]:
    """The best grid point that keeps Ms, and the largest error of a cost that skipped points.

    The first grid spans a factor of 30 either way about `start` in each direction but gain, which
    spans 10; the second, of equal size, the neighbours of the best.
    """
    w, bench = _looked_at(plant), Bench.of([Loop(plant, plant, Gains(1.0))])
    middle = [start.gain, start.integral_time]
    middle += [start.derivative_time] if start.derivative_time else []
    spans = [10.0, 30.0, 30.0][: len(middle)]
    sizes = _SIZES[len(middle) == 3]
    chosen, worst = Point(0.0, 1.0, 0.0), 0.0
    for _ in range(2):
        axes = [
            np.geomspace(m / span, m * span, n)
            for m, span, n in zip(middle, spans, sizes, strict=True)
        ]
        grid = _Grid.of(plant, bench, axes, limit, w)
        chosen, error = _cheapest(grid, plant, bench, limit, chosen, draw)
        worst = max(worst, error)
        middle = [chosen.gain, chosen.integral_time, chosen.derivative_time][: len(middle)]
        spans = [span ** (2.0 / (n - 1)) for span, n in zip(spans, sizes, strict=True)]
    return chosen, worst


_TOGETHER: Final = 200


def _cheapest(
    grid: _Grid,
    plant: TransferFunction,
    bench: Bench,
    limit: float,
    chosen: Point,
    draw: random.Random,
) -> tuple[Point, float]:
    """The cheapest of `chosen` and a grid, and the largest error of a cost that skipped points."""
    worst, skipped = 0.0, []
    for start in range(0, len(grid.points), _TOGETHER):
        if grid.bound[start] >= chosen.cost:
            break
        rough = grid.rough(bench, limit, start, start + _TOGETHER)
        for i in np.argsort(rough).tolist():
            point = grid.points[start + i]
            if rough[i] > (1.0 + _SPARE) * chosen.cost:
                skipped.append((float(rough[i]), point))
                continue
            ms = margins_of(plant, point.gains()).max_sensitivity.value
            if ms is None or ms > limit:
                continue
            cost = load_iae(plant, point.gains())
            worst = max(worst, abs(float(rough[i]) / cost - 1.0))
            if cost < chosen.cost:
                chosen = replace(point, cost=cost)
    # Far from the best, loops that swing long are only known roughly; it does not matter there.
    near = [(taken, point) for taken, point in skipped if taken < _NEAR * chosen.cost]
    for taken, point in draw.sample(near, min(_TRIED_ANYWAY, len(near))):
        if margins_of(plant, point.gains()).stable:
            worst = max(worst, taken / load_iae(plant, point.gains()) - 1.0)
    return chosen, worst
