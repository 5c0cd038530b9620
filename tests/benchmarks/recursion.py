"""The yardsticks of the engine: the same recursion in good plain Python, and in C.

Two lags with a dead time behind an output that is held from scan to scan, a PID controller with
limits and conditional integration, a setpoint step and an upset at the plant's input on a scan.
Nothing here knows the program.
"""

from __future__ import annotations

import ctypes
import math
import shutil
import subprocess
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Numbers:
    """A loop and what happens to it, in scans of 1 s."""

    gain: float
    lags: tuple[float, float]
    dead_time: float
    kp: float
    ki: float
    kd: float
    tf: float
    scans: int
    upset_at: int
    setpoint: float = 1.0
    upset: float = 1.0
    upset_lasts: int | None = None
    """None: to the end."""
    low: float = -math.inf
    high: float = math.inf
    weights: tuple[float, float] = (1.0, 0.0)
    """Of the setpoint in the proportional and in the derivative part."""

    def outside(self) -> tuple[list[float], list[float]]:
        """Setpoint and upset at every scan."""
        later = self.scans - self.upset_at
        lasts = later if self.upset_lasts is None else self.upset_lasts
        upset = [0.0] * self.upset_at + [self.upset] * lasts + [0.0] * (later - lasts)
        return [self.setpoint] * self.scans, upset

    def modes(self) -> tuple[int, tuple[float, float, float], tuple[float, float, float]]:
        """Whole scans of dead time, and for each lag what it keeps and what it takes of the output
        that many scans ago and one scan earlier: partial fractions of the two lags."""
        whole = math.floor(self.dead_time)
        part = self.dead_time - whole
        first, second = self.lags
        found = []
        for lag, other in ((first, second), (second, first)):
            size = self.gain * lag / (lag - other)
            late = math.exp(-(1.0 - part) / lag)
            found.append(
                (math.exp(-1.0 / lag), size * (1 - late), size * (late - math.exp(-1.0 / lag)))
            )
        return whole, found[0], found[1]


def plain(n: Numbers) -> tuple[list[float], list[float]]:
    """PV and OP at every scan, without limits: as lean as a loop in plain Python gets."""
    whole, (a1, b1, c1), (a2, b2, c2) = n.modes()
    kp, ki, kept, kick = n.kp, n.ki, n.tf / (n.tf + 1.0), n.kd / (n.tf + 1.0)
    b, c = n.weights
    x1 = x2 = integral = derivative = last = older = 0.0
    moved = [0.0] * whole
    pv: list[float] = []
    op: list[float] = []
    keep, put, move = pv.append, op.append, moved.append
    for k, (r, upset) in enumerate(zip(*n.outside(), strict=True)):
        y = x1 + x2
        keep(y)
        integral += ki * (r - y)
        seen = c * r - y
        derivative = kept * derivative + kick * (seen - last)
        last = seen
        u = kp * (b * r - y) + integral + derivative
        put(u)
        move(u + upset)
        newer = moved[k]
        x1 = a1 * x1 + b1 * newer + c1 * older
        x2 = a2 * x2 + b2 * newer + c2 * older
        older = newer
    return pv, op


def plain_limited(n: Numbers) -> tuple[list[float], list[float]]:
    """The same with limits on the output and conditional integration."""
    whole, (a1, b1, c1), (a2, b2, c2) = n.modes()
    kp, ki, kept, kick = n.kp, n.ki, n.tf / (n.tf + 1.0), n.kd / (n.tf + 1.0)
    b, c = n.weights
    low, high = n.low, n.high
    x1 = x2 = integral = derivative = last = older = 0.0
    moved = [0.0] * whole
    pv: list[float] = []
    op: list[float] = []
    keep, put, move = pv.append, op.append, moved.append
    for k, (r, upset) in enumerate(zip(*n.outside(), strict=True)):
        y = x1 + x2
        keep(y)
        gained = ki * (r - y)
        seen = c * r - y
        derivative = kept * derivative + kick * (seen - last)
        last = seen
        u = kp * (b * r - y) + derivative + integral
        if not ((u + gained > high) if gained > 0.0 else (u + gained < low)):
            integral += gained
            u += gained
        u = high if u > high else low if u < low else u
        put(u)
        move(u + upset)
        newer = moved[k]
        x1 = a1 * x1 + b1 * newer + c1 * older
        x2 = a2 * x2 + b2 * newer + c2 * older
        older = newer
    return pv, op


_IN_C: Final = r"""
void loop(const double *p, int scans, int whole, const double *setpoint, const double *upset,
          double *moved, double *pv, double *op) {
    double a1 = p[0], b1 = p[1], c1 = p[2], a2 = p[3], b2 = p[4], c2 = p[5];
    double kp = p[6], ki = p[7], kept = p[8], kick = p[9], b = p[10], c = p[11];
    double low = p[12], high = p[13];
    double x1 = 0, x2 = 0, integral = 0, derivative = 0, last = 0, older = 0;
    for (int k = 0; k < scans; k++) {
        double r = setpoint[k], y = x1 + x2, gained = ki * (r - y), seen = c * r - y;
        pv[k] = y;
        derivative = kept * derivative + kick * (seen - last);
        last = seen;
        double u = kp * (b * r - y) + derivative + integral;
        if (!(gained > 0 ? u + gained > high : u + gained < low)) {
            integral += gained;
            u += gained;
        }
        u = u > high ? high : u < low ? low : u;
        op[k] = u;
        moved[k + whole] = u + upset[k];
        double newer = moved[k];
        x1 = a1 * x1 + b1 * newer + c1 * older;
        x2 = a2 * x2 + b2 * newer + c2 * older;
        older = newer;
    }
}
"""


def in_c(folder: Path, n: Numbers) -> Callable[[], NDArray[np.float64]] | None:
    """The same recursion compiled in `folder` with `cc -O3`, its numbers laid out beforehand.

    Calling it gives PV.  None where there is no compiler.
    """
    compiler = shutil.which("cc")
    if compiler is None:
        return None
    source, library = folder / "loop.c", folder / "loop.so"
    source.write_text(_IN_C)
    subprocess.run(
        [compiler, "-O3", "-shared", "-fPIC", "-o", str(library), str(source)], check=True
    )
    function = ctypes.CDLL(str(library)).loop
    function.restype = None
    whole, first, second = n.modes()
    kept, kick = n.tf / (n.tf + 1.0), n.kd / (n.tf + 1.0)
    numbers = np.array([*first, *second, n.kp, n.ki, kept, kick, *n.weights, n.low, n.high])
    setpoint, upset = (np.array(values) for values in n.outside())
    moved, pv, op = np.zeros(n.scans + whole), np.empty(n.scans), np.empty(n.scans)
    arrays = (numbers, setpoint, upset, moved, pv, op)
    given, *rest = (ctypes.c_void_p(array.ctypes.data) for array in arrays)

    def run(held: tuple[NDArray[np.float64], ...] = arrays) -> NDArray[np.float64]:
        function(given, n.scans, whole, *rest)
        return held[-2]

    return run
