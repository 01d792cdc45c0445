"""The ester study of the tests, built without a file (numbers: benchmark study B1, invented data)."""

from __future__ import annotations

import json
from math import log
from pathlib import Path

import numpy as np

from designer import expressions
from designer.records import (
    Z90,
    Aim,
    Belief,
    Candidate,
    Condition,
    Constant,
    Equation,
    Limits,
    PlanSize,
    Prepared,
    Reading,
    RunErrors,
    Step,
    Study,
)

REFERENCE = Path(__file__).parent / "reference"
CONCENTRATION = (0.0, 1.0, -3.0, 0.0, 0.0, 0.0, 0.0)


def constant(name: str, value: float, factor: float) -> Constant:
    return Constant(name, Belief("lognormal", log(value), log(factor) / Z90), CONCENTRATION, "")


def candidate(name: str, rate: str, hydroxide: float, *constants: Constant) -> Candidate:
    numbers = (("ester", -1.0), ("hydroxide", -hydroxide), ("acid", 1.0))
    equation = Equation("", "", tuple(pair for pair in numbers if pair[1]))
    return Candidate(name, 0.25, (Step(equation, expressions.parse(rate), rate),), constants)


def study(run_error_factor: float = 1.0) -> Study:
    k = constant("k", 0.0278, 3)
    candidates = (
        candidate("M1", "k*[ester]*[hydroxide]", 1, k),
        candidate("M2", "k*[ester]*[hydroxide]", 2, k),
        candidate("M3", "(k0+k*[hydroxide])*[ester]", 1, constant("k0", 5.6e-4, 5), k),
        candidate("M4", "k*[ester]", 0, constant("k", 1.39e-3, 3)),
    )
    f = run_error_factor
    return Study(
        title="ester",
        question="",
        candidates=candidates,
        conditions=(
            Condition("ester", True, CONCENTRATION, "mM", 0.005, 0.1),
            Condition("hydroxide", True, CONCENTRATION, "mM", 0.02, 0.2),
        ),
        constants=(),
        readings=(
            Reading(
                "ester",
                expressions.parse("[ester]"),
                "[ester]",
                CONCENTRATION,
                "mM",
                relative=0.012,
                absolute=3e-5,
                time_error=5.0,
                lowest=1e-4,
            ),
        ),
        run_errors=RunErrors(
            rate=0.008 * f,
            prepared=(Prepared("ester", 0, 0.010 * f), Prepared("hydroxide", 0, 0.015 * f)),
        ),
        plan=PlanSize(3, 4),
        limits=Limits(5, 12, 36, 60.0, 60.0, 3 * 3600.0, 45 * 60.0, 16 * 3600.0),
        aim=Aim(precision=(("k", 0.05),)),
    )


def reference() -> list[dict]:
    """Virtual studies with brute-force log evidence (tests/reference/evidence_ester.json)."""
    return json.loads((REFERENCE / "evidence_ester.json").read_text())["studies"]


def arrays_of(cases: list[dict]) -> tuple[tuple, tuple]:
    """(conditions, times, mask) and (values, side) of cases that share a design."""
    runs = cases[0]["runs"]
    conditions = np.array([[run["ester"], run["hydroxide"]] for run in runs])
    times = np.array([run["time_s"] for run in runs])
    read = np.array([[run["ester_read"] for run in case["runs"]] for case in cases], dtype=float)
    side = np.where(np.isnan(read), -1.0, 0.0)
    values = np.nan_to_num(read, nan=1e-4)
    return (conditions, times, np.ones((*times.shape, 1))), (values[..., None], side[..., None])
