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

from collections.abc import Callable
from functools import partial
from typing import Any, NamedTuple

import numpy as np

from designer import arrays
from designer.arrays import Array, jax, jnp
from designer.likelihood import Design, Readings, RunTerms, loss, reading_losses, run_terms
from designer.signals import Law, Signal

LONGEST_STEP = 1.5  # in structural coordinates, so in prior standard deviations
LEAST_PIVOT = 1e-6  # of H, below which it is not taken for positive
CONVERGED = 1e-5  # decrement at which a fit stops
STEPS = 6  # of a batch, after which those that need more are gathered
MOST_ROUNDS = 6
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
    """Result of the elimination: Newton step, ln det H, smallest pivot, S^-1 (structural,
    structural), ln det S."""

    u: Array
    z: Array
    log_determinant: Array
    pivot: Array
    covariance: Array
    structural: Array


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


def quadratic(
    law: Law, point: Point, design: Design, readings: Readings, exact: bool
) -> tuple[Quadratic, Quadratic, Array]:
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


def total_loss(law: Law, point: Point, design: Design, readings: Readings) -> Array:
    """F at a point of one data set, without derivatives."""

    def run(z: Array, one: Design, read: Readings) -> Array:
        signal = law.read(point.u, z, one.conditions, one.times)
        return reading_losses(law, signal, read, one.mask).sum()

    prior = (point.u**2).sum() / 2 + (point.z**2).sum() / 2
    return prior + jax.vmap(run)(point.z, design, readings).sum()


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
    structural = arrays.log_determinant(schur)
    log_determinant = structural + (arrays.log_determinant(lower).sum() if p else 0.0)
    pivot = jnp.minimum(jnp.min(pivot_z), pivot_u)
    return Factor(
        jnp.stack(step_u) if d else q.u,
        jnp.stack(step_z, axis=-1) if p else q.z,
        log_determinant,
        pivot,
        _inverse(schur, d),
        structural,
    )


def _held(uu: Array, keep: Array, k: int, m: int, swell: Array | float) -> Array:
    if k != m:
        return uu[k, m] * keep[k] * keep[m]
    return keep[k] * uu[k, k] * swell + (1 - keep[k])


def _inverse(lower: arrays.Matrix, size: int) -> Array:
    columns = [arrays.solve(lower, [jnp.asarray(float(i == j)) for i in range(size)]) for j in range(size)]
    return jnp.stack([jnp.stack(column) for column in columns]) if size else jnp.zeros((0, 0))


class State(NamedTuple):
    """Where a fit stands: the best point so far with F there (Gauss-Newton's matrix where the exact one
    is not positive), the point to be tried next, damping, decrement (expected fall of F still left),
    and whether it is over."""

    best: Point
    near: Quadratic
    pivot: Array  # smallest of the exact Hessian
    trouble: Array
    trial: Point
    damping: Array
    decrement: Array
    done: Array


def _blank(law: Law, start: Point) -> State:
    """Fits about to begin (leading axis: draw): nothing is known, so whatever the start gives is better."""
    count, runs, p = start.z.shape
    d = len(law.structural)
    near = Quadratic(
        np.full(count, np.inf),
        np.zeros((count, d)),
        np.zeros((count, runs, p)),
        np.tile(np.eye(d), (count, 1, 1)),
        np.zeros((count, runs, d, p)),
        np.tile(np.eye(p), (count, runs, 1, 1)),
    )
    one = np.ones(count)
    return State(start, near, one, one, start, 0.1 * one, np.inf * one, np.zeros(count, bool))


