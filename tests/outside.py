"""What the program has been checked against from outside: every row, its source, expected, got.

The rows are the tests' own data, and each is held to the same limit here as there.
`python -m tests.outside` works all of them out and prints them; `README.md` has the sources with
their counts.  A row without a published source (a closed form of a test's own, a finer step, an
independent computation) is not among them: those tests say so themselves.
"""

from __future__ import annotations

import math
import re
import sys
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Final

from tests.case.test_tags import TAGS
from tests.model import published
from tests.model.published import (
    HALF_RULES,
    MARGINS,
    STABILITIES,
    ULTIMATES,
)
from tests.model.published import Plant as PublishedPlant
from tests.model.test_conversion import SERIES, numbers, pid
from tests.model.test_structures import SMITH, smith
from tests.records.test_closed_loop import SWINGING, UNDER_P, step_under_p
from tests.records.test_graphical import WORKED
from tests.records.test_identify import FURNACE, furnace
from tests.sim.test_metrics import OVERSHOOTS, overshoot_percent
from tests.sim.test_metrics import PUBLISHED as PERFORMANCE
from tests.sim.test_valve import STICKS, describing_function, first_harmonic
from tests.tune.published import GS18, RULE_CASES
from tests.tune.test_rules import (
    COLUMN,
    LEVELS,
    RELAYS,
    WORKED_EXAMPLES,
    as_ideal,
    level_peak,
    plant_of,
)
from workbench.case.tags import tag_words
from workbench.model.conversion import convert
from workbench.model.feedback import Loop
from workbench.model.limits import least_peaks
from workbench.model.pid import Gains
from workbench.model.reduction import half_rule
from workbench.model.robustness import Margins, analogue_margins, ultimate
from workbench.model.stability import loop_verdict
from workbench.model.transfer import TransferFunction
from workbench.records.closed_loop import SetpointStep, shamsuzzoha_skogestad, yuwana_seborg
from workbench.records.graphical import smith as two_points
from workbench.records.graphical import sundaresan_krishnaswamy
from workbench.records.identify import fit
from workbench.sim.loop import simulate
from workbench.sim.metrics import Measures, measure
from workbench.sim.scenario import Events
from workbench.tune.oscillation import astrom_hagglund_relay, ziegler_nichols_ultimate
from workbench.tune.rules import RULES
from workbench.tune.tuning import Ultimate
from workbench.units import Figure

Value = float | tuple[float, ...] | str
"""A figure, figures that belong together, or words."""


@dataclass(frozen=True)
class Row:
    """One check: what the program says, beside what the source has."""

    what: str
    source: str
    worth: str
    """Published, or recomputed by the published rule; `from memory` where the source was not at
    hand; `common practice`."""
    expected: Value
    limit: float
    """Share by which it may differ, or amount where `absolute`; 0 for words."""
    got: Callable[[], Value]
    absolute: bool = False

    def off(self) -> float:
        """How far the program is from it, in shares of the limit; at most 1 is kept."""
        found = self.got()
        if isinstance(self.expected, str) or isinstance(found, str):
            return 0.0 if found == self.expected else math.inf
        pairs = zip(_numbers(self.expected), _numbers(found), strict=True)
        return max(
            0.0 if now == then else abs(now - then) / (self.limit * self._scale(then))
            for then, now in pairs
        )

    def _scale(self, expected: float) -> float:
        return 1.0 if self.absolute else abs(expected)


def _numbers(value: float | tuple[float, ...]) -> tuple[float, ...]:
    return value if isinstance(value, tuple) else (value,)


# --- sources -------------------------------------------------------------------------------------

