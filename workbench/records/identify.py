"""Which plant made this record: fitted shapes, how sure they are, and what to distrust.

The model and the search are next door, in `likelihood`; the shapes that can be fitted are the table
`FITTED` in `response`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from workbench.errors import problem
from workbench.model.plant import Shape
from workbench.records.likelihood import Search, Solution
from workbench.records.record import Record
from workbench.records.response import FITTED, Array, FittedShape
from workbench.units import Note, harmless, nearest, one_of, text, time_text

NOISE_MODELS: Final = ("auto", "white", "correlated")

FEWEST_ROWS: Final = 12
_EVIDENCE: Final = 10.0
"""A model must beat "OP does nothing" by this much in BIC: very strong evidence, by the usual
scale (R.E. Kass and A.E. Raftery, "Bayes factors", J. Am. Stat. Assoc. 90, 1995; from memory)."""

_AUTOMATIC: Final = frozenset(
    {"A", "AUT", "AUTO", "AUTOMATIC", "C", "CAS", "CASC", "CASCADE", "RCAS"}
)
"""Words for a controller that moves OP by itself."""

Several = float | tuple[float, ...]
Interval = tuple[float, float] | tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class Candidate:
    """One shape fitted to the record."""

    shape: str
    plant: Shape
    """In PV units per OP unit and seconds, rounded to six digits."""
    gain: float | None
    """PV units per OP unit; `None` for an integrating shape."""
    slope_per_s: float | None
    """PV units per OP unit and second; `None` for a shape that comes to rest."""
    dead_time_s: float
    time_constants_s: tuple[float, ...]
    """Largest first."""
    standard_errors: dict[str, Several]
    """One standard deviation of `gain` or `slope_per_s`, `dead_time_s`, `time_constants_s` (one
    for each time constant), from the Fisher information at the optimum; of the dead time that, or
    what its 95 % interval amounts to where that is wider."""
    interval_95: dict[str, Interval]
    """95 % intervals under the same keys: gain and slope plus and minus 1.96 standard errors; time
    constants the same on a logarithmic scale; dead time from the profile of the likelihood up to
    20 000 rows, above that plus and minus 1.96 standard errors."""
    agreement_percent: float
    """100 (1 - norm of residual / norm of PV about its mean)."""
    bic: float
    """Bayesian information criterion, lower is better; comparable within one record."""
    noise_model: str
    """white or correlated."""
    fitted_pv: Array
    """The model's PV at each row (n,), without noise."""
    residual_sd: float
    """Standard deviation of the noise [PV units]."""
    noise_time_s: float | None = None
    """Time over which correlated noise forgets itself [s]; `None` for white noise."""
    drift_per_s: float = 0.0
    """Drift found beside the answer to OP [PV units per s]."""


@dataclass(frozen=True)
class Fit:
    """Every shape that could be fitted, the one chosen, and what to distrust."""

    candidates: tuple[Candidate, ...]
    """Best first, by BIC."""
    chosen: str | None
    """Shape of the model to use, or `None` where the record cannot tell."""
    warnings: tuple[Note, ...]
    record: Record
    reason: str = ""
    """Why none was chosen."""

    @property
    def best(self) -> Candidate | None:
        """The chosen candidate."""
        return next((c for c in self.candidates if c.shape == self.chosen), None)


def fit(
    record: Record,
    *,
    shapes: tuple[str, ...] = ("first-order", "integrating"),
    noise_model: str = "auto",
    drift: bool = True,
    should_stop: Callable[[], bool] | None = None,
) -> Fit:
    """Plants fitted to a record, with their uncertainty.

    minimise  n ln(sum w^2 / n) + sum ln(1 - rho^2)  over time constants, dead time and noise time,
    w the whitened residual, rho = exp(-step / noise time)

    Parameters
    ----------
    record
        At least 12 rows in which OP moves.
    shapes
        Words of `FITTED`.
    noise_model
        `white`, `correlated`, or `auto`: whichever has the lower BIC.
    drift
        Whether a straight line in time is fitted along.  The integrating shapes always carry one:
        it is the OP at which they would stand still.
    should_stop
        Asked now and then; the search ends with `CannotSolve` once it says true.

    Returns
    -------
    Fit
        Gains in PV units per OP unit, times in s.  `chosen` is `None`, with the reason, where the
        record cannot tell.

    Raises
    ------
    InputError
        A shape or a noise model that is not known.
    CannotSolve
        The search was stopped.

    Notes
    -----
    Whether PV was still settling when the record starts is decided by BIC.  Intervals hold for a
    plant that is linear, and for OP that moved at its stamps: OP logged a row late or early shifts
    the dead time by exactly that row.

    Source
    ------
    Maximum likelihood and Fisher information: common practice.
    """
    _check_choice(shapes, noise_model)
    reason = _hopeless(record)
    if reason:
        return Fit((), None, (Note("caution", reason), *_cautions(record)), record, reason)
    search = Search(record, noise_model, drift, should_stop)
    tried = [_candidate(search, shape) for shape in shapes]
    found = sorted((c for c in tried if c is not None), key=lambda candidate: candidate.bic)
    reason = _undecided(record, found, search)
    warnings = [*_cautions(record), *_loop_notes(record)]
    if found:
        warnings += _advice(record, found[0])
    if reason:
        warnings.insert(0, Note("caution", reason))
    chosen = None if reason else found[0].shape
    return Fit(tuple(found), chosen, tuple(warnings), record, reason)


