"""Compensation and cascade as loops: published figures, closed forms, and plain complex numbers."""

from __future__ import annotations

import cmath
import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from workbench.errors import InputError
from workbench.model.feedback import Loop
from workbench.model.feedforward import ideal_feedforward
from workbench.model.pid import Gains
from workbench.model.robustness import analogue_margins, sampled_margins
from workbench.model.structures import NOTHING, Structure, after_upset, answer
from workbench.model.transfer import TransferFunction

POINTS = (0.003j, 0.11j, 2.7j, 0.05 + 0.4j)


def lag(gain: float, time: float, dead_time: float = 0.0) -> TransferFunction:
    return TransferFunction.ratio((gain,), [(time, 1.0)], dead_time)


DEAD_TIMES = st.just(0.0) | st.floats(0.01, 1.0)


def smith(closed_loop_time: float, gain: float = 2.0, time: float = 3.0) -> Structure:
    """The exact model of a first-order plant with dead time 1 s, K = T/(k lambda), Ti = T."""
    plant = lag(gain, time, 1.0)
    k = time / (gain * closed_loop_time)
    return Structure(plant, plant, Gains(k, k / time), model=plant)


# --- compensation with an exact model ------------------------------------------------------------

SMITH = (
    # published rule (O.J.M. Smith, Chem. Eng. Prog. 53(5), 1957, 217-219, from memory), values
    # recomputed: lambda, Ms, delay margin of the plant alone
    (0.5, 1.680988, 1.6272353),
    (1.0, 1.4818714, 2.348451),
    (2.0, 1.3060774, 3.8564082),
)


@pytest.mark.parametrize(("closed_loop_time", "peak", "delay"), SMITH)
def test_an_exact_model_in_figures(closed_loop_time: float, peak: float, delay: float) -> None:
    margins = analogue_margins(smith(closed_loop_time))
    assert margins.max_sensitivity.value == pytest.approx(peak, abs=1e-6)
    assert margins.delay_margin_s.value == pytest.approx(delay, abs=1e-6)


@given(st.floats(0.2, 5.0), st.floats(0.5, 3.0), st.floats(0.5, 20.0), st.sampled_from(POINTS))
def test_an_exact_model_leaves_the_dead_time_outside(
    closed_loop_time: float, gain: float, time: float, s: complex
) -> None:
    # exact: T = exp(-s)/(lambda s + 1) and S = 1 - T, whence the IAE of a setpoint step 1 + lambda
    loop = smith(closed_loop_time, gain, time)
    wanted = cmath.exp(-s) / (closed_loop_time * s + 1.0)
    assert loop.from_setpoint()(s) == pytest.approx(wanted, rel=1e-10)
    assert 1.0 / (1.0 + loop.open_loop()(s)) == pytest.approx(1.0 - wanted, rel=1e-9)


def test_an_integrating_plant_does_not_come_back_after_a_load() -> None:
    plant = TransferFunction.ratio((0.1,), [(1.0, 0.0)], 4.0)
    loop = Structure(plant, plant, Gains(2.0, 0.1), model=plant)
    assert analogue_margins(loop).stable
    # exact: G0 = 0.1/s and C = 2 + 0.1/s give y/d -> 0.1 4 at s = 0, the slope times the dead time
    assert loop.from_load().gain().value == pytest.approx(0.4, rel=1e-9)
    assert loop.from_setpoint().gain().value == pytest.approx(1.0, rel=1e-12)


# --- compensation with any model -----------------------------------------------------------------


@st.composite
def compensated(draw: st.DrawFn) -> Structure:
    one, other = st.floats(0.5, 3.0), st.floats(0.5, 20.0)
    plant = lag(draw(one), draw(other), 5.0 * draw(DEAD_TIMES))
    model = lag(draw(one), draw(other), 5.0 * draw(DEAD_TIMES))
    if draw(st.booleans()):
        model = TransferFunction(
            tuple(replace(term, dead_time=2.0 * term.dead_time) for term in plant.numerator),
            plant.denominator,
        )
    return Structure(
        plant,
        lag(draw(one), draw(other), 5.0 * draw(DEAD_TIMES)),
        Gains(
            draw(st.floats(0.1, 2.0)), draw(st.floats(0.01, 0.5)), draw(st.floats(0.0, 2.0)), 0.4
        ),
        reverse=draw(st.booleans()),
        pv_filter=draw(st.sampled_from([0.0, 1.5])),
        model=model,
    )


