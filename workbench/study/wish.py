"""What proposed settings should aim at, and within which limits; one way to state it for all."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

from workbench.errors import InputError, problem
from workbench.units import (
    TIME_UNITS,
    Amount,
    Quantity,
    harmless,
    plain,
    quantities,
    quantity,
    read_amount,
)


@dataclass(frozen=True)
class RelayTest:
    """The steady swing that a relay in place of the controller made; halves of peak to peak."""

    output: float
    """[OP unit]"""
    swing: float
    """[PV unit]"""
    period: float
    """[s]"""
    hysteresis: float = 0.0
    """[PV unit]"""

    def __str__(self) -> str:
        """As it is typed."""
        parts = [plain(self.output), plain(self.swing), f"{plain(self.period)} s"]
        return ":".join([*parts, plain(self.hysteresis)] if self.hysteresis else parts)

    @classmethod
    def read(cls, typed: str) -> RelayTest:
        """From its words, OP:PV:TIME[:HYSTERESIS].  Raises `InputError`."""
        parts = [part.strip() for part in typed.split(":")]
        refused = problem(
            f"{harmless(typed, 40)!r} is no relay test",
            f'write it like "{_RELAY}", amplitudes above 0 and the hysteresis below the swing',
        )
        if len(parts) not in (3, 4):
            raise refused
        positive = Quantity("", "number", above=0)
        try:
            output, swing = positive.parse(parts[0]), positive.parse(parts[1])
            hysteresis = Quantity("", "number", low=0).parse(parts[3]) if parts[3:] else 0.0
        except InputError:
            raise refused from None
        assert isinstance(output, float)
        assert isinstance(swing, float)
        assert isinstance(hysteresis, float)
        period = read_amount(parts[2], tuple(TIME_UNITS), "36 s").seconds
        if period <= 0.0 or hysteresis >= swing:
            raise refused
        return cls(output, swing, period, hysteresis)


_RELAY: Final = "5:1.2:36 s"


@dataclass(frozen=True)
class Wish:
    """What a proposal should aim at."""

    setpoint_share: float = quantity(
        "share of the setpoint IAE in what is made least; the load IAE has the rest",
        unit="%",
        default=0.0,
        low=0,
        high=100,
        example="30",
    )
    max_sensitivity: float = quantity(
        "limit on Ms, the peak of the sensitivity", default=1.7, above=1, example="1.6"
    )
    max_complementary_sensitivity: float | None = quantity(
        "limit on Mt, the peak of the complementary sensitivity", default=None, above=1
    )
    max_noise_gain: float | None = quantity(
        "how much OP may swing for a swing of the measurement by 1 %",
        unit="%/%",
        default=None,
        above=0,
        example="12",
    )
    max_load_travel: float | None = quantity(
        "how far OP may move after the load step, all its moves added up",
        unit="OP",
        default=None,
        above=0,
        example="8",
    )
    closed_loop_time: Amount | None = quantity(
        "time constant wanted of the answer to a setpoint step, for rules that take one",
        "duration",
        default=None,
        above=0,
        example="30 s",
    )
    largest_upset: float | None = quantity(
        "for levels: largest lasting upset, as the change of OP that balances it",
        unit="OP",
        default=None,
        above=0,
        example="20",
    )
    allowed_deviation: float | None = quantity(
        "for levels: how far PV may leave its setpoint", unit="PV", default=None, above=0
    )
    relay: RelayTest | None = quantity(
        "a relay test in place of the plant's ultimate gain: half of the output's step, half of "
        "PV's swing, period, and half of the hysteresis",
        "text",
        default=None,
        example=_RELAY,
    )
    method: str | None = None
    """This method only."""

    @property
    def share(self) -> float:
        """Share of the setpoint IAE, 0 to 1."""
        return self.setpoint_share / 100.0


def edit_wish(wish: Wish, name: str, typed: str) -> Wish:
    """The wish with one of its quantities as it is typed; nothing typed takes the default back.

    Raises `InputError`, without a key.
    """
    if not typed.strip():
        return replace(wish, **{name: getattr(Wish, name)})
    read = RelayTest.read if name == "relay" else quantities(Wish)[name].parse
    value: object = read(typed)
    return replace(wish, **{name: value})  # type: ignore[arg-type]


def show_wish(wish: Wish, name: str) -> str:
    """One of its quantities as it is typed; nothing where there is none."""
    value = getattr(wish, name)
    if value is None:
        return ""
    return str(value) if name == "relay" else quantities(Wish)[name].show(value)
