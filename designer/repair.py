"""Log evidence where Laplace alone cannot be trusted: quadrature along the worst-determined coordinate.

The structural coordinate of largest marginal variance is held at a row of nodes; at each, the others
and the run coordinates are optimised anew and integrated, by five Gauss-Hermite nodes in the next
worst coordinate and by Laplace in what is left. Along the row the trapezoidal rule is used, which
converges faster than any power for a density that falls off smoothly at both ends; the same rule
with every second node left out gives its error.

In the coordinates of a run Laplace errs where a reading there is cut off at a limit, or hangs on the
errors of the run exponentially (a reactant all but used up). ``of_runs`` integrates each run along one
line through the optimum, at fixed structural coordinates, so that it adds to either of the above.
"""

from __future__ import annotations

from functools import partial
from typing import NamedTuple

import numpy as np

from designer import arrays
from designer.arrays import Array, jax, jnp
from designer.evidence import Fit, Kernel, Point
from designer.likelihood import Design, Readings, mean_weights, reading_losses
from designer.signals import Law

FIRST_NODES = 13  # over +- 6 Laplace standard deviations, to find where the density lies
NODES = 25
DEPTH = 14.0  # nats below the top at which the density is left out
INNER_NODES = 5
LINE = np.linspace(-7, 7, 29)  # in Laplace standard deviations of a run
OTHERS = 6  # readings of a run whose lines are looked at besides
NEARBY = 0.01  # of those, over which the curvature at the optimum is differenced
NORMAL = -np.log(2 * np.pi) / 2  # of the prior in a held coordinate; in Laplace it cancels with det H


class Repaired(NamedTuple):
    """log_evidence (draw,) and its error: what leaving out every second node changes."""

    log_evidence: np.ndarray
    error: np.ndarray


def glance(kernel: Kernel, design: Design, readings: Readings, fit: Fit) -> Repaired:
    """A quick look along the worst-determined coordinate: 13 nodes one standard deviation apart,
    Laplace on everything else. The error is the largest of: its difference from Laplace, the change
    with half the nodes, the share of the density at the ends."""
    structural = fit.u.shape[1]
    if structural == 0 or len(fit.u) == 0:
        return Repaired(fit.log_evidence, np.zeros_like(fit.log_evidence))
    axis, spread = _worst(fit)
    centre = fit.u[np.arange(len(axis)), axis]
    nodes = centre[:, None] + spread[:, None] * np.linspace(-6, 6, FIRST_NODES)
    density = _along(kernel, design, readings, fit, axis, nodes, inner=False)
    log_evidence = _trapezoid(density, spread) + NORMAL
    ends = np.exp(np.maximum(density[:, 0], density[:, -1]) - density.max(1))
    coarse = _trapezoid(density[:, ::2], 2 * spread) + NORMAL
    # a Gaussian sampled two standard deviations apart is itself off by 2 exp(-pi^2/2) = 0.014
    halving = np.maximum(np.abs(coarse - log_evidence) - 0.015, 0.0)
    off = np.abs(log_evidence - fit.log_evidence)
    error = np.maximum(np.maximum(off, halving), ends)
    return Repaired(log_evidence, np.where(np.isfinite(error), error, np.inf))


def _worst(fit: Fit) -> tuple[np.ndarray, np.ndarray]:
    """Index and standard deviation of the structural coordinate of largest marginal variance."""
    spread = np.sqrt(np.einsum("nii->ni", fit.covariance))
    axis = spread.argmax(1)
    return axis, spread[np.arange(len(axis)), axis]


def quadrature(kernel: Kernel, design: Design, readings: Readings, fit: Fit) -> Repaired:
    """Log evidence of every data set by quadrature around ``fit`` (module docstring).

    readings: (draw, run, time, signal); fit: the optimum of each. Without structural coordinates
    there is nothing to integrate along and Laplace's value is returned.
    """
    structural = fit.u.shape[1]
    if structural == 0 or len(fit.u) == 0:
        return Repaired(fit.log_evidence, np.zeros_like(fit.log_evidence))
    axis, spread = _worst(fit)
    low, high = _where_it_lies(kernel, design, readings, fit, axis, spread)
    nodes = np.linspace(low, high, NODES, axis=1)
    # where second derivatives are dear, Laplace has to do for the next worst coordinate
    inner = structural > 1 and kernel.law.second_order
    density = _along(kernel, design, readings, fit, axis, nodes, inner=inner)
    step = (high - low) / (NODES - 1)
    fine = _trapezoid(density, step)
    coarse = _trapezoid(density[:, ::2], 2 * step)
    return Repaired(fine + NORMAL, np.abs(fine - coarse))


