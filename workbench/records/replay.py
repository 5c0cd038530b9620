"""Which controller made this record: is it the one that its sheet says.

From the logged SP and PV of a stretch in automatic the output is made again by the sampled PID
algorithm and compared with the logged OP.  That algorithm is linear in its canonical gains,

    u = Kp (b r - y) + Ki h sum(e) + Kd/(Tf + h) F(change of (c r - y)) + start,  F = 1/(1 - a/z),

a = Tf/(Tf + h), so that for each filter, each place of the derivative and each shift between the
columns the gains are solved for, and only those few are searched.  What stands at a limit is left
out, and every unbroken run of rows has a start of its own.  Executed positionally or by increments
the output is the same away from its limits.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from workbench.errors import NotApplicable
from workbench.model.conversion import HELD_BY
from workbench.model.pid import FORMS, Controller, Gains
from workbench.records.record import Record
from workbench.records.stretch import Array, Rows, is_automatic, runs
from workbench.units import Amount, Range

FEWEST_ROWS: Final = 40
_MOST_ROWS: Final = 20_000
_MOST_RUNS: Final = 8
"""Runs of rows that are replayed, the longest ones."""
_SHIFTS: Final = (0, 1, -1, 2)
"""Rows by which OP may be logged after the PV that it answers."""
_FILTERS: Final[tuple[float, ...]] = (0.0, *np.geomspace(0.05, 50.0, 15).tolist())
"""Filter times of the derivative that are tried, in scans."""
_MEMORY: Final = 0.95
"""Share that the lively part keeps of itself from row to row."""
_GOOD: Final = 90.0
"""Agreement [%] from which a controller counts as recognised."""
SAME_SETTING: Final = 0.02
"""Share by which a setting may differ and still be the one on the sheet."""


@dataclass(frozen=True)
class Ranges:
    """What turns the record into percent of span, and where OP stops."""

    pv: Range = Range(0.0, 100.0)
    op: Range = Range(0.0, 100.0)
    low: float | None = None
    """Lower limit of OP [OP unit]; the end of its range where left out."""
    high: float | None = None


@dataclass(frozen=True)
class Recognised:
    """One form of a controller that makes the logged OP."""

    form: str
    settings: Controller
    """In the form's own terms; gain, s."""
    action: str
    """reverse or direct."""
    integral_s: float | None
    """As a time, whatever the form."""
    derivative_s: float
    agreement_percent: float
    """100 (1 - norm of what is left / norm of OP about its mean)."""
    shift_rows: int
    """OP is logged so many rows after the PV that it answers."""
    same_as: tuple[str, ...]
    """Other forms that are this very controller, with settings of their own."""
    standard_errors: dict[str, float]
    """Shares of the canonical gains `proportional`, `integral`, `derivative`."""
    weight_known: bool
    """SP moved, so that the setpoint weight could be told."""


@dataclass(frozen=True)
class Recognition:
    """The forms that fit, the best first, or why none does."""

    candidates: tuple[Recognised, ...]
    scan_s: float
    rows: int
    reason: str = ""
    """Why nothing was recognised."""


@dataclass(frozen=True)
class _Data:
    """The rows that are replayed, in percent of span, run by run."""

    scan: float
    setpoint: list[Array]
    pv: list[Array]
    op: list[Array]
    moves: bool
    """SP moves in them."""


@dataclass(frozen=True)
class _Fit:
    gains: Gains
    errors: dict[str, float]
    sign: float
    shift: int
    misfit: float
    """Sum of squares left of the lively part of OP."""
    agreement: float
    """Of the whole of OP [%]."""
    total: float
    """Sum of squares of the lively part."""
    place: str
    """What the derivative acts on: none, pv, error or both, with a weight of its own."""


