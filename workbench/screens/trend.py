"""The Trend panel: the prediction over the pinned one."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from workbench import charts
from workbench.charts import Pane, Picture
from workbench.screens.cells import TONE_NUMBERS, Screenful
from workbench.screens.panel import Panel, wrapped

if TYPE_CHECKING:
    from workbench.study import Evaluation, Trend


class TrendPanel(Panel):
    """PV and SP above, OP below, on one time axis."""

    number = "3"
    title = "Trend"
    help = (
        "The predicted answer to the scenario: PV and SP above, OP below. The pinned prediction is "
        "drawn as separate marks under the present one; p pins the present one.",
    )

    def content(self, width: int, height: int) -> Screenful:
        """The title line above the picture."""
        head = self.typeset([self.heading(width, self._remark())], width, 1)
        body = self._picture(width, height - 1)
        return Screenful(
            np.concatenate([head.characters, body.characters]),
            np.concatenate([head.tones, body.tones]),
        )

    def _remark(self) -> str:
        evaluation = self.work.evaluation
        if evaluation is None or evaluation.prediction is None:
            return ""
        return "grows without bound" if evaluation.prediction.diverged else ""

    def _picture(self, width: int, height: int) -> Screenful:
        evaluation = self.work.evaluation
        if evaluation is None:
            words = self.work.fault or "computing"
            return self.typeset(wrapped(words, width, "quiet", " "), width, height)
        if evaluation.prediction is None:
            missing = evaluation.prediction_reason
            words = f"no prediction: {missing}" if missing else "no prediction without a controller"
            return self.typeset(wrapped(words, width, "quiet", " "), width, height)
        picture = charts.draw(self._panes(evaluation), width, height, ascii_only=self.ascii_only)
        return as_cells(picture)

    def _panes(self, evaluation: Evaluation) -> tuple[Pane, ...]:
        pinned = self.work.pinned
        earlier = None if pinned is None or pinned is evaluation else _trend(pinned)
        return charts.trend_panes(self.work.case, _trend(evaluation), earlier)


def _trend(evaluation: Evaluation) -> Trend | None:
    return None if evaluation.prediction is None else evaluation.prediction.trend


_TONES: NDArray[np.uint8] = np.array([TONE_NUMBERS[name] for name in charts.STYLES], np.uint8)


def as_cells(picture: Picture) -> Screenful:
    """A picture as cells of a widget."""
    return Screenful(picture.characters, _TONES[picture.styles])
