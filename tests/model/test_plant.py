"""Every shape an engineer can enter, against a fine integration that knows nothing of it."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, fields, replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from workbench.errors import InputError
from workbench.model.plant import (
    SHAPES,
    EqualLags,
    FirstOrder,
    Formula,
    Integrating,
    IntegratingLag,
    Lead,
    Oscillating,
    SecondOrder,
    Shape,
    Unstable,
    Vessel,
    read_function,
)
from workbench.model.response import step_response
from workbench.units import Amount, quantities

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Example:
    """A shape, its differential equation for a unit step after the dead time, and its figures."""

    shape: Shape
    order: int
    equation: Callable[[Floats], list[float]]
    """Derivatives of the state; the output is the first state unless `read` says otherwise."""
    gain: float | None
    slope: float
    read: Callable[[Floats], float] = lambda x: float(x[0])


def seconds(value: float) -> Amount:
    return Amount(value, "s")


_W = 2 * math.pi / 20.0

EXAMPLES: dict[str, Example] = {
    # The equations are written from the formula in each shape's docstring; figures exact.
    "first-order": Example(
        FirstOrder(1.8, seconds(40), seconds(6)), 1, lambda x: [(1.8 - x[0]) / 40], 1.8, 0.0
    ),
    "second-order": Example(
        SecondOrder(-2.0, seconds(9), seconds(4), seconds(2)),
        2,
        lambda x: [(x[1] - x[0]) / 4, (-2.0 - x[1]) / 9],
        -2.0,
        0.0,
    ),
    "oscillating": Example(
        Oscillating(1.5, seconds(20), 0.25, seconds(3)),
        2,
        lambda x: [x[1], _W**2 * (1.5 - x[0]) - 2 * 0.25 * _W * x[1]],
        1.5,
        0.0,
    ),
    "lead": Example(
        Lead(2.0, seconds(-5), seconds(9), seconds(4), seconds(1)),
        2,
        # y = 2 (x + Tz x') with x the answer of the two lags
        lambda x: [(x[1] - x[0]) / 4, (1.0 - x[1]) / 9],
        2.0,
        0.0,
        lambda x: float(2.0 * (x[0] - 5.0 * (x[1] - x[0]) / 4)),
    ),
    "integrating": Example(
        Integrating(Amount(1.2, "/min"), seconds(5)), 1, lambda x: [0.02], None, 0.02
    ),
    "integrating-lag": Example(
        IntegratingLag(Amount(0.02, "/s"), seconds(7), seconds(5)),
        2,
        lambda x: [x[1], (0.02 - x[1]) / 7],
        None,
        0.02,
    ),
    "vessel": Example(
        # percent of the level's range for percent of OP: 40/3600 m3/s into 2 m3
        Vessel(2.0, Amount(40.0, "/h"), seconds(5)),
        1,
        lambda x: [1 / 180],
        None,
        1 / 180,
    ),
    "unstable": Example(
        Unstable(1.5, seconds(30), seconds(2)), 1, lambda x: [(1.5 + x[0]) / 30], -1.5, 0.0
    ),
    "equal-lags": Example(
        EqualLags(0.7, seconds(5), 4, seconds(1)),
        4,
        lambda x: [(x[1] - x[0]) / 5, (x[2] - x[1]) / 5, (x[3] - x[2]) / 5, (0.7 - x[3]) / 5],
        0.7,
        0.0,
    ),
    "formula": Example(
        Formula("3 exp(-0.1 s)/((0.5 s + 1)(0.2 s + 1))", "min"),
        2,
        lambda x: [(x[1] - x[0]) / 12, (3.0 - x[1]) / 30],
        3.0,
        0.0,
    ),
}

DEAD_TIMES = {"formula": 6.0}
"""Where it is not a field of the shape [s]."""


def _runge_kutta(example: Example, until: float, steps: int) -> float:
    """Classical fourth order; with 4000 steps the error is below 1e-10 here."""
    state, h = np.zeros(example.order), until / steps
    for _ in range(steps):
        a = np.array(example.equation(state))
        b = np.array(example.equation(state + h / 2 * a))
        c = np.array(example.equation(state + h / 2 * b))
        d = np.array(example.equation(state + h * c))
        state = state + h / 6 * (a + 2 * b + 2 * c + d)
    return example.read(state)


@pytest.mark.parametrize("name", SHAPES)
def test_step_answer_agrees_with_a_fine_integration(name: str) -> None:
    assert name in EXAMPLES, f"add {name!r} to EXAMPLES in tests/model/test_plant.py"
    example = EXAMPLES[name]
    dead_time: float = (
        DEAD_TIMES[name] if name in DEAD_TIMES else getattr(example.shape, "dead_time").seconds  # noqa: B009
    )
    plant = example.shape.transfer()
    assert list(plant.delays) == pytest.approx([dead_time], rel=1e-14)
    for after in (3.0, 25.0):
        # other route: Runge-Kutta on the differential equation
        expected = _runge_kutta(example, after, 1500)
        found = float(step_response(plant, np.array([dead_time + after]))[0])
        assert found == pytest.approx(expected, rel=1e-8, abs=1e-9)
    assert float(step_response(plant, np.array([0.999 * dead_time]))[0]) == 0.0


@pytest.mark.parametrize("name", SHAPES)
def test_gain_and_slope(name: str) -> None:
    example = EXAMPLES[name]
    plant = example.shape.transfer()
    if example.gain is None:
        assert plant.gain().value is None
        assert plant.slope().value == pytest.approx(example.slope, rel=1e-14)
    else:
        assert plant.gain().value == pytest.approx(example.gain, rel=1e-14)
        assert plant.slope().value == 0.0


@pytest.mark.parametrize("name", SHAPES)
def test_a_shape_knows_its_word_and_declares_every_field(name: str) -> None:
    shape = SHAPES[name]
    assert shape.shape == name
    assert {f.name for f in fields(shape)} == set(quantities(shape))


@pytest.mark.parametrize("name", [n for n in SHAPES if n != "formula"])
def test_twice_all_times_answers_half_as_fast(name: str) -> None:
    shape = EXAMPLES[name].shape
    times: dict[str, Any] = {
        f.name: Amount(2 * value.value, value.unit)
        for f in fields(shape)
        if isinstance(value := getattr(shape, f.name), Amount) and not value.unit.startswith("/")
    }
    slow = replace(shape, **times).transfer()
    scale = 2.0 if {"slope", "flow"} & {f.name for f in fields(shape)} else 1.0
    # exact: s becomes 2 s, and a slope per unit of time is not slowed
    for s in (0.02j, 0.3j):
        assert slow(s) == pytest.approx(scale * shape.transfer()(2 * s), rel=1e-12)


@pytest.mark.parametrize("name", SHAPES)
def test_units_of_time_mean_the_same_plant(name: str) -> None:
    shape = EXAMPLES[name].shape
    if isinstance(shape, Formula):
        same: Shape = Formula("3 exp(-6 s)/((30 s + 1)(12 s + 1))")
    else:
        changed: dict[str, Any] = {}
        for f in fields(shape):
            value = getattr(shape, f.name)
            if isinstance(value, Amount) and value.unit == "s":
                changed[f.name] = Amount(value.value / 60, "min")
            elif isinstance(value, Amount):
                changed[f.name] = Amount(value.per_second * 3600, "/h")
        same = replace(shape, **changed)
    assert same.transfer()(0.07j) == pytest.approx(shape.transfer()(0.07j), rel=1e-12)


@pytest.mark.parametrize("name", SHAPES)
def test_direction_of_the_first_move(name: str) -> None:
    plant = EXAMPLES[name].shape.transfer()
    early = float(step_response(plant, np.array([plant.dead_time + 0.3]))[0])
    wanted = {"second-order": -1.0, "lead": -1.0}.get(name, 1.0)
    assert early * wanted > 0.0


REFUSED: tuple[tuple[Callable[[], object], str, str], ...] = (
    (lambda: FirstOrder(0.0, seconds(1)), "gain", "not 0"),
    (lambda: FirstOrder(math.nan, seconds(1)), "gain", "finite"),
    (lambda: FirstOrder(1.0, seconds(0)), "time_constant", "above 0"),
    (lambda: FirstOrder(1.0, seconds(-4)), "time_constant", "above 0"),
    (lambda: FirstOrder(1.0, seconds(4), seconds(-1)), "dead_time", "at least 0"),
    (lambda: FirstOrder(1.0, Amount(4, "d")), "time_constant", "use s, min or h"),
    (lambda: FirstOrder(1.0, 40.0), "time_constant", "text with its unit"),  # type: ignore[arg-type]
    (lambda: Oscillating(1.0, seconds(5), 1.0), "damping", "below 1"),
    (lambda: Oscillating(1.0, seconds(5), 0.0), "damping", "above 0"),
    (lambda: Integrating(Amount(0, "/s")), "slope", "not 0"),
    (lambda: Integrating(Amount(1, "s")), "slope", "/s, /min or /h"),
    (lambda: Vessel(0.0, Amount(1, "/h")), "volume", "above 0"),
    (lambda: Vessel(1.0, Amount(0, "/h")), "flow", "not 0"),
    (lambda: EqualLags(1.0, seconds(1), 0), "lags", "at least 1"),
    (lambda: EqualLags(1.0, seconds(1), 21), "lags", "at most 20"),
    (lambda: EqualLags(1.0, seconds(1), 2.5), "lags", "2.5 is not a whole number"),
    (lambda: Formula("1/(s + 1"), "formula", "column 3"),
    (lambda: Formula("__import__('os')"), "formula", "column 1"),
    (lambda: Formula("1/(s+1)", "day"), "time_unit", "s, min or h"),
)


@pytest.mark.parametrize(("make", "key", "words"), REFUSED)
def test_refused_fields_are_named(make: Callable[[], object], key: str, words: str) -> None:
    with pytest.raises(InputError) as refused:
        make()
    assert [p.key for p in refused.value.problems] == [key]
    assert words in str(refused.value)


def test_every_fault_of_a_shape_is_told_at_once() -> None:
    with pytest.raises(InputError) as refused:
        FirstOrder(0.0, seconds(-1), seconds(-2))
    assert [p.key for p in refused.value.problems] == ["gain", "time_constant", "dead_time"]


@pytest.mark.parametrize(
    ("text", "shape"),
    [
        (
            "first-order gain=1.8, time_constant=40 s, dead_time=0.1 min",
            FirstOrder(1.8, seconds(40), Amount(0.1, "min")),
        ),
        ("first-order gain=1.8, time_constant=40 s", FirstOrder(1.8, seconds(40))),
        ("vessel volume=2, flow=-40 /h", Vessel(2.0, Amount(-40, "/h"))),
        ("equal-lags gain=1, time_constant=3 s, lags=4", EqualLags(1.0, seconds(3), 4.0)),
        ("2/(3 s + 1)", Formula("2/(3 s + 1)", "min")),
    ],
)
def test_a_shape_is_read_from_one_line(text: str, shape: Shape) -> None:
    assert read_function(text, "min") == shape


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("first-order gain=1.8", "lacks time_constant; write first-order time_constant=..."),
        ("first-order gian=1.8", "did you mean 'gain'?"),
        ("first-order gain", "is no value of the shape first-order"),
        ("first-order gain=x, time_constant=1 s", "gain: must be a number"),
        ("first-order gain=1, time_constant=0 s", "time_constant: 0 is outside"),
        ("fisrt-order gain=1", "column 1"),
    ],
)
def test_a_line_that_is_no_shape_says_what_is_missing(text: str, words: str) -> None:
    with pytest.raises(InputError) as refused:
        read_function(text)
    assert words in str(refused.value)


def test_only_the_vessel_is_in_percent() -> None:
    assert [name for name, shape in SHAPES.items() if shape.in_percent] == ["vessel"]


def test_twenty_equal_lags_keep_their_poles() -> None:
    poles = EqualLags(1.0, seconds(3), 20).transfer().poles()
    # exact
    assert poles == (complex(-1.0 / 3.0),) * 20
