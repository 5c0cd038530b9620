"""The Tolerance page: how much plant error the present settings survive."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Final

import numpy as np
from textual.message import Message
from textual.widget import Widget
from textual.worker import Worker, WorkerState

from workbench import charts, report, study, units
from workbench.case.case import Case
from workbench.errors import WorkbenchError
from workbench.screens.cells import Line, Screenful
from workbench.screens.keys import Command, bindings
from workbench.screens.page import BACK, HELP, Page
from workbench.screens.panel import Panel, wrapped
from workbench.screens.trend import as_cells
from workbench.screens.work import Work
from workbench.study import Tolerance

LIMITS: Final = (1.4, 1.6, 1.7, 2.0, 2.5)
"""Limits on Ms that the key goes through."""
_WIDEST: Final = 121
"""Columns of the map at most: more say nothing more."""


class Mapped(Message):
    """Posted when the map is there, or why there is none."""

    def __init__(self, number: int, found: Tolerance | None, fault: str = "") -> None:
        super().__init__()
        self.number, self.found, self.fault = number, found, fault


class MapPanel(Panel):
    """The map, and below it how far the plant may change."""

    title = "Plant error that the loop survives"
    help = (
        "The plant's gain is multiplied by what stands below the map, its dead time (or all its "
        "lags) by what stands beside it; O is the plant as the case has it. '.' or a dot is a "
        "stable loop with Ms within the limit, '+' a stable one with a larger Ms, '#' or a grey "
        "cell a loop that is not stable. The loop is judged as it runs, sampled where it has a "
        "scan.",
        "Below the map: at which ratio Ms reaches its limit, and at which the loop is no longer "
        "stable, if the gain alone changes, the other alone, or both together.",
    )

    def __init__(self, work: Work) -> None:
        super().__init__(work, css_id="tolerance")
        self.found: Tolerance | None = None
        self.words = "looking at other plants ..."

    def content(self, width: int, height: int) -> Screenful:
        """Title, map, distances."""
        if self.found is None:
            lines = [self.heading(width), (), *wrapped(self.words, width, "plain", " ")]
            return self.typeset(lines, width, height)
        told = self._told()
        head = self.typeset([self.heading(width)], width, 1)
        foot = self.typeset(told, width, len(told))
        field = charts.tolerance_field(self.found)
        rows = max(1, height - 1 - len(told))
        picture = charts.draw_map(field, width, rows, ascii_only=self.ascii_only)
        parts = (head, as_cells(picture), foot)
        return Screenful(
            np.concatenate([part.characters for part in parts])[:height],
            np.concatenate([part.tones for part in parts])[:height],
        )

    def _told(self) -> list[Line]:
        assert self.found is not None
        first, *others = report.distance_lines(self.found)
        return [((f" {first}", "label"),), *(((f" {line}", "plain"),) for line in others)]

    def cells(self) -> tuple[int, int]:
        """Columns and rows of the map for which there is room."""
        # The title above; the head of the distances and one line for each way below.
        columns, rows = charts.map_cells(self.size.width, self.size.height - (1 + 1 + 5))
        return min(columns, _WIDEST), rows


class TolerancePage(Page):
    """Look at what the settings survive."""

    called = "Tolerance page"
    about = (
        "A plant is never quite its model: the map shows how much error of its gain and of its "
        "dead time, or its lags, the present settings survive.",
    )
    commands = (
        Command("a,tab", "a", "dead time/lags", "axis", "dead time or lags beside the gain", "Tab"),
        Command("m", "m", "Ms limit", "limit", "the next limit on Ms"),
        BACK,
        HELP,
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work) -> None:
        super().__init__()
        self.work = work
        self.map = MapPanel(work)
        late = work.evaluation is None or work.evaluation.assessment.plant.dead_time_s > 0.0
        self._axis: study.Axis = "dead time" if late else "lag"
        self._limit = study.TOLERANCE_LIMIT
        self._asked = 0

    def head(self) -> Line:
        """The loop."""
        loop = self.work.case.loop
        return ((f" {loop.tag}  {loop.service}", "title"), ("  tolerance", "quiet"))

    def body(self) -> Iterable[Widget]:
        """The map."""
        yield self.map

    def on_mount(self) -> None:
        """The map takes the keys."""
        super().on_mount()
        self.map.focus()

    def on_resize(self) -> None:
        """Another size is another map."""
        super().on_resize()
        self.call_after_refresh(self._look)

    def _look(self) -> None:
        """Judge the plants in a thread; an answer that is no longer asked for is dropped."""
        if not self.map.size.width or self.has_class("-small"):
            return
        self._asked += 1
        number, case, size = self._asked, self.work.case, self.map.cells()
        self.run_worker(
            lambda: self._judge(number, case, size), thread=True, group="map", exit_on_error=False
        )

    def _judge(self, number: int, case: Case, size: tuple[int, int]) -> None:
        columns, rows = size
        try:
            found = study.tolerance(
                case, axis=self._axis, limit=self._limit, columns=columns, rows=rows
            )
        except WorkbenchError as fault:
            self.post_message(Mapped(number, None, str(fault)))
        else:
            self.post_message(Mapped(number, found))

    def on_mapped(self, message: Mapped) -> None:
        """Show it, unless another one was asked for meanwhile."""
        if message.number != self._asked:
            return
        self.map.found, self.map.words = message.found, f"no map: {message.fault}"
        self.map.redraw()
        if message.found is not None:
            loop = "sampled" if message.found.sampled else "analogue"
            limit = units.text(message.found.limit, digits=3)
            self.tell(f"the {loop} loop with its present settings; Ms limit {limit}", "quiet")

    @property
    def busy(self) -> bool:
        """The map asked for is not there yet."""
        return self.map.found is None and self.map.words.endswith("...")

    def on_worker_state_changed(self, event: Worker.StateChanged) -> None:
        """A fault of the program itself must not take the work with it."""
        if event.state is WorkerState.ERROR:
            fault = event.worker.error
            self.tell(f"could not be worked out ({type(fault).__name__}: {fault})", "worse")

    def action_axis(self) -> None:
        """The other axis beside the gain."""
        self._axis = "lag" if self._axis == "dead time" else "dead time"
        self._look()

    def action_limit(self) -> None:
        """The next limit on Ms."""
        self._limit = next((each for each in LIMITS if each > self._limit), LIMITS[0])
        self._look()
