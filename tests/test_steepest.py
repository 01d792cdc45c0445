"""Gradient of a plan's worth against central finite differences, noise held fixed, on the ester study.

A reading that crosses the lowest trusted value jumps, so studies in which one does so within a step of the
differences are left out of both sides. The differences refit every study until nothing is left to
gain: with fits as the search stops them (decrement 1e-6) they scatter by up to 2 %, the gradient does not.
"""

from __future__ import annotations

from dataclasses import replace
from typing import NamedTuple

import ester_bench
import numpy as np
import pytest

from designer import steepest, virtual
from designer.arrays import Array, jax
from designer.evidence import Point, quadratic
from designer.likelihood import Design, Readings
from designer.virtual import Bench, Scores, Truth

STEP = 1e-3  # of the level or time: differences err by STEP^2 and by rounding / STEP
SAMPLES = 4  # of the design; the rest is padding


class Case(NamedTuple):
    bench: Bench
    design: Design
    truths: list[Truth]
    scores: Scores


def case(laws: tuple[int, ...], studies: int) -> Case:
    whole = ester_bench.bench()
    some = replace(
        whole,
        laws=tuple(whole.laws[i] for i in laws),
        kernels=tuple(whole.kernels[i] for i in laws),
        prior=whole.prior[list(laws)],
        standing=whole.standing[list(laws)],
    )
    design = ester_bench.varied()
    truths = virtual.draw(some, design, studies, seed=1, purpose="gradient")
    return Case(some, design, truths, virtual.conclude(some, design, truths))


def polished(given: Case, design: Design) -> Scores:
    """Fits of a neighbouring design, run on until they are exact: each round brings them ten times nearer."""
    scores = given.scores
    for _ in range(6):
        starts = [Point(fit.u, fit.z) for fit in scores.fits]
        scores = virtual.conclude(given.bench, design, given.truths, starts)
    return scores


def levers() -> list[tuple[str, int, int]]:
    conditions = [("conditions", run, index) for run in range(3) for index in range(2)]
    return conditions + [("times", run, index) for run in range(3) for index in range(SAMPLES)]


def moved(design: Design, lever: tuple[str, int, int], by: float) -> Design:
    which, run, index = lever
    changed = getattr(design, which).copy()
    changed[run, index] *= 1 + by
    return design._replace(**{which: changed})


def weights_of(given: Case, counted: np.ndarray, columns: list[int]) -> tuple[np.ndarray, np.ndarray]:
    """Derivatives of the worth in ln Z and ln variance, 0 for studies and fitted laws that do not count."""
    _, _, d_evidence, d_spread = steepest.worth(given.bench, given.scores)
    kept = np.isin(np.arange(d_evidence.shape[1]), columns)
    own = np.isin(given.scores.truth, columns)
    return d_evidence * counted[:, None] * kept, d_spread * (counted & own)[:, None]


def never_crossing(given: Case) -> np.ndarray:
    """Studies whose readings stay on their side of the limit at every neighbour."""
    here = virtual.readings_of(given.bench, given.design, given.truths).side
    stable = np.ones(len(here), bool)
    for lever in levers():
        for by in (STEP, -STEP):
            there = virtual.readings_of(given.bench, moved(given.design, lever, by), given.truths).side
            stable &= (there == here).all((1, 2, 3))
    return stable


def change(given: Case, lever: tuple[str, int, int]) -> tuple[np.ndarray, np.ndarray]:
    """d ln Z (study, law) and d ln variance (study, asked) / d ln(lever), over refitted studies."""
    up, down = (polished(given, moved(given.design, lever, by)) for by in (STEP, -STEP))
    evidence = (up.log_evidence - down.log_evidence) / (2 * STEP)
    by_d = given.bench.precision_by == "D"
    wide, narrow = (s.overall_width if by_d else s.spread for s in (up, down))
    return evidence, np.log(wide / narrow) / STEP


