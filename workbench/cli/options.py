"""What can be typed after `workbench`: the options, and how a line of words is read.

One declaration of each option feeds the reader, the help and the case: an option that stands for
keys of the case file names them.  A value may begin with a minus, an option is written in full,
and every fault is an `InputError` about the option.
"""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

from workbench.errors import InputError, problem
from workbench.units import TIME_UNITS, harmless, nearest, one_of, read_amount


@dataclass(frozen=True)
class Option:
    """One option: how it is written, what it means, and the case keys that it sets."""

    name: str
    value: str
    """What follows it, as the help shows it; nothing for a switch."""
    meaning: str
    default: str = ""
    keys: tuple[str, ...] = ()
    """Keys of the case file that the value is for; two for a pair written with a colon."""
    count: int = 1
    """How many words follow it."""
    repeats: bool = False
    none_is_absent: bool = False
    """The word `none` leaves the key out of the case."""
    inline: bool = False
    """It tells of the loop, in place of a case file."""

    @property
    def written(self) -> str:
        """The option as it is typed."""
        return f"{self.name} {self.value}".strip()

    def changes(self, word: str) -> dict[str, str]:
        """Case key -> text, for the value `word`.  Raises `InputError`."""
        if self.none_is_absent and word.strip() == "none":
            return {}
        parts = word.split(":") if len(self.keys) == 2 else [word]
        if len(parts) != len(self.keys):
            raise problem(
                f"{harmless(word, 40)!r} is not two numbers with a colon between them",
                f"write {self.written} with a number for each word",
                key=self.name,
            )
        if not all(part.strip() for part in parts):
            raise problem("has an empty value", f"write {self.written}", key=self.name)
        return dict(zip(self.keys, parts, strict=True))


