"""The controller that made a record is named, or what its sheet says otherwise."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.records.replaying import RANGES, ran, recognised
from workbench.model.pid import Controller
from workbench.records.record import Record
from workbench.records.replay import Recognised, differences, readings, recognise
from workbench.units import Amount

PI = Controller("ideal", 1.2, None, Amount(30.0, "s"))
PID = Controller("ideal", 1.2, None, Amount(30.0, "s"), Amount(4.0, "s"), 10.0)


def best_of(record: Record) -> Recognised:
    found = recognise(record, RANGES)
    assert found.candidates, found.reason
    return found.candidates[0]


def test_settings_filter_and_weight_come_out() -> None:
    """Exact: those that ran (a recursion of the algorithm as the manual writes it)."""
    best = best_of(ran(replace(PID, setpoint_weight=0.6), "reverse", 4))

    assert best.settings.gain == pytest.approx(1.2, rel=0.005)
    assert best.integral_s == pytest.approx(30.0, rel=0.005)
    assert best.derivative_s == pytest.approx(4.0, rel=0.01)
    assert isinstance(best.settings.derivative_filter, Amount)
    assert best.settings.derivative_filter.seconds == pytest.approx(0.4, rel=0.05)
    assert best.settings.setpoint_weight == pytest.approx(0.6, abs=0.01)
    assert (best.action, best.settings.derivative_on) == ("reverse", "pv")
    assert best.agreement_percent > 99.0


def test_forms_that_are_one_function_are_named_together() -> None:
    """Exact: without derivative action ideal, parallel and series are the same function of s."""
    found = recognise(ran(PI, "direct", 5), RANGES)

    assert {one.form for one in found.candidates} == {"ideal", "parallel", "series"}
    assert all(len(one.same_as) == 2 for one in found.candidates)
    assert {one.action for one in found.candidates} == {"direct"}


def test_the_series_form_is_told_by_its_setpoint_weight() -> None:
    """Exact: series with weight 1 on PV needs 1/(1 + (Td - Tf)/Ti) in the ideal form."""
    series = Controller("series", 1.2, None, Amount(30.0, "s"), Amount(6.0, "s"), 10.0)
    found = recognise(ran(series, "reverse", 6), RANGES)

    assert found.candidates[0].form == "series"
    assert found.candidates[0].settings.gain == pytest.approx(1.2, rel=0.01)
    ideal = next(one for one in found.candidates if one.form == "ideal")
    assert ideal.settings.setpoint_weight == pytest.approx(1 / (1 + 5.4 / 30.0), abs=0.01)


@pytest.mark.parametrize("late", [1, 2, -1])
def test_op_logged_some_rows_late_or_early_is_noticed(late: int) -> None:
    record = ran(PI, "reverse", 7)
    best = best_of(replace(record, op=np.roll(record.op, late)))

    assert best.shift_rows == late
    assert best.settings.gain == pytest.approx(1.2, rel=0.02)


def test_a_log_faster_than_the_scan_is_thinned_out() -> None:
    record = ran(PI, "reverse", 8)
    fast = Record(
        "fast.csv",
        np.arange(4.0 * len(record.pv)) / 4.0,
        np.repeat(record.pv, 4),
        np.repeat(record.op, 4),
        sp=None if record.sp is None else np.repeat(record.sp, 4),
    )
    found = recognise(fast, RANGES)

    assert found.scan_s == pytest.approx(1.0)
    assert found.candidates[0].integral_s == pytest.approx(30.0, rel=0.01)


def test_rows_in_manual_and_at_limits_are_left_out() -> None:
    record = ran(PI, "reverse", 9)
    op = record.op.copy()
    op[200:260], op[600:650] = 100.0, 33.0
    mode = ("AUTO",) * 600 + ("MAN",) * 50 + ("AUTO",) * 250

    assert best_of(replace(record, op=op, mode=mode)).settings.gain == pytest.approx(1.2, rel=0.01)


def test_pv_logged_before_its_filter_is_filtered_again() -> None:
    """Other route: the filter written out as a recursion."""
    record, share = ran(PI, "reverse", 10), 1.0 - np.exp(-1.0 / 3.0)
    assert record.sp is not None
    op, integral = np.zeros(900), 0.0
    filtered = (record.pv[0] - 120.0) / 2.5
    for k, (sp, pv) in enumerate(zip(record.sp, record.pv, strict=True)):
        filtered += share * ((pv - 120.0) / 2.5 - filtered)
        error = (sp - 120.0) / 2.5 - filtered
        integral += 1.2 / 30.0 * error
        op[k] = 50.0 + 1.2 * error + integral
    odd = replace(record, op=50.0 + 0.2 * (op - 50.0))
    found = recognise(odd, RANGES, pv_filter=3.0).candidates[0]

    assert found.settings.gain == pytest.approx(0.2 * 1.2, rel=0.01)
    assert found.agreement_percent > 99.0


def test_without_setpoint_moves_the_weight_stays_open() -> None:
    record = ran(PI, "reverse", 11)
    assert record.sp is not None
    still = slice(500, 628)
    cut = Record(
        "cut.csv",
        record.time[still] - record.time[500],
        record.pv[still],
        record.op[still],
        sp=record.sp[still],
    )
    best = best_of(cut)

    assert not best.weight_known
    assert best.settings.gain == pytest.approx(1.2, rel=0.03)


@pytest.mark.parametrize("kind", ["manual", "another loop", "short", "still"])
def test_a_record_that_cannot_tell_says_why(kind: str) -> None:
    record = ran(PI, "reverse", 12)
    if kind == "manual":
        record = replace(record, mode=("MAN",) * 900)
    elif kind == "another loop":
        rng = np.random.default_rng(1)
        record = replace(record, op=50.0 + np.cumsum(rng.normal(scale=0.3, size=900)))
    elif kind == "short":
        record = replace(
            record, time=record.time[:20], pv=record.pv[:20], op=record.op[:20], sp=None, mode=None
        )
    else:
        record = replace(record, op=np.full(900, 40.0))
    found = recognise(record, RANGES)

    assert not found.candidates
    assert found.reason


def test_a_sheet_that_is_right_has_no_differences() -> None:
    best = best_of(ran(PID, "reverse", 13))

    assert differences(best, PID, "reverse") == ()
    assert [one.what for one in differences(best, PID, "direct")] == ["action"]
    assert differences(best, replace(PID, gain=1.3), "reverse")


def test_minutes_taken_for_seconds_are_seen_through() -> None:
    best = best_of(ran(PI, "reverse", 14))
    sheet = replace(PI, integral=Amount(30.0, "min"))
    right = [words for words, other in readings(sheet) if not differences(best, other, "reverse")]

    assert right == ["the integral as 30 s"]


def test_controllers_of_many_kinds_are_recognised() -> None:
    """The first of the campaign's records; see `tests.full`."""
    assert recognised(4, 300)[1] == []
