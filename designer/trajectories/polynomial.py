"""Truncated polynomials in the extent of a reaction, for recognising and evaluating simple rate laws.

A rate expression evaluated with [X] = [X]_0 + nu x, each a ``Polynomial`` in x, yields the
coefficients of the rate law, or raises ``NotPolynomialError``. Whether it raises, and the degree,
depend on the expression only, never on the numbers, so both are known before anything is compiled.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from designer.arrays import FUNCTIONS, Array, jnp

HIGHEST = 2
FEW = (
    3e-3  # below it the series of (exp(s) - 1)/s, right to 4e-16 with five terms; second derivatives to 1e-11
)
MANY = 100.0  # exp(-MANY) is nothing beside any seed, and exp(MANY)^3 is still a number


class NotPolynomialError(Exception):
    """The expression is no polynomial of degree <= 2 in the extent."""


@dataclass(frozen=True)
class Polynomial:
    """Coefficients in ascending order; ``pair`` is kept where the polynomial is a product of two lines.

    (a0 + a1 x)(b0 + b1 x) has pair = (a0 b1, a1 b0): their sum is the middle coefficient, their product
    that of the outer two, and their difference the square root of the discriminant, without cancellation.
    """

    coefficients: tuple[Array, ...]
    pair: tuple[Array, Array] | None = None

    @property
    def degree(self) -> int:
        return len(self.coefficients) - 1

    def __neg__(self) -> Polynomial:
        return self._scaled(-1.0)

    def __add__(self, other: Any) -> Polynomial:
        right = lift(other)
        long, short = (self, right) if self.degree >= right.degree else (right, self)
        added = [a + b for a, b in zip(long.coefficients, short.coefficients, strict=False)]
        return Polynomial((*added, *long.coefficients[len(added) :]))

    __radd__ = __add__

    def __sub__(self, other: Any) -> Polynomial:
        return self + -lift(other)

    def __rsub__(self, other: Any) -> Polynomial:
        return lift(other) + -self

    def __mul__(self, other: Any) -> Polynomial:
        right = lift(other)
        if right.degree == 0:
            return self._scaled(right.coefficients[0])
        if self.degree == 0:
            return right._scaled(self.coefficients[0])
        if self.degree + right.degree > HIGHEST:
            raise NotPolynomialError("degree above 2")
        (a0, a1), (b0, b1) = self.coefficients, right.coefficients
        one, two = a0 * b1, a1 * b0
        return Polynomial((a0 * b0, one + two, a1 * b1), (one, two))

    __rmul__ = __mul__

    def __truediv__(self, other: Any) -> Polynomial:
        right = lift(other)
        if right.degree > 0:
            raise NotPolynomialError("a concentration in a denominator")
        return self._scaled(1.0 / right.coefficients[0])

    def __rtruediv__(self, other: Any) -> Polynomial:
        return lift(other) / self

    def _scaled(self, by: Array) -> Polynomial:
        pair = None if self.pair is None else (self.pair[0] * by, self.pair[1] * by)
        return Polynomial(tuple(c * by for c in self.coefficients), pair)


def lift(value: Any) -> Polynomial:
    return value if isinstance(value, Polynomial) else Polynomial((value,))


def power(base: Any, exponent: Any) -> Polynomial:
    """base^exponent: any exponent on a constant base, the literal numbers 0, 1 and 2 on others."""
    if lift(exponent).degree > 0:
        raise NotPolynomialError("a concentration in an exponent")
    if lift(base).degree == 0:
        return lift(jnp.power(lift(base).coefficients[0], lift(exponent).coefficients[0]))
    literal = exponent.coefficients[0] if isinstance(exponent, Polynomial) else exponent
    if isinstance(exponent, Polynomial) or literal not in (0.0, 1.0, 2.0):
        raise NotPolynomialError("a power that is not 0, 1 or 2")
    return lift(1.0) if literal == 0 else base if literal == 1 else base * base


def _of_constant(function: Callable[[Array], Array]) -> Callable[[Any], Polynomial]:
    def apply(argument: Any) -> Polynomial:
        if lift(argument).degree > 0:
            raise NotPolynomialError("a function of a concentration")
        return lift(function(lift(argument).coefficients[0]))

    return apply


POLYNOMIAL_FUNCTIONS = {name: _of_constant(function) for name, function in FUNCTIONS.items()}


def growth(slope: Array, time: Array) -> Array:
    """(exp(slope t) - 1) / slope, smooth through slope = 0; the exponent is cut at MANY."""
    exponent = jnp.minimum(slope * time, MANY)
    few = jnp.abs(exponent) < FEW
    s = jnp.where(few, exponent, 0.0)
    series = 1 + s * (1 / 2 + s * (1 / 6 + s * (1 / 24 + s / 120)))
    return jnp.where(few, time * series, jnp.expm1(exponent) / jnp.where(few, 1.0, slope))
