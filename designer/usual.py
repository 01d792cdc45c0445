"""Schedules that people usually choose: what any plan has to beat.

Same runs and samples; all runs at the geometric middle of the ranges, or alternating between two
levels (a quarter and three quarters of the way along each lever); times equally or logarithmically
spaced from the first sample to 90 % conversion of the belief-weighted median curve, or to the end of
the longest run if that comes first (common practice).
"""

from __future__ import annotations

from functools import partial

import numpy as np

from designer.allowed import Allowed, fit_conditions, fit_times
from designer.arrays import Array, jax, jnp
from designer.signals import Law
from designer.virtual import Bench, stream

CONVERSION = 0.9
DRAWS = 64
CURVE = 160  # points on the curve from which the time is read
TIE = 1e-12  # of the whole weight


def conversion_time(
    bench: Bench, conditions: np.ndarray, offer: Allowed, conversion: float = CONVERSION
) -> float:
    """When the belief-weighted median of the fraction of the first-named reactant left has fallen to
    1 - ``conversion`` at these conditions, s; the longest run if it has not by then."""
    end = offer.longest
    times = np.concatenate([[0.0], np.geomspace(end * 1e-5, end, CURVE)])
    left, weight = [], []
    for index, odds in zip(bench.listed, bench.odds, strict=True):
        law = bench.laws[index]
        reactant = law.candidate.steps[0].equation.first_reactant
        u = stream(0, law.candidate, "usual").standard_normal((DRAWS, len(law.structural)))
        amount = np.asarray(_curves(law, reactant, u, conditions, times))
        left.append(amount / np.maximum(amount[:, :1], 1e-300))
        weight.append(np.full(DRAWS, odds / DRAWS))
    median = _weighted_median(np.concatenate(left), np.concatenate(weight))
    below = np.flatnonzero(median <= 1 - conversion)
    if len(below) == 0:
        return end
    i = below[0]
    share = (median[i - 1] - (1 - conversion)) / max(median[i - 1] - median[i], 1e-300)
    return float(times[i - 1] + share * (times[i] - times[i - 1]))


@partial(jax.jit, static_argnums=(0, 1))
def _curves(law: Law, species: str, u: Array, conditions: Array, times: Array) -> Array:
    """Concentration of a species for each draw of u, without errors of the run: (draw, time)."""
    z = jnp.zeros(len(law.errors))
    return jax.vmap(lambda x: law.concentrations(x, z, conditions, times)[species])(u)


def _weighted_median(values: np.ndarray, weight: np.ndarray) -> np.ndarray:
    order = np.argsort(values, axis=0, kind="stable")
    running = np.cumsum(weight[order], axis=0)
    half = 0.5 * weight.sum() * (1 - TIE)  # rounding, and with it the order of the list, must not decide
    place = (running >= half).argmax(0)
    columns = np.arange(values.shape[1])
    return values[order[place, columns], columns]


def spaced(offer: Allowed, end: float, logarithmic: bool, begin: float = 0.0) -> np.ndarray:
    """Times of one run from ``begin`` (the first sample, unless that comes later) to ``end``, (sample,)."""
    taken = offer.samples - offer.at_start
    first = max(offer.first, begin) if offer.first + begin > 0 or not logarithmic else end / 100
    end = max(end, first * (1 + 1e-9) + 1e-9)
    row = np.geomspace(max(first, end * 1e-6), end, taken) if logarithmic else np.linspace(first, end, taken)
    return np.concatenate([np.zeros(int(offer.at_start)), row])


def conditions_at(offer: Allowed, places: np.ndarray) -> np.ndarray:
    """Conditions (run, condition) with every lever at ``places`` (run,) of its way, 0 to 1."""
    study = offer.study
    rows = np.tile([condition.middle for condition in study.conditions], (len(places), 1)).astype(float)
    for lever in offer.levers:
        rows[:, lever.index] = lever.value(np.asarray(places))
    return fit_conditions(offer, rows)


def usual_schedules(bench: Bench, offer: Allowed) -> list[tuple[str, np.ndarray, np.ndarray]]:
    """(name, conditions, times) of the four usual schedules; two where no lever is free."""
    found = []
    halves = {"one level": np.full(offer.runs, 0.5)}
    if offer.levers and offer.runs > 1:
        halves["two levels"] = np.where(np.arange(offer.runs) % 2 == 0, 0.25, 0.75)
    for level, places in halves.items():
        conditions = conditions_at(offer, places)
        ends = [conversion_time(bench, row, offer) for row in conditions]
        for spacing, logarithmic in (("equal steps", False), ("logarithmic steps", True)):
            times = np.stack([spaced(offer, end, logarithmic) for end in ends])
            found.append((f"{level}, {spacing}", conditions, fit_times(offer, times)))
            if len(bench.axes.grid):
                break
    if len(bench.axes.grid):
        return [(name.split(",")[0], c, t) for name, c, t in found]
    return found
