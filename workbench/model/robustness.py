"""Margins and sensitivity peaks, with dead time exact, of the loop as analogue and as sampled.

Margins are the smallest over all crossovers; peaks are the supremum over all frequencies, both ends
included.  A loop that is not stable has no margins.

Source of the definitions: S. Skogestad and I. Postlethwaite, "Multivariable Feedback Control",
2nd ed., Wiley, 2005, section 2.4 (from memory); the bandwidth is that of T, as in G.F. Franklin,
J.D. Powell and A. Emami-Naeini, "Feedback Control of Dynamic Systems" (from memory): the lowest
frequency at which |T| falls below 1/sqrt(2).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import NotApplicable
from workbench.model.feedback import Loop
from workbench.model.sampled import SampledLoop
from workbench.model.stability import Verdict, loop_verdict, plant_verdict
from workbench.model.structures import Structure
from workbench.model.transfer import Complex, TransferFunction
from workbench.units import Figure

Floats = NDArray[np.float64]
Indices = NDArray[np.intp]
Response = Callable[[Floats], Complex]

_NOT_STABLE: Final = "the loop is not stable"
_FINEST: Final = 60_000
"""Most frequencies looked at in one sweep."""
_MATTERS: Final = 0.3
"""Gain down to which the phase of the dead time is followed turn by turn."""
_MOST_TRIES: Final = 20
"""Tries at the dead time that brings a sampled loop to its limit."""


@dataclass(frozen=True)
class Margins:
    """How far the loop is from instability; every figure may be missing, with its reason."""

    stable: bool
    reason: str
    """Why the loop is not stable; empty where it is."""
    gain_margin: Figure
    """Ratio above 1 by which the loop gain may grow."""
    gain_margin_lower: Figure
    """Ratio below 1 to which the loop gain may fall, where a fall can make the loop unstable."""
    phase_margin_deg: Figure
    delay_margin_s: Figure
    """Further dead time that the loop survives [s]."""
    max_sensitivity: Figure
    """Ms, the largest |1/(1 + L)|."""
    max_complementary_sensitivity: Figure
    """Mt, the largest |L/(1 + L)|."""
    gain_crossover_rad_s: Figure
    phase_crossover_rad_s: Figure
    bandwidth_rad_s: Figure
    """Where |T|, T = L/(1 + L), first falls below 1/sqrt(2), -3 dB [rad/s]."""


def analogue_margins(loop: Loop) -> Margins:
    """Margins of the loop with an analogue controller, exact with dead time."""
    open_loop = loop.open_loop()
    verdict = loop_verdict(open_loop)
    if not verdict.stable:
        return _none(verdict)

    def response(w: Floats) -> Complex:
        return open_loop((1j * w).astype(np.complex128))

    corners = corner_frequencies(open_loop)
    terms = (*open_loop.numerator, *open_loop.denominator)
    delays = {t.dead_time for t in terms} - {0.0}
    longest = max(delays, default=0.0)
    far = _at_infinity(open_loop)
    margins = _margins(response, _grid(response, corners, longest), open_loop, far=far)
    if len(delays) < 2:
        return margins
    # Paths of different dead time add up again at higher frequencies, wherever they are together
    # large enough to undercut the margin found so far.
    least = min(_MATTERS, 0.5 / (margins.gain_margin.value or 1000.0))
    grid = _grid(response, corners, longest, least=least, finest=8 * _FINEST)
    return _margins(response, grid, open_loop, far=far)


def sampled_margins(loop: Loop, known: SampledLoop | None = None) -> Margins:
    """Margins of the loop as sampled: hold, scan and computing delay included.

    `known` is its open loop in z where that is not had from a state space.

    Frequencies run up to half the scan rate.
    """
    made = loop.sampled if isinstance(loop, Structure) else lambda: SampledLoop.of(loop)
    sampled = known or made()
    verdict = sampled.verdict()
    if not verdict.stable:
        return _none(verdict)
    top = math.pi / sampled.scan

    def response(w: Floats) -> Complex:
        return sampled.open_loop(np.exp(1j * w * sampled.scan))

    open_loop = loop.open_loop()
    delay = max(open_loop.delays, default=0.0) + loop.computing_delay + sampled.scan
    corners = corner_frequencies(open_loop)
    grid = _grid(response, corners[corners < top], delay, top)
    last = float(response(np.array([top]))[0].real)

    def survived(frequency: float, delay: float) -> float:
        found = _held_delay(loop, frequency, delay)
        if found is not None and not _is_coarse(loop):
            return found
        return _soonest(loop, delay, found)

    # A loop that is not had from a state space takes its further dead time as a delay of L.
    exact = survived if known is None else None
    return _margins(response, grid, open_loop, far=last, far_at=top, survived=exact)


def _is_coarse(loop: Loop) -> bool:
    """The scan is not short against the plant's slowest lag: a part of a scan changes much."""
    assert loop.scan is not None
    lags = [1.0 / -pole.real for pole in loop.plant.poles() if pole.real < 0.0]
    return loop.scan > 0.5 * max(lags, default=0.0)


