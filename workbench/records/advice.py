"""What an engineer should know before using a fitted model, in words."""

from __future__ import annotations

import itertools

import numpy as np

from workbench.records.candidate import Candidate
from workbench.records.closed_loop import Feedback
from workbench.records.judgement import MoveGain
from workbench.records.record import Record
from workbench.units import Note, text, time_text


def loop_notes(loop: Feedback, record: Record) -> list[Note]:
    """Cautions about OP that answers to PV."""
    bias = "noise then reaches OP through the controller and biases the fit"
    share = loop.automatic_share
    if share > 0.02:
        words = f"The controller was in automatic in {share:.0%} of the rows: {bias}."
        return [Note("caution", f"{words} A bump made in manual is surer.")]
    if record.mode is None and loop.at_most_rows:
        words = f"OP moves at most rows. If the controller was in automatic, {bias}."
        return [Note("caution" if record.sp is not None else "info", words)]
    return []


def advice(record: Record, best: Candidate) -> list[Note]:
    """What to distrust in the candidate that would be used."""
    words = [
        *_about_hold(record, best),
        *_about_noise(record, best),
        *_about_upset(best),
        *_about_times(record, best),
        *_about_gain(best),
        *_about_sampling(record, best),
    ]
    notes = [Note("caution", w) for w in words]
    notes += [Note("info", w) for w in _about_stamps(record, best)]
    if best.noise_time_s is not None:
        remembered = (
            "What the model leaves over wanders, with a memory of "
            f"{time_text(best.noise_time_s, 2)}; the standard errors allow for it."
        )
        notes.append(Note("info", remembered))
    return notes


def _slowest(best: Candidate) -> float | None:
    """The time that PV needs to come to rest is counted in this one [s]."""
    if best.natural_period_s is not None and best.damping is not None:
        return best.natural_period_s / (2.0 * np.pi * best.damping)
    return max(best.time_constants_s, default=None)


def _about_hold(record: Record, best: Candidate) -> list[str]:
    """Whether any one level of OP was held long enough to see where PV goes."""
    slowest = _slowest(best)
    if best.gain is None or slowest is None or best.shape == "unstable":
        return []
    longest = 0.0
    for part in record.parts:
        time, op = record.time[part], record.op[part]
        moved = np.flatnonzero(np.diff(op)) + 1
        if len(moved) > len(op) // 10:
            return []
        if len(moved):
            ends = np.append(time[moved[1:]], time[-1])
            longest = max(longest, float((ends - time[moved]).max()))
    hold = max(longest - best.dead_time_s, 0.0)
    if hold >= 2.5 * slowest:
        return []
    words = (
        f"OP was held for {time_text(hold, 3)} after the dead time at most, "
        f"{text(hold / slowest, digits=2)} time constants: gain and time constant are "
        "unsure. Hold each level for 4 to 5."
    )
    return [words]


def _about_noise(record: Record, best: Candidate) -> list[str]:
    """Whether the bump stands clear of the noise, and of the drift."""
    span = record.duration
    answer = best.fitted_pv - best.drift_per_s * record.time
    excursion = float(np.ptp(answer))
    words = []
    if excursion < 5.0 * best.residual_sd:
        words.append(
            f"The bump moved PV by {text(excursion, digits=3)}, only "
            f"{text(excursion / best.residual_sd, digits=2)} times the noise: make it 5 or more."
        )
    if abs(best.drift_per_s) * span > 0.4 * excursion:
        words.append(
            f"PV drifted by {text(best.drift_per_s * span, digits=3)} over the record, against "
            f"{text(excursion, digits=3)} from OP: something else was moving. Bump up, down and up."
        )
    if best.agreement_percent < 50.0:
        words.append(
            f"The model follows only {best.agreement_percent:.0f} % of PV: look for upsets, or "
            "another shape."
        )
    return words


def _about_upset(best: Candidate) -> list[str]:
    upset = best.judgement.upset
    if upset is None:
        return []
    at, moved = upset
    words = (
        f"Something other than OP seems to have moved PV by roughly {text(moved, digits=1)} "
        f"from about {time_text(at, 3)} on: leave that window out, or repeat the test."
    )
    return [words]


