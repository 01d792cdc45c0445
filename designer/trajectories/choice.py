"""The structure of a candidate decides how it is solved."""

from __future__ import annotations

from designer import expressions
from designer.arrays import Array
from designer.errors import CallError
from designer.expressions import Number
from designer.records import Candidate, Step
from designer.trajectories import clock, extent, implicit, linear, power, quadratic, structure
from designer.trajectories.path import Curve, Path
from designer.trajectories.polynomial import NotPolynomialError


def choose(candidate: Candidate, scope: frozenset[str]) -> Path:
    """The cheapest path that is exact for the candidate.

    scope: bare names available besides the candidate's constants (conditions that are no species, study
    constants). Raises CallError where a rate names something else.
    """
    _check_names(candidate, scope)
    single = structure.single(candidate)
    if single is not None:
        found = _single(candidate, single)
        if found is not None:
            return found
    network = linear.recognise(candidate)
    if network is not None:
        return linear.path(candidate, network)
    if any(structure.ignored(step) for step in candidate.steps):
        return _integrator(candidate)  # stops abruptly, between the steps of any fixed grid
    return implicit.path(candidate, fallback=_integrator(candidate))


def _integrator(candidate: Candidate) -> Path:
    """The stiff integrator, imported when it is first used: its libraries are slow to load."""

    def solve(values: dict[str, Array], start: dict[str, Array], factor: Array, times: Array) -> Curve:
        from designer.trajectories import integrator

        return integrator.path(candidate).solve(values, start, factor, times)

    return Path("integrator", False, solve)


def _check_names(candidate: Candidate, scope: frozenset[str]) -> None:
    known = scope | {constant.name for constant in candidate.constants} | {"time", "temperature"}
    for step in candidate.steps:
        unknown = [name for name in expressions.names(step.rate) if name not in known]
        if unknown:
            raise CallError(f"the rate of '{candidate.name}' names {', '.join(unknown)}, given nowhere")


def _single(candidate: Candidate, single: Step) -> Path | None:
    """A path for one reaction, or None where time and concentrations do not separate."""
    parts = structure.split_time(single.rate)
    if parts is None:
        return None
    in_time, rest = parts
    still = Step(single.equation, rest, single.text)
    hands = clock.plain if isinstance(in_time, Number) else clock.transformed(in_time)
    turning = structure.may_turn(candidate, rest)
    if is_quadratic(candidate, still):
        return quadratic.path(candidate, still, turning, hands)
    law = power.recognise(still)
    if law is not None and not turning:
        return power.path(candidate, still, law, hands)
    signs = {number < 0 for _, number in single.equation.stoichiometry if number}
    if signs != {True, False} if turning else True not in signs:
        return None  # nothing is used up: the extent has no end
    finer = extent.path(candidate, still, turning, hands, extent.fine)
    return extent.path(candidate, still, turning, hands, fallback=finer)


def is_quadratic(candidate: Candidate, step: Step) -> bool:
    """Whether the rate is a polynomial of degree <= 2 in the extent, whatever the numbers."""
    named = (*expressions.species(step.rate), *expressions.species(step.rate, initial=True))
    start = dict.fromkeys((*candidate.species, *named), 1.0)
    try:
        quadratic.polynomial(step, dict.fromkeys(expressions.names(step.rate), 1.0), start)
    except NotPolynomialError:
        return False
    return True
