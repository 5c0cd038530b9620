"""The table of published tuning rules: what each is for, its limits and its source.

A rule takes a small model in percent of span and seconds and gives settings in the form it was
published for.  Gains come out positive: the controller's action carries the sign.  The formulas
stand in the modules of their families: `closed_loop_time`, `oscillation`, `robust`,
`integral_criteria` and `level`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from workbench.errors import NotApplicable
from workbench.model.reduction import DoubleIntegrator, SmallModel, UnstableLag
from workbench.tune import closed_loop_time as speed
from workbench.tune import integral_criteria as integrals
from workbench.tune import level, oscillation, robust
from workbench.tune.tuning import Form, Tuning, Ultimate


def _no_unstable_lag() -> UnstableLag:
    raise NotApplicable("the plant has not one unstable lag", limit="published for one")


def _no_double_integrator() -> DoubleIntegrator:
    raise NotApplicable("the plant does not integrate twice", limit="published for one that does")


@dataclass(frozen=True)
class Plant:
    """What a rule may look at, each worked out only when a rule asks."""

    small_model: Callable[[int], SmallModel]
    """By the half rule, with one or two lags."""
    ultimate: Callable[[], Ultimate]
    """Of the plant, or as a relay test found it."""
    closed_loop_time: float | None = None
    """As the engineer asked for it [s]."""
    largest_upset: float | None = None
    """Largest lasting step at the plant's input [% of OP span]."""
    allowed_deviation: float | None = None
    """By how much PV may leave its setpoint [% of PV span]."""
    unstable_lag: Callable[[], UnstableLag] = _no_unstable_lag
    double_integrator: Callable[[], DoubleIntegrator] = _no_double_integrator


@dataclass(frozen=True)
class Rule:
    """One row of the table of rules."""

    title: str
    source: str
    objective: str
    """What the settings aim at, as the end of a sentence that begins with "aims at"."""
    limits: str
    """The plants it was published for."""
    function: Callable[..., Tuning]
    """The published formulas; its docstring states limits and source."""
    settings: Callable[[Plant], Tuning]
    """The rule applied to a plant."""
    form: Form = "ideal"
    """The form it was published for."""


_ANY: Final = "one lag, or integrating, with dead time"
_SIMC: Final = f"{_ANY}; without dead time a closed-loop time is needed"
_SHARE: Final = "one lag, L/T 0.1 to 1"
_SWINGS: Final = "a plant whose phase reaches -180 deg"
_QUARTER: Final = "a decay ratio of a quarter: fast, lively, easily upset by a changed plant"
_GIVEN: Final = "a first-order answer to the setpoint with the closed-loop time constant"
_SMOOTH: Final = "the smoothest output that keeps the level within the allowed deviation"
_AVERAGED: Final = "an integrating plant whose dead time is at most 0.1/(K k') (a limit of ours)"
_TIGHT: Final = "tight control with good margins, Ms near 1.6"

