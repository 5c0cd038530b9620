"""A loop that swings is told why, where its record shows it, and not where it does not."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from tests.records.swinging import pi_loop, record_of, swinging_verdicts
from workbench.records.diagnose import Known, diagnose, minimum_variance_index
from workbench.records.record import Record
from workbench.sim.valve import Valve

Array = NDArray[np.float64]
REPOSITORY = Path(__file__).resolve().parents[2]
SERIES_A = REPOSITORY.parent / "shared" / "records" / "bj_series_A_concentration.csv"


# --- minimum variance ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("gain", "variance", "index", "mean"),
    [
        (0.1, 5.8201, 0.3436, 0.353),
        (0.2, 3.4091, 0.5867, 0.581),
        (0.3, 2.6915, 0.7431, 0.748),
        (0.4, 2.4306, 0.8229, 0.823),
        (0.45, 2.3913, 0.8364, 0.831),
        (0.5, 2.4000, 0.8333, 0.834),
        (0.6, 2.5641, 0.7800, 0.772),
        (0.8, 4.0179, 0.4978, 0.494),
    ],
)
def test_minimum_variance_index_of_an_integrating_controller(
    gain: float, variance: float, index: float, mean: float
) -> None:
    """Exact: y = e/(1 - 1/z + Ki/z^2) has the variance (1+Ki)/((1-Ki)((1+Ki)^2 - 1)), of which two
    are the least that a delay of 2 leaves.  Other route: the mean of estimates (1000 rows, 20
    terms) made apart from this program."""
    exact = (1 + gain) / ((1 - gain) * ((1 + gain) ** 2 - 1))
    assert exact == pytest.approx(variance, abs=6e-5)
    assert 2.0 / exact == pytest.approx(index, abs=6e-5)

    draws = np.random.default_rng(11).normal(size=(1300, 24))
    y = np.zeros_like(draws)
    for t in range(2, len(y)):
        y[t] = y[t - 1] - gain * y[t - 2] + draws[t]
    found = [minimum_variance_index(one, 2).value for one in y[300:].T]
    assert np.mean([value for value in found if value is not None]) == pytest.approx(
        mean, abs=0.025
    )


@pytest.mark.parametrize(
    ("delay", "index"), [(1, 0.607), (2, 0.679), (3, 0.736), (4, 0.757), (5, 0.773), (8, 0.840)]
)
def test_minimum_variance_index_of_a_real_record(delay: int, index: float) -> None:
    """Other route: the regression with 10 terms, made apart from this program, on Series A (Box and
    Jenkins 1970)."""
    if not SERIES_A.exists():
        pytest.skip(f"the folder of real records is not beside the repository: {SERIES_A.parent}")
    series = np.loadtxt(SERIES_A, delimiter=",", skiprows=1)[:, 2]

    assert minimum_variance_index(series, delay, 10).value == pytest.approx(index, abs=6e-4)


@pytest.mark.parametrize("delay", [1, 2, 3, 4, 5, 8])
def test_minimum_variance_of_a_known_process(delay: int) -> None:
    """Published model of Series A, ARMA(0.92, 0.58); exact: weights psi_k = 0.34 * 0.92^(k-1)."""
    exact = {1: 0.571, 2: 0.637, 3: 0.692, 4: 0.740, 5: 0.780, 8: 0.866}
    rest = 0.34**2 / (1 - 0.92**2)
    first = 1.0 + sum((0.34 * 0.92 ** (k - 1)) ** 2 for k in range(1, delay))
    assert first / (1.0 + rest) == pytest.approx(exact[delay], abs=1e-3)

    draws = np.random.default_rng(12).normal(size=41_000)
    y = np.zeros_like(draws)
    for t in range(1, len(y)):
        y[t] = 0.92 * y[t - 1] + draws[t] - 0.58 * draws[t - 1]
    assert minimum_variance_index(y[1000:], delay).value == pytest.approx(exact[delay], abs=0.02)


def test_too_few_rows_have_no_index() -> None:
    assert minimum_variance_index(np.arange(40.0), 2).value is None
    assert minimum_variance_index(np.zeros(400), 2).value is None


# --- causes --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def sticking() -> Record:
    valve = Valve(stick_slip=4.0, slip_jump=2.0)
    return record_of(pi_loop(), 2500.0, valve, 400, setpoint_step=4.0, noise=0.05)


def test_a_sticking_valve_is_named_with_its_amount(sticking: Record) -> None:
    found = diagnose(sticking, Known(dead_time_s=3.0, integral_time_s=10.0, pv_span=100.0))

    assert found.likely_cause == "valve"
    assert found.valve_verdict == "stick-slip"
    assert found.stick_slip_percent.value == pytest.approx(4.0, rel=0.5)
    assert found.time_in_auto_percent.value == pytest.approx(100.0)
    assert found.minimum_variance_index.value is not None
    assert found.upsets is not None
    assert any(one.cause == "valve" and one.supports for one in found.evidence)


def test_a_plant_five_times_as_slow_is_judged_alike(sticking: Record) -> None:
    # exact: nothing but the unit of time is another
    known = Known(dead_time_s=3.0, integral_time_s=10.0, pv_span=100.0)
    slow = Known(dead_time_s=15.0, integral_time_s=50.0, pv_span=100.0)
    one = diagnose(sticking, known)
    other = diagnose(replace(sticking, time=5.0 * sticking.time), slow)

    assert (other.likely_cause, other.valve_verdict) == (one.likely_cause, one.valve_verdict)
    assert other.stick_slip_percent.value == pytest.approx(one.stick_slip_percent.value)
    assert other.minimum_variance_index.value == pytest.approx(one.minimum_variance_index.value)
    assert other.swings[0].period_s == pytest.approx(5.0 * one.swings[0].period_s)


def test_a_gain_that_is_too_high_is_named() -> None:
    record = record_of(pi_loop(proportional=3.2), 1800.0, skip=200, noise=0.3, seed=3)
    found = diagnose(record, Known(dead_time_s=3.0))

    assert found.likely_cause == "tuning"
    assert found.valve_verdict == "no stick-slip"
    assert found.swings[0].period_s == pytest.approx(14.0, rel=0.15)


def test_an_upset_far_from_the_loops_own_period_is_named() -> None:
    record = record_of(
        pi_loop(), 2400.0, skip=300, noise=0.02, load_step=3.0, load_shape="sine", load_time=60.0
    )
    found = diagnose(record, Known(dead_time_s=3.0, own_period_s=13.0, max_sensitivity=1.6))

    assert found.likely_cause == "upset"
    assert found.swings[0].period_s == pytest.approx(60.0, rel=0.02)


def test_without_a_dead_time_or_a_case_the_cause_stays_open() -> None:
    record = record_of(
        pi_loop(), 2400.0, skip=300, noise=0.02, load_step=3.0, load_shape="sine", load_time=60.0
    )

    assert diagnose(record).likely_cause == "undecided"


def test_a_swing_in_manual_comes_from_outside(sticking: Record) -> None:
    still = replace(sticking, op=np.full_like(sticking.op, 50.0), mode=("MAN",) * len(sticking.pv))

    assert diagnose(still).likely_cause == "upset"


def test_a_quiet_loop_has_no_cause() -> None:
    found = diagnose(record_of(pi_loop(), 1500.0, noise=0.1, seed=2))

    assert found.likely_cause == "none"
    assert not found.present
    assert found.stick_slip_percent.value is None


@pytest.mark.parametrize("kind", ["frozen", "spikes", "dead"])
def test_a_pv_that_is_not_to_be_believed_is_named(kind: str) -> None:
    record = record_of(pi_loop(), 1500.0, noise=0.1, seed=2)
    pv = record.pv.copy()
    if kind == "frozen":
        pv[600:900] = pv[600]
    elif kind == "spikes":
        pv[::90] += 25.0
    else:
        pv[:] = 48.0

    assert diagnose(replace(record, pv=pv)).likely_cause == "sensor"


def test_times_at_limits_and_in_modes_are_counted() -> None:
    """Exact: shares of the time by hand."""
    record = record_of(pi_loop(), 1000.0, noise=0.1)
    op = record.op.copy()
    op[100:300] = 100.0
    mode = ("MAN",) * 250 + ("AUTO",) * 750
    found = diagnose(replace(record, op=op, mode=mode))

    assert found.time_at_limit_percent.value == pytest.approx(20.0, abs=0.2)
    assert found.time_in_auto_percent.value == pytest.approx(75.0, abs=0.2)
    assert found.modes["MAN"] == pytest.approx(25.0, abs=0.2)


def test_an_op_beyond_the_range_is_not_called_at_its_limit() -> None:
    record = record_of(pi_loop(), 600.0, noise=0.1)

    assert diagnose(replace(record, op=record.op + 500.0)).time_at_limit_percent.value is None


def test_a_short_record_says_that_it_is_short() -> None:
    found = diagnose(record_of(pi_loop(), 30.0))

    assert found.likely_cause == "undecided"
    assert any("rows without gaps" in note.text for note in found.notes)


def test_few_swings_are_blamed_on_a_healthy_valve() -> None:
    """The first of the campaign's loops; see `tests.full`."""
    assert [why for bad, why in swinging_verdicts(1, 6) if bad] == []
