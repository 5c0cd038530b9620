"""A file becomes a record, or one line that says why it cannot.

Expected values are exact: they are written in the file that each test makes.
"""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest

from workbench.errors import RecordError
from workbench.records.record import Record, read_record
from workbench.records.table import LARGEST_FILE

ROWS = "time_s,pv,op\n0,10,40\n1,10.5,40\n2,11,45\n3,11.5,45\n"


def record_of(tmp_path: Path, content: str | bytes, **options: str | float) -> Record:
    path = tmp_path / "record.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return read_record(path, **options)  # type: ignore[arg-type]  # one type fits every option


def words(record: Record) -> str:
    return " | ".join(note.text for note in record.notes)


def test_values_and_identity_are_those_of_the_file(tmp_path: Path) -> None:
    record = record_of(tmp_path, ROWS)
    np.testing.assert_array_equal(record.time, [0, 1, 2, 3])
    np.testing.assert_array_equal(record.pv, [10, 10.5, 11, 11.5])
    np.testing.assert_array_equal(record.op, [40, 40, 45, 45])
    assert record.sha256 == hashlib.sha256(ROWS.encode()).hexdigest()
    assert record.columns == {"time": "time_s", "pv": "pv", "op": "op"}
    assert (record.sp, record.mode, record.start_stamp, record.notes) == (None, None, None, ())
    assert (record.interval, record.duration) == (1.0, 3.0)


def test_seconds_that_pass_twenty_thousand_are_not_days(tmp_path: Path) -> None:
    rows = "".join(f"{19_999.0 + 0.25 * i},{10 + i},{40 + i % 3}\n" for i in range(9))
    record = record_of(tmp_path, f"time,pv,op\n{rows}")
    np.testing.assert_array_equal(record.time, 0.25 * np.arange(9))


def test_rows_of_day_numbers_are_chosen_by_seconds_or_by_stamp(tmp_path: Path) -> None:
    rows = "".join(f"{46356.5 + i / 8640:.10f},{10 + i},{40 + i % 3}\n" for i in range(9))
    for start in (20.0, "20", "2026-11-30 12:00:20"):
        record = record_of(tmp_path, f"time,pv,op\n{rows}", dates="serial", start=start)
        assert record.start_stamp == "2026-11-30 12:00:20"
        np.testing.assert_array_equal(record.pv, 12.0 + np.arange(7))


@pytest.mark.parametrize(
    "content",
    [
        ROWS.replace(",", ";"),
        ROWS.replace(",", "\t"),
        ROWS.replace(",", ";").replace(".", ","),
        ROWS.replace("\n", "\r\n"),
        ROWS.replace("\n", "\r"),
        ROWS.rstrip("\n"),
        ROWS.replace("\n", "\n\n"),
        ROWS.replace("time_s,pv,op", "TIME_S, PV ,Op"),
        ROWS.replace("time_s,pv,op", "time_s,pv [degC],op (%)"),
        ROWS.replace("0,10,40", '"0","10","40"'),
        ROWS.replace("10.5", "+1.05e1"),
        "\ufeff" + ROWS,
        ROWS.encode("utf-16"),
        ROWS.replace("pv", "pv [°C]").encode("latin-1"),
        ROWS.replace("op\n", "op,\n").replace("40\n", "40,\n"),
    ],
)
def test_every_way_of_writing_the_same_rows_gives_the_same_record(
    tmp_path: Path, content: str | bytes
) -> None:
    record = record_of(tmp_path, content)
    np.testing.assert_array_equal(record.time, [0, 1, 2, 3])
    np.testing.assert_array_equal(record.pv, [10, 10.5, 11, 11.5])
    np.testing.assert_array_equal(record.op, [40, 40, 45, 45])


