"""How the values were logged: jitter of the stamps, repeated values, lines between few points.

Two filters stand before an archived value, exception reporting and compression, and both leave
traces that spoil noise figures and shift the dead time.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.units import Note, text, time_text

Floats = NDArray[np.float64]

_FEWEST: Final = 50
"""Rows below which shares say nothing."""
_REPEATED: Final = 0.3
"""Share of repeated values from which they are told."""
_DOUBTFUL_FACTOR: Final = 3.0
"""Compression factor above which statistics of the record are in doubt."""


def habits(seconds: Floats, pv: Floats, op: Floats) -> list[Note]:
    """What the rows tell about the way they were logged; the unit of PV is the file's."""
    if len(seconds) < _FEWEST:
        return []
    return [*_jitter(seconds), *_repeats(pv), *_compression(seconds, pv)]


def _jitter(seconds: Floats) -> list[Note]:
    steps = np.diff(seconds)
    usual = float(np.median(steps))
    low, high = (float(v) for v in np.percentile(steps, (5, 95)))
    if high - low < 0.02 * usual or high > 2.5 * usual:
        return []
    words = (
        f"The rows are not evenly spaced: 90 % of the intervals lie between {time_text(low, 3)} and"
        f" {time_text(high, 3)}; each is used as it is."
    )
    return [Note("info", words)]


def _repeats(pv: Floats) -> list[Note]:
    moves = np.abs(np.diff(pv))
    share = float(np.mean(moves == 0))
    if share < _REPEATED or not moves.any():
        return []
    smallest = float(moves[moves > 0].min())
    words = (
        f"PV repeats the value before it in {share:.0%} of the rows, and never moves by less than"
        f" {text(smallest, digits=3)}: a deadband of exception reporting, or the resolution of the"
        " measurement."
    )
    return [Note("caution" if share > 2 * _REPEATED else "info", words)]


def compression_factor(seconds: Floats, values: Floats) -> float | None:
    """How many times fewer points were archived than the rows show, by an estimate.

    factor = 1 / (1 - share of the rows whose second difference is exactly zero)

    Parameters
    ----------
    seconds
        Times (n,); only rows an equal interval from both their neighbours are looked at.
    values
        Values at these times (n,).

    Returns
    -------
    float or None
        1 for a record that keeps every value; `None` where fewer than 50 rows can be looked at, or
        all lie on one line.

    Notes
    -----
    To be used with care above 3; values of coarse resolution raise it too.

    Source
    ------
    N.F. Thornhill, M.A.A.S. Choudhury, S.L. Shah, "The impact of compression on data-driven process
    analyses", J. Process Control 14(4), 2004, 389-398 (from memory).

    Examples
    --------
    >>> compression_factor(np.arange(101.0), np.interp(np.arange(101.0), [0, 50, 100], [0, 5, 1]))
    99.0
    """
    steps = np.diff(seconds)
    even = np.abs(np.diff(steps)) < 1e-3 * np.median(steps)
    bend = np.abs(np.diff(values, 2))[even]
    if len(bend) < _FEWEST - 2:
        return None
    # Zero but for the rounding of decimal text: ten digits below the size of the values.
    zero = bend <= 1e-10 * max(float(np.abs(values).max()), 1e-300)
    return None if zero.all() else float(1.0 / (1.0 - float(np.mean(zero))))


def _compression(seconds: Floats, pv: Floats) -> list[Note]:
    moving = np.diff(pv) != 0
    factor = compression_factor(seconds, pv)
    # Values that repeat are another matter, told above.
    if factor is None or factor < 1.5 or np.mean(moving) < 0.7:
        return []
    words = (
        f"PV runs in straight lines: about 1 value in {text(factor, digits=2)} was archived, the"
        " others are interpolated (compression factor by the share of zero second differences)."
    )
    if factor > _DOUBTFUL_FACTOR:
        words += " Above 3, noise figures and dead time are in doubt; export without compression."
    return [Note("caution" if factor > _DOUBTFUL_FACTOR else "info", words)]
