"""Budget of error of one sample: where the variance of its reading comes from.

Errors that a run or a stock shares are propagated by the law's own slopes, Var = sum (d mean/d z_i)^2,
z_i ~ N(0, 1), taken by central differences at the middle of the beliefs; the errors of the sample
itself are absolute^2 + (relative * mean)^2 + (time error * d mean/dt)^2.
"""

from __future__ import annotations

import numpy as np

from designer.courses import Course
from designer.findings import Budget, Share
from designer.records import Reading, Study

RELATIVE, ABSOLUTE = "relative error of the reading", "absolute error of the reading"
CLOCK = "time of sampling"
WORDS = {"rate": "scatter of the rate", "temperature": "temperature of the run"}  # coordinate -> source
STEP = 1e-3  # of a standard deviation; central differences are then right to about 1e-6


def budget(
    study: Study, course: Course, u: np.ndarray, conditions: np.ndarray, time: float, column: int
) -> Budget:
    """Budget of the reading ``column`` at ``time`` (s). u (structural,); conditions (condition,)."""
    law, reading = course.law, course.law.channels[column].reading
    stocks = [i for i, name in enumerate(law.structural) if name.startswith("stock of ")]
    seen = course.see(*_lanes(u, conditions, time, len(law.errors), stocks))
    mean = seen.mean[:, 0, column]
    slopes = (mean[1::2] - mean[2::2]) / (2 * STEP)
    names = [*law.errors, *(law.structural[i] for i in stocks)]
    sizes = [(name, abs(float(slope))) for name, slope in zip(names, slopes, strict=True)]
    sizes += _within(reading, float(mean[0]), float(seen.variance[0, 0, column]))
    total = sum(size**2 for _, size in sizes)
    shares = [Share(WORDS.get(n, n), size, size**2 / total, _comes_with(n)) for n, size in sizes]
    start = float(course.see(u[None], conditions[None], np.zeros((1, 1))).amount[0, 0])
    return Budget(
        law.candidate.name,
        reading.name,
        reading.unit,
        time,
        float(seen.amount[0, 0]) / start if start else 1.0,
        float(mean[0]),
        float(np.sqrt(total)),
        tuple(sorted(shares, key=lambda share: -share.share)),
    )


def _within(reading: Reading, mean: float, variance: float) -> list[tuple[str, float]]:
    """Errors that come afresh with each sample; what the first two leave of the variance is the clock's."""
    found = [(RELATIVE, abs(reading.relative * mean)), (ABSOLUTE, reading.absolute)]
    rest = variance - sum(size**2 for _, size in found)
    if reading.time_error:
        found.append((CLOCK, float(np.sqrt(max(rest, 0.0)))))
    return [(name, size) for name, size in found if size]


def _comes_with(name: str) -> str:
    if name in (RELATIVE, ABSOLUTE, CLOCK):
        return "sample"
    return "stock" if name.startswith("stock of ") else "run"


def _lanes(
    u: np.ndarray, conditions: np.ndarray, time: float, errors: int, stocks: list[int]
) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Lane 0 is the middle; then a step up and a step down of each error of the run and each stock."""
    count = 1 + 2 * (errors + len(stocks))
    us, zs = np.tile(u, (count, 1)), np.zeros((count, errors))
    for i in range(errors):
        zs[1 + 2 * i, i], zs[2 + 2 * i, i] = STEP, -STEP
    for j, place in enumerate(stocks, errors):
        us[1 + 2 * j, place] += STEP
        us[2 + 2 * j, place] -= STEP
    return us, conditions[None], np.array([[time]]), zs
