"""Transfer functions: the laws of the algebra, and every figure by another route."""

from __future__ import annotations

import cmath
import math
from typing import Any

import mpmath
import numpy as np
import pytest
import sympy
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.model.routes import (
    Path,
    decimals,
    parallel,
    random_factors,
    random_numerator,
    random_paths,
    step_by_partial_fractions,
)
from workbench.errors import ModelError
from workbench.model.formula import parse_formula
from workbench.model.pid import Gains
from workbench.model.response import final_value, step_response
from workbench.model.stability import loop_verdict
from workbench.model.transfer import TransferFunction

TOLERANCE = 1e-9
"""Of the size of what was added; a sum in double precision keeps about 1e-12 of it here."""

# --- the laws ------------------------------------------------------------------------------------


def _block(rng: np.random.Generator) -> tuple[TransferFunction, list[Path]]:
    """One or two parallel paths of order up to 4, now and then integrating or unstable."""
    paths = []
    for _ in range(int(rng.integers(1, 3))):
        order = int(rng.integers(1, 5))
        ends = str(rng.choice(["stable", "stable", "stable", "integrating", "unstable"]))
        factors = random_factors(rng, order, 0.2, 20.0, ends=ends)
        numerator = random_numerator(rng, order, 0.2, 20.0)
        paths.append(Path(numerator, factors, float(rng.choice([0.0, 0.7, 2.0, 3.3]))))
    return parallel(paths), paths


def _points(rng: np.random.Generator) -> list[complex]:
    return [
        complex(rng.uniform(-0.02, 0.5), math.exp(rng.uniform(-4.0, 3.0))),
        complex(0.0, math.exp(rng.uniform(-4.0, 3.0))),
    ]


def _difference(left: complex, right: complex, size: float) -> float:
    return abs(left - right) / max(size, abs(right))


def laws(size: int, seed: int) -> tuple[float, list[str]]:
    """The laws on random blocks A, B, C: (worst difference, failures).

    Series commutes and associates, parallel commutes and associates, series distributes over
    parallel, a feedback inside a feedback is one feedback around the sum, values are what plain
    complex arithmetic makes of the values, the gain of a product is the product of the gains where
    they exist, dead times add exactly.
    """
    rng = np.random.default_rng(seed)
    worst, failures = 0.0, []
    for _ in range(size):
        (a, _), (b, _), (c, _) = _block(rng), _block(rng), _block(rng)
        found = max(_law_differences(a, b, c, _points(rng)).items(), key=lambda pair: pair[1])
        worst = max(worst, found[1])
        if found[1] > TOLERANCE:
            failures.append(f"{found}: {a} {b} {c}")
        if wrong := _exact_laws(a, b):
            failures.append(f"{wrong}: {a} {b}")
    return worst, failures


def _law_differences(
    a: TransferFunction, b: TransferFunction, c: TransferFunction, points: list[complex]
) -> dict[str, float]:
    worst: dict[str, float] = {}
    both = a.feedback(b).feedback(c), a.feedback(b + c)
    series = (a * b, b * a), ((a * b) * c, a * (b * c))
    sums = (a + b, b + a), ((a + b) + c, a + (b + c)), (a * (b + c), a * b + a * c)
    for s in points:
        x, y, z = a(s), b(s), c(s)
        size, whole = abs(x * y), abs(x * y * z)
        added = abs(x) + abs(y) + abs(z)
        # A closed loop near its own pole magnifies what rounding left in 1 + A (B + C).
        magnified = (1.0 + abs(x) * (abs(y) + abs(z))) / abs(1.0 + x * (y + z))
        for name, left, right, scale in (
            ("series commutes", series[0][0](s), series[0][1](s), size),
            ("series associates", series[1][0](s), series[1][1](s), whole),
            ("series multiplies", series[0][0](s), x * y, size),
            ("parallel commutes", sums[0][0](s), sums[0][1](s), added),
            ("parallel associates", sums[1][0](s), sums[1][1](s), added),
            ("parallel adds", sums[1][0](s), x + y + z, added),
            ("series distributes", sums[2][0](s), sums[2][1](s), abs(x) * (abs(y) + abs(z))),
            ("difference", (a - b)(s), x - y, added),
            ("division", (a * b / b if len(b.numerator) == 1 else a)(s), x, abs(x)),
            (
                "feedback of feedback",
                both[0](s),
                both[1](s),
                abs(both[1](s)) * magnified,
            ),
            (
                "feedback closes",
                both[1](s),
                x / (1.0 + x * (y + z)),
                abs(both[1](s)) * magnified,
            ),
        ):
            worst[name] = max(worst.get(name, 0.0), _difference(left, right, scale))
    return worst


