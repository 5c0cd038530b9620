"""Records in automatic: refused where they cannot tell, read by the published methods elsewhere."""

from __future__ import annotations

import numpy as np
import pytest

from tests.records.making import Array
from workbench.errors import NotApplicable
from workbench.records.closed_loop import (
    SetpointStep,
    feedback,
    relay_swing,
    setpoint_step,
    shamsuzzoha_skogestad,
    yuwana_seborg,
)
from workbench.records.identify import fit
from workbench.records.record import Record

Plant = tuple[float, float, float]


def played(
    plant: Plant,
    gain: float,
    integral: float | None,
    *,
    rows: int,
    step: float = 1.0,
    fine: int = 1,
    sp: Array | None = None,
    disturbance: float = 0.0,
    noise: float = 0.0,
    relay: float = 0.0,
    seed: int = 0,
) -> Record:
    """A loop by a plain recursion: one lag exact over each of the fine steps, OP held."""
    k, lag, late = plant
    h = step / fine
    dice = np.random.default_rng(seed)
    target: Array = np.zeros(rows) if sp is None else sp
    delay = [0.0] * max(round(late / h), 1)
    keep, state, upset, total = np.exp(-h / lag), 0.0, 0.0, 0.0
    pv, op, level = np.zeros(rows), np.zeros(rows), 0.0
    for i in range(rows):
        pv[i] = state + upset + noise * dice.normal()
        error = target[i] - pv[i]
        if relay:
            level = relay if error >= 0 else -relay
        else:
            total += gain * step / integral * error if integral else 0.0
            level = gain * error + total
        op[i] = level
        for _ in range(fine):
            delay.append(level)
            state = keep * state + (1 - keep) * k * delay.pop(0)
        upset = 0.9 * upset + disturbance * dice.normal()
    return Record(
        "loop", np.arange(rows, dtype=np.float64) * step, pv + 50.0, op + 40.0, sp=target + 50.0
    )


