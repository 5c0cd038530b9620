"""Does the valve stick: what the shapes of OP and PV in a regular swing tell.

Each test has a middle ground in which it does not decide, and together they may leave it open; a
bump of OP in manual, small and one way, is what settles it.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass
from typing import Final, Literal

import numpy as np
from numpy.typing import NDArray

from workbench.units import Figure

Array = NDArray[np.float64]
Verdict = Literal["stick-slip", "no stick-slip", "undecided"]

_HARMONICS: Final = 8
"""What of a swing tells its shape; above it is noise."""
_MOST_ROWS: Final = 20_000
"""Rows that the search for lost motion looks at."""


@dataclass(frozen=True)
class Correlation:
    """Where the cross-correlation of OP and PV lies about lag 0."""

    shift: float
    """|right - left| / (right + left) of the first zero crossings on both sides."""
    height: float
    """| |r(0)| - peak | / (|r(0)| + peak), peak being the largest of that sign between them."""
    verdict: Verdict


@dataclass(frozen=True)
class Shape:
    """Whether the half waves are triangles or sines."""

    index: float
    """MSE of the sines / (MSE of the sines + MSE of the triangles)."""
    half_waves: int
    verdict: Verdict


def correlation(pv: Array, op: Array) -> Correlation | None:
    """Stick-slip from the cross-correlation: odd about lag 0 with stick-slip, even without.

    A shift above 2/3 is stick-slip and below 1/3 none, where the height, above or below 1/3, does
    not say otherwise; anything else is undecided.

    Parameters
    ----------
    pv, op
        Evenly spaced, of a loop in automatic that swings (n,).

    Returns
    -------
    Correlation
        `None` where the cross-correlation does not cross zero on both sides.

    Notes
    -----
    For self-regulating plants with a PI controller; not for integrating ones.  In a swing that is
    nearly a sine the shift is atan(period/(2 pi Ti)) over a right angle whatever makes it, so that
    sines from outside land in the middle ground, and slow ones, above 11 Ti, among stick-slip.

    Source
    ------
    A. Horch, "A simple method for detection of stiction in control valves", Control Engineering
    Practice 7, 1999, 1221-1231; "Condition monitoring of control loops", thesis, KTH, 2000 (from
    memory).
    """
    rows = len(pv)
    a, b = pv - pv.mean(), op - op.mean()
    spectrum = np.fft.rfft(a, 2 * rows) * np.conj(np.fft.rfft(b, 2 * rows))
    both = np.fft.irfft(spectrum)
    right, left = both[: rows // 2], np.append(both[:1], both[: rows // 2 : -1])[: rows // 2]
    ends = [_first_crossing(side) for side in (right, left)]
    if ends[0] is None or ends[1] is None or not ends[0] + ends[1] > 0.0:
        return None
    between = np.concatenate([right[: math.ceil(ends[0])], left[: math.ceil(ends[1])]])
    here = float(both[0])
    peak = float(np.abs(between[np.signbit(between) == np.signbit(here)]).max(initial=abs(here)))
    shift = abs(ends[0] - ends[1]) / (ends[0] + ends[1])
    height = (peak - abs(here)) / (peak + abs(here)) if peak else 0.0
    return Correlation(shift, height, _horch(shift, height))


def _first_crossing(side: Array) -> float | None:
    """Lag, in rows, at which a side of the cross-correlation first crosses zero."""
    at = np.flatnonzero(np.signbit(side[1:]) != np.signbit(side[:-1]))
    if not len(at):
        return None
    i = int(at[0])
    return i + float(side[i] / (side[i] - side[i + 1]))


def _horch(shift: float, height: float) -> Verdict:
    if shift > 2.0 / 3.0 and height > 1.0 / 3.0:
        return "stick-slip"
    return "no stick-slip" if shift < 1.0 / 3.0 and height < 1.0 / 3.0 else "undecided"


def shape(signal: Array, period: float) -> Shape | None:
    """Stick-slip from the shape of the half waves: triangles with it, sines without.

    index = MSE(sines) / (MSE(sines) + MSE(triangles));  above 0.6 stick-slip, below 0.4 none

    Parameters
    ----------
    signal
        OP of a self-regulating plant, PV of an integrating one; evenly spaced (n,).
    period
        Of the swing, in rows.

    Returns
    -------
    Shape
        `None` with fewer than 4 half waves, or fewer than 6 rows in each.

    Notes
    -----
    Slow wandering and what is faster than the eighth harmonic are taken out first.  A sine and a
    triangle of one half wave are both fitted with a free height, the triangle's peak where it fits
    best.

    Source
    ------
    Q.P. He, J. Wang, M. Pottmann, S.J. Qin, "A curve fitting method for detecting valve stiction in
    oscillating control loops", Ind. Eng. Chem. Res. 46, 2007, 4549-4560 (from memory).
    """
    if period < 12.0:
        return None
    smooth = _band(signal, 1.0 / (2.5 * period), _HARMONICS / period)
    fundamental = _band(signal, 1.0 / (2.0 * period), 2.0 / period)
    edges = _crossings(smooth, fundamental, period)
    errors = [_half_wave(smooth, a, b) for a, b in itertools.pairwise(edges)]
    fits = np.array([e for e in errors if e is not None])
    if len(fits) < 4:
        return None
    sine, triangle = fits.mean(axis=0)
    index = float(sine / (sine + triangle)) if sine + triangle > 0.0 else 0.5
    verdict: Verdict = "stick-slip" if index > 0.6 else "undecided"
    return Shape(index, len(fits), "no stick-slip" if index < 0.4 else verdict)


def _band(signal: Array, low: float, high: float) -> Array:
    """The part of a signal between two frequencies [per row]."""
    rows = len(signal)
    line = np.linspace(signal[0], signal[-1], rows)
    spectrum, frequency = np.fft.rfft(signal - line), np.fft.rfftfreq(rows)
    kept = np.where((frequency >= low) & (frequency <= high), spectrum, 0.0)
    return np.asarray(np.fft.irfft(kept, rows), np.float64)


def _crossings(smooth: Array, fundamental: Array, period: float) -> list[float]:
    """Zero crossings of the shape, one near each of the fundamental's; the ends are left out."""

    def of(series: Array) -> Array:
        at = np.flatnonzero(np.signbit(series[1:]) != np.signbit(series[:-1]))
        return np.asarray(at + series[at] / (series[at] - series[at + 1]), np.float64)

    fine = of(smooth)
    if not len(fine):
        return []
    rows, found = len(smooth), []
    for rough in of(fundamental):
        nearest = float(fine[np.abs(fine - rough).argmin()])
        inside = 0.75 * period < nearest < rows - 0.75 * period
        if inside and abs(nearest - rough) < 0.25 * period:
            found.append(nearest)
    return sorted(set(found))