def _exact_laws(a: TransferFunction, b: TransferFunction) -> str:
    product = a * b
    sums = {i + j for i in a.delays for j in b.delays}
    if not set(product.delays) <= sums or product.dead_time != a.dead_time + b.dead_time:
        return f"dead times {product.delays} of a product are not sums"
    if sorted(product.poles(), key=_order) != sorted((*a.poles(), *b.poles()), key=_order):
        return "poles of a product are not the poles of its parts"
    gains = a.gain().value, b.gain().value, product.gain().value
    if None not in gains[:2]:
        size = abs(gains[0] * gains[1])  # type: ignore[operator]
        if gains[2] is None or abs(gains[2] - gains[0] * gains[1]) > 1e-9 * size:  # type: ignore[operator]
            return f"gain of a product {gains}"
    return ""


def _order(pole: complex) -> tuple[float, float]:
    return pole.real, pole.imag


def test_the_laws_hold_on_random_blocks() -> None:
    worst, failures = laws(150, seed=1)
    assert failures == []
    assert worst < TOLERANCE


small = st.integers(-9, 9).map(float)
lag = st.integers(1, 400).map(lambda n: n / 10.0)


@st.composite
def blocks(draw: st.DrawFn) -> TransferFunction:
    factors = [(draw(lag), 1.0) for _ in range(draw(st.integers(0, 3)))]
    numerator = (draw(small), draw(small.filter(bool))) if factors else (draw(small.filter(bool)),)
    return TransferFunction.ratio(numerator, factors, draw(st.sampled_from([0.0, 0.25, 1.5, 6.0])))


@given(blocks(), blocks(), st.floats(0.001, 100.0))
def test_series_commutes_and_multiplies(a: TransferFunction, b: TransferFunction, w: float) -> None:
    assert (a * b)(1j * w) == pytest.approx((b * a)(1j * w), rel=1e-12)
    assert (a * b)(1j * w) == pytest.approx(a(1j * w) * b(1j * w), rel=1e-12)


@given(blocks(), blocks(), st.floats(0.001, 100.0))
def test_parallel_adds(a: TransferFunction, b: TransferFunction, w: float) -> None:
    x, y = a(1j * w), b(1j * w)
    assert abs((a + b)(1j * w) - (x + y)) <= 1e-11 * (abs(x) + abs(y))


@given(blocks(), blocks(), blocks(), st.floats(0.001, 100.0))
def test_a_feedback_inside_a_feedback_is_one_around_the_sum(
    a: TransferFunction, b: TransferFunction, c: TransferFunction, w: float
) -> None:
    s = 1j * w
    closing = abs(1.0 + a(s) * (b(s) + c(s)))
    if closing < 1e-6 or not (a.feedback(b)).denominator:
        return
    expected = a(s) / (1.0 + a(s) * (b(s) + c(s)))
    size = abs(expected) * (1.0 + abs(a(s)) * (abs(b(s)) + abs(c(s)))) / closing
    try:
        nested = a.feedback(b).feedback(c)
    except ModelError:
        return
    assert abs(nested(s) - expected) <= 1e-9 * size


@given(blocks(), blocks())
def test_gain_of_a_product_is_the_product_of_gains(
    a: TransferFunction, b: TransferFunction
) -> None:
    one, other, both = a.gain().value, b.gain().value, (a * b).gain().value
    assert one is not None
    assert other is not None
    assert both == pytest.approx(one * other, rel=1e-12)


