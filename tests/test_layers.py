"""Who may know whom: the direction of imports and the exclusive rights of the rooms.

Each rule reads the syntax of one module and answers with a sentence for each line that breaks it.
Beside each rule stand sources that break it, so that a rule that can no longer fail is found too.
"""

from __future__ import annotations

import ast
import sys
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Final, Literal

import pytest

PACKAGE: Final = Path(__file__).resolve().parents[1] / "workbench"

LAYERS: Final = (
    ("errors",),
    ("units",),
    ("model",),
    ("sim",),
    ("case", "tune", "records"),
    ("study",),
    ("report", "charts"),
    ("cli", "screens"),
    ("__main__",),
)
"""From the ground up; a room imports from lower layers and from itself, never from a neighbour."""

RUNTIME: Final = ("textual", "numpy", "scipy", "plotext", "tomli_w")
"""The packages that an installation brings."""

# --- reading a module ----------------------------------------------------------------------------


@dataclass(frozen=True)
class Import:
    """One imported name."""

    name: str
    line: int
    scope: Literal["module", "function", "typing"]
    """When it happens: as the module loads, as a function runs, or never (type checking only)."""


@dataclass(frozen=True)
class Module:
    """One module of the package, as text and as a tree."""

    room: str
    tree: ast.Module

    @classmethod
    def parse(cls, room: str, source: str) -> Module:
        return cls(room, ast.parse(source))

    def imports(self) -> Iterator[Import]:
        yield from _imports(self.tree, "module")

    def calls(self) -> Iterator[tuple[str, int]]:
        """Dotted name and line of every call of a plain or dotted name."""
        for node in ast.walk(self.tree):
            if isinstance(node, ast.Call):
                yield ast.unparse(node.func), node.lineno


def _imports(node: ast.AST, scope: Literal["module", "function", "typing"]) -> Iterator[Import]:
    for child in ast.iter_child_nodes(node):
        match child:
            case ast.Import():
                yield from (Import(alias.name, child.lineno, scope) for alias in child.names)
            case ast.ImportFrom():
                stem = "." * child.level + (child.module or "")
                for alias in child.names:
                    yield Import(f"{stem}.{alias.name}", child.lineno, scope)
            case ast.FunctionDef() | ast.AsyncFunctionDef() | ast.Lambda():
                yield from _imports(child, "typing" if scope == "typing" else "function")
            case ast.If(test=ast.Name(id="TYPE_CHECKING")):
                yield from _imports(ast.Module(child.body, []), "typing")
                yield from _imports(ast.Module(child.orelse, []), scope)
            case _:
                yield from _imports(child, scope)


def _root(name: str) -> str:
    return name.partition(".")[0]


def _layer(room: str) -> int:
    return next(height for height, rooms in enumerate(LAYERS) if room in rooms)


# --- the rules -----------------------------------------------------------------------------------

Faults = Iterator[tuple[int, str]]
"""Line and sentence."""


def direction(module: Module) -> Faults:
    """Imports inside the package go downwards."""
    rooms = {room for layer in LAYERS for room in layer}
    for found in module.imports():
        root, _, rest = found.name.partition(".")
        room = _root(rest)
        if root != "workbench" or room not in rooms or room == module.room:
            continue
        if (module.room, room) == ("records", "sim"):
            yield found.line, "records imports sim: it judges what the plant did, not a prediction"
        elif (module.room, room) == ("cli", "screens"):
            # The command line opens the screen, and only then may it load it.
            if found.scope == "module":
                yield found.line, "cli imports screens as it loads: import it where it is opened"
        elif _layer(room) == _layer(module.room):
            yield found.line, f"{module.room} imports its neighbour {room}: let study join them"
        elif _layer(room) > _layer(module.room):
            yield found.line, f"{module.room} imports {room}, which stands above it"


def full_names(module: Module) -> Faults:
    """Every import is written out, so that this test can read it."""
    for found in module.imports():
        if found.name.startswith("."):
            yield found.line, f"{found.name} is a relative import: write the full name"
        elif found.name.endswith(".*"):
            yield found.line, f"{found.name} brings names that nobody can see: name them"
    for name, line in module.calls():
        if name == "__import__" or name.rpartition(".")[2] == "import_module":
            yield line, f"{name}() hides an import: write an import statement"