def recognise(
    record: Record,
    ranges: Ranges | None = None,
    *,
    pv_filter: float = 0.0,
    scan: float | None = None,
) -> Recognition:
    """Controllers that make the logged OP from the logged SP and PV.

    Parameters
    ----------
    record
        With SP, better with the mode; rows in automatic are used, all where no mode was logged.
    ranges
        Ranges of PV and OP, 0 to 100 each where left out; gains are in percent per percent.
    pv_filter
        Time constant of the filter before the controller [s]; PV may be logged before or behind it,
        and is taken as it fits better.
    scan
        Execution interval of the controller [s]; where left out, how often OP changes.

    Returns
    -------
    Recognition
        One candidate for each form that can hold the gains found; forms that are the same function
        of s are named in each other's `same_as` and stand in the order of how plain their setpoint
        weight is.

    Source
    ------
    Separable least squares: G.H. Golub, V. Pereyra, SIAM J. Numer. Anal. 10, 1973 (from memory);
    the algorithm is that of `model.sampled`.
    """
    ranges = ranges or Ranges()
    data = _replayed(record, ranges, scan)
    count = sum(len(op) for op in data.op)
    total = sum(float(((op - op.mean()) ** 2).sum()) for op in data.op)
    reason = _hopeless(record, count, total)
    if reason:
        return Recognition((), data.scan, count, reason)
    best = _simplest(data)
    if pv_filter:
        behind = _simplest(_filtered(data, pv_filter))
        if behind is not None and (best is None or behind.misfit < 0.5 * best.misfit):
            best = behind
    if best is None:
        return Recognition((), data.scan, count, "SP and PV do not move enough to tell the gains")
    if best.agreement < _GOOD:
        reason = (
            f"no form makes the logged OP: the best leaves {100.0 - best.agreement:.0f} % of it."
            " Something else moves OP (a feedforward, an outer loop, a gain that changes, limits"
            " or a mode that were not logged), or the columns are not those of one loop"
        )
        return Recognition((), data.scan, count, reason)
    return Recognition(tuple(_candidates(best, data)), data.scan, count)


def _hopeless(record: Record, count: int, total: float) -> str:
    automatic = is_automatic(record)
    if automatic is not None and not automatic.any():
        return "the controller was never in automatic in this record"
    if count < FEWEST_ROWS:
        return f"fewer than {FEWEST_ROWS} rows in automatic, away from the limits and without gaps"
    if not total > 0.0:
        return "OP never moved in automatic"
    return ""


# --- the rows -------------------------------------------------------------------------------------


def _replayed(record: Record, ranges: Ranges, scan: float | None) -> _Data:
    automatic = is_automatic(record)
    wanted: Rows = np.ones(len(record.time), bool) if automatic is None else automatic
    low = ranges.op.low if ranges.low is None else ranges.low
    high = ranges.op.high if ranges.high is None else ranges.high
    near = 1e-4 * ranges.op.span
    wanted = wanted & (record.op > low + near) & (record.op < high - near)
    found = sorted(runs(record, wanted), key=lambda run: run.start - run.stop)[:_MOST_RUNS]
    every = _rows_per_scan(record, found, scan)
    pieces: tuple[list[Array], list[Array], list[Array]] = ([], [], [])
    sp = record.pv * 0.0 + ranges.pv.low if record.sp is None else record.sp
    left = _MOST_ROWS
    for run in found:
        start = run.start + _phase(record.op[run], every)
        rows = np.arange(start, run.stop, every)[:left]
        if len(rows) < FEWEST_ROWS // 2:
            continue
        left -= len(rows)
        pieces[0].append(100.0 * (sp[rows] - ranges.pv.low) / ranges.pv.span)
        pieces[1].append(100.0 * (record.pv[rows] - ranges.pv.low) / ranges.pv.span)
        pieces[2].append(100.0 * (record.op[rows] - ranges.op.low) / ranges.op.span)
    moves = record.sp is not None and any(float(np.ptp(piece)) > 0.0 for piece in pieces[0])
    return _Data(every * _nominal(record), *pieces, moves=moves)


def _filtered(data: _Data, time: float) -> _Data:
    """PV behind a first-order filter with its exact pole, each run from its own first value."""
    share = -math.expm1(-data.scan / time)
    return replace(data, pv=[y[0] + _lagged(share * (y - y[0]), 1.0 - share) for y in data.pv])


