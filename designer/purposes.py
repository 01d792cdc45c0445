"""What each sample is for, and which candidates no plan on these levers can tell apart.

Both rest on the same trial: readings without noise from one candidate, every other candidate fitted
to them as well as it can. What is left between the two, in standard deviations of the reading, is what
a sample contributes to telling them apart.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np

from designer import virtual
from designer.arrays import jax, jnp
from designer.evidence import Point
from designer.likelihood import Design, Readings, limits
from designer.outcomes import Inseparable
from designer.signals import Law, Signal
from designer.virtual import Bench

DRAWS = 8  # truths of each candidate tried when two are said to predict the same
SAME = 0.1  # nats left after the rival's best refit, below which two candidates predict the same
APART = 2.0  # nats at which a freed condition is said to separate them
FACTOR, KELVIN = 2.0, 10.0  # by which a fixed condition is freed
HARD = 10.0  # separation (in squared SD) that makes a pair easy
HOPELESS = 30.0  # nats left after the refit, beyond which a rival's refit means nothing
TELLING = 1.5  # SD a sample must contribute to be said to separate
CLEARLY = 0.1  # and the share of its pair's separation, against its share of what is learned of the constant


@dataclass(frozen=True)
class Contrast:
    """means (truth, rival, run, time, signal): the rival's best refit to the truth's noiseless readings,
    the truth's own on the diagonal; variance likewise; left (truth, rival): nats left after the refit;
    seen: the means held at the limits of what can be read."""

    means: np.ndarray
    variances: np.ndarray
    left: np.ndarray
    seen: np.ndarray


def _signals(law: Law, design: Design, point: Point) -> Signal:
    read = jax.vmap(law.read, in_axes=(None, 0, 0, 0))
    many = jax.vmap(lambda u, z: read(u, z, design.conditions, design.times))
    return jax.jit(many)(point.u, point.z)


def _own(law: Law, design: Design, u: np.ndarray) -> tuple[Readings, Signal]:
    """Noiseless readings of each draw, without errors of the runs."""
    z = jnp.zeros((len(u), len(design.times), len(law.errors)))
    signal = _signals(law, design, Point(u, z))
    lowest, highest = limits(law)
    side = np.where(signal.mean < lowest, -1.0, np.where(signal.mean > highest, 1.0, 0.0))
    values = np.where(side == 0, signal.mean, np.clip(signal.mean, lowest, highest))
    return Readings(values, side), signal


def contrast(bench: Bench, design: Design, truth: int, u: np.ndarray) -> Contrast:
    """Fit every listed candidate to noiseless readings of candidate ``truth`` (index among the listed) at
    draws ``u`` (draw, structural); the axes "truth" of the result are these draws."""
    law = bench.laws[bench.listed[truth]]
    readings, own = _own(law, design, u)
    masked = np.asarray(design.mask)
    least = (masked * np.log(2 * np.pi * np.asarray(own.variance)) / 2 * (readings.side == 0)).sum((1, 2, 3))
    means, variances, left = [], [], []
    for row, index in enumerate(bench.listed):
        if row == truth:
            means.append(np.asarray(own.mean))
            variances.append(np.asarray(own.variance))
            left.append(np.zeros(len(u)))
            continue
        fit = bench.kernels[index].fit(design, readings)
        signal = _signals(bench.laws[index], design, Point(fit.u, fit.z))
        means.append(np.asarray(signal.mean))
        variances.append(np.asarray(signal.variance))
        left.append(np.maximum(fit.loss - (fit.u**2).sum(1) / 2 - least, 0.0))
    stacked = np.stack(means, 1)
    seen = np.clip(stacked, *limits(law))
    return Contrast(stacked, np.stack(variances, 1), np.stack(left, 1), seen)


def inseparable(bench: Bench, design: Design, seed: int) -> tuple[Inseparable, ...]:
    """Pairs that predict the same, whichever is true, and the fixed conditions that would separate them."""
    left = _left(bench, design, seed)
    found = []
    for a, b in combinations(range(len(bench.listed)), 2):
        if max(left[a, b], left[b, a]) >= SAME:
            continue
        levers = [
            name
            for name, freed in _freed(bench, design)
            if min(_pair(bench, freed, seed, a, b), _pair(bench, freed, seed, b, a)) > APART
        ]
        names = [bench.laws[bench.listed[i]].candidate.name for i in (a, b)]
        found.append(Inseparable(names[0], names[1], tuple(levers)))
    return tuple(found)


def _draws(bench: Bench, seed: int, truth: int) -> np.ndarray:
    law = bench.laws[bench.listed[truth]]
    u = virtual.stream(seed, law.candidate, "purposes").standard_normal((DRAWS, len(law.structural)))
    u[0] = 0.0
    return u


def _left(bench: Bench, design: Design, seed: int) -> np.ndarray:
    """Median nats left between each truth (row) and rival (column)."""
    rows = [
        np.median(contrast(bench, design, truth, _draws(bench, seed, truth)).left, axis=0)
        for truth in range(len(bench.listed))
    ]
    return np.stack(rows)


def _pair(bench: Bench, design: Design, seed: int, truth: int, rival: int) -> float:
    return float(np.median(contrast(bench, design, truth, _draws(bench, seed, truth)).left[:, rival]))


def _freed(bench: Bench, design: Design) -> list[tuple[str, Design]]:
    """The design with each fixed condition raised in every second run of its own."""
    carried = len(bench.axes.carried.times)
    found = []
    for index, condition in enumerate(bench.study.conditions):
        if not condition.is_fixed or condition.low <= 0:
            continue
        conditions = np.array(design.conditions)
        rows = np.arange(carried, len(conditions))
        rows = rows[1::2] if len(rows) > 1 else rows
        if condition.name == "temperature":
            conditions[rows, index] += KELVIN
        else:
            conditions[rows, index] *= FACTOR
        found.append((condition.name, design._replace(conditions=conditions)))
    return found


@dataclass(frozen=True)
class Purpose:
    """What one sample is for: the pair it separates best (indices among the listed; None where it serves
    the constant), the signal, and what each of the pair predicts there."""

    pair: tuple[int, int] | None
    signal: int
    values: tuple[float, float]


def purposes(bench: Bench, design: Design) -> list[list[Purpose]]:
    """Purpose of every place of the time axis, run by run (carried runs left out)."""
    count = len(bench.listed)
    trials = [
        contrast(bench, design, truth, np.zeros((1, len(bench.laws[bench.listed[truth]].structural))))
        for truth in range(count)
    ]
    mask = np.asarray(design.mask)
    gap = np.zeros((count, count, *mask.shape))
    for truth, trial in enumerate(trials):
        for rival in range(count):
            if rival != truth:
                difference = trial.seen[0, rival] - trial.seen[0, truth]
                gap[truth, rival] = mask * difference**2 / trial.variances[0, truth]
    whole = gap.sum((2, 3, 4))
    # a share of what separates the pair, pairs that are hard to tell apart counting most
    hardest = np.min(whole[~np.eye(count, dtype=bool)], initial=np.inf) if count > 1 else 0.0
    weight = (hardest + HARD) / (whole + HARD) ** 2
    score = gap * weight[:, :, None, None, None]
    on_constant = _information_on_constant(bench, design)
    carried = len(bench.axes.carried.times)
    table = []
    for run in range(carried, len(mask)):
        table.append([_purpose(gap, score, on_constant, trials, run, t) for t in range(mask.shape[1])])
    return table


def _purpose(
    gap: np.ndarray,
    score: np.ndarray,
    on_constant: np.ndarray,
    trials: list[Contrast],
    run: int,
    time: int,
) -> Purpose:
    here = score[:, :, run, time]
    truth, rival, signal = np.unravel_index(here.argmax(), here.shape)
    apart = np.sqrt(gap[truth, rival, run, time, signal])
    if apart < TELLING or here.max() < CLEARLY * on_constant[run, time]:
        return Purpose(None, int(signal), (np.nan, np.nan))
    trial = trials[truth]
    values = (
        float(trial.means[0, truth, run, time, signal]),
        float(trial.means[0, rival, run, time, signal]),
    )
    return Purpose((int(truth), int(rival)), int(signal), values)


def _information_on_constant(bench: Bench, design: Design) -> np.ndarray:
    """Share of the information on the first structural constant that each place carries, averaged over the
    listed laws: (run, time)."""
    total = np.zeros(np.shape(design.mask)[:2])
    step = 1e-3
    for index, odds in zip(bench.listed, bench.odds, strict=True):
        law = bench.laws[index]
        if not law.structural:
            continue
        z = np.zeros((2, len(design.times), len(law.errors)))
        u = np.zeros((2, len(law.structural)))
        u[:, _asked_place(bench, law)] = (step, -step)
        signal = _signals(law, design, Point(u, z))
        slope = (signal.mean[0] - signal.mean[1]) / (2 * step)
        each = np.asarray((design.mask * slope**2 / signal.variance[0]).sum(-1))
        total += odds * each / max(each.sum(), 1e-300)
    return total


def _asked_place(bench: Bench, law: Law) -> int:
    names = [name for name, _ in bench.asked if name in law.structural]
    return law.structural.index(names[0]) if names else 0