def _check_choice(shapes: tuple[str, ...], noise_model: str) -> None:
    if noise_model not in NOISE_MODELS:
        what = f"{harmless(noise_model, 40)!r} is not a noise model"
        raise problem(what, f"use {one_of(NOISE_MODELS)}", key="--noise-model")
    for shape in shapes:
        if shape not in FITTED:
            meant = nearest(shape, list(FITTED))
            hint = f"; did you mean {meant!r}?" if meant else ""
            what = f"the shape {harmless(shape, 40)!r} cannot be fitted"
            raise problem(what, f"use {one_of(list(FITTED))}{hint}", key="--shape")


# --- from a point of the search to a candidate ---------------------------------------------------


def _candidate(search: Search, name: str) -> Candidate | None:
    """The best fit of a shape, or nothing where its parameters cannot be told apart."""
    shape = FITTED[name]
    best = search.best(shape)
    spread = search.spread(shape, best)
    gain = float(best.coefficients[0])
    if spread is None or gain == 0.0:
        return None
    times, dead_time = best.point.times, best.point.dead_time
    errors, intervals = _uncertainty(search, shape, best, spread)
    about_mean = float(np.linalg.norm(search.pv - search.pv.mean()))
    freedom = max(search.rows - best.parameters + 1, 1)
    return Candidate(
        shape=name,
        plant=shape.make(_rounded(gain), tuple(map(_rounded, times)), _rounded(dead_time)),
        gain=None if shape.integrates else gain,
        slope_per_s=gain if shape.integrates else None,
        dead_time_s=dead_time,
        time_constants_s=times,
        standard_errors=errors,
        interval_95=intervals,
        agreement_percent=100.0
        * (1.0 - float(np.linalg.norm(search.pv - best.fitted)) / about_mean),
        bic=best.bic(search.rows),
        noise_model="white" if best.point.noise_time is None else "correlated",
        fitted_pv=best.fitted,
        residual_sd=math.sqrt(best.variance * search.rows / freedom),
        noise_time_s=best.point.noise_time,
        drift_per_s=search.drift_per_s(shape, best),
    )


def _uncertainty(
    search: Search, shape: FittedShape, best: Solution, spread: list[float]
) -> tuple[dict[str, Several], dict[str, Interval]]:
    gain, times = float(best.coefficients[0]), best.point.times
    key = "slope_per_s" if shape.integrates else "gain"
    low, high = search.dead_time_interval(shape, best, spread[1])
    # The likelihood has a corner wherever the dead time carries a move across a row; next to one
    # the information there says too much, and the width of the profile is the honest figure.
    errors: dict[str, Several] = {
        key: spread[0],
        "dead_time_s": max(spread[1], (high - low) / (2 * 1.96)),
    }
    intervals: dict[str, Interval] = {
        key: (gain - 1.96 * spread[0], gain + 1.96 * spread[0]),
        "dead_time_s": (low, high),
    }
    if times:
        errors["time_constants_s"] = tuple(spread[2:])
        # Where the spread is many times the value the interval says "anything", in finite numbers.
        widths = [
            math.exp(min(1.96 * s / t, 100.0)) for s, t in zip(spread[2:], times, strict=True)
        ]
        intervals["time_constants_s"] = tuple(
            (t / width, t * width) for t, width in zip(times, widths, strict=True)
        )
    return errors, intervals


def _rounded(value: float) -> float:
    """Six digits: far below any standard error, and fit for a case file."""
    return float(f"{value:.6g}")


# --- what to distrust ----------------------------------------------------------------------------


def _hopeless(record: Record) -> str:
    """Why nothing can be fitted, seen before trying."""
    if len(record.time) < FEWEST_ROWS:
        return f"The record cannot tell: it has {len(record.time)} rows, fewer than {FEWEST_ROWS}."
    if not np.diff(record.op).any():
        return "The record cannot tell: OP never moved in it."
    if not np.diff(record.pv).any():
        return "The record cannot tell: PV never moved in it."
    first = float(record.time[1:][np.diff(record.op) != 0][0])
    if np.count_nonzero(record.time >= first) < FEWEST_ROWS // 2:
        return "The record cannot tell: OP moved only at its very end."
    return ""


