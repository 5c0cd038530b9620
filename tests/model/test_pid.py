"""Controller forms: each against its formula in frequency, there and back, and what is refused."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from workbench.errors import InputError, NotApplicable
from workbench.model.pid import FORMS, Controller, Gains, settings_like
from workbench.units import Amount

POINTS = (0.003j, 0.11j, 2.7j, 0.05 + 0.4j)


# --- each form against its own formula -----------------------------------------------------------


def _ideal(c: Controller, s: complex) -> tuple[complex, complex]:
    """U/R and -U/Y of  U = K [(b R - Y) + (R - Y)/(Ti s) + Td s/(1 + Tf s) (c R - Y)]."""
    k, b = c.gain_value, c.setpoint_weight
    i = 1.0 / (c.integral.seconds * s) if c.integral else 0.0
    td = c.derivative.seconds if c.derivative else 0.0
    d = td * s / (1.0 + _filter(c, td) * s)
    on = 1.0 if c.derivative_on == "error" else 0.0
    return k * (b + i + on * d), k * (1.0 + i + d)


def _parallel(c: Controller, s: complex) -> tuple[complex, complex]:
    """U/R and -U/Y of  U = Kp (b R - Y) + Ki/s (R - Y) + Kd s/(1 + Tf s) (c R - Y)."""
    kp, b = c.gain_value, c.setpoint_weight
    i = c.integral.per_second / s if c.integral else 0.0
    kd = c.derivative.seconds if c.derivative else 0.0
    d = kd * s / (1.0 + _filter(c, kd / kp if kp else 0.0) * s)
    on = 1.0 if c.derivative_on == "error" else 0.0
    return b * kp + i + on * d, kp + i + d


def _series(c: Controller, s: complex) -> tuple[complex, complex]:
    """U/R and -U/Y of  U = K [(b Rf - Yf) + (Rf - Yf)/(Ti s)],  Yf = (1 + Td s)/(1 + Tf s) Y,
    Rf = R for derivative on PV, else filtered alike."""
    k, b = c.gain_value, c.setpoint_weight
    i = 1.0 / (c.integral.seconds * s) if c.integral else 0.0
    td = c.derivative.seconds if c.derivative else 0.0
    lead = (1.0 + td * s) / (1.0 + _filter(c, td) * s)
    on_setpoint = lead if c.derivative_on == "error" else 1.0
    return k * (b + i) * on_setpoint, k * (1.0 + i) * lead


def _filter(c: Controller, derivative_time: float) -> float:
    chosen = c.derivative_filter
    if chosen is None or not derivative_time:
        return chosen.seconds if isinstance(chosen, Amount) and c.derivative else 0.0
    return chosen.seconds if isinstance(chosen, Amount) else derivative_time / chosen


FORMULAS = {"ideal": _ideal, "parallel": _parallel, "series": _series}


@st.composite
def controllers(draw: st.DrawFn, form: str | None = None) -> Controller:
    chosen = form or draw(st.sampled_from(sorted(FORMS)))
    integral_unit = "1/s" if chosen == "parallel" else draw(st.sampled_from(["s", "repeats/min"]))
    derivative = draw(st.none() | st.floats(0.1, 100.0).map(lambda v: Amount(v, "s")))
    lower = 1.0 if derivative is None else derivative.seconds
    return Controller(
        form=chosen,
        gain=draw(st.floats(0.01, 100.0)),
        integral=draw(st.none() | st.floats(0.05, 500.0).map(lambda v: Amount(v, integral_unit))),
        derivative=derivative,
        derivative_filter=draw(
            st.none()
            | st.floats(1.5, 50.0)
            | st.floats(0.01, 0.9).map(lambda share: Amount(share * lower, "s"))
        ),
        setpoint_weight=draw(st.sampled_from([0.0, 0.4, 1.0])),
        derivative_on=draw(st.sampled_from(["pv", "error"])),
    )


@given(controllers(), st.sampled_from(POINTS))
def test_gains_are_the_form_s_own_formula(controller: Controller, s: complex) -> None:
    # other route: the formula of the form, written out in complex numbers
    gains = controller.gains()
    from_setpoint, from_pv = FORMULAS[controller.form](controller, s)
    size = abs(from_pv) + abs(from_setpoint)
    assert abs(gains.from_pv()(s) - from_pv) <= 1e-11 * size
    assert abs(gains.from_setpoint()(s) - from_setpoint) <= 1e-11 * size


def test_every_form_has_its_formula_here() -> None:
    missing = set(FORMS) - set(FORMULAS)
    assert not missing, f"add {missing} to FORMULAS in tests/model/test_pid.py"


@pytest.mark.parametrize(
    ("gains", "s", "value"),
    [
        # exact: written out
        (Gains(2.0), 3j, 2.0),
        (Gains(0.0, 0.5), 2j, 0.5 / 2j),
        (Gains(2.0, 0.1), 0.5j, 2.0 + 0.1 / 0.5j),
        (Gains(2.0, 0.0, 3.0, 0.5), 2j, 2.0 + 6j / (1 + 1j)),
        (Gains(0.0, 0.0, 3.0), 2j, 6j),
        (Gains(0.0), 2j, 0.0),
    ],
)
def test_canonical_gains_in_frequency(gains: Gains, s: complex, value: complex) -> None:
    assert gains.from_pv()(s) == pytest.approx(value, rel=1e-14)


def test_integral_action_alone_keeps_one_pole() -> None:
    assert Gains(0.0, 0.5).from_pv().poles() == (0j,)
    assert Gains(2.0, 0.5, 0.0, 3.0).from_pv().poles() == (0j,)


# --- conversions ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("series", "ideal"),
    [
        # published rule (S. Skogestad, J. Process Control 13 (2003) 291-309, from memory),
        # recomputed
        ((0.0625, 8.0, 8.0), (0.125, 16.0, 4.0)),
        ((0.5, 1.5, 1.0), (0.83333333, 2.5, 0.6)),
        ((2.0, 10.0, 2.5), (2.5, 12.5, 2.0)),
    ],
)
def test_series_settings_as_ideal_ones(
    series: tuple[float, float, float], ideal: tuple[float, float, float]
) -> None:
    found = settings_like(Controller(gain=1.0), *series, published="series")
    assert found.integral is not None
    assert found.derivative is not None
    values = (found.gain, found.integral.seconds, found.derivative.seconds)
    assert values == pytest.approx(ideal, rel=1e-8)


def test_ideal_settings_as_series_ones_at_the_double_root() -> None:
    # published rule (K.J. Astrom and T. Hagglund, PID Controllers, 1995, from memory), recomputed
    found = settings_like(Controller(form="series", gain=1.0), 2.0, 24.0, 6.0)
    assert (found.gain, found.integral, found.derivative) == (
        1.0,
        Amount(12.0, "s"),
        Amount(12.0, "s"),
    )


def test_an_ideal_integral_time_below_four_derivative_times_has_no_series_form() -> None:
    # published rule (the same), recomputed
    with pytest.raises(NotApplicable, match="cannot hold") as refused:
        settings_like(Controller(form="series", gain=1.0), 2.0, 20.0, 6.0)
    assert refused.value.limit == "wants an integral time of at least 4 derivative times"


def test_ideal_settings_as_parallel_gains() -> None:
    # published, read in a stored page: Kp = K, Ki = K/Ti, Kd = K Td
    found = settings_like(Controller(form="parallel", gain=1.0), 2.0, 20.0, 6.0)
    assert (found.gain, found.integral, found.derivative) == (
        2.0,
        Amount(0.1, "1/s"),
        Amount(12.0, "s"),
    )


@given(
    st.floats(0.01, 100.0),
    st.floats(0.5, 1000.0),
    st.just(0.0) | st.floats(1e-3, 0.25),
    st.sampled_from(["ideal", "series", "parallel"]),
    st.sampled_from(["ideal", "series"]),
)
def test_settings_keep_their_frequency_response_in_every_form(
    gain: float, integral_time: float, share: float, form: str, published: str
) -> None:
    # Without a derivative filter, which belongs to a form and does not convert.
    like = Controller(form=form, gain=1.0, derivative_filter=None)
    there = settings_like(like, gain, integral_time, share * integral_time, published)
    wanted = Controller(
        form=published,
        gain=gain,
        integral=Amount(integral_time, "s"),
        derivative=Amount(share * integral_time, "s"),
        derivative_filter=None,
    )
    for s in POINTS:
        assert there.gains().from_pv()(s) == pytest.approx(wanted.gains().from_pv()(s), rel=1e-7)


@given(controllers(form="series"))
def test_series_to_ideal_and_back(series: Controller) -> None:
    if series.integral is None or series.derivative is None:
        return
    ti, td = series.integral.seconds, series.derivative.seconds
    assume(abs(ti - td) > 1e-3 * ti)
    ideal = settings_like(Controller(gain=1.0), series.gain_value, ti, td, "series")
    assert ideal.integral is not None
    assert ideal.derivative is not None
    back = settings_like(series, ideal.gain_value, ideal.integral.seconds, ideal.derivative.seconds)
    # Swapping the two times at the same K/Ti is the same controller; the larger comes back as Ti.
    assert back.integral is not None
    assert back.derivative is not None
    assert back.integral.seconds == pytest.approx(max(ti, td), rel=1e-6)
    assert back.derivative.seconds == pytest.approx(min(ti, td), rel=1e-6)


def test_settings_are_written_as_the_controller_writes_its_own() -> None:
    like = Controller(
        proportional_band=50.0,
        integral=Amount(2.0, "repeats/min"),
        derivative=Amount(0.1, "min"),
        setpoint_weight=0.5,
        action="direct",
        scan=Amount(1.0, "s"),
    )
    found = settings_like(like, 4.0, 120.0, 30.0)
    # exact: 100/4 %, 60/120 repeats/min, 30/60 min
    assert found == replace(
        like,
        proportional_band=25.0,
        integral=Amount(0.5, "repeats/min"),
        derivative=Amount(0.5, "min"),
    )


def test_settings_without_integral_or_derivative_leave_them_out() -> None:
    like = Controller(gain=1.0, integral=Amount(3.0, "s"), derivative=Amount(1.0, "s"))
    found = settings_like(like, 2.0, None, 0.0)
    assert (found.gain, found.integral, found.derivative) == (2.0, None, None)


# --- bands and repeats ---------------------------------------------------------------------------


def test_proportional_band_is_a_hundred_over_the_gain() -> None:
    # exact: 40 % is 2.5 %/%
    assert Controller(proportional_band=40.0).gain_value == 2.5
    assert Controller(proportional_band=40.0).gains() == Controller(gain=2.5).gains()


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        # exact
        ((120.0, "s"), 120.0),
        ((2.0, "min"), 120.0),
        ((0.5, "h"), 1800.0),
        ((120.0, "s/repeat"), 120.0),
        ((2.0, "min/repeat"), 120.0),
        ((0.5, "repeats/min"), 120.0),
        ((0.01, "repeats/s"), 100.0),
    ],
)
def test_integral_times_in_every_unit(text: tuple[float, str], seconds: float) -> None:
    controller = Controller(gain=3.0, integral=Amount(*text))
    assert controller.gains().integral == pytest.approx(3.0 / seconds, rel=1e-14)


def test_parallel_gains_per_minute() -> None:
    # exact: 1.8 1/min = 0.03 1/s; a derivative gain of 0.5 min is 30 s
    gains = Controller(
        form="parallel", gain=2.0, integral=Amount(1.8, "1/min"), derivative=Amount(0.5, "min")
    ).gains()
    assert gains.integral == pytest.approx(0.03, rel=1e-14)
    assert gains.derivative == 30.0
    assert gains.filter_time == pytest.approx(30.0 / 2.0 / 10.0, rel=1e-14)


def test_scan_and_computing_delay_in_seconds() -> None:
    controller = Controller(gain=1.0, scan=Amount(0.05, "min"), computing_delay=Amount(0.5, "s"))
    assert (controller.scan_s, controller.computing_delay_s) == (3.0, 0.5)
    assert (Controller(gain=1.0).scan_s, Controller(gain=1.0).computing_delay_s) == (None, 0.0)


# --- refusals ------------------------------------------------------------------------------------

S = "s"
REFUSED: tuple[tuple[dict[str, Any], str, str], ...] = (
    ({}, "gain", "give gain or proportional_band"),
    ({"gain": 1.0, "proportional_band": 50.0}, "proportional_band", "keep one of"),
    ({"gain": -1.0}, "gain", "at least 0"),
    ({"gain": math.nan}, "gain", "finite number"),
    ({"gain": math.inf}, "gain", "finite number"),
    ({"gain": 0.0}, "gain", "use the parallel form"),
    ({"gain": 0.0, "form": "series"}, "gain", "use the parallel form"),
    ({"proportional_band": 0.0}, "proportional_band", "above 0"),
    ({"gain": 1.0, "form": "idael"}, "form", "did you mean 'ideal'?"),
    ({"gain": 1.0, "integral": Amount(0.0, S)}, "integral", "above 0"),
    ({"gain": 1.0, "integral": Amount(0.1, "1/s")}, "integral", "'1/s' in the ideal form"),
    (
        {"gain": 1.0, "form": "parallel", "integral": Amount(30.0, S)},
        "integral",
        "'s' in the parallel form",
    ),
    ({"gain": 1.0, "integral": 30.0}, "integral", "text with its unit"),
    ({"gain": 1.0, "derivative": Amount(-1.0, S)}, "derivative", "at least 0"),
    ({"gain": 1.0, "derivative": Amount(1.0, "repeats/min")}, "derivative", "not known here"),
    ({"gain": 1.0, "derivative_filter": 0.0}, "derivative_filter", "above 0"),
    ({"gain": 1.0, "derivative_filter": math.inf}, "derivative_filter", "finite number"),
    ({"gain": 1.0, "setpoint_weight": 1.5}, "setpoint_weight", "at most 1"),
    ({"gain": 1.0, "derivative_on": "op"}, "derivative_on", "pv or error"),
    ({"gain": 1.0, "action": "up"}, "action", "reverse or direct"),
    ({"gain": 1.0, "scan": Amount(0.0, S)}, "scan", "above 0"),
    ({"gain": 1.0, "scan": Amount(1.0, "h")}, "scan", "less than 1 h"),
    ({"gain": 1.0, "windup": "none"}, "windup", "conditional"),
    (
        {"gain": 1.0, "computing_delay": Amount(0.1, S)},
        "computing_delay",
        "an analogue controller",
    ),
    (
        {"gain": 1.0, "scan": Amount(1.0, S), "computing_delay": Amount(1.1, S)},
        "computing_delay",
        "longer than the scan 1 s",
    ),
    (
        {"gain": 0.0, "form": "parallel", "derivative": Amount(1.0, S), "derivative_filter": 5},
        "derivative_filter",
        "give a filter time",
    ),
    (
        # Kp = K (1 + (Td - Tf)/Ti) would be 0, and with it the whole proportional part
        {
            "gain": 1.0,
            "form": "series",
            "integral": Amount(1.0, S),
            "derivative": Amount(1.0, S),
            "derivative_filter": Amount(2.0, S),
        },
        "derivative_filter",
        "without proportional action",
    ),
)


@pytest.mark.parametrize(("settings", "key", "words"), REFUSED)
def test_refused_settings_name_their_key(settings: dict[str, Any], key: str, words: str) -> None:
    with pytest.raises(InputError) as refused:
        Controller(**settings)
    faults = [p for p in refused.value.problems if p.key == key]
    assert faults, refused.value
    assert words in str(faults[0])


def test_every_fault_is_told_at_once() -> None:
    with pytest.raises(InputError) as refused:
        Controller(integral=Amount(0.1, "1/s"), computing_delay=Amount(1.0, "s"))
    assert [p.key for p in refused.value.problems] == ["gain", "integral", "computing_delay"]


def test_integral_only_is_the_parallel_form_with_gain_zero() -> None:
    gains = Controller(form="parallel", gain=0.0, integral=Amount(0.5, "1/s")).gains()
    assert gains == Gains(0.0, 0.5)


def test_a_whole_scan_of_computing_delay_is_accepted() -> None:
    assert Controller(gain=1.0, scan=Amount(1.0, S), computing_delay=Amount(1.0, S))
