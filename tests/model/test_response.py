"""Open-loop responses: closed forms, a fine integration, and what may not be asked."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from workbench.errors import ModelError
from workbench.model.formula import parse_formula
from workbench.model.response import (
    INPUTS,
    Signal,
    final_value,
    held_response,
    impulse_response,
    step_response,
)
from workbench.model.transfer import TransferFunction

TIMES = np.array([0.0, 0.5, 2.0, 2.5, 3.0, 7.0, 20.0, 20.1, 90.0])
LAG = TransferFunction.ratio((3.0,), [(4.0, 1.0)], dead_time=2.0)


def _after(
    times: np.ndarray[tuple[int], np.dtype[np.float64]], delay: float
) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    return np.maximum(times - delay, 0.0)


def test_step_of_a_lag_with_dead_time() -> None:
    # exact: 3 (1 - exp(-(t - 2)/4))
    expected = 3.0 * (1.0 - np.exp(-_after(TIMES, 2.0) / 4.0))
    assert np.allclose(step_response(LAG, TIMES), expected, rtol=0, atol=1e-14)


def test_nothing_moves_before_the_dead_time_is_over() -> None:
    early = np.array([0.0, 1.0, 1.999999999])
    assert step_response(LAG, early).tolist() == [0.0, 0.0, 0.0]


def test_a_step_through_a_biproper_plant_jumps_at_once() -> None:
    # exact: (6 s + 1)/(2 s + 1) steps to 3 and falls to 1 with time constant 2
    plant = TransferFunction.ratio((6.0, 1.0), [(2.0, 1.0)], dead_time=1.0)
    times = np.array([0.5, 1.0, 3.0])
    expected = [0.0, 3.0, 1.0 + 2.0 * math.exp(-1.0)]
    assert step_response(plant, times) == pytest.approx(expected, abs=1e-14)


def test_several_dead_times_add() -> None:
    # exact: pulse of 2 s through an integrator
    plant = parse_formula("(1 - exp(-2 s))/s")
    assert step_response(plant, TIMES) == pytest.approx(np.minimum(TIMES, 2.0), abs=1e-12)


def test_impulse_of_an_oscillating_plant() -> None:
    # exact: exp(-d w t) sin(w sqrt(1 - d^2) t) w/sqrt(1 - d^2)
    d, w = 0.3, 0.7
    plant = TransferFunction.ratio((1.0,), [(1.0 / w**2, 2 * d / w, 1.0)])
    root = math.sqrt(1 - d * d)
    expected = w / root * np.exp(-d * w * TIMES) * np.sin(w * root * TIMES)
    assert impulse_response(plant, TIMES) == pytest.approx(expected, abs=1e-13)


@pytest.mark.parametrize(
    ("signal", "value"),
    [
        # exact: the input itself
        (Signal("step", 2.0, at=1.0), lambda t: 2.0 * (t >= 1.0)),
        (Signal("ramp", 0.5, at=1.0), lambda t: 0.5 * _after(t, 1.0)),
        (Signal("pulse", 2.0, at=1.0, width=3.0), lambda t: 2.0 * ((t >= 1.0) & (t < 4.0))),
        (
            Signal("doublet", 2.0, at=1.0, width=3.0),
            lambda t: 2.0 * ((t >= 1.0) & (t < 4.0)) - 2.0 * ((t >= 4.0) & (t < 7.0)),
        ),
        (
            Signal("sine", 2.0, at=1.0, period=5.0),
            lambda t: 2.0 * np.sin(2 * math.pi * _after(t, 1.0) / 5.0),
        ),
    ],
    ids=lambda x: x.kind if isinstance(x, Signal) else "",
)
def test_an_input_is_what_its_name_says(signal: Signal, value: object) -> None:
    assert callable(value)
    times = np.linspace(0.0, 20.0, 81)
    assert signal.values(times) == pytest.approx(value(times), abs=1e-12)


def test_an_impulse_has_no_values_to_show() -> None:
    assert Signal("impulse").values(TIMES).tolist() == [0.0] * len(TIMES)


def test_every_input_can_be_named() -> None:
    for kind in INPUTS:
        assert Signal(kind).transform().numerator


@pytest.mark.parametrize(
    ("name", "value"), [("width", 0.0), ("width", -1.0), ("period", 0.0), ("width", math.nan)]
)
def test_a_width_or_period_of_nothing_is_refused(name: str, value: float) -> None:
    signal = Signal("pulse", width=value) if name == "width" else Signal("sine", period=value)
    with pytest.raises(ModelError, match=f"a {name} of"):
        signal.transform()


def test_ramp_and_sine_through_a_lag() -> None:
    # exact: ramp answer t - T + T exp(-t/T); sine by undetermined coefficients
    plain = TransferFunction.ratio((1.0,), [(4.0, 1.0)])
    ramp = impulse_response(plain * Signal("ramp").transform(), TIMES)
    assert ramp == pytest.approx(TIMES - 4.0 + 4.0 * np.exp(-TIMES / 4.0), abs=1e-12)
    w, t = 2 * math.pi / 5.0, 4.0
    sine = impulse_response(plain * Signal("sine", period=5.0).transform(), TIMES)
    size = 1.0 + (w * t) ** 2
    expected = (np.sin(w * TIMES) - w * t * np.cos(w * TIMES) + w * t * np.exp(-TIMES / t)) / size
    assert sine == pytest.approx(expected, abs=1e-12)


def test_an_infinite_spike_is_refused() -> None:
    with pytest.raises(ModelError, match="infinite spike; add a lag, or use a step"):
        impulse_response(TransferFunction.ratio((6.0, 1.0), [(2.0, 1.0)]), TIMES)


def test_a_dead_time_inside_a_feedback_is_refused() -> None:
    with pytest.raises(ModelError, match="inner feedback"):
        step_response(LAG.feedback(), TIMES)


@given(st.lists(st.floats(0.0, 50.0), min_size=1, max_size=12, unique=True).map(sorted))
def test_a_response_does_not_depend_on_which_instants_are_asked_for(times: list[float]) -> None:
    together = step_response(LAG, np.array(times))
    alone = [float(step_response(LAG, np.array([t]))[0]) for t in times]
    assert together == pytest.approx(alone, abs=1e-11)


def test_a_held_input_is_a_sum_of_steps() -> None:
    # other route: superposition of step responses, each moved to its moment
    moments, values = np.array([0.0, 3.0, 4.5, 10.0]), np.array([1.0, -2.0, 0.5, 0.5])
    plant = LAG + TransferFunction.ratio((2.0, 1.0), [(5.0, 1.0)], dead_time=0.7)
    times = np.array([0.0, 0.7, 2.0, 3.0, 3.7, 5.2, 9.0, 12.0, 40.0])
    expected = np.zeros(len(times))
    for moment, move in zip(moments, np.diff(values, prepend=0.0), strict=True):
        later = np.flatnonzero(times >= moment)
        expected[later] += move * step_response(plant, times[later] - moment)
    assert held_response(plant, moments, values, times) == pytest.approx(expected, abs=1e-12)


@given(st.floats(-100.0, 100.0), st.floats(0.1, 50.0), st.floats(0.0, 30.0))
def test_the_final_value_is_where_the_step_goes(gain: float, lag: float, delay: float) -> None:
    plant = TransferFunction.ratio((gain,), [(lag, 1.0), (1.0, 1.0)], delay)
    limit = final_value(plant * Signal("step").transform()).value
    assert limit is not None
    settled = float(step_response(plant, np.array([delay + 60.0 * max(lag, 1.0)]))[0])
    assert settled == pytest.approx(limit, rel=1e-9, abs=1e-12)
