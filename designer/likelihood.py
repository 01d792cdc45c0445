"""Loss of the readings of one run, with its exact derivatives.

For one run with coordinates x = (u, z) the loss is minus the log likelihood

    L = sum e^2 / (2 W) + ln(2 pi W) / 2           a reading, e = read - mean, W its variance
    L = sum -ln Phi(s (limit - mean) / sqrt(W))    a censored one: s = 1 below, -1 above the limit

Mean and W are the candidate's own. Derivatives in x are chained through (mean, W), whose own come
from nested forward differentiation (``second_order``) or, where that is dear, only to first order.
"""

from __future__ import annotations

from collections.abc import Callable
from math import log, pi
from typing import NamedTuple

import numpy as np

from designer.arrays import Array, jax, jnp
from designer.signals import Law, Signal

# below it the difference of x^2/2 and ln Phi loses digits, and Laplace's continued fraction has them all
FAR_TAIL = -50.0


class Design(NamedTuple):
    """Runs of a study as arrays: conditions (run, condition), times (run, time) in s, and mask
    (run, time, signal), 1 where something is read and 0 where not (padding included)."""

    conditions: Array
    times: Array
    mask: Array


class Readings(NamedTuple):
    """values (run, time, signal) and side: 0 a value, -1 "below lowest", 1 "above highest"."""

    values: Array
    side: Array


class RunTerms(NamedTuple):
    """Loss of one run, its gradient (x,), Hessian (x, x) and positive Gauss-Newton matrix (x, x)."""

    loss: Array
    gradient: Array
    hessian: Array
    gauss_newton: Array
    trouble: Array


class _Slopes(NamedTuple):
    """Derivatives of the loss of each reading in its mean m and variance w; *_gn are the parts kept
    by Gauss-Newton."""

    loss: Array
    m: Array
    w: Array
    mm: Array
    mw: Array
    ww: Array
    mm_gn: Array
    mw_gn: Array
    ww_gn: Array


def limits(law: Law) -> tuple[Array, Array]:
    """lowest and highest trusted value of every signal."""
    lowest = np.array([channel.lowest for channel in law.channels])
    highest = np.array([channel.highest for channel in law.channels])
    return lowest, highest


def _uncensored(error: Array, variance: Array) -> _Slopes:
    inverse = 1 / variance
    square = error * error * inverse
    zero = jnp.zeros_like(error)
    return _Slopes(
        loss=(square + jnp.log(variance) + log(2 * pi)) / 2,
        m=-error * inverse,
        w=(1 - square) * inverse / 2,
        mm=inverse,
        mw=error * inverse**2,
        ww=(square - 0.5) * inverse**2,
        mm_gn=inverse,
        mw_gn=zero,
        ww_gn=inverse**2 / 2,
    )


@jax.custom_jvp
def _log_tail(x: Array) -> tuple[Array, Array]:
    """ln Phi(x) and the inverse Mills ratio m = phi(x)/Phi(x)."""
    tail = jax.scipy.special.log_ndtr(x)
    far = x < FAR_TAIL
    a = jnp.where(far, -x, 1.0)
    fraction = a + 1 / (a + 2 / (a + 3 / (a + 4 / a)))
    mills = jnp.exp(-x * x / 2 - log(2 * pi) / 2 - tail)
    return tail, jnp.where(far, fraction, mills)


@_log_tail.defjvp
def _log_tail_slope(
    primals: tuple[Array], tangents: tuple[Array]
) -> tuple[tuple[Array, Array], tuple[Array, Array]]:
    """d ln Phi = m dx and dm = -m (m + x) dx: far fewer operations than differentiating ln Phi itself."""
    (x,), (dx,) = primals, tangents
    tail, mills = _log_tail(x)
    return (tail, mills), (mills * dx, -mills * (mills + x) * dx)


def _censored(sign: Array, distance: Array, variance: Array) -> _Slopes:
    """distance = limit - mean; x = sign * distance / sqrt(W); -ln Phi(x) and its slopes."""
    root = jnp.sqrt(variance)
    x = sign * distance / root
    tail, mills = _log_tail(x)
    bend = mills * (mills + x)
    mm_gn = bend / variance
    mw_gn = sign * bend * x / (2 * variance * root)
    ww_gn = bend * x * x / (4 * variance**2)
    return _Slopes(
        loss=-tail,
        m=sign * mills / root,
        w=mills * x / (2 * variance),
        mm=mm_gn,
        mw=mw_gn - sign * mills / (2 * variance * root),
        ww=ww_gn - 3 * mills * x / (4 * variance**2),
        mm_gn=mm_gn,
        mw_gn=mw_gn,
        ww_gn=ww_gn,
    )


