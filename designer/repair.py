"""Log evidence where Laplace alone cannot be trusted: quadrature along the worst-determined coordinate.

The structural coordinate of largest marginal variance is held at a row of nodes; at each, the others
and the run coordinates are optimised anew and integrated, by five Gauss-Hermite nodes in the next
worst coordinate and by Laplace in what is left. Along the row the trapezoidal rule is used, which
converges faster than any power for a density that falls off smoothly at both ends; the same rule
with every second node left out gives its error.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from designer.evidence import Fit, Kernel, Point
from designer.likelihood import Design, Readings

FIRST_NODES = 13  # over +- 6 Laplace standard deviations, to find where the density lies
NODES = 25
DEPTH = 14.0  # nats below the top at which the density is left out
INNER_NODES = 5
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
    density = _along(kernel, design, readings, fit, axis, nodes, inner=structural > 1)
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
