"""The other route for loops with dead time: the power series in exp(-L s), inverted term by term.

1/(1 + L(s)) = sum_n (-L(s))^n, and every term is a rational function times a dead time, so that up
to any instant only a few terms count.  Each is inverted exactly by its residues, at 60 digits.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from math import comb

from mpmath import binomial, exp, factorial, mpc, mpf, polyroots, workdps

from workbench.model.pid import Gains

DIGITS = 60


class Rational:
    """gain times product of (s - root)^power, roots exact to `DIGITS`."""

    def __init__(self, gain: mpf, powers: dict[mpc, int]) -> None:
        self.gain = gain
        self.powers = Counter({root: power for root, power in powers.items() if power})

    @classmethod
    def lags(cls, gain: float, *times: float) -> Rational:
        """gain / product of (T s + 1); a time of 0 is an integrator."""
        whole, powers = mpf(gain), Counter[mpc]()
        for time in times:
            if time:
                whole /= mpf(time)
            powers[mpc(-1) / mpf(time) if time else mpc(0)] -= 1
        return cls(whole, dict(powers))

    @classmethod
    def polynomial(cls, *coefficients: mpf) -> Rational:
        """From coefficients in descending powers."""
        trimmed = list(coefficients)
        while trimmed[0] == 0:
            trimmed = trimmed[1:]
        roots = polyroots(trimmed, maxsteps=500, extraprec=400) if len(trimmed) > 1 else []
        return cls(mpf(trimmed[0]), dict(Counter(mpc(root) for root in roots)))

    def __mul__(self, other: Rational) -> Rational:
        powers = Counter(self.powers)
        for root, power in other.powers.items():
            powers[root] += power
        return Rational(self.gain * other.gain, dict(powers))

    def __pow__(self, n: int) -> Rational:
        return Rational(self.gain**n, {root: n * power for root, power in self.powers.items()})

    def scaled(self, factor: float) -> Rational:
        return Rational(self.gain * mpf(factor), dict(self.powers))

    def inverse(self) -> list[tuple[mpc, list[mpc]]]:
        """The time function: sum over poles p of exp(p t) times a polynomial in t (rising)."""
        found = []
        for pole, power in self.powers.items():
            if power >= 0:
                continue
            order = -power
            series = [mpc(self.gain)] + [mpc(0)] * (order - 1)
            for root, other in self.powers.items():
                if root == pole:
                    continue
                d = pole - root
                factor = [binomial(other, k) * d ** (other - k) for k in range(order)]
                series = [
                    sum((series[i] * factor[k - i] for i in range(k + 1)), mpc(0))
                    for k in range(order)
                ]
            found.append((pole, [series[order - 1 - j] / factorial(j) for j in range(order)]))
        return found


@dataclass
class Path:
    """One way from OP to PV."""

    function: Rational
    dead_time: float


def controller(gains: Gains, b: float, c: float) -> Rational:
    """b Kp + Ki/s + c Kd s/(1 + Tf s) over one denominator."""
    kp, ki, kd, tf = (
        mpf(x) for x in (gains.proportional, gains.integral, gains.derivative, gains.filter_time)
    )
    kp, kd = kp * mpf(b), kd * mpf(c)
    if not gains.derivative:
        tf = mpf(0)
    top = [kp * tf + kd, kp + ki * tf, ki]
    below = Rational.lags(1.0, *([0.0] if ki else []), *([float(tf)] if tf else []))
    if not ki:
        top = top[:-1]
    return Rational.polynomial(*top) * below


def responses(
    gains: Gains,
    plant: Sequence[Path],
    times: Sequence[float],
    *,
    load: Path | None = None,
    pv_filter: float = 0.0,
    sign: float = 1.0,
) -> tuple[list[float], list[float]]:
    """PV and OP at the times after a unit setpoint step, or a unit upset through `load`."""
    with workdps(DIGITS):
        around = controller(gains, 1.0, 1.0).scaled(sign)
        if pv_filter:
            around = around * Rational.lags(1.0, pv_filter)
        integrator = Rational.lags(1.0, 0.0)
        if load is None:
            forward = controller(gains, gains.setpoint_weight, gains.derivative_weight)
            forward = forward.scaled(sign) * integrator
            op = _expand(forward, 0.0, around, plant, times)
            pv = [0.0] * len(times)
            for path in plant:
                part = _expand(forward * path.function, path.dead_time, around, plant, times)
                pv = [a + b for a, b in zip(pv, part, strict=True)]
            return pv, op
        upset = load.function * integrator
        pv = _expand(upset, load.dead_time, around, plant, times)
        op = _expand(upset * around.scaled(-1.0), load.dead_time, around, plant, times)
        return pv, op


def _expand(
    first: Rational,
    delay: float,
    around: Rational,
    plant: Sequence[Path],
    times: Sequence[float],
) -> list[float]:
    """first exp(-delay s) sum_n (-around plant)^n at the times; at most two paths."""
    totals = [mpf(0)] * len(times)
    shortest = min(path.dead_time for path in plant)
    n = 0
    while mpf(delay) + n * mpf(shortest) <= max(times):
        for k in range(n + 1 if len(plant) == 2 else 1):
            shares = [n - k, k] if len(plant) == 2 else [n]
            term, late = first.scaled((-1.0) ** n * comb(n, k)), mpf(delay)
            for path, power in zip(plant, shares, strict=True):
                term = term * (around * path.function) ** power
                late += power * mpf(path.dead_time)
            if late > max(times):
                continue
            inverse = term.inverse()
            for i, time in enumerate(times):
                if (since := mpf(time) - late) >= 0:
                    totals[i] += value_at(inverse, since)
        n += 1
    return [float(total) for total in totals]


def value_at(inverse: list[tuple[mpc, list[mpc]]], since: mpf) -> mpf:
    """A time function of `Rational.inverse` at an instant."""
    total = mpc(0)
    for pole, polynomial in inverse:
        value = mpc(0)
        for coefficient in reversed(polynomial):
            value = value * since + coefficient
        total += value * exp(pole * since)
    return total.real


def rational_closed_loop(
    gains: Gains, plant: Rational, times: Sequence[float], *, pv_filter: float = 0.0
) -> list[float]:
    """PV after a unit setpoint step of a loop without dead time: residues of the closed loop."""
    with workdps(DIGITS):
        around = controller(gains, 1.0, 1.0) * plant
        if pv_filter:
            around = around * Rational.lags(1.0, pv_filter)
        forward = controller(gains, gains.setpoint_weight, gains.derivative_weight) * plant
        # T = forward / (1 + around), over the denominator of `around`.
        top, below = _parts(around)
        closed = Rational.polynomial(*_sum(top, below))
        whole = forward * Rational(mpf(1), {r: -p for r, p in around.powers.items() if p < 0})
        whole = whole * (closed**-1) * Rational.lags(1.0, 0.0)
        inverse = whole.inverse()
        return [float(value_at(inverse, mpf(time))) for time in times]


def _parts(function: Rational) -> tuple[list[mpf], list[mpf]]:
    """Numerator and denominator, expanded, real, in descending powers."""
    top, below = [mpc(function.gain)], [mpc(1)]
    for root, power in function.powers.items():
        for _ in range(abs(power)):
            if power > 0:
                top = _times(top, root)
            else:
                below = _times(below, root)
    return [x.real for x in top], [x.real for x in below]


def _times(polynomial: list[mpc], root: mpc) -> list[mpc]:
    longer = [*polynomial, mpc(0)]
    for i, coefficient in enumerate(polynomial):
        longer[i + 1] -= root * coefficient
    return longer


def _sum(a: list[mpf], b: list[mpf]) -> list[mpf]:
    size = max(len(a), len(b))
    a = [mpf(0)] * (size - len(a)) + a
    b = [mpf(0)] * (size - len(b)) + b
    return [x + y for x, y in zip(a, b, strict=True)]
