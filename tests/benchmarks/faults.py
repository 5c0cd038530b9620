"""How many faults of one line the tests catch: planted by the hundred in the rooms that calculate.

`python -m tests.benchmarks.faults [COUNT] [SEED]` works on a copy in a temporary folder.  It runs
the tests there once, to learn which of them run which line and for how long; then each fault is
planted alone, and the tests that run its line are run until one fails: those of the module first,
then those of its room, then the rest, quick ones first.  A fault is caught when a test fails, when
the tests cannot even be loaded, or when they take ten times as long as they should.

What is planted, a fifth of the faults each:

- sign: `+` for `-`, and a minus left out;
- operator: `*` for `/`, `**` for `*`, a comparison turned round, `and` for `or`, `min` for `max`;
- constant: half as much again, 1 for 0;
- off by one: a whole number or an index one higher, `<=` for `<` beside a count;
- dropped term: the second summand of two.

What is not: text, messages, annotations, decorators, default arguments and declarations of
quantities (`quantity`); and what steers effort and tolerance alone: numbers and rows of numbers
that a module keeps under a name in capitals (tables are not left out), grids and counts
(`linspace`, `range` ...), arguments named in `EFFORT`, numbers below 1e-4 or above 1e4.  A fault
there changes how long the work takes or the last digits of it, and no test should notice.  A line
that no test runs is planted like any other.
"""

from __future__ import annotations

import ast
import importlib
import json
import os
import random
import resource
import shutil
import signal
import sys
import tempfile
import time
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import coverage
import pytest

REPOSITORY: Final = Path(__file__).resolve().parents[2]
ROOMS: Final = ("model", "sim", "tune", "records")
TESTS: Final = (
    *(f"tests/{room}" for room in ROOMS),
    "tests/study",
    "tests/test_study.py",
    "tests/test_full.py",
    "workbench",
)
KINDS: Final = ("sign", "operator", "constant", "off by one", "dropped term")
GRIDS: Final = ("linspace", "geomspace", "logspace", "arange", "range")
EFFORT: Final = (
    "most",
    "enough",
    "count",
    "tol",
    "rtol",
    "atol",
    "xtol",
    "ftol",
    "gtol",
    "maxiter",
)
SHOWN: Final = ("text", "time_text", "harmless", "quoted")
"""Make text: how many digits or characters of it are shown is not planted, what is shown is."""
LOADED: Final = ("numpy", "scipy.linalg", "scipy.optimize", "hypothesis", "mpmath", "sympy")
"""Packages of others that the tests need: loaded once, each run is a fork that has them already."""
LONGEST: Final = 90.0
"""Of the tests that are run for one fault [s], as they take without it; one left after that is a
survivor."""
_TIMES_AS_LONG: Final = 10.0
_MEMORY: Final = 3 * 2**30


@dataclass(frozen=True)
class Fault:
    """A change of one line."""

    path: str
    line: int
    kind: str
    old: str
    new: str
    statement: range
    """Lines of the statement that it is in, or of its head where it holds others."""
    loads: bool
    """Whether that is run as the module loads, and not in a function."""


# --- what can be planted -------------------------------------------------------------------------

_ARITHMETIC: Final[dict[type[ast.operator], tuple[str, str, str]]] = {
    ast.Add: ("sign", "+", "-"),
    ast.Sub: ("sign", "-", "+"),
    ast.Mult: ("operator", "*", "/"),
    ast.Div: ("operator", "/", "*"),
    ast.Pow: ("operator", "**", "*"),
}
_COMPARISONS: Final[dict[type[ast.cmpop], tuple[str, str]]] = {
    ast.Lt: ("<", ">="),
    ast.LtE: ("<=", ">"),
    ast.Gt: (">", "<="),
    ast.GtE: (">=", "<"),
    ast.Eq: ("==", "!="),
    ast.NotEq: ("!=", "=="),
}
_EDGES: Final[dict[type[ast.cmpop], tuple[str, str]]] = {
    ast.Lt: ("<", "<="),
    ast.LtE: ("<=", "<"),
    ast.Gt: (">", ">="),
    ast.GtE: (">=", ">"),
}
_OPPOSITE: Final = {"min": "max", "max": "min", "minimum": "maximum", "maximum": "minimum"}


def faults(path: str, source: str) -> Iterator[Fault]:
    """Every fault that can be planted in a module."""
    lines = source.splitlines()
    tree = ast.parse(source)
    for node, within in _numerical(tree, range(1), True):
        for kind, start, end, old, new in _changes(node):
            text = lines[start[0] - 1]
            if start[0] != end[0] or not text.isascii():
                continue
            segment = text[start[1] : end[1]]
            if old is not None and segment.count(old) != 1:
                continue
            changed = new if old is None else segment.replace(old, new)
            planted = text[: start[1]] + changed + text[end[1] :]
            if planted != text:
                yield Fault(path, start[0], kind, text.strip(), planted.strip(), *within)


