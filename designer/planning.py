"""Plan a study: search, write down as a person would, rate beside what people usually do, and explain."""

from __future__ import annotations

import platform
from collections.abc import Callable, Sequence
from dataclasses import replace
from importlib import metadata
from itertools import count as numbers

import numpy as np

from designer import purposes, rating, search, usual, virtual
from designer.allowed import Allowed, allowed
from designer.cautions import cautions
from designer.errors import CallError
from designer.explaining import binding, curves, planned_runs
from designer.layout import schedule_of
from designer.locally import local_ratings
from designer.ordering import in_order, rows_of
from designer.outcomes import Estimate, Plan, Rating
from designer.records import Aim, Schedule, Study
from designer.rounding import rounded
from designer.search import Effort, Hill, Proposal, design_of
from designer.virtual import Bench

Progress = Callable[[str, int, int], None]

STUDIES = 400  # virtual studies of each listed candidate behind every figure of the plan
DEAR_STUDIES = 100  # the same where a look at a plan is dear (``search.is_dear``)
USUAL_STUDIES = 128  # the same for the schedules it is compared with


def plan(
    study: Study,
    seed: int = 1,
    weight_on_law: float | None = None,
    precision_by: str | None = None,
    compare: Sequence[Schedule] = (),
    effort: Effort | None = None,
    studies: int | None = None,
    progress: Progress | None = None,
) -> Plan:
    """Choose the runs and samples of ``study.plan`` and say what they will do.

    seed: the same seed on the same machine and versions gives the same plan. weight_on_law (0 to 1)
    overrides ``[aim]``. precision_by: "D" (all constants) or "c" (the asked ones, the default).
    compare: other schedules to rate beside it. studies: virtual studies of each candidate behind
    every figure (400, or 100 where laws are dear to fit). progress(stage, done, total) is called now
    and then.

    Raises InfeasibleError where the limits leave no plan, CallError for a weight outside 0..1 or a
    seed below 0.
    """
    if seed < 0:
        raise CallError(f"the seed is a whole number from 0; {seed} is not")
    study = _aimed(study, weight_on_law)
    effort = effort or Effort()
    tell = progress or (lambda stage, done, total: None)
    offer = allowed(study)
    most = max([study.plan.samples, *(len(run.times) for other in compare for run in other.runs)])
    bench = virtual.ready(study, most, precision_by=precision_by or "c")
    if search.is_dear(bench):
        effort, studies = effort.for_dear_laws(), studies or DEAR_STUDIES
    studies = studies or STUDIES
    found = search.best_plan(bench, offer, seed, effort, advance=tell)
    written = rounded(offer, found.proposal)
    hill = Hill(bench, offer, effort.studies, seed, "search")
    exact, final = hill.look(found.proposal), hill.look(written)
    rows, gains, notes = in_order(hill, final)
    proposal = rows_of(written, rows)
    design = design_of(bench, proposal)
    schedule = schedule_of(study, bench.axes, design, "this plan")
    own, others = _ratings(bench, offer, schedule, compare, seed, studies, tell)
    tell("explaining", 0, 1)
    runs = planned_runs(bench, design, schedule, gains)
    result = Plan(
        title=study.title,
        seed=seed,
        versions=versions(),
        rating=own,
        runs=runs,
        alternatives=others,
        binding=binding(offer, schedule),
        inseparable=purposes.inseparable(bench, design, seed),
        cautions=(*cautions(study, [dict(run.conditions) for run in schedule.runs]), *notes),
        rounding=Estimate(exact.worth - final.worth, own.worth.error / np.sqrt(max(studies, 1))),
        curves=curves(bench, schedule, seed),
        beliefs=tuple(
            (law.candidate.name, float(a), float(b))
            for law, a, b in zip(bench.laws, bench.prior, bench.standing, strict=True)
        ),
        booked=study.limits.booked,
        effort=(*((name, int(value)) for name, value in vars(effort).items()), ("final", studies)),
        warnings=study.warnings,
        local=local_ratings(bench, offer, design),
    )
    tell("explaining", 1, 1)
    return result


def _aimed(study: Study, weight_on_law: float | None) -> Study:
    if weight_on_law is None:
        return study
    if not 0 <= weight_on_law <= 1:
        raise CallError(f"the weight on the law lies between 0 and 1; {weight_on_law:g} does not")
    aim: Aim = replace(study.aim, weight_on_law=weight_on_law)
    return replace(study, aim=aim)


def versions() -> tuple[tuple[str, str], ...]:
    """Versions on which the same seed gives the same plan."""
    names = ("aliquot", "jax", "jaxlib", "numpy", "scipy", "diffrax")
    found = []
    for name in names:
        try:
            found.append((name, metadata.version(name)))
        except metadata.PackageNotFoundError:
            found.append((name, "not installed as a package"))
    return (("python", platform.python_version()), *found)


def _ratings(
    bench: Bench,
    offer: Allowed,
    schedule: Schedule,
    compare: Sequence[Schedule],
    seed: int,
    studies: int,
    tell: Progress,
) -> tuple[Rating, tuple[Rating, ...]]:
    """The plan, the usual schedules and any compared ones, on fresh draws."""
    others = usual_schedules(bench, offer)
    others += [replace(other, name=other.name or f"compared plan {i}") for i, other in enumerate(compare, 1)]
    runs = max(len(other.runs) for other in [schedule, *others])
    everything = [schedule, *others]
    counter = numbers(1)
    found = []
    for other in everything:
        design = rating.padded(bench, other, runs)
        count = studies if other is schedule else min(studies, USUAL_STUDIES)
        truths = virtual.draw(bench, design, count, seed, "final")
        found.append(rating.rate(bench, other, design, truths, free_order=other is schedule))
        tell("rating plans", next(counter), len(everything))
    return found[0], tuple(found[1:])


def usual_schedules(bench: Bench, offer: Allowed) -> list[Schedule]:
    """The usual schedules (``usual``) as records, written as a person would."""
    found = []
    for name, conditions, times in usual.usual_schedules(bench, offer):
        proposal = Proposal(conditions, times, search.run_lengths(bench, offer))
        design = design_of(bench, rounded(offer, proposal))
        found.append(schedule_of(offer.study, bench.axes, design, name))
    return found
