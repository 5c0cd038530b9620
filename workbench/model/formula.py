"""Text to transfer function and back.

A formula is ordinary mathematics in s: decimal numbers, + - * / ^ (or **) with whole powers,
brackets, implied multiplication, and dead time as exp(-6 s) or e^(-6 s).  It holds no names and no
calls, so nothing in it can run; every refusal names its column.
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Final, Literal, TypeVar, cast

from workbench.errors import ModelError, Problem
from workbench.model.transfer import Delayed, Factored, TransferFunction
from workbench.units import plain

LONGEST: Final = 10_000
"""Characters in one formula."""
DEEPEST: Final = 200
"""Brackets inside brackets."""
HIGHEST_ORDER: Final = 60
"""Degree of a numerator or denominator."""

_TOKEN = re.compile(
    r"(?P<number>(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?)"
    r"|(?P<exp>exp\b|e(?=\s*(?:\^|\*\*)))"
    r"|(?P<s>s(?![A-Za-z]))"
    r"|(?P<operator>\*\*|[-+*/^()])",
    re.ASCII,
)


Kind = Literal["number", "exp", "s", "operator", "bracket", "dead time", "end"]


@dataclass(frozen=True)
class _Token:
    kind: Kind
    text: str
    column: int
    value: TransferFunction | None = None
    """Of a number, s, a finished bracket or a dead time."""


def _fault(column: int, what: str, mend: str) -> ModelError:
    return ModelError(Problem(f"column {column}: {what}", mend))


def _tokens(text: str) -> list[_Token]:
    found, at = [], 0
    while at < len(text):
        if text[at] in " \t":
            at += 1
            continue
        match = _TOKEN.match(text, at)
        if match is None:
            raise _unknown(text, at)
        found.append(_Token(cast(Kind, match.lastgroup), match[0], at + 1, _atom(match, at + 1)))
        at = match.end()
    found.append(_Token("end", "", len(text) + 1))
    return found


def _atom(match: re.Match[str], column: int) -> TransferFunction | None:
    """The value of a token that has one of its own."""
    if match.lastgroup == "s":
        return TransferFunction.ratio((1.0, 0.0))
    if match.lastgroup != "number":
        return None
    number = float(match[0])
    if not math.isfinite(number):
        raise _fault(column, f"{match[0][:20]} is not finite", "give a smaller number")
    return TransferFunction.constant(number)


def _unknown(text: str, at: int) -> ModelError:
    """What to say of a character that begins no token."""
    if text[at] == ",":
        return _fault(at + 1, "a decimal comma", "write numbers with a point, like 0.5")
    word = re.match(r"[^\W\d_]\w*", text[at:])
    if word:
        name = word[0][:20]
        return _fault(
            at + 1,
            f"the name {name!r} is not known",
            "use s, numbers, + - * / ^, brackets and exp(-6 s)",
        )
    return _fault(
        at + 1,
        f"the character {text[at]!a} has no meaning here",
        "use s, numbers, + - * / ^, brackets and exp(-6 s)",
    )


@dataclass
class _Group:
    """What stands between two brackets: its tokens, with every inner bracket already a value."""

    opened: _Token
    tokens: list[_Token]
    at: int = 0

    @property
    def next(self) -> _Token:
        return self.tokens[self.at]

    def take(self) -> _Token:
        token = self.tokens[self.at]
        self.at += 1
        return token

    def next_is(self, *texts: str) -> bool:
        return self.next.kind == "operator" and self.next.text in texts

    def value(self, end: _Token) -> TransferFunction:
        self.tokens.append(_Token("end", end.text, end.column))
        total = self.term()
        while self.next_is("+", "-"):
            sign = self.take()
            term = self.term()
            total = _checked(total.__add__ if sign.text == "+" else total.__sub__, term, sign)
        if self.next.kind != "end":
            raise _fault(
                self.next.column,
                f"{self.next.text!r} is not expected here",
                "complete the formula, or remove it",
            )
        return total

    def term(self) -> TransferFunction:
        value = self.power()
        divided = False
        while True:
            token = self.next
            if self.next_is("*", "/"):
                self.take()
                divided = token.text == "/"
                right = self.power()
                value = _divided(value, right, token) if divided else _times(value, right, token)
            elif token.kind not in ("number", "s", "bracket", "dead time"):
                return value
            elif token.kind == "number" and self.tokens[self.at - 1].kind == "number":
                raise _fault(token.column, "two numbers side by side", "write the * between them")
            elif divided and token.kind != "dead time":
                raise _fault(
                    token.column,
                    "a product right after a division can be read two ways",
                    "put the denominator in brackets, like 1/(2 s), or write the *",
                )
            else:
                value = _times(value, self.power(), token)

    def power(self) -> TransferFunction:
        negative = False
        while self.next_is("+", "-"):
            negative ^= self.take().text == "-"
        value = self.single()
        if self.next_is("^", "**"):
            self.take()
            value = self.raised(value)
        return -value if negative else value

    def raised(self, value: TransferFunction) -> TransferFunction:
        token = self.take()
        if token.kind != "number" or not token.text.isdigit():
            raise _fault(
                token.column, "the power is not a whole number", "use a power like ^2 or ^3"
            )
        order = max(1, *(t.polynomial.degree for t in (*value.numerator, *value.denominator)))
        if len(token.text) > 3 or int(token.text) * order > HIGHEST_ORDER:
            raise _too_high(token)
        if self.next_is("^", "**"):
            raise _fault(self.next.column, "a power of a power", "put the inner one in brackets")
        raised = TransferFunction.constant(1.0)
        for bit in f"{int(token.text):b}":
            # By squaring, each step checked: a sum of dead times grows out of hand within a few.
            raised = _times(raised, raised, token)
            raised = _times(raised, value, token) if bit == "1" else raised
        return raised

    def single(self) -> TransferFunction:
        token = self.take()
        if token.value is not None:
            return token.value
        if token.kind == "end":
            what = (
                "the formula ends too early" if not token.text else "nothing stands before this )"
            )
            raise _fault(token.column, what, "complete it")
        if token.kind == "exp":
            raise _fault(
                token.column, "exp and e^ need a bracket", "write dead time like exp(-6 s)"
            )
        raise _fault(
            token.column,
            f"{token.text!r} stands where a number, s or ( belongs",
            "add what is missing, or remove it",
        )


T = TypeVar("T")


def _checked(
    operation: Callable[[T], TransferFunction], operand: T, at: _Token
) -> TransferFunction:
    """The result of one step of algebra, refused with its column where it grows out of hand."""
    try:
        value = operation(operand)
    except ModelError as fault:
        raise _fault(at.column, fault.problems[0].what, fault.problems[0].mend) from None
    except OverflowError:
        raise _fault(
            at.column, "a number that is not finite", "bring the numbers closer together"
        ) from None
    terms = (*value.numerator, *value.denominator)
    if any(t.polynomial.degree > HIGHEST_ORDER for t in terms) or len(terms) > HIGHEST_ORDER:
        raise _too_high(at)
    return value


def _times(left: TransferFunction, right: TransferFunction, at: _Token) -> TransferFunction:
    return _checked(left.__mul__, right, at)


def _divided(left: TransferFunction, right: TransferFunction, at: _Token) -> TransferFunction:
    if not right.numerator:
        raise _fault(at.column, "division by zero", "give a denominator that is not 0")
    if right.delays != (0.0,):
        raise _fault(
            at.column,
            "a dead time in a denominator",
            "a formula is one path without feedback: keep the dead time in the numerator",
        )
    return _checked(left.__truediv__, right, at)


def _too_high(at: _Token) -> ModelError:
    return _fault(at.column, f"an order above {HIGHEST_ORDER}", "use fewer lags or lower powers")


def _dead_time(exponent: TransferFunction, column: int) -> float:
    """L of an exponent that is -L s and nothing else."""
    if not exponent.numerator:
        return 0.0
    below, above = exponent.denominator, exponent.numerator
    if (
        exponent.delays != (0.0,)
        or below[0].polynomial.factors
        or above[0].polynomial.factors != (((1.0, 0.0), 1),)
    ):
        raise _fault(
            column,
            "the exponent is not a negative number times s",
            "write dead time like exp(-6 s)",
        )
    factor = above[0].polynomial.gain / below[0].polynomial.gain
    if factor > 0:
        raise _fault(
            column, "a time advance: the exponent is positive", "write exp(-6 s) for dead time"
        )
    return -factor


def _close(group: _Group, closing: _Token, outer: _Group) -> None:
    """Put the value of a finished bracket into the group around it."""
    value = group.value(closing)
    before = outer.tokens[-2:]
    if before and before[-1].kind == "exp" and before[-1].text == "exp":
        kept = 1
    elif len(before) == 2 and before[0].kind == "exp" and before[1].text in ("^", "**"):
        kept = 2
    else:
        outer.tokens.append(_Token("bracket", "(", group.opened.column, value))
        return
    start = outer.tokens[-kept]
    del outer.tokens[-kept:]
    delay = TransferFunction.ratio((1.0,), dead_time=_dead_time(value, group.opened.column))
    outer.tokens.append(_Token("dead time", start.text, start.column, delay))


def _read(text: str) -> TransferFunction:
    """The formula's value; brackets are worked out from the inside, so that no depth overflows."""
    tokens = _tokens(text)
    groups = [_Group(tokens[-1], [])]
    for token in tokens[:-1]:
        if token.text == "(":
            if len(groups) > DEEPEST:
                raise _fault(
                    token.column, f"more than {DEEPEST} nested brackets", "use fewer brackets"
                )
            groups.append(_Group(token, []))
        elif token.text == ")":
            if len(groups) == 1:
                raise _fault(token.column, "a ) without its (", "remove it, or add the (")
            group = groups.pop()
            _close(group, token, groups[-1])
        else:
            groups[-1].tokens.append(token)
    if len(groups) > 1:
        raise _fault(groups[-1].opened.column, "this bracket is not closed", "add the missing )")
    return groups[0].value(tokens[-1])


