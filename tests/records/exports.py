"""Awkward exports as plants really write them, each with what a person reads in it.

Expected values are exact: they were read off the text by hand.  Where a file can be read in two
ways, or not at all, the row holds the words of the refusal.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Final


@dataclass(frozen=True)
class Export:
    """One file, and what is to come of it."""

    content: str | bytes
    seconds: tuple[float, ...] = ()
    pv: tuple[float, ...] = ()
    op: tuple[float, ...] = ()
    options: dict[str, object] = field(default_factory=dict)
    first: str | None = None
    """Stamp of the first row."""
    told: tuple[str, ...] = ()
    """Words among the record's notes."""
    refused: str = ""
    """Words of the refusal."""
    sp: tuple[float, ...] | None = None
    mode: tuple[str, ...] | None = None


_ISO: Final = "2026-11-30 14:05:00"
T4: Final = (0.0, 1.0, 2.0, 3.0)
PV4: Final = (10.0, 10.5, 11.0, 11.5)
OP4: Final = (40.0, 40.0, 45.0, 45.0)
ROWS: Final = "time_s,pv,op\n0,10,40\n1,10.5,40\n2,11,45\n3,11.5,45\n"
LONG: Final = (
    "tag,time,value\n"
    "TIC-307.PV,2026-11-30 14:05:00,10\nTIC-307.PV,2026-11-30 14:05:01,10.5\n"
    "TIC-307.PV,2026-11-30 14:05:02,11\nTIC-307.PV,2026-11-30 14:05:03,11.5\n"
    "TIC-307.OP,2026-11-30 14:04:00,40\nTIC-307.OP,2026-11-30 14:05:02,45\n"
)


def stamped(*stamps: str, separator: str = ",") -> str:
    """Four rows at these stamps."""
    rows = zip(stamps, ("10", "10.5", "11", "11.5"), ("40", "40", "45", "45"), strict=False)
    lines = (separator.join(row) for row in rows)
    return "\n".join([separator.join(("timestamp", "pv", "op")), *lines, ""])


def same(content: str | bytes, **more: object) -> Export:
    """Another way of writing the four rows."""
    known: dict[str, object] = {"seconds": T4, "pv": PV4, "op": OP4}
    return Export(content, **(known | more))  # type: ignore[arg-type]  # fields of Export


