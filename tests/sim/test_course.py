"""What happens on the way: ramps, pulses, sines and records, modes, a plant that changes, noise."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from workbench.model.feedback import Loop
from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction
from workbench.sim.instruments import Instruments
from workbench.sim.loop import Trace, simulate
from workbench.sim.scenario import Events
from workbench.sim.valve import Valve
from workbench.units import Amount

Array = NDArray[np.float64]
LAG = TransferFunction.ratio((2.0,), [(10.0, 1.0)], 3.3)
OPEN = Loop(LAG, LAG, Gains(0.0), scan=1.0)
LOOP = Loop(LAG, LAG, Gains(0.8, 0.06), scan=1.0)


def at(trace: Trace, time: float) -> int:
    return int(np.argmin(np.abs(trace.time - time)))


def scans(trace: Trace) -> Array:
    """The output at every scan of 1 s."""
    rows = [at(trace, float(k)) for k in range(round(trace.time[-1]) + 1)]
    return trace.output[rows]


# --- upsets --------------------------------------------------------------------------------------


def lag_answer(shape: str, since: Array) -> Array:
    """Of 2/(10 s + 1) to a unit of each upset, at times after it arrives; exact."""
    step = 2.0 * (1.0 - np.exp(-since / 10.0))
    ramp = 2.0 * (since - 10.0 * (1.0 - np.exp(-since / 10.0)))
    if shape == "step":
        return np.where(since > 0.0, step, 0.0)
    if shape == "ramp":
        return np.where(since > 0.0, ramp, 0.0)
    w = 2.0 * math.pi / 25.0
    turned = 10.0 * w
    wave = np.sin(w * since) - turned * np.cos(w * since) + turned * np.exp(-since / 10.0)
    return np.where(since > 0.0, 2.0 / (1.0 + turned * turned) * wave, 0.0)


@pytest.mark.parametrize("shape", ["ramp", "pulse", "sine", "record"])
@pytest.mark.parametrize("direct", [False, True])
def test_an_upset_acts_at_its_true_instants(shape: str, direct: bool) -> None:
    # exact: the answers of a lag, shifted and added; `direct` adds a feedthrough of 0.5
    time = 25.0 if shape == "sine" else 20.0
    record = ((0.0, 1.0), (4.4, -0.5), (30.0, 0.25))
    load = LAG + TransferFunction.ratio((0.5,), [], 3.3) if direct else LAG
    events = Events(
        *(0.0, 0.0, 3.0, 5.6, 90.0), load_shape=shape, load_time=time, load_record=record
    )
    trace = simulate(replace(OPEN, load=load), events)
    since = trace.time - 5.6 - 3.3
    moves = {
        "ramp": ((0.05, 0.0, "ramp"), (-0.05, 20.0, "ramp")),
        "pulse": ((1.0, 0.0, "step"), (-1.0, 20.0, "step")),
        "sine": ((1.0, 0.0, "sine"),),
        "record": ((1.0, 0.0, "step"), (-1.5, 4.4, "step"), (0.75, 30.0, "step")),
    }[shape]
    expected = np.zeros(len(since))
    for size, late, kind in moves:
        expected += size * lag_answer(kind, since - late)
    if direct:
        plain = {
            "ramp": np.clip(since / 20.0, 0.0, 1.0),
            "pulse": np.where((since > 0) & (since < 20.0), 1.0, 0.0),
            "sine": np.where(since > 0, np.sin(2 * math.pi / 25.0 * since), 0.0),
            "record": np.select(
                [since < 0, since < 4.4, since < 30.0], [0.0, 1.0, -0.5], default=0.25
            ),
        }[shape]
        expected = expected + 0.5 * plain
    corners = 5.6 + 3.3 + np.array([0.0, 4.4, 20.0, 30.0])
    clear = np.abs(np.subtract.outer(trace.time, corners)).min(axis=1) > 1e-5
    assert trace.pv[clear] == pytest.approx(3.0 * expected[clear], abs=1e-9)


def test_an_analogue_loop_bears_the_same_sine() -> None:
    # other route: a fast sampled controller comes near the analogue one
    events = Events(0.0, 0.0, 3.0, 5.0, 120.0, load_shape="sine", load_time=30.0)
    analogue = simulate(replace(LOOP, scan=None), events)
    sampled = simulate(replace(LOOP, scan=0.01), events)
    at_once = np.interp(analogue.time, sampled.time, sampled.pv)
    assert analogue.pv == pytest.approx(at_once, abs=5e-3)


# --- the setpoint --------------------------------------------------------------------------------


def test_setpoint_ramp_is_what_the_controller_sees() -> None:
    # exact: proportional action alone on a plant that does not answer shows the setpoint
    dead = TransferFunction.ratio((1.0,), [], 500.0)
    loop = Loop(dead, dead, Gains(1.0), scan=1.0)
    trace = simulate(loop, Events(4.0, 2.0, 0.0, 0.0, 20.0, setpoint_ramp=8.0))
    assert scans(trace) == pytest.approx(np.clip((np.arange(21) - 2.0) / 2.0, 0.0, 4.0), abs=1e-8)


def test_setpoint_rate_and_filter() -> None:
    # exact: 0.5 %/s up to 2 %, then a filter of 3 s on that, with its exact pole at every scan
    dead = TransferFunction.ratio((1.0,), [], 500.0)
    loop = Loop(dead, dead, Gains(1.0), scan=1.0, setpoint_rate=0.5)
    trace = simulate(loop, Events(2.0, 0.0, 0.0, 0.0, 10.0))
    limited = np.minimum(0.5 * (np.arange(11) + 1.0), 2.0)
    assert scans(trace) == pytest.approx(limited)
    trace = simulate(replace(loop, setpoint_filter=3.0), Events(2.0, 0.0, 0.0, 0.0, 10.0))
    filtered = [0.0]
    for wanted in limited:
        filtered.append(wanted + (filtered[-1] - wanted) * math.exp(-1.0 / 3.0))
    assert scans(trace) == pytest.approx(filtered[1:])


def test_manual_reset_stands_in_for_the_integral() -> None:
    # exact: PV ends at G (u0 + Kp (r - PV)) = 2 (1.5 + 0.8 (1 - PV))
    loop = replace(LOOP, gains=Gains(0.8), bias=1.5)
    trace = simulate(loop, Events(1.0, 0.0, 0.0, 0.0, 400.0))
    assert trace.pv[-1] == pytest.approx((3.0 + 1.6) / 2.6, abs=1e-6)


# --- modes and changes ---------------------------------------------------------------------------


def test_manual_holds_the_output_and_automatic_takes_it_up() -> None:
    events = Events(2.0, 0.0, 0.0, 0.0, 200.0, manual_at=20.5, manual_output=3.0, automatic_at=60.0)
    trace = simulate(LOOP, events)
    held = (trace.time >= 21.0) & (trace.time < 60.0)
    assert set(trace.output[held].tolist()) == {3.0}
    assert trace.output[at(trace, 20.0)] != 3.0
    k = at(trace, 60.0)
    change = LOOP.gains.integral * (2.0 - trace.pv[k])
    change -= LOOP.gains.proportional * (trace.pv[k] - trace.pv[at(trace, 59.0)])
    assert trace.output[k] == pytest.approx(3.0 + change)
    assert trace.pv[-1] == pytest.approx(2.0, abs=2e-3)


def test_a_plant_that_changes_answers_with_its_new_gain_and_dead_time() -> None:
    # exact: open loop, output 1 from manual; at 100 s the gain doubles from 2 to 4, and what is
    # given at 110 s comes 6.6 s later
    events = Events(
        *(0.0, 0.0, 0.0, 0.0, 160.0),
        manual_at=0.0,
        manual_output=1.0,
        change_at=100.0,
        gain_factor=2.0,
        dead_time_factor=2.0,
    )
    trace = simulate(OPEN, events)
    start = 2.0 * (1.0 - math.exp(-(100.0 - 3.3) / 10.0))
    for time in (101.0, 120.0, 160.0):
        expected = 4.0 + (start - 4.0) * math.exp(-(time - 100.0) / 10.0)
        assert trace.pv[at(trace, time)] == pytest.approx(expected, abs=1e-9)


def test_a_change_that_changes_nothing_is_not_seen() -> None:
    events = Events(2.0, 0.0, 1.0, 50.5, 150.0)
    plain = simulate(LOOP, events)
    changed = simulate(LOOP, replace(events, change_at=70.0))
    assert changed.pv == pytest.approx(plain.pv, abs=1e-11)


# --- instruments ---------------------------------------------------------------------------------


def test_a_healthy_valve_is_transparent_to_the_last_bit() -> None:
    events = Events(2.0, 0.0, 1.0, 50.5, 300.0, noise=0.1, seed=4)
    loop = replace(LOOP, low=-2.0, high=2.0)
    plain, healthy = simulate(loop, events), simulate(loop, events, Instruments(Valve()))
    assert plain.pv.tolist() == healthy.pv.tolist()
    assert plain.output.tolist() == healthy.output.tolist()


def test_stick_slip_makes_a_limit_cycle_where_deadband_does_not() -> None:
    # published: with PI on a self-regulating plant a deadband alone dies out, stick-slip goes on
    # (Choudhury, Thornhill, Shah, Control Eng. Practice 13, 2005, section 5, from memory)
    events = Events(0.0, 0.0, 3.0, 5.0, 1500.0)

    def swing(valve: Valve) -> float:
        trace = simulate(LOOP, events, Instruments(valve))
        return float(np.ptp(trace.pv[trace.time > 1000.0]))

    assert swing(Valve(deadband=2.0)) < 0.05
    assert swing(Valve(stick_slip=2.0, slip_jump=1.0)) > 0.5
    assert swing(Valve(stick_slip=5.0, slip_jump=2.0)) > 1.0


def test_the_describing_function_foretells_the_limit_cycle() -> None:
    # other route: amplitude and frequency at which N(X) L(j w) = -1, L with the hold of a scan that
    # is short beside the period; the harmonics that it leaves out cost some per cent
    from scipy.optimize import fsolve

    plant = TransferFunction.ratio((0.02,), [(1.0, 0.0), (6.0, 1.0), (6.0, 1.0)])
    loop = Loop(plant, plant, Gains(1.0, 0.01), scan=0.1)
    s, j = 4.0, 2.0

    def balance(guess: Array) -> list[float]:
        x, w = math.exp(guess[0]) + s / 2.0, math.exp(guess[1])
        phi = math.asin((x - s) / x)
        p = x / 2 * math.sin(2 * phi) - 2 * x * math.cos(phi) - x * (math.pi / 2 + phi)
        p += 2 * (s - j) * math.cos(phi)
        q = -1.5 * x + x / 2 * math.cos(2 * phi) + 2 * x * math.sin(phi)
        q -= 2 * (s - j) * math.sin(phi)
        n = -(p - 1j * q) / (math.pi * x)
        around = n * complex(loop.open_loop()(1j * w)) * np.exp(-0.05j * w) + 1.0
        return [around.real, around.imag]

    found = fsolve(balance, [math.log(2.0), math.log(0.05)])
    assert np.abs(balance(found)).max() < 1e-9
    amplitude, period = math.exp(found[0]) + s / 2.0, 2.0 * math.pi / math.exp(found[1])
    trace = simulate(
        loop, Events(3.0, 0.0, 0.0, 0.0, 6000.0), Instruments(Valve(stick_slip=s, slip_jump=j))
    )
    late = trace.time > 4000.0
    output, time = trace.output[late] - trace.output[late].mean(), trace.time[late]
    rising = time[1:][(output[:-1] < 0.0) & (output[1:] >= 0.0)]
    assert float(np.diff(rising).mean()) == pytest.approx(period, rel=0.1)
    assert float(np.ptp(output)) / 2.0 == pytest.approx(amplitude, rel=0.15)


def test_the_sensor_shows_steps_and_stops_at_its_range() -> None:
    events = Events(0.0, 0.0, 1.0, 0.0, 100.0)
    trace = simulate(OPEN, events, Instruments(resolution=0.25, high=1.6))
    assert set(trace.measured.tolist()) <= {0.25 * k for k in range(7)} | {1.6}
    assert trace.measured.max() == 1.6
    assert trace.pv.max() > 1.9


def test_correlated_noise_has_its_deviation_and_its_time_constant() -> None:
    # exact: correlation over n scans is exp(-n h/T); 40 000 samples, effectively 40 000 / 10
    noise = Instruments(noise_correlation=5.0).noise(0.7, 3, 1.0, 40_000)
    assert noise is not None
    assert float(noise.std()) == pytest.approx(0.7, rel=0.05)
    for scans in (1, 5):
        along = float(np.mean(noise[:-scans] * noise[scans:])) / 0.49
        assert along == pytest.approx(math.exp(-scans / 5.0), abs=0.05)
    again = Instruments(noise_correlation=5.0).noise(0.7, 3, 1.0, 40_000)
    assert again is not None
    assert again.tolist() == noise.tolist()


def test_noise_is_leapt_as_it_is_stepped() -> None:
    # other route: a valve that only limits signals nobody sends has every scan stepped
    events = Events(2.0, 3.0, 1.0, 50.5, 300.0, noise=0.1, seed=4)
    far = Instruments(Valve(signal_low=-1e6, signal_high=1e6, stroke_time=Amount(1e-6, "s")))
    loop = replace(LOOP, low=-2.0, high=2.0)
    leapt, stepped = simulate(loop, events), simulate(loop, events, far)
    assert leapt.pv == pytest.approx(stepped.pv, abs=1e-9)
    assert leapt.measured == pytest.approx(stepped.measured, abs=1e-9)