@pytest.mark.parametrize(
    ("stamps", "seconds", "first"),
    [
        (
            ["2026-11-30 23:59:59", "2026-12-01 00:00:00.5", "2026-12-01T00:00:02"],
            [0, 1.5, 3],
            "2026-11-30 23:59:59",
        ),
        (["2026-11-30 14:05", "2026-11-30 14:06", "2026-11-30 14:07"], [0, 60, 120], None),
        (
            ["2026-10-25T02:59:59+02:00", "2026-10-25T02:00:00+01:00", "2026-10-25T01:00:01Z"],
            [0, 1, 2],
            "2026-10-25 02:59:59+02:00",
        ),
        (
            ["2026/11/30 14:05:00", "2026/11/30 14:05:01", "2026/11/30 14:05:02"],
            [0, 1, 2],
            "2026-11-30 14:05:00",
        ),
        (
            ["15/12/2004 19:57:01", "15/12/2004 19:57:31", "16/12/2004 0:00:00"],
            [0, 30, 14579],
            "2004-12-15 19:57:01",
        ),
        (
            ["11/30/2026 11:59:59 AM", "11/30/2026 12:00:00 PM", "11/30/2026 1:00:00 pm"],
            [0, 1, 3601],
            "2026-11-30 11:59:59",
        ),
        (
            ["17.11.2026 14:05:00,5", "17.11.2026 14:05:01", "17.11.2026 14:05:02"],
            [0, 0.5, 1.5],
            None,
        ),
        (["5.5", "6", "8"], [0, 0.5, 2.5], None),
    ],
)
def test_stamps_become_seconds_from_the_first_row(
    tmp_path: Path, stamps: list[str], seconds: list[float], first: str | None
) -> None:
    rows = [f"{stamp};1;{op}" for stamp, op in zip(stamps, (40, 40, 45), strict=True)]
    record = record_of(tmp_path, "\n".join(["timestamp;pv;op", *rows]))
    np.testing.assert_array_equal(record.time, seconds)
    if first is not None:
        assert record.start_stamp == first


@pytest.mark.parametrize(
    ("heading", "scale"), [("t_min", 60), ("t [h]", 3600), ("time_ms", 0.001), ("Time (s)", 1)]
)
def test_the_heading_of_a_time_column_names_its_unit(
    tmp_path: Path, heading: str, scale: float
) -> None:
    record = record_of(tmp_path, ROWS.replace("time_s", heading), time=heading)
    np.testing.assert_allclose(record.time, np.arange(4) * scale, rtol=1e-15)


def test_columns_are_named_by_option_in_any_case_of_letters(tmp_path: Path) -> None:
    content = "When,Pulp level,Air,Wish,State\n0,1,5,2,MAN\n1,3,5,2,AUTO\n"
    record = record_of(
        tmp_path, content, time="when", pv="pulp LEVEL", op="Air", sp="Wish", mode="State"
    )
    np.testing.assert_array_equal(record.pv, [1, 3])
    assert record.sp is not None
    np.testing.assert_array_equal(record.sp, [2, 2])
    assert record.mode == ("MAN", "AUTO")
    assert record.columns["pv"] == "Pulp level"


def test_newest_first_is_turned_round_and_said(tmp_path: Path) -> None:
    head, *rows = ROWS.split()
    record = record_of(tmp_path, "\n".join([head, *reversed(rows)]))
    np.testing.assert_array_equal(record.pv, [10, 10.5, 11, 11.5])
    assert "newest row first" in words(record)


@pytest.mark.parametrize(
    "bad", ["", " ", "Bad", "No Data", "NaN", "#N/A", "I/O Timeout", "Over Range", "-inf", "---"]
)
def test_rows_without_a_value_are_left_out_and_counted(tmp_path: Path, bad: str) -> None:
    record = record_of(tmp_path, ROWS.replace("10.5", bad))
    np.testing.assert_array_equal(record.time, [0, 2, 3])
    assert "1 of 4 rows left out" in words(record)
    assert "line 3" in words(record)
    assert record.notes[0].severity == "caution"


def test_a_row_cut_short_is_left_out_and_counted(tmp_path: Path) -> None:
    assert "1 of 5 rows left out" in words(record_of(tmp_path, ROWS + "4,11"))


def test_a_units_row_is_no_data(tmp_path: Path) -> None:
    record = record_of(tmp_path, ROWS.replace("op\n", "op\ns,m3/h,%\n"))
    assert len(record.time) == 4
    assert "Line 2 is read as a row of units" in words(record)


def test_repeated_stamps_keep_the_later_row(tmp_path: Path) -> None:
    record = record_of(tmp_path, ROWS.replace("2,11,45", "1,10.7,45"))
    np.testing.assert_array_equal(record.time, [0, 1, 3])
    np.testing.assert_array_equal(record.pv, [10, 10.7, 11.5])
    assert "1 rows repeat the stamp" in words(record)