def _nominal(record: Record) -> float:
    """The interval between rows [s] without the jitter of single stamps."""
    steps = np.diff(record.time)
    usual = float(np.median(steps))
    return float(steps[np.abs(steps - usual) < 0.5 * usual].mean())


def _rows_per_scan(record: Record, found: list[slice], scan: float | None) -> int:
    """How many rows OP stands between its changes: the historian may log faster than the scan."""
    if scan is not None:
        return max(1, round(scan / _nominal(record)))
    steps = [np.diff(np.flatnonzero(np.diff(record.op[run]))) for run in found]
    spacing = np.concatenate(steps) if steps else np.array([], int)
    if len(spacing) < FEWEST_ROWS // 2:
        return 1
    every = int(np.median(spacing))
    return every if every > 1 and np.mean(spacing % every == 0) > 0.9 else 1


def _phase(op: Array, every: int) -> int:
    """The row of a run on which OP changes, where it changes on every so many."""
    if every == 1:
        return 0
    changes = np.flatnonzero(np.diff(op)) + 1
    return int(np.bincount(changes % every, minlength=every).argmax()) if len(changes) else 0


# --- the gains ------------------------------------------------------------------------------------


def _simplest(data: _Data) -> _Fit | None:
    """The fit of the simplest structure that is as good as any.

    What logging rounds off is no white noise, so that a test of significance would take too much
    for real: each further part must halve what the simpler one leaves.
    """
    best: _Fit | None = None
    places = ("none", "pv", "error", "both") if data.moves else ("none", "pv")
    shifted = [_Shifted.of(data, shift) for shift in _SHIFTS]
    for integral in (False, True):
        for place in places:
            fits = [fit for one in shifted if (fit := one.best(integral, place)) is not None]
            if not fits:
                continue
            coarse = min(fits, key=_misfit)
            at = next(one for one in shifted if one.shift == coarse.shift)
            fit = at.refined(integral, place, coarse)
            floor = 1e-12 * fit.total
            simpler = best is not None and 0.5 * (best.misfit + floor) <= fit.misfit + floor
            # On PV or on the error there is as much of it, so there the nearer one is taken.
            beside = place == "error" and best is not None and best.place == "pv"
            if not simpler or (beside and best is not None and fit.misfit < best.misfit):
                best = fit
    return best


Column = tuple[Array, Array]
"""A column as it is, and its lively part (n,) each."""