SMITH57: Final = (
    "O.J.M. Smith, Closer control of loops with dead time, Chem. Eng. Prog. 53(5) (1957) 217-219"
)
DAHLIN68: Final = (
    "E.B. Dahlin, Designing and tuning digital controllers, Instrum. Control Syst. 41(6) (1968) "
    "77-83"
)
BJ70: Final = "G.E.P. Box & G.M. Jenkins, Time Series Analysis (1970), chapter 11"
SMITH72: Final = "C.L. Smith, Digital Computer Process Control (1972)"
SK78: Final = (
    "K.R. Sundaresan & P.R. Krishnaswamy, Estimation of time delay time constant parameters, "
    "Can. J. Chem. Eng. 56 (1978) 257-262"
)
YS82: Final = (
    "M. Yuwana & D.E. Seborg, A new method for on-line controller tuning, AIChE J. 28 (1982) "
    "434-440"
)
AH84: Final = (
    "K.J. Astrom & T. Hagglund, Automatic tuning of simple regulators with specifications on "
    "phase and amplitude margins, Automatica 20 (1984) 645-651"
)
LEE00: Final = (
    "Y. Lee, J. Lee, S. Park, PID controller tuning for integrating and unstable processes with "
    "time delay, Chem. Eng. Sci. 55 (2000) 3481-3493"
)
HA02: Final = (
    "T. Hagglund & K.J. Astrom, Revisiting the Ziegler-Nichols tuning rules for PI control, "
    "Asian J. Control 4 (2002) 364-380"
)
CTS05: Final = (
    "M.A.A.S. Choudhury, N.F. Thornhill, S.L. Shah, Modelling valve stiction, Control Eng. "
    "Practice 13 (2005) 641-658"
)
SP05: Final = "S. Skogestad & I. Postlethwaite, Multivariable Feedback Control (2005), chapter 5"
S06: Final = (
    "S. Skogestad, Tuning for smooth PID control with acceptable disturbance rejection, "
    "Ind. Eng. Chem. Res. 45 (2006) 7817-7822"
)
ISA09: Final = "ANSI/ISA-5.1-2009, table 4.1"
SS10: Final = (
    "M. Shamsuzzoha & S. Skogestad, The setpoint overshoot method, J. Process Control 20 (2010) "
    "1220-1234"
)


def _cited(words: str) -> str:
    """The source that a tuning rule or a test names in its own words: the one with its pages.

    Raises `LookupError` for a source that is not known here.
    """
    if "Brescia" in words:
        # Proceedings without pages.
        return published.GS12
    found = {}
    for source in (*vars(published).values(), GS18, *globals().values()):
        pages = source.rpartition(" ")[2] if isinstance(source, str) else ""
        if re.fullmatch(r"\d+-\d+", pages) and pages in words:
            found[words.index(pages)] = str(source)
    if found:
        # A rule of two sources belongs to the one it names first.
        return found[min(found)]
    raise LookupError(f"tests/outside.py does not know the source {words!r}")


# --- the rows, by what is checked ----------------------------------------------------------------


def _margin(seen: Callable[[], Margins], name: str) -> Callable[[], float]:
    return lambda: _value(getattr(seen(), name))


def _value(figure: Figure) -> float:
    assert figure.value is not None, figure.reason
    return figure.value


def _margins_of(plant: TransferFunction, gains: Gains) -> Callable[[], Margins]:
    return cache(lambda: analogue_margins(Loop(plant, plant, gains)))


def _said(name: str) -> str:
    return name.removesuffix("_rad_s").removesuffix("_deg").removesuffix("_s").replace("_", " ")


def _margins() -> Iterator[Row]:
    for case in MARGINS:
        if case.source == published.OWN:
            continue
        seen = _margins_of(case.plant.transfer(), case.settings.gains())
        for name, expected in case.figures.items():
            what = f"{_said(name)}, {case.name}"
            yield Row(what, case.source, case.worth, expected, 1e-3, _margin(seen, name))
    memory = "published rule, value recomputed, from memory"
    for time, peak, delay in SMITH:
        seen = cache(lambda time=time: analogue_margins(smith(time)))
        for name, expected in (("max_sensitivity", peak), ("delay_margin_s", delay)):
            what = f"{_said(name)}, exact model, closed-loop time {time} s"
            source = SMITH57
            yield Row(what, source, memory, expected, 1e-6, _margin(seen, name), absolute=True)
    plant = TransferFunction.ratio((-1.0, 4.0), [(1.0, -1.0), (0.1, 1.0)])
    for name in ("sensitivity", "complementary_sensitivity"):
        yield Row(
            f"least peak of {_said(name)}, unstable pole and inverse response",
            SP05,
            "published formula, value recomputed, from memory",
            5.0 / 3.0,
            1e-6,
            lambda name=name: _value(getattr(least_peaks(plant), name)),  # type: ignore[misc]
        )


