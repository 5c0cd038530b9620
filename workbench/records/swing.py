"""Does a signal swing, with which periods, and how often is the loop upset.

Series here are evenly spaced.  White noise sits at lag 0 of the autocovariance and nowhere else,
so its zero crossings show a period through noise as large as the swing itself.  Known rates of
false alarm stand with each method and are held by simulation in the tests.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

CROSSINGS: Final = 11
"""Zero crossings of the autocovariance that the regularity rests on: ten intervals."""
FEWEST: Final = 6
"""Crossings below which a regularity is not worth having."""
MOST_PERIODS: Final = 3


@dataclass(frozen=True)
class Regularity:
    """How evenly the autocovariance crosses zero."""

    period: float
    """Twice the mean interval between crossings, in rows."""
    index: float
    """r = period / (3 standard deviations of it); a regular swing where it is above 1."""
    crossings: int


@dataclass(frozen=True)
class Swing:
    """One regular swing of a signal."""

    period_s: float
    regularity: float
    amplitude: float
    """Of the sine at that period [the signal's unit]."""
    share_percent: float
    """Of the signal's variance, within half an octave about the period."""


# --- one period -----------------------------------------------------------------------------------


def autocovariance(series: Array) -> Array:
    """Autocovariance about the mean at lags 0 to n - 1, divided by n at every lag (n,)."""
    centred = series - series.mean()
    rows = len(centred)
    spectrum = np.fft.rfft(centred, 2 * rows)
    return np.asarray(np.fft.irfft(np.abs(spectrum) ** 2)[:rows] / rows, np.float64)


def regularity(series: Array) -> Regularity | None:
    """Regularity of a swing from the zero crossings of the autocovariance.

    period = 2 mean(intervals),   r = mean(intervals) / (3 sd(intervals))

    Parameters
    ----------
    series
        Evenly spaced (n,).

    Returns
    -------
    Regularity
        `None` where the autocovariance crosses zero fewer than 6 times.

    Notes
    -----
    Share of records without any swing that r > 1 calls swinging (1000 rows, by simulation): white
    noise and first-order noise with a memory of 10 or 50 rows, up to 5 %.  Noise that rings by
    itself is called swinging in 95 % of the records where its damping is 0.1, in 43 % where it is
    0.3: a lightly damped loop does swing.  A sine in noise whose standard deviation is the sine's
    amplitude is found in 89 %, in half of that noise always.

    Source
    ------
    N.F. Thornhill, B. Huang, H. Zhang, "Detection of multiple oscillations in control loops",
    J. Process Control 13, 2003, 91-100 (from memory).
    """
    covariance = autocovariance(series)
    if not covariance[0] > 0.0:
        return None
    signs = np.signbit(covariance[: max(2, len(covariance) // 2)])
    after = np.flatnonzero(signs[1:] != signs[:-1])[:CROSSINGS]
    if len(after) < FEWEST:
        return None
    low, high = covariance[after], covariance[after + 1]
    intervals = np.diff(after + low / (low - high))
    mean, deviation = float(intervals.mean()), float(intervals.std(ddof=1))
    # The crossings of a pure sine are even but for rounding; a thousand is as regular as any.
    index = mean / (3.0 * deviation) if deviation > mean / 3000.0 else 1000.0
    return Regularity(2.0 * mean, index, len(after))


# --- several periods ------------------------------------------------------------------------------


def swings(series: Array, interval: float) -> tuple[Swing, ...]:
    """Every regular swing in a signal, the strongest first, 3 at most.

    The strongest peak of the spectrum that holds a tenth of the variance is cut out, four times
    below to four times above its frequency, and kept where its regularity is above 1; then half an
    octave about it is taken away and the rest is looked at again.

    Parameters
    ----------
    series
        Evenly spaced (n,).
    interval
        Between rows [s].

    Returns
    -------
    tuple
        Swings of which the record holds at least three periods.

    Notes
    -----
    A band of 16:1 about the peak lets white noise pass as a swing in 5 % of records (by simulation,
    as in `regularity`); the variance asked for is the second guard.

    Source
    ------
    Thornhill and others (2003), as in `regularity`: filtering where two periods mix.
    """
    rows = len(series)
    time = np.arange(rows)
    rest = series - np.polyval(np.polyfit(time, series, 1), time)
    variance = float(rest @ rest) / rows
    frequency = np.fft.rfftfreq(rows)
    spectrum = np.fft.rfft(rest)
    if variance <= 1e-24 * (1.0 + float(np.abs(series).max())) ** 2:
        return ()
    found: list[Swing] = []
    for _ in range(MOST_PERIODS):
        power = np.abs(spectrum) ** 2 * 2.0 / rows**2 / variance
        power[frequency < 3.0 / rows] = 0.0
        at = int(np.argmax(power))
        near = (frequency > frequency[at] / 2**0.5) & (frequency < frequency[at] * 2**0.5)
        share = float(power[near].sum())
        if share < _LEAST_SHARE:
            break
        band = (frequency > frequency[at] / 4.0) & (frequency < frequency[at] * 4.0)
        regular = regularity(np.fft.irfft(np.where(band, spectrum, 0.0), rows))
        if regular is not None and regular.index > 1.0:
            amplitude = float(np.sqrt(2.0 * share * variance))
            period = regular.period * interval
            found.append(Swing(period, regular.index, amplitude, 100.0 * share))
        spectrum = np.where(near, 0.0, spectrum)
    # A harmonic of a swing that is no sine belongs to it.
    return tuple(
        swing
        for i, swing in enumerate(found)
        if not any(_is_harmonic(other.period_s / swing.period_s) for other in found[:i])
    )


_LEAST_SHARE: Final = 0.1


def _is_harmonic(ratio: float) -> bool:
    return ratio > 1.5 and abs(ratio - round(ratio)) < 0.05 * ratio


# --- upsets ---------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Upsets:
    """How often the error was larger than a loop that is well lets it be."""

    count: int
    most_at_once: float
    """Largest value of the forgetting count."""
    limit: float
    """IAE between two zero crossings above which it is an upset [PV unit s]."""

    @property
    def alarm(self) -> bool:
        """More than 10 within the time of supervision: the loop swings too much."""
        return self.most_at_once > MOST_UPSETS


MOST_UPSETS: Final = 10


def load_upsets(error: Array, interval: float, span: float, integral_time: float) -> Upsets:
    """Upsets between zero crossings of the error, counted with forgetting.

    limit = 2 a / w,  a = 1 % of the range,  w = 2 pi / Ti;   each scan  x = x (1 - h / (50 Ti)),
    and 1 more where the IAE since the last crossing is above the limit

    Parameters
    ----------
    error
        SP less PV, evenly spaced (n,) [PV unit].
    interval
        Between rows [s].
    span
        Range of PV [PV unit].
    integral_time
        Of the controller [s]; it stands for the ultimate period.

    Notes
    -----
    The half wave of a sine of amplitude a has the IAE 2 a / w.  It is silent on noise whose
    standard deviation is below 1 % of the range (none of 200 records of 2000 rows, by simulation).

    Source
    ------
    T. Hägglund, "A control-loop performance monitor", Control Engineering Practice 3, 1995,
    1543-1551 (from memory).
    """
    limit = 2.0 * 0.01 * span * integral_time / (2.0 * math.pi)
    keep = max(0.0, 1.0 - interval / (50.0 * integral_time))
    starts = np.flatnonzero(np.diff(np.signbit(error), prepend=not np.signbit(error[0])))
    areas = np.add.reduceat(np.abs(error), starts) * interval
    ends = np.append(starts[1:], len(error))
    count, level, most, last = 0, 0.0, 0.0, 0
    for area, end in zip(areas.tolist(), ends.tolist(), strict=True):
        if area > limit:
            level = level * keep ** (end - last) + 1.0
            count, most, last = count + 1, max(most, level), end
    return Upsets(count, most, limit)
