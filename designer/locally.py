"""Local Fisher information of a plan: how it stands against every design within the limits.

At the middle of one candidate's beliefs, in the logarithms of its constants, beliefs and errors of the
runs left out, a sample being the unit: measures D (all constants) and c (each asked constant), with
the bound that the equivalence theorem puts on any design of samples on offer (``continuous``).
"""

from __future__ import annotations

from itertools import product

import numpy as np

from designer import beliefs, continuous
from designer.allowed import Allowed
from designer.arrays import Array, jax, jnp
from designer.errors import AliquotError
from designer.information import Sensitivities, measure
from designer.likelihood import Design
from designer.outcomes import LocalRating
from designer.signals import Law
from designer.virtual import Bench

TIMES = 40  # on offer in each run, logarithmically spaced
LEVELS = {1: 9, 2: 5, 3: 4}  # of each lever on offer, by the number of levers


def sensitivities(law: Law, conditions: np.ndarray, times: np.ndarray) -> Sensitivities:
    """Derivatives of the mean readings in the ln-constants and variances of the readings, for samples
    (sample, condition) at times (sample,) s: arrays (sample, signal, constant) and (sample, signal)."""
    names = [constant.name for constant in law.candidate.constants]
    places = [place for place, name in enumerate(law.structural) if name in names]
    u = jnp.zeros(len(law.structural))
    scale = np.array(
        [
            float(beliefs.log_slope(law.candidate.constant(law.structural[place]).belief, u[place]))
            for place in places
        ]
    )

    def one(at: Array, time: Array) -> tuple[Array, Array, Array]:
        def mean(x: Array) -> tuple[Array, Array]:
            signal = law.read(x, jnp.zeros(len(law.errors)), at, time[None])
            return signal.mean[0], signal.variance[0]

        (value, variance), (slope, _) = jax.vmap(lambda v: jax.jvp(mean, (u,), (v,)), out_axes=(None, 0))(
            jnp.eye(len(law.structural))
        )
        return value, variance, slope

    _, variance, slope = jax.jit(jax.vmap(one))(conditions, times)
    jacobian = np.moveaxis(np.asarray(slope), 1, 2)[:, :, places] / scale
    return Sensitivities(jacobian, np.asarray(variance))


def _on_offer(bench: Bench, offer: Allowed) -> tuple[np.ndarray, np.ndarray]:
    """A grid of single samples within the limits: conditions (sample, condition) and times (sample,)."""
    study = offer.study
    levels = LEVELS.get(len(offer.levers), 3)
    ways = [
        list(lever.levels) or [float(v) for v in lever.value(np.linspace(0, 1, levels))]
        for lever in offer.levers
    ]
    earliest = max(offer.first, offer.longest * 1e-4)
    times = bench.axes.grid if len(bench.axes.grid) else np.geomspace(earliest, offer.longest, TIMES)
    rows, clock = [], []
    for chosen in product(*ways):
        row = [condition.middle for condition in study.conditions]
        for lever, value in zip(offer.levers, chosen, strict=True):
            row[lever.index] = value
        rows += [row] * len(times)
        clock += list(times)
    return np.array(rows), np.array(clock)


def local_ratings(bench: Bench, offer: Allowed, design: Design) -> tuple[LocalRating, ...]:
    """D, and c for each asked constant, of the plan under every listed candidate. A measure that the plan
    or the samples on offer cannot estimate is left out."""
    carried = len(bench.axes.carried.times)
    mask = np.asarray(design.mask)[carried:].any(-1)
    runs, places = np.nonzero(mask)
    conditions = np.asarray(design.conditions)[carried:][runs]
    times = np.asarray(design.times)[carried:][runs, places]
    offered = _on_offer(bench, offer)
    everything = (np.vstack([offered[0], conditions]), np.concatenate([offered[1], times]))
    real = slice(None, len(bench.study.readings))
    found = []
    for index in bench.listed:
        law = bench.laws[index]
        if not law.structural or any(_is_shared_error(name) for name in law.structural):
            continue
        whole = sensitivities(law, *everything)
        jacobian, variance = whole.jacobian[:, real], np.asarray(whole.variance)[:, real]
        count = len(offered[1])
        whole, plan = Sensitivities(jacobian, variance), Sensitivities(jacobian[count:], variance[count:])
        for kind, name in [("D", ""), *(("c", n) for n, _ in bench.asked if n in law.structural)]:
            rating = _one(kind, name, law, plan, whole)
            if rating is not None:
                found.append(rating)
    return tuple(found)


def _is_shared_error(name: str) -> bool:
    return name.startswith(("noise of ", "stock of ", "activation energy of "))


def _one(kind: str, name: str, law: Law, plan: Sensitivities, whole: Sensitivities) -> LocalRating | None:
    size = len(law.structural)
    gradient = [float(name == other) for other in law.structural] if kind == "c" else None
    try:
        rated = continuous.rate(measure(kind, size, gradient=gradient), plan, whole)
    except AliquotError:
        return None  # not estimable from samples of this kind alone; said nowhere else as a number
    if not np.isfinite(rated.margin):
        return None
    return LocalRating(law.candidate.name, f"{kind} {name}".strip(), rated.criterion, rated.margin)
