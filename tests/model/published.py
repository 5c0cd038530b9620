"""Figures with a published source, as tables that the tests run over.

Each row says what its figure is worth: published (printed in the source and recomputed), closed
form, published rule with the value recomputed, or recomputed only; "from memory" where the source
was not at hand.  Dead time is exact in every recomputation.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from workbench.model.pid import Gains
from workbench.model.transfer import TransferFunction

# --- sources -------------------------------------------------------------------------------------

AH04: Final = (
    "K.J. Astrom & T. Hagglund, Revisiting the Ziegler-Nichols step response method for "
    "PID control, J. Process Control 14 (2004) 635-650"
)
APH98: Final = (
    "K.J. Astrom, H. Panagopoulos, T. Hagglund, Design of PI controllers based on "
    "non-convex optimization, Automatica 34(5) (1998) 585-601"
)
BENCH00: Final = (
    "K.J. Astrom & T. Hagglund, Benchmark systems for PID control, IFAC PID00 Terrassa (2000)"
)
CC53: Final = (
    "G.H. Cohen & G.A. Coon, Theoretical consideration of retarded control, Trans. ASME "
    "75 (1953) 827-834"
)
CF90: Final = (
    "I.-L. Chien & P.S. Fruehauf, Consider IMC tuning to improve controller performance, "
    "Chem. Eng. Prog. 86(10) (1990) 33-41"
)
CHR52: Final = (
    "K.L. Chien, J.A. Hrones, J.B. Reswick, On the automatic control of generalized "
    "passive systems, Trans. ASME 74 (1952) 175-185"
)
GS12: Final = (
    "C. Grimholt & S. Skogestad, Optimal PI-control and verification of the SIMC tuning "
    "rule, IFAC PID12 Brescia (2012)"
)
HHC95: Final = (
    "W.K. Ho, C.C. Hang, L.S. Cao, Tuning of PID controllers based on gain and phase "
    "margin specifications, Automatica 31 (1995) 497-502"
)
L86: Final = (
    "W.L. Luyben, Simple method for tuning SISO controllers in multivariable systems, IEC "
    "Proc. Des. Dev. 25 (1986) 654-660"
)
LOP67: Final = (
    "A.M. Lopez et al., Controller tuning relationships based on integral performance "
    "criteria, Instrum. Technol. 14(11) (1967) 57-62"
)
OWN: Final = "own computation only (no published figure claimed)"
RMS86: Final = (
    "D.E. Rivera, M. Morari, S. Skogestad, Internal model control 4. PID controller "
    "design, IEC Proc. Des. Dev. 25 (1986) 252-265"
)
ROV69: Final = (
    "A.A. Rovira, P.W. Murrill, C.L. Smith, Tuning controllers for setpoint changes, "
    "Instrum. Control Syst. 42 (1969) 67-69"
)
S03: Final = (
    "S. Skogestad, Simple analytic rules for model reduction and PID controller tuning, "
    "J. Process Control 13 (2003) 291-309"
)
SEM: Final = "D.E. Seborg, T.F. Edgar, D.A. Mellichamp, Process Dynamics and Control"
TEXT: Final = "standard textbook result (closed form)"
TL92: Final = (
    "B.D. Tyreus & W.L. Luyben, Tuning PI controllers for integrator/dead time processes, "
    "Ind. Eng. Chem. Res. 31 (1992) 2625-2628"
)
ZN42: Final = (
    "J.G. Ziegler & N.B. Nichols, Optimum settings for automatic controllers, Trans. ASME "
    "64 (1942) 759-768"
)

# --- what a row is made of -----------------------------------------------------------------------


@dataclass(frozen=True)
class Plant:
    """k product(zeros_i s + 1) exp(-dead_time s) / (s^integrators product(lags_i s + 1))."""

    gain: float
    lags: tuple[float, ...]
    dead_time: float
    zeros: tuple[float, ...] = ()
    integrators: int = 0

    def transfer(self) -> TransferFunction:
        numerator = np.array([self.gain])
        for zero in self.zeros:
            numerator = np.convolve(numerator, [zero, 1.0])
        factors = [(1.0, 0.0)] * self.integrators + [(lag, 1.0) for lag in self.lags]
        return TransferFunction.ratio(numerator.tolist(), factors, self.dead_time)


@dataclass(frozen=True)
class Settings:
    """P, PI, PID-ideal and PID-series as usual, without a derivative filter; I is gain / s."""

    form: str
    gain: float
    integral_time: float
    derivative_time: float

    def gains(self) -> Gains:
        k, ti, td = self.gain, self.integral_time, self.derivative_time
        if self.form == "I":
            return Gains(0.0, k)
        if self.form == "P":
            return Gains(k)
        if self.form == "PID-series":
            return Gains(k * (1.0 + td / ti), k / ti, k * td)
        return Gains(k, k / ti, k * td)


@dataclass(frozen=True)
class MarginCase:
    name: str
    plant: Plant
    settings: Settings
    figures: dict[str, float]
    source: str
    worth: str


@dataclass(frozen=True)
class UltimateCase:
    name: str
    plant: Plant
    gain: float
    period: float
    source: str
    worth: str


@dataclass(frozen=True)
class StabilityCase:
    """The plant under proportional control."""

    name: str
    plant: Plant | TransferFunction
    gain: float
    stable: bool
    source: str
    worth: str


@dataclass(frozen=True)
class HalfRuleCase:
    """(T, L) of the model with one lag, or (T1, T2, L) with two."""

    name: str
    plant: Plant
    model: tuple[float, ...]
    source: str
    worth: str


# --- the tables ----------------------------------------------------------------------------------

MARGINS: Final = (
    MarginCase(
        "simc-fo-tau1",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.5, 1.0, 0.0),
        {
            "max_sensitivity": 1.5904902,
            "max_complementary_sensitivity": 1.0,
            "gain_margin": 3.1415927,
            "phase_margin_deg": 61.35211,
            "delay_margin_s": 2.1415927,
            "phase_crossover_rad_s": 1.5707963,
            "gain_crossover_rad_s": 0.5,
        },
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-int",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.5, 8.0, 0.0),
        {
            "max_sensitivity": 1.7035217,
            "max_complementary_sensitivity": 1.2994176,
            "gain_margin": 2.9634022,
            "phase_margin_deg": 46.864287,
            "delay_margin_s": 1.5896368,
            "phase_crossover_rad_s": 1.4869276,
            "gain_crossover_rad_s": 0.51454276,
        },
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-fo-tau8",
        Plant(1.0, (8.0,), 1.0, (), 0),
        Settings("PI", 4.0, 8.0, 0.0),
        {"max_sensitivity": 1.5904902, "gain_margin": 3.1415927},
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-delay",
        Plant(1.0, (), 1.0, (), 0),
        Settings("I", 0.5, 0.0, 0.0),
        {"max_sensitivity": 1.5904902, "gain_margin": 3.1415927, "phase_margin_deg": 61.35211},
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-dbl",
        Plant(1.0, (), 1.0, (), 2),
        Settings("PID-series", 0.0625, 8.0, 8.0),
        {
            "max_sensitivity": 1.9588185,
            "gain_margin": 2.7609879,
            "phase_margin_deg": 33.109398,
            "delay_margin_s": 1.094403,
        },
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-E7-PI",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (-2.0,), 0),
        Settings("PI", 0.214, 1.5, 0.0),
        {"max_sensitivity": 1.6590889, "gain_margin": 2.8347511, "phase_margin_deg": 60.867286},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E8-PI",
        Plant(1.0, (1.0, 1.0), 0.0, (), 1),
        Settings("PI", 0.3333333333333333, 12.0, 0.0),
        {"max_sensitivity": 1.7708166, "gain_margin": 5.0, "phase_margin_deg": 40.275911},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E10-PI",
        Plant(1.0, (20.0, 2.0), 1.0, (), 0),
        Settings("PI", 5.25, 16.0, 0.0),
        {"max_sensitivity": 1.7155657, "gain_margin": 3.9757414, "phase_margin_deg": 47.848887},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E11-PI",
        Plant(1.0, (6.0, 2.0, 2.0), 1.0, (-1.0,), 0),
        Settings("PI", 0.7, 7.0, 0.0),
        {"max_sensitivity": 1.6263673, "gain_margin": 3.3361525, "phase_margin_deg": 59.604682},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E15-PI",
        Plant(1.0, (1.0,), 0.0, (-1.0,), 0),
        Settings("PI", 0.5, 1.0, 0.0),
        {"max_sensitivity": 2.0, "phase_margin_deg": 60.0},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E14-PI",
        Plant(1.0, (), 0.0, (-1.0,), 1),
        Settings("PI", 0.5, 8.0, 0.0),
        {"max_sensitivity": 2.0, "phase_margin_deg": 47.397246},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E2-PID",
        Plant(1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), 0.0, (-0.3, 0.08), 0),
        Settings("PID-series", 1.3, 2.0, 1.2),
        {"max_sensitivity": 1.7251128, "gain_margin": 2.8935533, "phase_margin_deg": 57.948531},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E4-PID",
        Plant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0, (), 0),
        Settings("PID-series", 0.5, 1.5, 1.0),
        {"max_sensitivity": 1.43184, "gain_margin": 6.7445626, "phase_margin_deg": 62.450944},
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-E6-PID",
        Plant(1.0, (1.0, 1.0, 0.028), 0.0, (0.17, 0.17), 1),
        Settings("PID-series", 1.4, 2.86, 1.33),
        {"max_sensitivity": 1.2284483, "phase_margin_deg": 52.345906},
        S03,
        "published, from memory",
    ),
    MarginCase(
        "simc-E9-PID",
        Plant(1.0, (1.0, 1.0), 1.0, (), 0),
        Settings("PID-series", 0.5, 1.0, 1.0),
        {"max_sensitivity": 1.5904902, "gain_margin": 3.1415927, "phase_margin_deg": 61.35211},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E10-PID",
        Plant(1.0, (20.0, 2.0), 1.0, (), 0),
        Settings("PID-series", 10.0, 8.0, 2.0),
        {"max_sensitivity": 1.6512399, "gain_margin": 3.0347823, "phase_margin_deg": 52.512265},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "simc-E11-PID",
        Plant(1.0, (6.0, 2.0, 2.0), 1.0, (-1.0,), 0),
        Settings("PID-series", 1.0, 6.0, 3.0),
        {"max_sensitivity": 1.6565778, "gain_margin": 3.0209279, "phase_margin_deg": 60.056642},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "lambda-PI-tc0.5",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.6666666666666666, 1.0, 0.0),
        {
            "gain_margin": 2.3561945,
            "phase_margin_deg": 51.802814,
            "delay_margin_s": 1.3561945,
            "max_sensitivity": 1.9171629,
        },
        GS12,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "lambda-PI-tc2",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.3333333333333333, 1.0, 0.0),
        {
            "gain_margin": 4.712389,
            "phase_margin_deg": 70.901407,
            "delay_margin_s": 3.712389,
            "max_sensitivity": 1.3485913,
        },
        GS12,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "lambda-PI-tc3",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.25, 1.0, 0.0),
        {
            "gain_margin": 6.2831853,
            "phase_margin_deg": 75.676055,
            "delay_margin_s": 5.2831853,
            "max_sensitivity": 1.2488909,
        },
        GS12,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "gpm-Am3",
        Plant(1.0, (4.0,), 1.0, (), 0),
        Settings("PI", 2.0943951023931953, 4.0, 0.0),
        {"gain_margin": 3.0, "phase_margin_deg": 60.0},
        HHC95,
        "published, from memory",
    ),
    MarginCase(
        "zn-int-PI",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.71, 3.33, 0.0),
        {"max_sensitivity": 2.8473206, "gain_margin": 1.8593129, "phase_margin_deg": 24.799463},
        S03,
        "published, from memory",
    ),
    MarginCase(
        "zn-int-PI-exact",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.7068583470577035, 3.3333333333333335, 0.0),
        {
            "max_sensitivity": 2.830955,
            "gain_margin": 1.8680272,
            "phase_margin_deg": 24.916014,
            "max_complementary_sensitivity": 2.3568782,
        },
        ZN42,
        "published, from memory",
    ),
    MarginCase(
        "tl-int-PI",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.487, 8.75, 0.0),
        {
            "max_complementary_sensitivity": 1.2688101,
            "max_sensitivity": 1.6658981,
            "gain_margin": 3.0597984,
            "phase_margin_deg": 48.490693,
        },
        TL92,
        "published, from memory",
    ),
    MarginCase(
        "amigo-int-PI",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.35, 13.4, 0.0),
        {
            "max_sensitivity": 1.4101353,
            "max_complementary_sensitivity": 1.1900193,
            "gain_margin": 4.3427726,
            "phase_margin_deg": 57.724711,
        },
        AH04,
        "published, from memory",
    ),
    MarginCase(
        "amigo-int-PID",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PID-ideal", 0.45, 8.0, 0.5),
        {
            "max_sensitivity": 1.4065351,
            "max_complementary_sensitivity": 1.2331064,
            "gain_margin": 3.5208196,
            "phase_margin_deg": 61.199723,
        },
        AH04,
        "published, from memory",
    ),
    MarginCase(
        "iaeopt-int-PI",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.91, 4.1, 0.0),
        {"max_sensitivity": 3.7161001, "gain_margin": 1.513492},
        S03,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "p-1/e-int",
        Plant(1.0, (), 1.0, (), 1),
        Settings("P", 0.36787944117144233, 0.0, 0.0),
        {"gain_margin": 4.2698671, "phase_margin_deg": 68.922061, "max_sensitivity": 1.3935714},
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "lambda-int-1",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.75, 3.0, 0.0),
        {"max_sensitivity": 3.291772, "gain_margin": 1.7121791, "phase_margin_deg": 21.19314},
        CF90,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "lambda-int-2",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.5555555555555556, 5.0, 0.0),
        {"max_sensitivity": 1.9538251, "gain_margin": 2.5528808, "phase_margin_deg": 37.554677},
        CF90,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "opt159-delay",
        Plant(1.0, (), 1.0, (), 0),
        Settings("PI", 0.1984, 0.319, 0.0),
        {"max_sensitivity": 1.5902193},
        GS12,
        "published, from memory",
    ),
    MarginCase(
        "opt159-fo1-dy",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.5532, 1.1411, 0.0),
        {"max_sensitivity": 1.5900534},
        GS12,
        "published, from memory",
    ),
    MarginCase(
        "opt159-fo8-dy",
        Plant(1.0, (8.0,), 1.0, (), 0),
        Settings("PI", 3.9977, 8.0008, 0.0),
        {"max_sensitivity": 1.5900029},
        GS12,
        "published, from memory",
    ),
    MarginCase(
        "opt159-int-du",
        Plant(1.0, (), 1.0, (), 1),
        Settings("PI", 0.3961, 5.7838, 0.0),
        {"max_sensitivity": 1.5899547},
        GS12,
        "published, from memory",
    ),
    MarginCase(
        "maxki-g1-Ms1.4",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (), 0),
        Settings("PI", 0.633, 1.9457, 0.0),
        {"max_sensitivity": 1.4000213},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "maxki-g1-Ms2.0",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (), 0),
        Settings("PI", 1.222, 1.7834, 0.0),
        {"max_sensitivity": 2.0000361},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "maxki-g2-Ms1.4",
        Plant(1.0, (1.0, 0.2, 0.04, 0.008), 0.0, (), 0),
        Settings("PI", 1.9261, 0.745, 0.0),
        {"max_sensitivity": 1.3999915},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "maxki-g2-Ms2.0",
        Plant(1.0, (1.0, 0.2, 0.04, 0.008), 0.0, (), 0),
        Settings("PI", 4.1326, 0.5911, 0.0),
        {"max_sensitivity": 1.9999808},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "maxki-nmp2-Ms1.4",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (-2.0,), 0),
        Settings("PI", 0.1787, 1.7761, 0.0),
        {"max_sensitivity": 1.3999072},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "maxki-delay15-Ms1.4",
        Plant(1.0, (1.0, 1.0, 1.0), 15.0, (), 0),
        Settings("PI", 0.164, 6.1601, 0.0),
        {"max_sensitivity": 1.3999798},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "maxki-intlag2-Ms1.4",
        Plant(1.0, (1.0, 1.0), 0.0, (), 1),
        Settings("PI", 0.16666666666666666, 14.0, 0.0),
        {"max_sensitivity": 1.4},
        APH98,
        "published, from memory",
    ),
    MarginCase(
        "amigo-lag-PI",
        Plant(1.0, (1.0, 0.1, 0.01, 0.001), 0.0, (), 0),
        Settings("PI", 4.13334, 0.538925, 0.0),
        {"max_sensitivity": 1.3712056, "phase_margin_deg": 54.550512},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "amigo-lag-PID",
        Plant(1.0, (1.0, 0.1, 0.01, 0.001), 0.0, (), 0),
        Settings("PID-ideal", 6.44, 0.361173, 0.0367059),
        {"max_sensitivity": 1.297405, "phase_margin_deg": 51.220205},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "amigo-balanced-PI",
        Plant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0, (), 0),
        Settings("PI", 0.41415, 2.655, 0.0),
        {"max_sensitivity": 1.3177075, "phase_margin_deg": 76.542226},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "amigo-balanced-PID",
        Plant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0, (), 0),
        Settings("PID-ideal", 1.11901, 2.39822, 0.619062),
        {"max_sensitivity": 1.6164733, "phase_margin_deg": 52.565009},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "amigo-delay-PI",
        Plant(1.0, (0.05, 0.05), 1.0, (), 0),
        Settings("PI", 0.17516, 0.367276, 0.0),
        {"max_sensitivity": 1.457375, "phase_margin_deg": 69.571161},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-ZN-open_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 4.5, 3.333333, 0.0),
        {"max_sensitivity": 3.405483},
        ZN42,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k2th1tau10-ZN-open_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 6.0, 2.0, 0.5),
        {"max_sensitivity": 3.4210483},
        ZN42,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k2th1tau10-TL_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 2.554774, 8.470009, 0.0),
        {"max_sensitivity": 1.6223911},
        TL92,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CC_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 4.541667, 2.754545, 0.0),
        {"max_sensitivity": 3.9590046},
        CC53,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k2th1tau10-CC_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 6.791667, 2.362319, 0.3571429),
        {"max_sensitivity": 3.9803084},
        CC53,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_sp0_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 1.75, 12.0, 0.0),
        {"max_sensitivity": 1.3627043},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_sp0_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 3.0, 10.0, 0.5),
        {"max_sensitivity": 1.6172722},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_sp20_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 4.75, 14.0, 0.47),
        {"max_sensitivity": 2.425075},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_ld0_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 3.0, 4.0, 0.0),
        {"max_sensitivity": 1.9740576},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_ld0_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 4.75, 2.4, 0.42),
        {"max_sensitivity": 2.1746399},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_ld20_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 3.5, 2.3, 0.0),
        {"max_sensitivity": 3.0471462},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-CHR_ld20_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 6.0, 2.0, 0.42),
        {"max_sensitivity": 3.0397612},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-AMIGO_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 1.411777, 6.076872, 0.0),
        {"max_sensitivity": 1.3169947},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-AMIGO_PID",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 2.35, 4.2, 0.4854369),
        {"max_sensitivity": 1.406434},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-iSIMC_PIpth_3_tcth",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 2.583333, 8.0, 0.0),
        {"max_sensitivity": 1.6379288},
        GS12,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k2th1tau10-iSIMC_PID_tcth_2_ideal_eq",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 3.518519, 6.333333, 0.3157895),
        {"max_sensitivity": 1.6820555},
        GS12,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k2th1tau10-IMC_PID_Pade_lamth",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PID-ideal", 3.5, 10.5, 0.4761905),
        {"max_sensitivity": 1.7715544},
        RMS86,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-IMC_improvedPI_lam1.7th",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 3.088235, 10.5, 0.0),
        {"max_sensitivity": 1.8050518},
        RMS86,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-ITAE_load_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 4.073457, 3.099846, 0.0),
        {"max_sensitivity": 3.003112},
        LOP67,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k2th1tau10-IAE_load_PI",
        Plant(2.0, (10.0,), 1.0, (), 0),
        Settings("PI", 4.763927, 3.229211, 0.0),
        {"max_sensitivity": 3.8956382},
        LOP67,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-ZN-open_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.9, 3.333333, 0.0),
        {"max_sensitivity": 1.7912644},
        ZN42,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k1th1tau1-ZN-open_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.2, 2.0, 0.5),
        {"max_sensitivity": 2.7578921},
        ZN42,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k1th1tau1-ZN-ult_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 1.017822, 2.580884, 0.0),
        {"max_sensitivity": 2.0484074},
        ZN42,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-ZN-ult_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.357096, 1.54853, 0.3871325),
        {"max_sensitivity": 2.5935356},
        ZN42,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-TL_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.7068207, 6.813533, 0.0),
        {"max_sensitivity": 1.5029456},
        TL92,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-TL_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.028103, 6.813533, 0.4915969),
        {"max_sensitivity": 2.340876},
        TL92,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-CC_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.583333, 1.809524, 0.3076923),
        {"max_sensitivity": 3.1575482},
        CC53,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k1th1tau1-CHR_sp0_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 0.6, 1.0, 0.5),
        {"max_sensitivity": 1.4285692},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-CHR_sp20_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.6, 1.0, 0.0),
        {"max_sensitivity": 1.7734321},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-CHR_sp20_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 0.95, 1.4, 0.47),
        {"max_sensitivity": 1.878512},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-CHR_ld0_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.6, 4.0, 0.0),
        {"max_sensitivity": 1.4146395},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-CHR_ld20_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.2, 2.0, 0.42),
        {"max_sensitivity": 2.3615724},
        CHR52,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-AMIGO_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.25, 1.0, 0.0),
        {"max_sensitivity": 1.2488909},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-AMIGO_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 0.65, 1.090909, 0.3846154),
        {"max_sensitivity": 1.3978699},
        AH04,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-SIMC_PI_tcth",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.5, 1.0, 0.0),
        {"max_sensitivity": 1.5904902},
        S03,
        "published rule, value recomputed",
    ),
    MarginCase(
        "rule-k1th1tau1-IMC_PID_Pade_lamth",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.0, 1.5, 0.3333333),
        {"max_sensitivity": 1.7715544},
        RMS86,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-IMC_improvedPI_lam1.7th",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.8823529, 1.5, 0.0),
        {"max_sensitivity": 2.0141192},
        RMS86,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-ITAE_set_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.586, 1.156069, 0.0),
        {"max_sensitivity": 1.6341619},
        ROV69,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-ITAE_load_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 1.357, 1.187648, 0.381),
        {"max_sensitivity": 2.4665191},
        LOP67,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-ITAE_set_PID",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PID-ideal", 0.965, 1.539646, 0.308),
        {"max_sensitivity": 1.7174611},
        ROV69,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-IAE_load_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.984, 1.644737, 0.0),
        {"max_sensitivity": 2.1832078},
        LOP67,
        "published rule, value recomputed, from memory",
    ),
    MarginCase(
        "rule-k1th1tau1-IAE_set_PI",
        Plant(1.0, (1.0,), 1.0, (), 0),
        Settings("PI", 0.758, 1.43472, 0.0),
        {"max_sensitivity": 1.7981095},
        ROV69,
        "published rule, value recomputed, from memory",
    ),
)

ULTIMATES: Final = (
    UltimateCase(
        "ult-fo11",
        Plant(1.0, (1.0,), 1.0, (), 0),
        2.2618263,
        3.0970603,
        TEXT,
        "closed form, from memory",
    ),
    UltimateCase(
        "ult-cube",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (), 0),
        8.0,
        3.6275987,
        TEXT,
        "closed form, from memory",
    ),
    UltimateCase(
        "ult-quart",
        Plant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0, (), 0),
        4.0,
        6.2831853,
        TEXT,
        "closed form, from memory",
    ),
    UltimateCase(
        "ult-seborg4",
        Plant(4.0, (7.0,), 3.5, (), 0),
        0.95172072,
        11.973855,
        SEM,
        "published, from memory",
    ),
    UltimateCase(
        "ult-wb11",
        Plant(12.8, (16.7,), 1.0, (), 0),
        2.0994147,
        3.9074106,
        L86,
        "published, from memory",
    ),
    UltimateCase(
        "ult-wb22",
        Plant(19.4, (14.4,), 3.0, (), 0),
        0.42210042,
        11.132368,
        L86,
        "published, from memory",
    ),
    UltimateCase(
        "ult-fo10",
        Plant(1.0, (10.0,), 1.0, (), 0),
        16.350554,
        3.8500039,
        OWN,
        "recomputed, from memory",
    ),
    UltimateCase(
        "ult-delayonly", Plant(1.0, (), 1.0, (), 0), 1.0, 2.0, TEXT, "closed form, from memory"
    ),
    UltimateCase(
        "ult-intlag2",
        Plant(1.0, (1.0, 1.0), 0.0, (), 1),
        2.0,
        6.2831853,
        TEXT,
        "closed form, from memory",
    ),
    UltimateCase(
        "ult-sopdt",
        Plant(1.0, (1.0, 1.0), 1.0, (), 0),
        2.707053,
        4.8090176,
        OWN,
        "recomputed, from memory",
    ),
    UltimateCase(
        "ult-g2",
        Plant(1.0, (1.0, 0.2, 0.04, 0.008), 0.0, (), 0),
        30.24,
        0.56198518,
        TEXT,
        "closed form, from memory",
    ),
    UltimateCase(
        "ult-nmp2",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (-2.0,), 0),
        1.1428571,
        7.4343651,
        TEXT,
        "closed form, from memory",
    ),
    UltimateCase(
        "ult-three521",
        Plant(1.0, (5.0, 2.0, 1.0), 0.0, (), 0),
        12.6,
        7.0248147,
        SEM,
        "published, from memory",
    ),
)

UNSTABLE_LAG: Final = TransferFunction.ratio((1.0,), [(1.0, -1.0)], dead_time=0.5)
"""Stable for 1 < K < 2.53656: the open loop has a pole to encircle once."""

CONDITIONAL: Final = TransferFunction.ratio(
    (1.0, 12.0, 36.0), [(1.0, 0.0), (1.0, 1.0), (1.0, 1.0), (1.0, 36.0)]
)
"""(s + 6)^2/(s (s + 1)^2 (s + 36)): unstable exactly for 6.04489 < K < 52.2628."""

STABILITIES: Final = (
    StabilityCase(
        "stab-fo11-K2.25",
        Plant(1.0, (1.0,), 1.0, (), 0),
        2.25,
        True,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-fo11-K2.28",
        Plant(1.0, (1.0,), 1.0, (), 0),
        2.28,
        False,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-int-K1.55",
        Plant(1.0, (), 1.0, (), 1),
        1.55,
        True,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-int-K1.59",
        Plant(1.0, (), 1.0, (), 1),
        1.59,
        False,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-cube-K7.9",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (), 0),
        7.9,
        True,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-cube-K8.1",
        Plant(1.0, (1.0, 1.0, 1.0), 0.0, (), 0),
        8.1,
        False,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-unstFO-K0.9",
        UNSTABLE_LAG,
        0.9,
        False,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-unstFO-K1.5",
        UNSTABLE_LAG,
        1.5,
        True,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-unstFO-K2.5",
        UNSTABLE_LAG,
        2.5,
        True,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-unstFO-K2.6",
        UNSTABLE_LAG,
        2.6,
        False,
        TEXT,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-cond-k5",
        CONDITIONAL,
        5.0,
        True,
        BENCH00,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-cond-k50",
        CONDITIONAL,
        50.0,
        False,
        BENCH00,
        "published rule, value recomputed, from memory",
    ),
    StabilityCase(
        "stab-cond-k55",
        CONDITIONAL,
        55.0,
        True,
        BENCH00,
        "published rule, value recomputed, from memory",
    ),
)

HALF_RULES: Final = (
    HalfRuleCase(
        "half-E2-first",
        Plant(1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), 0.0, (-0.3, 0.08), 0),
        (2.5, 1.47),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E2-second",
        Plant(1.0, (2.0, 1.0, 0.4, 0.2, 0.05, 0.05, 0.05), 0.0, (-0.3, 0.08), 0),
        (2.0, 1.2, 0.77),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E4-first",
        Plant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0, (), 0),
        (1.5, 2.5),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E4-second",
        Plant(1.0, (1.0, 1.0, 1.0, 1.0), 0.0, (), 0),
        (1.0, 1.5, 1.5),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E9-first",
        Plant(1.0, (1.0, 1.0), 1.0, (), 0),
        (1.5, 1.5),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E9-second",
        Plant(1.0, (1.0, 1.0), 1.0, (), 0),
        (1.0, 1.0, 1.0),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E10-first",
        Plant(1.0, (20.0, 2.0), 1.0, (), 0),
        (21.0, 2.0),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E10-second",
        Plant(1.0, (20.0, 2.0), 1.0, (), 0),
        (20.0, 2.0, 1.0),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E11-first",
        Plant(1.0, (6.0, 2.0, 2.0), 1.0, (-1.0,), 0),
        (7.0, 5.0),
        S03,
        "published rule, value recomputed, from memory",
    ),
    HalfRuleCase(
        "half-E11-second",
        Plant(1.0, (6.0, 2.0, 2.0), 1.0, (-1.0,), 0),
        (6.0, 3.0, 3.0),
        S03,
        "published rule, value recomputed, from memory",
    ),
)
