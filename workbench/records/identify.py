"""Which plant made this record: fitted shapes, how sure they are, and which of them to use.

The model and the search are next door, in `likelihood`; how sure, in `certainty`; what a fit leaves
over, in `judgement`; what to distrust, in `advice`; whether a record in automatic can tell at all,
in `closed_loop`.  The shapes that can be fitted are the table `FITTED` in `response`.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from workbench.errors import problem
from workbench.records.advice import advice, loop_notes
from workbench.records.candidate import Candidate, rounded
from workbench.records.certainty import Certainty, certainty
from workbench.records.closed_loop import (
    LEAST_AGREEMENT,
    Feedback,
    RelaySwing,
    SetpointStep,
    feedback,
    relay_swing,
    setpoint_step,
)
from workbench.records.graphical import Reading, readings
from workbench.records.judgement import judge
from workbench.records.likelihood import Rows, Search, Solution
from workbench.records.record import Record
from workbench.records.response import FITTED
from workbench.units import Note, harmless, nearest, one_of

NOISE_MODELS: Final = ("auto", "white", "correlated")

FEWEST_ROWS: Final = 12
_EVIDENCE: Final = 10.0
"""A model must beat "OP does nothing" by this much in BIC: very strong evidence, by the usual
scale (R.E. Kass and A.E. Raftery, "Bayes factors", J. Am. Stat. Assoc. 90, 1995; from memory)."""
_UNDECIDED: Final = 6.0
"""Difference in BIC below which a simpler shape may win by the bump that was left out: below strong
evidence on the same scale."""
_HARDLY: Final = 2.0
"""Difference in BIC that is "not worth more than a bare mention" on the same scale: it buys no
further parameter."""
_NO_SWING: Final = 0.95
"""Damping at which an answer passes its end by less than a hundredth of a per cent: where the
interval reaches it, no swing was seen."""


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
    readings: tuple[Reading, ...] = ()
    """Graphical two-point methods, as a cross-check."""
    loop: Feedback | None = None
    """How OP came about."""
    step: SetpointStep | None = None
    """A setpoint step under proportional control, where the record holds one."""
    relay: RelaySwing | None = None
    """The swing of a relay test, where the record is one."""

    @property
    def best(self) -> Candidate | None:
        """The chosen candidate."""
        return next((c for c in self.candidates if c.shape == self.chosen), None)


def fit(
    record: Record,
    *,
    shapes: tuple[str, ...] = tuple(FITTED),
    noise_model: str = "auto",
    drift: bool = True,
    should_stop: Callable[[], bool] | None = None,
    tell: Callable[[int, int], None] = lambda done, total: None,
) -> Fit:
    """Plants fitted to a record, with their uncertainty.

    minimise  n ln(sum w^2 / n) + sum ln(1 - rho^2)  over time constants, dead time and noise time,
    w the whitened residual, rho = exp(-step / noise time)

    Parameters
    ----------
    record
        At least 12 rows in which OP moves; each of its parts has a level, drift and start of its
        own.
    shapes
        Words of `FITTED`.
    noise_model
        `white`, `correlated`, or `auto`: correlated where that is likelier by more than its price.
    drift
        Whether a straight line in time is fitted along.  The integrating shapes always carry one:
        it is the OP at which they would stand still.
    should_stop
        Asked now and then; the search ends with `CannotSolve` once it says true.
    tell
        Called with the number of shapes tried, and of all.

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
    the dead time by exactly that row.  Shapes are chosen by BIC; a simpler one is preferred within
    2 of the best, and within 6 where it predicts the bump it did not see clearly better; two lags
    within 6 of a swing whose damping may as well be critical.

    Source
    ------
    Maximum likelihood and Fisher information: common practice; G. Schwarz, "Estimating the
    dimension of a model", Ann. Statist. 6(2), 1978, 461-464 (from memory).
    """
    _check_choice(shapes, noise_model)
    cautions = [note for note in record.notes if note.severity == "caution"]
    reason, loop = _hopeless(record), None
    if not reason:
        loop = feedback(record)
        reason = loop.refusal
    if reason or loop is None:
        notes = (Note("caution", reason), *cautions)
        return Fit((), None, notes, record, reason, loop=loop, relay=_relay(record))
    search = Search(Rows.of(record), record.interval, noise_model, drift, should_stop)
    tried = []
    for number, shape in enumerate(shapes):
        tell(number, len(shapes))
        tried.append(_candidate(search, shape))
    found = sorted((c for c in tried if c is not None), key=lambda candidate: candidate.bic)
    best = _choice(found)
    reason = _undecided(best, search, loop)
    warnings = [*cautions, *loop_notes(loop, record)]
    self_regulating = best is not None and best.gain is not None
    cross_checks = readings(record) if self_regulating else ()
    if best is not None:
        warnings += advice(record, best)
    if reason:
        warnings.insert(0, Note("caution", reason))
    return Fit(
        tuple(found),
        None if reason or best is None else best.shape,
        tuple(warnings),
        record,
        reason,
        cross_checks,
        loop,
        setpoint_step(record) if loop.setpoint_moves else None,
        _relay(record),
    )


def _relay(record: Record) -> RelaySwing | None:
    return relay_swing(record) if len(record.time) >= FEWEST_ROWS else None


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
    shape, best = FITTED[name], search.best(name)
    gain, values = float(best.coefficients[0]), best.point.values
    if gain == 0.0 or _pressed(search, name, best):
        return None
    known = certainty(search, shape, best)
    if known is None:
        return None
    named: dict[str, list[float]] = {}
    for key, value in zip(known.names, known.estimates.tolist(), strict=True):
        named.setdefault(key, []).append(value)
    lead = named.get("numerator_time_s", [0.0])[0]
    about_mean = float(np.linalg.norm(search.rows.pv - search.rows.pv.mean()))
    left = float(np.linalg.norm(search.rows.pv - best.fitted))
    freedom = max(search.count - best.parameters + 1, 1)
    # Next to nothing is nothing; a case file takes no such time.
    dead_time = best.point.dead_time if best.point.dead_time > 1e-6 * search.interval else 0.0
    return Candidate(
        shape=name,
        plant=shape.make(
            rounded(gain), tuple(map(rounded, values)), rounded(lead), rounded(dead_time)
        ),
        gain=None if shape.integrates else gain,
        slope_per_s=gain if shape.integrates else None,
        dead_time_s=dead_time,
        time_constants_s=tuple(named.get("time_constants_s", ())),
        standard_errors=_keyed(known, [float(e) for e in known.errors]),
        interval_95=_keyed(known, list(zip(known.low.tolist(), known.high.tolist(), strict=True))),
        agreement_percent=100.0 * (1.0 - left / about_mean),
        bic=best.bic(search.count),
        noise_model="white" if best.point.noise_time is None else "correlated",
        fitted_pv=best.fitted,
        residual_sd=math.sqrt(best.square / freedom),
        certainty=known,
        judgement=judge(search, shape, best),
        noise_time_s=best.point.noise_time,
        drift_per_s=_drift(search, shape.terms, shape.integrates, best),
        natural_period_s=named.get("natural_period_s", [None])[0],
        damping=named.get("damping", [None])[0],
        numerator_time_s=named.get("numerator_time_s", [None])[0],
    )


def _pressed(search: Search, name: str, best: Solution) -> bool:
    """Whether a value ran to the end of what can be told: the shape is then a simpler one."""
    if 0.0 < search.longest_dead_time <= 1.001 * best.point.dead_time:
        return True
    low, high = search.bounds(FITTED[name])
    place = np.log(best.point.values) if best.point.values else np.empty(0)
    return bool(((place < low + 1e-3) | (place > high - 1e-3)).any())


def _keyed(known: Certainty, values: list[Any]) -> dict[str, Any]:
    """Figures of the parameters by their keys; of the time constants a tuple."""
    found: dict[str, Any] = {}
    for key, value in zip(known.names, values, strict=True):
        if key == "time_constants_s":
            found[key] = (*found.get(key, ()), value)
        else:
            found[key] = value
    return found


def _drift(search: Search, terms: int, integrates: bool, best: Solution) -> float:
    """Drift beside the answer to OP; an integrating shape's own straight line is not drift."""
    if integrates or not search.drift:
        return 0.0
    drifts = [
        float(best.coefficients[terms + 2 * i + 1]) / part.span
        for i, part in enumerate(search.rows.parts)
    ]
    return max(drifts, key=abs)