@given(compensated(), st.sampled_from(POINTS))
def test_a_compensated_loop_is_its_block_diagram(loop: Structure, s: complex) -> None:
    # other route: the blocks in plain complex numbers
    assert loop.model is not None
    g, gd, m = (f(s) for f in (loop.plant, loop.load, loop.model))
    m0 = m * cmath.exp(loop.model.dead_time * s)
    q = loop.sign * loop.gains.from_pv()(s) * loop.filter()(s)
    inside = 1.0 + q * (m0 - m)
    whole = 1.0 + q * (g + m0 - m)
    forward = loop.sign * loop.gains.from_setpoint()(s) * g
    size = (1.0 + abs(q) * (abs(g) + abs(m0) + abs(m))) / abs(whole)
    assert loop.open_loop()(s) == pytest.approx(q * g / inside, rel=1e-8 * size)
    assert loop.from_setpoint()(s) == pytest.approx(forward / whole, rel=1e-9 * size)
    assert loop.from_load()(s) == pytest.approx(gd * inside / whole, rel=1e-8 * size)


@given(compensated())
def test_a_model_without_dead_time_changes_nothing(loop: Structure) -> None:
    assert loop.model is not None
    model = TransferFunction(
        tuple(replace(term, dead_time=0.0) for term in loop.model.numerator), loop.model.denominator
    )
    one, other = replace(loop, model=model), loop.around(loop.plant)
    for s in POINTS:
        assert one.open_loop()(s) == pytest.approx(other.open_loop()(s), rel=1e-12)
        assert one.from_load()(s) == pytest.approx(other.from_load()(s), rel=1e-9)


def test_too_long_a_dead_time_in_the_model_costs_stability() -> None:
    good = smith(0.25)
    assert analogue_margins(good).stable
    wrong = replace(good, plant=lag(2.0, 3.0, 1.6))
    # The delay margin says where: beyond it the loop is lost, as its verdict says by another route.
    margin = analogue_margins(good).delay_margin_s.value
    assert margin is not None
    assert analogue_margins(wrong).stable is (margin > 0.6)
    for share, stable in ((0.99, True), (1.01, False)):
        moved = replace(good, plant=lag(2.0, 3.0, 1.0 + share * margin))
        assert analogue_margins(moved).stable is stable


# --- compensation as sampled ---------------------------------------------------------------------


def test_an_exact_model_as_sampled() -> None:
    # exact, in z with a = exp(-h/T): P0 = k (1 - a)/(z - a), S = 1 - z^-d Q P0/(1 + Q P0)
    h, scans, k, time = 0.5, 6, 2.0, 4.0
    plant = lag(k, time, scans * h)
    gains = Gains(0.8, 0.2)
    loop = Structure(plant, plant, gains, scan=h, model=plant)
    z = np.exp(1j * np.array([0.01, 0.4, 2.0]))
    a = math.exp(-h / time)
    p0 = k * (1.0 - a) / (z - a)
    q = gains.proportional + gains.integral * h * z / (z - 1.0)
    wanted = 1.0 - z**-scans * q * p0 / (1.0 + q * p0)
    found = 1.0 / (1.0 + loop.sampled().open_loop(z))
    assert np.abs(found - wanted).max() < 1e-12
    assert sampled_margins(loop).stable


def test_sampled_margins_come_near_the_analogue_ones_at_a_short_scan() -> None:
    loop = smith(1.0)
    wanted = analogue_margins(loop).max_sensitivity.value
    found = sampled_margins(replace(loop, scan=0.002)).max_sensitivity.value
    assert found == pytest.approx(wanted, rel=2e-3)