def _soonest(loop: Loop, delay: float, known: float | None) -> float:
    """The least dead time [s] with which the loop is not stable any more.

    With `known` the root at the crossover leaves; before it another root may, because with each
    part of a scan the held plant is another one.  Without it the root is looked for beyond `delay`,
    where a delay of L alone would have it, and taken to be there if it is not found.
    """

    def stable(further: float) -> bool:
        later = replace(loop, plant=loop.plant * TransferFunction.ratio((1.0,), dead_time=further))
        sampled = later.sampled() if isinstance(later, Structure) else SampledLoop.of(later)
        return sampled.verdict().stable

    assert loop.scan is not None
    until = known if known is not None else delay + 2.0 * loop.scan
    count = max(_LOOKS, math.ceil(_LOOKS * min(until / loop.scan, _MOST_SCANS)))
    before = 0.0
    for part in range(1, count):
        after = until * part / count
        if stable(after):
            before = after
            continue
        for _ in range(_HALVINGS):
            middle = 0.5 * (before + after)
            before, after = (middle, after) if stable(middle) else (before, middle)
        return after
    return delay if known is None else known


_LOOKS: Final = 12
"""Dead times for each scan at which the loop is looked at."""
_MOST_SCANS: Final = 5
_HALVINGS: Final = 34


def _held_delay(loop: Loop, frequency: float, delay: float) -> float | None:
    """The dead time [s] that makes L = -1, from where a delay of L alone would; `None` if lost.

    A dead time of a part of a scan changes the held plant otherwise than exp(-d s) would.  So L is
    worked out anew with it, until frequency and dead time no longer change: Newton's steps for
    log(-L) = 0 with the slope of the delay alone.
    """
    first, step, limit = delay, 1e-6 * frequency, math.pi / (loop.scan or 1.0)
    for _ in range(_MOST_TRIES):
        later = replace(loop, plant=loop.plant * TransferFunction.ratio((1.0,), dead_time=delay))
        sampled = later.sampled() if isinstance(later, Structure) else SampledLoop.of(later)
        at = np.array([frequency, frequency + step])
        values = np.log(-sampled.open_loop(np.exp(1j * at * sampled.scan)))
        slope = complex(values[1] - values[0]) / step
        short = complex(values[0])
        # Re: short + slope change = 0; Im: the same less frequency times the change of the delay.
        change = -short.real / slope.real if slope.real else math.inf
        more = (short.imag + slope.imag * change) / frequency
        if not math.isfinite(change + more) or not 0.0 < frequency + change <= limit:
            return None
        frequency, delay = frequency + change, delay + more
        if delay < 0.0 or abs(delay - first) > sampled.scan:
            return None
        if abs(more) <= 1e-9 * delay and abs(change) <= 1e-7 * frequency:
            return delay
    return None


def ultimate(plant: TransferFunction) -> tuple[float, float]:
    """Ultimate gain and period: where proportional control of a plant just keeps swinging.

    Parameters
    ----------
    plant
        Stable or integrating, positive gain [%/%].

    Returns
    -------
    tuple
        Ku [%/%] and Pu [s].

    Raises
    ------
    NotApplicable
        The plant is unstable or integrates twice, or its phase never reaches -180 deg.
    """
    if plant.integrators > 1:
        raise NotApplicable("no proportional gain is stable", limit="wants a swing to begin")
    if plant.has_delayed_feedback:
        unstable = plant.integrators <= 0 and not plant_verdict(plant).stable
    else:
        unstable = any(p.real > 0 for p in plant.poles())
    if unstable:
        raise NotApplicable("the plant is unstable", limit="wants a stable or integrating plant")

    def response(w: Floats) -> Complex:
        return plant((1j * w).astype(np.complex128))

    grid = _grid(response, corner_frequencies(plant), max(plant.delays, default=0.0))
    found = _phase_crossovers(response, grid, response(grid))
    if not found:
        raise NotApplicable(
            "no proportional gain makes the loop swing for ever",
            limit="wants a phase that reaches -180 deg",
        )
    gain, frequency = min(found)
    return gain, 2.0 * math.pi / frequency