@given(st.lists(st.integers(0, 10_000).map(lambda n: n / 16.0), min_size=1, max_size=5))
def test_dead_times_add_exactly(delays: list[float]) -> None:
    # exact: sixteenths add without rounding
    product = TransferFunction.constant(1.0)
    for delay in delays:
        product = product * TransferFunction.ratio((1.0,), [(2.0, 1.0)], delay)
    assert product.delays == (sum(delays),)


# --- values --------------------------------------------------------------------------------------


def test_values_agree_with_thirty_digits() -> None:
    rng = np.random.default_rng(7)
    with mpmath.workdps(30):
        for _ in range(60):
            paths = random_paths(rng)
            plant = parallel(paths)
            for s in _points(rng):
                exact = [path(mpmath.mpc(s)) for path in paths]
                size = float(sum(abs(x) for x in exact))
                assert abs(plant(s) - complex(sum(exact))) <= 1e-11 * size


def test_values_come_in_the_shape_they_were_asked_for() -> None:
    plant = TransferFunction.ratio((2.0,), [(3.0, 1.0)], 1.5)
    s = (1j * np.array([[0.1, 1.0, 3.0], [0.2, 2.0, 4.0]])).astype(np.complex128)
    values = plant(s)
    assert values.shape == (2, 3)
    # exact: 2 exp(-1.5 s)/(3 s + 1)
    assert np.allclose(values, 2 * np.exp(-1.5 * s) / (3 * s + 1), rtol=1e-14)
    assert plant(0.1j) == complex(values[0, 0])


def test_lags_from_a_hundredth_of_a_second_to_ten_hours_stay_exact_in_one_product() -> None:
    lags = (0.01, 0.1, 1.0, 6.0, 60.0, 600.0, 3600.0, 36000.0)
    plant = TransferFunction.ratio((3.0,), [(lag, 1.0) for lag in lags], 100.0)
    assert sorted(plant.poles(), key=abs) == [
        complex(-1.0 / lag) for lag in sorted(lags, reverse=True)
    ]
    path = Path((3.0,), tuple((lag, 1.0) for lag in lags), 100.0)
    for w in np.geomspace(1e-6, 1e3, 40):
        with mpmath.workdps(30):
            exact = complex(path(mpmath.mpc(0, w)))
        assert plant(1j * w) == pytest.approx(exact, rel=1e-11)


def test_eight_equal_lags_keep_eight_equal_poles() -> None:
    plant = TransferFunction.ratio((1.0,), [(7.0, 1.0)] * 8)
    # exact: -1/7 eight times; a companion matrix would scatter them by a tenth
    assert plant.poles() == (complex(-1.0 / 7.0),) * 8
    power = TransferFunction.ratio((1.0,), [(7.0, 1.0)]) ** 8
    assert power.poles() == plant.poles()


@pytest.mark.parametrize(
    ("factor", "expected"),
    [
        # exact
        ((2.0, 1.0), [-0.5]),
        ((4.0, 4.0, 4.0), [complex(-0.5, math.sqrt(3) / 2), complex(-0.5, -math.sqrt(3) / 2)]),
        ((1.0, 1e8, 1.0), [-1e8, -1e-8]),
        ((1.0, 6.0, 11.0, 6.0), [-3.0, -2.0, -1.0]),
        ((1.0, 0.0, 0.0), [0.0, 0.0]),
        ((1.0, 0.0, -1.0), [-1.0, 1.0]),
        ((1.0, 0.0, 0.0, 0.0, 4.0), [1 + 1j, 1 - 1j, -1 + 1j, -1 - 1j]),
    ],
)
def test_poles_are_the_exact_roots(factor: tuple[float, ...], expected: list[complex]) -> None:
    found = TransferFunction.ratio((1.0,), [factor]).poles()
    assert len(found) == len(expected)
    for root in expected:
        nearest = min(found, key=lambda pole: abs(pole - root))
        assert abs(nearest - root) <= 1e-12 * max(1e-8, abs(root))


