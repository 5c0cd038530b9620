"""The tolerance map: its axes against the margins, its cells against each loop by itself."""

from __future__ import annotations

import random
from dataclasses import replace

import numpy as np
import pytest

from tests.model.spreads import exact
from tests.study.test_family import a_case
from workbench import charts, study
from workbench.case.case import edit_all
from workbench.errors import InputError
from workbench.model.variation import Variation
from workbench.study.loop import loop_of


@pytest.mark.parametrize("scan", ["2 s", "none"])
def test_the_axes_end_where_the_margins_say(scan: str) -> None:
    case = a_case(controller__scan=scan)
    judged = study.assess(case).judged
    assert judged is not None
    gain, delay = judged.margins.gain_margin.value, judged.margins.delay_margin_s.value
    assert gain is not None
    assert delay is not None
    found = study.tolerance(case)
    by_way = {each.way: each for each in found.distances}

    # exact: the gain margin, and 1 + delay margin/dead time (the dead time is 6 s)
    assert by_way["gain grows"].until_unstable.value == pytest.approx(gain, rel=1e-4)
    late = by_way["dead time grows"].until_unstable.value
    assert late is not None
    # A dead time between two scans changes what the hold makes of it, the phase margin aside.
    assert late == pytest.approx(1.0 + delay / 6.0, rel=1e-4 if scan == "none" else 5e-3)
    # other route: the exact verdict just below and just above
    nominal = study.plant_of(case)
    for off, stable in ((-1e-4, True), (1e-4, False)):
        plant = Variation(dead_time=late * (1.0 + off)).of(nominal)
        assert exact(loop_of(case, plant)).stable is stable

    row, column = found.here
    assert (found.gain_ratios[column], found.other_ratios[row]) == (1.0, 1.0)
    assert found.stable[row].tolist() == [bool(ratio < gain) for ratio in found.gain_ratios]
    limit = 1.0 + delay / 6.0
    assert found.stable[:, column].tolist() == [bool(r < limit) for r in found.other_ratios]


@pytest.mark.parametrize(("axis", "scan"), [("dead time", "2 s"), ("lag", "none")])
def test_any_cell_is_what_that_loop_is_by_itself(axis: study.Axis, scan: str) -> None:
    case = a_case(controller__scan=scan)
    found = study.tolerance(case, axis=axis, columns=21, rows=9)
    draw, nominal = random.Random(5), study.plant_of(case)
    for _ in range(25):
        row, column = draw.randrange(9), draw.randrange(21)
        gain, other = float(found.gain_ratios[column]), float(found.other_ratios[row])
        lag, late = (other, 1.0) if axis == "lag" else (1.0, other)
        # other route: the exact margins of that one loop
        margins = exact(loop_of(case, Variation(gain, late, lag).of(nominal)))
        assert bool(found.stable[row, column]) == margins.stable
        if margins.stable:
            peak = margins.max_sensitivity.value
            assert found.max_sensitivity[row, column] == pytest.approx(peak, rel=1e-3)


def test_at_a_distance_the_loop_is_at_its_limit() -> None:
    case = a_case()
    found = study.tolerance(case, limit=1.8)
    nominal = study.plant_of(case)
    changed = {
        "gain grows": lambda x: Variation(gain=x),
        "dead time grows": lambda x: Variation(dead_time=x),
        "both grow alike": lambda x: Variation(gain=x, dead_time=x),
    }
    for each in found.distances:
        if each.way in changed:
            ratio = each.until_limit.value
            assert ratio is not None
            # other route: the exact Ms of the loop at that ratio is the limit
            margins = exact(loop_of(case, changed[each.way](ratio).of(nominal)))
            assert margins.max_sensitivity.value == pytest.approx(1.8, rel=2e-3)


def test_a_limit_that_is_broken_already_says_where_it_would_be_kept() -> None:
    found = study.tolerance(a_case(controller__gain="4"), limit=1.5)
    falls = next(each for each in found.distances if each.way == "gain falls")
    assert falls.until_limit.value is None
    assert falls.until_limit.reason.startswith("over now, back at x 0.")


def test_a_plant_without_dead_time_is_mapped_over_its_lags() -> None:
    case = edit_all(a_case(), {"plant": "1.8/((40 s + 1)(8 s + 1))"})
    assert study.tolerance(case, columns=11, rows=5).axis == "lag"
    with pytest.raises(InputError, match="no dead time to multiply"):
        study.tolerance(case, axis="dead time")


# --- the picture ---------------------------------------------------------------------------------


@pytest.mark.parametrize("ascii_only", [True, False])
def test_every_kind_of_cell_has_its_own_character(ascii_only: bool) -> None:
    found = study.tolerance(a_case(), columns=41, rows=15)
    field = charts.tolerance_field(found)
    assert set(np.unique(field.kinds)) == {0, 1, 2}
    picture = charts.draw_map(field, *charts.map_size(41, 15), ascii_only=ascii_only)
    rows = picture.rows
    marks = [ground.ascii if ascii_only else ground.unicode for ground in charts.GROUNDS]
    for at in range(15):
        drawn = rows[15 - at][6:]
        wanted = "".join(marks[kind] for kind in field.kinds[at])
        row, column = field.here
        if at == row:
            wanted = wanted[:column] + "O" + wanted[column + 1 :]
        assert drawn == wanted
    assert not ascii_only or all(row.isascii() for row in rows)


@pytest.mark.parametrize(("width", "height"), [(80, 12), (30, 9)])
def test_a_map_fills_its_picture(width: int, height: int) -> None:
    columns, rows = charts.map_cells(width, height)
    assert columns % 2 == rows % 2 == 1
    field = charts.tolerance_field(study.tolerance(a_case(), columns=columns, rows=rows))
    picture = charts.draw_map(field, width, height)
    assert len(picture.rows) == height
    assert {len(row) for row in picture.rows} == {width}


def test_other_settings_have_another_map() -> None:
    case = a_case()
    calm = replace(case, controller=replace(study.controller_of(case), gain=0.5))
    one, other = study.tolerance(case, columns=5, rows=5), study.tolerance(calm, columns=5, rows=5)
    assert one.distances != other.distances