def test_the_sampled_gain_margin_is_where_the_sampled_loop_is_lost() -> None:
    loop = replace(smith(0.5), scan=0.2)
    margin = sampled_margins(loop).gain_margin.value
    assert margin is not None
    # The plant's gain alone, not the model's.
    for share, stable in ((0.999, True), (1.001, False)):
        moved = replace(loop, plant=lag(2.0 * share * margin, 3.0, 1.0))
        assert sampled_margins(moved).stable is stable


# --- what no controller can run ------------------------------------------------------------------


@pytest.mark.parametrize(
    ("model", "words"),
    [
        (TransferFunction.ratio((1.0,), [(5.0, -1.0)], 2.0), "is unstable"),
        (TransferFunction.ratio((3.0, 1.0)), "more leads than lags"),
        (lag(1.0, 5.0, 2.0).feedback(), "dead time inside a feedback"),
    ],
)
def test_a_model_that_cannot_be_run_is_refused(model: TransferFunction, words: str) -> None:
    plant = lag(2.0, 3.0, 1.0)
    with pytest.raises(InputError, match=words):
        Structure(plant, plant, Gains(1.0), model=model)


# --- cascade -------------------------------------------------------------------------------------


@st.composite
def cascades(draw: st.DrawFn) -> Structure:
    fast = lag(draw(st.floats(0.3, 2.0)), draw(st.floats(0.5, 3.0)), draw(DEAD_TIMES))
    slow = lag(draw(st.floats(0.5, 3.0)), draw(st.floats(8.0, 40.0)), 6.0 * draw(DEAD_TIMES))
    inner = Loop(
        fast,
        fast,
        Gains(draw(st.floats(0.1, 1.0)), draw(st.floats(0.05, 0.5)), setpoint_weight=0.5),
        reverse=draw(st.booleans()),
    )
    return Structure(
        slow,
        slow,
        Gains(draw(st.floats(0.2, 2.0)), draw(st.floats(0.01, 0.1)), 1.0, 0.3),
        pv_filter=draw(st.sampled_from([0.0, 1.0])),
        inner=inner,
    )


@given(cascades(), st.sampled_from(POINTS))
def test_a_cascade_is_its_block_diagram(loop: Structure, s: complex) -> None:
    # other route: the blocks in plain complex numbers
    inner = loop.inner
    assert inner is not None
    within = inner.sign * inner.gains.from_pv()(s) * inner.plant(s)
    through = inner.sign * inner.gains.from_setpoint()(s) * inner.plant(s) / (1.0 + within)
    back = loop.gains.from_pv()(s) * loop.filter()(s) * loop.plant(s)
    assert answer(inner)(s) == pytest.approx(through, rel=1e-9)
    assert loop.open_loop()(s) == pytest.approx(back * through, rel=1e-9)
    assert after_upset(inner)(s) == pytest.approx(inner.load(s) / (1.0 + within), rel=1e-9)


OUTER = Loop(lag(1.5, 20.0, 4.0), NOTHING, Gains(1.2, 0.06))


def over(inner: Loop) -> Structure:
    return Structure(OUTER.plant, OUTER.load, OUTER.gains, inner=inner)


def test_an_inner_loop_without_dead_time_is_a_lag() -> None:
    # exact: G2 = 2/(3 s + 1) under a gain of 4 is 8/(3 s + 9)
    single = replace(OUTER, plant=TransferFunction.ratio((8.0,), [(3.0, 9.0)]) * OUTER.plant)
    one = analogue_margins(over(Loop(lag(2.0, 3.0), NOTHING, Gains(4.0))))
    other = analogue_margins(single)
    assert one.max_sensitivity.value == pytest.approx(other.max_sensitivity.value, rel=1e-9)
    assert one.gain_margin.value == pytest.approx(other.gain_margin.value, rel=1e-9)
    assert one.delay_margin_s.value == pytest.approx(other.delay_margin_s.value, rel=1e-9)


