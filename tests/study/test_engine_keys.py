"""Keys of the case file that say what the controller, the valve and the sensor really do."""

from __future__ import annotations

import hashlib
from datetime import datetime
from pathlib import Path

import numpy as np
import pytest

from workbench import study
from workbench.case.case import Case, edit_all, new_case
from workbench.case.files import parse_case, read_case
from workbench.case.writing import format_case
from workbench.errors import InputError

PLANT = {
    "plant.shape": "first-order",
    "plant.gain": "1.5",
    "plant.time_constant": "20 s",
    "plant.dead_time": "4 s",
}


def a_case(**changes: str) -> Case:
    """A loop with a scan of 1 s; `controller__gain` stands for the key `controller.gain`."""
    given = {
        "pv.low": "0",
        "pv.high": "200",
        "controller.gain": "1.2",
        "controller.integral": "18 s",
        "controller.scan": "1 s",
        "scenario.setpoint_step": "8",
        "scenario.load_step": "4",
        "scenario.load_at": "200 s",
        "scenario.until": "400 s",
    }
    given.update({key.replace("__", "."): text for key, text in changes.items()})
    return edit_all(new_case("TIC-1"), {**PLANT, **given})


KEYS = {
    "incremental": {"controller__execution": "incremental", "op__max": "54"},
    "dead zone": {"controller__dead_zone": "2"},
    "gain that grows": {"controller__gain_at_rest": "0.3"},
    "setpoint rate": {"controller__setpoint_rate": "0.5 /s"},
    "setpoint filter": {"controller__setpoint_filter": "10 s"},
    "manual reset": {"controller__integral": "none", "controller__bias": "53"},
    "stick-slip": {"valve__stick_slip": "3", "valve__slip_jump": "1"},
    "deadband": {"valve__deadband": "1"},
    "resolution": {"valve__resolution": "0.5"},
    "stroke": {"valve__stroke_time": "60 s"},
    "signal limits": {"valve__signal_high": "53"},
    "equal percentage": {"valve__characteristic": "equal-percentage", "valve__rangeability": "30"},
    "table": {"valve__characteristic": "table", "valve__table": "0:0 50:20 100:100"},
    "sensor lag": {"measurement__lag": "6 s"},
    "sensor resolution": {"measurement__resolution": "1"},
    "correlated noise": {"pv__noise": "0.5", "measurement__noise_correlation": "10 s"},
    "setpoint ramp": {"scenario__setpoint_ramp": "60 s"},
    "load ramp": {"scenario__load_shape": "ramp", "scenario__load_time": "60 s"},
    "load pulse": {"scenario__load_shape": "pulse", "scenario__load_time": "30 s"},
    "load sine": {"scenario__load_shape": "sine", "scenario__load_time": "90 s"},
    "load record": {"scenario__load_shape": "record", "scenario__load_record": "0:1 20:0.5 50:0"},
    "manual": {
        "scenario__manual_at": "50 s",
        "scenario__manual_output": "58",
        "scenario__automatic_at": "120 s",
    },
    "other settings": {
        "scenario__settings_at": "220 s",
        "scenario__new_gain": "0.6",
        "scenario__new_integral": "0.5 min",
        "scenario__new_derivative": "2 s",
    },
    "proportional alone on the way": {
        "scenario__settings_at": "100 s",
        "scenario__new_integral": "none",
    },
    "plant change": {
        "scenario__change_at": "220 s",
        "scenario__gain_factor": "1.5",
        "scenario__dead_time_factor": "2",
    },
}


@pytest.mark.parametrize("name", KEYS)
def test_each_key_is_felt_and_comes_back_from_the_file(name: str) -> None:
    plain, case = a_case(), a_case(**KEYS[name])
    assert parse_case(format_case(case)) == case
    before, after = study.predict(plain).trend, study.predict(case).trend
    instants = np.arange(1.0, 400.0)
    pairs = ((before.pv, after.pv), (before.output, after.output))
    apart = max(
        float(
            np.abs(np.interp(instants, before.time, a) - np.interp(instants, after.time, b)).max()
        )
        for a, b in pairs
    )
    assert apart > 0.05