def _trapezoid(log_density: np.ndarray, step: np.ndarray) -> np.ndarray:
    weights = np.ones(log_density.shape[1])
    weights[[0, -1]] = 0.5
    top = log_density.max(1)
    return top + np.log((weights * np.exp(log_density - top[:, None])).sum(1) * step)


def _where_it_lies(
    kernel: Kernel, design: Design, readings: Readings, fit: Fit, axis: np.ndarray, spread: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Ends of the stretch of the held coordinate that carries the density."""
    rows = np.arange(len(axis))
    centre, reach = fit.u[rows, axis], 6 * spread
    low, high = centre - reach, centre + reach
    for _ in range(4):
        nodes = np.linspace(low, high, FIRST_NODES, axis=1)
        density = _along(kernel, design, readings, fit, axis, nodes, inner=False)
        level = density.max(1) - DEPTH
        wide_low, wide_high = density[:, 0] > level, density[:, -1] > level
        if not (wide_low | wide_high).any():
            break
        width = high - low
        low, high = low - wide_low * width / 2, high + wide_high * width / 2
    inside = density > level[:, None]
    first = np.maximum(inside.argmax(1) - 1, 0)
    last = np.minimum(FIRST_NODES - inside[:, ::-1].argmax(1), FIRST_NODES - 1)
    return nodes[rows, first], nodes[rows, last]


def _along(
    kernel: Kernel,
    design: Design,
    readings: Readings,
    fit: Fit,
    axis: np.ndarray,
    nodes: np.ndarray,
    inner: bool,
) -> np.ndarray:
    """Log of the marginal density of the held coordinate at ``nodes`` (draw, node), up to the prior's
    constant: Laplace, with Gauss-Hermite in one more coordinate if ``inner``."""
    count, each = nodes.shape
    rows = np.repeat(np.arange(count), each)
    repeated = Readings(*(np.asarray(x)[rows] for x in readings))
    held = axis[rows]
    index = np.arange(len(rows))
    slope = fit.covariance[rows, :, held] / fit.covariance[rows, held, held][:, None]
    move = nodes.ravel() - fit.u[rows, held]
    start = Point(fit.u[rows] + move[:, None] * slope, fit.z[rows])
    start.u[index, held] = nodes.ravel()
    free = np.ones_like(start.u)
    free[index, held] = 0.0
    at = kernel.fit(design, repeated, start, free)
    density = np.where(at.trouble > 0, -np.inf, at.log_evidence)
    if inner:
        density = _inner(kernel, design, repeated, at, held, free)
    return density.reshape(count, each)


def _inner(
    kernel: Kernel, design: Design, readings: Readings, at: Fit, held: np.ndarray, free: np.ndarray
) -> np.ndarray:
    """ln of the integral over the next worst coordinate by Gauss-Hermite about each optimum."""
    abscissae, weights = np.polynomial.hermite_e.hermegauss(INNER_NODES)
    index = np.arange(len(held))
    spread = np.sqrt(np.einsum("nii->ni", at.covariance)) * free
    second = np.where(free > 0, spread, -1.0).argmax(1)
    width = spread[index, second]
    slope = at.covariance[index, :, second] / at.covariance[index, second, second][:, None] * free
    total = []
    fixed = free.copy()
    fixed[index, second] = 0.0
    for x, weight in zip(abscissae, weights, strict=True):
        u = at.u + (x * width)[:, None] * slope
        part = kernel.fit(design, readings, Point(u, at.z), fixed)
        total.append(part.log_evidence + x * x / 2 + np.log(weight * width))
    stacked = np.stack(total)
    top = stacked.max(0)
    return top + np.log(np.exp(stacked - top).sum(0)) + NORMAL


class Added(NamedTuple):
    """What a line through each run adds to ln Z (draw, run), and how far other lines disagree (draw, run)."""

    value: np.ndarray
    doubt: np.ndarray


def of_runs(kernel: Kernel, design: Design, readings: Readings, fit: Fit) -> Added:
    """What a line through each run adds to Laplace's ln Z.

    With G the loss of a run and its prior at fixed structural coordinates, and d a direction in the run's
    coordinates: ln of the integral of exp(G(z*) - G(z* + t d)) over t, less the same for the parabola
    at z*. Two directions are tried, that of the best-measured reading and that of the censored ones, each
    with the rest of the run's coordinates following; the larger result counts. Lines along a few other
    readings that would add more (a reaction that stops abruptly between two readings), and density left at
    the end of a line, are doubts.
    """
    count, law = len(fit.u), kernel.law
    found = Added(np.zeros((count, len(design.times))), np.zeros((count, len(design.times))))
    if not law.errors:
        return found
    for begin in range(0, count, kernel.lanes):
        rows = np.minimum(np.arange(begin, begin + kernel.lanes), count - 1)
        some = Readings(*(np.asarray(x)[rows] for x in readings))
        value, doubt = _of_runs(law, design, some, Point(fit.u[rows], fit.z[rows]))
        found.value[rows], found.doubt[rows] = np.asarray(value), np.asarray(doubt)
    return found


@partial(jax.jit, static_argnums=0)
def _of_runs(law: Law, design: Design, readings: Readings, point: Point) -> tuple[Array, Array]:
    one = jax.vmap(partial(_of_one_run, law), in_axes=(None, 0, 0, 0))
    return jax.vmap(lambda p, r: one(p.u, p.z, design, r))(point, readings)


def _of_one_run(law: Law, u: Array, z: Array, run: Design, readings: Readings) -> tuple[Array, Array]:
    steps = jnp.concatenate([jnp.asarray(LINE), jnp.asarray([0.0, NEARBY, -NEARBY])])

    def lost(at: Array) -> Array:
        signal = law.read(u, at, run.conditions, run.times)
        return reading_losses(law, signal, readings, run.mask).sum() + (at**2).sum() / 2

    def line(direction: Array) -> tuple[Array, Array]:
        at = jax.vmap(lambda t: lost(z + t * direction))(steps)
        rise = at[:-3] - at[-3]
        curvature = (at[-2] + at[-1] - 2 * at[-3]) / NEARBY**2
        area = jnp.log(jnp.exp(-rise).sum() * (LINE[1] - LINE[0]))
        value = area + jnp.log(jnp.maximum(curvature, 1e-12) / (2 * jnp.pi)) / 2
        # a direction of length 0 stands for "nothing to look at"
        known = jnp.isfinite(value) & (curvature > 0.01)
        return jnp.where(known, value, 0.0), jnp.where(known, jnp.exp(-jnp.minimum(rise[0], rise[-1])), 0.0)

    value, ends = jax.vmap(line)(_directions(law, u, z, run, readings))
    added = value[jnp.argmax(jnp.abs(value[:2]))]
    return added, jnp.maximum(jnp.abs(value).max() - jnp.abs(added), 0.0) + ends.max()


def _directions(law: Law, u: Array, z: Array, run: Design, readings: Readings) -> Array:
    """Directions (direction, error) in a run's coordinates, of unit length in Gauss-Newton's standard
    deviations: of the best-measured reading, of the censored ones, of some spread over the run."""
    size = len(z)
    read = lambda at: law.read(u, at, run.conditions, run.times)  # noqa: E731
    signal, slopes = jax.vmap(lambda v: jax.jvp(read, (z,), (v,)), out_axes=(None, 0))(jnp.eye(size))
    slopes = slopes.mean.reshape(size, -1).T
    weight = mean_weights(law, signal, readings, run.mask).reshape(-1)
    block = jnp.eye(size) + (weight[:, None, None] * slopes[:, :, None] * slopes[:, None, :]).sum(0)
    lower, _ = arrays.cholesky([[block[i, j] for j in range(size)] for i in range(size)])
    rows = (run.mask / jnp.sqrt(signal.variance)).reshape(-1)[:, None] * slopes
    white = jnp.stack(arrays.forward(lower, [rows[:, i] for i in range(size)]), axis=-1)
    unit = white / _length(white)[:, None]
    cut = (readings.side.reshape(-1)[:, None] * unit).sum(0)
    spread = np.unique(np.linspace(0, unit.shape[0] - 1, OTHERS).round().astype(int))
    best = unit[jnp.argmax(_length(white))]
    several = jnp.concatenate([jnp.stack([best, cut / _length(cut)]), unit[spread]])
    return jnp.stack(arrays.backward(lower, [several[:, i] for i in range(size)]), axis=-1)


def _length(vector: Array) -> Array:
    return jnp.maximum(jnp.sqrt((vector**2).sum(-1)), 1e-150)