def test_an_infinitely_fast_inner_loop_is_not_there() -> None:
    one = analogue_margins(over(Loop(lag(2.0, 3.0), NOTHING, Gains(3e7, 1e7))))
    other = analogue_margins(OUTER)
    assert one.max_sensitivity.value == pytest.approx(other.max_sensitivity.value, rel=1e-5)


def test_the_inner_integral_action_hides_no_root() -> None:
    # An uncancelled s would make every cascade with integral action inside look unstable.
    inner = Loop(lag(1.0, 2.0, 0.5), NOTHING, Gains(1.0, 0.4))
    assert analogue_margins(over(inner)).stable
    assert answer(inner).gain().value == pytest.approx(1.0)


def test_an_inner_loop_by_itself_leaves_the_outer_one_open() -> None:
    inner = Loop(lag(1.0, 2.0, 0.5), NOTHING, Gains(1.0, 0.4))
    assert replace(over(inner), inner_mode="manual").open_loop()(0.1j) == 0.0


@given(cascades())
def test_a_cascade_at_its_gain_margin_swings(loop: Structure) -> None:
    assert loop.inner is not None
    assume(loop.inner.reverse and analogue_margins(loop.inner).stable)
    margin = analogue_margins(loop).gain_margin.value
    assume(margin is not None and margin < 50.0)
    assert margin is not None
    for share, stable in ((0.98, True), (1.02, False)):
        g, more = loop.gains, share * margin
        scaled = replace(
            g,
            proportional=more * g.proportional,
            integral=more * g.integral,
            derivative=more * g.derivative,
        )
        assert analogue_margins(replace(loop, gains=scaled)).stable is stable


# --- margins of the whole, from the blocks in plain complex numbers -------------------------------


def scanned(open_loop: Callable[[complex], complex]) -> tuple[float, float, float, float]:
    """Ms, Mt, gain margin, phase margin [deg] of a block diagram, by a fine scan of frequency."""
    w = np.geomspace(1e-4, 30.0, 40_001)
    values = np.array([open_loop(1j * float(frequency)) for frequency in w])
    crossing = (values.imag[:-1] * values.imag[1:] < 0.0) & (values.real[1:] < 0.0)
    share = values.imag[:-1] / np.where(crossing, values.imag[:-1] - values.imag[1:], 1.0)
    real = values.real[:-1] + share * np.diff(values.real)
    limits = -1.0 / real[crossing]
    at_one = np.flatnonzero(np.diff(np.sign(np.abs(values) - 1.0)))
    angle = np.abs(np.degrees(np.angle(-values[at_one])))
    return (
        float((1.0 / np.abs(1.0 + values)).max()),
        float(np.abs(values / (1.0 + values)).max()),
        float(limits[limits > 1.0].min(initial=math.inf)),
        float(angle.min(initial=math.inf)),
    )


def agrees(loop: Loop, open_loop: Callable[[complex], complex]) -> None:
    margins = analogue_margins(loop)
    assert margins.stable, margins.reason
    peak, followed, gain, phase = scanned(open_loop)
    assert margins.max_sensitivity.value == pytest.approx(peak, rel=1e-4)
    assert margins.max_complementary_sensitivity.value == pytest.approx(followed, rel=1e-4)
    assert margins.gain_margin.value == pytest.approx(gain, rel=1e-3)
    assert margins.phase_margin_deg.value == pytest.approx(phase, rel=1e-2)


def first(gain: float, time: float, dead_time: float, s: complex) -> complex:
    """A lag with dead time, written out."""
    return gain * cmath.exp(-dead_time * s) / (time * s + 1.0)


def pid(gains: Gains, s: complex) -> complex:
    """The controller from the error, written out."""
    derivative = gains.derivative * s / (1.0 + gains.filter_time * s)
    return gains.proportional + gains.integral / s + derivative


