"""The answers: a case goes in, frozen results come out.  Every front end asks here, only here.

Everything that goes in or comes out is in the loop's own engineering units; percent of span is used
between this room and the rooms below it.

A room of answers is loaded when the first of its names is used: a screen is drawn, and a figure
answered, with few of them.
"""

from collections.abc import Iterator
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
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
    from workbench.study.demo import write_demo
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
    from workbench.study.frequency import FrequencyReading, FrequencyResponse, frequency_response
    from workbench.study.keep import (
        FileCheck,
        accept,
        accept_family,
        check_case,
        chosen_candidate,
        record_change,
    )
    from workbench.study.loop import action_of, controller_of, loop_of, plant_of, units_of
    from workbench.study.observation import Observation, RunFigures, observe, with_observation
    from workbench.study.prediction import (
        InnerTrend,
        Prediction,
        Response,
        Trend,
        TrendReading,
        predict,
        respond,
        respond_to_record,
        response_horizon,
    )
    from workbench.study.proposals import LIMITS, Proposal, propose, take
    from workbench.study.records import SheetCheck, diagnose, plan_test, recognise
    from workbench.study.sheet import Retune, Stage, retune
    from workbench.study.surveying import Surveyed, survey
    from workbench.study.tolerances import LIMIT as TOLERANCE_LIMIT
    from workbench.study.tolerances import Axis, Distance, Tolerance, tolerance
    from workbench.study.trade_offs import TradeOff, TradeOffPoint, trade_off
    from workbench.study.wish import RelayTest, Wish, edit_wish, show_wish

__all__ = [
    "CERTAINTY",
    "HANDOVER",
    "LIMITS",
    "TOLERANCE_LIMIT",
    "Advice",
    "Among",
    "Assessment",
    "Axis",
    "Bump",
    "Conversion",
    "Distance",
    "Evaluation",
    "FamilyFigures",
    "FileCheck",
    "FrequencyReading",
    "FrequencyResponse",
    "InnerTrend",
    "Live",
    "LiveTest",
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
    "Source",
    "Stage",
    "Surveyed",
    "Tolerance",
    "TradeOff",
    "TradeOffPoint",
    "Trend",
    "TrendReading",
    "Wish",
    "accept",
    "accept_family",
    "action_of",
    "advise",
    "assess",
    "bumps",
    "cautions",
    "check_case",
    "chosen_candidate",
    "controller_of",
    "convert",
    "diagnose",
    "drawn_plants",
    "edit_wish",
    "evaluate",
    "family_cautions",
    "family_figures",
    "fit_plants",
    "fit_record",
    "fit_sources",
    "frequency_response",
    "loop_of",
    "members",
    "narrowed",
    "observe",
    "plan_test",
    "plant_of",
    "predict",
    "propose",
    "read_records",
    "recognise",
    "record_change",
    "reductions",
    "respond",
    "respond_to_record",
    "response_horizon",
    "retune",
    "show_wish",
    "survey",
    "take",
    "tolerance",
    "trade_off",
    "units_of",
    "with_family",
    "with_observation",
    "write_demo",
]


def __getattr__(name: str) -> Any:
    """Load rooms until one has the name."""
    if name in __all__:
        for room in _rooms():
            found = vars(room).get(_RENAMED.get(name, name))
            home = str(getattr(found, "__module__", room.__name__))
            # What a room only uses may have the same name as what another one offers.
            if found is not None and (home == room.__name__ or not home.startswith("workbench.")):
                globals()[name] = found
                return found
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def _rooms() -> Iterator[ModuleType]:
    """The rooms, what is wanted soonest first; none is called as a name that is offered here."""
    from workbench.study import wish

    yield wish
    from workbench.study import loop

    yield loop
    from workbench.study import evaluation

    yield evaluation
    from workbench.study import assessment, family, frequency, prediction

    yield from (assessment, family, frequency, prediction)
    from workbench.study import conversion, demo, keep, sheet

    yield from (conversion, demo, keep, sheet)
    from workbench.study import tolerances

    yield tolerances
    from workbench.study import proposals, surveying, trade_offs

    yield from (proposals, surveying, trade_offs)
    from workbench.study import fitting, observation, records

    yield from (fitting, observation, records)
    from workbench.records import bumps, coach

    yield from (bumps, coach)


_RENAMED = {"TOLERANCE_LIMIT": "LIMIT"}