def test_nothing_cancels_silently() -> None:
    lead = TransferFunction.ratio((5.0, 1.0), [(2.0, 1.0)])
    lag = TransferFunction.ratio((1.0,), [(5.0, 1.0)])
    both = lead * lag
    assert sorted(p.real for p in both.poles()) == [-0.5, -0.2]
    assert both.zeros() == (complex(-0.2),)
    unstable = TransferFunction.ratio((1.0, -1.0), [(1.0, -1.0), (1.0, 1.0)])
    assert 1 in unstable.poles()
    assert 1 in unstable.zeros()


def test_factors_that_nearly_cancel_stay_apart() -> None:
    near = TransferFunction.ratio((5.0, 1.0), [(5.000001, 1.0), (1.0, 1.0)])
    assert near.zeros() == (complex(-0.2),)
    assert complex(-1.0 / 5.000001) in near.poles()


def test_poles_shared_by_parallel_paths_are_not_repeated() -> None:
    shared = TransferFunction.ratio((1.0,), [(3.0, 1.0)], 1.0)
    other = TransferFunction.ratio((2.0,), [(3.0, 1.0), (4.0, 1.0)], 2.0)
    assert sorted(p.real for p in (shared + other).poles()) == [-1.0 / 3.0, -0.25]


def test_zeros_are_listed_only_for_one_path() -> None:
    one = TransferFunction.ratio((-2.0, 1.0), [(3.0, 1.0)], 1.0)
    # exact: 1 - 2 s = 0 at 1/2
    assert one.zeros() == (complex(0.5),)
    assert (one + TransferFunction.ratio((1.0,), [(3.0, 1.0)], 5.0)).zeros() == ()


@pytest.mark.parametrize(
    ("plant", "degree", "proper"),
    [
        (TransferFunction.ratio((1.0,), [(1.0, 1.0)] * 3), 3, True),
        (TransferFunction.ratio((2.0, 1.0), [(1.0, 1.0)]), 0, True),
        (TransferFunction.ratio((2.0, 1.0)), -1, False),
    ],
)
def test_relative_degree(plant: TransferFunction, degree: int, proper: bool) -> None:
    assert plant.relative_degree == degree
    assert plant.is_proper is proper


# --- refusals ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ask", "words"),
    [
        (lambda: TransferFunction.ratio((1.0,), dead_time=-1.0), "a dead time of -1 s"),
        (lambda: TransferFunction.ratio((1.0,), dead_time=math.nan), "a dead time of nan s"),
        (lambda: TransferFunction.ratio((1.0,), [(0.0, 0.0)]), "division by zero"),
        (lambda: TransferFunction.ratio((1e200,), [(1.0, 1.0)]) ** 2, "not finite"),
        (lambda: TransferFunction.constant(1.0) / 0.0, "division by zero"),
        (
            lambda: 1.0 / TransferFunction.ratio((1.0,), dead_time=2.0),
            "a time advance",
        ),
        (lambda: TransferFunction.constant(-1.0).feedback(), "leaves nothing to divide by"),
        (
            lambda: TransferFunction.ratio((1.0,), [(1.0, 1.0)], 2.0).feedback().poles(),
            "infinitely many poles",
        ),
        (
            lambda: TransferFunction.ratio((1.0,), [(1.0, 1.0)], 2.0).feedback().realise(),
            "a dead time inside an inner feedback",
        ),
        (lambda: TransferFunction.ratio((1.0, 1.0)).realise(), "improper"),
    ],
)
def test_refused(ask: Any, words: str) -> None:
    with pytest.raises(ModelError, match=words):
        ask()


def test_a_negative_power_divides() -> None:
    lag = TransferFunction.ratio((2.0,), [(3.0, 1.0)])
    assert (lag**-2)(0.3j) == pytest.approx(1.0 / lag(0.3j) ** 2, rel=1e-14)
    assert (lag**0)(0.3j) == 1.0


# --- gain, slope and final value as limits -------------------------------------------------------

