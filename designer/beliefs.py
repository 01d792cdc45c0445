"""Beliefs as transforms of standard-normal coordinates.

Every unknown is a monotone function of u ~ N(0, 1), so the prior of a study is always N(0, I): fits
are well scaled and a prior is never a special case.
"""

from __future__ import annotations

import math

from designer.arrays import Array, jax, jnp
from designer.records import Z95, Belief


def value(belief: Belief, u: Array) -> Array:
    """Value of the unknown at coordinate ``u`` (any shape), in internal units.

    Differentiable to any order in u.
    """
    if belief.family == "exact":
        return jnp.full_like(u, belief.centre)
    if belief.family == "uniform":
        return belief.low + (belief.high - belief.low) * jax.scipy.special.ndtr(u)
    if belief.family == "positive":
        return _above_zero(belief, u)
    z = belief.centre + belief.spread * u
    if belief.family == "normal":
        return z
    if belief.family == "lognormal":
        return jnp.exp(z)
    if belief.family == "logitnormal":
        return 0.5 * (1 + jnp.tanh(z / 2))
    raise ValueError(f"no such family of beliefs: {belief.family}")


def _above_zero(belief: Belief, u: Array) -> Array:
    """Normal cut at 0: the upper tail Phi(-u) is shrunk by the mass above 0, which keeps digits there."""
    mass = 0.5 * math.erfc(-belief.centre / belief.spread / math.sqrt(2))
    return belief.centre - belief.spread * _normal_quantile(mass * jax.scipy.special.ndtr(-u))


@jax.custom_jvp
def _normal_quantile(p: Array) -> Array:
    return jax.scipy.special.ndtri(p)


@_normal_quantile.defjvp
def _quantile_slope(primals: tuple[Array], tangents: tuple[Array]) -> tuple[Array, Array]:
    """d Phi^-1(p) / dp = sqrt(2 pi) exp(z^2 / 2), itself differentiable through z."""
    (p,), (dp,) = primals, tangents
    z = _normal_quantile(p)
    return z, math.sqrt(2 * math.pi) * jnp.exp(z * z / 2) * dp


def middle(belief: Belief) -> float:
    """Median of the belief."""
    return quantile(belief, 0.0)


def quantile(belief: Belief, u: float) -> float:
    """Value at the coordinate ``u`` as a plain float."""
    return float(value(belief, jnp.asarray(float(u))))


def log_slope(belief: Belief, u: Array) -> Array:
    """d ln(value) / du, which turns a spread of u into a relative spread of the unknown."""
    at, slope = jax.jvp(lambda x: value(belief, x), (u,), (jnp.ones_like(u),))
    return slope / at


def range95(belief: Belief) -> tuple[float, float]:
    """Central 95 % range."""
    return quantile(belief, -Z95), quantile(belief, Z95)
