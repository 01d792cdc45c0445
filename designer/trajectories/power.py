"""One reaction whose rate is a power, of any exponent, of one species that it uses up.

For a' = -nu k (c a)^n with m = n - 1 and z = nu k c (c a0)^m t,

    a = a0 (1 + m z)^(-1/m) = a0 exp(-log(1 + m z) / m),

smooth through m = 0 (first order). Below first order the species is gone at z = -1/m and stays so.

Reference: integrated rate law of order n; Laidler, Chemical Kinetics (1987), ch. 2.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from designer import expressions
from designer.arrays import Array, jnp
from designer.expressions import Binary, Node, Number, Species
from designer.records import Candidate, Step
from designer.trajectories import structure
from designer.trajectories.clock import Clock
from designer.trajectories.path import (
    RATE_FUNCTIONS,
    Curve,
    Path,
    along,
    filled,
    power,
    rates_along,
)
from designer.trajectories.quadratic import used_up

FEW = 3e-3  # |m z| below which log(1 + y)/y goes by series, right to 1e-16


@dataclass(frozen=True)
class PowerLaw:
    """rate = size * (inner * [species])^exponent; nothing but [species] changes with the reaction."""

    species: str
    size: Node
    inner: Node
    exponent: Node


def recognise(step: Step) -> PowerLaw | None:
    """The rate as a power of one species that the step uses up, or None."""
    moving = {name for name, number in step.equation.stoichiometry if number}
    split = _one_moving(step.rate, moving)
    if split is None:
        return None
    factor, size = split
    base, exponent = (
        (factor.left, factor.right)
        if isinstance(factor, Binary) and factor.operator == "^"
        else (factor, Number(1.0))
    )
    inside = _one_moving(base, moving)
    if inside is None or set(expressions.species(exponent)) & moving:
        return None
    found, inner = inside
    if not isinstance(found, Species) or dict(step.equation.stoichiometry)[found.name] >= 0:
        return None
    return PowerLaw(found.name, size, inner, exponent)


def _one_moving(node: Node, moving: set[str]) -> tuple[Node, Node] | None:
    """(the one factor in which a changing species stands, the product of the others), or None."""
    parts = list(structure.factors(node))
    held = [bool(set(expressions.species(part)) & moving) for part, _ in parts]
    if sum(held) != 1 or parts[held.index(True)][1]:
        return None
    place = held.index(True)
    others = [part for index, part in enumerate(parts) if index != place]
    return parts[place][0], structure.product(others)


def _log1p_over(y: Array) -> Array:
    """log(1 + y) / y."""
    few = jnp.abs(y) < FEW
    s = jnp.where(few, y, 0.0)
    series: Array = 0.0
    for place in range(7, 0, -1):
        series = (-1.0) ** (place - 1) / place + s * series
    safe = jnp.where(few, 1.0, y)
    return jnp.where(few, series, jnp.log1p(safe) / safe)


def path(candidate: Candidate, single: Step, law: PowerLaw, clock: Clock) -> Path:
    """The closed form of ``law``; the rate must not turn negative (a law of one sign)."""
    number = -dict(single.equation.stoichiometry)[law.species]

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        start = filled(candidate, start)
        tau, odd = clock(values, start, times)
        size, inner, exponent = (_value(node, values, start) for node in (law.size, law.inner, law.exponent))
        begin = start[law.species]
        present = begin > 0
        m = exponent - 1.0
        level = power(jnp.where(present, inner * begin, 1.0), m)
        z = number * size * inner * level * factor * tau
        gone = 1 + m * z <= 0
        decades = z * _log1p_over(jnp.where(gone, 0.0, m * z))
        free = jnp.where(gone, begin, -begin * jnp.expm1(-decades)) / number
        free, stopped = used_up(single, start, False, free + 0.0 * times)
        now = along(single, start, free)
        rates = rates_along(candidate, values, now, start, factor, times, stopped | gone)
        return Curve(now, rates, jnp.where(jnp.all(jnp.isfinite(free)), odd, 1.0))

    return Path("power", True, solve)


def _value(node: Node, values: Mapping[str, Array], start: Mapping[str, Array]) -> Array:
    return jnp.asarray(expressions.evaluate(node, values, start, start, RATE_FUNCTIONS, power), float)