def test_gaps_are_noted_and_a_move_hidden_in_one_is_a_caution(tmp_path: Path) -> None:
    rows = [f"{t},1,{40 if t < 50 else 45}" for t in range(100) if not 40 < t < 60]
    record = record_of(tmp_path, "\n".join(["time_s,pv,op", *rows]))
    assert "1 gap in the rows, the longest 20 s from 40 s" in words(record)
    hidden = [note for note in record.notes if "OP moved during a gap" in note.text]
    assert [note.severity for note in hidden] == ["caution"]


def test_blank_setpoints_keep_the_value_before(tmp_path: Path) -> None:
    content = "time_s,pv,op,sp\n0,1,5,\n1,1,5,7\n2,1,6,\n3,1,6,8\n"
    record = record_of(tmp_path, content)
    assert record.sp is not None
    np.testing.assert_array_equal(record.sp, [7, 7, 7, 8])
    assert "SP is blank in 2 rows" in words(record)
    assert record_of(tmp_path, content.replace("7", "").replace("8", "")).sp is None


@pytest.mark.parametrize(
    ("start", "end", "kept"),
    [
        ("1", "2", [10.5, 11]),
        (1.0, 2, [10.5, 11]),
        ("2026-11-30 14:05:01", "2026-11-30T14:05:02", [10.5, 11]),
        ("2026-11-30 14:05:02", None, [11, 11.5]),
        (None, 1, [10, 10.5]),
    ],
)
def test_a_window_keeps_both_its_ends(
    tmp_path: Path, start: str | float | None, end: str | float | None, kept: list[float]
) -> None:
    stamped = "timestamp,pv,op\n" + "\n".join(
        f"2026-11-30 14:05:0{row}" for row in ROWS.split()[1:]
    )
    path = tmp_path / "record.csv"
    path.write_text(stamped)
    record = read_record(path, start=start, end=end)
    np.testing.assert_array_equal(record.pv, kept)
    assert record.time[0] == 0.0