class _Shifted:
    """The data with OP moved against PV, and the columns that OP is made of."""

    def __init__(self, data: _Data, shift: int, pieces: list[tuple[Array, Array, Array]]) -> None:
        self.scan, self.moves, self.shift, self.pieces = data.scan, data.moves, shift, pieces
        self.op, self.lively_op = self._column([u - u.mean() for _, _, u in pieces])
        self.total = float(self.op @ self.op)
        self.lively_total = float(self.lively_op @ self.lively_op)
        h = data.scan
        self.known = {
            "proportional": self._column([-y for _, y, _ in pieces]),
            "weighted": self._column([r for r, _, _ in pieces]),
            "integral": self._column([h * np.cumsum(r - y) for r, y, _ in pieces]),
            "setpoint": self._column([np.arange(float(len(y))) for _, y, _ in pieces]),
        }
        self.derivatives: dict[float, tuple[Column, Column]] = {}

    @classmethod
    def of(cls, data: _Data, shift: int) -> _Shifted:
        pieces = []
        for r, y, u in zip(data.setpoint, data.pv, data.op, strict=True):
            if shift >= 0:
                pieces.append((r[: len(r) - shift], y[: len(y) - shift], u[shift:]))
            else:
                pieces.append((r[-shift:], y[-shift:], u[:shift]))
        return cls(data, shift, pieces)

    def best(self, integral: bool, place: str) -> _Fit | None:
        """The best fit over a grid of filter times."""
        times = [0.0] if place == "none" else [share * self.scan for share in _FILTERS]
        fits = [self.solve(integral, place, time) for time in times]
        return min((fit for fit in fits if fit is not None), key=_misfit, default=None)

    def refined(self, integral: bool, place: str, fit: _Fit) -> _Fit:
        """The fit with the filter time between the neighbours on the grid that suits best."""
        if place == "none":
            return fit
        grid = [share * self.scan for share in _FILTERS]
        at = min(range(len(grid)), key=lambda i: abs(grid[i] - fit.gains.filter_time))
        low, high = grid[max(at - 1, 0)], grid[min(at + 1, len(grid) - 1)]
        for _ in range(24):
            inner = [low + 0.382 * (high - low), low + 0.618 * (high - low)]
            tried = [self.solve(integral, place, time) for time in inner]
            # Where there is no fit, the parts work against each other: not that way.
            first, second = (math.inf if one is None else one.misfit for one in tried)
            if first == second == math.inf:
                break
            low, high = (low, inner[1]) if first < second else (inner[0], high)
            fit = min((fit, *(one for one in tried if one is not None)), key=_misfit)
        return fit

    def _derivative(self, filter_time: float) -> tuple[Column, Column]:
        """F(change of -y) and F(change of r), each run from rest."""
        if filter_time not in self.derivatives:
            keep = filter_time / (filter_time + self.scan)
            found = (
                self._column([_lagged(-_change(y), keep) for _, y, _ in self.pieces]),
                self._column([_lagged(_change(r), keep) for r, _, _ in self.pieces]),
            )
            if len(self.derivatives) >= len(_FILTERS):
                return found
            self.derivatives[filter_time] = found
        return self.derivatives[filter_time]

    def _column(self, parts: list[Array]) -> Column:
        """A column, and what of it moves within some rows.

        What logging rounds off a setpoint adds up to a slow ramp, which must not count.
        """
        lively = [_lagged(_change(part), _MEMORY) for part in parts]
        return np.concatenate(parts), np.concatenate(lively)

    def solve(self, integral: bool, place: str, filter_time: float) -> _Fit | None:
        """The gains for one filter, or nothing where they cannot be told apart."""
        columns = self._columns(integral, place, filter_time)
        whole = np.stack([column for column, _ in columns.values()], axis=1)
        base = np.stack([self.lively_op, *(lively for _, lively in columns.values())], axis=1)
        base = self._without_starts(base, place, filter_time)
        op, base = base[:, 0], base[:, 1:]
        size = np.linalg.norm(base, axis=0)
        if not (size > 0.0).all():
            return None
        gram = (base / size).T @ (base / size)
        values = np.linalg.eigvalsh(gram)
        if not values[0] > 1e-12 * values[-1]:
            return None
        solution = np.linalg.solve(gram, (base / size).T @ op) / size
        left = op - base @ solution
        misfit, freedom = float(left @ left), max(len(op) - len(columns), 1)
        spread = np.sqrt(np.diag(np.linalg.inv(gram)) * misfit / freedom) / size
        left = self.op - self._about_mean(whole @ solution)
        agreement = 100.0 * (1.0 - math.sqrt(float(left @ left) / self.total))
        found = dict(zip(columns, solution.tolist(), strict=True))
        errors = dict(zip(columns, spread.tolist(), strict=True))
        return self._fit(found, errors, filter_time, (misfit, agreement), place)

    def _columns(self, integral: bool, place: str, filter_time: float) -> dict[str, Column]:
        names = ["proportional"]
        names += ["weighted"] if self.moves else []
        # A setpoint that is not logged, or stands still, makes the integral no more than a ramp.
        names += (["integral"] if self.moves else ["integral", "setpoint"]) if integral else []
        columns = {name: self.known[name] for name in names}
        if place != "none":
            on_pv, on_sp = self._derivative(filter_time)
            both = (on_pv[0] + on_sp[0], on_pv[1] + on_sp[1])
            columns["derivative"] = both if place == "error" else on_pv
            if place == "both":
                columns["on setpoint"] = on_sp
        return columns

    def _about_mean(self, column: Array) -> Array:
        """Each run has a start of its own: only what moves within a run counts."""
        out, at = np.empty_like(column), 0
        for _, _, u in self.pieces:
            part = column[at : at + len(u)]
            out[at : at + len(u)] = part - part.mean()
            at += len(u)
        return out

    def _without_starts(self, base: Array, place: str, filter_time: float) -> Array:
        """What the derivative part held as each run began dies out as a^k: it is projected out."""
        if place == "none" or not filter_time:
            return base
        keep = filter_time / (filter_time + self.scan)
        out, at = base.copy(), 0
        for _, _, u in self.pieces:
            fading = _lagged(_change(keep ** np.arange(float(len(u)))), _MEMORY)
            part = out[at : at + len(u)]
            weight = float(fading @ fading)
            if weight > 0.0:
                part -= np.outer(fading, fading @ part / weight)
            at += len(u)
        return out

    def _fit(
        self,
        found: dict[str, float],
        errors: dict[str, float],
        filter_time: float,
        left: tuple[float, float],
        place: str,
    ) -> _Fit | None:
        kp, ki = found["proportional"], found.get("integral", 0.0)
        kd = found.get("derivative", 0.0) * (filter_time + self.scan)
        sign = -1.0 if (kp or ki) < 0.0 else 1.0
        if sign * kd < 0.0 or sign * ki < 0.0 or filter_time * abs(kp) > abs(kd) > 0.0:
            return None  # no controller's settings: parts against each other, a filter above Td
        weight = found.get("weighted", kp) / kp if kp else 1.0
        if "on setpoint" in found and found["derivative"]:
            on_sp = found["on setpoint"] / found["derivative"]
        else:
            on_sp = 1.0 if place == "error" else 0.0
        shares = {
            name: errors[name] / abs(found[name])
            for name in ("proportional", "integral", "derivative")
            if found.get(name)
        }
        gains = Gains(sign * kp, sign * ki, sign * kd, filter_time if kd else 0.0, weight, on_sp)
        return _Fit(gains, shares, sign, self.shift, *left, self.lively_total, place)


