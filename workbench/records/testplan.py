"""How large and how long must a bump test be, for what it is to tell.

The plan moves OP up, down and up again about its resting place and holds each level alike on both
sides of it, so that PV stays about its usual value and a drift does not pass for an answer.  What a
test with that path can tell is known before it is made: the standard errors are those of the Fisher
information, worked out from the plant's own response.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve, NotApplicable, problem
from workbench.model.reduction import SmallModel, best_fit, half_rule
from workbench.model.response import held_response
from workbench.model.transfer import TransferFunction
from workbench.units import Figure, rounded, text, time_text

Array = NDArray[np.float64]

HOLD: Final = 5.0
"""Time constants that a level is held after the dead time; common practice is 4 to 5."""
_INTERVALS: Final = 20.0
"""Rows in a time constant where no logging interval is given."""
_MOST_ROUNDS: Final = 10
_CLEAR: Final = 5.0
"""Noise deviations that PV should move by at least (common practice)."""
_PATTERN: Final = (1.0, -1.0, -1.0, 1.0)
"""Levels of OP in the order held, each for a hold: their sum and their first moment are 0."""


@dataclass(frozen=True)
class Move:
    """One move of OP in the plan."""

    at_s: float
    op_change: float
    """[OP unit]"""
    hold_s: float
    """How long OP then stays."""
    pv_reached: float
    """Deviation of PV from its start at the end of the hold [PV unit]."""


@dataclass(frozen=True)
class Errors:
    """One standard deviation of everything that a fit would find."""

    size: float
    """Of the gain [PV unit per OP unit], or of an integrating plant's slope [the same per s]."""
    dead_time_s: float
    time_constants_s: tuple[float, ...]
    """Largest time constant first."""


@dataclass(frozen=True)
class Plan:
    """A bump test, and what it will tell."""

    bump_op: float
    """Size of OP's excursion to each side [OP unit]."""
    hold_s: float
    """Shortest hold of a level."""
    moves: tuple[Move, ...]
    expected_pv_change: float
    """Largest deviation of PV [PV unit]."""
    standard_errors: Errors
    certainty_percent: Figure
    """Largest of the standard errors: of gain, slope and time constants in percent of themselves,
    of the dead time in percent of dead time and slowest time constant together."""
    enough: bool
    """The certainty asked for, if any, is reached."""
    model: SmallModel
    """What the errors are worked out for."""
    interval_s: float
    duration_s: float
    path: tuple[Array, Array, Array]
    """Time [s], deviation of OP [OP unit], deviation of PV [PV unit]; (n,) each."""
    cautions: tuple[str, ...]


