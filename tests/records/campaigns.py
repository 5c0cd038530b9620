"""Made records by the hundred: how far a fit lies off, how often its intervals hold the truth, how
often the right shape is chosen.

Every case is a bump up and back with a plant whose answer is exact, on irregular stamps, with a
dead time off them.  The bound on the error is worked out here, from the exact answer and plain
differences, apart from the program.

`python -m tests.records.campaigns 500` prints the table, `... 500 true-shape` the one without the
choice between shapes, several times sooner.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from tests.records.making import Answer, Array, bump, lag, lead, ramp, stamps, two_lags
from workbench.records.candidate import Candidate
from workbench.records.identify import fit
from workbench.records.record import Record

MOVES = ((0.1, 5.0), (0.55, -5.0))
MEMORY = 3.0
"""Of the correlated noise, in rows."""


@dataclass(frozen=True)
class Made:
    """A plant, and the record that a bump test of it makes."""

    shape: str
    simpler: str
    """The shape that it could be mistaken for; nothing where there is none."""
    answer: Callable[..., Answer]
    truth: dict[str, tuple[float, ...]]
    """Key of the answer -> values; the dead time last."""
    noise: float
    """Standard deviation: the signal is 20 times that or more."""
    interval: float
    rows: int

    @property
    def values(self) -> list[float]:
        """All of the truth in one list, in the order of the answer's arguments, dead time last."""
        return [value for values in self.truth.values() for value in values]

    def record(self, seed: int, memory: float) -> Record:
        """One draw."""
        time = stamps(self.rows, self.interval, seed + 10_000)
        *values, late = self.values
        return bump(
            time,
            self.answer(*values),
            late,
            noise=self.noise,
            memory=memory * self.interval,
            moves=MOVES,
            seed=seed,
        )

    def bound(self, record: Record) -> Array:
        """Cramer-Rao bounds of the values for white noise, level and drift unknown."""
        columns = [np.ones(len(record.time)), record.time / record.time[-1]]
        for i in range(len(self.values)):
            clean = []
            width = 1e-4 * max(abs(self.values[i]), 1e-6)
            for sign in (1.0, -1.0):
                *values, late = (v + sign * width * (i == k) for k, v in enumerate(self.values))
                clean.append(bump(record.time, self.answer(*values), late, moves=MOVES).pv)
            columns.append((clean[0] - clean[1]) / (2 * width))
        jacobian = np.stack(columns)
        scale = np.linalg.norm(jacobian, axis=1)
        information = (jacobian / scale[:, np.newaxis]) @ (jacobian / scale[:, np.newaxis]).T
        errors: Array = self.noise * np.sqrt(np.diag(np.linalg.inv(information))) / scale
        return errors[2:]


MADE: Final = (
    Made(
        "first-order",
        "",
        lag,
        {"gain": (1.8,), "time_constants_s": (100.0,), "dead_time_s": (25.7,)},
        0.3,
        8.0,
        140,
    ),
    Made(
        "second-order",
        "first-order",
        two_lags,
        {"gain": (-0.6,), "time_constants_s": (100.0, 50.0), "dead_time_s": (25.7,)},
        0.055,
        8.0,
        200,
    ),
    Made(
        "integrating", "", ramp, {"slope_per_s": (-0.002,), "dead_time_s": (25.7,)}, 0.15, 8.0, 140
    ),
    Made(
        "lead",
        "second-order",
        lead,
        {
            "gain": (0.8,),
            "numerator_time_s": (-60.0,),
            "time_constants_s": (100.0, 50.0),
            "dead_time_s": (25.7,),
        },
        0.1,
        8.0,
        200,
    ),
)
"""Hold 4 time constants (the sum of them) or more, rows at most a tenth of the largest apart."""


@dataclass(frozen=True)
class Tally:
    """What came of many draws of one case."""

    made: Made
    memory: float
    size: int
    missing: int
    """Draws in which the true shape could not be told."""
    error_over_bound: Array
    """Root mean square error over the Cramer-Rao bound for white noise, each value."""
    held: Array
    """Share of the 95 % intervals that hold the truth, each value."""
    chosen: float
    """Share of the draws in which the true shape was chosen."""
    plain_misfit: float
    """Largest misfit of the simpler shape's best fit to the answer without noise [noise sd]."""