def _step(law: Law, state: State, design: Design, readings: Readings, free: Array) -> State:
    """Look at the trial point, keep it if F falls, and propose the next by a damped Newton step."""
    exact, safe, trouble = quadratic(law, state.trial, design, readings, law.second_order)
    pivot = eliminate(exact, 0.0, free).pivot
    near = jax.tree.map(lambda a, b: jnp.where(pivot > LEAST_PIVOT, a, b), exact, safe)
    tolerance = 1e-9 * (1 + jnp.abs(near.value))
    better = (near.value <= state.near.value + tolerance) & (trouble == 0)
    fresh, old = (state.trial, near, pivot, trouble), (state.best, state.near, state.pivot, state.trouble)
    best, near, pivot, trouble = jax.tree.map(lambda a, b: jnp.where(better, a, b), fresh, old)
    damping = jnp.where(better, jnp.maximum(state.damping * 0.1, 1e-9), state.damping * 8)
    move = eliminate(near, damping, free)
    decrement = -(jnp.sum(near.u * free * move.u) + jnp.sum(near.z * move.z)) / 2
    settled = (state.decrement < CONVERGED) & better
    largest = jnp.maximum(jnp.max(jnp.abs(move.u), initial=0.0), jnp.max(jnp.abs(move.z), initial=0.0) / 2)
    shrink = jnp.minimum(1.0, LONGEST_STEP / jnp.maximum(largest, 1e-12))
    trial = Point(best.u + shrink * move.u, best.z + shrink * move.z)
    done = settled | (damping > 1e7)
    after = State(best, near, pivot, trouble, trial, damping, decrement, done)
    return jax.tree.map(lambda a, b: jnp.where(state.done, a, b), state, after)


def _advance(law: Law, state: State, design: Design, readings: Readings, free: Array) -> tuple[State, Fit]:
    """Up to STEPS steps of every data set (leading axis of state, readings, free); one design for all."""
    step = jax.vmap(partial(_step, law), in_axes=(0, None, 0, 0))

    def going(carry: tuple[Array, State]) -> Array:
        return (carry[0] < STEPS) & ~jnp.all(carry[1].done)

    def onward(carry: tuple[Array, State]) -> tuple[Array, State]:
        return carry[0] + 1, step(carry[1], design, readings, free)

    state = jax.lax.while_loop(going, onward, (jnp.asarray(0), state))[1]
    return state, jax.vmap(_laplace)(state, state.near, state.near, free)


def _laplace(state: State, exact: Quadratic, safe: Quadratic, free: Array) -> Fit:
    """Log evidence from the best point; the determinant of ``safe`` where ``exact`` is not positive."""
    factor = eliminate(exact, 0.0, free)
    good = factor.pivot > LEAST_PIVOT
    instead = factor if exact is safe else eliminate(safe, 0.0, free)
    log_determinant = jnp.where(good, factor.log_determinant, instead.log_determinant)
    pivot = state.pivot if exact is safe else factor.pivot
    return Fit(
        state.best.u,
        state.best.z,
        -exact.value - log_determinant / 2,
        exact.value,
        jnp.abs(state.decrement),
        pivot,
        jnp.where(good, factor.covariance, instead.covariance),
        state.trouble,
    )


def _exactly(law: Law, state: State, design: Design, readings: Readings, free: Array) -> Fit:
    """Laplace with the Hessian from differences of the gradient (laws without cheap second derivatives)."""
    differences = jax.vmap(partial(hessian_by_differences, law), in_axes=(0, 0, None, 0))
    exact = differences(state.best, state.near, design, readings)
    return jax.vmap(_laplace)(state, exact, state.near, free)


