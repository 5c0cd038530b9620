"""A plant drawn as blocks is the function that its drawing says."""

from __future__ import annotations

import pytest

from workbench.errors import InputError
from workbench.model.blocks import (
    MOST_BLOCKS,
    Block,
    Blocks,
    format_blocks,
    parse_blocks,
    parse_plant,
)
from workbench.model.formula import parse_formula
from workbench.model.plant import FirstOrder, Formula
from workbench.model.stability import plant_verdict
from workbench.units import Amount

V, P, F = "1/(2 s + 1)", "1.8 exp(-6 s)/(40 s + 1)", "0.5/(3 s + 1)"
POINTS = (0.02j, 0.3 + 0.4j, 1.7j)


def _values(formula: str, s: complex) -> complex:
    return parse_formula(formula)(s)


@pytest.mark.parametrize("s", POINTS)
def test_blocks_are_joined_as_they_are_drawn(s: complex) -> None:
    # exact: plain arithmetic on the values of the blocks
    v, p, f = (_values(formula, s) for formula in (V, P, F))
    drawings = {
        f"valve: {V}; process: {P}": v * p,
        f"valve: {V}; process: {P}; leak beside process: {F}": v * (p + f),
        f"valve: {V}; process: {P}; leak less process: {F}": v * (p - f),
        f"valve: {V}; process: {P}; slave around valve: {F}": v / (1 + v * f) * p,
        f"valve: {V}; process: {P}; slave around valve to process: {F}": v * p / (1 + v * p * f),
        f"valve: {V}; process: {P}; a around valve: {F}; b around valve to process: {V}": (
            v / (1 + v * f) * p / (1 + v / (1 + v * f) * p * v)
        ),
    }
    for drawing, expected in drawings.items():
        assert parse_blocks(drawing).transfer()(s) == pytest.approx(expected, rel=1e-12), drawing


@pytest.mark.parametrize("s", POINTS)
def test_the_upset_enters_where_it_is_said_to(s: complex) -> None:
    # exact: plain arithmetic on the values of the blocks
    v, p, f = (_values(formula, s) for formula in (V, P, F))
    drawings = {
        f"valve: {V}; process: {P}": v * p,
        f"valve: {V}; process: {P}; upset before process": p,
        f"valve: {V}; process: {P}; slave around valve: {F}; upset before process": p,
        f"valve: {V}; process: {P}; slave around valve to process: {F}; upset before process": (
            p / (1 + v * p * f)
        ),
    }
    for drawing, expected in drawings.items():
        assert parse_blocks(drawing).load()(s) == pytest.approx(expected, rel=1e-12), drawing


def test_a_dead_time_inside_an_inner_loop_is_exact() -> None:
    plant = parse_blocks(f"valve: {V}; process: {P}; slave around valve to process: 9").transfer()
    assert plant.has_delayed_feedback
    # exact: 1.8 * 9 is far above what the dead time allows
    assert not plant_verdict(plant).stable


@pytest.mark.parametrize(
    "drawing",
    [
        f"valve: {V}; process: {P}",
        f"valve: {V}; process: {P}; leak less process: {F}; slave around valve to process: {F}",
        f"valve: {V}; process: {P}; leak beside process: {F}; upset before process",
    ],
)
def test_a_drawing_written_is_the_drawing_read(drawing: str) -> None:
    blocks = parse_blocks(drawing, "min")
    assert format_blocks(blocks) == drawing
    assert parse_blocks(format_blocks(blocks), "min") == blocks


def test_a_unit_of_time_counts_in_every_block() -> None:
    slow = parse_blocks(f"valve: {V}; process: {P}", "min").transfer()
    assert slow.dead_time == 360.0


def test_a_block_may_be_a_shape_with_its_values() -> None:
    plant = parse_blocks("valve: first-order gain=2, time_constant=3 s; process: 1/(5 s + 1)")
    assert plant.transfer().gain().value == 2.0


def test_one_line_is_blocks_a_shape_or_a_formula() -> None:
    assert isinstance(parse_plant(f"valve: {V}"), Blocks)
    assert parse_plant("first-order gain=2, time_constant=3 s") == FirstOrder(2.0, Amount(3, "s"))
    assert parse_plant(P, "min") == Formula(P, "min")


@pytest.mark.parametrize(
    ("drawing", "words"),
    [
        ("", "a plant without blocks"),
        ("valve", "has no colon"),
        (f"valve: {V}; valve: {P}", "two blocks are called 'valve'"),
        (f"valve: {V}; leak beside vavle: {P}", "did you mean 'valve'?"),
        (f"valve: {V}; leak beside x: {P}", "the path has valve"),
        (f"leak beside valve: {P}", "no block stands on the path itself"),
        (f"a: {V}; b: {P}; x around b to a: {F}", "goes around backwards"),
        (f"a: {V}; b: {P}; c: {F}; x around a to b: 1; y around b to c: 1", "overlap"),
        (f"a: {V}; upset before z", "names the block 'z'"),
        ("valve: 1/(2 s +", "block 'valve': column 3"),
        ("4: 1/(s + 1)", "is no name for a block"),
        ("a: -1; x around a: 1", "leaves nothing to divide by"),
        ("; ".join(f"b{n}: 1/(s+1)" for n in range(MOST_BLOCKS + 1)), "use at most 40"),
    ],
)
def test_a_drawing_that_cannot_be_says_why(drawing: str, words: str) -> None:
    with pytest.raises(InputError) as refused:
        parse_blocks(drawing)
    assert words in str(refused.value)


@pytest.mark.parametrize(
    ("block", "words"),
    [
        (lambda: Block("a", V, beside="b", around="c"), "keep one of beside and around"),
        (lambda: Block("a", V, sign="-"), "put the minus in the formula"),
        (lambda: Block("a b!", V), "use letters and digits"),
    ],
)
def test_a_block_that_cannot_be_says_why(block: object, words: str) -> None:
    assert callable(block)
    with pytest.raises(InputError, match=words):
        block()
