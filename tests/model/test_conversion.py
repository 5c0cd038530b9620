"""Conversions between forms and units: the same function of s, there and back, or refused."""

from __future__ import annotations

from dataclasses import replace

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from workbench.errors import InputError, NotApplicable
from workbench.model.conversion import HELD_BY, Converted, Units, convert
from workbench.model.pid import FORMS, Controller
from workbench.units import Amount

POINTS = (0.003j, 0.11j, 2.7j, 0.05 + 0.4j, 40j)
FORM_NAMES = sorted(FORMS)


def seconds(value: float | None) -> Amount | None:
    return None if value is None else Amount(value, "s")


def pid(form: str, gain: float, integral: float, derivative: float, **more: object) -> Controller:
    """Settings in seconds; in the parallel form the integral gain in 1/s."""
    settings = Controller(
        form=form,
        gain=gain,
        integral=Amount(integral, "1/s" if form == "parallel" else "s"),
        derivative=Amount(derivative, "s"),
        derivative_filter=None,
    )
    return replace(settings, **more)  # type: ignore[arg-type]


def numbers(settings: Controller) -> tuple[float, float, float]:
    assert settings.integral is not None
    assert settings.derivative is not None
    parallel = settings.form == "parallel"
    integral = settings.integral.per_second if parallel else settings.integral.seconds
    return settings.gain_value, integral, settings.derivative.seconds


def assert_same_path(one: Controller, other: Controller) -> None:
    # other route: both in frequency, from each form's own partial fractions
    for s in POINTS:
        wanted = one.gains().from_pv()(s)
        assert other.gains().from_pv()(s) == pytest.approx(wanted, rel=1e-8)


def test_every_form_can_be_converted_to() -> None:
    assert set(HELD_BY) == set(FORMS)


# --- published numbers ---------------------------------------------------------------------------


SERIES = (
    # published rule (S. Skogestad, J. Process Control 13 (2003) 291-309, from memory),
    # recomputed; without a filter
    ((0.0625, 8.0, 8.0), (0.125, 16.0, 4.0)),
    ((0.5, 1.5, 1.0), (0.83333333, 2.5, 0.6)),
    ((2.0, 10.0, 2.5), (2.5, 12.5, 2.0)),
)


@pytest.mark.parametrize(("series", "ideal"), SERIES)
def test_series_as_ideal(
    series: tuple[float, float, float], ideal: tuple[float, float, float]
) -> None:
    found = convert(pid("series", *series), "ideal")
    assert found.exact
    assert numbers(found.controller) == pytest.approx(ideal, rel=1e-8)


def test_the_double_root() -> None:
    # published rule (K.J. Astrom and T. Hagglund, PID Controllers, 1995, from memory), recomputed
    found = convert(pid("ideal", 2.0, 24.0, 6.0), "series")
    assert (found.exact, numbers(found.controller)) == (True, (1.0, 12.0, 12.0))


def test_ideal_as_parallel() -> None:
    # published, read in a stored page: Kp = K, Ki = K/Ti, Kd = K Td
    found = convert(pid("ideal", 2.0, 20.0, 6.0, derivative_filter=8.0), "parallel")
    assert (found.exact, numbers(found.controller)) == (True, (2.0, 0.1, 12.0))
    # exact: (Kd/Kp)/N is Td/N, so N stays
    assert found.controller.derivative_filter == 8.0


def test_the_filter_of_a_series_controller_goes_into_every_part() -> None:
    # exact, by partial fractions: K (1 + (Td - Tf)/Ti), K/Ti and K (Td - Tf)(1 - Tf/Ti)
    found = convert(pid("series", 0.5, 1.5, 1.0, derivative_filter=10.0), "parallel")
    assert numbers(found.controller) == pytest.approx((0.8, 1.0 / 3.0, 0.5 * 0.9 * 1.4 / 1.5))
    assert found.controller.derivative_filter == Amount(0.1, "s")


def test_the_filter_of_an_ideal_controller_moves_both_series_times() -> None:
    # exact: (30 - 1)^2 - 4 30 7 = 1, so the times are (31 +- 1)/2 and K = 2/30 16
    found = convert(pid("ideal", 2.0, 30.0, 7.0, derivative_filter=Amount(1.0, "s")), "series")
    assert found.exact
    assert numbers(found.controller) == pytest.approx((32.0 / 30.0, 16.0, 15.0), rel=1e-14)
    assert found.controller.derivative_filter == Amount(1.0, "s")


