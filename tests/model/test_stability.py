"""The verdict is a proof: compared with Lambert's W, a spectral method and published cases."""

from __future__ import annotations

import math
import time
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import lambertw

from tests.model.published import STABILITIES, TEXT, Plant, StabilityCase
from tests.model.routes import (
    Terms,
    add_terms,
    multiply_terms,
    random_factors,
    random_numerator,
    rightmost,
    spread,
)
from workbench.model.pid import Gains
from workbench.model.stability import Verdict, loop_verdict, plant_verdict
from workbench.model.transfer import TransferFunction

BAND = 1e-6
"""Verdicts are not compared where the rightmost root is this near the axis, in its own size."""

# --- random loops --------------------------------------------------------------------------------


@dataclass(frozen=True)
class RandomLoop:
    open_loop: TransferFunction
    characteristic: Terms
    """Multiplied out by numpy from the same numbers."""
    text: str

    @property
    def neutral(self) -> float:
        """Gain at high frequency with dead time."""
        order = len(self.characteristic[0][1])
        leading = [abs(c[0]) if len(c) == order else 0.0 for _, c in self.characteristic]
        return sum(leading[1:]) / leading[0]


def _expanded(
    factors: tuple[tuple[float, ...], ...],
) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    product = np.ones(1)
    for factor in factors:
        product = np.convolve(product, factor)
    return product


def _controller(rng: np.random.Generator, neutral: bool) -> tuple[Gains, Terms, Terms]:
    """P, PI, PID or PD, with its numerator and denominator written out by hand."""
    kp = spread(rng, 0.02, 20.0)
    ki = kp / spread(rng, 1.0, 100.0) if rng.random() < 0.7 else 0.0
    kd = kp * spread(rng, 0.1, 10.0) if neutral or rng.random() < 0.4 else 0.0
    tf = kd / kp / 10.0 if kd and not neutral else 0.0
    lag = np.array([tf, 1.0]) if tf else np.ones(1)
    integrator = np.array([1.0, 0.0]) if ki else np.ones(1)
    parts: list[Terms] = [[(0.0, kp * np.convolve(integrator, lag))]]
    if ki:
        parts.append([(0.0, ki * lag)])
    if kd:
        parts.append([(0.0, kd * np.convolve(integrator, [1.0, 0.0]))])
    below = np.convolve(integrator, lag)
    return Gains(kp, ki, kd, tf), add_terms(*parts), [(0.0, below)]


def random_loop(rng: np.random.Generator) -> RandomLoop:
    """Order 1 to 8, one to three dead times, some unstable, integrating, neutral or nested."""
    kind = rng.choice(
        ["plain", "unstable", "integrating", "neutral", "nested"], p=[0.4, 0.2, 0.15, 0.15, 0.1]
    )
    order = 1 if kind == "neutral" else int(rng.integers(1, 9 if kind != "nested" else 6))
    ends = str(kind) if kind in ("unstable", "integrating") else "stable"
    factors = random_factors(rng, order, 1.0, 30.0, ends=ends)
    below: Terms = [(0.0, _expanded(factors))]
    above: Terms = []
    plant = TransferFunction.constant(0.0)
    for _ in range(int(rng.integers(1, 4))):
        numerator = random_numerator(rng, order, 1.0, 30.0)
        delay = spread(rng, 0.3, 30.0)
        above = add_terms(above, [(delay, np.array(numerator))])
        plant = plant + TransferFunction.ratio(numerator, factors, delay)
    if kind == "nested":
        lag, gain, delay = spread(rng, 1.0, 30.0), spread(rng, 0.1, 2.0), spread(rng, 0.3, 10.0)
        plant = plant.feedback(TransferFunction.ratio((gain,), [(lag, 1.0)], delay))
        inner: Terms = [(delay, np.array([gain]))]
        outer: Terms = [(0.0, np.array([lag, 1.0]))]
        below = add_terms(multiply_terms(below, outer), multiply_terms(above, inner))
        above = multiply_terms(above, outer)
    gains, numerator_c, denominator_c = _controller(rng, kind == "neutral")
    sign = -1.0 if rng.random() < 0.1 else 1.0
    flipped = [(d, sign * c) for d, c in multiply_terms(above, numerator_c)]
    characteristic = add_terms(multiply_terms(below, denominator_c), flipped)
    return RandomLoop(
        sign * gains.from_pv() * plant, characteristic, f"{kind}: {gains} {plant} sign {sign}"
    )


