"""What the equations and expressions of a candidate say about how it can be solved.

Everything here looks at stoichiometric numbers and expression trees, never at values.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from fractions import Fraction

from designer import expressions
from designer.expressions import Binary, Call, Name, Negative, Node, Number, Species
from designer.records import Belief, Candidate, Equation, Step


@dataclass(frozen=True)
class Basis:
    """Independent reactions that span what the steps do.

    columns[j]: stoichiometric numbers of independent reaction j, species -> number.
    shares[i][j]: how much of reaction j one unit of step i is. Extents of the independent reactions
    are the state of a network: [X] = [X]_0 + sum_j columns[j][X] * extent_j keeps every balance exactly.
    """

    columns: tuple[dict[str, float], ...]
    shares: tuple[tuple[float, ...], ...]


def basis(candidate: Candidate) -> Basis:
    """Independent steps, first come first kept, and the other steps in terms of them (exact fractions)."""
    kept: list[int] = []
    vectors = [_vector(candidate, step) for step in candidate.steps]
    shares: list[list[Fraction]] = []
    for index, vector in enumerate(vectors):
        found = combination([vectors[place] for place in kept], vector)
        if found is None:
            kept.append(index)
            found = [Fraction(0)] * (len(kept) - 1) + [Fraction(1)]
        shares.append(found)
    size = len(kept)
    rows = tuple(tuple(float(x) for x in [*row, *[Fraction(0)] * (size - len(row))]) for row in shares)
    columns = tuple(
        {n: float(x) for n, x in zip(candidate.species, vectors[place], strict=True) if x} for place in kept
    )
    return Basis(columns, rows)


def _vector(candidate: Candidate, step: Step) -> list[Fraction]:
    numbers = dict(step.equation.stoichiometry)
    return [Fraction(numbers.get(name, 0.0)).limit_denominator(1000) for name in candidate.species]


def combination(columns: list[list[Fraction]], wanted: list[Fraction]) -> list[Fraction] | None:
    """x with sum x_j columns[j] = wanted, or None where there is none (columns independent)."""
    size = len(columns)
    table = [[column[row] for column in columns] + [value] for row, value in enumerate(wanted)]
    place = 0
    for j in range(size):
        pivot = next(i for i in range(place, len(table)) if table[i][j] != 0)
        table[place], table[pivot] = table[pivot], table[place]
        table[place] = [value / table[place][j] for value in table[place]]
        for i, row in enumerate(table):
            if i != place and row[j] != 0:
                table[i] = [a - row[j] * b for a, b in zip(row, table[place], strict=True)]
        place += 1
    if any(row[size] != 0 for row in table[place:]):
        return None
    return [table[j][size] for j in range(size)]


def single(candidate: Candidate) -> Step | None:
    """The one reaction that all steps together amount to, or None where there are several.

    Steps that are multiples of one another (forward and back, two ways to the same products) add up to
    one reaction with the sum of their rates.
    """
    if len(candidate.steps) == 1:
        return candidate.steps[0]
    found = basis(candidate)
    if len(found.columns) != 1:
        return None
    total: Node | None = None
    for step, (share,) in zip(candidate.steps, found.shares, strict=True):
        term = step.rate if abs(share) == 1 else Binary("*", Number(abs(share)), step.rate)
        if total is None:
            total = Negative(term) if share < 0 else term
        else:
            total = Binary("-" if share < 0 else "+", total, term)
    if total is None:
        return None
    equation = Equation("", "", tuple(found.columns[0].items()))
    return Step(equation, total, "")


def terms(node: Node, sign: float = 1.0) -> Iterator[tuple[float, Node]]:
    """Terms of a sum, each with its sign; literal signs within a product count too."""
    match node:
        case Binary("+", left, right):
            yield from terms(left, sign)
            yield from terms(right, sign)
        case Binary("-", left, right):
            yield from terms(left, sign)
            yield from terms(right, -sign)
        case Negative(operand):
            yield from terms(operand, -sign)
        case Binary("*", Number(-1.0), right):
            yield from terms(right, -sign)
        case _:
            yield sign, node


def factors(node: Node) -> Iterator[tuple[Node, bool]]:
    """Factors of a product, each with whether it stands in the denominator."""
    match node:
        case Binary("*", left, right):
            yield from factors(left)
            yield from factors(right)
        case Binary("/", left, right):
            yield from factors(left)
            yield from ((factor, not below) for factor, below in factors(right))
        case Negative(operand):
            yield Number(-1.0), False
            yield from factors(operand)
        case _:
            yield node, False


def product(parts: list[tuple[Node, bool]]) -> Node:
    """The product that ``factors`` took apart."""
    total: Node = Number(1.0)
    first = True
    for factor, below in parts:
        total = factor if first and not below else Binary("/" if below else "*", total, factor)
        first = False
    return total


def split_time(node: Node) -> tuple[Node, Node] | None:
    """(factor of time alone, the rest), or None where time and concentrations do not separate."""
    in_time, rest = [], []
    for factor, below in factors(node):
        if "time" not in expressions.names(factor):
            rest.append((factor, below))
        elif expressions.species(factor):
            return None
        else:
            in_time.append((factor, below))
    return product(in_time), product(rest)


def vanishes_with(node: Node, species: str) -> bool:
    """Whether the rate is a product with a power of [species], and so 0 where there is none of it."""
    for factor, below in factors(node):
        if below:
            continue
        match factor:
            case Species(name, False) if name == species:
                return True
            case Binary("^", base, Number(exponent)) if exponent > 0 and vanishes_with(base, species):
                return True
            case Binary("+" | "-", left, right):
                if vanishes_with(left, species) and vanishes_with(right, species):
                    return True
    return False


def ignored(step: Step) -> tuple[tuple[str, int], ...]:
    """Species that can run out without slowing the step, which then stops abruptly.

    Pairs (species, direction): 1 where the step going forward ignores what it uses up, -1 where it does so
    going backward.
    """
    found: dict[tuple[str, int], None] = {}
    for sign, term in terms(step.rate):
        parts = [factor for factor, _ in factors(term)]
        either = not all(_surely_positive(factor) for factor in parts)
        for name, number in step.equation.stoichiometry:
            for direction in (1, -1):
                goes = either or sign == direction
                if number * direction < 0 and goes and not vanishes_with(term, name):
                    found[name, direction] = None
    return tuple(found)


def may_turn(candidate: Candidate, node: Node) -> bool:
    """Whether the rate may be 0 or negative at positive concentrations, by its signs and constants."""
    used = set(expressions.names(node))
    negative = any(_may_be_negative(c.belief) for c in candidate.constants if c.name in used)
    return negative or not _surely_positive(node)


def _surely_positive(node: Node) -> bool:
    """Given positive names and concentrations."""
    match node:
        case Number(value):
            return value >= 0
        case Name() | Species() | Call("exp", _):
            return True
        case Call("sqrt", argument):
            return _surely_positive(argument)
        case Binary("^", left, _):
            return _surely_positive(left)
        case Binary("+" | "*" | "/", left, right):
            return _surely_positive(left) and _surely_positive(right)
    return False


def _may_be_negative(belief: Belief) -> bool:
    return (
        belief.family == "normal"
        or (belief.family == "exact" and belief.centre < 0)
        or (belief.family == "uniform" and belief.low < 0)
    )
