"""The free-order alternative: the law for "none of these" in studies of one reaction.

    r = r0 * f(T) * prod ([X] / x_ref)^n_X

over the species and other conditions that occur in a listed rate and start above 0 everywhere on
offer; x_ref is the middle of what is on offer, f(T) the Arrhenius factor of the most believed
candidate. n_X is normal, cut at 0, with the belief-weighted mean of the listed laws' orders
d ln r / d ln X at the middle and their belief-weighted spread, at least 0.5. ln r0 has mean and SD of
the belief-weighted mixture of the listed laws' ln rate there, their constants' spread included. The
stoichiometry is that of the most believed candidate; ties go to the equation in ``[[reactions]]``.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product
from math import sqrt

import numpy as np

from designer import expressions, plainlaw
from designer.records import Belief, Candidate, Condition, Constant, Dimension, Equation, Step

LEAST_SPREAD = 0.5  # of an order: the alternative must be able to leave the listed laws
NAME = "free order"
NODES = 5  # of Gauss and Hermite, for each constant
MOST_POINTS = 20_000


@dataclass(frozen=True)
class FreeOrder:
    candidate: Candidate
    constants: tuple[tuple[str, float], ...]  # the x_ref, to join the study's own


@dataclass(frozen=True)
class Middle:
    """The point at which orders are taken."""

    conditions: tuple[Condition, ...]
    known: dict[str, float]  # study constants

    @property
    def values(self) -> dict[str, float]:
        """Condition -> its middle."""
        return plainlaw.middles(self.conditions)

    @property
    def temperature(self) -> float | None:
        """Temperature there, K; None where the study has none."""
        return self.values.get("temperature")

    def log_rate(
        self, candidate: Candidate, change: dict[str, float], constants: dict[str, object]
    ) -> np.ndarray:
        """ln of the candidate's rate with some conditions multiplied by exp(change)."""
        moved = {n: v * np.exp(change.get(n, 0.0)) for n, v in self.values.items()}
        bare, concentrations = plainlaw.split(moved, self.conditions)
        names = {"time": 0.0, **self.known, **bare, **constants}
        with np.errstate(all="ignore"):
            return np.log(plainlaw.rate(candidate.steps[0], names, concentrations, concentrations))

    def constants(self, candidate: Candidate) -> dict[str, object]:
        """The candidate's constants at their medians, at this temperature."""
        return {c.name: plainlaw.at_temperature(c, self.temperature) for c in candidate.constants}


def build(
    listed: Sequence[Candidate],
    written: Equation,
    middle: Middle,
    belief: float,
    rate_dimension: Dimension,
    rate_unit: str,
) -> FreeOrder | None:
    """The alternative, or None where no law has a rate above 0 at the middle of what is on offer."""
    laws = [c for c in listed if np.isfinite(middle.log_rate(c, {}, middle.constants(c)))]
    movers = _movers(listed, middle.conditions)
    if not laws or not movers:
        return None
    weights = np.array([law.belief for law in laws])
    weights = weights / weights.sum() if weights.sum() > 0 else np.full(len(laws), 1 / len(laws))
    taken = (
        {name for name in middle.known}
        | {c.name for c in middle.conditions}
        | {"time", "rate", "temperature"}
    )
    names = _names(movers, taken)
    equation = _equation(listed, written)
    size = _size_name(taken)
    text = size + "".join(_factor(condition, *names[condition.name]) for condition in movers)
    orders = [
        Constant(
            names[c.name][1], _order(laws, weights, middle, c), (0.0,) * 7, "", stated="added by the program"
        )
        for c in movers
    ]
    constants = (_size(size, listed, laws, weights, middle, rate_dimension, rate_unit), *orders)
    step = Step(equation, expressions.parse(text), text)
    candidate = Candidate(NAME, belief, (step,), constants, free_order=True)
    references = tuple((names[c.name][0], c.middle) for c in movers)
    return FreeOrder(candidate, references)


def _movers(listed: Sequence[Candidate], conditions: tuple[Condition, ...]) -> list[Condition]:
    found: set[str] = set()
    for candidate in listed:
        for step in candidate.steps:
            found |= {*expressions.species(step.rate), *expressions.names(step.rate)}
    return [c for c in conditions if c.name in found and c.low > 0 and c.name != "temperature"]


