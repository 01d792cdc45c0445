"""Log evidence through all gates against brute force on 80 studies of the ester reaction.

Reference: tests/reference/evidence_ester.json (check values, group 6): a grid over the constants times
adaptive Gauss-Hermite over the run errors, itself good to 0.001 but for two values (field ``still``:
0.002 and 0.029). Judged are laws within 15 nats of the best: 197 cases.
"""

from __future__ import annotations

from typing import NamedTuple

import ester
import ester_bench
import numpy as np
import pytest

from designer import gates
from designer.arrays import jax
from designer.evidence import Point, eliminate, quadratic

NEAR = 15.0  # nats
LAWS = ("M1", "M2", "M3", "M4")
VARIED = ("varied 3x4", "varied 3x4, run errors x3")


class Judged(NamedTuple):
    """One design: reference and found log evidence (study, law), which count, and what the gates said."""

    reference: np.ndarray
    found: np.ndarray
    plain: np.ndarray  # joint Laplace, gate N only
    loss: np.ndarray
    near: np.ndarray
    flagged: np.ndarray
    cleared: np.ndarray  # repaired and not flagged
    fits: tuple


def by_design() -> dict[tuple[str, float], list[dict]]:
    groups: dict[tuple[str, float], list[dict]] = {}
    for case in ester.reference():
        groups.setdefault((case["design"], case["run_error_factor"]), []).append(case)
    return groups


def judge(cases: list[dict], factor: float) -> Judged:
    design, readings = ester_bench.padded(cases)
    reference = np.array([[case["log_evidence"][name] for name in LAWS] for case in cases])
    near = reference > reference.max(1, keepdims=True) - NEAR
    kernels = ester_bench.bench(factor).kernels
    columns = [
        gates.assured(kernel, design, readings, matters=near[:, index])
        for index, kernel in enumerate(kernels)
    ]
    return Judged(
        reference,
        np.stack([each.log_evidence for each in columns], 1),
        np.stack([each.fit.log_evidence for each in columns], 1),
        np.stack([each.fit.loss for each in columns], 1),
        near,
        np.stack([each.flagged for each in columns], 1),
        np.stack([each.repaired & ~each.flagged for each in columns], 1),
        tuple(each.fit for each in columns),
    )


@pytest.fixture(scope="module")
def judged() -> dict[str, Judged]:
    return {name: judge(cases, factor) for (name, factor), cases in by_design().items()}


def errors(judged: dict[str, Judged], which: str = "found") -> np.ndarray:
    parts = [np.abs(getattr(each, which) - each.reference)[each.near] for each in judged.values()]
    return np.concatenate(parts)


def probabilities(log_evidence: np.ndarray) -> np.ndarray:
    weight = np.exp(log_evidence - log_evidence.max(1, keepdims=True))  # the four laws are believed equally
    return weight / weight.sum(1, keepdims=True)


def test_median_error_of_all_cases(judged: dict[str, Judged]) -> None:
    found = errors(judged)
    assert len(found) == 197
    assert np.median(found) <= 0.005


def test_no_unflagged_case_is_far_off(judged: dict[str, Judged]) -> None:
    flagged = np.concatenate([each.flagged[each.near] for each in judged.values()])
    assert errors(judged)[~flagged].max() <= 0.05


def test_few_cases_stay_flagged(judged: dict[str, Judged]) -> None:
    for name, each in judged.items():
        share = each.flagged[each.near].mean()
        assert share <= (0.05 if name in VARIED else 0.25), name


def test_probabilities_of_the_laws(judged: dict[str, Judged]) -> None:
    off = [np.abs(probabilities(each.found) - probabilities(each.reference)) for each in judged.values()]
    assert np.concatenate(off).mean() <= 0.005


def test_joint_laplace_before_any_repair(judged: dict[str, Judged]) -> None:
    """Trials before this code was written: median 0.0027, largest 0.22, seven M3 cases above 0.05."""
    plain = errors(judged, "plain")
    assert 0.0022 < np.median(plain) < 0.0032
    assert 0.1 < plain.max() < 0.3
    assert (plain > 0.05).sum() == 7


def test_repair_mends_what_laplace_got_wrong(judged: dict[str, Judged]) -> None:
    off = errors(judged, "plain") > 0.05
    cleared = np.concatenate([each.cleared[each.near] for each in judged.values()])
    assert cleared[off].all()
    assert errors(judged)[off].max() < 0.05


def test_control_without_the_determinant(judged: dict[str, Judged]) -> None:
    """-F alone, no Occam term: must fail the bound that the method passes."""
    off = [np.abs(-each.loss - each.reference)[each.near] for each in judged.values()]
    assert np.median(np.concatenate(off)) > 1.0


def test_control_with_the_gauss_newton_determinant(judged: dict[str, Judged]) -> None:
    """Second derivatives of the curves left out of ln det H: errors up to 0.6 on M3 in the trials."""
    name, factor = "varied 3x4", 1.0
    each, law = judged[name], ester_bench.bench(factor).laws[2]
    design, readings = ester_bench.padded(by_design()[name, factor])

    def careless(point: Point, read: tuple) -> float:
        near = quadratic(law, point, design, read, law.second_order)[1]
        return -near.value - eliminate(near).log_determinant / 2

    point = Point(each.fits[2].u, each.fits[2].z)
    found = np.asarray(jax.jit(jax.vmap(careless))(point, readings))
    off = np.abs(found - each.reference[:, 2])[each.near[:, 2]]
    assert np.median(off) > 0.005
    assert off.max() > 0.05