def _limits_of_stability() -> Iterator[Row]:
    for case in ULTIMATES:
        if case.source == published.OWN:
            continue
        yield Row(
            f"ultimate gain and period, {case.name}",
            case.source,
            case.worth,
            (case.gain, case.period),
            1e-3,
            lambda case=case: ultimate(case.plant.transfer()),  # type: ignore[misc]
        )
    for verdict in STABILITIES:
        if verdict.source == published.OWN:
            continue
        yield Row(
            f"verdict, {verdict.name}",
            verdict.source,
            verdict.worth,
            "stable" if verdict.stable else "unstable",
            0.0,
            lambda case=verdict: _verdict(case.plant, case.gain),  # type: ignore[misc]
        )


def _verdict(plant: PublishedPlant | TransferFunction, gain: float) -> str:
    whole = plant.transfer() if isinstance(plant, PublishedPlant) else plant
    return "stable" if loop_verdict(gain * whole).stable else "unstable"


def _reductions() -> Iterator[Row]:
    for case in HALF_RULES:
        if any(zero > 0 for zero in case.plant.zeros):
            continue

        def reduced(case: published.HalfRuleCase = case) -> tuple[float, ...]:
            lags = len(case.model) - 1
            model = half_rule(case.plant.transfer(), lags)
            return (*(model.time_constant, model.second_time_constant)[:lags], model.dead_time)

        what = f"half rule, {case.name}"
        yield Row(what, case.source, case.worth, case.model, 1e-9, reduced)


def _settings() -> Iterator[Row]:
    for case in RULE_CASES:

        @cache
        def ideal(case=case) -> tuple[float, float, float]:  # type: ignore[no-untyped-def]
            return as_ideal(RULES[case.method].settings(plant_of(case)))

        @cache
        def seen(case=case, ideal=ideal) -> Margins:  # type: ignore[no-untyped-def]
            k, ti, td = ideal()
            plant = case.plant.transfer()
            return analogue_margins(Loop(plant, plant, Gains(k, k / ti, k * td)))

        what = f"{case.method}, {case.name}"
        yield Row(what, case.source, case.settings_worth, case.settings, 2e-6, ideal)
        for name, (expected, worth) in case.figures.items():
            told = f"{_said(name)} of {what}"
            yield Row(told, case.source, worth, expected, 1e-3, _margin(seen, name))
    for worked in WORKED_EXAMPLES:
        settings = worked.settings
        worth, _, how = worked.source.partition(": ")
        yield Row(
            f"{worked.method}, {how}",
            _cited(RULES[worked.method].source),
            worth,
            as_ideal(settings),
            1e-12,
            lambda worked=worked: as_ideal(  # type: ignore[misc]
                RULES[worked.method].settings(worked.plant)
            ),
        )
    memory = "published, from memory"
    for gain, period, (k, ti) in COLUMN:

        def column(gain: float = gain, period: float = period) -> tuple[float, float]:
            found = ziegler_nichols_ultimate(Ultimate(gain, period), "pi")
            return found.gain, found.integral_time or math.inf

        # Printed with Ku/2.2, 1 % above 0.45 Ku, and rounded to two digits.
        what = f"PI of a column's loop, Ku {gain:.3g}"
        yield Row(what, published.L86, memory, (k, ti), 0.02, column)
    for held_by, held in SERIES:
        yield Row(
            f"series settings {held_by} in the ideal form",
            published.S03,
            "published rule, value recomputed, from memory",
            held,
            1e-8,
            lambda held_by=held_by: numbers(  # type: ignore[misc]
                convert(pid("series", *held_by), "ideal").controller
            ),
        )