EXPORTS: Final[dict[str, Export]] = {
    # -- separators, decimal signs, encodings, line ends --
    "comma": same(ROWS),
    "semicolon": same(ROWS.replace(",", ";")),
    "tab": same(ROWS.replace(",", "\t")),
    "semicolon and decimal comma": same(ROWS.replace(",", ";").replace(".", ",")),
    "tab and decimal comma": same(ROWS.replace(",", "\t").replace(".", ",")),
    "comma and quoted decimal comma": same(
        ROWS.replace("10.5", '"10,5"').replace("11.5", '"11,5"')
    ),
    "byte-order mark": same("\ufeff" + ROWS),
    "utf-16": same(ROWS.encode("utf-16")),
    "western code page": same(ROWS.replace("pv", "pv [°C]").encode("latin-1")),
    "carriage returns and line feeds": same(ROWS.replace("\n", "\r\n")),
    "carriage returns": same(ROWS.replace("\n", "\r")),
    "no last line end": same(ROWS.rstrip("\n")),
    "blank lines between": same(ROWS.replace("\n", "\n\n")),
    "everything in quotes": same(
        "\n".join(",".join(f'"{cell}"' for cell in row.split(",")) for row in ROWS.split())
    ),
    "spaces round cells": same(ROWS.replace(",", " , ")),
    "a comma at each line's end": same(ROWS.replace("\n", ",\n")),
    # -- headings --
    "lines above the headings": same(
        "Export of unit 3\nFrom,2026-11-30\n\n" + ROWS, told=("2 lines above the headings",)
    ),
    "units row": same(
        ROWS.replace("op\n", "op\ns,degC,%\n"), told=("Line 2 is read as a row of units",)
    ),
    "units and description rows": same(
        ROWS.replace("op\n", "op\n,Kiln outlet,Burner valve\ns,degC,%\n"), told=("Line 3 is read",)
    ),
    "units in headings": same(ROWS.replace("time_s,pv,op", "time_s,PV [degC],OP (%)")),
    "tags in headings": same(ROWS.replace("pv,op", "TIC-307.PV,TIC-307.OP")),
    "columns chosen": same(
        ROWS.replace("time_s,pv,op", "When,Level,Air"),
        options={"time": "When", "pv": "level", "op": "Air"},
    ),
    "two loops": Export(
        "time,A.PV,A.OP,B.PV,B.OP\n0,1,2,3,4\n1,1,2,3,4\n",
        refused=":1: the columns 'A.PV' and 'B.PV' can both be pv; name one with --pv",
    ),
    "no column of that name": Export(
        ROWS, options={"pv": "level"}, refused="has no column headed 'level'; its columns are"
    ),
    "no headings": Export("0,10,40\n1,11,40\n", refused="starts with numbers, not with headings"),
    # -- stamps --
    "iso": same(
        stamped(*(f"2026-11-30 14:05:0{s}" for s in range(4))), first="2026-11-30 14:05:00"
    ),
    "iso with T and Z": same(stamped(*(f"2026-11-30T14:05:0{s}Z" for s in range(4)))),
    "iso with fractions": Export(
        stamped("2026-11-30 14:05:00.25", "2026-11-30 14:05:01.5"), (0.0, 1.25), PV4[:2], OP4[:2]
    ),
    "iso without seconds": Export(
        stamped("2026-11-30 23:59", "2026-12-01 00:00"), (0.0, 60.0), PV4[:2], OP4[:2]
    ),
    "iso with zones over the end of summer time": Export(
        stamped("2026-10-25T02:59:59+02:00", "2026-10-25T02:00:00+01:00"),
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
    ),
    "compact iso": same(stamped(*(f"20261130T14:05:0{s}" for s in range(4)))),
    "day first": Export(
        stamped("30/11/2026 14:05:00", "01/12/2026 00:00:00"),
        (0.0, 35_700.0),
        PV4[:2],
        OP4[:2],
        first="2026-11-30 14:05:00",
        told=("day before month",),
    ),
    "month first": Export(
        stamped("11/30/2026 14:05:00", "12/01/2026 00:00:00"),
        (0.0, 35_700.0),
        PV4[:2],
        OP4[:2],
        first="2026-11-30 14:05:00",
        told=("month before day",),
    ),
    "day or month": Export(
        stamped("03/04/2026 10:00:00", "03/04/2026 10:00:01"),
        refused=":2: the date '03/04/2026' can be day 3 of month 4 or day 4 of month 3; "
        "say --dates day-first or --dates month-first",
    ),
    "day or month, day said": Export(
        stamped("03/04/2026 10:00:00", "03/04/2026 10:00:01"),
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        {"dates": "day-first"},
        "2026-04-03 10:00:00",
    ),
    "day or month, month said": Export(
        stamped("03/04/2026 10:00:00", "03/04/2026 10:00:01"),
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        {"dates": "month-first"},
        "2026-03-04 10:00:00",
    ),
    "day and month the same": Export(
        stamped("04/04/2026 10:00:00", "04/04/2026 10:00:01"),
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        first="2026-04-04 10:00:00",
    ),
    "said against the file": Export(
        stamped("30/11/2026 14:05:00", "30/11/2026 14:05:01"),
        options={"dates": "month-first"},
        refused="the date '30/11/2026' is not month-first; leave --dates out",
    ),
    "points and two digits of the year": Export(
        stamped("30.11.26 14:05:00", "30.11.26 14:05:01", separator=";"),
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        first="2026-11-30 14:05:00",
    ),
    "month by name": Export(
        stamped("30-Nov-2026 23:59:59", "01-Dec-26 00:00:01"),
        (0.0, 2.0),
        PV4[:2],
        OP4[:2],
        first="2026-11-30 23:59:59",
    ),
    "morning and afternoon": Export(
        stamped("11/30/2026 11:59:59 AM", "11/30/2026 12:00:00 PM", "11/30/2026 1:00:00 pm"),
        (0.0, 1.0, 3601.0),
        PV4[:3],
        OP4[:3],
    ),
    "midnight is twelve in the morning": Export(
        stamped("11/30/2026 12:00:00 AM", "11/30/2026 1:00:00 AM"), (0.0, 3600.0), PV4[:2], OP4[:2]
    ),
    "date and time in two columns": same(
        "Date,Time,pv,op\n"
        + "".join(
            f"30/11/2026,14:05:0{s},{pv},{op}\n"
            for s, pv, op in zip(range(4), PV4, OP4, strict=True)
        ),
        first="2026-11-30 14:05:00",
    ),
    "two columns chosen": same(
        "Day;Clock;pv;op\n"
        + "".join(
            f"2026-11-30;14:05:0{s};{pv};{op}\n"
            for s, pv, op in zip(range(4), PV4, OP4, strict=True)
        ),
        options={"time": "Day+Clock"},
        first="2026-11-30 14:05:00",
    ),
    "time of day over midnight": Export(
        stamped("23:59:58", "23:59:59", "00:00:00", "00:00:01"),
        T4,
        PV4,
        OP4,
        told=("have no date",),
    ),
    "days of a spreadsheet": Export(
        "time,pv,op\n46356.5,10,40\n46356.5000115741,10.5,40\n",
        refused=":2: the time '46356.5' can be 2026-11-30 12:00:00 of a spreadsheet, rows 1 s "
        "apart, or a number of seconds, rows 1.16e-05 s apart; say --dates serial or",
    ),
    "days of a spreadsheet, said": Export(
        "time,pv,op\n46356.5,10,40\n46356.5000115741,10.5,40\n",
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        {"dates": "serial"},
        "2026-11-30 12:00:00",
    ),
    "days with a decimal comma": Export(
        "time;pv;op\n46356,5;10,0;40\n46356,5000115741;10,5;40\n",
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        {"dates": "serial"},
    ),
    "minutes": Export(
        "time_min,pv,op\n0,10,40\n0.5,10.5,40\n",
        (0.0, 30.0),
        PV4[:2],
        OP4[:2],
        {"time": "time_min"},
    ),
    "an hour repeated when summer time ends": same(
        stamped(
            "2026-10-25 02:59:58",
            "2026-10-25 02:59:59",
            "2026-10-25 02:00:00",
            "2026-10-25 02:00:01",
        ),
        told=("go back by an hour in line 4",),
    ),
    "an hour missing when summer time begins": Export(
        stamped(*(f"2026-03-29 {t}" for t in ("01:59:58", "01:59:59", "03:00:00", "03:00:01"))),
        (0.0, 1.0, 3602.0, 3603.0),
        PV4,
        OP4,
        told=("clocks are put forward",),
    ),
    # -- order, repeats, holes --
    "newest first": same(
        "\n".join(["time_s,pv,op", *reversed(ROWS.split()[1:])]), told=("newest row first",)
    ),
    "rows in disorder": Export(
        ROWS.replace("2,11,", "0.5,11,"), refused=":4: the time goes back from 1 s to 0.5 s; sort"
    ),
    "a stamp twice": Export(
        ROWS.replace("2,11,45", "1,10.7,45"),
        (0.0, 1.0, 3.0),
        (10.0, 10.7, 11.5),
        (40.0, 45.0, 45.0),
        told=("1 rows repeat the stamp of their neighbour (first in line 4)",),
    ),
    "a stamp missing": Export(
        ROWS.replace("1,10.5", ",10.5"),
        (0.0, 2.0, 3.0),
        (10.0, 11.0, 11.5),
        (40.0, 45.0, 45.0),
        told=("1 of 4 rows left out", "first in line 3"),
    ),
    "a gap": Export(
        ROWS.replace("3,11.5", "60,11.5"),
        (0.0, 1.0, 2.0, 60.0),
        PV4,
        OP4,
        told=("1 gap in the rows, the longest 58 s from 2 s",),
    ),
    # -- quality --
    "quality bytes": Export(
        "time_s,pv,op,quality\n0,10,40,192\n1,99,40,0\n2,11,45,64\n3,11.5,45,216\n",
        (0.0, 2.0, 3.0),
        (10.0, 11.0, 11.5),
        (40.0, 45.0, 45.0),
        told=("1 row marked bad", "1 row marked uncertain"),
    ),
    "quality words": Export(
        "time_s,pv,op,Status\n0,10,40,Good\n1,99,40,Bad\n2,11,45,good\n3,11.5,45,Good\n",
        (0.0, 2.0, 3.0),
        (10.0, 11.0, 11.5),
        (40.0, 45.0, 45.0),
    ),
    "quality of one column": Export(
        "time_s,pv,pv_quality,op\n0,10,192,40\n1,99,0,40\n2,11,192,45\n",
        (0.0, 2.0),
        (10.0, 11.0),
        (40.0, 45.0),
    ),
    "quality words in the value column": Export(
        ROWS.replace("10.5", "I/O Timeout").replace("3,11.5", "3,Bad Input"),
        (0.0, 2.0),
        (10.0, 11.0),
        (40.0, 45.0),
        told=("2 of 4 rows left out",),
    ),
    "quality of unknown words": Export(
        "time_s,pv,op,quality\n0,10,40,fine\n", refused=":2: the quality 'fine' is not understood"
    ),
    "quality of nought and one": Export(
        "time_s,pv,op,quality\n0,10,40,1\n1,10,40,1\n", refused="'quality' holds only 0 and 1"
    ),
    "quality column left aside": Export(
        "time_s,pv,op,quality\n0,10,40,1\n1,10.5,40,1\n",
        (0.0, 1.0),
        PV4[:2],
        OP4[:2],
        {"quality": "none"},
    ),
    # -- several tags --
    "wide with blanks": Export(
        "time_s,pv,op\n0,,40\n0.5,10,\n1.5,10.5,\n2,,45\n2.5,11,\n3.5,11.5,\n",
        T4,
        PV4,
        OP4,
        told=("OP has stamps of its own", "up to 0.5 s late"),
    ),
    "long": same(LONG, first="2026-11-30 14:05:00"),
    "long, newest first": same("\n".join(["tag,time,value", *reversed(LONG.split("\n")[1:-1])])),
    "long, tags chosen": same(
        LONG.replace(".PV", "/level").replace(".OP", "/valve"),
        options={"pv": "TIC-307/level", "op": "TIC-307/valve"},
    ),
    "long without OP": Export(
        LONG.replace(".OP", ".XX"), refused="has no tag called op; name it with --op; its tags are"
    ),
    "long with quality": Export(
        LONG.replace("\n", ",Good\n")
        .replace("value,Good", "value,quality")
        .replace("10.5,Good", "10.5,Bad"),
        (0.0, 2.0, 3.0),
        (10.0, 11.0, 11.5),
        (40.0, 45.0, 45.0),
        told=("1 row marked bad",),
    ),
    "long with SP and mode": same(
        LONG
        + "TIC-307.SP,2026-11-30 14:00:00,12\nTIC-307.MODE,2026-11-30 14:00:00,AUTO\n"
        + "TIC-307.MODE,2026-11-30 14:05:02,MAN\n",
        sp=(12.0, 12.0, 12.0, 12.0),
        mode=("AUTO", "AUTO", "MAN", "MAN"),
    ),
    "mode as text": same(
        ROWS.replace("op\n", "op,mode\n").replace("40\n", "40,AUTO\n").replace("45\n", "45,MAN\n"),
        mode=("AUTO", "AUTO", "MAN", "MAN"),
    ),
    # -- thousands --
    "commas between thousands": Export(
        'time_s,pv,op\n0,"1,010.5",40\n1,"12,345,678",40\n',
        (0.0, 1.0),
        (1010.5, 12_345_678.0),
        (40.0, 40.0),
    ),
    "points between thousands": Export(
        "time_s;pv;op\n0;1.010,5;40\n1;999,5;40\n", (0.0, 1.0), (1010.5, 999.5), (40.0, 40.0)
    ),
    "spaces between thousands": Export(
        "time_s;pv;op\n0;1 010,5;40\n1;1\u00a0999,5;40\n",
        (0.0, 1.0),
        (1010.5, 1999.5),
        (40.0, 40.0),
    ),
    "apostrophes between thousands": Export(
        "time_s,pv,op\n0,1'010.5,40\n1,999.5,40\n", (0.0, 1.0), (1010.5, 999.5), (40.0, 40.0)
    ),
    "thousands or decimals": Export(
        "time_s;pv;op\n0;1,234;40\n1;1,235;40\n",
        refused=":2: '1,234' can be 1.234 or 1234; say --decimal comma for 1.234, --decimal point",
    ),
    "thousands or decimals, comma said": Export(
        "time_s;pv;op\n0;1,234;40\n1;1,235;40\n",
        (0.0, 1.0),
        (1.234, 1.235),
        (40.0, 40.0),
        {"decimal": "comma"},
    ),
    "thousands or decimals, point said": Export(
        "time_s;pv;op\n0;1,234;40\n1;1,235;40\n",
        (0.0, 1.0),
        (1234.0, 1235.0),
        (40.0, 40.0),
        {"decimal": "point"},
    ),
    "comma and point for decimals": Export(
        "time_s;pv;op\n0;10,5;40\n1;11.5;40\n",
        refused=":3: '11.5' and line 2 differ in the decimal",
    ),
    "decimal comma between commas": Export(
        ROWS.replace("10.5", "10,5"), refused=":3: has 4 cells under 3 headings"
    ),
}
"""Name -> export."""