REFUSED: dict[str, tuple[str | bytes, dict[str, str | float], str]] = {
    "empty": ("", {}, "record.csv: is empty; give a heading row"),
    "blank lines": ("\n \n", {}, "is empty"),
    "headings alone": ("time_s,pv,op\n", {}, "has headings and no rows"),
    "no row complete": ("time_s,pv,op\n0,,40\n1,bad,40\n", {}, ":2: has no row with all"),
    "one row": ("time_s,pv,op\n0,1,40\n", {}, "has only one usable row"),
    "no headings": ("0,10,40\n1,10,40\n", {}, ":1: starts with numbers, not with headings"),
    "words for a number": (ROWS.replace("11,45", "warm,45"), {}, ":4: 'warm' is not a number, in"),
    "decimal comma in commas": (ROWS.replace("10.5", "10,5"), {}, ":3: has 4 cells under 3"),
    "quoted decimal comma beside points": (
        ROWS.replace("10.5", '"10,5"'),
        {},
        "in the decimal sign",
    ),
    "comma and point": (
        ROWS.replace(",", ";").replace("10.5", "10,5"),
        {},
        ":5: '11.5' and line 3 differ in the decimal sign",
    ),
    "too large": (ROWS.replace("10.5", "1e999"), {}, ":3: '1e999' is too large"),
    "digits of another script": (
        ROWS.replace("10.5", "\u0661\u0660"),
        {},
        ":3: '\u0661\u0660' is not a number",
    ),
    "underscore": (ROWS.replace("10.5", "1_0"), {}, ":3: '1_0' is not a number"),
    "no pv": (ROWS.replace("pv", "level"), {}, "has no column headed pv; name it with --pv"),
    "misspelt": (ROWS, {"pv": "ppv"}, "no column headed 'ppv'; did you mean 'pv'? its columns are"),
    "two alike": (ROWS.replace("op", "pv"), {}, ":1: 2 columns are headed 'pv'"),
    "one for two": (ROWS, {"op": "pv"}, "'pv' is named as both pv and op"),
    "back in time": (
        ROWS.replace("2,11,", "0.5,11,"),
        {},
        ":4: the time goes back from 1 s to 0.5",
    ),
    "stamp": (
        ROWS.replace("0,10,", "noon,10,"),
        {},
        ":2: the time 'noon' is not understood; write",
    ),
    "stamp of 25 h": (
        "time,pv,op\n2026-11-30 25:00:00,1,2\n",
        {},
        'is not understood; write stamps like "2026-11-30 14:05:00", or seconds',
    ),
    "seconds then stamps": (
        ROWS.replace("2,11,", "2026-11-30 14:05,11,"),
        {},
        ":4: '2026-11-30 14:05' is not a number, in the column 'time_s'",
    ),
    "day or month": (
        "time,pv,op\n03/04/2026 10:00:00,1,2\n05/04/2026 10:00:00,1,2\n",
        {},
        ":2: the date '03/04/2026' can be day 3 of month 4 or day 4 of month 3; say --dates",
    ),
    "day and month": (
        "time,pv,op\n13/04/2026 10:00:00,1,2\n04/13/2026 10:00:00,1,2\n",
        {},
        ":3: the month stands first here and second in line 2",
    ),
    "half with zones": (
        "time,pv,op\n2026-11-30T14:05:00Z,1,2\n2026-11-30T14:05:01,1,2\n",
        {},
        ":3: some stamps name a time zone",
    ),
    "spreadsheet days": (
        "time,pv,op\n46000.5,1,2\n46000.50001,1,2\n",
        {},
        ":2: the time '46000.5' can be 2025-12-09 12:00:00 of a spreadsheet, rows 0.864 s apart",
    ),
    "milliseconds": ("time,pv,op\n1764511500000,1,2\n1764511501000,1,2\n", {}, "milliseconds"),
    "binary": (bytes(range(256)) * 4, {}, "record.csv: is not a text file"),
    "binary without zeros": (bytes(range(1, 9)) * 40, {}, "is not a text file"),
    "open quotation mark": (ROWS.replace("10.5", '"10.5'), {}, "a quotation mark is wrong; close"),
    "endless cell": ("time_s,pv,op\n0," + "9" * 200_000 + ",1\n", {}, ":2: a cell is far too long"),
    "long time": (ROWS.replace("2,11", "2" * 300 + ",11"), {}, "has 300 characters; at most 200"),
    "window reversed": (ROWS, {"start": "2", "end": "1"}, "--from: '2' is not before --to"),
    "window empty": (ROWS, {"start": 7.0, "end": 9.0}, "the record runs from 0 s to 3 s"),
    "window of words": (ROWS, {"start": "noon"}, "--from: 'noon' is not a number of seconds"),
}


@pytest.mark.parametrize("name", REFUSED)
def test_what_cannot_be_read_is_refused_in_one_line(tmp_path: Path, name: str) -> None:
    content, options, expected = REFUSED[name]
    with pytest.raises(RecordError) as caught:
        record_of(tmp_path, content, **options)
    line = str(caught.value)
    assert expected in line
    assert "\n" not in line
    assert all(problem.mend for problem in caught.value.problems)


def test_a_missing_file_a_folder_and_a_huge_file_are_refused(tmp_path: Path) -> None:
    with pytest.raises(RecordError, match="is not there"):
        read_record(tmp_path / "nothing.csv")
    with pytest.raises(RecordError, match="is a folder"):
        read_record(tmp_path)
    with pytest.raises(RecordError, match="not a usable file name"):
        read_record(tmp_path / "a\0b")
    huge = tmp_path / "huge.csv"
    with huge.open("wb") as file:
        file.truncate(LARGEST_FILE + 1)
    with pytest.raises(RecordError, match="is larger than 100 MB"):
        read_record(huge)


def test_nothing_from_the_file_reaches_the_terminal_raw(tmp_path: Path) -> None:
    escape = "\x1b]0;owned\x07\u202e"
    for content in (
        ROWS.replace("10.5", escape),
        ROWS.replace("2,11,", f"{escape},11,"),
        ROWS.replace("pv", escape),
    ):
        with pytest.raises(RecordError) as caught:
            record_of(tmp_path, content)
        assert str(caught.value).isprintable()
    record = record_of(
        tmp_path, ROWS.replace("op\n", "op,mode\n").replace("40\n", f"40,{escape}\n")
    )
    assert record.mode is not None
    assert all(mode.isprintable() for mode in record.mode)