def plan_test(
    plant: TransferFunction,
    *,
    noise: float,
    max_pv_change: float,
    max_op_change: float | None = None,
    lost_motion: float = 0.0,
    interval: float | None = None,
    certainty: float | None = None,
) -> Plan:
    """A bump test for a plant as it is guessed to be.

    Parameters
    ----------
    plant
        The guess [PV unit per OP unit]; stable or integrating.
    noise
        Standard deviation of PV's noise, taken to be white [PV unit], above 0.
    max_pv_change
        How far PV may leave its start, either way [PV unit], above 0.
    max_op_change
        How far OP can leave its start, either way [OP unit], above 0.
    lost_motion
        Deadband and stick of the valve together [OP unit]; the bump is twice that at least.
    interval
        Between rows of the log [s]; a twentieth of the slowest time where none is given.
    certainty
        Wanted standard error [%] of gain and time constants, and of the dead time in percent of
        dead time and slowest time constant together.  Without it the bump is as large as allowed.

    Returns
    -------
    Plan
        With `certainty` the smallest bump that does, though PV moves 5 noise deviations at least;
        where the largest does not, as many rounds as it takes, 10 at most.

    Raises
    ------
    InputError
        An unstable plant, which no bump in manual can be made on, or one that PV does not answer.

    Source
    ------
    Holds, moves to both sides, size against the noise: common practice.  Fisher information and
    the Cramér-Rao bound: common practice in identification.
    """
    model, approximated = _model_of(plant)
    finest = _slowest(model) / _INTERVALS
    step = finest if interval is None else max(interval, finest)
    # Rows closer than that tell what fewer rows with proportionally less noise tell.
    row_noise = noise * math.sqrt(min(1.0, (interval or step) / step))
    hold = _whole_intervals(_hold(model), step)
    swing = _peak(plant, hold, step)
    if not swing > 0.0:
        raise problem("has no answer of PV to OP", "give a plant that answers", key="plant")
    largest = min(max_pv_change / swing, math.inf if max_op_change is None else max_op_change)
    bump, rounds = largest, 1
    if certainty is not None:
        worst = _worst(model, errors_of(model, _rounds(largest, 1, hold), step, row_noise))
        least = max(_CLEAR * noise / swing, 2.0 * lost_motion)
        bump = min(largest, max(largest * worst / certainty, least))
        while worst > certainty and rounds < _MOST_ROUNDS:
            # Each round tells about as much as the one before, less what level and drift take.
            wanted = math.ceil(rounds * 0.97 * (worst / certainty) ** 2)
            rounds = min(max(rounds + 1, wanted), _MOST_ROUNDS)
            worst = _worst(model, errors_of(model, _rounds(largest, rounds, hold), step, row_noise))
    bump = _rounded_within(bump, largest, up=certainty is not None)
    levels = _rounds(bump, rounds, hold)
    errors = errors_of(model, levels, step, row_noise)
    worst = _worst(model, errors)
    enough = certainty is None or worst <= certainty * (1 + 1e-9)
    path = _path(plant, levels, hold, step)
    peak = float(np.abs(path[2]).max())
    return Plan(
        bump_op=bump,
        hold_s=hold,
        moves=_moves(levels, hold, path),
        expected_pv_change=peak,
        standard_errors=errors,
        certainty_percent=Figure.of(worst),
        enough=enough,
        model=model,
        interval_s=interval or step,
        duration_s=float(path[0][-1]),
        path=path,
        cautions=(
            *_shortcomings(noise, peak, certainty, worst, largest * swing < max_pv_change),
            *_cautions(model, approximated, interval),
            *_about_valve(bump, lost_motion),
            *_ALWAYS,
        ),
    )


# --- the plant, as far as the errors need it ------------------------------------------------------


def _model_of(plant: TransferFunction) -> tuple[SmallModel, bool]:
    """The plant as one or two lags, and whether that is an approximation."""
    poles = () if plant.has_delayed_feedback else plant.poles()
    if any(pole.real > 0.0 for pole in poles):
        raise problem(
            "is unstable: in manual it runs away from any bump",
            "test it in automatic, with moves of the setpoint",
            key="plant",
        )
    for lags in (1, 2):
        try:
            model = half_rule(plant, lags)
        except NotApplicable:
            break
        if model.exact:
            return model, False
    try:
        return best_fit(plant, 1), True
    except (NotApplicable, CannotSolve) as refusal:
        raise problem(
            f"cannot be planned for: {refusal}",
            "give a first-order or an integrating guess of it",
            key="plant",
        ) from None


def _lags(model: SmallModel) -> list[float]:
    return [t for t in (model.time_constant, model.second_time_constant) if t]


def _slowest(model: SmallModel) -> float:
    """The time that sets the pace [s]."""
    return max([*_lags(model), model.dead_time], default=0.0) or 1.0


def _hold(model: SmallModel) -> float:
    """How long a level must be held [s]: dead time, and the lags nearly done."""
    lags = _lags(model)
    return model.dead_time + HOLD * (max(lags, default=0.0) or model.dead_time or 1.0)


def _whole_intervals(time: float, interval: float) -> float:
    return rounded(max(1.0, math.ceil(time / interval - 1e-9)) * interval, 12)


