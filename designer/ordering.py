"""The order of runs: most valuable first, no step beyond what was shown calm where heat is a concern."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from designer import steepest, virtual
from designer.allowed import CLOSE
from designer.likelihood import Design
from designer.outcomes import Estimate
from designer.search import Found, Hill, Proposal, design_of

CALM_FACTOR, CALM_KELVIN = 2.0, 10.0  # steps beyond what has been shown calm (common practice)


def rows_of(proposal: Proposal, rows: Sequence[int]) -> Proposal:
    some = list(rows)
    return Proposal(proposal.conditions[some], proposal.times[some], proposal.lengths[some])


def in_order(hill: Hill, final: Found) -> tuple[list[int], list[Estimate], list[str]]:
    """Runs most valuable first: each the one that adds most worth to those before it. Where heat is a
    concern, no run steps beyond what earlier ones have shown by more than the calm step."""
    runs = len(final.proposal.conditions)
    careful = hill.offer.study.heat.reaction is not None
    chosen: list[int] = []
    gains: list[Estimate] = []
    notes: list[str] = []
    before = _worth_of(hill, final, [])
    while len(chosen) < runs:
        left = [run for run in range(runs) if run not in chosen]
        calm = [run for run in left if not careful or _is_calm(hill, final.proposal, chosen, run)]
        if not calm:
            calm = [min(left, key=lambda run: _boldness(hill, final.proposal, chosen, run))]
            notes.append(
                f"run {len(chosen) + 1} steps further than what has been run by more than the usual step "
                "(a factor of 2 in concentration, 10 K): no order of these runs avoids it. "
                "Put a milder run before it"
            )
        worths = {run: _worth_of(hill, final, [*chosen, run]) for run in calm}
        best = max(calm, key=lambda run: worths[run][0])
        if careful and len(calm) < len(left):
            text = "the order keeps each run within a factor of 2 (10 K) of what earlier runs have shown"
            if text not in notes:
                notes.append(text)
        difference = worths[best][1] - before[1]
        gains.append(
            Estimate(worths[best][0] - before[0], float(np.sqrt(len(difference)) * difference.std()))
        )
        before = worths[best]
        chosen.append(best)
    return chosen, gains, notes


def _worth_of(hill: Hill, final: Found, rows: list[int]) -> tuple[float, np.ndarray]:
    """Worth (and its value in each study) if only ``rows`` of the proposal's runs were done."""
    bench = hill.bench
    design = design_of(bench, final.proposal)
    mask = np.array(design.mask)
    carried = len(bench.axes.carried.times)
    for row in range(len(final.proposal.conditions)):
        if row not in rows:
            mask[carried + row] = 0.0
    assert hill.truths is not None
    scores = virtual.conclude(bench, Design(design.conditions, design.times, mask), hill.truths)
    value, each, _, _ = steepest.worth(bench, scores)
    return value, each


def _boldness(hill: Hill, proposal: Proposal, chosen: list[int], run: int) -> float:
    """Largest step of a run beyond what has been shown, 1 = just at the calm step."""
    study = hill.offer.study
    steps = [0.0]
    for index, condition in enumerate(study.conditions):
        shown = dict(study.already_run or ()).get(condition.name)
        earlier = [float(proposal.conditions[row, index]) for row in chosen]
        earlier += [] if shown is None else [shown]
        if not earlier:
            continue
        here, highest = float(proposal.conditions[run, index]), max(earlier)
        if condition.name == "temperature":
            steps.append((here - highest) / CALM_KELVIN)
        elif highest > 0:
            steps.append(here / highest / CALM_FACTOR)
    return max(steps)


def _is_calm(hill: Hill, proposal: Proposal, chosen: list[int], run: int) -> bool:
    if chosen or hill.offer.study.already_run:
        return _boldness(hill, proposal, chosen, run) <= 1 + CLOSE
    mildest = proposal.conditions[:, [c.is_species for c in hill.offer.study.conditions]].prod(1)
    return bool(mildest[run] <= mildest.min() * (1 + CLOSE))  # nothing run yet: begin with the mildest