def _names(movers: Sequence[Condition], taken: set[str]) -> dict[str, tuple[str, str]]:
    """(name of x_ref, name of n_X) for each, clashing with nothing in the study."""
    out: dict[str, tuple[str, str]] = {}
    used = set(taken) | {_size_name(taken)}
    for condition in movers:
        stem = re.sub(r"\W", "_", condition.name)
        stem = stem if not stem[:1].isdigit() else f"_{stem}"
        while f"{stem}_ref" in used or f"n_{stem}" in used:
            stem += "_"
        out[condition.name] = (f"{stem}_ref", f"n_{stem}")
        used |= set(out[condition.name])
    return out


def _size_name(taken: set[str]) -> str:
    name = "r0"
    while name in taken:
        name += "_"
    return name


def _factor(condition: Condition, reference: str, order: str) -> str:
    quantity = f"[{condition.name}]" if condition.is_species else condition.name
    return f"*({quantity}/{reference})^{order}"


def _equation(listed: Sequence[Candidate], written: Equation) -> Equation:
    most = max(candidate.belief for candidate in listed)
    best = [c.steps[0].equation for c in listed if c.belief > most - 1e-9]
    return written if written in best else best[0]


def _order(laws: Sequence[Candidate], weights: np.ndarray, middle: Middle, condition: Condition) -> Belief:
    step = 1e-4
    found = []
    for law in laws:
        constants = middle.constants(law)
        up, down = (middle.log_rate(law, {condition.name: s}, constants) for s in (step, -step))
        found.append(float(up - down) / (2 * step))
    orders = np.array(found)
    mean = float(weights @ orders)
    spread = sqrt(float(weights @ (orders - mean) ** 2))
    return Belief("positive", mean, max(spread, LEAST_SPREAD))


def _moments(law: Candidate, middle: Middle) -> tuple[float, float]:
    """Mean and variance of ln rate over the law's own constants, by Gauss-Hermite quadrature."""
    free = [c for c in law.constants if c.belief.family != "exact"]
    count = NODES if NODES ** len(free) <= MOST_POINTS else 3
    x, w = np.polynomial.hermite_e.hermegauss(count)
    points = np.array(list(product(x, repeat=len(free)))).reshape(count ** len(free), len(free))
    weight = np.array([np.prod(p) for p in product(w / w.sum(), repeat=len(free))])
    values: dict[str, object] = dict(middle.constants(law))
    for place, constant in enumerate(free):
        values[constant.name] = plainlaw.at_temperature(constant, middle.temperature, points[:, place])
    logs = np.broadcast_to(middle.log_rate(law, {}, values), weight.shape)
    good = np.isfinite(logs)
    weight = weight[good] / weight[good].sum()
    mean = float(weight @ logs[good])
    return mean, float(weight @ (logs[good] - mean) ** 2)


def _size(
    name: str,
    listed: Sequence[Candidate],
    laws: Sequence[Candidate],
    weights: np.ndarray,
    middle: Middle,
    dimension: Dimension,
    unit: str,
) -> Constant:
    moments = np.array([_moments(law, middle) for law in laws])
    mean = float(weights @ moments[:, 0])
    variance = float(weights @ (moments[:, 1] + (moments[:, 0] - mean) ** 2))
    belief = Belief("lognormal", mean, sqrt(max(variance, 1e-12)))
    energy = _energy(listed, middle)
    reference = middle.temperature if energy is not None else None
    return Constant(name, belief, dimension, unit, energy, reference, "added by the program")


def _energy(listed: Sequence[Candidate], middle: Middle) -> Belief | None:
    """Apparent activation energy of the most believed candidate: sum of d ln r / d ln k times E of k."""
    best = max(listed, key=lambda candidate: candidate.belief)
    constants = middle.constants(best)
    mean, variance, found = 0.0, 0.0, False
    for constant in best.constants:
        energy = constant.activation_energy
        if energy is None:
            continue
        found = True
        up, down = (
            middle.log_rate(best, {}, {**constants, constant.name: constants[constant.name] * np.exp(s)})  # type: ignore[operator]
            for s in (1e-4, -1e-4)
        )
        weight = float(up - down) / 2e-4
        mean += weight * energy.centre
        variance += (weight * energy.spread) ** 2
    if not found:
        return None
    return Belief("normal", mean, sqrt(variance)) if variance else Belief("exact", mean)
