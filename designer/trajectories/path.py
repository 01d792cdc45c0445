"""What every path through time hands back, and what is common to paths of a single reaction."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import NamedTuple

from designer import expressions
from designer.arrays import FUNCTIONS, Array, jnp
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
    temperature in K). start: species -> starting concentration, mol/L. factor: scalar that multiplies
    every rate. times: (times,), s, >= 0, in any order, repeats allowed.

    It is pure, float64, and differentiable forward and backward, once and twice, in all four arguments;
    ``second_order`` says whether nested forward derivatives are cheap as well (closed forms).
    """

    name: str
    second_order: bool
    solve: Solve


def concentrations(
    step: Step, candidate: Candidate, start: Mapping[str, Array], extent: Array
) -> dict[str, Array]:
    """[X] = [X]_0 + (stoichiometric number) * extent for every species; extent (times,), mol/L."""
    numbers = dict(step.equation.stoichiometry)
    return {
        name: start[name] + number * extent for name, number in numbers.items() if name in candidate.species
    }


def rate(
    step: Step,
    values: Mapping[str, Array],
    now: Mapping[str, Array],
    start: Mapping[str, Array],
    time: Array | float = 0.0,
) -> Array:
    """Rate of reaction of the step at concentrations ``now``; species that do not react stay at start."""
    return expressions.evaluate(
        step.rate, {**values, "time": time}, {**start, **now}, start, FUNCTIONS, jnp.power
    )
