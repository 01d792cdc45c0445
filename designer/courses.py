"""How a run would go under one candidate over the whole of a belief: half-lives and fans of curves.

One compiled function per candidate serves every question: lanes (coordinates, conditions, times) are
padded to a fixed shape, so that nothing is compiled twice.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import NamedTuple

import numpy as np

from designer.arrays import Array, jax
from designer.signals import Law

LANES = 512  # a power of 2, as the net of ``spread_out`` asks
POINTS = 48  # times of one call
DECADES = 8  # below the horizon, where the search for a half-life begins
ZOOMS = 3


class Seen(NamedTuple):
    """amount (lane, time) of the first-named reactant, mol/L; mean and variance (lane, time, signal);
    trouble (lane,), 1 where the course could not be computed."""

    amount: np.ndarray
    mean: np.ndarray
    variance: np.ndarray
    trouble: np.ndarray


@partial(jax.jit, static_argnums=(0, 1))
def _see(law: Law, species: str, u: Array, z: Array, conditions: Array, times: Array) -> Seen:
    def one(*lane: Array) -> Seen:
        signal = law.read(*lane)
        amount = law.concentrations(*lane)[species]
        return Seen(amount, signal.mean, signal.variance, signal.trouble)

    return jax.vmap(one)(u, z, conditions, times)


@dataclass(frozen=True)
class Course:
    """A law watched through its first-named reactant."""

    law: Law

    @property
    def reactant(self) -> str:
        return self.law.candidate.steps[0].equation.first_reactant

    def see(
        self, u: np.ndarray, conditions: np.ndarray, times: np.ndarray, z: np.ndarray | None = None
    ) -> Seen:
        """u (lane, structural), conditions (lane, condition), times (lane, time <= POINTS) in s, z (lane,
        error), 0 by default. Axes of length 1 are stretched."""
        lanes = max(len(u), len(conditions), len(times), 0 if z is None else len(z))
        z = np.zeros((1, len(self.law.errors))) if z is None else z
        width = times.shape[1]
        padded = np.concatenate([times, np.repeat(times[:, -1:], POINTS - width, axis=1)], axis=1)
        whole = -(-lanes // LANES) * LANES
        parts = [_stretched(x, lanes, whole) for x in (u, z, conditions, padded)]
        found = [
            _see(self.law, self.reactant, *(part[i : i + LANES] for part in parts))
            for i in range(0, whole, LANES)
        ]
        joined = [
            np.concatenate([np.asarray(x) for x in column])[:lanes] for column in zip(*found, strict=True)
        ]
        amount, mean, variance, trouble = joined
        return Seen(amount[:, :width], mean[:, :width], variance[:, :width], trouble)

    def fall(
        self, u: np.ndarray, conditions: np.ndarray, horizon: float, left: float = 0.5
    ) -> tuple[np.ndarray, np.ndarray]:
        """When the reactant first falls to the share ``left`` of its start, (lane,) in s, inf where it does
        not within ``horizon`` (s); and (lane,) trouble."""
        lanes = max(len(u), len(conditions))
        low = np.full(lanes, np.log(horizon) - DECADES * np.log(10))
        high = np.full(lanes, np.log(horizon))
        rows, reached, trouble = np.arange(lanes), np.ones(lanes, bool), np.zeros(lanes)
        start = self.see(u, conditions, np.zeros((1, 1))).amount[:, 0]
        for _ in range(ZOOMS):
            grid = low[:, None] + (high - low)[:, None] * np.linspace(0, 1, POINTS)
            seen = self.see(u, conditions, np.exp(grid))
            share = seen.amount / np.where(start > 0, start, np.nan)[:, None]
            reached &= (share <= left).any(1)
            trouble = np.maximum(trouble, seen.trouble)
            place = np.maximum((share <= left).argmax(1), 1)
            low, high = grid[rows, place - 1], grid[rows, place]
            above, below = share[rows, place - 1], share[rows, place]
        with np.errstate(invalid="ignore", divide="ignore"):
            part = np.clip(np.nan_to_num((above - left) / (above - below)), 0, 1)
        time = np.where(reached & (trouble == 0), np.exp(low + part * (high - low)), np.inf)
        return time, trouble


def _stretched(values: np.ndarray, lanes: int, whole: int) -> np.ndarray:
    full = np.broadcast_to(values, (lanes, *values.shape[1:]))
    return np.concatenate([full, np.broadcast_to(full[-1:], (whole - lanes, *values.shape[1:]))])


def spread_out(size: int) -> np.ndarray:
    """``LANES`` points (LANES, size) that stand for N(0, I) evenly: a Sobol net, so each coordinate takes
    every one of its evenly spaced quantiles once."""
    from scipy.special import ndtri

    places = np.arange(LANES)[:, None] / LANES
    if size > 1:
        from scipy.stats import qmc

        places = qmc.Sobol(size, scramble=False).random(LANES)
    return ndtri(places[:, :size] + 0.5 / LANES)


def log_range(values: np.ndarray) -> tuple[float, float, float]:
    """5, 50 and 95 % points of positive values, taken in the logarithm; values may be inf."""
    far = 1e3
    with np.errstate(divide="ignore"):
        logs = np.where(np.isfinite(values), np.log(np.where(np.isfinite(values), values, 1.0)), far)
    low, middle, high = np.quantile(logs, [0.05, 0.5, 0.95], method="hazen")
    limit = logs[logs < far].max(initial=-np.inf)
    return tuple(float(np.exp(x)) if x <= limit else np.inf for x in (low, middle, high))  # type: ignore[return-value]
