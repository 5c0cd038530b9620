"""Units, ranges, number text, and the declaration that every quantity has."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from workbench.errors import InputError
from workbench.units import (
    GAIN_RATE_UNITS,
    INTEGRAL_UNITS,
    RATE_UNITS,
    TIME_UNITS,
    Amount,
    Figure,
    Quantity,
    Range,
    check_fields,
    harmless,
    nearest,
    one_of,
    plain,
    quantities,
    quantity,
    read_amount,
    rounded,
    shown,
    text,
    time_text,
)

finite = st.floats(allow_nan=False, allow_infinity=False)

# --- amounts -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("written", "amount", "seconds"),
    [
        # exact
        ("40 s", Amount(40, "s"), 40.0),
        ("1.5 min", Amount(1.5, "min"), 90.0),
        ("2h", Amount(2, "h"), 7200.0),
        (" .5  min ", Amount(0.5, "min"), 30.0),
        ("1e3 s", Amount(1000, "s"), 1000.0),
        ("-12 s", Amount(-12, "s"), -12.0),
        ("32 s/repeat", Amount(32, "s/repeat"), 32.0),
        ("0.53 min/repeat", Amount(0.53, "min/repeat"), 31.8),
        ("2 repeats/min", Amount(2, "repeats/min"), 30.0),
        ("0.1 repeats/s", Amount(0.1, "repeats/s"), 10.0),
    ],
)
def test_a_time_is_read_with_its_unit(written: str, amount: Amount, seconds: float) -> None:
    found = read_amount(written, INTEGRAL_UNITS, "32 s")
    assert found == amount
    assert found.seconds == pytest.approx(seconds, rel=1e-14)


@pytest.mark.parametrize(
    ("written", "units", "per_second"),
    [
        # exact
        ("2 /s", RATE_UNITS, 2.0),
        ("2/s", RATE_UNITS, 2.0),
        ("3 /min", RATE_UNITS, 0.05),
        ("36 /h", RATE_UNITS, 0.01),
        ("0.03 1/s", GAIN_RATE_UNITS, 0.03),
        ("1.8 1/min", GAIN_RATE_UNITS, 0.03),
    ],
)
def test_a_rate_is_read_with_its_unit(
    written: str, units: tuple[str, ...], per_second: float
) -> None:
    assert read_amount(written, units, "2 /s").per_second == pytest.approx(per_second, rel=1e-14)


@pytest.mark.parametrize(
    ("written", "words"),
    [
        ("40", "'40' has no unit; use s, min or h"),
        ("40 sec", "the unit 'sec' is not known here; use s, min or h"),
        ("40 1/s", "the unit '1/s' is not known here"),
        ("1,5 min", 'has a decimal comma; write a point, like "40 s"'),
        ("", "is not a number with its unit"),
        ("s", "is not a number with its unit"),
        ("fast", "is not a number with its unit"),
        ("nan s", "is not a number with its unit"),
        ("inf s", "is not a number with its unit"),
        ("1e999 s", "'1e999 s' is beyond every plant; give a number between 1e-09 and 1e+09"),
        ("2e-10 s", "is beyond every plant"),
        ("40 s s", "is not a number with its unit"),
        ("0x10 s", "is not a number with its unit"),
    ],
)
def test_what_is_no_time_is_refused_in_words(written: str, words: str) -> None:
    with pytest.raises(InputError) as refused:
        read_amount(written, tuple(TIME_UNITS), "40 s")
    assert words in str(refused.value)


@given(st.floats(1e-6, 1e9), st.sampled_from(INTEGRAL_UNITS), st.floats(1e-6, 1e9))
def test_an_amount_keeps_its_unit_when_its_time_changes(
    value: float, unit: str, seconds: float
) -> None:
    changed = Amount(value, unit).with_seconds(seconds)
    assert changed.unit == unit
    assert changed.seconds == pytest.approx(seconds, rel=1e-12)


@given(
    st.floats(1e-9, 1e9) | st.floats(-1e9, -1e-9) | st.just(0.0),
    st.sampled_from([*INTEGRAL_UNITS, *RATE_UNITS, *GAIN_RATE_UNITS]),
)
def test_an_amount_written_is_the_amount_read(value: float, unit: str) -> None:
    units = (*INTEGRAL_UNITS, *RATE_UNITS, *GAIN_RATE_UNITS)
    assert read_amount(str(Amount(value, unit)), units, "40 s") == Amount(value, unit)


# --- number text ---------------------------------------------------------------------------------


@given(finite)
def test_a_plain_number_reads_back_the_same(value: float) -> None:
    assert float(plain(value)) == value


@pytest.mark.parametrize(
    ("value", "written"),
    [(2.0, "2"), (-40.0, "-40"), (0.1, "0.1"), (1e-7, "1e-07"), (1e20, "1e+20"), (-0.0, "0")],
)
def test_a_plain_number_is_what_a_person_types(value: float, written: str) -> None:
    assert plain(value) == written


@pytest.mark.parametrize(
    ("value", "unit", "written"),
    [
        (None, "s", "none"),
        (0.0, "s", "0 s"),
        (161.23456, "degC s", "161.2 degC s"),
        (1.0, "", "1"),
        (123456.7, "", "123457"),
        (-0.000123456, "", "-0.0001235"),
        (0.00001, "", "1.000e-05"),
        (12345678.0, "s", "1.235e+07 s"),
        (9.9999, "", "10"),
        (2.5, "%", "2.5 %"),
        (1200.0, "", "1200"),
    ],
)
def test_a_figure_for_reading(value: float | None, unit: str, written: str) -> None:
    assert text(value, unit) == written


@given(st.floats(1e-9, 1e12), st.integers(1, 8))
def test_a_figure_for_reading_keeps_its_digits(value: float, digits: int) -> None:
    assert float(text(value, "", digits)) == pytest.approx(value, rel=0.51 * 10.0 ** (1 - digits))


@pytest.mark.parametrize(
    ("seconds", "written"),
    [
        (None, "none"),
        (0.05, "0.05 s"),
        (90.0, "90 s"),
        (599.0, "599 s"),
        (600.0, "10 min"),
        (1800.0, "30 min"),
        (4 * 3600.0, "4 h"),
        (-1800.0, "-30 min"),
    ],
)
def test_a_time_is_shown_in_the_unit_that_reads_best(seconds: float | None, written: str) -> None:
    assert time_text(seconds) == written


def test_rounded_is_what_a_person_would_type() -> None:
    assert [rounded(x) for x in (1.23456, 0.000123456, 98765.4, 0.0)] == [
        1.235,
        0.0001235,
        98770.0,
        0.0,
    ]
    assert rounded(1.23456, 2) == 1.2


@pytest.mark.parametrize(
    ("raw", "safe"),
    [
        ("TIC-307", "TIC-307"),
        ("\x1b[31mred", "?[31mred"),
        ("a\nb\tc", "a?b?c"),
        ("\u202egnp", "?gnp"),
        ("\u00e9\u00f6", "\u00e9\u00f6"),
    ],
)
def test_text_from_a_file_is_harmless_on_a_terminal(raw: str, safe: str) -> None:
    assert harmless(raw) == safe


@given(st.text(max_size=300), st.integers(4, 250))
def test_harmless_text_is_printable_and_short(raw: str, limit: int) -> None:
    safe = harmless(raw, limit)
    assert safe.isprintable()
    assert len(safe) <= limit


def test_lists_and_near_spellings_for_messages() -> None:
    assert one_of(["s"]) == "s"
    assert one_of(("s", "min", "h")) == "s, min or h"
    assert nearest("gian", ["gain", "scan"]) == "gain"
    assert nearest("qqq", ["gain", "scan"]) == ""


@pytest.mark.parametrize(
    ("raw", "words"),
    [
        (True, "true"),
        (False, "false"),
        ("a\x07", "'a?'"),
        ({}, "a table"),
        ([1], "a list"),
        (3, "3"),
    ],
)
def test_a_value_inside_a_message(raw: object, words: str) -> None:
    assert shown(raw) == words


# --- ranges --------------------------------------------------------------------------------------


def test_percent_of_span() -> None:
    # exact
    scale = Range(-50.0, 150.0)
    assert (scale.span, scale.percent(5.0), scale.units(2.5)) == (200.0, 2.5, 5.0)


@given(st.floats(-1e4, 1e4), st.floats(0.01, 1e4), st.floats(-1e4, 1e4))
def test_percent_and_units_undo_each_other(low: float, span: float, change: float) -> None:
    scale = Range(low, low + span)
    assert scale.units(scale.percent(change)) == pytest.approx(change, rel=1e-9, abs=1e-9)


# --- quantities ----------------------------------------------------------------------------------


def _quantity(kind: Any, **more: Any) -> Quantity:
    return Quantity("a quantity", kind, **more)


@pytest.mark.parametrize(
    ("declared", "raw", "value"),
    [
        (_quantity("number"), 3, 3.0),
        (_quantity("number"), 3.5, 3.5),
        (_quantity("text"), "words", "words"),
        (_quantity("flag"), True, True),
        (_quantity("choice", choices=("pv", "error")), "pv", "pv"),
        (_quantity("duration"), "2 min", Amount(2, "min")),
        (_quantity("rate"), "2 /h", Amount(2, "/h")),
        (_quantity("integral"), "none", None),
        (_quantity("integral"), "1.8 1/min", Amount(1.8, "1/min")),
        (_quantity("derivative"), " none ", None),
        (_quantity("filter"), 10, 10.0),
        (_quantity("filter"), "0.4 s", Amount(0.4, "s")),
        (_quantity("filter"), "none", None),
    ],
)
def test_a_value_as_a_file_gives_it(declared: Quantity, raw: object, value: object) -> None:
    assert declared.read(raw) == value


@pytest.mark.parametrize(
    ("declared", "raw", "words"),
    [
        (_quantity("number"), "3", "must be a number, not '3'"),
        (_quantity("number"), True, "must be a number, not true"),
        (_quantity("number"), math.nan, "must be a finite number, not nan"),
        (_quantity("number"), math.inf, "must be a finite number, not inf"),
        (_quantity("number"), 10**400, "must be a finite number"),
        (_quantity("number"), {}, "must be a number, not a table"),
        (
            _quantity("number", low=0, high=5),
            6,
            "6 is outside what is accepted; give a number at least 0 and at most 5",
        ),
        (_quantity("number", above=0, below=1), 1, "above 0 and below 1"),
        (_quantity("number", nonzero=True), 0, "give a number not 0"),
        (_quantity("text"), 3, "must be text, not 3; put it in quotes"),
        (_quantity("text", longest=5), "too long", "has 8 characters; at most 5"),
        (_quantity("flag"), "true", "must be true or false, not 'true'"),
        (_quantity("flag"), 1, "must be true or false, not 1"),
        (
            _quantity("choice", choices=("pv", "error")),
            "eror",
            "use pv or error; did you mean 'error'?",
        ),
        (_quantity("choice", choices=("pv", "error")), "x\x1b", "'x?' is not accepted"),
        (_quantity("duration"), 40, 'must be text with its unit, not 40; write it like "40 s"'),
        (_quantity("duration", above=0), "0 s", "0 is outside what is accepted"),
        (_quantity("rate"), "2 s", "use /s, /min or /h"),
        (_quantity("duration"), "none", "is not a number with its unit"),
        (_quantity("filter"), True, "must be a number, not true"),
    ],
)
def test_a_value_that_is_not_accepted_is_refused_in_words(
    declared: Quantity, raw: object, words: str
) -> None:
    with pytest.raises(InputError) as refused:
        declared.read(raw)
    assert words in str(refused.value)
    assert "\n" not in str(refused.value)


@pytest.mark.parametrize(
    ("declared", "typed", "value"),
    [
        (_quantity("number"), " 3.5 ", 3.5),
        (_quantity("number"), "-2", -2.0),
        (_quantity("number"), '"3"', 3.0),
        (_quantity("flag"), "yes", True),
        (_quantity("flag"), "false", False),
        (_quantity("text"), "words of mine", "words of mine"),
        (_quantity("text"), "'quoted'", "quoted"),
        (_quantity("duration"), '"2 min"', Amount(2, "min")),
        (_quantity("filter"), "8", 8.0),
        (_quantity("filter"), "0.4 s", Amount(0.4, "s")),
        (_quantity("filter"), "none", None),
    ],
)
def test_a_value_as_it_is_typed(declared: Quantity, typed: str, value: object) -> None:
    assert declared.parse(typed) == value


@pytest.mark.parametrize(
    ("declared", "typed", "words"),
    [
        (_quantity("number"), "", "must be a number, not ''"),
        (_quantity("number"), "big", "must be a number, not 'big'"),
        (_quantity("number"), "nan", "finite"),
        (_quantity("number"), "1e999", "finite"),
        (_quantity("flag"), "maybe", "true or false"),
        (_quantity("filter", above=0), "0", "above 0"),
        (_quantity("filter"), "0.4 d", "the unit 'd'"),
    ],
)
def test_what_cannot_be_typed(declared: Quantity, typed: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        declared.parse(typed)


@pytest.mark.parametrize(
    ("declared", "value"),
    [
        (_quantity("number"), 2.5),
        (_quantity("number"), 1e-9),
        (_quantity("text"), "words"),
        (_quantity("flag"), True),
        (_quantity("duration"), Amount(1.5, "min")),
        (_quantity("integral"), Amount(1.9, "repeats/min")),
        (_quantity("integral"), None),
        (_quantity("filter"), 10.0),
        (_quantity("filter"), 2.5),
        (_quantity("filter"), Amount(0.4, "s")),
        (_quantity("filter"), None),
    ],
)
def test_what_is_written_or_shown_reads_back(declared: Quantity, value: Any) -> None:
    assert declared.read(declared.write(value)) == value
    assert declared.parse(declared.show(value)) == value


def test_a_whole_filter_is_written_without_a_point() -> None:
    assert _quantity("filter").write(10.0) == 10
    assert isinstance(_quantity("filter").write(10.0), int)


@dataclass(frozen=True)
class _Table:
    size: float = quantity("how large", above=0)
    wait: Amount = quantity("how long", "duration", default=Amount(0, "s"), low=0)
    note: str | None = quantity("words", "text", default=None)
    undeclared: int = 3

    def __post_init__(self) -> None:
        check_fields(self)


def test_declared_fields_are_listed_in_order() -> None:
    assert list(quantities(_Table)) == ["size", "wait", "note"]
    assert quantities(_Table)["size"].meaning == "how large"


def test_a_constructor_checks_every_declared_field() -> None:
    assert _Table(1.0).wait == Amount(0, "s")
    bad: Any = 3
    with pytest.raises(InputError) as refused:
        _Table(-1.0, Amount(-2, "s"), bad)
    assert [p.key for p in refused.value.problems] == ["size", "wait", "note"]


@pytest.mark.parametrize("value", [math.inf, -math.inf, math.nan])
def test_a_filter_that_is_not_finite_is_refused_like_any_number(value: float) -> None:
    @dataclass(frozen=True)
    class Table:
        filter: float = quantity("a filter", "filter")

        def __post_init__(self) -> None:
            check_fields(self)

    with pytest.raises(InputError, match="finite"):
        Table(value)


# --- figures -------------------------------------------------------------------------------------


def test_a_figure_is_a_number_or_says_why_not() -> None:
    assert Figure.of(2).value == 2.0
    assert Figure.of(2.0).times(3.0) == Figure(6.0)
    missing = Figure(None, "integrating")
    assert missing.times(3.0) is missing


@pytest.mark.parametrize("value", [math.inf, -math.inf, math.nan])
def test_a_figure_is_never_what_is_not_finite(value: float) -> None:
    with pytest.raises(ValueError, match="a figure must be finite"):
        Figure.of(value)
