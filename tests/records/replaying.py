"""Records of known controllers, by a plain recursion: what `recognise` is judged on."""

from __future__ import annotations

import random
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Final

import numpy as np

from tests.plain import HeldLag
from workbench.errors import InputError
from workbench.model.pid import Controller, Gains
from workbench.records.record import Record
from workbench.records.replay import Ranges, differences, readings, recognise
from workbench.units import Amount, Range

RANGES: Final = Ranges(Range(0.0, 250.0), Range(0.0, 100.0))


@dataclass(frozen=True)
class Ran:
    """A controller, and a record of it in automatic."""

    sheet: Controller
    action: str
    record: Record


def drawn(draw: random.Random) -> Controller:
    """PI or PID settings in a form and units of their own, in round numbers as people type them."""
    form = draw.choice(("ideal", "ideal", "series", "parallel"))
    gain = float(f"{draw.uniform(0.4, 2.5):.2g}")
    seconds = float(f"{draw.uniform(15.0, 60.0):.2g}")
    ratio = draw.choice((0.0, 0.0, 0.1, 0.2))
    td = float(f"{seconds * ratio:.2g}")
    n = draw.choice((5.0, 8.0, 10.0, 20.0))
    on = draw.choice(("pv", "error"))
    if form == "parallel":
        integral = Amount(float(f"{gain / seconds:.2g}"), "1/s")
        derivative = Amount(float(f"{gain * td:.2g}"), "s") if td else None
        return Controller(form, gain, None, integral, derivative, n, derivative_on=on)
    unit = draw.choice(("s", "min", "repeats/min"))
    amount = Amount(1.0, unit).with_seconds(seconds)
    integral = Amount(float(f"{amount.value:.3g}"), unit)
    derivative = Amount(td, "s") if td else None
    band = draw.random() < 0.3
    given, pb = (None, float(f"{100.0 / gain:.3g}")) if band else (gain, None)
    return Controller(form, given, pb, integral, derivative, n, derivative_on=on)


def ran(sheet: Controller, action: str, seed: int, rows: int = 900) -> Record:
    """The controller on a lag with dead time: setpoint moves, noise, and stamps 10 ms off."""
    draw = random.Random(seed)
    gains, sign = sheet.gains(), 1.0 if action == "reverse" else -1.0
    plant, moved = HeldLag(sign * 0.9, 40.0, 5.0, 1.0), []
    part = Executed(gains)
    setpoint, found = 0.0, []
    for k in range(rows):
        if k % 150 == 30:
            setpoint = draw.uniform(-6.0, 6.0)
        pv = plant.value + draw.gauss(0.0, 0.06)
        op = sign * part.scan(setpoint, pv)
        found.append((k + draw.uniform(-0.01, 0.01), setpoint, pv, op))
        moved.append(op + (2.0 if k > 500 else 0.0))
        plant.run(moved, k)
    time, sp, pv_all, op_all = (np.array(column) for column in zip(*found, strict=True))
    return Record(
        "made.csv",
        time - time[0],
        np.round(120.0 + 2.5 * pv_all, 2),
        np.round(50.0 + op_all, 2),
        sp=np.round(120.0 + 2.5 * sp, 2),
        mode=("AUTO",) * rows,
    )


class Executed:
    """The sampled algorithm as the manual writes it, scan by scan of 1 s."""

    def __init__(self, gains: Gains) -> None:
        self.gains, self.integral, self.derivative, self.before = gains, 0.0, 0.0, 0.0

    def scan(self, r: float, y: float) -> float:
        g, h = self.gains, 1.0
        self.integral += g.integral * h * (r - y)
        seen = g.derivative_weight * r - y
        total = g.filter_time + h
        self.derivative = g.filter_time / total * self.derivative + g.derivative / total * (
            seen - self.before
        )
        self.before = seen
        return g.proportional * (g.setpoint_weight * r - y) + self.integral + self.derivative


def made(seed: int, size: int) -> Iterator[Ran]:
    draw = random.Random(seed)
    while size:
        try:
            sheet = drawn(draw)
        except InputError:
            continue
        action = draw.choice(("reverse", "direct"))
        record = ran(sheet, action, draw.randrange(10**6))
        if float(record.op.min()) > 2.0 and float(record.op.max()) < 98.0:
            size -= 1
            yield Ran(sheet, action, record)


def wrong(draw: random.Random, sheet: Controller, action: str) -> tuple[Controller, str]:
    """A sheet with one thing on it that is not so."""
    kind = draw.choice(("gain", "integral", "unit", "action"))
    if kind == "action":
        return sheet, "direct" if action == "reverse" else "reverse"
    assert sheet.integral is not None
    if kind == "unit":
        others = [one for _, one in readings(sheet) if one.integral != sheet.integral]
        return draw.choice(others), action
    if kind == "integral":
        held = sheet.integral
        return replace(sheet, integral=Amount(held.value * 1.1, held.unit)), action
    if sheet.gain is not None:
        return replace(sheet, gain=sheet.gain * 0.9), action
    assert sheet.proportional_band is not None
    return replace(sheet, proportional_band=sheet.proportional_band * 1.1), action


def recognised(size: int, seed: int) -> tuple[float, list[str]]:
    """Share of the records whose controller is not named to 2 %, or whose wrong sheet passes."""
    draw, failures = random.Random(seed), []
    for one in made(seed, size):
        told = f"{one.sheet} {one.action}"
        found = recognise(one.record, RANGES)
        if not found.candidates:
            failures.append(f"{told}: {found.reason}")
            continue
        best = found.candidates[0]
        off = differences(best, one.sheet, one.action)
        named = one.sheet.form == best.form or one.sheet.form in best.same_as
        passed = not differences(best, *wrong(draw, one.sheet, one.action))
        far = _furthest(best.settings.gains(), one.sheet.gains())
        if off or passed or not named or far > 0.02:
            failures.append(f"{told}: {best}, {off}, {far}, wrong sheet passed: {passed}")
    return len(failures) / size, failures


def _furthest(one: Gains, other: Gains) -> float:
    """Largest share by which a gain is off."""
    pairs = [
        (one.proportional, other.proportional),
        (one.integral, other.integral),
        (one.derivative, other.derivative),
    ]
    return max(abs(a - b) / abs(b) if b else float(a != 0.0) for a, b in pairs)
