"""Many sampled loops side by side: the same events on a family of plants, or of settings.

Every scan is worked out for all loops at once in arrays with one column for each loop, by the same
exact plant and the same algorithm as `scans` and `controller` use for one.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from workbench.errors import problem
from workbench.model.feedback import Loop
from workbench.model.structures import Structure
from workbench.sim.controller import Algorithm
from workbench.sim.process import process
from workbench.sim.scans import BOUND, Clock, Held
from workbench.sim.scenario import Events

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Family:
    """What each loop did, at its scans; a row for each scan, a column for each loop."""

    time: Array
    """(n_scans,) [s]"""
    pv: Array
    """(n_scans, n_loops), as sampled [% of PV span], a deviation."""
    output: Array
    """(n_scans, n_loops), as computed [% of OP span], a deviation."""
    diverged: NDArray[np.bool_]
    """(n_loops,); a loop that ran away stays at 0 from where it left 1e6 %."""


def side_by_side(loops: Sequence[Loop], events: Events) -> Family:
    """The course of many loops through the same setpoint step and load step, from rest.

    Parameters
    ----------
    loops
        Of one scan and one computing delay; plants, settings and limits may all differ.
    events
        As for `loop.simulate`, without noise.

    Returns
    -------
    Family
        PV and output at every scan; two numbers for each loop and scan are kept.

    Raises
    ------
    InputError
        An analogue loop, or loops of different scans; noise; more than a step of each; a manual
        reset, or a rate limit or filter of the setpoint; anything built round a loop.
    """
    scans = {(loop.scan, loop.computing_delay) for loop in loops}
    scan, delay = next(iter(scans), (None, 0.0))
    if scan is None or len(scans) > 1 or events.noise:
        raise problem(
            "only sampled loops of one scan, without noise, run side by side",
            "give all of them the same scan",
            key="controller.scan",
        )
    shaped = any(
        loop.setpoint_rate is not None or loop.setpoint_filter or loop.bias for loop in loops
    )
    if shaped or not events.are_steps:
        raise problem(
            "only one step of setpoint and of load, as it is given, is run side by side",
            "leave out what else happens, and what shapes the setpoint",
            key="scenario",
        )
    if any(isinstance(loop, Structure) for loop in loops):
        raise problem(
            "compensation, feedforward and inner loops are not run side by side",
            "take them out, or run the loops one by one",
            key="scenario",
        )
    clock = Clock(scan, delay)
    count = clock.place(events.until)[0] + 1
    plants = _Plants.of([Held(process(loop), clock) for loop in loops], clock, events)
    setpoint = np.zeros(count)
    setpoint[clock.first_scan(events.setpoint_at) :] = events.setpoint_step
    with np.errstate(over="ignore", invalid="ignore"):
        pv, output, diverged = _follow(
            plants, [Algorithm.of(loop, scan) for loop in loops], setpoint.tolist()
        )
    return Family(np.arange(float(count)) * scan, pv, output, diverged)


@dataclass(frozen=True)
class _Plants:
    """Plants over one scan, filled up with zeros to the same number of states and of taps."""

    over: Array
    """(n, n + taps, loops): the next state from the state and the outputs of some scans back."""
    backs: NDArray[np.intp]
    """(taps, loops)"""
    read: Array
    """(n + taps, loops): PV from the same."""
    pushes: dict[int, tuple[NDArray[np.intp], Array]]
    """Scan -> loops, and by how much what the upset adds to each state changes (n, loops)."""
    shifts: dict[int, tuple[NDArray[np.intp], Array]]
    """Scan -> loops, and by how much what it adds to PV changes (loops,)."""

    @classmethod
    def of(cls, helds: Sequence[Held], clock: Clock, events: Events) -> _Plants:
        overs = [held.over(clock.scan) for held in helds]
        readings = [held.reading() for held in helds]
        backs = [
            sorted({*over.taps, *weights})
            for over, (_, weights) in zip(overs, readings, strict=True)
        ]
        loops, n = len(helds), max((len(held.process.c) for held in helds), default=0)
        taps = max(map(len, backs), default=0)
        over, read = np.zeros((n, n + taps, loops)), np.zeros((n + taps, loops))
        places = np.ones((taps, loops), np.intp)
        for k, (part, (row, weights)) in enumerate(zip(overs, readings, strict=True)):
            size = len(row)
            over[:size, :size, k], read[:size, k] = part.phi, row
            for i, back in enumerate(backs[k]):
                places[i, k] = back
                if back in part.taps:
                    over[:size, n + i, k] = part.taps[back]
                read[n + i, k] = weights.get(back, 0.0)
        pushes, shifts = _upsets(helds, clock, events, n)
        return cls(over, places, read, pushes, shifts)


_Changes = dict[int, tuple[NDArray[np.intp], Array]]


def _upsets(
    helds: Sequence[Held], clock: Clock, events: Events, n: int
) -> tuple[_Changes, _Changes]:
    # Scan -> loop -> what changes, the ways into one plant that are felt in one scan together.
    pushed: defaultdict[int, dict[int, Array]] = defaultdict(dict)
    shifted: defaultdict[int, dict[int, float]] = defaultdict(dict)
    size = events.load_step
    for k, held in enumerate(helds):
        for entry in held.process.load if size else ():
            whole, rest = clock.place(events.load_at + entry.dead_time)
            first = held.hold(entry, clock.scan - rest)[1] * size
            later = held.hold(entry, clock.scan)[1] * size - first
            for scan, change in ((whole, first), (whole + 1, later)):
                wide = np.concatenate([change, np.zeros(n - len(change))])
                pushed[scan][k] = pushed[scan].get(k, 0.0) + wide
            if entry.d:
                scan = whole + (rest > 0.0)
                shifted[scan][k] = shifted[scan].get(k, 0.0) + entry.d * size
    pushes = {at: (np.array([*of]), np.array([*of.values()]).T) for at, of in pushed.items()}
    shifts = {at: (np.array([*of]), np.array([*of.values()])) for at, of in shifted.items()}
    return pushes, shifts


def _follow(
    plants: _Plants, algorithms: Sequence[Algorithm], setpoint: list[float]
) -> tuple[Array, Array, NDArray[np.bool_]]:
    """PV and outputs (scans, loops), and who ran away."""
    n, loops, scans = len(plants.over), len(algorithms), len(setpoint)
    back = int(plants.backs.max(initial=1))
    memory = np.zeros((back + scans, loops))
    outputs, flat = memory[back:], memory.reshape(-1)
    places = (back - plants.backs) * loops + np.arange(loops)
    pv, pushed, shift = np.empty((scans, loops)), np.zeros((n, loops)), np.zeros(loops)
    controllers = _Controllers(algorithms)
    acting = np.zeros(plants.read.shape)
    x, moved, following = acting[:n], acting[n:], np.empty((n, loops))
    out, alive = np.zeros(loops, np.bool_), np.ones(loops)
    at_once = bool((plants.backs == 0).any())
    for k, r in enumerate(setpoint):
        if k in plants.pushes:
            which, change = plants.pushes[k]
            pushed[:, which] += change
        if k in plants.shifts:
            which, moved_by = plants.shifts[k]
            shift[which] += moved_by
        flat.take(places, out=moved, mode="clip")
        y = pv[k]
        np.einsum("ip,ip->p", plants.read, acting, out=y)
        y += shift
        if not (y.min() > -BOUND and y.max() < BOUND):
            out |= ~(np.abs(y) <= BOUND)
            alive = np.where(out, 0.0, 1.0)
            acting[:, out] = 0.0
            pushed[:, out] = shift[out] = y[out] = 0.0
            controllers.rest(out)
        controllers.step(r, y, outputs[k])
        if out.any():
            outputs[k] *= alive
        if at_once:
            flat.take(places, out=moved, mode="clip")
        np.einsum("ijp,jp->ip", plants.over, acting, out=following)
        np.add(following, pushed, out=x)
        places += loops
    return pv, outputs, out


class _Controllers:
    """The algorithm of `controller`, for many at once."""

    def __init__(self, algorithms: Sequence[Algorithm]) -> None:
        self.all = algorithms
        rows = np.array(
            [
                (
                    *(a.proportional, a.advance, a.keep, a.kick),
                    *(a.setpoint_weight, a.derivative_weight, a.smooth, a.sign),
                    *(*a.bounds(), a.move, a.release, a.dead_zone, a.gain_at_rest),
                )
                for a in algorithms
            ]
        ).T
        self.kp, self.advance, self.keep, self.kick, self.b, self.c, self.smooth = rows[:7]
        self.sign, self.low, self.high, self.move, self.release = rows[7:12]
        self.dead_zone, self.at_rest = rows[12:]
        self.conditional = np.array([a.conditional for a in algorithms])
        self.is_limited = any(a.is_limited for a in algorithms)
        self.moves_at_most = bool(np.isfinite(self.move).any())
        self.gives_back = bool(self.release.any())
        self.reshapes = any(a.reshapes for a in algorithms)
        self.is_filtered = bool((self.smooth != 1.0).any())
        self.filtered, self.integral, self.derivative, self.seen, self.output = np.zeros(
            (5, len(algorithms))
        )
        self._work = [*np.zeros((3, len(algorithms)))]

    def rest(self, which: NDArray[np.bool_]) -> None:
        """Put some back to where they began."""
        for part in (self.filtered, self.integral, self.derivative, self.seen, self.output):
            part[which] = 0.0

    def step(self, setpoint: float, measured: Array, output: Array) -> None:
        """One scan of all, into `output`, in place: new arrays would cost as much as the sums."""
        error, rest, seen = self._work
        if self.is_filtered:
            self.filtered += self.smooth * (measured - self.filtered)
        else:
            self.filtered = measured
        np.multiply(self.c, setpoint, out=seen)
        seen -= self.filtered
        self.derivative *= self.keep
        np.subtract(seen, self.seen, out=error)
        error *= self.kick
        self.derivative += error
        self._work[2], self.seen = self.seen, seen
        np.subtract(setpoint, self.filtered, out=error)
        np.multiply(self.b, setpoint, out=rest)
        rest -= self.filtered
        if self.reshapes:
            acting = self._reshaped(error)
            rest += acting - error
            error[:] = acting
        rest *= self.kp
        rest += self.derivative
        error *= self.advance
        if self.is_limited:
            self._limit(error, rest)
        else:
            self.integral += error
            np.add(rest, self.integral, out=self.output)
        np.multiply(self.output, self.sign, out=output)

    def _limit(self, gained: Array, rest: Array) -> None:
        lowest, highest = self.low, self.high
        if self.moves_at_most:
            lowest = np.maximum(self.low, self.output - self.move)
            highest = np.minimum(self.high, self.output + self.move)
        rest += self.integral
        wanted = rest + gained
        # Beyond the limit that the error drives towards: the integral is not advanced.
        frozen = (wanted > highest) & (gained > 0.0) | (wanted < lowest) & (gained <= 0.0)
        frozen &= self.conditional
        if frozen.any():
            gained[frozen] = 0.0
            np.add(rest, gained, out=wanted)
        self.integral += gained
        np.maximum(wanted, lowest, out=self.output)
        np.minimum(self.output, highest, out=self.output)
        if self.moves_at_most:
            np.maximum(self.output, self.low, out=self.output)
            np.minimum(self.output, self.high, out=self.output)
        if self.gives_back:
            self.integral += self.release * (self.output - wanted)

    def _reshaped(self, error: Array) -> Array:
        beyond = np.sign(error) * np.maximum(np.abs(error) - self.dead_zone, 0.0)
        grown = self.at_rest + (1.0 - self.at_rest) * np.abs(beyond) / 100.0
        return np.asarray(beyond * grown, np.float64)