def errors_of(
    model: SmallModel,
    levels: list[tuple[float, float]],
    interval: float,
    noise: float,
    *,
    baseline: bool = True,
    drift: bool = True,
    until: float | None = None,
) -> Errors:
    """Standard errors that no unbiased fit can beat.

    covariance = noise^2 (J' J)^-1,  the columns of J being what PV changes by, row by row, for a
    small change of each parameter: for the gain PV/K; for the dead time -dPV/dt; for a time
    constant T the answer of -s/(T s + 1) times the plant.

    Parameters
    ----------
    model
        The plant.
    levels
        When OP takes each level [s], and its deviation then [OP unit].
    interval
        Between rows [s].
    noise
        Standard deviation of white noise [PV unit].
    baseline, drift
        Whether PV's level and a straight drift are found beside the plant.
    until
        End of the record [s]; one hold after the last move where it is left out.

    Returns
    -------
    Errors
        Of the model's own units.

    Raises
    ------
    CannotSolve
        The parameters cannot be told apart on this path.

    Source
    ------
    H. Cramér, "Mathematical Methods of Statistics", 1946; C.R. Rao, Bull. Calcutta Math. Soc. 37,
    1945 (from memory).
    """
    at = np.array([time for time, _ in levels])
    held = np.array([level for _, level in levels])
    end = until if until is not None else float(at[-1]) + (float(at[1]) if len(at) > 1 else 1.0)
    time = np.arange(0.0, end + 1e-9 * interval, interval)
    plant, lags = model.transfer(), _lags(model)
    if plant.relative_degree < 1:
        raise CannotSolve(
            "a plant without lag or integrator has no time constant to find",
            change="give the guess a time constant",
        )
    differentiated = TransferFunction.ratio((1.0, 0.0))

    def answer(of: TransferFunction, when: Array = time) -> Array:
        return held_response(of, at, held, when)

    # A row at the very instant a move arrives tells of a dead time that is too long, not of one
    # that is too short: the smaller, left-hand slope is taken there.
    before = time - 1e-9 * interval
    columns = [answer(plant) / model.gain, -answer(plant * differentiated, before)]
    columns += [-answer(plant * TransferFunction.ratio((1.0, 0.0), [(lag, 1.0)])) for lag in lags]
    known = len(columns)
    if baseline:
        columns.append(np.ones_like(time))
    if drift:
        columns.append(time / time[-1])
    size, late, *times = _spread(np.stack(columns, axis=1), noise)[:known]
    return Errors(size, late, tuple(times))


def _spread(columns: Array, noise: float) -> list[float]:
    size = np.linalg.norm(columns, axis=0)
    if not (size > 0.0).all():
        raise CannotSolve("OP does not move PV in this test", change="hold for longer")
    # Scaled columns keep the inverse accurate whatever the units are.
    r = np.linalg.qr(columns / size, mode="r")
    if np.linalg.cond(r) > 1e8:
        raise CannotSolve(
            "gain, times and dead time cannot be told apart in such a test",
            change="hold for longer, or guess one time constant fewer",
        )
    inverse = np.linalg.inv(r)
    return [float(s) for s in noise * np.linalg.norm(inverse, axis=1) / size]


def _worst(model: SmallModel, errors: Errors) -> float:
    """The largest standard error [%], each against what it is an error of."""
    lags = _lags(model)
    shares = [errors.size / abs(model.gain)]
    shares += [e / lag for e, lag in zip(errors.time_constants_s, lags, strict=True)]
    if whole := model.dead_time + max(lags, default=0.0):
        shares.append(errors.dead_time_s / whole)
    return 100.0 * max(shares)


# --- the path -------------------------------------------------------------------------------------


def _rounds(bump: float, rounds: int, hold: float) -> list[tuple[float, float]]:
    """When OP takes each level; a hold of rest before the first and after the last."""
    levels = [(0.0, 0.0)]
    last = 0.0
    for i, sign in enumerate(_PATTERN * rounds):
        if sign != last:
            levels.append((hold * (0.2 + i), sign * bump))
        last = sign
    levels.append((hold * (0.2 + len(_PATTERN) * rounds), 0.0))
    return levels


def _peak(plant: TransferFunction, hold: float, step: float) -> float:
    return float(np.abs(_path(plant, _rounds(1.0, 2, hold), hold, step)[2]).max())