def square(rows: int, half: int, size: float) -> Array:
    wave: Array = np.where((np.arange(rows) // half) % 2 == 1, size, 0.0)
    return wave


# --- the gate ------------------------------------------------------------------------------------


@pytest.mark.parametrize("knows_sp", [True, False])
@pytest.mark.parametrize(("gain", "integral"), [(0.6, None), (0.6, 10.0)])
@pytest.mark.parametrize("late", [0.0, 3.0])
def test_without_setpoint_moves_no_model_is_given(
    late: float, gain: float, integral: float | None, *, knows_sp: bool
) -> None:
    """Soderstrom, Gustavsson and Ljung 1975/76: what OP says of PV is then the controller."""
    record = played((2.0, 10.0, late), gain, integral, rows=1500, disturbance=0.2, noise=0.05)
    if not knows_sp:
        record = Record(record.path, record.time, record.pv, record.op)
    result = fit(record)
    assert result.chosen is None
    assert "OP only followed PV" in result.reason
    assert "so that a controller was at work and SP never moved" in result.reason
    assert result.candidates == ()


@pytest.mark.parametrize(
    ("disturbance", "gain", "lag", "late"),
    [(0.02, 0.03, 0.08, 0.15), (0.1, 0.12, 0.4, 0.35)],
)
def test_setpoint_steps_in_automatic_give_the_plant(
    disturbance: float, gain: float, lag: float, late: float
) -> None:
    """Exact: the plant 2, 10 s, 3 s under PI control; how near a plain fit comes was worked out
    apart from this program (1.94-1.99, 9.9-10.4, 3.0-3.5 with a square wave)."""
    sp = square(600, 100, 2.0)
    record = played((2.0, 10.0, 3.0), 0.6, 10.0, rows=600, sp=sp, disturbance=disturbance)
    result = fit(record, shapes=("first-order", "integrating"))
    assert result.chosen == "first-order"
    best = result.best
    assert best is not None
    assert best.gain == pytest.approx(2.0, rel=gain)
    assert best.time_constants_s[0] == pytest.approx(10.0, rel=lag)
    # OP is logged as it is held, so nothing is added to the dead time.
    assert best.dead_time_s == pytest.approx(3.0, abs=3.0 * late)


def test_op_moved_by_hand_is_not_taken_for_a_controller() -> None:
    dice = np.random.default_rng(3)
    time = np.arange(400.0)
    op = 40.0 + np.repeat(dice.normal(size=200), 2).cumsum()
    found = feedback(Record("walk", time, dice.normal(size=400), op))
    assert found.follows_pv < 0.2
    assert not found.refusal


# --- setpoint steps under proportional control ---------------------------------------------------


UNDER_P = (
    ((1, 1, 1), 0.852, (0.5982, 0.4228, 2.435), (0.997, 1.075, 1.020)),
    ((1, 5, 1), 4.001, (1.0401, 0.7322, 3.025), (0.984, 4.707, 0.967)),
    ((1, 8, 1), 6.385, (1.1240, 0.7909, 3.115), (0.976, 7.454, 0.968)),
    ((1, 20, 1), 15.94, (1.2232, 0.8604, 3.215), (0.943, 18.44, 0.993)),
    ((2, 20, 5), 1.604, (0.9911, 0.6978, 14.88), (1.974, 19.11, 4.88)),
    ((1, 0.2, 1), 0.309, (0.3065, 0.2163, 2.005), (0.997, 0.362, 0.952)),
)
"""Plant (k, T, L), gain, (first peak, first low, time of the peak), and (k, T, L) as found."""


@pytest.mark.parametrize(("plant", "gain", "read", "recovered"), UNDER_P)
def test_setpoint_step_by_shamsuzzoha_and_skogestad(
    plant: Plant,
    gain: float,
    read: tuple[float, float, float],
    recovered: tuple[float, float, float],
) -> None:
    """Other route: peaks of a finely stepped loop and the published formulas (Shamsuzzoha and
    Skogestad 2010, from memory), worked out apart from this program for an overshoot of 0.30."""
    high, low, at = read
    step = SetpointStep(gain, 1.0, high, low, None, at, 2.0 * at)
    assert step.overshoot == pytest.approx(0.30, abs=0.005)
    found = shamsuzzoha_skogestad(step)
    # Of the inputs' four digits 0.5 % is left in the times.
    assert found.gain == pytest.approx(recovered[0], rel=0.002)
    assert found.time_constant_s == pytest.approx(recovered[1], rel=0.005)
    assert found.dead_time_s == pytest.approx(recovered[2], rel=0.005)
    assert not found.remark
    # The same from a record of the loop.
    h = plant[2] / 400.0
    rows = int(9 * at / h)
    record = played(
        plant, gain, None, rows=rows, step=h, sp=np.append([0.0] * 30, [1.0] * rows)[:rows]
    )
    seen = setpoint_step(record)
    assert seen is not None
    assert seen.gain == pytest.approx(gain, rel=1e-6)
    assert (seen.first_peak, seen.first_low) == pytest.approx((high, low), rel=0.01)
    assert seen.peak_after_s == pytest.approx(at, rel=0.01)


def test_a_small_overshoot_is_a_caution_and_none_a_refusal() -> None:
    """Published limits of the method: an overshoot of 0.1 to 0.6."""
    small = SetpointStep(3.0, 1.0, 0.80, 0.90 * 0.80, None, 3.0, 6.0)
    assert small.overshoot > 0.1
    smaller = SetpointStep(3.0, 1.0, 0.80, 0.88, None, 3.0, 6.0)
    assert smaller.overshoot < 0.1
    with pytest.raises(NotApplicable, match="10 to 60 %"):
        shamsuzzoha_skogestad(SetpointStep(3.0, 1.0, 0.70, 0.90, None, 3.0, 6.0))
    nearly = SetpointStep(3.0, 1.0, 0.80, 0.84, None, 3.0, 6.0)
    assert "outside the 10 to 60 %" in shamsuzzoha_skogestad(nearly).remark


SWINGING = (
    ((1, 1, 1), 0.8, (1.000, 1.157, 0.905)),
    ((1, 5, 1), 2.6, (1.000, 4.65, 0.90)),
    ((2, 20, 5), 1.2, (2.000, 18.9, 4.70)),
)
"""Plant (k, T, L), gain, and what is found of the plant."""


def step_under_p(plant: Plant, gain: float) -> SetpointStep:
    """A setpoint step of a finely stepped loop, read from its record."""
    h = plant[2] / 400.0
    rows = int(20 * plant[2] / h)
    sp = np.append([0.0] * 30, [1.0] * rows)[:rows]
    seen = setpoint_step(played(plant, gain, None, rows=rows, step=h, sp=sp))
    assert seen is not None
    return seen


@pytest.mark.parametrize(("plant", "gain", "recovered"), SWINGING)
def test_setpoint_step_by_yuwana_and_seborg(
    plant: Plant, gain: float, recovered: tuple[float, float, float]
) -> None:
    """Other route: the published formulas (Yuwana and Seborg 1982, from memory) on a finely stepped
    loop, worked out apart from this program."""
    found = yuwana_seborg(step_under_p(plant, gain))
    assert found.gain == pytest.approx(recovered[0], rel=0.01)
    assert found.time_constant_s == pytest.approx(recovered[1], rel=0.02)
    assert found.dead_time_s == pytest.approx(recovered[2], rel=0.02)


def test_a_second_peak_that_is_not_seen_is_said() -> None:
    with pytest.raises(NotApplicable, match="two peaks"):
        yuwana_seborg(SetpointStep(1.0, 1.0, 0.6, 0.4, None, 2.0, 4.0))


def test_a_step_under_pi_is_not_read_as_one_under_p() -> None:
    sp = square(400, 200, 2.0)
    assert setpoint_step(played((2.0, 10.0, 3.0), 0.6, 10.0, rows=400, sp=sp)) is None


# --- a relay -------------------------------------------------------------------------------------


def test_a_relay_test_gives_ultimate_gain_and_period() -> None:
    """Exact: under a relay of 1, one lag K, T with dead time L swings by K (1 - exp(-L/T)) with the
    period 2 T ln(2 exp(L/T) - 1)  (K.J. Astrom and T. Hagglund 1984)."""
    k, lag, late = 2.0, 50.0, 10.0
    record = played((k, lag, late), 0.0, None, rows=2000, step=0.25, relay=3.0)
    found = relay_swing(record)
    assert found is not None
    swing = 3.0 * k * -np.expm1(-late / lag)
    period = 2 * lag * np.log(2 * np.exp(late / lag) - 1)
    assert found.op == 3.0
    assert found.pv == pytest.approx(swing, rel=0.03)
    assert found.period_s == pytest.approx(period, rel=0.03)
    assert found.hysteresis == 0.0
    assert found.ultimate_gain == pytest.approx(4 * 3.0 / (np.pi * swing), rel=0.03)
    assert found.option.startswith("3:")


def test_a_square_wave_by_hand_is_no_relay() -> None:
    time = np.arange(900.0)
    op = 40.0 + 5.0 * square(900, 60, 1.0)
    pv = np.zeros(900)
    for i in range(1, 900):
        pv[i] = pv[i - 1] + (op[i - 1] - 42.0 - pv[i - 1]) / 12.0
    assert relay_swing(Record("square", time, pv, op)) is None