def _half_wave(signal: Array, start: float, end: float) -> tuple[float, float] | None:
    """Mean square errors of the best half sine and the best triangle between two crossings."""
    row = np.arange(math.ceil(start), math.floor(end) + 1)
    if len(row) < 6:
        return None
    share, values = (row - start) / (end - start), signal[row]
    peaks = np.linspace(0.05, 0.95, 37)[:, np.newaxis]
    bases = np.vstack(
        [np.sin(math.pi * share), np.minimum(share / peaks, (1.0 - share) / (1.0 - peaks))]
    )
    heights = bases @ values / (bases * bases).sum(axis=1)
    errors = ((values - heights[:, np.newaxis] * bases) ** 2).mean(axis=1)
    scale = float((values * values).mean()) or 1.0
    return float(errors[0]) / scale, float(errors[1:].min()) / scale


def together(verdicts: list[Verdict]) -> Verdict:
    """What several tests say: what one of them decides and none denies.

    Of 300 made loops that swing, a third each for a sticking valve, a gain that is too high and a
    sine from outside, 2 valves were judged wrong by both tests together (by simulation).
    """
    decided = {verdict for verdict in verdicts if verdict != "undecided"}
    return decided.pop() if len(decided) == 1 else "undecided"


# --- how much -------------------------------------------------------------------------------------


def chord(major: float, minor: float, angle: float) -> float:
    """Width of an ellipse through its centre, along the axis from which the angle is not taken.

    2 m n / sqrt(m^2 sin(a)^2 + n^2 cos(a)^2)

    Parameters
    ----------
    major, minor
        Semi-axes m and n.
    angle
        Between the axis m and the direction of the width [rad].

    Returns
    -------
    float
        In the unit of the axes; 0 for an ellipse that is a line.

    Source
    ------
    M.A.A.S. Choudhury, S.L. Shah, N.F. Thornhill, D.S. Shook, "Automatic detection and
    quantification of stiction in control valves", Control Engineering Practice 14, 2006 (from
    memory).

    Examples
    --------
    >>> chord(3.0, 2.0, 0.0)
    6.0
    """
    across = math.hypot(major * math.sin(angle), minor * math.cos(angle))
    return 2.0 * major * minor / across if across > 0.0 else 0.0


