"""The Trend panel: the prediction over the pinned ones, and the loop over frequency."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal

import numpy as np
from numpy.typing import NDArray

from workbench import charts
from workbench.charts import Pane, Picture
from workbench.screens.cells import TONE_NUMBERS, Line, Screenful
from workbench.screens.figures import judged
from workbench.screens.keys import Command, bindings
from workbench.screens.panel import Panel, wrapped
from workbench.screens.pins import Pin
from workbench.screens.responses import open_loop_panes, sensitivity_panes
from workbench.screens.view import View
from workbench.screens.work import Work
from workbench.units import TIME_UNITS, text, time_text

if TYPE_CHECKING:
    from workbench.study import Evaluation, FrequencyReading, FrequencyResponse, Trend, TrendReading

Shown = Literal["Trend", "Open loop", "Sensitivity"]

VIEWS: Final[tuple[Shown, ...]] = ("Trend", "Open loop", "Sensitivity")
"""What the panel shows by turns."""

_EDGE: Final = 7
"""Columns of a picture, about, that its axis takes."""
_ROOMY: Final = 70
"""Columns from which on each number of a reading has its own unit."""


@dataclass
class Look:
    """Which stretch is shown, and where values are read; of time [s] or of log10 of rad/s."""

    view: View | None = None
    """`None` where everything is shown."""
    at: float | None = None
    """`None` where nothing is read."""


class TrendPanel(Panel):
    """PV and SP above, OP below, on one time axis; or the loop over frequency."""

    number = "3"
    title = "Trend"
    help = (
        "The predicted answer to the scenario: PV and SP above, OP below. Up to three pinned "
        "predictions are drawn under it, each with a mark of its own: o, x and +. The title line "
        "names the settings in which they differ. Where they lie on each other the marks take "
        "turns. p pins the present prediction, d drops the newest pin.",
        "v goes on to the open loop over frequency (gain and phase; G and P stand where gain and "
        "phase margin are read off) and to the sensitivity |S| and |T| (M marks the peaks), of "
        "the loop as it will run: sampled where it has a scan interval.",
        "Left and Right read the values under a line that they move; 0 takes it away and shows "
        "everything.",
    )
    commands = (
        Command("plus,equals_sign", "+", "", "zoom(0.5)", "show half as long a stretch", "="),
        Command("minus", "+-", "zoom", "zoom(2.0)", "show twice as long a stretch", "-"),
        Command("less_than_sign,comma", "<", "", "pan(-0.25)", "show an earlier stretch", ","),
        Command("greater_than_sign,full_stop", "<>", "pan", "pan(0.25)", "show a later one", "."),
        Command("left", "Left", "", "read(-1)", "read values, one column earlier", "Up"),
        Command("right", "Left Right", "read", "read(1)", "read values, one column on", "Down"),
        Command("pageup", "PgUp", "", "read(-10)", "ten columns earlier"),
        Command("pagedown", "PgDn", "", "read(10)", "ten columns on"),
        Command("0", "0", "all", "whole", "show everything, and read nothing", spare=True),
    )
    key_line = (
        *commands,
        Command("v", "v", "view", "", ""),
        Command("p", "p", "pin", "", ""),
        Command("d", "d", "drop", "", "", spare=True),
        Command("z", "z", "alone", "", ""),
        Command("q", "q", "leave", "", ""),
        Command("?", "?", "help", "", ""),
    )
    BINDINGS = bindings(commands)

    def __init__(self, work: Work, *, css_id: str | None = None) -> None:
        super().__init__(work, css_id=css_id)
        self.shows: Shown = "Trend"
        self._looks = {True: Look(), False: Look()}

    @property
    def over_frequency(self) -> bool:
        """The panel shows the loop over frequency."""
        return self.shows != "Trend"

    @property
    def name_now(self) -> str:
        """What is shown."""
        return self.shows

    def show_next(self) -> None:
        """Go on to the next of VIEWS."""
        self.shows = VIEWS[(VIEWS.index(self.shows) + 1) % len(VIEWS)]
        self.redraw()

    # -- the picture -------------------------------------------------------------------------------

    def content(self, width: int, height: int) -> Screenful:
        """The title line above the picture, the values read below it."""
        panes = self._panes()
        if isinstance(panes, str):
            lines = [self.heading(width), *wrapped(panes, width, "quiet", " ")]
            return self.typeset(lines, width, height)
        read, at = self._reading(panes, width)
        # The picture keeps what it needs to be one.
        read = read[: max(0, height - 1 - charts.SMALLEST[1])]
        head = self.typeset([self.heading(width, self._told(width))], width, 1)
        picture = as_cells(self._picture(panes, width, height - 1 - len(read), at))
        foot = self.typeset(read, width, len(read))
        parts = (head, picture, foot)
        return Screenful(
            np.concatenate([part.characters for part in parts]),
            np.concatenate([part.tones for part in parts]),
        )

    def _told(self, width: int) -> str:
        """What the title line says of the picture and of the pins."""
        remark, evaluation = "", self.work.evaluation
        if evaluation is not None and self.over_frequency:
            present = self._response(evaluation)
            remark = "sampled" if present and present.sampled else "analogue"
        elif evaluation is not None and evaluation.prediction is not None:
            remark = "grows without bound" if evaluation.prediction.diverged else ""
        room = width - len(f"> {self.number} {self.name_now} ") - 3
        settings = self.work.settings
        words = self.work.pins.words(settings, room - (len(remark) + 2 if remark else 0))
        if words.endswith("…") and self.over_frequency:
            # The Figures panel says it too.
            return self.work.pins.words(settings, room)
        return f"{remark}  {words}".strip()

    def _picture(
        self, panes: tuple[Pane, ...], width: int, height: int, at: float | None
    ) -> Picture:
        view = self.look.view
        if view is not None:
            view = view.within(*charts.x_span(panes))
        return charts.draw(
            panes,
            width,
            height,
            x_limits=None if view is None else (view.low, view.high),
            x_name="rad/s" if self.over_frequency else "",
            x_scale="decades" if self.over_frequency else "plain",
            cursor=at,
            ascii_only=self.ascii_only,
        )

    def _panes(self) -> tuple[Pane, ...] | str:
        """What is drawn, or why nothing is."""
        evaluation = self.work.evaluation
        if evaluation is None:
            return self.work.fault or "computing"
        if not self.over_frequency:
            if evaluation.prediction is None:
                missing = evaluation.prediction_reason
                return f"no prediction: {missing}" if missing else NO_CONTROLLER
            return charts.trend_panes(
                self.work.case, evaluation.prediction.trend, _trends(self._pins(evaluation))
            )
        loop, present = judged(evaluation), self.work.response_of(evaluation)
        if loop is None or present is None:
            return NO_CONTROLLER if loop is None else "computing"
        if isinstance(present, str):
            return present
        pinned = {
            pin.ink: found
            for pin in self._pins(evaluation)
            if (found := self._response(pin.evaluation)) is not None
        }
        make = open_loop_panes if self.shows == "Open loop" else sensitivity_panes
        return make(present, loop.margins, pinned)

    def _pins(self, evaluation: Evaluation) -> tuple[Pin, ...]:
        return self.work.pins.shown_beside(evaluation)

    def _response(self, evaluation: Evaluation) -> FrequencyResponse | None:
        found = self.work.response_of(evaluation)
        return None if isinstance(found, str) else found

    # -- the stretch shown -------------------------------------------------------------------------

    @property
    def look(self) -> Look:
        """What is shown and read of the present view."""
        return self._looks[self.over_frequency]

    def _view(self) -> View | None:
        """The stretch shown, or nothing where there is no picture."""
        panes = self._panes()
        if isinstance(panes, str):
            return None
        whole = charts.x_span(panes)
        known = self.look.view
        return View.whole(*whole) if known is None else known.within(*whole)

    def _show(self, view: View) -> None:
        self.look.view = None if view.is_whole else view
        self.redraw()

    def action_zoom(self, share: float) -> None:
        """Show a shorter or a longer stretch, about the place that is read."""
        if (view := self._view()) is not None:
            self._show(view.zoomed(share, self.look.at))

    def action_pan(self, share: float) -> None:
        """Show a later or an earlier stretch."""
        if (view := self._view()) is not None:
            self._show(view.panned(share))

    def action_whole(self) -> None:
        """Show everything and read nothing."""
        self._looks[self.over_frequency] = Look()
        self.redraw()

    # -- reading values ----------------------------------------------------------------------------

    def action_read(self, columns: int) -> None:
        """Move the place that is read; it begins in the middle."""
        if (view := self._view()) is None:
            return
        look = self.look
        if look.at is None or not view.start <= look.at <= view.end:
            look.at = (view.low + view.high) / 2
        else:
            step = (view.high - view.low) / max(1, self.size.width - _EDGE)
            look.at = min(max(look.at + columns * step, view.start), view.end)
        self._show(view.showing(look.at))

    def move(self, step: int) -> None:
        """The arrows that scroll a list move the place that is read."""
        self.action_read(max(-10_000, min(step, 10_000)))

    def _reading(self, panes: tuple[Pane, ...], width: int) -> tuple[list[Line], float | None]:
        """The values at the place that is read, a line for each prediction, and that place."""
        at, evaluation = self.look.at, self.work.evaluation
        if at is None or evaluation is None:
            return [], None
        pins = self._pins(evaluation)
        if self.over_frequency:
            return self._over_frequency(evaluation, pins, at, width)
        assert evaluation.prediction is not None
        now = evaluation.prediction.trend.at(at)
        if now is None:
            return [], at
        view = self._view()
        length = 0.0 if view is None else view.high - view.low
        unit = charts.time_unit(length)
        told = [
            (ink, self._values(then, width, now))
            for ink, trend in _trends(pins).items()
            if (then := trend.at(at)) is not None
        ]
        words = f"{text(now.time_s / TIME_UNITS[unit], unit)}: {self._values(now, width)}"
        return _lines(words, told, width), now.time_s

    def _values(self, read: TrendReading, width: int, present: TrendReading | None = None) -> str:
        """The three values; the setpoint of a pin only where it is another one."""
        pv, op = self.work.case.pv.unit, self.work.case.op.unit
        setpoint = f"SP {text(read.setpoint, pv if width >= _ROOMY else '')}, "
        if present is not None and read.setpoint == present.setpoint and width < _ROOMY:
            setpoint = ""
        return f"{setpoint}PV {text(read.pv, pv)}, OP {text(read.output, op)}"

    def _over_frequency(
        self, evaluation: Evaluation, pins: tuple[Pin, ...], at: float, width: int
    ) -> tuple[list[Line], float | None]:
        present = self._response(evaluation)
        now = None if present is None else present.at(10.0**at)
        if now is None:
            return wrapped("beyond the frequencies of the present loop", width, "quiet", " "), at
        period = f" (period {time_text(now.period_s, 3)})" if width >= _ROOMY else ""
        words = f"{text(now.frequency_rad_s, 'rad/s')}{period}: {self._gains(now)}"
        told = [
            (pin.ink, self._gains(then, short=width < _ROOMY))
            for pin in pins
            if (response := self._response(pin.evaluation)) is not None
            and (then := response.at(10.0**at)) is not None
        ]
        return _lines(words, told, width), float(np.log10(now.frequency_rad_s))

    def _gains(self, read: FrequencyReading, *, short: bool = False) -> str:
        """The two values of the view; without their names where the present ones have them."""
        first, second = ("gain ", "phase ") if self.shows == "Open loop" else ("|S| ", "|T| ")
        pair = (text(read.sensitivity), text(read.complementary_sensitivity))
        if self.shows == "Open loop":
            pair = (text(read.gain), text(read.phase_deg, "deg", digits=3))
        return ", ".join(pair) if short else f"{first}{pair[0]}, {second}{pair[1]}"


def _lines(now: str, pinned: list[tuple[str, str]], width: int) -> list[Line]:
    """The present values, then each pin's on a line of its own, or all of them in a row."""
    told = [f"{charts.INKS[ink].ascii} {words}" for ink, words in pinned]
    if width < _ROOMY:
        # The picture needs the rows.
        told = ["; ".join(told)] if told else []
    return [
        line
        for words, tone in ((now, "plain"), *((words, "quiet") for words in told))
        for line in wrapped(words, width, tone, " ")
    ]


NO_CONTROLLER: Final = "no prediction without a controller"


def _trends(pins: tuple[Pin, ...]) -> Mapping[str, Trend]:
    return {
        pin.ink: pin.evaluation.prediction.trend
        for pin in pins
        if pin.evaluation.prediction is not None
    }


_TONES: NDArray[np.uint8] = np.array([TONE_NUMBERS[name] for name in charts.STYLES], np.uint8)


def as_cells(picture: Picture) -> Screenful:
    """A picture as cells of a widget."""
    return Screenful(picture.characters, _TONES[picture.styles])