def test_values_come_in_the_loop_s_own_units() -> None:
    # exact: 50 % of OP's span is the middle; manual gives 58 of 0 to 100
    trend = study.predict(a_case(**KEYS["manual"])).trend
    held = (trend.time >= 51.0) & (trend.time < 119.0)
    assert set(trend.output[held].tolist()) == {58.0}
    # exact: at most 0.5 of PV a second from where PV rests, in the middle of 0 to 200
    slow = study.predict(a_case(controller__setpoint_rate="0.5 /s", controller__integral="none"))
    first = slow.trend.output[np.searchsorted(slow.trend.time, [0.0, 1.0, 2.0])]
    assert first == pytest.approx(50.0 + 1.2 * np.array([0.25, 0.5, 0.75]))


def test_a_sensor_lag_counts_in_the_margins() -> None:
    quick, slow = (
        study.assess(case).sampled for case in (a_case(), a_case(measurement__lag="6 s"))
    )
    assert quick is not None
    assert slow is not None
    assert (slow.margins.phase_margin_deg.value or 0) < (quick.margins.phase_margin_deg.value or 0)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"controller__integral": "none", "controller__execution": "incremental"}, "incremental"),
        ({"controller__bias": "45"}, "beside integral action"),
        ({"scenario__load_shape": "sine"}, "missing for a sine"),
        ({"scenario__load_shape": "record", "scenario__load_record": "5:1 2:0"}, "cannot be read"),
        ({"scenario__automatic_at": "9 s"}, "does not come after manual"),
        ({"scenario__new_gain": "2"}, "has no time to begin at"),
        ({"scenario__load_sha256": "f00d"}, "has no load_file to go with"),
        ({"scenario__load_file": "feed.csv", "scenario__load_shape": "record"}, "column's heading"),
        ({"scenario__settings_at": "9 s", "scenario__new_integral": "20"}, "20"),
    ],
)
def test_what_cannot_be_is_refused(changes: dict[str, str], words: str) -> None:
    with pytest.raises(InputError, match=words):
        a_case(**changes)


def test_settings_on_the_way_are_those_of_the_controller_s_own_form() -> None:
    # other route: a series controller begun with the new settings, from the same rest
    given = {"controller__form": "series", "scenario__settings_at": "0 s"}
    changed = a_case(**given, scenario__new_gain="0.8", scenario__new_derivative="3 s")
    other = a_case(controller__form="series", controller__gain="0.8", controller__derivative="3 s")
    one, wanted = study.predict(changed).trend, study.predict(other).trend
    assert np.abs(one.pv - wanted.pv).max() < 1e-9


def test_settings_that_the_form_does_not_take_are_refused_under_their_key() -> None:
    case = a_case(scenario__settings_at="9 s", scenario__new_integral="0.1 1/s")
    with pytest.raises(InputError, match="form") as refused:
        study.predict(case)
    assert refused.value.problems[0].key == "scenario.new_integral"


def _recorded(tmp_path: Path) -> Case:
    rows = "time_s,feed,other\n0,20,1\n15,21.5,1\n30,21.5,2\n60,19,3\n90,20,9\n"
    (tmp_path / "feed.csv").write_text(rows)
    (tmp_path / "TIC-1.toml").write_text(
        format_case(
            a_case(
                scenario__load_shape="record",
                scenario__load_step="",
                scenario__load_file="feed.csv",
                scenario__load_column="feed",
            )
        )
    )
    return read_case(tmp_path / "TIC-1.toml").case


def test_an_upset_from_a_file_is_its_changes_as_text(tmp_path: Path) -> None:
    # exact: the rows less the first, in OP units as the load enters with OP
    typed = a_case(
        scenario__load_shape="record",
        scenario__load_step="1",
        scenario__load_record="0:0 15:1.5 60:-1 90:0",
    )
    found, wanted = study.predict(_recorded(tmp_path)).trend, study.predict(typed).trend
    instants = np.arange(0.0, 400.0, 0.5)
    assert np.abs(
        np.interp(instants, found.time, found.pv) - np.interp(instants, wanted.time, wanted.pv)
    ).max() == pytest.approx(0.0, abs=1e-9)