LIMITS = (
    # formula, gain, slope: exact
    ("2/(3 s + 1)", 2.0, 0.0),
    ("(1 - exp(-2 s))/s", 2.0, 0.0),
    ("(1 - exp(-2 s))/s^2", None, 2.0),
    ("1/s^2", None, None),
    ("3 exp(-4 s)/(s (2 s + 1))", None, 3.0),
    ("s/(s + 1)", 0.0, 0.0),
    ("(exp(-s) - exp(-3 s))/(s (5 s + 1))", 2.0, 0.0),
    ("(exp(-s) - 2 exp(-2 s) + exp(-3 s))/s^2", 1.0, 0.0),
    ("(exp(-s) - 2 exp(-2 s) + exp(-3 s))/s^3", None, 1.0),
    # exact: the [2/2] Padé pair of exp agrees to the fifth power, with 1/60 left over
    ("(12 - 6 s + s^2 - (12 + 6 s + s^2) exp(-s))/s^5", 1.0 / 60.0, 0.0),
    ("(12 - 6 s + s^2 - (12 + 6 s + s^2) exp(-s))/(s + 1)^2", 0.0, 0.0),
)


@pytest.mark.parametrize(("formula", "gain", "slope"), LIMITS)
def test_gain_and_slope_are_limits(formula: str, gain: float | None, slope: float | None) -> None:
    plant = parse_formula(formula)
    for figure, expected in ((plant.gain(), gain), (plant.slope(), slope)):
        if expected is None:
            assert figure.value is None
            assert "integrating" in figure.reason
        else:
            assert figure.value == pytest.approx(expected, rel=1e-9, abs=1e-15)


def _pade_remainder(order: int) -> TransferFunction:
    """p(-s) - p(s) exp(-s) over lags, p the Padé polynomial of exp: vanishes to s^(2 order + 1)."""
    f = math.factorial
    p = [
        f(2 * order - j) * f(order) / (f(2 * order) * f(j) * f(order - j)) for j in range(order + 1)
    ]
    lags = [(1.0, 1.0)] * order
    mirrored = [c * (-1) ** j for j, c in enumerate(p)]
    return TransferFunction.ratio(mirrored[::-1], lags) - TransferFunction.ratio(p[::-1], lags, 1.0)


@pytest.mark.parametrize("order", [2, 4, 7])
def test_a_limit_is_found_however_many_powers_cancel(order: int) -> None:
    # exact: what the [n/n] pair of exp leaves is (-1)^n (n!)^2/((2n)! (2n + 1)!) s^(2n + 1)
    f = math.factorial
    left = (-1) ** order * f(order) ** 2 / (f(2 * order) * f(2 * order + 1))
    integrators = TransferFunction.ratio((1.0,), [(1.0, 0.0)]) ** (2 * order + 1)
    assert (_pade_remainder(order) * integrators).gain().value == pytest.approx(left, rel=1e-5)
    assert _pade_remainder(order).gain().value == 0.0


def test_paths_that_cancel_to_rounding_are_refused_in_words() -> None:
    with pytest.raises(ModelError, match="cancel down to rounding"):
        _pade_remainder(24).gain()


S = sympy.Symbol("s")


def _rational(value: float) -> Any:
    return sympy.Rational(str(value))


def _random_formula(rng: np.random.Generator) -> tuple[str, Any]:
    """A formula as typed, and the same as a sympy expression, from the same decimals."""
    terms, exprs = [], []
    below, divisor = [], sympy.Integer(1)
    for _ in range(int(rng.integers(1, 4))):
        t = decimals(rng.uniform(0.2, 20.0))
        end = str(rng.choice(["1", "1", "1", "1", "0"]))
        below.append(f"({t} s + 1)" if end == "1" else "s")
        divisor *= _rational(t) * S + 1 if end == "1" else S
    for _ in range(int(rng.integers(1, 3))):
        k, delay = decimals(rng.uniform(-3.0, 3.0)), decimals(rng.uniform(0.1, 9.0))
        zero = decimals(rng.uniform(-4.0, 4.0))
        lead = rng.random() < 0.4
        terms.append(f"{k} exp(-{delay} s)" + (f" ({zero} s + 1)" if lead else ""))
        exprs.append(
            _rational(k)
            * sympy.exp(-_rational(delay) * S)
            * (_rational(zero) * S + 1 if lead else 1)
        )
    if rng.random() < 0.3:
        # Paths that meet at s = 0, where only the limit gives the gain.
        terms.append(f"{-sum(float(t.split()[0]) for t in terms):.6g}")
        exprs.append(_rational(float(terms[-1])))
    if rng.random() < 0.2 and len(below) > 1:
        terms, exprs = [f"s ({' + '.join(terms)})"], [S * sum(exprs)]
    return f"({' + '.join(terms)})/({' '.join(below)})", sum(exprs) / divisor