# --- the same function of s, whatever the settings -----------------------------------------------


@st.composite
def controllers(draw: st.DrawFn, form: str | None = None) -> Controller:
    chosen = form or draw(st.sampled_from(FORM_NAMES))
    units = ["1/s", "1/min"] if chosen == "parallel" else ["s", "min", "min/repeat", "repeats/min"]
    integral = st.floats(0.05, 500.0).map(lambda v: Amount(v, draw(st.sampled_from(units))))
    derivative = draw(st.none() | st.floats(0.1, 100.0).map(seconds))
    band = draw(st.booleans())
    gain = draw(st.floats(0.01, 100.0))
    try:
        return Controller(
            form=chosen,
            gain=None if band else gain,
            proportional_band=100.0 / gain if band else None,
            integral=draw(st.none() | integral),
            derivative=derivative,
            derivative_filter=draw(
                st.none() | st.floats(0.3, 50.0) | st.floats(0.01, 30.0).map(seconds)
            ),
            setpoint_weight=draw(st.sampled_from([0.0, 0.4, 1.0])),
            derivative_on=draw(st.sampled_from(["pv", "error"])),
        )
    except InputError:  # a filter that outweighs the proportional part
        assume(False)
        raise


def held(settings: Controller, form: str) -> Converted:
    try:
        return convert(settings, form)
    except NotApplicable:
        assume(False)
        raise


@given(controllers(), st.sampled_from(FORM_NAMES))
def test_what_is_converted_is_the_same_function_of_s(settings: Controller, form: str) -> None:
    found = held(settings, form)
    assert found.exact
    assert found.controller.form == form
    assert_same_path(settings, found.controller)


@given(controllers(), st.sampled_from(FORM_NAMES), st.sampled_from(POINTS))
def test_the_setpoint_is_answered_alike_or_it_is_said(
    settings: Controller, form: str, s: complex
) -> None:
    found = held(settings, form)
    if found.notes:
        return
    wanted = settings.gains().from_setpoint()(s)
    size = abs(settings.gains().from_pv()(s)) + abs(wanted)
    assert abs(found.controller.gains().from_setpoint()(s) - wanted) <= 1e-8 * size


@given(controllers(), st.sampled_from(FORM_NAMES))
def test_there_and_back(settings: Controller, form: str) -> None:
    back = convert(held(settings, form).controller, settings.form)
    assert back.exact
    assert_same_path(settings, back.controller)


@given(
    st.floats(0.5, 500.0), st.floats(0.01, 0.99), st.floats(1.5, 50.0), st.sampled_from([0, 0.4, 1])
)
def test_series_settings_and_their_weight_come_back(
    integral: float, share: float, filter_share: float, weight: float
) -> None:
    settings = pid(
        "series",
        2.0,
        integral,
        share * integral,
        setpoint_weight=weight,
        derivative_filter=Amount(share * integral / filter_share, "s"),
    )
    there = convert(settings, "ideal")
    assert there.notes == ()
    back = convert(there.controller, "series").controller
    assert back.setpoint_weight == pytest.approx(weight, abs=1e-8)
    assert numbers(back) == pytest.approx(numbers(settings), rel=1e-8)
    assert back.derivative_filter == settings.derivative_filter


@given(controllers())
def test_the_form_it_has_changes_nothing(settings: Controller) -> None:
    assert convert(settings, settings.form) == Converted(settings, exact=True)


# --- the setpoint --------------------------------------------------------------------------------


def test_a_weight_that_the_series_form_would_need_is_said() -> None:
    # exact: Kp/K = 2, so the weight would have to be 2
    found = convert(pid("ideal", 2.0, 24.0, 6.0), "series")
    assert found.controller.setpoint_weight == 1.0
    assert "would need a setpoint weight of 2," in found.notes[0].text


def test_a_weight_that_the_series_form_can_hold_is_given() -> None:
    # exact: 0.4 Kp/K
    found = convert(pid("ideal", 2.0, 24.0, 6.0, setpoint_weight=0.4), "series")
    assert (found.controller.setpoint_weight, found.notes) == (0.8, ())


def test_derivative_on_the_error_keeps_its_whole_setpoint() -> None:
    found = convert(pid("ideal", 2.0, 24.0, 6.0, derivative_on="error"), "series")
    assert (found.controller.setpoint_weight, found.notes) == (1.0, ())


