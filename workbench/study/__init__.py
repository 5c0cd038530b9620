"""The answers: a case goes in, frozen results come out.  Every front end asks here, only here.

Everything that goes in or comes out is in the loop's own engineering units; percent of span is used
between this room and the rooms below it.
"""

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
from workbench.study.keep import (
    FileCheck,
    accept,
    check_case,
    chosen_candidate,
    fit_record,
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
    "HANDOVER",
    "Assessment",
    "Conversion",
    "Evaluation",
    "FileCheck",
    "InnerTrend",
    "LoopFigures",
    "PlantFigures",
    "Prediction",
    "Proposal",
    "Reduced",
    "RelayTest",
    "Response",
    "Retune",
    "Stage",
    "Surveyed",
    "Trend",
    "Wish",
    "accept",
    "action_of",
    "assess",
    "cautions",
    "check_case",
    "chosen_candidate",
    "controller_of",
    "convert",
    "evaluate",
    "fit_record",
    "loop_of",
    "plant_of",
    "predict",
    "propose",
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
