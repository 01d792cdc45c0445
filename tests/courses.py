"""Candidates and batches of draws for the tests of trajectories."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path as File
from typing import Any

import numpy as np

from designer import expressions
from designer.arrays import Array, jax, jnp
from designer.records import Belief, Candidate, Constant, Equation, Step
from designer.trajectories import Path, choice, clock, extent, structure

REFERENCE = File(__file__).parent / "reference"
Numbers = dict[str, float]

SINGLE = {"A": -1.0, "P": 1.0}
BOTH = {"A": -1.0, "B": -1.0, "P": 1.0}


def published(name: str) -> tuple[dict[str, Any], dict[str, Any]]:
    """(inputs, expected values) of a check value of group 2."""
    cases = json.loads((REFERENCE / "cases.json").read_text())["cases"]
    found = next(case for case in cases if case["id"] == name)
    return found["inputs"], found["expected"]


def candidate(*steps: tuple[str, Numbers], negative: tuple[str, ...] = ()) -> Candidate:
    """Steps as (rate, stoichiometric numbers); constants ``negative`` may be below 0."""
    made, names = [], {}
    for place, (rate, numbers) in enumerate(steps, 1):
        node = expressions.parse(rate)
        made.append(Step(Equation(str(place), "", tuple(numbers.items())), node, rate))
        names.update(dict.fromkeys(expressions.names(node)))
    constants = tuple(
        Constant(name, Belief("normal" if name in negative else "lognormal", 0.0, 1.0), (0.0,) * 7, "")
        for name in names
        if name not in ("time", "temperature")
    )
    return Candidate("under test", 1.0, tuple(made), constants)


def quadrature(law: Candidate, panels: Callable[[Step], extent.Grid] = extent.usual) -> Path:
    """The quadrature path, also for laws that have a closed form."""
    (step,) = law.steps
    return extent.path(law, step, structure.may_turn(law, step.rate), clock.plain, panels)


def chosen(law: Candidate, *scope: str) -> Path:
    return choice.choose(law, frozenset(scope))


def draws(values: dict[str, Any], start: dict[str, Any]) -> tuple[dict[str, Array], dict[str, Array]]:
    """Columns of equal length out of scalars and lists."""
    columns = [np.asarray(v, float) for v in (*values.values(), *start.values())]
    size = max(column.size for column in columns)
    wide = [jnp.asarray(np.broadcast_to(column, (size,))) for column in columns]
    return dict(zip(values, wide, strict=False)), dict(zip(start, wide[len(values) :], strict=True))


def batch(path: Path, values: dict[str, Any], start: dict[str, Any], times: Any) -> tuple[Any, Any, Any]:
    """Concentrations (draw, time) by species, rates (draw, step, time), trouble (draw,)."""
    values, start = draws(values, start)
    size = len(next(iter(values.values())))
    clocks = jnp.asarray(np.broadcast_to(np.asarray(times, float), (size, np.shape(times)[-1])))

    def one(values, start, times):  # type: ignore[no-untyped-def]
        return path.solve(values, start, jnp.asarray(1.0), times)

    curve = jax.jit(jax.vmap(one))(values, start, clocks)
    now = {name: np.asarray(value) for name, value in curve.concentrations.items()}
    return now, np.stack([np.asarray(rate) for rate in curve.rates], axis=1), np.asarray(curve.trouble)


def in_logs(path: Path, values: Numbers, start: Numbers, times: Any) -> tuple[Any, Any]:
    """(function of ln(constants), ln(starting amounts above 0), ln(factor), ln(time scale); its argument).

    The function gives the concentrations (species * times,) as shares of the largest start.
    """
    named = [*values, *[name for name in start if start[name] > 0]]
    largest = max(start.values())

    def shares(z: Array) -> Array:
        given = {name: jnp.exp(z[place]) for place, name in enumerate(named)}
        constants = {name: given[name] for name in values}
        begin = {name: given.get(name, jnp.zeros(())) for name in start}
        curve = path.solve(constants, begin, jnp.exp(z[-2]), jnp.asarray(times) * jnp.exp(z[-1]))
        return jnp.concatenate([curve.concentrations[name] for name in start]) / largest

    at = [*values.values(), *[value for value in start.values() if value > 0], 1.0, 1.0]
    return shares, jnp.log(jnp.asarray(at))