# --- choosing, and refusing to -------------------------------------------------------------------


def _choice(found: list[Candidate]) -> Candidate | None:
    """The best by BIC, or a plainer one near it: with fewer parameters and hardly worse, without a
    swing that was not seen, or with fewer parameters and a clearly better prediction of the bump
    that was left out.

    Never a richer one: one bump less makes rich shapes predict well or badly by chance.
    """
    if not found:
        return None
    best = found[0]
    near = [c for c in found if c.bic - best.bic < _UNDECIDED]
    fewest = min(_parameters(c) for c in found if c.bic - best.bic < _HARDLY)
    if fewest < _parameters(best):
        best = next(c for c in near if _parameters(c) == fewest)
    if best.damping is not None and np.max(best.interval_95["damping"]) >= _NO_SWING:
        best = next((c for c in near if c.shape == "second-order"), best)
    seen = best.judgement.holdout_percent
    for candidate in near:
        other = candidate.judgement.holdout_percent
        if _parameters(candidate) >= _parameters(best):
            continue
        if seen is not None and other is not None and 100.0 - other < 0.9 * (100.0 - seen):
            best, seen = candidate, other
    return best


def _parameters(candidate: Candidate) -> int:
    return len(candidate.certainty.names)


def _hopeless(record: Record) -> str:
    """Why nothing can be fitted, seen before trying."""
    if len(record.time) < FEWEST_ROWS:
        return f"The record cannot tell: it has {len(record.time)} rows, fewer than {FEWEST_ROWS}."
    if not any(np.diff(record.op[part]).any() for part in record.parts):
        return "The record cannot tell: OP never moved in it."
    if not np.diff(record.pv).any():
        return "The record cannot tell: PV never moved in it."
    after = 0
    for part in record.parts:
        moved = np.flatnonzero(np.diff(record.op[part]) != 0)
        after += part.stop - part.start - 1 - int(moved[0]) if len(moved) else 0
    if after < FEWEST_ROWS // 2:
        return "The record cannot tell: OP moved only at its very end."
    return ""


def _undecided(best: Candidate | None, search: Search, loop: Feedback) -> str:
    """Why none of the candidates may be used."""
    if best is None:
        return (
            "The record cannot tell: gain, times and dead time of the shapes asked for cannot be "
            "told apart in it."
        )
    weak = abs(best.level) < 3.0 * best.level_error
    if weak or search.null_bic() - best.bic < _EVIDENCE:
        return (
            "The record cannot tell: noise and drift explain PV as well as OP does. "
            "Make a larger bump and hold it longer."
        )
    if loop.closed and best.agreement_percent < LEAST_AGREEMENT:
        return (
            f"The record cannot tell: the controller was in automatic and the best model follows "
            f"only {best.agreement_percent:.0f} % of PV, where {LEAST_AGREEMENT:.0f} % are wanted. "
            "Move SP further, or make the bump in manual."
        )
    return ""
