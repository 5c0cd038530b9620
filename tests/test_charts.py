"""Charts: whatever the numbers are, a picture of exactly the size asked for."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from workbench.charts import (
    INKS,
    PINS,
    STYLES,
    Curve,
    Pane,
    angle_ticks,
    decade_ticks,
    draw,
    round_ticks,
    thin,
)

Floats = NDArray[np.float64]

TIME = np.linspace(0.0, 900.0, 901)


def answer(lag: float) -> Floats:
    """A first-order answer from 120 to 125."""
    values: Floats = 125.0 - 5.0 * np.exp(-TIME / lag)
    return values


def panes(*, pinned: Floats | None = None) -> tuple[Pane, ...]:
    """A trend as the screen draws it."""
    earlier = () if pinned is None else (Curve(TIME, pinned, "pinned", "pinned"),)
    setpoint = Curve(TIME, np.full(TIME.size, 125.0), "setpoint", "SP")
    pv = Curve(TIME, answer(80.0), "pv", "PV")
    output = Curve(TIME, 42.0 + 8.0 * np.exp(-TIME / 50.0), "output", "OP")
    return (
        Pane("PV degC", (*earlier, setpoint, pv), (0.0, 250.0), 2.0),
        Pane("OP %", (output,), (0.0, 100.0), 1.0),
    )


@pytest.mark.parametrize("size", [(24, 6), (46, 11), (80, 24), (160, 50), (300, 100)])
@pytest.mark.parametrize("ascii_only", [False, True])
def test_a_picture_has_exactly_the_size_asked_for(size: tuple[int, int], ascii_only: bool) -> None:
    picture = draw(panes(pinned=answer(40.0)), *size, ascii_only=ascii_only)
    assert [len(row) for row in picture.rows] == [size[0]] * size[1]
    assert picture.styles.shape == (size[1], size[0])
    if ascii_only:
        assert all(" " <= character <= "~" for row in picture.rows for character in row)


@pytest.mark.parametrize("size", [(0, 0), (1, 1), (23, 6), (24, 5), (10, 40)])
def test_what_is_too_small_says_so_as_far_as_there_is_room(size: tuple[int, int]) -> None:
    rows = draw(panes(), *size).rows
    assert len(rows) == size[1]
    assert rows == () or rows[0] == "too small to draw"[: size[0]].ljust(size[0])


def test_the_pinned_trend_is_told_apart_without_colour() -> None:
    for ascii_only in (False, True):
        rows = draw(panes(pinned=answer(20.0)), 80, 24, ascii_only=ascii_only).rows
        body = "\n".join(rows[1:-2])
        assert "o" in body
        without = "\n".join(draw(panes(), 80, 24, ascii_only=ascii_only).rows[1:-2])
        assert "o" not in without


def test_no_two_curves_of_a_pane_share_a_marker() -> None:
    for together in (
        (*PINS, "setpoint", "pv"),
        (*PINS, "output"),
        (*PINS, "reference", "response", "gain-margin", "phase-margin", "peak"),
        ("record", "fit"),
    ):
        assert len({INKS[name].unicode for name in together}) == len(together)
        assert len({INKS[name].ascii for name in together}) == len(together)


def test_the_legend_names_unit_and_curves() -> None:
    rows = draw(panes(pinned=answer(40.0)), 80, 24).rows
    for words in ("PV degC", "pinned", "SP", "PV"):
        assert words in rows[0]
    assert any("OP %" in row for row in rows)


def test_a_constant_lies_on_the_row_of_its_tick() -> None:
    """The ticks are ours, the curves plotext's: both must mean the same row."""
    x = np.array([0.0, 100.0])
    for height in (9, 14, 23, 41):
        for value in (20.0, 40.0, 60.0, 80.0):
            ends = Curve(x, np.array([0.0, 100.0]), "pinned", "ends")
            line = Curve(x, np.full(2, value), "pv", "PV")
            rows = draw((Pane("PV", (ends, line)),), 60, height, ascii_only=True).rows
            row = next((r for r in rows if r.lstrip().startswith(f"{value:.0f}+")), None)
            if row is not None:
                assert "****" in row