def test_an_upset_file_is_known_by_its_bytes(tmp_path: Path) -> None:
    now = datetime.fromisoformat("2026-12-01T10:00:00+01:00")
    case = study.record_change(_recorded(tmp_path), who="mk", why="a test", now=now)
    bytes_ = (tmp_path / "feed.csv").read_bytes()
    assert case.scenario.load_sha256 == hashlib.sha256(bytes_).hexdigest()
    path = tmp_path / "TIC-1.toml"
    path.write_text(format_case(case))
    assert study.check_case(path).ok
    (tmp_path / "feed.csv").write_bytes(bytes_.replace(b"21.5", b"21.6"))
    with pytest.raises(InputError, match="is not the one that was meant"):
        study.predict(case)
    assert [fault.key for fault in study.check_case(path).faults] == ["scenario.load_sha256"]
    (tmp_path / "feed.csv").unlink()
    with pytest.raises(InputError, match="'feed.csv' is not beside the case; put it there"):
        study.predict(case)
    assert [fault.key for fault in study.check_case(path).faults] == ["scenario.load_file"]


def test_an_upset_file_without_its_column_says_what_it_has(tmp_path: Path) -> None:
    case = edit_all(_recorded(tmp_path), {"scenario.load_column": "fed"})
    with pytest.raises(InputError, match="feed") as refused:
        study.predict(case)
    assert refused.value.problems[0].key == "scenario.load_file"
    assert "\n" not in str(refused.value)


CASCADE = {
    "inner__plant": "1/(4 s + 1)",
    "inner__gain": "2",
    "inner__integral": "5 s",
    "inner__scan": "0.5 s",
}
INNER = {
    "series": {"inner__form": "series", "inner__derivative": "1 s"},
    "parallel": {"inner__form": "parallel", "inner__integral": "0.2 1/s"},
    "derivative": {"inner__derivative": "1 s"},
    "derivative filter": {"inner__derivative": "1 s", "inner__derivative_filter": "2 s"},
    "derivative on error": {"inner__derivative": "1 s", "inner__derivative_on": "error"},
    "limits": {"inner__max": "51"},
    "mode": {"inner__mode": "automatic"},
    "mode on the way": {"scenario__inner_mode_at": "100 s", "scenario__inner_mode": "manual"},
    "cascade closed on the way": {"inner__mode": "manual", "scenario__inner_mode_at": "50 s"},
}


@pytest.mark.parametrize("name", INNER)
def test_each_inner_key_is_felt_and_comes_back_from_the_file(name: str) -> None:
    base = {**CASCADE, "inner__derivative": "1 s"} if "filter" in name else CASCADE
    base = {**base, "inner__derivative": "1 s"} if "error" in name else base
    plain, case = a_case(**base), a_case(**{**CASCADE, **INNER[name]})
    assert parse_case(format_case(case)) == case
    before, after = study.predict(plain).inner, study.predict(case).inner
    assert before is not None
    assert after is not None
    assert np.abs(before.output - after.output).max() > 0.01


def test_an_inner_controller_is_the_same_in_every_form() -> None:
    # exact: series K, Ti, Td without filter is ideal K f, Ti + Td, Ti Td/(Ti + Td), f = 1 + Td/Ti;
    # parallel has gain K f, K f/(Ti + Td) a second and K Td
    filtered = {"inner__derivative_filter": "0.2 s"}
    ideal = {"inner__gain": "2.4", "inner__integral": "6 s", "inner__derivative": "1 s"}
    parallel = {
        "inner__form": "parallel",
        "inner__gain": "2.4",
        "inner__integral": "0.4 1/s",
        "inner__derivative": "2.4 s",
    }
    one, two = (
        study.predict(a_case(**{**CASCADE, **filtered, **given})).trend
        for given in (ideal, parallel)
    )
    assert np.abs(one.pv - two.pv).max() < 1e-9
