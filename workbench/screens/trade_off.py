"""The trade-off between speed and caution as a picture: load IAE over maximum sensitivity."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Final

import numpy as np

from workbench import charts
from workbench.charts import Curve, Pane
from workbench.screens.cells import Cells, Line, Screenful
from workbench.screens.panel import wrapped
from workbench.screens.trend import as_cells
from workbench.screens.work import Work
from workbench.study import Proposal, TradeOff

_ROOM: Final = 2.0
"""The picture goes up to so many times the median of the first curve."""
_WIDE: Final = 100
"""Columns from which on there is room to say how many marks lie outside."""


class TradeOffPicture(Cells):
    """Curves of the best settings, and a mark for the present settings and for every rule."""

    def __init__(self, work: Work) -> None:
        super().__init__(css_id="trade-off")
        self.work = work
        self.found: TradeOff | None = None
        self.rows: Sequence[Proposal] = ()
        self.chosen: Proposal | None = None

    def content(self, width: int, height: int) -> Screenful:
        """The picture, or why there is none."""
        if self.found is None or not any(self.found.curves.values()):
            return self.typeset(self._words(width), width, height)
        limits, highest = self._ends(self.found)
        label = f"load IAE {self.work.case.pv.unit} s"
        curves = [
            Curve(
                np.array([point.best.max_sensitivity.value or 0.0 for point in points]),
                np.array([point.best.load_iae.value or 0.0 for point in points]),
                method,
                points[0].best.title,
            )
            for method, points in self.found.curves.items()
            if points
        ]
        present = [row for row in self.rows if row.method == "present"]
        rules = [row for row in self.rows if row.method not in (*self.found.curves, "present")]
        for rows, ink, name in (
            (rules, "rule", "rules"),
            (present, "present", "present"),
            ([self.chosen] if self.chosen else [], "chosen-point", "chosen"),
        ):
            x, y, outside = _places(rows, limits, highest)
            told = f"{name} ({outside} outside)" if outside and width >= _WIDE else name
            curves.append(Curve(x, y, ink, told))
        picture = charts.draw(
            # The axis ends one span above its bounds.
            (Pane(label, tuple(curves), (0.0, 0.5 * highest)),),
            width,
            height,
            x_limits=limits,
            x_name="Ms",
            ascii_only=self.ascii_only,
        )
        return as_cells(picture)

    def _words(self, width: int) -> Iterable[Line]:
        if self.found is None:
            return wrapped("working out the trade-off ...", width, "quiet", " ")
        lines: list[Line] = []
        for method, reason in self.found.reasons.items():
            lines += wrapped(f"{method}: {reason}", width, "caution", " ")
        return lines

    def _ends(self, found: TradeOff) -> tuple[tuple[float, float], float]:
        """Ends of the axis of Ms, and the highest IAE shown."""
        curves = [points for points in found.curves.values() if points]
        limits = [point.limit for points in curves for point in points]
        # The most cautious settings cost so much that the rest would lie flat beside them.
        errors = [point.best.load_iae.value or 0.0 for point in curves[0]]
        return (min(limits) - 0.05, max(limits) + 0.1), _ROOM * float(np.median(errors))


def _places(
    rows: Sequence[Proposal], limits: tuple[float, float], highest: float
) -> tuple[charts.Floats, charts.Floats, int]:
    """Ms and load IAE of the rows that have them inside the picture, and how many are outside."""
    pairs = [
        (row.max_sensitivity.value, row.load_iae.value)
        for row in rows
        if row.max_sensitivity.value is not None and row.load_iae.value is not None
    ]
    inside = [(ms, iae) for ms, iae in pairs if limits[0] <= ms <= limits[1] and iae <= highest]
    found = np.array(inside, np.float64).reshape(-1, 2)
    return found[:, 0], found[:, 1], len(pairs) - len(inside)
