"""Small studies of one reading each, built without a file, for the check values of group 4."""

from __future__ import annotations

import json
from math import log
from pathlib import Path

import numpy as np

from designer import expressions
from designer.likelihood import Design, Readings
from designer.records import (
    Aim,
    Belief,
    Candidate,
    Condition,
    Constant,
    Equation,
    Limits,
    PlanSize,
    Reading,
    RunErrors,
    Step,
    Study,
)

FOLDER = Path(__file__).parent / "reference"
PLAIN = (0.0,) * 7  # dimensions play no part below the study file
CASES = {case["id"]: case for case in json.loads((FOLDER / "cases_group4.json").read_text())["cases"]}


def data(name: str) -> tuple[np.ndarray, np.ndarray]:
    """Two columns of a data file: times and readings."""
    table = np.genfromtxt(FOLDER / "data" / name, delimiter=",", comments="#", skip_header=2)
    return table[:, 0], table[:, 1]


def lognormal(name: str, median: float, spread: float) -> Constant:
    return Constant(name, Belief("lognormal", log(median), spread), PLAIN, "")


def step(rate: str, *numbers: tuple[str, float]) -> Step:
    return Step(Equation("", "", numbers), expressions.parse(rate), rate)


def candidate(name: str, rate: str, *constants: Constant, belief: float = 0.5) -> Candidate:
    return Candidate(name, belief, (step(rate, ("A", -1.0), ("B", 1.0)),), constants)


def order(number: int, constant: Constant, belief: float = 0.5) -> Candidate:
    """Rate k [A]^number, or k itself."""
    rate = {0: "k", 1: "k*[A]"}.get(number, f"k*[A]^{number}")
    return candidate(f"order {number}", rate, constant, belief=belief)


def study(
    candidates: tuple[Candidate, ...],
    error: float,
    start: float = 1.0,
    signal: str = "[A]",
    samples: int = 1,
) -> Study:
    """One run from [A] = start, everything else 0; readings with one constant error."""
    reading = Reading("A", expressions.parse(signal), signal, PLAIN, "", absolute=error)
    return Study(
        title="decay",
        question="",
        candidates=candidates,
        conditions=(Condition("A", True, PLAIN, "", start, start),),
        constants=(),
        readings=(reading,),
        run_errors=RunErrors(),
        plan=PlanSize(1, samples),
        limits=Limits(longest_run=1000.0),
        aim=Aim(),
    )


def arrays(times: np.ndarray, values: np.ndarray, start: float = 1.0) -> tuple[Design, Readings]:
    """One run of single readings: a design and one data set."""
    design = Design(np.array([[start]]), times[None], np.ones((1, len(times), 1)))
    read = values[None, None, :, None]
    return design, Readings(read, np.zeros_like(read))
