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
from workbench.study.evaluation import (
    HANDOVER,
    Evaluation,
    cautions,
    evaluate,
    family_cautions,
)
from workbench.study.family import (
    Among,
    FamilyFigures,
    Member,
    drawn_plants,
    family_figures,
    members,
    with_family,
)
from workbench.study.keep import (
    FileCheck,
    accept,
    check_case,
    chosen_candidate,
    fit_record,
    record_change,
)
from workbench.study.loop import action_of, controller_of, loop_of, plant_of, units_of
from workbench.study.observation import Observation, RunFigures, observe, with_observation
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
from workbench.study.records import Columns, SheetCheck, diagnose, plan_test, recognise
from workbench.study.sheet import Retune, Stage, retune
from workbench.study.survey import Surveyed, survey
from workbench.study.tolerance import LIMIT as TOLERANCE_LIMIT
from workbench.study.tolerance import Axis, Distance, Tolerance, tolerance

__all__ = [
    "HANDOVER",
    "TOLERANCE_LIMIT",
    "Among",
    "Assessment",
    "Axis",
    "Columns",
    "Conversion",
    "Distance",
    "Evaluation",
    "FamilyFigures",
    "FileCheck",
    "InnerTrend",
    "LoopFigures",
    "Member",
    "Observation",
    "PlantFigures",
    "Prediction",
    "Proposal",
    "Reduced",
    "RelayTest",
    "Response",
    "Retune",
    "RunFigures",
    "SheetCheck",
    "Stage",
    "Surveyed",
    "Tolerance",
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
    "diagnose",
    "drawn_plants",
    "evaluate",
    "family_cautions",
    "family_figures",
    "fit_record",
    "loop_of",
    "members",
    "observe",
    "plan_test",
    "plant_of",
    "predict",
    "propose",
    "recognise",
    "record_change",
    "reductions",
    "respond",
    "respond_to_record",
    "response_horizon",
    "retune",
    "survey",
    "take",
    "tolerance",
    "units_of",
    "with_family",
    "with_observation",
]