@lru_cache(maxsize=128)
def parse_formula(text: str, time_unit: float = 1.0) -> TransferFunction:
    """The transfer function that a formula writes.

    Parameters
    ----------
    text
        Ordinary mathematics in s; see the module.
    time_unit
        Seconds in the unit of time that the formula's s is per: 60 for minutes.

    Returns
    -------
    TransferFunction
        With s in 1/s.

    Raises
    ------
    ModelError
        With the column and what would mend it.

    Examples
    --------
    >>> parse_formula("2 exp(-6 s)/((3 s + 1)(5 s + 1))").gain().value
    2.0
    >>> parse_formula("1/(2 s + 1) exp(-1 s)", time_unit=60).dead_time
    60.0
    """
    if len(text) > LONGEST:
        raise _fault(LONGEST + 1, f"more than {LONGEST} characters", "shorten the formula")
    value = _read(text)
    if not value.numerator:
        raise _fault(1, "the formula is 0", "give a plant that answers to its input")
    if not value.is_proper:
        raise _fault(
            1, "an improper plant: more leads than lags", "give at least as many lags as leads"
        )
    whole = _Token("bracket", text, 1)
    return _checked(value.with_time_unit, time_unit, whole)


def _polynomial_text(polynomial: Factored) -> str:
    parts = []
    if polynomial.gain != 1.0 or not polynomial.factors:
        parts.append(plain(polynomial.gain))
    for factor, power in polynomial.factors:
        raised = f"^{power}" if power > 1 else ""
        parts.append(f"s{raised}" if factor == (1.0, 0.0) else f"({_sum_text(factor)}){raised}")
    return " ".join(parts) or "1"


