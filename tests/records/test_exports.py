"""Awkward exports are read as a person reads them, or refused in one line."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.records.exports import EXPORTS
from workbench.errors import RecordError, RecordQuestion
from workbench.records.record import read_record


@pytest.mark.parametrize("name", EXPORTS)
def test_an_export_is_read_right_or_refused_in_one_line(tmp_path: Path, name: str) -> None:
    export = EXPORTS[name]
    path = tmp_path / "export.csv"
    content = export.content
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    if export.refused:
        with pytest.raises(RecordError) as caught:
            read_record(path, **export.options)  # type: ignore[arg-type]  # its options
        assert export.refused in str(caught.value)
        assert "\n" not in str(caught.value)
        return
    record = read_record(path, **export.options)  # type: ignore[arg-type]
    np.testing.assert_allclose(record.time, export.seconds, rtol=0, atol=1e-9)
    np.testing.assert_array_equal(record.pv, export.pv)
    np.testing.assert_array_equal(record.op, export.op)
    told = " | ".join(note.text for note in record.notes)
    for words in export.told:
        assert words in told
    if export.first is not None:
        assert record.start_stamp == export.first
    if export.sp is not None:
        assert record.sp is not None
        np.testing.assert_array_equal(record.sp, export.sp)
    if export.mode is not None:
        assert record.mode == export.mode


def test_a_question_holds_both_readings_and_the_option_that_answers_it(tmp_path: Path) -> None:
    path = tmp_path / "export.csv"
    for name, option in (
        ("day or month", "--dates"),
        ("thousands or decimals", "--decimal"),
        ("days of a spreadsheet", "--dates"),
    ):
        content = EXPORTS[name].content
        assert isinstance(content, str)
        path.write_text(content)
        with pytest.raises(RecordQuestion) as caught:
            read_record(path)
        assert caught.value.option == option
        assert len(caught.value.readings) == 2
        for answer, _ in caught.value.readings:
            read_record(path, **{option[2:]: answer})  # type: ignore[arg-type]


REAL = Path(__file__).parents[3] / "shared" / "records"


@pytest.mark.parametrize(
    ("name", "pv", "op", "told"),
    [
        # published description of the data: one gap of 1659 s, rows 30 and 31 s apart
        ("openmv_flotation_cell.csv", "Pulp level", "Air flow rate", "the longest 27.65 min"),
        # counted in the file: 46 seconds have no row, none two in a row
        ("skab_valve1_5.csv", "Pressure", "Volume Flow RateRMS", "46 rows are missing singly"),
    ],
)
def test_real_exports_are_read_with_their_oddities(name: str, pv: str, op: str, told: str) -> None:
    if not (REAL / name).exists():
        pytest.skip(f"the folder of real records is not beside the repository: {REAL}")
    record = read_record(REAL / name, pv=pv, op=op)
    assert told in " | ".join(note.text for note in record.notes)
