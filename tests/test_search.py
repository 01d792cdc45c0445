"""The search against every design of a grid, on the same virtual studies, and against itself.

Two candidates (first and second order), one run of two samples. The grid is worked through whole; a search
that is worth its time finds a plan at least as good, but for the Monte-Carlo error of the difference.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from itertools import combinations

import numpy as np
import pytest
from validation.invariance import orders

from designer import search, steepest, virtual
from designer.allowed import Allowed, allowed, fit_times
from designer.records import PlanSize
from designer.search import Effort, Found, Hill, Proposal
from designer.virtual import Bench

SEEDS = (3, 8)
EFFORT = Effort(studies=64, looks=8, starts=1, short_steps=4, long_steps=10, sweeps=1)
NEAR = 0.002  # of worth: what the last steps of so short an ascent may leave
LEVELS, TIMES = 4, 7  # of the grid: 4 levels, 21 pairs of times


@cache
def bench() -> Bench:
    return virtual.ready(replace(orders(), plan=PlanSize(1, 2)), lanes=32)


def offered(lever: bool) -> Allowed:
    """The study's own, or with the level left at its middle."""
    offer = allowed(bench().study)
    return offer if lever else replace(offer, levers=())


@cache
def searched(seed: int, lever: bool) -> Found:
    return search.best_plan(bench(), offered(lever), seed, EFFORT)


def grid(offer: Allowed) -> list[Proposal]:
    lever = allowed(bench().study).levers[0]
    levels = lever.value(np.linspace(0, 1, LEVELS)) if offer.levers else [bench().study.conditions[0].middle]
    times = np.geomspace(offer.first, offer.longest, TIMES)
    pairs = [fit_times(offer, np.array([pair])) for pair in combinations(times, 2)]
    return [Proposal(np.array([[level]]), pair, np.zeros(1)) for level in levels for pair in pairs]


def error_of_difference(hill: Hill, one: Proposal, other: Proposal) -> float:
    """Standard error of the difference of two worths over the studies they share."""
    each = []
    for proposal in (one, other):
        scores = virtual.conclude(bench(), search.design_of(bench(), proposal), hill.truths or [])
        each.append(steepest.worth(bench(), scores)[1])
    difference = each[0] - each[1]
    return float(np.sqrt(len(difference)) * difference.std())


@pytest.mark.parametrize("seed", SEEDS)
@pytest.mark.parametrize("lever", [True, False])
def test_as_good_as_every_design_of_the_grid(seed: int, lever: bool) -> None:
    offer, found = offered(lever), searched(seed, lever)
    hill = Hill(bench(), offer, EFFORT.studies, seed, "search")
    looked = [hill.look(proposal) for proposal in grid(offer)]
    best = max(looked, key=lambda each: each.worth)
    assert hill.look(found.proposal).worth == pytest.approx(found.worth, abs=1e-3)  # the same studies
    error = error_of_difference(hill, found.proposal, best.proposal)
    assert found.worth >= best.worth - max(error, NEAR)
    # control: most of the grid is worse by more than that
    assert sum(each.worth < found.worth - 0.02 for each in looked) > len(looked) / 2


def test_the_same_seed_gives_the_same_plan() -> None:
    again = search.best_plan(bench(), offered(True), SEEDS[0], EFFORT)
    first = searched(SEEDS[0], True)
    assert again.worth == first.worth
    np.testing.assert_array_equal(again.proposal.conditions, first.proposal.conditions)
    np.testing.assert_array_equal(again.proposal.times, first.proposal.times)


def test_another_seed_looks_at_other_studies() -> None:
    assert searched(SEEDS[1], True).worth != searched(SEEDS[0], True).worth
