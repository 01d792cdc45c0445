"""Benchmark study B1 (ester hydrolysis, invented data): four schedules, rated by virtual studies.

Reference figures are those stated for the benchmark, each from 24 to 60 simulated studies (so good to 0.06
to 0.1): how often the right law comes out on top when M1, M2, M3, M4 is true, and the SE of ln k.

Studies are drawn with a fixed seed. A fraction is judged so that a program with the stated rate would fail
with a chance below 1e-3 for another seed (binomial); the comparison of two schedules by 4 standard errors
(below 1e-4). The full setting, marked slow, asks for the acceptance figures themselves.
"""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import ester
import ester_bench
import handmade
import numpy as np
import pytest
from scipy.stats import binom

from designer import planning, rating, reasons, virtual
from designer.likelihood import Design
from designer.outcomes import Rating
from designer.records import PlanSize, Run, Schedule
from designer.virtual import Truth

SEED = 11
FEW, MANY = 40, 400  # virtual studies of each true law
RARE = 1e-3  # chance of a false alarm of one comparison
ENOUGH = 0.95  # asked of a good plan: right law on top, for every true law
CLOSE = 0.0255  # asked SE of ln k: half of the 95 % range at 5 %
LAWS = ("M1", "M2", "M3", "M4")
WITH_K = LAWS[:3]  # the fourth law has a constant of another kind


def runs(*rows: tuple[float, float, tuple[float, ...]]) -> tuple[Run, ...]:
    """Runs from (ester, hydroxide, times in min)."""
    return tuple(
        Run((("ester", ester), ("hydroxide", hydroxide)), tuple(60.0 * np.array(times)))
        for ester, hydroxide, times in rows
    )


LOW = (0.02, 0.02, (4, 15, 40, 90))
HIGH = (0.08, 0.12, (1.5, 5, 12, 30))
FLOODED = (0.02, 0.20, (1, 2.5, 5, 9))
SCHEDULES = {
    "one run of 8": runs((0.05, 0.05, tuple(range(5, 45, 5)))),
    "three flooded repeats": runs(*[(0.01, 0.20, tuple(range(1, 9)))] * 3),
    "two runs of 4": runs(LOW, HIGH),
    "three runs of 4": runs(LOW, HIGH, FLOODED),
}
ON_TOP = {
    "one run of 8": (1.00, 1.00, 0.98, 0.97),
    "three flooded repeats": (0.15, 0.65, 0.62, 0.87),
    "two runs of 4": (1.00, 1.00, 0.98, 1.00),
    "three runs of 4": (1.00, 1.00, 0.98, 1.00),
}
MEDIANS = {  # least and largest median SE of ln k over M1 to M3; of the repeats only M1 and M2 were quoted
    "one run of 8": (0.034, 0.051, WITH_K),
    "three flooded repeats": (0.012, 0.012, WITH_K[:2]),
    "two runs of 4": (0.024, 0.035, WITH_K),
    "three runs of 4": (0.017, 0.021, WITH_K),
}
REFERENCE_STUDIES = 24  # the fewest behind a reference figure


@cache
def simulated(name: str, count: int) -> tuple[Schedule, Design, list[Truth]]:
    bench = ester_bench.bench()
    schedule = Schedule(SCHEDULES[name], name)
    design = rating.padded(bench, schedule, ester_bench.RUNS)
    return schedule, design, virtual.draw(bench, design, count, SEED, "b1")


@cache
def rated(name: str, count: int) -> Rating:
    return rating.rate(ester_bench.bench(), *simulated(name, count))


def medians(name: str, count: int) -> dict[str, float]:
    """Median SE of ln k over the studies of each true law that has k."""
    _, design, truths = simulated(name, count)
    scores = virtual.conclude(ester_bench.bench(), design, truths)
    return {law: float(np.median(scores.spread[scores.truth == i, 0])) for i, law in enumerate(WITH_K)}


def on_top(found: Rating) -> np.ndarray:
    by_law = dict(found.top_by_law)
    return np.array([by_law[law].value for law in LAWS])


def spreads(found: Rating) -> dict[str, float]:
    """Mean SE of ln k under each true law that has k."""
    return {s.candidate: s.spread.value for s in found.spreads if s.candidate in WITH_K and s.constant == "k"}


