"""Where a single reaction ends: the first species used up, or a zero of the rate before that."""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np

from designer.arrays import Array, jax, jnp
from designer.records import Step
from designer.trajectories.path import held, rate

POINTS = np.linspace(-18.0, 20.7, 28)  # u at which a change of sign is looked for
BELOW = 15.0  # how far below the first point a zero may lie
STEPS = 10  # safeguarded Newton steps between two points
NEXT_TO_NOTHING = 1e-12  # extent, beside what there is: nothing happens
NOISE = 1e-8  # extent left, beside what there is, from which an equilibrium's rate is its slope times the way


class Ending(NamedTuple):
    """extent: signed, mol/L, never 0. concentrations: species -> at the end, derivatives included.

    still: nothing happens at all. rounding: fraction left below which the rate is ``slope`` (1/s) times
    the fraction left (0 where the end is no equilibrium).
    """

    extent: Array
    concentrations: dict[str, Array]
    still: Array
    rounding: Array
    slope: Array


def ending(single: Step, values: Mapping[str, Array], start: Mapping[str, Array], turning: bool) -> Ending:
    """End of the reaction from ``start``; ``turning``: its rate may change sign."""
    numbers = {name: number for name, number in single.equation.stoichiometry if number}
    at_once = rate(single, values, {}, start)
    extent, limits = _exhausted(numbers, start, -1.0)
    if turning:
        other, other_limits = _exhausted(numbers, start, 1.0)
        backwards = at_once < 0
        extent = jnp.where(backwards, -other, extent)
        limits = {name: jnp.where(backwards, other_limits[name], limits[name]) for name in limits}
    still = (at_once == 0) | (extent == 0)
    extent = jnp.where(still, 1.0, extent)
    if not turning:
        return Ending(extent, limits, still, jnp.zeros(()), jnp.ones(()))
    return _equilibrium(single, values, start, Ending(extent, limits, still, jnp.zeros(()), jnp.ones(())))


def _exhausted(
    numbers: Mapping[str, float], start: Mapping[str, Array], sign: float
) -> tuple[Array, dict[str, Array]]:
    """Size of the extent at which the first species with this sign is used up, and what is left then.

    Exactly one species is the limiting one, even at equal amounts: the others keep their derivatives.
    """
    least, first = jnp.asarray(jnp.inf), jnp.asarray(-1)
    for place, (name, number) in enumerate(numbers.items()):
        if number * sign > 0:
            lasting = start[name] / abs(number)
            fewer = lasting < least
            least, first = jnp.where(fewer, lasting, least), jnp.where(fewer, place, first)
    left = {}
    for place, (name, number) in enumerate(numbers.items()):
        left[name] = jnp.where(first == place, 0.0, held(start[name] - sign * number * least))
    return least, left


def _equilibrium(
    single: Step, values: Mapping[str, Array], start: Mapping[str, Array], far: Ending
) -> Ending:
    """The first zero of the rate between start and ``far``, or ``far`` where there is none."""
    direction = jnp.sign(far.extent)

    def speed(u: Array, values, start, limits) -> Array:  # type: ignore[no-untyped-def]
        done, left = jax.nn.sigmoid(u), jax.nn.sigmoid(-u)
        now = {name: start[name] * left + end * done for name, end in limits.items()}
        return direction * rate(single, values, now, start) + 0 * u

    inputs = (values, start, far.concentrations)
    fixed = jax.lax.stop_gradient(inputs)
    signs = speed(jnp.asarray(POINTS), *fixed) <= 0
    found = jnp.any(signs) & ~far.still
    u = _newton(lambda u: speed(u, *fixed), jnp.argmax(signs))
    u = jax.lax.stop_gradient(jnp.where(found, u, 0.0))
    slope = jax.jvp(lambda u: speed(u, *fixed), (u,), (jnp.ones(()),))[1]
    slope = jnp.where(found & (slope != 0), slope, 1.0)
    for _ in range(2):  # unstopped, slope held: first and second derivatives of the root
        u = u - jnp.where(found, speed(u, *inputs), 0.0) / slope
    done, left = jax.nn.sigmoid(u), jax.nn.sigmoid(-u)
    extent = jnp.where(found, far.extent * done, far.extent)
    at_end = {
        name: jnp.where(found, start[name] * left + end * done, end)
        for name, end in far.concentrations.items()
    }
    return _settled(single, values, start, extent, at_end, found, far.still)


def _settled(
    single: Step,
    values: Mapping[str, Array],
    start: Mapping[str, Array],
    extent: Array,
    at_end: dict[str, Array],
    found: Array,
    still: Array,
) -> Ending:
    numbers = {name: number for name, number in single.equation.stoichiometry if number}
    toward = {name: jnp.asarray(-number, float) for name, number in numbers.items()}
    slope = jax.jvp(lambda now: rate(single, values, now, start) + jnp.zeros(()), (at_end,), (toward,))[1]
    amount = jnp.max(jnp.stack([jnp.maximum(start[n], at_end[n]) / abs(k) for n, k in numbers.items()]))
    amount = jax.lax.stop_gradient(amount)
    size = jax.lax.stop_gradient(jnp.abs(extent))
    nothing = still | (found & (size < NEXT_TO_NOTHING * amount))
    rounding = jnp.where(found, NOISE * amount / jnp.where(nothing, 1.0, size), 0.0)
    return Ending(jnp.where(nothing, 1.0, extent), at_end, nothing, rounding, slope)


def _newton(speed, place: Array) -> Array:  # type: ignore[no-untyped-def]
    """Zero of ``speed`` between point place - 1 and point place, by Newton steps kept in the bracket."""
    points = jnp.asarray(POINTS)
    high = points[place]
    low = jnp.where(place > 0, points[place - 1], high - BELOW)

    def step(_: int, state: tuple[Array, Array, Array]) -> tuple[Array, Array, Array]:
        low, high, u = state
        value, slope = jax.jvp(speed, (u,), (jnp.ones(()),))
        low, high = jnp.where(value > 0, u, low), jnp.where(value > 0, high, u)
        new = u - value / jnp.where(slope == 0, 1.0, slope)
        inside = (new >= low) & (new <= high) & (slope != 0)
        return low, high, jnp.where(inside, new, (low + high) / 2)

    return jax.lax.fori_loop(0, STEPS, step, (low, high, (low + high) / 2))[2]
