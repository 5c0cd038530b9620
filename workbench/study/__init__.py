"""The answers: a case goes in, frozen results come out.  Every front end asks here, only here.

Everything that goes in or comes out is in the loop's own engineering units; percent of span is used
between this room and the rooms below it.
"""

from workbench.records.bumps import Bump, bumps
from workbench.records.coach import CERTAINTY, Advice, advise
from workbench.study.assessment import (
    Assessment,
    LoopFigures,
    PlantFigures,
    Reduced,
    assess,
    reductions,
)
from workbench.study.conversion import Conversion, convert
from workbench.study.evaluation import HANDOVER, Evaluation, cautions, evaluate
from workbench.study.fitting import (
    Live,
    LiveTest,
    Source,
    fit_plants,
    fit_record,
    fit_sources,
    narrowed,
    read_records,
)
from workbench.study.keep import (
    FileCheck,
    accept,
    check_case,
    chosen_candidate,
    record_change,
)
from workbench.study.loop import action_of, controller_of, loop_of, plant_of, units_of
from workbench.study.prediction import (
    InnerTrend,
    Prediction,
    Response,
    Trend,
    predict,
    respond,
    respond_to_record,
    response_horizon,
)
from workbench.study.proposals import Proposal, RelayTest, Wish, propose, take
from workbench.study.sheet import Retune, Stage, retune
from workbench.study.survey import Surveyed, survey

__all__ = [
    "CERTAINTY",
    "HANDOVER",
    "Advice",
    "Assessment",
    "Bump",
    "Conversion",
    "Evaluation",
    "FileCheck",
    "InnerTrend",
    "Live",
    "LiveTest",
    "LoopFigures",
    "PlantFigures",
    "Prediction",
    "Proposal",
    "Reduced",
    "RelayTest",
    "Response",
    "Retune",
    "Source",
    "Stage",
    "Surveyed",
    "Trend",
    "Wish",
    "accept",
    "action_of",
    "advise",
    "assess",
    "bumps",
    "cautions",
    "check_case",
    "chosen_candidate",
    "controller_of",
    "convert",
    "evaluate",
    "fit_plants",
    "fit_record",
    "fit_sources",
    "loop_of",
    "narrowed",
    "plant_of",
    "predict",
    "propose",
    "read_records",
    "record_change",
    "reductions",
    "respond",
    "respond_to_record",
    "response_horizon",
    "retune",
    "survey",
    "take",
    "units_of",
]