def _sum_text(factor: tuple[float, ...]) -> str:
    degree = len(factor) - 1
    text = ""
    for i, c in enumerate(factor):
        if not c:
            continue
        power = degree - i
        body = plain(abs(c)) if power == 0 or abs(c) != 1.0 else ""
        unit = "" if power == 0 else "s" if power == 1 else f"s^{power}"
        piece = f"{body} {unit}".strip()
        sign = "-" if c < 0 else "+"
        text += f" {sign} {piece}" if text else (f"-{piece}" if c < 0 else piece)
    return text


def _term_text(term: Delayed) -> str:
    text = _polynomial_text(term.polynomial)
    if not term.dead_time:
        return text
    return f"{'' if text == '1' else text + ' '}exp(-{plain(term.dead_time)} s)"


def format_formula(plant: TransferFunction) -> str:
    """The formula of a transfer function [s in 1/s]; `parse_formula` reads it back.

    >>> format_formula(parse_formula("2 exp(-6 s)/((3 s + 1)(5 s + 1))"))
    '2 exp(-6 s)/((3 s + 1) (5 s + 1))'
    """
    terms = [_term_text(t) for t in plant.numerator] or ["0"]
    above = terms[0] if len(terms) == 1 else "(" + " + ".join(terms) + ")"
    below = " + ".join(_term_text(t) for t in plant.denominator)
    if below == "1":
        return above
    one_factor = len(plant.denominator) == 1 and plant.denominator[0].polynomial.gain == 1.0
    alone = one_factor and " (" not in below and below[-1] in "s)"
    return f"{above}/{below}" if alone else f"{above}/({below})"