def apparent_amount(pv: Array, op: Array, period: float) -> float:
    """Stick-slip as the loop shows it: the width along OP of the ellipse of PV against OP.

    PV and OP are cut down to the swing's own frequency, where one against the other is an ellipse;
    its axes are those of the covariance, each sqrt(2) of its standard deviation.

    Parameters
    ----------
    pv, op
        Evenly spaced (n,).
    period
        Of the swing, in rows.

    Returns
    -------
    float
        In the unit of OP.

    Notes
    -----
    The phase that plant and controller add between PV and OP is in it: an estimate, not a
    measurement of the valve.  A loop that swings for another reason shows an amount as well.

    Source
    ------
    Choudhury and others (2006), as in `chord`.
    """
    low, high = 1.0 / (1.5 * period), 1.5 / period
    x, y = (_band(signal, low, high) for signal in (pv, op))
    scale = float(x.std())
    if not scale > 0.0:
        return 0.0
    # PV takes the scale of OP so that the covariance is well conditioned; the width is along OP.
    x = x * (float(y.std()) / scale)
    values, vectors = np.linalg.eigh(np.cov(np.vstack([x, y])))
    minor, major = (math.sqrt(2.0 * max(0.0, float(v))) for v in values)
    angle = math.atan2(abs(float(vectors[0, 1])), abs(float(vectors[1, 1])))
    return chord(major, minor, angle)


def deadband(pv: Array, op: Array) -> Figure:
    """Lost motion between OP and PV, from the model that explains PV best.

    pv(t) = a pv(t-1) + b x(t-k) + c,  x being OP behind a deadband of width d; d and k are
    searched, a, b and c solved

    Parameters
    ----------
    pv, op
        Evenly spaced (n,).

    Returns
    -------
    Figure
        Width [OP unit]; none, with the reason, where no width explains PV better than 0 does.

    Notes
    -----
    The first 20 000 rows are looked at.  An upset that PV shows before OP answers it can pass for
    lost motion: worth telling where the shapes do not speak against it.

    Source
    ------
    M. Jelali, "Estimation of valve stiction in control loops using separable least-squares and
    global search algorithms", J. Process Control 18, 2008, 632-642: the separation (from memory);
    first order and a grid in place of its search.
    """
    pv, op = pv[:_MOST_ROWS], op[:_MOST_ROWS]
    moved = float(np.ptp(op))
    if len(pv) < 50 or not moved > 0.0 or not float(np.ptp(pv)) > 0.0:
        return Figure(None, "the record is too short, or OP or PV stands still")
    widths = np.append(0.0, np.linspace(0.04, 0.96, 24) * moved)
    behind = _played(op, widths)
    costs = np.array([_misfit(pv, x) for x in behind.T])
    best = int(costs.argmin())
    rows = len(pv)
    gained = rows * math.log(costs[0] / costs[best]) if costs[best] > 0.0 else math.inf
    if best == 0 or not gained > math.log(rows) + 10.0:
        return Figure(None, "no lost motion explains PV better than none")
    return Figure.of(float(widths[best]))


def _played(op: Array, widths: Array) -> Array:
    """OP behind a deadband of each width (n, k)."""
    half, position = 0.5 * widths, np.full(len(widths), op[0])
    found = np.empty((len(op), len(widths)))
    for i, signal in enumerate(op):
        position = np.minimum(np.maximum(position, signal - half), signal + half)
        found[i] = position
    return found


def _misfit(pv: Array, moved: Array) -> float:
    """Mean square error one row ahead, at the delay that fits best."""
    rows = len(pv)
    longest = min(30, rows // 5)
    delays = sorted({*range(1, min(11, longest)), *range(12, longest, 4)})
    least = math.inf
    for delay in delays:
        base = np.stack(
            [pv[longest - 1 : -1], moved[longest - delay : rows - delay], np.ones(rows - longest)],
            1,
        )
        target = pv[longest:]
        solution = np.linalg.lstsq(base, target, rcond=None)[0]
        least = min(least, float(((target - base @ solution) ** 2).mean()))
    return least
