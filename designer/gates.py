"""Log evidence fit to be reported: Laplace where it can be shown to hold, repaired where not.

Gate N  a fit that did not converge, or ended where H is not positive, is begun again from the best
        five structural nodes; if that fails it is flagged.
Gate S  a glance along the worst-determined structural coordinate (``repair.glance``) that differs
        from Laplace calls for the full quadrature.
Gate R  a line through each run's coordinates (``repair.of_runs``): what it adds is added, and where that
        is much, or another line would add more, the value is flagged. It answers for readings cut
        off at a limit, and for reactions that stop abruptly.

What is left doubtful is flagged with an error, never silent.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from designer import repair
from designer.evidence import Fit, Kernel, Point
from designer.likelihood import Design, Readings

NOT_CONVERGED = 1e-3  # decrement above which gate N fires
GLANCE = 0.02  # nats by which a glance may differ from Laplace
DOUBTFUL = 0.05  # error above which a value is flagged
STARTS = 5
MOST_ADDED = 0.5  # nats by gate R for one run; more comes from a kink, not from a bend, and is not believed
LINE_ERROR = 0.1  # of what gate R adds: trials against brute force left 0.03 to 0.1 of it


class Assured(NamedTuple):
    """log_evidence (draw,), its stated error, whether it was repaired, whether it is still doubtful,
    and the optimum found."""

    log_evidence: np.ndarray
    error: np.ndarray
    repaired: np.ndarray
    flagged: np.ndarray
    fit: Fit


def careful_fit(kernel: Kernel, design: Design, readings: Readings, start: Point | None = None) -> Fit:
    """Fit, and begin again from several nodes whatever did not converge (gate N)."""
    fit = kernel.fit(design, readings, start)
    again = np.flatnonzero(not_converged(fit))
    if len(again) == 0 or fit.u.shape[1] == 0:
        return fit
    some = Readings(*(np.asarray(x)[again] for x in readings))
    nodes = kernel.best_nodes(design, some, STARTS)
    tries = []
    for index in range(nodes.shape[1]):
        u = nodes[:, index]
        z = np.zeros((len(again), *fit.z.shape[1:]))
        tries.append(kernel.fit(design, some, Point(u, z)))
    return _lowest(fit, again, tries)


def _lowest(fit: Fit, again: np.ndarray, tries: list[Fit]) -> Fit:
    old = Fit(*(x[again] for x in fit))
    stacked = [np.stack(column) for column in zip(old, *tries, strict=True)]
    choices = Fit(*stacked)
    bad = not_converged(choices) * 1e6
    best = np.where(np.isfinite(choices.loss), choices.loss + bad, np.inf).argmin(0)
    lanes = np.arange(len(again))
    merged = [x.copy() for x in fit]
    for column, options in zip(merged, stacked, strict=True):
        column[again] = options[best, lanes]
    return Fit(*merged)


def not_converged(fit: Fit) -> np.ndarray:
    """Gate N."""
    return ~(fit.decrement <= NOT_CONVERGED) | ~(fit.pivot > 0) | (fit.trouble > 0)


def assured(
    kernel: Kernel,
    design: Design,
    readings: Readings,
    start: Point | None = None,
    matters: np.ndarray | None = None,
    fit: Fit | None = None,
) -> Assured:
    """Log evidence of every data set through all gates.

    matters: True for data sets where this candidate is near enough to the best for its error to
    count (all by default); the others keep Laplace's value.
    """
    fit = careful_fit(kernel, design, readings, start) if fit is None else fit
    count = len(fit.log_evidence)
    value, error = fit.log_evidence.copy(), np.zeros(count)
    repaired = np.zeros(count, bool)
    rows = np.flatnonzero(np.ones(count, bool) if matters is None else matters)
    some, at = _rows(readings, rows), Fit(*(x[rows] for x in fit))
    quick = repair.glance(kernel, design, some, at)
    value[rows], error[rows] = quick.log_evidence, np.minimum(quick.error, GLANCE)
    failed = not_converged(at)
    doubtful = rows[(quick.error > GLANCE) | failed]
    if len(doubtful):
        full = repair.quadrature(kernel, design, _rows(readings, doubtful), Fit(*(x[doubtful] for x in fit)))
        value[doubtful], error[doubtful] = full.log_evidence, full.error
        repaired[doubtful] = True
    added = repair.of_runs(kernel, design, some, at)
    sober = np.abs(added.value) < MOST_ADDED
    value[rows] += (added.value * sober).sum(1)
    error[rows] += (np.abs(added.value) * np.where(sober, LINE_ERROR, 1.0) + added.doubt).sum(1)
    error = np.where(np.isfinite(value), error, np.inf)
    return Assured(value, error, repaired, error > DOUBTFUL, fit)


def _rows(readings: Readings, rows: np.ndarray) -> Readings:
    return Readings(*(np.asarray(x)[rows] for x in readings))
