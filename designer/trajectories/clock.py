"""A factor of time alone: the reaction runs on a transformed time.

If the rate is g(t) h(concentrations), then with the clock tau(t) = integral of g from 0 to t the
concentrations follow the law h in tau. exp(a + b t) and polynomials up to t^2 are integrated in closed form,
anything else by Gauss-Legendre panels on [0, t], checked against half as many panels.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from designer import expressions
from designer.arrays import Array, jnp
from designer.expressions import Call, Negative, Node
from designer.trajectories.path import RATE_FUNCTIONS, power
from designer.trajectories.polynomial import (
    POLYNOMIAL_FUNCTIONS,
    NotPolynomialError,
    Polynomial,
    growth,
    lift,
)
from designer.trajectories.polynomial import power as polynomial_power
from designer.trajectories.structure import factors, product

# (values, start, times) -> (clock at those times, in s of the rate without its factor; trouble)
Clock = Callable[[Mapping[str, Array], Mapping[str, Array], Array], tuple[Array, Array]]

PANELS = 4
NODES = 16
DISAGREEMENT = 1e-6  # of the clock, between PANELS and half as many; the error itself is far smaller


def plain(values: Mapping[str, Array], start: Mapping[str, Array], times: Array) -> tuple[Array, Array]:
    """The clock on the wall."""
    return times, jnp.zeros(())


def transformed(factor: Node) -> Clock:
    """The clock of a rate with this factor of time."""
    closed = _exponential(factor) or _power_series(factor)
    return closed or _by_panels(factor)


def _in_time(node: Node, values: Mapping[str, Array], start: Mapping[str, Array]) -> Polynomial:
    names = {name: lift(value) for name, value in values.items()}
    names["time"] = Polynomial((0.0, 1.0))
    given = {name: lift(value) for name, value in start.items()}
    return lift(expressions.evaluate(node, names, given, given, POLYNOMIAL_FUNCTIONS, polynomial_power))


def _degree(node: Node) -> int | None:
    """Degree in time, or None where it is no polynomial up to 2."""
    ones = dict.fromkeys(expressions.names(node), 1.0)
    start = dict.fromkeys(expressions.species(node, initial=True), 1.0)
    try:
        return _in_time(node, ones, start).degree
    except NotPolynomialError:
        return None


def _exponential(factor: Node) -> Clock | None:
    """exp(a + b t), possibly times a constant."""
    parts = list(factors(factor))
    moving = [part for part, _ in parts if "time" in expressions.names(part)]
    if len(moving) != 1 or not isinstance(moving[0], Call) or moving[0].function != "exp":
        return None
    below = next(below for part, below in parts if part is moving[0])
    argument = Negative(moving[0].argument) if below else moving[0].argument
    if _degree(argument) != 1:
        return None
    rest = product([(part, down) for part, down in parts if part is not moving[0]])

    def clock(values: Mapping[str, Array], start: Mapping[str, Array], times: Array) -> tuple[Array, Array]:
        shift, slope = _in_time(argument, values, start).coefficients
        size = _plainly(rest, values, start, 0.0) * jnp.exp(shift)
        return size * growth(slope, times), jnp.zeros(())

    return clock


def _power_series(factor: Node) -> Clock | None:
    """c0 + c1 t + c2 t^2, as long as it stays positive."""
    if _degree(factor) is None:
        return None

    def clock(values: Mapping[str, Array], start: Mapping[str, Array], times: Array) -> tuple[Array, Array]:
        coefficients = _in_time(factor, values, start).coefficients
        total: Array = 0.0
        for place, coefficient in reversed(list(enumerate(coefficients))):
            total = coefficient / (place + 1) + total * times
        here = jnp.linspace(0.0, jnp.max(times), 65)
        negative = jnp.any(_plainly(factor, values, start, here) < 0)
        return total * times, jnp.where(negative, 1.0, 0.0)

    return clock


def _plainly(node: Node, values: Mapping[str, Array], start: Mapping[str, Array], time: Array) -> Array:
    return expressions.evaluate(node, {**values, "time": time}, start, start, RATE_FUNCTIONS, power)


def _panels(count: int) -> tuple[np.ndarray, np.ndarray]:
    """Places and weights on [0, 1] of ``count`` equal panels of Gauss-Legendre nodes."""
    x, w = np.polynomial.legendre.leggauss(NODES)
    places = (np.arange(count)[:, None] + (x + 1) / 2) / count
    return places.ravel(), np.tile(w / 2 / count, count)


def _by_panels(factor: Node) -> Clock:
    fine, coarse = _panels(PANELS), _panels(PANELS // 2)

    def clock(values: Mapping[str, Array], start: Mapping[str, Array], times: Array) -> tuple[Array, Array]:
        def integral(rule: tuple[np.ndarray, np.ndarray]) -> tuple[Array, Array]:
            at = _plainly(factor, values, start, times[:, None] * rule[0])
            return times * jnp.sum(at * rule[1], axis=-1), jnp.all(at >= 0)

        (total, good), (rough, _) = integral(fine), integral(coarse)
        close = jnp.all(jnp.abs(total - rough) <= DISAGREEMENT * jnp.max(jnp.abs(total)))
        return total, jnp.where(good & close, 0.0, 1.0)

    return clock
