"""Virtual studies: simulate a study under each listed candidate and do to it what real readings get.

The truth is drawn from the listed candidates and their beliefs (as they stand after any pilot),
readings are simulated with every error the study states, and the evidence kernel says what would
have been concluded. Random draws are keyed by what a candidate is, not by its place in the list, so
that the order of candidates changes nothing.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass
from functools import partial
from typing import NamedTuple

import numpy as np

from designer import beliefs, gates, signals
from designer.arrays import Array, jax, jnp, side_by_side
from designer.evidence import Fit, Kernel, Point, Quadratic
from designer.layout import Layout, layout
from designer.likelihood import Design, Readings, limits
from designer.records import Z95, Candidate, Study
from designer.signals import Law

PRIOR_DRAWS = 4000  # draws of the belief from which those that agree with a pilot are taken
MOST_GATED = 8  # studies of a plan in which a law without cheap second derivatives goes through the gates
NEAR = 7.0  # nats below the best beyond which an error of 0.05 in evidence moves no probability by 1e-4


class Truth(NamedTuple):
    """Draws of one true candidate: u (draw, structural), z (draw, run, error), and the standard-normal
    noise of its readings (draw, run, time, signal)."""

    u: np.ndarray
    z: np.ndarray
    noise: np.ndarray


@dataclass(frozen=True)
class Bench:
    """A study made ready: one law and one compiled kernel for each candidate carried, the layout of
    the arrays, and the beliefs in the listed candidates as they stand after the pilots."""

    study: Study
    laws: tuple[Law, ...]
    kernels: tuple[Kernel, ...]
    axes: Layout
    prior: np.ndarray  # (candidate,) before the pilots, free-order alternative included
    standing: np.ndarray  # (candidate,) after the pilots
    asked: tuple[tuple[str, float], ...]  # (constant, half-width) of the precision aim
    precision_by: str = "c"

    @property
    def listed(self) -> tuple[int, ...]:
        return tuple(i for i, law in enumerate(self.laws) if not law.candidate.free_order)

    @property
    def odds(self) -> np.ndarray:
        """Beliefs among the listed candidates after the pilots, summing to 1."""
        some = self.standing[list(self.listed)]
        return some / some.sum()


def ready(study: Study, samples: int | None = None, lanes: int = 128, precision_by: str = "c") -> Bench:
    """Compile a study: laws, kernels, layout, and beliefs after the pilots.

    precision_by: what the search counts as precision, "c" (variance of each asked ln-constant) or "D"
    (generalised variance of all structural coordinates of the true law).
    """
    laws = tuple(signals.law(study, candidate) for candidate in study.candidates)
    kernels = tuple(Kernel(law, lanes) for law in laws)
    axes = layout(study, samples)
    prior = np.array([candidate.belief for candidate in study.candidates])
    standing = prior
    if len(axes.carried.times):
        one = Readings(*(x[None] for x in axes.carried_readings))
        found = [gates.assured(kernel, axes.carried, one).log_evidence[0] for kernel in kernels]
        weight = np.log(prior) + np.array(found)
        standing = np.exp(weight - weight.max())
        standing = standing / standing.sum()
    return Bench(study, laws, kernels, axes, prior, standing, study.aim.precision, precision_by)


def stream(seed: int, candidate: Candidate, purpose: str) -> np.random.Generator:
    """Random numbers of a candidate for a purpose, keyed by the candidate's content."""
    steps = [(step.equation.stoichiometry, step.text) for step in candidate.steps]
    text = repr((seed, candidate.name, steps, purpose))
    return np.random.default_rng(int.from_bytes(hashlib.sha256(text.encode()).digest()[:16], "big"))


def draw(bench: Bench, design: Design, count: int, seed: int, purpose: str) -> list[Truth]:
    """``count`` truths of every listed candidate for designs of this shape."""
    runs = len(design.times)
    truths = []
    for index in bench.listed:
        law = bench.laws[index]
        random = stream(seed, law.candidate, purpose)
        u = truth_draws(bench, index, count, random)
        z = random.standard_normal((count, runs, len(law.errors)))
        noise = random.standard_normal((count, runs, bench.axes.width, len(law.channels)))
        truths.append(Truth(u, z, noise))
    return truths


