"""Log evidence by tempered sequential Monte Carlo in plain numpy: an oracle apart from the kernel.

Draws from N(0, I) are carried to the posterior through likelihood^b, b rising from 0 to 1 as fast as the
effective sample size allows; between rises every draw makes random-walk moves that leave N(0, I) times
likelihood^b unchanged. ln Z is the sum of the logarithms of the mean incremental weights.

``refined`` then draws from a t distribution with the mean and covariance of the cloud so found; the mean of
its importance weights is ln Z with a smaller error, which the scatter of the weights tells.

References: Del Moral, Doucet & Jasra (2006) J. R. Stat. Soc. B 68:411; Geweke (1989) Econometrica 57:1317.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from scipy.stats import multivariate_t

LogLikelihood = Callable[[np.ndarray], np.ndarray]  # (draw, coordinate) -> (draw,)
KEPT = 0.6  # of the effective sample size, at each rise of b
WANTED = 0.25  # of the moves, to be accepted
FREEDOM, WIDER = 6.0, 1.2  # of the t distribution; its covariance is WIDER times that of the cloud


class Estimate(NamedTuple):
    """ln Z and its standard error."""

    value: float
    error: float


def tempered(
    likelihood: LogLikelihood, size: int, draws: int, moves: int, random: np.random.Generator
) -> tuple[float, np.ndarray]:
    """ln Z of one passage from prior to posterior, and the cloud of draws at its end."""
    x = random.standard_normal((draws, size))
    log_l = likelihood(x)
    power, total, reach = 0.0, 0.0, 1.0
    while power < 1:
        rise = _rise(log_l, 1 - power)
        weight = np.exp(rise * (log_l - log_l.max()))
        total += rise * log_l.max() + np.log(weight.mean())
        power += rise
        x, log_l = _resampled(x, log_l, weight, random)
        root = np.linalg.cholesky(np.cov(x.T).reshape(size, size) + 1e-12 * np.eye(size))
        for _ in range(moves):
            accepted = _move(likelihood, x, log_l, power, reach * root * 2.38 / np.sqrt(size), random)
            reach *= np.exp(0.5 * (accepted - WANTED))
    return float(total), x


def refined(
    likelihood: LogLikelihood, cloud: np.ndarray, draws: int, random: np.random.Generator
) -> Estimate:
    """ln Z by importance sampling from a t distribution fitted to ``cloud`` (draw, coordinate)."""
    size = cloud.shape[1]
    spread = np.cov(cloud.T).reshape(size, size) * WIDER * (FREEDOM - 2) / FREEDOM
    proposal = multivariate_t(cloud.mean(0), spread, FREEDOM, seed=random)
    x = proposal.rvs(draws).reshape(draws, size)
    prior = -((x**2).sum(1) + size * np.log(2 * np.pi)) / 2
    log_weight = likelihood(x) + prior - proposal.logpdf(x)
    weight = np.exp(log_weight - log_weight.max())
    error = weight.std() / weight.mean() / np.sqrt(draws)
    return Estimate(float(log_weight.max() + np.log(weight.mean())), float(error))


def log_evidence(
    likelihood: LogLikelihood, size: int, draws: int, moves: int, last: int, seed: int = 0
) -> tuple[Estimate, float]:
    """The refined value with its error, and the value of the passage alone, which guards it against a
    cloud that the t distribution does not cover."""
    random = np.random.default_rng(seed)
    passage, cloud = tempered(likelihood, size, draws, moves, random)
    return refined(likelihood, cloud, last, random), passage


def _rise(log_l: np.ndarray, most: float) -> float:
    """The largest rise of b, at most ``most``, that leaves the share KEPT of the effective sample size."""

    def share(rise: float) -> float:
        weight = np.exp(rise * (log_l - log_l.max()))
        return weight.sum() ** 2 / (weight**2).sum() / len(weight)

    if share(most) >= KEPT:
        return most
    low, high = 0.0, most
    for _ in range(60):
        middle = (low + high) / 2
        low, high = (middle, high) if share(middle) > KEPT else (low, middle)
    return low


def _resampled(
    x: np.ndarray, log_l: np.ndarray, weight: np.ndarray, random: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    ladder = (random.random() + np.arange(len(x))) / len(x)
    chosen = np.minimum(np.searchsorted(np.cumsum(weight) / weight.sum(), ladder), len(x) - 1)
    return x[chosen], log_l[chosen]


def _move(
    likelihood: LogLikelihood,
    x: np.ndarray,
    log_l: np.ndarray,
    power: float,
    root: np.ndarray,
    random: np.random.Generator,
) -> float:
    """One Metropolis step of every draw, in place; share accepted."""
    trial = x + random.standard_normal(x.shape) @ root.T
    there = likelihood(trial)
    gain = power * (there - log_l) - ((trial**2).sum(1) - (x**2).sum(1)) / 2
    taken = np.log(random.random(len(x))) < gain
    x[taken], log_l[taken] = trial[taken], there[taken]
    return float(taken.mean())
