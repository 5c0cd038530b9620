"""The documents say what the program does, because the program wrote that part of them.

Three kinds of block in README.md and DEVELOPERS.md are made by the program:

- a `console` block: each line after `$ ` is run, what follows is what it printed;
- a block after `<!-- screen: ... -->`: the screen at 80x24 after the keys named there;
- what stands between `<!-- table: NAME -->` and `<!-- end -->`: made from the declarations.

`python -m tests.test_docs --write` brings them up to date; the test finds what is not.
"""

from __future__ import annotations

import ast
import asyncio
import contextlib
import dataclasses
import difflib
import os
import re
import shlex
import shutil
import stat
import subprocess
import sys
import tempfile
import tomllib
from collections.abc import Callable, Iterable, Iterator, Sequence
from importlib.util import find_spec
from pathlib import Path
from typing import Final

import pytest

from tests import outside
from tests.screens.conftest import press, running, text_of, type_in
from workbench.case.tables import SHAPE, TABLES, PlantTable, Revision
from workbench.cli.options import Option
from workbench.cli.table import COMMANDS, INLINE, SCREEN
from workbench.model.blocks import Block, Blocks
from workbench.model.plant import SHAPES
from workbench.screens.work import Work
from workbench.tune.rules import RULES
from workbench.units import MISSING, Amount, Quantity, plain, quantities

ROOT: Final = Path(__file__).resolve().parents[1]
DOCUMENTS: Final = ("README.md", "DEVELOPERS.md")
WRITE: Final = "python -m tests.test_docs --write"

# --- tables made from the declarations -----------------------------------------------------------

_WRITTEN: Final = {
    "number": "number",
    "text": "text",
    "flag": "`true` or `false`",
    "duration": "time",
    "rate": "rate",
    "integral": 'time, repeats per time, 1/time, `"none"`',
    "derivative": 'time, `"none"`',
    "filter": 'N, time, `"none"`',
}


def _row(*cells: str) -> str:
    return "| " + " | ".join(cell.replace("|", "\\|") for cell in cells) + " |"


