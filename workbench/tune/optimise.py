"""Best settings by search: least IAE within limits on robustness, noise and travel.

For every pair of integral and derivative time the gains that keep the limits are known in closed
form (`model.sweep`), so that the search has one dimension less and walks along the limit itself.
A coarse look over both times finds where to begin; each round then looks around its best and draws
the looks closer.  What the loop costs is worked out from frequency responses (`answers`), a few
hundred candidates at once; the settings found are held to the exact margins at the end.

Over a family of plants the cost is that of the worst plant, and every plant keeps the limits: the
search runs over the few plants that have turned out to be the worst, and adds those that its best
settings then treat worse.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve
from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.robustness import analogue_margins, sampled_margins
from workbench.model.sampled import SampledLoop, controller_in_z
from workbench.model.sweep import Limits, frequencies, scale_of
from workbench.sim.loop import settle_horizon, simulate
from workbench.sim.metrics import measure
from workbench.sim.scenario import Events
from workbench.tune.bench import Aim, Bench, at_infinity

Floats = NDArray[np.float64]
Stop = Callable[[], bool]
Law = Callable[[float, float | None, float], Gains]
"""Gain [%/%], integral time [s] and derivative time [s] -> canonical gains; in proportion to the
gain."""

_INTEGRAL_TIMES: Final = {False: 45, True: 24}
"""Of the coarse look, by whether there is a derivative."""
_RATIOS: Final = np.geomspace(0.02, 1.6, 14)
"""Derivative time over integral time, in the coarse look."""
_LEAST_RATIO: Final = math.log(0.002)
"""Logarithm of the smallest such share: below it a derivative does nothing but multiply noise."""
_LOWER: Final = (0.0, 0.12, 0.35, 0.7)
"""How far below the highest gain that keeps the limits, as a logarithm, in the coarse look."""
_SEEDS: Final = 3
_FINEST: Final = 0.004
"""Step of the logarithms at which the search ends."""
_CLOSER: Final = 0.6
_OFFSETS: Final = (-1.0, -0.5, 0.0, 0.5, 1.0)
"""Where a round looks, in its steps."""
_MOST_TRIES: Final = 6
_MOST_ROUNDS: Final = 40
_MOST_PLANTS: Final = 6
"""Times that worse plants of a family are added."""
_MUCH_WORSE: Final = 1.01
"""More than drawing a limit in by a little can cost."""
_SPARE: Final = 0.9999
"""Share of a limit that is aimed at once the exact figure was over it."""


@dataclass(frozen=True)
class Best:
    """The best settings found."""

    gain: float
    """[%/%]"""
    integral_time: float
    """[s]"""
    derivative_time: float
    """[s]"""
    gains: Gains
    cost: float
    """Weighted IAE of the worst plant [% s], from frequency responses."""
    finished: bool = True
    """False where the search was stopped before its end."""


def best(
    loops: Sequence[Loop],
    law: Law,
    aim: Aim,
    *,
    derivative: bool,
    should_stop: Stop | None = None,
) -> Best:
    """Settings with the least cost of the worst plant, within the limits for every plant.

    cost = (1 - share) load IAE + share setpoint IAE

    Parameters
    ----------
    loops
        One loop for each plant of the family, nominal first; their gains do not count.
    law
        How the controller's own settings make canonical gains.
    aim
        Cost and limits.
    derivative
        PID; otherwise PI.
    should_stop
        Looked at between rounds; True ends the search with the best so far.

    Raises
    ------
    CannotSolve
        No settings keep the limits, nothing limits the gain, or stopped before anything was found.
    ModelError
        A plant with a dead time inside an inner feedback.
    """
    return _Family(loops, law, derivative, should_stop or (lambda: False)).best(aim)


def trade_off(
    loops: Sequence[Loop],
    law: Law,
    aim: Aim,
    limits: Sequence[float],
    *,
    derivative: bool,
    should_stop: Stop | None = None,
) -> tuple[tuple[float, Best], ...]:
    """The best settings at each of several limits on Ms, each search begun where the last ended.

    Parameters
    ----------
    loops, law, aim
        As for `best`; the limit on Ms in `aim` does not count.
    limits
        On Ms, above 1.
    derivative, should_stop
        As for `best`.

    Returns
    -------
    tuple
        (limit, best settings), the smallest limit first; limits that no settings keep, or within
        which nothing limits the gain, are left out.

    Raises
    ------
    ModelError
        A plant with a dead time inside an inner feedback.
    """
    stop = should_stop or (lambda: False)
    family = _Family(loops, law, derivative, stop)
    curve: list[tuple[float, Best]] = []
    for limit in sorted(limits, reverse=True):
        if stop():
            break
        within = replace(aim, limits=replace(aim.limits, max_sensitivity=limit))
        found = _or_none(partial(family.best, within))
        if found is not None:
            curve.append((limit, found))
        else:
            # Smaller limits leave even less, and what has no limit here hardly has one there.
            break
    return tuple(reversed(curve))


class _Family:
    """A family of plants, those of them that have mattered so far, and the last best settings."""

    def __init__(self, loops: Sequence[Loop], law: Law, derivative: bool, stop: Stop) -> None:
        self.loops, self.law, self.derivative, self.stop = loops, law, derivative, stop
        self.whole = Bench.of(loops)
        self.chosen = [0]
        self.last: Best | None = None
        self.without: _Family | None = None
        """The same without a derivative."""

    def best(self, aim: Aim) -> Best:
        """The best settings, looked for near the last ones where there are any."""
        search = self._search(aim)
        found = search.run() if self.last is None else search.from_here(self.last)
        for _ in range(_MOST_PLANTS if len(self.loops) > 1 else 0):
            worse = _worst(self.whole, found, aim)
            if self.stop() or all(plant in self.chosen for plant in worse):
                break
            self.chosen = sorted({*self.chosen, *worse})
            search = self._search(aim)
            found = search.from_here(found)
        found = self.last = _held_to_limits(search, [self.loops[i] for i in self.chosen], found)
        if self.derivative and math.isfinite(aim.limits.noise_gain):
            # A derivative filtered by a share of its time multiplies noise however short it is.
            self.without = self.without or _Family(self.loops, self.law, False, self.stop)
            without = _or_none(partial(self.without.best, aim))
            if without is not None and without.cost < found.cost:
                return without
        return found

    def _search(self, aim: Aim) -> _Search:
        return _Search(self.whole.only(self.chosen), self.law, aim, self.derivative, self.stop)


def _or_none(search: Callable[[], Best]) -> Best | None:
    try:
        return search()
    except CannotSolve:
        return None


def _worst(bench: Bench, found: Best, aim: Aim) -> list[int]:
    """The plants that settings treat worst: by cost, by each peak, and where they are unstable."""
    is_stable, ms, mt, cost = bench.family(found.gains, aim)
    worst = [int(cost.argmax()), int(ms.argmax()), int(mt.argmax())]
    return worst if is_stable.all() else [*worst, int(is_stable.argmin())]


@dataclass(frozen=True)
class _Spot:
    """Where in the space of logarithms the search is."""

    integral: float
    """Logarithm of the integral time."""
    ratio: float | None
    """Logarithm of derivative over integral time; `None` without a derivative."""
    lower: float = 0.0
    """Logarithm of how far the gain is below the highest that keeps the limits."""
    cost: float = math.inf
    gain: float = 0.0
    free: bool = False
    """Nothing but the end of sight keeps the gain from growing."""

    @property
    def times(self) -> tuple[float, float]:
        """Integral and derivative time [s]."""
        ti = math.exp(self.integral)
        return ti, 0.0 if self.ratio is None else ti * math.exp(self.ratio)


class _Search:
    """One search over one small family."""

    def __init__(self, bench: Bench, law: Law, aim: Aim, derivative: bool, stop: Stop) -> None:
        self.bench, self.law, self.aim = bench, law, aim
        self.derivative, self.stop = derivative, stop

    def run(self) -> Best:
        """The best of the coarse look, each of its seeds followed to the end."""
        spots, steps = self._coarse()
        best = spots[0]
        for spot in spots:
            best = min(best, self._closer(spot, steps), key=lambda s: s.cost)
        if best.free:
            raise CannotSolve(
                "nothing limits the gain: the loop keeps every limit however large it is",
                change="give a limit on the noise gain",
            )
        return self.as_best(best)

    def from_here(self, found: Best) -> Best:
        """The best near settings that were the best for fewer plants; anywhere if none is near."""
        ti, td = found.integral_time, found.derivative_time
        places = [
            _Spot(math.log(ti) + x, math.log(td / ti) + z if self.derivative else None)
            for x in np.linspace(-0.8, 0.8, 9)
            for z in (np.linspace(-0.8, 0.8, 5) if self.derivative else (0.0,))
        ]
        spots = self.look(places, _LOWER, math.inf)
        if not spots:
            return self.run()
        spot = min(spots, key=lambda s: s.cost)
        return self.as_best(self._closer(spot, (0.2, 0.4, 0.12)))

    def as_best(self, spot: _Spot) -> Best:
        """A spot as settings."""
        ti, td = spot.times
        gains = self.law(spot.gain, ti, td)
        return Best(spot.gain, ti, td, gains, spot.cost, not self.stop())

    def look(self, places: Sequence[_Spot], lower: Sequence[float], enough: float) -> list[_Spot]:
        """Every place with the gain lowered by every amount, for what it costs."""
        places = [p for p in places if p.ratio is None or p.ratio >= _LEAST_RATIO]
        if not places:
            return []
        rays = self.bench.rays([self.law(1.0, *place.times) for place in places])
        low, high, far = self.bench.windows(rays, self.aim.limits)
        ray = np.repeat(np.arange(len(places)), len(lower))
        amount = np.tile(np.array(lower), len(places))
        gain = high[ray] * np.exp(-amount)
        there = np.flatnonzero((gain > 0.0) & (gain >= low[ray]))
        ray, amount, gain = ray[there], amount[there], gain[there]
        cost = self.bench.costs(rays, ray, gain, self.aim, enough)
        free = high[ray] >= 0.99 * far[ray]
        return [
            replace(places[i], lower=float(r), cost=float(c), gain=float(k), free=bool(f and not r))
            for i, r, c, k, f in zip(ray.tolist(), amount, cost, gain, free, strict=True)
            if math.isfinite(c)
        ]

    def near(self, found: Best) -> Best:
        """The best of the times found, and a little lower in gain, within these limits.

        Where these times have no such gain any more, the best near them: the window of gains that
        held the best may have closed, and what is left lie far below it.
        """
        ratio = math.log(found.derivative_time / found.integral_time) if self.derivative else None
        place = _Spot(math.log(found.integral_time), ratio)
        spots = self.look([place], (0.0, 0.01, 0.03, 0.1, 0.3), math.inf)
        best = min(spots, key=lambda spot: spot.cost, default=None)
        if best is None or best.cost > _MUCH_WORSE * found.cost:
            return self.from_here(found)
        return self.as_best(best)

    def _coarse(self) -> tuple[list[_Spot], tuple[float, float, float]]:
        """Seeds, best first, and the steps with which to go on."""
        times = np.log(np.geomspace(*self.bench.integral_times, _INTEGRAL_TIMES[self.derivative]))
        ratios = np.log(_RATIOS) if self.derivative else np.zeros(1)
        places = [
            _Spot(float(x), float(z) if self.derivative else None) for x in times for z in ratios
        ]
        found = self.look(places, _LOWER, math.inf)
        if not found:
            raise CannotSolve(
                f"no {'PID' if self.derivative else 'PI'} settings keep the limits on this plant",
                change="allow a higher Ms, or more noise gain or travel",
            )
        found.sort(key=lambda spot: spot.cost)
        steps = (float(times[1] - times[0]), float(np.log(_RATIOS[1] / _RATIOS[0])), 0.12)
        seeds: list[_Spot] = []
        for spot in found:
            if len(seeds) < _SEEDS and all(_apart(spot, seed, steps) for seed in seeds):
                seeds.append(spot)
        return seeds, steps

    def _closer(self, spot: _Spot, steps: tuple[float, float, float]) -> _Spot:
        """Looks around a spot, nearer with every round that finds nothing further out."""
        size = 1.0
        for _ in range(_MOST_ROUNDS):
            if self.stop() or steps[0] * size < _FINEST:
                break
            best = self._around(spot, [step * size for step in steps])
            if best.cost < spot.cost:
                outside = (
                    abs(best.integral - spot.integral) > 0.7 * steps[0] * size
                    or abs((best.ratio or 0.0) - (spot.ratio or 0.0)) > 0.7 * steps[1] * size
                )
                spot, size = best, size if outside else size * _CLOSER
            else:
                size *= _CLOSER
        return spot

    def _around(self, spot: _Spot, steps: Sequence[float]) -> _Spot:
        ratios = [None] if spot.ratio is None else [spot.ratio + steps[1] * k for k in _OFFSETS]
        places = [_Spot(spot.integral + steps[0] * k, ratio) for k in _OFFSETS for ratio in ratios]
        lower = sorted({max(0.0, spot.lower + steps[2] * k) for k in (-1.0, 0.0, 1.0)})
        found = self.look(places, lower, spot.cost)
        return min([spot, *found], key=lambda s: s.cost)


def _apart(spot: _Spot, seed: _Spot, steps: tuple[float, float, float]) -> bool:
    """Further from each other than the first round looks."""
    return (
        abs(spot.integral - seed.integral) > 1.5 * steps[0]
        or abs((spot.ratio or 0.0) - (seed.ratio or 0.0)) > 1.5 * steps[1]
    )


def _held_to_limits(search: _Search, loops: Sequence[Loop], found: Best) -> Best:
    """The settings found, drawn in until the exact figures keep the limits."""
    aim = search.aim
    for _ in range(_MOST_TRIES):
        over = _exceeded(loops, found.gains, search.aim)
        if max(over.values()) <= 1.0:
            return found
        limits = Limits(
            _drawn_in(aim.limits.max_sensitivity, over["ms"], 1.0001),
            _drawn_in(aim.limits.max_complementary_sensitivity, over["mt"], 1.0001),
            _drawn_in(aim.limits.noise_gain, over["noise"]),
        )
        travel = _drawn_in(aim.load_travel, over["travel"])
        aim = replace(aim, limits=limits, load_travel=travel)
        tighter = _Search(search.bench, search.law, aim, search.derivative, search.stop)
        found = tighter.near(found)
    return found


def _drawn_in(limit: float, over: float, least: float = 0.0) -> float:
    return max(least, _SPARE * limit / over) if over > 1.0 else limit


def _exceeded(loops: Sequence[Loop], gains: Gains, aim: Aim) -> dict[str, float]:
    """The largest exact figures as shares of their limits, 0 where there is no limit."""
    limits = aim.limits
    worst = {"ms": 0.0, "mt": 0.0, "noise": 0.0, "travel": 0.0}
    for loop in (replace(loop, gains=gains) for loop in loops):
        margins = analogue_margins(loop) if loop.scan is None else sampled_margins(loop)
        ms, mt = margins.max_sensitivity.value, margins.max_complementary_sensitivity.value
        shares = {
            "ms": (ms or 2.0 * limits.max_sensitivity) / limits.max_sensitivity,
            "mt": (mt or 1.0) / limits.max_complementary_sensitivity,
        }
        if math.isfinite(limits.noise_gain):
            shares["noise"] = noise_gain(loop) / limits.noise_gain
        if math.isfinite(aim.load_travel):
            shares["travel"] = load_travel(loop, aim.load_step) / aim.load_travel
        worst |= {name: max(worst[name], share) for name, share in shares.items()}
    return worst


def load_travel(loop: Loop, load_step: float) -> float:
    """All moves of OP after a load step from rest, added up, by the engine [% of OP span].

    Without the output's own limits, which the search does not know of.
    """
    free = replace(loop, low=None, high=None, rate=None)
    events = Events(0.0, 0.0, load_step, 0.0, settle_horizon(free))
    travel = measure(simulate(free, events), events).output_travel.value
    return math.inf if travel is None else travel


def noise_gain(loop: Loop) -> float:
    """Largest |C F S|: how much OP may swing for a swing of the measurement by 1 % [%/%].

    Over all frequencies; with a scan, up to half the scan rate.
    """
    scale = scale_of([loop.plant])
    top = math.inf if loop.scan is None else math.pi / loop.scan
    w = frequencies([loop.plant], scale, 100.0 * scale.slowest, top)
    w = np.exp(np.interp(np.arange(0.0, len(w) - 1.0, 0.1), np.arange(len(w)), np.log(w)))
    if loop.scan is None:
        s = 1j * w
        controller, open_loop = (loop.gains.from_pv() * loop.filter())(s), loop.open_loop()(s)
        far = 0.0 if loop.pv_filter else at_infinity(loop.gains)
        return float(max(np.abs(controller / (1.0 + open_loop)).max(), far))
    z = np.append(np.exp(1j * w * loop.scan), -1.0)
    sampled = SampledLoop.of(loop)
    controller = controller_in_z(loop.gains, loop.scan, z)
    if loop.pv_filter:
        kept = math.exp(-loop.scan / loop.pv_filter)
        controller = controller * (1.0 - kept) / (1.0 - kept / z)
    return float(np.abs(controller / (1.0 + sampled.open_loop(z))).max())
