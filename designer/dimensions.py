"""The dimension of every constant, deduced from the expressions in which it stands.

Each part of an expression has the dimension d + sum_i a_i x_i, where d is known, x_i are the unknown
dimensions of constants and a_i plain numbers. Sums demand equality, functions and exponents a plain
number, the whole a given dimension: linear equations, solved in exact fractions as they are met.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from designer import units
from designer.expressions import Binary, Call, Name, Negative, Node, Number, Species, names
from designer.records import Dimension

_STRENGTH = {"+": 1, "-": 1, "*": 2, "/": 2, "^": 4}


def written(node: Node, above: int = 0) -> str:
    """The expression as text, with no more brackets than it needs."""
    match node:
        case Number(value):
            return f"{value:g}"
        case Name(name):
            return name
        case Species(name, initial):
            return f"[{name}]_0" if initial else f"[{name}]"
        case Call(function, argument):
            return f"{function}({written(argument)})"
        case Negative(operand):
            text, strength = f"-{written(operand, 3)}", 3
        case Binary(operator, left, right):
            strength = _STRENGTH[operator]
            space = " " if strength == 1 else ""
            on_left = strength + (operator == "^")
            on_right = strength + (operator in "-/")
            text = f"{written(left, on_left)}{space}{operator}{space}{written(right, on_right)}"
    return f"({text})" if strength < above else text


@dataclass(frozen=True)
class Form:
    """A dimension that may rest on unknown ones: known part (seven exponents) and unknown -> factor."""

    known: tuple[Fraction, ...] = (Fraction(0),) * 7
    unknown: Mapping[str, Fraction] = field(default_factory=dict)

    def plus(self, other: Form, factor: Fraction = Fraction(1)) -> Form:
        """self + factor * other."""
        known = tuple(a + factor * b for a, b in zip(self.known, other.known, strict=True))
        names = dict.fromkeys([*self.unknown, *other.unknown])
        zero = Fraction(0)
        sums = {n: self.unknown.get(n, zero) + factor * other.unknown.get(n, zero) for n in names}
        return Form(known, {name: value for name, value in sums.items() if value})

    def times(self, factor: Fraction) -> Form:
        """The form of a power: every exponent times ``factor``."""
        return Form().plus(self, factor)

    @property
    def dimension(self) -> Dimension | None:
        """The dimension; None while it rests on unknown ones."""
        return None if self.unknown else tuple(float(value) for value in self.known)


def form(dimension: Dimension) -> Form:
    """A known dimension as a form."""
    return Form(tuple(Fraction(value).limit_denominator(1000) for value in dimension))


PLAIN = Form()


@dataclass(frozen=True)
class Clash:
    """A part of an expression whose dimensions do not fit: the part, and what is wrong in words."""

    part: str
    message: str
    advice: str = ""


@dataclass
class Deduction:
    """Dimensions of the constants of one candidate, as far as its expressions settle them.

    known: dimension of each bare name (conditions, study constants, time, temperature, rate);
    species: of each concentration; plain_values: study constants that may stand as exponents.
    """

    known: Mapping[str, Dimension]
    species: Mapping[str, Dimension]
    plain_values: Mapping[str, float] = field(default_factory=dict)
    solved: dict[str, Form] = field(default_factory=dict)
    clashes: list[Clash] = field(default_factory=list)

    def reduced(self, found: Form) -> Form:
        """``found`` with every solved name put in."""
        out = Form(found.known)
        for name, factor in found.unknown.items():
            out = out.plus(self.solved.get(name, Form(unknown={name: Fraction(1)})), factor)
        return out

    def equal(self, left: Form, right: Form, part: str, message: str, advice: str = "") -> None:
        """Demand left = right; a contradiction is noted as ``message`` with both put in words."""
        difference = self.reduced(left.plus(right, Fraction(-1)))
        if not difference.unknown:
            if any(difference.known):
                self.clashes.append(Clash(part, self._message(message, left, right, difference), advice))
            return
        name, factor = next(iter(difference.unknown.items()))
        rest = Form(difference.known, {n: f for n, f in difference.unknown.items() if n != name})
        value = rest.times(-1 / factor)
        self.solved = {n: self._with(f, name, value) for n, f in self.solved.items()} | {name: value}

    def _message(self, message: str, left: Form, right: Form, difference: Form) -> str:
        if self.reduced(left).unknown:  # neither has a unit of its own yet, yet they cannot be alike
            factor = units.dimension_words(difference.dimension or units.NONE)
            return f"its parts differ by a factor of {factor}, whatever the constants are"
        return message.format(self.in_words(left), self.in_words(right))

    @staticmethod
    def _with(found: Form, name: str, value: Form) -> Form:
        factor = found.unknown.get(name)
        if factor is None:
            return found
        rest = Form(found.known, {n: f for n, f in found.unknown.items() if n != name})
        return rest.plus(value, factor)

    def in_words(self, found: Form) -> str:
        """The dimension in words, as far as it is settled."""
        dimension = self.reduced(found).dimension
        return "something undetermined" if dimension is None else units.dimension_words(dimension)

    def dimension(self, name: str) -> Dimension | None:
        """Dimension of a constant; None while it is undetermined."""
        return self.solved[name].dimension if name in self.solved else None

    def state(self, name: str, dimension: Dimension) -> None:
        """Take the dimension of a constant from the unit in which it was given."""
        self.equal(Form(unknown={name: Fraction(1)}), form(dimension), name, "is {0}, not {1}")

    def whole(self, node: Node, dimension: Dimension, what: str) -> None:
        """Demand that the whole expression has this dimension."""
        self.equal(self.of(node), form(dimension), written(node), f"{what} must be {{1}} but is {{0}}")

    def of(self, node: Node) -> Form:
        """Dimension of the expression; what does not fit inside it is noted in ``clashes``."""
        match node:
            case Number():
                return PLAIN
            case Species(name):
                return form(self.species[name])
            case Name(name):
                return form(self.known[name]) if name in self.known else self._unknown(name)
            case Negative(operand):
                return self.of(operand)
            case Call("sqrt", argument):
                return self.of(argument).times(Fraction(1, 2))
            case Call(function, argument):
                self.equal(self.of(argument), PLAIN, written(node), f"{function} takes {{1}}, not {{0}}")
                return PLAIN
            case Binary("*", left, right):
                return self.of(left).plus(self.of(right))
            case Binary("/", left, right):
                return self.of(left).plus(self.of(right), Fraction(-1))
            case Binary("^", left, right):
                return self._power(left, right, node)
            case Binary(_, left, right):
                one, two = self.of(left), self.of(right)
                self.equal(one, two, written(node), "{0} and {1} cannot be added")
                return two if one.unknown and not two.unknown else one

    def _unknown(self, name: str) -> Form:
        return self.reduced(Form(unknown={name: Fraction(1)}))

    def _power(self, base: Node, exponent: Node, node: Node) -> Form:
        self.equal(self.of(exponent), PLAIN, written(node), "an exponent must be {1}, not {0}")
        number = _plain(exponent, self.plain_values)
        if number is not None:
            return self.of(base).times(Fraction(number).limit_denominator(1000))
        message = "the base of an exponent that is itself unknown must be {1}, not {0}"
        divided = f"({written(base)}/c_ref)^{written(exponent, 4)}"
        advice = f"Divide by a reference: {divided}, with c_ref in [constants]"
        self.equal(self.of(base), PLAIN, written(node), message, advice)
        return PLAIN


def _plain(node: Node, values: Mapping[str, float]) -> float | None:
    """Value of an exponent built from numbers and study constants only; None otherwise."""
    match node:
        case Number(value):
            return value
        case Name(name):
            return values.get(name)
        case Negative(operand):
            inner = _plain(operand, values)
            return None if inner is None else -inner
        case Binary(operator, left, right) if operator in "+-*/":
            one, two = _plain(left, values), _plain(right, values)
            if one is None or two is None or (operator == "/" and two == 0):
                return None
            return {"+": one + two, "-": one - two, "*": one * two, "/": one / two if two else 0.0}[operator]
    return None


def exponents(node: Node) -> frozenset[str]:
    """Bare names that stand in an exponent anywhere in the expression: orders."""
    match node:
        case Binary("^", left, right):
            return exponents(left) | frozenset(names(right))
        case Binary(_, left, right):
            return exponents(left) | exponents(right)
        case Negative(operand):
            return exponents(operand)
        case Call(_, argument):
            return exponents(argument)
    return frozenset()