def disagreement(loop: RandomLoop) -> str:
    """What the spectral method says against the verdict; empty where both agree."""
    verdict = loop_verdict(loop.open_loop)
    if loop.neutral >= 1.0:
        # J.K. Hale and S.M. Verduyn Lunel, "Introduction to Functional Differential Equations",
        # Springer, 1993, ch. 9 (from memory): with dead times free of common measure, roots
        # gather in the right half plane exactly where the gains at high frequency exceed 1.
        return "" if not verdict.stable and verdict.unstable_roots is None else f"{verdict}"
    for nodes in (8, 16, 24, 40, 64, 100, 160):
        seen = rightmost(loop.characteristic, nodes)
        in_band = abs(seen.root.real) <= BAND * abs(seen.root)
        agree = verdict.stable == (seen.unstable == 0)
        # Dozens of unstable roots lie too high on the axis for any affordable number of nodes.
        many = verdict.unstable_roots is not None and verdict.unstable_roots > 4
        if in_band or (
            agree and (many or verdict.stable or verdict.unstable_roots == seen.unstable)
        ):
            return ""
    return f"verdict {verdict} against rightmost {seen}: {loop.text}"


def verdicts(size: int, seed: int) -> tuple[float, list[str]]:
    """Verdicts on random loops against two other methods: (share wrong, failures).

    One in five is proportional control of a first-order plant with dead time, by Lambert's W.
    """
    rng = np.random.default_rng(seed)
    failures = []
    for i in range(size):
        wrong = lambert_disagreement(rng) if i % 5 == 0 else disagreement(random_loop(rng))
        if wrong:
            failures.append(wrong)
    return len(failures) / size, failures


# --- proportional control of a first-order plant -------------------------------------------------


def lambert_root(gain: float, lag: float, end: float, delay: float) -> complex:
    """Rightmost root of  lag s + end + gain exp(-delay s) = 0.

    With z = delay s + delay end/lag the equation reads z exp(z) = -(gain delay/lag)
    exp(delay end/lag), so that z = W_k(...); for real numbers the principal branch holds the
    rightmost root, and the neighbours are looked at all the same.
    """
    argument = -gain * delay / lag * math.exp(delay * end / lag)
    roots = [complex(lambertw(argument, k)) / delay - end / lag for k in (-2, -1, 0, 1, 2)]
    return max(roots, key=lambda root: root.real)


def lambert_disagreement(rng: np.random.Generator) -> str:
    lag, delay, gain = spread(rng, 0.1, 100.0), spread(rng, 0.05, 50.0), spread(rng, 0.01, 50.0)
    end = 1.0 if rng.random() < 0.6 else -1.0 if rng.random() < 0.7 else 0.0
    gain *= 1 if rng.random() < 0.9 else -1
    if abs(delay * end / lag) > 500.0:
        return ""
    root = lambert_root(gain, lag, end, delay)
    if abs(root.real) <= BAND * abs(root):
        return ""
    plant = TransferFunction.ratio((gain,), [(lag, end) if end else (lag, 0.0)], delay)
    verdict = loop_verdict(plant)
    if verdict.stable == (root.real < 0):
        return ""
    return f"{verdict} against Lambert {root}: gain {gain} lag {lag} end {end} delay {delay}"


def test_proportional_control_of_first_order_agrees_with_lambert_w() -> None:
    rng = np.random.default_rng(2)
    assert [w for _ in range(300) if (w := lambert_disagreement(rng))] == []


@pytest.mark.parametrize("delay", [0.1, 1.0, 7.0])
def test_verdict_flips_at_the_closed_form_limit_of_an_integrator(delay: float) -> None:
    # exact: s + K exp(-L s) has roots on the axis at K = pi/(2 L)
    limit = math.pi / (2.0 * delay)
    below = TransferFunction.ratio((limit * (1 - 1e-6),), [(1.0, 0.0)], delay)
    above = TransferFunction.ratio((limit * (1 + 1e-6),), [(1.0, 0.0)], delay)
    assert loop_verdict(below).stable
    assert loop_verdict(above) == Verdict(
        False, 2, "2 roots in the right half plane: the swing grows"
    )


