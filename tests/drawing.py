"""Trends and frequency pictures of any numbers at all: nothing ends the program.

Run in a process of its own, because unclean numbers would abort it, not raise:
`python -m tests.drawing SEED COUNT` prints `done`.
"""

from __future__ import annotations

import subprocess
import sys
from typing import Final

import numpy as np
from numpy.typing import NDArray

from workbench.case.case import new_case
from workbench.charts import PINS, Curve, Pane, draw, pin_names, time_unit, trend_panes, x_span
from workbench.model.frequency import OpenLoop
from workbench.model.robustness import Margins
from workbench.screens.responses import open_loop_panes, sensitivity_panes
from workbench.study import FrequencyResponse, Trend
from workbench.units import Figure

Floats = NDArray[np.float64]

ODD: Final = [0.0, -0.0, 1e300, -1e300, 5e-324, 1.7e308, -1.7e308, np.nan, np.inf, -np.inf]
CASE: Final = new_case("TIC-307")


def values(dice: np.random.Generator, n: int) -> Floats:
    """Numbers of one of the kinds that a loop, or a fault, could make."""
    y: Floats = dice.normal(size=n) * 10.0 ** dice.integers(-300, 300)
    kind = dice.integers(0, 8)
    if kind == 0:
        y[:] = dice.choice(ODD)
    elif kind == 1:
        y = np.exp(np.minimum(np.arange(n) * dice.uniform(0, 5), 709.0))
    elif kind == 2:
        y[dice.random(n) < 0.3] = np.nan
    elif kind == 3:
        y[dice.random(n) < 0.2] = dice.choice(ODD)
    elif kind == 4:
        y = np.full(n, dice.normal())
    elif kind == 5:
        y = dice.choice([1.7e308, -1.7e308], n)
    elif kind == 6:
        y = np.cumsum(dice.normal(size=n))
    return y


def trends(dice: np.random.Generator, n: int, x: Floats) -> tuple[Pane, ...]:
    """A trend over up to three pins."""
    made = [Trend(x, *(values(dice, n) for _ in range(3))) for _ in range(4)]
    pinned = dict(zip(PINS[: dice.integers(0, 4)], made[1:], strict=False))
    return trend_panes(CASE, made[0], pinned)


def responses(dice: np.random.Generator, n: int, _: Floats) -> tuple[Pane, ...]:
    """The loop over frequency, with margins that need not fit."""

    def one() -> FrequencyResponse:
        low = dice.uniform(-290, 280)
        frequency = np.geomspace(10.0**low, 10.0 ** dice.uniform(low, low + 9), n)
        size = [np.abs(values(dice, n)) for _ in range(3)]
        loop = OpenLoop(frequency, size[0], values(dice, n), size[1], size[2])
        return FrequencyResponse(loop, sampled=bool(dice.random() < 0.5))

    def figure() -> Figure:
        if dice.random() < 0.3:
            return Figure(None, "the loop is not stable")
        return Figure.of(float(10.0 ** dice.uniform(-9, 9)))

    margins = Margins(True, "", *(figure() for _ in range(9)))
    pinned = {ink: one() for ink in PINS[: dice.integers(0, 4)]}
    make = open_loop_panes if dice.random() < 0.5 else sensitivity_panes
    return make(one(), margins, pinned)


def anything(dice: np.random.Generator, n: int, x: Floats) -> tuple[Pane, ...]:
    """Curves over bounds of their own."""
    bounds = (0.0, 250.0) if dice.random() < 0.5 else None
    names = pin_names(PINS)
    upper = (*(Curve(x, values(dice, n), ink, names[ink]) for ink in PINS),)
    return (Pane("PV", upper, bounds, 2.0), Pane("OP", (Curve(x, values(dice, n), "pv", "OP"),)))


def drawn(seed: int, count: int) -> None:
    """Draw so many pictures, each of exactly the size asked for."""
    dice = np.random.default_rng(seed)
    for turn in range(count):
        n = int(dice.choice([0, 1, 2, 3, 50, 400]))
        even = dice.random() < 0.7
        x = np.linspace(0, 10.0 ** dice.integers(-3, 9), n) if even else values(dice, n)
        make = (trends, responses, anything)[turn % 3]
        panes = make(dice, n, x)
        low, high = x_span(panes)
        assert time_unit(high - low) in ("s", "min", "h")
        ends = sorted(dice.uniform(-0.5, 1.5, 2))
        limits = tuple(low + (high - low) * end for end in ends)
        width, height = int(dice.integers(0, 190)), int(dice.integers(0, 55))
        picture = draw(
            panes,
            width,
            height,
            x_limits=(limits[0], limits[1]) if dice.random() < 0.4 else None,
            x_name="rad/s" if make is responses else "",
            x_scale="decades" if make is responses else "plain",
            cursor=float(dice.choice([low, high, 0.3 * low + 0.7 * high, *ODD])),
            ascii_only=bool(turn % 2),
        )
        assert picture.characters.shape == picture.styles.shape == (height, width)
        if turn % 2 and picture.characters.size:
            assert picture.characters.min() >= 0x20
            assert picture.characters.max() <= 0x7E


def pictures(count: int, seed: int) -> tuple[float, list[str]]:
    """Pictures drawn in processes of their own, a thousand each; what ended one of them."""
    failures = []
    for start in range(0, count, 1000):
        words = [str(seed + start), str(min(1000, count - start))]
        done = subprocess.run(
            [sys.executable, "-W", "error", "-m", "tests.drawing", *words],
            capture_output=True,
            text=True,
            check=False,
        )
        if (done.returncode, done.stdout) != (0, "done\n"):
            failures.append(f"{words}: status {done.returncode}\n{done.stderr[-2000:]}")
    return float(len(failures)), failures


if __name__ == "__main__":
    drawn(int(sys.argv[1]), int(sys.argv[2]))
    print("done")