def truth_draws(bench: Bench, index: int, count: int, random: np.random.Generator) -> np.ndarray:
    """Structural coordinates of a candidate (index among all carried): from the prior, or, where there
    are pilots, from what they leave of it (resampled by evidence)."""
    size = len(bench.laws[index].structural)
    if not len(bench.axes.carried.times) or size == 0:
        return random.standard_normal((count, size))
    prior = random.standard_normal((PRIOR_DRAWS, size))
    carried = bench.axes.carried
    readings = Readings(*(np.repeat(x[None], PRIOR_DRAWS, 0) for x in bench.axes.carried_readings))
    z = np.zeros((PRIOR_DRAWS, len(carried.times), len(bench.laws[index].errors)))
    held = bench.kernels[index].fit(carried, readings, Point(prior, z), np.zeros_like(prior))
    log_weight = held.log_evidence + (prior**2).sum(1) / 2  # the prior is already in the draws
    weight = np.exp(log_weight - log_weight.max())
    ladder = (random.random() + np.arange(count)) / count
    chosen = np.searchsorted(np.cumsum(weight) / weight.sum(), ladder)
    return prior[random.permutation(np.minimum(chosen, PRIOR_DRAWS - 1))]


def simulate(law: Law, u: Array, z: Array, noise: Array, conditions: Array, times: Array) -> Readings:
    """Readings of one virtual study; censored ones carry the limit and the side."""
    signal = jax.vmap(law.read, in_axes=(None, 0, 0, 0))(u, z, conditions, times)
    values = signal.mean + jnp.sqrt(signal.variance) * noise
    lowest, highest = limits(law)
    still = jax.lax.stop_gradient(values)
    side = jnp.where(still < lowest, -1.0, jnp.where(still > highest, 1.0, 0.0))
    return Readings(jnp.where(side == 0, values, jnp.clip(still, lowest, highest)), side)


@partial(jax.jit, static_argnums=0)
def _simulate_all(law: Law, u: Array, z: Array, noise: Array, conditions: Array, times: Array) -> Readings:
    return jax.vmap(lambda a, b, c: simulate(law, a, b, c, conditions, times))(u, z, noise)


def readings_of(bench: Bench, design: Design, truths: list[Truth]) -> Readings:
    """Readings of all virtual studies, truth after truth: (truth * draw, run, time, signal)."""
    parts = []
    for index, truth in zip(bench.listed, truths, strict=True):
        made = _simulate_all(bench.laws[index], *truth, design.conditions, design.times)
        parts.append([np.array(x) for x in made])
    values, side = (np.concatenate(column) for column in zip(*parts, strict=True))
    carried = bench.axes.carried_readings
    count = len(carried.values)
    if count:
        values[:, :count], side[:, :count] = carried.values, carried.side
    return Readings(values, side)


class Scores(NamedTuple):
    """What the virtual studies concluded. Leading axis: truth * draw.

    truth: index among the listed; log_evidence (study, candidate), -inf for the free-order alternative,
    which is not fitted here (``free_order_evidence``); half_width (study, asked) of the 95 % range of
    each asked constant under the true law (nan where that law has none); spread: SD of ln k under the
    true law (study, asked); overall_width: the same half-width from the generalised variance of all
    constants, per constant (study, 1), which measure D asks for; doubtful: a value that counts is
    still flagged; fits of each candidate, and the blocks of F at their optima (not if careful).
    """

    truth: np.ndarray
    log_evidence: np.ndarray
    half_width: np.ndarray
    spread: np.ndarray
    overall_width: np.ndarray
    doubtful: np.ndarray
    repaired: np.ndarray
    unsolved: np.ndarray
    fits: tuple[Fit, ...]
    blocks: tuple[Quadratic, ...] = ()


def conclude(
    bench: Bench,
    design: Design,
    truths: list[Truth],
    starts: list[Point | None] | None = None,
    careful: bool = False,
) -> Scores:
    """Simulate, and fit every listed candidate. careful: through all gates."""
    readings = readings_of(bench, design, truths)
    counts = [len(truth.u) for truth in truths]
    truth = np.repeat(np.arange(len(truths)), counts)

    def fitted(index: int) -> tuple[Fit, Quadratic | None]:
        start = None if starts is None else starts[index]
        if careful:
            return gates.careful_fit(bench.kernels[index], design, readings, start), None
        return bench.kernels[index].fit_and_blocks(design, readings, start, exact=False)

    found = side_by_side(fitted, bench.listed)
    fits = {index: fit for index, (fit, _) in zip(bench.listed, found, strict=True)}
    blocks = tuple(near for _, near in found if near is not None)
    values = np.full((len(truth), len(bench.laws)), -np.inf)
    for index, fit in fits.items():
        values[:, index] = np.where(fit.trouble > 0, -np.inf, fit.log_evidence)
    doubtful, repaired = np.zeros(len(truth), bool), np.zeros(len(truth), int)
    if careful:
        values, doubtful, repaired = _assure(bench, design, readings, fits, values)
    unsolved = np.array([(fits[i].trouble > 0).sum() if i in fits else 0 for i in range(len(bench.laws))])
    spread = _spreads(bench, truth, fits)
    overall = Z95 * _overall_spread(bench, truth, fits)
    return Scores(
        truth,
        values,
        Z95 * spread,
        spread,
        overall,
        doubtful,
        repaired,
        unsolved,
        tuple(fits.values()),
        blocks,
    )


