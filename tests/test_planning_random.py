"""Plans of studies made up at random, beside what people usually do.

Two or three candidates among first order, order 1.5, second order and mixed second order; random constants,
errors and limits; one starting concentration to choose, two runs of three samples. The plan and the usual
schedules are rated on fresh virtual studies, the same truths and the same noise for each, so that
differences are paired. The usual schedule is the one that comes out best on these very studies.

A plan just as good as the best usual one falls below it by more than 3 standard errors once in 700
studies, all twelve together once in 60. The full setting, marked slow, does all twelve with the whole
search; its result is in docs/performance-of-plans.md.
"""

from __future__ import annotations

import sys
from functools import cache
from typing import NamedTuple

import numpy as np
import pytest
from validation.small import candidate, lognormal, species, study

from designer import planning, search, steepest, virtual
from designer.allowed import allowed
from designer.layout import arrays_of
from designer.likelihood import Design
from designer.records import Aim, Limits, PlanSize, RunErrors, Study
from designer.rounding import rounded
from designer.search import Effort

STUDIES, FEW = 12, 3  # all, and those of the continuous tests
SMALL = Effort(studies=64, looks=10, starts=1, short_steps=4, long_steps=8, sweeps=1)
FRESH, FRESH_FEW = 400, 100  # virtual studies of each candidate behind a comparison
BEYOND, BETTER = 3.0, 2.0  # standard errors
LAWS = (
    ("first order", "k*[A]", 1.0),
    ("order 1.5", "k*[A]^1.5", 1.5),
    ("second order", "k*[A]^2", 2.0),
    ("first order in both", "k*[A]*[C]", 2.0),
)


class Compared(NamedTuple):
    """Worth of the plan less that of the best usual schedule, its standard error, both, and which."""

    gain: float
    error: float
    plan: float
    usual: float
    name: str
    candidates: str


def made_up(number: int) -> Study:
    """Study ``number``: half-lives near one another, 5 min to 3 h, at the middle of the range of A."""
    random = np.random.default_rng([2024, number])
    low = 10 ** random.uniform(-3, -1.5)
    high = low * 10 ** random.uniform(0.4, 1.3)
    middle, half = (low * high) ** 0.5, 60 * 10 ** random.uniform(0.7, 2.25)
    chosen = sorted(random.choice(len(LAWS), size=random.integers(2, 4), replace=False))
    factor = random.uniform(0.2, 0.9)  # SD of ln k
    laws = []
    for name, rate, order in (LAWS[i] for i in chosen):
        k = lognormal("k", np.log(2) / half / middle ** (order - 1), factor)
        laws.append(candidate(name, "A + C -> P", rate, k, belief=1 / len(chosen)))
    first = half * 10 ** random.uniform(-1.5, -0.7)
    return study(
        laws,
        [species("A", low, high), species("C", 1.5 * high)],
        relative=random.uniform(0.005, 0.03),
        absolute=middle * random.uniform(0.001, 0.01),
        time_error=half * random.uniform(0.001, 0.01),
        lowest=middle * random.uniform(0.003, 0.01),
        run_errors=RunErrors(rate=random.uniform(0.005, 0.03)),
        plan=PlanSize(2, 3),
        limits=Limits(first_sample=first, spacing=first, longest_run=half * 10 ** random.uniform(0.5, 1.0)),
        aim=Aim(precision=(("k", 0.05),), weight_on_law=float(random.choice([0.3, 0.5, 0.8]))),
    )


@cache
def compared(number: int, effort: Effort, fresh: int) -> Compared:
    bench = virtual.ready(made_up(number), lanes=32)
    offer = allowed(bench.study)
    found = search.best_plan(bench, offer, 1, effort)
    plan = search.design_of(bench, rounded(offer, found.proposal))
    truths = virtual.draw(bench, plan, fresh, 2, "fresh")

    def worths(design: Design) -> tuple[float, np.ndarray]:
        scores = virtual.conclude(bench, design, truths)
        assert not scores.unsolved.any()
        return steepest.worth(bench, scores)[:2]

    own, each = worths(plan)
    usual = {
        other.name: worths(arrays_of(bench.axes, other)) for other in planning.usual_schedules(bench, offer)
    }
    name = max(usual, key=lambda key: usual[key][0])
    value, others = usual[name]
    error = np.sqrt(len(each)) * (each - others).std()
    names = ", ".join(law.candidate.name for law in bench.laws)
    return Compared(own - value, float(error), own, value, name, names)


@pytest.mark.parametrize("number", range(FEW))
def test_no_worse_than_the_best_usual_schedule(number: int) -> None:
    found = compared(number, SMALL, FRESH_FEW)
    assert found.gain > -BEYOND * found.error, found


def test_some_of_them_better() -> None:
    gains = [compared(number, SMALL, FRESH_FEW) for number in range(FEW)]
    assert any(found.gain > BETTER * found.error for found in gains), gains


@pytest.mark.slow
def test_all_twelve() -> None:
    found = [compared(number, Effort(), FRESH) for number in range(STUDIES)]
    for number, each in enumerate(found):
        sys.stdout.write(
            f"| {number} | {each.candidates} | {each.plan:.3f} | {each.usual:.3f} | {each.name} "
            f"| {each.gain:+.3f} | {each.error:.3f} |\n"
        )
    assert all(each.gain > -BEYOND * each.error for each in found)
    assert sum(each.gain > BETTER * each.error for each in found) >= STUDIES / 2