def _about_times(record: Record, best: Candidate) -> list[str]:
    """Whether the times found are ones the record can hold."""
    words = []
    times = best.time_constants_s
    if best.gain is not None and times and times[0] > record.duration:
        words.append(
            "The time constant is longer than the record: only the rate gain / time constant is "
            "known. Consider the integrating shape."
        )
    name = "gain" if best.gain is not None else "slope"
    if best.level_error > 0.15 * abs(best.level):
        reach = best.certainty.high[0] - best.certainty.low[0]
        words.append(f"The {name} is known to +-{0.5 * reach / abs(best.level):.0%} only.")
    errors = best.standard_errors.get("time_constants_s", ())
    if isinstance(errors, tuple) and len(errors) == 1 and errors[0] > 0.25 * times[0]:
        share = 1.96 * errors[0] / times[0]
        words.append(f"The time constant is known to +-{min(share, 9.99):.0%} only.")
    if best.judgement.slow_share > 0.1:
        words.append(
            f"The gain grows with the window: a second, slow mode seems to add "
            f"{best.judgement.slow_share:.0%}. Hold longer, or look at what else settles."
        )
    return words


def _about_gain(best: Candidate) -> list[str]:
    """Whether the gain is the same up and down, and at every operating point."""
    judged, moves = best.judgement, best.judgement.moves
    lost = _deadband(best)
    if lost is not None:
        return [lost]
    words = []
    if judged.gain_up is not None and judged.gain_down is not None:
        (up, up_error), (down, down_error) = judged.gain_up, judged.gain_down
        apart = abs(up - down)
        if apart > 3.5 * np.hypot(up_error, down_error) and apart > 0.15 * abs(best.level):
            words.append(
                f"The gain is {text(up, digits=3)} for moves up and {text(down, digits=3)} for "
                "moves down: the plant is not the same both ways."
            )
    if len(moves) >= 3 and not words:
        middle = np.array([0.5 * (m.op_from + m.op_to) for m in moves])
        weight = 1.0 / np.array([m.standard_error for m in moves])
        terms = np.stack([np.ones(len(moves)), middle - middle.mean()]) * weight
        information = terms @ terms.T
        if np.linalg.cond(information) < 1e8:
            inverse = np.linalg.inv(information)
            gains = np.array([m.gain for m in moves])
            level, slope = inverse @ (terms @ (gains * weight))
            change = slope * float(np.ptp(middle))
            if abs(slope) > 3.5 * np.sqrt(inverse[1, 1]) and abs(change) > 0.15 * abs(level):
                ends = [level + slope * (m - middle.mean()) for m in (middle.min(), middle.max())]
                words.append(
                    f"The gain goes from {text(float(ends[0]), digits=3)} about OP "
                    f"{text(float(middle.min()), digits=3)} to {text(float(ends[1]), digits=3)} "
                    f"about OP {text(float(middle.max()), digits=3)}: fit each operating point by "
                    "itself."
                )
    return words


def _deadband(best: Candidate) -> str | None:
    """Whether moves after a reversal lose a part that moves in the same direction do not."""
    moves = best.judgement.moves
    turned: list[MoveGain] = []
    straight: list[MoveGain] = []
    for before, move in itertools.pairwise(moves):
        same = (before.op_to - before.op_from) * (move.op_to - move.op_from) > 0
        (straight if same else turned).append(move)
    if not turned or not straight:
        return None
    gains = [np.mean([m.gain for m in group]) for group in (turned, straight)]
    errors = [
        np.hypot.reduce([m.standard_error for m in group]) / len(group)
        for group in (turned, straight)
    ]
    share = 1.0 - gains[0] / gains[1] if gains[1] else 0.0
    if share < 0.1 or abs(gains[1] - gains[0]) < 3.5 * np.hypot(*errors):
        return None
    lost = float(share * np.mean([abs(m.op_to - m.op_from) for m in turned]))
    return (
        f"Moves of OP after a reversal lose about {text(lost, digits=2)} of OP, as in a valve with "
        "deadband: leave the first move after a reversal out."
    )


def _about_sampling(record: Record, best: Candidate) -> list[str]:
    """Whether rows come often enough for the times found, and what a stamp is worth."""
    interval = record.interval
    words = []
    if best.time_constants_s and interval > 0.5 * best.time_constants_s[0]:
        words.append(
            f"Rows are {time_text(interval, 3)} apart, more than half of the time constant: it is "
            "not resolved. Log faster."
        )
    if best.dead_time_s < interval:
        words.append(
            f"The dead time, {time_text(best.dead_time_s, 3)}, is below the interval between rows, "
            f"{time_text(interval, 3)}: it is known no better than that interval."
        )
    return words


def _about_stamps(record: Record, best: Candidate) -> list[str]:
    """What a stamp is worth to a short dead time."""
    interval = record.interval
    if not interval <= best.dead_time_s < 3.0 * interval:
        return []
    words = (
        f"The dead time, {time_text(best.dead_time_s, 3)}, is a few rows long: OP logged one row "
        f"early or late moves it by {time_text(interval, 3)}. Ask which way the stamps go."
    )
    return [words]
