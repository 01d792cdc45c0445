"""Gradient of the worth of a plan in its conditions and times, noise held fixed.

G = (ln Z, ln variance of ln k) depends on the design x directly, through the simulated readings, and
through the optimum p*(x) of F. With dF/dp = 0 there, the implicit function theorem gives

    dG/dx = dG/dx at p*  -  dG/dp H^-1 d2F/dp dx

the second term of which the envelope theorem would miss in ln det H (it is the derivative of one
differentiable Newton step from where the fit stopped). H^-1 dG/dp is a fixed direction, and d2F/dp dx
along it is the slope of one directional derivative of F. Of F's Hessian only its sum weighted by dG/dH
is differentiated, and forward: reverse differentiation took more than twice as long to compile.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import NamedTuple

import numpy as np

from designer import beliefs
from designer.arrays import Array, jax, jnp, side_by_side
from designer.evidence import Factor, Point, Quadratic, eliminate
from designer.likelihood import Design, Readings, reading_losses
from designer.signals import Law
from designer.virtual import Bench, Scores, Truth, probabilities, readings_of, simulate

ALL = "all constants"  # asked for by measure D
NEGLIGIBLE = 1e-12  # weights below this are not differentiated
LANES = 128


class Worth(NamedTuple):
    """value in 0..1-ish (see ``worth``) and its gradient in conditions and times of all runs."""

    value: float
    conditions: np.ndarray
    times: np.ndarray


def evidence_and_spread(law: Law, asked: tuple[str, ...], u: Array, near: Quadratic) -> Array:
    """ln Z by Laplace and ln variance of each asked ln-constant (0 where the law has none), from the
    blocks of F at the point whose structural coordinates are ``u``: (1 + asked,)."""
    factor = eliminate(near)
    found = [-near.value - factor.log_determinant / 2]
    for name in asked:
        if name == ALL:
            found.append(_generalised(law, u, factor))
        elif name not in law.structural:
            found.append(jnp.zeros(()))
        else:
            place = law.structural.index(name)
            slope = beliefs.log_slope(law.candidate.constant(name).belief, u[place])
            found.append(jnp.log(slope**2 * factor.covariance[place, place]))
    return jnp.stack(found)


def _generalised(law: Law, u: Array, factor: Factor) -> Array:
    """ln of the generalised variance of the logarithms of all constants, per constant (measure D)."""
    if not law.structural:
        return jnp.zeros(())
    names = [constant.name for constant in law.candidate.constants]
    slopes = [
        jnp.log(jnp.abs(beliefs.log_slope(law.candidate.constant(name).belief, u[place])))
        for place, name in enumerate(law.structural)
        if name in names
    ]
    return (2 * sum(slopes, jnp.zeros(())) - factor.structural) / len(law.structural)


class _Place(NamedTuple):
    """Everything the readings of one run depend on."""

    x: Array
    conditions: Array
    times: Array
    values: Array


class _Slope(NamedTuple):
    """Derivatives of a sum over readings: in x, in conditions, in each time, in each value."""

    x: Array
    conditions: Array
    times: Array
    values: Array


def _losses(law: Law, place: _Place, side: Array, mask: Array) -> Array:
    """Loss of each reading of a run: (time, signal)."""
    structural = len(law.structural)
    signal = law.read(place.x[:structural], place.x[structural:], place.conditions, place.times)
    return reading_losses(law, signal, Readings(place.values, side), mask)


def _curved(law: Law, place: _Place, pulled: Array, weight: Array, side: Array, mask: Array) -> Array:
    """pulled * L + <weight, d2L/dx2> for each reading's loss L: the second part is the sum over
    coordinates of the second derivative along the coordinate and the matching row of ``weight``."""

    def lost(x: Array) -> Array:
        return _losses(law, place._replace(x=x), side, mask)

    def along(v: Array, w: Array) -> Array:
        return jax.jvp(lambda at: jax.jvp(lost, (at,), (v,))[1], (place.x,), (w,))[1]

    return pulled * lost(place.x) + jax.vmap(along)(jnp.eye(place.x.shape[0]), weight).sum(0)


def _forward(each: Callable[[_Place], Array], place: _Place) -> _Slope:
    """Slopes of the sum of ``each`` (time, signal) by forward differentiation. A reading depends on no
    other reading's time and value, so one direction serves all times, and one all values."""
    n, c = place.x.shape[0], place.conditions.shape[0]
    kinds = n + c + 2
    ways = _Place(
        jnp.eye(kinds, n),
        jnp.eye(kinds, c, -n),
        jnp.zeros((kinds, *place.times.shape)).at[n + c].set(1.0),
        jnp.zeros((kinds, *place.values.shape)).at[n + c + 1].set(1.0),
    )
    pushed = jax.vmap(lambda way: jax.jvp(each, (place,), (way,))[1])(ways)
    whole = pushed.sum((1, 2))
    return _Slope(whole[:n], whole[n : n + c], pushed[n + c].sum(-1), pushed[n + c + 1])