Place = tuple[int, int]
Change = tuple[str, Place, Place, str | None, str]
"""Kind, where it begins and ends, what is replaced there (all where nothing is said), by what."""


def _numerical(
    node: ast.AST, statement: range, loads: bool
) -> Iterator[tuple[ast.AST, tuple[range, bool]]]:
    """All below a node that is neither text nor declaration nor a dial of effort, with where it is:
    the lines of its statement, and whether they are run as the module loads."""
    for child in ast.iter_child_nodes(node):
        if _left_out(child, node):
            continue
        lines, alone = statement, loads and not isinstance(child, ast.FunctionDef | ast.Lambda)
        if isinstance(child, ast.stmt):
            body = getattr(child, "body", None)
            assert child.end_lineno is not None
            lines = range(child.lineno, body[0].lineno if body else child.end_lineno + 1)
        yield child, (lines, alone)
        yield from _numerical(child, lines, alone)


def _left_out(child: ast.AST, parent: ast.AST) -> bool:
    if isinstance(child, ast.JoinedStr | ast.Raise | ast.Import | ast.ImportFrom | ast.arguments):
        return True
    if isinstance(child, ast.Call) and _called(child) in ("quantity", "Note", "problem", *GRIDS):
        return True
    if isinstance(child, ast.keyword) and child.arg in (*EFFORT, "axis"):
        return True
    if isinstance(child, ast.Constant) and isinstance(parent, ast.Call):
        return _called(parent) in SHOWN
    if isinstance(parent, ast.AnnAssign) and child is parent.annotation:
        return True
    if isinstance(parent, ast.FunctionDef) and (
        child in parent.decorator_list or child is parent.returns
    ):
        return True
    if isinstance(parent, ast.Module) and isinstance(child, ast.Assign | ast.AnnAssign):
        target = child.targets[0] if isinstance(child, ast.Assign) else child.target
        value = child.value
        # A row of numbers tells where to look; a table by name is what a rule is made of.
        parts = value.elts if isinstance(value, ast.Tuple) else [value]
        numbers = all(isinstance(p, ast.Constant | ast.UnaryOp | ast.BinOp) for p in parts)
        return isinstance(target, ast.Name) and target.id.isupper() and numbers
    return False


def _called(node: ast.Call) -> str:
    name = node.func
    return name.id if isinstance(name, ast.Name) else getattr(name, "attr", "")


def _changes(node: ast.AST) -> Iterator[Change]:
    if isinstance(node, ast.BinOp):
        yield from _of_sum_or_product(node)
    elif isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub):
        yield "sign", _start(node), _end(node), None, f"({ast.unparse(node.operand)})"
    elif isinstance(node, ast.Compare):
        yield from _of_comparison(node)
    elif isinstance(node, ast.BoolOp):
        old, new = ("and", "or") if isinstance(node.op, ast.And) else ("or", "and")
        yield "operator", _end(node.values[0]), _start(node.values[1]), old, new
    elif isinstance(node, ast.Call) and _called(node) in _OPPOSITE:
        old = _called(node)
        yield "operator", _start(node.func), _end(node.func), old, _OPPOSITE[old]
    elif isinstance(node, ast.Constant):
        yield from _of_number(node)


def _of_sum_or_product(node: ast.BinOp) -> Iterator[Change]:
    sides = (node.left, node.right)
    joined = (ast.Tuple, ast.List, ast.JoinedStr)
    if any(isinstance(s, joined) or (isinstance(s, ast.Constant) and _text(s)) for s in sides):
        return
    if type(node.op) in _ARITHMETIC:
        kind, old, new = _ARITHMETIC[type(node.op)]
        yield kind, _end(node.left), _start(node.right), old, new
    if isinstance(node.op, ast.Add | ast.Sub):
        yield "dropped term", _start(node), _end(node), None, f"({ast.unparse(node.left)})"


def _of_comparison(node: ast.Compare) -> Iterator[Change]:
    left = node.left
    for operator, right in zip(node.ops, node.comparators, strict=True):
        if type(operator) in _COMPARISONS:
            yield "operator", _end(left), _start(right), *_COMPARISONS[type(operator)]
        if type(operator) in _EDGES and (_whole(left) or _whole(right)):
            yield "off by one", _end(left), _start(right), *_EDGES[type(operator)]
        left = right


def _of_number(node: ast.Constant) -> Iterator[Change]:
    value = node.value
    if isinstance(value, bool) or not isinstance(value, int | float):
        return
    if isinstance(value, int):
        yield "off by one", _start(node), _end(node), None, str(value + 1)
    elif value == 0.0 or 1e-4 <= abs(value) <= 1e4:
        yield "constant", _start(node), _end(node), None, repr(1.5 * value or 1.0)