def fewest(rate: float, count: int) -> float:
    """Share of ``count`` below which a true rate falls with a chance under ``RARE``."""
    return float(binom.ppf(RARE, count, rate)) / count


def good(found: Rating, count: int, least: float) -> None:
    assert (on_top(found) >= least).all(), found.top_by_law
    assert found.studies == 4 * count and found.doubtful <= 0.05 * found.studies and not found.unsolved


def test_three_runs_of_four_find_the_law() -> None:
    """At the reference rate of 0.98 fewer than 35 of 40 come up once in several thousand seeds."""
    good(rated("three runs of 4", FEW), FEW, fewest(0.98, FEW))


def test_three_runs_of_four_reach_the_precision() -> None:
    found = spreads(rated("three runs of 4", FEW))
    assert set(found) == set(WITH_K) and max(found.values()) <= CLOSE


@pytest.mark.parametrize("name", SCHEDULES)
def test_median_spread_of_ln_k(name: str) -> None:
    """Quoted to two figures from other draws of k: within 7 %."""
    low, high, laws = MEDIANS[name]
    found = [value for law, value in medians(name, FEW).items() if law in laws]
    assert min(found) == pytest.approx(low, rel=0.07) and max(found) == pytest.approx(high, rel=0.07)


@pytest.mark.parametrize("name", SCHEDULES)
def test_on_top_as_in_the_reference(name: str) -> None:
    """Two fractions, ours of 40 and the reference of 24 or more: apart by at most 3.3 SE (1e-3)."""
    p = np.array(ON_TOP[name])
    seen = on_top(rated(name, FEW))
    pooled = (FEW * seen + REFERENCE_STUDIES * p + 1) / (FEW + REFERENCE_STUDIES + 2)
    error = np.sqrt(pooled * (1 - pooled) * (1 / FEW + 1 / REFERENCE_STUDIES))
    assert (np.abs(seen - p) <= 3.3 * error).all(), (seen, p)


def below(trap: Rating, other: Rating) -> bool:
    """Mean probability of the right law and log score lower by more than 4 standard errors."""
    pairs = ((trap.mean_probability, other.mean_probability), (trap.log_score, other.log_score))
    return all(reasons.difference(mine, its) < -4 for mine, its in pairs)


def test_the_trap_is_rated_below_eight_samples_in_two_runs() -> None:
    trap, two = rated("three flooded repeats", FEW), rated("two runs of 4", FEW)
    assert below(trap, two)
    # though it pins k down more closely where a law without a second path is taken for true
    close, wide = spreads(trap), spreads(two)
    assert all(close[law] < 0.6 * wide[law] for law in ("M1", "M2"))


def test_the_reason_is_given_in_words() -> None:
    trap, two = rated("three flooded repeats", FEW), rated("two runs of 4", FEW)
    told = reasons.sentences(ester.study(), replace(handmade.plan(), rating=two, alternatives=(trap,)))
    text = " ".join(told)
    assert "three flooded repeats" in text and "hydroxide" in text and reasons.is_trap(two, trap)


def test_control_a_schedule_is_not_below_itself() -> None:
    assert not below(rated("two runs of 4", FEW), rated("two runs of 4", FEW))
    assert not (on_top(rated("three flooded repeats", FEW)) >= fewest(0.98, FEW)).all()


@pytest.mark.slow
def test_acceptance_of_the_stated_schedules() -> None:
    found = rated("three runs of 4", MANY)
    good(found, MANY, ENOUGH)
    assert max(spreads(found).values()) <= CLOSE
    assert below(rated("three flooded repeats", MANY), rated("two runs of 4", MANY))


@pytest.mark.slow
@pytest.mark.parametrize("count", [3, 4])
def test_acceptance_of_a_plan_of_our_own(count: int) -> None:
    """At most 4 runs and 16 samples, full search."""
    study = replace(ester.study(), plan=PlanSize(count, 4))
    found = planning.plan(study, seed=SEED).rating
    assert len(found.schedule.runs) == count and not found.broken
    assert (on_top(found) >= ENOUGH).all(), found.top_by_law
    assert max(spreads(found).values()) <= CLOSE