def test_time_is_shown_in_the_unit_that_reads_best() -> None:
    for length, unit in ((500.0, "s"), (900.0, "min"), (40_000.0, "h")):
        curve = Curve(np.array([0.0, length]), np.array([0.0, 1.0]), "pv", "PV")
        rows = draw((Pane("PV", (curve,)),), 60, 12).rows
        assert rows[-1].rstrip().endswith(f" {unit}")


def test_the_axis_holds_still_while_a_curve_moves_a_little() -> None:
    def gutter(lag: float) -> list[str]:
        curve = Curve(TIME, answer(lag), "pv", "PV")
        return [row[:5] for row in draw((Pane("PV", (curve,)),), 60, 20).rows]

    assert gutter(80.0) == gutter(80.0 * 1.02)


def test_a_runaway_does_not_flatten_the_axis_beyond_one_span() -> None:
    curve = Curve(TIME, 120.0 + np.exp(TIME / 10.0), "pv", "PV")
    rows = draw((Pane("PV degC", (curve,), (0.0, 250.0)),), 60, 20).rows
    labels = [float(row.partition("┤")[0]) for row in rows[1:-2] if "┤" in row]
    # One span of 250 above the range of 0 to 250, the margin of the axis included.
    assert max(labels) <= 550


# --- ticks ---------------------------------------------------------------------------------------


@given(
    low=st.floats(-1e9, 1e9),
    span=st.floats(1e-6, 1e9),
    most=st.integers(2, 20),
)
def test_ticks_are_few_round_inside_and_told_apart(low: float, span: float, most: int) -> None:
    values, labels = round_ticks(low, low + span, most)
    assert len(values) == len(labels) <= most + 1
    tolerance = 1e-6 * max(span, abs(low))
    assert all(low - tolerance <= value <= low + span + tolerance for value in values)
    if span > 1e-4 * abs(low):
        assert len(set(labels)) == len(labels)


def test_large_ticks_close_together_keep_the_digits_that_tell_them_apart() -> None:
    # exact: steps of 1000 about a million want four digits
    _, labels = round_ticks(994_000.0, 1_001_000.0, 7)
    assert labels[:2] == ("9.94e+05", "9.95e+05")
    assert labels[-2:] == ("1e+06", "1.001e+06")


def test_ticks_are_one_two_or_five_times_a_power_of_ten() -> None:
    for high in (0.37, 1.0, 7.3, 99.0, 123.4, 5e4):
        values, _ = round_ticks(0.0, high, 6)
        step = values[1] - values[0]
        assert f"{step:.1e}"[0] in "125"
        assert float(f"{step:.1e}") == pytest.approx(step)


@settings(max_examples=60)
@given(low=st.floats(-290.0, 290.0), span=st.floats(1e-3, 10.0), most=st.integers(2, 20))
def test_ticks_of_logarithms_are_inside_and_as_they_say(low: float, span: float, most: int) -> None:
    values, labels = decade_ticks(low, low + span, most)
    assert len(values) == len(labels) <= most + 1
    assert all(low - 1e-6 <= value <= low + span + 1e-6 for value in values)
    for value, label in zip(values, labels, strict=True):
        # exact: a label is the number of which the place is the logarithm
        if span >= 1.0:
            assert math.log10(float(label)) == pytest.approx(value, abs=1e-3)


def test_ticks_of_logarithms_are_round_numbers() -> None:
    assert decade_ticks(-3.1, 0.2, 4)[1] == ("0.001", "0.01", "0.1", "1")
    assert decade_ticks(-1.05, 0.05, 6)[1] == ("0.1", "0.2", "0.5", "1")
    assert decade_ticks(0.0, 0.3, 6)[1] == ("1.0", "1.2", "1.4", "1.6", "1.8")


@settings(max_examples=60)
@given(low=st.floats(-1e4, 1e4), span=st.floats(0.1, 1e5), most=st.integers(2, 20))
def test_ticks_of_angles_are_few_and_inside(low: float, span: float, most: int) -> None:
    values, labels = angle_ticks(low, low + span, most)
    assert len(values) == len(labels) <= most + 1
    assert all(low - 1e-3 * span <= value <= low + span * 1.001 for value in values)


# --- several pins, a cursor, a stretch ---------------------------------------------------------