def _misfit(fit: _Fit) -> float:
    return fit.misfit


def _change(series: Array) -> Array:
    return np.diff(series, prepend=series[0])


def _lagged(series: Array, keep: float) -> Array:
    """x_k = keep x_(k-1) + series_k (n,)."""
    if not keep:
        return series
    from scipy.linalg import solve_banded

    rows = len(series)
    band = np.stack([np.ones(rows), np.append(np.full(rows - 1, -keep), 0.0)])
    return np.asarray(solve_banded((1, 0), band, series), np.float64)


# --- forms ----------------------------------------------------------------------------------------


def _candidates(best: _Fit, data: _Data) -> list[Recognised]:
    """The gains in every form that can hold them, the plainest setpoint weight first."""
    gains = best.gains
    held: list[tuple[bool, Recognised]] = []
    for form in FORMS:
        try:
            settings, weight = _in_form(form, gains, data.moves)
        except NotApplicable:
            continue
        plainness = 0.0 if not data.moves else min(abs(weight - 1.0), abs(weight))
        # A form that would need a weight beyond 0 to 1 is not it; one form always stays.
        if form == "series" and data.moves and not -0.02 <= weight <= 1.02:
            continue
        # A weight of 0 or 1 is what people set; of others none is likelier than the next.
        held.append((plainness > 0.03, _recognised(form, settings, best, data)))
    held.sort(key=lambda pair: pair[0])
    forms = [one.form for _, one in held]
    return [
        replace(one, same_as=tuple(form for form in forms if form != one.form)) for _, one in held
    ]


def _in_form(form: str, gains: Gains, moves: bool) -> tuple[Controller, float]:
    """Settings of a form, in s and with a filter time, and the setpoint weight it needs."""
    plain = replace(
        gains,
        derivative_weight=1.0 if gains.derivative_weight > 0.5 else 0.0,
        derivative=gains.derivative if gains.derivative > 0.0 else 0.0,
    )
    numbers = HELD_BY[form](plain)
    unit = "1/s" if form == "parallel" else "s"
    weight = numbers.setpoint_weight if moves else 1.0
    settings = Controller(
        form=form,
        gain=numbers.gain,
        integral=None if numbers.integral is None else Amount(numbers.integral, unit),
        derivative=Amount(numbers.derivative, "s") if numbers.derivative else None,
        derivative_filter=_filter(numbers.derivative, plain),
        setpoint_weight=min(max(weight, 0.0), 1.0),
        derivative_on="error" if plain.derivative_weight else "pv",
    )
    return settings, weight