def free_order_evidence(bench: Bench, design: Design, truths: list[Truth], most: int) -> np.ndarray | None:
    """ln Z of the free-order alternative in the first ``most`` studies of every truth (truth * draw,), by
    Laplace; None where none is carried. It never gates an aim, so it goes through no gate itself."""
    place = [i for i, law in enumerate(bench.laws) if law.candidate.free_order]
    if not place:
        return None
    some = [Truth(*(x[:most] for x in truth)) for truth in truths]
    fit = gates.careful_fit(bench.kernels[place[0]], design, readings_of(bench, design, some))
    return np.where(fit.trouble > 0, -np.inf, fit.log_evidence)


def _assure(
    bench: Bench, design: Design, readings: Readings, fits: dict[int, Fit], values: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    near = values > values.max(1, keepdims=True) - NEAR
    open_ = near.sum(1) > 1  # where one candidate stands alone, its evidence may be off without harm
    values = values.copy()
    doubtful, repaired = np.zeros(len(values), bool), np.zeros(len(values), int)

    def through(index: int) -> np.ndarray:
        matters = near[:, index] & open_
        if bench.laws[index].second_order:
            return matters
        return matters & (np.cumsum(matters) <= MOST_GATED)

    def sure(index: int) -> gates.Assured:
        matters = through(index)
        return gates.assured(bench.kernels[index], design, readings, matters=matters, fit=fits[index])

    for index, found in zip(fits, side_by_side(sure, fits), strict=True):
        matters = through(index)
        values[matters, index] = found.log_evidence[matters]
        doubtful |= found.flagged & matters
        repaired += found.repaired & matters
    return values, doubtful, repaired


def slopes(law: Law, name: str, u: np.ndarray) -> np.ndarray | None:
    """d ln(constant) / du at each draw: (draw, structural); None if the law has no such unknown."""
    if name not in law.structural:
        return None
    place = law.structural.index(name)
    belief = law.candidate.constant(name).belief
    out = np.zeros_like(u)
    out[:, place] = np.asarray(beliefs.log_slope(belief, jnp.asarray(u[:, place])))
    return out


def _spreads(bench: Bench, truth: np.ndarray, fits: dict[int, Fit]) -> np.ndarray:
    spread = np.full((len(truth), max(len(bench.asked), 1)), np.nan)
    names: list[str | None] = [name for name, _ in bench.asked] or [None]
    for row, index in enumerate(bench.listed):
        mine = truth == row
        law, fit = bench.laws[index], fits[index]
        for column, name in enumerate(names):
            name = name or (law.structural[0] if law.structural else "")
            slope = slopes(law, name, fit.u[mine])
            if slope is not None:
                spread[mine, column] = np.sqrt(np.einsum("ni,nij,nj->n", slope, fit.covariance[mine], slope))
    return spread


def _overall_spread(bench: Bench, truth: np.ndarray, fits: dict[int, Fit]) -> np.ndarray:
    """Geometric mean SD of the ln-constants of the true law, by their generalised variance: (study, 1)."""
    spread = np.full((len(truth), 1), np.nan)
    if bench.precision_by != "D":
        return spread
    for row, index in enumerate(bench.listed):
        mine = truth == row
        law, fit = bench.laws[index], fits[index]
        if not law.structural:
            continue
        size = len(law.structural)
        each = [slopes(law, c.name, fit.u[mine]) for c in law.candidate.constants if c.name in law.structural]
        logs = sum(np.log(np.abs(slope).sum(1)) for slope in each if slope is not None)
        spread[mine, 0] = np.exp((logs + np.linalg.slogdet(fit.covariance[mine])[1] / 2) / size)
    return spread


def probabilities(bench: Bench, log_evidence: np.ndarray) -> np.ndarray:
    """P(candidate | readings) among the listed: (study, listed). log_evidence holds real readings too."""
    listed = list(bench.listed)
    weight = np.log(bench.prior[listed]) + log_evidence[:, listed]
    weight = np.exp(weight - weight.max(1, keepdims=True))
    return weight / weight.sum(1, keepdims=True)
