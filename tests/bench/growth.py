"""How the time of one look at a plan (every candidate fitted to every virtual study) grows."""

from __future__ import annotations

import time
from dataclasses import replace

from designer import search, virtual
from designer.allowed import allowed
from designer.records import Study
from tests import ester


def _look(study: Study, studies: int) -> float:
    """Seconds of one look, compiled before, started from a scan."""
    bench, offer = virtual.ready(study), allowed(study)
    hill = search.Hill(bench, offer, studies, 1, "search")
    proposal = search.coarse_proposals(bench, offer, 0, 1)[-1]
    hill.look(proposal)
    taken = []
    for _ in range(3):
        begin = time.perf_counter()
        hill.look(proposal)
        taken.append(time.perf_counter() - begin)
    return min(taken)


def lines() -> list[str]:
    study = ester.study()
    base = _look(study, 512)
    rows = ["| what | time of a look against 3 runs of 4, 4 candidates, 512 virtual studies |", "|---|---|"]

    def row(name: str, changed: Study, studies: int = 512) -> None:
        rows.append(f"| {name} | {_look(changed, studies) / base:.2f} |")

    row("8 samples a run", replace(study, plan=replace(study.plan, samples=8)))
    row("12 samples a run", replace(study, plan=replace(study.plan, samples=12)))
    row("5 runs", replace(study, plan=replace(study.plan, runs=5)))
    two = tuple(replace(c, belief=0.5) for c in study.candidates[:2])
    row("2 candidates, 256 virtual studies", replace(study, candidates=two), 256)
    row("1024 virtual studies", study, 1024)
    row("2048 virtual studies", study, 2048)
    return rows
