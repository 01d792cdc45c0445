"""The best fractional design for a measure of information, and the bound it puts on every plan.

Two questions: the best weights over a finite list of samples on offer (``local``), and the best points
and weights within a box of conditions and times (``best_design``). Both end with a design and its largest
sensitivity, hence with "no plan within these limits can be more than so much better by this measure";
``rate`` says it of any given plan.

Kiefer & Wolfowitz 1960; Fedorov & Hackl 1997; Pukelsheim 1993.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from designer.errors import CallError, ConvergenceError
from designer.information import (
    Measure,
    Sensitivities,
    factorised,
    gradient,
    information,
    log_amount,
    published,
    standardised,
    traces,
)
from designer.region import Region, local_maxima, merged, refined
from designer.weights import CLOSE, best_weights, exchanged, factor_of, stacked, value_of

LONGEST = 60  # rounds of new points
NEGLIGIBLE = 1e-5  # weight below which a point may go
UNNOTICED = 1e-6  # loss of ln amount that dropping or joining points may cost
POLISHED = 1e-3  # step of the differences that polish a point, as a part of its distance from the ends
SNAPPED = 1e-7  # a point this near to an end of its range (part of the range) is meant to be there


@dataclass(frozen=True)
class Design:
    """A fractional design and how far from the best it can be.

    points: (support, dimensions), or (support, 1) indices into the list for ``local``; weights sum to 1.
    criterion: in its usual form (``information.published``); amount: larger is better.
    bound: largest sensitivity over the region, target: what it would be for the best design.
    guarantee: target / bound, the least efficiency this design can have; margin: how much better any
    other plan can be at most, as a fraction of the amount.
    grid, sensitivities: where the region was looked at, and the sensitivity there.
    """

    kind: str
    points: np.ndarray
    weights: np.ndarray
    information: np.ndarray
    criterion: float
    amount: float
    bound: float
    target: float
    grid: np.ndarray
    sensitivities: np.ndarray

    @property
    def guarantee(self) -> float:
        return self.target / self.bound

    @property
    def margin(self) -> float:
        return max(self.bound / self.target - 1.0, 0.0)


@dataclass(frozen=True)
class Rating:
    """How a given plan stands against everything on offer.

    efficiency: amount over that of the best design found; margin: no plan within the limits can have an
    amount larger than this plan's by more than this fraction (infinity where the plan says nothing).
    sensitivities: of each sample on offer under the best design.
    """

    criterion: float
    amount: float
    efficiency: float
    margin: float
    best: Design


def _fitting(measure: Measure, given: Sensitivities | np.ndarray) -> np.ndarray:
    rows = standardised(given)
    if rows.shape[2] != measure.parameters:
        message = (
            f"the measure is about {measure.parameters} parameters, the derivatives about {rows.shape[2]}"
        )
        raise CallError(message)
    return rows


def _peaks(
    g: np.ndarray,
    rows_at: Callable[[np.ndarray], np.ndarray],
    region: Region,
    grid: np.ndarray,
    rows: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Refined peaks of tr(G m(x)) that come near the largest, and their heights."""
    first = traces(g, rows)
    starts = grid[local_maxima(region, first, 0.9 * first.max())]
    peaks = refined(lambda points: traces(g, rows_at(points)), region, starts)
    return peaks, traces(g, rows_at(peaks))


