"""Files written under format 1 are read as they were meant, for ever.

`tests/data/format-1/` was written by the version that fixed the format; beside each file stands
what it meant then.  Neither is ever changed: a program that reads them otherwise is wrong.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Final

import pytest

from workbench.case.case import Case, keys, show
from workbench.case.files import read_case
from workbench.case.writing import changed_text

FILES: Final = sorted((Path(__file__).parents[1] / "data" / "format-1").glob("*.toml"))


def history(case: Case) -> list[dict[str, object]]:
    return [
        {
            "at": entry.at.isoformat(),
            "who": entry.who,
            "kind": entry.kind,
            "why": entry.why,
            "settings": entry.controller_keys(),
            "load_iae": entry.load_iae,
        }
        for entry in case.history
    ]


def same(was: object, now: object) -> bool:
    """Every word that stood there; keys that came later may be there too."""
    if isinstance(was, dict) and isinstance(now, dict):
        return all(key in now and same(value, now[key]) for key, value in was.items())
    if isinstance(was, list) and isinstance(now, list):
        return len(was) == len(now) and all(map(same, was, now))
    return was == now


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_a_file_of_format_1_means_what_it_meant(path: Path) -> None:
    file = read_case(path)
    meant = json.loads(path.with_suffix(".json").read_text("utf-8"))

    shown = {key: show(file.case, key) for key in keys(file.case)}
    assert [key for key, text in meant["keys"].items() if shown.get(key) != text] == []
    assert same(meant["history"], history(file.case))
    assert changed_text(file.text, file.case, file.case)[0] == file.text


def test_every_table_of_the_format_is_among_them() -> None:
    said = {
        key.partition(".")[0]
        for path in FILES
        for key, text in json.loads(path.with_suffix(".json").read_text("utf-8"))["keys"].items()
        if text
    }
    assert said >= {"loop", "pv", "op", "plant", "controller", "valve", "measurement", "scenario"}
    assert said >= {"compensation", "feedforward", "inner"}