@pytest.mark.parametrize(
    ("gain", "dead_time", "pv_filter"), [(1.0, 6.0, 0.0), (1.3, 7.5, 2.0), (0.8, 4.0, 0.0)]
)
def test_margins_of_a_compensated_loop_with_a_wrong_model(
    gain: float, dead_time: float, pv_filter: float
) -> None:
    # other route: Q G/(1 + Q (M0 - M)) in plain complex numbers; the model is 1.8, 40 s, 6 s
    gains = Gains(1.5, 0.05, 2.0, 0.4)
    plant = lag(1.8 * gain, 40.0, dead_time)
    loop = Structure(plant, plant, gains, pv_filter=pv_filter, model=lag(1.8, 40.0, 6.0))

    def open_loop(s: complex) -> complex:
        q = pid(gains, s) / (pv_filter * s + 1.0)
        ahead = first(1.8, 40.0, 0.0, s) - first(1.8, 40.0, 6.0, s)
        return q * first(1.8 * gain, 40.0, dead_time, s) / (1.0 + q * ahead)

    agrees(loop, open_loop)


@pytest.mark.parametrize("dead_time", [0.0, 1.5])
def test_margins_of_a_cascade(dead_time: float) -> None:
    # other route: C G T with T = C2 G2/(1 + C2 G2) in plain complex numbers, b = 0.6 inside
    within, outer = Gains(1.2, 0.4, setpoint_weight=0.6), Gains(1.4, 0.05, 3.0, 0.5)
    inner = Loop(lag(1.5, 4.0, dead_time), NOTHING, within)
    slow = lag(1.2, 30.0, 5.0)

    def open_loop(s: complex) -> complex:
        fast = first(1.5, 4.0, dead_time, s)
        asked = (0.6 * within.proportional + within.integral / s) * fast
        through = asked / (1.0 + pid(within, s) * fast)
        return pid(outer, s) * first(1.2, 30.0, 5.0, s) * through

    agrees(Structure(slow, slow, outer, inner=inner), open_loop)


def test_margins_of_a_compensated_cascade_with_feedforward() -> None:
    # other route: all of it in plain complex numbers; feedforward is outside the loop
    within, outer = Gains(2.0, 0.8), Gains(1.5, 0.06)
    inner = Loop(lag(1.0, 3.0, 0.5), NOTHING, within)
    slow, model = lag(1.2, 30.0, 5.0), lag(1.3, 32.0, 5.5)
    forward = ideal_feedforward(slow, lag(-0.7, 12.0, 6.0)).feedforward
    loop = Structure(slow, slow, outer, inner=inner, model=model, feedforward=forward)

    def open_loop(s: complex) -> complex:
        inside = pid(within, s) * first(1.0, 3.0, 0.5, s)
        met = first(1.2, 30.0, 5.0, s) * inside / (1.0 + inside)
        ahead = first(1.3, 32.0, 0.0, s) - first(1.3, 32.0, 5.5, s)
        return pid(outer, s) * met / (1.0 + pid(outer, s) * ahead)

    agrees(loop, open_loop)


# --- feedforward ---------------------------------------------------------------------------------


def test_feedforward_changes_the_upset_and_not_the_loop() -> None:
    plant, load = lag(2.0, 10.0, 3.0), lag(-1.5, 4.0, 5.0)
    ideal = ideal_feedforward(plant, load).feedforward
    single = Loop(plant, load, Gains(1.2, 0.08))
    whole = Structure(plant, load, single.gains, feedforward=ideal)
    half = replace(whole, feedforward=replace(ideal, gain=0.5 * ideal.gain))
    for s in POINTS:
        assert whole.open_loop()(s) == pytest.approx(single.open_loop()(s), rel=1e-12)
        assert whole.from_setpoint()(s) == pytest.approx(single.from_setpoint()(s), rel=1e-12)
        # exact: the ideal leaves nothing, half of it half
        assert abs(whole.from_load()(s)) < 1e-12
        assert half.from_load()(s) == pytest.approx(0.5 * single.from_load()(s), rel=1e-9)
