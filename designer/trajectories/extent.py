"""One reaction, any smooth rate law without time: time as an integral over the extent.

With s(u) = 1/(1 + exp(-u)) the fraction of the way to the end of the reaction, u on the whole real line,
[X](u) = [X]_0 s(-u) + [X]_end s(u) and

    t(u) = X * integral of s(v) s(-v) / r([X](v)) dv from -infinity to u,      X the extent at the end,

by Gauss-Legendre panels that are the same for every draw: a factor of the rate that vanishes at a
negative concentration lies at distance pi from the real u axis, whatever the constants. t(u) = t is
solved by Newton steps inside one panel; the last two are left to differentiation with their slope held,
which is the implicit function theorem up to second derivatives.

The end is where the first species is used up, or a zero of the rate before that (equilibrium).
Fails, and says so by ``trouble``: rate laws with jumps, double zeros or a domain that ends on the way.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from designer.arrays import Array, jax, jnp
from designer.records import Candidate, Step
from designer.trajectories.clock import Clock
from designer.trajectories.ending import Ending, ending
from designer.trajectories.path import Curve, Path, filled, held, rate, rates_along

LAST = 20.7  # u of the last node panel: 1 - s = 1e-9; beyond it u goes on linearly, an exponential approach
FURTHEST = 60.0  # s(-60) = 1e-26: the reaction is over
LARGEST_ERROR = 1e-5  # of the extent at the end, by the panels' own estimate (30 to 1000 times the true one)


@dataclass(frozen=True)
class Grid:
    """Nodes (panels, nodes): fraction done, fraction left, and ds/dxi of the panel's own xi in [-1, 1].

    Panel 0 is linear in s up to ``first``; the others are equal in u, centred at ``middle``, of half width
    ``half``. ``to_powers`` turns values at nodes into monomial coefficients of xi, ``to_last`` into the two
    highest Legendre coefficients.
    """

    done: np.ndarray
    left: np.ndarray
    stretch: np.ndarray
    weights: np.ndarray
    first: float
    middle: np.ndarray
    half: float
    nodes: np.ndarray
    to_powers: np.ndarray
    to_last: np.ndarray


@lru_cache
def grid(first: float, panels: int, count: int) -> Grid:
    """``panels`` panels of ``count`` nodes, the first of them linear on [0, first]."""
    nodes, weights = np.polynomial.legendre.leggauss(count)
    begin = np.log(first / (1 - first))
    half = (LAST - begin) / (panels - 1) / 2
    middle = begin + half * (2 * np.arange(panels) - 1)
    u = middle[1:, None] + half * nodes
    linear = first * (nodes + 1) / 2
    done = np.vstack([linear, 1 / (1 + np.exp(-u))])
    left = np.vstack([1 - linear, 1 / (1 + np.exp(u))])
    stretch = np.vstack([np.full(count, first / 2), half * done[1:] * left[1:]])
    legendre = np.polynomial.legendre.legvander(nodes, count - 1)
    degrees = np.arange(count)
    to_legendre = (legendre * weights[:, None] * (2 * degrees + 1) / 2).T
    columns = [np.polynomial.legendre.leg2poly(row) for row in np.eye(count)]
    monomial = np.array([np.pad(column, (0, count - len(column))) for column in columns]).T
    to_powers = monomial @ to_legendre
    return Grid(done, left, stretch, weights, first, middle, half, nodes, to_powers, to_legendre[-2:])


def usual(single: Step) -> Grid:
    """18 panels of 12; 22 from further down where products speed up the reaction and seeds may be tiny."""
    from designer import expressions

    made = {name for name, number in single.equation.stoichiometry if number > 0}
    return grid(1e-12, 22, 12) if made & set(expressions.species(single.rate)) else grid(1e-7, 18, 12)


def fine(single: Step) -> Grid:
    """48 panels of 16, for draws that fail on the usual ones."""
    return grid(1e-12, 48, 16)


def path(
    candidate: Candidate,
    single: Step,
    turning: bool,
    clock: Clock,
    panels: Callable[[Step], Grid] = usual,
    fallback: Path | None = None,
) -> Path:
    """Quadrature for ``single``, the one reaction that the candidate's steps amount to.

    single: its rate without a factor of time, which ``clock`` holds. turning: the rate may change sign.
    """
    mesh = panels(single)

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        start = filled(candidate, start)
        tau, odd = clock(values, start, times)
        end = ending(single, values, start, turning)
        slowness, wrong = _slowness(mesh, single, values, start, end)
        done, left, over = _fraction(mesh, slowness, factor * tau)
        now = {
            name: jnp.where(
                end.still, start[name] + 0 * done, start[name] * left + end.concentrations[name] * done
            )
            for name, _ in single.equation.stoichiometry
        }
        now = {name: held(value) for name, value in now.items()}
        rates = rates_along(candidate, values, now, start, factor, times, over | end.still)
        finite = jnp.all(jnp.isfinite(done)) & jnp.isfinite(end.extent)
        return Curve(now, rates, jnp.where(finite & ~wrong, odd, 1.0))

    return Path("extent", False, solve, fallback)


def _slowness(
    mesh: Grid, single: Step, values: Mapping[str, Array], start: Mapping[str, Array], end: Ending
) -> tuple[Array, Array]:
    """dt/dxi at the nodes (panels, nodes), and whether it cannot be trusted."""
    now = {
        name: start[name] * mesh.left + end.concentrations[name] * mesh.done
        for name, _ in single.equation.stoichiometry
    }
    speed = rate(single, values, now, start) / end.extent + jnp.zeros(mesh.done.shape)  # 1/s, of the fraction
    # next to an equilibrium the rate is rounding; there it is its slope times the way left
    speed = jnp.where(mesh.left < end.rounding, mesh.left * end.slope, speed)
    good = (speed > 0) & jnp.isfinite(speed)
    safe = jnp.where(good & ~end.still, speed, 1.0)
    slowness = mesh.stretch / safe
    wrong = jnp.any(~good) & ~end.still
    return slowness, wrong | (_estimate(mesh, slowness, safe) > LARGEST_ERROR)


def _estimate(mesh: Grid, slowness: Array, speed: Array) -> Array:
    """Error of the fraction done: what the last two Legendre terms of the panels so far amount to."""
    held_slowness, held_speed = jax.lax.stop_gradient((slowness, speed))
    tails = jnp.sum(jnp.abs(held_slowness @ mesh.to_last.T), axis=-1) * 2
    sofar = tails @ np.triu(np.ones((len(tails), len(tails))))
    return jnp.max(sofar * jnp.max(held_speed * mesh.left * mesh.done, axis=-1))


def _fraction(mesh: Grid, slowness: Array, time: Array) -> tuple[Array, Array, Array]:
    """(fraction done, fraction left, whether the reaction is over) at each time."""
    panels = mesh.done.shape[0]
    lengths = slowness @ mesh.weights
    begins = np.tril(np.ones((panels, panels)), -1) @ lengths
    whole = begins[-1] + lengths[-1]
    inside = jnp.minimum(time, whole)
    place = jnp.sum(inside[:, None] >= begins[1:], axis=-1)
    local = inside - begins[place]
    powers = slowness[place] @ mesh.to_powers.T
    xi = _invert(powers, lengths[place], local)
    u = jnp.asarray(mesh.middle)[place] + mesh.half * xi
    beyond = jnp.maximum(time - whole, 0.0)
    last = jnp.sum(slowness[-1] @ mesh.to_powers.T)
    u = jnp.minimum(u + mesh.half * beyond / last, FURTHEST)
    linear = mesh.first * (xi + 1) / 2
    early = place == 0
    u = jnp.where(early, 0.0, u)
    done = jnp.where(early, linear, jax.nn.sigmoid(u))
    left = jnp.where(early, 1 - linear, jax.nn.sigmoid(-u))
    return done, left, u >= FURTHEST


def _polynomials(powers: Array, xi: Array) -> tuple[Array, Array]:
    """(integral from -1 to xi, value at xi) of the polynomials with these coefficients (times, nodes)."""
    count = powers.shape[-1]
    value: Array = 0.0
    integral: Array = 0.0
    at_begin: Array = 0.0
    for k in reversed(range(count)):
        part = powers[..., k]
        value = part + value * xi
        integral = part / (k + 1) + integral * xi
        at_begin = at_begin + part / (k + 1) * (-1.0) ** (k + 1)
    return integral * xi - at_begin, value


def _invert(powers: Array, length: Array, local: Array) -> Array:
    """xi in [-1, 1] with integral = local, differentiable twice."""
    held_powers, held_length, held_local = jax.lax.stop_gradient((powers, length, local))
    xi = _guess(held_powers, held_length, held_local)
    slope = jnp.ones_like(xi)
    for _ in range(2):
        integral, slope = _polynomials(held_powers, xi)
        xi = jnp.clip(xi - (integral - held_local) / slope, -1.0, 1.0)
    xi = jax.lax.stop_gradient(xi)
    slope = jax.lax.stop_gradient(_polynomials(held_powers, xi)[1])
    for _ in range(2):
        xi = xi - (_polynomials(powers, xi)[0] - local) / slope
    return xi


def _guess(powers: Array, length: Array, local: Array) -> Array:
    """Inverse of the exponential through both ends of the panel."""
    signs = (-1.0) ** np.arange(powers.shape[-1])
    growing = jnp.log(jnp.sum(powers, axis=-1) / jnp.sum(powers * signs, axis=-1))  # over the panel
    growing = jnp.where(jnp.abs(growing) < 1e-3, 1e-3, growing)
    share = local / length
    return -1 + 2 * jnp.log1p(share * jnp.expm1(growing)) / growing
