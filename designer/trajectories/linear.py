"""Networks of first-order steps: dc/dt = M c, by a uniformised matrix exponential.

Amounts are weighted so that no step gains weight; what a step loses goes to a sink, and every column of
the propagator sums to 1. With q the largest outflow, h = t / 2^S and G the generator,

    exp(G h) = exp(-q h) sum_n (G + q I)^n h^n / n!     (all terms positive: no cancellation),

squared S times, each time with its columns divided by their sums. That keeps the relative error of every
entry near 1e-15 over rate ratios to 1e8 and makes S the same for every draw.

Reference: Grassmann (1977) European Journal of Operational Research 1:122 (uniformisation).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from fractions import Fraction

from designer import expressions
from designer.arrays import Array, jax, jnp
from designer.expressions import Node, Number, Species
from designer.records import Candidate, Step
from designer.trajectories import structure
from designer.trajectories.path import RATE_FUNCTIONS, Curve, Path, filled, held, power, rates_along

SQUARINGS = 32
TERMS = 8
LARGEST = 0.1  # of q h: beyond it the series of TERMS terms is no longer exact
PASSES = 100

Entries = tuple[tuple[Array | None, ...], ...]  # None: no way from the column's species to the row's


@dataclass(frozen=True)
class Transition:
    """[source] is turned over at ``coefficient`` * [source]; made: species -> number per unit of source."""

    source: str
    coefficient: Node
    used: float
    made: tuple[tuple[str, float], ...]


@dataclass(frozen=True)
class Network:
    """species: the state, every one that stands in a rate and as many more as fix all extents.

    rest: other species -> pairs (species of the state, number): their change is that combination.
    """

    species: tuple[str, ...]
    transitions: tuple[Transition, ...]
    weights: dict[str, float]
    rest: dict[str, tuple[tuple[str, float], ...]]


def recognise(candidate: Candidate) -> Network | None:
    """The candidate as a linear network, or None where it is none or amounts could run out."""
    moving = {n for step in candidate.steps for n, number in step.equation.stoichiometry if number}
    found: list[Transition] = []
    for step in candidate.steps:
        transitions = _transitions(candidate, step, moving)
        if transitions is None:
            return None
        found += transitions
    weights = _weights(tuple(n for n in candidate.species if n in moving), found)
    if weights is None:
        return None
    sources = {transition.source for transition in found}
    species, rest = _state(candidate, [name for name in candidate.species if name in sources])
    return Network(species, tuple(found), weights, rest)


def _transitions(candidate: Candidate, step: Step, moving: set[str]) -> list[Transition] | None:
    found = []
    numbers = {name: number for name, number in step.equation.stoichiometry if number}
    for sign, term in structure.terms(step.rate):
        parts = list(structure.factors(term))
        sources = [p.name for p, below in parts if isinstance(p, Species) and _moves(p, moving) and not below]
        others = [(p, below) for p, below in parts if below or not _moves(p, moving)]
        coefficient = structure.product(others) if others else Number(1.0)
        fixed = not set(expressions.species(coefficient)) & moving and "time" not in expressions.names(
            coefficient
        )
        if len(sources) != 1 or not fixed or structure.may_turn(candidate, coefficient):
            return None
        signed = {name: sign * number for name, number in numbers.items()}
        used = -signed.pop(sources[0], 0.0)
        if used <= 0 or any(number < 0 for number in signed.values()):
            return None
        found.append(Transition(sources[0], coefficient, used, tuple(signed.items())))
    return found


def _moves(node: Node, moving: set[str]) -> bool:
    return isinstance(node, Species) and not node.initial and node.name in moving


def _weights(species: tuple[str, ...], transitions: list[Transition]) -> dict[str, float] | None:
    """Positive weights that no transition increases, or None where there are none (A -> 2 A)."""
    weights = dict.fromkeys(species, 1.0)
    for _ in range(PASSES):
        before = dict(weights)
        for transition in transitions:
            gained = sum(number * weights[name] for name, number in transition.made) / transition.used
            weights[transition.source] = max(weights[transition.source], gained)
        if weights == before:
            return weights
    return None


def _state(
    candidate: Candidate, first: list[str]
) -> tuple[tuple[str, ...], dict[str, tuple[tuple[str, float], ...]]]:
    """The species to follow, and the others as combinations of them."""
    columns = structure.basis(candidate).columns
    row = {
        name: [Fraction(c.get(name, 0.0)).limit_denominator(1000) for c in columns]
        for name in candidate.species
    }
    kept = list(first)
    for name in candidate.species:
        if (
            name not in kept
            and structure.combination([row[n] for n in _independent(kept, row)], row[name]) is None
        ):
            kept.append(name)
    base = _independent(kept, row)
    rest = {}
    for name in candidate.species:
        if name not in kept:
            shares = structure.combination([row[n] for n in base], row[name]) or []
            rest[name] = tuple((n, float(x)) for n, x in zip(base, shares, strict=True) if x)
    return tuple(kept), rest


def _independent(names: list[str], row: dict[str, list[Fraction]]) -> list[str]:
    kept: list[str] = []
    for name in names:
        if structure.combination([row[n] for n in kept], row[name]) is None:
            kept.append(name)
    return kept


def path(candidate: Candidate, network: Network) -> Path:
    """The propagator of ``network``, from ``recognise``."""

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        start = filled(candidate, start)
        ways, leaving = _generator(network, values, start, factor)
        propagator, wrong = _propagator(ways, leaving, times)
        now = _applied(network, propagator, start, times)
        rates = rates_along(candidate, values, now, start, factor, times)
        finite = jnp.all(jnp.stack([jnp.all(jnp.isfinite(value)) for value in now.values()]))
        return Curve(now, rates, jnp.where(finite & ~wrong, 0.0, 1.0))

    return Path("linear", False, solve)


def _generator(
    network: Network, values: Mapping[str, Array], start: Mapping[str, Array], factor: Array
) -> tuple[dict[tuple[int, int], Array], list[Array]]:
    """Flows of weight (to, from) -> 1/s, to == size being the sink, and what leaves each species."""
    place = {name: index for index, name in enumerate(network.species)}
    size = len(place)
    flows: dict[tuple[int, int], Array] = {}
    leaving: list[Array] = [jnp.zeros(())] * size
    for transition in network.transitions:
        source = place[transition.source]
        coefficient = expressions.evaluate(
            transition.coefficient, values, start, start, RATE_FUNCTIONS, power
        )
        outflow = factor * coefficient * transition.used
        leaving[source] = leaving[source] + outflow
        left = 1.0
        for name, number in transition.made:
            if name in place:
                share = number * network.weights[name]
                share /= transition.used * network.weights[transition.source]
                left -= share
                key = (place[name], source)
                flows[key] = flows.get(key, 0.0) + outflow * share
        if left > 1e-12:
            flows[size, source] = flows.get((size, source), 0.0) + outflow * left
    return flows, leaving


def _propagator(
    flows: dict[tuple[int, int], Array], leaving: list[Array], times: Array
) -> tuple[Entries, Array]:
    """exp(G t) with the sink as last row, entries (times,); and whether the times are out of reach."""
    size = len(leaving)
    largest = leaving[0]
    for outflow in leaving[1:]:
        largest = jnp.maximum(largest, outflow)
    largest = jax.lax.stop_gradient(largest)  # the result does not depend on it
    h = times / 2.0**SQUARINGS
    generator = dict(flows)
    for j, outflow in enumerate(leaving):
        generator[j, j] = flows.get((j, j), 0.0) + largest - outflow
    generator[size, size] = largest
    scaled = {key: value * h for key, value in generator.items()}
    entries = _series(scaled, size + 1, jnp.exp(-largest * h), h)
    entries = _normalised(entries)

    def square(entries: Entries, _: None) -> tuple[Entries, None]:
        return _normalised(_product(entries, entries)), None

    settled = jax.lax.scan(square, entries, None, length=SQUARINGS)[0]
    return settled, jnp.any(largest * h > LARGEST)


def _series(scaled: dict[tuple[int, int], Array], size: int, decay: Array, h: Array) -> Entries:
    """exp of a matrix with entries >= 0, times ``decay``, with all entries that ever fill."""
    one = jnp.ones_like(h)
    generator = tuple(tuple(scaled.get((i, j)) for j in range(size)) for i in range(size))
    unit: Entries = tuple(tuple(one if i == j else None for j in range(size)) for i in range(size))
    total = unit
    for n in range(max(TERMS, size), 0, -1):
        total = _sum(unit, _times(_product(generator, total), 1.0 / n))
    return _times(total, decay)


def _product(a: Entries, b: Entries) -> Entries:
    size = len(a)

    def entry(i: int, j: int) -> Array | None:
        found = None
        for k in range(size):
            left, right = a[i][k], b[k][j]
            if left is not None and right is not None:
                found = left * right if found is None else found + left * right
        return found

    return tuple(tuple(entry(i, j) for j in range(size)) for i in range(size))


def _sum(a: Entries, b: Entries) -> Entries:
    def entry(x: Array | None, y: Array | None) -> Array | None:
        return y if x is None else x if y is None else x + y

    return tuple(tuple(map(entry, left, right)) for left, right in zip(a, b, strict=True))


def _times(a: Entries, by: Array | float) -> Entries:
    return tuple(tuple(None if x is None else x * by for x in row) for row in a)


def _normalised(a: Entries) -> Entries:
    size = len(a)
    sums: list[Array] = []
    for j in range(size):
        total: Array = 0.0
        for i in range(size):
            if a[i][j] is not None:
                total = total + a[i][j]
        sums.append(total)
    return tuple(
        tuple(None if x is None else x / total for x, total in zip(row, sums, strict=True)) for row in a
    )


def _applied(
    network: Network, propagator: Entries, start: Mapping[str, Array], times: Array
) -> dict[str, Array]:
    now: dict[str, Array] = {}
    for i, name in enumerate(network.species):
        total: Array = jnp.zeros_like(times)
        for j, source in enumerate(network.species):
            entry = propagator[i][j]
            if entry is not None:
                share = network.weights[source] / network.weights[name]
                total = total + entry * (share * start[source])
        now[name] = total
    for name, combination in network.rest.items():
        change: Array = jnp.zeros_like(times)
        for source, number in combination:
            change = change + number * (now[source] - start[source])
        now[name] = held(start[name] + change)
    return now
