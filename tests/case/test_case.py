"""One way to edit: what is accepted, what is refused and in which words, and what carries over."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime
from typing import Any

import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from tests.case.making import a_case, an_entry, cases, values
from workbench.case.case import (
    Case,
    OpTable,
    PlantTable,
    PvTable,
    assumed_keys,
    differences,
    edit,
    edit_all,
    keys,
    new_case,
    shape_keys,
    show,
    with_settings,
    with_shape,
)
from workbench.case.reading import ASSUMED, TOLD_WITH, read_tables
from workbench.case.tables import PROCESSES, TABLES
from workbench.errors import InputError
from workbench.model.blocks import Block, Blocks, parse_blocks
from workbench.model.pid import Controller
from workbench.model.plant import (
    SHAPES,
    EqualLags,
    FirstOrder,
    Formula,
    Integrating,
    IntegratingLag,
    Oscillating,
    Vessel,
)
from workbench.units import Amount, quantities


def refused(case: Case, key: str, text: str) -> str:
    """What the engineer is told."""
    with pytest.raises(InputError) as told:
        edit(case, key, text)
    return str(told.value)


# --- the tables ----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", list(TABLES.values()), ids=lambda kind: kind.__name__)
def test_every_key_of_every_table_is_declared(kind: type) -> None:
    fields = set(kind.__dataclass_fields__)  # type: ignore[attr-defined]

    assert fields - set(quantities(kind)) <= {"process"}, "declare the field with quantity()"


def test_every_required_key_has_a_stand_in() -> None:
    needed = {key for shape in SHAPES for key in shape_keys(shape)}

    assert needed <= set(ASSUMED), "add the key to ASSUMED in case/reading.py"


@pytest.mark.parametrize(("kind", "key"), list(TOLD_WITH))
def test_keys_told_together_exist(kind: type, key: str) -> None:
    assert {key, *TOLD_WITH[kind, key]} <= set(quantities(kind))


def test_rest_is_the_middle_of_the_range_unless_given() -> None:
    assert PvTable(low=-50, high=150).rest == 50
    assert OpTable(start=42).rest == 42


def test_one_time_unit_serves_both_formulas() -> None:
    plant = PlantTable(Formula("1/(2 s + 1)", "min"), load="3/(2 s + 1)")
    load = plant.load_path()

    assert plant.time_unit == "min"
    # exact: 3/(2*60 s + 1) at s = 1/120 is 3/2
    assert load is not None
    assert load(1 / 120) == pytest.approx(1.5)
    assert replace(plant, process=None).time_unit == "min"
    assert replace(plant, process=None, load=None).time_unit == "s"


# --- editing -------------------------------------------------------------------------------------


def test_an_edit_gives_a_new_case_and_leaves_the_old() -> None:
    case = a_case()
    edited = edit(case, "controller.gain", "1.3")

    assert case == a_case()
    assert edited.controller == Controller(gain=1.3, integral=Amount(32, "s"), scan=Amount(1, "s"))
    assert differences(case, edited) == [("controller.gain", "1.1", "1.3")]


@given(cases())
@settings(max_examples=30)
def test_what_is_shown_can_be_typed_back(case: Case) -> None:
    typed = {key: show(case, key) for key in keys(case)}

    assert edit_all(case, {key: text for key, text in typed.items() if text}) == case


@given(cases(), st.data())
@settings(max_examples=30)
def test_an_edit_changes_its_own_key_only(case: Case, data: st.DataObject) -> None:
    # These bring or take the keys that go with them.
    bound = ("plant.shape", "plant.formula", "plant.blocks", "plant.load")
    free = [key for key in keys(case) if key not in bound]
    key = data.draw(st.sampled_from(free))
    declared = keys(case)[key]
    text = declared.show(data.draw(values(declared)))
    try:
        edited = edit(case, key, text)
    except InputError:
        assume(False)

    others = {"controller.gain", "controller.proportional_band"} if "controller." in key else set()
    assert {changed for changed, _, _ in differences(case, edited)} <= {key, *others}


GAINS = "plant.gain, family.gain, controller.gain, feedforward.gain or inner.gain"


@pytest.mark.parametrize(
    ("key", "text", "words"),
    [
        (
            "controller.gian",
            "1",
            "controller.gian: is not a known key; did you mean 'controller.gain'?",
        ),
        ("gain", "1", f"gain: is not a known key; did you mean {GAINS}?"),
        ("pv.colour", "1", "pv.colour: is not a known key; use unit, low, high, start, filter"),
        ("pv.gain", "1", f"is not a known key; did you mean {GAINS}?"),
        ("x", "1", "x: is not a known key; the tables are loop, pv, op, plant, family, controller"),
        ("format", "2", "format: cannot be set; the program writes it"),
        ("history", "2", "history: cannot be set; entries are only added, by a save with a reason"),
        (
            "plant.slope",
            "1 /s",
            "does not belong to the shape first-order; that takes gain, time_constant",
        ),
        ("plant.time_unit", "min", "has no formula to apply to"),
        (
            "controller.gain",
            "big",
            "controller.gain: must be a number, not 'big'; give a number at least 0",
        ),
        (
            "controller.gain",
            "-1",
            "controller.gain: -1 is outside what is accepted; give a number at least 0",
        ),
        ("controller.gain", "", "controller.gain: is missing; give gain or proportional_band"),
        ("controller.integral", "32", "controller.integral: '32' has no unit"),
        (
            "controller.scan",
            "0 s",
            "controller.scan: 0 is outside what is accepted; give a number above 0",
        ),
        ("controller.scan", "1 h", "controller.scan: 1 h is too long; give less than 1 h"),
        (
            "controller.form",
            "parallel",
            "controller.integral: has the unit 's' in the parallel form",
        ),
        ("pv.high", "-3", "pv.high: -3 is below low, 0; give a high above low"),
        ("pv.high", "0", "pv.high: 0 is the same as low"),
        ("op.start", "101", "op.start: 101 is outside the limits 0 to 100"),
        ("plant.formula", "2/(3s+1)(5s+1)", "plant.formula: column"),
        ("plant.load", "s^2/(s+1)", "plant.load:"),
        ("loop.tag", "  ", "loop.tag: is missing"),
        ("loop.tag", "\udc9f", "loop.tag: has a character that UTF-8 cannot hold"),
    ],
)
def test_a_refused_edit_says_what_and_how_to_mend_it(key: str, text: str, words: str) -> None:
    told = refused(a_case(), key, text)

    assert words in told
    assert "\n" not in told


@pytest.mark.parametrize(
    ("table", "key", "typed", "raw"),
    [
        ("controller", "gain", "-1", -1.0),
        ("controller", "integral", "32", "32"),
        ("controller", "scan", "60 min", "60 min"),
        ("controller", "windup", "trackng", "trackng"),
        ("pv", "noise", "-0.1", -0.1),
        ("op", "rate", "2 s", "2 s"),
        ("op", "min", "99", 99),
        ("plant", "time_constant", "4,0 s", "4,0 s"),
        ("plant", "gain", "0", 0),
        ("plant", "gian", "1", 1),
        ("scenario", "until", "0 s", "0 s"),
    ],
)
def test_a_file_and_an_edit_are_refused_in_the_same_words(
    table: str, key: str, typed: str, raw: object
) -> None:
    tables: dict[str, dict[str, Any]] = {
        "loop": {"tag": "TIC-307"},
        "op": {"max": 95},
        "plant": {"shape": "first-order", "gain": 1.8, "time_constant": "40 s"},
        "controller": {"gain": 1.1, "integral": "32 s"},
    }
    case, faults = read_tables(tables)
    assert case is not None, faults
    tables.setdefault(table, {})[key] = raw
    none, found = read_tables(tables)

    assert none is None
    assert str(InputError(found)) == refused(case, f"{table}.{key}", typed)


def test_every_fault_of_an_edit_is_told() -> None:
    with pytest.raises(InputError) as told:
        edit_all(a_case(), {"controller.gain": "x", "pv.nose": "1", "op.rate": "fast"})

    assert [each.key for each in told.value.problems] == ["controller.gain", "pv.nose", "op.rate"]


def test_gain_and_band_replace_each_other() -> None:
    banded = edit(a_case(), "controller.proportional_band", "80")

    assert banded.controller is not None
    assert (banded.controller.gain, banded.controller.proportional_band) == (None, 80)
    assert edit(banded, "controller.gain", "1.1") == a_case()
    both = {"controller.gain": "1", "controller.proportional_band": "100"}
    with pytest.raises(InputError, match="is given beside gain"):
        edit_all(a_case(), both)


@pytest.mark.parametrize("word", ["", "none", " none "])
def test_an_optional_key_is_taken_out(word: str) -> None:
    analogue = edit(a_case(), "controller.scan", word)

    assert analogue.controller is not None
    assert analogue.controller.scan is None
    assert show(analogue, "controller.scan") == ""


def test_no_filter_is_not_the_default_filter() -> None:
    case = edit(a_case(), "controller.derivative_filter", "none")

    assert case.controller is not None
    assert case.controller.derivative_filter is None
    assert show(case, "controller.derivative_filter") == "none"
    assert edit(case, "controller.derivative_filter", "") == a_case()


def test_a_case_may_lack_plant_and_controller() -> None:
    case = new_case("FIC-101")

    assert case.plant.process is None
    assert case.controller is None
    assert "controller.gain" in keys(case)
    assert "plant.gain" not in keys(case)
    assert "give gain or proportional_band" in refused(case, "controller.integral", "32 s")
    assert "plant.gain: has no shape to belong to" in refused(case, "plant.gain", "1")
    assert edit(case, "controller.gain", "2").controller == Controller(gain=2)
    assert edit(case, "controller.scan", "") == case


def test_a_blank_tag_is_refused() -> None:
    with pytest.raises(InputError, match=r"loop\.tag"):
        new_case(" ")


# --- another shape -------------------------------------------------------------------------------


def test_a_shape_is_changed_together_with_its_keys() -> None:
    told = refused(a_case(), "plant.shape", "integrating")
    assert told.startswith("plant.slope: is missing; give the lasting rate of PV")
    assert "set together with plant.shape" in told

    case = edit_all(a_case(), {"plant.shape": "integrating", "plant.slope": "0.02 /s"})
    assert case.plant.process == Integrating(Amount(0.02, "/s"), Amount(6, "s"))


def test_a_formula_replaces_a_shape_and_the_other_way_round() -> None:
    case = edit(a_case(), "plant.formula", "1/(3 s + 1)")
    assert case.plant.process == Formula("1/(3 s + 1)")
    assert "plant.time_unit" in keys(case)

    back = {"plant.shape": "first-order", "plant.gain": "1.8", "plant.time_constant": "40 s"}
    assert edit_all(case, back).plant.process == FirstOrder(1.8, Amount(40, "s"))


def test_the_plant_is_taken_out_with_its_shape() -> None:
    assert edit(a_case(), "plant.shape", "").plant == PlantTable()


def test_a_load_formula_goes_with_its_time_unit() -> None:
    case = edit_all(a_case(), {"plant.load": "1/(2 s + 1)", "plant.time_unit": "min"})
    assert case.plant.time_unit == "min"
    assert edit(case, "plant.load", "").plant == a_case().plant


@pytest.mark.parametrize("shape", list(PROCESSES))
@pytest.mark.parametrize("first", list(PROCESSES))
def test_any_shape_turns_into_any_other(first: str, shape: str) -> None:
    start = with_shape(new_case("X-1"), first)
    turned = with_shape(start, shape)

    assert turned.plant.process is not None
    assert turned.plant.process.shape == shape
    assert set(assumed_keys(start, shape)) <= {f"plant.{key}" for key in shape_keys(shape)}


# --- blocks ---------------------------------------------------------------------------------------

DRYER_LINE = "valve: 1/(2 s + 1); dryer: 1.8 exp(-6 s)/(40 s + 1); slave around valve: 4"


def drawn(line: str = DRYER_LINE) -> Case:
    return edit(a_case(), "plant.blocks", line)


def test_blocks_typed_on_one_line_make_the_plant() -> None:
    case = drawn()

    assert case.plant.process == parse_blocks(DRYER_LINE)
    assert show(case, "plant.blocks") == show(case, "plant") == DRYER_LINE
    assert show(case, "plant.shape") == "blocks"
    assert "plant.gain" not in keys(case)
    assert edit(case, "plant", "1/(3 s + 1)").plant.process == Formula("1/(3 s + 1)")


def test_one_key_of_one_block_is_set_like_any_other() -> None:
    case = edit(drawn(), "plant.block.dryer.formula", "2/(50 s + 1)")

    assert case == drawn(DRYER_LINE.replace("1.8 exp(-6 s)/(40 s + 1)", "2/(50 s + 1)"))
    assert show(case, "plant.block.dryer.formula") == "2/(50 s + 1)"
    assert show(case, "plant.block.slave.around") == "valve"
    both = {"plant.block.slave.around": "", "plant.block.slave.beside": "dryer"}
    assert "slave beside dryer: 4" in show(edit_all(drawn(), both), "plant.blocks")
    assert [key for key, _, _ in differences(drawn(), case)] == ["plant.blocks"]


def test_a_block_renamed_keeps_what_is_drawn_to_it() -> None:
    case = edit(edit(drawn(), "plant.load_before", "valve"), "plant.block.valve.name", "actuator")

    assert show(case, "plant") == (
        "actuator: 1/(2 s + 1); dryer: 1.8 exp(-6 s)/(40 s + 1); slave around actuator: 4; "
        "upset before actuator"
    )


def test_blocks_are_added_and_taken_out_by_the_line() -> None:
    longer = edit(drawn(), "plant.blocks", f"{DRYER_LINE}; sensor: 1/(s + 1)")
    process = longer.plant.process

    assert isinstance(process, Blocks)
    assert process.blocks[-1] == Block("sensor", "1/(s + 1)")
    assert edit(longer, "plant.blocks", DRYER_LINE) == drawn()


def test_the_upset_enters_where_the_drawing_says() -> None:
    case = edit(drawn(), "plant.load_before", "dryer")
    path = case.plant.load_path()

    # exact: from the dryer's input on, 1.8 at s = 0; the inner feedback lies before it
    assert path is not None
    assert path.gain().value == pytest.approx(1.8, rel=1e-12)
    assert drawn().plant.load_path() is None
    own = edit(case, "plant.load", "3/(2 s + 1)").plant.load_path()
    assert own is not None
    assert own.gain().value == pytest.approx(3.0, rel=1e-12)


@pytest.mark.parametrize(
    ("key", "text", "words"),
    [
        ("plant.block.dyer.formula", "1", "there is no block 'dyer'; did you mean 'dryer'?"),
        ("plant.block.dryer.formla", "1", "is not a known key; did you mean 'formula'?"),
        ("plant.block.dryer.formula", "1/(", "block 'dryer': column 3"),
        ("plant.block.dryer.sign", "-", "is - where no block stands beside"),
        ("plant.block.dryer.name", "a beside b", "holds the word 'beside'"),
        ("plant.load_before", "dyer", "not on the path; did you mean 'dryer'?"),
        ("plant.blocks", "a: 1/(s", "block 'a': column 3"),
        ("plant.blocks", "a 1/s", "has no colon"),
        ("plant.blocks", "a: vessel volume=3, flow=1 /s", "a vessel is a whole plant"),
        ("plant.blocks", "a: 1; b around a: -s/(s + 1)", "makes an improper plant"),
        ("plant.blocks", "a: 1/s; b less a: 1/s", "the paths cancel to nothing"),
        ("plant", "a: 1/(s", "block 'a': column 3"),
        ("plant", "first-order gain=x, time_constant=4 s", "gain: must be a number, not 'x'"),
        ("plant", "1/(s", "column 3"),
        ("plant.gain", "1", "does not belong to the shape blocks; that takes blocks and time_unit"),
    ],
)
def test_a_drawing_is_refused_by_the_key_that_was_typed(key: str, text: str, words: str) -> None:
    told = refused(drawn(), key, text)

    assert told.startswith(f"{key}: ")
    assert words in told


def test_a_key_of_blocks_needs_blocks() -> None:
    assert "needs a plant of blocks" in refused(a_case(), "plant.load_before", "valve")
    assert "needs a plant of blocks" in refused(a_case(), "plant.block.valve.formula", "1")


@pytest.mark.parametrize(
    "line",
    [
        "first-order gain=1.8, time_constant=40 s, dead_time=6 s",
        "vessel volume=10, flow=40 /h, dead_time=0 s",
        "1.8 exp(-6 s)/(40 s + 1)",
        DRYER_LINE,
        "",
    ],
)
def test_the_whole_plant_on_one_line_is_what_is_shown(line: str) -> None:
    case = edit(a_case(), "plant", line)

    assert show(case, "plant") == line
    assert edit(drawn(), "plant", line).plant == case.plant


def test_a_shape_becomes_one_block_and_blocks_the_formula_that_they_are() -> None:
    case = with_shape(a_case(), "blocks")
    line = "process: first-order gain=1.8, time_constant=40 s, dead_time=6 s"
    assert show(case, "plant") == line
    assert assumed_keys(a_case(), "blocks") == ()

    formula = with_shape(case, "formula").plant.process
    assert formula == Formula("1.8 exp(-6 s)/(40 s + 1)")
    first = with_shape(case, "first-order").plant.process
    assert first == FirstOrder(1.8, Amount(40, "s"), Amount(6, "s"))


def test_a_vessel_becomes_a_block_in_units() -> None:
    tank = edit_all(a_case(), {"plant": "vessel volume=10, flow=40 /h", "pv.high": "250"})
    block = with_shape(tank, "blocks").plant.process

    # exact: 40 / 10 per hour of the ranges, times 250/100 units, over 3600 s
    assert block is not None
    assert block.transfer().slope().value == pytest.approx(40 / 10 * 2.5 / 3600, rel=1e-12)


def test_gain_and_slope_turn_into_each_other_by_the_time_constant() -> None:
    # exact: slope = gain / time constant = 1.8 / 40 s
    case = with_shape(a_case(), "integrating-lag")
    slope = IntegratingLag(Amount(0.045, "/s"), Amount(40, "s"), Amount(6, "s"))
    assert case.plant.process == slope
    assert assumed_keys(a_case(), "integrating-lag") == ()
    assert with_shape(case, "first-order") == a_case()


def test_an_integrating_plant_keeps_its_ramp() -> None:
    case = a_case(plant=PlantTable(Integrating(Amount(3, "/min"))))
    turned = with_shape(case, "first-order").plant.process

    assert assumed_keys(case, "first-order") == ("plant.gain", "plant.time_constant")
    assert isinstance(turned, FirstOrder)
    # exact: 3 /min = 0.05 /s
    assert turned.gain / turned.time_constant.seconds == pytest.approx(0.05)


def test_a_vessel_and_its_ramp_turn_into_each_other_over_the_ranges() -> None:
    # exact: 40 m3/h over the OP range into 20 m3 is 2 PV ranges an hour, each 4 m over 100 %
    plant = PlantTable(Vessel(20.0, Amount(40, "/h")))
    case = a_case(pv=PvTable(high=4.0), plant=plant)
    ramp = with_shape(case, "integrating")

    assert ramp.plant.process == Integrating(Amount(0.08, "/h"))
    assert with_shape(ramp, "vessel").plant.process == Vessel(1.0, Amount(2, "/h"))
    assert assumed_keys(ramp, "vessel") == ("plant.volume", "plant.flow")
    formula = with_shape(case, "formula").plant.process
    assert isinstance(formula, Formula)
    assert formula.transfer()(1.0) == pytest.approx(0.08 / 3600)


def test_one_equal_lag_is_the_first_order_plant() -> None:
    turned = with_shape(a_case(), "equal-lags").plant.process

    assert turned == EqualLags(1.8, Amount(40, "s"), 1, Amount(6, "s"))


def test_a_shape_becomes_the_formula_that_it_is() -> None:
    turned = with_shape(a_case(), "formula").plant.process
    plant = a_case().plant.process

    assert isinstance(turned, Formula)
    assert plant is not None
    s = 0.02 + 0.03j
    assert turned.transfer()(s) == pytest.approx(plant.transfer()(s), rel=1e-12)


def test_a_formula_is_written_in_the_unit_of_the_load_formula() -> None:
    case = edit_all(a_case(), {"plant.load": "1/(2 s + 1)", "plant.time_unit": "min"})
    turned = with_shape(case, "formula")
    s = 0.02 + 0.03j

    assert turned.plant.time_unit == "min"
    before, after = case.plant.load_path(), turned.plant.load_path()
    assert before is not None
    assert after is not None
    assert after(s) == pytest.approx(before(s))
    assert case.plant.process is not None
    assert turned.plant.process is not None
    transfers = turned.plant.process.transfer(), case.plant.process.transfer()
    assert transfers[0](s) == pytest.approx(transfers[1](s), rel=1e-9)


def test_a_formula_gives_what_can_be_read_off_it() -> None:
    case = a_case(plant=PlantTable(Formula("2 exp(-3 s)/((5 s + 1)(1 s + 1))", "min")))
    # exact: dead time 3 min, slowest lag 5 min
    expected = FirstOrder(2.0, Amount(300, "s"), Amount(180, "s"))

    assert with_shape(case, "first-order").plant.process == expected


def test_an_oscillating_plant_has_the_lag_of_its_period() -> None:
    case = a_case(plant=PlantTable(Oscillating(1.0, Amount(62.8, "s"), 0.5)))

    # exact: T = P / 2 pi, rounded to four digits
    turned = with_shape(case, "first-order").plant.process
    assert turned == FirstOrder(1.0, Amount(9.995, "s"))


def test_numbers_that_cannot_be_taken_over_are_told() -> None:
    case = a_case(plant=PlantTable(FirstOrder(1e304, Amount(1e-6, "s"))))
    with pytest.raises(InputError, match=r"plant\.shape: cannot take over"):
        with_shape(case, "integrating")
    lead = {
        "shape": "lead",
        "gain": "1e308",
        "numerator_time": "90 s",
        "second_time_constant": "1 s",
    }
    with pytest.raises(InputError, match=r"plant\.shape: a coefficient is not finite"):
        edit_all(a_case(), {f"plant.{key}": typed for key, typed in lead.items()})


def test_an_unknown_shape_is_refused_with_the_nearest_spelling() -> None:
    with pytest.raises(InputError, match="did you mean 'first-order'"):
        with_shape(a_case(), "first order")


# --- history and differences ---------------------------------------------------------------------


def test_the_way_back_restores_the_tuning_and_leaves_the_installation() -> None:
    settings_now = Controller(
        gain=2, derivative=Amount(3, "s"), setpoint_weight=0.5, action="direct", scan=Amount(1, "s")
    )
    case = a_case(controller=settings_now)
    restored = with_settings(case, an_entry())

    assert restored.controller == Controller(
        gain=0.9, integral=Amount(40, "s"), action="direct", scan=Amount(1, "s")
    )


def test_an_entry_in_percent_band_comes_back_as_one() -> None:
    entry = an_entry(controller=Controller(proportional_band=80, derivative_filter=None))
    restored = with_settings(a_case(), entry)

    assert restored.controller == Controller(
        proportional_band=80, derivative_filter=None, scan=Amount(1, "s")
    )


def test_an_entry_without_settings_is_no_way_back() -> None:
    with pytest.raises(InputError, match="names no settings"):
        with_settings(a_case(), an_entry(controller=None))


@pytest.mark.parametrize(
    ("at", "words"),
    [
        ("2026-11-30T14:05:00", "has no offset from UTC"),
        ("2026-11-30T14:05:00+00:19:32", "not in whole minutes"),
    ],
)
def test_an_entry_knows_its_offset(at: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        an_entry(at=datetime.fromisoformat(at))


def test_differences_name_what_came_and_went() -> None:
    old = a_case()
    new = replace(with_shape(old, "integrating"), controller=None).with_entry(an_entry())

    assert differences(old, new) == [
        ("plant.shape", "first-order", "integrating"),
        ("plant.gain", "1.8", ""),
        ("plant.time_constant", "40 s", ""),
        ("plant.slope", "", "0.045 /s"),
        ("controller", "there", ""),
        ("history", "1 entry", "2 entries"),
    ]
    assert differences(old, old) == []


def test_a_key_that_cannot_be_shown_is_named() -> None:
    with pytest.raises(InputError, match="did you mean 'loop.tag'"):
        show(a_case(), "loop.tga")
