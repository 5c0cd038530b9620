"""Answers in words: every number with its unit, columns that line up, no line too wide."""

from __future__ import annotations

import csv
import json
import re
from dataclasses import replace
from pathlib import Path

import pytest

from workbench import report, study
from workbench.case.case import Case, edit_all, new_case
from workbench.errors import Problem
from workbench.records.identify import fit
from workbench.records.record import read_record
from workbench.units import Figure, Note

WIDTHS = (40, 80, 132)


def a_case(**changes: str) -> Case:
    """An invented oven; `pv_unit="K"` stands for the key `pv.unit`."""
    keys = {
        "loop.service": "Invented oven",
        "pv.unit": "degC",
        "pv.high": "250",
        "plant.formula": "1.8 exp(-6 s)/(40 s + 1)",
        "controller.gain": "1.1",
        "controller.integral": "0.5 min",
        "controller.scan": "1 s",
    }
    keys |= {key.replace("_", ".", 1): value for key, value in changes.items()}
    return edit_all(new_case("TIC-901"), keys)


def assessed(case: Case, width: int = 80) -> str:
    return report.assess_text(case, study.assess(case), study.units_of(case), width)


def predicted(case: Case, width: int = 80) -> str:
    evaluation = study.evaluate(case)
    assert evaluation.prediction is not None
    units = study.units_of(case)
    return report.predict_text(evaluation, evaluation.prediction, units, None, width)


def proposed(case: Case, width: int = 80) -> str:
    return report.propose_text(case, study.propose(case), [], study.units_of(case), width)


def line(text: str, start: str) -> str:
    """The line that begins with these words, its spaces made single."""
    found = [one for one in text.splitlines() if one.strip().startswith(start)]
    return " ".join(found[0].split())


def test_an_assessment_says_its_figures_with_their_units() -> None:
    text = assessed(a_case())
    assert text.startswith(
        "TIC-901: Invented oven\n"
        "ideal form, gain 1.1, integral 0.5 min, derivative none, reverse action, scan\n"
        "1 s\n"
        "\n"
        "Plant\n"
        "  formula    1.8 exp(-6 s)/(40 s + 1)\n"
        "  gain       1.8 degC per %, 0.72 in percent of both spans\n"
        "  dead time  6 s\n"
        "  stable     yes\n"
        "  poles      -0.025 1/s\n"
        "  zeros      none\n"
        "  OP is      the signal to the valve, which opens as it rises\n"
        "\n"
        "Controller gain 1.1 in percent of both spans, 0.44 % per degC.\n"
    )
    # Exact: with integral action PV follows a setpoint step and forgets a load step.
    assert line(text, "final PV, setpoint step of 1") == "final PV, setpoint step of 1 1 degC"
    assert line(text, "final PV, load step of 1") == "final PV, load step of 1 0 degC"
    for start, unit in (("phase margin", "deg"), ("delay margin", "s"), ("gain cross", "rad/s")):
        assert line(text, start).endswith(f" {unit}")
    assert "Loop, sampled" in text


def test_a_plant_alone_an_integrating_one_and_an_unstable_loop_have_their_words() -> None:
    alone = edit_all(new_case("X"), {"plant.formula": "1/(s^2 + s + 1)"})
    text = assessed(alone)
    assert "No controller is given" in text
    # Exact: the roots of s^2 + s + 1, told once for the pair.
    assert line(text, "poles") == "poles -0.5 +- 0.866 i 1/s"
    level = a_case(plant_formula="0.02 exp(-3 s)/s", controller_gain="1")
    assert line(assessed(level), "slope") == "slope 0.02 degC/s per %"
    assert line(assessed(level), "stable") == "stable no, integrating"
    assert " ".join(assessed(a_case(controller_gain="20")).split()).count("stable NO: ") == 2


def test_a_prediction_says_what_happens_and_what_comes_of_it() -> None:
    text = predicted(a_case())
    # 5 % of the span of 250 degC, and of the range of OP.
    assert line(text, "setpoint step") == "setpoint step 12.5 degC at 0 s"
    assert line(text, "load step").startswith("load step 5 % at ")
    assert line(text, "integral absolute error").endswith(" degC s")
    assert line(text, "travel").endswith(" %")
    for sentence in study.HANDOVER:
        assert sentence.split(",")[0][:40] in text


def test_a_reason_shared_by_a_group_is_told_once() -> None:
    text = predicted(a_case(scenario_setpoint_step="5"))
    assert text.count("After the load step\n  none  ") == 1
    assert "load step  " not in text.partition("After")[0]


def test_an_unstable_loop_is_told_first_and_once() -> None:
    text = predicted(a_case(controller_gain="20"))
    assert text.split("\n\n")[1].startswith("NOT STABLE: the analogue loop: ")
    assert "the sampled loop: " in text.split("\n\n")[1]
    assert text.count("NOT STABLE") == 1


def test_a_number_is_never_parted_from_its_unit() -> None:
    words = "it is 12.5 degC at 3 % of 90 s"
    for width in range(10, 40):
        text = report.wrapped(words, width)
        assert text.split() == words.split()
        assert not re.search(r"\d$", text, re.MULTILINE)


