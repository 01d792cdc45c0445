"""Budget of error of one sample: where the variance of its reading comes from.

Errors that a run or a stock shares are propagated by the law's own slopes, Var = sum (d mean/d z_i)^2,
z_i ~ N(0, 1), taken by central differences at the middle of the beliefs; the errors of the sample
itself are absolute^2 + (relative * mean)^2 + (time error * d mean/dt)^2.
"""

from __future__ import annotations

import numpy as np

from designer.courses import Course
from designer.findings import Budget, Share
from designer.records import Study

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
    within = {"relative error of the reading": reading.relative * mean[0], "absolute error": reading.absolute}
    known = sum(size**2 for size in within.values())
    within["time of sampling"] = float(np.sqrt(max(seen.variance[0, 0, column] - known, 0.0)))
    if reading.time_error == 0:
        del within["time of sampling"]
    sizes = {name: abs(float(slope)) for name, slope in zip(names, slopes, strict=True)}
    sizes |= {name: abs(float(size)) for name, size in within.items() if size}
    total = sum(size**2 for size in sizes.values())
    shares = [Share(name, size, size**2 / total) for name, size in sizes.items()]
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
