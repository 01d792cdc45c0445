"""The evidence kernel: fit, log evidence and spread for a batch of data sets under one candidate.

For coordinates u (structural) and z (run, error), all N(0, 1) beforehand, with L the loss of the
readings (``likelihood``),

    F(u, z) = |u|^2/2 + |z|^2/2 + sum over runs of L_r(u, z_r)
    ln Z    = -F(u*, z*) - ln det H(u*, z*) / 2

at the joint optimum, with the exact Hessian H (Laplace; Tierney & Kadane 1986). H has the form of an
arrow: each run's block B_r = I + d2L/dz2 is eliminated, and what is left for the structural
coordinates is the Schur complement S = I + sum (d2L/du2 - C_r' B_r^-1 C_r); ln det H is the sum of
ln det B_r and ln det S, and S^-1 is the covariance of the structural coordinates.

Axis order everywhere: draw, run, time, signal; coordinates last.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import numpy as np

from designer import arrays
from designer.arrays import Array, jax, jnp
from designer.likelihood import Design, Readings, RunTerms, loss, run_terms
from designer.signals import Law, Signal

LONGEST_STEP = 1.5  # in structural coordinates, so in prior standard deviations
CONVERGED = 1e-6  # decrement at which a fit stops
MOST_STEPS = 30
LANES = 256  # data sets a compiled batch holds
DIFFERENCE = 1e-4  # step of central differences where the Hessian is formed from gradients


class Point(NamedTuple):
    """u (structural,), z (run, error)."""

    u: Array
    z: Array


class Quadratic(NamedTuple):
    """F near a point: value, gradients, and the blocks of its Hessian (prior included)."""

    value: Array
    u: Array  # (structural,)
    z: Array  # (run, error)
    uu: Array  # (structural, structural)
    uz: Array  # (run, structural, error)
    zz: Array  # (run, error, error)


class Factor(NamedTuple):
    """Result of the elimination: Newton step, ln det H, smallest pivot, S^-1 (structural, structural)."""

    u: Array
    z: Array
    log_determinant: Array
    pivot: Array
    covariance: Array


class Fit(NamedTuple):
    """Optimum of each data set and what Laplace makes of it (leading axis: draw)."""

    u: Array
    z: Array
    log_evidence: Array
    loss: Array  # F at the optimum
    decrement: Array  # expected fall of F still left; large = not converged
    pivot: Array  # smallest pivot of H; not positive = no minimum
    covariance: Array  # of the structural coordinates
    trouble: Array  # 1 where the trajectory failed


def quadratic(law: Law, point: Point, design: Design, readings: Readings, exact: bool) -> tuple[
    Quadratic, Quadratic, Array
]:
    """F at ``point`` with the exact and with the Gauss-Newton Hessian, and trouble. One data set."""
    structural = len(law.structural)

    def one(z: Array, run: Design, read: Readings) -> RunTerms:
        return run_terms(law, jnp.concatenate([point.u, z]), run, read, exact)

    terms = jax.vmap(one)(point.z, design, readings)
    value = (point.u**2).sum() / 2 + (point.z**2).sum() / 2 + terms.loss.sum()
    gradient_u = point.u + terms.gradient[:, :structural].sum(0)
    gradient_z = point.z + terms.gradient[:, structural:]

    def blocks(h: Array) -> Quadratic:
        uu = jnp.eye(structural) + h[:, :structural, :structural].sum(0)
        zz = jnp.eye(point.z.shape[1]) + h[:, structural:, structural:]
        return Quadratic(value, gradient_u, gradient_z, uu, h[:, :structural, structural:], zz)

    return blocks(terms.hessian), blocks(terms.gauss_newton), terms.trouble.max()


def eliminate(q: Quadratic, damping: Array | float = 0.0, free: Array | None = None) -> Factor:
    """Newton step -H^-1 g and ln det H by elimination of each run's block.

    damping multiplies the diagonals by 1 + damping; ``free`` (structural,) is 1 for coordinates that
    move and 0 for those held (their rows become those of the identity).
    """
    d, p = q.u.shape[0], q.z.shape[1]
    keep = jnp.ones(d) if free is None else free
    swell = 1 + damping
    b = [[q.zz[:, i, j] * (swell if i == j else 1.0) for j in range(p)] for i in range(p)]
    lower, pivot_z = arrays.cholesky(b) if p else ([], jnp.asarray(jnp.inf))
    half = [arrays.forward(lower, [q.uz[:, k, i] * keep[k] for i in range(p)]) for k in range(d)]
    half_g = arrays.forward(lower, [q.z[:, i] for i in range(p)])

    def inner(a: list[Array], c: list[Array]) -> Array:
        return sum(((x * y).sum() for x, y in zip(a, c, strict=True)), jnp.zeros(()))

    s = [[_held(q.uu, keep, k, m, swell) - inner(half[k], half[m]) for m in range(d)] for k in range(d)]
    right = [q.u[k] * keep[k] - inner(half[k], half_g) for k in range(d)]
    schur, pivot_u = arrays.cholesky(s) if d else ([], jnp.asarray(jnp.inf))
    step_u = [-x for x in arrays.solve(schur, right)]
    rest = [half_g[i] + sum(half[k][i] * step_u[k] for k in range(d)) for i in range(p)]
    step_z = [-x for x in arrays.backward(lower, rest)]
    log_determinant = arrays.log_determinant(schur) + (arrays.log_determinant(lower).sum() if p else 0.0)
    pivot = jnp.minimum(jnp.min(pivot_z), pivot_u)
    return Factor(
        jnp.stack(step_u) if d else q.u,
        jnp.stack(step_z, axis=-1) if p else q.z,
        log_determinant,
        pivot,
        _inverse(schur, d),
    )


def _held(uu: Array, keep: Array, k: int, m: int, swell: Array | float) -> Array:
    if k != m:
        return uu[k, m] * keep[k] * keep[m]
    return keep[k] * uu[k, k] * swell + (1 - keep[k])


def _inverse(lower: arrays.Matrix, size: int) -> Array:
    columns = [arrays.solve(lower, [jnp.asarray(float(i == j)) for i in range(size)]) for j in range(size)]
    return jnp.stack([jnp.stack(column) for column in columns]) if size else jnp.zeros((0, 0))


class _State(NamedTuple):
    point: Point
    exact: Quadratic
    safe: Quadratic  # Gauss-Newton
    trouble: Array
    damping: Array
    decrement: Array
    done: Array


def _begin(law: Law, point: Point, design: Design, readings: Readings) -> _State:
    exact, safe, trouble = quadratic(law, point, design, readings, law.second_order)
    return _State(point, exact, safe, trouble, jnp.asarray(1e-2), jnp.asarray(jnp.inf), jnp.asarray(False))


def _step(law: Law, state: _State, design: Design, readings: Readings, free: Array) -> _State:
    """One damped Newton step, Gauss-Newton where H is not positive; kept only if F falls."""
    exact, safe = eliminate(state.exact, state.damping, free), eliminate(state.safe, state.damping, free)
    use = exact.pivot > 1e-6
    du = jnp.where(use, exact.u, safe.u)
    dz = jnp.where(use, exact.z, safe.z)
    decrement = -(jnp.sum(state.exact.u * du) + jnp.sum(state.exact.z * dz)) / 2
    largest = jnp.maximum(jnp.max(jnp.abs(du), initial=0.0), jnp.max(jnp.abs(dz), initial=0.0) / 2)
    shrink = jnp.minimum(1.0, LONGEST_STEP / jnp.maximum(largest, 1e-12))
    trial = Point(state.point.u + shrink * du, state.point.z + shrink * dz)
    exact_t, safe_t, trouble_t = quadratic(law, trial, design, readings, law.second_order)
    better = exact_t.value <= state.exact.value + 1e-9 * (1 + jnp.abs(state.exact.value))
    better = better & (trouble_t == 0)
    converged = (decrement < CONVERGED) & better & (state.damping < 0.1)
    stalled = state.damping > 1e7
    damping = jnp.where(better, jnp.maximum(state.damping * 0.1, 1e-9), state.damping * 8)
    after = _State(trial, exact_t, safe_t, trouble_t, damping, decrement, converged)
    kept = state._replace(damping=damping, decrement=decrement, done=stalled)
    new = jax.tree.map(lambda a, b: jnp.where(better, a, b), after, kept)
    return jax.tree.map(lambda old, fresh: jnp.where(state.done, old, fresh), state, new)


def _minimise(
    law: Law, start: Point, design: Design, readings: Readings, free: Array, most: int
) -> _State:
    """Batched Newton-Levenberg; design shared by all data sets."""
    begin = jax.vmap(partial(_begin, law), in_axes=(0, None, 0))
    step = jax.vmap(partial(_step, law), in_axes=(0, None, 0, 0))

    def going(carry: tuple[Array, _State]) -> Array:
        return (carry[0] < most) & ~jnp.all(carry[1].done)

    def advance(carry: tuple[Array, _State]) -> tuple[Array, _State]:
        return carry[0] + 1, step(carry[1], design, readings, free)

    state = begin(start, design, readings)
    return jax.lax.while_loop(going, advance, (jnp.asarray(0), state))[1]


def hessian_by_differences(law: Law, point: Point, design: Design, readings: Readings) -> Quadratic:
    """F with its Hessian from central differences of the gradient (laws without cheap second derivatives)."""
    structural, size = len(law.structural), len(law.structural) + point.z.shape[1]
    base = quadratic(law, point, design, readings, False)[0]

    def gradient(x: Array, run: Design, read: Readings) -> Array:
        return run_terms(law, x, run, read, False).gradient

    def one(z: Array, run: Design, read: Readings) -> Array:
        x = jnp.concatenate([point.u, z])
        move = DIFFERENCE * jnp.eye(size)
        up = jax.vmap(lambda m: gradient(x + m, run, read))(move)
        down = jax.vmap(lambda m: gradient(x - m, run, read))(move)
        h = (up - down) / (2 * DIFFERENCE)
        return (h + h.T) / 2

    h = jax.vmap(one)(point.z, design, readings)
    uu = jnp.eye(structural) + h[:, :structural, :structural].sum(0)
    zz = jnp.eye(size - structural) + h[:, structural:, structural:]
    return base._replace(uu=uu, uz=h[:, :structural, structural:], zz=zz)


def _finish(law: Law, state: _State, design: Design, readings: Readings, free: Array) -> Fit:
    exact = state.exact
    if not law.second_order:
        exact = hessian_by_differences(law, state.point, design, readings)
    factor = eliminate(exact, 0.0, free)
    good = factor.pivot > 0
    safe = eliminate(state.safe, 0.0, free)
    log_determinant = jnp.where(good, factor.log_determinant, safe.log_determinant)
    decrement = -(jnp.sum(exact.u * free * factor.u) + jnp.sum(exact.z * factor.z)) / 2
    decrement = jnp.where(good, jnp.abs(decrement), jnp.inf)
    log_evidence = -exact.value - log_determinant / 2
    covariance = jnp.where(good, factor.covariance, safe.covariance)
    return Fit(
        state.point.u, state.point.z, log_evidence, exact.value, decrement, factor.pivot, covariance, state.trouble
    )


def scan(law: Law, design: Design, readings: Readings, nodes: Array) -> Array:
    """F without run errors at structural ``nodes`` (node, structural) for every data set: (draw, node).

    The curves are shared by all data sets, so a scan costs little.
    """
    errors = jnp.zeros((design.times.shape[0], len(law.errors)))

    def curves(u: Array) -> Signal:
        return jax.vmap(law.read, in_axes=(None, 0, 0, 0))(u, errors, design.conditions, design.times)

    signal = jax.vmap(curves)(nodes)

    def one(read: Readings) -> Array:
        at = loss(law, signal, read, design.mask) + (nodes**2).sum(-1) / 2
        bad = signal.trouble.max(-1) > 0
        return jnp.where(jnp.isfinite(at) & ~bad, at, jnp.inf)

    return jax.vmap(one)(readings)


class Kernel:
    """Compiled evidence of one candidate. Batches of any size are cut into padded lanes, so that one
    compilation serves them all."""

    def __init__(self, law: Law, lanes: int = LANES) -> None:
        self.law = law
        self.lanes = lanes
        self.nodes = scan_nodes(len(law.structural))
        self._cold = jax.jit(self._fit_cold)
        self._warm = jax.jit(self._fit_warm)
        self._scan = jax.jit(partial(scan, law))

    def _fit_cold(self, design: Design, readings: Readings, nodes: Array) -> Fit:
        at = scan(self.law, design, readings, nodes)
        u = nodes[jnp.argmin(at, axis=1)]
        z = jnp.zeros((u.shape[0], design.times.shape[0], len(self.law.errors)))
        return self._fit_warm(design, readings, Point(u, z), jnp.ones_like(u))

    def _fit_warm(self, design: Design, readings: Readings, start: Point, free: Array) -> Fit:
        state = _minimise(self.law, start, design, readings, free, MOST_STEPS)
        finish = jax.vmap(partial(_finish, self.law), in_axes=(0, None, 0, 0))
        return finish(state, design, readings, free)

    def best_nodes(self, design: Design, readings: Readings, count: int) -> np.ndarray:
        """The ``count`` best structural nodes of every data set: (draw, count, structural)."""
        at = np.asarray(self._scan(design, readings, self.nodes))
        order = np.argsort(at, axis=1)[:, :count]
        return np.asarray(self.nodes)[order]

    def fit(
        self,
        design: Design,
        readings: Readings,
        start: Point | None = None,
        free: Array | None = None,
    ) -> Fit:
        """Fit every data set of ``readings`` (draw, run, time, signal); arrays of the result are numpy.

        start: warm start of each data set; without it the structural nodes are scanned. free (draw,
        structural) is 1 for structural coordinates that move and 0 for those held at the start.
        """
        if start is not None and free is None:
            free = np.ones_like(start.u)
        count = np.shape(readings.values)[0]
        parts = []
        for begin in range(0, count, self.lanes):
            rows = np.minimum(np.arange(begin, begin + self.lanes), count - 1)
            some = Readings(*(np.asarray(x)[rows] for x in readings))
            if start is None:
                fit = self._cold(design, some, self.nodes)
            else:
                begin_at = Point(*(np.asarray(x)[rows] for x in start))
                fit = self._warm(design, some, begin_at, np.asarray(free)[rows])
            parts.append([np.asarray(x)[: count - begin] for x in fit])
        return Fit(*(np.concatenate(column) for column in zip(*parts, strict=True)))


def scan_nodes(size: int) -> Array:
    """Structural coordinates at which a cold fit looks first: 13 for one unknown, 65 for two, then
    more, spread like the prior out to about 3 standard deviations."""
    if size == 0:
        return jnp.zeros((1, 0))
    if size == 1:
        return jnp.linspace(-3, 3, 13)[:, None]
    from scipy.stats import norm, qmc

    count = 2 ** (5 + min(size, 5))
    points = qmc.Sobol(size, scramble=False).random(count)[1:]
    spread = norm.ppf(points) * 1.25
    return jnp.asarray(np.vstack([np.zeros(size), spread]))