def _none(verdict: Verdict) -> Margins:
    missing = Figure(None, f"{_NOT_STABLE}: {verdict.reason}")
    return Margins(False, verdict.reason, *([missing] * 9))


# --- the frequencies to look at ------------------------------------------------------------------


def corner_frequencies(function: TransferFunction) -> Floats:
    """Frequencies where something happens [rad/s]: every root and every dead time."""
    terms = (*function.numerator, *function.denominator)
    found = [abs(r) for t in terms for r in t.polynomial.roots if r]
    found += [1.0 / t.dead_time for t in terms if t.dead_time]
    return np.array(sorted(found) or [1.0])


def _at_infinity(function: TransferFunction) -> float:
    """Limit of the rational part at high frequency, the dead times apart."""
    if function.relative_degree > 0:
        return 0.0
    below = function.denominator[0].polynomial.coefficients[0]
    order = function.denominator[0].polynomial.degree
    tops = [t.polynomial for t in function.numerator if t.polynomial.degree == order]
    if function.dead_time > 0.0:
        return float(sum(abs(t.coefficients[0]) for t in tops) / abs(below))
    return float(sum(t.coefficients[0] for t in tops) / below)


def _grid(
    response: Response,
    corners: Floats,
    delay: float,
    top: float = math.inf,
    *,
    least: float = _MATTERS,
    finest: int = _FINEST,
) -> Floats:
    """Frequencies dense enough that the response never turns unseen between two of them."""
    low = float(corners.min(initial=min(1.0, top))) * 1e-3
    # An integrating loop crosses 1 however small its gain, only at a lower frequency.
    size, below = np.abs(response(np.array([low, 0.1 * low])))
    if below > 5.0 * size and size < 10.0:
        low *= max(float(size) / 10.0, 1e-12)
    high = min(float(corners.max(initial=low)) * 1e3, top)
    coarse = np.geomspace(low, high, 30 * math.ceil(math.log10(high / low)) + 2)
    pieces = [coarse]
    if delay:
        # Where the gain still matters the phase of the dead time must be followed turn by turn,
        # and one whole turn beyond, which holds the last crossing that can count.
        large = np.flatnonzero(np.abs(response(coarse)) > least)
        matters = float(coarse[large[-1]]) if len(large) else low
        last = min(matters + 7.0 / delay, high)
        count = min(int(last * delay / 0.2) + 2, finest // 2)
        pieces.append(np.linspace(low, last, count))
    grid = np.unique(np.concatenate(pieces))
    # A frequency on a pole of the imaginary axis itself has no value.
    grid = grid[np.isfinite(response(grid))]
    return _refined(response, grid, finest)


def _refined(response: Response, grid: Floats, finest: int) -> Floats:
    values = response(grid)
    for _ in range(12):
        step = np.abs(np.diff(values))
        distance = np.abs(1.0 + values)
        near = np.minimum(distance[1:], distance[:-1])
        size = np.maximum(np.minimum(np.abs(values[1:]), np.abs(values[:-1])), 1e-3)
        coarse = step > 0.35 * np.minimum(near, size)
        if not coarse.any() or len(grid) + coarse.sum() > finest:
            break
        extra = np.sqrt(grid[:-1][coarse] * grid[1:][coarse])
        where = np.searchsorted(grid, extra)
        grid = np.insert(grid, where, extra)
        values = np.insert(values, where, response(extra))
    return grid


# --- crossovers and peaks ------------------------------------------------------------------------


def crossings(f: Callable[[Floats], Floats], low: Floats, high: Floats) -> Floats:
    """Roots of f between brackets, all at once, by the false position of Anderson and Bjorck.

    (N. Anderson and A. Bjorck, "A new high order method of regula falsi type for computing a root
    of an equation", BIT 13, 1973, 253-264; from memory.)
    """
    if not len(low):
        return low
    a, b, fa, fb = low.copy(), high.copy(), f(low), f(high)
    x = b
    for _ in range(60):
        x = np.where(fb == fa, b, b - fb * (b - a) / np.where(fb == fa, 1.0, fb - fa))
        fx = f(x)
        crossed = fx * fb < 0
        # The end that stays is given less weight, or the other would creep towards the root.
        less = 1.0 - fx / np.where(fb == 0.0, 1.0, fb)
        fa = np.where(crossed, fb, fa * np.where(less > 0.0, less, 0.5))
        a = np.where(crossed, b, a)
        b, fb = x, fx
        if np.all((np.abs(fx) < 1e-12) | (np.abs(b - a) <= 1e-13 * np.abs(b))):
            break
    return x


def _peak(f: Callable[[Floats], Floats], grid: Floats, values: Floats) -> float:
    """Largest value of f on the grid, each promising hill climbed between its neighbours."""
    best = float(values.max())
    inside = _hills(values)
    _, heights = _tips(f, grid, inside[values[inside] > 0.8 * best])
    return max(best, float(heights.max(initial=-math.inf)))


def _hills(values: Floats) -> Indices:
    """Where a value is not below its neighbours; the ends are not looked at."""
    return np.flatnonzero((values[1:-1] >= values[:-2]) & (values[1:-1] >= values[2:])) + 1


def _tips(f: Callable[[Floats], Floats], grid: Floats, hills: Indices) -> tuple[Floats, Floats]:
    """The highest point of f between the neighbours of each hill of a grid, and its height."""
    at, best = grid[hills], np.full(len(hills), -math.inf)
    if not len(hills):
        return at, best
    low, high = grid[hills - 1], grid[hills + 1]
    columns = np.arange(len(hills))
    for _ in range(7):
        points = np.linspace(low, high, 13)
        heights = f(points.ravel()).reshape(points.shape)
        top = heights.argmax(axis=0)
        higher = heights[top, columns] > best
        at = np.where(higher, points[top, columns], at)
        best = np.maximum(best, heights[top, columns])
        low = points[np.maximum(top - 1, 0), columns]
        high = points[np.minimum(top + 1, 12), columns]
    return at, best


def _grazed(f: Callable[[Floats], Floats], grid: Floats, values: Floats) -> tuple[Floats, Floats]:
    """A grid and f on it with the tips that reach over 0 between two of its points."""
    grid, values = _topped(f, grid, values)
    grid, values = _topped(lambda w: -f(w), grid, -values)
    return grid, -values


def _topped(f: Callable[[Floats], Floats], grid: Floats, values: Floats) -> tuple[Floats, Floats]:
    hills = _hills(values)
    at, height = _tips(f, grid, hills[(values[hills] < 0.0) & (values[hills] > -_NEAR_ONE)])
    over = height > 0.0
    where = np.searchsorted(grid, at[over])
    return np.insert(grid, where, at[over]), np.insert(values, where, height[over])


_NEAR_ONE: Final = 0.1
"""How near to 1 the loop gain comes between two frequencies, as a logarithm, to be looked at."""


def _margins(
    response: Response,
    grid: Floats,
    open_loop: TransferFunction,
    *,
    far: float,
    far_at: float | None = None,
    survived: Callable[[float, float], float] | None = None,
) -> Margins:
    """All figures of a stable loop; `far` is the response at the last frequency, `far_at`.

    `survived` makes of a frequency and a delay of L there the dead time of the plant that does it.
    """
    values = response(grid)
    gain_low, gain_high, at_phase = _gain_margins(response, grid, values, open_loop, far, far_at)
    phase, delay, at_gain = _phase_margins(response, grid, values, survived)
    if far_at is None and abs(far) >= 1.0:
        # The least dead time makes a loop of neutral type whose gain at high frequency is too much.
        delay = Figure.of(0.0)
    ends = _ends(open_loop, far, delayed=far_at is None and open_loop.dead_time > 0.0)
    sensitivity = _peak(lambda w: 1.0 / np.abs(1.0 + response(w)), grid, 1.0 / np.abs(1.0 + values))
    complementary = _peak(
        lambda w: np.abs(1.0 - 1.0 / (1.0 + response(w))), grid, np.abs(1.0 - 1.0 / (1.0 + values))
    )
    return Margins(
        True,
        "",
        gain_high,
        gain_low,
        phase,
        delay,
        Figure.of(max(sensitivity, *(s for s, _ in ends))),
        Figure.of(max(complementary, *(t for _, t in ends))),
        at_gain,
        at_phase,
        _bandwidth(response, grid, values, ends[0][1]),
    )


def _bandwidth(response: Response, grid: Floats, values: Complex, at_zero: float) -> Figure:
    """Frequency [rad/s] at which |T| first falls below -3 dB; `at_zero` is |T| at frequency 0."""

    def above(response: Complex) -> Floats:
        size = np.abs(1.0 - 1.0 / (1.0 + response))
        return np.log(np.maximum(size, 1e-300) * math.sqrt(2.0))

    if at_zero < math.sqrt(0.5):
        return Figure(None, "PV does not follow a slow setpoint to -3 dB")
    height = above(values)
    fallen = np.flatnonzero(height < 0.0)
    if not len(fallen):
        return Figure(None, "the loop follows to -3 dB at every frequency")
    first = int(fallen[0])
    if not first:
        return Figure(None, "it is below every frequency looked at")
    found = crossings(
        lambda w: above(response(w)), grid[first - 1 : first], grid[first : first + 1]
    )
    return Figure.of(float(found[0]))


def _ends(open_loop: TransferFunction, far: float, *, delayed: bool) -> list[tuple[float, float]]:
    """(|S|, |T|) at frequency 0 and at the last frequency."""
    at_zero = open_loop.gain().value
    ends = [(0.0, 1.0)] if at_zero is None else [_sizes(at_zero)]
    # With dead time the far phase takes every value, so the worst of them counts.
    ends.append(_sizes(-far) if delayed else _sizes(far))
    return ends


def _sizes(value: float) -> tuple[float, float]:
    return abs(1.0 / (1.0 + value)), abs(value / (1.0 + value))


def _gain_margins(
    response: Response,
    grid: Floats,
    values: Complex,
    open_loop: TransferFunction,
    far: float,
    far_at: float | None,
) -> tuple[Figure, Figure, Figure]:
    """Lower and upper gain margin, and the frequency of the upper one."""
    found = _phase_crossovers(response, grid, values)
    at_zero = open_loop.gain().value
    if at_zero is not None and at_zero < 0.0:
        found.append((-1.0 / at_zero, 0.0))
    delayed = far_at is None and open_loop.dead_time > 0.0
    if (delayed and far) or far < 0.0:
        found.append((1.0 / abs(far), math.inf if far_at is None else far_at))
    above = [pair for pair in found if pair[0] > 1.0]
    below = [pair[0] for pair in found if pair[0] < 1.0]
    lower = Figure.of(max(below)) if below else Figure(None, "no fall of the gain upsets this loop")
    if not above:
        never = Figure(None, "the phase never reaches -180 deg where more gain could matter")
        return lower, never, never
    margin, frequency = min(above)
    if math.isinf(frequency):
        place = Figure(None, "the smallest margin is the limit at infinite frequency")
    else:
        place = Figure.of(frequency)
    return lower, Figure.of(margin), place


def _phase_crossovers(
    response: Response, grid: Floats, values: Complex
) -> list[tuple[float, float]]:
    """(1/|L|, frequency) wherever L crosses the negative real axis."""
    turn = np.angle(-values)
    cut = (turn[:-1] * turn[1:] <= 0.0) & (np.abs(turn[:-1] - turn[1:]) < math.pi)

    def sine(response: Complex) -> Floats:
        # Not the angle: it leaps on the positive axis, and a search would close in on the leap.
        return np.asarray(-response.imag / np.maximum(np.abs(response), 1e-300))

    at = crossings(lambda w: sine(response(w)), grid[:-1][cut], grid[1:][cut])
    found = response(at) if len(at) else at
    pairs = zip(found.tolist(), at.tolist(), strict=True)
    return [(1.0 / abs(value), w) for value, w in pairs if value.real < 0.0]


def _phase_margins(
    response: Response,
    grid: Floats,
    values: Complex,
    survived: Callable[[float, float], float] | None,
) -> tuple[Figure, Figure, Figure]:
    """Phase margin [deg], delay margin [s] and the crossover of the phase margin [rad/s]."""

    def log_size(response: Complex) -> Floats:
        return np.log(np.maximum(np.abs(response), 1e-300))

    grid, size = _grazed(lambda w: log_size(response(w)), grid, log_size(values))
    cut = size[:-1] * size[1:] <= 0.0
    at = crossings(lambda w: log_size(response(w)), grid[:-1][cut], grid[1:][cut])
    if not len(at):
        never = Figure(None, "the loop gain never crosses 1")
        return never, never, never
    lag = np.angle(-response(at))
    phase = np.degrees(np.abs(lag))
    delay = np.where(lag > 0.0, lag, lag + 2.0 * math.pi) / at
    narrowest, soonest = int(phase.argmin()), int(delay.argmin())
    least = float(delay[soonest])
    if survived is not None:
        least = survived(float(at[soonest]), least)
    return (
        Figure.of(float(phase[narrowest])),
        Figure.of(least),
        Figure.of(float(at[narrowest])),
    )