def _pairs(candidate: Candidate, made: Made) -> tuple[Array, Array]:
    """Estimates, and ends of the intervals (values, 2), in the order of the truth."""
    estimates, ends = [], []
    for key in made.truth:
        value, pair = getattr(candidate, key), candidate.interval_95[key]
        estimates += list(value) if isinstance(value, tuple) else [value]
        ends += list(np.reshape(np.array(pair), (-1, 2)))
    return np.array(estimates), np.array(ends)


def _misfit(made: Made) -> float:
    if not made.simpler:
        return 0.0
    clean = replace(made, noise=0.0).record(0, 0.0)
    shown = fit(clean, shapes=(made.simpler,), noise_model="white").candidates
    return float(np.abs(shown[0].fitted_pv - clean.pv).max()) / made.noise if shown else np.inf


def tally(made: Made, memory: float, size: int, *, choose: bool = True, seed: int = 0) -> Tally:
    """Draws of one case, fitted with every shape, or with the true one alone."""
    squares, held = np.zeros(len(made.values)), np.zeros(len(made.values))
    missing = chosen = 0
    for draw in range(seed, seed + size):
        record = made.record(draw, memory)
        result = fit(record) if choose else fit(record, shapes=(made.shape,))
        own = next((c for c in result.candidates if c.shape == made.shape), None)
        chosen += result.chosen == made.shape
        if own is None:
            missing += 1
            continue
        estimates, ends = _pairs(own, made)
        squares += ((estimates - made.values) / made.bound(record)) ** 2
        held += (ends[:, 0] <= made.values) & (made.values <= ends[:, 1])
    count = max(size - missing, 1)
    return Tally(
        made,
        memory,
        size,
        missing,
        np.sqrt(squares / count),
        held / count,
        chosen / size,
        _misfit(made),
    )


def certain(size: int, seed: int) -> tuple[float, list[str]]:
    """Worst share by which intervals of the true shape miss 95 %, in standard deviations of it.

    A share of 0.95 among n has the standard deviation sqrt(0.95 0.05/n); for 500 draws 3 % is 3 of
    them, which is what is allowed.
    """
    worst, failures = 0.0, []
    for made in MADE:
        for memory in (0.0, MEMORY):
            found = tally(made, memory, max(size // 8, 1), choose=False, seed=seed)
            off = float(np.abs(found.held - 0.95).max()) / np.sqrt(0.95 * 0.05 / found.size)
            worst = max(worst, off)
            if not memory:
                spread = 1.15 + 3.0 / np.sqrt(2.0 * found.size)
                if found.error_over_bound.max() > spread:
                    failures.append(f"{made.shape}: error over bound {found.error_over_bound}")
    return worst, failures


def choices(size: int, seed: int) -> tuple[float, list[str]]:
    """Worst share of draws in which another shape was chosen, which leaves 3 noise sd or more."""
    shares = []
    for made in MADE:
        if not made.simpler:
            continue
        for memory in (0.0, MEMORY):
            found = tally(made, memory, max(size // 4, 1), seed=seed)
            assert found.plain_misfit > 3.0
            shares.append(1.0 - found.chosen)
    return max(shares), []


def main(size: int, *, choose: bool) -> None:
    """Print the table."""
    print("case          noise       draws  told  right shape  misfit  error/bound | held %")
    for made in MADE:
        for memory in (0.0, MEMORY):
            found = tally(made, memory, size, choose=choose)
            errors = " ".join(f"{x:.2f}" for x in found.error_over_bound)
            held = " ".join(f"{100 * x:.1f}" for x in found.held)
            print(
                f"{made.shape:13} {'correlated' if memory else 'white':10} {size:6} "
                f"{size - found.missing:5} {100 * found.chosen:10.1f} % "
                f"{found.plain_misfit:7.1f}  "
                f"{errors} | {held}",
                flush=True,
            )


if __name__ == "__main__":
    main(int(sys.argv[1]), choose="true-shape" not in sys.argv)