def test_a_setpoint_that_is_filtered_in_part_is_said() -> None:
    weighted = pid("series", 1.0, 20.0, 4.0, derivative_on="error", setpoint_weight=0.5)
    found = convert(replace(weighted, derivative_filter=5.0), "ideal")
    assert found.exact
    assert "weights and filters the setpoint in another way" in found.notes[0].text


# --- units ---------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("unit", "value"),
    [
        # exact: 120 s
        ("s", 120.0),
        ("min", 2.0),
        ("h", 1.0 / 30.0),
        ("s/repeat", 120.0),
        ("min/repeat", 2.0),
        ("repeats/s", 1.0 / 120.0),
        ("repeats/min", 0.5),
    ],
)
def test_an_integral_time_in_every_unit(unit: str, value: float) -> None:
    found = convert(pid("ideal", 2.0, 120.0, 6.0), "ideal", Units(integral=unit))
    assert found.exact
    assert found.controller.integral is not None
    assert found.controller.integral.unit == unit
    assert found.controller.integral.value == pytest.approx(value, rel=1e-15)


def test_the_other_units() -> None:
    given_in_seconds = pid("ideal", 2.5, 120.0, 6.0, derivative_filter=Amount(3.0, "s"))
    found = convert(given_in_seconds, "parallel", Units("band", "1/min", "min"))
    # exact: 100/2.5 %, 2.5/120 1/s = 1.25 1/min, 2.5 6 s = 0.25 min
    assert found.controller.gain is None
    assert found.controller.proportional_band == 40.0
    assert found.controller.integral is not None
    assert found.controller.integral.unit == "1/min"
    assert found.controller.integral.value == pytest.approx(1.25, rel=1e-15)
    assert found.controller.derivative == Amount(0.25, "min")
    assert found.controller.derivative_filter == Amount(3.0, "s")
    back = convert(found.controller, "ideal", Units("gain", "s", "s"))
    assert numbers(back.controller) == pytest.approx((2.5, 120.0, 6.0), rel=1e-15)


@pytest.mark.parametrize(
    ("held_in", "form", "shown_in"),
    [
        ("s", "parallel", "1/s"),
        ("repeats/s", "parallel", "1/s"),
        ("min/repeat", "parallel", "1/min"),
        ("repeats/min", "parallel", "1/min"),
        ("repeats/min", "series", "repeats/min"),
    ],
)
def test_the_unit_that_comes_nearest_is_kept(held_in: str, form: str, shown_in: str) -> None:
    found = convert(Controller(gain=2.0, integral=Amount(0.5, held_in)), form)
    assert found.controller.integral is not None
    assert found.controller.integral.unit == shown_in


def test_an_integral_gain_per_minute_becomes_minutes() -> None:
    # exact: 2 / (1.8 1/min)
    settings = Controller(form="parallel", gain=2.0, integral=Amount(1.8, "1/min"))
    found = convert(settings, "ideal").controller.integral
    assert found is not None
    assert found.unit == "min"
    assert found.value == pytest.approx(2.0 / 1.8, rel=1e-15)


def test_the_unit_of_another_form_is_refused() -> None:
    settings = pid("ideal", 2.0, 120.0, 6.0)
    for form, unit in (("parallel", "s"), ("ideal", "1/s"), ("series", "1/min")):
        with pytest.raises(InputError, match="does not suit") as refused:
            convert(settings, form, Units(integral=unit))
        assert refused.value.problems[0].key == "--integral-as"


def test_everything_else_is_kept() -> None:
    settings = pid(
        "ideal",
        2.0,
        120.0,
        6.0,
        action="direct",
        scan=Amount(1.0, "s"),
        computing_delay=Amount(0.2, "s"),
        windup="tracking",
    )
    found = convert(settings, "series").controller
    for key in ("action", "scan", "computing_delay", "windup", "derivative_on"):
        assert getattr(found, key) == getattr(settings, key)


# --- parts that are not there --------------------------------------------------------------------


