"""What must not change a plan or a probability: units, scale, order of the list, rows of data."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np

from designer import search, virtual
from designer.allowed import allowed
from designer.likelihood import Design, Readings
from designer.records import Aim, Limits, PlanSize, RunErrors, Study
from designer.search import Effort, Proposal
from designer.virtual import Bench, Truth
from validation.registry import Check, known
from validation.small import candidate, lognormal, species, study

SEED = 5
EFFORT = Effort(studies=48, looks=6, starts=1, short_steps=3, long_steps=4, sweeps=1)
RUNS, SAMPLES = 2, 3
SCALE, PER_MINUTE = 1000.0, 60.0
LANES = 32
BY_CONSTRUCTION = "follows from the definition of the task"


def orders(scale: float = 1.0, time: float = 1.0) -> Study:
    """First against second order; every concentration times ``scale``, every time times ``time``."""
    laws = [
        candidate("first", "A -> B", "k*[A]", lognormal("k", 1e-3 / time, 0.6), belief=0.6),
        candidate("second", "A -> B", "k*[A]^2", lognormal("k", 1.5e-2 / time / scale, 0.6), belief=0.4),
    ]
    return study(
        laws,
        [species("A", 0.02 * scale, 0.2 * scale)],
        relative=0.02,
        absolute=2e-4 * scale,
        time_error=5.0 * time,
        lowest=5e-4 * scale,
        run_errors=RunErrors(rate=0.01),
        plan=PlanSize(RUNS, SAMPLES),
        limits=Limits(first_sample=60.0 * time, spacing=60.0 * time, longest_run=7200.0 * time),
        aim=Aim(precision=(("k", 0.05),)),
    )


@cache
def bench(scale: float = 1.0, time: float = 1.0) -> Bench:
    return virtual.ready(orders(scale, time), lanes=LANES)


def turned_round(given: Bench) -> Bench:
    """The same candidates listed the other way round."""
    return replace(
        given,
        study=replace(given.study, candidates=given.study.candidates[::-1]),
        laws=given.laws[::-1],
        kernels=given.kernels[::-1],
        prior=given.prior[::-1],
        standing=given.standing[::-1],
    )


def planned(given: Bench) -> tuple[Proposal, float]:
    found = search.best_plan(given, allowed(given.study), SEED, EFFORT)
    return found.proposal, found.worth


@cache
def plain() -> tuple[Proposal, float]:
    return planned(bench())


def beside(other: tuple[Proposal, float], scale: float = 1.0, time: float = 1.0) -> dict[str, Any]:
    """Largest relative change of levels and times from the plain plan, and the change of its worth."""
    (proposal, worth), (usual, before) = other, plain()
    return {
        "largest change of a level": np.max(np.abs(proposal.conditions / scale / usual.conditions - 1)),
        "largest change of a time": np.max(np.abs(proposal.times / time / usual.times - 1)),
        "change of worth": worth - before,
    }


def rescaled() -> dict[str, Any]:
    """Both changes at once: to compile a study anew is what costs here."""
    return beside(planned(bench(SCALE, PER_MINUTE)), SCALE, PER_MINUTE)


def permuted() -> dict[str, Any]:
    return beside(planned(turned_round(bench())))


# ---- probabilities -----------------------------------------------------------------------------


def drawn(given: Bench, design: Design, count: int) -> list[Truth]:
    return virtual.draw(given, design, count, SEED, "validation")


def example(times: list[list[float]]) -> Design:
    """Two runs from 0.03 and 0.12; samples at time -1 are not taken."""
    rows = np.array(times)
    mask = (rows >= 0).astype(float)[..., None]
    return Design(np.array([[0.03], [0.12]]), np.maximum(rows, 0.0), mask)


def rows_of_data() -> dict[str, Any]:
    given, design = bench(), example([[300.0, 900.0, 2700.0], [120.0, 600.0, 1800.0]])
    readings = virtual.readings_of(given, design, drawn(given, design, 16))
    swapped = lambda x, axis=0: np.flip(np.flip(x, axis), axis + 1)  # noqa: E731  runs and samples
    turned = Design(design.conditions[::-1], swapped(design.times), swapped(design.mask))
    changed = Readings(swapped(readings.values, 1), swapped(readings.side, 1))
    gaps = [
        np.abs(kernel.fit(design, readings).log_evidence - kernel.fit(turned, changed).log_evidence)
        for kernel in given.kernels
    ]
    return {"largest change of ln Z": np.max(gaps)}


def twins() -> dict[str, Any]:
    """Two candidates that predict the same."""
    laws = [
        candidate(name, "A -> B", "k*[A]", lognormal("k", 1e-3, 0.6), belief=belief)
        for name, belief in (("one", 0.7), ("other", 0.3))
    ]
    same = replace(orders(), candidates=tuple(laws))
    given, design = virtual.ready(same, lanes=LANES), example([[300.0, 900.0, 2700.0]] * 2)
    scores = virtual.conclude(given, design, drawn(given, design, 16))
    p = virtual.probabilities(given, scores.log_evidence)
    return {"least and largest probability of the first": [p[:, 0].min(), p[:, 0].max()]}


def told(design: Design, count: int) -> tuple[np.ndarray, np.ndarray]:
    """ln P(true law) of every study, weighted to its share of the expectation, and P itself."""
    given = bench()
    scores = virtual.conclude(given, design, drawn(given, design, count))
    p = virtual.probabilities(given, scores.log_evidence)
    own = p[np.arange(len(p)), scores.truth]
    return given.odds[scores.truth] * len(given.odds) * np.log(own), p


def one_more_sample(count: int = 256) -> dict[str, Any]:
    """Expected information about the law, same truths and noise with and without the sample."""
    few = [[300.0, 900.0, -1.0], [120.0, 600.0, -1.0]]
    before, p_before = told(example(few), count)
    gains = []
    for run, time in ((0, 60.0), (0, 2700.0), (1, 240.0), (1, 3600.0)):
        more = [list(row) for row in few]
        more[run][2] = time
        change = told(example(more), count)[0] - before
        gains.append((change.mean(), change.std() / np.sqrt(len(change))))
    blank = [[*row[:2], 0.0] for row in few]  # nothing has happened yet and the start is known
    _, p_blank = told(example(blank), count)
    return {
        "least gain, in standard errors": min(gain / error for gain, error in gains),
        "least gain, nat": min(gain for gain, _ in gains),
        "largest change of a probability by a sample that tells nothing": np.max(np.abs(p_blank - p_before)),
    }


def checks() -> list[Check]:
    still = {"largest change of a level": 0.0, "largest change of a time": 0.0, "change of worth": 0.0}
    derived, same = (BY_CONSTRUCTION, "derived"), 1e-6
    search_of = f"two orders, {RUNS} runs of {SAMPLES}, a small search, before rounding"
    blank = "largest change of a probability by a sample that tells nothing"
    return [
        *known("K-16", "Candidates that predict the same keep their prior probabilities, 0.7 and 0.3", twins,
               {"least and largest probability of the first": [0.7, 0.7]}, *derived, absolute=1e-12),
        *known("K-20, K-21", "All concentrations (range, limit, error) times 1000 and all times times 60, "
               f"k rescaled: {search_of}", rescaled, still, *derived, absolute=same),
        *known("K-22", "One more sample never lessens expected information (4 samples, 512 studies)",
               one_more_sample, {"least gain, in standard errors": -2.0}, "Lindley 1956", "memory",
               relation=">="),
        *known("K-22", "A sample that tells nothing leaves every probability", one_more_sample,
               {blank: 0.0}, *derived, absolute=1e-8),
        *known("K-24", f"The candidates in another order: {search_of}", permuted, still, *derived,
               absolute=same),
        *known("K-24", "Runs and samples in another order", rows_of_data, {"largest change of ln Z": 0.0},
               *derived, absolute=1e-8),
    ]  # fmt: skip
