"""The structure of a candidate decides how it is solved."""

from __future__ import annotations

from designer import expressions
from designer.errors import CallError
from designer.expressions import Binary, Negative
from designer.records import Belief, Candidate, Step
from designer.trajectories import quadratic
from designer.trajectories.path import Path
from designer.trajectories.polynomial import NotPolynomialError


def choose(candidate: Candidate, scope: frozenset[str]) -> Path:
    """The cheapest path that is exact for the candidate.

    scope: bare names available besides the candidate's constants (conditions that are no species, study
    constants). Raises CallError where a rate names something else.
    """
    known = scope | {constant.name for constant in candidate.constants} | {"time", "temperature"}
    for step in candidate.steps:
        unknown = [name for name in expressions.names(step.rate) if name not in known]
        if unknown:
            raise CallError(f"the rate of '{candidate.name}' names {', '.join(unknown)}, given nowhere")
    if _is_quadratic(candidate):
        return quadratic.path(candidate, _may_turn(candidate))
    raise CallError(f"no path solves '{candidate.name}' yet")


def _is_quadratic(candidate: Candidate) -> bool:
    if len(candidate.steps) != 1 or "time" in expressions.names(candidate.steps[0].rate):
        return False
    (step,) = candidate.steps
    try:
        quadratic.polynomial(step, dict.fromkeys(expressions.names(step.rate), 1.0), _ones(candidate, step))
    except NotPolynomialError:
        return False
    return True


def _ones(candidate: Candidate, step: Step) -> dict[str, float]:
    named = (*expressions.species(step.rate), *expressions.species(step.rate, initial=True))
    return dict.fromkeys((*candidate.species, *named), 1.0)


def _may_turn(candidate: Candidate) -> bool:
    """Whether the rate can be negative, judged by its signs and those its constants can have."""
    signs = any(
        isinstance(node, Negative) or (isinstance(node, Binary) and node.operator == "-")
        for step in candidate.steps
        for node in expressions.walk(step.rate)
    )
    return signs or any(_may_be_negative(constant.belief) for constant in candidate.constants)


def _may_be_negative(belief: Belief) -> bool:
    return (
        belief.family == "normal"
        or (belief.family == "exact" and belief.centre < 0)
        or (belief.family == "uniform" and belief.low < 0)
    )
