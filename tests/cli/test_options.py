"""How a line of words is read: values with a minus, options in full, every fault by its option."""

from __future__ import annotations

import pytest

from workbench.cli.options import Given
from workbench.cli.table import COMMANDS, INLINE, SCREEN
from workbench.errors import InputError


def read(command: str, *words: str) -> Given:
    return COMMANDS[command].read(words)


def fault(command: str, *words: str) -> str:
    with pytest.raises(InputError) as caught:
        given = read(command, *words)
        given.changes()
        given.settings()
    assert "\n" not in str(caught.value)
    return str(caught.value)


@pytest.mark.parametrize("joined", [False, True])
@pytest.mark.parametrize(
    ("option", "value"),
    [
        ("--setpoint-step", "-2"),
        ("--plant", "-2/(3 s+1)"),
        ("--plant", "--2/(3 s+1)"),
        ("--pv-range", "-50:150"),
        ("--start", "-5:-3"),
        ("--load-step", "-.5"),
        ("--integral", "32 s"),
        ("--plant", "a=b"),
        ("--trend", "-out.csv"),
    ],
)
def test_a_value_is_taken_whole_with_a_space_or_an_equals_sign(
    option: str, value: str, joined: bool
) -> None:
    words = [f"{option}={value}"] if joined else [option, value]
    given = read("predict", "case.toml", *words, "--json")
    assert given.word(option) == value
    assert given.operands == ("case.toml",)
    assert "--json" in given


def test_the_case_may_stand_before_between_or_after_the_options() -> None:
    for words in (
        ("c.toml", "--seed", "1", "--json"),
        ("--seed", "1", "c.toml", "--json"),
        ("--json", "--seed=1", "c.toml"),
        ("--json", "--seed=1", "--", "c.toml"),
    ):
        given = read("predict", *words)
        assert (given.file, given.word("--seed"), "--json" in given) == ("c.toml", "1", True)


def test_after_two_dashes_a_word_with_a_dash_is_an_operand() -> None:
    assert read("check", "a", "--", "-b.toml").operands == ("a", "-b.toml")


def test_set_may_be_repeated_and_keeps_what_follows_the_first_equals_sign() -> None:
    given = read("assess", "c.toml", "--set", "controller.gain=1.3", "--set=plant.formula= 1=2 ")
    assert given.settings() == {"controller.gain": "1.3", "plant.formula": "1=2"}


def test_between_takes_two_words() -> None:
    for words in (("--between", "1", "2"), ("--between=1", "2")):
        assert read("history", "c.toml", *words).whole("--between", 1, 5) == [1, 2]


def test_options_become_keys_of_the_case() -> None:
    given = read(
        "predict",
        *("--plant", "-2/(3 s+1)"),
        *("--gain", "1"),
        *("--scan", "none"),
        *("--pv-range", "-50:150"),
        *("--start", "20:30"),
        *("--setpoint-step", "-2"),
    )
    assert given.changes() == {
        "scenario.setpoint_step": "-2",
        "plant": "-2/(3 s+1)",
        "controller.gain": "1",
        "pv.low": "-50",
        "pv.high": "150",
        "pv.start": "20",
        "op.start": "30",
    }


