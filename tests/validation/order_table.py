"""Chance of naming the right order of reaction, by best-fit likelihood: Phi(sqrt(lambda)/2).

lambda is the least weighted sum of squares of the rival, its constants free, on the true first-order
curve. Noise is additive, in percent of the start. One run: 8 equal steps from time 0, start unknown.
Two runs: starts a factor of 4 apart, 4 equal steps each from time 0, starts known to 1 %.
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
from scipy.stats import norm

from designer.rival import Contest, separation
from validation.kinetic_laws import whole_order
from validation.registry import Check, known

CONVERSIONS = (20, 30, 50, 60, 70, 80, 90)
TABLE = {  # (rival order, noise in %): chance at each conversion
    (2, 0.5): (0.72, 0.92, 1.00, 1.00, 1.00, 1.00, 1.00),
    (2, 1): (0.62, 0.76, 0.98, 1.00, 1.00, 1.00, 1.00),
    (2, 2): (0.56, 0.64, 0.86, 0.95, 0.99, 1.00, 1.00),
    (2, 5): (0.52, 0.56, 0.67, 0.75, 0.83, 0.91, 0.96),
    (1.5, 1): (0.56, 0.64, 0.86, 0.96, 0.99, 1.00, 1.00),
    (1.5, 2): (0.53, 0.57, 0.71, 0.80, 0.89, 0.96, 0.99),
    (1.5, 5): (0.51, 0.53, 0.59, 0.63, 0.69, 0.76, 0.83),
    (0, 2): (0.56, 0.64, 0.87, 0.96, 1.00, 1.00, 1.00),
}
TWO_RUNS = {5: ((10, 20, 30), (0.80, 0.95, 0.99)), 2: ((10, 20), (0.97, 1.00))}
SAMPLES = 8
STARTS, PREPARED = (1.0, 4.0), 0.01
SOURCE = "recipe and values made for this project; principle in Laidler 1987 ch. 2"
STATEMENT = (
    "Chance of choosing first order over a rival when it is true, 8 equal steps from time 0 in one run, "
    "at 20, 30, 50, 60, 70, 80 and 90 % conversion"
)
WITHIN = 0.03


def curve(order: float, start: float, k: float, times: np.ndarray) -> np.ndarray:
    return whole_order(order).run({"A": start}, {"k": k}, times)[0]["A"]


def end_of(conversion: float) -> float:
    """When first order with k = 1 has converted so many percent."""
    return float(-np.log(1 - conversion / 100))


@cache
def one_run(order: float, conversion: float) -> float:
    """lambda for a noise of 1 (of the start)."""
    times = np.linspace(0, end_of(conversion), SAMPLES)[:, None]

    def rival(constants: np.ndarray, points: np.ndarray) -> np.ndarray:
        return curve(order, float(np.exp(constants[1])), float(np.exp(constants[0])), points[:, 0])

    contest = Contest(lambda points: curve(1, 1.0, 1.0, points[:, 0]), rival, [[0.0, 0.0]])
    return SAMPLES * separation(contest, times)


def two_runs(conversion: float, noise: float) -> float:
    """lambda; the errors of the two starts, in units of what they are known to, count as readings of 0."""
    times = np.linspace(0, end_of(conversion), 4)
    points = np.array([[run, t] for run in range(2) for t in times] + [[2.0, 0.0], [3.0, 0.0]])

    def mean(at: np.ndarray) -> np.ndarray:
        return np.concatenate([*(curve(1, start, 1.0, times) / start / noise for start in STARTS), [0, 0]])

    def rival(constants: np.ndarray, at: np.ndarray) -> np.ndarray:
        k, wrong = float(np.exp(constants[0])), constants[1:]
        runs = [
            curve(2, start * float(np.exp(PREPARED * error)), k, times) / start / noise
            for start, error in zip(STARTS, wrong, strict=True)
        ]
        return np.concatenate([*runs, wrong])

    return len(points) * separation(Contest(mean, rival, [[-1.0, 0.0, 0.0]]), points)


def chance(separation_squared: float) -> float:
    return float(norm.cdf(np.sqrt(separation_squared) / 2))


def rival_name(order: float) -> str:
    return f"against order {order:g}"


def one_run_chances() -> dict[str, Any]:
    return {
        f"{rival_name(order)}, noise {noise:g} %": [
            chance(one_run(order, x) / (noise / 100) ** 2) for x in CONVERSIONS
        ]
        for order, noise in TABLE
    }


def two_run_chances() -> dict[str, Any]:
    return {
        f"noise {noise} %, at {conversions} % conversion": [
            chance(two_runs(x, noise / 100)) for x in conversions
        ]
        for noise, (conversions, _) in TWO_RUNS.items()
    }


def followed_far() -> dict[str, Any]:
    """Second order as rival, noise of 2 %."""
    return {
        "chance at 30 % conversion": chance(one_run(2, 30) / 0.02**2),
        "chance at 60 % conversion": chance(one_run(2, 60) / 0.02**2),
    }


def checks() -> list[Check]:
    one = {f"{rival_name(order)}, noise {noise:g} %": row for (order, noise), row in TABLE.items()}
    two = {f"noise {noise} %, at {x} % conversion": row for noise, (x, row) in TWO_RUNS.items()}
    rule = "Follow a run past 50 % conversion to tell first order from second (one run, noise of 2 %)"
    trade = ("rule of the trade", "common practice")
    return [
        *known("T-01", STATEMENT, one_run_chances, one, SOURCE, "computed", absolute=WITHIN),
        *known(
            "T-02",
            "The same from two runs, starts a factor of 4 apart, 4 equal steps each, second order as rival",
            two_run_chances,
            two,
            SOURCE,
            "computed",
            absolute=WITHIN,
        ),
        *known("R-03", rule, followed_far, {"chance at 30 % conversion": 0.75}, *trade, relation="<="),
        *known("R-03", rule, followed_far, {"chance at 60 % conversion": 0.9}, *trade, relation=">="),
    ]