def _path(
    plant: TransferFunction, levels: list[tuple[float, float]], hold: float, step: float
) -> tuple[Array, Array, Array]:
    at = np.array([time for time, _ in levels])
    held = np.array([level for _, level in levels])
    spacing = max(step, hold / 200.0)
    time = np.arange(0.0, float(at[-1]) + hold + 0.5 * spacing, spacing)
    op = held[np.searchsorted(at, time + 1e-9 * spacing, side="right") - 1]
    return time, op, held_response(plant, at, held, time)


def _moves(
    levels: list[tuple[float, float]], hold: float, path: tuple[Array, Array, Array]
) -> tuple[Move, ...]:
    ends = [*(time for time, _ in levels[2:]), levels[-1][0] + hold]
    found = []
    for (time, level), (_, before), end in zip(levels[1:], levels, ends, strict=False):
        row = int(np.searchsorted(path[0], end - 1e-9 * hold)) - 1
        found.append(Move(time, level - before, end - time, float(path[2][row])))
    return tuple(found)


def _rounded_within(bump: float, largest: float, *, up: bool) -> float:
    """A size that a person would type: two digits, and never above what is allowed."""
    unit = 10.0 ** (math.floor(math.log10(bump)) - 1)
    whole = math.ceil(bump / unit - 1e-9) if up else math.floor(bump / unit + 1e-9)
    size = float(f"{whole * unit:.12g}")
    return size if size <= largest * (1 + 1e-9) else float(f"{(whole - 1) * unit:.12g}")


# --- what operations should know ------------------------------------------------------------------


def _shortcomings(
    noise: float, peak: float, certainty: float | None, worst: float, op_bound: bool
) -> list[str]:
    """What the test cannot give."""
    said = []
    if certainty is not None and worst > certainty * (1 + 1e-9):
        said.append(
            f"The certainty asked for, {text(certainty, '%')}, is not reached: with the PV change "
            f"allowed, {_MOST_ROUNDS} rounds leave {text(worst, '%', 2)}. Allow a larger change."
        )
    if op_bound:
        said.append("The bump is as large as the range of OP lets it be; PV could move further.")
    if peak < 0.95 * _CLEAR * noise:
        said.append(
            f"PV moves by {text(peak / noise, digits=2)} noise deviations only, {_CLEAR:g} is "
            "common practice: the test may not be worth its disturbance."
        )
    return said


def _cautions(model: SmallModel, approximated: bool, interval: float | None) -> list[str]:
    """What this plant and this log add to what holds for any test."""
    said = []
    if approximated:
        said.append(
            "The errors are worked out for the one lag and dead time nearest to this plant: gain "
            f"{text(model.gain)}, time constant {time_text(model.time_constant)}, dead time "
            f"{time_text(model.dead_time)}."
        )
    slowest = max(_lags(model), default=0.0)
    if interval is not None and slowest and interval > 0.5 * slowest:
        said.append(
            f"Rows every {time_text(interval)} cannot show a time constant of "
            f"{time_text(slowest)}: log at least twice, better ten times, in it."
        )
    if interval is not None:
        said.append(
            "The dead time is known no better than to the interval between rows, "
            f"{time_text(interval)}, where OP's moves are only seen at rows."
        )
    if model.integrating:
        said.append(
            "PV does not come to rest: it ramps while OP is away from its balance. Begin in balance"
            " and be ready to end the test by hand."
        )
    return said


def _about_valve(bump: float, lost_motion: float) -> list[str]:
    if not lost_motion > 0.5 * bump:
        return []
    return [
        f"The valve loses {text(lost_motion, digits=2)} of OP where it turns, and the bump is only "
        f"{text(bump)}: discard the first move after each turn, or see to the valve first."
    ]


_ALWAYS: Final = (
    "Put the controller in manual, and its PV at rest, before the first move; agree limits on PV at"
    " which the test is ended and OP put back.",
    "Make each move at once, and larger than what the valve may stick or lose in its linkage; the"
    " move after a change of direction may arrive smaller than it was made.",
    "Nothing else may be moved meanwhile; note the time of any upset. Errors are for a guessed"
    " plant with white noise: noise that wanders slowly makes them larger.",
)
"""What holds for any bump test (common practice)."""
