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
    low: float = -math.inf
    high: float = math.inf

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
            found.append((math.exp(-1.0 / lag), size * (1 - late), size * (late - math.exp(-1.0 / lag))))
        return whole, found[0], found[1]


def plain(n: Numbers) -> list[float]:
    """PV at every scan, without limits: as lean as a loop in plain Python gets."""
    whole, (a1, b1, c1), (a2, b2, c2) = n.modes()
    kp, ki, kept, kick = n.kp, n.ki, n.tf / (n.tf + 1.0), n.kd / (n.tf + 1.0)
    r, upset, upset_at = n.setpoint, 0.0, n.upset_at
    x1 = x2 = integral = derivative = last = older = 0.0
    moved = [0.0] * whole
    pv = []
    keep, move = pv.append, moved.append
    for k in range(n.scans):
        y = x1 + x2
        keep(y)
        integral += ki * (r - y)
        derivative = kept * derivative + kick * (last - y)
        last = y
        if k == upset_at:
            upset = n.upset
        move(kp * (r - y) + integral + derivative + upset)
        newer = moved[k]
        x1 = a1 * x1 + b1 * newer + c1 * older
        x2 = a2 * x2 + b2 * newer + c2 * older
        older = newer
    return pv


def plain_limited(n: Numbers) -> list[float]:
    """The same with limits on the output and conditional integration."""
    whole, (a1, b1, c1), (a2, b2, c2) = n.modes()
    kp, ki, kept, kick = n.kp, n.ki, n.tf / (n.tf + 1.0), n.kd / (n.tf + 1.0)
    low, high = n.low, n.high
    r, upset, upset_at = n.setpoint, 0.0, n.upset_at
    x1 = x2 = integral = derivative = last = older = 0.0
    moved = [0.0] * whole
    pv = []
    keep, move = pv.append, moved.append
    for k in range(n.scans):
        y = x1 + x2
        keep(y)
        gained = ki * (r - y)
        derivative = kept * derivative + kick * (last - y)
        last = y
        u = kp * (r - y) + derivative + integral
        if (u + gained > high) if gained > 0.0 else (u + gained < low):
            u = high if u > high else low if u < low else u
        else:
            integral += gained
            u += gained
            u = high if u > high else low if u < low else u
        if k == upset_at:
            upset = n.upset
        move(u + upset)
        newer = moved[k]
        x1 = a1 * x1 + b1 * newer + c1 * older
        x2 = a2 * x2 + b2 * newer + c2 * older
        older = newer
    return pv


_IN_C: Final = r"""
#include <math.h>
void loop(const double *p, int scans, int whole, int upset_at, double *moved, double *pv) {
    double a1 = p[0], b1 = p[1], c1 = p[2], a2 = p[3], b2 = p[4], c2 = p[5];
    double kp = p[6], ki = p[7], kept = p[8], kick = p[9], r = p[10], low = p[12], high = p[13];
    double x1 = 0, x2 = 0, integral = 0, derivative = 0, last = 0, older = 0, upset = 0;
    for (int k = 0; k < scans; k++) {
        double y = x1 + x2, gained = ki * (r - y);
        pv[k] = y;
        derivative = kept * derivative + kick * (last - y);
        last = y;
        double u = kp * (r - y) + derivative + integral;
        int further = gained > 0 ? u + gained > high : u + gained < low;
        if (!further) { integral += gained; u += gained; }
        u = u > high ? high : u < low ? low : u;
        if (k == upset_at) upset = p[11];
        moved[k + whole] = u + upset;
        double newer = moved[k];
        x1 = a1 * x1 + b1 * newer + c1 * older;
        x2 = a2 * x2 + b2 * newer + c2 * older;
        older = newer;
    }
}
"""


def in_c(folder: Path) -> Callable[[Numbers], NDArray[np.float64]] | None:
    """The same recursion compiled in `folder` with `cc -O3`; None where there is no compiler."""
    compiler = shutil.which("cc")
    if compiler is None:
        return None
    source, library = folder / "loop.c", folder / "loop.so"
    source.write_text(_IN_C)
    subprocess.run(
        [compiler, "-O3", "-shared", "-fPIC", "-o", str(library), str(source), "-lm"], check=True
    )
    function = ctypes.CDLL(str(library)).loop
    function.restype = None

    def run(n: Numbers) -> NDArray[np.float64]:
        whole, first, second = n.modes()
        kept, kick = n.tf / (n.tf + 1.0), n.kd / (n.tf + 1.0)
        settings = [n.kp, n.ki, kept, kick, n.setpoint, n.upset, n.low, n.high]
        numbers = np.array([*first, *second, *settings])
        moved, pv = np.zeros(n.scans + whole), np.empty(n.scans)
        pointers = [ctypes.c_void_p(a.ctypes.data) for a in (numbers, moved, pv)]
        function(pointers[0], n.scans, whole, n.upset_at, pointers[1], pointers[2])
        return pv

    return run
