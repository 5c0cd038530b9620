"""The words of a refusal: one line with where, what and how to mend it."""

from __future__ import annotations

import inspect

import pytest

from workbench import errors
from workbench.errors import (
    CannotSolve,
    CaseFileError,
    InputError,
    ModelError,
    NotApplicable,
    Problem,
    RecordError,
    WorkbenchError,
    problem,
)


@pytest.mark.parametrize(
    ("found", "text"),
    [
        (Problem("is 0", "give more"), "is 0; give more"),
        (Problem("is 0", ""), "is 0"),
        (Problem("is 0", "give more", "gain"), "gain: is 0; give more"),
        (Problem("is 0", "give more", "gain", 7, "a.toml"), "a.toml:7: gain: is 0; give more"),
        (Problem("is 0", "give more", "gain", None, "a.toml"), "a.toml: gain: is 0; give more"),
        (Problem("is 0", "give more", "", 7, "a.toml"), "a.toml:7: is 0; give more"),
        (Problem("is 0", "give more", "gain", 7), "gain: is 0; give more"),
        (Problem("is 0", "give more", "", 7), "is 0; give more"),
    ],
)
def test_a_problem_says_where_what_and_how_to_mend_it(found: Problem, text: str) -> None:
    assert str(found) == text


def test_several_problems_are_one_line_with_their_number() -> None:
    three = [Problem(f"fault {n}", "mend it", f"key{n}") for n in (1, 2, 3)]
    assert str(InputError(three)) == "key1: fault 1; mend it (and 2 more)"
    listed = "key1: fault 1; mend it (and 2 more; `workbench check` lists them all)"
    assert str(CaseFileError(three)) == listed
    assert str(CaseFileError(three[:1])) == "key1: fault 1; mend it"


def test_problems_are_kept_whole() -> None:
    two = (Problem("a", "b"), Problem("c", "d"))
    assert InputError(iter(two)).problems == two
    assert InputError(two[0]).problems == two[:1]


def test_the_place_is_filled_in_only_where_it_was_missing() -> None:
    fault = ModelError([Problem("a", "b"), Problem("c", "d", "inner", 3, "inner.toml")])
    placed = fault.at(key="outer", path="outer.toml", line=9)
    assert placed.problems == (
        Problem("a", "b", "outer", 9, "outer.toml"),
        Problem("c", "d", "inner", 3, "inner.toml"),
    )
    assert fault.problems[0].key == ""


@pytest.mark.parametrize("kind", [InputError, ModelError, CaseFileError, RecordError])
def test_filling_in_the_place_keeps_the_kind_of_error(kind: type[InputError]) -> None:
    assert type(kind(Problem("a", "b")).at(key="gain")) is kind


def test_problem_makes_an_input_error_with_one_problem() -> None:
    assert problem("is 0", "give more", key="gain").problems == (
        Problem("is 0", "give more", "gain"),
    )


def test_a_rule_outside_its_limits_says_which() -> None:
    refused = NotApplicable("dead time 0 s", limit="wants a dead time", source="a paper")
    assert str(refused) == "dead time 0 s (wants a dead time)"
    assert (refused.what, refused.limit, refused.source) == (
        "dead time 0 s",
        "wants a dead time",
        "a paper",
    )
    assert str(NotApplicable("no lag")) == "no lag"


def test_a_failed_computation_carries_the_best_it_found() -> None:
    failed = CannotSolve("no answer", change="start elsewhere", best=(1.0, 2.0))
    assert str(failed) == "no answer; start elsewhere"
    assert failed.best == (1.0, 2.0)


def test_the_tree_is_the_one_drawn_at_the_top() -> None:
    drawn = inspect.getdoc(errors)
    assert drawn is not None
    for name, kind in inspect.getmembers(errors, inspect.isclass):
        if issubclass(kind, Exception):
            assert f"{name} " in drawn, f"draw {name} in the tree of errors.py"
            assert issubclass(kind, WorkbenchError)
    for kind in (ModelError, CaseFileError, RecordError):
        assert issubclass(kind, InputError)
    for kind_apart in (NotApplicable, CannotSolve):
        assert not issubclass(kind_apart, InputError)