def _arrow(pulled: Quadratic) -> Array:
    """Derivatives in the blocks of an arrow as one symmetric matrix for each run: (run, x, x)."""
    runs = pulled.zz.shape[0]
    uu = jnp.broadcast_to((pulled.uu + pulled.uu.T) / 2, (runs, *pulled.uu.shape))
    zz = (pulled.zz + jnp.swapaxes(pulled.zz, 1, 2)) / 2
    top = jnp.concatenate([uu, pulled.uz / 2], axis=2)
    bottom = jnp.concatenate([jnp.swapaxes(pulled.uz, 1, 2) / 2, zz], axis=2)
    return jnp.concatenate([top, bottom], axis=1)


@partial(jax.jit, static_argnums=(0, 1))
def _pull_evidence(
    law: Law,
    asked: tuple[str, ...],
    point: Point,
    near: Quadratic,
    design: Design,
    readings: Readings,
    weight: Array,
) -> tuple[Array, Array, Array]:
    """Gradient of the sum of weight (draw, 1 + asked) times (ln Z, ln variances), in conditions, times
    and values, the optimum moving with them."""

    def terms(u: Array, blocks: Quadratic, w: Array) -> Array:
        return (w * evidence_and_spread(law, asked, u, blocks)).sum()

    def pull(at: Point, blocks: Quadratic, values: Array, side: Array, w: Array) -> tuple[Array, ...]:
        d = at.u.shape[0]
        x = jnp.concatenate([jnp.broadcast_to(at.u, (at.z.shape[0], d)), at.z], axis=1)
        runs = _Place(x, design.conditions, design.times, values)
        in_u, in_blocks = jax.grad(terms, argnums=(0, 1))(at.u, blocks, w)

        def curved(place: _Place, arrow: Array, s: Array, m: Array) -> _Slope:
            return _forward(lambda p: _curved(law, p, in_blocks.value, arrow, s, m), place)

        direct = jax.vmap(curved)(runs, _arrow(in_blocks), side, design.mask)
        du = in_u + in_blocks.value * at.u + direct.x[:, :d].sum(0)
        dz = in_blocks.value * at.z + direct.x[:, d:]
        moving = eliminate(blocks._replace(u=du, z=dz))  # -H^-1 dG/dp
        way = jnp.concatenate([jnp.broadcast_to(moving.u, (at.z.shape[0], d)), moving.z], axis=1)

        def pushed(place: _Place, v: Array, s: Array, m: Array) -> _Slope:
            def along(p: _Place) -> Array:
                return jax.jvp(lambda y: _losses(law, p._replace(x=y), s, m), (p.x,), (v,))[1]

            return _forward(along, place)

        implied = jax.vmap(pushed)(runs, way, side, design.mask)
        return tuple(getattr(direct, k) + getattr(implied, k) for k in ("conditions", "times", "values"))

    conditions, times, values = jax.vmap(pull)(point, near, readings.values, readings.side, weight)
    return conditions.sum(0), times.sum(0), values


@partial(jax.jit, static_argnums=0)
def _pull_readings(law: Law, truth: Truth, design: Design, weight: Array) -> tuple[Array, Array]:
    """Gradient of sum(weight * values) in conditions and times, of the simulated readings."""

    def total(conditions: Array, times: Array) -> Array:
        made = jax.vmap(lambda u, z, e: simulate(law, u, z, e, conditions, times))(*truth)
        return (weight * made.values).sum()

    return jax.grad(total, argnums=(0, 1))(design.conditions, design.times)


def gradient(
    bench: Bench,
    design: Design,
    truths: list[Truth],
    scores: Scores,
    weights: tuple[np.ndarray, np.ndarray],
) -> tuple[np.ndarray, np.ndarray]:
    """Gradient in conditions (run, condition) and times (run, time) of a worth whose derivatives in
    log evidence (study, listed) and in ln variance of asked constants (study, asked) are ``weights``."""
    d_evidence, d_spread = weights  # (study, listed), (study, asked)
    readings = readings_of(bench, design, truths)
    conditions, times = np.zeros_like(design.conditions), np.zeros_like(design.times)
    d_values = np.zeros_like(readings.values)

    def pulled(row: int) -> list[tuple[np.ndarray, list[np.ndarray]]]:
        return _pulls(bench, row, design, readings, scores, d_evidence[:, row], d_spread)

    for parts in side_by_side(pulled, range(len(bench.listed))):
        for some, part in parts:
            conditions += part[0]
            times += part[1]
            d_values[some] += part[2][: len(some)]
    _through_readings(bench, design, truths, scores, d_values, readings, conditions, times)
    return conditions, times