def _text(node: ast.Constant) -> bool:
    return isinstance(node.value, str | bytes)


def _whole(node: ast.expr) -> bool:
    """Whether it is plainly a count; of other numbers the edge itself is met by chance alone."""
    if isinstance(node, ast.Call):
        return _called(node) == "len"
    return isinstance(node, ast.Constant) and type(node.value) is int and node.value != 0


def _start(node: ast.expr) -> Place:
    return node.lineno, node.col_offset


def _end(node: ast.expr) -> Place:
    assert node.end_lineno is not None
    assert node.end_col_offset is not None
    return node.end_lineno, node.end_col_offset


# --- which tests run what ------------------------------------------------------------------------


class _Timed:
    """Keeps what each test runs, and for how long."""

    def __init__(self, watch: coverage.Coverage) -> None:
        self.watch = watch
        self.seconds: dict[str, float] = {}
        self.failed: list[str] = []

    def pytest_runtest_logstart(self, nodeid: str) -> None:
        self.watch.switch_context(nodeid)

    def pytest_runtest_logreport(self, report: pytest.TestReport) -> None:
        self.seconds[report.nodeid] = self.seconds.get(report.nodeid, 0.0) + report.duration
        if report.failed:
            self.failed.append(report.nodeid)


class _Picked:
    """Runs the tests named and no others, in the order in which they are named."""

    def __init__(self, names: Sequence[str]) -> None:
        self.order = {name: i for i, name in enumerate(names)}

    def pytest_collection_modifyitems(self, items: list[pytest.Item]) -> None:
        items[:] = sorted(
            (item for item in items if item.nodeid in self.order),
            key=lambda item: self.order[item.nodeid],
        )


def _alone(work: Callable[[], int], limit: float, folder: Path) -> int | None:
    """What the work gives in a process of its own, there; None where it takes too long."""
    child = os.fork()
    if child == 0:
        status = 99
        try:
            os.setsid()
            os.chdir(folder)
            sys.path[:] = [str(folder), *(p for p in sys.path if p not in ("", str(REPOSITORY)))]
            for name in [n for n in sys.modules if n.partition(".")[0] in ("tests", "workbench")]:
                del sys.modules[name]
            sys.dont_write_bytecode = True
            os.environ["PYTHONPATH"] = str(folder)
            quiet = os.open(folder / "said", os.O_WRONLY | os.O_CREAT | os.O_TRUNC)
            os.dup2(quiet, 1)
            os.dup2(quiet, 2)
            resource.setrlimit(resource.RLIMIT_AS, (_MEMORY, _MEMORY))
            status = work()
        finally:
            os._exit(status)
    until = time.monotonic() + limit
    while time.monotonic() < until:
        ended, status = os.waitpid(child, os.WNOHANG)
        if ended:
            return os.waitstatus_to_exitcode(status)
        time.sleep(0.02)
    os.killpg(child, signal.SIGKILL)
    os.waitpid(child, 0)
    return None


_PLAIN: Final = (
    *("-x", "-q", "-n", "0", "-p", "no:cacheprovider", "--no-header", "--tb=line"),
    # They are loaded already, in the process from which each run is a fork.
    *("-W", "ignore::pytest.PytestAssertRewriteWarning"),
)


@dataclass(frozen=True)
class Reach:
    """Which tests run which line, and how long each takes."""

    seconds: dict[str, float]
    lines: dict[str, dict[int, tuple[str, ...]]]

    def tests(self, fault: Fault) -> list[str]:
        """Those that run the line, in the order in which to try them, up to the longest time."""
        of_file = self.lines.get(fault.path, {})
        names = set(of_file.get(fault.line, ()))
        if not names:
            names = {name for line in fault.statement for name in of_file.get(line, ())}
        if not names and fault.loads:
            names = {name for found in of_file.values() for name in found}
        room, module = fault.path.removesuffix(".py").split("/")[1:3]

        def order(name: str) -> tuple[int, float]:
            own = name.startswith((f"tests/{room}/test_{module}.py", fault.path))
            near = name.startswith((f"tests/{room}/", f"workbench/{room}/"))
            return 0 if own else 1 if near else 2, self.seconds[name]

        chosen: list[str] = []
        total = 0.0
        for name in sorted(names & set(self.seconds), key=order):
            total += self.seconds[name] + 0.005
            if chosen and total > LONGEST:
                break
            chosen.append(name)
        return chosen