@pytest.mark.parametrize(
    ("command", "words", "start", "names"),
    [
        ("assess", ["--ga", "1"], "--ga: is shortened", "--gain"),
        ("assess", ["--gian", "1"], "--gian: is not an option", "--gain"),
        ("assess", ["-x"], "-x: is not an option", "--help"),
        ("assess", ["--gain"], "--gain: has no value", "--gain G"),
        ("assess", ["--gain", "--integral", "3 s"], "--gain: has no value", "--gain G"),
        ("assess", ["--gain", "--integral=3 s"], "--gain: has no value", "--gain G"),
        ("assess", ["--gain", "1", "--gain=2"], "--gain: is given twice", "once"),
        ("assess", ["--json=yes"], "--json: takes no value", "--json alone"),
        ("assess", ["a", "b"], "'b': is one word too many", "quotes"),
        ("history", [], "CASE: is missing", "workbench history CASE"),
        ("history", ["c", "--between", "1"], "--between: has too few values", "--between A B"),
        ("fit", [], "RECORD.csv...: is missing", "workbench fit RECORD.csv..."),
        (
            "assess",
            ["c", "--set", "gain"],
            "--set: 'gain' is not a key and a value",
            "--set controller.gain=1.3",
        ),
        (
            "assess",
            ["c", "--set", "=1"],
            "--set: '=1' is not a key and a value",
            "--set controller.gain=1.3",
        ),
        ("assess", ["c", "--set", "a.b=1", "--set", "a.b=2"], "--set: a.b is set twice", "once"),
        ("assess", ["--pv-range", "5"], "--pv-range: '5' is not two numbers", "LOW:HIGH"),
        ("assess", ["--pv-range", "1:2:3"], "--pv-range: '1:2:3' is not two", "LOW:HIGH"),
        ("assess", ["--start", "5:"], "--start: has an empty value", "PV:OP"),
        ("assess", ["--plant", ""], "--plant: has an empty value", "PLANT"),
        (
            "assess",
            ["--gain", "1", "--proportional-band", "50"],
            "--proportional-band: is given beside --gain",
            "keep one",
        ),
        ("assess", ["--integral", "3 s"], "--gain: is missing beside --integral", "band"),
        ("assess", ["--gain", "-1"], "--gain: -1 is below 0", "--action"),
    ],
)
def test_a_fault_names_the_option_and_how_to_mend_it(
    command: str, words: list[str], start: str, names: str
) -> None:
    said = fault(command, *words)
    assert said.startswith(start)
    assert names in said.partition("; ")[2]


@pytest.mark.parametrize("word", ["x", "1", "0.9", "nan", "inf", "1,6", ""])
def test_a_plain_number_must_be_one_and_above_its_limit(word: str) -> None:
    with pytest.raises(InputError, match="--max-sensitivity: .*; give a number above 1"):
        read("propose", "--max-sensitivity", word).number("--max-sensitivity", above=1.0)


@pytest.mark.parametrize("word", ["x", "-1", "0", "6", "1.5", "1" * 5000, "²"])
def test_a_whole_number_must_be_one_within_its_limits(word: str) -> None:
    with pytest.raises(InputError, match="--between: .*; give a whole number from 1 to 5"):
        read("history", "c", "--between", "1", word).whole("--between", 1, 5)


@pytest.mark.parametrize("word", ["30", "30 hours", "0 s", "-3 s", "1,5 s", "s"])
def test_a_time_must_have_its_unit_and_be_above_zero(word: str) -> None:
    with pytest.raises(InputError, match="--closed-loop-time: "):
        read("propose", "--closed-loop-time", word).seconds("--closed-loop-time")


def test_a_time_is_read_in_its_unit() -> None:
    # Exact: 1.5 min is 90 s.
    assert read("propose", "--closed-loop-time", "1.5 min").seconds("--closed-loop-time") == 90.0


def test_every_option_of_a_command_has_a_name_of_its_own() -> None:
    for grammar in (SCREEN, *COMMANDS.values()):
        names = [option.name for option in grammar.options]
        assert len(names) == len(set(names))
        assert all(name.startswith("--") for name in names)


@pytest.mark.parametrize("width", [40, 80, 160])
@pytest.mark.parametrize("command", list(COMMANDS))
def test_help_names_every_option_within_the_width(command: str, width: int) -> None:
    grammar = COMMANDS[command]
    lines = grammar.help((), width)
    shown = "\n".join(lines)
    assert all(option.name in shown for option in grammar.options)
    assert shown.isascii()
    # The example is for copying, so it stays on one line.
    assert all(len(line) <= max(width, 80) for line in lines if grammar.example not in line)


def test_a_loop_can_be_given_to_each_command_that_works_on_one() -> None:
    for command in ("assess", "predict", "propose", "new"):
        assert set(INLINE) <= set(COMMANDS[command].options)


def test_the_help_tells_the_limit_that_is_used() -> None:
    from workbench.study import Wish

    told = next(o.default for o in COMMANDS["propose"].options if o.name == "--max-sensitivity")
    assert float(told) == Wish.max_sensitivity