@dataclass(frozen=True)
class Given:
    """One command line, read: the operands and the values of each option, as typed."""

    command: str
    operands: tuple[str, ...] = ()
    options: Mapping[str, tuple[str, ...]] = field(default_factory=dict)
    known: Mapping[str, Option] = field(default_factory=dict)
    """Every option of the command."""
    wants_help: bool = False

    def __contains__(self, name: str) -> bool:
        return name in self.options

    @property
    def file(self) -> str:
        """The case or record that the command was given, or nothing."""
        return self.operands[0] if self.operands else ""

    @property
    def inline(self) -> list[str]:
        """The inline loop options that were given."""
        return [
            name for name, option in self.known.items() if option.inline and name in self.options
        ]

    def word(self, name: str) -> str | None:
        """The value of an option that is given once, or nothing."""
        return self.options[name][0] if name in self.options else None

    def typed_for(self, key: str) -> str:
        """What stands on this line for a key of the case; nothing where the file stands for it."""
        if key == "loop.tag" and self.command == "new":
            return "TAG"
        if key in {word.partition("=")[0].strip() for word in self.options.get("--set", ())}:
            return f"--set {key}"
        name = next((name for name, option in self.known.items() if key in option.keys), "")
        if not name and key.startswith("plant.") and "--plant" in self:
            name = "--plant"
        # Without a file, an option that was left out is still where the fault is mended.
        return name if name in self.options or self.command == "new" or not self.file else ""

    def number(self, name: str, *, above: float = -math.inf) -> float | None:
        """The plain number of an option.  Raises `InputError`."""
        word = self.word(name)
        if word is None:
            return None
        try:
            value = float(word)
        except ValueError:
            value = math.nan
        if not (math.isfinite(value) and value > above):
            comma = ", with a point in place of the comma" if "," in word else ""
            raise problem(
                f"{harmless(word, 40)!r} is not accepted",
                f"give a number{f' above {above:g}' if math.isfinite(above) else ''}{comma}",
                key=name,
            )
        return value

    def whole(self, name: str, least: int, most: int) -> list[int]:
        """The whole numbers of an option.  Raises `InputError`."""
        numbers = []
        for word in self.options.get(name, ()):
            digits = word.strip()
            plain = digits.isascii() and digits.isdigit() and len(digits) <= 12
            if not plain or not least <= int(digits) <= most:
                raise problem(
                    f"{harmless(word, 40)!r} is not accepted",
                    f"give a whole number from {least} to {most}",
                    key=name,
                )
            numbers.append(int(digits))
        return numbers

    def seconds(self, name: str, *, or_zero: bool = False) -> float | None:
        """The time [s] of an option, above 0, or from 0.  Raises `InputError`."""
        word = self.word(name)
        return None if word is None else self._time(name, word, or_zero=or_zero)

    def _time(self, name: str, word: str, *, or_zero: bool = False) -> float:
        try:
            amount = read_amount(word, tuple(TIME_UNITS), "30 s")
        except InputError as fault:
            raise fault.at(key=name) from None
        if amount.value < 0 or (amount.value == 0 and not or_zero):
            least = "below 0" if or_zero else "not above 0"
            raise problem(f"{amount} is {least}", 'write it like "30 s"', key=name)
        return amount.seconds

    def choice(self, name: str, choices: tuple[str, ...]) -> str | None:
        """The word of an option that takes one of a few.  Raises `InputError`."""
        word = self.word(name)
        if word is None or word in choices:
            return word
        meant = nearest(word, choices)
        hint = f"; did you mean {meant}?" if meant else ""
        raise problem(
            f"{harmless(word, 40)!r} is not accepted", f"use {one_of(choices)}{hint}", key=name
        )

    @property
    def tells_gain(self) -> bool:
        """Whether the options give the controller its gain or its band."""
        return "--gain" in self or "--proportional-band" in self

    def changes(self, *, gain: str = "") -> dict[str, str]:
        """Case key -> text, from every option that stands for a key.  Raises `InputError`.

        With `gain`, other options of the controller need neither gain nor band beside them: that
        gain stands in for them.
        """
        self._check_controller(needs_gain=not gain)
        changes: dict[str, str] = {}
        if gain and not self.tells_gain and self._controller_options:
            changes["controller.gain"] = gain
        for name, option in self.known.items():
            word = self.word(name)
            if word is not None and option.keys:
                changes |= option.changes(word)
        return changes

    @property
    def _controller_options(self) -> list[str]:
        return [name for name in self.inline if self.known[name].keys[0].startswith("controller.")]

    def _check_controller(self, needs_gain: bool) -> None:
        """What the options of a controller must keep among themselves, in their own words."""
        if "--gain" in self and "--proportional-band" in self:
            raise problem(
                "is given beside --gain", "keep one of the two", key="--proportional-band"
            )
        others = self._controller_options
        if others and needs_gain and not self.tells_gain:
            raise problem(
                f"is missing beside {others[0]}",
                "give --gain or --proportional-band",
                key="--gain",
            )
        for name in ("--gain", "--proportional-band"):
            word = self.word(name)
            if word is not None and word.strip().startswith("-"):
                raise problem(
                    f"{harmless(word.strip(), 40)} is below 0",
                    "give it without the minus, and say which way the controller acts with"
                    " --action reverse or --action direct",
                    key=name,
                )

    def settings(self) -> dict[str, str]:
        """Case key -> text, from each `--set`.  Raises `InputError`."""
        changes: dict[str, str] = {}
        for word in self.options.get("--set", ()):
            key, equals, text = word.partition("=")
            key = key.strip()
            if not equals or not key:
                raise problem(
                    f"{harmless(word, 40)!r} is not a key and a value",
                    "write it like --set controller.gain=1.3",
                    key="--set",
                )
            if key in changes:
                raise problem(f"{harmless(key, 60)} is set twice", "set it once", key="--set")
            changes[key] = text.strip()
        return changes


