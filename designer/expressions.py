"""Rate and signal expressions, parsed by a grammar of our own and never evaluated as Python.

    sum      = product (("+" | "-") product)*
    product  = sign (("*" | "/") sign)*
    sign     = "-" sign | power
    power    = atom ("^" sign)?                     (so 2^-1 and -a^2 = -(a^2) read as in algebra)
    atom     = number | "[" species "]" "_0"? | function "(" sum ")" | name | "(" sum ")"

``evaluate`` folds an expression over any kind of number (floats, arrays, truncated polynomials), so
an expression is written once and used for values, for structure and for derivatives.
"""

from __future__ import annotations

import math
import re
from collections import defaultdict
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

FUNCTIONS = ("exp", "log", "sqrt")
LONGEST = 2000  # characters; nobody writes a longer rate law
MOST = 400  # names, numbers and marks; a longer chain would nest deeper than Python goes
DEEPEST = 60  # brackets within brackets


class ExpressionError(ValueError):
    """The text is no expression of this grammar; ``position`` counts characters from 0."""

    def __init__(self, message: str, position: int) -> None:
        super().__init__(message)
        self.position = position


@dataclass(frozen=True)
class Number:
    value: float


@dataclass(frozen=True)
class Name:
    """A constant, a condition that is no species, or ``time``, ``temperature``, ``rate``."""

    name: str


@dataclass(frozen=True)
class Species:
    """[X], the concentration now, or [X]_0, the concentration at the start."""

    name: str
    initial: bool = False


@dataclass(frozen=True)
class Negative:
    operand: Node


@dataclass(frozen=True)
class Binary:
    operator: str  # one of + - * / ^
    left: Node
    right: Node


@dataclass(frozen=True)
class Call:
    function: str
    argument: Node


Node = Number | Name | Species | Negative | Binary | Call

_OF_FLOATS = {"exp": math.exp, "log": math.log, "sqrt": math.sqrt}

_TOKEN = re.compile(
    r"\s*(?:(?P<number>(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)"
    r"|(?P<species>\[[^\]\[]*\](?:_0\b)?)"
    r"|(?P<name>[^\W\d]\w*)"
    r"|(?P<mark>\*\*|[-+*/^()]))",
    re.UNICODE,
)


def _tokens(text: str) -> list[tuple[str, str, int]]:
    found, position = [], 0
    while position < len(text.rstrip()):
        match = _TOKEN.match(text, position)
        if match is None:
            start = position + len(text[position:]) - len(text[position:].lstrip())
            what = text[start]
            message = "a '[' is never closed" if what == "[" else f"'{what}' has no meaning here"
            raise ExpressionError(message, start)
        kind = match.lastgroup or ""
        found.append((kind, match.group(kind), match.start(kind)))
        position = match.end()
    return found


class _Parser:
    def __init__(self, text: str) -> None:
        self.tokens = _tokens(text)
        self.end = len(text.rstrip())
        self.index = 0
        self.depth = 0

    def peek(self) -> tuple[str, str, int]:
        return self.tokens[self.index] if self.index < len(self.tokens) else ("end", "", self.end)

    def take(self) -> tuple[str, str, int]:
        token = self.peek()
        self.index += 1
        return token

    def fold(self, marks: str, part: Callable[[], Node]) -> Node:
        node = part()
        while self.peek()[0] == "mark" and self.peek()[1] in marks:
            operator = self.take()[1]
            node = Binary(operator, node, part())
        return node

    def sum(self) -> Node:
        self.depth += 1
        if self.depth > DEEPEST:
            raise ExpressionError(f"brackets nest deeper than {DEEPEST}", self.peek()[2])
        node = self.fold("+-", self.product)
        self.depth -= 1
        return node

    def product(self) -> Node:
        return self.fold("*/", self.sign)

    def sign(self) -> Node:
        negative = False
        while self.peek()[1] == "-" and self.peek()[0] == "mark":
            self.take()
            negative = not negative
        node = self.power()
        return Negative(node) if negative else node

    def power(self) -> Node:
        base = self.atom()
        kind, mark, position = self.peek()
        if kind == "mark" and mark == "**":
            raise ExpressionError("write ^ for a power, not **", position)
        if kind == "mark" and mark == "^":
            self.take()
            return Binary("^", base, self.exponent())
        return base

    def exponent(self) -> Node:
        self.depth += 1
        if self.depth > DEEPEST:
            raise ExpressionError(f"powers nest deeper than {DEEPEST}", self.peek()[2])
        node = self.sign()
        self.depth -= 1
        return node

    def atom(self) -> Node:
        kind, text, position = self.take()
        if kind == "number":
            return Number(float(text))
        if kind == "species":
            return self.species(text, position)
        if kind == "name":
            return self.name(text, position)
        if text == "(":
            node = self.sum()
            self.close(position)
            return node
        what = "the expression ends too early" if kind == "end" else f"'{text}' stands where a value should"
        raise ExpressionError(what, position)

    def species(self, text: str, position: int) -> Node:
        initial = text.endswith("_0")
        name = text.removesuffix("_0")[1:-1].strip()
        if not name:
            raise ExpressionError("brackets with no species in them", position)
        return Species(name, initial)

    def name(self, text: str, position: int) -> Node:
        if self.peek()[1] != "(" or self.peek()[0] != "mark":
            return Name(text)
        if text not in FUNCTIONS:
            raise ExpressionError(f"'{text}' is no function here; {', '.join(FUNCTIONS)} are", position)
        opened = self.take()[2]
        node = self.sum()
        self.close(opened)
        return Call(text, node)

    def close(self, opened: int) -> None:
        if self.take()[1] != ")":
            raise ExpressionError("a '(' is never closed", opened)


