"""Linear programmes between bounds, by an interior point, without scipy: a what-if cannot wait.

    least c x   subject to   A x = b,   0 <= x <= above
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.errors import CannotSolve

Array = NDArray[np.float64]

_MOST_STEPS: Final = 80
_SHORT_OF_THE_WALL: Final = 0.995


def least(
    a: Array, b: Array, c: Array, above: Array, tolerance: float = 1e-4
) -> tuple[Array, Array]:
    """The x (n,) of least cost c x, with A x = b and 0 <= x <= above, and the prices y (m,) of b.

    Parameters
    ----------
    a, b
        (m, n) of full row rank with m much below n, and (m,).
    c
        Costs, (n,).
    above
        Upper bounds, (n,); infinite where there is none.
    tolerance
        Gap to the optimum, against the cost; A x = b holds to 1e-8 of the size of b.

    Raises
    ------
    CannotSolve
        There is no such x, or no end to the descent.

    Source
    ------
    S. Mehrotra, "On the implementation of a primal-dual interior point method", SIAM J. Optim.
    2(4), 1992, 575-601; with upper bounds as I.J. Lustig, R.E. Marsten and D.F. Shanno,
    "Computational experience with a primal-dual interior point method for linear programming",
    Linear Algebra Appl. 152, 1991, 191-222; both from memory.
    """
    bounded = np.isfinite(above)
    top = np.where(bounded, above, 1.0)
    x = np.where(bounded, 0.5 * top, 1.0)
    s = np.where(bounded, top - x, 1.0)
    y = np.zeros(len(b))
    size = 1.0 + float(np.abs(c).max())
    z, w = np.full(len(c), size), np.where(bounded, size, 0.0)
    pairs = len(c) + int(bounded.sum())
    for _ in range(_MOST_STEPS):
        lacking = b - a @ x
        room = np.where(bounded, top - x - s, 0.0)
        slope = c - y @ a - z + w
        gap = float(x @ z + (s * w)[bounded].sum())
        cost = float(c @ x)
        if (
            gap < tolerance * max(abs(cost), 1e-6 * size)
            and float(np.abs(slope).max()) < 1e-3 * tolerance * size
            and float(np.abs(lacking).max()) < 1e-8 * (1.0 + float(np.abs(b).max()))
        ):
            return x, y
        weight = 1.0 / (z / x + w / s)
        normal = (a * weight) @ a.T
        normal[np.diag_indices_from(normal)] *= 1.0 + 1e-13

        def moved(
            xz: Array,
            sw: Array,
            *,
            lacking: Array = lacking,
            room: Array = room,
            slope: Array = slope,
            weight: Array = weight,
            normal: Array = normal,
        ) -> tuple[Array, Array, Array, Array, Array]:
            pull = slope - xz / x + np.where(bounded, (sw - w * room) / s, 0.0)
            dy = np.linalg.solve(normal, lacking + a @ (weight * pull))
            dx = weight * (dy @ a - pull)
            ds = np.where(bounded, room - dx, 0.0)
            return dx, ds, dy, (xz - z * dx) / x, np.where(bounded, (sw - w * ds) / s, 0.0)

        try:
            dx, ds, dy, dz, dw = moved(-x * z, -s * w)
            far, free = _reach(x, dx, s, ds), _reach(z, dz, w, dw)
            left = float((x + far * dx) @ (z + free * dz) + (s + far * ds) @ (w + free * dw))
            aim = gap / pairs * (left / gap) ** 3
            dx, ds, dy, dz, dw = moved(aim - x * z - dx * dz, aim - s * w - ds * dw)
        except np.linalg.LinAlgError:
            break
        far, free = _reach(x, dx, s, ds), _reach(z, dz, w, dw)
        if not np.isfinite(far * free):
            break
        x, s = x + _SHORT_OF_THE_WALL * far * dx, s + _SHORT_OF_THE_WALL * far * ds
        y, z, w = (
            y + _SHORT_OF_THE_WALL * free * dy,
            z + _SHORT_OF_THE_WALL * free * dz,
            w + _SHORT_OF_THE_WALL * free * dw,
        )
    raise CannotSolve("the linear programme has no answer within its bounds", change="the bounds")


def _reach(one: Array, move: Array, other: Array, move_of_other: Array) -> float:
    """How much of the moves leaves both positive, at most all of it."""
    found = 1.0
    for value, change in ((one, move), (other, move_of_other)):
        falling = change < 0.0
        if falling.any():
            found = min(found, float((-value[falling] / change[falling]).min()))
    return found