def learn(folder: Path) -> Reach:
    """Run all the tests once, in the copy."""
    kept, database = folder / "seconds.json", folder / ".coverage"

    def work() -> int:
        watch = coverage.Coverage(
            str(database), config_file=False, source=[str(folder / "workbench")]
        )
        watch.start()
        timed = _Timed(watch)
        status = pytest.main([*_PLAIN[1:], *TESTS], plugins=[timed])
        watch.stop()
        watch.save()
        kept.write_text(json.dumps([timed.seconds, timed.failed]), "utf-8")
        return int(status)

    if _alone(work, 3600.0, folder) is None or not kept.exists():
        said = (folder / "said").read_text("utf-8")[-2000:]
        raise SystemExit(f"the tests do not run as they are:\n{said}")
    return reach(folder, kept, database)


def reach(folder: Path, kept: Path, database: Path) -> Reach:
    """What such a run found; tests that fail without a fault are left out."""
    seconds, failed = json.loads(kept.read_text("utf-8"))
    data = coverage.CoverageData(str(database))
    data.read()
    lines = {}
    for name in data.measured_files():
        path = Path(name).relative_to(folder).as_posix()
        lines[path] = {
            line: tuple(context for context in contexts if context)
            for line, contexts in data.contexts_by_lineno(name).items()
        }
    return Reach({k: v for k, v in seconds.items() if k not in failed}, lines)


# --- planting them -------------------------------------------------------------------------------


def draw(folder: Path, count: int, seed: int) -> list[Fault]:
    """Faults at random, a fifth of each kind."""
    by_kind: dict[str, list[Fault]] = {kind: [] for kind in KINDS}
    for room in ROOMS:
        for path in sorted((folder / "workbench" / room).glob("*.py")):
            name = path.relative_to(folder).as_posix()
            for fault in faults(name, path.read_text("utf-8")):
                by_kind[fault.kind].append(fault)
    choice = random.Random(seed)
    found = []
    for i in range(count):
        kind = by_kind[KINDS[i % len(KINDS)]]
        found.append(kind.pop(choice.randrange(len(kind))))
    print(
        f"{sum(map(len, by_kind.values())) + count} faults can be planted; "
        f"{count} of them are, by seed {seed}"
    )
    return found


def caught(folder: Path, reached: Reach, fault: Fault) -> str:
    """How a fault was found out, or nothing."""
    names = reached.tests(fault)
    if not names:
        return ""
    path = folder / fault.path
    sound, times = path.read_text("utf-8"), path.stat()
    lines = sound.splitlines(keepends=True)
    lines[fault.line - 1] = lines[fault.line - 1].replace(fault.old, fault.new)
    path.write_text("".join(lines), "utf-8")
    files = list(dict.fromkeys(name.partition("::")[0] for name in names))

    def work() -> int:
        return int(pytest.main([*_PLAIN, *files], plugins=[_Picked(names)]))

    try:
        seconds = sum(reached.seconds[name] for name in names)
        status = _alone(work, 30.0 + _TIMES_AS_LONG * seconds, folder)
    finally:
        path.write_text(sound, "utf-8")
        os.utime(path, ns=(times.st_atime_ns, times.st_mtime_ns))
    if status in (pytest.ExitCode.USAGE_ERROR, pytest.ExitCode.NO_TESTS_COLLECTED):
        raise SystemExit(f"{fault.path}: its tests cannot be found any more")
    if status is None:
        return "took too long"
    return "" if status == 0 else "failed" if status == 1 else f"ended with {status}"


def main(words: Sequence[str]) -> int:
    """Plant them, and print each that was not caught."""
    count, seed = (int(word) for word in (*words, *("200", "1")[len(words) :]))
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    for name in LOADED:
        importlib.import_module(name)
    with tempfile.TemporaryDirectory(prefix="workbench-faults-") as made:
        folder = Path(made)
        for name in ("workbench", "tests", "cases"):
            shutil.copytree(REPOSITORY / name, folder / name)
        for name in ("pyproject.toml", "README.md", "DEVELOPERS.md"):
            shutil.copy2(REPOSITORY / name, folder / name)
        reached = learn(folder)
        return judge(folder, reached, draw(folder, count, seed))


def judge(folder: Path, reached: Reach, planted: Sequence[Fault]) -> int:
    """One line for each fault, and the share that was caught; 1 where it is below 94 %."""
    tally = {kind: [0, 0] for kind in KINDS}
    left = []
    for fault in planted:
        how = caught(folder, reached, fault)
        tally[fault.kind][0] += bool(how)
        tally[fault.kind][1] += 1
        print(f"{fault.path}:{fault.line} {fault.kind}: {how or 'SURVIVED'}", flush=True)
        if not how:
            left.append(fault)
    for fault in left:
        print(f"\n{fault.path}:{fault.line} {fault.kind}\n  - {fault.old}\n  + {fault.new}")
    print()
    for kind, (found, of) in tally.items():
        print(f"{kind:14} {found:4} of {of:4} caught")
    found = len(planted) - len(left)
    print(f"{'all':14} {found:4} of {len(planted):4} caught, {100 * found / len(planted):.1f} %")
    return int(found < 0.94 * len(planted))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