def _pulls(
    bench: Bench,
    row: int,
    design: Design,
    readings: Readings,
    scores: Scores,
    d_evidence: np.ndarray,
    d_spread: np.ndarray,
) -> list[tuple[np.ndarray, list[np.ndarray]]]:
    """What one candidate's terms pull, batch by batch: rows of the batch, then gradients in conditions,
    times and values. Studies in which they carry no weight, or the fit failed, are left out."""
    law, fit = bench.laws[bench.listed[row]], scores.fits[row]
    asked = (ALL,) if bench.precision_by == "D" else tuple(name for name, _ in bench.asked)
    own = (scores.truth == row)[:, None] * d_spread
    usable = (fit.pivot > 0) & (fit.trouble == 0) & np.isfinite(fit.log_evidence)
    active = usable & ((np.abs(d_evidence) > NEGLIGIBLE) | (np.abs(own).max(1, initial=0) > 0))
    rows = np.flatnonzero(active)
    found = []
    for begin in range(0, len(rows), LANES):
        real = rows[begin : begin + LANES]
        some = np.resize(real, LANES)
        alive = (np.arange(LANES) < len(real)).astype(float)
        weight = np.concatenate([d_evidence[some, None], own[some]], axis=1) * alive[:, None]
        at, near = Point(fit.u[some], fit.z[some]), jax.tree.map(lambda x, s=some: x[s], scores.blocks[row])
        read = Readings(readings.values[some], readings.side[some])
        part = _pull_evidence(law, asked, at, near, design, read, weight)
        found.append((real, [np.asarray(x) for x in part]))
    return found


def _through_readings(
    bench: Bench,
    design: Design,
    truths: list[Truth],
    scores: Scores,
    d_values: np.ndarray,
    readings: Readings,
    conditions: np.ndarray,
    times: np.ndarray,
) -> None:
    """Add what the design does through the simulated readings (carried runs do not move)."""
    carried = len(bench.axes.carried.times)
    weight = np.where(readings.side == 0, d_values, 0.0) * design.mask
    weight[:, :carried] = 0.0
    for row, index in enumerate(bench.listed):
        mine = scores.truth == row
        pulled = _pull_readings(bench.laws[index], truths[row], design, weight[mine])
        conditions += np.asarray(pulled[0])
        times += np.asarray(pulled[1])


def worth(bench: Bench, scores: Scores) -> tuple[float, np.ndarray, np.ndarray, np.ndarray]:
    """What the search climbs, and its derivatives.

    worth = w I/H0 - (1 - w) E[ln(1 + (half-width/asked)^2)/2]

    with I/H0 the expected information about which law holds as a share of what is to be known, and w
    ``weight_on_law``. The second term is flat once the half-width is well below what is asked and
    falls like its logarithm above. Returns worth, its value in each study (weighted so that they sum to
    it), and derivatives in log evidence and ln variance.
    """
    odds = bench.odds
    counts = np.bincount(scores.truth, minlength=len(odds))
    share = odds[scores.truth] / counts[scores.truth]
    p = probabilities(bench, scores.log_evidence)
    rows = np.arange(len(p))
    entropy = -(odds * np.log(odds)).sum()
    on_law = bench.study.aim.weight_on_law if bench.asked else 1.0
    if entropy < 1e-12:
        on_law = 0.0
    scale = on_law / max(entropy, 1e-12)
    own = p[rows, scores.truth]
    told = scale * (np.log(np.maximum(own, 1e-300)) + entropy)
    d_evidence = -scale * share[:, None] * p
    d_evidence[rows, scores.truth] += scale * share
    loss, d_spread = _precision(bench, scores, share)
    each = share * told - (1 - on_law) * loss
    return float(each.sum()), each, d_evidence, -(1 - on_law) * d_spread


def _precision(bench: Bench, scores: Scores, share: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Weighted loss of precision of each study and its derivative in ln variance (study, asked)."""
    if not bench.asked:
        return np.zeros(len(share)), np.zeros((len(share), 0))
    wanted = np.array([width for _, width in bench.asked])
    widths = scores.half_width
    if bench.precision_by == "D":
        widths, wanted = scores.overall_width, wanted.mean(keepdims=True)
    has = np.isfinite(widths)
    total = np.maximum((share[:, None] * has).sum(0), 1e-300)  # laws without the constant do not count
    ratio = np.where(has, widths / wanted, 0.0) ** 2
    part = share[:, None] * has / total / len(wanted)
    return (part * np.log1p(ratio) / 2).sum(1), part * ratio / (1 + ratio) / 2