@pytest.mark.parametrize("case", STABILITIES, ids=lambda case: case.name)
def test_published_verdict(case: StabilityCase) -> None:
    plant = case.plant.transfer() if isinstance(case.plant, Plant) else case.plant
    assert loop_verdict(case.gain * plant).stable is case.stable


@pytest.mark.parametrize(
    ("gain", "stable"),
    [
        (6.044894 - 0.001, True),
        (6.044894 + 0.001, False),
        (52.262798 - 0.005, False),
        (52.27, True),
    ],
)
def test_conditionally_stable_limits_are_the_published_ones(gain: float, stable: bool) -> None:
    # published plant, limits recomputed, from memory
    from tests.model.published import CONDITIONAL

    assert loop_verdict(gain * CONDITIONAL).stable is stable


# --- the spectral method -------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("gain", "lag", "end", "delay"),
    [(2.0, 1.0, 1.0, 1.0), (1.5, 1.0, -1.0, 0.5), (0.3, 9.0, 0.0, 2.0)],
)
def test_the_spectral_method_finds_the_root_that_lambert_w_gives(
    gain: float, lag: float, end: float, delay: float
) -> None:
    terms = [(0.0, np.array([lag, end])), (delay, np.array([gain]))]
    expected = lambert_root(gain, lag, end, delay)
    found = rightmost(terms, 20).root
    assert found.real == pytest.approx(expected.real, abs=1e-9)
    assert abs(found.imag) == pytest.approx(abs(expected.imag), abs=1e-9)


def test_random_loops_agree_with_the_spectral_method() -> None:
    share, failures = verdicts(120, seed=3)
    assert failures == []
    assert share == 0.0


# --- the reasons ---------------------------------------------------------------------------------


def test_neutral_loop_of_gain_one_or_more_is_unstable_with_the_reason() -> None:
    # exact: PD without a filter on a first-order plant leaves K Td/T at high frequency
    plant = TransferFunction.ratio((1.0,), [(10.0, 1.0)], 2.0)
    fast = Gains(2.0, derivative=12.0).from_pv() * plant
    slow = Gains(0.5, derivative=8.0).from_pv() * plant
    verdict = loop_verdict(fast)
    assert not verdict.stable
    assert verdict.unstable_roots is None
    assert "high frequency is 1.2 with dead time" in verdict.reason
    assert "filter the derivative" in verdict.reason
    assert loop_verdict(slow).stable


def test_filtered_derivative_is_no_neutral_loop() -> None:
    plant = TransferFunction.ratio((1.0,), [(10.0, 1.0)], 2.0)
    assert loop_verdict(Gains(2.0, 0.2, 4.0, 0.4).from_pv() * plant).stable


@pytest.mark.parametrize(
    ("open_loop", "words"),
    [
        (TransferFunction.ratio((-1.0,), [(5.0, 1.0)]), "a root at s = 0"),
        # exact: K = pi/(2 L)
        (TransferFunction.ratio((math.pi / 2,), [(1.0, 0.0)], 1.0), "stability boundary"),
        # published, TEXT: three equal lags swing at K = 8
        (TransferFunction.ratio((8.0,), [(1.0, 1.0)] * 3), "stability boundary"),
        (TransferFunction.ratio((1.0, 1.0), [(0.0, 1.0)], 1.0), "faster than its own cause"),
    ],
)
def test_a_loop_on_the_boundary_is_not_stable(open_loop: TransferFunction, words: str) -> None:
    verdict = loop_verdict(open_loop)
    assert not verdict.stable
    assert words in verdict.reason


def test_nothing_cancels_in_the_verdict() -> None:
    # exact: a pole at +1 behind a zero at +1 leaves the loop with a root at +1
    hidden = TransferFunction.ratio((1.0, -1.0), [(1.0, -1.0), (1.0, 1.0)])
    verdict = loop_verdict(hidden)
    assert not verdict.stable
    assert verdict.unstable_roots == 1


@pytest.mark.parametrize(
    ("plant", "stable", "words"),
    [
        (TransferFunction.ratio((1.0,), [(5.0, 1.0)], 3.0), True, ""),
        (TransferFunction.ratio((1.0,), [(1.0, 0.0)]), False, "never comes to rest"),
        (TransferFunction.ratio((1.0,), [(1.0, 0.0, 1.0)]), False, "never comes to rest"),
        (TransferFunction.ratio((1.0,), [(5.0, -1.0)]), False, "runs away"),
        (
            TransferFunction.ratio((1.0,), [(5.0, 1.0)], 3.0).feedback(
                TransferFunction.ratio((9.0,), [(1.0, 1.0)])
            ),
            False,
            "right half plane",
        ),
    ],
)
def test_a_plant_alone(plant: TransferFunction, stable: bool, words: str) -> None:
    verdict = plant_verdict(plant)
    assert verdict.stable is stable
    assert words in verdict.reason