def _behaviour() -> Iterator[Row]:
    for damping, percent in OVERSHOOTS:
        yield Row(
            f"overshoot, second order, damping {damping} [%]",
            published.TEXT,
            "published and closed form",
            percent,
            1e-4,
            lambda damping=damping: overshoot_percent(damping),  # type: ignore[misc]
            absolute=True,
        )
    for name, case in PERFORMANCE.items():
        for step, iae, travel in (
            ("setpoint", case.setpoint_iae, case.setpoint_travel),
            ("load", case.load_iae, case.load_travel),
        ):

            @cache
            def seen(case=case, step=step) -> Measures:  # type: ignore[no-untyped-def]
                sizes = (1.0, 0.0) if step == "setpoint" else (0.0, 1.0)
                events = Events(sizes[0], 0.0, sizes[1], 0.0, case.until)
                return measure(simulate(case.loop(), events), events)

            for figure, pair in ((f"{step}_iae", iae), ("output_travel", travel)):
                if pair is None:
                    continue
                recomputed, printed = pair
                yield Row(
                    f"{_said(figure)} after a {step} step, {name}",
                    _cited(case.source.removesuffix(", from memory")),
                    "published, from memory"
                    if printed is not None
                    else "published settings, value recomputed, from memory",
                    recomputed if printed is None else printed,
                    # Printed with three digits, the last of them rounded.
                    1e-3 if printed is None else 6e-3 if printed < 1.5 else 4e-3,
                    lambda seen=seen, figure=figure: _value(  # type: ignore[misc]
                        getattr(seen(), figure)
                    ),
                    absolute=printed is not None and printed < 1.5,
                )
    for damping, factor in LEVELS:
        yield Row(
            f"peak of a level under PI, damping {damping}",
            S06,
            "published" if damping > 0.5 else "published rule, value recomputed",
            factor,
            2e-4,
            lambda damping=damping: level_peak(damping),  # type: ignore[misc]
            absolute=True,
        )
    for amplitude, stick, jump in STICKS:
        answer = describing_function(amplitude, stick, jump)

        def harmonic(
            amplitude: float = amplitude, stick: float = stick, jump: float = jump
        ) -> tuple[float, float]:
            found = first_harmonic(amplitude, stick, jump)
            return found.real, found.imag

        yield Row(
            f"sticking valve, {stick}, {jump}, under a sine of {amplitude} (real, imaginary)",
            CTS05,
            "published formula, from memory",
            (answer.real, answer.imag),
            1e-3,
            harmonic,
            absolute=True,
        )


def _readings() -> Iterator[Row]:
    memory = "published formula, value recomputed, from memory"
    for plant, swing, period, expected in RELAYS:
        yield Row(
            f"ultimate gain by a relay, lags {plant.lags}, dead time {plant.dead_time}",
            AH84,
            memory,
            expected,
            1e-6,
            lambda swing=swing, period=period: (  # type: ignore[misc]
                astrom_hagglund_relay(1.0, swing, period).gain
            ),
        )
    for model, gain, (high, low, at), recovered in UNDER_P:

        def overshot(gain=gain, high=high, low=low, at=at):  # type: ignore[no-untyped-def]
            step = SetpointStep(gain, 1.0, high, low, None, at, 2.0 * at)
            found = shamsuzzoha_skogestad(step)
            return found.gain, found.time_constant_s, found.dead_time_s

        what = f"plant {model} from its overshoot under P"
        yield Row(what, SS10, memory, recovered, 5e-3, overshot)
    for model, gain, recovered in SWINGING:

        def swung(model=model, gain=gain):  # type: ignore[no-untyped-def]
            found = yuwana_seborg(step_under_p(model, gain))
            return found.gain, found.time_constant_s, found.dead_time_s

        what = f"plant {model} from its swing under P"
        yield Row(what, YS82, memory, recovered, 0.02, swung)
    for _, (t28, t35, t63, t85), smiths, sundaresans in WORKED:
        # Lambdas keep the times of their own row.
        yield Row(
            f"T and L from {t28} and {t63} s",
            SMITH72,
            memory,
            smiths,
            6e-3,
            lambda a=t28, b=t63: two_points(a, b),  # type: ignore[misc]
            absolute=True,
        )
        yield Row(
            f"T and L from {t35} and {t85} s",
            SK78,
            memory,
            sundaresans,
            6e-3,
            lambda a=t35, b=t85: sundaresan_krishnaswamy(a, b),  # type: ignore[misc]
            absolute=True,
        )
    yield Row(
        "gain of the gas furnace, series J",
        BJ70,
        "published, from memory",
        -3.28,
        0.3,
        _furnace_gain,
        absolute=True,
    )
    for tag, words, _ in TAGS:
        if words:
            yield Row(
                f"letters of {tag}",
                ISA09,
                "published, from memory",
                words,
                0.0,
                lambda tag=tag: tag_words(tag),  # type: ignore[misc]
            )


