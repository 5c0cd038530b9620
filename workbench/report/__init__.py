"""Results in words and in JSON: the answers of `study`, for people and for scripts.

Nothing is computed and nothing is printed here.  Text is plain, its own words are ASCII, every
number wears its unit, and lines are wrapped to the width that is asked for.  JSON is a dictionary
of plain values: a figure that does not exist is `None` with its reason beside it.
"""

from workbench.report.diagnoses import diagnose_data, diagnose_text
from workbench.report.families import distance_lines
from workbench.report.files import (
    between_data,
    between_text,
    check_data,
    check_text,
    history_data,
    history_text,
)
from workbench.report.fits import fit_data, fit_text, live_text
from workbench.report.loops import (
    assess_data,
    assess_text,
    is_stable,
    predict_data,
    predict_text,
    respond_data,
    respond_text,
    response_csv,
    trend_csv,
)
from workbench.report.observations import observe_data, observe_text
from workbench.report.plans import plan_data, plan_text
from workbench.report.recognition import recognise_data, recognise_text
from workbench.report.settings import (
    convert_data,
    convert_text,
    family_words,
    propose_data,
    propose_text,
)
from workbench.report.sheet import WIDTH as SHEET_WIDTH
from workbench.report.sheet import settings_block, sheet_text
from workbench.report.survey import survey_data, survey_text
from workbench.report.words import Json, Rows, settings_text, wrapped

__all__ = [
    "SHEET_WIDTH",
    "Json",
    "Rows",
    "assess_data",
    "assess_text",
    "between_data",
    "between_text",
    "check_data",
    "check_text",
    "convert_data",
    "convert_text",
    "diagnose_data",
    "diagnose_text",
    "distance_lines",
    "family_words",
    "fit_data",
    "fit_text",
    "history_data",
    "history_text",
    "is_stable",
    "live_text",
    "observe_data",
    "observe_text",
    "plan_data",
    "plan_text",
    "predict_data",
    "predict_text",
    "propose_data",
    "propose_text",
    "recognise_data",
    "recognise_text",
    "respond_data",
    "respond_text",
    "response_csv",
    "settings_block",
    "settings_text",
    "sheet_text",
    "survey_data",
    "survey_text",
    "trend_csv",
    "wrapped",
]