def agreement(given: Case, columns: list[int]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Gradient and differences, both for ln(lever), and the stable studies."""
    stable = never_crossing(given)
    weights = weights_of(given, stable, columns)
    found = steepest.gradient(given.bench, given.design, given.truths, given.scores, weights)
    parts = {"conditions": found[0] * given.design.conditions, "times": found[1] * given.design.times}
    gradient = np.array([parts[which][run, index] for which, run, index in levers()])
    changes = [change(given, lever) for lever in levers()]
    # a law without the asked constant has no spread, and no weight
    expected = [sum(np.nansum(w * by) for w, by in zip(weights, each, strict=True)) for each in changes]
    return gradient, np.array(expected), stable


def agree(gradient: np.ndarray, expected: np.ndarray) -> None:
    """Each component to 1e-3, or to 1e-4 of the largest where terms cancel; the whole to 1e-4."""
    assert gradient == pytest.approx(expected, rel=1e-3, abs=1e-4 * np.abs(expected).max())
    assert np.linalg.norm(gradient - expected) < 1e-4 * np.linalg.norm(expected)


@pytest.fixture(scope="module")
def pair() -> Case:
    """M1, and M3 with its two constants."""
    return case((0, 2), 32)


def test_gradient_is_that_of_refitted_studies(pair: Case) -> None:
    gradient, expected, stable = agreement(pair, [0, 1])
    assert stable.mean() > 0.8
    agree(gradient, expected)


def test_what_is_not_read_pulls_at_nothing(pair: Case) -> None:
    weights = weights_of(pair, np.ones(len(pair.scores.truth), bool), [1])
    _, times = steepest.gradient(pair.bench, pair.design, pair.truths, pair.scores, weights)
    assert np.abs(times[:, :SAMPLES]).min() > 0
    assert (times[:, SAMPLES:] == 0).all()


def test_control_with_the_optimum_held_still(pair: Case) -> None:
    """ln Z differenced at a fixed optimum leaves out how ln det H moves with it: off by far more than 1e-3.
    (In F itself the optimum may stand still, by the envelope theorem.)"""
    law, fit = pair.bench.laws[1], pair.scores.fits[1]
    point = Point(fit.u, fit.z)

    def still(design: Design) -> np.ndarray:
        made = virtual.readings_of(pair.bench, design, pair.truths)
        return np.asarray(at(point, Readings(made.values, made.side), design))[:, 0]

    def one(p: Point, read: Readings, design: Design) -> Array:
        near, _, _ = quadratic(law, p, design, read, law.second_order)
        return steepest.evidence_and_spread(law, ("k",), p.u, near)

    at = jax.jit(jax.vmap(one, in_axes=(0, 0, None)))
    lever = ("conditions", 0, 1)
    stable = never_crossing(pair)
    up, down = (moved(pair.design, lever, by) for by in (STEP, -STEP))
    held = (still(up) - still(down)) / (2 * STEP)
    whole = (polished(pair, up).log_evidence - polished(pair, down).log_evidence)[:, 1] / (2 * STEP)
    off = np.linalg.norm((held - whole)[stable]) / np.linalg.norm(whole[stable])
    assert off > 5e-3


def test_worth_is_differentiated_in_evidence_and_spread(pair: Case) -> None:
    scores, step = pair.scores, 1e-5
    _, _, d_evidence, d_spread = steepest.worth(pair.bench, scores)
    for row, column in ((0, 0), (3, 1), (60, 0), (60, 1)):
        change = np.zeros_like(scores.log_evidence)
        change[row, column] = step
        up = steepest.worth(pair.bench, scores._replace(log_evidence=scores.log_evidence + change))[0]
        down = steepest.worth(pair.bench, scores._replace(log_evidence=scores.log_evidence - change))[0]
        assert d_evidence[row, column] == pytest.approx((up - down) / (2 * step), abs=1e-8)
    for row in (2, 50):  # half_width^2 is the variance times a constant
        ends = []
        for by in (step, -step):
            width = scores.half_width.copy()
            width[row] *= np.exp(by / 2)
            ends.append(steepest.worth(pair.bench, scores._replace(half_width=width))[0])
        assert d_spread[row, 0] == pytest.approx((ends[0] - ends[1]) / (2 * step), rel=1e-5)


@pytest.mark.slow
def test_gradient_with_the_generalised_variance(pair: Case) -> None:
    """Precision counted by measure D: the weights go to ln of the generalised variance."""
    by_d = pair._replace(bench=replace(pair.bench, precision_by="D"))
    gradient, expected, _ = agreement(by_d, [0, 1])
    agree(gradient, expected)


@pytest.mark.slow
def test_gradient_with_all_four_laws() -> None:
    gradient, expected, _ = agreement(case((0, 1, 2, 3), 128), [0, 1, 2, 3])
    agree(gradient, expected)