def test_textbook_source_is_named() -> None:
    assert all(case.source for case in STABILITIES)
    assert TEXT in {case.source for case in STABILITIES}


@given(st.floats(0.01, 100.0), st.floats(0.01, 100.0), st.floats(1e-3, 1e3))
def test_the_verdict_does_not_depend_on_the_unit_of_time(
    gain: float, delay: float, unit: float
) -> None:
    loop = TransferFunction.ratio((gain,), [(3.0, 1.0), (1.0, 1.0)], delay)
    assert (
        loop_verdict(loop).unstable_roots == loop_verdict(loop.with_time_unit(unit)).unstable_roots
    )


@pytest.mark.parametrize(
    ("gain", "lag", "delay", "stable"),
    [
        # exact: |L| < 1 at every frequency
        (0.9, 0.01, 1e4, True),
        (0.999, 0.01, 1e4, True),
        (0.9, 1.0, 3.6e5, True),
        # exact: |L| = 1 at sqrt(gain^2 - 1)/lag, where the dead time alone turns thousands of times
        (1.1, 0.01, 1e4, False),
        (1e6, 0.01, 1e4, False),
    ],
)
def test_a_dead_time_of_a_million_lags_is_judged_at_once(
    gain: float, lag: float, delay: float, stable: bool
) -> None:
    started = time.process_time()
    verdict = loop_verdict(TransferFunction.ratio((gain,), [(lag, 1.0)], delay))
    assert time.process_time() - started < 0.5
    assert verdict.stable is stable
    assert verdict.unstable_roots is not None
    if not stable:
        # exact: a pair of roots for each turn of L outside the unit circle, to one
        turns = math.sqrt(gain**2 - 1.0) / lag * delay / (2.0 * math.pi)
        assert verdict.unstable_roots / 2.0 == pytest.approx(turns, abs=1.0, rel=1e-9)


@pytest.mark.parametrize("far", [0.99, 0.9999, 0.999999, 1.000001, 1.01])
def test_a_neutral_loop_is_judged_however_near_the_limit(far: float) -> None:
    # exact: |L| = |far s + 0.3|/|s + 1| stays below 1 for far below 1, and not above
    started = time.process_time()
    verdict = loop_verdict(TransferFunction.ratio((far, 0.3), [(1.0, 1.0)], 10.0))
    assert time.process_time() - started < 0.5
    assert verdict.stable is (far < 1.0)


# --- speed ---------------------------------------------------------------------------------------


def speed(size: int) -> dict[str, float]:
    """Median milliseconds of a verdict, over `size` random settings of the two loops asked for."""
    rng = np.random.default_rng(5)
    simple, large = [], []
    for _ in range(size):
        plant = TransferFunction.ratio(
            (1.8,), [(spread(rng, 1.0, 100.0), 1.0)], spread(rng, 0.5, 20.0)
        )
        gain = spread(rng, 0.1, 5.0)
        simple.append(Gains(gain, gain / spread(rng, 1.0, 100.0)).from_pv() * plant)
        lags = [(spread(rng, 1.0, 100.0), 1.0) for _ in range(8)]
        paths = [
            TransferFunction.ratio((spread(rng, 0.1, 1.0),), lags, spread(rng, 0.5, 50.0))
            for _ in range(3)
        ]
        large.append(gain * (paths[0] + paths[1] + paths[2]))
    return {
        "first order with PI": _median_ms(simple),
        "eight lags with three dead times": _median_ms(large),
    }


def _median_ms(loops: list[TransferFunction]) -> float:
    times = []
    for loop in loops:
        start = time.perf_counter()
        loop_verdict(loop)
        times.append(time.perf_counter() - start)
    return 1e3 * float(np.median(times))


def test_a_verdict_is_quick() -> None:
    # Wanted: 1 ms and 5 ms; a shared machine gets three times that.
    measured = speed(25)
    assert measured["first order with PI"] < 3.0
    assert measured["eight lags with three dead times"] < 15.0