def declared(module: Module) -> Faults:
    """Nothing is imported that the installation does not bring."""
    known = {*sys.stdlib_module_names, *RUNTIME, "workbench"}
    for found in module.imports():
        root = _root(found.name)
        # Textual's own interface for drawing a line is written in rich's types.
        if root and root not in known and not (root == "rich" and module.room == "screens"):
            yield found.line, f"{root} is neither standard nor one of the five runtime packages"


OWNERS: Final = {
    "textual": ("screens",),
    "plotext": ("charts",),
    "tomllib": ("case",),
    "tomli_w": ("case",),
    "csv": ("records", "report"),
    "argparse": ("cli",),
}
"""Package -> the only rooms that know it."""


def ownership(module: Module) -> Faults:
    """A package with an owner is imported by the owner alone."""
    for found in module.imports():
        owners = OWNERS.get(_root(found.name))
        if owners and module.room not in owners:
            yield (
                found.line,
                f"{module.room} imports {_root(found.name)}: only {' and '.join(owners)} knows it",
            )


def speech(module: Module) -> Faults:
    """Only the command line prints or ends the program."""
    if module.room in ("cli", "__main__"):
        return
    for name, line in module.calls():
        if name in ("print", "sys.exit", "exit", "quit", "input"):
            yield line, f"{module.room} calls {name}(): only cli talks to the terminal or exits"
    for found in module.imports():
        if found.name == "sys.exit":
            yield found.line, f"{module.room} imports sys.exit: only cli exits"


def late_scipy(module: Module) -> Faults:
    """scipy is loaded inside the functions that need it, and only its two cheap parts."""
    for found in module.imports():
        if _root(found.name) != "scipy":
            continue
        if found.name.startswith("scipy.signal"):
            yield found.line, "scipy.signal costs over a second to import: never"
        elif not found.name.startswith(("scipy.optimize", "scipy.linalg")):
            yield found.line, f"{found.name}: only scipy.optimize and scipy.linalg are used here"
        elif found.scope == "module":
            yield (
                found.line,
                f"{found.name} is imported as the module loads: import it in the function",
            )


def pure_model(module: Module) -> Faults:
    """The mathematics reads no file, no clock and no dice."""
    if module.room not in ("errors", "units", "model", "tune"):
        return
    outside = ("os", "pathlib", "random", "time", "datetime", "io", "numpy.random")
    for found in module.imports():
        if found.name.startswith("numpy.random") or _root(found.name) in outside:
            yield found.line, f"{module.room} imports {found.name}: mathematics only, in this room"
    for name, line in module.calls():
        if name == "open" or name.startswith(("np.random", "numpy.random")):
            yield line, f"{module.room} calls {name}(): no files and no randomness in this room"


RULES: Final[tuple[tuple[Callable[[Module], Faults], tuple[tuple[str, str], ...]], ...]] = (
    (
        direction,
        (
            ("errors", "from workbench.units import text"),
            ("units", "from workbench import model"),
            ("model", "import workbench.sim.loop"),
            ("sim", "def f():\n    from workbench.case.case import Case"),
            ("case", "from workbench.records.record import read_record"),
            ("tune", "from workbench.case.case import Case"),
            ("records", "from workbench.tune import rules"),
            ("records", "from workbench.sim.loop import simulate"),
            ("study", "from workbench.report import plain_text"),
            ("charts", "from workbench import report"),
            ("report", "if TYPE_CHECKING:\n    from workbench.screens.main import App"),
            ("screens", "from workbench.cli import main"),
            ("cli", "from workbench.screens.main import App"),
        ),
    ),
    (
        full_names,
        (
            ("model", "from . import plant"),
            ("model", "from ..units import text"),
            ("study", "from workbench.units import *"),
            ("study", "import importlib\nimportlib.import_module('textual')"),
            ("study", "__import__('textual')"),
        ),
    ),
    (
        declared,
        (
            ("report", "import pandas"),
            ("report", "from rich.table import Table"),
            ("model", "def f():\n    import mpmath"),
        ),
    ),
    (
        ownership,
        (
            *((room, f"import {package}") for package in OWNERS for room in ("study", "model")),
            ("charts", "from textual.strip import Strip"),
            ("screens", "import plotext"),
            ("cli", "import tomllib"),
            ("cli", "from csv import writer"),
            ("report", "import argparse"),
        ),
    ),
    (
        speech,
        (
            ("study", "print('ready')"),
            ("screens", "import sys\nsys.exit(0)"),
            ("report", "from sys import exit"),
            ("case", "def f():\n    exit(2)"),
        ),
    ),
    (
        late_scipy,
        (
            ("tune", "from scipy.optimize import minimize"),
            ("model", "import scipy.linalg"),
            ("records", "def f():\n    from scipy.signal import lfilter"),
            ("records", "def f():\n    from scipy import signal"),
            ("records", "def f():\n    from scipy import stats"),
            ("records", "class A:\n    import scipy.optimize"),
        ),
    ),
    (
        pure_model,
        (
            ("model", "import random"),
            ("model", "from pathlib import Path"),
            ("model", "from numpy.random import default_rng"),
            ("model", "import numpy as np\nnp.random.default_rng(1)"),
            ("tune", "def f():\n    return open('rules.txt')"),
        ),
    ),
)
"""Each rule with sources that break it, as (room, source)."""

