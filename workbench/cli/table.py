"""Every command with its options: what the reader, the help and the manual are made of."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from workbench.cli.options import Grammar, Option

_LOOP: Final = (
    Option(
        "--plant",
        "PLANT",
        'path from OP to PV, PV units per OP unit: a formula in s, "1.8 exp(-6 s)/(40 s + 1)"; a'
        ' shape with its values, "first-order gain=1.8, time_constant=40 s, dead_time=6 s"; or'
        ' blocks, "valve: 1/(2 s + 1); process: 1.8/(40 s + 1)"',
        keys=("plant",),
    ),
    Option(
        "--load",
        "FORMULA",
        "path from the upset to PV",
        "the plant itself: the upset enters at its input",
        ("plant.load",),
    ),
    Option("--time-unit", "s|min|h", "unit of s in the formulas", "s", ("plant.time_unit",)),
    Option(
        "--form",
        "ideal|series|parallel",
        "algorithm form of the controller",
        "ideal",
        ("controller.form",),
    ),
    Option(
        "--gain",
        "G",
        "controller gain, percent OP per percent of PV span, positive",
        keys=("controller.gain",),
    ),
    Option(
        "--proportional-band",
        "PB",
        "in place of the gain: the band in percent, 100/G",
        keys=("controller.proportional_band",),
    ),
    Option(
        "--integral",
        "TIME",
        '"32 s", "0.53 min", "0.53 min/repeat", "1.9 repeats/min" or none; in the parallel form'
        ' an integral gain, "0.03 1/s" or "1.8 1/min"',
        "none",
        ("controller.integral",),
        none_is_absent=True,
    ),
    Option(
        "--derivative",
        "TIME",
        '"3 s", "0.05 min" or none; in the parallel form a derivative gain in the same units',
        "none",
        ("controller.derivative",),
        none_is_absent=True,
    ),
    Option(
        "--derivative-filter",
        "N",
        'N (filter time = derivative time / N), a filter time "0.4 s", or none',
        "10",
        ("controller.derivative_filter",),
    ),
    Option(
        "--setpoint-weight",
        "B",
        "weight of the setpoint in the proportional part, 0 to 1",
        "1",
        ("controller.setpoint_weight",),
    ),
    Option(
        "--derivative-on",
        "pv|error",
        "what the derivative acts on",
        "pv",
        ("controller.derivative_on",),
    ),
    Option(
        "--action",
        "reverse|direct",
        "reverse: OP rises when PV falls",
        "from the sign of the plant's gain or slope; an unstable plant needs it",
        ("controller.action",),
    ),
    Option(
        "--scan",
        "TIME",
        'execution interval, "1 s"; none is an analogue controller',
        "none",
        ("controller.scan",),
        none_is_absent=True,
    ),
    Option(
        "--computing-delay",
        "TIME",
        "from sampling to the output's change, at most one scan",
        "0 s",
        ("controller.computing_delay",),
    ),
    Option(
        "--pv-filter",
        "TIME",
        'first-order filter before the controller, "2 s"',
        "none",
        ("pv.filter",),
        none_is_absent=True,
    ),
    Option("--pv-range", "LOW:HIGH", "instrument range of PV", "0:100", ("pv.low", "pv.high")),
    Option("--op-range", "LOW:HIGH", "range of OP", "0:100", ("op.low", "op.high")),
    Option(
        "--op-limits",
        "LOW:HIGH",
        "limits on the output, OP units",
        "none",
        ("op.min", "op.max"),
        none_is_absent=True,
    ),
    Option(
        "--op-rate",
        "RATE",
        'fastest change of the output, "2 /s"',
        "none",
        ("op.rate",),
        none_is_absent=True,
    ),
    Option(
        "--start",
        "PV:OP",
        "where the loop rests before the scenario",
        "middle of both ranges",
        ("pv.start", "op.start"),
    ),
)
INLINE: Final = tuple(replace(option, inline=True) for option in _LOOP)
"""The inline loop options, in place of a case file."""

PLANT_ALONE: Final = tuple(
    option
    for option in INLINE
    if option.name in ("--plant", "--time-unit", "--pv-range", "--op-range")
)
"""The inline options that tell of a plant without its loop."""

INLINE_PLANT: Final = tuple(
    option
    for option in INLINE
    if option in PLANT_ALONE or option.name in ("--op-limits", "--start")
)
"""The inline options that tell of a plant and of where it stands."""

JSON: Final = Option("--json", "", "one JSON object in place of the text")
SET: Final = Option(
    "--set",
    "KEY=VALUE",
    "change one key of the CASE for this run, like controller.gain=1.3; may be repeated",
    repeats=True,
)
RUN: Final[tuple[Option, ...]] = (
    Option(
        "--setpoint-step",
        "X",
        "setpoint step, PV units",
        "5 % of the PV span where neither step is given",
        ("scenario.setpoint_step",),
    ),
    Option("--setpoint-at", "TIME", "when it comes", "0 s", ("scenario.setpoint_at",)),
    Option(
        "--load-step",
        "X",
        "load step, OP units or those of the --load formula's input",
        "5 % of the OP span half way where neither step is given",
        ("scenario.load_step",),
    ),
    Option(
        "--load-at",
        "TIME",
        "when it comes",
        "0 s; half way where neither step is given",
        ("scenario.load_at",),
    ),
    Option(
        "--until",
        "TIME",
        "end of the prediction",
        "long enough for both to settle",
        ("scenario.until",),
    ),
    Option("--noise", "SD", "standard deviation of PV noise, PV units", "0", ("pv.noise",)),
    Option("--seed", "N", "which noise, a whole number", "0"),
    Option("--trend", "FILE.csv", "writes the trend: time_s,sp,pv,op"),
)
SMALL_MODELS: Final = Option(
    "--small-models", "", "the plant as one and two lags with dead time, and how far off each is"
)
TOLERANCE: Final[tuple[Option, ...]] = (
    Option(
        "--tolerance",
        "dead-time|lag",
        "a map of how much error of the plant's gain and dead time, or gain and lags, the loop"
        " survives, and the distances from where it is now",
    ),
    Option("--max-sensitivity", "MS", "limit on Ms in that map", "2"),
)
MOVES: Final[tuple[Option, ...]] = (
    Option(
        "--input", "step|ramp|pulse|doublet|sine|impulse", "what moves the plant's input", "step"
    ),
    Option(
        "--size",
        "X",
        "height of a step, pulse or doublet, amplitude of a sine, OP units; OP units per s of a"
        " ramp, OP units x s of an impulse",
        "1",
    ),
    Option("--at", "TIME", "when it begins", "0 s"),
    Option("--width", "TIME", "of a pulse, or of each half of a doublet", "the plant's own lag"),
    Option("--period", "TIME", "of a sine", "four times the plant's own lag"),
    Option("--until", "TIME", "end of the response", "long enough to see all of it"),
    Option("--record", "FILE.csv", "answers the OP of this record in place of --input"),
    Option("--time", "COLUMN", "column of time in the record", "time_s or timestamp"),
    Option("--op", "COLUMN", "column of the controller output in the record", "op"),
    Option("--trend", "FILE.csv", "writes the response: time_s,op,pv"),
)
"""What `respond` does to a plant."""
READING: Final[tuple[Option, ...]] = (
    Option("--time", "COLUMN", "column of time; DATE+TIME for two", "time_s or timestamp"),
    Option("--pv", "COLUMN", "column, or tag, of the process variable", "pv"),
    Option("--op", "COLUMN", "column, or tag, of the controller output", "op"),
    Option("--sp", "COLUMN", "column, or tag, of the setpoint", "sp"),
    Option("--mode", "COLUMN", "column, or tag, of the controller's mode", "mode"),
    Option("--quality", "COLUMN", "column of quality, or none", "quality or status"),
    Option(
        "--dates",
        "day-first|month-first|serial|seconds",
        "how times are read that can be read in two ways; serial: day numbers of a spreadsheet",
    ),
    Option("--decimal", "point|comma", "the decimal sign, where 1,234 leaves it open"),
    Option("--from", "STAMP", "first row to use", "the first of the record"),
    Option("--to", "STAMP", "last row to use", "the last of the record"),
    Option(
        "--leave-out",
        "FROM TO",
        "rows between two stamps that are not used; may be repeated",
        count=2,
        repeats=True,
    ),
)
"""How a record is read."""
FOLLOWING: Final[tuple[Option, ...]] = (
    Option(
        "--follow",
        "",
        "reads a record that is still being written, fits it again as it grows, and says on"
        " standard error what to do next",
    ),
    Option(
        "--certainty",
        "PERCENT",
        "wanted largest standard error, of the dead time in percent of dead time and slowest time"
        " constant together",
        "10 with --follow",
    ),
    Option("--every", "TIME", "with --follow, how often to look", "2 s"),
    Option("--idle", "TIME", "with --follow, ends when nothing came for so long", "60 s"),
)
FIT: Final[tuple[Option, ...]] = (
    *READING,
    Option("--shape", "SHAPE", "fit this shape only", "every shape that can be fitted"),
    Option("--noise-model", "auto|white|correlated", "how the noise is described", "auto"),
    Option("--no-drift", "", "PV has no drift of its own in the record"),
    *FOLLOWING,
)
RECORD: Final = tuple(option for option in READING if option.name != "--leave-out")
"""What is read of a record taken in normal running."""
BESIDE: Final[tuple[Option, ...]] = (
    Option("--case", "CASE", "the case of this loop: its ranges, limits, plant and settings"),
    *(
        replace(option, inline=False)
        for option in _LOOP
        if option.name in ("--pv-range", "--op-range", "--op-limits")
    ),
)
"""What is known of the loop beside its record."""
REPLAY_SCAN: Final = Option(
    "--scan", "TIME", "execution interval of the controller", "that of the case, or as OP changes"
)
DIAGNOSIS: Final[tuple[Option, ...]] = (
    Option("--dead-time", "TIME", "of the plant", "that of the case"),
    Option("--integral-time", "TIME", "of the controller", "that of the case"),
    Option("--integrating", "", "the plant is integrating, like most levels"),
)
OBSERVATION: Final[tuple[Option, ...]] = (
    Option(
        "--load-step",
        "X",
        "a known upset in the record, OP units or those of the load formula's input",
        "none",
        ("scenario.load_step",),
    ),
    Option(
        "--load-at", "TIME", "when it came, from the first row used", "0 s", ("scenario.load_at",)
    ),
    Option("--save", "", "adds an observed entry to the history of the CASE"),
    Option("--who", "NAME", "who makes that entry", "whoever is logged in"),
)
PLAN: Final[tuple[Option, ...]] = (
    Option("--noise", "SD", "standard deviation of PV at rest, PV units", "needed", ("pv.noise",)),
    Option("--max-pv-change", "X", "how far PV may leave its start, PV units", "needed"),
    Option("--interval", "TIME", "between rows of the log", "a twentieth of the slowest time"),
    Option(
        "--certainty",
        "PERCENT",
        "standard error wanted of gain and time constants, and of the dead time in percent of dead"
        " time and slowest time constant together",
        "as good as the PV change allows",
    ),
)
WISHES: Final[tuple[Option, ...]] = (
    Option("--for", "load|setpoint", "what the settings are for", "load"),
    Option(
        "--setpoint-share",
        "PERCENT",
        "for both: share of the setpoint IAE in what is made least, the load IAE having the rest",
    ),
    Option(
        "--closed-loop-time",
        "TIME",
        "wanted time constant of the answer to a setpoint step",
        "from the method",
    ),
    Option("--max-sensitivity", "MS", "limit on the peak of the sensitivity", "1.7"),
    Option(
        "--max-complementary-sensitivity",
        "MT",
        "limit on the peak of the complementary sensitivity",
        "none",
    ),
    Option(
        "--max-noise-gain",
        "G",
        "limit on how much OP swings for a swing of the measurement by 1 %, percent OP per percent"
        " PV",
        "none",
    ),
    Option(
        "--max-load-travel",
        "CHANGE",
        "limit on how far OP moves after the load step, all its moves added up, OP units",
        "none",
    ),
    Option(
        "--trade-off",
        "",
        "the best settings at limits on the sensitivity from low to high too",
    ),
    Option("--method", "NAME", "this method only", "every method that applies"),
    Option(
        "--largest-upset",
        "CHANGE",
        "for levels: largest lasting upset, as the change of OP that balances it, OP units",
    ),
    Option(
        "--allowed-deviation", "CHANGE", "for levels: how far PV may leave its setpoint, PV units"
    ),
    Option(
        "--relay",
        "OP:PV:TIME[:HYSTERESIS]",
        "a relay test in place of the plant's ultimate gain: half of the output's step, half of the"
        " PV's swing, period, half of the hysteresis",
    ),
)
CONVERSION: Final[tuple[Option, ...]] = (
    Option("--to", "FORM", "the form wanted: ideal, series or parallel", "needed"),
    Option("--gain-as", "gain|band", "gain, or proportional band", "as it is given"),
    Option(
        "--integral-as",
        "UNIT",
        "s, min/repeat, repeats/min ...; in the parallel form 1/s or 1/min",
        "as it is given, or what comes nearest to it",
    ),
    Option("--derivative-as", "s|min|h", "unit of the derivative", "as it is given"),
)
BETWEEN: Final = Option(
    "--between", "A B", "what changed between two entries, numbered from 1 (oldest)", count=2
)


MARKDOWN: Final = Option("--markdown", "", "as Markdown, in place of 80 columns of plain text")

SCREEN: Final = Grammar(
    "",
    "Settings for PID loops that can be defended: from a bump-test record to a fitted plant, to"
    " proposed settings with their margins, to a saved change with its reason. Without a command"
    " it opens the screen.",
    "[CASE or FOLDER]",
    (
        Option("--ascii", "", "the screen without Unicode characters"),
        Option("--no-colour", "", "the screen without colour"),
        Option("--mouse", "", "the screen takes the mouse too"),
        Option("--version", "", "the versions of this program and of what it stands on"),
    ),
    "workbench cases/TIC-307.toml",
)
"""What runs where no command is named."""

COMMANDS: Final[dict[str, Grammar]] = {
    grammar.command: grammar
    for grammar in (
        Grammar(
            "assess",
            "Gain, final values, stability and margins of a loop; a plant alone is enough.",
            "[CASE]",
            (SMALL_MODELS, *TOLERANCE, SET, *INLINE, JSON),
            'workbench assess --plant "1.8 exp(-6 s)/(40 s + 1)" --gain 1.1 --integral "32 s"',
        ),
        Grammar(
            "predict",
            "Runs the closed loop through a setpoint step and a load step and measures both.",
            "[CASE]",
            (*RUN, SET, *INLINE, JSON),
            'workbench predict cases/TIC-307.toml --setpoint-step -2 --until "30 min"',
        ),
        Grammar(
            "respond",
            "What the plant alone does, from rest, when its input is moved.",
            "[CASE]",
            (*MOVES, SET, *PLANT_ALONE, JSON),
            'workbench respond --plant "1.8 exp(-6 s)/(40 s + 1)" --input pulse --width "30 s"',
        ),
        Grammar(
            "fit",
            "Fits plant models to a test record, or to several of one plant at once, with standard"
            " errors and warnings.",
            "RECORD.csv...",
            (*FIT, JSON),
            "workbench fit cases/TIC-307_bump.csv",
            least=1,
            most=100,
        ),
        Grammar(
            "plan",
            "Sizes a bump test: how large, how long, and what it will tell.",
            "[CASE]",
            (*PLAN, SET, *INLINE_PLANT, JSON),
            "workbench plan cases/TIC-307.toml --max-pv-change 4 --certainty 3",
        ),
        Grammar(
            "diagnose",
            "Why does this loop swing: tuning, valve, an upset from outside, the sensor.",
            "RECORD.csv",
            (*RECORD, *DIAGNOSIS, *BESIDE, SET, JSON),
            "workbench diagnose cases/FIC-204_swing.csv --case cases/FIC-204.toml",
            least=1,
        ),
        Grammar(
            "recognise",
            "Which controller made this record: is it the one that its sheet says.",
            "RECORD.csv [CASE]",
            (*RECORD, REPLAY_SCAN, *BESIDE, SET, JSON),
            "workbench recognise cases/FIC-204_run.csv cases/FIC-204.toml",
            least=1,
            most=2,
        ),
        Grammar(
            "observe",
            "Did the plant do what was predicted: a record with the case's settings, against it.",
            "CASE RECORD.csv",
            (*RECORD, *OBSERVATION, SET, JSON),
            "workbench observe cases/FIC-204.toml cases/FIC-204_run.csv",
            least=2,
            most=2,
        ),
        Grammar(
            "propose",
            "The present settings and candidate settings, each judged on this loop.",
            "[CASE]",
            (*WISHES, SET, *INLINE, JSON),
            "workbench propose cases/TIC-307.toml --for load",
        ),
        Grammar(
            "convert",
            "The same controller in another form and other units; a plant is not needed.",
            "[CASE]",
            (*CONVERSION, SET, *INLINE, JSON),
            'workbench convert --to series --gain 2 --integral "30 s" --derivative "6 s"',
        ),
        Grammar(
            "check",
            "Are these case files sound, and do their figures still come out.",
            "PATH...",
            (JSON,),
            "workbench check cases",
            least=1,
            most=100_000,
        ),
        Grammar(
            "history",
            "The tuning history of a case, newest first, numbered from 1 (oldest).",
            "CASE",
            (BETWEEN, JSON),
            "workbench history cases/TIC-307.toml --between 1 2",
            least=1,
        ),
        Grammar(
            "survey",
            "Every case of a folder, the worst first: unstable, fragile, unsound, stale, fine.",
            "FOLDER...",
            (JSON,),
            "workbench survey cases",
            least=1,
            most=100_000,
        ),
        Grammar(
            "sheet",
            "One page for the control room: settings to enter, what to expect, how to go back.",
            "[CASE]",
            (MARKDOWN, SET, *INLINE, JSON),
            "workbench sheet cases/TIC-307.toml",
        ),
        Grammar(
            "new",
            "Writes TAG.toml in this folder; a file that is there already is refused.",
            "TAG",
            (*INLINE, JSON),
            'workbench new TIC-401 --plant "1.8 exp(-6 s)/(40 s + 1)" --pv-range 0:250',
            least=1,
        ),
    )
}
"""Command -> what may follow it."""
