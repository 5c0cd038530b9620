"""The line reader against the parser: every value where it says, and not a byte lost."""

from __future__ import annotations

import tomllib
from pathlib import Path
from time import perf_counter
from typing import Any

import pytest
import tomli_w
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.case.making import DATA
from workbench.case.layout import Layout, read_layout

# --- texts of every form -------------------------------------------------------------------------

NAMES = st.one_of(
    st.sampled_from(["a", "b", "gain", "time-constant", "from_", "1", "x2"]),
    st.text(st.characters(codec="utf-8"), max_size=6),
)
SPACE = st.sampled_from(["", " ", "  ", "\t"])
REMARKS = st.sampled_from(["", "# plain", "#", '# "quoted" [x] {y', "# ''' and \"\"\" = 3"])
SCALARS = st.sampled_from(
    [
        "1", "-0.5", "1_000.25e-3", "0x1F", "true", "inf",
        "2026-11-30T14:05:00+01:00", "2026-11-30 14:05:00", "2026-11-30", "14:05:00",
        '"40 s"', '"a # b"', '"\\" \\\\"', "'C:\\temp'", "''", '""',
        '"""one line"""', '"""\n two \\\n   lines # "" [\n"""',
        '"""ends in quotes"""""', '"""\\""""',
        "'''\nraw ' '' \\ \n'''", "''''quoted'''''", '""""""',
    ]
)  # fmt: skip


@st.composite
def written_keys(draw: st.DrawFn, name: str) -> str:
    """A name as it may be written."""
    forms = [tomli_w.dumps({name: 0}).removesuffix(" = 0\n")]
    if "'" not in name and all(c == "\t" or (c >= " " and c != "\x7f") for c in name):
        forms.append(f"'{name}'")
    escaped = "".join(f"\\U{ord(c):08x}" for c in name)
    return draw(st.sampled_from([*forms, f'"{escaped}"']))