def _undecided(record: Record, found: list[Candidate], search: Search) -> str:
    """Why none of the candidates may be used."""
    if not found:
        return (
            "The record cannot tell: gain, times and dead time of the shapes asked for cannot be "
            "told apart in it."
        )
    best = found[0]
    error = best.standard_errors["slope_per_s" if best.gain is None else "gain"]
    weak = isinstance(error, float) and abs(_size(best)) < 3.0 * error
    if weak or search.null_bic - best.bic < _EVIDENCE:
        return (
            "The record cannot tell: noise and drift explain PV as well as OP does. "
            "Make a larger bump and hold it longer."
        )
    if _share_automatic(record) > 0.9 and record.sp is not None and not np.diff(record.sp).any():
        return (
            "The record cannot tell: the controller was in automatic and SP never moved, so OP "
            "only followed PV. Move SP, or make the bump in manual."
        )
    return ""


def _size(candidate: Candidate) -> float:
    """Gain, or slope per second, of a fitted plant."""
    return candidate.gain if candidate.gain is not None else candidate.slope_per_s or 0.0


def _cautions(record: Record) -> list[Note]:
    """What the reader of the file already distrusted."""
    return [note for note in record.notes if note.severity == "caution"]


def _share_automatic(record: Record) -> float:
    """Share of the rows in which the mode column says the controller moved OP."""
    if record.mode is None:
        return 0.0
    return sum(mode.strip().upper() in _AUTOMATIC for mode in record.mode) / len(record.mode)


def _loop_notes(record: Record) -> list[Note]:
    """Cautions about OP that answers to PV."""
    share = _share_automatic(record)
    bias = "noise then reaches OP through the controller and biases the fit"
    if share > 0.02:
        words = f"The controller was in automatic in {share:.0%} of the rows: {bias}."
        return [Note("caution", f"{words} A bump made in manual is surer.")]
    if record.mode is None and np.count_nonzero(np.diff(record.op)) > 0.5 * len(record.op):
        words = f"OP moves at most rows. If the controller was in automatic, {bias}."
        return [Note("caution" if record.sp is not None else "info", words)]
    return []


def _advice(record: Record, best: Candidate) -> list[Note]:
    """What an engineer should know before using this model."""
    words = [
        *_about_hold(record, best),
        *_about_noise(record, best),
        *_about_times(record, best),
        *_about_sampling(record, best),
    ]
    notes = [Note("caution", w) for w in words]
    if best.noise_model == "correlated" and best.noise_time_s is not None:
        words_info = (
            "What the model leaves over wanders, with a memory of "
            f"{time_text(best.noise_time_s, 2)}; the standard errors allow for it."
        )
        notes.append(Note("info", words_info))
    return notes


def _about_hold(record: Record, best: Candidate) -> list[str]:
    """Whether any one level of OP was held long enough to see where PV goes."""
    moved = np.flatnonzero(np.diff(record.op)) + 1
    if best.gain is None or len(moved) > len(record.op) // 10:
        return []
    ends = np.append(record.time[moved[1:]], record.time[-1])
    hold = float((ends - record.time[moved]).max()) - best.dead_time_s
    slowest = best.time_constants_s[0]
    if hold >= 2.5 * slowest:
        return []
    words = (
        f"OP was held for {time_text(max(hold, 0.0), 3)} after the dead time at most, "
        f"{text(max(hold, 0.0) / slowest, digits=2)} time constants: gain and time constant are "
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


def _about_times(record: Record, best: Candidate) -> list[str]:
    """Whether the times found are ones the record can hold."""
    words = []
    if best.gain is not None and best.time_constants_s[0] > record.duration:
        words.append(
            "The time constant is longer than the record: only the rate gain / time constant is "
            "known. Consider the integrating shape."
        )
    for value, key, name in (
        (best.gain, "gain", "gain"),
        (best.slope_per_s, "slope_per_s", "slope"),
    ):
        error = best.standard_errors.get(key)
        if value is not None and isinstance(error, float) and error > 0.15 * abs(value):
            words.append(f"The {name} is known to +-{1.96 * error / abs(value):.0%} only.")
    errors = best.standard_errors.get("time_constants_s", ())
    if (
        isinstance(errors, tuple)
        and len(errors) == 1
        and errors[0] > 0.25 * best.time_constants_s[0]
    ):
        share = 1.96 * errors[0] / best.time_constants_s[0]
        words.append(f"The time constant is known to +-{min(share, 9.99):.0%} only.")
    return words


def _about_sampling(record: Record, best: Candidate) -> list[str]:
    """Whether rows come often enough for the times found."""
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
