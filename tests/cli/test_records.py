"""The commands about records say what a script needs, with statuses that mean something."""

from __future__ import annotations

import json
import math
from pathlib import Path
from typing import Any

import pytest

from workbench.cli import main

CASES = Path(__file__).resolve().parents[2] / "cases"
CASE, RUN, SWING = (
    str(CASES / name) for name in ("FIC-204.toml", "FIC-204_run.csv", "FIC-204_swing.csv")
)


def asked(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, Any]:
    """The status and the object printed, which holds finite numbers and a reason for each null."""
    status = main([*words, "--json"])
    out, err = capsys.readouterr()
    assert err == ""
    data = json.loads(out)
    check(data)
    return status, data


def check(data: Any) -> None:
    if isinstance(data, dict):
        for key, value in data.items():
            assert value is not None or f"{key}_reason" in data, key
            check(value)
    elif isinstance(data, list):
        for value in data:
            check(value)
    elif isinstance(data, float):
        assert math.isfinite(data)


def test_plan_has_the_keys_that_stay(capsys: pytest.CaptureFixture[str]) -> None:
    status, data = asked(
        capsys, "plan", "--plant", "1.8 exp(-6 s)/(40 s+1)", "--noise", "0.2", "--max-pv-change=3"
    )

    assert status == 0
    assert data["bump_op"] > 0
    assert data["hold_s"] > 6 + 4 * 40
    assert len(data["moves"]) == 4
    assert data["expected_pv_change"] <= 3.0
    assert set(data["expected_standard_errors"]) == {"gain", "dead_time_s", "time_constants_s"}
    assert data["cautions"]


def test_plan_of_a_level_tells_its_slope(capsys: pytest.CaptureFixture[str]) -> None:
    _, data = asked(capsys, "plan", str(CASES / "LIC-112.toml"), "--max-pv-change", "3")

    assert "slope_per_s" in data["expected_standard_errors"]


def test_a_certainty_out_of_reach_is_a_no(capsys: pytest.CaptureFixture[str]) -> None:
    words = ("--plant", "2/(40 s+1)", "--noise", "5", "--max-pv-change", "1", "--certainty", "1")
    status, data = asked(capsys, "plan", *words)

    assert status == 1
    assert not data["enough"]


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("plan", "--plant", "2/(s+1)", "--noise", "1"), "--max-pv-change: is missing"),
        (("plan", "--plant", "2/(s+1)", "--max-pv-change", "1"), "--noise: is missing"),
        (
            ("plan", "--plant", "2/(s-1)", "--noise", "1", "--max-pv-change", "1"),
            "--plant: is unstable",
        ),
        (("recognise", RUN, CASE, "--case", CASE), "--case: is given beside a CASE"),
        (("diagnose", "nowhere.csv"), "nowhere.csv: is not there"),
        (("observe", CASE), "CASE RECORD.csv: is missing"),
        (("diagnose", RUN, "--pv", "flow"), "flow"),
    ],
)
def test_a_fault_is_one_line(
    words: tuple[str, ...], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(list(words)) == 2
    out, err = capsys.readouterr()

    assert out == ""
    assert said in err
    assert err.count("\n") == 1


def test_diagnose_has_the_keys_that_stay(capsys: pytest.CaptureFixture[str]) -> None:
    status, data = asked(capsys, "diagnose", SWING, "--case", CASE)

    assert status == 0
    assert data["likely_cause"] == "valve"
    assert data["valve"]["verdict"] == "stick-slip"
    assert data["valve"]["stick_slip_percent"] > 1.0
    assert data["oscillation"]["present"]
    assert data["oscillation"]["period_s"] == pytest.approx(126, rel=0.05)
    assert 0.0 < data["minimum_variance_index"] < 1.0
    assert data["time_in_auto_percent"] == pytest.approx(100.0)
    assert any(reason.startswith("against tuning") for reason in data["reasons"])


def test_diagnose_of_a_calm_loop_leaves_out_what_it_cannot_tell(
    capsys: pytest.CaptureFixture[str],
) -> None:
    _, data = asked(capsys, "diagnose", RUN)

    assert data["likely_cause"] == "none"
    assert data["minimum_variance_index"] is None
    assert data["upsets"] is None


def test_recognise_has_the_keys_that_stay(capsys: pytest.CaptureFixture[str]) -> None:
    status, data = asked(capsys, "recognise", RUN, CASE)
    best = data["candidates"][0]

    assert status == 0
    assert data["as_in_case"] is True
    assert (best["form"], best["action"]) == ("ideal", "reverse")
    assert best["gain"] == pytest.approx(0.5, rel=0.02)
    assert best["integral_s"] == pytest.approx(10.0, rel=0.02)
    assert best["derivative_s"] == 0.0
    assert best["agreement_percent"] > 99.0


def test_a_wrong_sheet_is_a_no_with_what_would_fit(capsys: pytest.CaptureFixture[str]) -> None:
    status, data = asked(
        capsys, "recognise", RUN, "--case", CASE, "--set", "controller.proportional_band=62.5"
    )

    assert status == 1
    assert data["as_in_case"] is False
    assert data["differences"]
    main(["recognise", RUN, CASE, "--set", "controller.integral=6 min"])
    assert "as if the sheet meant the integral as 6 repeats/min" in capsys.readouterr().out


def test_a_bump_in_manual_is_no_record_of_a_controller(capsys: pytest.CaptureFixture[str]) -> None:
    status, data = asked(capsys, "recognise", str(CASES / "TIC-307_bump.csv"))

    assert status == 1
    assert data["candidates"] == []
    assert "never in automatic" in data["candidates_reason"]


def test_observe_has_the_keys_that_stay(capsys: pytest.CaptureFixture[str]) -> None:
    status, data = asked(capsys, "observe", CASE, RUN)

    assert status == 0
    assert data["verdict"] == "as predicted"
    assert data["agreement_percent"] > 80.0
    assert data["predicted"]["iae"] == pytest.approx(data["observed"]["iae"], rel=0.1)
    assert data["reasons"]


def test_observe_says_no_and_cannot_tell(capsys: pytest.CaptureFixture[str]) -> None:
    different = asked(capsys, "observe", CASE, RUN, "--set", "plant.gain=0.8")
    blind = asked(capsys, "observe", CASE, str(CASES / "FIC-204_bump.csv"))

    assert (different[0], different[1]["verdict"]) == (1, "different")
    assert different[1]["explanations"][0]["what"] == "gain"
    assert (blind[0], blind[1]["verdict"]) == (1, "cannot tell")


def test_observe_saves_an_entry_and_changes_nothing_else(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    case = tmp_path / "FIC-204.toml"
    case.write_bytes(Path(CASE).read_bytes())
    assert main(["observe", str(case), RUN, "--save", "--who", "mk"]) == 0
    before, after = Path(CASE).read_text(), case.read_text()

    assert after.startswith(before)
    assert 'kind = "observed"' in after[len(before) :]
    assert "measured_iae = 191." in after[len(before) :]
    capsys.readouterr()
    main(["history", str(case)])
    assert "measured: IAE" in capsys.readouterr().out
