"""The Figures panel: margins, measures, and what got worse."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final, Literal

from workbench import units
from workbench.screens.cells import Line, Span
from workbench.screens.panel import Panel, remark, wrapped
from workbench.screens.work import Work
from workbench.units import Figure

if TYPE_CHECKING:
    from workbench.study import Evaluation, LoopFigures

Better = Literal["lower", "higher", ""]


@dataclass(frozen=True)
class Row:
    """One figure of the panel."""

    label: str
    read: Callable[[Evaluation], Figure | None]
    """The figure, or `None` where the evaluation has no such part."""
    unit: str = ""
    """`PV`, `OP` and `time` are put into the loop's own words."""
    better: Better = ""
    """Which way is better; empty where neither is."""
    name: str = ""
    """Of the same figure over a family of plants; empty where there is none."""
    above: Callable[[Evaluation], Figure | None] | None = None
    """Of a floor: the present figure as a multiple of it."""


WORSE_BY: Final = 0.01
"""Share of a figure below which a change is not called worse."""


class FiguresPanel(Panel):
    """What the settings are worth, against the pinned ones."""

    number = "4"
    title = "Figures"
    help = (
        "Margins of the loop (of the sampled loop where there is a scan interval) and measures of "
        "the predicted trend. In brackets: the same figure of the pinned prediction, where it is "
        "another one; 'worse' says so where it got worse by more than 1 %.",
        "Sensitivity Ms: the largest factor by which the loop magnifies an upset; below 1.6 is "
        "calm, above 2 is nervous. IAE: integral of the absolute error.",
        "Floor: what any controller leaves at least after this load step, and how many times that "
        "the present settings leave: near 1, stop tuning and mend dead time, sensor, scan or "
        "valve. Own gain: the controller's gain "
        "in units instead of percent of span. Lines with '!' are cautions.",
    )

    def body(self, width: int) -> list[Line]:
        """The verdict, then one figure a line."""
        now, was = self.work.evaluation, self.work.pinned
        if now is None:
            return wrapped(self.work.fault or "computing", width, "quiet", " ")
        lines = [*self._verdict(now, width), *self._over_family(now, width)]
        for row in FIGURES:
            figure = row.read(now)
            if figure is None:
                continue
            earlier = row.read(was) if was is not None and was is not now else None
            lines.append(self._line(row, figure, earlier, row.above(now) if row.above else None))
        lines += self._family(now, width)
        for note in now.cautions:
            if note.severity == "info":
                lines += wrapped(note.text, width, "quiet", " ")
        return lines

    def fixed(self, width: int) -> list[Line]:
        """Cautions stay in view."""
        return cautions(self.work, width, most=max(1, self.size.height // 4))

    def _verdict(self, now: Evaluation, width: int) -> list[Line]:
        loop = judged(now)
        if loop is None:
            return wrapped("no controller: margins need one", width, "quiet", "  ")
        which = "sampled loop" if now.assessment.sampled is not None else "analogue loop"
        if loop.margins.stable:
            return [((f" stable ({which})", "good"),)]
        return wrapped(f"UNSTABLE ({which}): {loop.margins.reason}", width, "worse", " ")

    def _over_family(self, now: Evaluation, width: int) -> list[Line]:
        """In one line whether the family is stable too."""
        family = now.family
        if family is None or family.reason:
            return []
        share = units.text(family.stable_percent, "%", digits=3)
        said = f"family of {family.plants}: {share} stable"
        worst = family.figures["max_sensitivity"].worst
        if worst.value is not None:
            said += f", worst Ms {units.text(worst.value, digits=3)}"
        return wrapped(said, width, "good" if family.stable_percent == 100.0 else "worse", " ")

    def _family(self, now: Evaluation, width: int) -> list[Line]:
        """The same figures over the family of plants: 95 % of them are not worse than that."""
        family = now.family
        if family is None or family.reason:
            return []
        lines: list[Line] = [((f" {'family':<15}{'nominal':<10}{'95 %':<10}worst", "label"),)]
        for row in FIGURES:
            among = family.figures.get(row.name)
            if among is None:
                continue
            each = (among.nominal, among.at_95, among.worst)
            cells = "".join(_among(figure).ljust(10) for figure in each).rstrip()
            lines.append(((f" {row.label}".ljust(16), "label"), (cells, "plain")))
        return [*lines, *wrapped(f"worst: {family.worst_plant}", width, "quiet", " ")]

    def _line(
        self, row: Row, figure: Figure, earlier: Figure | None, above: Figure | None = None
    ) -> Line:
        label: Span = (f" {row.label}".ljust(16), "label")
        if figure.value is None:
            return (label, (figure.reason or "none", "quiet"))
        value: Span = (self._text(row, figure.value).ljust(12), "plain")
        remark, tone = compared(row, figure, earlier)
        if above is not None and above.value is not None:
            remark = f"now {units.text(above.value, digits=3)} times {remark}".rstrip()
        return (label, value, (" " + remark, tone))

    def _text(self, row: Row, value: float) -> str:
        if row.unit == "time":
            return units.time_text(value, 3)
        own = {"PV": self.work.case.pv.unit, "OP": self.work.case.op.unit}
        unit = " ".join(own.get(part, part) for part in row.unit.split())
        return units.text(value, unit)


def _among(figure: Figure) -> str:
    if figure.value is None:
        return "unstable" if "not stable" in figure.reason else "none"
    return units.text(figure.value, digits=3)


def compared(row: Row, now: Figure, earlier: Figure | None) -> tuple[str, str]:
    """A figure against the pinned one, in words, and the tone of the words."""
    if earlier is None or now.value is None:
        return "", "quiet"
    if earlier.value is None:
        return "(none)", "quiet"
    change = now.value - earlier.value
    if abs(change) <= WORSE_BY * max(abs(now.value), abs(earlier.value)):
        return "", "quiet"
    was = f"({units.text(earlier.value)})"
    if row.unit == "time":
        was = f"({units.time_text(earlier.value, 3)})"
    worse = {"lower": change > 0, "higher": change < 0, "": False}[row.better]
    return (f"worse {was}", "worse") if worse else (was, "quiet")


def judged(evaluation: Evaluation) -> LoopFigures | None:
    """The figures of the loop as it runs: sampled where it has a scan interval."""
    return evaluation.assessment.judged


def cautions(work: Work, width: int, most: int) -> list[Line]:
    """The cautions of the present settings, one or more lines each."""
    if work.evaluation is None:
        return []
    lines: list[Line] = []
    for note in work.evaluation.cautions:
        if note.severity == "caution":
            lines += remark(note.text, width, "caution")
    if len(lines) > most:
        lines = [*lines[: most - 1], (("! more cautions: z shows them all", "caution"),)]
    return lines


def _margin(name: str) -> Callable[[Evaluation], Figure | None]:
    def read(evaluation: Evaluation) -> Figure | None:
        loop = judged(evaluation)
        if loop is None or not loop.margins.stable:
            return None
        figure: Figure = getattr(loop.margins, name)
        return figure

    return read


def _measure(name: str) -> Callable[[Evaluation], Figure | None]:
    def read(evaluation: Evaluation) -> Figure | None:
        if evaluation.prediction is None:
            return None
        figure: Figure = getattr(evaluation.prediction.measures, name)
        return figure

    return read


def _floor(name: str) -> Callable[[Evaluation], Figure | None]:
    def read(evaluation: Evaluation) -> Figure | None:
        if evaluation.prediction is None:
            return None
        figure: Figure = getattr(evaluation.prediction, name)
        return figure

    return read


def _own_gain(evaluation: Evaluation) -> Figure | None:
    gain = evaluation.assessment.gain_op_per_pv
    return None if gain is None else Figure(gain)


FIGURES: Final = (
    Row("Sensitivity Ms", _margin("max_sensitivity"), "", "lower", "max_sensitivity"),
    Row("Gain margin", _margin("gain_margin"), "", "higher", "gain_margin"),
    Row("Phase margin", _margin("phase_margin_deg"), "deg", "higher", "phase_margin_deg"),
    Row("Delay margin", _margin("delay_margin_s"), "time", "higher"),
    Row("Load IAE", _measure("load_iae"), "PV s", "lower", "load_iae"),
    Row("Load peak", _measure("load_peak_deviation"), "PV", "lower", "load_peak_deviation"),
    Row(
        "SP overshoot",
        _measure("setpoint_overshoot_percent"),
        "%",
        "lower",
        "setpoint_overshoot_percent",
    ),
    Row("SP settling", _measure("setpoint_settling_time_s"), "time", "lower"),
    Row("Load settling", _measure("load_settling_time_s"), "time", "lower"),
    Row("SP IAE", _measure("setpoint_iae"), "PV s", "lower", "setpoint_iae"),
    Row("SP rise", _measure("setpoint_rise_time_s"), "time", "lower"),
    Row("OP travel", _measure("output_travel"), "OP", "lower"),
    Row("OP reversals", _measure("output_reversals"), "", "lower"),
    Row("OP at a limit", _measure("output_time_at_limit_s"), "time", "lower"),
    Row("Final PV", _measure("final_pv"), "PV"),
    Row("Final OP", _measure("final_op"), "OP"),
    Row("Peak floor", _floor("floor_peak_deviation"), "PV", above=_floor("peak_to_floor")),
    Row("IAE floor", _floor("floor_load_iae"), "PV s", above=_floor("load_iae_to_floor")),
    Row("Bandwidth", _margin("bandwidth_rad_s"), "rad/s"),
    Row("Own gain", _own_gain, "OP per PV"),
)
"""The figures shown, the most telling first."""