RULES: Final[dict[str, Rule]] = {
    "lambda-pi": Rule(
        "lambda PI",
        f"{speed.DAHLIN}; integrating plants: {speed.CHIEN_FRUEHAUF}",
        _GIVEN,
        _SIMC,
        speed.dahlin_lambda_pi,
        lambda p: speed.dahlin_lambda_pi(p.small_model(1), p.closed_loop_time),
    ),
    "imc-pi": Rule(
        "internal model control PI",
        speed.RIVERA,
        _GIVEN,
        "one lag; closed-loop time at least 1.7 L",
        speed.rivera_imc_pi,
        lambda p: speed.rivera_imc_pi(p.small_model(1), p.closed_loop_time),
    ),
    "imc-improved-pi": Rule(
        "internal model control improved PI",
        speed.RIVERA,
        _GIVEN,
        "one lag; closed-loop time at least 1.7 L",
        speed.rivera_imc_improved_pi,
        lambda p: speed.rivera_imc_improved_pi(p.small_model(1), p.closed_loop_time),
    ),
    "imc-pid": Rule(
        "internal model control PID",
        speed.RIVERA,
        _GIVEN,
        "one lag; closed-loop time at least 0.8 L",
        speed.rivera_imc_pid,
        lambda p: speed.rivera_imc_pid(p.small_model(1), p.closed_loop_time),
    ),
    "imc-integrating-pid": Rule(
        "internal model control PID, integrating",
        speed.CHIEN_FRUEHAUF,
        _GIVEN,
        "integrating, with dead time",
        speed.chien_fruehauf_integrating_pid,
        lambda p: speed.chien_fruehauf_integrating_pid(p.small_model(1), p.closed_loop_time),
    ),
    "imc-integrating-lag-pid": Rule(
        "internal model control PID, integrating with a lag",
        speed.CHIEN_FRUEHAUF,
        _GIVEN,
        "integrating with one lag, with dead time",
        speed.chien_fruehauf_integrating_lag_pid,
        lambda p: speed.chien_fruehauf_integrating_lag_pid(p.small_model(2), p.closed_loop_time),
    ),
    "imc-unstable-pid": Rule(
        "internal model control PID, unstable",
        speed.LEE_LEE_PARK,
        _GIVEN,
        "one unstable lag, L/T at most 0.6",
        speed.lee_imc_unstable_pid,
        lambda p: speed.lee_imc_unstable_pid(p.unstable_lag(), p.closed_loop_time),
    ),
    "simc-pi": Rule(
        "SIMC PI",
        speed.SKOGESTAD,
        _TIGHT,
        _SIMC,
        speed.skogestad_simc_pi,
        lambda p: speed.skogestad_simc_pi(p.small_model(1), p.closed_loop_time),
    ),
    "simc-pid": Rule(
        "SIMC PID",
        speed.SKOGESTAD,
        _TIGHT,
        "two lags, or integrating with a lag, with dead time",
        speed.skogestad_simc_pid,
        lambda p: speed.skogestad_simc_pid(p.small_model(2), p.closed_loop_time),
        "series",
    ),
    "simc-improved-pi": Rule(
        "improved SIMC PI",
        speed.GRIMHOLT_SKOGESTAD_2012,
        _TIGHT,
        _SIMC,
        speed.grimholt_skogestad_simc_improved_pi,
        lambda p: speed.grimholt_skogestad_simc_improved_pi(p.small_model(1), p.closed_loop_time),
    ),
    "simc-improved-pid": Rule(
        "improved SIMC PID",
        speed.GRIMHOLT_SKOGESTAD_2018,
        _TIGHT,
        _ANY,
        speed.grimholt_skogestad_simc_improved_pid,
        lambda p: speed.grimholt_skogestad_simc_improved_pid(p.small_model(1), p.closed_loop_time),
        "series",
    ),
    "simc-double-integrating-pid": Rule(
        "SIMC PID, integrating twice",
        speed.SKOGESTAD,
        _TIGHT,
        "integrating twice; without dead time a closed-loop time is needed",
        speed.skogestad_simc_double_integrating,
        lambda p: speed.skogestad_simc_double_integrating(
            p.double_integrator(), p.closed_loop_time
        ),
        "series",
    ),
    "amigo-pi": Rule(
        "AMIGO PI",
        robust.AMIGO,
        "the largest integral gain with Ms and Mt at most 1.4",
        _ANY,
        robust.astrom_hagglund_amigo_pi,
        lambda p: robust.astrom_hagglund_amigo_pi(p.small_model(1)),
    ),
    "amigo-pid": Rule(
        "AMIGO PID",
        robust.AMIGO,
        "the largest integral gain with Ms and Mt at most 1.4",
        _ANY,
        robust.astrom_hagglund_amigo_pid,
        lambda p: robust.astrom_hagglund_amigo_pid(p.small_model(1)),
    ),
    "hagglund-astrom-pi": Rule(
        "Hagglund-Astrom PI",
        robust.HAGGLUND_ASTROM,
        "the largest integral gain with Ms and Mt at most 1.4",
        _ANY,
        robust.hagglund_astrom_pi,
        lambda p: robust.hagglund_astrom_pi(p.small_model(1)),
    ),
    "ho-hang-cao-pi": Rule(
        "gain and phase margin PI",
        robust.HO_HANG_CAO,
        "a gain margin of 3 with a phase margin of 60 deg",
        "one lag, with dead time",
        robust.ho_hang_cao_pi,
        lambda p: robust.ho_hang_cao_pi(p.small_model(1), 3.0, 60.0),
    ),
    "tyreus-luyben-pi": Rule(
        "Tyreus-Luyben PI",
        oscillation.TYREUS_LUYBEN,
        "a closed-loop resonance of 2 dB on integrating plants",
        _SWINGS,
        oscillation.tyreus_luyben,
        lambda p: oscillation.tyreus_luyben(p.ultimate(), "pi"),
    ),
    "tyreus-luyben-pid": Rule(
        "Tyreus-Luyben PID",
        oscillation.TYREUS_LUYBEN,
        "a closed-loop resonance of 2 dB on integrating plants",
        _SWINGS,
        oscillation.tyreus_luyben,
        lambda p: oscillation.tyreus_luyben(p.ultimate(), "pid"),
    ),
    "cohen-coon-p": Rule(
        "Cohen-Coon P",
        oscillation.COHEN_COON,
        _QUARTER,
        "one lag, with dead time, L/T at most 1",
        oscillation.cohen_coon,
        lambda p: oscillation.cohen_coon(p.small_model(1), "p"),
    ),
    "cohen-coon-pi": Rule(
        "Cohen-Coon PI",
        oscillation.COHEN_COON,
        _QUARTER,
        "one lag, with dead time, L/T at most 1",
        oscillation.cohen_coon,
        lambda p: oscillation.cohen_coon(p.small_model(1), "pi"),
    ),
    "cohen-coon-pid": Rule(
        "Cohen-Coon PID",
        oscillation.COHEN_COON,
        _QUARTER,
        "one lag, with dead time, L/T at most 1",
        oscillation.cohen_coon,
        lambda p: oscillation.cohen_coon(p.small_model(1), "pid"),
    ),
    "chr-0-p": Rule(
        "Chien-Hrones-Reswick no overshoot, P",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a load or setpoint step with no overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "load", 0, "p"),
    ),
    "chr-load-0-pi": Rule(
        "Chien-Hrones-Reswick load, no overshoot, PI",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a load step with no overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "load", 0, "pi"),
    ),
    "chr-load-0-pid": Rule(
        "Chien-Hrones-Reswick load, no overshoot, PID",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a load step with no overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "load", 0, "pid"),
    ),
    "chr-20-p": Rule(
        "Chien-Hrones-Reswick 20 % overshoot, P",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a load or setpoint step with 20 % overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "load", 20, "p"),
    ),
    "chr-load-20-pi": Rule(
        "Chien-Hrones-Reswick load, 20 % overshoot, PI",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a load step with 20 % overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "load", 20, "pi"),
    ),
    "chr-load-20-pid": Rule(
        "Chien-Hrones-Reswick load, 20 % overshoot, PID",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a load step with 20 % overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "load", 20, "pid"),
    ),
    "chr-setpoint-0-pi": Rule(
        "Chien-Hrones-Reswick setpoint, no overshoot, PI",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a setpoint step with no overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "setpoint", 0, "pi"),
    ),
    "chr-setpoint-0-pid": Rule(
        "Chien-Hrones-Reswick setpoint, no overshoot, PID",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a setpoint step with no overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "setpoint", 0, "pid"),
    ),
    "chr-setpoint-20-pi": Rule(
        "Chien-Hrones-Reswick setpoint, 20 % overshoot, PI",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a setpoint step with 20 % overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "setpoint", 20, "pi"),
    ),
    "chr-setpoint-20-pid": Rule(
        "Chien-Hrones-Reswick setpoint, 20 % overshoot, PID",
        oscillation.CHIEN_HRONES_RESWICK,
        "the quickest answer to a setpoint step with 20 % overshoot",
        _SHARE,
        oscillation.chien_hrones_reswick,
        lambda p: oscillation.chien_hrones_reswick(p.small_model(1), "setpoint", 20, "pid"),
    ),
    "ziegler-nichols-reaction-p": Rule(
        "Ziegler-Nichols reaction curve P",
        oscillation.ZIEGLER_NICHOLS,
        _QUARTER,
        _ANY,
        oscillation.ziegler_nichols_reaction,
        lambda p: oscillation.ziegler_nichols_reaction(p.small_model(1), "p"),
    ),
    "ziegler-nichols-reaction-pi": Rule(
        "Ziegler-Nichols reaction curve PI",
        oscillation.ZIEGLER_NICHOLS,
        _QUARTER,
        _ANY,
        oscillation.ziegler_nichols_reaction,
        lambda p: oscillation.ziegler_nichols_reaction(p.small_model(1), "pi"),
    ),
    "ziegler-nichols-reaction-pid": Rule(
        "Ziegler-Nichols reaction curve PID",
        oscillation.ZIEGLER_NICHOLS,
        _QUARTER,
        _ANY,
        oscillation.ziegler_nichols_reaction,
        lambda p: oscillation.ziegler_nichols_reaction(p.small_model(1), "pid"),
    ),
    "ziegler-nichols-ultimate-p": Rule(
        "Ziegler-Nichols ultimate P",
        oscillation.ZIEGLER_NICHOLS,
        _QUARTER,
        _SWINGS,
        oscillation.ziegler_nichols_ultimate,
        lambda p: oscillation.ziegler_nichols_ultimate(p.ultimate(), "p"),
    ),
    "ziegler-nichols-ultimate-pi": Rule(
        "Ziegler-Nichols ultimate PI",
        oscillation.ZIEGLER_NICHOLS,
        _QUARTER,
        _SWINGS,
        oscillation.ziegler_nichols_ultimate,
        lambda p: oscillation.ziegler_nichols_ultimate(p.ultimate(), "pi"),
    ),
    "ziegler-nichols-ultimate-pid": Rule(
        "Ziegler-Nichols ultimate PID",
        oscillation.ZIEGLER_NICHOLS,
        _QUARTER,
        _SWINGS,
        oscillation.ziegler_nichols_ultimate,
        lambda p: oscillation.ziegler_nichols_ultimate(p.ultimate(), "pid"),
    ),
    "lopez-iae-load-pi": Rule(
        "Lopez least IAE after a load step, PI",
        integrals.LOPEZ,
        "the least IAE after a load step, whatever the margins",
        _SHARE,
        integrals.lopez_load,
        lambda p: integrals.lopez_load(p.small_model(1), "iae", "pi"),
    ),
    "lopez-ise-load-pi": Rule(
        "Lopez least ISE after a load step, PI",
        integrals.LOPEZ,
        "the least ISE after a load step, whatever the margins",
        _SHARE,
        integrals.lopez_load,
        lambda p: integrals.lopez_load(p.small_model(1), "ise", "pi"),
    ),
    "lopez-itae-load-pi": Rule(
        "Lopez least ITAE after a load step, PI",
        integrals.LOPEZ,
        "the least ITAE after a load step, whatever the margins",
        _SHARE,
        integrals.lopez_load,
        lambda p: integrals.lopez_load(p.small_model(1), "itae", "pi"),
    ),
    "lopez-iae-load-pid": Rule(
        "Lopez least IAE after a load step, PID",
        integrals.LOPEZ,
        "the least IAE after a load step, whatever the margins",
        _SHARE,
        integrals.lopez_load,
        lambda p: integrals.lopez_load(p.small_model(1), "iae", "pid"),
    ),
    "lopez-ise-load-pid": Rule(
        "Lopez least ISE after a load step, PID",
        integrals.LOPEZ,
        "the least ISE after a load step, whatever the margins",
        _SHARE,
        integrals.lopez_load,
        lambda p: integrals.lopez_load(p.small_model(1), "ise", "pid"),
    ),
    "lopez-itae-load-pid": Rule(
        "Lopez least ITAE after a load step, PID",
        integrals.LOPEZ,
        "the least ITAE after a load step, whatever the margins",
        _SHARE,
        integrals.lopez_load,
        lambda p: integrals.lopez_load(p.small_model(1), "itae", "pid"),
    ),
    "rovira-iae-setpoint-pi": Rule(
        "Rovira least IAE after a setpoint step, PI",
        integrals.ROVIRA,
        "the least IAE after a setpoint step, whatever the margins",
        _SHARE,
        integrals.rovira_setpoint,
        lambda p: integrals.rovira_setpoint(p.small_model(1), "iae", "pi"),
    ),
    "rovira-itae-setpoint-pi": Rule(
        "Rovira least ITAE after a setpoint step, PI",
        integrals.ROVIRA,
        "the least ITAE after a setpoint step, whatever the margins",
        _SHARE,
        integrals.rovira_setpoint,
        lambda p: integrals.rovira_setpoint(p.small_model(1), "itae", "pi"),
    ),
    "rovira-iae-setpoint-pid": Rule(
        "Rovira least IAE after a setpoint step, PID",
        integrals.ROVIRA,
        "the least IAE after a setpoint step, whatever the margins",
        _SHARE,
        integrals.rovira_setpoint,
        lambda p: integrals.rovira_setpoint(p.small_model(1), "iae", "pid"),
    ),
    "rovira-itae-setpoint-pid": Rule(
        "Rovira least ITAE after a setpoint step, PID",
        integrals.ROVIRA,
        "the least ITAE after a setpoint step, whatever the margins",
        _SHARE,
        integrals.rovira_setpoint,
        lambda p: integrals.rovira_setpoint(p.small_model(1), "itae", "pid"),
    ),
    "averaging-level-p": Rule(
        "averaging level P",
        level.SKOGESTAD_SMOOTH,
        _SMOOTH,
        _AVERAGED,
        level.skogestad_averaging_level,
        lambda p: level.skogestad_averaging_level(
            p.small_model(1), p.largest_upset, p.allowed_deviation, "p"
        ),
    ),
    "averaging-level-pi": Rule(
        "averaging level PI",
        level.SKOGESTAD_SMOOTH_PI,
        _SMOOTH,
        _AVERAGED,
        level.skogestad_averaging_level,
        lambda p: level.skogestad_averaging_level(
            p.small_model(1), p.largest_upset, p.allowed_deviation, "pi"
        ),
    ),
    "tight-level-pi": Rule(
        "tight level PI",
        level.SKOGESTAD_SMOOTH,
        "the tightest level that the dead time allows with good margins",
        "integrating, with dead time",
        level.skogestad_tight_level,
        lambda p: level.skogestad_tight_level(
            p.small_model(1), p.largest_upset, p.allowed_deviation
        ),
    ),
}
"""Method name, as commands and files write it -> the rule."""
