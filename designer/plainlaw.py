"""A candidate at plain numbers (numpy, no compilation): for middles, half-lives and checks of a file."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from designer import expressions
from designer.records import Belief, Candidate, Condition, Constant, Step

GAS_CONSTANT = 8.31446261815324  # J/(mol K), exact since the 2019 SI

_FUNCTIONS = {"exp": np.exp, "log": np.log, "sqrt": np.sqrt}


def quantile(belief: Belief, u: Any = 0.0) -> Any:
    """Value of the unknown at coordinate(s) u ~ N(0, 1); u = 0 is the median (see records.Belief)."""
    from scipy.special import expit, ndtr, ndtri

    z = belief.centre + belief.spread * np.asarray(u, dtype=float)
    match belief.family:
        case "exact":
            return belief.centre + 0 * z
        case "lognormal":
            return np.exp(z)
        case "normal":
            return z
        case "logitnormal":
            return expit(z)
        case "uniform":
            return belief.low + (belief.high - belief.low) * ndtr(u)
        case "positive":
            upper = ndtr(belief.centre / belief.spread) * ndtr(-np.asarray(u, dtype=float))
            return belief.centre - belief.spread * ndtri(upper)
    raise ValueError(f"no such family of beliefs: {belief.family}")


def arrhenius(energy: Any, temperature: float, reference: float) -> Any:
    """exp(-(E/R)(1/T - 1/T_ref)): the factor on a constant stated at T_ref (J/mol, K)."""
    return np.exp(-energy / GAS_CONSTANT * (1 / temperature - 1 / reference))


def at_temperature(constant: Constant, temperature: float | None, u: Any = 0.0, v: Any = 0.0) -> Any:
    """Value of a constant at coordinates u (itself) and v (its activation energy)."""
    value = quantile(constant.belief, u)
    energy, reference = constant.activation_energy, constant.reference_temperature
    if energy is None or reference is None or temperature is None:
        return value
    return value * arrhenius(quantile(energy, v), temperature, reference)


def split(
    at: Mapping[str, float], conditions: tuple[Condition, ...]
) -> tuple[dict[str, float], dict[str, float]]:
    """Values of conditions -> (bare names, starting concentrations)."""
    species = {condition.name for condition in conditions if condition.is_species}
    bare = {name: value for name, value in at.items() if name not in species}
    return bare, {name: value for name, value in at.items() if name in species}


def middles(conditions: tuple[Condition, ...]) -> dict[str, float]:
    """Condition -> middle of what is on offer."""
    return {condition.name: condition.middle for condition in conditions}


class Every(dict[str, float]):
    """Concentrations of which those not named are 0."""

    def __missing__(self, name: str) -> float:
        return 0.0


def rate(step: Step, names: Mapping[str, Any], now: Mapping[str, Any], start: Mapping[str, Any]) -> Any:
    """Rate of the step, in the unit of its concentrations per second; NaN or infinity where undefined."""
    with np.errstate(all="ignore"):
        wide = {name: np.asarray(value, dtype=float) for name, value in names.items()}
        here = _Arrays(now)
        return expressions.evaluate(step.rate, wide, here, _Arrays(start), _FUNCTIONS, np.power) + 0.0


class _Arrays(dict[str, Any]):
    def __init__(self, values: Mapping[str, Any]) -> None:
        super().__init__({name: np.asarray(value, dtype=float) for name, value in values.items()})

    def __missing__(self, name: str) -> Any:
        return np.asarray(0.0)


def names_of(candidate: Candidate, known: Mapping[str, float], temperature: float | None) -> dict[str, Any]:
    """Every bare name of the candidate's rates at the middles of its constants; time is 0."""
    constants = {c.name: at_temperature(c, temperature) for c in candidate.constants}
    return {"time": 0.0, **known, **constants}