def test_proposals_stand_in_one_table_where_it_fits() -> None:
    wide, narrow = proposed(a_case(), 132), proposed(a_case(), 80)
    heads = [one for one in wide.splitlines() if one.startswith("method")]
    assert len(heads) == 1
    assert len([one for one in narrow.splitlines() if one.startswith("method")]) == 2
    table = wide.split("\n\n")[1].splitlines()
    # Numbers are set flush right: the last column ends where its heading ends.
    assert {len(row) for row in table[1:]} == {len(table[0])} or len(
        {len(row) for row in table if row.startswith(("simc", "lambda", "present"))}
    ) == 1
    assert "Not proposed\n  imc-integrating-pid" in wide
    assert "Aims\n" in wide
    assert "a gain margin of 3 with a phase margin of 60 deg; for one lag" in " ".join(wide.split())
    # A source is told once for all its methods.
    assert wide.count("Optimum settings") == 1
    for sentence in study.HANDOVER:
        assert sentence in " ".join(wide.split())


def test_no_line_is_wider_than_asked_for() -> None:
    long = "word " * 60
    case = a_case(loop_service=long.strip()[:190])
    check = study.FileCheck("a.toml", False, (Problem(long, long, "plant.gain", 3),))
    for width in WIDTHS:
        texts = [
            assessed(case, width),
            predicted(case, width),
            report.check_text([check], width),
            report.history_text(case, study.units_of(case), width),
        ]
        if width >= 80:
            texts.append(proposed(case, width))
        for text in texts:
            assert max(len(one) for one in text.splitlines()) <= width
            assert text.isascii()


def test_text_from_a_file_cannot_move_the_cursor() -> None:
    case = a_case(loop_service="a\x1b[2Jb\u202ec")
    text = assessed(case)
    assert "a?[2Jb?c" in text
    check = study.FileCheck("x\x1b.toml", False, (Problem("\x07what", "mend\r", "k"),))
    assert all(one.isprintable() for one in report.check_text([check], 80).splitlines())


@pytest.mark.parametrize(
    ("changes", "integral", "derivative"),
    [
        # Exact: 0.5 min; 2 repeats/min is 30 s; in the parallel form Ti = Kp/Ki, Td = Kd/Kp.
        ({"controller_integral": "0.5 min/repeat"}, 30.0, 0.0),
        ({"controller_integral": "2 repeats/min"}, 30.0, 0.0),
        ({"controller_integral": "none", "controller_derivative": "0.1 min"}, None, 6.0),
        (
            {
                "controller_form": "parallel",
                "controller_integral": "1.1 1/min",
                "controller_derivative": "3.3 s",
            },
            60.0,
            3.0,
        ),
    ],
)
def test_proposals_give_times_in_seconds_whatever_the_form(
    changes: dict[str, str], integral: float | None, derivative: float
) -> None:
    case = a_case(**changes)
    data = report.propose_data(
        case, study.propose(case, study.Wish(method="present")), [], study.units_of(case)
    )
    present = json.loads(json.dumps(data, allow_nan=False))["proposals"][0]
    assert present["integral_s"] == (None if integral is None else pytest.approx(integral))
    assert present["derivative_s"] == pytest.approx(derivative)
    if integral is None:
        assert present["integral_s_reason"] == "there is no integral action"


def test_a_trend_is_csv_that_reads_back() -> None:
    case = a_case(pv_start="120")
    trend = study.predict(edit_all(case, {"scenario.until": "50 s"})).trend
    rows = list(csv.reader(report.trend_csv(trend).splitlines()))
    assert rows[0] == ["time_s", "sp", "pv", "op"]
    assert len(rows) == len(trend.time) + 1
    assert float(rows[-1][2]) == pytest.approx(float(trend.pv[-1]), rel=1e-9)


def test_a_fit_says_how_sure_it_is(tmp_path: Path) -> None:
    from math import exp

    path = tmp_path / "bump.csv"
    rows = [
        f"{t},{50 + 10 * (1 - exp(-max(t - 35, 0) / 20)) + 0.02 * ((t * 7919) % 11 - 5):.4f},"
        f"{45 if t >= 30 else 40}"
        for t in range(240)
    ]
    path.write_text("time_s,pv,op\n" + "\n".join(rows) + "\n")
    found = fit(read_record(path))
    text = report.fit_text(found, 100)
    assert "first-order (chosen)" in text
    assert re.search(r"gain +\S+ PV per OP, standard error \S+ \(95 %: \S+ to \S+\)", text)
    assert re.search(r"dead time +\S+ s, standard error", text)
    undecided = replace(found, chosen=None, reason="The record cannot tell.")
    assert "No model is chosen. The record cannot tell." in report.fit_text(undecided, 80)
    assert report.fit_data(undecided)["chosen_reason"] == "The record cannot tell."
    named = replace(found, warnings=(*found.warnings, Note("caution", "look here")))
    assert "Caution: look here" in report.fit_text(named, 80)


def test_a_figure_that_is_not_there_says_why_in_words_and_in_json() -> None:
    case = a_case(controller_gain="20")
    data = report.assess_data(case, study.assess(case), study.units_of(case))
    text = json.dumps(data, allow_nan=False)
    assert '"gain_margin": null, "gain_margin_reason": "the loop is not stable' in text
    assert Figure(None, "why").times(2.0).reason == "why"


def test_settings_are_told_in_their_own_units() -> None:
    changes = {"controller_proportional_band": "91", "controller_derivative": "0.05 min"}
    controller = a_case(**{"controller_gain": "", **changes}).controller
    assert controller is not None
    assert report.settings_text(controller) == (
        "proportional band 91 %, integral 0.5 min, derivative 0.05 min"
    )