def _limit(expression: Any) -> float | None:
    limit = sympy.limit(expression, S, 0, "+")
    return float(limit) if limit.is_finite else None


def limits(size: int, seed: int) -> tuple[float, list[str]]:
    """Gain, slope and final value of random formulas against sympy: (worst difference, failures).

    The final value is that of a stable loop under PI or P control after a setpoint step.
    """
    rng = np.random.default_rng(seed)
    worst, failures = 0.0, []
    for _ in range(size):
        text, expression = _random_formula(rng)
        plant = parse_formula(text)
        pairs = [
            ("gain", plant.gain().value, _limit(expression)),
            ("slope", plant.slope().value, _limit(S * expression)),
        ]
        kp, ki = decimals(rng.uniform(0.05, 0.3)), float(rng.choice([0.0, 0.01]))
        open_loop = Gains(kp, ki).from_pv() * plant
        if loop_verdict(open_loop).stable:
            control = (_rational(kp) + _rational(ki) / S) * expression
            # At the origin a closed loop of limits is the limit of the closed loop.
            pairs.append(
                ("final", open_loop.feedback().gain().value, _limit(control / (1 + control)))
            )
        for name, found, expected in pairs:
            if (found is None) != (expected is None):
                failures.append(f"{name} {found} against {expected}: {text}")
            elif found is not None and expected is not None:
                difference = abs(found - expected) / max(1.0, abs(expected))
                worst = max(worst, difference)
                if difference > 1e-9:
                    failures.append(f"{name} {found} against {expected}: {text}")
    return worst, failures


def test_limits_agree_with_sympy() -> None:
    worst, failures = limits(12, seed=4)
    assert failures == []
    assert worst < 1e-9


def test_the_campaign_of_limits_holds_cases_without_a_gain() -> None:
    rng = np.random.default_rng(4)
    gains = [parse_formula(_random_formula(rng)[0]).gain().value for _ in range(100)]
    assert gains.count(None) > 10
    assert gains.count(0.0) > 2


@pytest.mark.parametrize(
    ("transform", "value", "words"),
    [
        # exact
        (TransferFunction.ratio((3.0,), [(1.0, 0.0), (2.0, 1.0)]), 3.0, ""),
        (TransferFunction.ratio((3.0,), [(1.0, 0.0), (2.0, 1.0)], 5.0), 3.0, ""),
        (TransferFunction.ratio((3.0,), [(2.0, 1.0)]), 0.0, ""),
        # published counterexample: 1/(s^2 + 81) has a limit of s F(s) and no final value
        (TransferFunction.ratio((1.0,), [(1.0, 0.0, 81.0)]), None, "swings for ever"),
        (TransferFunction.ratio((1.0,), [(1.0, 0.0), (1.0, -2.0)]), None, "grows without end"),
        (TransferFunction.ratio((1.0,), [(1.0, 0.0, 0.0)]), None, "moves on for ever"),
        (TransferFunction.constant(0.0), 0.0, ""),
    ],
)
def test_final_value_exists_only_where_it_should(
    transform: TransferFunction, value: float | None, words: str
) -> None:
    figure = final_value(transform)
    assert figure.value == (None if value is None else pytest.approx(value, rel=1e-12))
    assert words in figure.reason


# --- the time-domain form ------------------------------------------------------------------------


