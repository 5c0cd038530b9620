"""Linear programmes between bounds, by an interior point, without scipy: a what-if cannot wait.

least c x   subject to   A x = b,   0 <= x <= above
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
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
    point = _Point.inside(a, b, c, above)
    # Without an answer the prices grow beyond every number.
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        for _ in range(_MOST_STEPS):
            if point.is_optimal(tolerance):
                return point.x, point.y
            try:
                point = point.onward()
            except np.linalg.LinAlgError:
                break
    raise CannotSolve("the linear programme has no answer within its bounds", change="the bounds")


@dataclass(frozen=True)
class _Point:
    """A point inside the bounds, with its prices; where there is no upper bound s is 1 and w 0."""

    a: Array
    b: Array
    c: Array
    top: Array
    bounded: NDArray[np.bool_]
    x: Array
    s: Array
    """What is left to the upper bound."""
    y: Array
    z: Array
    """Price of the lower bound."""
    w: Array
    """Price of the upper bound."""

    @classmethod
    def inside(cls, a: Array, b: Array, c: Array, above: Array) -> _Point:
        bounded = np.isfinite(above)
        top = np.where(bounded, above, 2.0)
        size = 1.0 + float(np.abs(c).max())
        prices = np.full(len(c), size), np.where(bounded, size, 0.0)
        return cls(a, b, c, top, bounded, top / 2, top / 2, np.zeros(len(b)), *prices)

    @cached_property
    def lacking(self) -> Array:
        return self.b - self.a @ self.x

    @cached_property
    def room(self) -> Array:
        return np.where(self.bounded, self.top - self.x - self.s, 0.0)

    @cached_property
    def slope(self) -> Array:
        return self.c - self.y @ self.a - self.z + self.w

    @cached_property
    def gap(self) -> float:
        return float(self.x @ self.z + self.s @ self.w)

    def is_optimal(self, tolerance: float) -> bool:
        size = 1.0 + float(np.abs(self.c).max())
        return (
            self.gap < tolerance * max(abs(float(self.c @ self.x)), 1e-6 * size)
            and float(np.abs(self.slope).max()) < 1e-3 * tolerance * size
            and float(np.abs(self.lacking).max()) < 1e-8 * (1.0 + float(np.abs(self.b).max()))
        )

    @cached_property
    def weight(self) -> Array:
        return 1.0 / (self.z / self.x + self.w / self.s)

    @cached_property
    def normal(self) -> Array:
        found = (self.a * self.weight) @ self.a.T
        found[np.diag_indices_from(found)] *= 1.0 + 1e-13
        return np.asarray(found, np.float64)

    def moves(self, xz: Array, sw: Array) -> tuple[Array, Array, Array, Array, Array]:
        """Newton's step in x, s, y, z, w towards products x z and s w changed by `xz` and `sw`."""
        x, s, z, w = self.x, self.s, self.z, self.w
        onto = np.where(self.bounded, (sw - w * self.room) / s, 0.0)
        pull = self.slope - xz / x + onto
        target = self.lacking + self.a @ (self.weight * pull)
        dy: Array = np.asarray(np.linalg.solve(self.normal, target), np.float64)
        dx: Array = self.weight * (dy @ self.a - pull)
        ds: Array = np.where(self.bounded, self.room - dx, 0.0)
        dw: Array = np.where(self.bounded, (sw - w * ds) / s, 0.0)
        return dx, ds, dy, (xz - z * dx) / x, dw

    def onward(self) -> _Point:
        """One step: a predictor aims at the optimum, a corrector stays away from the walls."""
        x, s, z, w = self.x, self.s, self.z, self.w
        dx, ds, _, dz, dw = self.moves(-x * z, -s * w)
        far, free = _reach(x, dx, s, ds), _reach(z, dz, w, dw)
        left = float((x + far * dx) @ (z + free * dz) + (s + far * ds) @ (w + free * dw))
        aim = self.gap / (len(x) + int(self.bounded.sum())) * (left / self.gap) ** 3
        dx, ds, dy, dz, dw = self.moves(aim - x * z - dx * dz, aim - s * w - ds * dw)
        far = _SHORT_OF_THE_WALL * _reach(x, dx, s, ds)
        free = _SHORT_OF_THE_WALL * _reach(z, dz, w, dw)
        return replace(
            self,
            x=x + far * dx,
            s=s + far * ds,
            y=self.y + free * dy,
            z=z + free * dz,
            w=w + free * dw,
        )


def _reach(one: Array, move: Array, other: Array, move_of_other: Array) -> float:
    """How much of the moves leaves both positive, at most all of it."""
    found = 1.0
    for value, change in ((one, move), (other, move_of_other)):
        falling = change < 0.0
        if falling.any():
            found = min(found, float((-value[falling] / change[falling]).min()))
    return found