@pytest.mark.parametrize("form", FORM_NAMES)
@pytest.mark.parametrize("start", FORM_NAMES)
def test_proportional_and_pi_are_the_same_in_every_form(start: str, form: str) -> None:
    for integral in (None, Amount(0.1, "1/s") if start == "parallel" else Amount(20.0, "s")):
        settings = Controller(form=start, gain=2.0, integral=integral, setpoint_weight=0.3)
        found = convert(settings, form)
        assert (found.exact, found.notes) == (True, ())
        assert found.controller.gain == 2.0
        assert found.controller.derivative is None
        assert (found.controller.integral is None) is (integral is None)
        assert found.controller.setpoint_weight == pytest.approx(0.3)
        assert_same_path(settings, found.controller)


def test_proportional_and_derivative_alone() -> None:
    # exact: K (1 + Td s/(Tf s + 1)) = K ((Td + Tf) s + 1)/(Tf s + 1)
    settings = Controller(gain=2.0, derivative=seconds(5.0), derivative_filter=5.0)
    found = convert(settings, "series").controller
    assert (found.gain, found.derivative, found.derivative_filter) == (
        2.0,
        seconds(6.0),
        seconds(1),
    )
    assert_same_path(settings, found)


@pytest.mark.parametrize("filter_time", [4.0, 20.0])
def test_a_filter_that_cancels_a_series_time_leaves_pi(filter_time: float) -> None:
    # exact: what is left is K (20 s + 1)/(20 s), or K (4 s + 1)/(20 s)
    settings = pid("series", 1.0, 20.0, 4.0, derivative_filter=Amount(filter_time, "s"))
    found = convert(settings, "ideal")
    assert found.exact
    assert found.controller.derivative is None
    assert found.controller.gain == pytest.approx(1.0 if filter_time == 4.0 else 0.2)
    assert_same_path(settings, found.controller)


# --- what a form cannot hold ---------------------------------------------------------------------


def test_complex_zeros_have_no_series_form() -> None:
    # published rule (K.J. Astrom and T. Hagglund, PID Controllers, 1995, from memory): Ti >= 4 Td
    with pytest.raises(NotApplicable, match="cannot hold these settings") as refused:
        convert(pid("ideal", 2.0, 20.0, 6.0), "series")
    # exact: Ti/4
    assert "a derivative time of at most 5 s, and here it is 6 s" in refused.value.limit
    assert "without" not in refused.value.limit


def test_a_filter_can_be_what_stands_in_the_way() -> None:
    # exact: (24 - 0.6)^2 < 4 24 6 although 24 = 4 6
    with pytest.raises(NotApplicable) as refused:
        convert(pid("ideal", 2.0, 24.0, 6.0, derivative_filter=10.0), "series")
    assert "without a derivative filter the form would hold them" in refused.value.limit


@given(st.floats(0.01, 50.0), st.floats(1.0, 200.0), st.floats(0.0, 20.0))
def test_the_limit_that_is_named_is_the_limit(gain: float, ti: float, tf: float) -> None:
    assume(abs(ti - tf) > 0.05 * ti)
    most = (ti - tf) ** 2 / (4.0 * ti)
    chosen = Amount(tf, "s") if tf > 0.01 else None
    within = pid("ideal", gain, ti, 0.999 * most, derivative_filter=chosen)
    assume(tf > 0.01 or tf == 0.0)
    assert convert(within, "series").exact
    with pytest.raises(NotApplicable):
        convert(replace(within, derivative=Amount(1.001 * most, "s")), "series")


@pytest.mark.parametrize("form", ["ideal", "series"])
def test_integral_action_alone_needs_the_parallel_form(form: str) -> None:
    with pytest.raises(NotApplicable, match=f"the {form} form cannot hold .* is 0"):
        convert(Controller(form="parallel", gain=0.0, integral=Amount(0.1, "1/s")), form)


def test_a_gain_of_0_has_no_band() -> None:
    only_integral = Controller(form="parallel", gain=0.0, integral=Amount(0.1, "1/s"))
    with pytest.raises(NotApplicable, match="the gain is 0"):
        convert(only_integral, "parallel", Units(gain="band"))


@pytest.mark.parametrize("form", ["ideal", "parallel"])
def test_a_series_filter_longer_than_its_derivative_is_refused(form: str) -> None:
    # exact: K (Td - Tf)(1 - Tf/Ti) = (4 - 5)(1 - 5/20)
    with pytest.raises(NotApplicable, match=r"derivative part negative: -0\.75 s"):
        convert(pid("series", 1.0, 20.0, 4.0, derivative_filter=Amount(5.0, "s")), form)
