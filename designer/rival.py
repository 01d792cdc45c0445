"""Telling one named candidate from a rival whose constants are free: the T criterion, and pairwise scores.

The candidate, at its best guess, predicts the mean eta(x); the rival predicts f(x, b) with b free. The gap
of a sample is d(x, b) = sum over readings (eta - f)^2 / variance, and a design with weights w is worth

    T(w) = min over b of sum_i w_i d(x_i, b)

per sample: what the rival cannot explain away. T is concave in w, and for any rivals b_k and shares p_k

    best T <= max over x of sum_k p_k d(x, b_k)

so a mixture of refits bounds every design. At the best design the right side equals T (Atkinson & Fedorov
1975). The search alternates a linear programme over weights against all refits so far (Kelley 1960) with a
new refit, whose multipliers are the p_k of the bound.

Also the scores of one more sample between two candidates with normal predictions: Hunter & Reiner 1965,
Box & Hill 1967, Buzzi-Ferraris & Forzatti 1983, and the expected information that they stand in for.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares, linprog

from designer.errors import CallError, ConvergenceError
from designer.region import Region, local_maxima, merged, refined

Mean = Callable[[np.ndarray], np.ndarray]
Rival = Callable[[np.ndarray, np.ndarray], np.ndarray]

CLOSE = 1e-6  # bound over value - 1 at which the search stops
COARSE = 1e-3  # the same for the first pass over the grid alone
TIDY = 1e-10  # the same for the weights on the final support, where it costs next to nothing
REFITS = 300  # refits of the rival before the search gives up
ROUNDS = 40  # rounds of new points
NEGLIGIBLE = 1e-5
UNNOTICED = 1e-6  # relative loss of T that dropping or joining points may cost


@dataclass(frozen=True)
class Separation:
    """A design that keeps a rival from explaining the candidate away.

    points: (support, dimensions); weights sum to 1; value: T for one sample, in squared errors of one
    reading; bound: no design within the region has a T above it; rival: its best refit to this design;
    grid, sensitivities: the bounding function over the region.
    """

    points: np.ndarray
    weights: np.ndarray
    value: float
    bound: float
    rival: np.ndarray
    grid: np.ndarray
    sensitivities: np.ndarray

    @property
    def target(self) -> float:
        return self.value

    @property
    def guarantee(self) -> float:
        return self.value / self.bound

    @property
    def margin(self) -> float:
        return max(self.bound / self.value - 1.0, 0.0)


class Contest:
    """A candidate's means against a rival's, both as callables of points.

    mean: points (m, dimensions) -> (m,) or (m, readings); rival: (constants (q,), points) -> the same;
    starts: (several, q) guesses of the rival's constants, each the start of a fit; low, high: bounds (q,);
    variance: like mean, of the readings under the candidate (1 where left out).
    """

    def __init__(
        self,
        mean: Mean,
        rival: Rival,
        starts: Sequence[Sequence[float]],
        *,
        low: Sequence[float] | float = -np.inf,
        high: Sequence[float] | float = np.inf,
        variance: Mean | None = None,
    ) -> None:
        self.mean, self.rival, self.variance = mean, rival, variance
        self.starts = np.atleast_2d(np.asarray(starts, dtype=float))
        self.low = np.broadcast_to(np.asarray(low, dtype=float), self.starts.shape[1:])
        self.high = np.broadcast_to(np.asarray(high, dtype=float), self.starts.shape[1:])
        if np.any(self.starts < self.low) or np.any(self.starts > self.high):
            raise CallError("a start of the rival's constants lies outside their bounds")

    def residuals(self, constants: np.ndarray, points: np.ndarray) -> np.ndarray:
        """(eta - f) / SD, (points, readings)."""
        gap = _columns(self.mean(points)) - _columns(self.rival(constants, points))
        if self.variance is not None:
            gap = gap / np.sqrt(_columns(self.variance(points)))
        if not np.all(np.isfinite(gap)):
            raise CallError("a mean of the candidate or the rival is not finite; leave such samples out")
        return gap

    def gaps(self, constants: np.ndarray, points: np.ndarray) -> np.ndarray:
        """d(x, b) of every point."""
        return np.sum(self.residuals(constants, points) ** 2, axis=1)

    def refit(
        self, points: np.ndarray, weights: np.ndarray, near: Sequence[np.ndarray] = ()
    ) -> tuple[np.ndarray, float]:
        """Best constants of the rival for a design, and T: the least of fits from every start."""
        used = weights > 0
        root = np.sqrt(weights[used])[:, None]
        there = points[used]

        def weighted(constants: np.ndarray) -> np.ndarray:
            return (root * self.residuals(constants, there)).ravel()

        fits = [
            least_squares(weighted, start, bounds=(self.low, self.high), xtol=1e-12, ftol=1e-14, gtol=1e-14)
            for start in (*near, *self.starts)
        ]
        best = min(fits, key=lambda fit: fit.cost)
        return best.x, 2 * float(best.cost)


def _columns(values: np.ndarray) -> np.ndarray:
    array = np.asarray(values, dtype=float)
    return array[:, None] if array.ndim == 1 else array


def separation(contest: Contest, points: np.ndarray, weights: Sequence[float] | None = None) -> float:
    """T of a given design, for one sample on average."""
    at = np.asarray(points, dtype=float)
    shares = np.ones(len(at)) if weights is None else np.asarray(weights, dtype=float)
    if shares.shape != (len(at),) or np.any(shares < 0) or not shares.sum() > 0:
        raise CallError(f"expected {len(at)} weights, none negative and not all 0; found {shares.tolist()}")
    return contest.refit(at, shares / shares.sum())[1]


def pair_sensitivity(contest: Contest, points: np.ndarray, weights: np.ndarray, at: np.ndarray) -> np.ndarray:
    """d(x, best refit to the design) at other points: its slope towards x is this minus T."""
    return contest.gaps(contest.refit(points, weights / weights.sum())[0], at)


@dataclass
class _State:
    """What the alternation carries: points, refits so far, their gaps, and the best weights seen."""

    points: np.ndarray
    refits: list[np.ndarray]
    weights: np.ndarray
    value: float


def _programme(gaps: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """max t with sum_i w_i gaps[k, i] >= t for all k: weights, multipliers p_k, and t."""
    refits, count = gaps.shape
    scale = gaps.max()
    answer = linprog(
        np.append(np.zeros(count), -1.0),
        A_ub=np.hstack([-gaps / scale, np.ones((refits, 1))]),
        b_ub=np.zeros(refits),
        A_eq=np.append(np.ones(count), 0.0)[None],
        b_eq=[1.0],
        bounds=[(0, None)] * count + [(None, None)],
        method="highs",
        options={"primal_feasibility_tolerance": 1e-10, "dual_feasibility_tolerance": 1e-10},
    )
    if answer.status != 0:
        raise ConvergenceError(f"the weights against the rival's refits could not be found: {answer.message}")
    weights = np.maximum(answer.x[:-1], 0.0)
    shares = np.maximum(-answer.ineqlin.marginals, 0.0)
    return weights / weights.sum(), shares / shares.sum(), scale * float(answer.x[-1])


def _settle(contest: Contest, state: _State, close: float) -> tuple[np.ndarray, float]:
    """Alternate on the present points until the programme's t is within ``close`` of the best T seen.

    Each round refits to the programme's weights and to their middle with the best so far, which damps
    the programme's jumps from corner to corner. Returns the multipliers and t.
    """
    while len(state.refits) <= REFITS:
        gaps = np.array([contest.gaps(constants, state.points) for constants in state.refits])
        tried, shares, most = _programme(gaps)
        if most - state.value <= close * most:
            return shares, most
        for weights in (tried, (tried + state.weights) / 2):
            constants, value = contest.refit(state.points, weights, state.refits[-1:])
            state.refits.append(constants)
            if value > state.value:
                state.weights, state.value = weights, value
    raise ConvergenceError(f"{REFITS} refits of the rival did not settle the design; give better starts")


def best_separation(contest: Contest, region: Region, close: float = CLOSE) -> Separation:
    """Design with the largest T within a region, and the bound on all others.

    Raises ConvergenceError where the rival explains everything (T is 0) or the search does not settle.
    """
    grid = region.grid()
    equal = np.full(len(grid), 1.0 / len(grid))
    constants, value = contest.refit(grid, equal)
    if not contest.gaps(constants, grid).max() > 0:
        raise ConvergenceError("the rival can imitate the candidate exactly over the whole region")
    state = _State(grid, [constants], equal, value)
    shares, _ = _settle(contest, state, COARSE)
    kept = state.weights > 0
    state.points, state.weights = grid[kept], state.weights[kept]
    for _ in range(ROUNDS):
        peaks, heights = _peaks(contest, state.refits, shares, region, grid)
        if heights.max() <= state.value * (1 + 2 * close):
            break
        state.points = np.concatenate([state.points, peaks])
        state.weights = np.concatenate([state.weights, np.zeros(len(peaks))])
        shares, _ = _settle(contest, state, close)
        state.refits = [state.refits[k] for k in np.flatnonzero(shares > 0)]
        shares = shares[shares > 0]
    else:
        raise ConvergenceError(f"the points against the rival did not settle in {ROUNDS} rounds")
    return _separation(contest, state, shares, region, grid, peaks)


def _mixture(
    contest: Contest, refits: Sequence[np.ndarray], shares: np.ndarray, points: np.ndarray
) -> np.ndarray:
    used = [(share, refit) for share, refit in zip(shares, refits, strict=True) if share > 0]
    return sum((share * contest.gaps(refit, points) for share, refit in used), np.zeros(len(points)))


def _peaks(
    contest: Contest, refits: Sequence[np.ndarray], shares: np.ndarray, region: Region, grid: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    values = _mixture(contest, refits, shares, grid)
    starts = grid[local_maxima(region, values, 0.9 * values.max())]
    peaks = refined(lambda points: _mixture(contest, refits, shares, points), region, starts)
    return peaks, _mixture(contest, refits, shares, peaks)


def _separation(
    contest: Contest, state: _State, shares: np.ndarray, region: Region, grid: np.ndarray, peaks: np.ndarray
) -> Separation:
    """Tidy the support and write the record."""

    def value(points: np.ndarray, weights: np.ndarray) -> float:
        return contest.refit(points, weights, state.refits[-1:])[1]

    kept = state.weights > NEGLIGIBLE
    points, weights = state.points[kept], state.weights[kept] / state.weights[kept].sum()
    if value(points, weights) < state.value * (1 - UNNOTICED):
        points, weights = state.points, state.weights
    points, weights = merged(region, points, weights, value, UNNOTICED * state.value)
    tidy = _State(points, list(state.refits), weights, value(points, weights))
    _settle(contest, tidy, TIDY)
    weights = tidy.weights
    constants, reached = contest.refit(points, weights, state.refits[-1:])
    everywhere = np.concatenate([grid, peaks])
    bounding = _mixture(contest, state.refits, shares, everywhere)
    own = contest.gaps(constants, everywhere)
    if own.max() <= bounding.max():
        bounding = own
    order = np.lexsort(points.T[::-1])
    return Separation(
        points[order], weights[order], reached, float(bounding.max()), constants, everywhere, bounding
    )


# ---- one more sample between two candidates ----------------------------------------------------


def squared_gap(first: float, second: float) -> float:
    """(y1 - y2)^2, in squared units of the reading. Hunter & Reiner 1965."""
    return (first - second) ** 2


def gap_over_variance(
    first: float, second: float, first_variance: float, second_variance: float, error_variance: float
) -> float:
    """(y1 - y2)^2 / (2 s^2 + s1^2 + s2^2): worth a run where above 1. Buzzi-Ferraris & Forzatti 1983.

    first_variance, second_variance: of the predicted means; error_variance: of one reading.
    """
    return (first - second) ** 2 / (2 * error_variance + first_variance + second_variance)


def symmetric_distance(
    beliefs: Sequence[float], means: Sequence[float], variances: Sequence[float], error_variance: float
) -> float:
    """sum over pairs of p_i p_j/2 [(v_i-v_j)^2/(v_i v_j) + (y_i-y_j)^2 (1/v_i + 1/v_j)], in nats.

    v_i = error variance + variance of the predicted mean. An upper bound of ``expected_information``.
    Box & Hill 1967.
    """
    total = np.asarray(variances, dtype=float) + error_variance
    p, y = np.asarray(beliefs, dtype=float), np.asarray(means, dtype=float)
    apart = (total[:, None] - total) ** 2 / np.outer(total, total)
    apart = apart + (y[:, None] - y) ** 2 * (1 / total[:, None] + 1 / total)
    return float(np.sum(np.triu(np.outer(p, p) * apart / 2, 1)))


def expected_information(
    beliefs: Sequence[float], means: Sequence[float], variances: Sequence[float], error_variance: float
) -> float:
    """Expected information of one reading about which candidate holds, in nats, by quadrature.

    sum_i p_i integral N(y; y_i, v_i) ln[N(y; y_i, v_i) / sum_j p_j N(y; y_j, v_j)] dy. Lindley 1956.
    """
    p, y = np.asarray(beliefs, dtype=float), np.asarray(means, dtype=float)
    spread = np.sqrt(np.asarray(variances, dtype=float) + error_variance)
    nodes, weights = np.polynomial.hermite_e.hermegauss(96)
    at = y[:, None] + spread[:, None] * nodes  # readings under each candidate in turn
    logs = -0.5 * ((at[..., None] - y) / spread) ** 2 - np.log(spread)
    most = logs.max(axis=-1)
    mixture = most + np.log(np.exp(logs - most[..., None]) @ p)
    own = np.einsum("iki->ik", logs)
    return float(np.sum(p[:, None] * weights / weights.sum() * (own - mixture)))