@pytest.mark.parametrize("ascii_only", [False, True])
def test_pins_that_lie_on_each_other_take_turns(ascii_only: bool) -> None:
    curves = tuple(Curve(TIME, answer(80.0), ink, "pinned") for ink in PINS)
    row = next(
        row
        for row in draw((Pane("PV", curves),), 80, 20, ascii_only=ascii_only).rows
        if row.count("o") > 8
    )
    body = row[row.index("o") :].rstrip()
    assert min(body.count(mark) for mark in "ox+") >= 0.25 * len(body)


def test_the_legend_shows_every_pin_with_one_word_for_all() -> None:
    curves = tuple(
        Curve(TIME, answer(20.0 * k), ink, "" if k < 3 else "pinned")
        for k, ink in enumerate(PINS, start=1)
    )
    assert "oo xx ++ pinned" in draw((Pane("PV", curves),), 60, 12).rows[0]


@pytest.mark.parametrize("ascii_only", [False, True])
def test_the_cursor_stands_on_its_place_in_every_pane_and_under_the_curves(
    ascii_only: bool,
) -> None:
    without = draw(panes(), 80, 24, ascii_only=ascii_only)
    shown = draw(panes(), 80, 24, cursor=450.0, ascii_only=ascii_only)
    changed = shown.characters != without.characters
    columns = np.flatnonzero(changed.any(axis=0))
    gutter = without.rows[-2].index("+" if ascii_only else "└")
    # exact: half way along the axis, whose first column follows the frame
    assert columns.tolist() == [gutter + 1 + round(0.5 * (80 - gutter - 2))]
    assert changed.sum() > 15
    assert not changed[shown.styles == STYLES.index("pv")].any()
    outside = draw(panes(), 80, 24, cursor=5000.0, ascii_only=ascii_only)
    assert (outside.characters == without.characters).all()


def test_the_axis_is_about_the_stretch_shown() -> None:
    whole = draw(panes(), 80, 24).rows
    late = draw(panes(), 80, 24, x_limits=(800.0, 900.0)).rows
    assert "120┤" in "".join(whole)
    # exact: from 800 s on the answer is within 0.0003 of 125
    assert "120┤" not in "".join(late)


# --- thinning ------------------------------------------------------------------------------------


@settings(max_examples=50)
@given(st.integers(1, 3000), st.integers(2, 200), st.integers(0, 2**32 - 1))
def test_thinning_keeps_peaks_and_order_with_two_points_a_column(
    count: int, columns: int, seed: int
) -> None:
    y = np.random.default_rng(seed).uniform(-0.9, 1.9, count)
    x = np.linspace(0.0, 1.0, count)
    kept_x, kept_y = thin(x, y, columns)
    assert kept_x.size <= 2 * columns + 2
    assert kept_y.max() == y.max()
    assert kept_y.min() == y.min()
    assert np.all(np.diff(kept_x) >= 0)
    assert (kept_x[0], kept_x[-1]) == (x[0], x[-1])


def test_thinning_drops_what_is_no_number_and_clips_what_is_far_off() -> None:
    x = np.array([0.0, 0.1, np.nan, 0.3, 0.4, 9.0])
    y = np.array([np.nan, np.inf, 1.0, -1e300, 0.5, 0.5])
    kept_x, kept_y = thin(x, y, 10)
    assert kept_x.tolist() == [0.1, 0.3, 0.4]
    assert kept_y.tolist() == [2.0, -1.0, 0.5]


# --- anything at all -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    "y",
    [
        np.full(50, np.nan),
        np.full(50, np.inf),
        np.zeros(50),
        np.full(50, 1e300),
        np.array([]),
        np.array([1.0]),
    ],
    ids=["nan", "inf", "constant", "1e300", "empty", "one point"],
)
def test_odd_curves_still_give_axes(y: Floats) -> None:
    picture = draw((Pane("PV", (Curve(np.arange(y.size, dtype=float), y, "pv", "PV"),)),), 60, 12)
    assert "└" in picture.rows[-2]


def test_styles_name_every_ink() -> None:
    assert set(INKS) < set(STYLES)
    assert draw(panes(), 60, 12).styles.max() < len(STYLES)