def _slopes(law: Law, signal: Signal, readings: Readings, mask: Array) -> _Slopes:
    lowest, highest = limits(law)
    plain = _uncensored(readings.values - signal.mean, signal.variance)
    if not np.isfinite(np.concatenate([lowest, highest])).any():
        return _Slopes(*(mask * part for part in plain))
    limit = jnp.where(readings.side < 0, lowest, highest)
    censored = readings.side != 0
    distance = jnp.where(censored, limit - signal.mean, 0.0)
    cut = _censored(-jnp.sign(readings.side) + (readings.side == 0), distance, signal.variance)
    return _Slopes(*(mask * jnp.where(censored, c, p) for c, p in zip(cut, plain, strict=True)))


def reading_losses(law: Law, signal: Signal, readings: Readings, mask: Array) -> Array:
    """Loss of each reading (..., time, signal)."""
    return _slopes(law, signal, readings, mask).loss


def mean_weights(law: Law, signal: Signal, readings: Readings, mask: Array) -> Array:
    """Expected curvature of each reading's loss in its mean (..., time, signal): 1/W for a value."""
    return _slopes(law, signal, readings, mask).mm_gn


def loss(law: Law, signal: Signal, readings: Readings, mask: Array) -> Array:
    """Summed loss of the readings; leading axes of ``signal`` broadcast against ``readings``."""
    return _slopes(law, signal, readings, mask).loss.sum((-3, -2, -1))


class Pairs(NamedTuple):
    """Pairs (i <= j) of coordinates, in which symmetric matrices are kept while they are summed."""

    first: np.ndarray
    second: np.ndarray
    diagonal: np.ndarray  # (coordinate,): the pair (i, i)
    square: np.ndarray  # (coordinate, coordinate): the pair of an entry


def pairs(size: int) -> Pairs:
    first, second = np.triu_indices(size)
    square = np.zeros((size, size), int)
    square[first, second] = square[second, first] = np.arange(len(first))
    return Pairs(first, second, square.diagonal().copy(), square)


def second_order(
    function: Callable[[Array], tuple[Array, ...]], x: Array
) -> tuple[tuple[Array, ...], tuple[Array, ...], tuple[Array, ...]]:
    """Values, Jacobians (x, ...) and second derivatives (pair, ...) by forward-over-forward
    differentiation; each pair of coordinates (``pairs``) is differentiated once."""
    two = pairs(x.shape[0])
    basis = jnp.eye(x.shape[0])

    def along(v: Array, w: Array) -> tuple[tuple[Array, ...], tuple[Array, ...], tuple[Array, ...]]:
        first = lambda at: jax.jvp(function, (at,), (v,))  # noqa: E731
        (value, slope), (_, bend) = jax.jvp(first, (x,), (w,))
        return value, slope, bend

    value, slope, bend = jax.vmap(along, out_axes=(None, 0, 0))(basis[two.first], basis[two.second])
    return value, tuple(s[two.diagonal] for s in slope), bend


def run_terms(law: Law, x: Array, run: Design, readings: Readings, exact: bool) -> RunTerms:
    """Loss and derivatives of one run at x = (u, z).

    run and readings are one run's rows. Without ``exact`` the Hessian returned is Gauss-Newton's.
    """
    structural = len(law.structural)
    two = pairs(x.shape[0])

    def parts(at: Array) -> tuple[Array, Array, Array]:
        signal = law.read(at[:structural], at[structural:], run.conditions, run.times)
        return signal.mean, signal.variance, signal.trouble

    if exact:
        (mean, variance, trouble), (jm, jw, _), (hm, hw, _) = second_order(parts, x)
    else:
        (mean, variance, trouble), (jm, jw, _) = _first_order(parts, x)
        hm = hw = jnp.zeros(())
    s = _slopes(law, Signal(mean, variance, trouble), readings, run.mask)
    gradient = _sum(s.m * jm + s.w * jw)
    m1, m2, w1, w2 = jm[two.first], jm[two.second], jw[two.first], jw[two.second]
    mm, mw, ww = m1 * m2, m1 * w2 + m2 * w1, w1 * w2
    gauss_newton = _sum(s.mm_gn * mm + s.mw_gn * mw + s.ww_gn * ww)
    hessian = gauss_newton
    if exact:
        hessian = _sum(s.mm * mm + s.mw * mw + s.ww * ww + s.m * hm + s.w * hw)
    return RunTerms(s.loss.sum(), gradient, hessian[two.square], gauss_newton[two.square], jnp.max(trouble))


def _first_order(
    function: Callable[[Array], tuple[Array, ...]], x: Array
) -> tuple[tuple[Array, ...], tuple[Array, ...]]:
    along = lambda v: jax.jvp(function, (x,), (v,))  # noqa: E731
    return jax.vmap(along, out_axes=(None, 0))(jnp.eye(x.shape[0]))


def _sum(terms: Array) -> Array:
    """Sum over the readings (the last two axes)."""
    return terms.sum((-2, -1))
