"""The network, the catalyst and the dye study, from file to finished plan; and benchmark study B4.

To compile a study of this kind takes minutes, so everything here is marked slow; the results are in
docs/performance-of-plans.md.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest

from designer import checking, planning, purposes, rating, studyfile, virtual
from designer.outcomes import Plan
from designer.records import Run, Schedule, Study
from designer.search import Effort

STUDIES = Path(__file__).parent.parent / "studies"
FEW = 16  # virtual studies of each candidate
CAP = 9.0  # bar
HOUR_AND_A_HALF = 5400.0

pytestmark = pytest.mark.slow


@cache
def study(name: str, *changes: tuple[str, str]) -> Study:
    text = (STUDIES / name / "study.toml").read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    return checking.build(studyfile.parse(text))


@cache
def planned(name: str) -> Plan:
    return planning.plan(study(name), effort=Effort.small(), studies=FEW)


@pytest.mark.parametrize("name", ["lactone", "hydrogenation", "dye"])
def test_a_whole_plan(name: str) -> None:
    given, found = study(name), planned(name)
    assert len(found.runs) == len(found.rating.schedule.runs) == given.plan.runs
    assert not found.rating.broken and found.rating.studies == FEW * len(given.listed)
    own = [found.rating.worth, found.rating.top, found.rating.information, *(r.gain for r in found.runs)]
    assert all(np.isfinite(figure.value) and figure.error >= 0 for figure in own)
    assert found.alternatives and all(np.isfinite(other.worth.value) for other in found.alternatives)
    for run in found.runs:
        assert run.samples and all(sample.purpose for sample in run.samples)
        predicted = {p.candidate for sample in run.samples for p in sample.predicted}
        assert predicted == {candidate.name for candidate in given.listed}
    assert found.curves and found.cautions and not found.inseparable


def test_pressure_stays_below_its_cap() -> None:
    found = planned("hydrogenation")
    pressures = [dict(run.conditions)["pressure"] for run in found.rating.schedule.runs]
    assert max(pressures) <= CAP * (1 + 1e-12) and set(np.round(pressures, 9)) <= {2.0, 5.0, 9.0}


def test_the_plan_of_the_catalyst_study_changes_the_catalyst() -> None:
    """Else zero order and gas transfer cannot be told apart (benchmark B4)."""
    runs = planned("hydrogenation").rating.schedule.runs
    loadings = [dict(run.conditions)["catalyst"] for run in runs]
    assert max(loadings) >= 2 * min(loadings)


def test_with_the_catalyst_fixed_two_candidates_are_one() -> None:
    """k c P and kL P with c fixed are the same curve: no level of alkene or pressure, no time, helps."""
    fixed = study("hydrogenation", ('{ from = "0.2 g/L", to = "1 g/L" }', '"0.5 g/L"'))
    bench = virtual.ready(fixed, lanes=32)
    values = {"catalyst": 0.5, "temperature": 313.15}
    runs = [
        Run(
            tuple((c.name, {**values, "alkene": a, "pressure": p}[c.name]) for c in fixed.conditions),
            (),
            HOUR_AND_A_HALF,
        )
        for a, p in ((0.1, 2.0), (0.4, 5.0), (0.8, 9.0), (0.2, 9.0))
    ]
    design = rating.padded(bench, Schedule(tuple(runs)), len(runs))
    found = purposes.inseparable(bench, design, seed=1)
    assert [(pair.first, pair.second, pair.levers) for pair in found] == [
        ("zero order in alkene", "limited by gas transfer", ("catalyst",))
    ]
