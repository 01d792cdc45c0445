"""A box of conditions and times to look over: its grid, and the peaks of a function within it.

A grid holds even steps and, from the lower end, steps that grow by a constant factor, because what
happens in a reaction is spread over decades of time. A peak of the grid is then narrowed down by looking
at ever smaller boxes around the best point so far; no derivatives are needed and whole batches of points
go through one call.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import product

import numpy as np
from scipy.ndimage import maximum_filter

from designer.errors import CallError

EVEN = {1: 241, 2: 33, 3: 11}  # even steps for each axis, by the number of axes with a range
GROWING = {1: 160, 2: 33, 3: 10}  # growing steps likewise
SMALLEST = 1e-6  # first growing step, as a part of the range
LOOKED_AT = {1: 13, 2: 7, 3: 5}  # points for each axis of a box that is narrowed down
NARROWINGS = 40


@dataclass(frozen=True)
class Axis:
    """One condition or the time: a range from low to high, or discrete levels."""

    low: float
    high: float
    levels: tuple[float, ...] = ()

    @property
    def is_range(self) -> bool:
        return not self.levels and self.high > self.low

    def grid(self, even: int, growing: int) -> np.ndarray:
        """Values in ascending order, both ends included."""
        if not self.is_range:
            return np.array(sorted(self.levels) or [self.low], dtype=float)
        width = self.high - self.low
        steps = np.concatenate([np.linspace(0, 1, even), np.geomspace(SMALLEST, 1, growing)])
        return np.unique(self.low + width * np.unique(steps))


@dataclass(frozen=True)
class Region:
    """Axes in the order in which points hold their coordinates."""

    axes: tuple[Axis, ...]

    @property
    def free(self) -> np.ndarray:
        """Which axes may be moved along, (dimensions,)."""
        return np.array([axis.is_range for axis in self.axes])

    def values(self) -> list[np.ndarray]:
        """Grid values of each axis."""
        ranges = max(1, int(self.free.sum()))
        if ranges not in EVEN:
            raise CallError(f"a region may have at most {max(EVEN)} axes with a range; found {ranges}")
        return [axis.grid(EVEN[ranges], GROWING[ranges]) for axis in self.axes]

    def grid(self) -> np.ndarray:
        """All combinations, (points, dimensions); the last axis runs fastest."""
        return np.array(list(product(*self.values())), dtype=float)


def box(*ranges: tuple[float, float]) -> Region:
    """Region from (low, high) pairs; low = high fixes an axis.

    Raises CallError for a range that is turned round or not finite.
    """
    for low, high in ranges:
        if not (np.isfinite(low) and np.isfinite(high) and low <= high):
            raise CallError(f"a range goes from a finite low to a finite high; found {low} to {high}")
    return Region(tuple(Axis(float(low), float(high)) for low, high in ranges))


def local_maxima(region: Region, values: np.ndarray, least: float) -> np.ndarray:
    """Indices of grid points that no neighbour exceeds and whose value is at least ``least``."""
    shape = tuple(len(axis) for axis in region.values())
    shaped = values.reshape(shape)
    size = tuple(3 if free else 1 for free in region.free)
    peaks = shaped >= maximum_filter(shaped, size=size, mode="nearest")
    return np.flatnonzero(peaks.ravel() & (values >= least))


def refined(function: Callable[[np.ndarray], np.ndarray], region: Region, starts: np.ndarray) -> np.ndarray:
    """Peaks of ``function`` near grid points: (starts, dimensions).

    function: points (m, dimensions) -> values (m,). Each search stays between the neighbours of its start.
    """
    low, high = _cells(region, starts)
    best = starts.astype(float)
    free = region.free
    count = LOOKED_AT[max(1, int(free.sum()))]
    steps = [np.linspace(0, 1, count) if moves else np.array([0.0]) for moves in free]
    offsets = np.array(list(product(*steps)))
    for _ in range(NARROWINGS if free.any() else 0):
        points = low[:, None] + (high - low)[:, None] * offsets
        points = np.concatenate([points, best[:, None]], axis=1)
        found = function(points.reshape(-1, points.shape[2])).reshape(points.shape[:2])
        # the point held so far stays on a tie: a flat top must not make it wander
        found[:, -1] = np.nextafter(found[:, -1], np.inf)
        best = points[np.arange(len(points)), np.argmax(found, axis=1)]
        reach = (high - low) / 4
        low, high = np.maximum(best - reach, low), np.minimum(best + reach, high)
    return best


def _cells(region: Region, starts: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    low, high = starts.astype(float), starts.astype(float)
    for axis, (values, moves) in enumerate(zip(region.values(), region.free, strict=True)):
        if moves:
            place = np.searchsorted(values, starts[:, axis])
            low[:, axis] = values[np.maximum(place - 1, 0)]
            high[:, axis] = values[np.minimum(place + 1, len(values) - 1)]
    return low, high


def merged(
    region: Region,
    points: np.ndarray,
    weights: np.ndarray,
    value: Callable[[np.ndarray, np.ndarray], float],
    loss: float,
) -> tuple[np.ndarray, np.ndarray]:
    """Join neighbours (at their weighted mean) while ``value`` falls by no more than ``loss`` in all.

    An exchange leaves pairs of points on both sides of the true one. Nearest pairs come first; points that
    differ in an axis of levels stay apart.
    """
    spans = np.array([axis.high - axis.low if axis.is_range else 1.0 for axis in region.axes])
    least = value(points, weights) - loss
    pairs = _by_distance(points / spans, region.free)
    while pairs:
        first, second = pairs.pop(0)
        share = weights[first] + weights[second]
        middle = (weights[first] * points[first] + weights[second] * points[second]) / share
        keep = np.arange(len(points)) != second
        tried, shares = points.copy(), weights.copy()
        tried[first], shares[first] = middle, share
        tried, shares = tried[keep], shares[keep]
        if value(tried, shares) >= least:
            points, weights = tried, shares
            pairs = _by_distance(points / spans, region.free)
    return points, weights


def _by_distance(scaled: np.ndarray, free: np.ndarray) -> list[tuple[int, int]]:
    gaps = [
        (float(np.sum((scaled[i] - scaled[j]) ** 2)), i, j)
        for i in range(len(scaled))
        for j in range(i + 1, len(scaled))
        if np.array_equal(scaled[i][~free], scaled[j][~free])
    ]
    return [(i, j) for _, i, j in sorted(gaps)]