@dataclass(frozen=True)
class Grammar:
    """What may follow one command."""

    command: str
    """Nothing for the program itself."""
    does: str
    """One sentence."""
    operand: str
    """What it works on, as the help shows it."""
    options: tuple[Option, ...]
    example: str
    least: int = 0
    """How many operands it needs."""
    most: int = 1
    """How many operands it takes."""

    @property
    def usage(self) -> str:
        """The command on one line, with what it works on."""
        words = ("workbench", self.command, self.operand, "[options]")
        return " ".join(word for word in words if word)

    @property
    def name(self) -> str:
        """The command as it is typed, for messages."""
        return f"workbench {self.command}".strip()

    def read(self, words: Sequence[str]) -> Given:
        """The words after the command, read.  Raises `InputError` with the option as key."""
        known = {option.name: option for option in self.options}
        operands: list[str] = []
        options: dict[str, list[str]] = {}
        rest = list(words)
        while rest:
            word = rest.pop(0)
            if word == "--":
                operands += rest
                break
            if word in ("-h", "--help"):
                return Given(self.command, wants_help=True)
            if not word.startswith("-") or word == "-":
                operands.append(word)
                continue
            option, equals, value = word.partition("=")
            if option not in known:
                raise self._unknown(option, known)
            if option in options and not known[option].repeats:
                raise problem("is given twice", "give it once", key=option)
            values = _values(known[option], [value] if equals else [], rest, known)
            options.setdefault(option, []).extend(values)
        if len(operands) > self.most:
            raise problem(
                f"is one word too many for `{self.name}`",
                f"write `{self.usage}`, with quotes round a value that holds a space",
                key=repr(harmless(operands[self.most], 60)),
            )
        if len(operands) < self.least:
            raise problem("is missing", f"write `{self.usage}`", key=self.operand)
        read = {name: tuple(values) for name, values in options.items()}
        return Given(self.command, tuple(operands), read, known)

    def _unknown(self, word: str, known: Mapping[str, Option]) -> InputError:
        """The fault of an option that is not there; a shortened one is named in full."""
        longer = [name for name in known if word.startswith("--") and name.startswith(word)]
        meant = longer if 0 < len(longer) <= 3 else [nearest(word, list(known))]
        hint = f"did you mean {one_of(meant)}? " if meant[0] else ""
        what = "is shortened" if longer else f"is not an option of `{self.name}`"
        return problem(what, f"{hint}`{self.name} --help` lists the options", key=harmless(word))

    def help(self, more: Sequence[str], width: int) -> list[str]:
        """The lines of the help, wrapped to `width` columns; `more` follows the first sentence."""
        own = [option for option in self.options if not option.inline]
        lines = [f"usage: {self.usage}", "", *textwrap.wrap(self.does, width), *more]
        lines += ["", "Options:", *option_lines([*own, _HELP], width)]
        if any(option.inline for option in self.options):
            title = "The loop, in place of a CASE" if "CASE" in self.operand else "The loop"
            inline = [option for option in self.options if option.inline]
            lines += ["", f"{title}:", *option_lines(inline, width)]
        return [*lines, "", "Example:", f"  {self.example}"]


def _values(
    option: Option, found: list[str], rest: list[str], known: Mapping[str, Option]
) -> list[str]:
    """The words that belong to `option`, taken off `rest`."""
    if not option.value:
        if found:
            raise problem("takes no value", f"write {option.name} alone", key=option.name)
        return [""]
    while len(found) < option.count:
        # A word that is itself an option here is no value; any other word with a minus is one.
        if not rest or rest[0].partition("=")[0] in known or rest[0] == "--help":
            what = "has too few values" if found else "has no value"
            raise problem(what, f"write {option.written}", key=option.name)
        found.append(rest.pop(0))
    return found


def option_lines(options: Iterable[Option], width: int) -> list[str]:
    """Each option with its meaning and its default, for the help."""
    lines = []
    for option in options:
        meaning = option.meaning + (f" (default: {option.default})" if option.default else "")
        head = f"  {option.written}"
        if len(head) > _COLUMN - 2:
            lines.append(head)
            head = ""
        lines += textwrap.wrap(
            meaning,
            width,
            initial_indent=head.ljust(_COLUMN),
            subsequent_indent=" " * _COLUMN,
            break_long_words=False,
            break_on_hyphens=False,
        )
    return lines


_COLUMN: Final = 34
"""Where the meanings begin in the help."""
_HELP: Final = Option("--help", "", "this text")