def _pruned(
    measure: Measure, rows: np.ndarray, chosen: np.ndarray, weights: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Drop what carries next to no weight, where the amount does not notice; weights solved anew."""
    kept = weights > NEGLIGIBLE
    before = value_of(measure, rows[chosen], weights)
    fewer, shares = chosen[kept], weights[kept] / weights[kept].sum()
    if log_amount(measure, factorised(stacked(rows[fewer], shares))) < before - UNNOTICED:
        return chosen, weights
    return fewer, best_weights(measure, rows[fewer])


def _simplified(
    measure: Measure,
    rows_at: Callable[[np.ndarray], np.ndarray],
    region: Region,
    points: np.ndarray,
    weights: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    def value(at: np.ndarray, shares: np.ndarray) -> float:
        return log_amount(measure, factorised(stacked(rows_at(at), shares)))

    def dropped(at: np.ndarray, shares: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        kept = shares > NEGLIGIBLE
        fewer, more = at[kept], shares[kept] / shares[kept].sum()
        return (fewer, more) if value(fewer, more) >= value(at, shares) - UNNOTICED else (at, shares)

    points, weights = dropped(points, weights)
    points, weights = merged(region, points, weights, value, UNNOTICED)
    points, weights = dropped(_snapped(region, points), weights)  # what was joined may be negligible still
    return _polished(measure, rows_at, region, points, weights)


def _snapped(region: Region, points: np.ndarray) -> np.ndarray:
    """Points next to an end of a range put on it."""
    low = np.array([axis.low for axis in region.axes])
    high = np.array([axis.high for axis in region.axes])
    reach = SNAPPED * np.where(region.free, high - low, 0.0)
    return np.where(points - low <= reach, low, np.where(high - points <= reach, high, points))


def _polished(
    measure: Measure,
    rows_at: Callable[[np.ndarray], np.ndarray],
    region: Region,
    points: np.ndarray,
    weights: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:
    """Move every point to the top of the sensitivity by Newton steps, as long as the amount does not fall.

    Peaks are flat: comparing values finds them to 1e-8 at best, a root of the slope does better.
    """
    weights = best_weights(measure, rows_at(points))
    value = log_amount(measure, factorised(stacked(rows_at(points), weights)))
    for _ in range(10):
        tried = points + _newton_step(measure, rows_at, region, points, weights)
        shares = best_weights(measure, rows_at(tried)) if _works(measure, rows_at(tried)) else weights
        reached = log_amount(measure, factorised(stacked(rows_at(tried), shares)))
        if np.array_equal(tried, points) or reached < value - 1e-14:
            break
        points, weights, value = tried, shares, reached
    return points, weights


def _works(measure: Measure, rows: np.ndarray) -> bool:
    return bool(np.isfinite(log_amount(measure, factorised(rows.reshape(-1, rows.shape[2])))))


def _newton_step(
    measure: Measure,
    rows_at: Callable[[np.ndarray], np.ndarray],
    region: Region,
    points: np.ndarray,
    weights: np.ndarray,
) -> np.ndarray:
    """-s'/s'' along each free axis, by differences of fourth order; 0 at the ends and where s is no peak."""
    g = gradient(measure, factorised(stacked(rows_at(points), weights)))
    step = np.zeros_like(points)
    for axis in np.flatnonzero(region.free):
        low, high = region.axes[axis].low, region.axes[axis].high
        distance = np.minimum(points[:, axis] - low, high - points[:, axis])
        inside = distance > 1e-4 * (high - low) * POLISHED
        width = np.where(inside, POLISHED * distance, 0.0)
        around = np.repeat(points[None], 5, axis=0)
        around[:, :, axis] += np.arange(-2, 3)[:, None] * width
        s = traces(g, rows_at(around.reshape(-1, points.shape[1]))).reshape(5, -1)
        slope = (s[0] - 8 * s[1] + 8 * s[3] - s[4]) / 12  # times the width
        bend = (-s[0] + 16 * s[1] - 30 * s[2] + 16 * s[3] - s[4]) / 12  # times its square
        peak = inside & (bend < 0)
        move = np.where(peak, -slope / np.where(peak, bend, 1.0) * width, 0.0)
        step[:, axis] = np.clip(move, -distance / 4, distance / 4)
    return step


def _design(
    measure: Measure,
    points: np.ndarray,
    weights: np.ndarray,
    rows: np.ndarray,
    grid: np.ndarray,
    first: np.ndarray,
    regular: float,
    everywhere: np.ndarray | None,
) -> Design:
    """The record. first: tr(G m) over the grid under the regular design with ln amount ``regular``.

    What bounds the regular design bounds any other by the ratio of the amounts; the design's own
    sensitivities are taken instead where they bound it as closely (they touch at the support exactly).
    """
    factor = factorised(stacked(rows, weights))
    logarithm = log_amount(measure, factor)
    carried = measure.target * first * np.exp(regular - logarithm)
    if everywhere is not None:
        own = measure.target * traces(gradient(measure, factor), everywhere)
        if own.max() <= carried.max():
            carried = own
    order = np.lexsort(points.T[::-1])
    return Design(
        kind=measure.kind,
        points=points[order],
        weights=weights[order],
        information=information(rows, weights),
        criterion=published(measure, logarithm),
        amount=float(np.exp(logarithm)),
        bound=float(carried.max()),
        target=measure.target,
        grid=grid,
        sensitivities=carried,
    )


def local(measure: Measure, given: Sensitivities | np.ndarray, close: float = CLOSE) -> Design:
    """Best weights over a finite list of samples on offer.

    given: derivatives and variances of the samples, or rows (samples, readings, parameters).
    points of the result are indices into the list, (support, 1); grid is the whole list of indices.
    Raises InfeasibleError where no plan of these samples can estimate what is asked.
    """
    rows = _fitting(measure, given)
    chosen, weights, g = exchanged(measure, rows, close)
    regular = value_of(measure, rows[chosen], weights)
    indices = np.arange(len(rows), dtype=float)[:, None]
    chosen, weights = _pruned(measure, rows, chosen, weights)
    return _design(measure, indices[chosen], weights, rows[chosen], indices, traces(g, rows), regular, None)


def best_design(
    measure: Measure,
    sensitivities: Callable[[np.ndarray], Sensitivities | np.ndarray],
    region: Region,
    close: float = CLOSE,
) -> Design:
    """Best points and weights within a region.

    sensitivities: points (m, dimensions) -> derivatives and variances of m samples. The bound is the
    largest sensitivity over the grid of the region and over the peaks refined from it.
    Raises InfeasibleError where what is asked cannot be estimated anywhere in the region, and
    ConvergenceError where the search does not settle.
    """

    def rows_at(points: np.ndarray) -> np.ndarray:
        return _fitting(measure, sensitivities(points))

    grid = region.grid()
    rows = rows_at(grid)
    chosen, weights, g = exchanged(measure, rows, 1e-3)
    points = grid[chosen]
    for _ in range(LONGEST):
        peaks, heights = _peaks(g, rows_at, region, grid, rows)
        if heights.max() <= 1 + close:
            break
        kept = weights > 1e-9 * weights.max()  # enough for rank, and old points must not pile up
        points = np.unique(np.concatenate([points[kept], peaks[heights > 1]]), axis=0)
        weights = best_weights(measure, rows_at(points), close)
        g = gradient(measure, factor_of(rows_at(points), weights))
    else:
        raise ConvergenceError(f"the best design did not settle in {LONGEST} rounds of exchange")
    regular = value_of(measure, rows_at(points), weights)
    points, weights = _simplified(measure, rows_at, region, points, weights)
    first = np.concatenate([traces(g, rows), heights])
    return _design(
        measure,
        points,
        weights,
        rows_at(points),
        np.concatenate([grid, peaks]),
        first,
        regular,
        np.concatenate([rows, rows_at(peaks)]),
    )


def rate(
    measure: Measure,
    plan: Sensitivities | np.ndarray,
    offer: Sensitivities | np.ndarray,
    weights: Sequence[float] | np.ndarray | None = None,
    best: Design | None = None,
) -> Rating:
    """How a plan stands against every plan that could be made of the samples on offer.

    plan: its samples; weights: how often each is taken (None: once each); offer: samples on offer, which
    should contain those of the plan; best: a design for them found earlier, else it is searched here.
    """
    rows = _fitting(measure, plan)
    best = best or local(measure, offer)
    shares = np.ones(len(rows)) if weights is None else np.asarray(weights, dtype=float)
    information(rows, shares)  # complains about weights that are none
    logarithm = log_amount(measure, factorised(stacked(rows, shares / shares.sum())))
    efficiency = float(np.exp(logarithm - np.log(best.amount)))
    margin = best.bound / best.target / efficiency - 1 if efficiency > 0 else np.inf
    return Rating(published(measure, logarithm), float(np.exp(logarithm)), efficiency, max(margin, 0.0), best)
