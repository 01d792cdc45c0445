"""One reaction whose rate is at most quadratic in the extent: one closed form for the whole family.

Orders 0, 1 and 2, mixed second order with any stoichiometry, (k0 + k[B])[A], reversible first and
second order and autocatalysis all read x' = r0 + r1 x + r2 x^2 in the extent x, x(0) = 0. With the two
numbers low <= high of sum r1 and product r0 r2,

    x = r0 w / (1 - low w),     w = (exp((high - low) t) - 1) / (high - low),

by the series of w where high - low is next to nothing. Where the rate has no zero the two numbers are complex
and x = r0 tau / (1 - r1 tau / 2) with tau = 2 tan(D t / 2) / D, D^2 = 4 r0 r2 - r1^2. The extent never passes
the point at which a species is used up: the reaction stops there.

Reference: separation of variables; cases in Laidler, Chemical Kinetics (1987), ch. 2.
"""

from __future__ import annotations

from collections.abc import Mapping

from designer import expressions
from designer.arrays import Array, jnp
from designer.records import Candidate, Step
from designer.trajectories.clock import Clock
from designer.trajectories.path import Curve, Path, along, filled, rates_along
from designer.trajectories.polynomial import POLYNOMIAL_FUNCTIONS, Polynomial, growth, lift, power

FLAT = 0.01  # |D t / 2|^2 below which tan and tanh go by series


def polynomial(step: Step, values: Mapping[str, Array], start: Mapping[str, Array]) -> Polynomial:
    """The rate law in the extent. Raises NotPolynomialError, whatever the numbers, where it is none."""
    numbers = dict(step.equation.stoichiometry)
    given = {name: lift(value) for name, value in start.items()}
    now = {
        name: Polynomial((value, numbers[name])) if numbers.get(name) else lift(value)
        for name, value in start.items()
    }
    names = {name: lift(value) for name, value in values.items()}
    return lift(expressions.evaluate(step.rate, names, now, given, POLYNOMIAL_FUNCTIONS, power))


def extent(law: Polynomial, time: Array) -> Array:
    """x at ``time`` of x' = law(x), x(0) = 0; infinite (with the sign of the rate) past a pole."""
    first = law.coefficients[0]
    if law.degree == 0:
        return first * time
    if law.degree == 1:
        return first * growth(law.coefficients[1], time)
    if law.pair is not None:
        return _between(first, *law.pair, time)
    return _general(law, time)


def _quotient(first: Array, over: Array, under: Array) -> Array:
    """first * over / under, infinite where the denominator has passed through 0."""
    past = under <= 0
    found = first * over / jnp.where(past, 1.0, under)
    return jnp.where(past, jnp.where(first < 0, -jnp.inf, jnp.inf), found)


def _between(first: Array, one: Array, two: Array, time: Array) -> Array:
    # a selection, not min and max: at equal amounts the formula is smooth, their derivatives are not
    turned = one > two
    low, high = jnp.where(turned, two, one), jnp.where(turned, one, two)
    over = growth(high - low, time)
    return _quotient(first, over, 1 - low * over)


def _general(law: Polynomial, time: Array) -> Array:
    """A sum of terms: the sign of the discriminant is known only in numbers."""
    r0, r1, r2 = law.coefficients
    discriminant = r1 * r1 - 4 * r0 * r2
    flat = jnp.abs(discriminant) * time * time / 4 < FLAT
    real = (discriminant > 0) & ~flat
    root = jnp.sqrt(jnp.where(flat, 1.0, jnp.where(real, discriminant, -discriminant)))
    growing = r1 > 0
    larger = jnp.where(growing & real, r1 + root, 1.0)
    low = jnp.where(growing, 2 * r0 * r2 / larger, (r1 - root) / 2)  # no cancellation in either
    over = growth(jnp.where(real, root, 0.0), time)
    smooth = _quotient(r0, over, 1 - jnp.where(real, low, 0.0) * over)

    square = jnp.where(flat, discriminant * time * time / 4, 0.0)
    angle = jnp.where(real | flat, 0.0, jnp.minimum(root * time / 2, jnp.pi))
    sine = jnp.where(flat, time / 2 * _tanh_series(square), jnp.sin(angle) / root)
    cosine = jnp.cos(angle)  # 1 on the series
    past = (angle >= jnp.pi) & ~flat
    turning = _quotient(r0, 2 * sine, jnp.where(past, -1.0, cosine - r1 * sine))
    return jnp.where(real, smooth, turning)


def _tanh_series(square: Array) -> Array:
    """tanh(z)/z in z^2, |z|^2 < FLAT (tan for a negative square); next term below 1e-14."""
    terms = (-1382 / 155925, 62 / 2835, -17 / 315, 2 / 15, -1 / 3, 1.0)
    value: Array = 0.0
    for term in terms:
        value = term + value * square
    return value


def used_up(step: Step, start: Mapping[str, Array], turning: bool, free: Array) -> tuple[Array, Array]:
    """The extent, held where a species is used up, and where that was (bool, (times,))."""
    stopped = jnp.zeros(jnp.shape(free), bool)
    for name, number in step.equation.stoichiometry:
        if number == 0 or (number > 0 and not turning):
            continue
        limit = start[name] / -number
        beyond = free > limit if number < 0 else free < limit  # at equality the law itself still holds
        free, stopped = jnp.where(beyond, limit, free), stopped | beyond
    return free, stopped


def path(candidate: Candidate, single: Step, turning: bool, clock: Clock) -> Path:
    """The closed form for ``single``, the one reaction that the candidate's steps amount to.

    single: its rate without a factor of time, which ``clock`` holds. turning: the rate may turn
    negative, so that products too may be used up.
    """

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        start = filled(candidate, start)
        tau, odd = clock(values, start, times)
        free = extent(polynomial(single, values, start), factor * tau) + 0.0 * times
        reached, stopped = used_up(single, start, turning, free)
        now = along(single, start, reached)
        rates = rates_along(candidate, values, now, start, factor, times, stopped)
        return Curve(now, rates, jnp.where(jnp.all(jnp.isfinite(reached)), odd, 1.0))

    return Path("quadratic", True, solve)