def _filter(derivative: float, gains: Gains) -> Amount | float | None:
    if not derivative:
        return 10.0
    return Amount(gains.filter_time, "s") if gains.filter_time > 0.0 else None


def _recognised(form: str, settings: Controller, best: _Fit, data: _Data) -> Recognised:
    integral, k = settings.integral, settings.gain_value
    derivative = settings.derivative.seconds if settings.derivative else 0.0
    if integral is None:
        integral_s = None
    else:
        integral_s = k / integral.per_second if form == "parallel" else integral.seconds
    return Recognised(
        form=form,
        settings=settings,
        action="direct" if best.sign < 0.0 else "reverse",
        integral_s=integral_s,
        derivative_s=derivative / k if form == "parallel" and k else derivative,
        agreement_percent=best.agreement,
        shift_rows=best.shift,
        same_as=(),
        standard_errors=best.errors,
        weight_known=data.moves,
    )


# --- against the sheet ----------------------------------------------------------------------------


@dataclass(frozen=True)
class Difference:
    """One setting that is not what the sheet says."""

    what: str
    sheet: float | str
    found: float | str


def differences(found: Recognised, sheet: Controller, action: str) -> tuple[Difference, ...]:
    """Settings by which the controller found differs from its sheet, in canonical terms.

    Parameters
    ----------
    found
        The best candidate.
    sheet
        The settings as the case has them.
    action
        The sheet's action, reverse or direct.

    Returns
    -------
    tuple
        Empty where every setting is within 2 %, or within 3 standard errors where the record is
        less sure than that; the derivative filter within a quarter.
    """
    gains, said = found.settings.gains(), sheet.gains()
    off: list[Difference] = []
    if found.action != action:
        off.append(Difference("action", action, found.action))
    for name, word in (
        ("proportional", "proportional gain [%/%]"),
        ("integral", "integral gain [%/(% s)]"),
        ("derivative", "derivative gain [% s/%]"),
    ):
        one, other = getattr(gains, name), getattr(said, name)
        allowed = max(SAME_SETTING, 3.0 * found.standard_errors.get(name, 0.0))
        if abs(one - other) > allowed * max(abs(one), abs(other)):
            off.append(Difference(word, other, one))
    times = gains.filter_time, said.filter_time
    if gains.derivative and said.derivative and abs(times[0] - times[1]) > 0.25 * times[1]:
        off.append(Difference("derivative filter time [s]", times[1], times[0]))
    weights = gains.setpoint_weight, said.setpoint_weight
    if found.weight_known and abs(weights[0] - weights[1]) > 0.03:
        off.append(Difference("setpoint weight", weights[1], weights[0]))
    return tuple(off)


def readings(sheet: Controller) -> Iterator[tuple[str, Controller]]:
    """The sheet's numbers as another controller would take them: other forms, other units."""
    if sheet.form != "parallel":
        other = "series" if sheet.form == "ideal" else "ideal"
        yield f"the same numbers in the {other} form", replace(sheet, form=other)
    if sheet.integral is not None:
        for unit in ("1/s", "1/min") if sheet.form == "parallel" else ("s", "min", "repeats/min"):
            if unit != sheet.integral.unit:
                amount = Amount(sheet.integral.value, unit)
                yield f"the integral as {amount}", replace(sheet, integral=amount)
    if sheet.derivative is not None:
        for unit in ("s", "min"):
            if unit != sheet.derivative.unit:
                amount = Amount(sheet.derivative.value, unit)
                yield f"the derivative as {amount}", replace(sheet, derivative=amount)
    if sheet.gain:
        band = replace(sheet, gain=None, proportional_band=sheet.gain)
        yield "the number of the gain as a proportional band in percent", band
    elif sheet.proportional_band is not None:
        gain = replace(sheet, gain=sheet.proportional_band, proportional_band=None)
        yield "the number of the proportional band as a gain", gain