def parse(text: str) -> Node:
    """Parse ``text``.

    Raises ExpressionError with the position of the first thing that does not fit.
    """
    if len(text) > LONGEST:
        raise ExpressionError(f"longer than {LONGEST} characters", LONGEST)
    parser = _Parser(text)
    if len(parser.tokens) > MOST:
        raise ExpressionError(f"more than {MOST} names, numbers and marks", parser.tokens[MOST][2])
    node = parser.sum()
    kind, mark, position = parser.peek()
    if kind != "end":
        message = "a ')' that was never opened" if mark == ")" else f"'{mark}' does not belong here"
        raise ExpressionError(message, position)
    return node


def walk(node: Node) -> Iterator[Node]:
    """Every node of the expression, outermost first."""
    yield node
    match node:
        case Negative(operand):
            yield from walk(operand)
        case Binary(_, left, right):
            yield from walk(left)
            yield from walk(right)
        case Call(_, argument):
            yield from walk(argument)


def names(node: Node) -> tuple[str, ...]:
    """Bare names, each once, in order of appearance."""
    return tuple(dict.fromkeys(part.name for part in walk(node) if isinstance(part, Name)))


def species(node: Node, initial: bool = False) -> tuple[str, ...]:
    """Species whose concentration now (or, with ``initial``, at the start) occurs."""
    found = (p.name for p in walk(node) if isinstance(p, Species) and p.initial == initial)
    return tuple(dict.fromkeys(found))


def numbers_exist(node: Node) -> bool:
    """Whether every part that is written in numbers alone has a finite value, and none divides by 0.

    A NaN stands for what is not known yet: it goes through every operation, yet 1/0 within, sqrt(-1),
    log(0) and powers beyond 1e308 raise.
    """
    unknown: defaultdict[str, float] = defaultdict(lambda: math.nan)
    try:
        return not math.isinf(evaluate(node, unknown, unknown, unknown, _OF_FLOATS, math.pow))
    except (ArithmeticError, ValueError):
        return False


def evaluate(
    node: Node,
    names: Mapping[str, Any],
    now: Mapping[str, Any],
    start: Mapping[str, Any],
    functions: Mapping[str, Callable[[Any], Any]],
    power: Callable[[Any, Any], Any] = lambda base, exponent: base**exponent,
) -> Any:
    """Value of the expression over any numbers that know + - * /.

    names: bare name -> value; now, start: species -> concentration; functions: the numbers' own
    exp, log and sqrt; power: the numbers' own power.
    """

    def value(part: Node) -> Any:
        match part:
            case Number(number):
                return number
            case Name(name):
                return names[name]
            case Species(name, initial):
                return (start if initial else now)[name]
            case Negative(operand):
                return -value(operand)
            case Call(function, argument):
                return functions[function](value(argument))
            case Binary("+", left, right):
                return value(left) + value(right)
            case Binary("-", left, right):
                return value(left) - value(right)
            case Binary("*", left, right):
                return value(left) * value(right)
            case Binary("/", left, right):
                return value(left) / value(right)
            case Binary(_, left, right):
                return power(value(left), value(right))

    return value(node)
