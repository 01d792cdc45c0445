"""What every path through time hands back, and the arithmetic of rate expressions along it."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, NamedTuple

from designer import expressions
from designer.arrays import FUNCTIONS, Array, jax, jnp
from designer.records import Candidate, Step


class Curve(NamedTuple):
    """Concentrations and rates of one draw at its times.

    concentrations: species of the candidate -> (times,), mol/L.
    rates: rate of reaction of each step of the candidate, (times,), mol/(L s), run-level error included.
    trouble: scalar, 0.0 where the draw was solved, 1.0 where it could not be. It is a value to be
    counted by the caller; the numbers beside a 1.0 mean nothing.
    """

    concentrations: dict[str, Array]
    rates: tuple[Array, ...]
    trouble: Array


Solve = Callable[[dict[str, Array], dict[str, Array], Array, Array], Curve]


@dataclass(frozen=True)
class Path:
    """A way to solve one candidate.

    ``solve(values, start, factor, times) -> Curve`` treats one draw; the caller vectorises.
    values: bare name -> scalar (constants at the temperature of the run, conditions, study constants,
    temperature in K). start: species -> starting concentration, mol/L. factor: scalar > 0 that multiplies
    every rate. times: (times,), s, >= 0, in any order, repeats allowed.

    It is pure, float64, and differentiable forward and backward, once and twice (forward over forward,
    backward over forward), in all four arguments. ``second_order`` says whether nested forward
    derivatives are cheap as well (closed forms). ``fallback`` is a slower, more patient path for draws
    with trouble, where there is one.
    """

    name: str
    second_order: bool
    solve: Solve
    fallback: Path | None = None


def power(base: Any, exponent: Any) -> Any:
    """base^exponent, 0 (1, infinite) for bases <= 0 where the exponent is no literal whole number.

    Derivatives stay finite where a concentration is 0; a concentration below 0 is rounding.
    """
    if isinstance(exponent, int | float):
        if isinstance(base, int | float):
            return base**exponent
        if float(exponent).is_integer() and abs(exponent) <= 16:
            return base ** int(exponent)
    positive = base > 0
    safe = jnp.where(positive, base, 1.0)
    at_zero = jnp.where(exponent > 0, 0.0, jnp.where(exponent == 0, 1.0, jnp.inf))
    if isinstance(exponent, int | float) and float(2 * exponent).is_integer():
        raised = power(safe, exponent - 0.5) * jnp.sqrt(safe)
    else:
        raised = jnp.exp(exponent * jnp.log(safe))
    return jnp.where(positive, raised, at_zero)


def square_root(value: Any) -> Any:
    """sqrt, 0 for values <= 0, with finite derivatives."""
    return power(jnp.asarray(value, float), 0.5)


RATE_FUNCTIONS = {**FUNCTIONS, "sqrt": square_root}


def rate(
    step: Step,
    values: Mapping[str, Array],
    now: Mapping[str, Array],
    start: Mapping[str, Array],
    time: Array | float = 0.0,
) -> Array:
    """Rate of reaction of the step at concentrations ``now``; species that do not react stay at start."""
    names = {**values, "time": time}
    return expressions.evaluate(step.rate, names, {**start, **now}, start, RATE_FUNCTIONS, power)


def filled(candidate: Candidate, start: Mapping[str, Array]) -> dict[str, Array]:
    """``start`` with 0 for every species that the candidate names and nobody started with."""
    named = list(candidate.species)
    for step in candidate.steps:
        named += [*expressions.species(step.rate), *expressions.species(step.rate, initial=True)]
    return {name: jnp.asarray(start.get(name, 0.0), float) for name in (*named, *start)}


def along(single: Step, start: Mapping[str, Array], extent: Array) -> dict[str, Array]:
    """[X] = [X]_0 + (stoichiometric number) * extent; extent (times,), mol/L."""
    return {name: held(start[name] + number * extent) for name, number in single.equation.stoichiometry}


def rates_along(
    candidate: Candidate,
    values: Mapping[str, Array],
    now: Mapping[str, Array],
    start: Mapping[str, Array],
    factor: Array,
    times: Array,
    stopped: Array | bool = False,
) -> tuple[Array, ...]:
    """Rate of each step, (times,); 0 where the reaction has ``stopped`` because a species is used up."""
    found = [factor * rate(step, values, now, start, times) + 0 * times for step in candidate.steps]
    return tuple(jnp.where(stopped, 0.0, value) for value in found)


def held(value: Array) -> Array:
    """``value``, 0 where it is below 0 by rounding, derivatives untouched."""
    return jnp.where(value < 0, value - jax.lax.stop_gradient(value), value)