GOOD: Final = (
    ("model", "import numpy as np\nfrom workbench.units import text"),
    ("sim", "from workbench.model.transfer import TransferFunction"),
    ("records", "def f():\n    from scipy.optimize import least_squares"),
    ("tune", "if TYPE_CHECKING:\n    from scipy.optimize import OptimizeResult"),
    ("case", "import tomllib\nimport tomli_w\nfrom workbench.sim.scenario import Scenario"),
    ("screens", "from textual.app import App\nfrom rich.style import Style"),
    ("cli", "import argparse\nimport sys\nprint('x')\nsys.exit(main())"),
    ("cli", "def f():\n    from workbench.screens.main import run"),
    ("__main__", "import sys\nfrom workbench.cli import main\nsys.exit(main())"),
)
"""Sources that every rule lets pass."""

# --- the tests -----------------------------------------------------------------------------------


def modules() -> list[Path]:
    return sorted(PACKAGE.rglob("*.py"))


def room_of(path: Path) -> str:
    """The folder under the package, or the module itself where it is not in one."""
    return Path(path.relative_to(PACKAGE).parts[0]).stem


@pytest.mark.parametrize("rule", [rule for rule, _ in RULES], ids=lambda rule: rule.__name__)
def test_every_module_keeps_the_rule(rule: Callable[[Module], Faults]) -> None:
    found = [
        f"{path.relative_to(PACKAGE.parent)}:{line}: {sentence}"
        for path in modules()
        for line, sentence in rule(Module.parse(room_of(path), path.read_text("utf-8")))
    ]

    assert not found, "\n".join(found)


@pytest.mark.parametrize(
    ("rule", "room", "source"),
    [(rule, *bad) for rule, sources in RULES for bad in sources],
    ids=lambda value: value.__name__ if callable(value) else None,
)
def test_each_rule_can_fail(rule: Callable[[Module], Faults], room: str, source: str) -> None:
    found = list(rule(Module.parse(room, source)))

    assert len(found) == 1
    assert len(found[0][1].split()) >= 4, "a fault is told in a sentence"


@pytest.mark.parametrize(("room", "source"), GOOD)
def test_no_rule_complains_about_what_is_allowed(room: str, source: str) -> None:
    module = Module.parse(room, source)

    assert [fault for rule, _ in RULES for fault in rule(module)] == []


def test_every_module_belongs_to_a_room() -> None:
    rooms = {"__init__", *(room for layer in LAYERS for room in layer)}
    strays = [str(path.relative_to(PACKAGE)) for path in modules() if room_of(path) not in rooms]

    assert not strays, f"in no room: {strays}; add the room to LAYERS in tests/test_layers.py"


def test_every_room_exists() -> None:
    present = {room_of(path) for path in modules()}
    missing = [room for layer in LAYERS for room in layer if room not in present]

    assert not missing, f"LAYERS in tests/test_layers.py names rooms that are not there: {missing}"