def hessian_by_differences(
    law: Law, point: Point, base: Quadratic, design: Design, readings: Readings
) -> Quadratic:
    """``base`` (F at ``point``) with its Hessian from central differences of the gradient, for laws without
    cheap second derivatives."""
    structural, size = len(law.structural), len(law.structural) + point.z.shape[1]
    moves = DIFFERENCE * jnp.concatenate([jnp.eye(size), -jnp.eye(size)])

    def one(z: Array, run: Design, read: Readings) -> Array:
        x = jnp.concatenate([point.u, z])
        slopes = jax.vmap(lambda m: run_terms(law, x + m, run, read, False).gradient)(moves)
        h = (slopes[:size] - slopes[size:]) / (2 * DIFFERENCE)
        return (h + h.T) / 2

    h = jax.vmap(one)(point.z, design, readings)
    uu = jnp.eye(structural) + h[:, :structural, :structural].sum(0)
    zz = jnp.eye(size - structural) + h[:, structural:, structural:]
    return base._replace(uu=uu, uz=h[:, :structural, structural:], zz=zz)


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
    compilation serves them all; data sets that need more steps than most are gathered and run on."""

    def __init__(self, law: Law, lanes: int = LANES) -> None:
        self.law = law
        self.lanes = lanes
        self.nodes = scan_nodes(len(law.structural))
        self._scan = jax.jit(partial(scan, law))
        self._advance = jax.jit(partial(_advance, law))
        self._exactly = jax.jit(partial(_exactly, law))

    def best_nodes(self, design: Design, readings: Readings, count: int) -> np.ndarray:
        """The ``count`` best structural nodes of every data set: (draw, count, structural)."""
        total = np.shape(readings.values)[0]
        at = [
            np.asarray(self._scan(design, _some(readings, rows), self.nodes)) for rows in self._lanes(total)
        ]
        order = np.argsort(np.concatenate(at)[:total], axis=1)[:, :count]
        return np.asarray(self.nodes)[order]

    def fit(
        self,
        design: Design,
        readings: Readings,
        start: Point | None = None,
        free: np.ndarray | None = None,
    ) -> Fit:
        """Fit every data set of ``readings`` (draw, run, time, signal); arrays of the result are numpy.

        start: warm start of each data set; without it the structural nodes are scanned. free (draw,
        structural) is 1 for structural coordinates that move and 0 for those held at the start.
        """
        return self.fit_and_blocks(design, readings, start, free)[0]

    def fit_and_blocks(
        self,
        design: Design,
        readings: Readings,
        start: Point | None = None,
        free: np.ndarray | None = None,
        exact: bool = True,
    ) -> tuple[Fit, Quadratic]:
        """``fit``, and the blocks of F at each optimum, from which its neighbourhood can be worked out.

        exact: False leaves Gauss-Newton's determinant to laws without cheap second derivatives, which
        is good enough to compare plans by and several times cheaper.
        """
        count = np.shape(readings.values)[0]
        if start is None:
            u = self.best_nodes(design, readings, 1)[:, 0]
            start = Point(u, np.zeros((count, len(design.times), len(self.law.errors))))
        free = np.ones_like(start.u) if free is None else np.asarray(free)
        state, fit = self._run(design, readings, free, _blank(self.law, start))
        for _ in range(MOST_ROUNDS - 1):
            rest = np.flatnonzero(~state.done)
            if len(rest) == 0:
                break
            more = self._run(design, _some(readings, rest), free[rest], _some(state, rest))
            for whole, part in zip(jax.tree.leaves((state, fit)), jax.tree.leaves(more), strict=True):
                whole[rest] = part
        if exact and not self.law.second_order:
            fit = self._in_lanes(self._exactly, state, design, readings, free)
        return fit, state.near

    def _run(self, design: Design, readings: Readings, free: np.ndarray, state: State) -> tuple[State, Fit]:
        return self._in_lanes(self._advance, state, design, readings, free)

    def _in_lanes(
        self, function: Callable, state: State, design: Design, readings: Readings, free: np.ndarray
    ) -> Any:
        count = len(free)

        def batch(rows: np.ndarray) -> Any:
            done = function(_some(state, rows), design, _some(readings, rows), free[rows])
            return jax.tree.map(np.asarray, done)

        parts = arrays.side_by_side(batch, self._lanes(count))
        return jax.tree.map(lambda *x: np.concatenate(x)[:count], *parts)

    def _lanes(self, count: int) -> list[np.ndarray]:
        """Rows of each padded batch; the last one repeats the last data set."""
        begins = range(0, max(count, 1), self.lanes)
        return [np.minimum(np.arange(begin, begin + self.lanes), count - 1) for begin in begins]


def _some(tree: Any, rows: np.ndarray) -> Any:
    return jax.tree.map(lambda x: np.asarray(x)[rows], tree)


def scan_nodes(size: int) -> Array:
    """Structural coordinates at which a cold fit looks first: 13 for one unknown, 128 for two, 256 for
    more, spread a quarter wider than the prior."""
    if size == 0:
        return jnp.zeros((1, 0))
    if size == 1:
        return jnp.linspace(-3, 3, 13)[:, None]
    from scipy.stats import norm, qmc

    points = qmc.Sobol(size, scramble=False).random(2 ** (5 + min(size, 3)))[1:]
    spread = norm.ppf(points) * 1.25
    return jnp.asarray(np.vstack([np.zeros(size), spread]))