def arrays(values: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
    gap = st.sampled_from(["", " ", "\n  ", " # [ remark\n", "\n\n"])

    def written(items: list[str], between: str, last: str) -> str:
        return f"[{between}" + f",{between}".join(items) + (last if items else "") + f"{between}]"

    return st.builds(written, st.lists(values, max_size=4), gap, st.sampled_from(["", ","]))


def inline_tables(values: st.SearchStrategy[str]) -> st.SearchStrategy[str]:
    pairs = st.dictionaries(st.sampled_from(["a", "b", "'c d'", "e.f"]), values, max_size=3)
    return pairs.map(lambda items: "{ " + ", ".join(f"{k} = {v}" for k, v in items.items()) + " }")


VALUES = st.recursive(SCALARS, lambda inner: arrays(inner) | inline_tables(inner), max_leaves=5)


@st.composite
def settings_of_a_table(draw: st.DrawFn, dotted: bool) -> list[str]:
    lines = []
    for name in draw(st.lists(NAMES, unique=True, max_size=4)):
        key = draw(written_keys(name))
        if dotted and draw(st.booleans()):
            key += f"{draw(SPACE)}.{draw(SPACE)}{draw(written_keys(draw(NAMES)))}"
        lead, before, after, end = (draw(SPACE) for _ in range(4))
        lines.append(f"{lead}{key}{before}={after}{draw(VALUES)}{end}{draw(REMARKS)}")
        lines.extend(
            draw(st.lists(st.sampled_from(["", "  ", "# between", "\t# [x]"]), max_size=1))
        )
    return lines


@st.composite
def texts(draw: st.DrawFn) -> str:
    """A TOML text in any spacing, with or without a last newline."""
    lines = draw(settings_of_a_table(True))
    root = set(tomllib.loads("\n".join(lines)))
    for name in draw(st.lists(NAMES.filter(lambda n: n not in root), unique=True, max_size=3)):
        key, gap = draw(written_keys(name)), draw(SPACE)
        entries = draw(st.sampled_from([0, 1, 3]))
        for _ in range(max(entries, 1)):
            brackets = ("[[", "]]") if entries else ("[", "]")
            header = f"{gap}{brackets[0]}{gap}{key}{gap}{brackets[1]}{gap}{draw(REMARKS)}"
            lines += [header, *draw(settings_of_a_table(True))]
            if draw(st.booleans()):
                lines += [f"[{key}.{gap}'below this']", *draw(settings_of_a_table(False))]
    newline = draw(st.sampled_from(["\n", "\r\n"]))
    text = "\n".join(lines) + draw(st.sampled_from(["", "\n", "\n\n"]))
    return text.replace("\n", newline)


# --- what the layout says, put together again ----------------------------------------------------


def rebuilt(layout: Layout) -> dict[str, Any]:
    """The values of a text, each parsed alone from where the layout says it stands."""
    root: dict[str, Any] = {}
    for each in layout.statements:
        holder: Any = root
        way = each.path if each.value is None else each.path[:-1]
        for position, step in enumerate(way):
            if isinstance(holder, list):
                assert isinstance(step, int)
                if step == len(holder):
                    holder.append({})
                holder = holder[step]
            else:
                numbered = isinstance(next(iter(way[position + 1 :]), ""), int)
                holder = holder.setdefault(step, [] if numbered else {})
        if each.value is not None:
            start, end = each.value
            holder[each.path[-1]] = tomllib.loads(f"x = {layout.text[start:end]}")["x"]
    return root


@given(texts())
@settings(max_examples=60)
def test_every_value_is_where_the_layout_says(text: str) -> None:
    values_are_where_the_layout_says(text)


def values_are_where_the_layout_says(text: str) -> None:
    assert rebuilt(read_layout(text)) == tomllib.loads(text)


@given(texts())
@settings(max_examples=25)
def test_statements_keep_every_line_in_order(text: str) -> None:
    at = 0
    for each in read_layout(text).statements:
        between = text[at : each.start]
        assert all(not line.strip() or line.strip().startswith("#") for line in between.split("\n"))
        assert each.start == 0 or text[each.start - 1] == "\n"
        assert each.end == len(text) or text[each.end - 1] == "\n"
        assert each.line == text.count("\n", 0, each.start) + 1
        at = each.end
    assert not tomllib.loads(text[at:]), "nothing but remarks is left behind the last statement"


@pytest.mark.parametrize("path", sorted(DATA.rglob("*.toml")), ids=lambda path: path.stem)
def test_every_file_of_this_room_is_laid_out(path: Path) -> None:
    text = path.read_text("utf-8")
    layout = read_layout(text)
    try:
        values = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return

    # As text, because what is not a number equals nothing.
    assert repr(rebuilt(layout)) == repr(values)


@given(st.text(st.sampled_from("a.='\"\\[]{}#, \n\r\t1"), max_size=60))
@settings(max_examples=300)
def test_any_text_is_laid_out_without_a_fault(text: str) -> None:
    layout = read_layout(text)

    assert all(0 <= s.start < s.end <= len(text) for s in layout.statements)


def test_lines_of_list_members_are_known() -> None:
    layout = read_layout(
        "a = 1\nb = [\n # x\n {c = 1},\n\n  5, {c = [1,\n 2]},\n]\n[[d]]\n[[d]]\ne = 1"
    )

    assert [layout.line("b", n) for n in range(4)] == [4, 6, 6, 2]
    assert layout.line("b", 2, "c") == 6
    assert layout.line("d", 1, "e") == 11
    assert layout.line("d", 0, "missing") == 9
    assert layout.line("z") is None


@pytest.mark.parametrize(
    "text",
    [
        "[" + "a." * 300_000 + "a]",
        "a." * 300_000 + "a = 1",
        '"x".' * 200_000 + "a = 1",
        "a = " + "[" * 500_000,
        'a = """' + '\\"""' * 200_000,
        'a = "' + '\\"' * 400_000,
        "[[a]]\n" * 50_000,
        "a = 1\n" * 50_000,
        " " * 900_000 + "x",
    ],
    ids=lambda text: text[:8],
)  # fmt: skip
def test_a_hostile_text_takes_no_longer_than_its_length(text: str) -> None:
    start = perf_counter()
    read_layout(text)

    # 0.1 to 0.7 s were seen; anything that grows with the square takes minutes.
    assert perf_counter() - start < 10