def _furnace_gain() -> float:
    found = fit(furnace(FURNACE), shapes=("first-order",)).candidates[0].gain
    assert found is not None
    return found


def rows() -> list[Row]:
    """Every outside check, in the order of what is checked."""
    parts = (_margins, _limits_of_stability, _reductions, _settings, _behaviour, _readings)
    return [row for part in parts for row in part()]


# --- as tables -----------------------------------------------------------------------------------


def _count(found: Sequence[Row], words: str) -> int:
    return sum(words in row.worth for row in found)


def by_source(found: Sequence[Row]) -> dict[str, list[Row]]:
    """The rows of each source, the source with most of them first."""
    sources: dict[str, list[Row]] = {}
    for row in found:
        sources.setdefault(row.source, []).append(row)
    return dict(sorted(sources.items(), key=lambda each: (-len(each[1]), each[0])))


def in_short(found: Sequence[Row]) -> str:
    """How many rows of how many sources, and how many of them rest on what."""
    memory, practice = _count(found, "from memory"), _count(found, "common practice")
    return (
        f"{len(found)} checks from {len(by_source(found))} sources; of {memory} the expected value"
        f" is from memory, of {practice} common practice."
    )


def sources(found: Sequence[Row]) -> Iterator[tuple[str, ...]]:
    """For each source: its name, how many checks, of how many the value is from memory, and to
    what they are held."""
    for source, own in by_source(found).items():
        limits = [100.0 * row.limit for row in own if row.limit and not row.absolute]
        amounts = [row.limit for row in own if row.limit and row.absolute]
        held = [
            *([f"{_from_to(limits)} %"] if limits else []),
            *([f"+-{_from_to(amounts)}"] if amounts else []),
            *(["word for word"] if any(not row.limit for row in own) else []),
        ]
        yield source, str(len(own)), str(_count(own, "from memory")), ", ".join(held)


def _from_to(values: Sequence[float]) -> str:
    low, high = min(values), max(values)
    return f"{low:g}" if low == high else f"{low:g} to {high:g}"


def shown(value: Value) -> str:
    """A value as a cell."""
    if isinstance(value, str):
        return value
    return ", ".join(f"{number:.6g}" for number in _numbers(value))


def main() -> int:
    """Work out every row and print it; 1 where one is not kept."""
    found, broken = rows(), 0
    print("source | what | worth | expected | got | limit | kept")
    for source, own in by_source(found).items():
        for row in own:
            kept = row.off() <= 1.0
            broken += not kept
            limit = f"+-{row.limit:g}" if row.absolute else f"{100 * row.limit:g} %"
            cells = (source, row.what, row.worth, shown(row.expected), shown(row.got()), limit)
            print(" | ".join((*cells, "yes" if kept else "NO")))
    print(in_short(found), f"{len(found) - broken} of {len(found)} are kept.")
    return 1 if broken else 0


if __name__ == "__main__":
    sys.exit(main())