def _realised_value(plant: TransferFunction, s: complex) -> tuple[complex, float]:
    """Value at s of the state space, and the size of what was added."""
    form = plant.realise()
    state = np.linalg.solve(s * np.eye(len(form.b)) - form.a, form.b.astype(complex))
    parts = [
        complex(output.c @ state + output.d) * cmath.exp(-output.dead_time * s)
        for output in form.outputs
    ]
    size = sum(float(np.abs(output.c) @ np.abs(state)) + abs(output.d) for output in form.outputs)
    return sum(parts), size


def test_the_state_space_has_the_same_values() -> None:
    rng = np.random.default_rng(8)
    for _ in range(100):
        plant = parallel(random_paths(rng))
        for s in _points(rng):
            value, size = _realised_value(plant, s)
            assert abs(value - plant(s)) <= 1e-10 * max(size, abs(value))


@given(st.floats(1e-12, 1e12), st.floats(-50.0, 50.0), st.floats(0.05, 2.0))
@settings(max_examples=40)
def test_no_gain_is_too_small_to_realise(gain: float, zero: float, damping: float) -> None:
    plant = TransferFunction.ratio((gain * zero, gain), [(4.0, 4.0 * damping, 1.0)], 1.0)
    value, size = _realised_value(plant, 0.3 + 0.7j)
    assert abs(value - plant(0.3 + 0.7j)) <= 1e-12 * size


@given(st.floats(0.05, 0.9), st.floats(0.05, 0.9), st.floats(2.0, 8.0))
@settings(max_examples=20)
def test_a_polynomial_given_whole_has_the_state_space_of_its_factors(
    damping: float, other: float, time: float
) -> None:
    """Exact: two pairs of complex poles and a lag, multiplied out."""
    factors = [(9.0, 6.0 * damping, 1.0), (time**2, 2.0 * other * time, 1.0), (20.0, 1.0)]
    whole = np.polymul(np.polymul(factors[0], factors[1]), factors[2])
    plant = TransferFunction.ratio((3.0, 2.0), [tuple(whole.tolist())], 1.0)
    for s in (0.3 + 0.7j, 0.02j):
        value, size = _realised_value(plant, s)
        exact = (3.0 * s + 2.0) * cmath.exp(-s)
        for factor in factors:
            exact /= complex(np.polyval(factor, s))
        assert abs(value - exact) <= 1e-9 * size


def step_responses(size: int, seed: int) -> tuple[float, list[str]]:
    """Step responses of random plants against 60-digit partial fractions: (worst share of the
    response's peak, failures above 1e-9).

    Order to 8, one to three dead times, leads, inverse response, some integrating; one in four has
    lags from 0.01 s to 10 h.
    """
    rng = np.random.default_rng(seed)
    worst, failures = 0.0, []
    for i in range(size):
        wide = i % 4 == 0
        paths = random_paths(rng, low=0.01, high=36000.0) if wide else random_paths(rng)
        lags = [abs(f[0]) ** (1.0 / (len(f) - 1)) for p in paths for f in p.factors]
        slowest = max(*lags, *(p.dead_time for p in paths))
        times = np.unique(np.append(rng.uniform(0.0, 4.0 * slowest, 20), slowest))
        exact = step_by_partial_fractions(paths, times.tolist())
        found = step_response(parallel(paths), times)
        peak = max(abs(float(y)) for y in exact)
        error = max(abs(float(mpmath.mpf(float(y)) - x)) for y, x in zip(found, exact, strict=True))
        worst = max(worst, error / peak)
        if error > 1e-9 * peak:
            failures.append(f"{error / peak:.3g}: {paths}")
    return worst, failures


def test_step_responses_agree_with_partial_fractions_at_high_precision() -> None:
    worst, failures = step_responses(16, seed=9)
    assert failures == []
    assert worst < 1e-9


# --- the unit of time ----------------------------------------------------------------------------


@given(blocks(), st.sampled_from([60.0, 3600.0]), st.floats(0.001, 10.0))
def test_a_unit_of_time_only_stretches_the_axis(
    block: TransferFunction, seconds: float, w: float
) -> None:
    stretched = block.with_time_unit(seconds)
    assert stretched(1j * w / seconds) == pytest.approx(block(1j * w), rel=1e-12)
    assert stretched.gain().value == pytest.approx(block.gain().value, rel=1e-14)
