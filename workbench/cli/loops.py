"""The commands about one loop: what it is, what it will do, what to set."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Final

from workbench import report
from workbench.cli.answer import Answer, Status, check_target, loop_of, no_controller, replace_file
from workbench.cli.options import Given
from workbench.cli.output import progress, width
from workbench.errors import InputError, problem
from workbench.units import GAIN_RATE_UNITS, INTEGRAL_UNITS, TIME_UNITS, Note, one_of

if TYPE_CHECKING:
    from workbench.study import Wish


def assess(given: Given) -> Answer:
    """Gain, final values, stability and margins."""
    from workbench import study

    axis = given.choice("--tolerance", ("dead-time", "lag"))
    limit = given.number("--max-sensitivity", above=1.0)
    if limit is not None and axis is None:
        raise problem("is given without --tolerance", "add it", key="--max-sensitivity")
    case = loop_of(given)
    if axis is not None and case.controller is None:
        raise no_controller(given, "a tolerance map")
    found = study.assess(case)
    family = study.family_figures(case)
    notes = (*study.family_cautions(family), *study.cautions(case, found))
    found = replace(found, notes=notes)
    small = None
    if "--small-models" in given:
        with progress("reducing the plant"):
            small = study.reductions(case)
    survived, drawn = None, None
    if axis is not None:
        from workbench import charts

        with progress("looking at other plants"):
            survived = study.tolerance(
                case,
                axis="lag" if axis == "lag" else "dead time",
                limit=limit or study.TOLERANCE_LIMIT,
                columns=MAP_COLUMNS,
                rows=MAP_ROWS,
            )
        field, size = charts.tolerance_field(survived), charts.map_size(MAP_COLUMNS, MAP_ROWS)
        drawn = survived, charts.draw_map(field, *size, ascii_only=True).rows
    units = study.units_of(case)
    return Answer(
        report.assess_text(case, found, units, width(), small, family, drawn),
        report.assess_data(case, found, units, small, family, survived),
        Status.DONE if report.is_stable(found) else Status.NO,
    )


MAP_COLUMNS: Final = 61
MAP_ROWS: Final = 25
"""Cells of the map that `assess` prints."""


def predict(given: Given) -> Answer:
    """The closed loop, run through its scenario."""
    from workbench import study

    seed = (given.whole("--seed", 0, 2**31 - 1) or [0])[0]
    trend_file = given.word("--trend")
    if trend_file is not None:
        check_target(trend_file)
    case = loop_of(given)
    if case.controller is None:
        raise no_controller(given, "a prediction")
    with progress("predicting"):
        evaluation = study.evaluate(case, seed)
        # Where there is no prediction, asking for it says why.
        prediction = evaluation.prediction or study.predict(case, seed)
    if trend_file is not None:
        replace_file(trend_file, report.trend_csv(prediction.trend))
    units = study.units_of(case)
    return Answer(
        report.predict_text(evaluation, prediction, units, trend_file, width()),
        report.predict_data(evaluation, prediction, units),
        Status.DONE if report.is_stable(evaluation.assessment) else Status.NO,
    )


def respond(given: Given) -> Answer:
    """The plant alone, from rest."""
    from workbench import study
    from workbench.model.response import INPUTS, Signal
    from workbench.records.record import read_record

    trend_file, record_file = given.word("--trend"), given.word("--record")
    if trend_file is not None:
        check_target(trend_file)
    if record_file is not None:
        beside = next((name for name in _SIGNAL if name in given), "")
        if beside:
            raise problem("is given beside --record", "keep one of the two", key=beside)
    else:
        beside = next((name for name in ("--time", "--op") if name in given), "")
        if beside:
            raise problem("is given without --record", "name the record", key=beside)
    kind = given.choice("--input", tuple(INPUTS)) or "step"
    size, at = given.number("--size"), given.seconds("--at", or_zero=True) or 0.0
    lasting, period = given.seconds("--width"), given.seconds("--period")
    until = given.seconds("--until")
    case = loop_of(given)
    plant = study.plant_of(case)
    with progress("responding"):
        if record_file is not None:
            record = read_record(record_file, time=given.word("--time"), op=given.word("--op"))
            response, signal = study.respond_to_record(plant, record), None
        else:
            own = study.response_horizon(plant, Signal()) / 6.0
            signal = Signal(
                kind, 1.0 if size is None else size, at, lasting or own, period or 4.0 * own
            )
            response = study.respond(plant, signal, until or study.response_horizon(plant, signal))
    if trend_file is not None:
        replace_file(trend_file, report.response_csv(response))
    units = study.units_of(case)
    return Answer(
        report.respond_text(case, response, signal, units, trend_file, width()),
        report.respond_data(case, response, signal, units),
    )


_SIGNAL: Final = ("--input", "--size", "--at", "--width", "--period", "--until")
"""Options of an input that a record stands in for."""


def propose(given: Given) -> Answer:
    """The present settings and candidates, each judged on this loop."""
    from workbench import study

    wish = _wish(given)
    # What a controller is like, its gain left open, is enough to propose settings for it.
    case = loop_of(given, gain="1")
    with progress("judging the candidates"):
        proposals = study.propose(case, wish)
        curves = study.trade_off(case, wish) if "--trade-off" in given else None
    if case.controller is not None and not given.file and not given.tells_gain:
        case, proposals = replace(case, controller=None), proposals[1:]
    # The present settings are an answer only where they were asked for.
    candidates = [
        row for row in proposals if (row.method == "present") is (wish.method == "present")
    ]
    limited = any(given.word(name) is not None for name in _LIMITS)
    done = any(row.within_limit if limited else row.applies for row in candidates)
    chosen = study.action_of(case)[1]
    notes = [Note("info", chosen)] if chosen else []
    units = study.units_of(case)
    return Answer(
        report.propose_text(case, proposals, notes, units, width(), curves),
        report.propose_data(case, proposals, notes, units, curves),
        Status.DONE if done else Status.NO,
    )


_WISHES: Final = {
    "--setpoint-share": "setpoint_share",
    "--max-sensitivity": "max_sensitivity",
    "--max-complementary-sensitivity": "max_complementary_sensitivity",
    "--max-noise-gain": "max_noise_gain",
    "--max-load-travel": "max_load_travel",
    "--closed-loop-time": "closed_loop_time",
    "--largest-upset": "largest_upset",
    "--allowed-deviation": "allowed_deviation",
    "--relay": "relay",
}
"""Option -> quantity of a wish."""
_LIMITS: Final = tuple(option for option in _WISHES if option.startswith("--max-"))


def _wish(given: Given) -> Wish:
    """What the options ask for.  Raises `InputError` with the option as key."""
    from workbench import study

    aim = given.choice("--for", ("load", "setpoint"))
    if aim is not None and "--setpoint-share" in given:
        raise problem("is given beside --for", "keep one of the two", key="--setpoint-share")
    wish = study.Wish(
        setpoint_share=100.0 if aim == "setpoint" else 0.0, method=given.word("--method")
    )
    for option, name in _WISHES.items():
        word = given.word(option)
        if word is not None:
            try:
                wish = study.edit_wish(wish, name, word or " ?")
            except InputError as fault:
                raise fault.at(key=option) from None
    return wish


def convert(given: Given) -> Answer:
    """The same controller in another form and other units."""
    from workbench import study
    from workbench.model.conversion import HELD_BY, Units

    form = given.choice("--to", tuple(HELD_BY))
    if form is None:
        raise problem("is missing", f"name the form wanted: {one_of(list(HELD_BY))}", key="--to")
    units = Units(
        given.choice("--gain-as", ("gain", "band")),
        given.choice("--integral-as", (*INTEGRAL_UNITS, *GAIN_RATE_UNITS)),
        given.choice("--derivative-as", tuple(TIME_UNITS)),
    )
    case = loop_of(given, needs_plant=False)
    if case.controller is None:
        raise no_controller(given, "a conversion")
    found = study.convert(case, form, units)
    return Answer(
        report.convert_text(case, found, width()),
        report.convert_data(case, found, study.units_of(case)),
        Status.NO if found.controller is None else Status.DONE,
    )
