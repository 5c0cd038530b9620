"""Margins and peaks: published loops, other routes at high precision, and margins made."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, fields, replace
from typing import Any

import mpmath
import numpy as np
import pytest

from tests.model.published import (
    CONDITIONAL,
    MARGINS,
    ULTIMATES,
    UNSTABLE_LAG,
    MarginCase,
    UltimateCase,
)
from tests.model.routes import (
    Path,
    Scanned,
    decimals,
    parallel,
    random_factors,
    random_numerator,
    sampled_route,
    spread,
)
from tests.model.test_stability import random_loop
from workbench.model.feedback import Loop
from workbench.model.formula import parse_formula
from workbench.model.pid import Gains
from workbench.model.robustness import Margins, analogue_margins, sampled_margins
from workbench.model.sampled import SampledLoop
from workbench.model.stability import loop_verdict
from workbench.model.transfer import TransferFunction
from workbench.units import Figure

WANTED = 1e-3
"""A tenth of a percent."""


def _loop(plant: TransferFunction, gains: Gains, **more: Any) -> Loop:
    return Loop(plant, plant, gains, **more)


def _value(figure: Figure) -> float:
    assert figure.value is not None, figure.reason
    return figure.value


# --- published loops -----------------------------------------------------------------------------


@pytest.mark.parametrize("case", MARGINS, ids=lambda case: case.name)
def test_published_loop(case: MarginCase) -> None:
    margins = analogue_margins(_loop(case.plant.transfer(), case.settings.gains()))
    assert margins.stable
    for name, expected in case.figures.items():
        figure: Figure = getattr(margins, name)
        assert figure.value == pytest.approx(expected, rel=WANTED), (name, case.source, case.worth)


def test_the_published_loops_are_many() -> None:
    figures = [name for case in MARGINS for name in case.figures]
    assert len(MARGINS) >= 40
    assert set(figures) >= {
        "max_sensitivity",
        "max_complementary_sensitivity",
        "gain_margin",
        "phase_margin_deg",
        "delay_margin_s",
        "gain_crossover_rad_s",
        "phase_crossover_rad_s",
    }


@pytest.mark.parametrize("case", ULTIMATES, ids=lambda case: case.name)
def test_half_the_ultimate_gain_has_a_gain_margin_of_two_at_the_ultimate_period(
    case: UltimateCase,
) -> None:
    margins = analogue_margins(_loop(case.plant.transfer(), Gains(case.gain / 2.0)))
    assert margins.gain_margin.value == pytest.approx(2.0, rel=WANTED), case.source
    frequency = _value(margins.phase_crossover_rad_s)
    assert 2.0 * math.pi / frequency == pytest.approx(case.period, rel=WANTED), case.source


@pytest.mark.parametrize(
    ("time", "sensitivity", "delay_margin"),
    [
        # published rule (O.J.M. Smith, Chem. Eng. Prog. 53(5) (1957) 217-219, from memory), values
        # recomputed; S = 1 - exp(-s)/(lambda s + 1)
        (0.5, 1.680988, 1.6272353),
        (1.0, 1.4818714, 2.348451),
        (2.0, 1.3060774, 3.8564082),
    ],
)
def test_a_dead_time_inside_an_inner_feedback_counts_exactly(
    time: float, sensitivity: float, delay_margin: float
) -> None:
    plant = TransferFunction.ratio((1.0 / time,), [(1.0, 0.0)])
    late = TransferFunction.ratio((1.0,), dead_time=1.0)
    margins = analogue_margins(_loop(plant.feedback(1.0 - late) * late, Gains(1.0)))
    assert margins.max_sensitivity.value == pytest.approx(sensitivity, rel=WANTED)
    assert margins.delay_margin_s.value == pytest.approx(delay_margin, rel=WANTED)


# --- another route at high precision -------------------------------------------------------------


@dataclass(frozen=True)
class Other:
    """The figures of a loop from its value at jw by mpmath, crossings bisected at 30 digits."""

    gain_margin: float
    phase_margin_deg: float
    delay_margin_s: float
    max_sensitivity: float
    max_complementary_sensitivity: float


def _other(value: Callable[[Any], Any], low: float, high: float) -> Other:
    """`value` is L(jw) as an mpc; crossings are looked for between `low` and `high` [rad/s]."""
    grid = np.geomspace(low, high, 6000)
    coarse = np.array([complex(value(mpmath.mpf(w))) for w in grid])
    with mpmath.workdps(30):

        def bisected(f: Callable[[Any], Any], a: float, b: float) -> Any:
            return mpmath.findroot(f, (mpmath.mpf(a), mpmath.mpf(b)), solver="anderson", tol=1e-25)

        gain_margins, phases, delays = [], [], []
        for i in range(len(grid) - 1):
            a, b = coarse[i], coarse[i + 1]
            if a.imag * b.imag < 0 and min(a.real, b.real) < 0:
                w = bisected(lambda w: mpmath.im(value(w)), grid[i], grid[i + 1])
                if mpmath.re(value(w)) < 0:
                    gain_margins.append(float(-1 / mpmath.re(value(w))))
            if (abs(a) - 1) * (abs(b) - 1) < 0:
                w = bisected(lambda w: abs(value(w)) - 1, grid[i], grid[i + 1])
                lag = mpmath.arg(-value(w))
                phases.append(float(abs(mpmath.degrees(lag))))
                delays.append(float((lag if lag > 0 else lag + 2 * mpmath.pi) / w))
        return Other(
            min((g for g in gain_margins if g > 1), default=math.inf),
            min(phases, default=math.inf),
            min(delays, default=math.inf),
            _summit(lambda w: 1 / abs(1 + value(w)), grid, 1 / np.abs(1 + coarse)),
            _summit(lambda w: abs(value(w) / (1 + value(w))), grid, np.abs(coarse / (1 + coarse))),
        )


def _summit(f: Callable[[Any], Any], grid: Any, coarse: Any) -> float:
    """The largest value, by golden section about the largest point of the grid."""
    top = int(coarse.argmax())
    a, b = mpmath.mpf(grid[max(0, top - 1)]), mpmath.mpf(grid[min(len(grid) - 1, top + 1)])
    share = (mpmath.sqrt(5) - 1) / 2
    for _ in range(40):
        c, d = b - share * (b - a), a + share * (b - a)
        a, b = (a, d) if f(c) > f(d) else (c, b)
    return max(float(f((a + b) / 2)), float(coarse[top]))


OTHER_LOOPS = {
    # plant paths, controller
    "pi on a first-order plant": ([Path((1.8,), ((40.0, 1.0),), 6.0)], Gains(1.1, 1.1 / 32.0)),
    "filtered pid": ([Path((1.8,), ((40.0, 1.0),), 6.0)], Gains(2.0, 0.08, 5.0, 0.25)),
    "two paths": (
        [Path((1.0,), ((10.0, 1.0),), 2.0), Path((0.5,), ((25.0, 1.0), (3.0, 1.0)), 9.0)],
        Gains(0.8, 0.05),
    ),
    "three dead times that subtract": (
        [
            Path((2.0,), ((12.0, 1.0),), 1.0),
            Path((-0.7,), ((12.0, 1.0),), 4.0),
            Path((0.4,), ((30.0, 1.0),), 15.0),
        ],
        Gains(0.6, 0.03),
    ),
    "inverse response": ([Path((-8.0, 2.0), ((15.0, 1.0), (6.0, 1.0)), 1.0)], Gains(0.3, 0.02)),
    "lead": ([Path((18.0, 2.0), ((15.0, 1.0), (6.0, 1.0)), 2.0)], Gains(0.3, 0.05)),
    "integrating with a lag": ([Path((0.02,), ((1.0, 0.0), (7.0, 1.0)), 5.0)], Gains(2.0, 0.02)),
    "lightly damped": ([Path((1.0,), ((25.0, 0.5, 1.0),), 1.0)], Gains(0.02, 0.005)),
    "very lightly damped": ([Path((1.0,), ((25.0, 0.02, 1.0),), 0.5)], Gains(0.001, 0.0002)),
    "eight equal lags": ([Path((1.0,), ((5.0, 1.0),) * 8, 3.0)], Gains(0.5, 0.015)),
    "unstable plant": ([Path((1.5,), ((30.0, -1.0),), 2.0)], Gains(4.0, 0.05, 5.0, 0.5)),
    "dead time alone": ([Path((0.5,), (), 4.0)], Gains(0.3, 0.2)),
    "far time scales": ([Path((1.0,), ((3600.0, 1.0), (0.5, 1.0)), 1.0)], Gains(300.0, 1.0)),
}


@pytest.mark.parametrize("name", OTHER_LOOPS)
def test_margins_agree_with_another_route(name: str) -> None:
    # other route: the formula in mpmath, scanned and bisected
    paths, gains = OTHER_LOOPS[name]
    margins = analogue_margins(_loop(parallel(paths), gains))
    assert margins.stable, margins.reason

    def value(w: Any) -> Any:
        s = mpmath.mpc(0, w)
        lag = 1 + gains.filter_time * s
        control = gains.proportional + gains.integral / s + gains.derivative * s / lag
        return control * mpmath.fsum(path(s) for path in paths)

    at = (margins.gain_crossover_rad_s.value or 0.1, margins.phase_crossover_rad_s.value or 0.1)
    other = _other(value, 0.02 * min(at), 60.0 * max(at))
    for field in fields(other):
        expected = getattr(other, field.name)
        found: Figure = getattr(margins, field.name)
        if math.isinf(expected):
            assert found.value is None, field.name
        else:
            # Where the peak of T is its limit at frequency 0 the scan comes near it only.
            assert found.value == pytest.approx(expected, rel=WANTED), field.name


def test_the_peak_at_either_end_of_the_axis_counts() -> None:
    # exact: |S| -> 1/(1 - 0.3) at high frequency, |T| -> 3/(1 + 3) at frequency 0
    far = _loop(TransferFunction.ratio((1.0,), [(1.0, 1.0)], 1.0), Gains(0.6, 0.6, 0.3))
    assert _value(analogue_margins(far).max_sensitivity) == pytest.approx(1 / 0.7, rel=1e-6)
    near = _loop(TransferFunction.ratio((3.0,), [(1.0, 1.0)]), Gains(1.0))
    margins = analogue_margins(near)
    assert margins.max_complementary_sensitivity.value == pytest.approx(0.75, rel=1e-9)
    assert margins.max_sensitivity.value == pytest.approx(1.0, rel=1e-9)


# --- the bandwidth -------------------------------------------------------------------------------


def test_the_bandwidth_of_an_integrator_under_gain_is_the_gain() -> None:
    # exact: T = k/(s + k) is at -3 dB at k rad/s
    margins = analogue_margins(_loop(TransferFunction.ratio((0.2,), [(1.0, 0.0)]), Gains(1.5)))
    assert margins.bandwidth_rad_s.value == pytest.approx(0.3, rel=1e-9)


def test_the_bandwidth_of_a_second_order_loop() -> None:
    # exact: T = w^2/(s^2 + 2 z w s + w^2) is at -3 dB at w sqrt(a + sqrt(1 + a^2)), a = 1 - 2 z^2
    w, z = 0.4, 0.3
    plant = TransferFunction.ratio((w * w,), [(1.0, 0.0), (1.0, 2.0 * z * w)])
    inner = 1.0 - 2.0 * z * z
    exact = w * math.sqrt(inner + math.sqrt(1.0 + inner * inner))
    margins = analogue_margins(_loop(plant, Gains(1.0)))
    assert margins.bandwidth_rad_s.value == pytest.approx(exact, rel=1e-9)


def test_the_bandwidth_of_a_dead_time_by_itself() -> None:
    # exact: |L| = k/w with phase -90 deg - L w: |T|^2 = 1/2 where (w/k)^2 - 2 (w/k) sin(L w) = 1
    gain, dead_time = 0.1, 4.0
    plant = TransferFunction.ratio((gain,), [(1.0, 0.0)], dead_time)
    found = _value(analogue_margins(_loop(plant, Gains(1.0))).bandwidth_rad_s)
    exact = mpmath.findroot(
        lambda w: (w / gain) ** 2 - 2 * (w / gain) * mpmath.sin(dead_time * w) - 1, 0.15
    )
    assert found == pytest.approx(float(exact), rel=1e-9)


def test_a_loop_that_does_not_follow_has_no_bandwidth() -> None:
    # exact: T(0) = 1/(1 + 1)
    margins = analogue_margins(_loop(TransferFunction.ratio((1.0,), [(4.0, 1.0)]), Gains(1.0)))
    assert margins.bandwidth_rad_s.value is None
    assert "slow setpoint" in margins.bandwidth_rad_s.reason
    # exact: T = 9 at every frequency but for the lag far above
    direct = analogue_margins(_loop(TransferFunction.constant(9.0), Gains(1.0)))
    assert direct.bandwidth_rad_s.value is None
    assert "every frequency" in direct.bandwidth_rad_s.reason


# --- margins found are margins made --------------------------------------------------------------


def _later(open_loop: TransferFunction, delay: float) -> TransferFunction:
    return open_loop * TransferFunction.ratio((1.0,), dead_time=delay)


def brinks(size: int, seed: int) -> tuple[float, list[str]]:
    """Margins of random stable loops against the verdict: (share wrong, failures).

    The gain a millionth short of each margin leaves the loop stable, a millionth beyond does not;
    so with the dead time.
    """
    rng = np.random.default_rng(seed)
    judged, failures = 0, []
    while judged < size:
        loop = random_loop(rng).open_loop
        if not loop_verdict(loop).stable:
            continue
        judged += 1
        margins = analogue_margins(_loop(loop, Gains(1.0)))
        failures += [f"{wrong}: {loop}" for wrong in _brink_faults(loop, margins)]
        failures += [f"{wrong}: {loop}" for wrong in _bound_faults(margins)]
    return len(failures) / size, failures


def _brink_faults(loop: TransferFunction, margins: Margins) -> list[str]:
    wrong = []
    tries: list[tuple[str, Figure, Callable[[float], TransferFunction], float]] = [
        ("gain margin", margins.gain_margin, lambda k: k * loop, 1.0),
        ("lower gain margin", margins.gain_margin_lower, lambda k: k * loop, -1.0),
        ("delay margin", margins.delay_margin_s, lambda d: _later(loop, d), 1.0),
    ]
    for name, figure, made, direction in tries:
        if figure.value:
            before = loop_verdict(made(figure.value * (1.0 - direction * 1e-6))).stable
            beyond = loop_verdict(made(figure.value * (1.0 + direction * 1e-6))).stable
            if not before or beyond:
                wrong.append(f"{name} {figure.value}: {before} before it, {beyond} beyond")
        elif name == "gain margin" and not loop_verdict(1e3 * loop).stable:
            wrong.append("no gain margin, but a gain of 1000 upsets it")
    return wrong


def _bound_faults(margins: Margins) -> list[str]:
    """GM >= Ms/(Ms - 1), PM >= 2 asin(1/(2 Ms)) (S. Skogestad and I. Postlethwaite, Multivariable
    Feedback Control, 2nd ed., 2005, section 2.4, from memory)."""
    peak = _value(margins.max_sensitivity)
    wrong = []
    if margins.gain_margin.value and peak > 1.0:
        bound = peak / (peak - 1.0)
        if margins.gain_margin.value < bound * (1 - 1e-6):
            wrong.append(f"gain margin {margins.gain_margin.value} below its bound {bound}")
    if margins.phase_margin_deg.value is not None:
        bound = math.degrees(2.0 * math.asin(1.0 / (2.0 * peak)))
        if margins.phase_margin_deg.value < bound * (1 - 1e-6):
            wrong.append(f"phase margin {margins.phase_margin_deg.value} below its bound {bound}")
    return wrong


def test_margins_found_are_margins_made() -> None:
    share, failures = brinks(25, seed=21)
    assert failures == []
    assert share == 0.0


@pytest.mark.parametrize(
    "loop",
    [
        # Paths that add up again far above the first crossing; the last two are of neutral type.
        Path((0.8,), ((9.0, 1.0), (0.2, 1.0)), 0.3).transfer()
        + Path((0.7,), ((9.0, 1.0), (0.2, 1.0)), 16.0).transfer(),
        Path((1.169, 2.526), ((4.03, 1.0),), 0.398).transfer()
        + Path((1.370, 2.959), ((4.03, 1.0),), 16.2).transfer(),
        Path((0.0026, 0.0165, 0.0064), ((1.0, 0.0), (2.5, 1.0)), 0.395).transfer()
        + Path((0.00095, 0.006, 0.0023), ((1.0, 0.0), (2.5, 1.0)), 17.9).transfer(),
    ],
)
def test_dead_times_that_meet_again_at_high_frequency_are_not_overlooked(
    loop: TransferFunction,
) -> None:
    margins = analogue_margins(_loop(loop, Gains(1.0)))
    assert margins.stable
    assert _brink_faults(loop, margins) == []
    assert _bound_faults(margins) == []


# --- figures that do not exist, and why ----------------------------------------------------------


def test_an_unstable_loop_has_no_margins() -> None:
    margins = analogue_margins(_loop(TransferFunction.ratio((1.0,), [(1.0, 1.0)], 1.0), Gains(3.0)))
    assert not margins.stable
    assert margins.reason == "2 roots in the right half plane: the swing grows"
    figures = [getattr(margins, f.name) for f in fields(margins)[2:]]
    assert len(figures) == 9
    assert all(f.value is None and "not stable" in f.reason for f in figures)


def test_a_loop_that_no_gain_upsets_says_so() -> None:
    margins = analogue_margins(_loop(TransferFunction.ratio((0.5,), [(4.0, 1.0)]), Gains(1.0)))
    assert margins.gain_margin.value is None
    assert "never reaches -180 deg" in margins.gain_margin.reason
    assert margins.phase_margin_deg.value is None
    assert margins.phase_margin_deg.reason == "the loop gain never crosses 1"
    assert margins.gain_margin_lower.reason == "no fall of the gain upsets this loop"


def test_a_loop_left_open_is_as_stable_as_its_plant() -> None:
    plant = TransferFunction.ratio((2.0,), [(4.0, 1.0)], 1.0)
    margins = analogue_margins(_loop(plant, Gains(0.0)))
    assert margins.stable
    # exact: S = 1, T = 0
    assert (margins.max_sensitivity.value, margins.max_complementary_sensitivity.value) == (
        1.0,
        0.0,
    )
    assert not analogue_margins(_loop(UNSTABLE_LAG, Gains(0.0))).stable


def test_no_dead_time_at_all_is_survived_where_the_loop_would_turn_neutral() -> None:
    # exact: |L| -> 3 at high frequency; with any dead time the loop is of neutral type above 1
    plant = TransferFunction.ratio((3.0, 1.0), [(1.0, 1.0)])
    margins = analogue_margins(_loop(plant, Gains(1.0)))
    assert margins.stable
    assert margins.delay_margin_s.value == 0.0
    assert not loop_verdict(_later(plant, 1e-6)).stable


@pytest.mark.parametrize(
    ("plant", "gain", "lower", "upper"),
    [
        # published plants, limits recomputed, from memory
        (CONDITIONAL, 5.0, None, 6.044894 / 5.0),
        (CONDITIONAL, 55.0, 52.262798 / 55.0, None),
        (UNSTABLE_LAG, 1.5, 1.0 / 1.5, 2.53656 / 1.5),
    ],
)
def test_conditional_stability_has_a_margin_on_either_side(
    plant: TransferFunction, gain: float, lower: float | None, upper: float | None
) -> None:
    margins = analogue_margins(_loop(plant, Gains(gain)))
    assert margins.gain_margin_lower.value == (lower and pytest.approx(lower, rel=WANTED))
    assert margins.gain_margin.value == (upper and pytest.approx(upper, rel=WANTED))


def test_the_double_integrator_may_lose_five_sixths_of_its_gain() -> None:
    # published rule (S. Skogestad, J. Process Control 13 (2003) 291-309, from memory), recomputed
    case = next(c for c in MARGINS if c.name == "simc-dbl")
    margins = analogue_margins(_loop(case.plant.transfer(), case.settings.gains()))
    assert margins.gain_margin_lower.value == pytest.approx(0.165, abs=5e-4)


def test_direct_action_is_reverse_action_on_the_mirrored_plant() -> None:
    plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], 6.0)
    gains = Gains(1.1, 1.1 / 32.0)
    assert analogue_margins(_loop(-plant, gains, reverse=False)) == analogue_margins(
        _loop(plant, gains)
    )


def test_the_pv_filter_counts() -> None:
    plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], 6.0)
    gains = Gains(1.1, 1.1 / 32.0)
    inside = plant * TransferFunction.ratio((1.0,), [(3.0, 1.0)])
    filtered = analogue_margins(_loop(plant, gains, pv_filter=3.0))
    assert _value(filtered.gain_margin) == pytest.approx(
        _value(analogue_margins(_loop(inside, gains)).gain_margin), rel=1e-9
    )


def test_a_narrow_resonance_beside_its_zero_is_not_overlooked() -> None:
    # A notch that misses its resonance by a thousandth; exact peak from mpmath's own search.
    plant = parse_formula("exp(-0.2 s) (s^2 + 0.002 s + 1)/((s^2 + 0.002 s + 1.002) (s + 1))")
    margins = analogue_margins(_loop(plant, Gains(0.5, 0.3)))

    def value(w: Any) -> Any:
        s = mpmath.mpc(0, w)
        top = s * s + mpmath.mpf("0.002") * s + 1
        below = (s * s + mpmath.mpf("0.002") * s + mpmath.mpf("1.002")) * (s + 1)
        return (0.5 + 0.3 / s) * mpmath.exp(-s / 5) * top / below

    grid = np.linspace(0.99, 1.01, 4001)
    peak = max(float(1 / abs(1 + value(mpmath.mpf(w)))) for w in grid)
    assert _value(margins.max_sensitivity) >= peak * (1 - WANTED)


# --- the sampled loop ----------------------------------------------------------------------------


def _sampled(paths: list[Path], settings: Scanned) -> Loop:
    gains = Gains(
        settings.proportional, settings.integral, settings.derivative, settings.filter_time
    )
    return _loop(
        parallel(paths),
        gains,
        scan=settings.scan,
        computing_delay=settings.computing_delay,
        pv_filter=settings.pv_filter,
    )


def _random_sampled(rng: np.random.Generator) -> tuple[list[Path], Scanned]:
    """One or two paths of order to 4 with fractional dead time; some integrating or unstable."""
    ends = str(rng.choice(["stable", "stable", "integrating", "unstable"]))
    paths = []
    for i in range(int(rng.integers(1, 3))):
        order = int(rng.integers(1, 5))
        factors = random_factors(rng, order, 2.0, 40.0, ends=ends if i == 0 else "stable")
        numerator = random_numerator(rng, order, 2.0, 40.0)
        paths.append(Path(numerator, factors, decimals(rng.uniform(0.0, 12.0))))
    kp, scan = spread(rng, 0.05, 5.0), spread(rng, 0.2, 5.0)
    kd = kp * spread(rng, 0.3, 5.0) if rng.random() < 0.4 else 0.0
    return paths, Scanned(
        scan,
        kp,
        kp / spread(rng, 3.0, 100.0) if rng.random() < 0.8 else 0.0,
        kd,
        kd / kp / 10.0 if rng.random() < 0.8 else 0.0,
        spread(rng, 0.5, 8.0) if rng.random() < 0.4 else 0.0,
        decimals(rng.uniform(0.0, 1.0) * scan) if rng.random() < 0.5 else 0.0,
    )


def sampled_verdicts(size: int, seed: int) -> tuple[float, list[str]]:
    """Sampled verdicts and gain margins against eigenvalues of the closed loop written out as
    difference equations: (worst relative difference of a gain margin, failures)."""
    rng = np.random.default_rng(seed)
    worst, failures = 0.0, []
    for _ in range(size):
        paths, settings = _random_sampled(rng)
        sizes = np.abs(sampled_route(paths, settings).eigenvalues())
        if abs(sizes.max() - 1.0) < 1e-6:
            continue
        loop = _sampled(paths, settings)
        verdict = SampledLoop.of(loop).verdict()
        outside = int((sizes > 1.0).sum())
        if verdict.unstable_roots != outside or verdict.stable != (outside == 0):
            failures.append(f"{verdict} against {outside} outside: {paths} {settings}")
        elif verdict.stable:
            difference = _gain_margin_difference(paths, settings, sampled_margins(loop))
            worst = max(worst, difference)
            if difference > 1e-6:
                failures.append(f"gain margin off by {difference}: {paths} {settings}")
    return worst, failures


def _gain_margin_difference(paths: list[Path], settings: Scanned, margins: Margins) -> float:
    """The gain margin, against bisection on the eigenvalues of the closed loop."""

    def radius(gain: float) -> float:
        scaled = replace(
            settings,
            proportional=gain * settings.proportional,
            integral=gain * settings.integral,
            derivative=gain * settings.derivative,
        )
        return float(np.abs(sampled_route(paths, scaled).eigenvalues()).max())

    found = margins.gain_margin.value
    if found is None:
        return 0.0 if radius(50.0) < 1.0 else math.inf
    steps = np.geomspace(1.0 + 1e-9, found * 1.02, 40)
    beyond = next((i for i, k in enumerate(steps) if radius(float(k)) > 1.0), 0)
    if beyond == 0:
        return math.inf
    low, high = float(steps[beyond - 1]), float(steps[beyond])
    for _ in range(45):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if radius(middle) < 1.0 else (low, middle)
    return abs(found - low) / low


def _circle_differences(paths: list[Path], settings: Scanned, margins: Margins) -> list[float]:
    """How far from the unit circle the outermost eigenvalue is with each margin used up."""
    brinks = [
        (paths, _times(settings, figure.value))
        for figure in (margins.gain_margin, margins.gain_margin_lower)
        if figure.value is not None
    ]
    late = margins.delay_margin_s.value
    # Beyond some scans the dead time makes a matrix of thousands of rows.
    if late is not None and late < 80.0 * settings.scan:
        brinks.append(([_later_path(path, late) for path in paths], settings))
    return [
        float(np.abs(np.abs(sampled_route(*brink).eigenvalues()) - 1.0).min()) for brink in brinks
    ]


def _times(settings: Scanned, gain: float) -> Scanned:
    return replace(
        settings,
        proportional=gain * settings.proportional,
        integral=gain * settings.integral,
        derivative=gain * settings.derivative,
    )


def _later_path(path: Path, late: float) -> Path:
    return replace(path, dead_time=path.dead_time + late)


def sampled_circles(size: int, seed: int) -> tuple[float, list[str]]:
    """Sampled gain, lower gain and delay margins used up, against the eigenvalues of the closed
    loop: (worst distance of the nearest one from the unit circle, failures)."""
    rng = np.random.default_rng(seed)
    worst, failures, judged = 0.0, [], 0
    while judged < size:
        paths, settings = _random_sampled(rng)
        margins = sampled_margins(_sampled(paths, settings))
        if not margins.stable:
            continue
        judged += 1
        off = max(_circle_differences(paths, settings, margins), default=0.0)
        worst = max(worst, off)
        if off > 1e-6:
            failures.append(f"{off} from the unit circle: {paths} {settings}")
    return worst, failures


def test_sampled_verdicts_and_gain_margins_agree_with_eigenvalues() -> None:
    worst, failures = sampled_verdicts(30, seed=31)
    assert failures == []
    assert worst < 1e-6


SAMPLED_LOOPS = {
    "whole scans of dead time": ([Path((1.8,), ((40.0, 1.0),), 6.0)], Scanned(1.0, 1.1, 0.03)),
    "fractional dead time": ([Path((1.8,), ((40.0, 1.0),), 6.35)], Scanned(1.0, 1.1, 0.03)),
    "dead time below a scan": ([Path((1.8,), ((40.0, 1.0),), 0.4)], Scanned(1.0, 3.0, 0.2)),
    "computing delay": (
        [Path((1.8,), ((40.0, 1.0),), 6.0)],
        Scanned(2.0, 1.1, 0.03, computing_delay=0.7),
    ),
    "pv filter": ([Path((1.8,), ((40.0, 1.0),), 6.0)], Scanned(1.0, 1.1, 0.03, pv_filter=4.0)),
    "filtered derivative": (
        [Path((1.8,), ((40.0, 1.0),), 6.0)],
        Scanned(1.0, 1.5, 0.04, 4.0, 0.4),
    ),
    "unfiltered derivative": ([Path((1.8,), ((40.0, 1.0),), 6.0)], Scanned(1.0, 1.2, 0.03, 3.0)),
    "two paths": (
        [Path((1.0,), ((10.0, 1.0),), 2.3), Path((0.5,), ((25.0, 1.0), (3.0, 1.0)), 9.1)],
        Scanned(0.7, 0.8, 0.05, pv_filter=1.0, computing_delay=0.2),
    ),
    "integrating": ([Path((0.02,), ((1.0, 0.0),), 5.0)], Scanned(1.0, 3.0, 0.05)),
    "unstable plant": ([Path((1.5,), ((30.0, -1.0),), 2.0)], Scanned(0.5, 4.0, 0.05)),
}


@pytest.mark.parametrize("name", SAMPLED_LOOPS)
def test_sampled_figures_agree_with_the_difference_equations(name: str) -> None:
    # other route: L(z) from the matrices, scanned up to half the scan rate
    paths, settings = SAMPLED_LOOPS[name]
    margins = sampled_margins(_sampled(paths, settings))
    assert margins.stable, margins.reason
    route = sampled_route(paths, settings)
    assert np.abs(route.eigenvalues()).max() < 1.0

    top = math.pi / settings.scan
    grid = np.geomspace(1e-4 * top, top, 6000)
    values = np.array([route.loop_gain(complex(np.exp(1j * w * settings.scan))) for w in grid])
    assert _value(margins.max_sensitivity) == pytest.approx(
        float((1 / np.abs(1 + values)).max()), rel=WANTED
    )
    size = np.abs(values)
    at = np.flatnonzero((size[:-1] - 1) * (size[1:] - 1) < 0)
    share = (size[at] - 1) / (size[at] - size[at + 1])
    crossing = grid[at] * (grid[at + 1] / grid[at]) ** share
    lag = np.angle(
        -np.array([route.loop_gain(complex(np.exp(1j * w * settings.scan))) for w in crossing])
    )
    assert _value(margins.phase_margin_deg) == pytest.approx(
        float(np.degrees(np.abs(lag)).min()), rel=WANTED
    )
    late = np.where(lag > 0, lag, lag + 2 * math.pi) / crossing
    assert _value(margins.delay_margin_s) == pytest.approx(float(late.min()), rel=WANTED)
    followed = np.abs(values / (1 + values))
    assert _value(margins.max_complementary_sensitivity) == pytest.approx(
        float(followed.max()), rel=WANTED
    )
    below = np.flatnonzero(followed < math.sqrt(0.5))
    assert _value(margins.bandwidth_rad_s) == pytest.approx(float(grid[below[0]]), rel=2e-3)
    assert _gain_margin_difference(paths, settings, margins) < 1e-6
    assert max(_circle_differences(paths, settings, margins)) < 1e-6


def test_a_short_scan_gives_the_analogue_figures() -> None:
    # exact in the limit; what is left is of the size of half a scan in the dead time
    plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], 6.0)
    gains = Gains(1.1, 1.1 / 32.0)
    analogue = analogue_margins(_loop(plant, gains))
    sampled = sampled_margins(_loop(plant, gains, scan=0.002))
    for field in fields(Margins)[2:]:
        near, exact = getattr(sampled, field.name).value, getattr(analogue, field.name).value
        assert near == (exact and pytest.approx(exact, rel=2e-3)), field.name


def test_an_unstable_sampled_loop_has_no_margins() -> None:
    plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], 6.0)
    margins = sampled_margins(_loop(plant, Gains(20.0), scan=1.0))
    assert not margins.stable
    assert "outside the unit circle" in margins.reason
    assert margins.gain_margin.value is None


def test_sampling_costs_margin() -> None:
    plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], 6.0)
    gains = Gains(1.1, 1.1 / 32.0)
    found = [
        _value(sampled_margins(_loop(plant, gains, scan=scan)).gain_margin)
        for scan in (0.1, 1.0, 3.0, 6.0)
    ]
    assert found == sorted(found, reverse=True)


def test_a_dead_time_on_the_scan_does_not_jump() -> None:
    # A dead time a billionth of a scan to either side is the same loop.
    gains = Gains(1.1, 1.1 / 32.0)

    def gain_margin(dead_time: float) -> float:
        plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], dead_time)
        return _value(sampled_margins(_loop(plant, gains, scan=1.0)).gain_margin)

    assert gain_margin(6.0 - 1e-8) == pytest.approx(gain_margin(6.0), rel=1e-6)
    assert gain_margin(6.0 + 1e-8) == pytest.approx(gain_margin(6.0), rel=1e-6)
    # exact: 0.1 s scans do not add up in binary, 30 of them are still 3 s
    plant = TransferFunction.ratio((1.8,), [(40.0, 1.0)], 3.0)
    readings = SampledLoop.of(_loop(plant, gains, scan=0.1)).readings
    assert [r.scans for r in readings] == [30]


def test_a_loop_gain_that_grazes_1_between_two_frequencies_is_a_crossover() -> None:
    """Other route: |L| at two million frequencies; the resonance reaches 1.0012 at 0.0697 rad/s."""
    plant = TransferFunction.ratio(
        (0.23373226390030927,), [(203.88284441307212, 2.194046257174165, 1.0)]
    )
    gains = Gains(0.635044913780599, 0.0040650949083962055, 3.2203395544966513, 0.507104219656697)
    loop = Loop(plant=plant, load=plant, gains=gains, reverse=True, pv_filter=2.2063537921528287)

    s = 1j * np.geomspace(0.05, 0.1, 200_001)
    by_hand = 0.635044913780599 + 0.0040650949083962055 / s
    by_hand = by_hand + 3.2203395544966513 * s / (0.507104219656697 * s + 1.0)
    by_hand = by_hand / (2.2063537921528287 * s + 1.0)
    by_hand = by_hand * 0.23373226390030927
    by_hand = by_hand / (203.88284441307212 * s**2 + 2.194046257174165 * s + 1.0)
    crossed = np.flatnonzero(np.diff(np.sign(np.abs(by_hand) - 1.0)))
    narrowest = 180.0 - np.abs(np.degrees(np.angle(by_hand[crossed]))).max()

    assert len(crossed) == 2
    found = analogue_margins(loop).phase_margin_deg.value
    assert found == pytest.approx(narrowest, abs=0.01)