def _table(heads: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    return "\n".join([_row(*heads), _row(*("---" for _ in heads)), *(_row(*row) for row in rows)])


def _limits(declared: Quantity) -> str:
    words = [
        f"{sign} {plain(limit)}"
        for sign, limit in (
            ("at least", declared.low),
            ("above", declared.above),
            ("at most", declared.high),
            ("below", declared.below),
        )
        if limit is not None
    ]
    return ", ".join([*words, *(["not 0"] if declared.nonzero else [])])


def _key_row(key: str, declared: Quantity, default: object) -> tuple[str, str, str, str]:
    if default is MISSING:
        standard = "needed"
    elif default is None or default == "":
        standard = "not there"
    elif isinstance(default, bool):
        standard = f"`{str(default).lower()}`"
    elif isinstance(default, str | Amount):
        standard = f'`"{default}"`'
    else:
        assert isinstance(default, float)
        standard = f"`{plain(default)}`"
    if declared.kind == "choice":
        written = ", ".join(f'`"{word}"`' for word in declared.choices)
    else:
        written = _WRITTEN[declared.kind]
    unit = f" [{declared.unit}]" if declared.unit else ""
    limits = _limits(declared)
    return (
        f"`{key}`",
        declared.meaning + unit,
        written + (f", {limits}" if limits else ""),
        standard,
    )


def _key_rows(table: type) -> list[tuple[str, str, str, str]]:
    defaults = {item.name: item.default for item in dataclasses.fields(table)}
    return [
        _key_row(name.rstrip("_"), declared, defaults[name])
        for name, declared in quantities(table).items()
    ]


def case_keys() -> str:
    """Every key of a case file."""
    heads = ("key", "meaning", "written as", "left out")
    parts = []
    for name, table in TABLES.items():
        if table is not PlantTable:
            parts += [f"**`[{name}]`**", _table(heads, _key_rows(table))]
            continue
        shared = [_key_row("shape", SHAPE, MISSING), *_key_rows(table)]
        parts += [
            "**`[plant]`** has `shape` and the keys of that shape, or `formula` alone",
            _table(heads, shared),
        ]
        seen = {row[0] for row in shared}
        shape_rows = [
            (f"`{shape}`", *row)
            for shape, kind in SHAPES.items()
            for row in _key_rows(kind)
            if row[0] not in seen
        ]
        parts += [
            _table(("shape", *heads), shape_rows),
            "**`[[plant.block]]`** in place of shape and formula: one table for each block, from OP"
            " to PV; `[plant]` may then have `time_unit` and `load_before`",
            _table(heads, [*_key_rows(Block), *_key_rows(Blocks)]),
        ]
    rows = [
        ("`at`", "when the entry was made", "date and time with its offset", "needed"),
        *_key_rows(Revision),
    ]
    parts += [
        "**`[[history]]`**: one table for each entry, with the settings it put in force in the"
        " words of `[controller]`",
        _table(heads, rows),
    ]
    return "\n\n".join(parts)


def _option_table(options: Iterable[Option]) -> str:
    rows = [(f"`{option.written}`", option.meaning, option.default or "") for option in options]
    return _table(("option", "meaning", "default"), rows)


def commands() -> str:
    """Every command with its options, then the options they share."""
    parts = [f"**`{SCREEN.usage}`** opens the screen.", _option_table(SCREEN.options)]
    for grammar in COMMANDS.values():
        own = [option for option in grammar.options if option not in INLINE]
        inline = " It takes the inline loop options too." if INLINE[0] in grammar.options else ""
        parts += [f"**`{grammar.usage}`** {grammar.does}{inline}", _option_table(own)]
    parts += ["**Inline loop options**, in place of a case file", _option_table(INLINE)]
    return "\n\n".join(parts)


def rules() -> str:
    """Every tuning method, with what it aims at, its limits, and what it was published in."""
    methods: dict[tuple[str, str, str], list[str]] = {}
    for method, rule in RULES.items():
        told = (rule.objective, rule.limits, rule.source)
        methods.setdefault(told, []).append(f"`{method}`")
    rows = ((", ".join(names), *told) for told, names in methods.items())
    return _table(("methods", "aims at", "published for", "source"), rows)


def outside_checks() -> str:
    """Every source outside the program, and how many figures were compared with it."""
    found = outside.rows()
    heads = ("source", "checks", "from memory", "held to")
    return f"{outside.in_short(found)}\n\n{_table(heads, outside.sources(found))}"


TABLES_MADE: Final[dict[str, Callable[[], str]]] = {
    "case keys": case_keys,
    "commands": commands,
    "outside checks": outside_checks,
    "rules": rules,
}
"""Name in a document -> the text between its marks."""

# --- bringing a document up to date --------------------------------------------------------------

_BLOCK: Final = re.compile(
    r"(?P<table_head><!-- table: (?P<table>[a-z ]+) -->\n).*?(?P<table_end><!-- end -->)"
    r"|(?P<console_head>```console\n)(?P<console>.*?)(?P<console_end>```)"
    r"|(?P<screen_head><!-- screen: (?P<screen>[^\n]*) -->\n```text\n)(?P<shown>.*?)"
    r"(?P<screen_end>```)",
    re.DOTALL,
)
_STAMP: Final = re.compile(
    r"\d{4}-\d\d-\d\d[T ]\d\d:\d\d(?::\d\d)?(?:Z|[+-]\d\d:\d\d)?|\d{4}-\d\d-\d\d"
)

_LONG_NUMBER: Final = re.compile(r"\d+\.\d{8,}")


def brought_up_to_date(text: str, folder: Path) -> str:
    """The document with every made block as the program makes it now.

    The commands and the screens work in `folder`, in the order in which they are shown, so that a
    tour may save a case and look at it afterwards.
    """
    screens = _screens(text)

    def made(found: re.Match[str]) -> str:
        if found["table_head"]:
            return f"{found['table_head']}\n{TABLES_MADE[found['table']]()}\n\n{found['table_end']}"
        if found["console_head"]:
            shown = _console(found["console"], folder)
            return found["console_head"] + _kept(found["console"], shown) + found["console_end"]
        if found["screen"].split()[0] == "open":
            screens_shown.extend(_session(next(screens), folder))
        shown = screens_shown.pop(0)
        return found["screen_head"] + _kept(found["shown"], shown) + found["screen_end"]

    screens_shown: list[str] = []
    return _BLOCK.sub(made, text)


def _kept(old: str, new: str) -> str:
    """The old text where only its time of day differs, or digits that no one reads."""
    return old if _comparable(old) == _comparable(new) else new


def _comparable(text: str) -> str:
    # Beyond six digits a number depends on the machine's linear algebra.
    short = _LONG_NUMBER.sub(lambda found: f"{float(found[0]):.6g}", text)
    return _STAMP.sub("then", short)


def _console(block: str, folder: Path) -> str:
    lines = []
    for line in block.splitlines():
        if line.startswith("$ "):
            lines.append(line)
            lines.extend(_printed(line[2:], folder))
    return "\n".join(lines) + "\n"


def _printed(command: str, folder: Path) -> list[str]:
    environment = {
        "PATH": f"{folder / '.bin'}:/usr/local/bin:/usr/bin:/bin",
        "PYTHONPATH": str(ROOT),
        "HOME": str(folder),
        "LANG": "C.UTF-8",
        "TZ": "UTC",
        "USER": "mk",
        "LOGNAME": "mk",
    }
    done = subprocess.run(
        ["bash", "-c", command],
        cwd=folder,
        env={**_numerics(), **environment},
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        timeout=120,
        check=False,
    )
    assert "Traceback" not in done.stdout, f"{command}:\n{done.stdout}"
    return [line.rstrip() for line in done.stdout.rstrip("\n").splitlines()]


def _numerics() -> dict[str, str]:
    """What the machine sets so that its linear algebra is right."""
    return {name: value for name, value in os.environ.items() if name.startswith("OPENBLAS")}


def _screens(text: str) -> Iterator[list[str]]:
    """The screen blocks of a document, one list for each time the program is opened."""
    sessions: list[list[str]] = []
    for found in _BLOCK.finditer(text):
        if found["screen_head"]:
            if found["screen"].split()[0] == "open":
                sessions.append([])
            assert sessions, "the first screen shown must open a case"
            sessions[-1].append(found["screen"])
    return iter(sessions)


def _session(steps: list[str], folder: Path) -> list[str]:
    """The screens of one session: `open FILE`, then keys as Textual names them.

    Words in quotes are typed into the entry that has the focus.
    """
    words = [[word for word in re.findall(r"'[^']*'|\S+", step) if word] for step in steps]
    keys = [words[0][2:], *words[1:]]

    async def tour() -> list[str]:
        shown = []
        async with running(Work.open(Path(words[0][1]))) as pilot:
            for step in keys:
                for key in step:
                    if key.startswith("'"):
                        await type_in(pilot, key.strip("'"))
                    else:
                        await press(pilot, key)
                shown.append(text_of(pilot))
        return shown

    with _standing_in(folder):
        return asyncio.run(tour())


@contextlib.contextmanager
def _standing_in(folder: Path) -> Iterator[None]:
    """The screen runs in this process: for its time the folder, user and state are set for it."""
    before, here = dict(os.environ), Path.cwd()
    os.environ.update({"XDG_STATE_HOME": str(folder / ".state"), "LOGNAME": "mk", "TZ": "UTC"})
    os.environ.pop("NO_COLOR", None)
    os.chdir(folder)
    try:
        yield
    finally:
        os.chdir(here)
        os.environ.clear()
        os.environ.update(before)


def workplace(folder: Path) -> Path:
    """A folder as an engineer has it: the shipped cases, and the command on the path."""
    shutil.copytree(ROOT / "cases", folder / "cases")
    command = folder / ".bin" / "workbench"
    command.parent.mkdir()
    command.write_text(f'#!/bin/sh\nexec {shlex.quote(sys.executable)} -m workbench "$@"\n')
    command.chmod(command.stat().st_mode | stat.S_IXUSR)
    return folder


# --- the tests -----------------------------------------------------------------------------------


def _text(document: str) -> str:
    return (ROOT / document).read_text("utf-8")


@pytest.mark.parametrize("document", DOCUMENTS)
def test_document_shows_what_the_program_shows(document: str, tmp_path: Path) -> None:
    text = _text(document)
    now = brought_up_to_date(text, workplace(tmp_path))
    change = difflib.unified_diff(text.splitlines(), now.splitlines(), "shown", "now", lineterm="")

    assert text == now, f"{document} is behind; `{WRITE}` mends it:\n" + "\n".join(change)


def _named(text: str) -> list[str]:
    """Everything in backticks, code blocks left out."""
    return re.findall(r"`([^`\n]+)`", re.sub(r"```.*?```", "", text, flags=re.DOTALL))


@pytest.mark.parametrize("document", DOCUMENTS)
def test_every_file_and_test_named_is_there(document: str) -> None:
    roots = (ROOT, ROOT / "workbench", ROOT / "tests")
    missing = []
    for name in _named(_text(document)):
        path, _, test = name.partition("::")
        if not re.fullmatch(r"[\w./-]+\.(?:py|tcss|toml|csv|md)|\.?[\w-]+(?:/[\w.-]+)*/", path):
            continue
        found = next((root / path for root in roots if (root / path).exists()), None)
        invented = "/" not in path and path.endswith((".toml", ".csv"))
        known = (
            invented if found is None else not test or f"def {test}(" in found.read_text("utf-8")
        )
        if not known:
            missing.append(name)

    assert not missing, f"{document} names what is not there: {missing}"


def _shell_lines(text: str) -> list[str]:
    blocks = re.findall(r"^```sh\n(.*?)^```", text, flags=re.DOTALL | re.MULTILINE)
    return [line.strip() for block in blocks for line in block.splitlines() if line.strip()]


def _scripts() -> set[str]:
    """Every command that an installation with the test extra brings."""
    project = tomllib.loads(_text("pyproject.toml"))["project"]
    extra = {re.split(r"[<>=]", name)[0] for name in project["optional-dependencies"]["test"]}
    return {*project["scripts"], *extra, "pip", "python"}


@pytest.mark.parametrize("document", DOCUMENTS)
def test_every_shell_line_can_be_run(document: str) -> None:
    """Those that install and test are run by `.ci/run`; here only that they name real things."""
    for line in _shell_lines(_text(document)):
        for part in line.split(" && "):
            program, *words = shlex.split(part, comments=True)
            if program in ("python3", "bash"):
                assert words[0] == "-m" or (ROOT / words[0]).exists(), part
                continue
            name = program.removeprefix(".venv/bin/")
            assert name in _scripts(), part
            if name == "python" and words[:1] == ["-m"]:
                assert find_spec(words[1]) is not None, part
            for word in words:
                if re.fullmatch(r"(?:cases|tests|workbench)(?:/[\w.-]*)?", word):
                    assert (ROOT / word).exists(), part


def test_the_two_commands_of_the_readme_are_what_ci_runs() -> None:
    install, test = _shell_lines(_text("README.md"))[:2]
    script = _text(".ci/run")

    assert install.split(" && ")[1] == ".venv/bin/pip install '.[test]'"
    assert """/bin/pip" install --quiet '.[test]'""" in script
    assert test.startswith(".venv/bin/")
    assert f'"$work/venv/bin/{test.removeprefix(".venv/bin/")}"' in script


def test_every_shipped_case_is_in_the_readme() -> None:
    readme = _text("README.md")
    missing = [path.name for path in (ROOT / "cases").glob("*.toml") if path.stem not in readme]

    assert not missing, f"README.md does not name {missing}"


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_shows_an_example_that_runs(command: str, tmp_path: Path) -> None:
    example = COMMANDS[command].example
    printed = _printed(f"{example}; echo status $?", workplace(tmp_path))

    assert printed[-1] in ("status 0", "status 1"), "\n".join([example, *printed])
    assert len(printed) > 1, f"{example} prints nothing"


# --- docstrings ----------------------------------------------------------------------------------


def _documented() -> list[tuple[str, ast.FunctionDef, list[str]]]:
    """Every function of the package that has a Parameters section, with the names described."""
    found = []
    for path in sorted((ROOT / "workbench").rglob("*.py")):
        for node in ast.walk(ast.parse(path.read_text("utf-8"))):
            if not isinstance(node, ast.FunctionDef):
                continue
            section = re.search(
                r"^Parameters\n-+\n(.*?)(?=^\w+\n-+\n|\Z)",
                ast.get_docstring(node) or "",
                re.DOTALL | re.MULTILINE,
            )
            if section:
                heads = re.findall(r"^(\w+(?:, \w+)*)$", section[1], re.MULTILINE)
                names = [name for head in heads for name in head.split(", ")]
                found.append((f"{path.relative_to(ROOT)}::{node.name}", node, names))
    return found


def test_every_parameter_is_described() -> None:
    faults = []
    for where, node, names in _documented():
        arguments = [each.arg for each in (*node.args.args, *node.args.kwonlyargs)]
        if names != [name for name in arguments if name != "self"]:
            faults.append(f"{where} takes {arguments} and describes {names}")

    assert not faults, "\n".join(faults)


@pytest.mark.parametrize("method", RULES)
def test_every_rule_names_its_source(method: str) -> None:
    text = RULES[method].function.__doc__ or ""

    assert re.search(r"^ *Source\n *-+\n", text, re.MULTILINE), f"{method} has no Source section"


# --- writing -------------------------------------------------------------------------------------


def main(words: Sequence[str]) -> int:
    """Bring the documents up to date with `--write`."""
    if list(words) != ["--write"]:
        print(f"usage: {WRITE}")
        return 2
    for document in DOCUMENTS:
        with tempfile.TemporaryDirectory() as folder:
            text = _text(document)
            now = brought_up_to_date(text, workplace(Path(folder)))
        if now != text:
            (ROOT / document).write_text(now, "utf-8")
        print(document, "is brought up to date" if now != text else "is as the program shows it")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
